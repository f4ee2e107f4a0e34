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
from datetime import datetime
from itertools import zip_longest
from pathlib import Path
from typing import Any

from pkcalc import entries
from pkcalc.case import COMPARED, Case, CaseFile, Part, ReentryFile, check_case, parse_case_text
from pkcalc.consult import Consult, Shown, run_consult
from pkcalc.drugs.profile import Profile, load_profile
from pkcalc.errors import CaseError, Problem
from pkcalc.forecast import Forecast
from pkcalc.site import Site
from pkcalc.units import percent, show

#: More differences than this are not tried one by one: the entries are then not of one case, or one is careless.
MOST_TRIED = 6
#: More differences from the chart than this are not kept: the entries are then not of one case.
MOST_KEPT = 100

#: The part of a re-entry that each key of the case file belongs to. What is asked or decided belongs to none.
_PART_OF: Mapping[str, Part] = {
    "drug": "drug",
    "now": "time of the consult",
    "patient": "patient",
    "albumin": "albumin",
    "context": "context",
    "doses": "doses",
    "levels": "levels",
    "dialysis": "dialysis",
}


@dataclass(frozen=True)
class Difference:
    """One field in which the two entries differ.

    effect: what it alone does to the forecast ("" where not tried). part: what of the chart it belongs to; None where
    it is asked or decided, not taken from the chart.
    """

    where: str
    first: str
    second: str
    effect: str = ""
    part: Part | None = None

    @property
    def text(self) -> str:
        return f"{self.where}: {self.first} (first), {self.second} (second)."


