"""Block: the law of the error standard deviations ``D_i``.

Half-normal, half-Student-t, exponential and log-normal; one family and two numbers per equation.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

from bayes_sys.model.kernels import kernel
from bayes_sys.prior.law import SCALE_FAMILIES, ScaleLaw

if TYPE_CHECKING:
    import pymc as pm

Array = NDArray[np.float64]

HALF_NORMAL, HALF_STUDENT_T, EXPONENTIAL, LOGNORMAL = range(4)
VARIABLE = "scales"


def pack(law: ScaleLaw) -> Array:
    """Lay the law out for the kernel: family code, size and shape per equation, shape (n_equations, 3)."""
    codes = [float(SCALE_FAMILIES.index(family)) for family in law.family]
    return np.column_stack([codes, law.size, law.shape])


@kernel
def log_density(code: float, size: float, shape: float, scale: float) -> tuple[float, float]:
    """Return the log density of one standard deviation, up to a constant, and its derivative in log(scale)."""
    x = scale / size
    if code == HALF_NORMAL:
        return -0.5 * x * x, -x * x
    if code == HALF_STUDENT_T:
        return -0.5 * (shape + 1.0) * np.log1p(x * x / shape), -(shape + 1.0) * x * x / (shape + x * x)
    if code == EXPONENTIAL:
        return -x, -x
    z = np.log(x) / shape
    return -np.log(scale) - 0.5 * z * z, -1.0 - z / shape


def log_constants(law: ScaleLaw) -> Array:
    """Return what ``log_density`` leaves out, shape (n_equations,)."""
    size, shape = law.size, np.where(law.shape > 0, law.shape, 1.0)
    student = (
        gammaln(0.5 * (shape + 1)) - gammaln(0.5 * shape) - 0.5 * np.log(np.pi * shape) + np.log(2 / size)
    )
    constants = {
        "half_normal": 0.5 * np.log(2 / np.pi) - np.log(size),
        "half_student_t": student,
        "exponential": -np.log(size),
        "lognormal": -0.5 * np.log(2 * np.pi) - np.log(shape),
    }
    return np.array([constants[family][i] for i, family in enumerate(law.family)])


def log_prior(law: ScaleLaw, scales: Array) -> Array:
    """Return the normalised log density of draws of the scales.

    Parameters
    ----------
    scales : array of float, shape (..., n_equations)

    Returns
    -------
    array of float, shape (...)
    """
    packed = pack(law)
    total = np.full(scales.shape[:-1], log_constants(law).sum())
    for i, (code, size, shape) in enumerate(packed):
        x = scales[..., i] / size
        if code == HALF_NORMAL:
            total += -0.5 * x**2
        elif code == HALF_STUDENT_T:
            total += -0.5 * (shape + 1) * np.log1p(x**2 / shape)
        elif code == EXPONENTIAL:
            total += -x
        else:
            total += -np.log(scales[..., i]) - 0.5 * (np.log(x) / shape) ** 2
    return total


def declare(law: ScaleLaw) -> Any:
    """Declare ``scales[equation]`` in the PyMC model at hand."""
    import pymc as pm
    import pytensor.tensor as pt

    families = set(law.family)
    if len(families) == 1:
        return _family(families.pop(), law.size, law.shape)(VARIABLE, dims="equation")
    parts: list[Any] = []
    order: list[int] = []
    for family in sorted(families):
        members = np.flatnonzero([f == family for f in law.family])
        make = _family(family, law.size[members], law.shape[members])
        parts.append(make(f"{VARIABLE}_{family}", shape=len(members)))
        order.extend(members)
    return pm.Deterministic(VARIABLE, pt.concatenate(parts)[np.argsort(order)], dims="equation")


def _family(family: str, size: Array, shape: Array) -> Any:
    import pymc as pm

    def make(name: str, **place: Any) -> pm.Distribution:
        if family == "half_normal":
            return pm.HalfNormal(name, sigma=size, **place)
        if family == "half_student_t":
            return pm.HalfStudentT(name, nu=shape, sigma=size, **place)
        if family == "exponential":
            return pm.Exponential(name, scale=size, **place)
        return pm.LogNormal(name, mu=np.log(size), sigma=shape, **place)

    return make
