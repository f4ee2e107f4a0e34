"""The charts of a consult, defined once for the form, the HTML note and the PDF note.

Each is a Vega-Lite chart with its title, its axis units and a text alternative. Shape, dash and lightness carry
what colour carries, so that a chart reads in black and white and with colour-blind vision. Nothing is loaded from
outside when one is drawn.
"""

from __future__ import annotations

import json
import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any

import altair as alt
import numpy as np
from numpy.typing import NDArray

from pkcalc import flow
from pkcalc.case import Case
from pkcalc.case import Course as Line
from pkcalc.clock import show_date
from pkcalc.consult import Consult, Shown, record_spread
from pkcalc.dosing import active_mg
from pkcalc.drugs.profile import Profile
from pkcalc.estimate.posterior import WHOLE_RECORD, as_reckoned
from pkcalc.forecast import fewer_draws
from pkcalc.note.words import NOT_OFFERED, at_binding, level_edge, mark_of, short_words, told_up_to
from pkcalc.units import percent, show, show_number

Floats = NDArray[np.float64]

#: Colours that stay apart in every common colour vision and in grey (after Okabe and Ito).
BLUE, ORANGE, RED, GREY, BLACK = "#0072B2", "#E69F00", "#D55E00", "#767676", "#000000"
BAND, TARGET = "#B9D4E8", "#E9E9E9"
WIDTH, HEIGHT = 560, 250
MARK = "DEMONSTRATION"

_COURSE_DRAWS = 128
_PER_DAY = 6
_LONG_DAYS = 21.0
_SURE = 1.6449  # 90 % interval of a normal spread


@dataclass(frozen=True)
class Chart:
    """One chart: what it is called, what it shows in words (for those who cannot see it), and its specification."""

    name: str
    title: str
    alt: str
    spec: dict[str, Any]

    def svg(self, font: str = "Helvetica, Arial, sans-serif") -> str:
        """The chart as SVG text, drawn without network."""
        import vl_convert

        spec = {**self.spec, "config": {**self.spec.get("config", {}), "font": font}}
        return str(vl_convert.vegalite_to_svg(json.dumps(spec), allowed_base_urls=[]))


def charts(consult: Consult) -> tuple[Chart, ...]:
    """Every chart the consult has the numbers for, in the order of the reasoning."""
    made = (record_chart(consult), plane_chart(consult), regimen_chart(consult), narrowing_chart(consult))
    return tuple(c for c in made if c is not None)


def finish(name: str, title: str, text: str, layers: Sequence[Any], case: Case, **size: Any) -> Chart:
    """Layers -> chart, with the demonstration's mark over it where the case is one."""
    width, height = size.get("width", WIDTH), size.get("height", HEIGHT)
    found = list(layers)
    if case.demonstration is not None:
        found.append(
            alt.Chart(alt.InlineData([{"mark": MARK}]))
            .mark_text(fontSize=min(34, round(height / 4)), opacity=0.16, angle=340, color=BLACK, fontWeight="bold")
            .encode(text="mark:N", x=alt.value(width / 2), y=alt.value(height / 2))
        )
        title = f"{title} - demonstration, not a patient"
    chart = alt.layer(*found).properties(width=width, height=height, title=title)
    chart = chart.configure_axis(labelFontSize=11, titleFontSize=12, gridColor="#EEEEEE", domainColor=BLACK)
    chart = chart.configure_title(fontSize=13, anchor="start").configure_view(stroke="#AAAAAA")
    spec = chart.to_dict()
    spec["background"] = "white"
    # a plain minus and a comma from 1,000 on every axis
    spec["config"]["locale"] = {
        "number": {"decimal": ".", "thousands": ",", "grouping": [3], "currency": ["", ""], "minus": "-"}
    }
    spec["description"] = text
    return Chart(name, title, text, spec)


def _data(rows: Sequence[dict[str, Any]]) -> alt.InlineData:
    return alt.InlineData([dict(r) for r in rows])


def _y(field: str, title: str, low: float, high: float) -> alt.Y:
    return alt.Y(
        f"{field}:Q",
        title=title,
        scale=alt.Scale(domain=[low, high], nice=False, zero=False),
        axis=alt.Axis(format=",~r"),
    )


# --- 1: the record -------------------------------------------------------------------------------------------


