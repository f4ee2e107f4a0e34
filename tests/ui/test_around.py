"""Around a consult: who may see the page, forgetting, the second entry, demonstrations for residents, pasting."""

from __future__ import annotations

import ast
import os
import re
from html import unescape
from importlib.util import module_from_spec, spec_from_file_location
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner
from pkcalc_form import opening
from streamlit import config

from pkcalc.cli import cli
from pkcalc.demos import demonstrations

_spec = spec_from_file_location("page_tests", Path(__file__).with_name("test_page.py"))
assert _spec is not None
assert _spec.loader is not None
page: Any = module_from_spec(_spec)
_spec.loader.exec_module(page)


def test_the_page_refuses_to_be_shown_to_other_machines_without_sign_in(monkeypatch: pytest.MonkeyPatch) -> None:
    config.set_option("server.address", "0.0.0.0")
    at = page.start()
    assert "This page refuses to be shown to other machines without sign-in." in page.shown(at)
    assert not at.text_input
    monkeypatch.setenv(opening.NO_SIGN_IN, "yes")  # told once
    assert not at.run().text_input
    monkeypatch.setenv(opening.NO_SIGN_IN, opening.TOLD_TWICE)
    assert at.run().text_input


@pytest.mark.parametrize("installed", [True, False])
def test_the_page_asks_for_sign_in_where_it_is_set_up(monkeypatch: pytest.MonkeyPatch, installed: bool) -> None:
    monkeypatch.setattr(opening, "sign_in_is_set_up", lambda: True)
    monkeypatch.setattr(opening, "find_spec", lambda _: object() if installed else None)
    at = page.start()
    assert [b.label for b in at.button] == (["Sign in"] if installed else [])
    assert ("the page stays closed" in page.shown(at)) is not installed
    assert not at.text_input
    assert not at.radio


def started(monkeypatch: pytest.MonkeyPatch, *words: str) -> tuple[Any, list[list[str]]]:
    """What `pkcalc form` would start, without starting it."""
    calls: list[list[str]] = []
    here = os.getcwd()
    monkeypatch.setattr(os, "execv", lambda _, command: calls.append(list(command)))
    monkeypatch.setattr(Path, "home", lambda: Path("/nonexistent"))
    try:
        return CliRunner().invoke(cli, ["form", *words]), calls
    finally:
        os.chdir(here)


def test_the_form_is_started_on_this_machine_only(monkeypatch: pytest.MonkeyPatch) -> None:
    result, calls = started(monkeypatch, "--port", "8600")
    assert result.exit_code == 0
    assert calls[0][1:4] == ["-m", "streamlit", "run"]
    assert calls[0][5:] == ["--server.port", "8600", "--server.address", "127.0.0.1"]


@pytest.mark.parametrize("told", [[], ["--without-sign-in"]])
def test_another_address_is_refused_unless_told_twice(monkeypatch: pytest.MonkeyPatch, told: list[str]) -> None:
    result, calls = started(monkeypatch, "--address", "0.0.0.0", *told)
    assert result.exit_code == 2
    assert calls == []
    assert "not shown at 0.0.0.0 without sign-in" in result.output
    monkeypatch.setenv(opening.NO_SIGN_IN, "")
    result, calls = started(monkeypatch, "--address", "0.0.0.0", "--without-sign-in", "--without-sign-in")
    assert len(calls) == 1
    assert os.environ[opening.NO_SIGN_IN] == opening.TOLD_TWICE


def test_a_session_left_alone_forgets_and_says_so(monkeypatch: pytest.MonkeyPatch) -> None:
    at = page.enter(page.start(), page.PAIR)
    now = opening.clock()
    monkeypatch.setattr(opening, "clock", lambda: now + 19 * 60)
    at.run()
    assert at.text_input(key="level.1.value").value == "8"
    monkeypatch.setattr(opening, "clock", lambda: now + 40 * 60)
    at.run()
    assert "This page was left alone for more than 20 min, so it forgot the case." in page.shown(at)
    assert all(not t.value for t in at.text_input)
    assert "kept" not in at.session_state


