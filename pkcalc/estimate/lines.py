"""Vmax and Km from three or more steady levels: regression, direct linear plot, three straight lines.

All five answer in the same shape, side by side, so that a resident can see where they part company. A line
that reads off an impossible number is reported as a failure with its reason; the number goes no further.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from statistics import NormalDist
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from pkcalc import formulas
from pkcalc.errors import CannotEstimate, CaseError, Problem
from pkcalc.estimate.pair import SteadyPair, VolumeSpread
from pkcalc.estimate.regression import (
    SAME,
    CurveFit,
    Limits,
    all_one,
    confidence_draws,
    level_on_rate,
    level_profile_limits,
)
from pkcalc.estimate.result import Estimate, Floats, LevelFit, Point, band, log_correlation
from pkcalc.units import show, show_number

StraightLine = Literal["double reciprocal", "C/R against C", "R against R/C"]
REGRESSION = "weighted regression on the level"
DIRECT_LINEAR = "direct linear plot"
STRAIGHT_LINES: tuple[StraightLine, ...] = ("double reciprocal", "C/R against C", "R against R/C")
#: The order of every side-by-side comparison.
METHODS: tuple[str, ...] = (REGRESSION, DIRECT_LINEAR, *STRAIGHT_LINES)

FEWEST, MOST = 3, 20
#: Own synthesis: at 20 times the highest dose the curve leaves a straight proportion by 5 % at that dose,
#: less than one level's own spread, so a larger Vmax says only that no saturation shows.
ABSURD_VMAX = 20.0
#: Own synthesis: more failures than this among redrawn sets, and the survivors no longer describe the method.
MOST_REJECTED = 0.25
#: Chance of a scatter this large under the stated spread, below which the stated spread is not believed.
SCATTER_CHANCE = 0.01

_SEED = 19740101


@dataclass(frozen=True)
class SteadyPairs:
    """Steady levels with the dose rates that gave them.

    rate_mg_per_day: active drug reaching the body, mg/day, shape (n,). level_mg_per_L: on the working basis,
    mg/L, shape (n,). level_log_sd: total spread of each level as a log-sd, shape (n,). index: position of
    each level in the case (0 for the first), shape (n,). n is 2 to 20; a dose may occur more than once.
    Raises CaseError naming every number that is missing, not finite or not positive.
    """

    rate_mg_per_day: Floats
    level_mg_per_L: Floats
    level_log_sd: Floats
    index: NDArray[np.int64]

    def __post_init__(self) -> None:
        problems: list[Problem] = []
        for name, words, unit in (
            ("rate_mg_per_day", "Dose rate", "mg/day"),
            ("level_mg_per_L", "Level", "mg/L"),
            ("level_log_sd", "Spread of the level", ""),
        ):
            values = np.array(getattr(self, name), dtype=np.float64).reshape(-1)
            values.setflags(write=False)
            object.__setattr__(self, name, values)
            for at in np.flatnonzero(~(np.isfinite(values) & (values > 0))):
                given = show(float(values[at]), unit) if np.isfinite(values[at]) else "no finite number"
                problems.append(
                    Problem(f"{words}, pair {at + 1}", f"{given} was given", "a number above 0", "Check the entry")
                )
        index = np.array(self.index, dtype=np.int64).reshape(-1)
        index.setflags(write=False)
        object.__setattr__(self, "index", index)
        counts = {len(self.rate_mg_per_day), len(self.level_mg_per_L), len(self.level_log_sd), len(index)}
        if len(counts) > 1:
            problems.append(
                Problem(
                    "Steady pairs",
                    "doses and levels differ in number",
                    "one dose for each level",
                    "Pair them up",
                )
            )
        elif not 2 <= len(index) <= MOST:
            problems.append(
                Problem(
                    "Steady pairs",
                    f"{len(index)} given",
                    f"2 to {MOST} pairs, both ends included",
                    "Choose the pairs that describe the patient as now",
                )
            )
        if problems:
            raise CaseError(problems)

    def __len__(self) -> int:
        return len(self.index)

    def words(self, at: int) -> str:
        """'level 3 (350 mg/day, 17.5 mg/L)', for messages."""
        dose, level = float(self.rate_mg_per_day[at]), float(self.level_mg_per_L[at])
        return f"level {int(self.index[at]) + 1} ({show(dose, 'mg/day')}, {show(level, 'mg/L')})"


def gather(steady: Sequence[SteadyPair]) -> SteadyPairs:
    """The pairs of a case as one record.

    Raises CannotEstimate where free and total levels are mixed, or where there are more than 20.
    """
    if len(steady) > MOST:
        raise CannotEstimate(
            f"{len(steady)} levels count as steady.",
            f"No more than {MOST} are taken together: over so many the patient has rarely stayed the same.",
            "Leave out the levels that no longer describe the patient.",
        )
    if {"free", "total"} <= {pair.kind for pair in steady}:
        raise CannotEstimate(
            "Some of these levels are free and others total.",
            "Free and total levels cannot stand in one plot, because binding differs between patients and days.",
            "Use levels of one kind, or give the albumin so that all are brought to one basis.",
        )
    return SteadyPairs(
        rate_mg_per_day=np.array([pair.rate_mg_per_day for pair in steady]),
        level_mg_per_L=np.array([pair.level_mg_per_L for pair in steady]),
        level_log_sd=np.array([pair.log_sd for pair in steady]),
        index=np.array([pair.level for pair in steady]),
    )


@dataclass(frozen=True)
class LineFailure:
    """A method that gives no possible answer on these data. It holds words only: no number of it is used."""

    method: str
    because: str

    @property
    def text(self) -> str:
        kind = "curve" if self.method == REGRESSION else "plot" if self.method == DIRECT_LINEAR else "line"
        return f"{_named(self.method)}: this {kind} fails on these data, because {self.because}."


Result = Estimate | LineFailure


def _named(method: str) -> str:
    """A method's name at the head of a sentence."""
    return method[0].upper() + method[1:]


