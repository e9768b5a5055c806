"""Coordinates of the error covariance: the factor of its inverse, whitened by a first guess.

``Sigma^-1 = W' W`` with ``W = A L0^-1``, ``A`` lower triangular, ``A_ii = exp(u_i)``, ``A_ij = u_ij / sqrt(T)``,
``L0`` the Cholesky factor of a first guess of Sigma. In these coordinates the posterior is close to a standard
shape whatever the units and the correlations, also where Sigma is nearly singular.

The density of ``u`` follows from the laws of the scales ``D`` and the correlation ``R`` by three changes of
variables (Muirhead 1982, Aspects of Multivariate Statistical Theory, theorems 2.1.8-2.1.10):
``(D, R) -> Sigma`` costs ``prod D_i^-N``, ``Sigma -> Sigma^-1`` gives ``det(Sigma)^(N+1)``, and
``Sigma^-1 -> W`` gives ``prod W_ii^i``, i = 1..N.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.kernels import kernel, lower_inverse

Array = NDArray[np.float64]


def n_free(n_equations: int) -> int:
    """Return how many unconstrained numbers the coordinates have."""
    return n_equations * (n_equations + 1) // 2


@kernel
def forward(u: Array, periods: float, guess_inverse: Array, w: Array, root: Array, scales: Array) -> float:
    """Fill ``w``, its inverse ``root`` (the Cholesky factor of Sigma) and ``scales``; return log det W.

    Parameters
    ----------
    u : array of float, shape (n (n + 1) / 2,)
        Log diagonal of A, then its rows below the diagonal.
    periods : float
    guess_inverse : array of float, shape (n, n)
        Inverse of L0, lower triangular.
    w, root : arrays of float, shape (n, n), written
    scales : array of float, shape (n,), written
    """
    n = scales.shape[0]
    unit = 1.0 / np.sqrt(periods)
    log_determinant = 0.0
    below = n
    for i in range(n):
        diagonal = np.exp(u[i])
        for j in range(n):
            w[i, j] = diagonal * guess_inverse[i, j]
        for k in range(i):
            a = u[below] * unit
            below += 1
            for j in range(k + 1):
                w[i, j] += a * guess_inverse[k, j]
        log_determinant += np.log(w[i, i])
    lower_inverse(w, root)
    for i in range(n):
        total = 0.0
        for j in range(i + 1):
            total += root[i, j] * root[i, j]
        scales[i] = np.sqrt(total)
    return log_determinant


@kernel
def log_volume(w: Array, scales: Array) -> float:
    """Return the log Jacobian of (D, R) -> u, up to a constant."""
    n = scales.shape[0]
    total = 0.0
    for i in range(n):
        total += (i + 2.0 - 2.0 * (n + 1.0)) * np.log(w[i, i]) - n * np.log(scales[i])
    return total


@kernel
def backward(
    u: Array,
    periods: float,
    guess_inverse: Array,
    w: Array,
    root: Array,
    scales: Array,
    by_log_scale: Array,
    by_log_w: Array,
    residual_square: Array,
    gradient: Array,
) -> None:
    """Write the gradient in ``u`` from what the laws say of D, of log W_ii and of Sigma^-1.

    Parameters
    ----------
    by_log_scale, by_log_w : arrays of float, shape (n,)
        Derivative of the log density in each log D_i and in each log W_ii.
    residual_square : array of float, shape (n, n)
        ``S`` of the term -tr(W S W') / 2.
    gradient : array of float, shape (n (n + 1) / 2,), written
    """
    n = scales.shape[0]
    pull = np.zeros(
        (n, n)
    )  # derivative in W; through the scales it is -(L' C Sigma), C = diag(by_log_scale / D^2)
    for i in range(n):
        c = by_log_scale[i] / (scales[i] * scales[i])
        for b in range(i + 1):
            covariance = 0.0
            for j in range(b + 1):
                covariance += root[i, j] * root[b, j]
            for a in range(b, i + 1):
                pull[a, b] -= c * root[i, a] * covariance
    for i in range(n):
        for j in range(i + 1):
            total = 0.0
            for k in range(i + 1):
                total += w[i, k] * residual_square[k, j]
            pull[i, j] -= total
        pull[i, i] += by_log_w[i] / w[i, i]
    unit = 1.0 / np.sqrt(periods)
    below = n
    for i in range(n):
        for k in range(i + 1):
            total = 0.0
            for j in range(k + 1):
                total += pull[i, j] * guess_inverse[k, j]
            if k < i:
                gradient[below] = total * unit
                below += 1
            else:
                gradient[i] = total * np.exp(u[i])
