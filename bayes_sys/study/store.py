"""Columns of all equations on the period grid, as matrices, and the cells a step could not work out."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import StudyError, nearest
from bayes_sys.study.spec import Study
from bayes_sys.study.spec_base import PLACEHOLDER, expand

Matrix = NDArray[np.float64]
Marks = NDArray[np.int64]


@dataclass(frozen=True)
class Cells:
    """One column of every equation.

    Parameters
    ----------
    values : array of float, shape (n_grid, n_equations)
        NaN where nothing was observed or a step has no answer.
    marks : array of int, shape (n_grid, n_equations), or None
        0, or the number of the fault that this cell (or one it is made from) met; None: no fault at all.
    """

    values: Matrix
    marks: Marks | None = None

    def column(self, j: int) -> Cells:
        """Return one equation's column, shape (n_grid, 1)."""
        return Cells(self.values[:, j : j + 1], None if self.marks is None else self.marks[:, j : j + 1])


@dataclass
class Store:
    """What is known while a panel is being made: filled step by step, then left alone.

    Parameters
    ----------
    study : Study
    source : str
        Name of the data file, for messages.
    equations : tuple of str
        The equations of the study first, then units that are only read through ``of_unit``.
    n_selected : int
        How many of them are equations of the study.
    n_grid : int
    columns : dict of name to Cells
        Columns that every equation has under the same name.
    pool : dict of name to Cells of one column
        Columns whose name was written with ``{equation}``: one series under its own name.
    raw_names : set of str
        Every column of the tables, text columns too.
    shared : dict of column to str
        The columns of shared tables, with the name of the file.
    """

    study: Study
    source: str
    equations: tuple[str, ...]
    n_selected: int
    n_grid: int
    columns: dict[str, Cells] = field(default_factory=dict)
    pool: dict[str, Cells] = field(default_factory=dict)
    raw_names: set[str] = field(default_factory=set)
    shared: dict[str, str] = field(default_factory=dict)

    def get(self, pattern: str, key: str) -> Cells:
        """Return the column behind a name, for every equation, shape (n_grid, n_equations).

        Raises
        ------
        StudyError
            If there is no such column; ``key`` says who asked.
        """
        if PLACEHOLDER not in pattern:
            return self._one(pattern, key)
        parts = [self._one(expand(pattern, e), key, j) for j, e in enumerate(self.equations)]
        return stack(parts)

    def of_unit(self, pattern: str, unit: str, key: str) -> Cells:
        """Return one unit's column for every equation."""
        j = self.equations.index(unit)
        return spread(self._one(expand(pattern, unit), key, j), len(self.equations))

    def has(self, name: str) -> bool:
        """Whether a column of numbers of this name exists."""
        return name in self.columns or name in self.pool

    def _one(self, name: str, key: str, j: int | None = None) -> Cells:
        if name in self.columns:
            return self.columns[name] if j is None else self.columns[name].column(j)
        if name in self.pool:
            return self.pool[name] if j is not None else spread(self.pool[name], len(self.equations))
        raise self.missing(name, key)

    def missing(self, name: str, key: str) -> StudyError:
        """Return the error for a column that does not exist."""
        where = self.study.at(key)
        made_by = [d for d in self.study.derive if name == d or name in _expansions(d, self.equations)]
        if made_by and key.startswith("derive."):
            return StudyError(
                f"“{name}” is made by [derive] itself, here or further below.",
                where=where,
                mend="A derived column can only use columns made above it: change the order.",
            )
        seasons = [n for n in self.columns if n.startswith(f"{name}_") and n[len(name) + 1 :].isdigit()]
        if made_by and seasons:
            shown = ", ".join(f"“{s}”" for s in seasons[:3])
            return StudyError(f"“{name}” makes the columns {shown} …", where=where, mend="Name these.")
        if "{" in name:
            mend = "The only placeholder is “{equation}”."
        else:
            mend = nearest(name, [*self.columns, *self.pool])
        return StudyError(f"there is no column “{name}” in {self.source}.", where=where, mend=mend)


def _expansions(pattern: str, equations: Iterable[str]) -> set[str]:
    return {expand(pattern, e) for e in equations} if PLACEHOLDER in pattern else set()


def spread(cells: Cells, n: int) -> Cells:
    """Return a single column for ``n`` equations, without copying."""
    shape = (cells.values.shape[0], n)
    marks = None if cells.marks is None else np.broadcast_to(cells.marks, shape)
    return Cells(np.broadcast_to(cells.values, shape), marks)


def stack(parts: list[Cells]) -> Cells:
    """Lay single columns side by side."""
    values = np.hstack([p.values for p in parts])
    if all(p.marks is None for p in parts):
        return Cells(values)
    marks = [np.zeros(p.values.shape, np.int64) if p.marks is None else p.marks for p in parts]
    return Cells(values, np.hstack(marks))