# --- the straight lines -------------------------------------------------------------------------------------


@dataclass(frozen=True)
class ReadOff:
    """Slope and intercept of a straight line and what would be read off it; may be negative or infinite."""

    slope: Floats
    intercept: Floats
    vmax: Floats
    km: Floats


def line_axes(kind: StraightLine, *, level: Floats, rate: Floats) -> tuple[Floats, Floats]:
    """Horizontal and vertical values of the points of a straight line, shape as given."""
    if kind == "double reciprocal":
        return 1.0 / level, 1.0 / rate
    if kind == "C/R against C":
        return level, level / rate
    return rate / level, rate


def straight_line(kind: StraightLine, *, level: Floats, rate: Floats, weights: Floats | None = None) -> ReadOff:
    """Ordinary least squares of one of the three straight lines, and Vmax and Km as they are read off it.

    level, rate: shape (..., n), positive. weights: of the squared vertical distances, default 1, as taught.
    double reciprocal: 1/R = 1/Vmax + (Km/Vmax) (1/C). C/R against C: C/R = Km/Vmax + C/Vmax.
    R against R/C: R = Vmax - Km (R/C). Source: Copeland, Enzymes, 2nd ed., chapter 5.
    """
    level, rate = np.broadcast_arrays(level, rate)
    x, y = line_axes(kind, level=level, rate=rate)
    w = np.ones(x.shape[-1]) if weights is None else weights
    w = w / w.sum()
    x_mean, y_mean = (x @ w)[..., None], (y @ w)[..., None]
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = np.asarray(((x - x_mean) * (y - y_mean)) @ w / (((x - x_mean) ** 2) @ w))
        intercept = np.asarray(y_mean[..., 0] - slope * x_mean[..., 0])
        if kind == "double reciprocal":
            return ReadOff(slope, intercept, 1.0 / intercept, slope / intercept)
        if kind == "C/R against C":
            return ReadOff(slope, intercept, 1.0 / slope, intercept / slope)
        return ReadOff(slope, intercept, intercept, -slope)


def _pull(kind: StraightLine, pairs: SteadyPairs) -> tuple[int, float]:
    """The pair that pulls hardest on a straight line, and its share of the spread along the axis."""
    x, _ = line_axes(kind, level=pairs.level_mg_per_L, rate=pairs.rate_mg_per_day)
    share = (x - x.mean()) ** 2
    at = int(np.argmax(share))
    return at, float(share[at] / share.sum())


# --- the direct linear plot ---------------------------------------------------------------------------------


