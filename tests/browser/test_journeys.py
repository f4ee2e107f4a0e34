"""The page in a real browser: what a person at the keyboard sees, and what must never be seen."""

from __future__ import annotations

import io
import json
import re
from collections.abc import Callable
from importlib.util import module_from_spec, spec_from_file_location
from pathlib import Path
from typing import Any

import pytest
from axe_playwright_python.sync_playwright import Axe
from PIL import Image
from playwright.sync_api import Browser, expect

pytestmark = pytest.mark.browser

_spec = spec_from_file_location("browser_tools", Path(__file__).with_name("conftest.py"))
assert _spec is not None
assert _spec.loader is not None
_tools: Any = module_from_spec(_spec)
_spec.loader.exec_module(_tools)
start_server = _tools.start_server

Visitor = Callable[..., Any]
PAIR = """{"pkcalc_case": 1, "drug": "phenytoin",
 "doses": [{"form": "sodium", "amount": "300 mg", "every": "24 h"}, {"form": "sodium", "amount": "350 mg", "every": "24 h"}],
 "levels": [{"value": "8 mg/L", "kind": "total", "on_dose": 1}, {"value": "20 mg/L", "kind": "total", "on_dose": 2}]}"""
ANSWER = re.compile(r"(?:Vmax|Km) [\d.,]+ m")


def grave(visitor: Any) -> list[str]:
    """Serious and critical findings of axe-core on the page as it stands."""
    found = Axe().run(visitor.page).response["violations"]
    return [f"{v['id']}: {v['nodes'][0]['html'][:150]}" for v in found if v["impact"] in ("serious", "critical")]


def test_published_pair_is_entered_and_the_published_answer_read(visit: Visitor) -> None:
    """Winter ME, Basic Clinical Pharmacokinetics (value from memory): Km 2.5 mg/L, Vmax about 362 mg/day."""
    v = visit()
    v.enter_pair("8", "20")
    v.page.get_by_text("Km 2.5 mg/L").first.wait_for()
    text = v.text()
    assert re.search(r"Vmax 362(\.\d)? mg/day of active drug, Km 2\.5 mg/L", text)
    assert grave(v) == []


def test_impossible_pair_shows_the_reason_and_no_number(visit: Visitor) -> None:
    v = visit()
    v.open_case(PAIR)
    v.unfold("What was measured?")
    v.type("Level as reported", "9", 1)
    text = v.text()
    assert "a level must rise more than in proportion to the dose, so Km cannot be found" in text
    assert not ANSWER.search(text)
    assert v.page.locator(".pk-table").count() == 0


def test_a_typed_comma_is_refused_beside_its_field_and_is_never_125(visit: Visitor) -> None:
    v = visit()
    v.open_case(PAIR)
    v.unfold("What was measured?")
    assert ANSWER.search(v.text())
    v.type("Level as reported", "12,5")
    beside = v.page.get_by_role("alert").filter(has_text='"12,5" was given')
    expect(beside).to_be_visible()
    field = v.page.get_by_label("Level as reported", exact=True).first
    assert field.input_value() == "12,5"
    below, at = beside.bounding_box(), field.bounding_box()
    assert below is not None
    assert at is not None
    assert 0 <= below["y"] - (at["y"] + at["height"]) < 60
    text = v.text()
    assert not ANSWER.search(text)
    assert "No numbers yet." in text
    assert not re.search(r"\b125\b", text)


def test_nothing_old_is_seen_while_a_new_value_is_typed(visit: Visitor) -> None:
    v = visit()
    v.open_case(PAIR)
    v.unfold("What was measured?")
    answer = v.page.locator(".pk-answer").first
    expect(answer).to_be_visible()
    field = v.page.get_by_label("Level as reported", exact=True).first
    field.press_sequentially("1")
    expect(answer).not_to_be_visible()
    field.press("Tab")
    v.settle()
    assert "Km 2.5 mg/L" not in v.text()


def test_a_unit_switch_changes_the_meaning_and_not_the_text(visit: Visitor) -> None:
    v = visit()
    v.open_case(PAIR.replace("8 mg/L", "31.71 umol/L").replace("20 mg/L", "79.28 umol/L"))
    v.unfold("What was measured?")
    assert "Km 2.5 mg/L" in v.text()
    v.choose("Unit of the level", "mg/L", 1)
    v.settle()
    assert v.page.get_by_label("Level as reported", exact=True).nth(1).input_value() == "79.28"
    assert "Km 2.5 mg/L" not in v.text()


