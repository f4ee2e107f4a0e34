"""Regimens as people give them: labelled amounts of a form at clock times, and what of it is active drug."""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import datetime, timedelta

from pkcalc import flow
from pkcalc.clock import show_time_of_day
from pkcalc.drugs.profile import Form, Profile
from pkcalc.errors import Problem
from pkcalc.units import show_dose, show_number


@dataclass(frozen=True)
class Intake:
    """One dose of a form: hour within the cycle (time of day for a daily cycle), labelled mg, infusion time [h]."""

    form: str
    hour: float
    labelled_mg: float
    over_h: float = 0.0


@dataclass(frozen=True)
class Regimen:
    """Doses repeated every cycle_h hours.

    anchor_h: time of day of the first dose where the cycle is not a day by the clock (None: not stated).
    timed: the hours were stated as times of day (needed where the only dose is at midnight).
    """

    intakes: tuple[Intake, ...]
    cycle_h: float = 24.0
    anchor_h: float | None = None
    timed: bool = False

    @property
    def by_clock(self) -> bool:
        """True where the hours are times of day."""
        if self.cycle_h != 24.0 or self.anchor_h is not None:
            return False
        return self.timed or len(self.intakes) > 1 or self.intakes[0].hour > 0

    @property
    def continuous(self) -> bool:
        """True where one infusion follows the other without a gap."""
        return len(self.intakes) == 1 and self.intakes[0].over_h == self.cycle_h

    def labelled_mg_per_day(self) -> float:
        """Labelled amount per day [mg or mg PE per day], salts not converted."""
        return sum(x.labelled_mg for x in self.intakes) * 24.0 / self.cycle_h

    def active_mg_per_day(self, profile: Profile) -> float:
        """Active drug reaching the body: sum of amount x salt factor x bioavailability, per day."""
        return sum(active_mg(x, profile) for x in self.intakes) * 24.0 / self.cycle_h

    def first_dose(self, start: datetime) -> datetime:
        """The first dose at or after the start of a line."""
        return self.doses_from(start, start + timedelta(days=2, hours=self.cycle_h))[0][0]

    def _first_cycle(self, start: datetime) -> datetime:
        """Where the hours of the intakes count from: midnight by the clock, else the start itself."""
        return start.replace(hour=0, minute=0, second=0, microsecond=0) if self.by_clock else start

    def number_of_doses(self, start: datetime, end: datetime) -> float:
        """About how many doses lie between two moments, without making them one by one."""
        return max(0.0, (end - start) / timedelta(hours=self.cycle_h)) * len(self.intakes)

    def doses_from(self, start: datetime, end: datetime) -> list[tuple[datetime, Intake]]:
        """Every dose of the regimen from start (included) to end (excluded), in order of time."""
        zero = self._first_cycle(start)
        cycles = math.ceil((end - zero) / timedelta(hours=self.cycle_h))
        ordered = sorted(self.intakes, key=lambda x: x.hour)
        return [
            (moment, intake)
            for n in range(cycles)
            for intake in ordered
            if start <= (moment := zero + timedelta(hours=n * self.cycle_h + intake.hour)) < end
        ]

    def has_dose_at(self, moment: datetime, start: datetime) -> bool:
        """True where a dose of a line that began at start was due within a minute of the moment.

        A regimen by the clock goes by the time of day as written beside the moment, so a change to summer time
        moves no dose; an interval counts elapsed hours.
        """
        if self.by_clock:
            zero, moment = _wall(start).replace(hour=0, minute=0, second=0), _wall(moment)
            start = _wall(start)
        else:
            zero = start
        if moment < start - NEAR:
            return False
        into = ((moment - zero) / timedelta(hours=1)) % self.cycle_h
        near_h = NEAR / timedelta(hours=1) * (1 + 1e-9)
        return any(_apart(into, x.hour, self.cycle_h) <= near_h for x in self.intakes)

    def words(self, profile: Profile) -> str:
        """As said aloud: '300 mg extended capsules daily at 21:00', '100 mg suspension every 8 h'."""
        if self.continuous:
            form = profile.forms[self.intakes[0].form]
            return f"{show_number(self.labelled_mg_per_day() / 24, 4)} {form.amount_unit}/h {form.words}, continuously"
        said = [
            f"{show_dose(x.labelled_mg)} {profile.forms[x.form].amount_unit}"
            + (f" over {_minutes(x.over_h)}" if x.over_h else "")
            for x in self.intakes
        ]
        forms = [profile.forms[x.form].words for x in self.intakes]
        times = [show_time_of_day(x.hour) for x in self.intakes]
        if len(said) == 1:
            at = f" at {times[0]}" if self.by_clock else ""
            return f"{said[0]} {forms[0]} {self.interval_words()}{at}"
        one_form = len(set(forms)) == 1
        doses = said if one_form else [f"{x} {form}" for x, form in zip(said, forms, strict=True)]
        of = f" as {forms[0]}" if one_form else ""
        if self.by_clock:
            parts = " and ".join(f"{x} at {time}" for x, time in zip(doses, times, strict=True))
            return f"{parts} daily{of}"
        if self.cycle_h == 48.0 and len({x.hour // 24 for x in self.intakes}) == 2:
            days = [
                " and ".join(x for x, i in zip(doses, self.intakes, strict=True) if i.hour // 24 == day)
                for day in (0, 1)
            ]
            return f"{days[0]} one day, {days[1]} the next, alternating{of}"
        parts = " and ".join(f"{x} after {show_number(i.hour, 6)} h" for x, i in zip(doses, self.intakes, strict=True))
        return f"{parts} of a cycle of {show_number(self.cycle_h, 6)} h{of}"

    def interval_words(self) -> str:
        """'daily', 'every other day' or 'every 12 h'."""
        if self.cycle_h == 24.0:
            return "daily"
        if self.cycle_h == 48.0:
            return "every other day"
        return f"every {show_number(self.cycle_h, 6)} h"


def continuous(form: str, labelled_mg_per_day: float) -> Regimen:
    """An infusion that runs on at one rate: an hour's amount over an hour, every hour."""
    return Regimen((Intake(form, 0.0, labelled_mg_per_day / 24, over_h=1.0),), cycle_h=1.0)


#: Clock times this close are one dose: charts and pumps round to the minute.
NEAR = timedelta(minutes=1)


def _wall(moment: datetime) -> datetime:
    """The reading of the clock on the wall, whatever its offset."""
    return moment.replace(tzinfo=None)


def _apart(a: float, b: float, around: float) -> float:
    """Distance of two hours on a clock face of `around` hours."""
    direct = abs(a - b) % around
    return min(direct, around - direct)


def _minutes(hours: float) -> str:
    return f"{show_number(hours * 60, 6)} min" if hours < 2 else f"{show_number(hours, 6)} h"


def active_mg(intake: Intake, profile: Profile) -> float:
    """Labelled amount x salt factor x bioavailability, applied once and only here."""
    form = profile.forms[intake.form]
    return intake.labelled_mg * form.salt_factor * form.bioavailability


def intake_problem(labelled_mg: float, form: Form, where: str, typed: str) -> Problem | None:
    """A single dose that no product could be."""
    most = form.largest_dose_mg
    if not 0 < labelled_mg <= most:
        return Problem(
            where,
            f"{typed} was given",
            f"above 0 and up to {show_number(most)} {form.amount_unit} in one dose of {form.words}",
            "Check the number, its unit and the form",
        )
    return None


def absorption_of(form: Form) -> flow.Absorption | None:
    """How a form reaches the blood, for the engine; None for a dose into a vein."""
    if form.absorption is None:
        return None
    return flow.Absorption(
        ka_per_day=form.absorption.ka_per_day,
        lag_day=form.absorption.lag_day,
        release_day=form.absorption.release_day,
    )


def flow_dose(intake: Intake, day: float, profile: Profile) -> flow.Dose:
    """One intake as the engine's dose of active drug."""
    return flow.Dose(
        time_day=day,
        amount_mg=active_mg(intake, profile),
        duration_day=intake.over_h / 24,
        absorption=absorption_of(profile.forms[intake.form]),
    )


def flow_repeated(regimen: Regimen, profile: Profile) -> flow.Repeated:
    """A regimen as the engine's repeated regimen of active drug."""
    return flow.Repeated(
        cycle_day=regimen.cycle_h / 24,
        doses=tuple(flow_dose(x, x.hour / 24, profile) for x in regimen.intakes),
    )
