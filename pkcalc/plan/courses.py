"""Trough and peak at plateau and the level on named days, for every regimen of a shelf at once.

Regimens with the same dose times differ only in how much is given at each. The engine shares a step's input among the
draws of one regimen; here it is shared among the draws of many, so that a shelf is one pass for each set of dose
times instead of one for each regimen. The step is the engine's: Runge-Kutta on the exactly integrated input.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from pkcalc import flow, formulas
from pkcalc.dosing import Regimen, flow_repeated
from pkcalc.drugs.profile import Profile
from pkcalc.estimate.result import Band, Estimate
from pkcalc.forecast import TIME_DRAWS, bands, draws_of, fewer_draws
from pkcalc.periodic import lower_bound
from pkcalc.plan.candidates import Candidate, Setting
from pkcalc.stepping import speeds

Floats = NDArray[np.float64]

#: Days from the first dose of a new regimen for which the level is named.
NAMED_DAYS = (3.0, 7.0, 14.0, 28.0)
#: Draws used for the level on named days, and for the swing within a dosing interval.
DAY_DRAWS, SWING_DRAWS = 256, 128
#: Regimens per block: their arrays then stay in the processor's cache.
BLOCK = 32
#: Draws faster than this per day (Km next to nothing) are followed as if they were this fast: their level is of the
#: order of Km either way.
FASTEST_PER_DAY = 250.0
#: (Vmax tau - D)/kappa below which a plateau lies so high that the limit formula tells it.
NEAR_VMAX = 1e-3
#: Passes over one cycle to its plateau, and the relative change at which it is reached: the error after a step of
#: Newton's method is of the order of its square.
MOST_PASSES, REACHED = 12, 1e-3


def with_courses(some: Sequence[Candidate], setting: Setting) -> tuple[Candidate, ...]:
    """The same regimens with trough and peak at plateau and the level on named days; unchanged without a volume.

    Trough and peak come from fewer draws than the steady level; they are moved so that the steady level of those draws
    falls on that of all of them, and so always stand on either side of it.
    """
    if setting.central.volume_L is None or not some:
        return tuple(some)
    days = named_days(setting.central, [c.rate_mg_per_day for c in some], setting.start_mg_per_L)
    swings = swing(setting.central, [c.regimen for c in some], setting.profile)
    found = []
    for c, levels, (low, steady, high) in zip(some, days, swings, strict=True):
        found.append(
            replace(
                c,
                on_days=tuple(zip(NAMED_DAYS, levels, strict=True)),
                trough=_moved(low, steady, c.forecast.steady),
                peak=_moved(high, steady, c.forecast.steady),
            )
        )
    return tuple(found)


def _moved(band: Band, steady: Band, to: Band) -> Band:
    def one(value: float, mine: float, all_of_them: float) -> float:
        both = math.isfinite(mine) and math.isfinite(all_of_them) and mine > 0
        return value / mine * all_of_them if both else all_of_them

    return Band(
        one(band.median, steady.median, to.median),
        one(band.low, steady.low, to.low),
        one(band.high, steady.high, to.high),
    )


def named_days(
    estimate: Estimate, rates_mg_per_day: Sequence[float], present_mg_per_L: Floats | float
) -> tuple[tuple[Band, ...], ...]:
    """Level (average rate) on each of the named days, for each dose rate; from today's level. Needs a volume.

    present_mg_per_L: one for all, or one per draw (of all, or of the draws used for times).
    """
    whole = fewer_draws(estimate, TIME_DRAWS)
    fewer = fewer_draws(whole.estimate, DAY_DRAWS)
    few, start = fewer.estimate, draws_of(draws_of(present_mg_per_L, whole), fewer)
    rates, days = np.asarray(rates_mg_per_day, dtype=np.float64), np.array(NAMED_DAYS)
    course = np.empty((len(rates), len(days), len(few.weights)))
    for k in range(0, len(rates), BLOCK):
        assert few.volume_L is not None
        course[k : k + BLOCK] = formulas.level_after(
            time_day=days[None, :, None],
            start_mg_per_L=start,
            dose_rate_mg_per_day=rates[k : k + BLOCK, None, None],
            vmax_mg_per_day=few.vmax_mg_per_day,
            km_mg_per_L=few.km_mg_per_L,
            volume_L=few.volume_L,
        )
    flat = bands(course.reshape(-1, len(few.weights)), few.weights)
    return tuple(flat[i : i + len(days)] for i in range(0, len(flat), len(days)))


def swing(estimate: Estimate, regimens: Sequence[Regimen], profile: Profile) -> tuple[tuple[Band, Band, Band], ...]:
    """Trough, steady level and peak [mg/L] of each regimen at its plateau, from the same sample of the draws.

    Needs a volume.
    """
    few = fewer_draws(estimate, SWING_DRAWS).estimate
    assert few.volume_L is not None
    kappa = few.km_mg_per_L * few.volume_L
    groups: dict[tuple[float, tuple[_Slot, ...]], list[tuple[int, list[float]]]] = {}
    for i, regimen in enumerate(regimens):
        repeated = flow_repeated(regimen, profile)
        first = min(d.time_day for d in repeated.doses)
        slots = tuple(_Slot(round(d.time_day - first, 9), d.duration_day, d.absorption) for d in repeated.doses)
        groups.setdefault((repeated.cycle_day, slots), []).append((i, [d.amount_mg for d in repeated.doses]))
    found: dict[int, tuple[Band, Band, Band]] = {}
    for (cycle, slots), members in groups.items():
        amounts = np.array([mg for _, mg in members])
        low, high = extremes(cycle, slots, amounts, few.vmax_mg_per_day, kappa)
        steady = formulas.steady_state_level(
            dose_rate_mg_per_day=amounts.sum(axis=1)[:, None] / cycle,
            vmax_mg_per_day=few.vmax_mg_per_day,
            km_mg_per_L=few.km_mg_per_L,
        )
        told = [bands(x, few.weights) for x in (low / few.volume_L, steady, high / few.volume_L)]
        found |= {i: (told[0][k], told[1][k], told[2][k]) for k, (i, _) in enumerate(members)}
    return tuple(found[i] for i in range(len(regimens)))


@dataclass(frozen=True)
class _Slot:
    """One dose time of a cycle: when, over how long into a vein, how absorbed (None: into a vein)."""

    time_day: float
    duration_day: float
    absorption: flow.Absorption | None

    @property
    def at_once(self) -> bool:
        return self.absorption is None and self.duration_day == 0

    def arrived(self, since_day: Floats) -> Floats:
        """Share of a dose that has reached the blood so long after it."""
        form = self.absorption
        if form is None:
            if self.at_once:
                return np.where(since_day >= 0, 1.0, 0.0)
            return np.clip(since_day / self.duration_day, 0.0, 1.0)
        u = np.maximum(since_day - form.lag_day, 0.0)
        if form.release_day == 0:
            return -np.expm1(-form.ka_per_day * u)
        released = np.minimum(u, form.release_day)
        held = -np.expm1(-form.ka_per_day * released) / form.ka_per_day
        return (released - held * np.exp(-form.ka_per_day * (u - released))) / form.release_day


@dataclass(frozen=True)
class _Steps:
    """One cycle at plateau in steps: lengths [day]; per slot and step, the share of its dose that is pushed in at
    the step's start, that arrives in its first half, and in all of it. excess: per slot, the cycle average of the
    share that has arrived since the cycle began, less what the average rate would have brought."""

    h: Floats
    push: Floats
    half: Floats
    full: Floats
    excess: Floats


def _steps(cycle_day: float, slots: Sequence[_Slot], fastest_per_day: float) -> _Steps:
    turns = {0.0, cycle_day}
    for s in slots:
        lag, spread = (s.absorption.lag_day, s.absorption.release_day) if s.absorption else (0.0, s.duration_day)
        turns |= {round((s.time_day + t) % cycle_day, 9) for t in (lag, lag + spread)}
    ka = max((s.absorption.ka_per_day for s in slots if s.absorption is not None), default=0.0)
    grid = [0.0]
    for a, b in pairwise(sorted(turns)):
        while grid[-1] < b - 1e-9:
            # fine where something has just begun or ended, up to a quarter of the fastest draw's time constant
            h = 0.25 / fastest_per_day
            if ka:
                h = min(h, 0.5 / ka * math.exp(min(0.2 * ka * (grid[-1] - a), 30.0)))
            left = b - grid[-1]
            grid.append(b if h >= left * (1 - 1e-9) else grid[-1] + (left / 2 if h > left / 2 else h))
    ends = np.array(grid)
    middles = 0.5 * (ends[1:] + ends[:-1])
    half, full, push = (np.zeros((len(slots), len(middles))) for _ in range(3))
    for i, s in enumerate(slots):
        if s.at_once:
            push[i, int(np.argmin(np.abs(ends[:-1] - s.time_day)))] = 1.0
            continue
        form = s.absorption
        past = (
            1 if form is None else 1 + math.ceil((form.lag_day + form.release_day + 37.0 / form.ka_per_day) / cycle_day)
        )
        for n in range(-past, 1):
            at = s.time_day + n * cycle_day
            begin = s.arrived(ends[:-1] - at)
            half[i] += s.arrived(middles - at) - begin
            full[i] += s.arrived(ends[1:] - at) - begin
    lengths = np.diff(ends)
    before: Floats = np.cumsum(push + full, axis=1) - full
    area: Floats = (lengths * (before + (4.0 * half + full) / 6.0)).sum(axis=1)
    return _Steps(lengths, push, half, full, area / cycle_day - 0.5)


def extremes(
    cycle_day: float, slots: Sequence[_Slot], amounts_mg: Floats, vmax_mg_per_day: Floats, kappa_mg: Floats
) -> tuple[Floats, Floats]:
    """Smallest and largest amount [mg] of each regimen's plateau, per draw; +inf where there is none.

    amounts_mg: shape (regimens, dose times), active drug. vmax_mg_per_day, kappa_mg (Km V): shape (draws,).
    """
    kappa = np.maximum(kappa_mg, vmax_mg_per_day / FASTEST_PER_DAY)
    low, high = (np.full((len(amounts_mg), len(kappa)), np.inf) for _ in range(2))
    for speed in speeds(vmax_mg_per_day / kappa):
        some = speed.positions
        steps = _steps(cycle_day, slots, speed.fastest_per_day)
        for k in range(0, len(amounts_mg), BLOCK):
            rows = slice(k, k + BLOCK)
            low[rows, some], high[rows, some] = _block(
                steps, cycle_day, amounts_mg[rows], vmax_mg_per_day[some], kappa[some]
            )
    return low, high


def _block(steps: _Steps, cycle_day: float, amounts: Floats, vmax: Floats, kappa: Floats) -> tuple[Floats, Floats]:
    """As `extremes`, for a few regimens. Inside, amounts are in days of elimination at the full rate: w = X / Vmax."""
    size = amounts.sum(axis=1)
    drift = (vmax * cycle_day - size[:, None]) / kappa
    row, draw = np.nonzero(drift > 0)
    low, high = (np.full(drift.shape, np.inf) for _ in range(2))
    if not row.size:
        return low, high
    inverse, k = 1.0 / vmax[draw], kappa[draw] / vmax[draw]
    drift = drift[row, draw]
    floor = lower_bound(size[row], cycle_day, vmax[draw], kappa[draw]) * inverse
    limit = (size[row] / drift - (amounts @ steps.excess)[row]) * inverse
    near = drift < NEAR_VMAX
    w = np.where(near, limit, np.maximum(limit, floor))
    pushes, halves, fulls = (amounts @ x for x in (steps.push, steps.half, steps.full))
    inputs = [
        (h, *(x[row, i] * inverse if x[:, i].any() else None for x in (pushes, halves, fulls)))
        for i, h in enumerate(steps.h)
    ]
    left = np.flatnonzero(~near)
    for _ in range(MOST_PASSES):
        if not left.size:
            break
        everyone = len(left) == len(w)
        mine = inputs if everyone else [(h, *(None if x is None else x[left] for x in some)) for h, *some in inputs]
        end, slope = _once_around(mine, k[left], w[left])
        change = (end - w[left]) / (1.0 - slope)
        w[left] = np.maximum(w[left] + change, floor[left])
        left = left[np.abs(change) > REACHED * w[left]]
    smallest, largest = w.copy(), w.copy()
    for state in _walk(inputs, k, w):
        np.minimum(smallest, state, out=smallest)
        np.maximum(largest, state, out=largest)
    low[row, draw], high[row, draw] = smallest * vmax[draw], largest * vmax[draw]
    return low, high


_Input = tuple[float, Floats | None, Floats | None, Floats | None]


def _step(h: float, half: Floats | None, full: Floats | None, k: Floats, w: Floats) -> tuple[Floats, ...]:
    """The state after one Runge-Kutta step on the integrated input, in its middle, and the slopes' three shares
    w / (K + w): at its beginning, in its middle, at its end."""
    u1 = w / (k + w)
    to_half = w if half is None else w + half
    to_full = w if full is None else w + full
    x = to_half - 0.5 * h * u1
    u2 = x / (k + x)
    x = to_half - 0.5 * h * u2
    u3 = x / (k + x)
    x = to_full - h * u3
    u4 = x / (k + x)
    both = u2 + u3
    end = to_full - (h / 6.0) * (2.0 * both + u1 + u4)
    middle = to_half - (h / 6.0) * both - (h / 24.0) * (5.0 * u1 - u4)
    return end, middle, u1, u3, u4


def _walk(inputs: Sequence[_Input], k: Floats, w: Floats) -> Iterator[Floats]:
    """The state before and after each push, and in the middle and at the end of each step, over one cycle."""
    for h, push, half, full in inputs:
        if push is not None:
            yield w
            w = w + push
            yield w
        w, middle, *_ = _step(h, half, full, k, w)
        yield middle
        yield w


def _once_around(inputs: Sequence[_Input], k: Floats, w: Floats) -> tuple[Floats, Floats]:
    """The state one cycle later, and (nearly) its derivative with respect to the state now: e^-(integral of the slope
    of the elimination), which is all that Newton's method needs of it."""
    decay = np.zeros_like(w)
    for h, push, half, full in inputs:
        if push is not None:
            w = w + push
        w, _, u1, u3, u4 = _step(h, half, full, k, w)
        decay += (h / 6.0) * ((1.0 - u1) ** 2 + 4.0 * (1.0 - u3) ** 2 + (1.0 - u4) ** 2)
    return w, np.exp(-decay / k)
