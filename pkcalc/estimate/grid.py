"""A posterior of (log Vmax, log kappa) on a grid, with the log volume as a mixture of normals at every node.

A coarse grid over the prior finds where the mass is; a second one, laid in the whitened frame of that mass,
carries the answer. What changes slowly over a grid (the course of the amount) is calculated on fewer nodes and
interpolated; what changes fast (the density) at every node. Summaries come from the nodes without sampling;
equal-weight draws come from the nodes' conditional distributions along a Sobol sequence, so the same input
gives the same bits.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pkcalc.estimate.error_model import Components, logsumexp

Floats = NDArray[np.float64]

#: Nodes that carry weight: with fewer, moments of a grid are not trusted.
EFFECTIVE_NODES = 25.0

#: Mass allowed on the outermost ring of the final grid: a tail thinner than this moves no 5 or 95 % point by
#: 0.1 %.
EDGE_MASS = 1e-4

#: Nodes further out than this many times the reach are left out.
CORNER = 1.05

#: Log density, relative to the best, of a node that was left out.
NOWHERE = -1e15

#: A spline of a log density is clamped this far under its top: beyond, it only oscillates.
_CLAMP = 30.0


@dataclass(frozen=True)
class Frame:
    """An affine frame: (log Vmax, log kappa) = mean + root z, root lower triangular, so z1 alone carries log
    Vmax."""

    mean: Floats
    root: Floats

    @staticmethod
    def of(mean: Floats, cov: Floats) -> Frame:
        root: Floats = np.asarray(np.linalg.cholesky(cov), dtype=np.float64)
        return Frame(mean, root)

    def points(self, z1: Floats, z2: Floats) -> tuple[Floats, Floats]:
        """log Vmax and log kappa at z."""
        return self.mean[0] + self.root[0, 0] * z1, self.mean[1] + self.root[1, 0] * z1 + self.root[1, 1] * z2


@dataclass(frozen=True)
class Nodes:
    """What is known at every node: log density (not normalised) and the log volume's mixture there, shape
    (N,) and (N, parts); the course behind them: log amounts at the levels (N, m) and their covariance (N, m,
    m)."""

    log_density: Floats
    parts: Components
    log_amount: Floats
    cov: Floats


#: Evaluates the n x n nodes of an axis (used along both) in a frame, z1 along rows, flattened.
Density = Callable[[Frame, Floats], Nodes]


@dataclass(frozen=True)
class Quadrature:
    """Nodes of one grid. axis: z along both axes (n,); log_vmax, log_kappa, log_density: (n, n), z1 along
    rows; nodes: in the same order, flattened."""

    frame: Frame
    axis: Floats
    log_vmax: Floats
    log_kappa: Floats
    log_density: Floats
    radius: Floats
    nodes: Nodes

    @property
    def parts(self) -> Components:
        return self.nodes.parts

    @property
    def weights(self) -> Floats:
        """Normalised node weights, shape (n, n)."""
        w = np.exp(self.log_density - np.max(self.log_density))
        normalised: Floats = w / np.sum(w)
        return normalised

    @property
    def part_weights(self) -> Floats:
        """Normalised weights of node and part together, shape (n * n, parts)."""
        share = self.parts.log_weight - self.parts.log_total[:, None]
        return self.weights.reshape(-1, 1) * np.exp(share)

    @property
    def effective_nodes(self) -> float:
        return float(1.0 / np.sum(self.weights**2))

    @property
    def edge_mass(self) -> float:
        return float(np.sum(self.weights[self.radius > 0.93 * self.axis[-1]]))

    def moments(self) -> tuple[Floats, Floats]:
        """Mean and covariance of (log Vmax, log kappa)."""
        w = self.weights.ravel()
        points = np.stack([self.log_vmax.ravel(), self.log_kappa.ravel()])
        mean = points @ w
        off = points - mean[:, None]
        cov: Floats = (off * w) @ off.T
        return mean, cov


def lay(frame: Frame, *, reach: float, n: int, density: Density) -> Quadrature:
    """A grid of n x n nodes on +-reach in a frame; its corners, a disc's worth away, are left out."""
    axis = np.linspace(-reach, reach, n)
    a, k = square(frame, axis)
    radius = np.hypot(*np.meshgrid(axis, axis, indexing="ij"))
    nodes = density(frame, axis)
    log_density = np.where(radius <= CORNER * reach, nodes.log_density.reshape(n, n), NOWHERE)
    nodes = replace(nodes, log_density=log_density.ravel())
    return Quadrature(frame, axis, a.reshape(n, n), k.reshape(n, n), log_density, radius, nodes)


def square(frame: Frame, axis: Floats) -> tuple[Floats, Floats]:
    """log Vmax and log kappa of the nodes of an axis used along both, flattened, z1 along rows."""
    z1, z2 = np.meshgrid(axis, axis, indexing="ij")
    a, k = frame.points(z1, z2)
    return a.ravel(), k.ravel()


