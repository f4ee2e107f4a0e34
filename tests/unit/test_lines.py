"""Estimates from three or more steady levels: shape, refusals, messages, intervals, verdict."""

from __future__ import annotations

import numpy as np
import pytest

from pkcalc import formulas
from pkcalc.errors import CannotEstimate, CaseError
from pkcalc.estimate.lines import (
    ABSURD_VMAX,
    DIRECT_LINEAR,
    METHODS,
    REGRESSION,
    STRAIGHT_LINES,
    LineFailure,
    SteadyPairs,
    compare,
    crossings,
    from_steady_pairs,
    gather,
    redrawn_levels,
)
from pkcalc.estimate.pair import SteadyPair, VolumeSpread
from pkcalc.estimate.regression import (
    confidence_draws,
    level_on_rate,
    level_profile_limits,
    rate_on_level,
    rate_profile_limits,
)
from pkcalc.estimate.result import Estimate
from pkcalc.estimate.trust import check_pairs, verdict


def pairs(rate, level, spread=0.15):
    return SteadyPairs(np.array(rate), np.array(level), np.full(len(rate), spread), np.arange(len(rate)))


GOOD = pairs([200, 250, 300, 350], [4.1, 6.0, 10.4, 17.2])
PROPORTIONAL = pairs([200, 250, 300], [4, 5, 6.0])
FALLING = pairs([200, 250, 300], [8, 6, 5.0])
ONE_DOSE = pairs([300, 300, 300], [8, 9, 10.0])
EQUAL_LEVELS = pairs([200, 300, 400], [8, 8, 8.0])
LOW_LEVEL_PULLS = pairs([100, 200, 300, 400], [0.7, 4.5, 10, 40.0], spread=0.2)
OUTLIER = pairs([200, 225, 250, 300, 325, 350], [4, 5, 6.25, 4.5, 13, 17.5], spread=0.1)
WEAK = pairs([200, 250, 300], [4, 5.1, 6.2], spread=0.1)
THREE_AT_ODDS = pairs([200, 250, 300], [4.1, 9, 7.2], spread=0.1)
EVERY_SET = [
    GOOD, PROPORTIONAL, FALLING, ONE_DOSE, EQUAL_LEVELS, LOW_LEVEL_PULLS, OUTLIER, WEAK, THREE_AT_ODDS,
]  # fmt: skip


def words(results, method):
    result = {r.method: r for r in results}[method]
    assert isinstance(result, LineFailure)
    return result.text


# --- shape --------------------------------------------------------------------------------------------------


def test_the_five_methods_come_in_their_fixed_order_and_one_shape():
    results = compare(GOOD)
    assert tuple(r.method for r in results) == METHODS
    assert [r.point.kind for r in results] == [
        "fitted optimum",
        "median of crossings",
        "line",
        "line",
        "line",
    ]
    for result in results:
        assert isinstance(result, Estimate)
        n = len(result.vmax_mg_per_day)
        assert n > 1500
        assert result.km_mg_per_L.shape == result.weights.shape == (n,)
        assert result.weights.sum() == pytest.approx(1)
        assert set(result.summary) == {"vmax_mg_per_day", "km_mg_per_L"}
        assert result.volume_L is None
        assert result.volume_from == "none"
        assert [fit.level for fit in result.fit] == [0, 1, 2, 3]
        assert 0 < result.correlation < 1
        assert result.trusted
        assert result.distrust == ""


def test_a_volume_from_elsewhere_is_drawn_beside_and_says_so():
    result = from_steady_pairs(GOOD, volume=VolumeSpread(45.0, 0.2))
    assert result.volume_L is not None
    assert result.volume_from == "population"
    assert result.point.volume_L == 45.0
    assert np.median(result.volume_L) == pytest.approx(45.0, rel=0.01)
    assert np.std(np.log(result.volume_L)) == pytest.approx(0.2, rel=0.02)
    assert abs(np.corrcoef(np.log(result.volume_L), np.log(result.km_mg_per_L))[0, 1]) < 0.06


