"""Cautions: every text stands once, in cautions.toml (all drugs) or a drug's file; here are the predicates.

A predicate looks at the state of the consult and returns, for every time the caution speaks, the words to be
filled into its text; an empty list keeps it silent. Only consult.py asks.
"""

from __future__ import annotations

import tomllib
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cache
from importlib import resources
from typing import Any

import numpy as np

from pkcalc.case import Case
from pkcalc.drugs.profile import Profile
from pkcalc.errors import BLOCKABLE, Caution, DrugFileError
from pkcalc.estimate.pair import SteadyPair
from pkcalc.estimate.result import Estimate
from pkcalc.forecast import Forecast, Goal
from pkcalc.levels import Observation
from pkcalc.site import Site
from pkcalc.steadiness import Settling
from pkcalc.units import show, show_number

SEVERITIES = ("stop", "warn", "note")
STAGES = ("case", "levels", "estimate", "plan")


@dataclass(frozen=True)
class ShownRegimen:
    """A regimen with its forecast, for the cautions of the plan."""

    words: str
    forecast: Forecast
    present: bool = False


@dataclass(frozen=True)
class State:
    """What is known when a stage is asked; later parts are None or empty before their stage."""

    case: Case
    profile: Profile
    site: Site
    observations: Sequence[Observation] = ()
    pairs: Sequence[SteadyPair] = ()
    settling: Sequence[Settling] = ()
    own_settling: Sequence[Settling] = ()
    pair_estimate: Estimate | None = None
    pair_refusal: str = ""
    distrusted: str = ""
    estimate: Estimate | None = None
    goal: Goal | None = None
    regimens: Sequence[ShownRegimen] = ()


Words = dict[str, str]
Predicate = Callable[[State, Mapping[str, Any]], list[Words]]


def _names(observations: Iterable[Observation]) -> str:
    return ", ".join(o.name for o in observations)


def percent(share: float) -> str:
    """A chance in words that never read as impossible or certain."""
    if share <= 0:
        return "0 %"
    if share < 0.01:
        return "less than 1 %"
    if 0.99 < share < 1:
        return "more than 99 %"
    return f"{show_number(100 * share, 2)} %"


def _answered(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{}] if s.case.answer(p["question"]) == p["answer"] else []


def _younger_than(s: State, p: Mapping[str, Any]) -> list[Words]:
    age, limit = s.case.patient.age_years, s.profile.youngest_years
    if age is None or age >= limit:
        return []
    limit_words = show(limit * 12, "months") if limit < 2 else show(limit, "years")
    return [{"age": s.case.patient.typed["age"], "limit": limit_words}]


def _unconfirmed_lines(s: State, p: Mapping[str, Any]) -> list[Words]:
    lines = [f"dose line {c.index + 1}" for c in s.case.courses if not c.counts_as_given]
    return [{"lines": ", ".join(lines).capitalize()}] if lines else []


def _no_weight(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{}] if s.case.patient.weight_kg is None else []


def _totals(s: State) -> list[Observation]:
    if s.profile.binding is None:
        return []
    free = [o.level.drawn for o in s.observations if o.level.kind == "free" and o.level.drawn is not None]
    return [o for o in s.observations if o.level.kind == "total" and o.level.drawn not in free]


def _total_under(s: State, p: Mapping[str, Any]) -> list[Words]:
    totals = _totals(s)
    return [{"levels": _names(totals)}] if totals and s.case.answer(p["question"]) == "yes" else []


def _total_with_unknown(s: State, p: Mapping[str, Any]) -> list[Words]:
    totals = _totals(s)
    unknown = [q.replace("_", " ") for q in p["questions"] if s.case.answer(q) in ("unknown", "not stated")]
    return [{"levels": _names(totals), "unknown": ", ".join(unknown)}] if totals and unknown else []


def _total_without_albumin(s: State, p: Mapping[str, Any]) -> list[Words]:
    bare = [o for o in _totals(s) if o.level.albumin is None and s.case.albumin is None]
    return [{"levels": _names(bare)}] if bare else []


def _albumin_corrected(s: State, p: Mapping[str, Any]) -> list[Words]:
    hits = [o for o in s.observations if o.binding_log_sd > 0 and o.level.kind == "total"]
    if not hits:
        return []
    albumin = hits[0].level.albumin or s.case.albumin
    return [{"levels": _names(hits), "albumin": show(albumin.g_per_L, "g/L") if albumin else ""}]


