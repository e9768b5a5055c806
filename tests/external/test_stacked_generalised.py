"""Two-step and known-covariance estimates against a general-purpose GLS and against exact arithmetic.

statsmodels.regression.linear_model.GLS on the stacked system with covariance Sigma kron I. Its ``bse``
is scaled by a re-estimated variance, so its ``normalized_cov_params`` is what is compared.
"""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
import scipy.linalg
from helpers import make_system

from bayes_sys.classical.estimators import classical_estimates, gls


def stacked_reference(designs, responses, sigma):
    from statsmodels.regression.linear_model import GLS

    stacked = scipy.linalg.block_diag(*designs)
    omega = np.kron(sigma, np.eye(len(responses)))
    fit = GLS(responses.T.ravel(), stacked, sigma=omega).fit()
    return fit.params, fit.normalized_cov_params


def different_regressors(seed: int, counts: tuple[int, ...], n_periods: int):
    rng = np.random.default_rng(seed)
    designs = [np.column_stack([np.ones(n_periods), rng.normal(size=(n_periods, p - 1))]) for p in counts]
    shocks = rng.normal(size=(n_periods, len(counts))) + rng.normal(size=(n_periods, 1))
    responses = np.column_stack([d.sum(axis=1) for d in designs]) + shocks
    return designs, responses


@pytest.mark.parametrize("divisor", ["T", "T-p", "unbiased"])
@pytest.mark.parametrize("counts", [(2, 3), (3, 1, 4), (4, 4, 4, 4, 4)])
def test_two_step_equals_stacked_gls(counts, divisor):
    designs, responses = different_regressors(11, counts, 30)
    fgls = classical_estimates(make_system(designs, responses), divisor=divisor).fgls
    params, covariance = stacked_reference(designs, responses, fgls.error_covariance)
    np.testing.assert_allclose(fgls.coefficients, params, rtol=1e-8, atol=1e-10)
    np.testing.assert_allclose(fgls.covariance, covariance, rtol=1e-8, atol=1e-10)


def test_known_covariance_equals_stacked_gls():
    designs, responses = different_regressors(12, (3, 2, 4), 25)
    sigma = np.array([[2.0, 0.5, -0.3], [0.5, 1.0, 0.4], [-0.3, 0.4, 3.0]])
    estimate = gls(make_system(designs, responses), sigma)
    params, covariance = stacked_reference(designs, responses, sigma)
    np.testing.assert_allclose(estimate.coefficients, params, rtol=1e-8, atol=1e-10)
    np.testing.assert_allclose(estimate.covariance, covariance, rtol=1e-8, atol=1e-10)


def exact_gls(designs, responses, sigma) -> list[float]:
    """Solve the normal equations in exact rational arithmetic."""
    n = len(designs)
    width = [d.shape[1] for d in designs]
    omega = exact_solve(
        [[Fraction(v) for v in row] for row in sigma],
        [[Fraction(int(i == j)) for j in range(n)] for i in range(n)],
    )
    columns = [(i, [Fraction(v) for v in designs[i][:, k]]) for i in range(n) for k in range(width[i])]
    ys = [[Fraction(v) for v in responses[:, j]] for j in range(n)]
    normal = [
        [omega[i][j] * sum(a * b for a, b in zip(x, z, strict=True)) for j, z in columns] for i, x in columns
    ]
    right = [
        [sum(omega[i][j] * sum(a * b for a, b in zip(x, ys[j], strict=True)) for j in range(n))]
        for i, x in columns
    ]
    return [float(row[0]) for row in exact_solve(normal, right)]


def exact_solve(matrix, right):
    rows = [list(a) + list(b) for a, b in zip(matrix, right, strict=True)]
    n = len(rows)
    for k in range(n):
        pivot = next(r for r in range(k, n) if rows[r][k] != 0)
        rows[k], rows[pivot] = rows[pivot], rows[k]
        rows[k] = [v / rows[k][k] for v in rows[k]]
        for r in range(n):
            if r != k and rows[r][k] != 0:
                factor = rows[r][k]
                rows[r] = [a - factor * b for a, b in zip(rows[r], rows[k], strict=True)]
    return [row[n:] for row in rows]


def test_calendar_years_and_their_squares_keep_eight_digits():
    # Condition number 7e11 on the raw columns, 7e5 on scaled ones: normal equations square it and would keep
    # no digit, or four.
    rng = np.random.default_rng(3)
    years = np.arange(2004.0, 2022.0)
    first = np.column_stack([np.ones(18), years, years**2])
    second = np.column_stack([np.ones(18), years, np.round(rng.normal(size=18), 3)])
    responses = np.round(np.column_stack([0.01 * years, -0.02 * years]) + rng.normal(size=(18, 2)), 3)
    sigma = np.array([[2.0, 1.9], [1.9, 2.0]])
    estimate = gls(make_system([first, second], responses), sigma)
    exact = np.array(exact_gls([first, second], responses, sigma))
    np.testing.assert_allclose(estimate.coefficients, exact, rtol=1e-8)


@pytest.mark.parametrize("counts", [(3, 2), (3, 2, 4), (4, 4, 4, 4)])
@pytest.mark.parametrize("bits", [10, 20, 30])
def test_nearly_singular_error_covariance_costs_no_more_than_rounding_it(counts, bits):
    # A change of the covariance in its last bit moves the answer by about its condition number times 1e-16.
    designs, responses = different_regressors(5, counts, 16)
    designs, responses = [np.round(d, 3) for d in designs], np.round(responses, 3)
    loading = np.round(np.random.default_rng(1).normal(size=(len(counts), 1)), 2)
    sigma = loading @ loading.T + np.eye(len(counts)) * 2.0**-bits
    estimate = gls(make_system(designs, responses), sigma)
    tolerance = np.linalg.cond(sigma) * np.finfo(float).eps + 1e-13
    np.testing.assert_allclose(estimate.coefficients, exact_gls(designs, responses, sigma), rtol=tolerance)
