"""Regimens around the present one, each with its forecast, its danger and, where it is not offered, why.

Two lines for every regimen: the central one carries the past intake on; the safety line takes every dose as taken.
Every chance of too high and every limit looks at the safety line.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from pkcalc import formulas
from pkcalc.dosing import Intake, Regimen
from pkcalc.drugs.profile import Profile
from pkcalc.estimate.result import Band, Estimate
from pkcalc.forecast import (
    TIME_DRAWS,
    Forecast,
    Goal,
    draws_of,
    fewer_draws,
    forecast_rates,
)
from pkcalc.levels import LabScale
from pkcalc.plan.shelf import Dispensable, dispense_words, regimen_words
from pkcalc.site import Site
from pkcalc.units import percent, percent_beside, show

Floats = NDArray[np.float64]

#: Regimens taken more often a day than this are printed only where the patient takes one, or where without them fewer
#: than so many would be left.
MOST_TIMES_SHOWN, FEWEST_SHOWN = 2, 5
#: Clock times of a regimen whose times nobody has stated, for the course within a day only.
HOURS = {1: (21.0,), 2: (9.0, 21.0), 3: (6.0, 14.0, 22.0), 4: (6.0, 12.0, 18.0, 24.0)}


@dataclass(frozen=True)
class Candidate:
    """One regimen with its forecast.

    words: by labelled amounts. dispense: units of products and times, "" where it cannot be made from the shelf.
    forecast: central line; taken: safety line, every dose taken. danger: chance, on the safety line, of a level
    above the critical one or of no steady state, at plateau or at the next feasible draw; danger_at_plateau,
    danger_at_draw: each alone (at the draw: None without a volume). change_percent: of the daily active dose against
    the present one. trough, peak: extremes of the level at plateau; on_days: days from the first dose and the level
    then (all None without a volume).
    loss: expected loss, only where the order by loss is asked for. units_a_day: capsules and tablets.
    """

    regimen: Regimen
    words: str
    dispense: str
    forecast: Forecast
    taken: Forecast
    danger: float
    change_percent: float | None
    present: bool = False
    proposed: bool = False
    offered: bool = True
    why_not: tuple[str, ...] = ()
    warned: bool = False
    trough: Band | None = None
    peak: Band | None = None
    on_days: tuple[tuple[float, Band], ...] | None = None
    loss: float | None = None
    products: tuple[str, ...] = ()
    units_a_day: float = 0.0
    danger_at_draw: float | None = None

    @property
    def danger_at_plateau(self) -> float:
        return self.taken.above_critical

    @property
    def rate_mg_per_day(self) -> float:
        return self.forecast.rate_mg_per_day

    @property
    def dose_times(self) -> int:
        return len({x.hour for x in self.regimen.intakes})


@dataclass(frozen=True)
class StepLimit:
    """The largest step of the daily dose from the present one, and what it would give in this patient.

    step_mg_per_day: active drug. level_mg_per_L: the present level that the rule looks at. words: rule and source.
    """

    step_mg_per_day: float
    level_mg_per_L: float
    words: str
    forecast: Forecast


@dataclass(frozen=True)
class Setting:
    """What every regimen of one plan is judged by.

    central, taken: the two lines. start_mg_per_L: today's level (per draw or one for all). draw_days: days until the
    next feasible draw. present_mg_per_day: active drug of the present regimen. raising_refused: why no increase may be
    offered, "" where it may. refused: why nothing may be offered. made_here: True where a shelf is in use, so that an
    own regimen must be made from it.
    """

    profile: Profile
    site: Site
    goal: Goal
    scale: LabScale
    central: Estimate
    taken: Estimate
    start_mg_per_L: Floats | float
    draw_days: float
    present_mg_per_day: float | None
    largest_mg_per_day: float
    step: StepLimit | None = None
    raising_refused: str = ""
    refused: str = ""
    made_here: bool = False
    hours: Mapping[int, tuple[float, ...]] = field(default_factory=lambda: HOURS)


def as_regimen(made: Dispensable, profile: Profile, hours: Mapping[int, tuple[float, ...]] = HOURS) -> Regimen:
    """A dispensable regimen with clock times, for the engine. Alternate days repeat every 48 h."""
    times = hours[made.times_a_day]
    intakes = []
    for place, dose in enumerate(made.doses):
        hour = times[0] + 24.0 * place if made.days == 2 else times[place] % 24.0
        amounts: dict[str, float] = {}
        for part in dose:
            product = profile.products[part.product]
            amounts[product.form] = amounts.get(product.form, 0.0) + part.units * product.mg_per_unit
        intakes += [Intake(form, hour, mg) for form, mg in amounts.items()]
    intakes.sort(key=lambda x: x.hour)
    return Regimen(tuple(intakes), cycle_h=24.0 * made.days)


def candidates(
    made: Sequence[Dispensable],
    given: Sequence[tuple[Regimen, str, str, bool, bool]],
    setting: Setting,
) -> tuple[Candidate, ...]:
    """Every regimen with its forecast, by daily dose.

    made: what the shelf gives. given: further regimens as (regimen, words, dispense, present, proposed); the present
    one, or an own one that can be dispensed, takes the place of a made one with the same active amount.
    """
    profile = setting.profile
    rows: list[tuple[Regimen, str, str, bool, bool, float, tuple[str, ...], float]] = [
        (r, words, dispense, present, proposed, r.active_mg_per_day(profile), (), 0.0)
        for r, words, dispense, present, proposed in given
    ]
    taken_up = [row[5] for row in rows if row[3] or (row[4] and row[2])]
    for m in made:
        rate = m.active_mg_per_day
        if any(abs(rate - p) <= 1e-6 * p for p in taken_up):
            continue
        regimen = as_regimen(m, profile, setting.hours)
        words = regimen_words(m, profile), dispense_words(m, profile)
        rows.append((regimen, *words, False, False, rate, m.products, m.units_a_day(profile)))
    if not rows:
        return ()
    rates = [row[5] for row in rows]
    central = forecast_rates(
        setting.central, rates, setting.goal, setting.scale, present_mg_per_L=setting.start_mg_per_L
    )
    full = (
        central
        if setting.taken is setting.central
        else forecast_rates(setting.taken, rates, setting.goal, setting.scale, present_mg_per_L=setting.start_mg_per_L)
    )
    dangers = danger(setting, rates)
    at_draw = danger_at_draw(setting, rates)
    found = [
        _judge(
            Candidate(
                regimen=row[0],
                words=row[1],
                dispense=row[2],
                forecast=central[i],
                taken=full[i],
                danger=float(dangers[i]),
                change_percent=_change(rates[i], setting.present_mg_per_day),
                present=row[3],
                proposed=row[4],
                products=row[6],
                units_a_day=row[7],
                danger_at_draw=None if at_draw is None else float(at_draw[i]),
            ),
            setting,
        )
        for i, row in enumerate(rows)
    ]
    return tuple(sorted(found, key=lambda c: (c.rate_mg_per_day, not c.present, c.proposed)))


def danger(setting: Setting, rates_mg_per_day: Sequence[float]) -> Floats:
    """Chance, with every dose taken, of a level above the critical one or of no steady state.

    At plateau, or at the next feasible draw: from today's level a course can only be above the critical level at the
    draw without a plateau above it where the level is above it today, so only such draws are followed.
    """
    estimate, critical = setting.taken, setting.goal.critical_mg_per_L
    rates = np.asarray(rates_mg_per_day, dtype=np.float64)
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=rates[:, None],
        vmax_mg_per_day=estimate.vmax_mg_per_day,
        km_mg_per_L=estimate.km_mg_per_L,
    )
    high = steady > critical
    few = fewer_draws(estimate, TIME_DRAWS)
    now = draws_of(setting.start_mg_per_L, few)
    over = np.flatnonzero(now > critical)
    if few.estimate.volume_L is not None and over.size:
        then = formulas.level_after(
            time_day=setting.draw_days,
            start_mg_per_L=now[over],
            dose_rate_mg_per_day=rates[:, None],
            vmax_mg_per_day=few.estimate.vmax_mg_per_day[over],
            km_mg_per_L=few.estimate.km_mg_per_L[over],
            volume_L=few.estimate.volume_L[over],
        )
        either = high[:, few.chosen]
        either[:, over] |= then > critical
        return np.clip(np.round(np.maximum(either @ few.estimate.weights, high @ estimate.weights), 12), 0.0, 1.0)
    chance: Floats = np.clip(np.round(high @ estimate.weights, 12), 0.0, 1.0)
    return chance


def danger_at_draw(setting: Setting, rates_mg_per_day: Sequence[float]) -> Floats | None:
    """Chance, with every dose taken, of a level above the critical one at the next feasible draw; None without a
    volume."""
    few = fewer_draws(setting.taken, TIME_DRAWS)
    if few.estimate.volume_L is None:
        return None
    now = np.broadcast_to(draws_of(setting.start_mg_per_L, few), few.estimate.volume_L.shape)
    # nobody at or below the critical level gets above it on a dose rate whose plateau lies below
    rates = np.asarray(rates_mg_per_day, dtype=np.float64)[:, None]
    critical = setting.goal.critical_mg_per_L
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=rates,
        vmax_mg_per_day=few.estimate.vmax_mg_per_day,
        km_mg_per_L=few.estimate.km_mg_per_L,
    )
    row, column = np.nonzero((steady > critical) | (now > critical))
    over = np.zeros(steady.shape, dtype=bool)
    if row.size:
        then = formulas.level_after(
            time_day=setting.draw_days,
            start_mg_per_L=now[column],
            dose_rate_mg_per_day=rates[row, 0],
            vmax_mg_per_day=few.estimate.vmax_mg_per_day[column],
            km_mg_per_L=few.estimate.km_mg_per_L[column],
            volume_L=few.estimate.volume_L[column],
        )
        over[row, column] = then > critical
    chance: Floats = np.clip(np.round(over @ few.estimate.weights, 12), 0.0, 1.0)
    return chance


def _change(rate: float, present: float | None) -> float | None:
    return None if not present else 100.0 * (rate / present - 1.0)


def _judge(c: Candidate, s: Setting) -> Candidate:
    """Whether a regimen is offered, and every reason why not, in words."""
    why: list[str] = []
    if s.refused:
        why.append(s.refused)
    if s.made_here and c.proposed and not c.present and not c.dispense:
        why.append("It cannot be made from the shelf in use.")
    limit, warn = s.site.stop_chance, s.site.warn_chance
    if c.danger > limit:
        above = f"above {show(s.goal.critical_mg_per_L, 'mg/L')}"
        if c.taken.above_critical > limit:
            why.append(
                f"Taken in full, the chance of a level {above} or of no steady state once settled is "
                f"{percent_beside(c.danger_at_plateau, limit)}, above the limit of {percent(limit)}."
            )
        else:
            why.append(
                f"The level is high today: at the next feasible draw, in {show(s.draw_days, 'days')}, the chance of a "
                f"level {above} is still {percent_beside(c.danger, limit)}, above the limit of {percent(limit)}."
            )
    if c.rate_mg_per_day > s.largest_mg_per_day * (1 + 1e-9):
        why.append(
            f"{show(c.rate_mg_per_day, 'mg/day', 4)} of active drug is above the largest daily dose of "
            f"{show(s.largest_mg_per_day, 'mg/day', 4)}."
        )
    now = s.present_mg_per_day
    if now is not None and c.rate_mg_per_day > now * (1 + 1e-9):
        if s.raising_refused:
            why.append(s.raising_refused)
        if s.step is not None and c.rate_mg_per_day > now + s.step.step_mg_per_day * (1 + 1e-9):
            why.append(
                f"The step of {show(c.rate_mg_per_day - now, 'mg/day')} of active drug is above the largest step of "
                f"{show(s.step.step_mg_per_day, 'mg/day')} ({s.step.words})."
            )
    return replace(c, offered=not why, why_not=tuple(why), warned=c.danger > warn)


def shown(
    every: Sequence[Candidate], setting: Setting, *, forms: Sequence[str], most: int = 14
) -> tuple[Candidate, ...]:
    """The rows worth printing: around the present dose and the aim, the simplest in each neighbourhood.

    Simple: of the present form only, once or twice daily, few units. The present regimen and the pharmacist's own are
    always among them.
    """
    must = [c for c in every if c.present or c.proposed]
    rest = [c for c in every if not (c.present or c.proposed)]
    same = [c for c in rest if all(x.form in forms for x in c.regimen.intakes)]
    single = [c for c in rest if len({x.form for x in c.regimen.intakes}) == 1]
    rest = same or single or rest
    centre = setting.present_mg_per_day
    aim = _aim_rate(setting)
    centre = aim if centre is None else centre
    low, high = 0.7 * min(centre, aim), 1.25 * max(centre, aim)
    offered = [c.rate_mg_per_day for c in rest if c.offered and low <= c.rate_mg_per_day <= high]
    # beyond the largest offered dose a few more, so that the limit is seen, not a long list of refusals
    high = min(high, 1.12 * max(*offered, centre)) if offered else high
    rest = [c for c in rest if low <= c.rate_mg_per_day <= high]
    most_times = max([MOST_TIMES_SHOWN, *(c.dose_times for c in must)])
    seldom = [c for c in rest if c.dose_times <= most_times]
    rest = seldom if len(seldom) >= FEWEST_SHOWN else rest
    room = max(most - len(must), 0)
    if len(rest) > room and room:
        # one regimen, the simplest, for each of as many neighbourhoods as there is room; nearer steps near the centre
        edges = np.linspace(low, high, room + 1)
        kept = []
        for a, b in pairwise(edges):
            near = [c for c in rest if a <= c.rate_mg_per_day < b or (b == edges[-1] and c.rate_mg_per_day == b)]
            if near:
                kept.append(min(near, key=plainness))
        rest = kept
    return tuple(sorted((*must, *rest), key=lambda c: (c.rate_mg_per_day, not c.present, c.proposed)))


def plainness(c: Candidate) -> tuple[float, ...]:
    return (c.dose_times, len(c.products), c.units_a_day, len({x.labelled_mg for x in c.regimen.intakes}))


def _aim_rate(s: Setting) -> float:
    point = s.central.point
    return float(
        formulas.dose_rate_for_level(
            level_mg_per_L=s.goal.aim_mg_per_L,
            vmax_mg_per_day=point.vmax_mg_per_day,
            km_mg_per_L=point.km_mg_per_L,
        )
    )


def by_loss(every: Sequence[Candidate], setting: Setting) -> tuple[Candidate, ...]:
    """The offered regimens by expected loss, smallest first: mg/L outside the range, too high weighted more.

    On the safety line. Levels count up to twice the critical level, and no steady state counts as that.
    """
    offered = [c for c in every if c.offered]
    if not offered:
        return ()
    goal, estimate = setting.goal, setting.taken
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=np.array([c.rate_mg_per_day for c in offered])[:, None],
        vmax_mg_per_day=estimate.vmax_mg_per_day,
        km_mg_per_L=estimate.km_mg_per_L,
    )
    level = np.minimum(steady, 2.0 * goal.critical_mg_per_L)
    loss = setting.site.loss_too_high * np.maximum(level - goal.high_mg_per_L, 0.0)
    loss += setting.site.loss_too_low * np.maximum(goal.low_mg_per_L - level, 0.0)
    expected = loss @ estimate.weights
    ranked = [replace(c, loss=float(x)) for c, x in zip(offered, expected, strict=True)]
    return tuple(sorted(ranked, key=lambda c: (c.loss, c.rate_mg_per_day)))
