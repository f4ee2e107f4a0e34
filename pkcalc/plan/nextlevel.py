"""When to draw the next level: what each possible draw would tell, an early safety level, and the action line.

Expected posterior spread of the log steady level Q after a level y at a time t (numbered draws, weights w):

    E[Var(Q | y)] = integral of ( S2(y)/S0(y) - (S1(y)/S0(y))^2 ) S0(y) dy,   Sk(y) = sum of w Q^k N(y; log C(t), s^2)

evaluated by binning the draws' log levels and convolving with the normal error of a measured level. Derived for this
project; within 1 % (at most 6 %) of nested simulation in its trials.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta
from typing import Literal

import numpy as np

from pkcalc import flow, formulas
from pkcalc.clock import MONTHS, show_time_of_day
from pkcalc.dosing import Regimen, flow_dose
from pkcalc.drugs.profile import Profile
from pkcalc.estimate.result import Band, Estimate
from pkcalc.forecast import TIME_DRAWS, Goal, bands, draws_of, fewer_draws
from pkcalc.levels import LabScale
from pkcalc.plan.present import LOWEST_SHARE, Floats, Today, is_toxic
from pkcalc.record import Dose
from pkcalc.site import DAYS, Site
from pkcalc.units import show, show_number

#: Draws are looked for up to this many days ahead; the best of them is the yardstick.
HORIZON_DAYS = 14
#: The first day whose expected spread is within this of the best is proposed: the latest draw is nearly always the
#: best, so delay is traded against gain.
WITHIN = 0.10
#: An early safety level is looked for from this day on, and not after the other.
SAFETY_FROM_DAY, SAFETY_UNTIL_DAY = 2.0, 7.0
#: A chance of no steady state above this calls for a safety level whatever the rest says.
NO_PLATEAU_MATERIAL = 0.01
BINS = 128
#: A steady level is counted up to this multiple of the critical one; no steady state counts as that.
MOST_OF_CRITICAL = 4.0


@dataclass(frozen=True)
class Draw:
    """One feasible draw, just before a dose.

    day: days from the first dose of the regimen. moment: clock time, None without a clock. spread: expected spread
    (standard deviation of the log steady level) after it, of the spread without it. expected: the level as measured,
    working basis; reported: the same as the laboratory reports it.
    """

    day: float
    moment: datetime | None
    spread: float
    expected: Band
    reported: Band


@dataclass(frozen=True)
class Action:
    """What to write beside a draw: from which level on to call, as the laboratory reports it.

    scale: which level is meant. high: call above the 95 % bound of the forecast, or from the critical level on where
    that is lower (high_from says which). low: call below the 5 % bound. draw: None where levels are due daily.
    """

    draw: Draw | None
    scale: Literal["total", "free"]
    high_mg_per_L_reported: float
    high_from: Literal["forecast", "critical"]
    low_mg_per_L_reported: float | None
    words: str


@dataclass(frozen=True)
class NextLevel:
    """The proposal for the next level on one regimen.

    before: spread of the log steady level now. draws: every feasible draw (the curve). chosen: first within 10 % of the
    best. safety: an early draw, where accumulation is possible; None elsewhere. settled_days: days until a level stands
    at 90 % of its way; meaningful_day: from then on a level can be read as steady (95 % of the draws); +inf: never.
    line, safety_line: the lines to write; action, safety_action: their words. why: the reasons in words.
    none_because: why there is no draw plan although draws can be told (a level at or above the critical one today, a
    regimen that is not offered); the line then says what is due instead. with_load: the line that holds where the load
    asked for is given (all else here holds without it); None where no load is asked for and offered.
    """

    regimen_words: str
    before: float
    draws: tuple[Draw, ...]
    chosen: Draw
    safety: Draw | None
    settled_days: Band
    meaningful_day: float
    action: str
    safety_action: str
    why: tuple[str, ...]
    line: Action
    safety_line: Action | None = None
    none_because: str = ""
    with_load: Action | None = None


def expected_spread(
    target: Floats, log_level: Floats, weights: Floats, noise_log_sd: float, *, bins: int = BINS
) -> float:
    """Expected standard deviation of a target after one level: root of E[Var(target | level)].

    target, log_level, weights: shape (draws,); the level is log-normal around its draw with noise_log_sd. Returns 0 to
    the present standard deviation of the target.
    """
    low, high = float(log_level.min()), float(log_level.max())
    reach = 5.0 * noise_log_sd
    # bins no wider than a quarter of the noise, so that binning adds next to nothing
    count = int(min(max(bins, math.ceil((high - low + 2 * reach) / (0.25 * noise_log_sd))), 4096))
    edges = np.linspace(low - reach, high + reach, count + 1)
    width = float(edges[1] - edges[0])
    place = np.clip(((log_level - edges[0]) / width).astype(np.intp), 0, count - 1)
    sums = [np.bincount(place, weights=weights * target**k, minlength=count) for k in range(3)]
    half = max(1, math.ceil(reach / width))
    steps = width * np.arange(-half, half + 1)
    kernel = np.exp(-0.5 * (steps / noise_log_sd) ** 2)
    kernel /= kernel.sum()
    s0, s1, s2 = (np.convolve(s, kernel) for s in sums)
    seen = s0 > 1e-300
    variance = float(np.sum(s2[seen] - s1[seen] ** 2 / s0[seen]))
    return math.sqrt(max(variance, 0.0))


def spread_now(target: Floats, weights: Floats) -> float:
    """Standard deviation of the target over the draws."""
    mean = float(weights @ target)
    return math.sqrt(max(float(weights @ (target - mean) ** 2), 0.0))


def log_steady(estimate: Estimate, rate_mg_per_day: float, goal: Goal) -> Floats:
    """Log of the steady level of a dose rate per draw, counted up to four times the critical level."""
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=rate_mg_per_day,
        vmax_mg_per_day=estimate.vmax_mg_per_day,
        km_mg_per_L=estimate.km_mg_per_L,
    )
    return np.asarray(np.log(np.minimum(steady, MOST_OF_CRITICAL * goal.critical_mg_per_L)))


@dataclass(frozen=True)
class Asked:
    """One regimen for which the next level is planned. words: as on the note. clock_known: False where the times of the
    doses are not stated, so that none is named. free: free levels are what the estimate uses. refused: why the regimen
    is not offered, "" where it is. until_mg_per_L: the level down to which a toxic one is followed, None: top of the
    range. load: doses of a load that is counted in; load_asked: of one that may be given.
    notes: what must be said besides."""

    regimen: Regimen
    clock_known: bool
    words: str
    estimate: Estimate
    taken: Estimate
    now: Today
    goal: Goal
    scale: LabScale
    profile: Profile
    site: Site
    noise_log_sd: float
    free: bool
    refused: str = ""
    until_mg_per_L: float | None = None
    load: tuple[Dose, ...] = ()
    load_asked: tuple[Dose, ...] = ()
    notes: tuple[str, ...] = ()

    @property
    def lowest_told(self) -> float:
        """A level as reported below this cannot be told apart from nothing, so no line is drawn there."""
        own = self.site.quantification_limit_mg_per_L
        return LOWEST_SHARE * self.reported(self.goal.low_mg_per_L) if own is None else own

    def reported(self, level_mg_per_L: float) -> float:
        """A level on the working basis as the laboratory reports it, free or total."""
        return self.scale.free(level_mg_per_L) if self.free else self.scale.total(level_mg_per_L)


def next_level(asked: Asked) -> NextLevel | None:
    """The next level on a regimen; None without a volume (no times can be told) or without a feasible draw."""
    if asked.estimate.volume_L is None:
        return None
    few = fewer_draws(asked.estimate, TIME_DRAWS)
    estimate = few.estimate
    assert estimate.volume_L is not None
    start = draws_of(asked.now.start_mg_per_L, few)
    times = feasible(asked)
    if not times:
        return None
    course = _course(asked, estimate, start, [t for t, _ in times])
    rate = asked.regimen.active_mg_per_day(asked.profile)
    target = log_steady(estimate, rate, asked.goal)
    before = spread_now(target, estimate.weights)
    report = asked.reported
    draws = []
    for k, (day, moment) in enumerate(times):
        log_level = np.log(np.maximum(course[:, k], 1e-6))
        measured = _measured(course[:, k], asked.noise_log_sd, estimate.weights)
        draws.append(
            Draw(
                day=day,
                moment=moment,
                spread=expected_spread(target, log_level, estimate.weights, asked.noise_log_sd),
                expected=measured,
                reported=Band(report(measured.median), report(measured.low), report(measured.high)),
            )
        )
    best = min(d.spread for d in draws)
    chosen = next(d for d in draws if d.spread <= best * (1 + WITHIN))
    start = start + sum(d.amount_mg for d in asked.load) / estimate.volume_L
    settled = formulas.time_to_fraction(
        fraction=0.9,
        dose_rate_mg_per_day=rate,
        vmax_mg_per_day=estimate.vmax_mg_per_day,
        km_mg_per_L=estimate.km_mg_per_L,
        volume_L=estimate.volume_L,
        start_mg_per_L=start,
    )
    settled_days = bands(np.asarray(settled)[None, :], estimate.weights)[0]
    rises = (_rises(asked.estimate, rate, start), _rises(asked.taken, rate, start))
    because = no_plan(asked)
    why = [
        f"A level on day {show_number(chosen.day, 2)} is expected to narrow the forecast of the steady level from a "
        f"spread of {_times(before)} to {_times(chosen.spread)} (standard deviation of its logarithm); waiting until "
        f"day {show_number(draws[-1].day, 2)} would give {_times(draws[-1].spread)}. It is the first draw within "
        f"{show_number(100 * WITHIN)} % of the best in {HORIZON_DAYS} days."
    ]
    safety = None
    if because:
        why = [because]
        chosen = draws[0]
    else:
        safety, why_safety = _safety(asked, draws, chosen, rate)
        why += why_safety
    with_load = None
    if asked.load_asked and not because:
        other = next_level(replace(asked, load=asked.load_asked, load_asked=(), notes=()))
        with_load = other.line if other is not None else None
        if with_load is not None:
            why.append(f"Where the load is given: {with_load.words}")
    why += asked.notes
    toxic = is_toxic(asked.now, asked.goal)
    if not toxic:
        why.append(_meaning(settled_days, rising=rises[0]))
    line = daily_line(asked) if toxic else action_line(chosen, asked, rises=rises)
    safety_line = action_line(safety, asked, rises=rises) if safety is not None else None
    return NextLevel(
        regimen_words=asked.words,
        before=before,
        draws=tuple(draws),
        chosen=chosen,
        safety=safety,
        settled_days=settled_days,
        meaningful_day=settled_days.high,
        action=line.words,
        safety_action=safety_line.words if safety_line is not None else "",
        why=tuple(why),
        line=line,
        safety_line=safety_line,
        none_because=because,
        with_load=with_load,
    )


def no_plan(asked: Asked) -> str:
    """Why no draws are planned on a regimen; "" where they are."""
    if is_toxic(asked.now, asked.goal):
        return (
            f"No draw plan: the level today is at or above {show(asked.goal.critical_mg_per_L, 'mg/L')}, so levels are "
            "due daily until it has come down."
        )
    if asked.refused:
        return f"No draw plan: {asked.words} is not offered. {asked.refused} Until the dose is changed, draw early."
    return ""


def _rises(estimate: Estimate, rate_mg_per_day: float, start_mg_per_L: Floats) -> bool:
    """True where the level on a dose rate ends at or above where it begins (medians)."""
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=rate_mg_per_day,
        vmax_mg_per_day=estimate.vmax_mg_per_day,
        km_mg_per_L=estimate.km_mg_per_L,
    )
    return bands(np.asarray(steady)[None, :], estimate.weights)[0].median >= float(np.median(start_mg_per_L))


def feasible(asked: Asked) -> list[tuple[float, datetime | None]]:
    """Draws just before a dose, one a day, on the laboratory's draw days, up to the horizon."""
    start = asked.now.moment
    hours = sorted({x.hour % 24.0 for x in asked.regimen.intakes})
    if start is None:
        return [(float(d), None) for d in range(1, HORIZON_DAYS + 1)]
    found: list[tuple[float, datetime | None]] = []
    midnight = start.replace(hour=0, minute=0, second=0, microsecond=0)
    for d in range(1, HORIZON_DAYS + 2):
        # the first dose of that day: most laboratories draw in the morning, and a trough says most
        moment = midnight + timedelta(days=d, hours=hours[0])
        day = (moment - start) / timedelta(days=1)
        if 0.9 <= day <= HORIZON_DAYS + 0.5 and DAYS[moment.weekday()] in asked.site.draw_days:
            found.append((day, moment))
    return found


