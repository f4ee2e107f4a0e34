"""Drug knowledge as data: reads one TOML file per drug and refuses any number without a source.

The strict reader of `table` turns every sourced number into a plain float in its canonical unit and keeps the
original as a `Fact`, so that notes can say where it came from. Records are frozen, their names carry the unit,
and nothing here knows a drug.
"""

from __future__ import annotations

import difflib
import hashlib
import itertools
import math
import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from importlib import resources
from typing import Any, Literal, cast

from pkcalc import formulas
from pkcalc.drugs.questions import Question, common_questions, read_question
from pkcalc.drugs.table import Fact, Table
from pkcalc.errors import CaseError, DrugFileError, Problem
from pkcalc.sources import Source, Status, all_sources
from pkcalc.units import FACTORS, show, show_number

Scope = Literal["dosing", "dosing with expert sign-off", "projection only", "teaching only"]
SCOPES: tuple[Scope, ...] = ("dosing", "dosing with expert sign-off", "projection only", "teaching only")
Sex = Literal["female", "male", "unknown"]


@dataclass(frozen=True)
class Absorption:
    """After the lag, release at a constant rate, then first-order uptake. peak_h: published peak times."""

    ka_per_day: float
    lag_day: float
    release_day: float
    peak_h: tuple[float, float]


@dataclass(frozen=True)
class Form:
    """A product form, or a salt given as a plain rate (generic). Amounts are labelled amounts in amount_unit.

    Active drug = amount x salt_factor x bioavailability. absorption: None for a dose into a vein, or a rate.
    intervals_h: dosing intervals allowed. largest_dose_mg: more in one dose is taken for a slip.
    refused_routes: route -> why it is refused. conversion_half_life_h: of a prodrug, else None.
    """

    id: str
    words: str
    salt: str
    amount_unit: str
    salt_factor: float
    bioavailability: float
    bioavailability_range: tuple[float, float]
    routes: tuple[str, ...]
    absorption: Absorption | None
    release: Literal["prompt", "extended", "intravenous", "none"]
    generic: bool
    intervals_h: tuple[float, ...]
    largest_dose_mg: float
    refused_routes: Mapping[str, str]
    conversion_half_life_h: float | None

    @property
    def route(self) -> str:
        return self.routes[0]

    @property
    def active_fraction(self) -> float:
        """Active drug reaching the body per labelled mg."""
        return self.salt_factor * self.bioavailability


@dataclass(frozen=True)
class Product:
    """One thing on a shelf: a capsule, a tablet, or a liquid counted in mL.

    mg_per_unit: labelled mg (or mg PE) per capsule, tablet or mL.
    smallest_step: of a unit (0.5 tablet, 0.5 mL). containers_mL: vial or bottle sizes of liquids.
    strength_basis: "v/v" or "w/v" where a strength in per cent could mean either; percent is then that strength.
    """

    id: str
    words: str
    form: str
    unit: str
    mg_per_unit: float
    smallest_step: float
    containers_mL: tuple[float, ...]
    strength_words: str
    strength_basis: str
    percent: float | None
    exclusive_group: str


@dataclass(frozen=True)
class Shelf:
    """A generic country shelf: product ids. Of an exclusive group only one strength is active at a time."""

    id: str
    words: str
    products: tuple[str, ...]


@dataclass(frozen=True)
class Target:
    """The target range and the critical level, on the working basis; free_* where a free level is used.

    told_up_to_mg_per_L: a forecast level above it stands in words ("above ..."), not as a number.
    """

    basis: str
    low_mg_per_L: float
    high_mg_per_L: float
    aim_mg_per_L: float
    critical_mg_per_L: float
    told_up_to_mg_per_L: float
    free_low_mg_per_L: float | None
    free_high_mg_per_L: float | None
    free_critical_mg_per_L: float | None

    def most_told(self, critical_mg_per_L: float) -> float:
        """The highest forecast level told in numbers; never below the critical level in use, which a site may raise."""
        return max(self.told_up_to_mg_per_L, critical_mg_per_L)


@dataclass(frozen=True)
class Spread:
    """Spread of a level. total_cv and intake_share by who gives the doses: observed, outpatient, doubtful.

    own_cv: what assay, everyday variation and the moment of the draw make of a level, intake apart; the total under
    observed dosing where the file does not say.
    intake_share: share of doses that differ from the record. wrong_level_chance: chance that a level is
    simply wrong (its spread is then multiplied by wrong_level_factor).
    """

    assay_cv: float
    assay_cv_range: tuple[float, float]
    total_cv: Mapping[str, float]
    own_cv: float
    intake_share: Mapping[str, float]
    wrong_level_chance: float
    wrong_level_factor: float


@dataclass(frozen=True)
class Alternative:
    """A revised albumin coefficient, shown beside the one in use and labelled unvalidated."""

    id: str
    words: str
    coefficient_dL_per_g: float
    status: Status


@dataclass(frozen=True)
class Displacement:
    """A published free fraction under a displacing drug: intercept + slope x its level [mg/L].

    drug: the displacing drug, which is also the context question that asks about it and one of the other levels.
    """

    id: str
    words: str
    drug: str
    intercept: float
    slope_per_mg_per_L: float

    def free_mg_per_L(self, total_mg_per_L: float, displacer_mg_per_L: float) -> float:
        """The free level at a total level and a level of the displacing drug."""
        return total_mg_per_L * (self.intercept + self.slope_per_mg_per_L * displacer_mg_per_L)


@dataclass(frozen=True)
class Binding:
    """How a total level is read at abnormal binding.

    normalised total = total / (albumin_coefficient x albumin + constant), albumin in g/dL, only below the
    albumin at which the denominator is 1. correction_log_sd: what the correction itself adds to the spread.
    renal_failure_coefficients: their results are shown as a range, never used silently.
    """

    free_fraction: float
    free_fraction_range: tuple[float, float]
    albumin_coefficient: float
    constant: float
    correction_log_sd: float
    alternatives: tuple[Alternative, ...]
    renal_failure_coefficients: tuple[float, float]
    renal_failure_mL_per_min: float
    renal_grey_mL_per_min: float
    albumin_gate_g_per_L: tuple[float, float]
    albumin_oldest_h: float
    albumin_bcg_minus_bcp_g_per_L: float
    displacements: tuple[Displacement, ...]

    @property
    def break_point_g_per_L(self) -> float:
        """The albumin at which the denominator is 1; at or above it no correction is made."""
        return 10.0 * (1.0 - self.constant) / self.albumin_coefficient


