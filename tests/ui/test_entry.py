"""Fields and case files: nothing typed is changed, nothing opened is lost, every problem finds its field."""

from __future__ import annotations

import pytest
from pkcalc_form.entry import case_of, emptied, field_of, fields_of, joined, parted
from pkcalc_form.spoken import take_apart

from pkcalc.case import CaseFile, DialysisFile, check_case, dump_case_file, parse_case_text
from pkcalc.demos import demonstrations
from pkcalc.errors import CaseError


@pytest.mark.parametrize("demo", demonstrations(), ids=lambda d: d.name)
def test_a_demonstration_goes_through_the_fields_unchanged(demo: object) -> None:
    file = parse_case_text(demo.text)  # type: ignore[attr-defined]
    assert dump_case_file(case_of(fields_of(file)).file) == dump_case_file(file)


FULL = """
{"pkcalc_case": 1, "drug": "phenytoin", "comment": "kept", "label": "bed 4", "question": "why?", "now": "2026-03-30 10:00",
 "patient": {"age": "8 months", "weight": "18 lb", "height": "27 in", "sex": "female", "weight_basis": "estimated"},
 "albumin": {"value": "2.9 g/dL", "taken": "2026-03-29 06:00", "method": "BCG", "after_infusion": "no"},
 "context": {"valproate": "unknown", "interacting_change": {"answer": "yes", "since": "2026-03-01", "detail": "rifampicin"}},
 "doses": [
  {"form": "injection", "amount": "400 mg", "at": "2026-03-01 10:00", "over": "30 min", "source": "stated", "confirmed": "yes"},
  {"form": "suspension", "daily": [{"time": "08:00", "amount": "50 mg"}, {"time": "20:00", "amount": "60 mg", "form": "chewable-tablet"}],
   "from": "2026-03-01 20:00", "until": "2026-03-20 08:00", "missed": ["2026-03-03 08:00", "2026-03-04 20:00"], "comment": "kept too"},
  {"form": "suspension", "amount": "60 mg", "every": "12 h", "for_about": "3 months", "given_by": "carer"}],
 "levels": [
  {"value": "<2.5 mg/L", "kind": "total", "drawn": "2026-03-20 07:00", "sample": "gel tube", "comment": "and this"},
  {"value": "12 mg/L", "kind": "normalised", "normalised_by": "laboratory", "on_dose": 3, "other_levels": {"valproate": "60 mg/L"},
   "albumin": {"value": "30 g/L", "taken": "2026-03-20 07:00", "method": "BCP"}}],
 "target": {"low": "8 mg/L", "high": "12 mg/L", "kind": "free", "reason": "elderly"}, "aim": "10 mg/L",
 "proposed": [{"form": "suspension", "amount": "70 mg", "every": "12 h"}],
 "population": "teaching", "method": "whole record", "plan": {"shelf": "united-states", "products": ["suspension-125"], "largest_step": "30 mg/day"},
 "chosen": {"words": "as now"}}
"""


def test_a_case_with_everything_goes_through_the_fields_unchanged() -> None:
    file = parse_case_text(FULL)
    assert dump_case_file(case_of(fields_of(file)).file) == dump_case_file(file)


def test_number_and_unit_are_joined_and_never_converted() -> None:
    assert joined("8", "mg/L") == "8 mg/L"
    assert joined("8 mg/L", "") == "8 mg/L"
    assert joined("8 mg/L", "mg/L") == "8 mg/L"
    assert joined("8 mg/L", "umol/L") == "8 mg/L umol/L"  # two units: the core refuses it
    assert joined("", "mg/L") == ""
    assert parted("<2.5 mg/L", ("mg/L",)) == ("<2.5", "mg/L")
    assert parted("12,5 mg/L", ("mg/L",)) == ("12,5", "mg/L")
    assert parted("8 MG/L", ("mg/L",)) == ("8 MG/L", None)


@pytest.mark.parametrize(
    ("said", "amount", "every"),
    [
        ("300 mg daily", "300 mg", "24 h"),
        ("300 mg once daily", "300 mg", "24 h"),
        ("300 mg/day", "300 mg", "24 h"),
        ("150 mg every 12 h", "150 mg", "12 h"),
        ("150 mg twice daily", "150 mg", "12 h"),
        ("100 mg three times a day", "100 mg", "8 h"),
        ("400 mg every other day", "400 mg", "48 h"),
        ("100 mg PE every 8 hours", "100 mg PE", "8 h"),
        ("1,000 mg daily", "1,000 mg", "24 h"),
    ],
)
def test_a_regimen_as_said(said: str, amount: str, every: str) -> None:
    found = take_apart(said)
    assert (found.amount, found.every, found.unclear) == (amount, every, "")


def test_times_of_day_single_doses_and_infusions_as_said() -> None:
    timed = take_apart("200 mg at 08:00 and 100 mg at 21:00")
    assert [(d.amount, d.time) for d in timed.daily] == [("200 mg", "08:00"), ("100 mg", "21:00")]
    once = take_apart("1,000 mg once over 30 min")
    assert (once.once, once.amount, once.over) == (True, "1,000 mg", "30 min")
    assert take_apart("7 mg/h").rate == "7 mg/h"


