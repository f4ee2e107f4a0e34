"""What the page shows of a consult. Every number and every word of judgement comes from the core."""

from __future__ import annotations

import base64
from collections.abc import Callable, Sequence
from html import escape
from math import inf, isfinite

import streamlit as st
from pkcalc_form import look

from pkcalc.case import dump_case, dump_case_file
from pkcalc.consult import Consult, Shown
from pkcalc.drugs.profile import Profile
from pkcalc.errors import CaseError, Caution
from pkcalc.estimate.result import Band, Estimate
from pkcalc.forecast import scaled
from pkcalc.levels import Observation
from pkcalc.note import hours
from pkcalc.note.annex import DANGER_HEADS, danger_row, estimate_lines, populations_compared
from pkcalc.note.charts import Chart
from pkcalc.note.data import dumps, note_data
from pkcalc.note.document import DEFERS, DEMONSTRATION, compose
from pkcalc.note.front import basis_words, forecast_lines, next_level, page_one, paste_block
from pkcalc.note.lessons import lesson
from pkcalc.note.text import render
from pkcalc.note.words import (
    at_binding,
    days_words,
    forecast_heads,
    forecast_row,
    level_words,
    mark_of,
    regimen_words,
    short_band,
    told_up_to,
)
from pkcalc.note.workings import workings
from pkcalc.units import percent, show, show_number

STOPPED = "The calculation stopped. No number is shown. Please report this fault to the maintainers of this page."
URGENT = (
    "Seizing now? Active status epilepticus is treated by your protocol at once; do not wait for this page. "
    "Acute overdose is outside what it covers: call the poison centre."
)
_NAMES = {"stop": "STOP", "warn": "WARNING"}


def banner() -> None:
    st.html(f'<div class="pk-banner">{escape(DEMONSTRATION)}</div>')


def pinned(cautions: Sequence[Caution]) -> None:
    """Stops and warnings, always in sight; what is only worth a note stands further down."""
    html = ""
    shown = [c for c in cautions if c.severity in _NAMES]
    if shown:
        items = []
        for c in shown:
            more = f" No result for: {', '.join(c.blocks)}." if c.blocks else ""
            more += f" Lifted by: {c.lifted_by}." if c.lifted_by else ""
            items.append(f'<li class="pk-{c.severity}"><b>{_NAMES[c.severity]}</b> {look.html(c.text + more)}</li>')
        html += (
            '<div class="pk-cautions" role="region" aria-label="Stops and warnings" tabindex="0">'
            f'<ul aria-live="polite">{"".join(items)}</ul></div>'
        )
    if html:
        st.html(html)


def watermark() -> None:
    st.html('<div class="pk-mark" aria-hidden="true"></div>')


def not_yet(reasons: Sequence[str]) -> None:
    """In place of results while something is missing or contradictory."""
    what = "What is still needed or must be mended:" if reasons else "Enter doses and levels above."
    st.html(f'<p class="pk-line pk-empty-state"><b>No numbers yet.</b> {what}</p>')
    look.lines(reasons)


# --- 4 What does it say? ---------------------------------------------------------------------------------


def inputs_line(consult: Consult) -> str:
    """The inputs a result belongs to."""
    doses = "; ".join(
        c.regimen.words(consult.profile) if c.regimen else "a single dose or infusion"
        for c in consult.case.courses[:4]
        if c.counts_as_given
    )
    if len(consult.case.courses) > 4:
        doses += f"; {len(consult.case.courses)} lines in all"
    levels = ", ".join(f"{o.level.typed.text} {o.level.kind}" for o in consult.observations)
    return f"From: {doses or 'no doses'}; levels {levels or 'none'}. Case {consult.case.hash}."


def _interval(band: Band) -> str:
    return f"{show_number(band.low)} to {show_number(band.high)}"


