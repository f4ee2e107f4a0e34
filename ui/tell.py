"""What the page shows of a consult. Every number and every word of judgement comes from the core."""

from __future__ import annotations

from collections.abc import Sequence
from html import escape

import streamlit as st
from pkcalc_form import look

from pkcalc.case import dump_case
from pkcalc.cautions import percent
from pkcalc.consult import Consult, Shown
from pkcalc.errors import Caution
from pkcalc.estimate.result import Band, Estimate
from pkcalc.note.data import dumps, note_data
from pkcalc.note.document import (
    DEFERS,
    DEMONSTRATION,
    FORECAST_HEADS,
    compose,
    days_words,
    estimate_lines,
    forecast_row,
    level_words,
)
from pkcalc.note.text import render
from pkcalc.units import show, show_number

STOPPED = "The calculation stopped. No number is shown. Please report this fault to the maintainers of this page."
URGENT = (
    "Seizing now? Active status epilepticus is treated by your protocol at once; do not wait for this page. "
    "Acute overdose is outside what it covers: call the poison centre."
)
_NAMES = {"stop": "STOP", "warn": "WARNING"}


def pinned(cautions: Sequence[Caution], demonstration: bool) -> None:
    """Stops and warnings, always in sight; what is only worth a note stands further down."""
    html = f'<div class="pk-banner">{escape(DEMONSTRATION)}</div>' if demonstration else ""
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


def estimates_table(estimates: Sequence[Estimate]) -> None:
    """Every method that answered, side by side."""
    rows = []
    for e in estimates:
        vmax, km, volume = (e.summary.get(k) for k in ("vmax_mg_per_day", "km_mg_per_L", "volume_L"))
        assert vmax is not None
        assert km is not None
        rows.append(
            (
                f"{e.method[0].upper()}{e.method[1:]}",
                f"{show_number(e.point.vmax_mg_per_day, 4)} ({e.point.kind})",
                _interval(vmax),
                f"{show_number(e.point.km_mg_per_L)} ({e.point.kind})",
                _interval(km),
                f"{show_number(volume.median)} ({_interval(volume)}), from the {e.volume_from}" if volume else "",
            )
        )
    look.table(
        (
            "Method",
            "Vmax (mg/day of active drug)",
            "90 % interval",
            "Km (mg/L)",
            "90 % interval",
            "Volume (L)",
        ),
        rows,
        label="This patient, by every method that can answer",
    )


def worth(consult: Consult) -> list[str]:
    """Each level: as typed, what it is worth, how settled it was."""
    found = []
    for o in consult.observations:
        said = f"{o.name}: {o.level.typed.text} {o.level.kind}"
        if not o.readable:
            low, high = show_number(o.low_mg_per_L), show(o.high_mg_per_L, "mg/L")
            said += f", no single reading: {low} to {high} possible"
        elif o.working_mg_per_L != o.level.reported_mg_per_L:
            said += f", worth {show(o.working_mg_per_L, 'mg/L')} total at normal binding"
        found.append(f"{said}.")
        found += [f"   {c}" for c in o.caveats]
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
    estimates_table(list(consult.estimates.values()))
    if consult.difference:
        look.say(consult.difference)
    if consult.observations:
        spread = consult.observations[0].spread
        look.say(
            f"Spread of a level taken as {show_number(100 * spread.total_cv)} % in all ({spread.basis}), of "
            f"which the assay is {show_number(100 * spread.assay_cv)} %.",
            "hint",
        )
    with st.expander("How this was found", expanded=False, key="workings"):
        look.lines([*estimate_lines(chosen), f"Chosen: {consult.chosen_why}."])
        for section in compose(consult).sections:
            if section.title == "Workings":
                look.lines(section.lines)


def estimate_sentence(consult: Consult | None) -> str:
    if consult is None:
        return ""
    if consult.chosen is None:
        return "no estimate"
    point = consult.chosen.point
    vmax, km = show(point.vmax_mg_per_day, "mg/day", 4), show(point.km_mg_per_L, "mg/L")
    return f"Vmax {vmax} of active drug, Km {km}"


# --- 5 What could be given next? -------------------------------------------------------------------------


