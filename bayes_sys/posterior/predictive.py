"""The predictive law of the outcomes in the sample: a mixture of normals over the draws, taken exactly."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.posterior.summary import TAIL, flat_draws

if TYPE_CHECKING:
    import xarray as xr

    from bayes_sys.system.system import System

Array = NDArray[np.float64]

MAX_CELLS = 10_000_000
"""Periods x equations x draws up to which the bands are exact; beyond it the mixture is taken as a normal."""
CHUNK_CELLS = 2_000_000
Z_TAIL = 1.6448536269514722
"""The 95% quantile of the standard normal."""


def predictive_band(posterior: xr.DataTree, system: System) -> tuple[Array, Array, Array]:
    """Return the posterior mean of the regression and the 90% predictive band of the outcomes.

    While periods x equations x draws stays within ``MAX_CELLS`` the band is the exact quantile of the mixture
    over all draws. Beyond it the mixture is replaced by the normal of the same mean and variance; in systems
    so large the two differ by about 0.1 / n_periods error standard deviations (the excess kurtosis that an
    uncertain scale brings is about 6 / n_periods).

    Parameters
    ----------
    posterior : DataTree
        Draws of ``coefficients`` and ``scales``.
    system : System
        Gaussian errors without autocorrelation.

    Returns
    -------
    tuple of three arrays of float, each of shape (n_periods, n_equations)
        Mean of ``X beta`` over all draws; 5% and 95% quantile of an outcome drawn at the same regressors,
        which holds both the error and what is not known about coefficients and scale. Units of the response.
    """
    coefficients, scales = flat_draws(posterior, "coefficients"), flat_draws(posterior, "scales")
    exact = system.responses.size * len(scales) <= MAX_CELLS
    mean, low, high = (np.empty(system.responses.shape) for _ in range(3))
    step = max(1, CHUNK_CELLS // len(scales))
    for i, equation in enumerate(system.equations):
        mine, sizes = coefficients[:, system.slice_of(i)], scales[:, i]
        mean[:, i], spread = mixture_moments(equation.design, mine, sizes)
        low[:, i], high[:, i] = mean[:, i] - Z_TAIL * spread, mean[:, i] + Z_TAIL * spread
        for start in range(0, system.n_periods if exact else 0, step):
            rows = slice(start, start + step)
            locations = equation.design[rows] @ mine.T
            low[rows, i] = mixture_quantile(locations, sizes, TAIL, -Z_TAIL, low[rows, i])
            high[rows, i] = mixture_quantile(locations, sizes, 1 - TAIL, Z_TAIL, high[rows, i])
    return mean, low, high


def mixture_moments(design: Array, coefficients: Array, scales: Array) -> tuple[Array, Array]:
    """Return mean and standard deviation of the predictive mixture at every period.

    Parameters
    ----------
    design : array of float, shape (n_periods, p_i)
    coefficients : array of float, shape (n_draws, p_i)
    scales : array of float, shape (n_draws,)

    Returns
    -------
    tuple of two arrays of float, each of shape (n_periods,)
    """
    centre = coefficients.mean(axis=0)
    # a factor of the draws' covariance: variances as sums of squares cannot come out negative
    factor = np.linalg.qr(coefficients - centre, mode="r") / np.sqrt(len(coefficients))
    variance = ((design @ factor.T) ** 2).sum(axis=1) + (scales**2).mean()
    return design @ centre, np.sqrt(variance)


def mixture_quantile(locations: Array, scales: Array, level: float, z: float, guess: Array) -> Array:
    """Return a quantile of equal mixtures of normals, one mixture a row, by bracketed Newton steps.

    Parameters
    ----------
    locations : array of float, shape (n_rows, n_draws)
    scales : array of float, shape (n_draws,), positive
    level : float
        Probability below the quantile.
    z : float
        The standard normal's quantile at ``level``: every component's own quantile is ``location + z scale``,
        so the mixture's lies between the least and the greatest of these.
    guess : array of float, shape (n_rows,)
        Where to start.

    Returns
    -------
    array of float, shape (n_rows,)
        To 1e-6 of the smallest scale or better.
    """
    from scipy.special import ndtr

    own = locations + z * scales
    low, high = own.min(axis=1), own.max(axis=1)
    guess = np.clip(guess, low, high)
    tolerance = 1e-6 * scales.min() + 4 * np.finfo(float).eps * np.abs(own).max(initial=0.0)
    for _ in range(100):
        standard = (guess[:, None] - locations) / scales
        excess = ndtr(standard).mean(axis=1) - level
        low, high = np.where(excess <= 0, guess, low), np.where(excess >= 0, guess, high)
        slope = (np.exp(-0.5 * standard**2) / scales).mean(axis=1) / np.sqrt(2 * np.pi)
        following = guess - excess / np.maximum(slope, np.finfo(float).tiny)
        outside = (following < low) | (following > high)
        following = np.where(outside, 0.5 * (low + high), following)
        moved = np.abs(following - guess).max(initial=0.0)
        guess = following
        if moved <= tolerance:
            break
    return guess
