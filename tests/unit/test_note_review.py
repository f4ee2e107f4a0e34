"""What a strict pharmacist found wanting in the note, one test for each: the marks, the first page, the words."""

from __future__ import annotations

import copy
import json
from functools import cache
from typing import Any

import pytest

from pkcalc.case import read_case_text
from pkcalc.cautions import in_order
from pkcalc.consult import Consult, run_consult
from pkcalc.errors import Caution
from pkcalc.note.annex import DANGER_HEADS, annex, danger_row
from pkcalc.note.document import Document, compose
from pkcalc.note.front import PASTE_LINES, page_one, paste_block, verdict
from pkcalc.note.html import render_html
from pkcalc.note.layout import caution_text, document_data, first_and_last, with_first_cautions
from pkcalc.note.text import render
from pkcalc.note.words import NOT_OFFERED, NOW
from pkcalc.units import percent_beside

NO = dict.fromkeys(
    [
        "seizing_now",
        "overdose",
        "seizures_since_change",
        "toxic_signs",
        "recent_load",
        "renal_failure",
        "renal_reduced",
        "hepatic_failure",
        "valproate",
        "interacting_change",
        "pregnancy",
        "tube_feed",
        "adherence_doubtful",
    ],
    "no",
)
TOXIC: dict[str, Any] = {
    "pkcalc_case": 1,
    "drug": "phenytoin",
    "now": "2026-05-03 09:00",
    "patient": {"age": "71 years", "sex": "female", "weight": "55 kg", "weight_basis": "measured"},
    "albumin": {"value": "40 g/L", "taken": "2026-05-03 06:00"},
    "context": {**NO, "toxic_signs": "yes"},
    "doses": [
        {
            "form": "extended-capsule",
            "daily": [{"time": "21:00", "amount": "400 mg"}],
            "from": "2026-03-15 21:00",
            "given_by": "carer",
        },
    ],
    "levels": [{"value": "38 mg/L", "kind": "total", "drawn": "2026-05-03 06:00"}],
    "aim": "15 mg/L",
    "plan": {"shelf": "united-states"},
}
ONE_DOSE = {"form": "extended-capsule", "daily": [{"time": "21:00", "amount": "400 mg"}]}


def run(**changes: Any) -> Consult:
    data = copy.deepcopy(TOXIC)
    for key, value in changes.items():
        data[key] = {**data[key], **value} if key == "context" else value
    return run_consult(read_case_text(json.dumps(data)))


def course(amount: str, given_by: str = "nurse") -> list[dict[str, Any]]:
    return [{**TOXIC["doses"][0], "daily": [{"time": "21:00", "amount": amount}], "given_by": given_by}]


def level(value: str, kind: str = "total") -> dict[str, str]:
    return {"value": value, "kind": kind, "drawn": "2026-05-03 06:00"}


def parts(consult: Consult) -> dict[str, str]:
    return {s.title: "\n".join(s.lines) for s in page_one(consult)}


@cache
def toxic() -> Consult:
    return run()


@cache
def toxic_note() -> Document:
    return compose(toxic())


@cache
def chosen_toxic() -> Consult:
    return run(chosen={"regimen": ONE_DOSE, "words": "Continue, level ok", "next_draw": "2026-05-20 20:00"})


@cache
def stopped_proposal() -> Consult:
    """A large step from a low level whose doses nobody vouches for."""
    return run(
        patient={"age": "28 years", "sex": "male", "weight": "75 kg", "weight_basis": "measured"},
        context={"toxic_signs": "no", "adherence_doubtful": "yes"},
        doses=course("300 mg", "self"),
        levels=[level("5 mg/L")],
        proposed=[ONE_DOSE],
    )


@cache
def loaded(heart: str) -> Consult:
    return run(
        context={"toxic_signs": "no", "heart_block": heart},
        doses=course("300 mg"),
        levels=[level("4 mg/L")],
        plan={"shelf": "united-states", "load": {"form": "injection", "aim": "18 mg/L", "at": "2026-05-03 11:00"}},
    )


def test_a_level_that_is_too_high_leads_page_one() -> None:
    first = page_one(toxic())[0]
    assert first.title == NOW
    assert first.lines[0] == (
        "TOO HIGH: Level 1 (38 mg/L total, drawn 3 May 2026 06:00) is 42.2 mg/L at normal binding (critical from 30 mg/L); "
        "signs of toxicity are reported. Do not go on with 400 mg extended capsules (phenytoin sodium) daily at 21:00 "
        "unchanged: hold the next dose, or reduce; the risk of seizures comes first."
    )
    assert "can bring on seizures" in first.lines[1]
    assert first.lines[2].startswith(
        "If held: give again when the level is down to 20 mg/L at normal binding (total 18 mg/L as reported), about "
    )
    assert any(x.startswith("Levels daily") for x in first.lines)


