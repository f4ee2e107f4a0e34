"""How far a level was from its plateau when it was drawn, and whether it may serve as a steady level."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

import numpy as np

from pkcalc import formulas
from pkcalc.case import Case, Course
from pkcalc.clock import days_between
from pkcalc.drugs.profile import Profile
from pkcalc.estimate.pair import SteadyPair
from pkcalc.estimate.result import Band, Estimate, band
from pkcalc.levels import Observation
from pkcalc.units import show, show_number

SETTLED = 0.9  # fraction of the way to the plateau from which a level may serve as steady


@dataclass(frozen=True)
class Settling:
    """One level: days on its dose, fraction of the way then reached, and the days 90 % of the way take.

    fraction: Band in 0 to 1, None where it cannot be told (no volume, or no dates). needed_days: Band, +inf
    where there is no steady state. settled: True, False, or None where it cannot be told. sentence: the
    reason in words.
    """

    level: int
    days: float | None
    fraction: Band | None
    needed_days: Band | None
    settled: bool | None
    sentence: str


def course_of(case: Case, observation: Observation) -> Course | None:
    """The line of the record in force when the level was drawn: named, or found by the dates."""
    level = observation.level
    if level.on_dose is not None:
        return case.courses[level.on_dose]
    repeated = [c for c in case.courses if c.regimen is not None and c.counts_as_given]
    if level.drawn is None:
        return repeated[0] if len(repeated) == 1 else None
    found = [
        c for c in repeated if (c.start is None or c.start < level.drawn) and (c.end is None or level.drawn <= c.end)
    ]
    dated = [c for c in found if c.start is not None]
    if dated:
        return max(dated, key=lambda c: c.start or datetime.min)
    return found[0] if len(found) == 1 else None


def steady_pairs(case: Case, profile: Profile, observations: Sequence[Observation]) -> tuple[SteadyPair, ...]:
    """Every usable, uncensored level with the dose rate in force: candidates for a pair or a line."""
    pairs = []
    for o in observations:
        course = course_of(case, o)
        rate = None if course is None else course.active_mg_per_day(profile)
        if rate is None or not o.usable or o.censored is not None:
            continue
        pairs.append(
            SteadyPair(
                level=o.level.index,
                rate_mg_per_day=rate,
                level_mg_per_L=o.working_mg_per_L,
                log_sd=o.log_sd,
                kind="free" if o.level.kind == "free" else "total",
            )
        )
    return tuple(pairs)


def days_on_dose(case: Case, observation: Observation) -> float | None:
    """Days from the start of the dose in force (or its stated length) to the draw; None where not stated."""
    course = course_of(case, observation)
    if course is None:
        return None
    if course.for_about_days is not None:
        return course.for_about_days
    if course.start is None or observation.level.drawn is None:
        return None
    return days_between(course.start, observation.level.drawn)


def settling(
    case: Case,
    profile: Profile,
    observations: Sequence[Observation],
    estimate: Estimate | None,
    pairs: Sequence[SteadyPair],
) -> tuple[Settling, ...]:
    """For every level: how far on its way it was, by the given estimate's draws (constant-rate closed form).

    The way begins at the plateau of the next lower dated dose of the pairs where there is one, else at zero,
    which is the slower and so the cautious start.
    """
    by_level = {p.level: p for p in pairs}
    found = []
    for o in observations:
        name = o.name
        pair = by_level.get(o.level.index)
        days = days_on_dose(case, o)
        if pair is None:
            found.append(Settling(o.level.index, days, None, None, None, f"{name}: {_why_no_pair(case, o)}."))
            continue
        if days is None:
            sentence = f"{name}: the start of its dose or the time of the draw is not stated, so nobody can tell."
            found.append(Settling(o.level.index, None, None, None, None, sentence))
            continue
        if estimate is None or estimate.volume_L is None:
            sentence = f"{name}: drawn {_days(days)} into its dose; without a weight no time to plateau follows."
            found.append(Settling(o.level.index, days, None, None, None, sentence))
            continue
        start = _start_level(case, o, pairs, observations)
        fraction, needed = fraction_of_way(estimate, pair.rate_mg_per_day, days, start)
        missed = _missed_before(case, o, min(days, needed.median))
        settled = fraction.median >= SETTLED and not missed
        need = _days(needed.median) if np.isfinite(needed.median) else "no time at all, as there is no steady state,"
        sentence = (
            f"{name}: drawn {_days(days)} into its dose, {show_number(100 * fraction.median, 2)} % of the way to the "
            f"plateau (90 % interval {show_number(100 * fraction.low, 2)} to {show_number(100 * fraction.high, 2)} %); "
            f"90 % of the way takes {need} here."
        )
        if missed:
            count = "1 dose was" if missed == 1 else f"{missed} doses were"
            sentence += f" Not steady: {count} missed within that time before it."
        found.append(Settling(o.level.index, days, fraction, needed, settled, sentence))
    return tuple(found)


def _why_no_pair(case: Case, o: Observation) -> str:
    """Why a level belongs to no steady dose."""
    if o.set_aside:
        return f"not used, {o.set_aside}"
    if not o.readable:
        return "no single reading of it can be trusted, so its steadiness is not judged"
    if o.censored is not None:
        return "only a limit, so it cannot serve as a steady level"
    singles = [c for c in case.courses if c.regimen is None and c.counts_as_given]
    if course_of(case, o) is None and singles:
        return "no repeated dose was in force, so it is a level after a load or single doses, not a steady level"
    return "no single dose in force is stated for it"


def _missed_before(case: Case, o: Observation, days: float) -> int:
    """Doses recorded as missed within some days before the draw."""
    course = course_of(case, o)
    if course is None or o.level.drawn is None:
        return 0
    drawn = o.level.drawn
    return sum(1 for m in course.missed if m <= drawn and days_between(m, drawn) <= days)


def _days(days: float) -> str:
    return "1 day" if abs(days - 1) < 0.05 else show(days, "days", 2)


def _start_level(
    case: Case, observation: Observation, pairs: Sequence[SteadyPair], observations: Sequence[Observation]
) -> float:
    """Level at the start of the dose in force: the level seen on the dose before it, else zero."""
    course = course_of(case, observation)
    if course is None or course.start is None:
        return 0.0
    earlier = []
    for o in observations:
        other = course_of(case, o)
        if other is None or other.index == course.index or o.level.drawn is None:
            continue
        if o.level.drawn <= course.start:
            earlier.append((o.level.drawn, o.working_mg_per_L))
    return max(earlier)[1] if earlier else 0.0


def fraction_of_way(
    estimate: Estimate, rate_mg_per_day: float, days: float, start_mg_per_L: float
) -> tuple[Band, Band]:
    """Fraction of the way to the plateau reached after some days at a constant rate, and the days to 90 %.

    Draws without a steady state count as fraction 0 and as never settled.
    """
    assert estimate.volume_L is not None
    vmax, km, volume = estimate.vmax_mg_per_day, estimate.km_mg_per_L, estimate.volume_L
    steady = formulas.steady_state_level(dose_rate_mg_per_day=rate_mg_per_day, vmax_mg_per_day=vmax, km_mg_per_L=km)
    level = formulas.level_after(
        time_day=days,
        start_mg_per_L=start_mg_per_L,
        dose_rate_mg_per_day=rate_mg_per_day,
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        volume_L=volume,
    )
    with np.errstate(invalid="ignore", divide="ignore"):
        way = steady - start_mg_per_L
        fraction = np.where(np.isfinite(steady), 1 - (steady - level) / way, 0.0)
    # At the plateau already: nothing is left of the way.
    fraction = np.where(np.isfinite(steady) & (np.abs(way) <= 1e-9 * (1 + steady)), 1.0, fraction)
    fraction = np.clip(fraction, 0.0, 1.0)
    needed = formulas.time_to_fraction(
        fraction=SETTLED,
        dose_rate_mg_per_day=rate_mg_per_day,
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        volume_L=volume,
        start_mg_per_L=start_mg_per_L,
    )
    return band(fraction, estimate.weights), band(np.asarray(needed, dtype=np.float64), estimate.weights)
