"""One series beside its fit and its predictive band."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from bayes_sys.report.numbers import counted, cut
from bayes_sys.report.plots.canvas import BLUE, INK, SKY, VERMILION, Picture, axes_at, picture, show_power

if TYPE_CHECKING:
    import pandas as pd
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

Array = NDArray[np.float64]

WIDTH, HEIGHT = 350, 190
FURTHEST = 20
"""How many of the points furthest outside the band are drawn whatever else is thinned out."""


@dataclass(frozen=True)
class Series:
    """One equation's rows of the table of fitted values, thinned for drawing.

    Parameters
    ----------
    labels : tuple of str
    where : array of float, shape (n,)
        Position of each period.
    observed, mean, low, high : arrays of float, shape (n,)
    outside : array of bool, shape (n,)
        Which outcomes lie outside the band.
    n_periods : int
        Before thinning.
    step : float
        Distance of neighbouring periods; a line breaks where it is exceeded. NaN: nothing is known of gaps.
    """

    labels: tuple[str, ...]
    where: Array
    observed: Array
    mean: Array
    low: Array
    high: Array
    outside: NDArray[np.bool_]
    n_periods: int
    step: float


def series_of(rows: pd.DataFrame, at_most: int) -> Series:
    """Take one equation's rows; when there are too many, evenly spaced ones and those furthest outside."""
    observed, mean, low, high = (rows[name].to_numpy(float) for name in ("observed", "mean", "q5", "q95"))
    labels = tuple(str(label) for label in rows["period"])
    where, step = positions(labels)
    excess = np.nan_to_num(
        np.fmax(low - observed, observed - high) / np.maximum(high - low, 1e-300), nan=-1.0
    )
    keep = np.arange(len(labels))
    if len(labels) > at_most:
        even = np.linspace(0, len(labels) - 1, at_most).round().astype(int)
        furthest = np.argsort(excess)[-FURTHEST:]
        keep = np.union1d(even, furthest[excess[furthest] > 0])
        step = np.nan
    return Series(
        labels=tuple(labels[i] for i in keep),
        where=where[keep],
        observed=observed[keep],
        mean=mean[keep],
        low=low[keep],
        high=high[keep],
        outside=excess[keep] > 0,
        n_periods=len(labels),
        step=step,
    )


def series_picture(name: str, series: Series) -> Picture:
    """Draw one series: points, the regression's mean, the 90% predictive band."""

    def draw(figure: Figure) -> None:
        axes = axes_at(figure, 48, 10, WIDTH - 58, HEIGHT - 36)
        gaps = np.flatnonzero(np.diff(series.where) > 1.5 * series.step) + 1
        where, mean, low, high = (
            np.insert(column, gaps, np.nan) for column in (series.where, series.mean, series.low, series.high)
        )
        alone = len(series.where) == 1
        if alone:
            axes.vlines(series.where, series.low, series.high, color=SKY, linewidth=8, alpha=0.35)
        axes.fill_between(where, low, high, color=SKY, alpha=0.3, linewidth=0)
        axes.plot(where, mean, color=BLUE, linewidth=1.6, marker="_" if alone else None)
        _points(axes, series)
        _label(axes, series)

    return picture(WIDTH, HEIGHT, draw, _in_words(name, series))


def _points(axes: Axes, series: Series) -> None:
    size = 3.6 if len(series.where) <= 80 else 2.0
    inside = ~series.outside
    axes.plot(
        series.where[inside], series.observed[inside], "o", color=INK, markersize=size, linestyle="none"
    )
    axes.plot(
        series.where[series.outside],
        series.observed[series.outside],
        "D",
        markerfacecolor="white",
        markeredgecolor=VERMILION,
        markeredgewidth=1.2,
        markersize=size + 0.8,
        linestyle="none",
    )


def _label(axes: Axes, series: Series) -> None:
    from matplotlib.ticker import MaxNLocator

    axes.yaxis.set_major_locator(MaxNLocator(4))
    show_power(axes, axes.yaxis, side="left")
    axes.grid(axis="y", color="#eef0f3", linewidth=0.8)
    axes.set_axisbelow(True)
    longest = max(len(label) for label in series.labels)
    count = min(len(series.labels), 4 if longest <= 7 else 3)
    ticks = np.unique(np.linspace(0, len(series.labels) - 1, count).round().astype(int))
    axes.set_xticks(series.where[ticks], [cut(series.labels[i], 14) for i in ticks])
    for tick, side in zip(axes.get_xticklabels(), _sides(len(ticks)), strict=True):
        tick.set_horizontalalignment(side)


def _sides(count: int) -> list[Literal["left", "center", "right"]]:
    """Return how tick labels align, so that the first and the last stay inside the picture."""
    sides: list[Literal["left", "center", "right"]] = ["center"] * count
    if count > 1:
        sides[0], sides[-1] = "left", "right"
    return sides


def _in_words(name: str, series: Series) -> str:
    drawn = int(np.isfinite(series.observed).sum())
    return (
        f"{name}: {counted(drawn, 'observed point')} from {series.labels[0]} to {series.labels[-1]}, the "
        "fitted mean and the 90% predictive band; "
        f"{counted(int(series.outside.sum()), 'point')} outside the band."
    )


def positions(labels: Sequence[str]) -> tuple[Array, float]:
    """Return where periods stand on their own calendar and how far neighbours are apart.

    Years, quarters, months and whole numbers stand at distance one, days at the distance that is commonest;
    labels of any other form stand one after the other.
    """
    found = [_position(label) for label in labels]
    where = np.array([np.nan if x is None else x for x in found], dtype=float)
    steps = np.diff(where)
    if not np.isfinite(where).all() or (steps <= 0).any():
        return np.arange(len(labels), dtype=float), np.nan
    is_day = any(label.count("-") == 2 for label in labels[:1])
    if not is_day or len(steps) == 0:
        return where, 1.0
    sizes, counts = np.unique(steps, return_counts=True)
    # trading days leave weekends out: gaps in days say nothing
    return where, float(sizes[counts.argmax()]) if sizes[counts.argmax()] > 3 else np.nan


def _position(label: str) -> float | None:
    text = label.strip()
    if re.fullmatch(r"-?\d{1,15}", text):
        return float(text)
    if quarter := re.fullmatch(r"(\d{4})-?Q([1-4])", text):
        return 4.0 * int(quarter[1]) + int(quarter[2])
    if month := re.fullmatch(r"(\d{4})-(\d{2})", text):
        return 12.0 * int(month[1]) + int(month[2])
    try:
        return float(date.fromisoformat(text).toordinal())
    except ValueError:
        return None
