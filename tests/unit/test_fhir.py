"""FHIR bundles: what is read, what is left out, what stays empty for a person, and what is refused."""

from __future__ import annotations

import copy
import json
import tracemalloc
from collections.abc import Callable
from pathlib import Path
from typing import Any

import jsonschema
import pytest
from hypothesis import given as sampled
from hypothesis import settings
from hypothesis import strategies as st

from pkcalc.case import check_case, dump_case_file, parse_case_text, read_case_text
from pkcalc.consult import run_consult
from pkcalc.drugs.profile import drug_names, load_profile
from pkcalc.errors import CaseError
from pkcalc.fhir import Imported, from_bundle, load_bundle

FIXTURES = Path(__file__).parents[1] / "fixtures"
SCHEMA = json.loads((FIXTURES / "fhir_r4_subset.schema.json").read_text(encoding="utf-8"))
BUNDLES = sorted(p.name for p in FIXTURES.glob("fhir_*.json") if "schema" not in p.name)
IN_SCHEMA = ("Observation", "MedicationAdministration", "MedicationRequest")
FORMS = {"CAP-100": "extended-capsule", "INJ-50": "injection", "FOS-50": "fosphenytoin-injection"}
UCUM = "http://unitsofmeasure.org"
TOTAL = "Phenytoin [Mass/volume] in Serum or Plasma"


def bundle(name: str) -> dict[str, Any]:
    data: dict[str, Any] = json.loads((FIXTURES / f"fhir_{name}.json").read_text(encoding="utf-8"))
    return data


def read(name: str, **products: str) -> Imported:
    return load_bundle(FIXTURES / f"fhir_{name}.json", drug="phenytoin", products=products or FORMS)


def of(*resources: dict[str, Any], products: dict[str, str] | None = None, **more: Any) -> Imported:
    entries = [{"resource": r} for r in resources]
    text = json.dumps({"resourceType": "Bundle", "type": "collection", "entry": entries, **more})
    return from_bundle(text, drug="phenytoin", products=FORMS if products is None else products)


def level(i: str = "o1", value: Any = 8, unit: str = "mg/L", **more: Any) -> dict[str, Any]:
    code = more.pop("code", "3968-5")
    display = more.pop("display", TOTAL)
    quantity = {"value": value, "code": unit, "system": UCUM, **more.pop("quantity", {})}
    return {
        "resourceType": "Observation",
        "id": i,
        "status": "final",
        "code": {"coding": [{"system": "http://loinc.org", "code": code, "display": display}]},
        "subject": {"reference": "Patient/p1"},
        "effectiveDateTime": "2026-11-10T07:00:00+01:00",
        "valueQuantity": quantity,
        **more,
    }


def given(i: str = "a1", amount: Any = 300, **more: Any) -> dict[str, Any]:
    product = more.pop("product", "CAP-100")
    return {
        "resourceType": "MedicationAdministration",
        "id": i,
        "status": "completed",
        "medicationCodeableConcept": {"text": "phenytoin", "coding": [{"system": "urn:x", "code": product}]},
        "subject": {"reference": "Patient/p1"},
        "effectiveDateTime": "2026-11-03T21:00:00+01:00",
        "dosage": {"dose": {"value": amount, "code": "mg", "system": UCUM}},
        **more,
    }


def ordered(**more: Any) -> dict[str, Any]:
    repeat = {
        "frequency": 1,
        "period": 1,
        "periodUnit": "d",
        "boundsPeriod": {"start": "2026-11-01T21:00:00+01:00"},
    }
    instruction = {
        "text": "300 mg at night",
        "timing": {"repeat": {**repeat, **more.pop("repeat", {})}},
        "doseAndRate": [{"doseQuantity": {"value": 300, "code": "mg", "system": UCUM}}],
        **more.pop("instruction", {}),
    }
    return {
        "resourceType": "MedicationRequest",
        "id": "r1",
        "status": "active",
        "intent": "order",
        "medicationCodeableConcept": {"text": "phenytoin", "coding": [{"system": "urn:x", "code": "CAP-100"}]},
        "subject": {"reference": "Patient/p1"},
        "dosageInstruction": [instruction],
        **more,
    }


def line(found: Imported, entry: int) -> str:
    return next(x.text for x in found.lines if x.entry == entry)


# the bundles of our own making ---------------------------------------------------------------------------


@pytest.mark.parametrize("name", BUNDLES)
def test_our_bundles_are_valid_by_the_published_schema(name: str) -> None:
    checked = 0
    validator = jsonschema.Draft6Validator(SCHEMA)
    for entry in json.loads((FIXTURES / name).read_text(encoding="utf-8"))["entry"]:
        if entry["resource"]["resourceType"] in IN_SCHEMA:
            validator.validate(entry["resource"])
            checked += 1
    assert checked >= 2


