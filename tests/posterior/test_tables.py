from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest
import xarray as xr
from helpers import make_system
from numpy.testing import assert_allclose
from scipy.special import ndtr
from trees import conditional_law, make_tree

from bayes_sys.posterior import predictive, tables
from bayes_sys.posterior.summary import summarise, thinned
from bayes_sys.prior.cards import read_card
from bayes_sys.sampling.engine import sample

SCALES = np.array([0.5, 2.0])
CORRELATION = np.array([[1.0, 0.6], [0.6, 1.0]])


def two_equations(n_periods=30, seed=3):
    rng = np.random.default_rng(seed)
    designs = [np.column_stack([np.ones(n_periods), rng.normal(size=(n_periods, p))]) for p in (1, 2)]
    errors = rng.normal(size=(n_periods, 2)) @ (np.linalg.cholesky(CORRELATION).T * SCALES)
    means = np.column_stack([designs[0] @ [1.0, 2.0], designs[1] @ [3.0, -1.0, 0.5]])
    return make_system(designs, means + errors)


@pytest.fixture(scope="module")
def system():
    return two_equations()


@pytest.fixture(scope="module")
def tree(system):
    return make_tree(system, scales=SCALES, correlation=CORRELATION)


@pytest.fixture(scope="module")
def coefficients(tree, system):
    return tables.coefficient_table(tree, system)


def test_every_table_has_exactly_the_columns_that_are_promised(tree, system, coefficients):
    assert " ".join(coefficients) == (
        "equation regressor n mean sd q5 q50 q95 prob_positive prior_mean prior_sd ols fgls fgls_se "
        "shrinkage moved_se rhat ess_bulk ess_tail"
    )
    assert (
        " ".join(tables.scale_table(tree, system))
        == "equation mean sd q5 q50 q95 fgls rhat ess_bulk ess_tail"
    )
    assert " ".join(tables.correlation_table(tree, system)) == (
        "equation_a equation_b mean sd q5 q50 q95 prob_positive fgls rhat ess_bulk ess_tail"
    )
    assert " ".join(tables.fitted_table(tree, system)) == "period equation observed mean q5 q95 residual"
    assert " ".join(tables.equation_table(tree, system)) == "equation n r2_mean r2_q5 r2_q95"


def test_moments_and_quantiles_equal_those_of_numpy_over_all_chains(tree, coefficients):
    draws = tree["posterior/coefficients"].values.reshape(1000, -1)
    assert_allclose(coefficients["mean"], draws.mean(axis=0), rtol=1e-13)
    assert_allclose(coefficients["sd"], draws.std(axis=0, ddof=1), rtol=1e-12)
    for name, level in (("q5", 0.05), ("q50", 0.5), ("q95", 0.95)):
        assert_allclose(coefficients[name], np.quantile(draws, level, axis=0), rtol=1e-13)
    assert_allclose(coefficients["prob_positive"], (draws > 0).mean(axis=0))


def test_figures_equal_those_of_arviz_on_the_same_tree(tree, coefficients):
    import arviz_stats

    coefficients_only = xr.DataTree.from_dict({"posterior": tree["posterior"].dataset[["coefficients"]]})
    interval = arviz_stats.eti(coefficients_only, prob=0.9)["coefficients"].values
    assert_allclose(coefficients[["q5", "q95"]], interval, rtol=1e-12)
    assert_allclose(coefficients["rhat"], arviz_stats.rhat(coefficients_only)["coefficients"], rtol=1e-12)
    assert_allclose(
        coefficients["ess_bulk"],
        arviz_stats.ess(coefficients_only, method="bulk")["coefficients"],
        rtol=1e-12,
    )
    tail = arviz_stats.ess(coefficients_only, method="tail", prob=(0.05, 0.95))["coefficients"]
    assert_allclose(coefficients["ess_tail"], tail, rtol=1e-12)


def test_shrinkage_has_its_closed_form_when_the_error_covariance_is_known(system):
    tree = make_tree(system, prior_sd=0.3, scales=SCALES, correlation=CORRELATION, wobble=0.0, n_draws=5)
    sigma = np.outer(SCALES, SCALES) * CORRELATION
    stacked = np.zeros((2 * system.n_periods, system.n_coefficients))
    for i, equation in enumerate(system.equations):
        stacked[i * system.n_periods : (i + 1) * system.n_periods, system.slice_of(i)] = equation.design
    weight = np.kron(np.linalg.inv(sigma), np.eye(system.n_periods))
    covariance = np.linalg.inv(stacked.T @ weight @ stacked + np.eye(system.n_coefficients) / 0.09)
    found = tables.coefficient_table(tree, system)["shrinkage"]
    assert_allclose(found, np.diag(covariance) / 0.09, rtol=1e-10)
    assert ((found > 0) & (found < 1)).all()


