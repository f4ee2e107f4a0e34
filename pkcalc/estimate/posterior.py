"""The estimate from the whole record: what the population says, and every level, at steady state or not.

The course of the amount depends on (Vmax, kappa = Km V) alone, so a two-dimensional grid carries it; the
volume shifts every log level and is integrated out analytically (`error_model`, `grid`). A second, shifted
grid of other size certifies the first: where they disagree the grid grows, and where they still disagree the
estimate says that it cannot be trusted.

Vmax is the patient's Vmax relative to the record: where a share of the doses is missed all along, it is the
Vmax that explains the levels with the doses as recorded."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
from numpy.typing import NDArray

from pkcalc import flow
from pkcalc.drugs.profile import Prior
from pkcalc.errors import CannotEstimate, CaseError, Problem
from pkcalc.estimate.error_model import (
    Components,
    LevelData,
    RecordSpread,
    censored_parts,
    covariance,
    gaussian_parts,
)
from pkcalc.estimate.grid import (
    EDGE_MASS,
    EFFECTIVE_NODES,
    NOWHERE,
    Frame,
    Nodes,
    Quadrature,
    draw,
    lay,
    mixture_quantiles,
    refine,
    scout,
    settle,
    sobol,
    square,
    vmax_marginal,
)
from pkcalc.estimate.intake import IntakePlan, intake_gain, plan_intake, taken_on_average
from pkcalc.estimate.result import Band, Estimate, LevelFit, Point, log_correlation
from pkcalc.record import Before, FirstOrder, Record
from pkcalc.units import show

Floats = NDArray[np.float64]

WHOLE_RECORD = "whole record"
BEFORE_ANY_LEVEL = "before any level"

#: Grids tried in turn: nodes per axis of the answer, and of its certificate.
SIZES = ((48, 38), (72, 57), (108, 86), (160, 128))

#: Reach of the certificate's grid as a share of the answer's.
CERTIFICATE_REACH = 0.875

#: The certificate: largest relative difference of a 5, 50 or 95 % point, and absolute one of the chance of no
#: steady state.
QUANTILE_TOLERANCE = 0.005
CHANCE_TOLERANCE = 0.002

#: Outside what the smallest grid was certified for: the next one is used from the start.
WIDEST_LOG_SD = {"vmax": 0.56, "km": 0.90, "volume": 0.48}
SMALLEST_LEVEL_SD = 0.02

#: The engine's own error: levels taken as more exact than this cannot be followed.
EXACTEST_LEVEL_SD = 0.003

#: The engine steps at a quarter over this share of the 99 % point of Vmax / kappa: half a time constant for
#: the fastest per cent of what is possible (errors of 1e-3), a fifth for the rest (1e-5).
STEPS = 0.5

#: As `STEPS`, while scouting: there the mass has only to be found.
SCOUT_STEPS = 0.25

#: How much of an earlier regimen is written out dose by dose, so that its last weeks may differ from the
#: record.
WRITTEN_OUT_DAY = 40.0

#: With fewer effective nodes than this on the largest grid there is nothing to report.
FEWEST_NODES = 8.0

_PROBABILITIES = (0.05, 0.5, 0.95)


# ------------------------------------------------------------------------------------------------ the
# population


def prior_moments(prior: Prior) -> tuple[Floats, Floats]:
    """Mean and covariance of (log Vmax, log Km, log V)."""
    mean = np.log([prior.vmax_mg_per_day, prior.km_mg_per_L, prior.volume_L])
    sd = np.array([prior.vmax_log_sd, prior.km_log_sd, prior.volume_log_sd])
    cov = np.diag(sd**2)
    cov[0, 1] = cov[1, 0] = prior.correlation * sd[0] * sd[1]
    return mean, cov


def prior_only(prior: Prior, n: int = 2048) -> Estimate:
    """What the population alone says about this patient: equal-weight draws of (Vmax, Km, V).

    The draws lie along a Sobol sequence, so the same population gives the same bits. n: number of draws.
    """
    from scipy.special import ndtri

    mean, cov = prior_moments(prior)
    draws = np.exp(mean + ndtri(sobol(n)) @ np.linalg.cholesky(cov).T)
    vmax, km, volume = draws.T
    weights = np.full(n, 1.0 / n)
    z = ndtri(0.95)
    sd = np.sqrt(np.diag(cov))
    bands = [Band(*(float(np.exp(m + x * s)) for x in (0.0, -z, z))) for m, s in zip(mean, sd, strict=True)]
    return Estimate(
        method=BEFORE_ANY_LEVEL,
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        volume_L=volume,
        weights=weights,
        point=Point(bands[0].median, bands[1].median, bands[2].median, "posterior median"),
        summary=dict(zip(("vmax_mg_per_day", "km_mg_per_L", "volume_L"), bands, strict=True)),
        correlation=prior.correlation,
        volume_from="population",
        diagnostics={"population": prior.population, "levels": 0},
    )


@dataclass(frozen=True)
class _Volume:
    """The prior as (log Vmax, log kappa), and log V given them: mean = at + slope . (point - centre),
    variance."""

    centre: Floats
    cov: Floats
    at: float
    slope: Floats
    variance: float

    @staticmethod
    def of(prior: Prior) -> _Volume:
        mean, cov = prior_moments(prior)
        turn = np.array([[1.0, 0.0, 0.0], [0.0, 1.0, 1.0], [0.0, 0.0, 1.0]])
        m, c = turn @ mean, turn @ cov @ turn.T
        slope = np.linalg.solve(c[:2, :2], c[:2, 2])
        return _Volume(m[:2], c[:2, :2], float(m[2]), slope, float(c[2, 2] - c[:2, 2] @ slope))

    def log_volume(self, a: Floats, k: Floats) -> Floats:
        """l0: mean of log V given log Vmax and log kappa."""
        found: Floats = self.at + self.slope[0] * (a - self.centre[0]) + self.slope[1] * (k - self.centre[1])
        return found

    def log_density(self, a: Floats, k: Floats) -> Floats:
        """Log prior density of (log Vmax, log kappa)."""
        off = np.stack([a - self.centre[0], k - self.centre[1]])
        square = np.sum(off * np.linalg.solve(self.cov, off), axis=0)
        found: Floats = -0.5 * (square + math.log(np.linalg.det(self.cov)) + 2 * math.log(2 * math.pi))
        return found


# ------------------------------------------------------------------------------------------------ the model


#: A node whose prior cannot be made up for by any levels, this far under the best one, is left out.
_HOPELESS = 16.0

#: Nodes per axis at which courses are calculated, as a share of the nodes at which the density is: of an answer
#: and its certificate (each with a table of its own, so that the second also certifies the interpolation of the
#: first), and of a scouting grid.
_TABLE_SHARE, _SCOUT_SHARE = 0.6, 0.6

#: The fastest nodes are extrapolated from what the steps allow, along log kappa from a second point this far
#: from the first; only where they carry more than this share of the mass are they followed themselves.
_TWIN, _FAST_MASS = 0.2, 1e-3


@dataclass(frozen=True)
class _Model:
    """Everything a node needs: record with its earlier regimen written out, levels, doubtful doses, prior."""

    record: Record
    levels: tuple[LevelData, ...]
    spread: RecordSpread
    intake: IntakePlan
    volume: _Volume
    typical_per_day: float
    plans: flow.Plans = field(default_factory=dict)

    @property
    def own(self) -> Floats:
        """Variance of each log level that it shares with no other."""
        return np.array([x.own_variance for x in self.levels])

    def courses(self, a: Floats, k: Floats) -> tuple[Floats, Floats]:
        """log amounts at the levels (nodes, m) and their sensitivities to the doubtful doses (nodes, m,
        groups)."""
        vmax, kappa = np.exp(a), np.exp(k)
        volume = np.exp(self.volume.log_volume(a, k))
        course, faded = flow.fading(
            self.record,
            self.intake.sample_days,
            vmax,
            kappa,
            volume_L=volume,
            typical_per_day=self.typical_per_day,
            plans=self.plans,
        )
        amount = course[:, self.intake.level_at]
        if not np.all(amount > 0):
            late = self.levels[int(np.argmin(np.all(amount > 0, axis=0)))]
            raise CaseError(
                Problem(
                    f"Level {late.index + 1}",
                    f"{show(late.level_mg_per_L, 'mg/L')} was measured when, by the record, nothing had been "
                    "absorbed yet",
                    "a level after the first recorded dose",
                    "Add the earlier doses (a load, another hospital), or check the time of the draw",
                )
            )
        return np.log(amount), intake_gain(self.intake, course, faded)

    def parts(self, residual: Floats, cov: Floats, which: Sequence[int]) -> Components:
        """The log volume as a mixture at every node, given some of the levels, with the likelihood in its
        weights."""
        if not which:
            nodes = len(residual)
            one = np.zeros((nodes, 1))
            return Components(one, one, np.full((nodes, 1), self.volume.variance))
        residual, cov = residual[:, which], cov[:, which][:, :, which]
        censored = [self.levels[j].censored for j in which]
        if any(censored):
            return censored_parts(residual, cov, self.volume.variance, self.spread, censored)
        return gaussian_parts(residual, cov, self.volume.variance, self.spread)

    def residual(self, log_amount: Floats, log_volume: Floats) -> Floats:
        """log X_j - log y_j - l0."""
        observed = np.log([x.level_mg_per_L for x in self.levels])
        found: Floats = log_amount - observed - log_volume[:, None]
        return found

    def tables(self, frame: Frame, axes: Sequence[Floats], scouting: bool = False) -> list[_Table]:
        """The courses at the nodes of some coarse axes of a frame, calculated in one pass.

        The fastest nodes would cost many steps for next to no mass: their log amounts are extrapolated from
        what the steps allow (at the plateau, where nearly all of that mass lies, they are linear in log kappa).
        """
        points = [square(frame, axis) for axis in axes]
        a, k = (np.concatenate([p[i] for p in points]) for i in (0, 1))
        slowed = self.slowed(a, k)
        twin = np.zeros(len(a), dtype=np.bool_) if scouting else slowed > k
        amount, gain = self.courses(np.concatenate([a, a[twin]]), np.concatenate([slowed, slowed[twin] + _TWIN]))
        beside = amount[len(a) :]
        amount, root = amount[: len(a)], self.shared_root(gain[: len(a)])
        amount[twin] += (beside - amount[twin]) * ((k - slowed)[twin] / _TWIN)[:, None]
        ends = np.cumsum([0, *(len(axis) ** 2 for axis in axes)])
        return [_Table(axis, amount[u:v], root[u:v]) for axis, u, v in zip(axes, ends[:-1], ends[1:], strict=True)]

    def slowed(self, a: Floats, k: Floats) -> Floats:
        """log kappa, raised to what the engine takes in its first class of steps."""
        found: Floats = np.maximum(k, a - math.log(4 * self.typical_per_day))
        return found

    def nodes(self, frame: Frame, axis: Floats, table: _Table, scouting: bool = False) -> Nodes:
        """Density, mixture and course at every node of an axis, the course interpolated from a table.

        Where the extrapolated fastest nodes do carry mass, they are followed themselves.
        """
        a, k = square(frame, axis)
        found = self.between(frame, axis, table)
        fast = self.slowed(a, k) > k
        if scouting or not fast.any():
            return found
        best = float(np.max(found.log_density))
        mass = np.exp(found.log_density - best)
        if np.sum(mass[fast]) <= _FAST_MASS * np.sum(mass):
            return found
        u, v = square(frame, table.axis)
        measured = [x.own_variance for x in self.levels if x.censored is None]
        most = -0.5 * sum(math.log(2 * math.pi * x) for x in measured)
        some = (self.slowed(u, v) > v) & (self.volume.log_density(u, v) + most > best - _HOPELESS)
        if not some.any():
            return found
        amount, root = table.log_amount.copy(), table.shared_root.copy()
        amount[some], gain = self.courses(u[some], v[some])
        root[some] = self.shared_root(gain)
        return self.between(frame, axis, _Table(table.axis, amount, root))

    def between(self, frame: Frame, axis: Floats, table: _Table) -> Nodes:
        """The nodes of an axis by the courses of a table."""
        root = refine(table.axis, axis, table.shared_root)
        return self.weigh(
            *square(frame, axis), refine(table.axis, axis, table.log_amount), root @ root.transpose(0, 2, 1)
        )

    def shared(self, gain: Floats) -> Floats:
        """What intake adds to the covariance of the log levels, shape (nodes, m, m)."""
        return covariance(np.zeros(len(self.levels)), gain, self.intake.variance)

    def shared_root(self, gain: Floats) -> Floats:
        """A lower triangular root of `shared`: interpolated, it still stands for a covariance."""
        shared = self.shared(gain)
        diagonal = np.arange(len(self.levels))
        shared[:, diagonal, diagonal] += 1e-10 * np.max(shared[:, diagonal, diagonal], axis=1)[:, None] + 1e-14
        found: Floats = np.asarray(np.linalg.cholesky(shared), dtype=np.float64)
        return found

    def weigh(self, a: Floats, k: Floats, log_amount: Floats, shared: Floats) -> Nodes:
        """Log posterior density of points (not normalised) with their mixtures, given the course there."""
        m = len(self.levels)
        diagonal = np.arange(m)
        cov = shared.copy()
        cov[:, diagonal, diagonal] += self.own
        prior = self.volume.log_density(a, k)
        found = self.parts(self.residual(log_amount, self.volume.log_volume(a, k)), cov, range(m))
        parts = Components(np.maximum(found.log_weight, NOWHERE), found.mean, found.variance)
        # ten standard deviations off in the population: nothing a level says can lead there
        possible = prior > self.volume.log_density(*self.volume.centre[:, None])[0] - 50.0
        log_density = np.where(possible, np.maximum(prior + found.log_total, NOWHERE), NOWHERE)
        return Nodes(log_density, parts, log_amount, cov)

    def scouting(self, frame: Frame, axis: Floats) -> Nodes:
        """The density with coarser courses, the fastest nodes left slowed down: they only have to be found
        empty."""
        coarse = np.linspace(axis[0], axis[-1], math.ceil(_SCOUT_SHARE * len(axis)))
        return self.nodes(frame, axis, self.tables(frame, [coarse], scouting=True)[0], scouting=True)


@dataclass(frozen=True)
class _Table:
    """Courses at the nodes of a coarse axis: log amounts (c * c, m) and the root of what intake adds to their
    covariance (c * c, m, m)."""

    axis: Floats
    log_amount: Floats
    shared_root: Floats


class _Twofold:
    """The density on the grid of the answer and on that of its certificate: two tables, one pass through the
    record."""

    def __init__(self, model: _Model, check: int) -> None:
        self.model, self.check = model, check
        self.kept: _Table | None = None

    def answer(self, frame: Frame, axis: Floats) -> Nodes:
        coarse = np.linspace(axis[0], axis[-1], math.ceil(_TABLE_SHARE * len(axis)))
        reach = CERTIFICATE_REACH * axis[-1]
        other = np.linspace(-reach, reach, math.ceil(_TABLE_SHARE * self.check))
        table, self.kept = self.model.tables(frame, [coarse, other])
        return self.model.nodes(frame, axis, table)

    def certificate(self, frame: Frame, axis: Floats) -> Nodes:
        """Of the frame that the last answer was laid in."""
        assert self.kept is not None
        return self.model.nodes(frame, axis, self.kept)


def written_out(record: Record) -> Record:
    """The record with the last weeks of an earlier regimen as single doses, so that their intake may
    differ."""
    if record.before is None or record.start_mg is not None:
        return record
    regimen = record.before.regimen
    whole = max(1, round(record.before.for_day / regimen.cycle_day))
    cycles = min(whole, math.ceil(WRITTEN_OUT_DAY / regimen.cycle_day))
    left = (whole - cycles) * regimen.cycle_day
    return replace(
        record,
        doses=regimen.cycles(-cycles, 0, record.start_day) + record.doses,
        start_day=record.start_day - cycles * regimen.cycle_day,
        before=Before(regimen, left) if left > 0 else None,
    )


def with_population_path(record: Record, first_order_per_day: float) -> Record:
    """The record with the population's parallel first-order path, unless it already has one that is always
    open."""
    if first_order_per_day <= 0 or any(p.start_day == -math.inf for p in record.first_order):
        return record
    return replace(record, first_order=(*record.first_order, FirstOrder(rate_per_day=first_order_per_day)))


def as_reckoned(record: Record, spread: RecordSpread, first_order_per_day: float) -> Record:
    """The record that the engine follows: its last weeks written out, every doubtful dose at what was taken of it on
    average, with the population's parallel path."""
    return with_population_path(taken_on_average(written_out(record), spread), first_order_per_day)


