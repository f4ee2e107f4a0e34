"""The pair of CSV files: what is read, and every refusal with its row."""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pkcalc import spreadsheet
from pkcalc.case import check_case, read_case_text
from pkcalc.errors import CaseError
from pkcalc.spreadsheet import from_pair, load_pair

DOSES = """form,amount,unit,every,from,until,given_by
extended-capsule,300,mg,24 h,2026-08-20 21:00,2026-09-15 12:00,nurse
extended-capsule,350,mg,24 h,2026-09-15 21:00,,nurse
"""
LEVELS = """value,unit,kind,drawn,albumin
8,mg/L,total,2026-09-15 07:00,29 g/L
79.3,umol/L,total,2026-12-01 07:00,
"""


def problems(doses: str | bytes = DOSES, levels: str | bytes = LEVELS) -> list[str]:
    data = [x.encode() if isinstance(x, str) else x for x in (doses, levels)]
    with pytest.raises(CaseError) as refusal:
        from_pair(*data, drug="phenytoin")
    return [p.text for p in refusal.value.problems]


def test_a_pair_is_read() -> None:
    file = from_pair(DOSES.encode(), LEVELS.encode(), drug="phenytoin", patient={"weight": "60 kg", "age": ""})
    case = check_case(file)
    assert [c.regimen.labelled_mg_per_day() for c in case.courses if c.regimen] == [300, 350]
    assert case.courses[0].given_by == "nurse"
    assert case.courses[1].end is None
    assert [x.typed.text for x in case.levels] == ["8 mg/L", "79.3 umol/L"]
    assert case.levels[0].albumin is not None
    assert case.levels[0].albumin.g_per_L == 29
    assert case.levels[1].albumin is None
    assert (case.patient.weight_kg, case.patient.age_years) == (60, None)


def test_semicolons_quotes_windows_line_ends_and_a_byte_order_mark() -> None:
    doses = "\ufeff" + DOSES.replace(",", ";").replace("\n", "\r\n").replace("300;mg", '"300";"mg"')
    same = from_pair(doses.encode(), LEVELS.encode(), drug="phenytoin")
    assert same == from_pair(DOSES.encode(), LEVELS.encode(), drug="phenytoin")


def test_single_doses_infusions_missed_doses_and_units_in_the_value() -> None:
    doses = (
        "form,amount,at,over,rate,from,until,every,missed,source,confirmed\n"
        "injection,1 g,2026-08-20 21:00,30 min,,,,,,,\n"
        "injection,,,,50 mg/h,2026-08-21 21:00,2026-08-21 23:00,,,,\n"
        "sodium,300 mg,,,,2026-08-22 21:00,,24 h,2026-08-23 21:00|25 Aug 2026 21:00,ordered,yes\n"
    )
    levels = "value,kind,drawn\n<2.5 mg/L,total,30 Aug 2026 07:00\n"
    case = check_case(from_pair(doses.encode(), levels.encode(), drug="phenytoin"))
    assert case.courses[0].single is not None
    assert (case.courses[0].single.labelled_mg, case.courses[0].single.over_h) == (1000, 0.5)
    assert case.courses[1].rate_mg_per_day == 1200
    assert len(case.courses[2].missed) == 2
    assert case.courses[2].counts_as_given
    assert case.levels[0].censored == "below"


@pytest.mark.parametrize("cell", ["=1+1", "+300", "-300", "@SUM(A1)", "=cmd|' /C calc'!A0", "\t=1", " =1", "\uff1d1"])
def test_formulas_are_refused(cell: str) -> None:
    levels = LEVELS.replace("79.3", '"' + cell.replace('"', '""') + '"')
    (found,) = problems(levels=levels)
    assert found == (
        f'CSV file of levels, row 3, value: "{cell.replace(chr(9), "?")}" was given. Allowed: a cell that does not '
        "start with = + - or @. A spreadsheet would run it as a formula: enter the plain value, or leave the cell "
        "empty."
    )


