"""Page one, and the block to paste: question, patient's state, verdict on the level, regimen, next level, stops."""

from __future__ import annotations

import textwrap

from pkcalc import __version__
from pkcalc import plan as planning
from pkcalc.case import QUESTIONS
from pkcalc.cautions import percent
from pkcalc.clock import show_time
from pkcalc.consult import Consult, Shown
from pkcalc.levels import Observation
from pkcalc.note import hours
from pkcalc.note.words import (
    VALID_UNTIL,
    Section,
    as_reported,
    days_words,
    demonstration_words,
    edge,
    level_words,
    regimen_words,
    same_lines,
    sentence,
)
from pkcalc.plan.candidates import candidates
from pkcalc.units import show, show_number

#: Lines and columns of the block to paste into a record.
PASTE_LINES, PASTE_WIDTH = 25, 78


def page_one(consult: Consult) -> tuple[Section, ...]:
    """The parts of page one, in the order of the day."""
    parts = (
        Section("Question", _question(consult)),
        Section("Patient's state", _state(consult)),
        Section("Verdict on the level", verdict(consult)),
        Section("Chosen regimen", _chosen(consult)),
        Section("Next level", _next_level(consult)),
        Section("Valid until", (VALID_UNTIL, "Ordered instead, and why: ________________________________________")),
    )
    return tuple(p for p in parts if p.lines)


def _question(consult: Consult) -> tuple[str, ...]:
    case, goal = consult.case, consult.goal
    lines = []
    if case.demonstration is not None:
        lines.append(f"{sentence(case.demonstration.title)} What this shows: {sentence(case.demonstration.shows)}")
    if case.question:
        lines.append(sentence(case.question))
    lines.append(
        f"Target {show_number(goal.low_mg_per_L)} to {show_number(goal.high_mg_per_L)} mg/L, aim "
        f"{show(goal.aim_mg_per_L, 'mg/L')} ({_basis(consult)}; {goal.origin}); critical from "
        f"{show(goal.critical_mg_per_L, 'mg/L')}."
    )
    return tuple(lines)


def _basis(consult: Consult) -> str:
    return "total at normal binding" if consult.profile.binding is not None else consult.profile.target.basis


_TOLD = (
    ("seizing_now", "seizing now"),
    ("seizures_since_change", "seizures since the last change of dose"),
    ("toxic_signs", "signs of toxicity"),
    ("recent_load", "load or IV dose in the last 72 h"),
    ("renal_failure", "renal failure or dialysis"),
    ("valproate", "valproate"),
    ("pregnancy", "pregnant"),
    ("tube_feed", "tube fed"),
    ("adherence_doubtful", "doubtful adherence"),
)


def _state(consult: Consult) -> tuple[str, ...]:
    case, patient = consult.case, consult.case.patient
    parts = [
        f"age {patient.typed.get('age', 'not stated')}",
        f"sex {patient.sex if patient.sex != 'unknown' else 'not stated'}",
        f"weight {patient.typed.get('weight', 'not stated')}"
        + (f" ({patient.weight_basis})" if patient.weight_kg and patient.weight_basis != "unknown" else ""),
    ]
    if case.albumin is not None or consult.profile.binding is not None:
        parts.append(f"albumin {case.albumin.typed.text}" if case.albumin else "albumin not stated")
    told = [f"{words} {case.answer(key)}" for key, words in _TOLD if case.answer(key) in ("yes", "no")]
    asked = consult.profile.questions or tuple(QUESTIONS)
    missing = sum(case.answer(key) in ("unknown", "not stated") for key in asked)
    lines = [sentence("; ".join(parts))]
    if told:
        lines.append(sentence("; ".join(told)))
    if missing:
        lines.append(f"{missing} of {len(asked)} context questions are not stated or unknown (listed in the annex).")
    return tuple(lines)


def _latest(consult: Consult) -> Observation | None:
    dated = [o for o in consult.observations if o.level.drawn is not None]
    if dated:
        return max(dated, key=lambda o: o.level.drawn.timestamp() if o.level.drawn else 0.0)
    return consult.observations[-1] if consult.observations else None


