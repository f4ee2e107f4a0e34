"""What a dose rate would lead to: steady level, chances against the target, time to settle, level on named days.

Many dose rates are taken at once: rates along one axis, draws along the other.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pkcalc import formulas
from pkcalc.estimate.result import Band, Estimate, band
from pkcalc.levels import LabScale

Floats = NDArray[np.float64]

#: Draws used for times and courses. Quantiles of the steady level use all of them; a time needs less precision.
TIME_DRAWS = 512
_SEED = 20_260_301


@dataclass(frozen=True)
class Goal:
    """Target range and critical level on the working basis, with the aim where one is stated."""

    low_mg_per_L: float
    high_mg_per_L: float
    critical_mg_per_L: float
    aim_mg_per_L: float
    origin: str


@dataclass(frozen=True)
class Forecast:
    """The steady level of one dose rate of active drug.

    steady: working basis; a bound of +inf is "no steady state". total: the same as the laboratory will report
    it. The chances below + within + above are 1; above holds no_steady_state. settle_days: to 90 % of the way
    from the present level; None without a volume; +inf where there is no steady state. percent_per_percent:
    rise of the steady level in % for 1 % more dose, at the point.
    """

    rate_mg_per_day: float
    steady: Band
    total: Band
    free: Band
    below: float
    within: float
    above: float
    above_critical: float
    no_steady_state: float
    settle_days: Band | None
    percent_per_percent: float
    point_mg_per_L: float


def forecast_rate(
    estimate: Estimate,
    rate_mg_per_day: float,
    goal: Goal,
    scale: LabScale,
    *,
    present_mg_per_L: ArrayLike = 0.0,
) -> Forecast:
    """Distribution of the steady level of a constant rate of active drug under the estimate's draws."""
    return forecast_rates(estimate, (rate_mg_per_day,), goal, scale, present_mg_per_L=present_mg_per_L)[0]


def forecast_rates(
    estimate: Estimate,
    rates_mg_per_day: Sequence[float],
    goal: Goal,
    scale: LabScale,
    *,
    present_mg_per_L: ArrayLike = 0.0,
) -> tuple[Forecast, ...]:
    """`forecast_rate` for many dose rates at once.

    present_mg_per_L: today's level, one for all, or one per draw (of all, or of `fewer_draws`); the
    way to the steady level begins there.
    """
    rates = np.asarray(rates_mg_per_day, dtype=np.float64)
    vmax, km, weights = estimate.vmax_mg_per_day, estimate.km_mg_per_L, estimate.weights
    steady = formulas.steady_state_level(dose_rate_mg_per_day=rates[:, None], vmax_mg_per_day=vmax, km_mg_per_L=km)
    chances = {
        "below": (steady < goal.low_mg_per_L) @ weights,
        "above": (steady > goal.high_mg_per_L) @ weights,
        "critical": (steady > goal.critical_mg_per_L) @ weights,
        "none": np.isinf(steady) @ weights,
    }
    levels = bands(steady, weights)
    settle: Sequence[Band | None] = [None] * len(rates)
    if estimate.volume_L is not None:
        few = fewer_draws(estimate, TIME_DRAWS)
        present = draws_of(present_mg_per_L, few)
        days = formulas.time_to_fraction(
            fraction=0.9,
            dose_rate_mg_per_day=rates[:, None],
            vmax_mg_per_day=few.estimate.vmax_mg_per_day,
            km_mg_per_L=few.estimate.km_mg_per_L,
            volume_L=_volume(few.estimate),
            start_mg_per_L=present,
        )
        settle = bands(days, few.estimate.weights)
    points = formulas.steady_state_level(
        dose_rate_mg_per_day=rates,
        vmax_mg_per_day=estimate.point.vmax_mg_per_day,
        km_mg_per_L=estimate.point.km_mg_per_L,
    )
    rises = formulas.sensitivity_at(dose_rate_mg_per_day=rates, vmax_mg_per_day=estimate.point.vmax_mg_per_day)
    return tuple(
        Forecast(
            rate_mg_per_day=float(rates[i]),
            steady=levels[i],
            total=scaled(levels[i], scale.total_factor),
            free=scaled(levels[i], scale.free_fraction),
            below=_chance(chances["below"][i]),
            within=_chance(1.0 - _chance(chances["below"][i]) - _chance(chances["above"][i])),
            above=_chance(chances["above"][i]),
            above_critical=_chance(chances["critical"][i]),
            no_steady_state=_chance(chances["none"][i]),
            settle_days=settle[i],
            percent_per_percent=float(rises[i]),
            point_mg_per_L=float(points[i]),
        )
        for i in range(len(rates))
    )


def _chance(value: float) -> float:
    # sums of weights miss 0 and 1 by a few parts in 1e16
    return float(min(max(round(float(value), 12), 0.0), 1.0))


def bands(values: Floats, weights: Floats) -> tuple[Band, ...]:
    """Median and 90 % interval of every row of draws; a bound among draws without a steady state is +inf."""
    if np.ptp(weights) > 1e-12:
        return tuple(band(row, weights) for row in values)
    ordered = np.sort(values, axis=1)
    n = values.shape[1]
    finite = np.isfinite(ordered).sum(axis=1)
    found = []
    for p in (0.5, 0.05, 0.95):
        place = np.clip(p * n - 0.5, 0, n - 1)
        low = int(place)
        high = min(low + 1, n - 1)
        # as `weighted_quantile`: between the mid-points of neighbours, no steady state past the last finite one
        last = np.maximum(finite - 1, 0)
        rows = np.arange(len(values))
        a, b = ordered[rows, np.minimum(low, last)], ordered[rows, np.minimum(high, last)]
        never = ((place > last) & (finite < n)) | (finite == 0)
        a, b = np.where(never, 0.0, a), np.where(never, 0.0, b)
        found.append(np.where(never, np.inf, a + (b - a) * (place - low)))
    return tuple(Band(float(m), float(a), float(b)) for m, a, b in zip(*found, strict=True))


