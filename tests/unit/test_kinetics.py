"""The doors with units: dimensions, other units, arrays, and every refusal in full."""

from __future__ import annotations

import inspect
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from pkcalc import Q, formulas, kinetics
from pkcalc.errors import CannotEstimate, CaseError
from pkcalc.units import ureg

VMAX, KM, V = Q(400, "mg/day"), Q(4, "mg/L"), Q(50, "L")

#: Every door with good arguments, and the unit of what it returns ("" for a plain number).
DOORS: dict[str, tuple[dict[str, Any], str]] = {
    "steady_state_level": ({"dose_rate": Q(300, "mg/day"), "vmax": VMAX, "km": KM}, "mg/L"),
    "dose_rate_for_level": ({"level": Q(12, "mg/L"), "vmax": VMAX, "km": KM}, "mg/day"),
    "sensitivity": ({"dose_rate": Q(300, "mg/day"), "vmax": VMAX}, ""),
    "clearance_at_level": ({"level": Q(12, "mg/L"), "vmax": VMAX, "km": KM}, "L/day"),
    "level_after": (
        {
            "time": Q(3, "days"),
            "start": Q(5, "mg/L"),
            "dose_rate": Q(300, "mg/day"),
            "vmax": VMAX,
            "km": KM,
            "volume": V,
        },
        "mg/L",
    ),
    "time_to_level": (
        {
            "start": Q(5, "mg/L"),
            "end": Q(11, "mg/L"),
            "dose_rate": Q(300, "mg/day"),
            "vmax": VMAX,
            "km": KM,
            "volume": V,
        },
        "day",
    ),
    "time_to_fraction": (
        {
            "fraction": 0.9,
            "dose_rate": Q(300, "mg/day"),
            "vmax": VMAX,
            "km": KM,
            "volume": V,
            "start": Q(5, "mg/L"),
        },
        "day",
    ),
    "time_to_fall": (
        {"start": Q(30, "mg/L"), "end": Q(15, "mg/L"), "vmax": VMAX, "km": KM, "volume": V},
        "day",
    ),
    "two_level": (
        {
            "rate1": Q(200, "mg/day"),
            "level1": Q(4, "mg/L"),
            "rate2": Q(300, "mg/day"),
            "level2": Q(12, "mg/L"),
        },
        "pair",
    ),
}

#: The same quantity in other units of its kind.
OTHER = {
    "mg/day": ("mg/h", "g/day", "g/h"),
    "mg/L": ("mcg/mL", "mg/dL", "g/L"),
    "L": ("mL",),
    "day": ("h", "min", "week"),
}


def public() -> set[str]:
    return {
        name
        for name, one in vars(kinetics).items()
        if inspect.isfunction(one) and one.__module__ == kinetics.__name__ and not name.startswith("_")
    }


def parts(result: Any) -> list[Any]:
    return [result.vmax, result.km] if isinstance(result, kinetics.PairSolution) else [result]


def test_every_public_door_is_under_test() -> None:
    assert public() == set(DOORS)


@pytest.mark.parametrize("name", sorted(DOORS))
def test_results_carry_their_unit(name: str) -> None:
    arguments, unit = DOORS[name]
    result = getattr(kinetics, name)(**arguments)
    units = {"pair": ["mg/day", "mg/L"], "": [""]}.get(unit, [unit])
    for part, expected in zip(parts(result), units, strict=True):
        if expected:
            assert part.units == Q(1, expected).units
        else:
            assert not isinstance(part, ureg.Quantity)


@pytest.mark.parametrize("name", sorted(DOORS))
def test_other_units_of_the_same_kind_give_the_same_answer(name: str) -> None:
    arguments, _ = DOORS[name]
    door = getattr(kinetics, name)
    base = parts(door(**arguments))
    tried = 0
    for argument, value in arguments.items():
        if not isinstance(value, ureg.Quantity):
            continue
        kind = next(label for label in OTHER if Q(1, label).units == value.units)
        for label in OTHER[kind]:
            changed = {**arguments, argument: value.to(Q(1, label).units)}
            for one, other in zip(base, parts(door(**changed)), strict=True):
                assert np.isclose(np.asarray(getattr(one, "magnitude", one)), getattr(other, "magnitude", other))
            tried += 1
    assert tried >= 2


