"""Periods: recognised, put on a complete grid, counted, labelled and looked up."""

from __future__ import annotations

import datetime as dt
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bayes_sys.study.calendars import PeriodFault
from bayes_sys.study.periods import find_periods

MONDAY = dt.date(2024, 1, 1)


def days(*offsets: int) -> list[dt.date]:
    return [MONDAY + dt.timedelta(days=o) for o in offsets]


@pytest.mark.parametrize(
    ("values", "kind", "labels", "after"),
    [
        ([3, 1, 2], "integer", ("1", "2", "3"), "4"),
        (["2004", "2006"], "year", ("2004", "2006"), "2008"),
        (["2004", "2005", "2007"], "year", ("2004", "2005", "2006", "2007"), "2008"),
        ([1990, 1995, 2005], "year", ("1990", "1995", "2000", "2005"), "2010"),
        ([2004.0, 2005.0], "year", ("2004", "2005"), "2006"),
        (["2024-Q3", "2024-Q1", "2024-Q2"], "quarter", ("2024-Q1", "2024-Q2", "2024-Q3"), "2024-Q4"),
        (["2023Q4", "2024q1"], "quarter", ("2023-Q4", "2024-Q1"), "2024-Q2"),
        (["2023-12", "2024-01", "2024-03"], "month", ("2023-12", "2024-01", "2024-02", "2024-03"), "2024-04"),
        (
            ["2023-11-30", "2023-12-31", "2024-01-31", "2024-02-29"],
            "month",
            ("2023-11", "2023-12", "2024-01", "2024-02"),
            "2024-03",
        ),
        (
            ["2023-09-30", "2023-12-31", "2024-06-30"],
            "quarter",
            ("2023-Q3", "2023-Q4", "2024-Q1", "2024-Q2"),
            "2024-Q3",
        ),
        (["2021-12-31", "2022-12-31", "2023-12-31"], "year", ("2021", "2022", "2023"), "2024"),
        (days(0, 7, 21), "week", ("2024-01-01", "2024-01-08", "2024-01-15", "2024-01-22"), "2024-01-29"),
        (
            days(0, 1, 2, 4),
            "weekday",
            ("2024-01-01", "2024-01-02", "2024-01-03", "2024-01-04", "2024-01-05"),
            "2024-01-08",
        ),
        (days(0, 4, 5, 6), "day", tuple(f"2024-01-0{i}" for i in range(1, 8)), "2024-01-08"),
        (
            [pd.Timestamp("2024-01-31"), pd.Timestamp("2024-02-29")],
            "month",
            ("2024-01", "2024-02"),
            "2024-03",
        ),
        (
            [np.datetime64("2024-01-31", "ns"), np.datetime64("2024-02-29", "ns")],
            "month",
            ("2024-01", "2024-02"),
            "2024-03",
        ),
        ([pd.Period("2024Q1"), pd.Period("2024Q2")], "quarter", ("2024-Q1", "2024-Q2"), "2024-Q3"),
        (
            ["2024-01-01 00:00:00", "2024-01-02T00:00:00"],
            "weekday",
            ("2024-01-01", "2024-01-02"),
            "2024-01-03",
        ),
        ([7], "integer", ("7",), "8"),
        (["-1", "0", "+1"], "integer", ("-1", "0", "1"), "2"),
    ],
)
def test_periods_are_recognised_sorted_and_filled(
    values: list[Any], kind: str, labels: tuple[str, ...], after: str
) -> None:
    periods, ordinals = find_periods(values)
    assert periods.kind == kind
    assert periods.labels == labels
    assert np.all(np.diff(periods.ordinals) == 1)
    assert periods.label_of(int(periods.ordinals[-1]) + 1) == after
    assert set(ordinals) <= set(periods.ordinals)


@pytest.mark.parametrize(
    ("values", "said"),
    [
        (["15/07/2024"], "not a period"),
        (["spring"], "not a period"),
        ([2.5], "expected a period"),
        ([True], "expected a period"),
        ([float("nan")], "expected a period"),
        ([10**400], "expected a period"),
        (["2024-Q5"], "not a period"),
        (["2024-13"], "not a period"),
        (["2023-02-29"], "no day"),
        (["2024-01-01 06:00"], "not a period"),
        ([dt.datetime(2024, 1, 1, 6)], "shorter than a day"),
        (["2004", "2024-Q1"], "the same way"),
        (["2024-01", "2024-01-15"], "the same way"),
        ([202401, 202402, 202501], "2024-07"),
        ([20240101, 20240102], "2024-07-15"),
        ([11, 40_031, 80_752, 120_077], "record numbers"),
    ],
)
def test_what_is_no_period_is_refused(values: list[Any], said: str) -> None:
    with pytest.raises(PeriodFault, match=said):
        find_periods(values)


