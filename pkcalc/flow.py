"""Level over time for any dosing record, for many (Vmax, Km, V) at once.

    dX/dt = r(t) - Vmax X / (kappa + X) - k X        X = V C [mg], kappa = Km V [mg], k a parallel
    first-order path

The course of the amount depends on Vmax and kappa alone; the volume enters only through C = X/V. Input is
taken up in exactly integrated increments (`stepping`), so mass is conserved exactly. Pieces at a constant
rate (an infusion, no dosing) are taken in one step by the closed form of `formulas.level_after`.

A level asked for at the very time of an intravenous push is the level before it. Levels may be asked for in
any order. A bioavailability F that differs between draws needs no place of its own: X(F D; Vmax, kappa) is
F X(D; Vmax/F, kappa/F).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pkcalc import formulas
from pkcalc.errors import CaseError, Problem
from pkcalc.periodic import PeriodicState, build_up, periodic
from pkcalc.record import (
    SAME_MOMENT_DAY,
    Absorption,
    Before,
    Dose,
    FirstOrder,
    Record,
    Repeated,
    duplicates,
    with_absorption,
)
from pkcalc.stepping import BLOCK, Accuracy, Floats, Plan, Speed, march, plan_steps, run, speeds

__all__ = [
    "Absorption",
    "Accuracy",
    "Before",
    "Dose",
    "FirstOrder",
    "PeriodicState",
    "Record",
    "Repeated",
    "amounts",
    "days_to_fraction",
    "duplicates",
    "fading",
    "first_crossing",
    "levels",
    "periodic",
    "sensitivity",
    "step_error",
    "with_absorption",
]

Positions = NDArray[np.intp]

#: Steps of one record to one set of times, kept by whoever asks for them again: by speed and fineness.
Plans = dict[tuple[float, float], Plan]

#: A draw starts from its plateau when the rest of the way left after the time on the earlier regimen is
#: below this.
UNSETTLED = {"everyday": 1e-3, "fine": 1e-5, "finest": 1e-7}


def amounts(
    record: Record,
    times_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    kappa_mg: ArrayLike,
    *,
    volume_L: ArrayLike | None = None,
    accuracy: Accuracy = "everyday",
    start_mg: ArrayLike | None = None,
    typical_per_day: float | None = None,
    absorption_factor: ArrayLike = 1.0,
    plans: Plans | None = None,
) -> Floats:
    """Amount in the body [mg] at each time, for every draw; shape (draws, times).

    times_day: at or after the record's start. vmax_mg_per_day, kappa_mg (Km V): shape (n,) or single
    numbers, > 0. volume_L: needed only where a first-order path is given as a clearance. start_mg: amount
    at the record's start, in place of what the record says. accuracy: largest relative error about 3e-3
    (everyday), 4e-5 (fine), 2e-7 (finest). typical_per_day: 99 % point of Vmax/kappa, which sets the steps;
    of the draws themselves unless given (nodes of a grid are not equally likely). absorption_factor: per
    draw, by what the absorption rates of all forms are multiplied; draws with the same factor share a pass,
    so give a few distinct values. plans: an empty dict to begin with, filled and used again by calls with the
    same record, times and accuracy and no absorption_factor. Raises CaseError for times before the start and
    parameters that are not positive.
    """
    times = _times(record, times_day)
    vmax, kappa = _parameters(vmax_mg_per_day, kappa_mg)
    factor = np.broadcast_to(_parameters(absorption_factor, 1.0, names=("Absorption factor", ""))[0], vmax.shape)
    rates = _path_rates(record, volume_L, vmax)
    out = np.empty((len(vmax), len(times)))
    for one in np.unique(factor):
        some = np.flatnonzero(factor == one)
        scaled = with_absorption(record, float(one))
        part = [rate[some] for rate in rates]
        given = None if start_mg is None else np.broadcast_to(np.asarray(start_mg, dtype=np.float64), vmax.shape)[some]
        start = _start(scaled, vmax[some], kappa[some], part, accuracy, given, typical_per_day)
        kept = plans if one == 1.0 else None
        out[some] = _walk(scaled, times, vmax[some], kappa[some], part, start, accuracy, typical_per_day, kept)
    return out


def fading(
    record: Record,
    times_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    kappa_mg: ArrayLike,
    *,
    volume_L: ArrayLike | None = None,
    typical_per_day: float | None = None,
    plans: Plans | None = None,
) -> tuple[Floats, Floats]:
    """As `amounts`, and how far a small difference in the amount has died away since the record's start.

        F(t) = integral of [Vmax kappa / (kappa + X)^2 + k],     dX(t)/dX(s) = exp(F(s) - F(t))

    Both of shape (draws, times).
    """
    times = _times(record, times_day)
    vmax, kappa = _parameters(vmax_mg_per_day, kappa_mg)
    rates = _path_rates(record, volume_L, vmax)
    start = _start(record, vmax, kappa, rates, "everyday", None, typical_per_day)
    faded = np.empty((len(vmax), len(times)))
    return _walk(record, times, vmax, kappa, rates, start, "everyday", typical_per_day, plans, faded), faded


def levels(
    record: Record,
    times_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    volume_L: ArrayLike,
    *,
    start_mg_per_L: ArrayLike | None = None,
    accuracy: Accuracy = "everyday",
    typical_per_day: float | None = None,
    absorption_factor: ArrayLike = 1.0,
) -> Floats:
    """Level [mg/L] at each time, for every draw; shape (draws, times). As `amounts`, divided by the
    volume."""
    km, volume = _parameters(km_mg_per_L, volume_L, names=("Km", "Volume"))
    start = None if start_mg_per_L is None else np.asarray(start_mg_per_L, dtype=np.float64) * volume
    amount = amounts(
        record,
        times_day,
        vmax_mg_per_day,
        km * volume,
        volume_L=volume,
        accuracy=accuracy,
        start_mg=start,
        typical_per_day=typical_per_day,
        absorption_factor=absorption_factor,
    )
    return amount / (volume[:, None] if len(volume) == len(amount) else volume)


def sensitivity(
    record: Record,
    times_day: ArrayLike,
    windows: Sequence[tuple[float, float]],
    vmax_mg_per_day: ArrayLike,
    kappa_mg: ArrayLike,
    *,
    volume_L: ArrayLike | None = None,
    accuracy: Accuracy = "everyday",
    start_mg: ArrayLike | None = None,
    typical_per_day: float | None = None,
) -> Floats:
    """By what fraction each level changes when the intake in a window changes by a small fraction.

        d ln X(t) / d (fractional change of every dose given from a to before b),  for each window (a, b)

    Shape (draws, times, windows); about one more pass. A window that begins before the record's start takes
    in the whole of the earlier regimen (`Before`) when the start follows from it.
    """
    times = _times(record, times_day)
    vmax, kappa = _parameters(vmax_mg_per_day, kappa_mg)
    rates = _path_rates(record, volume_L, vmax)
    start = _start(record, vmax, kappa, rates, accuracy, start_mg, typical_per_day)
    earlier = [i for i, (a, _) in enumerate(windows) if a < record.start_day]
    start_change = np.zeros_like(vmax)
    if earlier and record.before is not None and start_mg is None and record.start_mg is None:
        # a central difference of the start itself, one rule (plateau or build-up) for both sides
        up, down = (
            _start(record, vmax, kappa, rates, accuracy, None, typical_per_day, 1.0 + sign * 1e-4)
            for sign in (1.0, -1.0)
        )
        start_change = (up - down) / 2e-4
    out = np.zeros((len(vmax), len(times), len(windows)))
    for speed in speeds(_fastest(vmax, kappa, rates), typical_per_day):
        plan = _plan(record, speed, speed.fineness(accuracy), times, windows=windows, exact=False)
        for begin in range(0, len(speed.positions), BLOCK):
            some = speed.positions[begin : begin + BLOCK]
            inverse = 1.0 / vmax[some]
            # per window its share of the state; for one that receives nothing now, as it was when the summed
            # slope stood at `left`, to be brought up to date when it is needed
            share = dict.fromkeys(earlier, start_change[some] * inverse)
            left = {w: np.zeros(len(some)) for w in earlier}
            total = np.zeros(len(some))
            for number, step, block in march(plan, vmax[some], kappa[some], start[some], [r[some] for r in rates]):
                if step is not None:
                    receiving = {w for w, *_ in step.windows}
                    for w in [w for w in share if w not in receiving and w not in left]:
                        left[w] = total.copy()
                    for w, push, half, full in step.windows:
                        value = share.get(w)
                        if value is None:
                            value = np.zeros(len(some))
                        elif w in left:
                            value *= np.exp(left.pop(w) - total)
                        share[w] = block.carry(value, step, push, half, full)
                    if left:
                        total += block.total_slope(step)
                for position in plan.reached.get(number, ()):
                    for w, value in share.items():
                        now = value * np.exp(left[w] - total) if w in left else value
                        out[some, position, w] = np.where(block.w > 0, now / np.where(block.w > 0, block.w, 1.0), 0.0)
    return out


def first_crossing(
    record: Record,
    level_mg_per_L: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    volume_L: ArrayLike,
    *,
    until_day: float,
    falling: bool = False,
    start_mg_per_L: ArrayLike | None = None,
    accuracy: Accuracy = "everyday",
) -> Floats:
    """First time [day] at which the level is at or above a threshold (falling: at or below).

    Shape (draws,). The record's start where it already is; +inf where it is not reached by until_day.
    """
    km, volume = _parameters(km_mg_per_L, volume_L, names=("Km", "Volume"))
    vmax, kappa = _parameters(vmax_mg_per_day, km * volume)
    volume = np.broadcast_to(volume, vmax.shape)
    threshold = np.broadcast_to(np.asarray(level_mg_per_L, dtype=np.float64), vmax.shape) * volume
    rates = _path_rates(record, volume, vmax)
    start_mg = None if start_mg_per_L is None else np.asarray(start_mg_per_L, dtype=np.float64) * volume
    start = _start(record, vmax, kappa, rates, accuracy, start_mg)
    _times(record, until_day)
    sign = -1.0 if falling else 1.0
    out = np.full(vmax.shape, np.inf)
    for speed in speeds(_fastest(vmax, kappa, rates)):
        plan = _plan(record, speed, speed.fineness(accuracy), (), end_day=until_day)
        for begin in range(0, len(speed.positions), BLOCK):
            some = speed.positions[begin : begin + BLOCK]
            aim = threshold[some] / vmax[some]
            when = np.full(len(some), np.inf)
            for number, step, block in march(plan, vmax[some], kappa[some], start[some], [r[some] for r in rates]):
                if step is None:
                    when[sign * (block.w - aim) >= 0] = record.start_day
                    continue
                at = block.first_reach(step, aim, falling)
                begins = plan.ends_day[number - 2] if number > 1 else record.start_day
                np.fmin(when, begins + at * step.h, out=when)
                if np.isfinite(when).all():
                    break
            out[some] = when
    return out


def days_to_fraction(
    regimen: Repeated,
    fraction: float,
    vmax_mg_per_day: ArrayLike,
    kappa_mg: ArrayLike,
    *,
    within_day: float,
    start_mg: ArrayLike = 0.0,
    accuracy: Accuracy = "everyday",
) -> Floats:
    """Time on a real regimen until a fraction of the way to its plateau is covered [day], at the cycles'
    starts.

    Compared at the beginning of each cycle (interpolated between them), so that the swing within a cycle
    does not count. +inf where there is no plateau, or where it takes longer than within_day.
    """
    vmax, kappa = _parameters(vmax_mg_per_day, kappa_mg)
    plateau = periodic(regimen, vmax, kappa, accuracy=accuracy).start_mg
    cycles = math.ceil(within_day / regimen.cycle_day)
    times = regimen.cycle_day * np.arange(cycles + 1)
    record = Record(doses=regimen.cycles(0, cycles, 0.0))
    start = np.broadcast_to(np.asarray(start_mg, dtype=np.float64), vmax.shape)
    course = amounts(record, times, vmax, kappa, start_mg=start, accuracy=accuracy)
    exists = np.isfinite(plateau)
    way = np.where(exists, plateau - start, np.inf)
    with np.errstate(divide="ignore", invalid="ignore"):
        covered = np.where(way[:, None] == 0, 1.0, (course - start[:, None]) / way[:, None])
    there = covered >= fraction
    first = np.argmax(there, axis=1)
    rows = np.arange(len(vmax))
    before = covered[rows, np.maximum(first - 1, 0)]
    with np.errstate(divide="ignore", invalid="ignore"):
        part = np.where(first > 0, (fraction - before) / (covered[rows, first] - before), 0.0)
    time: Floats = (np.maximum(first - 1, 0) + part) * regimen.cycle_day
    time = np.where(first == 0, 0.0, time)
    return np.where(there.any(axis=1) & exists & (time <= within_day), time, np.inf)


def step_error(
    record: Record,
    times_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    kappa_mg: ArrayLike,
    *,
    volume_L: ArrayLike | None = None,
    accuracy: Accuracy = "everyday",
    start_mg: ArrayLike | None = None,
) -> float:
    """Self-check: largest relative change when the steps are halved, for the 64 draws with the fastest
    elimination.

    About 15/16 of the largest error of the answer itself.
    """
    times = _times(record, times_day)
    vmax, kappa = _parameters(vmax_mg_per_day, kappa_mg)
    rates = _path_rates(record, volume_L, vmax)
    start = _start(record, vmax, kappa, rates, accuracy, start_mg)
    fastest = _fastest(vmax, kappa, rates)
    some = np.argsort(fastest)[-64:]
    every = speeds(fastest)
    worst = 0.0
    for speed in every:
        mine = np.intersect1d(speed.positions, some)
        if not mine.size:
            continue
        fineness = speed.fineness(accuracy)
        one, two = (
            _run_class(record, times, vmax, kappa, rates, start, mine, speed, f) for f in (fineness, 2.0 * fineness)
        )
        change = np.abs(one - two) / np.where(two > 0, two, 1.0)
        worst = max(worst, float(change.max(initial=0.0)))
    return worst


# ----------------------------------------------------------------------------------------------- inside


def _walk(
    record: Record,
    times: Sequence[float],
    vmax: Floats,
    kappa: Floats,
    rates: Sequence[Floats],
    start: Floats,
    accuracy: Accuracy,
    typical_per_day: float | None,
    plans: Plans | None = None,
    faded: Floats | None = None,
) -> Floats:
    out = np.empty((len(vmax), len(times)))
    for speed in speeds(_fastest(vmax, kappa, rates), typical_per_day):
        some = speed.positions
        part = None if faded is None else np.empty((len(some), len(times)))
        out[some] = _run_class(
            record, times, vmax, kappa, rates, start, some, speed, speed.fineness(accuracy), plans, part
        )
        if faded is not None:
            faded[some] = part
    return out


def _run_class(
    record: Record,
    times: Sequence[float],
    vmax: Floats,
    kappa: Floats,
    rates: Sequence[Floats],
    start: Floats,
    positions: Positions,
    speed: Speed,
    fineness: float,
    plans: Plans | None = None,
    faded: Floats | None = None,
) -> Floats:
    """Amounts of draws that share one plan, block by block so that memory does not grow with the draws."""
    key = (speed.fastest_per_day, fineness)
    plan = plans.get(key) if plans is not None else None
    if plan is None:
        plan = _plan(record, speed, fineness, times)
        if plans is not None:
            plans[key] = plan
    out = np.empty((len(positions), len(times)))
    for begin in range(0, len(positions), BLOCK):
        some = positions[begin : begin + BLOCK]
        out[begin : begin + BLOCK] = run(
            plan,
            vmax[some],
            kappa[some],
            start[some],
            [r[some] for r in rates],
            faded=None if faded is None else faded[begin : begin + BLOCK],
        )
    return out


def _plan(
    record: Record,
    speed: Speed,
    fineness: float,
    times: Sequence[float],
    *,
    end_day: float | None = None,
    windows: Sequence[tuple[float, float]] = (),
    exact: bool = True,
) -> Plan:
    return plan_steps(
        _all_doses(record),
        start_day=record.start_day,
        times_day=times,
        end_day=end_day,
        fastest_per_day=speed.fastest_per_day,
        fineness=fineness,
        first_order=record.first_order,
        windows=windows,
        exact=exact,
        stiff=speed.stiff,
    )


def _all_doses(record: Record) -> tuple[Dose, ...]:
    """The record's doses and, of the earlier regimen, those of which something is still to be absorbed."""
    if record.before is None:
        return record.doses
    regimen = record.before.regimen
    cycles = min(_cycles_before(record.before), regimen.cycles_still_absorbed())
    return regimen.cycles(-cycles, 0, record.start_day) + record.doses


