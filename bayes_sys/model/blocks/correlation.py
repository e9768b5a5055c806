"""Block: the law of the cross-equation error correlation ``R``: LKJ.

Density proportional to det(R)^(concentration - 1) (Lewandowski, Kurowicka & Joe 2009, J. Multivariate Anal.
100, 1989-2001).
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import betaln

from bayes_sys.model.kernels import kernel
from bayes_sys.prior.law import CorrelationLaw

Array = NDArray[np.float64]

MATRIX, PAIRS, FACTOR = "correlation", "correlations", "correlation_factor"


@kernel
def log_density(concentration: float, log_determinant: float) -> tuple[float, float]:
    """Return the log density of a correlation matrix, up to a constant, and its derivative in log det R."""
    return (concentration - 1.0) * log_determinant, concentration - 1.0


def log_constant(law: CorrelationLaw, n_equations: int) -> float:
    """Return minus the log integral of det(R)^(concentration - 1) over correlation matrices.

    From the independent beta laws of the partial correlations of a C-vine (Lewandowski, Kurowicka & Joe 2009,
    section 2.4): the k-th level has n - k of them, each Beta(b, b) on (-1, 1) with
    b = concentration + (n - 1 - k) / 2.
    """
    total = 0.0
    for level in range(1, n_equations):
        b = law.concentration + 0.5 * (n_equations - 1 - level)
        total += (n_equations - level) * ((2 * b - 1) * np.log(2.0) + betaln(b, b))
    return -float(total)


def log_prior(law: CorrelationLaw, log_determinant: Array, n_equations: int) -> Array:
    """Return the normalised log density at draws with the given log det R."""
    return (law.concentration - 1) * log_determinant + log_constant(law, n_equations)


def declare(law: CorrelationLaw, n_equations: int, pairs: tuple[tuple[int, int], ...]) -> Any:
    """Declare ``correlation[equation, equation_b]`` and its distinct ``correlations[pair]``; return the factor.

    The factor is the lower Cholesky factor of the correlation matrix.
    """
    import pymc as pm
    import pytensor.tensor as pt

    if n_equations == 1:  # PyMC's LKJ laws refuse one dimension
        one = pt.ones((1, 1))
        pm.Deterministic(MATRIX, one, dims=("equation", "equation_b"))
        return one
    factor = pm.LKJCorr(
        FACTOR, n=n_equations, eta=law.concentration, default_transform=_transform(n_equations)
    )
    matrix = pm.Deterministic(MATRIX, factor @ factor.T, dims=("equation", "equation_b"))
    first, second = np.array(pairs).T
    pm.Deterministic(PAIRS, matrix[first, second], dims="pair")
    return factor


def _transform(n_equations: int) -> Any:
    from pymc.distributions.transforms import CholeskyCorrTransform

    class CholeskyCorr(CholeskyCorrTransform):  # type: ignore[misc]
        # PyMC 6.4 cuts transformed names at underscores, so its own "cholesky_corr" breaks log_prior
        name = "choleskycorr"

    return CholeskyCorr(n=n_equations, upper=False)
