"""The correlation matrix, each pair drawn as its interval, so that what is not known is seen first."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.report.numbers import cut, fixed
from bayes_sys.report.plots.canvas import (
    BLUE,
    FAINT,
    INK,
    MUTED,
    PALE,
    VERMILION,
    Picture,
    axes_at,
    picture,
)

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

UNCLEAR = "#9aa3af"
"""Colour of a pair whose sign the data leave open."""
ROOMY, TIGHT = 7, 13
"""Up to so many equations the interval is written out; up to so many, the mean."""
IN_WORDS = 45
"""How many pairs the words beside the picture name."""


def matrix_picture(names: tuple[str, ...], table: pd.DataFrame) -> Picture:
    """Draw all pairs as the lower triangle of a matrix.

    Each cell is a scale from -1 (left edge) over 0 (middle) to 1 (right edge); a bar spans the 90% interval
    and a dot stands at the mean; a square below marks the classical (FGLS) correlation where there is one. The bar
    has a colour only where the interval leaves nought out.

    Parameters
    ----------
    names : tuple of str
        Equations, in order.
    table : DataFrame
        As in ``correlations.csv``.
    """
    count = len(names) - 1
    width, height = cell_size(len(names))
    letters = 20 if len(names) <= TIGHT else 16
    gutter = 14 + 6.3 * max(len(cut(name, letters)) for name in names)
    below = 20 + (16 if len(names) <= ROOMY else gutter)
    total = (int(gutter + width * count + 12), int(6 + height * count + below))

    def draw(figure: Figure) -> None:
        axes = axes_at(figure, gutter, 6, width * count, height * count)
        axes.set_xlim(0, count)
        axes.set_ylim(count, 0)
        _label(axes, names, letters)
        rows, columns, values = _cells(names, table)
        _grounds(axes, rows, columns, values, len(names))
        _bars(axes, rows, columns, values, len(names))
        _classical(axes, rows, columns, _fgls(table), len(names))
        if len(names) <= TIGHT:
            _numbers(axes, rows, columns, values, len(names))

    return picture(*total, draw, _in_words(table))


def cell_size(n_equations: int) -> tuple[float, float]:
    """Return width and height of a cell in pixels."""
    if n_equations <= ROOMY:
        return (96.0, 58.0) if n_equations <= 6 else (88.0, 54.0)
    return (60.0, 38.0) if n_equations <= TIGHT else (25.0, 17.0)


def _cells(names: tuple[str, ...], table: pd.DataFrame) -> tuple[Array, Array, Array]:
    """Return row, column and (mean, low, high) of every pair; the later equation is the row."""
    place = {name: i for i, name in enumerate(names)}
    first = np.array([place[name] for name in table["equation_a"]], dtype=float)
    second = np.array([place[name] for name in table["equation_b"]], dtype=float)
    return second - 1, first, table[["mean", "q5", "q95"]].to_numpy(dtype=float)


def _label(axes: Axes, names: tuple[str, ...], letters: int) -> None:
    count = len(names) - 1
    axes.spines[["left", "bottom"]].set_visible(False)
    middle = np.arange(count) + 0.5
    axes.set_yticks(middle, [cut(name, letters) for name in names[1:]], color=INK, fontsize=10)
    roomy = len(names) <= ROOMY
    shown = [cut(name, 14 if roomy else letters) for name in names[:-1]]
    axes.set_xticks(middle, shown, color=INK, fontsize=10, rotation=0 if roomy else 90)
    axes.tick_params(axis="x", length=0, pad=16 if roomy else 4)
    if roomy:
        for column in range(count):
            for at, value, side in ((0.03, -1, "left"), (0.5, 0, "center"), (0.97, 1, "right")):
                text = fixed(value, 0)
                axes.text(column + at, count + 0.05, text, ha=side, va="top", fontsize=8.5, color=MUTED)


def _colour(values: Array) -> str:
    _, low, high = values
    return VERMILION if low > 0 else BLUE if high < 0 else UNCLEAR


def _grounds(axes: Axes, rows: Array, columns: Array, values: Array, n_equations: int) -> None:
    from matplotlib.collections import LineCollection, PatchCollection
    from matplotlib.patches import Rectangle

    tints = {VERMILION: "#fdf1e9", BLUE: "#eaf3f9", UNCLEAR: "#f7f8fa"}
    boxes = [Rectangle((c + 0.02, r + 0.03), 0.96, 0.94) for r, c in zip(rows, columns, strict=True)]
    colours = [tints[_colour(v)] for v in values]
    axes.add_collection(PatchCollection(boxes, facecolors=colours, edgecolors=PALE, linewidths=0.8))
    top = 0.08 if n_equations > TIGHT else 0.55
    middles = [[(c + 0.5, r + top), (c + 0.5, r + 0.92)] for r, c in zip(rows, columns, strict=True)]
    axes.add_collection(LineCollection(middles, colors=FAINT, linewidths=0.8))


def _bars(axes: Axes, rows: Array, columns: Array, values: Array, n_equations: int) -> None:
    down = 0.5 if n_equations > TIGHT else 0.7
    at = rows + down
    ends = columns[:, None] + 0.5 + 0.46 * values[:, 1:]
    colours = [_colour(v) for v in values]
    thick = {True: 6.0, False: 4.0}[n_equations <= ROOMY]
    axes.hlines(at, ends[:, 0], ends[:, 1], colors=colours, linewidth=thick)
    size = {True: 6.0, False: 3.5}[n_equations <= ROOMY]
    means = columns + 0.5 + 0.46 * values[:, 0]
    axes.plot(means, at, "o", color="white", markeredgecolor=INK, markeredgewidth=1.2, markersize=size)


def _fgls(table: pd.DataFrame) -> Array:
    """Return the classical correlation of every pair, NaN where there is none."""
    return table["fgls"].to_numpy(dtype=float) if "fgls" in table else np.full(len(table), np.nan)


def _classical(axes: Axes, rows: Array, columns: Array, fgls: Array, n_equations: int) -> None:
    """Mark the classical correlation on the scale of its cell, below the interval."""
    size = 4.5 if n_equations <= ROOMY else 3.5 if n_equations <= TIGHT else 2.2
    look: dict[str, Any] = {"markerfacecolor": "white", "markeredgecolor": INK, "markeredgewidth": 1.1}
    at = columns + 0.5 + 0.46 * fgls
    known = np.isfinite(fgls)
    axes.plot(at[known], rows[known] + 0.87, "s", linestyle="none", markersize=size, **look)


def _numbers(axes: Axes, rows: Array, columns: Array, values: Array, n_equations: int) -> None:
    roomy = n_equations <= ROOMY
    for row, column, (mean, low, high) in zip(rows, columns, values, strict=True):
        place: dict[str, Any] = {"ha": "center", "va": "center"}
        if roomy:
            axes.text(
                column + 0.5, row + 0.22, fixed(mean), fontsize=12, fontweight="bold", color=INK, **place
            )
            text = f"{fixed(low)} to {fixed(high)}"
            axes.text(column + 0.5, row + 0.45, text, fontsize=9, color=MUTED, **place)
        else:
            axes.text(column + 0.5, row + 0.3, fixed(mean), fontsize=9.5, color=INK, **place)


def _in_words(table: pd.DataFrame) -> str:
    columns = [table[name] for name in ("equation_a", "equation_b", "mean", "q5", "q95")]
    parts = [
        f"{a} and {b} {fixed(mean)} ({fixed(low)} to {fixed(high)})"
        for a, b, mean, low, high in list(zip(*columns, strict=True))[:IN_WORDS]
    ]
    rest = len(table) - len(parts)
    more = f"; and {rest} more pairs in the table of correlations" if rest > 0 else ""
    return f"Correlations of the errors, posterior mean and 90% interval: {'; '.join(parts)}{more}."
