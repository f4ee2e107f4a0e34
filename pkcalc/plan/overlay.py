"""Two or more regimens laid over each other: the level day by day, with its interval."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from pkcalc.estimate.result import Band
from pkcalc.forecast import levels_on_days
from pkcalc.plan.candidates import Candidate, Setting

#: Regimens laid over each other at most: the present one and two of the pharmacist's own.
MOST = 3
#: Days of the courses laid over each other.
DAYS = (0.0, 1.0, 2.0, 3.0, 4.0, 5.0, 6.0, 7.0, 10.0, 14.0, 21.0, 28.0, 42.0, 56.0)


@dataclass(frozen=True)
class Overlay:
    """Courses of some regimens from today: days from now, and per regimen (in words) a band per day (average rate)."""

    days: tuple[float, ...]
    courses: tuple[tuple[str, tuple[Band, ...]], ...]


def overlay(some: Sequence[Candidate], setting: Setting) -> Overlay | None:
    """The courses of some regimens; None without a volume."""
    if setting.central.volume_L is None or not some:
        return None
    found = levels_on_days(setting.central, [c.rate_mg_per_day for c in some], DAYS, setting.start_mg_per_L)
    return Overlay(DAYS, tuple((c.words, bands) for c, bands in zip(some, found, strict=True)))
