"""One orthonormal basis per equation: the coordinates in which every classical estimate is well conditioned.

With ``X_i = Q_i R_i`` for each equation, generalised least squares in the coordinates ``R_i b_i`` has
the normal matrix ``Omega_ij Q_i'Q_j``. Its condition number is at most that of the error correlation,
however badly the regressors are scaled or however close to collinear they are within an equation; the
squaring of the condition number, for which normal equations are feared (Björck, Numerical Methods for
Least Squares Problems, 1996, section 2.2), does not happen. What error remains is of the size that
rounding the error covariance itself would cause, so a QR factorisation of the whole stacked system would
gain nothing, at far greater cost than one K x K Cholesky factor.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from bayes_sys.system.moments import Factor

Array = NDArray[np.float64]

RANK_TOLERANCE = 1e-13
"""A regressor whose part not explained by the ones before it is relatively smaller than this adds nothing."""


@dataclass(frozen=True)
class Bases:
    """Orthonormal bases of the equations' regressors, with what least squares leaves of the responses.

    Parameters
    ----------
    rows : array of float, shape (n_rows, K)
        ``Q_i`` side by side; the rows are those of the factor.
    triangles : tuple of arrays, each of shape (p_i, p_i)
        ``R_i``.
    equation : array of int, shape (K,)
        Equation of each column of ``rows``.
    projections : array of float, shape (K,)
        ``Q_i' y_i``: the least-squares estimate in these coordinates.
    residuals : array of float, shape (n_rows, n_equations)
        Factor rows of the least-squares residuals.
    n_periods : int
    """

    rows: Array
    triangles: tuple[Array, ...]
    equation: NDArray[np.int64]
    projections: Array
    residuals: Array
    n_periods: int

    @property
    def n_equations(self) -> int:
        """Number of equations."""
        return int(self.residuals.shape[1])

    @cached_property
    def gram(self) -> Array:
        """``Q_i' Q_j`` of all pairs of equations, shape (K, K)."""
        return self.rows.T @ self.rows

    @cached_property
    def membership(self) -> Array:
        """One where a coefficient belongs to an equation, shape (K, n_equations)."""
        out: Array = (self.equation[:, None] == np.arange(self.n_equations)).astype(float)
        return out

    @cached_property
    def slices(self) -> tuple[slice, ...]:
        """Where the coefficients of each equation stand."""
        stops = np.cumsum([t.shape[0] for t in self.triangles])
        return tuple(slice(int(b) - t.shape[0], int(b)) for b, t in zip(stops, self.triangles, strict=True))

    def fitted(self, coordinates: Array) -> Array:
        """Return factor rows of the fit that these coordinates make, shape (n_rows, n_equations)."""
        out: Array = (self.rows * coordinates) @ self.membership
        return out

    def onto(self, rows: Array) -> Array:
        """Project each equation's column of ``rows`` on that equation's basis, shape (K,)."""
        out: Array = np.einsum("na,na->a", self.rows, rows[:, self.equation])
        return out

    def coefficients(self, coordinates: Array) -> Array:
        """Turn coordinates into coefficients in the units of the data, shape (K,)."""
        return np.concatenate(
            [solve_upper(t, coordinates[s]) for t, s in zip(self.triangles, self.slices, strict=True)]
        )

    def covariance(self, of_coordinates: Array) -> Array:
        """Turn the covariance of coordinates into that of coefficients, shape (K, K)."""
        half = self._by_equation(of_coordinates)
        whole = self._by_equation(half.T)
        return (whole + whole.T) / 2.0

    def _by_equation(self, matrix: Array) -> Array:
        return np.vstack(
            [solve_upper(t, matrix[s]) for t, s in zip(self.triangles, self.slices, strict=True)]
        )


def solve_upper(triangle: Array, right: Array) -> Array:
    """Solve an upper triangular system."""
    out: Array = scipy.linalg.solve_triangular(triangle, right, check_finite=False)
    return out


def basis_of(columns: Array) -> tuple[Array, Array] | None:
    """Return Q and R of one equation's regressors; None where the data cannot tell its coefficients apart.

    Parameters
    ----------
    columns : array of float, shape (n_rows, p_i)
    """
    n_rows, n_columns = columns.shape
    if n_columns > n_rows:
        return None
    q, r = np.linalg.qr(columns)
    sizes = np.sqrt(np.einsum("nk,nk->k", columns, columns))
    if np.any(np.abs(np.diag(r)) <= RANK_TOLERANCE * sizes):
        return None
    return q, r


def build_bases(factor: Factor) -> Bases | None:
    """Build the bases of all equations; None where an equation's coefficients are not determined."""
    found = [basis_of(factor.regressors(i)) for i in range(factor.n_equations)]
    pairs = [pair for pair in found if pair is not None]
    if len(pairs) < len(found):
        return None
    responses = factor.responses()
    equation = np.repeat(np.arange(len(pairs)), [q.shape[1] for q, _ in pairs])
    bare = Bases(
        rows=np.hstack([q for q, _ in pairs]),
        triangles=tuple(r for _, r in pairs),
        equation=equation,
        projections=np.zeros(len(equation)),
        residuals=responses,
        n_periods=factor.n_periods,
    )
    projections = bare.onto(responses)
    residuals = responses - bare.fitted(projections)
    # A second projection takes out what rounding left of the first (Kahan and Parlett: twice is enough).
    left = bare.onto(residuals)
    return Bases(
        bare.rows,
        bare.triangles,
        equation,
        projections + left,
        residuals - bare.fitted(left),
        factor.n_periods,
    )
