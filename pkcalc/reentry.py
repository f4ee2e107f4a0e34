"""Blind re-entry: two entries of one case side by side, every difference, and what it does to the forecast.

The two-way check catches arithmetic, never transcription. So a second person types the case from the chart without
seeing the first entry, and the two are compared field by field: 0.3 g and 300 mg are one value, 300 and 330 mg are
not. Labels, comments, the question and the pharmacist's own words are not compared.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator, Mapping, Sequence
from copy import deepcopy
from dataclasses import dataclass
from itertools import zip_longest
from pathlib import Path
from typing import Any

from pkcalc import units
from pkcalc.case import QUESTIONS, Case, CaseFile, check_case, dump_case_file, parse_case_text
from pkcalc.clock import read_time, read_time_of_day
from pkcalc.consult import Consult, Shown, run_consult
from pkcalc.drugs.profile import Profile, load_profile
from pkcalc.errors import CaseError
from pkcalc.forecast import Forecast
from pkcalc.site import Site
from pkcalc.units import show

#: More differences than this are not tried one by one: the entries are then not of one case, or one is careless.
MOST_TRIED = 6
NOT_STATED = "not stated"

#: Fields of each part, with how a value of it is read: two texts that read as one value are no difference.
_PATIENT = {"age": "age", "sex": "word", "weight": "weight", "weight_basis": "word", "height": "height"}
_ALBUMIN = {"value": "albumin", "taken": "time", "method": "word", "after_infusion": "word"}
_DOSE = {
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
_LEVEL = {
    "value": "level",
    "kind": "word",
    "drawn": "time",
    "normalised_by": "word",
    "on_dose": "number",
    "valproate_level": "level",
    "sample": "word",
}
_DIALYSIS = {"from": "time", "until": "time", "clearance": "clearance"}
_TARGET = {"low": "level", "high": "level", "kind": "word"}
_REGIMEN = {
    "form": "word",
    "product": "word",
    "amount": "amount",
    "every": "duration",
    "daily": "daily",
    "rate": "dose rate",
}
_PLAN = {
    "shelf": "word",
    "products": "words",
    "largest_step": "dose rate",
    "order_by_loss": "number",
    "restart_level": "level",
    "start": "time",
}
_LOAD = {"form": "word", "aim": "level", "at": "time"}
_TOP = {"drug": "word", "now": "time", "aim": "level", "population": "word", "method": "word"}

#: What a field holds where nothing was written, where that is not "not stated".
_SILENT = {
    "sex": "unknown",
    "weight_basis": "unknown",
    "method": "unknown",
    "after_infusion": "unknown",
    "source": "given",
    "given_by": "unknown",
    "confirmed": "unknown",
    "sample": "unknown",
}


@dataclass(frozen=True)
class Difference:
    """One field in which the two entries differ. effect: what it alone does to the forecast ("" where not tried)."""

    where: str
    first: str
    second: str
    effect: str = ""

    @property
    def text(self) -> str:
        return f"{self.where}: {self.first} (first), {self.second} (second)."


@dataclass(frozen=True)
class Comparison:
    """Two entries compared. same_value: fields written differently that read as one value. effects: the forecasts
    of the whole entries side by side."""

    differences: tuple[Difference, ...]
    same_value: tuple[Difference, ...]
    effects: tuple[str, ...]
    first_hash: str
    second_hash: str
    demonstration: bool

    @property
    def equal(self) -> bool:
        return not self.differences

    @property
    def verdict(self) -> str:
        if self.equal:
            return "The two entries agree in every field compared."
        n = len(self.differences)
        return (
            f"The two entries differ in {n} field{'s' if n > 1 else ''}: look at the chart before any number is used."
        )

    def text(self) -> str:
        """For a person."""
        out = ["Blind re-entry: two entries of one case", self.verdict]
        if self.demonstration:
            out.append("DEMONSTRATION - invented, not a patient, not for clinical use")
        for d in self.differences:
            out.append(f"- {d.text}")
            if d.effect:
                out.append(f"  Alone: {d.effect}")
        if len(self.differences) > MOST_TRIED:
            out.append(f"More than {MOST_TRIED} differences: what each does alone was not tried.")
        if self.same_value:
            out.append("Written differently, the same value:")
            out += [f"- {d.text}" for d in self.same_value]
        if self.effects:
            out.append("Forecasts of the two entries:")
            out += [f"- {e}" for e in self.effects]
        out.append("Not compared: labels, comments, the question, the pharmacist's own words.")
        out.append(f"Case fingerprints: {self.first_hash} (first), {self.second_hash} (second).")
        return "\n".join(out) + "\n"

    def as_dict(self) -> dict[str, Any]:
        return {
            "pkcalc_compare": 1,
            "outcome": "equal" if self.equal else "different",
            "demonstration": self.demonstration,
            "verdict": self.verdict,
            "differences": [
                {"where": d.where, "first": d.first, "second": d.second, "effect_alone": d.effect}
                for d in self.differences
            ],
            "written_differently": [{"where": d.where, "first": d.first, "second": d.second} for d in self.same_value],
            "forecasts": list(self.effects),
            "first_case_hash": self.first_hash,
            "second_case_hash": self.second_hash,
        }


def compare(first: Case, second: Case, site: Site | str | Path | None = None, *, forecasts: bool = True) -> Comparison:
    """Two checked entries of one case -> every difference with both values and its effect on the forecast.

    Where the entries agree, or forecasts is False, no forecast is run. Each of up to MOST_TRIED differences is
    also tried alone: the first entry with this one field of the second.
    """
    a, b = _data(first.file), _data(second.file)
    profile = load_profile(first.drug)
    found = list(_walk(a, b, profile))
    different = [x for x in found if not x.same]
    effects: tuple[str, ...] = ()
    alone: dict[int, str] = {}
    if different and forecasts:
        before, after = _run(first, site), _run(second, site)
        effects = _effects(before, after, "first", "second")
        if 1 < len(different) <= MOST_TRIED and first.drug == second.drug:
            alone = {i: _alone(a, x, before, site) for i, x in enumerate(different)}
        elif len(different) == 1:
            alone = {0: _change(before, after)}
    return Comparison(
        differences=tuple(Difference(x.where, x.first, x.second, alone.get(i, "")) for i, x in enumerate(different)),
        same_value=tuple(Difference(x.where, x.first, x.second) for x in found if x.same),
        effects=effects,
        first_hash=first.hash,
        second_hash=second.hash,
        demonstration=first.demonstration is not None or second.demonstration is not None,
    )


# --- the differences -------------------------------------------------------------------------------------

Patch = Callable[[dict[str, Any]], None]


@dataclass(frozen=True)
class _Found:
    """A field in which the texts differ. same: they read as one value. patch: puts the second's into the first."""

    where: str
    first: str
    second: str
    same: bool
    patch: Patch