@pytest.mark.parametrize("name", sorted(DOORS))
def test_bare_numbers_and_wrong_dimensions_are_refused_at_every_argument(name: str) -> None:
    arguments, _ = DOORS[name]
    door = getattr(kinetics, name)
    for argument, value in arguments.items():
        wrong = [Q(0.5, "kg"), Q(0.5, "mg/kg/day"), "300 mg/day", None]
        if isinstance(value, ureg.Quantity):
            wrong += [
                3.0,
                np.array([1.0, 2.0]),
                *(Q(1, label) for label in OTHER if Q(1, label).units != value.units),
            ]
        for bad in wrong:
            with pytest.raises(CaseError) as raised:
                door(**{**arguments, argument: bad})
            assert len(raised.value.problems) == 1, (argument, bad)


@pytest.mark.parametrize("name", sorted(DOORS))
def test_impossible_values_are_refused_at_every_argument(name: str) -> None:
    arguments, _ = DOORS[name]
    door = getattr(kinetics, name)
    for argument, value in arguments.items():
        for bad in (-1.0, float("nan"), float("inf"), [3.0, -3.0]):
            given = value * 0 + bad if np.ndim(bad) == 0 and not isinstance(value, ureg.Quantity) else None
            if isinstance(value, ureg.Quantity):
                given = ureg.Quantity(np.asarray(bad) if np.ndim(bad) else bad, value.units)
            if given is None:
                continue
            with pytest.raises(CaseError):
                door(**{**arguments, argument: given})


@pytest.mark.parametrize("name", sorted(DOORS))
def test_arrays_are_their_single_values(name: str) -> None:
    arguments, _ = DOORS[name]
    door = getattr(kinetics, name)
    base = parts(door(**arguments))
    many = {
        k: ureg.Quantity(np.full(3, float(v.magnitude)), v.units) if isinstance(v, ureg.Quantity) else v
        for k, v in arguments.items()
    }
    for one, three in zip(base, parts(door(**many)), strict=True):
        assert np.shape(getattr(three, "magnitude", three)) == (3,)
        assert np.all(np.isclose(getattr(three, "magnitude", three), getattr(one, "magnitude", one)))


def test_the_doors_call_their_formulas() -> None:
    assert kinetics.steady_state_level(Q(300, "mg/day"), VMAX, KM) == Q(12.0, "mg/L")
    assert kinetics.dose_rate_for_level(Q(12, "mg/L"), VMAX, KM) == Q(300.0, "mg/day")
    assert kinetics.sensitivity(Q(300, "mg/day"), VMAX) == 4.0
    assert kinetics.clearance_at_level(Q(12, "mg/L"), VMAX, KM) == Q(25.0, "L/day")
    pair = kinetics.two_level(Q(300, "mg/day"), Q(12, "mg/L"), Q(200, "mg/day"), Q(4, "mg/L"))
    assert (pair.vmax, pair.km) == (Q(400.0, "mg/day"), Q(4.0, "mg/L"))
    one = {
        "dose_rate_mg_per_day": 300.0,
        "vmax_mg_per_day": 400.0,
        "km_mg_per_L": 4.0,
        "volume_L": 50.0,
    }
    from_zero = kinetics.time_to_fraction(0.9, Q(300, "mg/day"), VMAX, KM, V)
    assert from_zero.magnitude == formulas.time_to_fraction(fraction=0.9, **one)
    after = kinetics.level_after(Q(72, "h"), Q(5, "mg/L"), Q(300, "mg/day"), VMAX, KM, V)
    assert after.magnitude == pytest.approx(formulas.level_after(time_day=3.0, start_mg_per_L=5.0, **one))
    there = kinetics.time_to_level(Q(5, "mg/L"), after, Q(300, "mg/day"), VMAX, KM, V)
    assert there.to(Q(1, "h").units).magnitude == pytest.approx(72.0)
    fall = kinetics.time_to_fall(Q(30, "mg/L"), Q(15, "mg/L"), VMAX, KM, V)
    assert fall.magnitude == pytest.approx(50.0 * (15.0 + 4.0 * np.log(2.0)) / 400.0)


