"""Checks of the design: what no prior and no sampler can mend, and no table should be made of.

All of them work on the triangular factor, whose columns stand to each other exactly as the data's do, so they
cost the same for eighteen periods and for eighteen million. Only what is *exact* is refused, up to rounding:
regressors that nearly move together are left to the prior, and to the examination to speak of.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from bayes_sys.errors import DesignError
from bayes_sys.system.system import INTERCEPT, Equation, System

Array = NDArray[np.float64]

ROUNDING = 1e3 * float(np.finfo(np.float64).eps)
"""What counts as rounding, relative to the sizes that went in: a column written by another program, or summed
over many periods, is off by some hundreds of units in the last place at most; 2e-13 is far below any real
difference."""

LARGEST_ROUNDING = 1e-6
"""What rounding may amount to at most, in units of spread, however high a column's level."""

NEGLIGIBLE = 1e-5
"""Share in a combination, in units of spread, below which a column plays no part in it."""


@dataclass(frozen=True)
class Centred:
    """The factor's columns of one equation after the intercept, if there is one, is taken out.

    Parameters
    ----------
    names : tuple of str, length n_slopes
        Regressors other than the intercept.
    slopes : array of float, shape (n_rows, n_slopes)
        Each of unit length.
    lengths, sizes : arrays of float, shape (n_slopes,)
        Length of each column after and before the centring.
    response : array of float, shape (n_rows,)
    response_size : float
        Length of the response before the centring.
    levels : array of float, shape (n_slopes,)
        What the centring took out of each column (0 without an intercept).
    """

    names: tuple[str, ...]
    slopes: Array
    lengths: Array
    sizes: Array
    response: Array
    response_size: float
    levels: Array


def check_design(system: System, *, source: str) -> None:
    """Refuse a system that no amount of data would identify.

    Parameters
    ----------
    system : System
        Without missing or infinite values.
    source : str
        Name of the data, for messages.

    Raises
    ------
    DesignError
        A single period; a response that never changes, is its own regressor, or is reproduced exactly; a
        regressor that never changes beside an intercept, is held twice, or is an exact combination of
        others while there are periods enough to tell; responses tied by an identity. Fewer periods than
        coefficients are no error: a proper prior bridges them.
    """
    if system.n_periods < 2:
        raise DesignError(
            f"only one period is in the sample ({system.periods.labels[0]}).",
            where=source,
            mend="Widen the sample (from, to, exclude in [data]): at least two periods are needed.",
        )
    for i, equation in enumerate(system.equations):
        place = f"{source}, equation “{equation.name}”"
        check_changes(equation, system.responses[:, i], place)
        check_twice(equation, system.responses[:, i], place)
        centred = centre(system, i)
        check_collinear(system, equation, centred, place)
        check_fit(system, equation, centred, place)
    check_identity(system, source)


def check_changes(equation: Equation, response: Array, place: str) -> None:
    """Refuse a constant response, a column of zeros, and a constant column beside an intercept."""
    if is_constant(response):
        raise DesignError(
            f"the response “{equation.response}” is {response[0]:g} in every period of the sample.",
            where=place,
            mend="Leave this equation out, or widen the sample.",
        )
    for name, column, values in slopes_of(equation):
        if not is_constant(values):
            continue
        if equation.has_intercept:
            raise DesignError(
                f"the regressor {describe(name, column)} is {values[0]:g} in every period of the sample, "
                "so it cannot be told from the intercept.",
                where=place,
                mend=f"Leave “{name}” out of this equation, or set intercept = false.",
            )
        if not values.any():
            raise DesignError(
                f"the regressor {describe(name, column)} is 0 in every period of the sample.",
                where=place,
                mend=f"Leave “{name}” out of this equation, or widen the sample.",
            )


