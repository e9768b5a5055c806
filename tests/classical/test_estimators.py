from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from helpers import make_system

from bayes_sys.classical.estimators import benchmark_table, classical_estimates, gls, joint_rank
from bayes_sys.errors import DesignError, InputError


def random_system(seed: int, counts: tuple[int, ...], n_periods: int, *, scale: float = 1.0):
    """Equations with an intercept, own slopes and shocks that they share."""
    rng = np.random.default_rng(seed)
    designs = [np.column_stack([np.ones(n_periods), rng.normal(size=(n_periods, p - 1))]) for p in counts]
    shocks = rng.normal(size=(n_periods, len(counts))) + rng.normal(size=(n_periods, 1))
    responses = np.column_stack([d.sum(axis=1) for d in designs]) + scale * shocks
    return make_system(designs, responses)


def residuals(system, coefficients):
    parts = [
        system.responses[:, i] - e.design @ coefficients[system.slice_of(i)]
        for i, e in enumerate(system.equations)
    ]
    return np.column_stack(parts)


def test_the_table_has_the_columns_users_rely_on():
    system = random_system(1, (2, 3), 20)
    table = benchmark_table(classical_estimates(system), system)
    assert list(table.columns) == [
        "equation", "regressor", "ols", "ols_se", "fgls", "fgls_se", "iterated", "iterated_se",
    ]  # fmt: skip
    assert list(zip(table["equation"], table["regressor"], strict=True)) == list(system.coefficients)
    assert not table.isna().any().any()


def test_the_log_likelihood_is_the_density_of_the_responses():
    system = random_system(2, (2, 3), 20)
    benchmark = classical_estimates(system)
    for estimate in (benchmark.fgls, benchmark.iterated):
        density = scipy.stats.multivariate_normal(np.zeros(2), estimate.error_covariance)
        total = density.logpdf(residuals(system, estimate.coefficients)).sum()
        assert estimate.log_likelihood == pytest.approx(total, rel=1e-12)


def test_the_log_likelihood_of_least_squares_is_that_of_unrelated_errors():
    system = random_system(2, (2, 3), 20)
    ols = classical_estimates(system).ols
    left = residuals(system, ols.coefficients)
    total = scipy.stats.norm(0.0, np.sqrt(np.mean(left**2, axis=0))).logpdf(left).sum()
    assert ols.log_likelihood == pytest.approx(total, rel=1e-12)


def test_the_iterated_estimate_is_a_fixed_point_and_a_maximum():
    system = random_system(3, (2, 3, 4), 25)
    iterated = classical_estimates(system).iterated
    left = residuals(system, iterated.coefficients)
    np.testing.assert_allclose(left.T @ left / 25, iterated.error_covariance, rtol=1e-8)
    again = gls(system, iterated.error_covariance)
    np.testing.assert_allclose(again.coefficients, iterated.coefficients, rtol=1e-8)
    np.testing.assert_allclose(again.standard_errors, iterated.standard_errors, rtol=1e-8)
    rng = np.random.default_rng(4)
    for _ in range(50):
        moved = iterated.coefficients + 0.1 * iterated.standard_errors * rng.normal(size=9)
        left = residuals(system, moved)
        sigma = left.T @ left / 25
        density = scipy.stats.multivariate_normal(np.zeros(3), sigma).logpdf(left).sum()
        assert density < iterated.log_likelihood


def test_long_series_give_the_same_through_the_factor_as_through_the_rows():
    system = random_system(5, (3, 2), 70_000)
    fgls = classical_estimates(system).fgls
    left = residuals(system, classical_estimates(system).ols.coefficients)
    np.testing.assert_allclose(fgls.error_covariance, left.T @ left / 70_000, rtol=1e-10)


def test_units_of_the_data_only_change_the_units_of_the_estimates():
    system = random_system(6, (3, 3), 30)
    factors = np.array([1.0, 1e7, 1e-6])
    designs = [e.design * factors for e in system.equations]
    other = make_system(designs, system.responses * 1e4)
    a, b = classical_estimates(system), classical_estimates(other)
    scale = 1e4 / np.tile(factors, 2)
    for name in ("ols", "fgls", "iterated"):
        x, y = getattr(a, name), getattr(b, name)
        np.testing.assert_allclose(y.coefficients, x.coefficients * scale, rtol=1e-8)
        np.testing.assert_allclose(y.standard_errors, x.standard_errors * scale, rtol=1e-8)