def test_the_schema_would_notice_a_wrong_resource() -> None:
    wrong = {**level(), "valueQuantity": {"value": 8, "units": "mg/L"}}
    assert not jsonschema.Draft6Validator(SCHEMA).is_valid(wrong)
    assert jsonschema.Draft6Validator(SCHEMA).is_valid(level())


def test_three_levels_and_a_month_of_administrations() -> None:
    found = read("month")
    assert found.ready
    case = check_case(found.file)
    assert (case.patient.age_years, case.patient.sex) == (45, "female")
    (course,) = case.courses
    assert course.regimen is not None
    assert [(x.form, x.labelled_mg) for x in course.regimen.intakes] == [("extended-capsule", 300)]
    assert course.regimen.cycle_h == 24
    assert course.start is not None
    assert course.end is not None
    moments = course.regimen.doses_from(course.start, course.end)
    assert len(moments) == 30
    assert len(course.missed) == 1  # the dose not done on the 12th stays visible
    assert [x.kind for x in case.levels] == ["total", "total", "free"]
    assert [x.typed.text for x in case.levels] == ["7.9 mg/L", "47.6 umol/L", "1.6 mcg/mL"]
    assert case.levels[1].reported_mg_per_L == pytest.approx(47.6e-3 * 252.27)  # molar units
    assert [x.albumin.g_per_L if x.albumin else None for x in case.levels] == [31, None, 29]
    assert case.albumin is not None
    assert case.albumin.g_per_L == 29


def test_every_entry_has_its_line_and_errors_are_skipped_and_listed() -> None:
    found = read("month")
    assert {x.entry for x in found.lines if x.entry} == set(range(1, 40))
    assert line(found, 32) == "Entry 32, MedicationAdministration: left out. Its status is entered-in-error."
    assert line(found, 36) == "Entry 36, Observation: left out. Its status is entered-in-error."
    assert line(found, 37) == "Entry 37, Observation: left out. Its status is cancelled."
    assert line(found, 13) == (
        "Entry 13, MedicationAdministration: left out. Not done (12 Nov 2026 21:00 +01:00): Phenytoin sodium "
        "extended-release capsule 100 mg. It does not count as given."
    )
    assert line(found, 34) == (
        "Entry 34, Observation: check. Phenytoin [Moles/volume] in Serum or Plasma, a total level: 47.6 umol/L, "
        "drawn 20 Nov 2026 07:00 +01:00. No albumin within 48 h of it: the latest one of the case would be used "
        "for it. Check it against the laboratory report."
    )


def test_identifiers_are_dropped_and_that_is_said() -> None:
    found = read("month")
    everything = dump_case_file(found.file) + found.report() + json.dumps(found.as_dict())
    for secret in ("INVENTED", "Nobody", "1981", "p1"):
        assert secret not in everything
    assert line(found, 1) == (
        "Entry 1, Patient: read. Age 45 years, sex female. Name, identifiers, address and birth date were dropped."
    )


def test_the_form_is_left_empty_until_a_person_says_it() -> None:
    found = read("month", OTHER="sodium")
    assert not found.ready
    (row,) = found.file.doses
    assert row.form == ""
    assert row.comment == (
        'The bundle does not say which form "Phenytoin sodium extended-release capsule 100 mg" is. '
        "29 administrations of the bundle, the last at 2026-11-30 21:00+01:00. If it goes on, leave until empty."
    )
    assert [p.where for p in found.to_fill] == ["Dose line 1, form"]
    assert 'with --product "CAP-100=FORM"' in line(found, 2)
    with pytest.raises(CaseError):
        read_case_text(dump_case_file(found.file))


def test_infusions() -> None:
    found = read("infusions")
    rows = found.file.doses
    assert [(r.amount, r.over, r.rate) for r in rows] == [
        ("1000 mg", "30 min", ""),
        ("", "", "50 mg/h"),
        ("", "60 min", ""),
        ("500 mg PE", "10 min", ""),
        ("", "", ""),
        ("", "", ""),
        ("", "30 min", ""),
        ("", "", "60 mg/h"),
    ]
    assert (rows[1].from_, rows[1].until) == ("2026-11-02 10:00+01:00", "2026-11-02 12:00+01:00")
    assert [p.where for p in found.to_fill] == [f"Dose line {i}, amount" for i in (3, 5, 6, 7)]
    assert "the amount: 300 mg is not 10 mg/min for 60 min" in rows[2].comment
    assert "500 mg of salt or of equivalents (PE) is not said" in rows[4].comment
    assert 'the unit "mL" is not read' in rows[5].comment
    assert "its status is stopped (100 mg is recorded as the whole)" in rows[6].comment
    assert found.file.patient.age == "19 months"