def check_twice(equation: Equation, response: Array, place: str) -> None:
    """Refuse the response as its own regressor, and a regressor that is held twice."""
    seen: dict[bytes, str] = {}
    for name, column, values in slopes_of(equation):
        if column == equation.response or np.array_equal(values, response):
            raise DesignError(
                f"the response “{equation.response}” stands among its own regressors, "
                f"as {describe(name, column)}.",
                where=place,
                mend=f"Leave “{name}” out; to use the past of the response, derive a lag of it.",
            )
        key = values.tobytes()
        if key in seen:
            raise DesignError(
                f"the regressors “{seen[key]}” and {describe(name, column)} hold the same values.",
                where=place,
                mend=f"Leave one of them out: “{name}”, for instance.",
            )
        seen[key] = name


def check_collinear(system: System, equation: Equation, centred: Centred, place: str) -> None:
    """Refuse a regressor that is an exact combination of others, where there are periods enough to tell."""
    if system.n_periods < len(equation.regressors):
        return
    combination = find_combination(centred.slopes, centred.sizes / centred.lengths)
    if combination is None:
        return
    *others, last = np.flatnonzero(combination)
    names = [f"“{centred.names[k]}”" for k in others]
    # What the combination leaves of the levels is carried by the intercept.
    weights = combination / centred.lengths
    left, size = abs(weights @ centred.levels), np.abs(weights) @ np.abs(centred.levels)
    if equation.has_intercept and left > NEGLIGIBLE * size:
        names.append("the intercept")
    column = equation.columns[equation.regressors.index(centred.names[last])]
    raise DesignError(
        f"the regressor {describe(centred.names[last], column)} is an exact combination of {listed(names)}: "
        "no data can tell them apart.",
        where=place,
        mend=f"Leave one of them out: “{centred.names[last]}”, for instance.",
    )


def check_fit(system: System, equation: Equation, centred: Centred, place: str) -> None:
    """Refuse a response that its regressors reproduce exactly although there are periods enough to err."""
    n_fixed = int(equation.has_intercept)
    if system.n_periods > n_fixed + 1:
        for k, name in enumerate(centred.names):
            if is_exact(centred, [k]):
                column = equation.columns[equation.regressors.index(name)]
                raise DesignError(
                    f"the regressor {describe(name, column)} is the response “{equation.response}” itself, "
                    "rescaled.",
                    where=place,
                    mend=f"Leave “{name}” out; to use the past of the response, derive a lag of it.",
                )
    everything = list(range(len(centred.names)))
    if system.n_periods > len(equation.regressors) and is_exact(centred, everything):
        raise DesignError(
            f"its regressors fit the response “{equation.response}” exactly: no error is left to speak of.",
            where=place,
            mend="Look for an identity (a total and its parts, say) and leave one term of it out.",
        )


def check_identity(system: System, source: str) -> None:
    """Refuse responses that an exact identity ties together: their joint error would be singular."""
    n_rows_needed = system.n_equations + 1
    if system.n_equations < 2 or system.n_periods < n_rows_needed:
        return
    columns = system.factor.responses()
    sizes = np.linalg.norm(columns, axis=0)
    if all(e.has_intercept for e in system.equations):
        columns, _ = take_out(columns, system.factor.regressors(0)[:, 0])
    lengths = np.linalg.norm(columns, axis=0)
    combination = find_combination(columns / lengths, sizes / lengths)
    if combination is None:
        return
    names = [system.names[i] for i in np.flatnonzero(combination)]
    quoted = listed([f"“{n}”" for n in names])
    what = (
        f"the responses of {quoted} are the same but for a constant and a factor."
        if len(names) == 2
        else f"the responses of {quoted} are tied by an exact identity: weighted, they add up to a constant."
    )
    raise DesignError(
        what, where=source, mend=f"Leave one of these equations out: “{names[-1]}”, for instance."
    )


