"""Snapshots of the notes of the demonstration cases: what they said last time, never what they ought to say.

They show that a change of the program changed a note, and are no evidence that the note is right. After a change that
is meant, look at the difference and write them again:

    python -m tests.unit.golden
"""

from __future__ import annotations

import re
from pathlib import Path

from pkcalc.consult import run_consult
from pkcalc.demos import demonstration, demonstrations
from pkcalc.note.document import compose
from pkcalc.note.text import render

FOLDER = Path(__file__).parent


def names() -> tuple[str, ...]:
    return tuple(d.name for d in demonstrations())


def snapshot(name: str) -> str:
    """The note of a demonstration as text, without version and fingerprints."""
    text = render(compose(run_consult(demonstration(name))))
    text = re.sub(r"\bcase [0-9a-f]{12}", "case (fingerprint)", text)
    text = re.sub(r"\bdrug file [0-9a-f]{12}", "drug file (fingerprint)", text)
    return re.sub(r"\bpkcalc \d+\.\d+\.\d+[\w.]*", "pkcalc (version)", text)