def test_ordered_is_not_given_and_never_counted_twice() -> None:
    found = read("orders")
    assert [(r.source, r.confirmed) for r in found.file.doses] == [
        ("given", "unknown"),
        ("ordered", "unknown"),
        ("stated", "unknown"),
    ]
    assert "these count, the order does not" in line(found, 4)
    assert line(found, 5) == (
        'Entry 5, MedicationRequest: check. Ordered, not given: "Phenytoin suspension", written as "5 mL twice '
        'daily". Not clear: which form "Phenytoin suspension" is. Ask what was really taken; then complete the '
        'line and set "confirmed" to yes, or remove it.'
    )
    assert line(found, 6) == "Entry 6, MedicationRequest: left out. Its status is cancelled."
    # An ingredient's code names the drug, not its salt.
    assert found.file.doses[2].form == ""
    assert found.file.doses[2].daily[0].time == "21:00"


def condition(text: str, **more: Any) -> dict[str, Any]:
    return {
        "resourceType": "Condition",
        "id": "c",
        "subject": {"reference": "Patient/p1"},
        "code": {"text": text},
        **more,
    }


def status(code: str) -> dict[str, Any]:
    return {"coding": [{"system": "http://terminology.hl7.org/CodeSystem/condition-ver-status", "code": code}]}


def test_a_diagnosis_is_never_an_answer_and_names_the_questions_it_bears_on() -> None:
    told = {"clinicalStatus": status("resolved"), "verificationStatus": status("confirmed"), "onsetDateTime": "2019-03"}
    found = of(level(), condition("End-stage renal failure on dialysis", **told))
    assert line(found, 2) == (
        'Entry 2, Condition: not understood. The diagnosis "End-stage renal failure on dialysis" (resolved, confirmed, '
        "since 2019-03) is shown, not read into an answer: no code of a diagnosis could be verified. It may bear on: "
        "Does the patient have end-stage renal failure or dialysis? Is kidney function reduced, short of dialysis? Is "
        "there renal replacement, plasma exchange or ECMO? Answer the context questions by hand."
    )
    assert found.file.context == {}
    coded = {"code": {"coding": [{"system": "urn:example", "code": "X1", "display": "Liver cirrhosis"}]}}
    assert "It may bear on: Does the patient have hepatic failure? Answer" in line(
        of(level(), condition("", **coded)), 2
    )


@pytest.mark.parametrize("code", ["entered-in-error", "refuted"])
def test_a_diagnosis_that_was_taken_back_is_left_out_and_listed(code: str) -> None:
    found = of(level(), condition("Cirrhosis of liver", verificationStatus=status(code)))
    assert line(found, 2) == f'Entry 2, Condition: left out. The diagnosis "Cirrhosis of liver" is marked {code}.'


def test_the_words_of_a_diagnosis_stand_beside_their_question_in_lower_case() -> None:
    for name in drug_names():
        words = [w for q in load_profile(name).questions.values() for w in q.diagnoses]
        assert words
        assert all(w == w.casefold() and len(w) > 3 for w in words)


def test_unknown_products_codes_and_resources_are_listed_with_what_to_do() -> None:
    found = read("orders")
    assert line(found, 3) == (
        'Entry 3, MedicationAdministration: not understood. The product "Paracetamol tablet 500 mg" is not known '
        "as phenytoin. If it is phenytoin, name its form (--product) and read the bundle again; if not, think of "
        "interactions."
    )
    assert line(found, 8) == (
        'Entry 8, Condition: not understood. The diagnosis "Hypoalbuminaemia" is shown, not read into an answer: no '
        "code of a diagnosis could be verified. Answer the context questions by hand."
    )
    assert line(found, 9) == (
        "Entry 9, AllergyIntolerance: not understood. This kind of resource is not read. "
        "Add by hand what matters of it."
    )
    assert line(found, 12) == (
        'Entry 12, Observation: not understood. "Body weight" (code 29463-7) is not among the laboratory codes '
        "that the drug file vouches for. If it is the patient's weight, add it under patient, weight."
    )


@pytest.mark.parametrize("code", ["61151-7", "61152-5", "4087-3", "14946-8", "3869-5", "3948-7"])
def test_codes_from_memory_and_circulating_wrong_ones_are_not_accepted(code: str) -> None:
    assert code not in {c.code for c in load_profile("phenytoin").codes}
    found = of(given(), level(), level("o2", 29, "g/L", code=code, display=""))
    assert line(found, 3).startswith(f'Entry 3, Observation: not understood. "{code}" (code {code}) is not among')
    assert found.file.albumin is None
    assert len(found.file.levels) == 1


