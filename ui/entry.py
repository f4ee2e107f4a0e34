"""What stands in the fields of the page <-> a case file. Pure functions of a mapping of field values.

Every field has a key. Texts stay as typed: number and unit are put together here and read by the core. What
an opened case holds beyond the fields of the page is kept as it was.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from pkcalc_form.spoken import EXAMPLES, Said, say, take_apart

from pkcalc.case import (
    AlbuminFile,
    AnswerFile,
    CaseFile,
    ChosenFile,
    DialysisFile,
    DoseFile,
    LevelFile,
    LoadFile,
    PatientFile,
    PlanFile,
    ProposedFile,
    TargetFile,
)
from pkcalc.drugs.profile import Profile, drug_names, every_question, load_profile
from pkcalc.drugs.questions import Question, common_questions
from pkcalc.errors import Problem
from pkcalc.spreadsheet import Pasted, pasted_doses
from pkcalc.units import LABELS

LEVEL_UNITS = tuple(label for label, (kind, _, _) in LABELS.items() if kind == "level")
ALBUMIN_UNITS = ("g/L", "g/dL")
WEIGHT_UNITS = ("kg", "lb")
HEIGHT_UNITS = ("cm", "in")
AGE_UNITS = ("years", "months", "weeks")
KINDS = ("total", "free", "normalised")
CLEARANCE_UNITS = ("mL/min", "L/h")
MAX_PASTED = 1000

DOSE_FIELDS = ("said", "form", "product", "from", "until", "for_about", "missed", "source", "confirmed", "given_by")
LEVEL_FIELDS = (
    "value", "unit", "kind", "drawn", "on_dose", "sample", "normalised_by",
    "albumin", "albumin_unit",
)  # fmt: skip
OWN_FIELDS = ("said", "form")
DIALYSIS_FIELDS = ("from", "until", "clearance")

_NUMBER_UNIT = re.compile(r"^\s*([<>]?\s*[0-9][0-9.,]*)\s*(.*?)\s*$")


@dataclass(frozen=True)
class Entry:
    """The case file that the fields make.

    rows: by kind, the row of fields behind each line of the file. problems: wording that could not be taken
    apart. assumed: what was taken for granted about an own regimen, by its row. pasted: the pasted lines, which stand
    after the typed ones.
    """

    file: CaseFile
    rows: Mapping[str, tuple[int, ...]]
    problems: tuple[Problem, ...] = ()
    assumed: Mapping[int, str] = field(default_factory=dict)
    pasted: Pasted = field(default_factory=Pasted)


def text(values: Mapping[str, Any], key: str) -> str:
    """A field as typed, without blanks around it; an empty or missing field is ''."""
    found = values.get(key)
    return str(found).strip() if found is not None else ""


def joined(number: str, unit: str) -> str:
    """'8' and 'mg/L' -> '8 mg/L'. A unit typed with the number stands; a unit alone is nothing yet."""
    if not number:
        return ""
    typed = _NUMBER_UNIT.match(number)
    if unit and typed and typed.group(2) == unit:
        return number
    return f"{number} {unit}".strip()


def parted(value: str, units: tuple[str, ...]) -> tuple[str, str | None]:
    """'8 mg/L' -> ('8', 'mg/L') where the unit is one of the choice, else the whole text and no unit."""
    found = _NUMBER_UNIT.match(value)
    if found and found.group(2) in units:
        return found.group(1), found.group(2)
    return value, None


# --- fields -> case file ---------------------------------------------------------------------------------


def case_of(values: Mapping[str, Any]) -> Entry:
    """Fields -> case file, with the wording problems the core cannot see."""
    base: CaseFile | None = values.get("base")
    problems: list[Problem] = []
    doses, dose_rows = _doses(values, base, problems)
    pasted = _pasted(values)
    problems += pasted.problems
    dialysis, dialysis_rows = _dialysis(values)
    levels, level_rows = _levels(values, problems)
    own, own_rows, assumed = _own(values, base, problems)
    unit = text(values, "target_unit")
    low, high = (joined(text(values, key), unit) for key in ("target_low", "target_high"))
    target, reason = None, text(values, "target_reason")
    if low or high or reason or text(values, "target_kind") == "free":
        old = base.target if base and base.target else TargetFile(low="", high="")
        kind = text(values, "target_kind") or old.kind
        target = old.model_copy(update={"low": low, "high": high, "kind": kind, "reason": reason})
    fields: dict[str, Any] = {
        "drug": text(values, "drug"),
        "demonstration": values.get("demonstration"),
        "question": text(values, "question"),
        "now": text(values, "now"),
        "patient": _patient(values, base),
        "albumin": _albumin(values, base.albumin if base else None),
        "context": _context(values, base),
        "doses": (*doses, *pasted.doses),
        "dialysis": tuple(dialysis),
        "levels": tuple(levels),
        "target": target,
        "aim": joined(text(values, "aim"), unit),
        "proposed": tuple(own),
        "population": text(values, "population"),
        "method": text(values, "method"),
        "plan": _plan(values, base),
        "chosen": _chosen(values, base, own, own_rows, doses),
    }
    return Entry(
        file=(base or CaseFile(pkcalc_case=1, drug="")).model_copy(update=fields),
        rows={
            "dose": tuple(dose_rows),
            "level": tuple(level_rows),
            "own": tuple(own_rows),
            "dialysis": tuple(dialysis_rows),
        },
        problems=tuple(problems),
        assumed=assumed,
        pasted=pasted,
    )


def is_blank(values: Mapping[str, Any], kind: str, row: int, fields: tuple[str, ...]) -> bool:
    """True where nothing was entered in a row yet."""
    return not any(text(values, f"{kind}.{row}.{name}") for name in fields)


def _doses(
    values: Mapping[str, Any], base: CaseFile | None, problems: list[Problem]
) -> tuple[list[DoseFile], list[int]]:
    lines: list[DoseFile] = []
    rows: list[int] = []
    for row in values.get("dose_rows", ()):
        if is_blank(values, "dose", row, DOSE_FIELDS):
            continue

        def get(name: str, row: int = row) -> str:
            return text(values, f"dose.{row}.{name}")

        old: DoseFile | None = values.get(f"dose.{row}.base")
        where = f"Dose line {len(lines) + 1}"
        wording = get("said")
        filled: dict[str, Any] = {
            "form": get("form"),
            "product": get("product"),
            "source": get("source") or "given",
            "given_by": get("given_by") or "unknown",
            "confirmed": get("confirmed") or "unknown",
            "from_": get("from"),
            "until": get("until"),
            "for_about": get("for_about"),
            "missed": tuple(x.strip() for x in re.split(r"[;\n]", get("missed")) if x.strip()),
        }
        if old is not None and wording == say(old):
            if old.at:
                filled |= {"at": filled["from_"], "from_": ""}
        else:
            filled |= _shape(take_apart(wording), wording, filled["from_"], where, problems)
        lines.append((old or DoseFile()).model_copy(update=filled))
        rows.append(row)
    return lines, rows


def _shape(said: Said, wording: str, start: str, where: str, problems: list[Problem]) -> dict[str, Any]:
    """The fields that say what kind of line it is, all of them, so that nothing of an older wording stays."""
    shape: dict[str, Any] = {"amount": "", "every": "", "daily": (), "at": "", "over": "", "rate": ""}
    if not wording:
        problems.append(Problem(where, "no dose was given", EXAMPLES, "Enter the dose as said aloud"))
        return shape | {"every": "24 h"}
    if said.unclear:
        problems.append(Problem(where, said.unclear, EXAMPLES, said.fix))
        return shape | {"every": "24 h"}
    if said.rate:
        return shape | {"rate": said.rate}
    if said.once:
        if not start:
            problems.append(Problem(f"{where}, from", "no time was given", "the time of the single dose", "Enter it"))
        return shape | {"amount": said.amount, "over": said.over, "at": start or "?", "from_": ""}
    return shape | {"amount": said.amount, "every": said.every, "daily": said.daily, "over": said.over}


def _levels(values: Mapping[str, Any], problems: list[Problem]) -> tuple[list[LevelFile], list[int]]:
    levels: list[LevelFile] = []
    rows: list[int] = []
    for row in values.get("level_rows", ()):
        others = {drug: text(values, f"level.{row}.other.{drug}") for drug in _others(values)}
        if is_blank(values, "level", row, LEVEL_FIELDS) and not any(others.values()):
            continue

        def get(name: str, row: int = row) -> str:
            return text(values, f"level.{row}.{name}")

        old: LevelFile | None = values.get(f"level.{row}.base")
        albumin = joined(get("albumin"), get("albumin_unit"))
        sample = old.albumin if old and old.albumin else AlbuminFile(value="")
        line = get("on_dose")
        kind = get("kind")
        if kind not in KINDS:
            where = f"Level {len(levels) + 1}, kind"
            given = "it was not said what was measured" if not kind else f'"{kind}" was given'
            problems.append(Problem(where, given, ", ".join(KINDS), "Choose what the laboratory measured"))
            kind = KINDS[0]  # never used: a problem takes every result away
        levels.append(
            (old or LevelFile(value="", kind="total")).model_copy(
                update={
                    "value": joined(get("value"), get("unit")),
                    "kind": kind,
                    "drawn": get("drawn"),
                    "normalised_by": get("normalised_by"),
                    "on_dose": int(line) if line.isdigit() else None,
                    "albumin": sample.model_copy(update={"value": albumin}) if albumin else None,
                    "other_levels": {drug: given for drug, given in others.items() if given},
                    "sample": get("sample") or "unknown",
                }
            )
        )
        rows.append(row)
    return levels, rows


def _own(
    values: Mapping[str, Any], base: CaseFile | None, problems: list[Problem]
) -> tuple[list[ProposedFile], list[int], dict[int, str]]:
    own: list[ProposedFile] = []
    rows: list[int] = []
    assumed: dict[int, str] = {}
    for row in values.get("own_rows", ()):
        wording, form = text(values, f"own.{row}.said"), text(values, f"own.{row}.form")
        if not wording and not form:
            continue
        old: ProposedFile | None = values.get(f"own.{row}.base")
        where = f"Proposed regimen {len(own) + 1}"
        if old is not None and wording == say(old):
            own.append(old.model_copy(update={"form": form}))
        else:
            said = take_apart(wording, assume_times=True)
            if not wording or said.unclear or said.once or said.over:
                found = said.unclear if said.unclear else "no repeated dose was given"
                problems.append(Problem(where, found, EXAMPLES, said.fix or "Enter a repeated dose"))
            if said.assumed:
                assumed[row] = f"Taken as {' and '.join(f'{d.amount} at {d.time}' for d in said.daily)}."
            shape = {"amount": said.amount, "every": said.every, "daily": said.daily, "rate": said.rate}
            own.append((old or ProposedFile()).model_copy(update={"form": form, **shape}))
        rows.append(row)
    return own, rows, assumed


def _patient(values: Mapping[str, Any], base: CaseFile | None) -> PatientFile:
    return (base.patient if base else PatientFile()).model_copy(
        update={
            "age": joined(text(values, "age"), text(values, "age_unit")),
            "sex": text(values, "sex") or "unknown",
            "weight": joined(text(values, "weight"), text(values, "weight_unit")),
            "weight_basis": text(values, "weight_basis") or "unknown",
            "height": joined(text(values, "height"), text(values, "height_unit")),
        }
    )


def _albumin(values: Mapping[str, Any], old: AlbuminFile | None) -> AlbuminFile | None:
    value = joined(text(values, "albumin"), text(values, "albumin_unit"))
    if not value:
        return None
    return (old or AlbuminFile(value="")).model_copy(
        update={
            "value": value,
            "taken": text(values, "albumin_taken"),
            "method": text(values, "albumin_method") or "unknown",
            "after_infusion": text(values, "albumin_after_infusion") or "unknown",
        }
    )


def _plan(values: Mapping[str, Any], base: CaseFile | None) -> PlanFile:
    old = base.plan if base else PlanFile()
    load = None
    form, aim, at = (text(values, k) for k in ("load_form", "load_aim", "load_at"))
    if form or aim or at:
        load = (old.load or LoadFile(form="")).model_copy(update={"form": form, "aim": aim, "at": at})
    return old.model_copy(
        update={
            "shelf": text(values, "shelf"),
            "products": tuple(values.get("products") or ()),
            "largest_step": text(values, "largest_step"),
            "order_by_loss": bool(values.get("order_by_loss")),
            "load": load,
            "restart_level": text(values, "restart_level"),
            "start": text(values, "plan_start"),
        }
    )


#: Keys of the choice "which regimen is chosen": the present one, one of the pharmacist's own, or as in the file.
STAY, AS_OPENED = "stay", "as opened"


def _chosen(
    values: Mapping[str, Any],
    base: CaseFile | None,
    own: list[ProposedFile],
    own_rows: list[int],
    doses: list[DoseFile],
) -> ChosenFile | None:
    old = base.chosen if base else None
    choice, words, draw = (text(values, k) for k in ("chosen", "own_words", "next_draw"))
    regimen = None
    if choice == AS_OPENED and old is not None:
        regimen = old.regimen
    elif choice == STAY:
        going = [d for d in doses if not d.until and not d.at and not d.rate]
        if going:
            last = going[-1]
            regimen = ProposedFile(
                form=last.form, product=last.product, amount=last.amount, every=last.every
            ).model_copy(update={"daily": last.daily})
    elif choice.startswith("own ") and int(choice[4:]) in own_rows:
        regimen = own[own_rows.index(int(choice[4:]))]
    if regimen is None and not words and not draw:
        return None
    return (old or ChosenFile()).model_copy(update={"regimen": regimen, "words": words, "next_draw": draw})


def _context(values: Mapping[str, Any], base: CaseFile | None) -> dict[str, Any]:
    found: dict[str, Any] = {}
    known = _known_questions(values)
    order = [*(q for q in (base.context if base else ()) if q in known), *known]
    for question in dict.fromkeys(order):
        answer = text(values, f"ctx.{question}")
        if not answer:
            continue
        since, detail = text(values, f"ctx.{question}.since"), text(values, f"ctx.{question}.detail")
        found[question] = (
            AnswerFile(answer=answer, since=since, detail=detail)  # type: ignore[arg-type]
            if answer == "yes" and (since or detail)
            else answer
        )
    if base is not None:  # questions that the page does not ask
        found |= {k: v for k, v in base.context.items() if k not in known}
    return found


def _profile(values: Mapping[str, Any]) -> Profile | None:
    name = text(values, "drug")
    return load_profile(name) if name in drug_names() else None


def _known_questions(values: Mapping[str, Any]) -> Mapping[str, Question]:
    """The context questions of the drug chosen; of any drug before one is."""
    profile = _profile(values)
    return profile.questions if profile is not None else common_questions()


def _others(values: Mapping[str, Any]) -> tuple[str, ...]:
    """The other drugs whose levels the drug chosen asks for."""
    profile = _profile(values)
    return tuple(profile.other_levels) if profile is not None else ()


def _pasted(values: Mapping[str, Any]) -> Pasted:
    """Rows pasted from a spreadsheet, in the columns of a CSV file of doses."""
    given = str(values.get("pasted") or "")
    return pasted_doses(given, form=text(values, "pasted_form"), most=MAX_PASTED) if given.strip() else Pasted()


def _dialysis(values: Mapping[str, Any]) -> tuple[list[DialysisFile], list[int]]:
    sessions: list[DialysisFile] = []
    rows: list[int] = []
    for row in values.get("dialysis_rows", ()):
        if is_blank(values, "dialysis", row, DIALYSIS_FIELDS):
            continue
        at = f"dialysis.{row}."
        old: DialysisFile = values.get(f"{at}base") or DialysisFile.model_construct(from_="")
        clearance = joined(text(values, f"{at}clearance"), text(values, f"{at}clearance_unit"))
        shape = {"from_": text(values, f"{at}from"), "until": text(values, f"{at}until"), "clearance": clearance}
        sessions.append(old.model_copy(update=shape))
        rows.append(row)
    return sessions, rows


# --- case file -> fields ---------------------------------------------------------------------------------


def fields_of(file: CaseFile) -> dict[str, Any]:
    """Case file -> fields. Nothing is lost: case_of() of the result gives the same file."""
    p = file.patient
    values: dict[str, Any] = {
        "base": file,
        "demonstration": file.demonstration,
        "drug": file.drug,
        "question": file.question,
        "now": file.now,
        "sex": None if p.sex == "unknown" else p.sex,
        "weight_basis": None if p.weight_basis == "unknown" else p.weight_basis,
        "population": file.population or None,
        "method": file.method or None,
    }
    _part(values, "age", p.age, AGE_UNITS)
    _part(values, "weight", p.weight, WEIGHT_UNITS)
    _part(values, "height", p.height, HEIGHT_UNITS)
    if file.albumin is not None:
        _part(values, "albumin", file.albumin.value, ALBUMIN_UNITS)
        values["albumin_taken"] = file.albumin.taken
        values["albumin_method"] = None if file.albumin.method == "unknown" else file.albumin.method
        values["albumin_after_infusion"] = _unless_unknown(file.albumin.after_infusion)
    for key, given in file.context.items():
        values[f"ctx.{key}"] = given if isinstance(given, str) else given.answer
        if not isinstance(given, str):
            values[f"ctx.{key}.since"], values[f"ctx.{key}.detail"] = given.since, given.detail
    values["dose_rows"] = list(range(1, len(file.doses) + 1))
    for row, dose in enumerate(file.doses, 1):
        at = f"dose.{row}."
        values |= {
            at + "base": dose,
            at + "said": say(dose),
            at + "form": dose.form or None,
            at + "product": dose.product or None,
            at + "from": dose.at or dose.from_,
            at + "until": dose.until,
            at + "for_about": dose.for_about,
            at + "missed": "; ".join(dose.missed),
            at + "source": dose.source,
            at + "confirmed": _unless_unknown(dose.confirmed),
            at + "given_by": _unless_unknown(dose.given_by),
        }
    values["dialysis_rows"] = list(range(1, len(file.dialysis) + 1))
    for row, session in enumerate(file.dialysis, 1):
        at = f"dialysis.{row}."
        values |= {at + "base": session, at + "from": session.from_, at + "until": session.until}
        _part(values, at + "clearance", session.clearance, CLEARANCE_UNITS)
    values["level_rows"] = list(range(1, len(file.levels) + 1))
    for row, level in enumerate(file.levels, 1):
        at = f"level.{row}."
        _part(values, at + "value", level.value, LEVEL_UNITS, unit_key=at + "unit")
        values |= {
            at + "base": level,
            at + "kind": level.kind,
            at + "drawn": level.drawn,
            at + "normalised_by": level.normalised_by,
            at + "on_dose": str(level.on_dose) if level.on_dose is not None else None,
            at + "sample": _unless_unknown(level.sample),
        }
        values |= {f"{at}other.{drug}": given for drug, given in level.other_levels.items()}
        if level.albumin is not None:
            _part(values, at + "albumin", level.albumin.value, ALBUMIN_UNITS)
    target_unit: str | None = None
    ends = [(key, parted(value, LEVEL_UNITS)) for key, value in _target_texts(file) if value]
    if len({unit for _, (_, unit) in ends}) == 1:
        target_unit = ends[0][1][1]
        values |= {key: number for key, (number, _) in ends}
    else:
        values |= {key: value for key, value in _target_texts(file) if value}
    plan, chosen = file.plan, file.chosen
    values |= {
        "shelf": plan.shelf or None,
        "products": list(plan.products),
        "largest_step": plan.largest_step,
        "order_by_loss": plan.order_by_loss,
        "load_form": plan.load.form if plan.load else None,
        "load_aim": plan.load.aim if plan.load else "",
        "load_at": plan.load.at if plan.load else "",
        "restart_level": plan.restart_level,
        "plan_start": plan.start,
        "chosen": AS_OPENED if chosen and chosen.regimen else None,
        "own_words": chosen.words if chosen else "",
        "next_draw": chosen.next_draw if chosen else "",
    }
    values["target_unit"] = target_unit
    values["target_kind"] = file.target.kind if file.target else None
    values["target_reason"] = file.target.reason if file.target else ""
    values["own_rows"] = list(range(1, len(file.proposed) + 1))
    for row, own in enumerate(file.proposed, 1):
        values |= {f"own.{row}.base": own, f"own.{row}.said": say(own), f"own.{row}.form": own.form or None}
    return values


def _target_texts(file: CaseFile) -> list[tuple[str, str]]:
    ends = [("target_low", file.target.low), ("target_high", file.target.high)] if file.target else []
    return [*ends, ("aim", file.aim)]


def _unless_unknown(answer: str) -> str | None:
    return None if answer == "unknown" else answer


def _part(values: dict[str, Any], key: str, value: str, units: tuple[str, ...], *, unit_key: str | None = None) -> None:
    number, unit = parted(value, units)
    values[key] = number
    values[unit_key or f"{key}_unit"] = unit


#: Fields that hold a choice; every other field of a case holds text.
_CHOICES = re.compile(
    r"(?:drug|sex|weight_basis|population|method|albumin_method|albumin_after_infusion|target_kind|shelf|load_form"
    r"|chosen|pasted_form|demo_name|[a-z_.0-9]*_unit|ctx\.[a-z0-9_]+"
    r"|(?:dose|level|own)\.\d+\.(?:form|product|source|confirmed|given_by|unit|kind|on_dose|sample))"
)
_TEXTS = re.compile(
    r"(?:question|now|age|weight|height|albumin|albumin_taken|target_low|target_high|target_reason|aim|load_aim|load_at"
    r"|restart_level|plan_start|largest_step|own_words|next_draw|pasted|my_dose|my_level|ctx\.[a-z0-9_]+\.(?:since|detail)"
    r"|(?:dose|level|own|dialysis)\.\d+\.(?:said|from|until|for_about|missed|value|drawn|normalised_by|albumin"
    r"|clearance|other\.\w+))"
)


def emptied(values: Mapping[str, Any]) -> dict[str, Any]:
    """The fields that hold something, each with nothing in it.

    A browser keeps what stands in a field until it is told otherwise, also where the server has forgotten it.
    """
    found: dict[str, Any] = {}
    for key in values:
        if _CHOICES.fullmatch(key):
            found[key] = None
        elif _TEXTS.fullmatch(key):
            found[key] = ""
        elif key in ("products", "two"):
            found[key] = []
        elif key == "order_by_loss" or key.startswith("ask-"):
            found[key] = False
    return found


# --- problems -> fields ----------------------------------------------------------------------------------

_ROW = re.compile(r"^(Dose line|Level|Proposed regimen|Dialysis session) (\d+)(?:, (.*))?$", re.I)
_DOSE_PLACES = {
    "product": "product",
    "from": "from",
    "at": "from",
    "until": "until",
    "for about": "for_about",
    "missed": "missed",
}
_LEVEL_PLACES = {
    "drawn": "drawn",
    "kind": "kind",
    "normalised by": "normalised_by",
    "on dose": "on_dose",
    "albumin": "albumin",
    "albumin, taken": "albumin",
}
_PLACES = {
    "drug": "drug",
    "time of the consult": "now",
    "age": "age",
    "weight": "weight",
    "height": "height",
    "albumin": "albumin",
    "albumin, taken": "albumin_taken",
    "aim": "aim",
    "target": "target_high",
    "target, low": "target_low",
    "target, high": "target_high",
    "population": "population",
    "method": "method",
    "target, kind": "target_kind",
    "plan, shelf": "shelf",
    "plan, products": "products",
    "plan, largest step": "largest_step",
    "plan, load, form": "load_form",
    "plan, load, aim": "load_aim",
    "plan, load, at": "load_at",
    "plan, restart level": "restart_level",
    "plan, start": "plan_start",
    "chosen, next draw": "next_draw",
}


def field_of(where: str, entry: Entry) -> str | None:
    """The key of the field a problem belongs beside; None where the page has no such field."""
    place = where.strip()
    if place.lower() in _PLACES:
        return _PLACES[place.lower()]
    if place.lower().startswith("context, "):
        key = place[9:].split(",")[0].strip().replace(" ", "_")
        return f"ctx.{key}" if key in every_question() else None
    if place.lower().startswith("chosen regimen"):
        return "chosen"
    if place.lower().startswith("pasted doses"):
        return "pasted"
    found = _ROW.match(place)
    if found is None:
        return None
    name, number, rest = found.group(1).lower(), int(found.group(2)), (found.group(3) or "").lower()
    kind = {"dose line": "dose", "level": "level", "proposed regimen": "own", "dialysis session": "dialysis"}[name]
    rows = entry.rows[kind]
    if not 1 <= number <= len(rows):
        return None
    row = rows[number - 1]
    if kind == "dialysis":
        return f"dialysis.{row}.{rest if rest in DIALYSIS_FIELDS else 'from'}"
    if kind == "level" and rest.startswith("other levels, "):
        return f"level.{row}.other.{rest.removeprefix('other levels, ').split(',')[0].replace(' ', '_')}"
    if kind == "level":
        return f"level.{row}.{_LEVEL_PLACES.get(rest, 'value')}"
    if rest == "form" or rest.endswith(", form"):
        return f"{kind}.{row}.form"
    if kind == "dose":
        head = rest.split(" dose ")[0] if rest.startswith("missed dose") else rest
        return f"dose.{row}.{_DOSE_PLACES.get(head, 'said')}"
    return f"own.{row}.said"
