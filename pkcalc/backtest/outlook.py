"""One patient's levels, each forecast from what was known before it, by every method.

For each level the record is cut at the draw and only earlier levels are used. The doses up to the draw are
taken as known. What is forecast is the level as the laboratory would measure it, on the working basis (total
at normal binding): the true level by the draws of the estimate, with the spread of a measured level on top.

What one patient's forecasts share is calculated once: each estimate, the courses of the population's draws at
all levels, and where the patient lies in the population, for which the draws that forecast the last level are
weighed by what came (importance weights).
"""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from pkcalc import flow, formulas, steadiness
from pkcalc.backtest.folder import Raw, case_of
from pkcalc.case import Case
from pkcalc.cautions import State
from pkcalc.consult import level_data, patient_prior, record_spread
from pkcalc.drugs.profile import Prior, Profile, load_profile
from pkcalc.errors import CannotEstimate, CaseError, DrugFileError, as_typed
from pkcalc.estimate import posterior
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.intake import intake_gain, plan_intake
from pkcalc.estimate.pair import SteadyPair, VolumeSpread, from_steady_levels
from pkcalc.estimate.predict import predicted_levels, volume_of
from pkcalc.estimate.result import Estimate, weighted_quantile
from pkcalc.given import given_record
from pkcalc.levels import Observation, observe
from pkcalc.record import Record
from pkcalc.site import Site

Floats = NDArray[np.float64]

PRIOR, ONE, TWO, WHOLE = "population only", "one level", "two-level formula", "whole record"
METHODS = (PRIOR, ONE, TWO, WHOLE)

#: What each is called where a person chooses among them.
CHOICES = {"population": PRIOR, "one-level": ONE, "two-level": TWO, "whole-record": WHOLE}

DRAWS = 1024

#: A patient with fewer levels is not placed in the population: one level cannot tell Vmax from Km, and what little it
#: says of them together has no normal shape.
FEWEST_PLACED = 2

#: With fewer effective draws than this the place in the population is estimated anew, not weighed.
_EFFECTIVE_DRAWS = 100.0
MOST_DOSES = 5_000
MOST_LEVELS = 40
_SEED = 20_261_201
_PROBABILITIES = np.array([0.05, 0.25, 0.5, 0.75, 0.95])

#: What a row of the results tells.
FORECAST, NO_FORECAST, LEFT_OUT, SET_ASIDE, PATIENT = (
    "forecast",
    "no forecast",
    "level left out",
    "set aside",
    "patient",
)


@dataclass(frozen=True)
class Row:
    """One line of the results; what a line does not tell is None or empty.

    forecast: level `level` (1 for the first) of a patient by one method, from `earlier` levels; levels in
    mg/L on the working basis; rank is the share of the forecast's draws below what came. no forecast: why a
    method gave none. level left out: why a level is not held against any forecast. set aside: why a whole
    patient is not. patient: mean and covariance of the logs of Vmax and Km against the population, from all
    levels, as information beyond the population's own spread.
    """

    number: int
    patient: str
    kind: str
    level: int = 0
    method: str = ""
    earlier: int = 0
    observed_mg_per_L: float | None = None
    forecast_mg_per_L: float | None = None
    low_90_mg_per_L: float | None = None
    low_50_mg_per_L: float | None = None
    high_50_mg_per_L: float | None = None
    high_90_mg_per_L: float | None = None
    rank: float | None = None
    reason: str = ""
    detail: str = ""
    groups: str = ""
    population: str = ""
    log_vmax: float | None = None
    log_km: float | None = None
    var_vmax: float | None = None
    var_km: float | None = None
    cov_vmax_km: float | None = None
    prior_sd_vmax: float | None = None
    prior_sd_km: float | None = None
    prior_correlation: float | None = None


