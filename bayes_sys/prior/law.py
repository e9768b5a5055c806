"""What a prior card says of one very system: every number on the raw scale, every coefficient spoken for."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class PooledGroup:
    """Like-named coefficients that share a mean and a spread.

    ``mean ~ N(mean, mean_scale^2)``, ``spread ~ half-normal(spread_scale)``, and each member, in its own
    unit, ``~ N(mean, spread^2)``.
    """

    name: str
    mean: float
    mean_scale: float
    spread_scale: float


@dataclass(frozen=True)
class CoefficientLaw:
    """The law of the coefficients.

    The card speaks of *stated* coefficients ``b``; the coefficients of the data are ``to_raw @ b``. The two
    differ where an intercept is stated at a point other than the origin of the regressors, and where pooled
    members are stated in units of their own.

    Parameters
    ----------
    to_raw : array of float, shape (K, K)
        From stated to raw coefficients; block-diagonal by equation, invertible.
    mean, scale : arrays of float, shape (K,)
        Of ``b ~ N(mean, scale^2)``, independent; NaN where a coefficient is pooled.
    group : array of int, shape (K,)
        Index into ``groups``, -1 where a coefficient is not pooled.
    groups : tuple of PooledGroup
    """

    to_raw: Array
    mean: Array
    scale: Array
    group: NDArray[np.int64]
    groups: tuple[PooledGroup, ...] = ()

    @property
    def stated_mean(self) -> Array:
        """Marginal prior mean of the stated coefficients, shape (K,)."""
        means = np.array([g.mean for g in self.groups] + [np.nan])
        return np.where(self.group >= 0, means[self.group], self.mean)

    @property
    def pooled(self) -> NDArray[np.bool_]:
        """Which coefficients are pooled, shape (K,)."""
        return self.group >= 0


SCALE_FAMILIES = ("half_normal", "half_student_t", "exponential", "lognormal")


@dataclass(frozen=True)
class ScaleLaw:
    """The law of the error standard deviations, one family and two numbers per equation.

    Parameters
    ----------
    family : tuple of str, length n_equations
        ``half_normal`` (scale), ``half_student_t`` (scale, df), ``exponential`` (mean),
        ``lognormal`` (median, spread of the logarithm).
    size : array of float, shape (n_equations,)
        The first number: scale, scale, mean, median; in the units of the response.
    shape : array of float, shape (n_equations,)
        The second: df, spread; 0 where the family has none.
    """

    family: tuple[str, ...]
    size: Array
    shape: Array


@dataclass(frozen=True)
class CorrelationLaw:
    """LKJ: density proportional to det(R)^(concentration - 1) (Lewandowski, Kurowicka & Joe 2009)."""

    concentration: float


@dataclass(frozen=True)
class Prior:
    """The three laws together."""

    coefficients: CoefficientLaw
    scales: ScaleLaw
    correlation: CorrelationLaw
