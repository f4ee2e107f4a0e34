"""A drug followed by the hour: volumes of a named product, dialysis, running infusions, the hours to come."""

from __future__ import annotations

import json
import math
from typing import Any

import pytest

from pkcalc.consult import Consult, run_consult
from pkcalc.drugs.profile import load_profile, parse_profile
from pkcalc.errors import CaseError, DrugFileError
from pkcalc.given import given_record
from pkcalc.note import data as note_data
from pkcalc.note import document, text
from tests.unit.cases import plain
from tests.unit.drug_cases import ETHANOL, SESSION, dose, ethanol

LISTED = (
    "infusion-10-vv (78.9 mg of ethanol in 1 mL (10 % v/v)); infusion-10-wv (100 mg of ethanol in 1 mL (10 % w/v)); "
    "infusion-5-vv (39.45 mg of ethanol in 1 mL (5 % v/v)); infusion-5-wv (50 mg of ethanol in 1 mL (5 % w/v))"
)


def refusals(**changes: Any) -> list[str]:
    with pytest.raises(CaseError) as caught:
        ethanol(**changes)
    return [p.text for p in caught.value.problems]


def ids(consult: Consult) -> set[str]:
    return {c.id for c in consult.cautions}


def note_text(consult: Consult) -> str:
    return " ".join(text.render(document.compose(consult)).split())


# strengths ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("product", "mg"), [("infusion-10-vv", 78.9), ("infusion-10-wv", 100.0)])
def test_a_volume_counts_by_the_product_that_was_named(product: str, mg: float) -> None:
    lines = dose(0, product=product)
    lines[1]["product"] = product
    case = ethanol(doses=lines)
    load, infusion = case.courses
    assert load.single is not None
    assert load.single.labelled_mg == pytest.approx(665 * mg)
    assert infusion.rate_mg_per_day == pytest.approx(24 * 97 * mg)


def test_mL_need_the_product() -> None:
    """10 % alone can mean 78.9 or 100 mg/mL: nobody guesses."""
    assert refusals(doses=dose(0, product=None)) == [
        f"Dose line 1, amount: 665 mL was given without the product. Allowed: {LISTED}. "
        "Name the product as its label reads."
    ]
    assert refusals(doses=dose(1, product=None)) == [
        f"Dose line 2, rate: 97 mL/h was given without the product. Allowed: {LISTED}. "
        "Name the product as its label reads."
    ]
    assert refusals(doses=dose(1, product="infusion-10")) == [
        f'Dose line 2, rate: 97 mL/h was given of the product "infusion-10". Allowed: {LISTED}. '
        "Name the product as its label reads."
    ]
    assert refusals(proposed=[{"form": "infusion", "rate": "90 mL/h"}]) == [
        f"Proposed regimen 1, rate: 90 mL/h was given without the product. Allowed: {LISTED}. "
        "Name the product as its label reads."
    ]


def test_an_oral_product_is_not_infused() -> None:
    (problem,) = refusals(doses=dose(1, product="oral-40-vv"))
    assert problem.startswith('Dose line 2, rate: 97 mL/h was given of the product "oral-40-vv". Allowed: infusion-10')


def test_a_form_without_liquids_takes_no_mL() -> None:
    with pytest.raises(CaseError) as caught:
        plain(doses=[{"form": "chewable-tablet", "amount": "5 mL", "every": "12 h", "from": "2026-08-20 21:00"}])
    assert str(caught.value).replace(" (line 1)", "") == (
        "Dose line 1, amount: 5 mL was given without the product. Allowed: amounts in mg only for this form. "
        "Give the amount in mg."
    )


def test_a_load_of_liters_is_a_slip() -> None:
    assert refusals(doses=dose(0, amount="6650 mL")) == [
        "Dose line 1, amount: 6650 mL was given. Allowed: above 0 and up to 120,000 mg in one dose of ethanol into a "
        "vein. Check the number, its unit and the form."
    ]