@dataclass
class _Known:
    """What does not change from level to level."""

    raw: Raw
    case: Case
    profile: Profile
    site: Site
    prior: Prior
    record: Record
    spread: RecordSpread
    observations: tuple[Observation, ...]
    data: dict[int, LevelData]
    groups: str
    methods: Sequence[str]
    estimates: dict[tuple[int, ...], Estimate | str] = field(default_factory=dict)
    last: tuple[tuple[int, ...], Estimate, Floats] | None = None

    def row(self, kind: str, **more: object) -> Row:
        return replace(Row(self.raw.number, self.raw.key, kind, groups=self.groups), **more)  # type: ignore[arg-type]

    def estimate(self, which: Sequence[int]) -> Estimate | str:
        """The whole-record estimate from these levels, or why there is none; each is calculated once."""
        key = tuple(which)
        if key not in self.estimates:
            levels = [self.data[i] for i in key]
            last = max((x.time_day for x in levels), default=0.0)
            try:
                found = posterior.from_record(_until(self.record, last), levels, self.prior, self.spread, n=DRAWS)
                self.estimates[key] = found if found.trusted else found.distrust
            except (CaseError, CannotEstimate) as refusal:
                self.estimates[key] = str(refusal)
        return self.estimates[key]


def outlooks(raw: Raw, drug: str, site: Site, methods: Sequence[str] = METHODS) -> list[Row]:
    """Every forecast of one patient by these methods, and what was left out with the reason. Never raises for
    bad data."""
    try:
        return _outlooks(raw, drug, site, methods)
    except CaseError as error:
        detail = " ".join(p.text for p in error.problems[:3])
        more = len(error.problems) - 3
        return [_aside(raw, "the record cannot be read", detail + (f" And {more} more." if more > 0 else ""))]
    except CannotEstimate as refusal:
        return [_aside(raw, "the record carries no forecast", str(refusal))]
    except Exception as error:  # one record must not end the run; the type alone names no data
        return [_aside(raw, "the calculation stopped", type(error).__name__)]


def _aside(raw: Raw, reason: str, detail: str) -> Row:
    return Row(raw.number, as_typed(raw.key), SET_ASIDE, reason=reason, detail=as_typed(detail, 600))


def _outlooks(raw: Raw, drug: str, site: Site, methods: Sequence[str]) -> list[Row]:
    case = case_of(raw, drug)
    if case.drug != drug:
        return [_aside(raw, "another drug", f"The case is about {case.drug}.")]
    profile = load_profile(case.drug)
    prior = patient_prior(case, profile, site)
    if prior is None:
        return [_aside(raw, "no population for this patient", "No weight is given, or the age is not covered.")]
    drawn = [x.drawn for x in case.levels if x.drawn is not None]
    if not drawn:
        return [_aside(raw, "no level with its time", "")]
    record = given_record(case, profile)
    if len(record.doses) > MOST_DOSES:
        return [_aside(raw, "the record is too long", f"{len(record.doses):,} doses; at most {MOST_DOSES:,}.")]
    observations = observe(case, profile, site)
    state = State(case=case, profile=profile, site=site, observations=observations)
    known = _Known(
        raw,
        case,
        profile,
        site,
        prior,
        record,
        record_spread(case, profile),
        observations,
        {x.index: x for x in level_data(state)},
        json.dumps(raw.groups, sort_keys=True, ensure_ascii=False) if raw.groups else "",
        methods,
    )
    found: list[Row] = []
    days = {o.level.index: 0.0 if o.level.drawn is None else case.day(o.level.drawn) for o in observations}
    order = sorted(observations, key=lambda o: (days[o.level.index], o.level.index))
    learned: list[int] = []
    held: list[tuple[Observation, LevelData, list[int]]] = []
    for o in order:
        reason = _left_out(known, o)
        if reason:
            found.append(known.row(LEFT_OUT, level=o.level.index + 1, reason=reason, detail=o.set_aside))
            if o.level.index in known.data and o.censored is not None and len(learned) < MOST_LEVELS:
                learned.append(o.level.index)
            continue
        if len(learned) >= MOST_LEVELS:
            found.append(known.row(LEFT_OUT, level=o.level.index + 1, reason=f"after the first {MOST_LEVELS} levels"))
            continue
        at = known.data[o.level.index]
        held.append((o, at, [i for i in learned if known.data[i].time_day < at.time_day]))
        learned.append(o.level.index)
    at_first = _by_population(known, [at.time_day for _, at, _ in held]) if held else np.zeros((0, 0))
    for n, (o, at, earlier) in enumerate(held):
        found += _one_level(known, o, at, earlier, at_first[:, n])
    if len(learned) >= FEWEST_PLACED and WHOLE in methods:
        found += _against_population(known, learned)
    return found


