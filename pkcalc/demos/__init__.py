"""Demonstration cases: invented, non-clinical scenarios of our own, marked as such everywhere they appear."""

from __future__ import annotations

from dataclasses import dataclass
from importlib import resources

from pkcalc.case import Case, check_case, parse_case_text
from pkcalc.errors import CaseError, Problem


@dataclass(frozen=True)
class Demonstration:
    """Name, title and what it shows."""

    name: str
    title: str
    shows: str
    text: str


def demonstrations() -> tuple[Demonstration, ...]:
    """All demonstration cases, by file name."""
    found = []
    for entry in sorted(resources.files("pkcalc.demos").iterdir(), key=lambda e: e.name):
        if entry.name.endswith(".json"):
            text = entry.read_text(encoding="utf-8")
            mark = parse_case_text(text).demonstration
            if mark is None:
                raise AssertionError(f"{entry.name} is not marked as a demonstration")
            found.append(Demonstration(mark.name, mark.title, mark.shows, text))
    return tuple(found)


def demonstration(name: str) -> Case:
    """One demonstration case; CaseError with the known names where there is none of that name."""
    known = {d.name: d for d in demonstrations()}
    if name not in known:
        raise CaseError(
            Problem("Demonstration", f'"{name[:40]}" was given', ", ".join(known), "Choose one of these names")
        )
    return check_case(parse_case_text(known[name].text))