def _data(file: CaseFile) -> dict[str, Any]:
    data: dict[str, Any] = json.loads(dump_case_file(file))
    return data


def _walk(a: dict[str, Any], b: dict[str, Any], profile: Profile) -> Iterator[_Found]:
    yield from _fields(a, b, _TOP, "", profile, ())
    yield from _part(a, b, "patient", _PATIENT, "Patient", profile)
    yield from _part(a, b, "albumin", _ALBUMIN, "Albumin", profile)
    yield from _context(a, b)
    yield from _rows(a, b, "doses", _DOSE, "Dose line", profile, _dose_key)
    yield from _rows(a, b, "levels", _LEVEL, "Level", profile, _level_key)
    yield from _rows(a, b, "dialysis", _DIALYSIS, "Dialysis session", profile, _session_key)
    yield from _part(a, b, "target", _TARGET, "Target", profile)
    yield from _rows(a, b, "proposed", _REGIMEN, "Proposed regimen", profile, None)
    yield from _part(a, b, "plan", _PLAN, "Plan", profile)
    yield from _nested(a, b, ("plan", "load"), _LOAD, "Load asked for", profile)
    yield from _nested(a, b, ("chosen", "regimen"), _REGIMEN, "Chosen regimen", profile)


def _fields(
    a: Mapping[str, Any],
    b: Mapping[str, Any],
    fields: Mapping[str, str],
    where: str,
    profile: Profile,
    path: tuple[str | int, ...],
) -> Iterator[_Found]:
    for name, kind in fields.items():
        one, two = a.get(name), b.get(name)
        silent = _SILENT.get(name) if path else None
        one, two = one or silent, two or silent
        if one == two:
            continue
        label = name.replace("_", " ")
        place = f"{where}, {label}" if where else label[0].upper() + label[1:]
        same = _value(one, kind, profile) == _value(two, kind, profile)
        yield _Found(place, _shown(one), _shown(two), same, _setter((*path, name), b.get(name)))