@pytest.mark.parametrize("data", EVERY_SET)
def test_no_estimate_holds_a_number_no_patient_could_have(data):
    largest = data.rate_mg_per_day.max()
    for result in compare(data):
        if isinstance(result, LineFailure):
            continue
        vmax, km = result.vmax_mg_per_day, result.km_mg_per_L
        assert np.isfinite(vmax).all()
        assert np.isfinite(km).all()
        assert (km > 0).all()
        assert ((vmax > largest) & (vmax < ABSURD_VMAX * largest)).all()
        assert 0 <= result.rejected < 1
        for fit in result.fit:
            assert 0 < fit.predicted.low <= fit.predicted.median <= fit.predicted.high < np.inf


def test_residuals_and_predicted_levels_belong_to_the_point():
    result = from_steady_pairs(GOOD)
    point = result.point
    for at, fit in enumerate(result.fit):
        level = point.km_mg_per_L * GOOD.rate_mg_per_day[at] / (point.vmax_mg_per_day - GOOD.rate_mg_per_day[at])
        assert fit.observed_mg_per_L == GOOD.level_mg_per_L[at]
        assert fit.standardised_residual == pytest.approx(np.log(fit.observed_mg_per_L / level) / 0.15)
        assert fit.predicted.low < level < fit.predicted.high


def test_results_are_the_same_in_every_run():
    first, second = compare(GOOD), compare(GOOD)
    for a, b in zip(first, second, strict=True):
        assert isinstance(a, Estimate)
        assert isinstance(b, Estimate)
        assert (a.vmax_mg_per_day == b.vmax_mg_per_day).all()


# --- refusals, each message once in full
# ---------------------------------------------------------------------


def test_unusable_pairs_are_named_one_by_one():
    with pytest.raises(CaseError) as caught:
        SteadyPairs(np.array([200, -5.0, 300]), np.array([4, np.nan, 9.0]), np.array([0.1, 0.1, 0.0]), np.arange(3))
    assert str(caught.value) == (
        "Dose rate, pair 2: -5 mg/day was given. Allowed: a number above 0. Check the entry.\n"
        "Level, pair 2: no finite number was given. Allowed: a number above 0. Check the entry.\n"
        "Spread of the level, pair 3: 0 was given. Allowed: a number above 0. Check the entry."
    )


def test_doses_and_levels_must_pair_up():
    with pytest.raises(CaseError) as caught:
        SteadyPairs(np.array([200.0, 250]), np.array([4.0, 5, 6]), np.full(3, 0.1), np.arange(3))
    assert str(caught.value) == (
        "Steady pairs: doses and levels differ in number. Allowed: one dose for each level. Pair them up."
    )


def test_more_than_twenty_pairs_are_refused_and_twenty_are_not():
    rate = np.linspace(100, 400, 21)
    with pytest.raises(CaseError) as caught:
        pairs(rate, 5 * rate / (450 - rate))
    assert str(caught.value) == (
        "Steady pairs: 21 given. Allowed: 2 to 20 pairs, both ends included. Choose the pairs that describe "
        "the patient as now."
    )
    twenty = from_steady_pairs(pairs(rate[:20], 5 * rate[:20] / (450 - rate[:20])))
    assert twenty.point.vmax_mg_per_day == pytest.approx(450)


def test_two_pairs_belong_to_the_two_level_method():
    with pytest.raises(CaseError) as caught:
        from_steady_pairs(pairs([200, 300], [4, 10.0]))
    assert str(caught.value) == (
        "Steady pairs: 2 given. Allowed: 3 to 20 pairs, both ends included. Two pairs are answered by the "
        "two-level method."
    )


