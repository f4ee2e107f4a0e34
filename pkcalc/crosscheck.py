"""The second way: key numbers calculated again, independently, and set beside the first.

Levels by adaptive integration of the rate law, the steady level as a root, chances as plain sums over the draws, the
weights of the estimate by explicit integration over the volume, amounts and levels read again from the text as typed.
Nothing here uses the formulas, the engine or the estimates: agreement means that two different calculations agree.
It catches arithmetic, never transcription.
"""

from __future__ import annotations

import math
import re
from bisect import bisect_right
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal, Protocol

import numpy as np
from numpy.typing import NDArray

from pkcalc.case import Case
from pkcalc.drugs.profile import Profile
from pkcalc.levels import Observation
from pkcalc.record import Dose, Record
from pkcalc.site import Site
from pkcalc.units import show, show_number

Floats = NDArray[np.float64]

#: Largest relative difference of a level, and of what follows from one.
LEVEL_TOLERANCE = 0.005
#: Sums and roots that both ways can do exactly.
EXACT_TOLERANCE = 1e-6
#: Largest difference of a log ratio of two weights: the first way takes a dose as absorbed at its mean time.
WEIGHT_TOLERANCE = 0.05
#: The same with three or more censored levels, whose joint chance the first way takes on 64 fixed places.
JOINT_WEIGHT_TOLERANCE = 0.25
#: How far from one half the share of draws up to a median may be [%].
MEDIAN_TOLERANCE = 0.5
#: Days of a record that are integrated; of a longer one the beginning is taken at the plateau it had by then.
LONGEST_DAYS = 400.0
_STEP_DAY = 0.25
_GRID_PER_DAY = 12


@dataclass(frozen=True)
class Row:
    """One number both ways. tolerance: relative, or absolute where `absolute`. unit: of both numbers."""

    quantity: str
    first: float
    second: float
    unit: str
    tolerance: float
    absolute: bool = False

    @property
    def agrees(self) -> bool:
        if math.isnan(self.first) or math.isnan(self.second):
            return False
        if math.isinf(self.first) or math.isinf(self.second):
            return self.first == self.second
        allowed = self.tolerance if self.absolute else self.tolerance * max(abs(self.first), abs(self.second))
        return abs(self.first - self.second) <= allowed

    @property
    def first_text(self) -> str:
        return _text(self.first, self.unit)

    @property
    def second_text(self) -> str:
        return _text(self.second, self.unit)

    @property
    def tolerance_text(self) -> str:
        if self.absolute:
            return f"{show_number(self.tolerance)} {self.unit}".strip()
        if self.tolerance <= EXACT_TOLERANCE:
            return "rounding only"
        return f"{show_number(100 * self.tolerance)} %"

    @property
    def words(self) -> str:
        return f"{self.quantity}: {self.first_text} against {self.second_text}"


def _text(value: float, unit: str) -> str:
    if math.isnan(value):
        return "no number"
    if math.isinf(value):
        return "no steady state"
    sign = "minus " if value < 0 else ""
    return sign + (show(abs(value), unit, 4) if unit else show_number(abs(value), 4))


@dataclass(frozen=True)
class Node:
    """One (Vmax, Km, V) with what it is called."""

    name: str
    vmax_mg_per_day: float
    km_mg_per_L: float
    volume_L: float


class MeasuredLevel(Protocol):
    """What is needed of a level: time, value, the parts of its own spread."""

    @property
    def time_day(self) -> float: ...
    @property
    def level_mg_per_L(self) -> float: ...
    @property
    def assay_cv(self) -> float: ...
    @property
    def floor_mg_per_L(self) -> float: ...
    @property
    def day_cv(self) -> float: ...
    @property
    def extra_log_sd(self) -> float: ...
    @property
    def censored(self) -> Literal["below", "above"] | None: ...
    @property
    def index(self) -> int: ...


@dataclass(frozen=True)
class Belief:
    """How the record and its levels are believed: share of doses missed unseen, how far a person's habit may lie from
    it, chance and width of a wrong level."""

    missed: float
    habit: float
    wrong_chance: float
    wrong_factor: float


@dataclass(frozen=True)
class Population:
    """Medians and covariance of (log Vmax, log Km, log V) before any level."""

    mean: Floats
    cov: Floats


# --- the course of a record ----------------------------------------------------------------------------------


