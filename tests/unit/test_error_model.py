"""The spread of a level: parts, messages, and the volume integrated out against plain quadrature."""

from __future__ import annotations

import math

import numpy as np
import pytest
from scipy.special import ndtr

from pkcalc import flow
from pkcalc.errors import CaseError
from pkcalc.estimate.error_model import (
    LevelData,
    RecordSpread,
    censored_parts,
    covariance,
    gaussian_parts,
    logsumexp,
    part_weights,
)
from pkcalc.estimate.intake import MOST_DOSES, intake_gain, plan_intake, taken_on_average
from pkcalc.record import Absorption, Before, Dose, FirstOrder, Record, Repeated

SPREAD = RecordSpread(0.05, 0.05, 4.0)


def _nodes(m: int, seed: int = 1) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(3, m, m)) * 0.1
    return rng.normal(size=(3, m)) * 0.3, root @ root.transpose(0, 2, 1) + 0.01 * np.eye(m)


def _by_quadrature(
    residual: np.ndarray,
    cov: np.ndarray,
    s2: float,
    spread: RecordSpread,
    chance=lambda error, s: 1.0,
    seen: list[int] | None = None,
) -> tuple[float, float, float]:
    """Log likelihood, mean and variance of u at one node: the density summed over a fine grid of u, part by
    part."""
    m = len(residual)
    u = np.linspace(-12, 12, 24_001) * math.sqrt(s2)
    total = np.zeros_like(u)
    p = spread.wrong_level_chance
    for part in range(m + 1):
        s = cov.copy()
        if part:
            s[part - 1, part - 1] *= spread.wrong_level_factor**2
        weight = (p if part else 1 - p) / (1 - p + m * p)
        error = u[:, None] - residual
        kept = list(range(m)) if seen is None else seen
        block = s[np.ix_(kept, kept)]
        square = np.einsum("uj,jk,uk->u", error[:, kept], np.linalg.inv(block), error[:, kept]) if kept else 0.0
        size = (2 * math.pi) ** len(kept) * (np.linalg.det(block) if kept else 1.0)
        density = np.exp(-0.5 * square) / math.sqrt(size)
        total += weight * density * chance(error, s)
    total *= np.exp(-0.5 * u**2 / s2) / math.sqrt(2 * math.pi * s2)
    mass = np.trapezoid(total, u)
    mean = np.trapezoid(total * u, u) / mass
    return math.log(mass), mean, np.trapezoid(total * (u - mean) ** 2, u) / mass


def _summary(parts) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    share = np.exp(parts.log_weight - parts.log_total[:, None])
    mean = np.sum(share * parts.mean, axis=1)
    return parts.log_total, mean, np.sum(share * (parts.variance + (parts.mean - mean[:, None]) ** 2), axis=1)


@pytest.mark.parametrize("m", [1, 2, 4])
def test_volume_integrated_out_agrees_with_quadrature(m: int) -> None:
    residual, cov = _nodes(m)
    log_total, mean, variance = _summary(gaussian_parts(residual, cov, 0.04, SPREAD))
    for node in range(3):
        expected = _by_quadrature(residual[node], cov[node], 0.04, SPREAD)
        assert log_total[node] == pytest.approx(expected[0], abs=1e-7)
        assert mean[node] == pytest.approx(expected[1], abs=1e-8)
        assert variance[node] == pytest.approx(expected[2], rel=1e-6)


@pytest.mark.parametrize("side", ["below", "above"])
def test_one_censored_level_agrees_with_quadrature(side: str) -> None:
    residual, cov = _nodes(3, seed=2)
    hidden, seen = 1, [0, 2]
    parts = censored_parts(residual, cov, 0.04, SPREAD, [None, side, None])

    def chance(error: np.ndarray, s: np.ndarray) -> np.ndarray:
        gain = np.linalg.solve(s[np.ix_(seen, seen)], s[seen, hidden])
        left = s[hidden, hidden] - s[hidden, seen] @ gain
        z = (error[:, hidden] - error[:, seen] @ gain) / math.sqrt(left)
        return ndtr(z if side == "below" else -z)

    log_total, mean, variance = _summary(parts)
    for node in range(3):
        expected = _by_quadrature(residual[node], cov[node], 0.04, SPREAD, chance, seen)
        assert log_total[node] == pytest.approx(expected[0], abs=2e-2)
        assert mean[node] == pytest.approx(expected[1], abs=2e-3)
        assert variance[node] == pytest.approx(expected[2], rel=3e-2)


def test_two_censored_levels_agree_with_the_joint_normal_chance() -> None:
    from scipy.stats import multivariate_normal

    residual, cov = _nodes(2, seed=3)
    clean = RecordSpread(0.05, 0.0)
    parts = censored_parts(residual, cov, 0.04, clean, ["below", "above"])
    flip = np.diag([1.0, -1.0])
    for node in range(3):
        # over u and the errors together: P(error_1 < b_1, error_2 > b_2) with b = u - r is one normal chance
        joint = flip @ (cov[node] + 0.04) @ flip
        expected = multivariate_normal.cdf(flip @ -residual[node], mean=np.zeros(2), cov=joint)
        assert math.exp(parts.log_total[node]) == pytest.approx(expected, rel=0.02)


