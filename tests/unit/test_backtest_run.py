"""The run of a back-test: no look ahead, parts, interruption, restart, the same bits here and on Dask."""

from __future__ import annotations

import math
import os
import signal
import subprocess
import sys
from dataclasses import asdict, replace
from pathlib import Path

import numpy as np
import pytest

from pkcalc.backtest import parts as parts_module
from pkcalc.backtest import run as running
from pkcalc.backtest.folder import Folder, open_folder
from pkcalc.backtest.outlook import (
    FORECAST,
    LEFT_OUT,
    METHODS,
    NO_FORECAST,
    ONE,
    PATIENT,
    PRIOR,
    SET_ASIDE,
    TWO,
    WHOLE,
    Row,
    outlooks,
)
from pkcalc.backtest.parts import Plan, open_store
from pkcalc.backtest.report import write_reports
from pkcalc.backtest.run import plan_of, run
from pkcalc.errors import CaseError
from pkcalc.site import no_site

SITE = no_site()
PATIENTS = "patient,weight,age,group_ward\n"
DOSES = "patient,form,amount,unit,every,from,until\n"
LEVELS = "patient,value,unit,kind,drawn\n"

#: Three levels on three doses, each two weeks on its dose.
ONE_DOSES = """p,sodium,250,mg,24 h,2026-01-01 21:00,2026-01-15 12:00
p,sodium,300,mg,24 h,2026-01-15 21:00,2026-01-29 12:00
p,sodium,320,mg,24 h,2026-01-29 21:00,2026-02-12 12:00
"""
ONE_LEVELS = """p,5,mg/L,total,2026-01-15 07:00
p,8,mg/L,total,2026-01-29 07:00
p,11,mg/L,total,2026-02-12 07:00
"""


def folder(path: Path, patients: str, doses: str, levels: str) -> Folder:
    path.mkdir(parents=True, exist_ok=True)
    (path / "patients.csv").write_text(PATIENTS + patients)
    (path / "doses.csv").write_text(DOSES + doses)
    (path / "levels.csv").write_text(LEVELS + levels)
    return open_folder(path)


def rows_of(path: Path, doses: str = ONE_DOSES, levels: str = ONE_LEVELS, weight: str = "70 kg") -> list[Row]:
    found = folder(path, f"p,{weight},40 years,east\n", doses, levels)
    return outlooks(next(found.patients(0, 1)), "phenytoin", SITE)


@pytest.fixture(scope="module")
def three(tmp_path_factory: pytest.TempPathFactory) -> list[Row]:
    return rows_of(tmp_path_factory.mktemp("one") / "d")


def department(path: Path, count: int) -> Folder:
    """Short records of two levels each, and one that cannot be read."""
    patients, doses, levels = "", "", ""
    for n in range(count):
        patients += f"k{n},{'7 t' if n == 1 else f'{60 + n} kg'},40 years,{'ew'[n % 2]}\n"
        doses += f"k{n},sodium,{250 + 10 * n},mg,24 h,2026-01-01 21:00,\n"
        levels += f"k{n},{4 + n},mg/L,total,2026-01-05 07:00\nk{n},{6 + n},mg/L,total,2026-01-09 07:00\n"
    return folder(path, patients, doses, levels)


def plan(found: Folder, part: int = 2) -> Plan:
    return replace(plan_of(found, "phenytoin", SITE), part=part)


@pytest.fixture(scope="module")
def small(tmp_path_factory: pytest.TempPathFactory) -> tuple[Folder, Path]:
    """A department of five and the results of an undisturbed run in this process."""
    base = tmp_path_factory.mktemp("small")
    found = department(base / "d", 5)
    outcome = run(found, base / "r", plan=plan(found), site=SITE)
    assert outcome.complete
    return found, base / "r"


def files(path: Path) -> dict[str, bytes]:
    return {p.name: p.read_bytes() for p in sorted((path / "parts").iterdir())}


def test_every_level_is_forecast_by_every_method_that_can(three: list[Row]) -> None:
    got = {(r.level, r.method) for r in three if r.kind == FORECAST}
    assert got >= {(1, PRIOR), (2, PRIOR), (2, ONE), (2, WHOLE), (3, PRIOR), (3, ONE), (3, WHOLE)}
    assert {(r.level, r.method) for r in three if r.kind in (FORECAST, NO_FORECAST)} == {
        (1, PRIOR),
        *((level, m) for level in (2, 3) for m in METHODS),
    }
    assert [r.reason for r in three if r.kind == NO_FORECAST and r.level == 2] == [
        "no two earlier levels on two different doses"
    ]
    for r in three:
        if r.kind == FORECAST:
            assert r.low_90_mg_per_L < r.low_50_mg_per_L < r.forecast_mg_per_L < r.high_50_mg_per_L  # type: ignore[operator]
            assert r.high_50_mg_per_L < r.high_90_mg_per_L  # type: ignore[operator]
            assert 0 <= (r.rank or 0.0) <= 1