def test_every_problem_of_both_files_comes_at_once_with_its_row() -> None:
    found = problems(DOSES.replace("extended-capsule,350", ",=350"), LEVELS.replace("total,2026-12", "whole,2026-12"))
    assert found == [
        "CSV file of doses, row 3, form: nothing was given. Allowed: a value. Fill it in.",
        'CSV file of doses, row 3, amount: "=350" was given. Allowed: a cell that does not start with = + - or @. '
        "A spreadsheet would run it as a formula: enter the plain value, or leave the cell empty.",
        'CSV file of levels, row 3, kind: "whole" was given. Allowed: total, free, normalised. Choose one of them.',
    ]


def test_values_are_read_as_strictly_as_in_a_case_file_and_keep_their_row() -> None:
    found = problems(
        DOSES.replace("extended-capsule,300", "\nsalty,300").replace("2026-09-15 21:00", "03/04/2026"),
        LEVELS.replace("8,mg/L", "800,mg/L").replace("79.3,umol/L", "79.3,MG/L"),
    )
    assert len(found) == 4
    assert found[0].startswith('CSV file of doses, row 3, form: "salty" was given.')
    assert found[1].startswith('CSV file of doses, row 4, from: "03/04/2026" was given.')
    assert found[2].startswith("CSV file of levels, row 2: 800 mg/L was given.")
    assert found[3].startswith('CSV file of levels, row 3: the unit "MG/L" was given.')


@pytest.mark.parametrize(
    ("levels", "message"),
    [
        ("", "CSV file of levels: it is empty. Allowed: column names and rows. Export it again."),
        ("value,kind,drawn\n", "CSV file of levels: it has no row under the column names. Allowed: at least one row. Add the rows."),
        ("value\n8\n", "CSV file of levels, row 1: the row of column names has neither commas nor semicolons. Allowed: commas, or semicolons. Export it as CSV, with the column names in the first row."),
        ("value;kind,drawn\n8;total,x\n", "CSV file of levels, row 1: the row of column names has both commas and semicolons. Allowed: commas, or semicolons. Export it as CSV, with the column names in the first row."),
        ("value\tkind\tdrawn\n", "CSV file of levels, row 1: the row of column names has tabs. Allowed: commas, or semicolons. Export it as CSV, with the column names in the first row."),
        ("value,kind\n8 mg/L,total\n", 'CSV file of levels, row 1: the column "drawn" is missing. Allowed: it must be there. Add it.'),
        ("value,kind,drawn,value\n8,total,x,9\n", 'CSV file of levels, row 1: the column "value" stands twice. Allowed: each column once. Remove one.'),
        ("value,kind,drawn,Albumn\n8,total,x,\n", 'CSV file of levels, row 1: the column "Albumn" is not known. Allowed: value, unit, kind, drawn, normalised_by, albumin, albumin_taken, sample. Did you mean "albumin"?'),
        ("value,kind,drawn\n8,5 mg/L,total,2026-12-01 07:00\n", "CSV file of levels, row 2: it has 4 cells. Allowed: 3, as the first row has. Put a cell that holds a comma or semicolon in quotation marks."),
        ('value,kind,drawn\n"8 mg/L,total,x\n', 'CSV file of levels, row 2: a quotation mark is not closed, or stands inside a cell. Allowed: cells such as 300 or "300 mg". Correct the quotation marks.'),
        ('value,kind,drawn\n8 mg/L,total,"' + "x" * 200_000 + '"\n', "CSV file of levels, row 2: a cell is far too long. Allowed: at most 200 characters. Shorten it."),
        ("value,kind,drawn\n8 mg/L,total," + "x" * 201 + "\n", "CSV file of levels, row 2, drawn: the text is too long or has more than one line. Allowed: at most 200 characters. Shorten it."),
        ("value;kind;drawn\n8,5 mg/L;total;2026-12-01 07:00\n", 'CSV file of levels, row 2: "8,5" was given. Allowed: a plain number such as 12.5 or 1250. A comma can be a decimal point or a thousands mark: write 12.5 or 12500 without a comma.'),
        (b"value,kind,drawn\n8 mg/L,total,\xe9\n", 'CSV file of levels, row 2: byte 31 of the file is not UTF-8 text. Allowed: UTF-8 text. Save it as "CSV UTF-8".'),
        ("value,kind,drawn".encode("utf-16"), 'CSV file of levels: it is not UTF-8 text. Allowed: UTF-8 text. Save it as "CSV UTF-8".'),
        (b"value,kind,drawn\n8\0,total,x\n", 'CSV file of levels: it is not UTF-8 text. Allowed: UTF-8 text. Save it as "CSV UTF-8".'),
        (b" " * 50_000_000, "CSV file of levels: 50 MB were given. Allowed: at most 2 MB. Export one patient only."),
        ("value,kind,drawn\n" + "8 mg/L,total,x\n" * 6000, "CSV file of levels: too many rows. Allowed: at most 5,000. Use repeated doses, or a shorter time."),
    ],
    ids=range(18),
)  # fmt: skip
def test_wrong_files_are_refused_in_words(levels: str | bytes, message: str) -> None:
    assert problems(levels=levels) == [message]


