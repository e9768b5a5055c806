"""A first guess of the error covariance and of the coefficients: the origin of the sampler's coordinates.

Some thirty steps of expectation-maximisation (Dempster, Laird & Rubin 1977) with the coefficients under their
prior. It need not be the mode: the coordinates only have to be of the right size and direction.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.blocks import coefficients as coefficient_block
from bayes_sys.prior.law import Prior
from bayes_sys.system.moments import Factor

Array = NDArray[np.float64]

N_STEPS = 30


@dataclass(frozen=True)
class Start:
    """First guess.

    Parameters
    ----------
    stated : array of float, shape (K,)
        Stated coefficients.
    root : array of float, shape (n_equations, n_equations)
        Lower Cholesky factor of the error covariance.
    coefficient_root : array of float, shape (K, K)
        Lower Cholesky factor of the coefficients' covariance given that error covariance.
    """

    stated: Array
    root: Array
    coefficient_root: Array


def first_guess(factor: Factor, prior: Prior, *, n_steps: int = N_STEPS) -> Start:
    """Return a first guess of the coefficients and the error covariance under the prior.

    The error covariance stays positive definite however few periods there are, because what the prior leaves
    open about the coefficients counts as error, and because the residual correlations are shrunk as the LKJ
    concentration would: ``(S + 2 c diag(S) / T) / (T + 2 c)``.
    """
    law = prior.coefficients
    design = factor.stacked_regressors() @ law.to_raw
    equation = np.repeat(np.arange(factor.n_equations), [len(d) for d in factor.design])
    responses = factor.responses()
    spread = np.array([[g.spread_scale for g in law.groups]])
    columns = coefficient_block.scale_columns(law, spread)[0]
    membership = np.eye(factor.n_equations)[equation]
    cross, periods, weight = design.T @ design, factor.n_periods, 2.0 * prior.correlation.concentration
    centre = law.stated_mean
    covariance = np.diag(_starting_variances(responses - (design * centre) @ membership, prior, periods))
    stated, conditional = centre, columns @ columns.T
    for _ in range(n_steps):
        omega = np.linalg.inv(covariance)
        information = omega[np.ix_(equation, equation)] * cross
        score = ((design.T @ (responses - (design * centre) @ membership)) * omega[equation]).sum(axis=1)
        precision = np.eye(columns.shape[1]) + columns.T @ information @ columns
        conditional = columns @ np.linalg.solve(precision, columns.T)
        stated = centre + conditional @ score
        residuals = responses - (design * stated) @ membership
        square = residuals.T @ residuals + membership.T @ (conditional * cross) @ membership
        diagonal = np.diag(np.diag(square))
        covariance = (square + weight * diagonal / periods) / (periods + weight)
        covariance = 0.5 * (covariance + covariance.T)
    conditional = 0.5 * (conditional + conditional.T)
    return Start(stated, np.linalg.cholesky(covariance), np.linalg.cholesky(conditional))


def _starting_variances(residuals: Array, prior: Prior, periods: int) -> Array:
    """Mean square about the prior's centre, but no more than the scale's prior makes plausible."""
    about_centre = (residuals**2).sum(axis=0) / periods
    plausible = prior.scales.size**2
    return np.where(about_centre > 0, np.minimum(about_centre, plausible), plausible)
