"""Units at the door: what is read, what is refused and in which words, what is shown."""

from __future__ import annotations

import math

import numpy as np
import pytest

from pkcalc import units
from pkcalc.errors import CaseError, as_typed
from pkcalc.units import Q, read, read_number, show, show_dose, show_number, to_canonical

MOLAR = 252.27
PLAIN = "Allowed: a plain number such as 12.5 or 1250."
DIGITS = f"{PLAIN} Use digits and one decimal point only."


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("300", 300.0),
        (" 12.5 ", 12.5),
        (".5", 0.5),
        ("0012", 12.0),
        ("0", 0.0),
        ("1,250.5", 1250.5),
        ("1,250,000", 1250000.0),
    ],
)
def test_numbers_that_are_read(text: str, value: float) -> None:
    assert read_number(text) == value


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", f"Dose: nothing was given. {PLAIN} Enter the number."),
        ("   ", f"Dose: nothing was given. {PLAIN} Enter the number."),
        ("nan", f'Dose: "nan" was given. {DIGITS}'),
        ("inf", f'Dose: "inf" was given. {DIGITS}'),
        ("1_000", f'Dose: "1_000" was given. {DIGITS}'),
        ("1e999", f'Dose: "1e999" was given. {DIGITS}'),
        ("9**9**9", f'Dose: "9**9**9" was given. {DIGITS}'),
        ("12.", f'Dose: "12." was given. {DIGITS}'),
        ("1.2.3", f'Dose: "1.2.3" was given. {DIGITS}'),
        ("\u0661\u0662", f'Dose: "\u0661\u0662" was given. {DIGITS}'),
        ("\u00bd", f'Dose: "\u00bd" was given. {DIGITS}'),
        ("-3", 'Dose: "-3" was given. Allowed: a number of 0 or more. Check the number: it cannot be negative.'),
        (
            "\u22123",
            'Dose: "\u22123" was given. Allowed: a number of 0 or more. Check the number: it cannot be negative.',
        ),
        ("+3", f'Dose: "+3" was given. {PLAIN} Leave out the plus sign.'),
        (
            "12,5",
            f'Dose: "12,5" was given. {PLAIN} A comma can be a decimal point or a thousands mark: '
            "write 12.5 or 12500 without a comma.",
        ),
        (
            "1,250",
            f'Dose: "1,250" was given. {PLAIN} A comma can be a decimal point or a thousands mark: '
            "write 12.5 or 12500 without a comma.",
        ),
        ("9" * 25, f'Dose: "{"9" * 25}" was given. {PLAIN} Enter the number with fewer digits.'),
        ("x\x00y" * 20, f'Dose: "{"x?y" * 13}x..." was given. {PLAIN} Enter the number with fewer digits.'),
    ],
)
def test_numbers_that_are_refused(text: str, message: str) -> None:
    with pytest.raises(CaseError) as caught:
        read_number(text, "Dose")
    assert str(caught.value) == message


@pytest.mark.parametrize(
    ("text", "kind", "value"),
    [
        ("8 mg/L", "level", 8.0),
        ("8mcg/mL", "level", 8.0),
        ("0.8 mg/dL", "level", 8.0),
        ("40 umol/L", "level", 40 * MOLAR / 1000),
        ("2.9 g/dL", "albumin", 29.0),
        ("29 g/L", "albumin", 29.0),
        ("70 kg", "weight", 70.0),
        ("100 lb", "weight", 45.359237),
        ("170 cm", "height", 170.0),
        ("67 in", "height", 170.18),
        ("300 mg", "amount", 300.0),
        ("1.005 g", "amount", 1005.0),
        ("500 mg PE", "amount", 500.0),
        ("300 mg/day", "dose rate", 300.0),
        ("50 mg/min", "dose rate", 72000.0),
        ("5 mg/kg/day", "dose rate per weight", 5.0),
        ("36 h", "duration", 1.5),
        ("30 min", "duration", 1 / 48),
        ("2 weeks", "duration", 14.0),
        ("84 months", "age", 7.0),
        ("20 %", "share", 0.2),
    ],
)
def test_numbers_with_units_that_are_read(text: str, kind: str, value: float) -> None:
    typed = read(text, kind, "Place", molar_mass_g_per_mol=MOLAR)
    assert typed.value == pytest.approx(value, rel=1e-14)
    assert typed.text == text


