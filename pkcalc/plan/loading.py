"""Loads and top-ups: the amount from the present level to an aim, as it is ordered, and what it would do."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import timedelta
from itertools import product as every_pair

import numpy as np

from pkcalc import flow, formulas
from pkcalc.case import Case
from pkcalc.clock import show_time
from pkcalc.dosing import Intake, absorption_of, active_mg
from pkcalc.drugs.profile import Form, IvLine, OralLoad, Product, Profile, RateCap
from pkcalc.estimate.result import Band, Estimate
from pkcalc.forecast import TIME_DRAWS, Goal, bands, draws_of, fewer_draws
from pkcalc.plan.limits import is_child
from pkcalc.plan.present import Floats, Today, present_course, published_peaks
from pkcalc.plan.shelf import MOST_ML_AT_ONCE
from pkcalc.record import Dose, Record
from pkcalc.site import Site
from pkcalc.units import percent, show, show_number

#: From this age an infusion runs at the slower rate (as the drug file's group "elderly or heart disease").
ELDERLY_YEARS = 65.0
#: Whole vials are taken where that changes the amount by no more than this; else a measured volume.
VIAL_ROUNDING = 0.05
#: A route by which maintenance may be given, and no load.
INTO_A_MUSCLE = "intramuscular"
#: Days after a load for which the level with the maintenance dose is named.
FOLLOWED_DAYS = (1.0, 3.0, 7.0, 14.0)
#: Which answers mean that an exclusion of the drug file holds.
_EXCLUSIONS: Mapping[str, tuple[str, ...]] = {
    "renal disease": ("renal_failure", "renal_reduced"),
    "hepatic disease": ("hepatic_failure",),
}


@dataclass(frozen=True)
class Load:
    """One load or top-up.

    from_mg_per_L: level the formula begins at. wanted_mg: labelled amount by the formula; amount_mg: as ordered, after
    rounding, ceilings and splitting. parts: (hours from the first, labelled mg). minutes: shortest infusion time, None
    by mouth. rise: what the ordered amount adds; after: level at the end (by mouth: when drawn); at_draw: level
    draw_after_h hours after the end or, by mouth, after the first part; followed: days from the load and the level with
    the maintenance dose. above_high, above_critical: chances for `after`. order: the complete line. marks: what must
    stand in any heading above the order.
    """

    form: str
    product: str
    route: str
    from_mg_per_L: float
    aim_mg_per_L: float
    wanted_mg: float
    amount_mg: float
    active_mg: float
    parts: tuple[tuple[float, float], ...]
    minutes: float | None
    volume_L: Band
    rise: Band
    after: Band
    at_draw: Band
    draw_after_h: float
    followed: tuple[tuple[float, Band], ...]
    maintenance: str
    above_high: float
    above_critical: float
    order: tuple[str, ...]
    notes: tuple[str, ...]
    offered: bool
    why_not: tuple[str, ...]
    volume_words: str = ""

    @property
    def marks(self) -> tuple[str, ...]:
        return () if self.offered else ("NOT OFFERED",)

    @property
    def unit_words(self) -> str:
        return f"{show_number(self.amount_mg, 6)}"


@dataclass(frozen=True)
class Ward:
    """What every load of one plan is worked out from. maintenance: active mg/day that follows, with its words.
    volume_words: from which weight the volume comes, where that is not the actual one."""

    case: Case
    profile: Profile
    site: Site
    estimate: Estimate
    goal: Goal
    now: Today
    products: tuple[str, ...]
    maintenance_mg_per_day: float
    maintenance_words: str
    volume_words: str = ""


def loads(ward: Ward) -> tuple[tuple[Load, ...], tuple[str, ...]]:
    """The load for the form asked for; none where none is asked for: maintenance simply goes on.

    Returns it with what must be said where there is none.
    """
    profile, case = ward.profile, ward.case
    asked = case.file.plan.load
    if asked is None:
        return (), ()
    if profile.loading is None:
        return (), (f"No loads are described for {profile.name}.",)
    if ward.estimate.volume_L is None:
        return (), ("No load can be worked out without a weight: there is no volume.",)
    form = profile.forms[asked.form]
    muscle = asked.route == INTO_A_MUSCLE or form.route == INTO_A_MUSCLE
    if asked.route and asked.route not in form.routes and not muscle:
        return (), (
            f"No load of {form.words} by the {asked.route} route: this form is given by the {' or '.join(form.routes)} "
            "route. Ask for a form that is given so, or leave the route out.",
        )
    if muscle:
        return (), (
            f"No load of {form.salt} into a muscle: how much is given so, in how many places and how much in each, is "
            "not in the drug file, because no source of it was read. Ask for a load into a vein or by mouth; where "
            "neither can "
            f"be, follow the local protocol, and draw a level {show(profile.sampling.after_im_h, 'h')} after the dose, "
            "not earlier.",
        )
    mine = [profile.products[p] for p in ward.products if profile.products[p].form == asked.form]
    if not mine:
        return (), (f"No load of {form.words}: there is no such product on the shelf in use.",)
    level = start_level(ward)
    aim = case.load_aim_mg_per_L or ward.goal.aim_mg_per_L
    if level >= aim:
        return (), (f"No load: the level today ({show(level, 'mg/L')}) is not below the aim of {show(aim, 'mg/L')}.",)
    usual = usual_dose(ward)
    if usual is not None and wanted_active(ward, aim) < usual * (1 - 1e-9):
        return (), (
            f"No load: {show(wanted_active(ward, aim), 'mg')} of active drug would do, which is less than one usual "
            f"dose ({show(usual, 'mg', 4)} of active drug). Maintenance alone: {ward.maintenance_words}.",
        )
    if asked.form in profile.loading.iv_lines:
        return (into_vein(ward, mine[0], aim),), ()
    oral = profile.loading.oral
    if oral is None or form.route != "oral":
        return (), (f"No load of {form.words}: no load by this route is described for {profile.name}.",)
    if _load_unit(mine, oral) is None:
        parts = ", ".join(show_number(mg) for mg in oral.parts_mg)
        return (), (
            f"No load of {form.words}: none on the shelf in use has a size that divides the parts of the published "
            f"load by mouth ({parts} {form.amount_unit}), and none is a liquid of one strength; ask for another form, "
            "or for one into a vein.",
        )
    made = by_mouth(ward, mine, aim)
    if made is None:
        return (), (f"No load of {form.words}: the amount by the formula is less than half of one unit.",)
    return (made,), ()


def usual_dose(ward: Ward) -> float | None:
    """Active drug of the largest single dose given now [mg]; None where nothing repeated is given."""
    course = present_course(ward.case)
    if course is None or course.regimen is None:
        return None
    return max(active_mg(x, ward.profile) for x in course.regimen.intakes)


#: A level at most so old stands against the course of the record: the higher of the two is topped up.
FRESH = timedelta(hours=24)


def start_level(ward: Ward) -> float:
    """The level a load begins at [mg/L]: the median by the record, or a level drawn within a day where that is higher.

    A load worked out from too low a level ends too high, so the higher one counts. 0 without any level.
    """
    now = ward.now
    course = now.level.median if now.level is not None else 0.0
    if now.measured_mg_per_L is None or now.measured_at is None or now.moment is None:
        return course
    fresh = timedelta(0) <= now.moment - now.measured_at <= FRESH
    return max(course, now.measured_mg_per_L) if fresh else course


def start_draws(ward: Ward) -> Floats:
    """The draws of today's level, moved up as a whole where the level a load begins at is above their median."""
    draws = draws_of(ward.now.start_mg_per_L, fewer_draws(ward.estimate, TIME_DRAWS))
    level = ward.now.level
    if level is None or level.median <= 0:
        return draws
    return np.asarray(draws * (start_level(ward) / level.median))


