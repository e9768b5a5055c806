"""The classical benchmark of a system: least squares, two-step and iterated generalised least squares.

References
----------
.. [1] Zellner and Huang (1962), Further properties of efficient estimators for seemingly unrelated regression
   equations, International Economic Review 3, 300-313.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.classical.bases import build_bases
from bayes_sys.classical.estimate import Benchmark, Estimate
from bayes_sys.classical.generalised import as_estimate, iterate, solve, two_step
from bayes_sys.classical.ordinary import least_squares
from bayes_sys.errors import DesignError, InputError, nearest
from bayes_sys.system.system import System

if TYPE_CHECKING:
    import pandas as pd

Array = NDArray[np.float64]

DIVISORS = ("T", "T-p", "unbiased")
"""T; the geometric mean of the two equations' T - p; the trace that makes each element unbiased [1]_."""

__all__ = [
    "DIVISORS",
    "Benchmark",
    "Estimate",
    "benchmark_table",
    "classical_estimates",
    "gls",
    "joint_rank",
]


def classical_estimates(system: System, *, divisor: str = "T") -> Benchmark:
    """Compute the classical benchmark of a system.

    Parameters
    ----------
    system : System
    divisor : {"T", "T-p", "unbiased"}
        What the residual cross-products are divided by before the two-step estimate: the number of periods;
        ``sqrt((T - p_i)(T - p_j))``; or ``T - p_i - p_j + tr(P_i P_j)``, which makes every element unbiased
        [1]_ but need not give a valid covariance.

    Returns
    -------
    Benchmark
        Estimates that do not exist are None, with the reason.

    Raises
    ------
    InputError
        If the divisor is unknown.
    """
    if divisor not in DIVISORS:
        raise InputError(
            f"There is no divisor “{divisor}”.", where="classical_estimates", mend=nearest(divisor, DIVISORS)
        )
    ols, reasons = least_squares(system)
    bases = None if reasons else build_bases(system.factor)
    if bases is None:
        empty = f"{reasons['ols']} A joint estimate needs every equation."
        return Benchmark(ols, None, None, {**reasons, "fgls": empty, "iterated": empty}, divisor)
    fgls, reason = two_step(bases, divisor)
    if fgls is None:
        reasons["fgls"] = reason
    iterated, reason = iterate(bases, joint_rank(system))
    if iterated is None:
        reasons["iterated"] = reason
    return Benchmark(ols, fgls, iterated, reasons, divisor)


def gls(system: System, error_covariance: Array) -> Estimate:
    """Estimate the coefficients by generalised least squares under a known error covariance.

    Parameters
    ----------
    system : System
    error_covariance : array of float, shape (n_equations, n_equations)
        Symmetric positive definite, in the units of the responses.

    Raises
    ------
    DesignError
        If the covariance does not fit the system or is not positive definite, or if an equation has more
        coefficients than its data can tell apart.
    """
    sigma = np.asarray(error_covariance, dtype=float)
    n = system.n_equations
    if sigma.shape != (n, n) or not np.allclose(sigma, sigma.T, rtol=1e-10, atol=0.0):
        raise DesignError(
            f"The error covariance must be symmetric with {n} rows and columns; its shape is {sigma.shape}."
        )
    bases = build_bases(system.factor)
    if bases is None:
        raise DesignError("At least one equation has more coefficients than its data can tell apart.")
    solution = solve(bases, sigma)
    if solution is None:
        raise DesignError("The error covariance is not positive definite.")
    return as_estimate(bases, solution, sigma, iterations=1)


def benchmark_table(benchmark: Benchmark, system: System) -> pd.DataFrame:
    """Lay the benchmark out as a table, one row per coefficient; NaN where an estimate does not exist."""
    import pandas as pd

    columns: dict[str, object] = {
        "equation": [equation for equation, _ in system.coefficients],
        "regressor": [regressor for _, regressor in system.coefficients],
    }
    for name in ("ols", "fgls", "iterated"):
        estimate: Estimate | None = getattr(benchmark, name)
        empty = np.full(system.n_coefficients, np.nan)
        columns[name] = empty if estimate is None else estimate.coefficients
        columns[f"{name}_se"] = empty if estimate is None else estimate.standard_errors
    return pd.DataFrame(columns)


def joint_rank(system: System) -> int:
    """Return the rank of all regressors together."""
    columns = system.factor.triangle[:, : system.factor.n_distinct]
    sizes = np.sqrt(np.sum(columns**2, axis=0))
    scaled = columns / np.where(sizes > 0.0, sizes, 1.0)
    return int(np.linalg.matrix_rank(scaled, tol=1e-12 * max(columns.shape)))