def _cycles_before(before: Before) -> int:
    return max(1, round(before.for_day / before.regimen.cycle_day))


def _start(
    record: Record,
    vmax: Floats,
    kappa: Floats,
    rates: Sequence[Floats],
    accuracy: Accuracy,
    start_mg: ArrayLike | None,
    typical_per_day: float | None = None,
    scale: float = 1.0,
) -> Floats:
    """Amount at the record's start [mg] for every draw; `scale` multiplies the earlier regimen's doses."""
    given = record.start_mg if start_mg is None else start_mg
    if given is not None:
        start = np.array(np.broadcast_to(np.asarray(given, dtype=np.float64), vmax.shape))
        if not (np.isfinite(start).all() and (start >= 0).all()):
            raise CaseError(
                Problem(
                    "Amount at the start",
                    "a negative or unreadable amount was given",
                    "0 mg or more",
                    "Check the level at the start of the record",
                )
            )
        return start
    if record.before is None:
        return np.zeros_like(vmax)
    regimen = _scaled(record.before.regimen, scale)
    always = np.zeros_like(vmax)
    for path, rate in zip(record.first_order, rates, strict=True):
        if path.start_day == -math.inf:
            always = always + rate
    # settled or not is decided on the regimen itself, so that a small change of it cannot switch the rule
    settled = _settled(record.before, vmax, kappa, always, UNSETTLED[accuracy])
    start = np.empty_like(vmax)
    if settled.any():
        start[settled] = periodic(
            regimen,
            vmax[settled],
            kappa[settled],
            first_order_per_day=always[settled],
            accuracy=accuracy,
            typical_per_day=typical_per_day,
        ).start_mg
    if not settled.all():
        cycles = _cycles_before(record.before)
        rest = np.flatnonzero(~settled)
        start[rest] = build_up(
            regimen,
            cycles,
            vmax[rest],
            kappa[rest],
            first_order_per_day=always[rest],
            accuracy=accuracy,
            typical_per_day=typical_per_day,
        )
        rest = rest[np.isnan(start[rest])]
        if rest.size:
            every_cycle = Record(
                doses=regimen.cycles(-cycles, 0, 0.0),
                start_day=-cycles * regimen.cycle_day,
                first_order=(FirstOrder(rate_per_day=0.0),),
            )
            start[rest] = _walk(
                every_cycle,
                (0.0,),
                vmax[rest],
                kappa[rest],
                (always[rest],),
                np.zeros(len(rest)),
                accuracy,
                typical_per_day,
            )[:, 0]
    return start


