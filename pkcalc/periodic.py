"""The periodic steady state of a repeated regimen, found directly: Newton's method on the map of one cycle.

For any shape of input with D per cycle tau, the amount X(s) at every time of the cycle lies between x_b and
x_b + D, where x_b = D / (e^((Vmax tau - D)/kappa) - 1) is the trough of one intravenous push per cycle. The
map of one cycle is increasing and convex, so Newton's method from below rises to the answer, never past it.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from pkcalc import formulas
from pkcalc.record import FirstOrder, Repeated
from pkcalc.stepping import BLOCK, Accuracy, Block, Floats, Plan, Speed, Step, march, plan_steps, run, speeds

#: Newton's steps allowed; at most 7 are needed for R/Vmax < 0.99 (more with a first-order path, from a
#: lower start).
NEWTON_LIMIT = 40

#: Below this value of (Vmax tau - D)/kappa the cycle is so short against the drift that the limit formula
#: is used.
NEAR_VMAX = 1e-3


@dataclass(frozen=True)
class PeriodicState:
    """Amounts [mg] of a regimen at its plateau, shape (draws,); +inf where there is none (times are then 0).

    start_mg: at the beginning of the cycle, before a push given then. trough_mg, peak_mg: smallest and
    largest of the cycle; average_mg: average over time. trough_time_day, peak_time_day: when in the cycle.
    newton_steps: most steps any draw needed.
    """

    start_mg: Floats
    trough_mg: Floats
    peak_mg: Floats
    average_mg: Floats
    trough_time_day: Floats
    peak_time_day: Floats
    newton_steps: int

    @property
    def exists(self) -> Floats:
        return np.isfinite(self.start_mg)

    @property
    def swing(self) -> Floats:
        """Peak minus trough over the average; 0 where there is no plateau."""
        there = np.isfinite(self.start_mg)
        safe = np.where(there, self.average_mg, 1.0)
        return np.where(there, np.where(there, self.peak_mg, 0.0) - np.where(there, self.trough_mg, 0.0), 0.0) / safe


def lower_bound(per_cycle_mg: float, cycle_day: float, vmax_mg_per_day: Floats, kappa_mg: Floats) -> Floats:
    """Amount that no course of the plateau falls below [mg]: the trough if all of the cycle's drug were one
    push."""
    with np.errstate(over="ignore"):
        bound: Floats = per_cycle_mg / np.expm1((vmax_mg_per_day * cycle_day - per_cycle_mg) / kappa_mg)
    return bound


def cycle_plan(regimen: Repeated, speed: Speed, accuracy: Accuracy) -> Plan:
    """The steps of one cycle at the plateau: the gut holds what all the cycles before have left in it."""
    return plan_steps(
        regimen.cycles(-regimen.cycles_still_absorbed(), 1, 0.0),
        start_day=0.0,
        times_day=(),
        end_day=regimen.cycle_day,
        fastest_per_day=speed.fastest_per_day,
        fineness=speed.fineness(accuracy),
        stiff=speed.stiff,
        first_order=(FirstOrder(rate_per_day=0.0),),
    )


def periodic(
    regimen: Repeated,
    vmax_mg_per_day: ArrayLike,
    kappa_mg: ArrayLike,
    *,
    first_order_per_day: ArrayLike = 0.0,
    accuracy: Accuracy = "everyday",
    typical_per_day: float | None = None,
) -> PeriodicState:
    """Trough, peak and average of a regimen at its plateau, for every draw, without simulating months.

    vmax_mg_per_day, kappa_mg (Km V): shape (n,) or single numbers, > 0. first_order_per_day: k of a
    parallel path that is always open; with one, a plateau always exists. Everything is +inf where the
    average dose rate is at or above Vmax and no such path is open.
    """
    vmax, kappa, k = (
        np.atleast_1d(np.asarray(a, dtype=np.float64))
        for a in np.broadcast_arrays(vmax_mg_per_day, kappa_mg, first_order_per_day)
    )
    found = {name: np.full(vmax.shape, np.inf) for name in ("start", "trough", "peak", "average")}
    found |= {name: np.zeros(vmax.shape) for name in ("trough_time", "peak_time")}
    most = 0
    there = np.flatnonzero((regimen.rate_mg_per_day < vmax) | (k > 0))
    if there.size:
        for speed in speeds(vmax[there] / kappa[there] + k[there], typical_per_day):
            plan = cycle_plan(regimen, speed, accuracy)
            chosen = there[speed.positions]
            for begin in range(0, len(chosen), BLOCK):
                some = chosen[begin : begin + BLOCK]
                start, steps = _plateau_start(regimen, plan, vmax[some], kappa[some], k[some])
                most = max(most, steps)
                found["start"][some] = start
                _follow(plan, regimen.cycle_day, vmax[some], kappa[some], k[some], start, some, found)
    return PeriodicState(
        start_mg=found["start"],
        trough_mg=found["trough"],
        peak_mg=found["peak"],
        average_mg=found["average"],
        trough_time_day=found["trough_time"],
        peak_time_day=found["peak_time"],
        newton_steps=most,
    )


#: Points of the state at which the map of one cycle is calculated, and the error of what lies between them
#: that is let pass, as a share of the amount (else the cycles are followed one by one).
MAP_POINTS: Mapping[Accuracy, int] = {"everyday": 9, "fine": 13, "finest": 19}
MAP_ERROR: Mapping[Accuracy, float] = {"everyday": 1e-4, "fine": 2e-6, "finest": 1e-8}


def build_up(
    regimen: Repeated,
    cycles: int,
    vmax_mg_per_day: Floats,
    kappa_mg: Floats,
    *,
    first_order_per_day: Floats,
    accuracy: Accuracy,
    typical_per_day: float | None = None,
) -> Floats:
    """Amount [mg] after a number of cycles that began with nothing in the body, shape (draws,).

    The first cycles are followed step by step, until the gut repeats itself. From then on one map leads from
    cycle to cycle; it is smooth in the state x, so it is calculated at a few points of s = x/(kappa + x)
    (Chebyshev's) and interpolated. nan where the interpolation is not certain enough: those draws have to be
    followed. vmax_mg_per_day, kappa_mg, first_order_per_day: shape (draws,).
    """
    found = np.full(vmax_mg_per_day.shape, np.nan)
    first = min(cycles, regimen.cycles_still_absorbed())
    for speed in speeds(vmax_mg_per_day / kappa_mg + first_order_per_day, typical_per_day):
        begin_plan = plan_steps(
            regimen.cycles(0, first, 0.0),
            start_day=0.0,
            times_day=(first * regimen.cycle_day,),
            fastest_per_day=speed.fastest_per_day,
            fineness=speed.fineness(accuracy),
            stiff=speed.stiff,
            first_order=(FirstOrder(rate_per_day=0.0),),
        )
        map_plan = cycle_plan(regimen, speed, accuracy)
        for begin in range(0, len(speed.positions), BLOCK):
            some = speed.positions[begin : begin + BLOCK]
            vmax, kappa, k = vmax_mg_per_day[some], kappa_mg[some], first_order_per_day[some]
            rates = (k if k.any() else 0.0,)
            start = run(begin_plan, vmax, kappa, np.zeros(len(some)), rates)[:, 0]
            if cycles > first:
                start = _repeat(regimen, map_plan, cycles - first, vmax, kappa, k, start, accuracy)
            found[some] = start
    return found


def _repeat(
    regimen: Repeated, plan: Plan, times: int, vmax: Floats, kappa: Floats, k: Floats, start: Floats, accuracy: Accuracy
) -> Floats:
    """The amount after the cycle's map was applied a number of times; nan where it cannot be trusted."""
    n, points = len(vmax), MAP_POINTS[accuracy]
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=regimen.rate_mg_per_day,
        vmax_mg_per_day=vmax,
        km_mg_per_L=kappa,
        linear_clearance_L_per_day=k,
    )
    # a build-up from nothing passes neither its steady level by more than a cycle's drug nor what was given
    per_cycle = regimen.rate_mg_per_day * regimen.cycle_day
    most = np.minimum(steady + per_cycle, start + times * per_cycle)
    low, high = start / (kappa + start), most / (kappa + most)
    middle, half = 0.5 * (low + high), np.maximum(0.5 * (high - low), 1e-12)
    angle = np.pi * (np.arange(points) + 0.5) / points
    s = middle[:, None] + half[:, None] * np.cos(angle)
    at = kappa[:, None] * s / (1.0 - s)
    # points by points so that few draws still fill a block
    each = np.empty(points * n)
    of, states = np.tile(np.arange(n), points), at.T.ravel()
    for begin in range(0, points * n, BLOCK):
        some = of[begin : begin + BLOCK]
        now = states[begin : begin + BLOCK]
        each[begin : begin + BLOCK] = _cycle_end(plan, vmax[some], kappa[some], k[some], now) - now
    gained = each.reshape(points, n).T
    order = np.arange(points)
    series = 2.0 / points * gained @ np.cos(np.outer(angle, order))
    series[:, 0] *= 0.5
    # what the last terms leave open in every cycle dies away like a difference in the amount, slowest at the top
    fading = -np.expm1(-regimen.cycle_day * (vmax * kappa / (kappa + most) ** 2 + k))
    error = (np.abs(series[:, -1]) + np.abs(series[:, -2])) * np.minimum(times, 1.0 / np.maximum(fading, 1e-12))
    columns = [np.ascontiguousarray(c) for c in series.T]
    x = start.copy()
    for _ in range(times):
        z = (x / (kappa + x) - middle) / half
        z2 = 2.0 * z
        after, now = np.zeros(n), columns[-1]
        for c in columns[-2:0:-1]:
            after, now = now, c + z2 * now - after
        x = x + columns[0] + z * now - after
    return np.where(error <= MAP_ERROR[accuracy] * x, x, np.nan)


