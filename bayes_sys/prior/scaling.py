"""Spreads: the units in which a scaled card speaks. They come from the data, never from a fit."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import CardError
from bayes_sys.system.system import Equation, System

Array = NDArray[np.float64]

# What is left of a series after its trend is taken out counts as rounding below this share of its standard
# deviation; values carry about 1e-16 of their level, which `_rounding` looks after.
_NOTHING = 1e-9


@dataclass(frozen=True)
class EquationUnits:
    """The units of one equation.

    Parameters
    ----------
    centre : float
        Sample mean of the response.
    response : float
        Spread of the response.
    slopes : array of float, shape (p_i,)
        One unit of each coefficient: spread of the response / spread of the regressor; for the intercept
        the spread of the response.
    means : array of float, shape (p_i,)
        Sample mean of each regressor; 0 for the intercept.
    """

    centre: float
    response: float
    slopes: Array
    means: Array


def equation_units(system: System) -> tuple[EquationUnits, ...]:
    """Return the units of every equation of a system.

    Raises
    ------
    CardError
        A response does not vary, so that it has no spread.
    """
    ordinals = np.asarray(system.periods.ordinals, dtype=np.float64)
    return tuple(
        _units(equation, system.responses[:, i], ordinals) for i, equation in enumerate(system.equations)
    )


def spread(values: Array, ordinals: Array) -> float:
    """Return the standard deviation of a series after removing a linear trend.

    Parameters
    ----------
    values : array of float, shape (n,)
        The series, in its own units.
    ordinals : array of float, shape (n,)
        Where its periods stand on the calendar.

    Returns
    -------
    float
        Square root of the residual sum of squares over n − 1. 0 if the trend leaves nothing but rounding:
        for a trend itself, for a constant, and for fewer than three periods.
    """
    if len(values) < 3:
        return 0.0
    centred = values - values.mean()
    time = ordinals - ordinals.mean()
    left = centred - time * (time @ centred) / (time @ time)
    found = float(np.sqrt(left @ left / (len(values) - 1)))
    return found if found > max(_NOTHING * plain_deviation(values), _rounding(values)) else 0.0


def plain_deviation(values: Array) -> float:
    """Return the standard deviation (divisor n − 1), trend left in; 0 for a constant or a single period."""
    if len(values) < 2:
        return 0.0
    found = float(np.std(values, ddof=1))
    return found if found > _rounding(values) else 0.0


def is_dummy(values: Array) -> bool:
    """Return whether a series takes no other values than 0 and 1."""
    return bool(np.all((values == 0.0) | (values == 1.0)))


def _rounding(values: Array) -> float:
    """Return the size below which deviations are rounding, given the level of the values."""
    return float(8 * np.finfo(np.float64).eps * np.max(np.abs(values)))


def _units(equation: Equation, response: Array, ordinals: Array) -> EquationUnits:
    """Measure one equation on the periods it uses."""
    used = np.isfinite(response) & np.isfinite(equation.design).all(axis=1)
    outcome, design, when = response[used], equation.design[used], ordinals[used]
    whole = plain_deviation(outcome)
    if whole == 0.0:
        raise CardError(
            f"The response “{equation.response}” of “{equation.name}” does not vary over the {len(outcome)} "
            "period(s) in use, so a scaled prior card has no unit for it.",
            mend="Use more periods, or a card of your own with scaled = false.",
        )
    size = spread(outcome, when) or whole
    columns = [design[:, k] for k in range(design.shape[1])]
    slopes = np.array([_slope_unit(column, when, size, whole) for column in columns])
    means = design.mean(axis=0)
    if equation.has_intercept:
        slopes[0], means[0] = size, 0.0
    return EquationUnits(float(outcome.mean()), size, slopes, means)


def _slope_unit(column: Array, when: Array, size: float, whole: float) -> float:
    """Return one unit of a slope, response per regressor.

    A regressor that is itself a trend has no spread left: its unit is the ratio of the plain standard
    deviations, response and regressor alike, because what such a column explains is the response's trend.
    A regressor that never moves (possible without an intercept) is measured by its size.
    """
    if is_dummy(column):
        return size
    found = spread(column, when)
    if found > 0.0:
        return size / found
    deviation = plain_deviation(column)
    if deviation > 0.0:
        return whole / deviation
    return size / float(np.abs(column).max())
