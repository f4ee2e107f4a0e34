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
        """Wait until the server has answered and the page stands still."""
        self.page.wait_for_timeout(120)
        self.page.wait_for_function(
            """() => { const a = document.querySelector('[data-testid="stApp"]');
                return a && a.getAttribute('data-test-script-state') === 'notRunning'
                    && !document.body.classList.contains('pk-typing'); }"""
        )

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
        self.page.get_by_role("button", name=name).nth(place).click()

    def open_case(self, text: str) -> None:
        """Open a case file from the page."""
        self.page.get_by_text("Open a demonstration or a case file").click()
        file = {"name": "case.json", "mimeType": "application/json", "buffer": text.encode()}
        self.page.locator("input[type=file]").set_input_files(file)
        self.page.get_by_text(re.compile(r"Case [0-9a-f]{12}")).first.wait_for()
        self.settle()

    def unfold(self, title: str) -> None:
        """Open a folded question."""
        fold = self.page.locator("details").filter(has=self.page.locator("summary").filter(has_text=title)).first
        if fold.get_attribute("open") is None:
            fold.locator("summary").first.click()
        self.settle()

    def text(self) -> str:
        self.settle()
        return " ".join(self.page.locator("[data-testid=stMain]").inner_text().split())

    def open_demonstration(self, title: str) -> None:
        self.page.get_by_text("Open a demonstration or a case file").click()
        self.choose("Demonstration", title)
        self.press("Open it")
        self.page.get_by_text("DEMONSTRATION - invented").first.wait_for()
        self.settle()

    def enter_pair(self, first: str, second: str, *, unit: str = "mg/L", form: str = "phenytoin sodium") -> None:
        """300 and 350 mg daily with two steady levels, no dates."""
        self.choose("Drug", "phenytoin")
        self.press("Add a dose line")
        self.press("Add a level")
        self.page.get_by_text("Level 2", exact=True).wait_for()
        for place, (dose, level) in enumerate((("300 mg daily", first), ("350 mg daily", second))):
            self.type("Dose, with its unit and how often", dose, place)
            self.choose("Product form and salt", form, place)
            self.type("Level as reported", level, place)
            self.choose("Unit of the level", unit, place)
            self.choose("What was measured?", "total", place)
            self.choose("Dose line in force", f"dose line {place + 1}", place)
        self.settle()

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
