"""How fast the engine is, as ratios in one run against what one would use instead.

    python -m tests.bench.bench_flow

The everyday case: 4,096 draws, 30 days, an oral dose every 8 h, 8 levels. scipy's solve_ivp is restarted at
every dose, as it must be. Per draw it is timed on a sample of draws and scaled up (the lines say so), at
the loosest tolerance that is as accurate as the engine on that sample, and at 1e-6.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import resource
import time
import tracemalloc
from collections.abc import Callable

import numpy as np
from scipy.integrate import solve_ivp

from pkcalc import flow, formulas
from pkcalc.flow import Absorption, Before, Dose, Record, Repeated

DRAWS, DAYS, KA = 4096, 30, 11.0
TIMES = [2.1, 5.3, 9.3, 14.2, 18.7, 22.0, 26.1, 30.0]
FORM = Absorption(KA)


def record(days: int = DAYS) -> Record:
    return Record(tuple(Dose(i / 3, 100.0, absorption=FORM) for i in range(3 * days)))


def draws(n: int, seed: int = 1) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    vmax = 455 * np.exp(0.25 * rng.standard_normal(n))
    kappa = 5 * np.exp(0.5 * rng.standard_normal(n)) * 49 * np.exp(0.2 * rng.standard_normal(n))
    return vmax, kappa


def best(call: Callable[[], object], repeats: int = 3) -> float:
    times = []
    for _ in range(repeats):
        begin = time.perf_counter()
        call()
        times.append(time.perf_counter() - begin)
    return min(times)


def solve(vmax: np.ndarray, kappa: np.ndarray, method: str, rtol: float) -> np.ndarray:
    """All given draws as one system, restarted at every dose; the shared gut amount is the last state."""
    n = len(vmax)
    state = np.zeros(n + 1)
    marks = sorted({d.time_day for d in record().doses} | set(TIMES))
    out = []

    def change(_: float, y: np.ndarray) -> np.ndarray:
        rate = np.empty(n + 1)
        x, gut = y[:-1], y[-1]
        rate[:-1] = KA * gut - vmax * x / (kappa + x)
        rate[-1] = -KA * gut
        return rate

    doses = {d.time_day: d.amount_mg for d in record().doses}
    for now, after in zip(marks, [*marks[1:], None], strict=True):
        if now in TIMES:
            out.append(state[:-1].copy())
        state[-1] += doses.get(now, 0.0)
        if after is not None:
            state = solve_ivp(change, (now, after), state, method=method, rtol=rtol, atol=1e-9).y[:, -1]
    return np.array(out).T


def one_by_one(vmax: np.ndarray, kappa: np.ndarray, method: str, rtol: float) -> np.ndarray:
    return np.concatenate([solve(vmax[i : i + 1], kappa[i : i + 1], method, rtol) for i in range(len(vmax))])


def worst(ours: np.ndarray, truth: np.ndarray) -> float:
    return float(np.max(np.abs(ours / truth - 1)))


def against_solve_ivp() -> None:
    vmax, kappa = draws(DRAWS)
    sample = np.r_[np.argsort(vmax / kappa)[-4:], 0:8]
    truth = one_by_one(vmax[sample], kappa[sample], "DOP853", 1e-12)
    plans = {
        "everyday": lambda: flow.amounts(record(), TIMES, vmax, kappa),
        "everyday, steps by the 99 % point": lambda: flow.amounts(
            record(), TIMES, vmax, kappa, typical_per_day=float(np.quantile(vmax / kappa, 0.99))
        ),
        "fine": lambda: flow.amounts(record(), TIMES, vmax, kappa, accuracy="fine"),
        "finest": lambda: flow.amounts(record(), TIMES, vmax, kappa, accuracy="finest"),
    }
    seconds = {}
    print(f"{DRAWS:,} draws, {DAYS} days every 8 h, 8 levels")
    for name, call in plans.items():
        seconds[name] = best(call, 2 if name == "finest" else 4)
        error = worst(call()[sample], truth)
        print(f"  engine, {name}: {1e3 * seconds[name]:.0f} ms, largest error {error:.1e} (fastest draws among 12)")
    engine, error = seconds["everyday"], worst(plans["everyday"]()[sample], truth)
    for method in ("LSODA", "DOP853"):
        for rtol in (1e-3, 1e-4, 1e-5, 1e-6, 1e-7):
            loose = worst(one_by_one(vmax[sample], kappa[sample], method, rtol), truth)
            if loose <= error:
                break
        for tolerance, why in ((rtol, "as accurate"), (1e-6, "1e-6")):
            took = best(lambda m=method, r=tolerance: one_by_one(vmax[sample], kappa[sample], m, r), 1)
            scaled = took * DRAWS / len(sample)
            print(
                f"  solve_ivp {method} per draw, rtol {tolerance:.0e} ({why}): {scaled:.0f} s scaled up from "
                f"{len(sample)} draws, {scaled / engine:,.0f} times the engine"
            )
    for rtol in (1e-4, 1e-6):
        took = best(lambda r=rtol: solve(vmax, kappa, "DOP853", r), 2)
        off = worst(solve(vmax, kappa, "DOP853", rtol)[sample], truth)
        print(
            f"  solve_ivp DOP853, all draws as one system with one gut, rtol {rtol:.0e} (largest error {off:.1e}): "
            f"{took:.2f} s, {took / engine:.1f} times the engine"
        )


def growth() -> None:
    print("Growth (time per draw and event, in ns; linear growth is a constant)")
    for n in (1024, 4096, 16384, 65536):
        vmax, kappa = draws(n)
        took = best(lambda v=vmax, k=kappa: flow.amounts(record(), TIMES, v, k, typical_per_day=7.0), 2)
        print(f"  {n:>6,} draws, 90 events: {1e3 * took:7.0f} ms, {1e9 * took / n / 90:5.0f}")
    vmax, kappa = draws(1024)
    for days in (10, 30, 100, 300, 1000, 3400):
        took = best(lambda d=days: flow.amounts(record(d), [float(d)], vmax, kappa, typical_per_day=7.0), 1)
        print(f"   1,024 draws, {3 * days:>6,} events: {1e3 * took:7.0f} ms, {1e9 * took / 1024 / 3 / days:5.0f}")


def memory() -> None:
    print("Memory the calculation adds (peak)")
    for n in (4096, 65536, 262144):
        vmax, kappa = draws(n)
        tracemalloc.start()
        flow.amounts(record(3), [1.0, 2.0, 3.0], vmax, kappa, typical_per_day=7.0)
        peak = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        print(f"  {n:>7,} draws: {peak / 1e6:.1f} MB, of which the answer {n * 3 * 8 / 1e6:.1f} MB")
    whole = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"  whole process, libraries and baselines included: {whole:.0f} MB")


def others() -> None:
    vmax, kappa = draws(DRAWS)
    base = best(lambda: flow.amounts(record(), TIMES, vmax, kappa))
    windows = [(0.0, 10.0), (10.0, 20.0), (20.0, 30.0)]
    with_windows = best(lambda: flow.sensitivity(record(), TIMES, windows, vmax, kappa))
    regimen = Repeated(1.0, tuple(Dose(i / 3, 100.0, absorption=FORM) for i in range(3)))
    state = best(lambda: flow.periodic(regimen, vmax, kappa))
    steps = flow.periodic(regimen, vmax, kappa).newton_steps
    before = best(lambda: flow.amounts(Record(before=Before(regimen, 30.0)), [0.0], vmax, kappa))
    print("Beside one everyday pass")
    print(f"  levels and sensitivity to three windows: {with_windows / base:.1f} passes")
    print(f"  periodic steady state: {1e6 * state / DRAWS:.2f} us per draw, {steps} Newton steps")
    print(f"  start from 30 days on a regimen (plateau or build-up per draw): {before / base:.2f} passes")
    v, k = vmax / 50, kappa / 50

    def pieces() -> np.ndarray:
        return formulas.level_after(
            time_day=3.0,
            start_mg_per_L=20.0,
            dose_rate_mg_per_day=300.0,
            vmax_mg_per_day=vmax,
            km_mg_per_L=k,
            volume_L=50.0,
        )

    piece = best(pieces) / DRAWS
    single = best(
        lambda: solve_ivp(
            lambda _, c: 6.0 - v[0] * c / (k[0] + c), (0, 3.0), [20.0], method="DOP853", rtol=1e-6, atol=1e-9
        )
    )
    print(f"  closed-form piece: {1e9 * piece:.0f} ns per draw, one solve_ivp call is {single / piece:,.0f} times that")


if __name__ == "__main__":
    against_solve_ivp()
    others()
    growth()
    memory()
