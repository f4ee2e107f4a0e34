"""The page through Streamlit's own harness: what is typed, what is shown, what is not shown."""

from __future__ import annotations

import base64
import logging
import re
from html import unescape
from importlib.util import find_spec
from pathlib import Path
from typing import Any

import pytest
from pkcalc_form import consultation
from streamlit.testing.v1 import AppTest

_SPEC = find_spec("pkcalc_form")
assert _SPEC is not None
assert _SPEC.origin is not None
PAGE = Path(_SPEC.origin).with_name("page.py")

# Winter ME, Basic Clinical Pharmacokinetics, phenytoin chapter; value from memory: 300 and 350 mg/day of
# phenytoin sodium (salt factor 0.92) with steady levels of 8 and 20 mg/L: Km 2.5 mg/L, Vmax about 362 mg/day.
PAIR: dict[str, str] = {
    "drug": "phenytoin",
    "dose.1.said": "300 mg daily",
    "dose.1.form": "sodium",
    "dose.2.said": "350 mg daily",
    "dose.2.form": "sodium",
    "level.1.value": "8",
    "level.1.unit": "mg/L",
    "level.1.kind": "total",
    "level.1.on_dose": "1",
    "level.2.value": "20",
    "level.2.unit": "mg/L",
    "level.2.kind": "total",
    "level.2.on_dose": "2",
}


def start() -> AppTest:
    return AppTest.from_file(str(PAGE), default_timeout=30).run()


def shown(at: AppTest) -> str:
    """Everything on the page as plain text."""
    parts = [
        unescape(re.sub(r"<[^>]+>", " ", re.sub(r"</?span[^>]*>", "", h.body)))
        for h in at.get("html")
        if "<style>" not in h.body and "<script>" not in h.body
    ]
    parts += [e.label for e in at.expander]
    return re.sub(r"\s+", " ", " ".join(parts))


def plain_labels(at: AppTest) -> str:
    """The sentences to which the questions fold."""
    return " ".join(e.label.replace("\\", "") for e in at.expander)


def enter(at: AppTest, values: dict[str, Any]) -> AppTest:
    for kind in ("dose", "level"):
        wanted = max((int(k.split(".")[1]) for k in values if k.startswith(f"{kind}.")), default=1)
        while len(at.session_state[f"{kind}_rows"]) < wanted:
            at.button(key=f"add-{kind}").click().run()
    for key, value in values.items():
        if key.endswith("on_dose") or key == "dose.1.form":
            at.run()  # the choices follow from what was entered before
        widgets: list[Any] = [*at.text_input, *at.selectbox, *at.radio, *at.text_area, *at.multiselect]
        widget = next(w for w in widgets if w.key == key)
        if isinstance(value, list):
            widget.set_value(value)
        elif hasattr(widget, "select"):
            widget.select(value)
        elif hasattr(widget, "input"):
            widget.input(value)
        else:
            widget.set_value(value)
    at.run()
    assert not at.exception
    return at


def open_demonstration(name: str) -> AppTest:
    at = start()
    at.selectbox(key="demo_name").select(name).run()
    at.button(key="open-demo").click().run()
    assert not at.exception
    return at


def beside(at: AppTest) -> list[str]:
    """What stands beside fields: to mend, or still needed."""
    found = [h.body for h in at.get("html") if 'class="pk-wrong"' in h.body or 'class="pk-needed"' in h.body]
    return [re.sub(r"\s+", " ", unescape(re.sub(r"<[^>]+>", "", b))) for b in found]


def tables(at: AppTest) -> list[str]:
    return [h.body for h in at.get("html") if "<table" in h.body]


NUMBER_WITH_UNIT = re.compile(r"(?:Vmax|Km) [\d.,]+ m")