class _Input:
    """Rate at which active drug reaches the blood [mg/day] at any time, and the moments at which it jumps."""

    def __init__(self, doses: Sequence[Dose]) -> None:
        self.doses = sorted(
            (d for d in doses if d.absorption is not None or d.duration_day > 0), key=lambda d: d.time_day
        )
        self.pushes = sorted(
            (d for d in doses if d.absorption is None and d.duration_day == 0), key=lambda d: d.time_day
        )
        self.starts = [d.time_day for d in self.doses]
        # after 16 times 1/ka a ten-millionth of a dose is left in the gut
        self.longest = max(
            (
                d.duration_day
                if d.absorption is None
                else d.absorption.lag_day + d.absorption.release_day + 16.0 / d.absorption.ka_per_day
                for d in self.doses
            ),
            default=0.0,
        )

    def rate(self, time: float) -> float:
        total = 0.0
        for i in range(bisect_right(self.starts, time) - 1, -1, -1):
            dose = self.doses[i]
            if time - dose.time_day > self.longest:
                break
            total += _rate_of(dose, time)
        return total


def _rate_of(dose: Dose, time: float) -> float:
    since = time - dose.time_day
    if dose.absorption is None:
        return dose.amount_mg / dose.duration_day if 0 <= since < dose.duration_day else 0.0
    a = dose.absorption
    since -= a.lag_day
    if since < 0:
        return 0.0
    if a.release_day == 0:
        return a.ka_per_day * dose.amount_mg * math.exp(-a.ka_per_day * since)
    flow_in = dose.amount_mg / a.release_day
    if since < a.release_day:
        return flow_in * -math.expm1(-a.ka_per_day * since)
    return flow_in * -math.expm1(-a.ka_per_day * a.release_day) * math.exp(-a.ka_per_day * (since - a.release_day))


def _absorbed(dose: Dose, times: Floats) -> Floats:
    """Amount of a dose that has reached the blood by each time [mg]."""
    since = times - dose.time_day
    if dose.absorption is None:
        if dose.duration_day == 0:
            return np.where(since >= 0, dose.amount_mg, 0.0)
        return dose.amount_mg * np.clip(since / dose.duration_day, 0.0, 1.0)
    a = dose.absorption
    since = np.maximum(since - a.lag_day, 0.0)
    if a.release_day == 0:
        return np.asarray(dose.amount_mg * -np.expm1(-a.ka_per_day * since))
    released = np.minimum(since, a.release_day)
    gut = -np.expm1(-a.ka_per_day * released) / a.ka_per_day * np.exp(-a.ka_per_day * (since - released))
    return np.asarray(dose.amount_mg / a.release_day * (released - gut))


def _all_doses(record: Record) -> tuple[float, list[Dose]]:
    """Where the integration begins, and every dose from there on, the earlier regimen written out from its start."""
    doses, begin = list(record.doses), record.start_day
    before = record.before
    if before is not None:
        cycle = before.regimen.cycle_day
        past = max(1, round(min(before.for_day, LONGEST_DAYS) / cycle))
        begin -= past * cycle
        doses += before.regimen.cycles(-past, 0, record.start_day)
    return begin, doses


@dataclass(frozen=True)
class Course:
    """Amounts [mg] per node on a grid of times, and how much a difference has died away by then (its logarithm)."""

    times_day: Floats
    amount_mg: Floats
    gone: Floats


