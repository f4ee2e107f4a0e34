"""The same laws for every drug file: rate law, course, engine, whole consult, words; nothing is tuned to one drug."""

from __future__ import annotations

import json
import math
import re
from functools import cache

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pkcalc import flow, formulas
from pkcalc.consult import Consult, run_consult
from pkcalc.demos import demonstration, demonstrations
from pkcalc.drugs.profile import Population, Prior, drug_names, load_profile
from pkcalc.note import data as note_data
from pkcalc.note import document, text
from tests.property.reference import reference_amounts

EVERY = [(drug, name) for drug in drug_names() for name in load_profile(drug).populations]


def population(drug: str, name: str) -> Population:
    return load_profile(drug).populations[name]


def at(drug: str, name: str, weight: float) -> Prior:
    p = population(drug, name)
    low, high = max(p.ages_years[0], load_profile(drug).youngest_years), p.ages_years[1]
    return p.at(weight, min(low + 1, high - 1e-6))


@st.composite
def patients(draw: st.DrawFn) -> Prior:
    drug, name = draw(st.sampled_from(EVERY))
    return at(drug, name, draw(st.floats(10, 150)))


def steady(rate: float, p: Prior) -> float:
    return float(
        formulas.steady_state_level(
            dose_rate_mg_per_day=rate,
            vmax_mg_per_day=p.vmax_mg_per_day,
            km_mg_per_L=p.km_mg_per_L,
            linear_clearance_L_per_day=p.first_order_per_day * p.volume_L,
        )
    )


@settings(max_examples=150)
@given(patients(), st.floats(0.01, 0.98), st.floats(1.001, 3))
def test_rate_and_steady_level_are_each_other_s_inverse_and_rise_together(p: Prior, share: float, more: float) -> None:
    level = p.km_mg_per_L * share / (1 - share)
    rate = float(
        formulas.dose_rate_for_level(
            level_mg_per_L=level,
            vmax_mg_per_day=p.vmax_mg_per_day,
            km_mg_per_L=p.km_mg_per_L,
            linear_clearance_L_per_day=p.first_order_per_day * p.volume_L,
        )
    )
    assert steady(rate, p) == pytest.approx(level, rel=1e-9)
    higher = steady(rate * more, p)
    assert higher > level * more * (1 - 1e-9), "the level rises at least in proportion to the dose"
    assert math.isfinite(higher) == (p.first_order_per_day > 0 or rate * more < p.vmax_mg_per_day)


@settings(max_examples=100)
@given(patients(), st.floats(0, 5), st.floats(0, 1.4), st.floats(0.001, 30))
def test_the_course_stays_possible_and_moves_towards_its_steady_level(
    p: Prior, start_in_km: float, share: float, days: float
) -> None:
    start, rate = start_in_km * p.km_mg_per_L, share * p.vmax_mg_per_day
    first, second = (
        float(
            formulas.level_after(
                time_day=t,
                start_mg_per_L=start,
                dose_rate_mg_per_day=rate,
                vmax_mg_per_day=p.vmax_mg_per_day,
                km_mg_per_L=p.km_mg_per_L,
                volume_L=p.volume_L,
                linear_clearance_L_per_day=p.first_order_per_day * p.volume_L,
            )
        )
        for t in (days, 2 * days)
    )
    end = steady(rate, p)
    assert 0 <= first <= start + rate * days / p.volume_L + 1e-9
    slack = 1e-9 * (1 + start)
    if start <= end:
        assert start - slack <= first <= second + slack <= end + 2 * slack
    else:
        assert start + slack >= first >= second - slack >= end - 2 * slack


@pytest.mark.parametrize(("drug", "name"), EVERY)
def test_the_engine_against_an_adaptive_integrator(drug: str, name: str) -> None:
    """Every population: doses of its own forms, an infusion over a session in the middle, its own parallel path."""
    p = at(drug, name, population(drug, name).reference_weight_kg)
    hour = 1 / 24
    amount = p.km_mg_per_L * p.volume_L
    doses = [flow.Dose(0.0, amount), flow.Dose(4 * hour, amount, duration_day=6 * hour)]
    for form in load_profile(drug).forms.values():
        if form.absorption is not None and len(doses) < 4:
            a = form.absorption
            taken = flow.Absorption(a.ka_per_day, lag_day=a.lag_day, release_day=a.release_day)
            doses.append(flow.Dose(12 * hour, amount / 2, absorption=taken))
    k = max(p.first_order_per_day, 0.05)
    open_path = flow.FirstOrder(rate_per_day=k, start_day=6 * hour, end_day=9 * hour)
    record = flow.Record(tuple(doses), first_order=(open_path,))
    times = [t * hour for t in (1.0, 5.0, 7.0, 9.0, 13.0, 30.0)]
    kappa = p.km_mg_per_L * p.volume_L
    expected = reference_amounts(record, times, p.vmax_mg_per_day, kappa, k=k)
    assert flow.amounts(record, times, p.vmax_mg_per_day, kappa, accuracy="fine")[0] == pytest.approx(
        expected, rel=1e-4, abs=1e-6 * amount
    )


