"""The note as one JSON document: every number with its unit in the key, no NaN, no infinity."""

from __future__ import annotations

import json
from typing import Any

from pkcalc import __version__, entries
from pkcalc.case import Case
from pkcalc.clock import show_time
from pkcalc.consult import Consult, Shown
from pkcalc.errors import CannotEstimate, CaseError
from pkcalc.estimate.result import Estimate
from pkcalc.forecast import Forecast
from pkcalc.note import hours, populations
from pkcalc.note.annex import sources_used
from pkcalc.note.followup import follow_up
from pkcalc.note.front import page_one, paste_block, spoken_for
from pkcalc.note.offers import band_data, number, plan_data, regimen_data
from pkcalc.note.words import DEFERS, Section, demonstration_words
from pkcalc.note.workings import machine_only, workings

NOTE_VERSION = 1


def forecast_data(forecast: Forecast) -> dict[str, Any]:
    return {
        "active_mg_per_day": number(forecast.rate_mg_per_day),
        "steady_level_normal_binding_mg_per_L": band_data(forecast.steady),
        "steady_level_as_reported_total_mg_per_L": band_data(forecast.total),
        "steady_level_free_mg_per_L": band_data(forecast.free),
        "chance_below": number(forecast.below),
        "chance_within": number(forecast.within),
        "chance_above": number(forecast.above),
        "chance_above_critical": number(forecast.above_critical),
        "chance_no_steady_state": number(forecast.no_steady_state),
        "days_to_90_percent": band_data(forecast.settle_days) if forecast.settle_days else None,
        "level_percent_per_dose_percent": number(forecast.percent_per_percent),
        "level_at_point_mg_per_L": number(forecast.point_mg_per_L),
    }


def shown_data(shown: Shown) -> dict[str, Any]:
    return {
        "words": shown.words,
        "regimen": regimen_data(shown.regimen),
        "present": shown.present,
        "offered": shown.offered,
        "forecast": forecast_data(shown.forecast),
    }


def estimate_data(estimate: Estimate) -> dict[str, Any]:
    return {
        "method": estimate.method,
        "point": {
            "kind": estimate.point.kind,
            "vmax_mg_per_day": number(estimate.point.vmax_mg_per_day),
            "km_mg_per_L": number(estimate.point.km_mg_per_L),
            "volume_L": number(estimate.point.volume_L) if estimate.point.volume_L is not None else None,
        },
        "summary": {name: band_data(b) for name, b in estimate.summary.items()},
        "correlation": number(estimate.correlation),
        "volume_from": estimate.volume_from,
        "rejected_share": number(estimate.rejected),
        "trusted": estimate.trusted,
        "distrust": estimate.distrust,
        "diagnostics": {k: v for k, v in estimate.diagnostics.items() if isinstance(v, (int, float, str, list))},
    }