def test_shrinkage_is_near_one_under_a_tight_prior_and_near_nought_under_a_flat_one(system):
    tight = tables.shrinkage(make_tree(system, prior_sd=1e-3, n_draws=5))
    flat = tables.shrinkage(make_tree(system, prior_sd=1e3, n_draws=5))
    assert (tight > 0.99).all() and (flat < 1e-4).all()


def test_shrinkage_is_empty_when_the_tree_has_no_conditional_law(tree, system):
    bare = tree.copy()
    del bare["conditional"]
    assert tables.coefficient_table(bare, system)["shrinkage"].isna().all()


def test_moved_se_counts_classical_standard_errors_from_the_joint_estimate(coefficients):
    expected = (coefficients["mean"] - coefficients["fgls"]) / coefficients["fgls_se"]
    assert_allclose(coefficients["moved_se"], expected, rtol=1e-12)
    assert coefficients["moved_se"].abs().max() < 0.5, "a flat prior moves nothing by much"


def test_classical_columns_are_empty_where_the_joint_estimate_does_not_exist(tree, system):
    ols = SimpleNamespace(coefficients=np.arange(5.0), standard_errors=np.ones(5))
    none = SimpleNamespace(ols=ols, fgls=None, iterated=None, reasons={})
    table = tables.coefficient_table(tree, system, benchmark=none)
    assert_allclose(table["ols"], np.arange(5.0))
    assert table[["fgls", "fgls_se", "moved_se"]].isna().all(axis=None)
    assert tables.scale_table(tree, system, benchmark=none)["fgls"].isna().all()
    assert tables.correlation_table(tree, system, benchmark=none)["fgls"].isna().all()


def test_scales_and_correlations_stand_beside_the_classical_error_covariance(tree, system):
    sizes, pair = tables.scale_table(tree, system), tables.correlation_table(tree, system)
    residuals = np.column_stack(
        [
            y - e.design @ np.linalg.lstsq(e.design, y)[0]
            for e, y in zip(system.equations, system.responses.T, strict=True)
        ]
    )
    covariance = residuals.T @ residuals / system.n_periods
    assert_allclose(sizes["fgls"], np.sqrt(np.diag(covariance)), rtol=0.05)
    assert_allclose(pair["fgls"], np.corrcoef(residuals.T)[0, 1], atol=0.05)
    assert list(pair["equation_a"]) == ["a"] and list(pair["equation_b"]) == ["b"]


def test_a_quantity_that_never_moves_has_no_convergence_figures():
    draws = np.random.default_rng(0).normal(size=(4, 100, 2))
    draws[..., 1] = 3.0
    summary = summarise(draws)
    assert np.isfinite([summary.rhat[0], summary.ess_bulk[0], summary.ess_tail[0]]).all()
    assert np.isnan([summary.rhat[1], summary.ess_bulk[1], summary.ess_tail[1]]).all()
    assert summary.mean[1] == summary.q95[1] == 3.0


def test_one_equation_gives_an_empty_table_of_correlations():
    design = np.column_stack([np.ones(12), np.arange(12.0)])
    single = make_system([design], np.random.default_rng(0).normal(size=(12, 1)))
    table = tables.correlation_table(make_tree(single, n_draws=20), single)
    assert len(table) == 0 and "rhat" in table


def test_fitted_mean_is_the_regression_at_the_mean_coefficients_and_residuals_add_up(tree, system):
    fitted = tables.fitted_table(tree, system)
    assert list(fitted["equation"].unique()) == ["a", "b"]
    assert list(fitted["period"][:30]) == [str(i) for i in range(1, 31)]
    beta = tree["posterior/coefficients"].values.reshape(1000, -1).mean(axis=0)
    second = fitted[fitted["equation"] == "b"]
    assert_allclose(second["mean"], system.equations[1].design @ beta[2:], rtol=1e-10)
    assert_allclose(second["observed"], system.responses[:, 1])
    assert_allclose(second["residual"], second["observed"] - second["mean"])


def test_predictive_band_holds_what_simulated_outcomes_say_it_holds(tree, system):
    rng = np.random.default_rng(5)
    beta = tree["posterior/coefficients"].values.reshape(1000, -1)[:, :2]
    scales = tree["posterior/scales"].values.reshape(1000, -1)[:, 0]
    simulated = (beta @ system.equations[0].design.T)[None] + scales[None, :, None] * rng.normal(
        size=(200, 1000, 30)
    )
    low, high = np.quantile(simulated.reshape(-1, 30), (0.05, 0.95), axis=0)
    band = tables.fitted_table(tree, system).query("equation == 'a'")
    # 200,000 draws: a 5% quantile has a Monte Carlo error of about 0.005 sd; four of these
    assert_allclose(band["q5"], low, atol=0.02 * SCALES[0])
    assert_allclose(band["q95"], high, atol=0.02 * SCALES[0])


def test_band_does_not_depend_on_how_the_periods_are_cut(tree, system, monkeypatch):
    whole = predictive.predictive_band(tree, system)
    monkeypatch.setattr(predictive, "CHUNK_CELLS", 7000)
    for one, other in zip(whole, predictive.predictive_band(tree, system), strict=True):
        assert_allclose(one, other, atol=2e-6)


