"""The formulas with units: quantities in, quantities out, everything else refused.

    from pkcalc import Q, kinetics
    kinetics.steady_state_level(Q(300, "mg/day"), vmax=Q(400, "mg/day"), km=Q(4, "mg/L"))

Dose rates and Vmax are active drug that reaches the body (salt factor and bioavailability already applied).
Single quantities and arrays alike. Each function is a thin door over its twin in `formulas`, where
equation, validity and source stand. All faults of a call are reported at once (`CaseError`); where no
number follows from good input the reason is said (`CannotEstimate`; for arrays, for how many).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from pkcalc import formulas
from pkcalc.errors import CannotEstimate, CaseError, Problem
from pkcalc.units import CANONICAL, Q, show, to_canonical

Floats = NDArray[np.float64]
Kind = Literal["dose rate", "level", "volume", "duration", "fraction"]
Bound = Literal["above 0", "0 or more"]

_FIX = {
    "dose rate": "Check the dose rate and its unit",
    "level": "Check the level and its unit",
    "volume": "Check the volume and its unit",
    "duration": "Check the time and its unit",
}


@dataclass(frozen=True)
class PairSolution:
    """This patient's Vmax (active drug) and Km, as quantities, through two steady levels."""

    vmax: Any
    km: Any


def steady_state_level(dose_rate: Any, vmax: Any, km: Any) -> Any:
    """The steady level of a dose rate: Css = Km R / (Vmax - R).

    dose_rate, vmax: quantities like mg/day (active drug); km: a quantity like mg/L. Returns a level in mg/L.
    Raises CannotEstimate where the dose rate is at or above Vmax: there is no steady state.
    """
    r, v, k = _read(
        ("Dose rate", dose_rate, "dose rate", "0 or more"),
        ("Vmax", vmax, "dose rate", "above 0"),
        ("Km", km, "level", "above 0"),
    )
    _refuse_no_steady_state(r, v)
    return Q(formulas.steady_state_level(dose_rate_mg_per_day=r, vmax_mg_per_day=v, km_mg_per_L=k), "mg/L")


def dose_rate_for_level(level: Any, vmax: Any, km: Any) -> Any:
    """The dose rate of active drug that holds a level: R = Vmax C / (Km + C). Returns mg/day."""
    c, v, k = _read(
        ("Level", level, "level", "0 or more"),
        ("Vmax", vmax, "dose rate", "above 0"),
        ("Km", km, "level", "above 0"),
    )
    return Q(formulas.dose_rate_for_level(level_mg_per_L=c, vmax_mg_per_day=v, km_mg_per_L=k), "mg/day")


def sensitivity(dose_rate: Any, vmax: Any) -> Any:
    """By how many per cent the steady level changes for 1 per cent more dose: Vmax / (Vmax - R), a plain
    number.

    Raises CannotEstimate where the dose rate is at or above Vmax.
    """
    r, v = _read(("Dose rate", dose_rate, "dose rate", "0 or more"), ("Vmax", vmax, "dose rate", "above 0"))
    _refuse_no_steady_state(r, v)
    return formulas.sensitivity_at(dose_rate_mg_per_day=r, vmax_mg_per_day=v)


def clearance_at_level(level: Any, vmax: Any, km: Any) -> Any:
    """The clearance at one stated level, and at no other: Vmax / (Km + C). Returns L/day."""
    c, v, k = _read(
        ("Level", level, "level", "0 or more"),
        ("Vmax", vmax, "dose rate", "above 0"),
        ("Km", km, "level", "above 0"),
    )
    return Q(formulas.clearance_at_level(level_mg_per_L=c, vmax_mg_per_day=v, km_mg_per_L=k), "L/day")


def level_after(time: Any, start: Any, dose_rate: Any, vmax: Any, km: Any, volume: Any) -> Any:
    """The level after a time at a constant dose rate (0 mg/day: no dosing), exact below, at and above
    Vmax."""
    t, c, r, v, k, vol = _read(
        ("Time", time, "duration", "0 or more"),
        ("Start level", start, "level", "0 or more"),
        ("Dose rate", dose_rate, "dose rate", "0 or more"),
        ("Vmax", vmax, "dose rate", "above 0"),
        ("Km", km, "level", "above 0"),
        ("Volume", volume, "volume", "above 0"),
    )
    level = formulas.level_after(
        time_day=t,
        start_mg_per_L=c,
        dose_rate_mg_per_day=r,
        vmax_mg_per_day=v,
        km_mg_per_L=k,
        volume_L=vol,
    )
    return Q(level, "mg/L")


