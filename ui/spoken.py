"""Regimens as said aloud: '300 mg at 21:00', '150 mg every 12 h', '1,000 mg once over 30 min'.

Only the wording is taken apart here. Amounts, times and intervals stay text and are read by the core.
"""

from __future__ import annotations

import re
from dataclasses import dataclass, field

from pkcalc.case import ClockDoseFile, DoseFile, ProposedFile

EXAMPLES = "300 mg daily; 150 mg every 12 h; 300 mg at 21:00; 200 mg at 08:00 + 100 mg at 21:00"
ASSUMED_TIMES = {
    2: ("08:00", "20:00"),
    3: ("06:00", "14:00", "22:00"),
    4: ("00:00", "06:00", "12:00", "18:00"),
}

_JOIN = re.compile(r"\s*(?:\+|;|&|\band\b|,\s)\s*", re.I)
_AT = re.compile(r"^(.*?)\s+at\s+(\d{1,2}[:.]?\d{0,2}\S*)$", re.I)
_OVER = re.compile(r"^(.*?)\s+over\s+(.+)$", re.I)
_ENDINGS: tuple[tuple[re.Pattern[str], str], ...] = (
    (re.compile(r"^(.*?)\s+every other day$", re.I), "48 h"),
    (re.compile(r"^(.*?)\s+every\s+(\S+)\s*(?:h|hours?)$", re.I), "h"),
    (re.compile(r"^(.*?)\s+every\s+(\S+)\s+days$", re.I), "days"),
    (re.compile(r"^(.*?)\s+(?:twice\s+(?:daily|a day))$", re.I), "12 h"),
    (re.compile(r"^(.*?)\s+(?:three times\s+(?:daily|a day))$", re.I), "8 h"),
    (re.compile(r"^(.*?)\s+(?:four times\s+(?:daily|a day))$", re.I), "6 h"),
    (
        re.compile(r"^(.*?)\s+(?:once daily|once a day|daily|every day|a day|per day|nightly|at night)$", re.I),
        "24 h",
    ),
    (re.compile(r"^(.*?m?c?g(?: PE)?)/day$", re.I), "24 h"),
)
_ONCE = re.compile(r"^(.*?)\s+once$", re.I)
_RATE = re.compile(r"^.*?\S\s*m?g(?: PE)?/(?:h|min)$", re.I)
_UNSAFE = re.compile(
    r"\b(?:q\.?\s?d|q\.?o\.?d|o\.?d|b\.?i\.?d|b\.?d|t\.?i\.?d|t\.?d\.?s|q\.?i\.?d|q\.?h\.?s|nocte|q\d+h?)\b\.?",
    re.I,
)


@dataclass(frozen=True)
class Said:
    """The parts of a regimen as said; `unclear` says why it cannot be taken apart, and what would mend it."""

    amount: str = ""
    every: str = ""
    daily: tuple[ClockDoseFile, ...] = ()
    once: bool = False
    over: str = ""
    rate: str = ""
    assumed: str = ""
    unclear: str = ""
    fix: str = field(default="")


def take_apart(text: str, *, assume_times: bool = False) -> Said:
    """Text as said -> its parts. assume_times: amounts without times are spread over the day, and said so."""
    said = " ".join(text.split())
    unsafe = _UNSAFE.search(said)
    if unsafe:
        return Said(
            unclear=f'the abbreviation "{unsafe.group().strip()}" was given',
            fix='Abbreviations are misread: write "daily" or "every 12 h" in full',
        )
    if _RATE.match(said):
        return Said(rate=said)
    over = ""
    if found := _OVER.match(said):
        said, over = found.group(1), found.group(2)
    if found := _ONCE.match(said):
        return Said(amount=found.group(1), once=True, over=over)
    every = ""
    for pattern, meaning in _ENDINGS:
        if found := pattern.match(said):
            said = found.group(1)
            every = f"{found.group(2)} {meaning}" if meaning in ("h", "days") else meaning
            break
    parts = [p for p in _JOIN.split(said) if p]
    timed = [(m.group(1), m.group(2)) if (m := _AT.match(p)) else (p, "") for p in parts]
    if timed and all(clock for _, clock in timed):
        if every not in ("", "24 h"):
            return Said(unclear="times of day and an interval were both given", fix="Give one of the two")
        return Said(daily=tuple(ClockDoseFile(time=c, amount=a) for a, c in timed), over=over)
    if any(clock for _, clock in timed):
        return Said(
            unclear="only some of the doses have a time",
            fix='Give each its time: "200 mg at 08:00 + 100 mg at 21:00"',
        )
    if len(timed) > 1:
        if every not in ("", "24 h"):
            return Said(unclear="several amounts and an interval were both given", fix="Give the amount of one dose")
        if assume_times and len(timed) in ASSUMED_TIMES:
            clocks = ASSUMED_TIMES[len(timed)]
            return Said(
                daily=tuple(ClockDoseFile(time=c, amount=a) for (a, _), c in zip(timed, clocks, strict=True)),
                over=over,
                assumed=" and ".join(clocks),
            )
        return Said(unclear="the doses have no times", fix='Give each its time: "200 mg at 08:00 + 100 mg at 21:00"')
    if not every:
        return Said(
            unclear=f'it is not clear how often "{said[:40]}" is given',
            fix='Add "daily", "every 12 h", "at 21:00" or "once"',
        )
    return Said(amount=said, every=every, over=over)


def interval_words(every: str) -> str:
    """'24 h' -> 'daily', '48 h' -> 'every other day', else 'every ...'."""
    return {"24 h": "daily", "48 h": "every other day", "1 day": "daily"}.get(every, f"every {every}")


def say(line: DoseFile | ProposedFile) -> str:
    """The wording of a line of a case file."""
    over = f" over {line.over}" if isinstance(line, DoseFile) and line.over else ""
    if line.daily:
        return " + ".join(f"{d.amount} at {d.time}" for d in line.daily) + over
    if isinstance(line, DoseFile) and line.rate:
        return line.rate
    if isinstance(line, DoseFile) and line.at:
        return f"{line.amount} once{over}"
    return f"{line.amount} {interval_words(line.every)}{over}" if line.amount else ""
