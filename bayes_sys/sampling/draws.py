"""What every engine returns: draws of the covariance and the spreads, and of the coefficients."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.model.conditional import Conditional

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Draws:
    """Draws with the chains laid end to end.

    Parameters
    ----------
    n_chains : int
    coefficients, stated : arrays of float, shape (n_draws, K)
        On the raw scale, and in the units the card speaks in.
    roots : array of float, shape (n_draws, n_equations, n_equations)
        Lower Cholesky factors of the error covariance.
    pooled_mean, pooled_spread : arrays of float, shape (n_draws, n_groups)
    conditional : Conditional
        The coefficients given covariance and spreads.
    statistics : dict of arrays, each of shape (n_chains, n_draws per chain)
    """

    n_chains: int
    coefficients: Array
    stated: Array
    roots: Array
    pooled_mean: Array
    pooled_spread: Array
    conditional: Conditional
    statistics: dict[str, NDArray[Any]]

    @property
    def scales(self) -> Array:
        """Error standard deviations, shape (n_draws, n_equations)."""
        return np.asarray(np.sqrt(np.square(self.roots).sum(axis=2)))

    @property
    def correlation_roots(self) -> Array:
        """Lower Cholesky factors of the correlation, shape (n_draws, n_equations, n_equations)."""
        return np.asarray(self.roots / self.scales[:, :, None])
