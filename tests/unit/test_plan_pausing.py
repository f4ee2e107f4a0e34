"""A level that is too high, and a change of form."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from pkcalc import flow, formulas
from pkcalc.dosing import absorption_of
from pkcalc.estimate.result import Band
from pkcalc.plan import Today, pausing, switching
from pkcalc.plan.candidates import candidates, plainness
from pkcalc.plan.pausing import Pause, still_absorbing, time_to_fall
from pkcalc.plan.present import uptake_to_come
from pkcalc.plan.shelf import dispensable
from pkcalc.plan.switching import Switch
from pkcalc.record import Absorption, Dose, Record
from tests.unit.cases import PLAIN, plain
from tests.unit.planning import estimate, exact, plan, profile, setting

HIGH: dict[str, Any] = {
    "doses": [{**PLAIN["doses"][0], "amount": "400 mg", "until": ""}],
    "levels": [{"value": "34 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"}],
}


def pause(est: Any = None, **changes: Any) -> Pause:
    found = plan(None, est or exact(vmax=405.0), **{**HIGH, **changes}).pause
    assert found is not None
    return found


def test_the_seizure_risk_is_named_first() -> None:
    high = pause(levels=[{**HIGH["levels"][0], "value": "25 mg/L"}])
    assert high.risk == (
        "Stopping or pausing an antiseizure drug can bring on seizures, status epilepticus among them. Weigh that "
        "first; a partial reduction is the default, and a pause goes to a stated level in the upper range, never to "
        "zero."
    )
    assert high.first == "reduction"


@pytest.mark.parametrize(("level", "signs"), [("34 mg/L", "no"), ("25 mg/L", "yes")])
def test_a_pause_comes_first_for_a_toxic_level_or_toxic_signs(level: str, signs: str) -> None:
    found = pause(levels=[{**HIGH["levels"][0], "value": level}], context={"toxic_signs": signs})
    assert found.first == "pause"
    assert found.risk == (
        "Stopping or pausing an antiseizure drug can bring on seizures, status epilepticus among them. Weigh that "
        "first. Here the level is toxic or there are toxic signs: a pause to a stated level in the upper range comes "
        "first, never to zero; a smaller dose alone takes longer."
    )


def test_when_to_restart_is_one_line_and_the_day_read_is_not_the_day_of_restart() -> None:
    found = pause()
    days = found.days
    assert found.restart_days == days
    assert found.restart_line == (
        f"Restart when the level is down to 20 mg/L: about day {days.median:.2g} ({days.low:.2g} to {days.high:.2g}) "
        "of the pause."
    )
    for r in found.restarts:
        assert r.on_time_day == days.median
        assert r.early_day < r.on_time_day < r.late_day < r.day


def test_levels_too_low_to_mean_anything_have_no_digits() -> None:
    s = setting()
    assert pausing._quantified(Band(0.0724, 2.5e-7, 9.11), s) == "below 1 (below 1 to 9.11)"
    assert pausing._quantified(Band(0.07, 2.5e-7, 0.4), s) == "below 1"
    measured = replace(s, site=replace(s.site, quantification_limit_mg_per_L=2.5))
    assert pausing._quantified(Band(0.0724, 2.5e-7, 9.11), measured) == (
        "below quantification (below quantification to 9.11)"
    )


def test_a_reduction_that_may_never_get_down_is_not_shown_for_a_toxic_level() -> None:
    wide = estimate(vmax=405.0, spread=(0.2, 0.4, 0.15))
    found = pause(wide)
    assert all(np.isfinite(r.days.high) for r in found.reductions)
    assert all(r.offered or r.why_not for r in found.reductions)


def test_another_form_of_a_dose_that_is_too_much_is_not_offered() -> None:
    toxic = plan(None, exact(vmax=350.0), **HIGH)
    assert toxic.present is not None
    assert not toxic.present.offered
    assert toxic.switches
    for s in toxic.switches:
        assert not s.offered
        assert s.marks == ("NOT OFFERED",)
        assert s.why_not[0].startswith("Taken in full, the chance of a level above 30 mg/L")


def test_the_pause_is_the_closed_form() -> None:
    """V [(C0 - C) + Km ln(C0/C)] / Vmax, and the same by solve_ivp."""
    found = pause()
    closed = 49.0 * ((34 - 20) + 5 * np.log(34 / 20)) / 405.0
    assert found.to_mg_per_L == 20.0
    assert found.days.median == pytest.approx(closed, rel=1e-12)

    def fall(_t: float, c: Any) -> Any:
        return -405.0 / 49.0 * c / (5.0 + c)

    def down(_t: float, c: Any) -> float:
        return float(c[0] - 20.0)

    down.terminal = True  # type: ignore[attr-defined]
    solved = solve_ivp(fall, (0, 30), [34.0], method="DOP853", rtol=1e-12, atol=1e-12, events=down)
    assert found.days.median == pytest.approx(float(solved.t_events[0][0]), rel=1e-9)


def test_a_restart_level_may_be_asked_for() -> None:
    found = pause(plan={"shelf": "united-states", "restart_level": "18 mg/L"})
    assert found.to_mg_per_L == 18.0
    assert found.days.median > pause().days.median


def test_the_pause_has_an_interval() -> None:
    days = pause(estimate(vmax=405.0)).days
    assert 0 < days.low < days.median < days.high


def test_a_smaller_dose_comes_down_later_than_a_pause() -> None:
    found = pause()
    assert found.reductions
    percents = [r.percent for r in found.reductions]
    assert percents == sorted(percents, reverse=True)
    days = [r.days.median for r in found.reductions]
    assert days == sorted(days, reverse=True)
    assert min(days) > found.days.median
    assert all(r.steady.median < 20.0 for r in found.reductions)


def test_restart_too_early_is_high_and_too_late_is_low() -> None:
    found = pause()
    assert found.restarts
    for r in found.restarts:
        assert r.early.median > r.on_time.median > r.late.median
        assert r.lowest_late.median < found.to_mg_per_L
        assert 10.0 <= r.steady.median <= 20.0


def test_a_restart_is_never_more_than_the_present_dose() -> None:
    names = [r.words for r in pause().restarts]
    assert len(names) == len(set(names))
    assert not any("400 mg" in n for n in names)


def test_a_small_reduction_near_the_ceiling_is_said() -> None:
    (line,) = [x for x in pause().lines if x.startswith("Near the ceiling")]
    # 368 of 405 mg/day: 405 / 37 = 10.9
    assert line == (
        "Near the ceiling a small reduction can drop the level far: at the present dose 1 % less is about 11 % less "
        "level in the end."
    )


def test_the_drug_still_in_the_gut_is_counted() -> None:
    """1,200 mg by mouth an hour ago: what is still to be absorbed keeps the level up for longer."""
    slow = Absorption(ka_per_day=2.0, lag_day=0.0, release_day=0.5)
    now = Today(None, np.full(8, 34.0), "", (Dose(-1 / 24, 1104.0, absorption=slow),), 34.0)
    one = exact(vmax=405.0)
    start = np.full(8, 34.0)
    without = time_to_fall(one, start, 20.0)
    with_gut = still_absorbing(one, start, 20.0, now)
    assert (with_gut > without + 1.0).all()
    nothing = still_absorbing(one, start, 20.0, replace(now, still_absorbed=()))
    assert nothing == pytest.approx(without, abs=0.02)


def test_a_level_low_now_may_still_rise_from_the_gut() -> None:
    slow = Absorption(ka_per_day=6.0)
    now = Today(None, np.full(8, 15.0), "", (Dose(0.0, 1104.0, absorption=slow),), 15.0)
    one = exact(vmax=405.0)
    assert (time_to_fall(one, np.full(8, 15.0), 20.0) == 0).all()
    assert (still_absorbing(one, np.full(8, 15.0), 20.0, now) > 1.0).all()


def test_the_pause_and_its_restarts_count_what_is_absorbed_late() -> None:
    s = setting(exact(vmax=405.0), present_mg_per_day=368.0)
    dose = Dose(-0.05, 1104.0, absorption=Absorption(ka_per_day=4.0, release_day=0.2))
    now = Today(None, np.full(8, 34.0), "", (dose,), 34.0)
    capsules = [p for p in profile().shelves["united-states"].products if "capsule" in p]
    every = candidates(dispensable(profile(), capsules, largest_active_mg_per_day=552.0), (), s)
    found = pausing.pause(plain(**HIGH), now, s, every)
    assert found is not None
    assert found.with_absorption is not None
    assert found.with_absorption.median > found.days.median + 1.0
    assert found.restarts
    # "too late" is two days after the upper end of the pause, and the levels are told a day after that
    assert {r.day for r in found.restarts} == {found.with_absorption.high + 3.0}
    assert (
        "1,100 mg of active drug was taken so lately that part of it is still to be absorbed; the pause counts it in."
        in found.lines
    )


def test_no_pause_where_the_level_is_not_high() -> None:
    low = {**HIGH, "levels": [{**HIGH["levels"][0], "value": "15 mg/L"}]}
    assert plan(None, exact(vmax=405.0), **low).pause is None
    assert plan(None, exact(vmax=405.0, volume=None), **HIGH, patient={"age": "45 years"}).pause is None


# Switching


def switches(**changes: Any) -> dict[str, Switch]:
    lines = {"doses": [{**PLAIN["doses"][0], "amount": "400 mg", "until": ""}], "levels": [PLAIN["levels"][0]]}
    return {s.form: s for s in plan(None, exact(vmax=500.0), **{**lines, **changes}).switches}


def test_the_same_active_amount_in_another_form() -> None:
    """400 mg of the sodium salt is 368 mg of acid: 375 mg of suspension, 7.5 mL twice a day."""
    found = switches()
    suspension = found["suspension"]
    assert suspension.exact_labelled_mg == pytest.approx(368.0)
    assert suspension.words == "7.5 mL of oral suspension, 125 mg in 5 mL (187.5 mg) every 12 h"
    assert suspension.active_mg_per_day == pytest.approx(375.0)
    assert suspension.change_percent == pytest.approx(100 * (375 / 368 - 1))
    assert "extended-capsule" not in found
    vein = found["injection"]
    assert vein.words == "4 mL of injection, 50 mg in 1 mL (200 mg) every 12 h"
    assert vein.change_percent == pytest.approx(0, abs=1e-9)


def test_what_is_said_of_a_change_of_form() -> None:
    found = switches()
    assert found["suspension"].lines == (
        "Oral suspension, 125 mg in 5 mL: 125 mg of phenytoin (acid) in 5 mL, that is 25 mg in 1 mL.",
        "The same labelled amount of oral suspension (phenytoin acid) holds 8.7 % more active drug than of extended "
        "capsules (phenytoin sodium) (salt factors 1 and 0.92).",
        "How much reaches the body is uncertain (85 % to 100 %): measure again after the change.",
        "Down a feeding tube with running feeds much less may be absorbed: hold feeds around the dose, the same way "
        "every day, and measure again after any change of feeds.",
    )
    assert found["fosphenytoin-injection"].lines[-2:] == (
        "Amounts change from mg to mg PE: write the unit out.",
        "Of extended capsules (phenytoin sodium) 85 % to 100 % may have reached the body until now: the same amount of "
        "this form can give a higher level. Measure within days of the change.",
    )


def test_uncertain_bioavailability_has_two_ends() -> None:
    suspension = switches()["suspension"]
    assert suspension.steady_low_mg_per_L < suspension.steady_high_mg_per_L == suspension.steady.median
    low = formulas.steady_state_level(dose_rate_mg_per_day=0.85 * 375.0, vmax_mg_per_day=500.0, km_mg_per_L=5.0)
    assert suspension.steady_low_mg_per_L == pytest.approx(float(low))


def test_from_mouth_to_vein_the_level_may_rise_at_the_same_active_amount() -> None:
    """What was not absorbed by mouth arrives: 368 mg into a vein act like 368 / 0.85 mg by mouth."""
    vein = switches()["injection"]
    assert vein.steady_low_mg_per_L == vein.steady.median
    high = formulas.steady_state_level(dose_rate_mg_per_day=368.0 / 0.85, vmax_mg_per_day=500.0, km_mg_per_L=5.0)
    assert vein.steady_high_mg_per_L == pytest.approx(float(high))
    back = switches(
        doses=[{**PLAIN["doses"][0], "form": "injection", "amount": "200 mg", "every": "12 h", "until": ""}]
    )
    capsules = back["extended-capsule"]
    assert capsules.steady_low_mg_per_L < capsules.steady_high_mg_per_L == capsules.steady.median
    assert not any("until now" in x for x in capsules.lines)


def test_from_mouth_to_vein_an_amount_is_never_rounded_up() -> None:
    """330 mg a day: 350 mg would be nearer than 300 mg in 25 mg steps twice a day, and more than now."""
    found = switches(doses=[{**PLAIN["doses"][0], "amount": "330 mg", "until": ""}])
    for form in ("injection", "fosphenytoin-injection"):
        assert found[form].change_percent == pytest.approx(100 * (300 / 330 - 1))
    assert found["suspension"].active_mg_per_day == pytest.approx(300.0)
    up = switches(doses=[{**PLAIN["doses"][0], "form": "injection", "amount": "175 mg", "every": "12 h", "until": ""}])
    assert up["suspension"].change_percent > 0


def test_nothing_to_switch_from() -> None:
    assert switching.switches(plain(doses=[], levels=[]), setting(), ()) == ()
    assert profile().forms["suspension"].routes == ("oral", "feeding tube")


def test_the_own_regimen_is_among_the_restarts_where_it_fits() -> None:
    own = {"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}
    found = pause(exact(vmax=440.0), proposed=[own, {**own, "amount": "200 mg"}])
    assert found.restarts
    mine = [r for r in found.restarts if r.words.endswith("(proposed)")]
    # 5 x 303.6 / (440 - 303.6) = 11.1 mg/L fits the range; 184 mg/day would end at 3.6 mg/L and does not
    assert [r.words for r in mine] == ["1 capsule of 30 mg and 1 capsule of 300 mg daily (proposed)"]
    assert mine[0].steady.median == pytest.approx(11.13, abs=0.01)
    assert len(found.restarts) <= pausing.MOST_SHOWN + 1


def test_of_neighbours_the_one_with_fewer_capsules_is_shown() -> None:
    """330 mg as 300 and 30 mg rather than 320 mg as 200 mg and four of 30 mg."""
    s = setting(exact(vmax=440.0))
    capsules = [p for p in profile().shelves["united-states"].products if "capsule" in p]
    every = candidates(dispensable(profile(), capsules, largest_active_mg_per_day=552.0), (), s)
    by_mg = {round(c.rate_mg_per_day / 0.92): c for c in every}
    assert by_mg[320].units_a_day == 5
    assert by_mg[330].units_a_day == 2
    assert [c.units_a_day for c in pausing._spread_out([by_mg[320], by_mg[330]])][-1] == 2
    assert plainness(by_mg[330]) < plainness(by_mg[320])


# Large amounts swallowed at once

PROMPT, SLOW = (absorption_of(profile().forms[f]) for f in ("prompt-capsule", "extended-capsule"))


def swallowed(*doses: tuple[float, float, Absorption | None]) -> Record:
    """Doses as (hours ago, active mg, uptake) before day 10."""
    return Record(doses=tuple(Dose(10.0 - h / 24, mg, absorption=how) for h, mg, how in doses), start_day=0.0)


def test_the_published_peak_of_a_large_amount() -> None:
    published = profile().large_oral
    assert published is not None
    peaks = {mg: published.peak_h(mg) for mg in (399.0, 400.0, 600.0, 800.0, 1200.0, 1600.0, 4000.0)}
    assert peaks == {
        399.0: None,
        400.0: 8.4,
        600.0: pytest.approx(10.8),
        800.0: 13.2,
        1200.0: pytest.approx(22.35),
        1600.0: 31.5,
        4000.0: 31.5,
    }


@pytest.mark.parametrize(
    ("doses", "large"),
    [
        (((10.0, 1600.0, PROMPT),), [(10.0, 1600.0, 31.5)]),
        # three packets of capsules within the hour are one amount; an hour and a half later is another
        (((10.0, 400.0, PROMPT), (9.7, 400.0, SLOW), (9.1, 400.0, PROMPT)), [(10.0, 1200.0, 22.35)]),
        (((10.0, 600.0, PROMPT), (8.5, 600.0, PROMPT)), []),
        # a usual peak comes as late
        (((10.0, 400.0, SLOW),), []),
        # its published peak is over
        (((32.0, 1600.0, PROMPT),), []),
    ],
)
def test_what_counts_as_a_large_amount_at_once(
    doses: tuple[tuple[float, float, Absorption]], large: list[tuple[float, float, float]]
) -> None:
    _, found = uptake_to_come(swallowed(*doses), 10.0, profile())
    assert [(x.hours_ago, x.amount_mg, x.peak_h) for x in found] == [pytest.approx(x) for x in large]


def test_a_large_amount_is_released_until_its_published_peak() -> None:
    """The engine's level then is highest near the published time, where a usual uptake would put it hours earlier."""
    one = exact(vmax=450.0, km=5.0, volume=49.0)
    for mg, peak in ((800.0, 13.2), (1600.0, 31.5)):
        ((dose,), _) = uptake_to_come(swallowed((0.0, mg, PROMPT)), 10.0, profile())
        hours = np.arange(0.5, 60.0, 0.5)
        for how, low, high in ((dose, peak - 0.5, peak + 3.0), (replace(dose, absorption=PROMPT), 0.0, peak - 5.0)):
            course = flow.levels(
                Record(doses=(how,), start_day=0.0, start_mg=0.0),
                hours / 24,
                one.vmax_mg_per_day[:1],
                one.km_mg_per_L[:1],
                np.array([49.0]),
                start_mg_per_L=np.array([0.0]),
            )
            assert low <= hours[int(np.argmax(course[0]))] <= high


