"""Synthetic departments with known truth, for calibration, tests and demonstrations. Seeded; never real
patients.

Each patient is drawn from a population, takes doses by the clock with some missed unseen and all of them
taken a little off time, has levels drawn and measured, and has the dose changed after each level by a plain
step rule; the true level at the end of the last period is what a forecast is held against."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from pkcalc import flow
from pkcalc.drugs.profile import Prior
from pkcalc.record import Absorption, Dose, Record

#: A form absorbed over some hours.
CAPSULE = Absorption(ka_per_day=8.0)


@dataclass(frozen=True)
class Ward:
    """How a synthetic department works.

    levels: number of levels, one per dose. days_per_dose: days on each dose before its level (low, high:
    drawn between the two, both included). missed: share of doses not taken, unseen. jitter_h: standard
    deviation of the time a dose is taken. assay_cv, day_cv: of a measured level. vmax_factor, km_factor: the
    truth against the population. doses_per_day: drawn from these. first_mg_per_day: the dose it begins with.
    early_h: a level is drawn up to this long before the end of its period (irregular draws).
    """

    levels: int = 2
    days_per_dose: tuple[int, int] = (21, 21)
    missed: float = 0.05
    jitter_h: float = 0.75
    assay_cv: float = 0.05
    day_cv: float = 0.0
    vmax_factor: float = 1.0
    km_factor: float = 1.0
    doses_per_day: tuple[int, ...] = (1, 2, 3)
    first_mg_per_day: float = 300.0
    absorption: Absorption = CAPSULE
    early_h: float = 0.0


@dataclass(frozen=True)
class SyntheticPatient:
    """One patient: the record as written, the levels as measured, and the truth.

    record: doses as recorded, of all periods but the last. level_days, level_mg_per_L: as measured;
    true_mg_per_L: what they were. following: doses as planned for the last period. target_day: its end;
    target_mg_per_L: the true level then, with doses missed as before; both None where the last period was not
    lived through. rates_mg_per_day: of every period, the last one included."""

    number: int
    vmax_mg_per_day: float
    km_mg_per_L: float
    volume_L: float
    record: Record
    level_days: tuple[float, ...]
    level_mg_per_L: tuple[float, ...]
    true_mg_per_L: tuple[float, ...]
    following: tuple[Dose, ...]
    target_day: float | None
    target_mg_per_L: float | None
    rates_mg_per_day: tuple[float, ...]


#: Dose given next, by the level just measured (below this level [mg/L], change [mg/day]); a plain step rule.
STEPS = ((7.0, 100.0), (12.0, 50.0), (20.0, 30.0), (30.0, -50.0), (float("inf"), -100.0))
_LEAST_MG_PER_DAY = 50.0


def next_rate(rate_mg_per_day: float, level_mg_per_L: float) -> float:
    """The dose rate that the department's step rule gives after a level."""
    change = next(step for below, step in STEPS if level_mg_per_L < below)
    return max(rate_mg_per_day + change, _LEAST_MG_PER_DAY)


def patients(
    ward: Ward, prior: Prior, *, count: int, seed: int, first: int = 0, target: bool = True
) -> Iterator[SyntheticPatient]:
    """Patients first .. first + count - 1 of a department; each depends on the seed and its own number only.

    target: whether the last period, after the last level, is lived through; the records are the same."""
    for number in range(first, first + count):
        yield _patient(ward, prior, number, np.random.default_rng((seed, number)), target)


def _patient(ward: Ward, prior: Prior, number: int, chance: np.random.Generator, target: bool) -> SyntheticPatient:
    z = chance.standard_normal(3)
    z[1] = prior.correlation * z[0] + np.sqrt(1 - prior.correlation**2) * z[1]
    vmax = prior.vmax_mg_per_day * ward.vmax_factor * float(np.exp(prior.vmax_log_sd * z[0]))
    km = prior.km_mg_per_L * ward.km_factor * float(np.exp(prior.km_log_sd * z[1]))
    volume = prior.volume_L * float(np.exp(prior.volume_log_sd * z[2]))
    per_day = int(chance.choice(ward.doses_per_day))
    rate, begin = ward.first_mg_per_day, 0.0
    written: list[Dose] = []
    taken: list[Dose] = []
    rates: list[float] = []
    days: list[float] = []
    measured: list[float] = []
    true: list[float] = []
    following: list[Dose] = []
    for period in range(ward.levels + 1):
        rates.append(rate)
        if period == ward.levels and not target:
            break
        length = int(chance.integers(ward.days_per_dose[0], ward.days_per_dose[1] + 1))
        if period == ward.levels:
            length = ward.days_per_dose[1]
        times = begin + np.arange(length * per_day) / per_day
        planned = [Dose(float(t), rate / per_day, absorption=ward.absorption) for t in times]
        late = chance.standard_normal(len(planned)) * ward.jitter_h / 24
        kept = chance.random(len(planned)) >= ward.missed
        # a dose is not taken before the record begins, nor after the draw that ends its period
        end = begin + length
        taken += [
            Dose(float(np.clip(d.time_day + shift, 0.0, end - 1e-6)), d.amount_mg, absorption=d.absorption)
            for d, shift, yes in zip(planned, late, kept, strict=True)
            if yes
        ]
        drawn = end
        if ward.early_h > 0 and period < ward.levels:
            drawn -= math.floor(60 * ward.early_h * chance.random()) / 1440
        level = float(flow.amounts(Record(doses=tuple(taken)), [drawn], vmax, km * volume)[0, 0]) / volume
        noise = np.exp(np.sqrt(np.log1p(ward.assay_cv**2) + np.log1p(ward.day_cv**2)) * chance.standard_normal())
        if period == ward.levels:
            following = planned
            break
        written += planned
        days.append(drawn)
        true.append(level)
        measured.append(level * float(noise))
        rate, begin = next_rate(rate, measured[-1]), end
    return SyntheticPatient(
        number=number,
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        volume_L=volume,
        record=Record(doses=tuple(written)),
        level_days=tuple(days),
        level_mg_per_L=tuple(measured),
        true_mg_per_L=tuple(true),
        following=tuple(following),
        target_day=begin + length if target else None,
        target_mg_per_L=level if target else None,
        rates_mg_per_day=tuple(rates),
    )
