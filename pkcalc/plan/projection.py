"""What comes next, moment by moment: the level if things go on as now, and on each regimen somebody asks about.

For drugs that are followed by levels every hour or two rather than waited for, and for drugs of which only a
projection may be shown. It follows every draw of the estimate through the record, dialysis sessions and a parallel
first-order path included; it never ranks regimens.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta

import numpy as np
from numpy.typing import NDArray

from pkcalc import flow, formulas
from pkcalc.case import Case, Course, ProposedFile
from pkcalc.dosing import Regimen, flow_dose
from pkcalc.drugs.profile import Product, Profile
from pkcalc.errors import CannotEstimate
from pkcalc.estimate.posterior import with_population_path
from pkcalc.estimate.result import Band, Estimate, band
from pkcalc.forecast import TIME_DRAWS, Forecast, Goal, bands, fewer_draws, forecast_rates, rate_for_level
from pkcalc.given import given_record
from pkcalc.levels import LabScale, Observation
from pkcalc.record import Dose, Record
from pkcalc.site import Site
from pkcalc.units import percent, show

Floats = NDArray[np.float64]

#: Steps ahead, in units of the shortest time between two levels of the drug file (a day where it names none).
STEPS = (1, 2, 3, 4, 6, 8, 12)
#: A chance above this of being outside the target at the later of the two times asks for the earlier level.
OUTSIDE_SOON = 0.20
#: The level is said to leave the target when this share of the draws has left it.
LEFT = 0.50


@dataclass(frozen=True)
class Moment:
    """The level some hours from now: median with its 90 % interval, and chances against target and critical level."""

    hours: float
    at: datetime
    level: Band
    below: float
    within: float
    above: float
    above_critical: float


@dataclass(frozen=True)
class Followed:
    """What was followed to the moments of a path, draw by draw: for the second way, never printed.

    record: with its parallel paths. start_mg_per_L: the measured level at its start; None where the record says what
    was in the body. levels_mg_per_L: shape (draws, moments).
    """

    record: Record
    start_mg_per_L: float | None
    times_day: tuple[float, ...]
    levels_mg_per_L: Floats


@dataclass(frozen=True)
class Path:
    """One way to go on.

    rate_mg_per_day: active drug on average; 0 where nothing more is given. steady: level it would settle at without
    dialysis; +inf is "no steady state". no_steady_state: chance of that. climb_mg_per_L_per_h: how fast the level
    climbs in the end where there is none at the point, else None. leaves: the first moment at which the level is
    more likely outside the target than not; None where that does not come within the time shown.
    """

    words: str
    present: bool
    rate_mg_per_day: float
    moments: tuple[Moment, ...]
    steady: Band
    no_steady_state: float
    climb_mg_per_L_per_h: float | None
    leaves: Moment | None
    followed: Followed


@dataclass(frozen=True)
class Amount:
    """An amount or a rate of active drug with its 90 % interval (mg, or mg/h), and of each product [mL or mL/h].

    clearance_L_per_day: of the dialysis that a rate is for; 0 without.
    """

    words: str
    mg: Band
    mL: tuple[tuple[Product, float], ...]
    clearance_L_per_day: float = 0.0


@dataclass(frozen=True)
class Plateaus:
    """What two steady levels say without times: where a rate would settle, and the rates that hold the aim.

    settle: the rates asked about, in words, with the forecast of their steady level. holds: as of a projection.
    """

    settle: tuple[tuple[str, Forecast], ...]
    holds: tuple[Amount, ...]


@dataclass(frozen=True)
class Projection:
    """Everything that is shown about the hours (or days) to come.

    now: level now over the draws. paths: going on as now first, then the regimens asked about. load: what would bring
    the level to the aim, None where it is not below the target or no dose may be offered. guideline_mg: published
    load for this weight. holds: rates that hold the aim, without and with dialysis; empty where no dose may be
    offered. next_level_h: when to draw next, with the reasons. choose: what must be chosen before mL can be told.
    draws: the draws that were followed.
    """

    moment: datetime
    now: Band
    started_from: str
    paths: tuple[Path, ...]
    load: Amount | None
    guideline_mg: tuple[float, float] | None
    holds: tuple[Amount, ...]
    next_level_h: float
    next_level_at: datetime
    next_why: tuple[str, ...]
    choose: str
    draws: Estimate


def project(
    case: Case,
    profile: Profile,
    site: Site,
    *,
    estimate: Estimate,
    learned: bool,
    goal: Goal,
    observations: Sequence[Observation],
    first_order_per_day: float = 0.0,
    stops: frozenset[str] = frozenset(),
) -> Projection:
    """The projection from an estimate.

    learned: True where the estimate has seen the record; else the course starts from the latest level, or from the
    record where there is none. first_order_per_day: the population's parallel path. stops: "regimens" and "loading"
    among them take the rates and the load away. Raises CannotEstimate without a time, a weight or a readable record.
    """
    if case.now is None or estimate.volume_L is None:
        raise CannotEstimate(
            found="No time of the consult is given." if case.now is None else "No weight is given.",
            why="Without it nobody can tell where the level is now or how fast it moves.",
            helps="Give the time of the consult." if case.now is None else "Give a weight.",
        )
    moment = case.plan_start or case.now
    few = fewer_draws(estimate, TIME_DRAWS).estimate
    step_h = profile.sampling.repeat_h[0] if profile.sampling.repeat_h else 24.0
    hours = [n * step_h for n in STEPS]
    end = moment + timedelta(hours=hours[-1], minutes=1)
    latest = None if learned else _latest(observations)
    walk = _Walk(case, profile, few, first_order_per_day, latest, moment)
    volume, k = few.volume_L, first_order_per_day
    assert volume is not None
    now_draws = walk.follow(given_record(case, profile, moment), [0.0]).levels_mg_per_L[:, 0]
    now = band(now_draws, few.weights)

    paths = [_path(_now_words(case, profile, moment), True, _running(case, profile, moment), walk, end, hours, goal, k)]
    for regimen, words in _asked_about(case, profile):
        paths.append(_path(words, False, regimen, walk, end, hours, goal, k))

    products, choose = _products(case, profile, site)
    may_dose = "regimens" not in stops and profile.scope in ("dosing", "dosing with expert sign-off")
    holds = _holds(case, profile, few, goal, k, moment, products) if may_dose else ()
    load = None
    if may_dose and "loading" not in stops and now.median < goal.low_mg_per_L:
        need = np.maximum(goal.aim_mg_per_L - now_draws, 0.0) * volume
        load = _load(case, profile, band(need, few.weights), products)
    weight = case.patient.weight_kg
    guideline = None
    if profile.loading is not None and weight is not None:
        low, high = profile.loading.mg_per_kg
        guideline = (low * weight, high * weight)
    # the earliest that any way to go on asks for
    after, why = min((_next(case, profile, p, moment, step_h) for p in paths), key=lambda found: found[0])
    return Projection(
        moment=moment,
        now=now,
        started_from=walk.words,
        paths=tuple(paths),
        load=load,
        guideline_mg=guideline if load is not None else None,
        holds=holds,
        next_level_h=after,
        next_level_at=moment + timedelta(hours=after),
        next_why=tuple(why),
        choose=choose if may_dose else "",
        draws=few,
    )


def settle(
    case: Case,
    profile: Profile,
    site: Site,
    *,
    estimate: Estimate,
    goal: Goal,
    scale: LabScale,
    stops: frozenset[str] = frozenset(),
) -> Plateaus:
    """Steady levels on the rates asked about, and the rates for the aim; for an estimate of steady levels alone.

    The estimate has no parallel path. stops: "regimens" among them takes the rates for the aim away.
    """
    asked = _asked_about(case, profile)
    rates = [regimen.active_mg_per_day(profile) for regimen, _ in asked]
    found = forecast_rates(estimate, rates, goal, scale) if rates else ()
    may_dose = "regimens" not in stops and profile.scope in ("dosing", "dosing with expert sign-off")
    aim = rate_for_level(estimate, goal.aim_mg_per_L)
    products, _ = _products(case, profile, site)
    hourly = Band(aim.median / 24, aim.low / 24, aim.high / 24)
    holds = (_amount("without dialysis" if profile.dialysis else "steadily", hourly, products),) if may_dose else ()
    return Plateaus(tuple((words, f) for (_, words), f in zip(asked, found, strict=True)), holds)


# the course ------------------------------------------------------------------------------------------------


class _Walk:
    """Follows every draw from where its course is known to the moments asked for."""

    def __init__(
        self,
        case: Case,
        profile: Profile,
        few: Estimate,
        first_order_per_day: float,
        latest: Observation | None,
        moment: datetime,
    ) -> None:
        self.case, self.profile, self.few, self.k = case, profile, few, first_order_per_day
        self.moment = moment
        self.start_day: float | None = None
        self.start_mg_per_L: float | None = None
        self.words = "by the course of the record"
        if latest is not None and latest.level.drawn is not None:
            self.start_day, self.start_mg_per_L = case.day(latest.level.drawn), latest.working_mg_per_L
            self.words = f"from {latest.name}, with the population's elimination since"

    def follow(self, record: Record, hours: Sequence[float]) -> Followed:
        """Level [mg/L] at each time from now, per draw."""
        assert self.few.volume_L is not None
        record = with_population_path(record, self.k)
        start = None
        if self.start_day is not None:
            cut = self.start_day
            kept = tuple(_after(d, cut) for d in record.doses if d.time_day + d.duration_day > cut or d.absorption)
            record = replace(record, doses=kept, start_day=cut, before=None, start_mg=0.0)
            start = self.start_mg_per_L
        base = max(self.case.day(self.moment), record.start_day)
        times = tuple(base + h / 24 for h in hours)
        levels = flow.levels(
            record,
            times,
            self.few.vmax_mg_per_day,
            self.few.km_mg_per_L,
            self.few.volume_L,
            start_mg_per_L=start,
        )
        return Followed(record, start, times, levels)


def _after(dose: Dose, day: float) -> Dose:
    """What of a dose is still to come after a day: the rest of an infusion; an absorbed dose stays as it is."""
    if dose.time_day >= day or dose.absorption is not None:
        return dose
    left = dose.time_day + dose.duration_day - day
    return replace(dose, time_day=day, duration_day=left, amount_mg=dose.amount_mg * left / dose.duration_day)


def _path(
    words: str,
    present: bool,
    going_on: Regimen | float,
    walk: _Walk,
    end: datetime,
    hours: Sequence[float],
    goal: Goal,
    first_order_per_day: float,
) -> Path:
    """going_on: a regimen that starts now in place of what runs; or the running rate, going on as it is."""
    case, profile, few, start = walk.case, walk.profile, walk.few, walk.moment
    if isinstance(going_on, Regimen):
        rate = going_on.active_mg_per_day(profile)
        record = given_record(case, profile, start)
        record = replace(record, doses=(*record.doses, *_planned(going_on, case, profile, start, end)))
    else:
        rate = going_on
        record = given_record(case, profile, end)
    followed = walk.follow(record, hours)
    levels = followed.levels_mg_per_L
    moments = tuple(
        Moment(
            hours=h,
            at=start + timedelta(hours=h),
            level=bands(levels[None, :, i], few.weights)[0],
            below=_share(levels[:, i] < goal.low_mg_per_L, few),
            within=_share((levels[:, i] >= goal.low_mg_per_L) & (levels[:, i] <= goal.high_mg_per_L), few),
            above=_share(levels[:, i] > goal.high_mg_per_L, few),
            above_critical=_share(levels[:, i] > goal.critical_mg_per_L, few),
        )
        for i, h in enumerate(hours)
    )
    volume = few.volume_L
    assert volume is not None
    steady = np.asarray(
        formulas.steady_state_level(
            dose_rate_mg_per_day=rate,
            vmax_mg_per_day=few.vmax_mg_per_day,
            km_mg_per_L=few.km_mg_per_L,
            linear_clearance_L_per_day=first_order_per_day * volume,
        )
    )
    point, climb = walk.few.point, None
    if first_order_per_day == 0 and rate >= point.vmax_mg_per_day and point.volume_L:
        climb = (rate - point.vmax_mg_per_day) / point.volume_L / 24
    return Path(
        words=words,
        present=present,
        rate_mg_per_day=rate,
        moments=moments,
        steady=bands(steady[None, :], few.weights)[0],
        no_steady_state=_share(np.isinf(steady), few),
        climb_mg_per_L_per_h=climb,
        leaves=next((m for m in moments if m.below + m.above > LEFT), None),
        followed=followed,
    )


def _planned(regimen: Regimen, case: Case, profile: Profile, start: datetime, end: datetime) -> list[Dose]:
    if regimen.continuous:
        days = case.day(end) - case.day(start)
        return [Dose(case.day(start), regimen.active_mg_per_day(profile) * days, duration_day=days)]
    return [flow_dose(intake, case.day(at), profile) for at, intake in regimen.doses_from(start, end)]


def _share(hits: NDArray[np.bool_], few: Estimate) -> float:
    return float(min(max(round(float(hits @ few.weights), 12), 0.0), 1.0))


def _latest(observations: Sequence[Observation]) -> Observation | None:
    dated = [o for o in observations if o.usable and o.level.drawn is not None and o.censored is None]
    return max(dated, key=lambda o: o.level.drawn.timestamp() if o.level.drawn else 0.0) if dated else None


def _asked_about(case: Case, profile: Profile) -> list[tuple[Regimen, str]]:
    """The pharmacist's own regimens, and the chosen one where it is not among them, in words."""
    found = [(r, _words(r, f, profile)) for r, f in zip(case.proposed, case.file.proposed, strict=True)]
    file = case.file.chosen.regimen if case.file.chosen is not None else None
    if case.chosen is not None and file is not None and case.chosen not in case.proposed:
        found.append((case.chosen, _words(case.chosen, file, profile)))
    return found


