"""From a card and a system to the prior on the raw scale of the data, and what it says in advance."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import CardError, NotBuiltError
from bayes_sys.prior.cards import PriorCard
from bayes_sys.prior.families import UNBUILT_FAMILIES
from bayes_sys.prior.law import CoefficientLaw, CorrelationLaw, PooledGroup, Prior, ScaleLaw
from bayes_sys.prior.lines import Statement, coefficient_statements, scale_statements
from bayes_sys.prior.scaling import EquationUnits, equation_units
from bayes_sys.system.system import INTERCEPT, System

Array = NDArray[np.float64]

_SIZE = {"half_normal": "scale", "half_student_t": "scale", "exponential": "mean", "lognormal": "median"}
_SHAPE = {"half_student_t": "df", "lognormal": "spread"}


def resolve(card: PriorCard, system: System) -> Prior:
    """Say what a card means for one very system.

    Parameters
    ----------
    card : PriorCard
    system : System

    Returns
    -------
    Prior
        Every number on the raw scale of the data.

    Raises
    ------
    CardError
        The card speaks of something the system does not have, leaves something unsaid, or is scaled while a
        response does not vary.
    NotBuiltError
        The card gives coefficients the family ``student_t``.
    """
    coefficients = coefficient_statements(card, system)
    scales = scale_statements(card, system)
    _refuse_unbuilt(card, system, coefficients)
    if card.scaled:
        _refuse_intercept_units(card, system, coefficients)
        units = equation_units(system)
        coefficients = _unscale_coefficients(coefficients, system, units)
        scales = tuple(_rescale(s, {_SIZE[s.family]: u.response}) for s, u in zip(scales, units, strict=True))
    return Prior(
        coefficients=_coefficient_law(coefficients, system),
        scales=_scale_law(scales),
        correlation=CorrelationLaw(card.correlation.concentration),
    )


def prior_moments(prior: Prior) -> tuple[Array, Array]:
    """Return prior mean and standard deviation of every coefficient of the data.

    Returns
    -------
    mean, sd : arrays of float, shape (K,)
        Marginal, on the raw scale. A pooled member has variance mean_scale² + spread_scale², because the
        square of a half-normal spread has expectation spread_scale²; members of one group share their mean
        and so have covariance mean_scale².
    """
    law = prior.coefficients
    variance = np.where(law.pooled, 0.0, law.scale) ** 2
    covariance = np.diag(variance)
    for index, group in enumerate(law.groups):
        members = np.flatnonzero(law.group == index)
        covariance[np.ix_(members, members)] += group.mean_scale**2
        covariance[members, members] += group.spread_scale**2
    raw = law.to_raw @ covariance @ law.to_raw.T
    return law.to_raw @ law.stated_mean, np.sqrt(np.diag(raw))


def _refuse_unbuilt(card: PriorCard, system: System, statements: tuple[Statement, ...]) -> None:
    for label, statement in zip(system.coefficient_labels, statements, strict=True):
        if ("coefficients", statement.family) in UNBUILT_FAMILIES:
            raise NotBuiltError(
                f"The card gives “{label}” the family “{statement.family}”, which is not built yet for coefficients.",
                where=card.place(("coefficients",)),
                mend="Use “normal” or “pooled”.",
            )


def _refuse_intercept_units(card: PriorCard, system: System, statements: tuple[Statement, ...]) -> None:
    for label, statement in zip(system.coefficient_labels, statements, strict=True):
        if label.endswith(f".{INTERCEPT}") and statement.values.get("unit", 1.0) != 1.0:
            raise CardError(
                f"The card has scaled = true and gives the pooled “{label}” a unit; scaled intercepts are "
                "compared on the responses' own scale.",
                where=card.place(("coefficients",)),
                mend="Take the “unit” out, or write the whole card on the raw scale with scaled = false.",
            )


def _unscale_coefficients(
    statements: tuple[Statement, ...], system: System, units: tuple[EquationUnits, ...]
) -> tuple[Statement, ...]:
    """Put scaled statements on the raw scale, intercepts at the means of their regressors."""
    shared = _shared_intercept(statements, system, units)
    raw = []
    for k, ((_, regressor), statement) in enumerate(zip(system.coefficients, statements, strict=True)):
        equation = int(system.coefficient_equation[k])
        own = units[equation]
        unit = float(own.slopes[k - system.slice_of(equation).start])
        if regressor != INTERCEPT:
            in_units = {"unit"} if statement.family == "pooled" else {"mean", "scale"}
            raw.append(_rescale(statement, dict.fromkeys(in_units, unit)))
            continue
        centre, size = shared if statement.family == "pooled" else (own.centre, unit)
        point = dict(zip(system.equations[equation].regressors[1:], own.means[1:].tolist(), strict=True))
        raw.append(_place_intercept(statement, centre, size, point))
    return tuple(raw)


def _place_intercept(statement: Statement, centre: float, size: float, point: dict[str, float]) -> Statement:
    """Centre an intercept's statement at the response's mean, at the means of the regressors."""
    factors = dict.fromkeys(("mean", "scale", "mean_scale", "spread_scale"), size)
    moved = _rescale(statement, factors)
    return Statement(moved.family, {**moved.values, "mean": moved.values["mean"] + centre}, point)


def _shared_intercept(
    statements: tuple[Statement, ...], system: System, units: tuple[EquationUnits, ...]
) -> tuple[float, float]:
    """Return centre and unit of pooled intercepts.

    Levels that are thought alike are compared on the responses' own scale: around the average of the
    responses' means, in units of the root mean square of their spreads.
    """
    members = [
        int(system.coefficient_equation[k])
        for k, statement in enumerate(statements)
        if statement.family == "pooled" and system.coefficients[k][1] == INTERCEPT
    ]
    if not members:
        return 0.0, 1.0
    centre = float(np.mean([units[i].centre for i in members]))
    return centre, float(np.sqrt(np.mean([units[i].response ** 2 for i in members])))


def _rescale(statement: Statement, factors: dict[str, float]) -> Statement:
    values = {key: value * factors.get(key, 1.0) for key, value in statement.values.items()}
    return Statement(statement.family, values, statement.at)


def _coefficient_law(statements: tuple[Statement, ...], system: System) -> CoefficientLaw:
    """Lay raw statements out as arrays."""
    names = dict.fromkeys(
        regressor
        for (_, regressor), statement in zip(system.coefficients, statements, strict=True)
        if statement.family == "pooled"
    )
    index = {name: i for i, name in enumerate(names)}
    groups: dict[str, PooledGroup] = {}
    n_coefficients = system.n_coefficients
    mean, scale = np.full(n_coefficients, np.nan), np.full(n_coefficients, np.nan)
    group = np.full(n_coefficients, -1, dtype=np.int64)
    for k, ((_, regressor), statement) in enumerate(zip(system.coefficients, statements, strict=True)):
        values = statement.values
        if statement.family == "pooled":
            group[k] = index[regressor]
            groups[regressor] = PooledGroup(
                regressor, values["mean"], values["mean_scale"], values["spread_scale"]
            )
        else:
            mean[k], scale[k] = values["mean"], values["scale"]
    to_raw = _to_raw(statements, system)
    return CoefficientLaw(to_raw, mean, scale, group, tuple(groups[name] for name in names))


def _to_raw(statements: tuple[Statement, ...], system: System) -> Array:
    """Return the map from stated to raw coefficients.

    A member is its unit times the stated one; an intercept stated at the point x is the stated one less
    the slopes times x.
    """
    to_raw = np.diag([statement.values.get("unit", 1.0) for statement in statements])
    for i, equation in enumerate(system.equations):
        if not equation.has_intercept:
            continue
        start = system.slice_of(i).start
        for j, name in enumerate(equation.regressors[1:], start=1):
            point = statements[start].at.get(name, 0.0)
            to_raw[start, start + j] = -point * to_raw[start + j, start + j]
    return to_raw


def _scale_law(statements: tuple[Statement, ...]) -> ScaleLaw:
    return ScaleLaw(
        family=tuple(s.family for s in statements),
        size=np.array([s.values[_SIZE[s.family]] for s in statements]),
        shape=np.array([s.values[_SHAPE[s.family]] if s.family in _SHAPE else 0.0 for s in statements]),
    )
