"""A pair of CSV files, doses and levels, into a case file; every problem with its row.

What the columns are stands in `COLUMNS`, which `pkcalc from-csv --columns` prints.

Rows of doses copied straight out of a spreadsheet (`pasted_doses`) are read in the same way, with tabs between the
cells, and may go without column names where they hold single doses: time, amount and, where there is a third, form.
"""

from __future__ import annotations

import csv
import difflib
import io
import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from pkcalc.case import CaseFile, DoseFile, check_case, parse_case_text
from pkcalc.errors import CaseError, Problem

#: The two files, for a person.
COLUMNS = """\
Both files have a first row of column names, in any order; names not listed below are refused.

Doses. Each row is one dose (`at`), a repeated dose (`every`, `from`, `until`) or an infusion (`rate`, `from`,
`until`), exactly one of the three:
  form      a form of the drug (pkcalc drugs NAME); required, there is no default
  product   a liquid product of the drug, where amount or rate is in mL
  amount    the number; unit: mg, g, mg PE or mL; or both in amount ("300 mg") with the column unit left out
  at        date and time of a single dose, 2026-03-04 21:00 or 4 Mar 2026 21:00
  over      infusion time of a single dose, "30 min"
  every     interval of a repeated dose, "24 h"
  rate      of an infusion, "50 mg/h"
  from      date and time of the first dose
  until     date and time after which no dose was given; empty: still going on
  missed    date and time of doses not given, with | between them
  source    given, ordered or stated; empty: given
  confirmed yes, no or unknown, for ordered and stated
  given_by  nurse, carer, self or unknown; empty: unknown
Levels. Each row is one reported level:
  value     as reported, also "<2.5"; unit: mg/L, mcg/mL or umol/L; or both in value ("8 mg/L")
  kind      total, free or normalised; required
  drawn     date and time of the draw; required
  normalised_by  who normalised it, for kind normalised
  albumin   the number with its unit, "29 g/L", of the same sample; albumin_taken: its date and time
  sample    serum, plasma, gel tube or unknown; empty: unknown

Cells are parted by commas or by semicolons, whichever the first row uses; never by both. Numbers have a
decimal point in either case. UTF-8 only. A cell that starts with = + - or @ is refused: a spreadsheet would run
it as a formula.
"""

MAX_BYTES = 2_000_000
MAX_ROWS = 5_000
MAX_CELL = 200
PASTED = "Pasted doses"

DOSE_COLUMNS = (
    "form",
    "product",
    "amount",
    "unit",
    "at",
    "over",
    "every",
    "rate",
    "from",
    "until",
    "missed",
    "source",
    "confirmed",
    "given_by",
)
LEVEL_COLUMNS = ("value", "unit", "kind", "drawn", "normalised_by", "albumin", "albumin_taken", "sample")
SINGLE_COLUMNS = ("at", "amount", "form")
NEEDED = {"doses": ("form",), "levels": ("value", "kind", "drawn")}

WORDS = {
    "source": ("given", "ordered", "stated"),
    "confirmed": ("yes", "no", "unknown"),
    "given_by": ("nurse", "carer", "self", "unknown"),
    "kind": ("total", "free", "normalised"),
    "sample": ("serum", "plasma", "gel tube", "unknown"),
}

#: What a spreadsheet takes for the start of a formula, in narrow and wide characters.
_FORMULA = ("=", "+", "-", "@", "\uff1d", "\uff0b", "\uff0d", "\uff20", "\t", "\r")


@dataclass(frozen=True)
class _Row:
    """One row of cells by column, with its row in the file (the row of names is 1)."""

    number: int
    cells: Mapping[str, str]


def load_pair(
    doses: str | Path, levels: str | Path, *, drug: str, patient: Mapping[str, str] | None = None
) -> CaseFile:
    """The two files -> case file that can be run; CaseError with every problem of both files."""
    return from_pair(_bytes(doses), _bytes(levels), drug=drug, patient=patient)


