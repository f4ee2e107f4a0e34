"""The hours to come, in words: for drugs that are followed from level to level and for those only projected."""

from __future__ import annotations

import math
from typing import Any

from pkcalc.clock import show_time
from pkcalc.consult import Consult
from pkcalc.estimate.result import Band
from pkcalc.forecast import scaled
from pkcalc.formulas import molar_level
from pkcalc.note.words import (
    NO_STEADY_STATE,
    NOT_OFFERED,
    Section,
    Table,
    edge,
    level_band,
    level_words,
    sentence,
    told_up_to,
)
from pkcalc.plan.projection import Amount, Path, Plateaus, Projection
from pkcalc.units import FACTORS, MOLAR, percent, show, show_number

#: Levels are told in these steps on page one; all of them stand in the annex.
FRONT_STEPS = 3


def laboratory_unit(consult: Consult) -> str:
    """The unit of the latest typed level, else the first one of the drug file."""
    typed = [o.level.typed.label for o in consult.observations if o.level.typed.label]
    return typed[-1] if typed else consult.profile.level_units[0]


def level_in_words(consult: Consult, band: Band) -> str:
    """'1,070 mg/L (90 % interval 947 to 1,200), that is 107 mg/dL' where the laboratory reports in another unit."""
    if not math.isfinite(band.median):
        return NO_STEADY_STATE
    text = level_words(band, math.inf)
    unit = laboratory_unit(consult)
    if unit == "mg/L":
        return text
    return f"{text}, that is {show(_converted(consult, band.median, unit), unit)}"


def also(consult: Consult, *levels_mg_per_L: float) -> str:
    """' (100 to 150 mg/dL)' behind a level or a range where the laboratory reports in another unit; else nothing."""
    unit = laboratory_unit(consult)
    if unit in ("mg/L", "mcg/mL"):
        return ""
    return f" ({' to '.join(show_number(_converted(consult, x, unit)) for x in levels_mg_per_L)} {unit})"


def _converted_band(consult: Consult, band: Band, unit: str) -> str:
    """A forecast level in the laboratory's unit for a table cell."""
    most = _converted(consult, told_up_to(consult), unit)
    return level_band(scaled(band, _converted(consult, 1.0, unit)), most)


def _other_unit(consult: Consult) -> str:
    """The laboratory's unit where it is not the one in which everything is calculated, else nothing."""
    unit = laboratory_unit(consult)
    return "" if unit in ("mg/L", "mcg/mL") else unit


def _converted(consult: Consult, level_mg_per_L: float, unit: str) -> float:
    if unit in MOLAR:
        mass = consult.profile.molar_mass_g_per_mol
        umol = float(molar_level(level_mg_per_L=level_mg_per_L, molar_mass_g_per_mol=mass))
        return umol if unit == "umol/L" else umol / 1000
    return level_mg_per_L / FACTORS["level"][unit]


def vmax_words(consult: Consult, band: Band) -> str:
    """Vmax in the drug's own time unit; by the hour also per kg, as guidelines tell it."""
    own, weight = consult.profile.rate, consult.case.patient.weight_kg
    text = f"{consult.profile.show_rate(band.median)} (90 % interval {edge(own(band.low))} to {edge(own(band.high))})"
    if consult.profile.time_unit == "h" and weight is not None:
        text += f", that is {show(own(band.median) / weight, 'mg/kg/h')},"
    return text


def _amount(consult: Consult, amount: Amount, unit: str) -> str:
    text = f"{show(amount.mg.median, unit)} (90 % interval {edge(amount.mg.low)} to {edge(amount.mg.high)})"
    weight = consult.case.patient.weight_kg
    if weight is not None:
        head, _, per = unit.partition("/")
        per_kg = f"{head}/kg/{per}" if per else f"{head}/kg"
        text += f", that is {show(amount.mg.median / weight, per_kg)}"
    volume = "mL/h" if unit == "mg/h" else "mL"
    return text + "".join(f"; {show(mL, volume)} of {p.words} ({p.strength_words})" for p, mL in amount.mL)


