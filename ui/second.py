"""Blind re-entry: the first entry is put aside unseen, the case typed again by another person, and both compared."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime

import streamlit as st
from pkcalc_form import look, opening

from pkcalc.case import Case, check_case, dump_case_file, parse_case_text
from pkcalc.entries import standing_lines
from pkcalc.errors import CaseError
from pkcalc.reentry import Comparison, compare, keep
from pkcalc.site import Site

FIRST, COMPARED = "first_entry", "compared"


@dataclass(frozen=True)
class Compared:
    """A comparison somebody asked for, with the two entries it belongs to."""

    first: str
    second: str
    found: Comparison


def _begin(text: str) -> None:
    """The first entry is put aside; a demonstration stays one for the second person too."""
    opening.forget("demonstration")
    st.session_state[FIRST] = text


def _compare(case: Case, settings: Site) -> None:
    """Somebody says that the second entry is complete. The comparison is kept with the first entry at once, so that
    what differed is not forgotten when it is corrected."""
    first = check_case(parse_case_text(st.session_state[FIRST]))
    found = compare(first, case, settings, forecasts=False)
    try:
        st.session_state[FIRST] = dump_case_file(keep(first, found, datetime.now()))
        st.session_state.pop("not_kept", None)
    except CaseError as error:
        st.session_state["not_kept"] = [p.text for p in error.problems]
    st.session_state[COMPARED] = Compared(first.hash, case.hash, found)


def _return() -> None:
    opening.open_file(parse_case_text(st.session_state[FIRST]))


def section(case: Case | None, settings: Site) -> None:
    """The place of the second pharmacist at the end of the page."""
    with st.expander("Blind re-entry by the second pharmacist", expanded=FIRST in st.session_state, key="second"):
        if not st.session_state.get(FIRST):
            look.say(
                "The second pharmacist types weight, doses, levels and dates again from the chart, without seeing this "
                "entry. Every difference is then listed with what it does to the forecast, and the note says that it "
                "was done.",
                "hint",
            )
            if case is not None and case.reentry is not None:
                look.lines(standing_lines(case))
            if case is not None:
                st.button(
                    "Put this entry aside and begin the second",
                    key="begin-second",
                    on_click=_begin,
                    args=(dump_case_file(case.file),),
                )
            return
        if case is None:
            look.say("The second entry is not complete yet.")
        else:
            st.button(
                "The second entry is complete: compare the two",
                key="compare-now",
                on_click=_compare,
                args=(case, settings),
            )
            _outcome(case, settings)
        st.button("Leave the second entry and go back to the first", key="back-to-first", on_click=_return)


def _outcome(case: Case, settings: Site) -> None:
    """What the comparison found; nothing of it once either entry has changed."""
    asked: Compared | None = st.session_state.get(COMPARED)
    if asked is None:
        look.say("Nothing of the first entry is shown before you compare.", "hint")
        return
    if asked.second != case.hash:
        look.say("The second entry was changed since it was compared: compare again.", "empty-state")
        return
    for text in st.session_state.get("not_kept", ()):
        look.beside(text, needed=False)
    found = asked.found
    look.say(found.verdict, "answer")
    place = st.empty()
    if found.equal:
        place.empty()
    else:
        with place.container():
            look.lines([d.text for d in found.differences])
            with st.spinner("Working out what each difference does to the forecast"):
                first = check_case(parse_case_text(st.session_state[FIRST]))
                found = _with_effects(asked, first, case, settings)
        with place.container():
            look.lines([x for d in found.differences for x in (d.text, *_alone(d.effect))])
            look.lines(["Forecasts of the two entries:", *(f"   {e}" for e in found.effects)])
    if found.same_value:
        look.lines(["Written differently, the same value:", *(f"   {d.text}" for d in found.same_value)])
    look.say(
        "The comparison is kept with the first entry and stands on its note; a later change of what was compared makes "
        "it void.",
        "hint",
    )


def _alone(effect: str) -> tuple[str, ...]:
    return (f"   This alone: {effect}",) if effect else ()


def _with_effects(asked: Compared, first: Case, second: Case, settings: Site) -> Comparison:
    """The comparison with what each difference does to the forecast; worked out once."""
    if asked.found.effects:
        return asked.found
    found = compare(first, second, settings)
    st.session_state[COMPARED] = Compared(asked.first, asked.second, found)
    return found
