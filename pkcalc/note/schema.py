"""The JSON Schema of the note: what `--format json` prints, key by key, for those who read it with a program."""

from __future__ import annotations

from typing import Any, get_args

from pkcalc.case import COMPARED, case_schema
from pkcalc.entries import Standing
from pkcalc.note.data import NOTE_VERSION
from pkcalc.note.followup import Verdict

TEXT: dict[str, Any] = {"type": "string"}
NUMBER: dict[str, Any] = {"type": "number"}
WHOLE: dict[str, Any] = {"type": "integer", "minimum": 0}
YES_NO: dict[str, Any] = {"type": "boolean"}
SHARE: dict[str, Any] = {"type": "number", "minimum": 0, "maximum": 1}
LINES: dict[str, Any] = {"type": "array", "items": TEXT}


def _ref(name: str) -> dict[str, Any]:
    return {"$ref": f"#/$defs/{name}"}


def _or_null(schema: dict[str, Any]) -> dict[str, Any]:
    return {"anyOf": [schema, {"type": "null"}]}


def _list(schema: dict[str, Any]) -> dict[str, Any]:
    return {"type": "array", "items": schema}


def _object(parts: dict[str, dict[str, Any]], *, words: str = "", optional: tuple[str, ...] = ()) -> dict[str, Any]:
    found: dict[str, Any] = {
        "type": "object",
        "properties": parts,
        "required": [k for k in parts if k not in optional],
        "additionalProperties": False,
    }
    if words:
        found["description"] = words
    return found


LEVEL, BAND, DAYS, DAYS_BAND = _ref("level"), _ref("band"), _ref("days"), _ref("days_band")

_LINE = {
    "steady_level_normal_binding_mg_per_L": BAND,
    "steady_level_as_reported_total_mg_per_L": BAND,
    "steady_level_free_mg_per_L": BAND,
    "chance_below": SHARE,
    "chance_within": SHARE,
    "chance_above": SHARE,
    "chance_above_critical": SHARE,
    "chance_no_steady_state": SHARE,
}

