"""A department's folder of records, read one patient at a time.

Either three tables (UTF-8, a first row of column names, commas or semicolons, columns in any order):

patients.csv, one row per patient
  patient    the department's own key; never a name, a hospital number or a date of birth
  weight     "70 kg"; without it nothing can be forecast from the population
  age, sex, height, albumin ("29 g/L")   as in a case file; each may be empty
  population a named population of the drug; empty: the site's, else the drug's default
  any question of the case file (renal_failure, pregnancy, ...), answered yes, no or unknown
  group_...  subgroups of the department's own choice, such as group_ward; the report is split by each
doses.csv    patient, and the columns of a CSV file of doses (see `spreadsheet`)
levels.csv   patient, and the columns of a CSV file of levels

or case files (*.json), one per patient, whose key is then the name of the file.

The tables may be sorted in any way. What is kept of them in memory is where each patient's rows lie (24 bytes
per run of rows); the rows themselves are read when the patient's turn comes. Each row stands on one line.
"""

from __future__ import annotations

import csv
import hashlib
import io
import json
import re
from array import array
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

from pkcalc.case import MAX_BYTES, Case, check_case, parse_case_text, read_case_text
from pkcalc.drugs.profile import every_question
from pkcalc.errors import CaseError, Problem, as_typed
from pkcalc.spreadsheet import DOSE_COLUMNS, LEVEL_COLUMNS, from_pair

TABLES = ("patients", "doses", "levels")
KEY = "patient"
GROUP = "group_"
PATIENT_COLUMNS = (KEY, "weight", "age", "sex", "height", "albumin", "population")

#: A folder that holds this file was made by the generator; the report says so.
SYNTHETIC_MARK = "SYNTHETIC.txt"

_LONGEST_LINE = 20_000
_LONGEST_KEY = 60
_STRAYS_SHOWN = 20
_FORMULA = ("=", "+", "-", "@")


@dataclass(frozen=True)
class Raw:
    """One patient as found in the folder, not yet checked.

    number: position in the folder (0 for the first). case: contents of a case file. row: the cells of
    patients.csv. doses, levels: that patient's rows as a CSV file of their own, with the rows they came from.
    problem: why the patient cannot be read at all; empty where it can.
    """

    number: int
    key: str
    case: bytes | None = None
    row: Mapping[str, str] = field(default_factory=dict)
    row_number: int = 0
    doses: bytes = b""
    dose_rows: tuple[int, ...] = ()
    levels: bytes = b""
    level_rows: tuple[int, ...] = ()
    problem: str = ""

    @property
    def groups(self) -> dict[str, str]:
        """The department's own subgroups of this patient."""
        return {k.removeprefix(GROUP): v for k, v in self.row.items() if k.startswith(GROUP) and v}


@dataclass(frozen=True)
class _Table:
    """Where each patient's rows lie: runs of rows, sorted by a hash of the key."""

    path: Path
    header: tuple[str, ...]
    mark: str
    hashes: NDArray[np.uint64]
    starts: NDArray[np.int64]
    rows: NDArray[np.int64]

    @property
    def key_at(self) -> int:
        return self.header.index(KEY)


