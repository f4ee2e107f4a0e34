"""The note as plain text."""

from __future__ import annotations

from pkcalc.errors import Caution
from pkcalc.note.document import Document, Section, Table
from pkcalc.note.words import NOW
from pkcalc.note.wrapping import wrapped

WIDTH = 100
_NAMES = {"stop": "STOP", "warn": "WARNING", "note": "NOTE"}


def render(document: Document) -> str:
    """Document -> text of at most WIDTH columns (tables may be wider)."""
    out: list[str] = []
    if document.demonstration:
        out += ["*" * WIDTH, document.demonstration.center(WIDTH).rstrip(), "*" * WIDTH, ""]
    out += [document.title, "=" * len(document.title), ""]
    out += [*wrapped(document.urgent, WIDTH), ""]
    for section in document.front:
        out += _section(section) if section.title == NOW else []
    for caution in document.cautions:
        out += caution_lines(caution)
    if document.cautions:
        out.append("")
    for section in document.front:
        out += _section(section) if section.title != NOW else []
    out += ["Annex", "=====", ""]
    for section in document.sections:
        out += _section(section)
    out += ["To paste into a record", "----------------------", *document.paste, ""]
    for line in document.footer:
        out += wrapped(line, WIDTH)
    if document.demonstration:
        out += ["", "*" * WIDTH, document.demonstration.center(WIDTH).rstrip(), "*" * WIDTH]
    return "\n".join(out) + "\n"


def _section(section: Section) -> list[str]:
    out = [section.title, "-" * len(section.title)]
    for line in section.lines:
        inside = line.startswith("   ")
        first, rest = ("   ", "      ") if inside else ("", "   ")
        out += wrapped(line.strip(), WIDTH, first=first, rest=rest)
    if section.table is not None:
        out += table_lines(section.table)
    out.append("")
    return out


def caution_lines(caution: Caution) -> list[str]:
    """One caution: severity, text, what it blocks, what lifts it."""
    text = f"{_NAMES[caution.severity]}: {caution.text}"
    if caution.blocks:
        text += f" No result for: {', '.join(caution.blocks)}."
    if caution.lifted_by:
        text += f" Lifted by: {caution.lifted_by}."
    return wrapped(text, WIDTH, rest="   ")


def table_lines(table: Table) -> list[str]:
    """Columns as wide as their widest cell, heads wrapped above them."""
    columns = range(len(table.heads))
    widths = [
        max([len(r[i]) for r in table.rows] + [max((len(w) for w in table.heads[i].split()), default=1)])
        for i in columns
    ]
    heads = [wrapped(table.heads[i], widths[i]) or [""] for i in columns]
    depth = max(len(h) for h in heads)
    lines = []
    for k in range(depth):
        cells = [([""] * (depth - len(h)) + h)[k].ljust(w) for h, w in zip(heads, widths, strict=True)]
        lines.append("  ".join(cells).rstrip())
    lines.append("  ".join("-" * w for w in widths))
    lines += ["  ".join(c.ljust(w) for c, w in zip(row, widths, strict=True)).rstrip() for row in table.rows]
    return lines
