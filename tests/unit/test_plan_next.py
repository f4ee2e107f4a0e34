"""The next level: what a draw would tell, the safety level, draw days, the action line."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime
from typing import Any

import numpy as np
import pytest

from pkcalc.dosing import Intake, Regimen
from pkcalc.estimate.result import Band
from pkcalc.plan import Today, nextlevel
from pkcalc.plan.nextlevel import Asked, Draw, action_line, expected_spread, feasible, next_level, spread_now
from pkcalc.plan.present import clocked
from pkcalc.site import no_site
from tests.unit.cases import PLAIN, plain
from tests.unit.planning import GOAL, SCALE, estimate, exact, plan, profile

MONDAY = datetime(2026, 4, 6, 10, 0)


def asked(est: Any = None, mg: float = 360.0, **changes: Any) -> Asked:
    est = est or estimate()
    whole = Asked(
        regimen=Regimen((Intake("extended-capsule", 21.0, mg),)),
        clock_known=True,
        words=f"{mg:g} mg",
        estimate=est,
        taken=est,
        now=Today(MONDAY, np.full(min(len(est.weights), 512), 8.0), "", (), 8.0),
        goal=GOAL,
        scale=SCALE,
        profile=profile(),
        site=no_site(),
        noise_log_sd=0.2,
        free=False,
    )
    return replace(whole, **changes)


def test_a_level_never_widens_and_a_bad_one_tells_nothing() -> None:
    random = np.random.default_rng(1)
    level = random.standard_normal(2000) * 0.5
    target = 1.5 * level + 0.2 * random.standard_normal(2000)
    w = np.full(2000, 1 / 2000)
    now = spread_now(target, w)
    spreads = [expected_spread(target, level, w, sd) for sd in (0.02, 0.1, 0.3, 1.0, 20.0)]
    assert spreads == sorted(spreads)
    assert spreads[-1] == pytest.approx(now, rel=0.01)
    assert spreads[-1] <= now
    # a perfect level leaves what it does not explain: 0.2
    assert spreads[0] == pytest.approx(0.2, rel=0.05)


def test_the_linear_normal_case_has_a_known_answer() -> None:
    """target = a x + e, y = x + n, all normal: Var(target | y) = a^2 s^2 n^2/(s^2 + n^2) + e^2."""
    random = np.random.default_rng(2)
    n = 200_000
    level = 0.5 * random.standard_normal(n)
    target = 2.0 * level + 0.3 * random.standard_normal(n)
    found = expected_spread(target, level, np.full(n, 1 / n), 0.25)
    known = np.sqrt(4 * 0.25 * 0.0625 / (0.25 + 0.0625) + 0.09)
    assert found == pytest.approx(known, rel=0.01)


def test_the_proposal_trades_delay_against_gain() -> None:
    found = next_level(asked())
    assert found is not None
    spreads = [d.spread for d in found.draws]
    best = min(spreads)
    first = next(d for d in found.draws if d.spread <= 1.1 * best)
    assert found.chosen == first
    assert found.chosen.day < found.draws[-1].day
    assert all(s < found.before for s in spreads)
    assert found.why[0].startswith(f"A level on day {found.chosen.day:.2g}")


def test_the_expected_level_is_wider_than_the_forecast_and_on_the_laboratory_scale() -> None:
    found = next_level(asked(scale=replace(SCALE, total_factor=0.68)))
    assert found is not None
    for d in found.draws:
        assert d.expected.low < d.expected.median < d.expected.high
        assert d.reported.high == pytest.approx(0.68 * d.expected.high)
    (one,) = [next_level(asked(exact()))]
    assert one is not None
    # nothing but the spread of a level itself is left: e^(1.645 x 0.2)
    assert one.chosen.expected.high / one.chosen.expected.median == pytest.approx(np.exp(1.645 * 0.2), rel=0.05)


def test_an_early_safety_level_where_accumulation_is_possible() -> None:
    risky = next_level(asked(mg=420.0))
    assert risky is not None
    assert risky.safety is not None
    assert 2.0 <= risky.safety.day < risky.chosen.day
    assert risky.safety_action.startswith("On 8 Apr before the 21:00 dose; above ")
    assert any(w.startswith("Accumulation is possible (every dose taken, ") for w in risky.why)
    tame = next_level(asked(exact(), mg=200.0))
    assert tame is not None
    assert tame.safety is None
    assert tame.safety_action == ""


def test_the_day_from_which_a_level_means_what_it_seems() -> None:
    tame = next_level(asked(exact(), mg=300.0))
    assert tame is not None
    # 276 of 450 mg/day from 8 mg/L: the closed form of `formulas.time_to_fraction`
    assert tame.settled_days.median == pytest.approx(tame.meaningful_day)
    never = next_level(asked(exact(vmax=300.0), mg=360.0))
    assert never is not None
    assert never.meaningful_day == np.inf
    assert never.why[-1] == "No level on this regimen can be read as a steady one: it would go on rising."


def test_only_the_laboratorys_draw_days() -> None:
    weekdays = ("Tue", "Fri")
    found = feasible(asked(site=replace(no_site(), draw_days=weekdays)))
    assert {m.strftime("%a") for _, m in found if m is not None} == set(weekdays)
    assert all(m.hour == 21 for _, m in found if m is not None)
    everyday = feasible(asked())
    assert len(everyday) == 14
    assert everyday[0][0] == pytest.approx(1 + 11 / 24)  # Tuesday 21:00 from Monday 10:00


def test_without_a_clock_days_are_counted() -> None:
    found = next_level(asked(now=replace(asked().now, moment=None)))
    assert found is not None
    assert found.action.startswith(f"On day {found.chosen.day:.2g} before the dose; above ")


@pytest.mark.parametrize(
    ("changes", "rising", "line"),
    [
        ({}, True, "On 12 Apr before the 21:00 dose; above 14.2 mg/L as reported (total level) means rising faster than forecast: call."),
        ({"free": True}, True, "On 12 Apr before the 21:00 dose; above 14.2 mg/L as reported (free level) means rising faster than forecast: call."),
        ({"clock_known": False}, True, "On 12 Apr before the dose; above 14.2 mg/L as reported (total level) means rising faster than forecast: call."),
        ({}, False, "On 12 Apr before the 21:00 dose; above 14.2 mg/L as reported (total level) means falling slower than forecast: call."),
    ],
)  # fmt: skip
def test_the_action_line(changes: dict[str, Any], rising: bool, line: str) -> None:
    draw = Draw(6.5, datetime(2026, 4, 12, 21, 0), 0.2, Band(10, 7, 14.2), Band(10, 7, 14.2))
    assert action_line(draw, asked(**changes), rising=rising) == line


def test_the_level_just_before_a_dose_comes_from_the_real_doses() -> None:
    """A year ahead in a patient known exactly, the draw is the trough of the plateau."""
    one = asked(exact(), mg=300.0, now=Today(MONDAY, np.full(8, 7.2), "", (), 7.2))
    days = [d for d, _ in feasible(one)]
    course = nextlevel._course(one, one.estimate, np.full(8, 7.2), days)
    assert course.shape == (8, 14)
    from pkcalc.plan.candidates import swing

    ((trough, peak),) = swing(one.estimate, [one.regimen], one.profile)
    assert course[0, -1] == pytest.approx(trough.median, rel=0.15)
    assert course[0, -1] < peak.median


def test_times_that_nobody_stated_are_not_named() -> None:
    every_8 = Regimen((Intake("extended-capsule", 0.0, 100.0),), cycle_h=8.0)
    timed, known = clocked(every_8, plain(doses=[], levels=[]))
    assert not known
    assert [x.hour for x in timed.intakes] == [0.0, 8.0, 16.0]
    timed, known = clocked(every_8, plain())  # the present doses are given at 21:00
    assert known
    assert [x.hour for x in timed.intakes] == [5.0, 13.0, 21.0]
    by_clock = Regimen((Intake("extended-capsule", 21.0, 300.0),))
    assert clocked(by_clock, plain()) == (by_clock, True)


def test_the_next_level_is_planned_for_what_was_chosen() -> None:
    own = {"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}
    chosen = plan(proposed=[own], chosen={"regimen": {**own, "amount": "300 mg"}}).next_level
    assert chosen is not None
    assert chosen.regimen_words.startswith("300 mg")
    first_own = plan(proposed=[own]).next_level
    assert first_own is not None
    assert first_own.regimen_words.startswith("330 mg")
    present = plan().next_level
    assert present is not None
    assert present.regimen_words.startswith("350 mg")
    nothing = plan(doses=[], levels=[])
    assert nothing.no_next_level == "No regimen is given, chosen or proposed, so no next level can be planned."


def test_no_draw_day_in_reach() -> None:
    never = plan(replace(no_site(), draw_days=()))
    assert never.next_level is None
    assert never.no_next_level == "No draw day of the laboratory falls within the next two weeks."
    assert PLAIN["now"] == "2026-12-01 10:00"
