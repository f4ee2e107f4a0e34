"""The annex of the note: everything behind page one, part by part."""

from __future__ import annotations

import math

import numpy as np

from pkcalc import entries
from pkcalc.clock import show_time
from pkcalc.consult import Consult, Shown
from pkcalc.dosing import active_mg
from pkcalc.estimate.lines import LineFailure
from pkcalc.estimate.posterior import WHOLE_RECORD
from pkcalc.estimate.result import Estimate
from pkcalc.forecast import scaled
from pkcalc.levels import everyday_cv
from pkcalc.note import hours, populations
from pkcalc.note.acute import is_offered, limited, marked, too_high, with_reported
from pkcalc.note.followup import follow_up_section
from pkcalc.note.front import chosen_candidate, forecast_lines, spoken_for
from pkcalc.note.populations import populations_compared
from pkcalc.note.words import (
    NOT_OFFERED,
    Section,
    Table,
    at_binding,
    chances_words,
    days_words,
    forecast_heads,
    forecast_row,
    level_band,
    level_edge,
    level_words,
    mark_of,
    on_both_scales,
    regimen_words,
    scale_line,
    sentence,
    short_band,
    signed_percent,
    told_up_to,
)
from pkcalc.note.workings import REPRESENTATIVE, machine_only, workings
from pkcalc.plan.loading import Load
from pkcalc.plan.switching import Switch
from pkcalc.sources import source
from pkcalc.units import percent, show, show_number

__all__ = ["DANGER_HEADS", "annex", "danger_row", "estimate_lines", "populations_compared"]


def annex(consult: Consult) -> tuple[Section, ...]:
    """Every part of the annex that has something to say."""
    pressing = too_high(consult) is not None
    parts = [
        _patient(consult),
        _doses(consult),
        _levels(consult),
        *follow_up_section(consult),
        *_estimate(consult),
        *(_acute(consult) if pressing else ()),
        *_regimens(consult),
        *hours.sections(consult),
        *(() if pressing else _acute(consult)),
        *_next(consult),
        *_populations(consult),
        *_workings(consult),
        *_second_way(consult),
        _settings(consult),
        _checked(consult),
        _sources(consult),
    ]
    return tuple(p for p in parts if p.lines or p.table)


def _patient(consult: Consult) -> Section:
    case, patient = consult.case, consult.case.patient
    albumin = case.albumin
    parts = [f"height {patient.typed.get('height', 'not stated')}"]
    if albumin is not None:
        parts.append(
            f"albumin {albumin.typed.text}"
            + (f" taken {show_time(albumin.taken)}" if albumin.taken else ", time not stated")
            + (f" (method {albumin.method})" if albumin.method not in ("unknown", "other") else "")
        )
    lines = [sentence("; ".join(parts))]
    questions = consult.profile.questions
    for key, question in questions.items():
        answer = case.context.get(key)
        if answer is None or answer.answer == "unknown":
            continue
        more = [answer.detail] if answer.detail else []
        if answer.since is not None:
            more.append(f"since {show_time(answer.since)}")
        lines.append(f"{question.words} {answer.answer}" + (f" ({'; '.join(more)})" if more else ""))
    unknown = [questions[k].words for k in consult.profile.asked if case.answer(k) in ("unknown", "not stated")]
    if unknown:
        lines.append("Not stated or unknown: " + " ".join(unknown))
    if consult.prior is not None:
        lines.append(f"Population used: {consult.prior.words}.")
        lines += [sentence(u) for u in consult.prior.used]
    return Section("Patient", tuple(lines))