def estimates_table(estimates: Sequence[Estimate], profile: Profile) -> None:
    """Every method that answered, side by side."""
    rows = []
    for e in estimates:
        vmax, km, volume = (e.summary.get(k) for k in ("vmax_mg_per_day", "km_mg_per_L", "volume_L"))
        assert vmax is not None
        assert km is not None
        rows.append(
            (
                f"{e.method[0].upper()}{e.method[1:]}",
                f"{show_number(profile.rate(e.point.vmax_mg_per_day), 4)} ({e.point.kind})",
                _interval(scaled(vmax, profile.rate(1.0))),
                f"{show_number(e.point.km_mg_per_L)} ({e.point.kind})",
                _interval(km),
                f"{show_number(volume.median)} ({_interval(volume)}), from the {e.volume_from}" if volume else "",
            )
        )
    look.table(
        (
            "Method",
            f"Vmax ({profile.rate_unit} of active drug)",
            "90 % interval",
            "Km (mg/L)",
            "90 % interval",
            "Volume (L)",
        ),
        rows,
        label="This patient, by every method that can answer",
    )


def read_level(o: Observation) -> list[str]:
    """One level said back: what it is worth at normal binding, and the step that led there."""
    said = f"Read as {o.level.typed.text} {o.level.kind}"
    if not o.readable:
        low, high = show_number(o.low_mg_per_L), show(o.high_mg_per_L, "mg/L")
        said += f": no single reading, {low} to {high} possible"
    elif o.working_mg_per_L != o.level.reported_mg_per_L:
        said += f": worth {show(o.working_mg_per_L, 'mg/L')} total at normal binding"
    return [f"{said}.", *o.caveats]


def worth(consult: Consult) -> list[str]:
    """Each level: as typed, what it is worth, how settled it was."""
    found = []
    for o in consult.observations:
        first, *more = read_level(o)
        found.append(f"{o.name}: {first.removeprefix('Read as ')}")
        found += [f"   {x}" for x in (*o.steps, *more)]
        if o.set_aside:
            found.append(f"   Not used for the estimate: {o.set_aside}.")
        found += [f"   {s.sentence}" for s in consult.settling if s.level == o.level.index]
    return found


def estimate(consult: Consult) -> None:
    look.lines(worth(consult))
    for method, why in consult.refusals.items():
        look.say(f"{method[0].upper()}{method[1:]}: no estimate. {why}")
    chosen = consult.chosen
    if chosen is None:
        look.say("No estimate is given; the reasons stand here and in the stops above.", "answer")
        return
    look.say(f"{estimate_sentence(consult)} ({chosen.point.kind}; method: {chosen.method}).", "answer")
    if consult.estimates:
        estimates_table(list(consult.estimates.values()), consult.profile)
    look.lines([x for x in (f"Chosen: {consult.chosen_why}.", consult.difference) if x])
    if consult.verdict is not None:
        look.say(consult.verdict.text)
    if chosen.fit:
        names = {o.level.index: o.name for o in consult.observations}
        look.table(
            ("Level", f"Measured{at_binding(consult, ', normal binding')} (mg/L)", "By the estimate (mg/L)"),
            [(names.get(f.level, ""), show_number(f.observed_mg_per_L), short_band(f.predicted)) for f in chosen.fit],
            label="How the levels fit: median (90 % interval)",
        )
    if consult.observations:
        spread = consult.observations[0].spread
        look.say(
            f"Spread of a level taken as {show_number(100 * spread.total_cv)} % in all ({spread.basis}), of "
            f"which the assay is {show_number(100 * spread.assay_cv)} %. Both are set in the service's own "
            "settings file.",
            "hint",
        )


def how(consult: Consult) -> None:
    """The numbers behind the estimate, and the equations with the numbers in them."""
    if consult.chosen is None:
        return
    look.lines(estimate_lines(consult.chosen))
    found = workings(consult)
    for name, steps in found.groups:
        look.lines([f"{name}.", *(f"   {s.line}" for s in steps)])
    look.lines(list(found.said))


