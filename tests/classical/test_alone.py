"""Statistics of one equation against statsmodels, which is general-purpose and shares no code with them."""

from __future__ import annotations

import numpy as np
import pytest

from bayes_sys.classical import alone as ours


def one_equation(seed: int, n_periods: int, n_slopes: int, *, intercept: bool = True):
    rng = np.random.default_rng(seed)
    design = rng.normal(size=(n_periods, n_slopes)) * 10.0 ** np.arange(n_slopes) + 2.0
    if n_slopes > 1:
        design[:, 1] += 8.0 * design[:, 0]
    if intercept:
        design = np.column_stack([np.ones(n_periods), design])
    errors = rng.normal(size=n_periods) * (1.0 + np.abs(design[:, -1]))
    errors[1:] += 0.5 * errors[:-1]
    response = design.sum(axis=1) + errors
    fitted = ours.fit_alone(design, response, has_intercept=intercept)
    return design, response, fitted


def reference(design, response):
    from statsmodels.regression.linear_model import OLS

    return OLS(response, design).fit(method="qr")


def auxiliary(design, residuals, order: int):
    lagged = np.column_stack([np.concatenate([np.zeros(k), residuals[:-k]]) for k in range(1, order + 1)])
    fit = reference(np.column_stack([design, lagged]), residuals)
    width = design.shape[1]
    test = fit.f_test(np.eye(order, width + order, width))
    return float(test.fvalue), float(test.pvalue)


CASES = [(1, 18, 3, True), (2, 40, 2, True), (3, 25, 3, False), (4, 60, 1, True)]


@pytest.mark.parametrize(("seed", "n_periods", "n_slopes", "intercept"), CASES)
def test_statistics_equal_those_of_statsmodels(seed, n_periods, n_slopes, intercept):
    from statsmodels.stats import diagnostic, stattools
    from statsmodels.stats.outliers_influence import OLSInfluence, variance_inflation_factor

    design, response, fitted = one_equation(seed, n_periods, n_slopes, intercept=intercept)
    fit = reference(design, response)
    ordinals = np.arange(2000, 2000 + n_periods)
    np.testing.assert_allclose(fitted.residuals, fit.resid, rtol=1e-7, atol=1e-9)
    assert ours.durbin_watson(fitted.residuals, ordinals) == pytest.approx(stattools.durbin_watson(fit.resid))
    for order in (1, 4):
        if intercept:
            _, _, statistic, p = diagnostic.acorr_breusch_godfrey(fit, nlags=order, result_object=False)
        else:  # statsmodels adds a constant to its auxiliary regression; Godfrey's has none
            statistic, p = auxiliary(design, fit.resid, order)
        assert ours.breusch_godfrey(fitted, ordinals, order) == pytest.approx((statistic, p), rel=1e-8)
    with_constant = design if intercept else np.column_stack([np.ones(n_periods), design])
    _, _, statistic, p = diagnostic.het_breuschpagan(fit.resid, with_constant)
    assert ours.heteroskedasticity(fitted) == pytest.approx((statistic, p), rel=1e-8)
    first = 1 if intercept else 0
    inflation = [
        variance_inflation_factor(design, k, standardize=intercept) for k in range(first, design.shape[1])
    ]
    np.testing.assert_allclose(ours.variance_inflation(fitted), inflation, rtol=1e-7)
    influence = OLSInfluence(fit)
    np.testing.assert_allclose(fitted.leverage, influence.hat_matrix_diag, rtol=1e-8)
    np.testing.assert_allclose(ours.cooks_distances(fitted), influence.cooks_distance[0], rtol=1e-7)
    studentised = ours.studentised_residuals(fitted)
    np.testing.assert_allclose(studentised, influence.resid_studentized_external, rtol=1e-7)


def test_leaving_the_period_out_gives_the_studentised_residual_and_the_distance():
    design, response, fitted = one_equation(5, 15, 2)
    full = np.linalg.lstsq(design, response, rcond=None)[0]
    for t in (0, 7, 14):
        keep = np.arange(15) != t
        others = ours.fit_alone(design[keep], response[keep], has_intercept=True)
        without = np.linalg.lstsq(design[keep], response[keep], rcond=None)[0]
        moved = design @ (full - without)
        distance = moved @ moved / (design.shape[1] * fitted.variance)
        assert ours.cooks_distances(fitted)[t] == pytest.approx(distance, rel=1e-8)
        inverse = np.linalg.inv(design[keep].T @ design[keep])
        spread = np.sqrt(others.variance * (1.0 + design[t] @ inverse @ design[t]))
        expected = (response[t] - design[t] @ without) / spread
        assert ours.studentised_residuals(fitted)[t] == pytest.approx(expected, rel=1e-8)