def _model(record: Record, levels: Sequence[LevelData], prior: Prior, spread: RecordSpread) -> _Model:
    _check(record, levels)
    full = as_reckoned(record, spread, prior.first_order_per_day)
    intake = plan_intake(full, [x.time_day for x in levels], spread)
    volume = _Volume.of(prior)
    typical = _typical_per_day(volume.centre, volume.cov, SCOUT_STEPS)
    return _Model(full, tuple(levels), spread, intake, volume, typical)


def _typical_per_day(mean: Floats, cov: Floats, share: float) -> float:
    """What sets the engine's steps: a share of the 99 % point of Vmax / kappa, from moments of the logs."""
    drift = np.array([1.0, -1.0])
    return share * math.exp(float(drift @ mean) + 2.326 * math.sqrt(float(drift @ cov @ drift)))


def _check(record: Record, levels: Sequence[LevelData]) -> None:
    if not record.doses and record.before is None and not record.start_mg:
        raise CaseError(
            Problem(
                "Dosing record",
                "no dose was given",
                "at least one dose, or the regimen taken until now",
                "Add what was given before the levels",
            )
        )
    found = [
        Problem(
            f"Level {x.index + 1}, time",
            f"drawn {show(record.start_day - x.time_day, 'days', 3)} before the record begins",
            "a draw after the record begins",
            "Begin the record earlier, or check the date of the draw",
        )
        for x in levels
        if x.time_day < record.start_day
    ]
    if found:
        raise CaseError(found)


