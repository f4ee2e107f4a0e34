"""The case: what a person typed about one patient, checked as a whole, every problem reported at once.

`CaseFile` is the file format (JSON, text with units), `Case` the checked record that everything else reads.
A case keeps the text as typed beside each value, so that the note can show both.
"""

from __future__ import annotations

import difflib
import hashlib
import json
import re
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from functools import cached_property
from pathlib import Path
from typing import Annotated, Any, Literal, ParamSpec, TypeVar, get_args

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, StringConstraints, ValidationError
from pydantic_core import PydanticCustomError

from pkcalc import units
from pkcalc.clock import days_between, read_time, read_time_of_day, show_time
from pkcalc.dosing import Intake, Regimen, continuous, intake_problem
from pkcalc.drugs.profile import Profile, drug_names, load_profile
from pkcalc.errors import CaseError, DrugFileError, Problem, as_typed
from pkcalc.units import Typed

FORMAT_VERSION = 1
MAX_BYTES = 2_000_000
MAX_DEPTH = 24
MAX_LINES_OF_RECORD = 20_000
MAX_DOSES = 100_000
MAX_PROBLEMS = 100
MAX_ENTRIES = 300_000

Answer = Literal["yes", "no", "unknown"]
Kind = Literal["total", "free", "normalised"]

_UNSEEN = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\u200e\u200f\u202a-\u202e\u2066-\u2069]")


def _readable(text: str) -> str:
    if _UNSEEN.search(text):
        raise PydanticCustomError("unseen", "characters that cannot be seen")
    return text


Text = Annotated[str, StringConstraints(max_length=200, strip_whitespace=True), AfterValidator(_readable)]
LongText = Annotated[str, StringConstraints(max_length=4000), AfterValidator(_readable)]

_FILE = ConfigDict(extra="forbid", frozen=True, strict=True, hide_input_in_errors=True)


class AnswerFile(BaseModel):
    """A context answer with detail."""

    model_config = _FILE
    answer: Answer
    since: Text = ""
    detail: Text = ""


class PatientFile(BaseModel):
    """The patient, without anything that identifies one."""

    model_config = _FILE
    age: Text = Field("", description='For example "45 years" or "8 months".')
    sex: Literal["female", "male", "unknown"] = "unknown"
    weight: Text = Field("", description='For example "70 kg" or "154 lb".')
    weight_basis: Literal["measured", "estimated", "unknown"] = "unknown"
    height: Text = Field("", description='For example "170 cm" or "67 in".')


class AlbuminFile(BaseModel):
    """Albumin with its date and method."""

    model_config = _FILE
    value: Text = Field(description='For example "29 g/L" or "2.9 g/dL".')
    taken: Text = ""
    method: Literal["BCG", "BCP", "other", "unknown"] = "unknown"
    after_infusion: Answer = "unknown"


class ClockDoseFile(BaseModel):
    """One dose at a time of day within a daily regimen."""

    model_config = _FILE
    time: Text = Field(description='24 h clock, for example "21:00".')
    amount: Text
    form: Text = Field("", description="Only where it differs from the line's form.")


class DoseFile(BaseModel):
    """One line of the dosing record: a repeated regimen, a single dose, or an infusion."""

    model_config = _FILE
    form: Text = Field("", description="A form of the drug profile; there is no default.")
    product: Text = Field("", description="A liquid product of the drug profile, where amount or rate is in mL.")
    amount: Text = Field("", description='Amount of each dose, for example "300 mg".')
    every: Text = Field("", description='For example "24 h", "12 h" or "48 h"; with amount.')
    daily: tuple[ClockDoseFile, ...] = Field(
        (), max_length=24, description="Doses by time of day, instead of amount and every."
    )
    at: Text = Field("", description="Clock time of a single dose; with amount.")
    over: Text = Field("", description='Infusion time, for example "30 min".')
    rate: Text = Field(
        "", description='A continuous infusion, for example "7 g/h", "110 mg/kg/h" or, with product, "88 mL/h".'
    )
    from_: Text = Field("", alias="from", description="Clock time of the first dose.")
    until: Text = Field("", description="Clock time after which no dose was given; empty: still going on.")
    for_about: Text = Field("", description='Instead of from, where only the length is known: "3 months".')
    missed: tuple[Text, ...] = Field(
        (), max_length=5000, description="Clock times of doses known to be missed, held or refused."
    )
    source: Literal["given", "ordered", "stated"] = "given"
    given_by: Literal["nurse", "carer", "self", "unknown"] = "unknown"
    confirmed: Answer = Field("unknown", description="For ordered or stated lines: did a person confirm it?")
    comment: LongText = ""


class DialysisFile(BaseModel):
    """One session that removes the drug at a first-order rate while it runs."""

    model_config = _FILE
    from_: Text = Field(alias="from", description="Clock time at which it starts; it may lie ahead.")
    until: Text = Field("", description="Clock time at which it ends; empty: still going on.")
    clearance: Text = Field("", description='Of the drug, for example "150 mL/min"; empty: the drug file\'s value.')
    comment: LongText = ""


class LevelFile(BaseModel):
    """One reported level."""

    model_config = _FILE
    value: Text = Field(description='As reported: "8 mg/L", "<2.5 mg/L", ">40 mg/L".')
    kind: Literal["total", "free", "normalised"]
    drawn: Text = ""
    normalised_by: Text = Field("", description="Who normalised it, for kind normalised.")
    on_dose: int | None = Field(None, description="Line of the dosing record in force (1 for the first).")
    albumin: AlbuminFile | None = None
    other_levels: dict[Text, Text] = Field(
        default_factory=dict,
        max_length=20,
        description="Levels of other drugs in the same sample, by the drug's name, where the drug file asks for them.",
    )
    sample: Literal["serum", "plasma", "gel tube", "unknown"] = "unknown"
    comment: LongText = ""


class TargetFile(BaseModel):
    """The target range, if it is not the profile's or the site's."""

    model_config = _FILE
    low: Text
    high: Text
    kind: Literal["total", "free"] = "total"
    reason: Text = ""


class ProposedFile(BaseModel):
    """A regimen the pharmacist wants to see."""

    model_config = _FILE
    form: Text = ""
    product: Text = Field("", description="A liquid product of the drug profile, where amount or rate is in mL.")
    amount: Text = ""
    every: Text = ""
    daily: tuple[ClockDoseFile, ...] = Field((), max_length=24)
    rate: Text = Field("", description='A continuous infusion, for example "7 g/h".')


class LoadFile(BaseModel):
    """A load or top-up the pharmacist wants to see."""

    model_config = _FILE
    form: Text
    route: Text = Field("", description="Only where it is not the form's usual one, so that it can be answered.")
    aim: Text = ""
    at: Text = ""


class PlanFile(BaseModel):
    """What is asked of the plan."""

    model_config = _FILE
    shelf: Text = Field("", description="A generic country shelf of the drug profile.")
    products: tuple[Text, ...] = Field((), max_length=100, description="Restricts the shelf to these products.")
    largest_step: Text = ""
    order_by_loss: bool = False
    load: LoadFile | None = None
    restart_level: Text = ""
    start: Text = Field("", description="Clock time of the first dose of a new regimen.")


class ChosenFile(BaseModel):
    """What the pharmacist chose, in their own words."""

    model_config = _FILE
    regimen: ProposedFile | None = None
    words: LongText = ""
    next_draw: Text = ""


class EarlierForecastFile(BaseModel):
    """What an earlier note forecast for a level, to compare with what came."""

    model_config = _FILE
    drawn: Text
    kind: Literal["total", "free", "normalised"]
    median: Text
    low: Text
    high: Text
    regimen: Text = Field("", description="The regimen it was forecast for, in words.")
    version: Text = ""


#: What a second person can type again from the chart. Weight, doses, levels and dates are always among it.
Part = Literal["drug", "time of the consult", "patient", "albumin", "context", "doses", "levels", "dialysis"]
COMPARED: tuple[Part, ...] = get_args(Part)


