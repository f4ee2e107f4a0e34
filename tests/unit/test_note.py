"""The note: page one, the block to paste, HTML, PDF and charts; the same content in each."""

from __future__ import annotations

import base64
import io
import json
import re
from functools import cache
from itertools import pairwise
from pathlib import Path
from statistics import median

import numpy as np
import pytest
from click.testing import CliRunner, Result
from pypdf import PageObject, PdfReader

from pkcalc.cli import cli
from pkcalc.consult import Consult, run_consult
from pkcalc.demos import demonstration, demonstrations
from pkcalc.note.charts import Chart, charts, contours
from pkcalc.note.document import DEMONSTRATION, OVERDOSE, Document, compose
from pkcalc.note.front import PASTE_LINES, PASTE_WIDTH
from pkcalc.note.html import render_html
from pkcalc.note.layout import first_sentence
from pkcalc.note.pdf import render_pdf
from pkcalc.note.text import render
from pkcalc.note.wrapping import wrapped
from tests.unit import cases

SHELF = {"shelf": "united-states"}
PROPOSED = [{"form": "extended-capsule", "amount": "360 mg", "every": "24 h"}]


@cache
def demo(name: str) -> Consult:
    return run_consult(demonstration(name))


@cache
def chosen() -> Consult:
    """A plain case with the pharmacist's choice in their own words."""
    return run_consult(
        cases.plain(
            chosen={"regimen": PROPOSED[0], "words": "small step; seizures come first"}, proposed=PROPOSED, plan=SHELF
        )
    )


@cache
def stopped() -> Consult:
    return run_consult(cases.plain(context={"seizing_now": "yes"}))


def parts(document: Document) -> dict[str, str]:
    return {s.title: "\n".join(s.lines) for s in document.front}


def test_page_one_has_its_parts_in_the_order_of_the_day() -> None:
    assert [s.title for s in compose(chosen()).front] == [
        "Question",
        "Patient's state",
        "Verdict on the level",
        "Chosen regimen",
        "Next level",
        "Valid until",
    ]


def test_the_chosen_regimen_is_an_order_ready_sentence_with_its_danger() -> None:
    text = parts(compose(chosen()))["Chosen regimen"]
    assert text.startswith("phenytoin: 360 mg")
    assert "= 331.2 mg/day as active drug, 2.9 % more than now." in text
    assert "Every dose taken: chance above 30 mg/L or of no steady state" in text
    assert "90 % of the way from today's level takes" in text
    assert "In the pharmacist's words: Small step; seizures come first." in text
    assert "No regimen is chosen yet" not in text


def test_without_a_choice_there_is_a_line_to_write_one_and_the_proposal_is_not_taken_for_it() -> None:
    text = parts(compose(demo("clean-pair")))["Chosen regimen"]
    assert text.startswith("No regimen is chosen yet. Chosen: ____")
    assert "Proposed, not chosen" in text or "Proposed, not offered" in text


def test_the_next_level_has_an_action_line() -> None:
    text = parts(compose(demo("clean-pair")))["Next level"]
    assert re.search(r"^On \d+ [A-Z][a-z]{2} before the \d\d:\d\d dose; above [\d.]+ mg/L as reported", text)
    assert "means rising faster than forecast: call." in text


def test_the_next_level_names_the_tube_and_the_albumin() -> None:
    assert (
        "Draw just before the dose into a tube without gel, with albumin from the same sample; state the time of the "
        "last dose."
    ) in parts(compose(demo("clean-pair")))["Next level"]


def test_until_when_it_holds_and_what_was_ordered_instead() -> None:
    text = parts(compose(chosen()))["Valid until"]
    assert "Valid until the next level" in text
    assert "Ordered instead, and why: ____" in text


def test_a_stop_leaves_page_one_without_a_forecast() -> None:
    document = compose(stopped())
    assert document.cautions[0].severity == "stop"
    front = parts(document)
    assert "No regimen can be forecast: see the stops." in front["Chosen regimen"]
    text = render(document)
    assert "Steady level" not in text.replace("No steady state", "")
    assert text.index("STOP:") < text.index("Question")


def test_the_urgent_line_and_the_marks_stand_on_every_form_of_the_note() -> None:
    consult = demo("over-the-ceiling")
    for text in (render(compose(consult)), render_html(consult)):
        assert f"{consult.profile.urgent} {OVERDOSE}" in " ".join(text.split())
        assert text.count(DEMONSTRATION) == 3  # first, last, and in the block to paste


