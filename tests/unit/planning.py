"""Estimates and settings for the tests of the plan."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from pkcalc import plan as planning
from pkcalc.drugs.profile import Profile, load_profile
from pkcalc.estimate.pair import VolumeSpread, from_steady_levels
from pkcalc.estimate.result import Estimate, Point, band, log_correlation
from pkcalc.forecast import Goal
from pkcalc.levels import LabScale, observe
from pkcalc.plan.candidates import Setting
from pkcalc.site import Site, no_site
from pkcalc.steadiness import steady_pairs
from tests.unit.cases import plain

GOAL = Goal(10.0, 20.0, 30.0, 15.0, "usual range")
SCALE = LabScale(1.0, 0.1, "as measured")


def profile() -> Profile:
    return load_profile("phenytoin")


def estimate(
    vmax: float = 450.0,
    km: float = 5.0,
    volume: float | None = 49.0,
    *,
    spread: tuple[float, float, float] = (0.15, 0.3, 0.15),
    n: int = 2048,
    seed: int = 7,
) -> Estimate:
    """Log-normal draws around a patient."""
    z = np.random.default_rng(seed).standard_normal((3, n))
    vm, k = vmax * np.exp(spread[0] * z[0]), km * np.exp(spread[1] * z[1])
    v = None if volume is None else volume * np.exp(spread[2] * z[2])
    w = np.full(n, 1.0 / n)
    summary = {"vmax_mg_per_day": band(vm, w), "km_mg_per_L": band(k, w)}
    if v is not None:
        summary["volume_L"] = band(v, w)
    return Estimate(
        method="two levels",
        vmax_mg_per_day=vm,
        km_mg_per_L=k,
        volume_L=v,
        weights=w,
        point=Point(vmax, km, volume, "posterior median"),
        summary=summary,
        correlation=log_correlation(vm, k, w),
        volume_from="none" if volume is None else "population",
    )


def exact(vmax: float = 450.0, km: float = 5.0, volume: float | None = 49.0) -> Estimate:
    """One patient known without error."""
    return estimate(vmax, km, volume, spread=(0.0, 0.0, 0.0), n=8)


def setting(est: Estimate | None = None, **changes: Any) -> Setting:
    est = est or estimate()
    plain = Setting(
        profile=profile(),
        site=no_site(),
        goal=GOAL,
        scale=SCALE,
        central=est,
        taken=est,
        start_mg_per_L=8.0,
        draw_days=3.0,
        present_mg_per_day=276.0,
        largest_mg_per_day=552.0,
    )
    return replace(plain, **changes)


def plan(
    site: Site | None = None, est: Estimate | None = None, stops: frozenset[str] = frozenset(), **changes: Any
) -> planning.Plan:
    """The plan of the plain case with parts replaced, straight from an estimate (no record is fitted): the two-level
    one where the case has two steady levels, else a made-up one."""
    case = plain(**{"plan": {"shelf": "united-states"}, **changes})
    site = site or no_site()
    observations = observe(case, profile(), site)
    pairs = steady_pairs(case, profile(), observations)
    weight = case.patient.weight_kg
    volume = None if weight is None else VolumeSpread(0.7 * weight, 0.2)
    if est is None:
        est = from_steady_levels(*pairs, volume=volume) if len(pairs) == 2 else estimate()
    return planning.make(
        case, profile(), site, estimate=est, goal=GOAL, scale=SCALE, observations=observations, stops=stops
    )
