"""One server and one browser for all browser tests: a free port, a fresh profile, no network beyond the page."""

from __future__ import annotations

import socket
import subprocess
import sys
import time
import urllib.request
from collections.abc import Iterator
from importlib.util import find_spec
from pathlib import Path

import pytest

playwright_api = pytest.importorskip("playwright.sync_api")

from playwright.sync_api import Browser, Page, Route, sync_playwright  # noqa: E402

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


def start_server(
    log: Path, *more: str, env: dict[str, str] | None = None
) -> tuple[subprocess.Popen[bytes], str]:
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


@pytest.fixture(scope="session")
def strangers() -> list[str]:
    """Every address outside this machine that a page asked for."""
    return []


def open_page(
    browser: Browser,
    address: str,
    strangers: list[str],
    *,
    width: int = 1440,
    height: int = 1000,
    dark: bool = False,
) -> Page:
    """A new browser session on the page, with everything outside this machine cut off."""
    context = browser.new_context(
        viewport={"width": width, "height": height},
        color_scheme="dark" if dark else "light",
        accept_downloads=True,
    )
    page = context.new_page()

    def only_here(route: Route) -> None:
        url = route.request.url
        if url.startswith((address, "data:", "blob:")):
            route.continue_()
        else:
            strangers.append(url)
            route.abort()

    context.route("**/*", only_here)
    page.goto(address)
    page.get_by_label("Why was the level drawn").wait_for(timeout=20_000)
    return page


@pytest.fixture
def page(browser: Browser, address: str, strangers: list[str]) -> Iterator[Page]:
    found = open_page(browser, address, strangers)
    yield found
    found.context.close()