@pytest.mark.parametrize("consult", [chosen, stopped, lambda: demo("several-levels"), lambda: demo("ethanol-dialysis")])
def test_the_block_to_paste_is_short_and_plain(consult: object) -> None:
    assert callable(consult)
    block = compose(consult()).paste
    assert 4 <= len(block) <= PASTE_LINES
    for line in block:
        assert len(line) <= PASTE_WIDTH
        assert line.isascii()
        assert line.isprintable()
    assert any("pkcalc" in line for line in block[:2])


def test_a_long_paste_block_is_cut_and_says_so() -> None:
    many = [{"form": "extended-capsule", "amount": f"{a} mg", "every": "24 h"} for a in range(400, 590, 10)]
    block = compose(run_consult(cases.plain(proposed=many))).paste
    assert PASTE_LINES - 5 < len(block) <= PASTE_LINES  # cut between statements, never inside one
    assert "[cut here: read the full note]" in block
    assert block[-1] == "Blind re-entry: not done. Read the full note; check every number."


def test_what_was_forecast_then_is_set_beside_what_came() -> None:
    then = [
        {"drawn": "2026-12-01 07:00", "kind": "total", "median": "15 mg/L", "low": "11 mg/L", "high": "19 mg/L"},
        {"drawn": "2026-09-15 07:00", "kind": "total", "median": "8.2 mg/L", "low": "6 mg/L", "high": "11 mg/L"},
        {"drawn": "2026-10-15 07:00", "kind": "total", "median": "8 mg/L", "low": "6 mg/L", "high": "11 mg/L"},
    ]
    section = next(
        s
        for s in compose(run_consult(cases.plain(forecast_then=then))).sections
        if s.title == "What was forecast then, and what came"
    )
    assert section.table is not None
    assert [r[-2:] for r in section.table.rows] == [("8", "inside"), ("20", "above")]


def test_the_target_stands_on_the_laboratory_s_scale_too() -> None:
    question = parts(compose(demo("low-albumin")))["Question"]
    assert (
        "As reported (total as the laboratory reports it at albumin 24 g/L): target 5.8 to 11.6 mg/L, aim 8.7 mg/L, "
        "critical from 17.4 mg/L."
    ) in question
    assert "As reported" not in parts(compose(demo("clean-pair")))["Question"]
    free = [
        {**x, "kind": "free", "value": v} for x, v in zip(cases.PLAIN["levels"], ("0.8 mg/L", "2 mg/L"), strict=True)
    ]
    question = parts(compose(run_consult(cases.plain(levels=free))))["Question"]
    assert "As reported (free level): target 1 to 2 mg/L, aim 1.5 mg/L, critical from 3 mg/L." in question


# --- PDF -----------------------------------------------------------------------------------------------------


@cache
def pdf(name: str) -> PdfReader:
    return PdfReader(io.BytesIO(render_pdf(demo(name))))


PAGES = ("clean-pair", "tube-feed", "load-and-top-up")
EVERY = (*PAGES, *(pytest.param(d.name, marks=pytest.mark.slow) for d in demonstrations() if d.name not in PAGES))


def heights(page: PageObject) -> dict[float, str]:
    """The lines of a page down its left side: height of each and its text."""
    found: dict[float, str] = {}

    def see(text: str, cm: list[float], tm: list[float], *_: object) -> None:
        if text.strip() and text.strip() != "DEMONSTRATION" and tm[4] * cm[0] + cm[4] < 300:
            at = round(tm[5] * cm[3] + cm[5], 1)
            found[at] = found.get(at, "") + text.strip()

    page.extract_text(visitor_text=see)
    return found


@pytest.mark.parametrize("name", EVERY)
def test_no_line_of_page_one_lies_over_another(name: str) -> None:
    lines = heights(pdf(name).pages[0])
    assert len(lines) > 30
    down = sorted(lines, reverse=True)
    usual = median(above - below for above, below in pairwise(down))
    for above, below in pairwise(down):
        assert above - below > 0.7 * usual, (lines[above], lines[below])


@pytest.mark.parametrize("name", EVERY)
def test_no_heading_ends_a_page(name: str) -> None:
    titles = {s.title for s in compose(demo(name)).sections} | {"Charts", "Cautions in full", "To paste into a record"}
    for page in pdf(name).pages:
        lines = heights(page)
        body = [lines[y] for y in sorted(lines, reverse=True) if not lines[y].startswith("pkcalc ")]
        assert body[-1] not in titles


UNIT_FIRST = re.compile(r"(?:%|mg|mg/L|mg/day|mg/h|mL|mL/h|g/L|kg|h|days|day|L/day|PE)(?![\w/])")


