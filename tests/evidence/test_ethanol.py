"""Ethanol, salicylate and theophylline against what is published about them, and the hour-scale engine against an
adaptive integrator with a dialysis session in the middle. The published single numbers stand in
pkcalc/evidence/ethanol.toml (J1 to J7) and run with the other examples.
"""

from __future__ import annotations

import itertools
import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from pkcalc import flow, formulas
from pkcalc.consult import run_consult
from pkcalc.drugs.profile import Prior, load_profile
from pkcalc.given import given_record
from tests.unit.drug_cases import SESSION, ethanol


def prior(drug: str, population: str) -> Prior:
    return load_profile(drug).populations[population].at(70, 40)


def by_integration(
    times_h: list[float], clearance_L_per_h: float, vmax: float, km: float, volume: float
) -> list[float]:
    """Load 52.47 g over 1 h, then 7.653 g/h, dialysis from 5 to 9 h; mg, L, h. Written out apart from the engine."""

    def rate(t: float) -> float:
        return 665 * 78.9 if t < 1 else 97 * 78.9

    def change(t: float, y: np.ndarray, given: float, out: float) -> list[float]:
        return [(given - out * y[0]) / volume - vmax / volume * y[0] / (km + y[0])]

    levels = {0.0: 0.0}
    edges = sorted({0.0, 1.0, 5.0, 9.0, *times_h})
    level = 0.0
    for a, b in itertools.pairwise(edges):
        out = clearance_L_per_h if 5 <= a < 9 else 0.0
        done = solve_ivp(change, (a, b), [level], args=(rate(a), out), method="DOP853", rtol=1e-12, atol=1e-12)
        level = float(done.y[0, -1])
        levels[b] = level
    return [levels[t] for t in times_h]


@pytest.mark.parametrize(("accuracy", "allowed"), [("everyday", 3e-3), ("finest", 1e-6)])
def test_a_dialysis_session_in_the_middle_against_solve_ivp(accuracy: flow.Accuracy, allowed: float) -> None:
    case = ethanol(dialysis=[SESSION], now="2026-06-02 20:00")
    record = given_record(case, load_profile("ethanol"))
    times = [0.5, 1.0, 2.0, 4.9, 5.5, 7.0, 9.0, 10.0, 12.0]
    for vmax, km, volume in ((8750.0, 138.0, 42.0), (5250.0, 27.0, 35.8), (12250.0, 250.0, 50.0)):
        expected = by_integration(times, 140 * 60 / 1000, vmax, km, volume)
        ours = flow.levels(record, [t / 24 for t in times], 24 * vmax, km, volume, accuracy=accuracy)[0]
        assert ours == pytest.approx(expected, rel=allowed)
        without = flow.levels(
            given_record(ethanol(now="2026-06-02 20:00"), load_profile("ethanol")), [9 / 24], 24 * vmax, km, volume
        )
        assert without[0, 0] > 1.3 * expected[6], "the session must matter"


def test_the_projection_follows_the_same_course() -> None:
    """The median of the projected levels stays near the course of the median parameters, session included."""
    consult = run_consult(ethanol(dialysis=[SESSION]))
    found, chosen = consult.projection, consult.chosen
    assert found is not None
    assert chosen is not None
    p = chosen.point
    assert p.volume_L is not None
    times = [5 + 1 / 6 + m.hours for m in found.paths[0].moments]
    course = by_integration(times, 140 * 60 / 1000, p.vmax_mg_per_day / 24, p.km_mg_per_L, p.volume_L)
    assert [m.level.median for m in found.paths[0].moments] == pytest.approx(course, rel=0.06)


def test_j8_wilkinson_elimination_at_1_g_per_L_lies_among_the_guideline_rates() -> None:
    """Wilkinson 1976 (means of 6, read): 0.232 mg/mL/h and 0.0821 mg/mL; at 0.6 L/kg between 66 and 154 mg/kg/h."""
    rate = float(formulas.dose_rate_for_level(level_mg_per_L=1000.0, vmax_mg_per_day=232 * 0.6 * 24, km_mg_per_L=82.1))
    assert 66 < rate / 24 < 154
    social = prior("ethanol", "average-drinker")
    ours = float(
        formulas.dose_rate_for_level(
            level_mg_per_L=1000.0, vmax_mg_per_day=social.vmax_mg_per_day, km_mg_per_L=social.km_mg_per_L
        )
    )
    assert ours / 24 / 70 == pytest.approx(rate / 24, rel=0.20)


