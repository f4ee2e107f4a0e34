"""One consult from the first question to the note, for one session of one browser."""

from __future__ import annotations

import logging
import os
import traceback
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import streamlit as st
from pkcalc_form import ask, look, tell
from pkcalc_form import entry as fields
from pkcalc_form.ask import Asked
from pkcalc_form.entry import Entry

from pkcalc.case import Case, CaseFile, check_case, dump_case_file, parse_case_text
from pkcalc.consult import Consult, run_consult
from pkcalc.demos import demonstrations
from pkcalc.drugs.profile import Profile, drug_names, load_profile
from pkcalc.errors import CaseError, DrugFileError, PkcalcError, Problem
from pkcalc.note.document import DEFERS
from pkcalc.site import Site, load_site, no_site

SITE = "PKCALC_SITE"
KEPT = 12  # consults kept in one session, so that going back is quick
log = logging.getLogger("pkcalc_form")


@dataclass(frozen=True)
class Outcome:
    """What came of the fields: a consult, or why there is none."""

    case: Case | None = None
    consult: Consult | None = None
    problems: tuple[Problem, ...] = ()
    refused: str = ""
    crashed: bool = False


def _report(error: Exception) -> None:
    """The kind of fault and where it happened, never what a person typed."""
    frames = [f for f in traceback.extract_tb(error.__traceback__) if "pkcalc" in f.filename or "/ui/" in f.filename]
    place = f"{Path(frames[-1].filename).name}:{frames[-1].lineno}" if frames else "unknown place"
    log.error("The calculation stopped: %s at %s", type(error).__name__, place)


@contextmanager
def _guarded() -> Iterator[None]:
    """A fault while showing something: that part says so and shows no number."""
    place = st.empty()
    try:
        with place.container():
            yield
    except Exception as error:
        _report(error)
        place.html(f'<p class="pk-stopped" role="alert">{tell.STOPPED}</p>')


def site() -> Site:
    """The service's own settings, named when the form was started."""
    path = os.environ.get(SITE, "")
    return load_site(path) if path else no_site()


def page() -> None:
    st.set_page_config(page_title="pkcalc", layout="centered")
    st.html(look.ASSETS / "look.css")
    script = (look.ASSETS / "page.js").read_text(encoding="utf-8")
    st.html(f"<script>{script}</script>", unsafe_allow_javascript=True)
    with st.container():
        if st.context.theme.type == "dark":
            st.html(look.ASSETS / "dark.css")
    try:
        _page()
    except Exception as error:
        _report(error)
        st.html(f'<p class="pk-stopped" role="alert">{tell.STOPPED}</p>')


def _page() -> None:
    settings = site()
    state = st.session_state
    state.setdefault("dose_rows", [1])
    state.setdefault("level_rows", [1])
    state.setdefault("own_rows", [1])
    if "drug" not in state and len(drug_names()) == 1:
        state["drug"] = drug_names()[0]
    values: Mapping[str, Any] = {str(k): v for k, v in state.items()}
    entry = fields.case_of(values)
    outcome = evaluate(entry, settings)
    asked = _asked(values, entry, outcome)
    demonstration = entry.file.demonstration is not None

    with st.container():
        if demonstration:
            tell.watermark()
    with st.container(key="opening"):
        _opening(demonstration)
    with st.container(key="pinned"):
        tell.pinned(outcome.consult.cautions if outcome.consult else (), demonstration)

    echoes = _echoes(asked)
    with _step(1, "How is the patient?", ask.patient_sentence(asked)):
        ask.patient(asked)
    with _step(2, "What was given?", ask.doses_sentence(asked, echoes["dose"])):
        ask.doses(asked, echoes["dose"])
    with _step(3, "What was measured?", ask.levels_sentence(asked)):
        ask.levels(asked, {})
    with _step(4, "What does it say?", tell.estimate_sentence(outcome.consult)):
        _result(outcome, asked, tell.estimate)
    with _step(5, "What could be given next?", tell.candidates_sentence(outcome.consult)):
        ask.goal(asked)
        ask.own(asked, echoes["own"])
        _result(outcome, asked, tell.candidates)
    with _step(6, "When do we look again?", ""):
        _result(outcome, asked, tell.next_look)
    with _step(7, "Note", ""):
        _result(outcome, asked, tell.note)
    look.say(DEFERS, "defer")
    look.read_mark({k: v for k, v in values.items() if isinstance(v, str) and v})


@contextmanager
def _step(number: int, title: str, sentence: str) -> Iterator[None]:
    """One question; folded, it stands as one sentence."""
    label = f"**{number} · {title}**" + (f" {look.plain(sentence)}" if sentence else "")
    expanded = number > 3 or not st.session_state.get("opened")
    with (
        st.container(key=f"step-{number}"),
        st.expander(label, expanded=expanded, key=f"fold-{number}"),
    ):
        yield


def _result(outcome: Outcome, asked: Asked, show: Callable[[Consult], None]) -> None:
    """A result, or in its place why there is none. Never both, never an older one."""
    with st.container(key=f"result-{show.__name__}"):
        if outcome.crashed:
            st.html(f'<p class="pk-stopped" role="alert">{tell.STOPPED}</p>')
        elif outcome.refused:
            look.say(outcome.refused, "wrong")
        elif outcome.consult is not None:
            with _guarded():
                if show in (tell.estimate, tell.candidates):
                    look.say(tell.inputs_line(outcome.consult), "hint")
                show(outcome.consult)
        else:
            tell.not_yet([p.text for p in outcome.problems])


# --- reading the fields ----------------------------------------------------------------------------------


