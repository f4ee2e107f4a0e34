"""The engine on records a reader can check, every refusal in full, and the odd inputs of real life."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from pkcalc import flow, formulas, periodic
from pkcalc.errors import CaseError
from pkcalc.flow import Absorption, Before, Dose, FirstOrder, Record, Repeated

PROMPT = Absorption(11.0)
VMAX, KM, V = 400.0, 4.0, 50.0
KAPPA = KM * V


def levels(record: Record, times: list[float], **more: object) -> np.ndarray:
    return flow.levels(record, times, VMAX, KM, V, **more)[0]


def test_a_push_and_its_wash_out_are_the_closed_form() -> None:
    found = levels(Record((Dose(1.0, 1000.0),)), [0.5, 1.0, 1.5, 3.0])
    down = [
        formulas.level_after(
            time_day=t,
            start_mg_per_L=20.0,
            dose_rate_mg_per_day=0.0,
            vmax_mg_per_day=VMAX,
            km_mg_per_L=KM,
            volume_L=V,
        )
        for t in (0.5, 2.0)
    ]
    # before the push, at its very time (the level before it), and after
    assert found[:2].tolist() == [0.0, 0.0]
    assert np.allclose(found[2:], down, rtol=1e-14)


def test_levels_come_in_the_order_asked_and_doses_in_any_order() -> None:
    doses = tuple(Dose(i / 3, 100.0, absorption=PROMPT) for i in range(9))
    times = [2.9, 0.4, 1.7, 0.4]
    found = levels(Record(doses), times)
    assert found[1] == found[3]
    assert np.allclose(found[[1, 2, 0]], levels(Record(doses), [0.4, 1.7, 2.9]), rtol=1e-12)
    assert np.allclose(found, levels(Record(doses[::-1]), times), rtol=1e-12)


def test_infusions_that_overlap_add_up() -> None:
    two = Record((Dose(0.0, 300.0, duration_day=1.0), Dose(0.0, 150.0, duration_day=1.0)))
    one = Record((Dose(0.0, 450.0, duration_day=1.0),))
    assert np.allclose(levels(two, [0.3, 1.0, 2.0]), levels(one, [0.3, 1.0, 2.0]), rtol=1e-13)
    late = Record((Dose(0.0, 300.0, duration_day=1.0), Dose(0.5, 300.0, duration_day=1.0)))
    half = levels(Record((Dose(0.0, 150.0, duration_day=0.5),)), [0.5])
    middle = flow.levels(
        Record((Dose(0.5, 300.0, duration_day=0.5),), start_day=0.5), [1.0], VMAX, KM, V, start_mg_per_L=half
    )[0]
    assert np.allclose(levels(late, [0.5]), half, rtol=1e-13)
    assert np.allclose(levels(late, [1.0]), middle, rtol=1e-12)


def test_missed_and_extra_doses_and_a_change_of_form() -> None:
    usual = tuple(Dose(float(i), 300.0, absorption=PROMPT) for i in range(10))
    missed = usual[:6] + usual[7:]
    extra = (*usual, Dose(6.5, 300.0, absorption=PROMPT))
    slower = usual[:6] + tuple(replace(d, absorption=Absorption(3.0, release_day=0.2)) for d in usual[6:])
    times = [6.0, 7.0, 9.0]
    base, less, more, other = (levels(Record(d), times) for d in (usual, missed, extra, slower))
    assert base[0] == pytest.approx(less[0], rel=1e-12)
    assert np.all(less[1:] < base[1:])
    assert np.all(more[1:] > base[1:])
    assert not np.allclose(other[1:], base[1:], rtol=1e-3)


def test_duplicates_are_flagged_and_calculated_as_given() -> None:
    dose = Dose(1.0, 300.0, absorption=PROMPT)
    record = Record((dose, Dose(2.0, 300.0, absorption=PROMPT), dose, replace(dose, amount_mg=100.0), dose))
    assert flow.duplicates(record) == ((0, 2, 4),)
    assert flow.duplicates(Record((dose,))) == ()
    triple = Record((replace(dose, amount_mg=900.0), record.doses[1], record.doses[3]))
    assert np.allclose(levels(record, [1.5, 3.0]), levels(triple, [1.5, 3.0]), rtol=1e-12)


def test_a_record_of_no_length_is_its_start() -> None:
    assert levels(Record(), [0.0]).tolist() == [0.0]
    assert levels(Record(start_mg=500.0), [0.0, 0.0]).tolist() == [10.0, 10.0]
    assert flow.amounts(Record(), [], [VMAX, VMAX], KAPPA).shape == (2, 0)
    before = Before(Repeated(1.0, (Dose(0.0, 100.0),)), 100.0)
    plateau = flow.periodic(before.regimen, VMAX, KAPPA).start_mg
    assert flow.amounts(Record(before=before), [0.0], VMAX, KAPPA)[0] == pytest.approx(plateau)


def test_more_than_ten_thousand_events() -> None:
    rng = np.random.default_rng(1)
    times = np.sort(rng.uniform(0, 3000, 12_000))
    record = Record(
        tuple(
            Dose(float(t), 80.0, absorption=PROMPT) if i % 2 else Dose(float(t), 80.0, duration_day=0.01)
            for i, t in enumerate(times)
        )
    )
    found = flow.levels(record, [1000.0, 2000.0, 3000.0], [600.0, 500.0], KM, V)
    assert found.shape == (2, 3)
    assert np.all((found > 0) & (found < 60))


def test_a_known_start_level_and_what_is_still_in_the_gut() -> None:
    """Of a dose before the start only what reaches the blood afterwards counts."""
    doses = (Dose(0.0, 300.0, absorption=PROMPT), Dose(1.0, 300.0, absorption=PROMPT))
    whole = flow.amounts(Record(doses), [1.1, 2.0], VMAX, KAPPA, accuracy="finest")[0]
    later = Record(doses, start_day=1.1, start_mg=float(whole[0]))
    assert flow.amounts(later, [2.0], VMAX, KAPPA, accuracy="finest")[0, 0] == pytest.approx(whole[1], rel=1e-6)
    running = (Dose(0.0, 300.0, duration_day=2.0),)
    middle = flow.amounts(Record(running), [1.0, 3.0], VMAX, KAPPA)[0]
    rest = Record(running, start_day=1.0, start_mg=float(middle[0]))
    assert flow.amounts(rest, [3.0], VMAX, KAPPA)[0, 0] == pytest.approx(middle[1], rel=1e-12)


def test_before_the_record_settled_draws_start_at_their_plateau_and_the_rest_build_up() -> None:
    regimen = Repeated(1.0, (Dose(0.0, 150.0, absorption=PROMPT), Dose(0.5, 150.0, absorption=PROMPT)))
    vmax = np.array([600.0, 320.0, 300.0, 250.0])
    found = flow.amounts(Record(before=Before(regimen, 30.0)), [0.0], vmax, KAPPA)[:, 0]
    plateau = flow.periodic(regimen, vmax, KAPPA).start_mg
    simulated = flow.amounts(Record(regimen.cycles(0, 30, 0.0)), [30.0], vmax, KAPPA)[:, 0]
    assert found[0] == pytest.approx(plateau[0], rel=1e-5)
    # close to Vmax, at it and above it: never dropped, 30 days of build-up
    assert np.allclose(found[1:], simulated[1:], rtol=3e-3)
    assert np.all(plateau[2:] == np.inf)
    # the two rules meet: a draw that has just settled differs by less than the everyday error
    fast = flow.amounts(Record(regimen.cycles(0, 30, 0.0)), [30.0], vmax[:1], KAPPA)[:, 0]
    assert found[0] == pytest.approx(fast[0], rel=3e-3)


def test_before_carries_the_unabsorbed_rest_of_the_last_doses_over() -> None:
    slow = Absorption(2.0, lag_day=0.05, release_day=0.3)
    regimen = Repeated(1.0, (Dose(0.8, 300.0, absorption=slow),))
    carried = flow.amounts(Record(before=Before(regimen, 60.0)), [0.5], 600.0, KAPPA, accuracy="finest")[0, 0]
    simulated = flow.amounts(Record(regimen.cycles(0, 60, 0.0)), [60.5], 600.0, KAPPA, accuracy="finest")[0, 0]
    assert carried == pytest.approx(simulated, rel=1e-5)


def test_a_dialysis_session_lowers_the_level_while_it_lasts() -> None:
    session = FirstOrder(clearance_L_per_day=100.0, start_day=1.0, end_day=1.25)
    ours = levels(Record(start_mg=1000.0, first_order=(session,)), [1.0, 1.25, 2.0])
    one = {"vmax_mg_per_day": VMAX, "km_mg_per_L": KM, "volume_L": V, "dose_rate_mg_per_day": 0.0}
    begin = formulas.level_after(time_day=1.0, start_mg_per_L=20.0, **one)
    end = formulas.level_after(time_day=0.25, start_mg_per_L=begin, linear_clearance_L_per_day=100.0, **one)
    after = formulas.level_after(time_day=0.75, start_mg_per_L=end, **one)
    assert np.allclose(ours, [begin, end, after], rtol=1e-13)
    rate = FirstOrder(rate_per_day=2.0, start_day=1.0, end_day=1.25)
    same = flow.amounts(Record(start_mg=1000.0, first_order=(rate,)), [2.0], VMAX, KAPPA)[0, 0] / V
    assert same == pytest.approx(ours[2], rel=1e-13)
    # with oral doses too, through the stepper: each draw has its own rate
    doses = tuple(Dose(i / 2, 200.0, absorption=PROMPT) for i in range(4))
    both = flow.levels(Record(doses, first_order=(session,)), [2.0], VMAX, KM, [V, 2 * V])
    without = flow.levels(Record(doses), [2.0], VMAX, KM, [V, 2 * V])
    assert np.all(both < without)
    two = Record(doses, first_order=(session, session))
    twice = Record(doses, first_order=(replace(session, clearance_L_per_day=200.0),))
    assert levels(two, [2.0]) == pytest.approx(levels(twice, [2.0]), rel=1e-9)


def test_first_crossing_of_a_constant_rate_is_the_closed_form() -> None:
    infusion = Record((Dose(0.0, 390.0 * 40, duration_day=40.0),))
    found = flow.first_crossing(infusion, [5.0, 10.0, 2000.0], VMAX, KM, [V, V, V], until_day=40.0)
    expected = formulas.time_to_level(
        start_mg_per_L=0.0,
        end_mg_per_L=[5.0, 10.0],
        dose_rate_mg_per_day=390.0,
        vmax_mg_per_day=VMAX,
        km_mg_per_L=KM,
        volume_L=V,
    )
    assert np.allclose(found[:2], expected, rtol=1e-12)
    assert found[2] == np.inf
    fall = flow.first_crossing(Record(start_mg=1500.0), 15.0, VMAX, KM, V, until_day=10.0, falling=True)
    down = formulas.time_to_fall(
        start_mg_per_L=30.0, end_mg_per_L=15.0, vmax_mg_per_day=VMAX, km_mg_per_L=KM, volume_L=V
    )
    assert fall[0] == pytest.approx(float(down), rel=1e-12)


def test_first_crossing_on_real_doses() -> None:
    doses = tuple(Dose(1.0 + i / 3, 150.0, absorption=PROMPT) for i in range(30))
    vmax = np.array([350.0, 450.0, 2000.0])
    found = flow.first_crossing(Record(doses), 8.0, vmax, KM, V, until_day=11.0, accuracy="fine")
    assert found[2] == np.inf
    assert found[0] < found[1]
    for draw in (0, 1):
        near = found[draw] + np.array([-0.004, 0.0, 0.004])
        level = flow.levels(Record(doses), near, vmax[draw], KM, V, accuracy="finest")[0]
        assert level[0] < 8.0 < level[2]
        assert level[1] == pytest.approx(8.0, rel=1e-3)
    push = Record((Dose(2.0, 600.0),))
    assert flow.first_crossing(push, 10.0, VMAX, KM, V, until_day=5.0)[0] == 2.0
    there = Record(start_mg=600.0, start_day=3.0)
    assert flow.first_crossing(there, 10.0, VMAX, KM, V, until_day=5.0)[0] == 3.0
    assert flow.first_crossing(there, 15.0, VMAX, KM, V, until_day=5.0, falling=True)[0] == 3.0


def test_days_to_a_fraction_on_a_real_regimen_agree_with_the_formula() -> None:
    """Small doses often are nearly a constant rate."""
    regimen = Repeated(0.25, (Dose(0.0, 75.0),))
    vmax = np.array([600.0, 400.0, 300.0, 290.0])
    found = flow.days_to_fraction(regimen, 0.9, vmax, KAPPA, within_day=60.0)
    formula = formulas.time_to_fraction(
        fraction=0.9, dose_rate_mg_per_day=300.0, vmax_mg_per_day=vmax, km_mg_per_L=KM, volume_L=V
    )
    assert np.allclose(found[:2], formula[:2], rtol=0.05)
    assert np.all(found[2:] == np.inf)
    assert flow.days_to_fraction(regimen, 0.9, 320.0, KAPPA, within_day=5.0)[0] == np.inf
    plateau = flow.periodic(regimen, 600.0, KAPPA).start_mg
    assert flow.days_to_fraction(regimen, 0.9, 600.0, KAPPA, within_day=5.0, start_mg=plateau)[0] == 0.0


def test_plateau_of_unequal_doses_in_the_day() -> None:
    regimen = Repeated(1.0, (Dose(0.0, 200.0, absorption=PROMPT), Dose(0.5, 100.0, absorption=PROMPT)))
    state = flow.periodic(regimen, [500.0, 300.0, 250.0], KAPPA, accuracy="fine")
    assert state.exists.tolist() == [True, False, False]
    course = flow.amounts(
        Record(regimen.cycles(-regimen.cycles_still_absorbed(), 1, 0.0), start_mg=0.0),
        np.linspace(0, 1, 401),
        500.0,
        KAPPA,
        start_mg=state.start_mg[:1],
        accuracy="finest",
    )[0]
    assert state.trough_mg[0] == pytest.approx(course.min(), rel=1e-4)
    assert state.peak_mg[0] == pytest.approx(course.max(), rel=1e-4)
    assert state.average_mg[0] == pytest.approx(np.trapezoid(course, dx=1 / 400), rel=1e-4)
    assert state.peak_time_day[0] == pytest.approx(np.argmax(course) / 400, abs=0.01)
    assert state.swing[0] == pytest.approx((course.max() - course.min()) / course.mean(), rel=1e-2)
    assert state.swing[1:].tolist() == [0.0, 0.0]


def test_with_a_lag_the_trough_is_after_the_dose() -> None:
    late = Repeated(1.0, (Dose(0.0, 300.0, absorption=Absorption(11.0, lag_day=0.1)),))
    state = flow.periodic(late, 500.0, KAPPA)
    assert 0.09 < state.trough_time_day[0] < 0.2
    assert state.trough_mg[0] < state.start_mg[0]


def test_self_check_reports_the_step_error() -> None:
    doses = tuple(Dose(i / 3, 100.0, absorption=PROMPT) for i in range(12))
    rng = np.random.default_rng(2)
    vmax, kappa = 455 * np.exp(0.25 * rng.standard_normal(500)), 245 * np.exp(0.54 * rng.standard_normal(500))
    times = [1.3, 2.7, 4.0]
    everyday, finest = (flow.amounts(Record(doses), times, vmax, kappa, accuracy=a) for a in ("everyday", "finest"))
    error = np.max(np.abs(everyday / finest - 1))
    checked = flow.step_error(Record(doses), times, vmax, kappa)
    assert 0.8 * error <= checked <= 1.2 * error
    assert flow.step_error(Record((Dose(0.0, 500.0),)), times, vmax, kappa) <= 1e-13


def test_absorption_may_differ_between_draws() -> None:
    regimen = Repeated(1.0, (Dose(0.0, 300.0, absorption=PROMPT),))
    record = Record((Dose(0.2, 300.0, absorption=PROMPT),), before=Before(regimen, 90.0))
    vmax = np.array([500.0, 600.0, 500.0, 700.0])
    factors = np.array([1.0, 0.5, 2.0, 0.5])
    found = flow.levels(record, [0.3, 1.0], vmax, KM, V, absorption_factor=factors, typical_per_day=4.0)
    for draw, factor in enumerate(factors):
        form = Absorption(11.0 * factor)
        own = Record(
            (Dose(0.2, 300.0, absorption=form),),
            before=Before(Repeated(1.0, (Dose(0.0, 300.0, absorption=form),)), 90.0),
        )
        alone = flow.levels(own, [0.3, 1.0], vmax[draw], KM, V, typical_per_day=4.0)[0]
        assert np.allclose(found[draw], alone, rtol=1e-12)
    assert not np.allclose(found[0], found[2], rtol=1e-2)


def test_one_draw_many_draws_and_blocks_agree() -> None:
    doses = tuple(Dose(i / 3, 100.0, absorption=PROMPT) for i in range(6))
    vmax = np.linspace(300, 900, 5000)
    many = flow.amounts(Record(doses), [1.0, 2.0], vmax, KAPPA, typical_per_day=5.0)
    for one in (0, 2047, 2048, 4999):
        alone = flow.amounts(Record(doses), [1.0, 2.0], vmax[one], KAPPA, typical_per_day=5.0)
        assert np.array_equal(alone[0], many[one])


# ------------------------------------------------------------------------------------------------ refusals

ORAL = Dose(0.0, 300.0, absorption=PROMPT)


@pytest.mark.parametrize(
    ("make", "message"),
    [
        (
            lambda: Record((Dose(0.0, -100.0),)),
            "Dose 1, amount: -100 mg was given. Allowed: more than 0 mg. "
            "Give the amount taken, or leave a missed dose out.",
        ),
        (
            lambda: Record((ORAL, Dose(1.0, 0.0))),
            "Dose 2, amount: 0 mg was given. Allowed: more than 0 mg. "
            "Give the amount taken, or leave a missed dose out.",
        ),
        (
            lambda: Record((Dose(math.inf, 100.0),)),
            "Dose 1, time: this is not a time. Allowed: a time in days. Give the date and time of the dose.",
        ),
        (
            lambda: Record((Dose(0.0, 100.0, duration_day=-0.5),)),
            "Dose 1, infusion time: -0.5 day was given. Allowed: 0 day or more. "
            "Check that the infusion ends after it starts.",
        ),
        (
            lambda: Record((Dose(0.0, 100.0, duration_day=0.5, absorption=PROMPT),)),
            "Dose 1, route: an infusion over 0.5 day that is also absorbed was given. "
            "Allowed: an infusion into a vein, or an absorbed dose. Choose one of the two.",
        ),
        (
            lambda: Record((Dose(1.0, 100.0),), start_day=2.0),
            "Dose 1, time: day 1, and the record begins on day 2. Allowed: day 2 or later. "
            "Begin the record earlier, or give the level at its beginning.",
        ),
        (
            lambda: Record(start_mg=-1.0),
            "Amount at the start: -1 mg was given. Allowed: 0 mg or more. Give the amount in the body at the start.",
        ),
        (
            lambda: Record(start_day=math.nan),
            "Start of the record: this is not a time. Allowed: a time in days. "
            "Give the date on which the record begins.",
        ),
        (
            lambda: Absorption(0.0),
            "Absorption rate: 0 per day was given. Allowed: more than 0 per day. "
            "Check the form's absorption in the drug file.",
        ),
        (
            lambda: Absorption(5.0, lag_day=-1.0, release_day=-2.0),
            "Absorption lag: -1 day was given. Allowed: 0 day or more. "
            "Check the form's absorption in the drug file.\n"
            "Release time: -2 day was given. Allowed: 0 day or more. "
            "Check the form's absorption in the drug file.",
        ),
        (
            lambda: FirstOrder(rate_per_day=1.0, start_day=2.0, end_day=1.0),
            "First-order path: it starts on day 2 and ends on day 1. Allowed: an end after the start. "
            "Check the two times of the session.",
        ),
        (
            lambda: FirstOrder(),
            "First-order path: neither a rate nor a clearance was given. "
            "Allowed: a rate in 1/day, or a clearance in L/day. Give one of the two.",
        ),
        (
            lambda: FirstOrder(rate_per_day=1.0, clearance_L_per_day=1.0),
            "First-order path: both a rate and a clearance were given. "
            "Allowed: a rate in 1/day, or a clearance in L/day. Give one of the two.",
        ),
        (
            lambda: FirstOrder(rate_per_day=-1.0),
            "First-order rate: -1 per day was given. Allowed: 0 per day or more. Check its sign and unit.",
        ),
        (
            lambda: FirstOrder(clearance_L_per_day=-1.0),
            "First-order clearance: -1 L/day was given. Allowed: 0 L/day or more. Check its sign and unit.",
        ),
        (
            lambda: Repeated(0.0, (ORAL,)),
            "Cycle: 0 day was given. Allowed: more than 0 day. Give the time after which the regimen repeats.",
        ),
        (
            lambda: Repeated(1.0, ()),
            "Regimen: no dose was given. Allowed: at least one dose per cycle. Add a dose.",
        ),
        (
            lambda: Repeated(1.0, (Dose(1.0, 100.0),)),
            "Dose 1 of the regimen, time: day 1 of a cycle of 1 day. "
            "Allowed: from day 0 up to, but not including, day 1. Give the time from the start of the cycle.",
        ),
        (
            lambda: Before(Repeated(1.0, (ORAL,)), 0.0),
            "Time on the earlier regimen: 0 day was given. Allowed: more than 0 day. "
            "Say for about how long it was taken.",
        ),
        (
            lambda: flow.amounts(Record(start_day=2.0), [3.0, 1.0], VMAX, KAPPA),
            "Time of a level: day 1 was asked for; the record begins on day 2. "
            "Allowed: times at or after the beginning of the record. "
            "Begin the record earlier, or check the date of the level.",
        ),
        (
            lambda: flow.amounts(Record(), [math.nan], VMAX, KAPPA),
            "Time of a level: this is not a time. Allowed: times at or after the beginning of the record. "
            "Begin the record earlier, or check the date of the level.",
        ),
        (
            lambda: flow.amounts(Record(), [1.0], [400.0, -1.0, 0.0], [200.0, math.nan, 1.0]),
            "Vmax: 2 of 3 values are not positive numbers (-1 first). Allowed: more than 0. "
            "Check where the values come from.\n"
            "Km x volume: 1 of 3 values is not a positive number. Allowed: more than 0. "
            "Check where the values come from.",
        ),
        (
            lambda: flow.amounts(Record(), [1.0], VMAX, KAPPA, start_mg=-1.0),
            "Amount at the start: a negative or unreadable amount was given. Allowed: 0 mg or more. "
            "Check the level at the start of the record.",
        ),
        (
            lambda: flow.amounts(Record(first_order=(FirstOrder(clearance_L_per_day=1.0),)), [1.0], VMAX, KAPPA),
            "First-order path: a clearance was given, but no volume of distribution. "
            "Allowed: a clearance with a volume, or a rate in 1/day. Give the volume of distribution.",
        ),
    ],
)
def test_every_refusal_says_what_was_given_what_is_allowed_and_what_to_do(
    make: Callable[[], object], message: str
) -> None:
    with pytest.raises(CaseError) as raised:
        make()
    assert str(raised.value) == message


def test_all_problems_of_a_record_are_reported_at_once() -> None:
    with pytest.raises(CaseError) as raised:
        Record((Dose(0.0, -1.0), Dose(1.0, 100.0), Dose(2.0, 0.0, duration_day=-1.0)), start_mg=-5.0)
    assert [p.where for p in raised.value.problems] == [
        "Amount at the start",
        "Dose 1, amount",
        "Dose 3, amount",
        "Dose 3, infusion time",
    ]


@pytest.mark.parametrize(("accuracy", "within"), [("everyday", 2e-5), ("fine", 5e-7)])
@pytest.mark.parametrize("k", [0.0, 0.1])
def test_the_map_of_one_cycle_builds_up_as_dose_after_dose(accuracy: flow.Accuracy, within: float, k: float) -> None:
    """Two unequal doses a day for 90 days, from draws that settle to draws that never do."""
    regimen = Repeated(1.0, (Dose(0.25, 100.0, absorption=PROMPT), Dose(0.875, 200.0, absorption=PROMPT)))
    vmax, kappa = (x.ravel() for x in np.meshgrid([250.0, 299.0, 320.0, 380.0], [90.0, 245.0, 700.0]))
    path = (FirstOrder(rate_per_day=k),) if k else ()
    found = periodic.build_up(
        regimen, 90, vmax, kappa, first_order_per_day=np.full(vmax.shape, k), accuracy=accuracy, typical_per_day=8.0
    )
    followed = flow.amounts(
        Record(regimen.cycles(0, 90, 0.0), first_order=path),
        [90.0],
        vmax,
        kappa,
        accuracy=accuracy,
        typical_per_day=8.0,
    )[:, 0]
    certain = np.isfinite(found)
    assert certain.sum() >= 8
    assert found[certain] == pytest.approx(followed[certain], rel=within)


def test_differences_die_away_as_the_engine_says() -> None:
    record = Record(tuple(Dose(d + 0.5, 300.0, absorption=PROMPT) for d in range(10)))
    vmax, kappa = np.array([330.0, 450.0, 700.0]), np.array([120.0, 245.0, 500.0])
    times = [4.0, 9.9]
    course, faded = flow.fading(record, times, vmax, kappa)
    assert course == pytest.approx(flow.amounts(record, times, vmax, kappa))
    # a little more at day 4, followed to day 9.9
    more = [
        flow.amounts(replace(record, start_day=4.0, start_mg=float(x)), [9.9], v, q)[0, 0]
        for start, v, q in zip(course[:, 0], vmax, kappa, strict=True)
        for x in (start, start + 1.0)
    ]
    shrunk = np.array(more[1::2]) - np.array(more[::2])
    assert np.exp(faded[:, 0] - faded[:, 1]) == pytest.approx(shrunk, rel=5e-3)