def loads_before(ward: Ward) -> str:
    """Why a load or dose into a vein of the last 72 h forbids another one; "" where it does not.

    It does not where the dose stands in the record and a level was drawn long enough after it.
    """
    case, sampling, now = ward.case, ward.profile.sampling, ward.now
    if case.answer("recent_load") != "yes":
        return ""
    refusal = "A load or a dose into a vein was given in the last 72 h: measure before giving more."
    singles = [c.start for c in case.courses if c.single is not None and c.counts_as_given and c.start is not None]
    recent = [s for s in singles if now.moment is not None and now.moment - s <= timedelta(hours=72)]
    if not recent or now.measured_at is None:
        return refusal
    wait = timedelta(hours=sampling.after_iv_h or 0.0)
    return "" if now.measured_at >= max(recent) + wait else refusal


def wanted_active(ward: Ward, aim_mg_per_L: float) -> float:
    """Active drug that lifts the level a load begins at to the aim: median V x (aim - level) [mg]."""
    return float(
        formulas.top_up_amount(
            present_mg_per_L=start_level(ward),
            aim_mg_per_L=aim_mg_per_L,
            volume_L=ward.estimate.summary["volume_L"].median,
            salt_factor=1.0,
        )
    )


def into_vein(ward: Ward, product: Product, aim_mg_per_L: float) -> Load:
    """A load into a vein: ceilings, whole vials, infusion time at the rate cap, the complete order line."""
    profile, case = ward.profile, ward.case
    form = profile.forms[product.form]
    assert profile.loading is not None
    line = profile.loading.iv_lines[product.form]
    wanted = float(
        formulas.product_amount(
            active_mg=wanted_active(ward, aim_mg_per_L),
            salt_factor=form.salt_factor,
            bioavailability=form.bioavailability,
        )
    )
    most, notes = ceiling(ward, wanted, form.amount_unit)
    amount = round_to_vials(min(wanted, most), product, most)
    caps, cap_notes = rate_caps(case, profile, ward.site, product.form)
    notes += cap_notes
    minutes = infusion_minutes(amount, caps, case.patient.weight_kg) if caps else None
    active = active_mg(Intake(form.id, 0.0, amount), profile)
    few = fewer_draws(ward.estimate, TIME_DRAWS)
    start = start_draws(ward)
    days = (minutes or 0.0) / 1440
    volume = few.estimate.volume_L
    assert volume is not None
    end = _after(few.estimate, days, start, active / days) if days else start + active / volume
    draw_h = profile.sampling.after_iv_h or 0.0
    drawn = _after(few.estimate, draw_h / 24, end, ward.maintenance_mg_per_day)
    why = []
    if case.answer("heart_block") == "yes":
        why.append(
            "Heart block, bradycardia or serious heart disease is answered yes. Contraindicated in "
            + ", ".join(line.contraindications)
            + ": these must be excluded first."
        )
    return _load(
        ward,
        product=product,
        route="into a vein",
        aim=aim_mg_per_L,
        wanted=wanted,
        amount=amount,
        parts=((0.0, amount),),
        minutes=minutes,
        start=start,
        end=end,
        drawn=drawn,
        draw_after_h=draw_h,
        order=(
            *iv_order(product, amount, minutes, slowest(caps, case.patient.weight_kg), line, profile),
            *((_goes_on(ward),) if usual_dose(ward) is not None else ()),
        ),
        notes=notes,
        why=why,
    )


