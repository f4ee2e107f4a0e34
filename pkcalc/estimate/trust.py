"""Which pair stands out among the steady levels, and which of the five methods to trust, in sentences."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from pkcalc.errors import CannotEstimate
from pkcalc.estimate.lines import (
    DIRECT_LINEAR,
    FEWEST,
    REGRESSION,
    STRAIGHT_LINES,
    LineFailure,
    Result,
    SteadyPairs,
    crossings,
)
from pkcalc.estimate.regression import level_on_rate
from pkcalc.estimate.result import Estimate
from pkcalc.units import show, show_number

#: Standardised residual from which a pair is named as standing out (two-sided chance about 1 %).
STANDS_OUT = 2.5


@dataclass(frozen=True)
class PairCheck:
    """How one pair sits among the others.

    level: position in the case. residual: distance from the regression curve in spreads of that level,
    allowing for its own pull on the curve; None where the curve passes through it by construction. crossings:
    of its line with the others. crossings_outside: how many fall outside the positive quadrant. km_median,
    vmax_median: of its own crossings, infinite where most lie outside. stands_out: named in the verdict.
    """

    level: int
    residual: float | None
    crossings: int
    crossings_outside: int
    vmax_median_mg_per_day: float
    km_median_mg_per_L: float
    stands_out: bool
    text: str


def check_pairs(pairs: SteadyPairs) -> tuple[PairCheck, ...]:
    """Each pair's residual and crossings, so that a wrong level or a wrong dose can be seen for what it is.

    With three pairs all standardised residuals are alike in size, so none can be singled out.
    """
    found = crossings(level=pairs.level_mg_per_L, rate=pairs.rate_mg_per_day, error_in="level")
    residuals: list[float | None] = [None] * len(pairs)
    try:
        fit = level_on_rate(
            rate_mg_per_day=pairs.rate_mg_per_day,
            level_mg_per_L=pairs.level_mg_per_L,
            level_log_sd=pairs.level_log_sd,
        )
        residuals = [
            float(r / np.sqrt(1 - h)) if h < 1 - 1e-9 else None
            for r, h in zip(fit.residuals, fit.leverage, strict=True)
        ]
    except CannotEstimate:
        pass  # the crossings still show which pair is odd
    largest = max((abs(r) for r in residuals if r is not None), default=0.0)
    checks = []
    for at in range(len(pairs)):
        own = (found.first == at) | (found.second == at)
        km, vmax = found.km_counted[own], found.vmax_counted[own]
        outside = int(np.isinf(km).sum())
        residual = residuals[at]
        odd = len(pairs) > FEWEST and residual is not None and abs(residual) >= STANDS_OUT and abs(residual) == largest
        words = pairs.words(at)
        text = words[0].upper() + words[1:]
        if residual is None:
            text += ": no distance from the curve can be given"
        else:
            side = "above" if residual >= 0 else "below"
            text += f" lies {show_number(abs(residual), 2)} spreads {side} the curve"
        text += f"; crossings outside the positive quadrant: {outside} of {len(km)}." if len(km) else "."
        checks.append(
            PairCheck(
                level=int(pairs.index[at]),
                residual=residual,
                crossings=len(km),
                crossings_outside=outside,
                vmax_median_mg_per_day=float(np.median(vmax)) if len(vmax) else np.inf,
                km_median_mg_per_L=float(np.median(km)) if len(km) else np.inf,
                stands_out=odd,
                text=text,
            )
        )
    return tuple(checks)


@dataclass(frozen=True)
class Verdict:
    """Which method to trust on these data, None for none, and why."""

    method: str | None
    text: str
    suspects: tuple[int, ...] = ()


def verdict(results: tuple[Result, ...], pairs: SteadyPairs) -> Verdict:
    """Which of the five to trust on these pairs, and why, in sentences for the note.

    Only the regression uses each level's own spread, so only it can be trusted outright. Where the levels
    contradict one another nothing is trusted before they are checked; the direct linear plot is then named as
    the one that a single wrong level moves least, not as the answer.
    """
    by_method = {result.method: result for result in results}
    regression, direct = by_method[REGRESSION], by_method[DIRECT_LINEAR]
    checks = check_pairs(pairs)
    suspects = tuple(check.level for check in checks if check.stands_out)
    odd = " ".join(check.text for check in checks if check.stands_out)
    failed = [
        result.method for result in results if isinstance(result, LineFailure) and result.method in STRAIGHT_LINES
    ]
    tail = (
        f" {_listed(failed)} {'fails' if len(failed) == 1 else 'fail'} here, which is what straight lines "
        "do: they let the levels count by their place on the axis, not by their certainty."
        if failed
        else " The straight lines give numbers here, but let the levels count by their place on the axis, "
        "not by their certainty: for teaching only."
    )
    if isinstance(regression, LineFailure):
        return Verdict(
            None,
            f"Trust none of these. {regression.text} What no weighting of the levels shows, no line can: "
            "check doses taken, sampling times and units, or add a steady level on another dose.",
            suspects,
        )
    if not regression.trusted:
        text = f"Trust none of these yet: {regression.diagnostics['not trusted because']}."
        if regression.diagnostics["widened by"] != 1.0:
            text += f" {odd} Check it first." if odd else " No single pair can be blamed: check them all."
        else:
            text += " The levels do not contradict one another; they lie too nearly in proportion to the dose."
        if isinstance(direct, Estimate):
            text += f" One wrong level moves the direct linear plot least: {_numbers(direct)}."
        return Verdict(None, text + tail, suspects)
    text = (
        f"Trust the {REGRESSION}: each level counts by its own spread, and Vmax stays above every dose that "
        f"gave a steady level ({_numbers(regression)})."
    )
    if isinstance(direct, LineFailure):
        text += f" The direct linear plot gives no answer: {direct.because}."
    else:
        bands = regression.summary
        inside = (
            bands["vmax_mg_per_day"].low <= direct.point.vmax_mg_per_day <= bands["vmax_mg_per_day"].high
            and bands["km_mg_per_L"].low <= direct.point.km_mg_per_L <= bands["km_mg_per_L"].high
        )
        text += (
            f" The direct linear plot, which one wrong level moves least, agrees ({_numbers(direct)})."
            if inside
            else f" The direct linear plot, which one wrong level moves least, lies outside its interval "
            f"({_numbers(direct)}): look at each pair before relying on either."
        )
    return Verdict(REGRESSION, text + (f" {odd} Check it." if odd else "") + tail, suspects)


def _numbers(result: Estimate) -> str:
    point = result.point
    return f"Vmax {show(point.vmax_mg_per_day, 'mg/day')}, Km {show(point.km_mg_per_L, 'mg/L')}"


def _listed(names: Sequence[str]) -> str:
    words = " and ".join([", ".join(names[:-1]), names[-1]] if len(names) > 1 else names)
    return words[0].upper() + words[1:]