def test_whole_years_in_months_are_whole_years() -> None:
    """An age of 84 months is not one rounding step under 7 years: intervals of age begin there."""
    assert [read(f"{12 * n} months", "age", "Age").value for n in range(1, 121)] == list(range(1, 121))


LEVELS = "mg/L or mcg/mL or mg/dL or g/L or umol/L or mmol/L"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("8", f"Level 1: no unit was given. Allowed: {LEVELS}. Give one of these units."),
        (
            "8 MG/L",
            f'Level 1: the unit "MG/L" was given. Allowed: {LEVELS}. Write "mg/L": capital and small letters matter.',
        ),
        ("8 mg", f'Level 1: the unit "mg" was given. Allowed: {LEVELS}. Give one of these units.'),
        ("8 kg", f'Level 1: the unit "kg" was given. Allowed: {LEVELS}. Give one of these units.'),
        ("8 mg/L/day", f'Level 1: the unit "mg/L/day" was given. Allowed: {LEVELS}. Give one of these units.'),
        (
            "8 \u00b5mol/L",
            f'Level 1: the unit "\u00b5mol/L" was given. Allowed: {LEVELS}. Write "umol/L": the Greek letter is misread.',
        ),
        (
            "8 \u03bcg/mL",
            f'Level 1: the unit "\u03bcg/mL" was given. Allowed: {LEVELS}. Write "mcg/mL": the Greek letter is misread.',
        ),
        ("0 mg/L", 'Level 1: "0 mg/L" was given. Allowed: a number above 0. Check the number.'),
        ("mg/L", f'Level 1: "mg/L" was given without a number. Allowed: a number with {LEVELS}. Enter the number.'),
        ("", f"Level 1: nothing was given. Allowed: a number with {LEVELS}. Enter number and unit."),
        (
            "-3 mg/L",
            'Level 1: "-3" was given. Allowed: a number of 0 or more. Check the number: it cannot be negative.',
        ),
        ("nan mg/L", f'Level 1: "nan" was given. {DIGITS}'),
        ("inf mg/L", f'Level 1: "inf" was given. {DIGITS}'),
        ("1_000 mg/L", f'Level 1: "1_000" was given. {DIGITS}'),
        ("1e999 mg/L", f'Level 1: "1e999" was given. {DIGITS}'),
        ("a" * 300, f'Level 1: "{"a" * 40}..." was given. Allowed: a number with {LEVELS}. Shorten it.'),
    ],
)
def test_numbers_with_units_that_are_refused(text: str, message: str) -> None:
    with pytest.raises(CaseError) as caught:
        read(text, "level", "Level 1", molar_mass_g_per_mol=MOLAR)
    assert str(caught.value) == message


def test_a_molar_level_without_a_molar_mass_is_refused() -> None:
    with pytest.raises(CaseError) as caught:
        read("40 umol/L", "level", "Level 1")
    assert str(caught.value) == (
        'Level 1: "40 umol/L" was given, but no molar mass is known here. '
        "Allowed: mg/L or mcg/mL or mg/dL or g/L. Convert the level to mg/L first."
    )
    with pytest.raises(CaseError) as caught:
        units.in_label(8.0, "level", "umol/L")
    assert str(caught.value) == 'Unit: "umol/L" without a molar mass. Allowed: mg/L. Use mg/L.'