def test_a_strength_that_does_not_fit_its_per_cent_is_refused() -> None:
    from importlib import resources

    file = resources.files("pkcalc.drugs").joinpath("ethanol.toml").read_text(encoding="utf-8")
    wrong = file.replace("value = 78.9, unit", "value = 100, unit", 1)
    with pytest.raises(DrugFileError) as caught:
        parse_profile(wrong, "ethanol.toml")
    assert str(caught.value) == (
        "ethanol.toml, product.infusion-10-vv.strength: 100 mg/mL, but 10 % v/v holds 78.9 mg/mL. Mend the strength, "
        "the per cent, or its basis."
    )
    with pytest.raises(DrugFileError) as caught:
        parse_profile(file.replace('strength_basis = "v/v"\n', "", 1), "ethanol.toml")
    assert str(caught.value) == (
        "ethanol.toml, product.infusion-10-vv.strength_basis: missing beside a strength in per cent. Write v/v or w/v."
    )
    density = next(line for line in file.splitlines() if line.startswith("density"))
    with pytest.raises(DrugFileError) as caught:
        parse_profile(file.replace(density, ""), "ethanol.toml")
    assert str(caught.value) == (
        "ethanol.toml, product.infusion-10-vv.percent: % v/v without the density of the drug. Add drug.density."
    )


def test_v_v_and_w_v_never_stand_on_one_shelf() -> None:
    profile = load_profile("ethanol")
    for shelf in profile.shelves.values():
        assert len({profile.products[p].strength_basis for p in shelf.products}) == 1, shelf.id
    assert len({p.strength_words for p in profile.products.values()}) == len(profile.products)


# dialysis and running infusions ---------------------------------------------------------------------------


def test_a_session_becomes_a_path_of_the_record() -> None:
    case = ethanol(dialysis=[SESSION, {"from": "2026-06-02 13:05"}])
    stated, open_end = case.dialysis
    assert (stated.clearance_L_per_day, stated.assumed) == (pytest.approx(140 * 1.44), False)
    assert (open_end.clearance_L_per_day, open_end.assumed, open_end.end) == (pytest.approx(120 * 1.44), True, None)
    first, second = given_record(case, load_profile("ethanol")).first_order
    assert (first.start_day, first.end_day) == (pytest.approx(5 / 24), pytest.approx(9 / 24))
    assert math.isinf(second.end_day)


@pytest.mark.parametrize(
    ("session", "message"),
    [
        (
            {**SESSION, "until": "2026-06-02 12:00"},
            "Dialysis session 1: it ends (2 Jun 2026 12:00) before or when it starts (2 Jun 2026 13:00). Allowed: an end "
            "after the start. Check both times.",
        ),
        (
            {**SESSION, "clearance": "500 mL/min"},
            "Dialysis session 1, clearance: 500 mL/min was given. Allowed: 10 to 400 mL/min (both ends count). Give the "
            "clearance of this drug, not the blood flow.",
        ),
        (
            {**SESSION, "clearance": "140"},
            "Dialysis session 1, clearance: no unit was given. Allowed: mL/min or L/h. Give one of these units.",
        ),
    ],
)
def test_a_session_that_cannot_be_is_refused(session: dict[str, str], message: str) -> None:
    assert refusals(dialysis=[session]) == [message]


def test_sessions_and_the_answer_no_contradict_each_other() -> None:
    assert refusals(dialysis=[SESSION], context=ETHANOL["context"]) == [
        "Context, extracorporeal: no was answered although dialysis sessions are given. Allowed: yes, or no session. "
        "Correct one of them."
    ]


def test_a_session_needs_a_start() -> None:
    (problem,) = refusals(dialysis=[{"until": "2026-06-02 17:00"}])
    assert problem.startswith("Dialysis session 1, from")
    assert "it is missing" in problem