def _stamp(moment: datetime) -> float:
    """Milliseconds of the wall clock; drawn as such whatever the zone of the machine."""
    return moment.replace(tzinfo=UTC).timestamp() * 1000


@dataclass(frozen=True)
class Course:
    """Level over the record: 5, 50 and 95 % of the draws at each time (days since the case's origin)."""

    days: Floats
    low: Floats
    median: Floats
    high: Floats


def course(consult: Consult) -> Course | None:
    """The course of the level by the record and the whole-record estimate; by the day where the record is long.

    By the day: lowest 5 %, mean median and highest 95 % of that day, so that the band holds peaks and troughs.
    """
    estimate, record = consult.estimates.get(WHOLE_RECORD), consult.record
    if estimate is None or record is None or estimate.volume_L is None or consult.prior is None:
        return None
    spread = record_spread(consult.case, consult.profile)
    full = as_reckoned(record, spread, consult.prior.first_order_per_day)
    last = max(
        [consult.case.day(o.level.drawn) for o in consult.observations if o.level.drawn is not None]
        + ([consult.case.day(consult.case.now)] if consult.case.now is not None else [])
    )
    begin = max(record.start_day, last - 400.0)
    count = max(int((last - begin) * _PER_DAY), 8)
    times = begin + (last - begin) * np.arange(1, count + 1) / count
    few = fewer_draws(estimate, _COURSE_DRAWS).estimate
    assert few.volume_L is not None
    levels = flow.levels(full, times, few.vmax_mg_per_day, few.km_mg_per_L, few.volume_L)
    low, median, high = np.quantile(levels, [0.05, 0.5, 0.95], axis=0)
    if last - begin <= _LONG_DAYS:
        return Course(times, low, median, high)
    # whole days counted back from the end: a part of a day would show a spike
    day = np.floor(last - times + 1e-9).astype(int)
    kept = [np.flatnonzero(day == d) for d in range(int(day.max()) + 1)]
    kept = [k for k in reversed(kept) if len(k)]
    return Course(
        np.array([times[k].mean() for k in kept]),
        np.array([low[k].min() for k in kept]),
        np.array([median[k].mean() for k in kept]),
        np.array([high[k].max() for k in kept]),
    )


