"""Least squares against the certified coefficients of the NIST Statistical Reference Datasets.

Longley: certified values recalled from memory (NIST StRD, linear least squares, Longley 1967); the data
are those of statsmodels.datasets.longley, and statsmodels' own estimates stand beside. Wampler 1 and 2:
made from their published formulas, y = sum of x^k and of (x/10)^k for x = 0..20; certified coefficients
1 and 10^-k.
"""

from __future__ import annotations

import numpy as np
import pytest
from helpers import make_system

from bayes_sys.classical.estimators import classical_estimates

LONGLEY = (
    (-3482258.63459582, 890420.383607373),
    (15.0618722713733, 84.9149257747669),
    (-0.358191792925910e-01, 0.334910077722432e-01),
    (-2.02022980381683, 0.488399681651699),
    (-1.03322686717359, 0.214274163161675),
    (-0.511041056535807e-01, 0.226073200069370),
    (1829.15146461355, 455.478499142212),
)
LONGLEY_RESIDUAL_SD = 304.854073561965


def digits(found, certified) -> float:
    return float(np.min(-np.log10(np.abs(np.asarray(found) / np.asarray(certified) - 1.0) + 1e-16)))


@pytest.fixture(scope="module")
def longley():
    import statsmodels.datasets.longley as data

    loaded = data.load_pandas()
    design = np.column_stack([np.ones(16), loaded.exog.to_numpy(dtype=float)])
    return design, loaded.endog.to_numpy(dtype=float)


def test_longley_keeps_nine_digits(longley):
    design, response = longley
    ols = classical_estimates(make_system([design], response[:, None])).ols
    certified = np.array(LONGLEY)
    assert digits(ols.coefficients, certified[:, 0]) >= 9.0
    assert digits(ols.standard_errors, certified[:, 1]) >= 9.0
    assert digits(np.sqrt(ols.error_covariance[0, 0]), LONGLEY_RESIDUAL_SD) >= 9.0


def test_longley_agrees_with_statsmodels(longley):
    from statsmodels.regression.linear_model import OLS

    design, response = longley
    reference = OLS(response, design).fit(method="qr")
    ols = classical_estimates(make_system([design], response[:, None])).ols
    # Its own standard errors agree with the certified ones to eight digits only.
    assert digits(ols.coefficients, reference.params) >= 8.0
    assert digits(ols.standard_errors, reference.bse) >= 7.0


def test_longley_keeps_nine_digits_beside_another_equation(longley):
    # A system of two: the other equation's regressors are among Longley's, so Longley's own do not move
    # through the smaller one; its coefficients in the joint fit of identical designs are the certified ones.
    design, response = longley
    other = np.random.default_rng(7).normal(size=16) * 500.0
    system = make_system([design, design], np.column_stack([response, response + other]))
    fgls = classical_estimates(system).fgls
    assert digits(fgls.coefficients[:7], np.array(LONGLEY)[:, 0]) >= 9.0


@pytest.mark.parametrize("ratio", [1.0, 0.1])
def test_wampler_polynomials_keep_eight_digits(ratio):
    x = np.arange(21.0)
    powers = np.arange(6)
    response = ((ratio * x[:, None]) ** powers).sum(axis=1)
    ols = classical_estimates(make_system([x[:, None] ** powers], response[:, None])).ols
    assert digits(ols.coefficients, ratio**powers) >= 8.0
