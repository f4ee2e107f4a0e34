"""One server and one browser for all browser tests: a free port, a fresh profile, no network beyond the page."""

from __future__ import annotations

import re
import socket
import subprocess
import sys
import time
import urllib.request
from collections.abc import Callable, Iterator
from importlib.util import find_spec
from pathlib import Path

import pytest
from playwright.sync_api import Browser, Route, sync_playwright
from playwright.sync_api import TimeoutError as PlaywrightTimeout

CHROMIUM = "/usr/bin/chromium"
FLAGS = [
    "--headless",
    "--no-sandbox",
    "--disable-gpu",
    "--disable-quic",
    "--no-first-run",
    "--disable-background-networking",
    "--disable-component-update",
    "--disable-sync",
]
SHOTS = Path(__file__).parents[2] / ".shots"


def free_port() -> int:
    with socket.socket() as s:
        s.bind(("127.0.0.1", 0))
        return int(s.getsockname()[1])


def start_server(log: Path, *more: str, env: dict[str, str] | None = None) -> tuple[subprocess.Popen[bytes], str]:
    """The form as `pkcalc form` starts it, with its settings file found from its own folder."""
    import os

    spec = find_spec("pkcalc_form")
    assert spec is not None
    assert spec.origin is not None
    folder = Path(spec.origin).parent
    port = free_port()
    command = [sys.executable, "-m", "streamlit", "run", str(folder / "page.py"), "--server.port", str(port)]
    with log.open("wb") as out:
        process = subprocess.Popen(
            [*command, *more],
            cwd=folder,
            stdout=out,
            stderr=subprocess.STDOUT,
            env={**os.environ, "OPENBLAS_NUM_THREADS": "1", **(env or {})},
        )
    address = f"http://127.0.0.1:{port}"
    for _ in range(300):
        try:
            with urllib.request.urlopen(f"{address}/_stcore/health", timeout=1) as answer:
                if answer.status == 200:
                    return process, address
        except OSError:
            time.sleep(0.1)
    process.kill()
    raise AssertionError(f"the form did not start: {log.read_text()[-2000:]}")


