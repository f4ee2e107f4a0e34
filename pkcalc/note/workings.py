"""The workings: every equation with the numbers in it, worked from the numbers as printed.

A hand calculator must reach every result from what stands on the paper, so each result is calculated here from the
printed (rounded) numbers and printed in turn. Where the programme's own number differs it stands beside it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np

from pkcalc.case import Course
from pkcalc.consult import Consult, Shown
from pkcalc.dosing import Intake
from pkcalc.estimate.pair import METHOD as TWO_LEVELS
from pkcalc.forecast import Forecast
from pkcalc.note.front import spoken_for
from pkcalc.note.words import level_edge, same_lines, told_up_to
from pkcalc.units import show, show_number

Line = Literal["central", "every dose taken"]
REPRESENTATIVE = "With the representative pair"
FULLY_TAKEN = "With the representative pair, every dose taken"
#: Digits to which a representative pair may be printed so that it still gives the printed forecast.
_MOST_DIGITS = 9


@dataclass(frozen=True)
class Number:
    """A number as printed, and the value that the print stands for."""

    text: str
    unit: str
    value: float

    def __str__(self) -> str:
        return f"{self.text} {self.unit}".strip()


def printed(value: float, unit: str = "", digits: int = 4) -> Number:
    text = show_number(value, digits)
    return Number(text, unit, float(text.replace(",", "")))


@dataclass(frozen=True)
class Step:
    """One line of the workings: what, the equation in letters, with the numbers in it, and the result."""

    what: str
    equation: str
    numbers: str
    result: Number
    remark: str = ""

    @property
    def line(self) -> str:
        text = f"{self.what}: {self.equation} = {self.numbers} = {self.result}"
        return text + (f" ({self.remark})" if self.remark else "")


@dataclass(frozen=True)
class Workings:
    """Steps by heading, and what must be said about them. representative: the labelled (Vmax, Km) pair."""

    groups: tuple[tuple[str, tuple[Step, ...]], ...]
    representative: tuple[Number, Number] | None
    said: tuple[str, ...]

    @property
    def steps(self) -> tuple[Step, ...]:
        return tuple(s for _, steps in self.groups for s in steps)


def workings(consult: Consult) -> Workings:
    """Everything of the consult that a hand calculator can follow."""
    said: list[str] = []
    groups: list[tuple[str, tuple[Step, ...]]] = [
        ("Active drug", tuple(_rates(consult))),
        ("Levels at normal binding", tuple(_levels(consult))),
    ]
    pair: tuple[Number, Number] | None = None
    if not consult.stopped:
        groups += [
            ("Population at this patient", tuple(_population(consult))),
            ("Two levels", tuple(_two_levels(consult))),
        ]
        pair, about = representative(consult, "central")
        said.append(about)
        if pair is not None:
            groups.append((REPRESENTATIVE, tuple(_representative(consult, "central", *pair))))
        shown = spoken_for(consult)
        if shown is not None and not same_lines(shown):
            full, about = representative(consult, "every dose taken")
            said.append(about)
            if full is not None:
                groups.append((FULLY_TAKEN, tuple(_representative(consult, "every dose taken", *full))))
        groups.append(("One-level check, Km fixed", tuple(_one_level(consult))))
        groups.append(("Load", tuple(_loads(consult))))
    else:
        groups.append(("Two levels", tuple(_two_levels(consult))))
    return Workings(tuple((name, steps) for name, steps in groups if steps), pair, tuple(said))


def machine_only(consult: Consult) -> tuple[str, ...]:
    """Which numbers no hand calculator can reproduce, and why."""
    if consult.chosen is None or consult.stopped:
        return ()
    n = show_number(float(len(consult.chosen.weights)), 6)
    lines = [
        f"Only the machine can reproduce: every median, 90 % interval and chance (each comes from {n} "
        "draws of Vmax, Km "
        "and volume pushed through the equations above), the course of the level between doses, days with their "
        "intervals, and how much a next level narrows the forecast."
    ]
    if consult.chosen.method == "whole record":
        lines.append(
            "The estimate from the whole record itself too: it weighs the population and every level "
            "along the course of "
            "all recorded doses. The one-level and two-level workings are checks beside it, not its derivation."
        )
    if spoken_for(consult) is None:
        return tuple(lines)
    lines.append(
        "The median level is not the level at the median Vmax and the median Km; the representative "
        "pair above is labelled "
        "so because it reproduces the printed central forecast, not because it is this patient's Vmax and Km."
    )
    return tuple(lines)


def _rate(consult: Consult, mg_per_day: float, digits: int = 6) -> Number:
    """A rate of active drug in the drug's own time unit."""
    return printed(consult.profile.rate(mg_per_day), consult.profile.rate_unit, digits)


