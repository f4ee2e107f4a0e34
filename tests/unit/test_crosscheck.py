"""The two-way check: it agrees on good cases, and every row of it notices when the first way is broken on purpose."""

from __future__ import annotations

import json
import math
import random
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from pkcalc import case as case_module
from pkcalc import crosscheck, dosing, flow, forecast, formulas, units
from pkcalc.case import check_case, parse_case_text
from pkcalc.consult import Consult, run_consult
from pkcalc.crosscheck import Node, Row
from pkcalc.demos import demonstration, demonstrations
from pkcalc.estimate import posterior
from pkcalc.plan import projection
from pkcalc.record import Absorption, Dose, FirstOrder, Record, Repeated
from tests.unit.cases import PLAIN


def consult_of(data: dict[str, Any]) -> Consult:
    return run_consult(check_case(parse_case_text(json.dumps(data))))


def plain(**changes: Any) -> dict[str, Any]:
    return {**json.loads(json.dumps(PLAIN)), **changes}


#: Some weeks instead of months, where the length of the record does not matter.
SHORT: dict[str, Any] = {
    **PLAIN,
    "doses": [
        {**PLAIN["doses"][0], "from": "2026-11-10 21:00", "until": "2026-11-20 12:00"},
        {**PLAIN["doses"][1], "from": "2026-11-20 21:00"},
    ],
    "levels": [
        {"value": "6 mg/L", "kind": "total", "drawn": "2026-11-20 07:00"},
        {"value": "13 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"},
    ],
}


def short(**changes: Any) -> dict[str, Any]:
    return {**json.loads(json.dumps(SHORT)), **changes}


PROPOSED = [{"form": "extended-capsule", "amount": "360 mg", "every": "24 h"}]
SHORT_CARER = [{**d, "given_by": "carer"} for d in SHORT["doses"]]
CARER = [{**d, "given_by": "carer"} for d in PLAIN["doses"]]


@pytest.mark.parametrize("name", ["load-and-top-up", "early-level", "ethanol-dialysis", "change-of-salt"])
def test_both_ways_agree_on_a_demonstration(name: str) -> None:
    consult = run_consult(demonstration(name))
    assert consult.second_way
    assert [r.words for r in consult.second_way if not r.agrees] == []


@pytest.mark.parametrize(
    "change",
    [
        {"patient": {**PLAIN["patient"], "weight": "154 lb"}},
        {"albumin": {**PLAIN["albumin"], "value": "3.1 g/dL"}},
        {"levels": [{**x, "value": x["value"].replace("mg/L", "mcg/mL")} for x in SHORT["levels"]]},
        {"doses": [{**x, "amount": "0.3 g"} if i == 0 else x for i, x in enumerate(SHORT["doses"])]},
    ],
)
def test_both_ways_agree_in_other_units(change: dict[str, Any]) -> None:
    assert disagreeing(consult_of(short(**change))) == []


@pytest.mark.slow
@pytest.mark.parametrize("name", [d.name for d in demonstrations()])
def test_both_ways_agree_on_every_demonstration(name: str) -> None:
    consult = run_consult(demonstration(name))
    assert consult.second_way
    assert [r.words for r in consult.second_way if not r.agrees] == []


def test_what_is_checked_twice() -> None:
    rows = [r.quantity for r in consult_of(plain(proposed=PROPOSED, doses=CARER)).second_way]
    assert rows == [
        "Weight, read again from the text",
        "Albumin, read again from the text",
        "Level 1, read again from the text",
        "Level 2, read again from the text",
        "Active drug of dose line 1, read again from the text",
        "Active drug of dose line 2, read again from the text",
        "Level 1 at normal binding",
        "Level 2 at normal binding",
        "Vmax by the two levels",
        "Km by the two levels",
        *[r for r in rows if "by the record at" in r],
        "Log of the weight at the 5 % draw over that at the point",
        "Log of the weight at the 95 % draw over that at the point",
        "Steady level on the regimen in question, every dose taken at the point",
        "And back: the dose rate that holds it (the regimen in question, every dose taken)",
        *[r for r in rows if r.startswith("Draws up to the median steady level on the regimen in question")],
        "Chance above 30 mg/L or of no steady state on the regimen in question, every dose taken",
        "Days from nothing to 90 % of the way at the point, central",
    ]
    assert len([r for r in rows if "by the record at" in r]) == 3
    assert len([r for r in rows if r.startswith("Draws up to the median")]) == 1


