"""The questions of the page: what a person enters, each problem beside its field. Nothing is calculated."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import streamlit as st
from pkcalc_form import entry as fields
from pkcalc_form import look
from pkcalc_form.entry import Entry, text

from pkcalc.case import Case
from pkcalc.clock import read_time, show_time
from pkcalc.drugs.profile import Product, Profile, drug_names, load_profile
from pkcalc.drugs.questions import GROUPS, Question, common_questions
from pkcalc.errors import CaseError, Problem
from pkcalc.spreadsheet import DOSE_COLUMNS
from pkcalc.units import show

ANSWERS = ("yes", "no", "unknown")
#: Titles of the groups in which the questions are asked; those of the first group stand before everything else.
TITLES = {
    "reading": "What can make a total level mislead",
    "course": "What changes how the drug gets in or out",
    "start": "Before a start or a load",
}
SOURCES = {
    "given": "given (seen in the administration record)",
    "ordered": "ordered only",
    "stated": "stated by patient or carer",
}
DATES = "Dates as 2026-03-04 21:00 or 4 Mar 2026 21:00"


@dataclass(frozen=True)
class Asked:
    """What the questions need to know: the fields, what they make, what is wrong with them."""

    values: Mapping[str, Any]
    entry: Entry
    problems: Mapping[str, tuple[Problem, ...]]
    case: Case | None
    profile: Profile | None


def _beside(asked: Asked, key: str) -> None:
    """The place below a field, always there: were it to come and go, the fields after it would be drawn anew
    and the one in use would lose the keyboard."""
    with st.container():
        for problem in asked.problems.get(key, ()):
            look.beside(problem.text, needed=not text(asked.values, key))


def _echo(text: str | None, kind: str = "echo") -> None:
    """The place where a line is said back, always there for the same reason."""
    with st.container():
        if text:
            look.say(text, kind)


def field(asked: Asked, label: str, key: str, *, most: int = 120, **more: Any) -> None:
    """A plain text field with what is wrong with it below."""
    st.text_input(label, key=key, max_chars=most, autocomplete="off", **more)
    _beside(asked, key)


def choice(
    asked: Asked,
    label: str,
    key: str,
    options: Sequence[str],
    words: Mapping[str, str] | None = None,
    *,
    empty: str = "not stated",
) -> None:
    """A choice with nothing chosen beforehand."""
    current = text(asked.values, key)
    offered = [*options, current] if current and current not in options else list(options)
    st.selectbox(
        label,
        offered,
        index=None,
        key=key,
        placeholder=empty,
        format_func=lambda x: (words or {}).get(x, x),
    )
    _beside(asked, key)


def number(
    asked: Asked, label: str, key: str, units: Sequence[str], *, unit_key: str = "", unit_label: str = ""
) -> None:
    """A number as text with its unit chosen beside it; the unit may also be typed with the number."""
    left, right = st.columns([5, 4], gap="xsmall", vertical_alignment="bottom", wrap=False)
    with left:
        st.text_input(label, key=key, max_chars=40, autocomplete="off")
    with right:
        st.selectbox(
            unit_label or f"Unit of {label[0].lower()}{label[1:]}",
            list(units),
            index=None,
            key=unit_key or f"{key}_unit",
            placeholder="unit",
        )
    _beside(asked, key)


def questions(asked: Asked) -> list[Question]:
    """The context questions that matter for the drug, in order; before a drug is chosen, those of any drug."""
    if asked.profile is None:
        return list(common_questions().values())
    return [asked.profile.questions[q] for q in asked.profile.asked]


def question(asked: Asked, found: Question) -> None:
    """One context question; silence stays 'not stated'."""
    key = found.id
    st.radio(found.words, ANSWERS, index=None, horizontal=True, key=f"ctx.{key}")
    _beside(asked, f"ctx.{key}")
    if not found.dated:
        return
    with st.container():
        if text(asked.values, f"ctx.{key}") == "yes":
            left, right = st.columns(2)
            with left:
                field(asked, "Since when (date)", f"ctx.{key}.since")
            with right:
                field(asked, "What exactly", f"ctx.{key}.detail")


# --- 1 How is the patient? -------------------------------------------------------------------------------


def patient(asked: Asked) -> None:
    names = drug_names()
    if len(names) > 1:  # the questions below follow from it
        choice(asked, "Drug", "drug", names, drug_words())
    field(asked, "Why was the level drawn, and what is asked?", "question", most=200)
    for found in questions(asked):
        if found.group == "first":
            question(asked, found)
    one, two = st.columns(2, gap="medium")
    with one:
        number(asked, "Age", "age", fields.AGE_UNITS)
        number(asked, "Weight", "weight", fields.WEIGHT_UNITS)
        choice(asked, "How was the weight found?", "weight_basis", ("measured", "estimated"))
        number(asked, "Height", "height", fields.HEIGHT_UNITS)
        choice(asked, "Sex", "sex", ("female", "male"))
    with two:
        number(asked, "Albumin", "albumin", fields.ALBUMIN_UNITS)
        field(asked, "Albumin taken (date and time)", "albumin_taken", help=DATES)
        choice(asked, "Albumin method", "albumin_method", ("BCG", "BCP", "other"))
        choice(asked, "Albumin after an albumin infusion?", "albumin_after_infusion", ANSWERS)
        field(asked, "Time of this consult", "now", help=DATES)
    for place, group in enumerate(GROUPS[1:]):
        _group(asked, place, group, expanded=place == 0)


def _group(asked: Asked, place: int, group: str, *, expanded: bool) -> None:
    known = [q for q in questions(asked) if q.group == group]
    if not known:
        return
    silent = sum(not text(asked.values, f"ctx.{q.id}") for q in known)
    said = [q.short for q in known if text(asked.values, f"ctx.{q.id}") == "yes"]
    label = f"**{TITLES[group]}**: {', '.join(said) + '; ' if said else ''}"
    label += f"{silent} of {len(known)} not stated" if silent else "all answered"
    with st.expander(label, expanded=expanded, key=f"group-{place}"):
        for found in known:
            question(asked, found)


def patient_sentence(asked: Asked) -> str:
    v = asked.values
    p = asked.entry.file.patient
    drug = asked.profile.name if asked.profile is not None else ""
    parts = [x for x in (drug, p.age, p.sex if p.sex != "unknown" else "", p.weight) if x]
    if asked.entry.file.albumin:
        parts.append(f"albumin {asked.entry.file.albumin.value}")
    every = questions(asked)
    for q in every:
        answer = text(v, f"ctx.{q.id}")
        if answer == "yes":
            parts.append(q.short)
        elif answer == "no" and q.group == "first" and q.told:
            parts.append(f"{q.short}: no")
    if not parts:
        return ""
    open_questions = sum(not text(v, f"ctx.{q.id}") for q in every)
    if open_questions:
        parts.append(f"{open_questions} questions not stated")
    return "; ".join(parts)


# --- 2 What was given? -----------------------------------------------------------------------------------


def _add_row(kind: str) -> None:
    rows = list(st.session_state.get(f"{kind}_rows", ()))
    st.session_state[f"{kind}_rows"] = [*rows, max(rows, default=0) + 1]


def _remove_row(kind: str, row: int) -> None:
    st.session_state[f"{kind}_rows"] = [r for r in st.session_state[f"{kind}_rows"] if r != row]
    for key in [k for k in st.session_state if str(k).startswith(f"{kind}.{row}.")]:
        del st.session_state[key]


def _row_head(kind: str, row: int, title: str, alone: bool) -> None:
    left, right = st.columns([4, 1], vertical_alignment="center")
    left.html(f'<h2 class="pk-group">{title}</h2>')
    if not alone:
        right.button(
            "Remove",
            key=f"{kind}.{row}.remove",
            help=f"Remove {title}",
            on_click=_remove_row,
            args=(kind, row),
        )


def form_words(profile: Profile | None) -> tuple[list[str], dict[str, str]]:
    """Product forms to choose from: products first, plain salts after."""
    if profile is None:
        return [], {}
    ordered = sorted(profile.forms.values(), key=lambda f: f.generic)
    return [f.id for f in ordered], {f.id: f.words for f in ordered}


def drug_words() -> dict[str, str]:
    """Each drug with what this program may be used for."""
    found = {}
    for name in drug_names():
        profile = load_profile(name)
        found[name] = profile.name if profile.scope == "dosing" else f"{profile.name} ({profile.scope})"
    return found


def doses(asked: Asked, echoes: Mapping[int, str]) -> None:
    forms, words = form_words(asked.profile)
    look.say(
        "Each dose as said aloud: 300 mg daily · 150 mg every 12 h · 300 mg at 21:00 · "
        "200 mg at 08:00 + 100 mg at 21:00 · 1,000 mg once over 30 min. Only what was given counts, not what "
        "was ordered.",
        "hint",
    )
    rows = asked.values.get("dose_rows", ())
    for place, row in enumerate(rows, 1):
        with st.container(border=True, key=f"dose-{row}"):
            _row_head("dose", row, f"Dose line {place}", len(rows) == 1)
            left, right = st.columns(2, gap="medium")
            with left:
                field(asked, "Dose, with its unit and how often", f"dose.{row}.said", most=200)
            with right:
                choice(asked, "Product form and salt", f"dose.{row}.form", forms, words)
            one, two, three = st.columns(3, gap="medium")
            with one:
                field(asked, "First dose (date and time)", f"dose.{row}.from", help=DATES)
            with two:
                field(asked, "Last dose; empty if it goes on", f"dose.{row}.until", help=DATES)
            with three:
                choice(asked, "Who gives the doses?", f"dose.{row}.given_by", ("nurse", "carer", "self"))
            _echo(echoes.get(row))
            with st.expander("More about this line", expanded=False, key=f"dose-more-{row}"):
                one, two = st.columns(2, gap="medium")
                with one:
                    choice(asked, "How is it known?", f"dose.{row}.source", tuple(SOURCES), SOURCES)
                    choice(
                        asked,
                        "If ordered or stated: did a person confirm it was given?",
                        f"dose.{row}.confirmed",
                        ANSWERS,
                    )
                with two:
                    liquids = [p.id for p in _products(asked) if p.unit == "mL"]
                    if liquids:
                        choice(asked, "Liquid product, where the dose is in mL", f"dose.{row}.product", liquids)
                    field(
                        asked,
                        "Start not known: given for about",
                        f"dose.{row}.for_about",
                        help="Such as 3 months",
                    )
                    field(
                        asked,
                        "Missed, held or refused doses (dates and times; parted by ;)",
                        f"dose.{row}.missed",
                        most=2000,
                    )
            hidden = ("source", "confirmed", "for_about", "missed")
            wrong = any(asked.problems.get(f"dose.{row}.{name}") for name in hidden)
            _echo("Something under 'More about this line' needs mending." if wrong else None, "wrong")
    st.button("Add a dose line", key="add-dose", on_click=_add_row, args=("dose",))
    _pasted(asked, forms, words)
    _dialysis(asked)


def _pasted(asked: Asked, forms: Sequence[str], words: Mapping[str, str]) -> None:
    """A part of the administration record copied straight out of a spreadsheet."""
    with st.expander("Paste doses from a spreadsheet", expanded=False, key="paste"):
        look.say(
            "Single doses need no column names: time, amount with unit, and the form unless one is chosen for all. "
            "With column names in the first row also repeated doses (every, from, until, missed with | between the "
            "times) and infusions (over, or rate with from and until).",
            "hint",
        )
        look.say(f"Columns, in any order: {', '.join(DOSE_COLUMNS)}.", "hint")
        choice(asked, "Form of all pasted doses", "pasted_form", forms, words)
        st.text_area("Pasted rows", key="pasted", max_chars=60_000, height=160)
        with st.container():
            problems = asked.problems.get("pasted", ())
            for problem in problems[:6]:
                look.beside(problem.text, needed=False)
            if len(problems) > 6:
                look.beside(f"and {len(problems) - 6} more like these.", needed=False)
            if asked.entry.pasted.doses and not problems:
                look.say(f"Read: {pasted_words(asked.entry)}.", "echo")


def pasted_words(entry: Entry) -> str:
    """How many pasted lines of each kind were read."""
    lines = entry.pasted.doses
    count = {
        "single dose": sum(bool(d.at) for d in lines),
        "repeated dose": sum(bool(d.every) for d in lines),
        "infusion by rate": sum(bool(d.rate) for d in lines),
        "missed dose": sum(len(d.missed) for d in lines),
    }
    return ", ".join(f"{n:,} {name}{'s' if n > 1 else ''}" for name, n in count.items() if n)


def _dialysis(asked: Asked) -> None:
    """Sessions that take the drug away while they run; asked for where the drug file knows a clearance."""
    rows = asked.values.get("dialysis_rows", ())
    if not asked.entry.file.dialysis and (asked.profile is None or asked.profile.dialysis is None):
        return
    said = dialysis_words(asked) or "none"
    with st.expander(f"**Dialysis sessions**: {look.plain(said)}", expanded=bool(rows), key="dialysis"):
        look.say(
            "Dialysis takes the drug away while it runs; a session may lie ahead. Give the clearance of this drug, not "
            "the blood flow; left empty, the drug file's value is taken and a warning says so.",
            "hint",
        )
        for place, row in enumerate(rows, 1):
            with st.container(border=True, key=f"dialysis-{row}"):
                _row_head("dialysis", row, f"Dialysis session {place}", False)
                left, middle, right = st.columns(3, gap="medium")
                with left:
                    field(asked, "Dialysis from (date and time)", f"dialysis.{row}.from", help=DATES)
                with middle:
                    field(asked, "Dialysis until; empty if it still runs", f"dialysis.{row}.until", help=DATES)
                with right:
                    number(
                        asked,
                        "Clearance by dialysis",
                        f"dialysis.{row}.clearance",
                        fields.CLEARANCE_UNITS,
                        unit_label="Unit of clearance",
                    )
        st.button("Add a dialysis session", key="add-dialysis", on_click=_add_row, args=("dialysis",))


def dialysis_words(asked: Asked) -> str:
    """The sessions in one sentence."""
    said = []
    for session in asked.entry.file.dialysis:
        clearance = f" at {session.clearance}" if session.clearance else ""
        end = f" until {session.until}" if session.until else " on, still running"
        said.append(f"from {session.from_ or 'an unknown time'}{end}{clearance}")
    return "; ".join(said)


def doses_sentence(asked: Asked, echoes: Mapping[int, str]) -> str:
    rows = asked.entry.rows["dose"]
    said = [text(asked.values, f"dose.{row}.said") for row in rows]
    parts = [s for s in said if s]
    out = ", then ".join(parts) if len(parts) <= 3 else f"{len(parts)} dose lines"
    if asked.entry.pasted.doses:
        out += f"{'; ' if out else ''}pasted: {pasted_words(asked.entry)}"
    if asked.entry.file.dialysis:
        out += f"{'; ' if out else ''}dialysis {dialysis_words(asked)}"
    return out


# --- 3 What was measured? --------------------------------------------------------------------------------


def levels(asked: Asked, worth: Mapping[int, Sequence[str]]) -> None:
    rows = asked.values.get("level_rows", ())
    units = asked.profile.level_units if asked.profile else fields.LEVEL_UNITS
    lines = [str(n) for n in range(1, len(asked.entry.file.doses) - len(asked.entry.pasted.doses) + 1)]
    others = tuple(asked.profile.other_levels.values()) if asked.profile is not None else ()
    for place, row in enumerate(rows, 1):
        with st.container(border=True, key=f"level-{row}"):
            _row_head("level", row, f"Level {place}", len(rows) == 1)
            left, middle, right = st.columns([2, 1, 2], gap="medium")
            with left:
                st.text_input("Level as reported", key=f"level.{row}.value", max_chars=40, autocomplete="off")
            with middle:
                st.selectbox("Unit of the level", list(units), index=None, key=f"level.{row}.unit", placeholder="unit")
            with right:
                choice(asked, "What was measured?", f"level.{row}.kind", fields.KINDS, KIND_WORDS)
            _beside(asked, f"level.{row}.value")
            left, right = st.columns(2, gap="medium")
            with left:
                field(asked, "Drawn (date and time)", f"level.{row}.drawn", help=DATES)
            with right:
                choice(
                    asked,
                    "Dose line in force, where there are no dates",
                    f"level.{row}.on_dose",
                    lines,
                    {n: f"dose line {n}" for n in lines},
                )
            with st.container():
                for sentence in worth.get(row, ()):
                    look.say(sentence, "echo")
            with st.expander("More about this level", expanded=False, key=f"level-more-{row}"):
                one, two = st.columns(2, gap="medium")
                with one:
                    number(
                        asked,
                        "Albumin of this sample",
                        f"level.{row}.albumin",
                        fields.ALBUMIN_UNITS,
                        unit_key=f"level.{row}.albumin_unit",
                    )
                    for other in others:
                        label = f"{other.words[:1].upper()}{other.words[1:]} level of this sample, with its unit"
                        field(asked, label, f"level.{row}.other.{other.id}")
                with two:
                    choice(asked, "Tube", f"level.{row}.sample", ("serum", "plasma", "gel tube"))
                    field(asked, "If normalised: by whom", f"level.{row}.normalised_by")
            more = ("albumin", "normalised_by", *(f"other.{other.id}" for other in others))
            wrong = any(asked.problems.get(f"level.{row}.{name}") for name in more)
            _echo("Something under 'More about this level' needs mending." if wrong else None, "wrong")
    st.button("Add a level", key="add-level", on_click=_add_row, args=("level",))


KIND_WORDS = {"total": "total", "free": "free (unbound)", "normalised": "already normalised for albumin"}


def levels_sentence(asked: Asked) -> str:
    parts = []
    for level in asked.entry.file.levels:
        if level.value:
            parts.append(f"{level.value} {level.kind}" + (f", {_as_shown(level.drawn)}" if level.drawn else ""))
    return " and ".join(parts) if len(parts) <= 3 else f"{len(parts)} levels"


def _as_shown(typed: str) -> str:
    """A moment as typed, in the one way that moments are shown; as typed while it cannot be read."""
    try:
        return show_time(read_time(typed, "Time of the draw"))
    except CaseError:
        return typed


# --- 5 What could be given next? -------------------------------------------------------------------------


def goal(asked: Asked) -> None:
    one, two, three, four = st.columns([2, 2, 2, 2], gap="small")
    units = asked.profile.level_units if asked.profile else fields.LEVEL_UNITS
    with one:
        field(asked, "Target from", "target_low", most=40)
    with two:
        field(asked, "Target to", "target_high", most=40)
    with three:
        field(asked, "Level aimed at", "aim", most=40)
    with four:
        st.selectbox("Unit of target and aim", list(units), index=None, key="target_unit", placeholder="unit")
    look.say("Left empty, the service's own range is used, else the usual one; it is named below.", "hint")
    shelves = {s.id: s.words for s in asked.profile.shelves.values()} if asked.profile else {}
    if shelves:
        choice(asked, "Shelf the regimens are made from", "shelf", tuple(shelves), shelves, empty="choose one")
    with st.container():
        _usable(asked)


def _usable(asked: Asked) -> None:
    """Which products of the shelf are usable in this consult; none chosen: all of them."""
    profile, shelf, named = asked.profile, text(asked.values, "shelf"), asked.entry.file.plan.products
    if profile is None or not (named or shelf in profile.shelves):
        return
    offered = [*(profile.shelves[shelf].products if shelf in profile.shelves else ())]
    offered += [p for p in named if p not in offered]
    st.multiselect(
        "Products usable in this consult; none chosen: the whole shelf",
        offered,
        key="products",
        placeholder="the whole shelf",
        format_func=lambda p: profile.products[p].words if p in profile.products else p,
    )
    _beside(asked, "products")


def more_plan(asked: Asked) -> None:
    """What not every consult needs: a start time, a load, a restart level, the order of the rows."""
    forms, words = form_words(asked.profile)
    with st.expander("Load or top-up, pause, start of a new regimen, limits of today", expanded=False, key="plan-more"):
        one, two = st.columns(2, gap="medium")
        with one:
            choice(asked, "Load or top-up with", "load_form", forms, words)
            field(asked, "Load up to this level, with its unit", "load_aim", most=40)
            field(asked, "Time of the load", "load_at", help=DATES)
            choice(
                asked,
                "The target above is of the",
                "target_kind",
                tuple(TARGET_KINDS),
                TARGET_KINDS,
                empty="total level",
            )
            field(asked, "Why another target than usual", "target_reason")
        with two:
            field(asked, "Give again at this level, with its unit", "restart_level", most=40)
            field(asked, "First dose of a new regimen (date and time)", "plan_start", help=DATES)
            field(
                asked,
                "Largest step from the present dose, with its unit",
                "largest_step",
                most=40,
                help="Such as 50 mg/day. It narrows the steps of the protocol and never widens them.",
            )
            st.checkbox("Also list by expected loss (it is no advice)", key="order_by_loss")
        wrong = any(asked.problems.get(name) for name in MORE_PLAN)
    _echo("Something under 'Load or top-up ...' needs mending." if wrong else None, "wrong")


TARGET_KINDS = {"total": "total level", "free": "free level"}
MORE_PLAN = (
    "load_form", "load_aim", "load_at", "target_kind", "target_reason", "restart_level", "plan_start", "largest_step",
)  # fmt: skip


def chosen(asked: Asked) -> None:
    """The pharmacist's own choice; nothing is chosen beforehand."""
    own_rows = asked.entry.rows["own"]
    words = {f"own {row}": text(asked.values, f"own.{row}.said") for row in own_rows}
    offered = [fields.STAY, *words]
    words[fields.STAY] = "stay on the present dose"
    words[fields.AS_OPENED] = "as chosen in the opened case"
    choice(asked, "Which regimen do you choose?", "chosen", offered, words, empty="none yet")


