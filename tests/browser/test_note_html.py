"""The HTML note in a real browser with the network off: nothing fetched, no console error, accessible."""

from __future__ import annotations

from pathlib import Path

import pytest
from axe_playwright_python.sync_playwright import Axe
from playwright.sync_api import Browser, Page

from pkcalc.consult import run_consult
from pkcalc.demos import demonstration
from pkcalc.note.html import render_html

pytestmark = pytest.mark.browser


@pytest.fixture(scope="module", params=["over-the-ceiling", "several-levels", "ethanol-dialysis"])
def note(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Path:
    file = tmp_path_factory.mktemp("note") / "note.html"
    file.write_text(render_html(run_consult(demonstration(request.param))), encoding="utf-8")
    return file


def opened(browser: Browser, note: Path) -> tuple[Page, list[str], list[str]]:
    context = browser.new_context(offline=True, viewport={"width": 1100, "height": 1400})
    page = context.new_page()
    said: list[str] = []
    asked: list[str] = []
    page.on("console", lambda message: said.append(f"{message.type}: {message.text}"))
    page.on("pageerror", lambda error: said.append(str(error)))
    page.on("request", lambda request: asked.append(request.url))
    page.goto(note.as_uri())
    page.wait_for_load_state("load")
    return page, said, asked


def test_the_note_opens_without_network_or_complaint(browser: Browser, note: Path) -> None:
    page, said, asked = opened(browser, note)
    assert said == []
    assert [url.split(":")[0] for url in asked if not url.startswith("data:")] == ["file"]
    pictures = page.locator("figure img")
    assert pictures.count() >= 1
    for i in range(pictures.count()):
        # drawn, not an empty frame
        assert pictures.nth(i).evaluate("x => x.complete && x.naturalWidth > 200 && x.naturalHeight > 60")
        assert len(pictures.nth(i).get_attribute("alt") or "") > 60
    assert page.locator(".demonstration").count() == 2
    assert page.locator(".mark").count() == 1
    page.context.close()


def test_the_note_has_no_serious_accessibility_fault(browser: Browser, note: Path) -> None:
    page, _, _ = opened(browser, note)
    found = Axe().run(page).response["violations"]
    serious = [
        (v["id"], [n["html"][:120] for n in v["nodes"]][:3]) for v in found if v["impact"] in ("serious", "critical")
    ]
    assert serious == []
    page.context.close()


def test_the_note_prints_with_the_annex_on_a_new_page(browser: Browser, note: Path) -> None:
    import io

    from pypdf import PdfReader

    page, _, _ = opened(browser, note)
    pages = PdfReader(io.BytesIO(page.pdf(format="A4"))).pages
    assert "Question" in (pages[0].extract_text() or "")
    assert "Sources used" not in (pages[0].extract_text() or "")
    page.context.close()
