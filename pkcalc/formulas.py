"""The formulas, each once, on float arrays: keyword-only names that carry the unit, no checks of sense, no
pint.

    C level on the working basis [mg/L]      R active drug reaching the body [mg/day]
    Vmax [mg/day]    Km [mg/L]               V volume of distribution [L]
    CL clearance of a parallel first-order path [L/day], 0 for most drugs

Rate law (Michaelis & Menten 1913; for levels in patients since Gerber & Wagner 1972, from memory):

    V dC/dt = R - Vmax C / (Km + C) - CL C

All arguments broadcast. Where no steady state exists, or a level is never reached, the value is +inf; no
formula gives NaN or a negative level for positive Vmax, Km, V and non-negative R, CL and levels. The typed
doors over these functions, which check and refuse, are in `kinetics.py`.
"""

from __future__ import annotations

import math
from typing import Literal, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

Floats = NDArray[np.float64]


def _arrays(*values: ArrayLike) -> list[Floats]:
    return [np.asarray(a, dtype=np.float64) for a in np.broadcast_arrays(*values)]


# ------------------------------------------------------------------------------------------- at steady state


def steady_state_level(
    *,
    dose_rate_mg_per_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    linear_clearance_L_per_day: ArrayLike = 0.0,
) -> Floats:
    """The steady level: the level at which the body removes as much per day as is given.

        Css = Km R / (Vmax - R)                                       with CL = 0
        CL Css^2 + (Vmax + CL Km - R) Css - Km R = 0, positive root    with a parallel first-order path

    dose_rate_mg_per_day: active drug reaching the body [mg/day], >= 0. vmax_mg_per_day, km_mg_per_L: > 0.
    linear_clearance_L_per_day: CL [L/day], >= 0. Returns the level [mg/L]; +inf where the dose rate is at
    or above Vmax and CL = 0: the level then rises without end.
    Example: at R = Vmax/2 the steady level is Km. Michaelis & Menten 1913.
    """
    r, vmax, km, cl = _arrays(dose_rate_mg_per_day, vmax_mg_per_day, km_mg_per_L, linear_clearance_L_per_day)
    b = vmax - r + cl * km
    root = np.where(cl > 0, np.hypot(b, 2.0 * np.sqrt(cl * r * km)), np.abs(b))
    with np.errstate(divide="ignore", invalid="ignore"):
        low = 2.0 * r * km / (b + root)
        high = (root - b) / (2.0 * cl)
    level: Floats = np.where(b > 0, low, np.where(cl > 0, high, np.inf))
    return level[()]


def dose_rate_for_level(
    *,
    level_mg_per_L: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    linear_clearance_L_per_day: ArrayLike = 0.0,
) -> Floats:
    """The dose rate that holds a level: what the body removes per day at it.

        R = Vmax C / (Km + C) + CL C

    level_mg_per_L: the level to hold [mg/L], >= 0. Returns active drug reaching the body [mg/day], below
    Vmax where CL = 0. Example: to hold C = Km, give half of Vmax. Michaelis & Menten 1913.
    """
    c, vmax, km, cl = _arrays(level_mg_per_L, vmax_mg_per_day, km_mg_per_L, linear_clearance_L_per_day)
    rate: Floats = vmax * (c / (km + c)) + cl * c
    return rate[()]


def sensitivity_at(*, dose_rate_mg_per_day: ArrayLike, vmax_mg_per_day: ArrayLike) -> Floats:
    """By how many per cent the steady level changes when the dose changes by 1 per cent.

        d ln Css / d ln R = Vmax / (Vmax - R)

    Returns a plain number: 1 for a drug without saturation, rising without end towards Vmax; +inf where there
    is no steady state. Example: at R = Vmax/2, 1 % more dose is 2 % more level. Derived from the rate law.
    """
    r, vmax = _arrays(dose_rate_mg_per_day, vmax_mg_per_day)
    with np.errstate(divide="ignore"):
        value: Floats = np.where(r < vmax, vmax / np.where(r < vmax, vmax - r, 1.0), np.inf)
    return value[()]


