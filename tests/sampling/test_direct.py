"""Both forms of the direct engine sample the same law, and the switch between them."""

from __future__ import annotations

import numpy as np
import pytest
from arviz_stats.base import array_stats
from helpers import make_system
from reference_posteriors import load, reference_card, reference_system

from bayes_sys.model.density import integrates, pack
from bayes_sys.prior.cards import read_card
from bayes_sys.prior.resolve import resolve
from bayes_sys.sampling.direct import sample_direct
from bayes_sys.sampling.progress import unwatched
from bayes_sys.sampling.settings import Settings


def system_of(n: int, periods: int, p: int):
    rng = np.random.default_rng([n, periods, p])
    designs = [np.column_stack([np.ones(periods), rng.normal(size=(periods, p - 1))]) for _ in range(n)]
    return make_system(designs, rng.normal(size=(periods, n)))


def figures(draws, values):
    chains = values.reshape(draws.n_chains, -1, values.shape[1])
    error = array_stats.mcse(chains, method="mean", chain_axis=0, draw_axis=1)
    spread = array_stats.mcse(chains, method="sd", chain_axis=0, draw_axis=1)
    return values.mean(axis=0), values.std(axis=0), error, spread


@pytest.mark.parametrize("name", ["grun2", "base3", "coll2"])
def test_sampled_and_integrated_coefficients_have_one_law(name):
    case = load(name)
    system = reference_system(case)
    prior = resolve(reference_card(case, system), system)
    settings = Settings(draws=4000, seed=8, target_accept=0.95)
    one = sample_direct(system, prior, settings, unwatched, integrated=True)
    other = sample_direct(system, prior, settings, unwatched, integrated=False)
    for of in ("coefficients", "scales"):
        a, b = figures(one, getattr(one, of)), figures(other, getattr(other, of))
        assert (np.abs(a[0] - b[0]) <= 4 * np.hypot(a[2], b[2])).all()
        assert (np.abs(a[1] - b[1]) <= 4 * np.hypot(a[3], b[3])).all()


@pytest.mark.parametrize(
    ("card", "n", "periods", "p", "integrated"),
    [
        ("weakly-informative", 5, 18, 4, True),
        ("weakly-informative", 15, 60, 4, False),
        ("weakly-informative", 10, 14, 6, True),
        ("pooled", 15, 60, 4, True),
    ],
)
def test_coefficients_are_integrated_out_where_it_pays(card, n, periods, p, integrated):
    system = system_of(n, periods, p)
    prior = resolve(read_card(card), system)
    assert integrates(system.factor, prior) is integrated
    assert pack(system.factor, prior).integrated is integrated


def test_many_equations_sample_cleanly():
    system = system_of(12, 50, 4)
    draws = sample_direct(
        system, resolve(read_card("weakly-informative"), system), Settings(target_accept=0.95), unwatched
    )
    assert draws.statistics["diverging"].sum() == 0
    chains = draws.coefficients.reshape(4, -1, 48)
    assert array_stats.ess(chains, method="bulk", chain_axis=0, draw_axis=1).min() > 1000