def test_a_code_counts_in_its_own_system_only() -> None:
    local = {"coding": [{"system": "urn:local", "code": "3968-5"}]}
    found = of(given(), {**level(), "code": local})
    assert found.file.levels == ()


def test_two_patients_are_refused() -> None:
    with pytest.raises(CaseError) as refusal:
        read("two_patients")
    assert str(refusal.value) == (
        "FHIR bundle: it holds data of 2 patients, or names one in different ways. Allowed: one patient. "
        "Export the record of one patient only."
    )
    with pytest.raises(CaseError):  # no Patient resource at all: the references tell
        of(level(), given(subject={"reference": "Patient/p2"}))
    with pytest.raises(CaseError):  # the same id on another server is another person
        of(
            level(subject={"reference": "https://a.example/Patient/p1"}),
            given(subject={"reference": "https://b.example/Patient/p1"}),
        )


def test_one_patient_by_full_address_and_by_id() -> None:
    base = "https://a.example/fhir/"
    patient = {"resourceType": "Patient", "id": "p1", "gender": "male", "birthDate": "1980-11-11"}
    entries = [
        {"fullUrl": base + "Patient/p1", "resource": patient},
        {"fullUrl": base + "Observation/o1", "resource": level()},
        {
            "fullUrl": base + "MedicationAdministration/a1",
            "resource": given(subject={"reference": base + "Patient/p1"}),
        },
    ]
    found = from_bundle(json.dumps({"resourceType": "Bundle", "entry": entries}), drug="phenytoin", products=FORMS)
    assert found.ready
    assert found.file.patient.age == "45 years"  # the birthday comes a day after the latest time


def test_a_bundle_becomes_a_consult_once_a_person_has_added_the_weight() -> None:
    data = json.loads(dump_case_file(read("month").file))
    data["patient"]["weight"] = "60 kg"
    data["now"] = "2026-11-30 22:00+01:00"
    consult = run_consult(read_case_text(json.dumps(data)))
    assert not consult.stopped
    assert consult.chosen is not None
    assert consult.record is not None
    assert len(consult.record.doses) == 29


def _places(data: Any, path: tuple[Any, ...] = ()) -> list[tuple[Any, ...]]:
    inside = data.items() if isinstance(data, dict) else enumerate(data) if isinstance(data, list) else ()
    return [path, *(p for k, v in inside for p in _places(v, (*path, k)))]


WORN = [bundle(name) for name in ("infusions", "orders")]
PLACES = [[p for p in _places(b) if p] for b in WORN]
JUNK = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(),
    st.floats(),
    st.text(max_size=30),
    st.sampled_from(["", "mg", "{PE}", "2026-02-30T10:00:00Z", "2026-11-01T10:00:00+14:00", "<", "Patient/p2", "#m1"]),
    st.lists(st.text(max_size=5), max_size=3),
    st.dictionaries(st.sampled_from(["value", "code", "text", "start", "coding"]), st.text(max_size=5), max_size=3),
)


@settings(max_examples=400)
@sampled(which=st.integers(0, 1), data=st.data())
def test_any_damage_ends_in_a_case_file_with_its_list_or_in_words(which: int, data: st.DataObject) -> None:
    worn = copy.deepcopy(WORN[which])
    for _ in range(data.draw(st.integers(1, 3))):
        here: Any = worn
        path = data.draw(st.sampled_from(PLACES[which]))
        try:
            for step in path[:-1]:
                here = here[step]
            here[path[-1]] = data.draw(JUNK)
        except (KeyError, IndexError, TypeError):
            continue
    try:
        found = from_bundle(json.dumps(worn), drug="phenytoin", products=FORMS)
    except CaseError:
        return
    assert parse_case_text(dump_case_file(found.file)) == found.file
    assert {x.entry for x in found.lines if x.entry} == set(range(1, len(worn["entry"]) + 1))
    if found.ready:
        check_case(found.file)
    for word in ("None", "nan", "Decimal", "Error("):
        assert word not in found.report()


