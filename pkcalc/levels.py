"""What a reported level is worth: each level on the working basis, with its spread and the steps that led there.

Working basis = total level at normal binding ("normalised total"). The steps are kept as text so that a second
pharmacist can follow them.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta
from typing import Literal

from pkcalc import formulas
from pkcalc.case import Albumin, Case, Course, Level
from pkcalc.drugs.profile import Profile
from pkcalc.site import Site
from pkcalc.units import show, show_number

Timing = Literal[
    "as usual",
    "time unknown",
    "during an infusion",
    "too early after a dose into a vein",
    "too early after a dose into a muscle",
    "soon after a single dose by mouth",
    "near the peak of a prompt form",
]

#: Draws that do not show the level in the body: distribution or conversion is not over, or the assay still sees
#: the prodrug.
NOT_YET: tuple[Timing, ...] = (
    "during an infusion",
    "too early after a dose into a vein",
    "too early after a dose into a muscle",
)
SAME_SAMPLE = timedelta(hours=1)


@dataclass(frozen=True)
class Spread:
    """Total spread of a level as a coefficient of variation, with the assay shown as one part of it."""

    total_cv: float
    assay_cv: float
    basis: str

    @property
    def log_sd(self) -> float:
        return math.sqrt(math.log1p(self.total_cv**2))


@dataclass(frozen=True)
class LabScale:
    """How a working level comes back from the laboratory.

    Reported total = working x total_factor; reported free = working x free_fraction.
    """

    total_factor: float
    free_fraction: float
    words: str

    def total(self, working_mg_per_L: float) -> float:
        return working_mg_per_L * self.total_factor

    def free(self, working_mg_per_L: float) -> float:
        return working_mg_per_L * self.free_fraction


@dataclass(frozen=True)
class Observation:
    """One level on the working basis.

    working_mg_per_L: best reading; low/high: the range of readings where binding is uncertain (equal to the
    best reading where it is not). spread: total spread of the level itself; binding_log_sd: added by the
    correction. readable: False where binding leaves no single reading. set_aside: why the level is not used
    for estimates although it can be read; empty where it is used. censored: below or above the stated limit,
    or below the site's quantification limit.
    """

    level: Level
    working_mg_per_L: float
    low_mg_per_L: float
    high_mg_per_L: float
    spread: Spread
    binding_log_sd: float
    readable: bool
    steps: tuple[str, ...]
    caveats: tuple[str, ...]
    censored: Literal["below", "above"] | None = None
    set_aside: str = ""

    @property
    def usable(self) -> bool:
        return self.readable and not self.set_aside

    @property
    def log_sd(self) -> float:
        return math.hypot(self.spread.log_sd, self.binding_log_sd)

    @property
    def name(self) -> str:
        return f"Level {self.level.index + 1}"


def observe(case: Case, profile: Profile, site: Site) -> tuple[Observation, ...]:
    """Every level of the case on the working basis, in the order of the case.

    Where a free and a total level come from one sample the measured free fraction wins: the free level is used
    and the total set aside, shown with it. A level entered twice is used once.
    """
    spread = total_spread(case, profile, site)
    found = [_observe(level, case, profile, site, spread) for level in case.levels]
    for i, o in enumerate(found):
        reason = _set_aside(o, found[:i], found, case, profile)
        if reason:
            found[i] = replace(o, set_aside=reason)
    return tuple(found)


def _set_aside(
    o: Observation, before: Sequence[Observation], every: Sequence[Observation], case: Case, profile: Profile
) -> str:
    """Why a level is not used for estimates; empty where it is."""
    level = o.level
    same = [
        p
        for p in before
        if level.drawn is not None
        and p.level.drawn == level.drawn
        and p.level.kind == level.kind
        and p.level.typed == level.typed
    ]
    if same:
        return f"the same as {same[0].name[0].lower()}{same[0].name[1:]}, entered twice"
    partner = free_partner(o, every)
    if partner is not None:
        return f"{partner.name[0].lower()}{partner.name[1:]}, the free level of the same sample, is used instead"
    if timing(level, case, profile) in NOT_YET:
        return "it was drawn too early after a dose to stand for the level in the body"
    first = _first_dose(case)
    if first is not None and level.drawn is not None and level.drawn < first:
        return "it was drawn before the record of doses begins"
    return ""


def free_partner(o: Observation, every: Sequence[Observation]) -> Observation | None:
    """The free level drawn with a total one (within the hour), where there is one."""
    if o.level.kind != "total" or o.level.drawn is None:
        return None
    for p in every:
        free = p.level.kind == "free" and p.level.censored is None
        if free and p.level.drawn is not None and abs(p.level.drawn - o.level.drawn) <= SAME_SAMPLE:
            return p
    return None


def measured_free_fraction(every: Sequence[Observation]) -> float | None:
    """Free over total of the latest sample that has both; None where there is none."""
    pairs = [
        (o.level.drawn, p.level.reported_mg_per_L / o.level.reported_mg_per_L)
        for o in every
        if o.level.censored is None and o.level.drawn is not None and (p := free_partner(o, every)) is not None
    ]
    return max(pairs)[1] if pairs else None


def _first_dose(case: Case) -> datetime | None:
    """Start of the record; None where an open-ended or undated line leaves it open."""
    given = [c for c in case.courses if c.counts_as_given]
    starts = [c.start for c in given if c.start is not None]
    return min(starts) if starts and len(starts) == len(given) else None


def timing(level: Level, case: Case, profile: Profile) -> Timing:
    """Where in the course of a dose a level was drawn, as far as it matters for reading it.

    Looks at single doses and infusions before the draw, and at prompt forms of the regimen in force.
    """
    if level.drawn is None:
        return "time unknown"
    sampling = profile.sampling
    for course in case.courses:
        if not course.counts_as_given or course.start is None or course.start > level.drawn:
            continue
        form = profile.forms[course.forms[0]]
        hours = (level.drawn - course.start) / timedelta(hours=1)
        if course.single is not None:
            if hours < course.single.over_h:
                return "during an infusion"
            since_end = hours - course.single.over_h
            if form.route == "intravenous" and since_end < sampling.after_iv_h:
                return "too early after a dose into a vein"
            if form.route == "intramuscular" and since_end < sampling.after_im_h:
                return "too early after a dose into a muscle"
            if form.route not in ("intravenous", "intramuscular") and hours < sampling.after_oral_load_h:
                return "soon after a single dose by mouth"
        elif course.rate_mg_per_day is not None and (course.end is None or level.drawn < course.end):
            if sampling.repeat_h is None:  # else the drug is followed by levels while its infusion runs
                return "during an infusion"
        elif course.regimen is not None and (course.end is None or level.drawn <= course.end):
            since = _hours_since_dose(level.drawn, course)
            if since is None:
                continue
            if form.route == "intravenous" and since < sampling.after_iv_h:
                return "too early after a dose into a vein"
            if form.route == "intramuscular" and since < sampling.after_im_h:
                return "too early after a dose into a muscle"
            if form.release == "prompt" and form.absorption is not None and since <= form.absorption.peak_h[1]:
                return "near the peak of a prompt form"
    return "as usual"


def _hours_since_dose(drawn: datetime, course: Course) -> float | None:
    """Hours since the end of the last dose of a regimen by its clock times; None where they are not stated."""
    if course.regimen is None or course.start is None:
        return None
    start = max(course.start, drawn - timedelta(days=8))
    if not course.regimen.by_clock:
        start = course.start
    ends = [m + timedelta(hours=i.over_h) for m, i in course.regimen.doses_from(start, drawn)]
    return (drawn - max(ends)) / timedelta(hours=1) if ends else None


def total_spread(case: Case, profile: Profile, site: Site) -> Spread:
    """The total spread of a level for this patient: observed dosing, outpatient, or doubtful adherence."""
    key, words = adherence(case)
    assay = site.assay_cv if site.assay_cv is not None else profile.spread.assay_cv
    cv = site.level_total_cv(key) or profile.spread.total_cv[key]
    return Spread(total_cv=max(cv, assay), assay_cv=assay, basis=words)


def adherence(case: Case) -> tuple[str, str]:
    """How the doses were taken: key of the profile's spreads, and the words for it."""
    givers = {c.given_by for c in case.courses if c.counts_as_given}
    if case.answer("adherence_doubtful") == "yes":
        return "doubtful", "doubtful adherence"
    if givers == {"nurse"} and case.answer("adherence_doubtful") == "no":
        return "observed", "observed dosing"
    return "outpatient", "doses taken unobserved, or not stated who gives them"