def _gel_tube(s: State, p: Mapping[str, Any]) -> list[Words]:
    hits = [o for o in s.observations if o.level.sample == "gel tube"]
    return [{"levels": _names(hits)}] if hits else []


def _kinds_mixed(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{}] if len(s.pairs) == 2 and len({x.kind for x in s.pairs}) == 2 else []


def _not_settled(s: State, p: Mapping[str, Any]) -> list[Words]:
    paired = {x.level for x in s.pairs}
    found = {x.level: x for x in s.settling if x.settled is False and x.level in paired}
    found |= {x.level: x for x in s.own_settling if x.settled is False}
    return [{"sentence": x.sentence} for x in found.values()]


def _settling_unknown(s: State, p: Mapping[str, Any]) -> list[Words]:
    paired = {x.level for x in s.pairs}
    if len(s.pairs) != 2 or s.pair_estimate is None:
        return []
    return [{"sentence": x.sentence} for x in s.own_settling if x.settled is None and x.level in paired]


def _pair_refused(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{"why": s.pair_refusal}] if s.pair_refusal else []


def _chance_of_negative_km_above(s: State, p: Mapping[str, Any]) -> list[Words]:
    if s.pair_estimate is None:
        return []
    chance = float(str(s.pair_estimate.diagnostics["chance of negative Km"]))
    upper = p.get("upper", 1.0)
    return [{"chance": percent(chance)}] if p["limit"] < chance <= upper else []


def _not_trusted(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{"why": s.distrusted}] if s.distrusted else []


def _vmax_outside(s: State, p: Mapping[str, Any]) -> list[Words]:
    weight = s.case.patient.weight_kg
    if s.estimate is None or weight is None:
        return []
    low, high = s.profile.plausible_at(s.case.patient.age_years).vmax_mg_per_kg_day
    value = s.estimate.point.vmax_mg_per_day / weight
    if low <= value <= high:
        return []
    unit = "mg/kg/day"
    return [{"value": show(value, unit), "low": show_number(low), "high": show(high, unit)}]


def _km_outside(s: State, p: Mapping[str, Any]) -> list[Words]:
    if s.estimate is None:
        return []
    low, high = s.profile.plausible_at(s.case.patient.age_years).km_mg_per_L
    value = s.estimate.point.km_mg_per_L
    if low <= value <= high:
        return []
    return [
        {"value": show(value, "mg/L"), "low": show_number(low), "high": show(high, "mg/L")}
    ]


def danger(forecast: Forecast) -> float:
    """Chance of a level above the critical one or of no steady state (which counts as above)."""
    return forecast.above_critical


def _danger(s: State, low: float, high: float) -> list[Words]:
    found = []
    for shown in s.regimens:
        chance = danger(shown.forecast)
        if low < chance <= high and s.goal is not None and np.isfinite(shown.forecast.point_mg_per_L):
            found.append(
                {
                    "regimen": shown.words,
                    "chance": percent(chance),
                    "critical": show(s.goal.critical_mg_per_L, "mg/L"),
                    "limit": percent(s.site.stop_chance),
                }
            )
    return found


def _danger_above_stop(s: State, p: Mapping[str, Any]) -> list[Words]:
    return _danger(s, s.site.stop_chance, 1.0)


def _danger_above_warn(s: State, p: Mapping[str, Any]) -> list[Words]:
    return _danger(s, s.site.warn_chance, s.site.stop_chance)


def _at_or_above_vmax(s: State, p: Mapping[str, Any]) -> list[Words]:
    if s.estimate is None:
        return []
    return [
        {
            "regimen": shown.words,
            "rate": show(shown.forecast.rate_mg_per_day, "mg/day", 4),
            "vmax": show(s.estimate.point.vmax_mg_per_day, "mg/day", 4),
        }
        for shown in s.regimens
        if not np.isfinite(shown.forecast.point_mg_per_L)
    ]


