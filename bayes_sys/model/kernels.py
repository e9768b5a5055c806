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


# sums may be reordered, so that loops use vector instructions; nan and inf keep their meaning
FAST_MATH = {"reassoc", "contract", "arcp", "nsz"}


def kernel[F: Callable[..., Any]](function: F) -> F:
    """Mark a function as part of the compiled density (NumPy's division rules: inf and nan, no exception)."""
    return cast(F, njit(error_model="numpy", fastmath=FAST_MATH)(function))


@kernel
def lower_inverse(lower: Array, inverse: Array) -> None:
    """Write the inverse of a lower-triangular matrix, shape (n, n), into ``inverse`` (zeros above)."""
    n = lower.shape[0]
    for i in range(n):
        for j in range(n):
            inverse[i, j] = 0.0
        for k in range(i):  # whole rows at a time: they lie together in memory
            factor = lower[i, k]
            for j in range(k + 1):
                inverse[i, j] -= factor * inverse[k, j]
        diagonal = 1.0 / lower[i, i]
        for j in range(i):
            inverse[i, j] *= diagonal
        inverse[i, i] = diagonal


@kernel
def own_square(root: Array, out: Array) -> None:
    """Write ``root' root`` of a lower-triangular matrix, shape (n, n)."""
    n = root.shape[0]
    for i in range(n):
        for j in range(n):
            out[i, j] = 0.0
    for m in range(n):
        for i in range(m + 1):
            factor = root[m, i]
            for j in range(i + 1):
                out[i, j] += factor * root[m, j]
    for i in range(n):
        for j in range(i):
            out[j, i] = out[i, j]


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
