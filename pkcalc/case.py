"""The case: what a person typed about one patient, checked as a whole, every problem reported at once.

`CaseFile` is the file format (JSON, text with units), `Case` the checked record that everything else reads.
A case keeps the text as typed beside each value, so that the note can show both.
"""

from __future__ import annotations

import difflib
import hashlib
import json
import re
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass, field
from datetime import datetime, timedelta
from pathlib import Path
from typing import Annotated, Any, Literal, TypeVar

from pydantic import BaseModel, ConfigDict, Field, StringConstraints, ValidationError

from pkcalc import units
from pkcalc.clock import days_between, read_time, read_time_of_day, show_time
from pkcalc.dosing import Intake, Regimen, intake_problem
from pkcalc.drugs.profile import Profile, drug_names, load_profile
from pkcalc.errors import CaseError, DrugFileError, Problem
from pkcalc.units import Typed

FORMAT_VERSION = 1
MAX_BYTES = 2_000_000
MAX_DEPTH = 24
MAX_LINES_OF_RECORD = 5_000

Answer = Literal["yes", "no", "unknown"]
Kind = Literal["total", "free", "normalised"]

Text = Annotated[str, StringConstraints(max_length=200, strip_whitespace=True)]
LongText = Annotated[str, StringConstraints(max_length=4000)]

#: The context questions, in the order they are asked. Each is yes, no or unknown; silence stands on the note
#: as "not stated".
QUESTIONS: dict[str, str] = {
    "seizing_now": "Is the patient seizing now (status epilepticus)?",
    "overdose": "Is an acute overdose suspected?",
    "seizures_since_change": "Have there been seizures since the last change of dose?",
    "toxic_signs": "Are there signs of toxicity (nystagmus, ataxia, drowsiness)?",
    "recent_load": "Was any load or IV dose given in the last 72 h (emergency department, ambulance, other hospital)?",
    "renal_failure": "Does the patient have end-stage renal failure or dialysis?",
    "renal_reduced": "Is kidney function reduced, short of dialysis?",
    "hepatic_failure": "Does the patient have hepatic failure?",
    "valproate": "Is valproate being taken?",
    "interacting_change": "Was an interacting drug started or stopped within the last 4 weeks?",
    "pregnancy": "Is the patient pregnant?",
    "delivery": "Has the patient given birth within the last 8 weeks?",
    "tube_feed": "Is the patient tube fed?",
    "tube_feed_change": "Were tube feeds started, stopped or changed since the dose was last changed?",
    "form_change": "Was the product, brand or salt changed since the dose was last changed?",
    "im_route": "Was any dose given into a muscle?",
    "critical_illness": "Is the patient critically ill or injured (intensive care, trauma, burns)?",
    "extracorporeal": "Is there renal replacement, plasma exchange or ECMO?",
    "temperature_management": "Is there targeted temperature management, rewarming or barbiturate coma?",
    "cyp2c9_reduced": "Is reduced CYP2C9 function known?",
    "hla_b1502": "Is HLA-B*15:02 positive?",
    "new_start": "Is this drug being started for the first time?",
    "heart_block": "Is there heart block, bradycardia or serious heart disease?",
    "adherence_doubtful": "Is it doubtful that the doses were taken as recorded?",
}

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
    amount: Text = Field("", description='Amount of each dose, for example "300 mg".')
    every: Text = Field("", description='For example "24 h", "12 h" or "48 h"; with amount.')
    daily: tuple[ClockDoseFile, ...] = Field((), description="Doses by time of day, instead of amount and every.")
    at: Text = Field("", description="Clock time of a single dose; with amount.")
    over: Text = Field("", description='Infusion time, for example "30 min".')
    rate: Text = Field("", description='A continuous infusion, for example "7 g/h"; with from and until.')
    from_: Text = Field("", alias="from", description="Clock time of the first dose.")
    until: Text = Field("", description="Clock time after which no dose was given; empty: still going on.")
    for_about: Text = Field("", description='Instead of from, where only the length is known: "3 months".')
    missed: tuple[Text, ...] = Field((), description="Clock times of doses known to be missed, held or refused.")
    source: Literal["given", "ordered", "stated"] = "given"
    given_by: Literal["nurse", "carer", "self", "unknown"] = "unknown"
    confirmed: Answer = Field("unknown", description="For ordered or stated lines: did a person confirm it?")
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
    valproate_level: Text = ""
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
    amount: Text = ""
    every: Text = ""
    daily: tuple[ClockDoseFile, ...] = ()


