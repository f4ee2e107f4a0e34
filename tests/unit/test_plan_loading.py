"""Loads and top-ups: amount, ceilings, vials, infusion time, order line, exclusions, what follows."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from pkcalc import formulas
from pkcalc.consult import run_consult
from pkcalc.errors import CaseError
from pkcalc.note.document import compose
from pkcalc.note.text import render
from pkcalc.plan import loading
from pkcalc.plan.loading import Load
from pkcalc.site import no_site
from tests.unit import cases
from tests.unit.cases import PLAIN
from tests.unit.planning import estimate, exact, plan, profile

P = profile()
LOW: dict[str, Any] = {
    "patient": {"age": "45 years", "sex": "female", "weight": "70 kg", "height": "168 cm"},
    "doses": [{**PLAIN["doses"][0], "until": ""}],
    "levels": [{"value": "8 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"}],
    "context": {"recent_load": "no", "heart_block": "no"},
}


FORMS = ("injection", "fosphenytoin-injection", "extended-capsule")


def loads(site: Any = None, **changes: Any) -> dict[str, Load]:
    """The loads asked for; where the case asks for none, one with each of a few forms is asked for."""
    changes = {**LOW, **changes, "context": {**LOW["context"], **changes.get("context", {})}}
    est = changes.pop("est", exact(volume=49.0))
    wanted = [changes.pop("plan")] if "plan" in changes else [asked(f) for f in FORMS]
    return {load.form: load for p in wanted for load in plan(site, est, **changes, plan=p).loads}


def asked(form: str, **more: str) -> dict[str, Any]:
    return {"shelf": "united-states", "load": {"form": form, **more}}


def test_a_top_up_from_the_present_level() -> None:
    """70 kg, 0.7 L/kg, from 8 to 15 mg/L: 343 mg active, 372.8 mg of sodium salt (the published page: about 400)."""
    load = loads()["injection"]
    assert load.wanted_mg == pytest.approx(343 / 0.92)
    assert load.amount_mg == 375  # whole vials would be 350 or 400 mg, more than 5 % off: a measured volume
    assert load.active_mg == pytest.approx(375 * 0.92)


def test_salt_and_pe_are_told_apart() -> None:
    found = loads()
    assert (
        found["injection"].order[0].startswith("375 mg injection into a vein (phenytoin sodium): 7.5 mL of injection")
    )
    assert (
        found["fosphenytoin-injection"]
        .order[0]
        .startswith(
            "375 mg PE fosphenytoin injection into a vein (mg PE): 7.5 mL of fosphenytoin injection, 50 mg PE in 1 mL"
        )
    )
    assert " PE" not in found["injection"].order[0]


def test_a_load_from_nothing_to_the_aim() -> None:
    load = loads(levels=[], doses=[], plan=asked("injection", aim="20 mg/L"))["injection"]
    assert load.wanted_mg == pytest.approx(49 * 20 / 0.92)  # 1,065 mg
    assert load.amount_mg == 1050
    assert load.rise.median == pytest.approx(1050 * 0.92 / 49)
    # elimination while it runs is counted: a little below the rise
    assert 19 < load.after.median < load.rise.median


def test_the_complete_order_line() -> None:
    load = loads(levels=[], doses=[], plan=asked("injection", aim="20 mg/L", at="2026-12-01 12:00"))["injection"]
    assert load.order == (
        "1,050 mg injection into a vein (phenytoin sodium): 21 mL of injection, 50 mg in 1 mL (3 vials of 5 mL and 3 "
        "vials of 2 mL), in sodium chloride 0.9 % only, to a final volume of 105 to 210 mL (5 to 10 mg/mL), over at "
        "least 21 min (adults: at most 50 mg/min).",
        "In-line filter, 0.2 to 0.5 micron. Continuous ECG, blood pressure and breathing during the infusion and for "
        "an hour after it.",
        "Not in: sinus bradycardia, sino-atrial block, second- or third-degree heart block, Adams-Stokes syndrome.",
        "Watch for extravasation and purple glove syndrome: a large vein, flush before and after.",
        "Draw a level 2 h after the end, not earlier (begun at 1 Dec 2026 12:00: from 1 Dec 2026 14:21).",
    )
    assert load.offered


def test_the_ceiling_of_one_load() -> None:
    heavy = {"age": "45 years", "sex": "male", "weight": "120 kg", "height": "180 cm"}
    load = loads(levels=[], doses=[], patient=heavy, est=exact(volume=100.0), plan=asked("injection", aim="20 mg/L"))[
        "injection"
    ]
    assert load.wanted_mg == pytest.approx(100 * 20 / 0.92)
    assert load.amount_mg == 1500
    assert "Cut from 2,174 mg to the ceiling of 1,500 mg for one load (needs a local setting to exceed)." in load.notes
    site = replace(no_site(), largest_single_load_mg=1800.0)
    higher = loads(
        site, levels=[], doses=[], patient=heavy, est=exact(volume=100.0), plan=asked("injection", aim="20 mg/L")
    )["injection"]
    assert higher.amount_mg == 1800


def test_never_above_the_published_amount_per_kg() -> None:
    small = {"age": "45 years", "sex": "female", "weight": "40 kg", "height": "150 cm"}
    load = loads(levels=[], doses=[], patient=small, est=exact(volume=60.0), plan=asked("injection", aim="20 mg/L"))[
        "injection"
    ]
    assert load.amount_mg == 800  # 20 mg/kg; the formula wants 1,304 mg
    assert any(n.startswith("Cut from 1,304 mg to the ceiling of 800 mg") for n in load.notes)


@pytest.mark.parametrize(
    ("patient", "heart", "form", "minutes", "words"),
    [
        ({"age": "45 years"}, "no", "injection", 21, "adults: at most 50 mg/min"),
        ({"age": "70 years"}, "no", "injection", 42, "elderly or heart disease: at most 25 mg/min"),
        ({"age": "45 years"}, "yes", "injection", 42, "elderly or heart disease: at most 25 mg/min"),
        ({}, "no", "injection", 42, "elderly or heart disease: at most 25 mg/min"),
        ({"age": "45 years"}, "no", "fosphenytoin-injection", 8, "adults: at most 150 mg PE/min"),
        ({"age": "70 years"}, "no", "fosphenytoin-injection", 15, "elderly or heart disease: at most 75 mg PE/min"),
    ],
)
def test_the_infusion_time_by_age_and_risk(
    patient: dict[str, str], heart: str, form: str, minutes: float, words: str
) -> None:
    load = loads(
        levels=[],
        doses=[],
        patient={"sex": "female", "weight": "70 kg", "height": "168 cm", **patient},
        context={"heart_block": heart},
        plan=asked(form, aim="20 mg/L"),
    )[form]
    assert load.minutes == minutes
    # the cap that sets the rate, and no faster one beside it
    assert load.order[0].endswith(f"over at least {minutes} min ({words}).")


def test_a_child_has_the_slower_of_the_two_limits() -> None:
    """20 kg: 1 mg/kg/min is 20 mg/min, below the flat 50; fosphenytoin 2 mg PE/kg/min is 40 mg PE/min."""
    child = {"age": "6 years", "weight": "20 kg", "sex": "male"}
    case = {"levels": [], "doses": [], "patient": child, "est": exact(volume=14.0)}
    phenytoin = loads(**case, plan=asked("injection", aim="20 mg/L"))["injection"]
    assert phenytoin.amount_mg == 300
    assert phenytoin.minutes == 15
    fos = loads(**case, plan=asked("fosphenytoin-injection", aim="20 mg/L"))["fosphenytoin-injection"]
    assert fos.minutes == 8


def test_heart_block_takes_the_offer_away_and_leaves_the_numbers() -> None:
    load = loads(context={"heart_block": "yes"})["injection"]
    assert not load.offered
    assert load.why_not == (
        "Heart block, bradycardia or serious heart disease is answered yes. Contraindicated in sinus bradycardia, "
        "sino-atrial block, second- or third-degree heart block, Adams-Stokes syndrome: these must be excluded first.",
    )
    assert load.amount_mg > 0


def test_heart_disease_not_stated_is_said() -> None:
    load = loads(context={"heart_block": "unknown"})["injection"]
    assert load.offered
    assert (
        "Heart disease is not stated. With it, the slower rate holds (elderly or heart disease: at most 25 mg/min)."
        in load.notes
    )


@pytest.mark.parametrize(
    ("answers", "why"),
    [
        ({"renal_reduced": "yes"}, ("No load by mouth in renal disease.",)),
        ({"hepatic_failure": "yes"}, ("No load by mouth in hepatic disease.",)),
        (
            {"hepatic_failure": "unknown"},
            ("No load by mouth before hepatic disease is excluded. Does the patient have hepatic failure?",),
        ),
        ({}, ()),
    ],
)
def test_no_load_by_mouth_in_renal_or_hepatic_disease(answers: dict[str, str], why: tuple[str, ...]) -> None:
    load = loads(context=answers)["extended-capsule"]
    assert load.why_not == why
    assert load.offered == (not why)


def test_a_load_by_mouth_is_split() -> None:
    load = loads(levels=[], doses=[], plan=asked("extended-capsule", aim="20 mg/L"))["extended-capsule"]
    assert load.amount_mg == 1000  # the formula wants 1,065 mg; the published total is the most
    assert load.parts == ((0.0, 400.0), (2.0, 300.0), (4.0, 300.0))
    assert load.order[0] == (
        "1,000 mg extended capsules (phenytoin sodium) by mouth in 3 parts: 4 x 100 mg (400 mg) at once, then 3 x 100 "
        "mg (300 mg) after 2 h, then 3 x 100 mg (300 mg) after 4 h."
    )
    assert load.minutes is None
    assert load.draw_after_h == 24
    assert load.at_draw.median < load.rise.median  # a day of elimination


def test_the_level_after_a_load_by_mouth_waits_for_the_published_peak() -> None:
    load = loads(levels=[], doses=[], plan=asked("extended-capsule", aim="20 mg/L"))["extended-capsule"]
    assert load.notes[-1] == (
        "Published peaks of large single amounts: 8.4 h after 400 mg, 13.2 h after 800 mg, 31.5 h after 1,600 mg "
        "(volunteers, one single dose each; salt not stated). At once, 1,000 mg would peak after about 17.8 h, counted "
        "from the last part 21.8 h after the first: the level is drawn 24 h after the first part, and one drawn "
        "earlier is not the highest."
    )
    assert P.loading is not None
    assert P.loading.oral is not None
    assert P.large_oral is not None
    # an amount whose peak is later moves the draw with it; without published peaks the usual wait is all there is
    assert loading.oral_draw(P, P.loading.oral, ((0.0, 1600.0),))[0] == 32.0
    assert loading.oral_draw(P, P.loading.oral, ((0.0, 800.0), (2.0, 800.0)))[0] == 34.0
    assert loading.oral_draw(P, P.loading.oral, ((0.0, 300.0),)) == (
        24.0,
        "The level is drawn 24 h after the first part.",
    )
    unknown = replace(P, large_oral=None)
    assert loading.oral_draw(unknown, P.loading.oral, ((0.0, 1600.0),))[0] == 24.0


@pytest.mark.parametrize(
    ("amount", "parts"),
    [(100, (100,)), (400, (400,)), (500, (300, 200)), (870, (300, 300, 300)), (1000, (400, 300, 300)), (40, ())],
)
def test_parts_of_an_oral_load(amount: float, parts: tuple[float, ...]) -> None:
    assert P.loading is not None
    assert P.loading.oral is not None
    found = loading.split(amount, 100.0, total_mg=1000, at_once_mg=400, apart_h=2.0)
    assert tuple(mg for _, mg in found) == parts
    assert [h for h, _ in found] == [2.0 * k for k in range(len(parts))]


@pytest.mark.parametrize(
    ("amount", "ordered", "vials"),
    [
        (989, 1000, "4 vials of 5 mL"),
        (373, 375, "4 vials of 2 mL"),
        (212.7, 225, "1 vial of 5 mL"),
        (1260, 1250, "5 vials of 5 mL"),
        (60, 50, "1 vial of 2 mL"),
    ],
)
def test_rounding_to_vials(amount: float, ordered: float, vials: str) -> None:
    product = P.products["injection-50"]
    assert loading.round_to_vials(amount, product, 1500) == ordered
    assert loading.vial_words(ordered, product) == vials


def test_rounding_never_crosses_the_ceiling() -> None:
    product = P.products["injection-50"]
    for most in (500.0, 730.0, 1490.0):
        assert loading.round_to_vials(most, product, most) <= most


def test_a_load_in_the_last_three_days_comes_first() -> None:
    load = loads(context={"recent_load": "yes"})["injection"]
    assert load.why_not == ("A load or a dose into a vein was given in the last 72 h: measure before giving more.",)
    unsaid = loads(context={"recent_load": "unknown"})["injection"]
    assert unsaid.offered
    assert any(n.startswith("Not stated whether a load") for n in unsaid.notes)


def test_an_aim_far_too_high_is_not_offered() -> None:
    load = loads(est=estimate(), levels=[], doses=[], plan=asked("injection", aim="28 mg/L"))["injection"]
    assert not load.offered
    assert load.why_not[0].startswith("The chance of a level above 30 mg/L after it is ")


def test_what_follows_with_the_maintenance_dose() -> None:
    load = loads()["injection"]
    assert [d for d, _ in load.followed] == [1.0, 3.0, 7.0, 14.0]
    assert load.maintenance == "300 mg extended capsules (phenytoin sodium) daily"
    # from the level after the load down to the plateau of 300 mg: 5 x 276 / (450 - 276) = 7.93 mg/L
    levels = [load.at_draw.median, *(b.median for _, b in load.followed)]
    assert levels == sorted(levels, reverse=True)
    assert levels[-1] > 5 * 276 / (450 - 276)
    exactly = formulas.level_after(
        time_day=1 - 2 / 24,
        start_mg_per_L=load.at_draw.median,
        dose_rate_mg_per_day=276.0,
        vmax_mg_per_day=450.0,
        km_mg_per_L=5.0,
        volume_L=49.0,
    )
    assert load.followed[0][1].median == pytest.approx(float(exactly))


def test_maintenance_beside_a_load_is_one_that_may_be_given() -> None:
    """The pharmacist's own that may be offered, else the present dose; one that is not offered bears its mark."""
    far = {"form": "extended-capsule", "amount": "500 mg", "every": "24 h"}
    near = {**far, "amount": "330 mg"}
    present = "300 mg extended capsules (phenytoin sodium) daily"
    goes_on = "Maintenance goes on as well: {}; the load does not replace it."
    for proposed, words in (
        ([far, near], "330 mg extended capsules (phenytoin sodium) daily"),
        ([far], present),
        ([], present),
    ):
        load = loads(proposed=proposed)["injection"]
        assert load.maintenance == words
        assert goes_on.format(words) in load.order
    neither = loads(est=exact(vmax=290.0, volume=49.0), proposed=[far])["injection"]
    assert neither.maintenance == "500 mg extended capsules (phenytoin sodium) daily (NOT OFFERED)"
    fresh = loads(levels=[], doses=[])["injection"]
    assert not any("Maintenance" in x for x in fresh.order)


