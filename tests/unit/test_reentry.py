"""Blind re-entry: every difference found, none invented, and its effect on the forecast."""

from __future__ import annotations

import copy
import json
from pathlib import Path
from typing import Any

import pytest

from pkcalc import entries, reentry
from pkcalc.case import Case, CaseFile, read_case_text
from pkcalc.consult import run_consult
from pkcalc.drugs.profile import load_profile
from pkcalc.reentry import Comparison, compare
from tests.unit.cases import PLAIN, doses, levels, plain

ASKED = [{"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}]


def differences(first: Case, second: Case) -> list[str]:
    found = compare(first, second, forecasts=False)
    assert found.equal == (not found.differences)
    return [d.text for d in found.differences]


def with_(path: tuple[Any, ...], value: Any, base: dict[str, Any] | None = None) -> Case:
    data = copy.deepcopy(base or PLAIN)
    here: Any = data
    for step in path[:-1]:
        here = here[step]
    here[path[-1]] = value
    return read_case_text(json.dumps(data))


def test_the_same_entry_is_equal_and_runs_no_forecast(monkeypatch: pytest.MonkeyPatch) -> None:
    def never(*args: Any, **named: Any) -> Any:
        raise AssertionError("no forecast is needed")

    monkeypatch.setattr(reentry, "run_consult", never)
    found = compare(plain(), plain())
    assert found.equal
    assert found.text().startswith(
        "Blind re-entry: two entries of one case\nThe two entries agree in every field compared.\n"
    )


@pytest.mark.parametrize(
    ("path", "value", "text"),
    [
        (("patient", "weight"), "66 kg", "Patient, weight: 60 kg (first), 66 kg (second)."),
        (("patient", "age"), "54 years", "Patient, age: 45 years (first), 54 years (second)."),
        (("patient", "sex"), "male", "Patient, sex: female (first), male (second)."),
        (("patient", "weight_basis"), "estimated", "Patient, weight basis: measured (first), estimated (second)."),
        (("patient", "height"), "156 cm", "Patient, height: 165 cm (first), 156 cm (second)."),
        (("albumin", "value"), "26 g/L", "Albumin, value: 46 g/L (first), 26 g/L (second)."),
        (("albumin", "taken"), "2026-11-01 07:00", "Albumin, taken: 2026-12-01 07:00 (first), 2026-11-01 07:00 (second)."),
        (("albumin", "method"), "BCG", "Albumin, method: unknown (first), BCG (second)."),
        (("context", "valproate"), "yes", "Context, valproate: no (first), yes (second)."),
        (("context", "hla_b1502"), "unknown", "Context, hla b1502: not stated (first), unknown (second)."),
        (("doses", 0, "amount"), "330 mg", "Dose line 1, amount: 300 mg (first), 330 mg (second)."),
        (("doses", 0, "every"), "12 h", "Dose line 1, every: 24 h (first), 12 h (second)."),
        (("doses", 1, "from"), "2026-09-16 21:00", "Dose line 2, from: 2026-09-15 21:00 (first), 2026-09-16 21:00 (second)."),
        (("doses", 1, "until"), "2026-11-30 21:00", "Dose line 2, until: not stated (first), 2026-11-30 21:00 (second)."),
        (("doses", 0, "form"), "chewable-tablet", "Dose line 1, form: extended-capsule (first), chewable-tablet (second)."),
        (("doses", 0, "given_by"), "self", "Dose line 1, given by: nurse (first), self (second)."),
        (("doses", 0, "missed"), ["2026-08-21 21:00"], "Dose line 1, missed: not stated (first), 2026-08-21 21:00 (second)."),
        (("doses", 1, "source"), "stated", "Dose line 2, source: given (first), stated (second)."),
        (("levels", 1, "value"), "<20 mg/L", "Level 2, value: 20 mg/L (first), <20 mg/L (second)."),
        (("levels", 1, "kind"), "normalised", "Level 2, kind: total (first), normalised (second)."),
        (("levels", 1, "drawn"), "2026-11-30 07:00", "Level 2, drawn: 2026-12-01 07:00 (first), 2026-11-30 07:00 (second)."),
        (("levels", 1, "albumin"), {"value": "29 g/L"}, "Level 2, albumin: not entered (first), value 29 g/L (second)."),
        (("levels", 1, "sample"), "plasma", "Level 2, sample: unknown (first), plasma (second)."),
        (("levels", 1, "other_levels"), {"valproate": "60 mg/L"}, "Level 2, other levels: not stated (first), valproate 60 mg/L (second)."),
        (("now",), "2026-12-02 10:00", "Now: 2026-12-01 10:00 (first), 2026-12-02 10:00 (second)."),
        (("aim",), "14 mg/L", "Aim: not stated (first), 14 mg/L (second)."),
        (("target",), {"low": "8 mg/L", "high": "15 mg/L"}, "Target: not entered (first), low 8 mg/L, high 15 mg/L (second)."),
        (("plan",), {"restart_level": "15 mg/L"}, "Plan, restart level: not stated (first), 15 mg/L (second)."),
        (("plan",), {"load": {"form": "injection", "aim": "15 mg/L"}}, "Load asked for: not entered (first), form injection, aim 15 mg/L (second)."),
        (("method",), "two levels", "Method: not stated (first), two levels (second)."),
        (("proposed",), ASKED, "Proposed regimen 1 of the second: not entered (first), form extended-capsule, amount 330 mg, every 24 h (second)."),
        (("chosen",), {"regimen": ASKED[0]}, "Chosen regimen: not entered (first), form extended-capsule, amount 330 mg, every 24 h (second)."),
    ],
)  # fmt: skip
def test_each_field_that_differs_is_named_with_both_values(path: tuple[Any, ...], value: Any, text: str) -> None:
    second = with_(path, value, {**PLAIN, "levels": [{**x, "normalised_by": "laboratory"} for x in PLAIN["levels"]]} if value == "normalised" else None)  # fmt: skip
    first = plain(levels=[{**x, "normalised_by": "laboratory"} for x in PLAIN["levels"]]) if value == "normalised" else plain()  # fmt: skip
    if path[0] == "method":
        assert text in differences(first, second)
    else:
        assert differences(first, second) == [text]
    assert len(differences(second, first)) == len(differences(first, second))


def test_two_ways_of_writing_one_value_are_no_difference() -> None:
    second = plain(
        patient={**PLAIN["patient"], "weight": "60.0 kg", "height": "65 in"},
        albumin={"value": "4.6 g/dL", "taken": "1 Dec 2026 07:00"},
        doses=doses("0.3 g", "350 mg"),
        levels=levels("8 mcg/mL", "20.0 mg/L"),
    )
    found = compare(plain(), second, forecasts=False)
    assert [d.text for d in found.differences] == ["Patient, height: 165 cm (first), 65 in (second)."]
    assert [d.where for d in found.same_value] == [
        "Patient, weight",
        "Albumin, value",
        "Albumin, taken",
        "Dose line 1, amount",
        "Level 1, value",
        "Level 2, value",
    ]
    assert "Written differently, the same value:" in found.text()


def test_rows_are_matched_by_their_time_not_by_their_place() -> None:
    turned = plain(levels=list(reversed(PLAIN["levels"])), doses=list(reversed(PLAIN["doses"])))
    assert differences(plain(), turned) == []
    one = plain(levels=[PLAIN["levels"][1]])
    assert differences(plain(), one) == [
        "Level 1: value 8 mg/L, kind total, drawn 2026-09-15 07:00 (first), not entered (second)."
    ]
    assert differences(one, plain()) == [
        "Level 1 of the second: not entered (first), value 8 mg/L, kind total, drawn 2026-09-15 07:00 (second)."
    ]


def test_dialysis_sessions_are_compared() -> None:
    one = {"from": "2026-11-30 08:00", "until": "2026-11-30 12:00", "clearance": "100 mL/min"}
    data = [
        CaseFile.model_validate_json(json.dumps({**PLAIN, "dialysis": [x]}))
        for x in (one, {**one, "clearance": "6 L/h"}, {**one, "clearance": "90 mL/min"})
    ]
    dumped = [entries.typed(x) for x in data]
    profile = load_profile("phenytoin")
    (same,) = reentry._walk(dumped[0], dumped[1], profile)
    assert same.same
    (other,) = reentry._walk(dumped[0], dumped[2], profile)
    assert (other.where, other.same) == ("Dialysis session 1, clearance", False)


def test_what_is_free_text_is_not_compared() -> None:
    assert differences(plain(), plain(comment="x", label="bed 4", question="why")) == []


def test_every_field_of_the_case_file_is_compared_or_named_as_not() -> None:
    """A field added to the format later must be added here too."""
    left_out = {"pkcalc_case", "comment", "label", "question", "demonstration", "forecast_then", "reentry"}
    parts = {"patient", "albumin", "context", "doses", "levels", "dialysis", "target", "proposed", "plan", "chosen"}
    assert {f.alias or n for n, f in CaseFile.model_fields.items()} == left_out | parts | set(entries.TOP)
    for model, known, extra in (
        ("patient", entries.PATIENT, set()),
        ("albumin", entries.ALBUMIN, set()),
        ("doses", entries.DOSE, {"comment"}),
        ("levels", entries.LEVEL, {"albumin", "comment"}),
        ("dialysis", entries.DIALYSIS, {"comment"}),
        ("target", entries.TARGET, {"reason"}),
        ("proposed", entries.REGIMEN, set()),
        ("plan", entries.PLAN, {"load"}),
    ):
        schema = CaseFile.model_json_schema(by_alias=True)
        name = {
            "patient": "PatientFile",
            "albumin": "AlbuminFile",
            "doses": "DoseFile",
            "levels": "LevelFile",
            "dialysis": "DialysisFile",
            "target": "TargetFile",
            "proposed": "ProposedFile",
            "plan": "PlanFile",
        }[model]
        assert set(schema["$defs"][name]["properties"]) == set(known) | extra, name
    assert set(PLAIN["context"]) <= set(load_profile("phenytoin").questions)


# the effect on the forecast ------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def two_slips() -> Comparison:
    first = plain(proposed=ASKED)
    return compare(first, plain(proposed=ASKED, albumin={"value": "26 g/L", "taken": "2026-12-01 07:00"}))


def test_the_effect_is_that_of_the_consults_themselves(two_slips: Comparison) -> None:
    first = run_consult(plain(proposed=ASKED)).proposed[0].forecast.total.median
    second = (
        run_consult(plain(proposed=ASKED, albumin={"value": "26 g/L", "taken": "2026-12-01 07:00"}))
        .proposed[0]
        .forecast.total.median
    )
    a, b = reentry.show(first, "mg/L"), reentry.show(second, "mg/L")
    assert a != b
    (difference,) = two_slips.differences
    assert f"daily: {a} becomes {b}, chance above the critical level" in difference.effect
    (whole,) = [e for e in two_slips.effects if e.startswith("Proposed regimen 1, ")]
    assert f": {a} as the laboratory reports it (90 % interval " in whole
    assert f"(first), {b} as the laboratory reports it" in whole


def test_a_stop_in_one_entry_is_said() -> None:
    stopped = plain(patient={**PLAIN["patient"], "weight": "6 kg", "age": "3 months"})
    found = compare(plain(proposed=ASKED), stopped)
    assert [d.where for d in found.differences] == ["Patient, age", "Patient, weight", "Proposed regimen 1"]
    assert any(e.startswith("No forecast (second): ") for e in found.effects)
    assert any(e.endswith("(first).") for e in found.effects)
    assert "it cannot stand alone in the first entry (Weight: " in found.differences[1].effect


@pytest.mark.slow
def test_too_many_differences_are_not_tried_one_by_one() -> None:
    other = plain(
        patient={"age": "54 years", "sex": "male", "weight": "66 kg", "weight_basis": "estimated", "height": "156 cm"},
        context={"valproate": "unknown", "tube_feed": "unknown"},
    )
    found = compare(plain(), other)
    assert len(found.differences) == 7
    assert {d.effect for d in found.differences} == {""}
    assert "More than 6 differences: what each does alone was not tried." in found.text()
    assert found.effects


def test_the_command_has_status_0_1_and_2(tmp_path: Path) -> None:
    from tests.unit.test_cli import run

    files = [tmp_path / name for name in ("a.json", "b.json", "c.json", "d.json")]
    files[0].write_text(json.dumps(PLAIN))
    files[1].write_text(json.dumps({**PLAIN, "comment": "typed again"}))
    files[2].write_text(json.dumps({**PLAIN, "levels": levels("8 mg/L", "18 mg/L")}))
    files[3].write_text("{")
    same = run("compare", str(files[0]), str(files[1]))
    assert (same.returncode, same.stderr) == (0, "")
    assert "agree in every field" in same.stdout
    other = run("compare", str(files[0]), str(files[2]), "--format", "json")
    assert other.returncode == 1, other.stderr
    data = json.loads(other.stdout)
    assert data["outcome"] == "different"
    assert [(d["where"], d["first"], d["second"]) for d in data["differences"]] == [
        ("Level 2, value", "20 mg/L", "18 mg/L")
    ]
    assert all(d["effect_alone"] for d in data["differences"])
    broken = run("compare", str(files[0]), str(files[3]))
    assert (broken.returncode, broken.stdout) == (2, "")
    assert "line 1" in broken.stderr
