"""How this package compiles: one decorator for every kernel, and the small linear algebra they share.

Kernels are plain functions on float64 arrays, compiled together into one C callback (see ``compiled``). They
call no BLAS: the matrices are small, and a threaded BLAS under several sampling chains costs more than it gives.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, cast

import numpy as np
from numba import njit
from numpy.typing import NDArray

Array = NDArray[np.float64]


def kernel[F: Callable[..., Any]](function: F) -> F:
    """Mark a function as part of the compiled density (NumPy's division rules: inf and nan, no exception)."""
    return cast(F, njit(error_model="numpy")(function))


@kernel
def lower_inverse(lower: Array, inverse: Array) -> None:
    """Write the inverse of a lower-triangular matrix, shape (n, n), into ``inverse`` (zeros above)."""
    n = lower.shape[0]
    for i in range(n):
        inverse[i, i] = 1.0 / lower[i, i]
        for j in range(i + 1, n):
            inverse[i, j] = 0.0
        for j in range(i):
            total = 0.0
            for k in range(j, i):
                total += lower[i, k] * inverse[k, j]
            inverse[i, j] = -total * inverse[i, i]


@kernel
def cholesky(matrix: Array, lower: Array) -> float:
    """Write the lower Cholesky factor into ``lower`` and return its log determinant; nan if not positive.

    Only the lower triangle of ``matrix``, shape (n, n), is read; what stands above the diagonal of ``lower``
    is left as it was.
    """
    log_determinant = 0.0
    for i in range(matrix.shape[0]):
        for j in range(i + 1):
            total = matrix[i, j]
            for k in range(j):
                total -= lower[i, k] * lower[j, k]
            if i > j:
                lower[i, j] = total / lower[j, j]
            elif total > 0.0:
                lower[i, i] = np.sqrt(total)
                log_determinant += np.log(lower[i, i])
            else:
                return np.nan
    return log_determinant