class LoadFile(BaseModel):
    """A load or top-up the pharmacist wants to see."""

    model_config = _FILE
    form: Text
    aim: Text = ""
    at: Text = ""


class PlanFile(BaseModel):
    """What is asked of the plan."""

    model_config = _FILE
    shelf: Text = Field("", description="A generic country shelf of the drug profile.")
    products: tuple[Text, ...] = Field((), description="Restricts the shelf to these products.")
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
    version: Text = ""


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
    context: dict[str, Answer | AnswerFile] = Field(default_factory=dict)
    doses: tuple[DoseFile, ...] = ()
    levels: tuple[LevelFile, ...] = ()
    target: TargetFile | None = None
    aim: Text = Field("", description='The level aimed at, for example "15 mg/L".')
    proposed: tuple[ProposedFile, ...] = ()
    population: Text = Field("", description="A named population of the drug profile.")
    method: Literal["", "two levels", "whole record", "lines"] = ""
    plan: PlanFile = PlanFile()
    chosen: ChosenFile | None = None
    forecast_then: tuple[EarlierForecastFile, ...] = ()


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

    @property
    def counts_as_given(self) -> bool:
        return self.source == "given" or self.confirmed == "yes"


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
    valproate_mg_per_L: float | None
    sample: str

    @property
    def reported_mg_per_L(self) -> float:
        return self.typed.value


@dataclass(frozen=True)
class Target:
    """Target range in mg/L of its kind, with where it comes from."""

    low_mg_per_L: float
    high_mg_per_L: float
    kind: str
    origin: str


