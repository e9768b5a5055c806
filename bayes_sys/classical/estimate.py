"""What a classical estimate is, and the benchmark they make together."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Estimate:
    """One classical estimate of the whole system.

    Parameters
    ----------
    coefficients : array of float, shape (K,)
        In the units of the data.
    standard_errors : array of float, shape (K,)
    covariance : array of float, shape (K, K)
        Of the coefficients.
    error_covariance : array of float, shape (n_equations, n_equations)
        The error covariance that the coefficients and their standard errors rest on.
    log_likelihood : float or None
        Gaussian log likelihood at these coefficients and this error covariance; None where there is none.
    iterations : int
        Steps of generalised least squares taken; 0 for least squares, 1 for the two-step estimate.
    """

    coefficients: Array
    standard_errors: Array
    covariance: Array
    error_covariance: Array
    log_likelihood: float | None
    iterations: int


@dataclass(frozen=True)
class Benchmark:
    """The classical estimates that stand beside every posterior.

    Parameters
    ----------
    ols : Estimate
        Least squares, equation by equation; standard errors with the usual divisor T - p_i, error covariance
        with the geometric mean of the two equations' T - p. NaN for an equation with as many coefficients as
        periods. Its log likelihood is that of unrelated errors, at its maximum.
    fgls : Estimate or None
        Two-step feasible generalised least squares with the residual cross-products over ``divisor``.
    iterated : Estimate or None
        Iterated to the maximum of the Gaussian likelihood; its divisor is always T.
    reasons : mapping of str to str
        Why "ols" (in part), "fgls" or "iterated" is empty, in plain words.
    divisor : str
        "T", "T-p" (geometric mean) or "unbiased" (trace).
    """

    ols: Estimate
    fgls: Estimate | None
    iterated: Estimate | None
    reasons: Mapping[str, str] = field(default_factory=dict)
    divisor: str = "T"
