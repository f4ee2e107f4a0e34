"""The formulas on values a reader can check by eye, at the edges of their domain, and their shapes."""

from __future__ import annotations

import inspect
import math

import numpy as np
import pytest

from pkcalc import formulas as f

PATIENT = {"vmax_mg_per_day": 400.0, "km_mg_per_L": 4.0}


def test_half_of_vmax_settles_at_km() -> None:
    assert f.steady_state_level(dose_rate_mg_per_day=200.0, **PATIENT) == 4.0
    assert f.dose_rate_for_level(level_mg_per_L=4.0, **PATIENT) == 200.0
    assert f.sensitivity_at(dose_rate_mg_per_day=200.0, vmax_mg_per_day=400.0) == 2.0
    assert f.clearance_at_level(level_mg_per_L=4.0, **PATIENT) == 50.0


def test_at_or_above_vmax_there_is_no_steady_state() -> None:
    rates = np.array([399.0, 400.0, 401.0])
    level = f.steady_state_level(dose_rate_mg_per_day=rates, **PATIENT)
    assert level[0] == 4.0 * 399.0
    assert np.all(level[1:] == np.inf)
    sensitivity = f.sensitivity_at(dose_rate_mg_per_day=rates, vmax_mg_per_day=400.0)
    assert sensitivity[0] == 400.0
    assert np.all(sensitivity[1:] == np.inf)
    time = f.time_to_fraction(fraction=0.9, dose_rate_mg_per_day=rates, volume_L=50.0, **PATIENT)
    assert np.isfinite(time[0])
    assert np.all(time[1:] == np.inf)


def test_a_linear_path_always_gives_a_steady_level() -> None:
    for rate in (1.0, 399.999, 400.0, 400.001, 5000.0):
        for clearance in (1e-9, 0.01, 3.0, 500.0):
            level = f.steady_state_level(dose_rate_mg_per_day=rate, linear_clearance_L_per_day=clearance, **PATIENT)
            back = f.dose_rate_for_level(level_mg_per_L=level, linear_clearance_L_per_day=clearance, **PATIENT)
            assert math.isclose(back, rate, rel_tol=1e-12)


def test_sensitivity_with_a_linear_path_is_the_slope_of_the_steady_level() -> None:
    one = {"linear_clearance_L_per_day": 2.0, **PATIENT}
    up, down = (f.steady_state_level(dose_rate_mg_per_day=350.0 * s, **one) for s in (1.0001, 0.9999))
    slope = float(np.log(up / down) / np.log(1.0001 / 0.9999))
    assert math.isclose(f.sensitivity_with_linear_path(dose_rate_mg_per_day=350.0, **one), slope, rel_tol=1e-7)
    none = f.sensitivity_with_linear_path(
        dose_rate_mg_per_day=[350.0, 400.0], linear_clearance_L_per_day=0.0, **PATIENT
    )
    assert math.isclose(none[0], 8.0, rel_tol=1e-12)
    assert none[1] == np.inf


def test_two_levels_give_back_the_patient_whatever_their_order() -> None:
    pair = {
        "rate1_mg_per_day": 200.0,
        "level1_mg_per_L": 4.0,
        "rate2_mg_per_day": 300.0,
        "level2_mg_per_L": 12.0,
    }
    swapped = {
        "rate1_mg_per_day": 300.0,
        "level1_mg_per_L": 12.0,
        "rate2_mg_per_day": 200.0,
        "level2_mg_per_L": 4.0,
    }
    for one in (pair, swapped):
        found = f.two_level(**one)
        assert (found.km_mg_per_L, found.vmax_mg_per_day, bool(found.admissible)) == (4.0, 400.0, True)
        assert f.pair_refusal(**one) is None


@pytest.mark.parametrize(
    ("rate2", "level2", "reason"),
    [
        (200.0, 8.0, "same rate"),
        (200.0, 4.0, "same rate"),
        (300.0, 4.0, "higher rate, level not higher"),
        (300.0, 3.0, "higher rate, level not higher"),
        (300.0, 6.0, "level rose less than in proportion"),
        (300.0, 5.0, "level rose less than in proportion"),
    ],
)
def test_impossible_pairs_give_no_number_and_one_reason(rate2: float, level2: float, reason: str) -> None:
    first, second = (200.0, 4.0), (rate2, level2)
    for (r1, c1), (r2, c2) in ((first, second), (second, first)):
        pair = {"rate1_mg_per_day": r1, "level1_mg_per_L": c1, "rate2_mg_per_day": r2, "level2_mg_per_L": c2}
        found = f.two_level(**pair)
        assert not found.admissible
        assert found.km_mg_per_L == found.vmax_mg_per_day == np.inf
        assert f.pair_refusal(**pair) == reason