def integrate(
    record: Record,
    times_day: Sequence[float],
    nodes: Sequence[Node],
    *,
    first_order_per_day: float = 0.0,
    start_mg_per_L: float | None = None,
) -> Course:
    """dX/dt = r(t) - Vmax X / (Km V + X) - k X for every node at once, by scipy's LSODA; at the times asked for and
    on an even grid before them. record: as taken. first_order_per_day: the population's parallel path.
    start_mg_per_L: a level at the start of the record, in place of what it says was in the body."""
    from scipy.integrate import odeint

    begin, doses = _all_doses(record)
    flow_in = _Input(doses)
    last = max(times_day)
    count = max(2, int((last - begin) * _GRID_PER_DAY))
    grid = np.unique(np.concatenate([np.linspace(begin, last, count), np.array(times_day)]))
    size = len(nodes)
    # plain numbers: for a handful of nodes they are several times quicker than arrays
    ways = [
        (
            n.vmax_mg_per_day,
            n.km_mg_per_L * n.volume_L,
            [
                (p.start_day, p.end_day, p.rate_per_day)
                if p.rate_per_day is not None
                else (p.start_day, p.end_day, (p.clearance_L_per_day or 0.0) / n.volume_L)
                for p in record.first_order
            ],
        )
        for n in nodes
    ]

    def change(t: float, state: Floats) -> list[float]:
        arriving = flow_in.rate(t)
        amounts, fading = [], []
        for x, (vmax, kappa, paths) in zip(state.tolist(), ways, strict=False):
            k = first_order_per_day
            for start, end, rate in paths:
                if start <= t < end:
                    k += rate
            held = vmax / (kappa + x)
            amounts.append(arriving - (held + k) * x)
            fading.append(held * kappa / (kappa + x) + k)
        return amounts + fading

    jumps = sorted(
        {begin, last}
        | {d.time_day for d in flow_in.pushes if begin <= d.time_day <= last}
        | {
            t
            for d in flow_in.doses
            if d.absorption is None
            for t in (d.time_day, d.time_day + d.duration_day)
            if begin < t < last
        }
        | {t for p in record.first_order for t in (p.start_day, p.end_day) if begin < t < last}
    )
    state = np.zeros(2 * size)
    if record.start_mg is not None and record.before is None:
        state[:size] = record.start_mg
    if start_mg_per_L is not None:
        state[:size] = [start_mg_per_L * n.volume_L for n in nodes]
    amount, gone = np.zeros((size, len(grid))), np.zeros((size, len(grid)))
    # no step may pass over the whole of a quickly absorbed dose
    widest = min(
        [_STEP_DAY]
        + [1.5 / d.absorption.ka_per_day + 0.5 * d.absorption.release_day for d in flow_in.doses if d.absorption]
    )
    for a, b in pairwise(jumps):
        for d in flow_in.pushes:
            if d.time_day == a:
                state[:size] += d.amount_mg
        first, end = np.searchsorted(grid, a), np.searchsorted(grid, b, "right" if b == last else "left")
        times = np.concatenate([[a], grid[first:end], [b]])
        found, told = odeint(
            change,
            state,
            times,
            tfirst=True,
            tcrit=[b],
            rtol=1e-6,
            atol=1e-3,
            hmax=widest,
            mxstep=10**6,
            full_output=True,
        )
        if told["message"] != "Integration successful.":
            found[:] = np.nan
        amount[:, first:end], gone[:, first:end] = found[1:-1, :size].T, found[1:-1, size:].T
        state = found[-1].copy()
    return Course(grid, amount, gone)


def taken(record: Record, missed: float) -> Record:
    """The record with every dose by mouth reduced to what is taken on average."""
    if missed == 0:
        return record

    def less(d: Dose) -> Dose:
        return d if d.absorption is None else Dose(d.time_day, d.amount_mg * (1 - missed), d.duration_day, d.absorption)

    before = record.before
    if before is not None:
        regimen = type(before.regimen)(before.regimen.cycle_day, tuple(less(d) for d in before.regimen.doses))
        before = type(before)(regimen, before.for_day)
    return Record(
        doses=tuple(less(d) for d in record.doses),
        start_day=record.start_day,
        start_mg=record.start_mg,
        before=before,
        first_order=record.first_order,
    )


def level_rows(
    first_mg_per_L: Floats, course: Course, nodes: Sequence[Node], levels: Sequence[MeasuredLevel]
) -> tuple[Row, ...]:
    """For every node the level at which the two ways differ most. first_mg_per_L: shape (nodes, levels)."""
    rows = []
    at = np.searchsorted(course.times_day, [x.time_day for x in levels])
    for i, node in enumerate(nodes):
        second = course.amount_mg[i, at] / node.volume_L
        worst = int(np.argmax(np.abs(np.log(np.maximum(first_mg_per_L[i], 1e-12) / np.maximum(second, 1e-12)))))
        rows.append(
            Row(
                f"Level {levels[worst].index + 1} by the record at {node.name} (worst of {len(levels)})",
                float(first_mg_per_L[i, worst]),
                float(second[worst]),
                "mg/L",
                LEVEL_TOLERANCE,
            )
        )
    return tuple(rows)


# --- the weights of the estimate -----------------------------------------------------------------------------


