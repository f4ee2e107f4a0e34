"""Regimens as said aloud, dose by dose, and the record the engine is given."""

from __future__ import annotations

from datetime import datetime, timedelta
from typing import Any

import pytest

from pkcalc.dosing import Intake, Regimen
from pkcalc.drugs.profile import load_profile
from pkcalc.errors import CannotEstimate
from pkcalc.given import given_record
from tests.unit.cases import plain

PROFILE = load_profile("phenytoin")
CAPS = "extended-capsule"
START = datetime(2026, 3, 1, 21)


def clock(*doses: tuple[float, float], form: str = CAPS) -> Regimen:
    return Regimen(tuple(Intake(form, hour, mg) for hour, mg in doses), timed=True)


def every(hours: float, mg: float = 300.0, **same: Any) -> Regimen:
    return Regimen((Intake(same.pop("form", CAPS), 0.0, mg, **same),), cycle_h=hours, anchor_h=21.0)


@pytest.mark.parametrize(
    ("regimen", "words"),
    [
        (clock((21, 300)), "300 mg extended capsules (phenytoin sodium) daily at 21:00"),
        (clock((0, 300)), "300 mg extended capsules (phenytoin sodium) daily at 00:00"),
        (
            clock((8, 100), (21.5, 1230)),
            "100 mg at 08:00 and 1,230 mg at 21:30 daily as extended capsules (phenytoin sodium)",
        ),
        (every(24), "300 mg extended capsules (phenytoin sodium) daily"),
        (every(48), "300 mg extended capsules (phenytoin sodium) every other day"),
        (every(8, 112.5, form="suspension"), "112.5 mg oral suspension (phenytoin acid) every 8 h"),
        (
            every(12, 500, form="fosphenytoin-injection", over_h=0.5),
            "500 mg PE over 30 min fosphenytoin injection into a vein (mg PE) every 12 h",
        ),
        (
            Regimen((Intake(CAPS, 21, 300), Intake("chewable-tablet", 21, 50))),
            "300 mg extended capsules (phenytoin sodium) at 21:00 and 50 mg chewable tablets (phenytoin acid) at 21:00 daily",
        ),
        (
            Regimen((Intake(CAPS, 21, 300), Intake(CAPS, 45, 330)), cycle_h=48),
            "300 mg one day, 330 mg the next, alternating as extended capsules (phenytoin sodium)",
        ),
    ],
)
def test_regimens_as_said_aloud(regimen: Regimen, words: str) -> None:
    assert regimen.words(PROFILE) == words


def test_doses_by_the_clock_begin_with_the_first_time_of_day_after_the_start() -> None:
    found = clock((21, 200), (8, 100)).doses_from(datetime(2026, 3, 1, 12), datetime(2026, 3, 3, 8))
    assert [(m, x.labelled_mg) for m, x in found] == [
        (datetime(2026, 3, 1, 21), 200),
        (datetime(2026, 3, 2, 8), 100),
        (datetime(2026, 3, 2, 21), 200),
    ]


def test_doses_by_interval_count_from_the_start() -> None:
    found = every(36).doses_from(START, START + timedelta(hours=109))
    assert [(m - START) / timedelta(hours=1) for m, _ in found] == [0, 36, 72, 108]
    assert every(36).doses_from(START, START) == []
    assert every(36).doses_from(START, START - timedelta(days=3)) == []


@pytest.mark.parametrize("regimen", [every(36), every(8), clock((21, 200), (8, 100)), clock((0, 300))])
def test_a_dose_is_due_exactly_where_the_regimen_gives_one(regimen: Regimen) -> None:
    given = {m for m, _ in regimen.doses_from(START, START + timedelta(days=6))}
    for hour in range(-48, 144):
        moment = START + timedelta(hours=hour)
        assert regimen.has_dose_at(moment, START) == (moment in given), moment
    for moment in given:
        assert regimen.has_dose_at(moment + timedelta(minutes=1), START)
        assert not regimen.has_dose_at(moment + timedelta(minutes=2), START)


def test_daily_amounts_apply_salt_once() -> None:
    assert clock((8, 100), (21, 200)).labelled_mg_per_day() == 300
    assert clock((8, 100), (21, 200)).active_mg_per_day(PROFILE) == pytest.approx(276)
    assert every(48).active_mg_per_day(PROFILE) == pytest.approx(138)


def line(**given: Any) -> dict[str, Any]:
    return {"form": CAPS, "amount": "300 mg", "every": "24 h", "from": "2026-11-21 21:00", **given}


def times(**changes: Any) -> list[float]:
    return [d.time_day for d in given_record(plain(levels=[], **changes), PROFILE).doses]