@dataclass(frozen=True)
class Comparison:
    """Two entries compared. same_value: fields written differently that read as one value. effects: the forecasts
    of the whole entries side by side. compared: the parts of the chart that the second entry holds."""

    differences: tuple[Difference, ...]
    same_value: tuple[Difference, ...]
    effects: tuple[str, ...]
    first_hash: str
    second_hash: str
    demonstration: bool
    compared: tuple[Part, ...] = COMPARED

    @property
    def equal(self) -> bool:
        return not self.differences

    @property
    def from_chart(self) -> tuple[Difference, ...]:
        """The differences that a re-entry counts: of parts that the second person typed from the chart."""
        return tuple(d for d in self.differences if d.part in self.compared)

    @property
    def verdict(self) -> str:
        if self.equal:
            return "The two entries agree in every field compared."
        n, counted = len(self.differences), len(self.from_chart)
        fields = f"{n} field{'s' if n > 1 else ''}"
        if not counted:
            return (
                f"The two entries agree in everything typed again from the chart. They differ in {fields} of what is "
                "asked, decided or was not typed again."
            )
        of_chart = "" if counted == n else f", {counted} of them taken from the chart"
        return f"The two entries differ in {fields}{of_chart}: look at the chart before any number is used."

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
        if missed := [x for x in COMPARED if x not in self.compared]:
            out.append(f"Not typed again in the second entry: {', '.join(missed)}.")
        out.append("Not compared: labels, comments, the question, the pharmacist's own words.")
        out.append(f"Case fingerprints: {self.first_hash} (first), {self.second_hash} (second).")
        return "\n".join(out) + "\n"

    def as_dict(self) -> dict[str, Any]:
        return {
            "pkcalc_compare": 1,
            "outcome": "equal" if self.equal else "different",
            "demonstration": self.demonstration,
            "verdict": self.verdict,
            "typed_again": list(self.compared),
            "differences_from_chart": len(self.from_chart),
            "differences": [
                {"where": d.where, "first": d.first, "second": d.second, "effect_alone": d.effect, "part": d.part}
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
    a, b = entries.typed(first.file), entries.typed(second.file)
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
        differences=tuple(
            Difference(x.where, x.first, x.second, alone.get(i, ""), x.part) for i, x in enumerate(different)
        ),
        same_value=tuple(Difference(x.where, x.first, x.second, "", x.part) for x in found if x.same),
        effects=effects,
        first_hash=first.hash,
        second_hash=second.hash,
        demonstration=first.demonstration is not None or second.demonstration is not None,
        compared=tuple(x for x in COMPARED if x != "context" or b.get("context") or not a.get("context")),
    )


# --- keeping it with the case ----------------------------------------------------------------------------


def keep(first: Case, found: Comparison, at: datetime) -> CaseFile:
    """The first entry with the record that this comparison was done; nobody is named in it.

    at: when it was done. While differences of an earlier comparison are not resolved, the new one goes on with that
    re-entry: its differences are kept and count as resolved once the two entries agree there.

    Raises CaseError where the comparison is of another entry, or holds too many differences to be of one case.
    """
    if found.first_hash != first.hash:
        raise CaseError(
            Problem("Reentry", "the comparison is of another first entry", "its own", "Compare the two entries again")
        )
    left = tuple(dict.fromkeys(d.where for d in found.from_chart))
    if len(left) > MOST_KEPT:
        raise CaseError(
            Problem(
                "Reentry",
                f"{len(left)} differences from the chart were found",
                f"at most {MOST_KEPT}",
                "Check that both entries are of one patient, then compare again",
            )
        )
    before = first.reentry.differences if first.reentry is not None and first.reentry.left else ()
    record = ReentryFile(
        done=at.isoformat(" ", "minutes"),
        compared=found.compared,
        differences=tuple(dict.fromkeys((*before, *left)))[-MOST_KEPT:],
        left=left,
        facts=entries.fingerprint(first.file, found.compared),
    )
    return first.file.model_copy(update={"reentry": record})


# --- the differences -------------------------------------------------------------------------------------

Patch = Callable[[dict[str, Any]], None]


@dataclass(frozen=True)
class _Found:
    """A field in which the texts differ. same: they read as one value. patch: puts the second's into the first.
    key: the key of the case file under which it stands."""

    where: str
    first: str
    second: str
    same: bool
    patch: Patch
    key: str

    @property
    def part(self) -> Part | None:
        return _PART_OF.get(self.key)


def _walk(a: dict[str, Any], b: dict[str, Any], profile: Profile) -> Iterator[_Found]:
    yield from _fields(a, b, entries.TOP, "", profile, ())
    yield from _part(a, b, "patient", entries.PATIENT, "Patient", profile)
    yield from _part(a, b, "albumin", entries.ALBUMIN, "Albumin", profile)
    yield from _context(a, b, profile)
    yield from _rows(a, b, "doses", entries.DOSE, "Dose line", profile, _dose_key)
    yield from _rows(a, b, "levels", entries.LEVEL, "Level", profile, _level_key)
    yield from _rows(a, b, "dialysis", entries.DIALYSIS, "Dialysis session", profile, _session_key)
    yield from _part(a, b, "target", entries.TARGET, "Target", profile)
    yield from _rows(a, b, "proposed", entries.REGIMEN, "Proposed regimen", profile, None)
    yield from _part(a, b, "plan", entries.PLAN, "Plan", profile)
    yield from _nested(a, b, ("plan", "load"), entries.LOAD, "Load asked for", profile)
    yield from _nested(a, b, ("chosen", "regimen"), entries.REGIMEN, "Chosen regimen", profile)


def _fields(
    a: Mapping[str, Any],
    b: Mapping[str, Any],
    fields: Mapping[str, str],
    where: str,
    profile: Profile,
    path: tuple[str | int, ...],
) -> Iterator[_Found]:
    for name, kind in fields.items():
        key = str(path[0]) if path else name
        one, two = a.get(name), b.get(name)
        silent = entries.SILENT.get(name) if path else None
        one, two = one or silent, two or silent
        if one == two:
            continue
        label = name.replace("_", " ")
        place = f"{where}, {label}" if where else label[0].upper() + label[1:]
        same = entries.value(one, kind, profile) == entries.value(two, kind, profile)
        yield _Found(place, _shown(one), _shown(two), same, _setter((*path, name), b.get(name)), key)


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
        yield _Found(where, _whole(one, fields), _whole(two, fields), False, _setter(path, two), str(path[0]))
        return
    yield from _fields(one or {}, two or {}, fields, where, profile, path)


def _context(a: dict[str, Any], b: dict[str, Any], profile: Profile) -> Iterator[_Found]:
    one, two = a.get("context", {}), b.get("context", {})
    for key in dict.fromkeys((*profile.questions, *one, *two)):
        x, y = one.get(key), two.get(key)
        first, second = entries.answer(x), entries.answer(y)
        place = f"Context, {key.replace('_', ' ')}"
        if first != second:
            yield _Found(place, first, second, False, _setter(("context", key), y), "context")
        since = [entries.since(v) for v in (x, y)]
        if since[0] != since[1]:
            same = entries.moment(since[0]) == entries.moment(since[1])
            yield _Found(
                f"{place}, since", _shown(since[0]), _shown(since[1]), same, _setter(("context", key), y), "context"
            )


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
            yield _Found(f"{where} {i + 1}", _whole(one[i], fields), "not entered", False, _remover(key, i), key)
        elif j is not None:
            yield _Found(
                f"{where} {j + 1} of the second", "not entered", _whole(two[j], fields), False, _adder(key, two[j]), key
            )


def _albumin_of_level(
    a: Mapping[str, Any], b: Mapping[str, Any], where: str, profile: Profile, path: tuple[str | int, ...]
) -> Iterator[_Found]:
    one, two = a.get("albumin"), b.get("albumin")
    if one is None and two is None:
        return
    place = f"{where}, albumin"
    if one is None or two is None:
        yield _Found(
            place,
            _whole(one, entries.ALBUMIN),
            _whole(two, entries.ALBUMIN),
            False,
            _setter((*path, "albumin"), two),
            str(path[0]),
        )
        return
    yield from _fields(one, two, entries.ALBUMIN, place, profile, (*path, "albumin"))


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
    moment = entries.moment(row.get("at") or row.get("from", ""))
    return (moment, row.get("form", "")) if moment is not None else None


def _session_key(row: Mapping[str, Any]) -> Any:
    return entries.moment(row.get("from", ""))


def _level_key(row: Mapping[str, Any]) -> Any:
    moment = entries.moment(row.get("drawn", ""))
    return (moment, row.get("kind")) if moment is not None else None


# --- in words ------------------------------------------------------------------------------------------


def _shown(given: Any) -> str:
    if given in (None, "", [], {}, False):
        return entries.NOT_STATED
    if isinstance(given, list):
        return " and ".join(
            f"{x['amount']} at {x['time']}" + (f" {x['form']}" if x.get("form") else "")
            if isinstance(x, dict)
            else str(x)
            for x in given
        )
    if isinstance(given, dict):
        return " and ".join(f"{drug.replace('_', ' ')} {text}" for drug, text in given.items())
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
        chances = _becomes(*(percent(x.forecast.above_critical) for x in (a, b)))
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
        f"chance above the critical level or of no steady state {percent(forecast.above_critical)})"
    )


def _bound(value: float) -> str:
    return show(value, "mg/L") if value < float("inf") else "no steady state"


__all__ = ["Comparison", "Difference", "compare", "keep"]
