"""The cautions that always stand beside one drug: said for it, and for no other."""

from __future__ import annotations

import dataclasses
import json
from pathlib import Path

import pytest

from pkcalc import cautions
from pkcalc.case import dump_case, read_case_text
from pkcalc.cautions import rules_of
from pkcalc.consult import Consult, run_consult
from pkcalc.demos import demonstration
from pkcalc.drugs.profile import drug_names, load_profile
from pkcalc.errors import DrugFileError
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


def seizing(drug: str) -> Consult:
    data = json.loads(dump_case(demonstration("theophylline-projection") if drug == "theophylline" else plain()))
    data.setdefault("context", {})["seizing_now"] = "yes"
    return run_consult(read_case_text(json.dumps(data)))


def test_a_seizing_patient_stops_everything_and_stands_first() -> None:
    """Each drug says its own: lack of one drug, too much of the other."""
    for drug, rule in (("phenytoin", "status-epilepticus"), ("theophylline", "seizing")):
        consult = seizing(drug)
        assert consult.cautions[0].id == rule
        assert consult.stopped
        assert consult.projection is None
    said_of_it = seizing("theophylline").cautions[0].text
    assert said_of_it.endswith("Under this drug a seizure can mean a toxic level: stop it and draw one.")


def test_a_caution_about_a_question_nobody_asks_is_refused(monkeypatch: pytest.MonkeyPatch) -> None:
    profile = load_profile("theophylline")
    rule = {**profile.cautions["seizing"], "question": "hla_b1502"}
    broken = dataclasses.replace(profile, cautions={"seizing": rule})
    monkeypatch.setattr(cautions, "load_profile", lambda name: broken)
    with pytest.raises(DrugFileError) as caught:
        rules_of.__wrapped__("theophylline")
    assert str(caught.value) == "theophylline.toml, caution seizing: nobody asks the question hla_b1502."


def test_every_caution_of_every_drug_is_named_in_a_test() -> None:
    texts = "".join(p.read_text(encoding="utf-8") for p in Path(__file__).parents[1].rglob("test_*.py"))
    missing = {(name, r.id) for name in drug_names() for r in rules_of(name) if f'"{r.id}"' not in texts}
    assert missing == set()