PREDICATES: dict[str, Predicate] = {
    "answered": _answered,
    "younger_than": _younger_than,
    "unconfirmed_lines": _unconfirmed_lines,
    "no_weight": _no_weight,
    "total_under": _total_under,
    "total_with_unknown": _total_with_unknown,
    "total_without_albumin": _total_without_albumin,
    "albumin_corrected": _albumin_corrected,
    "gel_tube": _gel_tube,
    "kinds_mixed": _kinds_mixed,
    "not_settled": _not_settled,
    "settling_unknown": _settling_unknown,
    "pair_refused": _pair_refused,
    "chance_of_negative_km_above": _chance_of_negative_km_above,
    "not_trusted": _not_trusted,
    "vmax_outside": _vmax_outside,
    "km_outside": _km_outside,
    "danger_above_stop": _danger_above_stop,
    "danger_above_warn": _danger_above_warn,
    "at_or_above_vmax": _at_or_above_vmax,
}

_KNOWN = {"stage", "severity", "when", "text", "source", "blocks", "lifted_by"}


@dataclass(frozen=True)
class Rule:
    """One caution as its file states it."""

    id: str
    stage: str
    severity: str
    when: str
    text: str
    source: str
    blocks: tuple[str, ...]
    lifted_by: str
    settings: Mapping[str, Any]


def parse_rules(table: Mapping[str, Any], file: str) -> tuple[Rule, ...]:
    """The rules of one TOML table; DrugFileError for anything unknown or missing."""
    rules = []
    for key, entry in table.items():
        missing = {"stage", "severity", "when", "text", "source"} - set(entry)
        if missing:
            raise DrugFileError(f"{file}, caution {key}: {', '.join(sorted(missing))} missing.")
        if entry["stage"] not in STAGES or entry["severity"] not in SEVERITIES:
            raise DrugFileError(f"{file}, caution {key}: unknown stage or severity.")
        if entry["when"] not in PREDICATES:
            raise DrugFileError(f"{file}, caution {key}: unknown predicate {entry['when']}.")
        blocks = tuple(entry.get("blocks", ()))
        if set(blocks) - set(BLOCKABLE) or bool(blocks) != (entry["severity"] == "stop"):
            raise DrugFileError(f"{file}, caution {key}: a stop, and only a stop, blocks named results.")
        settings = {k: v for k, v in entry.items() if k not in _KNOWN}
        rules.append(
            Rule(
                key,
                entry["stage"],
                entry["severity"],
                entry["when"],
                entry["text"],
                entry["source"],
                blocks,
                entry.get("lifted_by", ""),
                settings,
            )
        )
    return tuple(rules)


@cache
def common_rules() -> tuple[Rule, ...]:
    text = resources.files("pkcalc").joinpath("cautions.toml").read_text(encoding="utf-8")
    return parse_rules(tomllib.loads(text), "cautions.toml")


def ask(stage: str, state: State) -> tuple[Caution, ...]:
    """The cautions of one stage that speak, in the order of their file."""
    found: list[Caution] = []
    for rule in common_rules():
        if rule.stage != stage:
            continue
        for words in PREDICATES[rule.when](state, rule.settings):
            found.append(
                Caution(
                    id=rule.id,
                    severity=rule.severity,  # type: ignore[arg-type]
                    text=rule.text.format(**words),
                    source=rule.source,
                    blocks=rule.blocks,
                    lifted_by=rule.lifted_by,
                    values=words,
                )
            )
    return tuple(found)


def after_case(state: State) -> tuple[Caution, ...]:
    """Cautions that follow from the case as typed."""
    return ask("case", state)


def after_levels(state: State) -> tuple[Caution, ...]:
    """Cautions about what the levels are worth."""
    return ask("levels", state)


def after_estimate(state: State) -> tuple[Caution, ...]:
    """Cautions about the estimate."""
    return ask("estimate", state)


def after_plan(state: State) -> tuple[Caution, ...]:
    """Cautions about the regimens shown."""
    return ask("plan", state)


def in_order(cautions: Iterable[Caution]) -> tuple[Caution, ...]:
    """Stops first, then warnings, then notes; no text twice."""
    seen: set[tuple[str, str]] = set()
    unique = []
    for caution in cautions:
        if (caution.id, caution.text) not in seen:
            seen.add((caution.id, caution.text))
            unique.append(caution)
    return tuple(sorted(unique, key=lambda c: SEVERITIES.index(c.severity)))


def blocked(cautions: Iterable[Caution]) -> frozenset[str]:
    """Every result that a stop takes away."""
    return frozenset(name for c in cautions if c.severity == "stop" for name in c.blocks)
