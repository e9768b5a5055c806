"""What a column's value of one period is made from, traced back through [derive]."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from functools import cached_property

from bayes_sys.study.panel import Panel
from bayes_sys.study.spec_data import COLUMN_STEPS

Series = tuple[str, str]
"""Unit and raw column; the unit is "" where one name is one series."""


@dataclass(frozen=True)
class Sources:
    """The raw series behind the columns of a panel.

    Parameters
    ----------
    panel : Panel
    wide : bool
        Whether one name is one series (a row a period), or one in every unit.
    """

    panel: Panel
    wide: bool

    @cached_property
    def maker(self) -> dict[str, str]:
        """The equation that makes a column which no other makes: written with ``{equation}``, borrowed by some."""
        counts = Counter(column for _, column in self.panel.lineage)
        return {column: equation for equation, column in self.panel.lineage if counts[column] == 1}

    def same_period(self, equation: str, column: str, *, main: bool = False) -> frozenset[Series]:
        """Return the raw series that a column's value of one period is made from, lagged ones left out.

        Parameters
        ----------
        equation, column : str
        main : bool
            Only the column that the steps start from, not those it is multiplied with, divided by, ...
        """
        lineage = self.panel.lineage
        owner = equation if (equation, column) in lineage else self.maker.get(column, "")
        if (owner, column) not in lineage:
            return frozenset({("" if self.wide else equation, column)})
        own = lineage[owner, column]
        unit = str(own.steps[0].argument) if own.steps and own.steps[0].name == "of_unit" else owner
        found = frozenset[Series]()
        if own.source is not None:
            found = self.same_period(unit, own.source, main=main)
        for step in own.steps:
            if step.name == "lag":
                found = frozenset()
            elif step.name in COLUMN_STEPS and not main:
                found |= self.same_period(owner, str(step.argument), main=main)
        return found