def time_to_level(start: Any, end: Any, dose_rate: Any, vmax: Any, km: Any, volume: Any) -> Any:
    """Time from one level to another at a constant dose rate. Returns days.

    Raises CannotEstimate where the level is never reached (the steady level itself is approached, not
    reached).
    """
    c, e, r, v, k, vol = _read(
        ("Start level", start, "level", "0 or more"),
        ("End level", end, "level", "0 or more"),
        ("Dose rate", dose_rate, "dose rate", "0 or more"),
        ("Vmax", vmax, "dose rate", "above 0"),
        ("Km", km, "level", "above 0"),
        ("Volume", volume, "volume", "above 0"),
    )
    days = formulas.time_to_level(
        start_mg_per_L=c,
        end_mg_per_L=e,
        dose_rate_mg_per_day=r,
        vmax_mg_per_day=v,
        km_mg_per_L=k,
        volume_L=vol,
    )
    if np.ndim(days) == 0 and not np.isfinite(days):
        begin, aim = show(float(c), "mg/L"), show(float(e), "mg/L")
        found = f"At {show(float(r), 'mg/day')} the level never gets from {begin} to {aim}."
        raise CannotEstimate(found, _course(float(r), float(v), float(k), float(c)), _OTHER_AIM)
    _refuse_some(~np.isfinite(days), "Levels never reached at their dose rate", _BETWEEN, _OTHER_AIM)
    return Q(days, "day")


def time_to_fraction(fraction: Any, dose_rate: Any, vmax: Any, km: Any, volume: Any, start: Any = 0) -> Any:
    """Time until a fraction of the way from the start level to the steady level is covered. Returns days.

    fraction: a plain number from 0 up to, but not including, 1 (0.9 for 90 %). start: a level; 0 for
    nothing in the body. Raises CannotEstimate where the dose rate is at or above Vmax: there is nothing to
    settle to.
    """
    begin = Q(0.0, "mg/L") if isinstance(start, (int, float)) and start == 0 else start
    f, r, v, k, vol, c = _read(
        ("Fraction", fraction, "fraction", "0 or more"),
        ("Dose rate", dose_rate, "dose rate", "0 or more"),
        ("Vmax", vmax, "dose rate", "above 0"),
        ("Km", km, "level", "above 0"),
        ("Volume", volume, "volume", "above 0"),
        ("Start level", begin, "level", "0 or more"),
    )
    _refuse_no_steady_state(r, v)
    days = formulas.time_to_fraction(
        fraction=f,
        dose_rate_mg_per_day=r,
        vmax_mg_per_day=v,
        km_mg_per_L=k,
        volume_L=vol,
        start_mg_per_L=c,
    )
    return Q(days, "day")


def time_to_fall(start: Any, end: Any, vmax: Any, km: Any, volume: Any) -> Any:
    """Time for a level to fall to another without dosing: V [(C0 - C) + Km ln(C0/C)] / Vmax. Returns days.

    Raises CannotEstimate where the end lies above the start, or at zero, which is never reached.
    """
    c, e, v, k, vol = _read(
        ("Start level", start, "level", "0 or more"),
        ("End level", end, "level", "0 or more"),
        ("Vmax", vmax, "dose rate", "above 0"),
        ("Km", km, "level", "above 0"),
        ("Volume", volume, "volume", "above 0"),
    )
    days = formulas.time_to_fall(start_mg_per_L=c, end_mg_per_L=e, vmax_mg_per_day=v, km_mg_per_L=k, volume_L=vol)
    if np.ndim(days) == 0 and not np.isfinite(days):
        found = f"Without dosing the level never gets from {show(float(c), 'mg/L')} to {show(float(e), 'mg/L')}."
        raise CannotEstimate(found, _DOWN_ONLY, _LOWER_END)
    _refuse_some(~np.isfinite(days), "Levels never reached without dosing", _DOWN_ONLY, _LOWER_END)
    return Q(days, "day")


def two_level(rate1: Any, level1: Any, rate2: Any, level2: Any) -> PairSolution:
    """Vmax and Km from two steady levels on two dose rates of active drug; the order does not matter.

    Raises CannotEstimate, with the physical reason, where no saturable curve passes through the two.
    """
    r1, c1, r2, c2 = _read(
        ("First dose rate", rate1, "dose rate", "above 0"),
        ("First level", level1, "level", "above 0"),
        ("Second dose rate", rate2, "dose rate", "above 0"),
        ("Second level", level2, "level", "above 0"),
    )
    found = formulas.two_level(rate1_mg_per_day=r1, level1_mg_per_L=c1, rate2_mg_per_day=r2, level2_mg_per_L=c2)
    if np.ndim(found.admissible) == 0 and not found.admissible:
        _refuse_pair(float(r1), float(c1), float(r2), float(c2))
    _refuse_some(~found.admissible, "Pairs that lie on no saturable curve", _NO_CURVE, _CHECK_PAIR)
    return PairSolution(vmax=Q(found.vmax_mg_per_day, "mg/day"), km=Q(found.km_mg_per_L, "mg/L"))


# ----------------------------------------------------------------------------------------------- refusals

_OTHER_AIM = "Choose a level between the start and where the level settles, or another dose rate."
_BETWEEN = "At a constant rate a level only moves from its start towards where it settles."
_DOWN_ONLY = "Without dosing a level only falls, ever more slowly, and never quite to zero."
_LOWER_END = "Give an end level above 0 and below the start."
_NO_CURVE = "With saturable elimination a higher dose rate gives a level that is higher by more than in proportion."
_CHECK_PAIR = "Check doses taken, sampling times, units and salt of both, or add a level."


