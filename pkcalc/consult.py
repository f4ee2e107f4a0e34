"""The consult: runs the steps in their order, asks the cautions after each, skips what a stop blocks."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import cast

from pkcalc import cautions as caution_engine
from pkcalc import plan as planning
from pkcalc import steadiness, twoways
from pkcalc.case import Case, Target
from pkcalc.cautions import ShownRegimen, State
from pkcalc.crosscheck import Row
from pkcalc.drugs.profile import Prior, Profile, Sex, load_profile
from pkcalc.errors import CannotEstimate, CaseError, Caution
from pkcalc.estimate import lines, posterior, trust
from pkcalc.estimate import pair as two_level
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.pair import SteadyPair, VolumeSpread
from pkcalc.estimate.result import Band, Estimate
from pkcalc.forecast import Goal, rate_for_level
from pkcalc.given import given_record
from pkcalc.levels import LabScale, Observation, adherence, everyday_cv, lab_scale, observe
from pkcalc.plan import projection as projecting
from pkcalc.plan.projection import Plateaus, Projection
from pkcalc.record import Record
from pkcalc.site import Site, load_site, no_site
from pkcalc.steadiness import Settling

RESULTS_DATE = "2026-12-01"  # the day from which notes print these results; see "Results changed"


Shown = planning.Candidate  # a regimen with its words and forecasts


@dataclass(frozen=True)
class Consult:
    """Everything one consult found, each part with the record it came from.

    population: what the population alone says (None without a weight). estimates: by method. refusals: method ->
    why it gave no answer. chosen: the estimate that the forecasts use, with the reason in words; None where a
    stop or a refusal leaves none. settling: by the whole record's draws where there is one, else by the
    population's, else by the chosen estimate's own. line_results and verdict: three or more steady levels side
    by side. difference: why the methods differ, in a sentence, where they do. blocked: what stops take away;
    results so named are absent (None or empty). second_way: key numbers calculated a second, independent way.
    """

    case: Case
    profile: Profile
    site: Site
    prior: Prior | None
    population: Estimate | None
    record: Record | None
    goal: Goal
    scale: LabScale
    observations: tuple[Observation, ...]
    pairs: tuple[SteadyPair, ...]
    settling: tuple[Settling, ...]
    estimates: Mapping[str, Estimate]
    refusals: Mapping[str, str]
    line_results: tuple[lines.Result, ...]
    verdict: trust.Verdict | None
    chosen: Estimate | None
    chosen_why: str
    difference: str
    proposed: tuple[Shown, ...]
    table: tuple[Shown, ...]
    plan: planning.Plan | None
    projection: Projection | None
    plateaus: Plateaus | None
    aim_rate: Band | None
    cautions: tuple[Caution, ...]
    blocked: frozenset[str]
    second_way: tuple[Row, ...] = ()
    results_date: str = RESULTS_DATE

    @property
    def stopped(self) -> bool:
        """True where no forecast could be given."""
        return self.chosen is None or "projection" in self.blocked


@dataclass(frozen=True)
class _Estimates:
    """What the methods gave, before the choice."""

    by_method: dict[str, Estimate]
    refusals: dict[str, str]
    record: Record | None
    settling: tuple[Settling, ...]
    own_settling: tuple[Settling, ...]
    line_results: tuple[lines.Result, ...]
    verdict: trust.Verdict | None


def run_consult(case: Case, site: Site | str | Path | None = None) -> Consult:
    """A checked case in, a consult out. Refusals of a method and stops are part of the result, not exceptions."""
    local = no_site() if site is None else site if isinstance(site, Site) else load_site(site)
    profile = load_profile(case.drug)
    prior = patient_prior(case, profile, local)
    population = posterior.prior_only(prior) if prior is not None else None
    state = State(case=case, profile=profile, site=local, goal=_goal(case, profile, local))
    said = list(caution_engine.after_case(state))

    observations = observe(case, profile, local)
    pairs = steadiness.steady_pairs(case, profile, observations) if _reads_pairs(case, profile) else ()
    state = replace(state, observations=observations, pairs=pairs)
    said += caution_engine.after_levels(state)

    found = _estimate(state, prior, population, caution_engine.blocked(said))
    pair_estimate = found.by_method.get(two_level.METHOD)
    chosen, why = _choose(found.by_method, case)
    found = _without_distrusted_company(found, chosen)
    state = replace(
        state,
        settling=found.settling,
        own_settling=found.own_settling,
        pair_estimate=pair_estimate,
        pair_refusal=found.refusals.get(two_level.METHOD, "") if len(pairs) == 2 else "",
        distrusted=" ".join(e.distrust for e in found.by_method.values() if not e.trusted),
        estimate=chosen,
        steady_levels_used=chosen is not None and chosen.method in (two_level.METHOD, lines.REGRESSION),
    )
    said += caution_engine.after_estimate(state)
    stops = caution_engine.blocked(said)
    if "two-level" in stops and found.by_method.pop(two_level.METHOD, None) is not None:
        chosen, why = _choose(found.by_method, case)
    if "estimate" in stops:
        found = replace(found, settling=(), own_settling=())
        chosen, why = None, ""
    if chosen is None and _population_speaks(case, profile, population, stops):
        chosen, why = population, "the population alone: no level could be learned from yet"
    state = replace(state, estimate=chosen)
    if chosen is None and not {"estimate", "projection"} & stops:
        others = {k: v for k, v in found.refusals.items() if not (k == two_level.METHOD and state.pair_refusal)}
        why_none = " ".join(f"{name[0].upper()}{name[1:]}: {reason}" for name, reason in others.items())
        why_none = why_none or "The reason stands in the stop on the two levels."
        said += caution_engine.after_estimate(replace(state, why_none=why_none))
        stops = caution_engine.blocked(said)

    scale = lab_scale(case, profile, local, case.albumin, observations)
    proposed: tuple[Shown, ...] = ()
    table: tuple[Shown, ...] = ()
    aim_rate: Band | None = None
    assert state.goal is not None
    plan: planning.Plan | None = None
    projection: Projection | None = None
    plateaus: Plateaus | None = None
    if profile.scope != "dosing" and chosen is not None and chosen.method == two_level.METHOD:
        if "projection" not in stops:
            plateaus = projecting.settle(
                case, profile, local, estimate=chosen, goal=state.goal, scale=scale, stops=stops
            )
            shown = [ShownRegimen(words, forecast) for words, forecast in plateaus.settle]
            said += caution_engine.after_plan(replace(state, regimens=shown))
    elif profile.scope != "dosing":
        chosen, why, projection = _projected(state, chosen, why, prior, found.refusals, stops)
        said += caution_engine.after_plan(replace(state, estimate=chosen, projection=projection))
    elif chosen is not None and "projection" not in stops:
        plan = planning.make(
            case,
            profile,
            local,
            estimate=chosen,
            goal=state.goal,
            scale=scale,
            observations=observations,
            history=_history(found.record, prior, state) if chosen.method == posterior.WHOLE_RECORD else None,
            stops=stops,
            prior=prior,
        )
        proposed, table = plan.own, plan.table
        aim_rate = rate_for_level(chosen, state.goal.aim_mg_per_L)
        # stops look at the safety line: every dose taken
        spoken = [ShownRegimen(s.words, s.taken, s.present) for s in proposed]
        now = [ShownRegimen("The present dose", s.taken, True) for s in table if s.present]
        said += caution_engine.after_plan(replace(state, regimens=(*now, *spoken)))
    consult = Consult(
        case=case,
        profile=profile,
        site=local,
        prior=prior,
        population=population,
        record=found.record,
        goal=state.goal,
        scale=scale,
        observations=observations,
        pairs=pairs,
        settling=found.settling,
        estimates=found.by_method,
        refusals=found.refusals,
        line_results=found.line_results,
        verdict=found.verdict,
        chosen=chosen,
        chosen_why=why,
        difference=_difference(found),
        proposed=proposed,
        table=table,
        plan=plan,
        projection=projection,
        plateaus=plateaus,
        aim_rate=aim_rate,
        cautions=caution_engine.in_order(said),
        blocked=caution_engine.blocked(said),
    )

    return _checked_twice(consult, state)


def _checked_twice(consult: Consult, state: State) -> Consult:
    """The consult with its second way; without any number where the two disagree."""
    rows = twoways.compare(
        consult.case,
        consult.profile,
        consult.site,
        observations=consult.observations,
        estimate=consult.chosen,
        pair=consult.estimates.get(two_level.METHOD),
        pairs=consult.pairs,
        record=consult.record,
        levels=level_data(state),
        prior=consult.prior,
        spread=record_spread(consult.case, consult.profile),
        plan=consult.plan,
        projection=consult.projection,
        plateaus=consult.plateaus,
        goal=consult.goal,
    )
    wrong = tuple(r.words for r in rows if not r.agrees)
    if not wrong:
        return replace(consult, second_way=rows)
    said = (*consult.cautions, *caution_engine.after_plan(replace(state, estimate=None, disagreements=wrong)))
    return replace(
        consult,
        settling=(),
        estimates={},
        line_results=(),
        verdict=None,
        chosen=None,
        chosen_why="",
        difference="",
        proposed=(),
        table=(),
        plan=None,
        projection=None,
        plateaus=None,
        aim_rate=None,
        cautions=caution_engine.in_order(said),
        blocked=caution_engine.blocked(said),
        second_way=rows,
    )


def _declared_steady(case: Case) -> bool:
    """True where levels without a time name the dose they were drawn on: then a person calls them steady."""
    return bool(case.levels) and all(x.on_dose is not None and x.drawn is None for x in case.levels)


def _reads_pairs(case: Case, profile: Profile) -> bool:
    """Whether steady levels are read as pairs. Outside full dosing only two that were typed as such: the two-level
    method knows neither a parallel path nor dialysis, and levels of a followed drug are not steady."""
    if profile.scope == "dosing":
        return True
    return _declared_steady(case) and len(case.levels) == 2 and not _paths_beside(case, profile)


def _paths_beside(case: Case, profile: Profile) -> bool:
    return bool(case.dialysis) or any(p.first_order_per_day > 0 for p in profile.populations.values())


def _why_no_pair_here(case: Case, profile: Profile) -> str:
    if _paths_beside(case, profile):
        return (
            f"{profile.name[:1].upper()}{profile.name[1:]} leaves by a first-order path beside the saturable one; two "
            "levels cannot tell the two apart."
        )
    return f"{len(case.levels)} levels were typed; for {profile.name} the method takes two, on two different doses."


def _population_speaks(case: Case, profile: Profile, population: Estimate | None, stops: frozenset[str]) -> bool:
    """True before any level, where first doses or a load are asked for: then only the population can speak.

    For a drug that is only projected, or followed by the hour, also where no level could be learned from yet.
    """
    if profile.scope != "dosing":
        return population is not None and not {"estimate", "projection"} & stops
    asked = bool(case.proposed or case.file.plan.load)
    return asked and not case.levels and population is not None and not {"estimate", "projection"} & stops


def _projected(
    state: State,
    chosen: Estimate | None,
    why: str,
    prior: Prior | None,
    refusals: dict[str, str],
    stops: frozenset[str],
) -> tuple[Estimate | None, str, Projection | None]:
    """What comes next for a drug outside full dosing."""
    if {"estimate", "projection"} & stops or chosen is None or state.goal is None:
        return chosen, why, None
    try:
        return (
            chosen,
            why,
            projecting.project(
                state.case,
                state.profile,
                state.site,
                estimate=chosen,
                learned=chosen.method == posterior.WHOLE_RECORD,
                goal=state.goal,
                observations=state.observations,
                first_order_per_day=prior.first_order_per_day if prior is not None else 0.0,
                stops=stops,
            ),
        )
    except CannotEstimate as refusal:
        refusals["projection"] = str(refusal)
        return None, "", None


def _estimate(state: State, prior: Prior | None, population: Estimate | None, stops: frozenset[str]) -> _Estimates:
    """Every method that may and can answer, with the reason where one cannot."""
    case, profile, observations, pairs = state.case, state.profile, state.observations, state.pairs
    by_method: dict[str, Estimate] = {}
    refusals: dict[str, str] = {}
    record: Record | None = None
    whole: Estimate | None = None
    if "estimate" not in stops:
        try:
            record, whole = _whole_record(state, prior)
            by_method[whole.method] = whole
        except CannotEstimate as refusal:
            refusals[posterior.WHOLE_RECORD] = str(refusal)
        except CaseError as refusal:
            refusals[posterior.WHOLE_RECORD] = " ".join(p.text for p in refusal.problems)
    if profile.scope != "dosing" and not pairs:
        if _declared_steady(case):
            refusals[two_level.METHOD] = _why_no_pair_here(case, profile)
        return _Estimates(by_method, refusals, record, (), (), (), None)
    settling = steadiness.settling(case, profile, observations, whole or population, pairs)

    line_results: tuple[lines.Result, ...] = ()
    verdict: trust.Verdict | None = None
    own: tuple[Settling, ...] = ()
    volume = None if prior is None else VolumeSpread(prior.volume_L, prior.volume_log_sd)
    if "two-level" not in stops:
        settled = {s.level for s in settling if s.settled is not False}
        steady = tuple(p for p in pairs if p.level in settled)
        try:
            if len(pairs) == 2:
                # An unsettled pair is refused by its stop, which names the level; so it is solved here all the same.
                by_method[two_level.METHOD] = two_level.from_steady_levels(
                    *pairs, volume=volume, by_the_hour=profile.time_unit == "h"
                )
                own = steadiness.settling(case, profile, observations, by_method[two_level.METHOD], pairs)
            elif len(steady) >= lines.FEWEST:
                gathered = lines.gather(steady)
                line_results = lines.compare(gathered, volume=volume)
                verdict = trust.verdict(line_results, gathered)
                by_method[lines.REGRESSION] = lines.from_steady_pairs(gathered, volume=volume)
            else:
                refusals[two_level.METHOD] = _why_no_pair(pairs, steady, observations)
        except CannotEstimate as refusal:
            refusals[two_level.METHOD if len(pairs) == 2 else lines.REGRESSION] = str(refusal)
    if whole is None and population is None and own:
        settling = own
    return _Estimates(by_method, refusals, record, settling, own, line_results, verdict)


def _whole_record(state: State, prior: Prior | None) -> tuple[Record, Estimate]:
    """The estimate from population and record; CannotEstimate where the case does not carry one."""
    if prior is None:
        raise CannotEstimate(
            found="No weight is given." if state.case.patient.weight_kg is None else "The age is not covered.",
            why="The population cannot be scaled to this patient, so a record cannot be weighed against it.",
            helps="Give a weight.",
        )
    if not state.observations:
        raise CannotEstimate("No level is given.", "There is nothing to learn from yet.", "Add a level.")
    used = [o for o in state.observations if not o.set_aside]
    if not used:
        raise CannotEstimate(
            found=" ".join(f"{o.name} is set aside: {o.set_aside}." for o in state.observations),
            why="No level is left to learn from.",
            helps="Add a level drawn at the right time.",
        )
    undated = [o.name for o in used if o.level.drawn is None]
    if undated:
        raise CannotEstimate(
            found=f"{', '.join(undated)}: the time of the draw is not stated.",
            why="A level without its time cannot be placed on the course of the record.",
            helps="Give date and time of the draw.",
        )
    unusable = [o.name for o in used if not o.readable]
    if unusable:
        raise CannotEstimate(
            found=f"{', '.join(unusable)}: no single reading can be trusted.",
            why="The binding in this patient is unknown, so the level could stand for a range of levels.",
            helps="Ask for a free level.",
        )
    record = given_record(state.case, state.profile)
    return record, posterior.from_record(record, level_data(state), prior, record_spread(state.case, state.profile))


def level_data(state: State) -> tuple[LevelData, ...]:
    """Every dated level as the whole-record estimate takes it: its own spread in parts, intake apart."""
    found = []
    for o in state.observations:
        if o.level.drawn is not None and o.usable:
            assay = o.spread.assay_cv
            found.append(
                LevelData(
                    time_day=state.case.day(o.level.drawn),
                    level_mg_per_L=o.working_mg_per_L,
                    assay_cv=assay,
                    day_cv=everyday_cv(state.profile, state.site, assay),
                    extra_log_sd=o.binding_log_sd,
                    censored=o.censored,
                    index=o.level.index,
                )
            )
    return tuple(found)


def record_spread(case: Case, profile: Profile) -> RecordSpread:
    """How far the record of doses is believed, by who gave them."""
    key, _ = adherence(case)
    return RecordSpread(
        doses_differing=profile.spread.intake_share[key],
        wrong_level_chance=profile.spread.wrong_level_chance,
        wrong_level_factor=profile.spread.wrong_level_factor,
    )


def _history(record: Record | None, prior: Prior | None, state: State) -> planning.History | None:
    """What the whole-record estimate was learned from, for today's level."""
    if record is None or prior is None:
        return None
    spread = record_spread(state.case, state.profile)
    return planning.History(record, level_data(state), spread, prior.first_order_per_day)