def by_mouth(ward: Ward, products: Sequence[Product], aim_mg_per_L: float) -> Load | None:
    """A load by mouth in parts hours apart: largest part and total as published, its exclusions, level a day later."""
    profile, case = ward.profile, ward.case
    assert profile.loading is not None
    oral = profile.loading.oral
    assert oral is not None
    unit = _load_unit(products, oral)
    if unit is None:
        return None
    form = profile.forms[unit.form]
    wanted = float(
        formulas.product_amount(
            active_mg=wanted_active(ward, aim_mg_per_L),
            salt_factor=form.salt_factor,
            bioavailability=form.bioavailability,
        )
    )
    most, notes = ceiling(ward, wanted, form.amount_unit)
    published = profile.forms[oral.form]
    same_active = published.active_fraction / form.active_fraction
    total = oral.total_mg * same_active
    if min(wanted, most) > total:
        notes.append(f"Cut to {show(total, form.amount_unit, 6)}, the largest load by mouth.")
    if form.active_fraction != published.active_fraction:
        notes.append(
            f"The published load is of {published.words}: at most {show(oral.total_mg, published.amount_unit, 6)}, "
            f"{show(oral.largest_part_mg, published.amount_unit, 6)} at a time. The same active drug is "
            f"{show(total, form.amount_unit, 4)} of {form.words}, "
            f"{show(oral.largest_part_mg * same_active, form.amount_unit, 4)} at a time, and is not exceeded."
        )
    at_once = oral.largest_part_mg * same_active
    if unit.unit == "mL":
        at_once = min(at_once, MOST_ML_AT_ONCE * unit.mg_per_unit)
    parts = split(
        min(wanted, most), unit.mg_per_unit * _step(unit), total_mg=total, at_once_mg=at_once, apart_h=oral.hours_apart
    )
    if not parts:
        return None
    amount = sum(mg for _, mg in parts)
    few = fewer_draws(ward.estimate, TIME_DRAWS)
    start = start_draws(ward)
    draw_h, said = oral_draw(profile, oral, parts)
    doses = tuple(Dose(h / 24, mg * form.active_fraction, absorption=absorption_of(form)) for h, mg in parts)
    volume = few.estimate.volume_L
    assert volume is not None
    record = Record(doses=(*ward.now.still_absorbed, *doses), start_day=0.0, start_mg=0.0)
    end = flow.levels(
        record,
        (draw_h / 24,),
        few.estimate.vmax_mg_per_day,
        few.estimate.km_mg_per_L,
        volume,
        start_mg_per_L=start,
    )[:, 0]
    why: list[str] = []
    for excluded in oral.excluded:
        answers = {q: case.answer(q) for q in _EXCLUSIONS.get(excluded, ())}
        if "yes" in answers.values():
            why.append(f"No load by mouth in {excluded}.")
        elif any(a != "no" for a in answers.values()) or not answers:
            asked = " ".join(profile.questions[q].words for q, a in answers.items() if a != "no")
            why.append(f"No load by mouth before {excluded} is excluded. {asked}".strip())
    if case.answer("tube_feed") == "yes":
        why.append(
            "Tube fed: nobody can tell how much of a load given down the tube would be absorbed. Load into a vein, or "
            "ask the prescriber for another way."
        )
    pieces = ", then ".join(
        _piece(mg, unit, form) + (f" after {show_number(h)} h" if h else "" if len(parts) == 1 else " at once")
        for h, mg in parts
    )
    liquid = (f"{_sentence(unit.words)[:-1]}: {unit.strength_words}.",) if unit.unit == "mL" else ()
    order = (
        f"{show(amount, form.amount_unit, 6)} {form.words} by mouth"
        + (f" in {len(parts)} parts" if len(parts) > 1 else "")
        + f": {pieces}.",
        *liquid,
        oral.setting,
        _goes_on(ward) if usual_dose(ward) is not None else _maintenance_begins(ward, oral),
    )
    notes.append(said)
    return _load(
        ward,
        product=unit,
        route="by mouth",
        aim=aim_mg_per_L,
        wanted=wanted,
        amount=amount,
        parts=parts,
        minutes=None,
        start=start,
        end=end,
        drawn=end,
        draw_after_h=draw_h,
        order=order,
        notes=notes,
        why=why,
    )


