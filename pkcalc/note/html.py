"""The note as one HTML file: no address outside it, no script; charts as data with a text alternative."""

from __future__ import annotations

import base64
from importlib import resources
from typing import Any

from jinja2 import Environment, StrictUndefined

from pkcalc.consult import Consult
from pkcalc.note.charts import Chart, charts
from pkcalc.note.document import compose
from pkcalc.note.layout import document_data
from pkcalc.note.lessons import lesson
from pkcalc.note.wrapping import together


def chart_data(chart: Chart) -> dict[str, str]:
    return {
        "title": chart.title,
        "alt": chart.alt,
        "svg": base64.b64encode(chart.svg().encode()).decode("ascii"),
    }


def _together(data: Any) -> Any:
    """Every text within, with numbers and units kept on one line."""
    if isinstance(data, str):
        return together(data)
    if isinstance(data, dict):
        return {k: _together(v) for k, v in data.items()}
    return [_together(x) for x in data] if isinstance(data, list) else data


def render_html(consult: Consult) -> str:
    """Consult -> one HTML document."""
    document = compose(consult)
    data: dict[str, Any] = _together(document_data(document)) | {"paste": "\n".join(document.paste)}
    data["charts"] = [chart_data(c) for c in charts(consult)]
    teaching = lesson(consult)
    data["teaching"] = None
    if teaching is not None:
        data["teaching"] = {
            "banner": teaching.banner,
            "charts": [chart_data(c) for c in teaching.charts],
            "events": [{"title": s.title, "lines": [{"text": x} for x in s.lines]} for s in teaching.events],
        }
    environment = Environment(autoescape=True, undefined=StrictUndefined, trim_blocks=False)
    text = resources.files("pkcalc.note.templates").joinpath("note.html.j2").read_text(encoding="utf-8")
    return environment.from_string(text).render(**data)
