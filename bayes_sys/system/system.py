"""The system: numbers and labels, aligned; it knows no file and no prior."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    from bayes_sys.study.panel import Lineage
    from bayes_sys.study.periods import Periods
    from bayes_sys.system.moments import Factor

Array = NDArray[np.float64]

INTERCEPT = "intercept"


@dataclass(frozen=True)
class Equation:
    """One response and its regressors.

    Parameters
    ----------
    name : str
        The unit's name.
    response : str
        Column of the response.
    regressors : tuple of str, length p_i
        Names, the intercept first where there is one. Like-named regressors of several equations are
        what pooling speaks about.
    columns : tuple of str, length p_i
        The column behind each regressor ("" for the intercept).
    design : array of float, shape (n_periods, p_i)
        Regressor values, in the units of the data; the intercept is a column of ones.
    lineage : Lineage or None
        Recorded steps from a source column to the response, None for a raw column.
    """

    name: str
    response: str
    regressors: tuple[str, ...]
    columns: tuple[str, ...]
    design: Array
    lineage: Lineage | None = None

    @property
    def has_intercept(self) -> bool:
        """Whether the first regressor is the constant term."""
        return bool(self.regressors) and self.regressors[0] == INTERCEPT


@dataclass(frozen=True)
class ErrorModel:
    """The law of the errors as the study asks for it."""

    family: str = "gaussian"
    autocorrelation: str = "none"


@dataclass(frozen=True)
class System:
    """The equations aligned on a common period index.

    Parameters
    ----------
    title : str
        Title of the study.
    equations : tuple of Equation, length n_equations
    periods : Periods, length n_periods
        The sample in use.
    responses : array of float, shape (n_periods, n_equations)
        In the units of the data.
    factor : Factor
        Triangular factor of the distinct regressor columns and the responses.
    errors : ErrorModel
    notes : tuple of str
        What happened on the way that a user should know: dropped periods, gaps, in plain words.
    """

    title: str
    equations: tuple[Equation, ...]
    periods: Periods
    responses: Array
    factor: Factor
    errors: ErrorModel = field(default_factory=ErrorModel)
    notes: tuple[str, ...] = ()
    metadata: Mapping[str, str] = field(default_factory=dict)

    def __repr__(self) -> str:
        """Say in one line what this system is; its arrays would fill pages."""
        labels = self.periods.labels
        span = f" {labels[0]} to {labels[-1]}" if labels else ""
        return (
            f"<System {self.title!r}: {self.n_equations} equations, {self.n_periods} periods{span}, "
            f"{self.n_coefficients} coefficients>"
        )

    @property
    def n_periods(self) -> int:
        """Number of periods in the sample, T."""
        return int(self.responses.shape[0])

    @property
    def n_equations(self) -> int:
        """Number of equations, N."""
        return len(self.equations)

    @property
    def n_coefficients(self) -> int:
        """Number of coefficients over all equations, K."""
        return len(self.coefficient_equation)

    @cached_property
    def names(self) -> tuple[str, ...]:
        """Names of the equations."""
        return tuple(e.name for e in self.equations)

    @cached_property
    def coefficients(self) -> tuple[tuple[str, str], ...]:
        """(equation, regressor) of every coefficient, equation by equation."""
        return tuple((e.name, r) for e in self.equations for r in e.regressors)

    @cached_property
    def coefficient_labels(self) -> tuple[str, ...]:
        """``equation.regressor`` of every coefficient."""
        return tuple(f"{e}.{r}" for e, r in self.coefficients)

    @cached_property
    def coefficient_equation(self) -> NDArray[np.int64]:
        """Index of the equation each coefficient belongs to, shape (K,)."""
        return np.repeat(np.arange(self.n_equations), [len(e.regressors) for e in self.equations])

    @cached_property
    def pairs(self) -> tuple[tuple[int, int], ...]:
        """Index pairs (a, b), a < b, row by row of the lower triangle: (0, 1), (0, 2), (1, 2), ..."""
        return tuple((a, b) for b in range(self.n_equations) for a in range(b))

    @cached_property
    def pair_labels(self) -> tuple[str, ...]:
        """``earlier ~ later`` of every pair of equations."""
        return tuple(f"{self.names[a]} ~ {self.names[b]}" for a, b in self.pairs)

    def slice_of(self, equation: int) -> slice:
        """Return where the coefficients of one equation stand among all coefficients."""
        start = sum(len(e.regressors) for e in self.equations[:equation])
        return slice(start, start + len(self.equations[equation].regressors))
