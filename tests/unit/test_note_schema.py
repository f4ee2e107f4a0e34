"""The published JSON Schema of the note: every note keeps it, and it refuses what a note must never hold."""

from __future__ import annotations

import copy
import json
from functools import cache
from typing import Any

import pytest
from jsonschema import Draft202012Validator

from pkcalc.consult import run_consult
from pkcalc.demos import demonstration, demonstrations
from pkcalc.errors import CannotEstimate, CaseError, Problem
from pkcalc.note.data import dumps, failure_data, note_data
from pkcalc.note.schema import note_schema
from tests.unit import cases

VALIDATOR = Draft202012Validator(note_schema())


@cache
def data_of(name: str) -> Any:
    return json.loads(dumps(note_data(run_consult(demonstration(name)))))


def test_the_schema_is_one() -> None:
    Draft202012Validator.check_schema(note_schema())


@pytest.mark.parametrize("name", ["clean-pair", "toxic-level", "ethanol-dialysis", "tube-feed"])
def test_notes_keep_it(name: str) -> None:
    VALIDATOR.validate(data_of(name))


@pytest.mark.slow
@pytest.mark.parametrize("name", [d.name for d in demonstrations()])
def test_every_demonstration_keeps_it(name: str) -> None:
    VALIDATOR.validate(data_of(name))


def test_a_stop_and_failures_keep_it() -> None:
    stopped = note_data(run_consult(cases.plain(context={"seizing_now": "yes"})))
    assert stopped["outcome"] == "stop"
    VALIDATOR.validate(json.loads(dumps(stopped)))
    VALIDATOR.validate(failure_data(CaseError(Problem("Weight", "nothing was given", "a weight", "Give it"))))
    VALIDATOR.validate(failure_data(CannotEstimate("a", "b", "c")))
    VALIDATOR.validate({"pkcalc_note": 1, "outcome": "fault", "message": "x", "version": "0.1.0"})


def broken(change: str) -> Any:
    data = copy.deepcopy(data_of("clean-pair"))
    if change == "unknown key":
        data["surprise"] = 1
    elif change == "missing key":
        del data["cautions"]
    elif change == "infinity as text":
        data["table"][0]["forecast"]["steady_level_normal_binding_mg_per_L"]["median"] = "Infinity"
    elif change == "a chance above 1":
        data["plan"]["candidates"][0]["danger"] = 1.2
    elif change == "number as text":
        data["goal"]["low_mg_per_L"] = "10 mg/L"
    elif change == "other version":
        data["pkcalc_note"] = 2
    elif change == "26 lines to paste":
        data["paste"] = ["x"] * 26
    elif change == "inputs that are no case":
        data["inputs"]["patient"]["name"] = "somebody"
    return data


@pytest.mark.parametrize(
    "change",
    [
        "unknown key",
        "missing key",
        "infinity as text",
        "a chance above 1",
        "number as text",
        "other version",
        "26 lines to paste",
        "inputs that are no case",
    ],
)
def test_it_refuses(change: str) -> None:
    assert VALIDATOR.is_valid(data_of("clean-pair"))
    assert not VALIDATOR.is_valid(broken(change))


def test_every_key_with_a_number_carries_its_unit_or_is_a_share() -> None:
    """A number whose key says no unit must be a share, a count (draws_of), a year of the format or a plain coordinate."""
    unitless = {
        "pkcalc_note", "level", "correlation", "rejected_share", "median", "low_5_percent", "high_95_percent",
        "result", "first", "second", "danger", "hour", "day", "days", "hours", "expected_loss", "weight_too_high",
        "weight_too_low", "warn_chance", "stop_chance", "spread_log_now",
    }  # fmt: skip
    units = ("mg", "mg_per_L", "mg_per_day", "mg_per_h", "_L", "_h", "_min", "percent", "_log", "mL", "per_h")

    def walk(node: Any, key: str = "") -> None:
        if isinstance(node, dict):
            for k, v in node.items():
                if k not in ("inputs", "diagnostics"):
                    walk(v, k)
        elif isinstance(node, list):
            for v in node:
                walk(v, key)
        elif isinstance(node, (int, float)) and not isinstance(node, bool):
            assert key in unitless or key.startswith(("chance", "danger", "draws_of")) or key.endswith(units), key

    for name in ("clean-pair", "toxic-level", "ethanol-dialysis"):
        walk(data_of(name))