def test_the_record_holds_every_dose_up_to_the_consult() -> None:
    record = given_record(plain(levels=[], doses=[line()]), PROFILE)
    assert [d.time_day for d in record.doses] == list(range(10))
    assert [d.amount_mg for d in record.doses] == [pytest.approx(276)] * 10
    assert record.before is None


def test_missed_doses_are_left_out_and_extra_doses_put_in() -> None:
    extra = {"form": CAPS, "amount": "100 mg", "at": "2026-11-25 09:00"}
    lines = [line(missed=["2026-11-23 21:00", "24 Nov 2026 21:01"]), extra]
    assert times(doses=lines) == [0, 1, 3.5, 4, 5, 6, 7, 8, 9]


def test_a_change_of_form_is_two_lines() -> None:
    lines = [line(until="2026-11-25 12:00"), line(form="chewable-tablet", **{"from": "2026-11-25 21:00"})]
    record = given_record(plain(levels=[], doses=lines), PROFILE)
    assert [d.amount_mg for d in record.doses] == pytest.approx([276] * 4 + [300] * 6)
    assert len({d.absorption for d in record.doses}) == 2


def test_only_lines_that_count_as_given() -> None:
    assert times(doses=[line(until="2026-11-23 12:00"), line(source="ordered")]) == [0, 1]
    assert len(times(doses=[line(source="ordered", confirmed="yes")])) == 10


def test_infusions_keep_their_length() -> None:
    single = {"form": "injection", "amount": "1 g", "at": "2026-11-30 12:00", "over": "30 min"}
    steady = {"form": "injection", "rate": "20 mg/h", "from": "2026-11-30 14:00", "until": "2026-11-30 20:00"}
    record = given_record(plain(levels=[], doses=[single, steady]), PROFILE)
    assert [d.amount_mg for d in record.doses] == pytest.approx([920, 0.92 * 120])
    assert [d.duration_day for d in record.doses] == pytest.approx([1 / 48, 0.25])
    assert all(d.absorption is None for d in record.doses)


def test_an_infusion_that_still_runs_has_given_its_rate_so_far() -> None:
    running = {"form": "injection", "rate": "20 mg/h", "from": "2026-12-01 08:00", "until": "2026-12-01 20:00"}
    (dose,) = given_record(plain(levels=[], doses=[running]), PROFILE).doses
    assert dose.amount_mg / dose.duration_day == pytest.approx(0.92 * 480)
    assert dose.duration_day == pytest.approx(2 / 24, abs=2 / 1440)


def test_a_line_known_only_by_its_length_is_the_regimen_before() -> None:
    data = line(for_about="3 months", every="", amount="", daily=[{"time": "21:00", "amount": "300 mg"}])
    del data["from"]
    record = given_record(plain(doses=[data]), PROFILE)
    assert record.before is not None
    assert record.before.for_day == pytest.approx(91.3125)
    assert record.before.regimen.rate_mg_per_day == pytest.approx(276)
    assert record.doses[0].time_day > record.start_day


def test_lines_without_any_time_and_two_lines_by_length_are_refused() -> None:
    bare = line()
    del bare["from"]
    with pytest.raises(CannotEstimate) as caught:
        given_record(plain(doses=[bare]), PROFILE)
    assert str(caught.value) == (
        "Dose line 1 has no start. Without times nobody can tell how far a level was from its plateau. "
        "Give the start, or how long the dose had been taken about."
    )
    with pytest.raises(CannotEstimate) as caught:
        given_record(plain(doses=[{**bare, "for_about": "3 months"}] * 2), PROFILE)
    assert str(caught.value) == (
        "Two dose lines say only for how long they were taken. Their order in time is not known. "
        "Give the start of all but the first."
    )


def test_more_than_ten_thousand_events() -> None:
    hourly = line(form="injection", every="1 h", amount="10 mg", **{"from": "2025-06-01 00:00"})
    found = times(doses=[hourly])
    assert len(found) == 548 * 24 + 11
    assert found[-1] * 24 == pytest.approx(len(found) - 1)


def test_across_a_change_to_summer_time() -> None:
    """Without offsets the clock counts; with offsets elapsed time does, and a missed dose goes by the clock beside it."""
    evening = line(every="", amount="", daily=[{"time": "21:00", "amount": "300 mg"}])
    naive = {**evening, "from": "2026-03-27 21:00", "missed": ["2026-03-30 21:00"]}
    assert times(doses=[naive], now="2026-04-01 10:00", albumin=None) == [0, 1, 2, 4]
    aware = {**evening, "from": "2026-03-27 21:00+01:00", "missed": ["2026-03-30 21:00+02:00"]}
    assert times(doses=[aware], now="2026-04-01 10:00+02:00", albumin=None) == [0, 1, 2, 4]
