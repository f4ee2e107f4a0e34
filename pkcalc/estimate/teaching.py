"""The same steady levels in five pictures, for residents: what is drawn, and how Vmax and Km are read off it.

Only numbers and words leave this module; the form and the note draw them. Nothing here is for a patient: the
straight lines are shown because they are taught.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from pkcalc import formulas
from pkcalc.errors import CannotEstimate
from pkcalc.estimate.lines import (
    DIRECT_LINEAR,
    REGRESSION,
    STRAIGHT_LINES,
    LineFailure,
    Result,
    SteadyPairs,
    StraightLine,
    admissible,
    compare,
    crossings,
    line_axes,
    medians,
    redrawn_levels,
    straight_line,
)
from pkcalc.estimate.regression import all_one, level_on_rate
from pkcalc.estimate.result import Estimate, Floats
from pkcalc.units import show, show_number

BANNER = "For teaching only, not for any patient: the sizes of all events are made up."
LEVEL_AGAINST_DOSE = "level against dose"
#: The order in which the pictures are shown, from parameter plane to curve.
PICTURES: tuple[str, ...] = (DIRECT_LINEAR, *STRAIGHT_LINES, LEVEL_AGAINST_DOSE)

_CURVE_POINTS = 80


@dataclass(frozen=True)
class Axis:
    """What an axis shows, in words, and its unit."""

    words: str
    unit: str


@dataclass(frozen=True)
class Trace:
    """One thing to draw: a point, or points to be joined in order.

    layer: "pair" (a steady level), "line" (one pair's line in the direct linear plot), "fit" (what the method
    lays through them), "crossing", "reading" (where Vmax or Km is read), "repeat" (the fit to redrawn
    levels), "before", "after", "false point" (clinic events, `events.py`).
    """

    name: str
    layer: str
    x: tuple[float, ...]
    y: tuple[float, ...]


@dataclass(frozen=True)
class Picture:
    """One of the five pictures of the same pairs.

    how_read: how Vmax and Km are read off it. reading: what is read here, or why nothing can be.
    traces: in drawing order. repeats: what redrawing the levels within their spread does to the reading.
    """

    name: str
    x: Axis
    y: Axis
    how_read: str
    reading: str
    traces: tuple[Trace, ...]
    repeats: str = ""

    def rows(self) -> list[dict[str, object]]:
        """One row per drawn point, ready for a table: picture, layer, name, order, x, y."""
        return [
            {"picture": self.name, "layer": trace.layer, "name": trace.name, "order": order, "x": x, "y": y}
            for trace in self.traces
            for order, (x, y) in enumerate(zip(trace.x, trace.y, strict=True))
        ]


_LEVEL = Axis("Steady level", "mg/L")
_RATE = Axis("Dose rate of active drug", "mg/day")
AXES: Mapping[str, tuple[Axis, Axis]] = {
    DIRECT_LINEAR: (Axis("Km", "mg/L"), Axis("Vmax", "mg/day")),
    "double reciprocal": (
        Axis("One divided by the steady level", "L/mg"),
        Axis("One divided by the dose rate", "day/mg"),
    ),
    "C/R against C": (_LEVEL, Axis("Steady level divided by the dose rate", "day/L")),
    "R against R/C": (Axis("Dose rate divided by the steady level (clearance)", "L/day"), _RATE),
    LEVEL_AGAINST_DOSE: (_RATE, _LEVEL),
}

HOW_READ: Mapping[str, str] = {
    DIRECT_LINEAR: (
        "Each level is one line, from minus the level on the Km axis through its dose rate on the Vmax "
        "axis. Where two lines cross, one Vmax and one Km explain both levels; the medians of all crossings "
        "are the answer. Crossings outside the positive quadrant count as larger than any number."
    ),
    "double reciprocal": (
        "Vmax is one divided by the height at which the line meets the vertical axis; Km is minus one "
        "divided by the place at which it meets the horizontal axis."
    ),
    "C/R against C": (
        "Vmax is one divided by the slope; Km is minus the place at which the line meets the horizontal axis."
    ),
    "R against R/C": "Vmax is the height at which the line meets the vertical axis; Km is minus the slope.",
    LEVEL_AGAINST_DOSE: (
        "Vmax is the dose rate at which the curve goes straight up; Km is the level on half of that dose rate."
    ),
}


# --- the five pictures --------------------------------------------------------------------------------------


def pictures(pairs: SteadyPairs, *, repeats: int = 24, log_sd: Floats | None = None) -> tuple[Picture, ...]:
    """The five pictures of the same pairs, in the order of `PICTURES`.

    repeats: how many times the levels are drawn again within their spread, 0 for none. log_sd: another spread
    than the pairs' own for these repeats, shape (n,), to show what one part of it (the assay) does alone.
    """
    results = {result.method: result for result in compare(pairs, draws=512)}
    two_doses = not all_one(pairs.rate_mg_per_day)  # on one dose nothing is read, however often redrawn
    redrawn = redrawn_levels(pairs, repeats, log_sd) if repeats and two_doses else None
    return (
        _direct_linear(pairs, results[DIRECT_LINEAR], redrawn),
        *(_straight(kind, pairs, results[kind], redrawn) for kind in STRAIGHT_LINES),
        _curve(pairs, results[REGRESSION], redrawn),
    )


def _picture(name: str, result: Result, traces: list[Trace], repeats: str) -> Picture:
    x, y = AXES[name]
    return Picture(name, x, y, HOW_READ[name], _reading(result), tuple(traces), repeats)


def _reading(result: Result) -> str:
    if isinstance(result, LineFailure):
        return result.text
    return in_words(result.point.vmax_mg_per_day, result.point.km_mg_per_L)


def in_words(vmax: float, km: float) -> str:
    return f"Vmax {show(vmax, 'mg/day')}, Km {show(km, 'mg/L')}"


def _joined(name: str, layer: str, x: Floats, y: Floats) -> Trace:
    return Trace(name, layer, tuple(float(v) for v in x), tuple(float(v) for v in y))


def _direct_linear(pairs: SteadyPairs, result: Result, redrawn: Floats | None) -> Picture:
    rate, level = pairs.rate_mg_per_day, pairs.level_mg_per_L
    point = result.point if isinstance(result, Estimate) else None
    reach = 2.5 * point.km_mg_per_L if point else 2.0 * float(level.max())
    traces, repeat_words = [], ""
    if redrawn is not None:
        found = crossings(level=redrawn, rate=rate, error_in="level")
        vmax, km = medians(found)
        good = admissible(vmax, km, pairs)
        traces += [
            Trace(f"repeat {at + 1}", "repeat", (float(km[at]),), (float(vmax[at]),)) for at in np.flatnonzero(good)
        ]
        repeat_words = _repeat_words(vmax, km, good)
    for at, (r, c) in enumerate(zip(rate, level, strict=True)):
        ends = np.array([-c, 0.0, reach])
        traces.append(_joined(pairs.words(at), "line", ends, r + ends * r / c))
    found = crossings(level=level, rate=rate, error_in="level")
    shown = (found.km > 0) & (found.km <= reach)
    traces += [
        Trace(
            f"crossing of {pairs.words(int(found.first[at]))} and {pairs.words(int(found.second[at]))}",
            "crossing",
            (float(found.km[at]),),
            (float(found.vmax[at]),),
        )
        for at in np.flatnonzero(shown)
    ]
    if point:
        traces.append(Trace("medians", "reading", (point.km_mg_per_L,), (point.vmax_mg_per_day,)))
    return _picture(DIRECT_LINEAR, result, traces, repeat_words)


def _straight(kind: StraightLine, pairs: SteadyPairs, result: Result, redrawn: Floats | None) -> Picture:
    rate, level = pairs.rate_mg_per_day, pairs.level_mg_per_L
    x, y = line_axes(kind, level=level, rate=rate)
    far = 1.1 * float(x.max())
    traces, repeat_words = [], ""
    if redrawn is not None:
        read = straight_line(kind, level=redrawn, rate=rate)
        good = admissible(read.vmax, read.km, pairs)
        ends = np.array([0.0, far])
        traces += [
            _joined(f"repeat {at + 1}", "repeat", ends, read.intercept[at] + read.slope[at] * ends)
            for at in range(len(redrawn))
            if np.isfinite(read.slope[at])
        ]
        repeat_words = _repeat_words(read.vmax, read.km, good)
    traces += [_joined(pairs.words(at), "pair", x[at : at + 1], y[at : at + 1]) for at in range(len(pairs))]
    read = straight_line(kind, level=level, rate=rate)
    slope, intercept = float(read.slope), float(read.intercept)
    if np.isfinite(slope):
        near, places = 0.0, []
        if isinstance(result, Estimate):
            places = [("meets the vertical axis", 0.0, intercept)]
            if kind == "R against R/C":
                far = max(far, -intercept / slope)
            else:
                near = -intercept / slope
            places.append(("meets the horizontal axis", -intercept / slope, 0.0))
        ends = np.array([near, far])
        traces.append(_joined("least squares line", "fit", ends, intercept + slope * ends))
        traces += [Trace(name, "reading", (at_x,), (at_y,)) for name, at_x, at_y in places]
    return _picture(kind, result, traces, repeat_words)


def _curve(pairs: SteadyPairs, result: Result, redrawn: Floats | None) -> Picture:
    rate, level = pairs.rate_mg_per_day, pairs.level_mg_per_L
    roof = 2.0 * float(level.max())
    traces, repeat_words = [], ""
    if redrawn is not None:
        fitted = np.full((len(redrawn), 2), np.nan)
        for at, levels in enumerate(redrawn):
            try:
                fit = level_on_rate(rate_mg_per_day=rate, level_mg_per_L=levels, level_log_sd=pairs.level_log_sd)
            except CannotEstimate:
                continue  # counted among the sets that give no possible answer
            fitted[at] = fit.vmax, fit.km
        good = admissible(fitted[:, 0], fitted[:, 1], pairs)
        traces += [
            _level_curve(f"repeat {at + 1}", "repeat", float(fitted[at, 0]), float(fitted[at, 1]), roof)
            for at in np.flatnonzero(good)
        ]
        repeat_words = _repeat_words(fitted[:, 0], fitted[:, 1], good)
    traces += [Trace(pairs.words(at), "pair", (float(rate[at]),), (float(level[at]),)) for at in range(len(pairs))]
    if isinstance(result, Estimate):
        vmax, km = result.point.vmax_mg_per_day, result.point.km_mg_per_L
        roof = max(roof, km)
        traces += [
            _level_curve("weighted regression", "fit", vmax, km, roof),
            Trace("the dose rate the curve never reaches", "reading", (vmax, vmax), (0.0, roof)),
            Trace("half of Vmax", "reading", (vmax / 2,), (km,)),
        ]
    return _picture(LEVEL_AGAINST_DOSE, result, traces, repeat_words)


def _level_curve(name: str, layer: str, vmax: float, km: float, roof: float) -> Trace:
    """The curve up to a level, walked in even steps of level so that its steep end stays smooth."""
    level = np.linspace(0.0, roof, _CURVE_POINTS)
    rate = formulas.dose_rate_for_level(level_mg_per_L=level, vmax_mg_per_day=vmax, km_mg_per_L=km)
    return _joined(name, layer, np.asarray(rate), level)


def _repeat_words(vmax: Floats, km: Floats, good: np.ndarray[tuple[int, ...], np.dtype[np.bool_]]) -> str:
    total, failed = len(good), int((~good).sum())
    if failed == total:
        return f"None of {total} redrawn sets gives a possible answer."
    text = (
        f"In {total - failed} of {total} redrawn sets Vmax is read from "
        f"{show_number(float(vmax[good].min()))} to {show(float(vmax[good].max()), 'mg/day')} and Km from "
        f"{show_number(float(km[good].min()))} to {show(float(km[good].max()), 'mg/L')}"
    )
    return text + ("." if not failed else f"; {failed} {'gives' if failed == 1 else 'give'} no possible answer.")


def true_line(picture: str, *, vmax: float, km: float, layer: str, beside_km: float) -> Trace:
    """The line or curve that a Vmax and a Km draw in a picture; a point in the direct linear plot.

    beside_km: the other Km in the same picture, so that both lines reach over the same ground.
    """
    name = f"{layer}: {in_words(vmax, km)}"
    widest, least = max(km, beside_km), min(km, beside_km)
    if picture == DIRECT_LINEAR:
        return Trace(name, layer, (km,), (vmax,))
    if picture == LEVEL_AGAINST_DOSE:
        return _level_curve(name, layer, vmax, km, 6.0 * widest)
    if picture == "double reciprocal":
        ends = np.array([-1.0 / least, 2.0 / least])
        return _joined(name, layer, ends, (1.0 + km * ends) / vmax)
    if picture == "C/R against C":
        ends = np.array([-widest, 6.0 * widest])
        return _joined(name, layer, ends, (km + ends) / vmax)
    ends = np.array([0.0, vmax / km])
    return _joined(name, layer, ends, vmax - km * ends)


def at_dose(picture: str, rate: float, level: float | None, layer: str) -> tuple[Trace, ...]:
    """One steady level as it stands in a picture; nothing where there is no steady level."""
    if level is None:
        return ()
    name = f"{layer}: {show(rate, 'mg/day')}, {show(level, 'mg/L')}"
    if picture == DIRECT_LINEAR:
        ends = np.array([-level, 0.0, level])
        return (_joined(name, layer, ends, rate + ends * rate / level),)
    if picture == LEVEL_AGAINST_DOSE:
        return (Trace(name, layer, (rate,), (level,)),)
    kind = next(line for line in STRAIGHT_LINES if line == picture)
    x, y = line_axes(kind, level=np.array([level]), rate=np.array([rate]))
    return (_joined(name, layer, x, y),)
