"""Vmax and Km from two steady dose/level pairs: closed form for the point, the levels' spread pushed through it."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from pkcalc import formulas
from pkcalc.errors import CannotEstimate
from pkcalc.estimate.result import Band, Estimate, Floats, LevelFit, Point, band, log_correlation
from pkcalc.units import show, show_number

METHOD = "two levels"
DRAWS = 4096


@dataclass(frozen=True)
class SteadyPair:
    """A dose rate of active drug and the level it led to, on the working basis, with the level's log spread."""

    level: int
    rate_mg_per_day: float
    level_mg_per_L: float
    log_sd: float
    kind: str = "total"


@dataclass(frozen=True)
class VolumeSpread:
    """Volume of distribution of the population for this patient: median and log spread."""

    median_L: float
    log_sd: float


def from_steady_levels(
    first: SteadyPair,
    second: SteadyPair,
    *,
    volume: VolumeSpread | None = None,
    draws: int = DRAWS,
    by_the_hour: bool = False,
) -> Estimate:
    """Estimate from two steady pairs; the order of the pairs does not matter.

        Km = (R2 - R1) / (R1/C1 - R2/C2)        Vmax = R + Km R/C

    The levels' total spread is drawn (quasi-random, log-normal) and pushed through the closed form; draws
    through which no saturable curve passes are counted in `rejected`, beside the exact chance of a negative
    Km in `diagnostics`. Raises CannotEstimate, in terms of doses and levels, where no saturable curve passes
    through the reported pair itself. Source: the rate law at steady state (Michaelis & Menten 1913; Ludden
    1977 for its use with two dose/level pairs). by_the_hour: a refusal tells the doses by the hour.
    """
    if {first.kind, second.kind} == {"free", "total"}:
        raise CannotEstimate(
            found="One of the two levels is free and the other total.",
            why="A free and a total level cannot form a pair, because binding differs between patients and days.",
            helps="Use two levels of the same kind, or give the albumin so that both are brought to one basis.",
        )
    low, high = sorted((first, second), key=lambda p: (p.rate_mg_per_day, p.level_mg_per_L))
    refuse_impossible(low, high, by_the_hour=by_the_hour)
    point = formulas.two_level(
        rate1_mg_per_day=low.rate_mg_per_day,
        level1_mg_per_L=low.level_mg_per_L,
        rate2_mg_per_day=high.rate_mg_per_day,
        level2_mg_per_L=high.level_mg_per_L,
    )
    z = _normals(3, draws)
    level1 = low.level_mg_per_L * np.exp(low.log_sd * z[0])
    level2 = high.level_mg_per_L * np.exp(high.log_sd * z[1])
    admissible = level2 * low.rate_mg_per_day > level1 * high.rate_mg_per_day * (1 + 1e-9)
    rejected = 1.0 - float(np.mean(admissible))
    km_all = (high.rate_mg_per_day - low.rate_mg_per_day) / (
        low.rate_mg_per_day / level1[admissible] - high.rate_mg_per_day / level2[admissible]
    )
    vmax_all = low.rate_mg_per_day * (1 + km_all / level1[admissible])
    n = len(km_all)
    weights = np.full(n, 1.0 / n)
    volumes = None if volume is None else volume.median_L * np.exp(volume.log_sd * z[2][admissible])
    summary = {"vmax_mg_per_day": band(vmax_all, weights), "km_mg_per_L": band(km_all, weights)}
    if volumes is not None:
        summary["volume_L"] = band(volumes, weights)
    return Estimate(
        method=METHOD,
        vmax_mg_per_day=vmax_all,
        km_mg_per_L=km_all,
        volume_L=volumes,
        weights=weights,
        point=Point(
            vmax_mg_per_day=float(point.vmax_mg_per_day),
            km_mg_per_L=float(point.km_mg_per_L),
            volume_L=None if volume is None else volume.median_L,
            kind="closed form",
        ),
        summary=summary,
        correlation=log_correlation(vmax_all, km_all, weights),
        volume_from="none" if volume is None else "population",
        rejected=rejected,
        fit=tuple(
            LevelFit(
                level=p.level,
                observed_mg_per_L=p.level_mg_per_L,
                predicted=_spread_of(p),
                standardised_residual=0.0,
            )
            for p in (first, second)
        ),
        diagnostics={
            "chance of negative Km": chance_of_negative_km(low, high),
            "draws": n,
            "level log sd": [low.log_sd, high.log_sd],
        },
    )