def record_chart(consult: Consult) -> Chart | None:
    """Doses as ticks, levels as points with their spread, and the band of levels the estimate gives the record."""
    case, goal = consult.case, consult.goal
    drawn = [o for o in consult.observations if o.level.drawn is not None]
    given = [c for c in case.courses if c.counts_as_given and c.start is not None]
    if not drawn or not given or case.origin is None:
        return None
    last = max([o.level.drawn for o in drawn if o.level.drawn is not None] + ([case.now] if case.now else []))
    fitted = course(consult)
    points: list[dict[str, Any]] = []
    for o in drawn:
        assert o.level.drawn is not None
        wide = np.exp(_SURE * o.log_sd)
        kind = "not used" if o.set_aside or not o.readable else "beyond the limit" if o.censored else "used"
        points.append(
            {
                "when": _stamp(o.level.drawn),
                "level": float(f"{o.working_mg_per_L:.5g}"),
                "low": float(f"{o.working_mg_per_L / wide:.5g}"),
                "high": float(f"{o.working_mg_per_L * wide:.5g}"),
                "name": o.name,
                "kind": kind,
            }
        )
    ticks, missed = _doses(given, consult.profile, last)
    seen = [p["high"] for p in points] + ([] if fitted is None else [float(np.quantile(fitted.high, 0.98))])
    top = 1.08 * max([goal.high_mg_per_L, *seen])
    floor = -0.07 * top
    when = _when(case.origin, last)
    bound = at_binding(consult, " at normal binding")
    level_title = f"Level{bound} (mg/L)"
    y = _y("level", level_title, floor, top)
    layers: list[Any] = [
        _zone(goal.low_mg_per_L, min(goal.high_mg_per_L, top), floor, top, level_title),
    ]
    if goal.critical_mg_per_L < top:
        layers.append(_line_across(goal.critical_mg_per_L, floor, top, level_title))
    if fitted is not None:
        rows = [
            {
                "when": _stamp(case.moment(float(t))),
                "low": float(f"{a:.4g}"),
                "level": float(f"{m:.4g}"),
                "high": float(f"{min(b, top):.4g}"),
            }
            for t, a, m, b in zip(fitted.days, fitted.low, fitted.median, fitted.high, strict=True)
        ]
        base = alt.Chart(_data(rows))
        layers.append(
            base.mark_area(color=BAND, opacity=0.8).encode(x=when, y=_y("low", level_title, floor, top), y2="high:Q")
        )
        layers.append(base.mark_line(color=BLUE, strokeWidth=1.2).encode(x=when, y=y))
    if ticks:
        layers.append(
            alt.Chart(_data([{**t, "level": floor * 0.5} for t in ticks]))
            .mark_tick(color=BLACK, orient="vertical", size=9, thickness=0.8)
            .encode(x=when, y=y)
        )
    if missed:
        layers.append(
            alt.Chart(_data([{**t, "level": floor * 0.5} for t in missed]))
            .mark_point(shape="cross", color=RED, size=45, angle=45, strokeWidth=1.5)
            .encode(x=when, y=y)
        )
    base = alt.Chart(_data(points))
    layers.append(
        base.mark_rule(color=BLACK, strokeWidth=1.2).encode(x=when, y=_y("low", level_title, floor, top), y2="high:Q")
    )
    layers.append(
        base.mark_point(filled=True, size=70, stroke=BLACK, strokeWidth=1.2, opacity=1).encode(
            x=when,
            y=y,
            fill=alt.Fill(
                "kind:N",
                scale=alt.Scale(domain=["used", "not used", "beyond the limit"], range=[RED, "white", GREY]),
                legend=None,
            ),
            shape=alt.Shape(
                "kind:N",
                scale=alt.Scale(
                    domain=["used", "not used", "beyond the limit"], range=["circle", "square", "triangle-down"]
                ),
                legend=None,
            ),
        )
    )
    layers.append(
        base.mark_text(align="left", dx=7, dy=-8, fontSize=11, color=BLACK).encode(x=when, y=y, text="name:N")
    )
    said = "; ".join(
        f"{o.name} {show(o.working_mg_per_L, 'mg/L')} on {show_date(o.level.drawn)}"
        for o in drawn
        if o.level.drawn is not None
    )
    text = (
        f"Level over time from {show_date(case.origin)} to {show_date(last)}: {len(ticks)} doses as ticks along the "
        f"bottom{f', {len(missed)} missed doses as crosses' if missed else ''}; measured levels{bound} with "
        f"their 90 % spread: {said}; target {show_number(goal.low_mg_per_L)} to {show(goal.high_mg_per_L, 'mg/L')} "
        "shaded"
    )
    if fitted is not None:
        text += (
            f"; the 90 % band the estimate gives the record, at its end {show_number(float(fitted.low[-1]))} to "
            f"{show(float(fitted.high[-1]), 'mg/L')}"
        )
    return finish("record", "The record: doses, levels and the fitted 90 % band", text + ".", layers, case)


def _doses(
    courses: Sequence[Line], profile: Profile, last: datetime
) -> tuple[list[dict[str, Any]], list[dict[str, Any]]]:
    """When each dose of dated lines was given, and when one was missed; infusions by rate are not doses."""
    ticks: list[dict[str, Any]] = []
    missed: list[dict[str, Any]] = []
    for c in courses:
        if c.start is None:
            continue
        if c.regimen is not None:
            for moment, intake in c.regimen.doses_from(c.start, min(c.end or last, last)):
                gone = any(abs(moment - m) <= timedelta(minutes=1) for m in c.missed)
                row = {"when": _stamp(moment), "amount": active_mg(intake, profile)}
                (missed if gone else ticks).append(row)
        elif c.single is not None:
            ticks.append({"when": _stamp(c.start), "amount": active_mg(c.single, profile)})
    return ticks, missed


def _when(first: datetime, last: datetime, pad: int = 0) -> alt.X:
    """The axis of time: dates, with the hour where the record is short."""
    hours = last - first < timedelta(days=4)
    return alt.X(
        "when:T",
        title="Date and time" if hours else "Date",
        scale=alt.Scale(type="utc", padding=pad) if pad else alt.Scale(type="utc"),
        axis=alt.Axis(format="%-d %b %H:%M" if hours else "%-d %b %Y", labelOverlap=True, tickCount=6),
    )


