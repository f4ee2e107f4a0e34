"""A strict reader for drug and settings files: no number without unit, source, place and status.

Every number is `{ value, unit, source, where, status }`; one of our own adds `derivation`. Each table of a file
is read through a `Table`: every key must be asked for, and whatever was not asked for is refused. Numbers come
out as plain floats in canonical units; each original stays a `Fact` under its path ("binding.free_fraction").
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, TypeVar, cast

from pkcalc.errors import DrugFileError
from pkcalc.sources import STATUSES, Status, all_sources
from pkcalc.units import FACTORS, show_number

#: Units that stand in drug and site files only, beside the closed list of `units`: kind -> label -> factor.
FILE_UNITS: dict[str, dict[str, float]] = {
    **FACTORS,
    "share": {"fraction": 1.0, "%": 0.01},
    "factor": {"times": 1.0, "exponent": 1.0},
    "molar mass": {"g/mol": 1.0},
    "strength": {"mg": 1.0, "mg PE": 1.0, "mg/mL": 1.0, "mg PE/mL": 1.0, "mg/5 mL": 0.2, "g/L": 1.0},
    "per albumin": {"per g/dL": 1.0, "per g/L": 10.0},
    "per level": {"per mg/L": 1.0},
    "fluid volume": {"mL": 1.0},
    "density": {"g/mL": 1.0},
    "interval": {"h": 1.0},
    "ratio": {"times": 1.0},
    "vmax": {**FACTORS["dose rate"], **FACTORS["dose rate per weight"]},
    "volume": {**FACTORS["volume"], **FACTORS["volume per weight"]},
}

#: Values that people type to mean "unknown".
_SENTINELS = {-1.0, -9.0, -99.0, -999.0, -9999.0, 999.0, 9999.0, 99999.0, 999999.0}


@dataclass(frozen=True)
class Fact:
    """One number (or several) or one statement of a drug file, with where it came from.

    value: as printed in the file, in `unit`. sources: keys of sources.toml. where: the place in the source.
    status: read, memory, or own synthesis with its derivation.
    """

    path: str
    value: float | tuple[float, ...] | str | tuple[str, ...]
    unit: str
    sources: tuple[str, ...]
    where: str
    status: Status
    derivation: str = ""

    @property
    def shown(self) -> str:
        """The value with its unit, as printed."""
        if isinstance(self.value, str):
            return self.value
        if isinstance(self.value, float):
            text = show_number(self.value, 6)
        elif all(isinstance(v, str) for v in self.value):
            return ", ".join(cast(tuple[str, ...], self.value))
        else:
            numbers = [show_number(v, 6) for v in cast(tuple[float, ...], self.value)]
            text = f"{numbers[0]} to {numbers[1]}" if len(numbers) == 2 else " / ".join(numbers)
        if self.unit in ("fraction", "exponent", ""):
            return text
        return f"{text} {self.unit}"


T = TypeVar("T")


@dataclass
class Table:
    """One table of a drug or site file while it is read: every key must be asked for, nothing may be left."""

    file: str
    path: str
    data: dict[str, Any]
    facts: dict[str, Fact]
    known: set[str] = field(default_factory=set)
    provenance: bool = True

    def at(self, key: str) -> str:
        return f"{self.path}.{key}" if self.path else key

    def fail(self, key: str, found: str, fix: str) -> DrugFileError:
        return DrugFileError(f"{self.file}, {self.at(key)}: {found}. {fix}.")

    def has(self, key: str) -> bool:
        self.known.add(key)
        return key in self.data

    def _take(self, key: str) -> Any:
        self.known.add(key)
        if key not in self.data:
            raise self.fail(key, "missing", "Add it with its source")
        return self.data[key]

    # plain entries without provenance: names, ids, switches

    def text(self, key: str, default: str | None = None) -> str:
        self.known.add(key)
        if default is not None and key not in self.data:
            return default
        value = self._take(key)
        if not isinstance(value, str) or not value.strip():
            raise self.fail(key, "missing or empty", "Write it as text")
        return value

    def choice(self, key: str, allowed: tuple[str, ...]) -> str:
        value = self.text(key)
        if value not in allowed:
            raise self.fail(key, f'"{value}" was found', "Write one of: " + ", ".join(allowed))
        return value

    def switch(self, key: str, default: bool = False) -> bool:
        self.known.add(key)
        value = self.data.get(key, default)
        if not isinstance(value, bool):
            raise self.fail(key, "neither true nor false", "Write true or false")
        return value

    def texts(self, key: str, default: tuple[str, ...] | None = None) -> tuple[str, ...]:
        self.known.add(key)
        if default is not None and key not in self.data:
            return default
        value = self._take(key)
        if not isinstance(value, list) or not all(isinstance(v, str) and v.strip() for v in value):
            raise self.fail(key, "not a list of texts", 'Write ["...", "..."]')
        return tuple(value)

    # sourced entries

    def fact(self, key: str) -> dict[str, Any]:
        entry = self._take(key)
        if not isinstance(entry, dict):
            raise self.fail(
                key,
                "a bare value",
                "Write { value = ..., unit = ..., source = ..., where = ..., status = ... }",
            )
        return entry

    def _record(self, key: str, entry: dict[str, Any], value: Any, unit: str) -> Fact:
        names = {"value", "unit", "source", "where", "status", "derivation"}
        for name in entry:
            if name not in names:
                raise self.fail(f"{key}.{name}", "unknown entry", "Known are: " + ", ".join(sorted(names)))
        raw = entry.get("source")
        sources = tuple(raw) if isinstance(raw, list) else (raw,)
        if not sources or not all(isinstance(s, str) and s for s in sources):
            raise self.fail(f"{key}.source", "missing", "Add the key of a source in sources.toml")
        for name in sources:
            if name not in all_sources():
                raise self.fail(
                    f"{key}.source",
                    f'there is no source "{name}" in sources.toml',
                    "Add it there or mend the key",
                )
        where = entry.get("where")
        if not isinstance(where, str) or not where.strip():
            raise self.fail(f"{key}.where", "missing", "Say where in the source it stands")
        status = entry.get("status")
        if status not in STATUSES:
            raise self.fail(f"{key}.status", "missing or unknown", "Write one of: " + ", ".join(STATUSES))
        derivation = entry.get("derivation", "")
        if status == "own synthesis" and not (isinstance(derivation, str) and derivation.strip()):
            raise self.fail(f"{key}.derivation", "missing", "A value of our own needs its derivation")
        if status == "read" and any(all_sources()[s].status != "read" for s in sources):
            raise self.fail(
                f"{key}.status",
                'it says "read", but its source is not one that was read',
                'Write "memory" or "own synthesis"',
            )
        fact = Fact(self.at(key), value, unit, sources, where, cast(Status, status), derivation)
        self.facts[fact.path] = fact
        return fact

    def _numbers(self, key: str, kind: str, count: int | None, zero: bool) -> tuple[float, ...]:
        entry = self.fact(key)
        if "value" not in entry:
            raise self.fail(f"{key}.value", "missing", "Add the number")
        raw = entry["value"]
        many = isinstance(raw, list)
        values = list(raw) if many else [raw]
        for v in values:
            if isinstance(v, bool) or not isinstance(v, int | float):
                raise self.fail(f"{key}.value", "not a number", "Write a plain number")
            if not math.isfinite(v) or float(v) in _SENTINELS:
                raise self.fail(
                    f"{key}.value", f"{v} stands for no value", "Leave the entry out, or give the real number"
                )
            if v < 0 and kind != "correlation":
                raise self.fail(f"{key}.value", f"{v} is negative", "Check the number")
            if v == 0 and not zero:
                raise self.fail(f"{key}.value", "0 was found", "Give a number above 0, or leave the entry out")
        if count is not None and (len(values) != count or many != (count != 1)):
            shape = "one number" if count == 1 else f"a list of {count} numbers"
            raise self.fail(f"{key}.value", f"{len(values)} found where {shape} is needed", f"Write {shape}")
        unit = entry.get("unit")
        labels = {"fraction": 1.0} if kind == "correlation" else FILE_UNITS[kind]
        if not isinstance(unit, str) or unit not in labels:
            found = f'the unit "{unit}" was found' if unit is not None else "no unit was found"
            raise self.fail(f"{key}.unit", found, "Write one of: " + ", ".join(labels))
        printed = tuple(float(v) for v in values)
        self._record(key, entry, printed if many else printed[0], unit)
        return tuple(v * labels[unit] for v in printed)

    def number(
        self,
        key: str,
        kind: str,
        *,
        low: float | None = None,
        high: float | None = None,
        zero: bool = False,
    ) -> float:
        """One number in the canonical unit of `kind`, within low to high (both included)."""
        value = self._numbers(key, kind, 1, zero)[0]
        if (low is not None and value < low) or (high is not None and value > high):
            allowed = f"from {show_number(low or 0.0)} to {show_number(high)}" if high is not None else "larger"
            raise self.fail(f"{key}.value", "outside what is possible", f"It must be {allowed}")
        return value

    def maybe(self, key: str, kind: str, *, zero: bool = False) -> float | None:
        return self.number(key, kind, zero=zero) if self.has(key) else None

    def share(self, key: str, *, zero: bool = False) -> float:
        return self.number(key, "share", low=0.0, high=1.0, zero=zero)

    def span(self, key: str, kind: str, *, zero: bool = False) -> tuple[float, float]:
        """A range, low before high."""
        low, high = self._numbers(key, kind, 2, zero)
        if low > high:
            raise self.fail(f"{key}.value", "the first is larger than the second", "Write the lower end first")
        return low, high

    def pair(self, key: str, kind: str) -> tuple[float, float]:
        first, second = self._numbers(key, kind, 2, False)
        return first, second

    def several(self, key: str, kind: str) -> tuple[float, ...]:
        return self._numbers(key, kind, None, False)

    def statement(self, key: str) -> str:
        """A sourced sentence."""
        entry = self.fact(key)
        value = entry.get("value")
        if not isinstance(value, str) or not value.strip():
            raise self.fail(f"{key}.value", "missing or empty", "Write the sentence")
        self._record(key, entry, value, "")
        return value

    def statements(self, key: str) -> tuple[str, ...]:
        """A sourced list of words."""
        entry = self.fact(key)
        value = entry.get("value")
        if not isinstance(value, list) or not value or not all(isinstance(v, str) and v.strip() for v in value):
            raise self.fail(f"{key}.value", "not a list of texts", 'Write ["...", "..."]')
        self._record(key, entry, tuple(value), "")
        return tuple(value)

    # structure

    def table(self, key: str) -> Table:
        value = self._take(key)
        if not isinstance(value, dict):
            raise self.fail(key, "not a table", f"Write it under [{self.at(key)}]")
        return Table(self.file, self.at(key), value, self.facts)

    def each(self, key: str, read: Callable[[str, Table], T]) -> dict[str, T]:
        """Every table below `key`, in the order of the file."""
        if not self.has(key):
            return {}
        outer = self.table(key)
        found = {}
        for name in outer.data:
            inner = outer.table(name)
            found[name] = read(name, inner)
            inner.done()
        return found

    def done(self) -> None:
        """Refuses whatever was not asked for."""
        for key in self.data:
            if key not in self.known:
                near = difflib.get_close_matches(key, self.known, n=1)
                fix = f'Did you mean "{near[0]}"' if near else "Take it out"
                raise DrugFileError(f"{self.file}, {self.at(key)}: unknown entry. {fix}{'?' if near else '.'}")