def verdict(consult: Consult) -> tuple[str, ...]:
    """What the latest level is worth and where it lies; then what it says about the patient."""
    o, goal = _latest(consult), consult.goal
    if o is None:
        return ("No level is given.",)
    when = f", drawn {show_time(o.level.drawn)}" if o.level.drawn else ", draw time not stated"
    head = f"{o.name}: {o.level.typed.text} {o.level.kind}{when}"
    if not o.readable:
        lines = [
            f"{head}: not usable, no single reading at normal binding ({show_number(o.low_mg_per_L)} to "
            f"{show(o.high_mg_per_L, 'mg/L')} possible)."
        ]
    else:
        value = o.working_mg_per_L
        place = (
            "below the target"
            if value < goal.low_mg_per_L
            else "within the target"
            if value <= goal.high_mg_per_L
            else "above the target"
        )
        if value >= goal.critical_mg_per_L:
            place = "at or above the critical level"
        basis = (
            f"{show(value, 'mg/L')} at normal binding, "
            if value != o.level.reported_mg_per_L
            else "at normal binding "
            if consult.profile.binding is not None
            else f"{show(value, 'mg/L')}, "
            if o.level.typed.label != "mg/L"
            else ""
        )
        limit = {"below": " (below the limit stated)", "above": " (above the limit stated)", None: ""}[o.censored]
        lines = [f"{head}: {basis}{place}{limit}."]
        if o.set_aside:
            lines.append(f"Not used for the estimate: {o.set_aside}.")
    settled = next((s for s in consult.settling if s.level == o.level.index), None)
    if settled is not None:
        if settled.settled is True:
            lines.append("It may be read as a steady level (at least 90 % of the way to its plateau).")
        elif settled.settled is False:
            lines.append("It must not be read as a steady level: it was drawn before 90 % of the way to its plateau.")
        else:
            lines.append("Nobody can tell whether it is a steady level.")
    if consult.chosen is not None and not consult.stopped:
        vmax, km = consult.chosen.summary["vmax_mg_per_day"], consult.chosen.summary["km_mg_per_L"]
        lines.append(
            f"By {consult.chosen.method}: Vmax {hours.vmax_words(consult, vmax)} of active drug, Km {level_words(km)}."
        )
    return tuple(lines)


def chosen_candidate(consult: Consult) -> Shown | None:
    """The chosen regimen with its forecasts; None where none is chosen or nothing may be forecast."""
    plan, regimen = consult.plan, consult.case.chosen
    if plan is None or regimen is None:
        return None
    for c in plan.every:
        if c.regimen == regimen:
            return c
    present = planning.is_present(regimen, consult.case, consult.profile)
    words = regimen.words(consult.profile)
    return candidates([], [(regimen, words, "", present, True)], plan.setting)[0]


def spoken_for(consult: Consult) -> Shown | None:
    """The regimen the note is about: the chosen one, else the first proposed, else the present one."""
    chosen = chosen_candidate(consult)
    if chosen is not None:
        return chosen
    if consult.proposed:
        return consult.proposed[0]
    return consult.plan.present if consult.plan is not None else None


def forecast_lines(shown: Shown, consult: Consult) -> list[str]:
    """Both lines, the danger and the time: what must stand beside any regimen."""
    f, t, limit = shown.forecast, shown.taken, show(consult.goal.critical_mg_per_L, "mg/L")
    lines = [f"Expected as reported ({consult.scale.words}): {as_reported(f, consult)}."]
    if f.total != f.steady:
        lines.append(f"At normal binding: {level_words(f.steady)}.")
    if not same_lines(shown):
        lines.append(
            f"If every dose is taken: {as_reported(t, consult)}"
            + (f"; at normal binding {level_words(t.steady)}." if t.total != t.steady else ".")
        )
    lines.append(
        f"Every dose taken: chance above {limit} or of no steady state {percent(shown.danger)} (no steady state "
        f"{percent(t.no_steady_state)}); above the target {percent(t.above)}; below it (central) {percent(f.below)}."
    )
    lines.append(f"90 % of the way from today's level takes {days_words(f.settle_days)}.")
    return lines


def order_sentence(shown: Shown, consult: Consult) -> str:
    """One sentence that can be ordered from."""
    name = consult.profile.name
    change = ""
    if shown.change_percent is not None and not shown.present:
        way = "more" if shown.change_percent > 0 else "less"
        change = f", {show_number(abs(shown.change_percent), 2)} % {way} than now"
    start = consult.case.plan_start
    begin = f", from {show_time(start)}" if start is not None and not shown.present else ""
    keep = "Continue " if shown.present else ""
    dispense = f" Dispense {shown.dispense}." if shown.dispense else ""
    return (
        f"{keep}{name}: {shown.words}{begin} = {show(shown.rate_mg_per_day, 'mg/day', 4)} as active drug{change}."
        + dispense
    )


