"""Ordinary least squares, equation by equation, through the triangular factor."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from bayes_sys.classical.bases import basis_of, solve_upper
from bayes_sys.classical.estimate import Estimate
from bayes_sys.system.system import System

Array = NDArray[np.float64]


def least_squares(system: System) -> tuple[Estimate, dict[str, str]]:
    """Estimate each equation alone; NaN, with a reason under "ols", where the data cannot.

    Standard errors have the usual divisor T - p_i; the error covariance, and through it the covariance
    between coefficients of two equations, the geometric mean of the two equations' T - p.
    """
    factor, n_equations = system.factor, system.n_equations
    coefficients = np.full(system.n_coefficients, np.nan)
    rows = np.full((factor.triangle.shape[0], n_equations), np.nan)
    halves: list[Array] = []
    undetermined = []
    for i, equation in enumerate(system.equations):
        pair = basis_of(factor.regressors(i))
        if pair is None or len(equation.regressors) >= factor.n_periods:
            undetermined.append(i)
            halves.append(np.full((rows.shape[0], len(equation.regressors)), np.nan))
            continue
        q, r = pair
        response = factor.responses()[:, i]
        projection = q.T @ response
        residual = response - q @ projection
        left = q.T @ residual
        coefficients[system.slice_of(i)] = solve_upper(r, projection + left)
        rows[:, i] = residual - q @ left
        halves.append(solve_upper(r, q.T).T)
    free = factor.n_periods - np.array([len(e.regressors) for e in system.equations], dtype=float)
    free[undetermined] = np.nan
    sigma = rows.T @ rows / np.sqrt(np.outer(free, free))
    stacked = np.hstack(halves)
    where = system.coefficient_equation
    covariance = sigma[np.ix_(where, where)] * (stacked.T @ stacked)
    maximum = unrelated_log_likelihood(rows, factor.n_periods)
    estimate = Estimate(coefficients, np.sqrt(np.diag(covariance)), covariance, sigma, maximum, 0)
    return estimate, _undetermined_reason(system, undetermined)


def unrelated_log_likelihood(rows: Array, n_periods: int) -> float | None:
    """Return the largest Gaussian log likelihood under a diagonal error covariance."""
    variances = np.sum(rows**2, axis=0) / n_periods
    if not np.all(variances > 0.0):
        return None
    size = rows.shape[1] * (math.log(2.0 * math.pi) + 1.0) + float(np.log(variances).sum())
    return float(-0.5 * n_periods * size)


def _undetermined_reason(system: System, undetermined: list[int]) -> dict[str, str]:
    if not undetermined:
        return {}
    named = ", ".join(f"“{system.names[i]}”" for i in undetermined)
    several = len(undetermined) > 1
    few = all(len(system.equations[i].regressors) >= system.n_periods for i in undetermined)
    have = "have" if several else "has"
    because = (
        f"{have} no more periods ({system.n_periods}) than coefficients"
        if few
        else f"{have} regressors that the data cannot tell apart"
    )
    who = "Equations" if several else "Equation"
    return {"ols": f"{who} {named} {because}, so least squares has no answer there."}
