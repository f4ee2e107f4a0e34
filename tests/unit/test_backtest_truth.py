"""A synthetic department of the population itself: what the back-test must find there."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from pkcalc.backtest.folder import open_folder
from pkcalc.backtest.outlook import PRIOR, WHOLE
from pkcalc.backtest.run import plan_of, run
from pkcalc.site import no_site

SITE = no_site()


@pytest.mark.slow
def test_a_department_of_the_population_is_covered_and_the_whole_record_wins(tmp_path: Path) -> None:
    """Known truth: the 90 % interval holds what it states within chance, and more knowledge forecasts better."""
    from scipy.stats import binom

    from pkcalc.backtest.department import Errors, write_department
    from pkcalc.backtest.report import findings

    write_department(tmp_path / "d", drug="phenytoin", count=24, seed=31, errors=Errors(wrong=0.0))
    found = open_folder(tmp_path / "d")
    outcome = run(found, tmp_path / "r", plan=replace(plan_of(found, "phenytoin", SITE), part=4), site=SITE)
    seen = findings(outcome.store, SITE)
    sums = seen.by_method[WHOLE].sums
    assert sums.rows == 48
    # levels of one patient go together: count half of them as independent
    inside, n = round(sums.mean(8).value * 24), 24
    assert min(binom.cdf(inside, n, 0.9), binom.sf(inside - 1, n, 0.9)) > 1e-3
    better = seen.against[(PRIOR, WHOLE)].mean(1)
    assert better.high is not None
    assert better.high < 0