# levels --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("change", "value", "said"),
    [
        ({"quantity": {"comparator": "<"}}, "<8 mg/L", ""),
        ({"quantity": {"comparator": ">="}}, "", 'the value is marked ">="'),
        ({"unit": "umol/L"}, "", "the code is one of mass, the unit is umol/L"),
        ({"unit": "mg/dL"}, "", "levels of this drug are not read in mg/dL"),
        ({"unit": "MG/L"}, "", 'the unit "MG/L" is not read'),
        ({"quantity": {"system": "urn:other"}}, "", 'the unit "mg/L" is not coded in UCUM'),
        ({"quantity": {"unit": "mg/dL"}}, "", "the unit is coded mg/L and written mg/dL"),
        ({"quantity": {"unit": "ug/mL"}}, "8 mg/L", ""),
        ({"quantity": {"code": "", "unit": "mg/L"}}, "8 mg/L", "Its unit stands in words only."),
        ({"value": -1}, "", "the value is negative"),
        ({"valueQuantity": None, "drop": "valueQuantity"}, "", "no value is coded"),
    ],
)
def test_a_level_is_read_exactly_or_left_empty(change: dict[str, Any], value: str, said: str) -> None:
    dropped = change.pop("drop", None) if "drop" in change else None
    resource = level(**copy.deepcopy(change))
    if dropped:
        del resource[dropped]
    found = of(given(), resource)
    assert found.file.levels[0].value == value
    assert said in line(found, 2)
    assert found.ready == bool(value)


@pytest.mark.parametrize(
    "display",
    [
        "Digoxin [Mass/volume] in Serum or Plasma",
        "Phenytoin Free [Mass/volume] in Serum or Plasma",
        "Phenytoin [Mass/volume] in Urine",
    ],
)
def test_a_name_that_contradicts_its_code_is_not_used(display: str) -> None:
    found = of(given(), level(display=display))
    assert found.file.levels == ()
    assert line(found, 2) == (
        f'Entry 2, Observation: not understood. Its code is that of "{TOTAL}", its name is "{display}". '
        "Check code and name with the laboratory, and add the result by hand."
    )


def test_a_short_name_is_read_and_shown_beside_the_expected_one() -> None:
    found = of(given(), level(display="PHENYTOIN"))
    assert found.ready
    assert line(found, 2) == (
        f"Entry 2, Observation: check. {TOTAL}, a total level: 8 mg/L, drawn 10 Nov 2026 07:00 +01:00. "
        'It is called "PHENYTOIN" there. Check it against the laboratory report.'
    )


def test_a_level_without_a_time_of_day_is_to_be_filled() -> None:
    for text in ("2026-11-10", "2026", "2026-11-10T25:00:00Z", "10/11/2026"):
        found = of(given(), level(effectiveDateTime=text, issued="2026-11-10T09:00:00Z"))
        assert found.file.levels[0].drawn == ""
        assert [p.where for p in found.to_fill] == ["Level 1, drawn"]


def test_one_sample_reported_twice_counts_once_and_contradictions_stay_empty() -> None:
    moles = level("o2", 31.7, "umol/L", code="14877-5", display="Phenytoin [Moles/volume] in Serum or Plasma")
    found = of(given(), level(), moles)
    assert [x.value for x in found.file.levels] == ["8 mg/L"]
    assert "The same sample as entry 2, reported again." in line(found, 3)
    found = of(given(), level(), level("o2", 18))
    (row,) = found.file.levels
    assert (row.value, row.comment) == ("", "Entries 2, 3 of the bundle contradict each other: 8 mg/L, 18 mg/L.")
    assert not found.ready
    found = of(given(), level(), level("o2", 8, quantity={"comparator": "<"}))
    assert [x.value for x in found.file.levels] == [""]


@pytest.mark.parametrize("status", ["preliminary", "registered", "cancelled", "entered-in-error", "unknown", ""])
def test_only_final_results_are_read(status: str) -> None:
    found = of(given(), level(status=status))
    assert found.file.levels == ()
    assert not found.ready
    assert "Levels: the bundle holds no level that could be read." in found.report()


def test_a_level_of_the_displacing_drug_goes_with_its_own_sample_only() -> None:
    same = level("o2", 60, code="4086-5", display="")
    other = level("o3", 70, code="4086-5", display="", effectiveDateTime="2026-11-12T07:00:00+01:00")
    found = of(given(), level(), same, other)
    assert [x.other_levels for x in found.file.levels] == [{"valproate": "60 mg/L"}]
    assert "Answer the context questions" in line(found, 4)


# doses ---------------------------------------------------------------------------------------------------


def test_a_dose_given_twice_in_the_bundle_counts_once() -> None:
    found = of(given(), given("a2"), given("a1"), level())
    assert len(found.file.doses) == 1
    assert line(found, 2) == (
        'Entry 2, MedicationAdministration: check. Given: 300 mg of "phenytoin", 3 Nov 2026 21:00 +01:00. '
        "The same product, amount and time as entry 1: counted once. If both were given, add the second dose. "
        "Check it against the chart."
    )
    assert line(found, 3) == "Entry 3, MedicationAdministration: left out. It is an exact copy of entry 1."


