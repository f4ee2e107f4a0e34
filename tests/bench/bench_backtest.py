"""The back-test measured. One command:

    OPENBLAS_NUM_THREADS=1 python tests/bench/bench_backtest.py [--patients 40] [--cohort 100 1000 10000]
        [--coverage 120] [--baseline 2]

Four parts; each is left out by a 0, or by no number after --cohort.
Speed: one synthetic department calculated by this process, then by one and by two Dask workers (processor time with the
start of these processes, patients per second without it); estimates from levels are counted in a second pass over some
of it.
Cohort: departments of short synthetic records (one level, 4 to 10 days after the first dose), each level forecast
from the population alone: processor time per patient and the largest memory of the process that ran it, from reading
the tables to the written report. `--cohort 100000` is the large run: about half an hour of one processor.
Coverage: what the report says of a department whose truth is the population in use, and of one whose Vmax is 20 %
lower; 30 to 60 days on each dose, so that pairs of steady levels exist.
Baseline: the same patients as a loop over `solve_ivp` would have it, by a generic optimiser and by emcee; how much of
it was run and how much is scaled up stands in the table.
"""

from __future__ import annotations

import argparse
import json
import math
import os
import resource
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np

from pkcalc.backtest.accuracy import ABSOLUTE, DIFFERENCE, IN50, IN90
from pkcalc.backtest.department import Errors, ward_of, write_department
from pkcalc.backtest.folder import open_folder
from pkcalc.backtest.outlook import METHODS, PRIOR, outlooks
from pkcalc.backtest.report import findings, hints, write_reports
from pkcalc.backtest.run import plan_of, run
from pkcalc.backtest.synthetic import SyntheticPatient, patients
from pkcalc.drugs.profile import Prior, load_profile
from pkcalc.estimate import posterior
from pkcalc.site import no_site

DRUG, SITE = "phenytoin", no_site()


def load() -> str:
    return f"load of the machine {os.getloadavg()[0]:.1f} on {os.cpu_count()} processors"


def speed(base: Path, count: int) -> None:
    write_department(base / "d", drug=DRUG, count=count, seed=2026)
    folder = open_folder(base / "d")
    plan = replace(plan_of(folder, DRUG, SITE), part=4)
    outlooks(next(folder.patients(0, 1)), DRUG, SITE)
    print(f"{load()}\n")
    print("| run | patients/s | processor s per patient | ratio of patients/s |\n|---|---|---|---|")
    first = 0.0
    for name, workers in (("this process", 0), ("one worker", 1), ("two workers", 2)):
        used = _used()
        done: list[tuple[float, int]] = []

        def told(patients: int, done: list[tuple[float, int]] = done) -> None:
            done.append((time.perf_counter(), patients))

        run(folder, base / f"r{workers}", plan=plan, site=SITE, workers=workers, told=told)
        # from the first that was done to the last: without the start of a cluster
        rate = sum(n for _, n in done[1:]) / (done[-1][0] - done[0][0])
        first = first or rate
        print(f"| {name} | {rate:.2f} | {(_used() - used) / count:.2f} | {rate / first:.2f} |", flush=True)
    same = all(
        (base / "r0" / "parts" / p.name).read_bytes() == p.read_bytes()
        for w in (1, 2)
        for p in (base / f"r{w}" / "parts").iterdir()
    )
    print(f"\nparts of all three the same to the bit: {same}")
    some = min(count, 20)
    estimates, spent, whole = _estimates(lambda: [outlooks(r, DRUG, SITE) for r in folder.patients(0, some)])
    print(
        f"{estimates / some:.1f} estimates from levels per patient, {spent / estimates:.3f} processor s each "
        f"({100 * spent / whole:.0f} % of the whole); {some / whole:.2f} patients and {estimates / whole:.1f} estimates "
        f"per processor second; {load()}"
    )


def _estimates(work: Callable[[], object]) -> tuple[int, float, float]:
    """How many estimates from levels some work makes, the processor time in them, and of all of it."""
    plain = posterior.from_record
    made, spent = 0, 0.0

    def counted(record, levels, *rest, **more):  # type: ignore[no-untyped-def]
        nonlocal made, spent
        begin = time.process_time()
        try:
            return plain(record, levels, *rest, **more)
        finally:
            if levels:
                made, spent = made + 1, spent + time.process_time() - begin

    posterior.from_record = counted
    try:
        begin = time.process_time()
        work()
        return made, spent, time.process_time() - begin
    finally:
        posterior.from_record = plain