def sensitivity_with_linear_path(
    *,
    dose_rate_mg_per_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    linear_clearance_L_per_day: ArrayLike,
) -> Floats:
    """`sensitivity_at` with a parallel first-order path that is always open.

        d ln Css / d ln R = (Vmax/(Km + C) + CL) / (Vmax Km/(Km + C)^2 + CL)    at C = Css

    Returns a plain number, never below 1. Example: 1 for Vmax so small that only the linear path counts.
    Derived from the rate law.
    """
    r, vmax, km, cl = _arrays(dose_rate_mg_per_day, vmax_mg_per_day, km_mg_per_L, linear_clearance_L_per_day)
    c = np.asarray(
        steady_state_level(dose_rate_mg_per_day=r, vmax_mg_per_day=vmax, km_mg_per_L=km, linear_clearance_L_per_day=cl)
    )
    exists = np.isfinite(c)
    c = np.where(exists, c, 0.0)
    value: Floats = np.where(exists, (vmax / (km + c) + cl) / (vmax * km / (km + c) ** 2 + cl), np.inf)
    return value[()]


def clearance_at_level(
    *,
    level_mg_per_L: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    linear_clearance_L_per_day: ArrayLike = 0.0,
) -> Floats:
    """The clearance at one stated level; it falls as the level rises, so it holds for no other level.

        CL(C) = Vmax / (Km + C) + CL

    Returns L/day. Example: at C = Km it is half of what it is at the lowest levels. Derived from the rate
    law.
    """
    c, vmax, km, cl = _arrays(level_mg_per_L, vmax_mg_per_day, km_mg_per_L, linear_clearance_L_per_day)
    value: Floats = vmax / (km + c) + cl
    return value[()]


# ----------------------------------------------------------------------------------------- two steady levels

PairRefusal = Literal["same rate", "higher rate, level not higher", "level rose less than in proportion"]


class TwoLevel(NamedTuple):
    """Km [mg/L] and Vmax [mg/day] through two steady levels; both +inf where `admissible` is False."""

    km_mg_per_L: Floats
    vmax_mg_per_day: Floats
    admissible: NDArray[np.bool_]


def two_level(
    *,
    rate1_mg_per_day: ArrayLike,
    level1_mg_per_L: ArrayLike,
    rate2_mg_per_day: ArrayLike,
    level2_mg_per_L: ArrayLike,
) -> TwoLevel:
    """This patient's Km and Vmax from two steady levels on two dose rates; the order of the pairs does not
    matter.

        Km = (R2 - R1) / (R1/C1 - R2/C2)        Vmax = R + Km R/C at either pair

    Evaluated as Km = (R2 - R1) C1 C2 / D and Vmax = R1 R2 (C2 - C1) / D with D = R1 C2 - R2 C1.
    All four > 0. A saturable curve passes through a pair only if the larger rate has the smaller R/C;
    elsewhere `admissible` is False (why: `pair_refusal`). Example: 200 mg/day at 4 mg/L and 300 mg/day at
    12 mg/L give Km 4 mg/L, Vmax 400 mg/day. Ludden et al. 1977 (from memory).
    """
    r1, c1, r2, c2 = _arrays(rate1_mg_per_day, level1_mg_per_L, rate2_mg_per_day, level2_mg_per_L)
    d = r1 * c2 - r2 * c1
    admissible = ((r2 > r1) & (d > 0)) | ((r2 < r1) & (d < 0))
    with np.errstate(divide="ignore", invalid="ignore"):
        km = np.where(admissible, (r2 - r1) * c1 * c2 / d, np.inf)
        vmax = np.where(admissible, r1 * r2 * (c2 - c1) / d, np.inf)
    return TwoLevel(km[()], vmax[()], admissible)


def pair_refusal(
    *, rate1_mg_per_day: float, level1_mg_per_L: float, rate2_mg_per_day: float, level2_mg_per_L: float
) -> PairRefusal | None:
    """Why no saturable curve passes through two steady levels; None where one does. All four > 0."""
    if rate1_mg_per_day == rate2_mg_per_day:
        return "same rate"
    low, high = sorted(((rate1_mg_per_day, level1_mg_per_L), (rate2_mg_per_day, level2_mg_per_L)))
    if high[1] <= low[1]:
        return "higher rate, level not higher"
    if not low[0] * high[1] > high[0] * low[1]:
        return "level rose less than in proportion"
    return None


