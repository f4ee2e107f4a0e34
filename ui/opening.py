"""Before a consult: who may see the page, opening and forgetting a case, an answer of one's own first."""

from __future__ import annotations

import os
import time
from collections.abc import Mapping
from functools import cache
from importlib.util import find_spec

import streamlit as st
from pkcalc_form import entry as fields
from pkcalc_form import look, tell

from pkcalc.case import CaseFile, parse_case_text
from pkcalc.demos import Demonstration, demonstrations
from pkcalc.errors import CaseError
from pkcalc.site import Site, load_site, no_site

SITE = "PKCALC_SITE"
NO_SIGN_IN = "PKCALC_WITHOUT_SIGN_IN"
TOLD_TWICE = "yes, and told twice"
LOOPBACK = ("127.0.0.1", "localhost", "::1")
#: Rows of which one always stands on the page.
ROWS = ("dose_rows", "level_rows", "own_rows")


def clock() -> float:
    """Seconds that only go forward."""
    return time.monotonic()


def site() -> Site:
    """The service's own settings, named when the form was started."""
    path = os.environ.get(SITE, "")
    return load_site(path) if path else no_site()


def bad_site(error: CaseError) -> None:
    """The settings file has a fault: nothing is calculated with half of a protocol."""
    look.say("The service's own settings file has to be mended before this page can be used.", "stopped")
    look.lines([p.text for p in error.problems])


# --- who may see the page --------------------------------------------------------------------------------


def sign_in_is_set_up() -> bool:
    """True where the hospital's own sign-in is named in the secrets file beside the page."""
    return bool(st.secrets.load_if_toml_exists()) and "auth" in st.secrets


def may_be_seen() -> bool:
    """On this machine: yes. Elsewhere: only after sign-in, or where whoever started it said so twice."""
    if sign_in_is_set_up():
        if getattr(st.user, "is_logged_in", False):
            return True
        if find_spec("authlib") is None or find_spec("httpx") is None:
            look.say(
                "Sign-in is set up, but the program it needs is not installed (see SERVING.md): the page stays closed.",
                "stopped",
            )
            return False
        look.say("Sign in with your hospital account to use this page.")
        st.button("Sign in", on_click=st.login, key="sign-in")
        return False
    if str(st.get_option("server.address")) in LOOPBACK or os.environ.get(NO_SIGN_IN) == TOLD_TWICE:
        return True
    look.say(
        "This page refuses to be shown to other machines without sign-in. Start it with pkcalc form, which binds "
        "it to this machine, or set up the hospital's sign-in first.",
        "stopped",
    )
    return False


# --- opening, keeping and forgetting ---------------------------------------------------------------------


def forget(*keep: str) -> None:
    """Everything typed, opened and found, but for what is named.

    The place for files gets a new name: a file still lying in the old one would be read again with the next
    change, over what was edited since. The count of runs goes on: the browser knows a newer run by it.
    """
    kept = {key: st.session_state[key] for key in keep if key in st.session_state}
    emptied = fields.emptied({str(key): None for key in st.session_state})
    turn, runs = st.session_state.get("turn", 0), st.session_state.get("runs", 0)
    for key in list(st.session_state):
        del st.session_state[key]
    st.session_state["turn"], st.session_state["runs"] = turn + 1, runs
    for key, nothing in emptied.items():
        st.session_state[key] = nothing
    for key, value in kept.items():
        st.session_state[key] = value


def forget_when_left_alone(minutes: float) -> None:
    """A session left alone forgets its case. The browser reloads the page by itself after the same time."""
    state = st.session_state
    now = clock()
    if now - state.get("touched", now) > minutes * 60:
        forget()
        state["left_alone"] = minutes
    state["touched"] = now


def open_file(file: CaseFile, *keep: str) -> None:
    forget(*keep)
    for key, value in fields.fields_of(file).items():
        st.session_state[key] = value
    st.session_state["opened"] = True
    for kind in ROWS:
        if not st.session_state.get(kind):
            st.session_state[kind] = [1]


def _open_demonstration() -> None:
    name, commit = st.session_state.get("demo_name"), bool(st.session_state.get("commit_first"))
    demo = _demos().get(str(name))
    if demo is not None:
        open_file(parse_case_text(demo.text))
        st.session_state["committing"] = commit


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
    open_file(file, "first_entry")


def _sign_out() -> None:
    """The case is forgotten before the account is."""
    forget()
    st.logout()


@cache
def _demos() -> Mapping[str, Demonstration]:
    """The invented cases; nothing of a patient, so every session may share them."""
    return {d.name: d for d in demonstrations()}


def opening() -> None:
    """Title, what comes first, and the ways to begin."""
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
        names = _demos()
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
        st.checkbox("Commit first: hide the answers of the demonstration until I have written mine", key="commit_first")
        st.file_uploader("Case file", type=["json"], key=_upload_key(), max_upload_size=2, on_change=_open_upload)
        for text in st.session_state.get("upload_problems", ()):
            look.beside(text, needed=False)
        st.button("Start afresh: forget everything on this page", key="forget", on_click=forget)
        if sign_in_is_set_up():
            st.button("Sign out: forget everything on this page", key="sign-out", on_click=_sign_out)
    with st.container():
        minutes = st.session_state.pop("left_alone", None)
        if minutes is not None:
            look.say(f"This page was left alone for more than {minutes:g} min, so it forgot the case.", "empty-state")
        mark = st.session_state.get("demonstration")
        if mark is not None:
            look.say(f"Demonstration: {mark.title}. What this shows: {mark.shows} It stays one when edited.")
        if st.session_state.get("first_entry"):
            look.say(
                "Second entry: type the case again from the chart, without the first entry. Both are compared in "
                "section 7.",
                "empty-state",
            )


def _reveal() -> None:
    dose, level = (str(st.session_state.get(k) or "").strip() for k in ("my_dose", "my_level"))
    if dose and level:
        st.session_state["committed"] = (dose, level)
        st.session_state["committing"] = False
    else:
        st.session_state["commit_asked"] = True


def committing(demonstration: bool) -> str:
    """For residents: what stands in place of the results until an own answer is written; "" where nothing does."""
    with st.container(key="commit"):
        state = st.session_state
        if demonstration and state.get("committing"):
            st.html('<h2 class="pk-group">Your answer first</h2>')
            st.text_input("The dose you would give next", key="my_dose", max_chars=120)
            st.text_input("The level you expect from it, and when", key="my_level", max_chars=120)
            st.button("Reveal", key="reveal", on_click=_reveal)
            if state.get("commit_asked"):
                look.beside("write both before the answers are revealed.", needed=True)
            return "Hidden until you have written your own dose and expected level above."
        if demonstration and state.get("committed"):
            dose, level = state["committed"]
            look.say(f"You wrote: dose {dose}; expected level {level}. Compare below.", "echo")
    return ""