class ReentryFile(BaseModel):
    """That a second person typed this case again from the chart, and what the comparison found. Nobody is named."""

    model_config = _FILE
    done: Text = Field(description="Clock time of the latest comparison.")
    compared: tuple[Part, ...] = Field(min_length=1, max_length=len(COMPARED), description="What was typed again.")
    differences: tuple[Text, ...] = Field(
        (), max_length=100, description="Every place that differed since this re-entry began."
    )
    left: tuple[Text, ...] = Field((), max_length=100, description="Those that differed still at the latest time.")
    facts: Text = Field(description="Fingerprint of what was compared; once it no longer fits, the re-entry is void.")


class DemonstrationFile(BaseModel):
    """Marks an invented, non-clinical scenario. It can be edited but stays a demonstration."""

    model_config = _FILE
    name: Text
    title: Text
    shows: LongText


class CaseFile(BaseModel):
    """A pkcalc case file. Values are text with their unit, as typed."""

    model_config = _FILE
    pkcalc_case: int = Field(description="Version of this format.")
    comment: LongText = Field("", description="Free text for people; never used.")
    label: Text = Field("", description="Your own label. Never a name, number or date of birth.")
    demonstration: DemonstrationFile | None = None
    drug: Text
    question: LongText = Field("", description="Why the level was drawn.")
    now: Text = Field("", description="Clock time of the consult; forecasts start here.")
    patient: PatientFile = PatientFile()
    albumin: AlbuminFile | None = None
    context: dict[str, Answer | AnswerFile] = Field(
        default_factory=dict, max_length=100, description="Answers to the context questions of the drug."
    )
    doses: tuple[DoseFile, ...] = Field((), max_length=MAX_LINES_OF_RECORD)
    dialysis: tuple[DialysisFile, ...] = Field((), max_length=100)
    levels: tuple[LevelFile, ...] = Field((), max_length=500)
    target: TargetFile | None = None
    aim: Text = Field("", description='The level aimed at, for example "15 mg/L".')
    proposed: tuple[ProposedFile, ...] = Field((), max_length=20)
    population: Text = Field("", description="A named population of the drug profile.")
    method: Literal["", "two levels", "whole record", "lines"] = ""
    plan: PlanFile = PlanFile()
    chosen: ChosenFile | None = None
    forecast_then: tuple[EarlierForecastFile, ...] = Field((), max_length=500)
    reentry: ReentryFile | None = None


@dataclass(frozen=True)
class Context:
    """One answered question."""

    answer: Answer
    since: datetime | None = None
    detail: str = ""


@dataclass(frozen=True)
class Albumin:
    """Albumin in g/L as typed, with date and method."""

    typed: Typed
    taken: datetime | None
    method: str
    after_infusion: Answer

    @property
    def g_per_L(self) -> float:
        return self.typed.value