def typed_chart(case: Case, profile: Profile) -> Chart | None:
    """The record as typed, before anything is calculated: one lane each for doses, missed doses, infusions, dialysis
    and levels drawn. None where no line has a date."""
    dated = [c for c in case.courses if c.start is not None]
    if not dated or case.origin is None:
        return None
    ends = [m for c in dated for m in (c.start, c.end) if m is not None]
    ends += [x.drawn for x in case.levels if x.drawn is not None] + [
        m for s in case.dialysis for m in (s.start, s.end) if m
    ]
    last = max([*ends, *([case.now] if case.now is not None else [])])
    if any(c.end is None and c.regimen is not None for c in dated) and case.now is None:
        # a line that goes on is followed for a while beyond the last date there is
        last += timedelta(hours=4 * max(c.regimen.cycle_h for c in dated if c.regimen is not None))
    given = [c for c in dated if c.counts_as_given]
    ticks, missed = _doses(given, profile, last)
    left_out, _ = _doses([c for c in dated if not c.counts_as_given], profile, last)
    draws = [{"when": _stamp(x.drawn)} for x in case.levels if x.drawn is not None]
    runs = [(c.start, c.end) for c in given if c.rate_mg_per_day is not None and c.start is not None]
    spans = {
        "infusion": [{"when": _stamp(a), "end": _stamp(b or last)} for a, b in runs],
        "dialysis": [{"when": _stamp(s.start), "end": _stamp(s.end or last)} for s in case.dialysis],
    }
    points = {"dose": ticks, "missed": missed, "not counted": left_out, "level drawn": draws}
    order = ("dose", "missed", "not counted", "infusion", "dialysis", "level drawn")
    lanes = [name for name in order if points.get(name) or spans.get(name)]
    if not lanes:
        return None
    when = _when(case.origin, last, pad=8)
    y = alt.Y("lane:N", sort=lanes, title=None, scale=alt.Scale(domain=lanes))
    layers: list[Any] = []
    for name in lanes:
        if name in spans:
            rows = _data([{**r, "lane": name} for r in spans[name]])
            layers.append(
                alt.Chart(rows)
                .mark_bar(color=BLUE if name == "infusion" else ORANGE, height=9)
                .encode(x=when, x2="end:T", y=y)
            )
            continue
        base = alt.Chart(_data([{**r, "lane": name} for r in points[name]]))
        if name == "dose":
            layers.append(base.mark_tick(color=BLACK, orient="vertical", size=14, thickness=1).encode(x=when, y=y))
        elif name == "missed":
            mark = base.mark_point(shape="cross", color=RED, size=55, angle=45, strokeWidth=1.8)
            layers.append(mark.encode(x=when, y=y))
        else:
            shape, fill = ("diamond", RED) if name == "level drawn" else ("circle", "white")
            mark = base.mark_point(shape=shape, filled=True, fill=fill, stroke=BLACK, size=55, opacity=1)
            layers.append(mark.encode(x=when, y=y))
    counted = {
        "dose": len(ticks),
        "missed dose": len(missed),
        "dose that does not count as given": len(left_out),
        "infusion by rate": len(runs),
        "dialysis session": len(case.dialysis),
        "level drawn": len(draws),
    }
    plural = {"level drawn": "levels drawn", "dose that does not count as given": "doses that do not count as given"}
    plural["infusion by rate"] = "infusions by rate"
    said = [f"{n} {name if n == 1 else plural.get(name, name + 's')}" for name, n in counted.items() if n]
    text = f"The record as typed, {show_date(case.origin)} to {show_date(last)}: {', '.join(said)}."
    undated = len(case.courses) - len(dated)
    if undated:
        text += (
            f" {undated} line{'s' if undated > 1 else ''} without a start {'are' if undated > 1 else 'is'} not shown."
        )
    return finish("typed", "The record as typed", text, layers, case, height=26 * len(lanes) + 8)


def _zone(low: float, high: float, floor: float, top: float, title: str) -> Any:
    """The target range as a light band across."""
    return (
        alt.Chart(_data([{"low": low, "high": high}]))
        .mark_rect(color=TARGET, opacity=0.9)
        .encode(y=_y("low", title, floor, top), y2="high:Q")
    )


