"""One consult from the first question to the note, for one session of one browser."""

from __future__ import annotations

import logging
import traceback
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import streamlit as st
from pkcalc_form import ask, look, opening, second, tell
from pkcalc_form import entry as fields
from pkcalc_form.ask import Asked
from pkcalc_form.entry import Entry

from pkcalc.case import Case, CaseFile, check_case, dump_case_file
from pkcalc.consult import Consult, run_consult
from pkcalc.drugs.profile import Profile, drug_names, load_profile
from pkcalc.errors import CaseError, DrugFileError, PkcalcError, Problem
from pkcalc.levels import observe
from pkcalc.note import charts
from pkcalc.note.document import DEFERS
from pkcalc.site import Site

KEPT = 12  # consults and charts kept in one session, so that going back is quick
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
    frames = traceback.extract_tb(error.__traceback__)
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


def page() -> None:
    st.set_page_config(page_title="pkcalc", layout="centered")
    st.html(look.ASSETS / "look.css")
    script = (look.ASSETS / "page.js").read_text(encoding="utf-8")
    st.html(f"<script>{script}</script>", unsafe_allow_javascript=True)
    with st.container():
        if st.context.theme.type == "dark":
            st.html(look.ASSETS / "dark.css")
    try:
        if opening.may_be_seen():
            _page()
    except Exception as error:
        _report(error)
        st.html(f'<p class="pk-stopped" role="alert">{tell.STOPPED}</p>')


def _page() -> None:
    try:
        settings = opening.site()
    except CaseError as error:
        opening.bad_site(error)
        return
    opening.forget_when_left_alone(settings.session_timeout_min)
    state = st.session_state
    for kind in opening.ROWS:
        state.setdefault(kind, [1])
    state.setdefault("dialysis_rows", [])
    if "drug" not in state and len(drug_names()) == 1:
        state["drug"] = drug_names()[0]
    values: Mapping[str, Any] = {str(k): v for k, v in state.items()}
    entry = fields.case_of(values)
    checked = check(entry)
    asked = _asked(values, entry, checked)
    demonstration = entry.file.demonstration is not None

    with st.container():
        if demonstration:
            tell.watermark()
    with st.container(key="opening"):
        opening.opening()
    with st.container(key="pinned"):
        with st.container():
            if demonstration:
                tell.banner()
        pinned = st.empty()

    echoes = _echoes(asked)
    with _step(1, "How is the patient?", ask.patient_sentence(asked)):
        ask.patient(asked)
    with _step(2, "What was given?", ask.doses_sentence(asked, echoes["dose"])):
        ask.doses(asked, echoes["dose"])
        typed = st.empty()
    with _step(3, "What was measured?", ask.levels_sentence(asked)):
        ask.levels(asked, _worth(asked, settings))

    outcome = answer(checked, settings)
    consult = outcome.consult
    hidden = opening.committing(demonstration)
    with pinned.container():
        tell.pinned(consult.cautions if consult and not hidden else ())
    spoken = None if hidden else consult
    slots: list[tuple[Any, str]] = []

    with _step(4, "What does it say?", tell.estimate_sentence(spoken)):
        ask.method(asked)
        _result(outcome, hidden, tell.estimate)
        slots += [(st.empty(), "record"), (st.empty(), "plane")]
        _on_request(outcome, hidden, "How this was found", tell.how)
        _on_request(outcome, hidden, "Compare with other published populations", tell.populations)
        if outcome.consult is not None and tell.teaches(outcome.consult):
            _on_request(outcome, hidden, "For residents: the same levels in five pictures", tell.residents)
    with _step(5, "What could be given next?", tell.candidates_sentence(spoken)):
        ask.goal(asked)
        ask.own(asked, echoes["own"])
        ask.more_plan(asked)
        _result(outcome, hidden, tell.candidates)
        slots += [(st.empty(), "regimens")]
        _result(outcome, hidden, tell.acute, quiet=True)
        ask.chosen(asked)
    with _step(6, "When do we look again?", tell.next_sentence(spoken)):
        _result(outcome, hidden, tell.next_look)
        slots += [(st.empty(), "narrowing")]
    with _step(7, "Note", ""):
        ask.own_words(asked)
        _result(outcome, hidden, tell.note)
        _on_request(outcome, hidden, "Show the whole note with its annex", tell.whole_note)
        with st.container(key="result-second"), _guarded():
            second.section(outcome.case if not outcome.problems else None, settings)
    look.say(DEFERS, "defer")
    # from here on the browser may show the results: they belong to what was read
    state["runs"] = state.get("runs", 0) + 1
    look.read_mark(
        {k: v for k, v in values.items() if isinstance(v, str) and v},
        run=state["runs"],
        minutes=settings.session_timeout_min,
    )
    _typed_picture(_typed_record(asked, echoes["dose"]), typed)
    if consult is not None and not hidden:
        _charts(consult, slots)