def _words(regimen: Regimen, file: ProposedFile, profile: Profile) -> str:
    """A rate as typed, with the product it is of."""
    if not file.rate:
        return regimen.words(profile)
    return _rate_words(file.rate, file.product, file.form, profile)


def _rate_words(rate: str, product: str, form: str, profile: Profile) -> str:
    of = profile.products[product].words if product in profile.products else profile.forms[form].words
    return f"{rate} {of}"


# what runs now ----------------------------------------------------------------------------------------------


def _open(case: Case, moment: datetime) -> list[Course]:
    """Lines that go on after now."""
    return [
        c
        for c in case.courses
        if c.counts_as_given
        and (c.regimen is not None or c.rate_mg_per_day is not None)
        and (c.start is None or c.start <= moment)
        and (c.end is None or c.end > moment)
    ]


def _running(case: Case, profile: Profile, moment: datetime) -> float:
    """Active drug per day of all lines that go on."""
    total = 0.0
    for c in _open(case, moment):
        if c.regimen is not None:
            total += c.regimen.active_mg_per_day(profile)
        elif c.rate_mg_per_day is not None:
            total += c.rate_mg_per_day * profile.forms[c.rate_form].active_fraction
    return total


def _now_words(case: Case, profile: Profile, moment: datetime) -> str:
    words = []
    for c in _open(case, moment):
        if c.regimen is not None:
            words.append(c.regimen.words(profile))
        else:
            words.append(_rate_words(c.typed.rate, c.typed.product, c.rate_form, profile))
    return "as now: " + " and ".join(words) if words else "as now: nothing more is given"


