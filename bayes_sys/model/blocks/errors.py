"""Block: Gaussian errors, correlated across equations; the coefficients known, or integrated out.

Given the error covariance and the prior's scales the coefficients are Gaussian, so they leave the density
exactly: with ``b = centre + B theta``, ``theta ~ N(0, I)``, ``F_ab = Omega_e(a)e(b) x_a' x_b`` and
``A = I + B' F B``::

    log p(y | Sigma, B) = T log det W - tr(W S W') / 2 - theta' theta / 2 - log det A / 2

at the conditional mean ``theta = A^-1 B' h``; ``S`` is the residual cross-product there (Lindley & Smith 1972,
J. R. Statist. Soc. B 34, 1-41; Zellner 1962 for F). The derivative in Sigma^-1 is that for known coefficients
with ``S`` replaced by ``S + sum_ab (B A^-1 B')_ab x_a' x_b``.

Everything is expressed about reference coefficients close to the answer, so that the residual cross-product is
not the small difference of large numbers.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.kernels import cholesky, kernel, lower_inverse, own_square
from bayes_sys.system.moments import Factor

Array = NDArray[np.float64]

LIKELIHOOD = "likelihood"


@kernel
def information(w: Array, xx: Array, equation: Array, out: Array) -> None:
    """Write ``F_ab = Omega_e(a)e(b) x_a' x_b``, shape (K, K); ``w`` is the factor of Omega = W'W."""
    n = w.shape[0]
    omega = np.empty((n, n))
    own_square(w, omega)
    for a in range(xx.shape[0]):
        for b in range(xx.shape[0]):
            out[a, b] = omega[int(equation[a]), int(equation[b])] * xx[a, b]


@kernel
def score(w: Array, xe: Array, equation: Array, out: Array) -> None:
    """Write ``h_a = sum_j Omega_e(a)j x_a' e_j`` of the reference residuals e, shape (K,)."""
    n = w.shape[0]
    whitened = np.empty(n)
    for a in range(xe.shape[0]):
        for k in range(n):
            total = 0.0
            for j in range(k + 1):
                total += w[k, j] * xe[a, j]
            whitened[k] = total
        i = int(equation[a])
        total = 0.0
        for k in range(i, n):
            total += w[k, i] * whitened[k]
        out[a] = total


@kernel
def residual_moments(
    shift: Array, xx: Array, xe: Array, ee: Array, equation: Array, moved: Array, square: Array
) -> None:
    """Write ``x_a' e_j`` and the residual cross-product at coefficients ``shift`` away from the reference.

    ``moved`` has shape (K, n), ``square`` (n, n).
    """
    n, k = ee.shape[0], xx.shape[0]
    for a in range(k):
        for j in range(n):
            moved[a, j] = xe[a, j]
        for b in range(k):
            moved[a, int(equation[b])] -= xx[a, b] * shift[b]
    for i in range(n):
        for j in range(n):
            square[i, j] = ee[i, j]
    for a in range(k):
        i = int(equation[a])
        for j in range(n):
            square[j, i] -= xe[a, j] * shift[a]
            square[i, j] -= shift[a] * moved[a, j]


@kernel
def known(
    w: Array, shift: Array, xx: Array, xe: Array, ee: Array, equation: Array, by_shift: Array, square: Array
) -> float:
    """Return the log likelihood of (Sigma, b) without its ``T log det W``, at known coefficients.

    Parameters
    ----------
    w : array of float, shape (n, n)
    shift : array of float, shape (K,)
        Coefficients less the reference.
    xx, xe, ee, equation
        As for ``collapsed``.
    by_shift : array of float, shape (K,), written
        Derivative in the coefficients.
    square : array of float, shape (n, n), written
        The residual cross-product, which carries the derivative in Sigma^-1.
    """
    moved = np.empty(xe.shape)
    residual_moments(shift, xx, xe, ee, equation, moved, square)
    score(w, moved, equation, by_shift)
    return -0.5 * trace_whitened(w, square)


@kernel
def precision(f: Array, scale: Array, members: Array, groups: Array, fb: Array, out: Array) -> None:
    """Write the lower triangle of ``A = I + B' F B``, and ``F B`` into ``fb``, shape (K, K + n_groups)."""
    k, n_groups = f.shape[0], groups.shape[0]
    for a in range(k):
        for g in range(n_groups):
            fb[a, k + g] = 0.0
        for b in range(k):
            fb[a, b] = f[a, b] * scale[b]
            g = int(members[b, 1])
            if g >= 0:
                fb[a, k + g] += f[a, b] * groups[g, 0]
    for a in range(k):
        for b in range(a + 1):
            out[a, b] = scale[a] * fb[a, b]
        out[a, a] += 1.0
    for g in range(n_groups):
        for b in range(k + g + 1):
            total = 0.0
            for a in range(k):
                if members[a, 1] == g:
                    total += fb[a, b]
            out[k + g, b] = groups[g, 0] * total
        out[k + g, k + g] += 1.0


@kernel
def transpose_columns(x: Array, scale: Array, members: Array, groups: Array, out: Array) -> None:
    """Write ``B' x``, shape (K + n_groups,)."""
    k = x.shape[0]
    for g in range(groups.shape[0]):
        out[k + g] = 0.0
    for a in range(k):
        out[a] = scale[a] * x[a]
        g = int(members[a, 1])
        if g >= 0:
            out[k + g] += groups[g, 0] * x[a]


