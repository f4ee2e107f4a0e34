"""The step in time: classical Runge-Kutta on the exactly integrated input, and the plan of steps for a
record.

    f(x) = h [ x / (K + x) + k x ]
    k1 = f(w)   k2 = f(w + Jh - k1/2)   k3 = f(w + Jh - k2/2)   k4 = f(w + Jf - k3)
    w' = w + Jf - (k1 + 2 k2 + 2 k3 + k4) / 6

Jh and Jf are the amounts that reach the blood in the first half and in the whole of the step, exactly; so
mass is conserved exactly whatever the step. For h (1/K + k) <= 1 the step is positive, keeps the order of
two courses and brings them no further apart. Inside, amounts are counted in days of elimination at the full
rate: w = X / Vmax and K = kappa / Vmax, so that a step's length is a plain number shared by all draws.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import NDArray

from pkcalc import formulas
from pkcalc.record import SAME_MOMENT_DAY, Dose, FirstOrder

Floats = NDArray[np.float64]
Accuracy = Literal["everyday", "fine", "finest"]

#: An infusion or a release shorter than this (0.1 second) is taken up at once.
AT_ONCE_DAY = 1e-6

#: Draws per block: every array of a block then stays in the processor's second-level cache.
BLOCK = 4096


class Step(NamedTuple):
    """One step, the same for all draws: length [day]; amounts [mg] pushed at its start, and reaching the
    blood in its first half and in all of it; constant rate [mg/day] where the piece is exact, else None;
    which first-order paths are open; and the same three amounts for each window that has any."""

    h: float
    push: float
    half: float
    full: float
    rate: float | None
    paths: tuple[int, ...]
    windows: tuple[tuple[int, float, float, float], ...]


@dataclass(frozen=True)
class Plan:
    """The steps of a record, and after how many of them each asked-for time is reached."""

    start_day: float
    steps: tuple[Step, ...]
    reached: Mapping[int, tuple[int, ...]]
    ends_day: tuple[float, ...]


class _Stream:
    """Drug on its way by one route into one set of windows: an infusion (ka None), or a gut amount."""

    __slots__ = ("dose", "gut", "ka", "rate", "running", "since", "windows")

    def __init__(self, ka: float | None, windows: tuple[int, ...]) -> None:
        self.ka, self.windows = ka, windows
        self.running, self.rate, self.gut, self.since = 0, 0.0, 0.0, -math.inf
        self.dose = 0.0

    def change(self, rate: float, count: int) -> None:
        self.running += count
        # the last one to stop leaves exactly nothing behind, whatever the rounding of the sum
        self.rate = self.rate + rate if self.running else 0.0

    def fading(self) -> float:
        """Share of the last dose by which the gut still differs from its balance: what makes the input bend."""
        assert self.ka is not None
        off = abs(self.rate / self.ka - self.gut) if self.running else self.gut
        return min(off / self.dose, 1.0) if self.dose else 1.0

    def deliver(self, h: float) -> tuple[float, float]:
        """Amounts reaching the blood in the first half and the whole of the next h days; moves the gut on."""
        if self.ka is None:
            return 0.5 * self.rate * h, self.rate * h
        z = self.ka * h
        half = -self.gut * math.expm1(-0.5 * z)
        full = -self.gut * math.expm1(-z)
        gut = self.gut - full
        if self.running:
            half += 0.5 * self.rate * h * _held_back(0.5 * z)
            released = self.rate * h * _held_back(z)
            full += released
            gut += self.rate * h - released
        self.gut = gut
        return half, full


def _held_back(z: float) -> float:
    """1 - (1 - e^-z)/z: share of what was released at a constant rate that is already absorbed."""
    if z < 0.1:
        return z * (1 / 2 - z * (1 / 6 - z * (1 / 24 - z * (1 / 120 - z * (1 / 720 - z * (1 / 5040 - z / 40320))))))
    return 1.0 + math.expm1(-z) / z


def plan_steps(
    doses: Sequence[Dose],
    *,
    start_day: float,
    times_day: Sequence[float],
    end_day: float | None = None,
    fastest_per_day: float,
    fineness: float,
    first_order: Sequence[FirstOrder] = (),
    windows: Sequence[tuple[float, float]] = (),
    exact: bool = True,
    stiff: bool = False,
) -> Plan:
    """Cut a record into steps, the same for all draws.

    A step is at most 0.25 / fastest_per_day and (0.5 / ka) (b max(1, ka / (2 fastest_per_day)))^(1/5), both
    divided by fineness, and ends at every change of input and every asked-for time. 1/b is the share of the
    last dose by which the gut still differs from its balance: what a bend of the input costs in one step, of
    the order of fastest h (ka h)^4 / b, is then the same everywhere. Where the input rate is
    constant and `exact` is allowed, the whole piece is one step. Of doses before the start only the rest
    counts. stiff: every step is taken by the closed form at its mean input rate, whatever the draw's speed. A
    fast draw follows the input of the moment, so the steps shrink towards the end of every piece; earlier
    ones are forgotten.
    """
    last = max([start_day, *times_day]) if end_day is None else end_day
    events: dict[float, list[tuple[str, _Stream, float, float]]] = defaultdict(list)
    streams: dict[tuple[float | None, tuple[int, ...]], _Stream] = {}
    pushes: dict[float, list[tuple[float, tuple[int, ...]]]] = defaultdict(list)
    marks = {start_day, last, *times_day}
    for path in first_order:
        marks.update(t for t in (path.start_day, path.end_day) if start_day < t < last)

    def stream_for(ka: float | None, members: tuple[int, ...]) -> _Stream:
        return streams.setdefault((ka, members), _Stream(ka, members))

    for dose in doses:
        members = tuple(i for i, (a, b) in enumerate(windows) if a <= dose.time_day < b)
        form = dose.absorption
        begin = dose.time_day + (form.lag_day if form else 0.0)
        if abs(begin - start_day) <= SAME_MOMENT_DAY:
            begin = start_day
        if begin >= last:
            continue
        if form is None and dose.duration_day < AT_ONCE_DAY:
            if begin >= start_day:
                pushes[begin].append((dose.amount_mg, members))
                marks.add(begin)
            continue
        stream = stream_for(form.ka_per_day if form else None, members)
        spread = form.release_day if form else dose.duration_day
        if spread < AT_ONCE_DAY:
            amount = dose.amount_mg
            if begin < start_day:
                amount *= math.exp(-stream.ka * (start_day - begin)) if stream.ka else 1.0
            events[max(begin, start_day)].append(("gut", stream, amount, dose.amount_mg))
        else:
            rate, end = dose.amount_mg / spread, begin + spread
            if begin < start_day and stream.ka:
                shown = min(start_day - begin, spread)
                rest = -rate * math.expm1(-stream.ka * shown) / stream.ka
                rest *= math.exp(-stream.ka * max(start_day - end, 0.0))
                events[start_day].append(("gut", stream, rest, dose.amount_mg))
            if end > start_day:
                events[max(begin, start_day)].append(("begin", stream, rate, dose.amount_mg))
                if end < last:
                    events[end].append(("end", stream, -rate, dose.amount_mg))
    marks.update(events)

    moments = sorted(t for t in marks if start_day <= t <= last)
    same: dict[float, float] = {}
    points: list[float] = []
    for moment in moments:
        if not points or moment - points[-1] > SAME_MOMENT_DAY:
            points.append(moment)
        same[moment] = points[-1]
    at: dict[float, list[tuple[str, _Stream, float, float]]] = defaultdict(list)
    for moment, listed in events.items():
        at[same[moment]] += listed
    pushed: dict[float, list[tuple[float, tuple[int, ...]]]] = defaultdict(list)
    for moment, some in pushes.items():
        pushed[same[moment]] += some

    asked: dict[float, list[int]] = defaultdict(list)
    for position, moment in enumerate(times_day):
        asked[same[moment]].append(position)

    # the last billionth of a dose changes no sensitivity
    negligible = 1e-9 * max((d.amount_mg for d in doses), default=0.0)
    longest = 0.25 / (fastest_per_day * fineness)
    steps: list[Step] = []
    ends: list[float] = []
    reached: dict[int, tuple[int, ...]] = {}
    active: list[_Stream] = []
    for index, begin in enumerate(points):
        if begin in asked:
            reached[len(steps)] = tuple(asked[begin])
        for what, stream, amount, dose_mg in at.get(begin, ()):
            stream.dose = dose_mg + (stream.dose if stream.since == begin else 0.0)
            stream.since = begin
            if what == "gut":
                stream.gut += amount
            else:
                stream.change(amount, 1 if what == "begin" else -1)
        if index + 1 == len(points):
            break
        finish = points[index + 1]
        paths = tuple(
            i
            for i, p in enumerate(first_order)
            if p.start_day <= begin + SAME_MOMENT_DAY and p.end_day > begin + SAME_MOMENT_DAY
        )
        push = pushed.get(begin, ())
        for stream in streams.values():
            # less than 1 part in 1e16 of what was swallowed is left
            if stream.ka and not stream.running and stream.ka * (begin - stream.since) > 37.0:
                stream.gut = 0.0
        active = [s for s in streams.values() if s.running or s.gut > 0.0]
        absorbing = [s for s in active if s.ka is not None]
        moment = begin
        while moment < finish:
            left = finish - moment
            if (exact or stiff) and not absorbing:
                h = left
            else:
                limit = math.inf if stiff else longest
                for s in absorbing:
                    assert s.ka is not None
                    gentle = max(1.0, 0.5 * s.ka / fastest_per_day) / max(s.fading(), 1e-30)
                    limit = min(limit, 0.5 / (s.ka * fineness) * gentle**0.2)
                    if stiff and left > 1e-3 / (s.ka * fineness):
                        limit = min(limit, 0.5 * left)
                pieces = math.ceil(left / limit * (1 - 1e-9))
                h = left / pieces if pieces <= 2 or limit == longest else limit
            moment = finish if h >= left else moment + h
            half = full = 0.0
            delivered = [(s, *s.deliver(h)) for s in active]
            for _, first, whole in delivered:
                half += first
                full += whole
            constant = full / h if stiff or (exact and not absorbing) else None
            parts = _by_window(push, delivered, negligible) if windows else ()
            steps.append(
                Step(h, math.fsum(amount for amount, _ in push) if push else 0.0, half, full, constant, paths, parts)
            )
            ends.append(moment)
            push = ()
    return Plan(start_day, tuple(steps), reached, tuple(ends))


def _by_window(
    push: Sequence[tuple[float, tuple[int, ...]]], delivered: Sequence[tuple[_Stream, float, float]], negligible: float
) -> tuple[tuple[int, float, float, float], ...]:
    """What a step pushes and delivers, by the window in which it was swallowed or given."""
    shares: dict[int, list[float]] = {}
    for amount, members in push:
        for w in members:
            shares.setdefault(w, [0.0, 0.0, 0.0])[0] += amount
    for stream, first, whole in delivered:
        for w in stream.windows if whole > negligible else ():
            share = shares.setdefault(w, [0.0, 0.0, 0.0])
            share[1] += first
            share[2] += whole
    return tuple((w, a, b, c) for w, (a, b, c) in shares.items())


#: How much finer than the everyday steps: largest error about 3e-3, 4e-5 and 2e-7 of the level.
FINENESS: Mapping[Accuracy, float] = {"everyday": 1.0, "fine": 4.0, "finest": 16.0}


#: Above this rate per day (a time constant under 2 minutes) the explicit step would need more work than
#: constant pieces: draws whose Km is next to nothing, whose levels collapse to it between doses.
STIFF_PER_DAY = 1000.0


class Speed(NamedTuple):
    """Draws that share a plan: their positions, and the rate per day that sets their steps."""

    positions: NDArray[np.intp]
    fastest_per_day: float

    @property
    def stiff(self) -> bool:
        return self.fastest_per_day > STIFF_PER_DAY

    def fineness(self, accuracy: Accuracy) -> float:
        """By what the everyday steps are divided; constant pieces are of second order and need more of
        them."""
        fine = FINENESS[accuracy]
        return 8.0 * fine**1.5 if self.stiff else fine


def speeds(fastest_per_day: Floats, typical_per_day: float | None = None) -> tuple[Speed, ...]:
    """Sort draws by their fastest relative rate, Vmax/kappa (+ k), into classes that share their steps.

    The first class steps at a quarter of the time constant of its fastest_per_day: the 99 % point, raised
    (by at most 2.2) where that spares the last draws a class of their own. No draw steps further than a
    third of its own time constant; faster ones go to classes with steps four (sixteen, ...) times shorter.

    typical_per_day takes the place of the 99 % point where the draws are not equally likely (nodes of a
    grid); draws beyond it may then step as far as their own time constant, the bound of positivity.
    """
    if not fastest_per_day.size:
        return ()
    if typical_per_day is None:
        reach = 4.0 / 3.0
        point = float(np.quantile(fastest_per_day, 0.99))
        first = float(np.clip(fastest_per_day.max() / reach, point, 2.2 * point))
    else:
        reach, first = 4.0, typical_per_day
    level = np.ceil(np.log(fastest_per_day / (reach * first)) / np.log(4.0) - 1e-9).clip(0).astype(int)
    return tuple(Speed(np.flatnonzero(level == n), first * 4.0 ** int(n)) for n in np.unique(level))


class Block:
    """One block of draws on its way: the state w and the stage values of the step just taken."""

    def __init__(self, vmax_mg_per_day: Floats, kappa_mg: Floats, start_mg: Floats) -> None:
        self.inverse = 1.0 / vmax_mg_per_day
        self.big_k = kappa_mg * self.inverse
        self.w = start_mg * self.inverse
        self.start = np.empty_like(self.w)
        n = len(self.w)
        self.x2, self.x3, self.x4 = np.empty(n), np.empty(n), np.empty(n)
        self.u1, self.u2, self.u3, self.u4 = np.empty(n), np.empty(n), np.empty(n), np.empty(n)
        self.full = np.empty(n)
        self.rate = np.empty(n)
        self.spare = np.empty(n)
        self.k: Floats | float | None = None
        self.slopes = (np.empty(n), np.empty(n), np.empty(n), np.empty(n))
        self.slopes_of: Step | None = None

    def _eliminated(self, x: Floats, out: Floats) -> None:
        np.add(self.big_k, x, out=out)
        np.divide(x, out, out=out)
        if self.k is not None:
            np.multiply(self.k, x, out=self.spare)
            out += self.spare

    def take(self, step: Step) -> None:
        """Move every draw of the block on by one step."""
        w, h = self.w, step.h
        if step.push:
            np.multiply(self.inverse, step.push, out=self.spare)
            w += self.spare
        self.start[...] = w
        if step.rate is not None:
            np.multiply(self.inverse, step.rate, out=self.rate)
            w[...] = formulas.constant_rate_step(
                time=h,
                start=w,
                input_rate=self.rate,
                vmax=1.0,
                km=self.big_k,
                first_order=0.0 if self.k is None else self.k,
            )
            return
        x2, x3, x4 = self.x2, self.x3, self.x4
        u1, u2, u3, u4 = self.u1, self.u2, self.u3, self.u4
        self._eliminated(w, u1)
        if step.full:
            np.multiply(self.inverse, step.half, out=x4)
            x4 += w
            np.multiply(self.inverse, step.full, out=self.full)
            self.full += w
            whole = self.full
        else:
            x4[...] = w
            whole = w
        np.multiply(u1, 0.5 * h, out=x2)
        np.subtract(x4, x2, out=x2)
        self._eliminated(x2, u2)
        np.multiply(u2, 0.5 * h, out=x3)
        np.subtract(x4, x3, out=x3)
        self._eliminated(x3, u3)
        np.multiply(u3, h, out=x4)
        np.subtract(whole, x4, out=x4)
        self._eliminated(x4, u4)
        total = self.spare
        np.add(u2, u3, out=total)
        total += total
        total += u1
        total += u4
        total *= h / 6.0
        np.subtract(whole, total, out=w)

    def middle(self, step: Step) -> Floats:
        """The state in the middle of the Runge-Kutta step just taken (third order)."""
        h = step.h
        out: Floats = self.start + self.inverse * step.half
        out -= (5 * h / 24) * self.u1
        out -= (h / 6) * (self.u2 + self.u3)
        out += (h / 24) * self.u4
        return out

    def area(self, step: Step) -> Floats:
        """Integral of the state over the step just taken: exact for a constant piece, else Simpson's rule."""
        if step.rate is not None:
            return formulas.auc(
                time_day=step.h,
                start_mg_per_L=self.start,
                dose_rate_mg_per_day=self.rate,
                vmax_mg_per_day=1.0,
                km_mg_per_L=self.big_k,
                volume_L=1.0,
                linear_clearance_L_per_day=0.0 if self.k is None else self.k,
            )
        total: Floats = 4.0 * self.middle(step)
        total += self.start
        total += self.w
        total *= step.h / 6.0
        return total

    def first_reach(self, step: Step, aim: Floats, falling: bool) -> Floats:
        """Where in the step just taken (0 to 1) the state first is at or beyond the aim; +inf where it is
        not."""
        sign = -1.0 if falling else 1.0
        a, b, c = (sign * part for part in self.parabola(step))
        a = a - sign * aim
        there = a >= 0
        end = sign * (self.w - aim) >= 0
        if step.rate is not None:
            time = formulas.time_to_level(
                start_mg_per_L=self.start,
                end_mg_per_L=aim,
                dose_rate_mg_per_day=self.rate,
                vmax_mg_per_day=1.0,
                km_mg_per_L=self.big_k,
                volume_L=1.0,
                linear_clearance_L_per_day=0.0 if self.k is None else self.k,
            )
            within = np.where(end, np.minimum(time / step.h, 1.0), np.inf)
            return np.where(there, 0.0, within)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            h = -0.5 * (b + np.copysign(np.sqrt(b * b - 4.0 * a * c), b))
            roots = np.stack([h / c, a / h])
            roots = np.where((roots >= 0) & (roots <= 1), roots, np.inf)
        first = np.min(roots, axis=0)
        first = np.where((first == np.inf) & end, 1.0, first)
        return np.where(there, 0.0, first)

    def parabola(self, step: Step) -> tuple[Floats, Floats, Floats]:
        """a, b, c of the state a + b x + c x^2 over the step just taken, x from 0 to 1 (c = 0: its two
        ends)."""
        if step.rate is not None:
            return self.start, self.w - self.start, np.zeros_like(self.w)
        middle = self.middle(step)
        return (
            self.start,
            4.0 * middle - 3.0 * self.start - self.w,
            2.0 * (self.start + self.w) - 4.0 * middle,
        )

    def stage_slopes(self, step: Step) -> tuple[Floats, Floats, Floats, Floats]:
        """h times the slope of the elimination at the four stages of the Runge-Kutta step just taken."""
        if self.slopes_of is step:
            return self.slopes
        h = step.h
        if self.k is not None:
            for out, x in zip(self.slopes, (self.start, self.x2, self.x3, self.x4), strict=True):
                np.multiply(self._slope(x), h, out=out)
        else:
            # the slope of x/(K + x) is (1 - x/(K + x))^2 / K, and the quotients are there already
            np.divide(h, self.big_k, out=self.spare)
            for out, u in zip(self.slopes, (self.u1, self.u2, self.u3, self.u4), strict=True):
                np.subtract(1.0, u, out=out)
                out *= out
                out *= self.spare
        self.slopes_of = step
        return self.slopes

    def total_slope(self, step: Step) -> Floats:
        """Integral of the slope of the elimination over the step just taken (Simpson)."""
        if step.rate is not None:
            with np.errstate(divide="ignore"):
                exact: Floats = np.minimum(-np.log(self.tangent(step)), 700.0)
            return exact
        if self.k is not None:
            d1, d2, d3, d4 = self.stage_slopes(step)
            total: Floats = d2 + d3
            total += total
            total += d1
            total += d4
            total *= 1.0 / 6.0
            return total
        # as `stage_slopes`, summed as they come: every step of every course of an estimate passes here
        self.slopes_of = None
        total, square = self.slopes[0], self.slopes[1]
        np.subtract(1.0, self.u2, out=total)
        total *= total
        np.subtract(1.0, self.u3, out=square)
        square *= square
        total += square
        total += total
        for u in (self.u1, self.u4):
            np.subtract(1.0, u, out=square)
            square *= square
            total += square
        total *= step.h / 6.0
        total /= self.big_k
        return total

    def carry(self, change: Floats, step: Step, push: float, half: float, full: float) -> Floats:
        """Derivative of the state after the step just taken along a change of the state before it and of input.

        change: of the state [days at the full rate], before a push; push, half, full: of the three inputs [mg].
        The exact derivative of a Runge-Kutta step. In a constant piece, what enters decays over the rest of it
        (3/4 of it for the first half of the input, 1/4 for the second).
        """
        first = change + push * self.inverse if push else change
        if step.rate is not None:
            quarter = np.sqrt(np.sqrt(self.tangent(step)))
            late = half * quarter**3 + (full - half) * quarter
            moved: Floats = first * quarter**4 + late * self.inverse
            return moved
        d1, d2, d3, d4 = self.stage_slopes(step)
        middle = first + half * self.inverse if full else first
        whole = first + full * self.inverse if full else first
        spare = self.spare
        e1 = d1 * first
        np.multiply(e1, -0.5, out=spare)
        spare += middle
        e2 = d2 * spare
        np.multiply(e2, -0.5, out=spare)
        spare += middle
        spare *= d3
        e2 += spare
        e2 += e2
        e1 += e2
        np.subtract(whole, spare, out=spare)
        spare *= d4
        e1 += spare
        e1 *= -1.0 / 6.0
        e1 += whole
        return e1

    def _slope(self, x: Floats) -> Floats:
        s = self.big_k + x
        s *= s
        np.divide(self.big_k, s, out=s)
        if self.k is not None:
            s += self.k
        return s

    def tangent(self, step: Step) -> Floats:
        """Derivative of the state after the step just taken with respect to the state before it."""
        h = step.h
        if step.rate is not None:
            return formulas.constant_rate_tangent(
                start=self.start,
                end=self.w,
                time=h,
                input_rate=self.rate,
                vmax=1.0,
                km=self.big_k,
                first_order=0.0 if self.k is None else self.k,
            )
        return self.carry(np.ones_like(self.w), step, 0.0, 0.0, 0.0)