def _by_population(known: _Known, days: Sequence[float]) -> Floats:
    """True level at each of these days by the draws of the population, in one pass; shape (draws, days).

    As `predicted_levels` where no level is known, but no number drawn for one day depends on what was given
    after it: doses are doubted in the order in which they were given.
    """
    estimate = known.estimate([])
    assert isinstance(estimate, Estimate)
    vmax, volume = estimate.vmax_mg_per_day, volume_of(estimate)
    kappa = estimate.km_mg_per_L * volume
    full = posterior.as_reckoned(_until(known.record, max(days)), known.spread, known.prior.first_order_per_day)
    plan = plan_intake(full, days, known.spread)
    course, faded = flow.fading(
        full, plan.sample_days, vmax, kappa, volume_L=volume, typical_per_day=_typical_per_day(estimate)
    )
    levels: Floats = course[:, plan.level_at] / volume[:, None]
    if plan.groups:
        chance = np.random.default_rng(_SEED + 1)
        habit = chance.standard_normal(len(vmax))
        odds = plan.variance[:-1]
        taken = odds / (1 + odds) <= chance.random((len(odds), len(vmax))).T
        change = np.column_stack([taken * (1 + odds) - 1, habit])
        gain = intake_gain(plan, course, faded)
        levels = levels * np.exp(np.einsum("ntd,nd->nt", gain, change))
    return levels


def _left_out(known: _Known, o: Observation) -> str:
    if o.level.drawn is None:
        return "the time of the draw is not stated"
    if o.set_aside:
        return "set aside by the rules for levels"
    if not o.readable:
        return "binding leaves no single reading"
    if o.censored is not None:
        return "reported only as below or above a limit; used to learn from"
    return ""


def _typical_per_day(estimate: Estimate) -> float:
    """What sets the engine's steps, as within the estimates: errors of 1e-3 for the fastest per cent of the draws,
    of 1e-5 for the rest; the very fastest, a draw or two, get no class of steps of their own."""
    per_day = estimate.vmax_mg_per_day / (estimate.km_mg_per_L * volume_of(estimate))
    return max(posterior.STEPS * float(np.quantile(per_day, 0.99)), 0.2501 * float(np.max(per_day)))


def _one_level(known: _Known, o: Observation, at: LevelData, earlier: list[int], at_first: Floats) -> list[Row]:
    """The rows of one level. at_first: the true level by the population's draws."""
    found = []
    if PRIOR in known.methods:
        found.append(_by_draws(known, PRIOR, o, at, [], len(earlier), at_first))
    if not earlier:
        return found
    latest = max(earlier, key=lambda i: (known.data[i].time_day, i))
    # from a single earlier level the two are the same calculation
    same = earlier == [latest]
    one = _by_draws(known, ONE, o, at, [latest], len(earlier)) if ONE in known.methods else None
    if one is not None:
        found.append(one)
    if TWO in known.methods:
        found.append(_by_pair(known, o, at, earlier))
    if WHOLE in known.methods:
        if same and one is not None:
            found.append(replace(one, method=WHOLE))
        else:
            found.append(_by_draws(known, WHOLE, o, at, earlier, len(earlier)))
    return found