@kernel
def columns(theta: Array, scale: Array, members: Array, groups: Array, out: Array) -> None:
    """Write ``B theta``, shape (K,)."""
    k = out.shape[0]
    for a in range(k):
        out[a] = scale[a] * theta[a]
        g = int(members[a, 1])
        if g >= 0:
            out[a] += groups[g, 0] * theta[k + g]


@kernel
def add_uncertainty(
    inverse: Array, scale: Array, members: Array, groups: Array, xx: Array, equation: Array, out: Array
) -> None:
    """Add ``sum_ab (B A^-1 B')_ab x_a' x_b`` to the residual cross-product."""
    k = xx.shape[0]
    for a in range(k):
        i, ga = int(equation[a]), int(members[a, 1])
        for b in range(k):
            gb = int(members[b, 1])
            v = scale[a] * scale[b] * inverse[a, b]
            if ga >= 0:
                v += groups[ga, 0] * scale[b] * inverse[k + ga, b]
            if gb >= 0:
                v += scale[a] * groups[gb, 0] * inverse[a, k + gb]
            if ga >= 0 and gb >= 0:
                v += groups[ga, 0] * groups[gb, 0] * inverse[k + ga, k + gb]
            out[i, int(equation[b])] += v * xx[a, b]


@kernel
def collapsed(
    w: Array,
    scale: Array,
    members: Array,
    groups: Array,
    centre: Array,
    xx: Array,
    xe: Array,
    ee: Array,
    equation: Array,
    by_log_scale: Array,
    square: Array,
) -> float:
    """Return the log likelihood of (Sigma, B) without its ``T log det W``, coefficients integrated out.

    Parameters
    ----------
    w : array of float, shape (n, n)
    scale, members, groups
        The columns B, see ``coefficients``.
    centre : array of float, shape (K,)
        Prior centre less the reference coefficients.
    xx, xe, ee : arrays of float, shapes (K, K), (K, n), (n, n)
        Cross-products of the regressors and of the residuals at the reference coefficients.
    equation : array of float, shape (K,)
    by_log_scale : array of float, shape (K,), written
        Derivative in the logarithm of each coefficient's own scale.
    square : array of float, shape (n, n), written
        The ``S`` that carries the derivative in Sigma^-1.
    """
    k, p = xx.shape[0], xx.shape[0] + groups.shape[0]
    f, fb, a = np.empty((k, k)), np.empty((k, p)), np.empty((p, p))
    lower, root = np.zeros((p, p)), np.zeros((p, p))
    h, rhs, theta, shift = np.empty(k), np.empty(p), np.empty(p), np.empty(k)
    information(w, xx, equation, f)
    score(w, xe, equation, h)
    for i in range(k):
        for j in range(k):
            h[i] -= f[i, j] * centre[j]
    precision(f, scale, members, groups, fb, a)
    log_root = cholesky(a, lower)
    if not np.isfinite(log_root):
        return np.nan
    lower_inverse(lower, root)
    transpose_columns(h, scale, members, groups, rhs)
    own_square(root, a)
    value = -log_root
    for i in range(p):
        total = 0.0
        for j in range(p):
            total += a[i, j] * rhs[j]
        theta[i] = total
        value -= 0.5 * total * total
    for i in range(k):
        by_log_scale[i] = theta[i] * theta[i] + a[i, i] - 1.0
    columns(theta, scale, members, groups, shift)
    for i in range(k):
        shift[i] += centre[i]
    residual_moments(shift, xx, xe, ee, equation, np.empty(xe.shape), square)
    value -= 0.5 * trace_whitened(w, square)
    add_uncertainty(a, scale, members, groups, xx, equation, square)
    return value


@kernel
def trace_whitened(w: Array, square: Array) -> float:
    """Return tr(W S W')."""
    n = w.shape[0]
    total = 0.0
    for i in range(n):
        for j in range(i + 1):
            row = 0.0
            for k in range(i + 1):
                row += w[i, k] * square[k, j]
            total += row * w[i, j]
    return total


def declare(factor: Factor, coefficients: Any, scales: Any, correlation_factor: Any) -> None:
    """Declare the Gaussian likelihood in the PyMC model at hand, through the triangular factor.

    Its value is the log likelihood with all constants; what each period contributes is computed after sampling
    (``pointwise``), because the factor has no periods.
    """
    import pymc as pm
    import pytensor.tensor as pt
    from pytensor.tensor.linalg import solve_triangular

    equation = np.repeat(np.arange(factor.n_equations), [len(d) for d in factor.design])
    design = pm.Data("design_factor", factor.stacked_regressors())
    responses = pm.Data("response_factor", factor.responses())
    membership = np.eye(factor.n_equations)[equation]
    residuals = responses - (design * coefficients[None, :]) @ membership
    root = scales[:, None] * correlation_factor
    whitened = solve_triangular(root, residuals.T, lower=True, b_ndim=2)
    log_determinant = pt.log(pt.diagonal(root)).sum()
    constant = 0.5 * factor.n_periods * factor.n_equations * float(np.log(2 * np.pi))
    value = -factor.n_periods * log_determinant - 0.5 * (whitened**2).sum() - constant
    pm.Potential(LIKELIHOOD, value)