# ------------------------------------------------------------------------------------------------ the
# estimate


def from_record(
    record: Record,
    levels: Sequence[LevelData],
    prior: Prior,
    spread: RecordSpread,
    *,
    n: int = 2048,
    rates_mg_per_day: Sequence[float] = (),
) -> Estimate:
    """Vmax, Km and V of this patient from the population and every level of the record.

        p(Vmax, Km, V | levels) ~ p(Vmax, Km, V) x p(levels | record, Vmax, Km, V)

    record: what was given. levels: on the working basis. prior: the population at this patient. spread: how
    far the record and the levels are believed. n: number of equal-weight draws. rates_mg_per_day: dose rates
    of active drug whose chance of no steady state is to be certified and reported (the regimens in question).

    Returns an Estimate (method "whole record"; "before any level" where there are none). Its diagnostics hold
    "no_steady_state" (rate -> chance), "effective_nodes", "grid", "certificate" (largest relative quantile
    difference), "wrong_level" (level index -> chance that it is wrong), "assumes" (words for the note).
    Raises CaseError for a level that the record cannot explain (before its beginning, before any dose).
    """
    if not levels:
        estimate = prior_only(prior, n)
        chances = {r: _normal_chance(prior, r) for r in rates_mg_per_day}
        return replace(estimate, diagnostics={**estimate.diagnostics, "no_steady_state": chances})
    # the order in which levels are given must not change a bit of the answer
    order = sorted(range(len(levels)), key=lambda j: (levels[j].time_day, levels[j].level_mg_per_L))
    model = _model(record, [levels[j] for j in order], prior, spread)
    answer, report = _certified(model, prior, rates_mg_per_day)
    a, k, u = draw(answer, n)
    log_volume = model.volume.log_volume(a, k) + u
    vmax, km, volume = np.exp(a), np.exp(k - log_volume), np.exp(log_volume)
    weights = np.full(n, 1.0 / n)
    bands = {key: Band(v[1], v[0], v[2]) for key, v in report.quantiles.items()}
    before = prior_moments(prior)[1][2, 2]
    learned = float(np.var(log_volume)) < 0.81 * before
    return Estimate(
        method=WHOLE_RECORD,
        vmax_mg_per_day=vmax,
        km_mg_per_L=km,
        volume_L=volume,
        weights=weights,
        point=Point(
            bands["vmax_mg_per_day"].median,
            bands["km_mg_per_L"].median,
            bands["volume_L"].median,
            "posterior median",
        ),
        summary=bands,
        correlation=log_correlation(vmax, km, weights),
        volume_from="record" if learned else "population",
        fit=tuple(x for _, x in sorted(zip(order, _fit(model, answer), strict=True), key=lambda pair: pair[0])),
        diagnostics={
            "population": prior.population,
            "levels": len(levels),
            "assumes": spread.words,
            "grid": report.nodes,
            "effective_nodes": answer.effective_nodes,
            "certificate": report.difference,
            "no_steady_state": report.chances,
            "wrong_level": _wrong_level(model, answer),
            "log_evidence": _log_evidence(answer),
        },
        trusted=not report.distrust,
        distrust=report.distrust,
    )