def test_the_site_file_sets_the_time_after_which_a_session_forgets(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    file = tmp_path / "site.toml"
    site = '[site]\nname = "Ours"\nprotocol = "Ours, 1 Jan 2026"\ndrug = "phenytoin"\n'
    file.write_text(site + '[form]\nsession_timeout = "5 min"\n', encoding="utf-8")
    monkeypatch.setenv(opening.SITE, str(file))
    at = page.enter(page.start(), page.PAIR)
    now = opening.clock()
    monkeypatch.setattr(opening, "clock", lambda: now + 6 * 60)
    at.run()
    assert "left alone for more than 5 min" in page.shown(at)


def test_a_faulty_site_file_stops_the_page_and_is_named(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    file = tmp_path / "site.toml"
    file.write_text("[form]\nsession_timeout = 5\n", encoding="utf-8")
    monkeypatch.setenv(opening.SITE, str(file))
    at = page.start()
    assert "The service's own settings file has to be mended before this page can be used." in page.shown(at)
    assert "site.toml" in page.shown(at)
    assert not at.text_input


def test_commit_first_hides_every_answer_until_an_own_one_is_written() -> None:
    at = page.start()
    at.selectbox(key="demo_name").select("over-the-ceiling")
    at.checkbox(key="commit_first").check().run()
    at.button(key="open-demo").click().run()
    text = page.shown(at)
    assert not page.NUMBER_WITH_UNIT.search(text)
    assert not page.tables(at)
    assert "chance of a level above" not in text  # not in the cautions either
    at.button(key="reveal").click().run()
    assert "write both before the answers are revealed" in page.shown(at)
    assert not page.tables(at)
    at.text_input(key="my_dose").input("330 mg daily")
    at.text_input(key="my_level").input("15 mg/L in three weeks")
    at.button(key="reveal").click().run()
    text = page.shown(at)
    assert "You wrote: dose 330 mg daily; expected level 15 mg/L in three weeks. Compare below." in text
    assert page.NUMBER_WITH_UNIT.search(text)


def test_the_second_entry_is_blind_until_it_is_complete_and_then_every_difference_is_listed() -> None:
    at = page.enter(page.start(), page.PAIR)
    at.button(key="begin-second").click().run()
    text = page.shown(at)
    assert all(not t.value for t in at.text_input)
    assert "Second entry: type the case again from the chart" in text
    assert "350 mg daily" not in text
    page.enter(at, page.PAIR | {"dose.2.said": "330 mg daily"})
    assert "(first)" not in page.shown(at)  # nothing of the first entry before the second is said to be complete
    at.button(key="compare-now").click().run()
    text = page.shown(at)
    assert "The two entries differ in 1 field" in text
    assert "350 mg (first), 330 mg (second)" in text
    assert re.search(r"This alone: .*becomes [\d.,]+ mg", text)
    assert "Forecasts of the two entries:" in text
    page.enter(at, {"dose.2.said": "0.35 g daily"})
    text = page.shown(at)
    assert "The second entry was changed since it was compared: compare again." in text
    assert "(first)" not in text
    at.button(key="compare-now").click().run()
    text = page.shown(at)
    assert "The two entries agree in every field compared." in text
    assert "Written differently, the same value:" in text


def test_the_comparison_goes_back_with_the_first_entry_and_stands_on_its_note() -> None:
    at = page.enter(page.start(), page.PAIR)
    at.button(key="begin-second").click().run()
    page.enter(at, page.PAIR | {"level.2.value": "21"})
    at.button(key="compare-now").click().run()
    page.enter(at, {"level.2.value": "20"})
    at.button(key="compare-now").click().run()
    at.button(key="back-to-first").click().run()
    assert at.text_input(key="level.2.value").value == "20"
    text = page.shown(at)
    assert re.search(r"[Dd]one on [^.]*, 1 difference, resolved\.", text)
    page.enter(at, {"level.1.value": "8.5"})
    assert "changed since: repeat it." in page.shown(at)


def test_a_second_entry_given_up_leaves_the_first_as_it_was() -> None:
    at = page.enter(page.open_demonstration("clean-pair"), {"question": "Is there room?"})
    at.button(key="begin-second").click().run()
    assert any("pk-mark" in h.body for h in at.get("html"))  # a demonstration stays one for the second person
    at.button(key="back-to-first").click().run()
    assert at.text_input(key="question").value == "Is there room?"
    assert "Second entry:" not in page.shown(at)
    assert any("pk-mark" in h.body for h in at.get("html"))


def test_200_pasted_rows_are_read_and_a_bad_one_is_named() -> None:
    rows = "\n".join(f"2026-0{1 + n // 50}-{1 + n % 25:02d} {6 + n // 25 % 2 * 12:02d}:00\t100 mg" for n in range(200))
    at = page.start()
    page.enter(at, {"drug": "phenytoin"})
    page.enter(at, {"pasted": rows, "pasted_form": "suspension"})
    assert "Read: 200 single doses." in page.shown(at)
    page.enter(at, {"pasted": rows.replace("100 mg", "1OO mg", 1)})
    assert any("Pasted doses, row 1, amount" in line for line in page.beside(at))
    assert "Read: " not in page.shown(at)


PASTED = """at\tamount\tevery\tfrom\tuntil\tmissed\tover\tform
\t300 mg\t24 h\t2026-02-01 21:00\t2026-03-20 21:00\t2026-03-03 21:00|2026-03-09 21:00\t\textended-capsule
2026-03-21 09:00\t500 mg\t\t\t\t\t30 min\tinjection
\t350 mg\t24 h\t2026-03-21 21:00\t\t\t\textended-capsule"""


def test_repeats_missed_doses_and_infusions_are_pasted_and_count() -> None:
    at = page.enter(page.start(), {"drug": "phenytoin", "now": "2026-04-20 10:00", "weight": "70 kg"})
    values = {"level.1.value": "14 mg/L", "level.1.kind": "total", "level.1.drawn": "2026-04-20 08:00"}
    page.enter(at, {"pasted": PASTED, **values})
    text = page.shown(at)
    assert "Read: 1 single dose, 2 repeated doses, 2 missed doses." in text
    assert page.NUMBER_WITH_UNIT.search(text)
    lines = at.session_state["kept"]
    case = next(iter(lines.values())).case
    assert [(len(c.missed), c.single is not None) for c in case.courses] == [(2, False), (0, True), (0, False)]
    assert case.courses[1].single.over_h == 0.5
    page.enter(at, {"pasted": PASTED.replace("30 min", "30 days")})
    assert any("Pasted doses, row 3, over" in line for line in page.beside(at))
    assert not page.NUMBER_WITH_UNIT.search(page.shown(at))


def test_a_pasted_formula_is_refused() -> None:
    at = page.enter(page.start(), {"drug": "phenytoin"})
    page.enter(at, {"pasted": '2026-03-01 21:00\t=HYPERLINK("x")', "pasted_form": "suspension"})
    assert any("A spreadsheet would run it as a formula" in line for line in page.beside(at))


def test_dialysis_sessions_are_typed_on_the_page() -> None:
    at = page.open_demonstration("ethanol-dialysis")
    assert at.text_input(key="dialysis.1.clearance").value == "140"
    page.enter(at, {"dialysis.1.clearance": "1400"})
    assert any("Dialysis session 1, clearance" in line for line in page.beside(at))
    assert "Rate that holds" not in page.shown(at)
    page.enter(at, {"dialysis.1.clearance": ""})
    text = page.shown(at)
    assert "No clearance of the dialysis was given" in text
    assert "Rate that holds 1,250 mg/L while dialysis runs" in text
    at.button(key="dialysis.1.remove").click().run()
    text = page.shown(at)
    assert "while dialysis runs" not in text
    assert "Rate that holds" in text
    at.button(key="add-dialysis").click().run()
    page.enter(at, {"dialysis.1.from": "2026-06-09 18:00", "dialysis.1.until": "2026-06-09 17:00"})
    assert any("it ends (9 Jun 2026 17:00) before or when it starts" in line for line in page.beside(at))


def test_no_dialysis_is_asked_for_where_the_drug_file_knows_none() -> None:
    at = page.enter(page.start(), {"drug": "phenytoin"})
    assert all(b.key != "add-dialysis" for b in at.button)


def test_usable_products_narrow_the_shelf_of_this_consult() -> None:
    at = page.enter(page.open_demonstration("clean-pair"), {"shelf": "united-states"})
    choice = at.multiselect(key="products")
    assert len(choice.options) > 4
    before = next(t for t in page.tables(at) if "Doses around the present one" in t)
    page.enter(at, {"products": ["extended-capsule-100"]})
    text = page.shown(at)
    assert "Restricted to " in text
    assert next(t for t in page.tables(at) if "Doses around the present one" in t) != before
    page.enter(at, {"shelf": "united-kingdom"})  # the product is not on the other shelf: said, not dropped unseen
    assert any("Plan, products" in line for line in page.beside(at))


def test_the_record_is_drawn_as_typed_before_any_level(real_charts: None) -> None:
    values = {"drug": "phenytoin", "dose.1.said": "300 mg daily", "dose.1.from": "2026-03-01 21:00"}
    at = page.enter(page.start(), values)
    assert pictures(at) == []  # no form yet, so the line cannot be read
    page.enter(at, {"dose.1.form": "sodium", "dose.1.missed": "2026-03-02 21:00"})
    assert pictures(at) == ["The record as typed, 1 Mar 2026 to 5 Mar 2026: 3 doses, 1 missed dose."]
    page.enter(at, {"weight": "-70"})  # wrong elsewhere: the record is still the record
    assert len(pictures(at)) == 1
    page.enter(at, {"dose.1.said": "300 mg"})
    assert pictures(at) == []


def pictures(at: Any) -> list[str]:
    """The text alternatives of the pictures on the page."""
    return [unescape(x) for h in at.get("html") for x in re.findall(r'alt="([^"]*)"', h.body)]


def test_a_first_load_is_worked_out_before_any_level() -> None:
    at = page.enter(page.start(), {"drug": "phenytoin", "weight": "70 kg", "age": "40 years"})
    at = page.enter(at, {"now": "2026-03-01 10:00"})
    assert "No numbers yet." in page.shown(at)
    page.enter(at, {"load_form": "injection", "load_aim": "15 mg/L", "shelf": "united-states"})
    text = page.shown(at)
    assert "Load or top-up with" in text
    assert "No numbers yet." not in text


def test_a_level_says_what_it_is_worth_as_soon_as_it_is_typed() -> None:
    """Total 8 mg/L at albumin 29 g/L: 8 / (0.2 x 2.9 + 0.1) = 11.8 mg/L (Sheiner and Tozer's equation)."""
    at = page.enter(
        page.start(),
        {
            "drug": "phenytoin",
            "albumin": "29",
            "albumin_unit": "g/L",
            "level.1.value": "8",
            "level.1.unit": "mg/L",
            "level.1.kind": "total",
        },
    )
    assert "Read as 8 mg/L total: worth 11.8 mg/L total at normal binding." in page.shown(at)


@pytest.mark.slow
@pytest.mark.parametrize("name", [d.name for d in demonstrations()])
def test_every_demonstration_opens_without_a_fault(name: str) -> None:
    at = page.open_demonstration(name)
    text = page.shown(at)
    assert "The calculation stopped" not in text
    assert page.beside(at) == []
    assert "DEMONSTRATION - invented" in text
    for toggle in ("ask-how", "ask-populations", "ask-whole_note"):
        found = [t for t in at.toggle if t.key == toggle]
        for t in found:
            t.set_value(True)
    at.run()
    assert "The calculation stopped" not in page.shown(at)


@pytest.mark.slow
def test_a_shelf_brings_regimens_and_two_of_them_side_by_side() -> None:
    at = page.open_demonstration("over-the-ceiling")
    words = at.multiselect(key="two").options
    assert len(words) > 4
    at.multiselect(key="two").set_value(list(words[:2])).run()
    assert sum("Two regimens side by side" in t for t in page.tables(at)) == 1


def test_a_chosen_regimen_and_own_words_stand_on_the_note() -> None:
    at = page.open_demonstration("clean-pair")
    page.enter(at, {"chosen": "stay", "own_words": "Family prefers no change."})
    text = page.shown(at)
    assert "Family prefers no change." in text
    assert "No regimen is chosen yet" not in text


def test_the_page_imports_public_names_of_the_core_and_no_tool_for_formulas() -> None:
    folder = page.PAGE.parent
    found = []
    for file in sorted(folder.glob("*.py")):
        for node in ast.walk(ast.parse(file.read_text(encoding="utf-8"))):
            if isinstance(node, ast.ImportFrom):
                found += [(file.name, node.module or "", alias.name) for alias in node.names]
            elif isinstance(node, ast.Import):
                found += [(file.name, alias.name, "") for alias in node.names]
    assert len(found) > 50
    outside = {"numpy", "scipy", "pandas", "pint", "altair", "vl_convert"}
    assert [x for x in found if x[1].split(".")[0] in outside] == []
    assert [x for x in found if x[1].startswith("pkcalc") and (x[2].startswith("_") or "._" in x[1])] == []
    assert [x for x in found if x[1] in ("pkcalc.formulas", "pkcalc.flow", "pkcalc.kinetics")] == []


def test_residents_see_the_same_levels_in_five_pictures_in_a_demonstration_only() -> None:
    at = page.open_demonstration("several-levels")
    at.toggle(key="ask-residents").set_value(True).run()
    assert not at.exception
    text = page.shown(at)
    assert "not for clinical use" in text
    drawn = [h.value for h in at.get("html") if 'class="pk-chart"' in str(getattr(h, "value", h.proto.body))]
    assert len(drawn) >= 5
    other = page.open_demonstration("clean-pair")
    assert all(t.key != "ask-residents" for t in other.toggle)