@pytest.fixture(scope="session")
def server_log(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return tmp_path_factory.mktemp("server") / "log.txt"


@pytest.fixture(scope="session")
def address(server_log: Path) -> Iterator[str]:
    process, url = start_server(server_log)
    yield url
    process.terminate()
    process.wait(10)


@pytest.fixture(scope="session")
def browser() -> Iterator[Browser]:
    with sync_playwright() as p:
        found = p.chromium.launch(executable_path=CHROMIUM, args=FLAGS, headless=True)
        yield found
        found.close()


#: A consult on one level as a pharmacist types it: units with their numbers, dates as read from the chart.
ONE_LEVEL = (
    ("choose", "Drug", "phenytoin"),
    ("answer", "Have there been seizures since the last change of dose?", "no"),
    ("answer", "Are there signs of toxicity", "no"),
    ("type", "Age", "45 years"),
    ("type", "Weight", "70 kg"),
    ("type", "Albumin", "42 g/L"),
    ("type", "Time of this consult", "2026-03-30 10:00"),
    ("type", "Dose, with its unit", "300 mg daily"),
    ("choose", "Product form and salt", "phenytoin sodium"),
    ("type", "First dose", "2026-02-02 21:00"),
    ("choose", "Who gives the doses?", "nurse"),
    ("type", "Level as reported", "9 mg/L"),
    ("choose", "What was measured?", "total"),
    ("type", "Drawn", "2026-03-30 08:00"),
    ("type", "Your own regimen 1", "330 mg daily"),
    ("choose", "Product form and salt of regimen 1", "phenytoin sodium"),
)


class Visit:
    """One person at one browser: what they type, choose and see."""

    def __init__(self, browser: Browser, address: str, width: int, height: int, dark: bool) -> None:
        self.strangers: list[str] = []
        self.context = browser.new_context(
            viewport={"width": width, "height": height},
            color_scheme="dark" if dark else "light",
            accept_downloads=True,
        )
        self.context.set_default_timeout(25_000)
        self.context.route("**/*", self._only_here)
        self.address = address
        self.before = -1  # the run of the page that a press was made on
        self.page = self.context.new_page()
        self.page.goto(address)
        self.ready()

    def _only_here(self, route: Route) -> None:
        """No network: whatever is asked from elsewhere is cut off and remembered."""
        if route.request.url.startswith((self.address, "data:", "blob:")):
            route.continue_()
        else:
            self.strangers.append(route.request.url)
            route.abort()

    def ready(self) -> None:
        self.page.get_by_label("Why was the level drawn").wait_for(timeout=40_000)

    def settle(self) -> None:
        """Wait until the server has answered what was done last, and the page stands still."""
        self.page.wait_for_function(
            """before => { const a = document.querySelector('[data-testid="stApp"]');
                const mark = document.querySelector('.pk-read');
                return a && mark && a.getAttribute('data-test-script-state') === 'notRunning'
                    && Number(mark.getAttribute('data-run')) > before
                    && !document.body.classList.contains('pk-typing'); }""",
            arg=self.before,
        )
        self.before = -1

    def acts(self) -> None:
        """What comes next makes the server run anew."""
        self.before = int(self.page.locator(".pk-read").get_attribute("data-run") or -1)

    def type(self, label: str, value: str, place: int = 0) -> None:
        field = self.page.get_by_label(label, exact=True).nth(place)
        field.fill(value)
        field.press("Tab")

    def choose(self, label: str, option: str, place: int = 0) -> None:
        """Choose from a list; where an answer of the server closes the list, open it again, as a person would."""
        field, wanted = (
            self.page.get_by_role("combobox", name=label).nth(place),
            self.page.get_by_role("option", name=option, exact=True),
        )
        for _ in range(4):
            self.settle()
            field.click()
            try:
                wanted.click(timeout=1_500)
                return
            except PlaywrightTimeout:
                field.press("Escape")
        raise AssertionError(f"{option} cannot be chosen for {label}")

    def press(self, name: str, place: int = 0) -> None:
        self.settle()
        self.acts()
        self.page.get_by_role("button", name=name).nth(place).click()
        self.settle()

    def open_case(self, text: str, *, stopped: bool = False) -> None:
        """Open a case file from the page; stopped: one that gives no result yet."""
        self.unfold("Open a demonstration or a case file")
        self.acts()
        file = {"name": "case.json", "mimeType": "application/json", "buffer": text.encode()}
        self.page.locator("input[type=file]").set_input_files(file)
        self.settle()
        if not stopped:
            self.page.get_by_text(re.compile(r"Case [0-9a-f]{12}")).first.wait_for()

    def unfold(self, title: str) -> None:
        """Open a folded question."""
        summary = self.page.locator("summary").filter(has_text=title).first
        if summary.evaluate("e => !e.parentElement.open"):
            summary.click()
        self.settle()

    def text(self) -> str:
        self.settle()
        return " ".join(self.page.locator("[data-testid=stMain]").inner_text().split())

    def open_demonstration(self, title: str) -> None:
        self.unfold("Open a demonstration or a case file")
        self.choose("Demonstration", title)
        self.press("Open it")
        self.page.get_by_text("DEMONSTRATION - invented").first.wait_for()
        self.settle()

    def enter_pair(self, first: str, second: str, *, unit: str = "mg/L", form: str = "phenytoin sodium") -> None:
        """300 and 350 mg daily with two steady levels, no dates."""
        self.choose("Drug", "phenytoin")
        self.press("Add a dose line")
        self.press("Add a level")
        for place, (dose, level) in enumerate((("300 mg daily", first), ("350 mg daily", second))):
            self.type("Dose, with its unit and how often", dose, place)
            self.choose("Product form and salt", form, place)
            self.type("Level as reported", level, place)
            self.choose("Unit of the level", unit, place)
            self.choose("What was measured?", "total", place)
            self.choose("Dose line in force", f"dose line {place + 1}", place)
        self.settle()

    def unfold_all(self) -> None:
        """Open every folded part of the page, those within others too."""
        for _ in range(5):
            shut = self.page.evaluate(
                """() => { const found = document.querySelectorAll('[data-testid="stMain"] details:not([open]) > summary');
                    found.forEach(x => x.click()); return found.length; }"""
            )
            self.settle()
            if not shut:
                return

    # --- the keyboard alone ---

    def tab_to(self, name: str, most: int = 200) -> None:
        """Press Tab until the field or button of this name has the keyboard."""
        for _ in range(most):
            self.page.keyboard.press("Tab")
            here = self.page.evaluate(
                """() => { const e = document.activeElement; if (!e || e.closest('.stTooltipIcon')) return '';
                    const label = e.labels && e.labels.length ? e.labels[0].innerText : '';
                    const group = e.closest('[role="radiogroup"]');
                    return [e.getAttribute('aria-label') || '', label, e.tagName === 'BUTTON' ? e.innerText : '',
                        group ? group.getAttribute('aria-label') || '' : ''].join('|'); }"""
            )
            if name in here:
                return
        raise AssertionError(f"{name} cannot be reached with the keyboard")

    def key_in(self, name: str, value: str) -> None:
        self.tab_to(name)
        self.page.keyboard.type(value)

    def key_choose(self, name: str, letters: str) -> None:
        """Type the first letters of an option and take it with Enter."""
        self.tab_to(name)
        self.settle()
        self.page.keyboard.type(letters)
        option = self.page.get_by_role("option")
        try:
            option.first.wait_for(timeout=3_000)
        except PlaywrightTimeout:  # an answer of the server closed the list
            self.page.keyboard.type(letters)
            option.first.wait_for()
        self.page.keyboard.press("Enter")
        self.settle()

    def key_answer(self, question: str, answer: str) -> None:
        """A question of three answers: the first by the space bar, the others by the arrow."""
        self.tab_to(question)
        self.page.keyboard.press("Space")
        for _ in range(("yes", "no", "unknown").index(answer)):
            self.page.keyboard.press("ArrowRight")
        self.settle()

    def one_level_consult(self) -> int:
        """A consult on one level, from an empty page to the danger of a regimen of one's own; by keyboard alone.
        Returns how many entries it took: each text, choice or answer is one."""
        done = 0
        for what, name, value in ONE_LEVEL:
            {"type": self.key_in, "choose": self.key_choose, "answer": self.key_answer}[what](name, value)
            done += 1
        self.page.keyboard.press("Tab")
        self.settle()
        return done

    def shoot(self, name: str, height: int = 4500) -> Path:
        """A picture of the whole page: the page scrolls inside its own box, so the window is made tall."""
        SHOTS.mkdir(exist_ok=True)
        size = self.page.viewport_size
        assert size is not None
        self.page.set_viewport_size({"width": size["width"], "height": height})
        self.settle()
        path = SHOTS / f"{name}.png"
        self.page.screenshot(path=path)
        self.page.set_viewport_size(size)
        return path


@pytest.fixture
def visit(browser: Browser, address: str) -> Iterator[Callable[..., Visit]]:
    """Opens a new session of the page; all are closed afterwards and none may have asked another machine."""
    opened: list[Visit] = []

    def start(*, width: int = 1440, height: int = 1000, dark: bool = False) -> Visit:
        opened.append(Visit(browser, address, width, height, dark))
        return opened[-1]

    yield start
    for one in opened:
        one.context.close()
    assert [url for one in opened for url in one.strangers] == []