def _doses(consult: Consult) -> Section:
    case, profile = consult.case, consult.profile
    lines = []
    for course in case.courses:
        head = f"Dose line {course.index + 1}: "
        if course.regimen is not None:
            rate = course.regimen.active_mg_per_day(profile)
            when = (
                f"for about {course.typed.for_about}"
                if course.for_about_days is not None
                else f"since {show_time(course.start)}"
                if course.start
                else "start not stated"
            )
            if course.end is not None:
                when += f" until {show_time(course.end)}"
            text = f"{course.regimen.words(profile)}, {when} = {profile.show_rate(rate, 4)} as active drug"
            if course.missed:
                text += "; missed " + ", ".join(show_time(m) for m in course.missed)
        elif course.single is not None and course.start is not None:
            form = profile.forms[course.single.form]
            over = f" over {show(course.single.over_h, 'h')}" if course.single.over_h else ""
            text = (
                f"{show_number(course.single.labelled_mg, 6)} {form.amount_unit} {form.words} once at "
                f"{show_time(course.start)}{over} = {show(active_mg(course.single, profile), 'mg', 4)} as active drug"
            )
        else:
            text = f"infusion {course.typed.rate} {profile.forms[course.rate_form].words}"
            if course.start is not None:
                text += f" from {show_time(course.start)} " + (f"to {show_time(course.end)}" if course.end else "on")
        given = f"; given by {course.given_by}" if course.given_by != "unknown" else ""
        lines.append(
            head + text + given + ("" if course.counts_as_given else " (not confirmed as given; left out)") + "."
        )
    for session in case.dialysis:
        until = f"to {show_time(session.end)}" if session.end is not None else "on"
        said = f"{show(session.clearance_L_per_day / 1.44, 'mL/min')}" + (", assumed" if session.assumed else "")
        lines.append(
            f"Dialysis session {session.index + 1}: from {show_time(session.start)} {until}, clearance {said}."
        )
    return Section("What was given", tuple(lines))


def _levels(consult: Consult) -> Section:
    lines = []
    settling = {s.level: s for s in consult.settling}
    for o in consult.observations:
        level = o.level
        when = f"drawn {show_time(level.drawn)}" if level.drawn else "draw time not stated"
        text = f"{o.name}: {level.typed.text} {level.kind}, {when}"
        if o.censored:
            text += f"; {o.censored} the limit {show(level.reported_mg_per_L, 'mg/L')}"
        if not o.readable:
            text += f"; no single reading: {show_number(o.low_mg_per_L)} to {show(o.high_mg_per_L, 'mg/L')} possible"
        elif o.working_mg_per_L != level.reported_mg_per_L:
            text += f"; at normal binding {limited(o, o.working_mg_per_L)}"
        lines.append(text + ".")
        lines += [f"   {step}" for step in o.steps]
        lines += [f"   {caveat}" for caveat in o.caveats]
        if o.set_aside:
            lines.append(f"   Not used for the estimate: {o.set_aside}.")
        if level.index in settling:
            lines.append(f"   {settling[level.index].sentence}")
    if consult.observations:
        spread = consult.observations[0].spread
        lines.append(
            f"Spread of a level taken as {show_number(100 * spread.total_cv)} % in all "
            f"({spread.basis}), of which the "
            f"assay is {show_number(100 * spread.assay_cv)} %."
        )
        if WHOLE_RECORD in consult.estimates:
            own = math.hypot(spread.assay_cv, everyday_cv(consult.profile, consult.site, spread.assay_cv))
            lines.append(
                "The whole record reckons doses missed unseen one by one and takes "
                f"{show_number(100 * own, 2)} % for assay, day and moment of the draw."
            )
    return Section("What was measured", tuple(lines))


