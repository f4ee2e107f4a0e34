"""What was given: doses, repeated regimens, parallel first-order elimination; checked when made, then frozen.

Times are days on one clock (the case turns dates into days), amounts are mg of active drug that reach the
body: salt factor and bioavailability are applied before a dose comes here. Doses may be listed in any order;
infusions that overlap add up.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Iterator
from dataclasses import dataclass, replace

from pkcalc.errors import CaseError, Problem

#: Times closer than this (0.1 millisecond) are one moment: rounding must not split a dose from its level.
SAME_MOMENT_DAY = 1e-9


def _plain(value: float) -> str:
    return f"{value:.10g}" if math.isfinite(value) else "no finite number"


def _positive(where: str, value: float, unit: str, fix: str) -> Iterator[Problem]:
    if not (math.isfinite(value) and value > 0):
        yield Problem(where, f"{_plain(value)} {unit} was given", f"more than 0 {unit}", fix)


def _not_negative(where: str, value: float, unit: str, fix: str) -> Iterator[Problem]:
    if not (math.isfinite(value) and value >= 0):
        yield Problem(where, f"{_plain(value)} {unit} was given", f"0 {unit} or more", fix)


def _finite(where: str, value: float, fix: str) -> Iterator[Problem]:
    if not math.isfinite(value):
        yield Problem(where, "this is not a time", "a time in days", fix)


@dataclass(frozen=True)
class Absorption:
    """How a form reaches the blood: after the lag, release at a constant rate, then first-order absorption.

    ka_per_day: first-order absorption rate [1/day]. lag_day: time before anything is released [day].
    release_day: the dose is released into the gut at a constant rate over this time [day]; 0 = at once.
    """

    ka_per_day: float
    lag_day: float = 0.0
    release_day: float = 0.0

    def __post_init__(self) -> None:
        fix = "Check the form's absorption in the drug file"
        _raise(
            [
                *_positive("Absorption rate", self.ka_per_day, "per day", fix),
                *_not_negative("Absorption lag", self.lag_day, "day", fix),
                *_not_negative("Release time", self.release_day, "day", fix),
            ]
        )


@dataclass(frozen=True)
class Dose:
    """One dose: an intravenous push, an infusion (duration_day > 0), or an absorbed dose (absorption
    given)."""

    time_day: float
    amount_mg: float
    duration_day: float = 0.0
    absorption: Absorption | None = None

    def problems(self, where: str) -> Iterator[Problem]:
        yield from _finite(f"{where}, time", self.time_day, "Give the date and time of the dose")
        yield from _positive(
            f"{where}, amount", self.amount_mg, "mg", "Give the amount taken, or leave a missed dose out"
        )
        yield from _not_negative(
            f"{where}, infusion time",
            self.duration_day,
            "day",
            "Check that the infusion ends after it starts",
        )
        if self.absorption is not None and self.duration_day > 0:
            yield Problem(
                f"{where}, route",
                f"an infusion over {_plain(self.duration_day)} day that is also absorbed was given",
                "an infusion into a vein, or an absorbed dose",
                "Choose one of the two",
            )

    @property
    def settled_after_day(self) -> float:
        """Time from the dose until all of it (but 1 part in 1e16) has reached the blood [day]."""
        if self.absorption is None:
            return self.duration_day
        a = self.absorption
        return a.lag_day + a.release_day + 37.0 / a.ka_per_day


@dataclass(frozen=True)
class FirstOrder:
    """A parallel first-order path between two times: a dialysis session, or a second way out that is always
    open.

    Give either rate_per_day (k, the same for every draw) or clearance_L_per_day (k = CL / V, V of each draw).
    """

    rate_per_day: float | None = None
    clearance_L_per_day: float | None = None
    start_day: float = -math.inf
    end_day: float = math.inf

    def __post_init__(self) -> None:
        found: list[Problem] = []
        if (self.rate_per_day is None) == (self.clearance_L_per_day is None):
            found.append(
                Problem(
                    "First-order path",
                    "both a rate and a clearance were given"
                    if self.rate_per_day is not None
                    else "neither a rate nor a clearance was given",
                    "a rate in 1/day, or a clearance in L/day",
                    "Give one of the two",
                )
            )
        if self.rate_per_day is not None:
            found += _not_negative("First-order rate", self.rate_per_day, "per day", "Check its sign and unit")
        if self.clearance_L_per_day is not None:
            found += _not_negative(
                "First-order clearance", self.clearance_L_per_day, "L/day", "Check its sign and unit"
            )
        if not self.end_day > self.start_day:
            found.append(
                Problem(
                    "First-order path",
                    f"it starts on day {_plain(self.start_day)} and ends on day {_plain(self.end_day)}",
                    "an end after the start",
                    "Check the two times of the session",
                )
            )
        _raise(found)


@dataclass(frozen=True)
class Repeated:
    """A regimen repeated for ever. The doses' time_day are offsets in the cycle, 0 <= offset < cycle_day."""

    cycle_day: float
    doses: tuple[Dose, ...]

    def __post_init__(self) -> None:
        found = list(_positive("Cycle", self.cycle_day, "day", "Give the time after which the regimen repeats"))
        if not self.doses:
            found.append(Problem("Regimen", "no dose was given", "at least one dose per cycle", "Add a dose"))
        for number, dose in enumerate(self.doses, 1):
            where = f"Dose {number} of the regimen"
            found += dose.problems(where)
            if not found and not 0 <= dose.time_day < self.cycle_day:
                found.append(
                    Problem(
                        f"{where}, time",
                        f"day {_plain(dose.time_day)} of a cycle of {_plain(self.cycle_day)} day",
                        f"from day 0 up to, but not including, day {_plain(self.cycle_day)}",
                        "Give the time from the start of the cycle",
                    )
                )
        _raise(found)

    @property
    def rate_mg_per_day(self) -> float:
        """Average dose rate: what is given in one cycle over the length of the cycle [mg/day]."""
        return math.fsum(d.amount_mg for d in self.doses) / self.cycle_day

    def cycles(self, first: int, last: int, start_day: float) -> tuple[Dose, ...]:
        """The doses of cycles first .. last - 1, cycle 0 starting at start_day."""
        return tuple(
            Dose(start_day + n * self.cycle_day + d.time_day, d.amount_mg, d.duration_day, d.absorption)
            for n in range(first, last)
            for d in self.doses
        )

    def cycles_still_absorbed(self) -> int:
        """Number of past cycles of which anything still reaches the blood."""
        return max(1, math.ceil(max(d.time_day + d.settled_after_day for d in self.doses) / self.cycle_day))


