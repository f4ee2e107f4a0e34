"""The page in a real browser: what a person at the keyboard sees, and what must never be seen."""

from __future__ import annotations

import io
import json
import re
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from importlib.util import module_from_spec, spec_from_file_location
from pathlib import Path
from typing import Any

import pytest
from axe_playwright_python.sync_playwright import Axe
from PIL import Image
from playwright.sync_api import Browser, expect
from pypdf import PdfReader

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


@pytest.fixture(scope="module")
def shared(browser: Browser, address: str) -> Iterator[Any]:
    """One session for the journeys that begin with the published pair: each opens the case anew."""
    v = _tools.Visit(browser, address, 1440, 1000, False)
    yield v
    v.context.close()
    assert v.strangers == []


@pytest.fixture
def pair(shared: Any) -> Any:
    """Two steady levels: Winter ME, Basic Clinical Pharmacokinetics (value from memory): Km 2.5 mg/L."""
    shared.open_case(PAIR)
    shared.unfold("What was measured?")
    assert "Km 2.5 mg/L" in shared.text()
    return shared


# --- whole consults ---------------------------------------------------------------------------------------


def test_a_consult_on_one_level_by_keyboard_alone_takes_few_entries(visit: Visitor) -> None:
    """Tab, letters, arrows, space bar and Enter; the mouse is never used."""
    v = visit()
    entries = v.one_level_consult()
    assert entries <= 18  # about 15 is the aim
    text = v.text()
    assert re.search(
        r"Vmax [\d.,]+ mg/day of active drug, Km [\d.,]+ mg/L \(posterior median; method: whole record\)", text
    )
    assert "330 mg phenytoin sodium daily" in text
    assert re.search(r"Every dose taken: chance above 30 mg/L or of no steady state", text)
    # nobody said that the doses were taken, so more is not offered; the page says what the note says
    assert "6 · When do we look again? No draw is planned on 330 mg phenytoin sodium daily (NOT OFFERED)." in text
    assert grave(v) == []


@pytest.mark.slow
def test_published_pair_is_entered_and_the_published_answer_read(visit: Visitor) -> None:
    """Winter ME, Basic Clinical Pharmacokinetics (value from memory): Km 2.5 mg/L, Vmax about 362 mg/day."""
    v = visit()
    v.enter_pair("8", "20")
    v.page.get_by_text("Km 2.5 mg/L").first.wait_for()
    assert re.search(r"Vmax 362(\.\d)? mg/day of active drug, Km 2\.5 mg/L", v.text())


@pytest.mark.slow
def test_a_second_person_types_the_case_again_and_the_note_says_so(visit: Visitor) -> None:
    v = visit()
    v.open_case(PAIR)
    v.unfold("Blind re-entry by the second pharmacist")
    v.press("Put this entry aside and begin the second")
    assert entered(v) == []
    v.enter_pair("8", "21")
    v.press("The second entry is complete: compare the two")
    v.page.get_by_text("Forecasts of the two entries:").wait_for()
    assert "Level 2, value: 20 mg/L (first), 21 mg/L (second)." in v.text()
    assert "This alone:" in v.text()
    v.press("Leave the second entry and go back to the first")
    v.unfold("Blind re-entry by the second pharmacist")
    assert re.search(r"1 difference, not resolved", v.text())


# --- never a wrong or an old number -----------------------------------------------------------------------


def test_impossible_pair_shows_the_reason_and_no_number(pair: Any) -> None:
    pair.type("Level as reported", "9", 1)
    text = pair.text()
    assert "a level must rise more than in proportion to the dose, so Km cannot be found" in text
    assert not ANSWER.search(text)
    assert pair.page.locator(".pk-table").count() == 0


def test_a_typed_comma_is_refused_beside_its_field_and_is_never_125(pair: Any) -> None:
    assert ANSWER.search(pair.text())
    pair.type("Level as reported", "12,5")
    beside = pair.page.get_by_role("alert").filter(has_text='"12,5" was given')
    expect(beside).to_be_visible()
    field = pair.page.get_by_label("Level as reported", exact=True).first
    assert field.input_value() == "12,5"
    below, at = beside.bounding_box(), field.bounding_box()
    assert below is not None
    assert at is not None
    assert 0 <= below["y"] - (at["y"] + at["height"]) < 60
    text = pair.text()
    assert not ANSWER.search(text)
    assert "No numbers yet." in text
    assert not re.search(r"\b125\b", text)