def test_contradicting_doses_stay_empty() -> None:
    found = of(given(), given("a2", 400), level())
    (row,) = found.file.doses
    assert (row.amount, row.at) == ("", "2026-11-03 21:00+01:00")
    assert row.comment == (
        "In the bundle entries 1, 2 stand at the same time with different contents: 300 mg, 400 mg. "
        "Fill in what was given in all."
    )
    assert not found.ready
    found = of(given(), given("a1", 400), level())  # one id, two contents
    assert found.file.doses == ()
    assert "have one id and different contents" in line(found, 1)
    assert "have one id and different contents" in line(found, 2)


def test_two_products_at_one_time_are_two_doses() -> None:
    found = of(given(), given("a2", 30, product="CAP-30"), level(), products={**FORMS, "CAP-30": "extended-capsule"})
    assert [r.amount for r in found.file.doses] == ["300 mg", "30 mg"]
    assert found.ready


@pytest.mark.parametrize("status", ["in-progress", "on-hold", "stopped"])
def test_a_dose_not_completed_is_to_be_filled(status: str) -> None:
    found = of(given(status=status), level())
    assert [r.amount for r in found.file.doses] == [""]
    assert not found.ready


@pytest.mark.parametrize("status", ["unknown", "", "no-such-status"])
def test_a_dose_of_unknown_status_is_not_used(status: str) -> None:
    assert of(given(status=status), level()).file.doses == ()


def test_route_and_form_must_agree() -> None:
    found = of(given(dosage={"route": {"text": "IV"}, "dose": {"value": 300, "code": "mg", "system": UCUM}}), level())
    assert found.file.doses[0].form == ""
    assert "the route is intravenous, but extended-capsule is given oral" in line(found, 1)
    assert not found.ready
    muscle = given(
        product="INJ-50",
        dosage={"route": {"text": "intramuscular"}, "dose": {"value": 100, "code": "mg", "system": UCUM}},
    )
    found = of(muscle, level())
    assert found.file.context == {"im_route": "yes"}
    assert found.file.doses[0].form == ""


def test_equivalents_are_not_given_to_a_plain_salt() -> None:
    found = of(given(dosage={"text": "300 mg PE", "dose": {"value": 300, "code": "mg", "system": UCUM}}), level())
    assert found.file.doses[0].amount == ""
    assert "300 mg PE is said, but extended-capsule does not count in PE" in line(found, 1)


def test_runs_are_exact_and_never_smoothed() -> None:
    def at(day: int, time: str, i: str) -> dict[str, Any]:
        return given(i, effectiveDateTime=f"2026-11-{day:02d}T{time}:00+01:00")

    even = of(*(at(d, "21:00", f"a{d}") for d in (1, 2, 3, 4)), level())
    assert [(r.every, r.at) for r in even.file.doses] == [("24 h", "")]
    gap = of(*(at(d, "21:00", f"a{d}") for d in (1, 2, 3, 5, 6, 7)), level())
    assert [(r.every, r.from_) for r in gap.file.doses] == [
        ("24 h", "2026-11-01 21:00+01:00"),
        ("24 h", "2026-11-05 21:00+01:00"),
    ]
    late = of(at(1, "21:00", "a1"), at(2, "21:20", "a2"), at(3, "21:00", "a3"), level())
    assert [r.at for r in late.file.doses] == [
        "2026-11-01 21:00+01:00",
        "2026-11-02 21:20+01:00",
        "2026-11-03 21:00+01:00",
    ]


@pytest.mark.parametrize(
    ("repeat", "every"),
    [
        ({"frequency": 2}, "12 h"),
        ({"period": 8, "periodUnit": "h"}, "8 h"),
        ({"frequencyMax": 3}, ""),
        ({"dayOfWeek": ["mon"]}, ""),
        ({"when": ["HS"]}, ""),
        ({"periodUnit": "mo"}, ""),
        ({"frequency": 7}, ""),
    ],
)
def test_an_order_is_read_only_where_it_is_plain(repeat: dict[str, Any], every: str) -> None:
    found = of(ordered(repeat=repeat), level())
    (row,) = found.file.doses
    assert (row.source, row.every, row.amount) == ("ordered", every, "300 mg")
    assert found.ready == bool(every)


def test_an_order_as_needed_or_in_words_only_is_left_to_a_person() -> None:
    for instruction in ({"asNeededBoolean": True}, {"doseAndRate": []}):
        found = of(ordered(instruction=instruction), level())
        assert found.file.doses[0].amount == ""
        assert 'written as "300 mg at night"' in line(found, 1)
        assert not found.ready


def test_the_confirmed_order_counts_and_the_unconfirmed_does_not() -> None:
    found = of(ordered(), level())
    case = check_case(found.file)
    assert [c.counts_as_given for c in case.courses] == [False]
    data = json.loads(dump_case_file(found.file))
    data["doses"][0]["confirmed"] = "yes"
    assert [c.counts_as_given for c in read_case_text(json.dumps(data)).courses] == [True]