def test_the_condition_number_scales_columns_to_unit_length_and_does_not_centre():
    x = np.arange(1.0, 7.0)
    design = np.column_stack([np.ones(6), 1e5 * x])
    cosine = x.sum() / np.sqrt(6.0 * np.sum(x**2))
    assert ours.condition_number(design) == pytest.approx(np.sqrt((1.0 + cosine) / (1.0 - cosine)), rel=1e-9)


def test_lags_are_counted_by_period_not_by_row():
    design, _, fitted = one_equation(6, 20, 1)
    ordinals = np.concatenate([np.arange(10), np.arange(12, 22)])
    e = fitted.residuals
    pairs = sum((e[t] - e[t - 1]) ** 2 for t in range(1, 20) if t != 10)
    assert ours.durbin_watson(e, ordinals) == pytest.approx(pairs / (e @ e))
    lagged = np.concatenate([[0.0], e[:-1]])
    lagged[10] = 0.0
    fit = reference(np.column_stack([design, lagged]), e)
    statistic, p = ours.breusch_godfrey(fitted, ordinals, 1)
    assert statistic == pytest.approx(fit.tvalues[-1] ** 2, rel=1e-8)
    assert p == pytest.approx(fit.pvalues[-1], rel=1e-8)


def frequency(n_periods: int, k: int) -> np.ndarray:
    """Eigenvector of the first-difference matrix (Durbin and Watson 1950, Biometrika 37, 409-428)."""
    return np.cos(np.pi * k * (2 * np.arange(1, n_periods + 1) - 1) / (2 * n_periods))


@pytest.mark.parametrize(
    ("n_periods", "n_slopes", "lower", "upper"),
    [(15, 1, 1.08, 1.36), (20, 2, 1.10, 1.54), (30, 3, 1.21, 1.65), (50, 2, 1.46, 1.63)],
)
def test_durbin_watson_points_meet_the_tabulated_bounds(n_periods, n_slopes, lower, upper):
    # One-sided 5% bounds of Durbin and Watson (1951, Biometrika 38, 159-177, table 4), recalled from memory.
    # They are reached by regressors along the fastest and the slowest oscillations. The beta distribution is
    # an approximation, and the table has two decimals.
    fast = [frequency(n_periods, n_periods - 1 - k) for k in range(n_slopes)]
    slow = [frequency(n_periods, 1 + k) for k in range(n_slopes)]
    for columns, bound in ((fast, lower), (slow, upper)):
        design = np.column_stack([np.ones(n_periods), *columns])
        fitted = ours.fit_alone(design, np.random.default_rng(1).normal(size=n_periods), has_intercept=True)
        point, _ = ours.durbin_watson_bounds(fitted, np.arange(n_periods), 0.05)
        assert point == pytest.approx(bound, abs=0.015)


def test_durbin_watson_points_hold_their_level_with_a_gap_in_the_periods():
    rng = np.random.default_rng(8)
    ordinals = np.concatenate([np.arange(8), np.arange(10, 20)])
    design = np.column_stack([np.ones(18), np.arange(18.0), rng.normal(size=18)])
    fitted = ours.fit_alone(design, rng.normal(size=18), has_intercept=True)
    lower, upper = ours.durbin_watson_bounds(fitted, ordinals, 0.05)
    errors = rng.normal(size=(18, 20_000))
    left = errors - fitted.basis @ (fitted.basis.T @ errors)
    steps = np.diff(left, axis=0)[np.diff(ordinals) == 1]
    drawn = np.sum(steps**2, axis=0) / np.sum(left**2, axis=0)
    # Monte Carlo error 0.0015; the rest is what the approximation may cost.
    assert np.mean(drawn < lower) == pytest.approx(0.05, abs=0.01)
    assert np.mean(drawn > upper) == pytest.approx(0.05, abs=0.01)


def test_a_period_with_its_own_coefficient_has_no_studentised_residual():
    rng = np.random.default_rng(9)
    pulse = np.zeros(12)
    pulse[4] = 1.0
    design = np.column_stack([np.ones(12), rng.normal(size=12), pulse])
    fitted = ours.fit_alone(design, rng.normal(size=12), has_intercept=True)
    assert np.flatnonzero(np.isnan(ours.studentised_residuals(fitted))).tolist() == [4]
    assert np.flatnonzero(np.isnan(ours.cooks_distances(fitted))).tolist() == [4]


def test_no_fit_without_spare_periods_or_with_collinear_regressors():
    rng = np.random.default_rng(10)
    x = rng.normal(size=(4, 4))
    assert ours.fit_alone(x, x[:, 0], has_intercept=False) is None
    twice = np.column_stack([np.ones(9), np.arange(9.0), 3.0 * np.arange(9.0) - 1.0])
    assert ours.fit_alone(twice, np.arange(9.0) ** 2, has_intercept=True) is None
