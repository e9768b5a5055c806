"""Intervals one below the other: the posterior, the classical estimates beside it, the prior behind it."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.report.numbers import cut, number, percent
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
    show_power,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

WIDTH = 400
ROW, DENSE_ROW, DENSE_FROM = 34, 25, 13
TOP, BOTTOM = 22, 26
SHARE_WIDTH = 80
NAME_LETTERS = 20
Z_TAIL = 1.645
"""A normal's 90% interval is its mean and so many standard deviations on either side."""


@dataclass(frozen=True)
class Mark:
    """A second estimate of each row: its value, and its standard error (NaN: none is drawn)."""

    value: Array
    error: Array


@dataclass(frozen=True)
class Rows:
    """What one picture shows, an array entry a row.

    Parameters
    ----------
    names : tuple of str
    mean, low, high : arrays of float
        Posterior mean and 90% interval.
    fgls, ols : Mark
        NaN where there is none.
    prior_mean, prior_sd : arrays of float
        NaN or infinite where there is nothing to draw.
    share : array of float
        How far the prior decides; NaN where unknown.
    """

    names: tuple[str, ...]
    mean: Array
    low: Array
    high: Array
    fgls: Mark
    ols: Mark
    prior_mean: Array
    prior_sd: Array
    share: Array


def interval_picture(title: str, rows: Rows, *, logarithmic: bool = False, origin: bool = True) -> Picture:
    """Draw the intervals of one regressor over all equations.

    Parameters
    ----------
    title : str
        For the words that stand in for the picture.
    rows : Rows
    logarithmic : bool
        Whether positive values of very different size share the axis.
    origin : bool
        Whether nought is marked.
    """
    count = len(rows.names)
    row = ROW if count < DENSE_FROM else DENSE_ROW
    height = TOP + BOTTOM + row * count
    has_share = bool(np.isfinite(rows.share).any())
    letters = max(len(cut(name, NAME_LETTERS)) for name in rows.names)
    gutter = 12 + 6.3 * letters

    def draw(figure: Figure) -> None:
        right = SHARE_WIDTH if has_share else 12
        axes = axes_at(figure, gutter, TOP, WIDTH - gutter - right, row * count)
        low, high = _window(rows, logarithmic)
        if logarithmic:
            axes.set_xscale("log")
        _frame(axes, rows, low, high)
        _prior(axes, rows)
        if origin and low < 0 < high:
            axes.axvline(0, color=MUTED, linewidth=0.9, linestyle=(0, (4, 3)), zorder=1)
        _marks(axes, rows.ols, -0.29, "D", MUTED, (low, high))
        _marks(axes, rows.fgls, 0.29, "s", VERMILION, (low, high))
        at = np.arange(count)
        axes.hlines(at, rows.low, rows.high, color=BLUE, linewidth=4, zorder=4)
        axes.plot(
            rows.mean, at, "o", markersize=7, color="white", markeredgecolor=BLUE, markeredgewidth=2, zorder=5
        )
        if has_share:
            _shares(figure, rows, row)

    return picture(WIDTH, height, draw, _in_words(title, rows))


def _window(rows: Rows, logarithmic: bool) -> tuple[float, float]:
    """Return the ends of the axis: the posterior whole, the classical estimates as far as they stay near."""
    low, high = float(np.nanmin(rows.low)), float(np.nanmax(rows.high))
    scale = max(abs(low), abs(high), 1e-12)
    if logarithmic:
        return low / 1.3, high * 1.3
    span = max(high - low, 1e-3 * scale)
    points = [rows.fgls.value, rows.ols.value]
    points += [m.value + side * Z_TAIL * m.error for m in (rows.fgls, rows.ols) for side in (-1, 1)]
    near = np.concatenate(points)
    near = near[np.isfinite(near) & (near > low - span) & (near < high + span)]
    bottom, top = min([low, *near]), max([high, *near])
    if bottom - 0.5 * span < 0 < top + 0.5 * span:
        bottom, top = min(bottom, 0.0), max(top, 0.0)
    margin = 0.06 * (top - bottom)
    return bottom - margin, top + margin


