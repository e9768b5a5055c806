"""Periods: labels a user writes, and the whole numbers that lags are counted in."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True)
class Periods:
    """An ordered set of periods.

    Parameters
    ----------
    kind : str
        "integer", "year", "quarter", "month", "week", "day" or "weekday".
    ordinals : array of int, shape (n_periods,), increasing
        Position of each period on its own calendar; two neighbours differ by one.
    labels : tuple of str, length n_periods
        How each period is written: 2004, 2024-Q3, 2024-07, 2024-07-15.
    name : str
        The column the periods came from.
    """

    kind: str
    ordinals: NDArray[np.int64]
    labels: tuple[str, ...]
    name: str = "period"

    def __len__(self) -> int:
        return len(self.labels)
