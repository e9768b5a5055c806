"""The PyMC engine: the model of ``build_model`` as it stands, compiled and sampled through nutpie."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.blocks import coefficients as coefficient_block
from bayes_sys.model.blocks import correlation as correlation_block
from bayes_sys.model.blocks import scales as scale_block
from bayes_sys.model.conditional import conditional_coefficients
from bayes_sys.model.factory import assemble
from bayes_sys.model.start import first_guess
from bayes_sys.prior.cards import PriorCard
from bayes_sys.prior.law import Prior
from bayes_sys.prior.resolve import resolve
from bayes_sys.sampling.draws import Draws
from bayes_sys.sampling.nuts import Chains, run
from bayes_sys.sampling.progress import Progress, Watcher
from bayes_sys.sampling.settings import Settings
from bayes_sys.system.system import System

if TYPE_CHECKING:
    import xarray as xr

Array = NDArray[np.float64]


def sample_graph(system: System, prior: Prior, settings: Settings, watch: Watcher) -> Draws:
    """Sample the PyMC model of a system."""
    watch(Progress("preparing"))
    model = assemble(system, prior)
    watch(Progress("compiling"))
    import nutpie
    from threadpoolctl import threadpool_limits

    with threadpool_limits(1):  # nutpie does not limit BLAS threads, and the chains already fill the cores
        compiled = nutpie.compile_pymc_model(model)
        chains = run(compiled, settings, watch)
    watch(Progress("drawing"))
    return _read(system, prior, chains)


def complete(tree: xr.DataTree, system: System, card: PriorCard) -> xr.DataTree:
    """Complete draws that a user took from ``build_model``'s model with PyMC itself.

    Parameters
    ----------
    tree : DataTree
        As ``pymc.sample`` returns it: groups ``posterior`` and ``sample_stats``.
    system : System
    card : PriorCard
        The two that the model was built from.

    Returns
    -------
    DataTree
        With every group that ``sample`` gives: the pointwise log likelihood, the log prior by block, the
        coefficients' conditional law; tables and gate read it.
    """
    from bayes_sys.sampling.tree import posterior_tree

    prior = resolve(card, system)
    group = tree["posterior"].to_dataset()
    values = {str(name): _flat(variable) for name, variable in group.data_vars.items()}
    statistics = {
        str(name): variable.transpose("chain", "draw").values
        for name, variable in tree["sample_stats"].to_dataset().data_vars.items()
        if set(variable.dims) == {"chain", "draw"}
    }
    draws = _read(system, prior, Chains(values, statistics))
    return posterior_tree(system, prior, draws, {"engine": "pymc"}, log_likelihood=None)


def _flat(variable: xr.DataArray) -> Array:
    values = np.asarray(variable.transpose("chain", "draw", ...).values, dtype=float)
    return values.reshape(*values.shape[:2], -1)


def _read(system: System, prior: Prior, chains: Chains) -> Draws:
    n, law = system.n_equations, prior.coefficients

    def flat(name: str, *shape: int) -> Array:
        return chains.values[name].reshape(-1, *shape)

    factor = flat(correlation_block.FACTOR, n, n) if n > 1 else np.ones((1, 1, 1))
    roots = flat(scale_block.VARIABLE, n)[:, :, None] * factor
    coefficients = flat(coefficient_block.VARIABLE, system.n_coefficients)
    n_groups = len(law.groups)
    empty = np.empty((len(roots), 0))
    spread = flat(coefficient_block.POOLED_SPREAD, n_groups) if n_groups else empty
    conditional = conditional_coefficients(
        system.factor,
        prior,
        first_guess(system.factor, prior).stated,
        roots,
        spread,
        np.random.default_rng(0),  # its draws are not used: this engine samples the coefficients themselves
    )
    return Draws(
        n_chains=next(iter(chains.values.values())).shape[0],
        coefficients=coefficients,
        stated=np.linalg.solve(law.to_raw, coefficients.T).T,
        roots=roots,
        pooled_mean=flat(coefficient_block.POOLED_MEAN, n_groups) if n_groups else empty,
        pooled_spread=spread,
        conditional=conditional,
        statistics=chains.statistics,
    )
