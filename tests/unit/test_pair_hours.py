"""Two steady levels of a drug told by the hour: rates per hour in, everything per hour out."""

from __future__ import annotations

import json
import re
from typing import Any

import jsonschema
import pytest

from pkcalc.cli import case_of_pairs
from pkcalc.consult import Consult, run_consult
from pkcalc.errors import CaseError
from pkcalc.note import document, text
from pkcalc.note.data import note_data
from pkcalc.note.html import render_html
from pkcalc.note.schema import note_schema
from pkcalc.note.workings import workings

#: Vmax 10 g/h and Km 400 mg/L: 7 and 8 g/h settle at 400 x 7/3 = 933.33 and 400 x 8/2 = 1,600 mg/L.
LEVELS = ("933.333 mg/L", "1600 mg/L")


def typed(**changes: Any) -> Consult:
    given: dict[str, Any] = {
        "drug": "ethanol",
        "forms": ("infusion",),
        "doses": ("7 g/h", "8 g/h"),
        "levels": LEVELS,
        "kind": "total",
        "weight": "70 kg",
        "age": "40 years",
        "population": "average-drinker",
        **changes,
    }
    return run_consult(case_of_pairs(**given))


def refusals(**changes: Any) -> list[str]:
    with pytest.raises(CaseError) as caught:
        typed(**changes)
    return [p.text for p in caught.value.problems]


def note(consult: Consult) -> str:
    return " ".join(text.render(document.compose(consult)).split())


@pytest.mark.parametrize(
    "changes",
    [
        {},
        {"doses": ("7000 mg/h", "8000 mg/h")},
        {"doses": ("100 mg/kg/h", "8 g/h")},
        {"doses": ("168 g/day", "192 g/day")},
        {"doses": ("70 mL/h", "80 mL/h"), "product": "infusion-10-wv"},
        {"levels": ("93.3333 mg/dL", "1.6 g/L")},
    ],
)
def test_every_way_to_type_a_rate_gives_the_same_pair(changes: dict[str, Any]) -> None:
    """By hand: (8 - 7) / (7/0.93333 - 8/1.6) = 0.4 g/L; 7 + 0.4 x 7/0.93333 = 10 g/h."""
    estimate = typed(**changes).chosen
    assert estimate is not None
    assert estimate.point.vmax_mg_per_day / 24 == pytest.approx(10_000, rel=1e-4)
    assert estimate.point.km_mg_per_L == pytest.approx(400, rel=1e-3)


def test_ten_per_cent_v_v_is_not_w_v_here_either() -> None:
    estimate = typed(doses=("70 mL/h", "80 mL/h"), product="infusion-10-vv").chosen
    assert estimate is not None
    assert estimate.point.vmax_mg_per_day / 24 == pytest.approx(7_890, rel=1e-4)


def test_results_are_told_by_the_hour_in_every_form() -> None:
    """9 g/h settles at 400 x 9/1 = 3,600 mg/L; 1,250 mg/L takes 10 x 1.25/1.65 = 7.576 g/h."""
    consult = typed(proposed=("8.2 g/h", "9 g/h"))
    assert consult.plateaus is not None
    assert [f.point_mg_per_L for _, f in consult.plateaus.settle] == pytest.approx([400 * 8.2 / 1.8, 3600], rel=1e-3)
    assert consult.plateaus.holds[0].mg.median == pytest.approx(7576, rel=0.02)
    steps = [s.line for s in workings(consult).steps]
    assert "Dose line 1: R = rate x salt factor x share reaching the body = 7,000 mg/h x 1 x 1 = 7,000 mg/h" in steps
    assert "Level 2: R/C = 8,000 mg/h / 1,600 mg/L = 5 L/h" in steps
    assert any(s.startswith("Vmax: Vmax = R1 + Km x R1/C1 = 7,000 mg/h + 400 mg/L x 7.500003 L/h") for s in steps)
    for said in (note(consult), render_html(consult), json.dumps(note_data(consult)["workings"])):
        assert "mg/h" in said
        assert not re.search(r"mg/day|L/day|normal binding", said), re.search(r".{60}(mg/day|L/day|normal).{20}", said)
    data = note_data(consult)
    jsonschema.validate(data, note_schema())
    assert [x["active_mg_per_h"] for x in data["plateaus"]["settle"]] == [8200.0, 9000.0]
    assert data["plateaus"]["rates_for_aim"][0]["active_mg_per_h"]["median"] == pytest.approx(7576, rel=0.02)


