"""What a whole-record estimate says beside its numbers: in a figure each, and in a sentence.

How much the levels narrowed the population; how far each level was from its plateau; which level does not fit, with
the estimate without it; what share of the doses the levels suggest were taken; the same record under other
populations; why the two-level method says something else.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pkcalc import flow, formulas
from pkcalc.drugs.profile import Prior
from pkcalc.estimate import posterior
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.intake import regimen_on_average, taken_on_average
from pkcalc.estimate.predict import predicted_levels, volume_of
from pkcalc.estimate.result import Band, Estimate, band
from pkcalc.record import Before, Record, Repeated
from pkcalc.units import show, show_number

Floats = NDArray[np.float64]

#: A standardised residual beyond this is reported as a level that does not fit.
MISFIT = 2.0

#: A level within this share of its plateau counts as settled.
SETTLED = 0.9


def _between(values: Band, unit: str) -> str:
    return f"{show_number(values.low)} to {show(values.high, unit)}"


# How much was learned -------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Narrowing:
    """How much the levels narrowed what the population left open, seen in the dose rate that holds a level.

    share: 0 where nothing was learned, 1 where everything was: 1 - (log width after)/(log width before).
    before, after: the dose rate of active drug [mg/day] that holds the level.
    """

    share: float
    before: Band
    after: Band
    sentence: str


def narrowing(estimate: Estimate, prior: Prior, *, level_mg_per_L: float) -> Narrowing:
    """How much narrower the levels made the dose rate that holds a level: R = Vmax C / (Km + C)."""
    bands = []
    for one in (posterior.prior_only(prior), estimate):
        rates = formulas.dose_rate_for_level(
            level_mg_per_L=level_mg_per_L, vmax_mg_per_day=one.vmax_mg_per_day, km_mg_per_L=one.km_mg_per_L
        )
        bands.append(band(np.asarray(rates, dtype=np.float64), one.weights))
    before, after = bands
    share = 1.0 - math.log(after.high / after.low) / math.log(before.high / before.low)
    if share < 0.05:
        verdict = "the levels say little more than that"
    else:
        verdict = f"the levels narrow this by {show_number(100 * share, 2)} %, to {_between(after, 'mg/day')}"
    sentence = (
        f"By the population alone, {show(level_mg_per_L, 'mg/L')} takes {_between(before, 'mg/day')} of active drug "
        f"(90 % interval); {verdict}."
    )
    return Narrowing(share, before, after, sentence)


# How settled each level was -------------------------------------------------------------------------------------


@dataclass(frozen=True)
class InForce:
    """The regimen in force at a level: its cycle, and a day on which a cycle begins."""

    regimen: Repeated
    cycle_begins_day: float


@dataclass(frozen=True)
class Settled:
    """A level against its plateau, at the same time after the dose.

    of_plateau: level over plateau (0.6: at 60 % of it; 1.3: still 30 % above), 0 where there is no plateau.
    chance: that it was within 10 % of the plateau. no_plateau: chance that there is none.
    """

    level: int
    of_plateau: Band
    chance: float
    no_plateau: float
    sentence: str


def fraction_settled(
    record: Record,
    levels: Sequence[LevelData],
    estimate: Estimate,
    in_force: Sequence[InForce | None],
    spread: RecordSpread,
) -> tuple[Settled, ...]:
    """How far each level was from the plateau of the regimen in force when it was drawn, by the estimate's draws.

    in_force: for every level the regimen in force, None where none can be named (that level is left out). The
    plateau is that of the regimen taken as the record is (`taken_on_average`), at the level's time in the cycle.
    Draws without a plateau count as 0.
    """
    volume = volume_of(estimate)
    vmax, kappa = estimate.vmax_mg_per_day, estimate.km_mg_per_L * volume
    full = taken_on_average(posterior.written_out(record), spread)
    course = flow.amounts(full, [x.time_day for x in levels], vmax, kappa, volume_L=volume)
    found = []
    for j, (level, now) in enumerate(zip(levels, in_force, strict=True)):
        if now is None:
            continue
        regimen = regimen_on_average(now.regimen, spread.share_at(level.time_day))
        plateau = _plateau(regimen, level.time_day - now.cycle_begins_day, vmax, kappa)
        ratio = np.where(np.isfinite(plateau), course[:, j] / plateau, 0.0)
        values = band(ratio, estimate.weights)
        chance = float(estimate.weights[(ratio >= SETTLED) & (ratio <= 1 / SETTLED)].sum())
        none = float(estimate.weights[~np.isfinite(plateau)].sum())
        found.append(Settled(level.index, values, chance, none, _settled_words(level, values, none)))
    return tuple(found)


def _plateau(regimen: Repeated, since_day: float, vmax: Floats, kappa: Floats) -> Floats:
    """Amount [mg] at a time of the cycle once the plateau is reached; +inf where there is none."""
    phase = since_day % regimen.cycle_day
    start = flow.periodic(regimen, vmax, kappa).start_mg
    there = np.isfinite(start)
    out = np.full(len(vmax), np.inf)
    if there.any():
        still_absorbed = regimen.cycles_still_absorbed() * regimen.cycle_day
        cycle = Record(doses=regimen.cycles(0, 1, 0.0), before=Before(regimen, still_absorbed))
        out[there] = flow.amounts(cycle, [phase], vmax[there], kappa[there], start_mg=start[there])[:, 0]
    return out


def _settled_words(level: LevelData, values: Band, none: float) -> str:
    name = f"Level {level.index + 1}"
    if none > 0.5:
        return f"{name} was drawn on a dose that has no plateau in this patient: it would have gone on rising."
    low, middle, high = (show_number(100 * x, 2) for x in (values.low, values.median, values.high))
    text = f"{name} was drawn at {middle} % of its plateau (90 % interval {low} to {high} %)"
    return (
        f"{text}; the chance that there is no plateau is {show_number(100 * none, 2)} %."
        if none > 0.005
        else f"{text}."
    )


# Levels that do not fit -----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Misfit:
    """A level that the record and the other levels did not lead one to expect.

    standardised_residual: (log level - expected) / spread, by the estimate without it. expected: that level from
    everything else. chance_wrong: by the estimate with it. without: the estimate that leaves it out.
    """

    level: int
    standardised_residual: float
    chance_wrong: float
    expected: Band
    without: Estimate
    sentence: str


def misfits(
    record: Record,
    levels: Sequence[LevelData],
    prior: Prior,
    spread: RecordSpread,
    estimate: Estimate,
    *,
    other_units: Mapping[str, float] | None = None,
) -> tuple[Misfit, ...]:
    """Every level that does not fit, with the estimate without it; none is ever dropped unseen.

    Looked at are levels whose residual in the estimate is beyond 2 or that are more likely wrong than not.
    other_units: name of a unit -> how many of it make 1 mg/L; a level that would fit in one of them is named so.
    """
    told = estimate.diagnostics.get("wrong_level")
    chance_wrong = told if isinstance(told, dict) else {}
    found = []
    for j, (level, fit) in enumerate(zip(levels, estimate.fit, strict=True)):
        wrong = float(chance_wrong.get(level.index, 0.0))
        if abs(fit.standardised_residual) < MISFIT and wrong < 0.5:
            continue
        others = [x for i, x in enumerate(levels) if i != j]
        without = posterior.from_record(record, others, prior, spread)
        drawn = predicted_levels(
            record,
            others,
            spread,
            without,
            [level.time_day],
            first_order_per_day=prior.first_order_per_day,
        )[:, 0]
        log_drawn = np.log(drawn)
        sd = math.sqrt(float(np.var(log_drawn)) + level.own_variance)
        residual = (math.log(level.level_mg_per_L) - float(np.mean(log_drawn))) / sd
        if abs(residual) < MISFIT and wrong < 0.5:
            continue
        expected = band(drawn, without.weights)
        words = _misfit_words(level, expected, residual, estimate, without, other_units or {})
        found.append(Misfit(level.index, residual, wrong, expected, without, words))
    return tuple(found)


def _misfit_words(
    level: LevelData,
    expected: Band,
    residual: float,
    estimate: Estimate,
    without: Estimate,
    other_units: Mapping[str, float],
) -> str:
    name = f"Level {level.index + 1}"
    sign = {"below": "under ", "above": "over ", None: ""}[level.censored]
    side = "above" if residual > 0 else "below"
    vmax, km = "vmax_mg_per_day", "km_mg_per_L"
    parts = [
        f"{name} ({sign}{show(level.level_mg_per_L, 'mg/L')}) does not fit: the record and everything else lead to "
        f"{show(expected.median, 'mg/L')} (90 % interval {_between(expected, 'mg/L')}), and it lies "
        f"{show_number(abs(residual), 2)} spreads {side} that.",
        f"With it Vmax is {show(estimate.summary[vmax].median, 'mg/day')} and Km "
        f"{show(estimate.summary[km].median, 'mg/L')}; without it {show(without.summary[vmax].median, 'mg/day')} and "
        f"{show(without.summary[km].median, 'mg/L')}.",
    ]
    parts += [
        f"It would fit if it had been reported in {unit}."
        for unit, factor in other_units.items()
        if expected.low <= level.level_mg_per_L / factor <= expected.high
    ]
    parts.append("Check its unit, its time, and the doses before it.")
    return " ".join(parts)


# What was taken -------------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class TakenShare:
    """Share of the doubtful doses that the levels themselves suggest were taken, every share from 50 to 100 % held
    equally likely beforehand. sentence: a question to ask, empty where the levels raise none."""

    share: Band
    chance_under_80_percent: float
    sentence: str


_SHARES_MISSED = np.linspace(0.0, 0.5, 6)


def taken_share(record: Record, levels: Sequence[LevelData], prior: Prior, spread: RecordSpread) -> TakenShare | None:
    """What share of the doses the levels suggest were taken. None without levels or where every dose was seen taken.

    The chance of the levels is compared under 0, 10, ... 50 % of the doubtful doses missed. A person who takes too
    little and one whose elimination is fast look alike from one level; the answer is then wide, as it should be.
    """
    doubtful = [d for d in record.doses if d.absorption is not None and spread.share_at(d.time_day) > 0]
    if not levels or (not doubtful and not (record.before and spread.share_at(record.start_day) > 0)):
        return None
    log_chance = np.array(
        [posterior.log_evidence(record, levels, prior, _all_alike(spread, float(x))) for x in _SHARES_MISSED]
    )
    weight = np.exp(log_chance - log_chance.max())
    fine = np.linspace(0.5, 1.0, 501)
    density = np.interp(fine, 1 - _SHARES_MISSED[::-1], weight[::-1])
    share = band(fine, density / density.sum())
    low = float(density[fine < 0.8].sum() / density.sum())
    sentence = ""
    if low > 0.8:
        percent = show_number(100 * share.median, 2)
        sentence = (
            f"The levels would fit best if about {percent} % of the doses had been taken (90 % interval "
            f"{show_number(100 * share.low, 2)} to {show_number(100 * share.high, 2)} %). Fast elimination would look "
            "alike. Could doses have been missed, held, vomited or bound by feeds? Ask, before the dose is raised."
        )
    return TakenShare(share, low, sentence)


def _all_alike(spread: RecordSpread, missed: float) -> RecordSpread:
    """The same share missed on every doubtful day; observed days stay observed."""
    if isinstance(spread.doses_differing, tuple):
        periods = tuple((day, missed if share > 0 else 0.0) for day, share in spread.doses_differing)
        return replace(spread, doses_differing=periods)
    return replace(spread, doses_differing=missed if spread.doses_differing > 0 else 0.0)


# Other populations, other methods ---------------------------------------------------------------------------------


def under_each(
    record: Record,
    levels: Sequence[LevelData],
    priors: Mapping[str, Prior],
    spread: RecordSpread,
    *,
    n: int = 2048,
) -> dict[str, Estimate]:
    """The same record under several populations, by name: what the choice of population does."""
    return {name: posterior.from_record(record, levels, prior, spread, n=n) for name, prior in priors.items()}


def against_pair(whole: Estimate, pair: Estimate, settled: Sequence[Settled], *, level_mg_per_L: float) -> str:
    """Why the two-level method and the whole record differ, in a sentence.

    Compared by the dose rate that holds a level. settled: of the two levels of the pair.
    """
    rates = [
        float(
            formulas.dose_rate_for_level(
                level_mg_per_L=level_mg_per_L,
                vmax_mg_per_day=e.point.vmax_mg_per_day,
                km_mg_per_L=e.point.km_mg_per_L,
            )
        )
        for e in (whole, pair)
    ]
    difference = 100 * (rates[1] / rates[0] - 1)
    found = (
        f"For {show(level_mg_per_L, 'mg/L')} the two-level method reads {show(rates[1], 'mg/day')} of active drug and "
        f"the whole record {show(rates[0], 'mg/day')}"
    )
    if abs(difference) < 3:
        return f"{found}: they agree."
    unsettled = [x for x in settled if x.of_plateau.median < SETTLED or x.of_plateau.median > 1 / SETTLED]
    if unsettled:
        worst = max(unsettled, key=lambda x: abs(math.log(max(x.of_plateau.median, 1e-3))))
        percent = show_number(100 * worst.of_plateau.median, 2)
        way = "too high" if pair.point.vmax_mg_per_day > whole.point.vmax_mg_per_day else "too low"
        return (
            f"{found}: level {worst.level + 1} was drawn at {percent} % of its plateau, so the two-level method reads "
            f"Vmax {way}."
        )
    return (
        f"{found}: two levels by themselves leave Vmax and Km wide open, and the whole record also uses the population "
        "and the doubt about the doses."
    )
