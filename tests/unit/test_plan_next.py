"""The next level: what a draw would tell, the safety level, draw days, the action line."""

from __future__ import annotations

from dataclasses import replace
from datetime import datetime, timedelta
from typing import Any

import numpy as np
import pytest

from pkcalc.dosing import Intake, Regimen
from pkcalc.estimate.result import Band
from pkcalc.plan import Today, nextlevel
from pkcalc.plan.courses import swing
from pkcalc.plan.nextlevel import Asked, Draw, action_line, expected_spread, feasible, next_level, spread_now
from pkcalc.plan.present import clocked
from pkcalc.record import Dose
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


UP, DOWN, MIXED = (True, True), (False, False), (False, True)


@pytest.mark.parametrize(
    ("changes", "rises", "line"),
    [
        ({}, UP, "On 12 Apr before the 21:00 dose; above 14.2 mg/L as reported (total level) means rising faster than forecast: call. Below 7 mg/L (rising slower than forecast), or seizures at any level: call."),
        ({"free": True, "scale": replace(SCALE, free_fraction=1.0)}, UP, "On 12 Apr before the 21:00 dose; above 14.2 mg/L as reported (free level) means rising faster than forecast: call. Below 7 mg/L (rising slower than forecast), or seizures at any level: call."),
        ({"clock_known": False}, UP, "On 12 Apr before the dose; above 14.2 mg/L as reported (total level) means rising faster than forecast: call. Below 7 mg/L (rising slower than forecast), or seizures at any level: call."),
        ({}, DOWN, "On 12 Apr before the 21:00 dose; above 14.2 mg/L as reported (total level) means falling slower than forecast: call. Below 7 mg/L (falling faster than forecast), or seizures at any level: call."),
        ({}, MIXED, "On 12 Apr before the 21:00 dose; above 14.2 mg/L as reported (total level) is higher than forecast (past intake carried on it falls; every dose taken it rises): call. Below 7 mg/L (lower than forecast), or seizures at any level: call."),
    ],
)  # fmt: skip
def test_the_action_line(changes: dict[str, Any], rises: tuple[bool, bool], line: str) -> None:
    draw = Draw(6.5, datetime(2026, 4, 12, 21, 0), 0.2, Band(10, 7, 14.2), Band(10, 7, 14.2))
    found = action_line(draw, asked(**changes), rises=rises)
    assert found.words == line
    assert (found.high_mg_per_L_reported, found.low_mg_per_L_reported, found.high_from) == (14.2, 7, "forecast")


@pytest.mark.parametrize(
    ("scale", "free", "limit", "words"),
    [
        (SCALE, False, 30.0, "at or above 30 mg/L as reported (total level), the critical level: call."),
        (replace(SCALE, total_factor=0.629), False, 18.87, "at or above 18.8 mg/L as reported (total level), the critical level: call."),
        (SCALE, True, 3.0, "at or above 3 mg/L as reported (free level), the critical level: call."),
    ],
)  # fmt: skip
def test_the_action_line_is_never_above_the_critical_level_as_reported(
    scale: Any, free: bool, limit: float, words: str
) -> None:
    draw = Draw(6.5, datetime(2026, 4, 12, 21, 0), 0.2, Band(38, 20, 66), Band(38, 20, 66))
    found = action_line(draw, asked(scale=scale, free=free), rises=DOWN)
    assert found.high_mg_per_L_reported == pytest.approx(limit)
    assert found.high_from == "critical"
    assert found.words.startswith(f"On 12 Apr before the 21:00 dose; {words}")


def test_a_level_expected_below_the_target_asks_about_seizures() -> None:
    draw = Draw(6.5, datetime(2026, 4, 12, 21, 0), 0.2, Band(6, 3, 12), Band(6, 3, 12))
    assert action_line(draw, asked()).words.endswith(
        "or seizures at any level: call. Below 10 mg/L it is below the target: ask about seizures the same day."
    )


@pytest.mark.parametrize(
    ("level", "measured", "hours_ago"),
    [(38.0, 38.0, 3.0), (20.0, 31.0, 3.0)],
)
def test_a_toxic_level_is_followed_daily(level: float, measured: float, hours_ago: float) -> None:
    now = Today(MONDAY, np.full(512, level), "", (), measured, MONDAY - timedelta(hours=hours_ago))
    found = next_level(asked(now=now))
    assert found is not None
    assert found.none_because == (
        "No draw plan: the level today is at or above 30 mg/L, so levels are due daily until it has come down."
    )
    assert found.action == (
        "Levels daily, the first within 24 h, until one is at or below 20 mg/L as reported (total level). At or above "
        "30 mg/L, or not below the one before, or seizures: call."
    )
    assert found.safety is None
    old = replace(now, level_mg_per_L=np.full(512, 15.0), measured_at=MONDAY - timedelta(days=3))
    later = next_level(asked(now=old))
    assert later is not None
    assert later.none_because == ""