@pytest.mark.parametrize(
    ("population", "slope", "sd"), [("non-drinker", 12, 4), ("average-drinker", 15, 4), ("chronic-drinker", 30, 9)]
)
def test_fall_of_the_level_against_winek(population: str, slope: float, sd: float) -> None:
    """Winek 1984 (read): fall in mg/dL/h, mean and SD, of each group: ours at 1,000 mg/L within two SD."""
    p = prior("ethanol", population)
    after = formulas.level_after(
        time_day=1 / 24,
        start_mg_per_L=1000.0,
        dose_rate_mg_per_day=0.0,
        vmax_mg_per_day=p.vmax_mg_per_day,
        km_mg_per_L=p.km_mg_per_L,
        volume_L=p.volume_L,
    )
    assert abs((1000 - float(after)) / 10 - slope) < 2 * sd


def half_life_h(level: float, p: Prior) -> float:
    """From the rate of fall at a level: ln 2 C / (-dC/dt), by a step of a thousandth of an hour."""
    h = 1e-3
    after = float(
        formulas.level_after(
            time_day=h / 24,
            start_mg_per_L=level,
            dose_rate_mg_per_day=0.0,
            vmax_mg_per_day=p.vmax_mg_per_day,
            km_mg_per_L=p.km_mg_per_L,
            volume_L=p.volume_L,
            linear_clearance_L_per_day=p.first_order_per_day * p.volume_L,
        )
    )
    return math.log(2) * h / math.log(level / after)


def test_j14_salicylate_half_life_grows_from_hours_to_a_day() -> None:
    """Rowland & Tozer, chapter 16, page 506 (read): 2 to 3 h at a low dose, about 24 h above 10 g.

    The limits are 0.693 V/(CL + Vmax/Km) and 0.693 V/CL.
    """
    p = prior("salicylate", "volunteers")
    clearance, volume = p.first_order_per_day * p.volume_L / 24, p.volume_L
    low = math.log(2) * volume / (clearance + p.vmax_mg_per_day / 24 / p.km_mg_per_L)
    high = math.log(2) * volume / clearance
    assert half_life_h(1e-3, p) == pytest.approx(low, rel=1e-3)
    assert half_life_h(1e8, p) == pytest.approx(high, rel=1e-3)
    assert 2 <= low <= 3
    assert high == pytest.approx(24, abs=0.5)
    middle = [half_life_h(c, p) for c in (1.0, 10.0, 100.0, 1000.0)]
    assert middle == sorted(middle)


def test_theophylline_has_a_steady_level_at_any_rate_and_is_linear_at_the_ends() -> None:
    """With a first-order path the steady level is finite, in proportion to the dose far below and far above Km."""
    p = prior("theophylline", "adults-1984")
    clearance = p.first_order_per_day * p.volume_L

    def steady(rate: float) -> float:
        return float(
            formulas.steady_state_level(
                dose_rate_mg_per_day=rate,
                vmax_mg_per_day=p.vmax_mg_per_day,
                km_mg_per_L=p.km_mg_per_L,
                linear_clearance_L_per_day=clearance,
            )
        )

    assert math.isfinite(steady(3 * p.vmax_mg_per_day))
    assert steady(1e-3) / 1e-3 == pytest.approx(1 / (clearance + p.vmax_mg_per_day / p.km_mg_per_L), rel=1e-4)
    assert steady(1e7) / 1e7 == pytest.approx(1 / clearance, rel=1e-3)
    assert steady(1000) / steady(500) > 2, "in between it rises more than the dose"
    # Dahlqvist 1984 (read): Km 133 umol/L is 24.0 mg/L; 611 umol/h is 110 mg/h
    mass = load_profile("theophylline").molar_mass_g_per_mol
    assert p.km_mg_per_L == pytest.approx(133 * mass / 1000, abs=0.05)
    assert p.vmax_mg_per_day / 24 == pytest.approx(611 * mass / 1000, abs=0.5)


def test_the_parallel_path_alone_is_exponential_decay() -> None:
    p = prior("salicylate", "volunteers")
    k = p.first_order_per_day
    record = flow.Record(start_mg=500.0, first_order=(flow.FirstOrder(rate_per_day=k),))
    times = [0.25, 1.0, 3.0]
    left = flow.amounts(record, times, 1e-9, 1000.0, accuracy="finest")[0]
    assert left == pytest.approx([500 * math.exp(-k * t) for t in times], rel=1e-6)


def test_j11_voriconazole_exposure_rises_two_and_a_half_times() -> None:
    """Label (copy, read): from 200 to 300 mg twice daily the exposure rises 2.5-fold; consistency only."""
    p, form = prior("voriconazole", "teaching"), load_profile("voriconazole").forms["tablet"]
    levels = [
        float(
            formulas.steady_state_level(
                dose_rate_mg_per_day=2 * dose * form.active_fraction,
                vmax_mg_per_day=p.vmax_mg_per_day,
                km_mg_per_L=p.km_mg_per_L,
            )
        )
        for dose in (200, 300)
    ]
    assert levels[1] / levels[0] == pytest.approx(2.5, abs=0.05)
