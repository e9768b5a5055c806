"""Periods: labels a user writes, and the whole numbers that lags are counted in."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bayes_sys.study import calendars
from bayes_sys.study.calendars import PeriodFault, Written


@dataclass(frozen=True)
class Periods:
    """An ordered set of periods.

    Parameters
    ----------
    kind : str
        "integer", "year", "quarter", "month", "week", "day" or "weekday".
    ordinals : array of int, shape (n_periods,), increasing
        Position of each period on its own calendar; two neighbours differ by one.
    labels : tuple of str, length n_periods
        How each period is written: 2004, 2024-Q3, 2024-07, 2024-07-15.
    name : str
        The column the periods came from.
    step : int
        How many units of the calendar lie between neighbours: 5 for a survey every fifth year.
    anchor : int
        Position on the calendar of ordinal 0.
    """

    kind: str
    ordinals: NDArray[np.int64]
    labels: tuple[str, ...]
    name: str = "period"
    step: int = 1
    anchor: int = 0

    def __len__(self) -> int:
        return len(self.labels)

    def label_of(self, ordinal: int) -> str:
        """Return how the period at an ordinal is written, inside the set or beyond it."""
        return calendars.label(self.kind, self.anchor + self.step * int(ordinal))

    def ordinal_of(self, value: object) -> int:
        """Return the ordinal of one period as a user wrote it.

        Raises
        ------
        PeriodFault
            If it is no period, or none of this calendar.
        """
        low, high = self._span(value)
        if low != high:
            raise PeriodFault(f"{value} is no single {self._noun} of the data.", self._example())
        ordinal, rest = divmod(low - self.anchor, self.step)
        if rest:
            raise PeriodFault(
                f"{value} lies between two periods of the data, which are {self.step} {self._unit} apart.",
                self._example(),
            )
        return ordinal

    def first_ordinal(self, value: object) -> int:
        """Return the first ordinal at or after a value; “2004” begins with the first quarter of 2004."""
        return -((self.anchor - self._span(value)[0]) // self.step)

    def last_ordinal(self, value: object) -> int:
        """Return the last ordinal at or before a value; “2004” ends with the last quarter of 2004."""
        return (self._span(value)[1] - self.anchor) // self.step

    def subset(self, keep: NDArray[np.bool_]) -> Periods:
        """Return the periods where ``keep`` is true."""
        labels = tuple(label for label, k in zip(self.labels, keep, strict=True) if k)
        return Periods(self.kind, self.ordinals[keep], labels, self.name, self.step, self.anchor)

    def between(self, first: int, last: int) -> Periods:
        """Return every period from one ordinal to another, both included."""
        ordinals = np.arange(first, last + 1, dtype=np.int64)
        if self.kind in ("integer", "year"):
            labels = tuple(map(str, (self.anchor + self.step * ordinals).tolist()))
        else:
            labels = tuple(self.label_of(int(o)) for o in ordinals)
        return Periods(self.kind, ordinals, labels, self.name, self.step, self.anchor)

    def season_of(self, cycle: int, first: int) -> NDArray[np.int64]:
        """Return each period's place in a cycle, 1 to ``cycle``.

        The calendar decides where the cycle is a year of months or quarters or a week of days (January,
        the first quarter and Monday are 1); otherwise places are counted from the ordinal ``first``.
        """
        position = self.anchor + self.step * self.ordinals
        if self.kind in ("quarter", "month"):
            per_year = 4 if self.kind == "quarter" else 12
            if cycle * self.step == per_year:
                return (position % per_year) // self.step + 1
        if (self.kind, cycle, self.step) in (("day", 7, 1), ("weekday", 5, 1)):
            days = position if self.kind == "day" else calendars.weekday_to_day(position)
            # Day 1 of the proleptic calendar, 0001-01-01, is a Monday.
            return (days - 1) % 7 + 1
        return (self.ordinals - first) % cycle + 1

    def _span(self, value: object) -> tuple[int, int]:
        return calendars.span(self.kind, calendars.read(value))

    @property
    def _noun(self) -> str:
        return {"integer": "period", "day": "date", "weekday": "weekday"}.get(self.kind, self.kind)

    @property
    def _unit(self) -> str:
        return {"integer": "units", "week": "days"}.get(self.kind, f"{self.kind}s")

    def _example(self) -> str:
        if not self.labels:
            return ""
        return f"The data go from {self.labels[0]} to {self.labels[-1]}."


def find_periods(values: Iterable[object], name: str = "period") -> tuple[Periods, NDArray[np.int64]]:
    """Return the complete grid of periods that values span, and the ordinal of each value.

    Parameters
    ----------
    values : iterable
        Distinct periods as they stand in the data, in any order, at least one: whole numbers, dates, or
        text such as 2004, 2024-Q3, 2024-07, 2024-07-15.
    name : str
        The column they come from.

    Returns
    -------
    periods : Periods
        From the first to the last, gaps filled.
    ordinals : array of int, shape (n_values,)

    Raises
    ------
    PeriodFault
        If a value is no period, if kinds are mixed, or if the values are no periods but, say, record numbers.
    """
    listed = list(values)
    numbers = calendars.plain_numbers(listed)
    if numbers is not None:
        kind, positions, step = calendars.recognise_numbers(numbers)
    else:
        written = [_read(v, i) for i, v in enumerate(listed)]
        _check_one_form(written, listed)
        kind, positions, step = calendars.recognise(written)
    anchor = int(positions.min()) % step
    ordinals = (positions - anchor) // step
    first, last = int(ordinals.min()), int(ordinals.max())
    n_found = 1 + int(np.count_nonzero(np.diff(np.sort(ordinals))))
    _check_dense(n_found, last - first + 1, name)
    seed = Periods(kind, np.empty(0, dtype=np.int64), (), name, step, anchor)
    return seed.between(first, last), ordinals


def _read(value: object, index: int) -> Written:
    try:
        return calendars.read(value)
    except PeriodFault as error:
        raise PeriodFault(error.what, error.mend, index) from None


def _check_one_form(written: list[Written], values: list[object]) -> None:
    first = written[0]
    for i, (other, value) in enumerate(zip(written, values, strict=True)):
        if other.form != first.form:
            raise PeriodFault(
                f"{values[0]} is written as {first.form}, {value} as {other.form}.",
                "Write all periods the same way.",
                i,
            )


def _check_dense(n_found: int, n_grid: int, name: str) -> None:
    # Record numbers or time stamps would make a grid of mostly nothing, and lags without meaning.
    if n_grid > 400 and n_grid > 20 * n_found:
        raise PeriodFault(
            f"the {n_found} values of “{name}” are spread over {n_grid:,} periods: "
            "these look like record numbers, not periods.",
            "Name the column that says when: whole numbers, dates, or text such as 2024-Q3 or 2024-07.",
        )