def test_dialysis_of_a_drug_without_a_known_clearance_is_refused() -> None:
    with pytest.raises(CaseError) as caught:
        plain(dialysis=[{"from": "2026-11-01 08:00"}])
    assert str(caught.value).replace(" (line 1)", "") == (
        "Dialysis session 1: a session was given for phenytoin. Allowed: no session: the drug file holds no clearance by "
        "dialysis. Remove it and go by measured levels."
    )


def test_an_infusion_may_still_run_but_needs_its_start() -> None:
    case = ethanol()
    assert case.courses[1].end is None
    given = given_record(case, load_profile("ethanol"))
    hours = 24 * (case.day(case.now) - case.day(case.courses[1].start)) + 1 / 60  # type: ignore[arg-type]
    assert given.doses[1].amount_mg == pytest.approx(97 * 78.9 * hours)
    assert refusals(doses=dose(1, **{"from": None})) == [
        "Dose line 2: an infusion was given without its start. Allowed: from, and until once it has ended. Add the clock "
        "time."
    ]


def test_a_rate_and_doses_are_not_proposed_together() -> None:
    both = {"form": "infusion", "rate": "7 g/h", "amount": "7 g", "every": "1 h"}
    assert refusals(proposed=[both]) == [
        "Proposed regimen 1: a rate and doses were both given. Allowed: one of the two. Remove one of them."
    ]


def test_levels_during_the_infusion_count_and_too_soon_after_a_load_they_do_not() -> None:
    consult = run_consult(ethanol())
    assert [o.set_aside for o in consult.observations] == ["", ""]
    early = [{"value": "150 mg/dL", "kind": "total", "drawn": "2026-06-02 08:30"}]
    (o,) = run_consult(ethanol(levels=early)).observations
    assert o.set_aside == "it was drawn too early after a dose to stand for the level in the body"


# the hours to come ----------------------------------------------------------------------------------------


def test_before_any_level_the_population_speaks_and_the_load_is_the_guidelines() -> None:
    """1,250 mg/L in 0.6 L/kg are 750 mg/kg: 52.5 g at 70 kg, 665 mL of 10 % v/v."""
    consult = run_consult(
        ethanol(
            levels=None, doses=None, proposed=[{"form": "infusion", "product": "infusion-10-vv", "rate": "97 mL/h"}]
        )
    )
    found = consult.projection
    assert found is not None
    assert not consult.stopped
    assert consult.chosen_why == "the population alone: no level could be learned from yet"
    assert found.now.median == 0
    assert found.load is not None
    assert found.load.mg.median == pytest.approx(52_500, rel=0.01)
    ((product, mL),) = found.load.mL
    assert (product.id, mL) == ("infusion-10-vv", pytest.approx(665, rel=0.01))
    assert found.guideline_mg == (pytest.approx(42_000), pytest.approx(56_000))
    (hold,) = found.holds
    assert hold.mg.median == pytest.approx(70 * 125 * 1250 / 1388, rel=0.02)


def test_levels_narrow_the_rate_and_move_it_to_the_patient() -> None:
    before = run_consult(ethanol(levels=None)).projection
    after = run_consult(ethanol()).projection
    assert before is not None
    assert after is not None
    widths = [p.holds[0].mg.high / p.holds[0].mg.low for p in (before, after)]
    assert widths[1] < 0.8 * widths[0]


def test_without_a_product_no_volume_is_told() -> None:
    lines = dose(0, product=None, amount="52.5 g")
    lines[1].pop("product")
    lines[1]["rate"] = "7.65 g/h"
    found = run_consult(ethanol(doses=lines)).projection
    assert found is not None
    assert [h.mL for h in found.holds] == [()]
    assert found.choose.startswith("No volume is given: first choose the product as its label reads (ethanol 10 % v/v")
    chosen = run_consult(ethanol(doses=lines, plan={"shelf": "weight-in-volume"})).projection
    assert chosen is not None
    assert {p.strength_basis for p, _ in chosen.holds[0].mL} == {"w/v"}