@dataclass(frozen=True)
class Crossings:
    """Where the lines Vmax = R + Km R/C of the direct linear plot cross, two by two.

    first, second: positions of the two pairs, shape (p,). km, vmax: where they cross, as drawn, shape (...,
    p); may be negative, infinite for parallel lines. km_counted, vmax_counted: as they enter the median.
    """

    first: NDArray[np.int64]
    second: NDArray[np.int64]
    km: Floats
    vmax: Floats
    km_counted: Floats
    vmax_counted: Floats


def crossings(*, level: Floats, rate: Floats, error_in: Literal["level", "rate"]) -> Crossings:
    """All pairwise crossings of the direct linear plot, and how those outside the positive quadrant count.

    A crossing that error has carried off the positive quadrant keeps the place in the order that it had on
    the way out. Error in the rate (Eisenthal & Cornish-Bowden 1974, rule from memory): Vmax and Km both
    negative counts as larger than any number, since it went out through infinity; Km alone negative is taken
    at its face value, since it went out through zero; two points at one level tell nothing and are left out.
    Error in the level (own derivation by the same argument): 1/Km is linear in each 1/C and passes zero, so
    every crossing with a negative Km went out through infinity and counts as larger than any number; two
    levels on one dose tell nothing about Km and are left out.

    level, rate: shape (..., n), positive.
    """
    level, rate = np.broadcast_arrays(level, rate)
    i, j = np.triu_indices(level.shape[-1], 1)
    known = rate if error_in == "level" else level
    apart = np.abs(known[..., i] - known[..., j]) > SAME * known[..., i]
    i, j = (ends[np.any(apart.reshape(-1, len(i)), axis=0)] for ends in (i, j))
    with np.errstate(divide="ignore", invalid="ignore"):
        bend = rate[..., i] / level[..., i] - rate[..., j] / level[..., j]
        km = (rate[..., j] - rate[..., i]) / bend
        vmax = rate[..., i] * rate[..., j] * (1.0 / level[..., i] - 1.0 / level[..., j]) / bend
    outside = ~(km > 0) if error_in == "level" else ~((vmax > 0) | (km > 0))
    outside = outside | ~np.isfinite(km) | ~np.isfinite(vmax)
    return Crossings(
        first=i,
        second=j,
        km=km,
        vmax=vmax,
        km_counted=np.where(outside, np.inf, km),
        vmax_counted=np.where(outside, np.inf, vmax),
    )


def medians(found: Crossings) -> tuple[Floats, Floats]:
    """Vmax and Km of the direct linear plot; infinite where half of the crossings or more lie outside."""
    if len(found.first) == 0:
        nowhere = np.full(found.km.shape[:-1], np.inf)
        return nowhere, nowhere
    return np.median(found.vmax_counted, axis=-1), np.median(found.km_counted, axis=-1)


# --- why a reading is refused -------------------------------------------------------------------------------


def admissible(vmax: Floats, km: Floats, pairs: SteadyPairs) -> NDArray[np.bool_]:
    """Which readings a patient could have: positive, above every dose that gave a steady level, not "
    "absurd."""
    largest = float(pairs.rate_mg_per_day.max())
    with np.errstate(invalid="ignore"):
        settles = vmax > largest * (1.0 + 1e-9)  # nearer than that is rounding, not headroom
        return np.isfinite(vmax) & np.isfinite(km) & (km > 0) & settles & (vmax < ABSURD_VMAX * largest)


def _below_zero(name: str, value: float, unit: str) -> str:
    """The number refused, for the resident to see; without digits where they mean nothing."""
    return f"{name} {show(value, unit)}" if abs(value) < 1e5 else f"a {name} far below 0"


def _why_not(vmax: float, km: float, pairs: SteadyPairs) -> str:
    """The reason in words why a reading is refused; empty where it may stand."""
    largest = float(pairs.rate_mg_per_day.max())
    if not (np.isfinite(vmax) and np.isfinite(km)):
        return "no saturation shows in the way it weighs them"
    if vmax <= 0 or km <= 0:
        bad = [_below_zero("Vmax", vmax, "mg/day")] * (vmax <= 0) + [_below_zero("Km", km, "mg/L")] * (km <= 0)
        return f"it would read {' and '.join(bad)}, which is impossible"
    if vmax <= largest * (1.0 + 1e-9):
        return (
            f"it would read Vmax {show(vmax, 'mg/day', 4)}, not above the {show(largest, 'mg/day', 4)} that "
            "gave a steady level"
        )
    if vmax >= ABSURD_VMAX * largest:
        return (
            f"it would read a Vmax more than {show_number(ABSURD_VMAX)} times the highest dose, so no "
            "saturation shows in the way it weighs them"
        )
    return ""


