"""The charts of the report, in the manner of the note's: data with a title, axis units and a text alternative."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import altair as alt

from pkcalc.backtest.accuracy import EARLIER_SHOWN, Findings
from pkcalc.backtest.outlook import METHODS, ONE, PRIOR, TWO, WHOLE
from pkcalc.note.charts import BLACK, BLUE, GREY, HEIGHT, ORANGE, RED, WIDTH, Chart

_COLOURS = {PRIOR: GREY, ONE: ORANGE, TWO: RED, WHOLE: BLUE}
_DASHES = {PRIOR: [2, 2], ONE: [6, 3], TWO: [8, 3, 2, 3], WHOLE: [1, 0]}
_SHAPES = {PRIOR: "square", ONE: "triangle-up", TWO: "diamond", WHOLE: "circle"}
_SHARES = (0.1, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9)


def charts(found: Findings) -> tuple[Chart, ...]:
    """Every chart there are numbers for."""
    made = (calibration(found), met(found), by_earlier(found))
    return tuple(c for c in made if c is not None)


def _finish(name: str, title: str, text: str, layers: Sequence[Any], width: int = WIDTH, height: int = HEIGHT) -> Chart:
    chart = alt.layer(*layers).properties(width=width, height=height, title=title)
    chart = chart.configure_axis(labelFontSize=11, titleFontSize=12, gridColor="#EEEEEE", domainColor=BLACK)
    chart = chart.configure_title(fontSize=13, anchor="start").configure_view(stroke="#AAAAAA")
    spec = chart.to_dict()
    spec["background"] = "white"
    spec["description"] = text
    return Chart(name, title, text, spec)


def _marked(rows: list[dict[str, Any]], methods: Sequence[str], x: Any, y: Any) -> list[Any]:
    base = alt.Chart(alt.InlineData(rows))
    key = {"title": "Method"}
    colour = alt.Color("method:N", scale=alt.Scale(domain=list(methods), range=[_COLOURS[m] for m in methods]), **key)
    dash = alt.StrokeDash("method:N", scale=alt.Scale(domain=list(methods), range=[_DASHES[m] for m in methods]), **key)
    shape = alt.Shape("method:N", scale=alt.Scale(domain=list(methods), range=[_SHAPES[m] for m in methods]), **key)
    return [
        base.mark_line(strokeWidth=1.5).encode(x=x, y=y, color=colour, strokeDash=dash),
        base.mark_point(filled=True, size=45, opacity=1).encode(x=x, y=y, color=colour, shape=shape),
    ]


def calibration(found: Findings) -> Chart | None:
    """Share of levels inside each central interval, against what the interval should hold."""
    methods = [m for m in METHODS if m in found.by_method]
    if not methods:
        return None
    rows = [
        {"stated": 100 * s, "came": round(100 * found.by_method[m].covered(s), 2), "method": m}
        for m in methods
        for s in _SHARES
    ]
    scale = alt.Scale(domain=[0, 100])
    x = alt.X("stated:Q", title="Stated share of the interval (%)", scale=scale)
    y = alt.Y("came:Q", title="Levels that fell inside (%)", scale=scale)
    line = (
        alt.Chart(alt.InlineData([{"stated": 0, "came": 0}, {"stated": 100, "came": 100}]))
        .mark_line(color=BLACK, strokeWidth=0.8)
        .encode(x=x, y=y)
    )
    said = "; ".join(
        f"{m}: {100 * found.by_method[m].covered(0.5):.0f} % inside the 50 % interval and "
        f"{100 * found.by_method[m].covered(0.9):.0f} % inside the 90 % interval"
        for m in methods
    )
    text = f"Share of levels inside the forecast's central interval, against the stated share. {said}."
    return _finish("calibration", "Do the intervals hold what they state?", text, [line, *_marked(rows, methods, x, y)])


def met(found: Findings) -> Chart | None:
    """Forecast against what came, whole record, both axes logarithmic; a sample of evenly spread patients."""
    rows = [
        {
            "said": float(f"{r.forecast_mg_per_L:.4g}"),
            "came": float(f"{r.observed_mg_per_L:.4g}"),
        }
        for r in found.sample
    ]
    if not rows:
        return None
    values = [v for r in rows for v in r.values()]
    low, high = min(values) / 1.15, max(values) * 1.15
    scale = alt.Scale(type="log", domain=[low, high], nice=False)
    axis = alt.Axis(format=",~r")
    x = alt.X("said:Q", title="Level forecast (mg/L)", scale=scale, axis=axis)
    y = alt.Y("came:Q", title="Level that came (mg/L)", scale=scale, axis=axis)
    layers: list[Any] = []
    for f, dash in ((1.0, [1, 0]), (1.3, [4, 3]), (1 / 1.3, [4, 3])):
        ends = [max(low, low / f), min(high, high / f)]
        base = alt.Chart(alt.InlineData([{"said": v, "came": v * f} for v in ends]))
        layers.append(base.mark_line(color=BLACK, strokeWidth=0.8, strokeDash=dash).encode(x=x, y=y))
    layers.append(
        alt.Chart(alt.InlineData(rows)).mark_point(filled=True, size=26, color=BLUE, opacity=0.6).encode(x=x, y=y)
    )
    text = (
        f"{len(rows)} levels of evenly spread patients, forecast from the whole record, against what came, mg/L on "
        "logarithmic axes; the full line is equality, the broken ones a factor of 1.3 either way."
    )
    return _finish("met", "Forecast from the whole record, and what came", text, layers, WIDTH, WIDTH * 2 // 3)


def by_earlier(found: Findings) -> Chart | None:
    """Median absolute error by the number of earlier levels and method."""
    table = found.split.get("earlier levels", {})
    order = [str(n) for n in range(EARLIER_SHOWN)] + [f"{EARLIER_SHOWN} or more"]
    rows = [
        {"earlier": n, "error": round(tally.median_absolute_error(), 3), "method": m}
        for n in order
        for m, tally in table.get(n, {}).items()
    ]
    if not rows:
        return None
    methods = [m for m in METHODS if any(r["method"] == m for r in rows)]
    x = alt.X("earlier:O", title="Earlier levels of the patient", sort=order, axis=alt.Axis(labelAngle=0))
    y = alt.Y("error:Q", title="Median absolute error (mg/L)")
    said = "; ".join(f"{r['method']} after {r['earlier']}: {r['error']:.3g} mg/L" for r in rows)
    text = f"Median absolute error by method and number of earlier levels. {said}."
    return _finish("earlier", "What each further level is worth", text, _marked(rows, methods, x, y))