def test_an_unknown_method_is_refused_with_the_known_ones():
    with pytest.raises(CaseError) as caught:
        from_steady_pairs(GOOD, method="by eye")
    assert str(caught.value) == (
        'Method: "by eye" was given. Allowed: weighted regression on the level, direct linear plot, double '
        "reciprocal, C/R against C, R against R/C. Choose one of these."
    )


def test_free_and_total_levels_are_not_mixed():
    steady = [
        SteadyPair(0, 200, 4, 0.15, "total"),
        SteadyPair(1, 250, 0.6, 0.15, "free"),
        SteadyPair(2, 300, 10, 0.15),
    ]
    with pytest.raises(CannotEstimate) as caught:
        gather(steady)
    assert str(caught.value) == (
        "Some of these levels are free and others total. Free and total levels cannot stand in one plot, "
        "because binding differs between patients and days. Use levels of one kind, or give the albumin so "
        "that all are brought to one basis."
    )


def test_too_many_steady_levels_are_refused_in_words():
    with pytest.raises(CannotEstimate) as caught:
        gather([SteadyPair(at, 200 + at, 4 + at, 0.15) for at in range(21)])
    assert str(caught.value) == (
        "21 levels count as steady. No more than 20 are taken together: over so many the patient has rarely "
        "stayed the same. Leave out the levels that no longer describe the patient."
    )


def test_a_straight_line_that_often_fails_when_redrawn_says_so():
    steep = pairs([200, 225, 250, 300, 325, 350], [4, 5, 6.25, 5, 13, 17.5])
    result = from_steady_pairs(steep, method="R against R/C")
    assert not result.trusted
    share = f"{100 * result.rejected:.0f}"
    assert result.distrust == (
        f"R against R/C cannot be trusted here: {share} % of the sets redrawn within the spread of the "
        "levels give no possible answer."
    )


def test_gather_keeps_order_and_place_in_the_case():
    steady = [SteadyPair(4, 300, 10, 0.15), SteadyPair(1, 200, 4, 0.2), SteadyPair(2, 250, 6, 0.1)]
    found = gather(steady)
    assert found.index.tolist() == [4, 1, 2]
    assert found.rate_mg_per_day.tolist() == [300, 200, 250]
    assert found.level_log_sd.tolist() == [0.15, 0.2, 0.1]


def test_levels_in_proportion_to_the_dose_fail_by_every_method_with_its_own_reason():
    results = compare(PROPORTIONAL)
    assert words(results, REGRESSION) == (
        "Weighted regression on the level: this curve fails on these data, because the levels rise no more "
        "than in proportion to the dose."
    )
    assert words(results, DIRECT_LINEAR) == (
        "Direct linear plot: this plot fails on these data, because 3 of its 3 crossings lie outside the "
        "positive quadrant, so the median does too."
    )
    assert words(results, "R against R/C") == (
        "R against R/C: this line fails on these data, because its points stand above one another, so no "
        "line can be laid through them."
    )
    with pytest.raises(CannotEstimate) as caught:
        from_steady_pairs(PROPORTIONAL)
    assert str(caught.value) == (
        "Weighted regression on the level fails on these 3 levels, because the levels rise no more than in "
        "proportion to the dose. No Vmax and no Km follow from it. Check doses taken, sampling times and "
        "units, or add a steady level on another dose."
    )


def test_levels_that_fall_as_the_dose_rises():
    results = compare(FALLING)
    assert words(results, "double reciprocal") == (
        "Double reciprocal: this line fails on these data, because it would read Km -2.87 mg/L, which is "
        "impossible; level 1 (200 mg/day, 8 mg/L) alone has 54 % of the pull on this line."
    )
    assert words(results, "C/R against C") == (
        "C/R against C: this line fails on these data, because it would read Km -2.89 mg/L, which is "
        "impossible; level 1 (200 mg/day, 8 mg/L) alone has 60 % of the pull on this line."
    )


