"""Blind re-entry: every difference found, none invented, and its effect on the forecast."""

from __future__ import annotations

import copy
import json
from datetime import datetime
from pathlib import Path
from typing import Any

import jsonschema
import pytest

from pkcalc import entries, reentry
from pkcalc.case import Case, CaseFile, dump_case, dump_case_file, read_case_text
from pkcalc.consult import Consult, run_consult
from pkcalc.drugs.profile import load_profile
from pkcalc.errors import CaseError
from pkcalc.note.data import note_data
from pkcalc.note.document import compose
from pkcalc.note.html import render_html
from pkcalc.note.schema import note_schema
from pkcalc.note.text import render
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


# keeping it with the case --------------------------------------------------------------------------------

FIRST_TIME, SECOND_TIME = datetime(2026, 12, 1, 11, 5), datetime(2026, 12, 1, 11, 40)
SLIPS = {"patient": {**PLAIN["patient"], "weight": "66 kg"}, "levels": levels("8 mg/L", "<20 mg/L")}


def kept(first: Case, second: Case, at: datetime = FIRST_TIME) -> Case:
    """The first entry with its record, through the text of its file."""
    file = reentry.keep(first, compare(first, second, forecasts=False), at)
    text = dump_case_file(file)
    case = read_case_text(text)
    assert case.file == file
    assert dump_case(case) == text
    assert case.file.model_copy(update={"reentry": None}) == first.file.model_copy(update={"reentry": None})
    return case


def edited(case: Case, **changed: Any) -> Case:
    return read_case_text(json.dumps({**json.loads(dump_case(case)), **changed}))


def test_a_case_without_a_record_says_how_it_is_done() -> None:
    assert entries.standing(plain()) == "not done"
    assert entries.standing_lines(plain()) == (
        "Blind re-entry: not done.",
        "The second pharmacist types weight, doses, levels and dates from the chart without seeing this entry; the "
        "form, or pkcalc compare, lists every difference and can keep in the case file that it was done.",
    )


def test_two_entries_that_agree_are_kept_as_done() -> None:
    case = kept(plain(), plain(doses=doses("0.3 g", "350 mg")))
    assert entries.standing(case) == "done"
    assert entries.standing_lines(case) == (
        "Blind re-entry: done on 1 Dec 2026 11:05, no difference.",
        "Typed again by a second person and compared: drug, time of the consult, patient, albumin, context, doses, "
        "levels, dialysis.",
    )


def test_differences_are_kept_until_the_two_entries_agree() -> None:
    first = kept(plain(), plain(**SLIPS))
    assert entries.standing(first) == "not resolved"
    assert entries.standing_words(first) == (
        "Blind re-entry: done on 1 Dec 2026 11:05, 2 differences, none resolved: look at the chart."
    )
    # the second person's level was right, the weight was a slip of the second entry
    mended = edited(first, levels=SLIPS["levels"])
    assert entries.standing(mended) == "void"
    between = kept(mended, plain(**SLIPS), SECOND_TIME)
    assert entries.standing_lines(between)[0::2] == (
        "Blind re-entry: done on 1 Dec 2026 11:40, 2 differences, 1 of them not resolved: look at the chart.",
        "Differences resolved: Level 2, value.",
    )
    assert entries.standing_lines(between)[-1] == "Differences not resolved: Patient, weight."
    done = kept(between, plain(levels=SLIPS["levels"]), SECOND_TIME)
    assert entries.standing(done) == "done"
    assert entries.standing_words(done) == ("Blind re-entry: done on 1 Dec 2026 11:40, 2 differences, all resolved.")
    assert entries.standing_lines(done)[-1] == "Differences resolved: Patient, weight; Level 2, value."
    # a re-entry that is done is not gone on with: the next one begins anew
    assert kept(done, plain(levels=SLIPS["levels"])).file.reentry.differences == ()  # type: ignore[union-attr]


def test_one_difference_is_told_in_the_singular() -> None:
    slip = plain(levels=SLIPS["levels"])
    first = kept(plain(), slip)
    assert entries.standing_words(first) == (
        "Blind re-entry: done on 1 Dec 2026 11:05, 1 difference, not resolved: look at the chart."
    )
    done = kept(first, plain(), SECOND_TIME)
    assert entries.standing_words(done) == "Blind re-entry: done on 1 Dec 2026 11:40, 1 difference, resolved."


