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


def chart_data(chart: Chart) -> dict[str, str]:
    return {
        "title": chart.title,
        "alt": chart.alt,
        "svg": base64.b64encode(chart.svg().encode()).decode("ascii"),
    }


def render_html(consult: Consult) -> str:
    """Consult -> one HTML document."""
    data: dict[str, Any] = document_data(compose(consult))
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
