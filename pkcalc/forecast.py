"""What a dose rate would lead to: steady level, chances against the target, time to settle, sensitivity."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pkcalc import formulas
from pkcalc.estimate.result import Band, Estimate, band
from pkcalc.levels import LabScale


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
    present_mg_per_L: float = 0.0,
) -> Forecast:
    """Distribution of the steady level of a constant rate of active drug under the estimate's draws."""
    vmax, km, weights = estimate.vmax_mg_per_day, estimate.km_mg_per_L, estimate.weights
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=rate_mg_per_day, vmax_mg_per_day=vmax, km_mg_per_L=km
    )
    none = ~np.isfinite(steady)
    p_none = float(np.sum(weights[none]))
    below = float(np.sum(weights[steady < goal.low_mg_per_L]))
    above = float(np.sum(weights[steady > goal.high_mg_per_L]))
    settle = None
    if estimate.volume_L is not None:
        days = formulas.time_to_fraction(
            fraction=0.9,
            dose_rate_mg_per_day=rate_mg_per_day,
            vmax_mg_per_day=vmax,
            km_mg_per_L=km,
            volume_L=estimate.volume_L,
            start_mg_per_L=present_mg_per_L,
        )
        settle = band(np.asarray(days, dtype=np.float64), weights)
    levels = band(steady, weights)
    point = float(
        formulas.steady_state_level(
            dose_rate_mg_per_day=rate_mg_per_day,
            vmax_mg_per_day=estimate.point.vmax_mg_per_day,
            km_mg_per_L=estimate.point.km_mg_per_L,
        )
    )
    rise = float(
        formulas.sensitivity_at(
            dose_rate_mg_per_day=rate_mg_per_day, vmax_mg_per_day=estimate.point.vmax_mg_per_day
        )
    )
    return Forecast(
        rate_mg_per_day=rate_mg_per_day,
        steady=levels,
        total=scaled(levels, scale.total_factor),
        free=scaled(levels, scale.free_fraction),
        below=below,
        within=max(0.0, 1.0 - below - above),
        above=above,
        above_critical=float(np.sum(weights[steady > goal.critical_mg_per_L])),
        no_steady_state=p_none,
        settle_days=settle,
        percent_per_percent=rise,
        point_mg_per_L=point,
    )


def scaled(levels: Band, factor: float) -> Band:
    """A band on another scale; "no steady state" stays what it is."""
    return Band(levels.median * factor, levels.low * factor, levels.high * factor)


def rate_for_level(estimate: Estimate, level_mg_per_L: float) -> Band:
    """Dose rate of active drug (mg/day) that holds a level, with its 90 % interval: R = Vmax C / (Km + C)."""
    rates = formulas.dose_rate_for_level(
        level_mg_per_L=level_mg_per_L, vmax_mg_per_day=estimate.vmax_mg_per_day, km_mg_per_L=estimate.km_mg_per_L
    )
    return band(np.asarray(rates, dtype=np.float64), estimate.weights)
