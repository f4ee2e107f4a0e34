"""Regimens as people give them: labelled amounts of a form at clock times, and what of it is active drug."""

from __future__ import annotations

import math
from dataclasses import dataclass
from datetime import datetime, timedelta

from pkcalc import flow
from pkcalc.clock import show_time_of_day
from pkcalc.drugs.profile import Form, Profile
from pkcalc.errors import Problem
from pkcalc.units import show_number


@dataclass(frozen=True)
class Intake:
    """One dose of a form: hour within the cycle (time of day for a daily cycle), labelled mg, infusion hours."""

    form: str
    hour: float
    labelled_mg: float
    over_h: float = 0.0


@dataclass(frozen=True)
class Regimen:
    """Doses repeated every cycle_h hours. anchor_h: time of day of the first dose where the cycle is not a day
    by the clock (None: not stated)."""

    intakes: tuple[Intake, ...]
    cycle_h: float = 24.0
    anchor_h: float | None = None

    @property
    def by_clock(self) -> bool:
        """True where the hours are times of day."""
        return self.cycle_h == 24.0 and self.anchor_h is None and (len(self.intakes) > 1 or self.intakes[0].hour > 0)

    def labelled_mg_per_day(self) -> float:
        return sum(x.labelled_mg for x in self.intakes) * 24.0 / self.cycle_h

    def active_mg_per_day(self, profile: Profile) -> float:
        """Active drug reaching the body: sum of amount x salt factor x bioavailability, per day."""
        return sum(active_mg(x, profile) for x in self.intakes) * 24.0 / self.cycle_h

    def first_dose(self, start: datetime) -> datetime:
        """The first dose at or after the start of a line, for regimens by the clock."""
        return self.doses_from(start, start + timedelta(days=2, hours=self.cycle_h))[0][0]

    def doses_from(self, start: datetime, end: datetime) -> list[tuple[datetime, Intake]]:
        """Every dose of the regimen from start (included) to end (excluded)."""
        found: list[tuple[datetime, Intake]] = []
        if self.by_clock:
            midnight = start.replace(hour=0, minute=0, second=0, microsecond=0)
        else:
            midnight = start
        cycles = math.ceil((end - midnight) / timedelta(hours=self.cycle_h)) + 1
        for n in range(max(cycles, 0)):
            for intake in self.intakes:
                moment = midnight + timedelta(hours=n * self.cycle_h + intake.hour)
                if start <= moment < end:
                    found.append((moment, intake))
        return found

    def has_dose_at(self, moment: datetime, start: datetime) -> bool:
        """True where a dose was due within a minute of the moment."""
        near = timedelta(minutes=1)
        window = self.doses_from(max(start, moment - timedelta(hours=self.cycle_h + 25)), moment + 2 * near)
        if not self.by_clock:
            window = self.doses_from(start, moment + 2 * near)
        return any(abs(found - moment) <= near for found, _ in window)

    def words(self, profile: Profile) -> str:
        """'300 mg extended capsules daily at 21:00', said as aloud."""
        amounts = " and ".join(
            f"{show_number(x.labelled_mg, 6)} {profile.forms[x.form].amount_unit}"
            + (f" at {show_time_of_day(x.hour)}" if self.by_clock else "")
            for x in self.intakes
        )
        forms = tuple(dict.fromkeys(profile.forms[x.form].words for x in self.intakes))
        if len(forms) > 1:
            amounts = " and ".join(
                f"{show_number(x.labelled_mg, 6)} {profile.forms[x.form].amount_unit} {profile.forms[x.form].words}"
                + (f" at {show_time_of_day(x.hour)}" if self.by_clock else "")
                for x in self.intakes
            )
            return f"{amounts} {self.interval_words()}"
        return f"{amounts} {forms[0]} {self.interval_words()}"

    def interval_words(self) -> str:
        if self.cycle_h == 24.0:
            return "daily"
        if self.cycle_h == 48.0:
            return "every other day"
        return f"every {show_number(self.cycle_h)} h"


def active_mg(intake: Intake, profile: Profile) -> float:
    """Labelled amount x salt factor x bioavailability, applied once and only here."""
    form = profile.forms[intake.form]
    return intake.labelled_mg * form.salt_factor * form.bioavailability


def intake_problem(labelled_mg: float, form: Form, where: str, typed: str) -> Problem | None:
    """A single dose that no product could be."""
    most = form.largest_dose_mg
    if labelled_mg > most:
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