def chance_of_inadmissible_pair(
    *,
    rate1_mg_per_day: float,
    level1_mg_per_L: float,
    rate2_mg_per_day: float,
    level2_mg_per_L: float,
    log_sd1: float,
    log_sd2: float,
) -> float:
    """Chance that level error alone would have made Km come out negative, were these levels the true ones.

        Phi( -[ln(C2/C1) - ln(R2/R1)] / sqrt(s1^2 + s2^2) ),  R2 the larger rate

    log_sd1, log_sd2: independent errors of the two log levels. Returns 0 to 1. Derived for this project.
    """
    low, high = sorted(((rate1_mg_per_day, level1_mg_per_L), (rate2_mg_per_day, level2_mg_per_L)))
    margin = math.log(high[1] / low[1]) - math.log(high[0] / low[0])
    spread = math.hypot(log_sd1, log_sd2)
    if spread == 0:
        return 0.0 if margin > 0 else 1.0
    return 0.5 * math.erfc(margin / (spread * math.sqrt(2.0)))


def vmax_from_level(*, dose_rate_mg_per_day: ArrayLike, level_mg_per_L: ArrayLike, km_mg_per_L: ArrayLike) -> Floats:
    """Vmax from one steady level when Km is taken as known: Vmax = R + Km R / C [mg/day]. All > 0."""
    r, c, km = _arrays(dose_rate_mg_per_day, level_mg_per_L, km_mg_per_L)
    value: Floats = r + km * r / c
    return value[()]


# ------------------------------------------------------------------------------- level over time, constant
# rate
#
# One equation below, at and above Vmax alike. In the clock q = integral of dt/(Km + C) the rate law is
#     dC/dq = r Km + b C - k C^2,   b = r - v - k Km,   t(q) = Km q + integral of C dq
# (r = R/V, v = Vmax/V, k = CL/V): linear for k = 0, a Riccati equation for k > 0. Every term below is
# positive, so nothing cancels and the level is positive by construction.


def _e(z: Floats) -> Floats:
    """(1 - e^-z)/z"""
    with np.errstate(divide="ignore", invalid="ignore"):
        value: Floats = np.where(z == 0, 1.0, -np.expm1(-z) / z)
    return value


def _psi(z: Floats) -> Floats:
    """(z - 1 + e^-z)/z^2"""
    series = np.zeros_like(z)
    near = np.clip(z, -0.5, 0.5)
    for n in range(16, 1, -1):
        series = 1.0 / math.factorial(n) - near * series
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        far = (z + np.expm1(-z)) / (z * z)
    value: Floats = np.where(np.abs(z) < 0.5, series, far)
    return value


def _omega(z: Floats) -> Floats:
    """(integral from 0 to z of (1 - e^-x)^2 dx) / z^3"""
    series = np.zeros_like(z)
    near = np.clip(z, -1.0, 1.0)
    for n in range(30, 1, -1):
        series = (2.0**n - 2.0) / (math.factorial(n) * (n + 1)) - near * series
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        far = (z + 2.0 * np.expm1(-z) - 0.5 * np.expm1(-2.0 * z)) / z**3
    value: Floats = np.where(np.abs(z) < 1.0, series, far)
    return value


def _clock(t: Floats, c0: Floats, r: Floats, v: Floats, km: Floats) -> Floats:
    """q at time t for k = 0, by Halley's method on t(q) = t from the starting values derived for it."""
    d = v - r
    s0 = km + c0
    g0 = r * km - d * c0
    with np.errstate(all="ignore"):
        rising = 2.0 * t / (s0 + np.sqrt(s0 * s0 + 2.0 * np.maximum(g0, 0.0) * t))
        growing = np.log1p(-d * r * t / g0) / -d
        rising = np.where(d < 0, np.fmin(rising, growing), rising)
        y0, a = -g0 / d, v * km / d
        x = np.log(y0 / a) + (y0 - d * t) / a
        soft = np.logaddexp(0.0, x)
        w = soft * (1.0 - np.log1p(soft) / (2.0 + soft))
        log_w = np.where(x < -30.0, x, np.log(w))
        falling = np.fmax(np.fmax(t / s0, (t - y0 / d) / a), (np.log(y0 / a) - log_w) / d)
    q = np.where(t > 0, np.where(g0 >= 0, rising, falling), 0.0)
    done = ~(t > 0)
    settled = done
    for _ in range(HALLEY_LIMIT):
        z = d * q
        ez = _e(z)
        with np.errstate(all="ignore"):
            decay = np.exp(-z)
            slope = km + c0 * decay + r * km * q * ez
            s = (q * (km + c0 * ez + r * km * q * _psi(z)) - t) / slope
            s = s / (1.0 - 0.5 * s * g0 * decay / slope)
        q = np.where(done, q, q - s)
        # one last step once the correction is small: a tighter test can cycle in the last bit
        done = done | settled
        settled = np.abs(s) <= 1e-9 * q
        if done.all():
            break
    return q