def own_words(asked: Asked) -> None:
    st.text_area("Your own words on the note", key="own_words", max_chars=4000, height=90)
    field(asked, "Next level, if you decide otherwise (date and time)", "next_draw", help=DATES)


def method(asked: Asked) -> None:
    """Method and population: chosen by name, never switched unseen."""
    one, two = st.columns(2, gap="medium")
    known = {k: p.words for k, p in asked.profile.populations.items()} if asked.profile else {}
    with one:
        choice(asked, "Method", "method", METHODS, empty="as suggested below")
    with two:
        choice(asked, "Population", "population", tuple(known), known, empty="the usual one for this patient")


METHODS = ("whole record", "two levels", "lines")


def _products(asked: Asked) -> list[Product]:
    return list(asked.profile.products.values()) if asked.profile else []


def own(asked: Asked, echoes: Mapping[int, str]) -> None:
    forms, words = form_words(asked.profile)
    for place, row in enumerate(asked.values.get("own_rows", ()), 1):
        left, right = st.columns(2, gap="medium")
        with left:
            field(
                asked,
                f"Your own regimen {place}, such as 200 mg + 100 mg, or 300 mg daily",
                f"own.{row}.said",
                most=200,
            )
        with right:
            choice(asked, f"Product form and salt of regimen {place}", f"own.{row}.form", forms, words)
        assumed = asked.entry.assumed.get(row)
        _echo(f"{assumed} Write other times if they differ." if assumed else None, "hint")
        _echo(echoes.get(row))
    st.button("Add another regimen of your own", key="add-own", on_click=_add_row, args=("own",))


