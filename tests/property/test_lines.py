"""What must hold for any patient: exact levels give the patient back, units and order do not matter."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pkcalc import formulas
from pkcalc.estimate.lines import ABSURD_VMAX, METHODS, LineFailure, SteadyPairs, compare, straight_line
from pkcalc.estimate.regression import level_on_rate, level_profile_limits, rate_on_level
from pkcalc.estimate.result import Estimate
from pkcalc.estimate.trust import check_pairs, verdict

positive = st.floats(min_value=0.01, max_value=1e4, allow_nan=False)


@st.composite
def exact_patients(draw, fewest=3, most=8):
    """A Vmax, a Km and distinct doses as shares of Vmax, so that saturation shows but is not complete."""
    vmax = draw(st.floats(min_value=50, max_value=2000))
    km = draw(st.floats(min_value=0.5, max_value=50))
    shares = draw(st.lists(st.integers(20, 95), min_size=fewest, max_size=most, unique=True))
    return vmax, km, np.array(shares) / 100.0


@st.composite
def noisy_pairs(draw, fewest=3, most=6):
    """Any doses and levels at all, possible or not; doses may repeat."""
    n = draw(st.integers(fewest, most))
    rate = draw(st.lists(st.integers(50, 800), min_size=n, max_size=n))
    level = draw(st.lists(st.floats(0.1, 100), min_size=n, max_size=n))
    spread = draw(st.lists(st.floats(0.02, 0.4), min_size=n, max_size=n))
    return SteadyPairs(np.array(rate), np.array(level), np.array(spread), np.arange(n))


def pairs_of(vmax, km, shares, spread=0.1):
    rate = vmax * shares
    level = km * rate / (vmax - rate)
    return SteadyPairs(rate, level, np.full(len(rate), spread), np.arange(len(rate)))


@given(exact_patients())
@settings(max_examples=60)
def test_exact_levels_give_the_patient_back_by_every_method(patient):
    vmax, km, shares = patient
    results = compare(pairs_of(vmax, km, shares), draws=64)
    for result in results:
        assert isinstance(result, Estimate), result
        assert result.point.vmax_mg_per_day == pytest.approx(vmax, rel=1e-7)
        assert result.point.km_mg_per_L == pytest.approx(km, rel=1e-7)
        assert all(abs(fit.standardised_residual) < 1e-5 for fit in result.fit)


@given(exact_patients())
@settings(max_examples=60)
def test_exact_rates_give_the_curve_back_in_the_laboratory_direction(patient):
    vmax, km, shares = patient
    level = km * shares / (1 - shares)
    fit = rate_on_level(level=level, rate=vmax * shares)
    assert fit.vmax == pytest.approx(vmax, rel=1e-8)
    assert fit.km == pytest.approx(km, rel=1e-8)


@given(exact_patients(fewest=2, most=2))
@settings(max_examples=60)
def test_on_two_pairs_all_methods_are_the_closed_form(patient):
    data = pairs_of(*patient)
    exact = formulas.two_level(
        rate1_mg_per_day=data.rate_mg_per_day[0],
        level1_mg_per_L=data.level_mg_per_L[0],
        rate2_mg_per_day=data.rate_mg_per_day[1],
        level2_mg_per_L=data.level_mg_per_L[1],
    )
    for result in compare(data, draws=64):
        assert isinstance(result, Estimate), result
        assert result.point.vmax_mg_per_day == pytest.approx(float(exact.vmax_mg_per_day), rel=1e-7)
        assert result.point.km_mg_per_L == pytest.approx(float(exact.km_mg_per_L), rel=1e-7)


@given(noisy_pairs(), st.sampled_from([0.25, 4.0, 32.0]), st.sampled_from([0.5, 8.0]))
@settings(max_examples=60)
def test_other_units_of_dose_and_level_change_only_the_units(data, of_rate, of_level):
    """Powers of two, so that the scaling itself is exact and a draw at the edge cannot fall to the other side."""
    scaled = SteadyPairs(data.rate_mg_per_day * of_rate, data.level_mg_per_L * of_level, data.level_log_sd, data.index)
    for one, other in zip(compare(data, draws=64), compare(scaled, draws=64), strict=True):
        assert type(one) is type(other)
        if isinstance(one, LineFailure):
            continue
        assert other.point.vmax_mg_per_day == pytest.approx(of_rate * one.point.vmax_mg_per_day, rel=1e-6)
        assert other.point.km_mg_per_L == pytest.approx(of_level * one.point.km_mg_per_L, rel=1e-6)
        assert other.rejected == pytest.approx(one.rejected, abs=1e-6)
        np.testing.assert_allclose(other.vmax_mg_per_day, of_rate * one.vmax_mg_per_day, rtol=1e-5)
        np.testing.assert_allclose(other.km_mg_per_L, of_level * one.km_mg_per_L, rtol=1e-5)


@given(noisy_pairs(), st.randoms(use_true_random=False))
@settings(max_examples=60)
def test_the_order_of_entry_changes_nothing(data, random):
    order = list(range(len(data)))
    random.shuffle(order)
    shuffled = SteadyPairs(
        data.rate_mg_per_day[order], data.level_mg_per_L[order], data.level_log_sd[order], data.index[order]
    )
    for one, other in zip(compare(data, draws=64), compare(shuffled, draws=64), strict=True):
        assert type(one) is type(other)
        if isinstance(one, LineFailure):
            continue
        assert other.point.vmax_mg_per_day == pytest.approx(one.point.vmax_mg_per_day, rel=1e-6)
        assert other.point.km_mg_per_L == pytest.approx(one.point.km_mg_per_L, rel=1e-6)
        np.testing.assert_allclose(other.vmax_mg_per_day, one.vmax_mg_per_day, rtol=1e-5)
        assert {fit.level: fit.observed_mg_per_L for fit in other.fit} == {
            fit.level: fit.observed_mg_per_L for fit in one.fit
        }


@given(noisy_pairs(fewest=2, most=8))
@settings(max_examples=150)
def test_any_levels_end_in_a_possible_answer_or_a_reason(data):
    results = compare(data, draws=64)
    assert tuple(result.method for result in results) == METHODS
    largest = data.rate_mg_per_day.max()
    for result in results:
        if isinstance(result, LineFailure):
            assert result.because
            continue
        for vmax, km in (
            (np.array([result.point.vmax_mg_per_day]), np.array([result.point.km_mg_per_L])),
            (result.vmax_mg_per_day, result.km_mg_per_L),
        ):
            assert (km > 0).all()
            assert np.isfinite(km).all()
            assert ((vmax > largest) & (vmax < ABSURD_VMAX * largest)).all()
    assert verdict(results, data).text
    assert len(check_pairs(data)) == len(data)


@given(noisy_pairs(fewest=3, most=6))
@settings(max_examples=60)
def test_no_neighbour_beats_the_fitted_optimum_and_the_limits_enclose_it(data):
    result = compare(data, draws=64)[0]
    if isinstance(result, LineFailure):
        return
    fit = level_on_rate(
        rate_mg_per_day=data.rate_mg_per_day,
        level_mg_per_L=data.level_mg_per_L,
        level_log_sd=data.level_log_sd,
    )
    headroom = fit.vmax - data.rate_mg_per_day.max()
    for step_v in (-1e-3, 0, 1e-3):
        for step_k in (-1e-3, 0, 1e-3):
            vmax, km = fit.vmax + step_v * headroom, fit.km * (1 + step_k)
            level = km * data.rate_mg_per_day / (vmax - data.rate_mg_per_day)
            squares = np.sum((np.log(data.level_mg_per_L / level) / data.level_log_sd) ** 2)
            assert squares >= fit.sum_of_squares * (1 - 1e-9) - 1e-12
    found = level_profile_limits(
        rate_mg_per_day=data.rate_mg_per_day,
        level_mg_per_L=data.level_mg_per_L,
        level_log_sd=data.level_log_sd,
        fit=fit,
        confidence=0.9,
    )
    assert data.rate_mg_per_day.max() <= found.vmax_low < fit.vmax < found.vmax_high
    assert 0 < found.km_low < fit.km < found.km_high


@given(exact_patients(), st.floats(0.1, 10))
@settings(max_examples=30)
def test_equal_weights_of_any_size_leave_a_straight_line_where_it_is(patient, weight):
    vmax, km, shares = patient
    level = km * shares / (1 - shares)
    rate = vmax * shares * np.linspace(0.95, 1.05, len(shares))
    plain = straight_line("C/R against C", level=level, rate=rate)
    same = straight_line("C/R against C", level=level, rate=rate, weights=np.full(len(rate), weight))
    assert float(same.slope) == pytest.approx(float(plain.slope), rel=1e-9)
    assert float(same.intercept) == pytest.approx(float(plain.intercept), rel=1e-9, abs=1e-12)
