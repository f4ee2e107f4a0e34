"""Follow-up: forecasts kept with a case, and what came beside them."""

from __future__ import annotations

import json
from functools import cache
from pathlib import Path
from typing import Any

import jsonschema
import pytest

from pkcalc.case import Case, CaseFile, dump_case_file, read_case_text
from pkcalc.consult import Consult, run_consult
from pkcalc.demos import demonstration
from pkcalc.errors import CaseError
from pkcalc.note.data import note_data
from pkcalc.note.document import compose
from pkcalc.note.followup import follow_up, with_forecasts
from pkcalc.note.front import verdict
from pkcalc.note.html import render_html
from pkcalc.note.schema import note_schema
from pkcalc.note.text import render
from tests.unit.cases import PLAIN, plain

PROPOSED = [{"form": "extended-capsule", "amount": "330 mg", "every": "24 h"}]


@cache
def first() -> Consult:
    return run_consult(plain(proposed=PROPOSED))


def later(file: CaseFile, **level: Any) -> Case:
    """The case reopened some days later, with the new regimen in the record and one more level."""
    data = json.loads(dump_case_file(file))
    data["doses"][-1]["until"] = "2026-12-01 12:00"
    data["doses"].append({**PROPOSED[0], "from": "2026-12-01 21:00", "given_by": "nurse"})
    data["levels"].append({"value": "14 mg/L", "kind": "total", "drawn": "2026-12-09 07:00", **level})
    return read_case_text(json.dumps({**data, "now": "2026-12-12 09:00", "proposed": []}))


def test_the_forecasts_kept_are_those_of_the_note() -> None:
    consult = first()
    file = with_forecasts(consult)
    assert read_case_text(dump_case_file(file)).file == file
    assert consult.plan is not None
    assert consult.plan.next_level is not None
    draws = consult.plan.next_level.draws
    assert len(file.forecast_then) == len(draws) > 5
    proposed = next(i for i, d in enumerate(draws) if d is consult.plan.next_level.chosen)
    kept = file.forecast_then[proposed]
    assert kept.regimen == consult.proposed[0].words
    text = render(compose(consult))
    number = kept.high.removesuffix(" mg/L")
    assert f"{kept.median.removesuffix(' mg/L')} ({kept.low.removesuffix(' mg/L')} to {number})" in text
    # the line to call above is the upper end of what is kept
    assert f"above {kept.high} as reported" in text


def test_keeping_again_replaces_what_was_kept() -> None:
    once = with_forecasts(first())
    again = with_forecasts(run_consult(read_case_text(dump_case_file(once))))
    assert len(again.forecast_then) == len(once.forecast_then)


@pytest.mark.parametrize(
    ("level", "came", "word"),
    [
        ({}, "14", "inside"),
        ({"value": "45 mg/L"}, "45", "above"),
        ({"value": "2.5 mg/L"}, "2.5", "below"),
        ({"value": ">12 mg/L"}, "above 12", "cannot be told"),
        ({"value": "<2 mg/L"}, "below 2", "below"),
        ({"value": ">50 mg/L"}, "above 50", "above"),
        ({"value": "<14 mg/L"}, "below 14", "cannot be told"),
    ],
)
def test_what_came_is_laid_beside_what_was_forecast(level: dict[str, Any], came: str, word: str) -> None:
    (row,) = follow_up(run_consult(later(with_forecasts(first()), **level)))
    assert (row.came_words, row.verdict) == (came, word)
    # the draw nearest in time: the evening before
    assert str(row.then.drawn) == "2026-12-08 21:00:00"


def test_every_form_of_the_note_tells_it() -> None:
    consult = run_consult(later(with_forecasts(first())))
    (row,) = follow_up(consult)
    band = f"{row.then.median_mg_per_L:g} ({row.then.low_mg_per_L:g} to {row.then.high_mg_per_L:g})"
    sentence = (
        f"An earlier note forecast {band} mg/L total for it on 330 mg extended capsules (phenytoin sodium) daily: it "
        "lies inside that interval."
    )
    assert sentence in verdict(consult)
    document = compose(consult)
    section = next(s for s in document.sections if s.title == "What was forecast then, and what came")
    assert section.lines == (
        "Forecast for 330 mg extended capsules (phenytoin sodium) daily. It tells nothing where something else was given.",
        "Levels inside their 90 % interval: 1 of 1.",
    )
    assert section.table is not None
    assert section.table.rows == (("Level 3", "9 Dec 2026 07:00", "8 Dec 2026 21:00", "total", band, "14", "inside"),)
    assert sentence in " ".join(render(document).split())
    assert sentence in " ".join(render_html(consult).split())
    data = note_data(consult)
    jsonschema.validate(data, note_schema())
    assert [(x["level"], x["came_mg_per_L"], x["interval"]) for x in data["follow_up"]] == [(3, 14.0, "inside")]


def test_a_level_at_another_time_has_no_forecast() -> None:
    consult = run_consult(later(with_forecasts(first()), drawn="2026-11-20 07:00"))
    assert follow_up(consult) == ()
    section = next(s for s in compose(consult).sections if s.title == "What was forecast then, and what came")
    assert section.table is None
    assert section.lines[1] == "No level of this case was drawn near a time for which one was forecast."


def test_a_drug_told_by_the_hour_keeps_every_path() -> None:
    consult = run_consult(demonstration("ethanol-first-hours"))
    file = with_forecasts(consult)
    assert consult.projection is not None
    assert len({x.regimen for x in file.forecast_then}) == len(consult.projection.paths)
    assert read_case_text(dump_case_file(file)).file == file


def test_a_note_without_a_forecast_keeps_none() -> None:
    with pytest.raises(CaseError) as error:
        with_forecasts(run_consult(plain(context={"seizing_now": "yes"})))
    assert str(error.value) == (
        "Follow-up: this note forecasts no level with a time. Allowed: a note with a next level. Look at its stops; "
        "without clock times or a weight nothing can be forecast for a time."
    )


def test_the_command_keeps_the_forecasts_in_a_new_file_only(tmp_path: Path) -> None:
    from tests.unit.test_cli import run

    case, new = tmp_path / "a.json", tmp_path / "new.json"
    case.write_text(json.dumps({**PLAIN, "proposed": PROPOSED}))
    done = run("note", str(case), "--keep", str(new))
    assert done.returncode == 0, done.stderr
    assert done.stderr == f"Written: {new}\n"
    assert read_case_text(new.read_text()).file == with_forecasts(first())
    again = run("note", str(case), "--keep", str(new))
    assert (again.returncode, again.stdout) == (2, "")
    assert again.stderr == (
        "The input must be mended first:\n- --keep: new.json exists already. Allowed: a file that does not exist yet. "
        "Give another name.\n"
    )
