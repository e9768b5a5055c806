"""The small triangular factor that carries everything a Gaussian likelihood needs.

With ``Z = [X, Y]`` (distinct regressor columns once, then the responses) and ``Z = Q R``, the residual
cross-product of any coefficients is ``S = (R A)' (R A)``: the cost of the likelihood, of its gradient and of
every classical estimate no longer depends on the number of periods, and working with ``R`` instead of
``Z'Z`` keeps the digits that badly scaled regressors would lose (Golub & Van Loan, Matrix Computations,
section 5.3: the normal equations square the condition number).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

CHUNK_ROWS = 65_536


@dataclass(frozen=True)
class Factor:
    """Triangular factor of ``[X, Y]``.

    Parameters
    ----------
    triangle : array of float, shape (n_rows, n_columns), n_rows = min(n_periods, n_columns)
        Upper triangular (trapezoidal when there are fewer periods than columns).
    n_periods : int
    design : tuple of int arrays, one per equation, each of length p_i
        Which column of the factor holds each regressor of the equation.
    response : array of int, shape (n_equations,)
        Which column holds each response.
    """

    triangle: Array
    n_periods: int
    design: tuple[NDArray[np.int64], ...]
    response: NDArray[np.int64]

    @property
    def n_equations(self) -> int:
        """Number of equations."""
        return len(self.design)

    @property
    def n_distinct(self) -> int:
        """Number of distinct regressor columns over all equations."""
        return int(self.triangle.shape[1]) - self.n_equations

    def regressors(self, equation: int) -> Array:
        """Return the factor's columns of one equation's regressors, shape (n_rows, p_i)."""
        return self.triangle[:, self.design[equation]]

    def stacked_regressors(self) -> Array:
        """Return the factor's column of every coefficient, shape (n_rows, K)."""
        return self.triangle[:, np.concatenate(self.design)]

    def responses(self) -> Array:
        """Return the factor's columns of the responses, shape (n_rows, n_equations)."""
        return self.triangle[:, self.response]

    def residuals(self, coefficients: Array) -> Array:
        """Return factor rows of the residuals; their cross-product is that of the residuals themselves.

        Parameters
        ----------
        coefficients : array of float, shape (K,)

        Returns
        -------
        array of float, shape (n_rows, n_equations)
        """
        out = self.responses().copy()
        start = 0
        for i, columns in enumerate(self.design):
            stop = start + len(columns)
            out[:, i] -= self.triangle[:, columns] @ coefficients[start:stop]
            start = stop
        return out


def factorise(designs: Sequence[Array], responses: Array, *, chunk_rows: int = CHUNK_ROWS) -> Factor:
    """Factor the distinct regressor columns and the responses, in one pass over the periods.

    Parameters
    ----------
    designs : sequence of arrays of float, each of shape (n_periods, p_i)
    responses : array of float, shape (n_periods, n_equations)
    chunk_rows : int, default 65536
        Rows factored at a time; the triangles of the chunks are factored together (sequential TSQR,
        Demmel et al. 2012, SIAM J. Sci. Comput. 34, A206), so memory stays bounded.
    """
    distinct: list[Array] = []
    seen: dict[bytes, int] = {}
    positions = []
    for design in designs:
        where = []
        for column in np.ascontiguousarray(design.T):
            key = column.tobytes()
            if key not in seen:
                seen[key] = len(distinct)
                distinct.append(column)
            where.append(seen[key])
        positions.append(np.array(where, dtype=np.int64))
    n_periods, n_equations = responses.shape
    triangle = np.empty((0, len(distinct) + n_equations))
    for start in range(0, n_periods, chunk_rows):
        rows = slice(start, start + chunk_rows)
        block = np.column_stack([*(c[rows] for c in distinct), responses[rows]])
        triangle = np.linalg.qr(np.vstack([triangle, block]), mode="r")
    return Factor(triangle, n_periods, tuple(positions), len(distinct) + np.arange(n_equations))
