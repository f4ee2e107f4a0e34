"""What stands before everything else: a level that is too high today, and the mark of what is not offered."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime, timedelta

import numpy as np

from pkcalc.clock import show_date, show_time
from pkcalc.consult import Consult, Shown
from pkcalc.levels import Observation
from pkcalc.note.words import NOT_OFFERED, days_words, level_band, told_up_to
from pkcalc.units import show, show_number

WEIGH = "Weigh that before holding; hold down to a stated level, never to zero."
#: A level older than this is not today's level where the record can be followed to now.
FRESH = timedelta(hours=24)


@dataclass(frozen=True)
class TooHigh:
    """A level above the target today. urgent: at or above the critical level, or above the target with toxic signs."""

    urgent: bool
    text: str


def used_level(consult: Consult) -> Observation | None:
    """The latest level that the estimate uses; where none is used, the latest one."""
    used = [o for o in consult.observations if not o.set_aside] or list(consult.observations)
    dated = [o for o in used if o.level.drawn is not None]
    if dated:
        return max(dated, key=lambda o: o.level.drawn.timestamp() if o.level.drawn else 0.0)
    return used[-1] if used else None


def limited(o: Observation, value_mg_per_L: float) -> str:
    """A level with its 'below' or 'above' where only a limit is known."""
    text = show(value_mg_per_L, "mg/L")
    return f"{o.censored} {text}" if o.censored is not None else text


def is_offered(shown: Shown, consult: Consult) -> bool:
    """False where the plan does not offer a regimen, or a stop names it."""
    names = {shown.words, *(("The present dose",) if shown.present else ())}
    stopped = any(
        c.severity == "stop" and "this regimen" in c.blocks and c.values.get("regimen") in names
        for c in consult.cautions
    )
    return shown.offered and not stopped


def marked(shown: Shown, consult: Consult) -> str:
    """The words of a regimen, with NOT OFFERED where it is not."""
    return shown.words if is_offered(shown, consult) else f"{shown.words} ({NOT_OFFERED})"


def reported(level_mg_per_L: float, consult: Consult) -> str:
    """A level at normal binding as the laboratory reports it, free too where a free level is used."""
    scale = consult.scale
    if consult.profile.binding is None:
        return ""
    used = used_level(consult)
    if used is not None and used.level.kind == "free":
        return f"free {show(scale.free(level_mg_per_L), 'mg/L')} as reported"
    return f"total {show(scale.total(level_mg_per_L), 'mg/L')} as reported"


def with_reported(level_mg_per_L: float, consult: Consult) -> str:
    said = reported(level_mg_per_L, consult)
    return show(level_mg_per_L, "mg/L") + (f" at normal binding ({said})" if said else "")


def too_high(consult: Consult) -> TooHigh | None:
    """Whether the level is above the target today, and how much that presses; None where it is not, or nobody can say.

    Drugs that are followed by the hour have their own words.
    """
    o, goal = used_level(consult), consult.goal
    if o is None or consult.projection is not None or consult.plateaus is not None:
        return None
    measured = o.working_mg_per_L if o.readable else o.low_mg_per_L
    least = "above " if o.censored == "above" else "" if o.readable else "at least "
    basis = " at normal binding" if consult.profile.binding is not None else ""
    drawn = f", drawn {show_time(o.level.drawn)}" if o.level.drawn is not None else ""
    value, text = (
        measured,
        f"{o.name} ({o.level.typed.text} {o.level.kind}{drawn}) is {least}{show(measured, 'mg/L')}{basis}",
    )
    today = consult.plan.today if consult.plan is not None else None
    if today is not None and today.level is not None and np.isfinite(today.level.median):
        old = (
            today.moment is not None and o.level.drawn is not None and today.moment - o.level.drawn > FRESH
        ) or o.censored == "below"
        if old or today.level.median > measured:
            value = today.level.median
            text = f"by the record the level today is {with_reported(value, consult)}"
    if value <= goal.high_mg_per_L:
        return None
    toxic = consult.case.answer("toxic_signs")
    critical = value >= goal.critical_mg_per_L
    signs = {"yes": "signs of toxicity are reported", "no": "no signs of toxicity are reported"}.get(
        toxic, "signs of toxicity are not stated"
    )
    place = (
        f"critical from {show(goal.critical_mg_per_L, 'mg/L')}"
        if critical
        else f"target up to {show(goal.high_mg_per_L, 'mg/L')}"
    )
    return TooHigh(critical or toxic == "yes", f"{text} ({place}); {signs}")


def moment(consult: Consult) -> datetime | None:
    """When the plan begins."""
    if consult.plan is not None and consult.plan.today.moment is not None:
        return consult.plan.today.moment
    return consult.case.plan_start or consult.case.now


def now_lines(consult: Consult) -> tuple[str, ...]:
    """What to do tonight about a level that is too high; empty where it is not."""
    found = too_high(consult)
    if found is None:
        return ()
    plan = consult.plan
    present = plan.present.words if plan is not None and plan.present is not None else ""
    drug = consult.profile.withdrawal
    against = f"the risk of {drug.signs}" if drug is not None else "what the drug is given for"
    risk = f"{drug.risk} {WEIGH}" if drug is not None else WEIGH
    if found.urgent:
        unchanged = f"Do not go on with {present} unchanged" if present else "Do not go on unchanged"
        lines = [
            f"TOO HIGH: {found.text}. {unchanged}: hold the next dose, or reduce; {against} comes first.",
            risk,
        ]
    else:
        lines = [
            f"Above the target: {found.text}. Look for signs of toxicity: with any of them hold the next dose, or "
            f"reduce; without them weigh a smaller dose against {against}.",
            risk,
        ]
    lines += _restart(consult)
    if found.urgent:
        lines.append(daily_levels(consult))
    return tuple(lines)


def restart_level(consult: Consult) -> float:
    pause = consult.plan.pause if consult.plan is not None else None
    return pause.to_mg_per_L if pause is not None else consult.case.restart_level_mg_per_L or consult.goal.high_mg_per_L


def _restart(consult: Consult) -> list[str]:
    pause = consult.plan.pause if consult.plan is not None else None
    to = with_reported(restart_level(consult), consult)
    if pause is None:
        return [f"If held: give again when the level is down to {to}. About when cannot be told here: see the stops."]
    days = pause.with_absorption or pause.days
    start = moment(consult)
    about = ""
    if np.isfinite(days.median):
        about = f", about {show_date(start + timedelta(days=days.median))}" if start is not None else ""
    lines = [
        f"If held: give again when the level is down to {to}{about}: {days_words(days)} without a dose. The level "
        "decides, not the calendar."
    ]
    if pause.restarts:
        most = told_up_to(consult)
        said = "; ".join(f"{r.words}, steady level {level_band(r.steady, most)} mg/L" for r in pause.restarts)
        lines.append(f"To choose from for then (none is offered before the level is down): {said}.")
    offered = [r for r in pause.reductions if r.offered] or list(pause.reductions)
    quickest = min(offered, key=lambda r: r.days.median, default=None)
    if quickest is not None:
        mark = "" if quickest.offered else f" ({NOT_OFFERED} while the level is so high)"
        lines.append(
            f"If only reduced{mark}, to {quickest.words} ({show_number(quickest.percent, 2)} % of the present dose): "
            f"{days_words(quickest.days)} to the same level."
        )
    return lines


def daily_levels(consult: Consult) -> str:
    """The plan's own line where it has one, else the same from the level alone."""
    found = consult.plan.next_level if consult.plan is not None else None
    if found is not None and found.line.draw is None:
        return found.action
    start = moment(consult)
    withdrawal = consult.profile.withdrawal
    albumin = ", with albumin from the same sample" if consult.profile.binding is not None else ""
    sign = f"{withdrawal.one_sign}, " if withdrawal is not None else ""
    first = f" from {show_date(start + timedelta(days=1))}" if start is not None else " from tomorrow"
    return (
        f"Levels daily{first}{albumin}, until the level is down to "
        f"{with_reported(restart_level(consult), consult)}. Call at once for a level higher than the one before, "
        f"{sign}or growing signs."
    )