def _frame(axes: Axes, rows: Rows, low: float, high: float) -> None:
    from matplotlib.ticker import MaxNLocator

    count = len(rows.names)
    axes.set_xlim(low, high)
    axes.set_ylim(count - 0.5, -0.5)
    axes.set_yticks(range(count), [cut(name, NAME_LETTERS) for name in rows.names], color=INK, fontsize=10)
    axes.spines["left"].set_visible(False)
    if axes.get_xscale() == "linear":
        axes.xaxis.set_major_locator(MaxNLocator(4))
        show_power(axes, axes.xaxis, side="right")
    for line in np.arange(count - 1) + 0.5:
        axes.axhline(line, color=PALE, linewidth=0.8, zorder=0)


def _prior(axes: Axes, rows: Rows) -> None:
    reach = Z_TAIL * rows.prior_sd
    for at, (centre, size) in enumerate(zip(rows.prior_mean, reach, strict=True)):
        if np.isfinite(centre) and np.isfinite(size) and size > 0:
            axes.barh(at, 2 * size, left=centre - size, height=0.9, color="#f5f2e9", zorder=0)


def _marks(
    axes: Axes, mark: Mark, shift: float, shape: str, colour: str, window: tuple[float, float]
) -> None:
    """Draw one classical estimate; an arrow at the edge says that it lies beyond."""
    at = np.arange(len(mark.value)) + shift
    reach = Z_TAIL * mark.error
    low, high = np.maximum(mark.value - reach, window[0]), np.minimum(mark.value + reach, window[1])
    seen = np.isfinite(low) & np.isfinite(high) & (low < high)
    axes.hlines(at[seen], low[seen], high[seen], color=colour, linewidth=1.2, zorder=2)
    inside = (mark.value >= window[0]) & (mark.value <= window[1])
    axes.plot(
        mark.value[inside],
        at[inside],
        shape,
        markersize=4.5,
        markerfacecolor="white",
        markeredgecolor=colour,
        markeredgewidth=1.3,
        zorder=3,
    )
    for beyond, edge, arrow in ((mark.value < window[0], 0, "<"), (mark.value > window[1], 1, ">")):
        axes.plot(
            np.full(beyond.sum(), window[edge]), at[beyond], arrow, color=colour, markersize=6, clip_on=False
        )


def _shares(figure: Figure, rows: Rows, row: int) -> None:
    """Draw how far the prior decides, a bar a row."""
    count = len(rows.names)
    axes = axes_at(figure, WIDTH - SHARE_WIDTH + 14, TOP, 32, row * count)
    axes.set_axis_off()
    axes.set_xlim(0, 1)
    axes.set_ylim(count - 0.5, -0.5)
    known = np.flatnonzero(np.isfinite(rows.share))
    axes.barh(known, 1, height=0.26, color=PALE, edgecolor=FAINT, linewidth=0.6)
    axes.barh(known, rows.share[known], height=0.26, color=INK)
    for at in known:
        axes.text(1.12, float(at), percent(rows.share[at]), va="center", ha="left", fontsize=9.5, color=INK)
    figure.text(
        (WIDTH - 4) / WIDTH,
        1 - 12 / (TOP + BOTTOM + row * count),
        "prior’s share",
        ha="right",
        va="center",
        fontsize=9,
        color=MUTED,
    )


def _in_words(title: str, rows: Rows) -> str:
    parts = [
        f"{name} {number(mean)} ({number(low)} to {number(high)})"
        for name, mean, low, high in zip(rows.names, rows.mean, rows.low, rows.high, strict=True)
    ]
    return f"{title}, posterior mean and 90% interval: {'; '.join(parts)}."
