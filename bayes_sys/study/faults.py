"""From the validator's error to one message: file, key as in TOML, found and expected, the mend."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any, get_args, get_origin

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from bayes_sys.errors import StudyError, nearest
from bayes_sys.study.spec_base import show

_BARE = re.compile(r"[A-Za-z0-9_-]+")

UNBUILT = ("restriction", "contrast", "scenario", "aggregate", "risk", "threshold")
"""Sections that are read and checked, but that this version can do nothing with."""

_EXPECTED = {
    "string_type": "text in quotes",
    "int_type": "a whole number",
    "int_from_float": "a whole number",
    "float_type": "a number",
    "bool_type": "true or false",
    "bool_parsing": "true or false",
    "tuple_type": "a list, written [ … ]",
    "list_type": "a list, written [ … ]",
    "dict_type": "a table",
    "model_type": "a table",
    "model_attributes_type": "a table",
}
_BOUND = {
    "greater_than": ("more than", "gt"),
    "greater_than_equal": ("at least", "ge"),
    "less_than": ("less than", "lt"),
    "less_than_equal": ("at most", "le"),
}


def key_path(parts: tuple[str | int, ...]) -> str:
    """Return a path as it reads in TOML: ``equation.alder.regressors[1].column``."""
    text = ""
    for part in parts:
        if isinstance(part, int):
            text += f"[{part}]"
            continue
        key = part if _BARE.fullmatch(part) else '"' + part.replace("\\", "\\\\").replace('"', '\\"') + '"'
        text += f".{key}" if text else key
    return text


def known_keys(model: type[BaseModel], parts: tuple[str | int, ...]) -> list[str]:
    """Return the keys that the table at a path may have; empty where keys are free."""
    current: type[BaseModel] | None = model
    free = 0  # how many of the next parts are positions or free keys
    for part in parts:
        if free:
            free -= 1
            continue
        if current is None:
            return []
        annotation = _fields(current).get(str(part))
        if annotation is None:
            return []
        current, free = _inner(annotation)
    return list(_fields(current)) if current is not None and not free else []


def _fields(model: type[BaseModel]) -> dict[str, Any]:
    return {(f.alias or name): f.annotation for name, f in model.model_fields.items()}


def _inner(annotation: Any) -> tuple[type[BaseModel] | None, int]:
    """Return the model inside an annotation and how many container levels lie around it."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation, 0
    level = 1 if get_origin(annotation) in (tuple, list, dict, Mapping) else 0
    for argument in get_args(annotation):
        found, depth = _inner(argument)
        if found is not None:
            return found, depth + level
    return None, level


def study_error(error: ValidationError, model: type[BaseModel], label: str) -> StudyError:
    """Return one StudyError for a failed validation.

    An unknown key is told first: a misspelt key usually also makes another one missing.
    """
    details = error.errors(include_url=False)
    details.sort(key=lambda d: d["type"] != "extra_forbidden")
    first = details[0]
    parts = _parts(first)
    what, mend = _say(first, model, parts)
    others = [key_path(_parts(d)) for d in details[1:] if _parts(d) != parts]
    if others:
        shown = ", ".join(dict.fromkeys(others[:4]))
        mend = f"{mend} Also to mend: {shown}{' …' if len(others) > 4 else ''}.".strip()
    if parts and parts[0] in UNBUILT:
        mend = f"{mend} Mending it is not enough: this version cannot do [{parts[0]}] yet, so take it out.".strip()
    path = key_path(parts)
    return StudyError(what, where=f"{label}, {path}" if path else label, mend=mend)


def _parts(detail: ErrorDetails) -> tuple[str | int, ...]:
    loc = tuple(p for p in detail["loc"] if p != "[key]")
    # Branches of a union leave their own mark at the end of the path; it is no key of the file.
    while loc and isinstance(loc[-1], str) and ("[" in loc[-1] and loc[-1].endswith("]") and "-" in loc[-1]):
        loc = loc[:-1]
    extra = detail.get("ctx", {}).get("path", ()) if detail["type"] == "fault" else ()
    return (*loc, *extra)


def _say(detail: ErrorDetails, model: type[BaseModel], parts: tuple[str | int, ...]) -> tuple[str, str]:
    kind, context, found = detail["type"], detail.get("ctx", {}), show(detail["input"])
    if kind == "fault":
        return context["what"], context["mend"]
    if kind == "extra_forbidden":
        return f"there is no key “{parts[-1]}” here.", nearest(str(parts[-1]), known_keys(model, parts[:-1]))
    if kind == "missing":
        table = key_path(parts[:-1])
        return "this key is missing.", f"Add it to [{table}]." if table else "Add it."
    if kind in _EXPECTED:
        return f"found {found}, expected {_EXPECTED[kind]}.", ""
    if kind in _BOUND:
        words, key = _BOUND[kind]
        return f"found {found}, expected {words} {context[key]}.", ""
    if kind == "literal_error":
        choices = re.findall(r"'([^']*)'", str(context["expected"]))
        hint = nearest(str(detail["input"]), choices)
        expected = " or ".join(f"“{c}”" for c in choices)
        return f"found {found}, expected {expected}.", hint if hint.startswith("Did") else ""
    return f"found {found}: {detail['msg']}.", ""