def log_weights(
    course: Course,
    record: Record,
    nodes: Sequence[Node],
    levels: Sequence[MeasuredLevel],
    population: Population,
    belief: Belief,
) -> Floats:
    """Log posterior density of each node's (log Vmax, log Km V), the volume summed out on a grid; up to a constant.

    record: as taken on average, every doubtful dose written out.
    """
    at = np.searchsorted(course.times_day, [x.time_day for x in levels])
    own = np.array(
        [
            math.log(1 + x.assay_cv**2)
            + math.log(1 + (x.floor_mg_per_L / x.level_mg_per_L) ** 2)
            + math.log(1 + x.day_cv**2)
            + x.extra_log_sd**2
            for x in levels
        ]
    )
    observed = np.log([x.level_mg_per_L for x in levels])
    inverse = np.linalg.inv(population.cov)
    sd_volume = math.sqrt(population.cov[2, 2])
    # joint chances of several hidden levels cost much, so there the grid is no finer than the sharpest level asks for
    several = sum(x.censored is not None for x in levels) > 1
    points = min(601, max(61, math.ceil(30 * sd_volume / math.sqrt(own.min())))) if several else 601
    log_v = population.mean[2] + sd_volume * np.linspace(-7.5, 7.5, points)
    out = np.empty(len(nodes))
    for i, node in enumerate(nodes):
        shared = _shared_covariance(course, i, at, record, levels, belief)
        a, kappa = math.log(node.vmax_mg_per_day), math.log(node.km_mg_per_L) + math.log(node.volume_L)
        off = np.stack([np.full_like(log_v, a), kappa - log_v, log_v]) - population.mean[:, None]
        prior = -0.5 * np.einsum("in,ij,jn->n", off, inverse, off)
        likely = prior > prior.max() - 40.0
        prior, volumes = prior[likely], log_v[likely]
        error = observed[:, None] - (np.log(course.amount_mg[i, at])[:, None] - volumes[None, :])
        wrong = belief.wrong_chance
        shares = [1 - wrong] + [wrong] * len(levels) if wrong else [1.0]
        total = np.zeros_like(volumes)
        for part, share in enumerate(shares):
            s = shared + np.diag(own)
            if part:
                s[part - 1, part - 1] *= belief.wrong_factor**2
            total += share / sum(shares) * np.exp(_log_normal(error, s, [x.censored for x in levels]))
        values = prior + np.log(np.maximum(total, 1e-300))
        top = float(values.max())
        out[i] = top + math.log(float(np.sum(np.exp(values - top))))
    return out


def _log_normal(error: Floats, s: Floats, censored: Sequence[str | None]) -> Floats:
    """Log density of the measured errors times the chance of the hidden ones; error: shape (levels, points).

    s: covariance of the errors.
    """
    seen = [j for j, c in enumerate(censored) if c is None]
    hidden = [j for j, c in enumerate(censored) if c is not None]
    value = np.zeros(error.shape[1])
    if seen:
        part = s[np.ix_(seen, seen)]
        e = error[seen]
        value = -0.5 * (np.sum(e * np.linalg.solve(part, e), axis=0) + np.linalg.slogdet(2 * math.pi * part)[1])
    if not hidden:
        return value
    centre, left = np.zeros((len(hidden), error.shape[1])), s[np.ix_(hidden, hidden)]
    if seen:
        gain = np.linalg.solve(s[np.ix_(seen, seen)], s[np.ix_(seen, hidden)])
        centre = gain.T @ error[seen]
        left = left - s[np.ix_(hidden, seen)] @ gain
    sign = np.array([1.0 if censored[j] == "below" else -1.0 for j in hidden])
    bound = sign[:, None] * (error[hidden] - centre)
    return value + log_chance_of_all(bound, left * np.outer(sign, sign))


def log_chance_of_all(bound: Floats, cov: Floats) -> Floats:
    """Log chance that every one of some errors lies under its bound; bound: shape (levels, points).

    The chance of the first, times that of the second given where under its bound the first lies, and so on: an
    integral over as many places as there are levels but one. Up to four levels it is done by the Gauss-Legendre rule
    for each, beyond that on a lattice. The level that is hardest to keep under its bound goes first.
    """
    from scipy.special import log_ndtr, ndtr, ndtri

    count = len(bound)
    hardest = np.argsort(np.mean(bound, axis=1) / np.sqrt(np.diag(cov)))
    bound, cov = bound[hardest], cov[np.ix_(hardest, hardest)]
    root = np.linalg.cholesky(cov)
    places, weights = _places(count - 1)
    logged = np.broadcast_to(np.log(weights)[:, None], (len(weights), bound.shape[1])).copy()
    before = np.zeros((count, len(weights), bound.shape[1]))
    for j in range(count):
        limit = (bound[j] - np.tensordot(root[j, :j], before[:j], 1)) / root[j, j]
        logged += log_ndtr(limit)
        if j + 1 < count:
            before[j] = ndtri(np.clip(places[:, j, None] * ndtr(limit), 1e-300, 1 - 1e-16))
    top = logged.max(axis=0)
    return np.asarray(top + np.log(np.sum(np.exp(logged - top), axis=0)))