def test_chance_of_an_inadmissible_pair() -> None:
    """By simulation: a million pairs of levels with the stated errors."""
    pair = {
        "rate1_mg_per_day": 250.0,
        "level1_mg_per_L": 8.0,
        "rate2_mg_per_day": 300.0,
        "level2_mg_per_L": 12.0,
    }
    chance = f.chance_of_inadmissible_pair(**pair, log_sd1=0.15, log_sd2=0.25)
    z = np.random.default_rng(3).standard_normal((2, 1_000_000))
    drawn = f.two_level(
        rate1_mg_per_day=250.0,
        level1_mg_per_L=8.0 * np.exp(0.15 * z[0]),
        rate2_mg_per_day=300.0,
        level2_mg_per_L=12.0 * np.exp(0.25 * z[1]),
    )
    assert abs(chance - np.mean(~drawn.admissible)) < 4 * math.sqrt(chance * (1 - chance) / 1e6)
    assert f.chance_of_inadmissible_pair(**pair, log_sd1=0.0, log_sd2=0.0) == 0.0
    proportional = dict(pair, level2_mg_per_L=9.6)
    assert f.chance_of_inadmissible_pair(**proportional, log_sd1=0.1, log_sd2=0.1) == pytest.approx(0.5)


def test_times_that_are_never_reached_are_infinite() -> None:
    one = {"dose_rate_mg_per_day": 300.0, "volume_L": 50.0, **PATIENT}  # settles at 12 mg/L
    for start, end in (
        (5.0, 12.0),
        (5.0, 13.0),
        (20.0, 12.0),
        (20.0, 11.0),
        (5.0, 4.0),
        (20.0, 21.0),
        (12.0, 5.0),
    ):
        assert f.time_to_level(start_mg_per_L=start, end_mg_per_L=end, **one) == np.inf, (start, end)
    assert f.time_to_level(start_mg_per_L=5.0, end_mg_per_L=5.0, **one) == 0.0
    assert np.isfinite(f.time_to_level(start_mg_per_L=5.0, end_mg_per_L=11.9, **one))
    fall = {"volume_L": 50.0, **PATIENT}
    assert f.time_to_fall(start_mg_per_L=5.0, end_mg_per_L=0.0, **fall) == np.inf
    assert f.time_to_fall(start_mg_per_L=5.0, end_mg_per_L=6.0, **fall) == np.inf
    assert f.time_to_fall(start_mg_per_L=5.0, end_mg_per_L=5.0, **fall) == 0.0


def test_time_to_fall_is_the_textbook_formula() -> None:
    expected = 50.0 * ((30.0 - 15.0) + 4.0 * math.log(2.0)) / 400.0
    found = f.time_to_fall(start_mg_per_L=30.0, end_mg_per_L=15.0, volume_L=50.0, **PATIENT)
    assert math.isclose(found, expected, rel_tol=1e-14)


def test_nothing_given_and_nothing_there_stays_nothing() -> None:
    one = {"time_day": 3.0, "start_mg_per_L": 0.0, "dose_rate_mg_per_day": 0.0, "volume_L": 50.0, **PATIENT}
    for clearance in (0.0, 2.0):
        assert f.level_after(**one, linear_clearance_L_per_day=clearance) == 0.0
        assert f.auc(**one, linear_clearance_L_per_day=clearance) == 0.0
    assert f.level_after(**dict(one, time_day=0.0, start_mg_per_L=7.0)) == 7.0


def test_area_all_the_way_down() -> None:
    """V/Vmax (C0^2/2 + Km C0), the textbook area of one push."""
    area = f.auc(time_day=60.0, start_mg_per_L=20.0, dose_rate_mg_per_day=0.0, volume_L=50.0, **PATIENT)
    assert math.isclose(area, 50.0 / 400.0 * (200.0 + 80.0), rel_tol=1e-12)


