"""Synthetic departments of known truth: what the back-test must find there."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from pkcalc.backtest.accuracy import DIFFERENCE, HIGHER, IN50, IN90, Findings, Share, Sums
from pkcalc.backtest.department import Errors, ward_of, write_department
from pkcalc.backtest.folder import open_folder
from pkcalc.backtest.outlook import METHODS, ONE, PRIOR, TWO, WHOLE
from pkcalc.backtest.report import findings, hints
from pkcalc.backtest.run import plan_of, run
from pkcalc.drugs.profile import load_profile
from pkcalc.site import no_site

SITE = no_site()


def found_in(
    path: Path,
    *,
    count: int,
    seed: int,
    levels: int,
    days: tuple[int, int],
    methods: tuple[str, ...] = METHODS,
    vmax_factor: float = 1.0,
) -> Findings:
    """What the back-test finds in a department without wrong entries."""
    ward = replace(ward_of(load_profile("phenytoin")), levels=levels, days_per_dose=days, vmax_factor=vmax_factor)
    write_department(path / "d", drug="phenytoin", count=count, seed=seed, ward=ward, errors=Errors(wrong=0.0))
    folder = open_folder(path / "d")
    outcome = run(folder, path / "r", plan=plan_of(folder, "phenytoin", SITE, methods=methods), site=SITE)
    assert outcome.complete
    return findings(outcome.store, SITE)


def agrees(share: Share, stated: float) -> bool:
    """Within three and a third standard errors between patients (a chance of 1 in 1,000 to be outside)."""
    assert share.low is not None
    assert share.high is not None
    return abs(share.value - stated) <= 3.3 * (share.high - share.low) / (2 * 1.96)


def nearer(sums: Sums) -> bool:
    """The second method's mean absolute error on the same levels is smaller, beyond its interval."""
    difference = sums.mean(DIFFERENCE)
    return difference.high is not None and difference.high < 0


def test_intervals_from_the_population_hold_what_they_state(tmp_path: Path) -> None:
    """One level each, 4 to 10 days after the first dose."""
    seen = found_in(tmp_path, count=150, seed=11, levels=1, days=(4, 10), methods=(PRIOR,))
    sums = seen.by_method[PRIOR].sums
    assert sums.rows >= 140
    assert set(seen.by_method) == {PRIOR}
    assert agrees(sums.share(IN90), 0.9)
    assert agrees(sums.share(IN50), 0.5)


@pytest.mark.parametrize(("vmax_factor", "off"), [(1.0, False), (0.7, True)])
def test_a_shifted_population_is_noticed_and_an_unshifted_one_is_not(
    tmp_path: Path, vmax_factor: float, off: bool
) -> None:
    seen = found_in(tmp_path, count=24, seed=5, levels=2, days=(8, 12), methods=(WHOLE,), vmax_factor=vmax_factor)
    (hint,) = hints(seen)
    assert ("Vmax" in hint.off) is off
    assert "Km" not in hint.off
    assert hint.vmax_ratio.low is not None
    assert hint.vmax_ratio.high is not None
    assert hint.vmax_ratio.low <= vmax_factor <= hint.vmax_ratio.high


@pytest.mark.slow
def test_intervals_hold_methods_rank_and_nothing_is_suggested(tmp_path: Path) -> None:
    """105 patients, 30 to 60 days on each of three doses, so that pairs of steady levels exist."""
    seen = found_in(tmp_path, count=105, seed=2027, levels=3, days=(30, 60))
    whole = seen.by_method[WHOLE].sums
    assert whole.rows >= 200
    for method in (PRIOR, ONE, WHOLE):
        sums = seen.by_method[method].sums
        assert agrees(sums.share(IN90), 0.9), method
        assert agrees(sums.share(IN50), 0.5), method
    assert agrees(whole.share(HIGHER), 0.5)
    # on the same levels: the population alone is furthest off, then the two-level formula; one level more is worth
    # less than the first, but never a loss
    assert seen.by_method[TWO].sums.rows >= 40
    assert nearer(seen.against[(PRIOR, ONE)])
    assert nearer(seen.against[(PRIOR, TWO)])
    assert nearer(seen.against[(PRIOR, WHOLE)])
    assert seen.against[(TWO, WHOLE)].mean(DIFFERENCE).value < 0
    assert seen.against[(ONE, TWO)].mean(DIFFERENCE).value > 0
    assert seen.against[(ONE, WHOLE)].mean(DIFFERENCE).value < 0
    (hint,) = hints(seen)
    assert hint.off == ()
