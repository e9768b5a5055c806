"""Sampling: one face, the same draws for the same seed, and what the tree holds."""

from __future__ import annotations

import numpy as np
import pytest
from arviz_stats import loo
from helpers import make_system
from scipy import stats

from bayes_sys.errors import InputError, SamplingError
from bayes_sys.prior.cards import build_card, read_card
from bayes_sys.sampling import engine, nuts
from bayes_sys.sampling.engine import sample
from bayes_sys.sampling.gate import Limits, hold
from bayes_sys.sampling.progress import Progress

SHORT = {"warmup": 200, "draws": 150}


@pytest.fixture(scope="module")
def system():
    rng = np.random.default_rng(2)
    designs = [np.column_stack([np.ones(14), rng.normal(size=(14, 2))]) for _ in range(3)]
    common = rng.normal(size=(14, 1))
    responses = np.column_stack([x @ [5.0, 0.5, -0.3] for x in designs]) + 0.4 * common
    return make_system(designs, responses + 0.3 * rng.normal(size=(14, 3)))


@pytest.fixture(scope="module")
def card():
    return read_card("pooled")


@pytest.fixture(scope="module")
def posterior(system, card):
    return sample(system, card, seed=3, **SHORT)


def draws(tree, name="coefficients"):
    return tree["posterior"][name].values


def test_the_same_seed_gives_the_same_draws_on_one_core_and_on_two(system, card, posterior):
    again = sample(system, card, seed=3, cores=1, **SHORT)
    for name in ("coefficients", "scales", "correlations", "pooled_mean", "pooled_spread"):
        np.testing.assert_array_equal(draws(again, name), draws(posterior, name))


def test_more_chains_leave_the_first_ones_as_they_were(system, card, posterior):
    more = sample(system, card, seed=3, chains=6, **SHORT)
    np.testing.assert_array_equal(draws(more)[:4], draws(posterior))


def test_another_seed_gives_other_draws(system, card, posterior):
    assert not np.array_equal(draws(sample(system, card, seed=4, **SHORT)), draws(posterior))


def test_the_tree_names_its_dimensions(system, posterior):
    group = posterior["posterior"]
    assert group["coefficients"].dims == ("chain", "draw", "coefficient")
    assert list(group["coefficient"].values) == list(system.coefficient_labels)
    assert group["correlation"].dims == ("chain", "draw", "equation", "equation_b")
    assert list(group["pair"].values) == list(system.pair_labels)
    assert group["pooled_spread"].dims == ("chain", "draw", "pooled")
    assert {"diverging", "energy", "n_steps", "step_size"} <= set(posterior["sample_stats"].data_vars)
    assert posterior.attrs["engine"] == "direct"


def test_correlations_are_the_pairs_of_the_matrix(system, posterior):
    group = posterior["posterior"]
    matrix = group["correlation"].values
    for place, (a, b) in enumerate(system.pairs):
        np.testing.assert_array_equal(group["correlations"].values[..., place], matrix[..., a, b])
    assert (np.linalg.eigvalsh(matrix) > 0).all()
    np.testing.assert_array_equal(np.diagonal(matrix, axis1=2, axis2=3), 1.0)


def test_pointwise_log_likelihood_is_the_textbook_density(system, posterior):
    group = posterior["posterior"]
    values = posterior["log_likelihood"]["responses"].values
    for chain, draw in ((0, 0), (1, 7), (3, 149)):
        scales = group["scales"].values[chain, draw]
        covariance = np.outer(scales, scales) * group["correlation"].values[chain, draw]
        coefficients = group["coefficients"].values[chain, draw]
        means = [e.design @ coefficients[system.slice_of(i)] for i, e in enumerate(system.equations)]
        residuals = system.responses - np.column_stack(means)
        density = stats.multivariate_normal(np.zeros(3), covariance).logpdf(residuals)
        np.testing.assert_allclose(values[chain, draw], density, rtol=1e-9)