RATE = Q(300, "mg/day")


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (
            lambda: kinetics.steady_state_level(300, VMAX, KM),
            'Dose rate: the bare value "300" was given. Allowed: a quantity in mg/day. Attach a unit: 300 mg/day.',
        ),
        (
            lambda: kinetics.steady_state_level(Q(-300, "mg/day"), Q(0, "mg/day"), KM),
            "Dose rate: -300 mg/day was given. Allowed: 0 or more mg/day. Check the dose rate and its unit.\n"
            "Vmax: 0 mg/day was given. Allowed: above 0 mg/day. Check the dose rate and its unit.",
        ),
        (
            lambda: kinetics.steady_state_level(Q([300.0, -1.0, -2.0], "mg/day"), VMAX, KM),
            "Dose rate: 2 of 3 values cannot be used, -1 mg/day first. Allowed: 0 or more mg/day. "
            "Check the dose rate and its unit.",
        ),
        (
            lambda: kinetics.steady_state_level(Q(float("nan"), "mg/day"), VMAX, KM),
            "Dose rate: no finite number was given. Allowed: 0 or more mg/day. Check the dose rate and its unit.",
        ),
        (
            lambda: kinetics.steady_state_level(Q([1.0, 2.0], "mg/day"), Q([400.0, 400.0, 400.0], "mg/day"), KM),
            "Lists: of different lengths: Dose rate 2, Vmax 3. Allowed: lists of one length. Give as many of each.",
        ),
        (
            lambda: kinetics.level_after(Q(-1, "days"), Q(5, "mg/L"), RATE, VMAX, KM, Q(0, "L")),
            "Time: -1 day was given. Allowed: 0 or more day. Check the time and its unit.\n"
            "Volume: 0 L was given. Allowed: above 0 L. Check the volume and its unit.",
        ),
        (
            lambda: kinetics.dose_rate_for_level(Q(-2, "mg/L"), VMAX, KM),
            "Level: -2 mg/L was given. Allowed: 0 or more mg/L. Check the level and its unit.",
        ),
        (
            lambda: kinetics.time_to_fraction(90, RATE, VMAX, KM, V),
            "Fraction: 90 was given. Allowed: from 0 up to, but not including, 1. "
            "Give the part of the way as a fraction, 0.9 for 90 %.",
        ),
        (
            lambda: kinetics.time_to_fraction("most", RATE, VMAX, KM, V),
            "Fraction: no plain number was given. Allowed: from 0 up to, but not including, 1. "
            "Give the part of the way as a fraction, 0.9 for 90 %.",
        ),
        (
            lambda: kinetics.time_to_fraction(0.9, RATE, VMAX, KM, V, start=3),
            'Start level: the bare value "3" was given. Allowed: a quantity in mg/L. Attach a unit: 8 mg/L.',
        ),
    ],
)
def test_faults_of_the_input(call: Callable[[], object], message: str) -> None:
    with pytest.raises(CaseError) as raised:
        call()
    assert str(raised.value) == message