def _part(
    a: dict[str, Any], b: dict[str, Any], key: str, fields: Mapping[str, str], where: str, profile: Profile
) -> Iterator[_Found]:
    yield from _nested(a, b, (key,), fields, where, profile)


def _nested(
    a: dict[str, Any],
    b: dict[str, Any],
    path: tuple[str | int, ...],
    fields: Mapping[str, str],
    where: str,
    profile: Profile,
) -> Iterator[_Found]:
    """A part that may stand in one entry only: then it is one difference, shown whole."""
    one, two = _at(a, path), _at(b, path)
    always = path in (("patient",), ("plan",))
    if one is None and two is None:
        return
    if not always and (one is None or two is None):
        yield _Found(where, _whole(one, fields), _whole(two, fields), False, _setter(path, two))
        return
    yield from _fields(one or {}, two or {}, fields, where, profile, path)


def _context(a: dict[str, Any], b: dict[str, Any]) -> Iterator[_Found]:
    one, two = a.get("context", {}), b.get("context", {})
    for key in QUESTIONS:
        x, y = one.get(key), two.get(key)
        first, second = _answer(x), _answer(y)
        place = f"Context, {key.replace('_', ' ')}"
        if first != second:
            yield _Found(place, first, second, False, _setter(("context", key), y))
        since = [v.get("since", "") if isinstance(v, dict) else "" for v in (x, y)]
        if since[0] != since[1]:
            same = _moment(since[0]) == _moment(since[1])
            yield _Found(f"{place}, since", _shown(since[0]), _shown(since[1]), same, _setter(("context", key), y))


def _answer(given: Any) -> str:
    if given is None:
        return NOT_STATED
    return str(given["answer"]) if isinstance(given, dict) else str(given)


Key = Callable[[Mapping[str, Any]], Any]


def _rows(
    a: dict[str, Any],
    b: dict[str, Any],
    key: str,
    fields: Mapping[str, str],
    where: str,
    profile: Profile,
    match: Key | None,
) -> Iterator[_Found]:
    """Rows are matched by their time where they have one, the rest in the order they stand."""
    one, two = a.get(key, []), b.get(key, [])
    for i, j in _pairs(one, two, match):
        if i is not None and j is not None:
            place = f"{where} {i + 1}" + (f" (line {j + 1} of the second)" if i != j else "")
            yield from _fields(one[i], two[j], fields, place, profile, (key, i))
            if key == "levels":
                yield from _albumin_of_level(one[i], two[j], place, profile, (key, i))
        elif i is not None:
            yield _Found(f"{where} {i + 1}", _whole(one[i], fields), "not entered", False, _remover(key, i))
        elif j is not None:
            yield _Found(
                f"{where} {j + 1} of the second", "not entered", _whole(two[j], fields), False, _adder(key, two[j])
            )


def _albumin_of_level(
    a: Mapping[str, Any], b: Mapping[str, Any], where: str, profile: Profile, path: tuple[str | int, ...]
) -> Iterator[_Found]:
    one, two = a.get("albumin"), b.get("albumin")
    if one is None and two is None:
        return
    place = f"{where}, albumin"
    if one is None or two is None:
        yield _Found(place, _whole(one, _ALBUMIN), _whole(two, _ALBUMIN), False, _setter((*path, "albumin"), two))
        return
    yield from _fields(one, two, _ALBUMIN, place, profile, (*path, "albumin"))


def _pairs(
    one: Sequence[Mapping[str, Any]], two: Sequence[Mapping[str, Any]], match: Key | None
) -> list[tuple[int | None, int | None]]:
    left, right = list(range(len(one))), list(range(len(two)))
    found: list[tuple[int | None, int | None]] = []
    if match is not None:
        for i in list(left):
            key = match(one[i])
            j = next((j for j in right if key is not None and match(two[j]) == key), None)
            if j is not None:
                found.append((i, j))
                left.remove(i)
                right.remove(j)
    for i, j in zip(list(left), list(right), strict=False):
        found.append((i, j))
        left.remove(i)
        right.remove(j)
    found += [(i, None) for i in left]
    found += [(None, j) for j in right]
    return sorted(found, key=lambda p: (p[0] if p[0] is not None else len(one) + (p[1] or 0), p[1] or 0))


