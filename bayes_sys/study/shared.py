"""Shared tables: columns by period alone, the same for every unit."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import StudyError, TableError, nearest
from bayes_sys.study.calendars import PeriodFault
from bayes_sys.study.cells import numbers, period_values
from bayes_sys.study.equations import used_columns
from bayes_sys.study.files import RawTable, load_table
from bayes_sys.study.periods import Periods
from bayes_sys.study.spec import SharedTable, Study
from bayes_sys.study.store import Cells, Store, spread


def add_shared_columns(store: Store, periods: Periods) -> None:
    """Put the columns of every shared table into the store; periods it does not hold stay NaN.

    Raises
    ------
    StudyError, TableError
        If a table, its periods or its cells are wrong, or a column's name is taken.
    """
    used = used_columns(store.study, store.equations)
    for i, spec in enumerate(store.study.data.shared):
        raw = _load(store.study, spec)
        ordinals = _ordinals(store.study, spec, i, raw, periods)
        position = ordinals - int(periods.ordinals[0])
        inside = (position >= 0) & (position < len(periods))
        if not inside.any():
            raise TableError(
                f"none of its periods is among those of {store.source}.",
                where=f"{raw.name}, column “{spec.period}”",
                mend=f"They go from {periods.labels[0]} to {periods.labels[-1]}.",
            )
        for column in raw.frame.columns:
            if column == spec.period:
                continue
            _refuse_taken(store, column, i, raw.name)
            store.raw_names.add(column)
            store.shared[column] = raw.name
            try:
                values = numbers(raw, column)
            except TableError:
                if column in used:
                    raise
                continue
            grid = np.full((store.n_grid, 1), np.nan)
            grid[position[inside], 0] = values[inside]
            store.columns[column] = spread(Cells(grid), len(store.equations))


def shared_reach(study: Study, periods: Periods) -> int:
    """Return how many periods before the main table are worth keeping because lags can reach them."""
    reach = 0
    for derived in study.derive.values():
        for step in derived.steps:
            reach += {"lag": step.argument, "rolling_mean": step.argument, "diff": 1}.get(step.name, 0)
    if not reach or not study.data.shared:
        return 0
    earliest = int(periods.ordinals[0])
    for i, spec in enumerate(study.data.shared):
        ordinals = _ordinals(study, spec, i, _load(study, spec), periods)
        earliest = min(earliest, int(ordinals.min()))
    return min(reach, int(periods.ordinals[0]) - earliest)


def _load(study: Study, spec: SharedTable) -> RawTable:
    return load_table(study.folder / spec.file, spec.csv or study.data.csv, spec.sheet)


def _ordinals(study: Study, spec: SharedTable, i: int, raw: RawTable, periods: Periods) -> NDArray[np.int64]:
    """Return the ordinal of each row; rows between two periods of the main table get one far outside."""
    known = [str(c) for c in raw.frame.columns]
    if spec.period not in known:
        raise StudyError(
            f"there is no column “{spec.period}” in {raw.name}.",
            where=study.at(f"data.shared[{i}].period"),
            mend=nearest(spec.period, known),
        )
    codes, values = period_values(raw, spec.period, np.arange(len(raw.frame), dtype=np.int64))
    found = np.array(
        [_ordinal(raw, spec, codes, c, v, periods) for c, v in enumerate(values)], dtype=np.int64
    )
    ordinals = found[codes]
    order = np.argsort(ordinals, kind="stable")
    again = order[1:][np.diff(ordinals[order]) == 0]
    again = again[ordinals[again] != _NOWHERE]
    if again.size:
        second = int(again.min())
        first = int(np.flatnonzero(ordinals == ordinals[second])[0])
        raise TableError(
            f"{periods.label_of(ordinals[second])} stands twice: {raw.row(first)} and {raw.row(second)}.",
            where=raw.name,
            mend="A shared table has one row for each period.",
        )
    return ordinals


_NOWHERE = 2**62


def _ordinal(
    raw: RawTable, spec: SharedTable, codes: NDArray[np.int64], code: int, value: Any, periods: Periods
) -> int:
    try:
        first, last = periods.first_ordinal(value), periods.last_ordinal(value)
        if first > last:
            return _NOWHERE
        return periods.ordinal_of(value)
    except PeriodFault as error:
        row = int(np.flatnonzero(codes == code)[0])
        raise TableError(
            error.what, where=f"{raw.name}, column “{spec.period}”, {raw.row(row)}", mend=error.mend
        ) from None


def _refuse_taken(store: Store, column: str, i: int, name: str) -> None:
    if column in store.raw_names:
        raise StudyError(
            f"the column “{column}” of {name} exists in another table already.",
            where=store.study.at(f"data.shared[{i}]"),
            mend="Rename it in one of them.",
        )
