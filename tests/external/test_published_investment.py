"""Classical estimates against published tables.

Printed figures were recalled from memory (no book or paper was opened); investment_figures.json names
the source of each. Tolerances are one unit of the last printed digit.
"""

from __future__ import annotations

import numpy as np
import pytest
from investment import investment_system, read

from bayes_sys.classical.bases import build_bases
from bayes_sys.classical.estimators import classical_estimates
from bayes_sys.classical.simulated import lagrange_multiplier

FIGURES = read("investment_figures.json")
TWO, FIVE, PLAIN = FIGURES["two_firms"], FIGURES["five_firms_textbook"], FIGURES["five_firms_plain"]


def last_digit(printed: list[list[float]]) -> np.ndarray:
    """One unit of the last printed digit; slopes are printed to four decimals at least (a zero gets lost)."""
    decimals = np.array([len(repr(float(v)).split(".")[1]) for v in np.ravel(printed)]).reshape(-1, 3)
    decimals[:, 1:] = np.maximum(decimals[:, 1:], 4)
    return 1.01 * 10.0 ** -decimals.ravel().astype(float)


@pytest.fixture(scope="module")
def two_firms():
    system = investment_system(TWO["firms"])
    return system, classical_estimates(system)


@pytest.fixture(scope="module")
def five_firms():
    system = investment_system(FIVE["firms"], textbook=True)
    return system, classical_estimates(system)


def test_the_data_are_those_of_statsmodels():
    import statsmodels.datasets.grunfeld as grunfeld

    frame = grunfeld.load_pandas().data
    for firm, columns in read("investment.json")["firms"].items():
        rows = frame[frame["firm"] == firm]
        for name, values in columns.items():
            np.testing.assert_array_equal(rows[name], values)


def test_two_firms_least_squares_as_printed_with_divisor_t_minus_p(two_firms):
    _, benchmark = two_firms
    tolerance = np.ravel(TWO["ols"]["tolerance"])
    printed = TWO["ols"]["printed"]
    assert np.all(np.abs(benchmark.ols.coefficients - np.ravel(printed["beta"])) <= tolerance)
    assert np.all(np.abs(benchmark.ols.standard_errors - np.ravel(printed["se"])) <= tolerance)


def test_two_firms_two_step_as_printed_with_divisor_t(two_firms):
    _, benchmark = two_firms
    tolerance = np.ravel(TWO["fgls"]["tolerance"])
    assert np.all(np.abs(benchmark.fgls.coefficients - np.ravel(TWO["fgls"]["printed"])) <= tolerance)
    printed = np.ravel(TWO["fgls"]["printed_se_divisor_T"])
    assert np.all(np.abs(benchmark.fgls.standard_errors - printed) <= tolerance)


def test_five_firms_least_squares_as_printed_with_divisor_t_minus_p(five_firms):
    _, benchmark = five_firms
    for found, key in ((benchmark.ols.coefficients, "beta"), (benchmark.ols.standard_errors, "se")):
        printed = FIVE["ols"][key]
        assert np.all(np.abs(found - np.ravel(printed)) <= last_digit(printed))


def test_five_firms_two_step_as_printed_with_divisor_t(five_firms):
    _, benchmark = five_firms
    for found, key in ((benchmark.fgls.coefficients, "beta"), (benchmark.fgls.standard_errors, "se")):
        printed = FIVE["fgls"][key]
        assert np.all(np.abs(found - np.ravel(printed)) <= last_digit(printed))


def test_five_firms_residual_covariance_as_printed(five_firms):
    _, benchmark = five_firms
    sigma = benchmark.fgls.error_covariance
    printed = FIVE["sigma_printed"]
    assert sigma[2, 2] == pytest.approx(printed["GE"], abs=0.01)
    assert sigma[3, 3] == pytest.approx(printed["WE"], abs=0.01)
    assert sigma[2, 3] == pytest.approx(printed["GE_WE"], abs=0.01)


@pytest.mark.parametrize(("divisor", "key"), [("T", "computed_T"), ("T-p", "computed_T_p")])
def test_two_step_equals_the_recomputed_figures_to_nine_digits(divisor, key):
    for system, figures in (
        (investment_system(TWO["firms"]), TWO["fgls"][key]),
        (investment_system(FIVE["firms"], textbook=True), FIVE[f"fgls_{key}"]),
    ):
        fgls = classical_estimates(system, divisor=divisor).fgls
        np.testing.assert_allclose(fgls.coefficients, np.ravel(figures["beta"]), rtol=1e-9)
        np.testing.assert_allclose(fgls.standard_errors, np.ravel(figures["se"]), rtol=1e-9)
        np.testing.assert_allclose(fgls.error_covariance, figures["sigma_used"], rtol=1e-9)


def test_iterated_estimates_equal_the_recomputed_maximum():
    # Two iterations that stop at a step of 1e-10 can differ by ten times that.
    for system, figures in (
        (investment_system(TWO["firms"]), TWO["iterated"]),
        (investment_system(FIVE["firms"], textbook=True), FIVE["iterated_computed"]),
        (investment_system(FIVE["firms"]), PLAIN["iterated_computed"]),
    ):
        iterated = classical_estimates(system).iterated
        np.testing.assert_allclose(iterated.coefficients, np.ravel(figures["beta"]), rtol=2e-9)
        np.testing.assert_allclose(iterated.standard_errors, np.ravel(figures["se"]), rtol=2e-9)
        np.testing.assert_allclose(iterated.error_covariance, figures["sigma_resid_T"], rtol=2e-9)
        assert iterated.log_likelihood == pytest.approx(figures["loglik"], abs=1e-8)


def test_printed_maximum_likelihood_agrees_to_two_digits(five_firms):
    # The printed table stopped early, at the fifth step: it is no better than that.
    _, benchmark = five_firms
    printed = np.ravel(FIVE["iterated_printed_first_four"]["beta_first4"])
    np.testing.assert_allclose(benchmark.iterated.coefficients[:12], printed, rtol=0.03)


def test_likelihood_ratio_and_lagrange_multiplier_equal_the_recomputed_figures():
    for system, figures in (
        (investment_system(TWO["firms"]), TWO["breusch_pagan"]),
        (investment_system(FIVE["firms"], textbook=True), FIVE["breusch_pagan"]),
        (investment_system(FIVE["firms"]), PLAIN["breusch_pagan"]),
    ):
        benchmark = classical_estimates(system)
        ratio = 2.0 * (benchmark.iterated.log_likelihood - benchmark.ols.log_likelihood)
        assert ratio == pytest.approx(figures["lr_diag_at_mle"], rel=1e-9)
        multiplier = lagrange_multiplier(build_bases(system.factor).residuals, system.n_periods)
        assert multiplier == pytest.approx(figures["lm"], rel=1e-10)
