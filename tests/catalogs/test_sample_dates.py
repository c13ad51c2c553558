"""Dates of samples: what says one day is read, what may be two days is refused."""

from __future__ import annotations

import datetime

import pytest

from catalogs.sample_dates import Moment, NoDate, read_moment, read_time

DAY = datetime.date(2025, 5, 4)


@pytest.mark.parametrize(
    "text",
    ["2025-05-04", "2025/5/4", "2025.05.04", "4 May 2025", "04-May-2025", "May 4, 2025",
     "4th May 2025", "2025-05-04T00:10:00Z"],
)  # fmt: skip
def test_one_day_in_many_forms(text: str) -> None:
    found = read_moment(text)
    assert isinstance(found, Moment)
    assert found.day == DAY


def test_a_time_comes_along() -> None:
    assert read_moment("2025-05-04 8:30") == Moment(DAY, "08:30")
    assert read_moment("4 May 2025 8:30 PM") == Moment(DAY, "20:30")
    assert read_time("12:05 am") == "00:05"
    assert read_time("25:00") is None


def test_day_and_month_are_never_guessed() -> None:
    found = read_moment("04/05/2025")
    assert found == NoDate(
        "a date that can be read one way only",
        "Write year-month-day (2025-05-04 or 2025-04-05), or state `date_order: day_month` or "
        "`month_day` under `samples`.",
    )
    assert read_moment("04/05/2025", order="day_month") == Moment(DAY)
    assert read_moment("05/04/2025", order="month_day") == Moment(DAY)


def test_what_can_only_be_read_one_way_is_read() -> None:
    assert read_moment("25/05/2025") == Moment(datetime.date(2025, 5, 25))
    assert read_moment("05/25/2025") == Moment(datetime.date(2025, 5, 25))
    assert read_moment("05.05.2025") == Moment(datetime.date(2025, 5, 5))


@pytest.mark.parametrize(
    ("text", "order", "expected"),
    [
        ("2025-02-30", "", "a day that exists"),
        ("25/05/2025", "month_day", "a day that exists"),
        ("4 May 25", "", "a year of four digits"),
        ("04/05/25", "day_month", "a year of four digits"),
        ("1925-05-04", "", "a day between 1970"),
        ("2026-05-04", "", "a day between 1970 and 2025-12-31"),
        ("yesterday", "", "a date such as 2025-05-04 or 4 May 2025"),
        ("4 Mai 2025", "", "a date such as 2025-05-04 or 4 May 2025"),
    ],
)
def test_what_is_no_day_says_why(text: str, order: str, expected: str) -> None:
    latest = datetime.date(2025, 12, 31) if "2026" in text else None
    found = read_moment(text, order=order, latest=latest)
    assert isinstance(found, NoDate)
    assert found.expected == expected


def test_a_serial_number_is_told_from_a_date() -> None:
    found = read_moment("45782")
    assert isinstance(found, NoDate)
    assert "lost its format" in found.remedy
