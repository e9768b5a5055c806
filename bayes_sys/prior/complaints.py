"""From what the validator found to one message a user can act on."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from pydantic import ValidationError

from bayes_sys.errors import CardError, nearest
from bayes_sys.prior.families import FAMILIES_OF_TABLE

CARD_KEYS = ("name", "summary", "scaled", *FAMILIES_OF_TABLE)

_EXPECTED = {
    "float_type": "a number was expected",
    "string_type": "a text in quotes was expected",
    "bool_type": "true or false was expected",
    "model_type": "a table was expected",
    "model_attributes_type": "a table was expected",
    "dict_type": "a table was expected",
    "finite_number": "a finite number was expected",
}


class Complaint(ValueError):
    """What a check of our own found; becomes a CardError with the place added.

    Parameters
    ----------
    what, mend : str
        As in CardError.
    key : str
        The key at fault, if there is one below the place where the check stands.
    """

    def __init__(self, what: str, mend: str, *, key: str = "") -> None:
        self.what, self.mend, self.key = what, mend, key
        super().__init__(what)


def card_error(
    problem: ValidationError,
    data: Mapping[str, Any],
    where: str,
    *,
    overrides: Mapping[str, Any] | None = None,
    study: str = "",
) -> CardError:
    """Return the first thing that is wrong with a card, as one message.

    Parameters
    ----------
    problem : ValidationError
        What the validator raised.
    data : mapping
        The card's tables.
    where : str
        The card's file.
    overrides : mapping, optional
        The study's own tables; a key that stands there is said to stand in the study.
    study : str
        How messages call the study.
    """
    # An unknown key is reported before what its absence under the right name causes.
    found = sorted(problem.errors(), key=lambda e: e["type"] != "extra_forbidden")[0]
    path = tuple(str(part) for part in found["loc"])
    complaint = found.get("ctx", {}).get("error")
    full = (*path, complaint.key) if isinstance(complaint, Complaint) and complaint.key else path
    in_study = overrides is not None and bool(full) and written_in(overrides, full)
    what, mend = _sentences(found, path, data, ("prior",) if in_study else ())
    table, key = (full[:-1], full[-1]) if _is_leaf(data, full) else (full, "")
    heading = heading_of(("prior", *table) if in_study else table)
    parts = [study if in_study else where, heading, key]
    return CardError(what, where=", ".join(part for part in parts if part), mend=mend)


def heading_of(path: tuple[str, ...]) -> str:
    """Return a TOML heading, quoted where TOML needs it; empty for the top of the file."""
    bare = [p if p.replace("_", "").replace("-", "").isalnum() and p.isascii() else f'"{p}"' for p in path]
    return f"[{'.'.join(bare)}]" if bare else ""


def _sentences(
    found: Any, path: tuple[str, ...], data: Mapping[str, Any], above: tuple[str, ...]
) -> tuple[str, str]:
    """Return what was found and the mend for one entry of the validator's list.

    ``above``: headings that the card's tables stand under, where they are written.
    """
    kind, value = found["type"], found.get("input")
    error = found.get("ctx", {}).get("error")
    if isinstance(error, Complaint):
        return error.what, error.mend
    if kind == "extra_forbidden":
        hint = nearest(path[-1], _known_keys(path[:-1], data))
        if isinstance(value, Mapping) and not hint.startswith("Did"):
            hint = f"{hint} {_right_heading(path, above)}".strip()
        return f"“{path[-1]}” is not a key that belongs here.", hint
    if kind == "missing":
        return _missing(path)
    if kind in ("greater_than", "less_than_equal"):
        limits = found["ctx"]
        expected = f"above {limits['gt']:g}" if "gt" in limits else f"at most {limits['le']:g}"
        return f"{value} was found, a number {expected} was expected.", "Change the number."
    expected = _EXPECTED.get(kind, found["msg"])
    return f"{value!r} was found, {expected}.", "Change the value."


def _right_heading(path: tuple[str, ...], above: tuple[str, ...]) -> str:
    """Return where a line belongs that stands directly under its table; empty if it does not."""
    if len(path) != 2 or path[0] not in ("coefficients", "scales"):
        return ""
    table, name = path
    equation = heading_of((*above, table, "in", name))
    if table == "scales":
        return f"For the errors of one equation write {equation}."
    return f"For a regressor write {heading_of((*above, table, 'of', name))}, for an equation {equation}."


def _missing(path: tuple[str, ...]) -> tuple[str, str]:
    if len(path) == 1:
        return f"The table [{path[0]}] is missing.", f"Add it, with a family: {_families(path[0])}."
    return f"“{path[-1]}” is missing.", "Add it."


def _families(table: str) -> str:
    return ", ".join(f"“{name}”" for name in FAMILIES_OF_TABLE[table])


def _known_keys(path: tuple[str, ...], data: Mapping[str, Any]) -> list[str]:
    """Return the keys that may stand under a heading."""
    if not path:
        return list(CARD_KEYS)
    families = FAMILIES_OF_TABLE[path[0]]
    line: Any = data
    for part in path:
        line = line.get(part, {}) if isinstance(line, Mapping) else {}
    family = line.get("family") if isinstance(line, Mapping) else None
    chosen = [families[family]] if family in families else list(families.values())
    keys = list(dict.fromkeys(key for one in chosen for key in one.keys))
    lines = {"coefficients": ["of", "in"], "scales": ["in"]}.get(path[0], []) if len(path) == 1 else []
    return ["family", *keys, *lines]


def written_in(data: Mapping[str, Any], path: tuple[str, ...]) -> bool:
    """Return whether a path of keys exists in nested mappings; ``of."*.heat"`` is ``of.heat``."""
    here: Any = data
    for i, part in enumerate(path):
        if isinstance(here, Mapping) and i and path[i - 1] == "of" and part not in here:
            part = f"*.{part}"
        if not isinstance(here, Mapping) or part not in here:
            return False
        here = here[part]
    return True


def _is_leaf(data: Mapping[str, Any], path: tuple[str, ...]) -> bool:
    """Return whether a path ends at a key (present or missing) rather than at a table."""
    here: Any = data
    for part in path:
        if not isinstance(here, Mapping) or part not in here:
            return bool(path) and len(path) > 1
        here = here[part]
    return bool(path) and not isinstance(here, Mapping)
