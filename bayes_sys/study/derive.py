"""Derived columns: the steps of [derive], by period and not by row, within each equation."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import StudyError, TableError
from bayes_sys.study.calendars import PeriodFault
from bayes_sys.study.faults import key_path
from bayes_sys.study.panel import AppliedStep, Lineage
from bayes_sys.study.periods import Periods
from bayes_sys.study.spec import DeriveSpec, Step
from bayes_sys.study.spec_base import PLACEHOLDER, expand
from bayes_sys.study.spec_data import COLUMN_STEPS
from bayes_sys.study.steps import FaultBook, apply_step, moments
from bayes_sys.study.store import Cells, Store, spread

Lineages = dict[tuple[str, str], Lineage]


@dataclass
class _Work:
    """One pass over [derive]."""

    store: Store
    periods: Periods
    in_sample: NDArray[np.bool_]
    recorded: Mapping[tuple[str, str], Lineage] | None
    lineage: Lineages = field(default_factory=dict)
    book: FaultBook = field(default_factory=FaultBook)


def derive_columns(
    store: Store,
    periods: Periods,
    in_sample: NDArray[np.bool_],
    *,
    recorded: Mapping[tuple[str, str], Lineage] | None = None,
) -> Lineages:
    """Make every column of [derive], in order, into the store.

    Parameters
    ----------
    store : Store
        Holds the raw columns; takes the derived ones.
    periods : Periods, length n_grid
    in_sample : array of bool, shape (n_grid,)
        The sample in use: trend and seasons start there, ``standardise`` takes its moments there.
    recorded : mapping of (equation, column) to Lineage, optional
        Lineages of an earlier pass, whose moments are kept instead of taken anew.

    Returns
    -------
    dict of (equation, column) to Lineage

    Raises
    ------
    StudyError
        If a name is taken, a column does not exist or is made further below, or a period is unknown.
    TableError
        If a step has no answer for a cell that the sample needs.
    """
    work = _Work(store, periods, in_sample, recorded)
    for name, spec in store.study.derive.items():
        key = key_path(("derive", name))
        if spec.from_ is not None:
            _derive_from(work, name, spec, key)
        else:
            _derive_own(work, name, spec, key)
    return work.lineage


def _derive_from(work: _Work, name: str, spec: DeriveSpec, key: str) -> None:
    store, source = work.store, spec.from_ or ""
    if spec.of_unit is None:
        cells = store.get(source, f"{key}.from")
    else:
        cells = store.of_unit(source, spec.of_unit, f"{key}.from")
    steps: list[tuple[Step, Mapping[str, NDArray[np.float64]]]] = []
    for i, step in enumerate(spec.steps):
        place = f"{key}.steps[{i}]"
        fitted: Mapping[str, NDArray[np.float64]] = {}
        if step.name == "standardise":
            cells, fitted = _standardise(work, cells, name, i, place)
        else:
            other = store.get(step.argument, f"{place}.{step.name}") if step.name in COLUMN_STEPS else None
            cells = apply_step(step, cells, other, book=work.book, column=source, key=place)
        steps.append((step, fitted))
    _refuse_faults(work, cells)
    _keep(work, name, cells, key)
    _record(work, name, spec, steps)


def _standardise(
    work: _Work, cells: Cells, name: str, position: int, key: str
) -> tuple[Cells, Mapping[str, NDArray[np.float64]]]:
    mean, sd = moments(cells, work.in_sample)
    if work.recorded is not None:
        for j, equation in enumerate(work.store.equations[: work.store.n_selected]):
            earlier = work.recorded[equation, expand(name, equation)]
            offset = len(earlier.steps) - len(work.store.study.derive[name].steps)
            kept = earlier.steps[position + offset].fitted
            mean[j], sd[j] = kept["mean"], kept["sd"]
    _refuse_faults(work, cells)
    for j in np.flatnonzero(np.isnan(sd[: work.store.n_selected]))[:1]:
        raise TableError(
            f"“{expand(name, work.store.equations[j])}” of {work.store.equations[j]} cannot be standardised: "
            "in the sample it has fewer than two different values.",
            where=work.store.study.at(key),
            mend="Take the step out, or take the column out for this equation.",
        )
    return Cells((cells.values - mean) / sd, cells.marks), {"mean": mean, "sd": sd}


def _derive_own(work: _Work, name: str, spec: DeriveSpec, key: str) -> None:
    first = int(work.periods.ordinals[work.in_sample][0])
    ordinals = work.periods.ordinals
    if spec.season is not None:
        place = work.periods.season_of(spec.season, first)
        for k in range(2, spec.season + 1):
            values = (place == k).astype(np.float64)
            _keep_own(work, f"{name}_{k}", values, key, AppliedStep("season", spec.season))
        return
    try:
        if spec.trend:
            values, step = (ordinals - first).astype(np.float64), AppliedStep("trend")
        elif spec.pulse is not None:
            at = work.periods.ordinal_of(spec.pulse)
            values, step = (ordinals == at).astype(np.float64), AppliedStep("pulse", spec.pulse)
        else:
            start = work.periods.first_ordinal(spec.step_from)
            values, step = (ordinals >= start).astype(np.float64), AppliedStep("step_from", spec.step_from)
    except PeriodFault as error:
        which = "pulse" if spec.pulse is not None else "step_from"
        raise StudyError(error.what, where=work.store.study.at(f"{key}.{which}"), mend=error.mend) from None
    _keep_own(work, name, values, key, step)


def _keep_own(work: _Work, name: str, values: NDArray[np.float64], key: str, step: AppliedStep) -> None:
    _keep(work, name, spread(Cells(values[:, None]), len(work.store.equations)), key)
    lineage = Lineage(None, (step,))
    for equation in work.store.equations[: work.store.n_selected]:
        work.lineage[equation, expand(name, equation)] = lineage


def _keep(work: _Work, name: str, cells: Cells, key: str) -> None:
    store = work.store
    if PLACEHOLDER not in name:
        _refuse_taken(work, name, key)
        store.columns[name] = cells
        return
    for j, equation in enumerate(store.equations):
        own = expand(name, equation)
        _refuse_taken(work, own, key)
        store.pool[own] = cells.column(j)


def _refuse_taken(work: _Work, name: str, key: str) -> None:
    store = work.store
    if name in store.raw_names or store.has(name):
        whose = f"a column of {store.source}" if name in store.raw_names else "a derived column"
        raise StudyError(
            f"“{name}” is already the name of {whose}.",
            where=store.study.at(key),
            mend="Give the derived column a name of its own.",
        )


def _record(
    work: _Work, name: str, spec: DeriveSpec, steps: list[tuple[Step, Mapping[str, NDArray[np.float64]]]]
) -> None:
    shared: dict[str, Lineage] = {}
    varies = any(fitted for _, fitted in steps) or PLACEHOLDER in f"{spec.from_}" + "".join(
        str(s.argument) for s, _ in steps
    )
    for j, equation in enumerate(work.store.equations[: work.store.n_selected]):
        if not varies and shared:
            work.lineage[equation, expand(name, equation)] = shared["same"]
            continue
        applied = [] if spec.of_unit is None else [AppliedStep("of_unit", spec.of_unit)]
        for step, fitted in steps:
            argument = expand(step.argument, equation) if step.name in COLUMN_STEPS else step.argument
            applied.append(AppliedStep(step.name, argument, {k: float(v[j]) for k, v in fitted.items()}))
        source = expand(spec.from_ or "", spec.of_unit or equation)
        shared["same"] = Lineage(source, tuple(applied))
        work.lineage[equation, expand(name, equation)] = shared["same"]


def _refuse_faults(work: _Work, cells: Cells) -> None:
    if cells.marks is None:
        return
    reached = cells.marks[work.in_sample][:, : work.store.n_selected]
    if not reached.any():
        return
    fault = work.book.fault(int(reached[reached > 0].min()))
    unit = work.store.equations[fault.equation]
    raise TableError(
        f"“{expand(fault.column, unit)}” of {unit} in {work.periods.labels[fault.row]} is "
        f"{fault.value:.12g}, which {fault.reason}.",
        where=f"{work.store.source} ({work.store.study.at(fault.key)})",
        mend="Mend the cell, leave it empty, or leave the period out with exclude, from or to.",
    )


def full_lineage(lineage: Mapping[tuple[str, str], Lineage], equation: str, column: str) -> Lineage:
    """Return a column's steps all the way back to a raw column (source None for a column of its own)."""
    steps: tuple[AppliedStep, ...] = ()
    source: str | None = column
    while source is not None and (equation, source) in lineage:
        own = lineage[equation, source]
        steps, source = own.steps + steps, own.source
        if own.steps and own.steps[0].name == "of_unit":
            equation = own.steps[0].argument
    return Lineage(source, steps)
