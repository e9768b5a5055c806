"""Coefficients given the covariance, one equation by quadrature, the LKJ marginal: against exact answers."""

from __future__ import annotations

import numpy as np
import pytest
from helpers import make_system
from reference_posteriors import load, reference_card, reference_system
from scipy import integrate, stats
from test_reference_posteriors import our_figures

from bayes_sys.model.blocks import correlation as correlation_block
from bayes_sys.model.conditional import conditional_coefficients
from bayes_sys.prior.cards import build_card
from bayes_sys.prior.law import CoefficientLaw, CorrelationLaw, PooledGroup, Prior, ScaleLaw
from bayes_sys.prior.resolve import resolve
from bayes_sys.sampling.engine import sample


def fixed_covariance_row(name: str) -> dict:
    return next(row for row in load("fixed_covariance")["rows"] if row["case"] == name)


def test_coefficients_given_the_covariance_match_their_closed_form() -> None:
    # source: partitioned normal formula, checked against the dense density of all observations
    case, row = load("grun2"), fixed_covariance_row("grun2")
    system = reference_system(case)
    prior = resolve(reference_card(case, system), system)
    covariance = np.outer(row["sd"], row["sd"]) * np.array(row["R"])
    root = np.linalg.cholesky(covariance)[None]
    law = conditional_coefficients(
        system.factor, prior, np.zeros(6), root, np.empty((1, 0)), np.random.default_rng(0)
    )
    np.testing.assert_allclose(law.mean[0], list(row["mean"].values()), rtol=1e-9)
    np.testing.assert_allclose(np.sqrt(law.variance[0]), list(row["post_sd"].values()), rtol=1e-9)


def test_draws_of_the_coefficients_given_the_covariance_have_that_law() -> None:
    case, row = load("grun2"), fixed_covariance_row("grun2")
    system = reference_system(case)
    prior = resolve(reference_card(case, system), system)
    root = np.linalg.cholesky(np.outer(row["sd"], row["sd"]) * np.array(row["R"]))
    roots = np.broadcast_to(root, (20_000, 2, 2))
    law = conditional_coefficients(
        system.factor, prior, np.zeros(6), roots, np.empty((20_000, 0)), np.random.default_rng(3)
    )
    for k in range(6):
        exact = stats.norm(law.mean[0, k], np.sqrt(law.variance[0, k]))
        assert stats.kstest(law.draw[:, k], exact.cdf).pvalue > 1e-3


def test_shrinkage_is_the_conditional_variance_over_the_prior_variance() -> None:
    case, row = load("grun2"), fixed_covariance_row("grun2")
    system = reference_system(case)
    prior = resolve(reference_card(case, system), system)
    root = np.linalg.cholesky(np.outer(row["sd"], row["sd"]) * np.array(row["R"]))[None]
    law = conditional_coefficients(
        system.factor, prior, np.zeros(6), root, np.empty((1, 0)), np.random.default_rng(0)
    )
    closed_form = np.square(list(row["post_sd"].values())) / np.square(
        np.concatenate(case["prior"]["beta_sd"])
    )
    np.testing.assert_allclose(law.shrinkage[0], closed_form, rtol=1e-9)
    assert ((law.shrinkage > 0) & (law.shrinkage <= 1)).all()


def test_shrinkage_of_a_pooled_coefficient_is_its_pooling_factor() -> None:
    # one regressor, no intercept, independent errors of known size: (1 / tau^2) / (1 / tau^2 + x'x / sigma^2)
    rng = np.random.default_rng(6)
    designs = [rng.normal(size=(8, 1)) for _ in range(3)]
    system = make_system(designs, rng.normal(size=(8, 3)), regressor_names=[["x"]] * 3)
    group = np.zeros(3, dtype=int)
    nan = np.full(3, np.nan)
    law = CoefficientLaw(np.eye(3), nan, nan, group, (PooledGroup("x", 0.0, 5.0, 1.0),))
    prior = Prior(law, ScaleLaw(("half_normal",) * 3, np.ones(3), np.zeros(3)), CorrelationLaw(2.0))
    sigma, tau = np.array([0.5, 1.0, 2.0]), 0.3
    result = conditional_coefficients(
        system.factor, prior, np.zeros(3), np.diag(sigma)[None], np.array([[tau]]), np.random.default_rng(0)
    )
    information = np.array([float(x.T @ x) for x in [d[:, 0] for d in designs]]) / sigma**2
    np.testing.assert_allclose(result.shrinkage[0], 1 / (1 + tau**2 * information), rtol=1e-12)


def test_with_identical_regressors_the_posterior_need_not_equal_ols() -> None:
    # FGLS then equals OLS whatever the covariance (Zellner 1962); a prior that is not a multiple of the
    # regressors' information breaks the tie, and what one equation says moves the other
    rng = np.random.default_rng(4)
    x = np.column_stack([np.ones(20), rng.normal(size=20)])
    system = make_system([x, x], x @ [[1.0, -1.0], [0.5, 0.2]] + rng.normal(size=(20, 2)))
    law = CoefficientLaw(np.eye(4), np.zeros(4), np.array([5.0, 0.1, 5.0, 5.0]), np.full(4, -1))
    prior = Prior(law, ScaleLaw(("half_normal",) * 2, np.ones(2), np.zeros(2)), CorrelationLaw(2.0))
    means = []
    for correlation in (0.0, 0.8):
        root = np.linalg.cholesky([[1.0, correlation], [correlation, 1.0]])[None]
        result = conditional_coefficients(
            system.factor, prior, np.zeros(4), root, np.empty((1, 0)), np.random.default_rng(0)
        )
        means.append(result.mean[0])
    ols = np.linalg.lstsq(x, system.responses, rcond=None)[0].T.ravel()
    assert abs(means[0][3] - ols[3]) < 0.01  # without correlation the loose coefficient stays at OLS
    assert abs(means[1][3] - ols[3]) > 0.1  # with it, the tight prior of the other equation reaches over