def _dose_key(row: Mapping[str, Any]) -> Any:
    moment = _moment(row.get("at") or row.get("from", ""))
    return (moment, row.get("form", "")) if moment is not None else None


def _session_key(row: Mapping[str, Any]) -> Any:
    return _moment(row.get("from", ""))


def _level_key(row: Mapping[str, Any]) -> Any:
    moment = _moment(row.get("drawn", ""))
    return (moment, row.get("kind")) if moment is not None else None


# --- values ----------------------------------------------------------------------------------------------


def _moment(text: Any) -> Any:
    if not text:
        return None
    try:
        moment = read_time(str(text), "Time", time_needed=False)
    except CaseError:
        return str(text)
    return moment.timestamp() if moment.tzinfo is not None else moment


def _value(given: Any, kind: str, profile: Profile) -> Any:
    """What a text says, so that two ways of writing it are one value; the text itself where it cannot be read."""
    if given in (None, "", [], False):
        return None
    if kind in ("word", "number"):
        return given
    if kind == "words":
        return sorted(given)
    if kind == "time":
        return _moment(given)
    if kind == "times":
        return sorted((_moment(x) for x in given), key=str)
    if kind == "daily":
        return sorted((_hour(x["time"]), _value(x["amount"], "amount", profile), x.get("form", "")) for x in given)
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


def _shown(given: Any) -> str:
    if given in (None, "", [], False):
        return NOT_STATED
    if isinstance(given, list):
        return " and ".join(
            f"{x['amount']} at {x['time']}" + (f" {x['form']}" if x.get("form") else "")
            if isinstance(x, dict)
            else str(x)
            for x in given
        )
    return "yes" if given is True else str(given)


def _whole(part: Mapping[str, Any] | None, fields: Mapping[str, str]) -> str:
    if part is None:
        return "not entered"
    told = [f"{name.replace('_', ' ')} {_shown(part[name])}" for name in fields if part.get(name)]
    return ", ".join(told) or "empty"


def _at(data: Mapping[str, Any], path: Sequence[str | int]) -> Any:
    found: Any = data
    for step in path:
        found = found.get(step) if isinstance(found, dict) else None
    return found


def _setter(path: tuple[str | int, ...], value: Any) -> Patch:
    def patch(data: dict[str, Any]) -> None:
        here: Any = data
        for step in path[:-1]:
            here = here[step] if isinstance(step, int) else here.setdefault(step, {})
        if value is None:
            here.pop(path[-1], None)
        else:
            here[path[-1]] = value

    return patch


def _remover(key: str, index: int) -> Patch:
    def patch(data: dict[str, Any]) -> None:
        del data[key][index]

    return patch


def _adder(key: str, row: Mapping[str, Any]) -> Patch:
    def patch(data: dict[str, Any]) -> None:
        data.setdefault(key, []).append(dict(row))

    return patch


# --- the effect ------------------------------------------------------------------------------------------


def _run(case: Case, site: Site | str | Path | None) -> Consult:
    return run_consult(case, site)


def _alone(data: dict[str, Any], found: _Found, before: Consult, site: Site | str | Path | None) -> str:
    tried = deepcopy(data)
    found.patch(tried)
    try:
        case = check_case(parse_case_text(json.dumps(tried)))
    except CaseError as error:
        return f"it cannot stand alone in the first entry ({error.problems[0].text})"
    return _change(before, _run(case, site))


def _change(before: Consult, after: Consult) -> str:
    """What a change does to the forecasts, in one line."""
    if before.stopped or after.stopped:
        return " ".join(_effects(before, after, "first", "with this change"))
    out = []
    for name, a, b in _side_by_side(before, after):
        if a is None or b is None:
            out.append(f"{name}: a forecast in one of the two only.")
            continue
        words = a.words if a.words == b.words else f"{a.words} becomes {b.words}"
        levels = _becomes(*(_bound(x.forecast.total.median) for x in (a, b)))
        chances = _becomes(*(_percent(x.forecast.above_critical) for x in (a, b)))
        out.append(f"{name}, {words}: {levels}, chance above the critical level or of no steady state {chances}.")
    if not out and before.aim_rate is not None and after.aim_rate is not None:
        rates = [show(x.median, "mg/day") for x in (before.aim_rate, after.aim_rate)]
        out.append(f"Active drug per day for the aim: {_becomes(*rates)}.")
    return " ".join([*out, *_stops_apart(before, after, "first", "with this change")]) or "no forecast changes."