def _settled(before: Before, vmax: Floats, kappa: Floats, k: Floats, left: float) -> NDArray[np.bool_]:
    """Whether all but `left` of the way to the plateau is covered in the time on the earlier regimen."""
    rate = before.regimen.rate_mg_per_day
    # with a first-order path too, a steady amount in the slope's place bounds the time from above
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=rate, vmax_mg_per_day=vmax, km_mg_per_L=kappa, linear_clearance_L_per_day=k
    )
    time = formulas.time_to_fraction(
        fraction=1.0 - left,
        dose_rate_mg_per_day=np.where(k > 0, 0.0, rate),
        vmax_mg_per_day=vmax,
        km_mg_per_L=kappa,
        volume_L=1.0,
    )
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = vmax * kappa / (kappa + steady) ** 2 + k
        time = np.where(k > 0, -np.log(left) / slope, time)
    absorbed = max(d.settled_after_day for d in before.regimen.doses) * (-math.log(left) / 37.0)
    return time + absorbed <= before.for_day


def _scaled(regimen: Repeated, scale: float) -> Repeated:
    if scale == 1.0:
        return regimen
    return Repeated(
        regimen.cycle_day,
        tuple(Dose(d.time_day, d.amount_mg * scale, d.duration_day, d.absorption) for d in regimen.doses),
    )