@dataclass(frozen=True)
class RateCap:
    """The fastest infusion of a form for a group of patients; the slower of the two limits counts.

    highest_*: the published maximum, up to which a site may go.
    """

    form: str
    group: str
    words: str
    mg_per_min: float
    mg_per_kg_min: float | None
    highest_mg_per_min: float
    highest_mg_per_kg_min: float | None


@dataclass(frozen=True)
class LargeOral:
    """Published peak times of large single amounts by mouth: the larger the amount, the later the peak."""

    amounts_mg: tuple[float, ...]
    peaks_h: tuple[float, ...]
    words: str

    def peak_h(self, amount_mg: float) -> float | None:
        """Peak time of an amount taken at once, straight between the published ones and held at the last; None below
        the first."""
        if amount_mg < self.amounts_mg[0] * (1 - 1e-9):
            return None
        pairs = list(itertools.pairwise(zip(self.amounts_mg, self.peaks_h, strict=True)))
        for (a, early), (b, late) in pairs:
            if amount_mg <= b:
                return early + (late - early) * max(amount_mg - a, 0.0) / (b - a)
        return self.peaks_h[-1]


@dataclass(frozen=True)
class OralLoad:
    """A load by mouth: split parts, hours apart, and who must not have it. Amounts are of `form`, labelled."""

    form: str
    total_mg: float
    parts_mg: tuple[float, ...]
    hours_apart: float
    largest_part_mg: float
    excluded: tuple[str, ...]
    setting: str
    maintenance_after_h: float


@dataclass(frozen=True)
class IvLine:
    """What a complete order into a vein must say, for one form."""

    form: str
    diluent: str
    concentration_mg_per_mL: tuple[float, float]
    filter: str
    monitoring: str
    contraindications: tuple[str, ...]
    watch: str


@dataclass(frozen=True)
class Loading:
    """Loads and top-ups: per kg, ceiling on a single load, caps, oral loads, IV order lines.

    status_*: the larger load of an emergency, and its words.
    """

    mg_per_kg: tuple[float, float]
    status_mg_per_kg: tuple[float, float] | None
    status_words: str
    largest_single_mg: float
    rate_caps: tuple[RateCap, ...]
    oral: OralLoad | None
    iv_lines: Mapping[str, IvLine]


@dataclass(frozen=True)
class StepBand:
    """Below this level (None: no upper bound) at most this step of the daily dose."""

    below_mg_per_L: float | None
    largest_step_mg_per_day: float


@dataclass(frozen=True)
class Limits:
    """Upper bounds of maintenance: steps by present level, and the largest daily dose."""

    steps: tuple[StepBand, ...]
    largest_mg_per_day: float
    largest_child_mg_per_day: float | None
    step_form: str

    def largest_step(self, level_mg_per_L: float) -> float:
        """The largest step [labelled mg/day of step_form] at a present steady level."""
        for step in self.steps:
            if step.below_mg_per_L is None or level_mg_per_L < step.below_mg_per_L:
                return step.largest_step_mg_per_day
        raise AssertionError("the last step band has no upper bound")


@dataclass(frozen=True)
class Sampling:
    """How long after a dose a level may be drawn, how long before a change shows, how often under infusion.

    0 where the drug file states no wait for the route.
    """

    after_iv_h: float
    after_im_h: float
    after_oral_load_h: float
    steady_wait_days: tuple[float, float]
    repeat_h: tuple[float, float] | None


@dataclass(frozen=True)
class Plausible:
    """Published ranges; an estimate outside them is warned about."""

    ages_years: tuple[float, float]
    vmax_mg_per_kg_day: tuple[float, float]
    km_mg_per_L: tuple[float, float]


@dataclass(frozen=True)
class Interactions:
    """Drugs that raise, lower, or move the level either way when started or stopped, and the wait in days."""

    raising: tuple[str, ...]
    lowering: tuple[str, ...]
    either: tuple[str, ...]
    wait_days: float


@dataclass(frozen=True)
class Code:
    """One laboratory code with its expected display name: what it measures and on which basis."""

    code: str
    display: str
    measures: str
    unit_kind: Literal["mass", "moles", "share"]


@dataclass(frozen=True)
class MedicationCode:
    """One code of a product catalogue. form: the form it stands for; "" where it does not tell the salt."""

    system: str
    code: str
    display: str
    form: str


@dataclass(frozen=True)
class OtherLevel:
    """The level of another drug that is entered with a level of this one. gate_mg_per_L: others are slips."""

    id: str
    words: str
    gate_mg_per_L: tuple[float, float]


@dataclass(frozen=True)
class Withdrawal:
    """What pausing or stopping the drug can bring on, said wherever a pause is shown.

    risk: a sentence. one_sign, signs: what it shows by, in the singular and the plural.
    """

    risk: str
    one_sign: str
    signs: str


@dataclass(frozen=True)
class Dialysis:
    """Clearance of the drug by dialysis [L/day]: what is taken where none is given, published range, entry check."""

    clearance_L_per_day: float
    range_L_per_day: tuple[float, float]
    gate_L_per_day: tuple[float, float]


@dataclass(frozen=True)
class Modifier:
    """A named change to a population's typical values for patients it describes poorly.

    ages_years: applied without asking inside these ages. question: the context question whose "yes" calls it.
    vmax_mg_per_kg_day: replaces the population's own (at its reference weight).
    """

    id: str
    words: str
    ages_years: tuple[float, float] | None
    question: str
    vmax_factor: float
    km_factor: float
    vmax_mg_per_kg_day: float | None
    vmax_cv: float | None
    km_cv: float | None
    volume_cv: float | None


@dataclass(frozen=True)
class WeightRule:
    """Which weight is used in obesity (adults with a height), and the cap where no height is known."""

    obese_from: float
    vmax_excess_share: float
    volume_excess_factor: float
    cap_without_height_kg: float


