"""What is given now: the regimen in force, the level today (per draw), and how the doses of the past were taken."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np
from numpy.typing import NDArray

from pkcalc.case import Case, Course
from pkcalc.dosing import Regimen
from pkcalc.drugs.profile import LargeOral, Profile
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.predict import predicted_levels
from pkcalc.estimate.result import Band, Estimate
from pkcalc.forecast import TIME_DRAWS, Goal, bands, fewer_draws
from pkcalc.levels import Observation, adherence, free_partner
from pkcalc.record import Dose, Record
from pkcalc.units import show

Floats = NDArray[np.float64]


def present_course(case: Case) -> Course | None:
    """The line of the record in force now: the last repeated one that has not ended."""
    going = [c for c in case.courses if c.regimen is not None and c.counts_as_given and c.end is None]
    dated = [c for c in going if c.start is not None]
    if dated:
        return max(dated, key=lambda c: c.start.timestamp() if c.start else 0.0)
    return going[-1] if going else None


def present_rate(case: Case, profile: Profile) -> float | None:
    """Active drug per day on the present regimen [mg/day]; None where nothing repeated is given now."""
    course = present_course(case)
    return None if course is None or course.regimen is None else course.regimen.active_mg_per_day(profile)


def is_present(regimen: Regimen, case: Case, profile: Profile) -> bool:
    """True where a regimen delivers the same active amount per day as the present one."""
    now = present_rate(case, profile)
    return now is not None and abs(regimen.active_mg_per_day(profile) - now) <= 1e-6 * now


@dataclass(frozen=True)
class Large:
    """An amount of active drug swallowed at once, so large that its published peak comes later than a usual one's."""

    hours_ago: float
    amount_mg: float
    peak_h: float

    @property
    def hours_to_peak(self) -> float:
        return self.peak_h - self.hours_ago


@dataclass(frozen=True)
class Today:
    """Where the patient stands when the plan begins.

    moment: clock time, None in a case without one. level_mg_per_L: per draw of `fewer_draws`, working
    basis; None without any level. words: how it was found. still_absorbed: oral doses of which something may
    still reach the blood, with times in days from now (0 or before); large: those swallowed at once whose published
    peak is still to come, taken to be released until it. measured_mg_per_L, measured_at: the latest level on
    the working basis, and when it was drawn (None: not stated).
    """

    moment: datetime | None
    level_mg_per_L: Floats | None
    words: str
    still_absorbed: tuple[Dose, ...]
    measured_mg_per_L: float | None
    measured_at: datetime | None = None
    large: tuple[Large, ...] = ()

    @property
    def start_mg_per_L(self) -> Floats | float:
        return 0.0 if self.level_mg_per_L is None else self.level_mg_per_L

    @property
    def level(self) -> Band | None:
        if self.level_mg_per_L is None:
            return None
        return bands(self.level_mg_per_L[None, :], np.full(len(self.level_mg_per_L), 1.0))[0]


@dataclass(frozen=True)
class History:
    """The record that an estimate was learned from, with its levels and how far both are believed."""

    record: Record
    levels: tuple[LevelData, ...]
    spread: RecordSpread
    first_order_per_day: float = 0.0


def today(
    case: Case,
    profile: Profile,
    estimate: Estimate,
    observations: Sequence[Observation],
    history: History | None,
) -> Today:
    """Today's level, from the record and its levels where the estimate comes from them; else the latest level.

    estimate: its true elimination (every dose taken).
    """
    moment = case.plan_start or case.now
    latest = latest_level(observations)
    measured = latest.working_mg_per_L if latest is not None else None
    drawn = latest.level.drawn if latest is not None else None
    few = fewer_draws(estimate, TIME_DRAWS).estimate
    n = len(few.weights)
    if history is None or estimate.volume_L is None or moment is None or case.origin is None:
        words = "no level" if latest is None else f"{latest.name}, taken to hold now"
        level = None if measured is None else np.full(n, measured)
        return Today(moment, level, words, (), measured, drawn)
    record = history.record
    day = max(case.day(moment), record.start_day, *(x.time_day for x in history.levels))
    course = predicted_levels(
        record,
        history.levels,
        history.spread,
        few,
        (day,),
        first_order_per_day=history.first_order_per_day,
    )
    unabsorbed, large = uptake_to_come(record, day, profile)
    return Today(moment, course[:, 0], "by the course of the record", unabsorbed, measured, drawn, large)


#: Doses by mouth closer than this are taken for one amount swallowed at once.
AT_ONCE = timedelta(hours=1)


