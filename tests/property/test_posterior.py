"""Laws the estimate must keep whatever the record: shifts of the clock, order, units of mass, doubt."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pkcalc import flow
from pkcalc.estimate.error_model import LevelData, RecordSpread, covariance, gaussian_parts
from pkcalc.estimate.intake import intake_gain, plan_intake
from pkcalc.estimate.posterior import from_record
from pkcalc.record import Absorption, Dose, Record
from tests.unit.adult import PRIOR

CAPSULE = Absorption(ka_per_day=8.0)
QUANTITIES = ("vmax_mg_per_day", "km_mg_per_L", "volume_L")


@st.composite
def wards(draw):
    """A short record with one to three levels at odd times, and how far it is believed."""
    days = draw(st.integers(3, 10))
    amounts = draw(st.lists(st.sampled_from([100.0, 200.0, 300.0, 400.0]), min_size=days, max_size=days))
    doses = tuple(Dose(i + 0.4, a, absorption=CAPSULE) for i, a in enumerate(amounts))
    count = draw(st.integers(1, 3))
    times = draw(st.lists(st.floats(1.1, float(days)), min_size=count, max_size=count, unique=True).map(sorted))
    values = draw(st.lists(st.floats(2.0, 30.0), min_size=count, max_size=count))
    levels = [LevelData(t, v, assay_cv=0.1, index=i) for i, (t, v) in enumerate(zip(times, values, strict=True))]
    spread = RecordSpread(draw(st.sampled_from([0.0, 0.05, 0.2])), draw(st.sampled_from([0.0, 0.05])))
    return Record(doses=doses), levels, spread


def _quantiles(estimate) -> np.ndarray:
    return np.array(
        [[estimate.summary[q].low, estimate.summary[q].median, estimate.summary[q].high] for q in QUANTITIES]
    )


@settings(max_examples=6)
@given(wards(), st.floats(-300, 300))
def test_the_clock_may_be_shifted(ward, shift: float) -> None:
    record, levels, spread = ward
    moved = Record(doses=tuple(replace(d, time_day=d.time_day + shift) for d in record.doses), start_day=shift)
    later = [replace(x, time_day=x.time_day + shift) for x in levels]
    one = from_record(record, levels, PRIOR, spread, n=64)
    two = from_record(moved, later, PRIOR, spread, n=64)
    assert _quantiles(two) == pytest.approx(_quantiles(one), rel=2e-3)


@settings(max_examples=6)
@given(wards())
def test_the_order_of_the_levels_does_not_matter(ward) -> None:
    record, levels, spread = ward
    one = from_record(record, levels, PRIOR, spread, n=64)
    two = from_record(record, levels[::-1], PRIOR, spread, n=64)
    assert _quantiles(two) == pytest.approx(_quantiles(one), rel=1e-6)
    assert [f.standardised_residual for f in two.fit[::-1]] == pytest.approx(
        [f.standardised_residual for f in one.fit], abs=1e-6
    )


@settings(max_examples=6)
@given(wards(), st.sampled_from([1e-3, 0.3, 40.0]))
def test_another_unit_of_mass_scales_the_answer(ward, factor: float) -> None:
    record, levels, spread = ward
    scaled = Record(doses=tuple(replace(d, amount_mg=d.amount_mg * factor) for d in record.doses))
    prior = replace(PRIOR, vmax_mg_per_day=PRIOR.vmax_mg_per_day * factor, km_mg_per_L=PRIOR.km_mg_per_L * factor)
    one = from_record(record, levels, PRIOR, spread, n=64)
    two = from_record(
        scaled, [replace(x, level_mg_per_L=x.level_mg_per_L * factor) for x in levels], prior, spread, n=64
    )
    expected = _quantiles(one) * np.array([[factor], [factor], [1.0]])
    assert _quantiles(two) == pytest.approx(expected, rel=2e-3)


@settings(max_examples=6)
@given(wards())
def test_every_number_is_physical(ward) -> None:
    record, levels, spread = ward
    estimate = from_record(record, levels, PRIOR, spread, n=256, rates_mg_per_day=(250.0,))
    for q in QUANTITIES:
        values = getattr(estimate, q)
        assert np.all(np.isfinite(values))
        assert np.all(values > 0)
        band = estimate.summary[q]
        assert 0 < band.low < band.median < band.high < math.inf
    assert estimate.weights.sum() == pytest.approx(1.0)
    assert 0 <= estimate.diagnostics["no_steady_state"][250.0] <= 1
    assert all(0 <= chance <= 1 for chance in estimate.diagnostics["wrong_level"].values())
    assert all(math.isfinite(f.standardised_residual) for f in estimate.fit)


@settings(max_examples=40)
@given(wards(), st.floats(150.0, 900.0), st.floats(30.0, 900.0))
def test_more_doubt_never_makes_a_level_more_certain(ward, vmax: float, kappa: float) -> None:
    record, levels, _ = ward
    days = [x.time_day for x in levels]
    own = np.array([x.own_variance for x in levels])
    before = np.diag(own)
    for share in (0.02, 0.1, 0.3):
        plan = plan_intake(record, days, RecordSpread(share))
        course, faded = flow.fading(record, plan.sample_days, [vmax], [kappa])
        gain = intake_gain(plan, course, faded)
        assert np.all(gain >= 0)
        s = covariance(own, gain, plan.variance)[0]
        assert np.linalg.eigvalsh(s - before).min() > -1e-9
        before = s


@settings(max_examples=60)
@given(
    st.lists(st.floats(-2, 2), min_size=1, max_size=5),
    st.floats(0.05, 0.5),
    st.floats(0.001, 0.2),
)
def test_a_level_more_narrows_the_volume(residual, sd: float, s2: float) -> None:
    clean = RecordSpread(0.0, 0.0)
    m = len(residual)
    r, cov = np.array([residual]), np.eye(m)[None] * sd**2
    variances = [gaussian_parts(r[:, :j], cov[:, :j, :j], s2, clean).variance[0, 0] for j in range(m + 1)]
    assert all(b < a for a, b in pairwise(variances))
    assert variances[m] == pytest.approx(1 / (1 / s2 + m / sd**2))
