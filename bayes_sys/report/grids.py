"""Tables as the page shows them: headings in words, numbers written for reading."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from bayes_sys.report.numbers import NOTHING, as_float, fixed, number, percent

if TYPE_CHECKING:
    import pandas as pd

MAX_ROWS = 600
"""Longer tables are cut: the whole stands in the run folder."""

HEADINGS = {
    "equation_a": "equation",
    "equation_b": "and",
    "q5": "5%",
    "q50": "50%",
    "q95": "95%",
    "prob_positive": "P(above 0)",
    "prior_mean": "prior mean",
    "prior_sd": "prior sd",
    "ols": "OLS",
    "ols_se": "OLS se",
    "fgls": "FGLS",
    "fgls_se": "FGLS se",
    "iterated_se": "iterated se",
    "shrinkage": "prior’s share",
    "moved_se": "moved, in se",
    "rhat": "R-hat",
    "ess_bulk": "ESS bulk",
    "ess_tail": "ESS tail",
    "r2_mean": "R² mean",
    "r2_q5": "R² 5%",
    "r2_q95": "R² 95%",
    "tail_probability": "tail probability",
}
TEXT = frozenset(
    {"period", "equation", "equation_a", "equation_b", "regressor", "statistic", "verdict", "sentence"}
)
SHARES = frozenset({"prob_positive", "shrinkage"})
WHOLE = frozenset({"n", "ess_bulk", "ess_tail"})
DECIMALS = {"rhat": 3, "moved_se": 2, "tail_probability": 3, "r2_mean": 2, "r2_q5": 2, "r2_q95": 2}


@dataclass(frozen=True)
class Grid:
    """A table ready for the page.

    Parameters
    ----------
    headings : tuple of str
    numeric : tuple of bool
        Which columns hold numbers.
    rows : tuple of tuples of str
    file : str
        Where the whole table stands in the run folder.
    left_out : int
        How many rows are not shown.
    """

    headings: tuple[str, ...]
    numeric: tuple[bool, ...]
    rows: tuple[tuple[str, ...], ...]
    file: str
    left_out: int = 0


def grid(table: pd.DataFrame, file: str, *, without: tuple[str, ...] = ()) -> Grid:
    """Lay a table out for the page."""
    names = [str(name) for name in table.columns if name not in without]
    shown = table.head(MAX_ROWS)
    digits = 3 if "rhat" not in names else 4
    columns = [[written(name, value, digits) for value in shown[name]] for name in names]
    return Grid(
        headings=tuple(HEADINGS.get(name, name.replace("_", " ")) for name in names),
        numeric=tuple(name not in TEXT for name in names),
        rows=tuple(zip(*columns, strict=True)),
        file=file,
        left_out=len(table) - len(shown),
    )


def written(name: str, value: object, digits: int = 3) -> str:
    """Write one cell."""
    if name in TEXT:
        return str(value)
    if name in SHARES:
        return percent(value)
    if name in WHOLE:
        found = as_float(value)
        return NOTHING if found != found else f"{found:,.0f}"
    return fixed(value, DECIMALS[name]) if name in DECIMALS else number(value, digits)
