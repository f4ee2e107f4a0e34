"""Every published source once: who, what, when, where, and whether it was read or is cited from memory."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from importlib import resources
from typing import Literal

from pkcalc.errors import DrugFileError

Status = Literal["read", "memory", "own synthesis"]
STATUSES: tuple[Status, ...] = ("read", "memory", "own synthesis")

_NEEDED = ("authors", "title", "year", "where", "status")
_OPTIONAL = ("note",)


@dataclass(frozen=True)
class Source:
    """One source. `where`: journal, volume, pages, or kind of document. `status`: read, or from memory."""

    key: str
    authors: str
    title: str
    year: str
    where: str
    status: Status
    note: str = ""

    @property
    def citation(self) -> str:
        """As printed in notes: authors, title, where, year; and whether it was read."""
        parts = [self.authors, self.title, self.where, "No date" if self.year == "n.d." else self.year]
        text = ". ".join(p.rstrip(".") for p in parts if p)
        how = {"read": "read", "memory": "from memory", "own synthesis": "own synthesis"}[self.status]
        return f"{text} ({how})."


@cache
def all_sources() -> Mapping[str, Source]:
    """Every source by its key."""
    text = resources.files("pkcalc").joinpath("sources.toml").read_text(encoding="utf-8")
    return parse_sources(text, "sources.toml")


def parse_sources(text: str, file: str) -> Mapping[str, Source]:
    """The sources of one TOML text; refuses missing, empty or unknown entries."""
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise DrugFileError(f"{file}: the file is not valid TOML ({error}). Mend it there.") from None
    found: dict[str, Source] = {}
    for key, entry in data.items():
        if not isinstance(entry, dict):
            raise DrugFileError(f"{file}, {key}: expected a table of source entries. Write [{key}] above them.")
        for name in _NEEDED:
            if not isinstance(entry.get(name), str) or not entry[name].strip():
                raise DrugFileError(f'{file}, {key}.{name}: missing or empty. Add {name} = "..." as text.')
        for name in entry:
            if name not in _NEEDED + _OPTIONAL:
                raise DrugFileError(
                    f"{file}, {key}.{name}: unknown entry. Known are: {', '.join(_NEEDED + _OPTIONAL)}."
                )
        if not isinstance(entry.get("note", ""), str):
            raise DrugFileError(f"{file}, {key}.note: not a text. Write it in quotation marks.")
        if entry["status"] not in STATUSES:
            raise DrugFileError(
                f'{file}, {key}.status: "{entry["status"]}" was found. Write one of: {", ".join(STATUSES)}.'
            )
        found[key] = Source(key=key, **entry)
    return found


def source(key: str) -> Source:
    """One source by its key; an unknown key is a maintainer's mistake."""
    known = all_sources()
    if key not in known:
        raise DrugFileError(f'sources.toml: there is no source "{key}". Add it there, or mend the key.')
    return known[key]
