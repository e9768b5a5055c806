"""Calendars: what a written period means, and its position among the periods of its kind.

Positions are whole numbers: years; quarters and months since year 0; proleptic days (0001-01-01 is 1);
business days, Monday to Friday, since 1970-01-01.
"""

from __future__ import annotations

import calendar
import datetime as dt
import re
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

_LARGEST = 10**15
_EPOCH = np.datetime64("1970-01-01")
_EPOCH_DAY = dt.date(1970, 1, 1).toordinal()
_INTEGER = re.compile(r"[+-]?\d{1,15}(\.0+)?")
_QUARTER = re.compile(r"(\d{4})[-\s]?[Qq]([1-4])")
_MONTH = re.compile(r"(\d{4})-(\d{2})")
_DATE = re.compile(r"(\d{4})-(\d{2})-(\d{2})(?:[T ]00:00(?::00(?:\.0+)?)?Z?)?")
_WANTED = "Write whole numbers, dates as 2024-07-15, quarters as 2024-Q3 or months as 2024-07."


class PeriodFault(ValueError):
    """A period that cannot be read; callers add the place and raise an error for users.

    ``index`` is the position of the value among those given, where one value alone is at fault.
    """

    def __init__(self, what: str, mend: str = "", index: int | None = None) -> None:
        self.what, self.mend, self.index = what, mend, index
        super().__init__(f"{what} {mend}".strip())


@dataclass(frozen=True)
class Written:
    """A period as written: its form, and the number or the days it covers."""

    form: str
    """"a whole number", "a quarter", "a month" or "a date"."""
    number: int
    """The whole number; else the position on the calendar of its form."""
    first: dt.date | None = None
    last: dt.date | None = None


def read(value: object) -> Written:
    """Return what a written period means.

    Raises
    ------
    PeriodFault
        If it is no period.
    """
    if isinstance(value, (bool, np.bool_)):
        raise PeriodFault(f"found {value}, expected a period.", _WANTED)
    if isinstance(value, (int, np.integer, float, np.floating)):
        number: Any = value
        if not abs(number) < _LARGEST or number != int(number):
            raise PeriodFault(f"found {value}, expected a period.", _WANTED)
        return Written("a whole number", int(value))
    if isinstance(value, np.datetime64):
        value = value.astype("datetime64[us]").item()
    if isinstance(value, dt.datetime):
        return _from_datetime(value)
    if isinstance(value, dt.date):
        return Written("a date", value.toordinal(), value, value)
    return _from_text(str(value).strip())


def _from_datetime(value: dt.datetime) -> Written:
    if value.time() != dt.time():
        raise PeriodFault(
            f"found {value}, a time within a day; periods shorter than a day are not supported.",
            "Number the periods 1, 2, 3, … instead.",
        )
    return Written("a date", value.toordinal(), value.date(), value.date())


def _from_text(text: str) -> Written:
    if _INTEGER.fullmatch(text):
        return Written("a whole number", int(text.split(".")[0]))
    if m := _QUARTER.fullmatch(text):
        year, quarter = int(m[1]), int(m[2])
        return _months("a quarter", year, 3 * quarter - 2, 3, 4 * year + quarter - 1, text)
    if m := _MONTH.fullmatch(text):
        year, month = int(m[1]), int(m[2])
        if 1 <= month <= 12:
            return _months("a month", year, month, 1, 12 * year + month - 1, text)
    if m := _DATE.fullmatch(text):
        try:
            date = dt.date(int(m[1]), int(m[2]), int(m[3]))
        except ValueError:
            raise PeriodFault(f"“{text}” is no day of the calendar.", _WANTED) from None
        return Written("a date", date.toordinal(), date, date)
    raise PeriodFault(f"“{text}” is not a period.", _WANTED)


def _months(form: str, year: int, month: int, length: int, number: int, text: str) -> Written:
    if year < 1:
        raise PeriodFault(f"“{text}” is no period of the calendar.", _WANTED)
    end = month + length - 1
    last = dt.date(year, end, calendar.monthrange(year, end)[1])
    return Written(form, number, dt.date(year, month, 1), last)


def plain_numbers(values: list[object]) -> NDArray[np.int64] | None:
    """Return values that are all whole numbers, or text of digits, as numbers; else None.

    The quick way for long series: `read` looks at one value at a time.
    """
    if all(type(v) is int for v in values) or all(isinstance(v, np.integer) for v in values):
        numbers = np.array(values, dtype=object)
        return numbers.astype(np.int64) if all(abs(v) < _LARGEST for v in values) else None  # type: ignore[arg-type]
    if all(type(v) is str and v.isascii() and v.isdigit() and len(v) <= 15 for v in values):
        return np.array([int(v) for v in values], dtype=np.int64)  # type: ignore[call-overload]
    return None