def _line_across(value: float, floor: float, top: float, title: str) -> Any:
    base = alt.Chart(_data([{"low": value, "name": f"critical, {show_number(value)} mg/L"}]))
    return base.mark_rule(color=RED, strokeDash=[6, 3]).encode(y=_y("low", title, floor, top)) + base.mark_text(
        align="left", dx=4, dy=-6, fontSize=10, color=BLACK
    ).encode(y=_y("low", title, floor, top), x=alt.value(0), text="name:N")


# --- 2: the plane of Km and Vmax -----------------------------------------------------------------------------


def contours(
    x: Floats, y: Floats, weights: Floats, shares: Sequence[float] = (0.9, 0.5), cells: int = 72
) -> dict[float, list[list[tuple[float, float]]]]:
    """Closed or open paths round the densest share of weighted draws, on logarithmic axes.

    The density is a histogram smoothed by a normal kernel (width after Silverman); the level of a path is the
    density above which the stated share of the draws lies.
    """
    a, b = np.log(x), np.log(y)
    edges = []
    widths = []
    n = 1.0 / float(np.sum(weights**2))
    for v in (a, b):
        mean = float(np.sum(weights * v))
        sd = float(np.sqrt(np.sum(weights * (v - mean) ** 2))) or 1e-6
        width = sd * n ** (-1 / 6)
        widths.append(width)
        edges.append(np.linspace(float(v.min()) - 3 * width, float(v.max()) + 3 * width, cells + 1))
    density, _, _ = np.histogram2d(a, b, bins=(edges[0], edges[1]), weights=weights)
    for axis in (0, 1):
        step = edges[axis][1] - edges[axis][0]
        reach = max(int(np.ceil(4 * widths[axis] / step)), 1)
        kernel = np.exp(-0.5 * (np.arange(-reach, reach + 1) * step / widths[axis]) ** 2)
        kernel /= kernel.sum()
        density = np.apply_along_axis(lambda r, k=kernel: np.convolve(r, k, mode="same"), axis, density)
    ordered = np.sort(density.ravel())[::-1]
    running = np.cumsum(ordered) / ordered.sum()
    mid = [0.5 * (e[1:] + e[:-1]) for e in edges]
    return {
        share: [
            [(float(np.exp(p)), float(np.exp(q))) for p, q in path]
            for path in _paths(density, mid[0], mid[1], float(ordered[np.searchsorted(running, share)]))
        ]
        for share in shares
    }


def _paths(z: Floats, x: Floats, y: Floats, level: float) -> list[list[tuple[float, float]]]:
    """Marching squares: the lines on which z is the level, joined at their common ends."""
    Place = tuple[str, int, int]

    def at(place: Place) -> tuple[float, float]:
        kind, i, j = place
        if kind == "x":
            part = (level - z[i, j]) / (z[i + 1, j] - z[i, j])
            return x[i] + part * (x[i + 1] - x[i]), y[j]
        part = (level - z[i, j]) / (z[i, j + 1] - z[i, j])
        return x[i], y[j] + part * (y[j + 1] - y[j])

    above = z >= level
    joined: dict[Place, list[Place]] = {}
    for i in range(len(x) - 1):
        for j in range(len(y) - 1):
            cut: list[Place] = []
            if above[i, j] != above[i + 1, j]:
                cut.append(("x", i, j))
            if above[i + 1, j] != above[i + 1, j + 1]:
                cut.append(("y", i + 1, j))
            if above[i, j + 1] != above[i + 1, j + 1]:
                cut.append(("x", i, j + 1))
            if above[i, j] != above[i, j + 1]:
                cut.append(("y", i, j))
            for p, q in zip(cut[::2], cut[1::2], strict=False):
                joined.setdefault(p, []).append(q)
                joined.setdefault(q, []).append(p)
    paths, used = [], set()
    for begin in sorted(joined, key=lambda p: (len(joined[p]), p)):
        if begin in used:
            continue
        path, here = [begin], begin
        used.add(begin)
        while True:
            onward = [p for p in joined[here] if p not in used]
            if not onward:
                break
            here = onward[0]
            used.add(here)
            path.append(here)
        if len(path) > 2 and begin in joined[here]:
            path.append(begin)
        paths.append([at(p) for p in path])
    return paths