#: Steps of Halley's method allowed for the clock; at most 5 and one last were ever needed.
HALLEY_LIMIT = 12


class _Course(NamedTuple):
    """At the clock q: the level, and the integral of C dq."""

    level: Floats
    area: Floats


def _linear_course(q: Floats, c0: Floats, r: Floats, v: Floats, km: Floats) -> _Course:
    z = (v - r) * q
    ez = _e(z)
    with np.errstate(over="ignore", invalid="ignore"):
        decay = np.exp(-z)
        level = c0 * decay + r * km * q * ez
        area = q * (c0 * ez + r * km * q * _psi(z))
    return _Course(level, area)


def _roots(r: Floats, v: Floats, km: Floats, k: Floats) -> tuple[Floats, Floats, Floats]:
    """mu+ >= 0, -mu- >= 0 (rates in q, mu+ mu- = -k r Km) and s = mu+ - mu-."""
    b = r - v - k * km
    c = k * r * km
    s = np.hypot(b, 2.0 * np.sqrt(c))
    with np.errstate(divide="ignore", invalid="ignore"):
        plus = np.where(b > 0, 0.5 * (b + s), np.where(s > 0, 2.0 * c / (s - b), 0.0))
        minus = np.where(b < 0, 0.5 * (s - b), np.where(s > 0, 2.0 * c / (s + b), 0.0))
    return plus, minus, s


def _curved_course(q: Floats, c0: Floats, r: Floats, v: Floats, km: Floats, k: Floats) -> _Course:
    """The same with k > 0: C = y'/(k y), y'' = b y' + k r Km y, everything scaled by e^(-mu+ q)."""
    plus, minus, s = _roots(r, v, km, k)
    p, m, z = plus * q, minus * q, s * q
    ez = _e(z)
    with np.errstate(over="ignore", under="ignore", divide="ignore", invalid="ignore"):
        y1 = q * ez
        y1_slope = np.where(z < 0.5, 1.0 - m * ez, (plus + minus * np.exp(-z)) / s)
        # divided difference of the exponential on 0, -m, p, times e^-p
        term, power, series = np.ones_like(z), np.ones_like(z), np.full_like(z, 0.5)
        small_p, small_m = np.minimum(p, 0.5), np.minimum(m, 0.5)
        for n in range(1, 16):
            power = -small_m * power
            term = small_p * term + power
            series = series + term / math.factorial(n + 2)
        decay = np.exp(-p)
        divided = np.where(z < 0.5, series * decay, (_e(p) - _e(m) * decay) / z)
        y2 = q * q * divided
        gain = k * (c0 * y1 + r * km * y2)
        y = decay + gain
        level = (c0 * y1_slope + r * km * y1) / y
        area = np.where(p < 600.0, np.log1p(gain / decay), p + np.log(y)) / k
    return _Course(level, area)


def _curved_clock(t: Floats, c0: Floats, r: Floats, v: Floats, km: Floats, k: Floats) -> Floats:
    """q at time t for k > 0: Newton's method on t(q) = t, kept inside a shrinking bracket."""
    plus, _, _ = _roots(r, v, km, k)
    with np.errstate(divide="ignore", over="ignore"):
        ceiling = np.maximum(c0, np.minimum(plus / k, c0 + r * t))
        floor = np.minimum(c0, plus / k)
    low, high = t / (km + ceiling), t / (km + floor)
    q = np.clip(t / (km + c0), low, high)
    done = ~(t > 0)
    settled = done
    for _ in range(200):
        course = _curved_course(q, c0, r, v, km, k)
        excess = km * q + course.area - t
        low = np.where(excess < 0, q, low)
        high = np.where(excess >= 0, q, high)
        slope = km + course.level
        s = excess / slope
        with np.errstate(all="ignore"):
            bend = r * km + (r - v - k * km) * course.level - k * course.level**2
            s = s / (1.0 - 0.5 * s * bend / slope)
        moved = q - s
        inside = (moved >= low) & (moved <= high)
        moved = np.where(inside, moved, 0.5 * (low + high))
        new = np.where(done, q, moved)
        done = done | settled
        settled = np.abs(new - q) <= 1e-9 * new
        q = new
        if done.all():
            break
    return q