def test_the_rise_has_an_interval() -> None:
    load = loads(est=estimate())["injection"]
    assert load.rise.low < load.rise.median < load.rise.high
    draws = estimate().volume_L
    assert draws is not None
    assert load.rise.median == pytest.approx(float(np.median(load.active_mg / draws)), rel=0.03)


def test_loads_that_are_not_given_say_why() -> None:
    enough = plan(
        None, exact(), **{**LOW, "levels": [{**LOW["levels"][0], "value": "18 mg/L"}], "plan": asked("injection")}
    )
    assert enough.no_load == ("No load: the level today (18 mg/L) is not below the aim of 15 mg/L.",)
    nothing = plan(None, exact(), **{**LOW, "plan": asked("prompt-capsule")})
    assert nothing.no_load == (
        "No load of prompt-release capsules (phenytoin sodium): there is no such product on the shelf in use.",
    )
    weightless = plan(
        None, exact(volume=None), **{**LOW, "patient": {"age": "45 years", "sex": "female"}, "plan": asked("injection")}
    )
    assert weightless.no_load == ("No load can be worked out without a weight: there is no volume.",)
    in_range = plan(None, exact(), **{**LOW, "levels": [{**LOW["levels"][0], "value": "12 mg/L"}]})
    assert in_range.loads == ()
    assert in_range.no_load == ()


