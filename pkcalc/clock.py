"""Clock times as typed and as shown. A date is ISO (2026-03-04) or has its month in words (4 Mar 2026)."""

from __future__ import annotations

import re
from datetime import datetime, timedelta

from pkcalc.errors import CaseError, Problem, as_typed

MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
_FULL = (
    *("january", "february", "march", "april", "may", "june"),
    *("july", "august", "september", "october", "november", "december"),
)

_ISO = re.compile(r"(\d{4})-(\d{2})-(\d{2})(?:[T ](\d{2}):(\d{2})(?::(\d{2}))?\s?(Z|[+-]\d{2}:\d{2})?)?", re.ASCII)
_WORDS = re.compile(
    r"(\d{1,2})\s+([A-Za-z]{3,9})\.?\s+(\d{4})(?:,?\s+(\d{1,2}):(\d{2})\s?(Z|[+-]\d{2}:\d{2})?)?", re.ASCII
)
_FIGURES = re.compile(r"\d{1,2}[/.\-]\d{1,2}[/.\-]\d{2,4}", re.ASCII)
_OF_DAY = re.compile(r"([01]?\d|2[0-3]):([0-5]\d)", re.ASCII)

ALLOWED_DATE = "a date such as 2026-03-04 06:10 or 4 Mar 2026 06:10"


def read_time(text: str, where: str, *, time_needed: bool = True) -> datetime:
    """A clock time as typed, with the offset where one was typed (then elapsed time counts, else the clock).

    Day and month in figures only (03/04/2026) are refused: they are ambiguous.
    """
    stripped = text.strip()
    given = f'"{as_typed(stripped)}" was given' if stripped else "nothing was given"

    def refused(fix: str, allowed: str = ALLOWED_DATE) -> CaseError:
        return CaseError(Problem(where, given, allowed, fix))

    if not stripped:
        raise refused("Enter date and time")
    if _FIGURES.match(stripped):
        raise refused("Day and month in figures can be swapped: write the month in words")
    iso, words = _ISO.fullmatch(stripped), _WORDS.fullmatch(stripped)
    if iso:
        year, figure, day, hour, minute, second, zone = iso.groups()
        month = int(figure)
    elif words:
        day, name, year, hour, minute, zone = words.groups()
        second = None
        hits = [i for i, full in enumerate(_FULL, 1) if full.startswith(name.lower())]
        if len(hits) != 1:
            raise refused("Check the name of the month")
        month = hits[0]
    else:
        raise refused("Write the date as year-month-day in figures, or with the month in words")
    try:
        moment = datetime(int(year), month, int(day), int(hour or 0), int(minute or 0), int(second or 0))
        if zone:
            moment = datetime.fromisoformat(moment.isoformat() + ("+00:00" if zone == "Z" else zone))
    except ValueError:
        raise refused("There is no such date or time: check it against the chart") from None
    if hour is None and time_needed:
        given += " without a time of day"
        raise refused("Add the time of day, 24 h clock")
    if not 1990 <= moment.year <= 2100:
        raise refused("Check the year", "a year from 1990 to 2100")
    return moment


def read_time_of_day(text: str, where: str) -> float:
    """'21:00' -> 21.0 hours."""
    match = _OF_DAY.fullmatch(text.strip())
    if not match:
        given = f'"{as_typed(text.strip())}" was given' if text.strip() else "nothing was given"
        raise CaseError(Problem(where, given, "a time of day such as 21:00", "Use the 24 h clock, 00:00 to 23:59"))
    return int(match.group(1)) + int(match.group(2)) / 60


def show_time(moment: datetime) -> str:
    """'3 Apr 2026 06:10', with the offset where one was given."""
    text = f"{moment.day} {MONTHS[moment.month - 1]} {moment.year} {moment:%H:%M}"
    if moment.tzinfo is not None:
        offset = moment.strftime("%z")
        text += f" {offset[:3]}:{offset[3:]}"
    return text


def show_date(moment: datetime) -> str:
    return f"{moment.day} {MONTHS[moment.month - 1]} {moment.year}"


def show_time_of_day(hours: float) -> str:
    minutes = round(hours * 60) % 1440
    return f"{minutes // 60:02d}:{minutes % 60:02d}"


def days_between(start: datetime, end: datetime) -> float:
    """Days from start to end: by the clock without offsets, truly elapsed with them."""
    return (end - start) / timedelta(days=1)