def from_pair(doses: bytes, levels: bytes, *, drug: str, patient: Mapping[str, str] | None = None) -> CaseFile:
    """The contents of the two files -> case file that can be run; CaseError with every problem of both.

    patient: fields of the case file's patient that a CSV export does not hold (weight, age, sex).
    """
    problems: list[Problem] = []
    dose_rows = _rows(doses, "doses", DOSE_COLUMNS, problems)
    level_rows = _rows(levels, "levels", LEVEL_COLUMNS, problems)
    if problems:
        raise CaseError(problems)
    data: dict[str, Any] = {
        "pkcalc_case": 1,
        "comment": "Read from a pair of CSV files. Check it against the chart.",
        "drug": drug,
        "doses": [_dose(row) for row in dose_rows],
        "levels": [_level(row) for row in level_rows],
    }
    if patient:
        data["patient"] = {k: v for k, v in patient.items() if v}
    try:
        file = parse_case_text(json.dumps(data))
        check_case(file)
    except CaseError as error:
        rows_of = {
            "Dose line": ("CSV file of doses", [row.number for row in dose_rows]),
            "Level": ("CSV file of levels", [row.number for row in level_rows]),
        }
        raise CaseError(_with_row(p, rows_of) for p in error.problems) from None
    return file


@dataclass(frozen=True)
class Pasted:
    """Dose lines read from pasted rows, each with the row it came from, and everything that is wrong."""

    doses: tuple[DoseFile, ...] = ()
    rows: tuple[int, ...] = ()
    problems: tuple[Problem, ...] = ()

    def placed(self, problem: Problem, before: int) -> Problem:
        """A problem of a case in which these lines stand after `before` others, with its pasted row."""
        return _with_row(problem, {"Dose line": (PASTED, (0,) * before + self.rows)})


def pasted_doses(text: str, *, form: str = "", most: int = MAX_ROWS) -> Pasted:
    """Rows copied out of a spreadsheet -> dose lines.

    The first row names the columns, in any order and in capitals or not. Where it holds a figure there are no names,
    and the columns are time, amount and, where there is a third, form. form: for the rows that name none.
    """
    text = text.replace("\r\n", "\n").strip("\n")
    first = text.split("\n", 1)[0]
    mark = next((m for m in "\t;," if m in first), "\t")
    problems: list[Problem] = []
    header: list[str] | None = None
    if any(c.isdigit() for c in first):
        header = list(SINGLE_COLUMNS[: 3 if first.count(mark) > 1 else 2])
    else:
        names = mark.join(c.strip().casefold().replace(" ", "_") for c in first.split(mark))
        text = names + text[len(first) :]
    rows = _table(text, PASTED, mark, DOSE_COLUMNS, () if form else NEEDED["doses"], problems, header)
    if len(rows) > most:
        problems.append(Problem(PASTED, f"{len(rows):,} rows were given", f"at most {most:,}", "Paste fewer rows"))
    if problems:
        return Pasted(problems=tuple(problems))
    data = {"pkcalc_case": 1, "drug": "", "doses": [{"form": form} | _dose(row) for row in rows]}
    found = Pasted(rows=tuple(row.number for row in rows))
    try:
        return Pasted(parse_case_text(json.dumps(data)).doses, found.rows)
    except CaseError as error:
        return Pasted(problems=tuple(found.placed(p, 0) for p in error.problems))


def _bytes(path: str | Path) -> bytes:
    file = Path(path)
    try:
        size = file.stat().st_size
        if size > MAX_BYTES:
            raise CaseError(_too_large(f"CSV file {file.name}", size))
        return file.read_bytes()
    except OSError as error:
        reason = (error.strerror or "it cannot be read").lower()
        raise CaseError(
            Problem(
                f"CSV file {file.name}",
                f"the file could not be opened ({reason})",
                "",
                "Check name and folder",
            )
        ) from None


def _too_large(where: str, size: int) -> Problem:
    return Problem(
        where,
        f"{size / 1e6:,.0f} MB were given",
        f"at most {MAX_BYTES / 1e6:.0f} MB",
        "Export one patient only",
    )