def constant_rate_step(
    *,
    time: ArrayLike,
    start: ArrayLike,
    input_rate: ArrayLike,
    vmax: ArrayLike,
    km: ArrayLike,
    first_order: ArrayLike = 0.0,
) -> Floats:
    """`level_after` in any consistent units (levels or amounts), for the engine."""
    t, c0, r, v, km_, k = _arrays(time, start, input_rate, vmax, km, first_order)
    if not k.any():
        return _linear_course(_clock(t, c0, r, v, km_), c0, r, v, km_).level
    linear = k == 0
    kk = np.where(linear, 1.0, k)
    curved = _curved_course(_curved_clock(t, c0, r, v, km_, kk), c0, r, v, km_, kk).level
    if linear.any():
        curved = np.where(linear, _linear_course(_clock(t, c0, r, v, km_), c0, r, v, km_).level, curved)
    return curved


def constant_rate_tangent(
    *,
    start: ArrayLike,
    end: ArrayLike,
    time: ArrayLike,
    input_rate: ArrayLike,
    vmax: ArrayLike,
    km: ArrayLike,
    first_order: ArrayLike = 0.0,
) -> Floats:
    """Derivative of the end of a `constant_rate_step` with respect to its start: g(end)/g(start), g = dC/dt.

    Where the course hardly moves (both near the steady level) it is e^(-slope x time) instead.
    """
    c0, c1, t, r, v, km_, k = _arrays(start, end, time, input_rate, vmax, km, first_order)
    first, last = (r - c * (v / (km_ + c) + k) for c in (c0, c1))
    middle = 0.5 * (c0 + c1)
    with np.errstate(divide="ignore", invalid="ignore", under="ignore"):
        still = np.exp(-(v * km_ / (km_ + middle) ** 2 + k) * t)
        moving = np.abs(c1 - c0) > 1e-5 * (km_ + c0)
        value: Floats = np.where(moving, last / np.where(moving, first, 1.0), still)
    return np.clip(value, 0.0, 1.0)


def level_after(
    *,
    time_day: ArrayLike,
    start_mg_per_L: ArrayLike,
    dose_rate_mg_per_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    volume_L: ArrayLike,
    linear_clearance_L_per_day: ArrayLike = 0.0,
) -> Floats:
    """The level after a time at a constant dose rate (an infusion, or no dosing), exactly.

        with q = integral of dt/(Km + C), d = (Vmax - R)/V, r = R/V, z = d q (CL = 0):
        C = C0 e^-z + r Km q (1 - e^-z)/z        t = Km q + C0 q (1 - e^-z)/z + r Km q^2 (z - 1 + e^-z)/z^2

    time_day >= 0, start_mg_per_L >= 0. Holds below, at and above Vmax. Returns the level [mg/L].
    Example: without dosing it follows C0 - C + Km ln(C0/C) = Vmax t/V.
    Derived for this project (equivalent to the Lambert-W solution, without its loss of digits).
    """
    t, c0, rate, vmax, km, volume, cl = _arrays(
        time_day,
        start_mg_per_L,
        dose_rate_mg_per_day,
        vmax_mg_per_day,
        km_mg_per_L,
        volume_L,
        linear_clearance_L_per_day,
    )
    level = constant_rate_step(
        time=t, start=c0, input_rate=rate / volume, vmax=vmax / volume, km=km, first_order=cl / volume
    )
    return level[()]


