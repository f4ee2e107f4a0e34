"""Cautions: every text stands once, in cautions.toml (all drugs) or a drug's file; here are the predicates.

A predicate looks at the state of the consult and returns, for every time the caution speaks, the words to be
filled into its text; an empty list keeps it silent. Only consult.py asks.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import dataclass
from datetime import timedelta
from functools import cache
from importlib import resources
from typing import Any

import numpy as np

from pkcalc.case import Albumin, Case, label_looks_like_identifier, overlapping_lines
from pkcalc.clock import show_date, show_time
from pkcalc.drugs.profile import Profile, load_profile
from pkcalc.errors import BLOCKABLE, Caution, DrugFileError
from pkcalc.estimate.pair import SteadyPair
from pkcalc.estimate.result import Estimate
from pkcalc.forecast import Forecast, Goal
from pkcalc.levels import Observation, adherence, measured_free_fraction, present_level, timing
from pkcalc.plan.projection import Projection
from pkcalc.site import Site
from pkcalc.sources import source
from pkcalc.steadiness import Settling
from pkcalc.units import percent, percent_beside, show, show_number

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
    steady_levels_used: bool = False
    distrusted: str = ""
    why_none: str = ""
    estimate: Estimate | None = None
    goal: Goal | None = None
    regimens: Sequence[ShownRegimen] = ()
    disagreements: Sequence[str] = ()
    projection: Projection | None = None


Words = dict[str, str]
Predicate = Callable[[State, Mapping[str, Any]], list[Words]]


def _names(observations: Iterable[Observation]) -> str:
    return ", ".join(o.name for o in observations)


def _always(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{}]


def _scope_is(s: State, p: Mapping[str, Any]) -> list[Words]:
    """Speaks for drugs of one scope; marked: only for demonstrations (true), or only for all other cases (false)."""
    profile = s.profile
    if profile.scope != p["scope"] or p.get("marked") not in (None, s.case.demonstration is not None):
        return []
    return [{"drug": profile.name, "reason": profile.scope_reason, "authority": profile.authority}]


def _dialysis_given(s: State, p: Mapping[str, Any]) -> list[Words]:
    said = [
        f"{show(x.clearance_L_per_day / 1.44, 'mL/min')} from {show_time(x.start)} "
        + (f"to {show_time(x.end)}" if x.end is not None else "on")
        for x in s.case.dialysis
    ]
    return [{"sessions": "; ".join(said)}] if said else []


def _dialysis_clearance_assumed(s: State, p: Mapping[str, Any]) -> list[Words]:
    known = s.profile.dialysis
    if known is None or not any(x.assumed for x in s.case.dialysis):
        return []
    low, high = (show_number(x / 1.44) for x in known.range_L_per_day)
    taken = show(known.clearance_L_per_day / 1.44, "mL/min")
    return [{"clearance": taken, "low": low, "high": f"{high} mL/min"}]


def _nothing_measured(s: State, p: Mapping[str, Any]) -> list[Words]:
    """A projection without any level: what is in the body is known from the record alone."""
    if s.projection is None or s.observations:
        return []
    return [{"now": show(s.projection.now.median, "mg/L")}]


def _climbs(s: State, p: Mapping[str, Any]) -> list[Words]:
    """A rate above Vmax: the level climbs for as long as it runs."""
    if s.projection is None or s.estimate is None:
        return []
    vmax = show(s.estimate.point.vmax_mg_per_day / 24, "mg/h")
    when = " once dialysis has stopped" if s.case.dialysis else ""
    return [
        {
            "regimen": path.words[:1].upper() + path.words[1:],
            "rate": show(path.rate_mg_per_day / 24, "mg/h"),
            "vmax": vmax,
            "when": when,
            "climb": show(path.climb_mg_per_L_per_h, "mg/L in each hour", 2),
        }
        for path in s.projection.paths
        if path.climb_mg_per_L_per_h is not None
    ]


def _projected_too_high(s: State, p: Mapping[str, Any]) -> list[Words]:
    """The chance of a critical level is above the site's limit: by the time of the next level (the later one), or
    later, if the rate ran on unchanged (by: "next level" or "later")."""
    if s.projection is None or s.goal is None:
        return []
    found = []
    for path in s.projection.paths:
        late = (s.profile.sampling.repeat_h or (24.0, 24.0))[1]
        over = [m for m in path.moments if m.above_critical > s.site.stop_chance]
        if not over or (over[0].hours <= late) != (p["by"] == "next level"):
            continue
        worst = over[0]
        found.append(
            {
                "regimen": path.words[:1].upper() + path.words[1:],
                "chance": percent_beside(worst.above_critical, s.site.stop_chance),
                "hours": show(worst.hours, "h"),
                "critical": show(s.goal.critical_mg_per_L, "mg/L"),
                "limit": percent(s.site.stop_chance),
            }
        )
    return found


def _answered(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{}] if s.case.answer(p["question"]) == p["answer"] else []


def _younger_than(s: State, p: Mapping[str, Any]) -> list[Words]:
    age, limit = s.case.patient.age_years, s.profile.youngest_years
    if age is None or age >= limit:
        return []
    limit_words = show(limit * 12, "months") if limit < 2 else show(limit, "years")
    fact = s.profile.fact("drug.youngest")
    reason = fact.derivation or f"{fact.where[:1].upper()}{fact.where[1:]}."
    return [{"age": s.case.patient.typed["age"], "limit": limit_words, "drug": s.profile.name, "reason": reason}]


def _unconfirmed_lines(s: State, p: Mapping[str, Any]) -> list[Words]:
    lines = [f"dose line {c.index + 1}" for c in s.case.courses if not c.counts_as_given]
    return [{"lines": ", ".join(lines).capitalize()}] if lines else []


def _extracorporeal(s: State, p: Mapping[str, Any]) -> list[Words]:
    """Silent where the sessions stand in the record and their clearance is known."""
    return [{}] if s.case.answer("extracorporeal") == "yes" and not s.case.dialysis else []


def _answered_both(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{}] if s.case.answer(p["question"]) == s.case.answer(p["other"]) == "yes" else []


def _load_by_refused_route(s: State, p: Mapping[str, Any]) -> list[Words]:
    load = s.case.file.plan.load
    form = s.profile.forms.get(load.form) if load is not None else None
    if load is None or form is None or load.route not in form.refused_routes:
        return []
    return [{"salt": form.salt, "route": load.route, "why": form.refused_routes[load.route]}]


def _answered_without(s: State, p: Mapping[str, Any]) -> list[Words]:
    """Speaks where `question` is answered yes and the answer to `other` is not known."""
    unknown = s.case.answer(p["other"]) in ("unknown", "not stated")
    return [{}] if unknown and s.case.answer(p["question"]) == "yes" else []


def _levels_before_change(s: State, p: Mapping[str, Any]) -> list[Words]:
    """Speaks unless a level was drawn after the change, which is dated."""
    given = s.case.context.get(p["question"])
    if given is None or given.answer != "yes" or not s.observations:
        return []
    since = given.since
    if since is not None:
        start = since.date()
        if any(o.level.drawn is not None and o.level.drawn.date() > start for o in s.observations):
            return []
    words = [w for w in re.split(r"[^a-z]+", given.detail.lower()) if len(w) >= 5]
    raises = []
    for names, effect in ((s.profile.interactions.raising, "raise"), (s.profile.interactions.lowering, "lower")):
        hits = [name for name in names if set(words) & set(name.lower().split())]
        if hits:
            raises.append(f"{', '.join(hits)}: known to {effect} the level while taken.")
    return [
        {
            "when": f" on {show_date(since)}" if since is not None else " at a time not stated",
            "wait": show(s.profile.interactions.wait_days, "days"),
            "raises": " ".join(raises),
        }
    ]


def _overlapping(s: State, p: Mapping[str, Any]) -> list[Words]:
    """Repeated lines and infusions in force at the same time."""
    names = [f"dose line {i + 1}" for i in overlapping_lines(s.case)]
    return [{"lines": ", ".join(names).capitalize()}] if names else []


def _offset_changes(s: State, p: Mapping[str, Any]) -> list[Words]:
    """Regimens by the clock that run over a change of the offset, as far as the times of the case show one."""
    moments = [x.drawn for x in s.case.levels] + [s.case.now] + [m for c in s.case.courses for m in (c.start, c.end)]
    found: dict[tuple[str, str, str], list[str]] = {}
    for c in s.case.courses:
        if c.regimen is None or not c.regimen.by_clock or c.start is None or not c.counts_as_given:
            continue
        first = c.start.utcoffset()
        for m in moments:
            if m is None or first is None or m <= c.start or (c.end is not None and m > c.end):
                continue
            later = m.utcoffset()
            if later is not None and later != first:
                off = show(abs(later - first) / timedelta(hours=1), "h")
                found.setdefault((f"{c.start:%z}", f"{m:%z}", off), []).append(f"dose line {c.index + 1}")
                break
    return [
        {"lines": ", ".join(lines).capitalize(), "first": first, "later": later, "off": off}
        for (first, later, off), lines in found.items()
    ]


def _load_not_in_record(s: State, p: Mapping[str, Any]) -> list[Words]:
    answer = s.case.answer("recent_load")
    if answer == "no" or not s.observations:
        return []
    times = [o.level.drawn for o in s.observations if o.level.drawn is not None]
    if not times:
        return []
    last = max(times)
    recorded = [
        c
        for c in s.case.courses
        if (c.single is not None or c.rate_mg_per_day is not None)
        and c.start is not None
        and timedelta(0) <= last - c.start <= timedelta(hours=72)
    ]
    words = {"yes": "stated", "unknown": "not ruled out (unknown)"}.get(answer, "not ruled out (not stated)")
    return [] if recorded else [{"answer": words}]


def _weight_estimated(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{}] if s.case.patient.weight_kg is not None and s.case.patient.weight_basis == "estimated" else []


def _label_identifies(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{}] if label_looks_like_identifier(s.case.file.label) else []


def _missed_doses(s: State, p: Mapping[str, Any]) -> list[Words]:
    count = sum(len(c.missed) for c in s.case.courses)
    return [{"count": f"{count}"}] if count else []


def _no_age(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{}] if s.case.patient.age_years is None else []


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
    displacers = [d.drug for d in s.profile.binding.displacements] if s.profile.binding is not None else []
    asked = dict.fromkeys((*p["questions"], *displacers))
    unknown = [q.replace("_", " ") for q in asked if s.case.answer(q) in ("unknown", "not stated")]
    return [{"levels": _names(totals), "unknown": ", ".join(unknown)}] if totals and unknown else []


def _total_without_albumin(s: State, p: Mapping[str, Any]) -> list[Words]:
    bare = [o for o in _totals(s) if o.level.albumin is None and s.case.albumin is None]
    return [{"levels": _names(bare)}] if bare else []


def _albumin_corrected(s: State, p: Mapping[str, Any]) -> list[Words]:
    hits = [
        o
        for o in s.observations
        if o.level.kind == "total" and o.working_mg_per_L > p["limit"] * o.level.reported_mg_per_L and o.readable
    ]
    if not hits:
        return []
    albumin = hits[0].level.albumin or s.case.albumin
    return [{"levels": _names(hits), "albumin": show(albumin.g_per_L, "g/L") if albumin else ""}]


def _albumin_of(s: State, o: Observation) -> Albumin | None:
    return o.level.albumin or s.case.albumin


def _albumin_old(s: State, p: Mapping[str, Any]) -> list[Words]:
    if s.profile.binding is None:
        return []
    limit = s.profile.binding.albumin_oldest_h
    worst, names = 0.0, []
    for o in _totals(s):
        albumin = _albumin_of(s, o)
        if albumin is None or albumin.taken is None or o.level.drawn is None:
            continue
        hours = abs((o.level.drawn - albumin.taken) / timedelta(hours=1))
        if hours > limit:
            worst = max(worst, hours)
            names.append(o)
    if not names:
        return []
    far = show(worst, "h", 2) if worst < 96 else show(worst / 24, "days", 2)
    return [{"levels": _names(names), "hours": far, "limit": show(limit, "h")}]


def _albumin_after_infusion(s: State, p: Mapping[str, Any]) -> list[Words]:
    used = [a for o in _totals(s) if (a := _albumin_of(s, o)) is not None]
    return [{}] if any(a.after_infusion == "yes" for a in used) else []


def _albumin_by_bcg(s: State, p: Mapping[str, Any]) -> list[Words]:
    binding = s.profile.binding
    if binding is None:
        return []
    hits = [
        o
        for o in _totals(s)
        if (a := _albumin_of(s, o)) is not None and a.method == "BCG" and a.g_per_L < binding.break_point_g_per_L
    ]
    return [{"difference": show(binding.albumin_bcg_minus_bcp_g_per_L, "g/L")}] if hits else []


def _normalised_elsewhere(s: State, p: Mapping[str, Any]) -> list[Words]:
    hits = [o for o in s.observations if o.level.kind == "normalised"]
    return [{"levels": _names(hits)}] if hits else []


def _timing_is(s: State, p: Mapping[str, Any]) -> list[Words]:
    hits = [(o, t) for o in s.observations if (t := timing(o.level, s.case, s.profile)) in p["timings"]]
    if not hits:
        return []
    sampling = s.profile.sampling
    return [
        {
            "levels": _names(o for o, _ in hits),
            "how": hits[0][1],
            "vein": show(sampling.after_iv_h, "h"),
            "muscle": show(sampling.after_im_h, "h"),
        }
    ]


def _set_aside_for(s: State, p: Mapping[str, Any]) -> list[Words]:
    hits = [o for o in s.observations if p["words"] in o.set_aside]
    return [{"levels": _names(hits)}] if hits else []


def _same_time_other_value(s: State, p: Mapping[str, Any]) -> list[Words]:
    hits = []
    for i, o in enumerate(s.observations):
        for other in s.observations[:i]:
            same = o.level.drawn is not None and o.level.drawn == other.level.drawn
            if same and o.level.kind == other.level.kind and o.level.typed.value != other.level.typed.value:
                hits += [other, o]
    return [{"levels": _names(dict.fromkeys(hits))}] if hits else []


def _free_fraction_measured(s: State, p: Mapping[str, Any]) -> list[Words]:
    fraction = measured_free_fraction(s.observations)
    if fraction is None or s.profile.binding is None:
        return []
    low, high = s.profile.binding.free_fraction_range
    return [
        {
            "percent": f"{show_number(100 * fraction)} %",
            "usual": f"{show_number(100 * low)} to {show_number(100 * high)} %",
        }
    ]


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
    if s.estimate is None or not s.steady_levels_used:
        return []
    paired = {x.level for x in s.pairs}
    hits = [x.level for x in (s.own_settling or s.settling) if x.settled is None and x.level in paired]
    return [{"levels": ", ".join(f"Level {i + 1}" for i in hits)}] if hits else []


def _misfit(s: State, p: Mapping[str, Any]) -> list[Words]:
    if s.estimate is None:
        return []
    return [
        {
            "level": f"Level {x.level + 1}",
            "observed": show(x.observed_mg_per_L, "mg/L"),
            "expected": f"{show_number(x.predicted.low)} to {show(x.predicted.high, 'mg/L')}",
        }
        for x in s.estimate.fit
        if abs(x.standardised_residual) > p["limit"]
    ]


def _pair_refused(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{"why": s.pair_refusal}] if s.pair_refusal else []


def _chance_of_negative_km_above(s: State, p: Mapping[str, Any]) -> list[Words]:
    if s.pair_estimate is None:
        return []
    chance = float(str(s.pair_estimate.diagnostics["chance of negative Km"]))
    upper = p.get("upper", 1.0)
    return [{"chance": percent(chance)}] if p["limit"] < chance <= upper else []


def _no_estimate(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{"why": s.why_none}] if s.why_none else []


def _levels_old(s: State, p: Mapping[str, Any]) -> list[Words]:
    drawn = [o.level.drawn for o in s.observations if o.level.drawn is not None]
    if s.case.now is None or not drawn:
        return []
    days = (s.case.now - max(drawn)) / timedelta(days=1)
    return [{"days": show(days, "days", 2)}] if days > p["limit_days"] else []


def _not_trusted(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{"why": s.distrusted}] if s.distrusted else []


def _published_in(s: State, kind: str, span: tuple[float, float]) -> str:
    """Who published a plausible range, in a few words for the caution."""
    for path, fact in s.profile.facts.items():
        if path.startswith("plausible.") and path.endswith(kind) and fact.value == span:
            known = [source(key) for key in fact.sources]
            return ", ".join(f"{x.authors} {x.year}" for x in known) + f", {fact.where}"
    return s.profile.file


def _vmax_outside(s: State, p: Mapping[str, Any]) -> list[Words]:
    weight = s.case.patient.weight_kg
    if s.estimate is None or weight is None:
        return []
    low, high = span = s.profile.plausible_at(s.case.patient.age_years).vmax_mg_per_kg_day
    value = s.estimate.point.vmax_mg_per_day / weight
    if low <= value <= high:
        return []
    unit = "mg/kg/h" if s.profile.time_unit == "h" else "mg/kg/day"
    words = {"value": show(s.profile.rate(value), unit), "low": show_number(s.profile.rate(low))}
    words["high"] = show(s.profile.rate(high), unit)
    return [{**words, "where": _published_in(s, "vmax", span)}]


def _km_outside(s: State, p: Mapping[str, Any]) -> list[Words]:
    if s.estimate is None:
        return []
    low, high = span = s.profile.plausible_at(s.case.patient.age_years).km_mg_per_L
    value = s.estimate.point.km_mg_per_L
    if low <= value <= high:
        return []
    words = {"value": show(value, "mg/L"), "low": show_number(low), "high": show(high, "mg/L")}
    return [{**words, "where": _published_in(s, "km", span)}]


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
                    "chance": percent_beside(chance, s.site.stop_chance),
                    "critical": show(s.goal.critical_mg_per_L, "mg/L"),
                    "limit": percent(s.site.stop_chance),
                }
            )
    return found


def _increase_on_doubt(s: State, p: Mapping[str, Any]) -> list[Words]:
    """An increase from a level below the target while nobody vouches for the doses taken."""
    if s.goal is None or not s.observations or adherence(s.case)[0] == "observed":
        return []
    if s.case.answer("adherence_doubtful") == "no":
        return []
    level = present_level(s.observations)
    censored = any(o.censored == "below" and o.working_mg_per_L == level for o in s.observations)
    now = next((r.forecast.rate_mg_per_day for r in s.regimens if r.present), None)
    if now is None or level >= s.goal.low_mg_per_L:
        return []
    return [
        {"regimen": r.words, "level": ("below " if censored else "") + show(level, "mg/L")}
        for r in s.regimens
        if r.forecast.rate_mg_per_day > now * (1 + 1e-9)
    ]


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
            "rate": s.profile.show_rate(shown.forecast.rate_mg_per_day, 4),
            "vmax": s.profile.show_rate(s.estimate.point.vmax_mg_per_day, 4),
        }
        for shown in s.regimens
        if not np.isfinite(shown.forecast.point_mg_per_L)
    ]


def _second_way_disagrees(s: State, p: Mapping[str, Any]) -> list[Words]:
    return [{"rows": "; ".join(s.disagreements)}] if s.disagreements else []


PREDICATES: dict[str, Predicate] = {
    "albumin_after_infusion": _albumin_after_infusion,
    "albumin_by_bcg": _albumin_by_bcg,
    "albumin_corrected": _albumin_corrected,
    "albumin_old": _albumin_old,
    "always": _always,
    "answered": _answered,
    "answered_both": _answered_both,
    "load_by_refused_route": _load_by_refused_route,
    "answered_without": _answered_without,
    "at_or_above_vmax": _at_or_above_vmax,
    "chance_of_negative_km_above": _chance_of_negative_km_above,
    "climbs": _climbs,
    "danger_above_stop": _danger_above_stop,
    "danger_above_warn": _danger_above_warn,
    "dialysis_clearance_assumed": _dialysis_clearance_assumed,
    "dialysis_given": _dialysis_given,
    "extracorporeal": _extracorporeal,
    "free_fraction_measured": _free_fraction_measured,
    "gel_tube": _gel_tube,
    "increase_on_doubt": _increase_on_doubt,
    "kinds_mixed": _kinds_mixed,
    "km_outside": _km_outside,
    "label_identifies": _label_identifies,
    "levels_before_change": _levels_before_change,
    "load_not_in_record": _load_not_in_record,
    "misfit": _misfit,
    "missed_doses": _missed_doses,
    "no_age": _no_age,
    "no_weight": _no_weight,
    "normalised_elsewhere": _normalised_elsewhere,
    "no_estimate": _no_estimate,
    "levels_old": _levels_old,
    "not_settled": _not_settled,
    "not_trusted": _not_trusted,
    "offset_changes": _offset_changes,
    "nothing_measured": _nothing_measured,
    "overlapping": _overlapping,
    "pair_refused": _pair_refused,
    "projected_too_high": _projected_too_high,
    "same_time_other_value": _same_time_other_value,
    "scope_is": _scope_is,
    "second_way_disagrees": _second_way_disagrees,
    "set_aside_for": _set_aside_for,
    "settling_unknown": _settling_unknown,
    "timing_is": _timing_is,
    "total_under": _total_under,
    "total_with_unknown": _total_with_unknown,
    "total_without_albumin": _total_without_albumin,
    "unconfirmed_lines": _unconfirmed_lines,
    "vmax_outside": _vmax_outside,
    "weight_estimated": _weight_estimated,
    "younger_than": _younger_than,
}

_KNOWN = {"stage", "severity", "when", "text", "source", "blocks", "lifted_by", "first"}


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
    first: bool = False


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
                bool(entry.get("first", False)),
            )
        )
    return tuple(rules)


@cache
def common_rules() -> tuple[Rule, ...]:
    text = resources.files("pkcalc").joinpath("cautions.toml").read_text(encoding="utf-8")
    return parse_rules(tomllib.loads(text), "cautions.toml")


@cache
def rules_of(profile_id: str) -> tuple[Rule, ...]:
    """The rules of every drug, then those of one drug; before them those of its own that come first of all."""
    profile = load_profile(profile_id)
    own = parse_rules(profile.cautions, profile.file)
    twice = {r.id for r in common_rules()} & {r.id for r in own}
    if twice:
        raise DrugFileError(f"{profile.file}, caution {min(twice)}: it stands in cautions.toml too.")
    for rule in (*common_rules(), *own):
        asked = [rule.settings[key] for key in ("question", "other") if key in rule.settings]
        for question in (*asked, *rule.settings.get("questions", ())):
            if question not in profile.questions:
                raise DrugFileError(f"{profile.file}, caution {rule.id}: nobody asks the question {question}.")
    return (*(r for r in own if r.first), *common_rules(), *(r for r in own if not r.first))


def ask(stage: str, state: State) -> tuple[Caution, ...]:
    """The cautions of one stage that speak, in the order of their file."""
    found: list[Caution] = []
    for rule in rules_of(state.profile.id):
        if rule.stage != stage:
            continue
        for words in PREDICATES[rule.when](state, rule.settings):
            found.append(
                Caution(
                    id=rule.id,
                    severity=rule.severity,  # type: ignore[arg-type]
                    text=rule.text.format(**words).strip(),
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
    """Stops first (those of the two-level method alone last), then warnings, then notes; no text twice."""
    seen: set[tuple[str, str]] = set()
    unique = []
    for caution in cautions:
        if (caution.id, caution.text) not in seen:
            seen.add((caution.id, caution.text))
            unique.append(caution)
    return tuple(sorted(unique, key=lambda c: (SEVERITIES.index(c.severity), set(c.blocks) == {"two-level"})))


def blocked(cautions: Iterable[Caution]) -> frozenset[str]:
    """Every result that a stop takes away."""
    return frozenset(name for c in cautions if c.severity == "stop" for name in c.blocks)