def recognise(written: list[Written]) -> tuple[str, NDArray[np.int64], int]:
    """Return the kind of distinct periods of one form, their positions, and the common step.

    Dates in distinct months are months, quarters or years by the common gap; other dates are weeks if all
    gaps are whole weeks, weekdays if none falls on a weekend, else days.
    """
    form = written[0].form
    numbers = np.array([w.number for w in written], dtype=np.int64)
    if form == "a whole number":
        return recognise_numbers(numbers)
    if form in ("a quarter", "a month"):
        return form.removeprefix("a "), numbers, _step(numbers)
    return _recognise_dates([w.first for w in written if w.first is not None], numbers)


def recognise_numbers(numbers: NDArray[np.int64]) -> tuple[str, NDArray[np.int64], int]:
    """Return what `recognise` returns, for whole numbers: years where all lie between 1500 and 2200."""
    _refuse_joined_dates(numbers)
    years = bool(np.all((numbers >= 1500) & (numbers <= 2200)))
    return ("year" if years else "integer"), numbers, _step(numbers)


def _recognise_dates(dates: list[dt.date], days: NDArray[np.int64]) -> tuple[str, NDArray[np.int64], int]:
    months = np.array([12 * d.year + d.month - 1 for d in dates], dtype=np.int64)
    if len(dates) > 1 and len(np.unique(months)) == len(np.unique(days)):
        gap = _step(months)
        for kind, length in (("year", 12), ("quarter", 3), ("month", 1)):
            if gap % length == 0:
                return kind, months // length, gap // length
    gap = _step(days)
    if len(dates) > 1 and gap % 7 == 0:
        return "week", days, gap
    if np.all((days - 1) % 7 < 5):
        return "weekday", day_to_weekday(days), 1
    return "day", days, gap


def _step(positions: NDArray[np.int64]) -> int:
    # Equal neighbours differ by 0, which leaves a common divisor as it is.
    return max(1, int(np.gcd.reduce(np.diff(np.sort(positions)))) if len(positions) > 1 else 1)


def _refuse_joined_dates(numbers: NDArray[np.int64]) -> None:
    for digits, example in ((100, "2024-07"), (10_000, "2024-07-15")):
        year, rest = numbers // digits, numbers % digits
        month = rest if digits == 100 else rest // 100
        in_range = (year >= 1800) & (year <= 2200) & (month >= 1) & (month <= 12)
        if digits == 10_000:
            in_range &= (rest % 100 >= 1) & (rest % 100 <= 31)
        if np.all(in_range):
            raise PeriodFault(
                f"{numbers[0]} looks like a date written as one number: "
                "as whole numbers, December and January would lie far apart.",
                f"Write {example}.",
            )


def day_to_weekday(days: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return the position among business days; a weekend day gets that of the next Monday."""
    dates = _EPOCH + (days - _EPOCH_DAY).astype("timedelta64[D]")
    return np.asarray(np.busday_count(_EPOCH, dates), dtype=np.int64)


def weekday_to_day(positions: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return the proleptic day of positions among business days."""
    dates = np.busday_offset(_EPOCH, positions)
    return (dates - _EPOCH).astype(np.int64) + _EPOCH_DAY


def span(kind: str, written: Written) -> tuple[int, int]:
    """Return the first and last position of a kind that a written period covers.

    Raises
    ------
    PeriodFault
        If the period is of a form that this kind cannot place.
    """
    if kind == "integer" or (kind == "year" and written.first is None):
        if written.first is not None:
            raise PeriodFault(f"found {written.form}; the periods of the data are whole numbers.")
        return written.number, written.number
    if written.first is None or written.last is None:
        year = written.number
        if not 1 <= year <= 9999:
            raise PeriodFault(f"{year} is no year of the calendar.", _WANTED)
        first, last = dt.date(year, 1, 1), dt.date(year, 12, 31)
    else:
        first, last = written.first, written.last
    low, high = _position(kind, first), _position(kind, last)
    if kind == "weekday" and last.weekday() > 4:
        high -= 1
    return low, high


def _position(kind: str, date: dt.date) -> int:
    if kind == "year":
        return date.year
    if kind == "quarter":
        return 4 * date.year + (date.month - 1) // 3
    if kind == "month":
        return 12 * date.year + date.month - 1
    if kind == "weekday":
        return int(day_to_weekday(np.array([date.toordinal()]))[0])
    return date.toordinal()


def label(kind: str, position: int) -> str:
    """Return how the period of a kind at a position is written."""
    if kind in ("integer", "year"):
        return str(position)
    if kind == "quarter":
        return f"{position // 4:04d}-Q{position % 4 + 1}"
    if kind == "month":
        return f"{position // 12:04d}-{position % 12 + 1:02d}"
    day: Any = weekday_to_day(np.array([position]))[0] if kind == "weekday" else position
    return dt.date.fromordinal(int(day)).isoformat()