def evaluate(entry: Entry, settings: Site) -> Outcome:
    """The fields checked and, where nothing is missing or contradictory, the consult."""
    if not entry.file.doses and not entry.file.levels:
        return Outcome(problems=entry.problems)
    problems = list(entry.problems)
    try:
        case = check_case(entry.file)
    except CaseError as error:
        taken = {fields.field_of(p.where, entry) for p in problems}
        problems += [p for p in error.problems if fields.field_of(p.where, entry) not in taken]
        return Outcome(problems=tuple(problems))
    except Exception as error:
        _report(error)
        return Outcome(crashed=True)
    if problems:
        return Outcome(problems=tuple(problems))
    if not case.levels:
        return Outcome(case=case, problems=(Problem("Levels", "no level was entered", "one or more", "Enter a level"),))
    if not case.courses:
        return Outcome(case=case, problems=(Problem("Doses", "no dose was entered", "one or more", "Enter a dose"),))
    try:
        return Outcome(case=case, consult=_consult(case, settings))
    except PkcalcError as refusal:
        return Outcome(case=case, refused=str(refusal))
    except Exception as error:
        _report(error)
        return Outcome(case=case, crashed=True)


def _consult(case: Case, settings: Site) -> Consult:
    """The consult of a case, kept for this session only."""
    kept: dict[str, Consult] = st.session_state.setdefault("kept", {})
    key = f"{dump_case_file(case.file)}{settings.sha256}"
    if key not in kept:
        while len(kept) >= KEPT:
            kept.pop(next(iter(kept)))
        kept[key] = run_consult(case, settings)
    return kept[key]


def _asked(values: Mapping[str, Any], entry: Entry, outcome: Outcome) -> Asked:
    beside: dict[str, list[Problem]] = {}
    homeless: list[Problem] = []
    for problem in outcome.problems:
        key = fields.field_of(problem.where, entry)
        if key is None:
            homeless.append(problem)
        else:
            beside.setdefault(key, []).append(problem)
    profile: Profile | None
    try:
        profile = load_profile(entry.file.drug) if entry.file.drug in drug_names() else None
    except DrugFileError:
        profile = None
    return Asked(
        values=values,
        entry=entry,
        problems={k: tuple(v) for k, v in beside.items()},
        homeless=tuple(homeless),
        case=outcome.case,
        profile=profile,
    )


def _echoes(asked: Asked) -> dict[str, dict[int, str]]:
    """Each line that can be read, said back in words, whatever is still missing elsewhere."""
    found: dict[str, dict[int, str]] = {"dose": {}, "own": {}}
    profile = asked.profile
    if profile is None:
        return found
    for kind, lines in (("dose", asked.entry.file.doses), ("own", asked.entry.file.proposed)):
        for row, line in zip(asked.entry.rows[kind], lines, strict=False):
            if any(k.startswith(f"{kind}.{row}.") for k in asked.problems):
                continue
            try:
                alone = check_case(
                    CaseFile(pkcalc_case=1, drug=profile.id, **{"doses" if kind == "dose" else "proposed": (line,)})
                )
            except CaseError:
                continue
            found[kind][row] = ask.course_echo(alone, profile) if kind == "dose" else ask.own_echo(alone, profile)
    return found


# --- opening, keeping and forgetting ---------------------------------------------------------------------


def _forget() -> None:
    """Everything typed, opened and found. The place for files gets a new name: a file still lying in the old one
    would be read again with the next change, over what was edited since."""
    turn = st.session_state.get("turn", 0)
    for key in list(st.session_state):
        del st.session_state[key]
    st.session_state["turn"] = turn + 1


def _open(file: CaseFile) -> None:
    _forget()
    for key, value in fields.fields_of(file).items():
        st.session_state[key] = value
    st.session_state["opened"] = True
    for kind in ("dose_rows", "level_rows", "own_rows"):
        if not st.session_state.get(kind):
            st.session_state[kind] = [1]


def _open_demonstration() -> None:
    name = st.session_state.get("demo_name")
    for demo in demonstrations():
        if demo.name == name:
            _open(parse_case_text(demo.text))


def _upload_key() -> str:
    return f"upload-{st.session_state.get('turn', 0)}"


def _open_upload() -> None:
    upload = st.session_state.get(_upload_key())
    if upload is None:
        return
    try:
        file = parse_case_text(upload.getvalue())
    except CaseError as error:
        st.session_state["upload_problems"] = [p.text for p in error.problems]
        return
    _open(file)


def _opening(demonstration: bool) -> None:
    st.html("<h1>pkcalc: from levels to the next dose, where elimination saturates</h1>")
    st.html(f'<p class="pk-first" role="note"><b>First:</b> {tell.URGENT}</p>')
    look.say(
        "Your local protocol comes first. This page supports licensed pharmacists and physicians and "
        "replaces neither. Nothing typed here is kept after the tab is closed, and no name or number of a "
        "patient belongs here.",
        "defer",
    )
    with (
        st.container(key="tools"),
        st.expander("Open a demonstration or a case file, or start afresh", key="tools-fold"),
    ):
        names = {d.name: d for d in demonstrations()}
        left, right = st.columns([3, 1], vertical_alignment="bottom")
        left.selectbox(
            "Demonstration (invented, not a patient)",
            list(names),
            index=None,
            key="demo_name",
            placeholder="choose one",
            format_func=lambda n: names[n].title if n in names else n,
        )
        right.button("Open it", key="open-demo", on_click=_open_demonstration)
        st.file_uploader("Case file", type=["json"], key=_upload_key(), max_upload_size=2, on_change=_open_upload)
        for text in st.session_state.get("upload_problems", ()):
            look.beside(text, needed=False)
        st.button("Start afresh: forget everything on this page", key="forget", on_click=_forget)
    mark = st.session_state.get("demonstration")
    if mark is not None:
        look.say(
            f"Demonstration: {mark.title}. What this shows: {mark.shows} It stays one when edited.",
            "line",
        )