def test_the_lowest_level_dominates_the_double_reciprocal_and_the_reason_says_so():
    results = compare(LOW_LEVEL_PULLS)
    assert words(results, "double reciprocal") == (
        "Double reciprocal: this line fails on these data, because it would read Vmax 333.9 mg/day, not "
        "above the 400 mg/day that gave a steady level; level 1 (100 mg/day, 0.7 mg/L) alone has 74 % of "
        "the pull on this line."
    )


def test_a_negative_reciprocal_plot_is_a_failure_and_never_an_estimate():
    # The published set that drives the double reciprocal negative (Aledo 2021), its rates taken as doses.
    level = [0.05, 0.1, 0.25, 0.5, 1.0, 2.5, 5.0, 20.0, 30.0]
    rate = [1.29, 3.33, 11.8, 22.8, 35.2, 39.9, 73.5, 112.0, 120.0]
    data = pairs(rate, level)
    assert words(compare(data), "double reciprocal") == (
        "Double reciprocal: this line fails on these data, because it would read Vmax -75.2 mg/day and Km "
        "-2.81 mg/L, which is impossible; level 1 (1.29 mg/day, 0.05 mg/L) alone has 69 % of the pull on "
        "this line."
    )
    with pytest.raises(CannotEstimate):
        from_steady_pairs(data, method="double reciprocal")


def test_one_dose_tells_nothing():
    for result in compare(ONE_DOSE):
        assert isinstance(result, LineFailure)
        assert result.because == "all levels were taken on one daily dose"


def test_an_absurd_vmax_is_refused():
    barely = pairs([200, 250, 300], [4, 5.02, 6.03], spread=0.1)
    assert words(compare(barely), "C/R against C") == (
        "C/R against C: this line fails on these data, because it would read a Vmax more than 20 times the "
        "highest dose, so no saturation shows in the way it weighs them; level 1 (200 mg/day, 4 mg/L) alone "
        "has 50 % of the pull on this line."
    )


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (
            lambda: rate_on_level(level=np.array([1.0, 2, 3]), rate=np.array([2.0, 4, 6])),
            "The points do not bend as a saturable curve does. A straight line or a level one fits them "
            "best, so Vmax and Km cannot be told apart. Add points at lower and higher levels.",
        ),
        (
            lambda: rate_on_level(level=np.array([1.0, 2]), rate=np.array([2.0, 3])),
            "A curve cannot be fitted: fewer than three points, or all at one level. Two different doses "
            "with different levels are the least that determines Vmax and Km. Add a steady level on "
            "another dose.",
        ),
    ],
)
def test_the_bare_regression_refuses_in_words(call, message):
    with pytest.raises(CannotEstimate) as caught:
        call()
    assert str(caught.value) == message


# --- intervals ----------------------------------------------------------------------------------------------


def fitted(data):
    return level_on_rate(
        rate_mg_per_day=data.rate_mg_per_day,
        level_mg_per_L=data.level_mg_per_L,
        level_log_sd=data.level_log_sd,
    )


def limits(data, fit, confidence=0.90):
    return level_profile_limits(
        rate_mg_per_day=data.rate_mg_per_day,
        level_mg_per_L=data.level_mg_per_L,
        level_log_sd=data.level_log_sd,
        fit=fit,
        confidence=confidence,
    )


@pytest.mark.parametrize("confidence", [0.5, 0.9, 0.98])
def test_the_draws_carry_the_profile_limits_of_vmax_at_every_confidence(confidence):
    fit = fitted(GOOD)
    found = limits(GOOD, fit, confidence)
    vmax, km, rejected = confidence_draws(
        rate_mg_per_day=GOOD.rate_mg_per_day,
        level_mg_per_L=GOOD.level_mg_per_L,
        level_log_sd=GOOD.level_log_sd,
        fit=fit,
        largest_vmax_mg_per_day=7000,
        draws=8192,
    )
    tail = (1 - confidence) / 2
    assert rejected < 1e-3
    assert np.quantile(vmax, [tail, 1 - tail]) == pytest.approx([found.vmax_low, found.vmax_high], rel=2e-3)
    assert np.quantile(km, [tail, 1 - tail]) == pytest.approx([found.km_low, found.km_high], rel=2e-2)