def _path_rates(record: Record, volume_L: ArrayLike | None, vmax: Floats) -> tuple[Floats, ...]:
    rates = []
    for path in record.first_order:
        if path.clearance_L_per_day is not None:
            if volume_L is None:
                raise CaseError(
                    Problem(
                        "First-order path",
                        "a clearance was given, but no volume of distribution",
                        "a clearance with a volume, or a rate in 1/day",
                        "Give the volume of distribution",
                    )
                )
            rate = path.clearance_L_per_day / np.asarray(volume_L, dtype=np.float64)
        else:
            rate = np.asarray(path.rate_per_day, dtype=np.float64)
        rates.append(np.array(np.broadcast_to(rate, vmax.shape)))
    return tuple(rates)


def _fastest(vmax: Floats, kappa: Floats, rates: Sequence[Floats]) -> Floats:
    fastest = vmax / kappa
    for rate in rates:
        fastest = fastest + rate
    return fastest


def _times(record: Record, times_day: ArrayLike) -> tuple[float, ...]:
    times = np.atleast_1d(np.asarray(times_day, dtype=np.float64)).ravel()
    times = np.where(np.abs(times - record.start_day) <= SAME_MOMENT_DAY, record.start_day, times)
    bad = times[~(np.isfinite(times) & (times >= record.start_day))]
    if bad.size:
        raise CaseError(
            Problem(
                "Time of a level",
                f"day {bad[0]:.10g} was asked for; the record begins on day {record.start_day:.10g}"
                if np.isfinite(bad[0])
                else "this is not a time",
                "times at or after the beginning of the record",
                "Begin the record earlier, or check the date of the level",
            )
        )
    return tuple(times.tolist())


def _parameters(
    first: ArrayLike, second: ArrayLike, names: tuple[str, str] = ("Vmax", "Km x volume")
) -> tuple[Floats, Floats]:
    one, two = (
        np.array(np.atleast_1d(a), dtype=np.float64)
        for a in np.broadcast_arrays(np.asarray(first, dtype=np.float64), np.asarray(second, dtype=np.float64))
    )
    found = []
    for name, values in zip(names, (one, two), strict=True):
        bad = values[~(np.isfinite(values) & (values > 0))]
        if bad.size:
            found.append(
                Problem(
                    name,
                    f"{bad.size} of {values.size} values "
                    + ("is not a positive number" if bad.size == 1 else "are not positive numbers")
                    + (f" ({bad[0]:.10g} first)" if np.isfinite(bad[0]) else ""),
                    "more than 0",
                    "Check where the values come from",
                )
            )
    if found:
        raise CaseError(found)
    return one, two