def test_no_draw_plan_for_a_regimen_that_is_not_offered() -> None:
    found = next_level(asked(refused="It is too much."))
    assert found is not None
    assert found.none_because == (
        "No draw plan: 360 mg is not offered. It is too much. Until the dose is changed, draw early."
    )
    assert found.chosen is found.draws[0]
    assert found.action.startswith("On 7 Apr before the 21:00 dose; ")


def test_the_direction_is_worded_by_both_lines() -> None:
    """From 8 mg/L on 276 mg/day: 450 mg/day of elimination ends at 7.9 mg/L, 400 at 11.1."""
    low, high = exact(vmax=450.0), exact(vmax=400.0)
    mixed = next_level(asked(low, mg=300.0, taken=high, now=Today(MONDAY, np.full(8, 8.0), "", (), 8.0)))
    assert mixed is not None
    assert "is higher than forecast (past intake carried on it falls; every dose taken it rises): call" in mixed.action
    up = next_level(asked(high, mg=300.0, now=Today(MONDAY, np.full(8, 8.0), "", (), 8.0)))
    assert up is not None
    assert "means rising faster than forecast: call" in up.action


def test_a_load_is_counted_in_and_both_branches_are_given() -> None:
    load = (Dose(0.05, 966.0, duration_day=0.015),)
    one = asked(exact(), mg=300.0, now=Today(MONDAY, np.full(8, 4.0), "", (), 4.0))
    both, given, without = (next_level(replace(one, **x)) for x in ({"load_asked": load}, {"load": load}, {}))
    assert both is not None
    assert given is not None
    assert without is not None
    assert given.draws[0].expected.median > without.draws[0].expected.median + 5
    assert both.action == without.action
    assert "rising faster than forecast" in both.action
    assert both.with_load == given.line
    assert ", the load counted in; " in given.action
    assert "falling slower than forecast" in given.action
    assert f"Where the load is given: {given.action}" in both.why
    assert without.with_load is None


@pytest.mark.parametrize("free_first", [True, False])
def test_free_and_total_of_one_sample_in_either_order(free_first: bool) -> None:
    drawn = {"drawn": "2026-12-01 07:00"}
    pair = [{"value": "1.2 mg/L", "kind": "free", **drawn}, {"value": "8 mg/L", "kind": "total", **drawn}]
    found = plan(None, exact(), levels=pair if free_first else pair[::-1])
    assert found.next_level is not None
    assert found.next_level.line.scale == "free"
    assert found.today.measured_mg_per_L == pytest.approx(12.0)


def test_a_refused_proposal_gives_way_to_the_present_regimen() -> None:
    found = plan(None, exact(vmax=450.0), proposed=[{"form": "extended-capsule", "amount": "600 mg", "every": "24 h"}])
    assert not found.own[0].offered
    assert found.present is not None
    assert found.present.offered
    assert found.next_level is not None
    assert found.next_level.regimen_words == found.present.words
    assert any(
        w.endswith(f"the next level is planned for the present {found.present.words}.") for w in found.next_level.why
    )


def test_the_level_just_before_a_dose_comes_from_the_real_doses() -> None:
    """A year ahead in a patient known exactly, the draw is the trough of the plateau."""
    one = asked(exact(), mg=300.0, now=Today(MONDAY, np.full(8, 7.2), "", (), 7.2))
    days = [d for d, _ in feasible(one)]
    course = nextlevel._course(one, one.estimate, np.full(8, 7.2), days)
    assert course.shape == (8, 14)
    ((trough, _, peak),) = swing(one.estimate, [one.regimen], one.profile)
    assert course[0, -1] == pytest.approx(trough.median, rel=0.15)
    assert course[0, -1] < peak.median


def test_no_line_is_drawn_where_a_level_cannot_be_told_from_nothing() -> None:
    """A lower bound of 0.6 mg/L says nothing that "below the target" does not say; seizures still call."""
    draw = Draw(10.0, MONDAY, 0.3, Band(4.8, 0.67, 15.5), Band(4.5, 0.6, 15.5))
    line = action_line(draw, asked())
    assert line.low_mg_per_L_reported is None
    assert line.words == (
        "On 6 Apr before the 10:00 dose; above 15.5 mg/L as reported (total level) means rising faster than forecast: "
        "call. Seizures at any level: call. Below 10 mg/L it is below the target: ask about seizures the same day."
    )
    own = action_line(draw, asked(site=replace(no_site(), quantification_limit_mg_per_L=0.5)))
    assert own.low_mg_per_L_reported == 0.6
    assert "Below 0.6 mg/L (rising slower than forecast), or seizures at any level: call." in own.words


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


def test_one_spread_is_said_in_one_way() -> None:
    found = next_level(asked())
    assert found is not None
    now, then = (f"{100 * x:.2g} %" for x in (found.before, found.chosen.spread))
    assert f"from a spread of {now} to {then} (standard deviation of its logarithm)" in found.why[0]