def refine(coarse: Floats, fine: Floats, values: Floats) -> Floats:
    """Values at the nodes of a coarse axis (used along both) at those of a finer one, by cubic splines.

    coarse: (c,); fine: (n,), within the coarse one's ends; values: (c * c, ...). Returns (n * n, ...).
    """
    from scipy.interpolate import CubicSpline

    c, n, rest = len(coarse), len(fine), values.shape[1:]
    along = CubicSpline(coarse, np.eye(c), axis=0)(fine)
    rows = (along @ values.reshape(c, -1)).reshape(n, c, -1)
    found: Floats = (along @ rows).reshape(n * n, *rest)
    return found


def scout(frame: Frame, density: Density, *, reach: float = 4.5, n: int = 36, tries: int = 8) -> Frame:
    """Find the frame of the mass: repeat on the inflated moments until enough nodes carry weight."""
    for _ in range(tries):
        q = lay(frame, reach=reach, n=n, density=density)
        mean, cov = q.moments()
        step = q.axis[1] - q.axis[0]
        inflated = cov + 0.5 * step**2 * frame.root @ frame.root.T
        if q.effective_nodes >= EFFECTIVE_NODES:
            return Frame.of(mean, cov)
        frame = Frame.of(mean, inflated)
    return frame


def settle(frame: Frame, density: Density, *, n: int, reach: float = 7.2, tries: int = 3) -> Quadrature:
    """The final grid; laid again on its own moments while its edge carries mass or too few nodes do."""
    q = lay(frame, reach=reach, n=n, density=density)
    for _ in range(tries - 1):
        if q.edge_mass <= EDGE_MASS and q.effective_nodes > EFFECTIVE_NODES:
            break
        mean, cov = q.moments()
        step = q.axis[1] - q.axis[0]
        if q.effective_nodes <= EFFECTIVE_NODES:
            cov = cov + 0.1 * step**2 * q.frame.root @ q.frame.root.T
        elif q.edge_mass > EDGE_MASS:
            # a bent tail: the moments are right, the reach in their units is not
            reach *= 1.2
        q = lay(Frame.of(mean, cov), reach=reach, n=n, density=density)
    return q


@dataclass(frozen=True)
class Marginal:
    """Distribution of log Vmax on a fine axis: from the spline of the log of the grid's marginal."""

    log_vmax: Floats
    cumulative: Floats

    def quantiles(self, probabilities: Floats) -> Floats:
        return np.interp(probabilities, self.cumulative, self.log_vmax)

    def chance_up_to(self, log_vmax: float) -> float:
        """Chance that log Vmax is at most a value."""
        return float(np.interp(log_vmax, self.log_vmax, self.cumulative, left=0.0, right=1.0))


def _refined(axis: Floats, log_values: Floats, factor: int) -> tuple[Floats, Floats]:
    """A log density on a finer axis (along the last axis of log_values), by a clamped cubic spline."""
    from scipy.interpolate import CubicSpline

    top = np.max(log_values, axis=-1, keepdims=True)
    clamped = np.maximum(log_values, top - _CLAMP)
    fine = np.linspace(axis[0], axis[-1], (len(axis) - 1) * factor + 1)
    return fine, CubicSpline(axis, clamped, axis=-1)(fine)


def _cumulated(log_values: Floats) -> Floats:
    """Normalised cumulative trapezoids along the last axis, beginning with 0."""
    p = np.exp(log_values - np.max(log_values, axis=-1, keepdims=True))
    out = np.zeros(p.shape)
    np.cumsum(0.5 * (p[..., 1:] + p[..., :-1]), axis=-1, out=out[..., 1:])
    normalised: Floats = out / out[..., -1:]
    return normalised


def vmax_marginal(q: Quadrature) -> Marginal:
    fine, values = _refined(q.axis, logsumexp(q.log_density), 16)
    return Marginal(q.frame.mean[0] + q.frame.root[0, 0] * fine, _cumulated(values))


def mixture_quantiles(weights: Floats, means: Floats, variances: Floats, probabilities: Sequence[float]) -> Floats:
    """Quantiles of a mixture of normals: Newton steps kept inside a shrinking bracket."""
    from scipy.special import ndtr

    keep = weights > 1e-10 * np.max(weights)
    w, m, s = weights[keep], means[keep], np.sqrt(variances[keep])
    w = w / np.sum(w)
    wanted = np.asarray(probabilities, dtype=np.float64)
    low = np.full(wanted.shape, float(np.min(m - 9 * s)))
    high = np.full(wanted.shape, float(np.max(m + 9 * s)))
    mean = float(np.sum(w * m))
    sd = math.sqrt(float(np.sum(w * ((m - mean) ** 2 + s**2))))
    x = np.clip(mean + sd * (2 * wanted - 1), low, high)
    for _ in range(80):
        z = (x[:, None] - m) / s
        error = ndtr(z) @ w - wanted
        slope = (np.exp(-0.5 * z * z) / s) @ w / math.sqrt(2 * math.pi)
        high = np.where(error > 0, np.minimum(high, x), high)
        low = np.where(error <= 0, np.maximum(low, x), low)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            newton = x - error / slope
        moved = np.where((newton > low) & (newton < high), newton, 0.5 * (low + high))
        done = np.max(np.abs(moved - x)) < 1e-10 * (1 + sd)
        x = moved
        if done:
            break
    found: Floats = x
    return found


