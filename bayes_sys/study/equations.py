"""What each equation asks for, once the defaults of every equation are filled in."""

from __future__ import annotations

import re
from collections.abc import Iterable, Iterator
from dataclasses import dataclass

from pydantic_core import PydanticCustomError

from bayes_sys.errors import StudyError, nearest
from bayes_sys.study.faults import key_path
from bayes_sys.study.spec import EquationSpec, Regressor, Study, WeightColumn
from bayes_sys.study.spec_base import PLACEHOLDER, expand
from bayes_sys.study.spec_data import COLUMN_STEPS, check_distinct, check_regressor_name


@dataclass(frozen=True)
class EquationPlan:
    """One equation with names written out.

    Parameters
    ----------
    name : str
    response : str
        Column of the response.
    regressors : tuple of Regressor
        Name and column of each regressor, without the constant term.
    intercept : bool
    response_key, regressors_key : str
        Where the study says so, for messages: ``every_equation.response``.
    """

    name: str
    response: str
    regressors: tuple[Regressor, ...]
    intercept: bool
    response_key: str
    regressors_key: str


def plan_equation(study: Study, name: str) -> EquationPlan:
    """Return what one equation asks for.

    Raises
    ------
    StudyError
        If it has no response, nothing to estimate, or names that clash once ``{equation}`` is written out.
    """
    own, base = study.equation.get(name), study.every_equation
    own_key = key_path(("equation", name))
    response_own = own is not None and own.response is not None
    regressors_own = own is not None and own.regressors is not None
    response = own.response if own is not None and response_own else base.response
    listed = own.regressors if own is not None and regressors_own else base.regressors
    intercept = own.intercept if own is not None and own.intercept is not None else base.intercept
    if response is None:
        raise StudyError(
            f"the equation “{name}” has no response.",
            where=study.at(f"{own_key}.response"),
            mend='Write response = "…" here or under [every_equation].',
        )
    plan = EquationPlan(
        name=name,
        response=expand(response, name),
        regressors=tuple(_expanded(r, name) for r in listed or ()),
        intercept=intercept is not False,
        response_key=f"{own_key if response_own else 'every_equation'}.response",
        regressors_key=f"{own_key if regressors_own else 'every_equation'}.regressors",
    )
    _check_plan(study, plan)
    return plan


def _expanded(regressor: Regressor, equation: str) -> Regressor:
    if PLACEHOLDER not in regressor.name + regressor.column:
        return regressor
    return regressor.model_copy(
        update={"name": expand(regressor.name, equation), "column": expand(regressor.column, equation)}
    )


def _check_plan(study: Study, plan: EquationPlan) -> None:
    if not plan.regressors and not plan.intercept:
        raise StudyError(
            f"the equation “{plan.name}” has neither regressors nor a constant term.",
            where=study.at(plan.regressors_key),
            mend="Name a regressor, or set intercept = true.",
        )
    try:
        check_distinct(tuple(r.name for r in plan.regressors), "the regressor")
        for regressor in plan.regressors:
            check_regressor_name(regressor.name)
    except PydanticCustomError as error:
        context = error.context or {}
        mend = context["mend"]
        if "dot" in context["what"]:
            # Only a name written with {equation} gets here; a name of its own is the same for all.
            mend = 'Give it a name of its own, such as { name = "heat", column = "{equation}_heat" }.'
        raise StudyError(context["what"], where=study.at(plan.regressors_key), mend=mend) from None
    for i, regressor in enumerate(plan.regressors):
        if regressor.column == plan.response:
            raise StudyError(
                f"the response “{plan.response}” stands among its own regressors "
                f"in the equation “{plan.name}”.",
                where=study.at(f"{plan.regressors_key}[{i}]"),
                mend="Take it out, or use a lag of it made in [derive].",
            )


def wide_equations(study: Study, columns: Iterable[str]) -> tuple[str, ...]:
    """Return the equations of a wide table.

    They are ``data.units`` if given; else whatever stands in the place of ``{equation}`` in the columns that
    hold the response, and after them every further ``[equation.*]`` table that has a response; without a
    placeholder, the ``[equation.*]`` tables.

    Raises
    ------
    StudyError
        If the study does not say.
    """
    if study.data.units is not None:
        return study.data.units
    pattern = _raw_pattern(study, study.every_equation.response)
    if pattern is None or pattern == PLACEHOLDER:
        if study.equation:
            return tuple(study.equation)
        raise StudyError(
            "nothing says which equations there are.",
            where=study.at("data"),
            mend='Add units = ["…", "…"] under [data] (or unit = "…" if each row is one unit and period), '
            'or use “{equation}” in every_equation.response, such as response = "{equation}_demand".',
        )
    columns = list(columns)
    found = _matching(study, pattern, columns)
    own = [
        name
        for name, spec in study.equation.items()
        if spec.response is not None or expand(pattern, name) in columns
    ]
    if not found and not own:
        raise StudyError(
            f"no column fits the response “{pattern}”.",
            where=study.at("every_equation.response"),
            mend=nearest(pattern, columns),
        )
    return tuple(dict.fromkeys([*found, *own]))


def _matching(study: Study, pattern: str, columns: Iterable[str]) -> list[str]:
    """Return what stands in the place of ``{equation}`` in the columns that fit the response."""
    before, _, after = pattern.partition(PLACEHOLDER)
    # A second placeholder in one name must stand for the same equation.
    shape = re.compile(
        f"{re.escape(before)}(?P<e>.+?){re.escape(after).replace(re.escape(PLACEHOLDER), '(?P=e)')}"
    )
    literal = {name for name, _ in written_columns(study) if PLACEHOLDER not in name} | {study.data.period}
    return [m["e"] for c in columns if c not in literal and (m := shape.fullmatch(c))]


def _raw_pattern(study: Study, name: str | None) -> str | None:
    """Follow a response back through [derive] to a raw column written with ``{equation}``."""
    seen: set[str] = set()
    while name is not None and name in study.derive and name not in seen:
        seen.add(name)
        name = study.derive[name].from_
    return name if name is not None and PLACEHOLDER in name else None


def written_columns(study: Study) -> Iterator[tuple[str, str]]:
    """Yield every column name as the study writes it, with its key."""
    for key, spec in (("every_equation", study.every_equation), *_own_tables(study)):
        if spec.response is not None:
            yield spec.response, f"{key}.response"
        for i, r in enumerate(spec.regressors or ()):
            yield r.column, f"{key}.regressors[{i}]"
    for name, derived in study.derive.items():
        key = key_path(("derive", name))
        if derived.from_ is not None:
            yield derived.from_, f"{key}.from"
        for i, step in enumerate(derived.steps):
            if step.name in COLUMN_STEPS:
                yield step.argument, f"{key}.steps[{i}].{step.name}"
    for name, aggregate in study.aggregate.items():
        if isinstance(aggregate.weights, WeightColumn):
            yield aggregate.weights.column, f"{key_path(('aggregate', name))}.weights.column"


def _own_tables(study: Study) -> Iterator[tuple[str, EquationSpec]]:
    for name, spec in study.equation.items():
        yield key_path(("equation", name)), spec


def used_columns(study: Study, equations: Iterable[str]) -> set[str]:
    """Return every column name the study uses, with ``{equation}`` written out for each equation."""
    names: set[str] = set()
    equations = tuple(equations)
    for name, _ in written_columns(study):
        if PLACEHOLDER in name:
            names.update(expand(name, e) for e in equations)
        else:
            names.add(name)
    return names