@dataclass(frozen=True)
class Folder:
    """A department's folder, indexed.

    count: patients. fingerprint: of every byte read. strays: rows that belong to no patient of patients.csv,
    counted; the first of them in words. synthetic: made by the generator.
    """

    path: Path
    kind: str
    count: int
    fingerprint: str
    synthetic: bool
    strays: int = 0
    strays_shown: tuple[str, ...] = ()
    files: tuple[str, ...] = ()
    tables: Mapping[str, _Table] = field(default_factory=dict)
    order: NDArray[np.int64] = field(default_factory=lambda: np.zeros(0, np.int64))

    def patients(self, first: int, last: int) -> Iterator[Raw]:
        """Patients first .. last - 1, in the order of the folder."""
        if self.kind == "case files":
            for number in range(first, min(last, self.count)):
                yield _case_file(self.path / self.files[number], number)
            return
        with (
            self.tables["patients"].path.open("rb") as patients,
            self.tables["doses"].path.open("rb") as doses,
            self.tables["levels"].path.open("rb") as levels,
        ):
            for number in range(first, min(last, self.count)):
                yield self._from_tables(number, patients, doses, levels)

    def _from_tables(self, number: int, patients: BinaryIO, doses: BinaryIO, levels: BinaryIO) -> Raw:
        table = self.tables["patients"]
        at = int(self.order[number])
        patients.seek(int(table.starts[at]))
        line = patients.readline(_LONGEST_LINE)
        row_number = int(table.rows[at])
        where = f"patients.csv, row {row_number}"
        key = _key(line, table.mark, table.key_at)
        try:
            text = line.decode("utf-8").rstrip("\r\n")
            cells = next(csv.reader([text], delimiter=table.mark, strict=True))
        except (UnicodeDecodeError, csv.Error):
            return Raw(number, as_typed(key), problem=f"{where}: the row cannot be read.")
        if len(cells) != len(table.header):
            said = f"{where}: it has {len(cells)} cells, and the row of column names has {len(table.header)}."
            return Raw(number, as_typed(key), problem=said)
        if not key or len(key) > _LONGEST_KEY or key.startswith(_FORMULA) or not key.isprintable():
            said = (
                f"{where}: the key must have 1 to {_LONGEST_KEY} characters that can be seen, and must not start "
                "with = + - or @."
            )
            return Raw(number, as_typed(key), problem=said)
        same = _runs(table, key)
        if len(same) > 1 and at != int(np.min(same)):
            return Raw(number, key, problem=f"{where}: the key stands in an earlier row, too.")
        row = {c: x.strip() for c, x in zip(table.header, cells, strict=True)}
        dose_text, dose_rows = _own_rows(self.tables["doses"], doses, key)
        level_text, level_rows = _own_rows(self.tables["levels"], levels, key)
        if not level_rows or not dose_rows:
            missing = "levels.csv" if not level_rows else "doses.csv"
            return Raw(number, key, row=row, problem=f"{missing} has no row of this patient.")
        return Raw(number, key, None, row, row_number, dose_text, dose_rows, level_text, level_rows)


def open_folder(path: str | Path) -> Folder:
    """Index a folder of tables or case files. CaseError where it holds neither, or a table cannot be used."""
    folder = Path(path)
    if not folder.is_dir():
        raise CaseError(
            Problem(f"Folder {as_typed(folder.name, 80)}", "it is not a folder", "", "Check name and place")
        )
    synthetic = (folder / SYNTHETIC_MARK).is_file()
    present = [name for name in TABLES if (folder / f"{name}.csv").is_file()]
    files = tuple(sorted(p.name for p in folder.glob("*.json")))
    if present and files:
        raise CaseError(
            Problem("Folder", "it holds tables and case files", "tables, or case files", "Put them in two folders")
        )
    if files:
        digest = hashlib.sha256()
        for name in files:
            digest.update(name.encode("utf-8", "surrogateescape"))
            with (folder / name).open("rb") as stream:
                digest.update(stream.read(MAX_BYTES + 1))
        return Folder(folder, "case files", len(files), digest.hexdigest(), synthetic, files=files)
    if len(present) < len(TABLES):
        missing = " and ".join(f"{name}.csv" for name in TABLES if name not in present)
        raise CaseError(
            Problem(
                "Folder",
                f"{missing} not found",
                "patients.csv, doses.csv and levels.csv, or case files (*.json)",
                "The columns stand in pkcalc backtest --help",
            )
        )
    digest = hashlib.sha256()
    tables = {name: _index(folder / f"{name}.csv", name, digest) for name in TABLES}
    order = np.argsort(tables["patients"].starts, kind="stable")
    known = np.unique(tables["patients"].hashes)
    strays = 0
    shown: list[str] = []
    for name in ("doses", "levels"):
        lost = np.flatnonzero(~np.isin(tables[name].hashes, known))
        strays += len(lost)
        for row in np.sort(tables[name].rows[lost])[: _STRAYS_SHOWN - len(shown)]:
            shown.append(f"{name}.csv, from row {int(row)}")
    return Folder(
        folder,
        "tables",
        len(order),
        digest.hexdigest(),
        synthetic,
        strays=strays,
        strays_shown=tuple(shown),
        tables=tables,
        order=order,
    )


