"""The level to come on the record's own clock: from the draws of an estimate, and from what was really taken.

A level that lay off the record's course because of missed doses says something about the drug still in the
body. So for every draw the doubtful doses are first learned from the levels (they are normal given the draw),
then carried to the times asked for, together with the doubt about the doses still to come."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from pkcalc import flow
from pkcalc.errors import CannotEstimate
from pkcalc.estimate.error_model import LevelData, RecordSpread, covariance
from pkcalc.estimate.intake import intake_gain, plan_intake
from pkcalc.estimate.posterior import as_reckoned
from pkcalc.estimate.result import Estimate
from pkcalc.record import Dose, Record

Floats = NDArray[np.float64]

#: The seed of the normal deviates of the intake: the same input gives the same bits.
_SEED = 20_240_229


def volume_of(estimate: Estimate) -> Floats:
    """The draws of the volume; refused where the estimate has none."""
    if estimate.volume_L is None:
        raise CannotEstimate(
            "This estimate has no volume of distribution.",
            "Without one nobody can say how fast a level moves.",
            "Give the weight, or use the whole record.",
        )
    return estimate.volume_L


def predicted_levels(
    record: Record,
    levels: Sequence[LevelData],
    spread: RecordSpread,
    estimate: Estimate,
    times_day: Sequence[float],
    *,
    following: Sequence[Dose] = (),
    first_order_per_day: float = 0.0,
    typical_per_day: float | None = None,
) -> Floats:
    """True level [mg/L, working basis] at each time for every draw of the estimate; shape (draws, times).

    record, levels, spread: as given to `from_record`. following: doses planned after the record. The doses
    that follow are doubted as much as `spread` says for their days (give it as periods where dosing will be
    observed). times_day: at or after the record's start. first_order_per_day: the population's parallel path,
    if any. typical_per_day: what sets the engine's steps, as in `flow.amounts`."""
    whole = replace(record, doses=(*record.doses, *following))
    full = as_reckoned(whole, spread, first_order_per_day)
    days = [*(x.time_day for x in levels), *times_day]
    plan = plan_intake(full, days, spread)
    vmax, volume = estimate.vmax_mg_per_day, volume_of(estimate)
    kappa = estimate.km_mg_per_L * volume
    course, faded = flow.fading(full, plan.sample_days, vmax, kappa, volume_L=volume, typical_per_day=typical_per_day)
    gain = intake_gain(plan, course, faded)
    log_level = np.log(course[:, plan.level_at]) - np.log(volume)[:, None]
    m, n = len(levels), len(vmax)
    noise = np.random.default_rng(_SEED)
    # doses after the last level: taken or not, drawn one by one; the levels say nothing of them but the habit
    told = np.any(plan.absorbed[:m] > 0, axis=(0, 2))
    to_come = np.zeros(plan.groups, dtype=bool)
    if plan.groups == len(told) + 1:
        to_come[:-1] = ~told
    odds = plan.variance[to_come]
    taken = noise.random((n, len(odds))) >= odds / (1 + odds)
    change = taken * (1 + odds) - 1
    later = np.einsum("ntd,nd->nt", gain[:, m:, to_come], change)
    shared = covariance(np.zeros(len(days)), gain[:, :, ~to_come], plan.variance[~to_come])
    mean, cov = log_level[:, m:] + later, shared[:, m:, m:]
    if m:
        own = np.array([x.own_variance for x in levels])
        error = np.log([x.level_mg_per_L for x in levels]) - log_level[:, :m]
        s = shared[:, :m, :m] + np.diag(own)
        s = _widened(s, error, spread, noise.random(n))
        error = _hidden_levels(s, error, [x.censored for x in levels], noise)
        gain_of_levels = np.linalg.solve(s, shared[:, :m, m:])
        mean = mean + np.einsum("nm,nmt->nt", error, gain_of_levels)
        cov = cov - shared[:, m:, :m] @ gain_of_levels
    root = np.linalg.cholesky(cov + 1e-12 * np.eye(len(times_day)))
    found: Floats = np.exp(mean + np.einsum("nts,ns->nt", root, noise.standard_normal((n, len(times_day)))))
    return found


def _widened(s: Floats, error: Floats, spread: RecordSpread, toss: Floats) -> Floats:
    """S of every draw with the wrong level, if any, drawn from its chance given the draw."""
    if spread.wrong_level_chance == 0:
        return s
    n, m = error.shape
    log_weight = np.empty((n, m + 1))
    wide = [s]
    for j in range(m):
        other = s.copy()
        other[:, j, j] *= spread.wrong_level_factor**2
        wide.append(other)
    for part, one in enumerate(wide):
        prior = spread.wrong_level_chance if part else 1 - spread.wrong_level_chance
        square = np.einsum("nj,nj->n", error, np.linalg.solve(one, error[:, :, None])[:, :, 0])
        log_weight[:, part] = math.log(prior) - 0.5 * (square + np.linalg.slogdet(one)[1])
    chance = np.exp(log_weight - log_weight.max(axis=1, keepdims=True))
    cumulative = np.cumsum(chance / chance.sum(axis=1, keepdims=True), axis=1)
    chosen = np.minimum(np.sum(cumulative < toss[:, None], axis=1), m)
    picked: Floats = np.stack(wide, axis=1)[np.arange(n), chosen]
    return picked


def _hidden_levels(s: Floats, error: Floats, censored: Sequence[str | None], noise: np.random.Generator) -> Floats:
    """The error of every censored level, drawn beyond its limit given the measured ones and the earlier of
    them."""
    if not any(censored):
        return error
    from scipy.special import ndtr, ndtri

    out = error.copy()
    known = [j for j, c in enumerate(censored) if c is None]
    for j, side in enumerate(censored):
        if side is None:
            continue
        if known:
            gain = np.linalg.solve(s[:, known][:, :, known], s[:, known, j][:, :, None])[:, :, 0]
            centre = np.sum(gain * out[:, known], axis=1)
            left = s[:, j, j] - np.sum(gain * s[:, known, j], axis=1)
        else:
            centre, left = np.zeros(len(out)), s[:, j, j]
        edge = ndtr((error[:, j] - centre) / np.sqrt(left))
        low, high = (np.zeros_like(edge), edge) if side == "below" else (edge, np.ones_like(edge))
        place = np.clip(low + (high - low) * noise.random(len(edge)), 1e-300, 1 - 1e-16)
        out[:, j] = centre + np.sqrt(left) * ndtri(place)
        known = sorted([*known, j])
    return out