def _plateau_start(regimen: Repeated, plan: Plan, vmax: Floats, kappa: Floats, k: Floats) -> tuple[Floats, int]:
    """Amount at the beginning of the cycle [mg], and the Newton steps of the slowest draw."""
    dose, tau = regimen.rate_mg_per_day * regimen.cycle_day, regimen.cycle_day
    drift = (vmax * tau - dose) / kappa
    linear = k == 0
    floor = np.zeros_like(vmax)
    floor[linear] = lower_bound(dose, tau, vmax[linear], kappa[linear])
    # the limit formula, exact towards Vmax, is the better start above the bound; one step from too high lands
    # too low, and from there Newton's method rises
    limit = dose / np.where(linear, drift, np.inf) - _mean_excess(plan, regimen)
    near = linear & (drift < NEAR_VMAX)
    x = np.where(near, limit, np.maximum(floor, np.where(linear, limit, 0.0)))
    left = np.flatnonzero(~near)
    steps = 0
    while left.size and steps < NEWTON_LIMIT:
        end, slope = _cycle_map(plan, vmax[left], kappa[left], k[left], x[left])
        change = (end - x[left]) / (1.0 - slope)
        x[left] = np.maximum(x[left] + change, floor[left])
        steps += 1
        # the step's error is of the order of its square: what is left after it is below 1e-10
        left = left[np.abs(change) > 1e-5 * x[left]]
    return x, steps