@pytest.mark.parametrize("n_periods", [3, 4])
def test_an_equation_without_spare_periods_is_left_empty_and_named(n_periods):
    system = random_system(7, (2, 4), n_periods)
    benchmark = classical_estimates(system)
    assert np.all(np.isfinite(benchmark.ols.coefficients[:2]))
    assert np.all(np.isfinite(benchmark.ols.standard_errors[:2]))
    assert np.all(np.isnan(benchmark.ols.coefficients[2:]))
    assert np.all(np.isnan(benchmark.ols.standard_errors[2:]))
    assert benchmark.fgls is None
    assert benchmark.iterated is None
    assert set(benchmark.reasons) == {"ols", "fgls", "iterated"}
    assert all("“b”" in reason for reason in benchmark.reasons.values())


def test_more_equations_than_free_periods_leave_the_joint_estimates_empty():
    rng = np.random.default_rng(8)
    common = np.column_stack([np.ones(10), rng.normal(size=(10, 5))])
    benchmark = classical_estimates(make_system([common] * 5, rng.normal(size=(10, 5))))
    assert np.all(np.isfinite(benchmark.ols.standard_errors))
    assert benchmark.fgls is None
    assert "singular" in benchmark.reasons["fgls"]
    assert benchmark.iterated is None


def test_different_regressors_can_keep_the_covariance_regular_with_more_equations_than_free_periods():
    benchmark = classical_estimates(random_system(9, (4,) * 8, 10))
    assert benchmark.fgls is not None
    assert np.all(np.isfinite(benchmark.fgls.standard_errors))


def test_responses_that_add_up_leave_the_joint_estimates_empty():
    rng = np.random.default_rng(10)
    common = np.column_stack([np.ones(30), rng.normal(size=(30, 2))])
    parts = 1000.0 + rng.normal(size=(30, 2))
    responses = np.column_stack([parts, parts.sum(axis=1)])
    benchmark = classical_estimates(make_system([common] * 3, responses))
    assert benchmark.fgls is None
    assert benchmark.iterated is None


def test_five_regions_eighteen_years_and_three_own_regressors_have_no_maximum():
    system = random_system(11, (4,) * 5, 18)
    assert joint_rank(system) == 16
    benchmark = classical_estimates(system)
    assert benchmark.fgls is not None
    assert benchmark.iterated is None
    assert "no maximum" in benchmark.reasons["iterated"]


def test_without_a_maximum_by_count_some_coefficients_fit_a_sum_of_responses_exactly():
    # What the count claims, shown: the sum of the responses lies in the span of all regressors.
    system = random_system(12, (4,) * 4, 16)
    assert system.n_equations + joint_rank(system) > 16
    span = np.column_stack([e.design for e in system.equations])
    weights = scipy.linalg.null_space(np.column_stack([system.responses, span]))[:4, 0]
    assert np.all(np.abs(weights) > 1e-6)
    combined = system.responses @ weights
    left = combined - span @ np.linalg.lstsq(span, combined, rcond=None)[0]
    assert np.max(np.abs(left)) < 1e-12


def test_a_maximum_exists_one_period_later():
    counts, n = (4,) * 4, 4 + 13
    assert classical_estimates(random_system(13, counts, n - 1)).iterated is None
    assert classical_estimates(random_system(13, counts, n)).iterated is not None


def test_a_collapse_that_the_count_does_not_see_is_found_on_the_way():
    # The second response is the first plus its own regressor, so their residuals can be made equal.
    rng = np.random.default_rng(14)
    x1, x2 = rng.normal(size=(2, 40))
    y = 1.0 + x1 + rng.normal(size=40)
    designs = [np.column_stack([np.ones(40), x]) for x in (x1, x2)]
    benchmark = classical_estimates(make_system(designs, np.column_stack([y, y + 2.0 * x2])))
    assert benchmark.fgls is not None
    assert benchmark.iterated is None
    assert "singular" in benchmark.reasons["iterated"]


def test_an_unbiased_covariance_that_is_not_valid_is_refused_with_the_reason():
    found = []
    for seed in range(200):
        benchmark = classical_estimates(random_system(seed, (5, 5, 5, 5), 9, scale=3.0), divisor="unbiased")
        if benchmark.fgls is None:
            found.append(benchmark.reasons["fgls"])
    assert found
    assert all("unbiased" in reason for reason in found)


def test_an_unknown_divisor_names_the_nearest():
    with pytest.raises(InputError, match="unbiased"):
        classical_estimates(random_system(1, (2, 2), 10), divisor="unbiassed")


@pytest.mark.parametrize(
    "sigma", [np.eye(3), np.array([[1.0, 0.5], [0.4, 1.0]]), np.array([[1.0, 2.0], [2.0, 1.0]])]
)
def test_a_covariance_that_does_not_fit_is_refused(sigma):
    with pytest.raises(DesignError, match="covariance"):
        gls(random_system(1, (2, 2), 10), sigma)


def test_known_covariance_needs_coefficients_that_can_be_told_apart():
    with pytest.raises(DesignError, match="coefficients"):
        gls(random_system(1, (2, 4), 3), np.eye(2))
