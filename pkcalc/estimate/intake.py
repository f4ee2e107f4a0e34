"""What was really taken: doses missed unseen, on average and one by one, and what that does to each level.

Of the doses that nobody saw taken a share p_i is expected to be missed: the course is calculated with what
was taken on average, (1 - p_i) of each. Round that mean every dose was taken or not by itself, and a person's
habit may be better or worse than assumed:

    fraction of dose i, relative to its mean:   1 + e_i + h_i z      var e_i = p_i / (1 - p_i)
                                                h_i = HABIT p_i / (1 - p_i), z standard normal, one for all
                                                doses

The sensitivity of a level to a dose follows from one pass through the record. With
lambda(t) = Vmax kappa / (kappa + X)^2 + k, the rate at which a small difference in the amount dies away,

    d ln X(t) / d (fraction of dose i) = a_i share_i(t) mean of exp(-integral of lambda from s to t) / X(t)

share_i: part of the dose absorbed by t. The mean over the times s at which that part was absorbed is taken at two
moments, with weights: Gauss's rule for the first three moments of those times. It costs less than half a per cent of
the sensitivity (tested against `flow.sensitivity`) and spares a pass for every dose."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pkcalc.estimate.error_model import RecordSpread
from pkcalc.record import Dose, Record, Repeated

Floats = NDArray[np.float64]

#: How far a person's own share of missed doses may be from the assumed one: standard deviation over the share
#: (own choice; tested in the calibration table by wards that miss none and twice the assumed share).
HABIT = 0.5

#: Doses are followed one by one up to this many; beyond, neighbours are taken together so that memory stays
#: bounded.
MOST_DOSES = 256

#: Absorption times closer than this are looked up at one moment (about 0.1 second).
SAME_ENTRY_DIGITS = 6


@dataclass(frozen=True)
class IntakePlan:
    """What is the same for every node: when to look at the course, and which doses may differ from the
    record.

    sample_days (S,): times of the course; level_at (m,): the levels' places among them. doses_mg (D,): the
    doubtful doses; entry_at (m, D, 2): places among the sample days of the two moments that stand for the times of
    absorption by a level; absorbed (m, D, 2): share of the dose absorbed by then that each stands for.
    member (D, W): 1 where a dose belongs to a group (normally each its own). variance (W,): of the fractional
    intake of a group."""

    sample_days: Floats
    level_at: NDArray[np.intp]
    doses_mg: Floats
    absorbed: Floats
    entry_at: NDArray[np.intp]
    member: Floats
    variance: Floats

    @property
    def groups(self) -> int:
        return len(self.variance)


def taken_on_average(record: Record, spread: RecordSpread) -> Record:
    """The record with every doubtful dose reduced by the share of such doses that is expected to be
    missed."""

    def taken(dose: Dose) -> Dose:
        missed = spread.share_at(dose.time_day) if dose.absorption is not None else 0.0
        return replace(dose, amount_mg=dose.amount_mg * (1 - missed)) if missed else dose

    before = record.before
    if before is not None:
        before = replace(before, regimen=regimen_on_average(before.regimen, spread.share_at(record.start_day)))
    return replace(record, doses=tuple(taken(d) for d in record.doses), before=before)


def regimen_on_average(regimen: Repeated, missed: float) -> Repeated:
    """A regimen with every dose but those into a vein reduced by the share expected to be missed."""
    return replace(
        regimen,
        doses=tuple(
            replace(d, amount_mg=d.amount_mg * (1 - missed)) if d.absorption is not None else d for d in regimen.doses
        ),
    )


def plan_intake(record: Record, level_days: Sequence[float], spread: RecordSpread) -> IntakePlan:
    """Sample times, doubtful doses and their absorbed shares, for a record of what was taken on average.

    Doses into a vein are taken as given as recorded; of the others each was missed with the chance of its
    day."""
    times = np.array(level_days, dtype=np.float64)
    last = float(times.max())
    doubtful = sorted(
        (d for d in record.doses if d.absorption is not None and d.time_day < last and spread.share_at(d.time_day) > 0),
        key=lambda d: d.time_day,
    )
    size = math.ceil(len(doubtful) / MOST_DOSES) if doubtful else 1
    group = np.arange(len(doubtful)) // size
    count = int(group[-1]) + 1 if doubtful else 0
    amount = np.array([d.amount_mg for d in doubtful])
    chance = np.array([spread.share_at(d.time_day) for d in doubtful])
    total = np.bincount(group, weights=amount, minlength=count)
    odds = chance / (1 - chance)
    unseen = np.bincount(group, weights=amount**2 * odds, minlength=count)
    member = np.concatenate([np.eye(count)[group].reshape(len(doubtful), count), HABIT * odds[:, None]], axis=1)
    parts = np.array([[_absorbed(d, t) for d in doubtful] for t in level_days]).reshape(len(times), len(doubtful), 2, 2)
    entry, absorbed = parts[:, :, :, 0], parts[:, :, :, 1]
    # absorbed before the record begins: it dies away from there; nothing absorbed: nothing to look up
    entry = np.clip(np.round(entry, SAME_ENTRY_DIGITS), record.start_day, times[:, None, None])
    days = np.unique(np.concatenate([times, entry[absorbed > 0]]))
    return IntakePlan(
        sample_days=days,
        level_at=np.searchsorted(days, times),
        doses_mg=amount,
        absorbed=absorbed,
        entry_at=np.minimum(np.searchsorted(days, entry), len(days) - 1),
        member=member if doubtful else np.zeros((0, 0)),
        variance=np.append(unseen / total**2, 1.0) if doubtful else np.zeros(0),
    )


def _absorbed(dose: Dose, day: float) -> tuple[tuple[float, float], tuple[float, float]]:
    """Two moments [day] that stand for the times at which a dose was absorbed by a day, each with its share of the
    dose."""
    form = dose.absorption
    begin = dose.time_day + (form.lag_day if form else 0.0)
    since = day - begin
    if since <= 0:
        return (day, 0.0), (day, 0.0)
    if form is None:
        spread = dose.duration_day
        gone = min(since, spread)
        return _two_moments(gone / spread if spread > 0 else 1.0, gone / 2, gone**2 / 3, gone**3 / 4, begin, since)
    ka, spread = form.ka_per_day, form.release_day
    stay, released = 1.0 / ka, min(since, spread)
    # rest in the gut of a constant release over `spread`, absorbed at ka
    if spread > 0:
        share = released / spread
        gut = -math.expm1(-ka * released) / (ka * spread) * math.exp(-ka * (since - released))
    else:
        share, gut = 1.0, math.exp(-ka * since)
    absorbed = share - gut
    if absorbed < 1e-4:
        # too little for a difference of two near numbers
        return (begin + 0.5 * since, max(absorbed, 0.0)), (begin + 0.5 * since, 0.0)
    # moments of release plus stay in the gut, less those of what is absorbed only after this day
    first = share * (released / 2 + stay) - gut * (since + stay)
    second = share * (released**2 / 3 + released * stay + 2 * stay**2)
    second -= gut * (since**2 + 2 * since * stay + 2 * stay**2)
    third = share * (released**3 / 4 + released**2 * stay + 3 * released * stay**2 + 6 * stay**3)
    third -= gut * (since**3 + 3 * since**2 * stay + 6 * since * stay**2 + 6 * stay**3)
    return _two_moments(absorbed, first / absorbed, second / absorbed, third / absorbed, begin, since)


def _two_moments(
    share: float, first: float, second: float, third: float, begin: float, since: float
) -> tuple[tuple[float, float], tuple[float, float]]:
    """Gauss's rule of two points for a distribution on 0 to `since` with these moments about 0."""
    variance = max(second - first**2, 0.0)
    if variance < 1e-10 * since**2:
        return (begin + min(max(first, 0.0), since), share), (begin, 0.0)
    sd = math.sqrt(variance)
    skew = (third - 3 * first * variance - first**3) / sd**3
    reach = math.sqrt(1 + skew**2 / 4)
    early, late = (first + sd * (skew / 2 + side * reach) for side in (-1, 1))
    weight = 0.5 + skew / (4 * reach)
    return (
        (begin + min(max(early, 0.0), since), share * weight),
        (begin + min(max(late, 0.0), since), share * (1 - weight)),
    )


def intake_gain(plan: IntakePlan, course_mg: Floats, faded: Floats) -> Floats:
    """d ln level / d fractional intake of each group of doses, shape (nodes, m, W).

    course_mg, faded: amounts at the plan's sample days and what differences have died away by then
    (`flow.fading`), shape (nodes, S).
    """
    nodes, m = len(course_mg), len(plan.level_at)
    out = np.zeros((nodes, m, plan.groups))
    if not plan.groups:
        return out
    single = plan.groups == len(plan.doses_mg) + 1
    for j in range(m):
        used = np.flatnonzero(plan.absorbed[j].any(axis=1))
        at = plan.level_at[j]
        left = np.zeros((nodes, len(used)))
        for entry, share in zip(plan.entry_at[j, used].T, plan.absorbed[j, used].T, strict=True):
            still = faded[:, entry]
            still -= faded[:, at, None]
            np.minimum(still, 0.0, out=still)
            np.exp(still, out=still)
            still *= plan.doses_mg[used] * share
            left += still
        left /= course_mg[:, at, None]
        if single:
            out[:, j, used] = left
            out[:, j, -1] = left @ plan.member[used, -1]
        else:
            out[:, j, :] = left @ plan.member[used]
    return out