@dataclass(frozen=True)
class _Report:
    """What one grid says: 5, 50, 95 % points by quantity, chances of no steady state by rate; and the
    certificate."""

    quantiles: Mapping[str, tuple[float, float, float]]
    chances: Mapping[float, float]
    nodes: int = 0
    difference: float = math.nan
    distrust: str = ""


def _certified(model: _Model, prior: Prior, rates: Sequence[float]) -> tuple[Quadrature, _Report]:
    """The smallest grid whose answer a second, shifted grid repeats; the largest one, distrusted, if none
    does."""
    frame = scout(Frame.of(model.volume.centre, model.volume.cov), model.scouting)
    model = replace(model, typical_per_day=_typical_per_day(frame.mean, frame.root @ frame.root.T, STEPS), plans={})
    smallest = math.sqrt(min(x.own_variance for x in model.levels))
    wide = (
        prior.vmax_log_sd > WIDEST_LOG_SD["vmax"]
        or prior.km_log_sd > WIDEST_LOG_SD["km"]
        or prior.volume_log_sd > WIDEST_LOG_SD["volume"]
        or smallest < SMALLEST_LEVEL_SD
    )
    for n, check in SIZES[1:] if wide else SIZES:
        both = _Twofold(model, check)
        q = settle(frame, both.answer, n=n)
        if np.max(q.log_density) <= 0.5 * NOWHERE or q.effective_nodes < FEWEST_NODES:
            contradiction = True
            frame = q.frame
            continue
        contradiction = False
        report = _report(model, q, rates)
        second = lay(q.frame, reach=CERTIFICATE_REACH * q.axis[-1], n=check, density=both.certificate)
        other = _report(model, second, rates)
        difference = max(
            abs(x / y - 1)
            for key, values in report.quantiles.items()
            for x, y in zip(values, other.quantiles[key], strict=True)
        )
        chance = max((abs(report.chances[r] - other.chances[r]) for r in rates), default=0.0)
        reasons = []
        if not difference <= QUANTILE_TOLERANCE or not chance <= CHANCE_TOLERANCE:
            reasons.append("two independent calculations of it differ by more than 0.5 %")
        if q.edge_mass > 10 * EDGE_MASS or q.effective_nodes <= EFFECTIVE_NODES:
            reasons.append("the calculation does not resolve the values that remain possible")
        if smallest < EXACTEST_LEVEL_SD:
            reasons.append("a level is taken as more exact than any calculation of its course")
        distrust = "This estimate cannot be trusted: " + " and ".join(reasons) + "." if reasons else ""
        report = replace(report, nodes=n, difference=difference, distrust=distrust)
        if not reasons:
            break
        frame = Frame.of(*q.moments()) if q.effective_nodes > EFFECTIVE_NODES else q.frame
    if contradiction:
        raise CannotEstimate(
            "The levels and the record contradict each other within the spread that is assumed for them.",
            "No values of Vmax, Km and V could be found that explain all of them.",
            "Check the doses, the times and the units; a wider spread of the levels may be right.",
        )
    return q, report