def test_log_prior_is_the_textbook_density_of_each_block(system):
    card = build_card(
        {
            "name": "raw",
            "summary": "Plain numbers.",
            "scaled": False,
            "coefficients": {"family": "normal", "mean": 0.1, "scale": 2.0},
            "scales": {"family": "half_student_t", "scale": 1.5, "df": 4.0},
            "correlation": {"family": "lkj", "concentration": 1.0},
        }
    )
    tree = sample(system, card, seed=1, **SHORT)
    coefficients = stats.norm(0.1, 2.0).logpdf(draws(tree)).sum(axis=-1)
    np.testing.assert_allclose(tree["log_prior"]["coefficients"].values, coefficients, rtol=1e-10)
    scales = (stats.t(4, scale=1.5).logpdf(draws(tree, "scales")) + np.log(2)).sum(axis=-1)
    np.testing.assert_allclose(tree["log_prior"]["scales"].values, scales, rtol=1e-10)
    # the volume of 3 x 3 correlation matrices is pi^2 / 2 (Rousseeuw & Molenberghs 1994)
    np.testing.assert_allclose(tree["log_prior"]["correlation"].values, -np.log(np.pi**2 / 2), rtol=1e-10)


@pytest.mark.filterwarnings("ignore:Estimated shape parameter")  # fourteen periods: one carries much weight
def test_arviz_reads_the_tree(posterior):
    assert np.isfinite(loo(posterior, var_name="responses").elpd)


def test_the_likelihood_is_left_out_on_request(system, card):
    tree = sample(system, card, seed=3, log_likelihood=False, **SHORT)
    assert "log_likelihood" not in tree.children


def test_progress_ends_with_every_iteration_done(system, card):
    seen: list[Progress] = []
    sample(system, card, seed=3, progress=seen.append, **SHORT)
    assert seen[0].stage == "preparing"
    assert seen[-1].stage == "drawing"
    assert any(p.done == p.total == 4 * 350 for p in seen)


def test_the_public_door_gives_the_same_law_as_the_private_one(system, card, monkeypatch):
    def closed(self, *_):
        raise AttributeError("LogpFunc")

    monkeypatch.setattr(nuts._Callback, "_sampler", closed)
    tree = sample(system, card, seed=5, warmup=400, draws=500)
    monkeypatch.undo()
    other = sample(system, card, seed=6, warmup=400, draws=500)
    for name in ("coefficients", "scales", "correlations"):
        a, b = (draws(t, name).reshape(2000, -1) for t in (tree, other))
        error = np.sqrt(a.var(axis=0) + b.var(axis=0)) / np.sqrt(600)  # at least 600 effective draws of 2000
        assert (np.abs(a.mean(axis=0) - b.mean(axis=0)) < 4 * error).all()


def test_one_equation_has_no_correlations(card):
    rng = np.random.default_rng(0)
    x = np.column_stack([np.ones(12), rng.normal(size=12)])
    tree = sample(make_system([x], rng.normal(size=(12, 1))), read_card("vague"), **SHORT)
    assert tree["posterior"]["correlations"].shape == (4, 150, 0)
    np.testing.assert_array_equal(tree["posterior"]["correlation"].values, 1.0)


@pytest.mark.parametrize(
    ("settings", "word"),
    [
        ({"chains": 0}, "chains"),
        ({"warmup": 3}, "warmup"),
        ({"draws": 0}, "draws"),
        ({"seed": -1}, "seed"),
        ({"target_accept": 1.0}, "target_accept"),
        ({"engine": "drect"}, "direct"),
    ],
)
def test_impossible_settings_are_refused_by_name(system, card, settings, word):
    with pytest.raises(InputError, match=word):
        sample(system, card, **settings)


def test_a_covariance_that_becomes_singular_is_said_in_words(system, card, monkeypatch):
    def singular(*_):
        raise np.linalg.LinAlgError("Matrix is not positive definite")

    monkeypatch.setattr(engine, "_engine", lambda name: singular)
    with pytest.raises(SamplingError, match="became singular"):
        sample(system, card)


def test_arguments_in_the_wrong_order_are_refused_in_words(system, card):
    with pytest.raises(InputError, match="expected a System and a PriorCard"):
        sample(card, system)


def test_one_equation_alone_passes_the_gate_with_room():
    rng = np.random.default_rng(0)
    x = np.column_stack([np.ones(20), rng.normal(size=20)])
    tree = sample(make_system([x], rng.normal(size=(20, 1))), read_card("weakly-informative"))
    assert hold(tree, Limits(ess=1200)).passed