def _by_draws(
    known: _Known,
    method: str,
    o: Observation,
    at: LevelData,
    which: list[int],
    earlier: int,
    true: Floats | None = None,
) -> Row:
    estimate = known.estimate(which)
    head = {"level": o.level.index + 1, "method": method, "earlier": earlier, "population": known.prior.population}
    if isinstance(estimate, str):
        return known.row(NO_FORECAST, **head, reason="the estimate was refused or is not trusted", detail=estimate)
    if true is None:
        true = predicted_levels(
            _until(known.record, at.time_day),
            [known.data[i] for i in which],
            known.spread,
            estimate,
            [at.time_day],
            first_order_per_day=known.prior.first_order_per_day,
            typical_per_day=_typical_per_day(estimate),
        )[:, 0]
        known.last = ((*which, o.level.index), estimate, true)
    if not np.all(np.isfinite(true)) or not np.all(true > 0):
        return known.row(NO_FORECAST, **head, reason="nothing had been absorbed yet by the record")
    measured = true * _measuring(at, known.spread, len(true))
    low, lower, median, upper, high = (float(x) for x in weighted_quantile(measured, estimate.weights, _PROBABILITIES))
    return known.row(
        FORECAST,
        **head,
        observed_mg_per_L=at.level_mg_per_L,
        forecast_mg_per_L=median,
        low_90_mg_per_L=low,
        low_50_mg_per_L=lower,
        high_50_mg_per_L=upper,
        high_90_mg_per_L=high,
        rank=_rank(measured, estimate.weights, at.level_mg_per_L),
    )


def _by_pair(known: _Known, o: Observation, at: LevelData, earlier: list[int]) -> Row:
    """The latest two earlier levels on two doses, settled by the consult's own rule; the steady level on the
    dose in force."""
    head = {"level": o.level.index + 1, "method": TWO, "earlier": len(earlier)}
    before = [x for x in known.observations if x.level.index in earlier]
    pairs = steadiness.steady_pairs(known.case, known.profile, before)
    pair = _latest_pair(known, pairs)
    if pair is None:
        return known.row(NO_FORECAST, **head, reason="no two earlier levels on two different doses")
    course = steadiness.course_of(known.case, o)
    if course is None or course.regimen is None:
        return known.row(NO_FORECAST, **head, reason="no single dose in force when the level was drawn")
    whole = known.estimate(earlier)
    way = steadiness.settling(
        known.case,
        known.profile,
        before,
        known.estimate([]) if isinstance(whole, str) else whole,  # type: ignore[arg-type]
        pairs,
    )
    if any(s.settled is False for s in way if s.level in (pair[0].level, pair[1].level)):
        return known.row(NO_FORECAST, **head, reason="a level of the pair had not settled")
    volume = VolumeSpread(known.prior.volume_L, known.prior.volume_log_sd)
    try:
        estimate = from_steady_levels(*pair, volume=volume)
    except CannotEstimate as refusal:
        return known.row(NO_FORECAST, **head, reason="no saturable curve passes through the pair", detail=str(refusal))
    rate = course.regimen.active_mg_per_day(known.profile)
    vmax, km = estimate.point.vmax_mg_per_day, estimate.point.km_mg_per_L
    if rate >= vmax:
        return known.row(NO_FORECAST, **head, reason="by the pair there is no steady state on this dose")
    point = float(formulas.steady_state_level(dose_rate_mg_per_day=rate, vmax_mg_per_day=vmax, km_mg_per_L=km))
    steady = np.asarray(
        formulas.steady_state_level(
            dose_rate_mg_per_day=rate, vmax_mg_per_day=estimate.vmax_mg_per_day, km_mg_per_L=estimate.km_mg_per_L
        ),
        dtype=np.float64,
    )
    measured = steady * _measuring(at, known.spread, len(steady))
    low, lower, _, upper, high = (float(x) for x in weighted_quantile(measured, estimate.weights, _PROBABILITIES))
    return known.row(
        FORECAST,
        **head,
        observed_mg_per_L=at.level_mg_per_L,
        forecast_mg_per_L=point,
        low_90_mg_per_L=low,
        low_50_mg_per_L=lower,
        high_50_mg_per_L=upper,
        high_90_mg_per_L=high,
        rank=_rank(measured, estimate.weights, at.level_mg_per_L),
    )