def case_of(raw: Raw, drug: str) -> Case:
    """The checked case of one patient; CaseError with every problem and the row it stands in."""
    if raw.problem:
        raise CaseError(Problem("Patient", raw.problem.rstrip("."), "", ""))
    if raw.case is not None:
        return read_case_text(raw.case)
    patient = {k: raw.row.get(k, "") for k in ("weight", "age", "sex", "height")}
    try:
        file = from_pair(raw.doses, raw.levels, drug=drug, patient=patient)
        data: dict[str, Any] = file.model_dump(mode="json", by_alias=True, exclude_defaults=True)
        context = {q: raw.row[q] for q in every_question() if raw.row.get(q)}
        if context:
            data["context"] = context
        if raw.row.get("albumin"):
            data["albumin"] = {"value": raw.row["albumin"]}
        if raw.row.get("population"):
            data["population"] = raw.row["population"]
        return check_case(parse_case_text(json.dumps(data), name=f"patients.csv, row {raw.row_number}"))
    except CaseError as error:
        raise CaseError(_placed(p, raw) for p in error.problems) from None


def _placed(problem: Problem, raw: Raw) -> Problem:
    """The problem with the row of the department's table in place of the patient's own."""
    found = re.match(r"CSV file of (doses|levels), row (\d+)(.*)", problem.where, re.DOTALL)
    if found is None:
        if problem.where.startswith(("CSV file", "patients.csv")):
            return problem
        return Problem(
            f"patients.csv, row {raw.row_number}, {problem.where}", problem.given, problem.allowed, problem.fix
        )
    name, number, rest = found[1], int(found[2]), found[3]
    rows = raw.dose_rows if name == "doses" else raw.level_rows
    if 2 <= number < len(rows) + 2:
        number = rows[number - 2]
    return Problem(f"{name}.csv, row {number}{rest}", problem.given, problem.allowed, problem.fix)


def _case_file(path: Path, number: int) -> Raw:
    key = path.stem
    if len(key) > _LONGEST_KEY or key.startswith(_FORMULA) or not key.isprintable():
        return Raw(number, as_typed(key), problem="The name of the file cannot serve as a key.")
    try:
        with path.open("rb") as stream:
            return Raw(number, key, case=stream.read(MAX_BYTES + 1))
    except OSError:
        return Raw(number, key, problem="The file could not be opened.")


def _index(path: Path, name: str, digest: Any) -> _Table:
    """One pass over a table: the columns, and where each run of rows of one patient begins."""
    hashes, starts, rows = array("Q"), array("q"), array("q")
    with path.open("rb") as stream:
        first = stream.readline(_LONGEST_LINE)
        digest.update(name.encode() + first)
        header, mark = _header(first, name)
        key_at = header.index(KEY)
        offset, number, last = len(first), 1, None
        while line := stream.readline(_LONGEST_LINE):
            digest.update(line)
            begin, offset, number = offset, offset + len(line), number + 1
            while not line.endswith(b"\n") and (rest := stream.readline(_LONGEST_LINE)):
                digest.update(rest)
                offset += len(rest)
                if rest.endswith(b"\n"):
                    break
            if not line.strip():
                continue
            this = _hash(_key(line, mark, key_at))
            # patients.csv: every row is a patient of its own, so that a repeated key is seen
            if this != last or name == "patients":
                hashes.append(this)
                starts.append(begin)
                rows.append(number)
                last = this
    hashed = np.array(hashes, dtype=np.uint64)
    sort = np.argsort(hashed, kind="stable")
    return _Table(
        path,
        header,
        mark,
        hashed[sort],
        np.array(starts, dtype=np.int64)[sort],
        np.array(rows, dtype=np.int64)[sort],
    )


