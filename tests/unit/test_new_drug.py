"""Adding a drug is adding a file: the template, filled in with invented values, in a copy of the package."""

from __future__ import annotations

import filecmp
import json
import os
import shutil
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest

PACKAGE = Path(__file__).parents[2] / "pkcalc"
TEMPLATE = (PACKAGE / "drugs" / "_template.toml").read_text(encoding="utf-8")

#: What a person changes in the template, and adds to it: names, scope, a question, a stop and a level of another drug.
CHANGES = (
    ('id = "template"', 'id = "inventin"'),
    ('name = "template"', 'name = "inventin"'),
    ('names = ["template"]', 'names = ["inventin", "inventin besylate"]'),
    ('scope = "teaching only"', 'scope = "dosing with expert sign-off"'),
    ('authority = "none: not for patients"', 'authority = "the inventor on duty"'),
    ('questions = ["overdose", "recent_load"]', 'questions = ["overdose", "blue_tongue", "otherol", "recent_load"]'),
    ("aim = { value = 15,", "aim = { value = 14,"),
)
ADDED = """
[question.blue_tongue]
words = "Is the tongue blue?"
short = "blue tongue"
group = "first"
told = true

[question.otherol]
words = "Is otherol being taken?"
short = "otherol"
group = "reading"

[other_level.otherol]
words = "otherol"
gate = { value = [1, 50], unit = "mg/L", source = "own", where = "invented", status = "own synthesis", derivation = "Invented." }

[caution.blue-tongue]
stage = "case"
severity = "stop"
when = "answered"
question = "blue_tongue"
answer = "yes"
first = true
blocks = ["estimate", "projection", "regimens", "loading", "next level"]
text = "A blue tongue: stop inventin and call the inventor on duty."
source = "own"
lifted_by = "a pink tongue"
"""
CASE: dict[str, Any] = {
    "pkcalc_case": 1,
    "drug": "inventin",
    "now": "2026-05-04 20:00",
    "patient": {"age": "50 years", "sex": "female", "weight": "70 kg", "weight_basis": "measured"},
    "context": {"overdose": "no", "blue_tongue": "no", "otherol": "no", "recent_load": "no"},
    "doses": [{"form": "infusion", "rate": "60 mg/h", "from": "2026-05-04 08:00", "given_by": "nurse"}],
    "levels": [
        {"value": "11 mg/L", "kind": "total", "drawn": "2026-05-04 16:00", "other_levels": {"otherol": "12 mg/L"}},
        {"value": "13 mg/L", "kind": "total", "drawn": "2026-05-04 19:30"},
    ],
    "proposed": [{"form": "infusion", "rate": "50 mg/h"}],
}