def estimate_lines(estimate: Estimate, time_unit: str = "day") -> list[str]:
    """Vmax and Km with their intervals, in words. time_unit: "h" where Vmax is told per hour."""
    vmax, km = estimate.summary["vmax_mg_per_day"], estimate.summary["km_mg_per_L"]
    point = estimate.point
    per, rate = (24.0, "mg/h") if time_unit == "h" else (1.0, "mg/day")
    lines = [
        f"Method: {estimate.method}.",
        f"Vmax {show(point.vmax_mg_per_day / per, rate, 4)} of active drug, Km {show(point.km_mg_per_L, 'mg/L')} "
        f"({point.kind}).",
        f"Vmax median {show(vmax.median / per, rate)}, 90 % interval {show_number(vmax.low / per)} to "
        f"{show_number(vmax.high / per)}; "
        f"Km median {show(km.median, 'mg/L')}, 90 % interval {show_number(km.low)} to {show_number(km.high)}; "
        f"correlation {_signed(estimate.correlation)}.",
    ]
    if estimate.volume_L is not None:
        volume = estimate.summary["volume_L"]
        lines.append(
            f"Volume {show(volume.median, 'L')} (90 % interval {show_number(volume.low)} to "
            f"{show_number(volume.high)}), "
            f"from the {estimate.volume_from}."
        )
    if "assumes" in estimate.diagnostics:
        lines.append(f"This estimate {estimate.diagnostics['assumes']}.")
    if "certificate" in estimate.diagnostics:
        difference = float(str(estimate.diagnostics["certificate"]))
        if np.isfinite(difference):
            lines.append(
                "Certificate: a second, shifted grid gives the same quantiles within "
                f"{show_number(100 * difference, 2)} %."
            )
    if "chance of negative Km" in estimate.diagnostics:
        chance = float(str(estimate.diagnostics["chance of negative Km"]))
        lines.append(
            f"Chance that the spread of these levels alone makes the pair impossible: {percent(chance)}; "
            f"{percent(estimate.rejected)} of the draws were left out for that reason, and the intervals are "
            "conditional on the rest."
        )
    return lines


def _signed(value: float) -> str:
    return ("minus " if value < 0 else "") + show_number(abs(value), 2)


def _estimate(consult: Consult) -> list[Section]:
    lines: list[str] = []
    if consult.chosen is not None:
        lines += estimate_lines(consult.chosen, consult.profile.time_unit)
        lines.append(f"Chosen: {consult.chosen_why}.")
        for other in consult.estimates.values():
            if other is not consult.chosen:
                p = other.point
                lines.append(
                    f"Beside it, {other.method}: Vmax {consult.profile.show_rate(p.vmax_mg_per_day, 4)}, Km "
                    f"{show(p.km_mg_per_L, 'mg/L')} ({p.kind})."
                )
        if consult.difference:
            lines.append(consult.difference)
    for method, why in consult.refusals.items():
        lines.append(f"{method[0].upper()}{method[1:]}: no estimate. {why}")
    if consult.verdict is not None:
        lines.append(consult.verdict.text)
    if consult.stopped and not lines:
        lines.append("No estimate is given because of the stops above.")
    sections = [Section("What it says about this patient", tuple(lines))]
    if consult.chosen is not None and consult.chosen.fit:
        names = {o.level.index: o.name for o in consult.observations}
        limits = {o.level.index: f"{o.censored} " for o in consult.observations if o.censored is not None}
        rows = tuple(
            (
                names.get(f.level, f"Level {f.level + 1}"),
                limits.get(f.level, "") + show_number(f.observed_mg_per_L),
                short_band(f.predicted),
                _signed(f.standardised_residual),
            )
            for f in consult.chosen.fit
        )
        measured = f"Measured{at_binding(consult, ', normal binding')} (mg/L)"
        heads = ("Level", measured, "By the estimate (mg/L)", "Off in spreads")
        sections.append(Section("How the levels fit", (), Table(heads, rows)))
    if consult.line_results:
        rows_ = []
        said = []
        for r in consult.line_results:
            if isinstance(r, LineFailure):
                said.append(r.text)
            else:
                p = r.point
                vmax = consult.profile.rate(p.vmax_mg_per_day)
                rows_.append((r.method, show_number(vmax, 4), show_number(p.km_mg_per_L)))
        heads_ = ("Method", f"Vmax ({consult.profile.rate_unit})", "Km (mg/L)")
        table = Table(heads_, tuple(rows_)) if rows_ else None
        sections.append(Section("The steady levels by several methods", tuple(said), table))
    return sections


DANGER_HEADS = (
    "Regimen",
    "Every dose taken: steady level (mg/L)",
    "Above critical or no steady state, once settled",
    "With the next feasible draw counted in",
    "No steady state, once settled",
    "Trough to peak (mg/L)",
    "Level on named days, central (mg/L)",
    "Change of dose",
)