def _spread_of(pair: SteadyPair) -> Band:
    """Two pairs fix two parameters exactly, so the fitted level is the level itself, with its own spread."""
    spread = math.exp(1.6448536269514722 * pair.log_sd)
    return Band(pair.level_mg_per_L, pair.level_mg_per_L / spread, pair.level_mg_per_L * spread)


def chance_of_negative_km(first: SteadyPair, second: SteadyPair) -> float:
    """Exact chance that the spread of the levels turns Km negative."""
    return formulas.chance_of_inadmissible_pair(
        rate1_mg_per_day=first.rate_mg_per_day,
        level1_mg_per_L=first.level_mg_per_L,
        rate2_mg_per_day=second.rate_mg_per_day,
        level2_mg_per_L=second.level_mg_per_L,
        log_sd1=first.log_sd,
        log_sd2=second.log_sd,
    )


def refuse_impossible(low: SteadyPair, high: SteadyPair, *, by_the_hour: bool = False) -> None:
    """CannotEstimate with the physical reason where no saturable curve passes through the pair."""
    reason = formulas.pair_refusal(
        rate1_mg_per_day=low.rate_mg_per_day,
        level1_mg_per_L=low.level_mg_per_L,
        rate2_mg_per_day=high.rate_mg_per_day,
        level2_mg_per_L=high.level_mg_per_L,
    )
    if reason is None:
        return
    per, unit = (24.0, "mg/h") if by_the_hour else (1.0, "mg/day")
    r1, r2 = (show(p.rate_mg_per_day / per, unit, 4) for p in (low, high))
    c1, c2 = (show(p.level_mg_per_L, "mg/L", 4) for p in (low, high))
    if reason == "same rate":
        raise CannotEstimate(
            found=f"Both levels ({c1} and {c2}) belong to the same dose rate ({r1} of active drug).",
            why="Two levels on one dose rate give one point of the curve, so Vmax and Km cannot be told apart.",
            helps="Add a level on a different dose, or use the whole record with population knowledge.",
        )
    if reason == "higher rate, level not higher":
        raise CannotEstimate(
            found=f"The higher dose rate ({r2} of active drug) has the level {c2}, the lower one ({r1}) {c1}.",
            why="A higher dose cannot lead to an equal or lower steady level in the same patient.",
            helps=(
                "Check which doses were really taken, whether both levels were drawn at steady state, "
                "interacting drugs or tube feeds started or stopped, and the units."
            ),
        )
    percent_dose = show_number(100 * (high.rate_mg_per_day / low.rate_mg_per_day - 1), 2)
    percent_level = show_number(100 * (high.level_mg_per_L / low.level_mg_per_L - 1), 2)
    raise CannotEstimate(
        found=(
            f"From {r1} to {r2} of active drug (+{percent_dose} %) the level rose from {c1} to {c2} "
            f"(+{percent_level} %)."
        ),
        why="With saturable elimination a level must rise more than in proportion to the dose, so Km cannot be found.",
        helps=(
            "Check doses taken, sampling times (the second level may have been drawn too early) and units, "
            "or add a level."
        ),
    )


def _normals(dimensions: int, n: int) -> Floats:
    """Evenly spread standard normals, shape (dimensions, n); the same every time.

    An additive recurrence with the powers of the root of x^(d+1) = x + 1 (the generalised golden ratio): as
    even as a Sobol sequence in a few dimensions, without the half second that importing one costs.
    """
    from scipy.special import ndtri

    root = 2.0
    for _ in range(60):
        root = (1 + root) ** (1 / (dimensions + 1))
    steps = root ** -np.arange(1, dimensions + 1)[:, None]
    points = (0.5 + steps * np.arange(1, n + 1)[None, :]) % 1.0
    return np.asarray(ndtri(np.clip(points, 1e-12, 1 - 1e-12)), dtype=np.float64)
