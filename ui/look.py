"""Small pieces of the page in HTML, everything a person typed escaped."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping, Sequence
from html import escape
from pathlib import Path

import streamlit as st

ASSETS = Path(__file__).with_name("assets")
_MARKS = re.compile(r"([\\`*_{}\[\]()#+.!|~$:<>-])")

_WITH_UNIT = re.compile(r"(\d[\d,.]*) (%|mg PE|mg/day|mg/L|mcg/mL|umol/L|g/L|g/dL|mg|kg|days?|h\b|L\b)")


def html(text: str) -> str:
    """Text escaped, a number and its unit kept on one line."""
    return _WITH_UNIT.sub(r'<span class="pk-n">\1 \2</span>', escape(text))


def plain(text: str) -> str:
    """Text for a label, with every mark of Markdown taken literally."""
    return _MARKS.sub(r"\\\1", text)


def say(text: str, kind: str = "line") -> None:
    """One paragraph."""
    st.html(f'<p class="pk-{kind}">{html(text)}</p>')


def read_mark(values: Mapping[str, str], *, run: int, minutes: float) -> None:
    """What the server has read, for the browser to compare with what stands in the fields (page.js)."""
    read = {re.sub(r"[^a-zA-Z0-9_-]", "-", key): value for key, value in values.items()}
    st.html(
        f'<span class="pk-read" hidden data-run="{run}" data-minutes="{minutes}" '
        f'data-read="{escape(json.dumps(read))}"></span>'
    )


def beside(text: str, *, needed: bool) -> None:
    """What is wrong with the field above, or what it still needs."""
    kind = "needed" if needed else "wrong"
    word = "Still needed" if needed else "Mend"
    st.html(f'<p class="pk-{kind}" role="{"note" if needed else "alert"}"><b>{word}:</b> {html(text)}</p>')


def lines(items: Sequence[str], kind: str = "lines") -> None:
    """A list of sentences; an indented one belongs to the one before."""
    if not items:
        return
    out = "".join(
        f'<li class="{"pk-sub" if item.startswith("   ") else "pk-top"}">{html(item.strip())}</li>' for item in items
    )
    st.html(f'<ul class="pk-{kind}">{out}</ul>')


def preformatted(text: str, label: str) -> None:
    """Text in its own layout, to be scrolled with the keyboard too."""
    st.html(f'<pre class="pk-note" role="region" aria-label="{escape(label)}" tabindex="0">{escape(text)}</pre>')


def table(heads: Sequence[str], rows: Sequence[Sequence[str]], *, label: str, marks: Sequence[str] = ()) -> None:
    """A table that becomes a stack of cards on a narrow screen. marks: a word per row that sets its look."""
    head = "".join(f'<th scope="col">{escape(h)}</th>' for h in heads)
    body = []
    for i, row in enumerate(rows):
        kind = escape(marks[i].replace(" ", "-")) if i < len(marks) and marks[i] else "plain"
        cells = [f'<th scope="row"><span>{html(row[0])}</span></th>']
        cells += [
            f'<td data-head="{escape(h)}"{"" if c else " class=pk-empty"}><span>{html(c)}</span></td>'
            for h, c in zip(heads[1:], row[1:], strict=True)
        ]
        body.append(f'<tr class="pk-row-{kind}">{"".join(cells)}</tr>')
    st.html(
        f'<div class="pk-scroll" role="region" tabindex="0" aria-label="{escape(label)}">'
        f'<table class="pk-table"><caption>{escape(label)}</caption><thead><tr>{head}</tr></thead>'
        f"<tbody>{''.join(body)}</tbody></table></div>"
    )
