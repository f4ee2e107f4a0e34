"""Safe display (ISMP, Joint Commission) over everything that is printed of every demonstration case, in every format."""

from __future__ import annotations

import io
import json
import re
from collections.abc import Iterator
from datetime import datetime
from functools import cache
from html import unescape
from pathlib import Path
from typing import Any

import pytest
from pypdf import PdfReader

from pkcalc.acceptance import accept, record_text
from pkcalc.case import dump_case, dump_case_file, read_case_text
from pkcalc.consult import Consult, run_consult
from pkcalc.demos import demonstration, demonstrations
from pkcalc.fhir import load_bundle
from pkcalc.note.charts import charts
from pkcalc.note.data import dumps, note_data
from pkcalc.note.document import compose
from pkcalc.note.html import render_html
from pkcalc.note.pdf import render_pdf
from pkcalc.note.text import render
from pkcalc.reentry import compare, keep
from pkcalc.spreadsheet import COLUMNS
from tests.unit import cases

UNIT = r"(?:mg PE|mg|mcg|g|kg|mL|dL|L|mmol|umol|mg/L|mg/day|mg/h|mL/h|mL/min|days|day|h|min|%|cm|lb)"
RULES: dict[str, str] = {
    "a trailing zero on an amount": rf"(?<![\d.])\d+\.\d*0 {UNIT}(?![\w/])",
    "a number without its leading zero": r"(?<![\d\w.])\.\d",
    "a thousand without its comma": rf"(?<![\d,.\-:])\d{{4,}}(?:\.\d+)? {UNIT}(?![\w])",
    "no space between number and unit": r"(?<![\w.#\-])\d[\d,.]*(?:mg|mcg|mL|kg|mmol|umol|%)(?![\w])",
    "a Greek letter for micro": "[\u00b5\u03bc]",
    "ug for mcg": r"\d ug\b",
    "cc for mL": r"\b\d+ ?cc\b",
    "QD, QOD and the like": r"\b(?:QD|QOD|q\.d\.|q\.o\.d\.|BID|TID|b\.i\.d\.|HS)\b",
    "U for unit": r"\d ?I?U\b",
    "an exponent": r"\d[eE][+-]?\d",
    "a word of the machine": r"\b(?:nan|NaN|None|inf|Infinity|null|undefined|True|False)\b",
    "a placeholder left over": r"[{}]|%s|%d",
    "a dash that is not ASCII": "[\u2010-\u2015\u2212]",
    "a doubled space or stop": r"\.\.(?!\.)|(?<=\w) {1}\.(?=\s)",
    "a time without its day": r"\b\d{1,2}/\d{1,2}/\d{2,4}\b",
}
FIXTURES = Path(__file__).parents[1] / "fixtures"
NAMES = [d.name for d in demonstrations()]
QUICK = ("over-the-ceiling", "toxic-level", "ethanol-dialysis", "child")


@cache
def consult_of(name: str) -> Consult:
    return run_consult(demonstration(name))


def strings(node: Any, key: str = "") -> Iterator[str]:
    if isinstance(node, dict):
        for k, v in node.items():
            if k not in ("inputs", "diagnostics", "version", "results_date") and not k.endswith(("hash", "time", "id")):
                yield from strings(v, k)
    elif isinstance(node, list):
        for v in node:
            yield from strings(v, key)
    elif isinstance(node, str):
        yield node


def printed(consult: Consult, form: str) -> str:
    if form == "text":
        return render(compose(consult))
    if form == "json":
        return "\n".join(strings(json.loads(dumps(note_data(consult)))))
    if form == "html":
        text = render_html(consult)
        text = re.sub(r"<style>.*?</style>", "", text, flags=re.S)
        text = re.sub(r'src="data:[^"]*"', "", text)
        alts = " ".join(re.findall(r'alt="([^"]*)"', text))
        # a space that no line breaks at is a space to the rules
        return unescape(re.sub(r"<[^>]+>", " \n", text) + " " + alts).replace("\u00a0", " ")
    if form == "charts":
        words = []
        for chart in charts(consult):
            words += re.findall(r"<text[^>]*>([^<]*)</text>", chart.svg())
        return unescape("\n".join(words))
    return "\n".join(p.extract_text() or "" for p in PdfReader(io.BytesIO(render_pdf(consult))).pages)