@dataclass(frozen=True)
class Patient:
    """The patient; a value that was not stated is None."""

    age_years: float | None
    sex: str
    weight_kg: float | None
    weight_basis: str
    height_cm: float | None
    typed: Mapping[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Course:
    """One checked line of the dosing record (amounts as labelled, before salt factor)."""

    index: int
    regimen: Regimen | None
    single: Intake | None
    rate_mg_per_day: float | None
    rate_form: str
    start: datetime | None
    end: datetime | None
    for_about_days: float | None
    missed: tuple[datetime, ...]
    source: str
    given_by: str
    confirmed: Answer
    typed: DoseFile

    @property
    def forms(self) -> tuple[str, ...]:
        if self.regimen is not None:
            return tuple(dict.fromkeys(x.form for x in self.regimen.intakes))
        return (self.single.form if self.single else self.rate_form,)

    def active_mg_per_day(self, profile: Profile) -> float | None:
        """Active drug per day of a repeated regimen or of an infusion; None for a single dose."""
        if self.regimen is not None:
            return self.regimen.active_mg_per_day(profile)
        if self.rate_mg_per_day is None:
            return None
        return self.rate_mg_per_day * profile.forms[self.rate_form].active_fraction

    @property
    def counts_as_given(self) -> bool:
        return self.source == "given" or self.confirmed == "yes"


@dataclass(frozen=True)
class Session:
    """One checked dialysis session. end: None while it is still going on. assumed: no clearance was given."""

    index: int
    start: datetime
    end: datetime | None
    clearance_L_per_day: float
    assumed: bool
    typed: DialysisFile


@dataclass(frozen=True)
class Level:
    """One checked level: the reported value in mg/L of its own kind."""

    index: int
    typed: Typed
    kind: Kind
    censored: Literal["below", "above"] | None
    drawn: datetime | None
    normalised_by: str
    on_dose: int | None
    albumin: Albumin | None
    others_mg_per_L: tuple[tuple[str, float], ...]
    sample: str

    @property
    def reported_mg_per_L(self) -> float:
        return self.typed.value

    def other_mg_per_L(self, drug: str) -> float | None:
        """The level of another drug in the same sample, where it was given."""
        return dict(self.others_mg_per_L).get(drug)


@dataclass(frozen=True)
class Target:
    """Target range in mg/L of its kind, with where it comes from."""

    low_mg_per_L: float
    high_mg_per_L: float
    kind: str
    origin: str

    def holds(self, level_mg_per_L: float) -> bool:
        """True where a level of the same kind lies within the range (both ends count)."""
        return self.low_mg_per_L <= level_mg_per_L <= self.high_mg_per_L


@dataclass(frozen=True)
class EarlierForecast:
    """A forecast of an earlier note, in mg/L of its kind."""

    drawn: datetime
    kind: Kind
    median_mg_per_L: float
    low_mg_per_L: float
    high_mg_per_L: float
    version: str
    regimen: str = ""


@dataclass(frozen=True)
class Reentry:
    """A blind re-entry that was done. differences: places that differed; left: those not resolved yet."""

    done: datetime
    compared: tuple[Part, ...]
    differences: tuple[str, ...]
    left: tuple[str, ...]
    facts: str


@dataclass(frozen=True)
class Case:
    """A checked case. `file` is what was typed."""

    file: CaseFile
    drug: str
    demonstration: DemonstrationFile | None
    question: str
    now: datetime | None
    patient: Patient
    albumin: Albumin | None
    context: Mapping[str, Context]
    courses: tuple[Course, ...]
    levels: tuple[Level, ...]
    target: Target | None
    aim_mg_per_L: float | None
    proposed: tuple[Regimen, ...]
    chosen: Regimen | None
    population: str
    method: str
    earlier: tuple[EarlierForecast, ...]
    largest_step_mg_per_day: float | None = None
    load_aim_mg_per_L: float | None = None
    load_at: datetime | None = None
    restart_level_mg_per_L: float | None = None
    plan_start: datetime | None = None
    next_draw: datetime | None = None
    dialysis: tuple[Session, ...] = ()
    reentry: Reentry | None = None

    def answer(self, question: str) -> str:
        """'yes', 'no', 'unknown' or 'not stated'."""
        found = self.context.get(question)
        return found.answer if found else "not stated"

    @cached_property
    def origin(self) -> datetime | None:
        """The earliest clock time of the case; times inside are days since then."""
        moments = [
            x
            for x in (
                *(c.start for c in self.courses),
                *(level.drawn for level in self.levels),
                *(s.start for s in self.dialysis),
                self.now,
            )
            if x is not None
        ]
        return min(moments) if moments else None

    def day(self, moment: datetime) -> float:
        """Days since the origin of the case."""
        assert self.origin is not None
        return days_between(self.origin, moment)

    def moment(self, day: float) -> datetime:
        """The clock time of a day since the origin of the case."""
        assert self.origin is not None
        return self.origin + timedelta(days=day)

    @property
    def hash(self) -> str:
        """Short fingerprint of everything typed."""
        return hashlib.sha256(dump_case(self).encode()).hexdigest()[:12]


T = TypeVar("T")
P = ParamSpec("P")


class _Check:
    """Collects problems, so that all are reported at once."""

    def __init__(self) -> None:
        self.problems: list[Problem] = []

    def attempt(self, read: Callable[P, T], *args: P.args, **kwargs: P.kwargs) -> T | None:
        """What the reader gives; None where it refused, and its problems are kept."""
        try:
            return read(*args, **kwargs)
        except CaseError as error:
            self.problems.extend(error.problems)
            return None

    def say(self, where: str, given: str, allowed: str, fix: str) -> None:
        self.problems.append(Problem(where, given, allowed, fix))


# --- reading ---------------------------------------------------------------------------------------------


def read_case_text(text: str | bytes, *, name: str = "Case file") -> Case:
    """JSON text -> checked Case; CaseError with every problem (and its line where the text allows)."""
    file = parse_case_text(text, name=name)
    try:
        return check_case(file)
    except CaseError as error:
        raise CaseError(_with_lines(error.problems, _decoded(text, name))) from None


def load_case(path: str | Path) -> Case:
    """A case file -> checked Case."""
    file = Path(path)
    name = f"Case file {as_typed(file.name, 80)}"
    try:
        with file.open("rb") as stream:
            data = stream.read(MAX_BYTES + 1)
    except (OSError, ValueError) as error:
        reason = (getattr(error, "strerror", None) or "it cannot be read").lower()
        raise CaseError(
            Problem(name, f"the file could not be opened ({reason})", "", "Check name and folder")
        ) from None
    return read_case_text(data, name=name)


def _decoded(text: str | bytes, name: str) -> str:
    """The text within the size limit, as UTF-8."""
    if len(text) > MAX_BYTES:
        raise CaseError(
            Problem(
                name,
                f"more than {MAX_BYTES / 1e6:.0f} MB were given",
                f"at most {MAX_BYTES / 1e6:.0f} MB",
                "Give the case of one patient only",
            )
        )
    if isinstance(text, str):
        return text.removeprefix("\ufeff")
    try:
        return text.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise CaseError(
            Problem(name, f"byte {error.start + 1} is not UTF-8 text", "UTF-8 text", "Save the file as UTF-8")
        ) from None


# A string that never ends is taken to the end of the text: looking for its end again and again would take hours.
_MARK = re.compile(r'"(?:[^"\\]++|\\.)*+(?:"|\\?\Z)|[\[\]{},:]', re.DOTALL)


def _places(text: str, name: str) -> Iterator[tuple[tuple[int | str, ...], int]]:
    """Every place of a JSON text, in order: its path and where its key (or list item) begins.

    Refuses deep nesting as it goes, so it is safe before the text is parsed. A text that is not JSON gives places of
    no use, never an error: the parser says what is wrong.
    """
    path: list[int | str] = []
    lists: list[bool] = []
    last = ""
    last_at = 0
    for mark in _MARK.finditer(text):
        sign = mark.group()
        if sign in ("[", "{"):
            lists.append(sign == "[")
            path.append(0 if sign == "[" else "")
            if len(lists) > MAX_DEPTH:
                raise CaseError(
                    Problem(name, "the text is nested too deeply", f"at most {MAX_DEPTH} levels", "Check the brackets")
                )
            if sign == "[":
                yield tuple(path), mark.end()
        elif sign in ("]", "}"):
            if lists:
                lists.pop()
                path.pop()
        elif sign == ":":
            if lists and not lists[-1] and last:
                path[-1] = last
                yield tuple(path), last_at
        elif sign == ",":
            step = path[-1] if path else None
            if lists and lists[-1] and isinstance(step, int):
                path[-1] = step + 1
                yield tuple(path), mark.end()
        else:
            last_at = mark.start()
            try:
                last = json.loads(sign, strict=False) if len(sign) < 300 else ""
            except ValueError:
                last = ""


def _line(text: str, at: int) -> int:
    """The line of a position; of a list item, where the item itself begins."""
    while at < len(text) and text[at].isspace():
        at += 1
    return text.count("\n", 0, at) + 1


def _refuse_structure(text: str, name: str) -> None:
    """Deep nesting and keys that stand twice, every one with its line, before anything is parsed."""
    seen: set[tuple[int | str, ...]] = set()
    twice: list[Problem] = []
    for number, (path, at) in enumerate(_places(text, name)):
        if number >= MAX_ENTRIES:
            most = f"at most {MAX_ENTRIES:,} entries"
            raise CaseError(Problem(name, "the text has too many entries", most, "Give the case of one patient only"))
        if isinstance(path[-1], int):
            continue
        if path in seen and len(twice) < MAX_PROBLEMS:
            where = f"{place_in_words(path)} (line {_line(text, at)})"
            twice.append(Problem(where, "it stands twice in the same place", "each key once", "Remove one of the two"))
        seen.add(path)
    if twice:
        raise CaseError(twice)


#: Places that the form and the note call by a shorter name.
_SHORT = {
    "Patient, age": "Age",
    "Patient, weight": "Weight",
    "Patient, height": "Height",
    "Now": "Time of the consult",
    "Chosen, regimen": "Chosen regimen",
}


def _with_lines(problems: Iterable[Problem], text: str) -> list[Problem]:
    """The problems, each with the line of the place it names, where the text holds that place."""
    known: dict[str, int] = {}
    wanted = {p.where for p in problems}
    wanted |= {x.rsplit(", ", 1)[0] for x in wanted}
    for path, at in _places(text, "Case file"):
        words = place_in_words(path)
        words = _SHORT.get(words, words)
        if words in wanted:
            known.setdefault(words, at)
    placed = []
    for problem in problems:
        at = known.get(problem.where, known.get(problem.where.rsplit(", ", 1)[0], -1))
        where = f"{problem.where} (line {_line(text, at)})" if at >= 0 else problem.where
        placed.append(Problem(where, problem.given, problem.allowed, problem.fix))
    return placed


def _no_constant(word: str) -> Any:
    raise CaseError(Problem("Case file", f"{word} was given as a number", "text with its unit", "Correct the value"))


def parse_case_text(text: str | bytes, *, name: str = "Case file") -> CaseFile:
    """JSON text -> CaseFile, structure checked only."""
    text = _decoded(text, name)
    _refuse_structure(text, name)
    try:
        raw = json.loads(text, parse_constant=_no_constant)
    except json.JSONDecodeError as error:
        raise CaseError(
            Problem(
                f"{name}, line {error.lineno}",
                f"the text is not valid JSON at column {error.colno}",
                "a JSON document",
                "Check commas, quotes and brackets there",
            )
        ) from None
    except ValueError:
        raise CaseError(Problem(name, "a number has too many digits", "text with its unit", "Correct it")) from None
    if not isinstance(raw, dict):
        raise CaseError(
            Problem(name, "the text is not a case", "a JSON object in { }", "Compare it with pkcalc schema")
        )
    version = raw.get("pkcalc_case")
    if isinstance(version, int) and not isinstance(version, bool) and version > FORMAT_VERSION:
        shown = str(version) if version < 10**9 else "far above 1"
        raise CaseError(
            Problem(
                name,
                f"the case was written in format version {shown}",
                f"up to {FORMAT_VERSION}",
                "It was made by a newer version of this program: update, or enter the case again",
            )
        )
    try:
        return CaseFile.model_validate_json(json.dumps(raw), by_alias=True)
    except ValidationError as error:
        raise CaseError(_explain(error, text)) from None


_PLAIN = {
    "doses": "Dose line",
    "levels": "Level",
    "dialysis": "Dialysis session",
    "proposed": "Proposed regimen",
    "daily": "dose",
    "missed": "missed dose",
    "forecast_then": "Earlier forecast",
}


def place_in_words(path: Iterable[int | str]) -> str:
    """('levels', 1, 'value') -> 'Level 2, value'."""
    words: list[str] = []
    steps = list(path)
    i = 0
    while i < len(steps):
        step = steps[i]
        if isinstance(step, str) and step in _PLAIN and i + 1 < len(steps) and isinstance(steps[i + 1], int):
            words.append(f"{_PLAIN[step]} {int(steps[i + 1]) + 1}")
            i += 2
            continue
        if step not in ("AnswerFile",) and not (isinstance(step, str) and step.startswith("literal[")):
            text = str(step)[:60].replace("_", " ").strip()
            words.append(f"item {int(step) + 1}" if isinstance(step, int) else text)
        i += 1
    joined = ", ".join(words) or "Case file"
    return joined[0].upper() + joined[1:]


def _model_at(path: tuple[int | str, ...]) -> type[BaseModel]:
    models: dict[str, type[BaseModel]] = {
        "doses": DoseFile,
        "daily": ClockDoseFile,
        "levels": LevelFile,
        "dialysis": DialysisFile,
        "patient": PatientFile,
        "albumin": AlbuminFile,
        "target": TargetFile,
        "proposed": ProposedFile,
        "plan": PlanFile,
        "load": LoadFile,
        "chosen": ChosenFile,
        "regimen": ProposedFile,
        "demonstration": DemonstrationFile,
        "forecast_then": EarlierForecastFile,
        "reentry": ReentryFile,
        "context": AnswerFile,
    }
    for step in reversed(path):
        if isinstance(step, str) and step in models:
            return models[step]
    return CaseFile


def _explain(error: ValidationError, text: str) -> list[Problem]:
    found: dict[tuple[int | str, ...], Problem] = {}
    items = [(tuple(x["loc"]), x) for x in error.errors(include_url=False, include_context=True)]
    # An answer is a word or an object; where an object was given, only what is wrong inside it is said.
    objects = {path[:2] for path, _ in items if path[:1] == ("context",) and len(path) > 3}
    left = 0
    for path, item in items:
        if path[:1] == ("context",) and len(path) > 2:
            if path[:2] in objects and len(path) == 3:
                continue
            path = (*path[:2], *path[3:])
        if path not in found:
            if len(found) == MAX_PROBLEMS:
                left += 1
                continue
            found[path] = _one_problem(path, item["type"], item.get("ctx", {}))
    wanted = {*found, *(path[:-1] for path in found)}
    lines = {path: _line(text, at) for path, at in _places(text, "Case file") if path in wanted}
    problems = []
    for path, p in found.items():
        # What is missing has no line of its own: the line of what it is missing from.
        line = lines.get(path) or lines.get(path[:-1])
        where = f"{p.where} (line {line})" if line else p.where
        problems.append(Problem(where, p.given, p.allowed, p.fix))
    if left:
        problems.append(Problem("Case file", f"{left:,} more problems were found", "", "Mend these first"))
    return problems


_EXPECTED = {
    "tuple_type": "a list in [ ]",
    "model_type": "an object in { }",
    "dict_type": "an object in { }",
    "int_type": "a whole number such as 1",
    "int_from_float": "a whole number such as 1",
    "bool_type": "true or false",
}


def _one_problem(path: tuple[int | str, ...], kind: str, detail: Mapping[str, Any]) -> Problem:
    where = place_in_words(path)
    if kind == "extra_forbidden":
        known = sorted(f.alias or n for n, f in _model_at(path[:-1]).model_fields.items())
        return Problem(where, "this key is not known", ", ".join(known), _nearest(str(path[-1]), known))
    if kind == "missing":
        return Problem(where, "it is missing", "a value", "Add it")
    if path[:1] == ("context",) and kind in ("literal_error", "model_type"):
        return Problem(where, "the answer is not understood", "yes, no or unknown", "Choose one of them")
    if kind == "literal_error":
        allowed = str(detail.get("expected", "")).replace("''", "nothing").replace("'", "")
        return Problem(where, "the word is not understood", allowed, "Choose one of them")
    if kind == "string_too_long":
        return Problem(where, "the text is too long", f"at most {detail['max_length']:,} characters", "Shorten it")
    if kind == "too_long":
        return Problem(where, "the list is too long", f"at most {detail['max_length']:,} entries", "Shorten it")
    if kind == "unseen":
        return Problem(where, "the text holds characters that cannot be seen", "readable text", "Type it again")
    if kind == "string_type":
        fix = "Put number and unit in quotes"
        return Problem(where, "something other than text was given", 'text such as "300 mg"', fix)
    if kind == "json_invalid":
        return Problem(where, "a text holds half a character", "whole characters", "Type the text again")
    allowed = _EXPECTED.get(kind, "what pkcalc schema says")
    return Problem(where, "the value is not of the expected kind", allowed, "Compare it with pkcalc schema")


def _nearest(word: str, known: Iterable[str], otherwise: str = "Remove it", cutoff: float = 0.5) -> str:
    near = difflib.get_close_matches(word[:60], list(known), n=1, cutoff=cutoff)
    return f'Did you mean "{near[0]}"?' if near else otherwise


# --- checking --------------------------------------------------------------------------------------------


def check_case(file: CaseFile) -> Case:
    """CaseFile -> Case: every value read, every contradiction reported together."""
    check = _Check()
    if file.pkcalc_case != FORMAT_VERSION:
        check.say("Pkcalc case", f"format version {file.pkcalc_case}", f"{FORMAT_VERSION}", "Correct the version")
    profile = check.attempt(_profile, file.drug)
    if profile is None:
        raise CaseError(check.problems)
    patient = _patient(file, check, profile)
    now = _optional_time(file.now, "Time of the consult", check)
    steady = {x.on_dose for x in file.levels}  # dose lines that a level names: their times may be unknown
    weight = patient.weight_kg
    courses = tuple(
        c for i, x in enumerate(file.doses) if (c := _course(i, x, check, profile, weight, i + 1 in steady)) is not None
    )
    levels = tuple(
        level for i, x in enumerate(file.levels) if (level := _level(i, x, check, profile, len(file.doses))) is not None
    )
    dialysis = tuple(s for i, x in enumerate(file.dialysis) if (s := _session(i, x, check, profile)) is not None)
    albumin = _albumin(file.albumin, "Albumin", check)
    context = _context(file, check, profile)
    if dialysis and _says(context, "extracorporeal", "no"):
        check.say(
            "Context, extracorporeal",
            "no was answered although dialysis sessions are given",
            "yes, or no session",
            "Correct one of them",
        )
    target = _target(file.target, check, profile)
    aim = _level_value(file.aim, "Aim", check, profile)
    if aim is not None and target is not None and target.kind == "total" and not target.holds(aim):
        words = _range_words(target)
        check.say(
            "Aim", f"{file.aim} lies outside the target range {words}", words, "Change the aim or the target range"
        )
    proposed = tuple(
        r
        for i, x in enumerate(file.proposed)
        if (r := _regimen(x, f"Proposed regimen {i + 1}", check, profile, weight)) is not None
    )
    chosen = None
    if file.chosen is not None and file.chosen.regimen is not None:
        chosen = _regimen(file.chosen.regimen, "Chosen regimen", check, profile, weight)
    if file.population and file.population not in profile.populations:
        check.say(
            "Population",
            f'"{file.population}" was given',
            ", ".join(profile.populations),
            "Choose one of the named populations",
        )
    if file.plan.shelf and file.plan.shelf not in profile.shelves:
        check.say(
            "Plan, shelf", f'"{file.plan.shelf}" was given', ", ".join(profile.shelves), "Choose one of these shelves"
        )
    elif file.plan.products:
        _check_products(file.plan, profile, check)
    earlier = tuple(e for i, x in enumerate(file.forecast_then) if (e := _earlier(i, x, check, profile)) is not None)
    step = None
    if file.plan.largest_step:
        typed = check.attempt(units.read, file.plan.largest_step, "dose rate", "Plan, largest step")
        if typed is not None:
            step = typed.value
            _gate(step, 1, 3000, "Plan, largest step", file.plan.largest_step, "mg/day", "Check number and unit", check)
    case = Case(
        file=file,
        drug=file.drug,
        demonstration=file.demonstration,
        question=file.question,
        now=now,
        patient=patient,
        albumin=albumin,
        context=context,
        courses=courses,
        levels=levels,
        target=target,
        aim_mg_per_L=aim,
        proposed=proposed,
        chosen=chosen,
        population=file.population,
        method=file.method,
        earlier=earlier,
        largest_step_mg_per_day=step,
        load_aim_mg_per_L=_level_value(file.plan.load.aim, "Plan, load, aim", check, profile)
        if file.plan.load
        else None,
        load_at=_optional_time(file.plan.load.at, "Plan, load, at", check) if file.plan.load else None,
        restart_level_mg_per_L=_level_value(file.plan.restart_level, "Plan, restart level", check, profile),
        plan_start=_optional_time(file.plan.start, "Plan, start", check),
        next_draw=_optional_time(file.chosen.next_draw, "Chosen, next draw", check) if file.chosen else None,
        dialysis=dialysis,
        reentry=_reentry(file.reentry, check) if file.reentry is not None else None,
    )
    if file.plan.load and file.plan.load.form not in profile.forms:
        check.say("Plan, load, form", f'"{file.plan.load.form}" was given', ", ".join(profile.forms), "Choose a form")
    routes = sorted({r for f in profile.forms.values() for r in (*f.routes, *f.refused_routes)} - {"any"})
    if file.plan.load and file.plan.load.route and file.plan.load.route not in routes:
        check.say("Plan, load, route", f'"{file.plan.load.route}" was given', ", ".join(routes), "Choose a route")
    _check_zones(case, check)
    if not check.problems:
        _check_order(case, check)
    if check.problems:
        raise CaseError(check.problems)
    return case


def _check_products(plan: PlanFile, profile: Profile, check: _Check) -> None:
    """Products named in the case stand on its shelf, each once, one strength only of a kind that can be mixed up."""
    on_shelf = profile.shelves[plan.shelf].products if plan.shelf else tuple(profile.products)
    unknown = [p for p in plan.products if p not in on_shelf]
    if unknown:
        check.say("Plan, products", f'"{unknown[0]}" was given', ", ".join(on_shelf), "Choose from these products")
    elif not plan.shelf:
        without = "products without a shelf were given"
        check.say("Plan, products", without, "a shelf first", "Name the shelf in the plan")
    groups = [g for p in plan.products if p in profile.products and (g := profile.products[p].exclusive_group)]
    if len(groups) != len(set(groups)):
        check.say("Plan, products", f"two strengths of the {groups[0]} were given", "one of them", "Take one out")


def _profile(name: str) -> Profile:
    if name not in drug_names():
        raise CaseError(
            Problem("Drug", f'"{as_typed(name)}" was given', ", ".join(drug_names()), "Choose one of these")
        )
    try:
        return load_profile(name)
    except DrugFileError as error:
        given = "the drug file cannot be used: " + str(error).rstrip(".")
        raise CaseError(Problem("Drug", given, "", "Tell the maintainers")) from None


def _optional_time(text: str, where: str, check: _Check) -> datetime | None:
    return check.attempt(read_time, text, where) if text else None


def _gate(value: float, low: float, high: float, where: str, typed: str, unit: str, fix: str, check: _Check) -> None:
    if not low <= value <= high:
        check.say(
            where,
            f"{typed} was given",
            f"{units.show_number(low)} to {units.show_number(high)} {unit} (both ends count)",
            fix,
        )


def _patient(file: CaseFile, check: _Check, profile: Profile) -> Patient:
    p = file.patient
    typed = {k: v for k, v in (("age", p.age), ("weight", p.weight), ("height", p.height)) if v}
    age = weight = height = None
    if p.age:
        read = check.attempt(units.read, p.age, "age", "Age", zero_allowed=True)
        if read:
            age = read.value
            _gate(age, 0, 120, "Age", p.age, "years", "Check the age and its unit", check)
    if p.weight:
        read = check.attempt(units.read, p.weight, "weight", "Weight")
        if read:
            weight = read.value
            _gate(weight, 0.4, 400, "Weight", p.weight, "kg", "Check the weight and its unit", check)
            if age is not None and age >= 17 and weight < 25:
                check.say(
                    "Weight",
                    f"{p.weight} at {p.age}",
                    "25 kg or more from 17 years",
                    "Check the weight, its unit and the age",
                )
            if age is not None and age < 6 and weight > 60:
                check.say("Weight", f"{p.weight} at {p.age}", "60 kg or less under 6 years", "Check weight and age")
    if p.height:
        read = check.attempt(units.read, p.height, "height", "Height")
        if read:
            height = read.value
            _gate(height, 25, 250, "Height", p.height, "cm", "Check the height and its unit", check)
    return Patient(
        age_years=age, sex=p.sex, weight_kg=weight, weight_basis=p.weight_basis, height_cm=height, typed=typed
    )


def _albumin(file: AlbuminFile | None, where: str, check: _Check) -> Albumin | None:
    if file is None:
        return None
    typed = check.attempt(units.read, file.value, "albumin", where)
    taken = _optional_time(file.taken, f"{where}, taken", check)
    if typed is None:
        return None
    number = units.split_label(file.value)[0]
    if typed.label == "g/dL" and typed.value > 60:
        check.say(
            where,
            f"{file.value} was given",
            "1 to 6 g/dL (both ends count)",
            f"Did you mean {number} g/L? Check the unit",
        )
    elif typed.label == "g/L" and typed.value < 10:
        check.say(
            where,
            f"{file.value} was given",
            "10 to 60 g/L (both ends count)",
            f"Did you mean {number} g/dL? Check the unit",
        )
    elif not 10 <= typed.value <= 60:
        check.say(
            where,
            f"{file.value} was given",
            "10 to 60 g/L (1 to 6 g/dL; both ends count)",
            "Check the number and its unit against the laboratory report",
        )
    return Albumin(typed=typed, taken=taken, method=file.method, after_infusion=file.after_infusion)


def _context(file: CaseFile, check: _Check, profile: Profile) -> dict[str, Context]:
    found: dict[str, Context] = {}
    for key, given in file.context.items():
        if key not in profile.questions:
            where = place_in_words(("context", key))
            known = profile.questions
            check.say(where, "this question is not known", ", ".join(known), _nearest(key, known))
        elif isinstance(given, str):
            found[key] = Context(answer=given)
        else:
            since = _optional_date(given.since, place_in_words(("context", key, "since")), check)
            found[key] = Context(answer=given.answer, since=since, detail=given.detail)
    for key in ("pregnancy", "delivery"):
        if _says(found, key) and file.patient.sex == "male":
            check.say(
                f"Context, {key}", "yes was answered for a male patient", "no, or sex female", "Correct one of them"
            )
    if _says(found, "tube_feed_change") and _says(found, "tube_feed", "unknown"):
        check.say(
            "Context, tube feed",
            "unknown was answered although a change of tube feeds was stated",
            "yes or no",
            "Say whether the patient is tube fed now",
        )
    return found


def _says(found: Mapping[str, Context], question: str, answer: str = "yes") -> bool:
    return question in found and found[question].answer == answer


def _optional_date(text: str, where: str, check: _Check) -> datetime | None:
    return check.attempt(read_time, text, where, time_needed=False) if text else None


def _read_level(text: str, where: str, profile: Profile) -> Typed:
    return units.read(text, "level", where, molar_mass_g_per_mol=profile.molar_mass_g_per_mol, only=profile.level_units)


def _level_value(text: str, where: str, check: _Check, profile: Profile) -> float | None:
    if not text:
        return None
    typed = check.attempt(_read_level, text, where, profile)
    if typed is None:
        return None
    low, high = profile.level_gate_mg_per_L("total")
    _gate(typed.value, low, high, where, text, "mg/L", "Check the number and its unit", check)
    return typed.value


def _range_words(target: Target) -> str:
    return f"{units.show_number(target.low_mg_per_L)} to {units.show_number(target.high_mg_per_L)} mg/L"


def _level(i: int, file: LevelFile, check: _Check, profile: Profile, n_lines: int) -> Level | None:
    where = f"Level {i + 1}"
    text = file.value
    censored: Literal["below", "above"] | None = None
    if text[:1] in ("<", ">"):
        censored = "below" if text[0] == "<" else "above"
        text = text[1:].strip()
    typed = check.attempt(_read_level, text, where, profile)
    drawn = _optional_time(file.drawn, f"{where}, drawn", check)
    albumin = _albumin(file.albumin, f"{where}, albumin", check)
    others = _other_levels(file.other_levels, where, check, profile)
    if file.kind == "normalised" and not file.normalised_by:
        check.say(
            f"{where}, normalised by",
            "a normalised level was given without saying who normalised it",
            'for example "laboratory"',
            "Say who normalised it, or give the measured total and the albumin",
        )
    if file.on_dose is not None and not 1 <= file.on_dose <= n_lines:
        check.say(
            f"{where}, on dose",
            f"line {file.on_dose} was named",
            f"1 to {n_lines}" if n_lines else "none: there is no dose line",
            "Name a line of the record",
        )
    if typed is None:
        return None
    low, high = profile.level_gate_mg_per_L(file.kind)
    _gate(
        typed.value,
        low,
        high,
        where,
        file.value,
        f"mg/L for a {file.kind} level",
        "Check the number, its unit and its kind against the laboratory report",
        check,
    )
    full = Typed(text=file.value, value=typed.value, label=typed.label)
    return Level(
        index=i,
        typed=full,
        kind=file.kind,
        censored=censored,
        drawn=drawn,
        normalised_by=file.normalised_by,
        on_dose=file.on_dose - 1 if file.on_dose is not None else None,
        albumin=albumin,
        others_mg_per_L=others,
        sample=file.sample,
    )


def _other_levels(
    given: Mapping[str, str], where: str, check: _Check, profile: Profile
) -> tuple[tuple[str, float], ...]:
    """The levels of other drugs that the drug file asks for, in mg/L."""
    found = []
    for drug, text in given.items():
        spot = f"{where}, other levels, {drug.replace('_', ' ')}"
        known = profile.other_levels.get(drug)
        if known is None:
            allowed = ", ".join(profile.other_levels) or f"none with a level of {profile.name}"
            check.say(spot, "no level of this drug is asked for", allowed, _nearest(drug, profile.other_levels))
            continue
        read = check.attempt(units.read, text, "level", spot, only=("mg/L", "mcg/mL"))
        if read:
            _gate(read.value, *known.gate_mg_per_L, spot, text, "mg/L", "Check the number and its unit", check)
            found.append((drug, read.value))
    return tuple(found)


def _target(file: TargetFile | None, check: _Check, profile: Profile) -> Target | None:
    if file is None:
        return None
    low = check.attempt(_read_level, file.low, "Target, low", profile)
    high = check.attempt(_read_level, file.high, "Target, high", profile)
    if low is None or high is None:
        return None
    if low.value >= high.value:
        check.say(
            "Target", f"{file.low} to {file.high} was given", "a low end below the high end", "Swap or correct the two"
        )
    gate = profile.level_gate_mg_per_L(file.kind)
    for name, value, typed in (("low", low.value, file.low), ("high", high.value, file.high)):
        _gate(value, *gate, f"Target, {name}", typed, "mg/L", "Check the number and its unit", check)
    return Target(low.value, high.value, file.kind, "this case")


def _form(text: str, where: str, check: _Check, profile: Profile) -> str | None:
    if not text:
        check.say(
            where,
            "no product form was given",
            ", ".join(profile.forms),
            "Name the form: the salts differ, and there is no default",
        )
        return None
    if text not in profile.forms:
        fix = _nearest(text, profile.forms, "Choose one of these", 0.4)
        check.say(where, f'"{text}" was given', ", ".join(profile.forms), fix)
        return None
    return text


def _in_mL(text: str, product: str, form: str, where: str, check: _Check, profile: Profile) -> float | None:
    """Labelled mg in mL (or mg/h in mL/h) of a named product: a strength in per cent alone can mean two things."""
    liquids = {p.id: p for p in profile.products.values() if p.form == form and p.unit == "mL"}
    if product not in liquids:
        given = f'of the product "{product[:40]}"' if product else "without the product"
        check.say(
            where,
            f"{text} was given {given}",
            "; ".join(f"{p.id} ({p.strength_words})" for p in liquids.values()) or "amounts in mg only for this form",
            "Name the product as its label reads" if liquids else "Give the amount in mg",
        )
        return None
    typed = check.attempt(units.read, text.removesuffix("/h"), "volume", where, only=("mL",))
    return None if typed is None else 1000 * typed.value * liquids[product].mg_per_unit


def _is_in(text: str, label: str) -> bool:
    return units.split_label(text)[1] == label


def _amount(text: str, form: str, where: str, check: _Check, profile: Profile, product: str = "") -> float | None:
    unit = profile.forms[form].amount_unit
    if _is_in(text, "mL"):
        labelled_mg = _in_mL(text, product, form, where, check, profile)
        if labelled_mg is None:
            return None
        problem = intake_problem(labelled_mg, profile.forms[form], where, text)
        if problem:
            check.problems.append(problem)
        return None if problem else labelled_mg
    only = ("mg PE",) if unit == "mg PE" else ("mg", "g")
    typed = check.attempt(units.read, text, "amount", where, only=only)
    if typed is None:
        return None
    problem = intake_problem(typed.value, profile.forms[form], where, text)
    if problem:
        check.problems.append(problem)
        return None
    return typed.value


def _duration(text: str, where: str, check: _Check, only: tuple[str, ...] | None = None) -> float | None:
    typed = check.attempt(units.read, text, "duration", where, only=only)
    return typed.value if typed else None


def _intakes(
    form_text: str,
    amount: str,
    every: str,
    daily: tuple[ClockDoseFile, ...],
    over: str,
    where: str,
    start: datetime | None,
    check: _Check,
    profile: Profile,
    product: str = "",
) -> Regimen | None:
    if daily:
        if amount or every:
            check.say(
                where,
                "doses by time of day and an amount with an interval were both given",
                "one of the two",
                "Remove amount and every, or daily",
            )
            return None
        intakes = []
        for j, dose in enumerate(daily):
            spot = f"{where}, dose {j + 1}"
            hour = check.attempt(read_time_of_day, dose.time, f"{spot}, time")
            form = _form(dose.form or form_text, f"{spot}, form", check, profile)
            value = _amount(dose.amount, form, f"{spot}, amount", check, profile, product) if form else None
            over_h = _over_h(over, form, where, check, profile) if form else None
            if hour is not None and form is not None and value is not None and over_h is not None:
                intakes.append(Intake(form=form, hour=hour, labelled_mg=value, over_h=over_h))
        if len(intakes) != len(daily):
            return None
        keys = [(x.hour, x.form) for x in intakes]
        if len(set(keys)) != len(keys):
            check.say(where, "the same form stands twice at the same time", "each time once", "Add the two amounts up")
            return None
        return Regimen(intakes=tuple(sorted(intakes, key=lambda x: x.hour)), cycle_h=24.0, timed=True)
    form = _form(form_text, f"{where}, form", check, profile)
    if form is None:
        return None
    value = _amount(amount, form, f"{where}, amount", check, profile, product)
    interval = _duration(every, f"{where}, every", check, ("h", "day", "days"))
    over_h = _over_h(over, form, where, check, profile)
    if value is None or interval is None or over_h is None:
        return None
    hours = round(interval * 24, 9)
    if not 1 <= hours <= 168:
        check.say(f"{where}, every", f"{every} was given", "1 to 168 h (both ends count)", "Check the interval")
        return None
    only = Intake(form=form, hour=0.0, labelled_mg=value, over_h=over_h)
    first = (start.hour + start.minute / 60) if start is not None else None
    return Regimen(intakes=(only,), cycle_h=hours, anchor_h=first)


def _over_h(text: str, form: str, where: str, check: _Check, profile: Profile) -> float | None:
    """Infusion time in hours, 0 where none was given; only for what goes into a vein."""
    if not text:
        return 0.0
    days = _duration(text, f"{where}, over", check, ("min", "h"))
    if days is None:
        return None
    if profile.forms[form].absorption is not None:
        check.say(
            f"{where}, over", f"{text} was given for {profile.forms[form].words}", "no infusion time", "Remove it"
        )
        return None
    hours = round(days * 24, 9)
    if not 1 / 60 - 1e-9 <= hours <= 24:
        check.say(f"{where}, over", f"{text} was given", "1 min to 24 h (both ends count)", "Check the infusion time")
        return None
    return hours


def _rate(
    file: DoseFile | ProposedFile,
    form: str,
    where: str,
    hours: float,
    check: _Check,
    profile: Profile,
    weight_kg: float | None,
) -> float | None:
    """A continuous infusion in labelled mg/day. hours: as long as it runs, where that is known."""
    known = profile.forms[form]
    only = ("mg PE/min", "mg PE/day") if known.amount_unit == "mg PE" else ("mg/h", "g/h", "mg/min", "mg/day", "g/day")
    if _is_in(file.rate, "mL/h"):
        hourly = _in_mL(file.rate, file.product, form, f"{where}, rate", check, profile)
        typed = None if hourly is None else Typed(file.rate, 24 * hourly, "mL/h")
    elif _is_in(file.rate, "mg/kg/h") and profile.time_unit == "h":
        per_kg = check.attempt(units.read, file.rate, "dose rate per weight", f"{where}, rate")
        if per_kg is not None and weight_kg is None:
            given = f"{file.rate} was given without a weight"
            check.say(f"{where}, rate", given, "a rate per kg with a weight, or a rate in mg/h", "Give the weight")
        typed = None if per_kg is None or weight_kg is None else Typed(file.rate, per_kg.value * weight_kg, "mg/kg/h")
    else:
        typed = check.attempt(units.read, file.rate, "dose rate", f"{where}, rate", only=only)
    if typed is None:
        return None
    if known.absorption is not None:
        check.say(f"{where}, rate", f"{file.rate} was given for {known.words}", "a form for a vein", "Check the form")
        return None
    if typed.value / 24 * min(hours, 1.0) > known.largest_dose_mg:
        most = f"up to {units.show_number(known.largest_dose_mg)} {known.amount_unit} in an hour of {known.words}"
        check.say(f"{where}, rate", f"{file.rate} was given", most, "Check the number and its unit")
        return None
    return typed.value


def _regimen(
    file: ProposedFile, where: str, check: _Check, profile: Profile, weight_kg: float | None
) -> Regimen | None:
    if file.rate:
        if file.amount or file.every or file.daily:
            check.say(where, "a rate and doses were both given", "one of the two", "Remove one of them")
        form = _form(file.form, f"{where}, form", check, profile)
        rate = _rate(file, form, where, 1.0, check, profile, weight_kg) if form else None
        return None if form is None or rate is None else continuous(form, rate)
    return _intakes(file.form, file.amount, file.every, file.daily, "", where, None, check, profile, file.product)


def _course(
    i: int, file: DoseFile, check: _Check, profile: Profile, weight_kg: float | None, named: bool
) -> Course | None:
    """One dose line. named: a level says that it was drawn on it, so a rate is known to have held without its times."""
    where = f"Dose line {i + 1}"
    before = len(check.problems)
    start = _optional_time(file.from_, f"{where}, from", check)
    end = _optional_time(file.until, f"{where}, until", check)
    about = _duration(file.for_about, f"{where}, for about", check) if file.for_about else None
    regimen: Regimen | None = None
    single: Intake | None = None
    rate: float | None = None
    given = {"at": file.at, "rate": file.rate, "every or daily": file.every or file.daily}
    shapes = [name for name, value in given.items() if value]
    if len(shapes) != 1:
        check.say(
            where,
            f"{' and '.join(shapes)} were both given" if shapes else "it is not clear what kind of line this is",
            "amount with every, or daily, or at, or rate",
            "Give exactly one of them",
        )
        return None
    if file.at:
        at = _optional_time(file.at, f"{where}, at", check)
        form = _form(file.form, f"{where}, form", check, profile)
        value = _amount(file.amount, form, f"{where}, amount", check, profile, file.product) if form else None
        over_h = _over_h(file.over, form, where, check, profile) if form else None
        if file.from_ or file.until or file.for_about or file.missed:
            given_too = "from, until, for about or missed was given for a single dose"
            check.say(where, given_too, "at alone", "Remove them, or give every instead of at")
        if at is not None and form is not None and value is not None and over_h is not None:
            single = Intake(form=form, hour=0.0, labelled_mg=value, over_h=over_h)
            start = at
    elif file.rate:
        form = _form(file.form, f"{where}, form", check, profile)
        if file.amount or file.over or file.for_about or file.missed:
            given_too = "amount, over, for about or missed was given for a continuous infusion"
            check.say(where, given_too, "rate with from and until", "Remove them")
        # only a drug that is followed by levels while it runs may still be running
        if profile.sampling.repeat_h is None and not (file.from_ and file.until):
            check.say(where, "an infusion was given without both ends", "from and until", "Add both clock times")
        elif not file.from_ and not (named and not file.until):
            check.say(
                where,
                "an infusion was given without its start",
                "from, and until once it has ended",
                "Add the clock time",
            )
        elif form is not None and (start is not None or not file.from_) and (end is not None or not file.until):
            known = start is not None and end is not None and _comparable(start, end)
            hours = 24 * days_between(start, end) if known and start is not None and end is not None else 1.0
            rate = _rate(file, form, where, hours, check, profile, weight_kg)
    else:
        regimen = _intakes(
            file.form, file.amount, file.every, file.daily, file.over, where, start, check, profile, file.product
        )
        if file.from_ and file.for_about:
            check.say(where, "from and for about were both given", "one of the two", "Remove one of them")
        elif file.for_about and file.missed:
            given_too = "missed doses were listed for a line without a start"
            check.say(where, given_too, "missed with from", "Give from instead of for about")
    if start is not None and end is not None and _comparable(start, end) and end <= start:
        check.say(
            where,
            f"it ends ({show_time(end)}) before or when it starts ({show_time(start)})",
            "an end after the start",
            "Check both times",
        )
    if about is not None and about > 36525:
        check.say(f"{where}, for about", f"{file.for_about} was given", "up to 100 years", "Check the length")
    missed = tuple(
        x
        for j, text in enumerate(file.missed)
        if (x := _optional_time(text, f"{where}, missed dose {j + 1}", check)) is not None
    )
    if len(check.problems) > before:
        return None
    return Course(
        index=i,
        regimen=regimen,
        single=single,
        rate_mg_per_day=rate,
        rate_form=file.form if rate is not None else "",
        start=start,
        end=end,
        for_about_days=about,
        missed=missed,
        source=file.source,
        given_by=file.given_by,
        confirmed=file.confirmed,
        typed=file,
    )


def _session(i: int, file: DialysisFile, check: _Check, profile: Profile) -> Session | None:
    where = f"Dialysis session {i + 1}"
    known = profile.dialysis
    if known is None:
        check.say(
            where,
            f"a session was given for {profile.name}",
            "no session: the drug file holds no clearance by dialysis",
            "Remove it and go by measured levels",
        )
        return None
    before = len(check.problems)
    start = check.attempt(read_time, file.from_, f"{where}, from")
    end = _optional_time(file.until, f"{where}, until", check)
    clearance = known.clearance_L_per_day
    if file.clearance:
        typed = check.attempt(units.read, file.clearance, "clearance", f"{where}, clearance", only=("mL/min", "L/h"))
        if typed is not None:
            clearance = typed.value
            low, high = (x / 1.44 for x in known.gate_L_per_day)
            fix = "Give the clearance of this drug, not the blood flow"
            _gate(clearance / 1.44, low, high, f"{where}, clearance", file.clearance, "mL/min", fix, check)
    if start is not None and end is not None and _comparable(start, end) and end <= start:
        check.say(
            where,
            f"it ends ({show_time(end)}) before or when it starts ({show_time(start)})",
            "an end after the start",
            "Check both times",
        )
    if start is None or len(check.problems) > before:
        return None
    return Session(i, start, end, clearance, not file.clearance, file)


def _comparable(a: datetime, b: datetime) -> bool:
    """Both with an offset or both without; a mixture is reported for the whole case."""
    return (a.tzinfo is None) == (b.tzinfo is None)


def _earlier(i: int, file: EarlierForecastFile, check: _Check, profile: Profile) -> EarlierForecast | None:
    where = f"Earlier forecast {i + 1}"
    drawn = _optional_time(file.drawn, f"{where}, drawn", check)
    values = [
        _level_value(getattr(file, name), f"{where}, {name}", check, profile) for name in ("median", "low", "high")
    ]
    if drawn is None or any(v is None for v in values):
        return None
    median, low, high = (float(v) for v in values if v is not None)
    if not low <= median <= high:
        check.say(where, "low, median and high are not in order", "low to high", "Check the three numbers")
        return None
    return EarlierForecast(drawn, file.kind, median, low, high, file.version, file.regimen)


def _reentry(file: ReentryFile, check: _Check) -> Reentry | None:
    """The record of a re-entry, refused where it contradicts itself; whether it still fits is told in the note."""
    again = "Compare the two entries again and keep the new record"
    done = _optional_time(file.done, "Reentry, done", check)
    if not file.done:
        check.say("Reentry, done", "nothing was given", "date and time of the comparison", again)
    missing = [x for x in ("patient", "doses", "levels") if x not in file.compared]
    if missing:
        given = f"{' and '.join(missing)} {'is' if len(missing) == 1 else 'are'} not among what was compared"
        check.say("Reentry, compared", given, "at least patient, doses and levels", again)
    if len(set(file.compared)) < len(file.compared):
        check.say("Reentry, compared", "a part stands twice", "each part once", again)
    for name, places in (("differences", file.differences), ("left", file.left)):
        if len(set(places)) < len(places) or "" in places:
            check.say(f"Reentry, {name}", "a place is empty or stands twice", "each place once", again)
    unknown = [x for x in file.left if x not in file.differences]
    if unknown:
        given = f'"{as_typed(unknown[0])}" is left although it is not among the differences'
        check.say("Reentry, left", given, "places that stand under differences too", again)
    if not re.fullmatch("[0-9a-f]{12}", file.facts):
        check.say("Reentry, facts", "it is no fingerprint", "12 signs of 0 to 9 and a to f", again)
    return None if done is None else Reentry(done, file.compared, file.differences, file.left, file.facts)


def _check_zones(case: Case, check: _Check) -> None:
    moments = [m for c in case.courses for m in (c.start, c.end, *c.missed) if m is not None]
    moments += [x.drawn for x in case.levels if x.drawn is not None]
    moments += [m for m in (case.now, case.plan_start, case.load_at, case.next_draw) if m is not None]
    moments += [e.drawn for e in case.earlier]
    moments += [m for s in case.dialysis for m in (s.start, s.end) if m is not None]
    moments += [a.taken for a in (case.albumin, *(x.albumin for x in case.levels)) if a is not None and a.taken]
    moments += [c.since for c in case.context.values() if c.since is not None and c.since.tzinfo is not None]
    aware = [m.tzinfo is not None for m in moments]
    if any(aware) and not all(aware):
        check.say(
            "Times",
            "some clock times carry a time zone offset and some do not",
            "all with an offset or all without",
            "Add the offset to all, or remove it from all",
        )


def _check_order(case: Case, check: _Check) -> None:
    def not_after_consult(moment: datetime | None, where: str, what: str, fix: str) -> None:
        if case.now is not None and moment is not None and moment > case.now:
            given = f"{what} at {show_time(moment)}, after the consult ({show_time(case.now)})"
            check.say(where, given, "a time before the consult", fix)

    for level in case.levels:
        where = f"Level {level.index + 1}"
        not_after_consult(level.drawn, f"{where}, drawn", "it was drawn", "Check the dates")
        if level.albumin is not None:
            not_after_consult(level.albumin.taken, f"{where}, albumin, taken", "it was taken", "Check the dates")
    if case.albumin is not None:
        not_after_consult(case.albumin.taken, "Albumin, taken", "it was taken", "Check the dates")
    ends = [m for m in (case.now, *(x.drawn for x in case.levels)) if m is not None]
    doses = 0.0
    if case.load_at is not None and case.now is not None and case.load_at < case.now:
        check.say(
            "Plan, load, at",
            f"it is planned for {show_time(case.load_at)}, before the consult ({show_time(case.now)})",
            "a time after the consult",
            "Check the date; a load already given belongs into the record of doses",
        )
    for course in case.courses:
        key = "at" if course.single is not None else "from"
        not_after_consult(
            course.start,
            f"Dose line {course.index + 1}, {key}",
            "it starts",
            "The record holds what was given; put what is planned under proposed",
        )
        _check_missed(course, check)
        if course.regimen is not None and course.start is not None and (course.end or ends):
            doses += course.regimen.number_of_doses(course.start, course.end or max(ends))
    if doses > MAX_DOSES:
        check.say(
            "Doses",
            f"the lines make about {doses:,.0f} doses",
            f"at most {MAX_DOSES:,} doses",
            "Begin the record later, or say for about how long the first dose was taken",
        )


def _check_missed(course: Course, check: _Check) -> None:
    where = f"Dose line {course.index + 1}, missed"
    if course.regimen is None or course.start is None:
        return
    for j, moment in enumerate(course.missed):
        if moment < course.start or (course.end is not None and moment > course.end):
            given = f"{show_time(moment)} lies outside the line's own time"
            check.say(f"{where} dose {j + 1}", given, "a time within the line", "Check the date")
        elif not course.regimen.has_dose_at(moment, course.start):
            given = f"no dose was due at {show_time(moment)}"
            fix = "Give the time the dose was due"
            check.say(f"{where} dose {j + 1}", given, "the clock time of a dose of this line", fix)


# --- looking over a checked case -----------------------------------------------------------------------


def overlapping_lines(case: Case) -> tuple[int, ...]:
    """Dose lines (0 for the first) that go on at the same time as another: perhaps one was stopped, or entered twice.

    Regimens and infusions that count as given. Lines without a start, of which only the length is known, run together.
    """
    lines = [c for c in case.courses if c.counts_as_given and c.single is None]
    open_ended = [c.index for c in lines if c.start is None and c.for_about_days is not None]
    hits = set(open_ended) if len(open_ended) > 1 else set()
    running: list[Course] = []
    for start, course in sorted(((c.start, c) for c in lines if c.start is not None), key=lambda x: (x[0], x[1].index)):
        running = [c for c in running if c.end is None or c.end > start]
        if running:
            hits |= {course.index, *(c.index for c in running)}
        running.append(course)
    return tuple(sorted(hits))


_MONTH = "jan|feb|mar|apr|may|jun|jul|aug|sep|oct|nov|dec"
_IDENTIFIER = re.compile(
    r"(?:\d[ \-./]?){5,}\d"  # a long number, also in groups
    r"|\d{5,}"
    r"|\d{1,4}[-/. ]\d{1,2}[-/. ]\d{1,4}"  # a date in figures
    rf"|\d{{1,2}}(?:st|nd|rd|th)?[-. ]?(?i:{_MONTH})[a-z]*[-., ]*\d{{2,4}}"  # a date with its month in words
    r"|\b[A-Z][a-z]+,? [A-Z][a-z]+\b"  # two capitalised words in a row
)


def label_looks_like_identifier(text: str) -> bool:
    """True where a label holds a long number, a date, or two capitalised words in a row (as a name has)."""
    return bool(_IDENTIFIER.search(text))


# --- writing ---------------------------------------------------------------------------------------------


def dump_case_file(file: CaseFile) -> str:
    """Case file as JSON text; reading it back gives the same file."""
    data = file.model_dump(mode="json", by_alias=True, exclude_defaults=True)
    return json.dumps(data, indent=2, ensure_ascii=False) + "\n"


def dump_case(case: Case) -> str:
    """Checked case back to the text it came from (canonical layout)."""
    return dump_case_file(case.file)


def case_schema() -> dict[str, Any]:
    """The JSON Schema of the case file."""
    schema = CaseFile.model_json_schema(by_alias=True)
    schema["$schema"] = "https://json-schema.org/draft/2020-12/schema"
    schema["title"] = "pkcalc case file"
    schema["properties"]["drug"]["enum"] = [*drug_names()]
    schema["allOf"] = [_schema_of_drug(load_profile(name)) for name in drug_names()]
    return schema


def _schema_of_drug(profile: Profile) -> dict[str, Any]:
    """What a case of one drug may name: its context questions, and the other drugs whose levels it asks for."""
    others = {"propertyNames": {"enum": [*profile.other_levels]}} if profile.other_levels else {"maxProperties": 0}
    level = {"properties": {"other_levels": others}}
    return {
        "if": {"properties": {"drug": {"const": profile.id}}, "required": ["drug"]},
        "then": {
            "properties": {
                "context": {"propertyNames": {"enum": [*profile.questions]}},
                "levels": {"items": level},
            }
        },
    }
