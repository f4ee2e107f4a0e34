"""The parts a note is made of, and how results are said in words."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from pkcalc.consult import Consult, Shown
from pkcalc.estimate.result import Band
from pkcalc.forecast import Forecast, scaled
from pkcalc.units import percent, show, show_number, show_up_to

#: After what the drug file says never waits for a note.
OVERDOSE = "An acute overdose belongs to the poison centre."
DEFERS = (
    "This note supports, and never replaces, the local protocol and the judgement of licensed pharmacists and "
    "physicians. Every number must be checked before it is used."
)
DEMONSTRATION = "DEMONSTRATION - invented, not a patient, not for clinical use"
NO_STEADY_STATE = "no steady state"
NOT_OFFERED = "NOT OFFERED"
#: Title of the part that stands before everything else where a level is too high.
NOW = "What to do now"


@dataclass(frozen=True)
class Table:
    """Column heads with their units, and rows of text."""

    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


@dataclass(frozen=True)
class Section:
    """A titled part of the note."""

    title: str
    lines: tuple[str, ...] = ()
    table: Table | None = None


def _changes(consult: Consult, short: bool) -> str:
    """What may change so that a note does not hold any longer."""
    profile = consult.profile
    listed = [
        ("dose", True),
        ("form", not short),
        ("feed" if short else "tube feed", "tube_feed" in profile.asked),
        ("other drug", True),
        ("albumin", profile.binding is not None),
        ("dialysis", profile.dialysis is not None),
        ("kidney or liver function", not short),
    ]
    *first, last = (words for words, told in listed if told)
    return f"{', '.join(first)} or {last}"


def valid_until(consult: Consult) -> str:
    """How long a note holds."""
    return f"Valid until the next level, or until any change of {_changes(consult, False)}, whichever comes first."


def valid_in_short(consult: Consult) -> str:
    """The same in one line for the block to paste."""
    return f"Valid until the next level or any change of {_changes(consult, True)}."


def demonstration_words(consult: Consult) -> str:
    """The banner of an invented case, and of every case of a drug that is here for teaching only."""
    teaching = consult.profile.scope == "teaching only"
    return DEMONSTRATION if teaching or consult.case.demonstration is not None else ""


def told_up_to(consult: Consult) -> float:
    """The highest forecast level [mg/L, working basis] that is told in numbers; beyond it stands 'above 60 mg/L'."""
    return consult.profile.target.most_told(consult.goal.critical_mg_per_L)


def level_words(band: Band, most: float, unit: str = "mg/L") -> str:
    """'15 mg/L (90 % interval 11 to 24)'; a bound without a steady state, or above the most told, is said in words.

    most: on the scale of the band.
    """
    if not np.isfinite(band.median):
        return _no_steady_state(band, most)
    low, high = level_edge(band.low, most), level_edge(band.high, most)
    return f"{show_up_to(band.median, unit, most)} (90 % interval {low} to {high})"


def level_edge(value: float, most: float) -> str:
    """One number of a forecast level, whose unit stands elsewhere."""
    return show_up_to(value, "", most) if np.isfinite(value) else NO_STEADY_STATE


def level_band(band: Band, most: float) -> str:
    """A forecast level for a table cell whose head has the unit."""
    if not np.isfinite(band.median):
        return _no_steady_state(band, most)
    low, high = level_edge(band.low, most), level_edge(band.high, most)
    return f"{level_edge(band.median, most)} ({low} to {high})"


def _no_steady_state(band: Band, most: float) -> str:
    if not np.isfinite(band.low):
        return NO_STEADY_STATE
    # "from above 60 up" would say it twice
    return f"{NO_STEADY_STATE} ({level_edge(band.low, most) if band.low > most else f'from {edge(band.low)} up'})"


def edge(value: float) -> str:
    return show_number(value) if np.isfinite(value) else NO_STEADY_STATE


def short_band(band: Band) -> str:
    """Any other number with its interval (Vmax, Km, a level that was measured) for a table cell."""
    return f"{edge(band.median)} ({edge(band.low)} to {edge(band.high)})"


#: A year and more: so near the ceiling nothing else stays as it is for so long.
MOST_DAYS = 400.0


def days_words(band: Band | None) -> str:
    """Days with their interval, or why there are none; beyond MOST_DAYS the number means nothing and is not told."""
    if band is None:
        return "not known without a weight"
    if not np.isfinite(band.median):
        return "never settles"
    low, median, high = (_told_days(x) for x in (band.low, band.median, band.high))
    return f"{median} days ({low} to {high})"


def _told_days(days: float) -> str:
    if not np.isfinite(days):
        return "never"
    return show_number(days, 2) if days <= MOST_DAYS else f"above {show_number(MOST_DAYS)}"


def reports_free(consult: Consult) -> bool:
    return any(o.level.kind == "free" for o in consult.observations)


def as_reported(forecast: Forecast, consult: Consult) -> str:
    """A forecast as the laboratory will report it: total, and free where free levels are used."""
    most = told_up_to(consult)
    text = f"total {level_words(forecast.total, consult.scale.total(most))}"
    if reports_free(consult):
        text += f"; free {level_words(forecast.free, consult.scale.free(most))}"
    return text


def _reported_scale(consult: Consult) -> tuple[str, float] | None:
    """What the laboratory reports and how much of the level at normal binding that is; None where it is the same."""
    if reports_free(consult):
        return "free", consult.scale.free_fraction
    factor = consult.scale.total_factor
    return None if abs(factor - 1) < 0.005 else ("total", factor)


def on_both_scales(band: Band, consult: Consult) -> str:
    """A forecast level at normal binding and, where the laboratory reports another number, as it will report it."""
    most, other = told_up_to(consult), _reported_scale(consult)
    text = level_words(band, most)
    if other is None:
        return text
    kind, factor = other
    return f"{text} at normal binding, {kind} {level_band(scaled(band, factor), most * factor)} as reported"


def scale_line(consult: Consult) -> str:
    """What stands above a table of levels at normal binding where the laboratory reports another number; else ""."""
    other, high = _reported_scale(consult), consult.goal.high_mg_per_L
    if other is None:
        return ""
    kind, factor = other
    return f"Levels at normal binding: {show(high, 'mg/L')} here is {kind} {show(high * factor, 'mg/L')} as reported."


def same_lines(shown: Shown) -> bool:
    """True where every dose counts as taken in both lines."""
    return shown.taken is shown.forecast or shown.taken.steady == shown.forecast.steady


def chances_words(f: Forecast) -> str:
    return (
        f"below the target {percent(f.below)}, within {percent(f.within)}, above {percent(f.above)} "
        "(of which no steady "
        f"state {percent(f.no_steady_state)}); above the critical level {percent(f.above_critical)}"
    )


def signed_percent(value: float | None) -> str:
    if value is None:
        return ""
    if abs(value) < 0.05:
        return "0 %"
    return f"{'+' if value > 0 else '-'}{show_number(abs(value), 2)} %"


def regimen_words(shown: Shown) -> str:
    """By labelled amounts, with what is dispensed where the shelf can make it."""
    return shown.words + (f" (dispense {shown.dispense})" if shown.dispense else "")


def short_words(words: str) -> str:
    """Regimen words without what stands in brackets (the salt), which the note states beside."""
    while " (" in words and ")" in words[words.index(" (") :]:
        start = words.index(" (")
        words = words[:start] + words[words.index(")", start) + 1 :]
    return words


def mark_of(shown: Shown) -> str:
    marks = [m for m, yes in (("present", shown.present), ("proposed", shown.proposed)) if yes]
    if not shown.offered:
        marks.append("not offered")
    return ", ".join(marks)


def at_binding(consult: Consult, words: str) -> str:
    """Words such as ' at normal binding' behind a level: only for drugs whose levels are put on it."""
    return words if consult.profile.binding is not None else ""


def forecast_heads(consult: Consult) -> tuple[str, ...]:
    """Heads of `forecast_row`. Without binding the laboratory's scale is the only one and stands once."""
    bound = consult.profile.binding is not None
    levels = ("Steady level, normal binding (mg/L)", "As the laboratory reports total (mg/L)")
    return (
        "Regimen",
        f"Active drug ({consult.profile.rate_unit})",
        *(levels if bound else ("Steady level (mg/L)",)),
        *_CHANCES,
    )


_CHANCES = (
    "Below",
    "Within",
    "Above",
    "Above critical",
    "No steady state",
    "90 % of the way",
    "",
)


def forecast_row(shown: Shown, consult: Consult) -> tuple[str, ...]:
    f, most = shown.forecast, told_up_to(consult)
    return (
        shown.words,
        show_number(consult.profile.rate(f.rate_mg_per_day), 4),
        level_band(f.steady, most),
        *((level_band(f.total, consult.scale.total(most)),) if consult.profile.binding is not None else ()),
        percent(f.below),
        percent(f.within),
        percent(f.above),
        percent(f.above_critical),
        percent(f.no_steady_state),
        days_words(f.settle_days),
        mark_of(shown),
    )


def listed(words: Sequence[str]) -> str:
    """'a, b and c'."""
    if len(words) < 2:
        return "".join(words)
    return f"{', '.join(words[:-1])} and {words[-1]}"


def sentence(text: str) -> str:
    """With a capital and a full stop."""
    text = text.strip()
    if not text:
        return ""
    return text[0].upper() + text[1:] + ("" if text.endswith((".", "?", "!", ":")) else ".")
