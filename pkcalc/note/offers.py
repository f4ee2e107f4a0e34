"""The plan in JSON: every regimen of the shelf, loads, pause, switches, the next level; units in the keys."""

from __future__ import annotations

import math
from typing import Any

from pkcalc.dosing import Regimen
from pkcalc.estimate.result import Band
from pkcalc.forecast import TIME_DRAWS, Forecast
from pkcalc.plan import Candidate, Plan
from pkcalc.plan.courses import DAY_DRAWS, SWING_DRAWS
from pkcalc.plan.loading import Load
from pkcalc.plan.nextlevel import Action, Draw, NextLevel
from pkcalc.plan.pausing import Pause
from pkcalc.plan.switching import Switch


def number(value: float) -> Any:
    """A finite number, or the object that says there is no steady state."""
    return float(f"{value:.6g}") if math.isfinite(value) else {"no_steady_state": True}


def _days(value: float) -> Any:
    return float(f"{value:.4g}") if math.isfinite(value) else {"never": True}


def band_data(band: Band | None) -> dict[str, Any] | None:
    if band is None:
        return None
    return {
        "median": number(band.median),
        "low_5_percent": number(band.low),
        "high_95_percent": number(band.high),
    }


def _days_band(band: Band | None) -> dict[str, Any] | None:
    if band is None:
        return None
    return {"median": _days(band.median), "low_5_percent": _days(band.low), "high_95_percent": _days(band.high)}


def _line(f: Forecast) -> dict[str, Any]:
    return {
        "steady_level_normal_binding_mg_per_L": band_data(f.steady),
        "steady_level_as_reported_total_mg_per_L": band_data(f.total),
        "steady_level_free_mg_per_L": band_data(f.free),
        "chance_below": number(f.below),
        "chance_within": number(f.within),
        "chance_above": number(f.above),
        "chance_above_critical": number(f.above_critical),
        "chance_no_steady_state": number(f.no_steady_state),
        "days_to_90_percent": _days_band(f.settle_days),
    }


def regimen_data(regimen: Regimen) -> dict[str, Any]:
    return {
        "cycle_h": regimen.cycle_h,
        "doses": [{"form": x.form, "hour": x.hour, "labelled_mg": x.labelled_mg} for x in regimen.intakes],
    }


def candidate_data(c: Candidate) -> dict[str, Any]:
    """One regimen with both lines. trough, peak and named days: null only where there is no volume."""
    return {
        "words": c.words,
        "dispense": c.dispense,
        "regimen": regimen_data(c.regimen),
        "active_mg_per_day": number(c.rate_mg_per_day),
        "change_percent": None if c.change_percent is None else number(c.change_percent),
        "present": c.present,
        "own": c.proposed,
        "offered": c.offered,
        "why_not": list(c.why_not),
        "danger": number(c.danger),
        "chance_too_high_at_plateau": number(c.danger_at_plateau),
        "chance_too_high_at_next_draw": None if c.danger_at_draw is None else number(c.danger_at_draw),
        "past_intake_carried_on": _line(c.forecast),
        "every_dose_taken": _line(c.taken),
        "trough_mg_per_L": band_data(c.trough),
        "peak_mg_per_L": band_data(c.peak),
        "level_on_days": None
        if c.on_days is None
        else [{"day": day, "level_mg_per_L": band_data(b)} for day, b in c.on_days],
        "expected_loss": None if c.loss is None else number(c.loss),
    }


def _load(load: Load) -> dict[str, Any]:
    return {
        "form": load.form,
        "product": load.product,
        "route": load.route,
        "from_level_mg_per_L": number(load.from_mg_per_L),
        "aim_mg_per_L": number(load.aim_mg_per_L),
        "labelled_by_formula_mg": number(load.wanted_mg),
        "labelled_ordered_mg": number(load.amount_mg),
        "active_mg": number(load.active_mg),
        "parts": [{"after_h": h, "labelled_mg": mg} for h, mg in load.parts],
        "infusion_at_least_min": load.minutes,
        "rise_mg_per_L": band_data(load.rise),
        "level_after_mg_per_L": band_data(load.after),
        "level_at_draw_mg_per_L": band_data(load.at_draw),
        "draw_after_h": load.draw_after_h,
        "chance_above_range": number(load.above_high),
        "chance_above_critical": number(load.above_critical),
        "maintenance": load.maintenance,
        "level_on_days": [{"day": day, "level_mg_per_L": band_data(b)} for day, b in load.followed],
        "order": list(load.order),
        "notes": list(load.notes),
        "offered": load.offered,
        "why_not": list(load.why_not),
    }


