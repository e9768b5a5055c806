"""On large samples the posterior means converge to the FGLS values, and at the rate theory says.

With stationary regressors and a fixed prior, posterior mean minus FGLS is of order 1/T while the posterior standard
deviation is of order 1/sqrt(T) (Bernstein-von Mises; the prior's pull is V Lambda (m - beta), V of order 1/T), so the
distance in posterior standard deviations falls as T^(-1/2).
"""

from __future__ import annotations

import numpy as np
from helpers import make_system

from bayes_sys.classical.estimators import classical_estimates
from bayes_sys.prior.cards import PriorCard, build_card
from bayes_sys.sampling.engine import sample
from bayes_sys.system.system import System

SIZES = (100, 1_000, 10_000, 100_000)
REPLICATES = 20
N, P = 3, 3
CORRELATION = np.array([[1.0, 0.6, -0.3], [0.6, 1.0, 0.2], [-0.3, 0.2, 1.0]])
SCALES = np.array([1.0, 0.6, 1.5])
TRUTH = np.array([[1.0, 0.5, -0.8], [-0.5, 1.2, 0.3], [0.8, -0.4, 0.6]])


def simulated_system(periods: int, seed: int) -> System:
    """Three equations, each with an intercept and two stationary regressors of its own."""
    rng = np.random.default_rng([periods, seed])
    root = np.linalg.cholesky(np.outer(SCALES, SCALES) * CORRELATION)
    errors = rng.standard_normal((periods, N)) @ root.T
    designs = [np.column_stack([np.ones(periods), rng.standard_normal((periods, P - 1))]) for _ in range(N)]
    return make_system(
        designs, np.column_stack([x @ b for x, b in zip(designs, TRUTH, strict=True)]) + errors
    )


def strong_card() -> PriorCard:
    """A prior strong and wrong enough that its pull stands out from Monte Carlo error at every T."""
    return build_card(
        {
            "name": "strong",
            "summary": "Fixed numbers on the raw scale.",
            "scaled": False,
            "coefficients": {"family": "normal", "mean": 0.0, "scale": 0.25},
            "scales": {"family": "half_normal", "scale": 2.0},
            "correlation": {"family": "lkj", "concentration": 2.0},
        }
    )


def distance(periods: int, seed: int) -> tuple[float, float]:
    """Root-mean-square distance of the posterior means from FGLS, in posterior sds, and its Monte Carlo error.

    The means are Rao-Blackwellised: averages over draws of the coefficients' conditional mean.
    """
    system = simulated_system(periods, seed)
    posterior = sample(system, strong_card(), warmup=500, draws=1000, seed=seed + 1, log_likelihood=False)
    conditional = posterior["conditional"]["mean"].values
    flat = conditional.reshape(-1, conditional.shape[-1])
    total = posterior["conditional"]["variance"].values.reshape(flat.shape).mean(axis=0) + flat.var(axis=0)
    fgls = classical_estimates(system).fgls
    assert fgls is not None
    gap = (flat.mean(axis=0) - fgls.coefficients) / np.sqrt(total)
    # error of a chain's mean from the spread of the chains' means, a figure that needs no ESS
    error = conditional.mean(axis=1).std(axis=0, ddof=1) / np.sqrt(len(conditional)) / np.sqrt(total)
    return float(np.sqrt(np.mean(gap**2))), float(np.sqrt(np.mean(error**2)))


def test_posterior_means_approach_fgls_as_the_inverse_root_of_the_number_of_periods() -> None:
    root_mean_square = []
    for periods in SIZES:
        pairs = np.array([distance(periods, seed) for seed in range(REPLICATES)])
        root_mean_square.append(np.sqrt(np.mean(pairs[:, 0] ** 2)))
        assert root_mean_square[-1] >= 5 * np.sqrt(np.mean(pairs[:, 1] ** 2))
    exponent = np.polyfit(np.log(SIZES), np.log(root_mean_square), 1)[0]
    print(f"distances {np.round(root_mean_square, 5)}, fitted exponent {exponent:.3f}")
    assert -0.6 <= exponent <= -0.4
