"""How fast the plan is: every regimen of a shelf for one patient, against looping an ordinary solver.

    python -m tests.bench.bench_plan             ratios measured side by side in one run (about a minute)
    python -m tests.bench.bench_plan --draws 4096

The loop takes each regimen and draw through scipy's solve_ivp over 28 days (default settings, which are too coarse to
use; a usable tolerance is slower still). It is timed on a few pairs and scaled to all of them, which is said in the
table. Both sides give the level on day 28 at the average rate.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Callable
from dataclasses import replace

import numpy as np
from scipy.integrate import solve_ivp

from pkcalc import flow
from pkcalc.dosing import Regimen, flow_repeated
from pkcalc.estimate.result import Estimate
from pkcalc.forecast import fewer_draws, levels_on_days
from pkcalc.plan.candidates import candidates
from pkcalc.plan.courses import DAY_DRAWS, SWING_DRAWS, swing, with_courses
from pkcalc.plan.nextlevel import expected_spread, log_steady
from pkcalc.plan.shelf import _dispensable, dispensable, oral
from tests.unit.planning import GOAL, estimate, plan, profile, setting

LOOPED = 40


def seconds(work: Callable[[], object], repeats: int = 5) -> float:
    """Processor time, best of a few runs after one to warm up: the machine may be shared."""
    work()
    best = np.inf
    for _ in range(repeats):
        begin = time.process_time()
        work()
        best = min(best, time.process_time() - begin)
    return best


def looped(draws: Estimate, rates: list[float], start: float) -> float:
    """Seconds for one (regimen, draw) pair by solve_ivp."""
    assert draws.volume_L is not None
    begin = time.process_time()
    for k in range(LOOPED):
        rate, i = rates[k % len(rates)], k % len(draws.weights)
        vmax, km, volume = draws.vmax_mg_per_day[i], draws.km_mg_per_L[i], draws.volume_L[i]
        solve_ivp(lambda _t, c, r=rate, a=vmax, b=km, v=volume: (r - a * c / (b + c)) / v, (0, 28), [start])
    return (time.process_time() - begin) / LOOPED


def one_by_one(draws: Estimate, regimens: list[Regimen]) -> float:
    """Seconds for trough and peak of one regimen by the engine alone, as many draws, averaged over a few."""
    few = fewer_draws(draws, SWING_DRAWS).estimate
    assert few.volume_L is not None
    kappa = few.km_mg_per_L * few.volume_L
    some = [flow_repeated(r, profile()) for r in regimens[:: len(regimens) // 20]]
    begin = time.process_time()
    for repeated in some:
        flow.periodic(repeated, few.vmax_mg_per_day, kappa)
    return (time.process_time() - begin) / len(some)


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("--draws", type=int, default=2048)
    n = parser.parse_args().draws
    p, draws = profile(), estimate(n=n)
    products = oral(p.shelves["united-states"].products, p)

    def enumerate_afresh() -> object:
        _dispensable.cache_clear()
        return dispensable(p, products, largest_active_mg_per_day=552.0)

    made = dispensable(p, products, largest_active_mg_per_day=552.0)
    # two lines, as where doses are taken unobserved
    s = setting(draws, taken=replace(draws, vmax_mg_per_day=draws.vmax_mg_per_day * 0.95))
    every = candidates(made, (), s)
    rates = [c.rate_mg_per_day for c in every]
    target = log_steady(draws, rates[100], GOAL)
    level = np.log(draws.km_mg_per_L)
    rows = [
        ("enumerate the shelf afresh", seconds(enumerate_afresh)),
        (f"forecast {len(every)} regimens x {n} draws, both lines", seconds(lambda: candidates(made, (), s))),
        (
            f"trough and peak ({SWING_DRAWS} draws), named days ({DAY_DRAWS}) of all of them",
            seconds(lambda: with_courses(every, s)),
        ),
        ("one next-draw candidate", seconds(lambda: expected_spread(target, level, draws.weights, 0.2))),
        ("the whole plan of one case", seconds(lambda: plan(est=draws), repeats=3)),
    ]
    ours = seconds(lambda: levels_on_days(draws, rates, (28.0,), 8.0))
    pair = looped(draws, rates, 8.0)
    used = min(n, 512)
    all_regimens = [c.regimen for c in every]
    swings = seconds(lambda: swing(draws, all_regimens, p), repeats=3)
    alone = one_by_one(draws, all_regimens) * len(every)
    print(f"{n} draws, {len(every)} regimens\n")
    print("| what | ms |\n|---|---|")
    for name, took in rows:
        print(f"| {name} | {1000 * took:.3g} |")
    print(f"| level on day 28, {len(every)} regimens x {used} draws, ours | {1000 * ours:.3g} |")
    print(f"| the same by looping solve_ivp (scaled from {LOOPED} pairs) | {1000 * pair * len(every) * used:.3g} |")
    print(f"| trough and peak of {len(every)} regimens in one pass | {1000 * swings:.3g} |")
    print(f"| the same one regimen after the other by the engine (scaled from 20) | {1000 * alone:.3g} |")
    print(f"\nratio, trough and peak: {alone / swings:,.1f}")
    print(f"ratio, level on day 28: {pair * len(every) * used / ours:,.0f}")
    both = pair * len(every) * n
    print(f"ratio, all regimens with both lines against one solve_ivp per regimen and draw: {both / rows[1][1]:,.0f}")


if __name__ == "__main__":
    main()
