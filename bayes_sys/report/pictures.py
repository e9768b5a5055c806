"""Which pictures a run gets."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.report.plots.canvas import Picture
from bayes_sys.report.plots.intervals import Mark, Rows, interval_picture
from bayes_sys.report.plots.matrix import matrix_picture
from bayes_sys.report.plots.series import Series, series_of, series_picture
from bayes_sys.report.words import INTERCEPT

if TYPE_CHECKING:
    import pandas as pd

    from bayes_sys.report.content import RunContent

Array = NDArray[np.float64]

POINTS = 7500
"""Points drawn over all series together; MIN_POINTS to MAX_POINTS of each."""
MIN_POINTS, MAX_POINTS = 120, 400
MAX_PANELS = 40
"""Regressors that get a picture; the rest stand in the table."""
FAR_APART = 30.0
"""Ratio of the largest to the smallest error scale from which the axis is logarithmic."""


def series_pictures(content: RunContent) -> list[tuple[str, Picture, Series]]:
    """Draw every series with its fit."""
    fitted = content.tables.get("fitted")
    if fitted is None or fitted.empty:
        return []
    groups = list(fitted.groupby("equation", sort=False))
    at_most = int(np.clip(POINTS // len(groups), MIN_POINTS, MAX_POINTS))
    pictures = []
    for name, rows in groups:
        series = series_of(rows, at_most)
        pictures.append((str(name), series_picture(str(name), series), series))
    return pictures


def coefficient_pictures(content: RunContent) -> list[tuple[str, Picture]]:
    """Draw one panel a regressor, the constants last."""
    table = content.tables.get("coefficients")
    if table is None or table.empty:
        return []
    errors = _ols_errors(content)
    groups = sorted(table.groupby("regressor", sort=False), key=lambda group: group[0] == INTERCEPT)
    return [(str(name), _panel(str(name), rows, errors)) for name, rows in groups[:MAX_PANELS]]


def _panel(name: str, rows: pd.DataFrame, errors: dict[tuple[str, str], float]) -> Picture:
    own = np.array(
        [errors.get((e, r), np.nan) for e, r in zip(rows["equation"], rows["regressor"], strict=True)]
    )
    laid = Rows(
        names=tuple(str(e) for e in rows["equation"]),
        mean=_column(rows, "mean"),
        low=_column(rows, "q5"),
        high=_column(rows, "q95"),
        fgls=Mark(_column(rows, "fgls"), _column(rows, "fgls_se")),
        ols=Mark(_column(rows, "ols"), own),
        prior_mean=_column(rows, "prior_mean"),
        prior_sd=_column(rows, "prior_sd"),
        share=_column(rows, "shrinkage"),
    )
    return interval_picture(name, laid, origin=True)


def scale_picture(content: RunContent) -> Picture | None:
    """Draw the error scales."""
    table = content.tables.get("scales")
    if table is None or table.empty:
        return None
    nothing = np.full(len(table), np.nan)
    laid = Rows(
        names=tuple(str(e) for e in table["equation"]),
        mean=_column(table, "mean"),
        low=_column(table, "q5"),
        high=_column(table, "q95"),
        fgls=Mark(_column(table, "fgls"), nothing),
        ols=Mark(nothing, nothing),
        prior_mean=nothing,
        prior_sd=nothing,
        share=nothing,
    )
    logarithmic = bool(laid.low.min() > 0 and laid.high.max() / laid.low.min() > FAR_APART)
    return interval_picture("Error standard deviation", laid, logarithmic=logarithmic, origin=False)


def correlation_picture(content: RunContent) -> Picture | None:
    """Draw the correlation matrix."""
    table = content.tables.get("correlations")
    if table is None or table.empty:
        return None
    return matrix_picture(equation_names(content), table)


def equation_names(content: RunContent) -> tuple[str, ...]:
    """Return the names of the equations, in the order of the study."""
    for name in ("scales", "coefficients", "benchmark", "fitted"):
        table = content.tables.get(name)
        if table is not None:
            return tuple(str(e) for e in dict.fromkeys(table["equation"]))
    return ()


def _column(table: pd.DataFrame, name: str) -> Array:
    return table[name].to_numpy(dtype=float) if name in table else np.full(len(table), np.nan)


def _ols_errors(content: RunContent) -> dict[tuple[str, str], float]:
    table = content.tables.get("benchmark")
    if table is None:
        return {}
    keys = zip(table["equation"], table["regressor"], strict=True)
    return dict(zip(keys, _column(table, "ols_se"), strict=True))
