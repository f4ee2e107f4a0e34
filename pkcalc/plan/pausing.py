"""A level that is too high: reduce in part or pause, for how long, and what to restart with."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from pkcalc import flow, formulas
from pkcalc.case import Case
from pkcalc.estimate.result import Band, Estimate
from pkcalc.forecast import TIME_DRAWS, bands, draws_of, fewer_draws
from pkcalc.plan.candidates import Candidate, Setting, plainness
from pkcalc.plan.present import LOWEST_SHARE, Floats, Large, Today, is_toxic, large_words, published_peaks
from pkcalc.record import Record
from pkcalc.units import show, show_number

#: What follows the drug's own risk of a pause.
WEIGH = (
    "Weigh that first; a partial reduction is the default, and a pause goes to a stated level in the upper range, "
    "never to zero."
)
#: The same where the level is at or above the critical one, or there are toxic signs.
WEIGH_TOXIC = (
    "Weigh that first. Here the level is toxic or there are toxic signs: a pause to a stated level in the upper range "
    "comes first, never to zero; a smaller dose alone takes longer."
)
#: Where the drug file names no risk of its own.
NO_RISK_STATED = "The drug file names no risk of a pause: weigh what the disease does without the drug."
#: Longest pause that is followed [day].
LONGEST_DAYS = 60.0
#: Reductions and restart regimens shown.
MOST_SHOWN = 3
#: A restart later than planned by this is the "too late" of the plan [day].
LATE_DAYS = 2.0


@dataclass(frozen=True)
class Reduction:
    """A smaller dose instead of a pause: days until the level has come down, and where it ends.

    days: until the level is at the stated one; +inf where it never gets there. percent: of the present dose.
    offered: False where the table does not offer the same regimen (why_not says why).
    """

    words: str
    percent: float
    days: Band
    steady: Band
    offered: bool = True
    why_not: tuple[str, ...] = ()

    @property
    def marks(self) -> tuple[str, ...]:
        return () if self.offered else ("NOT OFFERED",)


@dataclass(frozen=True)
class Restart:
    """A regimen to go on with after the pause.

    early, on_time, late: level on `day` of the pause (the day it is read, not one of restart), if restarted on
    early_day (half the pause), on_time_day (its median) and late_day (after its upper end). lowest_late: the lowest
    level of the late restart, at its own beginning; lowest_late_words: the same, without numbers too low to mean
    anything.
    """

    words: str
    steady: Band
    day: float
    early: Band
    on_time: Band
    late: Band
    lowest_late: Band
    early_day: float = 0.0
    on_time_day: float = 0.0
    late_day: float = 0.0
    lowest_late_words: str = ""


@dataclass(frozen=True)
class Pause:
    """What to do about a level that is too high.

    risk: what a pause can bring on, named first. now: today's level. to_mg_per_L: the level at which the drug is given
    again. days: until then without any dose, per draw, by the closed form; with_absorption: the same with what is still
    being absorbed; None where nothing is. reductions: partial reductions. restarts: regimens to go on with. lines: the
    rest in words.
    toxic: at or above the critical level, or toxic signs; first: what stands first then. restart_line: when to restart.
    large: amounts swallowed at once whose published peak is still to come; with_absorption counts them so late.
    """

    risk: str
    now: Band
    to_mg_per_L: float
    days: Band
    with_absorption: Band | None
    reductions: tuple[Reduction, ...]
    restarts: tuple[Restart, ...]
    lines: tuple[str, ...]
    toxic: bool = False
    restart_line: str = ""
    large: tuple[Large, ...] = ()

    @property
    def first(self) -> Literal["pause", "reduction"]:
        return "pause" if self.toxic else "reduction"

    @property
    def restart_days(self) -> Band:
        return self.days if self.with_absorption is None else self.with_absorption


def pause(case: Case, now: Today, setting: Setting, every: Sequence[Candidate]) -> Pause | None:
    """The acute moves where today's level is above the range (or a restart level is asked for); None elsewhere.

    None too without a volume: then no time can be told.
    """
    goal, estimate = setting.goal, setting.taken
    level = now.level
    if level is None or estimate.volume_L is None:
        return None
    to = case.restart_level_mg_per_L or goal.high_mg_per_L
    if level.median <= goal.high_mg_per_L and case.restart_level_mg_per_L is None:
        return None
    forms = {f for c in case.courses for f in c.forms}
    same = [c for c in every if all(x.form in forms for x in c.regimen.intakes)]
    if any(not (c.present or c.proposed) for c in same):
        every = same
    few = fewer_draws(estimate, TIME_DRAWS).estimate
    start = draws_of(now.start_mg_per_L, fewer_draws(estimate, TIME_DRAWS))
    days = time_to_fall(few, start, to)
    lines = [
        "Levels daily during a pause or after a reduction; restart by the level, not by the calendar.",
        "Forecast without new doses and with no change in other drugs, feeds or albumin.",
    ]
    late = None
    if now.still_absorbed:
        late = bands(still_absorbing(few, start, to, now)[None, :], few.weights)[0]
        total = sum(d.amount_mg for d in now.still_absorbed)
        lines.append(
            f"{show(total, 'mg')} of active drug was taken so lately that part of it is still to be absorbed; the "
            "pause counts it in."
        )
    form_peaks = [
        f.absorption.peak_h[1]
        for c in case.courses
        for name in c.forms
        if (f := setting.profile.forms[name]).absorption is not None
    ]
    lines += [f"{large_words(x, setting.profile)} The pause counts that in." for x in now.large]
    if form_peaks:
        usual = f"A usual dose peaks within {show_number(max(form_peaks))} h."
        published = setting.profile.large_oral
        if published is not None and not now.large:
            usual += (
                f" {published_peaks(published)} After such an amount at once the level can stay up or rise although "
                "nothing is given."
            )
        lines.append(usual)
    present = next((c for c in every if c.present), None)
    if present is not None and np.isfinite(present.forecast.percent_per_percent):
        lines.append(
            f"Near the ceiling a small reduction can drop the level far: at the present dose 1 % less is about "
            f"{show_number(present.forecast.percent_per_percent, 2)} % less level in the end."
        )
    band = bands(days[None, :], few.weights)[0]
    toxic = is_toxic(now, goal) or case.answer("toxic_signs") == "yes"
    reductions = _reductions(every, setting, few, start, to, toxic=toxic)
    drug = setting.profile
    if refused := next((r for r in reductions if not r.offered), None):
        lines.append(f"Why a reduction is marked not offered: {' '.join(refused.why_not)}")
    return Pause(
        risk=f"{drug.withdrawal.risk if drug.withdrawal else NO_RISK_STATED} {WEIGH_TOXIC if toxic else WEIGH}",
        now=level,
        to_mg_per_L=to,
        days=band,
        with_absorption=late,
        reductions=reductions,
        restarts=_restarts(every, setting, few, start, late or band),
        lines=tuple(lines),
        toxic=toxic,
        restart_line=_restart_line(to, late or band, setting),
        large=now.large,
    )


def _restart_line(to: float, days: Band, setting: Setting) -> str:
    """'Restart when the level is down to 20 mg/L: about day 2.6 (1.9 to 3.4).'"""
    total = setting.scale.total(to)
    reported = f" ({show(total, 'mg/L')} total as reported)" if abs(total / to - 1) > 0.005 else ""
    level = f"Restart when the level is down to {show(to, 'mg/L')}{reported}"
    if not np.isfinite(days.median):
        return f"{level}; no day can be told, go by the levels."
    high = show_number(days.high, 2) if np.isfinite(days.high) else "never"
    return f"{level}: about day {show_number(days.median, 2)} ({show_number(days.low, 2)} to {high}) of the pause."


def _quantified(level: Band, setting: Setting) -> str:
    """A low level in words: numbers only as far down as they mean something."""
    own = setting.site.quantification_limit_mg_per_L
    limit = LOWEST_SHARE * setting.goal.low_mg_per_L if own is None else own / setting.scale.total(1.0)
    below = f"below {show_number(limit)}" if own is None else "below quantification"

    def said(value: float) -> str:
        return below if value < limit else show_number(value)

    if level.high < limit:
        return below
    return f"{said(level.median)} ({said(level.low)} to {said(level.high)})"


def time_to_fall(estimate: Estimate, start_mg_per_L: Floats, to_mg_per_L: float) -> Floats:
    """Days without dosing until the level is down, per draw; 0 where it already is."""
    assert estimate.volume_L is not None
    days = formulas.time_to_fall(
        start_mg_per_L=np.maximum(start_mg_per_L, to_mg_per_L),
        end_mg_per_L=to_mg_per_L,
        vmax_mg_per_day=estimate.vmax_mg_per_day,
        km_mg_per_L=estimate.km_mg_per_L,
        volume_L=estimate.volume_L,
    )
    return np.asarray(days)


def still_absorbing(estimate: Estimate, start_mg_per_L: Floats, to_mg_per_L: float, now: Today) -> Floats:
    """Days until the level is down for good, with what the gut still holds; per draw.

    A level at or below the stated one now may still rise above it, so the fall is looked for after the last of the
    absorption has shown; where the level never gets above, 0.
    """
    assert estimate.volume_L is not None
    record = Record(doses=now.still_absorbed, start_day=0.0, start_mg=0.0)
    times = np.linspace(0.0, 2.0, 17)
    course = flow.levels(
        record,
        times,
        estimate.vmax_mg_per_day,
        estimate.km_mg_per_L,
        estimate.volume_L,
        start_mg_per_L=start_mg_per_L,
    )
    # from the last time above the stated level on, the closed form: hardly anything is absorbed any more
    above = course > to_mg_per_L
    last = np.where(above.any(axis=1), len(times) - 1 - np.argmax(above[:, ::-1], axis=1), 0)
    rows = np.arange(len(last))
    rest = time_to_fall(estimate, course[rows, last], to_mg_per_L)
    step = float(times[1])
    return np.where(above.any(axis=1), times[last] + np.where(last < len(times) - 1, np.minimum(rest, step), rest), 0.0)


def _reductions(
    every: Sequence[Candidate], setting: Setting, few: Estimate, start: Floats, to: float, *, toxic: bool
) -> tuple[Reduction, ...]:
    """Smaller doses of the shelf, the largest first, whose steady level lies below the stated one.

    None that may itself end too high; with a toxic level none that may never get down.
    """
    now = setting.present_mg_per_day
    if now is None:
        return ()
    fits = [
        c
        for c in every
        if 0.4 * now <= c.rate_mg_per_day < now * (1 - 1e-9)
        and c.taken.steady.median < to
        and (c.taken.steady.high < to or not toxic)
        and c.danger_at_plateau <= setting.site.stop_chance
        and not c.proposed
    ]
    if not fits:
        return ()
    plain = _spread_out(fits)
    found = []
    assert few.volume_L is not None
    for c in reversed(plain):
        days = formulas.time_to_level(
            start_mg_per_L=np.maximum(start, to),
            end_mg_per_L=to,
            dose_rate_mg_per_day=c.rate_mg_per_day,
            vmax_mg_per_day=few.vmax_mg_per_day,
            km_mg_per_L=few.km_mg_per_L,
            volume_L=few.volume_L,
        )
        found.append(
            Reduction(
                words=c.dispense or c.words,
                percent=100.0 * c.rate_mg_per_day / now,
                days=bands(np.asarray(days)[None, :], few.weights)[0],
                steady=c.forecast.steady,
                offered=c.offered,
                why_not=c.why_not,
            )
        )
    return tuple(found)


def _spread_out(fits: Sequence[Candidate]) -> list[Candidate]:
    """A few of them, evenly over the range of doses, the simplest in each part."""
    if not fits:
        return []
    low, high = fits[0].rate_mg_per_day, fits[-1].rate_mg_per_day
    edges = np.linspace(low, high, MOST_SHOWN + 1)
    kept: list[Candidate] = []
    for k in range(MOST_SHOWN):
        part = [c for c in fits if edges[k] - 1e-9 <= c.rate_mg_per_day <= edges[k + 1] + 1e-9 and c not in kept]
        if part:
            kept.append(min(part, key=plainness))
    return kept


def _restarts(
    every: Sequence[Candidate], setting: Setting, few: Estimate, start: Floats, pause_days: Band
) -> tuple[Restart, ...]:
    """Regimens to go on with, each with an early, a timely and a late restart.

    Their plateau lies in the range on both lines and its chance of too high below the stop; today's level, which keeps
    them from being offered now, has come down by then. The pharmacist's own are among them where they fit.
    """
    goal, limit = setting.goal, setting.site.stop_chance
    if setting.refused:
        return ()
    fits = [
        c
        for c in every
        if c.taken.above_critical <= limit
        and c.rate_mg_per_day <= min(setting.largest_mg_per_day, setting.present_mg_per_day or np.inf)
        and c.forecast.steady.median >= goal.low_mg_per_L
        and c.taken.steady.median <= goal.high_mg_per_L
    ]
    own = [c for c in fits if c.proposed]
    if not fits or not np.isfinite(pause_days.high):
        return ()
    early, planned, late = 0.5 * pause_days.median, pause_days.median, pause_days.high + LATE_DAYS
    day = late + 1.0
    lowest = bands(_restarted(few, start, late, late, 0.0)[None, :], few.weights)[0]
    found = []
    others = _spread_out([c for c in fits if not c.proposed])
    for c in sorted((*own, *others), key=lambda c: c.rate_mg_per_day):
        levels = [_restarted(few, start, at, day, c.rate_mg_per_day) for at in (early, planned, late)]
        found.append(
            Restart(
                words=f"{c.dispense or c.words}{' (proposed)' if c.proposed else ''}",
                steady=c.forecast.steady,
                day=day,
                early=bands(levels[0][None, :], few.weights)[0],
                on_time=bands(levels[1][None, :], few.weights)[0],
                late=bands(levels[2][None, :], few.weights)[0],
                lowest_late=lowest,
                early_day=early,
                on_time_day=planned,
                late_day=late,
                lowest_late_words=_quantified(lowest, setting),
            )
        )
    return tuple(found)


def _restarted(few: Estimate, start: Floats, at_day: float, day: float, rate_mg_per_day: float) -> Floats:
    """Level on a day after a pause of at_day days from today and the dose rate from then on."""
    assert few.volume_L is not None
    down = formulas.level_after(
        time_day=at_day,
        start_mg_per_L=start,
        dose_rate_mg_per_day=0.0,
        vmax_mg_per_day=few.vmax_mg_per_day,
        km_mg_per_L=few.km_mg_per_L,
        volume_L=few.volume_L,
    )
    level = formulas.level_after(
        time_day=max(day - at_day, 0.0),
        start_mg_per_L=down,
        dose_rate_mg_per_day=rate_mg_per_day,
        vmax_mg_per_day=few.vmax_mg_per_day,
        km_mg_per_L=few.km_mg_per_L,
        volume_L=few.volume_L,
    )
    return np.asarray(level)