def _report(model: _Model, q: Quadrature, rates: Sequence[float]) -> _Report:
    marginal = vmax_marginal(q)
    a, k = q.log_vmax.ravel()[:, None], q.log_kappa.ravel()[:, None]
    weights = q.part_weights.ravel()
    log_volume = model.volume.log_volume(a, k) + q.parts.mean
    variance = q.parts.variance.ravel()
    vmax = np.exp(marginal.quantiles(np.array(_PROBABILITIES)))
    km = np.exp(mixture_quantiles(weights, (k - log_volume).ravel(), variance, _PROBABILITIES))
    volume = np.exp(mixture_quantiles(weights, log_volume.ravel(), variance, _PROBABILITIES))
    found = {
        key: (float(v[0]), float(v[1]), float(v[2]))
        for key, v in (("vmax_mg_per_day", vmax), ("km_mg_per_L", km), ("volume_L", volume))
    }
    chances = {float(r): marginal.chance_up_to(math.log(r)) for r in rates}
    return _Report(found, chances)


def _fit(model: _Model, q: Quadrature) -> tuple[LevelFit, ...]:
    """Every level against the estimate, and how many spreads it lies from what the others predict.

    The residual is of the level left out: the nodes are reweighted by what they say without it.
    """
    a, k = q.log_vmax.ravel(), q.log_kappa.ravel()
    l0 = model.volume.log_volume(a, k)
    weights = q.part_weights.ravel()
    found = []
    for j, level in enumerate(model.levels):
        centre = q.nodes.log_amount[:, j][:, None] - l0[:, None] - q.parts.mean
        at = np.exp(mixture_quantiles(weights, centre.ravel(), q.parts.variance.ravel(), _PROBABILITIES))
        predicted = Band(float(at[1]), float(at[0]), float(at[2]))
        found.append(LevelFit(level.index, level.level_mg_per_L, predicted, _left_out(model, q, j, l0)))
    return tuple(found)


