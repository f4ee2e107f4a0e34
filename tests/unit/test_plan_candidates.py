"""Regimens around the present one: two lines, dangers, limits, what is offered and why not."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from pkcalc import plan as planning
from pkcalc.dosing import Intake, Regimen
from pkcalc.forecast import forecast_rate, two_lines
from pkcalc.plan import Candidate
from pkcalc.plan.candidates import as_regimen, by_loss, candidates, danger
from pkcalc.plan.shelf import dispensable, oral
from pkcalc.site import no_site
from tests.unit.cases import PLAIN, plain
from tests.unit.planning import GOAL, SCALE, estimate, exact, plan, profile, setting

P = profile()
CAPSULES = tuple(p for p in P.shelves["united-states"].products if "capsule" in p)


def capsules(mg: float, hour: float = 21.0) -> Regimen:
    return Regimen((Intake("extended-capsule", hour, mg),))


def given(mg: float, *, present: bool = False, proposed: bool = False) -> tuple[Regimen, str, str, bool, bool]:
    return capsules(mg), f"{mg:g} mg", "", present, proposed


def one(mg: float, s: planning.Setting) -> Candidate:
    return candidates((), [given(mg)], s)[0]


# What is said of a regimen


def test_present_and_own_stand_among_the_others_by_daily_dose() -> None:
    found = plan(proposed=[{"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}])
    rates = [c.rate_mg_per_day for c in found.every]
    assert rates == sorted(rates)
    assert [c.present for c in found.every].count(True) == 1
    assert found.present is not None
    assert found.present in found.every
    assert found.present.change_percent == 0
    (own,) = found.own
    assert own.proposed
    assert own.change_percent == pytest.approx(100 * (330 / 350 - 1))
    assert own.dispense == "1 capsule of 30 mg and 1 capsule of 300 mg daily"
    assert found.present in found.table


def test_no_change_is_offered_like_any_other_choice() -> None:
    found = plan(doses=[{**PLAIN["doses"][0], "until": ""}], levels=[PLAIN["levels"][0]])
    assert found.present is not None
    assert found.present.offered
    assert found.present.why_not == ()


def test_without_a_shelf_only_present_and_own_are_shown() -> None:
    found = plan(plan={}, proposed=[{"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}])
    assert len(found.every) == 2
    assert found.lines[0].startswith("No shelf is chosen, so no regimens are listed.")


def test_a_merged_amount_keeps_the_present_words() -> None:
    """300 mg as three times 100 mg is what the patient takes; the simpler once daily does not push it out."""
    three = {**PLAIN["doses"][0], "amount": "100 mg", "every": "8 h", "until": ""}
    found = plan(doses=[three], levels=[PLAIN["levels"][0]])
    same = [c for c in found.every if c.rate_mg_per_day == pytest.approx(276)]
    assert [c.present for c in same] == [True]
    assert "every 8 h" in same[0].words


def test_no_volume_no_times_and_it_is_said() -> None:
    found = plan(patient={"age": "45 years", "sex": "female"})
    assert all(c.trough is None and c.peak is None and c.on_days is None for c in found.every)
    assert all(c.forecast.settle_days is None for c in found.every)
    assert found.loads == ()
    assert found.pause is None
    assert found.next_level is None
    assert found.overlay is None
    assert "Without a weight there is no volume, so no times, no course and no loads." in found.lines
    assert found.no_next_level == "No day can be named for the next level without a weight: there is no volume."


def test_doses_rise_through_the_day_in_the_engine_too() -> None:
    made = next(
        m
        for m in dispensable(P, oral(CAPSULES, P), largest_active_mg_per_day=552.0)
        if m.times_a_day == 2 and len(set(m.doses)) == 2
    )
    regimen = as_regimen(made, P)
    amounts = [x.labelled_mg for x in regimen.intakes]
    assert [x.hour for x in regimen.intakes] == [9.0, 21.0]
    assert amounts == sorted(amounts)
    assert regimen.active_mg_per_day(P) == pytest.approx(made.active_mg_per_day)


# Dangers and limits


def test_danger_is_the_safety_line_at_plateau() -> None:
    lines = two_lines(estimate(), 0.05, counted=False)
    s = setting(lines.central, taken=lines.taken)
    found = one(360.0, s)
    assert found.danger == forecast_rate(lines.taken, 331.2, GOAL, SCALE).above_critical
    assert found.danger > found.forecast.above_critical


def test_a_level_still_too_high_at_the_next_draw_counts() -> None:
    """A dose whose plateau is harmless does not undo a level of 45 mg/L within three days."""
    s = setting(exact(), start_mg_per_L=45.0)
    found = one(200.0, s)
    assert found.taken.above_critical == 0
    assert found.danger == 1.0
    assert found.why_not == (
        "The level is high today: at the next feasible draw, in 3 days, the chance of a level above 30 mg/L is still "
        "more than 99 %, above the limit of 10 %.",
    )
    assert float(danger(replace(s, draw_days=30.0), [184.0])[0]) == 0.0


def test_the_limits_of_the_site_are_used() -> None:
    draws = estimate()
    found = one(360.0, setting(draws))
    assert not found.offered
    relaxed = replace(no_site(), warn_chance=0.3, stop_chance=0.5)
    again = one(360.0, setting(draws, site=relaxed))
    assert again.offered
    assert not again.warned
    assert one(330.0, setting(draws, site=replace(no_site(), warn_chance=0.01))).warned


def test_every_reason_why_not_in_full() -> None:
    step = planning.StepLimit(46.0, 9.0, "published step rule: 50 mg/day", forecast_rate(exact(), 322.0, GOAL, SCALE))
    s = setting(
        exact(vmax=460.0),
        step=step,
        raising_refused="Observe dosing first.",
        refused="A stop on the data blocks regimens.",
        largest_mg_per_day=400.0,
    )
    assert one(490.0, s).why_not == (
        "A stop on the data blocks regimens.",
        "Taken in full, the chance of a level above 30 mg/L or of no steady state once settled is more than 99 %, above the "
        "limit of 10 %.",
        "450.8 mg/day of active drug is above the largest daily dose of 400 mg/day.",
        "Observe dosing first.",
        "The step of 175 mg/day of active drug is above the largest step of 46 mg/day (published step rule: 50 "
        "mg/day).",
    )


@pytest.mark.parametrize(
    ("level", "sodium_step"), [(5.0, 100), (6.9, 100), (7.0, 50), (11.9, 50), (12.0, 30), (25.0, 30)]
)
def test_the_published_step_rule_by_level(level: float, sodium_step: float) -> None:
    """100 mg/day below 7 mg/L, 50 from 7 to under 12, 30 from 12 (value from memory): upper bounds."""
    vmax = 276 * (1 + 5 / level)  # 300 mg sodium holds exactly this level
    now = planning.Today(None, np.full(8, level), "", (), level)
    found = planning.limits.step_limit(
        plain(),
        P,
        no_site(),
        now=now,
        present_mg_per_day=276.0,
        central=exact(vmax=vmax * (1 + 1e-12)),
        taken=exact(vmax=vmax * (1 + 1e-12)),
        goal=GOAL,
        scale=SCALE,
    )
    assert found is not None
    assert found.step_mg_per_day == pytest.approx(sodium_step * 0.92)


def test_a_level_on_its_way_up_allows_only_the_step_of_its_plateau() -> None:
    now = planning.Today(None, np.full(8, 6.0), "", (), 6.0)
    rising = exact(vmax=276 * (1 + 5 / 14.0))
    found = planning.limits.step_limit(
        plain(), P, no_site(), now=now, present_mg_per_day=276.0, central=rising, taken=rising, goal=GOAL, scale=SCALE
    )
    assert found is not None
    assert found.step_mg_per_day == pytest.approx(30 * 0.92)
    assert found.words == "published step rule: 30 mg/day of phenytoin sodium at a level of 14 mg/L"


def test_a_site_may_change_the_step_and_a_case_may_only_lower_it() -> None:
    site = replace(no_site(), largest_step_mg_per_day=60.0, file="ours.toml")
    assert plan(site).step.step_mg_per_day == pytest.approx(60 * 0.92)  # type: ignore[union-attr]
    lower = plan(site, plan={"shelf": "united-states", "largest_step": "25 mg/day"}).step
    assert lower is not None
    assert lower.step_mg_per_day == pytest.approx(25 * 0.92)
    assert lower.words == "asked for in the case: 25 mg/day of phenytoin sodium"
    higher = plan(plan={"shelf": "united-states", "largest_step": "90 mg/day"}).step
    assert higher is not None
    assert higher.step_mg_per_day == pytest.approx(30 * 0.92)


def test_nothing_above_the_step_is_offered_and_everything_below_may_be() -> None:
    found = plan(doses=[{**PLAIN["doses"][0], "until": ""}], levels=[PLAIN["levels"][0]])
    assert found.present is not None
    assert found.step is not None
    top = found.present.rate_mg_per_day + found.step.step_mg_per_day
    offered = [c for c in found.every if c.offered]
    assert offered
    assert max(c.rate_mg_per_day for c in offered) <= top * (1 + 1e-9)
    assert any(c.rate_mg_per_day > found.present.rate_mg_per_day for c in offered)


def test_children_have_their_own_largest_daily_dose() -> None:
    child = {"age": "12 years", "weight": "40 kg", "sex": "male"}
    assert planning.limits.largest_daily(plain(), P, no_site()) == pytest.approx(600 * 0.92)
    assert planning.limits.largest_daily(plain(patient=child), P, no_site()) == pytest.approx(300 * 0.92)


LOW: dict[str, Any] = {
    "doses": [{**PLAIN["doses"][0], "until": "", "given_by": "self"}],
    "levels": [{"value": "6 mg/L", "kind": "total", "drawn": "2026-03-30 07:00"}],
}


@pytest.mark.parametrize(
    ("answer", "given_by", "sentence"),
    [
        ("yes", "self", "whether the doses were taken is in doubt"),
        ("unknown", "self", "whether the doses were taken is not stated"),
        ("yes", "nurse", "whether the doses were taken is in doubt"),
        ("no", "self", ""),
        ("unknown", "nurse", ""),
    ],
)
def test_no_increase_from_a_low_level_in_doubt(answer: str, given_by: str, sentence: str) -> None:
    lines = [{**LOW["doses"][0], "given_by": given_by}]
    found = plan(**{**LOW, "doses": lines}, context={"adherence_doubtful": answer})
    assert found.present is not None
    higher = [c for c in found.every if c.rate_mg_per_day > found.present.rate_mg_per_day * 1.0001]
    assert higher
    if sentence:
        text = f"The level is below 10 mg/L and {sentence}: observe dosing and measure again before raising the dose."
        assert all(text in c.why_not and not c.offered for c in higher)
        assert text in found.lines
    else:
        assert any(c.offered for c in higher)


def test_doubt_does_not_forbid_an_increase_from_a_level_in_range() -> None:
    found = plan(**{**LOW, "levels": [{**LOW["levels"][0], "value": "11 mg/L"}]}, context={"adherence_doubtful": "yes"})
    assert found.setting.raising_refused == ""


def test_a_stop_on_the_data_leaves_the_dangers_and_offers_nothing() -> None:
    found = plan(stops=frozenset({"regimens", "loading", "next level"}))
    assert not any(c.offered for c in found.every)
    assert all(c.why_not[0] == "A stop on the data blocks regimens." for c in found.every)
    assert found.present is not None
    assert found.present.danger > 0
    assert found.loads == ()
    assert found.switches == ()
    assert found.next_level is None
    assert found.no_next_level == "A stop blocks the next level."


def test_own_regimens_show_their_danger_where_they_are_not_offered() -> None:
    found = plan(proposed=[{"form": "extended-capsule", "amount": "500 mg", "every": "24 h"}])
    (own,) = found.own
    assert not own.offered
    assert own.danger > 0.9
    assert own.taken.no_steady_state > 0.5


def test_an_own_regimen_that_cannot_be_dispensed_is_not_offered() -> None:
    own = [{"form": "extended-capsule", "amount": "245 mg", "every": "24 h"}]
    (from_shelf,) = plan(proposed=own).own
    assert from_shelf.why_not == ("It cannot be made from the shelf in use.",)
    (no_shelf,) = plan(proposed=own, plan={}).own
    assert no_shelf.offered


def test_the_next_feasible_draw_keeps_to_the_laboratorys_days() -> None:
    """The plain case is on Tuesday 1 Dec 2026: three days on is Friday; with Mondays only, six days on."""
    assert plan().setting.draw_days == 3.0
    assert plan(replace(no_site(), draw_days=("Mon",))).setting.draw_days == 6.0


# Order and choice of rows


def test_the_order_by_loss_only_on_request_and_never_of_what_is_not_offered() -> None:
    assert plan().ranked == ()
    asked = plan(plan={"shelf": "united-states", "order_by_loss": True}).ranked
    assert asked
    losses = [c.loss for c in asked]
    assert losses == sorted(losses, key=lambda x: x or 0.0)
    assert all(c.offered for c in asked)


def test_loss_weighs_too_high_more() -> None:
    """One patient: 5 mg/L too low costs 5, 5 mg/L too high costs twice that by default."""
    one_patient = exact(vmax=400.0, km=5.0)
    low, high = 400 * 5 / 10, 400 * 25 / 30  # rates that hold 5 and 25 mg/L
    made = candidates((), [given(low / 0.92), given(high / 0.92)], setting(one_patient, present_mg_per_day=None))
    ranked = by_loss(made, setting(one_patient, present_mg_per_day=None))
    assert [(round(c.rate_mg_per_day), round(c.loss or 0, 9)) for c in ranked] == [(200, 5.0), (333, 10.0)]


def test_the_printed_rows_are_few_and_hold_present_and_offered() -> None:
    found = plan(doses=[{**PLAIN["doses"][0], "until": ""}], levels=[PLAIN["levels"][0]])
    assert len(found.table) <= 14
    assert found.present in found.table
    forms = {x.form for c in found.table for x in c.regimen.intakes}
    assert forms == {"extended-capsule"}
    assert sum(not c.offered for c in found.table) <= 4


def test_rows_of_three_doses_a_day_are_printed_only_beside_one_that_is_taken_so() -> None:
    twice = plan(doses=[{**PLAIN["doses"][0], "until": ""}], levels=[PLAIN["levels"][0]])
    assert max(c.dose_times for c in twice.every) >= 3
    assert max(c.dose_times for c in twice.table) <= 2
    three = plan(
        doses=[{**PLAIN["doses"][0], "amount": "", "every": "", "until": "", "daily": [
            {"time": t, "amount": "100 mg"} for t in ("06:00", "14:00", "22:00")
        ]}],
        levels=[PLAIN["levels"][0]],
    )  # fmt: skip
    assert max(c.dose_times for c in three.table) == 3


def test_two_own_regimens_are_laid_over_each_other_with_the_present_one() -> None:
    own = [{"form": "extended-capsule", "amount": f"{mg} mg", "every": "24 h"} for mg in (330, 350, 310, 290)]
    found = plan(proposed=own).overlay  # the present dose is 350 mg
    assert found is not None
    assert [words.split(" mg")[0] for words, _ in found.courses] == ["350", "330", "310"]


def test_two_regimens_laid_over_each_other() -> None:
    found = plan(proposed=[{"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}]).overlay
    assert found is not None
    assert [len(course) for _, course in found.courses] == [len(found.days)] * 2
    now, then = found.courses
    assert now[1][0] == then[1][0]  # both begin at today's level
    assert then[1][-1].median < now[1][-1].median
