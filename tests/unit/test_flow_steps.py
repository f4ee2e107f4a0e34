"""How a record is cut into steps, and how draws are sorted by their speed."""

from __future__ import annotations

import math

import numpy as np
import pytest

from pkcalc import flow, stepping
from pkcalc.flow import Absorption, Dose, FirstOrder, Record

PROMPT = Absorption(11.0)


def plan(doses: tuple[Dose, ...], times: tuple[float, ...], **more: object) -> stepping.Plan:
    return stepping.plan_steps(
        doses, **{"start_day": 0.0, "times_day": times, "fastest_per_day": 7.0, "fineness": 1.0, **more}
    )


def test_steps_cover_the_record_and_stop_at_every_asked_time() -> None:
    doses = tuple(Dose(i / 3, 100.0, absorption=PROMPT) for i in range(9))
    times = (0.1, 1.37, 2.9)
    cut = plan(doses, times)
    assert math.fsum(s.h for s in cut.steps) == pytest.approx(2.9, abs=1e-12)
    for position, time in enumerate(times):
        number = next(n for n, positions in cut.reached.items() if position in positions)
        assert cut.ends_day[number - 1] == time
    assert all(s.h > 0 for s in cut.steps)


def test_step_rule() -> None:
    """At most 0.25 over the fastest rate, and after a dose (0.5/ka) (e^(ka time since it) ka / (2 fastest))^(1/5)."""
    slow, fast = Absorption(4.0), Absorption(48.0)
    for fineness in (1.0, 4.0):
        cut = plan((Dose(0.0, 100.0, absorption=slow), Dose(0.5, 100.0, absorption=fast)), (1.0,), fineness=fineness)
        for step, end in zip(cut.steps, cut.ends_day, strict=True):
            begin = end - step.h
            allowed = 0.25 / 7.0
            if 0.5 <= begin < 0.5 + 37 / 48:
                allowed = min(allowed, 0.5 / 48.0 * (math.exp(48.0 * (begin - 0.5)) * 48.0 / 14.0) ** 0.2)
            assert step.h <= allowed / fineness * (1 + 1e-6)


def test_every_milligram_is_in_a_step() -> None:
    doses = (
        Dose(0.0, 100.0, absorption=Absorption(11.0, lag_day=0.1, release_day=0.3)),
        Dose(0.2, 200.0, absorption=PROMPT),
        Dose(0.3, 400.0),
        Dose(0.4, 800.0, duration_day=0.7),
    )
    cut = plan(doses, (60.0,))
    assert math.fsum(s.push + s.full for s in cut.steps) == pytest.approx(1500.0, rel=1e-13)


def test_constant_pieces_are_one_step_each() -> None:
    cut = plan((Dose(0.0, 100.0), Dose(1.0, 240.0, duration_day=2.0), Dose(1.5, 100.0, duration_day=0.5)), (9.0,))
    assert [s.h for s in cut.steps] == [1.0, 0.5, 0.5, 1.0, 6.0]
    assert [s.rate for s in cut.steps] == pytest.approx([0.0, 120.0, 320.0, 120.0, 0.0])
    assert [s.push for s in cut.steps] == [100.0, 0.0, 0.0, 0.0, 0.0]


def test_a_path_is_open_exactly_between_its_times() -> None:
    paths = (FirstOrder(rate_per_day=1.0, start_day=1.0, end_day=2.0), FirstOrder(rate_per_day=1.0))
    cut = plan((), (3.0,), first_order=paths)
    assert [(s.h, s.paths) for s in cut.steps] == [(1.0, (1,)), (1.0, (0, 1)), (1.0, (1,))]


def test_rounding_of_the_clock_does_not_split_a_dose_from_its_level() -> None:
    noon = 3 * (1 / 3)
    record = Record((Dose(noon - 1e-16, 500.0), Dose(2.0 + 1e-13, 500.0)))
    found = flow.amounts(record, [1.0, 2.0], 400.0, 200.0)[0]
    assert found[0] == 0.0
    assert 100.0 < found[1] < 500.0
    early = Record((Dose(1.0 - 1e-12, 500.0),), start_day=1.0)
    assert flow.amounts(early, [1.0 - 1e-13], 400.0, 200.0)[0, 0] == 0.0
    assert flow.amounts(early, [1.001], 400.0, 200.0)[0, 0] == pytest.approx(500.0, rel=1e-2)


def test_an_infusion_of_no_length_is_a_push() -> None:
    short = flow.amounts(Record((Dose(1.0, 500.0, duration_day=1e-9),)), [1.5], 400.0, 200.0)
    push = flow.amounts(Record((Dose(1.0, 500.0),)), [1.5], 400.0, 200.0)
    assert short == push


def test_no_draw_steps_beyond_a_third_of_its_time_constant() -> None:
    rng = np.random.default_rng(3)
    fastest = np.exp(rng.normal(0.5, 0.6, 4096))
    fastest[:3] = [40.0, 300.0, 5000.0]
    classes = stepping.speeds(fastest)
    assert sorted(np.concatenate([c.positions for c in classes]).tolist()) == list(range(4096))
    for one in classes:
        assert np.all(0.25 / one.fastest_per_day * fastest[one.positions] <= 1 / 3 + 1e-9)
    assert len(classes[0].positions) > 4000
    assert [c.stiff for c in classes][-1]


def test_with_a_given_typical_rate_no_draw_steps_beyond_its_time_constant() -> None:
    fastest = np.array([0.1, 5.0, 20.0, 21.0, 81.0])
    classes = stepping.speeds(fastest, 5.0)
    assert [(c.fastest_per_day, c.positions.tolist()) for c in classes] == [
        (5.0, [0, 1, 2]),
        (20.0, [3]),
        (80.0, [4]),
    ]
    for one in classes:
        assert np.all(0.25 / one.fastest_per_day * fastest[one.positions] <= 1 + 1e-9)
