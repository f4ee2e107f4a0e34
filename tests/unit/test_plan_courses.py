"""Trough, peak and named days of every regimen in one pass: against the engine, one regimen at a time."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from pkcalc import flow
from pkcalc.dosing import Intake, Regimen, flow_repeated
from pkcalc.forecast import TIME_DRAWS, fewer_draws, levels_on_days
from pkcalc.plan.candidates import as_regimen, candidates
from pkcalc.plan.courses import DAY_DRAWS, NAMED_DAYS, SWING_DRAWS, named_days, swing, with_courses
from pkcalc.plan.shelf import dispensable, oral
from tests.unit.planning import estimate, exact, plan, profile, setting

P = profile()

REGIMENS = {
    "once daily": Regimen((Intake("extended-capsule", 21.0, 300.0),)),
    "every 8 h": Regimen((Intake("extended-capsule", 0.0, 100.0),), cycle_h=8.0),
    "unequal": Regimen((Intake("extended-capsule", 8.0, 100.0), Intake("extended-capsule", 21.0, 200.0))),
    "two forms at once": Regimen((Intake("extended-capsule", 21.0, 200.0), Intake("chewable-tablet", 21.0, 75.0))),
    "alternate days": Regimen(
        (Intake("extended-capsule", 21.0, 200.0), Intake("extended-capsule", 45.0, 300.0)), cycle_h=48.0
    ),
    "pushed into a vein": Regimen((Intake("injection", 6.0, 150.0), Intake("injection", 18.0, 125.0))),
    "infused": Regimen((Intake("injection", 6.0, 150.0, over_h=1.0), Intake("injection", 18.0, 150.0, over_h=1.0))),
}


@pytest.mark.parametrize("regimen", REGIMENS.values(), ids=REGIMENS)
@pytest.mark.parametrize("km", [0.3, 2.0, 8.0, 40.0])
def test_as_the_engine_tells_it(regimen: Regimen, km: float) -> None:
    """Draw by draw, from far below the ceiling to within 1 % of it; swings and levels both."""
    rate = regimen.active_mg_per_day(P)
    for times in (1.01, 1.2, 3.0):
        ((low, steady, high),) = swing(exact(rate * times, km, 40.0), [regimen], P)
        state = flow.periodic(flow_repeated(regimen, P), rate * times, km * 40.0, accuracy="fine")
        # a trough of less than a laboratory can measure is told to two thousandths of a mg/L
        assert low.median == pytest.approx(state.trough_mg[0] / 40.0, rel=5e-3, abs=2e-3)
        assert high.median == pytest.approx(state.peak_mg[0] / 40.0, rel=2e-3)
        assert steady.median == pytest.approx(km / (times - 1.0))
        # the swing itself, not only the levels that it is a small part of
        engine = (state.peak_mg[0] - state.trough_mg[0]) / 40.0
        assert high.median - low.median == pytest.approx(engine, rel=0.01, abs=2e-3)


def test_many_at_once_are_what_each_is_alone() -> None:
    draws = estimate()
    together = swing(draws, list(REGIMENS.values()), P)
    for regimen, found in zip(REGIMENS.values(), together, strict=True):
        assert swing(draws, [regimen], P) == (found,)


def test_more_of_the_same_never_lowers_trough_or_peak() -> None:
    regimens = [Regimen((Intake("extended-capsule", 21.0, mg),)) for mg in (30.0, 100.0, 260.0, 300.0, 330.0, 400.0)]
    found = swing(estimate(), regimens, P)
    for less, more in pairwise(found):
        for a, b in zip(less, more, strict=True):
            assert (a.low, a.median, a.high) < (b.low, b.median, b.high)


def test_no_plateau_no_trough() -> None:
    ((low, steady, high),) = swing(exact(vmax=270.0), [REGIMENS["once daily"]], P)
    assert (low.median, steady.median, high.median) == (np.inf, np.inf, np.inf)


def test_a_km_of_next_to_nothing_is_followed_without_a_million_steps() -> None:
    """The level then follows the input: nothing between doses, and a peak no higher than one dose gives."""
    ((low, steady, high),) = swing(exact(vmax=600.0, km=1e-5), [REGIMENS["once daily"]], P)
    assert 0 <= low.median < 1e-6
    assert steady.median < 1e-4
    assert 0 < high.median < 276.0 / 49.0


def test_every_regimen_of_the_plan_has_trough_peak_and_named_days() -> None:
    found = plan(proposed=[{"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}])
    assert len(found.every) > 200
    for c in found.every:
        assert c.trough is not None
        assert c.peak is not None
        assert c.on_days is not None
        assert [d for d, _ in c.on_days] == list(NAMED_DAYS)
        f = c.forecast.steady
        for below, middle, above in (
            (c.trough.median, f.median, c.peak.median),
            (c.trough.low, f.low, c.peak.low),
            (c.trough.high, f.high, c.peak.high),
        ):
            assert below <= middle * (1 + 1e-9) <= above * (1 + 2e-9)
    assert {id(c) for c in found.table} <= {id(c) for c in found.every}


def test_more_drug_never_lowers_a_named_level() -> None:
    every = plan().every
    for k in range(len(NAMED_DAYS)):
        for edge in ("low", "median", "high"):
            levels = [getattr(c.on_days[k][1], edge) for c in every if c.on_days is not None]
            assert len(levels) == len(every)
            assert levels == sorted(levels)


def test_the_named_days_are_those_of_the_closed_form() -> None:
    """Fewer draws, taken from those that times use, so that today's level of each draw stays its own."""
    draws = estimate()
    whole = fewer_draws(draws, TIME_DRAWS)
    today = np.linspace(2.0, 30.0, TIME_DRAWS)
    few = fewer_draws(whole.estimate, DAY_DRAWS)
    rates = [100.0, 276.0, 460.0]
    assert named_days(draws, rates, today) == levels_on_days(few.estimate, rates, NAMED_DAYS, today[few.chosen])


def test_moved_to_the_steady_level_of_all_draws() -> None:
    """Trough and peak keep their distance from the steady level, in proportion, of the draws they come from."""
    s = setting()
    made = dispensable(P, oral(P.shelves["united-states"].products, P), largest_active_mg_per_day=300.0)
    every = candidates(made, (), s)
    (c,) = with_courses([every[-1]], s)
    ((low, steady, high),) = swing(s.central, [as_regimen(made[-1], P)], P)
    assert steady.median != c.forecast.steady.median
    assert c.trough is not None
    assert c.peak is not None
    assert c.trough.median == pytest.approx(low.median * c.forecast.steady.median / steady.median)
    assert c.peak.high == pytest.approx(high.high * c.forecast.steady.high / steady.high)
    assert len(s.central.weights) > SWING_DRAWS
