"""Draws laid out as the DataTree that tables, page and ArviZ read."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.blocks import coefficients as coefficient_block
from bayes_sys.model.blocks import correlation as correlation_block
from bayes_sys.model.blocks import scales as scale_block
from bayes_sys.model.pointwise import pointwise_log_likelihood
from bayes_sys.prior.law import Prior
from bayes_sys.prior.resolve import prior_moments
from bayes_sys.sampling.draws import Draws
from bayes_sys.system.system import System

if TYPE_CHECKING:
    import xarray as xr

Array = NDArray[np.float64]

LARGEST_STORED = 10_000_000  # cells; larger pointwise likelihoods and designs are stored only when asked for
CHAIN, DRAW = "chain", "draw"


def posterior_tree(
    system: System, prior: Prior, draws: Draws, attributes: dict[str, Any], *, log_likelihood: bool | None
) -> xr.DataTree:
    """Lay draws out in groups.

    Groups: ``posterior``, ``conditional`` (mean, variance and shrinkage of the coefficients given
    covariance and scales), ``sample_stats``, ``log_likelihood`` (joint over the equations, per period),
    ``log_prior`` (by block), ``observed_data``, ``constant_data``.

    Parameters
    ----------
    log_likelihood : bool or None
        Whether to store the pointwise log likelihood; None: if it has at most 10^7 cells.
    """
    import xarray as xr

    groups = {
        "posterior": _posterior(system, prior, draws),
        "conditional": _conditional(draws),
        "sample_stats": {k: ((CHAIN, DRAW), v) for k, v in draws.statistics.items()},
        "log_prior": _log_prior(system, prior, draws),
        "observed_data": {"responses": (("period", "equation"), system.responses)},
        "constant_data": _constants(system, prior),
    }
    if log_likelihood or (
        log_likelihood is None and len(draws.coefficients) * system.n_periods <= LARGEST_STORED
    ):
        values = pointwise_log_likelihood(system, draws.coefficients, draws.roots)
        groups["log_likelihood"] = {"responses": ((CHAIN, DRAW, "period"), _by_chain(draws, values))}
    coords = _coordinates(system, prior, draws)
    tree = xr.DataTree.from_dict({name: _dataset(group, coords) for name, group in groups.items()})
    tree.attrs.update(attributes)
    tree["posterior"].attrs.update({"sample_dims": [CHAIN, DRAW], **attributes})
    return tree


def _posterior(system: System, prior: Prior, draws: Draws) -> dict[str, Any]:
    roots = draws.correlation_roots
    matrix = roots @ roots.transpose(0, 2, 1)
    diagonal = np.arange(system.n_equations)
    matrix[:, diagonal, diagonal] = 1.0
    pairs = np.array(system.pairs, dtype=int).reshape(-1, 2)
    out = {
        "coefficients": ((CHAIN, DRAW, "coefficient"), _by_chain(draws, draws.coefficients)),
        "scales": ((CHAIN, DRAW, "equation"), _by_chain(draws, draws.scales)),
        "correlation": ((CHAIN, DRAW, "equation", "equation_b"), _by_chain(draws, matrix)),
        "correlations": ((CHAIN, DRAW, "pair"), _by_chain(draws, matrix[:, pairs[:, 0], pairs[:, 1]])),
    }
    if prior.coefficients.groups:
        out["pooled_mean"] = ((CHAIN, DRAW, "pooled"), _by_chain(draws, draws.pooled_mean))
        out["pooled_spread"] = ((CHAIN, DRAW, "pooled"), _by_chain(draws, draws.pooled_spread))
    return out


def _conditional(draws: Draws) -> dict[str, Any]:
    law = draws.conditional
    parts = {"mean": law.mean, "variance": law.variance, "shrinkage": law.shrinkage}
    return {name: ((CHAIN, DRAW, "coefficient"), _by_chain(draws, v)) for name, v in parts.items()}


def _log_prior(system: System, prior: Prior, draws: Draws) -> dict[str, Any]:
    log_determinant = 2 * np.log(np.einsum("sii->si", draws.correlation_roots)).sum(axis=1)
    parts = {
        "coefficients": coefficient_block.log_prior(
            prior.coefficients, draws.stated, draws.pooled_mean, draws.pooled_spread
        ),
        "scales": scale_block.log_prior(prior.scales, draws.scales),
        "correlation": correlation_block.log_prior(prior.correlation, log_determinant, system.n_equations),
    }
    return {name: ((CHAIN, DRAW), _by_chain(draws, values)) for name, values in parts.items()}


def _constants(system: System, prior: Prior) -> dict[str, Any]:
    mean, sd = prior_moments(prior)
    out: dict[str, Any] = {"prior_mean": ("coefficient", mean), "prior_sd": ("coefficient", sd)}
    if system.n_periods * system.n_coefficients <= LARGEST_STORED:
        design = np.hstack([equation.design for equation in system.equations])
        out["regressors"] = (("period", "coefficient"), design)
    return out


def _by_chain(draws: Draws, values: Array) -> Array:
    return values.reshape(draws.n_chains, len(values) // draws.n_chains, *values.shape[1:])


def _coordinates(system: System, prior: Prior, draws: Draws) -> dict[str, Any]:
    return {
        CHAIN: np.arange(draws.n_chains),
        DRAW: np.arange(len(draws.coefficients) // draws.n_chains),
        "equation": list(system.names),
        "equation_b": list(system.names),
        "coefficient": list(system.coefficient_labels),
        "pair": list(system.pair_labels),
        "pooled": [group.name for group in prior.coefficients.groups],
        "period": list(system.periods.labels),
    }


def _dataset(variables: dict[str, Any], coords: dict[str, Any]) -> xr.Dataset:
    import xarray as xr

    used = {dim for dims, _ in variables.values() for dim in ((dims,) if isinstance(dims, str) else dims)}
    return xr.Dataset(variables, coords={name: values for name, values in coords.items() if name in used})