def oral_draw(profile: Profile, oral: OralLoad, parts: Sequence[tuple[float, float]]) -> tuple[float, str]:
    """Hours from the first part of a load by mouth to its level, and why then.

    The usual wait, and not before the published peak that the whole amount would have if it were taken at once with
    the last part: so late can the parts together peak.
    """
    wait = profile.sampling.after_oral_load_h or oral.maintenance_after_h
    amount, last = sum(mg for _, mg in parts), parts[-1][0]
    published = profile.large_oral
    peak = published.peak_h(amount) if published is not None else None
    if published is None or peak is None:
        return wait, f"The level is drawn {show(wait, 'h')} after the first part."
    draw = max(wait, float(math.ceil(last + peak)))
    late = f", counted from the last part {show(last + peak, 'h')} after the first" if last else ""
    return draw, (
        f"{published_peaks(published)} At once, {show(amount, 'mg', 4)} would peak after about {show(peak, 'h')}{late}"
        f": the level is drawn {show(draw, 'h')} after the first part, and one drawn earlier is not the highest."
    )


def _load(
    ward: Ward,
    *,
    product: Product,
    route: str,
    aim: float,
    wanted: float,
    amount: float,
    parts: tuple[tuple[float, float], ...],
    minutes: float | None,
    start: Floats,
    end: Floats,
    drawn: Floats,
    draw_after_h: float,
    order: tuple[str, ...],
    notes: list[str],
    why: list[str],
) -> Load:
    profile, goal = ward.profile, ward.goal
    form = profile.forms[product.form]
    active = amount * form.active_fraction
    few = fewer_draws(ward.estimate, TIME_DRAWS).estimate
    assert few.volume_L is not None
    weights = few.weights
    critical = float(np.round((end > goal.critical_mg_per_L) @ weights, 12))
    if critical > ward.site.stop_chance:
        why.append(
            f"The chance of a level above {show(goal.critical_mg_per_L, 'mg/L')} after it is {percent(critical)}, "
            f"above the limit of {percent(ward.site.stop_chance)}."
        )
    answer = ward.case.answer("recent_load")
    if refusal := loads_before(ward):
        why.append(refusal)
    elif answer == "yes":
        notes.append("The load of the last 72 h stands in the record, and a level was drawn long enough after it.")
    elif answer != "no":
        notes.append(
            "Not stated whether a load or a dose into a vein was given in the last 72 h (emergency department, "
            "ambulance, other hospital): ask first."
        )
    course = ward.now.level
    if course is not None and start_level(ward) > course.median:
        notes.append(
            f"Worked out from the measured {show(start_level(ward), 'mg/L')}, which is above the course of the record "
            f"({show(course.median, 'mg/L')})."
        )
    if ward.volume_words:
        notes.append(ward.volume_words)
    follow_from = np.asarray(drawn, dtype=np.float64)
    days = [d for d in FOLLOWED_DAYS if d * 24 > draw_after_h]
    followed = [
        bands(_after(few, d - draw_after_h / 24, follow_from, ward.maintenance_mg_per_day)[None, :], weights)[0]
        for d in days
    ]
    moment = ward.case.load_at or ward.now.moment
    when = (
        f"{show_number(draw_after_h)} h after the end"
        if minutes is not None
        else (f"{show_number(draw_after_h)} h after the first part")
    )
    draw = f"Draw a level {when}, not earlier"
    if moment is not None:
        after_min = (minutes or 0.0) + draw_after_h * 60
        draw += f" (begun at {show_time(moment)}: from {show_time(moment + timedelta(minutes=after_min))})"
    return Load(
        form=product.form,
        product=product.id,
        route=route,
        from_mg_per_L=start_level(ward),
        aim_mg_per_L=aim,
        wanted_mg=wanted,
        amount_mg=amount,
        active_mg=active,
        parts=parts,
        minutes=minutes,
        volume_L=ward.estimate.summary["volume_L"],
        rise=bands((active / few.volume_L)[None, :], weights)[0],
        after=bands(end[None, :], weights)[0],
        at_draw=bands(drawn[None, :], weights)[0],
        draw_after_h=draw_after_h,
        followed=tuple(zip(days, followed, strict=True)),
        maintenance=ward.maintenance_words,
        above_high=float(np.round((end > goal.high_mg_per_L) @ weights, 12)),
        above_critical=critical,
        order=(*order, draw + "."),
        notes=tuple(notes),
        offered=not why,
        why_not=tuple(why),
        volume_words=ward.volume_words,
    )