def plane_chart(consult: Consult) -> Chart | None:
    """Where Vmax and Km of this patient may lie, with one line per steady level (direct linear plot)."""
    estimate = consult.chosen
    if estimate is None or "projection" in consult.blocked:
        return None
    km, vmax = estimate.summary["km_mg_per_L"], estimate.summary["vmax_mg_per_day"]
    own = consult.profile.rate  # in the drug's own time unit
    found = contours(estimate.km_mg_per_L, own(1.0) * estimate.vmax_mg_per_day, estimate.weights)
    spots = [p for path in found[0.9] for p in path]
    right = 1.1 * max(p[0] for p in spots)
    rates = [own(s.forecast.rate_mg_per_day) for s in (*consult.proposed, *[t for t in consult.table if t.present])]
    low = 0.94 * min([p[1] for p in spots] + rates)
    high = 1.05 * max(p[1] for p in spots)
    x = alt.X("km:Q", title="Km (mg/L)", scale=alt.Scale(domain=[0, right], nice=False), axis=alt.Axis(format=",~r"))
    y = _y("vmax", f"Vmax of active drug ({consult.profile.rate_unit})", low, high)
    layers: list[Any] = []
    for share, width, fill in ((0.9, 1.0, 0.35), (0.5, 2.0, 0.6)):
        rows = [
            {"km": float(f"{a:.5g}"), "vmax": float(f"{b:.5g}"), "path": f"{share} {i}", "order": k}
            for i, path in enumerate(found[share])
            for k, (a, b) in enumerate(path)
        ]
        layers.append(
            alt.Chart(_data(rows))
            .mark_line(color=BLUE, strokeWidth=width, fill=BAND, fillOpacity=fill, interpolate="linear-closed")
            .encode(x=x, y=y, detail="path:N", order="order:Q")
        )
    names = {o.level.index: o.name for o in consult.observations}
    lines = []
    for i, p in enumerate(consult.pairs):
        # the line is cut where it leaves the picture, so that its name stays in sight
        rate = own(p.rate_mg_per_day)
        slope = rate / p.level_mg_per_L
        ends = ((low - rate) / slope, (high - rate) / slope)
        first, last = max(0.0, ends[0]), min(right, ends[1])
        if last > first:
            for order, k in enumerate((first, last)):
                lines.append(
                    {
                        "km": k,
                        "vmax": rate + slope * k,
                        "name": names[p.level],
                        "dash": i % 4,
                        "order": order,
                    }
                )
    if lines:
        layers.append(
            alt.Chart(_data(lines))
            .mark_line(color=BLACK, strokeWidth=1.3)
            .encode(
                x=x,
                y=y,
                detail="name:N",
                strokeDash=alt.StrokeDash(
                    "dash:O",
                    scale=alt.Scale(domain=[0, 1, 2, 3], range=[[1, 0], [6, 3], [2, 2], [8, 3, 2, 3]]),
                    legend=None,
                ),
            )
        )
        layers.append(
            alt.Chart(_data([r for r in lines if r["order"] == 1]))
            .mark_text(align="right", dx=-4, dy=12, fontSize=11)
            .encode(x=x, y=y, text="name:N")
        )
    said_rates: list[str] = []
    seen: set[float] = set()
    for s in (*[t for t in consult.table if t.present], *consult.proposed):
        rate = own(s.forecast.rate_mg_per_day)
        if round(rate, 3) in seen:
            continue
        seen.add(round(rate, 3))
        word = "present dose" if s.present else "proposed dose"
        said_rates.append(f"{word}, {show(rate, consult.profile.rate_unit, 4)}: no steady state below")
        row = {"km": right, "vmax": rate, "name": said_rates[-1]}
        base = alt.Chart(_data([row]))
        layers.append(base.mark_rule(color=RED, strokeDash=[5, 3] if s.present else [1, 2]).encode(y=y))
        layers.append(base.mark_text(align="right", dx=-4, dy=-6, fontSize=10).encode(x=x, y=y, text="name:N"))
    point = estimate.point
    layers.append(
        alt.Chart(_data([{"km": point.km_mg_per_L, "vmax": own(point.vmax_mg_per_day)}]))
        .mark_point(shape="diamond", filled=True, color=BLACK, size=90, opacity=1)
        .encode(x=x, y=y)
    )
    text = (
        f"Plane of Km and Vmax ({estimate.method}). The regions that hold 50 % and 90 % of the possible pairs; Vmax "
        f"{show_number(own(vmax.low))} to {consult.profile.show_rate(vmax.high)}, Km {show_number(km.low)} to "
        f"{show(km.high, 'mg/L')} (90 % intervals); diamond: {point.kind}, Vmax "
        f"{consult.profile.show_rate(point.vmax_mg_per_day)}, Km "
        f"{show(point.km_mg_per_L, 'mg/L')}. "
        + (f"One line for each of {len(consult.pairs)} steady levels. " if lines else "")
        + ("Horizontal lines: " + "; ".join(said_rates) + "." if said_rates else "")
    )
    title = "Vmax and Km: regions of 50 % and 90 %, one line per steady level"
    return finish("plane", title, text.strip(), layers, consult.case)