def danger_row(shown: Shown, consult: Consult) -> tuple[str, ...]:
    most = told_up_to(consult)
    swing = "not worked out"
    if shown.trough is not None and shown.peak is not None:
        ends = [level_edge(b.median, most) for b in (shown.trough, shown.peak)]
        swing = " to ".join(dict.fromkeys(ends))
    days = (
        "; ".join(f"day {show_number(d)}: {level_edge(b.median, most)}" for d, b in shown.on_days)
        if shown.on_days
        else "not worked out"
    )
    return (
        shown.words if shown.offered else f"{shown.words} ({NOT_OFFERED})",
        level_band(shown.taken.steady, most),
        percent(shown.taken.above_critical),
        percent(shown.danger),
        percent(shown.taken.no_steady_state),
        swing,
        days,
        signed_percent(shown.change_percent),
    )


def _regimens(consult: Consult) -> list[Section]:
    sections: list[Section] = []
    plan = consult.plan
    most = told_up_to(consult)
    chosen = chosen_candidate(consult)
    for shown in consult.proposed:
        if chosen is not None and shown.regimen == chosen.regimen:
            continue
        f, may = shown.forecast, is_offered(shown, consult)
        lines = [
            f"{regimen_words(shown) if may else f'{NOT_OFFERED}: {shown.words}'} = "
            f"{consult.profile.show_rate(f.rate_mg_per_day, 4)} as active drug.",
            *(sentence(f"Not offered: {w}") for w in shown.why_not),
            *forecast_lines(shown, consult),
            f"Central chances: {chances_words(f)}.",
        ]
        if np.isfinite(f.percent_per_percent):
            lines.append(f"At this point 1 % more dose is {show_number(f.percent_per_percent, 2)} % more level.")
        sections.append(Section("Proposed regimen" if may else f"Proposed regimen: {NOT_OFFERED}", tuple(lines)))
    if consult.table:
        both = (*consult.table, *(s for s in consult.proposed if s not in consult.table))
        ordered = sorted(both, key=lambda s: s.forecast.rate_mg_per_day)
        sections.append(
            Section(
                "Doses around the present one",
                (
                    "By daily dose; the order is no advice. Steady level: median (90 % interval), "
                    "past intake carried on. "
                    "Chances hold against the target range. No change in other drugs, feeds or albumin.",
                ),
                Table(forecast_heads(consult), tuple(forecast_row(s, consult) for s in ordered)),
            )
        )
        sections.append(
            Section(
                "Danger of each, every dose taken",
                tuple(
                    x
                    for x in (
                        "The chance of too high and every stop are computed for the regimen fully taken.",
                        scale_line(consult),
                    )
                    if x
                ),
                Table(DANGER_HEADS, tuple(danger_row(s, consult) for s in ordered)),
            )
        )
    if plan is not None:
        notes = list(plan.lines)
        notes += [
            f"{s.words}: {mark_of(s)}. {' '.join(sentence(w) for w in s.why_not)}" for s in consult.table if s.why_not
        ]
        counted, on_paper = len(plan.every), len(plan.table) + len(plan.own)
        offered = sum(c.offered for c in plan.every)
        if counted > on_paper:
            notes.append(
                f"{counted} regimens were worked out, {offered} of them may be offered; {on_paper} "
                "are printed here and "
                "the JSON form of this note holds all."
            )
        if plan.ranked:
            on_table = {c.words for c in (*plan.table, *plan.own)}
            notes.append(
                "Those of the table that may be offered, by expected loss, smallest first, as asked for (too high "
                f"weighs {show_number(consult.site.loss_too_high)}, too low {show_number(consult.site.loss_too_low)}): "
                + "; ".join(c.words for c in plan.ranked if c.words in on_table)
                + "."
            )
        sections.append(Section("About the regimens", tuple(notes)))
        if plan.overlay is not None and len(plan.overlay.courses) > 1:
            heads = ("Day", *(f"{words} (mg/L)" for words, _ in plan.overlay.courses))
            rows = tuple(
                (show_number(d), *(level_band(course[i], most) for _, course in plan.overlay.courses))
                for i, d in enumerate(plan.overlay.days)
            )
            sections.append(
                Section(
                    "Level day by day, average over the day",
                    tuple(
                        x
                        for x in (f"Central line{at_binding(consult, ', at normal binding')}.", scale_line(consult))
                        if x
                    ),
                    Table(heads, rows),
                )
            )
        for switch in plan.switches:
            sections.append(
                Section(
                    f"Another form{': NOT OFFERED' if not switch.offered else ''}: {switch.words}",
                    (
                        *(sentence(w) for w in switch.why_not),
                        f"Equal would be {consult.profile.show_rate(switch.exact_labelled_mg)} as labelled; as "
                        f"dispensed {consult.profile.show_rate(switch.active_mg_per_day, 4)} of active drug "
                        f"({_change_words(switch.change_percent)}).",
                        f"Steady level {on_both_scales(switch.steady, consult)}{_two_ends(switch, most)}.",
                        *switch.lines,
                    ),
                )
            )
    if consult.aim_rate is not None:
        rate = consult.aim_rate
        # the estimate itself is one of the two lines; which one depends on whether it reckons with missed doses
        same = plan is not None and consult.chosen is not None and plan.setting.taken is plan.setting.central
        full = plan is not None and plan.setting.taken is consult.chosen
        basis = "normal binding" if consult.profile.binding is not None else "steady level"
        line = "" if same else ", every dose taken" if full else ", past intake carried on"
        lines = [
            f"To hold {show(consult.goal.aim_mg_per_L, 'mg/L')} ({basis}{line}): "
            f"{consult.profile.show_rate(rate.median)} of active drug (90 % interval "
            f"{show_number(consult.profile.rate(rate.low))} to {show_number(consult.profile.rate(rate.high))})."
        ]
        for form_id in dict.fromkeys(f for c in consult.case.courses for f in c.forms):
            form = consult.profile.forms[form_id]
            factor = form.salt_factor * form.bioavailability
            lines.append(
                f"As {form.words}: {show(rate.median / factor, form.amount_unit + '/day')} "
                f"(salt factor {show_number(form.salt_factor)})."
            )
        sections.append(Section("Dose rate for the aim", tuple(lines)))
    return sections