def populations(consult: Consult) -> None:
    """What the same record says under the other published populations; worked out only when asked for."""
    rows = []
    for name, words, e in populations_compared(consult):
        vmax, km = e.summary["vmax_mg_per_day"], e.summary["km_mg_per_L"]
        used = " (used)" if consult.prior is not None and name == consult.prior.population else ""
        rows.append((words + used, short_band(scaled(vmax, consult.profile.rate(1.0))), short_band(km)))
    if len(rows) < 2:
        look.say("There is nothing to compare: this needs a weight and the whole record.")
        return
    look.table(
        ("Population", f"Vmax ({consult.profile.rate_unit} of active drug)", "Km (mg/L)"),
        rows,
        label="The same record and levels under each published population: median (90 % interval)",
    )


def estimate_sentence(consult: Consult | None) -> str:
    if consult is None:
        return ""
    if consult.chosen is None:
        return "no estimate"
    point = consult.chosen.point
    vmax, km = consult.profile.show_rate(point.vmax_mg_per_day, 4), show(point.km_mg_per_L, "mg/L")
    return f"Vmax {vmax} of active drug, Km {km}"


# --- 5 What could be given next? -------------------------------------------------------------------------


def goal_line(consult: Consult) -> str:
    goal = consult.goal
    return (
        f"Target {show_number(goal.low_mg_per_L)} to {show(goal.high_mg_per_L, 'mg/L')}, aim "
        f"{show(goal.aim_mg_per_L, 'mg/L')} ({basis_words(consult)}; {goal.origin}); critical from "
        f"{show(goal.critical_mg_per_L, 'mg/L')}."
    )


def regimen(shown: Shown, consult: Consult) -> None:
    """One regimen in sentences."""
    f = shown.forecast
    mark = mark_of(shown)
    look.say(f"{regimen_words(shown)}{f' ({mark})' if mark else ''}", "answer")
    said = [f"{consult.profile.show_rate(f.rate_mg_per_day, 4)} of active drug.", *forecast_lines(shown, consult)]
    if isfinite(f.percent_per_percent):
        said.append(f"At this point 1 % more dose is {show_number(f.percent_per_percent, 2)} % more level.")
    said += [f"Not offered: {why}" for why in shown.why_not]
    look.lines(said)


ORDERS = {
    "daily dose": lambda s: s.forecast.rate_mg_per_day,
    "chance within the target, highest first": lambda s: -s.forecast.within,
    "chance of too high (every dose taken), lowest first": lambda s: s.danger,
}


def candidates(consult: Consult) -> None:
    look.say(goal_line(consult))
    if consult.aim_rate is not None:
        rate = consult.aim_rate
        said = [
            f"To hold {show(consult.goal.aim_mg_per_L, 'mg/L')}{at_binding(consult, ' at normal binding')}: "
            f"{consult.profile.show_rate(rate.median)} of active drug (90 % interval {_interval(rate)})."
        ]
        for form in dict.fromkeys(f for c in consult.case.courses for f in c.forms):
            known = consult.profile.forms[form]
            said.append(
                f"   As {known.words}: {show(rate.median / known.active_fraction, known.amount_unit + '/day')} "
                f"(salt factor {show_number(known.salt_factor)})."
            )
        look.lines(said)
    for shown in consult.proposed:
        regimen(shown, consult)
    rows = listed(consult)
    if rows:
        order = st.selectbox("Order of the rows (it is no advice)", list(ORDERS), index=0, key="order")
        rows.sort(key=ORDERS.get(order, ORDERS["daily dose"]))
        marks = ["not offered" if not s.offered else "present" if s.present else "" for s in rows]
        look.table(
            (*forecast_heads(consult)[:-1], "Remark"),
            [forecast_row(s, consult) for s in rows],
            label="Doses around the present one. Median (90 % interval); nothing else changed.",
            marks=marks,
        )
        with st.expander("Danger of each, every dose taken", expanded=False, key="danger"):
            look.table(DANGER_HEADS, [danger_row(s, consult) for s in rows], label="Every dose taken", marks=marks)
        _compare(rows, consult)
    plan = consult.plan
    if plan is not None:
        look.lines([*plan.lines, *(f"{s.words}: {mark_of(s)}. {' '.join(s.why_not)}" for s in rows if s.why_not)])
        if plan.ranked:
            look.say("By expected loss, as asked for: " + "; ".join(c.words for c in plan.ranked[:5]) + ".")


