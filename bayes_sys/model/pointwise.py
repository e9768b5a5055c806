"""What each period contributes to the log likelihood, jointly over the equations, draw by draw."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bayes_sys.system.system import System

Array = NDArray[np.float64]

CHUNK_NUMBERS = 4_000_000


def pointwise_log_likelihood(system: System, coefficients: Array, roots: Array) -> Array:
    """Return the log density of each period's responses, shape (n_draws, n_periods).

    The multivariate normal density with all constants, through the Cholesky factor of the covariance.

    Parameters
    ----------
    coefficients : array of float, shape (n_draws, K)
    roots : array of float, shape (n_draws, n_equations, n_equations)
        Lower Cholesky factors of the error covariance.
    """
    n_draws, periods, n = len(coefficients), system.n_periods, system.n_equations
    out = np.empty((n_draws, periods))
    size = max(1, CHUNK_NUMBERS // (periods * n))
    for start in range(0, n_draws, size):
        rows = slice(start, start + size)
        w = np.linalg.solve(roots[rows], np.broadcast_to(np.eye(n), roots[rows].shape))
        residuals = system.responses.T - fitted(system, coefficients[rows])
        log_determinant = np.log(np.einsum("sii->si", w)).sum(axis=1)
        quadratic = np.square(w @ residuals).sum(axis=1)
        out[rows] = log_determinant[:, None] - 0.5 * quadratic - 0.5 * n * np.log(2 * np.pi)
    return out


def fitted(system: System, coefficients: Array) -> Array:
    """Return the regression means, shape (n_draws, n_equations, n_periods)."""
    means = [
        coefficients[:, system.slice_of(i)] @ equation.design.T for i, equation in enumerate(system.equations)
    ]
    return np.stack(means, axis=1)