def test_a_usual_dose_is_taken_up_as_usual() -> None:
    (found, large) = uptake_to_come(swallowed((10.0, 300.0, SLOW), (60.0, 300.0, SLOW)), 10.0, profile())
    assert large == ()
    assert [(round(24 * d.time_day, 9), d.absorption) for d in found] == [(-10.0, SLOW)]


def test_the_pause_after_a_large_amount_is_longer_and_says_why() -> None:
    s = setting(exact(vmax=405.0), present_mg_per_day=368.0)
    doses, large = uptake_to_come(swallowed((5.0, 1600.0, SLOW)), 10.0, profile())
    usual = Dose(-5.0 / 24, 1600.0, absorption=SLOW)
    days = []
    for absorbed, said in ((doses, large), ((usual,), ())):
        now = Today(None, np.full(8, 34.0), "", absorbed, 34.0, large=said)
        found = pausing.pause(plain(**HIGH), now, s, ())
        assert found is not None
        assert found.with_absorption is not None
        days.append(found.with_absorption.median)
        lines = [x for x in found.lines if "Published peaks" in x]
        assert len(lines) == 1
        if said:
            assert found.large == large
            assert lines[0] == (
                "1,600 mg of active drug was swallowed at once 5 h ago. Published peaks of large single amounts: 8.4 h "
                "after 400 mg, 13.2 h after 800 mg, 31.5 h after 1,600 mg (volunteers, one single dose each; salt not "
                "stated). That puts the peak of this amount at about 31.5 h: the level may stay up or rise for 26.5 h "
                "more although nothing is given, and a level drawn before is not the highest. The pause counts that in."
            )
        else:
            assert lines[0].startswith("A usual dose peaks within 12 h. Published peaks of large single amounts: 8.4 h")
            assert lines[0].endswith(
                "After such an amount at once the level can stay up or rise although nothing is given."
            )
    assert days[0] > days[1]


