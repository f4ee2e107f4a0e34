"""What a case holds, field by field, as values, and whether the record of a blind re-entry still stands for it.

Two ways of writing one value (0.3 g, 300 mg) are one value. The fingerprint of the values taken from the chart is
kept with a re-entry: where they change afterwards, the re-entry is void.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Mapping
from typing import Any, Literal

from pkcalc import units
from pkcalc.case import COMPARED, Case, CaseFile, Part, dump_case_file
from pkcalc.clock import read_time, read_time_of_day, show_time
from pkcalc.drugs.profile import Profile, load_profile
from pkcalc.errors import CaseError

NOT_STATED = "not stated"
HOW = (
    "The second pharmacist types weight, doses, levels and dates from the chart without seeing this entry; the form, "
    "or pkcalc compare, lists every difference and can keep in the case file that it was done."
)

#: Fields of each part, with how a value of it is read: two texts that read as one value are no difference.
PATIENT = {"age": "age", "sex": "word", "weight": "weight", "weight_basis": "word", "height": "height"}
ALBUMIN = {"value": "albumin", "taken": "time", "method": "word", "after_infusion": "word"}
DOSE = {
    "form": "word",
    "product": "word",
    "amount": "amount",
    "every": "duration",
    "daily": "daily",
    "at": "time",
    "over": "duration",
    "rate": "dose rate",
    "from": "time",
    "until": "time",
    "for_about": "duration",
    "missed": "times",
    "source": "word",
    "given_by": "word",
    "confirmed": "word",
}
LEVEL = {
    "value": "level",
    "kind": "word",
    "drawn": "time",
    "normalised_by": "word",
    "on_dose": "number",
    "other_levels": "by drug",
    "sample": "word",
}
DIALYSIS = {"from": "time", "until": "time", "clearance": "clearance"}
TARGET = {"low": "level", "high": "level", "kind": "word"}
REGIMEN = {
    "form": "word",
    "product": "word",
    "amount": "amount",
    "every": "duration",
    "daily": "daily",
    "rate": "dose rate",
}
PLAN = {
    "shelf": "word",
    "products": "words",
    "largest_step": "dose rate",
    "order_by_loss": "number",
    "restart_level": "level",
    "start": "time",
}
LOAD = {"form": "word", "aim": "level", "at": "time"}
TOP = {"drug": "word", "now": "time", "aim": "level", "population": "word", "method": "word"}

#: What a field holds where nothing was written, where that is not "not stated".
SILENT = {
    "sex": "unknown",
    "weight_basis": "unknown",
    "method": "unknown",
    "after_infusion": "unknown",
    "source": "given",
    "given_by": "unknown",
    "confirmed": "unknown",
    "sample": "unknown",
}


# --- values ----------------------------------------------------------------------------------------------


def moment(text: Any) -> Any:
    """A clock time as a value; the text itself where it cannot be read."""
    if not text:
        return None
    try:
        found = read_time(str(text), "Time", time_needed=False)
    except CaseError:
        return str(text)
    return found.timestamp() if found.tzinfo is not None else found


def value(given: Any, kind: str, profile: Profile) -> Any:
    """What a text says, so that two ways of writing it are one value; the text itself where it cannot be read."""
    if given in (None, "", [], {}, False):
        return None
    if kind in ("word", "number"):
        return given
    if kind == "words":
        return sorted(given)
    if kind == "time":
        return moment(given)
    if kind == "by drug":
        return sorted((drug, value(text, "level", profile)) for drug, text in given.items())
    if kind == "times":
        return sorted((moment(x) for x in given), key=str)
    if kind == "daily":
        return sorted((_hour(x["time"]), value(x["amount"], "amount", profile), x.get("form", "")) for x in given)
    text, mark = (given[1:], given[0]) if given[0] in "<>" else (given, "")
    try:
        typed = units.read(text, kind, "Value", molar_mass_g_per_mol=profile.molar_mass_g_per_mol, zero_allowed=True)
    except CaseError:
        return given
    return mark, float(f"{typed.value:.9g}")


def _hour(text: str) -> float:
    try:
        return read_time_of_day(text, "Time")
    except CaseError:
        return -1.0


# --- what a second person can take from the chart ----------------------------------------------------------


def typed(file: CaseFile) -> dict[str, Any]:
    """A case file as plain data, without what was left at its default."""
    data: dict[str, Any] = json.loads(dump_case_file(file))
    return data


def fingerprint(file: CaseFile, parts: tuple[Part, ...]) -> str:
    """Short fingerprint of the values of some parts; rows count in the order in which they stand.

    What is silent leaves no trace, so that a field or a question added to the format later voids no record.
    """
    data, profile = typed(file), load_profile(file.drug)
    found = {part: _PARTS[part](data, profile) for part in sorted(set(parts))}
    return hashlib.sha256(json.dumps(found, sort_keys=True, default=str).encode()).hexdigest()[:12]


def _values(data: Any, fields: Mapping[str, str], profile: Profile) -> list[Any] | None:
    if data is None:
        return None
    return [[name, value(data[name], kind, profile)] for name, kind in sorted(fields.items()) if data.get(name)]


def _levels(data: Any, profile: Profile) -> list[Any]:
    return [[_values(x, LEVEL, profile), _values(x.get("albumin"), ALBUMIN, profile)] for x in data.get("levels", [])]


def _answers(data: Any, profile: Profile) -> list[Any]:
    del profile
    return [[key, answer(given), moment(since(given))] for key, given in sorted(data.get("context", {}).items())]


def answer(given: Any) -> str:
    """A context answer in one word."""
    if given is None:
        return NOT_STATED
    return str(given["answer"]) if isinstance(given, dict) else str(given)


def since(given: Any) -> str:
    """Since when a context answer holds, as typed."""
    return str(given.get("since", "")) if isinstance(given, dict) else ""


_PARTS: Mapping[Part, Callable[[Any, Profile], Any]] = {
    "drug": lambda data, _: data.get("drug"),
    "time of the consult": lambda data, _: moment(data.get("now")),
    "patient": lambda data, profile: _values(data.get("patient", {}), PATIENT, profile),
    "albumin": lambda data, profile: _values(data.get("albumin"), ALBUMIN, profile),
    "context": _answers,
    "doses": lambda data, profile: [_values(x, DOSE, profile) for x in data.get("doses", [])],
    "levels": _levels,
    "dialysis": lambda data, profile: [_values(x, DIALYSIS, profile) for x in data.get("dialysis", [])],
}


# --- the record of a re-entry ------------------------------------------------------------------------------

Standing = Literal["not done", "not resolved", "done", "void"]


def standing(case: Case) -> Standing:
    """Whether a second person's entry was compared with this case as it is now, and with what outcome."""
    kept = case.reentry
    if kept is None:
        return "not done"
    if fingerprint(case.file, kept.compared) != kept.facts:
        return "void"
    return "not resolved" if kept.left else "done"


