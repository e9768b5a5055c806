"""Tests of a diagonal error covariance, with p-values by simulation.

The chi-square approximations of both tests are poor in short series. Under Gaussian errors that are unrelated
between equations, neither statistic depends on the coefficients or on the error scales, so simulating from
standard normal errors at the study's own design gives a p-value that is exact whatever the number of
simulations (Dufour 2006, Monte Carlo tests with nuisance parameters, Journal of Econometrics 133, 443-477).

Errors are simulated in the coordinates of the triangular factor: standard normal rows where there are
regressors, and the triangular factor of what remains (Bartlett's decomposition), so the cost does not depend
on the number of periods.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from bayes_sys.classical.bases import Bases

Array = NDArray[np.float64]

CHUNK_NUMBERS = 2_000_000
"""Numbers held at a time in the largest array of a chunk of simulations."""

LARGEST_WORK = 5e8
"""Simulations x K³ of the likelihood-ratio test stay below this: about three seconds at most."""

FEWEST = 199
"""Fewer simulations than this say too little about a p-value."""

RISE_TOLERANCE = 1e-4
"""A simulated likelihood ratio has settled when a step raises it by less; its own spread is of order one."""

MAX_STEPS = 200


def lagrange_multiplier(residuals: Array, n_periods: int) -> float:
    """Return the statistic of Breusch and Pagan for a diagonal error covariance.

    ``T sum_{i<j} r_ij²`` with ``r_ij`` from residual products that are not mean-corrected.

    Parameters
    ----------
    residuals : array of float, shape (n_rows, n_equations)
        Least-squares residuals, or factor rows of them.
    n_periods : int

    References
    ----------
    .. [1] Breusch and Pagan (1980), The Lagrange multiplier test and its applications to model specification
       in econometrics, Review of Economic Studies 47, 239-253.
    """
    return float(_multiplier((residuals.T @ residuals)[None], n_periods)[0])


def simulate_multiplier(bases: Bases, n_factor_rows: int, n_simulations: int, seed: int) -> Array:
    """Simulate the Lagrange multiplier statistic under unrelated errors, shape (n_simulations,)."""
    parts = []
    for noise in _noise(bases, n_factor_rows, n_simulations, seed):
        residuals = _remove_regressors(bases, noise)
        parts.append(_multiplier(residuals.transpose(0, 2, 1) @ residuals, bases.n_periods))
    return np.concatenate(parts)


def count_larger_ratios(
    bases: Bases, n_design_rows: int, observed: float, n_simulations: int, seed: int
) -> int:
    """Count simulated likelihood ratios under unrelated errors that reach the observed one.

    Each simulated system is iterated towards its maximum; the ratio only rises on the way, so a simulation is
    finished as soon as it reaches the observed value.

    Parameters
    ----------
    bases : Bases
    n_design_rows : int
        Factor rows in which the regressors live.
    observed : float
    n_simulations : int
    seed : int
    """
    larger = 0
    for noise in _noise(bases, n_design_rows, n_simulations, seed):
        residuals = _remove_regressors(bases, noise)
        cross = residuals.transpose(0, 2, 1) @ residuals
        onto = bases.rows.T @ residuals
        larger += _count_reaching(bases, cross, onto, observed)
    return larger


def monte_carlo_p_value(n_larger: int, n_simulations: int) -> float:
    """Return (1 + number reaching the observed value) / (1 + number of simulations)."""
    return (1 + n_larger) / (1 + n_simulations)


def affordable_simulations(bases: Bases, wanted: int) -> int:
    """Return how many likelihood ratios can be simulated in reasonable time; 0 if too few to be of use."""
    possible = min(wanted, int(LARGEST_WORK / len(bases.equation) ** 3))
    return possible if possible >= FEWEST else 0


def _multiplier(cross: Array, n_periods: int) -> Array:
    scales = np.sqrt(np.einsum("sii->si", cross))
    correlation = cross / (scales[:, :, None] * scales[:, None, :])
    squares = np.einsum("sij,sij->s", correlation, correlation)
    out: Array = n_periods * (squares - cross.shape[1]) / 2.0
    return out


def _noise(bases: Bases, n_design_rows: int, n_simulations: int, seed: int) -> Iterator[Array]:
    """Yield standard normal errors in the factor's coordinates, (chunk, n_rows, n_equations) at a time."""
    rng = np.random.default_rng(seed)
    n_rows, n_equations = bases.residuals.shape
    widest = max(n_rows * n_equations, len(bases.equation) ** 2)
    chunk = max(1, CHUNK_NUMBERS // widest)
    for start in range(0, n_simulations, chunk):
        size = min(chunk, n_simulations - start)
        noise = rng.standard_normal((size, n_rows, n_equations))
        if n_rows < bases.n_periods:
            noise[:, n_design_rows:] = _bartlett(rng, size, n_equations, bases.n_periods - n_design_rows)
        yield noise


def _bartlett(rng: np.random.Generator, size: int, n_equations: int, freedom: int) -> Array:
    """Draw triangular factors of ``freedom`` standard normal rows (Bartlett 1933)."""
    out = np.triu(rng.standard_normal((size, n_equations, n_equations)), 1)
    where = np.arange(n_equations)
    out[:, where, where] = np.sqrt(rng.chisquare(freedom - where, size=(size, n_equations)))
    return out


def _remove_regressors(bases: Bases, noise: Array) -> Array:
    residuals = noise.copy()
    for i, where in enumerate(bases.slices):
        basis = bases.rows[:, where]
        residuals[:, :, i] -= (noise[:, :, i] @ basis) @ basis.T
    return residuals


def _count_reaching(bases: Bases, cross: Array, onto: Array, observed: float) -> int:
    """Count the systems whose likelihood ratio reaches the observed one.

    Parameters
    ----------
    bases : Bases
    cross : array of float, shape (n, n_equations, n_equations)
        Cross-products of least-squares residuals.
    onto : array of float, shape (n, K, n_equations)
        Those residuals projected on every basis vector.
    observed : float
    """
    unrelated = np.log(np.einsum("sii->si", cross)).sum(axis=1)
    current = cross
    ratio = bases.n_periods * (unrelated - np.linalg.slogdet(cross)[1])
    larger = 0
    for _ in range(MAX_STEPS):
        reached = ratio >= observed
        larger += int(reached.sum())
        current = _step(bases, cross, onto, current)
        after = bases.n_periods * (unrelated - np.linalg.slogdet(current)[1])
        going = ~reached & (after - ratio > RISE_TOLERANCE)
        larger += int(np.sum(~reached & ~going & (after >= observed)))
        if not going.any():
            return larger
        cross, onto, current = cross[going], onto[going], current[going]
        unrelated, ratio = unrelated[going], after[going]
    return larger + int(np.sum(ratio >= observed))


def _step(bases: Bases, cross: Array, onto: Array, current: Array) -> Array:
    """Take one step of generalised least squares in every system; return the new residual cross-products."""
    where = bases.equation
    scales = np.sqrt(np.einsum("sii->si", current))
    omega = np.linalg.inv(current / (scales[:, :, None] * scales[:, None, :]))
    rows = omega[:, where]
    right = np.einsum("skj,skj->sk", rows, onto / scales[:, None, :])
    normal = rows[:, :, where] * bases.gram
    deviation = np.linalg.solve(normal, right[..., None])[..., 0] * scales[:, where]
    spread = deviation[..., None] * bases.membership
    mixed = spread.transpose(0, 2, 1) @ onto
    squared = spread.transpose(0, 2, 1) @ (bases.gram @ spread)
    out: Array = cross - mixed - mixed.transpose(0, 2, 1) + squared
    return out