def test_empty_page_shows_no_number_of_a_patient_and_chooses_nothing() -> None:
    at = start()
    assert all(not t.value for t in at.text_input)
    assert all(s.value is None for s in at.selectbox)
    assert all(r.value is None for r in at.radio)
    text = shown(at)
    assert "Active status epilepticus is treated by your protocol at once" in text
    assert "Your local protocol comes first" in text
    assert "No numbers yet." in text
    assert not NUMBER_WITH_UNIT.search(text)


def test_published_pair_gives_the_published_answer() -> None:
    text = shown(enter(start(), PAIR))
    assert "Km 2.5 mg/L" in text
    assert re.search(r"Vmax 362(\.\d)? mg/day of active drug", text)
    assert "Read as 300 mg phenytoin sodium daily = 276 mg/day of active drug; taken as given." in text


def test_the_answer_follows_the_form() -> None:
    """The same figures as phenytoin acid: Vmax 362.25 / 0.92 = 393.75, Km unchanged (salt factor applied once)."""
    text = shown(enter(start(), PAIR | {"dose.1.form": "acid", "dose.2.form": "acid"}))
    assert "Km 2.5 mg/L" in text
    assert "Vmax 393.8 mg/day of active drug" in text


def test_impossible_pair_shows_the_reason_and_no_number() -> None:
    at = enter(start(), PAIR | {"level.2.value": "9"})
    text = shown(at)
    assert "a level must rise more than in proportion to the dose, so Km cannot be found" in text
    assert not NUMBER_WITH_UNIT.search(text)
    assert not tables(at)


def test_a_comma_is_refused_beside_its_field_and_never_read_as_125() -> None:
    at = enter(start(), PAIR | {"level.1.value": "12,5"})
    assert (
        'Mend: Level 1: "12,5" was given. Allowed: a plain number such as 12.5 or 1250. A comma can be a decimal point '
        "or a thousands mark: write 12.5 or 12500 without a comma."
    ) in beside(at)
    text = shown(at)
    assert "No numbers yet." in text
    assert not NUMBER_WITH_UNIT.search(text)
    assert "125 mg" not in text


@pytest.mark.parametrize(
    ("key", "value", "said"),
    [
        ("dose.1.said", "300 daily", "Dose line 1, amount"),
        ("dose.1.said", "300 mg", "it is not clear how often"),
        ("dose.2.from", "03/04/2026", "Dose line 2, from"),
        ("level.2.value", "2000", "Level 2"),
        ("level.1.drawn", "yesterday", "Level 1, drawn"),
        ("weight", "-70", "Weight"),
        ("albumin", "4.4", "Albumin"),
        ("target_low", "10", "Target, low"),
        ("aim", "1_0", "Aim"),
        ("own.1.said", "200 mg + 100 mg every 12 h", "Proposed regimen 1"),
    ],
)
def test_a_problem_takes_every_result_away_and_stands_beside_its_field(key: str, value: str, said: str) -> None:
    at = enter(start(), PAIR)
    assert NUMBER_WITH_UNIT.search(shown(at))
    assert tables(at)
    enter(at, {key: value})
    assert any(said in line and line.startswith("Mend") for line in beside(at)), beside(at)
    text = shown(at)
    assert not NUMBER_WITH_UNIT.search(text)
    assert not tables(at)
    assert "No numbers yet." in text


@pytest.mark.parametrize("key", ["dose.1.form", "level.1.kind", "level.1.unit", "dose.1.said"])
def test_what_a_person_must_know_is_asked_for_and_never_filled_in(key: str) -> None:
    values = {k: v for k, v in PAIR.items() if k != key}
    at = enter(start(), values)
    assert any(line.startswith("Still needed") or "no unit was given" in line for line in beside(at)), beside(at)
    assert not NUMBER_WITH_UNIT.search(shown(at))


def test_a_unit_switch_changes_the_meaning_and_not_the_text() -> None:
    """40 umol/L is 10.1 mg/L with the molar mass 252.27 g/mol; the figure in the field stays."""
    at = enter(start(), PAIR | {"level.2.value": "79.28"})
    enter(at, {"level.2.unit": "umol/L", "level.1.value": "31.71", "level.1.unit": "umol/L"})
    assert at.text_input(key="level.2.value").value == "79.28"
    text = shown(at)
    assert "Km 2.5 mg/L" in text  # 31.71 and 79.28 umol/L are 8 and 20 mg/L
    assert "Vmax 362" in text