def test_the_profile_limits_are_where_the_sum_of_squares_has_risen_by_the_right_amount():
    """Each limit against a one-parameter minimisation of its own: 2.7055 is the 90 % point of "
    "chi-square(1)."""
    from scipy.optimize import minimize_scalar

    fit = fitted(GOOD)
    found = limits(GOOD, fit)

    def squares(vmax, km):
        level = km * GOOD.rate_mg_per_day / (vmax - GOOD.rate_mg_per_day)
        return float(np.sum((np.log(GOOD.level_mg_per_L / level) / GOOD.level_log_sd) ** 2))

    for vmax in (found.vmax_low, found.vmax_high):
        best = minimize_scalar(lambda x, v=vmax: squares(v, np.exp(x)), bounds=(-3, 5), method="bounded")
        assert best.fun - fit.sum_of_squares == pytest.approx(2.7055, abs=2e-4)
    for km in (found.km_low, found.km_high):
        best = minimize_scalar(lambda x, k=km: squares(350 + np.exp(x), k), bounds=(0, 8), method="bounded")
        assert best.fun - fit.sum_of_squares == pytest.approx(2.7055, abs=2e-4)


def test_draws_without_visible_saturation_are_set_aside_and_the_rest_keep_their_shape():
    """WEAK leaves 46 % beyond the cap: a Vmax that 52.5 % of all would lie below has 52.5/54 % of the rest."""
    result = from_steady_pairs(WEAK)
    inside = limits(WEAK, fitted(WEAK), confidence=0.05).vmax_high
    assert 0.4 < result.rejected < 0.474
    share = np.mean(result.vmax_mg_per_day < inside)
    assert share == pytest.approx(0.525 / (1 - result.rejected), abs=2e-3)


def test_redrawn_levels_have_the_stated_spread_and_keep_the_level_in_the_middle():
    drawn = np.log(redrawn_levels(GOOD, 2048) / GOOD.level_mg_per_L)
    assert drawn.std(axis=0) == pytest.approx([0.15] * 4, rel=0.01)
    assert np.median(drawn, axis=0) == pytest.approx([0] * 4, abs=1e-3)
    assert np.abs(np.corrcoef(drawn.T) - np.eye(4)).max() < 0.06


def test_on_two_pairs_the_share_set_aside_is_the_exact_chance():
    """By the normal distribution: ln(C2/C1) - ln(R2/R1) = 0.47 in a spread of 0.3 sqrt(2), and the cap at 20."""
    data = pairs([300, 350], [8, 15.0], spread=0.3)
    exact = formulas.chance_of_inadmissible_pair(
        rate1_mg_per_day=300,
        level1_mg_per_L=8,
        rate2_mg_per_day=350,
        level2_mg_per_L=15,
        log_sd1=0.3,
        log_sd2=0.3,
    )
    for result in compare(data)[1:]:
        assert isinstance(result, Estimate)
        assert result.rejected == pytest.approx(exact, abs=0.015)


def test_an_open_upper_limit_is_said_in_words_and_never_infinity():
    result = from_steady_pairs(WEAK)
    assert result.diagnostics["Vmax at most (mg/day)"] == "no upper limit"
    assert result.diagnostics["Km at most (mg/L)"] == "no upper limit"
    assert result.diagnostics["interval"] == "profile likelihood"
    assert not result.trusted
    assert result.distrust == (
        "Weighted regression on the level cannot be trusted here: by these levels alone, the chance that no "
        "saturation shows at all is 46 %."
    )