@dataclass(frozen=True)
class Fewer:
    """An estimate with fewer draws, of equal weight, and which of the whole they are."""

    estimate: Estimate
    chosen: NDArray[np.intp]


def fewer_draws(estimate: Estimate, most: int) -> Fewer:
    """At most so many draws of an estimate, always the same ones; resampled where the weights differ.

    They are picked in random order: every n-th point of a Sobol sequence would not be a fair sample.
    """
    n = len(estimate.weights)
    if n <= most:
        return Fewer(estimate, np.arange(n))
    random = np.random.default_rng(_SEED)
    if np.ptp(estimate.weights) <= 1e-12:
        chosen = np.sort(random.permutation(n)[:most])
    else:
        edges = (np.arange(most) + random.random()) / most
        chosen = np.minimum(np.searchsorted(np.cumsum(estimate.weights), edges), n - 1)
    volume = estimate.volume_L
    return Fewer(
        replace(
            estimate,
            vmax_mg_per_day=estimate.vmax_mg_per_day[chosen],
            km_mg_per_L=estimate.km_mg_per_L[chosen],
            volume_L=None if volume is None else volume[chosen],
            weights=np.full(most, 1.0 / most),
        ),
        chosen,
    )


def draws_of(values: ArrayLike, few: Fewer) -> Floats:
    """A level per draw of the whole estimate, or per fewer draw, or one for all, at the fewer draws."""
    given = np.asarray(values, dtype=np.float64)
    size = len(few.estimate.weights)
    if given.ndim == 0 or given.shape == (size,):
        return np.array(np.broadcast_to(given, (size,)))
    return given[few.chosen]


@dataclass(frozen=True)
class TwoLines:
    """One estimate twice: for the past intake carried on (central) and for every dose taken (taken)."""

    central: Estimate
    taken: Estimate


def two_lines(estimate: Estimate, doses_missed: float, *, counted: bool) -> TwoLines:
    """The estimate for doses partly taken, as in the past, and for doses all taken.

        taking a share f of the doses:  Css = Km f R / (Vmax - f R) = Km R / (Vmax/f - R)

    A level on a dose that was partly taken makes elimination look faster than it is. doses_missed: 1 - f, share of the
    recorded doses taken to be missed, 0 to under 1. counted: True where the estimate already reckons with it (its Vmax
    is the true one, and Vmax and volume are divided by f for the central line); False where it takes every recorded
    dose as given (its Vmax is the apparent one, and is multiplied by f for the safety line; the volume then comes from
    the weight and stays). Derived from the rate law.
    """
    if doses_missed == 0:
        return TwoLines(estimate, estimate)
    f = 1.0 - doses_missed
    if counted:
        return TwoLines(_scaled_elimination(estimate, 1.0 / f, volume=1.0 / f), estimate)
    return TwoLines(estimate, _scaled_elimination(estimate, f, volume=1.0))


def _scaled_elimination(estimate: Estimate, vmax: float, *, volume: float) -> Estimate:
    summary = {**estimate.summary, "vmax_mg_per_day": scaled(estimate.summary["vmax_mg_per_day"], vmax)}
    point = replace(estimate.point, vmax_mg_per_day=estimate.point.vmax_mg_per_day * vmax)
    if estimate.volume_L is not None and volume != 1.0:
        summary["volume_L"] = scaled(summary["volume_L"], volume)
        if point.volume_L is not None:
            point = replace(point, volume_L=point.volume_L * volume)
    return replace(
        estimate,
        vmax_mg_per_day=estimate.vmax_mg_per_day * vmax,
        volume_L=None if estimate.volume_L is None else estimate.volume_L * volume,
        point=point,
        summary=summary,
    )


def levels_on_days(
    estimate: Estimate, rates_mg_per_day: Sequence[float], days: Sequence[float], present_mg_per_L: ArrayLike
) -> tuple[tuple[Band, ...], ...]:
    """Level (average rate) on each of some days from now, for each dose rate; from today's level.

    Needs a volume. One tuple of bands per rate, one band per day.
    """
    few = fewer_draws(estimate, TIME_DRAWS)
    present = draws_of(present_mg_per_L, few)
    rates, when = np.asarray(rates_mg_per_day, dtype=np.float64), np.asarray(days, dtype=np.float64)
    course = formulas.level_after(
        time_day=when[None, :, None],
        start_mg_per_L=present,
        dose_rate_mg_per_day=rates[:, None, None],
        vmax_mg_per_day=few.estimate.vmax_mg_per_day,
        km_mg_per_L=few.estimate.km_mg_per_L,
        volume_L=_volume(few.estimate),
    )
    return tuple(bands(course[i], few.estimate.weights) for i in range(len(rates)))


def _volume(estimate: Estimate) -> Floats:
    assert estimate.volume_L is not None, "times need a volume"
    return estimate.volume_L


def scaled(levels: Band, factor: float) -> Band:
    """A band on another scale; "no steady state" stays what it is."""
    return Band(levels.median * factor, levels.low * factor, levels.high * factor)


def rate_for_level(estimate: Estimate, level_mg_per_L: float) -> Band:
    """Dose rate of active drug (mg/day) that holds a level, with its 90 % interval: R = Vmax C / (Km + C)."""
    rates = formulas.dose_rate_for_level(
        level_mg_per_L=level_mg_per_L,
        vmax_mg_per_day=estimate.vmax_mg_per_day,
        km_mg_per_L=estimate.km_mg_per_L,
    )
    return band(np.asarray(rates, dtype=np.float64), estimate.weights)