def _change_words(percent: float) -> str:
    """'0.36 % less than now'."""
    if abs(percent) < 0.05:
        return "the same as now"
    return f"{show(abs(percent), '%', 2)} {'more' if percent > 0 else 'less'} than now"


def _two_ends(switch: Switch, most: float) -> str:
    low, high = (level_edge(x, most) for x in (switch.steady_low_mg_per_L, switch.steady_high_mg_per_L))
    unit = " mg/L" if np.isfinite(switch.steady_high_mg_per_L) else ""
    return "" if low == high else f"; at the two ends of how much may reach the body {low} to {high}{unit}"


def _acute(consult: Consult) -> list[Section]:
    plan = consult.plan
    if plan is None:
        return []
    sections = [_load(load, consult) for load in plan.loads]
    if plan.no_load:
        sections.append(Section("Load or top-up", tuple(plan.no_load)))
    if plan.pause is not None:
        p, most = plan.pause, told_up_to(consult)
        lines = [
            p.risk,
            p.restart_line,
            f"Level today {level_words(p.now, np.inf)}{at_binding(consult, ' at normal binding')}; give again at "
            f"{with_reported(p.to_mg_per_L, consult)}.",
            f"Without any dose that takes {days_words(p.days)}"
            + (
                f"; with what is still being absorbed {days_words(p.with_absorption)}."
                if p.with_absorption is not None
                else "."
            ),
            *p.lines,
            *(x for x in (scale_line(consult),) if x),
        ]
        for r in p.reductions:
            lines.append(
                f"{'' if r.offered else 'NOT OFFERED: '}Partial reduction to {r.words} "
                f"({show_number(r.percent, 2)} % of the present dose): down to "
                f"{show(p.to_mg_per_L, 'mg/L')} in {days_words(r.days)}; steady level "
                f"{on_both_scales(r.steady, consult)}."
            )
        table = None
        if p.restarts:
            one = p.restarts[0]
            read = f"level on day {show_number(one.day, 2)}"
            heads = (
                "Restart with",
                "Steady level (mg/L)",
                f"Restarted on day {show_number(one.on_time_day, 2)}, as planned: {read} (mg/L)",
                f"Too early, on day {show_number(one.early_day, 2)}: {read} (mg/L)",
                f"Too late, on day {show_number(one.late_day, 2)}: {read} (mg/L)",
                "Lowest before the late restart (mg/L)",
            )
            table = Table(
                heads,
                tuple(
                    (
                        r.words,
                        level_band(r.steady, most),
                        level_band(r.on_time, most),
                        level_band(r.early, most),
                        level_band(r.late, most),
                        r.lowest_late_words,
                    )
                    for r in p.restarts
                ),
            )
        sections.append(
            Section(
                f"The level is too high: {'pause, or reduce' if p.toxic else 'reduce or pause'}", tuple(lines), table
            )
        )
    return sections