# --- 3: regimens against the target --------------------------------------------------------------------------


def regimen_chart(consult: Consult) -> Chart | None:
    """Each regimen's steady level as a horizontal interval, with the chance of no steady state written out."""
    return regimens_chart(consult, (*consult.table, *consult.proposed))


def regimens_chart(consult: Consult, shown: Sequence[Shown]) -> Chart | None:
    """`regimen_chart` for the regimens given, for instance two chosen ones laid over each other."""
    if not shown:
        return None
    goal = consult.goal
    unique: dict[str, Shown] = {}
    for s in sorted(shown, key=lambda s: s.forecast.rate_mg_per_day):
        unique.setdefault(s.words, s)
    most = goal.critical_mg_per_L * 1.5
    same = all(
        abs(s.taken.steady.high - s.forecast.steady.high) < 1e-9 or s.taken is s.forecast for s in unique.values()
    )
    rows: list[dict[str, Any]] = []
    order: list[str] = []
    said: list[str] = []
    told = told_up_to(consult)
    for s in unique.values():
        mark = mark_of(s).replace("not offered", NOT_OFFERED)
        name = f"{mark + ': ' if mark else ''}{short_words(s.words)}"
        order.append(name)
        for line, f in (("central", s.forecast), ("every dose taken", s.taken)):
            if same and line != "central":
                continue
            rows.append(
                {
                    "name": name,
                    "line": line,
                    "low": min(f.steady.low, most),
                    "median": min(f.steady.median, 2 * most),
                    "high": min(f.steady.high, most),
                    "beyond": "yes" if f.steady.high > most else "no",
                    "chance": f"no steady state {percent(f.no_steady_state)}"
                    if line == "every dose taken" or same
                    else "",
                }
            )
        t = s.taken
        said.append(
            f"{name}: {level_edge(s.forecast.steady.low, told)} to "
            + level_edge(s.forecast.steady.high, told)
            + (" mg/L" if np.isfinite(s.forecast.steady.high) else "")
            + f", no steady state {percent(t.no_steady_state)}"
        )
    wrapped = {n: "|".join(textwrap.wrap(n, 44)) for n in order}
    rows = [{**r, "name": wrapped[r["name"]]} for r in rows]
    deepest = max(w.count("|") + 1 for w in wrapped.values())
    height = max(90, max(34, 13 * deepest + 8) * len(order))
    y = alt.Y(
        "name:N",
        sort=[wrapped[n] for n in order],
        title=None,
        axis=alt.Axis(labelLimit=330, labelFontSize=10, labelExpr="split(datum.label, '|')"),
    )
    offset = alt.YOffset("line:N", sort=["central", "every dose taken"])
    title = f"Steady level{at_binding(consult, ' at normal binding')} (mg/L)"

    def x(field: str) -> alt.X:
        return alt.X(
            f"{field}:Q",
            title=title,
            scale=alt.Scale(domain=[0, most], nice=False, clamp=True),
            axis=alt.Axis(format=",~r"),
        )

    zone = (
        alt.Chart(_data([{"low": goal.low_mg_per_L, "high": goal.high_mg_per_L}]))
        .mark_rect(color=TARGET, opacity=0.9)
        .encode(x=x("low"), x2="high:Q")
    )
    critical = (
        alt.Chart(_data([{"low": goal.critical_mg_per_L}])).mark_rule(color=RED, strokeDash=[6, 3]).encode(x=x("low"))
    )
    base = alt.Chart(_data(rows))
    dash = alt.StrokeDash(
        "line:N",
        scale=alt.Scale(domain=["central", "every dose taken"], range=[[1, 0], [4, 2]]),
        legend=None if same else alt.Legend(title=None, orient="bottom"),
    )
    bars = base.mark_rule(strokeWidth=2.4, color=BLUE).encode(
        x=x("low"), x2="high:Q", y=y, yOffset=offset, strokeDash=dash
    )
    dots = (
        base.transform_filter(f"datum.median <= {most}")
        .mark_point(filled=True, color=BLACK, size=55, opacity=1)
        .encode(x=x("median"), y=y, yOffset=offset)
    )
    arrows = (
        base.transform_filter("datum.beyond == 'yes'")
        .mark_point(shape="triangle-right", filled=True, color=BLUE, size=80, opacity=1)
        .encode(x=x("high"), y=y, yOffset=offset)
    )
    words = (
        base.transform_filter("datum.chance != ''")
        .mark_text(align="left", fontSize=10, dx=8)
        .encode(x=alt.value(430), y=y, yOffset=offset, text="chance:N")
    )
    text = (
        f"Steady level of each regimen, 90 % interval with its median, against the target "
        f"{show_number(goal.low_mg_per_L)} to {show(goal.high_mg_per_L, 'mg/L')} (shaded) and the critical level "
        f"{show(goal.critical_mg_per_L, 'mg/L')} (dashed); an arrow goes on beyond the picture. "
        + "; ".join(said)
        + "."
    )
    return finish(
        "regimens",
        "Regimens against the target, with the chance of no steady state",
        text,
        [zone, critical, bars, dots, arrows, words],
        consult.case,
        width=430,
        height=height,
    )