_DEFINITIONS: dict[str, dict[str, Any]] = {
    "level": {
        "description": "A number, or that there is no steady state.",
        "anyOf": [NUMBER, _object({"no_steady_state": {"const": True}})],
    },
    "days": {
        "description": "Days, or never.",
        "anyOf": [{"type": "number", "minimum": 0}, _object({"never": {"const": True}})],
    },
    "band": _object(
        {"median": LEVEL, "low_5_percent": LEVEL, "high_95_percent": LEVEL}, words="Median and 90 % interval."
    ),
    "days_band": _object(
        {"median": DAYS, "low_5_percent": DAYS, "high_95_percent": DAYS}, words="Median and 90 % interval, in days."
    ),
    "regimen": _object(
        {
            "cycle_h": NUMBER,
            "doses": _list(_object({"form": TEXT, "hour": NUMBER, "labelled_mg": NUMBER})),
        },
        words="Labelled amounts within a cycle; hour is the time of day for a cycle of 24 h.",
    ),
    "line": _object({**_LINE, "days_to_90_percent": _or_null(DAYS_BAND)}),
    "forecast": _object(
        {
            "active_mg_per_day": NUMBER,
            **_LINE,
            "days_to_90_percent": _or_null(BAND),
            "level_percent_per_dose_percent": LEVEL,
            "level_at_point_mg_per_L": LEVEL,
        }
    ),
    "shown": _object(
        {"words": TEXT, "regimen": _ref("regimen"), "present": YES_NO, "offered": YES_NO, "forecast": _ref("forecast")}
    ),
    "level_on_day": _object({"day": NUMBER, "level_mg_per_L": BAND}),
    "candidate": _object(
        {
            "words": TEXT,
            "dispense": TEXT,
            "regimen": _ref("regimen"),
            "active_mg_per_day": NUMBER,
            "change_percent": _or_null(NUMBER),
            "present": YES_NO,
            "own": YES_NO,
            "offered": YES_NO,
            "why_not": LINES,
            "danger": SHARE,
            "chance_too_high_at_plateau": SHARE,
            "chance_too_high_at_next_draw": _or_null(SHARE),
            "past_intake_carried_on": _ref("line"),
            "every_dose_taken": _ref("line"),
            "trough_mg_per_L": _or_null(BAND),
            "peak_mg_per_L": _or_null(BAND),
            "level_on_days": _or_null(_list(_ref("level_on_day"))),
            "expected_loss": _or_null(NUMBER),
        },
        words="One regimen, both lines; danger: chance above critical or of no steady state, every dose taken.",
    ),
    "load": _object(
        {
            "form": TEXT,
            "product": TEXT,
            "route": TEXT,
            "from_level_mg_per_L": NUMBER,
            "aim_mg_per_L": NUMBER,
            "labelled_by_formula_mg": NUMBER,
            "labelled_ordered_mg": NUMBER,
            "active_mg": NUMBER,
            "parts": _list(_object({"after_h": NUMBER, "labelled_mg": NUMBER})),
            "infusion_at_least_min": _or_null(NUMBER),
            "rise_mg_per_L": BAND,
            "level_after_mg_per_L": BAND,
            "level_at_draw_mg_per_L": BAND,
            "draw_after_h": NUMBER,
            "chance_above_range": SHARE,
            "chance_above_critical": SHARE,
            "maintenance": TEXT,
            "level_on_days": _list(_ref("level_on_day")),
            "order": LINES,
            "notes": LINES,
            "offered": YES_NO,
            "why_not": LINES,
        }
    ),
    "pause": _object(
        {
            "withdrawal_risk": TEXT,
            "first": TEXT,
            "restart": TEXT,
            "level_today_mg_per_L": BAND,
            "until_level_mg_per_L": NUMBER,
            "days": DAYS_BAND,
            "days_with_late_absorption": _or_null(DAYS_BAND),
            "swallowed_at_once": _list(_object({"active_mg": NUMBER, "ago_h": NUMBER, "published_peak_h": NUMBER})),
            "reductions": _list(
                _object(
                    {
                        "words": TEXT,
                        "of_present_percent": NUMBER,
                        "days_until_level": DAYS_BAND,
                        "steady_level_normal_binding_mg_per_L": BAND,
                        "offered": YES_NO,
                        "why_not": LINES,
                    }
                )
            ),
            "restarts": _list(
                _object(
                    {
                        "words": TEXT,
                        "steady_level_normal_binding_mg_per_L": BAND,
                        "day": DAYS,
                        "restarted_early": _object({"day": DAYS}),
                        "restarted_on_time": _object({"day": DAYS}),
                        "restarted_late": _object({"day": DAYS}),
                        "level_restarted_early_mg_per_L": BAND,
                        "level_restarted_on_time_mg_per_L": BAND,
                        "level_restarted_late_mg_per_L": BAND,
                        "lowest_level_restarted_late_mg_per_L": BAND,
                    }
                )
            ),
            "lines": LINES,
        }
    ),
    "switch": _object(
        {
            "form": TEXT,
            "words": TEXT,
            "labelled_exactly_equal_mg_per_day": NUMBER,
            "active_mg_per_day": NUMBER,
            "change_percent": NUMBER,
            "steady_level_normal_binding_mg_per_L": BAND,
            "median_at_least_absorbed_mg_per_L": LEVEL,
            "median_at_most_absorbed_mg_per_L": LEVEL,
            "lines": LINES,
            "offered": YES_NO,
            "why_not": LINES,
        }
    ),
    "draw": _object(
        {
            "day": DAYS,
            "time": _or_null(TEXT),
            "expected_spread_log": NUMBER,
            "expected_level_normal_binding_mg_per_L": BAND,
            "expected_level_as_reported_mg_per_L": BAND,
        }
    ),
    "action": _object(
        {
            "level": TEXT,
            "call_above_as_reported_mg_per_L": NUMBER,
            "above_from": TEXT,
            "low_as_reported_mg_per_L": _or_null(NUMBER),
            "words": TEXT,
        },
        words="From which level as reported on to call: above (or at the critical level), and below.",
    ),
    "next_level": _object(
        {
            "regimen": TEXT,
            "spread_log_now": NUMBER,
            "chosen": _ref("draw"),
            "safety": _or_null(_ref("draw")),
            "curve": _list(_ref("draw")),
            "settled_days": DAYS_BAND,
            "no_draw_plan_because": TEXT,
            "line": _ref("action"),
            "safety_line": _or_null(_ref("action")),
            "line_with_load": _or_null(_ref("action")),
            "action": TEXT,
            "safety_action": TEXT,
            "why": LINES,
        }
    ),
    "plan": _object(
        {
            "shelf": TEXT,
            "lines": LINES,
            "level_today_mg_per_L": _or_null(BAND),
            "level_today_from": TEXT,
            "largest_step": _or_null(
                _object({"active_mg_per_day": NUMBER, "rule": TEXT, "every_dose_taken": _ref("line")})
            ),
            "largest_active_mg_per_day": NUMBER,
            "limits": _object({"warn_chance": SHARE, "stop_chance": SHARE}),
            "candidates": _list(_ref("candidate")),
            "draws": _object(
                {
                    "draws_of_steady_level": WHOLE,
                    "draws_of_days_to_90_percent": WHOLE,
                    "draws_of_level_on_days": WHOLE,
                    "draws_of_trough_and_peak": WHOLE,
                },
                words="How many draws of the estimate each kind of number of a candidate comes from.",
            ),
            "by_expected_loss": _or_null(
                _object(
                    {
                        "weight_too_high": NUMBER,
                        "weight_too_low": NUMBER,
                        "order": _list(_object({"words": TEXT, "expected_loss": NUMBER})),
                    }
                )
            ),
            "loads": _list(_ref("load")),
            "no_load": LINES,
            "pause": _or_null(_ref("pause")),
            "switches": _list(_ref("switch")),
            "next_level": _or_null(_ref("next_level")),
            "no_next_level": TEXT,
            "overlay": _or_null(
                _object(
                    {"days": _list(NUMBER), "level_mg_per_L": _list(_object({"words": TEXT, "bands": _list(BAND)}))}
                )
            ),
        }
    ),
    "estimate": _object(
        {
            "method": TEXT,
            "point": _object(
                {
                    "kind": TEXT,
                    "vmax_mg_per_day": NUMBER,
                    "km_mg_per_L": NUMBER,
                    "volume_L": _or_null(NUMBER),
                }
            ),
            "summary": _object(
                {"vmax_mg_per_day": BAND, "km_mg_per_L": BAND, "volume_L": BAND}, optional=("volume_L",)
            ),
            "correlation": {"type": "number", "minimum": -1, "maximum": 1},
            "volume_from": {"enum": ["population", "record", "none"]},
            "rejected_share": SHARE,
            "trusted": YES_NO,
            "distrust": TEXT,
            "diagnostics": {"type": "object", "description": "Plain numbers and words of the method, by name."},
        },
        words="Vmax in mg/day of active drug.",
    ),
    "amount": {
        "type": "object",
        "description": "An amount or a rate of active drug, with what of each product holds it.",
        "properties": {"for": TEXT, "products": _list({"type": "object"}), "active_mg": BAND, "active_mg_per_h": BAND},
        "required": ["for", "products"],
        "additionalProperties": False,
    },
    "projection": _object(
        {
            "time": TEXT,
            "level_now_mg_per_L": BAND,
            "started": TEXT,
            "paths": _list(
                _object(
                    {
                        "words": TEXT,
                        "present": YES_NO,
                        "active_mg_per_h": NUMBER,
                        "steady_level_without_dialysis_mg_per_L": BAND,
                        "chance_no_steady_state": SHARE,
                        "climb_mg_per_L_per_h": _or_null(LEVEL),
                        "leaves_target_in_h": _or_null(NUMBER),
                        "moments": _list(
                            _object(
                                {
                                    "hours": NUMBER,
                                    "time": TEXT,
                                    "level_mg_per_L": BAND,
                                    "chance_below": SHARE,
                                    "chance_within": SHARE,
                                    "chance_above": SHARE,
                                    "chance_above_critical": SHARE,
                                }
                            )
                        ),
                    }
                )
            ),
            "load": _or_null(_ref("amount")),
            "rates_for_aim": _list(_ref("amount")),
            "next_level": _object({"time": TEXT, "in_h": NUMBER, "because": LINES}),
        },
        words="The hours to come, for drugs that are followed from level to level.",
    ),
    "plateaus": _object(
        {
            "settle": _list(
                _object(
                    {
                        "words": TEXT,
                        "active_mg_per_h": NUMBER,
                        "steady_level_mg_per_L": BAND,
                        "chance_below": SHARE,
                        "chance_within": SHARE,
                        "chance_above": SHARE,
                        "chance_above_critical": SHARE,
                        "chance_no_steady_state": SHARE,
                    }
                )
            ),
            "rates_for_aim": _list(_ref("amount")),
        },
        words="Where rates would settle by two steady levels without times, for drugs told by the hour.",
    ),
    "section": _object(
        {
            "title": TEXT,
            "lines": LINES,
            "table": _or_null(_object({"heads": LINES, "rows": _list(LINES)})),
        }
    ),
    "caution": _object(
        {
            "id": TEXT,
            "severity": {"enum": ["stop", "warn", "note"]},
            "text": TEXT,
            "source": TEXT,
            "blocks": LINES,
            "lifted_by": TEXT,
        }
    ),
    "problem": _object({"where": TEXT, "given": TEXT, "allowed": TEXT, "fix": TEXT}, optional=()),
}

