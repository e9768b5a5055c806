"""From the tables of a study to one panel: rows found, aligned on a complete period grid, columns derived."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import StudyError, TableError, nearest
from bayes_sys.study.calendars import PeriodFault
from bayes_sys.study.cells import numbers, period_values, unit_names
from bayes_sys.study.derive import derive_columns
from bayes_sys.study.equations import EquationPlan, plan_equation, used_columns, wide_equations
from bayes_sys.study.faults import key_path
from bayes_sys.study.files import RawTable, given_table, load_table
from bayes_sys.study.panel import Panel
from bayes_sys.study.periods import Periods, find_periods
from bayes_sys.study.shared import add_shared_columns, shared_reach
from bayes_sys.study.spec import Study
from bayes_sys.study.spec_base import PLACEHOLDER, expand
from bayes_sys.study.store import Cells, Store, spread

if TYPE_CHECKING:
    import pandas as pd

MOST_UNITS = 100_000
MOST_CELLS = 200_000_000


@dataclass(frozen=True)
class _Layout:
    """Where each row of the table belongs.

    ``rows`` of the table in use; the equation and the grid position of each; equations of the study first.
    """

    equations: tuple[str, ...]
    n_selected: int
    rows: NDArray[np.int64]
    equation_of_row: NDArray[np.int64]
    periods: Periods
    position_of_row: NDArray[np.int64]


def read_panel(study: Study, table: pd.DataFrame | None = None) -> Panel:
    """Read the data of a study into a panel.

    Parameters
    ----------
    study : Study
    table : DataFrame, optional
        The data, instead of the file the study names; same layout.

    Returns
    -------
    Panel

    Raises
    ------
    StudyError
        If the study asks for a column, unit or period that the data do not hold.
    TableError
        If a file, a column, a row or a cell is wrong.
    """
    raw = _load(study, table)
    _need(study, raw, study.data.period, "data.period")
    layout = _wide_layout(study, raw) if study.data.is_wide else _long_layout(study, raw)
    _refuse_control_characters(layout.equations, raw.name)
    plans = [plan_equation(study, e) for e in layout.equations[: layout.n_selected]]
    store = Store(study, raw.name, layout.equations, layout.n_selected, len(layout.periods))
    _fill(store, raw, layout)
    add_shared_columns(store, layout.periods)
    in_sample = _sample(study, layout)
    lineage = derive_columns(store, layout.periods, in_sample)
    for plan in plans:
        needed = [(plan.response, plan.response_key)]
        needed += [(r.column, f"{plan.regressors_key}[{i}]") for i, r in enumerate(plan.regressors)]
        for column, key in needed:
            if not store.has(column):
                raise store.missing(column, key)
    frames = _frames(store, layout, plans)
    return Panel(layout.periods, in_sample, frames, lineage, raw.name, store.shared)


def _refuse_control_characters(equations: tuple[str, ...], source: str) -> None:
    """Refuse names that would break every table they stand in."""
    for name in equations:
        if not name.isprintable():
            raise TableError(
                f"the name {name!r} holds a line break, a tab or another sign that cannot be shown.",
                where=source,
                mend="Write the name on one line, in letters, digits and plain signs.",
            )


def _load(study: Study, table: pd.DataFrame | None) -> RawTable:
    if table is not None:
        return given_table(table, study.data.csv)
    if study.data.file is None:
        raise StudyError(
            "no data file is named.",
            where=study.at("data.file"),
            mend='Add file = "…" under [data], or hand a table over in Python.',
        )
    return load_table(study.folder / study.data.file, study.data.csv, study.data.sheet)


def _need(study: Study, raw: RawTable, column: str, key: str) -> None:
    known = [str(c) for c in raw.frame.columns]
    if column not in known:
        mend = f"{nearest(column, known)} {raw.about_header()}".strip()
        raise StudyError(f"there is no column “{column}” in {raw.name}.", where=study.at(key), mend=mend)


def _long_layout(study: Study, raw: RawTable) -> _Layout:
    unit = study.data.unit or ""
    _need(study, raw, unit, "data.unit")
    codes, names = unit_names(raw, unit)
    _check_count(len(names), raw, unit)
    selected = study.data.units if study.data.units is not None else tuple(names)
    known = set(names)
    for i, name in enumerate(study.data.units or ()):
        _check_unit(study, name, known, names, f"data.units[{i}]", f"in column “{unit}” of {raw.name}")
    for name in study.equation:
        place = key_path(("equation", name))
        _check_unit(study, name, set(selected), list(selected), place, "among the units of the study")
    equations = tuple(dict.fromkeys([*selected, *_visited(study, known, names, raw.name)]))
    column_of = {name: j for j, name in enumerate(equations)}
    lookup = np.array([column_of.get(name, -1) for name in names], dtype=np.int64)
    rows = np.flatnonzero(lookup[codes] >= 0)
    equation_of_row = lookup[codes[rows]]
    periods, position = _grid(study, raw, rows)
    _check_cells(raw, len(equations), len(periods))
    _refuse_duplicates(raw, rows, equation_of_row, position, periods, equations)
    return _Layout(equations, len(selected), rows, equation_of_row, periods, position)


def _visited(study: Study, known: set[str], names: list[str], source: str) -> list[str]:
    """Return the units that are read through ``of_unit``."""
    visited = []
    for name, spec in study.derive.items():
        if spec.of_unit is not None:
            _check_unit(
                study, spec.of_unit, known, names, f"{key_path(('derive', name))}.of_unit", f"in {source}"
            )
            visited.append(spec.of_unit)
    return visited


def _check_unit(study: Study, name: str, known: set[str], listed: list[str], key: str, place: str) -> None:
    if name not in known:
        raise StudyError(
            f"there is no unit “{name}” {place}.", where=study.at(key), mend=nearest(name, listed[:2000])
        )


def _wide_layout(study: Study, raw: RawTable) -> _Layout:
    selected = wide_equations(study, [str(c) for c in raw.frame.columns])
    for name in study.equation:
        place = key_path(("equation", name))
        _check_unit(study, name, set(selected), list(selected), place, "among the units of the study")
    _check_count(len(selected), raw, None)
    visited = [s.of_unit for s in study.derive.values() if s.of_unit is not None]
    equations = tuple(dict.fromkeys([*selected, *visited]))
    rows = np.arange(len(raw.frame), dtype=np.int64)
    periods, position = _grid(study, raw, rows)
    _check_cells(raw, len(equations), len(periods))
    nobody = np.zeros(len(rows), dtype=np.int64)
    _refuse_duplicates(raw, rows, nobody, position, periods, None)
    return _Layout(equations, len(selected), rows, nobody, periods, position)


def _grid(study: Study, raw: RawTable, rows: NDArray[np.int64]) -> tuple[Periods, NDArray[np.int64]]:
    column = study.data.period
    codes, values = period_values(raw, column, rows)
    where = f"{raw.name}, column “{column}”"
    try:
        periods, ordinals = find_periods(values, column)
        first = int(periods.ordinals[0])
        reach = shared_reach(study, periods)
        if reach:
            periods = periods.between(first - reach, int(periods.ordinals[-1]))
    except PeriodFault as error:
        if error.index is not None:
            where += f", {raw.row(int(rows[np.flatnonzero(codes == error.index)[0]]))}"
        raise TableError(error.what, where=where, mend=error.mend) from None
    return periods, ordinals[codes] - int(periods.ordinals[0])


def _check_count(n_units: int, raw: RawTable, column: str | None) -> None:
    if n_units > MOST_UNITS:
        place = f"column “{column}” holds" if column else "the study has"
        raise TableError(
            f"{place} {n_units:,} different units; at most {MOST_UNITS:,} are read.",
            where=raw.name,
            mend="Is this the column that says whose row it is?",
        )


def _check_cells(raw: RawTable, n_equations: int, n_grid: int) -> None:
    if n_equations * n_grid > MOST_CELLS:
        raise TableError(
            f"{n_equations:,} units over {n_grid:,} periods are more cells than can be held.",
            where=raw.name,
            mend="Choose units, or check the period column.",
        )


def _refuse_duplicates(
    raw: RawTable,
    rows: NDArray[np.int64],
    equation: NDArray[np.int64],
    position: NDArray[np.int64],
    periods: Periods,
    names: tuple[str, ...] | None,
) -> None:
    cell = equation * len(periods) + position
    order = np.argsort(cell, kind="stable")
    again = order[1:][cell[order][1:] == cell[order][:-1]]
    if not again.size:
        return
    second = int(again.min())
    first = int(np.flatnonzero(cell == cell[second])[0])
    whose = f"{names[equation[second]]}, {periods.labels[position[second]]}" if names else ""
    raise TableError(
        f"{whose or periods.labels[position[second]]} stands twice: "
        f"{raw.row(int(rows[first]))} and {raw.row(int(rows[second]))}.",
        where=raw.name,
        mend="Take one out."
        if names
        else 'Take one out; or add unit = "…" under [data] if each row is one unit and period.',
    )


def _fill(store: Store, raw: RawTable, layout: _Layout) -> None:
    """Put every column of numbers into the store; text is an error only where the study uses it."""
    store.raw_names.update(str(c) for c in raw.frame.columns)
    used = used_columns(store.study, layout.equations)
    part = raw.only(layout.rows)
    for column in raw.frame.columns:
        if column == store.study.data.unit and column not in used:
            continue
        try:
            values = numbers(part, column)
        except TableError:
            if column in used:
                raise
            continue
        store.columns[column] = _scatter(values, layout, store)


def _scatter(values: NDArray[np.float64], layout: _Layout, store: Store) -> Cells:
    wide = store.study.data.is_wide
    grid = np.full((store.n_grid, 1 if wide else len(store.equations)), np.nan)
    grid[layout.position_of_row, layout.equation_of_row] = values
    return spread(Cells(grid), len(store.equations)) if wide else Cells(grid)


def _sample(study: Study, layout: _Layout) -> NDArray[np.bool_]:
    periods = layout.periods
    spoken = np.zeros(len(periods), dtype=bool)
    spoken[layout.position_of_row[layout.equation_of_row < layout.n_selected]] = True
    inside = spoken.copy()
    if study.data.from_ is not None:
        inside &= periods.ordinals >= _bound(study, periods, "from", study.data.from_)
    if study.data.to is not None:
        inside &= periods.ordinals <= _bound(study, periods, "to", study.data.to)
    for i, value in enumerate(study.data.exclude):
        inside &= periods.ordinals != _excluded(study, periods, i, value)
    if not inside.any():
        first, last = periods.labels[int(np.argmax(spoken))], periods.labels[-1]
        raise StudyError(
            "from, to and exclude leave no period of the data.",
            where=study.at("data"),
            mend=f"The data go from {first} to {last}.",
        )
    return inside


def _bound(study: Study, periods: Periods, key: str, value: Any) -> int:
    try:
        return periods.first_ordinal(value) if key == "from" else periods.last_ordinal(value)
    except PeriodFault as error:
        raise StudyError(error.what, where=study.at(f"data.{key}"), mend=error.mend) from None


def _excluded(study: Study, periods: Periods, i: int, value: Any) -> int:
    where = study.at(f"data.exclude[{i}]")
    try:
        ordinal = periods.ordinal_of(value)
    except PeriodFault as error:
        raise StudyError(error.what, where=where, mend=error.mend) from None
    if not periods.ordinals[0] <= ordinal <= periods.ordinals[-1]:
        raise StudyError(
            f"{value} is no period of the data.",
            where=where,
            mend=f"They go from {periods.labels[0]} to {periods.labels[-1]}.",
        )
    return ordinal


def _frames(store: Store, layout: _Layout, plans: list[EquationPlan]) -> dict[str, pd.DataFrame]:
    import pandas as pd

    index = pd.Index(layout.periods.ordinals, name=layout.periods.name)
    common: pd.DataFrame | None = None
    if store.study.data.is_wide:
        raw = {n: c.values[:, 0] for n, c in store.columns.items() if n in store.raw_names}
        common = pd.DataFrame(raw, index=index)
    names = [n for n in store.columns if common is None or n not in store.raw_names]
    # One array (equations, columns, periods), so that each frame is a view of it: units may be very many.
    block = np.empty((len(plans), len(names), store.n_grid))
    for k, name in enumerate(names):
        block[:, k, :] = store.columns[name].values[:, : len(plans)].T
    frames = {}
    for j, plan in enumerate(plans):
        frame = pd.DataFrame(block[j].T, index=index, columns=names, copy=False)
        for name in _pooled(store, plan):
            frame[name] = store.pool[name].values[:, 0]
        frames[plan.name] = frame if common is None else pd.concat([common, frame], axis=1)
    return frames


def _pooled(store: Store, plan: EquationPlan) -> list[str]:
    """Return the columns written with ``{equation}`` that one equation makes, or borrows from others."""
    names = [expand(n, plan.name) for n in store.study.derive if PLACEHOLDER in n]
    names += [plan.response, *(r.column for r in plan.regressors)]
    return [n for n in dict.fromkeys(names) if n in store.pool]
