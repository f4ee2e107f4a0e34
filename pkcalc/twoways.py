"""What the first way found, laid before the second: the numbers of a consult that `crosscheck` calculates again."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from pkcalc import crosscheck, formulas
from pkcalc import plan as planning
from pkcalc.case import Case
from pkcalc.crosscheck import Floats, Node, Row
from pkcalc.drugs.profile import Prior, Profile
from pkcalc.estimate import intake, posterior
from pkcalc.estimate import pair as two_level
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.pair import SteadyPair
from pkcalc.estimate.result import Estimate
from pkcalc.forecast import Goal
from pkcalc.levels import Observation
from pkcalc.plan.projection import Plateaus, Projection
from pkcalc.record import Record
from pkcalc.site import Site
from pkcalc.units import show


def compare(
    case: Case,
    profile: Profile,
    site: Site,
    *,
    observations: Sequence[Observation],
    estimate: Estimate | None,
    pair: Estimate | None,
    pairs: Sequence[SteadyPair],
    record: Record | None,
    levels: Sequence[LevelData],
    prior: Prior | None,
    spread: RecordSpread,
    plan: planning.Plan | None,
    projection: Projection | None,
    plateaus: Plateaus | None,
    goal: Goal | None,
) -> tuple[Row, ...]:
    """Every number of the consult that can be calculated a second way, both ways."""
    rows = [*crosscheck.text_rows(case, profile), *crosscheck.infusion_rows(case, profile)]
    rows += crosscheck.binding_rows(observations, case, profile, site)
    if pair is not None and pair.method == two_level.METHOD and len(pairs) == 2:
        rows += crosscheck.pair_rows(
            [p.rate_mg_per_day for p in pairs],
            [p.level_mg_per_L for p in pairs],
            pair.point.vmax_mg_per_day,
            pair.point.km_mg_per_L,
        )
    if estimate is not None and estimate.method == posterior.WHOLE_RECORD and record is not None and prior is not None:
        rows += _record_rows(estimate, record, levels, prior, spread)
    if plan is not None:
        rows += _plan_rows(plan)
    if projection is not None and goal is not None:
        rows += _projected_rows(projection, goal, 0.0 if prior is None else prior.first_order_per_day)
    if plateaus is not None and estimate is not None and goal is not None:
        rows += _settle_rows(plateaus, estimate, goal)
    return tuple(_told(r, profile) for r in rows)


def _told(row: Row, profile: Profile) -> Row:
    """A rate in the drug's own time unit; its tolerance is relative."""
    if row.unit != "mg/day" or row.absolute:
        return row
    return replace(row, first=profile.rate(row.first), second=profile.rate(row.second), unit=profile.rate_unit)


def _settle_rows(plateaus: Plateaus, estimate: Estimate, goal: Goal) -> list[Row]:
    """Where each rate asked about would settle, and the rate for the aim."""
    p = estimate.point
    rows: list[Row] = []
    for words, f in plateaus.settle:
        rows += crosscheck.steady_rows(
            words,
            f.rate_mg_per_day,
            Node("the point", p.vmax_mg_per_day, p.km_mg_per_L, p.volume_L or 1.0),
            level_mg_per_L=f.point_mg_per_L,
            median_mg_per_L=f.steady.median,
            chance_above_critical=f.above_critical,
            critical_mg_per_L=goal.critical_mg_per_L,
            vmax_mg_per_day=estimate.vmax_mg_per_day,
            km_mg_per_L=estimate.km_mg_per_L,
            weights=estimate.weights,
        )
    for held in plateaus.holds:
        pairs = zip(estimate.vmax_mg_per_day.tolist(), estimate.km_mg_per_L.tolist(), strict=True)
        removed = [crosscheck.removed_mg_per_h(goal.aim_mg_per_L, Node("", v, k, 1.0), 0.0) for v, k in pairs]
        words = f"the rate that holds {show(goal.aim_mg_per_L, 'mg/L')} {held.words}"
        rows.append(crosscheck.shares_row(words, held.mg.median, np.array(removed), estimate.weights))
    return rows


def nodes_of(estimate: Estimate) -> tuple[Node, ...]:
    """The point, and the draws at the 5 % and 95 % points of Vmax."""
    assert estimate.volume_L is not None
    p = estimate.point
    assert p.volume_L is not None
    found = [Node("the point", p.vmax_mg_per_day, p.km_mg_per_L, p.volume_L)]
    order = np.argsort(estimate.vmax_mg_per_day, kind="stable")
    running = np.cumsum(estimate.weights[order])
    for share in (0.05, 0.95):
        i = int(order[min(int(np.searchsorted(running, share)), len(order) - 1)])
        found.append(
            Node(
                f"the {100 * share:.0f} % draw",
                float(estimate.vmax_mg_per_day[i]),
                float(estimate.km_mg_per_L[i]),
                float(estimate.volume_L[i]),
            )
        )
    return tuple(found)