@dataclass(frozen=True)
class Before:
    """What the patient took before the record begins: a regimen, and for about how long [day]."""

    regimen: Repeated
    for_day: float

    def __post_init__(self) -> None:
        _raise(
            list(_positive("Time on the earlier regimen", self.for_day, "day", "Say for about how long it was taken"))
        )


@dataclass(frozen=True)
class Record:
    """A dosing record from start_day on, and what is known about its beginning.

    start_mg: amount in the body at the start. before: the regimen taken until then (its unabsorbed rest is
    carried over; the start amount follows from it unless start_mg is given). With neither, nothing is in the
    body at the start. Doses before start_day are allowed only with a start amount: of them, only what reaches
    the blood after the start still counts.
    """

    doses: tuple[Dose, ...] = ()
    start_day: float = 0.0
    start_mg: float | None = None
    before: Before | None = None
    first_order: tuple[FirstOrder, ...] = ()

    def __post_init__(self) -> None:
        found = list(_finite("Start of the record", self.start_day, "Give the date on which the record begins"))
        if self.start_mg is not None:
            found += _not_negative(
                "Amount at the start", self.start_mg, "mg", "Give the amount in the body at the start"
            )
        for number, dose in enumerate(self.doses, 1):
            found += dose.problems(f"Dose {number}")
            if dose.time_day < self.start_day - SAME_MOMENT_DAY and (self.start_mg is None or self.before is not None):
                found.append(
                    Problem(
                        f"Dose {number}, time",
                        f"day {_plain(dose.time_day)}, and the record begins on day {_plain(self.start_day)}",
                        f"day {_plain(self.start_day)} or later",
                        "Begin the record earlier, or give the level at its beginning",
                    )
                )
        _raise(found)


def with_absorption(record: Record, factor: float) -> Record:
    """The record with the absorption rates of all its forms (also before it starts) times a factor."""
    if factor == 1.0:
        return record

    def changed(doses: tuple[Dose, ...]) -> tuple[Dose, ...]:
        return tuple(
            replace(d, absorption=replace(d.absorption, ka_per_day=d.absorption.ka_per_day * factor))
            if d.absorption
            else d
            for d in doses
        )

    before = record.before
    if before is not None:
        before = replace(before, regimen=replace(before.regimen, doses=changed(before.regimen.doses)))
    return replace(record, doses=changed(record.doses), before=before)


def duplicates(record: Record) -> tuple[tuple[int, ...], ...]:
    """Doses entered more than once: groups of positions (0 for the first) with the same time, amount and
    form.

    They are calculated as given, since two equal doses at once are possible; a person decides.
    """
    groups: dict[Dose, list[int]] = defaultdict(list)
    for position, dose in enumerate(record.doses):
        groups[dose].append(position)
    return tuple(tuple(group) for group in groups.values() if len(group) > 1)


def _raise(found: list[Problem]) -> None:
    if found:
        raise CaseError(found)
