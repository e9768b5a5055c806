"""Posterior trees made without a sampler: exact draws of the coefficients given drawn error covariances."""

from __future__ import annotations

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from bayes_sys.system.system import System

Array = NDArray[np.float64]


def make_tree(
    system: System,
    *,
    prior_mean: float = 0.0,
    prior_sd: float = 10.0,
    scales: Array | None = None,
    correlation: Array | None = None,
    wobble: float = 0.1,
    n_chains: int = 4,
    n_draws: int = 250,
    seed: int = 1,
) -> xr.DataTree:
    """Draw error covariances around given ones, then the coefficients exactly given each.

    ``wobble`` 0 keeps the error covariance fixed at ``scales`` and ``correlation`` (ones, and no correlation,
    unless given), so that everything about the coefficients has a closed form.
    """
    rng = np.random.default_rng(seed)
    n, k = system.n_equations, system.n_coefficients
    scales = np.ones(n) if scales is None else np.asarray(scales, dtype=float)
    correlation = np.eye(n) if correlation is None else np.asarray(correlation, dtype=float)
    shape = (n_chains, n_draws)
    out = {
        "coefficients": np.empty((*shape, k)),
        "scales": np.empty((*shape, n)),
        "correlation": np.empty((*shape, n, n)),
        "mean": np.empty((*shape, k)),
        "variance": np.empty((*shape, k)),
    }
    for at in np.ndindex(shape):
        sizes = scales * np.exp(wobble * rng.normal(size=n))
        matrix = _wobbled(correlation, wobble, rng)
        mean, covariance = conditional_law(system, np.outer(sizes, sizes) * matrix, prior_mean, prior_sd)
        out["scales"][at], out["correlation"][at] = sizes, matrix
        out["mean"][at], out["variance"][at] = mean, np.diag(covariance)
        out["coefficients"][at] = rng.multivariate_normal(mean, covariance, method="cholesky")
    return _tree(system, out, prior_mean, prior_sd, rng)


def conditional_law(
    system: System, covariance: Array, prior_mean: float, prior_sd: float
) -> tuple[Array, Array]:
    """Return mean and covariance of all coefficients given the error covariance and a normal prior."""
    precision = np.linalg.inv(covariance)
    columns = np.column_stack([e.design for e in system.equations])
    owner = system.coefficient_equation
    weights = precision[np.ix_(owner, owner)]
    total = weights * (columns.T @ columns) + np.eye(system.n_coefficients) / prior_sd**2
    right = ((system.responses @ precision)[:, owner] * columns).sum(axis=0) + prior_mean / prior_sd**2
    spread = np.linalg.inv(total)
    return spread @ right, 0.5 * (spread + spread.T)


def _wobbled(correlation: Array, wobble: float, rng: np.random.Generator) -> Array:
    n = len(correlation)
    factor = np.linalg.cholesky(correlation) + wobble * np.tril(rng.normal(size=(n, n)), -1)
    factor /= np.linalg.norm(factor, axis=1, keepdims=True)
    return factor @ factor.T


def _tree(
    system: System, out: dict[str, Array], prior_mean: float, prior_sd: float, rng: np.random.Generator
) -> xr.DataTree:
    sample = ("chain", "draw")
    pairs = np.stack([out["correlation"][..., a, b] for a, b in system.pairs], -1) if system.pairs else None
    posterior = {
        "coefficients": ((*sample, "coefficient"), out["coefficients"]),
        "scales": ((*sample, "equation"), out["scales"]),
        "correlation": ((*sample, "equation", "equation_b"), out["correlation"]),
        "correlations": (
            (*sample, "pair"),
            pairs if pairs is not None else np.empty((*out["scales"].shape[:2], 0)),
        ),
    }
    conditional = {
        "mean": ((*sample, "coefficient"), out["mean"]),
        "variance": ((*sample, "coefficient"), out["variance"]),
        "shrinkage": ((*sample, "coefficient"), out["variance"] / prior_sd**2),
    }
    k = system.n_coefficients
    constant = {
        "prior_mean": ("coefficient", np.full(k, prior_mean)),
        "prior_sd": ("coefficient", np.full(k, prior_sd)),
    }
    shape = out["scales"].shape[:2]
    coords = {"coefficient": list(system.coefficient_labels)}
    labels = {
        "equation": list(system.names),
        "equation_b": list(system.names),
        "pair": list(system.pair_labels),
    }
    return xr.DataTree.from_dict(
        {
            "posterior": xr.Dataset(posterior, coords={**coords, **labels}),
            "conditional": xr.Dataset(conditional, coords=coords),
            "constant_data": xr.Dataset(constant, coords=coords),
            "sample_stats": xr.Dataset({"diverging": (sample, np.zeros(shape, dtype=bool))}),
            "observed_data": xr.Dataset({"responses": (("period", "equation"), system.responses)}),
        }
    )