def test_covariance_is_own_spread_plus_what_shared_doses_bring() -> None:
    gain = np.array([[[2.0, 0.0], [1.0, 3.0]]])
    s = covariance(np.array([0.01, 0.02]), gain, np.array([0.1, 0.2]))
    assert s[0] == pytest.approx(np.array([[0.01 + 0.4, 0.2], [0.2, 0.02 + 0.1 + 1.8]]))


def test_weights_of_the_parts_sum_to_one() -> None:
    log_weight, extra = part_weights(3, SPREAD)
    assert np.exp(log_weight).sum() == pytest.approx(1.0)
    assert extra.tolist() == [15.0, 15.0, 15.0]
    assert part_weights(3, RecordSpread(0.0, 0.0))[1].size == 0


def test_logsumexp_keeps_minus_infinity() -> None:
    values = np.array([[0.0, 0.0], [-np.inf, -np.inf], [-1000.0, -1000.0]])
    assert logsumexp(values) == pytest.approx([math.log(2), -np.inf, -1000 + math.log(2)])


def test_own_variance_adds_the_parts() -> None:
    level = LevelData(1.0, 2.0, assay_cv=0.1, floor_mg_per_L=0.3, day_cv=0.05, extra_log_sd=0.2)
    expected = math.log1p(0.01) + math.log1p(0.0225) + math.log1p(0.0025) + 0.04
    assert level.own_variance == pytest.approx(expected)


# The intake ------------------------------------------------------------------------------------------------

CAPSULE = Absorption(ka_per_day=24.0, release_day=5 / 24)
PROMPT = Absorption(ka_per_day=8.0, lag_day=0.02)


def _record(absorption: Absorption, days: int = 14, extra: tuple[Dose, ...] = ()) -> Record:
    doses = tuple(Dose(d + 0.9, 300.0, absorption=absorption) for d in range(days))
    return Record(doses=doses + extra)


@pytest.mark.parametrize("absorption", [CAPSULE, PROMPT])
@pytest.mark.parametrize("path", [(), (FirstOrder(rate_per_day=0.1),)])
def test_sensitivity_to_each_dose_agrees_with_the_engine(absorption: Absorption, path: tuple) -> None:
    base = _record(absorption)
    record = Record(doses=base.doses, first_order=path)
    days = [5.3, 13.95]
    plan = plan_intake(record, days, SPREAD)
    vmax, kappa = np.array([330.0, 455.0, 700.0]), np.array([120.0, 245.0, 500.0])
    course, faded = flow.fading(record, plan.sample_days, vmax, kappa)
    ours = intake_gain(plan, course, faded)
    windows = [(d.time_day, d.time_day + 0.5) for d in record.doses if d.time_day < 13.95]
    engine = flow.sensitivity(record, days, windows, vmax, kappa)
    # each level's whole sensitivity, and its spread (what the estimate uses), to less than half a per cent
    single, habit = ours[:, :, :-1], ours[:, :, -1]
    assert single.sum(axis=2) == pytest.approx(engine.sum(axis=2), rel=0.004)
    assert np.sqrt((single**2).sum(axis=2)) == pytest.approx(np.sqrt((engine**2).sum(axis=2)), rel=0.004)
    assert habit == pytest.approx(single.sum(axis=2) * 0.5 * 0.05 / 0.95)


def test_a_session_given_as_a_clearance_is_the_same_as_its_rate() -> None:
    doses = _record(CAPSULE, 6).doses
    gains = []
    for path in (
        FirstOrder(rate_per_day=0.5, start_day=2.0, end_day=3.0),
        FirstOrder(clearance_L_per_day=24.5, start_day=2.0, end_day=3.0),
    ):
        record = Record(doses=doses, first_order=(path,))
        plan = plan_intake(record, [5.5], SPREAD)
        vmax, kappa, volume = np.array([455.0]), np.array([245.0]), np.array([49.0])
        course, faded = flow.fading(record, plan.sample_days, vmax, kappa, volume_L=volume)
        gains.append(intake_gain(plan, course, faded))
    assert gains[1] == pytest.approx(gains[0])


def test_doses_into_a_vein_and_observed_doses_are_not_doubted() -> None:
    record = _record(CAPSULE, 10, (Dose(0.0, 1000.0, duration_day=0.02),))
    assert plan_intake(record, [9.5], SPREAD).groups == 9 + 1
    assert plan_intake(record, [9.5], RecordSpread(0.0)).groups == 0
    admitted = RecordSpread(((0.0, 0.1), (5.0, 0.0)))
    plan = plan_intake(record, [9.5], admitted)
    assert plan.variance == pytest.approx([*np.full(5, 0.1 / 0.9), 1.0])
    taken = taken_on_average(record, admitted)
    assert [d.amount_mg for d in taken.doses] == pytest.approx([270.0] * 5 + [300.0] * 5 + [1000.0])