def test_halley_needs_at_most_five_steps_and_one_last(monkeypatch: pytest.MonkeyPatch) -> None:
    rng = np.random.default_rng(11)
    n = 4000
    v = np.exp(rng.uniform(-2, 5, n))
    r = v * np.where(
        rng.random(n) < 0.3, 1 + rng.choice([-1, 1], n) * 10 ** rng.uniform(-15, -1, n), rng.uniform(0, 3, n)
    )
    km = 10 ** rng.uniform(-3, 2, n)
    c0 = np.where(rng.random(n) < 0.2, 0.0, 10 ** rng.uniform(-4, 3, n))
    t = 10 ** rng.uniform(-3, 2, n)
    one = {
        "time_day": t,
        "start_mg_per_L": c0,
        "dose_rate_mg_per_day": r,
        "vmax_mg_per_day": v,
        "km_mg_per_L": km,
        "volume_L": 1.0,
    }
    many = f.level_after(**one)
    monkeypatch.setattr(f, "HALLEY_LIMIT", 6)
    few = f.level_after(**one)
    assert np.all(np.isfinite(many))
    assert np.all(many >= 0)
    assert np.array_equal(many, few)


def test_binding() -> None:
    assert f.albumin_break_point(coefficient_dL_per_g=0.2) == pytest.approx(45.0)
    normal = f.normalised_total(total_mg_per_L=7.0, albumin_g_per_L=20.0, coefficient_dL_per_g=0.2)
    assert normal == pytest.approx(14.0)
    above = f.normalised_total(total_mg_per_L=30.0, albumin_g_per_L=46.0, coefficient_dL_per_g=0.2)
    assert above == 30.0
    assert f.binding_denominator(albumin_g_per_L=45.0, coefficient_dL_per_g=0.2) == pytest.approx(1.0)
    assert f.normalised_from_free(free_mg_per_L=1.5, free_fraction=0.1) == pytest.approx(15.0)


def test_weights_and_kidneys() -> None:
    assert f.ideal_body_weight(height_cm=177.8, sex="male") == pytest.approx(73.0)
    assert f.ideal_body_weight(height_cm=162.56, sex="female") == pytest.approx(54.7)
    assert f.ideal_body_weight(height_cm=140.0, sex="female") == 45.5
    excess = f.weight_with_excess(weight_kg=[100.0, 60.0], ideal_weight_kg=70.0, excess_factor=1.33)
    assert excess == pytest.approx([109.9, 60.0])
    renal = {"age_years": 40.0, "weight_kg": 72.0, "creatinine_mg_per_dL": 1.0}
    assert f.creatinine_clearance(**renal, sex="male") == pytest.approx(100.0)
    assert f.creatinine_clearance(**renal, sex="female") == pytest.approx(85.0)


def test_salts_loads_and_moles() -> None:
    assert f.active_amount(amount_mg=400.0, salt_factor=0.92) == pytest.approx(368.0)
    assert f.product_amount(active_mg=368.0, salt_factor=0.92) == pytest.approx(400.0)
    assert f.level_rise(amount_mg=1000.0, volume_L=50.0, salt_factor=1.0) == 20.0
    top_up = {"aim_mg_per_L": 15.0, "volume_L": 49.0, "salt_factor": 1.0}
    assert f.top_up_amount(present_mg_per_L=8.0, **top_up) == 343.0
    assert f.top_up_amount(present_mg_per_L=16.0, **top_up) == 0.0
    assert f.molar_level(level_mg_per_L=1.0, molar_mass_g_per_mol=250.0) == 4.0
    assert f.vmax_from_level(dose_rate_mg_per_day=200.0, level_mg_per_L=4.0, km_mg_per_L=4.0) == 400.0


def public() -> list[tuple[str, object]]:
    return [
        (name, one)
        for name, one in vars(f).items()
        if inspect.isfunction(one) and one.__module__ == f.__name__ and not name.startswith("_")
    ]


def test_every_formula_takes_keywords_only_and_says_what_it_is() -> None:
    assert len(public()) >= 25
    for name, one in public():
        kinds = {p.kind for p in inspect.signature(one).parameters.values()}
        assert kinds == {inspect.Parameter.KEYWORD_ONLY}, name
        assert one.__doc__, name
        assert len(one.__doc__.splitlines()[0]) > 30, name


