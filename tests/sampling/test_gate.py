"""The gate lets through what converged and nothing else."""

from __future__ import annotations

import numpy as np
import pytest
from helpers import make_system

from bayes_sys.prior.cards import read_card
from bayes_sys.sampling import gate
from bayes_sys.sampling.engine import sample
from bayes_sys.sampling.gate import Limits, hold, sample_until_passed


@pytest.fixture(scope="module")
def system():
    rng = np.random.default_rng(2)
    designs = [np.column_stack([np.ones(14), rng.normal(size=(14, 2))]) for _ in range(2)]
    return make_system(designs, rng.normal(size=(14, 2)))


@pytest.fixture
def posterior(system):
    return sample(system, read_card("pooled"), seed=1, warmup=500, draws=700)


def test_a_converged_posterior_passes(posterior):
    verdict = hold(posterior, Limits())
    assert verdict.passed
    assert verdict.failures == verdict.advice == ()
    assert verdict.figures.rhat_max < 1.01
    assert verdict.figures.ess_bulk_min > 1000


def test_a_chain_that_stands_apart_fails_on_rhat(posterior):
    posterior["posterior"]["scales"].values[0, :, 1] += 3.0
    verdict = hold(posterior, Limits())
    assert not verdict.passed
    assert verdict.figures.rhat_worst == "scales[b]"
    assert "not mixed" in verdict.failures[0]


def test_a_sticky_chain_fails_on_effective_draws(posterior):
    values = posterior["posterior"]["correlations"].values
    values[:] = np.repeat(values[:, ::10], 10, axis=1)
    verdict = hold(posterior, Limits())
    assert verdict.figures.ess_bulk_worst == "correlations[a ~ b]"
    assert any("effective draws" in failure for failure in verdict.failures)


def test_a_hyperparameter_that_did_not_converge_fails(posterior):
    posterior["posterior"]["pooled_spread"].values[2] *= 8.0
    assert not hold(posterior, Limits()).passed


def test_one_divergence_fails_unless_allowed(posterior):
    posterior["sample_stats"]["diverging"].values[1, 3] = True
    assert not hold(posterior, Limits()).passed
    assert hold(posterior, Limits(divergences=1)).passed


def test_slow_energy_fails(posterior):
    energy = posterior["sample_stats"]["energy"].values
    energy[:] = np.cumsum(np.random.default_rng(0).normal(size=energy.shape), axis=1)
    verdict = hold(posterior, Limits())
    assert verdict.figures.bfmi_min < 0.3
    assert any("energy" in failure for failure in verdict.failures)


def test_figures_agree_with_arviz(posterior):
    import arviz_stats

    verdict = hold(posterior, Limits())
    names = ["coefficients", "scales", "correlations", "pooled_mean", "pooled_spread"]
    rhat = arviz_stats.rhat(posterior, var_names=names)
    assert verdict.figures.rhat_max == pytest.approx(max(float(rhat[n].max()) for n in names))
    ess = arviz_stats.ess(posterior, var_names=names, method="bulk")
    assert verdict.figures.ess_bulk_min == pytest.approx(min(float(ess[n].min()) for n in names))
    bfmi = arviz_stats.bfmi(posterior)
    assert verdict.figures.bfmi_min == pytest.approx(float(bfmi["energy"].min()))


def test_a_quantity_that_never_moves_is_left_out(posterior):
    posterior["posterior"]["coefficients"].values[..., 0] = 2.5
    assert hold(posterior, Limits()).passed


def test_a_first_failure_is_followed_by_one_longer_attempt(system):
    # 70 draws a chain cannot hold 250 effective ones, 140 can hold more than that
    seen = []
    outcome = sample_until_passed(
        system,
        read_card("weakly-informative"),
        Limits(ess=250, rhat=1.2),
        warmup=300,
        draws=70,
        progress=seen.append,
    )
    assert outcome.attempts == 2
    assert outcome.posterior.attrs["draws"] == 140
    assert outcome.posterior.attrs["target_accept"] == gate.SECOND_TARGET
    assert {p.attempt for p in seen} == {1, 2}


def test_a_second_failure_is_reported_with_advice(system):
    outcome = sample_until_passed(
        system, read_card("weakly-informative"), Limits(ess=100_000), warmup=100, draws=50
    )
    assert outcome.attempts == 2
    assert not outcome.verdict.passed
    assert any("--draws" in advice for advice in outcome.verdict.advice)
