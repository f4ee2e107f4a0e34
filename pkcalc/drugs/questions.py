"""The context questions: those of any drug as data, and how a drug file adds its own."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from importlib import resources
from typing import Literal, cast

from pkcalc.drugs.table import Table

Group = Literal["first", "reading", "course", "start"]
GROUPS: tuple[Group, ...] = ("first", "reading", "course", "start")
FILE = "_questions.toml"


@dataclass(frozen=True)
class Question:
    """One context question; its answer is yes, no or unknown, and silence stands on the note as "not stated".

    words: as asked. short: in a sentence. group: where the form asks it. told: its answer stands on page one.
    dated: a yes is asked for its date and what exactly. diagnoses: words of a diagnosis that point to the question;
    they never answer it, because whether it still holds and how severe it is stands elsewhere.
    """

    id: str
    words: str
    short: str
    group: Group
    told: bool
    dated: bool
    diagnoses: tuple[str, ...] = ()


def read_question(name: str, t: Table) -> Question:
    """One [question.NAME] table of a drug file or of the common questions."""
    return Question(
        id=name,
        words=t.text("words"),
        short=t.text("short"),
        group=cast(Group, t.choice("group", GROUPS)),
        told=t.switch("told"),
        dated=t.switch("dated"),
        diagnoses=t.texts("diagnoses", ()),
    )


@cache
def common_questions() -> Mapping[str, Question]:
    """The questions that may matter for any drug, in the order they are asked."""
    text = resources.files("pkcalc.drugs").joinpath(FILE).read_text(encoding="utf-8")
    top = Table(FILE, "", tomllib.loads(text), {})
    found = top.each("question", read_question)
    top.done()
    return found