def front_lines(consult: Consult, found: Projection) -> tuple[str, ...]:
    """Page one: where the level is, where it goes, what would hold it."""
    lines = [f"Level now ({found.started_from}): {level_in_words(consult, found.now)}."]
    for path in found.paths:
        lines += _path_lines(consult, path)
    if found.load is not None:
        lines.append(sentence(f"Load {found.load.words}: {_amount(consult, found.load, 'mg')}"))
        if found.guideline_mg is not None:
            low, high = (show_number(x / 1000) for x in found.guideline_mg)
            lines.append(f"Published full load for this weight, from a level of 0: {low} to {high} g of active drug.")
    aim = show(consult.goal.aim_mg_per_L, "mg/L")
    lines += [sentence(f"Rate that holds {aim} {h.words}: {_amount(consult, h, 'mg/h')}") for h in found.holds]
    if found.choose:
        lines.append(found.choose)
    if found.holds:
        lines.append(f"No rate is ordered by this note: it needs the agreement of {consult.profile.authority}.")
    elif "regimens" in consult.blocked:
        lines.append(f"No regimen is offered: {consult.profile.scope}.")
    return tuple(lines)


def _path_lines(consult: Consult, path: Path) -> list[str]:
    steps = path.moments[:FRONT_STEPS]
    course = "; ".join(f"in {show(m.hours, 'h')} {level_band(m.level, told_up_to(consult))}" for m in steps)
    head = path.words[:1].upper() + path.words[1:]
    lines = [f"{head}: {course} mg/L."]
    unit = _other_unit(consult)
    if unit:
        told = "; ".join(_converted_band(consult, m.level, unit) for m in steps)
        lines.append(f"   As the laboratory reports it: {told} {unit}.")
    leaves = path.leaves
    if leaves is not None:
        side = "below" if leaves.below >= leaves.above else "above"
        lines.append(f"   From {show(leaves.hours, 'h')} on it is more likely {side} the target than inside it.")
    return lines


def next_lines(consult: Consult, found: Projection) -> tuple[str, ...]:
    """When the next level is due, why, and from which level on somebody must call."""
    lines = [f"At {show_time(found.next_level_at)} ({show(found.next_level_h, 'h')} from now)."]
    most = min(told_up_to(consult), consult.goal.critical_mg_per_L)
    low, critical = consult.goal.low_mg_per_L, consult.goal.critical_mg_per_L
    lines.append(
        f"Call at once below {show(low, 'mg/L')}{also(consult, low)} or at or above {show(critical, 'mg/L')}"
        f"{also(consult, critical)}, whatever was forecast."
    )
    for path in found.paths:
        due = next((m for m in path.moments if m.hours >= found.next_level_h), path.moments[-1])
        if due.level.high > 0:
            ends = (min(due.level.low, most), min(due.level.high, most))
            expected = f"{edge(ends[0])} to {edge(ends[1])} mg/L{also(consult, *ends)}"
            lines.append(f"Call where it lies outside {expected}, {_going_on(path)}: another course than forecast.")
    usual = consult.profile.sampling.repeat_h
    if found.next_why and usual is not None and usual[0] < usual[1]:
        lines.append(sentence(f"The earlier of the two usual times, because {'; '.join(found.next_why)}"))
    lines.append("A change of rate needs a level of its own.")
    if consult.case.dialysis:
        lines.append("A level within an hour after dialysis starts and after it stops.")
    return tuple(lines)


def _going_on(path: Path) -> str:
    return path.words if path.present else f"on {path.words}"