@dataclass(frozen=True)
class Prior:
    """A population at one patient: log-normal medians and log-scale spreads, absolute units.

    correlation: between log Vmax and log Km. first_order_per_day: parallel first-order path (0 where none).
    used: sentences saying which weight and which modifiers were used. sources: keys.
    """

    population: str
    words: str
    vmax_mg_per_day: float
    km_mg_per_L: float
    volume_L: float
    vmax_log_sd: float
    km_log_sd: float
    volume_log_sd: float
    correlation: float
    first_order_per_day: float
    first_order_log_sd: float
    used: tuple[str, ...]
    sources: tuple[str, ...]


@dataclass(frozen=True)
class Population:
    """A named set of typical values with its spreads, who it describes, and how it scales with weight."""

    id: str
    words: str
    describes: str
    default: bool
    ages_years: tuple[float, float]
    vmax_at_reference_mg_per_day: float
    reference_weight_kg: float
    exponent_below: float
    exponent_above: float
    km_mg_per_L: float
    volume_L_per_kg: float
    vmax_cv: float
    km_cv: float
    volume_cv: float
    correlation: float
    first_order_per_day: float
    first_order_cv: float
    modifiers: Mapping[str, Modifier]
    weight_rule: WeightRule | None
    sources: tuple[str, ...]

    def at(
        self,
        weight_kg: float,
        age_years: float | None = None,
        *,
        height_cm: float | None = None,
        sex: Sex = "unknown",
        modifiers: tuple[str, ...] = (),
        without: tuple[str, ...] = (),
    ) -> Prior:
        """The population at this patient.

        modifiers: ids switched on by the caller; those with an age range join by themselves unless named in
        `without`. Refuses an age outside the population's own and a modifier it does not know.
        """
        self._refuse(weight_kg, age_years, modifiers, without)
        chosen = [
            m
            for m in self.modifiers.values()
            if m.id not in without
            and (m.id in modifiers or (age_years is not None and m.ages_years and _inside(age_years, m.ages_years)))
        ]
        used: list[str] = []
        vmax_weight, volume_weight = self._weights(weight_kg, age_years, height_cm, sex, used)
        vmax_reference = self.vmax_at_reference_mg_per_day
        km, vmax_cv, km_cv, volume_cv = self.km_mg_per_L, self.vmax_cv, self.km_cv, self.volume_cv
        for m in chosen:
            if m.vmax_mg_per_kg_day is not None:
                vmax_reference = m.vmax_mg_per_kg_day * self.reference_weight_kg
            used.append(m.words)
        for m in chosen:
            vmax_reference *= m.vmax_factor
            km *= m.km_factor
            vmax_cv = max(vmax_cv, m.vmax_cv or 0.0)
            km_cv = max(km_cv, m.km_cv or 0.0)
            volume_cv = max(volume_cv, m.volume_cv or 0.0)
        ratio = vmax_weight / self.reference_weight_kg
        exponent = self.exponent_below if ratio < 1 else self.exponent_above
        if age_years is None:
            used.append("The age is not stated: no adjustment for age was made.")
        return Prior(
            population=self.id,
            words=self.words,
            vmax_mg_per_day=vmax_reference * ratio**exponent,
            km_mg_per_L=km,
            volume_L=self.volume_L_per_kg * volume_weight,
            vmax_log_sd=log_sd(vmax_cv),
            km_log_sd=log_sd(km_cv),
            volume_log_sd=log_sd(volume_cv),
            correlation=self.correlation,
            first_order_per_day=self.first_order_per_day,
            first_order_log_sd=log_sd(self.first_order_cv),
            used=tuple(used),
            sources=self.sources,
        )

    def _refuse(
        self, weight_kg: float, age_years: float | None, modifiers: tuple[str, ...], without: tuple[str, ...]
    ) -> None:
        problems = []
        if not (math.isfinite(weight_kg) and 0 < weight_kg <= 500):
            given = f"{show_number(weight_kg)} kg" if math.isfinite(weight_kg) else "no number"
            problems.append(
                Problem(
                    "Weight",
                    f"{given} was given",
                    "above 0 and up to 500 kg",
                    "Check the weight and its unit",
                )
            )
        if age_years is not None and not _inside(age_years, self.ages_years):
            low, high = self.ages_years
            problems.append(
                Problem(
                    "Age",
                    f"{show_number(age_years)} years was given for the population {self.id}",
                    f"from {show_number(low)} to under {show_number(high)} years",
                    "Choose a population that describes this age",
                )
            )
        for name in (*modifiers, *without):
            if name not in self.modifiers:
                problems.append(
                    Problem(
                        "Population",
                        f'the adjustment "{name}" was given for the population {self.id}',
                        ", ".join(self.modifiers) or "none for this population",
                        "Leave it out or choose another population",
                    )
                )
        if problems:
            raise CaseError(problems)

    def _weights(
        self, weight_kg: float, age_years: float | None, height_cm: float | None, sex: Sex, used: list[str]
    ) -> tuple[float, float]:
        """Weights used for Vmax and for the volume, and a sentence saying which."""
        rule, shown = self.weight_rule, show_number(weight_kg)
        if rule is None or (age_years is not None and age_years < 18):
            used.append(f"Weight used: {shown} kg, as given.")
            return weight_kg, weight_kg
        if height_cm is None or sex == "unknown":
            capped = min(weight_kg, rule.cap_without_height_kg)
            if capped < weight_kg:
                used.append(f"Weight used: {show_number(capped)} kg of {shown} kg; height or sex is not stated.")
            else:
                used.append(f"Weight used: {shown} kg, as given.")
            return capped, capped
        ideal = float(formulas.ideal_body_weight(height_cm=height_cm, sex=sex))
        if weight_kg <= rule.obese_from * ideal:
            used.append(f"Weight used: {shown} kg, as given.")
            return weight_kg, weight_kg
        vmax_weight = rule.obese_from * ideal + rule.vmax_excess_share * (weight_kg - rule.obese_from * ideal)
        volume_weight = float(
            formulas.weight_with_excess(
                weight_kg=weight_kg, ideal_weight_kg=ideal, excess_factor=rule.volume_excess_factor
            )
        )
        used.append(
            f"Obesity: of {shown} kg (ideal {show_number(ideal)} kg), {show_number(vmax_weight)} kg was used "
            f"for Vmax and {show_number(volume_weight)} kg for the volume."
        )
        return vmax_weight, volume_weight