def test_a_proposed_dose_moves_the_preview() -> None:
    """Css = Km R / (Vmax - R) = 2.5 x 303.6 / (362.25 - 303.6) = 12.9 mg/L at the closed form; the median of the
    draws, which the page shows, lies within 3 % of it."""
    at = enter(start(), PAIR | {"own.1.said": "330 mg daily", "own.1.form": "sodium"})
    found = re.search(r"5 · What could be given next\?\*\* 330 mg[^:]*: total ([0-9.]+) ", plain_labels(at))
    assert found is not None
    assert float(found.group(1)) == pytest.approx(12.94, rel=0.03)
    enter(at, {"own.1.said": "400 mg daily"})
    assert "no steady state" in plain_labels(at)
    assert f"total {found.group(1)} " not in plain_labels(at)


def test_a_regimen_in_words_is_echoed_with_what_was_taken_for_granted() -> None:
    at = enter(start(), PAIR | {"own.1.said": "200 mg + 100 mg", "own.1.form": "sodium"})
    text = shown(at)
    assert "Taken as 200 mg at 08:00 and 100 mg at 20:00. Write other times if they differ." in text
    assert re.search(r"Read as 200 mg at 08:00 and 100 mg at 20:00 [a-z ]*= 276 mg/day of active drug", text)


def test_a_target_of_ones_own_moves_the_table() -> None:
    at = enter(start(), PAIR | {"weight": "70", "weight_unit": "kg"})
    assert "Target 10 to 20 mg/L" in shown(at)
    enter(at, {"target_low": "8 mg/L", "target_high": "12 mg/L", "aim": "10 mg/L"})
    assert "Target 8 to 12 mg/L, aim 10 mg/L" in shown(at)


@pytest.mark.slow
def test_charts_carry_the_mark_of_a_demonstration_and_words(real_charts: None) -> None:
    at = open_demonstration("clean-pair")
    pictures = [h.body for h in at.get("html") if "pk-chart" in h.body and "<img" in h.body]
    assert len(pictures) == 4
    for picture in pictures:
        data = re.search(r"base64,([^\"]+)", picture)
        assert data is not None
        assert b"DEMONSTRATION" in base64.b64decode(data.group(1))
        assert re.search(r'alt="[^"]{40,}', picture)


def test_demonstration_wears_banner_and_watermark_and_stays_one_when_edited() -> None:
    at = open_demonstration("clean-pair")
    for _ in range(2):
        assert "DEMONSTRATION - invented, not a patient, not for clinical use" in shown(at)
        assert any("pk-mark" in h.body for h in at.get("html"))
        at.toggle(key="ask-whole_note").set_value(True).run()
        note = next(h.body for h in at.get("html") if "<pre" in h.body)
        assert "*" * 100 in note
        assert note.count("DEMONSTRATION - invented") >= 2
        enter(at, {"weight": "72"})
    at.button(key="forget").click().run()
    assert "DEMONSTRATION - invented" not in shown(at)
    assert all(not t.value for t in at.text_input)


def test_a_stop_hides_the_numbers() -> None:
    at = enter(open_demonstration("clean-pair"), {"ctx.seizing_now": "yes"})
    text = shown(at)
    assert "STOP The patient is seizing now." in text
    assert not NUMBER_WITH_UNIT.search(text)
    assert not tables(at)


def test_only_stops_and_warnings_are_pinned() -> None:
    at = open_demonstration("contradictory-pair")
    pinned = next(h.body for h in at.get("html") if "pk-cautions" in h.body)
    assert "<b>STOP</b>" in pinned or "<b>WARNING</b>" in pinned
    assert "NOTE" not in pinned


