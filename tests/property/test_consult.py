"""Any case that can be read ends in a note: no traceback, no number outside its physical range."""

from __future__ import annotations

import json
import random
import re
from typing import Any

import pytest

from pkcalc.case import read_case_text
from pkcalc.consult import run_consult
from pkcalc.demos import demonstrations
from pkcalc.errors import CaseError
from pkcalc.note.data import dumps, note_data
from pkcalc.note.document import compose
from pkcalc.note.text import render

NUMBER = re.compile(r"[0-9]+(?:\.[0-9]+)?")
FACTORS = (0.1, 0.3, 0.5, 0.8, 0.9, 1.1, 1.25, 2, 4, 10)


def mutated(data: Any, chance: random.Random) -> Any:
    """The case with a few values scaled, answers flipped, parts dropped or lists cut."""
    if isinstance(data, dict):
        found = {k: mutated(v, chance) for k, v in data.items()}
        optional = [k for k in found if k not in ("pkcalc_case", "drug", "form", "value", "kind", "name", "title")]
        if optional and chance.random() < 0.06:
            found.pop(chance.choice(optional))
        return found
    if isinstance(data, list):
        kept = [mutated(v, chance) for v in data]
        if len(kept) > 1 and chance.random() < 0.1:
            kept.pop(chance.randrange(len(kept)))
        if kept and chance.random() < 0.05:
            kept.append(kept[-1])
        return kept
    if isinstance(data, str) and chance.random() < 0.12:
        if data in ("yes", "no", "unknown"):
            return chance.choice(["yes", "no", "unknown"])
        if NUMBER.match(data) and " " in data and "-" not in data:
            number, _, unit = data.partition(" ")
            if NUMBER.fullmatch(number):
                return f"{float(number) * chance.choice(FACTORS):.6g} {unit}"
    return data


def walk(data: Any, path: str = "") -> list[tuple[str, Any]]:
    if isinstance(data, dict):
        return [x for k, v in data.items() for x in walk(v, f"{path}.{k}")]
    if isinstance(data, list):
        return [x for i, v in enumerate(data) for x in walk(v, f"{path}[{i}]")]
    return [(path, data)]


def check(seed: int) -> str:
    chance = random.Random(seed)
    source = json.loads(chance.choice([d.text for d in demonstrations()]))
    text = json.dumps(mutated(source, chance))
    try:
        case = read_case_text(text)
        consult = run_consult(
            case
        )  # refuses too what only the population can tell, such as a group that must be chosen
    except CaseError as error:
        return "refused" if error.problems else "refused without a reason"
    data = json.loads(dumps(note_data(consult)))
    for path, value in walk(data):
        if isinstance(value, float | int) and not isinstance(value, bool):
            name = path.rsplit(".", 1)[-1]
            if "chance" in name or name.endswith("_share"):
                assert 0 <= value <= 1, (seed, path, value)
            elif path.startswith((".estimates", ".table", ".proposed")) and ("mg" in name or "_L" in name):
                assert value >= 0, (seed, path, value)
    printed = render(compose(consult))
    assert not re.search(r"\b(?:nan|inf|None|NaN|Infinity)\b", printed), seed
    if case.demonstration is not None:
        assert "DEMONSTRATION" in printed
    if consult.stopped:
        assert data["table"] == []
        assert data["proposed"] == []
    return "stopped" if consult.stopped else "done"


def test_a_few_mutated_cases() -> None:
    outcomes = [check(seed) for seed in range(12)]
    assert set(outcomes) >= {"done", "stopped"}
    assert "refused without a reason" not in outcomes


@pytest.mark.slow
@pytest.mark.parametrize("start", range(0, 1000, 100))
def test_a_thousand_mutated_cases(start: int) -> None:
    for seed in range(start + 100, start + 200):
        assert check(seed) in ("done", "stopped", "refused")