def _left_out(model: _Model, q: Quadrature, j: int, l0: Floats) -> float:
    """(log level - its mean from the population and the other levels) / its spread from them, over the
    nodes."""
    a, k = q.log_vmax.ravel(), q.log_kappa.ravel()
    others = [i for i in range(len(model.levels)) if i != j]
    followed = q.nodes.log_density > 0.5 * NOWHERE
    parts = model.parts(model.residual(q.nodes.log_amount, l0)[followed], q.nodes.cov[followed], others)
    log_w = model.volume.log_density(a, k)[followed, None] + parts.log_weight
    w = np.exp(log_w - np.max(log_w))
    w /= np.sum(w)
    centre = (q.nodes.log_amount[followed, j] - l0[followed])[:, None] - parts.mean
    mean = float(np.sum(w * centre))
    own = q.nodes.cov[followed, j, j][:, None]
    spread = math.sqrt(float(np.sum(w * ((centre - mean) ** 2 + parts.variance + own))))
    return (math.log(model.levels[j].level_mg_per_L) - mean) / spread


def _wrong_level(model: _Model, q: Quadrature) -> dict[int, float]:
    """Chance, by level, that it is the wrong one."""
    weights = q.part_weights
    m = len(model.levels)
    per = weights.shape[1] // (m + 1) if model.spread.wrong_level_chance > 0 else weights.shape[1]
    by_part = weights.sum(axis=0).reshape(-1, per).sum(axis=1)
    return {x.index: min(1.0, float(by_part[j + 1])) if len(by_part) > 1 else 0.0 for j, x in enumerate(model.levels)}