def plateau_lines(consult: Consult, found: Plateaus) -> tuple[str, ...]:
    """Page one where steady levels were typed without times: where rates would settle, and what holds the aim."""
    lines = []
    for words, f in found.settle:
        stops = [c for c in consult.cautions if c.severity == "stop" and c.values.get("regimen") == words]
        mark = f"{NOT_OFFERED}: " if stops else ""
        limit = f"{show(consult.goal.critical_mg_per_L, 'mg/L')}{also(consult, consult.goal.critical_mg_per_L)}"
        level = level_words(f.steady, told_up_to(consult))
        if math.isfinite(f.steady.median):
            level += also(consult, f.steady.median)
        lines.append(
            f"{mark}{words} = {consult.profile.show_rate(f.rate_mg_per_day, 4)} as active drug: once settled {level}; "
            f"below the target {percent(f.below)}, above it {percent(f.above)}; above {limit} or no steady state "
            f"{percent(f.above_critical)}."
        )
    aim = show(consult.goal.aim_mg_per_L, "mg/L")
    lines += [sentence(f"Rate that holds {aim} {h.words}: {_amount(consult, h, 'mg/h')}") for h in found.holds]
    if found.holds:
        lines.append(f"No rate is ordered by this note: it needs the agreement of {consult.profile.authority}.")
    else:
        lines.append(f"No regimen is offered: {consult.profile.scope}.")
    lines.append("The levels were taken as steady on the word of the person who typed them; no times can be told.")
    return tuple(lines)


def next_without_times(consult: Consult) -> tuple[str, ...]:
    """When to draw where no times were given."""
    usual = consult.profile.sampling.repeat_h
    if usual is None:
        return ("No times were given: draw as the local protocol says.",)
    often = show_number(usual[0]) + (f" to {show_number(usual[1])}" if usual[1] > usual[0] else "")
    return (f"No times were given: while it runs a level every {often} h, and after each change of rate.",)


def paste_lines(consult: Consult, found: Projection) -> tuple[str, ...]:
    """The same in few lines, to paste into a record."""
    lines = [f"Level now: {level_in_words(consult, found.now)}."]
    for path in found.paths[:3]:
        first = path.moments[0]
        level = level_band(first.level, told_up_to(consult))
        lines.append(f"{path.words[:1].upper()}{path.words[1:]}: in {show(first.hours, 'h')} {level} mg/L.")
    for h in found.holds:
        volumes = "".join(f" = {show(v, 'mL/h')} of {p.words}" for p, v in h.mL[:2])
        lines.append(
            f"Holds {show(consult.goal.aim_mg_per_L, 'mg/L')} {h.words}: {show(h.mg.median, 'mg/h')}{volumes}."
        )
    if found.holds:
        lines.append(f"To be agreed with {consult.profile.authority}.")
    return tuple(lines)


def _heads(consult: Consult) -> tuple[str, ...]:
    unit = _other_unit(consult)
    levels = ("Level (mg/L)", f"Level ({unit})") if unit else ("Level (mg/L)",)
    return ("From now (h)", "Time", *levels, "Below", "Within", "Above", "Above critical")


def sections(consult: Consult) -> list[Section]:
    """The annex: every step of every way to go on, and the rate for the aim by hand."""
    found = consult.projection
    if found is None:
        return []
    out = []
    for path in found.paths:
        rows = tuple(
            (
                show_number(m.hours),
                show_time(m.at),
                level_band(m.level, told_up_to(consult)),
                *((_converted_band(consult, m.level, _other_unit(consult)),) if _other_unit(consult) else ()),
                percent(m.below),
                percent(m.within),
                percent(m.above),
                percent(m.above_critical),
            )
            for m in path.moments
        )
        lines = [f"{show(path.rate_mg_per_day / 24, 'mg/h')} of active drug on average."]
        if path.rate_mg_per_day > 0:
            unit = " mg/L" if math.isfinite(path.steady.median) else ""
            settled = level_band(path.steady, told_up_to(consult)) + unit
            it = "Without dialysis it" if consult.profile.dialysis is not None else "It"
            lines.append(
                f"{it} would settle at {settled}; chance of no steady state {percent(path.no_steady_state)}."
                if math.isfinite(path.steady.median)
                else f"{it} has {NO_STEADY_STATE}: the level climbs for as long as it runs."
            )
        out.append(Section(path.words[:1].upper() + path.words[1:], tuple(lines), Table(_heads(consult), rows)))
    if consult.chosen is not None and found.holds:
        p, aim = consult.chosen.point, consult.goal.aim_mg_per_L
        vmax, km = show_number(p.vmax_mg_per_day / 24, 4), show_number(p.km_mg_per_L, 4)
        by_hand = float(vmax.replace(",", "")) * aim / (float(km.replace(",", "")) + aim)
        out.append(
            Section(
                "By hand",
                (
                    f"Rate for the aim {found.holds[0].words}: Vmax x aim / (Km + aim) = {vmax} x {show_number(aim)} / "
                    f"({km} + {show_number(aim)}) = {show(by_hand, 'mg/h', 4)} ({p.kind}; the median over all draws "
                    "stands on page one).",
                    *(("While dialysis runs add its clearance x aim.",) if consult.profile.dialysis else ()),
                ),
            )
        )
    return out