@pytest.mark.parametrize("name", EVERY)
def test_no_number_is_parted_from_its_unit(name: str) -> None:
    document = compose(demo(name))
    printed = render(document).splitlines()
    pages = [line for p in pdf(name).pages for line in (p.extract_text() or "").splitlines()]
    for lines in (printed, list(document.paste), pages):
        for above, below in pairwise(lines):
            if re.search(r"\d\)?$", above.strip()) and UNIT_FIRST.match(below.strip()):
                # two cells of a table stand in lines of their own
                assert lines is pages, (above, below)
                assert not re.search(r"[a-z] [\d.,]+$", above.strip()), (above, below)


def test_a_unit_stays_with_its_number() -> None:
    text = "of no steady state is 10 % and 300 mg PE daily, 8.42 (6.74 to 10.3) mg/L in 36 h"
    for width in range(12, 60):
        lines = wrapped(text, width)
        assert " ".join(lines) == text
        assert not any(UNIT_FIRST.match(line) for line in lines), lines


@pytest.mark.parametrize("name", EVERY)
def test_page_one_of_the_pdf_is_one_page(name: str) -> None:
    pages = [p.extract_text() or "" for p in pdf(name).pages]
    front = " ".join(pages[0].split())
    for part in ("Question", "Verdict on the level", "Chosen regimen", "Next level", "Valid until", "Prepared by:"):
        assert part in front, part
    assert "Independently checked by:" in front
    assert "Patient label" in front
    assert pages[1].split("\n")[1].startswith("Annex") or "Annex" in pages[1][:200]
    assert len(pages) <= 14


def test_every_page_of_a_demonstration_is_marked() -> None:
    for page in pdf("clean-pair").pages:
        assert DEMONSTRATION in " ".join((page.extract_text() or "").split())


def test_the_fonts_are_inside_and_the_pdf_is_tagged() -> None:
    reader = pdf("clean-pair")
    fonts = 0
    for page in reader.pages:
        for font in page["/Resources"]["/Font"].values():  # type: ignore[index]
            inner = font.get_object()["/DescendantFonts"][0].get_object()["/FontDescriptor"].get_object()
            assert "/FontFile2" in inner or "/FontFile3" in inner
            fonts += 1
    assert fonts >= 2
    root = reader.trailer["/Root"]
    assert root["/MarkInfo"]["/Marked"]  # type: ignore[index]
    assert root["/Lang"] == "en"  # type: ignore[index]
    assert reader.metadata is not None
    assert reader.metadata.title == "Consult note: phenytoin"


def test_the_pdf_says_what_the_text_says() -> None:
    text = "".join("".join((p.extract_text() or "").split()) for p in pdf("clean-pair").pages)
    document = compose(demo("clean-pair"))
    for section in (*document.front, *document.sections):
        if section.title == "Workings":
            for line in section.lines:
                assert "".join(line.split()) in text, line
    assert "".join(document.versions.split()) in text


def test_the_same_consult_gives_the_same_bytes() -> None:
    assert render_pdf(stopped()) == render_pdf(stopped())


def test_a_note_without_a_demonstration_carries_no_mark() -> None:
    text = render_html(stopped())
    assert "DEMONSTRATION" not in text
    pages = PdfReader(io.BytesIO(render_pdf(stopped()))).pages
    assert all("DEMONSTRATION" not in (p.extract_text() or "") for p in pages)


# --- HTML ----------------------------------------------------------------------------------------------------


def test_the_html_holds_no_address_and_no_script() -> None:
    text = render_html(demo("clean-pair"))
    assert "<script" not in text
    assert re.search(r"""(?:src|href|url\()\s*=?\s*["'(]?(?!data:)(?:https?:|//)""", text) is None
    for picture in re.findall(r"data:image/svg\+xml;base64,([A-Za-z0-9+/=]+)", text):
        svg = base64.b64decode(picture).decode()
        assert "<script" not in svg
        assert re.findall(r'(?:href|src)="(?!#|data:)[^"]*"', svg) == []


def test_what_a_person_typed_is_shown_and_never_read_as_markup() -> None:
    consult = run_consult(
        cases.plain(question='<img src=x onerror="alert(1)"> & #heading[x] \\ $a$', context={"seizing_now": "yes"})
    )
    assert "<img src=x" not in render_html(consult)
    assert "&lt;img src=x" in render_html(consult)
    text = " ".join((PdfReader(io.BytesIO(render_pdf(consult))).pages[0].extract_text() or "").split())
    assert '<img src=x onerror="alert(1)"> & #heading[x] \\ $a$' in text


