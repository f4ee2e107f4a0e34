"""Forecasts of dose rates: the two lines, no steady state, many rates at once, times."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pkcalc import formulas
from pkcalc.estimate.result import band
from pkcalc.forecast import (
    bands,
    fewer_draws,
    forecast_rate,
    forecast_rates,
    levels_on_days,
    rate_for_level,
    two_lines,
)
from tests.unit.planning import GOAL, SCALE, estimate, exact


def test_many_rates_give_what_each_gives_alone() -> None:
    draws = estimate()
    rates = (200.0, 300.0, 420.0, 700.0)
    together = forecast_rates(draws, rates, GOAL, SCALE, present_mg_per_L=8.0)
    for rate, found in zip(rates, together, strict=True):
        assert found == forecast_rate(draws, rate, GOAL, SCALE, present_mg_per_L=8.0)


def test_bands_of_rows_are_the_bands_of_draws() -> None:
    random = np.random.default_rng(3)
    values = random.lognormal(2, 1, (12, 501))
    values[3, :20] = np.inf
    values[4, :300] = np.inf
    values[5] = np.inf
    even = np.full(501, 1 / 501)
    uneven = random.random(501)
    uneven /= uneven.sum()
    for weights in (even, uneven):
        for row, found in zip(values, bands(values, weights), strict=True):
            expected = band(row, weights)
            assert (found.median, found.low, found.high) == pytest.approx(
                (expected.median, expected.low, expected.high), rel=1e-12
            )


def test_the_chances_make_one_and_no_steady_state_counts_as_above() -> None:
    found = forecast_rate(estimate(), 430.0, GOAL, SCALE)
    assert found.below + found.within + found.above == pytest.approx(1, abs=1e-12)
    assert 0 < found.no_steady_state < found.above_critical < found.above
    assert found.steady.high == np.inf
    assert found.total.high == np.inf


def test_everything_without_a_steady_state() -> None:
    found = forecast_rate(exact(vmax=300.0), 300.0, GOAL, SCALE)
    assert found.no_steady_state == found.above == found.above_critical == 1.0
    assert found.below == found.within == 0.0
    assert found.settle_days is not None
    assert found.settle_days.median == np.inf


def test_a_half_taken_dose_looks_like_fast_elimination() -> None:
    """Practice: 80 % of 300 mg taken and 7 mg/L looks like 11 mg/L on 350 mg; under observed dosing it is 28."""
    now, step = 300 * 0.92, 350 * 0.92
    apparent = float(formulas.vmax_from_level(dose_rate_mg_per_day=now, level_mg_per_L=7.0, km_mg_per_L=5.0))
    lines = two_lines(exact(vmax=apparent), 0.20, counted=False)
    assert f"{forecast_rate(lines.central, step, GOAL, SCALE).steady.median:.0f}" == "11"
    assert f"{forecast_rate(lines.taken, step, GOAL, SCALE).steady.median:.0f}" == "28"


def test_the_central_line_of_a_counted_estimate_is_the_dose_really_taken() -> None:
    """Dividing Vmax and V by f is the same as taking f of every dose: plateau and times alike."""
    true = exact()
    lines = two_lines(true, 0.2, counted=True)
    assert lines.taken is true
    central = forecast_rate(lines.central, 300.0, GOAL, SCALE, present_mg_per_L=4.0)
    taken = forecast_rate(true, 0.8 * 300.0, GOAL, SCALE, present_mg_per_L=4.0)
    assert central.steady.median == pytest.approx(taken.steady.median, rel=1e-12)
    assert central.settle_days is not None
    assert taken.settle_days is not None
    assert central.settle_days.median == pytest.approx(taken.settle_days.median, rel=1e-12)
    course = levels_on_days(lines.central, (300.0,), (3.0, 10.0), 4.0)[0]
    other = levels_on_days(true, (240.0,), (3.0, 10.0), 4.0)[0]
    assert [b.median for b in course] == pytest.approx([b.median for b in other], rel=1e-12)


def test_without_missed_doses_both_lines_are_one() -> None:
    draws = estimate()
    lines = two_lines(draws, 0.0, counted=False)
    assert lines.central is draws
    assert lines.taken is draws


@pytest.mark.parametrize("counted", [True, False])
def test_the_safety_line_is_never_the_lower_one(counted: bool) -> None:
    lines = two_lines(estimate(), 0.05, counted=counted)
    for rate in (200.0, 300.0, 380.0):
        central = forecast_rate(lines.central, rate, GOAL, SCALE)
        taken = forecast_rate(lines.taken, rate, GOAL, SCALE)
        assert taken.steady.median > central.steady.median
        assert taken.above_critical >= central.above_critical
        assert taken.below <= central.below


def test_fewer_draws_are_a_fair_sample() -> None:
    draws = estimate(n=4096)
    few = fewer_draws(draws, 512).estimate
    assert len(few.weights) == 512
    assert few.weights.sum() == pytest.approx(1)
    assert np.median(few.vmax_mg_per_day) == pytest.approx(np.median(draws.vmax_mg_per_day), rel=0.03)
    again = fewer_draws(draws, 512).estimate
    assert np.array_equal(few.vmax_mg_per_day, again.vmax_mg_per_day)


def test_fewer_draws_follow_the_weights() -> None:
    draws = estimate(n=4096)
    heavy = np.where(draws.vmax_mg_per_day > 450.0, 3.0, 1.0)
    weighted = replace(draws, weights=heavy / heavy.sum())
    few = fewer_draws(weighted, 512).estimate
    share = float(np.mean(few.vmax_mg_per_day > 450.0))
    assert share == pytest.approx(float(weighted.weights[draws.vmax_mg_per_day > 450.0].sum()), abs=0.01)


def test_levels_on_days_start_today_and_end_at_the_plateau() -> None:
    one = exact()
    (course,) = levels_on_days(one, (300.0,), (0.0, 3.0, 400.0), 8.0)
    assert course[0].median == 8.0
    assert course[2].median == pytest.approx(10.0, rel=1e-6)  # 5 x 300 / (450 - 300)
    three = formulas.level_after(
        time_day=3.0,
        start_mg_per_L=8.0,
        dose_rate_mg_per_day=300.0,
        vmax_mg_per_day=450.0,
        km_mg_per_L=5.0,
        volume_L=49.0,
    )
    assert course[1].median == pytest.approx(float(three), rel=1e-12)


def test_no_volume_no_times() -> None:
    assert forecast_rate(estimate(volume=None), 300.0, GOAL, SCALE).settle_days is None


def test_the_rate_for_an_aim() -> None:
    # R = Vmax C / (Km + C) = 450 x 15 / 20
    assert rate_for_level(exact(), 15.0).median == pytest.approx(337.5)
