"""The PyMC engine: the model of ``build_model`` as it stands, compiled and sampled through nutpie."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.blocks import coefficients as coefficient_block
from bayes_sys.model.blocks import correlation as correlation_block
from bayes_sys.model.blocks import scales as scale_block
from bayes_sys.model.conditional import conditional_coefficients
from bayes_sys.model.factory import assemble
from bayes_sys.model.start import first_guess
from bayes_sys.prior.law import Prior
from bayes_sys.sampling.draws import Draws
from bayes_sys.sampling.nuts import Chains, run
from bayes_sys.sampling.progress import Progress, Watcher
from bayes_sys.sampling.settings import Settings
from bayes_sys.system.system import System

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