def test_the_first_sentence_of_a_warning() -> None:
    assert first_sentence("Level 2: 12.5 mg/L is odd. Check it.") == "Level 2: 12.5 mg/L is odd."
    assert first_sentence("No end") == "No end"


# --- charts --------------------------------------------------------------------------------------------------


def made(name: str) -> dict[str, Chart]:
    return {c.name: c for c in charts(demo(name))}


def test_the_four_charts_with_axis_units_and_words_for_those_who_cannot_see_them() -> None:
    found = made("clean-pair")
    assert list(found) == ["record", "plane", "regimens", "narrowing"]
    for chart in found.values():
        assert len(chart.alt) > 80
        assert chart.spec["description"] == chart.alt
        spec = json.dumps(chart.spec)
        assert "mg/L" in spec or chart.name == "narrowing"
        assert '"DEMONSTRATION"' in spec
        titles = set(re.findall(r'"title": "([^"]+)"', spec))
        assert any("(" in t or t in ("Date", "Days from the first dose of the regimen") for t in titles)
    assert "Km (mg/L)" in json.dumps(found["plane"].spec)
    assert "Vmax of active drug (mg/day)" in json.dumps(found["plane"].spec)
    assert "no steady state" in json.dumps(found["regimens"].spec)


def test_field_names_are_plain_so_that_no_chart_is_drawn_empty() -> None:
    for chart in charts(demo("several-levels")):
        for field in re.findall(r'"field": "([^"]+)"', json.dumps(chart.spec)):
            assert re.fullmatch(r"[a-z_]+", field), field
        svg = chart.svg()
        assert svg.count("<path") + svg.count("<circle") > 5
        assert "NaN" not in svg


def test_what_colour_says_a_shape_or_a_dash_says_too() -> None:
    spec = json.dumps(made("clean-pair")["record"].spec)
    assert '"shape"' in spec
    assert '"circle", "square", "triangle-down"' in spec
    assert '"strokeDash"' in json.dumps(made("clean-pair")["plane"].spec)
    assert '"strokeDash"' in json.dumps(made("clean-pair")["regimens"].spec)


def test_a_stopped_consult_draws_no_estimate() -> None:
    assert [c.name for c in charts(stopped())] == ["record"]
    assert "fitted" not in charts(stopped())[0].alt
    assert "the 90 % band the estimate gives" not in charts(stopped())[0].alt


def test_a_contour_holds_its_share_of_the_draws() -> None:
    """Against a normal law on the logs, whose 50 % and 90 % regions are ellipses of known size."""
    random = np.random.default_rng(7)
    x, y = random.standard_normal((2, 6000))
    weights = np.full(6000, 1 / 6000)
    found = contours(np.exp(0.3 * x), np.exp(0.2 * y), weights)
    for share, radius in ((0.5, 1.1774), (0.9, 2.146)):
        (path,) = found[share]
        size = [np.hypot(np.log(a) / 0.3, np.log(b) / 0.2) for a, b in path]
        assert path[0] == path[-1]
        assert np.mean(size) == pytest.approx(radius, rel=0.08)


def test_teaching_pictures_only_in_demonstrations_with_three_or_more_levels() -> None:
    from pkcalc.note.lessons import lesson

    found = lesson(demo("several-levels"))
    assert found is not None
    assert len(found.charts) == 5
    assert found.banner.startswith("For teaching only")
    assert len(found.events) == 5
    assert lesson(demo("clean-pair")) is None
    text = render_html(demo("several-levels"))
    assert "For teaching only" in text
    assert "For teaching only" not in render_html(demo("clean-pair"))


# --- command line --------------------------------------------------------------------------------------------


def run(*args: str) -> Result:
    return CliRunner().invoke(cli, list(args))


def test_the_note_is_written_as_pdf_and_html(tmp_path: Path) -> None:
    for form, start in (("pdf", b"%PDF-"), ("html", b"<!doctype html>")):
        file = tmp_path / f"note.{form}"
        done = run("demo", "tube-feed", "--format", form, "--out", str(file))
        assert f"Written: {file}" in done.stderr
        assert file.read_bytes().startswith(start)


def test_a_pdf_is_never_thrown_at_the_screen() -> None:
    done = run("demo", "tube-feed", "--format", "pdf")
    assert done.exit_code == 2
    assert "A PDF is written to a file: add --out FILE" in done.stderr


def test_the_schema_of_the_note_is_published() -> None:
    done = run("schema", "--note")
    assert json.loads(done.stdout)["title"] == "pkcalc note"
    assert json.loads(run("schema").stdout)["title"] != "pkcalc note"