@pytest.mark.parametrize(
    ("said", "unclear", "fix"),
    [
        (
            "300 mg",
            'it is not clear how often "300 mg" is given',
            'Add "daily", "every 12 h", "at 21:00" or "once"',
        ),
        (
            "300 mg qd",
            'the abbreviation "qd" was given',
            'Abbreviations are misread: write "daily" or "every 12 h" in full',
        ),
        (
            "200 mg + 100 mg",
            "the doses have no times",
            'Give each its time: "200 mg at 08:00 + 100 mg at 21:00"',
        ),
        (
            "200 mg at 08:00 + 100 mg",
            "only some of the doses have a time",
            'Give each its time: "200 mg at 08:00 + 100 mg at 21:00"',
        ),
        (
            "200 mg + 100 mg every 12 h",
            "several amounts and an interval were both given",
            "Give the amount of one dose",
        ),
        ("200 mg at 08:00 every 12 h", "it is not clear", ""),
    ],
)
def test_unclear_wording_is_said_and_mended(said: str, unclear: str, fix: str) -> None:
    found = take_apart(said)
    if not fix:
        assert found.unclear or not found.amount
        return
    assert (found.unclear, found.fix) == (unclear, fix)


def test_every_problem_of_a_field_finds_its_field() -> None:
    values = fields_of(parse_case_text(FULL)) | {
        "now": "03/04/2026",
        "age": "x",
        "weight": "x",
        "height": "x",
        "albumin": "x",
        "albumin_taken": "x",
        "dose.1.said": "4,5 mg once",
        "dose.2.from": "x",
        "dose.2.missed": "x",
        "dose.3.form": "capsule",
        "dose.3.for_about": "x",
        "level.1.value": "x",
        "level.1.drawn": "x",
        "level.2.normalised_by": "",
        "level.2.on_dose": "9",
        "level.2.other.valproate": "x",
        "level.2.albumin": "x",
        "target_low": "x",
        "aim": "x",
        "own.1.form": "x",
        "largest_step": "x",
        "products": ["x"],
        "population": "x",
        "ctx.interacting_change.since": "x",
    }
    entry = case_of(values)
    with pytest.raises(CaseError) as caught:
        check_case(entry.file)
    places = {field_of(p.where, entry) for p in caught.value.problems}
    wanted = {k for k, v in values.items() if v in (["x"], "x", "03/04/2026", "4,5 mg once", "9", "capsule")}
    wanted = {"ctx.interacting_change" if k == "ctx.interacting_change.since" else k for k in wanted}
    assert wanted <= places | {"level.2.normalised_by"}
    assert "level.2.normalised_by" in places


def test_every_field_of_a_case_can_be_emptied() -> None:
    file = parse_case_text(FULL).model_copy(update={"dialysis": (DialysisFile.model_validate({"from": "2026-03-01"}),)})
    values = fields_of(file)
    plain = {k for k in values if not k.endswith((".base", "_rows")) and k not in ("base", "demonstration")}
    assert set(emptied(values)) == plain
    left = case_of(values | emptied(values) | {"base": None, "demonstration": None, "dialysis.1.base": None}).file
    assert (left.doses, left.levels, left.dialysis, left.proposed) == ((), (), (), ())
    assert left == CaseFile(pkcalc_case=1, drug="")


def test_blank_rows_are_not_part_of_the_case() -> None:
    entry = case_of({"drug": "phenytoin", "dose_rows": [1, 2, 3], "dose.2.said": "300 mg daily", "dose.2.form": "acid"})
    assert entry.rows["dose"] == (2,)
    assert field_of("Dose line 1, amount", entry) == "dose.2.said"


def test_pasted_rows_without_names_are_single_doses() -> None:
    rows = "2026-03-01 21:00\t300 mg\n2026-03-02 21:00\t300 mg\n"
    entry = case_of({"drug": "phenytoin", "pasted": rows, "pasted_form": "extended-capsule"})
    assert [(d.at, d.amount, d.form) for d in entry.file.doses] == [
        ("2026-03-01 21:00", "300 mg", "extended-capsule"),
        ("2026-03-02 21:00", "300 mg", "extended-capsule"),
    ]
    assert entry.problems == ()
    own = case_of({"drug": "phenytoin", "pasted": "2026-03-02 21:00;300 mg;suspension", "pasted_form": "acid"})
    assert [d.form for d in own.file.doses] == ["suspension"]


def test_a_pasted_row_of_another_width_is_named() -> None:
    rows = "2026-03-01 21:00\t300 mg\nbroken\n"
    entry = case_of({"drug": "phenytoin", "pasted": rows, "pasted_form": "extended-capsule"})
    assert entry.file.doses == ()
    assert [p.text for p in entry.problems] == [
        "Pasted doses, row 2: it has 1 cell. Allowed: 2, as the first row has. Put a cell that holds a comma or "
        "semicolon in quotation marks."
    ]


def test_more_rows_than_the_page_takes_are_refused() -> None:
    entry = case_of({"pasted": "2026-03-01 21:00\t300 mg\n" * 1001, "pasted_form": "acid"})
    assert [p.text for p in entry.problems] == [
        "Pasted doses: 1,001 rows were given. Allowed: at most 1,000. Paste fewer rows."
    ]


def test_the_problem_of_a_pasted_line_names_its_row_after_typed_lines() -> None:
    values = {"drug": "phenytoin", "dose_rows": [1], "dose.1.said": "300 mg daily", "dose.1.form": "acid"}
    rows = "At\tAmount\tEvery\tFrom\tForm\n\t300 mg\t24 h\t2026-03-01 21:00\tacid\n\t3OO mg\t24 h\t2026-03-09\tacid"
    entry = case_of(values | {"pasted": rows})
    with pytest.raises(CaseError) as caught:
        check_case(entry.file)
    found = [entry.pasted.placed(p, 1) for p in caught.value.problems]
    assert {field_of(p.where, entry) for p in found} == {"pasted"}
    assert [p.where for p in found] == ["Pasted doses, row 3, from", "Pasted doses, row 3, amount"]


def test_an_unknown_question_of_a_case_is_kept() -> None:
    file = CaseFile(pkcalc_case=1, drug="phenytoin", context={"not_ours": "yes"})
    assert case_of(fields_of(file)).file.context == {"not_ours": "yes"}
