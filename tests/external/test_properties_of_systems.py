"""What must be true of joint classical estimates by published theorems.

Zellner (1962), JASA 57, 348-368: identical regressors, diagonal covariance, orthogonal regressors.
Revankar (1974), JASA 69, 187-190: regressors of one equation among those of the other. Zellner and
Huang (1962), International Economic Review 3, 300-313: the unbiased residual covariance. Breusch and
Pagan (1980), Review of Economic Studies 47, 239-253.
"""

from __future__ import annotations

import numpy as np
import pytest
from helpers import make_system

from bayes_sys.classical.bases import build_bases
from bayes_sys.classical.estimators import classical_estimates, gls
from bayes_sys.classical.generalised import residual_divisors
from bayes_sys.classical.simulated import lagrange_multiplier


def design(rng, n_periods: int, n_slopes: int) -> np.ndarray:
    return np.column_stack([np.ones(n_periods), rng.normal(size=(n_periods, n_slopes))])


def shocks(rng, n_periods: int, n_equations: int) -> np.ndarray:
    return rng.normal(size=(n_periods, n_equations)) + rng.normal(size=(n_periods, 1))


def test_identical_regressors_give_least_squares_to_floating_point(rng):
    common = design(rng, 25, 3) * np.array([1.0, 1e6, 1e-4, 1.0])
    benchmark = classical_estimates(make_system([common] * 4, shocks(rng, 25, 4)))
    np.testing.assert_allclose(benchmark.fgls.coefficients, benchmark.ols.coefficients, rtol=1e-13)
    np.testing.assert_allclose(benchmark.iterated.coefficients, benchmark.ols.coefficients, rtol=1e-13)
    ratio = np.sqrt((25 - 4) / 25)
    np.testing.assert_allclose(
        benchmark.fgls.standard_errors, ratio * benchmark.ols.standard_errors, rtol=1e-12
    )


def test_identical_regressors_with_divisor_t_minus_p_give_least_squares_errors_too(rng):
    common = design(rng, 25, 3)
    benchmark = classical_estimates(make_system([common] * 3, shocks(rng, 25, 3)), divisor="T-p")
    np.testing.assert_allclose(benchmark.fgls.covariance, benchmark.ols.covariance, rtol=1e-10, atol=1e-14)


def test_a_diagonal_error_covariance_gives_least_squares(rng):
    system = make_system([design(rng, 20, p) for p in (1, 2, 3)], shocks(rng, 20, 3))
    estimate = gls(system, np.diag([1.0, 4.0, 0.25]))
    np.testing.assert_allclose(
        estimate.coefficients, classical_estimates(system).ols.coefficients, rtol=1e-12
    )


def test_the_equation_with_the_contained_regressors_keeps_least_squares(rng):
    large = design(rng, 20, 3)
    benchmark = classical_estimates(make_system([large[:, :2], large], shocks(rng, 20, 2)))
    moved = np.abs(benchmark.fgls.coefficients - benchmark.ols.coefficients)
    assert np.max(moved[:2]) < 1e-13
    assert np.max(moved[2:]) > 1e-3


@pytest.mark.parametrize("rho", [0.3, 0.8, -0.6])
def test_orthogonal_regressors_gain_one_minus_rho_squared(rng, rho):
    columns, _ = np.linalg.qr(rng.normal(size=(20, 4)))
    system = make_system([columns[:, :2], columns[:, 2:]], shocks(rng, 20, 2))
    sigma = np.array([[1.0, rho * 2.0], [rho * 2.0, 4.0]])
    variances = np.diag(gls(system, sigma).covariance)
    np.testing.assert_allclose(variances, (1.0 - rho**2) * np.repeat([1.0, 4.0], 2), rtol=1e-12)


def test_the_unbiased_divisor_is_the_expected_cross_product_of_residuals(rng):
    designs = [design(rng, 12, p) for p in (1, 3)]
    bases = build_bases(make_system(designs, shocks(rng, 12, 2)).factor)
    annihilators = [np.eye(12) - d @ np.linalg.pinv(d) for d in designs]
    expected = np.array([[np.trace(a @ b) for b in annihilators] for a in annihilators])
    np.testing.assert_allclose(residual_divisors(bases, "unbiased"), expected, rtol=1e-12)


def test_the_lagrange_multiplier_uses_products_that_are_not_centred(rng):
    # Without an intercept residuals do not sum to zero, and centring would change the figure.
    designs = [rng.normal(size=(15, 2)) + 1.0 for _ in range(3)]
    responses = shocks(rng, 15, 3) + 2.0
    residuals = np.column_stack(
        [y - d @ np.linalg.lstsq(d, y, rcond=None)[0] for d, y in zip(designs, responses.T, strict=True)]
    )
    total = 0.0
    for i, j in ((0, 1), (0, 2), (1, 2)):
        a, b = residuals[:, i], residuals[:, j]
        total += 15.0 * (a @ b) ** 2 / ((a @ a) * (b @ b))
    bases = build_bases(make_system(designs, responses).factor)
    assert lagrange_multiplier(bases.residuals, 15) == pytest.approx(total, rel=1e-12)


@pytest.fixture
def rng():
    return np.random.default_rng(20)