def _course(asked: Asked, estimate: Estimate, start: Floats, days: Sequence[float]) -> Floats:
    """Level just before the dose on each day, per draw, on the regimen with its real doses."""
    assert estimate.volume_L is not None
    until = max(days)
    regimen = asked.regimen
    cycle = regimen.cycle_h / 24
    first = 0.0
    if asked.now.moment is not None:
        at = asked.now.moment
        first = -(at.hour + at.minute / 60) / 24
    doses = [*asked.now.still_absorbed, *asked.load]
    for n in range(math.ceil((until - first) / cycle) + 1):
        for intake in regimen.intakes:
            day = first + n * cycle + intake.hour / 24
            if 0 <= day < until:
                doses.append(flow_dose(intake, day, asked.profile))
    record = flow.Record(doses=tuple(doses), start_day=0.0, start_mg=0.0)
    return flow.levels(
        record,
        list(days),
        estimate.vmax_mg_per_day,
        estimate.km_mg_per_L,
        estimate.volume_L,
        start_mg_per_L=start,
    )


def _measured(level: Floats, noise_log_sd: float, weights: Floats) -> Band:
    """The level as it will be measured: the draws' spread with the spread of a single level, by normal scores."""
    from scipy.special import ndtri

    shares = (np.arange(16) + 0.5) / 16
    noise = np.exp(noise_log_sd * ndtri(shares))
    whole = (level[:, None] * noise).ravel()
    return bands(whole[None, :], np.repeat(weights / 16, 16))[0]