def test_the_whole_path_from_a_large_dose_in_the_record() -> None:
    """1,600 mg at once by mistake last night on top of 300 mg daily: found in the record, told, and in JSON."""
    from pkcalc.consult import run_consult
    from pkcalc.note.data import note_data

    case = plain(
        now="2026-12-01 10:00",
        doses=[
            {**PLAIN["doses"][0], "from": "2026-10-01 21:00", "until": ""},
            {"form": "prompt-capsule", "amount": "1600 mg", "at": "2026-12-01 00:00", "given_by": "nurse"},
        ],
        levels=[{"value": "28 mg/L", "kind": "total", "drawn": "2026-12-01 09:00"}],
    )
    consult = run_consult(case)
    assert consult.plan is not None
    (large,) = consult.plan.today.large
    assert large.hours_ago == pytest.approx(10.0)
    assert large.amount_mg == pytest.approx(1600 * 0.92)
    data = note_data(consult)["plan"]
    assert data["pause"]["swallowed_at_once"] == [
        {"active_mg": 1472.0, "ago_h": 10.0, "published_peak_h": pytest.approx(large.peak_h, rel=1e-5)}
    ]
    assert any("swallowed at once 10 h ago" in x for x in data["pause"]["lines"])
    assert any("swallowed at once 10 h ago" in x for x in data["next_level"]["why"])


def test_where_the_shelf_has_not_the_present_form_another_one_is_restarted_with() -> None:
    own = {"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}
    found = pause(exact(vmax=440.0), proposed=[own], plan={"shelf": "united-kingdom"})
    words = [r.words for r in found.restarts]
    assert sum(w.endswith("(proposed)") for w in words) == 1
    assert len(words) > 1
    assert found.reductions
