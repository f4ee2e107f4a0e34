"""Invented cases of drugs that are followed by the hour, or only projected."""

from __future__ import annotations

import copy
import json
from typing import Any

from pkcalc.case import Case, check_case, parse_case_text

NO = dict.fromkeys(
    (
        "overdose",
        "recent_load",
        "renal_failure",
        "hepatic_failure",
        "interacting_change",
        "pregnancy",
        "critical_illness",
        "extracorporeal",
        "adherence_doubtful",
    ),
    "no",
)

#: A 70 kg social drinker after a load of 52.5 g over 1 h, on 97 mL/h of a 10 % v/v solution (7.65 g/h).
ETHANOL: dict[str, Any] = {
    "pkcalc_case": 1,
    "drug": "ethanol",
    "now": "2026-06-02 13:10",
    "patient": {"age": "44 years", "sex": "male", "weight": "70 kg", "weight_basis": "measured"},
    "context": NO,
    "doses": [
        {
            "form": "infusion",
            "product": "infusion-10-vv",
            "amount": "665 mL",
            "at": "2026-06-02 08:00",
            "over": "1 h",
            "given_by": "nurse",
        },
        {
            "form": "infusion",
            "product": "infusion-10-vv",
            "rate": "97 mL/h",
            "from": "2026-06-02 09:00",
            "given_by": "nurse",
        },
    ],
    "levels": [
        {"value": "116 mg/dL", "kind": "total", "drawn": "2026-06-02 10:00"},
        {"value": "110 mg/dL", "kind": "total", "drawn": "2026-06-02 13:00"},
    ],
    "population": "average-drinker",
}

SESSION = {"from": "2026-06-02 13:00", "until": "2026-06-02 17:00", "clearance": "140 mL/min"}


def text(**changes: Any) -> str:
    """The ethanol case as JSON with top-level parts replaced; None removes one."""
    data = copy.deepcopy(ETHANOL)
    if changes.get("dialysis"):
        data["context"] = {**NO, "extracorporeal": "yes"}
    for key, value in changes.items():
        if value is None:
            data.pop(key, None)
        else:
            data[key] = value
    return json.dumps(data)


def ethanol(**changes: Any) -> Case:
    return check_case(parse_case_text(text(**changes)))


def dose(line: int, **changes: Any) -> list[dict[str, Any]]:
    """The dose lines with one of them changed (0 for the first); None removes a key."""
    lines = copy.deepcopy(ETHANOL["doses"])
    for key, value in changes.items():
        if value is None:
            lines[line].pop(key, None)
        else:
            lines[line][key] = value
    return list(lines)


def oral(drug: str, form: str, amount: str, *, marked: bool, every: str = "12 h", **changes: Any) -> Case:
    """One patient on a constant regimen for a week, with one level; marked: as a demonstration."""
    data: dict[str, Any] = {
        "pkcalc_case": 1,
        "drug": drug,
        "now": "2026-03-16 09:00",
        "patient": {"age": "50 years", "sex": "female", "weight": "70 kg", "weight_basis": "measured"},
        "context": NO,
        "doses": [{"form": form, "amount": amount, "every": every, "from": "2026-03-09 08:00", "given_by": "nurse"}],
        **changes,
    }
    if marked:
        data["demonstration"] = {"name": "invented", "title": "Invented", "shows": "An invented case."}
    return check_case(parse_case_text(json.dumps(data)))
