"""Results in parts: each part is one fixed run of patients, written whole or not at all.

A part is written to a file of another name and then renamed, so that a run that is killed leaves only whole
parts and the next one goes on from them. Which patients a part holds follows from its number alone, so the same
folder gives the same parts whoever calculates them. Parquet where pyarrow is installed, else JSON lines; both
hold every digit, and both are read."""

from __future__ import annotations

import json
import os
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass, fields
from importlib.util import find_spec
from pathlib import Path
from typing import Any

from pkcalc.backtest.outlook import METHODS, Row
from pkcalc.errors import CaseError, Problem, as_typed

#: Patients in one part.
PART = 20

_PLAN = "run.json"
_TEXT = {"patient", "kind", "method", "reason", "detail", "groups", "population"}
_WHOLE = {"number", "level", "earlier"}


@dataclass(frozen=True)
class Plan:
    """What a run is: the input, the settings and the program that decide its results."""

    count: int
    fingerprint: str
    drug: str
    site: str
    draws: int
    version: str
    results_date: str
    methods: tuple[str, ...] = METHODS
    part: int = PART

    @property
    def parts(self) -> int:
        return -(-self.count // self.part)

    def span(self, part: int) -> tuple[int, int]:
        """Patients first .. last - 1 of a part."""
        return part * self.part, min((part + 1) * self.part, self.count)


@dataclass(frozen=True)
class Store:
    """The folder of results of one run."""

    path: Path
    plan: Plan

    def name(self, part: int, ending: str) -> Path:
        return self.path / "parts" / f"part-{part:06d}.{ending}"

    def there(self, part: int) -> Path | None:
        """The file of a part, None where it is still to be done."""
        for ending in ("parquet", "jsonl"):
            if self.name(part, ending).is_file():
                return self.name(part, ending)
        return None

    def missing(self) -> list[int]:
        """Parts that are still to be done, in order."""
        return [p for p in range(self.plan.parts) if self.there(p) is None]

    def write(self, part: int, rows: Sequence[Row]) -> None:
        """Write a part whole, or not at all."""
        final = self.name(part, "parquet" if find_spec("pyarrow") is not None else "jsonl")
        half = final.with_name(final.name + ".half")
        if final.suffix == ".parquet":
            _write_parquet(half, rows)
        else:
            half.write_text("".join(json.dumps(asdict(r), ensure_ascii=False) + "\n" for r in rows), encoding="utf-8")
        with half.open("rb") as stream:
            os.fsync(stream.fileno())
        half.replace(final)

    def read(self, part: int) -> list[Row]:
        """The rows of a part that is there."""
        file = self.there(part)
        assert file is not None
        if file.suffix == ".parquet":
            return [Row(**r) for r in _parquet().read_table(file).to_pylist()]
        with file.open(encoding="utf-8") as stream:
            return [Row(**json.loads(line)) for line in stream]

    def rows(self) -> Iterator[Row]:
        """Every row, by patient in the order of the folder, one part in memory at a time."""
        for part in range(self.plan.parts):
            if self.there(part) is not None:
                yield from self.read(part)


def open_store(path: Path, plan: Plan) -> Store:
    """The folder of results, new or of an earlier try at the same run; CaseError where it holds another one."""
    file = path / _PLAN
    if file.is_file():
        try:
            earlier = json.loads(file.read_text(encoding="utf-8"))
        except ValueError:
            earlier = {}
        wanted = json.loads(json.dumps(asdict(plan)))
        differ = [f.name.replace("_", " ") for f in fields(Plan) if earlier.get(f.name) != wanted[f.name]]
        if differ:
            raise CaseError(
                Problem(
                    f"Folder of results {as_typed(path.name, 80)}",
                    f"it holds another run ({', '.join(differ)} differ)",
                    "a new folder, or the one of the same run",
                    "Give another folder with --out, or delete that one",
                )
            )
    elif path.is_dir() and any(path.iterdir()):
        raise CaseError(
            Problem(
                f"Folder of results {as_typed(path.name, 80)}",
                "it is not empty and holds no run",
                "a new or an empty folder",
                "Give another folder with --out",
            )
        )
    (path / "parts").mkdir(parents=True, exist_ok=True)
    half = file.with_name(_PLAN + ".half")
    half.write_text(json.dumps(asdict(plan), indent=2) + "\n", encoding="utf-8")
    half.replace(file)
    return Store(path, plan)


@contextmanager
def alone(path: Path) -> Iterator[None]:
    """Only one run at a time in a folder of results; the mark ends with the process, also when it is killed."""
    if find_spec("fcntl") is None:
        yield
        return
    import fcntl

    with (path / "running").open("w") as mark:
        try:
            fcntl.flock(mark, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            raise CaseError(
                Problem(
                    f"Folder of results {as_typed(path.name, 80)}",
                    "another run is writing to it",
                    "one run at a time",
                    "Wait for it, or give another folder with --out",
                )
            ) from None
        yield


def _parquet() -> Any:
    import pyarrow.parquet

    return pyarrow.parquet


def _write_parquet(file: Path, rows: Sequence[Row]) -> None:
    import pyarrow

    schema = pyarrow.schema(
        [
            pyarrow.field(
                f.name,
                pyarrow.string() if f.name in _TEXT else pyarrow.int64() if f.name in _WHOLE else pyarrow.float64(),
            )
            for f in fields(Row)
        ]
    )
    _parquet().write_table(pyarrow.Table.from_pylist([asdict(r) for r in rows], schema=schema), file)