@pytest.mark.parametrize(
    "change", [{"doNotPerform": True}, {"intent": "plan"}, {"status": "draft"}, {"status": "entered-in-error"}]
)
def test_what_is_no_order_is_left_out(change: dict[str, Any]) -> None:
    assert of(ordered(**change), level()).file.doses == ()


def test_a_product_is_found_by_reference_and_one_that_is_missing_is_listed() -> None:
    medication = {"resourceType": "Medication", "id": "m1", "code": {"text": "phenytoin capsules"}}
    by_id = given(medicationReference={"reference": "Medication/m1"})
    inside = given(
        "a2", contained=[medication], medicationReference={"reference": "#m1"}, effectiveDateTime="2026-11-04T21:00:00Z"
    )
    gone = given("a3", medicationReference={"reference": "Medication/m9"}, effectiveDateTime="2026-11-05T21:00:00Z")
    for resource in (by_id, inside, gone):
        del resource["medicationCodeableConcept"]
    found = of(medication, by_id, inside, gone, level(), products={"phenytoin capsules": "sodium"})
    assert [r.form for r in found.file.doses] == ["sodium", "sodium"]
    assert line(found, 4) == (
        "Entry 4, MedicationAdministration: not understood. The product it points to is not in the bundle. "
        "If it is phenytoin, add the dose by hand."
    )


# whole bundles -------------------------------------------------------------------------------------------


def test_what_changes_the_meaning_is_not_read() -> None:
    found = of(given(modifierExtension=[{"url": "urn:x", "valueBoolean": True}]), level())
    assert found.file.doses == ()
    assert line(found, 1) == (
        "Entry 1, MedicationAdministration: not understood. It carries an extension that can change its meaning. "
        "Add it by hand."
    )


def test_a_resource_of_another_shape_is_listed_by_its_place() -> None:
    found = of(given(), level(), level("o2", "8"), level("o3", effectiveDateTime=5))
    assert line(found, 3) == (
        "Entry 3, Observation: not understood. Its shape is not that of FHIR R4 at: ValueQuantity, value. "
        "Add it by hand."
    )
    assert line(found, 4).startswith(
        "Entry 4, Observation: not understood. Its shape is not that of FHIR R4 at: Effective"
    )


def test_what_does_not_say_whose_it_is_is_not_read() -> None:
    found = of(given(), level(), level("o2", subject={"display": "somebody"}))
    assert len(found.file.levels) == 1
    assert "It does not say by a reference which patient it belongs to." in line(found, 3)


def test_one_page_of_several_is_flagged() -> None:
    found = of(given(), level(), link=[{"relation": "next", "url": "https://a.example/2"}])
    assert "Bundle: check. It is one page of several" in found.report()


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ('{"resourceType":"Patient"}', "FHIR bundle: the text is a Patient. Allowed: a resource of type Bundle (FHIR R4, JSON). Export the record as a Bundle."),
        ("[]", "FHIR bundle: the text is not a FHIR resource. Allowed: a resource of type Bundle (FHIR R4, JSON). Export the record as a Bundle."),
        ("<Bundle/>", "FHIR bundle: line 1 is not valid JSON at column 1. Allowed: a JSON document. Check that the file is complete and is JSON, not XML."),
        ('{"resourceType":"Bundle"}', "FHIR bundle: it has no entries. Allowed: at least one entry. Check the export."),
        ('{"resourceType":"Bundle","type":"history","entry":[{}]}', "FHIR bundle: it is a history of changes. Allowed: a collection, search set, document or transaction. Export the present state."),
        ('{"a":1,"a":2}', 'FHIR bundle: the key "a" stands twice in the same place. Allowed: each key once. Export it again.'),
        ('{"a":NaN}', "FHIR bundle: NaN was given as a number. Allowed: plain numbers. Check the export."),
        ('{"a":1e999999999}', "FHIR bundle: a number is out of all bounds. Allowed: plain numbers. Check the export."),
        ('{"a":' + "9" * 100_000 + "}", "FHIR bundle: a number is out of all bounds. Allowed: plain numbers. Check the export."),
        ("[" * 1_000_000, "FHIR bundle: the text is nested too deeply. Allowed: at most 40 levels. Check the export."),
        ("[" * 50 + "]" * 50, "FHIR bundle: the text is nested too deeply. Allowed: at most 40 levels. Check the export."),
        ('"' + '\\"' * 1_000_000, "FHIR bundle: line 1 is not valid JSON at column 1. Allowed: a JSON document. Check that the file is complete and is JSON, not XML."),
        (b'{"a":"\xe9"}', "FHIR bundle: byte 7 is not UTF-8 text. Allowed: UTF-8 text. Save the file as UTF-8."),
        (b" " * 50_000_000, "FHIR bundle: 50 MB were given. Allowed: at most 5 MB. Export one patient, this drug and its levels only."),
        ('{"resourceType":"Bundle","entry":[' + "{}," * 6_000 + "{}]}", "FHIR bundle: 6,001 entries were given. Allowed: at most 5,000. Export a shorter time."),
    ],
    ids=range(15),
)  # fmt: skip
def test_hostile_and_wrong_texts_are_refused(text: str | bytes, message: str) -> None:
    with pytest.raises(CaseError) as refusal:
        from_bundle(text, drug="phenytoin")
    assert str(refusal.value) == message


