"""The cautions that always stand beside one drug: said for it, and for no other."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from pkcalc.case import dump_case, read_case_text
from pkcalc.cautions import rules_of
from pkcalc.consult import Consult, run_consult
from pkcalc.demos import demonstration
from pkcalc.drugs.profile import drug_names
from tests.unit.cases import plain

ALWAYS = {
    "ethanol-first-hours": {"airway", "glucose", "strength", "load-time", "stopping"},
    "theophylline-projection": {"saturable-in-some"},
    "voriconazole-teaching": {"inflammation"},
}


def said(consult: Consult) -> set[str]:
    return {c.id for c in consult.cautions}


@pytest.mark.parametrize("name", list(ALWAYS))
def test_what_always_stands_beside_a_drug(name: str) -> None:
    assert ALWAYS[name] <= said(run_consult(demonstration(name)))


def test_none_of_it_stands_beside_another_drug() -> None:
    everything = set().union(*ALWAYS.values()) | {"liver"}
    assert not everything & said(run_consult(plain()))


def test_the_liver_is_said_where_it_fails_and_not_elsewhere() -> None:
    data = json.loads(dump_case(demonstration("ethanol-first-hours")))
    for answer, expected in (("yes", True), ("no", False)):
        data.setdefault("context", {})["hepatic_failure"] = answer
        assert ("liver" in said(run_consult(read_case_text(json.dumps(data))))) is expected


def test_every_caution_of_every_drug_is_named_in_a_test() -> None:
    texts = "".join(p.read_text(encoding="utf-8") for p in Path(__file__).parents[1].rglob("test_*.py"))
    missing = {(name, r.id) for name in drug_names() for r in rules_of(name) if f'"{r.id}"' not in texts}
    assert missing == set()
