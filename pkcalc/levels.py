"""What a reported level is worth: each level on the working basis, with its spread and the steps that led there.

Working basis = total level at normal binding ("normalised total"). The steps are kept as text so that a second
pharmacist can follow them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from pkcalc import formulas
from pkcalc.case import Albumin, Case, Level
from pkcalc.drugs.profile import Profile
from pkcalc.site import Site
from pkcalc.units import show, show_number


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
    correction. usable: False where no single reading may be used for an estimate.
    """

    level: Level
    working_mg_per_L: float
    low_mg_per_L: float
    high_mg_per_L: float
    spread: Spread
    binding_log_sd: float
    usable: bool
    steps: tuple[str, ...]
    caveats: tuple[str, ...]
    scale: LabScale

    @property
    def log_sd(self) -> float:
        return math.hypot(self.spread.log_sd, self.binding_log_sd)

    @property
    def name(self) -> str:
        return f"Level {self.level.index + 1}"


def observe(case: Case, profile: Profile, site: Site) -> tuple[Observation, ...]:
    """Every level of the case on the working basis, in the order of the case."""
    spread = total_spread(case, profile, site)
    return tuple(_observe(level, case, profile, site, spread) for level in case.levels)


def total_spread(case: Case, profile: Profile, site: Site) -> Spread:
    """The total spread of a level for this patient: observed dosing, outpatient, or doubtful adherence."""
    key, words = adherence(case)
    assay = site.assay_cv if site.assay_cv is not None else profile.spread.assay_cv
    cv = site.level_total_cv(key) or profile.spread.total_cv[key]
    return Spread(total_cv=max(cv, assay), assay_cv=assay, basis=words)


def adherence(case: Case) -> tuple[str, str]:
    """How the doses were taken: key of the profile's spreads, and the words for it."""
    givers = {c.given_by for c in case.courses}
    if case.answer("adherence_doubtful") == "yes":
        return "doubtful", "doubtful adherence"
    if givers == {"nurse"} and case.answer("adherence_doubtful") == "no":
        return "observed", "observed dosing"
    return "outpatient", "doses taken unobserved, or not stated who gives them"


def _observe(level: Level, case: Case, profile: Profile, site: Site, spread: Spread) -> Observation:
    reported = level.reported_mg_per_L
    name = f"Level {level.index + 1}"
    coefficient = site.albumin_coefficient(profile.binding) if profile.binding else 0.0
    shown = show(reported, "mg/L", 4)
    steps: list[str] = []
    if level.typed.label not in ("mg/L",):
        steps.append(f"{level.typed.text} = {shown}")
    binding = profile.binding
    if binding is None:
        scale = LabScale(1.0, 1.0, "reported as measured")
        return Observation(level, reported, reported, reported, spread, 0.0, True, tuple(steps), (), scale)
    albumin = level.albumin or case.albumin
    scale = lab_scale(case, profile, site, albumin)
    if level.kind == "normalised":
        caveat = f"{name} was already normalised by {level.normalised_by}: check which equation was used."
        return Observation(
            level,
            reported,
            reported,
            reported,
            spread,
            binding.correction_log_sd,
            True,
            tuple(steps),
            (caveat,),
            scale,
        )
    if level.kind == "free":
        working = reported / binding.free_fraction
        steps.append(
            f"normalised total = free / {show_number(binding.free_fraction)} = {shown} / "
            f"{show_number(binding.free_fraction)} = {show(working, 'mg/L', 4)}"
        )
        return Observation(level, working, working, working, spread, 0.0, True, tuple(steps), (), scale)
    if case.answer("renal_failure") == "yes" or case.answer("valproate") == "yes":
        low, high, more = _readings(reported, level, case, profile, albumin)
        middle = math.sqrt(low * high)
        return Observation(level, middle, low, high, spread, 0.0, False, (*steps, *more), (), scale)
    if albumin is None:
        return Observation(level, reported, reported, reported, spread, 0.0, True, tuple(steps), (), scale)
    working = float(
        formulas.normalised_total(
            total_mg_per_L=reported,
            albumin_g_per_L=albumin.g_per_L,
            coefficient_dL_per_g=binding.albumin_coefficient,
        )
    )
    corrected = working != reported
    if corrected:
        g_dl = albumin.g_per_L / 10
        steps.append(
            f"normalised total = total / ({show_number(coefficient)} x albumin + 0.1) = {shown} / "
            f"({show_number(coefficient)} x {show_number(g_dl)} g/dL + 0.1) = {show(working, 'mg/L', 4)}"
        )
    else:
        steps.append(f"albumin {show(albumin.g_per_L, 'g/L')}: no correction needed")
    log_sd = binding.correction_log_sd if corrected else 0.0
    return Observation(level, working, working, working, spread, log_sd, True, tuple(steps), (), scale)


def _readings(
    total: float, level: Level, case: Case, profile: Profile, albumin: Albumin | None
) -> tuple[float, float, list[str]]:
    """The range of normalised totals where the binding equation cannot be trusted."""
    binding = profile.binding
    assert binding is not None
    readings: list[tuple[float, str]] = []
    if case.answer("renal_failure") == "yes":
        for coefficient in binding.renal_failure_coefficients:
            if albumin is not None:
                value = float(
                    formulas.normalised_total(
                        total_mg_per_L=total,
                        albumin_g_per_L=albumin.g_per_L,
                        coefficient_dL_per_g=coefficient,
                    )
                )
                readings.append((value, f"coefficient {show_number(coefficient)}: {show(value, 'mg/L')}"))
    if case.answer("valproate") == "yes" and level.valproate_mg_per_L is not None:
        for name, free in formulas.free_with_valproate(
            total_mg_per_L=total, valproate_mg_per_L=level.valproate_mg_per_L
        ).items():
            value = float(free) / binding.free_fraction
            readings.append(
                (value, f"{name}: free {show(float(free), 'mg/L')}, normalised {show(value, 'mg/L')}")
            )
    if not readings:
        readings = [
            (total, f"as measured: {show(total, 'mg/L')}"),
            (total * 2, f"free fraction doubled: {show(total * 2, 'mg/L')}"),
        ]
    values = [v for v, _ in readings]
    return min(values), max(values), ["possible readings: " + "; ".join(w for _, w in readings)]


def everyday_cv(profile: Profile, site: Site, assay_cv: float) -> float:
    """What is left of the total spread under observed dosing once the assay is taken out of it."""
    total = site.level_total_cv("observed") or profile.spread.total_cv["observed"]
    return math.sqrt(max(total**2 - assay_cv**2, 0.0))


def lab_scale(case: Case, profile: Profile, site: Site, albumin: Albumin | None) -> LabScale:
    """The scale on which the laboratory will report this patient's next level."""
    binding = profile.binding
    if binding is None:
        return LabScale(1.0, 1.0, "reported as measured")
    if albumin is None:
        return LabScale(1.0, binding.free_fraction, "total as the laboratory reports it if albumin is normal")
    factor = float(
        formulas.binding_denominator(
            albumin_g_per_L=albumin.g_per_L, coefficient_dL_per_g=binding.albumin_coefficient
        )
    )
    factor = min(factor, 1.0)
    words = f"total as the laboratory reports it at albumin {show(albumin.g_per_L, 'g/L')}"
    return LabScale(factor, binding.free_fraction, words)