def _header(line: bytes, name: str) -> tuple[tuple[str, ...], str]:
    where = f"{name}.csv, row 1"
    try:
        text = line.decode("utf-8-sig").rstrip("\r\n")
    except UnicodeDecodeError:
        text = "\0"
    if "\0" in text:
        raise CaseError(Problem(where, "it is not UTF-8 text", "UTF-8 text", 'Save it as "CSV UTF-8"'))
    marks = [m for m in ",;" if m in text]
    if len(marks) != 1:
        found = "both commas and semicolons" if marks else "neither commas nor semicolons"
        raise CaseError(
            Problem(
                where,
                f"the row of column names has {found}",
                "commas, or semicolons",
                "Export it as CSV, with the column names in the first row",
            )
        )
    try:
        header = tuple(c.strip() for c in next(csv.reader([text], delimiter=marks[0], strict=True)))
    except csv.Error:
        header = ()
    allowed = {
        "patients": (*PATIENT_COLUMNS, *every_question()),
        "doses": (KEY, *DOSE_COLUMNS),
        "levels": (KEY, *LEVEL_COLUMNS),
    }[name]
    problems = [
        Problem(
            where,
            f'the column "{as_typed(c)}" is not known',
            ", ".join(allowed[: len(PATIENT_COLUMNS)]) + f", a question of the case file, {GROUP}..."
            if name == "patients"
            else ", ".join(allowed),
            "Remove or rename it",
        )
        for c in header
        if c not in allowed and not (name == "patients" and re.fullmatch(GROUP + r"[A-Za-z0-9_]{1,30}", c))
    ]
    problems += [
        Problem(where, f'the column "{c}" stands twice', "each column once", "Remove one")
        for c in dict.fromkeys(header)
        if header.count(c) > 1 and c in allowed
    ]
    if KEY not in header:
        problems.append(Problem(where, f'the column "{KEY}" is missing', "it must be there", "Add it"))
    if problems:
        raise CaseError(problems)
    return header, marks[0]


def _key(line: bytes, mark: str, at: int) -> str:
    """The key of a row; where its quotation marks are broken the cell is taken as it stands."""
    text = line.decode("utf-8", "replace").rstrip("\r\n")
    cells = text.split(mark)
    if '"' in text:
        try:
            cells = next(csv.reader([text], delimiter=mark, strict=True))
        except csv.Error:
            cells = [c.strip('" ') for c in cells]
    return cells[at].strip() if at < len(cells) else ""


def _hash(key: str) -> int:
    return int.from_bytes(hashlib.blake2b(key.encode("utf-8", "replace"), digest_size=8).digest(), "little")


def _runs(table: _Table, key: str) -> NDArray[np.int64]:
    """Positions of the runs of a key."""
    wanted = np.uint64(_hash(key))
    low = int(np.searchsorted(table.hashes, wanted, side="left"))
    high = int(np.searchsorted(table.hashes, wanted, side="right"))
    return np.arange(low, high)


def _own_rows(table: _Table, stream: BinaryIO, key: str) -> tuple[bytes, tuple[int, ...]]:
    """The rows of one patient as a CSV file without the key, and the rows of the table they came from."""
    out = io.StringIO(newline="")
    writer = csv.writer(out, delimiter=table.mark, lineterminator="\n")
    writer.writerow([c for i, c in enumerate(table.header) if i != table.key_at])
    numbers: list[int] = []
    for at in sorted(_runs(table, key), key=lambda i: int(table.starts[i])):
        stream.seek(int(table.starts[at]))
        number = int(table.rows[at]) - 1
        while line := stream.readline(_LONGEST_LINE):
            number += 1
            if not line.strip():
                continue
            if _key(line, table.mark, table.key_at) != key:
                break
            numbers.append(number)
            text = line.decode("utf-8", "surrogateescape").rstrip("\r\n")
            try:
                cells = next(csv.reader([text], delimiter=table.mark, strict=True))
            except csv.Error:
                out.write(text + "\n")  # refused, with its row, by the strict reader
                continue
            writer.writerow([c for i, c in enumerate(cells) if i != table.key_at])
    return out.getvalue().encode("utf-8", "surrogateescape"), tuple(numbers)
