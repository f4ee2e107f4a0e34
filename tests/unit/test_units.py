"""The units door: what is read, what is refused and in which words, what is shown."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pkcalc import units
from pkcalc.errors import CaseError

MOLAR = 252.27


def refusal(text: str, kind: str = "level", **more: Any) -> str:
    with pytest.raises(CaseError) as refused:
        units.read(text, kind, "Level 1", **more)
    (problem,) = refused.value.problems
    return problem.text


@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("8 mg/L", "level", 8),
        ("8mg/L", "level", 8),
        ("8 mcg/mL", "level", 8),
        ("0.8 mg/dL", "level", 8),
        ("40 umol/L", "level", 40 * MOLAR / 1000),
        ("29 g/L", "albumin", 29),
        ("2.9 g/dL", "albumin", 29),
        ("70 kg", "weight", 70),
        ("154 lb", "weight", 154 * 0.45359237),
        ("170 cm", "height", 170),
        ("67 in", "height", 170.18),
        ("300 mg", "amount", 300),
        ("0.3 g", "amount", 300),
        ("300 mg/day", "dose rate", 300),
        ("5 mg/kg/day", "dose rate per weight", 5),
        ("1250 mg", "amount", 1250),
        ("1,250.5 mg", "amount", 1250.5),
        ("1,250,000 mg", "amount", 1_250_000),
        (".5 g", "amount", 500),
        ("45 years", "age", 45),
        ("8 months", "age", 8 / 12),
        ("24 h", "duration", 1),
        ("30 min", "duration", 30 / 1440),
        ("120 mL/min", "clearance", 172.8),
    ],
)
def test_what_is_read(text: str, kind: str, value: float) -> None:
    typed = units.read(text, kind, "X", molar_mass_g_per_mol=MOLAR)
    assert typed.value == pytest.approx(value, rel=1e-9)
    assert typed.text == text


LEVEL_LABELS = "mg/L or mcg/mL or mg/dL or g/L"
NUMBER = "a plain number such as 12.5 or 1250"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("8", f"Level 1: no unit was given. Allowed: {LEVEL_LABELS}. Give one of these units."),
        ("8 kg", f'Level 1: the unit "kg" was given. Allowed: {LEVEL_LABELS}. Give one of these units.'),
        (
            "8 MG/L",
            f'Level 1: the unit "MG/L" was given. Allowed: {LEVEL_LABELS}. Write "mg/L": capital and small letters matter.',
        ),
        ("nan mg/L", f'Level 1: "nan" was given. Allowed: {NUMBER}. Use digits and one decimal point only.'),
        ("inf mg/L", f'Level 1: "inf" was given. Allowed: {NUMBER}. Use digits and one decimal point only.'),
        ("1_000 mg/L", f'Level 1: "1_000" was given. Allowed: {NUMBER}. Use digits and one decimal point only.'),
        ("1e999 mg/L", f'Level 1: "1e999" was given. Allowed: {NUMBER}. Use digits and one decimal point only.'),
        ("1e2 mg/L", f'Level 1: "1e2" was given. Allowed: {NUMBER}. Use digits and one decimal point only.'),
        (
            "-3 mg/L",
            'Level 1: "-3" was given. Allowed: a number of 0 or more. Check the number: it cannot be negative.',
        ),
        ("+3 mg/L", f'Level 1: "+3" was given. Allowed: {NUMBER}. Leave out the plus sign.'),
        ("0 mg/L", 'Level 1: "0 mg/L" was given. Allowed: a number above 0. Check the number.'),
        ("1.2.3 mg/L", f'Level 1: "1.2.3" was given. Allowed: {NUMBER}. Use digits and one decimal point only.'),
        ("", f"Level 1: nothing was given. Allowed: a number with {LEVEL_LABELS}. Enter number and unit."),
        ("   ", f"Level 1: nothing was given. Allowed: a number with {LEVEL_LABELS}. Enter number and unit."),
        ("mg/L", f'Level 1: "mg/L" was given. Allowed: {NUMBER}. Use digits and one decimal point only.'),
        (
            "40 umol/L",
            'Level 1: "40 umol/L" was given, but no molar mass is known here. Allowed: '
            + LEVEL_LABELS
            + ". Convert the level to mg/L first.",
        ),
        ("\u0663 mg/L", f'Level 1: "\u0663" was given. Allowed: {NUMBER}. Use digits and one decimal point only.'),
    ],
)
def test_what_is_refused_and_how(text: str, message: str) -> None:
    assert refusal(text) == message


def test_an_ambiguous_comma_is_refused() -> None:
    for text in ("12,5 mg/L", "1,250 mg/L", "1,25,0 mg/L"):
        number = text.split()[0]
        assert refusal(text) == (
            f'Level 1: "{number}" was given. Allowed: {NUMBER}. A comma can be a decimal point or a thousands mark: '
            "write 12.5 or 12500 without a comma."
        )


def test_only_the_labels_named_are_taken() -> None:
    assert refusal("8 mg/dL", only=("mg/L", "mcg/mL")) == (
        'Level 1: the unit "mg/dL" was given. Allowed: mg/L or mcg/mL. Give one of these units.'
    )


def test_hostile_text_ends_quickly_and_is_not_echoed_whole() -> None:
    assert len(refusal("9" * 5000 + " mg/L")) < 300
    assert len(refusal("8 " + "x" * 150)) < 300
    assert "\n" not in refusal("8 mg\n/L")


@given(st.text(max_size=60))
def test_any_text_is_read_or_refused_in_words(text: str) -> None:
    try:
        typed = units.read(text, "level", "Level 1", molar_mass_g_per_mol=MOLAR)
    except CaseError as error:
        assert all(p.where == "Level 1" and p.given and p.fix for p in error.problems)
    else:
        assert math.isfinite(typed.value)
        assert typed.value > 0


@given(value=st.floats(0.01, 9999), label=st.sampled_from(["mg/L", "mcg/mL", "mg/dL", "umol/L", "g/L", "mmol/L"]))
def test_units_round_trip(value: float, label: str) -> None:
    canonical = units.read(f"{value:.6f} {label}", "level", "X", molar_mass_g_per_mol=MOLAR).value
    back = units.in_label(canonical, "level", label, molar_mass_g_per_mol=MOLAR)
    assert back == pytest.approx(float(f"{value:.6f}"), rel=1e-12)


@pytest.mark.parametrize("label", sorted(units.LABELS))
def test_every_label_agrees_with_its_unit(label: str) -> None:
    """The factors of the table and pint's own arithmetic are two ways to one number."""
    kind, factor, _ = units.LABELS[label]
    if label == "%":
        return
    quantity = units.Q(1.0, label)
    if label in units.MOLAR:
        assert quantity.to(units.unit_of("mmol/L")).magnitude == pytest.approx(factor, rel=1e-12)
        return
    canonical = "day" if kind == "duration" else units.CANONICAL[kind]
    if kind == "rate constant":
        assert quantity.to(units.unit_of("per day")).magnitude == pytest.approx(factor, rel=1e-12)
        return
    assert quantity.to(units.unit_of(canonical)).magnitude == pytest.approx(factor, rel=1e-12)