def faults(text: str) -> list[str]:
    """Each rule that is broken, with what stands there."""
    # what is cited, and the fingerprints of files, follow other rules
    text = re.sub(r"\b(?=[a-f]*[0-9])[0-9a-f]{12}\b", "", text)
    found = []
    for rule, pattern in RULES.items():
        for m in re.finditer(pattern, text):
            found.append(f"{rule}: ...{text[max(m.start() - 40, 0) : m.end() + 30]!r}")
    return found


@pytest.mark.parametrize("form", ["text", "json", "html", "charts"])
@pytest.mark.parametrize("name", QUICK)
def test_safe_display(name: str, form: str) -> None:
    assert faults(printed(consult_of(name), form)) == []


@pytest.mark.slow
@pytest.mark.parametrize("form", ["text", "json", "html", "charts", "pdf"])
@pytest.mark.parametrize("name", NAMES)
def test_safe_display_of_everything(name: str, form: str) -> None:
    assert faults(printed(consult_of(name), form)) == []


def test_safe_display_of_a_second_entry_of_a_follow_up_and_of_imports() -> None:
    """What is printed beside the notes: comparisons, records of a re-entry, what came after a forecast, imports."""
    first = cases.plain(proposed=[{"form": "extended-capsule", "amount": "1.25 g", "every": "24 h"}])
    second = cases.plain(levels=cases.levels("8 mg/L", "20 mcg/mL"), patient={"weight": "132 lb"})
    found = compare(cases.plain(), cases.plain(levels=cases.levels("8 mg/L", "12.5 mg/L")))
    kept = read_case_text(dump_case_file(keep(cases.plain(), found, datetime(2026, 12, 1, 9, 5))))
    then = [{"drawn": "2026-12-01 07:00", "kind": "total", "median": "15 mg/L", "low": "11 mg/L", "high": "19 mg/L"}]
    came = run_consult(read_case_text(json.dumps({**json.loads(dump_case(kept)), "forecast_then": then})))
    bundle = load_bundle(FIXTURES / "fhir_orders.json", drug="phenytoin", products={})
    for text in (
        compare(first, second, forecasts=False).text(),
        found.text(),
        printed(came, "text"),
        printed(came, "html"),
        bundle.report(),
        "\n".join(line.text for line in bundle.lines),
        COLUMNS,
    ):
        # what a person or a hospital system wrote is shown as it was written
        own = re.sub(r'"[^"]*"', "it", text)
        assert faults(own) == []


@pytest.mark.slow
def test_safe_display_of_the_self_check() -> None:
    text = record_text(accept())
    # what a source printed stands there with the source's own digits
    its_own = ("a trailing zero on an amount", "a thousand without its comma", "an exponent")
    assert [f for f in faults(text) if not f.startswith(its_own)] == []


@pytest.mark.parametrize(
    ("text", "rule"),
    [
        ("300.0 mg daily", "a trailing zero on an amount"),
        ("give .5 mg", "a number without its leading zero"),
        ("1200 mg", "a thousand without its comma"),
        ("300mg", "no space between number and unit"),
        ("5 % and 5%", "no space between number and unit"),
        ("5 \u00b5g", "a Greek letter for micro"),
        ("300 mg QD", "QD, QOD and the like"),
        ("5 cc", "cc for mL"),
        ("1e-05", "an exponent"),
        ("level nan mg/L", "a word of the machine"),
        ("{level} mg/L", "a placeholder left over"),
        ("5\u201310 mg", "a dash that is not ASCII"),
        ("03/04/2026", "a time without its day"),
    ],
)
def test_each_rule_finds_its_fault(text: str, rule: str) -> None:
    assert any(f.startswith(rule) for f in faults(text))


def test_good_display_passes() -> None:
    assert faults("300 mg daily at 21:00, 1,200 mg once, 0.5 mL, 12.5 mg/L, 5.1 %, every 12 h, 3 Apr 2026 06:10.") == []
