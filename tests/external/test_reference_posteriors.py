"""The posterior against independently computed ones, mean by mean and quantile by quantile."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from arviz_stats.base import array_stats
from reference_posteriors import load, named_draws, reference_card, reference_system

from bayes_sys.model.factory import build_model
from bayes_sys.posterior.tables import coefficient_table
from bayes_sys.sampling.engine import sample
from bayes_sys.sampling.gate import Limits, hold
from bayes_sys.sampling.graph import complete

AXES = {"chain_axis": 0, "draw_axis": 1}
QUANTILES = {"q05": 0.05, "q50": 0.5, "q95": 0.95}
SMALLEST_USUAL_MISTAKE = 0.08  # posterior sd: what reading a scale twice too large does to the two-firm case


def our_figures(draws: np.ndarray) -> dict[str, tuple[float, float]]:
    """Mean, sd and quantiles of one quantity, each with its Monte Carlo standard error."""
    figures = {
        "mean": (draws.mean(), array_stats.mcse(draws, method="mean", **AXES)),
        "sd": (draws.std(ddof=1), array_stats.mcse(draws, method="sd", **AXES)),
    }
    for name, probability in QUANTILES.items():
        error = array_stats.mcse(draws, method="quantile", prob=probability, **AXES)
        figures[name] = (np.quantile(draws, probability), error)
    return {name: (float(value), float(error)) for name, (value, error) in figures.items()}


def check_against(case: dict[str, Any], engine: str, draws: int, target_accept: float = 0.95) -> None:
    system = reference_system(case)
    card = reference_card(case, system)
    posterior = sample(system, card, draws=draws, seed=20, engine=engine, target_accept=target_accept)
    verdict = hold(posterior, Limits(ess=10_000))
    assert verdict.passed, verdict.failures
    for name, values in named_draws(posterior, system).items():
        reference = case["results"][name]
        for figure, (ours, error) in our_figures(values).items():
            gap = abs(ours - reference[figure])
            combined = np.hypot(error, reference["mcse"][figure])
            assert gap <= 4 * combined, (name, figure, gap / combined)
            assert gap <= SMALLEST_USUAL_MISTAKE * reference["sd"], (name, figure, gap / reference["sd"])


@pytest.mark.parametrize("name", ["grun2", "base3", "coll2", "sing5"])
def test_direct_engine_matches_the_reference_posterior(name: str) -> None:
    # five equations on ten periods: at the ordinary target one draw in some ten thousand diverges
    check_against(load(name), "direct", draws=6000, target_accept=0.99 if name == "sing5" else 0.95)


def test_pymc_engine_matches_the_reference_posterior() -> None:
    check_against(load("grun2"), "pymc", draws=12_000)


@pytest.mark.slow
def test_a_users_own_draws_from_the_model_are_completed() -> None:
    import pymc as pm

    case = load("grun2")
    system = reference_system(case)
    card = reference_card(case, system)
    with build_model(system, card):
        tree = pm.sample(
            draws=1000, random_seed=3, nuts_sampler="nutpie", progressbar=False, target_accept=0.95
        )
    posterior = complete(tree, system, card)
    assert hold(posterior, Limits(ess=400)).passed
    table = coefficient_table(posterior, system)
    assert table["shrinkage"].between(0, 1).all()
    assert posterior["log_likelihood"]["responses"].dims == ("chain", "draw", "period")
    for name, values in named_draws(posterior, system).items():
        mean, error = our_figures(values)["mean"]
        assert abs(mean - case["results"][name]["mean"]) <= 4 * error


@pytest.mark.slow
@pytest.mark.parametrize("name", ["base3", "coll2"])
def test_pymc_engine_matches_further_reference_posteriors(name: str) -> None:
    # two of coll2's regressors correlate at 0.99994: sampled as they stand, their coefficients move slowly
    check_against(load(name), "pymc", draws=40_000 if name == "coll2" else 20_000)


@pytest.mark.parametrize(
    ("mistake", "change"),
    [
        ("scale of the errors twice as large", lambda prior: prior.update(sd_scale=[80, 40])),
        ("concentration off by a half", lambda prior: prior.update(eta=2.5)),
    ],
)
def test_a_usual_mistake_in_the_prior_would_be_seen(mistake: str, change: Any) -> None:
    case = load("grun2")
    change(case["prior"])
    with pytest.raises(AssertionError):
        check_against(case, "direct", draws=6000)
