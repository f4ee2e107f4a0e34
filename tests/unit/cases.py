"""Cases for the tests: typed values over a plain, complete, invented case."""

from __future__ import annotations

import copy
import json
from typing import Any

from pkcalc.case import Case, read_case_text

ANSWERED = dict.fromkeys(
    (
        "seizing_now",
        "overdose",
        "recent_load",
        "renal_failure",
        "renal_reduced",
        "hepatic_failure",
        "valproate",
        "interacting_change",
        "pregnancy",
        "delivery",
        "tube_feed",
        "tube_feed_change",
        "critical_illness",
        "adherence_doubtful",
    ),
    "no",
)

#: Two settled levels on two doses, 276 and 322 mg/day of active drug: Km 2.5 mg/L, Vmax 362.25 mg/day.
PLAIN: dict[str, Any] = {
    "pkcalc_case": 1,
    "drug": "phenytoin",
    "now": "2026-12-01 10:00",
    "patient": {
        "age": "45 years",
        "sex": "female",
        "weight": "60 kg",
        "weight_basis": "measured",
        "height": "165 cm",
    },
    "albumin": {"value": "46 g/L", "taken": "2026-12-01 07:00"},
    "context": ANSWERED,
    "doses": [
        {
            "form": "extended-capsule",
            "amount": "300 mg",
            "every": "24 h",
            "from": "2026-08-20 21:00",
            "until": "2026-09-15 12:00",
            "given_by": "nurse",
        },
        {
            "form": "extended-capsule",
            "amount": "350 mg",
            "every": "24 h",
            "from": "2026-09-15 21:00",
            "given_by": "nurse",
        },
    ],
    "levels": [
        {"value": "8 mg/L", "kind": "total", "drawn": "2026-09-15 07:00"},
        {"value": "20 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"},
    ],
}


def plain(**changes: Any) -> Case:
    """The plain case with top-level parts replaced; `context` is merged, None removes a part."""
    data = copy.deepcopy(PLAIN)
    for key, value in changes.items():
        if key == "context" and value is not None:
            data["context"] = {**data["context"], **value}
        elif value is None:
            data.pop(key, None)
        else:
            data[key] = value
    return read_case_text(json.dumps(data))


def doses(*amounts: str, form: str = "extended-capsule") -> list[dict[str, Any]]:
    """The plain dose lines with other amounts."""
    lines = copy.deepcopy(PLAIN["doses"])
    for line, amount in zip(lines, amounts, strict=True):
        line["amount"], line["form"] = amount, form
    return lines


def levels(*values: str, **same: Any) -> list[dict[str, Any]]:
    """The plain levels with other values."""
    rows = copy.deepcopy(PLAIN["levels"])
    return [{**row, "value": value, **same} for row, value in zip(rows, values, strict=True)]