_NOTE = _object(
    {
        "pkcalc_note": {"const": NOTE_VERSION},
        "outcome": {"enum": ["done", "stop"], "description": "stop: no forecast was given; see cautions and refusals."},
        "demonstration": {**TEXT, "description": "Not empty: invented, not a patient, not for clinical use."},
        "drug": TEXT,
        "cautions": _list(_ref("caution")),
        "blocked": LINES,
        "goal": _object(
            {
                "low_mg_per_L": NUMBER,
                "high_mg_per_L": NUMBER,
                "aim_mg_per_L": NUMBER,
                "critical_mg_per_L": NUMBER,
                "origin": TEXT,
            },
            words="On the working basis: total level at normal binding.",
        ),
        "inputs": {**_ref("case"), "description": "What was typed, as in the case file."},
        "levels": _list(
            _object(
                {
                    "level": WHOLE,
                    "as_typed": TEXT,
                    "kind": {"enum": ["total", "free", "normalised"]},
                    "reported_mg_per_L": NUMBER,
                    "normal_binding_mg_per_L": _or_null(NUMBER),
                    "normal_binding_low_mg_per_L": NUMBER,
                    "normal_binding_high_mg_per_L": NUMBER,
                    "censored": {"enum": ["below", "above", None]},
                    "set_aside": TEXT,
                    "steps": LINES,
                }
            )
        ),
        "settling": _list(
            _object({"level": WHOLE, "settled": _or_null(YES_NO), "fraction": _or_null(BAND), "sentence": TEXT})
        ),
        "estimates": {"type": "object", "additionalProperties": _ref("estimate")},
        "refusals": {"type": "object", "additionalProperties": TEXT},
        "chosen": _or_null(_object({"method": TEXT, "why": TEXT})),
        "projection": _or_null(_ref("projection")),
        "plateaus": _or_null(_ref("plateaus")),
        "proposed": _list(_ref("shown")),
        "table": _list(_ref("shown")),
        "plan": _or_null(_ref("plan")),
        "dose_rate_for_aim_active_mg_per_day": _or_null(BAND),
        "populations": _list(
            _object(
                {
                    "words": TEXT,
                    "used": YES_NO,
                    "vmax_mg_per_day": BAND,
                    "km_mg_per_L": BAND,
                    "steady_level_normal_binding_mg_per_L": BAND,
                    "danger": SHARE,
                }
            )
        ),
        "workings": _object(
            {
                "groups": _list(
                    _object(
                        {
                            "title": TEXT,
                            "steps": _list(
                                _object(
                                    {
                                        "what": TEXT,
                                        "equation": TEXT,
                                        "numbers": TEXT,
                                        "result": NUMBER,
                                        "unit": TEXT,
                                        "remark": TEXT,
                                    }
                                )
                            ),
                        }
                    )
                ),
                "representative": _or_null(_object({"vmax_mg_per_day": NUMBER, "km_mg_per_L": NUMBER})),
                "said": LINES,
                "machine_only": LINES,
            },
            words="Every result follows from the numbers printed before it.",
        ),
        "second_way": _list(
            _object(
                {
                    "quantity": TEXT,
                    "first": LEVEL,
                    "second": LEVEL,
                    "unit": TEXT,
                    "tolerance": TEXT,
                    "agrees": YES_NO,
                }
            )
        ),
        "follow_up": _list(
            _object(
                {
                    "level": WHOLE,
                    "forecast_for": TEXT,
                    "regimen": TEXT,
                    "kind": {"enum": ["total", "free", "normalised"]},
                    "median_mg_per_L": NUMBER,
                    "low_5_percent_mg_per_L": NUMBER,
                    "high_95_percent_mg_per_L": NUMBER,
                    "came_mg_per_L": NUMBER,
                    "censored": {"enum": ["below", "above", None]},
                    "interval": {"enum": [*get_args(Verdict)]},
                },
                words="A level that came, beside what an earlier note forecast for its time (90 % interval).",
            )
        ),
        "blind_reentry": _object(
            {
                "standing": {"enum": [*get_args(Standing)]},
                "words": TEXT,
                "done": _or_null(TEXT),
                "compared": _list({"enum": [*COMPARED]}),
                "differences": LINES,
                "left": LINES,
            },
            words="Whether a second person's own entry was compared; void: what was compared has changed since.",
        ),
        "local_settings": _list(_object({"path": TEXT, "value": TEXT, "instead_of": TEXT})),
        "page_one": _list(_ref("section")),
        "paste": {**LINES, "maxItems": 25},
        "sources": LINES,
        "version": TEXT,
        "results_date": {"type": "string", "format": "date"},
        "case_hash": {"type": "string", "pattern": "^[0-9a-f]{12}$"},
        "drug_file_hash": {"type": "string", "pattern": "^[0-9a-f]{64}$"},
        "site_file_hash": {"type": "string", "pattern": "^([0-9a-f]{64})?$"},
        "defers": TEXT,
    },
    words="A consult note.",
)