def test_a_fault_of_one_value_says_which() -> None:
    with pytest.raises(PeriodFault) as caught:
        find_periods(["2004", "2005", "x"])
    assert caught.value.index == 2


def test_a_window_in_years_covers_whole_years_of_quarters() -> None:
    periods, _ = find_periods(["2003-Q1", "2003-Q2", "2006-Q4"])
    assert periods.label_of(periods.first_ordinal(2004)) == "2004-Q1"
    assert periods.label_of(periods.last_ordinal(2004)) == "2004-Q4"
    assert periods.label_of(periods.first_ordinal(dt.date(2004, 5, 3))) == "2004-Q2"
    assert periods.label_of(periods.ordinal_of("2004-05")) == "2004-Q2"
    with pytest.raises(PeriodFault, match="no single quarter"):
        periods.ordinal_of(2004)


def test_a_bound_between_two_periods_goes_inwards() -> None:
    periods, _ = find_periods([1990, 1995, 2000])
    assert periods.label_of(periods.first_ordinal(1991)) == "1995"
    assert periods.label_of(periods.last_ordinal(1999)) == "1995"
    with pytest.raises(PeriodFault, match="between two periods"):
        periods.ordinal_of(1991)


def test_a_weekend_lies_between_two_weekdays() -> None:
    periods, _ = find_periods(days(0, 1, 2, 3, 4, 7, 8))
    assert periods.label_of(periods.first_ordinal("2024-01-06")) == "2024-01-08"
    assert periods.label_of(periods.last_ordinal("2024-01-07")) == "2024-01-05"
    with pytest.raises(PeriodFault):
        periods.ordinal_of("2024-01-06")


def test_a_quarter_cannot_bound_whole_numbers() -> None:
    periods, _ = find_periods([1, 2, 3])
    with pytest.raises(PeriodFault, match="whole numbers"):
        periods.ordinal_of("2024-Q1")


@pytest.mark.parametrize(
    ("values", "cycle", "places"),
    [
        (["2023-Q3", "2023-Q4", "2024-Q1"], 4, [3, 4, 1]),
        (["2023-11", "2023-12", "2024-01"], 12, [11, 12, 1]),
        (["2023-03-31", "2023-06-30", "2023-09-30"], 4, [1, 2, 3]),
        (["2023-Q2", "2023-Q4", "2024-Q2", "2024-Q4"], 2, [1, 2, 1, 2]),
        (days(4, 5, 6, 7), 7, [5, 6, 7, 1]),
        (days(3, 4, 7, 8), 5, [4, 5, 1, 2]),
        ([5, 6, 7, 8], 3, [1, 2, 3, 1]),
    ],
)
def test_seasons_follow_the_calendar_where_it_has_them(
    values: list[Any], cycle: int, places: list[int]
) -> None:
    periods, _ = find_periods(values)
    assert periods.season_of(cycle, int(periods.ordinals[0])).tolist() == places


def test_a_subset_keeps_the_calendar() -> None:
    periods, _ = find_periods([1990, 1995, 2000])
    part = periods.subset(np.array([True, False, True]))
    assert part.labels == ("1990", "2000") and part.label_of(int(part.ordinals[-1]) + 1) == "2005"


@settings(max_examples=50, deadline=None)
@given(st.sets(st.dates(dt.date(1900, 1, 1), dt.date(1900, 12, 31)), min_size=15, max_size=40))
def test_every_date_finds_its_own_label_and_order_is_kept(dates: set[dt.date]) -> None:
    listed = sorted(dates, key=lambda d: (d.day, d.month))
    periods, ordinals = find_periods(listed)
    for date, ordinal in zip(listed, ordinals, strict=True):
        assert periods.ordinal_of(date) == ordinal
        assert periods.labels[ordinal - periods.ordinals[0]] == periods.label_of(int(ordinal))
    by_date = ordinals[np.argsort(np.array(listed, dtype="datetime64[D]"))]
    assert np.all(np.diff(by_date) > 0)


@settings(max_examples=50, deadline=None)
@given(st.sets(st.integers(1800, 2100), min_size=2, max_size=9))
def test_years_differ_by_whole_steps(years: set[int]) -> None:
    listed = list(years)
    periods, ordinals = find_periods(listed)
    first = min(listed)
    assert [first + periods.step * (o - periods.ordinals[0]) for o in ordinals] == listed
