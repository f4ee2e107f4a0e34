"""Scope is enforced: no regimen outside dosing, no number for a teaching drug without its mark."""

from __future__ import annotations

import json

import pytest

from pkcalc.case import Case, read_case_text
from pkcalc.cautions import rules_of
from pkcalc.consult import run_consult
from pkcalc.demos import demonstrations
from pkcalc.drugs.profile import drug_names, load_profile
from pkcalc.note import data as note_data
from pkcalc.note import document, text
from tests.unit.drug_cases import ethanol, oral

LEVEL = [{"value": "9 mg/L", "kind": "total", "drawn": "2026-03-16 07:40"}]
BANNER = "DEMONSTRATION - invented, not a patient, not for clinical use"


def theophylline(**changes: object) -> Case:
    return oral("theophylline", "sustained-release", "300 mg", marked=False, levels=LEVEL, **changes)


def test_projection_only_offers_no_regimen_and_says_why() -> None:
    proposed = [{"form": "sustained-release", "amount": "400 mg", "every": "12 h"}]
    consult = run_consult(theophylline(proposed=proposed))
    assert {"regimens", "loading"} <= consult.blocked
    assert not consult.stopped
    assert (consult.plan, consult.proposed, consult.table, consult.aim_rate) == (None, (), (), None)
    found = consult.projection
    assert found is not None
    assert (found.load, found.holds) == (None, ())
    assert [p.words for p in found.paths] == [
        "as now: 300 mg sustained-release tablets every 12 h",
        "400 mg sustained-release tablets every 12 h",
    ]
    said = " ".join(text.render(document.compose(consult)).split())
    assert load_profile("theophylline").scope_reason in said
    assert "No regimen is offered: projection only." in said


def test_a_dosing_drug_is_not_called_projection_only() -> None:
    assert not {"projection-only", "teaching-only", "teaching-demonstration"} & {
        c.id for c in run_consult(ethanol()).cautions
    }


@pytest.mark.parametrize(("drug", "form"), [("salicylate", "aspirin-tablet"), ("voriconazole", "tablet")])
def test_teaching_only_without_its_mark_gives_no_number(drug: str, form: str) -> None:
    consult = run_consult(oral(drug, form, "200 mg", marked=False))
    assert consult.stopped
    assert (consult.chosen, consult.projection, consult.plan) == (None, None, None)
    assert dict(consult.estimates) == {}
    (stop,) = [c for c in consult.cautions if c.severity == "stop"]
    assert stop.id == "teaching-only"
    assert load_profile(drug).scope_reason in stop.text
    made = document.compose(consult)
    assert made.demonstration == BANNER
    data = json.loads(note_data.dumps(note_data.note_data(consult)))
    assert (data["outcome"], data["demonstration"], data["projection"]) == ("stop", BANNER, None)


@pytest.mark.parametrize(("drug", "form"), [("salicylate", "aspirin-tablet"), ("voriconazole", "tablet")])
def test_teaching_only_with_its_mark_is_projected_under_the_banner(drug: str, form: str) -> None:
    consult = run_consult(oral(drug, form, "200 mg", marked=True))
    assert not consult.stopped
    assert consult.projection is not None
    assert (consult.projection.holds, consult.projection.load, consult.plan) == ((), None, None)
    assert "teaching-demonstration" in {c.id for c in consult.cautions}
    assert document.compose(consult).demonstration == BANNER


def test_expert_sign_off_names_the_authority() -> None:
    (said,) = [c.text for c in run_consult(ethanol()).cautions if c.id == "expert-sign-off"]
    assert said.startswith(
        "ethanol as antidote: every dose needs the agreement of a toxicologist or the poison centre before it is given. "
    )


def test_every_scope_has_a_demonstration_and_a_first_in_full() -> None:
    shown = {json.loads(d.text)["drug"]: 0 for d in demonstrations()}
    for d in demonstrations():
        shown[json.loads(d.text)["drug"]] += 1
    assert set(shown) == set(drug_names())
    assert shown["ethanol"] >= 2


@pytest.mark.parametrize("name", drug_names())
def test_questions_of_a_drug_are_questions_of_the_case(name: str) -> None:
    profile = load_profile(name)
    asked = profile.asked
    for rule in rules_of(name):
        if rule.id in profile.cautions and "question" in rule.settings:
            assert rule.settings["question"] in asked, rule.id


@pytest.mark.parametrize("name", drug_names())
def test_cautions_of_a_drug_read_and_cite(name: str) -> None:
    from pkcalc.sources import all_sources

    for rule in rules_of(name):
        assert rule.source in all_sources(), rule.id
        assert rule.text.strip().endswith((".", "}")), rule.id


#: What a case says below the youngest age of each drug: every profile must stand here.
TOO_YOUNG = {
    "ethanol": (
        "Age 17 years: under 18 years this tool does not calculate for ethanol as antidote. Children need other doses "
        "and lose glucose faster; no population of children was read."
    ),
    "phenytoin": (
        "Age 5 months: under 6 months this tool does not calculate for phenytoin. Half-life changes tenfold within "
        "weeks of birth, so no fixed population is defensible; the youngest published band starts at 6 months."
    ),
    "salicylate": (
        "Age 17 years: under 18 years this tool does not calculate for salicylate. No values of children were read."
    ),
    "theophylline": (
        "Age 17 years: under 18 years this tool does not calculate for theophylline. 15 % of children or more show "
        "saturation (see the cautions), but no Vmax and Km of children was read."
    ),
    "voriconazole": (
        "Age 17 years: under 18 years this tool does not calculate for voriconazole. Children absorb 45 to 66 % and "
        "eliminate differently."
    ),
}


@pytest.mark.parametrize("name", drug_names())
def test_below_the_youngest_age_nothing_is_calculated_and_why_is_said(name: str) -> None:
    youngest = load_profile(name).youngest_years
    entry = next(d for d in demonstrations() if json.loads(d.text)["drug"] == name)
    data = json.loads(entry.text)
    age = "5 months" if youngest < 1 else f"{youngest - 1:.0f} years"
    weight = "7 kg" if youngest < 1 else "50 kg"
    consult = run_consult(read_case_text(json.dumps({**data, "patient": {"age": age, "weight": weight}})))
    assert consult.stopped
    assert (consult.chosen, consult.projection, consult.plan, consult.plateaus) == (None, None, None, None)
    said = [c.text for c in consult.cautions if c.id == "too-young"]
    assert said == [TOO_YOUNG[name]]
    at_the_limit = {**data, "patient": {"age": f"{youngest:g} years", "weight": weight}}
    assert "too-young" not in {c.id for c in run_consult(read_case_text(json.dumps(at_the_limit))).cautions}