def test_a_large_file_is_refused_before_it_is_read(tmp_path: Path) -> None:
    file = tmp_path / "large.json"
    with file.open("wb") as out:
        out.truncate(2_000_000_000)
    tracemalloc.start()
    with pytest.raises(CaseError, match="2,000 MB were given"):
        load_bundle(file, drug="phenytoin")
    assert tracemalloc.get_traced_memory()[1] < 5_000_000
    tracemalloc.stop()


def test_a_missing_file_an_unknown_drug_and_an_unknown_form_are_refused(tmp_path: Path) -> None:
    with pytest.raises(CaseError) as refusal:
        load_bundle(tmp_path / "none.json", drug="phenytoin")
    assert str(refusal.value) == (
        "FHIR bundle: the file could not be opened (no such file or directory). Check name and folder."
    )
    with pytest.raises(CaseError, match='Drug: "nothing" was given'):
        from_bundle(json.dumps(bundle("month")), drug="nothing")
    with pytest.raises(CaseError, match='Product "CAP-100": the form "salty" was given'):
        read("month", **{"CAP-100": "salty"})


def _steps(n: int, make: Callable[[int], dict[str, Any]]) -> int:
    """How many calls of Python functions reading n entries takes: a measure of work that no machine changes."""
    import sys

    calls = 0

    def count(frame: Any, event: str, argument: Any) -> None:
        nonlocal calls
        calls += event in ("call", "c_call")

    text = json.dumps({"resourceType": "Bundle", "entry": [{"resource": make(i)} for i in range(n)]})
    before = sys.getprofile()
    sys.setprofile(count)
    try:
        from_bundle(text, drug="phenytoin", products=FORMS)
    finally:
        sys.setprofile(before)
    return calls


def _moment(i: int) -> str:
    return f"20{10 + i // 10000:02d}-{1 + i // 672 % 12:02d}-{1 + i // 24 % 28:02d}T{i % 24:02d}:{i % 7 * 7:02d}:00Z"


@pytest.mark.parametrize(
    "make",
    [
        lambda i: level(f"o{i}", effectiveDateTime=_moment(i)),
        lambda i: level(f"o{i}", 30, "g/L", code="1751-7", display="", effectiveDateTime=_moment(i)) if i % 2 else level(f"o{i}", effectiveDateTime=_moment(i)),
        lambda i: given(f"a{i}", effectiveDateTime=_moment(i)),
        lambda i: given(f"a{i}", effectiveDateTime=_moment(i)) if i % 2 else {**ordered(), "id": f"r{i}"},
        lambda i: level(f"o{i}"),
        lambda i: given(f"a{i}"),
    ],
    ids=["levels", "albumin", "doses", "orders", "one moment", "one dose"],
)  # fmt: skip
def test_work_grows_with_the_bundle_and_no_faster(make: Callable[[int], dict[str, Any]]) -> None:
    small, large = _steps(100, make), _steps(400, make)
    assert large < 6 * small


# the command ---------------------------------------------------------------------------------------------


def test_the_command_prints_the_case_and_the_list_apart(tmp_path: Path) -> None:
    from tests.unit.test_cli import run

    file = str(FIXTURES / "fhir_month.json")
    done = run("from-fhir", file, "--product", "CAP-100=extended-capsule")
    assert done.returncode == 0, done.stderr
    assert read_case_text(done.stdout).levels[2].kind == "free"
    assert done.stderr.startswith("Entries: 34 read, 1 check, 4 left out, 0 not understood.\n")
    out = tmp_path / "case.json"
    done = run("from-fhir", file, "--format", "json", "--out", str(out))
    data = json.loads(done.stdout)
    assert (data["ready"], data["to_fill"][0]["where"]) == (False, "Dose line 1, form")
    assert data["case"] == json.loads(out.read_text(encoding="utf-8"))
    two = run("from-fhir", str(FIXTURES / "fhir_two_patients.json"), "--format", "json")
    assert two.returncode == 2
    assert json.loads(two.stdout)["problems"][0]["given"].startswith("it holds data of 2 patients")
