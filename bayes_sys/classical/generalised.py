"""Generalised least squares in the coordinates of the bases: one step, two steps, and to the fixed point.

References
----------
.. [1] Zellner (1962), An efficient method of estimating seemingly unrelated regressions and tests for
   aggregation bias, Journal of the American Statistical Association 57, 348-368.
.. [2] Zellner and Huang (1962), Further properties of efficient estimators for seemingly unrelated regression
   equations, International Economic Review 3, 300-313.
.. [3] Oberhofer and Kmenta (1974), A general procedure for obtaining maximum likelihood estimates in
   generalized regression models, Econometrica 42, 579-590.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from bayes_sys.classical.bases import Bases
from bayes_sys.classical.estimate import Estimate

Array = NDArray[np.float64]

STEP_TOLERANCE = 1e-10
"""The iteration has settled when no coefficient moves by more than this many of its standard errors."""

LOOSE_TOLERANCE = 1e-6
"""What is still accepted as settled when the steps run out."""

MAX_STEPS = 2000

SINGULAR = 1e-10
"""A residual correlation is singular when an equation's residuals keep less than this of their variance after
the other equations' are taken into account."""


@dataclass(frozen=True)
class Solution:
    """Generalised least squares in the coordinates of the bases."""

    coordinates: Array
    covariance_factor: Array
    scales: Array
    residuals: Array
    smallest: float


def residual_divisors(bases: Bases, divisor: str) -> Array:
    """Return what each residual cross-product is divided by, shape (n_equations, n_equations)."""
    n = bases.n_equations
    if divisor == "T":
        return np.full((n, n), float(bases.n_periods))
    counts = np.array([t.shape[0] for t in bases.triangles], dtype=float)
    free = bases.n_periods - counts
    if divisor == "T-p":
        return np.sqrt(np.outer(free, free))
    overlap = bases.membership.T @ bases.gram**2 @ bases.membership
    out: Array = bases.n_periods - counts[:, None] - counts[None, :] + overlap
    np.fill_diagonal(out, free)
    return out


def log_likelihood(residuals: Array, sigma: Array, n_periods: int) -> float:
    """Return the Gaussian log likelihood of residuals (any rows with their cross-product).

    Parameters
    ----------
    residuals : array of float, shape (n_rows, n_equations)
    sigma : array of float, shape (n_equations, n_equations)
    n_periods : int
    """
    lower = np.linalg.cholesky(sigma)
    white = scipy.linalg.solve_triangular(lower, residuals.T, lower=True, check_finite=False)
    log_det = 2.0 * float(np.log(np.diag(lower)).sum())
    size = sigma.shape[0] * math.log(2.0 * math.pi) + log_det
    return float(-0.5 * n_periods * size - 0.5 * np.sum(white**2))


def two_step(bases: Bases, divisor: str) -> tuple[Estimate | None, str]:
    """Two-step feasible generalised least squares [1]_, or why there is none."""
    sigma = bases.residuals.T @ bases.residuals / residual_divisors(bases, divisor)
    if not is_regular(bases):
        return None, (
            "The least-squares residuals of the equations are exactly linearly related (or one equation fits "
            "exactly), so their covariance is singular and cannot be inverted. This happens with too many "
            "equations for too few periods, and with responses that add up."
        )
    solution = solve(bases, sigma)
    if solution is None:
        return None, (
            f"The residual covariance with divisor “{divisor}” is not a valid covariance here, so it cannot "
            "be inverted. Divisor “T” always gives a valid one."
        )
    return as_estimate(bases, solution, sigma, iterations=1), ""


def is_regular(bases: Bases) -> bool:
    """Say whether the covariance of the least-squares residuals can be inverted.

    Judged from the rows, not from their cross-product, with a tolerance for what rounding leaves where the
    responses are large beside the residuals.
    """
    sizes = np.sqrt(np.sum(bases.residuals**2, axis=0))
    squares = bases.membership.T @ bases.projections**2 + sizes**2
    rounding = 1e3 * np.finfo(float).eps * np.sqrt(squares)
    if np.any(sizes <= rounding) or bases.residuals.shape[0] < bases.n_equations:
        return False
    singular = np.linalg.svd(bases.residuals / sizes, compute_uv=False)
    return bool(singular[-1] > max(1e-9, float(np.max(rounding / sizes))))