def test_with_one_earlier_level_the_whole_record_is_the_one_level(three: list[Row]) -> None:
    one, whole = (next(r for r in three if (r.level, r.method) == (2, m)) for m in (ONE, WHOLE))
    assert replace(one, method=WHOLE) == whole


def test_the_pair_gives_the_steady_level_of_the_formula(three: list[Row], tmp_path: Path) -> None:
    """250 and 300 mg/day of the sodium salt led to 5 and 8 mg/L: Km, Vmax and the level on 320 mg/day by hand."""
    late = ONE_DOSES.replace("2026-01-01", "2025-11-10")  # a long time on the first dose: settled
    found = rows_of(
        tmp_path / "d",
        late.replace("2026-01-15 21:00,2026-01-29", "2026-01-15 21:00,2026-03-15").replace(
            "2026-01-29 21:00,2026-02-12", "2026-03-15 21:00,2026-03-29"
        ),
        ONE_LEVELS.replace("2026-01-29", "2026-03-15").replace("2026-02-12", "2026-03-29"),
    )
    pair = next(r for r in found if (r.level, r.method) == (3, TWO))
    assert pair.kind == FORECAST, pair.reason
    r1, r2, r3 = (0.92 * x for x in (250, 300, 320))
    km = (r2 - r1) / (r1 / 5 - r2 / 8)
    vmax = r1 + km * r1 / 5
    assert pair.forecast_mg_per_L == pytest.approx(km * r3 / (vmax - r3), rel=1e-9)


def test_a_patient_with_one_level_is_not_placed_in_the_population(three: list[Row], tmp_path: Path) -> None:
    """One level cannot tell Vmax from Km; placed all the same, such patients made the hint see a shift that was none."""
    one = rows_of(tmp_path / "d", levels=ONE_LEVELS.splitlines()[0] + "\n")
    assert [r.kind for r in one] == [FORECAST]
    assert [r.earlier for r in three if r.kind == PATIENT] == [3]


