"""The consult: runs the steps in their order, asks the cautions after each, skips what a stop blocks."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from pkcalc import cautions as caution_engine
from pkcalc import plan as planning
from pkcalc import steadiness
from pkcalc.case import Case, Target
from pkcalc.cautions import ShownRegimen, State
from pkcalc.dosing import Regimen
from pkcalc.drugs.profile import Prior, Profile, load_profile
from pkcalc.errors import CannotEstimate, Caution
from pkcalc.estimate import pair as two_level
from pkcalc.estimate.pair import SteadyPair, VolumeSpread
from pkcalc.estimate.result import Band, Estimate
from pkcalc.forecast import Forecast, Goal, forecast_rate, rate_for_level
from pkcalc.levels import LabScale, Observation, lab_scale, observe
from pkcalc.site import Site, load_site, no_site
from pkcalc.steadiness import Settling

RESULTS_DATE = "2026-12-01"  # the day from which notes print these results; see "Results changed"


@dataclass(frozen=True)
class Shown:
    """A regimen with its words and forecast."""

    regimen: Regimen
    words: str
    forecast: Forecast
    present: bool
    proposed: bool
    offered: bool


@dataclass(frozen=True)
class Consult:
    """Everything one consult found, each part with the record it came from.

    estimates: by method. refusals: method -> why it gave no answer. chosen: the estimate that the forecasts
    use, with the reason in words; None where a stop or a refusal leaves none. blocked: what stops take away;
    results so named are absent (None or empty).
    """

    case: Case
    profile: Profile
    site: Site
    prior: Prior | None
    goal: Goal
    scale: LabScale
    observations: tuple[Observation, ...]
    pairs: tuple[SteadyPair, ...]
    settling: tuple[Settling, ...]
    estimates: Mapping[str, Estimate]
    refusals: Mapping[str, str]
    chosen: Estimate | None
    chosen_why: str
    proposed: tuple[Shown, ...]
    table: tuple[Shown, ...]
    aim_rate: Band | None
    cautions: tuple[Caution, ...]
    blocked: frozenset[str]
    results_date: str = RESULTS_DATE

    @property
    def stopped(self) -> bool:
        """True where no forecast could be given."""
        return self.chosen is None or "projection" in self.blocked


def run_consult(case: Case, site: Site | str | Path | None = None) -> Consult:
    """A checked case in, a consult out. Refusals of a method and stops are part of the result, not exceptions."""
    chosen_site = no_site() if site is None else site if isinstance(site, Site) else load_site(site)
    profile = load_profile(case.drug)
    prior = _prior(case, profile, chosen_site)
    goal = _goal(case, profile, chosen_site)
    state = State(case=case, profile=profile, site=chosen_site, goal=goal)
    said = list(caution_engine.after_case(state))

    observations = observe(case, profile, chosen_site)
    pairs = steadiness.steady_pairs(case, profile, observations)
    state = State(
        case=case, profile=profile, site=chosen_site, goal=goal, observations=observations, pairs=pairs
    )
    said += caution_engine.after_levels(state)

    estimates: dict[str, Estimate] = {}
    refusals: dict[str, str] = {}
    stops = caution_engine.blocked(said)
    pair_estimate = None
    if "two-level" not in stops and len(pairs) == 2:
        try:
            pair_estimate = two_level.from_steady_levels(*pairs, volume=_volume(prior))
            estimates[pair_estimate.method] = pair_estimate
        except CannotEstimate as refusal:
            refusals["two levels"] = str(refusal)
    elif "two-level" not in stops:
        refusals["two levels"] = _why_no_pair(pairs, observations)

    chosen, why = _choose(estimates, case)
    settling = steadiness.settling(case, profile, observations, chosen, pairs)
    state = State(
        case=case,
        profile=profile,
        site=chosen_site,
        goal=goal,
        observations=observations,
        pairs=pairs,
        settling=settling if chosen is not None else (),
        pair_estimate=pair_estimate,
        estimate=chosen,
    )
    said += caution_engine.after_estimate(state)
    stops = caution_engine.blocked(said)
    if "two-level" in stops:
        for name in ("two levels",):
            if estimates.pop(name, None) is not None and chosen is not None and chosen.method == name:
                chosen, why = _choose(estimates, case)

    scale = lab_scale(case, profile, case.albumin)
    proposed: tuple[Shown, ...] = ()
    table: tuple[Shown, ...] = ()
    aim_rate: Band | None = None
    if chosen is not None and "projection" not in stops:
        present = _present_level(observations)
        regimens = planning.dose_table(case, profile, chosen_site)

        def show_one(regimen: Regimen, *, is_proposed: bool) -> Shown:
            assert chosen is not None
            forecast = forecast_rate(
                chosen, regimen.active_mg_per_day(profile), goal, scale, present_mg_per_L=present
            )
            return Shown(
                regimen=regimen,
                words=regimen.words(profile),
                forecast=forecast,
                present=planning.is_present(regimen, case, profile),
                proposed=is_proposed,
                offered=caution_engine.danger(forecast) <= chosen_site.stop_chance,
            )

        proposed = tuple(show_one(r, is_proposed=True) for r in case.proposed)
        table = tuple(show_one(r, is_proposed=False) for r in regimens)
        aim_rate = rate_for_level(chosen, goal.aim_mg_per_L)
        spoken = [ShownRegimen(s.words, s.forecast, s.present) for s in proposed]
        present_rows = [ShownRegimen("The present dose", s.forecast, True) for s in table if s.present]
        state = State(
            case=case,
            profile=profile,
            site=chosen_site,
            goal=goal,
            observations=observations,
            estimate=chosen,
            regimens=(*present_rows, *spoken),
        )
        said += caution_engine.after_plan(state)
    return Consult(
        case=case,
        profile=profile,
        site=chosen_site,
        prior=prior,
        goal=goal,
        scale=scale,
        observations=observations,
        pairs=pairs,
        settling=settling,
        estimates=estimates,
        refusals=refusals,
        chosen=chosen,
        chosen_why=why,
        proposed=proposed,
        table=table,
        aim_rate=aim_rate,
        cautions=caution_engine.in_order(said),
        blocked=caution_engine.blocked(said),
    )


def _prior(case: Case, profile: Profile, site: Site) -> Prior | None:
    """The population for this patient; None where it cannot be scaled (no weight) or does not cover the age."""
    weight, age = case.patient.weight_kg, case.patient.age_years
    if weight is None or (age is not None and age < profile.youngest_years):
        return None
    name = case.population or site.population
    population = profile.populations[name] if name else profile.default_population(age)
    switched_on = tuple(
        m.id for m in population.modifiers.values() if m.question and case.answer(m.question) == "yes"
    )
    return population.at(
        weight, age, height_cm=case.patient.height_cm, sex=case.patient.sex, modifiers=switched_on
    )


def _volume(prior: Prior | None) -> VolumeSpread | None:
    return None if prior is None else VolumeSpread(prior.volume_L, prior.volume_log_sd)


def _goal(case: Case, profile: Profile, site: Site) -> Goal:
    target: Target | None = case.target
    origin = "this case"
    if target is None:
        low, high, origin = site.target(profile)
    elif target.kind == "free":
        fraction = profile.binding.free_fraction if profile.binding else 1.0
        low, high = target.low_mg_per_L / fraction, target.high_mg_per_L / fraction
    else:
        low, high = target.low_mg_per_L, target.high_mg_per_L
    aim = case.aim_mg_per_L or site.aim_mg_per_L or (low * high) ** 0.5
    if case.aim_mg_per_L is None and site.aim_mg_per_L is None:
        aim = (low + high) / 2
    return Goal(low, high, site.critical(profile), aim, origin)


def _choose(estimates: Mapping[str, Estimate], case: Case) -> tuple[Estimate | None, str]:
    """The estimate the forecasts use: the one asked for, else the best available, always with the reason."""
    if case.method and case.method in estimates:
        return estimates[case.method], f"{case.method}: asked for in the case"
    for name, why in (("two levels", "two steady levels on two doses"),):
        if name in estimates:
            return estimates[name], f"{name}: {why}"
    return None, ""


def _why_no_pair(pairs: Sequence[SteadyPair], observations: Sequence[Observation]) -> str:
    if len(pairs) > 2:
        return "More than two dose/level pairs are given; the two-level method uses exactly two."
    return (
        f"{len(pairs)} of {len(observations)} levels can be matched with a single dose in force; "
        "the two-level method needs two levels on two different doses."
    )


def _present_level(observations: Sequence[Observation]) -> float:
    """The latest level on the working basis; where no draw is dated, the last one given."""
    if not observations:
        return 0.0
    dated = [o for o in observations if o.level.drawn is not None]
    if dated:
        return max(dated, key=lambda o: o.level.drawn.timestamp() if o.level.drawn else 0.0).working_mg_per_L
    return observations[-1].working_mg_per_L