def log_sd(cv: float) -> float:
    """Log-scale standard deviation of a log-normal spread with this coefficient of variation."""
    return math.sqrt(math.log1p(cv * cv))


@dataclass(frozen=True)
class Profile:
    """One drug: everything the calculations need, each number traceable through `facts`.

    questions: every context question that a case of this drug may answer; asked: those that matter, in order.
    density_g_per_mL: of a liquid drug whose strengths are labelled in per cent. urgent: what never waits for a note
    about this drug.
    """

    id: str
    name: str
    names: tuple[str, ...]
    scope: Scope
    scope_reason: str
    authority: str
    time_unit: Literal["day", "h"]
    level_units: tuple[str, ...]
    questions: Mapping[str, Question]
    asked: tuple[str, ...]
    urgent: str
    density_g_per_mL: float | None
    molar_mass_g_per_mol: float
    forms: Mapping[str, Form]
    products: Mapping[str, Product]
    shelves: Mapping[str, Shelf]
    target: Target
    level_gates_mg_per_L: Mapping[str, tuple[float, float]]
    spread: Spread
    binding: Binding | None
    other_levels: Mapping[str, OtherLevel]
    withdrawal: Withdrawal | None
    populations: Mapping[str, Population]
    modifiers: Mapping[str, Modifier]
    weight_rule: WeightRule | None
    youngest_years: float
    choose_population: bool
    loading: Loading | None
    limits: Limits | None
    sampling: Sampling
    plausible: tuple[Plausible, ...]
    interactions: Interactions
    codes: tuple[Code, ...]
    medications: tuple[MedicationCode, ...]
    large_oral: LargeOral | None
    dialysis: Dialysis | None
    cautions: Mapping[str, Any]
    facts: Mapping[str, Fact]
    file: str
    sha256: str

    @property
    def display(self) -> str:
        return self.name

    @property
    def rate_unit(self) -> str:
        """The unit in which rates of active drug are told: by the hour or by the day."""
        return "mg/h" if self.time_unit == "h" else "mg/day"

    def rate(self, mg_per_day: float) -> float:
        """A rate of active drug in the drug's own time unit."""
        return mg_per_day / 24 if self.time_unit == "h" else mg_per_day

    def show_rate(self, mg_per_day: float, digits: int = 3) -> str:
        """'300 mg/day', or '7,000 mg/h' for a drug told by the hour."""
        return show(self.rate(mg_per_day), self.rate_unit, digits)

    def fact(self, path: str) -> Fact:
        """Where one number came from: `fact("binding.free_fraction")`."""
        return self.facts[path]

    def level_gate_mg_per_L(self, kind: str) -> tuple[float, float]:
        """The levels that can be real, for "total", "free" or "normalised"; others are slips."""
        return self.level_gates_mg_per_L.get(kind, self.level_gates_mg_per_L["total"])

    def plausible_at(self, age_years: float | None) -> Plausible:
        """The published ranges for this age (adults where the age is not stated)."""
        age = 40.0 if age_years is None else age_years
        return next((p for p in self.plausible if _inside(age, p.ages_years)), self.plausible[-1])

    def default_population(self, age_years: float | None) -> Population:
        """The population used unless another is chosen. Refuses ages for which none is defensible."""
        if age_years is not None and age_years < self.youngest_years:
            raise CaseError(
                Problem(
                    "Age",
                    f"{show_number(age_years)} years was given",
                    f"{show_number(self.youngest_years)} years or older for {self.name}",
                    "Elimination changes too fast at this age: ask a specialist and go by measured levels",
                )
            )
        if self.choose_population:
            raise CaseError(
                Problem("Population", "none was chosen", ", ".join(self.populations), "Choose the one that fits")
            )
        age = 40.0 if age_years is None else age_years
        for population in self.populations.values():
            if population.default and _inside(age, population.ages_years):
                return population
        raise CaseError(
            Problem(
                "Age",
                f"{show_number(age)} years was given",
                "an age that a population of this drug describes",
                "Check the age, or choose a population by name",
            )
        )

    def sources_used(self) -> tuple[Source, ...]:
        """Every source the drug file cites, in the order of its first use."""
        keys = dict.fromkeys(key for fact in self.facts.values() for key in fact.sources)
        keys |= dict.fromkeys(str(rule["source"]) for rule in self.cautions.values())
        return tuple(all_sources()[key] for key in keys)


def _inside(age: float, ages: tuple[float, float]) -> bool:
    return ages[0] <= age < ages[1]


# Reading


def drug_names() -> tuple[str, ...]:
    """The drugs there is a file for."""
    folder = resources.files("pkcalc.drugs")
    names = (p.name for p in folder.iterdir())
    return tuple(sorted(n[:-5] for n in names if n.endswith(".toml") and not n.startswith("_")))


def every_question() -> tuple[str, ...]:
    """The questions of any drug, and of each drug alone."""
    return tuple(dict.fromkeys((*common_questions(), *(q for n in drug_names() for q in load_profile(n).questions))))


@cache
def load_profile(name: str) -> Profile:
    """The profile of one drug, checked. An unknown name is the user's slip; a bad file is a maintainer's."""
    if name not in drug_names():
        near = difflib.get_close_matches(name, drug_names(), n=1, cutoff=0.5)
        fix = f'Did you mean "{near[0]}"?' if near else "Choose one of these"
        raise CaseError(Problem("Drug", f'"{name[:40]}" was given', ", ".join(drug_names()), fix))
    text = resources.files("pkcalc.drugs").joinpath(f"{name}.toml").read_text(encoding="utf-8")
    return parse_profile(text, f"{name}.toml")