# --- 4: when to look again -----------------------------------------------------------------------------------


def narrowing_chart(consult: Consult) -> Chart | None:
    """How much a level on each coming day would narrow the forecast of the steady level."""
    found = consult.plan.next_level if consult.plan is not None else None
    if found is None or not found.draws:
        return None
    rows: list[dict[str, Any]] = []
    for d in found.draws:
        kind = "proposed" if d is found.chosen else "early safety level" if d is found.safety else "possible"
        name = ""
        if kind != "possible":
            name = kind + (f", {show_date(d.moment)}" if d.moment is not None else f", day {show_number(d.day, 2)}")
        rows.append({"day": round(d.day, 3), "left": round(100 * d.spread, 3), "kind": kind, "name": name})
    top = 1.15 * 100 * found.before
    title = "Spread left after the level (%)"
    x = alt.X(
        "day:Q",
        title="Days from the first dose of the regimen",
        scale=alt.Scale(domain=[0, max(r["day"] for r in rows) + 1], nice=False),
        axis=alt.Axis(format=",~r"),
    )
    y = _y("left", title, 0.0, top)
    base = alt.Chart(_data(rows))
    now = alt.Chart(_data([{"left": 100 * found.before, "name": "without a level"}]))
    kinds = ["possible", "proposed", "early safety level"]
    layers = [
        now.mark_rule(color=GREY, strokeDash=[6, 3]).encode(y=y),
        now.mark_text(align="left", dx=4, dy=-6, fontSize=10).encode(y=y, x=alt.value(0), text="name:N"),
        base.mark_line(color=BLUE, strokeWidth=1.5).encode(x=x, y=y),
        base.mark_point(filled=True, opacity=1, stroke=BLACK, size=70).encode(
            x=x,
            y=y,
            shape=alt.Shape(
                "kind:N",
                scale=alt.Scale(domain=kinds, range=["circle", "diamond", "triangle-up"]),
                legend=None,
            ),
            fill=alt.Fill("kind:N", scale=alt.Scale(domain=kinds, range=["white", BLACK, ORANGE]), legend=None),
        ),
        base.mark_text(align="left", dx=6, dy=-10, fontSize=11).encode(x=x, y=y, text="name:N"),
    ]
    chosen = found.chosen
    text = (
        f"What a level on each of {len(rows)} possible days would leave of the spread of the forecast "
        f"({show_number(100 * found.before, 2)} % without one), on {found.regimen_words}: "
        f"{show_number(100 * chosen.spread, 2)} % on the proposed day {show_number(chosen.day, 3)}, "
        f"{show_number(100 * found.draws[-1].spread, 2)} % on the last, day {show_number(found.draws[-1].day, 3)}."
    )
    if found.safety is not None:
        text += f" An early safety level is due on day {show_number(found.safety.day, 3)}."
    return finish(
        "narrowing", "How much a level on each day would narrow the forecast", text, layers, consult.case, height=200
    )