def goal_line(consult: Consult) -> str:
    goal = consult.goal
    return (
        f"Target {show_number(goal.low_mg_per_L)} to {show(goal.high_mg_per_L, 'mg/L')}, aim "
        f"{show(goal.aim_mg_per_L, 'mg/L')} (total at normal binding; {goal.origin}); critical from "
        f"{show(goal.critical_mg_per_L, 'mg/L')}."
    )


def regimen(shown: Shown, consult: Consult) -> None:
    """One regimen in sentences."""
    f = shown.forecast
    look.say(
        f"{shown.words}{'' if shown.offered else ': NOT OFFERED, the chance of too high is above the limit'}",
        "answer",
    )
    lines = [
        f"{show(f.rate_mg_per_day, 'mg/day', 4)} of active drug.",
        f"{consult.scale.words[0].upper()}{consult.scale.words[1:]}: {level_words(f.total)}.",
        f"At normal binding: {level_words(f.steady)}.",
        f"Chance below the target {percent(f.below)}, within {percent(f.within)}, above {percent(f.above)} "
        f"(of which no steady state {percent(f.no_steady_state)}); above the critical level "
        f"{percent(f.above_critical)}.",
        f"90 % of the way from the present level: {days_words(f.settle_days)}.",
    ]
    look.lines(lines)


def candidates(consult: Consult) -> None:
    look.say(goal_line(consult))
    if consult.aim_rate is not None:
        rate = consult.aim_rate
        look.say(
            f"To hold {show(consult.goal.aim_mg_per_L, 'mg/L')} at normal binding: "
            f"{show(rate.median, 'mg/day')} of active drug "
            f"(90 % interval {_interval(rate)})."
        )
        for form in dict.fromkeys(f for c in consult.case.courses for f in c.forms):
            known = consult.profile.forms[form]
            look.say(
                f"As {known.words}: {show(rate.median / known.active_fraction, known.amount_unit + '/day')} "
                f"(salt factor {show_number(known.salt_factor)})."
            )
    for shown in consult.proposed:
        regimen(shown, consult)
    if consult.table:
        rows = [forecast_row(s) for s in consult.table]
        look.table(
            (*FORECAST_HEADS[:-1], "Remark"),
            rows,
            label="Doses around the present one, by daily dose. Median (90 % interval), fully taken, nothing "
            "else changed.",
            marks=["present" if s.present else "" if s.offered else "not offered" for s in consult.table],
        )


def candidates_sentence(consult: Consult | None) -> str:
    if consult is None or not consult.proposed:
        return ""
    first = consult.proposed[0]
    return f"{first.words}: {level_words(first.forecast.total)}"


# --- 6 and 7 ---------------------------------------------------------------------------------------------


def next_look(consult: Consult) -> None:
    rows = [*consult.proposed, *(s for s in consult.table if s.present)]
    if not rows:
        look.say("Enter a regimen of your own above to see how long it takes to settle.")
    for shown in rows:
        name = "The present dose" if shown.present and not shown.proposed else shown.words
        look.say(f"{name}: 90 % of the way to its level takes {days_words(shown.forecast.settle_days)}.")
    if rows:
        look.say("A level drawn earlier than this reads too low after an increase.", "hint")


def note(consult: Consult) -> None:
    text = render(compose(consult))
    st.html(f'<pre class="pk-note" role="region" aria-label="Note" tabindex="0">{escape(text)}</pre>')
    name = "demonstration" if consult.case.demonstration else "consult"
    left, middle, right = st.columns(3)
    left.download_button(
        "Note as text",
        data=lambda: text,
        file_name=f"{name}-note.txt",
        mime="text/plain",
        on_click="ignore",
        key="get-text",
    )
    middle.download_button(
        "Note as JSON",
        data=lambda: dumps(note_data(consult)),
        file_name=f"{name}-note.json",
        mime="application/json",
        on_click="ignore",
        key="get-json",
    )
    right.download_button(
        "Case file",
        data=lambda: dump_case(consult.case),
        file_name=f"{name}-case.json",
        mime="application/json",
        on_click="ignore",
        key="get-case",
    )
    look.say(DEFERS, "hint")