def _safety(asked: Asked, draws: Sequence[Draw], chosen: Draw, rate: float) -> tuple[Draw | None, list[str]]:
    """An early draw where accumulation is possible, and why."""
    taken = asked.taken
    steady = formulas.steady_state_level(
        dose_rate_mg_per_day=rate,
        vmax_mg_per_day=taken.vmax_mg_per_day,
        km_mg_per_L=taken.km_mg_per_L,
    )
    high = float((steady > asked.goal.high_mg_per_L) @ taken.weights)
    none = float(np.isinf(steady) @ taken.weights)
    if high <= asked.site.warn_chance and none <= NO_PLATEAU_MATERIAL:
        return None, []
    early = [d for d in draws if SAFETY_FROM_DAY <= d.day <= SAFETY_UNTIL_DAY and d.day < chosen.day]
    if not early:
        return None, []
    chance = show_number(100 * high, 2)
    return early[0], [
        f"Accumulation is possible (every dose taken, {chance} % to end above "
        f"{show(asked.goal.high_mg_per_L, 'mg/L')}): an early safety level is due as well."
    ]


def _times(log_sd: float) -> str:
    return f"{show_number(100 * log_sd, 2)} %"


def _meaning(settled: Band, *, rising: bool) -> str:
    if not np.isfinite(settled.median):
        return "No level on this regimen can be read as a steady one: it would go on rising."
    if not np.isfinite(settled.high):
        return (
            f"A level means what it seems to mean from about day {show_number(settled.median, 2)} (90 % of the way, "
            "median); in part of the forecasts it never settles, so an early level must not be read as the plateau."
        )
    return (
        f"A level means what it seems to mean (90 % of the way) from about day {show_number(settled.median, 2)}, "
        f"surely only from day {show_number(settled.high, 2)}; earlier it reads {'lower' if rising else 'higher'} than "
        "the plateau will be."
    )