def test_an_earlier_regimen_is_taken_on_average_too() -> None:
    regimen = Repeated(1.0, (Dose(0.5, 300.0, absorption=CAPSULE),))
    record = Record(before=Before(regimen, 90.0))
    assert taken_on_average(record, RecordSpread(0.2)).before.regimen.rate_mg_per_day == pytest.approx(240.0)
    assert taken_on_average(record, RecordSpread(0.0)) == record


def test_many_doses_are_taken_together() -> None:
    record = Record(doses=tuple(Dose(d / 4, 100.0, absorption=PROMPT) for d in range(600)))
    plan = plan_intake(record, [150.0], SPREAD)
    assert plan.groups == 200 + 1 <= MOST_DOSES
    assert plan.variance == pytest.approx([*np.full(200, 0.05 / 0.95 / 3), 1.0])


@pytest.mark.parametrize(("rate", "per_day", "days"), [(350.0, 1, 21), (300.0, 2, 14)])
def test_spread_is_that_of_simulated_missed_doses(rate: float, per_day: int, days: int) -> None:
    """150 patients alike who miss 5 % of their doses: their levels scatter as the model says."""
    rng = np.random.default_rng(7)
    planned = [Dose(i / per_day, rate / per_day, absorption=PROMPT) for i in range(days * per_day)]
    found = []
    for _ in range(150):
        kept = rng.random(len(planned)) >= 0.05
        record = Record(doses=tuple(d for d, yes in zip(planned, kept, strict=True) if yes))
        found.append(math.log(flow.amounts(record, [days], 455.0, 245.0)[0, 0]))
    record = taken_on_average(Record(doses=tuple(planned)), SPREAD)
    plan = plan_intake(record, [float(days)], SPREAD)
    course, faded = flow.fading(record, plan.sample_days, 455.0, 245.0)
    gain = intake_gain(plan, course, faded)[:, :, :-1]
    sd = math.sqrt(covariance(np.zeros(1), gain, plan.variance[:-1])[0, 0, 0])
    mean = math.log(course[0, plan.level_at[0]])
    # the standard error of a standard deviation from 150 is 6 %, more for a skewed one
    assert float(np.std(found)) == pytest.approx(sd, rel=0.18)
    assert float(np.mean(found)) == pytest.approx(mean, abs=0.25 * sd)


def test_share_of_doses_by_day_and_its_words() -> None:
    assert RecordSpread(0.05).words == "assumes that about 5 % of doses were missed unseen"
    assert RecordSpread(0.0).words == "takes every dose as recorded (observed dosing)"
    both = RecordSpread(((0.0, 0.2), (10.0, 0.0)))
    assert [both.share_at(day) for day in (-3.0, 0.0, 9.9, 10.0, 99.0)] == [0.2, 0.2, 0.2, 0.0, 0.0]
    assert both.words == ("assumes that between 0 and 20 % of doses were missed unseen, depending on who gave them")


# Messages --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("make", "text"),
    [
        (
            lambda: LevelData(math.nan, 10.0, 0.1),
            "Level 1, time: nan was given. Allowed: a time in days. Give the time of the draw.",
        ),
        (
            lambda: LevelData(1.0, 0.0, 0.1, index=1),
            "Level 2: 0 mg/L was given. Allowed: more than 0 mg/L. Enter a level below the limit of quantification "
            "as such, with that limit.",
        ),
        (
            lambda: LevelData(1.0, 10.0, -0.1),
            "Level 1, assay spread: -0.1 was given. Allowed: 0 or more. Check the assay's settings.",
        ),
        (
            lambda: LevelData(1.0, 10.0, 0.0),
            "Level 1, spread: 0 was given for all of its parts. Allowed: more than 0. Give the assay's coefficient "
            "of variation.",
        ),
        (
            lambda: RecordSpread(0.7),
            "Doses missed unseen: 70 % was given. Allowed: 0 to 50 %, both included. A record that is "
            "wrong more often than that says nothing: observe dosing first.",
        ),
        (
            lambda: RecordSpread(()),
            "Doses missed unseen: nothing was given. Allowed: 0 to 50 %, both included. A record that "
            "is wrong more often than that says nothing: observe dosing first.",
        ),
        (
            lambda: RecordSpread(((5.0, 0.1), (5.0, 0.0))),
            "Doses missed unseen: the periods are not in order. Allowed: each period begins after the "
            "one before. Sort the periods by their first day.",
        ),
        (
            lambda: RecordSpread(0.05, 0.5),
            "Chance of a wrong level: 50 % was given. Allowed: 0 to 20 %, both included. Check the setting.",
        ),
        (
            lambda: RecordSpread(0.05, 0.05, 0.5),
            "Spread of a wrong level: 0.5 times was given. Allowed: 1 time or more. Check the setting.",
        ),
    ],
)
def test_messages(make, text: str) -> None:
    with pytest.raises(CaseError) as caught:
        make()
    assert str(caught.value) == text
