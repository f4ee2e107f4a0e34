"""What the estimate says beside its numbers: figures, sentences in full, and that they follow the record."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import pytest

from pkcalc.errors import CannotEstimate
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.pair import SteadyPair, from_steady_levels
from pkcalc.estimate.posterior import from_record, prior_only
from pkcalc.estimate.reading import (
    InForce,
    Settled,
    against_pair,
    fraction_settled,
    misfits,
    narrowing,
    taken_share,
    under_each,
)
from pkcalc.estimate.result import Band
from pkcalc.record import Absorption, Before, Dose, Record, Repeated
from tests.unit.adult import PRIOR

OBSERVED = RecordSpread(0.0, 0.0)
USUAL = RecordSpread(0.05, 0.05)
CAPSULE = Absorption(ka_per_day=8.0)


def daily(amount: float) -> Repeated:
    return Repeated(1.0, (Dose(0.0, amount, absorption=CAPSULE),))


def on(amount: float, days: int) -> Record:
    return Record(doses=daily(amount).cycles(0, days, 0.0))


def test_narrowing_is_a_share_and_a_sentence() -> None:
    estimate = from_record(on(300, 10), [LevelData(9.9, 10.0, 0.1)], PRIOR, USUAL)
    found = narrowing(estimate, PRIOR, level_mg_per_L=15.0)
    assert 0.2 < found.share < 0.9
    width = [math.log(x.high / x.low) for x in (found.after, found.before)]
    assert found.share == pytest.approx(1 - width[0] / width[1])
    assert found.sentence == (
        "By the population alone, 15 mg/L takes 211 to 521 mg/day of active drug (90 % interval); the levels narrow "
        "this by 62 %, to 251 to 355 mg/day."
    )


def test_nothing_learned_is_said_so() -> None:
    found = narrowing(prior_only(PRIOR), PRIOR, level_mg_per_L=15.0)
    assert found.share == pytest.approx(0.0, abs=1e-9)
    assert found.sentence == (
        "By the population alone, 15 mg/L takes 211 to 521 mg/day of active drug (90 % interval); the levels say "
        "little more than that."
    )


def test_a_level_is_held_against_the_plateau_of_its_regimen() -> None:
    regimen = daily(250.0)
    early, late = LevelData(3.9, 4.0, 0.1), LevelData(59.9, 6.0, 0.1, index=1)
    record = on(250.0, 60)
    estimate = from_record(record, [early, late], PRIOR, OBSERVED)
    one, two = fraction_settled(record, [early, late], estimate, [InForce(regimen, 0.0)] * 2, OBSERVED)
    assert 0.3 < one.of_plateau.median < 0.8
    assert one.chance < 0.2
    assert two.of_plateau.median == pytest.approx(1.0, abs=0.01)
    assert two.chance > 0.95
    assert re.fullmatch(r"Level 1 was drawn at \d\d % of its plateau \(90 % interval \d\d to \d\d %\)\.", one.sentence)


def test_a_level_still_coming_down_is_above_its_plateau() -> None:
    record = Record(doses=daily(150.0).cycles(0, 4, 0.0), before=Before(daily(350.0), 60.0))
    level = LevelData(3.9, 12.0, 0.1)
    estimate = from_record(record, [level], PRIOR, USUAL)
    found = fraction_settled(record, [level], estimate, [InForce(daily(150.0), 0.0)], USUAL)[0]
    assert found.of_plateau.low > 1


def test_no_plateau_counts_as_no_part_of_the_way_and_no_regimen_leaves_the_level_out() -> None:
    record = on(700.0, 10)
    level = LevelData(9.9, 60.0, 0.1)
    estimate = from_record(record, [level], PRIOR, OBSERVED)
    found = fraction_settled(record, [level], estimate, [InForce(daily(700.0), 0.0)], OBSERVED)
    assert found[0].no_plateau > 0.5
    assert found[0].of_plateau.median == 0.0
    assert found[0].sentence == (
        "Level 1 was drawn on a dose that has no plateau in this patient: it would have gone on rising."
    )
    assert fraction_settled(record, [level], estimate, [None], OBSERVED) == ()


def test_a_misfit_is_reported_with_and_without_and_with_its_unit() -> None:
    record = on(300.0, 24)
    levels = [
        LevelData(7.9, 9.0, 0.1),
        LevelData(15.9, 11.0 * 3.964, 0.1, index=1),
        LevelData(23.9, 12.0, 0.1, index=2),
    ]
    estimate = from_record(record, levels, PRIOR, USUAL)
    found = misfits(record, levels, PRIOR, USUAL, estimate, other_units={"umol/L": 3.964})
    assert [x.level for x in found] == [1]
    only = found[0]
    assert only.standardised_residual > 3
    assert only.chance_wrong > 0.9
    assert only.expected.low < 11.0 < only.expected.high
    assert [f.level for f in only.without.fit] == [0, 2]
    assert only.sentence.startswith("Level 2 (43.6 mg/L) does not fit: the record and everything else lead to ")
    assert only.sentence.endswith(
        " It would fit if it had been reported in umol/L. Check its unit, its time, and the doses before it."
    )
    assert "; without it " in only.sentence


def test_levels_that_fit_are_no_misfits() -> None:
    record, levels = on(300.0, 10), [LevelData(9.9, 9.0, 0.1)]
    estimate = from_record(record, levels, PRIOR, USUAL)
    assert misfits(record, levels, PRIOR, USUAL, estimate) == ()


def test_levels_that_swing_on_a_steady_dose_ask_about_the_doses() -> None:
    record = on(350.0, 16)
    low = [LevelData(7.9, 3.5, 0.1), LevelData(15.9, 3.4, 0.1, index=1)]
    high = [replace(x, level_mg_per_L=4 * x.level_mg_per_L) for x in low]
    few, many = (taken_share(record, x, PRIOR, RecordSpread(0.2, 0.05)) for x in (low, high))
    assert few is not None
    assert many is not None
    assert few.share.median < many.share.median
    assert many.sentence == ""
    assert taken_share(record, low, PRIOR, OBSERVED) is None
    assert taken_share(record, (), PRIOR, USUAL) is None


def test_the_question_about_the_doses_in_full(monkeypatch: pytest.MonkeyPatch) -> None:
    from pkcalc.estimate import posterior

    monkeypatch.setattr(
        posterior, "log_evidence", lambda record, levels, prior, spread: 40.0 * float(spread.doses_differing)
    )
    found = taken_share(on(350.0, 20), [LevelData(19.9, 3.5, 0.1)], PRIOR, RecordSpread(0.2, 0.0))
    assert found is not None
    assert found.sentence == (
        "The levels would fit best if about 53 % of the doses had been taken (90 % interval 50 to 58 %). Fast "
        "elimination would look alike. Could doses have been missed, held, vomited or bound by feeds? Ask, before the "
        "dose is raised."
    )


def test_an_estimate_without_a_volume_is_refused() -> None:
    pair = from_steady_levels(SteadyPair(0, 250.0, 6.0, 0.1), SteadyPair(1, 300.0, 8.0, 0.1))
    with pytest.raises(CannotEstimate) as caught:
        fraction_settled(on(300.0, 5), [LevelData(4.9, 6.0, 0.1)], pair, [None], USUAL)
    assert str(caught.value) == (
        "This estimate has no volume of distribution. Without one nobody can say how fast a level moves. Give the "
        "weight, or use the whole record."
    )


def test_the_same_record_under_each_population() -> None:
    other = replace(PRIOR, population="other", km_mg_per_L=2.5)
    found = under_each(on(300.0, 10), [LevelData(9.9, 9.0, 0.1)], {"one": PRIOR, "two": other}, USUAL, n=256)
    assert list(found) == ["one", "two"]
    assert found["two"].summary["km_mg_per_L"].median < found["one"].summary["km_mg_per_L"].median


def test_the_difference_to_the_two_level_method_is_explained() -> None:
    first, second = SteadyPair(0, 250.0, 6.0, 0.1), SteadyPair(1, 300.0, 8.0, 0.1)
    pair = from_steady_levels(first, second)
    whole = prior_only(PRIOR)
    early = Settled(1, Band(0.6, 0.5, 0.7), 0.0, 0.0, "")
    steady = Settled(0, Band(0.99, 0.97, 1.0), 1.0, 0.0, "")
    assert against_pair(whole, pair, [steady, early], level_mg_per_L=15.0) == (
        "For 15 mg/L the two-level method reads 417 mg/day of active drug and the whole record 341 mg/day: level 2 was "
        "drawn at 60 % of its plateau, so the two-level method reads Vmax too high."
    )
    assert against_pair(whole, pair, [steady], level_mg_per_L=15.0) == (
        "For 15 mg/L the two-level method reads 417 mg/day of active drug and the whole record 341 mg/day: two levels "
        "by themselves leave Vmax and Km wide open, and the whole record also uses the population and the doubt about "
        "the doses."
    )
    assert against_pair(whole, whole, [steady], level_mg_per_L=15.0) == (
        "For 15 mg/L the two-level method reads 341 mg/day of active drug and the whole record 341 mg/day: they agree."
    )