def centre(system: System, i: int) -> Centred:
    """Return the factor's columns of one equation with its intercept taken out.

    Columns that never change are left as they are when there is no intercept; beside an intercept they have
    been refused before.
    """
    equation = system.equations[i]
    columns, response = system.factor.regressors(i), system.factor.responses()[:, i]
    slopes, levels = columns, np.zeros(columns.shape[1])
    centred_response = response
    if equation.has_intercept:
        ones = columns[:, 0]
        slopes, levels = take_out(columns[:, 1:], ones)
        centred_response = take_out(response[:, None], ones)[0][:, 0]
    sizes = np.linalg.norm(columns[:, columns.shape[1] - slopes.shape[1] :], axis=0)
    lengths = np.linalg.norm(slopes, axis=0)
    return Centred(
        names=equation.regressors[columns.shape[1] - slopes.shape[1] :],
        slopes=slopes / lengths,
        lengths=lengths,
        sizes=sizes,
        response=centred_response,
        response_size=float(np.linalg.norm(response)),
        levels=levels,
    )


def take_out(columns: Array, direction: Array) -> tuple[Array, Array]:
    """Return columns without their part along a direction, and the lengths of those parts."""
    unit = direction / np.linalg.norm(direction)
    along = unit @ columns
    return columns - np.outer(unit, along), along


def find_combination(columns: Array, noise: Array) -> Array | None:
    """Find one exact linear combination among unit columns.

    QR with column pivoting (Golub & Van Loan, Matrix Computations, section 5.4.2) decides the rank; the first
    column beyond it is solved for in terms of those before it, which gives a smallest set of tied columns.

    Parameters
    ----------
    columns : array of float, shape (n_rows, n_columns)
        Of unit length; n_rows >= n_columns is not needed, but fewer rows always give a combination.
    noise : array of float, shape (n_columns,)
        Length of each column before centring, in units of its length now: how much rounding has grown.

    Returns
    -------
    array of float, shape (n_columns,), or None
        Weights whose combination vanishes, exactly zero where a column plays no part; None if the columns are
        independent.
    """
    if columns.shape[1] < 2:
        return None
    _, triangle, order = scipy.linalg.qr(columns, mode="economic", pivoting=True)
    diagonal = np.abs(np.diag(triangle))
    rank = int(np.sum(diagonal > min(ROUNDING * noise.max(), LARGEST_ROUNDING)))
    if rank == columns.shape[1]:
        return None
    weights = np.zeros(columns.shape[1])
    weights[order[rank]] = -1.0
    weights[order[:rank]] = scipy.linalg.solve_triangular(triangle[:rank, :rank], triangle[:rank, rank])
    weights[np.abs(weights) < NEGLIGIBLE * np.abs(weights).max()] = 0.0
    return weights


def is_exact(centred: Centred, used: list[int]) -> bool:
    """Whether some of the regressors reproduce the response up to rounding."""
    if not used:
        return False
    columns = centred.slopes[:, used]
    weights = np.linalg.lstsq(columns, centred.response, rcond=None)[0]
    residual = float(np.linalg.norm(centred.response - columns @ weights))
    spread = float(np.linalg.norm(centred.response))
    size = centred.response_size + float(np.abs(weights) @ (centred.sizes[used] / centred.lengths[used]))
    return residual <= min(ROUNDING * size, LARGEST_ROUNDING * spread)


def is_constant(values: Array) -> bool:
    """Whether a column stays the same, up to rounding."""
    return bool(np.ptp(values) <= ROUNDING * np.abs(values).max())


def slopes_of(equation: Equation) -> list[tuple[str, str, Array]]:
    """Return name, column and values of every regressor but the intercept."""
    terms = zip(equation.regressors, equation.columns, equation.design.T, strict=True)
    return [(name, column, values) for name, column, values in terms if name != INTERCEPT]


def describe(name: str, column: str) -> str:
    """Return a regressor in quotes, with its column where the two differ."""
    return f"“{name}”" if name == column else f"“{name}” (column “{column}”)"


def listed(items: Sequence[str]) -> str:
    """Return items as a list in a sentence: a, b and c."""
    return items[0] if len(items) == 1 else f"{', '.join(items[:-1])} and {items[-1]}"