def test_no_load_into_a_muscle() -> None:
    """Of the plain injection a stop, whatever else is asked; of the prodrug a refusal: no load so was read."""
    asked_for = {"form": "injection", "route": "intramuscular"}
    consult = run_consult(cases.plain(plan={"shelf": "united-states", "load": asked_for}))
    (stop,) = [c for c in consult.cautions if c.id == "refused-route"]
    assert stop.severity == "stop"
    assert stop.text == (
        "A load of phenytoin sodium by the intramuscular route was asked for. Never into a muscle: uptake is erratic "
        "and goes on for weeks. Instead: into a vein, or by mouth where the patient can swallow; without a vein, "
        "fosphenytoin by the local protocol (never for status epilepticus by this way)."
    )
    assert "loading" in consult.blocked
    assert consult.plan is not None
    assert consult.plan.loads == ()
    assert stop.text in render(compose(consult)).replace("\n   ", " ")
    into_vein = run_consult(cases.plain(plan={"shelf": "united-states", "load": {**asked_for, "route": ""}}))
    assert "refused-route" not in {c.id for c in into_vein.cautions}
    said = (
        "No load of fosphenytoin into a muscle: how much is given so, in how many places and how much in each, is not "
        "in the drug file, because no source of it was read. Ask for a load into a vein or by mouth; where neither can "
        "be, follow the local protocol, and draw a level 4 h after the dose, not earlier.",
    )
    for load in (
        {"form": "fosphenytoin-intramuscular"},
        {"form": "fosphenytoin-injection", "route": "intramuscular"},
        {"form": "fosphenytoin", "route": "intramuscular"},
    ):
        found = plan(None, exact(), **{**LOW, "plan": {"shelf": "united-states", "load": load}})
        assert found.loads == ()
        assert found.no_load == said
    swallowed = {"form": "injection", "route": "oral"}
    assert plan(None, exact(), **{**LOW, "plan": {"shelf": "united-states", "load": swallowed}}).no_load == (
        "No load of injection into a vein (phenytoin sodium) by the oral route: this form is given by the intravenous "
        "route. Ask for a form that is given so, or leave the route out.",
    )


