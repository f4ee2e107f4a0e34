"""What separates a reported level from the level the record implies: assay, everyday variation, intake.

On the log scale, for levels j and k and one choice of (Vmax, kappa):

    S_jk = [j = k] (assay_j^2 + day_j^2 + extra_j^2) + sum over doses i of G_ji G_ki v_i + H_j H_k

G_ji is the rise of ln level j per fractional rise of dose i, v_i the variance of that fraction where a share
of the doses is missed unseen, and H_j what a better or worse habit does to level j (`intake`): so the same
missed dose moves a level little where elimination is far from saturated and much where it is near, and levels
that share doses share the error.

One level may be wrong altogether: a mixture over "none" and "this one's spread is `wrong_level_factor` times
as wide", which keeps every term Gaussian."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from pkcalc.errors import CaseError, Problem
from pkcalc.units import show_number

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class LevelData:
    """One level for the estimate, on the working basis.

    time_day: on the clock of the record. level_mg_per_L: the level, or the limit where it is censored.
    assay_cv, day_cv: fractions. floor_mg_per_L: the assay's additive part. extra_log_sd: anything else, for
    instance of the binding correction. censored: "below" or "above" the limit given as level_mg_per_L.
    index: position in the case (0 for the first).
    """

    time_day: float
    level_mg_per_L: float
    assay_cv: float
    floor_mg_per_L: float = 0.0
    day_cv: float = 0.0
    extra_log_sd: float = 0.0
    censored: Literal["below", "above"] | None = None
    index: int = 0

    def __post_init__(self) -> None:
        name = f"Level {self.index + 1}"
        found = []
        if not math.isfinite(self.time_day):
            found.append(
                Problem(
                    f"{name}, time",
                    f"{self.time_day} was given",
                    "a time in days",
                    "Give the time of the draw",
                )
            )
        if not (math.isfinite(self.level_mg_per_L) and self.level_mg_per_L > 0):
            found.append(
                Problem(
                    name,
                    f"{self.level_mg_per_L:g} mg/L was given",
                    "more than 0 mg/L",
                    "Enter a level below the limit of quantification as such, with that limit",
                )
            )
        for what, value in (
            ("assay spread", self.assay_cv),
            ("assay floor", self.floor_mg_per_L),
            ("everyday variation", self.day_cv),
            ("extra spread", self.extra_log_sd),
        ):
            if not (math.isfinite(value) and value >= 0):
                found.append(
                    Problem(f"{name}, {what}", f"{value:g} was given", "0 or more", "Check the assay's settings")
                )
        if not found and self.own_variance <= 0:
            found.append(
                Problem(
                    f"{name}, spread",
                    "0 was given for all of its parts",
                    "more than 0",
                    "Give the assay's coefficient of variation",
                )
            )
        if found:
            raise CaseError(found)

    @property
    def own_variance(self) -> float:
        """Variance of the log of this level that it shares with no other: assay, floor, everyday, extra."""
        return (
            math.log1p(self.assay_cv**2)
            + math.log1p((self.floor_mg_per_L / self.level_mg_per_L) ** 2)
            + math.log1p(self.day_cv**2)
            + self.extra_log_sd**2
        )


@dataclass(frozen=True)
class RecordSpread:
    """How far the record is believed, and how often a level is wrong altogether.

    doses_differing: share of doses that differ from the record unseen (0: every dose was observed), either
    one figure or pairs (from day, share) in order, each holding until the next (a day before the first pair
    takes the first). wrong_level_chance: chance that a given level is wrong (mixed up, mistimed,
    contaminated). wrong_level_factor: how many times wider the spread of a wrong level is."""

    doses_differing: float | tuple[tuple[float, float], ...]
    wrong_level_chance: float = 0.02
    wrong_level_factor: float = 4.0

    def __post_init__(self) -> None:
        found = []
        shares = self._pairs()
        if not shares or any(not 0 <= share <= 0.5 for _, share in shares):
            worst = max((share for _, share in shares), default=math.nan)
            found.append(
                Problem(
                    "Doses missed unseen",
                    f"{100 * worst:g} % was given" if shares else "nothing was given",
                    "0 to 50 %, both included",
                    "A record that is wrong more often than that says nothing: observe dosing first",
                )
            )
        if any(b[0] <= a[0] for a, b in pairwise(shares)):
            found.append(
                Problem(
                    "Doses missed unseen",
                    "the periods are not in order",
                    "each period begins after the one before",
                    "Sort the periods by their first day",
                )
            )
        if not 0 <= self.wrong_level_chance <= 0.2:
            found.append(
                Problem(
                    "Chance of a wrong level",
                    f"{100 * self.wrong_level_chance:g} % was given",
                    "0 to 20 %, both included",
                    "Check the setting",
                )
            )
        if not (math.isfinite(self.wrong_level_factor) and self.wrong_level_factor >= 1):
            found.append(
                Problem(
                    "Spread of a wrong level",
                    f"{self.wrong_level_factor:g} times was given",
                    "1 time or more",
                    "Check the setting",
                )
            )
        if found:
            raise CaseError(found)

    def _pairs(self) -> tuple[tuple[float, float], ...]:
        if isinstance(self.doses_differing, tuple):
            return self.doses_differing
        return ((-math.inf, self.doses_differing),)

    def share_at(self, day: float) -> float:
        """Share of doses that differ from the record on a day."""
        pairs = self._pairs()
        return [share for start, share in pairs if start <= day or start == pairs[0][0]][-1]

    @property
    def words(self) -> str:
        """What is assumed, for the note."""
        shares = sorted({share for _, share in self._pairs()})
        if shares == [0.0]:
            return "takes every dose as recorded (observed dosing)"
        if len(shares) == 1:
            return f"assumes that about {show_number(100 * shares[0], 2)} % of doses were missed unseen"
        least, most = show_number(100 * shares[0], 2), show_number(100 * shares[-1], 2)
        return f"assumes that between {least} and {most} % of doses were missed unseen, depending on who gave them"


@dataclass(frozen=True)
class Components:
    """The log level of the volume given (Vmax, kappa) as a mixture of normals, at every node.

    u = log V - l0. log_weight: log of prior weight times likelihood of each part, shape (nodes, parts); its
    log-sum over parts is the log likelihood of the node. mean, variance: of u, same shape.
    """

    log_weight: Floats
    mean: Floats
    variance: Floats

    @property
    def log_total(self) -> Floats:
        return logsumexp(self.log_weight)


def logsumexp(values: Floats) -> Floats:
    """log of the sum of exponentials along the last axis."""
    top = np.max(values, axis=-1, keepdims=True)
    top = np.where(np.isfinite(top), top, 0.0)
    with np.errstate(divide="ignore"):
        summed: Floats = np.log(np.sum(np.exp(values - top), axis=-1)) + top[..., 0]
    return summed


def covariance(own: Floats, gain: Floats, intake_variance: Floats) -> Floats:
    """S at every node: shape (nodes, m, m). own: (m,); gain: (nodes, m, groups of doses)."""
    scaled = gain * np.sqrt(intake_variance)
    shared: Floats = scaled @ scaled.transpose(0, 2, 1)
    m = len(own)
    shared[:, np.arange(m), np.arange(m)] += own
    return shared


def part_weights(m: int, spread: RecordSpread) -> tuple[Floats, Floats]:
    """Log prior weights of the parts (none wrong, each wrong alone) and the factor on the variance of a wrong
    one."""
    p = spread.wrong_level_chance
    if m == 0 or p == 0.0:
        return np.zeros(1), np.zeros(0)
    weights = np.array([1 - p] + [p] * m)
    return np.log(weights / weights.sum()), np.full(m, spread.wrong_level_factor**2 - 1.0)


def gaussian_parts(residual: Floats, cov: Floats, volume_variance: float, spread: RecordSpread) -> Components:
    """Integrate the log volume out analytically for every part of the mixture, no level censored.

    residual: log X_j - log y_j - l0, shape (nodes, m); cov: S, shape (nodes, m, m); volume_variance: of log V
    given (Vmax, kappa) under the prior.

        P = 1/s2 + 1'S^-1 1     mu = 1'S^-1 r / P     -2 log L = r'S^-1 r - P mu^2 + log|S| + log(P s2)

    A wrong level adds (f^2 - 1) S_jj to its own variance: a change of rank one, so S is inverted once per
    node."""
    nodes, m = residual.shape
    log_prior, extra = part_weights(m, spread)
    if m == 0:
        return Components(np.zeros((nodes, 1)), np.zeros((nodes, 1)), np.full((nodes, 1), volume_variance))
    inverse = np.linalg.inv(cov)
    _, log_det = np.linalg.slogdet(cov)
    g = np.einsum("njk,nk->nj", inverse, residual)
    h = inverse.sum(axis=2)
    q0, b0, p0 = np.sum(g * residual, axis=1), g.sum(axis=1), h.sum(axis=1)
    q, b, p, d = q0[:, None], b0[:, None], p0[:, None], log_det[:, None]
    if len(extra):
        diagonal = np.arange(m)
        grown = extra * cov[:, diagonal, diagonal]
        alone = inverse[:, diagonal, diagonal]
        k = grown / (1.0 + grown * alone)
        q = np.concatenate([q, q - k * g * g], axis=1)
        b = np.concatenate([b, b - k * g * h], axis=1)
        p = np.concatenate([p, p - k * h * h], axis=1)
        d = np.concatenate([d, d + np.log1p(grown * alone)], axis=1)
    precision = 1.0 / volume_variance + p
    mean = b / precision
    log_like = -0.5 * (q - precision * mean * mean + d + np.log(precision * volume_variance))
    return Components(log_prior + log_like - 0.5 * m * math.log(2 * math.pi), mean, 1.0 / precision)


#: Points over the log volume on which the chance of the censored levels is taken, and the width of each as a
#: share of the spread they cover (narrow kernels on a fine grid stand for the smooth density between them).
CENSORED_POINTS = 49
_REACH, _KERNEL = 5.5, 0.12


def censored_parts(
    residual: Floats,
    cov: Floats,
    volume_variance: float,
    spread: RecordSpread,
    censored: Sequence[Literal["below", "above"] | None],
) -> Components:
    """As `gaussian_parts`, with the conditional chance of the censored levels given the measured ones.

    For every part the measured levels give u a normal density; on points over it the chance of the censored
    ones, given u and the measured levels, is a normal probability (several at once: one after the other, on
    fixed points). Each point is returned as a part of its own with a narrow normal round it."""
    from scipy.special import log_ndtr

    nodes, m = residual.shape
    log_prior, extra = part_weights(m, spread)
    hidden = [j for j in range(m) if censored[j] is not None]
    seen = [j for j in range(m) if censored[j] is None]
    sign = np.array([1.0 if censored[j] == "below" else -1.0 for j in hidden])
    spots = np.linspace(-_REACH, _REACH, CENSORED_POINTS)
    spot_weight = np.exp(-0.5 * spots**2 / (1 - _KERNEL**2))
    log_spot = np.log(spot_weight / spot_weight.sum())
    log_parts, means, variances = [], [], []
    for part in range(len(log_prior)):
        s = cov
        if part:
            s = cov.copy()
            s[:, part - 1, part - 1] *= 1.0 + extra[part - 1]
        clean = RecordSpread(spread.doses_differing, 0.0)
        base = gaussian_parts(residual[:, seen], s[np.ix_(range(nodes), seen, seen)], volume_variance, clean)
        sd = np.sqrt(base.variance)
        u = base.mean + sd * spots
        # error of every level if the volume is u: log y - log C = u - r
        error = u[:, :, None] - residual[:, None, :]
        if seen:
            gain = np.linalg.solve(s[np.ix_(range(nodes), seen, seen)], s[np.ix_(range(nodes), seen, hidden)])
            centre = np.einsum("nuo,noh->nuh", error[:, :, seen], gain)
            left = s[np.ix_(range(nodes), hidden, hidden)] - np.einsum(
                "noh,nok->nhk", s[np.ix_(range(nodes), seen, hidden)], gain
            )
        else:
            centre = np.zeros((nodes, len(spots), len(hidden)))
            left = s[np.ix_(range(nodes), hidden, hidden)]
        # "below": true error of the level is less than that of the limit; "above": the other way round
        bound = sign * (error[:, :, hidden] - centre)
        factor = np.linalg.cholesky(left * np.outer(sign, sign))
        if len(hidden) == 1:
            log_chance = log_ndtr(bound[:, :, 0] / factor[:, None, 0, 0])
        else:
            log_chance = _log_orthant(bound, factor)
        log_parts.append(log_prior[part] + base.log_weight + log_spot + log_chance)
        means.append(u)
        variances.append(np.broadcast_to(base.variance * _KERNEL**2, u.shape))
    return Components(np.concatenate(log_parts, 1), np.concatenate(means, 1), np.concatenate(variances, 1))


#: Fixed points for the joint chance of several censored levels.
_ORTHANT_POINTS = 64


def _log_orthant(bound: Floats, factor: Floats) -> Floats:
    """Log chance that all errors lie under their bounds: the levels one after the other on fixed points."""
    from scipy.special import ndtr, ndtri

    count = bound.shape[2]
    # additive recurrence on the generalised golden ratio: even points in any dimension, no random numbers
    ratio = 2.0
    for _ in range(60):
        ratio = (1 + ratio) ** (1 / count)
    points = (0.5 + np.outer(np.arange(_ORTHANT_POINTS), ratio ** -np.arange(1.0, count))) % 1.0
    total = np.zeros(bound.shape[:2])
    for point in points:
        chance = np.ones(bound.shape[:2])
        values: list[Floats] = []
        for i in range(count):
            shift = sum((factor[:, None, i, k] * values[k] for k in range(i)), np.zeros(bound.shape[:2]))
            part = ndtr((bound[:, :, i] - shift) / factor[:, None, i, i])
            chance = chance * part
            if i + 1 < count:
                values.append(ndtri(np.clip(part * point[i], 1e-300, 1 - 1e-16)))
        total += chance
    with np.errstate(divide="ignore"):
        logged: Floats = np.log(total / len(points))
    return logged