@contextmanager
def _step(number: int, title: str, sentence: str) -> Iterator[None]:
    """One question; folded, it stands as one sentence."""
    label = f"**{number} · {title}**" + (f" {look.plain(sentence)}" if sentence else "")
    expanded = number > 3 or not st.session_state.get("opened")
    with (
        st.container(key=f"step-{number}"),
        st.expander(label, expanded=expanded, key=f"fold-{number}-{st.session_state.get('turn', 0)}"),
    ):
        yield


def _result(outcome: Outcome, hidden: str, show: Callable[[Consult], None], *, quiet: bool = False) -> None:
    """A result, or in its place why there is none. Never both, never an older one."""
    with st.container(key=f"result-{show.__name__}"):
        if hidden:
            if not quiet:
                look.say(hidden, "empty-state")
        elif outcome.crashed:
            if not quiet:
                st.html(f'<p class="pk-stopped" role="alert">{tell.STOPPED}</p>')
        elif outcome.refused:
            if not quiet:
                look.say(outcome.refused, "wrong")
        elif outcome.consult is not None:
            with _guarded():
                if show in (tell.estimate, tell.candidates):
                    look.say(tell.inputs_line(outcome.consult), "hint")
                show(outcome.consult)
        elif not quiet:
            tell.not_yet([p.text for p in outcome.problems])


def _on_request(outcome: Outcome, hidden: str, label: str, show: Callable[[Consult], None]) -> None:
    """Something that takes a moment to work out, only where a person asks for it."""
    with st.container(key=f"result-{show.__name__}"):
        if outcome.consult is not None and not hidden and st.toggle(label, key=f"ask-{show.__name__}"):
            with _guarded():
                show(outcome.consult)


def _charts(consult: Consult, slots: list[tuple[Any, str]]) -> None:
    """The charts of the note, drawn last so that the numbers do not wait for them."""
    made: dict[str, Any] = st.session_state.setdefault("charts", {})
    key = _numbers(consult.case.file)
    makers = {
        "record": charts.record_chart,
        "plane": charts.plane_chart,
        "regimens": charts.regimen_chart,
        "narrowing": charts.narrowing_chart,
    }
    if key not in made:
        while len(made) >= KEPT:
            made.pop(next(iter(made)))
        made[key] = {}
    for slot, name in slots:
        try:
            if name not in made[key]:
                found = makers[name](consult)
                made[key][name] = None if found is None else tell.picture(found)
            if made[key][name] is not None:
                with slot.container(key=f"result-chart-{name}"):
                    st.html(made[key][name])
        except Exception as error:
            _report(error)
            slot.html(f'<p class="pk-stopped" role="alert">{tell.STOPPED}</p>')


def _typed_record(asked: Asked, read: Mapping[int, str]) -> Case | None:
    """Doses, dialysis and levels as far as they can be read, whatever is still missing elsewhere."""
    if asked.case is not None:
        return asked.case
    entry, file = asked.entry, asked.entry.file
    if asked.profile is None:
        return None

    def sound(kind: str, lines: tuple[Any, ...]) -> tuple[Any, ...]:
        wrong = {k.split(".")[1] for k in asked.problems if k.startswith(f"{kind}.")}
        return tuple(x for row, x in zip(entry.rows[kind], lines, strict=False) if str(row) not in wrong)

    doses = tuple(x for row, x in zip(entry.rows["dose"], file.doses, strict=False) if row in read)
    if "pasted" not in asked.problems:
        doses += entry.pasted.doses
    levels = tuple(x.model_copy(update={"on_dose": None}) for x in sound("level", file.levels))
    parts = {"doses": doses, "levels": levels, "dialysis": sound("dialysis", file.dialysis)}
    alone = CaseFile(pkcalc_case=1, drug=asked.profile.id, demonstration=file.demonstration)
    try:
        return check_case(alone.model_copy(update=parts))
    except CaseError:
        return None


