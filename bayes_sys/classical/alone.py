"""One equation fitted alone by least squares, and the statistics of its residuals.

Of tests that have a chi-square and an F form the F form is used: it holds its size better in short series
(Kiviet 1986, Review of Economic Studies 53, 241-261).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import scipy.special
from numpy.typing import NDArray

from bayes_sys.classical.bases import basis_of, solve_upper

Array = NDArray[np.float64]

FULL_LEVERAGE = 1.0 - 1e-10
"""A period with this leverage has a coefficient of its own and is fitted exactly, whatever happened."""


@dataclass(frozen=True)
class Alone:
    """Least squares of one equation, with more periods than coefficients.

    Parameters
    ----------
    design : array of float, shape (n_periods, p)
    basis : array of float, shape (n_periods, p)
        Orthonormal basis of the design.
    triangle : array of float, shape (p, p)
    residuals : array of float, shape (n_periods,)
        In the units of the response.
    has_intercept : bool
    """

    design: Array
    basis: Array
    triangle: Array
    residuals: Array
    has_intercept: bool

    @property
    def free(self) -> int:
        """Degrees of freedom, T - p."""
        return int(self.design.shape[0] - self.design.shape[1])

    @cached_property
    def variance(self) -> float:
        """Residual variance with divisor T - p."""
        return float(self.residuals @ self.residuals) / self.free

    @cached_property
    def leverage(self) -> Array:
        """Diagonal of the hat matrix, shape (n_periods,)."""
        out: Array = np.sum(self.basis**2, axis=1)
        return out


def fit_alone(design: Array, response: Array, *, has_intercept: bool) -> Alone | None:
    """Fit one equation; None where its periods are too few to determine the coefficients and leave some."""
    pair = basis_of(design) if design.shape[1] < design.shape[0] else None
    if pair is None:
        return None
    q, r = pair
    residuals = response - q @ (q.T @ response)
    residuals = residuals - q @ (q.T @ residuals)
    return Alone(design, q, r, residuals, has_intercept)


def condition_number(design: Array) -> float:
    """Return the condition number of the design, columns scaled to unit length and not centred.

    References
    ----------
    .. [1] Belsley, Kuh and Welsch (1980), Regression Diagnostics, chapter 3.
    """
    singular = np.linalg.svd(design / np.sqrt(np.sum(design**2, axis=0)), compute_uv=False)
    return float(singular[0] / singular[-1]) if singular[-1] > 0.0 else np.inf


def variance_inflation(alone: Alone) -> Array:
    """Return the variance inflation factor of every regressor but the intercept, shape (p or p - 1,).

    ``1 / (1 - R²)`` of the regressor on the others (Marquardt 1970, Technometrics 12, 591-612); centred where
    the equation has an intercept.
    """
    slopes = alone.design[:, 1:] if alone.has_intercept else alone.design
    centred = slopes - slopes.mean(axis=0) if alone.has_intercept else slopes
    inverse = solve_upper(alone.triangle, np.eye(alone.triangle.shape[0]))
    diagonal = np.sum(inverse**2, axis=1)[-slopes.shape[1] :] if slopes.shape[1] else np.empty(0)
    out: Array = np.sum(centred**2, axis=0) * diagonal
    return out


def durbin_watson(residuals: Array, ordinals: NDArray[np.int64]) -> float:
    """Return the Durbin-Watson statistic; a difference is taken only between neighbouring periods."""
    neighbours = np.diff(ordinals) == 1
    return float(np.sum(np.diff(residuals)[neighbours] ** 2) / np.sum(residuals**2))


def durbin_watson_bounds(alone: Alone, ordinals: NDArray[np.int64], tail: float) -> tuple[float, float]:
    """Return the lower and upper ``tail`` points of the statistic for these very regressors.

    From its exact mean and variance under unrelated errors and a beta distribution on (0, 4).

    References
    ----------
    .. [1] Durbin and Watson (1951), Testing for serial correlation in least squares regression II, Biometrika
       38, 159-177, section 4.
    """
    neighbours = (np.diff(ordinals) == 1).astype(float)
    degree = np.concatenate([[0.0], neighbours]) + np.concatenate([neighbours, [0.0]])
    applied = degree[:, None] * alone.basis
    applied[1:] -= neighbours[:, None] * alone.basis[:-1]
    applied[:-1] -= neighbours[:, None] * alone.basis[1:]
    inner = alone.basis.T @ applied
    first = degree.sum() - np.trace(inner)
    second = np.sum(degree**2) + 2.0 * neighbours.sum() - 2.0 * np.sum(applied**2) + np.sum(inner**2)
    mean = first / alone.free
    variance = 2.0 * (second - first * mean) / (alone.free * (alone.free + 2))
    total = mean * (4.0 - mean) / variance - 1.0
    a, b = mean / 4.0 * total, (1.0 - mean / 4.0) * total
    lower, upper = scipy.special.betaincinv(a, b, [tail, 1.0 - tail])
    return 4.0 * float(lower), 4.0 * float(upper)


def breusch_godfrey(alone: Alone, ordinals: NDArray[np.int64], order: int) -> tuple[float, float]:
    """Return F and p-value of the Breusch-Godfrey test for residual autocorrelation up to ``order``.

    Residuals before the first period, and in periods left out, count as zero.

    References
    ----------
    .. [1] Breusch (1978), Australian Economic Papers 17, 334-355; Godfrey (1978), Econometrica 46, 1293-1301.
    """
    lagged = np.zeros((len(ordinals), order))
    for k in range(1, order + 1):
        where = np.searchsorted(ordinals, ordinals - k)
        there = ordinals[where] == ordinals - k
        lagged[there, k - 1] = alone.residuals[where[there]]
    lagged -= alone.basis @ (alone.basis.T @ lagged)
    fitted = lagged @ np.linalg.lstsq(lagged, alone.residuals, rcond=None)[0]
    return _f_test(alone.residuals, alone.residuals - fitted, order, alone.free - order)


def heteroskedasticity(alone: Alone) -> tuple[float, float]:
    """Return F and p-value of the studentised Breusch-Pagan test of squared residuals on the regressors.

    References
    ----------
    .. [1] Koenker (1981), A note on studentizing a test for heteroscedasticity, Journal of Econometrics 17,
       107-112.
    """
    squares = alone.residuals**2 / alone.variance
    around_mean = squares - squares.mean()
    design = alone.design if alone.has_intercept else np.column_stack([np.ones(len(squares)), alone.design])
    q, _ = np.linalg.qr(design)
    left = around_mean - q @ (q.T @ around_mean)
    n, p = design.shape
    return _f_test(around_mean, left, p - 1, n - p)


def cooks_distances(alone: Alone) -> Array:
    """Return each period's Cook's distance (Cook 1977, Technometrics 19, 15-18); NaN at full leverage."""
    h = np.where(alone.leverage < FULL_LEVERAGE, alone.leverage, np.nan)
    out: Array = alone.residuals**2 * h / (alone.design.shape[1] * alone.variance * (1.0 - h) ** 2)
    return out


def studentised_residuals(alone: Alone) -> Array:
    """Return each period's residual over its standard error from all other periods; NaN at full leverage.

    Externally studentised; Student t with T - p - 1 degrees of freedom under Gaussian errors (Cook and
    Weisberg 1982, Residuals and Influence in Regression, section 2.2.1).
    """
    h = np.where(alone.leverage < FULL_LEVERAGE, alone.leverage, np.nan)
    own = alone.residuals**2 / (1.0 - h)
    others = (alone.variance * alone.free - own) / (alone.free - 1)
    smallest = np.finfo(float).eps * alone.variance
    out: Array = alone.residuals / np.sqrt(np.maximum(others, smallest) * (1.0 - h))
    return out


def _f_test(restricted: Array, free: Array, n_tested: int, freedom: int) -> tuple[float, float]:
    inside, outside = float(free @ free), float(restricted @ restricted)
    statistic = (outside - inside) / n_tested / (inside / freedom)
    return statistic, float(scipy.special.fdtrc(n_tested, freedom, max(statistic, 0.0)))