def parse_profile(text: str, file: str) -> Profile:
    """One drug file. Refuses missing, unsourced, unknown and impossible entries, naming file, key and fix."""
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise DrugFileError(f"{file}: the file is not valid TOML ({error}). Mend it there.") from None
    facts: dict[str, Fact] = {}
    top = Table(file, "", data, facts)
    drug = top.table("drug")
    molar_mass, youngest = drug.number("molar_mass", "molar mass"), drug.number("youngest", "age", zero=True)
    density = drug.maybe("density", "density")
    forms = top.each("form", _form)
    if not forms:
        raise top.fail("form", "missing", "Add at least one form")
    products = top.each("product", lambda name, t: _product(name, t, forms, density))
    shelves = top.each("shelf", lambda name, t: _shelf(name, t, products))
    modifiers = top.each("modifier", _modifier)
    weight_rule = _weight_rule(top.table("weight_rule")) if top.has("weight_rule") else None
    populations = top.each("population", lambda name, t: _population(name, t, modifiers, weight_rule))
    if not populations:
        raise top.fail("population", "missing", "Add at least one population")
    scope = cast(Scope, drug.choice("scope", SCOPES))
    questions, asked = _questions(drug.texts("questions", ()), top.each("question", read_question), drug)
    profile = Profile(
        id=drug.text("id"),
        name=drug.text("name"),
        names=drug.texts("names"),
        scope=scope,
        scope_reason=drug.text("scope_reason"),
        authority=drug.text("authority"),
        time_unit=cast(Literal["day", "h"], drug.choice("time_unit", ("day", "h"))),
        level_units=drug.texts("level_units"),
        questions=questions,
        asked=asked,
        urgent=drug.text("urgent", ""),
        density_g_per_mL=density,
        molar_mass_g_per_mol=molar_mass,
        youngest_years=youngest,
        choose_population=drug.switch("choose_population"),
        forms=forms,
        products=products,
        shelves=shelves,
        target=_target(top.table("target")),
        level_gates_mg_per_L=_gates(top.table("level_gate")),
        spread=_spread(top.table("spread")),
        binding=_binding(top.table("binding")) if top.has("binding") else None,
        other_levels=top.each("other_level", _other_level),
        withdrawal=_withdrawal(top.table("withdrawal")) if top.has("withdrawal") else None,
        populations=populations,
        modifiers=modifiers,
        weight_rule=weight_rule,
        loading=_loading(top.table("loading"), forms) if top.has("loading") else None,
        limits=_limits(top.table("limits"), forms) if top.has("limits") else None,
        sampling=_sampling(top.table("sampling")),
        plausible=tuple(top.each("plausible", _plausible).values()),
        interactions=_interactions(top.table("interactions")),
        codes=tuple(top.each("code", _code).values()),
        medications=tuple(top.each("medication", lambda name, t: _medication(t, forms)).values()),
        large_oral=_large_oral(top.table("large_oral")) if top.has("large_oral") else None,
        dialysis=_dialysis(top.table("dialysis")) if top.has("dialysis") else None,
        cautions=cast(Mapping[str, Any], top.data.get("caution", {}) if top.has("caution") else {}),
        facts=facts,
        file=file,
        sha256=hashlib.sha256(text.encode()).hexdigest(),
    )
    drug.done()
    top.done()
    _consistent(profile, top)
    return profile


def _consistent(profile: Profile, top: Table) -> None:
    """What one entry alone cannot show."""
    if profile.id != profile.file.removesuffix(".toml"):
        raise top.fail("drug.id", f'"{profile.id}" was found', "It must be the name of the file")
    for label in profile.level_units:
        if label not in FACTORS["level"]:
            raise top.fail("drug.level_units", f'"{label}" was found', "Use units of a level only")
    for d in profile.binding.displacements if profile.binding is not None else ():
        where = f"binding.displacement.{d.id}.drug"
        if d.drug not in profile.other_levels:
            raise top.fail(where, f'no level of "{d.drug}" is asked for', f"Add [other_level.{d.drug}]")
        if d.drug not in profile.asked:
            raise top.fail(where, f'no question asks about "{d.drug}"', f"Add [question.{d.drug}]")
    for modifier in profile.modifiers.values():
        if modifier.question and modifier.question not in profile.questions:
            where = f"modifier.{modifier.id}.question"
            raise top.fail(where, f'"{modifier.question}" is not a question', "Add it or mend its name")
    if not profile.plausible:
        raise top.fail("plausible", "missing", "Add the published ranges of Vmax per kg and Km")
    spans = sorted(p.ages_years for p in profile.populations.values() if p.default)
    if profile.choose_population:
        if spans:
            raise top.fail("drug.choose_population", "a default population is marked too", "Take one of the two out")
        return
    if not spans:
        raise top.fail("population", "none is the default", "Mark one with default = true")
    for (_, end), (start, _) in itertools.pairwise(spans):
        if end != start:
            raise top.fail(
                "population",
                f"the default populations leave a gap or overlap at {show_number(end)} years",
                "Make their ages meet",
            )
    if spans[0][0] > profile.youngest_years:
        raise top.fail("drug.youngest", "younger than any default population", "Make them meet")


def _questions(
    listed: tuple[str, ...], own: Mapping[str, Question], drug: Table
) -> tuple[dict[str, Question], tuple[str, ...]]:
    """Every question that may be answered, those that matter first, and the ids of those."""
    known = {**common_questions(), **own}
    asked = listed or tuple(known)
    for name in asked:
        if name not in known:
            near = difflib.get_close_matches(name, known, n=1)
            fix = f'Perhaps "{near[0]}" is meant' if near else f"Add [question.{name}]"
            raise drug.fail("questions", f'"{name}" is not a question', fix)
    for name in own:
        if name not in asked:
            raise drug.fail("questions", f'"{name}" has words but is not asked', "Add it to the list")
    return {name: known[name] for name in (*asked, *(k for k in known if k not in asked))}, asked


def _other_level(name: str, t: Table) -> OtherLevel:
    return OtherLevel(name, t.text("words"), t.span("gate", "level"))


def _withdrawal(t: Table) -> Withdrawal:
    found = Withdrawal(t.text("risk"), t.text("one_sign"), t.text("signs"))
    t.done()
    return found


def _form(name: str, t: Table) -> Form:
    generic = t.switch("generic")
    release = cast(
        Literal["prompt", "extended", "intravenous", "none"],
        t.choice("release", ("prompt", "extended", "intravenous", "none")),
    )
    absorbed = release in ("prompt", "extended")
    refused = t.table("refused_route") if t.has("refused_route") else None
    routes_refused = {key: refused.statement(key) for key in refused.data} if refused else {}
    bioavailability = t.share("bioavailability")
    span = t.span("bioavailability_range", "share")
    if not span[0] <= bioavailability <= span[1]:
        raise t.fail("bioavailability", "outside its own range", "Mend one of the two")
    return Form(
        id=name,
        words=t.text("words"),
        salt=t.text("salt"),
        amount_unit=t.choice("amount_unit", ("mg", "mg PE")),
        salt_factor=t.share("salt_factor"),
        bioavailability=bioavailability,
        bioavailability_range=span,
        routes=t.texts("routes"),
        absorption=_absorption(t.table("absorption")) if absorbed else None,
        release=release,
        generic=generic,
        intervals_h=() if generic else t.several("intervals", "interval"),
        largest_dose_mg=t.number("largest_dose", "amount"),
        refused_routes=routes_refused,
        conversion_half_life_h=None if (half := t.maybe("conversion_half_life", "duration")) is None else half * 24,
    )