def _mean_excess(plan: Plan, regimen: Repeated) -> float:
    """Cycle average of (what has reached the blood since the cycle began - what the average rate would
    have) [mg]."""
    arrived = area = 0.0
    for step in plan.steps:
        arrived += step.push
        area += step.h * (arrived + (4.0 * step.half + step.full) / 6.0)
        arrived += step.full
    return area / regimen.cycle_day - 0.5 * regimen.rate_mg_per_day * regimen.cycle_day


def _cycle_end(plan: Plan, vmax: Floats, kappa: Floats, k: Floats, start: Floats) -> Floats:
    """Amount one cycle later."""
    end = start
    for _, _, block in march(plan, vmax, kappa, start, (k if k.any() else 0.0,)):
        end = block.w
    return end * vmax


def _cycle_map(plan: Plan, vmax: Floats, kappa: Floats, k: Floats, start: Floats) -> tuple[Floats, Floats]:
    """Amount one cycle later, and its derivative with respect to the amount now."""
    slope = np.ones_like(start)
    end = start
    for _, step, block in march(plan, vmax, kappa, start, (k if k.any() else 0.0,)):
        if step is not None:
            slope *= block.tangent(step)
        end = block.w
    return end * vmax, slope


def _follow(
    plan: Plan,
    cycle_day: float,
    vmax: Floats,
    kappa: Floats,
    k: Floats,
    start: Floats,
    some: np.ndarray[tuple[int], np.dtype[np.intp]],
    found: dict[str, Floats],
) -> None:
    """Walk one cycle from its start and note smallest, largest and average."""
    low, high = np.full(start.shape, np.inf), np.full(start.shape, -np.inf)
    low_time, high_time, area = np.zeros(start.shape), np.zeros(start.shape), np.zeros(start.shape)
    before = start / vmax
    for number, step, block in march(plan, vmax, kappa, start, (k if k.any() else 0.0,)):
        if step is None:
            continue
        begin = plan.ends_day[number - 2] if number > 1 else plan.start_day
        # the state just before a push, then the step's own course
        _keep(low, low_time, before, begin, np.less)
        for value, at in _turning_points(block, step):
            _keep(low, low_time, value, begin + at * step.h, np.less)
            _keep(high, high_time, value, begin + at * step.h, np.greater)
        area += block.area(step)
        before = block.w.copy()
    found["trough"][some], found["trough_time"][some] = low * vmax, low_time
    found["peak"][some], found["peak_time"][some] = high * vmax, high_time
    found["average"][some] = area * vmax / cycle_day


def _turning_points(block: Block, step: Step) -> tuple[tuple[Floats, Floats], ...]:
    a, b, c = block.parabola(step)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        at = np.where(c != 0, -b / (2.0 * c), 0.0)
    at = np.where((at > 0) & (at < 1), at, 0.0)
    return (a, np.zeros_like(a)), (block.w, np.ones_like(a)), (a + at * (b + c * at), at)


def _keep(best: Floats, when: Floats, value: Floats, at: ArrayLike, better: np.ufunc) -> None:
    won = better(value, best)
    np.copyto(best, value, where=won)
    np.copyto(when, at, where=won)