def test_a_route_that_nothing_is_given_by() -> None:
    with pytest.raises(CaseError) as refused:
        cases.plain(plan={"load": {"form": "injection", "route": "im"}})
    assert [p.text for p in refused.value.problems] == [
        'Plan, load, route (line 1): "im" was given. Allowed: feeding tube, intramuscular, intravenous, oral. Choose a route.'
    ]


SUSPENSION_UK = {"shelf": "united-kingdom", "load": {"form": "suspension", "aim": "20 mg/L"}}


def test_a_load_from_a_suspension_is_told_in_mL_with_its_concentration() -> None:
    """1,000 mg of capsules are 920 mg of acid, 400 mg of them 368 mg: no part and no total is above that."""
    load = loads(levels=[], doses=[], plan=asked("suspension", aim="20 mg/L"))["suspension"]
    assert load.wanted_mg == pytest.approx(980.0)
    assert load.amount_mg == 912.5
    assert load.parts == ((0.0, 312.5), (2.0, 300.0), (4.0, 300.0))
    assert load.active_mg == 912.5
    assert load.order[:2] == (
        "912.5 mg oral suspension (phenytoin acid) by mouth in 3 parts: 312.5 mg (12.5 mL) at once, then 300 mg (12 "
        "mL) after 2 h, then 300 mg (12 mL) after 4 h.",
        "Oral suspension, 125 mg in 5 mL: 125 mg of phenytoin (acid) in 5 mL, that is 25 mg in 1 mL.",
    )
    assert load.notes[1:3] == (
        "Cut to 920 mg, the largest load by mouth.",
        "The published load is of extended capsules (phenytoin sodium): at most 1,000 mg, 400 mg at a time. The same "
        "active drug is 920 mg of oral suspension (phenytoin acid), 368 mg at a time, and is not exceeded.",
    )
    assert load.offered
    weak = loads(levels=[], doses=[], plan=SUSPENSION_UK)["suspension"]
    assert weak.order[1] == "Oral suspension, 30 mg in 5 mL: 30 mg of phenytoin (acid) in 5 mL, that is 6 mg in 1 mL."
    assert weak.parts == ((0.0, 306.0), (2.0, 306.0), (4.0, 306.0))
    assert "306 mg (51 mL) at once" in weak.order[0]