def test_a_fault_shows_that_the_calculation_stopped_and_logs_nothing_of_the_patient(
    monkeypatch: pytest.MonkeyPatch, caplog: pytest.LogCaptureFixture
) -> None:
    def broken(*_: object, **__: object) -> None:
        raise ZeroDivisionError("weight 70 kg, level 8 mg/L")

    at = enter(start(), PAIR)
    monkeypatch.setattr(consultation, "run_consult", broken)
    with caplog.at_level(logging.DEBUG, logger="pkcalc_form"):
        enter(at, {"weight": "70", "weight_unit": "kg"})
    text = shown(at)
    assert "The calculation stopped. No number is shown." in text
    assert not NUMBER_WITH_UNIT.search(text)
    assert "ZeroDivisionError at test_page.py" in caplog.text or "ZeroDivisionError" in caplog.text
    assert "70 kg" not in caplog.text


def test_a_fault_while_showing_a_result_takes_the_result_away(monkeypatch: pytest.MonkeyPatch) -> None:
    def broken(*_: object, **__: object) -> None:
        raise KeyError("20 mg/L")

    monkeypatch.setattr(consultation.tell, "estimates_table", broken)
    text = shown(enter(start(), PAIR))
    assert "The calculation stopped. No number is shown." in text
    assert "20 mg/L'" not in text


def test_two_sessions_share_nothing() -> None:
    one, other = enter(start(), PAIR), start()
    assert "Km 2.5 mg/L" in shown(one)
    assert "No numbers yet." in shown(other.run())
    assert not NUMBER_WITH_UNIT.search(shown(other))


def test_consults_are_kept_within_the_session_and_not_without_end(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(consultation, "KEPT", 3)
    at = enter(start(), PAIR)
    for n in range(4):
        enter(at, {"level.2.value": f"{20 + n}"})
    assert len(at.session_state["kept"]) == 3


def test_a_change_of_words_alone_works_nothing_out_anew(monkeypatch: pytest.MonkeyPatch) -> None:
    at = enter(start(), PAIR)
    calls: list[int] = []
    real = consultation.run_consult
    monkeypatch.setattr(consultation, "run_consult", lambda *a, **k: (calls.append(1), real(*a, **k))[1])
    enter(at, {"question": "Is there room for more?", "own_words": "No change today."})
    assert calls == []
    assert "Is there room for more?" in shown(at)
    enter(at, {"level.2.value": "21"})
    assert calls == [1]


def test_what_is_typed_is_shown_as_typed_and_never_as_markup() -> None:
    at = enter(start(), PAIR | {"question": "<b onclick='x()'>*50* $1$</b> [a](b)", "dose.1.missed": "<i>x</i>"})
    bodies = "".join(h.body for h in at.get("html"))
    assert "<b onclick" not in bodies
    assert "<i>x" not in bodies
    enter(at, {"dose.1.missed": ""})
    bodies = "".join(h.body for h in at.get("html"))
    assert "<b onclick" not in bodies
    assert "&lt;b onclick" in bodies


SAFE = (
    (re.compile(r"(?<![\d.])\.\d"), "a leading zero"),
    (re.compile(r"\b\d+\.\d*0 mg\b"), "no trailing zero on a dose"),
    (re.compile(r"\d(?:mg|mL|kg)\b"), "a space before the unit"),
    (re.compile(r"\b\d{4,} mg"), "a comma from 1,000"),
    (re.compile("\u00b5g|\u03bcg|\\bcc\\b|\\bq\\.?d\\b|\\bbid\\b", re.I), "no unsafe abbreviation"),
)


@pytest.mark.parametrize("name", ["over-the-ceiling", "load-and-top-up"])
def test_the_screen_holds_no_unsafe_display(name: str) -> None:
    text = shown(open_demonstration(name)).replace("\\", "")
    for pattern, rule in SAFE:
        assert not pattern.search(text), (rule, pattern.findall(text)[:5])