def test_nothing_old_is_seen_while_a_new_value_is_typed(pair: Any) -> None:
    answer = pair.page.locator(".st-key-result-estimate .pk-answer").first
    expect(answer).to_be_visible()
    field = pair.page.get_by_label("Level as reported", exact=True).first
    field.press_sequentially("1")
    expect(answer).not_to_be_visible()
    field.press("Tab")
    pair.settle()
    assert "Km 2.5 mg/L" not in pair.text()


def test_a_unit_switch_changes_the_meaning_and_not_the_text(shared: Any) -> None:
    shared.open_case(PAIR.replace("8 mg/L", "31.71 umol/L").replace("20 mg/L", "79.28 umol/L"))
    shared.unfold("What was measured?")
    assert "Km 2.5 mg/L" in shared.text()
    shared.choose("Unit of the level", "mg/L", 1)
    assert shared.page.get_by_label("Level as reported", exact=True).nth(1).input_value() == "79.28"
    assert "Km 2.5 mg/L" not in shared.text()


def test_typing_fast_and_changing_one_s_mind_ends_with_the_last_value(pair: Any) -> None:
    """Each value is left before the answer to the one before has come."""
    for value in ("21", "2", "25", "20.5"):
        pair.page.get_by_label("Level as reported", exact=True).nth(1).fill(value)
        pair.page.keyboard.press("Tab")
    text = pair.text()
    assert "levels 8 mg/L total, 20.5 mg/L total" in text
    assert "25 mg/L total" not in text


def test_very_long_and_hostile_text_stays_text_within_the_page(pair: Any) -> None:
    pair.unfold("How is the patient?")
    pair.type("Why was the level drawn, and what is asked?", "<img src=x onerror=alert(1)>" + "W" * 150)
    pair.page.get_by_label("Your own words on the note").fill("=HYPERLINK(1) " + "long words " * 300)
    pair.page.keyboard.press("Tab")
    text = pair.text()
    assert "Km 2.5 mg/L" in text
    assert "<img src=x onerror=alert(1)>W" in text
    assert pair.page.locator('img[src="x"]').count() == 0
    assert pair.page.locator("[data-testid=stMain]").evaluate("e => e.scrollWidth - e.clientWidth") <= 1


def test_a_stop_hides_the_numbers_and_stays_in_sight_and_on_paper(visit: Visitor) -> None:
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
    v.page.locator("[data-testid=stMain]").evaluate("e => e.scrollTo(0, e.scrollHeight)")
    expect(v.page.locator(".pk-cautions")).to_be_in_viewport()
    paper = printed(v)
    assert "STOP" in paper
    assert "The patient is seizing now." in paper
    assert not ANSWER.search(paper)


def printed(visitor: Any) -> str:
    """The page as Chromium prints it on A4, as text."""
    file = io.BytesIO(visitor.page.pdf(format="A4", prefer_css_page_size=True))
    return " ".join(" ".join(p.extract_text() or "" for p in PdfReader(file).pages).split())


def test_the_printed_page_holds_cautions_and_results_and_no_control(visit: Visitor) -> None:
    v = visit()
    v.open_demonstration("The next capsule tips over Vmax")
    paper = printed(v)
    assert "DEMONSTRATION - invented" in paper
    assert "STOP" in paper
    assert ANSWER.search(paper)
    assert "Doses around the present one" in paper
    assert "Next level" in paper
    for control in ("Which regimen do you choose?", "Note as PDF", "Add another regimen of your own", "Start afresh"):
        assert v.page.get_by_text(control).count()
        assert control not in paper


def test_two_browsers_at_once_never_mix(visit: Visitor, pair: Any) -> None:
    one, other = pair, visit()
    other.open_demonstration("Two steady levels on two doses")
    assert "Km 2.5 mg/L" in one.text()
    assert "DEMONSTRATION" not in one.text()
    assert "Km 2.5 mg/L" not in other.text()
    one.type("Level as reported", "9", 0)
    other.settle()
    assert "DEMONSTRATION" not in one.text()
    assert "9 mg/L total" in one.text()
    assert "9 mg/L total" not in other.text()