@pytest.mark.parametrize("level", ["2 mg/L", "6 mg/L", "9 mg/L", "11 mg/L", "13 mg/L"])
@pytest.mark.parametrize("shelf", ["united-states", "united-kingdom"])
def test_every_part_of_a_suspension_load_can_be_measured(level: str, shelf: str) -> None:
    changes = {
        "levels": [{**LOW["levels"][0], "value": level}],
        "plan": {"shelf": shelf, "load": {"form": "suspension"}},
    }
    for load in loads(**changes, doses=[{**LOW["doses"][0], "amount": "100 mg"}]).values():
        product = P.products[load.product]
        for _, mg in load.parts:
            mL = mg / product.mg_per_unit
            assert mL == pytest.approx(round(2 * mL) / 2)
            assert 0 < mL <= 60
            assert mg <= 368 + 1e-9
        assert sum(mg for _, mg in load.parts) == load.amount_mg <= 920 + 1e-9
        assert abs(load.amount_mg - min(load.wanted_mg, 920)) <= product.mg_per_unit * 0.5 + 1e-9


def test_two_strengths_of_a_suspension_are_never_chosen_between() -> None:
    both = [P.products["suspension-125"], P.products["suspension-30"]]
    assert P.loading is not None
    assert P.loading.oral is not None
    assert loading._load_unit(both, P.loading.oral) is None
    assert loading._load_unit(both[:1], P.loading.oral) is both[0]