def test_quantities_are_needed_at_the_doors() -> None:
    with pytest.raises(CaseError) as bare:
        units.to_canonical(300, "dose rate", "Dose rate")
    assert str(bare.value) == (
        'Dose rate: the bare value "300" was given. Allowed: a quantity in mg/day. Attach a unit: 300 mg/day.'
    )
    with pytest.raises(CaseError) as wrong:
        units.to_canonical(units.Q(300, "mg"), "dose rate", "Dose rate")
    assert "Allowed: a quantity in mg/day. Check the unit." in str(wrong.value)
    array = units.to_canonical(units.Q(np.array([1.0, 2.0]), "g/day"), "dose rate", "Dose rate")
    assert array.tolist() == [1000.0, 2000.0]
    with pytest.raises(CaseError):
        units.Q(1, "mg/fortnight")


@pytest.mark.parametrize(
    ("value", "digits", "shown"),
    [
        (0.5, 3, "0.5"),
        (5.0, 3, "5"),
        (0.05, 3, "0.05"),
        (12.34, 3, "12.3"),
        (99.96, 3, "100"),
        (999.6, 3, "1,000"),
        (1000, 3, "1,000"),
        (1234.5, 5, "1,234.5"),
        (1234567, 7, "1,234,567"),
        (0.000123, 3, "0.000123"),
        (0, 3, "0"),
        (2.0004, 3, "2"),
        (1e-9, 2, "0.000000001"),
        (300, 6, "300"),
        (331.2, 4, "331.2"),
    ],
)
def test_numbers_as_shown(value: float, digits: int, shown: str) -> None:
    assert units.show_number(value, digits) == shown


@given(value=st.floats(1e-6, 1e7), digits=st.integers(2, 6))
def test_shown_numbers_are_safe_and_true(value: float, digits: int) -> None:
    text = units.show_number(value, digits)
    plain = text.replace(",", "")
    assert "e" not in text
    assert not plain.startswith(".")
    if "." in plain:
        assert not plain.endswith(("0", "."))
    assert float(plain) == pytest.approx(value, rel=0.5 * 10 ** (1 - digits) * 1.0001)
    for group in text.split(".")[0].split(",")[1:]:
        assert len(group) == 3


def test_no_number_is_shown_for_what_is_none() -> None:
    for value in (float("nan"), float("inf"), float("-inf")):
        with pytest.raises(ValueError, match="only finite numbers"):
            units.show_number(value)


def test_number_and_unit_stand_apart() -> None:
    assert units.show(0.5, "mg/L") == "0.5 mg/L"
    assert units.show(12, "%") == "12 %"
    assert units.show(3, "") == "3"