def log_evidence(record: Record, levels: Sequence[LevelData], prior: Prior, spread: RecordSpread) -> float:
    """Log of the probability density of the levels under a population and a belief in the record."""
    model = _model(record, levels, prior, spread)
    frame = Frame.of(model.volume.centre, model.volume.cov)
    q = lay(frame, reach=5.0, n=36, density=model.scouting)
    if q.effective_nodes < EFFECTIVE_NODES:
        q = settle(scout(frame, model.scouting), model.scouting, n=36)
    return _log_evidence(q)


def at_points(
    record: Record,
    levels: Sequence[LevelData],
    prior: Prior,
    spread: RecordSpread,
    *,
    vmax_mg_per_day: Floats,
    km_mg_per_L: Floats,
    volume_L: Floats,
) -> tuple[Floats, Floats]:
    """What the estimate reckons with at a few points, for the second way to check.

    Returns the levels [mg/L] at each point, shape (points, levels), and the log posterior density of each
    point's (log Vmax, log Km V), up to a constant.
    """
    model = _model(record, levels, prior, spread)
    a, k = np.log(vmax_mg_per_day), np.log(km_mg_per_L) + np.log(volume_L)
    log_amount, gain = model.courses(a, k)
    found = model.weigh(a, k, log_amount, model.shared(gain))
    return np.exp(found.log_amount) / volume_L[:, None], found.log_density


def _log_evidence(q: Quadrature) -> float:
    """Log of the chance density of the levels under the population, up to nothing: comparable between
    records."""
    step = q.axis[1] - q.axis[0]
    top = float(np.max(q.log_density))
    area = step**2 * q.frame.root[0, 0] * q.frame.root[1, 1]
    return top + math.log(float(np.sum(np.exp(q.log_density - top))) * area)


def _normal_chance(prior: Prior, rate_mg_per_day: float) -> float:
    """Chance under the prior that Vmax is at most a rate."""
    from scipy.special import ndtr

    return float(ndtr((math.log(rate_mg_per_day) - math.log(prior.vmax_mg_per_day)) / prior.vmax_log_sd))