def test_chewable_tablets_keep_to_the_active_drug_of_the_published_load() -> None:
    load = loads(levels=[], doses=[], plan=asked("chewable-tablet", aim="20 mg/L"))["chewable-tablet"]
    assert load.parts == ((0.0, 300.0), (2.0, 300.0), (4.0, 300.0))
    assert load.active_mg <= 920
    assert "6 x 50 mg (300 mg) at once" in load.order[0]


def test_no_load_down_a_tube_is_offered() -> None:
    load = loads(levels=[], doses=[], context={"tube_feed": "yes"}, plan=asked("suspension", aim="20 mg/L"))[
        "suspension"
    ]
    assert not load.offered
    assert load.why_not == (
        "Tube fed: nobody can tell how much of a load given down the tube would be absorbed. Load into a vein, or ask "
        "the prescriber for another way.",
    )


def ward(level: float, measured: float, hours_ago: float = 3.0, **changes: Any) -> loading.Ward:
    """A ward whose record says one level and whose last measurement says another."""
    from datetime import datetime, timedelta

    from pkcalc.plan import Today
    from tests.unit.cases import plain
    from tests.unit.planning import GOAL

    moment = datetime(2026, 12, 1, 10, 0)
    case = plain(**{**LOW, **changes, "context": {**LOW["context"], **changes.get("context", {})}})
    now = Today(moment, np.full(8, level), "", (), measured, moment - timedelta(hours=hours_ago))
    shelf = P.shelves["united-states"].products
    return loading.Ward(case, P, no_site(), exact(), GOAL, now, shelf, 276.0, "300 mg daily")


def test_the_higher_of_record_and_fresh_measurement_is_topped_up() -> None:
    """A load from too low a level ends too high: 6 mg/L by the record, 9 mg/L measured three hours ago."""
    product = P.products["injection-50"]
    fresh = loading.into_vein(ward(6.0, 9.0), product, 15.0)
    assert fresh.from_mg_per_L == 9.0
    assert fresh.wanted_mg == pytest.approx(49 * 6 / 0.92)
    assert fresh.after.median == pytest.approx(9.0 + fresh.rise.median, rel=0.02)
    assert "Worked out from the measured 9 mg/L, which is above the course of the record (6 mg/L)." in fresh.notes
    lower = loading.into_vein(ward(9.0, 6.0), product, 15.0)
    assert lower.from_mg_per_L == 9.0
    old = loading.into_vein(ward(6.0, 9.0, hours_ago=30.0), product, 15.0)
    assert old.from_mg_per_L == 6.0


@pytest.mark.parametrize(("given_h_ago", "accounted"), [(12.0, True), (4.0, False), (100.0, False)])
def test_a_recent_load_in_the_record_with_a_level_after_it_is_accounted_for(
    given_h_ago: float, accounted: bool
) -> None:
    """The level was drawn three hours ago; the drug file asks for two hours after a dose into a vein."""
    from datetime import datetime, timedelta

    given = datetime(2026, 12, 1, 10, 0) - timedelta(hours=given_h_ago)
    dose = {"form": "injection", "amount": "1000 mg", "at": given.strftime("%Y-%m-%d %H:%M"), "over": "30 min"}
    one = ward(6.0, 6.0, doses=[dose], context={"recent_load": "yes"})
    load = loading.into_vein(one, P.products["injection-50"], 15.0)
    assert load.offered == accounted
    refusal = "A load or a dose into a vein was given in the last 72 h: measure before giving more."
    assert load.why_not == (() if accounted else (refusal,))
    said = "The load of the last 72 h stands in the record, and a level was drawn long enough after it."
    assert (said in load.notes) == accounted