# --- draws --------------------------------------------------------------------------------------------------


def _stratified_normal(draws: int, columns: int) -> Floats:
    """Standard normal draws, each column covering the n even strata once, in a fixed order; shape (n, "
    "columns)."""
    table = np.vectorize(NormalDist().inv_cdf, otypes=[float])((np.arange(draws) + 0.5) / draws)
    generator = np.random.Generator(np.random.PCG64(_SEED))
    return np.column_stack([generator.permutation(table) for _ in range(columns)])


def redrawn_levels(pairs: SteadyPairs, draws: int, log_sd: Floats | None = None) -> Floats:
    """The same levels drawn again within their own spread, shape (draws, n). Fixed: no two runs differ.

    log_sd: another spread, for showing what one part of it (the assay) does alone.
    """
    order = np.lexsort((pairs.level_log_sd, pairs.level_mg_per_L, pairs.rate_mg_per_day))
    z = np.empty((draws, len(pairs)))
    z[:, order] = _stratified_normal(draws, len(pairs))  # by size, so that the order of entry changes nothing
    spread = pairs.level_log_sd if log_sd is None else log_sd
    return np.asarray(pairs.level_mg_per_L * np.exp(z * spread))


def _finish(
    *,
    method: str,
    pairs: SteadyPairs,
    point: Point,
    vmax: Floats,
    km: Floats,
    rejected: float,
    diagnostics: dict[str, object],
    distrust: list[str],
    rejected_words: str,
    volume: VolumeSpread | None,
) -> Estimate:
    n = len(vmax)
    weights = np.full(n, 1.0 / n)
    summary = {"vmax_mg_per_day": band(vmax, weights), "km_mg_per_L": band(km, weights)}
    volume_L = None
    if volume is not None:
        # The last of more columns than there can be pairs: independent of every level's column.
        volume_L = volume.median_L * np.exp(volume.log_sd * _stratified_normal(n, MOST + 1)[:, -1])
        summary["volume_L"] = band(volume_L, weights)
    fit = tuple(
        LevelFit(
            level=int(pairs.index[at]),
            observed_mg_per_L=float(pairs.level_mg_per_L[at]),
            predicted=band(_steady(rate, vmax, km), weights),
            standardised_residual=float(
                np.log(pairs.level_mg_per_L[at] / _steady(rate, point.vmax_mg_per_day, point.km_mg_per_L))
                / pairs.level_log_sd[at]
            ),
        )
        for at, rate in enumerate(pairs.rate_mg_per_day)
    )
    if rejected > MOST_REJECTED:
        distrust.append(rejected_words.format(_per_cent(rejected)))
    why = "; ".join(distrust)
    return Estimate(
        method=method,
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        volume_L=volume_L,
        weights=weights,
        point=point,
        summary=summary,
        correlation=log_correlation(vmax, km, weights),
        volume_from="none" if volume is None else "population",
        rejected=rejected,
        fit=fit,
        diagnostics=diagnostics | ({"not trusted because": why} if why else {}),
        trusted=not why,
        distrust=f"{_named(method)} cannot be trusted here: {why}." if why else "",
    )


def _steady(rate: float, vmax: Floats | float, km: Floats | float) -> Floats:
    level = formulas.steady_state_level(dose_rate_mg_per_day=rate, vmax_mg_per_day=vmax, km_mg_per_L=km)
    return np.asarray(level, dtype=np.float64)