def given_doses(load: Load, profile: Profile, from_day: float) -> tuple[Dose, ...]:
    """The doses of a load as active drug, from a day on."""
    form = profile.forms[load.form]
    taken = load.minutes is None
    return tuple(
        Dose(
            from_day + h / 24,
            mg * form.active_fraction,
            duration_day=(load.minutes or 0.0) / 1440,
            absorption=absorption_of(form) if taken else None,
        )
        for h, mg in load.parts
    )


def _after(estimate: Estimate, days: float, start: Floats, rate_mg_per_day: float) -> Floats:
    assert estimate.volume_L is not None
    return np.asarray(
        formulas.level_after(
            time_day=days,
            start_mg_per_L=start,
            dose_rate_mg_per_day=rate_mg_per_day,
            vmax_mg_per_day=estimate.vmax_mg_per_day,
            km_mg_per_L=estimate.km_mg_per_L,
            volume_L=estimate.volume_L,
        )
    )


def ceiling(ward: Ward, wanted_mg: float, unit: str) -> tuple[float, list[str]]:
    """The largest single load [labelled mg], and what must be said where the wanted amount is above it.

    The site's ceiling, else the published one; and never above the published amount per kg.
    """
    loading = ward.profile.loading
    assert loading is not None
    most = ward.site.largest_single_load_mg or loading.largest_single_mg
    words = "local setting" if ward.site.largest_single_load_mg else "needs a local setting to exceed"
    notes: list[str] = []
    weight = ward.case.patient.weight_kg
    highest = max(loading.mg_per_kg[1], (loading.status_mg_per_kg or loading.mg_per_kg)[1])
    if weight is not None:
        low, high = loading.mg_per_kg
        notes.append(
            f"That is {show(wanted_mg / weight, f'{unit}/kg')} by the formula; published loads are "
            f"{show_number(low)} to {show(high, f'{unit}/kg')}"
            + (f", up to {show_number(highest)} in {loading.status_words}." if loading.status_words else ".")
        )
        if highest * weight < min(most, wanted_mg):
            most = highest * weight
            words = f"{show(highest, f'{unit}/kg')}, the largest published"
    if wanted_mg > most:
        notes.append(
            f"Cut from {show(wanted_mg, unit, 4)} to the ceiling of {show(most, unit, 4)} for one load ({words})."
        )
    return most, notes


