"""Dates and times of samples as laboratories and spreadsheets write them.

Owns which forms say one day only, and the refusals of those that do not; a form is never guessed
from its neighbours, because spreadsheets turn only some cells of a column into dates.
"""

from __future__ import annotations

import datetime
import re
from dataclasses import dataclass

DAY_MONTH, MONTH_DAY = "day_month", "month_day"
DATE_ORDERS = (DAY_MONTH, MONTH_DAY)
EXAMPLE = "a date such as 2025-05-04 or 4 May 2025"
_EARLIEST_YEAR = 1970

_MONTHS = ("jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec")
_CLOCK = (
    r"(?:[T\s]\s*(?P<hour>\d{1,2}):(?P<minute>\d{2})(?::\d{2}(?:\.\d+)?)?"
    r"\s*(?P<half>[ap]m)?(?:Z|[+-]\d{2}:?\d{2})?)?"
)
_YEAR_FIRST = re.compile(r"(?P<y>\d{4})([-/.])(?P<m>\d{1,2})\2(?P<d>\d{1,2})" + _CLOCK, re.I)
_TWO_NUMBERS = re.compile(r"(?P<a>\d{1,2})([-/.])(?P<b>\d{1,2})\2(?P<y>\d{4}|\d{2})" + _CLOCK, re.I)
_DAY_NAME = re.compile(
    r"(?P<d>\d{1,2})(?:st|nd|rd|th)?[-\s./]*(?P<m>[a-z]{3,9})\.?,?[-\s./]*(?P<y>\d{4}|\d{2})"
    + _CLOCK,
    re.I,
)
_NAME_DAY = re.compile(
    r"(?P<m>[a-z]{3,9})\.?[-\s]*(?P<d>\d{1,2})(?:st|nd|rd|th)?,?[-\s]+(?P<y>\d{4}|\d{2})" + _CLOCK,
    re.I,
)
_TIME = re.compile(r"(?P<hour>\d{1,2}):(?P<minute>\d{2})(?::\d{2})?\s*(?P<half>[ap]m)?", re.I)


@dataclass(frozen=True, slots=True)
class Moment:
    """A day, and the time where one is written (``08:30``)."""

    day: datetime.date
    time: str = ""

    def __str__(self) -> str:
        """Day and time as printed."""
        return f"{self.day.isoformat()} {self.time}".strip()


@dataclass(frozen=True, slots=True)
class NoDate:
    """Why a text says no single day: what was expected and what to do."""

    expected: str
    remedy: str


def read_moment(
    text: str, *, order: str = "", latest: datetime.date | None = None
) -> Moment | NoDate:
    """Read a date, with its time where one follows.

    Parameters
    ----------
    text
        As written.
    order
        ``day_month`` or ``month_day`` where the site says so; empty refuses what may be both.
    latest
        Day after which no sample can have been taken.

    Examples
    --------
    >>> read_moment("4 May 2025 8:30").day.isoformat(), read_moment("25/05/2025").day.isoformat()
    ('2025-05-04', '2025-05-25')
    >>> read_moment("04/05/2025").expected
    'a date that can be read one way only'
    """
    plain = " ".join(text.split())
    found = _match(plain, order)
    if isinstance(found, NoDate):
        return found
    year, month, day, clock = found
    try:
        date = datetime.date(year, month, day)
    except ValueError:
        return NoDate("a day that exists", "Correct the date; write it as year-month-day.")
    if date.year < _EARLIEST_YEAR or (latest is not None and date > latest):
        last = f" and {latest.isoformat()}" if latest else ""
        return NoDate(f"a day between {_EARLIEST_YEAR}{last}", "Correct the year of the sample.")
    return Moment(date, _clock(clock))


def read_time(text: str) -> str | None:
    """Read a time of day as ``HH:MM``; None where the text is none.

    Examples
    --------
    >>> read_time("8:05 PM"), read_time("noon")
    ('20:05', None)
    """
    match = _TIME.fullmatch(text.strip())
    return _clock(match) or None if match else None


_Found = tuple[int, int, int, "re.Match[str]"]


def _match(text: str, order: str) -> _Found | NoDate:
    match = _YEAR_FIRST.fullmatch(text)
    if match:
        return int(match["y"]), int(match["m"]), int(match["d"]), match
    match = _DAY_NAME.fullmatch(text) or _NAME_DAY.fullmatch(text)
    if match and match["m"].lower()[:3] in _MONTHS:
        if len(match["y"]) == 2:
            return _short_year()
        return int(match["y"]), _MONTHS.index(match["m"].lower()[:3]) + 1, int(match["d"]), match
    match = _TWO_NUMBERS.fullmatch(text)
    if match:
        return _ordered(match, order)
    remedy = "Write year-month-day, such as 2025-05-04."
    if re.fullmatch(r"\d{5}(\.\d+)?", text):
        remedy = "This looks like a date that lost its format: format the column as a date."
    return NoDate(EXAMPLE, remedy)


def _short_year() -> NoDate:
    return NoDate("a year of four digits", "Write the whole year, such as 2025-05-04.")


def _ordered(match: re.Match[str], order: str) -> _Found | NoDate:
    if len(match["y"]) == 2:
        return _short_year()
    year, first, second = int(match["y"]), int(match["a"]), int(match["b"])
    if order == DAY_MONTH or (not order and first > 12):
        return year, second, first, match
    if order == MONTH_DAY or (not order and second > 12) or first == second:
        return year, first, second, match
    return NoDate(
        "a date that can be read one way only",
        f"Write year-month-day ({year}-{second:02d}-{first:02d} or"
        f" {year}-{first:02d}-{second:02d}), or state `date_order: day_month` or `month_day` under"
        " `samples`.",
    )


def _clock(match: re.Match[str]) -> str:
    if match["hour"] is None:
        return ""
    hour, minute = int(match["hour"]), int(match["minute"])
    half = (match["half"] or "").lower()
    if half:
        hour = hour % 12 + (12 if half == "pm" else 0)
    return f"{hour:02d}:{minute:02d}" if hour < 24 and minute < 60 else ""
