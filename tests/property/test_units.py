"""Laws of the units at the door."""

from __future__ import annotations

import re
from datetime import datetime, timedelta, timezone
from decimal import ROUND_HALF_UP, Decimal

import pytest
from hypothesis import given
from hypothesis import strategies as st

from pkcalc import units
from pkcalc.clock import read_time, show_time
from pkcalc.errors import CaseError

VALUES = st.floats(1e-6, 1e7, allow_nan=False).map(lambda x: float(f"{x:.6g}"))


@given(VALUES, st.sampled_from([(k, label) for k, found in units.FACTORS.items() for label in found]))
def test_a_value_goes_into_a_unit_and_back(value: float, place: tuple[str, str]) -> None:
    kind, label = place
    text = f"{value:.12f}".rstrip("0").rstrip(".")
    typed = units.read(f"{text} {label}", kind, "Place", molar_mass_g_per_mol=252.27)
    assert units.in_label(typed.value, kind, label, molar_mass_g_per_mol=252.27) == pytest.approx(
        float(text), rel=1e-12
    )


@given(st.floats(-1e12, 1e12, allow_nan=False), st.integers(1, 12))
def test_shown_numbers_are_safe_and_close(value: float, digits: int) -> None:
    """Leading zero, no bare point, no trailing zero, no exponent, commas in threes; right to the digits shown."""
    text = units.show_number(value, digits)
    assert re.fullmatch(r"-?(0|[1-9]\d{0,2}(,\d{3})*)(\.\d*[1-9])?", text)
    assert float(text.replace(",", "")) == pytest.approx(value, rel=0.51 * 10 ** (1 - digits), abs=1e-300)


@given(st.decimals("0.0001", "99999", places=4), st.integers(1, 6))
def test_halves_are_rounded_as_on_paper(written: Decimal, digits: int) -> None:
    """Against the decimal itself, rounded half up at the last digit shown."""
    last = Decimal(1).scaleb(written.adjusted() + 1 - digits)
    expected = written.quantize(last, ROUND_HALF_UP)
    assert Decimal(units.show_number(float(written), digits).replace(",", "")) == expected


@given(st.decimals("0.001", "99999", places=3))
def test_a_dose_as_shown_is_the_dose_as_typed(amount: object) -> None:
    assert float(units.show_dose(float(str(amount))).replace(",", "")) == float(str(amount))


@given(st.text(max_size=300))
def test_any_text_is_read_or_refused_in_words(text: str) -> None:
    for kind in ("level", "age", "amount"):
        try:
            typed = units.read(text, kind, "Place")
        except CaseError as error:
            (problem,) = error.problems
            assert problem.where == "Place"
            assert problem.given
            assert problem.allowed
            assert problem.fix
        else:
            assert 0 < typed.value < 1e30


@given(
    st.datetimes(datetime(1990, 1, 2), datetime(2100, 12, 30)),
    st.none() | st.integers(-14 * 4, 14 * 4).map(lambda q: timezone(timedelta(minutes=15 * q))),
)
def test_a_time_as_shown_is_read_back(moment: datetime, zone: timezone | None) -> None:
    minute = moment.replace(second=0, microsecond=0, tzinfo=zone)
    assert read_time(show_time(minute), "Time") == minute
    assert read_time(minute.isoformat(sep=" ", timespec="minutes"), "Time") == minute