def _infusion(course: Course, consult: Consult) -> Step:
    """A running infusion, from mL or a rate per kg where it was typed so."""
    profile = consult.profile
    assert course.rate_mg_per_day is not None
    form, product = profile.forms[course.rate_form], profile.products.get(course.typed.product)
    salt, share = printed(form.salt_factor, "", 5), printed(form.bioavailability, "", 5)
    labelled, weight = profile.rate(course.rate_mg_per_day), consult.case.patient.weight_kg
    if course.typed.rate.endswith("/kg/h") and weight is not None:
        per_kg, kg = printed(labelled / weight, "mg/kg/h", 6), printed(weight, "kg", 6)
        what, numbers, value = "rate per kg x weight", f"{per_kg} x {kg}", per_kg.value * kg.value
    elif product is None or not course.typed.rate.endswith("mL/h"):
        given = printed(labelled, f"{form.amount_unit}/{profile.time_unit}", 6)
        what, numbers, value = "rate", f"{given}", given.value
    else:
        per_mL = printed(product.mg_per_unit, f"{form.amount_unit}/mL", 6)
        given = printed(labelled / product.mg_per_unit, f"mL/{profile.time_unit}", 6)
        what, numbers, value = "volume rate x strength", f"{given} x {per_mL}", given.value * per_mL.value
    return Step(
        f"Dose line {course.index + 1}",
        f"R = {what} x salt factor x share reaching the body",
        f"{numbers} x {salt} x {share}",
        printed(value * salt.value * share.value, profile.rate_unit, 6),
    )


def _rates(consult: Consult) -> list[Step]:
    steps = []
    for course in consult.case.courses:
        if course.regimen is not None:
            steps.append(
                _rate_step(f"Dose line {course.index + 1}", course.regimen.intakes, course.regimen.cycle_h, consult)
            )
        elif course.rate_mg_per_day is not None:
            steps.append(_infusion(course, consult))
        elif course.single is not None:
            form = consult.profile.forms[course.single.form]
            amount = printed(course.single.labelled_mg, form.amount_unit, 6)
            salt, share = printed(form.salt_factor, "", 5), printed(form.bioavailability, "", 5)
            steps.append(
                Step(
                    f"Dose line {course.index + 1}",
                    "active amount = amount x salt factor x share reaching the body",
                    f"{amount} x {salt} x {share}",
                    printed(amount.value * salt.value * share.value, "mg", 6),
                )
            )
    shown = spoken_for(consult)
    if shown is not None and not shown.present:
        steps.append(_rate_step("Regimen in question", shown.regimen.intakes, shown.regimen.cycle_h, consult))
    return steps


def _rate_step(what: str, intakes: tuple[Intake, ...], cycle_h: float, consult: Consult) -> Step:
    parts, total = [], 0.0
    for x in intakes:
        form = consult.profile.forms[x.form]
        amount = printed(x.labelled_mg, form.amount_unit, 6)
        salt, share = printed(form.salt_factor, "", 5), printed(form.bioavailability, "", 5)
        parts.append(f"{amount} x {salt} x {share}")
        total += amount.value * salt.value * share.value
    by_the_hour = consult.profile.time_unit == "h"
    per = 1.0 if by_the_hour else 24.0
    unit = "h" if by_the_hour else "day" if cycle_h <= 24.0 else "days"
    time = printed(cycle_h / per, unit, 6)
    amounts = " + ".join(parts)
    if len(parts) > 1:
        amounts = f"({amounts})"
    return Step(
        what,
        f"R = amounts x salt factor x share reaching the body / {'hours' if by_the_hour else 'days'}",
        f"{amounts} / {time}",
        printed(total / time.value, consult.profile.rate_unit, 6),
    )


def _levels(consult: Consult) -> list[Step]:
    """Each level from the laboratory's scale to normal binding, where something was done to it."""
    binding = consult.profile.binding
    steps: list[Step] = []
    if binding is None:
        return steps
    for o in consult.observations:
        level = o.level
        if not o.readable or level.kind == "normalised" or o.working_mg_per_L == level.reported_mg_per_L:
            continue
        reported = printed(level.reported_mg_per_L, "mg/L", 6)
        if level.kind == "free":
            share = printed(binding.free_fraction, "", 5)
            steps.append(
                Step(
                    o.name,
                    "C = free / normal free fraction",
                    f"{reported} / {share}",
                    printed(reported.value / share.value, "mg/L", 6),
                )
            )
            continue
        albumin = level.albumin or consult.case.albumin
        if albumin is None or o.censored:
            continue
        k = printed(consult.site.albumin_coefficient(binding), "", 5)
        a = printed(albumin.g_per_L / 10, "g/dL", 5)
        c = printed(binding.constant, "", 5)
        steps.append(
            Step(
                o.name,
                f"C = total / ({k} x albumin + {c})",
                f"{reported} / ({k} x {a} + {c})",
                printed(reported.value / (k.value * a.value + c.value), "mg/L", 6),
            )
        )
    return steps


