"""What the same record and levels would say under the other published populations that describe this patient."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import cast

import numpy as np
from numpy.typing import NDArray

from pkcalc import formulas
from pkcalc.cautions import State
from pkcalc.consult import Consult, Shown, level_data, record_spread
from pkcalc.drugs.profile import Prior, Sex
from pkcalc.errors import CannotEstimate, CaseError
from pkcalc.estimate import posterior
from pkcalc.estimate.result import Band, Estimate, band
from pkcalc.forecast import bands

Floats = NDArray[np.float64]

#: With fewer effective draws than this the estimate is made anew instead of being weighed again.
FEWEST_DRAWS = 250.0


@dataclass(frozen=True)
class Compared:
    """One population: its estimate, the steady level of the regimen in question on the central line, and the chance of
    a level above the critical one or of no steady state with every dose taken."""

    words: str
    used: bool
    vmax: Band
    km: Band
    steady: Band
    danger: float


def compare(consult: Consult, shown: Shown) -> tuple[Compared, ...]:
    """Every population side by side, the one used among them; empty where nothing can be compared."""
    chosen, plan = consult.chosen, consult.plan
    if chosen is None or plan is None:
        return ()
    # both lines are set off from the estimate by the share of doses missed, whatever the population
    own = chosen.point.vmax_mg_per_day
    central = plan.setting.central.point.vmax_mg_per_day / own
    taken = plan.setting.taken.point.vmax_mg_per_day / own
    found = []
    for name, words, estimate in populations_compared(consult):
        steady, full = (_steady(estimate, shown.rate_mg_per_day, share) for share in (central, taken))
        found.append(
            Compared(
                words=words,
                used=consult.prior is not None and name == consult.prior.population,
                vmax=estimate.summary["vmax_mg_per_day"],
                km=estimate.summary["km_mg_per_L"],
                steady=bands(steady[None, :], estimate.weights)[0],
                danger=float((full > consult.goal.critical_mg_per_L) @ estimate.weights),
            )
        )
    return tuple(found) if len(found) > 1 else ()


def _steady(estimate: Estimate, rate_mg_per_day: float, share: float) -> Floats:
    return np.asarray(
        formulas.steady_state_level(
            dose_rate_mg_per_day=rate_mg_per_day,
            vmax_mg_per_day=estimate.vmax_mg_per_day * share,
            km_mg_per_L=estimate.km_mg_per_L,
        )
    )


def populations_compared(consult: Consult) -> tuple[tuple[str, str, Estimate], ...]:
    """The estimate under every population of the drug file that describes this patient: (id, words, estimate)."""
    case, profile, prior, chosen = consult.case, consult.profile, consult.prior, consult.chosen
    weight, age = case.patient.weight_kg, case.patient.age_years
    if prior is None or chosen is None or consult.record is None or chosen.method != posterior.WHOLE_RECORD:
        return ()
    found: list[tuple[str, str, Estimate]] = []
    for population in profile.populations.values():
        low, high = population.ages_years
        if weight is None or (age is not None and not low <= age < high):
            continue
        if population.id == prior.population:
            found.append((population.id, population.words, chosen))
            continue
        try:
            other = population.at(weight, age, height_cm=case.patient.height_cm, sex=cast(Sex, case.patient.sex))
            found.append((population.id, population.words, under(consult, prior, other, chosen)))
        except (CannotEstimate, CaseError):
            continue
    return tuple(found)


def under(consult: Consult, prior: Prior, other: Prior, chosen: Estimate) -> Estimate:
    """The estimate under another population: the same draws weighed anew where they reach, else made anew."""
    if prior.first_order_per_day == other.first_order_per_day:
        again = weighed_again(chosen, prior, other)
        if 1.0 / float(np.sum(again.weights**2)) >= FEWEST_DRAWS:
            return again
    assert consult.record is not None
    state = State(case=consult.case, profile=consult.profile, site=consult.site, observations=consult.observations)
    spread = record_spread(consult.case, consult.profile)
    return posterior.from_record(consult.record, level_data(state), other, spread, n=1024)


def weighed_again(estimate: Estimate, prior: Prior, other: Prior) -> Estimate:
    """The draws weighed by the ratio of two populations: posterior under `other` = posterior x other / prior."""
    assert estimate.volume_L is not None
    draws = np.log(np.stack([estimate.vmax_mg_per_day, estimate.km_mg_per_L, estimate.volume_L]))
    log_ratio = _log_density(draws, other) - _log_density(draws, prior)
    weights = estimate.weights * np.exp(log_ratio - log_ratio.max())
    weights /= weights.sum()
    return replace(
        estimate,
        weights=weights,
        summary={
            "vmax_mg_per_day": band(estimate.vmax_mg_per_day, weights),
            "km_mg_per_L": band(estimate.km_mg_per_L, weights),
            "volume_L": band(estimate.volume_L, weights),
        },
    )


def _log_density(draws: Floats, prior: Prior) -> Floats:
    mean, cov = posterior.prior_moments(prior)
    off = draws - mean[:, None]
    found: Floats = -0.5 * np.sum(off * np.linalg.solve(cov, off), axis=0)
    return found
