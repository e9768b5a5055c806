"""Positive hyperparameters through normal scores: ``v ~ N(0, 1)`` makes ``x`` follow its law exactly.

In these coordinates the tails of a spread are no longer than a normal's and its approach to zero costs the
sampler nothing, which a logarithm does not achieve.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from scipy.special import log_ndtr, ndtri_exp

from bayes_sys.model.kernels import kernel

Array = NDArray[np.float64]

ROOT_HALF, ROOT_TWO_PI = math.sqrt(0.5), math.sqrt(2.0 * math.pi)


@kernel
def lower_tail(x: float) -> float:
    """Return the standard normal probability below ``x``."""
    return 0.5 * math.erfc(-x * ROOT_HALF)


@kernel
def normal_score(p: float) -> float:
    """Return the standard normal quantile of ``p``, 0 < p <= 1/2, to about 1e-15 relative.

    Start: Abramowitz & Stegun (1964), 26.2.22; then two steps of Halley's method.
    """
    q = math.sqrt(-2.0 * math.log(p))
    x = -(q - (2.30753 + 0.27061 * q) / (1.0 + 0.99229 * q + 0.04481 * q * q))
    for _ in range(2):
        step = (lower_tail(x) - p) * ROOT_TWO_PI * math.exp(0.5 * x * x)
        x -= step / (1.0 + 0.5 * x * step)
    return x


@kernel
def half_normal(v: float) -> tuple[float, float]:
    """Return the half-normal(1) value with the same probability below it as ``v``, and d log(value) / dv."""
    if v > 0.0:
        x = -normal_score(0.5 * lower_tail(-v))
    else:
        p = lower_tail(v)
        x = p * math.sqrt(0.5 * math.pi)
        for _ in range(6):  # Newton on erf(x / sqrt 2) = p; near the origin the start is already exact
            x -= (math.erf(x * ROOT_HALF) - p) * 0.5 * ROOT_TWO_PI * math.exp(0.5 * x * x)
    return x, math.exp(0.5 * (x * x - v * v)) / (2.0 * x)


def half_normal_values(scores: Array) -> Array:
    """Return ``half_normal`` of an array of normal scores, shape kept."""
    return np.asarray(-ndtri_exp(log_ndtr(-scores) - math.log(2.0)))