def _population(consult: Consult) -> list[Step]:
    """The population's median Vmax and volume at this weight, where weight alone makes them."""
    prior, weight = consult.prior, consult.case.patient.weight_kg
    if prior is None or weight is None:
        return []
    population = consult.profile.populations[prior.population]
    w, ref = printed(weight, "kg", 6), printed(population.reference_weight_kg, "kg", 6)
    power = printed(
        population.exponent_below if weight < population.reference_weight_kg else population.exponent_above, "", 5
    )
    base = _rate(consult, population.vmax_at_reference_mg_per_day)
    steps = []
    vmax = printed(base.value * (w.value / ref.value) ** power.value, consult.profile.rate_unit, 4)
    if abs(vmax.value / consult.profile.rate(prior.vmax_mg_per_day) - 1) < 1e-3:
        steps.append(
            Step(
                f"Vmax of {prior.words}",
                "Vmax = Vmax at reference weight x (weight / reference weight)^exponent",
                f"{base} x ({w} / {ref})^{power}",
                vmax,
            )
        )
    per_kg = printed(population.volume_L_per_kg, "L/kg", 5)
    volume = printed(per_kg.value * w.value, "L", 4)
    if abs(volume.value / prior.volume_L - 1) < 1e-3:
        steps.append(Step("Volume", "V = volume per kg x weight", f"{per_kg} x {w}", volume))
    return steps


def _two_levels(consult: Consult) -> list[Step]:
    estimate = consult.estimates.get(TWO_LEVELS)
    if estimate is None or len(consult.pairs) != 2:
        return []
    by_level = {o.level.index: o for o in consult.observations}
    low, high = sorted(consult.pairs, key=lambda p: p.rate_mg_per_day)
    steps = []
    rates, levels, ratios = [], [], []
    for p in (low, high):
        r, c = _rate(consult, p.rate_mg_per_day), printed(p.level_mg_per_L, "mg/L", 6)
        ratio = printed(r.value / c.value, f"L/{consult.profile.time_unit}", 7)
        rates.append(r)
        levels.append(c)
        ratios.append(ratio)
        steps.append(Step(by_level[p.level].name, "R/C", f"{r} / {c}", ratio))
    km = printed((rates[1].value - rates[0].value) / (ratios[0].value - ratios[1].value), "mg/L", 5)
    steps.append(
        Step(
            "Km",
            "Km = (R2 - R1) / (R1/C1 - R2/C2)",
            f"({rates[1]} - {rates[0]}) / ({ratios[0]} - {ratios[1]})",
            km,
        )
    )
    vmax = printed(rates[0].value + km.value * ratios[0].value, consult.profile.rate_unit, 5)
    steps.append(Step("Vmax", "Vmax = R1 + Km x R1/C1", f"{rates[0]} + {km} x {ratios[0]}", vmax))
    sd = printed(low.log_sd, "", 4)
    same = abs(low.log_sd - high.log_sd) < 1e-12
    if same:
        way = (math.log(levels[1].value / levels[0].value) - math.log(rates[1].value / rates[0].value)) / (
            sd.value * math.sqrt(2)
        )
        z = printed(way, "", 3)
        steps.append(
            Step(
                "How far the pair is from impossible, in spreads",
                "z = (ln(C2/C1) - ln(R2/R1)) / (s x sqrt(2))",
                f"(ln({levels[1]} / {levels[0]}) - ln({rates[1]} / {rates[0]})) / ({sd} x sqrt(2))",
                z,
                "the chance of a negative Km is the normal probability below -z",
            )
        )
    return steps


def _line(shown: Shown, line: Line) -> Forecast:
    return shown.forecast if line == "central" else shown.taken