@pytest.mark.parametrize(
    ("quantity", "kind", "message"),
    [
        (
            300,
            "dose rate",
            'Dose: the bare value "300" was given. Allowed: a quantity in mg/day. Attach a unit: 300 mg/day.',
        ),
        (None, "level", "Dose: nothing was given. Allowed: a quantity in mg/L. Attach a unit: 8 mg/L."),
        (Q(3, "kg"), "volume", "Dose: a quantity in kilogram was given. Allowed: a quantity in L. Check the unit."),
    ],
)
def test_quantities_that_are_refused(quantity: object, kind: str, message: str) -> None:
    with pytest.raises(CaseError) as caught:
        to_canonical(quantity, kind, "Dose")
    assert str(caught.value) == message


def test_quantities_become_floats_and_arrays_in_the_canonical_unit() -> None:
    assert to_canonical(Q(12, "h"), "duration", "Time") == pytest.approx(0.5, rel=1e-15)
    assert np.allclose(to_canonical(Q(np.array([1.0, 2.0]), "mg/dL"), "level", "Level"), [10.0, 20.0])


def test_a_unit_outside_the_list_never_reaches_the_parser() -> None:
    with pytest.raises(CaseError, match=r'^Unit: the unit "9\*\*9\*\*9" was given\. Allowed: % or L or '):
        Q(1, "9**9**9")


@pytest.mark.parametrize("label", sorted(units.LABELS))
def test_the_factor_of_every_label_is_that_of_its_unit(label: str) -> None:
    """Two ways to convert: our table of factors, and the unit system built from definitions."""
    kind, factor, _ = units.LABELS[label]
    if kind == "share" or label in units.MOLAR:
        return
    assert to_canonical(Q(1.0, label), kind, label) == pytest.approx(factor, rel=1e-12)


@pytest.mark.parametrize(
    ("value", "digits", "text"),
    [
        (0.5, 3, "0.5"),
        (20.0, 3, "20"),
        (1250, 3, "1,250"),
        (123456, 3, "123,000"),
        (0.001234, 3, "0.00123"),
        (99.95, 3, "100"),
        (999.9, 3, "1,000"),
        (0.99996, 3, "1"),
        (1e-9, 3, "0.000000001"),
        (1e7, 3, "10,000,000"),
        (0.1 + 0.2, 3, "0.3"),
        (0, 3, "0"),
        (-0.0, 3, "0"),
        (-2.5, 3, "-2.5"),
        # halves go up, as on paper: also those that a binary fraction keeps a little below
        (2.5, 1, "3"),
        (0.125, 2, "0.13"),
        (112.5, 3, "113"),
        (1.005, 3, "1.01"),
        (2.675, 3, "2.68"),
        (0.045, 1, "0.05"),
        (-0.125, 2, "-0.13"),
        (9.995, 3, "10"),
        (1250, 2, "1,300"),
        (12.5 * 0.1, 2, "1.3"),
        (2.4999999, 1, "2"),
        (0.1249999, 2, "0.12"),
    ],
)
def test_numbers_as_shown(value: float, digits: int, text: str) -> None:
    assert show_number(value, digits) == text


def test_doses_keep_every_digit() -> None:
    assert [show_dose(x) for x in (1234.5, 112.5, 0.125, 1005.0, 12345.25)] == [
        "1,234.5",
        "112.5",
        "0.125",
        "1,005",
        "12,345.25",
    ]


def test_numbers_with_units_as_shown() -> None:
    assert [show(8.0, "mg/L"), show(20, "%"), show(3.0, "")] == ["8 mg/L", "20 %", "3"]


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf])
def test_what_is_no_number_is_never_shown(value: float) -> None:
    with pytest.raises(ValueError, match=r"^only finite numbers are shown$"):
        show_number(value)


def test_typed_text_is_shown_short_and_visible() -> None:
    assert as_typed("a\u202eb\nc") == "a?b?c"
    assert as_typed("x" * 41) == "x" * 40 + "..."