def test_open_limits_of_the_laboratory_direction():
    level, rate = np.array([1.0, 2, 3, 4]), np.array([1.0, 1.93, 2.95, 3.7])
    fit = rate_on_level(level=level, rate=rate)
    found = rate_profile_limits(level=level, rate=rate, fit=fit, confidence=0.95)
    assert np.isinf(found.vmax_high)
    assert np.isinf(found.km_high)
    assert 0 < found.vmax_low < fit.vmax
    assert 0 < found.km_low < fit.km


def test_delta_method_limits_fail_near_saturation_where_profile_limits_hold():
    """1,000 simulated patients on up to 350 of a Vmax of 450 mg/day, 20 % spread, nominal 90 % limits.

    Each tail should miss 5 %. The delta method's lower limit reaches below a dose that did give a steady
    level, which no patient can have, and it never misses there; what it wastes below it lacks above. Three
    binomial standard errors of 5 % of 1,000 are 2.1 %.
    """
    rng = np.random.default_rng(9)
    rate = np.array([200.0, 250, 300, 350])
    true = 5 * rate / (450 - rate)
    sets = 1000
    profile, delta, impossible = np.zeros(2), np.zeros(2), 0
    for _ in range(sets):
        data = pairs(rate, true * np.exp(0.2 * rng.standard_normal(4)), spread=0.2)
        try:
            fit = fitted(data)
        except CannotEstimate:
            continue  # no saturation shows: both limits open, nothing missed
        found = limits(data, fit)
        low, high = fit.vmax - 1.6449 * fit.se_vmax, fit.vmax + 1.6449 * fit.se_vmax
        profile += [found.vmax_low > 450, found.vmax_high < 450]
        delta += [low > 450, high < 450]
        impossible += low <= 350
    profile, delta = profile / sets, delta / sets
    assert profile == pytest.approx([0.05, 0.05], abs=0.021)
    assert delta[0] < 0.01
    assert delta[1] > 0.08
    assert impossible / sets > 0.05


def test_more_scatter_than_stated_widens_the_interval_and_withdraws_trust():
    result = from_steady_pairs(OUTLIER)
    assert not result.trusted
    assert result.distrust == (
        "Weighted regression on the level cannot be trusted here: the levels scatter 3.6 times more than "
        "their stated spread explains (chance less than 0.1 %); the interval was widened by that factor."
    )
    fit = fitted(OUTLIER)
    plain = limits(OUTLIER, fit)
    assert result.diagnostics["Vmax at most (mg/day)"] > plain.vmax_high
    assert result.diagnostics["Vmax at least (mg/day)"] < plain.vmax_low
    blurred = SteadyPairs(
        OUTLIER.rate_mg_per_day, OUTLIER.level_mg_per_L, OUTLIER.level_log_sd * fit.sigma, OUTLIER.index
    )
    wide = limits(blurred, fitted(blurred))
    assert result.diagnostics["Vmax at most (mg/day)"] == pytest.approx(wide.vmax_high)
    # the upper end is conditional on visible saturation, which 3 % of the draws do not show
    assert result.summary["km_mg_per_L"].low == pytest.approx(wide.km_low, rel=0.01)


@pytest.mark.parametrize("short_of_vmax", [1e-2, 1e-5, 1e-9])
def test_the_regression_keeps_its_digits_next_to_saturation(short_of_vmax):
    """The top dose a hair below Vmax: the headroom itself is found, not the difference of two large numbers."""
    rate = np.array([200.0, 300, 400])
    vmax = 400 * (1 + short_of_vmax)
    level = 5 * rate / np.array([200 + 400 * short_of_vmax, 100 + 400 * short_of_vmax, 400 * short_of_vmax])
    fit = fitted(pairs(rate, level))
    assert fit.vmax - 400 == pytest.approx(vmax - 400, rel=1e-6)
    assert fit.km == pytest.approx(5, rel=1e-9)


