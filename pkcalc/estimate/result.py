"""The one shape that every method of estimation returns."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Band:
    """Median and the 5 % and 95 % points (a 90 % interval). +inf stands for "no steady state"."""

    median: float
    low: float
    high: float


@dataclass(frozen=True)
class Point:
    """One (Vmax, Km, V) triple and what it is; published answers are compared with this one."""

    vmax_mg_per_day: float
    km_mg_per_L: float
    volume_L: float | None
    kind: Literal["closed form", "fitted optimum", "posterior median", "median of crossings", "line"]


@dataclass(frozen=True)
class LevelFit:
    """How one level agrees with the estimate. `level` is its position in the case (0 for the first)."""

    level: int
    observed_mg_per_L: float
    predicted: Band
    standardised_residual: float


@dataclass(frozen=True)
class Estimate:
    """Weighted draws of (Vmax, Km, V) with their point, summary, method and diagnostics.

    vmax_mg_per_day, km_mg_per_L: shape (n,), all positive. volume_L: shape (n,), or None where no volume
    is known (no weight). weights: shape (n,), sum 1. summary: "vmax_mg_per_day", "km_mg_per_L", and
    "volume_L" where known. correlation: between log Vmax and log Km of the draws. rejected: share of
    inadmissible draws; the intervals are conditional on the rest. diagnostics: plain numbers and words,
    named, for the note and JSON. `trusted` is False where the method's own certificate failed, and
    `distrust` then says why.
    """

    method: str
    vmax_mg_per_day: Floats
    km_mg_per_L: Floats
    volume_L: Floats | None
    weights: Floats
    point: Point
    summary: Mapping[str, Band]
    correlation: float
    volume_from: Literal["population", "record", "none"]
    rejected: float = 0.0
    fit: tuple[LevelFit, ...] = ()
    diagnostics: Mapping[str, object] = field(default_factory=dict)
    trusted: bool = True
    distrust: str = ""


def weighted_quantile(values: Floats, weights: Floats, probabilities: Floats) -> Floats:
    """Quantiles of weighted draws by inversion of the mid-point distribution function.

    values may hold +inf (no steady state); a quantile that falls among them is +inf.
    """
    order = np.argsort(values, kind="stable")
    sorted_values, sorted_weights = values[order], weights[order]
    mid = np.cumsum(sorted_weights) - 0.5 * sorted_weights
    finite = np.isfinite(sorted_values)
    if not finite.any():
        return np.full(len(probabilities), np.inf)
    last = mid[finite][-1]  # past it a quantile lies between a level and no steady state: no level is named
    result = np.interp(probabilities, mid[finite], sorted_values[finite])
    return np.where((probabilities > last) & ~finite.all(), np.inf, result)


def band(values: Floats, weights: Floats) -> Band:
    """Median with 90 % interval of weighted draws."""
    low, median, high = weighted_quantile(values, weights, np.array([0.05, 0.5, 0.95]))
    return Band(median=float(median), low=float(low), high=float(high))


def log_correlation(first: Floats, second: Floats, weights: Floats) -> float:
    """Weighted correlation of the logarithms of two sets of draws."""
    a, b = np.log(first), np.log(second)
    a = a - np.sum(weights * a)
    b = b - np.sum(weights * b)
    spread = float(np.sqrt(np.sum(weights * a * a) * np.sum(weights * b * b)))
    return float(np.sum(weights * a * b) / spread) if spread > 0 else 0.0