def auc(
    *,
    time_day: ArrayLike,
    start_mg_per_L: ArrayLike,
    dose_rate_mg_per_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    volume_L: ArrayLike,
    linear_clearance_L_per_day: ArrayLike = 0.0,
) -> Floats:
    """Area under the level from now to a time at a constant dose rate [mg/L x day].

        integral of C dt = Km integral of C dq + integral of C^2 dq, in the clock of `level_after`

    Equal to [ (C0^2 - C^2)/2 + Km (C0 + r t - C) ] / (v - r) with CL = 0, without its cancellation near Vmax.
    Example: without dosing, all the way down from C0: V/Vmax (C0^2/2 + Km C0). Wagner 1973 (from memory).
    """
    t, c0, rate, vmax, km, volume, cl = _arrays(
        time_day,
        start_mg_per_L,
        dose_rate_mg_per_day,
        vmax_mg_per_day,
        km_mg_per_L,
        volume_L,
        linear_clearance_L_per_day,
    )
    r, v, k = rate / volume, vmax / volume, cl / volume
    linear = k == 0
    q = _clock(t, c0, r, v, km)
    a, z = r * km, (v - r) * q
    ez = _e(z)
    with np.errstate(over="ignore", invalid="ignore"):
        squares = q * (c0 * c0 * _e(2.0 * z) + a * q * (c0 * ez * ez + a * q * _omega(z)))
    area = km * _linear_course(q, c0, r, v, km).area + squares
    if not linear.all():
        area = np.where(linear, area, _curved_auc(t, c0, r, v, km, np.where(linear, 1.0, k)))
    return area[()]


def _curved_auc(t: Floats, c0: Floats, r: Floats, v: Floats, km: Floats, k: Floats) -> Floats:
    """Area with k > 0: Gauss-Legendre in q, on panels of at most two of the course's own time constants."""
    q = _curved_clock(t, c0, r, v, km, k)
    nodes, weights = np.polynomial.legendre.leggauss(12)
    _, _, s = _roots(r, v, km, k)
    panels = int(np.clip(np.ceil(np.max(s * q, initial=0.0) / 2.0), 1, 2000))
    squares = np.zeros_like(q)
    for panel in range(panels):
        for node, weight in zip(nodes, weights, strict=True):
            at = q * ((panel + 0.5 * (1.0 + node)) / panels)
            squares += (0.5 * weight / panels) * q * _curved_course(at, c0, r, v, km, k).level ** 2
    return km * _curved_course(q, c0, r, v, km, k).area + squares


def time_to_level(
    *,
    start_mg_per_L: ArrayLike,
    end_mg_per_L: ArrayLike,
    dose_rate_mg_per_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    volume_L: ArrayLike,
    linear_clearance_L_per_day: ArrayLike = 0.0,
) -> Floats:
    """Time from one level to another at a constant dose rate [day]; +inf where it is never reached.

        t = V/(Vmax - R) [ (Km + Css) ln((Css - C0)/(Css - C)) - (C - C0) ]        R < Vmax, CL = 0

    Evaluated in the clock of `level_after`, so it holds below, at and above Vmax alike. The steady level
    itself is approached, never reached. Example: 0 where start and end are the same. Derived from the rate
    law.
    """
    c0, c1, rate, vmax, km, volume, cl = _arrays(
        start_mg_per_L,
        end_mg_per_L,
        dose_rate_mg_per_day,
        vmax_mg_per_day,
        km_mg_per_L,
        volume_L,
        linear_clearance_L_per_day,
    )
    r, v, k = rate / volume, vmax / volume, cl / volume
    plus, minus, s = _roots(r, v, km, k)
    with np.errstate(all="ignore"):
        ratio = (c1 - c0) / (r * km + plus * c0 - minus * c1 - k * c0 * c1)
        q = np.where(s > 0, np.log1p(s * ratio) / np.where(s > 0, s, 1.0), ratio)
    reached = np.isfinite(q) & (q >= 0)
    q = np.where(reached, q, 0.0)
    linear = k == 0
    area = _linear_course(q, c0, r, v, km).area
    if not linear.all():
        area = np.where(linear, area, _curved_course(q, c0, r, v, km, np.where(linear, 1.0, k)).area)
    time: Floats = np.where(c0 == c1, 0.0, np.where(reached, km * q + area, np.inf))
    return time[()]


def time_to_fraction(
    *,
    fraction: ArrayLike,
    dose_rate_mg_per_day: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    volume_L: ArrayLike,
    start_mg_per_L: ArrayLike = 0.0,
) -> Floats:
    """Time until a fraction of the way from the present level to the steady level is covered [day].

        t = V/(Vmax - R) [ -(Km + Css) ln(1 - f) - f (Css - C0) ]
        from zero to 90 %: t90 = Km V (ln 10 Vmax - 0.9 R) / (Vmax - R)^2

    fraction: f, 0 <= f < 1. Returns +inf where the dose rate is at or above Vmax: there is nothing to settle
    to. Near Vmax the time grows as 1/(Vmax - R)^2. Example: 0 for no part of the way.
    Derived from the rate law.
    """
    f, rate, vmax, km, volume, c0 = _arrays(
        fraction, dose_rate_mg_per_day, vmax_mg_per_day, km_mg_per_L, volume_L, start_mg_per_L
    )
    r, v = rate / volume, vmax / volume
    settles = r < v
    with np.errstate(all="ignore"):
        q = np.where(settles, -np.log1p(-f) / np.where(settles, v - r, 1.0), 0.0)
        area = _linear_course(q, c0, r, v, km).area
    time: Floats = np.where(settles, km * q + area, np.inf)
    return time[()]