def scaled(function: Callable[..., Any], factor: float) -> Callable[..., Any]:
    def broken(*given: Any, **named: Any) -> Any:
        return function(*given, **named) * factor

    return broken


def disagreeing(consult: Consult) -> list[str]:
    return [r.quantity for r in consult.second_way if not r.agrees]


def assert_no_number(consult: Consult) -> None:
    assert "second-way-disagrees" in [c.id for c in consult.cautions]
    assert consult.stopped
    assert not consult.estimates
    assert not consult.settling
    assert not consult.proposed
    assert not consult.table
    assert consult.chosen is consult.plan is consult.aim_rate is consult.verdict is None
    assert {"two-level", "estimate", "projection", "regimens", "loading", "next level"} <= consult.blocked


def test_a_broken_engine_stops_the_consult(monkeypatch: pytest.MonkeyPatch) -> None:
    right = flow.fading

    def broken(*given, **named):
        amounts, faded = right(*given, **named)
        return 1.03 * amounts, faded

    monkeypatch.setattr(flow, "amounts", scaled(flow.amounts, 1.03))
    monkeypatch.setattr(flow, "fading", broken)
    consult = consult_of(short(proposed=PROPOSED))
    assert len([q for q in disagreeing(consult) if "by the record at" in q]) == 3
    assert_no_number(consult)
    caution = next(c for c in consult.cautions if c.id == "second-way-disagrees")
    assert caution.severity == "stop"
    assert caution.text.startswith(
        "Two independent calculations of the same numbers disagree, so no number is given. Level "
    )
    assert caution.text.endswith("This is a fault of the program: please report it.")


def test_a_good_engine_does_not() -> None:
    assert "second-way-disagrees" not in [c.id for c in consult_of(short(proposed=PROPOSED)).cautions]


def test_wrong_weights_are_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    right = posterior.gaussian_parts

    def narrower(residual: Any, cov: Any, *rest: Any) -> Any:
        return right(residual, 0.7 * cov, *rest)

    monkeypatch.setattr(posterior, "gaussian_parts", narrower)
    consult = consult_of(
        short(
            proposed=PROPOSED,
            levels=[{**x, "value": v} for x, v in zip(SHORT["levels"], ("6 mg/L", "16 mg/L"), strict=True)],
        )
    )
    assert any("weight at" in q for q in disagreeing(consult))
    assert_no_number(consult)


def test_wrong_influence_of_missed_doses_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    right = posterior.intake_gain
    monkeypatch.setattr(posterior, "intake_gain", lambda *given, **named: 2.0 * right(*given, **named))
    doubtful = {**PLAIN["context"], "adherence_doubtful": "yes"}
    consult = consult_of(short(doses=SHORT_CARER, context=doubtful))
    assert any("weight at" in q for q in disagreeing(consult))


#: Two levels that the assay could not read, one that it could.
HIDDEN = [
    {"value": "<7 mg/L", "kind": "total", "drawn": "2026-11-18 07:00"},
    {"value": "9 mg/L", "kind": "total", "drawn": "2026-11-22 07:00"},
    {"value": ">10 mg/L", "kind": "total", "drawn": "2026-12-01 07:00"},
]


@pytest.mark.parametrize("values", [("<7 mg/L", "9 mg/L", ">10 mg/L"), ("<9 mg/L", "<12 mg/L", ">8 mg/L")])
def test_weights_are_checked_with_several_levels_beyond_the_assay(values: tuple[str, ...]) -> None:
    consult = consult_of(short(levels=[{**x, "value": v} for x, v in zip(HIDDEN, values, strict=True)]))
    rows = [r for r in consult.second_way if "weight at" in r.quantity]
    assert [r.quantity for r in rows] == [
        "Log of the weight at the 5 % draw over that at the point",
        "Log of the weight at the 95 % draw over that at the point",
    ]
    assert [r.words for r in consult.second_way if not r.agrees] == []
    assert all(abs(r.first - r.second) < 0.05 for r in rows)


def test_wrong_weights_of_several_levels_beyond_the_assay_are_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    right = posterior.censored_parts

    def narrower(residual: Any, cov: Any, *rest: Any) -> Any:
        return right(residual, 0.5 * cov, *rest)

    monkeypatch.setattr(posterior, "censored_parts", narrower)
    consult = consult_of(short(levels=HIDDEN))
    assert any("weight at" in q for q in disagreeing(consult))
    assert_no_number(consult)