def _absorption(t: Table) -> Absorption:
    found = Absorption(
        ka_per_day=t.number("ka", "rate constant"),
        lag_day=t.number("lag", "duration", zero=True),
        release_day=t.number("release", "duration", zero=True),
        peak_h=t.span("peak", "interval"),
    )
    t.done()
    return found


def _large_oral(t: Table) -> LargeOral:
    found = LargeOral(
        amounts_mg=t.several("amounts", "amount"),
        peaks_h=t.several("peaks", "interval"),
        words=t.text("words"),
    )
    t.done()
    for name, values in (("amounts", found.amounts_mg), ("peaks", found.peaks_h)):
        if any(b <= a for a, b in itertools.pairwise(values)):
            raise t.fail(name, "not rising", "List them from the smallest to the largest")
    if len(found.amounts_mg) != len(found.peaks_h):
        raise t.fail("peaks", "not one for each amount", "Give one peak time for each amount")
    return found


def _product(name: str, t: Table, forms: Mapping[str, Form], density_g_per_mL: float | None) -> Product:
    form = t.text("form")
    if form not in forms or forms[form].generic:
        raise t.fail("form", f'"{form}" is not a product form', "Name one of the forms above")
    strength, percent = t.number("strength", "strength"), t.maybe("percent", "share")
    basis = t.choice("strength_basis", ("v/v", "w/v")) if t.has("strength_basis") else ""
    if percent is not None:
        _strength_fits(t, percent, basis, strength, density_g_per_mL)
    return Product(
        id=name,
        words=t.text("words"),
        form=form,
        unit=t.choice("unit", ("capsule", "tablet", "mL")),
        mg_per_unit=strength,
        smallest_step=t.number("smallest_step", "ratio"),
        containers_mL=t.several("containers", "fluid volume") if t.has("containers") else (),
        strength_words=t.text("strength_words"),
        strength_basis=basis,
        percent=percent,
        exclusive_group=t.text("exclusive_group", ""),
    )


def _strength_fits(t: Table, percent: float, basis: str, mg_per_mL: float, density_g_per_mL: float | None) -> None:
    """A strength in per cent holds 10 mg/mL for each per cent w/v, density times that for each per cent v/v."""
    if not basis:
        raise t.fail("strength_basis", "missing beside a strength in per cent", "Write v/v or w/v")
    if basis == "v/v" and density_g_per_mL is None:
        raise t.fail("percent", "% v/v without the density of the drug", "Add drug.density")
    expected = 1000 * percent * (density_g_per_mL if basis == "v/v" and density_g_per_mL else 1.0)
    if not math.isclose(mg_per_mL, expected, rel_tol=1e-3):
        raise t.fail(
            "strength",
            f"{show_number(mg_per_mL, 6)} mg/mL, but {show_number(100 * percent)} % {basis} holds "
            f"{show_number(expected, 6)} mg/mL",
            "Mend the strength, the per cent, or its basis",
        )


def _shelf(name: str, t: Table, products: Mapping[str, Product]) -> Shelf:
    listed = t.statements("products")
    for item in listed:
        if item not in products:
            raise t.fail("products", f'"{item}" is not a product of this file', "Add the product or mend its name")
    groups = [products[i].exclusive_group for i in listed if products[i].exclusive_group]
    if len(groups) != len(set(groups)):
        raise t.fail(
            "products",
            "two strengths that must not be active together stand on one shelf",
            "Take one of them out",
        )
    return Shelf(id=name, words=t.text("words"), products=listed)


def _modifier(name: str, t: Table) -> Modifier:
    found = Modifier(
        id=name,
        words=t.text("words"),
        ages_years=t.span("ages", "age") if t.has("ages") else None,
        question=t.text("question", ""),
        vmax_factor=t.maybe("vmax_factor", "factor") or 1.0,
        km_factor=t.maybe("km_factor", "factor") or 1.0,
        vmax_mg_per_kg_day=t.maybe("vmax", "dose rate per weight"),
        vmax_cv=t.maybe("vmax_cv", "share"),
        km_cv=t.maybe("km_cv", "share"),
        volume_cv=t.maybe("volume_cv", "share"),
    )
    t.has("describes") and t.statement("describes")
    return found


def _weight_rule(t: Table) -> WeightRule:
    found = WeightRule(
        obese_from=t.number("obese_from", "ratio", low=1.0),
        vmax_excess_share=t.share("vmax_excess_share"),
        volume_excess_factor=t.number("volume_excess_factor", "ratio"),
        cap_without_height_kg=t.number("cap_without_height", "weight"),
    )
    t.done()
    return found


