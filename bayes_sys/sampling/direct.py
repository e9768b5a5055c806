"""The direct engine: the compiled density with the coefficients integrated out, sampled by nutpie."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.blocks import coefficients as coefficient_block
from bayes_sys.model.blocks import whitening
from bayes_sys.model.compiled import entry_points, is_compiled
from bayes_sys.model.conditional import Conditional, conditional_coefficients
from bayes_sys.model.density import Packed, covariance_roots, pack, sampled_coefficients
from bayes_sys.prior.law import Prior
from bayes_sys.sampling.draws import Draws
from bayes_sys.sampling.nuts import sample_callback
from bayes_sys.sampling.progress import Progress, Watcher
from bayes_sys.sampling.settings import Settings
from bayes_sys.system.system import System

Array = NDArray[np.float64]

COEFFICIENT_STREAM = 1  # which stream of the seed the coefficients are drawn from


def sample_direct(
    system: System, prior: Prior, settings: Settings, watch: Watcher, *, integrated: bool | None = None
) -> Draws:
    """Sample a Gaussian system with complete data.

    ``integrated`` forces the coefficients to be integrated out or sampled; ``integrates`` chooses if left out.
    """
    watch(Progress("preparing"))
    packed = pack(system.factor, prior, integrated=integrated)
    if not is_compiled():
        watch(Progress("compiling"))
    callbacks = entry_points()
    chains = sample_callback(
        callbacks,
        packed.data,
        packed.n_dim,
        lambda seed: _initial_point(packed, seed),
        settings,
        watch,
    )
    points = chains.values["point"]
    watch(Progress("drawing"))
    return _read(system, prior, packed, points, chains.statistics, settings.seed)


def _initial_point(packed: Packed, seed: int) -> Array:
    """Start about the first guess, twice as wide as the likelihood is there, so that R-hat can tell."""
    rng = np.random.default_rng(seed)
    n, periods = packed.start.root.shape[0], packed.data[4]
    point = rng.standard_normal(packed.n_dim)
    point[:n] *= min(1.0, 2.0 / np.sqrt(2.0 * periods))
    point[n : whitening.n_free(n)] *= min(2.0, np.sqrt(periods))
    return point


def _read(
    system: System,
    prior: Prior,
    packed: Packed,
    points: Array,
    statistics: dict[str, NDArray[np.float64]],
    seed: int,
) -> Draws:
    n_chains, n_draws = points.shape[:2]
    flat = points.reshape(n_chains * n_draws, -1)
    roots = covariance_roots(flat, packed)
    n_covariance = whitening.n_free(system.n_equations)
    n_groups = len(prior.coefficients.groups)
    scores = flat[:, n_covariance : n_covariance + n_groups]
    spreads = coefficient_block.spreads(prior.coefficients, scores)
    parts = []
    for chain in range(n_chains):  # a stream per chain: more chains leave the earlier ones as they were
        rows = slice(chain * n_draws, (chain + 1) * n_draws)
        rng = np.random.default_rng([COEFFICIENT_STREAM, seed, chain])
        parts.append(
            conditional_coefficients(
                system.factor, prior, packed.start.stated, roots[rows], spreads[rows], rng
            )
        )
    conditional = Conditional.joined(parts)
    stated, pooled_mean = conditional.stated, conditional.pooled_mean
    if not packed.integrated:
        stated, pooled_mean = sampled_coefficients(flat, packed, prior.coefficients)
    return Draws(
        n_chains=n_chains,
        coefficients=stated @ prior.coefficients.to_raw.T,
        stated=stated,
        roots=roots,
        pooled_mean=pooled_mean,
        pooled_spread=spreads,
        conditional=conditional,
        statistics=statistics,
    )