def test_a_stop_hides_the_numbers_and_a_demonstration_wears_its_banner(visit: Visitor) -> None:
    v = visit()
    v.open_demonstration("Two steady levels on two doses")
    assert ANSWER.search(v.text())
    expect(v.page.locator(".pk-mark")).to_have_count(1)
    v.unfold("How is the patient?")
    v.page.locator(".st-key-ctx-seizing_now").get_by_text("yes", exact=True).click()
    v.page.get_by_text("The patient is seizing now.").first.wait_for()
    text = v.text()
    assert "DEMONSTRATION - invented, not a patient, not for clinical use" in text
    assert not ANSWER.search(text)
    assert v.page.locator(".pk-table").count() == 0
    stop = v.page.locator(".pk-cautions").bounding_box()
    v.page.locator("[data-testid=stMain]").evaluate("e => e.scrollTo(0, e.scrollHeight)")
    expect(v.page.locator(".pk-cautions")).to_be_in_viewport()
    assert stop is not None


def test_two_browsers_at_once_never_mix(visit: Visitor) -> None:
    one, other = visit(), visit()
    one.open_case(PAIR)
    one.unfold("What was measured?")
    other.open_demonstration("Two steady levels on two doses")
    assert "Km 2.5 mg/L" in one.text()
    assert "DEMONSTRATION" not in one.text()
    assert "Km 2.5 mg/L" not in other.text()
    one.type("Level as reported", "9", 0)
    other.settle()
    assert "DEMONSTRATION" not in one.text()
    assert "9 mg/L total" in one.text()
    assert "9 mg/L total" not in other.text()


def test_reload_forgets_and_asks_first(visit: Visitor) -> None:
    v = visit()
    v.type("Why was the level drawn, and what is asked?", "more?")
    v.settle()
    asked: list[str] = []
    v.page.on("dialog", lambda d: (asked.append(d.type), d.accept()))
    v.page.reload()
    v.ready()
    assert asked == ["beforeunload"]
    text = v.text()
    assert "No numbers yet." in text
    assert not ANSWER.search(text)
    assert v.page.get_by_label("Level as reported", exact=True).first.input_value() == ""


def test_a_whole_consult_by_keyboard_alone(visit: Visitor) -> None:
    """Tab, letters, arrows and Enter; the mouse is never used."""
    v = visit()
    keys = v.page.keyboard

    def tab_to(name: str, most: int = 120) -> None:
        for _ in range(most):
            keys.press("Tab")
            here = v.page.evaluate(
                """() => { const e = document.activeElement; if (!e) return '';
                    const label = e.labels && e.labels.length ? e.labels[0].innerText : '';
                    return [e.getAttribute('aria-label') || '', label, e.tagName === 'BUTTON' ? e.innerText : ''].join('|'); }"""
            )
            if name in here:
                return
        raise AssertionError(f"{name} cannot be reached with the keyboard")

    def choose(name: str, letters: str) -> None:
        tab_to(name)
        v.settle()
        keys.type(letters)
        if not v.page.get_by_role("option").count():
            v.settle()
            keys.type(letters)
        v.page.get_by_role("option").first.wait_for()
        keys.press("Enter")
        v.settle()

    choose("Drug", "phenytoin")
    tab_to("Dose, with its unit")
    keys.type("300 mg daily")
    choose("Product form and salt", "phenytoin sodium")
    tab_to("Add a dose line")
    keys.press("Enter")
    v.settle()
    v.page.get_by_text("Dose line 2", exact=True).wait_for()
    keys.press("Shift+Tab")
    v.page.get_by_label("Dose, with its unit and how often", exact=True).nth(1).focus()
    keys.type("350 mg daily")
    choose("Product form and salt", "phenytoin sodium")
    tab_to("Level as reported")
    keys.type("8")
    choose("Unit of the level", "mg/L")
    choose("What was measured?", "total")
    choose("Dose line in force", "dose line 1")
    tab_to("Add a level")
    keys.press("Enter")
    v.settle()
    v.page.get_by_label("Level as reported", exact=True).nth(1).focus()
    keys.type("20")
    choose("Unit of the level", "mg/L")
    choose("What was measured?", "total")
    choose("Dose line in force", "dose line 2")
    v.page.get_by_text("Km 2.5 mg/L").first.wait_for()
    assert "Km 2.5 mg/L" in v.text()