def course_echo(case: Case, profile: Profile) -> str:
    """A dose line said back in words."""
    course = case.courses[0]
    known = {"given": "taken as given", "ordered": "ordered only", "stated": "stated only"}[course.source]
    if not course.counts_as_given:
        known += ", not confirmed as given: left out of the calculation"
    when = f", since {show_time(course.start)}" if course.start else ""
    if course.regimen is not None:
        said = course.regimen.words(profile)
        rate = f" = {profile.show_rate(course.regimen.active_mg_per_day(profile), 4)} of active drug"
    elif course.single is not None:
        form = profile.forms[course.single.form]
        said, rate = f"{show(course.single.labelled_mg, form.amount_unit, 6)} {form.words} once", ""
        when = f", at {show_time(course.start)}" if course.start else ""
    else:
        said, rate = f"{course.typed.rate} {profile.forms[course.rate_form].words}", ""
    until = f" until {show_time(course.end)}" if course.end else ""
    missed = f", {len(course.missed)} missed" if course.missed else ""
    return f"Read as {said}{rate}{when}{until}{missed}; {known}."


def own_echo(case: Case, profile: Profile) -> str:
    """A regimen of one's own said back in words."""
    regimen = case.proposed[0]
    typed = case.file.proposed[0].rate
    said = f"{typed} {profile.forms[regimen.intakes[0].form].words}" if typed else regimen.words(profile)
    return f"Read as {said} = {profile.show_rate(regimen.active_mg_per_day(profile), 4)} of active drug."