def _rows(data: bytes, name: str, columns: tuple[str, ...], problems: list[Problem]) -> list[_Row]:
    """The rows of one file; what is wrong with it goes to problems."""
    where = f"CSV file of {name}"
    text = _text(data, where, problems)
    if text is None:
        return []
    mark = _mark(text, where, problems)
    return _table(text, where, mark, columns, NEEDED[name], problems) if mark else []


def _mark(text: str, where: str, problems: list[Problem]) -> str:
    """What parts the cells of a file; "" where that is not clear, which goes to problems."""
    first = text.split("\n", 1)[0]
    marks = [m for m in ",;" if m in first]
    if len(marks) != 1 or "\t" in first:
        found = "both commas and semicolons" if len(marks) == 2 else "neither commas nor semicolons"
        problems.append(
            Problem(
                f"{where}, row 1",
                f"the row of column names has {found if chr(9) not in first else 'tabs'}",
                "commas, or semicolons",
                "Export it as CSV, with the column names in the first row",
            )
        )
        return ""
    return marks[0]


def _table(
    text: str,
    where: str,
    mark: str,
    columns: tuple[str, ...],
    needed: tuple[str, ...],
    problems: list[Problem],
    header: list[str] | None = None,
) -> list[_Row]:
    """Column names, unless they are given as header, and the rows; what is wrong with them goes to problems."""
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=mark, strict=True)
    found_rows: list[_Row] = []
    started = 1
    try:
        for cells in reader:
            number, started = started, reader.line_num + 1
            if header is None:
                header = [c.strip() for c in cells]
                if not _header(header, where, columns, needed, problems):
                    return []
            elif any(c.strip() for c in cells):
                row = _row(cells, header, f"{where}, row {number}", number, needed, problems)
                if row is not None:
                    found_rows.append(row)
            if len(found_rows) > MAX_ROWS or len(problems) > MAX_ROWS:
                problems.append(
                    Problem(
                        where,
                        "too many rows",
                        f"at most {MAX_ROWS:,}",
                        "Use repeated doses, or a shorter time",
                    )
                )
                return []
    except csv.Error as error:
        if "field limit" in str(error):
            problems.append(
                Problem(
                    f"{where}, row {started}", "a cell is far too long", f"at most {MAX_CELL} characters", "Shorten it"
                )
            )
            return []
        problems.append(
            Problem(
                f"{where}, row {started}",
                "a quotation mark is not closed, or stands inside a cell",
                'cells such as 300 or "300 mg"',
                "Correct the quotation marks",
            )
        )
        return []
    if not found_rows and not problems:
        problems.append(Problem(where, "it has no row under the column names", "at least one row", "Add the rows"))
    return found_rows


def _text(data: bytes, where: str, problems: list[Problem]) -> str | None:
    if len(data) > MAX_BYTES:
        problems.append(_too_large(where, len(data)))
        return None
    if data[:2] in (b"\xff\xfe", b"\xfe\xff") or b"\0" in data:
        problems.append(Problem(where, "it is not UTF-8 text", "UTF-8 text", 'Save it as "CSV UTF-8"'))
        return None
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        row = data[: error.start].count(b"\n") + 1
        problems.append(
            Problem(
                f"{where}, row {row}",
                f"byte {error.start + 1} of the file is not UTF-8 text",
                "UTF-8 text",
                'Save it as "CSV UTF-8"',
            )
        )
        return None
    if not text.strip():
        problems.append(Problem(where, "it is empty", "column names and rows", "Export it again"))
        return None
    return text.replace("\r\n", "\n")


def _header(
    header: list[str], where: str, columns: tuple[str, ...], needed: tuple[str, ...], problems: list[Problem]
) -> bool:
    before = len(problems)
    for column in dict.fromkeys(header):
        if column not in columns:
            near = difflib.get_close_matches(column[:40].casefold(), columns, n=1, cutoff=0.5)
            problems.append(
                Problem(
                    f"{where}, row 1",
                    f'the column "{_clip(column)}" is not known',
                    ", ".join(columns),
                    f'Did you mean "{near[0]}"?' if near else "Remove or rename it",
                )
            )
        elif header.count(column) > 1:
            problems.append(
                Problem(f"{where}, row 1", f'the column "{column}" stands twice', "each column once", "Remove one")
            )
    for column in needed:
        if column not in header:
            problems.append(
                Problem(f"{where}, row 1", f'the column "{column}" is missing', "it must be there", "Add it")
            )
    return len(problems) == before


