"""From a change to the new number, in a real browser: `python tests/bench/bench_form.py [ROUNDS]`.

Prints the wall time from leaving a field to the new answer on the page, beside the same consult run in this process
just before, so that the ratio holds on a slow and on a busy machine alike; the same for a value that was there before
and for words alone, which work nothing out anew; and the time of a whole consult on one level by keyboard alone, typed
without a pause for thought.
"""

from __future__ import annotations

import importlib.util
import statistics
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

from playwright.sync_api import sync_playwright

from pkcalc.case import parse_case_text
from pkcalc.consult import run_consult
from pkcalc.demos import demonstration

spec = importlib.util.spec_from_file_location("browser_tools", Path(__file__).parents[1] / "browser" / "conftest.py")
assert spec is not None
assert spec.loader is not None
tools: Any = importlib.util.module_from_spec(spec)
spec.loader.exec_module(tools)


def main(rounds: int) -> None:
    case = demonstration("clean-pair")
    run_consult(case)
    with tempfile.TemporaryDirectory() as folder, sync_playwright() as p:
        server, address = tools.start_server(Path(folder) / "log.txt")
        try:
            browser = p.chromium.launch(executable_path=tools.CHROMIUM, args=tools.FLAGS, headless=True)
            start = time.perf_counter()
            visit = tools.Visit(browser, address, 1440, 1000, False)
            print(f"first page {time.perf_counter() - start:.2f} s")
            visit.open_demonstration(case.file.demonstration.title)
            visit.unfold("What was measured?")
            field = visit.page.get_by_label("Level as reported", exact=True).nth(1)
            answer = visit.page.locator(".st-key-result-estimate .pk-answer")
            page, alone = [], []
            for n in range(rounds):
                other = parse_case_text(demonstration_text().replace("11.2 mg/L", f"{12 + n / 10:g} mg/L"))
                begin = time.perf_counter()
                run_consult(tools_check(other))
                alone.append(time.perf_counter() - begin)
                old = answer.inner_text()
                field.fill(f"{12 + n / 10:g}")
                begin = time.perf_counter()
                field.press("Tab")
                visit.page.wait_for_function(
                    """old => { const e = document.querySelector('.st-key-result-estimate .pk-answer');
                        return e && e.innerText !== old && !document.body.classList.contains('pk-typing'); }""",
                    arg=old,
                )
                page.append(time.perf_counter() - begin)
            again, words = [], []
            for n in range(rounds):
                again.append(changed(visit, field, f"{12 + (n + 1) % min(rounds, 5) / 10:g}"))
                question = visit.page.get_by_label("Your own words on the note")
                words.append(changed(visit, question, f"words {n}"))
            print(f"change to new number, median of {rounds}: {statistics.median(page):.2f} s on the page")
            print(f"the consult alone:                     {statistics.median(alone):.2f} s in this process")
            print(f"a value that was there before:         {statistics.median(again):.2f} s on the page")
            print(f"words alone:                           {statistics.median(words):.2f} s on the page")
            start = time.perf_counter()
            entries = tools.Visit(browser, address, 1440, 1000, False).one_level_consult()
            print(
                f"one level, {entries} entries by keyboard:    {time.perf_counter() - start:.1f} s, typed without a pause"
            )
            print(f"ratio {statistics.median(page) / statistics.median(alone):.2f}")
            browser.close()
        finally:
            server.terminate()


def changed(visit: Any, field: Any, value: str) -> float:
    """Seconds from leaving a field to a page that has read it and stands still."""
    field.fill(value)
    begin = time.perf_counter()
    field.press("Tab")
    visit.settle()
    return time.perf_counter() - begin


def demonstration_text() -> str:
    from pkcalc.demos import demonstrations

    return next(d.text for d in demonstrations() if d.name == "clean-pair")


def tools_check(file: Any) -> Any:
    from pkcalc.case import check_case

    return check_case(file)


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 7)