def test_reload_and_back_forget_and_ask_first(visit: Visitor) -> None:
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
    v.open_case(PAIR)
    v.page.goto("about:blank")
    v.page.go_back()
    v.ready()
    text = v.text()
    assert "No numbers yet." in text
    assert not ANSWER.search(text)


def entered(visitor: Any) -> list[str]:
    """Everything that stands in a field of the page, in the browser."""
    return [
        x for x in visitor.page.locator("input[type=text], textarea").evaluate_all("all => all.map(e => e.value)") if x
    ]


def test_forgetting_and_the_second_entry_leave_no_field_filled(pair: Any) -> None:
    pair.unfold("How is the patient?")
    pair.type("Weight", "70 kg")
    pair.page.locator(".st-key-ctx-overdose").get_by_text("no", exact=True).click()
    pair.settle()
    assert "300 mg daily" in entered(pair)
    pair.unfold("Blind re-entry by the second pharmacist")
    pair.press("Put this entry aside and begin the second")
    assert entered(pair) == []
    assert pair.page.locator("input[type=radio]:checked").count() == 0
    pair.press("Leave the second entry and go back to the first")
    assert "300 mg daily" in entered(pair)
    assert ANSWER.search(pair.text())
    pair.unfold("Open a demonstration or a case file")
    pair.press("Start afresh")
    assert entered(pair) == []
    assert pair.page.locator("input[type=radio]:checked").count() == 0
    assert not ANSWER.search(pair.text())
    pair.type("Why was the level drawn, and what is asked?", "x")  # the browser sends all its fields again
    assert "No numbers yet." in pair.text()
    assert entered(pair) == ["x"]


@pytest.mark.slow
def test_with_the_server_gone_nothing_can_be_changed_under_an_old_result(browser: Browser, tmp_path: Path) -> None:
    server, address = start_server(tmp_path / "log.txt")
    v = _tools.Visit(browser, address, 1440, 1000, False)
    try:
        v.open_case(PAIR)
        v.unfold("What was measured?")
        answer = v.page.locator(".st-key-result-estimate .pk-answer").first
        expect(answer).to_be_visible()
        server.terminate()
        server.wait(10)
        field = v.page.get_by_label("Level as reported", exact=True).first
        expect(field).to_be_disabled(timeout=20_000)
        assert field.input_value() == "8"
    finally:
        v.context.close()
        server.kill()


# --- pasting, looks, files --------------------------------------------------------------------------------


def test_200_rows_are_pasted_from_a_spreadsheet(shared: Any) -> None:
    """198 single doses, a repeated one with missed doses and an infusion, as one block with column names."""
    names = "at\tamount\tevery\tfrom\tuntil\tmissed\tover\tform"
    rows = [
        f"2026-{1 + n // 50:02d}-{1 + n % 25:02d} {6 + n // 25 % 2 * 12:02d}:00\t100 mg\t\t\t\t\t\tsuspension"
        for n in range(198)
    ]
    rows.append(
        "\t300 mg\t24 h\t2026-05-01 21:00\t2026-05-20 21:00\t2026-05-03 21:00|2026-05-04 21:00\t\textended-capsule"
    )
    rows.append("2026-05-21 09:00\t500 mg\t\t\t\t\t30 min\tinjection")
    v = shared
    v.open_case(
        '{"pkcalc_case": 1, "drug": "phenytoin", "levels": [{"value": "8 mg/L", "kind": "total"}]}', stopped=True
    )
    v.unfold("What was given?")
    v.unfold("Paste doses from a spreadsheet")
    v.type("Pasted rows", "\n".join([names, *rows]))
    v.page.get_by_text("Read: 199 single doses, 1 repeated dose, 2 missed doses.").wait_for()
    v.page.locator(".st-key-result-chart-typed .pk-chart").wait_for()
    assert "pasted: 199 single doses, 1 repeated dose, 2 missed doses" in v.text()
    v.type("Pasted rows", "\n".join([names, *rows]).replace("30 min", "30 weeks"))
    v.page.get_by_text("Pasted doses, row 201, over").first.wait_for()


