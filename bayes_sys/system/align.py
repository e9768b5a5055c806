"""From a study and its table to the system: the equations aligned on one period index."""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.study.derive import full_lineage
from bayes_sys.study.equations import EquationPlan, plan_equation
from bayes_sys.study.read import refuse_unbuilt
from bayes_sys.study.table import read_panel
from bayes_sys.system.design import check_design
from bayes_sys.system.moments import factorise
from bayes_sys.system.sample import Mask, check_sizes, choose_sample, fetch
from bayes_sys.system.simultaneous import find_links, link_notes, refuse_loops
from bayes_sys.system.system import INTERCEPT, Equation, ErrorModel, System

if TYPE_CHECKING:
    import pandas as pd

    from bayes_sys.study.panel import Panel
    from bayes_sys.study.spec import Study

Array = NDArray[np.float64]


def build_system(study: Study, table: pd.DataFrame | None = None) -> System:
    """Build the system that a study and its data make together.

    Parameters
    ----------
    study : Study
        From `read_study`, or made in Python.
    table : DataFrame, optional
        The data, laid out as the study says, instead of the file it names.

    Returns
    -------
    System
        Responses of shape (n_periods, n_equations) and one block of regressors per equation, in the units of
        the data.

    Raises
    ------
    InputError
        `NotBuiltError` for what the study asks and this version cannot do, `TableError` for faults of the
        data, `DesignError` for a system that could not be estimated whatever the prior: each says what was
        found, where, and how to mend it.
    """
    refuse_unbuilt(study)
    panel = read_panel(study, table)
    plans = [plan_equation(study, name) for name in panel.equations]
    keep, notes = choose_sample(study, panel, plans)
    check_sizes(panel, plans, keep)
    equations = tuple(make_equation(panel, plan, keep) for plan in plans)
    responses = np.column_stack([fetch(panel, p.name, p.response)[keep] for p in plans])
    system = System(
        title=study.title,
        equations=equations,
        periods=panel.periods.subset(keep),
        responses=responses,
        factor=factorise([e.design for e in equations], responses),
        errors=ErrorModel(study.errors.family, study.errors.autocorrelation),
        notes=notes,
        metadata={"study": study.label, "data": panel.source},
    )
    check_design(system, source=panel.source)
    links = find_links(system, panel, wide=study.data.is_wide)
    refuse_loops(system, links, where=study.label)
    return replace(system, notes=(*notes, *link_notes(system, links)))


def make_equation(panel: Panel, plan: EquationPlan, keep: Mask) -> Equation:
    """Fetch the regressors of one equation over the sample, the intercept first where there is one."""
    ones = [np.ones(int(keep.sum()))] if plan.intercept else []
    slopes = [fetch(panel, plan.name, r.column)[keep] for r in plan.regressors]
    first = (INTERCEPT,) if plan.intercept else ()
    derived = (plan.name, plan.response) in panel.lineage
    return Equation(
        name=plan.name,
        response=plan.response,
        regressors=(*first, *(r.name for r in plan.regressors)),
        columns=(*("" for _ in first), *(r.column for r in plan.regressors)),
        design=np.column_stack([*ones, *slopes]),
        lineage=full_lineage(panel.lineage, plan.name, plan.response) if derived else None,
    )
