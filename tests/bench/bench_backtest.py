"""The back-test measured: patients per second here and on two workers, cost and memory against cohort size. One command:

    OPENBLAS_NUM_THREADS=1 python tests/bench/bench_backtest.py [--patients 40] [--readable 1000 10000 100000]
        [--coverage 100]

Three tables.
Speed: one synthetic department calculated by this process, then by two Dask workers, in one run on one machine.
Size: departments of short records without a weight, so that each is read, checked, set aside and counted but not
estimated: what the streaming, the index, the parts and the report cost per patient, and the largest memory of the
process that ran it. The cost of the estimates themselves is the first table's; a whole run is the sum of the two.
Coverage: what the report says of a synthetic department whose truth is the population in use, and of one whose
Vmax is 20 % lower.
"""

from __future__ import annotations

import argparse
import json
import os
import resource
import shutil
import subprocess
import sys
import tempfile
import time
from dataclasses import replace
from pathlib import Path

from pkcalc.backtest.department import Errors, ward_of, write_department
from pkcalc.backtest.folder import open_folder
from pkcalc.backtest.report import findings, hints, write_reports
from pkcalc.backtest.run import plan_of, run
from pkcalc.drugs.profile import load_profile
from pkcalc.site import no_site

DRUG, SITE = "phenytoin", no_site()


def speed(base: Path, count: int) -> None:
    write_department(base / "d", drug=DRUG, count=count, seed=2026)
    folder = open_folder(base / "d")
    plan = replace(plan_of(folder, DRUG, SITE), part=4)
    print(f"load of the machine before: {os.getloadavg()[0]:.1f} on {os.cpu_count()} processors\n")
    print("| run | patients/s | processor s per patient | ratio of patients/s |\n|---|---|---|---|")
    first = 0.0
    for name, workers in (("this process", 0), ("one worker", 1), ("two workers", 2)):
        begin, used = time.perf_counter(), _used()
        run(folder, base / f"r{workers}", plan=plan, site=SITE, workers=workers)
        rate = count / (time.perf_counter() - begin)
        first = first or rate
        print(f"| {name} | {rate:.2f} | {(_used() - used) / count:.2f} | {rate / first:.2f} |", flush=True)
    same = all(
        (base / "r0" / "parts" / p.name).read_bytes() == p.read_bytes()
        for w in (1, 2)
        for p in (base / f"r{w}" / "parts").iterdir()
    )
    print(f"\nparts of all three the same to the bit: {same}")


def _used() -> float:
    found = [resource.getrusage(w) for w in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    return sum(x.ru_utime + x.ru_stime for x in found)


def size(base: Path, counts: list[int]) -> None:
    print("\n| patients | tables, MB | processor s | ms per patient | largest memory, MB |\n|---|---|---|---|---|")
    for count in counts:
        path = base / f"s{count}"
        path.mkdir()
        heads = {
            "patients": "patient,age",
            "doses": "patient,form,amount,unit,every,from,until",
            "levels": "patient,value,unit,kind,drawn",
        }
        for table, head in heads.items():
            with (path / f"{table}.csv").open("w") as stream:
                stream.write(head + "\n")
                for n in range(count):
                    row = {
                        "patients": "40 years",
                        "doses": "sodium,300,mg,24 h,2026-01-01 21:00,",
                        "levels": f"{5 + n % 20},mg/L,total,2026-01-15 07:00",
                    }[table]
                    stream.write(f"k{n},{row}\n")
        told = subprocess.run(
            [sys.executable, __file__, "--one", str(path)], capture_output=True, text=True, check=True
        )
        used, memory = json.loads(told.stdout)
        megabytes = sum(f.stat().st_size for f in path.glob("*.csv")) / 1e6
        print(f"| {count:,} | {megabytes:.1f} | {used:.1f} | {1000 * used / count:.2f} | {memory:.0f} |", flush=True)
        shutil.rmtree(path)


def one(path: Path) -> None:
    """In a process of its own: a whole run, its processor time and its largest memory."""
    begin = time.process_time()
    folder = open_folder(path)
    outcome = run(folder, path / "r", plan=plan_of(folder, DRUG, SITE), site=SITE)
    write_reports(outcome.store, folder, SITE)
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(json.dumps([time.process_time() - begin, memory]))


def coverage(base: Path, count: int) -> None:
    print("\n| truth | method | levels | inside 50 %, % | inside 90 %, % | median absolute error, mg/L |")
    print("|---|---|---|---|---|---|")
    ward = ward_of(load_profile(DRUG))
    said = []
    for name, factor in (("the population", 1.0), ("Vmax 20 % lower", 0.8)):
        path = base / f"c{factor}"
        write_department(
            path, drug=DRUG, count=count, seed=77, ward=replace(ward, vmax_factor=factor), errors=Errors(wrong=0.0)
        )
        folder = open_folder(path)
        outcome = run(folder, path / "r", plan=plan_of(folder, DRUG, SITE), site=SITE)
        found = findings(outcome.store, SITE)
        for method, tally in found.by_method.items():
            inner, outer = tally.sums.mean(7), tally.sums.mean(8)
            reach = "too few patients"
            if outer.low is not None and outer.high is not None:
                reach = f"{100 * outer.low:.1f} to {100 * outer.high:.1f}"
            print(
                f"| {name} | {method} | {tally.sums.rows} | {100 * inner.value:.1f} | "
                f"{100 * outer.value:.1f} ({reach}) | "
                f"{tally.median_absolute_error():.2f} |",
                flush=True,
            )
        for h in hints(found):
            v, k = h.vmax_ratio, h.km_ratio
            said.append(
                f"{name}: Vmax {v.value:.2f} ({v.low:.2f} to {v.high:.2f}), Km {k.value:.2f} ({k.low:.2f} to "
                f"{k.high:.2f}) of the population's; off in {', '.join(h.off) or 'nothing'}."
            )
    print("\n" + "\n".join(said))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--patients", type=int, default=40)
    parser.add_argument("--readable", type=int, nargs="*", default=[1_000, 10_000, 100_000])
    parser.add_argument("--coverage", type=int, default=100)
    parser.add_argument("--one", type=Path, help=argparse.SUPPRESS)
    chosen = parser.parse_args()
    if chosen.one:
        one(chosen.one)
        return
    with tempfile.TemporaryDirectory() as folder:
        base = Path(folder)
        if chosen.patients:
            speed(base, chosen.patients)
        if chosen.readable:
            size(base, chosen.readable)
        if chosen.coverage:
            coverage(base, chosen.coverage)


if __name__ == "__main__":
    main()