NO_STEADY_STATE = (
    "There is no steady state: more is given than the body can remove, and the level rises without end. "
    "Give a dose rate below Vmax, or check Vmax and the salt factor."
)
NO_CURVE = (
    "With saturable elimination a higher dose rate gives a level that is higher by more than in proportion. "
    "Check doses taken, sampling times, units and salt of both, or add a level."
)
AIM = "Choose a level between the start and where the level settles, or another dose rate."


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (
            lambda: kinetics.steady_state_level(Q(450, "mg/day"), VMAX, KM),
            f"The dose rate, 450 mg/day, is at or above Vmax, 400 mg/day. {NO_STEADY_STATE}",
        ),
        (
            lambda: kinetics.sensitivity(VMAX, VMAX),
            f"The dose rate, 400 mg/day, is at or above Vmax, 400 mg/day. {NO_STEADY_STATE}",
        ),
        (
            lambda: kinetics.time_to_fraction(0.9, Q([300.0, 400.0, 500.0], "mg/day"), VMAX, KM, V),
            f"Dose rates at or above Vmax: 2 of 3. {NO_STEADY_STATE}",
        ),
        (
            lambda: kinetics.time_to_level(Q(5, "mg/L"), Q(13, "mg/L"), RATE, VMAX, KM, V),
            "At 300 mg/day the level never gets from 5 mg/L to 13 mg/L. "
            f"From 5 mg/L it moves towards its steady level, 12 mg/L, and no further. {AIM}",
        ),
        (
            lambda: kinetics.time_to_level(Q(5, "mg/L"), Q(4, "mg/L"), Q(500, "mg/day"), VMAX, KM, V),
            "At 500 mg/day the level never gets from 5 mg/L to 4 mg/L. "
            f"The dose rate is at or above Vmax, 400 mg/day: from 5 mg/L it only rises. {AIM}",
        ),
        (
            lambda: kinetics.time_to_level(Q(5, "mg/L"), Q([11.0, 13.0], "mg/L"), RATE, VMAX, KM, V),
            "Levels never reached at their dose rate: 1 of 2. "
            f"At a constant rate a level only moves from its start towards where it settles. {AIM}",
        ),
        (
            lambda: kinetics.time_to_fall(Q(15, "mg/L"), Q(20, "mg/L"), VMAX, KM, V),
            "Without dosing the level never gets from 15 mg/L to 20 mg/L. "
            "Without dosing a level only falls, ever more slowly, and never quite to zero. "
            "Give an end level above 0 and below the start.",
        ),
        (
            lambda: kinetics.time_to_fall(Q(15, "mg/L"), Q([0.0, 5.0], "mg/L"), VMAX, KM, V),
            "Levels never reached without dosing: 1 of 2. "
            "Without dosing a level only falls, ever more slowly, and never quite to zero. "
            "Give an end level above 0 and below the start.",
        ),
        (
            lambda: kinetics.two_level(RATE, Q(10, "mg/L"), RATE, Q(12, "mg/L")),
            "Both levels were drawn on the same dose rate, 300 mg/day. "
            "Two parameters cannot be found from one dose rate. Give a level on another dose rate.",
        ),
        (
            lambda: kinetics.two_level(Q(400, "mg/day"), Q(9, "mg/L"), RATE, Q(10, "mg/L")),
            f"From 300 mg/day to 400 mg/day the level did not rise (from 10 mg/L to 9 mg/L). {NO_CURVE}",
        ),
        (
            lambda: kinetics.two_level(RATE, Q(10, "mg/L"), Q(400, "mg/day"), Q(12, "mg/L")),
            "From 300 mg/day to 400 mg/day the level rose less than in proportion (from 10 mg/L to 12 mg/L). "
            f"{NO_CURVE}",
        ),
        (
            lambda: kinetics.two_level(RATE, Q(10, "mg/L"), Q(400, "mg/day"), Q([12.0, 20.0], "mg/L")),
            f"Pairs that lie on no saturable curve: 1 of 2. {NO_CURVE}",
        ),
    ],
)
def test_where_no_number_follows_the_reason_is_said(call: Callable[[], object], message: str) -> None:
    with pytest.raises(CannotEstimate) as raised:
        call()
    assert str(raised.value) == message
