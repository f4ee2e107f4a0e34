"""The note as plain data for the templates: the same content for HTML and PDF."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from pkcalc.errors import Caution
from pkcalc.note.document import Document, Section

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


def document_data(document: Document) -> dict[str, Any]:
    """Document -> data; charts and teaching are added by the printer."""
    return {
        "title": document.title,
        "demonstration": document.demonstration,
        "urgent": document.urgent,
        "cautions": [caution_data(c, caution_text(c)) for c in document.cautions],
        "front": [section_data(s) for s in document.front],
        "sections": [section_data(s) for s in document.sections],
        "paste": "\n".join(document.paste),
        "signatures": list(document.signatures),
        "defers": document.defers,
        "versions": document.versions,
    }


def with_first_cautions(data: Mapping[str, Any], document: Document) -> dict[str, Any]:
    """For one printed page: stops in full, warnings by their first sentence, all in full in the annex."""
    stops = [c for c in document.cautions if c.severity == "stop"]
    warnings = [c for c in document.cautions if c.severity == "warn"]
    first = [caution_data(c, caution_text(c)) for c in stops]
    first += [caution_data(c, first_sentence(c.text)) for c in warnings]
    rest = [c for c in document.cautions if c.severity != "stop"]
    return {
        **data,
        "first_cautions": first,
        "annex_cautions": [caution_data(c, caution_text(c)) for c in rest],
    }