def _pause(p: Pause) -> dict[str, Any]:
    return {
        "withdrawal_risk": p.risk,
        "first": p.first,
        "restart": p.restart_line,
        "level_today_mg_per_L": band_data(p.now),
        "until_level_mg_per_L": number(p.to_mg_per_L),
        "days": _days_band(p.days),
        "days_with_late_absorption": _days_band(p.with_absorption),
        "swallowed_at_once": [
            {"active_mg": number(x.amount_mg), "ago_h": number(x.hours_ago), "published_peak_h": number(x.peak_h)}
            for x in p.large
        ],
        "reductions": [
            {
                "words": r.words,
                "of_present_percent": number(r.percent),
                "days_until_level": _days_band(r.days),
                "steady_level_normal_binding_mg_per_L": band_data(r.steady),
                "offered": r.offered,
                "why_not": list(r.why_not),
            }
            for r in p.reductions
        ],
        "restarts": [
            {
                "words": r.words,
                "steady_level_normal_binding_mg_per_L": band_data(r.steady),
                "day": _days(r.day),
                "restarted_early": {"day": _days(r.early_day)},
                "restarted_on_time": {"day": _days(r.on_time_day)},
                "restarted_late": {"day": _days(r.late_day)},
                "level_restarted_early_mg_per_L": band_data(r.early),
                "level_restarted_on_time_mg_per_L": band_data(r.on_time),
                "level_restarted_late_mg_per_L": band_data(r.late),
                "lowest_level_restarted_late_mg_per_L": band_data(r.lowest_late),
            }
            for r in p.restarts
        ],
        "lines": list(p.lines),
    }


def _switch(s: Switch) -> dict[str, Any]:
    return {
        "form": s.form,
        "words": s.words,
        "labelled_exactly_equal_mg_per_day": number(s.exact_labelled_mg),
        "active_mg_per_day": number(s.active_mg_per_day),
        "change_percent": number(s.change_percent),
        "steady_level_normal_binding_mg_per_L": band_data(s.steady),
        "median_at_least_absorbed_mg_per_L": number(s.steady_low_mg_per_L),
        "median_at_most_absorbed_mg_per_L": number(s.steady_high_mg_per_L),
        "lines": list(s.lines),
        "offered": s.offered,
        "why_not": list(s.why_not),
    }


def _draw(d: Draw | None) -> dict[str, Any] | None:
    if d is None:
        return None
    return {
        "day": _days(d.day),
        "time": d.moment.isoformat(timespec="minutes") if d.moment is not None else None,
        "expected_spread_log": number(d.spread),
        "expected_level_normal_binding_mg_per_L": band_data(d.expected),
        "expected_level_as_reported_mg_per_L": band_data(d.reported),
    }


def _action(a: Action | None) -> dict[str, Any] | None:
    if a is None:
        return None
    low = a.low_mg_per_L_reported
    return {
        "level": a.scale,
        "call_above_as_reported_mg_per_L": number(a.high_mg_per_L_reported),
        "above_from": a.high_from,
        "low_as_reported_mg_per_L": None if low is None else number(low),
        "words": a.words,
    }


def _next(n: NextLevel) -> dict[str, Any]:
    return {
        "regimen": n.regimen_words,
        "spread_log_now": number(n.before),
        "chosen": _draw(n.chosen),
        "safety": _draw(n.safety),
        "curve": [_draw(d) for d in n.draws],
        "settled_days": _days_band(n.settled_days),
        "no_draw_plan_because": n.none_because,
        "line": _action(n.line),
        "safety_line": _action(n.safety_line),
        "line_with_load": _action(n.with_load),
        "action": n.action,
        "safety_action": n.safety_action,
        "why": list(n.why),
    }


def draws_data(plan: Plan) -> dict[str, int]:
    """How many draws of the estimate the numbers of a candidate come from; times are told by fewer than levels."""
    all_of_them = len(plan.setting.central.weights)
    return {
        "draws_of_steady_level": all_of_them,
        "draws_of_days_to_90_percent": min(all_of_them, TIME_DRAWS),
        "draws_of_level_on_days": min(all_of_them, DAY_DRAWS),
        "draws_of_trough_and_peak": min(all_of_them, SWING_DRAWS),
    }


def plan_data(plan: Plan) -> dict[str, Any]:
    """The whole plan."""
    level = plan.today.level
    return {
        "shelf": plan.shelf.words,
        "lines": list(plan.lines),
        "level_today_mg_per_L": band_data(level),
        "level_today_from": plan.today.words,
        "largest_step": None
        if plan.step is None
        else {
            "active_mg_per_day": number(plan.step.step_mg_per_day),
            "rule": plan.step.words,
            "every_dose_taken": _line(plan.step.forecast),
        },
        "largest_active_mg_per_day": number(plan.setting.largest_mg_per_day),
        "limits": {"warn_chance": plan.setting.site.warn_chance, "stop_chance": plan.setting.site.stop_chance},
        "candidates": [candidate_data(c) for c in plan.every],
        "draws": draws_data(plan),
        "by_expected_loss": {
            "weight_too_high": plan.setting.site.loss_too_high,
            "weight_too_low": plan.setting.site.loss_too_low,
            "order": [{"words": c.words, "expected_loss": number(c.loss or 0.0)} for c in plan.ranked],
        }
        if plan.ranked
        else None,
        "loads": [_load(x) for x in plan.loads],
        "no_load": list(plan.no_load),
        "pause": None if plan.pause is None else _pause(plan.pause),
        "switches": [_switch(s) for s in plan.switches],
        "next_level": None if plan.next_level is None else _next(plan.next_level),
        "no_next_level": plan.no_next_level,
        "overlay": None
        if plan.overlay is None
        else {
            "days": list(plan.overlay.days),
            "level_mg_per_L": [
                {"words": words, "bands": [band_data(b) for b in bands]} for words, bands in plan.overlay.courses
            ],
        },
    }