def _resampled(
    *,
    method: str,
    pairs: SteadyPairs,
    kind: Literal["median of crossings", "line"],
    vmax: float,
    km: float,
    drawn: tuple[Floats, Floats],
    diagnostics: dict[str, object],
    volume: VolumeSpread | None,
) -> Estimate | None:
    kept = admissible(drawn[0], drawn[1], pairs)
    if not kept.any():
        return None
    return _finish(
        method=method,
        pairs=pairs,
        point=Point(vmax, km, None if volume is None else volume.median_L, kind),
        vmax=drawn[0][kept],
        km=drawn[1][kept],
        rejected=float(1.0 - kept.mean()),
        diagnostics={"interval": "levels drawn again within their own spread", **diagnostics},
        distrust=[],
        rejected_words="{} of the sets redrawn within the spread of the levels give no possible answer",
        volume=volume,
    )


_ONE_DOSE = "all levels were taken on one daily dose"
_NO_REDRAW = "with the levels drawn again within their spread it never gives a possible answer"


# --- the five methods ---------------------------------------------------------------------------------------


def _by_regression(pairs: SteadyPairs, draws: int, volume: VolumeSpread | None) -> Result:
    rate, level, spread = pairs.rate_mg_per_day, pairs.level_mg_per_L, pairs.level_log_sd
    if all_one(rate):
        return LineFailure(REGRESSION, _ONE_DOSE)
    try:
        fit = level_on_rate(rate_mg_per_day=rate, level_mg_per_L=level, level_log_sd=spread)
    except CannotEstimate as error:
        return LineFailure(REGRESSION, error.found[0].lower() + error.found[1:].rstrip("."))
    why = _why_not(fit.vmax, fit.km, pairs)
    if why:
        return LineFailure(REGRESSION, why)
    chance = _chance_of_scatter(fit)
    widened_by = fit.sigma if chance < SCATTER_CHANCE else 1.0
    limits = level_profile_limits(
        rate_mg_per_day=rate,
        level_mg_per_L=level,
        level_log_sd=spread,
        fit=fit,
        confidence=0.90,
        widened_by=widened_by,
    )
    vmax, km, rejected = confidence_draws(
        rate_mg_per_day=rate,
        level_mg_per_L=level,
        level_log_sd=spread,
        fit=fit,
        largest_vmax_mg_per_day=ABSURD_VMAX * float(rate.max()),
        draws=draws,
        widened_by=widened_by,
    )
    distrust = []
    if widened_by > 1.0:
        distrust.append(
            f"the levels scatter {show_number(fit.sigma, 2)} times more than their stated spread explains "
            f"(chance {_per_cent(chance)}); the interval was widened by that factor"
        )
    diagnostics: dict[str, object] = {
        "interval": "profile likelihood",
        **_limits_as_words(limits),
        "sum of squares": fit.sum_of_squares,
        "degrees of freedom": fit.degrees_of_freedom,
        "chance of scatter": chance,
        "widened by": widened_by,
    }
    return _finish(
        method=REGRESSION,
        pairs=pairs,
        point=Point(fit.vmax, fit.km, None if volume is None else volume.median_L, "fitted optimum"),
        vmax=vmax,
        km=km,
        rejected=rejected,
        diagnostics=diagnostics,
        distrust=distrust,
        rejected_words="by these levels alone, the chance that no saturation shows at all is {}",
        volume=volume,
    )


def _per_cent(share: float) -> str:
    return f"{show_number(100 * share, 2)} %" if share >= 0.001 else "less than 0.1 %"


def _chance_of_scatter(fit: CurveFit) -> float:
    """Chance of a sum of squares at least this large if the stated spreads are right (chi-square)."""
    if fit.degrees_of_freedom == 0:
        return 1.0
    from scipy.special import gammaincc  # only here: keeps the module light to import

    return float(gammaincc(fit.degrees_of_freedom / 2, fit.sum_of_squares / 2))


def _limits_as_words(limits: Limits) -> dict[str, object]:
    """Profile limits for the note and JSON, which hold no infinity."""
    return {
        name: value if np.isfinite(value) else "no upper limit"
        for name, value in (
            ("Vmax at least (mg/day)", limits.vmax_low),
            ("Vmax at most (mg/day)", limits.vmax_high),
            ("Km at least (mg/L)", limits.km_low),
            ("Km at most (mg/L)", limits.km_high),
        )
    }