def test_band_of_a_huge_system_is_a_normal_with_the_right_moments(monkeypatch):
    big = two_equations(n_periods=2000)
    sizes = {"scales": SCALES, "correlation": CORRELATION, "wobble": 1 / np.sqrt(2 * 2000), "n_draws": 100}
    tree = make_tree(big, **sizes)
    exact = predictive.predictive_band(tree, big)
    monkeypatch.setattr(predictive, "MAX_CELLS", 0)
    for one, other in zip(exact, predictive.predictive_band(tree, big), strict=True):
        # theory: 0.1 / n_periods = 5e-5 scales
        assert_allclose(one / SCALES, other / SCALES, atol=2e-4)


def test_thinned_draws_are_spaced_evenly_from_the_first_to_the_last():
    kept = thinned(4000, 500)
    assert len(kept) == 500 and kept[0] == 0 and kept[-1] == 3999 and np.ptp(np.diff(kept)) <= 1
    assert list(thinned(3, 100)) == [0, 1, 2]


@pytest.mark.parametrize("level", [0.05, 0.95])
def test_mixture_quantile_leaves_the_right_share_below_it_even_when_components_lie_far_apart(level):
    z = {0.05: -predictive.Z_TAIL, 0.95: predictive.Z_TAIL}[level]
    rng = np.random.default_rng(2)
    locations = np.concatenate([rng.normal(size=(20, 50)), rng.normal(1000.0, 5.0, size=(20, 50))], axis=1)
    scales = np.exp(rng.normal(size=100))
    found = predictive.mixture_quantile(locations, scales, level, z, locations.mean(axis=1))
    assert_allclose(ndtr((found[:, None] - locations) / scales).mean(axis=1), level, atol=1e-6)


def test_mixture_quantile_of_one_component_is_the_normal_quantile():
    start = np.array([0.0, 1e9])
    found = predictive.mixture_quantile(
        np.array([[3.0], [1e9]]), np.array([2.0]), 0.95, predictive.Z_TAIL, start
    )
    assert_allclose(found, [3.0 + 2 * predictive.Z_TAIL, 1e9 + 2 * predictive.Z_TAIL])


def test_explained_share_is_the_variance_of_the_fit_over_itself_plus_the_errors(tree, system):
    beta = tree["posterior/coefficients"].values.reshape(1000, -1)[:, 2:]
    variance = (beta @ system.equations[1].design.T).var(axis=1, ddof=1)
    scales = tree["posterior/scales"].values.reshape(1000, -1)[:, 1]
    r2 = variance / (variance + scales**2)
    row = tables.equation_table(tree, system).iloc[1]
    assert_allclose(row["r2_mean"], r2.mean(), rtol=1e-10)
    assert_allclose([row["r2_q5"], row["r2_q95"]], np.quantile(r2, (0.05, 0.95)), rtol=1e-10)
    assert row["n"] == 30


def test_explained_share_agrees_with_arviz(tree, system):
    from arviz_stats.base import array_stats

    beta = tree["posterior/coefficients"].values.reshape(1000, -1)[:, :2]
    scales = tree["posterior/scales"].values.reshape(1000, -1)[:, 0]
    ours = tables.explained_share(system.equations[0], beta, scales, np.ones(30, dtype=bool))
    theirs = array_stats.bayesian_r2(beta @ system.equations[0].design.T, scales)
    assert_allclose(ours, theirs, rtol=1e-10)


def test_conditional_law_of_the_test_trees_is_generalised_least_squares_under_a_flat_prior(system):
    mean, _ = conditional_law(system, np.eye(2), 0.0, 1e6)
    expected = np.concatenate(
        [np.linalg.lstsq(e.design, y)[0] for e, y in zip(system.equations, system.responses.T, strict=True)]
    )
    assert_allclose(mean, expected, rtol=1e-6)


def test_pooled_table_has_the_shared_mean_and_spread_of_every_pooled_name() -> None:
    rng = np.random.default_rng(8)
    designs = [np.column_stack([np.ones(15), rng.normal(size=(15, 2))]) for _ in range(3)]
    pooled = sample(
        make_system(designs, rng.normal(size=(15, 3))), read_card("pooled"), warmup=200, draws=100
    )
    table = tables.pooled_table(pooled)
    assert list(zip(table["regressor"], table["quantity"], strict=True)) == [
        ("x1", "shared mean"),
        ("x1", "spread"),
        ("x2", "shared mean"),
        ("x2", "spread"),
    ]
    spread = pooled["posterior"]["pooled_spread"].values[..., 1]
    assert table["mean"].iloc[3] == pytest.approx(spread.mean())
    assert table["q95"].iloc[3] == pytest.approx(np.quantile(spread, 0.95))


def test_pooled_table_is_empty_when_nothing_is_pooled(tree: xr.DataTree) -> None:
    assert tables.pooled_table(tree).empty