def round_to_vials(amount_mg: float, product: Product, most_mg: float) -> float:
    """Whole vials where that changes the amount by at most 5 %, else the nearest measured volume; never above the
    ceiling."""
    step = product.smallest_step * product.mg_per_unit
    best = _nearest(amount_mg, [v for v in _vial_sums(product, amount_mg * 1.5) if v <= most_mg + 1e-9])
    if best is not None and abs(best - amount_mg) <= VIAL_ROUNDING * amount_mg:
        return best
    rounded = round(amount_mg / step) * step
    if rounded > most_mg + 1e-9:
        rounded = math.floor(most_mg / step + 1e-9) * step
    return max(rounded, step)


def _nearest(value: float, choices: Sequence[float]) -> float | None:
    return min(choices, key=lambda x: (abs(x - value), x), default=None)


def _vial_sums(product: Product, most_mg: float) -> list[float]:
    sizes = [c * product.mg_per_unit for c in product.containers_mL]
    if not sizes:
        return []
    counts = [range(int(most_mg / s) + 2) for s in sizes]
    return sorted({sum(n * s for n, s in zip(c, sizes, strict=True)) for c in every_pair(*counts)} - {0.0})


def vial_words(amount_mg: float, product: Product) -> str:
    """'1 vial of 5 mL and 2 vials of 2 mL': the fewest that hold the amount, with the least left over."""
    sizes = sorted(product.containers_mL, reverse=True)
    if not sizes:
        return ""
    needed = amount_mg / product.mg_per_unit
    counts = [range(int(needed / s) + 2) for s in sizes]
    fitting = [c for c in every_pair(*counts) if sum(n * s for n, s in zip(c, sizes, strict=True)) >= needed - 1e-9]
    best = min(fitting, key=lambda c: (sum(n * s for n, s in zip(c, sizes, strict=True)), sum(c)))
    return " and ".join(
        f"{n} vial{'' if n == 1 else 's'} of {show_number(s)} mL" for n, s in zip(best, sizes, strict=True) if n
    )


def rate_caps(case: Case, profile: Profile, site: Site, form: str) -> tuple[tuple[RateCap, ...], list[str]]:
    """The infusion caps that hold for this patient (the slowest counts), and what must be said about them."""
    age, weight = case.patient.age_years, case.patient.weight_kg
    notes: list[str] = []
    slower = None
    groups = ["child"] if is_child(case, profile) else ["adult"]
    if age is None:
        groups.append("risk")
        notes.append("The age is not stated: the slower rate is used.")
    elif age >= ELDERLY_YEARS or case.answer("heart_block") == "yes":
        groups.append("risk")
    elif case.answer("heart_block") != "no":
        slower = site.rate_cap(profile, form, "risk")
    caps = [c for c in (site.rate_cap(profile, form, g) for g in groups) if c is not None]
    if slower is not None and (not caps or rate_mg_per_min([slower], weight) < rate_mg_per_min(caps, weight)):
        notes.append(f"Heart disease is not stated. With it, the slower rate holds ({slower.words}).")
    return tuple(caps), notes


def rate_mg_per_min(caps: Sequence[RateCap], weight_kg: float | None) -> float:
    """The slowest of the caps [labelled mg/min]: flat, and per kg where one is given."""
    flat = [c.mg_per_min for c in caps]
    scaled = [c.mg_per_kg_min * weight_kg for c in caps if c.mg_per_kg_min is not None and weight_kg is not None]
    return min(flat + scaled)


def slowest(caps: Sequence[RateCap], weight_kg: float | None) -> tuple[RateCap, ...]:
    """Those of the caps that set the rate: an order names no faster one beside it."""
    if not caps:
        return ()
    rate = rate_mg_per_min(caps, weight_kg)
    return tuple(c for c in caps if rate_mg_per_min([c], weight_kg) <= rate * (1 + 1e-9))


def infusion_minutes(amount_mg: float, caps: Sequence[RateCap], weight_kg: float | None) -> float:
    """The shortest infusion time at the cap, rounded up to whole minutes."""
    return float(math.ceil(amount_mg / rate_mg_per_min(caps, weight_kg) - 1e-9))


