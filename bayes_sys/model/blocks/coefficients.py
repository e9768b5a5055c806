"""Block: the law of the coefficients, Gaussian given its own scales.

The stated coefficients are ``b = centre + B theta``, ``theta ~ N(0, I)``: one column per coefficient, its scale
on the diagonal, and one further column per pooled mean. A pooled group's spread is a hyperparameter,
half-normal, sampled through its normal score.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.blocks.spreads import half_normal, half_normal_values
from bayes_sys.model.kernels import kernel
from bayes_sys.prior.law import CoefficientLaw

Array = NDArray[np.float64]

VARIABLE, STATED, POOLED_MEAN, POOLED_SPREAD = "coefficients", "stated", "pooled_mean", "pooled_spread"
HALF_LOG_TWO_PI = 0.5 * float(np.log(2.0 * np.pi))


def n_free(law: CoefficientLaw, *, integrated: bool) -> int:
    """Return how many unconstrained numbers the law adds.

    The spreads' normal scores; and where the coefficients are sampled, the standardised pooled means and one
    number a coefficient.
    """
    return len(law.groups) if integrated else 2 * len(law.groups) + len(law.mean)


def pack(law: CoefficientLaw) -> tuple[Array, Array]:
    """Lay the law out for the kernel.

    Returns
    -------
    per coefficient : array of float, shape (K, 2)
        Fixed scale (0 where pooled) and index of the group (-1 where not pooled).
    per group : array of float, shape (n_groups, 2)
        Scale of the shared mean, scale of the spread.
    """
    fixed = np.where(law.pooled, 0.0, law.scale)
    groups = np.array([(g.mean_scale, g.spread_scale) for g in law.groups]).reshape(-1, 2)
    return np.column_stack([fixed, law.group]), groups


@kernel
def forward(v: Array, members: Array, groups: Array, scale: Array, by_score: Array) -> float:
    """Fill the scale of every coefficient and d log(scale) / dv of every group; return the log prior of ``v``.

    Parameters
    ----------
    v : array of float, shape (n_groups,)
        Normal scores of the spreads.
    members : array of float, shape (K, 2)
    groups : array of float, shape (n_groups, 2)
    scale : array of float, shape (K,), written
    by_score : array of float, shape (n_groups,), written
    """
    total = 0.0
    for score in v:
        total -= 0.5 * score * score
    for k in range(members.shape[0]):
        scale[k] = members[k, 0]
    for g in range(groups.shape[0]):
        x, slope = half_normal(v[g])
        by_score[g] = slope
        for k in range(members.shape[0]):
            if members[k, 1] == g:
                scale[k] = groups[g, 1] * x
    return total


@kernel
def backward(v: Array, members: Array, by_log_scale: Array, by_score: Array, gradient: Array) -> None:
    """Write the gradient in ``v`` from the derivative in the log scale of every coefficient, shape (K,)."""
    for g in range(v.shape[0]):
        gradient[g] = -v[g]
    for k in range(members.shape[0]):
        g = int(members[k, 1])
        if g >= 0:
            gradient[g] += by_log_scale[k] * by_score[g]


@kernel
def log_density(
    shift: Array,
    m: Array,
    centre: Array,
    scale: Array,
    members: Array,
    groups: Array,
    by_shift: Array,
    by_mean: Array,
    by_log_scale: Array,
) -> float:
    """Return the log prior of sampled coefficients and pooled means, up to a constant; add up derivatives.

    Parameters
    ----------
    shift : array of float, shape (K,)
        Coefficients less the reference.
    m : array of float, shape (n_groups,)
        Standardised pooled means.
    centre : array of float, shape (K,)
        Prior centre less the reference, pooled means at their own centre.
    scale : array of float, shape (K,)
    by_shift : array of float, shape (K,), added to
    by_mean : array of float, shape (n_groups,), written
    by_log_scale : array of float, shape (K,), written
    """
    total = 0.0
    for g in range(m.shape[0]):
        total -= 0.5 * m[g] * m[g]
        by_mean[g] = -m[g]
    for k in range(shift.shape[0]):
        g = int(members[k, 1])
        off = shift[k] - centre[k]
        if g >= 0:
            off -= groups[g, 0] * m[g]
        z = off / scale[k]
        total -= 0.5 * z * z + np.log(scale[k])
        by_shift[k] -= z / scale[k]
        by_log_scale[k] = z * z - 1.0
        if g >= 0:
            by_mean[g] += groups[g, 0] * z / scale[k]
    return total


def spreads(law: CoefficientLaw, scores: Array) -> Array:
    """Return the spread of every pooled group from its normal scores, shape (..., n_groups)."""
    scale = np.array([g.spread_scale for g in law.groups])
    return np.asarray(half_normal_values(scores) * scale)


def scale_columns(law: CoefficientLaw, spread: Array) -> Array:
    """Return ``B`` for draws of the spreads.

    Parameters
    ----------
    spread : array of float, shape (n_draws, n_groups)

    Returns
    -------
    array of float, shape (n_draws, K, K + n_groups)
    """
    n_draws, k = spread.shape[0], len(law.mean)
    columns = np.zeros((n_draws, k, k + len(law.groups)))
    scale = np.broadcast_to(law.scale, (n_draws, k)).copy()
    scale[:, law.pooled] = spread[:, law.group[law.pooled]]
    columns[:, np.arange(k), np.arange(k)] = scale
    for g, group in enumerate(law.groups):
        columns[:, law.group == g, k + g] = group.mean_scale
    return columns


def log_prior(law: CoefficientLaw, stated: Array, mean: Array, spread: Array) -> Array:
    """Return the normalised log density of draws, hyperparameters included, on the raw scale.

    Parameters
    ----------
    stated : array of float, shape (..., K)
    mean, spread : arrays of float, shape (..., n_groups)
    """
    centre = np.broadcast_to(law.mean, stated.shape).copy()
    scale = np.broadcast_to(law.scale, stated.shape).copy()
    centre[..., law.pooled] = mean[..., law.group[law.pooled]]
    scale[..., law.pooled] = spread[..., law.group[law.pooled]]
    total = np.asarray(_normal(stated, centre, scale).sum(axis=-1) - np.linalg.slogdet(law.to_raw)[1])
    for g, group in enumerate(law.groups):
        total += _normal(mean[..., g], group.mean, group.mean_scale)
        total += _normal(spread[..., g], 0.0, group.spread_scale) + np.log(2.0)
    return total


def _normal(x: Array, centre: Any, scale: Any) -> Array:
    return np.asarray(-0.5 * ((x - centre) / scale) ** 2 - np.log(scale) - HALF_LOG_TWO_PI)


def declare(law: CoefficientLaw) -> Any:
    """Declare ``coefficients[coefficient]`` in the PyMC model at hand and return it.

    The pooled part is declared by standardised deviations: the form that suits short series when the model
    is sampled as it stands.
    """
    import pymc as pm
    import pytensor.tensor as pt

    k = len(law.mean)
    stated = pt.zeros(k)
    fixed = np.flatnonzero(~law.pooled)
    if fixed.size:
        part = pm.Normal(f"{STATED}_fixed", mu=law.mean[fixed], sigma=law.scale[fixed], shape=fixed.size)
        stated = pt.set_subtensor(stated[fixed], part)
    if law.groups:
        mean = pm.Normal(
            POOLED_MEAN,
            mu=np.array([g.mean for g in law.groups]),
            sigma=np.array([g.mean_scale for g in law.groups]),
            dims="pooled",
        )
        spread = pm.HalfNormal(
            POOLED_SPREAD, sigma=np.array([g.spread_scale for g in law.groups]), dims="pooled"
        )
        members = np.flatnonzero(law.pooled)
        deviation = pm.Normal(f"{STATED}_deviation", shape=members.size)
        group = law.group[members]
        stated = pt.set_subtensor(stated[members], mean[group] + spread[group] * deviation)
    return pm.Deterministic(VARIABLE, pt.constant(law.to_raw) @ stated, dims="coefficient")