def _record_rows(
    estimate: Estimate, record: Record, levels: Sequence[LevelData], prior: Prior, spread: RecordSpread
) -> list[Row]:
    nodes = nodes_of(estimate)
    at, log_weight = posterior.at_points(
        record,
        levels,
        prior,
        spread,
        vmax_mg_per_day=np.array([n.vmax_mg_per_day for n in nodes]),
        km_mg_per_L=np.array([n.km_mg_per_L for n in nodes]),
        volume_L=np.array([n.volume_L for n in nodes]),
    )
    missed = spread.share_at(record.start_day)
    as_taken = crosscheck.taken(record, missed)
    course = crosscheck.integrate(
        as_taken, [x.time_day for x in levels], nodes, first_order_per_day=_own_path(record, prior)
    )
    rows = list(crosscheck.level_rows(at, course, nodes, levels))
    if not isinstance(spread.doses_differing, tuple):
        mean, cov = posterior.prior_moments(prior)
        belief = crosscheck.Belief(missed, intake.HABIT, spread.wrong_level_chance, spread.wrong_level_factor)
        written = posterior.written_out(as_taken)
        second = crosscheck.log_weights(course, written, nodes, levels, crosscheck.Population(mean, cov), belief)
        rows += crosscheck.weight_rows(log_weight, second, nodes, levels)
    return rows


def _own_path(record: Record, prior: Prior) -> float:
    """The population's parallel path, unless the record has one that is always open."""
    return 0.0 if any(p.start_day == -np.inf for p in record.first_order) else prior.first_order_per_day


def _plan_rows(plan: planning.Plan) -> list[Row]:
    """The regimen in question: the pharmacist's first, else the present one, else the first of the table."""
    shown = plan.own[0] if plan.own else plan.present or (plan.table[0] if plan.table else None)
    if shown is None:
        return []
    taken, central, goal = plan.setting.taken, plan.setting.central, plan.setting.goal
    rate, p = shown.rate_mg_per_day, taken.point
    node = Node("the point", p.vmax_mg_per_day, p.km_mg_per_L, p.volume_L or 1.0)
    rows = list(
        crosscheck.steady_rows(
            "the regimen in question, every dose taken",
            rate,
            node,
            level_mg_per_L=shown.taken.point_mg_per_L,
            median_mg_per_L=shown.taken.steady.median,
            chance_above_critical=shown.taken.above_critical,
            critical_mg_per_L=goal.critical_mg_per_L,
            vmax_mg_per_day=taken.vmax_mg_per_day,
            km_mg_per_L=taken.km_mg_per_L,
            weights=taken.weights,
        )
    )
    c = central.point
    if c.volume_L is not None:
        first = formulas.time_to_fraction(
            fraction=0.9,
            dose_rate_mg_per_day=rate,
            vmax_mg_per_day=c.vmax_mg_per_day,
            km_mg_per_L=c.km_mg_per_L,
            volume_L=c.volume_L,
            start_mg_per_L=0.0,
        )
        second = crosscheck.days_on_the_way(
            rate, 0.0, Node("the point", c.vmax_mg_per_day, c.km_mg_per_L, c.volume_L), 0.9
        )
        rows.append(
            Row(
                "Days from nothing to 90 % of the way at the point, central",
                float(first),
                second,
                "days",
                crosscheck.LEVEL_TOLERANCE,
            )
        )
    return rows


def _projected_rows(projection: Projection, goal: Goal, first_order_per_day: float) -> list[Row]:
    """Every way to go on: levels to come at three draws, median and chance at the end; and the rates for the aim."""
    rows: list[Row] = []
    draws = projection.draws
    volume, weights = draws.volume_L, draws.weights
    assert volume is not None
    for path in projection.paths:
        f = path.followed
        picked = _draws_at(f.levels_mg_per_L[:, -1], weights)
        nodes = [
            Node(name, float(draws.vmax_mg_per_day[i]), float(draws.km_mg_per_L[i]), float(volume[i]))
            for name, i in picked
        ]
        course = crosscheck.integrate(f.record, f.times_day, nodes, start_mg_per_L=f.start_mg_per_L)
        rows += crosscheck.projected_rows(
            path.words,
            course,
            nodes,
            times_day=f.times_day,
            hours=[m.hours for m in path.moments],
            first_mg_per_L=f.levels_mg_per_L[[i for _, i in picked]],
        )
        last, ends = path.moments[-1], f.levels_mg_per_L[:, -1]
        where = f"the level in {show(last.hours, 'h')}, {path.words}"
        if last.level.median > 0:
            rows.append(crosscheck.shares_row(where, last.level.median, ends, weights))
        words = f"a level above {show(goal.critical_mg_per_L, 'mg/L')} in {show(last.hours, 'h')}, {path.words}"
        rows.append(crosscheck.chance_row(words, last.above_critical, goal.critical_mg_per_L, ends, weights))
    for held in projection.holds:
        removed = np.array(
            [
                crosscheck.removed_mg_per_h(
                    goal.aim_mg_per_L, Node("", vmax, km, v), first_order_per_day * v + held.clearance_L_per_day
                )
                for vmax, km, v in zip(
                    draws.vmax_mg_per_day.tolist(), draws.km_mg_per_L.tolist(), volume.tolist(), strict=True
                )
            ]
        )
        words = f"the rate that holds {show(goal.aim_mg_per_L, 'mg/L')} {held.words}"
        rows.append(crosscheck.shares_row(words, held.mg.median, removed, weights))
    return rows


def _draws_at(values: Floats, weights: Floats) -> list[tuple[str, int]]:
    """The draws at the 5 %, 50 % and 95 % points of something."""
    order = np.argsort(values, kind="stable")
    running = np.cumsum(weights[order]) / float(weights.sum())
    found = []
    for share in (0.05, 0.5, 0.95):
        i = int(order[min(int(np.searchsorted(running, share)), len(order) - 1)])
        found.append((f"the {100 * share:.0f} % draw", i))
    return found
