"""Which periods the system uses: the study's sample less what lags cost, with no cell missing."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import DesignError
from bayes_sys.study.derive import full_lineage
from bayes_sys.study.spec_data import COLUMN_STEPS

if TYPE_CHECKING:
    from bayes_sys.study.equations import EquationPlan
    from bayes_sys.study.panel import AppliedStep, Panel
    from bayes_sys.study.periods import Periods
    from bayes_sys.study.spec import Study

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

LARGEST_SIZE, SMALLEST_SIZE = 1e70, 1e-70
"""Sizes of columns that can be worked with: a slope between the two extremes is 1e140, and its variance still
stays clear of the limits of double precision (about 1e308 and 1e-308)."""

SHOWN = 12
"""How many periods or cells a message lists before it counts the rest."""


def columns_of(plan: EquationPlan) -> tuple[str, ...]:
    """Return the distinct columns that an equation needs, its response first."""
    return tuple(dict.fromkeys([plan.response, *(r.column for r in plan.regressors)]))


def fetch(panel: Panel, equation: str, column: str) -> Array:
    """Return one column of one equation over the whole grid, NaN where nothing was observed."""
    return panel.frames[equation][column].to_numpy(dtype=np.float64)


def choose_sample(study: Study, panel: Panel, plans: Sequence[EquationPlan]) -> tuple[Mask, tuple[str, ...]]:
    """Return which periods of the grid the system uses, and what a user should know about the choice.

    Parameters
    ----------
    study : Study
    panel : Panel
    plans : sequence of EquationPlan

    Returns
    -------
    keep : array of bool, shape (n_grid,)
    notes : tuple of str

    Raises
    ------
    DesignError
        If no period is left, or a cell that the system needs is missing or infinite.
    """
    keep = panel.in_sample.copy()
    lost = find_lost_to_history(panel, plans)
    keep[lost] = False
    if not keep.any():
        reason = ": lags and differences use up all of them" if len(lost) else ""
        raise DesignError(
            f"no period is left in the sample{reason}.",
            where=panel.source,
            mend="Widen it (from, to, exclude in [data]) or shorten the lags.",
        )
    check_infinite(panel, plans, keep)
    check_missing(study, panel, plans, keep)
    return keep, write_notes(study, panel, lost)


def find_lost_to_history(panel: Panel, plans: Sequence[EquationPlan]) -> NDArray[np.int64]:
    """Return the leading sample periods in which every equation lacks a cell because a step looks back.

    The cell must be empty for want of history: its source begins less than the steps' reach before it. A
    source that itself begins late is not history but a missing cell, and is left to be reported.
    """
    sample = np.flatnonzero(panel.in_sample)
    if not len(sample):
        return sample
    masks = [history_mask(panel, plan) for plan in plans]
    common = np.logical_and.reduce(masks)[sample]
    n_lost = len(sample) if common.all() else int(np.argmin(common))
    return sample[:n_lost]


def history_mask(panel: Panel, plan: EquationPlan) -> Mask:
    """Return where one equation lacks a cell for want of history, shape (n_grid,)."""
    mask = np.zeros(len(panel.periods), dtype=bool)
    for column in columns_of(plan):
        steps = reach(panel, plan.name, column)
        if steps:
            start = first_observed(panel, plan.name, column)
            window = slice(start, start + steps)
            mask[window] |= np.isnan(fetch(panel, plan.name, column)[window])
    return mask


def first_observed(panel: Panel, equation: str, column: str) -> int:
    """Return the grid position where the raw source of a derived column begins; 0 if it has none here."""
    lineage = full_lineage(panel.lineage, equation, column)
    others = [str(step.argument) for step in lineage.steps if step.name == "of_unit"]
    frame = panel.frames.get(others[0] if others else equation)
    if lineage.source is None or frame is None or lineage.source not in frame.columns:
        return 0
    return int(np.argmin(frame[lineage.source].isna().to_numpy()))


def reach(panel: Panel, equation: str, column: str) -> int:
    """Return how many periods the steps behind a column look back."""
    steps = full_lineage(panel.lineage, equation, column).steps
    others = [reach(panel, equation, str(step.argument)) for step in steps if step.name in COLUMN_STEPS]
    return sum(step_reach(step) for step in steps) + max(others, default=0)


def step_reach(step: AppliedStep) -> int:
    """Return how many periods one step looks back."""
    if step.name == "diff":
        return 1
    if step.name == "lag":
        return int(step.argument)
    return int(step.argument) - 1 if step.name == "rolling_mean" else 0


def check_infinite(panel: Panel, plans: Sequence[EquationPlan], keep: Mask) -> None:
    """Refuse an infinite value, naming the first."""
    for plan in plans:
        for column in columns_of(plan):
            values = fetch(panel, plan.name, column)
            bad = np.flatnonzero(keep & np.isinf(values))
            if len(bad):
                raise DesignError(
                    f"the column “{column}” of equation “{plan.name}” is infinite in "
                    f"{panel.periods.labels[bad[0]]}.",
                    where=panel.source,
                    mend="Mend the cell, or look for a division by zero or a logarithm of zero behind it.",
                )


def check_sizes(panel: Panel, plans: Sequence[EquationPlan], keep: Mask) -> None:
    """Refuse a column so large or so small that products of its values leave the range of numbers."""
    for plan in plans:
        for column in columns_of(plan):
            largest = float(np.abs(fetch(panel, plan.name, column)[keep]).max())
            if largest == 0.0 or SMALLEST_SIZE <= largest <= LARGEST_SIZE:
                continue
            found = "reaches" if largest > 1 else "reaches no more than"
            factor = f"1e{-math.floor(math.log10(largest))}"
            raise DesignError(
                f"the column “{column}” of equation “{plan.name}” {found} {largest:.3g}; sizes from "
                f"{SMALLEST_SIZE:g} to {LARGEST_SIZE:g} can be worked with.",
                where=panel.source,
                mend=f'Put it into other units in [derive]: {{ from = "{column}", '
                f"steps = [{{ scale = {factor} }}] }}.",
            )


def check_missing(study: Study, panel: Panel, plans: Sequence[EquationPlan], keep: Mask) -> None:
    """Refuse missing cells, with a list of them and what to write to leave their periods out."""
    cells = find_missing(panel, plans, keep)
    if not cells:
        return
    labels = panel.periods.labels
    shown = "; ".join(f"{labels[t]}, {whose}, column “{column}”" for t, _, whose, column, _ in cells[:SHOWN])
    more = f"; and {len(cells) - SHOWN} more" if len(cells) > SHOWN else ""
    number = "1 cell is" if len(cells) == 1 else f"{len(cells)} cells are"
    hints = [mend_missing(study, panel, keep, sorted({t for t, *_ in cells}))]
    files = {file for *_, file in cells}
    hints += [hint for hint in (hint_case(panel.equations), hint_formulas(files)) if hint]
    raise DesignError(
        f"{number} missing in the sample, and data with missing cells are not supported yet: {shown}{more}.",
        where=", ".join(sorted(files)),
        mend=" ".join(hints),
    )


def find_missing(
    panel: Panel, plans: Sequence[EquationPlan], keep: Mask
) -> list[tuple[int, int, str, str, str]]:
    """Return (grid position, order, whose, column, file) of every missing cell, by period.

    A cell that comes from a shared table is one cell, whatever number of equations uses it.
    """
    cells: dict[tuple[int, str, str], tuple[int, int, str, str, str]] = {}
    for order, plan in enumerate(plans):
        for column in columns_of(plan):
            file = panel.shared.get(full_lineage(panel.lineage, plan.name, column).source or "")
            for t in np.flatnonzero(keep & np.isnan(fetch(panel, plan.name, column))):
                whose = f"“{plan.name}”" if file is None else "all equations"
                key = (int(t), plan.name if file is None else "", column)
                cells.setdefault(key, (int(t), order, whose, column, file or panel.source))
    return sorted(cells.values(), key=lambda cell: cell[:2])


def hint_case(names: Sequence[str]) -> str:
    """Return a hint where the names of two units differ in nothing but case or spaces; else empty."""
    seen: dict[str, str] = {}
    for name in names:
        twin = seen.setdefault(" ".join(name.casefold().split()), name)
        if twin != name:
            return (
                f"The units “{twin}” and “{name}” differ only in case or spaces: if they are one, write its "
                "name in one way."
            )
    return ""


def hint_formulas(files: Iterable[str]) -> str:
    """Return a hint where a spreadsheet may hold a formula instead of a value; else empty."""
    if not any(file.lower().endswith(".xlsx") for file in files):
        return ""
    return (
        "A formula whose value was never saved is read as an empty cell: open the file in a spreadsheet "
        "program and save it."
    )


def mend_missing(study: Study, panel: Panel, keep: Mask, incomplete: list[int]) -> str:
    """Return what to write in [data] so that the incomplete periods are left out."""
    sample = [int(t) for t in np.flatnonzero(keep)]
    periods, n_lost = panel.periods, len(incomplete)
    if n_lost == len(sample):
        return "No period is complete: fill the cells, or leave out the equation or regressor they belong to."
    if incomplete == sample[:n_lost]:
        first = as_toml(periods, sample[n_lost])
        return f"Fill them in, or start the sample later: from = {first} in [data]."
    if incomplete == sample[-n_lost:]:
        last = as_toml(periods, sample[-n_lost - 1])
        return f"Fill them in, or end the sample earlier: to = {last} in [data]."
    if n_lost > SHOWN:
        return f"Fill them in, or leave the {n_lost} periods they stand in out (exclude = [...] in [data])."
    positions = sorted({*find_excluded(study, periods), *incomplete})
    listed = ", ".join(as_toml(periods, t) for t in positions)
    return f"Fill them in, or leave their periods out: exclude = [{listed}] in [data]."


def as_toml(periods: Periods, position: int) -> str:
    """Return a period as it is written in a study file."""
    label = periods.labels[position]
    return label if periods.kind in ("year", "integer", "day", "week", "weekday") else f'"{label}"'


def find_excluded(study: Study, periods: Periods) -> list[int]:
    """Return the grid positions that the study asks to leave out."""
    first = int(periods.ordinals[0])
    spans = [(periods.first_ordinal(v), periods.last_ordinal(v)) for v in study.data.exclude]
    positions = {o - first for low, high in spans for o in range(low, high + 1)}
    return sorted(t for t in positions if 0 <= t < len(periods))


def write_notes(study: Study, panel: Panel, lost: NDArray[np.int64]) -> tuple[str, ...]:
    """Return, in plain words, what happened on the way from the table to the sample."""
    periods = panel.periods
    used = np.flatnonzero(panel.in_sample)
    excluded = find_excluded(study, periods)
    gaps = [t for t in range(used[0], used[-1]) if not panel.in_sample[t] and t not in excluded]
    notes = note_bounds(study, periods, [*used.tolist(), *excluded])
    if periods.step > 1:
        unit = {"integer": "units", "week": "days"}.get(periods.kind, f"{periods.kind}s")
        notes.append(f"Periods are {periods.step} {unit} apart: a lag of one period reaches that far back.")
    if excluded:
        notes.append(f"Left out as the study asks: {list_periods(periods, excluded)}.")
    if gaps:
        notes.append(
            f"No row speaks of {list_periods(periods, gaps)}: the sample has a gap there. Lags count "
            "periods, not rows, so one that reaches into the gap finds nothing."
        )
    if len(lost):
        number = "The first period" if len(lost) == 1 else f"The first {len(lost)} periods"
        notes.append(
            f"{number} ({list_periods(periods, lost)}) {'is' if len(lost) == 1 else 'are'} left out: "
            "a lag, difference or moving average has no value there yet."
        )
    return tuple(notes)


def note_bounds(study: Study, periods: Periods, spoken: Sequence[int]) -> list[str]:
    """Return notes on a from or to beyond the data, which leaves nothing out and may be a slip.

    ``spoken``: grid positions of the periods in the sample, and of those the study leaves out.
    """
    notes = []
    low, high = study.data.from_, study.data.to
    first, last = min(spoken), max(spoken)
    if low is not None and periods.first_ordinal(low) < periods.ordinals[first]:
        notes.append(f"The study says from = {low}; the first period with data is {periods.labels[first]}.")
    if high is not None and periods.last_ordinal(high) > periods.ordinals[last]:
        notes.append(f"The study says to = {high}; the last period with data is {periods.labels[last]}.")
    return notes


def list_periods(periods: Periods, positions: Sequence[int] | NDArray[np.int64]) -> str:
    """Return periods as a list in a sentence, the rest counted after the first twelve."""
    labels = [periods.labels[t] for t in positions]
    more = f" and {len(labels) - SHOWN} more" if len(labels) > SHOWN else ""
    return f"{', '.join(labels[:SHOWN])}{more}"