def test_dialysis_needs_its_clearance_times_the_aim_on_top() -> None:
    consult = run_consult(ethanol(dialysis=[SESSION]))
    found = consult.projection
    assert found is not None
    without, during = found.holds
    assert during.mg.median - without.mg.median == pytest.approx(140 * 60 / 1000 * 1250, rel=1e-6)
    now = found.paths[0]
    falling = [m.level.median for m in now.moments if m.hours <= 3]
    assert falling == sorted(falling, reverse=True)
    assert falling[-1] < 0.7 * found.now.median
    assert {"dialysis-running"} <= ids(consult)
    assert not {"dialysis-clearance", "extracorporeal"} & ids(consult)
    assert found.next_level_h == 1
    assert "dialysis is running" in found.next_why
    assumed = run_consult(ethanol(dialysis=[{"from": "2026-06-02 13:00"}]))
    (said,) = [c.text for c in assumed.cautions if c.id == "dialysis-clearance"]
    assert said == (
        "No clearance of the dialysis was given: 120 mL/min was taken, from memory; published practice spans 100 to 240 "
        "mL/min. Ask the dialysis unit, and let a level after 1 h decide."
    )
    assert "dialysis-running" not in ids(run_consult(ethanol()))


def test_a_rate_above_vmax_climbs_for_as_long_as_it_runs() -> None:
    fast = [{"form": "infusion", "product": "infusion-10-vv", "rate": "250 mL/h"}]
    consult = run_consult(ethanol(proposed=fast))
    found = consult.projection
    assert found is not None
    path = found.paths[1]
    assert path.climb_mg_per_L_per_h is not None
    assert math.isinf(path.steady.median)
    levels = [m.level.median for m in path.moments]
    assert levels == sorted(levels)
    rise = (levels[-1] - levels[-2]) / (path.moments[-1].hours - path.moments[-2].hours)
    assert rise == pytest.approx(path.climb_mg_per_L_per_h, rel=0.15)
    assert {"level-climbs", "projected-too-high-later"} <= ids(consult)
    slow = run_consult(ethanol(proposed=[{"form": "infusion", "product": "infusion-10-vv", "rate": "80 mL/h"}]))
    assert not {"level-climbs", "projected-too-high", "projected-too-high-later"} & ids(slow)


def test_a_critical_level_before_the_next_one_is_stopped() -> None:
    wild = [{"form": "infusion", "product": "infusion-10-vv", "rate": "1100 mL/h"}]
    consult = run_consult(ethanol(proposed=wild))
    (stop,) = [c for c in consult.cautions if c.id == "projected-too-high"]
    assert stop.blocks == ("this regimen",)
    assert stop.text.startswith(
        "1100 mL/h ethanol 10 % v/v for infusion: the chance of a level above 3,000 mg/L within 1 h"
    )
    assert stop.text.endswith("above the limit of 10 %. Not offered.")


def test_a_level_that_was_drunk_is_where_the_course_begins() -> None:
    """No dose is recorded: the population's elimination takes it from the measured level."""
    drunk = [{"value": "3 g/L", "kind": "total", "drawn": "2026-06-02 11:10"}]
    found = run_consult(ethanol(doses=None, levels=drunk)).projection
    assert found is not None
    assert found.started_from == "from Level 1, with the population's elimination since"
    fall = 2 * 70 * 125 * 3000 / 3138 / 42
    assert found.now.median == pytest.approx(3000 - fall, rel=0.03)
    assert found.load is None


def test_the_next_level_comes_early_only_for_a_reason() -> None:
    calm = run_consult(ethanol(target={"low": "600 mg/L", "high": "1900 mg/L"}, aim="1200 mg/L")).projection
    assert calm is not None
    assert (calm.next_level_h, calm.next_why) == (2, ())
    near = run_consult(ethanol(target={"low": "1050 mg/L", "high": "1500 mg/L"}, aim="1200 mg/L")).projection
    assert near is not None
    assert near.next_level_h == 1
    assert near.next_why[0].startswith("the chance of a level outside the target in 2 h is ")