def march(
    plan: Plan,
    vmax_mg_per_day: Floats,
    kappa_mg: Floats,
    start_mg: Floats,
    path_rates: Sequence[Floats | float] = (),
) -> Iterator[tuple[int, Step | None, Block]]:
    """Walk one block of draws along a plan; yields (steps taken, the step just taken, the block).

    The first yield stands at the start, before any step. path_rates: 1/day for each first-order path of the
    plan.
    """
    block = Block(vmax_mg_per_day, kappa_mg, start_mg)
    yield 0, None, block
    paths: tuple[int, ...] = ()
    for number, step in enumerate(plan.steps, 1):
        if step.paths != paths:
            paths = step.paths
            block.k = None if not paths else sum((path_rates[i] for i in paths[1:]), path_rates[paths[0]])
        block.take(step)
        yield number, step, block


def run(
    plan: Plan,
    vmax_mg_per_day: Floats,
    kappa_mg: Floats,
    start_mg: Floats,
    path_rates: Sequence[Floats | float] = (),
    *,
    faded: Floats | None = None,
) -> Floats:
    """Amounts [mg], shape (draws, asked-for times), of one block of draws.

    faded: filled, where given (same shape), with the integral of the slope of the elimination since the start:
    a small difference in the amount has shrunk by e to the minus of it."""
    count = sum(len(positions) for positions in plan.reached.values())
    out = np.empty((len(vmax_mg_per_day), count))
    total = np.zeros(len(vmax_mg_per_day))
    for number, step, block in march(plan, vmax_mg_per_day, kappa_mg, start_mg, path_rates):
        if faded is not None and step is not None:
            total += block.total_slope(step)
        if number in plan.reached:
            amounts = block.w * vmax_mg_per_day
            for position in plan.reached[number]:
                out[:, position] = amounts
                if faded is not None:
                    faded[:, position] = total
    return out