def _load(load: Load, consult: Consult) -> Section:
    form, most = consult.profile.forms[load.form], told_up_to(consult)
    parts = "; ".join(
        f"{show(mg, form.amount_unit, 6)} " + (f"after {show_number(h)} h" if h else "at once") for h, mg in load.parts
    )
    lines = [
        *load.order,
        f"By the formula {show(load.wanted_mg, form.amount_unit, 4)}; as ordered "
        f"{show(load.amount_mg, form.amount_unit, 6)} "
        f"({show(load.active_mg, 'mg', 4)} of active drug): {parts}.",
        f"It adds {level_words(load.rise, most)}; "
        + (
            f"level after it {on_both_scales(load.after, consult)}; when drawn {show(load.draw_after_h, 'h')} later "
            f"{on_both_scales(load.at_draw, consult)}."
            if load.minutes is not None
            else f"level when drawn, {show(load.draw_after_h, 'h')} after the first part, "
            f"{on_both_scales(load.at_draw, consult)}."
        ),
        f"Chance of a level above the range {percent(load.above_high)}, above the critical level "
        f"{percent(load.above_critical)}.",
    ]
    if load.minutes is not None:
        lines.append(f"Give over at least {show(load.minutes, 'min')}.")
    if load.followed:
        lines.append(
            f"With {load.maintenance} after it: "
            + "; ".join(f"day {show_number(d)} {on_both_scales(b, consult)}" for d, b in load.followed)
            + "."
        )
    lines += list(load.notes)
    if load.offered:
        return Section(f"Load or top-up: {form.words}", tuple(sentence(x) for x in lines))
    # whoever copies one line of an order must copy its mark with it
    refused = [
        f"{NOT_OFFERED}: {' '.join(sentence(w) for w in load.why_not)}",
        *(f"{NOT_OFFERED}, by calculation only: {sentence(x)}" for x in load.order),
        *lines[len(load.order) :],
    ]
    return Section(f"Load or top-up, {NOT_OFFERED}: {form.words}", tuple(sentence(x) for x in refused))


def _next(consult: Consult) -> list[Section]:
    found = consult.plan.next_level if consult.plan is not None else None
    if found is None:
        return []
    most = told_up_to(consult)
    reported_most = (consult.scale.free if found.line.scale == "free" else consult.scale.total)(most)
    rows = tuple(
        (
            show_number(d.day, 3),
            show_time(d.moment) if d.moment is not None else "",
            f"{show_number(100 * d.spread, 2)} %",
            level_band(d.expected, most),
            level_band(d.reported, reported_most),
            "proposed" if d is found.chosen else "early safety level" if d is found.safety else "",
        )
        for d in found.draws
    )
    heads = (
        "Day",
        "Drawn",
        "Spread left",
        f"Expected{at_binding(consult, ', normal binding')} (mg/L)",
        "As reported (mg/L)",
        "",
    )
    lines = [
        f"For {_named(found.regimen_words, consult)}. Spread of the forecast now (standard deviation "
        "of the log steady "
        f"level) {show_number(100 * found.before, 2)} %; what each draw would leave of it:",
        *found.why,
        f"90 % of the way to the steady level takes {days_words(found.settled_days)}.",
    ]
    return [Section("When to look again", tuple(lines), Table(heads, rows))]