def representative(consult: Consult, line: Line) -> tuple[tuple[Number, Number] | None, str]:
    """One (Vmax, Km) pair, as printed, that gives the printed median levels of the regimens in question on one line.

    With two regimens (the present and the one in question) it solves both medians; with one it holds Km at its median.
    """
    estimate, shown = consult.chosen, spoken_for(consult)
    if estimate is None or shown is None:
        return None, ""
    target = _line(shown, line)
    if not np.isfinite(target.steady.median):
        return None, (
            f"No representative pair ({line}): the median forecast of the regimen in question is no "
            "steady state, because "
            f"its R = {consult.profile.show_rate(target.rate_mg_per_day, 5)} is at or above Vmax in at least "
            "half of the forecasts."
        )
    own = consult.profile.rate
    goals = [(own(target.rate_mg_per_day), target.steady.median)]
    present = consult.plan.present if consult.plan is not None else None
    both = False
    if present is not None and np.isfinite(_line(present, line).steady.median) and not shown.present:
        r, c = own(present.rate_mg_per_day), _line(present, line).steady.median
        (r1, c1), (r2, c2) = sorted([(r, c), goals[0]])
        below = r1 / c1 - r2 / c2
        if r2 > r1 and below > 0:
            km = (r2 - r1) / below
            vmax = r1 + km * r1 / c1
            goals.append((r, c))
            both = True
    if not both:
        km = estimate.summary["km_mg_per_L"].median
        vmax = goals[0][0] * (km + goals[0][1]) / goals[0][1]
    for digits in range(4, _MOST_DIGITS + 1):
        v, k = printed(vmax, consult.profile.rate_unit, digits), printed(km, "mg/L", digits)
        if all(v.value > r and show_number(k.value * r / (v.value - r)) == show_number(c) for r, c in goals):
            words = (
                "medians of the present regimen and of the one in question"
                if both
                else "median of the regimen in question, with Km at its median"
            )
            return (v, k), (
                f"Representative pair, {line}: Vmax {v} of active drug, Km {k}. It reproduces the printed {words}."
            )
    return None, f"No representative pair ({line}) reproduces the forecast to the digits printed."


def _representative(consult: Consult, line: Line, vmax: Number, km: Number) -> list[Step]:
    steps: list[Step] = []
    shown, goal = spoken_for(consult), consult.goal
    assert shown is not None
    regimens: list[tuple[str, Shown]] = []
    present = consult.plan.present if consult.plan is not None else None
    if present is not None and present is not shown and not shown.present:
        regimens.append(("Present regimen", present))
    regimens.append(("Present regimen" if shown.present else "Regimen in question", shown))
    for name, s in regimens:
        r = _rate(consult, s.rate_mg_per_day)
        if r.value >= vmax.value:
            continue
        level = printed(km.value * r.value / (vmax.value - r.value), "mg/L", 3)
        f = _line(s, line)
        printed_as = level_edge(f.steady.median, told_up_to(consult))
        unit = " mg/L" if np.isfinite(f.steady.median) else ""
        steps.append(
            Step(
                name,
                "Css = Km x R / (Vmax - R)",
                f"{km} x {r} / ({vmax} - {r})",
                level,
                f"median printed: {printed_as}{unit}",
            )
        )
        if consult.scale.total_factor != 1.0:
            factor = printed(consult.scale.total_factor, "", 4)
            steps.append(
                Step(
                    f"{name}, as reported",
                    "total = Css x factor of binding",
                    f"{level} x {factor}",
                    printed(level.value * factor.value, "mg/L", 3),
                )
            )
        steps.append(
            Step(
                f"{name}, 1 % more dose",
                "% more level = Vmax / (Vmax - R)",
                f"{vmax} / ({vmax} - {r})",
                printed(vmax.value / (vmax.value - r.value), "%", 2),
            )
        )
    if line == "central":
        steps += _settling(consult, shown, vmax, km)
    if line == "central" and not same_lines(shown):
        return steps  # a dose rate is worked out only for doses that are all taken
    aim = printed(goal.aim_mg_per_L, "mg/L", 6)
    rate = printed(vmax.value * aim.value / (km.value + aim.value), consult.profile.rate_unit, 4)
    steps.append(Step("Dose rate for the aim", "R = Vmax x C / (Km + C)", f"{vmax} x {aim} / ({km} + {aim})", rate))
    for form_id in dict.fromkeys(x.form for x in shown.regimen.intakes):
        form = consult.profile.forms[form_id]
        salt, share = printed(form.salt_factor, "", 5), printed(form.bioavailability, "", 5)
        steps.append(
            Step(
                f"The same as {form.words}",
                "product = R / (salt factor x share reaching the body)",
                f"{rate} / ({salt} x {share})",
                printed(rate.value / (salt.value * share.value), f"{form.amount_unit}/day", 3),
            )
        )
    return steps


