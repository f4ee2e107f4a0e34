"""What happens in the clinic, seen in the five pictures: what moves, how, and what it does to the next dose.

For teaching only: the sizes of the events are made up.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np

from pkcalc import formulas
from pkcalc.estimate.lines import DIRECT_LINEAR
from pkcalc.estimate.teaching import LEVEL_AGAINST_DOSE, PICTURES, Trace, at_dose, true_line
from pkcalc.units import show, show_number, show_up_to

_MOST_TIMES = 5.0


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
            "The line turns down about its x-intercept, minus one divided by Km: it is less steep and meets "
            "the vertical axis lower."
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
            "The line turns up about its x-intercept, minus one divided by Km: it is steeper and meets the "
            "vertical axis higher. It does not simply shift."
        ),
        "C/R against C": "The line turns up about its x-intercept, minus Km: steeper.",
        "R against R/C": "The line moves down, parallel to itself: same slope, since Km is the same.",
        LEVEL_AGAINST_DOSE: (
            "The curve is squeezed to the left: every level needs less drug per day, in proportion to Vmax, "
            "and the dose rate that can never settle comes nearer."
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
            "The patient's crossing stays. Taken for steady, the low level draws a line through the same "
            "dose rate but too steep, and its crossings are false."
        ),
        "double reciprocal": (
            "The patient's line stays. Taken for steady, the low level stands too far to the right at the "
            "height of its dose, where it pulls hardest on the line."
        ),
        "C/R against C": "The patient's line stays. Taken for steady, the low level stands too far down and "
        "to the left.",
        "R against R/C": "The patient's line stays. Taken for steady, the low level stands too far to the "
        "right at the height of its dose.",
        LEVEL_AGAINST_DOSE: ("The patient's curve stays. Taken for steady, the low level stands straight below it."),
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
    """The patient of the lesson: what the events act on. All above 0; volume_L None where none is known; a steady
    level above told_up_to_mg_per_L is told in words."""

    vmax_mg_per_day: float
    km_mg_per_L: float
    dose_rate_mg_per_day: float
    aim_mg_per_L: float
    volume_L: float | None = None
    told_up_to_mg_per_L: float = math.inf


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
            f"After some weeks the liver makes more enzyme: Vmax is {_times(size.inducer)} what it was, Km the same.",
            vmax * size.inducer,
            km,
        ),
        _changed(
            patient,
            "inhibitor started",
            f"Part of the enzyme is put out of action: Vmax is {_times(size.inhibitor)} what it was, Km the same.",
            vmax * size.inhibitor,
            km,
        ),
        _changed(
            patient,
            "reversible competitor started",
            f"Another drug competes for the same enzyme: Km is {_times(size.competitor)} what it was, Vmax the same.",
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
    level = float(formulas.steady_state_level(dose_rate_mg_per_day=rate, vmax_mg_per_day=vmax, km_mg_per_L=km))
    return level if np.isfinite(level) else None


def _holds(level: float, vmax: float, km: float) -> float:
    return float(formulas.dose_rate_for_level(level_mg_per_L=level, vmax_mg_per_day=vmax, km_mg_per_L=km))


def _level_words(patient: Patient, level: float | None) -> str:
    if level is None:
        return "no steady level: the dose is more than the body can remove"
    return show_up_to(level, "mg/L", patient.told_up_to_mg_per_L)


def _effect_words(patient: Patient, before: float | None, after: float | None, dose_after: float) -> str:
    dose_before = _holds(patient.aim_mg_per_L, patient.vmax_mg_per_day, patient.km_mg_per_L)
    return (
        f"On {show(patient.dose_rate_mg_per_day, 'mg/day')} the steady level goes from "
        f"{_level_words(patient, before)} to {_level_words(patient, after)}. "
        f"To hold {show(patient.aim_mg_per_L, 'mg/L')} it now takes "
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
            true_line(picture, vmax=patient.vmax_mg_per_day, km=patient.km_mg_per_L, layer="before", beside_km=km),
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
            *at_dose(picture, rate, before, "before"),
            *at_dose(picture, rate * ratio, after, "after"),
        )
        for picture in PICTURES
    }
    side = "more" if ratio > 1 else "less"
    return EventEffect(
        name="new salt",
        story=f"The same labelled dose now holds {show_number(100 * abs(ratio - 1))} % {side} active drug. "
        "Vmax and Km are the patient's and stay; dose rates in every picture are of active drug.",
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        level_before_mg_per_L=before,
        level_after_mg_per_L=after,
        dose_before_mg_per_day=_holds(patient.aim_mg_per_L, vmax, km),
        dose_after_mg_per_day=dose_after,
        movement=MOVEMENTS["along the line"] if ratio > 1 else _reversed_movement(),
        traces=traces,
        text=_effect_words(patient, before, after, dose_after)
        + " Plotted by the label instead, every point on the new salt leaves the line, as if the patient had "
        "changed.",
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
    false_vmax = float(formulas.vmax_from_level(dose_rate_mg_per_day=rate, level_mg_per_L=drawn, km_mg_per_L=km))
    wrong = _holds(patient.aim_mg_per_L, false_vmax, km)
    traces = {
        picture: (
            true_line(picture, vmax=vmax, km=km, layer="before", beside_km=km),
            *at_dose(picture, rate, steady, "before"),
            *at_dose(picture, rate, drawn, "false point"),
        )
        for picture in PICTURES
    }
    asked = (
        f"more than {show_number(_MOST_TIMES)} times the present dose, which is no answer"
        if wrong > _MOST_TIMES * rate
        else f"{show(wrong, 'mg/day')}, and on that the patient would come to "
        f"{_level_words(patient, _settles_at(wrong, vmax, km))}"
    )
    return EventEffect(
        name="missed week" if missed_days == 7 else "missed doses",
        story=f"No dose was taken for {show(missed_days, 'days')}, then the old dose again for "
        f"{show(restarted_days, 'days')}, then the level was drawn. Vmax and Km stay; the level is not a "
        "steady one and has no place in these pictures.",
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        level_before_mg_per_L=steady,
        level_after_mg_per_L=drawn,
        dose_before_mg_per_day=right,
        dose_after_mg_per_day=right,
        movement=MOVEMENTS["false point"],
        traces=traces,
        text=f"The level falls from {show(start, 'mg/L')} to {_small(trough)} and is {_small(drawn)} when "
        f"drawn. The dose that holds {show(patient.aim_mg_per_L, 'mg/L')} is still {show(right, 'mg/day')}. "
        f"Taken for steady, the level would ask for {asked} (Km held).",
    )


def _small(level: float) -> str:
    return show(level, "mg/L") if level >= 0.1 else "less than 0.1 mg/L"