@pytest.mark.parametrize(
    ("value", "told"), [("110 mg/dL", "mg/dL"), ("23.9 mmol/L", "mmol/L"), ("1.1 g/L", "g/L"), ("1100 mg/L", "mg/L")]
)
def test_every_unit_of_the_laboratory_is_read_and_told(value: str, told: str) -> None:
    levels = [{"value": value, "kind": "total", "drawn": "2026-06-02 13:00"}]
    consult = run_consult(ethanol(levels=levels))
    assert consult.observations[0].working_mg_per_L == pytest.approx(1100, rel=2e-3)
    said = note_text(consult)
    assert f" {told}" in said
    assert ("that is" in said.split("Level now")[1].split("As now")[0]) == (told != "mg/L")


def test_the_population_must_be_chosen() -> None:
    with pytest.raises(CaseError) as caught:
        run_consult(ethanol(population=None))
    assert str(caught.value) == (
        "Population: none was chosen. Allowed: non-drinker, average-drinker, chronic-drinker. Choose the one that fits."
    )


def test_without_a_weight_or_a_time_nothing_is_projected() -> None:
    for missing in ({"now": None}, {"patient": {"age": "44 years"}}):
        consult = run_consult(ethanol(**missing))
        assert consult.projection is None
        assert consult.stopped


def test_note_and_json_tell_hours_and_the_authority() -> None:
    consult = run_consult(ethanol(dialysis=[SESSION]))
    said = note_text(consult)
    assert "Glucose" not in said
    for words in (
        "Ethanol lowers glucose",
        "watch breathing and airway",
        "a toxicologist or the poison centre",
        "mg/h (90 % interval",
        "78.9 mg of ethanol in 1 mL (10 % v/v)",
        "Dialysis session 1: from 2 Jun 2026 13:00 to 2 Jun 2026 17:00, clearance 140 mL/min.",
    ):
        assert words in said, words
    data = json.loads(note_data.dumps(note_data.note_data(consult)))
    assert data["projection"]["next_level"]["in_h"] == 1
    assert {"active_mg_per_h", "moments", "climb_mg_per_L_per_h"} <= set(data["projection"]["paths"][0])
    assert ETHANOL["drug"] == data["drug"]


def test_a_first_load_without_a_level_says_that_nothing_was_measured() -> None:
    (said,) = [c.text for c in run_consult(ethanol(levels=None, doses=None)).cautions if c.id == "not-measured"]
    assert said == (
        "No level was measured: 0 mg/L now is only what the record says, and whoever swallowed a toxic alcohol may have "
        "drunk ethanol too. Measure ethanol before the load, or with it."
    )
    assert "not-measured" not in ids(run_consult(ethanol()))


@pytest.mark.parametrize(("weight", "most_g"), [("70 kg", 56.0), ("140 kg", 80.0)])
def test_a_load_is_never_above_what_is_published_or_allowed(weight: str, most_g: float) -> None:
    """Up to 1,500 mg/L would take 900 mg/kg: held at 800 mg/kg, and at 80 g."""
    patient = {"age": "44 years", "sex": "male", "weight": weight, "weight_basis": "measured"}
    found = run_consult(ethanol(levels=None, doses=None, aim="1500 mg/L", patient=patient)).projection
    assert found is not None
    assert found.load is not None
    assert found.load.mg.median == pytest.approx(1000 * most_g)
    assert found.load.words == f"held at {most_g:g} g, the most that is published or allowed"


def test_why_nothing_is_projected_stands_on_page_one() -> None:
    said = note_text(run_consult(ethanol(now=None)))
    assert (
        "No time of the consult is given. Without it nobody can tell where the level is now or how fast it moves. Give the "
        "time of the consult."
    ) in said.split("Annex")[0]