def _used() -> float:
    found = [resource.getrusage(w) for w in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    return sum(x.ru_utime + x.ru_stime for x in found)


def cohort(base: Path, counts: list[int]) -> None:
    ward = replace(ward_of(load_profile(DRUG)), levels=1, days_per_dose=(4, 10))
    print(
        "\n| patients | tables, MB | forecasts | inside 90 %, % | processor s | ms per patient | largest memory, MB "
        "| load |\n|---|---|---|---|---|---|---|---|"
    )
    for count in counts:
        path = base / f"s{count}"
        write_department(path, drug=DRUG, count=count, seed=count, ward=ward)
        told = subprocess.run(
            [sys.executable, __file__, "--one", str(path)], capture_output=True, text=True, check=True
        )
        used, memory, forecasts, inside = json.loads(told.stdout)
        megabytes = sum(f.stat().st_size for f in path.glob("*.csv")) / 1e6
        print(
            f"| {count:,} | {megabytes:.1f} | {forecasts:,} | {100 * inside:.1f} | {used:.0f} | "
            f"{1000 * used / count:.1f} | {memory:.0f} | {os.getloadavg()[0]:.1f} |",
            flush=True,
        )
        shutil.rmtree(path)


def one(path: Path) -> None:
    """In a process of its own: a whole run from the population alone, its processor time and its largest memory."""
    begin = time.process_time()
    folder = open_folder(path)
    outcome = run(folder, path / "r", plan=plan_of(folder, DRUG, SITE, methods=(PRIOR,)), site=SITE)
    found, _ = write_reports(outcome.store, folder, SITE)
    used = time.process_time() - begin
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    tally = found.by_method[PRIOR]
    print(json.dumps([used, memory, tally.sums.rows, tally.sums.share(IN90).value]))


def coverage(base: Path, count: int) -> None:
    print("\n| truth | method | levels | inside 50 %, % | inside 90 %, % | mean and median absolute error, mg/L |")
    print("|---|---|---|---|---|---|")
    ward = replace(ward_of(load_profile(DRUG)), days_per_dose=(30, 60))
    said = []
    for name, factor in (("the population", 1.0), ("Vmax 20 % lower", 0.8)):
        path = base / f"c{factor}"
        write_department(
            path, drug=DRUG, count=count, seed=77, ward=replace(ward, vmax_factor=factor), errors=Errors(wrong=0.0)
        )
        folder = open_folder(path)
        outcome = run(folder, path / "r", plan=plan_of(folder, DRUG, SITE), site=SITE)
        found = findings(outcome.store, SITE)
        for method in METHODS:
            tally = found.by_method[method]
            inner, outer = tally.sums.share(IN50), tally.sums.share(IN90)
            reach = "too few patients"
            if outer.low is not None and outer.high is not None:
                reach = f"{100 * outer.low:.1f} to {100 * outer.high:.1f}"
            print(
                f"| {name} | {method} | {tally.sums.rows} | {100 * inner.value:.1f} | "
                f"{100 * outer.value:.1f} ({reach}) | "
                f"{tally.sums.mean(ABSOLUTE).value:.2f}, {tally.median_absolute_error():.2f} |",
                flush=True,
            )
        for (a, b), sums in found.against.items():
            d = sums.mean(DIFFERENCE)
            said.append(
                f"{name}: {b} less {a}, mean absolute error on the same {sums.rows} levels: {d.value:.2f} "
                f"({d.low or math.nan:.2f} to {d.high or math.nan:.2f}) mg/L."
            )
        for h in hints(found):
            v, k = h.vmax_ratio, h.km_ratio
            said.append(
                f"{name}: Vmax {v.value:.2f} ({v.low:.2f} to {v.high:.2f}), Km {k.value:.2f} ({k.low:.2f} to "
                f"{k.high:.2f}) of the population's; off in {', '.join(h.off) or 'nothing'}."
            )
    print("\n" + "\n".join(said))


#: A short chain: 16 walkers, 1,000 steps.
WALKERS, CHAIN = 16, 1000

#: Steps of it that are run.
CHAIN_RUN = 4

#: Draws that a forecast is made of, as in the back-test, and how many of them are run.
DRAWS, DRAWS_RUN = 1024, 16


def baseline(base: Path, count: int) -> None:
    """The levels as known, doses as recorded, the log normal spread of a level as the only error: simpler than the
    back-test, which also doubts the doses and the levels."""
    import emcee
    from scipy.optimize import minimize

    profile = load_profile(DRUG)
    ward = ward_of(profile)
    prior = profile.default_population(40.0).at(70.0, 40.0)
    write_department(base / "b", drug=DRUG, count=count, seed=2026, ward=ward, errors=Errors(wrong=0.0))
    folder = open_folder(base / "b")
    outlooks(next(folder.patients(0, 1)), DRUG, SITE)
    totals = dict.fromkeys(("ours", "optimiser", "emcee"), 0.0)
    evaluations = posteriors = 0
    for raw, person in zip(
        folder.patients(0, count), patients(ward, prior, count=count, seed=2026, target=False), strict=True
    ):
        begin = time.process_time()
        outlooks(raw, DRUG, SITE)
        totals["ours"] += time.process_time() - begin
        # the same estimates as the back-test: each earlier level alone, and all of them
        last = len(person.level_days) - 1
        for which in [[i] for i in range(last)] + [list(range(n)) for n in range(2, last + 1)]:
            posteriors += 1
            density = _density(person, which, prior, math.log1p(ward.assay_cv**2) + math.log1p(ward.day_cv**2))
            middle = np.log([prior.vmax_mg_per_day, prior.km_mg_per_L, prior.volume_L])
            begin = time.process_time()
            found = minimize(lambda x, f=density: -f(x), middle, method="Nelder-Mead", options={"xatol": 1e-3})
            totals["optimiser"] += time.process_time() - begin
            evaluations += found.nfev
            begin = time.process_time()
            walkers = found.x + 0.05 * np.random.default_rng(1).standard_normal((WALKERS, 3))
            emcee.EnsembleSampler(WALKERS, 3, density).run_mcmc(walkers, CHAIN_RUN)
            # the first step also weighs the walkers' first places
            totals["emcee"] += (time.process_time() - begin) * CHAIN / (CHAIN_RUN + 1)
            begin = time.process_time()
            for _ in range(DRAWS_RUN):
                _levels(person, [max(which) + 1], *np.exp(found.x))
            totals["emcee"] += (time.process_time() - begin) * DRAWS / DRAWS_RUN
    print(f"\n{load()}")
    print("| way | processor s per patient | times the back-test | what was run |\n|---|---|---|---|")
    said = {
        "ours": f"the whole back-test of {count} patients",
        "optimiser": f"{posteriors} points by Nelder-Mead to the end ({evaluations / posteriors:.0f} courses each); "
        "no intervals, no population forecast",
        "emcee": f"{CHAIN_RUN} of {CHAIN:,} steps of {WALKERS} walkers and {DRAWS_RUN} of {DRAWS:,} forecast courses "
        f"for each of {posteriors} estimates, scaled up; no population forecast",
    }
    for name, what in said.items():
        print(f"| {name} | {totals[name] / count:.2f} | {totals[name] / totals['ours']:.0f} | {what} |")


def _density(
    person: SyntheticPatient, which: list[int], prior: Prior, variance: float
) -> Callable[[np.ndarray], float]:
    mean = np.log([prior.vmax_mg_per_day, prior.km_mg_per_L, prior.volume_L])
    sd = np.array([prior.vmax_log_sd, prior.km_log_sd, prior.volume_log_sd])
    seen = np.log([person.level_mg_per_L[i] for i in which])

    def density(x: np.ndarray) -> float:
        if np.any(np.abs(x - mean) > 6 * sd):
            return -math.inf
        off = np.log(_levels(person, which, *np.exp(x))) - seen
        return float(-0.5 * np.sum(((x - mean) / sd) ** 2) - 0.5 * np.sum(off**2) / variance)

    return density


def _levels(person: SyntheticPatient, which: list[int], vmax: float, km: float, volume: float) -> np.ndarray:
    """Levels by `solve_ivp`, from one change of the input to the next."""
    from scipy.integrate import solve_ivp

    last = person.level_days[max(which)]
    doses = [d for d in person.record.doses if d.time_day < last]
    form = doses[0].absorption
    assert form is not None
    kappa, ka = km * volume, form.ka_per_day
    begins = [(d.time_day + form.lag_day, d.amount_mg) for d in doses]
    asked = [person.level_days[i] for i in which]
    moments = sorted({t for b, _ in begins for t in (b, b + form.release_day) if t < last} | set(asked))
    state, now, found = np.zeros(2), moments[0], {}
    for begin, amount in begins:
        if begin == now and not form.release_day:
            state[0] += amount
    for moment in moments[1:]:
        rate = sum(a / form.release_day for b, a in begins if form.release_day and b <= now < b + form.release_day)

        def slope(_: float, y: np.ndarray, rate: float = rate) -> list[float]:
            return [rate - ka * y[0], ka * y[0] - vmax * y[1] / (kappa + y[1])]

        state = solve_ivp(slope, (now, moment), state, method="LSODA", rtol=1e-6, atol=1e-6).y[:, -1]
        now = moment
        if moment in asked:
            found[moment] = state[1] / volume
        if not form.release_day:
            state[0] += sum(a for b, a in begins if b == moment)
    return np.array([found[t] for t in asked])


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--patients", type=int, default=40)
    parser.add_argument("--cohort", type=int, nargs="*", default=[100, 1_000, 10_000])
    parser.add_argument("--coverage", type=int, default=120)
    parser.add_argument("--baseline", type=int, default=2)
    parser.add_argument("--one", type=Path, help=argparse.SUPPRESS)
    chosen = parser.parse_args()
    if chosen.one:
        one(chosen.one)
        return
    with tempfile.TemporaryDirectory() as folder:
        base = Path(folder)
        if chosen.patients:
            speed(base, chosen.patients)
        if chosen.cohort:
            cohort(base, chosen.cohort)
        if chosen.coverage:
            coverage(base, chosen.coverage)
        if chosen.baseline:
            baseline(base, chosen.baseline)


if __name__ == "__main__":
    main()