@pytest.mark.parametrize(
    ("width", "dark"), [(390, False), (1440, False), pytest.param(1440, True, marks=pytest.mark.slow)]
)
def test_widths_and_dark_mode(visit: Visitor, width: int, dark: bool) -> None:
    """Pictures for people to look at; nothing wider than the window, nothing axe-core finds grave."""
    v = visit(width=width, height=900, dark=dark)
    v.shoot(f"empty-{width}{'-dark' if dark else ''}")
    v.open_demonstration("The next capsule tips over Vmax")
    v.shoot(f"demonstration-{width}{'-dark' if dark else ''}", height=5200)
    wide = v.page.locator("[data-testid=stMain]").evaluate("e => e.scrollWidth - e.clientWidth")
    assert wide <= 1
    for title in ("How is the patient?", "What was given?", "What was measured?"):
        v.unfold(title)
    assert grave(v) == []


@pytest.mark.slow
def test_every_format_is_downloaded_and_the_case_opens_again(visit: Visitor, tmp_path: Path) -> None:
    from pkcalc.case import load_case
    from pkcalc.demos import demonstration

    v = visit()
    v.open_demonstration("Two steady levels on two doses")
    got = {}
    for name in ("Note as text", "Note as HTML", "Note as PDF", "Note as JSON", "Case file"):
        with v.page.expect_download() as download:
            v.press(name)
        path = tmp_path / download.value.suggested_filename
        download.value.save_as(path)
        assert path.name.startswith("demonstration-")
        got[name] = path
    assert got["Note as PDF"].read_bytes().startswith(b"%PDF-")
    for name in ("Note as text", "Note as HTML", "Note as JSON"):
        assert "DEMONSTRATION - invented" in got[name].read_text(encoding="utf-8")
    assert json.loads(got["Note as JSON"].read_text(encoding="utf-8"))["outcome"] == "done"
    case = got["Case file"]
    assert load_case(case).hash == demonstration("clean-pair").hash
    other = visit()
    other.open_case(case.read_text(encoding="utf-8"))
    text = other.text()
    assert load_case(case).hash in text
    assert "DEMONSTRATION - invented" in text


def test_200_rows_are_pasted_from_a_spreadsheet(visit: Visitor) -> None:
    rows = "\n".join(
        f"2026-{1 + n // 50:02d}-{1 + n % 25:02d} {6 + n // 25 % 2 * 12:02d}:00\t100 mg" for n in range(200)
    )
    v = visit()
    v.choose("Drug", "phenytoin")
    v.page.get_by_text("Paste single doses from a spreadsheet").click()
    v.choose("Form of all pasted doses", "oral suspension (phenytoin acid)")
    v.type("Pasted rows", rows)
    v.page.get_by_text("200 single doses read.").wait_for()
    assert "200 pasted single doses" in v.text()


def test_the_page_is_refused_to_other_machines_without_sign_in(browser: Browser, tmp_path: Path) -> None:
    """Started by hand on every address, without `pkcalc form`: no field is shown."""
    server, address = start_server(tmp_path / "log.txt", "--server.address", "0.0.0.0")
    context = browser.new_context()
    try:
        page = context.new_page()
        page.goto(address)
        page.get_by_text("This page refuses to be shown to other machines without sign-in.").wait_for(timeout=40_000)
        assert page.locator("input").count() == 0
    finally:
        context.close()
        server.terminate()
        server.wait(10)


def test_the_log_of_the_server_holds_nothing_of_a_case(visit: Visitor, server_log: Path) -> None:
    v = visit()
    v.open_demonstration("The next capsule tips over Vmax")
    v.page.locator(".pk-chart").first.wait_for()
    v.unfold("What was measured?")
    v.type("Level as reported", "12,5")
    v.settle()
    log = server_log.read_text(encoding="utf-8", errors="replace")
    assert "mg" not in log
    assert "12,5" not in log
    assert "Traceback" not in log


@pytest.mark.slow
@pytest.mark.parametrize(("width", "height", "name"), [(1440, 1000, "page-wide"), (390, 844, "page-narrow")])
def test_pictures_of_the_page_for_the_readme(visit: Visitor, width: int, height: int, name: str) -> None:
    """Made anew in the folder of shots, to be copied beside the form's files when the page has changed."""
    v = visit(width=width, height=height)
    v.open_demonstration("The next capsule tips over Vmax")
    v.page.locator(".pk-chart").first.wait_for()
    v.page.locator(".st-key-pinned").evaluate("e => e.scrollIntoView()")
    v.page.wait_for_timeout(500)
    image = Image.open(io.BytesIO(v.page.screenshot())).convert("RGB")
    if width > 1000:
        image = image.crop((200, 0, 1240, height))
    small = image.quantize(96, dither=Image.Dither.NONE)
    made = _tools.SHOTS / f"{name}.png"
    small.save(made, optimize=True)
    kept = Path(_tools.find_spec("pkcalc_form").origin).with_name("assets") / made.name
    assert kept.stat().st_size < 120_000
    assert Image.open(kept).size == small.size