#: How a level outside the forecast is worded, by whether the central line and the fully taken one rise: above, below.
_WAYS = {
    (True, True): ("means rising faster than forecast", "rising slower than forecast"),
    (False, False): ("means falling slower than forecast", "falling faster than forecast"),
    (False, True): (
        "is higher than forecast (past intake carried on it falls; every dose taken it rises)",
        "lower than forecast",
    ),
    (True, False): (
        "is higher than forecast (past intake carried on it rises; every dose taken it falls)",
        "lower than forecast",
    ),
}


def action_line(draw: Draw, asked: Asked, *, rises: tuple[bool, bool] = (True, True)) -> Action:
    """'On 12 Apr before the 21:00 dose; above 14 mg/L as reported means rising faster than forecast: call.'

    Never above the critical level as the laboratory reports it. rises: whether the level rises on the central line and
    with every dose taken.
    """
    scale: Literal["total", "free"] = "free" if asked.free else "total"
    above, below = _WAYS[rises]
    critical = asked.reported(asked.goal.critical_mg_per_L)
    capped = draw.reported.high >= critical
    if capped:
        limit = f"at or above {_not_above(critical)} as reported ({scale} level), the critical level: call."
    else:
        limit = f"above {show(draw.reported.high, 'mg/L')} as reported ({scale} level) {above}: call."
    low = draw.reported.low
    signs = asked.profile.withdrawal.signs if asked.profile.withdrawal is not None else ""
    target = asked.reported(asked.goal.low_mg_per_L)
    at_any = f"{signs} at any level" if signs else ""
    if low >= asked.lowest_told:
        limit += f" Below {show(low, 'mg/L')} ({below}){f', or {at_any}' if at_any else ''}: call."
    elif at_any:
        limit += f" {at_any[0].upper()}{at_any[1:]}: call."
    if low < target and draw.reported.median < target:
        ask = f": ask about {signs} the same day" if signs else ""
        limit += f" Below {show(target, 'mg/L')} it is below the target{ask}."
    words = f"{_when(draw, asked)}{', the load counted in' if asked.load else ''}; {limit}"
    return Action(
        draw=draw,
        scale=scale,
        high_mg_per_L_reported=min(draw.reported.high, critical),
        high_from="critical" if capped else "forecast",
        low_mg_per_L_reported=low if low >= asked.lowest_told else None,
        words=words,
    )


