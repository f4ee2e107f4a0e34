"""A whole consult with hours instead of days, by the command line, in every form of the note: what a toxicologist must
find in it, and what has no place in it."""

from __future__ import annotations

import io
import json
import re
from pathlib import Path

import jsonschema
import pytest
from click.testing import CliRunner
from pypdf import PdfReader

from pkcalc.case import dump_case
from pkcalc.cli import cli
from pkcalc.demos import demonstration
from pkcalc.note.schema import note_schema
from tests.unit.drug_cases import ethanol

IN_BOTH = (
    "every dose needs the agreement of a toxicologist or the poison centre before it is given",
    "Antidote treatment starts on suspicion, with the poison centre on the telephone, and never waits for this note.",
    "measure glucose with every level",
    "watch breathing and airway in a place that can intubate",
    "10 % v/v holds 78.9 mg in 1 mL, 10 % w/v holds 100 mg",
    "of ethanol 10 % v/v for infusion (78.9 mg of ethanol in 1 mL (10 % v/v))",
    "No rate is ordered by this note: it needs the agreement of a toxicologist or the poison centre.",
    "on it is more likely below the target than inside it",
    "A change of rate needs a level of its own.",
    "whatever was forecast",
    "mg/kg/h",
)
IN_ONE = {
    "ethanol-first-hours": (
        "Target 1,000 to 1,500 mg/L (100 to 150 mg/dL), aim 1,250 mg/L (125 mg/dL)",
        "Call at once below 1,000 mg/L (100 mg/dL) or at or above 3,000 mg/L (300 mg/dL)",
        "(1 h from now)",
        "The earlier of the two usual times, because the chance of a level outside the target in 2 h is",
        "R = volume rate x strength x salt factor x share reaching the body = 97 mL/h x 78.9 mg/mL x 1 x 1",
    ),
    "ethanol-dialysis": (
        "Target 1,000 to 1,500 mg/L (21.7 to 32.6 mmol/L)",
        "The rate must rise when it starts and fall when it stops; take a level within an hour of both.",
        "There is no steady state once dialysis has stopped: the level climbs for as long as it runs, in the end by",
        "Rate that holds 1,250 mg/L without dialysis:",
        "Rate that holds 1,250 mg/L while dialysis runs:",
        "A level within an hour after dialysis starts and after it stops.",
        "any change of dose, form, other drug, dialysis or kidney or liver function",
    ),
}
#: Words of drugs by the day, of binding, and of another disease.
NOT_HERE = re.compile(r"mg/day|L/day|normal binding|albumin|tube feed|seizure|epilepticus|antiseizure", re.I)


def written(name: str, form: str, folder: Path) -> str:
    """The note of a case file by the command line, its text in one line."""
    case = folder / f"{name}.json"
    case.write_text(dump_case(demonstration(name)), encoding="utf-8")
    out = folder / f"{name}.{form}"
    done = CliRunner().invoke(cli, ["note", str(case), "--format", form, "--out", str(out)])
    assert done.exit_code == 0, done.output
    if form == "pdf":
        pages = PdfReader(io.BytesIO(out.read_bytes())).pages
        return " ".join(" ".join(p.extract_text() or "" for p in pages).split())
    text = out.read_text(encoding="utf-8")
    if form == "html":
        text = re.sub(r"<style.*?</style>|<svg.*?</svg>|<[^>]+>", " ", text, flags=re.S)
        for code, sign in (("&#39;", "'"), ("&gt;", ">"), ("&lt;", "<"), ("&amp;", "&")):
            text = text.replace(code, sign)
    return " ".join(text.split())


@pytest.mark.parametrize("form", ["text", "html", "pdf"])
@pytest.mark.parametrize("name", list(IN_ONE))
def test_what_a_toxicologist_must_find(name: str, form: str, tmp_path: Path) -> None:
    said = written(name, form, tmp_path)
    for words in (*IN_BOTH, *IN_ONE[name]):
        assert words in said, words
    found = NOT_HERE.search(said)
    assert found is None, said[max(found.start() - 80, 0) : found.end() + 40]


@pytest.mark.parametrize("name", list(IN_ONE))
def test_the_same_as_data(name: str, tmp_path: Path) -> None:
    data = json.loads(written(name, "json", tmp_path))
    jsonschema.validate(data, note_schema())
    assert data["outcome"] == "done"
    assert {"expert-sign-off", "airway", "glucose", "strength"} <= {c["id"] for c in data["cautions"]}
    projection = data["projection"]
    assert all(p["active_mg_per_h"] > 0 and [m["hours"] for m in p["moments"]] for p in projection["paths"])
    product = projection["rates_for_aim"][0]["products"][0]
    assert (product["product"], product["basis"]) == ("infusion-10-vv", "v/v")
    assert product["mL_per_h"] * 78.9 == pytest.approx(
        projection["rates_for_aim"][0]["active_mg_per_h"]["median"], rel=1e-3
    )
    assert projection["next_level"]["in_h"] == 1
    assert not re.search("mg/day|L/day", json.dumps(data["workings"]))


def test_a_strength_by_mouth_counts_by_its_own_label() -> None:
    """250 mL of 20 % v/v hold 250 x 157.8 mg; of 40 % v/v twice as much."""
    at = "2026-06-02 08:00"
    for product, mg in (("oral-20-vv", 39_450.0), ("oral-40-vv", 78_900.0)):
        case = ethanol(doses=[{"form": "oral", "product": product, "amount": "250 mL", "at": at, "given_by": "nurse"}])
        single = case.courses[0].single
        assert single is not None
        assert single.labelled_mg == pytest.approx(mg)
