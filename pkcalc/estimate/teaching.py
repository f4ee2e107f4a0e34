"""The same steady levels in five pictures, for residents: what is read off each and what clinic events do to it.

Only numbers and words leave this module; the form and the note draw them. Nothing here is for a patient: the
sizes of the events are made up for teaching, and the straight lines are shown because they are taught.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from pkcalc import formulas
from pkcalc.errors import CannotEstimate
from pkcalc.estimate.lines import (
    ABSURD_VMAX,
    DIRECT_LINEAR,
    REGRESSION,
    STRAIGHT_LINES,
    LineFailure,
    Result,
    SteadyPairs,
    StraightLine,
    compare,
    crossings,
    line_axes,
    redrawn_levels,
    straight_line,
)
from pkcalc.estimate.regression import level_on_rate
from pkcalc.estimate.result import Estimate, Floats
from pkcalc.units import show, show_number

BANNER = "For teaching only: made-up events, not for any patient."
LEVEL_AGAINST_DOSE = "level against dose"
#: The order in which the pictures are shown, from parameter plane to curve.
PICTURES: tuple[str, ...] = (DIRECT_LINEAR, *STRAIGHT_LINES, LEVEL_AGAINST_DOSE)

_CURVE_POINTS = 80
_MOST_TIMES = 5.0


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
    levels), "before", "after", "false point" (clinic events).
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
        "axis. Where "
        "two lines cross, one Vmax and one Km explain both levels; the medians of all crossings are the "
        "answer. "
        "Crossings outside the positive quadrant count as larger than any number."
    ),
    "double reciprocal": (
        "Vmax is one divided by the height at which the line meets the vertical axis; Km is minus one "
        "divided by "
        "the place at which it meets the horizontal axis."
    ),
    "C/R against C": (
        "Vmax is one divided by the slope; Km is minus the place at which the line meets the horizontal axis."
    ),
    "R against R/C": "Vmax is the height at which the line meets the vertical axis; Km is minus the slope.",
    LEVEL_AGAINST_DOSE: (
        "Vmax is the dose rate at which the curve goes straight up; Km is the level on half of that dose "
        "rate."
    ),
}


# --- the five pictures --------------------------------------------------------------------------------------


def pictures(pairs: SteadyPairs, *, repeats: int = 24, log_sd: Floats | None = None) -> tuple[Picture, ...]:
    """The five pictures of the same pairs, in the order of `PICTURES`.

    repeats: how many times the levels are drawn again within their spread, 0 for none. log_sd: another spread
    than the pairs' own for these repeats, shape (n,), to show what one part of it (the assay) does alone.
    """
    results = {result.method: result for result in compare(pairs, draws=512)}
    redrawn = redrawn_levels(pairs, repeats, log_sd) if repeats else None
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
    return _values(result.point.vmax_mg_per_day, result.point.km_mg_per_L)


def _values(vmax: float, km: float) -> str:
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
        vmax, km = np.median(found.vmax_counted, axis=-1), np.median(found.km_counted, axis=-1)
        good = _usable(vmax, km, pairs)
        traces += [
            Trace(f"repeat {at + 1}", "repeat", (float(km[at]),), (float(vmax[at]),))
            for at in np.flatnonzero(good)
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
        good = _usable(read.vmax, read.km, pairs)
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
                fit = level_on_rate(
                    rate_mg_per_day=rate, level_mg_per_L=levels, level_log_sd=pairs.level_log_sd
                )
            except CannotEstimate:
                continue  # counted among the sets that give no possible answer
            fitted[at] = fit.vmax, fit.km
        good = _usable(fitted[:, 0], fitted[:, 1], pairs)
        traces += [
            _level_curve(f"repeat {at + 1}", "repeat", *fitted[at].tolist(), roof)
            for at in np.flatnonzero(good)
        ]
        repeat_words = _repeat_words(fitted[:, 0], fitted[:, 1], good)
    traces += [
        Trace(pairs.words(at), "pair", (float(rate[at]),), (float(level[at]),)) for at in range(len(pairs))
    ]
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


def _usable(vmax: Floats, km: Floats, pairs: SteadyPairs) -> np.ndarray[tuple[int, ...], np.dtype[np.bool_]]:
    largest = float(pairs.rate_mg_per_day.max())
    with np.errstate(invalid="ignore"):
        return np.isfinite(km) & (km > 0) & (vmax > largest) & (vmax < ABSURD_VMAX * largest)


def _repeat_words(vmax: Floats, km: Floats, good: np.ndarray[tuple[int, ...], np.dtype[np.bool_]]) -> str:
    total, failed = len(good), int((~good).sum())
    if failed == total:
        return f"None of {total} redrawn sets gives a possible answer."
    text = (
        f"In {total - failed} of {total} redrawn sets Vmax is read from "
        f"{show_number(float(vmax[good].min()))} to "
        f"{show(float(vmax[good].max()), 'mg/day')} and Km from {show_number(float(km[good].min()))} to "
        f"{show(float(km[good].max()), 'mg/L')}"
    )
    return text + (
        "." if not failed else f"; {failed} {'gives' if failed == 1 else 'give'} no possible answer."
    )


# --- clinic events ------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Sizes:
    """How large each event is. Made up for teaching; a real patient's change is never known beforehand.

    inducer, inhibitor: factor on Vmax. competitor: factor on Km. new_salt: active drug in the new form
    divided by that in the old, at the same labelled dose. missed_days: days without a dose. restarted_days:
    days on the old dose again before the level is drawn.
    """

    inducer: float = 1.3
    inhibitor: float = 0.75
    competitor: float = 1.5
    new_salt: float = 1.09
    missed_days: float = 7.0
    restarted_days: float = 7.0


Movement = Literal["Vmax up", "Vmax down", "Km up", "along the line", "false point"]

#: What each change does to each named picture. Common practice, no source; the fixed points follow from the
#: equations of the lines.
MOVEMENTS: Mapping[Movement, Mapping[str, str]] = {
    "Vmax up": {
        DIRECT_LINEAR: "The crossing moves straight up: same Km, higher Vmax.",
        "double reciprocal": (
            "The line turns down about its x-intercept, minus one divided by Km: it is "
            "less steep and "
            "meets the vertical axis lower."
        ),
        "C/R against C": "The line turns down about its x-intercept, minus Km: less steep.",
        "R against R/C": "The line moves up, parallel to itself: same slope, since Km is the same.",
        LEVEL_AGAINST_DOSE: (
            "The curve stretches to the right: every level needs more drug per day, in proportion to Vmax."
        ),
    },
    "Vmax down": {
        DIRECT_LINEAR: "The crossing moves straight down: same Km, lower Vmax.",
        "double reciprocal": (
            "The line turns up about its x-intercept, minus one divided by Km: it is "
            "steeper and meets "
            "the vertical axis higher. It does not simply shift."
        ),
        "C/R against C": "The line turns up about its x-intercept, minus Km: steeper.",
        "R against R/C": "The line moves down, parallel to itself: same slope, since Km is the same.",
        LEVEL_AGAINST_DOSE: (
            "The curve is squeezed to the left: every level needs less drug per day, in "
            "proportion to "
            "Vmax, and the dose rate that can never settle comes nearer."
        ),
    },
    "Km up": {
        DIRECT_LINEAR: "The crossing moves straight to the right: same Vmax, higher Km.",
        "double reciprocal": "The line turns up about its y-intercept, one divided by Vmax: steeper.",
        "C/R against C": "The line moves up, parallel to itself: same slope, since Vmax is the same.",
        "R against R/C": "The line turns down about its y-intercept, Vmax: it falls more steeply.",
        LEVEL_AGAINST_DOSE: (
            "Every level rises in proportion to Km; the dose rate that can never settle stays where it is."
        ),
    },
    "along the line": {
        DIRECT_LINEAR: "The crossing stays; the new level is a new line through the same crossing.",
        "double reciprocal": "The line stays; the point moves along it, down and to the left.",
        "C/R against C": "The line stays; the point moves along it, up and to the right.",
        "R against R/C": "The line stays; the point moves along it, up and to the left.",
        LEVEL_AGAINST_DOSE: "The curve stays; the point moves up along it, further than in proportion.",
    },
    "false point": {
        DIRECT_LINEAR: (
            "The patient's crossing stays. Taken for steady, the low level draws a line through "
            "the same dose "
            "rate but too steep, and its crossings are false."
        ),
        "double reciprocal": (
            "The patient's line stays. Taken for steady, the low level stands too far to "
            "the right at "
            "the height of its dose, where it pulls hardest on the line."
        ),
        "C/R against C": "The patient's line stays. Taken for steady, the low level stands too far down and "
        "to the left.",
        "R against R/C": "The patient's line stays. Taken for steady, the low level stands too far to the "
        "right at the "
        "height of its dose.",
        LEVEL_AGAINST_DOSE: (
            "The patient's curve stays. Taken for steady, the low level stands straight below it."
        ),
    },
}


@dataclass(frozen=True)
class EventEffect:
    """What one clinic event does to the patient, to each picture and to the next dose.

    name, story: in words. vmax_mg_per_day, km_mg_per_L: after the event. level_before_mg_per_L,
    level_after_mg_per_L: on the present labelled dose, None where the dose can never settle.
    dose_before_mg_per_day, dose_after_mg_per_day: labelled dose that holds the aimed level, in mg of active
    drug of the old form. movement: sentence for each picture. traces: for each picture, what to draw before
    and after. text: the effect in mg and mg/L.
    """

    name: str
    story: str
    vmax_mg_per_day: float
    km_mg_per_L: float
    level_before_mg_per_L: float | None
    level_after_mg_per_L: float | None
    dose_before_mg_per_day: float
    dose_after_mg_per_day: float
    movement: Mapping[str, str]
    traces: Mapping[str, tuple[Trace, ...]]
    text: str


@dataclass(frozen=True)
class Patient:
    """The patient of the lesson: what the events act on. All above 0; volume_L None where none is known."""

    vmax_mg_per_day: float
    km_mg_per_L: float
    dose_rate_mg_per_day: float
    aim_mg_per_L: float
    volume_L: float | None = None


def clinic_events(patient: Patient, sizes: Sizes | None = None) -> tuple[EventEffect, ...]:
    """An inducer, an inhibitor, a reversible competitor, a new salt and a missed week, one after the other.

    The missed week needs a volume of distribution for its fall in level and is left out without one.
    """
    size = sizes or Sizes()
    vmax, km = patient.vmax_mg_per_day, patient.km_mg_per_L
    events = [
        _changed(
            patient,
            "inducer started",
            f"After some weeks the liver makes more enzyme: Vmax is {_times(size.inducer)} what it was, Km "
            "the same.",
            vmax * size.inducer,
            km,
        ),
        _changed(
            patient,
            "inhibitor started",
            f"Part of the enzyme is put out of action: Vmax is {_times(size.inhibitor)} what it was, Km the "
            "same.",
            vmax * size.inhibitor,
            km,
        ),
        _changed(
            patient,
            "reversible competitor started",
            f"Another drug competes for the same enzyme: Km is {_times(size.competitor)} what it was, Vmax "
            "the same.",
            vmax,
            km * size.competitor,
        ),
        _new_salt(patient, size.new_salt),
    ]
    if patient.volume_L is not None:
        events.append(_missed(patient, size.missed_days, size.restarted_days, patient.volume_L))
    return tuple(events)


def _times(factor: float) -> str:
    return f"{show_number(factor)} times"


def _settles_at(rate: float, vmax: float, km: float) -> float | None:
    level = float(
        formulas.steady_state_level(dose_rate_mg_per_day=rate, vmax_mg_per_day=vmax, km_mg_per_L=km)
    )
    return level if np.isfinite(level) else None


def _holds(level: float, vmax: float, km: float) -> float:
    return float(formulas.dose_rate_for_level(level_mg_per_L=level, vmax_mg_per_day=vmax, km_mg_per_L=km))


def _level_words(level: float | None) -> str:
    return (
        "no steady level: the dose is more than the body can remove" if level is None else show(level, "mg/L")
    )


def _effect_words(patient: Patient, before: float | None, after: float | None, dose_after: float) -> str:
    dose_before = _holds(patient.aim_mg_per_L, patient.vmax_mg_per_day, patient.km_mg_per_L)
    return (
        f"On {show(patient.dose_rate_mg_per_day, 'mg/day')} the steady level goes from "
        f"{_level_words(before)} to "
        f"{_level_words(after)}. To hold {show(patient.aim_mg_per_L, 'mg/L')} it now takes "
        f"{show(dose_after, 'mg/day')} instead of {show(dose_before, 'mg/day')}."
    )


def _changed(patient: Patient, name: str, story: str, vmax: float, km: float) -> EventEffect:
    movement: Movement = "Km up" if km != patient.km_mg_per_L else "Vmax up"
    if vmax < patient.vmax_mg_per_day:
        movement = "Vmax down"
    before = _settles_at(patient.dose_rate_mg_per_day, patient.vmax_mg_per_day, patient.km_mg_per_L)
    after = _settles_at(patient.dose_rate_mg_per_day, vmax, km)
    dose_after = _holds(patient.aim_mg_per_L, vmax, km)
    traces = {
        picture: (
            true_line(
                picture, vmax=patient.vmax_mg_per_day, km=patient.km_mg_per_L, layer="before", beside_km=km
            ),
            true_line(picture, vmax=vmax, km=km, layer="after", beside_km=patient.km_mg_per_L),
        )
        for picture in PICTURES
    }
    return EventEffect(
        name=name,
        story=story,
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        level_before_mg_per_L=before,
        level_after_mg_per_L=after,
        dose_before_mg_per_day=_holds(patient.aim_mg_per_L, patient.vmax_mg_per_day, patient.km_mg_per_L),
        dose_after_mg_per_day=dose_after,
        movement=MOVEMENTS[movement],
        traces=traces,
        text=_effect_words(patient, before, after, dose_after),
    )


def _new_salt(patient: Patient, ratio: float) -> EventEffect:
    vmax, km, rate = patient.vmax_mg_per_day, patient.km_mg_per_L, patient.dose_rate_mg_per_day
    before, after = _settles_at(rate, vmax, km), _settles_at(rate * ratio, vmax, km)
    dose_after = _holds(patient.aim_mg_per_L, vmax, km) / ratio
    traces = {
        picture: (
            true_line(picture, vmax=vmax, km=km, layer="before", beside_km=km),
            *_at_dose(picture, rate, before, "before"),
            *_at_dose(picture, rate * ratio, after, "after"),
        )
        for picture in PICTURES
    }
    side = "more" if ratio > 1 else "less"
    return EventEffect(
        name="new salt",
        story=f"The same labelled dose now holds {show_number(100 * abs(ratio - 1))} % {side} active drug. Vmax and Km "
        "are the patient's and stay; dose rates in every picture are of active drug.",
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        level_before_mg_per_L=before,
        level_after_mg_per_L=after,
        dose_before_mg_per_day=_holds(patient.aim_mg_per_L, vmax, km),
        dose_after_mg_per_day=dose_after,
        movement=MOVEMENTS["along the line"] if ratio > 1 else _reversed_movement(),
        traces=traces,
        text=_effect_words(patient, before, after, dose_after)
        + " Plotted by the label instead, every point on the new salt leaves the line, as if the patient had changed.",
    )


def _reversed_movement() -> Mapping[str, str]:
    swap = {"down and to the left": "up and to the right", "up and to the right": "down and to the left"}
    swap |= {
        "up and to the left": "down and to the right",
        "moves up along it, further": "moves down along it, further",
    }
    out = {}
    for picture, sentence in MOVEMENTS["along the line"].items():
        hit = next((old for old in swap if old in sentence), None)
        out[picture] = sentence.replace(hit, swap[hit]) if hit else sentence
    return out


def _missed(patient: Patient, missed_days: float, restarted_days: float, volume_L: float) -> EventEffect:
    vmax, km, rate = patient.vmax_mg_per_day, patient.km_mg_per_L, patient.dose_rate_mg_per_day
    steady = _settles_at(rate, vmax, km)
    start = patient.aim_mg_per_L if steady is None else steady

    def after(days: float, from_level: float, dose_rate: float) -> float:
        level = formulas.level_after(
            time_day=days,
            start_mg_per_L=from_level,
            dose_rate_mg_per_day=dose_rate,
            vmax_mg_per_day=vmax,
            km_mg_per_L=km,
            volume_L=volume_L,
        )
        return float(level)

    trough = after(missed_days, start, 0.0)
    drawn = after(restarted_days, trough, rate)
    right = _holds(patient.aim_mg_per_L, vmax, km)
    false_vmax = float(
        formulas.vmax_from_level(dose_rate_mg_per_day=rate, level_mg_per_L=drawn, km_mg_per_L=km)
    )
    wrong = _holds(patient.aim_mg_per_L, false_vmax, km)
    traces = {
        picture: (
            true_line(picture, vmax=vmax, km=km, layer="before", beside_km=km),
            *_at_dose(picture, rate, steady, "before"),
            *_at_dose(picture, rate, drawn, "false point"),
        )
        for picture in PICTURES
    }
    asked = (
        f"more than {show_number(_MOST_TIMES)} times the present dose, which is no answer"
        if wrong > _MOST_TIMES * rate
        else f"{show(wrong, 'mg/day')}, and on that the patient would come to "
        f"{_level_words(_settles_at(wrong, vmax, km))}"
    )
    return EventEffect(
        name="missed week" if missed_days == 7 else "missed doses",
        story=f"No dose was taken for {show(missed_days, 'days')}, then the old dose again for "
        f"{show(restarted_days, 'days')}, then the level was drawn. Vmax and Km stay; the level is not a "
        "steady one and "
        "has no place in these pictures.",
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        level_before_mg_per_L=steady,
        level_after_mg_per_L=drawn,
        dose_before_mg_per_day=right,
        dose_after_mg_per_day=right,
        movement=MOVEMENTS["false point"],
        traces=traces,
        text=f"The level falls from {show(start, 'mg/L')} to {_small(trough)} and is {_small(drawn)} when drawn. The dose "
        f"that holds {show(patient.aim_mg_per_L, 'mg/L')} is still {show(right, 'mg/day')}. Taken for "
        "steady, the level "
        f"would ask for {asked} (Km held).",
    )


def _small(level: float) -> str:
    return show(level, "mg/L") if level >= 0.1 else "less than 0.1 mg/L"


def true_line(picture: str, *, vmax: float, km: float, layer: str, beside_km: float) -> Trace:
    """The line or curve that a Vmax and a Km draw in a picture; a point in the direct linear plot.

    beside_km: the other Km in the same picture, so that both lines reach over the same ground.
    """
    name = f"{layer}: {_values(vmax, km)}"
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


def _at_dose(picture: str, rate: float, level: float | None, layer: str) -> tuple[Trace, ...]:
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