# amounts ----------------------------------------------------------------------------------------------------


def _products(case: Case, profile: Profile, site: Site) -> tuple[tuple[Product, ...], str]:
    """The liquids that a person chose (in the plan, by a shelf, or on a dose line); else what must be chosen."""
    plan = case.file.plan
    shelf = plan.shelf or (site.shelf if site.shelf in profile.shelves else "")
    named = [c.typed.product for c in case.courses] + [p.product for p in case.file.proposed]
    wanted = plan.products or (profile.shelves[shelf].products if shelf else tuple(dict.fromkeys(named)))
    found = tuple(profile.products[p] for p in wanted if p in profile.products and profile.products[p].unit == "mL")
    if found:
        return found, ""
    listed = "; ".join(f"{p.words}: {p.strength_words}" for p in profile.products.values() if p.unit == "mL")
    return (), f"No volume is given: first choose the product as its label reads ({listed})." if listed else ""


def _amount(words: str, mg: Band, products: Sequence[Product], *, form: str = "") -> Amount:
    fitting = [p for p in products if not form or p.form == form]
    return Amount(words, mg, tuple((p, mg.median / p.mg_per_unit) for p in fitting))


def _load(case: Case, profile: Profile, need: Band, products: Sequence[Product]) -> Amount:
    """The amount for the aim, never above the published load per kg nor the largest single one of the drug file."""
    weight, published = case.patient.weight_kg, profile.loading
    if published is None or weight is None:
        return _amount("to bring the level to the aim", need, products)
    most = min(published.mg_per_kg[1] * weight, published.largest_single_mg)
    if need.median <= most:
        return _amount("to bring the level to the aim", need, products)
    held = Band(most, min(need.low, most), most)
    return _amount(f"held at {show(most / 1000, 'g')}, the most that is published or allowed", held, products)