def _settling(consult: Consult, shown: Shown, vmax: Number, km: Number) -> list[Step]:
    """Days to 90 % of the way at constant rate, from today's median level, with the representative pair."""
    estimate, plan = consult.chosen, consult.plan
    if estimate is None or "volume_L" not in estimate.summary or plan is None:
        return []
    r = _rate(consult, shown.forecast.rate_mg_per_day)
    now = printed(plan.today.level.median if plan.today.level is not None else 0.0, "mg/L", 4)
    volume = printed(estimate.summary["volume_L"].median, "L", 4)
    gap = vmax.value - r.value
    if gap <= 0:
        return []
    css = printed(km.value * r.value / gap, "mg/L", 5)
    if abs(css.value - now.value) < 0.02 * css.value:
        return []
    days = volume.value / gap * ((km.value + css.value) * math.log(10) - 0.9 * (css.value - now.value))
    if days <= 0:
        return []
    return [
        Step("Css to five digits", "Css = Km x R / (Vmax - R)", f"{km} x {r} / ({vmax} - {r})", css),
        Step(
            "90 % of the way from today's level C0",
            "t = V / (Vmax - R) x ((Km + Css) x ln(10) - 0.9 x (Css - C0))",
            f"{volume} / ({vmax} - {r}) x (({km} + {css}) x ln(10) - 0.9 x ({css} - {now}))",
            printed(days, "days", 3),
            f"median of all draws: {_days(shown)}",
        ),
    ]


def _days(shown: Shown) -> str:
    band = shown.forecast.settle_days
    if band is None or not np.isfinite(band.median):
        return "none"
    return show(band.median, "days", 2)


def _one_level(consult: Consult) -> list[Step]:
    """The latest steady level alone, Km held at the population's median: a check of size, not an estimate."""
    shown = spoken_for(consult)
    settled = {s.level for s in consult.settling if s.settled is not False}
    pairs = [p for p in consult.pairs if p.level in settled]
    if not pairs or shown is None or consult.chosen is None:
        return []
    by_level = {o.level.index: o for o in consult.observations}
    last = max(
        pairs,
        key=lambda p: (d.timestamp() if (d := by_level[p.level].level.drawn) is not None else 0.0, p.level),
    )
    km_value = consult.prior.km_mg_per_L if consult.prior is not None else consult.chosen.summary["km_mg_per_L"].median
    source = "the population's median" if consult.prior is not None else "the estimate's median"
    km = printed(km_value, "mg/L", 4)
    r, c = _rate(consult, last.rate_mg_per_day), printed(last.level_mg_per_L, "mg/L", 6)
    vmax = printed(r.value * (km.value + c.value) / c.value, consult.profile.rate_unit, 5)
    steps = [
        Step(
            f"Vmax from {by_level[last.level].name}, Km held at {source}",
            "Vmax = R x (Km + C) / C",
            f"{r} x ({km} + {c}) / {c}",
            vmax,
        )
    ]
    wanted = _rate(consult, shown.forecast.rate_mg_per_day)
    if wanted.value < vmax.value and not shown.present:
        f = shown.forecast.steady
        inside = f.low <= km.value * wanted.value / (vmax.value - wanted.value) <= f.high
        steps.append(
            Step(
                "Regimen in question",
                "Css = Km x R / (Vmax - R)",
                f"{km} x {wanted} / ({vmax} - {wanted})",
                printed(km.value * wanted.value / (vmax.value - wanted.value), "mg/L", 3),
                f"{'inside' if inside else 'OUTSIDE'} the 90 % interval of the central forecast",
            )
        )
    return steps


def _loads(consult: Consult) -> list[Step]:
    plan = consult.plan
    if plan is None:
        return []
    steps = []
    for load in plan.loads:
        form = consult.profile.forms[load.form]
        volume = printed(load.volume_L.median, "L", 6)
        aim = printed(load.aim_mg_per_L, "mg/L", 4)
        now = printed(load.from_mg_per_L, "mg/L", 4)
        salt, share = printed(form.salt_factor, "", 5), printed(form.bioavailability, "", 5)
        steps.append(
            Step(
                f"Amount of {form.words} by the formula",
                "amount = V x (aim - level now) / (salt factor x share reaching the body)",
                f"{volume} x ({aim} - {now}) / ({salt} x {share})",
                printed(volume.value * (aim.value - now.value) / (salt.value * share.value), form.amount_unit, 4),
                f"as ordered after rounding and limits: {show(load.amount_mg, form.amount_unit, 6)}",
            )
        )
    return steps