def daily_line(asked: Asked) -> Action:
    """What is due while the level is toxic: one every day, until it is down."""
    scale: Literal["total", "free"] = "free" if asked.free else "total"
    critical = asked.reported(asked.goal.critical_mg_per_L)
    until = asked.reported(asked.until_mg_per_L or asked.goal.high_mg_per_L)
    signs = f", or {asked.profile.withdrawal.signs}" if asked.profile.withdrawal is not None else ""
    return Action(
        draw=None,
        scale=scale,
        high_mg_per_L_reported=critical,
        high_from="critical",
        low_mg_per_L_reported=until,
        words=(
            f"Levels daily, the first within 24 h, until one is at or below {_not_above(until)} as reported ({scale} "
            f"level). At or above {_not_above(critical)}, or not below the one before{signs}: call."
        ),
    )


def _not_above(level_mg_per_L: float) -> str:
    """A limit in words, rounded down: the line written must not lie above the limit meant."""
    step = 10.0 ** (math.floor(math.log10(level_mg_per_L)) - 2)
    return show(math.floor(level_mg_per_L / step + 1e-9) * step, "mg/L")


def _when(draw: Draw, asked: Asked) -> str:
    if draw.moment is None:
        return f"On day {show_number(draw.day, 2)} before the dose"
    date = f"On {draw.moment.day} {MONTHS[draw.moment.month - 1]}"
    if not asked.clock_known:
        return f"{date} before the dose"
    return f"{date} before the {show_time_of_day(draw.moment.hour + draw.moment.minute / 60)} dose"