def _places(dimensions: int) -> tuple[Floats, Floats]:
    """Places in the unit cube and their weights, which sum to one."""
    if dimensions == 0:
        return np.zeros((1, 0)), np.ones(1)
    if dimensions <= 3:
        x, w = np.polynomial.legendre.leggauss((24, 14, 8)[dimensions - 1])
        each = np.meshgrid(*[(x + 1) / 2] * dimensions, indexing="ij")
        weights = np.meshgrid(*[w / 2] * dimensions, indexing="ij")
        return np.stack([e.ravel() for e in each], axis=1), np.prod([e.ravel() for e in weights], axis=0)
    # a Korobov lattice, folded so that the edges meet
    count, step = 509, 58
    powers = [pow(step, k, count) for k in range(dimensions)]
    at = (np.outer(np.arange(count), powers) / count + 0.5 / count) % 1.0
    return 1.0 - np.abs(2.0 * at - 1.0), np.full(count, 1.0 / count)


def _shared_covariance(
    course: Course, i: int, at: NDArray[np.intp], record: Record, levels: Sequence[MeasuredLevel], belief: Belief
) -> Floats:
    """What doses missed unseen do to every two levels: each dose by itself, and the habit of all."""
    m = len(levels)
    odds = belief.missed / (1 - belief.missed)
    doses = [d for d in record.doses if d.absorption is not None and d.time_day < course.times_day[at].max()]
    if not odds or not doses:
        return np.zeros((m, m))
    times, gone = course.times_day, course.gone[i]
    start = np.searchsorted(times, [d.time_day for d in doses])
    # a dose counts for the first level after it, if for any: by then a difference has died away least
    ends = np.sort(gone[at])
    kept = [
        d
        for d, k in zip(doses, start, strict=True)
        if (after := ends[np.searchsorted(ends, gone[min(k, len(gone) - 1)]) :]).size
        and after[0] - gone[min(k, len(gone) - 1)] < 40.0
    ]
    if not kept:
        return np.zeros((m, m))
    absorbed = np.stack([_absorbed(d, times) for d in kept])
    pieces = np.diff(absorbed, axis=1)
    middle = 0.5 * (gone[1:] + gone[:-1])
    gains = np.zeros((m, len(kept)))
    for j, k in enumerate(at):
        left = np.exp(np.minimum(middle[:k] - gone[k], 0.0))
        gains[j] = pieces[:, :k] @ left / course.amount_mg[i, k]
    habit = belief.habit * odds * gains.sum(axis=1)
    return np.asarray(odds * gains @ gains.T + np.outer(habit, habit))


def weight_rows(
    first: Floats, second: Floats, nodes: Sequence[Node], levels: Sequence[MeasuredLevel]
) -> tuple[Row, ...]:
    """Log weight of every node against that of the first, both ways."""
    hidden = sum(x.censored is not None for x in levels)
    tolerance = WEIGHT_TOLERANCE if hidden < 3 else JOINT_WEIGHT_TOLERANCE
    return tuple(
        Row(
            f"Log of the weight at {nodes[i].name} over that at {nodes[0].name}",
            float(first[i] - first[0]),
            float(second[i] - second[0]),
            "",
            tolerance,
            absolute=True,
        )
        for i in range(1, len(nodes))
    )


# --- the steady level and the chances ------------------------------------------------------------------------


def steady_level(rate_mg_per_day: float, vmax_mg_per_day: float, km_mg_per_L: float) -> float:
    """The level at which elimination equals the dose rate, by bisection; +inf where there is none."""
    if rate_mg_per_day >= vmax_mg_per_day:
        return math.inf
    from scipy.optimize import brentq

    def net(level: float) -> float:
        return vmax_mg_per_day * level / (km_mg_per_L + level) - rate_mg_per_day

    high = km_mg_per_L
    while net(high) < 0:
        high *= 2
    return float(brentq(net, 0.0, high, xtol=1e-12 * high, rtol=1e-12))


