"""Which lines of a card speak of which coefficient or error scale, and what they say together."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field

from bayes_sys.errors import CardError, nearest
from bayes_sys.prior.cards import INTERCEPT, CoefficientLine, PriorCard, ScaleLine
from bayes_sys.prior.families import (
    COEFFICIENT_FAMILIES,
    POOLED_ONLY,
    SCALE_FAMILIES,
    UNBUILT_FAMILIES,
    Family,
)
from bayes_sys.system.system import System


@dataclass(frozen=True)
class Statement:
    """What a card says of one coefficient or one error scale, all its lines taken together.

    Parameters
    ----------
    family : str
    values : dict of str to float
        Every key the family knows, in the card's own units.
    at : dict of str to float
        For an intercept: the point where its prior is stated; regressors left out stand at 0.
    """

    family: str
    values: dict[str, float]
    at: dict[str, float] = field(default_factory=dict)


def coefficient_statements(card: PriorCard, system: System) -> tuple[Statement, ...]:
    """Return what the card says of every coefficient, in the system's order.

    Raises
    ------
    CardError
        A line speaks of an equation, regressor or coefficient the system does not have; a coefficient is
        left without a family or without a number its family needs; a line carries a key of another family;
        pooled coefficients of one name disagree.
    """
    _check_coefficient_names(card, system)
    pairs = system.coefficients
    statements = tuple(_coefficient(card, equation, regressor) for equation, regressor in pairs)
    regressors = {e.name: e.regressors for e in system.equations}
    settled = []
    for (equation, _), statement in zip(pairs, statements, strict=True):
        at = {name: value for name, value in statement.at.items() if name in regressors[equation]}
        settled.append(Statement(statement.family, statement.values, at))
    _check_agreement(card, system, settled)
    return tuple(settled)


def scale_statements(card: PriorCard, system: System) -> tuple[Statement, ...]:
    """Return what the card says of every equation's error scale.

    Raises
    ------
    CardError
        As in `coefficient_statements`.
    """
    for name in card.scales.in_equation:
        if name not in system.names:
            raise _unknown(card, ("scales", "in", name), f"equation “{name}”", nearest(name, system.names))
    return tuple(_scale(card, name) for name in system.names)


def _coefficient(card: PriorCard, equation: str, regressor: str) -> Statement:
    """Lay the lines that speak of one coefficient over one another."""
    label = f"{equation}.{regressor}"
    family, values, at = "", dict[str, float](), dict[str, float]()
    held = dict[
        str, float
    ]()  # what pooled lines say of slopes; an intercept takes it up if it asks to be pooled
    for path, line in _coefficient_lines(card, equation, regressor):
        given = line.given
        if regressor == INTERCEPT and path[1:2] != ("of",):
            if line.family == "pooled":
                held |= given
                continue
            if family != "pooled":
                given = {key: value for key, value in given.items() if key not in POOLED_ONLY}
        if line.family == "pooled":
            values = {**held, **values}
        family, values = _lay(card, path, family, values, line.family, given, COEFFICIENT_FAMILIES, label)
        at = line.at if line.at is not None else at
    if not family and regressor == INTERCEPT and card.coefficients.family == "pooled":
        raise CardError(
            f"No line says how “{label}” is distributed: the family “pooled” of [coefficients] speaks of "
            "slopes only.",
            where=card.place(("coefficients",)),
            mend="Add [coefficients.of.intercept] with a family and a scale (“pooled” if you mean it).",
        )
    values = _complete(card, "coefficients", family, values, COEFFICIENT_FAMILIES, label)
    return Statement(family, values, dict(at))


def _scale(card: PriorCard, equation: str) -> Statement:
    family, values = "", dict[str, float]()
    lines: list[tuple[tuple[str, ...], ScaleLine]] = [(("scales",), card.scales)]
    if equation in card.scales.in_equation:
        lines.append((("scales", "in", equation), card.scales.in_equation[equation]))
    label = f"the error scale of “{equation}”"
    for path, line in lines:
        family, values = _lay(card, path, family, values, line.family, line.given, SCALE_FAMILIES, label)
    return Statement(family, _complete(card, "scales", family, values, SCALE_FAMILIES, label))


def _coefficient_lines(
    card: PriorCard, equation: str, regressor: str
) -> Iterator[tuple[tuple[str, ...], CoefficientLine]]:
    """Yield the lines that speak of a coefficient, the most particular last."""
    table = card.coefficients
    yield ("coefficients",), table
    if regressor in table.of:
        yield ("coefficients", "of", regressor), table.of[regressor]
    if equation in table.in_equation:
        yield ("coefficients", "in", equation), table.in_equation[equation]
    label = f"{equation}.{regressor}"
    if label in table.of:
        yield ("coefficients", "of", label), table.of[label]


def _lay(
    card: PriorCard,
    path: tuple[str, ...],
    family: str,
    values: dict[str, float],
    new_family: str | None,
    given: dict[str, float],
    families: dict[str, Family],
    label: str,
) -> tuple[str, dict[str, float]]:
    """Lay one line over what the lines before it said."""
    if new_family is not None:
        family = new_family
        values = {key: value for key, value in values.items() if key in families[family].keys}
    for key in given:
        if family and key not in families[family].keys:
            raise CardError(
                f"“{key}” is not a key of the family “{family}”, which {label} has there.",
                where=card.place(path, key),
                mend=f"Give the line a family of its own, use the keys {', '.join(families[family].keys)}, "
                "or speak of single coefficients.",
            )
    return family, {**values, **given}


def _complete(
    card: PriorCard,
    table: str,
    family: str,
    values: dict[str, float],
    families: dict[str, Family],
    label: str,
) -> dict[str, float]:
    """Fill in what may be left out, and insist on the rest."""
    where = card.place((table,))
    if not family:
        known = ", ".join(f"“{name}”" for name in families)
        raise CardError(f"No line gives {label} a family.", where=where, mend=f"Known families: {known}.")
    law = families[family]
    for key in law.required:
        if key not in values:
            raise CardError(
                f"No line gives {label} a “{key}”, which the family “{family}” needs.",
                where=where,
                mend=f"Add “{key}” to [{table}] or to a more particular line.{_unbuilt(table, family)}",
            )
    for key in values:
        if key not in law.keys:
            raise CardError(
                f"“{key}” is not a key of the family “{family}”, which {label} has.",
                where=where,
                mend=f"Known keys: {', '.join(law.keys)}.",
            )
    return {**dict(law.optional), **values}


def _unbuilt(table: str, family: str) -> str:
    """Return a warning for a family that can be written but not used yet."""
    if (table, family) not in UNBUILT_FAMILIES:
        return ""
    return f" But “{family}” is not built yet for {table}: use another family."


def _check_coefficient_names(card: PriorCard, system: System) -> None:
    """Refuse a line that would silently speak of nothing."""
    regressors = list(dict.fromkeys(regressor for _, regressor in system.coefficients))
    for name in card.coefficients.in_equation:
        if name not in system.names:
            path = ("coefficients", "in", name)
            raise _unknown(card, path, f"equation “{name}”", nearest(name, system.names))
    for name, line in card.coefficients.of.items():
        path = ("coefficients", "of", name)
        if "." in name:
            if name not in system.coefficient_labels:
                raise _unknown_coefficient(card, path, name, system)
        elif name != INTERCEPT and name not in regressors:
            hint = f"For all of one equation write [coefficients.in.{name}]." if name in system.names else ""
            raise _unknown(card, path, f"regressor “{name}”", hint or nearest(name, regressors))
        _check_point(card, system, name, line)


def _unknown_coefficient(card: PriorCard, path: tuple[str, ...], name: str, system: System) -> CardError:
    """Return the error for a coefficient that is not there, for want of its equation or of its regressor."""
    equation = name.rpartition(".")[0]
    own = [f"{e}.{r}" for e, r in system.coefficients if e == equation]
    if own:
        return _unknown(card, path, f"coefficient “{name}”", nearest(name, own))
    what = f"equation “{equation}”, and so no coefficient “{name}”"
    return _unknown(card, path, what, nearest(equation, system.names))


def _check_point(card: PriorCard, system: System, name: str, line: CoefficientLine) -> None:
    """Refuse an ``at`` that speaks of regressors which the intercept's equation does not have."""
    equation = name.rpartition(".")[0]
    own = [r for e, r in system.coefficients if r != INTERCEPT and (not equation or e == equation)]
    for regressor in line.at or {}:
        if regressor not in own:
            path = ("coefficients", "of", name, "at")
            raise _unknown(card, path, f"regressor “{regressor}”", nearest(regressor, dict.fromkeys(own)))


def _check_agreement(card: PriorCard, system: System, statements: list[Statement]) -> None:
    """Pooled coefficients of one name must agree in what they share."""
    first: dict[str, tuple[str, dict[str, float]]] = {}
    for (equation, regressor), statement in zip(system.coefficients, statements, strict=True):
        if statement.family != "pooled":
            continue
        elsewhere, values = first.setdefault(regressor, (equation, statement.values))
        for key in ("mean", "mean_scale", "spread_scale"):
            if statement.values[key] != values[key]:
                raise CardError(
                    f"The pooled coefficients “{regressor}” must agree in “{key}”: “{elsewhere}” has "
                    f"{values[key]:g}, “{equation}” {statement.values[key]:g}.",
                    where=card.place(("coefficients",)),
                    mend=f"Give “{key}” once, in [coefficients.of.{regressor}]; what may differ is “unit”.",
                )


def _unknown(card: PriorCard, path: tuple[str, ...], what: str, hint: str) -> CardError:
    return CardError(f"The study has no {what}.", where=card.place(path), mend=hint)
