"""The coefficients given the error covariance and the prior's scales: Gaussian, exactly, draw by draw.

``b = centre + B theta``, ``theta | y ~ N(A^-1 B' h, A^-1)``, ``A = I + B' F B`` (Lindley & Smith 1972); see
``blocks.errors`` for F and h.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.blocks import coefficients as coefficient_block
from bayes_sys.prior.law import Prior
from bayes_sys.system.moments import Factor

Array = NDArray[np.float64]

CHUNK_NUMBERS = 4_000_000  # largest batch of matrix elements held at once


@dataclass(frozen=True)
class Conditional:
    """Coefficients given covariance and scales, for a batch of draws; all on the raw scale.

    Parameters
    ----------
    mean, variance : arrays of float, shape (n_draws, K)
        Pooled means integrated out.
    shrinkage : array of float, shape (n_draws, K)
        ``V_kk / tau_k^2``: conditional over prior variance, both given the covariance, the prior's scales and,
        where coefficients are pooled, the mean they share. For a pooled coefficient it is the pooling factor
        (Gelman & Pardoe 2006, Technometrics 48, 241-251): 0, it keeps its own estimate, 1, the shared mean.
    draw : array of float, shape (n_draws, K)
        One exact draw per covariance draw.
    stated : array of float, shape (n_draws, K)
        The same draw in the units the card speaks in.
    pooled_mean : array of float, shape (n_draws, n_groups)
    """

    mean: Array
    variance: Array
    shrinkage: Array
    draw: Array
    stated: Array
    pooled_mean: Array

    @staticmethod
    def joined(parts: Sequence[Conditional]) -> Conditional:
        """Return several batches as one, in their order."""
        names = [field.name for field in fields(Conditional)]
        return Conditional(*(np.concatenate([getattr(part, name) for part in parts]) for name in names))


def conditional_coefficients(
    factor: Factor,
    prior: Prior,
    reference: Array,
    roots: Array,
    spreads: Array,
    rng: np.random.Generator,
) -> Conditional:
    """Return mean, variance and one draw of the coefficients at every draw of covariance and spreads.

    Parameters
    ----------
    reference : array of float, shape (K,)
        Stated coefficients near the answer; they only keep digits.
    roots : array of float, shape (n_draws, n_equations, n_equations)
        Lower Cholesky factors of the error covariance.
    spreads : array of float, shape (n_draws, n_groups)
    rng : numpy.random.Generator
    """
    law = prior.coefficients
    k = len(law.mean)
    p = k + len(law.groups)
    normals = rng.standard_normal((len(roots), p))
    moments = _Moments.of(factor, law.to_raw, reference)
    parts = [
        _batch(moments, prior, reference, roots[rows], spreads[rows], normals[rows])
        for rows in _chunks(len(roots), p * p + k * p)
    ]
    return Conditional.joined(parts)


@dataclass(frozen=True)
class _Moments:
    """Cross-products of the regressors and of the residuals at reference coefficients."""

    xx: Array
    xe: Array
    equation: NDArray[np.int64]

    @staticmethod
    def of(factor: Factor, to_raw: Array, reference: Array) -> _Moments:
        design = factor.stacked_regressors() @ to_raw
        residuals = factor.residuals(to_raw @ reference)
        equation = np.repeat(np.arange(factor.n_equations), [len(d) for d in factor.design])
        return _Moments(design.T @ design, design.T @ residuals, equation)


def _chunks(n_draws: int, numbers_per_draw: int) -> Iterator[slice]:
    size = max(1, CHUNK_NUMBERS // max(1, numbers_per_draw))
    for start in range(0, n_draws, size):
        yield slice(start, start + size)


def _batch(
    moments: _Moments, prior: Prior, reference: Array, roots: Array, spreads: Array, normals: Array
) -> Conditional:
    law = prior.coefficients
    equation = moments.equation
    w = np.linalg.solve(roots, np.broadcast_to(np.eye(roots.shape[1]), roots.shape))
    omega = np.matmul(w.transpose(0, 2, 1), w)
    columns = coefficient_block.scale_columns(law, spreads)
    information = omega[:, equation[:, None], equation[None, :]] * moments.xx
    centre = law.stated_mean - reference
    score = (omega[:, equation, :] * moments.xe).sum(axis=2) - information @ centre
    transposed = columns.transpose(0, 2, 1)
    precision = np.eye(columns.shape[2]) + transposed @ information @ columns
    lower = np.linalg.cholesky(precision)
    half = np.linalg.solve(lower, transposed)  # lower^-1 B'
    theta = np.linalg.solve(lower.transpose(0, 2, 1), half @ score[:, :, None])[:, :, 0]
    noise = np.linalg.solve(lower.transpose(0, 2, 1), normals[:, :, None])[:, :, 0]
    to_raw = law.to_raw
    mean = law.stated_mean + (columns @ theta[:, :, None])[:, :, 0]
    stated = mean + (columns @ noise[:, :, None])[:, :, 0]
    variance = ((half @ to_raw.T) ** 2).sum(axis=1)
    k = len(law.mean)
    own = transposed[:, :k] @ to_raw.T  # without the columns of the pooled means
    shrinkage = (np.linalg.solve(lower[:, :k, :k], own) ** 2).sum(axis=1) / (own**2).sum(axis=1)
    group_mean = np.array([g.mean for g in law.groups])
    group_scale = np.array([g.mean_scale for g in law.groups])
    pooled = group_mean + group_scale * (theta + noise)[:, k:]
    return Conditional(mean @ to_raw.T, variance, shrinkage, stated @ to_raw.T, stated, pooled)