def _becomes(a: str, b: str) -> str:
    return f"{a} as before" if a == b else f"{a} becomes {b}"


def _stops_apart(before: Consult, after: Consult, one: str, two: str) -> list[str]:
    """Stops that only one of two consults has."""
    a, b = ({c.id: c.text for c in x.cautions if c.severity == "stop"} for x in (before, after))
    out = [f"Stop ({one} only): {text}" for key, text in a.items() if key not in b]
    return out + [f"Stop ({two} only): {text}" for key, text in b.items() if key not in a]


def _effects(before: Consult, after: Consult, one: str, two: str) -> tuple[str, ...]:
    """The forecasts of two consults side by side, in sentences."""
    out = []
    for consult, name in ((before, one), (after, two)):
        if consult.stopped:
            out.append(f"No forecast ({name}): {_why_stopped(consult)}")
    if before.stopped or after.stopped:
        if not (before.stopped and after.stopped):
            going, who = (before, one) if after.stopped else (after, two)
            out += [
                f"{name}, {x.words}: {_level(x.forecast)} ({who})."
                for name, x, _ in _side_by_side(going, going)
                if x is not None
            ]
        return tuple(out)
    for name, a, b in _side_by_side(before, after):
        if a is not None and b is not None and a.words == b.words:
            same = _level(a.forecast) == _level(b.forecast)
            told = (
                f"{_level(a.forecast)} in both"
                if same
                else (f"{_level(a.forecast)} ({one}), {_level(b.forecast)} ({two})")
            )
            out.append(f"{name}, {a.words}: {told}.")
        else:
            parts = [f"{x.words}: {_level(x.forecast)} ({who})" for x, who in ((a, one), (b, two)) if x is not None]
            out.append(f"{name}: {'; '.join(parts)}{' only' if len(parts) == 1 else ''}.")
    if before.aim_rate is not None and after.aim_rate is not None:
        rates = [show(x.aim_rate.median, "mg/day") for x in (before, after) if x.aim_rate is not None]
        goals = [show(x.goal.aim_mg_per_L, "mg/L") for x in (before, after)]
        told = f"{rates[0]} in both" if rates[0] == rates[1] else f"{rates[0]} ({one}), {rates[1]} ({two})"
        aim = goals[0] if goals[0] == goals[1] else f"{goals[0]} ({one}) and {goals[1]} ({two})"
        out.append(f"Active drug for a level of {aim} at normal binding: {told}.")
    out += _stops_apart(before, after, one, two)
    return tuple(out) or ("no forecast of a regimen in either entry.",)


def _why_stopped(consult: Consult) -> str:
    stops = [c.text for c in consult.cautions if c.severity == "stop"]
    return (stops or list(consult.refusals.values()) or ["no method answers."])[0]


def _side_by_side(before: Consult, after: Consult) -> list[tuple[str, Shown | None, Shown | None]]:
    """The present dose and each proposed regimen of two consults, by their place."""
    now = [next((s for s in x.table if s.present), None) for x in (before, after)]
    found = [("Present dose", now[0], now[1])] if any(now) else []
    for i, (a, b) in enumerate(zip_longest(before.proposed, after.proposed), 1):
        found.append((f"Proposed regimen {i}", a, b))
    return found


def _level(forecast: Forecast) -> str:
    """Median, 90 % interval and danger of a forecast, as the laboratory will report the level."""
    low, middle, high = (_bound(x) for x in (forecast.total.low, forecast.total.median, forecast.total.high))
    return (
        f"{middle} as the laboratory reports it (90 % interval {low} to {high}; "
        f"chance above the critical level or of no steady state {_percent(forecast.above_critical)})"
    )


def _bound(value: float) -> str:
    return show(value, "mg/L") if value < float("inf") else "no steady state"


def _percent(chance: float) -> str:
    percent = 100 * chance
    if percent < 1:
        return "below 1 %"
    return f"{percent:.0f} %"


__all__ = ["Comparison", "Difference", "compare"]
