"""Two steady levels: the closed form, its draws, its refusals."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pkcalc.errors import CannotEstimate
from pkcalc.estimate.pair import SteadyPair, VolumeSpread, from_steady_levels


def pair(level: int, rate: float, concentration: float, log_sd: float = 0.2, kind: str = "total") -> SteadyPair:
    return SteadyPair(level, rate, concentration, log_sd, kind)


def test_exact_levels_of_a_known_patient_give_that_patient_back() -> None:
    estimate = from_steady_levels(pair(0, 200, 4), pair(1, 300, 12))
    assert estimate.point.km_mg_per_L == pytest.approx(4, rel=1e-12)
    assert estimate.point.vmax_mg_per_day == pytest.approx(400, rel=1e-12)
    assert estimate.point.kind == "closed form"
    assert estimate.volume_L is None
    assert estimate.volume_from == "none"


def test_the_order_of_the_pairs_does_not_matter() -> None:
    one, two = pair(0, 276, 8), pair(1, 322, 20)
    first, second = from_steady_levels(one, two), from_steady_levels(two, one)
    assert first.point == second.point
    assert first.summary == second.summary


def test_draws_are_positive_and_surround_the_point() -> None:
    estimate = from_steady_levels(pair(0, 276, 8), pair(1, 322, 20), volume=VolumeSpread(49, 0.2))
    assert (estimate.vmax_mg_per_day > 0).all()
    assert (estimate.km_mg_per_L > 0).all()
    assert estimate.weights.sum() == pytest.approx(1)
    assert estimate.summary["vmax_mg_per_day"].low < estimate.point.vmax_mg_per_day
    assert estimate.summary["vmax_mg_per_day"].high > estimate.point.vmax_mg_per_day
    assert estimate.volume_L is not None
    assert np.median(estimate.volume_L) == pytest.approx(49, rel=0.02)
    assert 0 < estimate.correlation < 1


def test_the_spread_of_the_levels_is_what_was_asked_for() -> None:
    """Every draw's dose-level curve passes through its own two levels, so those can be read back."""
    estimate = from_steady_levels(pair(0, 100, 2, 0.1), pair(1, 400, 40, 0.3))
    assert estimate.rejected == 0
    vmax, km = estimate.vmax_mg_per_day, estimate.km_mg_per_L
    for rate, level, sd in ((100, 2, 0.1), (400, 40, 0.3)):
        logs = np.log(km * rate / (vmax - rate))
        assert logs.mean() == pytest.approx(math.log(level), abs=0.01)
        assert logs.std() == pytest.approx(sd, rel=0.02)


@given(
    ratio=st.floats(1.02, 2.0),
    rise=st.floats(1.05, 6.0),
    sd=st.floats(0.05, 0.4),
)
def test_the_rejected_share_is_the_exact_chance_of_a_negative_km(ratio: float, rise: float, sd: float) -> None:
    level2 = 6 * ratio * rise
    estimate = from_steady_levels(pair(0, 200, 6, sd), pair(1, 200 * ratio, level2, sd))
    exact = 0.5 * math.erfc(math.log(rise) / (sd * math.sqrt(2)) / math.sqrt(2))
    assert estimate.diagnostics["chance of negative Km"] == pytest.approx(exact, rel=1e-9, abs=1e-12)
    assert estimate.rejected == pytest.approx(exact, abs=0.01)


def test_the_interval_shrinks_onto_the_point_as_the_spread_goes_to_zero() -> None:
    wide = from_steady_levels(pair(0, 276, 8, 0.1), pair(1, 322, 20, 0.1))
    narrow = from_steady_levels(pair(0, 276, 8, 0.001), pair(1, 322, 20, 0.001))
    assert narrow.summary["km_mg_per_L"].high - narrow.summary["km_mg_per_L"].low < 0.02
    assert wide.summary["km_mg_per_L"].high > narrow.summary["km_mg_per_L"].high
    assert narrow.summary["km_mg_per_L"].median == pytest.approx(2.5, abs=0.01)


def test_every_impossible_pair_names_its_reason() -> None:
    with pytest.raises(CannotEstimate) as same:
        from_steady_levels(pair(0, 276, 8), pair(1, 276, 9))
    assert str(same.value) == (
        "Both levels (8 mg/L and 9 mg/L) belong to the same dose rate (276 mg/day of active drug). "
        "Two levels on one dose rate give one point of the curve, so Vmax and Km cannot be told apart. "
        "Add a level on a different dose, or use the whole record with population knowledge."
    )
    with pytest.raises(CannotEstimate) as lower:
        from_steady_levels(pair(0, 276, 12), pair(1, 322, 9))
    assert str(lower.value) == (
        "The higher dose rate (322 mg/day of active drug) has the level 9 mg/L, the lower one (276 mg/day) 12 mg/L. "
        "A higher dose cannot lead to an equal or lower steady level in the same patient. "
        "Check which doses were really taken, whether both levels were drawn at steady state, interacting drugs or "
        "tube feeds started or stopped, and the units."
    )
    with pytest.raises(CannotEstimate) as slow:
        from_steady_levels(pair(0, 300, 10), pair(1, 400, 12))
    assert str(slow.value) == (
        "From 300 mg/day to 400 mg/day of active drug (+33 %) the level rose from 10 mg/L to 12 mg/L (+20 %). "
        "With saturable elimination a level must rise more than in proportion to the dose, so Km cannot be found. "
        "Check doses taken, sampling times (the second level may have been drawn too early) and units, or add a level."
    )


def test_exactly_in_proportion_is_refused_too() -> None:
    with pytest.raises(CannotEstimate, match="more than in proportion"):
        from_steady_levels(pair(0, 300, 10), pair(1, 600, 20))


def test_free_and_total_are_refused() -> None:
    with pytest.raises(CannotEstimate) as mixed:
        from_steady_levels(pair(0, 276, 8, kind="free"), pair(1, 322, 20))
    assert str(mixed.value) == (
        "One of the two levels is free and the other total. "
        "A free and a total level cannot form a pair, because binding differs between patients and days. "
        "Use two levels of the same kind, or give the albumin so that both are brought to one basis."
    )
