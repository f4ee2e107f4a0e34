"""Settings of the plan on the command line, products named in a case, and the plan in JSON."""

from __future__ import annotations

import json
from typing import Any

import pytest

from pkcalc.errors import CaseError
from pkcalc.note.offers import plan_data
from pkcalc.plan.asked import with_settings
from tests.unit.cases import PLAIN, plain
from tests.unit.planning import estimate, exact, plan


def problems(*settings: str) -> list[str]:
    with pytest.raises(CaseError) as refused:
        with_settings(plain(), settings)
    return [p.text for p in refused.value.problems]


def test_settings_stand_in_for_those_of_the_case() -> None:
    found = with_settings(
        plain(plan={"shelf": "united-kingdom"}),
        (
            "shelf=united-states",
            "products=extended-capsule-30, extended-capsule-100",
            "aim=14 mg/L",
            "largest-step = 30 mg/day",
            "order-by-loss=yes",
            "load=injection",
            "load-route=intravenous",
            "load-aim=18 mg/L",
            "load-at=2026-12-01 12:00",
            "restart-level=19 mg/L",
            "start=2026-12-01 21:00",
        ),
    )
    asked = found.file.plan
    assert (asked.shelf, asked.products) == ("united-states", ("extended-capsule-30", "extended-capsule-100"))
    assert asked.order_by_loss
    assert asked.load is not None
    assert asked.load.form == "injection"
    assert asked.load.route == "intravenous"
    assert found.aim_mg_per_L == 14
    assert found.largest_step_mg_per_day == 30
    assert found.load_aim_mg_per_L == 18
    assert found.restart_level_mg_per_L == 19
    assert found.plan_start is not None
    assert found.courses == plain().courses


def test_every_refusal_in_words() -> None:
    known = (
        "shelf, products, aim, largest-step, order-by-loss, load, load-route, load-aim, load-at, restart-level, start"
    )
    assert problems("shelve=united-states") == [
        f'Plan: "shelve=united-states" was given. Allowed: a setting of {known}. Did you mean shelf?'
    ]
    assert problems("qqq=1") == [f'Plan: "qqq=1" was given. Allowed: a setting of {known}. Choose one of these.']
    assert problems("aim") == ["Plan, aim: no value was given. Allowed: aim=value. Add the value."]
    assert problems("aim=14 mg/L", "aim=15 mg/L") == [
        "Plan, aim: it was given twice. Allowed: once. Take one of them out."
    ]
    assert problems("order-by-loss=perhaps") == [
        'Plan, order-by-loss: "perhaps" was given. Allowed: yes or no. Write one of them.'
    ]
    assert problems("load-aim=15 mg/L") == [
        "Plan, load: no form was given. Allowed: load=FORM. Name the form of the load."
    ]


def test_what_the_case_refuses_is_refused_here_too() -> None:
    (text,) = problems("shelf=atlantis")
    assert text.startswith('Plan, shelf: "atlantis" was given.')
    with pytest.raises(CaseError) as refused:
        with_settings(plain(), ("aim=14",))
    assert refused.value.problems[0].where == "Aim"


@pytest.mark.parametrize(
    ("asked", "text"),
    [
        (
            {"shelf": "united-kingdom", "products": ["extended-capsule-30"]},
            'Plan, products: "extended-capsule-30" was given. Allowed: prompt-capsule-25, prompt-capsule-50, '
            "prompt-capsule-100, prompt-capsule-300, chewable-50, suspension-30, injection-50. Choose from these products.",
        ),
        (
            {"products": ["extended-capsule-30"]},
            "Plan, products: products without a shelf were given. Allowed: a shelf first. Name the shelf in the plan.",
        ),
        (
            {"products": ["suspension-30", "suspension-125"]},
            "Plan, products: two strengths of the oral suspension were given. Allowed: one of them. Take one out.",
        ),
    ],
)
def test_products_that_cannot_be(asked: dict[str, Any], text: str) -> None:
    with pytest.raises(CaseError) as refused:
        plain(plan=asked)
    assert text in [p.text.replace(" (line 1)", "") for p in refused.value.problems]


def test_json_carries_every_candidate_and_no_infinity() -> None:
    own = {"form": "extended-capsule", "amount": "500 mg", "every": "24 h"}
    found = plan(
        None,
        exact(vmax=405.0),
        doses=[{**PLAIN["doses"][0], "amount": "400 mg", "until": ""}],
        levels=[{"value": "34 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"}],
        proposed=[own],
        plan={"shelf": "united-states", "order_by_loss": True},
    )
    data = json.loads(json.dumps(plan_data(found), allow_nan=False))
    assert len(data["candidates"]) == len(found.every) > 200
    mine = next(c for c in data["candidates"] if c["own"])
    assert mine["every_dose_taken"]["steady_level_normal_binding_mg_per_L"]["median"] == {"no_steady_state": True}
    assert mine["every_dose_taken"]["days_to_90_percent"]["median"] == {"never": True}
    assert not mine["offered"]
    assert mine["why_not"]
    present = next(c for c in data["candidates"] if c["present"])
    assert present["change_percent"] == 0
    for c in data["candidates"]:
        assert c["trough_mg_per_L"] is not None
        assert c["peak_mg_per_L"] is not None
        assert [x["day"] for x in c["level_on_days"]] == [3, 7, 14, 28]
    assert data["draws"] == {
        "draws_of_steady_level": 8,
        "draws_of_days_to_90_percent": 8,
        "draws_of_level_on_days": 8,
        "draws_of_trough_and_peak": 8,
    }
    assert data["pause"]["until_level_mg_per_L"] == 20
    assert data["next_level"]["action"].startswith("Levels daily, ")
    assert len(data["next_level"]["curve"]) == 14
    assert data["largest_step"]["rule"].startswith("published step rule")


def test_json_says_how_many_draws_stand_behind_each_kind_of_number() -> None:
    assert plan_data(plan(est=estimate(n=2048)))["draws"] == {
        "draws_of_steady_level": 2048,
        "draws_of_days_to_90_percent": 512,
        "draws_of_level_on_days": 256,
        "draws_of_trough_and_peak": 128,
    }


def test_json_of_loads() -> None:
    by_form = {}
    for form in ("injection", "extended-capsule"):
        found = plan(
            None,
            exact(),
            doses=[{**PLAIN["doses"][0], "until": ""}],
            levels=[{"value": "8 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"}],
            plan={"shelf": "united-states", "load": {"form": form}},
        )
        data = json.loads(json.dumps(plan_data(found), allow_nan=False))
        by_form |= {x["form"]: x for x in data["loads"]}
    assert set(by_form) == {"extended-capsule", "injection"}
    assert by_form["injection"]["infusion_at_least_min"] == 8
    assert by_form["injection"]["labelled_ordered_mg"] == 375
    assert [p["labelled_mg"] for p in by_form["extended-capsule"]["parts"]] == [400]