def test_a_wrong_steady_level_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(formulas, "steady_state_level", scaled(formulas.steady_state_level, 1.02))
    consult = consult_of(short(proposed=PROPOSED))
    assert "Steady level on the regimen in question, every dose taken at the point" in disagreeing(consult)
    assert any(q.startswith("And back") for q in disagreeing(consult))
    assert_no_number(consult)


def test_a_wrong_median_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    right = forecast.bands

    def higher(values: Any, weights: Any) -> Any:
        return tuple(replace(b, median=1.03 * b.median) for b in right(values, weights))

    monkeypatch.setattr(forecast, "bands", higher)
    consult = consult_of(short(proposed=PROPOSED))
    assert any(q.startswith("Draws up to the median steady level") for q in disagreeing(consult))
    assert_no_number(consult)


def test_a_wrong_chance_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(forecast, "_chance", lambda value: 0.8 * value)
    consult = consult_of(short(proposed=PROPOSED))
    assert any(q.startswith("Chance above 30 mg/L") for q in disagreeing(consult))
    assert_no_number(consult)


def test_a_wrong_time_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(formulas, "time_to_fraction", scaled(formulas.time_to_fraction, 1.05))
    consult = consult_of(short(proposed=PROPOSED))
    assert "Days from nothing to 90 % of the way at the point, central" in disagreeing(consult)
    assert_no_number(consult)


