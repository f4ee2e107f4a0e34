"""What was really taken: doses missed unseen, on average and one by one, and what that does to each level.

Of the doses that nobody saw taken a share p_i is expected to be missed: the course is calculated with what
was taken on average, (1 - p_i) of each. Round that mean every dose was taken or not by itself, and a person's
habit may be better or worse than assumed:

    fraction of dose i, relative to its mean:   1 + e_i + h_i z      var e_i = p_i / (1 - p_i)
                                                h_i = HABIT p_i / (1 - p_i), z standard normal, one for all
                                                doses

The sensitivity of a level to a dose follows from the course already calculated. With
lambda(t) = Vmax kappa / (kappa + X)^2 + k, the rate at which a small difference in the amount dies away,

    d ln X(t) / d (fraction of dose i) = a_i share_i(t) exp(-integral of lambda from its absorption to t) /
    X(t)

share_i: part of the dose absorbed by t. A dose is taken as absorbed at its mean absorption time, which costs
at most about a per cent of the sensitivity (tested against `flow.sensitivity`) and spares a second pass
through the record."""

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

#: Spacing of the course on which the dying away of a difference is summed: finer while the level first builds up and
#: shortly before each level.
BUILD_UP_DAY, SHORTLY_DAY, FINE_SAMPLE_DAY, SAMPLE_DAY = 8.0, 2.0, 0.1, 0.3


@dataclass(frozen=True)
class IntakePlan:
    """What is the same for every node: when to look at the course, and which doses may differ from the
    record.

    sample_days (S,): times of the course; level_at (m,): the levels' places among them. doses_mg (D,): the
    doubtful doses; absorbed (m, D): share of each absorbed by each level; entry_day (m, D): when, on average.
    member (D, W): 1 where a dose belongs to a group (normally each its own). variance (W,): of the fractional
    intake of a group."""

    sample_days: Floats
    level_at: NDArray[np.intp]
    doses_mg: Floats
    absorbed: Floats
    entry_day: Floats
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
    if doubtful:
        begin = max(doubtful[0].time_day, record.start_day)
        fine = [np.arange(begin, min(begin + BUILD_UP_DAY, last), FINE_SAMPLE_DAY)]
        fine += [np.arange(max(t - SHORTLY_DAY, begin), t, FINE_SAMPLE_DAY) for t in level_days]
        days = np.unique(np.concatenate([*fine, np.arange(begin, last, SAMPLE_DAY), times]))
        # two samplings may fall on nearly the same moment; the levels' own times stay
        kept = np.concatenate([np.diff(days) > 0.4 * FINE_SAMPLE_DAY, [True]]) | np.isin(days, times)
        days = days[kept]
    else:
        days = np.unique(times)
    size = math.ceil(len(doubtful) / MOST_DOSES) if doubtful else 1
    group = np.arange(len(doubtful)) // size
    count = int(group[-1]) + 1 if doubtful else 0
    amount = np.array([d.amount_mg for d in doubtful])
    chance = np.array([spread.share_at(d.time_day) for d in doubtful])
    total = np.bincount(group, weights=amount, minlength=count)
    odds = chance / (1 - chance)
    unseen = np.bincount(group, weights=amount**2 * odds, minlength=count)
    member = np.concatenate([np.eye(count)[group].reshape(len(doubtful), count), HABIT * odds[:, None]], axis=1)
    shares = [[_absorbed(d, t) for d in doubtful] for t in level_days]
    shape = (len(times), len(doubtful))
    return IntakePlan(
        sample_days=days,
        level_at=np.searchsorted(days, times),
        doses_mg=amount,
        absorbed=np.array([[share for share, _ in row] for row in shares]).reshape(shape),
        entry_day=np.array([[day for _, day in row] for row in shares]).reshape(shape),
        member=member if doubtful else np.zeros((0, 0)),
        variance=np.append(unseen / total**2, 1.0) if doubtful else np.zeros(0),
    )


def _absorbed(dose: Dose, day: float) -> tuple[float, float]:
    """Share of a dose absorbed by a day, and when on average that share was absorbed."""
    form = dose.absorption
    begin = dose.time_day + (form.lag_day if form else 0.0)
    since = day - begin
    if since <= 0:
        return 0.0, day
    if form is None:
        spread = dose.duration_day
        if since >= spread:
            return 1.0, begin + 0.5 * spread
        return since / spread, begin + 0.5 * since
    ka, spread = form.ka_per_day, form.release_day
    released = min(since, spread)
    # rest in the gut of a constant release over `spread`, absorbed at ka
    if spread > 0:
        share = released / spread
        gut = -math.expm1(-ka * released) / (ka * spread) * math.exp(-ka * (since - released))
        mean = 0.5 * released + 1.0 / ka
    else:
        share, gut, mean = 1.0, math.exp(-ka * since), 1.0 / ka
    absorbed = share - gut
    # of what is absorbed by now, the part still to come is missing from the mean
    mean_now = (mean * share - gut * (since + 1.0 / ka)) / absorbed if absorbed > 1e-9 else 0.5 * since
    return absorbed, begin + min(max(mean_now, 0.0), since)


def intake_gain(
    plan: IntakePlan, record: Record, course_mg: Floats, vmax: Floats, kappa: Floats, *, volume_L: Floats | None = None
) -> Floats:
    """d ln level / d fractional intake of each group of doses, shape (nodes, m, W).

    course_mg: amounts at the plan's sample days, shape (nodes, S). vmax [mg/day], kappa [mg]: shape (nodes,).
    volume_L: shape (nodes,), needed only where a first-order path is given as a clearance.
    """
    nodes, m = len(vmax), len(plan.level_at)
    out = np.zeros((nodes, m, plan.groups))
    if not plan.groups:
        return out
    days = plan.sample_days
    rate = (vmax * kappa)[:, None] / (kappa[:, None] + course_mg) ** 2
    gone = np.zeros_like(rate)
    np.cumsum(0.5 * (rate[:, 1:] + rate[:, :-1]) * np.diff(days), axis=1, out=gone[:, 1:])
    for path in record.first_order:
        begin, end = max(path.start_day, days[0]), min(path.end_day, days[-1])
        open_for = np.clip(days, begin, max(begin, end)) - begin
        if path.rate_per_day is not None:
            gone += path.rate_per_day * open_for
        elif path.clearance_L_per_day is not None and volume_L is not None:
            gone += (path.clearance_L_per_day / volume_L)[:, None] * open_for
    single = plan.groups == len(plan.doses_mg) + 1
    for j in range(m):
        used = np.flatnonzero(plan.absorbed[j] > 0)
        entry = plan.entry_day[j, used]
        cell = np.clip(np.searchsorted(days, entry, side="right") - 1, 0, len(days) - 2)
        part = np.clip((entry - days[cell]) / (days[cell + 1] - days[cell]), 0.0, 1.0)
        then = gone[:, cell] * (1 - part) + gone[:, cell + 1] * part
        at = plan.level_at[j]
        left = np.exp(np.minimum(then - gone[:, at, None], 0.0))
        left *= plan.doses_mg[used] * plan.absorbed[j, used]
        left /= course_mg[:, at, None]
        if single:
            out[:, j, used] = left
            out[:, j, -1] = left @ plan.member[used, -1]
        else:
            out[:, j, :] = left @ plan.member[used]
    return out
