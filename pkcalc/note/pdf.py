"""The note as PDF: compiled in memory, fonts from the compiler itself, tagged for screen readers (PDF/UA-1)."""

from __future__ import annotations

import json
from datetime import UTC, datetime
from importlib import resources
from typing import Any

import typst

from pkcalc.consult import RESULTS_DATE, Consult
from pkcalc.errors import PkcalcError
from pkcalc.note.charts import Chart, charts
from pkcalc.note.document import compose
from pkcalc.note.layout import Detail, document_data, section_data, with_first_cautions
from pkcalc.note.lessons import lesson
from pkcalc.note.wrapping import NUMBER_WITH_UNIT

#: How much of each warning page one tells, and the sizes tried in turn with it (points), so that it is one page:
#: whole as long as it can be read well.
DETAILS: tuple[tuple[Detail, tuple[str, ...]], ...] = (
    ("full", ("10", "9.5", "9", "8.5")),
    ("text", ("9", "8.5", "8")),
    ("short", ("8.5", "8", "7.5", "7")),
)
FONT = "Libertinus Serif"


class PageOneTooLongError(PkcalcError):
    """Page one does not fit on one page at any of the sizes tried."""


def render_pdf(consult: Consult) -> bytes:
    """Consult -> PDF with page one on one page and everything else behind it. The same consult gives the same bytes."""
    document = compose(consult)
    data: dict[str, Any] = document_data(document)
    inputs: dict[str, str] = {"unbroken": NUMBER_WITH_UNIT}
    data["charts"] = _charts(charts(consult), inputs, 92)
    teaching = lesson(consult)
    data["teaching"] = None
    if teaching is not None:
        data["teaching"] = {
            "banner": teaching.banner,
            "charts": _charts(teaching.charts, inputs, 72),
            "events": [section_data(s) for s in teaching.events],
        }
    for detail, sizes in DETAILS[:-1]:
        inputs["note"] = json.dumps(with_first_cautions(data, document, detail=detail), ensure_ascii=False)
        try:
            return compile_pdf("note.typ", inputs, sizes)
        except PageOneTooLongError:
            continue
    detail, sizes = DETAILS[-1]
    inputs["note"] = json.dumps(with_first_cautions(data, document, detail=detail), ensure_ascii=False)
    return compile_pdf("note.typ", inputs, sizes)


def _charts(found: tuple[Chart, ...], inputs: dict[str, str], width: int) -> list[dict[str, Any]]:
    rows = []
    for chart in found:
        key = f"chart{len(inputs)}"
        inputs[key] = chart.svg(FONT)
        rows.append({"key": key, "title": chart.title, "alt": chart.alt, "width": width})
    return rows


def compile_pdf(template: str, inputs: dict[str, str], sizes: tuple[str, ...], moment: datetime | None = None) -> bytes:
    """Template and data -> PDF bytes, at the largest size at which page one is one page.

    moment: stamped into the file; the date of the results where not given, so that the bytes repeat.
    """
    source = resources.files("pkcalc.note.templates").joinpath(template).read_bytes()
    fonts = typst.Fonts(include_system_fonts=False, include_embedded_fonts=True)
    stamp = (moment or datetime.fromisoformat(RESULTS_DATE)).replace(tzinfo=UTC)
    for size in sizes:
        compiler = typst.Compiler(source, font_paths=fonts, sys_inputs={**inputs, "size": size})
        if json.loads(compiler.query("<annex-page>", field="value")) in ([2], []):
            found = compiler.compile(source, format="pdf", pdf_standards=["ua-1"], timestamp=stamp)
            assert isinstance(found, bytes)
            return found
    raise PageOneTooLongError("The first page of the note does not fit on one page; nothing was printed.")