def _population(name: str, t: Table, modifiers: Mapping[str, Modifier], weight_rule: WeightRule | None) -> Population:
    wanted = t.texts("modifiers", ())
    for item in wanted:
        if item not in modifiers:
            raise t.fail("modifiers", f'"{item}" is not a modifier of this file', "Add it or mend its name")
    before = set(t.facts)
    reference = t.number("reference_weight", "weight")
    vmax = t.number("vmax", "vmax")
    if t.data["vmax"]["unit"] in FACTORS["dose rate per weight"]:
        vmax *= reference
    if t.data.get("volume", {}).get("unit") != "L/kg" and t.has("volume"):
        raise t.fail("volume.unit", "not per weight", "Write the volume in L/kg")
    exponent = t.number("weight_exponent", "factor", high=1.0)
    above = t.number("weight_exponent_above", "factor", high=1.0) if t.has("weight_exponent_above") else exponent
    correlation = t._numbers("correlation", "correlation", 1, True)[0]
    if not -1 < correlation < 1:
        raise t.fail("correlation.value", "outside what is possible", "It must be between -1 and 1, ends excluded")
    values = {
        "ages_years": t.span("ages", "age", zero=True),
        "km_mg_per_L": t.number("km", "level"),
        "volume_L_per_kg": t.number("volume", "volume per weight"),
        "vmax_cv": t.number("vmax_cv", "share", high=2.0),
        "km_cv": t.number("km_cv", "share", high=2.0),
        "volume_cv": t.number("volume_cv", "share", high=2.0),
        "first_order_per_day": t.maybe("first_order", "rate constant") or 0.0,
        "first_order_cv": t.maybe("first_order_cv", "share") or 0.0,
    }
    describes = t.statement("describes")
    cited = dict.fromkeys(s for path, fact in t.facts.items() if path not in before for s in fact.sources)
    return Population(
        id=name,
        words=t.text("words"),
        describes=describes,
        default=t.switch("default"),
        vmax_at_reference_mg_per_day=vmax,
        reference_weight_kg=reference,
        exponent_below=exponent,
        exponent_above=above,
        correlation=correlation,
        modifiers={m: modifiers[m] for m in wanted},
        weight_rule=weight_rule,
        sources=tuple(cited),
        **cast(dict[str, Any], values),
    )


def _target(t: Table) -> Target:
    low, high = t.span("range", "level")
    aim, critical = t.number("aim", "level"), t.number("critical", "level")
    told_up_to = t.number("told_up_to", "level")
    if not low <= aim <= high <= critical <= told_up_to:
        raise t.fail(
            "aim",
            "aim, range and critical level are out of order",
            "They must rise: low, aim, high, critical, told_up_to",
        )
    free = t.span("free_range", "level") if t.has("free_range") else None
    found = Target(
        basis=t.text("basis"),
        low_mg_per_L=low,
        high_mg_per_L=high,
        aim_mg_per_L=aim,
        critical_mg_per_L=critical,
        told_up_to_mg_per_L=told_up_to,
        free_low_mg_per_L=free[0] if free else None,
        free_high_mg_per_L=free[1] if free else None,
        free_critical_mg_per_L=t.maybe("free_critical", "level"),
    )
    t.each("note", lambda name, inner: inner.statement("text"))
    t.done()
    return found


def _gates(t: Table) -> dict[str, tuple[float, float]]:
    found = {"total": t.span("total", "level")}
    if t.has("free"):
        found["free"] = t.span("free", "level")
    t.done()
    return found


_GIVERS = ("observed", "outpatient", "doubtful")


def _spread(t: Table) -> Spread:
    total, intake = t.table("total_cv"), t.table("intake_share")
    by_giver = {key: total.share(key) for key in _GIVERS}
    found = Spread(
        assay_cv=t.share("assay_cv"),
        assay_cv_range=t.span("assay_cv_range", "share"),
        total_cv=by_giver,
        own_cv=t.share("own_cv") if t.has("own_cv") else by_giver["observed"],
        intake_share={key: intake.share(key, zero=True) for key in _GIVERS},
        wrong_level_chance=t.share("wrong_level_chance"),
        wrong_level_factor=t.number("wrong_level_factor", "ratio", low=1.0),
    )
    total.done()
    intake.done()
    t.done()
    return found


def _binding(t: Table) -> Binding:
    def alternative(name: str, inner: Table) -> Alternative:
        value = inner.number("coefficient", "per albumin")
        return Alternative(name, inner.text("words"), value, inner.facts[inner.at("coefficient")].status)

    low, high = t.pair("renal_failure_coefficients", "per albumin")
    found = Binding(
        free_fraction=t.share("free_fraction"),
        free_fraction_range=t.span("free_fraction_range", "share"),
        albumin_coefficient=t.number("albumin_coefficient", "per albumin"),
        constant=t.share("constant"),
        correction_log_sd=log_sd(t.share("correction_cv")),
        alternatives=tuple(t.each("alternative", alternative).values()),
        renal_failure_coefficients=(low, high),
        renal_failure_mL_per_min=t.number("renal_failure_below", "clearance") / 1.44,
        renal_grey_mL_per_min=t.number("renal_grey_below", "clearance") / 1.44,
        albumin_gate_g_per_L=t.span("albumin_gate", "albumin"),
        albumin_oldest_h=t.number("albumin_oldest", "interval"),
        albumin_bcg_minus_bcp_g_per_L=t.number("albumin_bcg_minus_bcp", "albumin"),
        displacements=tuple(t.each("displacement", _displacement).values()),
    )
    t.done()
    return found


def _displacement(name: str, t: Table) -> Displacement:
    return Displacement(
        id=name,
        words=t.text("words"),
        drug=t.text("drug"),
        intercept=t.share("intercept"),
        slope_per_mg_per_L=t.number("slope", "per level"),
    )


def _loading(t: Table, forms: Mapping[str, Form]) -> Loading:
    def named(inner: Table) -> str:
        form = inner.text("form")
        if form not in forms:
            raise inner.fail("form", f'"{form}" is not a form of this file', "Name one of the forms above")
        return form

    def cap(name: str, inner: Table) -> RateCap:
        def rate(key: str, kind: str) -> float | None:
            value = inner.maybe(key, kind)
            return None if value is None else value / 1440

        flat, scaled = (
            inner.number("rate", "dose rate") / 1440,
            rate("rate_per_weight", "dose rate per weight"),
        )
        return RateCap(
            form=named(inner),
            group=inner.choice("group", ("adult", "child", "risk")),
            words=inner.text("words"),
            mg_per_min=flat,
            mg_per_kg_min=scaled,
            highest_mg_per_min=rate("highest", "dose rate") or flat,
            highest_mg_per_kg_min=rate("highest_per_weight", "dose rate per weight") or scaled,
        )

    def line(name: str, inner: Table) -> IvLine:
        return IvLine(
            form=named(inner),
            diluent=inner.statement("diluent"),
            concentration_mg_per_mL=inner.span("concentration", "strength"),
            filter=inner.statement("filter"),
            monitoring=inner.statement("monitoring"),
            contraindications=inner.statements("contraindications"),
            watch=inner.statement("watch"),
        )

    oral = None
    if t.has("oral"):
        o = t.table("oral")
        oral = OralLoad(
            form=named(o),
            total_mg=o.number("total", "amount"),
            parts_mg=o.several("parts", "amount"),
            hours_apart=o.number("apart", "interval"),
            largest_part_mg=o.number("largest_part", "amount"),
            excluded=o.statements("excluded"),
            setting=o.statement("setting"),
            maintenance_after_h=o.number("maintenance_after", "interval"),
        )
        o.done()
        if sum(oral.parts_mg) != oral.total_mg or max(oral.parts_mg) > oral.largest_part_mg:
            raise o.fail("parts", "the parts do not fit the total or the largest part", "Mend the parts")
    found = Loading(
        mg_per_kg=t.span("per_weight", "amount per weight"),
        status_mg_per_kg=t.span("status_per_weight", "amount per weight") if t.has("status_per_weight") else None,
        status_words=t.text("status_words") if t.has("status_per_weight") else "",
        largest_single_mg=t.number("largest_single", "amount"),
        rate_caps=tuple(t.each("rate_cap", cap).values()),
        oral=oral,
        iv_lines={x.form: x for x in t.each("iv_line", line).values()},
    )
    t.done()
    return found