def _typed_picture(case: Case | None, slot: Any) -> None:
    """The record as typed, a lane for each kind of event."""
    if case is None:
        return
    made: dict[str, Any] = st.session_state.setdefault("typed", {})
    file = case.file
    key = repr((file.drug, file.doses, file.levels, file.dialysis, file.now, file.demonstration is None))
    try:
        if key not in made:
            found = charts.typed_chart(case, load_profile(case.drug))
            made.clear()
            made[key] = None if found is None else tell.picture(found)
        if made[key] is not None:
            with slot.container(key="result-chart-typed"):
                st.html(made[key])
    except Exception as error:
        _report(error)
        slot.html(f'<p class="pk-stopped" role="alert">{tell.STOPPED}</p>')


# --- reading the fields ----------------------------------------------------------------------------------


def check(entry: Entry) -> Outcome:
    """The fields read by the core: a checked case, or everything that is missing or contradictory."""
    file = entry.file
    asked = bool(file.proposed or file.plan.load)
    if not (file.doses or file.levels or asked):
        return Outcome(problems=entry.problems)
    problems = list(entry.problems)
    try:
        case = check_case(file)
    except CaseError as error:
        taken = {fields.field_of(p.where, entry) for p in problems}
        found = [entry.pasted.placed(p, len(entry.rows["dose"])) for p in error.problems]
        problems += [p for p in found if fields.field_of(p.where, entry) not in taken]
        return Outcome(problems=tuple(problems))
    except Exception as error:
        _report(error)
        return Outcome(crashed=True)
    if not (case.levels or asked):
        fix = "Enter a level; before any level, ask for a load or a regimen of your own in section 5"
        problems.append(Problem("Levels", "no level was entered", "one or more", fix))
    if case.levels and not case.courses:
        problems.append(Problem("Doses", "no dose was entered", "one or more", "Enter a dose"))
    return Outcome(case=case, problems=tuple(problems))


def answer(checked: Outcome, settings: Site) -> Outcome:
    """The consult of a checked case, where nothing stands in its way."""
    case = checked.case
    if case is None or checked.problems:
        return checked
    try:
        return Outcome(case=case, consult=_consult(case, settings))
    except PkcalcError as refusal:
        return Outcome(case=case, refused=str(refusal))
    except Exception as error:
        _report(error)
        return Outcome(case=case, crashed=True)


def _consult(case: Case, settings: Site) -> Consult:
    """The consult of a case, kept for this session only; a change of words alone works nothing out anew."""
    kept: dict[str, Consult] = st.session_state.setdefault("kept", {})
    key = f"{_numbers(case.file)}{settings.sha256}"
    if key not in kept:
        while len(kept) >= KEPT:
            kept.pop(next(iter(kept)))
        kept[key] = run_consult(case, settings)
    return replace(kept[key], case=case)


def _numbers(file: CaseFile) -> str:
    """A case without what is only words for people."""
    chosen = file.chosen.model_copy(update={"words": ""}) if file.chosen else None
    if chosen is not None and chosen.regimen is None and not chosen.next_draw:
        chosen = None
    words = {"question": "", "comment": "", "label": "", "chosen": chosen, "reentry": None}
    return dump_case_file(file.model_copy(update=words))


def _asked(values: Mapping[str, Any], entry: Entry, outcome: Outcome) -> Asked:
    beside: dict[str, list[Problem]] = {}
    for problem in outcome.problems:
        key = fields.field_of(problem.where, entry)
        if key is not None:
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
            part = {"doses" if kind == "dose" else "proposed": (line,)}
            try:
                alone = check_case(CaseFile(pkcalc_case=1, drug=profile.id, **part))
            except CaseError:
                continue
            found[kind][row] = ask.course_echo(alone, profile) if kind == "dose" else ask.own_echo(alone, profile)
    return found


def _worth(asked: Asked, settings: Site) -> dict[int, list[str]]:
    """What each level is worth, said as soon as it can be read, whatever is still missing elsewhere."""
    found: dict[int, list[str]] = {}
    profile, file = asked.profile, asked.entry.file
    if profile is None:
        return found
    for row, level in zip(asked.entry.rows["level"], file.levels, strict=False):
        if any(k.startswith(f"level.{row}.") for k in asked.problems):
            continue
        alone = CaseFile(pkcalc_case=1, drug=profile.id).model_copy(
            update={
                "patient": file.patient,
                "albumin": file.albumin,
                "context": file.context,
                "levels": (level.model_copy(update={"on_dose": None}),),
            }
        )
        try:
            for o in observe(check_case(alone), profile, settings):
                found[row] = tell.read_level(o)
        except PkcalcError:
            continue
    return found