def _observe(level: Level, case: Case, profile: Profile, site: Site, spread: Spread) -> Observation:
    reported, censored = level.reported_mg_per_L, level.censored
    steps: list[str] = []
    if level.typed.label != "mg/L":
        steps.append(f"{level.typed.text} = {show(reported, 'mg/L', 4)}")
    limit = site.quantification_limit_mg_per_L
    if limit is not None and level.kind == "total" and censored is None and reported < limit:
        steps.append(f"below the laboratory's quantification limit {show(limit, 'mg/L')}: only the limit counts")
        reported, censored = limit, "below"
    reading = _read(level, reported, case, profile, site)
    return Observation(
        level=level,
        working_mg_per_L=reading.best,
        low_mg_per_L=reading.low,
        high_mg_per_L=reading.high,
        spread=spread,
        binding_log_sd=reading.log_sd,
        readable=reading.readable,
        steps=(*steps, *reading.steps),
        caveats=reading.caveats,
        censored=censored,
    )


@dataclass(frozen=True)
class _Reading:
    """A reported level on the working basis: best, range, spread of the correction, and how it came about."""

    best: float
    low: float
    high: float
    log_sd: float = 0.0
    readable: bool = True
    steps: tuple[str, ...] = ()
    caveats: tuple[str, ...] = ()