@pytest.mark.parametrize(
    ("field", "name"),
    [("vmax_mg_per_day", "Vmax by the two levels"), ("km_mg_per_L", "Km by the two levels")],
)
def test_a_wrong_two_level_solution_is_noticed(field: str, name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    right = formulas.two_level

    def wrong(**named: Any) -> Any:
        found = right(**named)
        return found._replace(**{field: 1.001 * getattr(found, field)})

    monkeypatch.setattr(formulas, "two_level", wrong)
    consult = consult_of(plain())
    assert name in disagreeing(consult)
    assert_no_number(consult)


@pytest.mark.parametrize(
    ("kind", "label", "change", "quantity"),
    [
        ("weight", "lb", {"patient": {**PLAIN["patient"], "weight": "154 lb"}}, "Weight"),
        ("albumin", "g/dL", {"albumin": {**PLAIN["albumin"], "value": "4.6 g/dL"}}, "Albumin"),
        (
            "level",
            "mcg/mL",
            {"levels": [{**x, "value": x["value"].replace("mg/L", "mcg/mL")} for x in SHORT["levels"]]},
            "Level 1",
        ),
        (
            "level",
            "umol/L",
            {"levels": [{**x, "value": v} for x, v in zip(SHORT["levels"], ("24 umol/L", "52 umol/L"), strict=True)]},
            "Level 1",
        ),
        (
            "amount",
            "g",
            {"doses": [{**x, "amount": "0.3 g"} if i == 0 else x for i, x in enumerate(SHORT["doses"])]},
            "Active drug of dose line 1",
        ),
    ],
)
def test_a_wrong_unit_is_noticed(
    kind: str, label: str, change: dict[str, Any], quantity: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(units.FACTORS[kind], label, units.FACTORS[kind][label] * 1.02)
    consult = consult_of(short(**change))
    assert f"{quantity}, read again from the text" in disagreeing(consult)
    assert_no_number(consult)


def test_a_wrong_salt_factor_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(dosing, "active_mg", scaled(dosing.active_mg, 1 / 0.92))
    consult = consult_of(short())
    assert "Active drug of dose line 1, read again from the text" in disagreeing(consult)
    assert_no_number(consult)


@pytest.mark.parametrize(
    ("name", "change"),
    [
        ("normalised_total", {"albumin": {**PLAIN["albumin"], "value": "30 g/L"}}),
        (
            "normalised_from_free",
            {
                "levels": [
                    {**x, "kind": "free", "value": v}
                    for x, v in zip(SHORT["levels"], ("0.8 mg/L", "2 mg/L"), strict=True)
                ]
            },
        ),
    ],
)
def test_a_wrong_correction_for_binding_is_noticed(
    name: str, change: dict[str, Any], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(formulas, name, scaled(getattr(formulas, name), 1.01))
    consult = consult_of(short(**change))
    assert "Level 1 at normal binding" in disagreeing(consult)
    assert_no_number(consult)


# --- the second way itself -----------------------------------------------------------------------------------


def test_rows_say_what_they_hold() -> None:
    row = Row("Level 1", 10.0, 10.2, "mg/L", 0.01)
    assert not row.agrees
    assert row.words == "Level 1: 10 mg/L against 10.2 mg/L"
    assert row.tolerance_text == "1 %"
    assert Row("x", math.inf, math.inf, "mg/L", 0.01).agrees
    assert Row("x", math.inf, math.inf, "mg/L", 0.01).first_text == "no steady state"
    assert not Row("x", math.inf, 12.0, "mg/L", 0.01).agrees
    assert not Row("x", math.nan, math.nan, "mg/L", 0.01).agrees
    assert Row("x", math.nan, 1.0, "", 0.01).first_text == "no number"
    assert Row("x", -1.5, -1.45, "", 0.1, absolute=True).agrees
    assert Row("x", -1.5, -1.3, "", 0.1, absolute=True).second_text == "minus 1.3"
    assert Row("x", 1.0, 1.0, "kg", 1e-6).tolerance_text == "rounding only"


NODE = Node("the point", 400.0, 4.0, 45.0)


def test_an_infusion_against_the_closed_form() -> None:
    record = Record(doses=(Dose(0.0, 3000.0, 10.0),))
    course = crosscheck.integrate(record, (10.0,), (NODE,))
    level = float(course.amount_mg[0, -1]) / NODE.volume_L
    assert level == pytest.approx(
        float(
            formulas.level_after(
                time_day=10.0,
                start_mg_per_L=0.0,
                dose_rate_mg_per_day=300.0,
                vmax_mg_per_day=400.0,
                km_mg_per_L=4.0,
                volume_L=45.0,
            )
        ),
        rel=1e-3,
    )


def test_every_kind_of_input_against_the_engine() -> None:
    """Pushes, infusions, plain and slow release with lag, an earlier regimen, dialysis and a parallel path."""
    slow = Absorption(ka_per_day=8.0, lag_day=0.02, release_day=0.4)
    quick = Absorption(ka_per_day=20.0)
    record = Record(
        doses=(
            Dose(0.0, 500.0),
            Dose(1.0, 300.0, 0.05),
            *(Dose(2.0 + i, 280.0, 0.0, slow if i % 2 else quick) for i in range(6)),
        ),
        start_day=0.0,
        before=None,
        first_order=(FirstOrder(clearance_L_per_day=60.0, start_day=4.1, end_day=4.3), FirstOrder(rate_per_day=0.05)),
    )
    nodes = (NODE, Node("another", 300.0, 7.0, 60.0))
    times = (0.9, 1.5, 4.25, 7.9)
    course = crosscheck.integrate(record, times, nodes)
    at = np.searchsorted(course.times_day, times)
    second = course.amount_mg[:, at] / np.array([[n.volume_L] for n in nodes])
    first = flow.levels(
        record,
        times,
        np.array([n.vmax_mg_per_day for n in nodes]),
        np.array([n.km_mg_per_L for n in nodes]),
        np.array([n.volume_L for n in nodes]),
    )
    assert second == pytest.approx(first, rel=5e-3)


def test_an_earlier_regimen_against_the_engine() -> None:
    regimen = Repeated(1.0, (Dose(0.0, 280.0, 0.0, Absorption(ka_per_day=10.0)),))
    from pkcalc.record import Before

    record = Record(doses=regimen.cycles(0, 3, 0.0), before=Before(regimen, 60.0))
    course = crosscheck.integrate(record, (2.9,), (NODE,))
    first = flow.levels(record, (2.9,), 400.0, 4.0, 45.0)
    assert float(course.amount_mg[0, -1]) / 45.0 == pytest.approx(float(first[0, 0]), rel=5e-3)


@pytest.mark.parametrize(("count", "close"), [(1, 1e-9), (2, 2e-3), (3, 1e-2), (4, 3e-2), (5, 6e-2)])
def test_the_joint_chance_of_several_levels_against_scipy(count: int, close: float) -> None:
    from scipy.stats import multivariate_normal

    random_ = np.random.default_rng(count)
    for _ in range(5):
        shared = random_.normal(size=(count, 3)) * random_.choice([0.05, 0.15, 0.3])
        cov = shared @ shared.T + np.diag(random_.uniform(0.02, 0.06, count))
        bound = np.linalg.cholesky(cov) @ random_.normal(size=(count, 3))
        found = crosscheck.log_chance_of_all(bound, cov)
        for i in range(3):
            right = multivariate_normal.cdf(bound[:, i], np.zeros(count), cov, abseps=1e-7, releps=1e-5)
            assert found[i] == pytest.approx(math.log(right), abs=close)


def median_row(median: float, vmax: list[float]) -> Row:
    rows = crosscheck.steady_rows(
        "a dose",
        300.0,
        NODE,
        level_mg_per_L=12.0,
        median_mg_per_L=median,
        chance_above_critical=0.0,
        critical_mg_per_L=30.0,
        vmax_mg_per_day=np.array(vmax),
        km_mg_per_L=np.full(len(vmax), 4.0),
        weights=np.full(len(vmax), 1 / len(vmax)),
    )
    return next(r for r in rows if "edian" in r.quantity)


def test_a_median_is_judged_by_the_draws_on_either_side_of_it() -> None:
    near = [*np.linspace(300.01, 300.3, 500), *np.linspace(300.31, 400.0, 500)]
    levels = sorted(4.0 * 300.0 / (v - 300.0) for v in near)
    between = 0.5 * (levels[499] + levels[500])
    assert median_row(between, near).agrees
    assert not median_row(levels[520], near).agrees
    assert not median_row(math.inf, near).agrees
    assert median_row(math.inf, [250.0] * 600 + [400.0] * 400).agrees
    assert not median_row(12.0, [250.0] * 600 + [400.0] * 400).agrees


def test_the_steady_level_is_found_or_said_to_be_missing() -> None:
    assert crosscheck.steady_level(200.0, 400.0, 4.0) == pytest.approx(4.0)
    assert crosscheck.steady_level(400.0, 400.0, 4.0) == math.inf
    assert crosscheck.days_on_the_way(400.0, 0.0, NODE, 0.9) == math.inf
    assert crosscheck.days_on_the_way(200.0, 4.0, NODE, 0.9) == 0.0


def test_typed_text_is_read_a_second_time() -> None:
    assert crosscheck.again("1,200 mg", "amount", 252.3) == 1200.0
    assert crosscheck.again("<2.5 mg/L", "level", 252.3) == 2.5
    assert crosscheck.again("40 umol/L", "level", 252.3) == pytest.approx(10.092)
    assert crosscheck.again("5 stones", "weight", 252.3) is None
    assert crosscheck.again("1.2.3 kg", "weight", 252.3) is None


# --- many good cases -----------------------------------------------------------------------------------------


def random_case(random_: random.Random, longest: int) -> dict[str, Any]:
    """A plausible patient with one to four levels drawn from a course of their own; longest: days on one dose."""
    weight = random_.uniform(45, 100)
    vmax = 6.5 * 70 * (weight / 70) ** 0.6 * math.exp(random_.gauss(0, 0.2))
    km, volume = 5 * math.exp(random_.gauss(0, 0.4)), 0.7 * weight * math.exp(random_.gauss(0, 0.15))
    who = random_.choice(["nurse", "carer", "self"])
    context = {**PLAIN["context"], "adherence_doubtful": random_.choice(["no", "yes", "unknown"])}
    doses: list[dict[str, Any]] = []
    given: list[Dose] = []
    start = 0
    for line in range(random_.randint(1, 3)):
        amount = 10 * round(random_.uniform(0.5, 0.85) * vmax / 0.92 / 10)
        length = random_.randint(10, longest)
        doses.append(
            {
                "form": "extended-capsule",
                "amount": f"{amount} mg",
                "every": "24 h",
                "from": _moment(start, 21),
                "given_by": who,
            }
        )
        if line:
            doses[-2]["until"] = _moment(start, 12)
        given += [Dose(start + i + 21 / 24, 0.92 * amount, 0.0, Absorption(ka_per_day=6.0)) for i in range(length)]
        start += length
    levels = []
    record = Record(doses=tuple(given))
    for day in sorted(random_.sample(range(5, start), min(random_.randint(1, 4), start - 5))):
        level = float(flow.levels(record, (day + 7 / 24,), vmax, km, volume)[0, 0])
        level *= math.exp(random_.gauss(0, 0.12))
        level = min(max(level, 1), 60)
        # now and then the assay could only tell a limit
        beyond = random_.random()
        value = f"<{1.2 * level:.1f}" if beyond < 0.03 else f">{0.8 * level:.1f}" if beyond > 0.97 else f"{level:.1f}"
        levels.append({"value": f"{value} mg/L", "kind": "total", "drawn": _moment(day, 7)})
    return {
        **json.loads(json.dumps(PLAIN)),
        "now": _moment(start, 10),
        "patient": {**PLAIN["patient"], "weight": f"{weight:.0f} kg"},
        "albumin": {"value": f"{random_.uniform(32, 48):.0f} g/L", "taken": levels[-1]["drawn"]},
        "context": context,
        "doses": doses,
        "levels": levels,
        "proposed": [{"form": "extended-capsule", "amount": "350 mg", "every": "24 h"}],
    }


def _moment(day: int, hour: int) -> str:
    from datetime import datetime, timedelta

    return (datetime(2026, 1, 1) + timedelta(days=day, hours=hour)).strftime("%Y-%m-%d %H:%M")


def check_many(count: int, seed: int, longest: int) -> None:
    random_ = random.Random(seed)
    whole = 0
    for _ in range(count):
        data = random_case(random_, longest)
        consult = consult_of(data)
        assert disagreeing(consult) == [], json.dumps(data)
        whole += consult.chosen is not None and consult.chosen.method == posterior.WHOLE_RECORD
    assert whole > 0.9 * count


def test_a_few_random_good_cases_are_not_stopped() -> None:
    check_many(3, 2, 50)


@pytest.mark.slow
def test_a_thousand_random_good_cases_are_not_stopped() -> None:
    """Short records for the most part of the thousand, long ones for the rest."""
    check_many(900, 2, 20)
    check_many(100, 3, 60)


# --- the hours to come ---------------------------------------------------------------------------------------


def unmeasured(name: str) -> dict[str, Any]:
    """A demonstration without its levels: nothing but the projection is calculated."""
    data: dict[str, Any] = json.loads(demonstration(name).file.model_dump_json(by_alias=True, exclude_defaults=True))
    return {**data, "levels": []}


@pytest.mark.parametrize("name", ["theophylline-projection", "ethanol-dialysis", "voriconazole-teaching"])
def test_the_hours_to_come_are_checked_where_nothing_else_is(name: str) -> None:
    """Every way to go on has its levels at three draws, its median and its chance; the mL too are read again."""
    consult = consult_of(unmeasured(name))
    assert consult.projection is not None
    rows = [r.quantity for r in consult.second_way]
    for path in consult.projection.paths:
        assert len([q for q in rows if q.startswith("Level in") and f", {path.words}, at the" in q]) == 3
        assert len([q for q in rows if q.startswith("Draws up to") and q.endswith(path.words)]) == 1
        assert len([q for q in rows if q.startswith("Chance of") and q.endswith(path.words)]) == 1
    held = [q for q in rows if q.startswith("Draws up to the median of the rate that holds")]
    assert len(held) == len(consult.projection.holds)
    labelled = [q for q in rows if q.startswith("Labelled")]
    assert len(labelled) == sum(c.regimen is None for c in consult.case.courses)
    assert disagreeing(consult) == []


@pytest.mark.parametrize("name", ["theophylline-projection", "ethanol-dialysis"])
def test_a_broken_engine_stops_the_hours_to_come(name: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(flow, "amounts", scaled(flow.amounts, 1.03))
    consult = consult_of(unmeasured(name))
    assert disagreeing(consult)
    assert all(q.startswith("Level in") for q in disagreeing(consult))
    assert_no_number(consult)
    assert consult.projection is None


def test_dialysis_left_out_of_the_engine_is_noticed(monkeypatch: pytest.MonkeyPatch) -> None:
    right = flow.levels

    def without(record: Record, *given: Any, **named: Any) -> Any:
        return right(replace(record, first_order=()), *given, **named)

    monkeypatch.setattr(projection.flow, "levels", without)
    consult = consult_of(unmeasured("ethanol-dialysis"))
    assert disagreeing(consult)
    assert_no_number(consult)


@pytest.mark.parametrize(
    ("where", "name", "factor", "demo", "row"),
    [
        (projection, "bands", None, "theophylline-projection", "Draws up to the median of the level in"),
        (projection, "_share", 0.5, "voriconazole-teaching", "Chance of a level above 5.5 mg/L in"),
        (formulas, "dose_rate_for_level", 1.02, "ethanol-dialysis", "Draws up to the median of the rate that holds"),
        (case_module, "_in_mL", 100 / 78.9, "ethanol-dialysis", "Labelled "),
    ],
)
def test_each_row_of_the_hours_to_come_notices_its_own_fault(
    where: Any, name: str, factor: float | None, demo: str, row: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The last one is 10 % w/v taken for v/v."""
    right = getattr(where, name)

    def shifted(values: Any, weights: Any) -> Any:
        return tuple(replace(b, median=1.05 * b.median) for b in right(values, weights))

    monkeypatch.setattr(where, name, shifted if factor is None else scaled(right, factor))
    consult = consult_of(unmeasured(demo))
    assert [q for q in disagreeing(consult) if q.startswith(row)]
    assert_no_number(consult)