def sobol(n: int) -> Floats:
    """The first n points of the three-dimensional Sobol sequence (Sobol 1967; Joe & Kuo 2008 direction
    numbers), moved by half a step so that none lies on an edge. Shape (n, 3)."""
    bits = max(1, math.ceil(math.log2(n))) if n > 1 else 1
    second, third = [1], [1, 3]
    while len(second) < bits:
        second.append((2 * second[-1]) ^ second[-1])
    while len(third) < bits:
        third.append((2 * third[-1]) ^ (4 * third[-2]) ^ third[-2])
    number = np.arange(n, dtype=np.int64)
    out = np.zeros((3, n), dtype=np.int64)
    for i in range(bits):
        on = (number >> i) & 1
        for axis, direction in enumerate((1, second[i], third[i])):
            out[axis] ^= on * (direction << (bits - 1 - i))
    points: Floats = np.asarray((out.T + 0.5) / 2.0**bits, dtype=np.float64)
    return points


def draw(q: Quadrature, n: int) -> tuple[Floats, Floats, Floats]:
    """n equal-weight draws (log Vmax, log kappa, u) along a Sobol sequence; u = log volume less l0 of the
    node."""
    from scipy.interpolate import CubicSpline

    points = sobol(n)
    fine, marginal = _refined(q.axis, logsumexp(q.log_density), 16)
    z1 = np.interp(points[:, 0], _cumulated(marginal), fine)
    top = float(np.max(q.log_density))
    clamped = np.maximum(q.log_density, top - 2 * _CLAMP)
    fine2, rows = _refined(q.axis, clamped, 6)
    at_draw = CubicSpline(q.axis, rows, axis=0)(z1)
    cumulative = _cumulated(at_draw)
    wanted = points[:, 1]
    cell = np.clip(np.sum(cumulative < wanted[:, None], axis=1) - 1, 0, len(fine2) - 2)
    row = np.arange(n)
    left, right = cumulative[row, cell], cumulative[row, cell + 1]
    step = fine2[1] - fine2[0]
    z2 = fine2[cell] + step * np.clip((wanted - left) / np.maximum(right - left, 1e-300), 0.0, 1.0)
    a, k = q.frame.points(z1, z2)
    return a, k, _volume_draws(q, z1, z2, points[:, 2])


def _volume_draws(q: Quadrature, z1: Floats, z2: Floats, wanted: Floats) -> Floats:
    """The log volume at each draw: its mixture interpolated between the four nodes around, then inverted."""
    from scipy.special import ndtr

    n = len(q.axis)
    step = q.axis[1] - q.axis[0]
    i = np.clip(((z1 - q.axis[0]) / step).astype(np.int64), 0, n - 2)
    j = np.clip(((z2 - q.axis[0]) / step).astype(np.int64), 0, n - 2)
    f, g = (z1 - q.axis[i]) / step, (z2 - q.axis[j]) / step
    corners = (
        (i * n + j, (1 - f) * (1 - g)),
        ((i + 1) * n + j, f * (1 - g)),
        (i * n + j + 1, (1 - f) * g),
        ((i + 1) * n + j + 1, f * g),
    )

    def between(values: Floats) -> Floats:
        out = np.zeros((len(z1), values.shape[1]))
        for at, share in corners:
            out += share[:, None] * values[at]
        return out

    relative = np.maximum(q.parts.log_weight - q.parts.log_total[:, None], -700.0)
    share = np.exp(between(relative))
    share /= share.sum(axis=1, keepdims=True)
    means, sd = between(q.parts.mean), np.sqrt(between(q.parts.variance))
    low, high = np.min(means - 9 * sd, axis=1), np.max(means + 9 * sd, axis=1)
    x = np.sum(share * means, axis=1)
    spread = np.sqrt(np.sum(share * ((means - x[:, None]) ** 2 + sd**2), axis=1))
    for _ in range(80):
        z = (x[:, None] - means) / sd
        error = np.sum(share * ndtr(z), axis=1) - wanted
        slope = np.sum(share * np.exp(-0.5 * z * z) / sd, axis=1) / math.sqrt(2 * math.pi)
        high = np.where(error > 0, np.minimum(high, x), high)
        low = np.where(error <= 0, np.maximum(low, x), low)
        with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
            newton = x - error / slope
        moved = np.where((newton > low) & (newton < high), newton, 0.5 * (low + high))
        done = np.max(np.abs(moved - x) / spread) < 1e-7
        x = moved
        if done:
            break
    found: Floats = x
    return found
