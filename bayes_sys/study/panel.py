"""The panel: what the table says, per equation, on one complete period grid."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pandas as pd

    from bayes_sys.study.periods import Periods


@dataclass(frozen=True)
class AppliedStep:
    """One derivation step as it was carried out, with whatever it had to look up in the sample."""

    name: str
    """Name of the step: "log", "lag", "standardise", ..."""
    argument: Any = None
    """The argument as written in the study (a number or a column name); None where a step has none."""
    fitted: Mapping[str, float] = field(default_factory=dict)
    """Numbers taken from the sample: ``mean`` and ``sd`` of ``standardise``."""


@dataclass(frozen=True)
class Lineage:
    """Where a derived column comes from: a source column and the steps applied to it, in order."""

    source: str | None
    steps: tuple[AppliedStep, ...]


@dataclass(frozen=True)
class Panel:
    """Raw and derived columns of every equation, on one grid without gaps.

    Parameters
    ----------
    periods : Periods, length n_grid
        Every period from the first to the last that the table holds, gaps filled.
    in_sample : array of bool, shape (n_grid,)
        Which periods belong to the sample in use (window applied, excluded periods taken out, and
        periods that no row speaks of taken out).
    frames : mapping of equation name to DataFrame, each of n_grid rows
        Raw, shared and derived columns of one equation; NaN where nothing was observed. The index holds
        the ordinals of the periods.
    lineage : mapping of (equation, column) to Lineage
        The recorded steps of every derived column.
    source : str
        Name of the data file or "table given in Python", for messages.
    shared : mapping of column to str
        The columns that come from a shared table, with the name of its file.
    """

    periods: Periods
    in_sample: NDArray[np.bool_]
    frames: Mapping[str, pd.DataFrame]
    lineage: Mapping[tuple[str, str], Lineage]
    source: str
    shared: Mapping[str, str] = field(default_factory=dict)

    @property
    def equations(self) -> tuple[str, ...]:
        """Names of the equations, in the order of the study."""
        return tuple(self.frames)