def time_to_fall(
    *,
    start_mg_per_L: ArrayLike,
    end_mg_per_L: ArrayLike,
    vmax_mg_per_day: ArrayLike,
    km_mg_per_L: ArrayLike,
    volume_L: ArrayLike,
) -> Floats:
    """Time for a level to fall without dosing [day].

        t = V [ (C0 - C) + Km ln(C0/C) ] / Vmax

    Returns +inf where the end is zero or above the start: without dosing a level neither rises nor vanishes.
    Example: far above Km the level falls by Vmax/V a day. Derived from the rate law.
    """
    return time_to_level(
        start_mg_per_L=start_mg_per_L,
        end_mg_per_L=end_mg_per_L,
        dose_rate_mg_per_day=0.0,
        vmax_mg_per_day=vmax_mg_per_day,
        km_mg_per_L=km_mg_per_L,
        volume_L=volume_L,
    )


# ------------------------------------------------------------------------------------------------ binding


def binding_denominator(
    *, albumin_g_per_L: ArrayLike, coefficient_dL_per_g: ArrayLike, intercept: float = 0.1
) -> Floats:
    """What a total level at normal binding is multiplied by at this albumin, before any cap.

        coefficient x albumin [g/dL] + 0.1

    coefficient_dL_per_g: 0.2 in the published equation. Example: 1 at 45 g/L. Sheiner & Tozer 1978.
    """
    albumin, coefficient = _arrays(albumin_g_per_L, coefficient_dL_per_g)
    value: Floats = coefficient * albumin / 10.0 + intercept
    return value[()]


def albumin_break_point(*, coefficient_dL_per_g: float, intercept: float = 0.1) -> float:
    """Albumin [g/L] above which the binding equation corrects nothing: its denominator is 1 (45 for 0.2)."""
    return 10.0 * (1.0 - intercept) / coefficient_dL_per_g


def normalised_total(
    *,
    total_mg_per_L: ArrayLike,
    albumin_g_per_L: ArrayLike,
    coefficient_dL_per_g: ArrayLike,
    intercept: float = 0.1,
) -> Floats:
    """The total level this patient would show at normal binding (a total level, never a free one).

        C_norm = C / (coefficient x albumin [g/dL] + 0.1)   where the denominator is below 1, else C

    Returns mg/L, never below the measured level. Not for end-stage renal failure or a displacing drug.
    Example: 7 mg/L at 20 g/L becomes 14 mg/L. Sheiner & Tozer 1978.
    """
    total, denominator = _arrays(
        total_mg_per_L,
        binding_denominator(
            albumin_g_per_L=albumin_g_per_L,
            coefficient_dL_per_g=coefficient_dL_per_g,
            intercept=intercept,
        ),
    )
    value: Floats = total / np.minimum(denominator, 1.0)
    return value[()]


def normalised_from_free(*, free_mg_per_L: ArrayLike, free_fraction: ArrayLike) -> Floats:
    """Total level at normal binding from a measured free level: free / (normal free fraction) [mg/L]."""
    free, fraction = _arrays(free_mg_per_L, free_fraction)
    value: Floats = free / fraction
    return value[()]


# ------------------------------------------------------------------------------------- weights and kidneys


def ideal_body_weight(*, height_cm: ArrayLike, sex: Literal["female", "male"]) -> Floats:
    """Ideal body weight: 50 kg (men) or 45.5 kg (women) and 2.3 kg for every inch over 60 [kg].

    Below 60 inches (152.4 cm) the rule says nothing; the weight at 60 inches is returned.
    Example: a man of 70 inches, 73 kg. Devine 1974 (from memory).
    """
    (height,) = _arrays(height_cm)
    base = {"male": 50.0, "female": 45.5}[sex]
    value: Floats = base + 2.3 * np.maximum(height / 2.54 - 60.0, 0.0)
    return value[()]


