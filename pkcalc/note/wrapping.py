"""Lines of a printed note: a number is never parted from its unit at the end of a line."""

from __future__ import annotations

import re
import textwrap

from pkcalc.units import LABELS

_UNBROKEN = "\u00a0"
_LETTERS = "|".join(sorted({*LABELS, "mL/h"} - {"%"}, key=len, reverse=True))
_UNITS = f"{_LETTERS}|%"
#: The space between a number, or the bracket behind it, and a unit; and the one within "mg PE".
_GAP = re.compile(rf"(?<=[\d)]) (?=(?:{_UNITS})(?![\w/]))|(?<=\dmg) (?=PE\b)|(?<=\d mg) (?=PE\b)")

#: A number with its unit, and a unit with a stroke in it, for the typesetter, whose patterns cannot look round.
NUMBER_WITH_UNIT = (
    rf"[0-9][0-9.,]*\)? (?:{_LETTERS})\b|[0-9][0-9.,]*\)? %|\((?:{_LETTERS})\)|(?:m?g|mmol|m?L)/(?:day|kg|mL|dL|L|h)\b"
)


def together(text: str) -> str:
    """The text with spaces that no line may break at between numbers and units."""
    return _GAP.sub(_UNBROKEN, text)


def wrapped(text: str, width: int, *, first: str = "", rest: str = "") -> list[str]:
    """Lines of at most `width` columns with ordinary spaces. first, rest: indents."""
    lines = textwrap.wrap(together(text), width, initial_indent=first, subsequent_indent=rest)
    return [line.replace(_UNBROKEN, " ") for line in lines]
