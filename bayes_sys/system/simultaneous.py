"""Responses that explain each other in the same period.

The likelihood of this package takes the regressors as given. A response that is a regressor elsewhere in the
same period keeps it right as long as the equations can be put in an order where each uses only responses of
those before it: the Jacobian from errors to responses is then 1 (Lahiri & Schmidt 1978, Econometrica 46, on
triangular systems; cited from memory). In a loop it is not, and the coefficients would answer another question.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import DesignError
from bayes_sys.study.sources import Series, Sources
from bayes_sys.system.design import LARGEST_ROUNDING, ROUNDING, describe, listed, take_out
from bayes_sys.system.system import INTERCEPT, System

if TYPE_CHECKING:
    from bayes_sys.study.panel import Panel

Array = NDArray[np.float64]

SHOWN = 6
"""How many cases a note spells out before it counts the rest."""


@dataclass(frozen=True)
class Link:
    """One regressor that holds a response of the same period.

    Parameters
    ----------
    user, owner : int
        The equation that has the regressor, and the one whose response it holds; the same for a regressor made
        from its own equation's response.
    regressor, column : str
    """

    user: int
    owner: int
    regressor: str
    column: str


def find_links(system: System, panel: Panel, *, wide: bool) -> tuple[Link, ...]:
    """Return every use of a response in the same period, by lineage and by value.

    Parameters
    ----------
    system : System
    panel : Panel
        Where the system's columns come from.
    wide : bool
        Whether one name is one series (a row a period) or one in every unit.
    """
    return tuple(dict.fromkeys([*links_by_lineage(system, panel, wide=wide), *links_by_value(system)]))


def links_by_lineage(system: System, panel: Panel, *, wide: bool) -> list[Link]:
    """Return regressors made, without a lag, from the column that a response is made from.

    Of a response only the column it starts from counts: a deflator it is divided by may stand in any
    regressor.
    """
    sources = Sources(panel, wide)
    owners: dict[Series, list[int]] = {}
    for k, equation in enumerate(system.equations):
        for source in sources.same_period(equation.name, equation.response, main=True):
            owners.setdefault(source, []).append(k)
    found = []
    for i, equation in enumerate(system.equations):
        for name, column in zip(equation.regressors, equation.columns, strict=True):
            if name == INTERCEPT:
                continue
            held = sorted(sources.same_period(equation.name, column))
            found += [Link(i, k, name, column) for series in held for k in owners.get(series, ())]
    return found


def links_by_value(system: System) -> list[Link]:
    """Return regressors that are another response but for a constant and a factor, up to rounding.

    Works on the triangular factor, like the checks of the design.
    """
    with_intercept = [i for i, e in enumerate(system.equations) if e.has_intercept]
    if system.n_periods < 3:
        return []
    ones = system.factor.regressors(with_intercept[0])[:, 0] if with_intercept else None
    responses, response_noise = unit_columns(system.factor.responses(), ones)
    found = []
    for i, equation in enumerate(system.equations):
        columns, noise = unit_columns(system.factor.regressors(i), ones)
        along = columns.T @ responses
        for j, k in zip(*np.nonzero(np.abs(along) > 1.0 - LARGEST_ROUNDING), strict=True):
            apart = np.linalg.norm(columns[:, j] - along[j, k] * responses[:, k])
            limit = min(ROUNDING * max(noise[j], response_noise[k]), LARGEST_ROUNDING)
            if k != i and apart <= limit:
                found.append(Link(i, int(k), equation.regressors[j], equation.columns[j]))
    return found


def unit_columns(columns: Array, ones: Array | None) -> tuple[Array, Array]:
    """Return centred columns of unit length (0 where nothing is left), and how much rounding has grown."""
    sizes = np.linalg.norm(columns, axis=0)
    centred = columns if ones is None else take_out(columns, ones)[0]
    lengths = np.linalg.norm(centred, axis=0)
    alive = lengths > ROUNDING * sizes
    safe = np.where(alive, lengths, 1.0)
    return np.where(alive, centred / safe, 0.0), sizes / safe


def refuse_loops(system: System, links: Sequence[Link], *, where: str) -> None:
    """Refuse equations that use each other's responses of the same period in a circle.

    Raises
    ------
    DesignError
        Names the shortest circle and the regressors that close it.
    """
    loop = shortest_loop(links)
    if not loop:
        return
    quoted = [f"“{system.names[link.user]}”" for link in loop]
    regressors = [describe(link.regressor, link.column) for link in loop]
    if len(loop) == 2:
        what = (
            f"{quoted[0]} uses the response of {quoted[1]} in the same period (as {regressors[0]}), and the "
            f"other way round (as {regressors[1]})"
        )
    else:
        turns = [
            f"{one} that of {other} (as {regressor})"
            for one, other, regressor in zip(quoted, [*quoted[1:], quoted[0]], regressors, strict=True)
        ]
        what = f"responses of the same period are used in a circle: {listed(turns)}"
    raise DesignError(
        f"{what}: these are simultaneous equations, which this model does not estimate.",
        where=where,
        mend="Lag one of them in [derive] (steps = [{ lag = 1 }]), or leave it out.",
    )


def shortest_loop(links: Sequence[Link]) -> list[Link]:
    """Return the links of a shortest circle of two equations or more; empty if there is none."""
    outgoing: dict[int, dict[int, Link]] = {}
    for link in links:
        if link.user != link.owner:
            outgoing.setdefault(link.user, {}).setdefault(link.owner, link)
    best: list[Link] = []
    for start in outgoing:
        loop = loop_through(start, outgoing)
        if loop and (not best or len(loop) < len(best)):
            best = loop
        if len(best) == 2:
            break
    return best


def loop_through(start: int, outgoing: Mapping[int, Mapping[int, Link]]) -> list[Link]:
    """Return a shortest circle through one equation, found breadth first."""
    reached: dict[int, Link] = {}
    queue = deque([start])
    while queue:
        here = queue.popleft()
        for there, link in outgoing.get(here, {}).items():
            if there == start:
                path = [link]
                while path[0].user != start:
                    path.insert(0, reached[path[0].user])
                return path
            if there not in reached:
                reached[there] = link
                queue.append(there)
    return []


def link_notes(system: System, links: Sequence[Link]) -> tuple[str, ...]:
    """Return, in plain words, what same-period responses among the regressors mean for the results."""
    others = {(k.user, k.owner, k.regressor): k for k in links if k.user != k.owner}
    own = {(k.user, k.regressor): k for k in links if k.user == k.owner}
    notes = []
    if own:
        cases = [
            f"“{system.names[k.user]}” explains “{system.equations[k.user].response}” with "
            f"{describe(k.regressor, k.column)}"
            for k in own.values()
        ]
        notes.append(
            f"{counted(cases)}: both are made from the same column in the same period, so the response "
            "explains itself. A lag is what is usually meant."
        )
    if others:
        cases = [
            f"“{system.names[k.user]}” uses the response of “{system.names[k.owner]}” in the same period (as "
            f"{describe(k.regressor, k.column)})"
            for k in others.values()
        ]
        notes.append(
            f"{counted(cases)}. The posterior allows for this one-way chain, but least squares and two-step "
            "FGLS are not consistent here where the errors are correlated. The coefficient is told from that "
            "correlation only if the equation whose response is used has a regressor of its own; else the "
            "prior decides."
        )
    return tuple(notes)


def counted(cases: Sequence[str]) -> str:
    """Return cases as a list in a sentence, the rest counted."""
    rest = len(cases) - SHOWN
    return listed(cases) if rest <= 0 else f"{', '.join(cases[:SHOWN])} and so in {rest} more cases"