def weight_with_excess(*, weight_kg: ArrayLike, ideal_weight_kg: ArrayLike, excess_factor: ArrayLike) -> Floats:
    """Weight to which a volume per kg is applied in obesity: IBW + factor x (weight - IBW) [kg].

    excess_factor: from the drug file (1.33 for a drug that spreads into fat). Below the ideal weight, the
    weight itself. Example: 70 kg ideal, 100 kg actual, factor 1.33: 109.9 kg.
    Abernethy & Greenblatt 1985 (from memory).
    """
    weight, ideal, factor = _arrays(weight_kg, ideal_weight_kg, excess_factor)
    value: Floats = np.where(weight > ideal, ideal + factor * (weight - ideal), weight)
    return value[()]


def creatinine_clearance(
    *,
    age_years: ArrayLike,
    weight_kg: ArrayLike,
    creatinine_mg_per_dL: ArrayLike,
    sex: Literal["female", "male"],
) -> Floats:
    """Creatinine clearance of an adult: (140 - age) x weight / (72 x creatinine), x 0.85 in women [mL/min].

    age_years below 140; creatinine_mg_per_dL > 0. Example: a man of 40, 72 kg, 1 mg/dL: 100 mL/min.
    Cockcroft & Gault 1976.
    """
    age, weight, creatinine = _arrays(age_years, weight_kg, creatinine_mg_per_dL)
    value: Floats = (140.0 - age) * weight / (72.0 * creatinine) * (0.85 if sex == "female" else 1.0)
    return value[()]


# ------------------------------------------------------------------------------------- salts, loads, moles


def active_amount(*, amount_mg: ArrayLike, salt_factor: ArrayLike, bioavailability: ArrayLike = 1.0) -> Floats:
    """Active drug that reaches the body from an amount of a product: amount x S x F [mg].

    Example: 400 mg of a salt with S = 0.92 is 368 mg.
    """
    amount, s, f = _arrays(amount_mg, salt_factor, bioavailability)
    value: Floats = amount * s * f
    return value[()]


def product_amount(*, active_mg: ArrayLike, salt_factor: ArrayLike, bioavailability: ArrayLike = 1.0) -> Floats:
    """Amount of a product that brings an amount of active drug into the body: active / (S F) [mg]."""
    active, s, f = _arrays(active_mg, salt_factor, bioavailability)
    value: Floats = active / (s * f)
    return value[()]


def level_rise(
    *, amount_mg: ArrayLike, volume_L: ArrayLike, salt_factor: ArrayLike, bioavailability: ArrayLike = 1.0
) -> Floats:
    """By how much a rapid dose raises the level: amount x S x F / V [mg/L].

    Example: 1,000 mg with S = 1 into 50 L, 20 mg/L. Elimination while it is given is neglected.
    """
    amount, volume, s, f = _arrays(amount_mg, volume_L, salt_factor, bioavailability)
    value: Floats = amount * s * f / volume
    return value[()]


def top_up_amount(
    *,
    present_mg_per_L: ArrayLike,
    aim_mg_per_L: ArrayLike,
    volume_L: ArrayLike,
    salt_factor: ArrayLike,
    bioavailability: ArrayLike = 1.0,
) -> Floats:
    """Product amount that lifts the level from the present one to the aim: V (C_aim - C_now) / (S F) [mg].

    A load is a top-up from 0. Returns 0 where the present level is at or above the aim.
    Example: 70 kg at 0.7 L/kg from 8 to 15 mg/L with S = 1: 343 mg.
    """
    now, aim, volume, s, f = _arrays(present_mg_per_L, aim_mg_per_L, volume_L, salt_factor, bioavailability)
    value: Floats = volume * np.maximum(aim - now, 0.0) / (s * f)
    return value[()]


def molar_level(*, level_mg_per_L: ArrayLike, molar_mass_g_per_mol: ArrayLike) -> Floats:
    """A level in molar units: mg/L x 1000 / molar mass [umol/L]. Example: 1 mg/L at 250 g/mol is 4 umol/L."""
    level, mass = _arrays(level_mg_per_L, molar_mass_g_per_mol)
    value: Floats = level * 1000.0 / mass
    return value[()]
