"""The predictive law of the outcomes in the sample: a mixture of normals over the draws, taken exactly."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.posterior.summary import TAIL, flat_draws, thinned

if TYPE_CHECKING:
    import xarray as xr

    from bayes_sys.system.system import System

Array = NDArray[np.float64]

MAX_CELLS = 200_000_000
"""Periods times equations times draws that the bands may cost; beyond it draws are thinned evenly."""
MIN_DRAWS = 100
CHUNK_CELLS = 2_000_000
Z_TAIL = 1.6448536269514722
"""The 95% quantile of the standard normal."""


def band_draws(system: System, n_draws: int) -> NDArray[np.int64]:
    """Return which draws the bands are made from.

    All of them while periods x equations x draws stays within ``MAX_CELLS``; evenly spaced ones beyond, never
    fewer than ``MIN_DRAWS``. The errors are integrated out exactly, so few draws cost little precision: what
    is thinned is the uncertainty of the parameters, which is small in systems so large.
    """
    cells = max(1, system.n_periods * system.n_equations)
    return thinned(n_draws, max(MIN_DRAWS, MAX_CELLS // cells))


def predictive_band(posterior: xr.DataTree, system: System) -> tuple[Array, Array, Array]:
    """Return the posterior mean of the regression and the 90% predictive band of the outcomes.

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
    keep = band_draws(system, len(coefficients))
    centre = coefficients.mean(axis=0)
    mean, low, high = (np.empty(system.responses.shape) for _ in range(3))
    for i, equation in enumerate(system.equations):
        where = system.slice_of(i)
        mean[:, i] = equation.design @ centre[where]
        some, sizes = coefficients[keep, where], scales[keep, i]
        step = max(1, CHUNK_CELLS // len(keep))
        for start in range(0, system.n_periods, step):
            rows = slice(start, start + step)
            locations = equation.design[rows] @ some.T
            low[rows, i] = mixture_quantile(locations, sizes, TAIL, -Z_TAIL)
            high[rows, i] = mixture_quantile(locations, sizes, 1 - TAIL, Z_TAIL)
    return mean, low, high


def mixture_quantile(locations: Array, scales: Array, level: float, z: float) -> Array:
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

    Returns
    -------
    array of float, shape (n_rows,)
        To 1e-8 of the smallest scale, or the last digits of the locations.
    """
    from scipy.special import ndtr

    own = locations + z * scales
    low, high = own.min(axis=1), own.max(axis=1)
    guess = own.mean(axis=1)
    tolerance = 1e-8 * scales.min() + 4 * np.finfo(float).eps * np.abs(own).max(initial=0.0)
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
