"""Whether a department's patients sit off the population in use; a suggestion, never applied by itself.

Each patient's mean and covariance of (log Vmax, log Km), with what the population said taken out, is taken as
a measurement of where that patient lies; the mean shift and the spreads are those that make all of them
together most likely (maximum likelihood of a normal population; intervals from the curvature at the top). Only
patients with two or more levels are placed. The correlation of the two stays the population's own: few levels per
patient say next to nothing about it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pkcalc.backtest.accuracy import FEWEST_PATIENTS, Share
from pkcalc.backtest.outlook import Row

Floats = NDArray[np.float64]

#: Logs of the spreads that are looked through; at an end, and where an interval would reach further than the last
#: either way (a factor of 12), there is no interval to tell.
_LEAST, _MOST, _WIDEST = -5.0, 1.0, 2.5

#: Normal quantile of a chance of 2.5 % over that of 5 %, both ends counted: two questions are asked (Bonferroni).
_TOGETHER = 2.241403 / 1.959964


@dataclass(frozen=True)
class Hint:
    """One population against the patients it was used for.

    vmax_ratio, km_ratio: geometric mean of these patients over the population's. vmax_log_sd, km_log_sd:
    spread between them, beside the population's own. differs: what lies off with its interval.
    """

    population: str
    patients: int
    vmax_ratio: Share
    km_ratio: Share
    vmax_log_sd: Share
    km_log_sd: Share
    prior_vmax_log_sd: float
    prior_km_log_sd: float

    @property
    def off(self) -> tuple[str, ...]:
        """Of the two means, those whose interval does not hold 1, widened so that both hold together 19 times in 20."""
        return tuple(name for name, s in (("Vmax", self.vmax_ratio), ("Km", self.km_ratio)) if _off(s))


def _off(ratio: Share) -> bool:
    if ratio.low is None or ratio.high is None:
        return False
    return abs(math.log(ratio.value)) > _TOGETHER * 0.5 * math.log(ratio.high / ratio.low)


def refit(population: str, rows: Sequence[Row]) -> Hint | None:
    """The hint for one population; None with too few patients, or where the likelihood has no clear top."""
    if len(rows) < FEWEST_PATIENTS:
        return None
    first = rows[0]
    sd_v, sd_k, rho = first.prior_sd_vmax or 0.0, first.prior_sd_km or 0.0, first.prior_correlation or 0.0
    # a population may change with the patient (a modifier); only those that share the first one's spreads count
    same = [r for r in rows if (r.prior_sd_vmax, r.prior_sd_km, r.prior_correlation) == (sd_v, sd_k, rho)]
    if len(same) < FEWEST_PATIENTS:
        return None
    mean = np.array([[r.log_vmax, r.log_km] for r in same], dtype=np.float64)
    cov = np.array([[[r.var_vmax, r.cov_vmax_km], [r.cov_vmax_km, r.var_km]] for r in same], dtype=np.float64)
    prior_precision = np.linalg.inv(_matrix(sd_v, sd_k, rho))
    precision = np.linalg.inv(cov)
    told = precision @ mean[:, :, None]
    gained = _at_least_nothing(precision - prior_precision)

    from scipy.optimize import minimize
    from scipy.special import stdtrit

    def loss(x: Floats) -> float:
        return -_log_likelihood(x, rho, told, gained)

    start = np.array([0.0, 0.0, math.log(sd_v), math.log(sd_k)])
    found = minimize(loss, start, method="L-BFGS-B", bounds=[(-2, 2), (-2, 2), (_LEAST, _MOST), (_LEAST, _MOST)])
    curvature = _curvature(loss, found.x)
    try:
        variance = np.diag(np.linalg.inv(curvature))
    except np.linalg.LinAlgError:
        return None
    if not found.success or np.any(variance <= 0):
        return None

    def ratio(i: int) -> Share:
        half = float(stdtrit(len(same) - 1, 0.975)) * math.sqrt(variance[i])
        if half > _WIDEST or (i >= 2 and not _LEAST < found.x[i] < _MOST):
            return Share(math.exp(found.x[i]), None, None)
        return Share(*(math.exp(v) for v in (found.x[i], found.x[i] - half, found.x[i] + half)))

    return Hint(
        population,
        len(same),
        ratio(0),
        ratio(1),
        ratio(2),
        ratio(3),
        sd_v,
        sd_k,
    )


def _matrix(sd_v: float, sd_k: float, rho: float) -> Floats:
    return np.array([[sd_v**2, rho * sd_v * sd_k], [rho * sd_v * sd_k, sd_k**2]])


def _at_least_nothing(gained: Floats) -> Floats:
    """What the levels add to the population's precision is never negative but for the noise of the draws."""
    values, vectors = np.linalg.eigh(gained)
    kept: Floats = (vectors * np.maximum(values, 0.0)[:, None, :]) @ np.swapaxes(vectors, 1, 2)
    return kept


def _log_likelihood(x: Floats, rho: float, told: Floats, gained: Floats) -> float:
    """Sum over patients of log of the integral of N(z; m, W) exp(-z'Gz/2 + b'z), up to a constant."""
    w = _matrix(math.exp(x[2]), math.exp(x[3]), rho)
    inverse = np.linalg.inv(w)
    m = x[:2]
    total = gained + inverse
    b = told[:, :, 0] + inverse @ m
    solved = np.linalg.solve(total, b[:, :, None])[:, :, 0]
    quadratic = np.sum(b * solved, axis=1) - float(m @ inverse @ m)
    return float(0.5 * np.sum(quadratic - np.linalg.slogdet(total)[1] - np.linalg.slogdet(w)[1]))


def _curvature(loss: object, x: Floats, step: float = 1e-3) -> Floats:
    n = len(x)
    found = np.zeros((n, n))
    for i in range(n):
        for j in range(i, n):
            value = 0.0
            for a, b, sign in ((1, 1, 1), (1, -1, -1), (-1, 1, -1), (-1, -1, 1)):
                at = x.copy()
                at[i] += a * step
                at[j] += b * step
                value += sign * loss(at)  # type: ignore[operator]
            found[i, j] = found[j, i] = value / (4 * step**2)
    return found
