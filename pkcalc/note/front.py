"""Page one, and the block to paste: question, patient's state, verdict on the level, regimen, next level, stops."""

from __future__ import annotations

import math
from collections.abc import Sequence

from pkcalc import __version__, entries
from pkcalc import plan as planning
from pkcalc.cautions import rules_of
from pkcalc.clock import show_time
from pkcalc.consult import Consult, Shown
from pkcalc.estimate.result import Band
from pkcalc.note import hours
from pkcalc.note.acute import daily_levels, is_offered, limited, now_lines, too_high, used_level
from pkcalc.note.followup import follow_up_sentence
from pkcalc.note.words import (
    NOT_OFFERED,
    NOW,
    Section,
    as_reported,
    days_words,
    demonstration_words,
    level_words,
    on_both_scales,
    regimen_words,
    reports_free,
    same_lines,
    sentence,
    told_up_to,
    valid_in_short,
    valid_until,
)
from pkcalc.note.wrapping import wrapped
from pkcalc.plan.candidates import candidates
from pkcalc.units import percent, percent_beside, show, show_number

#: Lines and columns of the block to paste into a record.
PASTE_LINES, PASTE_WIDTH = 25, 78


def page_one(consult: Consult) -> tuple[Section, ...]:
    """The parts of page one, in the order of the day."""
    parts = (
        Section(NOW, now_lines(consult)),
        Section("Question", _question(consult)),
        Section("Patient's state", _state(consult)),
        Section("Verdict on the level", verdict(consult)),
        Section("Chosen regimen", _chosen(consult)),
        Section("Load or top-up", _loads(consult)),
        Section("Next level", next_level(consult)),
        Section("Valid until", (valid_until(consult), f"Ordered instead, and why: {'_' * 40}")),
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
        f"Target {show_number(goal.low_mg_per_L)} to {show_number(goal.high_mg_per_L)} mg/L"
        f"{hours.also(consult, goal.low_mg_per_L, goal.high_mg_per_L)}, aim "
        f"{show(goal.aim_mg_per_L, 'mg/L')}{hours.also(consult, goal.aim_mg_per_L)} ({basis_words(consult)}; "
        f"{goal.origin}); critical from {show(goal.critical_mg_per_L, 'mg/L')}"
        f"{hours.also(consult, goal.critical_mg_per_L)}."
    )
    return (*lines, *_goal_as_reported(consult))


def _goal_as_reported(consult: Consult) -> list[str]:
    """Target, aim and critical level as the laboratory will report them, where that is another number."""
    goal, scale = consult.goal, consult.scale
    if consult.profile.binding is None:
        return []
    ways = [(scale.words, scale.total)] if scale.total_factor != 1.0 else []
    ways += [("free level", scale.free)] if reports_free(consult) else []
    return [
        f"As reported ({words}): target {show_number(report(goal.low_mg_per_L))} to "
        f"{show(report(goal.high_mg_per_L), 'mg/L')}, aim {show(report(goal.aim_mg_per_L), 'mg/L')}, critical from "
        f"{show(report(goal.critical_mg_per_L), 'mg/L')}."
        for words, report in ways
    ]


def basis_words(consult: Consult) -> str:
    return "total at normal binding" if consult.profile.binding is not None else consult.profile.target.basis


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
    told = [
        f"{q.short} {case.answer(q.id)}"
        for q in consult.profile.questions.values()
        if q.told and case.answer(q.id) in ("yes", "no")
    ]
    asked = consult.profile.asked
    missing = sum(case.answer(key) in ("unknown", "not stated") for key in asked)
    lines = [sentence("; ".join(parts))]
    if told:
        lines.append(sentence("; ".join(told)))
    if missing:
        lines.append(f"{missing} of {len(asked)} context questions are not stated or unknown (listed in the annex).")
    return tuple(lines)