def test_it_stands_before_the_stops_in_every_form() -> None:
    document = toxic_note()
    text = render(document)
    assert text.index("TOO HIGH") < text.index("STOP:") < text.index("Question\n")
    html = render_html(toxic())
    assert html.index("TOO HIGH") < html.index("<strong>STOP:")
    data = document_data(document)
    assert [s["title"] for s in data["now"]] == [NOW]
    assert NOW not in [s["title"] for s in data["front"]]


@pytest.mark.parametrize("consult", [toxic, chosen_toxic, stopped_proposal])
def test_a_stopped_regimen_is_neither_continued_nor_dispensed(consult: Any) -> None:
    found = consult()
    regimen = parts(found)["Chosen regimen"]
    own = [x for x in regimen.splitlines() if "In the pharmacist's words" not in x]
    assert not any("Continue" in x or "Dispense" in x for x in own)
    assert any(NOT_OFFERED in x and "= 368 mg/day as active drug" in x for x in own)
    pasted = " ".join(paste_block(found))
    assert "Continue" not in pasted
    assert "ispense" not in pasted
    assert f"{NOT_OFFERED}: 400 mg extended capsules" in pasted


def test_the_pharmacists_words_on_a_stopped_regimen_carry_the_mark() -> None:
    text = parts(chosen_toxic())["Chosen regimen"]
    assert f"In the pharmacist's words (the regimen is {NOT_OFFERED} by this note): Continue, level ok." in text
    assert text.startswith(f"Chosen by the pharmacist, {NOT_OFFERED}: ")


def test_a_toxic_level_has_daily_levels_and_no_calm_draw_plan() -> None:
    for consult in (toxic(), chosen_toxic()):
        text = parts(consult)["Next level"]
        assert text.startswith("Levels daily")
        assert "faster than forecast" not in text
    pasted = " ".join(paste_block(chosen_toxic()))
    assert "Next level: Levels daily" in pasted
    assert "Next level planned by the pharmacist: 20 May 2026 20:00." in pasted


def test_a_stopped_proposal_has_no_draw_plan_of_its_own() -> None:
    lines = parts(stopped_proposal())["Next level"].splitlines()
    assert lines[0] == (
        f"No draw is planned on 400 mg extended capsules (phenytoin sodium) daily at 21:00 ({NOT_OFFERED}). Observe dosing "
        "and repeat the level on the present regimen first."
    )
    assert not any("400 mg" in x for x in lines[1:])


def test_the_block_to_paste_puts_the_fully_taken_forecast_first() -> None:
    stopped = " ".join(paste_block(stopped_proposal()))
    assert "every dose taken: total" in stopped
    assert "past intake carried on: total" not in stopped
    assert "Next level: On 300 mg extended capsules (phenytoin sodium) daily at 21:00, as now: On " in stopped
    offered = run(context={"toxic_signs": "no"}, doses=course("300 mg", "self"), levels=[level("8 mg/L")])
    pasted = " ".join(paste_block(offered))
    assert pasted.index("every dose taken: total") < pasted.index("past intake carried on: total")


def test_the_block_to_paste_is_never_cut_inside_a_line_to_act_on() -> None:
    block = paste_block(loaded("no"))
    assert len(block) <= PASTE_LINES
    text = " ".join(block)
    assert "Load: " in text
    assert "If no load is given: " in text
    if "[cut here: read the full note]" in block:
        assert block[block.index("[cut here: read the full note]") - 1].endswith(".")


@pytest.mark.parametrize("order", [(0, 1), (1, 0)])
def test_the_verdict_is_on_the_level_used_whatever_the_order_typed(order: tuple[int, int]) -> None:
    both = [level("9 mg/L"), level("1.7 mg/L", "free")]
    lines = verdict(run(context={"toxic_signs": "no"}, doses=course("300 mg"), levels=[both[i] for i in order]))
    assert "1.7 mg/L free" in lines[0]
    assert "17 mg/L at normal binding, within the target" in lines[0]
    assert "9 mg/L total is not used for the estimate" in lines[1]


def test_the_load_asked_for_stands_on_page_one_with_both_branches() -> None:
    front = parts(loaded("no"))
    assert "injection into a vein" in front["Load or top-up"]
    assert NOT_OFFERED not in front["Load or top-up"]
    after = front["Next level"].splitlines()
    assert after[0].startswith("If the load is given, first: draw 2 h after the end of the infusion; expected ")
    assert any(x.startswith("If the load is given: ") for x in after)
    assert any(x.startswith("If no load is given: ") for x in after)


