"""Clock times as typed and as shown."""

from __future__ import annotations

from datetime import datetime, timedelta, timezone

import pytest

from pkcalc.clock import days_between, read_time, read_time_of_day, show_date, show_time, show_time_of_day
from pkcalc.errors import CaseError

DATE = "Allowed: a date such as 2026-03-04 06:10 or 4 Mar 2026 06:10."


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("2026-04-03 06:10", "3 Apr 2026 06:10"),
        ("2026-04-03T06:10:30", "3 Apr 2026 06:10"),
        ("3 Apr 2026 06:10", "3 Apr 2026 06:10"),
        ("03 april 2026, 6:10", "3 Apr 2026 06:10"),
        ("3 Sept 2026 23:59", "3 Sep 2026 23:59"),
        ("2028-02-29 00:00", "29 Feb 2028 00:00"),
        ("2026-04-03 06:10Z", "3 Apr 2026 06:10 +00:00"),
        ("2026-04-03 06:10 -04:00", "3 Apr 2026 06:10 -04:00"),
        ("3 Apr 2026 06:10 +05:30", "3 Apr 2026 06:10 +05:30"),
    ],
)
def test_times_that_are_read(text: str, shown: str) -> None:
    assert show_time(read_time(text, "Drawn")) == shown


FIGURES = f"{DATE} Day and month in figures can be swapped: write the month in words."
LAYOUT = f"{DATE} Write the date as year-month-day in figures, or with the month in words."
NONE = f"{DATE} There is no such date or time: check it against the chart."


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("03/04/2026", f'Drawn: "03/04/2026" was given. {FIGURES}'),
        ("3.4.26 06:10", f'Drawn: "3.4.26 06:10" was given. {FIGURES}'),
        ("03-04-2026 06:10", f'Drawn: "03-04-2026 06:10" was given. {FIGURES}'),
        ("", f"Drawn: nothing was given. {DATE} Enter date and time."),
        ("yesterday", f'Drawn: "yesterday" was given. {LAYOUT}'),
        ("2026-4-3 06:10", f'Drawn: "2026-4-3 06:10" was given. {LAYOUT}'),
        ("1775196600", f'Drawn: "1775196600" was given. {LAYOUT}'),
        ("3 Apr 2026 6.10 am", f'Drawn: "3 Apr 2026 6.10 am" was given. {LAYOUT}'),
        ("\u0662026-04-03 06:10", f'Drawn: "\u0662026-04-03 06:10" was given. {LAYOUT}'),
        ("2026-02-29 06:10", f'Drawn: "2026-02-29 06:10" was given. {NONE}'),
        ("31 Apr 2026 06:10", f'Drawn: "31 Apr 2026 06:10" was given. {NONE}'),
        ("2026-04-03 24:00", f'Drawn: "2026-04-03 24:00" was given. {NONE}'),
        ("2026-04-03 06:10+99:00", f'Drawn: "2026-04-03 06:10+99:00" was given. {NONE}'),
        ("0000-01-01 06:10", f'Drawn: "0000-01-01 06:10" was given. {NONE}'),
        ("3 Abc 2026 06:10", f'Drawn: "3 Abc 2026 06:10" was given. {DATE} Check the name of the month.'),
        ("2026-04-03", f'Drawn: "2026-04-03" was given without a time of day. {DATE} Add the time of day, 24 h clock.'),
        ("1926-04-03 06:10", 'Drawn: "1926-04-03 06:10" was given. Allowed: a year from 1990 to 2100. Check the year.'),
    ],
)
def test_times_that_are_refused(text: str, message: str) -> None:
    with pytest.raises(CaseError) as caught:
        read_time(text, "Drawn")
    assert str(caught.value) == message


def test_a_date_alone_where_no_time_is_needed() -> None:
    assert show_date(read_time("3 Apr 2026", "Since", time_needed=False)) == "3 Apr 2026"


@pytest.mark.parametrize(("text", "hours"), [("21:00", 21.0), ("9:30", 9.5), ("00:00", 0.0), ("23:59", 23 + 59 / 60)])
def test_times_of_day(text: str, hours: float) -> None:
    assert read_time_of_day(text, "Time") == hours
    assert show_time_of_day(hours) == text.zfill(5)


@pytest.mark.parametrize("text", ["24:00", "9", "9 pm", "21.00", "-1:00", "09:60"])
def test_times_of_day_that_are_refused(text: str) -> None:
    with pytest.raises(CaseError) as caught:
        read_time_of_day(text, "Time")
    assert str(caught.value) == (
        f'Time: "{text}" was given. Allowed: a time of day such as 21:00. Use the 24 h clock, 00:00 to 23:59.'
    )


def test_an_empty_time_of_day_is_refused() -> None:
    with pytest.raises(CaseError) as caught:
        read_time_of_day(" ", "Time")
    assert str(caught.value) == (
        "Time: nothing was given. Allowed: a time of day such as 21:00. Use the 24 h clock, 00:00 to 23:59."
    )


def test_with_offsets_true_elapsed_time_counts() -> None:
    """The night the clocks go forward: 21:00 to 21:00 is 23 h with offsets, a day by the clock without."""
    winter, summer = timezone(timedelta(hours=1)), timezone(timedelta(hours=2))
    elapsed = days_between(datetime(2026, 3, 28, 21, tzinfo=winter), datetime(2026, 3, 29, 21, tzinfo=summer))
    assert elapsed == 23 / 24
    assert days_between(datetime(2026, 3, 28, 21), datetime(2026, 3, 29, 21)) == 1