def _read(level: Level, reported: float, case: Case, profile: Profile, site: Site) -> _Reading:
    binding = profile.binding
    if binding is None:
        return _Reading(reported, reported, reported)
    shown, name = show(reported, "mg/L", 4), f"Level {level.index + 1}"
    albumin = level.albumin or case.albumin
    if level.kind == "normalised":
        caveat = f"{name} was already normalised by {level.normalised_by}: check which equation was used."
        return _Reading(reported, reported, reported, binding.correction_log_sd, caveats=(caveat,))
    if level.kind == "free":
        fraction = binding.free_fraction
        working = float(formulas.normalised_from_free(free_mg_per_L=reported, free_fraction=fraction))
        step = f"normalised total = free / {show_number(fraction)} = {shown} / {show_number(fraction)} = "
        return _Reading(working, working, working, steps=(step + show(working, "mg/L", 4),))
    displaced = any(case.answer(d.drug) == "yes" for d in binding.displacements)
    if displaced or "yes" in (case.answer("renal_failure"), case.answer("pregnancy")):
        low, high, step = _possible(reported, level, case, profile, albumin)
        return _Reading(math.sqrt(low * high), low, high, readable=False, steps=(step,))
    if albumin is None:
        return _Reading(reported, reported, reported)
    coefficient = site.albumin_coefficient(binding)
    working = _normalised(reported, albumin, coefficient)
    if working == reported:
        return _Reading(
            reported,
            reported,
            reported,
            steps=(f"albumin {show(albumin.g_per_L, 'g/L')}: no correction needed",),
        )
    k, g_dl = show_number(coefficient), show(albumin.g_per_L / 10, "g/dL")
    step = f"normalised total = total / ({k} x albumin + 0.1) = {shown} / ({k} x {g_dl} + 0.1) = "
    others = ", ".join(
        f"{a.words} {show_number(a.coefficient_dL_per_g)}: "
        + show(_normalised(reported, albumin, a.coefficient_dL_per_g), "mg/L")
        for a in binding.alternatives
        if a.coefficient_dL_per_g != coefficient
    )
    steps = [step + show(working, "mg/L", 4)]
    if others:
        steps.append(f"with other published coefficients, unvalidated: {others}")
    return _Reading(working, working, working, binding.correction_log_sd, steps=tuple(steps))