def steady_rows(
    words: str,
    rate_mg_per_day: float,
    point: Node,
    *,
    level_mg_per_L: float,
    median_mg_per_L: float,
    chance_above_critical: float,
    critical_mg_per_L: float,
    vmax_mg_per_day: Floats,
    km_mg_per_L: Floats,
    weights: Floats,
) -> tuple[Row, ...]:
    """Steady level at the point and back to the dose; median and chance by plain sums over the draws."""
    second = steady_level(rate_mg_per_day, point.vmax_mg_per_day, point.km_mg_per_L)
    rows = [Row(f"Steady level on {words} at the point", level_mg_per_L, second, "mg/L", EXACT_TOLERANCE)]
    if math.isfinite(level_mg_per_L):
        back = point.vmax_mg_per_day / (1.0 + point.km_mg_per_L / level_mg_per_L)
        rows.append(
            Row(f"And back: the dose rate that holds it ({words})", rate_mg_per_day, back, "mg/day", EXACT_TOLERANCE)
        )
    reached, above, total = [], 0.0, 0.0
    for vmax, km, weight in zip(vmax_mg_per_day.tolist(), km_mg_per_L.tolist(), weights.tolist(), strict=True):
        level = math.inf if vmax <= rate_mg_per_day else km / (vmax / rate_mg_per_day - 1.0)
        reached.append((level, weight))
        total += weight
        if level > critical_mg_per_L:
            above += weight
    none = 100 * sum(weight for level, weight in reached if math.isinf(level)) / total
    if math.isinf(median_mg_per_L):
        half = math.inf if none >= 50.0 - MEDIAN_TOLERANCE else none
        rows.append(Row(f"Median steady level on {words}", median_mg_per_L, half, "%", MEDIAN_TOLERANCE, absolute=True))
    else:
        # near Vmax neighbouring draws lie far apart, so the median is judged by the draws on either side of it
        below = 100 * sum(weight for level, weight in reached if level <= median_mg_per_L) / total
        name = f"Draws up to the median steady level on {words} ({show(median_mg_per_L, 'mg/L')})"
        rows.append(Row(name, 50.0, below, "%", MEDIAN_TOLERANCE, absolute=True))
    rows.append(
        Row(
            f"Chance above {show(critical_mg_per_L, 'mg/L')} or of no steady state on {words}",
            100 * chance_above_critical,
            100 * above / total,
            "%",
            0.2,
            absolute=True,
        )
    )
    return tuple(rows)


#: Levels below this are as good as none [mg/L]: no relative difference is looked at there.
_NEXT_TO_NOTHING = 0.01


def projected_rows(
    words: str,
    course: Course,
    nodes: Sequence[Node],
    *,
    times_day: Sequence[float],
    hours: Sequence[float],
    first_mg_per_L: Floats,
) -> tuple[Row, ...]:
    """The hours to come on one way to go on: for every node the moment at which the two ways differ most.

    course: integrated to times_day. first_mg_per_L: shape (nodes, moments).
    """
    rows = []
    at = np.searchsorted(course.times_day, times_day)
    for i, node in enumerate(nodes):
        first, second = first_mg_per_L[i], course.amount_mg[i, at] / node.volume_L
        apart = np.abs(np.log(np.maximum(first, _NEXT_TO_NOTHING) / np.maximum(second, _NEXT_TO_NOTHING)))
        worst = int(np.argmax(np.where(np.isnan(apart), np.inf, apart)))
        if max(first[worst], second[worst]) < _NEXT_TO_NOTHING:
            continue
        name = f"Level in {show(hours[worst], 'h')}, {words}, at {node.name} (worst of {len(hours)})"
        rows.append(Row(name, float(first[worst]), float(second[worst]), "mg/L", LEVEL_TOLERANCE))
    return tuple(rows)


def shares_row(words: str, printed: float, values: Floats, weights: Floats) -> Row:
    """A printed median, judged by the share of the draws up to it, as a plain sum."""
    below = sum(w for v, w in zip(values.tolist(), weights.tolist(), strict=True) if v <= printed * (1 + 1e-9))
    total = sum(weights.tolist())
    # with few draws the median can only be as exact as the weight of one of them
    allowed = max(MEDIAN_TOLERANCE, 100 * max(weights.tolist()) / total)
    return Row(f"Draws up to the median of {words}", 50.0, 100 * below / total, "%", allowed, absolute=True)