def _named(words: str, consult: Consult) -> str:
    """A regimen's words with the mark of the regimen so called."""
    shown = spoken_for(consult)
    return marked(shown, consult) if shown is not None and shown.words == words else words


def _populations(consult: Consult) -> list[Section]:
    shown = spoken_for(consult)
    found = populations.compare(consult, shown) if shown is not None and not consult.stopped else ()
    if not found:
        return []
    rows = tuple(
        (
            c.words + (" (used)" if c.used else ""),
            short_band(scaled(c.vmax, consult.profile.rate(1.0))),
            short_band(c.km),
            level_band(c.steady, told_up_to(consult)),
            percent(c.danger),
        )
        for c in found
    )
    heads = (
        "Population",
        f"Vmax ({consult.profile.rate_unit})",
        "Km (mg/L)",
        "Steady level, central (mg/L)",
        "Every dose taken, once settled: above critical or no steady state",
    )
    said = (
        "What the same record and levels say under other published populations, for "
        f"{marked(shown, consult) if shown else ''}{at_binding(consult, ', at normal binding')}. Where these rows "
        "differ much, the population matters more than the levels.",
    )
    return [Section("Populations compared", said, Table(heads, rows))]


def _workings(consult: Consult) -> list[Section]:
    found = workings(consult)
    sections = []
    lines: list[str] = []
    for name, steps in found.groups:
        lines.append(f"{name}.")
        if name == REPRESENTATIVE:
            lines += [x for x in found.said if x]
        lines += [f"   {s.line}" for s in steps]
    if found.representative is None:
        lines += [x for x in found.said if x]
    lines += machine_only(consult)
    if lines:
        sections.append(Section("Workings", (*lines, *_arithmetic_only(consult))))
    return sections


def _arithmetic_only(consult: Consult) -> list[str]:
    """Where a level that is told in words has to be calculated again to check it, that it is no forecast."""
    shown, most = spoken_for(consult), told_up_to(consult)
    if shown is None or consult.plan is None:
        return []
    medians = [f.steady.median for f in (shown.forecast, shown.taken)]
    if not any(most < m < np.inf for m in medians):
        return []
    return [f"A level above {show(most, 'mg/L')} stands here as arithmetic to be checked, not as a level to expect."]


def _second_way(consult: Consult) -> list[Section]:
    rows = getattr(consult, "second_way", ())
    if not rows:
        return []
    cells = tuple(
        (r.quantity, r.first_text, r.second_text, r.tolerance_text, "agrees" if r.agrees else "DISAGREES") for r in rows
    )
    heads = ("Quantity", "First way", "Second way", "Tolerance", "")
    return [
        Section(
            "The two-way check",
            (
                "Key numbers calculated a second, independent way (adaptive integration, explicit "
                "sums, re-reading of the "
                "text as typed). It catches arithmetic, never transcription: for that the second "
                "pharmacist types the case "
                "again from the chart.",
                *_arithmetic_only(consult),
            ),
            Table(heads, cells),
        )
    ]


def _settings(consult: Consult) -> Section:
    site = consult.site
    lines = [s.text for s in site.settings]
    if not site.file:
        lines.append("No site file: every limit, target and spread is the drug file's own.")
    elif not lines:
        lines.append(f"{site.file} changes no setting.")
    if site.protocol:
        lines.insert(0, f"Local protocol: {site.protocol}.")
    return Section("Local settings used", tuple(sentence(x) for x in lines))


def _checked(consult: Consult) -> Section:
    return Section("Blind re-entry", entries.standing_lines(consult.case))


def _sources(consult: Consult) -> Section:
    return Section("Sources used", sources_used(consult))


def sources_used(consult: Consult) -> tuple[str, ...]:
    """Citations of everything this note rests on."""
    keys = ["michaelis1913", "ludden1977"]
    if consult.prior is not None:
        keys += consult.prior.sources
    keys += [c.source for c in consult.cautions]
    return tuple(source(key).citation for key in dict.fromkeys(keys))