def _by_crossings(pairs: SteadyPairs, draws: int, volume: VolumeSpread | None) -> Result:
    rate = pairs.rate_mg_per_day
    found = crossings(level=pairs.level_mg_per_L, rate=rate, error_in="level")
    if len(found.first) == 0:
        return LineFailure(DIRECT_LINEAR, _ONE_DOSE)
    outside = int(np.isinf(found.km_counted).sum())
    vmax, km = (float(value) for value in medians(found))
    if not np.isfinite(vmax):
        return LineFailure(
            DIRECT_LINEAR,
            f"{outside} of its {len(found.first)} crossings lie outside the positive quadrant, so the median does too",
        )
    why = _why_not(vmax, km, pairs)
    if why:
        return LineFailure(DIRECT_LINEAR, why)
    drawn = medians(crossings(level=redrawn_levels(pairs, draws), rate=rate, error_in="level"))
    result = _resampled(
        method=DIRECT_LINEAR,
        pairs=pairs,
        kind="median of crossings",
        vmax=vmax,
        km=km,
        drawn=drawn,
        diagnostics={
            "crossings": len(found.first),
            "crossings outside": outside,
            "crossings left out": len(pairs) * (len(pairs) - 1) // 2 - len(found.first),
        },
        volume=volume,
    )
    return result or LineFailure(DIRECT_LINEAR, _NO_REDRAW)


def _by_straight_line(kind: StraightLine, pairs: SteadyPairs, draws: int, volume: VolumeSpread | None) -> Result:
    rate = pairs.rate_mg_per_day
    if all_one(rate):
        return LineFailure(kind, _ONE_DOSE)
    x, _ = line_axes(kind, level=pairs.level_mg_per_L, rate=rate)
    if all_one(x):
        return LineFailure(kind, "its points stand above one another, so no line can be laid through them")
    read = straight_line(kind, level=pairs.level_mg_per_L, rate=rate)
    vmax, km = float(read.vmax), float(read.km)
    at, share = _pull(kind, pairs)
    why = _why_not(vmax, km, pairs)
    if why:
        return LineFailure(kind, f"{why}; {pairs.words(at)} alone has {100 * share:.0f} % of the pull on this line")
    drawn = straight_line(kind, level=redrawn_levels(pairs, draws), rate=rate)
    result = _resampled(
        method=kind,
        pairs=pairs,
        kind="line",
        vmax=vmax,
        km=km,
        drawn=(drawn.vmax, drawn.km),
        diagnostics={"strongest pull": pairs.words(at), "strongest pull share": share},
        volume=volume,
    )
    return result or LineFailure(kind, _NO_REDRAW)


def compare(pairs: SteadyPairs, *, draws: int = 2048, volume: VolumeSpread | None = None) -> tuple[Result, ...]:
    """All five methods on the same pairs, in the order of `METHODS`: an Estimate each, or the reason why not.

    draws: number of draws in each estimate before inadmissible ones are set aside.
    """
    return (
        _by_regression(pairs, draws, volume),
        _by_crossings(pairs, draws, volume),
        *(_by_straight_line(kind, pairs, draws, volume) for kind in STRAIGHT_LINES),
    )


def from_steady_pairs(
    pairs: SteadyPairs, *, method: str = REGRESSION, draws: int = 2048, volume: VolumeSpread | None = None
) -> Estimate:
    """The estimate from three or more steady levels by the named method; weighted regression unless said.

    Raises CaseError for fewer than three pairs or an unknown method, CannotEstimate where the method fails.
    """
    if len(pairs) < FEWEST:
        raise CaseError(
            Problem(
                "Steady pairs",
                f"{len(pairs)} given",
                f"{FEWEST} to {MOST} pairs, both ends included",
                "Two pairs are answered by the two-level method",
            )
        )
    if method not in METHODS:
        raise CaseError(Problem("Method", f'"{method}" was given', ", ".join(METHODS), "Choose one of these"))
    if method == REGRESSION:
        result = _by_regression(pairs, draws, volume)
    elif method == DIRECT_LINEAR:
        result = _by_crossings(pairs, draws, volume)
    else:
        kind = next(line for line in STRAIGHT_LINES if line == method)
        result = _by_straight_line(kind, pairs, draws, volume)
    if isinstance(result, LineFailure):
        raise CannotEstimate(
            f"{_named(method)} fails on these {len(pairs)} levels, because {result.because}.",
            "No Vmax and no Km follow from it.",
            "Check doses taken, sampling times and units, or add a steady level on another dose.",
        )
    return result