def patient_prior(case: Case, profile: Profile, site: Site) -> Prior | None:
    """The population for this patient; None where it cannot be scaled (no weight) or does not cover the age."""
    weight, age = case.patient.weight_kg, case.patient.age_years
    if weight is None or (age is not None and age < profile.youngest_years):
        return None
    population = profile.populations[case.population] if case.population else site.population_for(profile, age)
    switched_on = tuple(m.id for m in population.modifiers.values() if m.question and case.answer(m.question) == "yes")
    return population.at(
        weight, age, height_cm=case.patient.height_cm, sex=cast(Sex, case.patient.sex), modifiers=switched_on
    )


def _goal(case: Case, profile: Profile, site: Site) -> Goal:
    target: Target | None = case.target
    if target is None:
        low, high, origin = site.target(profile)
        aim = site.aim_mg_per_L or profile.target.aim_mg_per_L
    else:
        fraction = profile.binding.free_fraction if target.kind == "free" and profile.binding else 1.0
        low, high, origin = target.low_mg_per_L / fraction, target.high_mg_per_L / fraction, target.origin
        aim = (low + high) / 2
    return Goal(low, high, site.critical(profile), case.aim_mg_per_L or aim, origin)


def _without_distrusted_company(found: _Estimates, chosen: Estimate | None) -> _Estimates:
    """Where the whole record answers, another method that distrusts itself is refused alone and takes nothing along."""
    if chosen is None or chosen.method != posterior.WHOLE_RECORD or not chosen.trusted:
        return found
    aside = {name: e.distrust for name, e in found.by_method.items() if not e.trusted}
    kept = {name: e for name, e in found.by_method.items() if e.trusted}
    return replace(found, by_method=kept, refusals={**found.refusals, **aside})