def _read(*wanted: tuple[str, Any, Kind, Bound]) -> list[Floats]:
    """Every argument as floats in canonical units; all faults at once."""
    problems: list[Problem] = []
    values: list[Floats] = []
    for name, given, kind, bound in wanted:
        try:
            value = _plain_fraction(given, name) if kind == "fraction" else to_canonical(given, kind, name)
            array = np.asarray(value, dtype=np.float64)
        except CaseError as refused:
            problems += refused.problems
            continue
        if kind == "fraction":
            good, allowed, unit, fix = array < 1, "from 0 up to, but not including, 1", "", _FRACTION_FIX
        else:
            unit = "day" if kind == "duration" else CANONICAL[kind]
            good, allowed, fix = np.isfinite(array), f"{bound} {unit}", _FIX[kind]
        good = good & ((array > 0) if bound == "above 0" else (array >= 0))
        if not good.all():
            problems.append(Problem(name, _which(array, good, unit), allowed, fix))
        values.append(array)
    if problems:
        raise CaseError(problems)
    try:
        np.broadcast_shapes(*(v.shape for v in values))
    except ValueError:
        lengths = ", ".join(f"{name} {v.size}" for (name, *_), v in zip(wanted, values, strict=True) if v.ndim)
        raise CaseError(
            Problem("Lists", f"of different lengths: {lengths}", "lists of one length", "Give as many of each")
        ) from None
    return values


_FRACTION_FIX = "Give the part of the way as a fraction, 0.9 for 90 %"


def _plain_fraction(given: Any, name: str) -> Floats:
    refused = Problem(name, "no plain number was given", "from 0 up to, but not including, 1", _FRACTION_FIX)
    if given is None or hasattr(given, "units"):
        raise CaseError(refused)
    try:
        return np.asarray(given, dtype=np.float64)
    except (TypeError, ValueError):
        raise CaseError(refused) from None


def _which(array: Floats, good: NDArray[np.bool_], unit: str) -> str:
    first = float(array[~good][0]) if array.ndim else float(array)
    shown = f"{first:.6g} {unit}".strip() if np.isfinite(first) else "no finite number"
    if array.ndim == 0:
        return f"{shown} was given"
    return f"{int((~good).sum())} of {array.size} values cannot be used, {shown} first"


def _refuse_no_steady_state(rate: Floats, vmax: Floats) -> None:
    none = np.asarray(rate >= vmax)
    if not none.any():
        return
    if none.ndim == 0:
        given, most = show(float(rate), "mg/day"), show(float(vmax), "mg/day")
        found = f"The dose rate, {given}, is at or above Vmax, {most}."
    else:
        found = f"Dose rates at or above Vmax: {int(none.sum())} of {none.size}."
    raise CannotEstimate(
        found,
        "There is no steady state: more is given than the body can remove, and the level rises without end.",
        "Give a dose rate below Vmax, or check Vmax and the salt factor.",
    )


def _refuse_some(bad: Any, what: str, why: str, helps: str) -> None:
    bad = np.asarray(bad)
    if bad.any():
        raise CannotEstimate(f"{what}: {int(bad.sum())} of {bad.size}.", why, helps)


def _course(rate: float, vmax: float, km: float, start: float) -> str:
    begin = show(start, "mg/L")
    if rate >= vmax:
        return f"The dose rate is at or above Vmax, {show(vmax, 'mg/day')}: from {begin} it only rises."
    steady = float(formulas.steady_state_level(dose_rate_mg_per_day=rate, vmax_mg_per_day=vmax, km_mg_per_L=km))
    return f"From {begin} it moves towards its steady level, {show(steady, 'mg/L')}, and no further."


def _refuse_pair(rate1: float, level1: float, rate2: float, level2: float) -> None:
    reason = formulas.pair_refusal(
        rate1_mg_per_day=rate1, level1_mg_per_L=level1, rate2_mg_per_day=rate2, level2_mg_per_L=level2
    )
    (low, low_level), (high, high_level) = sorted(((rate1, level1), (rate2, level2)))
    rates = f"from {show(low, 'mg/day', 4)} to {show(high, 'mg/day', 4)}"
    levels = f"from {show(low_level, 'mg/L')} to {show(high_level, 'mg/L')}"
    if reason == "same rate":
        raise CannotEstimate(
            f"Both levels were drawn on the same dose rate, {show(low, 'mg/day', 4)}.",
            "Two parameters cannot be found from one dose rate.",
            "Give a level on another dose rate.",
        )
    moved = "did not rise" if reason == "higher rate, level not higher" else "rose less than in proportion"
    raise CannotEstimate(f"{rates.capitalize()} the level {moved} ({levels}).", _NO_CURVE, _CHECK_PAIR)