def chance_row(words: str, printed: float, above: float, values: Floats, weights: Floats) -> Row:
    """A printed chance of a value above a limit, as a plain sum over the draws."""
    hit = sum(w for v, w in zip(values.tolist(), weights.tolist(), strict=True) if v > above)
    return Row(f"Chance of {words}", 100 * printed, 100 * hit / sum(weights.tolist()), "%", 0.2, absolute=True)


def removed_mg_per_h(level_mg_per_L: float, node: Node, clearance_L_per_day: float) -> float:
    """What leaves the body in an hour at a level: the saturable path and everything beside it."""
    saturable = node.vmax_mg_per_day / (node.km_mg_per_L / level_mg_per_L + 1.0)
    return (saturable + clearance_L_per_day * level_mg_per_L) / 24.0


def days_on_the_way(rate_mg_per_day: float, start_mg_per_L: float, node: Node, fraction: float) -> float:
    """Days until a fraction of the way to the steady level at a constant rate, by integration to an event."""
    from scipy.integrate import solve_ivp

    end = steady_level(rate_mg_per_day, node.vmax_mg_per_day, node.km_mg_per_L)
    if math.isinf(end):
        return math.inf
    goal = start_mg_per_L + fraction * (end - start_mg_per_L)
    if abs(end - start_mg_per_L) < 1e-9 * end:
        return 0.0

    def change(_: float, x: Floats) -> Floats:
        out: Floats = (rate_mg_per_day - node.vmax_mg_per_day * x / (node.km_mg_per_L + x)) / node.volume_L
        return out

    def there(_: float, x: Floats) -> float:
        return float(x[0] - goal)

    there.terminal = True  # type: ignore[attr-defined]
    found = solve_ivp(change, (0.0, 1e7), [start_mg_per_L], method="LSODA", events=there, rtol=1e-8, atol=1e-9)
    if not found.t_events or not len(found.t_events[0]):
        return math.nan
    return float(found.t_events[0][0])


def pair_rows(
    rates_mg_per_day: Sequence[float], levels_mg_per_L: Sequence[float], vmax_mg_per_day: float, km_mg_per_L: float
) -> tuple[Row, ...]:
    """Vmax and Km of two steady levels as two linear equations: Vmax - Km R/C = R."""
    ratios = [r / c for r, c in zip(rates_mg_per_day, levels_mg_per_L, strict=True)]
    vmax, km = np.linalg.solve(np.array([[1.0, -ratios[0]], [1.0, -ratios[1]]]), np.array(rates_mg_per_day))
    return (
        Row("Vmax by the two levels", vmax_mg_per_day, float(vmax), "mg/day", EXACT_TOLERANCE),
        Row("Km by the two levels", km_mg_per_L, float(km), "mg/L", EXACT_TOLERANCE),
    )


# --- the text as typed ---------------------------------------------------------------------------------------

#: Factors to mg, mg/L, kg, g/L of the labels that may have been typed; molar ones need the molar mass.
_FACTORS: Mapping[str, Mapping[str, float]] = {
    "amount": {"mg": 1.0, "g": 1000.0, "mg PE": 1.0},
    "level": {"mg/L": 1.0, "mcg/mL": 1.0, "mg/dL": 10.0, "g/L": 1000.0},
    "weight": {"kg": 1.0, "lb": 0.45359237},
    "albumin": {"g/L": 1.0, "g/dL": 10.0},
}
_MOLAR = {"umol/L": 1e-3, "mmol/L": 1.0}
_TYPED = re.compile(r"\s*[<>]?\s*([0-9,.]+)\s*(.*?)\s*")


def again(text: str, kind: str, molar_mass_g_per_mol: float) -> float | None:
    """A typed number with its unit, read a second time; None where this reader does not know the label."""
    match = _TYPED.fullmatch(text)
    if match is None:
        return None
    number, label = match.groups()
    if re.fullmatch(r"[0-9]{1,3}(,[0-9]{3})+(\.[0-9]+)?", number):
        number = number.replace(",", "")
    try:
        value = float(number)
    except ValueError:
        return None
    if kind == "level" and label in _MOLAR:
        return value * _MOLAR[label] * molar_mass_g_per_mol
    factor = _FACTORS[kind].get(label)
    return None if factor is None else value * factor


def _add(rows: list[Row], what: str, first: float, second: float | None, unit: str) -> None:
    if second is not None:
        rows.append(Row(f"{what}, read again from the text", first, second, unit, EXACT_TOLERANCE))


