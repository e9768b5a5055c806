"""Systems built straight from arrays, for tests that need neither a file nor a study."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from bayes_sys.study.periods import Periods
from bayes_sys.system.moments import factorise
from bayes_sys.system.system import INTERCEPT, Equation, System

Array = NDArray[np.float64]


def make_system(
    designs: Sequence[Array],
    responses: Array,
    names: Sequence[str] | None = None,
    regressor_names: Sequence[Sequence[str]] | None = None,
    *,
    periods: Periods | None = None,
) -> System:
    """Build a system from its arrays; periods are the whole numbers 1, 2, ..., T unless given.

    ``designs[i]`` has shape (T, p_i) and holds the intercept's ones where there is one; ``responses`` has
    shape (T, N). Unnamed equations are a, b, c, ...; an unnamed first column of ones is "intercept", others
    are x1, x2, ...
    """
    designs = [np.asarray(design, dtype=float) for design in designs]
    responses = np.asarray(responses, dtype=float)
    n_periods, n_equations = responses.shape
    names = tuple(names) if names is not None else default_names(n_equations)
    labels = regressor_names if regressor_names is not None else [default_regressors(d) for d in designs]
    equations = tuple(
        Equation(
            name=name,
            response="response",
            regressors=tuple(regressors),
            columns=tuple("" if r == INTERCEPT else r for r in regressors),
            design=design,
        )
        for name, regressors, design in zip(names, labels, designs, strict=True)
    )
    return System(
        title="A system made from arrays",
        equations=equations,
        periods=periods if periods is not None else integer_periods(n_periods),
        responses=responses,
        factor=factorise(designs, responses),
    )


def integer_periods(n_periods: int) -> Periods:
    """Return the periods 1, 2, ..., n_periods."""
    ordinals = np.arange(1, n_periods + 1)
    return Periods("integer", ordinals, tuple(str(o) for o in ordinals))


def default_names(n_equations: int) -> tuple[str, ...]:
    """Return a, b, c, ... (and e27, e28, ... after z)."""
    return tuple(chr(ord("a") + i) if i < 26 else f"e{i + 1}" for i in range(n_equations))


def default_regressors(design: Array) -> tuple[str, ...]:
    """Return intercept (for a first column of ones) and x1, x2, ..."""
    first = bool(design.shape[1]) and bool(np.all(design[:, 0] == 1.0))
    slopes = tuple(f"x{k + 1}" for k in range(design.shape[1] - first))
    return (INTERCEPT, *slopes) if first else slopes
