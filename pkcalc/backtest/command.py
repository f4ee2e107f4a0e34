"""What `pkcalc backtest` does around the run: progress, interruption, reports and the lines on the terminal."""

from __future__ import annotations

import sys
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path

from pkcalc.backtest.folder import open_folder
from pkcalc.backtest.outlook import CHOICES, check_drug
from pkcalc.backtest.parts import Store
from pkcalc.backtest.report import summary, write_reports
from pkcalc.backtest.run import Told, plan_of, run, still_to_do
from pkcalc.drugs.profile import load_profile
from pkcalc.site import Site, load_site, no_site

RESULTS = "pkcalc-backtest"


class Progress:
    """A bar on stderr: patients done, rate and time left. Nothing is shown of any patient."""

    def __init__(self) -> None:
        from rich.console import Console
        from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

        self.bar = Progress(
            TextColumn("Patients"),
            BarColumn(),
            MofNCompleteColumn(),
            TextColumn("{task.fields[rate]}"),
            TextColumn("time left"),
            TimeRemainingColumn(),
            console=Console(stderr=True),
        )
        self.begin = time.monotonic()
        self.done = 0

    @contextmanager
    def shown(self) -> Iterator[None]:
        with self.bar:
            yield

    def started(self, store: Store) -> None:
        left = still_to_do(store)
        if left < store.plan.count:
            self.bar.console.print(f"{store.plan.count - left:,} patients were done by an earlier try.")
        self.begin = time.monotonic()
        self.task = self.bar.add_task("", total=left, rate="")

    def told(self, patients: int) -> None:
        self.done += patients
        rate = self.done / max(time.monotonic() - self.begin, 1e-9)
        self.bar.update(self.task, advance=patients, rate=f"{rate:.3g} patients/s")


def backtest(
    folder: Path,
    *,
    drug: str,
    site: Path | None,
    out: Path | None,
    workers: int,
    cluster: str,
    methods: Sequence[str] = (),
) -> tuple[int, str]:
    """Run or continue a back-test; exit status and what stdout is told. methods: of `CHOICES`; none: all."""
    check_drug(drug)
    local: Site = no_site() if site is None else load_site(site)
    local.target(load_profile(drug))  # refuses a site file of another drug before any patient is read
    found_folder = open_folder(folder)
    results = out if out is not None else folder / RESULTS
    chosen = tuple(m for name, m in CHOICES.items() if name in methods or not methods)
    plan = plan_of(found_folder, drug, local, local.sha256, chosen)
    progress = Progress()
    told: Told = progress.told
    with progress.shown():
        outcome = run(
            found_folder,
            results,
            plan=plan,
            site=local,
            workers=workers,
            cluster=cluster,
            told=told,
            started=progress.started,
        )
    if outcome.interrupted:
        kept = plan.count - still_to_do(outcome.store)
        print(
            f"Interrupted: {kept:,} of {plan.count:,} patients are kept. The same command goes on from there.",
            file=sys.stderr,
        )
        return 1, ""
    found, suggested = write_reports(outcome.store, found_folder, local)
    for part in outcome.lost:
        first, last = plan.span(part)
        print(
            f"Patients {first + 1:,} to {last:,} were not calculated: their worker ended again and again. The same "
            "command tries them once more.",
            file=sys.stderr,
        )
    print(f"Written: {results / 'report.html'}, report.json, left-out.csv", file=sys.stderr)
    return (1 if outcome.lost else 0), summary(outcome.store, found_folder, found, suggested)