def _limits(t: Table, forms: Mapping[str, Form]) -> Limits:
    edges, sizes = t.several("step_edges", "level"), t.several("step_sizes", "dose rate")
    if len(sizes) != len(edges) + 1 or list(edges) != sorted(edges):
        raise t.fail("step_sizes", "one more step than edges is needed, edges rising", "Mend the two lists")
    step_form = t.text("step_form")
    if step_form not in forms:
        raise t.fail("step_form", f'"{step_form}" is not a form of this file', "Name one of the forms above")
    found = Limits(
        steps=tuple(StepBand(edge, size) for edge, size in zip((*edges, None), sizes, strict=True)),
        largest_mg_per_day=t.number("largest_daily", "dose rate"),
        largest_child_mg_per_day=t.maybe("largest_daily_child", "dose rate"),
        step_form=step_form,
    )
    t.done()
    return found


def _sampling(t: Table) -> Sampling:
    found = Sampling(
        after_iv_h=t.maybe("after_iv", "interval") or 0.0,
        after_im_h=t.maybe("after_im", "interval") or 0.0,
        after_oral_load_h=t.maybe("after_oral_load", "interval") or 0.0,
        steady_wait_days=t.span("steady_wait", "duration"),
        repeat_h=t.span("repeat", "interval") if t.has("repeat") else None,
    )
    t.done()
    return found


def _plausible(name: str, t: Table) -> Plausible:
    return Plausible(
        ages_years=t.span("ages", "age", zero=True),
        vmax_mg_per_kg_day=t.span("vmax", "dose rate per weight"),
        km_mg_per_L=t.span("km", "level"),
    )


def _interactions(t: Table) -> Interactions:
    found = Interactions(
        raising=t.statements("raising") if t.has("raising") else (),
        lowering=t.statements("lowering") if t.has("lowering") else (),
        either=t.statements("either") if t.has("either") else (),
        wait_days=t.number("wait", "duration"),
    )
    t.done()
    return found


def _code(name: str, t: Table) -> Code:
    return Code(
        code=t.statement("code"),
        display=t.text("display"),
        measures=t.text("measures"),
        unit_kind=cast(Literal["mass", "moles", "share"], t.choice("unit_kind", ("mass", "moles", "share"))),
    )


def _medication(t: Table, forms: Mapping[str, Form]) -> MedicationCode:
    form = t.text("form", "")
    if form and form not in forms:
        raise t.fail("form", f'"{form}" was found', "Write a form of this file, or leave it out")
    return MedicationCode(t.text("system"), t.statement("code"), t.text("display"), form)


def _dialysis(t: Table) -> Dialysis:
    low, high = t.span("range", "clearance")
    gate = t.span("gate", "clearance")
    if not gate[0] <= low <= high <= gate[1]:
        raise t.fail("gate", "narrower than the published range", "Mend one of the two")
    found = Dialysis(t.number("clearance", "clearance", low=low, high=high), (low, high), gate)
    t.done()
    return found


# Printing


def describe(profile: Profile) -> tuple[str, ...]:
    """Everything we know about a drug and where each number comes from, line by line."""
    lines = [
        f"{profile.name}: {profile.scope}",
        profile.scope_reason,
        f"Authority: {profile.authority}",
        f"File {profile.file}, SHA-256 {profile.sha256[:16]}",
        f"Also named: {', '.join(profile.names)}",
        f"Levels in {', '.join(profile.level_units)}; {profile.target.basis}; times in "
        + ("hours" if profile.time_unit == "h" else "days"),
        *((f"First: {profile.urgent}",) if profile.urgent else ()),
        "",
        "Context questions",
        *(f"  {q}: {profile.questions[q].words}" for q in profile.asked),
        *(("", "Levels of other drugs") if profile.other_levels else ()),
        *(f"  {x.id}: {x.words}" for x in profile.other_levels.values()),
        *(("", "On a pause", f"  {profile.withdrawal.risk}") if profile.withdrawal is not None else ()),
        "",
        "Forms",
        *(f"  {f.id}: {f.words}; {f.salt}, by {' or '.join(f.routes)}" for f in profile.forms.values()),
        *(("", "Products") if profile.products else ()),
        *(f"  {p.id}: {p.words}; {p.strength_words}" for p in profile.products.values()),
        "",
        "Populations" + (" (one must be chosen)" if profile.choose_population else ""),
        *(f"  {p.id}: {p.words}{' (default for its ages)' if p.default else ''}" for p in profile.populations.values()),
        "",
    ]
    last = ""
    for path, fact in profile.facts.items():
        head, _, rest = path.partition(".")
        if head != last:
            lines += ([""] if last else []) + [head.replace("_", " ")]
            last = head
        cited = ", ".join(fact.sources)
        lines.append(f"  {rest.replace('_', ' ')}: {fact.shown}  [{fact.status}: {cited}; {fact.where}]")
        if fact.derivation:
            lines.append(f"      derivation: {fact.derivation}")
    if profile.cautions:
        lines += ["", "Cautions of this drug alone"]
        for key, rule in profile.cautions.items():
            lines.append(f"  {key} ({rule['severity']}): {rule['text']}  [{rule['source']}]")
    lines += ["", "Sources"]
    lines += [f"  {s.key}: {s.citation}" for s in profile.sources_used()]
    return tuple(lines)