def listed(consult: Consult) -> list[Shown]:
    """The rows of the table: around the present dose, with the pharmacist's own among them."""
    rows = [*consult.table, *(s for s in consult.proposed if s not in consult.table)]
    return sorted(rows, key=lambda s: s.forecast.rate_mg_per_day)


def _compare(rows: Sequence[Shown], consult: Consult) -> None:
    words = [s.words for s in rows]
    with st.expander("Compare two regimens", expanded=False, key="compare-two"):
        two = st.multiselect("Two regimens", words, key="two", max_selections=2, placeholder="choose two")
        if len(two) == 2 and set(two) <= set(words):
            first, second = (rows[words.index(w)] for w in two)
            heads = (*forecast_heads(consult)[1:-1], *DANGER_HEADS[1:])
            columns = [(*forecast_row(s, consult)[1:-1], *danger_row(s, consult)[1:]) for s in (first, second)]
            look.table(
                ("", first.words, second.words),
                list(zip(heads, *columns, strict=True)),
                label="Two regimens side by side",
            )


def acute(consult: Consult) -> None:
    """Loads, pausing and other forms, as the plan gives them; the whole of each stands in the note."""
    if consult.projection is not None:
        look.lines(list(hours.front_lines(consult, consult.projection)))
        for part in hours.sections(consult):
            if part.table is None:
                look.lines(list(part.lines))
            else:
                look.table(part.table.heads, list(part.table.rows), label=part.title)
    plan, most = consult.plan, told_up_to(consult)
    if plan is None:
        return
    for load in plan.loads:
        form = consult.profile.forms[load.form]
        offered = "" if load.offered else ": NOT OFFERED"
        look.say(f"Load or top-up with {form.words}{offered}", "answer")
        look.lines(
            [
                *load.order,
                f"Level after it {level_words(load.after, most)}; {show(load.draw_after_h, 'h')} later "
                f"{level_words(load.at_draw, most)}. Chance above the range {percent(load.above_high)}, above the "
                f"critical level {percent(load.above_critical)}.",
                *load.notes,
                *load.why_not,
            ]
        )
    look.lines(list(plan.no_load))
    if plan.pause is not None:
        pause = plan.pause
        back = show(pause.to_mg_per_L, "mg/L")
        look.say("The level is too high: reduce in part, or pause", "answer")
        look.lines(
            [
                pause.risk,
                pause.restart_line,
                f"Level today {level_words(pause.now, inf)}; give again at {back}. Without any "
                f"dose that takes {days_words(pause.days)}.",
                *pause.lines,
                *(
                    f"{'' if r.offered else 'NOT OFFERED: '}Partial reduction to {r.words}: down to {back} in "
                    f"{days_words(r.days)}."
                    for r in pause.reductions
                ),
            ]
        )
    for switch in plan.switches:
        look.say(f"Another form{': NOT OFFERED' if not switch.offered else ''}: {switch.words}", "answer")
        look.lines(
            [
                f"Equal would be {consult.profile.show_rate(switch.exact_labelled_mg)} as labelled; steady level "
                f"{level_words(switch.steady, most)}.",
                *switch.why_not,
                *switch.lines,
            ]
        )


def candidates_sentence(consult: Consult | None) -> str:
    if consult is None or not consult.proposed:
        return ""
    first = consult.proposed[0]
    offered = "" if first.offered else " (not offered)"
    most = consult.scale.total(told_up_to(consult))
    return f"{first.words}{offered}: total {level_words(first.forecast.total, most)}"


# --- 6 and 7 ---------------------------------------------------------------------------------------------