def _chosen(consult: Consult) -> tuple[str, ...]:
    case = consult.case
    words = case.file.chosen.words.strip() if case.file.chosen is not None else ""
    lines: list[str] = []
    if consult.projection is not None:
        lines += hours.front_lines(consult, consult.projection)
    elif consult.stopped or consult.plan is None:
        lines.append("No regimen can be forecast: see the stops.")
        if case.chosen is not None:
            lines.append(
                f"Written by the pharmacist: {case.chosen.words(consult.profile)}. No forecast stands behind it."
            )
    else:
        chosen = chosen_candidate(consult)
        if chosen is not None:
            lines.append(order_sentence(chosen, consult))
            lines += forecast_lines(chosen, consult)
            lines += [sentence(f"Not offered: {w}") for w in chosen.why_not]
        else:
            lines.append("No regimen is chosen yet. Chosen: ________________________________________")
            for shown in consult.proposed[:1]:
                mark = "Proposed, not offered" if not shown.offered else "Proposed, not chosen"
                lines.append(f"{mark}: {order_sentence(shown, consult)}")
                lines += forecast_lines(shown, consult)
            if len(consult.proposed) > 1:
                lines.append(f"{len(consult.proposed)} regimens are proposed; all stand in the annex.")
            if not consult.proposed and consult.plan.present is not None:
                lines.append(f"Present: {order_sentence(consult.plan.present, consult)}")
                lines += forecast_lines(consult.plan.present, consult)
    if words:
        lines.append(f"In the pharmacist's words: {sentence(words)}")
    return tuple(lines)


def _next_level(consult: Consult) -> tuple[str, ...]:
    plan, case = consult.plan, consult.case
    if consult.projection is not None:
        return hours.next_lines(consult, consult.projection)
    if plan is None:
        return ("No next level is planned by this note: see the stops.",)
    found = plan.next_level
    lines = []
    if case.next_draw is not None:
        lines.append(f"Planned by the pharmacist: {show_time(case.next_draw)}.")
    if found is None:
        return (*lines, plan.no_next_level or "No next level is planned.")
    lines.append(found.action)
    if found.safety is not None:
        lines.append(f"Early safety level: {found.safety_action}")
    free = " together with a free level" if any(o.level.kind == "free" for o in consult.observations) else ""
    lines.append(
        f"Draw just before the dose{free}, with albumin from the same sample; state the time of the last dose."
    )
    lines.append(f"These forecasts hold for {found.regimen_words}, with feeds and other drugs as now.")
    return tuple(lines)


def paste_block(consult: Consult) -> tuple[str, ...]:
    """Plain ASCII, at most 25 lines, to paste into a record. Stops first; what does not fit is said to be missing."""
    lines: list[str] = []
    if demonstration_words(consult):
        lines.append(demonstration_words(consult))
    lines.append(f"{consult.profile.name} level consult, pkcalc {__version__}, case {consult.case.hash}")
    stops = [c for c in consult.cautions if c.severity == "stop"]
    warnings = sum(c.severity == "warn" for c in consult.cautions)
    body: list[str] = [f"STOP: {c.text}" for c in stops]
    if warnings:
        body.append(f"{warnings} warning{'s' if warnings > 1 else ''}: see the full note.")
    o = _latest(consult)
    if o is not None:
        body.append(verdict(consult)[0])
    shown = spoken_for(consult)
    if consult.projection is not None:
        body += hours.paste_lines(consult, consult.projection)
    elif consult.stopped or shown is None:
        body.append("No forecast was given." if consult.stopped else "No regimen to forecast.")
    else:
        label = (
            "Chosen"
            if consult.case.chosen is not None
            else "Proposed, not chosen"
            if shown.proposed
            else "Present regimen"
        )
        body.append(f"{label}: {regimen_words(shown)} = {show(shown.rate_mg_per_day, 'mg/day', 4)} active drug.")
        body.append(f"Expected level as reported: {as_reported(shown.forecast, consult)}.")
        body.append(
            f"Every dose taken: up to {edge(shown.taken.total.high)} mg/L; chance above "
            f"{show(consult.goal.critical_mg_per_L, 'mg/L')} or of no steady state {percent(shown.danger)}."
            if edge(shown.taken.total.high)[0].isdigit()
            else f"Every dose taken: the level may have no steady state; chance above "
            f"{show(consult.goal.critical_mg_per_L, 'mg/L')} or of no steady state {percent(shown.danger)}."
        )
    body += [f"Next level: {_next_level(consult)[0]}"]
    last = [
        "Valid until the next level or any change of dose, feed, other drug or albumin.",
        "Not a substitute for the full note; check every number.",
    ]
    room = PASTE_LINES - len(lines) - sum(len(textwrap.wrap(x, PASTE_WIDTH)) for x in last)
    wrapped = [w for text in body for w in textwrap.wrap(text, PASTE_WIDTH)]
    if len(wrapped) > room:
        wrapped = [*wrapped[: room - 1], "[cut here: read the full note]"]
    lines += wrapped + [w for text in last for w in textwrap.wrap(text, PASTE_WIDTH)]
    return tuple(line.encode("ascii", "replace").decode("ascii") for line in lines)
