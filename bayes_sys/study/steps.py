"""The derivation steps, on matrices of periods × equations.

A cell that exists but has no answer (the log of zero) becomes NaN and carries the number of its fault on
through later steps; it is an error only if it reaches a period of the sample.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from bayes_sys.study.spec_data import Step
from bayes_sys.study.store import Cells, Marks, Matrix

_REASON = {
    "log": "has no logarithm; values must be above 0",
    "exp": "is too large for exp",
    "logit": "has no logit; values must lie strictly between 0 and 1",
    "power": "cannot be raised to this power",
    "over": "cannot be divided: the divisor is 0 or the result is too large",
    "scale": "becomes too large",
    "times": "becomes too large",
    "plus": "becomes too large",
    "minus": "becomes too large",
    "center": "becomes too large",
    "diff": "becomes too large",
}


@dataclass(frozen=True)
class CellFault:
    """Where a step had no answer: the cell, its value, the step."""

    row: int
    equation: int
    value: float
    column: str
    key: str
    reason: str


@dataclass(frozen=True)
class _Block:
    base: int
    rows: NDArray[np.int64]
    equations: NDArray[np.int64]
    values: NDArray[np.float64]
    about: tuple[str, str, str]


@dataclass
class FaultBook:
    """All cells without an answer, numbered from 1; kept as arrays, for there may be very many."""

    n_faults: int = 0
    blocks: list[_Block] = field(default_factory=list)

    def mark(
        self, bad: NDArray[np.bool_], before: Matrix, marks: Marks | None, about: tuple[str, str, str]
    ) -> Marks:
        """Return the marks with the numbers of the bad cells in them."""
        new = np.zeros(bad.shape, np.int64) if marks is None else marks.copy()
        rows, equations = np.nonzero(bad)
        self.blocks.append(_Block(self.n_faults, rows, equations, before[rows, equations], about))
        new[rows, equations] = self.n_faults + 1 + np.arange(len(rows))
        self.n_faults += len(rows)
        return new

    def fault(self, number: int) -> CellFault:
        """Return the fault of a number."""
        block = next(b for b in reversed(self.blocks) if b.base < number)
        i = number - block.base - 1
        return CellFault(int(block.rows[i]), int(block.equations[i]), float(block.values[i]), *block.about)


def shift(values: NDArray[np.float64], periods: int) -> NDArray[np.float64]:
    """Return values of some periods earlier; NaN where the grid has none."""
    moved = np.full(values.shape, np.nan)
    if periods < values.shape[0]:
        moved[periods:] = values[:-periods]
    return moved


def _shift_marks(marks: Marks | None, periods: int) -> Marks | None:
    if marks is None:
        return None
    moved = np.zeros(marks.shape, np.int64)
    if periods < marks.shape[0]:
        moved[periods:] = marks[:-periods]
    return moved


def _join(a: Marks | None, b: Marks | None) -> Marks | None:
    if a is None or b is None:
        return b if a is None else a
    return np.asarray(np.maximum(a, b), dtype=np.int64)


def apply_step(
    step: Step, cells: Cells, other: Cells | None, *, book: FaultBook, column: str, key: str
) -> Cells:
    """Carry out one step (all but ``standardise``).

    Parameters
    ----------
    step : Step
    cells : Cells
        The column so far.
    other : Cells or None
        The other column of ``times``, ``over``, ``plus`` and ``minus``.
    book : FaultBook
        Takes down the cells that have no answer.
    column, key : str
        The derived column's source and its place in the study, for messages.
    """
    if step.name == "lag":
        return Cells(shift(cells.values, step.argument), _shift_marks(cells.marks, step.argument))
    if step.name == "rolling_mean":
        return _rolling_mean(cells, step.argument)
    before = cells.values
    with np.errstate(all="ignore"):
        after, known = _compute(step, before, other)
    marks = cells.marks
    if step.name == "diff":
        marks = _join(marks, _shift_marks(marks, 1))
    if other is not None:
        marks = _join(marks, other.marks)
    bad = known & ~np.isfinite(after)
    if bad.any():
        after = np.where(bad, np.nan, after)
        marks = book.mark(bad, before, marks, (column, key, _REASON[step.name]))
    return Cells(after, marks)


def _compute(step: Step, x: Matrix, other: Cells | None) -> tuple[Matrix, NDArray[np.bool_]]:
    """Return the result, and which cells have all they need."""
    known = np.isfinite(x)
    c = step.argument
    if step.name == "log":
        return np.log(x), known
    if step.name == "exp":
        return np.exp(x), known
    if step.name == "logit":
        return np.log(x) - np.log1p(-x), known
    if step.name == "scale":
        return x * c, known
    if step.name == "center":
        return x - c, known
    if step.name == "power":
        return np.power(x, c), known
    if step.name == "diff":
        earlier = shift(x, 1)
        return x - earlier, known & np.isfinite(earlier)
    if other is None:
        raise ValueError(f"the step {step.name} needs another column")
    y = other.values
    known = known & np.isfinite(y)
    if step.name == "times":
        return x * y, known
    if step.name == "over":
        return x / y, known
    return (x + y if step.name == "plus" else x - y), known


def _rolling_mean(cells: Cells, length: int) -> Cells:
    total, marks = cells.values, cells.marks
    for k in range(1, min(length, cells.values.shape[0] + 1)):
        total = total + shift(cells.values, k)
        marks = _join(marks, _shift_marks(cells.marks, k))
    return Cells(total / length, marks)


def moments(cells: Cells, in_sample: NDArray[np.bool_]) -> tuple[Matrix, Matrix]:
    """Return mean and standard deviation (divisor n − 1) of each equation's column over the sample.

    NaN, shape (n_equations,), where fewer than two values exist or all are equal.
    """
    x = cells.values[in_sample]
    known = np.isfinite(x)
    n = known.sum(axis=0)
    with np.errstate(all="ignore"):
        mean = np.where(known, x, 0.0).sum(axis=0) / n
        spread = np.where(known, x - mean, 0.0)
        sd = np.sqrt((spread**2).sum(axis=0) / (n - 1))
        low = np.where(known, x, np.inf).min(axis=0, initial=np.inf)
        high = np.where(known, x, -np.inf).max(axis=0, initial=-np.inf)
    usable = (n >= 2) & (high > low) & (sd > 0) & np.isfinite(sd)
    return np.where(usable, mean, np.nan), np.where(usable, sd, np.nan)
