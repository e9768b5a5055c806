from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from helpers import make_system

from bayes_sys.classical import simulated
from bayes_sys.classical.bases import build_bases
from bayes_sys.classical.estimators import classical_estimates


def designs_of(seed: int, counts: tuple[int, ...], n_periods: int):
    rng = np.random.default_rng(seed)
    return [np.column_stack([np.ones(n_periods), rng.normal(size=(n_periods, p - 1))]) for p in counts]


def null_system(rng, designs):
    """Unrelated errors of different sizes around any coefficients at all."""
    n = len(designs)
    errors = rng.normal(size=(len(designs[0]), n)) * 10.0 ** rng.uniform(-2, 2, size=n)
    return make_system(designs, np.column_stack([d @ rng.normal(size=d.shape[1]) for d in designs]) + errors)


def ratio_of(system) -> float:
    benchmark = classical_estimates(system)
    return 2.0 * (benchmark.iterated.log_likelihood - benchmark.ols.log_likelihood)


@pytest.mark.parametrize("n_periods", [14, 60])
def test_simulated_multipliers_follow_the_law_of_whole_systems(n_periods):
    # 14 periods: the factor has all rows; 60: the rows beyond the regressors are drawn as one triangle.
    designs = designs_of(1, (2, 3, 4), n_periods)
    rng = np.random.default_rng(2)
    whole = []
    for _ in range(1500):
        bases = build_bases(null_system(rng, designs).factor)
        whole.append(simulated.lagrange_multiplier(bases.residuals, n_periods))
    system = null_system(rng, designs)
    bases = build_bases(system.factor)
    drawn = simulated.simulate_multiplier(bases, system.factor.n_distinct, 20_000, 3)
    assert scipy.stats.ks_2samp(whole, drawn).pvalue > 1e-3


@pytest.mark.parametrize("n_periods", [14, 60])
def test_simulated_ratios_follow_the_law_of_whole_systems(n_periods):
    designs = designs_of(4, (2, 3), n_periods)
    rng = np.random.default_rng(5)
    whole = np.array([ratio_of(null_system(rng, designs)) for _ in range(250)])
    system = null_system(rng, designs)
    bases = build_bases(system.factor)
    for level in (0.25, 0.5, 0.9):
        at = float(np.quantile(whole, level))
        larger = simulated.count_larger_ratios(bases, system.factor.n_distinct, at, 4000, 6)
        error = np.sqrt(level * (1 - level) * (1 / 250 + 1 / 4000))
        assert abs(larger / 4000 - (1 - level)) < 4.5 * error


def test_a_simulated_ratio_is_the_ratio_of_the_estimators():
    # The batched iteration against the estimators' own, on the same residuals.
    designs = designs_of(7, (3, 2, 3), 20)
    rng = np.random.default_rng(8)
    for _ in range(20):
        system = null_system(rng, designs)
        bases = build_bases(system.factor)
        residuals = bases.residuals[None]
        cross = residuals.transpose(0, 2, 1) @ residuals
        onto = bases.rows.T @ residuals
        exact = ratio_of(system)
        # The batched one stops at a rise of 1e-4 a step; ten times that may be missing.
        assert simulated._count_reaching(bases, cross, onto, exact - 1e-3) == 1
        assert simulated._count_reaching(bases, cross, onto, exact + 1e-8) == 0


def test_long_series_bring_the_chi_square_distribution():
    designs = designs_of(9, (2, 2, 2, 2), 5000)
    system = null_system(np.random.default_rng(1), designs)
    bases = build_bases(system.factor)
    drawn = simulated.simulate_multiplier(bases, system.factor.n_distinct, 20_000, 10)
    assert scipy.stats.kstest(drawn, scipy.stats.chi2(6).cdf).pvalue > 1e-3


def test_the_same_seed_gives_the_same_figures():
    system = null_system(np.random.default_rng(1), designs_of(11, (2, 2), 15))
    bases = build_bases(system.factor)
    first, second, other = (
        simulated.simulate_multiplier(bases, system.factor.n_distinct, 50, seed) for seed in (1, 1, 2)
    )
    np.testing.assert_array_equal(first, second)
    assert not np.array_equal(first, other)


def uniformity(p_values: list[float], n_simulations: int) -> float:
    """p-value of uniformity over ten cells of equal probability."""
    ranks = np.round(np.array(p_values) * (n_simulations + 1)).astype(int)
    counts = np.bincount((ranks - 1) * 10 // (n_simulations + 1), minlength=10)
    return float(scipy.stats.chisquare(counts).pvalue)


def test_monte_carlo_p_values_of_the_multiplier_are_uniform_without_shared_shocks():
    designs = designs_of(12, (2, 3, 4), 12)
    rng = np.random.default_rng(13)
    p_values = []
    for replicate in range(1000):
        system = null_system(rng, designs)
        bases = build_bases(system.factor)
        statistic = simulated.lagrange_multiplier(bases.residuals, 12)
        drawn = simulated.simulate_multiplier(bases, system.factor.n_distinct, 199, 10_000 + replicate)
        p_values.append(simulated.monte_carlo_p_value(int(np.sum(drawn >= statistic)), 199))
    assert uniformity(p_values, 199) > 1e-3


@pytest.mark.slow
def test_monte_carlo_p_values_of_the_ratio_are_uniform_without_shared_shocks():
    designs = designs_of(14, (2, 3), 12)
    rng = np.random.default_rng(15)
    p_values = []
    for replicate in range(1500):
        system = null_system(rng, designs)
        bases = build_bases(system.factor)
        larger = simulated.count_larger_ratios(
            bases, system.factor.n_distinct, ratio_of(system), 199, 10_000 + replicate
        )
        p_values.append(simulated.monte_carlo_p_value(larger, 199))
    assert uniformity(p_values, 199) > 1e-3


def test_the_chi_square_rejects_too_often_in_short_series():
    # Why the simulation is there: at sixteen periods the nominal 5% of the likelihood ratio is far exceeded.
    designs = designs_of(16, (3, 3, 3), 16)
    rng = np.random.default_rng(17)
    threshold = scipy.stats.chi2(3).ppf(0.95)
    rejected = np.mean([ratio_of(null_system(rng, designs)) > threshold for _ in range(120)])
    assert rejected > 0.10
