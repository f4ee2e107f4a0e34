"""Every pair of stops together still gives one clear outcome."""

from __future__ import annotations

import json
from itertools import combinations
from typing import Any

import pytest

from pkcalc.consult import run_consult
from pkcalc.note.data import dumps, note_data
from pkcalc.note.document import compose
from pkcalc.note.text import render
from tests.unit.cases import PLAIN, levels, plain

MORE = [{"form": "extended-capsule", "amount": "400 mg", "every": "24 h"}]

#: stop -> what brings it about, over the plain case.
BRINGS: dict[str, dict[str, Any]] = {
    "status-epilepticus": {"context": {"seizing_now": "yes"}},
    "overdose": {"context": {"overdose": "yes"}},
    "too-young": {"patient": {"age": "5 months", "weight": "60 kg"}},
    "hla-b1502": {"context": {"hla_b1502": "yes", "new_start": "yes"}},
    "refused-route": {"plan": {"load": {"form": "injection", "route": "intramuscular"}}},
    "interacting-change": {"context": {"interacting_change": "yes"}},
    "tube-feed-change": {"context": {"tube_feed": "yes", "tube_feed_change": "yes"}},
    "renal-failure-total": {"context": {"renal_failure": "yes"}},
    "valproate-total": {"context": {"valproate": "yes"}},
    "pregnancy-total": {"context": {"pregnancy": "yes"}},
    "free-and-total-mixed": {
        "levels": [{**PLAIN["levels"][0], "kind": "free", "value": "0.8 mg/L"}, PLAIN["levels"][1]]
    },
    "pair-impossible": {"levels": levels("20 mg/L", "8 mg/L")},
    "pair-only-noise": {"levels": levels("8 mg/L", "9.5 mg/L")},
    "drawn-too-early": {
        "levels": [PLAIN["levels"][0], {"value": "14 mg/L", "kind": "total", "drawn": "2026-09-19 07:00"}]
    },
    "no-estimate": {"patient": {"age": "45 years"}, "levels": [PLAIN["levels"][1]]},
    "regimen-too-risky": {"proposed": MORE},
    "increase-on-doubt": {
        "context": {"adherence_doubtful": "yes"},
        "levels": levels("4 mg/L", "7 mg/L"),
        "proposed": MORE,
    },
}
del BRINGS["too-young"]["patient"]["weight"]
PAIRS = list(combinations(BRINGS, 2))


def merged(*names: str) -> dict[str, Any]:
    found: dict[str, Any] = {}
    for name in names:
        for key, value in BRINGS[name].items():
            found[key] = {**found.get(key, {}), **value} if key in ("context", "patient") else value
    return found


@pytest.mark.parametrize("name", list(BRINGS))
def test_each_stop_alone_is_said(name: str) -> None:
    assert name in {c.id for c in run_consult(plain(**merged(name))).cautions if c.severity == "stop"}


def one_clear_outcome(pair: tuple[str, str]) -> None:
    consult = run_consult(plain(**merged(*pair)))
    stops = [c for c in consult.cautions if c.severity == "stop"]
    assert stops, pair
    assert len({(c.id, c.text) for c in consult.cautions}) == len(consult.cautions), pair
    for stop in stops:
        assert set(stop.blocks) <= consult.blocked, pair
    data = json.loads(dumps(note_data(consult)))
    assert data["outcome"] == ("stop" if consult.stopped else "done"), pair
    if "projection" in consult.blocked:
        assert consult.stopped, pair
        assert data["table"] == data["proposed"] == [], pair
    if "estimate" in consult.blocked:
        assert consult.chosen is None, pair
    if "two-level" in consult.blocked:
        assert "two levels" not in consult.estimates, pair
    printed = render(compose(consult))
    for stop in stops:
        assert " ".join(stop.text.split()[:6]) in " ".join(printed.split()), pair


@pytest.mark.parametrize("pair", PAIRS[::11])
def test_a_few_pairs_of_stops(pair: tuple[str, str]) -> None:
    one_clear_outcome(pair)


@pytest.mark.slow
@pytest.mark.parametrize("pair", PAIRS)
def test_every_pair_of_stops(pair: tuple[str, str]) -> None:
    one_clear_outcome(pair)
