"""What all parts of a study file are made of: the base model, scalar types, and faults with a mend."""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Mapping
from typing import Annotated, Any

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field, Strict
from pydantic_core import PydanticCustomError

PLACEHOLDER = "{equation}"


class Part(BaseModel):
    """A table of the study file: frozen, and closed to keys it does not know."""

    model_config = ConfigDict(frozen=True, extra="forbid", populate_by_name=False)


def fault(what: str, *, mend: str = "", path: tuple[str | int, ...] = ()) -> PydanticCustomError:
    """Return the error that a validator raises.

    Parameters
    ----------
    what : str
        What was found and what was expected.
    mend : str
        What to do about it.
    path : tuple of str or int
        Keys and positions below the value being validated.
    """
    return PydanticCustomError("fault", "{what}", {"what": what, "mend": mend, "path": path})


def show(value: object) -> str:
    """Return a value as a user would write it in TOML, shortened when long."""
    if isinstance(value, bool):
        text = "true" if value else "false"
    elif isinstance(value, str):
        text = f"“{value}”"
    elif isinstance(value, Mapping):
        text = "a table"
    elif isinstance(value, (list, tuple)):
        text = "a list" if value else "an empty list"
    else:
        text = str(value)
    return text if len(text) <= 60 else text[:57] + "…"


def _text(value: str) -> str:
    if not value.strip():
        raise fault("this text is empty.", mend="Write a name.")
    return value


def _name(value: Any) -> Any:
    # Units are often numbered: units = [1, 2] means the units written 1 and 2.
    return str(value) if isinstance(value, int) and not isinstance(value, bool) else value


def _finite(value: float) -> float:
    if not math.isfinite(value):
        raise fault(f"found {value}, expected a finite number.")
    return value


def _period(value: Any) -> int | str | dt.date:
    if isinstance(value, dt.datetime):
        if value.time() != dt.time():
            raise fault(f"found the time {value}, expected a period.", mend="Write the date alone.")
        return value.date()
    if isinstance(value, bool) or not isinstance(value, (int, str, dt.date)):
        raise fault(
            f"found {show(value)}, expected a period.",
            mend="Write a whole number, a date, or text such as “2024-Q3” or “2024-07”.",
        )
    return _text(value) if isinstance(value, str) else value


def _label(value: str) -> str:
    if "." not in value.strip(".") or PLACEHOLDER in value:
        raise fault(
            f"found {show(value)}, expected the name of a coefficient.",
            mend="Write “equation.regressor”, or “*.regressor” for that regressor in every equation.",
        )
    return value


Text = Annotated[str, Strict(), AfterValidator(_text)]
Name = Annotated[Text, BeforeValidator(_name)]
Flag = Annotated[bool, Strict()]
Whole = Annotated[int, Strict()]
Number = Annotated[float, Strict(), AfterValidator(_finite)]
PeriodValue = Annotated[Any, AfterValidator(_period)]
Label = Annotated[Text, AfterValidator(_label)]
Positive = Annotated[Number, Field(gt=0)]


def expand(pattern: str, equation: str) -> str:
    """Return a column name with ``{equation}`` replaced by the equation's name."""
    return pattern.replace(PLACEHOLDER, equation)