def binding_rows(observations: Sequence[Observation], case: Case, profile: Profile, site: Site) -> tuple[Row, ...]:
    """Each corrected level at normal binding, by plain arithmetic on what was reported."""
    binding = profile.binding
    rows: list[Row] = []
    if binding is None:
        return ()
    for o in observations:
        level = o.level
        if not o.readable or o.censored is not None or level.kind == "normalised":
            continue
        second = level.reported_mg_per_L
        albumin = level.albumin or case.albumin
        if level.kind == "free":
            second = level.reported_mg_per_L / binding.free_fraction
        elif albumin is not None:
            bound = site.albumin_coefficient(binding) * (albumin.g_per_L / 10.0) + binding.constant
            second = level.reported_mg_per_L / bound if bound < 1.0 else level.reported_mg_per_L
        rows.append(Row(f"{o.name} at normal binding", o.working_mg_per_L, second, "mg/L", EXACT_TOLERANCE))
    return tuple(rows)


def text_rows(case: Case, profile: Profile) -> tuple[Row, ...]:
    """Weight, albumin, levels and active dose rates, read again from the text as typed."""
    mass = profile.molar_mass_g_per_mol
    rows: list[Row] = []
    if case.patient.weight_kg is not None:
        _add(rows, "Weight", case.patient.weight_kg, again(case.file.patient.weight, "weight", mass), "kg")
    if case.albumin is not None and case.file.albumin is not None:
        _add(rows, "Albumin", case.albumin.g_per_L, again(case.file.albumin.value, "albumin", mass), "g/L")
    for level, typed in zip(case.levels, case.file.levels, strict=True):
        _add(rows, f"Level {level.index + 1}", level.reported_mg_per_L, again(typed.value, "level", mass), "mg/L")
    for course in case.courses:
        if course.regimen is None:
            continue
        file = course.typed
        total: float | None = 0.0
        doses = [(d.amount, d.form or file.form) for d in file.daily] or [(file.amount, file.form)]
        for amount, form_id in doses:
            mg = again(amount, "amount", mass)
            form = profile.forms.get(form_id)
            if mg is None or form is None or total is None:
                total = None
                continue
            total += mg * form.salt_factor * form.bioavailability
        hours = re.fullmatch(r"\s*([0-9.]+)\s*(h|day|days)\s*", file.every) if file.every else None
        if file.every and hours is None:
            total = None
        if total is not None:
            days = 1.0
            if hours is not None:
                days = float(hours.group(1)) / (24.0 if hours.group(2) == "h" else 1.0)
            _add(
                rows,
                f"Active drug of dose line {course.index + 1}",
                course.regimen.active_mg_per_day(profile),
                total / days,
                "mg/day",
            )
    return tuple(rows)


def infusion_rows(case: Case, profile: Profile) -> tuple[Row, ...]:
    """Single doses and running infusions in labelled mg, read again from the text; mL by the per cent on the label."""
    rows: list[Row] = []
    for course in case.courses:
        file, where = course.typed, f"dose line {course.index + 1}"
        if course.single is not None:
            second = _labelled_mg(file.amount, file.product, profile)
            _add(rows, f"Labelled amount of {where}", course.single.labelled_mg, second, "mg")
        elif course.rate_mg_per_day is not None:
            amount, _, per = file.rate.rpartition("/")
            kg = 1.0
            if amount.endswith("/kg"):
                amount = amount.removesuffix("/kg")
                kg = again(case.file.patient.weight, "weight", profile.molar_mass_g_per_mol) or math.nan
            mg, hours = _labelled_mg(amount, file.product, profile), {"h": 1.0, "min": 1 / 60, "day": 24.0}.get(per)
            second = None if mg is None or hours is None else mg * kg / hours
            _add(rows, f"Labelled rate of {where}", course.rate_mg_per_day / 24, second, "mg/h")
    return tuple(rows)


def _labelled_mg(text: str, product_id: str, profile: Profile) -> float | None:
    match = _TYPED.fullmatch(text)
    if match is None or match.group(2) != "mL":
        return again(text, "amount", profile.molar_mass_g_per_mol)
    product = profile.products.get(product_id)
    if product is None or product.percent is None:
        return None
    # 1 % w/v is 10 mg/mL; 1 % v/v is as many times the density
    mg_per_mL = (
        1000 * product.percent * (1.0 if product.strength_basis == "w/v" else profile.density_g_per_mL or math.nan)
    )
    mL = again(f"{match.group(1)} mg", "amount", profile.molar_mass_g_per_mol)
    return None if mL is None else mL * mg_per_mL