@pytest.mark.parametrize(
    "changed",
    [
        {"drug": "theophylline", "doses": [], "albumin": None, "context": {}},
        {"now": "2026-12-01 10:01"},
        {"patient": {**PLAIN["patient"], "weight": "60.1 kg"}},
        {"patient": {**PLAIN["patient"], "sex": "male"}},
        {"albumin": {"value": "46 g/L", "taken": "2026-12-01 06:00"}},
        {"albumin": None},
        {"context": {**PLAIN["context"], "valproate": "unknown"}},
        {"context": {**PLAIN["context"], "valproate": {"answer": "no", "since": "3 Apr 2026"}}},
        {"context": {**PLAIN["context"], "hla_b1502": "no"}},
        {"doses": doses("300 mg", "360 mg")},
        {"doses": [{**x, "missed": [f"{x['from'][:8]}{int(x['from'][8:10]) + 1} 21:00"]} for x in PLAIN["doses"]]},
        {"doses": PLAIN["doses"][::-1]},
        {"levels": [*PLAIN["levels"], {"value": "9 mg/L", "kind": "total", "drawn": "2026-11-01 07:00"}]},
        {"levels": [PLAIN["levels"][0], {**PLAIN["levels"][1], "drawn": "2026-12-01 07:01"}]},
        {"levels": [PLAIN["levels"][0], {**PLAIN["levels"][1], "albumin": {"value": "46 g/L"}}]},
        {"levels": [PLAIN["levels"][0], {**PLAIN["levels"][1], "sample": "serum"}]},
    ],
)
def test_any_change_of_what_was_compared_makes_it_void(changed: dict[str, Any]) -> None:
    case = edited(kept(plain(), plain()), **changed)
    assert entries.standing(case) == "void"
    assert entries.standing_words(case) == (
        "Blind re-entry: re-entered on 1 Dec 2026 11:05, but changed since: repeat it."
    )


@pytest.mark.parametrize(
    "changed",
    [
        {"comment": "typed on the ward", "label": "bed 4", "question": "why"},
        {"aim": "14 mg/L", "target": {"low": "8 mg/L", "high": "15 mg/L"}, "method": "two levels"},
        {"proposed": ASKED, "chosen": {"regimen": ASKED[0], "words": "as agreed"}, "plan": {"shelf": "united-states"}},
        {"doses": doses("0.3 g", "350.0 mg")},
        {"patient": {**PLAIN["patient"], "weight": "60.0 kg"}},
    ],
)
def test_what_is_decided_or_written_otherwise_leaves_it_standing(changed: dict[str, Any]) -> None:
    assert entries.standing(edited(kept(plain(), plain()), **changed)) == "done"


def test_questions_that_were_not_answered_again_are_said_and_not_counted() -> None:
    second = edited(plain(), context={})
    found = compare(plain(), second, forecasts=False)
    assert len(found.differences) == len(PLAIN["context"])
    assert found.from_chart == ()
    assert found.verdict == (
        "The two entries agree in everything typed again from the chart. They differ in 14 fields of what is asked, "
        "decided or was not typed again."
    )
    assert "Not typed again in the second entry: context." in found.text()
    case = kept(plain(), second)
    assert entries.standing_lines(case) == (
        "Blind re-entry: done on 1 Dec 2026 11:05, no difference.",
        "Typed again by a second person and compared: drug, time of the consult, patient, albumin, doses, levels, "
        "dialysis.",
        "Not typed again: context.",
    )
    assert entries.standing(edited(case, context={**PLAIN["context"], "valproate": "yes"})) == "done"


def test_what_is_asked_or_decided_is_listed_and_not_counted() -> None:
    found = compare(plain(proposed=ASKED), plain(patient={**PLAIN["patient"], "weight": "66 kg"}), forecasts=False)
    assert [d.part for d in found.differences] == ["patient", None]
    assert found.verdict == (
        "The two entries differ in 2 fields, 1 of them taken from the chart: look at the chart before any number is used."
    )


def test_a_record_of_another_comparison_is_refused() -> None:
    found = compare(plain(), plain(), forecasts=False)
    with pytest.raises(CaseError) as error:
        reentry.keep(plain(aim="14 mg/L"), found, FIRST_TIME)
    assert str(error.value) == (
        "Reentry: the comparison is of another first entry. Allowed: its own. Compare the two entries again."
    )


def test_too_many_differences_are_not_kept() -> None:
    rows = [{"value": f"{i % 30 + 1} mg/L", "kind": "total", "drawn": f"2026-10-{i % 28 + 1:02d} {i // 28:02d}:00"} for i in range(101)]  # fmt: skip
    first, second = plain(levels=rows), plain(levels=[])
    with pytest.raises(CaseError) as error:
        reentry.keep(first, compare(first, second, forecasts=False), FIRST_TIME)
    assert str(error.value) == (
        "Reentry: 101 differences from the chart were found. Allowed: at most 100. Check that both entries are of one "
        "patient, then compare again."
    )


GOOD: dict[str, Any] = {
    "done": "2026-12-01 11:05",
    "compared": ["patient", "doses", "levels"],
    "differences": ["Patient, weight"],
    "facts": "0123456789ab",
}
AGAIN = "Compare the two entries again and keep the new record."