@pytest.mark.parametrize("drug", drug_names())
def test_linear_limit_far_below_km(drug: str) -> None:
    """With every level far below Km the drug has one half-life, and twice the dose is twice the level."""
    name = next(iter(load_profile(drug).populations))
    p = at(drug, name, population(drug, name).reference_weight_kg)
    tiny = 1e-5 * p.km_mg_per_L
    rate = p.vmax_mg_per_day / (p.km_mg_per_L * p.volume_L) + p.first_order_per_day
    days = 1 / rate
    left = float(
        formulas.level_after(
            time_day=days,
            start_mg_per_L=tiny,
            dose_rate_mg_per_day=0.0,
            vmax_mg_per_day=p.vmax_mg_per_day,
            km_mg_per_L=p.km_mg_per_L,
            volume_L=p.volume_L,
            linear_clearance_L_per_day=p.first_order_per_day * p.volume_L,
        )
    )
    assert left / tiny == pytest.approx(math.exp(-1), rel=1e-4)


# the whole way ---------------------------------------------------------------------------------------------

#: One demonstration of every drug, chosen by name so that the same one is run each time.
SHOWN = {json.loads(d.text)["drug"]: d.name for d in reversed(demonstrations())}


def fresh(drug: str) -> Consult:
    return run_consult(demonstration(SHOWN[drug]))


@cache
def consult_of(drug: str) -> Consult:
    return fresh(drug)


@pytest.mark.parametrize("drug", drug_names())
def test_a_demonstration_goes_all_the_way_and_its_words_are_safe(drug: str) -> None:
    consult = consult_of(drug)
    written = text.render(document.compose(consult))
    assert written.count("DEMONSTRATION") >= 2
    for pattern, why in (
        (r"(?<![\d.])\.\d", "no leading zero"),
        (r"\d\.\d*0 (?:mg|g)\b(?!/)", "a trailing zero on a dose"),
        (r"(?<![.\d])\d{5,}(?:\.\d+)? ?(?:mg|mL|g)\b", "no comma from 1,000"),
        (r"\u00b5|\u03bc", "the Greek letter for micro"),
        (r"\b(?:QD|QOD|BID|TID|cc|U)\b", "an abbreviation that is misread"),
        (r"\bnan\b|\binf\b|None|\{\w*\}|-inf", "a value that is none"),
        (r"\d(?:mg|mL|g|L|h)\b", "no space between number and unit"),
    ):
        hit = re.search(pattern, written)
        assert hit is None, f"{why}: ...{written[max(0, hit.start() - 40) : hit.end() + 10]!r}" if hit else ""
    data = note_data.dumps(note_data.note_data(consult))
    assert not re.search(r"NaN|Infinity", data)


@pytest.mark.parametrize("drug", [d for d in drug_names() if load_profile(d).scope != "dosing"])
def test_chances_add_up_and_levels_stay_in_order(drug: str) -> None:
    found = consult_of(drug).projection
    assert found is not None
    for path in found.paths:
        for m in path.moments:
            assert m.below + m.within + m.above == pytest.approx(1, abs=1e-9)
            assert m.above_critical <= m.above + 1e-12
            assert 0 <= m.level.low <= m.level.median <= m.level.high
            assert math.isfinite(m.level.high)
    more, less = sorted(found.paths, key=lambda p: -p.rate_mg_per_day)[:2]
    assert all(
        a.level.median >= b.level.median * (1 - 1e-9) for a, b in zip(more.moments[-3:], less.moments[-3:], strict=True)
    )


@pytest.mark.parametrize(
    "drug",
    [pytest.param(d, marks=pytest.mark.slow if load_profile(d).scope == "dosing" else ()) for d in drug_names()],
)
def test_the_same_input_gives_the_same_bytes(drug: str) -> None:
    first, second = (note_data.dumps(note_data.note_data(c)) for c in (consult_of(drug), fresh(drug)))
    assert first == second


def test_populations_are_all_there() -> None:
    assert len(EVERY) >= 12
    assert np.all([at(d, n, 70).vmax_mg_per_day > 0 for d, n in EVERY])
