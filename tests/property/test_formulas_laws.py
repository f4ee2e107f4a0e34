"""What must hold of the formulas for any patient, and a second way for each with 120 digits (mpmath)."""

from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from pkcalc import formulas as f

EPS = 2.2e-16


def log_uniform(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(math.log(low), math.log(high)).map(math.exp)


# the clinical range (Vmax 100 to 2,000 mg/day, Km 1 to 20 mg/L, V 10 to 100 L) and well beyond it
vmaxes = log_uniform(10, 1e5)
kms = log_uniform(1e-3, 200)
volumes = log_uniform(1, 500)
levels = st.one_of(st.just(0.0), log_uniform(1e-3, 500))
shares = st.one_of(st.just(0.0), st.just(1.0), st.floats(1e-6, 3))  # dose rate over Vmax
times = log_uniform(1e-3, 100)
clearances = st.one_of(st.just(0.0), log_uniform(1e-4, 1e3))


def way(c0: float, r: float, v: float, km: float) -> dict[str, float]:
    return {
        "start_mg_per_L": c0,
        "dose_rate_mg_per_day": r,
        "vmax_mg_per_day": v,
        "km_mg_per_L": km,
        "volume_L": 1.0,
    }


def exact_level(t: float, c0: float, r: float, v: float, km: float) -> mp.mpf:
    """By the Lambert W function (both branches), with enough digits for its cancellation and overflow.

    r < v:  C = Css + (Km + Css) ... through W of the integrated equation; r = v: the square-root formula.
    """
    t, c0, r, v, km = (mp.mpf(x) for x in (t, c0, r, v, km))
    if r == v:
        return mp.sqrt((km + c0) ** 2 + 2 * v * km * t) - km
    d = v - r
    css = r * km / d
    # (C - Css) e^{(C - Css)/A} = (C0 - Css) e^{(C0 - Css - d t)/A}, A = v Km / d
    a = v * km / d
    y0 = c0 - css
    if y0 == 0:
        return c0
    argument = y0 / a * mp.exp((y0 - d * t) / a)
    branch = -1 if y0 / a < -1 else 0
    return css + a * mp.lambertw(argument, branch).real


@given(times, levels, shares, vmaxes, kms)
def test_level_after_against_120_digits(t: float, c0: float, share: float, v: float, km: float) -> None:
    r = share * v
    ours = float(f.level_after(time_day=t, **way(c0, r, v, km)))
    assert ours >= 0
    if c0 == r == 0:
        assert ours == 0
        return
    with mp.workdps(120):
        exact = exact_level(t, c0, r, v, km)
        if not exact > 1e-250:
            return
        # condition: by what the level moves, relatively, for a relative change of any input
        here = mp.mpf(v) * exact / (km + exact)
        moved = (mp.mpf(r) + here) * t + c0
        condition = float(1 + moved / exact)
        error = abs(float(ours / exact - 1))
    assert error <= 8 * EPS * (1 + condition), (ours, exact, condition)


@settings(max_examples=40)
@given(times, levels, shares, vmaxes, kms, clearances)
def test_mass_balance(t: float, c0: float, share: float, v: float, km: float, k: float) -> None:
    """What came in is what is there plus what went: by quadrature of the elimination along the course."""
    r = share * v
    one = way(c0, r, v, km)
    end = float(f.level_after(time_day=t, linear_clearance_L_per_day=k, **one))

    def out(s: float) -> float:
        c = float(f.level_after(time_day=s, linear_clearance_L_per_day=k, **one))
        return v * c / (km + c) + k * c

    if (v / km + k) * t > 50:
        return
    gone, _ = quad(out, 0, t, epsabs=0, epsrel=1e-8, limit=200)
    assert math.isclose(c0 + r * t, end + gone, rel_tol=1e-6)


@given(times, times, levels, shares, vmaxes, kms, clearances)
def test_two_times_in_a_row_are_one(
    t1: float, t2: float, c0: float, share: float, v: float, km: float, k: float
) -> None:
    r = share * v
    one = way(c0, r, v, km)
    once = float(f.level_after(time_day=t1 + t2, linear_clearance_L_per_day=k, **one))
    middle = float(f.level_after(time_day=t1, linear_clearance_L_per_day=k, **one))
    twice = float(f.level_after(time_day=t2, linear_clearance_L_per_day=k, **dict(one, start_mg_per_L=middle)))
    if once < 1e-250:
        return
    condition = 1 + ((r + v * once / (km + once) + k * once) * (t1 + t2) + c0) / once
    assert math.isclose(once, twice, rel_tol=64 * EPS * (1 + condition) + 1e-13)


@given(times, levels, shares, vmaxes, kms, clearances, log_uniform(0.01, 100))
def test_scaling(t: float, c0: float, share: float, v: float, km: float, k: float, s: float) -> None:
    """Levels, Km and rates all times s give levels times s; a clock that runs s times as fast changes nothing."""
    r = share * v
    base = float(f.level_after(time_day=t, linear_clearance_L_per_day=k, **way(c0, r, v, km)))
    larger = f.level_after(time_day=t, linear_clearance_L_per_day=k, **way(s * c0, s * r, s * v, s * km))
    faster = f.level_after(time_day=t / s, linear_clearance_L_per_day=s * k, **way(c0, s * r, s * v, km))
    if base < 1e-200:
        return
    condition = 1 + ((r + v * base / (km + base) + k * base) * t + c0) / base
    allowed = 64 * EPS * (1 + condition) + 1e-13
    assert math.isclose(float(larger) / s, base, rel_tol=allowed)
    assert math.isclose(float(faster), base, rel_tol=allowed)


@given(times, levels, shares, vmaxes, kms, clearances, st.floats(1.01, 3))
def test_ordering(t: float, c0: float, share: float, v: float, km: float, k: float, more: float) -> None:
    """More at the start, a higher rate, a smaller Vmax, a larger Km, a smaller clearance: never a lower level."""
    r = share * v

    def at(c: float, rate: float, vmax: float, k_m: float, cl: float) -> float:
        return float(f.level_after(time_day=t, linear_clearance_L_per_day=cl, **way(c, rate, vmax, k_m)))

    base = at(c0, r, v, km, k)
    room = 1e-12 * (base + 1e-300) * (1 + (r + v + k * base) * t / max(base, 1e-300))
    for other in (
        at(c0 * more, r, v, km, k),
        at(c0, r * more, v, km, k),
        at(c0, r, v / more, km, k),
        at(c0, r, v, km * more, k),
        at(c0, r, v, km, k / more),
    ):
        assert other >= base - room


@given(times, st.floats(0, 0.999), vmaxes, kms, clearances)
def test_the_steady_level_is_a_fixed_point(t: float, share: float, v: float, km: float, k: float) -> None:
    r = share * v
    steady = float(
        f.steady_state_level(dose_rate_mg_per_day=r, vmax_mg_per_day=v, km_mg_per_L=km, linear_clearance_L_per_day=k)
    )
    after = f.level_after(time_day=t, linear_clearance_L_per_day=k, **way(steady, r, v, km))
    assert math.isclose(float(after), steady, rel_tol=1e-12 / (1 - share))


@given(times, levels, vmaxes, st.floats(0, 3))
def test_linear_limit(t: float, c0: float, v: float, share: float) -> None:
    """Km far above the level: one compartment, first order, rate Vmax/(Km V)."""
    rate_constant = 0.3
    km = v / rate_constant * 1e9
    one = way(c0, share * v, rate_constant * km, km)
    e = math.exp(-rate_constant * t)
    expected = c0 * e + share * v / rate_constant * (1 - e)
    found = float(f.level_after(time_day=t, **one))
    assert math.isclose(found, expected, rel_tol=1e-7 * (1 + (c0 + share * v * t) / v))


@given(levels, shares, vmaxes, kms, clearances, times)
def test_time_to_a_level_and_back(c0: float, share: float, v: float, km: float, k: float, t: float) -> None:
    """The time to the level reached after t is t, wherever the level still moves."""
    r = share * v
    one = way(c0, r, v, km)
    end = float(f.level_after(time_day=t, linear_clearance_L_per_day=k, **one))
    back = float(f.time_to_level(end_mg_per_L=end, linear_clearance_L_per_day=k, **one))
    change = abs(r - v * end / (km + end) - k * end)
    if end < 1e-200 or change * t < 1e-6 * end or abs(end - c0) < 1e-6 * end:
        return
    slack = 64 * EPS * (end + (r + v + k * end) * t + c0) / change
    assert abs(back - t) <= 1e-11 * t + slack


@given(st.floats(0.01, 0.999), st.floats(0.01, 0.99), vmaxes, kms, volumes, levels)
def test_time_to_a_fraction_by_quadrature(
    share: float, fraction: float, vmax: float, km: float, volume: float, c0: float
) -> None:
    rate = share * vmax
    steady = km * share / (1 - share)
    found = f.time_to_fraction(
        fraction=fraction,
        dose_rate_mg_per_day=rate,
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        volume_L=volume,
        start_mg_per_L=c0,
    )
    with mp.workdps(40):
        d = (mp.mpf(vmax) - rate) / volume
        css = mp.mpf(rate) * km / (mp.mpf(vmax) - rate)
        exact = (-(km + css) * mp.log(1 - mp.mpf(fraction)) - fraction * (css - c0)) / d
    assert math.isclose(float(found), float(exact), rel_tol=1e-12 / (1 - share))
    assert steady >= 0


@given(times, levels, shares, vmaxes, kms)
def test_area_against_the_textbook_form(t: float, c0: float, share: float, v: float, km: float) -> None:
    """[ (C0^2 - C^2)/2 + Km (C0 + r t - C) ] / (v - r), with digits to spare; at r = v by the cubes."""
    r = share * v
    ours = float(f.auc(time_day=t, **way(c0, r, v, km)))
    if c0 == r == 0 or v * t / km > 2000:
        return
    with mp.workdps(80):
        c = exact_level(t, c0, r, v, km)
        t_, c0_, r_, v_, km_ = (mp.mpf(x) for x in (t, c0, r, v, km))
        if r == v:
            exact = ((km_ + c) ** 3 - (km_ + c0_) ** 3) / (3 * km_ * v_) - km_ * t_
        else:
            exact = ((c0_**2 - c**2) / 2 + km_ * (c0_ + r_ * t_ - c)) / (v_ - r_)
    assert math.isclose(ours, float(exact), rel_tol=1e-12)


@settings(max_examples=40)
@given(log_uniform(1e-2, 30), levels, shares, vmaxes, kms, log_uniform(1e-3, 30))
def test_area_with_a_linear_path_by_quadrature(
    t: float, c0: float, share: float, v: float, km: float, k: float
) -> None:
    one = way(c0, share * v, v, km)
    if (v / km + k) * t > 50 or c0 == share == 0:
        return
    ours = f.auc(time_day=t, linear_clearance_L_per_day=k, **one)
    area, _ = quad(
        lambda s: float(f.level_after(time_day=s, linear_clearance_L_per_day=k, **one)),
        0,
        t,
        epsabs=0,
        epsrel=1e-9,
        limit=200,
    )
    assert math.isclose(float(ours), area, rel_tol=1e-7)


@given(st.floats(0, 0.9999), vmaxes, kms)
def test_steady_level_and_dose_rate_are_inverse(share: float, vmax: float, km: float) -> None:
    level = f.steady_state_level(dose_rate_mg_per_day=share * vmax, vmax_mg_per_day=vmax, km_mg_per_L=km)
    rate = f.dose_rate_for_level(level_mg_per_L=level, vmax_mg_per_day=vmax, km_mg_per_L=km)
    assert math.isclose(float(rate), share * vmax, rel_tol=1e-13)


@given(vmaxes, kms, st.floats(0.02, 0.98), st.floats(0.02, 0.98))
def test_two_levels_of_a_patient_give_the_patient_back(vmax: float, km: float, a: float, b: float) -> None:
    if abs(a - b) < 0.01:
        return
    found = f.two_level(
        rate1_mg_per_day=a * vmax,
        level1_mg_per_L=km * a / (1 - a),
        rate2_mg_per_day=b * vmax,
        level2_mg_per_L=km * b / (1 - b),
    )
    assert found.admissible
    assert math.isclose(found.km_mg_per_L, km, rel_tol=1e-10)
    assert math.isclose(found.vmax_mg_per_day, vmax, rel_tol=1e-10)


@given(log_uniform(1, 5000), log_uniform(0.1, 200), log_uniform(1, 5000), log_uniform(0.1, 200))
def test_a_pair_is_either_admissible_or_refused(r1: float, c1: float, r2: float, c2: float) -> None:
    pair = {"rate1_mg_per_day": r1, "level1_mg_per_L": c1, "rate2_mg_per_day": r2, "level2_mg_per_L": c2}
    found = f.two_level(**pair)
    assert bool(found.admissible) == (f.pair_refusal(**pair) is None)
    if found.admissible:
        assert found.km_mg_per_L > 0
        assert found.vmax_mg_per_day > max(r1, r2) * (1 - 1e-12)


@pytest.mark.slow
def test_level_after_against_120_digits_on_many() -> None:
    rng = np.random.default_rng(5)
    for _ in range(4000):
        v, km = 10 ** rng.uniform(0.5, 4), 10 ** rng.uniform(-3, 2)
        near = 1 + rng.choice([-1, 1]) * 10 ** rng.uniform(-15, -1)
        r = v * (near if rng.random() < 0.4 else rng.uniform(0, 3))
        c0 = 0.0 if rng.random() < 0.2 else 10 ** rng.uniform(-3, 3)
        t = 10 ** rng.uniform(-3, 2)
        ours = float(f.level_after(time_day=t, **way(c0, r, v, km)))
        with mp.workdps(120):
            exact = exact_level(t, c0, r, v, km)
            if not exact > 1e-250:
                continue
            here = mp.mpf(v) * exact / (km + exact)
            condition = float(1 + ((mp.mpf(r) + here) * t + c0) / exact)
            assert abs(float(ours / exact - 1)) <= 8 * EPS * (1 + condition), (t, c0, r, v, km)