def uptake_to_come(record: Record, day: float, profile: Profile) -> tuple[tuple[Dose, ...], tuple[Large, ...]]:
    """Oral doses of which something may still reach the blood on a day, in days from it; and the large ones of them.

    A large amount at once is absorbed later than a usual dose. Where the drug file has peak times of large amounts,
    one whose peak is later than any usual one of its forms is taken to be released until that peak.
    """
    swallowed = [d for d in record.doses if d.absorption is not None and d.time_day <= day]
    together: list[list[Dose]] = []
    for dose in sorted(swallowed, key=lambda d: d.time_day):
        if together and dose.time_day - together[-1][0].time_day <= AT_ONCE / timedelta(days=1):
            together[-1].append(dose)
        else:
            together.append([dose])
    usual = max((f.absorption.peak_h[1] for f in profile.forms.values() if f.absorption is not None), default=0.0)
    found: list[Dose] = []
    large: list[Large] = []
    for group in together:
        amount = sum(d.amount_mg for d in group)
        peak = profile.large_oral.peak_h(amount) if profile.large_oral is not None else None
        ago = 24.0 * (day - group[0].time_day)
        late = peak is not None and peak > usual
        if late and peak is not None and ago < peak:
            large.append(Large(ago, amount, peak))
        for d in group:
            how = d.absorption
            assert how is not None
            if late and peak is not None:
                how = replace(how, release_day=max(how.release_day, peak / 24.0 - how.lag_day))
            slowed = Dose(d.time_day - day, d.amount_mg, 0.0, how)
            if -slowed.settled_after_day < slowed.time_day:
                found.append(slowed)
    return tuple(found), tuple(large)


def large_words(large: Large, profile: Profile) -> str:
    """What a large amount swallowed at once means for the level now, with what is published."""
    assert profile.large_oral is not None
    return (
        f"{show(large.amount_mg, 'mg', 4)} of active drug was swallowed at once {show(large.hours_ago, 'h', 2)} ago. "
        f"{published_peaks(profile.large_oral)} That puts the peak of this amount at about {show(large.peak_h, 'h')}: "
        f"the level may stay up or rise for {show(large.hours_to_peak, 'h')} more although nothing is given, and a "
        "level drawn before is not the highest."
    )


def published_peaks(large: LargeOral) -> str:
    """The published peak times of large amounts in a sentence."""
    said = [f"{show(h, 'h')} after {show(mg, 'mg')}" for mg, h in zip(large.amounts_mg, large.peaks_h, strict=True)]
    return f"Published peaks of large single amounts: {', '.join(said)} ({large.words})."


#: Where the site states no limit of quantification, levels below this share of the target's low end are not told apart.
LOWEST_SHARE = 0.1
#: A measured level counts as today's for so long.
FRESH = timedelta(hours=24)


def is_toxic(now: Today, goal: Goal) -> bool:
    """True where today's level is at or above the critical one: by the record, or by a level drawn within a day."""
    if now.level is not None and now.level.median >= goal.critical_mg_per_L:
        return True
    if now.measured_mg_per_L is None or now.measured_at is None or now.moment is None:
        return False
    return now.measured_mg_per_L >= goal.critical_mg_per_L and now.moment - now.measured_at <= FRESH


def latest_level(observations: Sequence[Observation]) -> Observation | None:
    """The latest level; of one sample, typed in any order, the one that is used (a free level before its total)."""
    dated = [o for o in observations if o.level.drawn is not None]
    last = max(dated, key=_drawn) if dated else observations[-1] if observations else None
    if last is None or last.usable:
        return last
    partner = free_partner(last, observations)
    if partner is not None and partner.usable:
        return partner
    same = [o for o in dated if o.usable and o.level.drawn == last.level.drawn]
    return same[0] if same else last


def _drawn(o: Observation) -> float:
    return o.level.drawn.timestamp() if o.level.drawn else 0.0


def doses_missed(case: Case, profile: Profile) -> tuple[float, str]:
    """Share of past doses taken to differ from the record, and in which words."""
    key, words = adherence(case)
    return profile.spread.intake_share[key], words


def adherence_in_doubt(case: Case) -> bool:
    """True unless somebody says that the doses were taken, or a nurse gave them all."""
    if case.answer("adherence_doubtful") == "no":
        return False
    course = present_course(case)
    by_nurse = course is not None and course.given_by == "nurse"
    return case.answer("adherence_doubtful") == "yes" or not by_nurse


def first_dose_hour(case: Case) -> float | None:
    """Time of day of the last dose of the day on the present regimen; None where it is not stated."""
    course = present_course(case)
    if course is None or course.regimen is None:
        return None
    if course.regimen.by_clock:
        return course.regimen.intakes[-1].hour
    if course.start is not None:
        return course.start.hour + course.start.minute / 60
    return None


def clocked(regimen: Regimen, case: Case) -> tuple[Regimen, bool]:
    """A regimen by the clock, and whether its times are known.

    Where only the interval is stated, the doses are counted from the time of day of the present one, if that is known;
    else from midnight, and no clock time may be named.
    """
    if regimen.by_clock:
        return regimen, True
    anchor = regimen.anchor_h if regimen.anchor_h is not None else first_dose_hour(case)
    first = anchor or 0.0
    cycle = regimen.cycle_h
    days = max(1, round(cycle / 24))
    if abs(24.0 * days / cycle - round(24.0 * days / cycle)) > 1e-9:
        return regimen, False
    intakes = []
    for n in range(round(24.0 * days / cycle)):
        for x in regimen.intakes:
            intakes.append(replace(x, hour=(first + n * cycle + x.hour) % (24.0 * days)))
    intakes.sort(key=lambda x: x.hour)
    return Regimen(tuple(intakes), cycle_h=24.0 * days), anchor is not None