def test_a_load_that_is_not_offered_says_so_in_every_line_of_its_order_and_in_its_heading() -> None:
    consult = loaded("yes")
    load = consult.plan.loads[0] if consult.plan is not None else None
    assert load is not None
    assert not load.offered
    assert all(x.startswith(NOT_OFFERED) for x in parts(consult)["Load or top-up"].splitlines()[:2])
    section = next(s for s in annex(consult) if s.title.startswith("Load or top-up"))
    assert section.title.startswith(f"Load or top-up, {NOT_OFFERED}: ")
    assert all(x.startswith(NOT_OFFERED) for x in section.lines[: 1 + len(load.order)])
    assert f"Load, {NOT_OFFERED}: " in " ".join(paste_block(consult))


def test_the_annex_marks_what_is_not_offered_and_puts_the_pause_before_other_forms() -> None:
    titles = [s.title for s in toxic_note().sections]
    pause = next(i for i, t in enumerate(titles) if t.startswith("The level is too high"))
    assert pause < titles.index("Doses around the present one")
    assert all(pause < i for i, t in enumerate(titles) if t.startswith("Another form"))
    own = [s for s in annex(stopped_proposal()) if s.title == f"Proposed regimen: {NOT_OFFERED}"]
    assert len(own) == 1
    assert own[0].lines[0].startswith(f"{NOT_OFFERED}: 400 mg")
    danger = next(s for s in toxic_note().sections if s.title.startswith("Danger of each"))
    assert danger.table is not None
    assert all(NOT_OFFERED in row[0] for row in danger.table.rows)


def test_each_chance_of_too_high_names_its_time() -> None:
    consult = toxic()
    present = consult.plan.present if consult.plan is not None else None
    assert present is not None
    assert present.danger > present.taken.above_critical
    row = dict(zip(DANGER_HEADS, danger_row(present, consult), strict=True))
    settled = row["Above critical or no steady state, once settled"]
    draw = row["With the next feasible draw counted in"]
    assert settled != draw
    line = next(x for x in parts(consult)["Chosen regimen"].splitlines() if x.startswith("Every dose taken: chance"))
    assert f"{settled} once settled" in line
    assert f"{draw} with the next feasible draw (in 3 days) counted in" in line
    stop = next(c for c in consult.cautions if c.id == "regimen-too-risky")
    assert (
        f"once settled, with every dose taken, the chance of a level above 30 mg/L or of no steady state is {settled}"
        in (stop.text)
    )


def test_a_level_below_a_limit_keeps_its_below() -> None:
    consult = run(context={"toxic_signs": "no"}, doses=course("300 mg"), levels=[level("<2.5 mg/L")])
    assert ": below 2.78 mg/L at normal binding, below the target" in verdict(consult)[0]
    measured = next(s for s in annex(consult) if s.title == "What was measured")
    assert "at normal binding below 2.78 mg/L" in measured.lines[0]
    fit = next(s for s in annex(consult) if s.title == "How the levels fit")
    assert fit.table is not None
    assert fit.table.rows[0][1].startswith("below ")


def test_a_chance_above_its_limit_does_not_read_as_the_limit() -> None:
    assert percent_beside(0.1003, 0.10) == "10.03 %"
    assert percent_beside(0.62, 0.10) == "62 %"
    assert percent_beside(0.1 + 1e-9, 0.10) == "just above 10 %"


def test_page_one_says_what_the_shelf_cannot_make() -> None:
    odd = run(context={"toxic_signs": "no"}, doses=course("345 mg"), levels=[level("12 mg/L")])
    assert "It cannot be made from the shelf in use" in parts(odd)["Chosen regimen"]


def caution(severity: Any, text: str, *blocks: str) -> Caution:
    return Caution("x", severity, text, "own", blocks=blocks)


def test_the_printed_page_keeps_stops_whole_and_what_a_warning_asks_for() -> None:
    data = document_data(toxic_note())
    stops = [c for c in toxic().cautions if c.severity == "stop"]
    warnings = [c for c in toxic().cautions if c.severity == "warn"]
    assert stops
    assert warnings
    for detail in ("full", "text", "short"):
        told = [c["text"] for c in with_first_cautions(data, toxic_note(), detail=detail)["first_cautions"]]
        assert told[: len(stops)] == [caution_text(c) for c in stops]
    full = with_first_cautions(data, toxic_note(), detail="full")["first_cautions"]
    assert [c["text"] for c in full[len(stops) :]] == [caution_text(c) for c in warnings]
    assert first_and_last("A. B is 2.5 mg. Do not raise the dose.") == (
        "A. Do not raise the dose. (In full in the annex.)"
    )
    assert first_and_last("Only this.") == "Only this."


def test_a_stop_on_the_patient_comes_before_one_on_the_two_level_method() -> None:
    pair, dose, warning = (
        caution("stop", "pair", "two-level"),
        caution("stop", "dose", "this regimen"),
        caution("warn", "w"),
    )
    assert in_order([warning, pair, dose]) == (dose, pair, warning)