@pytest.mark.parametrize(
    ("width", "dark", "title"),
    [
        (390, False, "The next capsule tips over Vmax"),
        pytest.param(390, True, "Ethanol as antidote: dialysis starts", marks=pytest.mark.slow),
        pytest.param(1440, False, "Ethanol as antidote: dialysis starts", marks=pytest.mark.slow),
        pytest.param(1440, True, "The next capsule tips over Vmax", marks=pytest.mark.slow),
    ],
)
def test_every_section_unfolded_in_both_widths_and_dark(visit: Visitor, width: int, dark: bool, title: str) -> None:
    """Pictures for people to look at; nothing wider than the window, nothing axe-core finds grave."""
    v = visit(width=width, height=900, dark=dark)
    name = f"{width}{'-dark' if dark else ''}"
    v.shoot(f"empty-{name}")
    v.open_demonstration(title)
    v.unfold_all()
    v.page.locator(".st-key-step-4 .pk-chart").first.wait_for()
    v.shoot(f"demonstration-{name}", height=16_000)
    wide = v.page.locator("[data-testid=stMain]").evaluate("e => e.scrollWidth - e.clientWidth")
    assert wide <= 1
    assert grave(v) == []


@pytest.mark.slow
def test_every_format_is_downloaded_and_the_case_opens_again(visit: Visitor, tmp_path: Path) -> None:
    from pkcalc.case import load_case
    from pkcalc.demos import demonstration

    v = visit()
    v.open_demonstration("Two steady levels on two doses")
    got = {}
    kinds = ("Note as text", "Note as HTML", "Note as PDF", "Note as JSON", "Case file", "Case file for follow-up")
    for name in kinds:
        with v.page.expect_download() as download:
            v.page.get_by_role("button", name=name, exact=True).click()
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
    later = load_case(got["Case file for follow-up"]).file
    assert later.forecast_then
    assert later.model_copy(update={"forecast_then": ()}) == load_case(case).file
    other = visit()
    other.open_case(case.read_text(encoding="utf-8"))
    text = other.text()
    assert load_case(case).hash in text
    assert "DEMONSTRATION - invented" in text


# --- serving ----------------------------------------------------------------------------------------------


def test_the_page_is_refused_to_other_machines_without_sign_in(browser: Browser, tmp_path: Path) -> None:
    """Started by hand on every address, without `pkcalc form`: no field is shown."""
    with served(browser, tmp_path, "--server.address", "0.0.0.0") as page:
        page.get_by_text("This page refuses to be shown to other machines without sign-in.").wait_for(timeout=40_000)
        assert page.locator("input").count() == 0


SECRETS = """[auth]
redirect_uri = "http://127.0.0.1:1/oauth2callback"
cookie_secret = "a long random text, a long random text"
client_id = "form"
client_secret = "form"
server_metadata_url = "http://127.0.0.1:1/.well-known/openid-configuration"
"""


def test_a_visitor_who_has_not_signed_in_sees_no_field(browser: Browser, tmp_path: Path) -> None:
    """Streamlit's own sign-in, set up as SERVING.md says; on every address, as a department would."""
    (tmp_path / ".streamlit").mkdir()
    (tmp_path / ".streamlit" / "secrets.toml").write_text(SECRETS, encoding="utf-8")
    env = {"HOME": str(tmp_path)}
    with served(browser, tmp_path, "--server.address", "0.0.0.0", env=env) as page:
        page.get_by_text(re.compile("Sign in with your hospital account|the page stays closed")).wait_for(
            timeout=40_000
        )
        assert page.locator("input").count() == 0
        assert "Level" not in page.locator("body").inner_text()


@contextmanager
def served(browser: Browser, folder: Path, *more: str, env: dict[str, str] | None = None) -> Iterator[Any]:
    """A server of its own and a page on it."""
    server, address = start_server(folder / "log.txt", *more, env=env)
    context = browser.new_context()
    try:
        page = context.new_page()
        page.goto(address)
        yield page
    finally:
        context.close()
        server.terminate()
        server.wait(10)


def test_the_log_of_the_server_holds_nothing_of_a_case(pair: Any, server_log: Path) -> None:
    pair.type("Level as reported", "12,5")
    pair.settle()
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
    v.page.locator(".st-key-step-4 .pk-chart").first.wait_for()
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