def iv_order(
    product: Product,
    amount_mg: float,
    minutes: float | None,
    caps: Sequence[RateCap],
    line: IvLine,
    profile: Profile,
) -> tuple[str, ...]:
    """The complete line of an order into a vein."""
    form = profile.forms[product.form]
    unit = form.amount_unit
    low, high = line.concentration_mg_per_mL
    millilitres = amount_mg / product.mg_per_unit
    vials = vial_words(amount_mg, product)
    caps_words = "; ".join(c.words for c in caps)
    text = (
        f"{show(amount_mg, unit, 6)} {form.words}: {show(millilitres, 'mL', 6)} of {product.words}"
        + (f" ({vials})" if vials else "")
        + f", in {line.diluent}, to a final volume of {show_number(amount_mg / high)} to "
        f"{show(amount_mg / low, 'mL')} ({show_number(low)} to {show(high, f'{unit}/mL')})"
        + (f", over at least {show_number(minutes, 4)} min" if minutes is not None else "")
        + (f" ({caps_words})" if caps_words else "")
        + "."
    )
    return (
        text,
        f"{_sentence(line.filter)} {_sentence(line.monitoring)}",
        f"Not in: {', '.join(line.contraindications)}.",
        f"Watch for {line.watch}.",
    )


def _sentence(text: str) -> str:
    return text[0].upper() + text[1:] + ("" if text.endswith(".") else ".")


def _goes_on(ward: Ward) -> str:
    return f"Maintenance goes on as well: {ward.maintenance_words}; the load does not replace it."


def _maintenance_begins(ward: Ward, oral: OralLoad) -> str:
    """When maintenance begins after a load by mouth, and that a planned start before it must move."""
    wait, begun = timedelta(hours=oral.maintenance_after_h), ward.case.load_at or ward.now.moment
    text = f"Maintenance begins {show_number(oral.maintenance_after_h)} h after the first part"
    if begun is None:
        return f"{text}."
    text += f" (from {show_time(begun + wait)})"
    planned = ward.case.plan_start
    if planned is not None and planned < begun + wait:
        return f"{text}: not at {show_time(planned)} as planned, but with the first dose due after that."
    return f"{text}."


def _piece(mg: float, unit: Product, form: Form) -> str:
    """'4 x 100 mg (400 mg)', '312.5 mg (12.5 mL)'."""
    amount = show(mg, form.amount_unit, 6)
    if unit.unit == "mL":
        return f"{amount} ({show(mg / unit.mg_per_unit, 'mL', 6)})"
    return f"{show_number(mg / unit.mg_per_unit, 6)} x {show(unit.mg_per_unit, form.amount_unit, 6)} ({amount})"


def _step(unit: Product) -> float:
    """Of a liquid what can be measured, of capsules and tablets whole ones."""
    return unit.smallest_step if unit.unit == "mL" else 1.0


def _load_unit(products: Sequence[Product], oral: OralLoad) -> Product | None:
    """The largest solid size that divides every published part, else the only liquid; None where there is neither.

    Of two strengths of a liquid none is chosen: mixing them up would be a slip of several times.
    """
    liquids = [p for p in products if p.unit == "mL"]
    fits = [
        p
        for p in products
        if p.unit != "mL" and all(abs(mg / p.mg_per_unit - round(mg / p.mg_per_unit)) < 1e-9 for mg in oral.parts_mg)
    ]
    solid = max(fits, key=lambda p: p.mg_per_unit, default=None)
    return solid or (liquids[0] if len(liquids) == 1 else None)


def split(
    amount_mg: float, unit_mg: float, *, total_mg: float, at_once_mg: float, apart_h: float
) -> tuple[tuple[float, float], ...]:
    """Parts of an oral load as (hours from the first, mg): whole units, none above the largest part, the larger first.

    The amount is rounded to the nearest whole unit and never above the total; empty where that is none.
    """
    units = round(min(amount_mg, total_mg) / unit_mg)
    while units * unit_mg > total_mg + 1e-9:
        units -= 1
    per_part = int(at_once_mg / unit_mg + 1e-9)
    if units <= 0 or per_part <= 0:
        return ()
    count = math.ceil(units / per_part)
    even, extra = divmod(units, count)
    return tuple((k * apart_h, (even + (1 if k < extra else 0)) * unit_mg) for k in range(count))