def _normalised(total: float, albumin: Albumin, coefficient: float) -> float:
    return float(
        formulas.normalised_total(
            total_mg_per_L=total, albumin_g_per_L=albumin.g_per_L, coefficient_dL_per_g=coefficient
        )
    )


def _possible(
    total: float, level: Level, case: Case, profile: Profile, albumin: Albumin | None
) -> tuple[float, float, str]:
    """The range of normalised totals where no equation can be trusted."""
    binding = profile.binding
    assert binding is not None
    readings: list[tuple[float, str]] = []
    if case.answer("renal_failure") == "yes" and albumin is not None:
        for coefficient in binding.renal_failure_coefficients:
            value = _normalised(total, albumin, coefficient)
            readings.append((value, f"coefficient {show_number(coefficient)}: {show(value, 'mg/L')}"))
    for d in binding.displacements:
        other = level.other_mg_per_L(d.drug)
        if case.answer(d.drug) == "yes" and other is not None:
            free = d.free_mg_per_L(total, other)
            value = free / binding.free_fraction
            readings.append((value, f"{d.words}: free {show(free, 'mg/L')}, normalised {show(value, 'mg/L')}"))
    if not readings:
        readings = [
            (total, f"as measured: {show(total, 'mg/L')}"),
            (2 * total, f"with the free fraction doubled: {show(2 * total, 'mg/L')}"),
        ]
    values = [v for v, _ in readings]
    return min(values), max(values), "possible readings: " + "; ".join(w for _, w in readings)


def everyday_cv(profile: Profile, site: Site, assay_cv: float) -> float:
    """What is left of a level's own spread, intake apart, once the assay is taken out of it.

    A hospital that states its own total under observed dosing has measured just that.
    """
    own = site.level_total_cv("observed") or profile.spread.own_cv
    return math.sqrt(max(own**2 - assay_cv**2, 0.0))


def lab_scale(
    case: Case,
    profile: Profile,
    site: Site,
    albumin: Albumin | None,
    observations: Sequence[Observation] = (),
) -> LabScale:
    """The scale on which the laboratory will report this patient's next level.

    A measured free fraction (free and total of one sample) wins over the albumin equation.
    """
    binding = profile.binding
    if binding is None:
        return LabScale(1.0, 1.0, "as the laboratory reports it")
    measured = measured_free_fraction(observations)
    if measured is not None:
        percent = show_number(100 * measured)
        words = f"total as the laboratory reports it at this patient's measured free fraction of {percent} %"
        return LabScale(binding.free_fraction / measured, binding.free_fraction, words)
    if albumin is None:
        return LabScale(1.0, binding.free_fraction, "total as the laboratory reports it if albumin is normal")
    factor = float(
        formulas.binding_denominator(
            albumin_g_per_L=albumin.g_per_L, coefficient_dL_per_g=site.albumin_coefficient(binding)
        )
    )
    words = f"total as the laboratory reports it at albumin {show(albumin.g_per_L, 'g/L')}"
    return LabScale(min(factor, 1.0), binding.free_fraction, words)


def present_level(observations: Sequence[Observation]) -> float:
    """The latest level on the working basis; where no draw is dated, the last one given; 0 without a level."""
    if not observations:
        return 0.0
    used = [o for o in observations if not o.set_aside] or list(observations)
    dated = [o for o in used if o.level.drawn is not None]
    if dated:
        return max(dated, key=lambda o: o.level.drawn.timestamp() if o.level.drawn else 0.0).working_mg_per_L
    return observations[-1].working_mg_per_L
