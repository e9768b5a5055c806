"""What the draws of a quantity come down to: moments, quantiles and ArviZ's convergence figures."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, cast

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import xarray as xr

Array = NDArray[np.float64]

TAIL = 0.05
QUANTILES = (TAIL, 0.5, 1 - TAIL)


@dataclass(frozen=True)
class Summary:
    """Summaries of several quantities, each an array of one number per quantity.

    Convergence figures are NaN for a quantity that never moves (a fixed coefficient): there is nothing to
    converge, and NaN says neither good nor bad.
    """

    mean: Array
    sd: Array
    q5: Array
    q50: Array
    q95: Array
    prob_positive: Array
    rhat: Array
    ess_bulk: Array
    ess_tail: Array


def draws_of(posterior: xr.DataTree, name: str, group: str = "posterior") -> Array:
    """Return the draws of one variable, shape (n_chains, n_draws, ...)."""
    variable = posterior[f"{group}/{name}"]
    return cast("Array", np.asarray(variable.transpose("chain", "draw", ...).values, dtype=float))


def flat_draws(posterior: xr.DataTree, name: str, group: str = "posterior") -> Array:
    """Return the draws of one variable with the chains laid end to end, shape (n_chains * n_draws, ...)."""
    draws = draws_of(posterior, name, group)
    return draws.reshape(-1, *draws.shape[2:])


def thinned(n_draws: int, at_most: int) -> NDArray[np.int64]:
    """Return evenly spaced positions of at most ``at_most`` draws, the first and the last among them."""
    count = min(n_draws, max(at_most, 1))
    return np.unique(np.linspace(0, n_draws - 1, count).round().astype(np.int64))


def summarise(draws: Array) -> Summary:
    """Summarise draws of several quantities.

    Parameters
    ----------
    draws : array of float, shape (n_chains, n_draws, n_quantities)

    Returns
    -------
    Summary
        Quantiles interpolate linearly between order statistics, as ArviZ's equal-tailed intervals do.
    """
    flat = draws.reshape(-1, draws.shape[-1])
    low, middle, high = np.quantile(flat, QUANTILES, axis=0)
    rhat, bulk, tail = convergence(draws)
    return Summary(
        mean=flat.mean(axis=0),
        sd=flat.std(axis=0, ddof=1),
        q5=low,
        q50=middle,
        q95=high,
        prob_positive=(flat > 0).mean(axis=0),
        rhat=rhat,
        ess_bulk=bulk,
        ess_tail=tail,
    )


def convergence(draws: Array) -> tuple[Array, Array, Array]:
    """Return rank-normalised R-hat, bulk and tail effective sample size of several quantities.

    The tail figure is the smaller of the effective sizes of the 5% and the 95% quantile, which are the ones
    reported (Vehtari, Gelman, Simpson, Carpenter & Buerkner 2021, Bayesian Analysis 16, section 4.3).

    Parameters
    ----------
    draws : array of float, shape (n_chains, n_draws, n_quantities)

    Returns
    -------
    tuple of three arrays of float, each of shape (n_quantities,)
        NaN for a quantity that never moves, and where there are fewer than four draws a chain.
    """
    from arviz_stats.base import array_stats

    moves = np.ptp(draws, axis=(0, 1)) > 0
    figures = np.full((3, draws.shape[-1]), np.nan)
    if moves.any() and draws.shape[1] >= 4:
        moving = draws[..., moves]
        axes = {"chain_axis": 0, "draw_axis": 1}
        figures[0, moves] = array_stats.rhat(moving, method="rank", **axes)
        figures[1, moves] = array_stats.ess(moving, method="bulk", **axes)
        figures[2, moves] = array_stats.ess(moving, method="tail", prob=(TAIL, 1 - TAIL), **axes)
    return figures[0], figures[1], figures[2]
