"""Whether a posterior and a system belong together, asked before any table is made of them."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

from bayes_sys.errors import InputError
from bayes_sys.system.system import System

NEEDED = ("coefficients", "scales")


def check_match(posterior: Any, system: Any) -> None:
    """Refuse anything but a posterior and the very system it was drawn for.

    Parameters
    ----------
    posterior : DataTree
    system : System

    Raises
    ------
    InputError
        If one of the two is something else, they stand the other way round, or the posterior's coefficients and
        equations are not the system's.
    """
    if isinstance(posterior, System):
        raise InputError(
            "the system stands where the posterior is expected.",
            mend="The posterior comes first, then the system.",
        )
    if not isinstance(system, System):
        raise InputError(
            f"a System is expected beside the posterior, not {_kind(system)}.",
            mend="It is what build_system returns.",
        )
    if not _is_posterior(posterior):
        raise InputError(
            f"draws of {' and '.join(NEEDED)} in a group “posterior” are expected, not {_kind(posterior)}.",
            mend="They are what sample returns.",
        )
    group = posterior["posterior"]
    for dimension, labels in (("equation", system.names), ("coefficient", system.coefficient_labels)):
        found = [str(label) for label in group[dimension].values]
        if found != list(labels):
            raise InputError(
                f"this posterior belongs to another system: {_difference(dimension, found, labels)}.",
                mend="Take the system that was sampled.",
            )


def _is_posterior(value: Any) -> bool:
    children = getattr(value, "children", ())
    return "posterior" in children and all(name in value["posterior"] for name in NEEDED)


def _difference(noun: str, found: Sequence[str], wanted: Sequence[str]) -> str:
    """Say where two lists of labels first differ."""
    if len(found) != len(wanted):
        return f"it has {len(found)} {noun}s, the system {len(wanted)}"
    ours, theirs = next(pair for pair in zip(found, wanted, strict=True) if pair[0] != pair[1])
    return f"its {noun} “{ours}” stands where the system has “{theirs}”"


def _kind(value: Any) -> str:
    return f"a {type(value).__name__}"