def _choose(estimates: Mapping[str, Estimate], case: Case) -> tuple[Estimate | None, str]:
    """The estimate the forecasts use: the one asked for, else the best available, always with the reason."""
    asked = {"lines": lines.REGRESSION}.get(case.method, case.method)
    if asked:
        if asked in estimates:
            return estimates[asked], f"{asked}, as asked for in the case"
        return None, ""
    for name, why in (
        (posterior.WHOLE_RECORD, "it uses every dose and level with population knowledge, settled or not"),
        (lines.REGRESSION, "three or more steady levels, each weighed by its own spread"),
        (two_level.METHOD, "two steady levels on two doses"),
    ):
        if name in estimates and estimates[name].trusted:
            return estimates[name], f"{name}: {why}"
    return None, ""


def _why_no_pair(pairs: Sequence[SteadyPair], steady: Sequence[SteadyPair], observations: Sequence[Observation]) -> str:
    if len(pairs) > 2:
        return (
            f"Of {len(pairs)} levels with a dose in force {len(steady)} had settled when drawn; lines through steady "
            f"levels need {lines.FEWEST} or more."
        )
    return (
        f"{len(pairs)} of {len(observations)} levels can be matched with a single dose in force; "
        "the two-level method needs two levels on two different doses."
    )


def _difference(found: _Estimates) -> str:
    """Why the two-level answer and the whole record differ, where they differ materially."""
    pair, whole = found.by_method.get(two_level.METHOD), found.by_method.get(posterior.WHOLE_RECORD)
    if pair is None or whole is None:
        return ""
    ratio = pair.point.vmax_mg_per_day / whole.point.vmax_mg_per_day
    if 0.9 <= ratio <= 1.1:
        return ""
    way = "higher" if ratio > 1 else "lower"
    early = [s for s in found.settling if s.fraction is not None and s.fraction.median < 0.97]
    percent = f"{100 * abs(ratio - 1):.0f}"
    if early:
        share = f"{100 * early[-1].fraction.median:.0f}" if early[-1].fraction else ""
        reason = f"level {early[-1].level + 1} was drawn at about {share} % of the way to its plateau"
    else:
        reason = "two levels with this spread leave a wide range, and the whole record also weighs the population"
    return f"The two-level method reads Vmax {percent} % {way} than the whole record: {reason}."