def solve(bases: Bases, sigma: Array) -> Solution | None:
    """Solve generalised least squares as a deviation from least squares; None if sigma is not definite."""
    scales = np.sqrt(np.diag(sigma))
    try:
        lower = np.linalg.cholesky(sigma / np.outer(scales, scales))
    except np.linalg.LinAlgError:
        return None
    white = scipy.linalg.solve_triangular(lower, np.eye(len(scales)), lower=True)
    omega = white.T @ white
    where = bases.equation
    normal = scipy.linalg.cho_factor(omega[np.ix_(where, where)] * bases.gram, lower=True)
    residuals = bases.residuals / scales
    deviation = scipy.linalg.cho_solve(normal, bases.onto(residuals @ omega))
    residuals = residuals - bases.fitted(deviation)
    units = scales[where]
    return Solution(
        coordinates=bases.projections + deviation * units,
        covariance_factor=np.tril(normal[0]),
        scales=scales,
        residuals=residuals * scales,
        smallest=float(np.min(np.diag(lower)) ** 2),
    )


def as_estimate(bases: Bases, solution: Solution, sigma: Array, *, iterations: int) -> Estimate:
    """Turn a solution into coefficients, standard errors and covariance in the units of the data."""
    lower = solution.covariance_factor
    half = scipy.linalg.solve_triangular(lower, np.diag(solution.scales[bases.equation]), lower=True)
    covariance = bases.covariance(half.T @ half)
    return Estimate(
        coefficients=bases.coefficients(solution.coordinates),
        standard_errors=np.sqrt(np.diag(covariance)),
        covariance=covariance,
        error_covariance=sigma,
        log_likelihood=log_likelihood(solution.residuals, sigma, bases.n_periods),
        iterations=iterations,
    )


def iterate(bases: Bases, rank: int) -> tuple[Estimate | None, str]:
    """Iterate to the maximum of the Gaussian likelihood [3]_, or say why there is none."""
    n_periods, n_equations = bases.n_periods, bases.n_equations
    if n_equations + rank > n_periods:
        return None, no_maximum_sentence(n_equations, rank, n_periods)
    collapse = (
        "The likelihood has no maximum that could be found: as the estimate is iterated, a weighted sum of "
        "the responses is fitted ever more exactly, and the error covariance falls towards a singular one."
    )
    if not is_regular(bases):
        return None, collapse
    residuals, before, moved = bases.residuals, bases.projections, math.inf
    for count in range(1, MAX_STEPS + 1):
        sigma = residuals.T @ residuals / n_periods
        solution = solve(bases, sigma)
        if solution is None or solution.smallest < SINGULAR:
            return None, collapse
        moved = float(np.max(np.abs(solution.coordinates - before) / solution.scales[bases.equation]))
        residuals, before = solution.residuals, solution.coordinates
        if moved <= STEP_TOLERANCE:
            return as_estimate(bases, solution, sigma, iterations=count), ""
    if solution is not None and moved <= LOOSE_TOLERANCE:
        return as_estimate(bases, solution, sigma, iterations=MAX_STEPS), ""
    return None, (
        f"The iteration had not settled after {MAX_STEPS} steps: the likelihood keeps rising, very slowly."
    )


def no_maximum_sentence(n_equations: int, rank: int, n_periods: int) -> str:
    """Say why the likelihood has no maximum by the count of equations, regressors and periods."""
    return (
        f"The likelihood has no maximum: {n_equations} equations and {rank} distinct regressors together are "
        f"more than the {n_periods} periods, so some weighted sum of the responses can be fitted exactly and "
        "the likelihood grows without end."
    )