def _latest_pair(known: _Known, pairs: Sequence[SteadyPair]) -> tuple[SteadyPair, SteadyPair] | None:
    ordered = sorted(pairs, key=lambda p: (known.data[p.level].time_day, p.level))
    if not ordered:
        return None
    last = ordered[-1]
    other = [p for p in ordered[:-1] if not math.isclose(p.rate_mg_per_day, last.rate_mg_per_day, rel_tol=1e-9)]
    return (other[-1], last) if other else None


def _placed(known: _Known, learned: list[int]) -> tuple[Estimate, Floats] | None:
    """Draws and weights by all levels: those that forecast the last level, weighed by what came; a new estimate
    where these are too few, or none."""
    if known.last is not None and set(known.last[0]) == set(learned):
        which, estimate, true = known.last
        at = known.data[which[-1]]
        if np.all(true > 0):
            off = (math.log(at.level_mg_per_L) - np.log(true)) ** 2 / at.own_variance
            chance, factor = known.spread.wrong_level_chance, known.spread.wrong_level_factor
            usual, wrong = np.exp(-0.5 * off), np.exp(-0.5 * off / factor**2) / factor
            weights = estimate.weights * ((1 - chance) * usual + chance * wrong)
            total = float(np.sum(weights))
            if total > 0 and total**2 >= _EFFECTIVE_DRAWS * float(np.sum(weights**2)):
                return estimate, weights / total
    found = known.estimate(learned)
    return None if isinstance(found, str) else (found, found.weights)


def _against_population(known: _Known, learned: list[int]) -> list[Row]:
    """Where this patient lies in the population by all levels, for the hint on the site's own population."""
    placed = _placed(known, learned)
    if placed is None:
        return []
    estimate, w = placed
    prior = known.prior
    a = np.log(estimate.vmax_mg_per_day / prior.vmax_mg_per_day)
    k = np.log(estimate.km_mg_per_L / prior.km_mg_per_L)
    mean_a, mean_k = float(np.sum(w * a)), float(np.sum(w * k))
    return [
        known.row(
            PATIENT,
            earlier=len(learned),
            population=prior.population,
            log_vmax=mean_a,
            log_km=mean_k,
            var_vmax=float(np.sum(w * (a - mean_a) ** 2)),
            var_km=float(np.sum(w * (k - mean_k) ** 2)),
            cov_vmax_km=float(np.sum(w * (a - mean_a) * (k - mean_k))),
            prior_sd_vmax=prior.vmax_log_sd,
            prior_sd_km=prior.km_log_sd,
            prior_correlation=prior.correlation,
        )
    ]


def _until(record: Record, day: float) -> Record:
    """The record without what was given from this moment on."""
    return replace(record, doses=tuple(d for d in record.doses if d.time_day < day))


def _measuring(at: LevelData, spread: RecordSpread, n: int) -> Floats:
    """What measuring does to a true level: its own spread, and now and then a wrong level. Same bits always."""
    chance = np.random.default_rng(_SEED)
    wide = np.where(chance.random(n) < spread.wrong_level_chance, spread.wrong_level_factor, 1.0)
    factor: Floats = np.exp(math.sqrt(at.own_variance) * wide * chance.standard_normal(n))
    return factor


def _rank(draws: Floats, weights: Floats, observed: float) -> float:
    return float(min(1.0, np.sum(weights * ((draws < observed) + 0.5 * (draws == observed)))))


def check_drug(drug: str) -> None:
    """CaseError or DrugFileError where the drug is not known."""
    from pkcalc.drugs.profile import drug_names
    from pkcalc.errors import Problem

    if drug not in drug_names():
        raise CaseError(
            Problem("--drug", f'"{as_typed(drug)}" was given', ", ".join(drug_names()), "Choose one of these")
        )
    if not load_profile(drug).populations:
        raise DrugFileError(f"{drug}: the drug file has no population, so nothing can be forecast from one.")