def _holds(
    case: Case,
    profile: Profile,
    few: Estimate,
    goal: Goal,
    first_order_per_day: float,
    moment: datetime,
    products: Sequence[Product],
) -> tuple[Amount, ...]:
    """Rates [mg/h] that hold the aim: without dialysis, and with that of the session running or ahead."""
    volume = few.volume_L
    assert volume is not None
    sessions = [s for s in case.dialysis if s.end is None or s.end > moment]
    clearances = [("without dialysis", 0.0)]
    if sessions:
        clearances.append(("while dialysis runs", sessions[0].clearance_L_per_day))
    found = []
    for words, clearance in clearances:
        rates = np.asarray(
            formulas.dose_rate_for_level(
                level_mg_per_L=goal.aim_mg_per_L,
                vmax_mg_per_day=few.vmax_mg_per_day,
                km_mg_per_L=few.km_mg_per_L,
                linear_clearance_L_per_day=first_order_per_day * volume + clearance,
            )
        )
        held = _amount(words, band(rates / 24, few.weights), products)
        found.append(replace(held, clearance_L_per_day=clearance))
    return tuple(found)


def _next(case: Case, profile: Profile, path: Path, moment: datetime, step_h: float) -> tuple[float, list[str]]:
    """Hours to the next level, with the reasons."""
    early, late = profile.sampling.repeat_h or (step_h, step_h)
    at_late = next(m for m in path.moments if m.hours >= late)
    why = []
    outside = at_late.below + at_late.above
    if outside > OUTSIDE_SOON:
        why.append(
            f"the chance of a level outside the target in {show(at_late.hours, 'h')} is {percent(outside)}, above "
            f"{percent(OUTSIDE_SOON)}"
        )
    if any(s.start <= moment and (s.end is None or s.end > moment) for s in case.dialysis):
        why.append("dialysis is running")
    turns = [m for s in case.dialysis for m in (s.start, s.end) if m is not None]
    if any(-timedelta(hours=early) < t - moment <= timedelta(hours=late) for t in turns):
        why.append("dialysis starts or stops about now")
    if math.isinf(path.steady.median):
        why.append("the level would climb without end")
    return (early if why else late), why