def one_equation() -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(11)
    x = np.column_stack([np.ones(9), rng.normal(size=9)])
    return x, x @ [1.0, -0.5] + 0.8 * rng.standard_t(5, size=9)


@pytest.mark.parametrize(
    ("scales", "density"),
    [
        ({"family": "half_normal", "scale": 1.0}, stats.halfnorm(scale=1.0)),
        ({"family": "exponential", "mean": 0.7}, stats.expon(scale=0.7)),
        ({"family": "lognormal", "median": 0.9, "spread": 0.5}, stats.lognorm(s=0.5, scale=0.9)),
        ({"family": "half_student_t", "df": 3.0, "scale": 0.8}, None),
    ],
    ids=["half_normal", "exponential", "lognormal", "half_student_t"],
)
def test_one_equation_matches_quadrature_over_its_scale(scales: dict, density: object) -> None:
    x, y = one_equation()
    tau = np.array([2.0, 1.0])
    log_density = density.logpdf if density else lambda s: stats.t(3, scale=0.8).logpdf(s) + np.log(2)

    def unnormalised(s: float) -> float:
        covariance = s**2 * np.eye(len(y)) + (x * tau**2) @ x.T
        return float(
            np.exp(stats.multivariate_normal(np.zeros(len(y)), covariance).logpdf(y) + log_density(s))
        )

    def conditional(s: float) -> tuple[np.ndarray, np.ndarray]:
        variance = np.linalg.inv(x.T @ x / s**2 + np.diag(1 / tau**2))
        return variance @ (x.T @ y) / s**2, np.diag(variance)

    def expectation(function: object) -> float:
        return integrate.quad(lambda s: function(s) * unnormalised(s), 1e-3, 12, limit=400, epsabs=0)[0]

    whole = expectation(lambda s: 1.0)
    system = make_system([x], y[:, None], names=["a"])
    card = build_card(
        {
            "name": "one",
            "summary": "One equation.",
            "scaled": False,
            "coefficients": {
                "family": "normal",
                "mean": 0.0,
                "scale": 1.0,
                "of": {"intercept": {"scale": 2.0}},
            },
            "scales": scales,
            "correlation": {"family": "lkj", "concentration": 2.0},
        }
    )
    posterior = sample(system, card, draws=5000, seed=4)["posterior"]
    ours = our_figures(posterior["scales"].values[..., 0])
    mean = expectation(lambda s: s) / whole
    sd = np.sqrt(expectation(lambda s: s**2) / whole - mean**2)
    assert abs(ours["mean"][0] - mean) <= 4 * ours["mean"][1]
    assert abs(ours["sd"][0] - sd) <= 4 * ours["sd"][1]
    for figure, probability in (("q05", 0.05), ("q95", 0.95)):
        value, error = ours[figure]
        below = integrate.quad(unnormalised, 1e-3, value, limit=400, epsabs=0)[0] / whole
        assert abs(below - probability) <= 4 * error * unnormalised(value) / whole
    for k in range(2):
        ours = our_figures(posterior["coefficients"].values[..., k])
        first = expectation(lambda s, k=k: conditional(s)[0][k]) / whole
        second = expectation(lambda s, k=k: conditional(s)[0][k] ** 2 + conditional(s)[1][k]) / whole
        assert abs(ours["mean"][0] - first) <= 4 * ours["mean"][1]
        assert abs(ours["sd"][0] - np.sqrt(second - first**2)) <= 4 * ours["sd"][1]


@pytest.mark.parametrize("n", [2, 5])
def test_a_correlation_follows_its_beta_law_under_prior_sampling(n: int) -> None:
    # source: (r + 1) / 2 ~ Beta(a, a), a = concentration + (N - 2) / 2 (Lewandowski, Kurowicka & Joe 2009)
    import pymc as pm
    from pytensor.compile.mode import Mode

    pairs = tuple((a, b) for b in range(n) for a in range(b))
    coords = {"equation": range(n), "equation_b": range(n), "pair": range(len(pairs))}
    with pm.Model(coords=coords) as model:
        correlation_block.declare(CorrelationLaw(2.0), n, pairs)
    draws = pm.draw(model["correlations"], 1500, random_seed=7, mode=Mode(linker="py", optimizer=None))
    a = 2.0 + (n - 2) / 2
    for column in draws.T:
        assert stats.kstest((column + 1) / 2, stats.beta(a, a).cdf).pvalue > 1e-3
    exact = next(row for row in load("lkj")["rows"] if (row["N"], row["eta"]) == (n, 2))
    assert np.abs(draws.std(axis=0) - exact["sd"]).max() < 4 * exact["sd"] / np.sqrt(2 * 1500)


def test_lkj_constant_matches_the_exact_ones() -> None:
    for row in load("lkj")["rows"]:
        ours = correlation_block.log_constant(CorrelationLaw(row["eta"]), row["N"])
        assert ours == pytest.approx(-row["log_norm"], abs=1e-9)