def next_look(consult: Consult) -> None:
    first, *rest = next_level(consult)
    look.say(first, "answer")
    look.lines(rest)
    found = consult.plan.next_level if consult.plan is not None else None
    if found is not None and any(found.action in said for said in (first, *rest)):
        look.lines(
            [
                f"For {found.regimen_words}.",
                f"90 % of the way to the steady level takes {days_words(found.settled_days)}.",
                *found.why,
            ]
        )


def next_sentence(consult: Consult | None) -> str:
    return "" if consult is None else next_level(consult)[0]


def picture(found: Chart) -> str:
    """A chart as the note prints it, as a picture with its text alternative."""
    data = base64.b64encode(found.svg().encode()).decode()
    return (
        '<div class="pk-chart" role="region" tabindex="0" aria-label="Chart">'
        f'<img src="data:image/svg+xml;base64,{data}" alt="{escape(found.alt)}"></div>'
    )


def teaches(consult: Consult) -> bool:
    """True for a demonstration with enough steady levels for the pictures; nothing is drawn for the answer."""
    return consult.case.demonstration is not None and bool(consult.line_results)


def residents(consult: Consult) -> None:
    """The steady levels of a demonstration in the five classical pictures, and what clinic events do to them."""
    found = lesson(consult)
    if found is None:
        look.say("There are too few steady levels for the pictures.")
        return
    look.say(found.banner, "answer")
    for chart in found.charts:
        st.html(picture(chart))
        look.say(chart.alt)
    for section in found.events:
        st.html(f'<h3 class="pk-group">{escape(section.title)}</h3>')
        look.lines(section.lines)


def note(consult: Consult) -> None:
    for section in page_one(consult):
        st.html(f'<h2 class="pk-group">{escape(section.title)}</h2>')
        look.lines(section.lines)
    with st.expander("Block to paste into the record", expanded=False, key="paste-block"):
        st.code("\n".join(paste_block(consult)), language=None, wrap_lines=True)
    name = "demonstration" if consult.case.demonstration else "consult"
    kinds: tuple[tuple[str, str, str, Callable[[], str | bytes]], ...] = (
        ("Note as text", "txt", "text/plain", lambda: render(compose(consult))),
        ("Note as HTML", "html", "text/html", lambda: _html(consult)),
        ("Note as PDF", "pdf", "application/pdf", lambda: _pdf(consult)),
        ("Note as JSON", "json", "application/json", lambda: dumps(note_data(consult))),
    )
    with st.container(horizontal=True):
        for label, ending, mime, make in kinds:
            st.download_button(
                label, data=make, file_name=f"{name}-note.{ending}", mime=mime, on_click="ignore", key=f"get-{ending}"
            )
        st.download_button(
            "Case file",
            data=lambda: dump_case(consult.case),
            file_name=f"{name}-case.json",
            mime="application/json",
            on_click="ignore",
            key="get-case",
        )
        st.download_button(
            "Case file for follow-up",
            data=lambda: _with_forecasts(consult),
            file_name=f"{name}-follow-up-case.json",
            mime="application/json",
            on_click="ignore",
            key="get-follow-up",
            help="The case with the levels this note forecasts: opened later with a new level, it shows what came.",
        )
    look.say(DEFERS, "hint")


def _with_forecasts(consult: Consult) -> str:
    """The case with what this note forecasts, for a later look at what came; without it where there is none."""
    from pkcalc.note.followup import with_forecasts

    try:
        return dump_case_file(with_forecasts(consult))
    except CaseError:
        return dump_case(consult.case)


def _html(consult: Consult) -> str:
    from pkcalc.note.html import render_html

    return render_html(consult)


def _pdf(consult: Consult) -> bytes:
    from pkcalc.note.pdf import render_pdf

    return render_pdf(consult)


def whole_note(consult: Consult) -> None:
    """The note with its annex, as text; made only when asked for."""
    look.preformatted(render(compose(consult)), "Note")