def test_each_level_counts_by_its_own_spread():
    """A level said to be uncertain lets go of the curve: halving its number moves the answer far less."""
    rate = np.array([200.0, 250, 300, 350])
    level = 5 * rate / (450 - rate)
    level[2] *= 0.5
    trusted = SteadyPairs(rate, level, np.full(4, 0.1), np.arange(4))
    doubted = SteadyPairs(rate, level, np.array([0.1, 0.1, 1.0, 0.1]), np.arange(4))
    off = [abs(fitted(data).km - 5) for data in (trusted, doubted)]
    assert off[1] < 0.15 * off[0]


# --- direct linear plot -------------------------------------------------------------------------------------


def test_crossings_outside_the_positive_quadrant_depend_on_where_the_error_is():
    # Third quadrant: rises, but less than in proportion. Second quadrant: falls as the other rises.
    third = {"level": np.array([4.0, 5.0]), "rate": np.array([200.0, 300])}
    second = {"level": np.array([1.0, 2.0]), "rate": np.array([300.0, 290])}
    for data in (third, second):
        found = crossings(**data, error_in="level")
        assert found.km[0] < 0
        assert np.isinf(found.km_counted[0])
        assert np.isinf(found.vmax_counted[0])
    by_rate = crossings(**third, error_in="rate")
    assert by_rate.vmax[0] < 0
    assert np.isinf(by_rate.km_counted[0])
    at_face = crossings(**second, error_in="rate")
    assert at_face.vmax[0] > 0
    assert at_face.km_counted[0] == at_face.km[0] < 0


def test_repeated_doses_are_left_out_of_the_crossings():
    rate = np.array([200.0, 200, 300, 300])
    level = 5 * rate / (450 - rate) * np.array([1.1, 0.9, 1.05, 0.95])
    found = crossings(level=level, rate=rate, error_in="level")
    assert len(found.first) == 4
    result = from_steady_pairs(pairs(rate, level), method=DIRECT_LINEAR)
    assert result.diagnostics["crossings"] == 4
    assert result.diagnostics["crossings left out"] == 2


def test_a_last_digit_of_rounding_does_not_make_two_doses_of_one():
    same_dose = 0.92 * 300
    rounded = 276.0 * (1 + 4e-16)
    found = crossings(level=np.array([8.0, 9.0]), rate=np.array([same_dose, rounded]), error_in="level")
    assert len(found.first) == 0
    for result in compare(pairs([same_dose, rounded, 276.0], [8, 9, 10.0])):
        assert isinstance(result, LineFailure)
        assert result.because == "all levels were taken on one daily dose"


def test_one_wrong_level_moves_the_direct_linear_plot_least():
    answers = {r.method: r.point.km_mg_per_L for r in compare(OUTLIER) if isinstance(r, Estimate)}
    assert answers[DIRECT_LINEAR] == pytest.approx(5.0)  # the other five levels lie exactly on Vmax 450, Km 5
    assert all(abs(km - 5) > 0.25 for method, km in answers.items() if method != DIRECT_LINEAR)


# --- which pair, which method -------------------------------------------------------------------------------


def test_the_wrong_level_is_named_by_its_residual_and_its_crossings():
    checks = check_pairs(OUTLIER)
    assert [check.stands_out for check in checks] == [False, False, False, True, False, False]
    assert checks[3].text == (
        "Level 4 (300 mg/day, 4.5 mg/L) lies 7.3 spreads below the curve; crossings outside the positive "
        "quadrant: 3 of 5."
    )
    assert checks[3].crossings_outside == max(check.crossings_outside for check in checks)


def test_of_three_pairs_none_can_be_singled_out():
    checks = check_pairs(THREE_AT_ODDS)
    assert not any(check.stands_out for check in checks)
    sizes = [abs(check.residual) for check in checks]
    assert sizes == pytest.approx([sizes[0]] * 3)