def _row(
    cells: list[str], header: list[str], where: str, number: int, needed: tuple[str, ...], problems: list[Problem]
) -> _Row | None:
    before = len(problems)
    if len(cells) != len(header):
        problems.append(
            Problem(
                where,
                f"it has {len(cells)} cell{'s' if len(cells) != 1 else ''}",
                f"{len(header)}, as the first row has",
                "Put a cell that holds a comma or semicolon in quotation marks",
            )
        )
        return None
    found: dict[str, str] = {}
    for column, cell in zip(header, cells, strict=True):
        place = f"{where}, {column}"
        text = cell.strip()
        if cell.startswith(_FORMULA) or text.startswith(_FORMULA):
            problems.append(
                Problem(
                    place,
                    f'"{_clip(cell)}" was given',
                    "a cell that does not start with = + - or @",
                    "A spreadsheet would run it as a formula: enter the plain value, or leave the cell empty",
                )
            )
        elif len(text) > MAX_CELL or "\n" in cell or "\r" in cell:
            problems.append(
                Problem(
                    place,
                    "the text is too long or has more than one line",
                    f"at most {MAX_CELL} characters",
                    "Shorten it",
                )
            )
        elif text and column in WORDS and text not in WORDS[column]:
            problems.append(
                Problem(place, f'"{_clip(text)}" was given', ", ".join(WORDS[column]), "Choose one of them")
            )
        elif not text and column in needed:
            problems.append(Problem(place, "nothing was given", "a value", "Fill it in"))
        elif text:
            found[column] = text
    return _Row(number, found) if len(problems) == before else None


def _clip(text: str) -> str:
    clean = "".join(c if c.isprintable() else "?" for c in text)
    return clean if len(clean) <= 40 else clean[:40] + "..."


def _joined(cells: Mapping[str, str], column: str) -> str:
    return f"{cells.get(column, '')} {cells['unit']}" if "unit" in cells else cells.get(column, "")


def _dose(row: _Row) -> dict[str, Any]:
    data: dict[str, Any] = {k: v for k, v in row.cells.items() if k not in ("amount", "unit", "missed")}
    if "amount" in row.cells:
        data["amount"] = _joined(row.cells, "amount")
    if "missed" in row.cells:
        data["missed"] = [x.strip() for x in row.cells["missed"].split("|")]
    return data


def _level(row: _Row) -> dict[str, Any]:
    data: dict[str, Any] = {k: row.cells[k] for k in ("kind", "drawn", "normalised_by", "sample") if k in row.cells}
    data["value"] = _joined(row.cells, "value")
    if "albumin" in row.cells:
        data["albumin"] = {"value": row.cells["albumin"], "taken": row.cells.get("albumin_taken", "")}
    return data


def _with_row(problem: Problem, rows_of: Mapping[str, tuple[str, Sequence[int]]]) -> Problem:
    """The problem of a dose line or a level, with the row it came from (0: it came from none).

    rows_of: by kind of line, where its rows stand and the row of each.
    """
    match = re.match(r"(Dose line|Level) (\d+)(.*)", problem.where, re.DOTALL)
    if match is None or match.group(1) not in rows_of:
        return problem
    name, rows = rows_of[match.group(1)]
    line = int(match.group(2))
    row = rows[line - 1] if line <= len(rows) else 0
    if not row:
        return problem
    return Problem(f"{name}, row {row}{match.group(3)}", problem.given, problem.allowed, problem.fix)


__all__ = ["DOSE_COLUMNS", "LEVEL_COLUMNS", "Pasted", "from_pair", "load_pair", "pasted_doses"]