def _band_data(b: Band) -> dict[str, Any]:
    return {"median": _number(b.median), "low_5_percent": _number(b.low), "high_95_percent": _number(b.high)}


def _amount_data(a: Amount, unit: str, volume: str) -> dict[str, Any]:
    return {
        "for": a.words,
        f"active_{unit}": _band_data(a.mg),
        "products": [
            {"product": p.id, "strength": p.strength_words, "basis": p.strength_basis, volume: _number(v)}
            for p, v in a.mL
        ],
    }


def plateaus_data(consult: Consult) -> dict[str, Any] | None:
    """Where rates would settle, as plain data for JSON."""
    found = consult.plateaus
    if found is None:
        return None
    return {
        "settle": [
            {
                "words": words,
                "active_mg_per_h": _number(f.rate_mg_per_day / 24),
                "steady_level_mg_per_L": _band_data(f.steady),
                "chance_below": f.below,
                "chance_within": f.within,
                "chance_above": f.above,
                "chance_above_critical": f.above_critical,
                "chance_no_steady_state": f.no_steady_state,
            }
            for words, f in found.settle
        ],
        "rates_for_aim": [_amount_data(h, "mg_per_h", "mL_per_h") for h in found.holds],
    }


def data(consult: Consult) -> dict[str, Any] | None:
    """The projection as plain data for JSON: every unit in its key, no infinity."""
    found = consult.projection
    if found is None:
        return None
    band, amount = _band_data, _amount_data

    return {
        "time": show_time(found.moment),
        "level_now_mg_per_L": band(found.now),
        "started": found.started_from,
        "paths": [
            {
                "words": p.words,
                "present": p.present,
                "active_mg_per_h": _number(p.rate_mg_per_day / 24),
                "steady_level_without_dialysis_mg_per_L": band(p.steady),
                "chance_no_steady_state": p.no_steady_state,
                "climb_mg_per_L_per_h": None if p.climb_mg_per_L_per_h is None else _number(p.climb_mg_per_L_per_h),
                "leaves_target_in_h": p.leaves.hours if p.leaves is not None else None,
                "moments": [
                    {
                        "hours": m.hours,
                        "time": show_time(m.at),
                        "level_mg_per_L": band(m.level),
                        "chance_below": m.below,
                        "chance_within": m.within,
                        "chance_above": m.above,
                        "chance_above_critical": m.above_critical,
                    }
                    for m in p.moments
                ],
            }
            for p in found.paths
        ],
        "load": amount(found.load, "mg", "mL") if found.load is not None else None,
        "rates_for_aim": [amount(h, "mg_per_h", "mL_per_h") for h in found.holds],
        "next_level": {
            "time": show_time(found.next_level_at),
            "in_h": found.next_level_h,
            "because": list(found.next_why),
        },
    }


def _number(value: float) -> Any:
    return float(f"{value:.6g}") if math.isfinite(value) else {"no_steady_state": True}
