"""The run over a department: here, on this machine's processors, or on the department's own cluster.

Dask does the spreading; there is no pool of our own. Only this process reads the folder and writes results, so
a cluster needs no shared disk. At most a few parts are on their way at once, so memory does not grow with the
number of patients."""

from __future__ import annotations

import platform
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from importlib.util import find_spec
from itertools import islice
from pathlib import Path
from typing import Any

from pkcalc import __version__
from pkcalc.backtest.folder import Folder, Raw
from pkcalc.backtest.outlook import DRAWS, METHODS, Row, outlooks
from pkcalc.backtest.parts import Plan, Store, alone, open_store
from pkcalc.consult import RESULTS_DATE
from pkcalc.errors import CaseError, Problem, as_typed
from pkcalc.site import Site

#: Parts on their way per worker: one is calculated, one waits.
_AHEAD = 2

#: A part whose worker dies this often is given up, and said so.
_TRIES = 5

#: Told how many patients are done, of those still to do.
Told = Callable[[int], None]


@dataclass(frozen=True)
class Outcome:
    """What a run came to. continued: patients that an earlier try had done. lost: parts given up."""

    store: Store
    continued: int
    done: int
    interrupted: bool = False
    lost: tuple[int, ...] = ()

    @property
    def complete(self) -> bool:
        return not self.store.missing()


def plan_of(folder: Folder, drug: str, site: Site, site_hash: str = "", methods: tuple[str, ...] = METHODS) -> Plan:
    """The plan of a run: equal plans give equal results."""
    return Plan(folder.count, folder.fingerprint, drug, site_hash, DRAWS, __version__, RESULTS_DATE, methods)


def still_to_do(store: Store) -> int:
    """Patients in parts that are not there yet."""
    return sum(last - first for first, last in map(store.plan.span, store.missing()))


def run(
    folder: Folder,
    out: Path,
    *,
    plan: Plan,
    site: Site,
    workers: int = 0,
    cluster: str = "",
    told: Told = lambda _: None,
    started: Callable[[Store], None] = lambda _: None,
) -> Outcome:
    """Every part that is missing, then the outcome. Ctrl+C ends it politely: whole parts stay.

    workers: 0 for this process alone, else that many processes of a local Dask cluster. cluster: address of a
    Dask scheduler. The results are the same to the bit.
    """
    store = open_store(out, plan)
    with alone(out):
        before = plan.count - still_to_do(store)
        started(store)
        lost: list[int] = []
        interrupted = False
        try:
            if workers or cluster:
                with _client(workers, cluster) as client:
                    _spread(client, folder, store, site, told, lost)
            else:
                for part in store.missing():
                    rows: list[Row] = []
                    for raw in folder.patients(*plan.span(part)):
                        rows += outlooks(raw, plan.drug, site, plan.methods)
                        told(1)
                    store.write(part, rows)
        except KeyboardInterrupt:
            interrupted = True
        done = plan.count - before - still_to_do(store)
    return Outcome(store, before, done, interrupted, tuple(lost))


def one_part(raws: Sequence[Raw], drug: str, site: Site, methods: tuple[str, ...]) -> list[Row]:
    """The rows of one part; what a worker does."""
    return [row for raw in raws for row in outlooks(raw, drug, site, methods)]


def _spread(client: Any, folder: Folder, store: Store, site: Site, told: Told, lost: list[int]) -> None:
    plan = store.plan
    from distributed import as_completed

    waiting = iter(store.missing())

    def send(part: int) -> Any:
        raws = list(folder.patients(*plan.span(part)))
        future = client.submit(one_part, raws, plan.drug, site, plan.methods, key=f"pkcalc-part-{part}", pure=False)
        parts[future.key] = part
        return future

    parts: dict[str, int] = {}
    ahead = max(1, _AHEAD * len(client.scheduler_info(n_workers=-1)["workers"]))
    on_their_way = as_completed([send(p) for p in islice(waiting, ahead)], loop=client.loop)
    for future in on_their_way:
        part = parts.pop(future.key)
        if future.status == "finished":
            store.write(part, future.result())
            first, last = plan.span(part)
            told(last - first)
        else:
            lost.append(part)
        future.release()
        for following in islice(waiting, 1):
            on_their_way.add(send(following))


@contextmanager
def _client(workers: int, cluster: str) -> Iterator[Any]:
    """A Dask client: a local cluster of processes on this machine alone, or the scheduler at an address."""
    if find_spec("distributed") is None:
        raise CaseError(
            Problem(
                "--cluster" if cluster else "--workers",
                "Dask is not installed here",
                "one process (leave the option out), or an installation with the extra cluster",
                'Install pkcalc with its extra, "pkcalc[cluster]"',
            )
        )
    import dask
    from distributed import Client, LocalCluster

    # nothing of a patient may reach a disk on the way: workers keep to memory, in which few parts lie at once
    settings = {
        "distributed.worker.memory.target": False,
        "distributed.worker.memory.spill": False,
        "distributed.scheduler.allowed-failures": _TRIES,
        "distributed.diagnostics.nvml": False,
    }
    with dask.config.set(settings):
        if cluster:
            try:
                client = Client(cluster, timeout="10s", set_as_default=False)
            except (OSError, ValueError):
                raise CaseError(
                    Problem(
                        "--cluster",
                        f'no Dask scheduler answers at "{as_typed(cluster, 80)}"',
                        "an address such as tcp://host:8786",
                        "Check that it runs and can be reached",
                    )
                ) from None
            with client:
                _same_program(client)
                yield client
            return
        with (
            LocalCluster(
                n_workers=workers,
                threads_per_worker=1,
                processes=True,
                host="127.0.0.1",
                dashboard_address=None,
                silence_logs=50,
            ) as local,
            Client(local, set_as_default=False) as client,
        ):
            client.wait_for_workers(1, timeout=60)
            yield client


def versions() -> dict[str, str]:
    """What decides the bits of a result: this program, what it calculates with, and the machine's kind."""
    import numpy
    import scipy

    return {
        "pkcalc": f"{__version__} of {RESULTS_DATE}",
        "numpy": numpy.__version__,
        "scipy": scipy.__version__,
        "Python": platform.python_version(),
        "machine": platform.machine(),
    }


def _same_program(client: Any) -> None:
    """CaseError where a worker runs another program or other libraries than this process."""
    own = versions()
    try:
        found = client.run(versions)
    except Exception as error:
        raise CaseError(
            Problem(
                "--cluster",
                f"its workers cannot run pkcalc ({type(error).__name__})",
                "workers with the same installation",
                "Install pkcalc with the same lock there",
            )
        ) from None
    if not found:
        raise CaseError(Problem("--cluster", "it has no worker", "at least one worker", "Start its workers"))
    for other in found.values():
        differ = [f"{k} {other.get(k, 'none')}, here {v}" for k, v in own.items() if other.get(k) != v]
        if differ:
            raise CaseError(
                Problem(
                    "--cluster",
                    f"a worker differs from this machine ({'; '.join(differ)})",
                    "the same versions everywhere",
                    "Install pkcalc with the same lock there",
                )
            )