def test_pairs_without_a_curve_still_show_their_crossings():
    assert check_pairs(FALLING)[0].text == (
        "Level 1 (200 mg/day, 8 mg/L): no distance from the curve can be given; crossings outside the "
        "positive quadrant: 2 of 2."
    )
    assert check_pairs(ONE_DOSE)[0].text == "Level 1 (300 mg/day, 8 mg/L): no distance from the curve can be given."


def test_verdict_on_good_levels():
    found = verdict(compare(GOOD), GOOD)
    assert found.method == REGRESSION
    assert found.suspects == ()
    assert found.text == (
        "Trust the weighted regression on the level: each level counts by its own spread, and Vmax stays "
        "above every dose that gave a steady level (Vmax 453 mg/day, Km 5.09 mg/L). The direct linear plot, "
        "which one wrong level moves least, agrees (Vmax 451 mg/day, Km 5.15 mg/L). The straight lines give "
        "numbers here, but let the levels count by their place on the axis, not by their certainty: for "
        "teaching only."
    )


def test_verdict_on_levels_that_contradict_one_another():
    found = verdict(compare(OUTLIER), OUTLIER)
    assert found.method is None
    assert found.suspects == (3,)
    assert found.text == (
        "Trust none of these yet: the levels scatter 3.6 times more than their stated spread explains "
        "(chance less than 0.1 %); the interval was widened by that factor. Level 4 (300 mg/day, 4.5 mg/L) "
        "lies 7.3 spreads below the curve; crossings outside the positive quadrant: 3 of 5. Check it first. "
        "One wrong level moves the direct linear plot least: Vmax 450 mg/day, Km 5 mg/L. R against R/C "
        "fails here, which is what straight lines do: they let the levels count by their place on the axis, "
        "not by their certainty."
    )


def test_verdict_where_no_single_pair_can_be_blamed():
    assert " No single pair can be blamed: check them all. " in verdict(compare(THREE_AT_ODDS), THREE_AT_ODDS).text


def test_verdict_on_levels_nearly_in_proportion():
    found = verdict(compare(WEAK), WEAK)
    assert found.method is None
    assert found.text.startswith(
        "Trust none of these yet: by these levels alone, the chance that no saturation shows at all is 46 "
        "%. The levels do not contradict one another; they lie too nearly in proportion to the dose. "
    )


def test_verdict_where_nothing_can_be_read():
    found = verdict(compare(PROPORTIONAL), PROPORTIONAL)
    assert found.method is None
    assert found.text == (
        "Trust none of these. Weighted regression on the level: this curve fails on these data, because the "
        "levels rise no more than in proportion to the dose. What no weighting of the levels shows, no line "
        "can: check doses taken, sampling times and units, or add a steady level on another dose."
    )


@pytest.mark.parametrize("data", EVERY_SET)
def test_no_message_shows_a_machine_word(data):
    results = compare(data)
    texts = [r.text for r in results if isinstance(r, LineFailure)]
    texts += [r.distrust for r in results if isinstance(r, Estimate)]
    texts += [verdict(results, data).text] + [check.text for check in check_pairs(data)]
    for text in texts:
        for machine_word in ("nan", "inf ", "{", "}", "None", "e+", "e-0", "array", "_"):
            assert machine_word not in text


def test_two_pairs_give_the_two_level_answer_by_every_method():
    data = pairs([300, 350], [8, 20.0])
    exact = formulas.two_level(rate1_mg_per_day=300, level1_mg_per_L=8, rate2_mg_per_day=350, level2_mg_per_L=20)
    for result in compare(data):
        assert isinstance(result, Estimate)
        assert result.point.vmax_mg_per_day == pytest.approx(float(exact.vmax_mg_per_day), rel=1e-9)
        assert result.point.km_mg_per_L == pytest.approx(float(exact.km_mg_per_L), rel=1e-9)


def test_the_methods_are_the_straight_lines_and_two_more():
    assert (REGRESSION, DIRECT_LINEAR, *STRAIGHT_LINES) == METHODS
