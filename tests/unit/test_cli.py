"""The command line as a stranger meets it."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

from pkcalc.demos import demonstrations
from tests.unit.cases import PLAIN

PAIR = [
    "pair",
    "--form",
    "sodium",
    "--dose",
    "300 mg/day",
    "--level",
    "8 mg/L",
    "--dose",
    "350 mg/day",
    "--level",
    "20 mg/L",
]


def run(*args: str, **more: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-c", "from pkcalc.cli import main; main()", *args],
        capture_output=True,
        text=True,
        check=False,
        env={**os.environ, **more},
    )


def test_a_pair_gives_vmax_and_km_with_status_0() -> None:
    done = run(*PAIR, "--weight", "70 kg", "--aim", "15 mg/L", "--propose", "330 mg/day")
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("Drug: phenytoin. Levels read as total.")
    assert "Vmax 362.3 mg/day of active drug, Km 2.5 mg/L (closed form)." in done.stdout
    assert "Css = Km x R / (Vmax - R)" in done.stdout
    assert done.stderr == ""


def test_without_a_weight_it_says_what_is_missing() -> None:
    done = run(*PAIR)
    assert "No weight is given: Vmax per kg is not checked, and no times" in " ".join(done.stdout.split())


def test_an_impossible_pair_is_a_stop_with_status_1_and_no_number() -> None:
    done = run(
        "pair",
        "--form",
        "sodium",
        "--dose",
        "300 mg/day",
        "--level",
        "10 mg/L",
        "--dose",
        "400 mg/day",
        "--level",
        "12 mg/L",
        "--format",
        "json",
    )
    assert done.returncode == 1
    data = json.loads(done.stdout)
    assert data["outcome"] == "stop"
    assert data["estimates"] == {}
    assert data["table"] == []
    assert "more than in proportion" in data["refusals"]["two levels"]


@pytest.mark.parametrize(
    ("args", "where"),
    [
        (["pair", "--form", "sodium", "--dose", "300", "--level", "8 mg/L"], "Dose 1"),
        (["pair", "--form", "salty", "--dose", "300 mg/day", "--level", "8 mg/L"], "Dose line 1, form"),
        (["pair", "--form", "sodium", "--dose", "300 mg/day", "--level", "8 MG/L"], "Level 1"),
        (["pair", "--form", "sodium", "--dose", "300 mg/day"], "Command line"),
        (["demo", "no-such-case"], "Demonstration"),
        (["drugs", "no-such-drug"], "Drug"),
        (["note", "no-such-file.json"], "Command line"),
    ],
)
def test_input_that_cannot_be_read_is_status_2_and_one_json_document(args: list[str], where: str) -> None:
    done = run(*args, "--format", "json")
    assert done.returncode == 2, done.stdout + done.stderr
    data = json.loads(done.stdout)
    assert data["outcome"] == "input error"
    assert data["problems"][0]["where"] == where
    text = run(*args)
    assert text.returncode == 2
    assert text.stdout == ""
    assert text.stderr != ""
    assert "Traceback" not in text.stderr


def test_a_case_file_gives_the_note(tmp_path: Path) -> None:
    file = tmp_path / "case.json"
    file.write_text(
        json.dumps({**PLAIN, "proposed": [{"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}]})
    )
    text = run("note", str(file))
    assert text.returncode == 0, text.stderr
    assert "Consult note: phenytoin" in text.stdout
    assert "licensed pharmacists" in text.stdout
    assert "Independently checked by:" in text.stdout
    out = tmp_path / "note.json"
    done = run("note", str(file), "--format", "json", "--out", str(out))
    assert done.returncode == 0
    assert done.stdout == ""
    assert json.loads(out.read_text())["outcome"] == "done"


QUICK = ("contradictory-pair", "tube-feed", "clean-pair")


def test_every_demonstration_is_marked() -> None:
    """All in the file and in the list; three of them, one of each kind of outcome, as printed (the rest: slow)."""
    listed = run("demo")
    assert listed.returncode == 0
    assert len(demonstrations()) >= 8
    for entry in demonstrations():
        assert entry.name in listed.stdout
        assert json.loads(entry.text)["demonstration"]["name"] == entry.name
    for name in QUICK:
        printed_with_its_mark(name)


@pytest.mark.slow
@pytest.mark.parametrize("name", [d.name for d in demonstrations() if d.name not in QUICK])
def test_every_other_demonstration_is_printed_with_its_mark(name: str) -> None:
    printed_with_its_mark(name)


def printed_with_its_mark(name: str) -> None:
    done = run("demo", name)
    assert done.returncode in (0, 1), done.stderr
    assert done.stdout.count("DEMONSTRATION - invented, not a patient, not for clinical use") == 3
    data = json.loads(run("demo", name, "--format", "json").stdout)
    assert data["demonstration"].startswith("DEMONSTRATION")


def test_drugs_lists_and_prints_sources() -> None:
    assert "phenytoin" in run("drugs").stdout
    done = run("drugs", "phenytoin")
    assert done.returncode == 0
    assert "Grasela" in done.stdout
    assert "memory" in done.stdout


def test_schema_is_json() -> None:
    assert json.loads(run("schema").stdout)["title"] == "pkcalc case file"


def test_a_fault_shows_no_number_and_no_traceback(tmp_path: Path) -> None:
    code = (
        "import sys, pkcalc.consult as c\n"
        "def broken(*a, **k): raise RuntimeError('secret 12.34 mg/L')\n"
        "c.observe = broken\n"
        "from pkcalc.cli import main\n"
        "sys.argv = ['pkcalc', 'demo', 'clean-pair']\n"
        "main()\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert done.stdout == ""
    assert done.stderr == "The calculation stopped (RuntimeError). No number was given. Please report this fault.\n"


def test_every_command_stands_in_the_readme() -> None:
    from pkcalc.cli import cli

    readme = (Path(__file__).parents[2] / "README.md").read_text(encoding="utf-8")
    for name in cli.commands:
        assert f"pkcalc {name}" in readme, name