@pytest.mark.parametrize(
    ("changed", "text"),
    [
        ({"done": ""}, f"Reentry, done (line 1): nothing was given. Allowed: date and time of the comparison. {AGAIN}"),
        (
            {"done": "3/4/2026 10:00"},
            'Reentry, done (line 1): "3/4/2026 10:00" was given. Allowed: a date such as 2026-03-04 06:10 or 4 Mar 2026 '
            "06:10. Day and month in figures can be swapped: write the month in words.",
        ),
        (
            {"compared": ["patient"]},
            "Reentry, compared (line 1): doses and levels are not among what was compared. Allowed: at least patient, "
            f"doses and levels. {AGAIN}",
        ),
        (
            {"compared": ["patient", "doses", "levels", "levels"]},
            f"Reentry, compared (line 1): a part stands twice. Allowed: each part once. {AGAIN}",
        ),
        (
            {"left": ["Level 1, value"]},
            'Reentry, left (line 1): "Level 1, value" is left although it is not among the differences. Allowed: places '
            f"that stand under differences too. {AGAIN}",
        ),
        (
            {"differences": ["Age", "Age"]},
            f"Reentry, differences (line 1): a place is empty or stands twice. Allowed: each place once. {AGAIN}",
        ),
        (
            {"facts": "none"},
            f"Reentry, facts (line 1): it is no fingerprint. Allowed: 12 signs of 0 to 9 and a to f. {AGAIN}",
        ),
        (
            {"compared": ["patient", "doses", "levels", "weight"]},
            "Reentry, compared, item 4 (line 1): the word is not understood. Allowed: drug, time of the consult, "
            "patient, albumin, context, doses, levels or dialysis. Choose one of them.",
        ),
        (
            {"checked_by": "x"},
            "Reentry, checked by (line 1): this key is not known. Allowed: compared, differences, done, facts, left. "
            "Remove it.",
        ),
    ],
)
def test_a_record_that_contradicts_itself_is_refused_in_words(changed: dict[str, Any], text: str) -> None:
    with pytest.raises(CaseError) as error:
        read_case_text(json.dumps({**PLAIN, "reentry": {**GOOD, **changed}}))
    assert str(error.value) == text


@pytest.fixture(scope="module")
def noted() -> tuple[Case, Consult]:
    case = kept(plain(), plain(**SLIPS))
    return case, run_consult(case)


def test_every_form_of_the_note_says_whether_it_was_done(noted: tuple[Case, Consult]) -> None:
    case, consult = noted
    words = entries.standing_words(case)
    document = compose(consult)
    assert document.reentry == words
    assert next(s for s in document.sections if s.title == "Blind re-entry").lines == entries.standing_lines(case)
    text = " ".join(render(document).split())
    assert text.count(words) == 3  # annex, block to paste, beside the signatures
    html = " ".join(render_html(consult).split())
    assert html.count(words) == 3
    assert f'<p class="urgent">{words}</p>' in html
    # beside the signatures, on page one
    assert html.index(words) < html.index("Prepared by:") < html.index('class="annex"')
    data = note_data(consult)["blind_reentry"]
    assert data == {
        "standing": "not resolved",
        "words": words,
        "done": "1 Dec 2026 11:05",
        "compared": list(entries.COMPARED),
        "differences": ["Patient, weight", "Level 2, value"],
        "left": ["Patient, weight", "Level 2, value"],
    }
    jsonschema.validate(note_data(consult), note_schema())


def test_the_command_keeps_the_record_in_a_new_file_only(tmp_path: Path) -> None:
    from tests.unit.test_cli import run

    first, second, new = tmp_path / "a.json", tmp_path / "b.json", tmp_path / "new.json"
    first.write_text(json.dumps(PLAIN))
    second.write_text(json.dumps({**PLAIN, "comment": "typed again"}))
    done = run("compare", str(first), str(second), "--keep", str(new))
    assert done.returncode == 0, done.stderr
    assert done.stderr == f"Written: {new}\n"
    case = read_case_text(new.read_text())
    assert entries.standing(case) == "done"
    assert first.read_text() == json.dumps(PLAIN)
    again = run("compare", str(first), str(second), "--keep", str(new))
    assert (again.returncode, again.stdout) == (2, "")
    assert again.stderr == (
        "The input must be mended first:\n- --keep: new.json exists already. Allowed: a file that does not exist yet. "
        "Give another name.\n"
    )
    same = run("compare", str(first), str(first), "--keep", str(tmp_path / "other.json"))
    assert (same.returncode, same.stdout) == (2, "")
    assert same.stderr == (
        "The input must be mended first:\n- --keep: both entries are the same file. Allowed: two entries. Let a second "
        "person type the case again.\n"
    )
    assert not (tmp_path / "other.json").exists()