def test_a_rate_per_kg_is_worked_by_hand_from_the_weight() -> None:
    steps = [s.line for s in workings(typed(doses=("100 mg/kg/h", "8 g/h"))).steps]
    assert (
        "Dose line 1: R = rate per kg x weight x salt factor x share reaching the body = "
        "100 mg/kg/h x 70 kg x 1 x 1 = 7,000 mg/h"
    ) in steps


def test_page_one_names_the_authority_and_what_is_not_offered() -> None:
    consult = typed(proposed=("7.5 g/h", "12 g/h"))
    said = note(consult)
    assert (
        "STOP: 12 g/h ethanol into a vein: 12,000 mg/h of active drug is at or above this patient's estimated Vmax "
        "(10,000 mg/h). There is no steady state"
    ) in said
    assert "NOT OFFERED: 12 g/h ethanol into a vein = 12,000 mg/h as active drug: once settled no steady state" in said
    assert "NOT OFFERED: 7.5 g/h" not in said
    assert "it needs the agreement of a toxicologist or the poison centre" in said
    assert "No times were given: while it runs a level every 1 to 2 h, and after each change of rate." in said
    assert "The levels were taken as steady on the word of the person who typed them; no times can be told." in said
    assert not [r for r in consult.second_way if not r.agrees]
    assert {r.unit for r in consult.second_way} == {"kg", "mg/L", "mg/h", "%"}


def test_what_cannot_be_a_pair_says_so_by_the_hour() -> None:
    assert typed(levels=("1000 mg/L", "1100 mg/L")).refusals["two levels"] == (
        "From 7,000 mg/h to 8,000 mg/h of active drug (+14 %) the level rose from 1,000 mg/L to 1,100 mg/L (+10 %). "
        "With saturable elimination a level must rise more than in proportion to the dose, so Km cannot be found. "
        "Check doses taken, sampling times (the second level may have been drawn too early) and units, or add a level."
    )
    three = typed(doses=("7 g/h", "8 g/h", "9 g/h"), levels=(*LEVELS, "3600 mg/L"))
    assert three.chosen is None
    assert three.refusals["two levels"] == (
        "3 levels were typed; for ethanol as antidote the method takes two, on two different doses."
    )
    beside = typed(
        drug="theophylline",
        forms=("sustained-release",),
        doses=("600 mg/day", "800 mg/day"),
        levels=("8 mg/L", "14 mg/L"),
        population="",
    )
    assert beside.refusals["two levels"] == (
        "Theophylline leaves by a first-order path beside the saturable one; two levels cannot tell the two apart."
    )


def test_no_rate_is_held_for_a_drug_without_regimens() -> None:
    """Teaching only, not marked: nothing at all."""
    consult = typed(
        drug="voriconazole",
        forms=("tablet",),
        doses=("400 mg/day", "600 mg/day"),
        levels=("2 mg/L", "5 mg/L"),
        population="",
    )
    assert consult.stopped
    assert (consult.plateaus, consult.chosen) == (None, None)


def test_refusals_of_a_rate() -> None:
    assert refusals(doses=("100 mg/kg/h", "8 g/h"), weight="") == [
        "Dose line 1, rate: 100 mg/kg/h was given without a weight. Allowed: a rate per kg with a weight, or a rate in "
        "mg/h. Give the weight."
    ]
    assert refusals(
        drug="phenytoin", forms=("sodium",), doses=("7 mg/h", "300 mg/day"), levels=("8 mg/L", "9 mg/L")
    ) == ['Dose 1: the unit "mg/h" was given. Allowed: mg/day or g/day or mg PE/day. Give one of these units.']
    assert refusals(forms=("oral",), doses=("7 g/h", "8 g/h")) == [
        f'Dose {i}: the unit "g/h" was given. Allowed: mg/day or g/day or mg PE/day. Give one of these units.'
        for i in (1, 2)
    ]


def test_a_running_infusion_still_needs_its_start_where_no_level_names_it() -> None:
    from tests.unit.drug_cases import dose, ethanol

    lines = dose(1)
    lines[1].pop("from")
    with pytest.raises(CaseError) as caught:
        ethanol(doses=lines)
    assert [p.text for p in caught.value.problems] == [
        "Dose line 2: an infusion was given without its start. Allowed: from, and until once it has ended. "
        "Add the clock time."
    ]