def test_a_cell_of_several_lines_is_refused_and_the_rows_after_it_keep_their_numbers() -> None:
    found = problems(levels='value,kind,drawn\n"8\nmg/L",total,x\n8 mg/L,total,=1\n')
    assert found[0].startswith("CSV file of levels, row 2, value: the text is too long or has more than one line.")
    assert found[1].startswith('CSV file of levels, row 4, drawn: "=1" was given.')


@given(
    rows=st.lists(
        st.tuples(st.integers(1, 1600), st.integers(1, 12), st.integers(1, 28), st.integers(0, 23)),
        min_size=1,
        max_size=20,
        unique_by=lambda r: r[1:],
    ),
    mark=st.sampled_from([",", ";"]),
)
def test_what_is_written_is_what_is_read(rows: list[tuple[int, int, int, int]], mark: str) -> None:
    lines = [["form", "amount", "unit", "at"]]
    lines += [["sodium", str(mg), "mg", f"2026-{month:02d}-{day:02d} {hour:02d}:00"] for mg, month, day, hour in rows]
    text = "\n".join(mark.join(line) for line in lines)
    file = from_pair(text.encode(), LEVELS.encode(), drug="phenytoin")
    assert [(d.amount, d.at) for d in file.doses] == [(f"{line[1]} mg", line[3]) for line in lines[1:]]


@given(data=st.binary(max_size=300))
def test_any_bytes_end_in_a_case_or_in_words(data: bytes) -> None:
    try:
        from_pair(data, LEVELS.encode(), drug="phenytoin")
    except CaseError as error:
        texts = [p.text for p in error.problems]
    else:
        return
    assert texts
    assert all(texts)


def test_the_command(tmp_path: Path) -> None:
    from tests.unit.test_cli import run

    doses, levels = tmp_path / "doses.csv", tmp_path / "levels.csv"
    doses.write_text(DOSES)
    levels.write_text(LEVELS)
    done = run("from-csv", str(doses), str(levels), "--weight", "60 kg")
    assert done.returncode == 0, done.stderr
    assert read_case_text(done.stdout).patient.weight_kg == 60
    assert load_pair(doses, levels, drug="phenytoin", patient={"weight": "60 kg"}) == read_case_text(done.stdout).file
    levels.write_text(LEVELS.replace("79.3", "=79.3"))
    done = run("from-csv", str(doses), str(levels), "--format", "json")
    assert done.returncode == 2
    data: dict[str, Any] = json.loads(done.stdout)
    assert [p["where"] for p in data["problems"]] == ["CSV file of levels, row 3, value"]


def test_every_column_is_documented_and_the_command_prints_it() -> None:
    from tests.unit.test_cli import run

    done = run("from-csv", "--columns")
    assert (done.returncode, done.stderr) == (0, "")
    assert done.stdout == spreadsheet.COLUMNS
    doses, levels = spreadsheet.COLUMNS.split("Levels. Each row")
    for known, text in ((spreadsheet.DOSE_COLUMNS, doses), (spreadsheet.LEVEL_COLUMNS, levels)):
        for column in known:
            assert re.search(rf"(?m)(?:^  |; ){column}[: ]", text), column