@dataclass(frozen=True)
class EarlierForecast:
    """A forecast of an earlier note, in mg/L of its kind."""

    drawn: datetime
    kind: Kind
    median_mg_per_L: float
    low_mg_per_L: float
    high_mg_per_L: float
    version: str


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

    def answer(self, question: str) -> str:
        """'yes', 'no', 'unknown' or 'not stated'."""
        found = self.context.get(question)
        return found.answer if found else "not stated"

    @property
    def origin(self) -> datetime | None:
        """The earliest clock time of the case; times inside are days since then."""
        moments = [
            x
            for x in (
                *(c.start for c in self.courses),
                *(level.drawn for level in self.levels),
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


class _Check:
    """Collects problems, so that all are reported at once."""

    def __init__(self) -> None:
        self.problems: list[Problem] = []

    def attempt(self, make: Callable[[], T]) -> T | None:
        try:
            return make()
        except CaseError as error:
            self.problems.extend(error.problems)
            return None

    def say(self, where: str, given: str, allowed: str, fix: str) -> None:
        self.problems.append(Problem(where, given, allowed, fix))


# --- reading ---------------------------------------------------------------------------------------------


def read_case_text(text: str | bytes, *, name: str = "Case file") -> Case:
    """JSON text -> checked Case; CaseError with every problem (and its line where the text allows)."""
    return check_case(parse_case_text(text, name=name))


def load_case(path: str | Path) -> Case:
    """A case file -> checked Case."""
    file = Path(path)
    try:
        size = file.stat().st_size
        if size > MAX_BYTES:
            raise CaseError(_too_large(str(file), size))
        data = file.read_bytes()
    except OSError as error:
        reason = (error.strerror or "it cannot be read").lower()
        raise CaseError(
            Problem(f"Case file {file.name}", f"the file could not be opened ({reason})", "", "Check name and folder")
        ) from None
    return read_case_text(data, name=f"Case file {file.name}")


def _too_large(name: str, size: int) -> Problem:
    return Problem(
        name,
        f"{size / 1e6:,.0f} MB were given",
        f"at most {MAX_BYTES / 1e6:.0f} MB",
        "Give the case of one patient only",
    )


def _no_duplicates(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    seen: dict[str, Any] = {}
    for key, value in pairs:
        if key in seen:
            raise CaseError(
                Problem(f'Key "{key[:40]}"', "it stands twice in the same place", "each key once", "Remove one of the two")
            )
        seen[key] = value
    return seen


def _no_constant(word: str) -> Any:
    raise CaseError(Problem("Case file", f"{word} was given as a number", "text with its unit", "Correct the value"))


def parse_case_text(text: str | bytes, *, name: str = "Case file") -> CaseFile:
    """JSON text -> CaseFile, structure checked only."""
    if isinstance(text, bytes):
        if len(text) > MAX_BYTES:
            raise CaseError(_too_large(name, len(text)))
        try:
            text = text.decode("utf-8-sig")
        except UnicodeDecodeError as error:
            raise CaseError(
                Problem(name, f"byte {error.start + 1} is not UTF-8 text", "UTF-8 text", "Save the file as UTF-8")
            ) from None
    if len(text) > MAX_BYTES:
        raise CaseError(_too_large(name, len(text)))
    depth = deepest = 0
    for mark in re.finditer(r'"(?:[^"\\]|\\.)*"|[\[{]|[\]}]', text):
        first = mark.group()[0]
        depth += (first in "[{") - (first in "]}")
        deepest = max(deepest, depth)
        if deepest > MAX_DEPTH:
            raise CaseError(
                Problem(name, "the text is nested too deeply", f"at most {MAX_DEPTH} levels", "Check the brackets")
            )
    try:
        raw = json.loads(text, object_pairs_hook=_no_duplicates, parse_constant=_no_constant)
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
        raise CaseError(Problem(name, "the text is not a case", "a JSON object", "Start from pkcalc schema"))
    version = raw.get("pkcalc_case")
    if isinstance(version, int) and not isinstance(version, bool) and version > FORMAT_VERSION:
        raise CaseError(
            Problem(
                name,
                f"the case was written in format version {version}",
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
        "context": AnswerFile,
    }
    for step in reversed(path):
        if isinstance(step, str) and step in models:
            return models[step]
    return CaseFile


def _line_of(text: str, path: tuple[int | str, ...]) -> str:
    """The line of the last key of the path, where that key occurs once in the text."""
    keys = [step for step in path if isinstance(step, str)]
    if not keys:
        return ""
    hits = [m.start() for m in re.finditer(re.escape(json.dumps(keys[-1])) + r"\s*:", text)]
    return f" (line {text.count(chr(10), 0, hits[0]) + 1})" if len(hits) == 1 else ""


def _explain(error: ValidationError, text: str) -> list[Problem]:
    problems: list[Problem] = []
    seen: set[tuple[int | str, ...]] = set()
    for item in error.errors(include_url=False, include_context=True):
        path = tuple(item["loc"])
        if path and path[0] == "context" and len(path) > 2 and path[2] != "AnswerFile":
            path = path[:2]
        elif path and path[0] == "context" and len(path) == 3:
            path = path[:2]
        if path in seen:
            continue
        seen.add(path)
        where = place_in_words(path) + _line_of(text, path)
        kind = item["type"]
        if kind == "extra_forbidden":
            known = [f.alias or n for n, f in _model_at(path[:-1]).model_fields.items()]
            near = difflib.get_close_matches(str(path[-1]), known, n=1, cutoff=0.5)
            fix = f'Did you mean "{near[0]}"?' if near else "Remove it"
            problems.append(Problem(where, "this key is not known", ", ".join(sorted(known)), fix))
        elif kind == "missing":
            problems.append(Problem(where, "it is missing", "a value", "Add it"))
        elif kind in ("literal_error", "model_type", "union_tag_invalid") and path and path[0] == "context":
            problems.append(Problem(where, "the answer is not understood", "yes, no or unknown", "Choose one of them"))
        elif kind == "literal_error":
            allowed = str(item.get("ctx", {}).get("expected", "")).replace("'", "")
            problems.append(Problem(where, "the word is not understood", allowed, "Choose one of them"))
        elif kind == "string_too_long":
            most = item.get("ctx", {}).get("max_length", 200)
            problems.append(Problem(where, "the text is too long", f"at most {most} characters", "Shorten it"))
        elif kind == "string_type":
            problems.append(
                Problem(where, "something other than text was given", 'text such as "300 mg"', "Put number and unit in quotes")
            )
        else:
            expected = {"tuple_type": "a list in [ ]", "model_type": "an object in { }", "dict_type": "an object in { }"}
            problems.append(
                Problem(
                    where,
                    "the value is not of the expected kind",
                    expected.get(kind, "see pkcalc schema"),
                    "Compare with pkcalc schema",
                )
            )
    return problems


# --- checking --------------------------------------------------------------------------------------------


def check_case(file: CaseFile) -> Case:
    """CaseFile -> Case: every value read, every contradiction reported together."""
    check = _Check()
    if file.pkcalc_case != FORMAT_VERSION:
        check.say("Pkcalc case", f"format version {file.pkcalc_case}", f"{FORMAT_VERSION}", "Correct the version")
    profile = check.attempt(lambda: _profile(file.drug))
    if profile is None:
        raise CaseError(check.problems)
    patient = _patient(file, check, profile)
    now = check.attempt(lambda: read_time(file.now, "Time of the consult")) if file.now else None
    courses = tuple(
        x for i, line in enumerate(file.doses) if (x := _course(i, line, check, profile)) is not None
    )
    if len(file.doses) > MAX_LINES_OF_RECORD:
        check.say(
            "Doses", f"{len(file.doses):,} lines were given", f"at most {MAX_LINES_OF_RECORD:,}", "Use repeated regimens"
        )
    levels = tuple(
        read
        for i, level in enumerate(file.levels)
        if (read := _level(i, level, check, profile, len(file.doses))) is not None
    )
    albumin = _albumin(file.albumin, "Albumin", check)
    context = _context(file, check)
    target = _target(file.target, check, profile)
    aim = _level_value(file.aim, "Aim", check, profile)
    if aim is not None and target is not None and target.kind == "total":
        if not target.low_mg_per_L <= aim <= target.high_mg_per_L:
            check.say(
                "Aim",
                f"{file.aim} lies outside the target range {_range_words(target)}",
                _range_words(target),
                "Change the aim or the target range",
            )
    proposed = tuple(
        regimen
        for i, p in enumerate(file.proposed)
        if (regimen := _regimen(p, f"Proposed regimen {i + 1}", check, profile)) is not None
    )
    chosen = None
    if file.chosen is not None and file.chosen.regimen is not None:
        chosen = _regimen(file.chosen.regimen, "Chosen regimen", check, profile)
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
    earlier = tuple(
        then for i, e in enumerate(file.forecast_then) if (then := _earlier(i, e, check, profile)) is not None
    )
    step = None
    if file.plan.largest_step:
        typed = check.attempt(lambda: units.read(file.plan.largest_step, "dose rate", "Plan, largest step"))
        step = typed.value if typed else None
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
        load_aim_mg_per_L=_level_value(file.plan.load.aim, "Plan, load, aim", check, profile) if file.plan.load else None,
        load_at=_optional_time(file.plan.load.at, "Plan, load, at", check) if file.plan.load else None,
        restart_level_mg_per_L=_level_value(file.plan.restart_level, "Plan, restart level", check, profile),
        plan_start=_optional_time(file.plan.start, "Plan, start", check),
        next_draw=_optional_time(file.chosen.next_draw, "Chosen, next draw", check) if file.chosen else None,
    )
    if file.plan.load and file.plan.load.form not in profile.forms:
        check.say("Plan, load, form", f'"{file.plan.load.form}" was given', ", ".join(profile.forms), "Choose a form")
    _check_zones(case, check)
    if not check.problems:
        _check_order(case, check)
    if check.problems:
        raise CaseError(check.problems)
    return case


def _profile(name: str) -> Profile:
    if name not in drug_names():
        raise CaseError(Problem("Drug", f'"{name[:40]}" was given', ", ".join(drug_names()), "Choose one of these"))
    try:
        return load_profile(name)
    except DrugFileError as error:
        raise CaseError(Problem("Drug", f"the drug file cannot be used: {error}", "", "Tell the maintainers")) from None


def _optional_time(text: str, where: str, check: _Check) -> datetime | None:
    return check.attempt(lambda: read_time(text, where)) if text else None


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
        read = check.attempt(lambda: units.read(p.age, "age", "Age", zero_allowed=True))
        if read:
            age = read.value
            _gate(age, 0, 120, "Age", p.age, "years", "Check the age and its unit", check)
    if p.weight:
        read = check.attempt(lambda: units.read(p.weight, "weight", "Weight"))
        if read:
            weight = read.value
            _gate(weight, 0.4, 400, "Weight", p.weight, "kg", "Check the weight and its unit", check)
            if age is not None and age >= 17 and weight < 25:
                check.say(
                    "Weight", f"{p.weight} at {p.age}", "25 kg or more from 17 years", "Check the weight, its unit and the age"
                )
            if age is not None and age < 6 and weight > 60:
                check.say("Weight", f"{p.weight} at {p.age}", "60 kg or less under 6 years", "Check weight and age")
    if p.height:
        read = check.attempt(lambda: units.read(p.height, "height", "Height"))
        if read:
            height = read.value
            _gate(height, 25, 250, "Height", p.height, "cm", "Check the height and its unit", check)
    return Patient(
        age_years=age, sex=p.sex, weight_kg=weight, weight_basis=p.weight_basis, height_cm=height, typed=typed
    )


def _albumin(file: AlbuminFile | None, where: str, check: _Check) -> Albumin | None:
    if file is None:
        return None
    typed = check.attempt(lambda: units.read(file.value, "albumin", where))
    taken = _optional_time(file.taken, f"{where}, taken", check)
    if typed is None:
        return None
    number = units.split_label(file.value)[0]
    if typed.label == "g/dL" and typed.value > 60:
        check.say(
            where, f"{file.value} was given", "1 to 6 g/dL (both ends count)", f"Did you mean {number} g/L? Check the unit"
        )
    elif typed.label == "g/L" and typed.value < 10:
        check.say(
            where, f"{file.value} was given", "10 to 60 g/L (both ends count)", f"Did you mean {number} g/dL? Check the unit"
        )
    elif not 10 <= typed.value <= 60:
        check.say(
            where,
            f"{file.value} was given",
            "10 to 60 g/L (1 to 6 g/dL; both ends count)",
            "Check the number and its unit against the laboratory report",
        )
    return Albumin(typed=typed, taken=taken, method=file.method, after_infusion=file.after_infusion)


def _context(file: CaseFile, check: _Check) -> dict[str, Context]:
    found: dict[str, Context] = {}
    for key, given in file.context.items():
        if key not in QUESTIONS:
            near = difflib.get_close_matches(key, QUESTIONS, n=1, cutoff=0.5)
            fix = f'Did you mean "{near[0]}"?' if near else "Remove it"
            check.say(f"Context, {key[:40]}", "this question is not known", ", ".join(QUESTIONS), fix)
        elif isinstance(given, str):
            found[key] = Context(answer=given)
        else:
            since = _optional_time_or_date(given.since, f"Context, {key}, since", check)
            found[key] = Context(answer=given.answer, since=since, detail=given.detail)
    if _says(found, "renal_failure") and _says(found, "renal_reduced", "no"):
        pass
    if _says(found, "pregnancy") and file.patient.sex == "male":
        check.say("Context, pregnancy", "yes was answered for a male patient", "no, or sex female", "Correct one of them")
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


def _optional_time_or_date(text: str, where: str, check: _Check) -> datetime | None:
    return check.attempt(lambda: read_time(text, where, time_needed=False)) if text else None


def _read_level(text: str, where: str, profile: Profile) -> Typed:
    return units.read(
        text, "level", where, molar_mass_g_per_mol=profile.molar_mass_g_per_mol, only=profile.level_units
    )


def _level_value(text: str, where: str, check: _Check, profile: Profile) -> float | None:
    if not text:
        return None
    typed = check.attempt(lambda: _read_level(text, where, profile))
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
    typed = check.attempt(lambda: _read_level(text, where, profile))
    drawn = _optional_time(file.drawn, f"{where}, drawn", check)
    albumin = _albumin(file.albumin, f"{where}, albumin", check)
    valproate = None
    if file.valproate_level:
        read = check.attempt(
            lambda: units.read(file.valproate_level, "level", f"{where}, valproate level", only=("mg/L", "mcg/mL"))
        )
        if read:
            valproate = read.value
            _gate(valproate, 1, 300, f"{where}, valproate level", file.valproate_level, "mg/L", "Check it", check)
    if file.kind == "normalised" and not file.normalised_by:
        check.say(
            f"{where}, normalised by",
            "a normalised level was given without saying who normalised it",
            'for example "laboratory"',
            "Say who normalised it, or give the measured total and the albumin",
        )
    if file.on_dose is not None and not 1 <= file.on_dose <= n_lines:
        check.say(f"{where}, on dose", f"line {file.on_dose} was named", f"1 to {n_lines}", "Name a line of the record")
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
        valproate_mg_per_L=valproate,
        sample=file.sample,
    )


def _target(file: TargetFile | None, check: _Check, profile: Profile) -> Target | None:
    if file is None:
        return None
    low = check.attempt(lambda: _read_level(file.low, "Target, low", profile))
    high = check.attempt(lambda: _read_level(file.high, "Target, high", profile))
    if low is None or high is None:
        return None
    if low.value >= high.value:
        check.say(
            "Target", f"{file.low} to {file.high} was given", "a low end below the high end", "Swap or correct the two"
        )
    gate_low, gate_high = profile.level_gate_mg_per_L(file.kind)
    _gate(high.value, gate_low, gate_high, "Target, high", file.high, "mg/L", "Check number and unit", check)
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
        near = difflib.get_close_matches(text, profile.forms, n=1, cutoff=0.4)
        fix = f'Did you mean "{near[0]}"?' if near else "Choose one of these"
        check.say(where, f'"{text}" was given', ", ".join(profile.forms), fix)
        return None
    return text


def _amount(text: str, form: str, where: str, check: _Check, profile: Profile) -> float | None:
    unit = profile.forms[form].amount_unit
    only = ("mg PE",) if unit == "mg PE" else tuple(x for x in ("mg", "g"))
    typed = check.attempt(lambda: units.read(text, "amount", where, only=only))
    if typed is None:
        return None
    problem = intake_problem(typed.value, profile.forms[form], where, text)
    if problem:
        check.problems.append(problem)
        return None
    return typed.value


def _duration(text: str, where: str, check: _Check, only: tuple[str, ...] | None = None) -> float | None:
    typed = check.attempt(lambda: units.read(text, "duration", where, only=only))
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
) -> Regimen | None:
    infusion_h = 0.0
    if over:
        days = _duration(over, f"{where}, over", check, ("min", "h"))
        if days is None:
            return None
        infusion_h = days * 24
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
            hour = check.attempt(lambda d=dose, s=spot: read_time_of_day(d.time, f"{s}, time"))  # type: ignore[misc]
            form = _form(dose.form or form_text, f"{spot}, form", check, profile)
            value = _amount(dose.amount, form, f"{spot}, amount", check, profile) if form else None
            if hour is not None and form is not None and value is not None:
                intakes.append(Intake(form=form, hour=hour, labelled_mg=value, over_h=infusion_h))
        if len(intakes) != len(daily):
            return None
        keys = [(x.hour, x.form) for x in intakes]
        if len(set(keys)) != len(keys):
            check.say(where, "the same form stands twice at the same time", "each time once", "Add the two amounts up")
            return None
        return Regimen(intakes=tuple(sorted(intakes, key=lambda x: x.hour)), cycle_h=24.0)
    form = _form(form_text, f"{where}, form", check, profile)
    if form is None:
        return None
    value = _amount(amount, form, f"{where}, amount", check, profile)
    interval = _duration(every, f"{where}, every", check, ("h", "day", "days"))
    if value is None or interval is None:
        return None
    hours = interval * 24
    if not 1 <= hours <= 168:
        check.say(f"{where}, every", f"{every} was given", "1 to 168 h (both ends count)", "Check the interval")
        return None
    first = (start.hour + start.minute / 60) if start is not None else None
    return Regimen(
        intakes=(Intake(form=form, hour=0.0, labelled_mg=value, over_h=infusion_h),), cycle_h=hours, anchor_h=first
    )


def _regimen(file: ProposedFile, where: str, check: _Check, profile: Profile) -> Regimen | None:
    return _intakes(file.form, file.amount, file.every, file.daily, "", where, None, check, profile)


def _course(i: int, file: DoseFile, check: _Check, profile: Profile) -> Course | None:
    where = f"Dose line {i + 1}"
    before = len(check.problems)
    start = _optional_time(file.from_, f"{where}, from", check)
    end = _optional_time(file.until, f"{where}, until", check)
    about = _duration(file.for_about, f"{where}, for about", check) if file.for_about else None
    regimen: Regimen | None = None
    single: Intake | None = None
    rate: float | None = None
    shapes = [name for name, given in (("at", file.at), ("rate", file.rate), ("every or daily", file.every or file.daily)) if given]
    if len(shapes) != 1:
        check.say(
            where,
            "it is not clear what kind of line this is" if not shapes else f"{' and '.join(shapes)} were both given",
            "amount with every, or daily, or at, or rate",
            "Give exactly one of them",
        )
        return None
    if file.at:
        at = _optional_time(file.at, f"{where}, at", check)
        form = _form(file.form, f"{where}, form", check, profile)
        value = _amount(file.amount, form, f"{where}, amount", check, profile) if form else None
        over = _duration(file.over, f"{where}, over", check, ("min", "h")) if file.over else None
        if file.from_ or file.until or file.for_about or file.missed:
            check.say(where, "a single dose cannot have from, until, for about or missed", "", "Remove them")
        if at is not None and form is not None and value is not None:
            single = Intake(form=form, hour=0.0, labelled_mg=value, over_h=(over or 0.0) * 24)
            start = at
    elif file.rate:
        form = _form(file.form, f"{where}, form", check, profile)
        typed = check.attempt(
            lambda: units.read(file.rate, "dose rate", f"{where}, rate", only=("mg/h", "g/h", "mg/min", "mg/day", "g/day"))
        )
        if start is None or end is None:
            check.say(where, "an infusion was given without both ends", "from and until", "Add both clock times")
        if form is not None and typed is not None:
            rate = typed.value
    else:
        regimen = _intakes(
            file.form, file.amount, file.every, file.daily, file.over, where, start, check, profile
        )
        if start is not None and about is not None:
            check.say(where, "from and for about were both given", "one of the two", "Remove one of them")
    if start is not None and end is not None and end <= start:
        check.say(
            where,
            f"it ends ({show_time(end)}) before or when it starts ({show_time(start)})",
            "an end after the start",
            "Check both times",
        )
    if about is not None and not 0 < about <= 36525:
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


def _earlier(i: int, file: EarlierForecastFile, check: _Check, profile: Profile) -> EarlierForecast | None:
    where = f"Earlier forecast {i + 1}"
    drawn = _optional_time(file.drawn, f"{where}, drawn", check)
    values = [_level_value(getattr(file, name), f"{where}, {name}", check, profile) for name in ("median", "low", "high")]
    if drawn is None or any(v is None for v in values):
        return None
    median, low, high = (float(v) for v in values if v is not None)
    if not low <= median <= high:
        check.say(where, "low, median and high are not in order", "low to high", "Check the three numbers")
        return None
    return EarlierForecast(drawn, file.kind, median, low, high, file.version)


def _check_zones(case: Case, check: _Check) -> None:
    moments = [m for c in case.courses for m in (c.start, c.end, *c.missed) if m is not None]
    moments += [x.drawn for x in case.levels if x.drawn is not None]
    moments += [m for m in (case.now, case.plan_start, case.load_at, case.next_draw) if m is not None]
    moments += [e.drawn for e in case.earlier]
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
    for level in case.levels:
        if case.now is not None and level.drawn is not None and level.drawn > case.now:
            check.say(
                f"Level {level.index + 1}, drawn",
                f"it was drawn at {show_time(level.drawn)}, after the consult ({show_time(case.now)})",
                "a time before the consult",
                "Check the dates",
            )
    for course in case.courses:
        if case.now is not None and course.start is not None and course.start > case.now:
            check.say(
                f"Dose line {course.index + 1}, from",
                f"it starts at {show_time(course.start)}, after the consult ({show_time(case.now)})",
                "a time before the consult",
                "The record holds what was given; put what is planned under proposed",
            )
        for moment in course.missed:
            if course.start is not None and not course.start <= moment <= (course.end or moment):
                check.say(
                    f"Dose line {course.index + 1}, missed",
                    f"{show_time(moment)} lies outside the line's own time",
                    "a time within the line",
                    "Check the date",
                )
            elif course.regimen is not None and course.start is not None:
                if not course.regimen.has_dose_at(moment, course.start):
                    check.say(
                        f"Dose line {course.index + 1}, missed",
                        f"no dose was due at {show_time(moment)}",
                        "the clock time of a dose of this line",
                        "Give the time the dose was due",
                    )


def label_looks_like_identifier(text: str) -> bool:
    """True where a label holds a long number, a date, or two capitalised words in a row (as a name has)."""
    return bool(
        re.search(r"\d{5,}|\d{1,4}[-/. ]\d{1,2}[-/. ]\d{1,4}", text)
        or re.search(r"\b[A-Z][a-z]+,? [A-Z][a-z]+\b", text)
    )


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
    return schema