_REFUSED = _object(
    {
        "pkcalc_note": {"const": NOTE_VERSION},
        "outcome": {"const": "stop"},
        "found": TEXT,
        "why": TEXT,
        "helps": TEXT,
        "version": TEXT,
    },
    words="The input was readable, but no number follows from it.",
)
_UNREADABLE = _object(
    {
        "pkcalc_note": {"const": NOTE_VERSION},
        "outcome": {"const": "input error"},
        "problems": {**_list(_ref("problem")), "minItems": 1},
        "version": TEXT,
    },
    words="The input must be mended first.",
)
_FAULT = _object(
    {
        "pkcalc_note": {"const": NOTE_VERSION},
        "outcome": {"const": "fault"},
        "message": TEXT,
        "version": TEXT,
    },
    words="The program failed; no number was given.",
)


def note_schema() -> dict[str, Any]:
    """The JSON Schema (2020-12) of everything `--format json` can print for a note."""
    case = case_schema()
    definitions = dict(case.pop("$defs", {}))
    case.pop("$schema", None)
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        "title": "pkcalc note",
        "description": (
            "Units stand in the keys. A number without a steady state is an object that says so; NaN "
            "and infinity never "
            "occur. Times are clock times as typed."
        ),
        "anyOf": [_NOTE, _REFUSED, _UNREADABLE, _FAULT],
        "$defs": {**definitions, **_DEFINITIONS, "case": case},
    }