def verdict(consult: Consult) -> tuple[str, ...]:
    """What the latest level is worth and where it lies; then what it says about the patient."""
    o, goal = used_level(consult), consult.goal
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
            f"{limited(o, value)} at normal binding, "
            if value != o.level.reported_mg_per_L
            else "at normal binding "
            if consult.profile.binding is not None
            else f"{limited(o, value)}, "
            if o.level.typed.label != "mg/L"
            else ""
        )
        limit = {"below": " (below the limit stated)", "above": " (above the limit stated)", None: ""}[o.censored]
        lines = [f"{head}: {basis}{place}{limit}."]
        if o.set_aside:
            lines.append(f"Not used for the estimate: {o.set_aside}.")
    lines += [
        f"{x.name}: {x.level.typed.text} {x.level.kind} is not used for the estimate: {x.set_aside}."
        for x in consult.observations
        if x is not o
        and x.set_aside
        and (x.level.drawn is None or o.level.drawn is None or x.level.drawn >= o.level.drawn)
    ]
    settled = next((s for s in consult.settling if s.level == o.level.index), None)
    if settled is not None:
        if settled.settled is True:
            lines.append("It may be read as a steady level (at least 90 % of the way to its plateau).")
        elif settled.settled is False:
            lines.append("It must not be read as a steady level: it was drawn before 90 % of the way to its plateau.")
        else:
            lines.append("Nobody can tell whether it is a steady level.")
    then = follow_up_sentence(consult, o)
    if then:
        lines.append(then)
    if consult.chosen is not None and not consult.stopped:
        vmax, km = consult.chosen.summary["vmax_mg_per_day"], consult.chosen.summary["km_mg_per_L"]
        km_words = level_words(km, math.inf)
        lines.append(
            f"By {consult.chosen.method}: Vmax {hours.vmax_words(consult, vmax)} of active drug, Km {km_words}."
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
    f, t = shown.forecast, shown.taken
    lines = [f"Expected as reported ({consult.scale.words}): {as_reported(f, consult)}."]
    if f.total != f.steady:
        lines.append(f"At normal binding: {level_words(f.steady, told_up_to(consult))}.")
    if not same_lines(shown):
        lines.append(
            f"If every dose is taken: {as_reported(t, consult)}"
            + (f"; at normal binding {level_words(t.steady, told_up_to(consult))}." if t.total != t.steady else ".")
        )
    lines.append(
        f"Every dose taken: {danger_words(shown, consult)}; above the target once settled {percent(t.above)}. Below "
        f"the target once settled (central line) {percent(f.below)}."
    )
    lines.append(f"90 % of the way from today's level takes {days_words(f.settle_days)}.")
    return lines


def danger_words(shown: Shown, consult: Consult) -> str:
    """The chance of too high, with the time that it belongs to."""
    limit = show(consult.goal.critical_mg_per_L, "mg/L")
    settled = percent_beside(shown.taken.above_critical, consult.site.stop_chance)
    none = percent(shown.taken.no_steady_state)
    text = f"chance above {limit} or of no steady state {settled} once settled (no steady state {none})"
    counted = percent_beside(shown.danger, consult.site.stop_chance)
    if counted != settled and consult.plan is not None:
        days = show(consult.plan.setting.draw_days, "days")
        text += f", {counted} with the next feasible draw (in {days}) counted in"
    return text


def order_sentence(shown: Shown, consult: Consult) -> str:
    """One sentence that can be ordered from; a regimen that is not offered says so first and has nothing to order."""
    name = consult.profile.name
    change = ""
    if shown.change_percent is not None and not shown.present:
        way = "more" if shown.change_percent > 0 else "less"
        change = f", {show_number(abs(shown.change_percent), 2)} % {way} than now"
    rate = f" = {consult.profile.show_rate(shown.rate_mg_per_day, 4)} as active drug{change}."
    if not is_offered(shown, consult):
        return f"{NOT_OFFERED}: {name}: {shown.words}{rate}"
    start = consult.case.plan_start
    begin = f", from {show_time(start)}" if start is not None and not shown.present else ""
    keep = "Continue " if shown.present else ""
    dispense = f" Dispense {shown.dispense}." if shown.dispense else ""
    return f"{keep}{name}: {shown.words}{begin}{rate}{dispense}"


def _shelf_words(shown: Shown, consult: Consult) -> list[str]:
    """Where the shelf in use cannot make a regimen, page one says so."""
    plan = consult.plan
    said = any("cannot be made" in w for w in shown.why_not)
    if plan is None or not plan.shelf.products or shown.dispense or said:
        return []
    return [f"It cannot be made from the shelf in use ({plan.shelf.words})."]


def _regimen_lines(label: str, shown: Shown, consult: Consult) -> list[str]:
    """A regimen with its mark, why it is not offered, and its forecasts."""
    lines = [f"{label}{order_sentence(shown, consult)}"]
    lines += [sentence(f"Not offered: {w}") for w in shown.why_not]
    return [*lines, *_shelf_words(shown, consult), *forecast_lines(shown, consult)]


def _chosen(consult: Consult) -> tuple[str, ...]:
    case = consult.case
    words = case.file.chosen.words.strip() if case.file.chosen is not None else ""
    lines: list[str] = []
    if consult.projection is not None:
        lines += hours.front_lines(consult, consult.projection)
    elif consult.plateaus is not None and not consult.stopped:
        lines += hours.plateau_lines(consult, consult.plateaus)
    elif consult.stopped or consult.plan is None:
        lines.append(consult.refusals.get("projection") or "No regimen can be forecast: see the stops.")
        if case.chosen is not None:
            lines.append(
                f"Written by the pharmacist: {case.chosen.words(consult.profile)}. No forecast stands behind it."
            )
    else:
        chosen = chosen_candidate(consult)
        if chosen is not None:
            label = "" if is_offered(chosen, consult) else "Chosen by the pharmacist, "
            lines += _regimen_lines(label, chosen, consult)
        else:
            lines.append("No regimen is chosen yet. Chosen: ________________________________________")
            for shown in consult.proposed[:1]:
                label = "Proposed, not chosen: " if is_offered(shown, consult) else "Proposed, "
                lines += _regimen_lines(label, shown, consult)
            if len(consult.proposed) > 1:
                lines.append(f"{len(consult.proposed)} regimens are proposed; all stand in the annex.")
            if not consult.proposed and consult.plan.present is not None:
                label = "Present: " if is_offered(consult.plan.present, consult) else "Present, to go on unchanged: "
                lines += _regimen_lines(label, consult.plan.present, consult)
    if words:
        ordered = chosen_candidate(consult) if not consult.stopped else None
        refused = ordered is not None and not is_offered(ordered, consult)
        mark = f" (the regimen is {NOT_OFFERED} by this note)" if refused else ""
        lines.append(f"In the pharmacist's words{mark}: {sentence(words)}")
    return tuple(lines)


def _loads(consult: Consult) -> tuple[str, ...]:
    """A load that was asked for: its order with its mark, and what it would do."""
    plan = consult.plan
    if consult.case.file.plan.load is None or consult.projection is not None:
        return ()
    if plan is None:
        return ("No load is worked out by this note: see the stops.",)
    lines: list[str] = []
    for load in plan.loads:
        order = " ".join(sentence(x) for x in load.order)
        if load.offered:
            lines.append(order)
        else:
            lines.append(f"{NOT_OFFERED}: {' '.join(sentence(w) for w in load.why_not)}")
            lines.append(f"{NOT_OFFERED}, by calculation only: {order}")
        lines.append(
            f"Expected after it {on_both_scales(load.after, consult)}"
            f"; chance above the range {percent(load.above_high)}, above the critical level "
            f"{percent(load.above_critical)}."
        )
    return (*lines, *plan.no_load)


def _load_draws(consult: Consult) -> list[str]:
    """The level after each offered load, with its own line to call."""
    plan = consult.plan
    if plan is None or consult.case.file.plan.load is None:
        return []
    free = reports_free(consult)
    report, kind = (consult.scale.free, "free level") if free else (consult.scale.total, "total level")
    critical = report(consult.goal.critical_mg_per_L)
    lines = []
    for load in plan.loads:
        if not load.offered:
            continue
        expected = Band(report(load.at_draw.median), report(load.at_draw.low), report(load.at_draw.high))
        since = "the end of the infusion" if load.minutes is not None else "the first part"
        lines.append(
            f"If the load is given, first: draw {show(load.draw_after_h, 'h')} after {since}; expected "
            f"{level_words(expected, report(told_up_to(consult)))} as reported ({kind}); above "
            f"{show(min(expected.high, critical), 'mg/L')}: call."
        )
    return lines


def next_level(consult: Consult) -> tuple[str, ...]:
    """When the next level is due and what it would mean; where nothing may be planned, why."""
    plan, case = consult.plan, consult.case
    if consult.projection is not None:
        return hours.next_lines(consult, consult.projection)
    if consult.plateaus is not None:
        return hours.next_without_times(consult)
    high = too_high(consult)
    if high is not None and high.urgent:
        planned = [f"Planned by the pharmacist: {show_time(case.next_draw)}."] if case.next_draw is not None else []
        return (daily_levels(consult), "No later draw is planned while the level is too high.", *planned)
    if plan is None:
        return ("No next level is planned by this note: see the stops.",)
    found = plan.next_level
    lines = _load_draws(consult)
    loaded = bool(lines)
    shown = spoken_for(consult)
    if found is not None and shown is not None and not is_offered(shown, consult):
        if case.next_draw is not None:
            lines.append(f"Planned by the pharmacist: {show_time(case.next_draw)}.")
        return (*_without_plan(consult, shown), *lines)
    if case.next_draw is not None:
        lines.append(f"Planned by the pharmacist: {show_time(case.next_draw)}.")
    if found is None:
        return (*lines, plan.no_next_level or "No next level is planned.")
    if found.with_load is not None:
        lines.append(f"If the load is given: {found.with_load.words}")
    lines.append(f"If no load is given: {found.action}" if loaded else found.action)
    if found.safety is not None:
        lines.append(f"Early safety level: {found.safety_action}")
    # a drug whose levels a gel lowers has a caution for it
    gel = any(rule.when == "gel_tube" for rule in rules_of(consult.profile.id))
    tube = " into a tube without gel" if gel else ""
    free = " together with a free level" if any(o.level.kind == "free" for o in consult.observations) else ""
    lines.append(
        f"Draw just before the dose{tube}{free}, with albumin from the same sample; state the time of the last dose."
    )
    lines.append(f"These forecasts hold for {found.regimen_words}, with feeds and other drugs as now.")
    return tuple(lines)


def _without_plan(consult: Consult, shown: Shown) -> list[str]:
    """What to draw where the regimen in question is not offered: nothing is planned on it."""
    found = consult.plan.next_level if consult.plan is not None else None
    if not shown.present:
        first = (
            "Observe dosing and repeat the level on the present regimen first."
            if any(c.id == "increase-on-doubt" for c in consult.cautions)
            else "Plan the next level with a regimen that is offered; draw one on the present dose before any change."
        )
        lines = [f"No draw is planned on {shown.words} ({NOT_OFFERED}). {first}"]
        if found is not None and found.regimen_words != shown.words:
            mark = f" ({NOT_OFFERED})" if found.none_because else ""
            lines.append(f"On {found.regimen_words}{mark}, as now: {found.action}")
        return lines
    lines = [f"No draw is planned for going on unchanged ({NOT_OFFERED}): change the dose first, then plan the level."]
    if found is not None and found.regimen_words == shown.words:
        lines.append(f"While {shown.words} ({NOT_OFFERED}) is still taken: {found.action}")
    return lines


def _pasted_regimen(shown: Shown, consult: Consult) -> list[str]:
    """The regimen with its mark; the forecast fully taken before the central one."""
    label = (
        "Chosen" if consult.case.chosen is not None else "Proposed, not chosen" if shown.proposed else "Present regimen"
    )
    offered = is_offered(shown, consult)
    words = regimen_words(shown) if offered else shown.words
    rate = consult.profile.show_rate(shown.rate_mg_per_day, 4)
    lines = [f"{label}{'' if offered else f', {NOT_OFFERED}'}: {words} = {rate} active drug."]
    if not same_lines(shown):
        lines.append(f"Expected as reported, every dose taken: {as_reported(shown.taken, consult)}.")
        if offered:
            lines.append(f"Expected as reported, past intake carried on: {as_reported(shown.forecast, consult)}.")
    else:
        lines.append(f"Expected level as reported: {as_reported(shown.forecast, consult)}.")
    lines.append(f"Every dose taken: {danger_words(shown, consult)}.")
    return lines


def _pasted_loads(consult: Consult) -> list[str]:
    """The loads asked for, each with its mark and its level after."""
    plan = consult.plan
    if plan is None or consult.case.file.plan.load is None:
        return []
    lines = []
    for load in plan.loads:
        order = sentence(load.order[0] if load.order else show_number(load.amount_mg))
        head = "Load" if load.offered else f"Load, {NOT_OFFERED}"
        lines.append(f"{head}: {order} Level after it {on_both_scales(load.after, consult)}.")
    return [*lines, *plan.no_load]


def _whole(body: Sequence[str], room: int) -> list[str]:
    """What fits, cut between statements: half a line to act on would be worse than none."""
    parts = [wrapped(text, PASTE_WIDTH) for text in body]
    if sum(map(len, parts)) <= room:
        return [line for part in parts for line in part]
    lines: list[str] = []
    for part in parts:
        if len(lines) + len(part) > room - 1:
            break
        lines += part
    return [*lines, "[cut here: read the full note]"]


def paste_block(consult: Consult) -> tuple[str, ...]:
    """Plain ASCII, at most 25 lines, to paste into a record. Stops first; what does not fit is said to be missing."""
    lines: list[str] = []
    if demonstration_words(consult):
        lines.append(demonstration_words(consult))
    lines.append(f"{consult.profile.name} level consult, pkcalc {__version__}, case {consult.case.hash}")
    stops = [c for c in consult.cautions if c.severity == "stop"]
    warnings = sum(c.severity == "warn" for c in consult.cautions)
    high = too_high(consult)
    acute = now_lines(consult)
    urgent = high is not None and high.urgent
    body: list[str] = [acute[0], *acute[2:3]] if urgent else []
    body += [f"STOP: {c.text}" for c in stops if set(c.blocks) != {"two-level"}]
    if any(set(c.blocks) == {"two-level"} for c in stops):
        body.append("STOP: no two-level result (why: see the full note).")
    if warnings:
        body.append(f"{warnings} warning{'s' if warnings > 1 else ''}: see the full note.")
    if used_level(consult) is not None and not urgent:
        body.append(verdict(consult)[0])
    planned = next_level(consult)
    # the lines to act on, the longest wait last, since the block is cut at its end
    ours = [x for x in planned if "call" in x.lower()] or [x for x in planned if not x.startswith("Planned by")]
    ours = sorted(ours or planned, key=lambda x: x.startswith("If the load is given:"))
    following = [f"Next level: {ours[0]}", *ours[1:]]
    if consult.case.next_draw is not None and consult.projection is None:
        following.append(f"Next level planned by the pharmacist: {show_time(consult.case.next_draw)}.")
    # whoever reads only the block must not lose to the cut at its end what to do instead of a refused regimen
    shown = spoken_for(consult)
    before = urgent or (shown is not None and not is_offered(shown, consult))
    body += following if before else []
    if consult.projection is not None:
        body += hours.paste_lines(consult, consult.projection)
    elif consult.plateaus is not None and not consult.stopped:
        body += hours.plateau_lines(consult, consult.plateaus)
    elif consult.stopped or shown is None:
        body.append("No forecast was given." if consult.stopped else "No regimen to forecast.")
    else:
        body += _pasted_regimen(shown, consult)
    body += _pasted_loads(consult)
    body += [] if before else following
    last = [
        valid_in_short(consult),
        f"{entries.standing_words(consult.case)} Read the full note; check every number.",
    ]
    room = PASTE_LINES - len(lines) - sum(len(wrapped(x, PASTE_WIDTH)) for x in last)
    lines += _whole(body, room) + [w for text in last for w in wrapped(text, PASTE_WIDTH)]
    return tuple(line.encode("ascii", "replace").decode("ascii") for line in lines)