def note_data(consult: Consult) -> dict[str, Any]:
    """Consult -> plain data for JSON."""
    case = consult.case
    return {
        "pkcalc_note": NOTE_VERSION,
        "outcome": "stop" if consult.stopped else "done",
        "demonstration": demonstration_words(consult),
        "drug": case.drug,
        "cautions": [c.as_dict() for c in consult.cautions],
        "blocked": sorted(consult.blocked),
        "goal": {
            "low_mg_per_L": consult.goal.low_mg_per_L,
            "high_mg_per_L": consult.goal.high_mg_per_L,
            "aim_mg_per_L": number(consult.goal.aim_mg_per_L),
            "critical_mg_per_L": consult.goal.critical_mg_per_L,
            "origin": consult.goal.origin,
        },
        "inputs": case.file.model_dump(mode="json", by_alias=True, exclude_defaults=True),
        "levels": [
            {
                "level": o.level.index + 1,
                "as_typed": o.level.typed.text,
                "kind": o.level.kind,
                "reported_mg_per_L": number(o.level.reported_mg_per_L),
                "normal_binding_mg_per_L": number(o.working_mg_per_L) if o.readable else None,
                "normal_binding_low_mg_per_L": number(o.low_mg_per_L),
                "normal_binding_high_mg_per_L": number(o.high_mg_per_L),
                "censored": o.censored,
                "set_aside": o.set_aside,
                "steps": list(o.steps),
            }
            for o in consult.observations
        ],
        "settling": [
            {
                "level": s.level + 1,
                "settled": s.settled,
                "fraction": band_data(s.fraction) if s.fraction else None,
                "sentence": s.sentence,
            }
            for s in consult.settling
        ],
        "estimates": {name: estimate_data(e) for name, e in consult.estimates.items()},
        "refusals": dict(consult.refusals),
        "chosen": {"method": consult.chosen.method, "why": consult.chosen_why} if consult.chosen else None,
        "projection": hours.data(consult),
        "plateaus": hours.plateaus_data(consult),
        "proposed": [shown_data(s) for s in consult.proposed],
        "table": [shown_data(s) for s in consult.table],
        "plan": plan_data(consult.plan) if consult.plan is not None else None,
        "dose_rate_for_aim_active_mg_per_day": band_data(consult.aim_rate) if consult.aim_rate else None,
        "populations": _populations(consult),
        "workings": _workings(consult),
        "second_way": [
            {
                "quantity": r.quantity,
                "first": number(r.first),
                "second": number(r.second),
                "unit": r.unit,
                "tolerance": r.tolerance_text,
                "agrees": r.agrees,
            }
            for r in consult.second_way
        ],
        "follow_up": [
            {
                "level": r.came.level.index + 1,
                "forecast_for": show_time(r.then.drawn),
                "regimen": r.then.regimen,
                "kind": r.then.kind,
                "median_mg_per_L": r.then.median_mg_per_L,
                "low_5_percent_mg_per_L": r.then.low_mg_per_L,
                "high_95_percent_mg_per_L": r.then.high_mg_per_L,
                "came_mg_per_L": number(r.value_mg_per_L),
                "censored": r.came.censored,
                "interval": r.verdict,
            }
            for r in follow_up(consult)
        ],
        "blind_reentry": _reentry(case),
        "local_settings": [
            {"path": s.path, "value": s.value, "instead_of": s.instead_of} for s in consult.site.settings
        ],
        "page_one": [section_data(s) for s in page_one(consult)],
        "paste": list(paste_block(consult)),
        "sources": list(sources_used(consult)),
        "version": __version__,
        "results_date": consult.results_date,
        "case_hash": case.hash,
        "drug_file_hash": consult.profile.sha256,
        "site_file_hash": consult.site.sha256,
        "defers": DEFERS,
    }


def _reentry(case: Case) -> dict[str, Any]:
    kept = case.reentry
    return {
        "standing": entries.standing(case),
        "words": entries.standing_words(case),
        "done": None if kept is None else show_time(kept.done),
        "compared": [] if kept is None else list(kept.compared),
        "differences": [] if kept is None else list(kept.differences),
        "left": [] if kept is None else list(kept.left),
    }


def section_data(section: Section) -> dict[str, Any]:
    table = section.table
    return {
        "title": section.title,
        "lines": [x.strip() for x in section.lines],
        "table": None if table is None else {"heads": list(table.heads), "rows": [list(r) for r in table.rows]},
    }


def _populations(consult: Consult) -> list[dict[str, Any]]:
    shown = spoken_for(consult)
    if shown is None or consult.stopped:
        return []
    return [
        {
            "words": c.words,
            "used": c.used,
            "vmax_mg_per_day": band_data(c.vmax),
            "km_mg_per_L": band_data(c.km),
            "steady_level_normal_binding_mg_per_L": band_data(c.steady),
            "danger": number(c.danger),
        }
        for c in populations.compare(consult, shown)
    ]


def _workings(consult: Consult) -> dict[str, Any]:
    found = workings(consult)
    pair = found.representative
    return {
        "groups": [
            {
                "title": title,
                "steps": [
                    {
                        "what": s.what,
                        "equation": s.equation,
                        "numbers": s.numbers,
                        "result": s.result.value,
                        "unit": s.result.unit,
                        "remark": s.remark,
                    }
                    for s in steps
                ],
            }
            for title, steps in found.groups
        ],
        "representative": None if pair is None else {"vmax_mg_per_day": pair[0].value, "km_mg_per_L": pair[1].value},
        "said": [x for x in found.said if x],
        "machine_only": list(machine_only(consult)),
    }


def dumps(data: dict[str, Any]) -> str:
    """One JSON document; refuses NaN and infinity."""
    return json.dumps(data, indent=2, ensure_ascii=False, allow_nan=False) + "\n"


def failure_data(error: CaseError | CannotEstimate) -> dict[str, Any]:
    """The JSON document of an input error or a refusal."""
    if isinstance(error, CaseError):
        return {
            "pkcalc_note": NOTE_VERSION,
            "outcome": "input error",
            "problems": [p.as_dict() for p in error.problems],
            "version": __version__,
        }
    return {
        "pkcalc_note": NOTE_VERSION,
        "outcome": "stop",
        "found": error.found,
        "why": error.why,
        "helps": error.helps,
        "version": __version__,
    }