def test_the_place_in_the_population_by_weighing_is_that_of_a_new_estimate(
    three: list[Row], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The draws that forecast the last level, weighed by what came, against an estimate from all levels."""
    monkeypatch.setattr("pkcalc.backtest.outlook._EFFECTIVE_DRAWS", math.inf)
    anew = rows_of(tmp_path / "d")
    a, b = (next(r for r in rows if r.kind == PATIENT) for rows in (three, anew))
    assert a != b
    for mean, variance in (("log_vmax", "var_vmax"), ("log_km", "var_km")):
        spread = math.sqrt(getattr(b, variance))
        assert getattr(a, mean) == pytest.approx(getattr(b, mean), abs=0.15 * spread)
        assert math.sqrt(getattr(a, variance)) == pytest.approx(spread, rel=0.15)


def test_nothing_that_came_later_moves_a_forecast(three: list[Row], tmp_path: Path) -> None:
    """Another last level and another last dose leave every earlier forecast as it is, to the bit."""
    other = rows_of(
        tmp_path / "d",
        ONE_DOSES.replace("p,sodium,320", "p,sodium,100"),
        ONE_LEVELS.replace("p,11", "p,35"),
    )

    def early(rows: list[Row]) -> list[Row]:
        return [r for r in rows if r.level in (1, 2)]

    assert early(other) == early(three)
    late = [next(r for r in rows if (r.level, r.method) == (3, WHOLE)) for rows in (three, other)]
    assert late[1].forecast_mg_per_L < late[0].forecast_mg_per_L  # type: ignore[operator]


def test_the_level_that_came_is_no_part_of_its_own_forecast(three: list[Row], tmp_path: Path) -> None:
    other = rows_of(tmp_path / "d", levels=ONE_LEVELS.replace("p,11", "p,35"))
    for a, b in zip(three, other, strict=True):
        if a.level == 3 and a.kind == FORECAST:
            assert a.forecast_mg_per_L == b.forecast_mg_per_L
            assert (a.low_90_mg_per_L, a.high_90_mg_per_L) == (b.low_90_mg_per_L, b.high_90_mg_per_L)
            assert (a.observed_mg_per_L, b.observed_mg_per_L) == (11, 35)


def test_levels_that_are_not_held_against_a_forecast_say_why(tmp_path: Path) -> None:
    levels = (
        "p,3,mg/L,total,2025-12-31 07:00\np,<2.5,mg/L,total,2026-01-03 07:00\np,5,mg/L,total,2026-01-10 07:00\n"
        "p,5,mg/L,total,2026-01-10 07:00\n"
    )
    found = rows_of(tmp_path / "d", "p,sodium,250,mg,24 h,2026-01-01 21:00,\n", levels)
    assert [(r.level, r.reason, r.detail) for r in found if r.kind == LEFT_OUT] == [
        (1, "set aside by the rules for levels", "it was drawn before the record of doses begins"),
        (2, "reported only as below or above a limit; used to learn from", ""),
        (4, "set aside by the rules for levels", "the same as level 3, entered twice"),
    ]


def test_a_patient_that_cannot_be_used_is_set_aside_with_the_reason(tmp_path: Path) -> None:
    light = rows_of(tmp_path / "a", weight="")
    assert [(r.kind, r.reason) for r in light] == [(SET_ASIDE, "no population for this patient")]
    absurd = rows_of(tmp_path / "b", weight="7 t")
    assert [(r.kind, r.reason) for r in absurd] == [(SET_ASIDE, "the record cannot be read")]


def test_a_fault_of_the_program_sets_one_patient_aside(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object, **__: object) -> None:
        raise ZeroDivisionError("with a value of the patient in it: 12345")

    monkeypatch.setattr("pkcalc.backtest.outlook.given_record", broken)
    found = rows_of(tmp_path / "d")
    assert [(r.kind, r.reason, r.detail) for r in found] == [
        (SET_ASIDE, "the calculation stopped", "ZeroDivisionError")
    ]


def test_one_poisoned_record_changes_nothing_for_the_others(small: tuple[Folder, Path]) -> None:
    found, results = small
    rows = list(open_store(results, plan(found)).rows())
    assert {r.patient for r in rows if r.kind == SET_ASIDE} == {"k1"}
    assert {r.patient for r in rows if r.kind == FORECAST} == {"k0", "k2", "k3", "k4"}


def test_parts_hold_every_bit_in_either_form(
    small: tuple[Folder, Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    found, results = small
    store = open_store(results, plan(found))
    monkeypatch.setattr(parts_module, "find_spec", lambda _: None)
    lines = open_store(tmp_path / "r", plan(found))
    for part in range(3):
        lines.write(part, store.read(part))
    assert sorted(p.suffix for p in (tmp_path / "r" / "parts").iterdir()) == [".jsonl"] * 3
    assert list(lines.rows()) == list(store.rows())
    widest = replace(next(store.rows()), high_90_mg_per_L=float("inf"))
    lines.write(0, [widest])
    assert lines.read(0) == [widest]


def test_a_run_goes_on_from_whole_parts_only(small: tuple[Folder, Path], tmp_path: Path) -> None:
    """One part there, one half written when the run was killed: the rest is done and all bits are the same."""
    found, results = small
    store = open_store(tmp_path / "r", plan(found))
    store.name(1, "parquet").write_bytes((results / "parts" / "part-000001.parquet").read_bytes())
    store.name(0, "parquet.half").write_bytes(b"PAR1 half")
    done: list[int] = []
    outcome = run(found, tmp_path / "r", plan=plan(found), site=SITE, told=done.append)
    assert (outcome.continued, outcome.done, sum(done)) == (2, 3, 3)
    assert {k: v for k, v in files(tmp_path / "r").items() if not k.endswith("half")} == files(results)


def test_ctrl_c_keeps_whole_parts(small: tuple[Folder, Path], tmp_path: Path) -> None:
    found, results = small

    def stop_at_third(_: int, seen: list[int] = []) -> None:  # noqa: B006
        seen.append(1)
        if len(seen) == 3:
            raise KeyboardInterrupt

    outcome = run(found, tmp_path / "r", plan=plan(found), site=SITE, told=stop_at_third)
    assert outcome.interrupted
    assert not outcome.complete
    assert list(files(tmp_path / "r")) == ["part-000000.parquet"]
    run(found, tmp_path / "r", plan=plan(found), site=SITE)
    assert files(tmp_path / "r") == files(results)


def test_equal_runs_give_equal_reports(small: tuple[Folder, Path], tmp_path: Path) -> None:
    found, results = small
    texts = []
    for _ in range(2):
        write_reports(open_store(results, plan(found)), found, SITE)
        texts.append([(results / n).read_bytes() for n in ("report.json", "report.html", "left-out.csv")])
    assert texts[0] == texts[1]
    page = texts[0][1].decode()
    assert "<script" not in page
    assert "http" not in page.replace("http-equiv", "")
    assert (results / "left-out.csv").read_text().splitlines()[1].startswith("k1,,set aside,the record cannot be read,")


def test_without_dask_and_without_a_scheduler_the_refusal_says_what_helps(
    small: tuple[Folder, Path], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    found, _ = small
    with pytest.raises(CaseError) as refusal:
        run(found, tmp_path / "a", plan=plan(found), site=SITE, cluster="nonsense://x")
    assert [p.text for p in refusal.value.problems] == [
        '--cluster: no Dask scheduler answers at "nonsense://x". Allowed: an address such as tcp://host:8786. Check '
        "that it runs and can be reached."
    ]
    monkeypatch.setattr(running, "find_spec", lambda _: None)
    with pytest.raises(CaseError) as refusal:
        run(found, tmp_path / "b", plan=plan(found), site=SITE, workers=2)
    assert [p.text for p in refusal.value.problems] == [
        "--workers: Dask is not installed here. Allowed: one process (leave the option out), or an installation with "
        'the extra cluster. Install pkcalc with its extra, "pkcalc[cluster]".'
    ]


def test_a_cluster_of_another_program_is_refused() -> None:
    class Client:
        def __init__(self, found: dict[str, dict[str, str]]) -> None:
            self.found = found

        def run(self, _: object) -> dict[str, dict[str, str]]:
            return self.found

    own = running.versions()
    running._same_program(Client({"a": own}))
    with pytest.raises(CaseError) as refusal:
        running._same_program(Client({"a": own, "b": {**own, "numpy": "1.0"}}))
    assert [p.text for p in refusal.value.problems] == [
        f"--cluster: a worker differs from this machine (numpy 1.0, here {np.__version__}). Allowed: the same versions "
        "everywhere. Install pkcalc with the same lock there."
    ]
    with pytest.raises(CaseError) as refusal:
        running._same_program(Client({}))
    assert [p.text for p in refusal.value.problems] == [
        "--cluster: it has no worker. Allowed: at least one worker. Start its workers."
    ]


@pytest.mark.slow
@pytest.mark.filterwarnings("ignore")
def test_a_cluster_with_a_worker_killed_gives_the_same_bits(small: tuple[Folder, Path], tmp_path: Path) -> None:
    """Two workers; the first is killed as soon as one part is there. Nothing is lost, nothing doubled."""
    from distributed import Client, LocalCluster

    found, results = small
    with (
        LocalCluster(
            n_workers=2, threads_per_worker=1, host="127.0.0.1", dashboard_address=None, silence_logs=50
        ) as cluster,
        Client(cluster, set_as_default=False) as client,
    ):
        pids = list(client.run(os.getpid).values())
        assert len(pids) == 2
        killed: list[int] = []

        def kill(_: int) -> None:
            if not killed:
                os.kill(pids[0], signal.SIGKILL)
                killed.append(pids[0])

        outcome = run(
            found, tmp_path / "r", plan=plan(found, 1), site=SITE, cluster=cluster.scheduler_address, told=kill
        )
        # it is dead and gone: another process has taken its place
        client.wait_for_workers(2, timeout=60)
        assert pids[0] not in client.run(os.getpid).values()
    assert killed
    assert outcome.complete
    assert not outcome.lost
    got = list(open_store(tmp_path / "r", plan(found, 1)).rows())
    assert [asdict(r) for r in got] == [asdict(r) for r in open_store(results, plan(found)).rows()]


@pytest.mark.slow
@pytest.mark.filterwarnings("ignore")
def test_two_local_workers_give_the_same_files(small: tuple[Folder, Path], tmp_path: Path) -> None:
    found, results = small
    assert run(found, tmp_path / "r", plan=plan(found), site=SITE, workers=2).complete
    assert files(tmp_path / "r") == files(results)


@pytest.mark.slow
def test_a_run_killed_in_the_middle_goes_on(small: tuple[Folder, Path], tmp_path: Path) -> None:
    """kill -9 of the program within its second part; the second try gives the bits of an undisturbed run."""
    found, results = small
    code = (
        "import os, signal, sys\nfrom pathlib import Path\nfrom dataclasses import replace\n"
        "from pkcalc.backtest.folder import open_folder\nfrom pkcalc.backtest.run import plan_of, run\n"
        "from pkcalc.site import no_site\nf = open_folder(sys.argv[1])\n"
        "p = replace(plan_of(f, 'phenytoin', no_site()), part=2)\n"
        "seen = []\n"
        "def told(_):\n    seen.append(1)\n    if len(seen) == 3:\n        os.kill(os.getpid(), signal.SIGKILL)\n"
        "run(f, Path(sys.argv[2]), plan=p, site=no_site(), told=told)\n"
    )
    child = subprocess.run([sys.executable, "-c", code, str(found.path), str(tmp_path / "r")])
    assert child.returncode == -signal.SIGKILL
    assert list(files(tmp_path / "r")) == ["part-000000.parquet"]
    outcome = run(found, tmp_path / "r", plan=plan(found), site=SITE)
    assert (outcome.continued, outcome.done) == (2, 3)
    assert {k: v for k, v in files(tmp_path / "r").items() if not k.endswith("half")} == files(results)