def test_formulas_broadcast_and_keep_single_numbers_single() -> None:
    rates = np.array([[100.0], [200.0], [300.0]])
    level = f.steady_state_level(dose_rate_mg_per_day=rates, vmax_mg_per_day=[400.0, 500.0], km_mg_per_L=4.0)
    assert level.shape == (3, 2)
    assert np.ndim(f.steady_state_level(dose_rate_mg_per_day=200.0, **PATIENT)) == 0


#: Powers of (mass, volume, time) that the endings of names stand for.
DIMENSIONS = {
    "_mg_per_day": (1, 0, -1),
    "_mg_per_L": (1, -1, 0),
    "_L_per_day": (0, 1, -1),
    "_mg": (1, 0, 0),
    "_L": (0, 1, 0),
    "_day": (0, 0, 1),
}
#: What each formula returns, in the same powers, and its arguments without a dimension.
RESULTS: dict[str, tuple[tuple[int, int, int], dict[str, float]]] = {
    "steady_state_level": ((1, -1, 0), {}),
    "dose_rate_for_level": ((1, 0, -1), {}),
    "sensitivity_at": ((0, 0, 0), {}),
    "sensitivity_with_linear_path": ((0, 0, 0), {}),
    "clearance_at_level": ((0, 1, -1), {}),
    "vmax_from_level": ((1, 0, -1), {}),
    "level_after": ((1, -1, 0), {}),
    "auc": ((1, -1, 1), {}),
    "time_to_level": ((0, 0, 1), {}),
    "time_to_fraction": ((0, 0, 1), {"fraction": 0.9}),
    "time_to_fall": ((0, 0, 1), {}),
    "active_amount": ((1, 0, 0), {"salt_factor": 0.92, "bioavailability": 0.8}),
    "level_rise": ((1, -1, 0), {"salt_factor": 0.92, "bioavailability": 0.8}),
    "top_up_amount": ((1, 0, 0), {"salt_factor": 0.92, "bioavailability": 0.8}),
    "chance_of_inadmissible_pair": ((0, 0, 0), {"log_sd1": 0.2, "log_sd2": 0.1}),
}
VALUES = {
    "dose_rate_mg_per_day": 300.0,
    "vmax_mg_per_day": 400.0,
    "km_mg_per_L": 4.0,
    "linear_clearance_L_per_day": 3.0,
    "level_mg_per_L": 9.0,
    "start_mg_per_L": 9.0,
    "end_mg_per_L": 5.0,
    "present_mg_per_L": 5.0,
    "aim_mg_per_L": 15.0,
    "volume_L": 50.0,
    "time_day": 2.5,
    "amount_mg": 700.0,
    "rate1_mg_per_day": 250.0,
    "level1_mg_per_L": 8.0,
    "rate2_mg_per_day": 300.0,
    "level2_mg_per_L": 12.0,
}


def dimension_of(name: str) -> tuple[int, int, int]:
    return next(powers for ending, powers in DIMENSIONS.items() if name.endswith(ending))


@pytest.mark.parametrize("name", sorted(RESULTS))
def test_dimensions(name: str) -> None:
    """In other units of mass, volume and time the same thing comes out: every term of a formula has its dimension."""
    result, plain = RESULTS[name]
    formula = getattr(f, name)
    arguments = {n: VALUES[n] for n in inspect.signature(formula).parameters if n not in plain}
    if name == "time_to_level":
        arguments["dose_rate_mg_per_day"] = 100.0
    base = formula(**arguments, **plain)
    assert np.isfinite(base)
    units = (3.7, 0.29, 11.3)

    def factor(powers: tuple[int, int, int]) -> float:
        return math.prod(u**p for u, p in zip(units, powers, strict=True))

    changed = {n: v * factor(dimension_of(n)) for n, v in arguments.items()}
    assert math.isclose(formula(**changed, **plain), base * factor(result), rel_tol=1e-12)


def test_dimensions_of_the_two_levels() -> None:
    pair = {n: VALUES[n] for n in inspect.signature(f.two_level).parameters}
    base = f.two_level(**pair)
    changed = f.two_level(**{n: v * (7.0 if n.startswith("rate") else 0.3) for n, v in pair.items()})
    assert changed.vmax_mg_per_day == pytest.approx(7.0 * base.vmax_mg_per_day, rel=1e-12)
    assert changed.km_mg_per_L == pytest.approx(0.3 * base.km_mg_per_L, rel=1e-12)
