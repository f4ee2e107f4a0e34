"""How long the whole-record estimate takes, beside a Markov chain on the same engine. One command:

    OPENBLAS_NUM_THREADS=1 python tests/bench/bench_posterior.py [--no-chain]

Everyday cases: 1, 2, 4 and 8 levels over 30, 45, 60 and 90 days of nightly doses. Each is run three times after one to
warm up; the median counts. Courses: patients-to-be whose course the engine followed for one estimate, grid and
certificate together. The chain is emcee's (64 walkers, 800 steps, half of them thrown away), vectorised over walkers,
on the same courses and without the doubt about the doses, which would cost it more; the widest difference of a 5, 50
or 95 % point from a run of ours without that doubt stands beside it.
"""

from __future__ import annotations

import argparse
import math
import statistics
import time
from dataclasses import replace

import numpy as np

from pkcalc import flow
from pkcalc.drugs.profile import Prior, load_profile
from pkcalc.estimate.error_model import LevelData, RecordSpread
from pkcalc.estimate.posterior import from_record
from pkcalc.estimate.predict import predicted_levels
from pkcalc.record import Absorption, Dose, Record

CAPSULE = Absorption(ka_per_day=24.0, release_day=5 / 24)
CASES = ((1, 30), (2, 45), (4, 60), (8, 90))
QUANTITIES = ("vmax_mg_per_day", "km_mg_per_L", "volume_L")


def everyday(count: int, days: int, prior: Prior) -> tuple[Record, list[LevelData]]:
    """Nightly doses, raised twice, with levels spread over the record, as a patient in the middle would have."""
    doses = tuple(
        Dose(d + 0.875, 276.0 + 27.6 * (d > days / 3) + 27.6 * (d > 2 * days / 3), absorption=CAPSULE)
        for d in range(days)
    )
    record = Record(doses=doses)
    times = [days * (i + 1) / count - 0.2 for i in range(count)]
    true = flow.levels(record, times, prior.vmax_mg_per_day, prior.km_mg_per_L, prior.volume_L)[0]
    noise = np.random.default_rng(8).standard_normal(count)
    levels = [
        LevelData(t, float(c * math.exp(0.1 * z)), 0.10, day_cv=0.11, index=i)
        for i, (t, c, z) in enumerate(zip(times, true, noise, strict=True))
    ]
    return record, levels


def timed(call) -> tuple[float, object]:
    call()
    spent = []
    for _ in range(3):
        begin = time.perf_counter()
        result = call()
        spent.append(time.perf_counter() - begin)
    return statistics.median(spent), result


def chain(record: Record, levels: list[LevelData], prior: Prior, typical: float) -> tuple[float, np.ndarray]:
    import emcee

    mean = np.log([prior.vmax_mg_per_day, prior.km_mg_per_L, prior.volume_L])
    sd = np.array([prior.vmax_log_sd, prior.km_log_sd, prior.volume_log_sd])
    y = np.log([x.level_mg_per_L for x in levels])
    own = np.array([x.own_variance for x in levels])
    times = [x.time_day for x in levels]

    def log_density(theta: np.ndarray) -> np.ndarray:
        course = flow.amounts(
            record, times, np.exp(theta[:, 0]), np.exp(theta[:, 1] + theta[:, 2]), typical_per_day=typical
        )
        fit = np.sum((y - np.log(course) + theta[:, 2:]) ** 2 / own, axis=1)
        return -0.5 * fit - 0.5 * np.sum(((theta - mean) / sd) ** 2, axis=1)

    sampler = emcee.EnsembleSampler(64, 3, log_density, vectorize=True)
    start = np.random.RandomState(1)
    sampler.random_state = start.get_state()
    begin = time.perf_counter()
    sampler.run_mcmc(mean + 0.3 * sd * start.standard_normal((64, 3)), 800)
    spent = time.perf_counter() - begin
    flat = sampler.get_chain(discard=400, flat=True)
    return spent, np.exp(np.quantile(flat, [0.05, 0.5, 0.95], axis=0).T)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--no-chain", action="store_true")
    chosen = parser.parse_args()
    profile = load_profile("phenytoin")
    prior = next(p for p in profile.populations.values() if p.default).at(70.0, 40.0)
    usual = RecordSpread(0.05, 0.05)
    clean = replace(usual, doses_differing=0.0, wrong_level_chance=0.0)
    followed = 0
    original = flow.fading

    def counted(record, times, vmax, kappa, **rest):
        nonlocal followed
        followed += len(np.atleast_1d(vmax))
        return original(record, times, vmax, kappa, **rest)

    print("| levels, days | estimate, ms | courses | next level, ms | chain, ms | chain / estimate | chain off by, % |")
    print("|---|---|---|---|---|---|---|")
    for count, days in CASES:
        record, levels = everyday(count, days, prior)
        spent, estimate = timed(lambda r=record, x=levels: from_record(r, x, prior, usual))
        flow.fading = counted
        followed = 0
        from_record(record, levels, prior, usual)
        flow.fading = original
        coming, _ = timed(lambda r=record, x=levels, e=estimate, d=days: predicted_levels(r, x, usual, e, [d + 0.2]))
        row = f"| {count}, {days} | {1000 * spent:.0f} | {followed:,} | {1000 * coming:.0f} "
        if not chosen.no_chain:
            ours = from_record(record, levels, prior, clean)
            told = np.array([[ours.summary[q].low, ours.summary[q].median, ours.summary[q].high] for q in QUANTITIES])
            took, theirs = chain(record, levels, prior, 7.0)
            off = float(np.max(np.abs(theirs / told - 1)))
            row += f"| {1000 * took:,.0f} | {took / spent:.0f} | {100 * off:.1f} "
        print(row + "|", flush=True)


if __name__ == "__main__":
    main()
