"""Least squares for the saturable curve, both ways round, with analytic derivatives and profile likelihood.

`level_on_rate` is the clinic's: doses are known, levels carry the error, and the error is a share of the
level. `rate_on_level` is the laboratory's: the level is known, the rate carries an error of one size; it is
the form in which certified data sets and textbooks give their answers.

In both, one of the two parameters enters linearly once the other is held, so the search is along one line
and cannot be trapped by a poor starting value.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from statistics import NormalDist

import numpy as np

from pkcalc.errors import CannotEstimate
from pkcalc.estimate.result import Floats

#: One searched parameter in, (sum of squares, best other parameter, its curvature) out; arrays of one shape.
_Search = Callable[[Floats], tuple[Floats, Floats, Floats]]

#: How far from the optimum, in natural logarithms, a limit is looked for before it counts as open.
_FARTHEST = 30.0
_CELLS = 32
#: Relative difference below which two doses, or two levels, are one.
SAME = 1e-9


@dataclass(frozen=True)
class CurveFit:
    """The least-squares optimum. Units are those of the rates and levels that were given.

    vmax, km: the optimum. se_vmax, se_km, correlation: from the curvature at the optimum (delta method); they
    mislead near saturation, where `profile_limits` is to be used. sum_of_squares: of the weighted residuals.
    sigma: residual standard deviation (`rate_on_level`), or the ratio of the scatter seen to the spread
    stated (`level_on_rate`). residuals: weighted, shape (n,). leverage: share of its own residual that each
    point absorbs, shape (n,).
    """

    vmax: float
    km: float
    se_vmax: float
    se_km: float
    correlation: float
    sum_of_squares: float
    sigma: float
    degrees_of_freedom: int
    residuals: Floats
    leverage: Floats


@dataclass(frozen=True)
class Limits:
    """Confidence limits by profile likelihood; `math.inf` where the data set no upper limit."""

    vmax_low: float
    vmax_high: float
    km_low: float
    km_high: float
    confidence: float


# --- rate on level ------------------------------------------------------------------------------------------


def rate_on_level(*, level: Floats, rate: Floats, weights: Floats | None = None) -> CurveFit:
    """Least squares of the rate on the level: rate = Vmax level / (Km + level), errors in the rate.

    level, rate: positive, shape (n,), n >= 3. weights: of the squared residuals, shape (n,), default 1.
    Raises CannotEstimate where no saturable curve is the best one.
    Source: Wilkinson 1961; Bates & Watts 1988 (Gauss-Newton with the analytic Jacobian).
    """
    w = np.ones_like(rate) if weights is None else weights
    _needs(len(rate) >= 3 and not all_one(level), "fewer than three points, or all at one level")
    search = _rate_search(level, rate, w)
    start = _best_on_grid(search, float(np.log(level.min())) - 8.0, float(np.log(level.max())) + 10.0)
    if start is None:
        raise CannotEstimate(
            "The points do not bend as a saturable curve does.",
            "A straight line or a level one fits them best, so Vmax and Km cannot be told apart.",
            "Add points at lower and higher levels.",
        )
    km = float(np.exp(start))
    vmax = float(search(np.array([start]))[1][0])
    root_w = np.sqrt(w)
    last_size = np.inf
    for _ in range(200):
        slope = vmax * level / (km + level)
        jacobian = _rate_jacobian(level, vmax, km) * root_w[:, None]
        step = np.linalg.lstsq(jacobian, root_w * (rate - slope), rcond=None)[0]
        size = float(np.max(np.abs(step)))
        if size >= last_size and size < 1e-9:
            break
        last_size = size
        vmax, km = vmax * float(np.exp(step[0])), km * float(np.exp(step[1]))
        if size < 1e-16:
            break
    residuals = root_w * (rate - vmax * level / (km + level))
    jacobian = _rate_jacobian(level, vmax, km) * root_w[:, None]
    return _summarise(vmax, km, residuals, jacobian, known_spread=False)


def _rate_jacobian(level: Floats, vmax: float, km: float) -> Floats:
    """Derivatives of the rate by ln Vmax and ln Km: logarithms keep both columns of one size."""
    share = level / (km + level)
    return np.column_stack([vmax * share, -vmax * share * km / (km + level)])


def _rate_search(level: Floats, rate: Floats, w: Floats) -> _Search:
    def search(log_km: Floats) -> tuple[Floats, Floats, Floats]:
        share = level / (np.exp(log_km)[:, None] + level)
        curvature = np.sum(w * share * share, axis=1)
        vmax = np.sum(w * rate * share, axis=1) / curvature
        return np.sum(w * (rate - vmax[:, None] * share) ** 2, axis=1), vmax, curvature

    return search


def rate_profile_limits(
    *, level: Floats, rate: Floats, fit: CurveFit, confidence: float, weights: Floats | None = None
) -> Limits:
    """Profile-likelihood limits for `rate_on_level`, residual spread estimated from the fit (Student's t).

    The limits enclose every value for which the sum of squares, minimised over the other parameter, stays
    below its minimum times 1 + t^2/(n - 2). Source: Bates & Watts 1988, chapter 6.
    """
    from scipy.special import stdtrit  # only here: the clinic's path needs no Student's t

    w = np.ones_like(rate) if weights is None else weights
    t = float(stdtrit(fit.degrees_of_freedom, 0.5 + confidence / 2))
    target = fit.sum_of_squares * (1 + t * t / fit.degrees_of_freedom)
    search = _rate_search(level, rate, w)
    low, high = _searched_limits(search, float(np.log(fit.km)), target)
    v_low, v_high = _linear_limits(search, float(np.log(fit.km)), low, high, target)
    return Limits(max(v_low, 0.0), v_high, float(np.exp(low)), float(np.exp(high)), confidence)


# --- level on rate ------------------------------------------------------------------------------------------


def level_on_rate(*, rate_mg_per_day: Floats, level_mg_per_L: Floats, level_log_sd: Floats) -> CurveFit:
    """Weighted least squares on the level, C = Km R / (Vmax - R), each level with its own share of spread.

    The residual is ln(level seen / level predicted) divided by the level's log-sd: to first order the level's
    difference weighted by 1/(spread x level)^2, and exactly the likelihood of a lognormal spread. Vmax is
    searched as ln(Vmax / largest rate - 1), so every trial keeps Vmax above every dose that gave a steady
    level, however near saturation.

    rate_mg_per_day, level_mg_per_L, level_log_sd: positive, shape (n,), n >= 2 with two different rates.
    Raises CannotEstimate where the levels show no saturation.
    Source: formulas at steady state, Michaelis & Menten 1913; weighting by the error model is common
    practice.
    """
    _needs(not all_one(rate_mg_per_day), "all levels were taken on one daily dose")
    search = _level_search(rate_mg_per_day, level_mg_per_L, level_log_sd)
    start = _best_on_grid(search, -_FARTHEST, 16.0)
    if start is None:
        raise CannotEstimate(
            "The levels rise no more than in proportion to the dose.",
            "No saturation shows, so Vmax and Km cannot be told apart.",
            "Check doses taken, sampling times and units, or add a steady level on a higher dose.",
        )
    largest = float(rate_mg_per_day.max())
    gap = largest - rate_mg_per_day
    u = _newton(rate_mg_per_day, level_mg_per_L, level_log_sd, start)
    excess = largest * float(np.exp(u))
    headroom = gap + excess  # Vmax - R without the cancellation of a subtraction
    log_km = float(search(np.array([u]))[1][0])
    vmax, km = largest + excess, float(np.exp(log_km))
    residuals = (np.log(level_mg_per_L) - log_km - np.log(rate_mg_per_day / headroom)) / level_log_sd
    jacobian = np.column_stack([-vmax / headroom, np.ones_like(headroom)]) / level_log_sd[:, None]
    return _summarise(vmax, km, residuals, jacobian, known_spread=True)


def _level_search(rate: Floats, level: Floats, log_sd: Floats) -> _Search:
    largest = float(rate.max())
    gap, base = largest - rate, np.log(level) - np.log(rate)
    w = 1.0 / log_sd**2
    total = float(w.sum())

    def search(u: Floats) -> tuple[Floats, Floats, Floats]:
        ratio = base + np.log(gap + largest * np.exp(u)[:, None])
        log_km = ratio @ w / total
        return ((ratio - log_km[:, None]) ** 2) @ w, log_km, np.full(len(u), total)

    return search


def _newton(rate: Floats, level: Floats, log_sd: Floats, start: float) -> float:
    """Polish ln(Vmax / largest rate - 1) to the last digits; the grid cell around `start` brackets it."""
    largest = float(rate.max())
    gap, base, w = largest - rate, np.log(level) - np.log(rate), 1.0 / log_sd**2
    low, high, u = start - 0.2, start + 0.2, start
    for _ in range(60):
        excess = largest * np.exp(u)
        ratio, slope = base + np.log(gap + excess), excess / (gap + excess)
        residual = ratio - np.sum(w * ratio) / w.sum()
        lean = slope - np.sum(w * slope) / w.sum()
        first = float(np.sum(w * residual * lean))
        second = float(np.sum(w * (lean * lean + residual * slope * (1 - slope))))
        low, high = (u, high) if first < 0 else (low, u)
        step = -first / second if second > 0 else np.inf
        new = u + step if low < u + step < high else 0.5 * (low + high)
        if abs(new - u) <= 1e-15 * max(1.0, abs(u)):
            return float(new)
        u = new
    return float(u)


def level_profile_limits(
    *,
    rate_mg_per_day: Floats,
    level_mg_per_L: Floats,
    level_log_sd: Floats,
    fit: CurveFit,
    confidence: float,
    widened_by: float = 1.0,
) -> Limits:
    """Profile-likelihood limits for `level_on_rate`; the spread of the levels is known, not estimated.

    widened_by: factor on the stated spread, for levels that scatter more than was stated.
    The upper limits are `math.inf` where the levels do not exclude a straight proportion of level to dose.
    """
    z = NormalDist().inv_cdf(0.5 + confidence / 2) * widened_by
    target = fit.sum_of_squares + z * z
    search = _level_search(rate_mg_per_day, level_mg_per_L, level_log_sd)
    largest = float(rate_mg_per_day.max())
    u = float(np.log((fit.vmax - largest) / largest))
    low, high = _searched_limits(search, u, target)
    k_low, k_high = _linear_limits(search, u, low, high, target)
    v_low, v_high = (largest * (1.0 + float(np.exp(end))) for end in (low, high))
    return Limits(v_low, v_high, float(np.exp(k_low)), float(np.exp(k_high)), confidence)


def confidence_draws(
    *,
    rate_mg_per_day: Floats,
    level_mg_per_L: Floats,
    level_log_sd: Floats,
    fit: CurveFit,
    largest_vmax_mg_per_day: float,
    draws: int,
    widened_by: float = 1.0,
) -> tuple[Floats, Floats, float]:
    """Draws of (Vmax, Km) whose Vmax limits are the profile-likelihood limits at every confidence.

    The signed root of the rise of the sum of squares along the profile is taken as a standard normal; Km
    given Vmax is lognormal, exactly. Returns Vmax, Km (shape (draws,)) and the share of draws that would lie
    above `largest_vmax_mg_per_day` (no visible saturation): the draws are conditional on the rest.
    """
    search = _level_search(rate_mg_per_day, level_mg_per_L, level_log_sd)
    largest = float(rate_mg_per_day.max())
    centre = float(np.log((fit.vmax - largest) / largest))
    cap = float(np.log(largest_vmax_mg_per_day / largest - 1.0))
    floor, _ = _searched_limits(search, centre, fit.sum_of_squares + 36.0 * widened_by**2)
    below = np.linspace(max(floor, centre - _FARTHEST), centre, 2001)
    above = np.linspace(centre, cap, 2001)[1:]

    def rise(u: Floats) -> Floats:
        return np.asarray(np.sqrt(np.maximum(search(u)[0] - fit.sum_of_squares, 0.0)) / widened_by)

    # A second dip of the profile is bridged by its running maximum: the limit nearest the optimum counts.
    z_below = -np.maximum.accumulate(rise(below)[::-1])[::-1]
    z_above = np.maximum.accumulate(rise(above))
    normal = NormalDist()
    kept = normal.cdf(float(z_above[-1]))
    first, second = _golden_lattice(draws)
    quantile = np.vectorize(normal.inv_cdf, otypes=[float])
    u = np.interp(quantile(first * kept), np.concatenate([z_below, z_above]), np.concatenate([below, above]))
    _, log_km, curvature = search(u)
    km = np.exp(log_km + quantile(second) * widened_by / np.sqrt(curvature))
    return largest * (1.0 + np.exp(u)), km, 1.0 - kept


def _golden_lattice(count: int) -> tuple[Floats, Floats]:
    """Evenly spread points of the unit square, no randomness: i/n against multiples of the golden ratio."""
    i = np.arange(count, dtype=np.float64)
    return (i + 0.5) / count, np.mod(0.5 + i * 0.6180339887498949, 1.0)


# --- common to both -----------------------------------------------------------------------------------------


def all_one(values: Floats) -> bool:
    """Whether all values are the same but for rounding (salt factors leave a last digit behind)."""
    return bool(np.ptp(values) <= SAME * float(np.max(np.abs(values))))


def _needs(condition: bool, found: str) -> None:
    if not condition:
        raise CannotEstimate(
            f"A curve cannot be fitted: {found}.",
            "Two different doses with different levels are the least that determines Vmax and Km.",
            "Add a steady level on another dose.",
        )


def _best_on_grid(search: _Search, low: float, high: float) -> float | None:
    """The best of an even grid, or None where the sum of squares is least at an end."""
    grid = np.arange(low, high + 0.05, 0.1)
    squares = search(grid)[0]
    at = int(np.argmin(squares))
    at_an_end = at == 0 or at >= len(grid) - 2 or squares[at] >= squares[-1] * (1 - 1e-9)
    return None if at_an_end else float(grid[at])


def _summarise(vmax: float, km: float, residuals: Floats, jacobian: Floats, *, known_spread: bool) -> CurveFit:
    """Standard errors from the derivatives by ln Vmax and ln Km (first and second column)."""
    q, r = np.linalg.qr(jacobian)
    inverse = np.linalg.inv(r)
    covariance = inverse @ inverse.T
    degrees = len(residuals) - 2
    squares = float(residuals @ residuals)
    sigma = float(np.sqrt(squares / degrees)) if degrees > 0 else 0.0
    scale = 1.0 if known_spread else sigma
    spread = np.sqrt(np.diag(covariance))
    return CurveFit(
        vmax=vmax,
        km=km,
        se_vmax=vmax * float(spread[0]) * scale,
        se_km=km * float(spread[1]) * scale,
        correlation=float(covariance[0, 1] / (spread[0] * spread[1])),
        sum_of_squares=squares,
        sigma=sigma,
        degrees_of_freedom=degrees,
        residuals=residuals,
        leverage=np.sum(q * q, axis=1),
    )


def _searched_limits(search: _Search, centre: float, target: float) -> tuple[float, float]:
    """Where the sum of squares first reaches `target` on either side of the optimum; infinite where never."""
    ends = []
    for side in (-1.0, 1.0):
        inner, width = 0.0, 0.02
        while width <= _FARTHEST and float(search(np.array([centre + side * width]))[0][0]) < target:
            inner, width = width, width * 1.3
        if width > _FARTHEST:
            ends.append(side * np.inf)
            continue
        outer = width
        for _ in range(12):
            cells = np.linspace(inner, outer, _CELLS + 1)
            first = max(int(np.argmax(search(centre + side * cells)[0] >= target)), 1)
            inner, outer = float(cells[first - 1]), float(cells[first])
        ends.append(centre + side * 0.5 * (inner + outer))
    return float(ends[0]), float(ends[1])


def _linear_limits(search: _Search, centre: float, low: float, high: float, target: float) -> tuple[float, float]:
    """The extremes of the other parameter over all values of the searched one inside its limits."""
    ends = []
    start = (max(low, centre - _FARTHEST), min(high, centre + _FARTHEST))
    for side in (-1.0, 1.0):
        left, right, best, at_open_end = *start, 0.0, False
        for turn in range(14):
            grid = np.linspace(left, right, 401 if turn == 0 else _CELLS + 1)
            squares, other, curvature = search(grid)
            reach = side * other + np.sqrt(np.maximum(target - squares, 0.0) / curvature)
            at = int(np.argmax(reach))
            best = float(reach[at])
            if turn == 0:
                at_open_end = (at == len(grid) - 1 and np.isinf(high)) or (at == 0 and np.isinf(low))
            left, right = float(grid[max(at - 1, 0)]), float(grid[min(at + 1, len(grid) - 1)])
        ends.append(side * np.inf if at_open_end else side * best)
    return float(ends[0]), float(ends[1])
