"""The note as plain data for the templates: the same content for HTML and PDF."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Literal

from pkcalc.errors import Caution
from pkcalc.note.document import Document, Section
from pkcalc.note.words import NOW

Detail = Literal["full", "text", "short"]

NAMES = {"stop": "STOP", "warn": "WARNING", "note": "NOTE"}


def caution_text(caution: Caution) -> str:
    text = caution.text
    if caution.blocks:
        text += f" No result for: {', '.join(caution.blocks)}."
    if caution.lifted_by:
        text += f" Lifted by: {caution.lifted_by}."
    return text


def caution_data(caution: Caution, text: str) -> dict[str, str]:
    return {"severity": caution.severity, "name": NAMES[caution.severity], "text": text}


def first_sentence(text: str) -> str:
    """Up to the first full stop that ends a sentence."""
    for place, sign in enumerate(text):
        if sign == "." and text[place + 1 : place + 2] in ("", " "):
            return text[: place + 1]
    return text


def _width(heads: Sequence[str], cells: Sequence[str]) -> float:
    """Relative width of a column: its longest cell within reason, and never less than its longest word.

    A number and its % count as one word; heads are bold and so a little wider.
    """
    words = [len(w) for c in cells for w in c.replace(" %", "_%").split()]
    bold = [1.15 * len(w) for h in heads for w in h.split()]
    return max([min(max((len(c) for c in cells), default=1), 28), *words, *bold]) + 1.0


def section_data(section: Section) -> dict[str, Any]:
    heads: Sequence[str] = section.table.heads if section.table else ()
    rows: Sequence[Sequence[str]] = section.table.rows if section.table else ()
    weights = [_width([heads[i] or "Mark"], [r[i] for r in rows]) for i in range(len(heads))]
    return {
        "title": section.title,
        "lines": [{"text": x.strip(), "inside": x.startswith("   ")} for x in section.lines],
        "heads": list(heads),
        "rows": [list(r) for r in rows],
        "weights": weights,
    }


def first_and_last(text: str) -> str:
    """The first sentence and the last one, which in our cautions says what to do; and where the rest stands."""
    first = first_sentence(text)
    rest = text[len(first) :].strip()
    if not rest:
        return text
    sentences = []
    while rest:
        one = first_sentence(rest)
        sentences.append(one)
        rest = rest[len(one) :].strip()
    return f"{first} {sentences[-1]}" + (" (In full in the annex.)" if len(sentences) > 1 else "")


def document_data(document: Document) -> dict[str, Any]:
    """Document -> data; charts and teaching are added by the printer."""
    return {
        "title": document.title,
        "demonstration": document.demonstration,
        "urgent": document.urgent,
        "cautions": [caution_data(c, caution_text(c)) for c in document.cautions],
        "now": [section_data(s) for s in document.front if s.title == NOW],
        "front": [section_data(s) for s in document.front if s.title != NOW],
        "sections": [section_data(s) for s in document.sections],
        "paste": "\n".join(document.paste),
        "reentry": document.reentry,
        "reentry_open": document.reentry_open,
        "signatures": list(document.signatures),
        "defers": document.defers,
        "versions": document.versions,
    }


def _told(caution: Caution, detail: Detail) -> str:
    if detail == "short":
        return first_and_last(caution.text)
    return caution_text(caution) if detail == "full" else caution.text


def with_first_cautions(data: Mapping[str, Any], document: Document, *, detail: Detail = "full") -> dict[str, Any]:
    """For one printed page: stops always in full; warnings in full, by their text, or by what to know and do."""
    stops = [c for c in document.cautions if c.severity == "stop"]
    warnings = [c for c in document.cautions if c.severity == "warn"]
    first = [caution_data(c, caution_text(c)) for c in stops]
    first += [caution_data(c, _told(c, detail)) for c in warnings]
    rest = [c for c in document.cautions if c.severity != "stop"]
    return {
        **data,
        "first_cautions": first,
        "annex_cautions": [caution_data(c, caution_text(c)) for c in rest],
    }
