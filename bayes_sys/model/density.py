"""The compiled log density: the same blocks as the PyMC model, laid together for the sampler.

What is explored is the error covariance (in whitened coordinates), the spreads of pooled groups and, in one of
two forms, the coefficients. On short series they are integrated out and drawn exactly afterwards
(``conditional``): that is what makes hard priors sample at all. With many coefficients and periods enough,
sampling them costs less; ``integrates`` says which. Cost does not depend on the number of periods.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.blocks import coefficients as coefficient_block
from bayes_sys.model.blocks import correlation as correlation_block
from bayes_sys.model.blocks import errors as error_block
from bayes_sys.model.blocks import scales as scale_block
from bayes_sys.model.blocks import whitening
from bayes_sys.model.kernels import kernel
from bayes_sys.model.start import Start, first_guess
from bayes_sys.prior.law import CoefficientLaw, Prior
from bayes_sys.system.moments import Factor

Array = NDArray[np.float64]

HEADER = 7  # length, n_equations, n_coefficients, n_groups, n_periods, concentration, integrated
MOST_INTEGRATED, LEAST_ROOM = 40, 1.5  # coefficients; free periods for each equation. See ``integrates``


@dataclass(frozen=True)
class Packed:
    """Everything the compiled density reads, and what is needed to read its draws.

    Parameters
    ----------
    data : array of float, one-dimensional
        Header and sections, see ``pack``.
    n_dim : int
        Length of the unconstrained vector: covariance coordinates, normal scores of pooled spreads; where the
        coefficients are sampled, also standardised pooled means and whitened coefficients.
    start : Start
    integrated : bool
        Whether the coefficients are integrated out.
    """

    data: Array
    n_dim: int
    start: Start
    integrated: bool


def integrates(factor: Factor, prior: Prior) -> bool:
    """Whether the coefficients are better integrated out than sampled.

    Measured (4 chains of 1000 + 1000): sampled coefficients under a pooled prior diverged by the dozen in every
    design tried, so those are always integrated out. Under a normal prior both forms are clean where each
    equation has room, and sampling takes about half the time from 32 coefficients on, growing with their number;
    where there are few periods for each equation it loses effective draws and now and then diverges.
    """
    if prior.coefficients.groups or sum(len(d) for d in factor.design) <= MOST_INTEGRATED:
        return True
    free = factor.n_periods - max(len(d) for d in factor.design)
    return free < LEAST_ROOM * factor.n_equations


def pack(factor: Factor, prior: Prior, *, integrated: bool | None = None) -> Packed:
    """Lay factor and prior out for the compiled density, about a first guess.

    Parameters
    ----------
    factor : Factor
    prior : Prior
    integrated : bool, optional
        Whether to integrate the coefficients out; what ``integrates`` says, if left out.
    """
    integrated = integrates(factor, prior) if integrated is None else integrated
    law = prior.coefficients
    start = first_guess(factor, prior)
    design = factor.stacked_regressors() @ law.to_raw
    residuals = factor.residuals(law.to_raw @ start.stated)
    members, groups = coefficient_block.pack(law)
    equation = np.repeat(np.arange(factor.n_equations), [len(d) for d in factor.design]).astype(float)
    sections = (
        np.linalg.solve(start.root, np.eye(factor.n_equations)),
        scale_block.pack(prior.scales),
        members,
        groups,
        law.stated_mean - start.stated,
        equation,
        design.T @ design,
        design.T @ residuals,
        residuals.T @ residuals,
        start.coefficient_root,
    )
    flat = np.concatenate([np.ravel(section) for section in sections])
    header: list[float] = [HEADER + len(flat), factor.n_equations, len(equation), len(groups)]
    header += [factor.n_periods, prior.correlation.concentration, float(integrated)]
    data = np.concatenate([header, flat])
    n_dim = whitening.n_free(factor.n_equations) + coefficient_block.n_free(law, integrated=integrated)
    return Packed(np.ascontiguousarray(data), n_dim, start, integrated)


@kernel
def evaluate(u: Array, gradient: Array, data: Array) -> float:
    """Return the log density of the unconstrained vector, up to a constant, and write its gradient.

    Parameters
    ----------
    u, gradient : arrays of float, shape (n_dim,)
    data : array of float
        ``Packed.data``.
    """
    n, k, n_groups, periods, concentration = int(data[1]), int(data[2]), int(data[3]), data[4], data[5]
    at = HEADER
    guess_inverse = data[at : at + n * n].reshape((n, n))
    at += n * n
    scale_laws = data[at : at + 3 * n].reshape((n, 3))
    at += 3 * n
    members = data[at : at + 2 * k].reshape((k, 2))
    at += 2 * k
    groups = data[at : at + 2 * n_groups].reshape((n_groups, 2))
    at += 2 * n_groups
    centre = data[at : at + k]
    at += k
    equation = data[at : at + k]
    at += k
    xx = data[at : at + k * k].reshape((k, k))
    at += k * k
    xe = data[at : at + k * n].reshape((k, n))
    at += k * n
    ee = data[at : at + n * n].reshape((n, n))
    at += n * n
    coefficient_root = data[at : at + k * k].reshape((k, k))

    n_covariance = n * (n + 1) // 2
    v = u[n_covariance : n_covariance + n_groups]
    rest, rest_gradient = u[n_covariance + n_groups :], gradient[n_covariance + n_groups :]
    w, root, scales = np.zeros((n, n)), np.zeros((n, n)), np.empty(n)
    scale, by_log_scale, by_score = np.empty(k), np.empty(k), np.empty(n_groups)
    square = np.empty((n, n))

    log_w = whitening.forward(u, periods, guess_inverse, w, root, scales)
    value: float = whitening.log_volume(w, scales) + periods * log_w
    value += coefficient_block.forward(v, members, groups, scale, by_score)
    if data[6] > 0.0:
        value += error_block.collapsed(
            w, scale, members, groups, centre, xx, xe, ee, equation, by_log_scale, square
        )
    else:
        value += sampled(
            rest,
            coefficient_root,
            w,
            scale,
            members,
            groups,
            centre,
            xx,
            xe,
            ee,
            equation,
            by_log_scale,
            square,
            rest_gradient,
        )
    if not np.isfinite(value):
        return np.nan
    by_log_d, by_log_w = np.empty(n), np.empty(n)
    value += covariance_laws(scale_laws, concentration, periods, log_w, scales, by_log_d, by_log_w)
    coefficient_block.backward(
        v, members, by_log_scale, by_score, gradient[n_covariance : n_covariance + n_groups]
    )
    whitening.backward(
        u, periods, guess_inverse, w, root, scales, by_log_d, by_log_w, square, gradient[:n_covariance]
    )
    return value


@kernel
def sampled(
    rest: Array,
    coefficient_root: Array,
    w: Array,
    scale: Array,
    members: Array,
    groups: Array,
    centre: Array,
    xx: Array,
    xe: Array,
    ee: Array,
    equation: Array,
    by_log_scale: Array,
    square: Array,
    gradient: Array,
) -> float:
    """Return likelihood (without ``T log det W``) and prior of sampled coefficients; write their gradient.

    Parameters
    ----------
    rest, gradient : arrays of float, shape (n_groups + K,)
        Standardised pooled means, then coefficients whitened by ``coefficient_root``.
    """
    n_groups, k = groups.shape[0], scale.shape[0]
    m, z = rest[:n_groups], rest[n_groups:]
    shift, by_shift = np.zeros(k), np.empty(k)
    for a in range(k):
        for b in range(a + 1):
            shift[a] += coefficient_root[a, b] * z[b]
    value: float = error_block.known(w, shift, xx, xe, ee, equation, by_shift, square)
    value += coefficient_block.log_density(
        shift, m, centre, scale, members, groups, by_shift, gradient[:n_groups], by_log_scale
    )
    for b in range(k):
        gradient[n_groups + b] = 0.0
    for a in range(k):
        for b in range(a + 1):
            gradient[n_groups + b] += coefficient_root[a, b] * by_shift[a]
    return value


@kernel
def covariance_laws(
    scale_laws: Array,
    concentration: float,
    periods: float,
    log_w: float,
    scales: Array,
    by_log_d: Array,
    by_log_w: Array,
) -> float:
    """Return the log density of scales and correlation; write all derivatives in log D_i and log W_ii.

    The derivatives include those of the coordinates' volume and of ``T log det W``.
    """
    n = scales.shape[0]
    log_determinant = -2.0 * log_w
    for i in range(n):
        log_determinant -= 2.0 * np.log(scales[i])
    value, slope = correlation_block.log_density(concentration, log_determinant)
    for i in range(n):
        log_p, by_log = scale_block.log_density(
            scale_laws[i, 0], scale_laws[i, 1], scale_laws[i, 2], scales[i]
        )
        value += log_p
        by_log_d[i] = by_log - n - 2.0 * slope
        by_log_w[i] = periods + (i + 2.0 - 2.0 * (n + 1.0)) - 2.0 * slope
    return value


def covariance_roots(u: Array, packed: Packed) -> Array:
    """Return the lower Cholesky factor of Sigma at draws of the unconstrained vector.

    Parameters
    ----------
    u : array of float, shape (n_draws, n_dim)

    Returns
    -------
    array of float, shape (n_draws, n_equations, n_equations)
    """
    n = packed.start.root.shape[0]
    a = np.zeros((len(u), n, n))
    a[:, np.arange(n), np.arange(n)] = np.exp(u[:, :n])
    a[:, *np.tril_indices(n, -1)] = u[:, n : whitening.n_free(n)] / np.sqrt(packed.data[4])
    return np.asarray(packed.start.root @ np.linalg.solve(a, np.broadcast_to(np.eye(n), a.shape)))


def sampled_coefficients(u: Array, packed: Packed, law: CoefficientLaw) -> tuple[Array, Array]:
    """Return stated coefficients and pooled means at draws of a density that samples them.

    Parameters
    ----------
    u : array of float, shape (n_draws, n_dim)

    Returns
    -------
    tuple of arrays of float, shapes (n_draws, K) and (n_draws, n_groups)
    """
    n_groups, k = len(law.groups), len(law.mean)
    z, m = u[:, -k:], u[:, u.shape[1] - k - n_groups : u.shape[1] - k]
    mean = np.array([g.mean for g in law.groups]) + np.array([g.mean_scale for g in law.groups]) * m
    return packed.start.stated + z @ packed.start.coefficient_root.T, mean
