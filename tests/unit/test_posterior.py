"""The estimate from the whole record: how it behaves, what it refuses, and its words."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest

from pkcalc import formulas
from pkcalc.errors import CannotEstimate, CaseError
from pkcalc.estimate import posterior
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.grid import Frame, draw, lay, mixture_quantiles, sobol
from pkcalc.estimate.posterior import from_record, prior_only, written_out
from pkcalc.estimate.predict import predicted_levels
from pkcalc.estimate.result import weighted_quantile
from pkcalc.record import Absorption, Before, Dose, FirstOrder, Record, Repeated
from tests.unit.adult import PRIOR

OBSERVED = RecordSpread(0.0, 0.0)
USUAL = RecordSpread(0.05, 0.05)
CAPSULE = Absorption(ka_per_day=8.0)
QUANTITIES = ("vmax_mg_per_day", "km_mg_per_L", "volume_L")


def nightly(*periods: tuple[float, int]) -> Record:
    """Doses at 21:00: (mg, days) one after the other."""
    doses, day = [], 0.0
    for amount, days in periods:
        doses += [Dose(day + d + 0.875, amount, absorption=CAPSULE) for d in range(days)]
        day += days
    return Record(doses=tuple(doses))


def infused(*periods: tuple[float, float]) -> Record:
    """Constant rates (mg/day, days) one after the other: exact steady levels in a few steps."""
    doses, day = [], 0.0
    for rate, days in periods:
        doses.append(Dose(day, rate * days, duration_day=days))
        day += days
    return Record(doses=tuple(doses))


def widths(estimate) -> list[float]:
    return [math.log(estimate.summary[q].high / estimate.summary[q].low) for q in QUANTITIES]


def test_no_levels_give_the_population_back() -> None:
    estimate = from_record(nightly((300, 5)), (), PRIOR, USUAL, rates_mg_per_day=(300.0,))
    assert estimate.method == "before any level"
    assert estimate.volume_from == "population"
    medians = [estimate.summary[q].median for q in QUANTITIES]
    assert medians == pytest.approx([455.0, 5.0, 49.0])
    assert widths(estimate) == pytest.approx([2 * 1.6449 * s for s in (0.246, 0.472, 0.198)], rel=1e-4)
    assert estimate.diagnostics["no_steady_state"][300.0] == pytest.approx(0.0453, abs=1e-3)


def test_a_level_that_says_nothing_gives_the_population_back() -> None:
    level = LevelData(4.5, 6.0, assay_cv=20.0)
    estimate = from_record(nightly((300, 5)), [replace(level, extra_log_sd=30.0)], PRIOR, OBSERVED)
    for q in QUANTITIES:
        ours, before = estimate.summary[q], prior_only(PRIOR).summary[q]
        assert [ours.low, ours.median, ours.high] == pytest.approx([before.low, before.median, before.high], rel=5e-3)
    assert estimate.volume_from == "population"


def test_draws_of_the_population_follow_its_correlation() -> None:
    estimate = prior_only(replace(PRIOR, correlation=0.6))
    found = np.corrcoef(np.log(estimate.vmax_mg_per_day), np.log(estimate.km_mg_per_L))[0, 1]
    assert found == pytest.approx(0.6, abs=0.01)


def test_a_very_precise_level_pins_the_dose_level_curve_there() -> None:
    record, rate = infused((300.0, 400.0)), 300.0
    estimate = from_record(record, [LevelData(399.0, 12.0, assay_cv=0.02)], PRIOR, OBSERVED)
    assert estimate.trusted
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=rate, vmax_mg_per_day=estimate.vmax_mg_per_day, km_mg_per_L=estimate.km_mg_per_L
    )
    settled = weighted_quantile(steady, estimate.weights, np.array([0.05, 0.5, 0.95]))
    assert settled == pytest.approx([12.0, 12.0, 12.0], rel=0.06)
    # while the two parameters by themselves stay open
    assert widths(estimate)[1] > 0.8


def test_two_steady_levels_approach_the_two_level_answer() -> None:
    vmax, km = 420.0, 4.0
    rates = (250.0, 320.0)
    c1, c2 = (km * r / (vmax - r) for r in rates)
    record = infused((rates[0], 300.0), (rates[1], 300.0))
    off = []
    for cv in (0.20, 0.06, 0.012):
        levels = [LevelData(299.9, c1, assay_cv=cv), LevelData(599.9, c2, assay_cv=cv, index=1)]
        estimate = from_record(record, levels, PRIOR, OBSERVED)
        off.append(
            max(
                abs(math.log(estimate.point.vmax_mg_per_day / vmax)),
                abs(math.log(estimate.point.km_mg_per_L / km)),
            )
        )
    assert off[0] > off[1] > off[2]
    assert off[2] < 0.005


def test_same_input_same_bits() -> None:
    levels = [LevelData(6.6, 7.0, assay_cv=0.1)]
    one, two = (from_record(nightly((300, 7)), levels, PRIOR, USUAL) for _ in range(2))
    for q in QUANTITIES:
        assert np.array_equal(getattr(one, q), getattr(two, q))
    assert one.summary == two.summary
    assert one.fit == two.fit


def test_draws_agree_with_the_summary() -> None:
    levels = [LevelData(6.6, 7.0, assay_cv=0.1), LevelData(13.6, 16.0, assay_cv=0.1, index=1)]
    estimate = from_record(nightly((300, 7), (400, 7)), levels, PRIOR, USUAL)
    assert estimate.weights == pytest.approx(np.full(2048, 1 / 2048))
    for q in QUANTITIES:
        drawn = weighted_quantile(getattr(estimate, q), estimate.weights, np.array([0.05, 0.5, 0.95]))
        told = estimate.summary[q]
        assert drawn == pytest.approx([told.low, told.median, told.high], rel=0.01)


def test_a_level_in_the_wrong_unit_is_flagged_and_hardly_pulls() -> None:
    record = nightly((300, 8), (350, 8), (350, 8))
    right = [
        LevelData(7.6, 9.0, 0.1),
        LevelData(15.6, 13.0, 0.1, index=1),
        LevelData(23.6, 15.0, 0.1, index=2),
    ]
    wrong = [right[0], replace(right[1], level_mg_per_L=13.0 * 3.964), right[2]]
    good, bad = (from_record(record, x, PRIOR, USUAL) for x in (right, wrong))
    assert max(abs(f.standardised_residual) for f in good.fit) < 2
    residuals = [abs(f.standardised_residual) for f in bad.fit]
    assert residuals[1] > 3
    assert residuals[1] == max(residuals)
    assert bad.diagnostics["wrong_level"][1] > 0.9
    without_mixture = from_record(record, wrong, PRIOR, replace(USUAL, wrong_level_chance=0.0))

    def off(e):
        return abs(math.log(e.summary["vmax_mg_per_day"].median / good.summary["vmax_mg_per_day"].median))

    assert off(bad) < 0.5 * off(without_mixture)


def test_doubt_about_the_doses_widens_most_near_saturation() -> None:
    low, high = [], []
    for share in (0.0, 0.05, 0.2):
        spread = RecordSpread(share, 0.0)
        for out, dose, level in ((low, 100.0, 1.5), (high, 350.0, 16.0)):
            out.append(from_record(nightly((dose, 12)), [LevelData(11.8, level, 0.1)], PRIOR, spread))
    assert widths(low[0])[0] < widths(low[2])[0]
    assert widths(high[0])[0] < widths(high[1])[0] < widths(high[2])[0]
    grown = [widths(x[2])[0] / widths(x[0])[0] for x in (low, high)]
    assert grown[1] > grown[0]


def test_a_censored_level_pulls_the_way_it_points() -> None:
    record = nightly((300, 10))
    open_end = from_record(record, [LevelData(9.8, 30.0, 10.0)], PRIOR, OBSERVED)
    below = from_record(record, [LevelData(9.8, 2.5, 0.1, censored="below")], PRIOR, OBSERVED)
    above = from_record(record, [LevelData(9.8, 40.0, 0.1, censored="above")], PRIOR, OBSERVED)
    medians = [x.summary["vmax_mg_per_day"].median for x in (above, open_end, below)]
    assert medians == sorted(medians)
    assert below.fit[0].predicted.high < 3.2
    # 10 % of assay below the limit is possible, and the population pulls down
    assert above.fit[0].predicted.low > 40 * math.exp(-2.5 * 0.1)
    assert above.fit[0].predicted.median > 36


def test_an_earlier_regimen_is_the_same_as_its_doses_written_out() -> None:
    regimen = Repeated(1.0, (Dose(0.875, 300.0, absorption=CAPSULE),))
    short = Record(doses=(Dose(0.875, 300.0, absorption=CAPSULE),), before=Before(regimen, 90.0))
    long = Record(doses=tuple(Dose(d + 0.875, 300.0, absorption=CAPSULE) for d in range(-90, 1)), start_day=-90.0)
    level = [LevelData(0.9, 11.0, 0.1)]
    one, two = (from_record(r, level, PRIOR, USUAL) for r in (short, long))
    for q in QUANTITIES:
        a, b = one.summary[q], two.summary[q]
        assert [a.low, a.median, a.high] == pytest.approx([b.low, b.median, b.high], rel=0.01)


def test_only_the_last_weeks_of_an_earlier_regimen_are_written_out() -> None:
    regimen = Repeated(1.0, (Dose(0.5, 300.0, absorption=CAPSULE),))
    long = written_out(Record(before=Before(regimen, 400.0)))
    assert (long.start_day, len(long.doses), long.before.for_day) == (-40.0, 40, 360.0)
    short = written_out(Record(before=Before(regimen, 10.0)))
    assert (short.start_day, len(short.doses), short.before) == (-10.0, 10, None)


def test_a_start_amount_is_believed() -> None:
    record = Record(doses=nightly((300, 3)).doses, start_mg=700.0)
    estimate = from_record(record, [LevelData(2.8, 17.0, 0.1)], PRIOR, OBSERVED)
    assert estimate.trusted
    assert estimate.fit[0].predicted.median == pytest.approx(17.0, rel=0.15)


def test_the_populations_parallel_path_is_used_once() -> None:
    with_path = replace(PRIOR, first_order_per_day=0.2)
    level = [LevelData(9.8, 8.0, 0.1)]
    given = replace(nightly((300, 10)), first_order=(FirstOrder(rate_per_day=0.2),))
    one = from_record(nightly((300, 10)), level, with_path, OBSERVED)
    two = from_record(given, level, with_path, OBSERVED)
    without = from_record(nightly((300, 10)), level, PRIOR, OBSERVED)
    assert one.summary == two.summary
    assert one.summary["vmax_mg_per_day"].median < without.summary["vmax_mg_per_day"].median


def test_what_the_grid_cannot_resolve_is_not_trusted() -> None:
    record = infused((200.0, 200.0), (300.0, 200.0))
    steady = [4.0 * r / (400.0 - r) for r in (200.0, 300.0)]
    levels = [LevelData(200.0 * (i + 1) - 0.1, x, 4e-4, index=i) for i, x in enumerate(steady)]
    estimate = from_record(record, levels, PRIOR, OBSERVED)
    assert not estimate.trusted
    assert estimate.distrust == (
        "This estimate cannot be trusted: two independent calculations of it differ by more than 0.5 % and the "
        "calculation does not resolve the values that remain possible and a level is taken as more exact than any "
        "calculation of its course."
    )


def test_levels_that_nothing_explains_give_no_estimate(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(posterior, "FEWEST_NODES", 1e9)
    with pytest.raises(CannotEstimate) as caught:
        from_record(infused((300.0, 30.0)), [LevelData(29.0, 9.0, 0.1)], PRIOR, OBSERVED)
    assert str(caught.value) == (
        "The levels and the record contradict each other within the spread that is assumed for them. No values of "
        "Vmax, Km and V could be found that explain all of them. Check the doses, the times and the units; a wider "
        "spread of the levels may be right."
    )


# What is still in the body ---------------------------------------------------------------------------------


def test_the_level_to_come_is_at_the_levels_already_seen() -> None:
    record, levels = nightly((300, 10)), [LevelData(9.8, 11.0, 0.05)]
    estimate = from_record(record, levels, PRIOR, USUAL)
    found = predicted_levels(record, levels, USUAL, estimate, [9.8])[:, 0]
    low, median, high = np.quantile(found, [0.05, 0.5, 0.95])
    assert median == pytest.approx(11.0, rel=0.04)
    assert 1.0 < high / low < 1.0 + 5 * 0.05
    from_course = estimate.fit[0].predicted
    assert high / low < from_course.high / from_course.low


def test_doubt_about_doses_to_come_widens_the_forecast() -> None:
    record, levels = nightly((300, 10)), [LevelData(9.8, 11.0, 0.05)]
    estimate = from_record(record, levels, PRIOR, USUAL)
    following = tuple(Dose(10.875 + d, 350.0, absorption=CAPSULE) for d in range(14))
    widths = []
    for later in (0.0, 0.05, 0.2):
        spread = RecordSpread(((0.0, 0.05), (10.0, later)), 0.05)
        found = predicted_levels(record, levels, spread, estimate, [24.8], following=following)[:, 0]
        low, high = np.quantile(found, [0.05, 0.95])
        widths.append(math.log(high / low))
    assert widths[0] < widths[1] < widths[2]


# The pieces ------------------------------------------------------------------------------------------------


def test_sobol_points_are_the_published_sequence() -> None:
    from scipy.stats import qmc

    ours = sobol(64)
    theirs = qmc.Sobol(3, scramble=False).random(64)
    # the usual generator walks the same points in Gray-code order
    number = np.arange(64)
    assert ours[number ^ (number >> 1)] == pytest.approx(theirs + 0.5 / 64)


def test_quantiles_of_a_mixture() -> None:
    from scipy.optimize import brentq
    from scipy.stats import norm

    w, m, v = np.array([0.7, 0.2, 0.1]), np.array([0.0, 3.0, -8.0]), np.array([1.0, 0.01, 4.0])
    found = mixture_quantiles(w, m, v, (0.05, 0.5, 0.95))
    for p, x in zip((0.05, 0.5, 0.95), found, strict=True):
        exact = brentq(lambda y, p=p: float(w @ norm.cdf(y, m, np.sqrt(v))) - p, -20, 20, xtol=1e-12)
        assert x == pytest.approx(exact, abs=1e-8)


def test_draws_of_a_normal_density_have_its_moments() -> None:
    from pkcalc.estimate.error_model import Components
    from pkcalc.estimate.grid import Nodes, square

    mean, cov = np.array([6.0, 5.0]), np.array([[0.04, 0.05], [0.05, 0.2]])

    def density(frame, axis):
        a, k = square(frame, axis)
        off = np.stack([a, k]) - mean[:, None]
        value = -0.5 * np.sum(off * np.linalg.solve(cov, off), axis=0)
        one = np.zeros((len(a), 1))
        parts = Components(one, 0.3 * (a - 6.0)[:, None], np.full((len(a), 1), 0.01))
        return Nodes(value, parts, one, one[:, :, None])

    frame = Frame.of(mean + 0.02, 1.3 * cov)
    a, k, u = draw(lay(frame, reach=6.0, n=48, density=density), 2048)
    assert [a.mean(), k.mean(), u.mean()] == pytest.approx([6.0, 5.0, 0.0], abs=2e-3)
    assert np.cov(a, k) == pytest.approx(cov, rel=0.02)
    assert np.cov(a, u)[0, 1] == pytest.approx(0.3 * 0.04, rel=0.03)
    assert u.var() == pytest.approx(0.01 + 0.09 * 0.04, rel=0.02)


# Messages --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("record", "day", "text"),
    [
        (
            Record(),
            1.0,
            "Dosing record: no dose was given. Allowed: at least one dose, or the regimen taken until now. Add what "
            "was given before the levels.",
        ),
        (
            nightly((300, 3)),
            -2.0,
            "Level 1, time: drawn 2 days before the record begins. Allowed: a draw after the record begins. Begin the "
            "record earlier, or check the date of the draw.",
        ),
        (
            nightly((300, 3)),
            0.5,
            "Level 1: 9 mg/L was measured when, by the record, nothing had been absorbed yet. Allowed: a level after "
            "the first recorded dose. Add the earlier doses (a load, another hospital), or check the time of the "
            "draw.",
        ),
    ],
)
def test_messages(record: Record, day: float, text: str) -> None:
    with pytest.raises(CaseError) as caught:
        from_record(record, [LevelData(day, 9.0, 0.1)], PRIOR, USUAL)
    assert str(caught.value) == text