@pytest.fixture(scope="module")
def copied(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("copied")
    shutil.copytree(PACKAGE, folder / "pkcalc", ignore=shutil.ignore_patterns("__pycache__"))
    text = TEMPLATE
    for old, new in CHANGES:
        assert text.count(old) == 1, old
        text = text.replace(old, new)
    (folder / "pkcalc" / "drugs" / "inventin.toml").write_text(text + ADDED, encoding="utf-8")
    return folder


def run(folder: Path, *words: str, status: int = 0) -> str:
    done = subprocess.run(
        [sys.executable, "-c", "from pkcalc.cli import main; main()", *words],
        cwd=folder,
        env={**os.environ, "PYTHONPATH": str(folder), "OPENBLAS_NUM_THREADS": "1"},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == status, done.stdout + done.stderr
    return done.stdout


def case_file(folder: Path, **changes: Any) -> str:
    path = folder / "case.json"
    path.write_text(json.dumps({**CASE, **changes}), encoding="utf-8")
    return str(path)


def test_nothing_but_the_file_was_added(copied: Path) -> None:
    left = filecmp.dircmp(PACKAGE / "drugs", copied / "pkcalc" / "drugs", ignore=["__pycache__"])
    assert (left.left_only, left.right_only, left.diff_files) == ([], ["inventin.toml"], [])


def test_the_new_drug_is_listed_and_printed_with_its_sources(copied: Path) -> None:
    assert "inventin         dosing with expert sign-off" in run(copied, "drugs")
    said = run(copied, "drugs", "inventin")
    assert "  blue_tongue: Is the tongue blue?" in said
    assert "vmax: 1 mg/kg/h  [own synthesis: own; invented]" in said


def test_a_consult_of_the_new_drug_from_end_to_end(copied: Path) -> None:
    case = case_file(copied)
    data = json.loads(run(copied, "note", case, "--format", "json"))
    assert data["outcome"] == "done"
    assert data["drug"] == "inventin"
    assert len(data["projection"]["paths"]) == 2
    assert all(row["agrees"] for row in data["second_way"])
    said = " ".join(run(copied, "note", case).split())
    for words in (
        "Consult note: inventin",
        "every dose needs the agreement of the inventor on duty before it is given",
        "Blue tongue no",
        "Rate that holds 14 mg/L without dialysis:",
        "mg/h of active drug",
        "Is otherol being taken? no",
    ):
        assert words in said, words
    assert "phenytoin" not in said.lower().replace("individualization of phenytoin dosage regimens", "")
    assert "seiz" not in said
    assert "<html" in run(copied, "note", case, "--format", "html")


def test_its_own_stop_takes_every_number_away(copied: Path) -> None:
    case = case_file(copied, context={**CASE["context"], "blue_tongue": "yes"})
    said = run(copied, "note", case, status=1)
    assert "STOP: A blue tongue: stop inventin and call the inventor on duty." in said
    assert "Rate that holds" not in said


def test_a_pair_of_the_new_drug(copied: Path) -> None:
    """50 and 60 mg/h at 10 and 15 mg/L: Km = 10/(5 - 4) = 10 mg/L, Vmax = 50 + 10 x 5 = 100 mg/h; the file has a
    parallel path, so the two levels are refused with the reason until it is taken out."""
    words = ["pair", "--drug", "inventin", "--form", "infusion", "--dose", "50 mg/h", "--level", "10 mg/L"]
    words += ["--dose", "60 mg/h", "--level", "15 mg/L", "--weight", "70 kg"]
    assert "leaves by a first-order path beside the saturable one" in " ".join(run(copied, *words, status=1).split())
    file = copied / "pkcalc" / "drugs" / "inventin.toml"
    whole = file.read_text(encoding="utf-8")
    file.write_text("\n".join(x for x in whole.splitlines() if not x.startswith("first_order")), encoding="utf-8")
    said = " ".join(run(copied, *words).split())
    file.write_text(whole, encoding="utf-8")
    assert "By two levels: Vmax 100 mg/h" in said or "Vmax 100 mg/h of active drug, Km 10 mg/L (closed form)" in said


def test_schema_and_import_follow_the_file(copied: Path) -> None:
    schema = json.loads(run(copied, "schema"))
    assert "inventin" in schema["properties"]["drug"]["enum"]
    own = next(x for x in schema["allOf"] if x["if"]["properties"]["drug"]["const"] == "inventin")["then"]["properties"]
    assert "blue_tongue" in own["context"]["propertyNames"]["enum"]
    assert own["levels"]["items"]["properties"]["other_levels"]["propertyNames"]["enum"] == ["otherol"]
    (copied / "doses.csv").write_text(
        "form,amount,unit,at,over\ninfusion,100,mg,2026-05-04 08:00,1 h\n", encoding="utf-8"
    )
    (copied / "levels.csv").write_text("value,unit,kind,drawn\n11,mg/L,total,2026-05-04 12:00\n", encoding="utf-8")
    case = json.loads(run(copied, "from-csv", "doses.csv", "levels.csv", "--drug", "inventin", "--weight", "70 kg"))
    assert case["drug"] == "inventin"
