"""The dosing record of a case as the engine needs it: every dose of active drug that counts as given."""

from __future__ import annotations

import bisect
import math
from datetime import datetime, timedelta

from pkcalc.case import Case, Course, Session
from pkcalc.dosing import NEAR, Intake, Regimen, active_mg, flow_dose, flow_repeated
from pkcalc.drugs.profile import Profile
from pkcalc.errors import CannotEstimate
from pkcalc.record import Before, Dose, FirstOrder, Record


def given_record(case: Case, profile: Profile, until: datetime | None = None) -> Record:
    """Every line that counts as given, dose by dose, in days since the origin of the case.

    until: the last moment needed; the consult (or the last level) where not given. A line that says only how long
    it went on ("for about 3 months") becomes the regimen before the record begins, and goes on in it. Times without
    an offset are taken as they stand, also across a change to summer time; with offsets true elapsed time counts.
    Raises CannotEstimate where a line has neither a start nor a length.
    """
    lines = [c for c in case.courses if c.counts_as_given]
    undated = [c for c in lines if c.start is None and c.for_about_days is None]
    if undated or case.origin is None:
        names = ", ".join(f"dose line {c.index + 1}" for c in undated) or "the record"
        raise CannotEstimate(
            found=f"{names[0].upper()}{names[1:]} has no start.",
            why="Without times nobody can tell how far a level was from its plateau.",
            helps="Give the start, or how long the dose had been taken about.",
        )
    end = until or _end(case)
    doses: list[Dose] = []
    before: Before | None = None
    start_day = 0.0
    for course in lines:
        if course.regimen is None or course.for_about_days is None:
            continue
        if before is not None:
            raise CannotEstimate(
                found="Two dose lines say only for how long they were taken.",
                why="Their order in time is not known.",
                helps="Give the start of all but the first.",
            )
        start = _begin(case, course)
        start_day = case.day(start)
        before = Before(flow_repeated(course.regimen, profile), course.for_about_days)
        doses += _repeated(case, course, profile, start, min(end, course.end or end))
    for course in lines:
        if course.for_about_days is not None or course.start is None:
            continue
        if course.regimen is not None:
            doses += _repeated(case, course, profile, course.start, min(end, course.end or end))
        elif course.start >= end:
            continue
        elif course.single is not None:
            doses.append(flow_dose(course.single, case.day(course.start), profile))
        elif course.rate_mg_per_day is not None:
            # An infusion that still runs has given no more than its rate so far.
            days = case.day(min(course.end or end, end)) - case.day(course.start)
            whole = Intake(course.rate_form, 0.0, course.rate_mg_per_day * days, over_h=24 * days)
            doses.append(Dose(case.day(course.start), active_mg(whole, profile), duration_day=days))
    doses.sort(key=lambda d: d.time_day)
    first = min([d.time_day for d in doses], default=0.0)
    return Record(
        doses=tuple(doses),
        start_day=start_day if before is not None else min(first, 0.0),
        before=before,
        first_order=tuple(_path(case, s) for s in case.dialysis),
    )


def _path(case: Case, session: Session) -> FirstOrder:
    """A dialysis session as a first-order path of the engine; one that still runs stays open."""
    end_day = math.inf if session.end is None else case.day(session.end)
    return FirstOrder(
        clearance_L_per_day=session.clearance_L_per_day, start_day=case.day(session.start), end_day=end_day
    )


def _end(case: Case) -> datetime:
    moments = [x.drawn for x in case.levels if x.drawn is not None]
    last = max(moments, default=case.origin)
    end = case.now if case.now is not None else last
    assert end is not None
    return end + timedelta(minutes=1)


def _begin(case: Case, course: Course) -> datetime:
    """Where the record of an open-ended line begins: at midnight before everything dated, for a regimen by the
    clock; else so that the first level is drawn just before a dose."""
    assert case.origin is not None
    assert course.regimen is not None
    if course.regimen.by_clock:
        return case.origin.replace(hour=0, minute=0, second=0, microsecond=0)
    drawn = min((x.drawn for x in case.levels if x.drawn is not None), default=case.origin)
    return drawn - timedelta(hours=course.regimen.cycle_h) + timedelta(minutes=1)


def _repeated(case: Case, course: Course, profile: Profile, start: datetime, end: datetime) -> list[Dose]:
    assert course.regimen is not None
    missed = sorted(_read_off(m, course.regimen) for m in course.missed)
    return [
        flow_dose(intake, case.day(moment), profile)
        for moment, intake in course.regimen.doses_from(start, end)
        if not _listed(_read_off(moment, course.regimen), missed)
    ]


def _read_off(moment: datetime, regimen: Regimen) -> datetime:
    """A dose by the clock is known by the reading of the clock on the wall, whatever the offset beside it."""
    return moment.replace(tzinfo=None) if regimen.by_clock else moment


def _listed(moment: datetime, missed: list[datetime]) -> bool:
    at = bisect.bisect_left(missed, moment - NEAR)
    return at < len(missed) and missed[at] <= moment + NEAR