def standing_words(case: Case) -> str:
    """The same in one sentence for the note."""
    kept, now = case.reentry, standing(case)
    if kept is None:
        return "Blind re-entry: not done."
    when = show_time(kept.done)
    if now == "void":
        return f"Blind re-entry: re-entered on {when}, but changed since: repeat it."
    n, left = len(kept.differences), len(kept.left)
    if not n:
        return f"Blind re-entry: done on {when}, no difference."
    found = f"Blind re-entry: done on {when}, {n} difference{'s' if n > 1 else ''}"
    if left:
        open_ = "none resolved" if left == n > 1 else "not resolved" if left == n else f"{left} of them not resolved"
        return f"{found}, {open_}: look at the chart."
    return f"{found}, {'all ' if n > 1 else ''}resolved."


def standing_lines(case: Case) -> tuple[str, ...]:
    """The sentence, what was compared, and where the differences were; where it was not done, how to do it."""
    lines = [standing_words(case)]
    kept = case.reentry
    if kept is None:
        return (*lines, HOW)
    lines.append(f"Typed again by a second person and compared: {', '.join(kept.compared)}.")
    missed = [x for x in COMPARED if x not in kept.compared]
    if missed:
        lines.append(f"Not typed again: {', '.join(missed)}.")
    resolved = [x for x in kept.differences if x not in kept.left]
    if resolved:
        lines.append(f"Differences resolved: {'; '.join(resolved)}.")
    if kept.left:
        lines.append(f"Differences not resolved: {'; '.join(kept.left)}.")
    return tuple(lines)
