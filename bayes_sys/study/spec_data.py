"""The parts of a study file that speak about data and equations."""

from __future__ import annotations

import math
from typing import Any, Literal, Self

from pydantic import Field, field_validator, model_validator

from bayes_sys.errors import nearest
from bayes_sys.study.spec_base import (
    PLACEHOLDER,
    Flag,
    Name,
    Part,
    PeriodValue,
    Text,
    Whole,
    fault,
    show,
)

PLAIN_STEPS = ("log", "exp", "logit", "diff", "standardise")
COUNT_STEPS = ("lag", "rolling_mean")
NUMBER_STEPS = ("scale", "center", "power")
COLUMN_STEPS = ("times", "over", "plus", "minus")
STEPS = PLAIN_STEPS + COUNT_STEPS + NUMBER_STEPS + COLUMN_STEPS
ALSO_CALLED = {
    "ln": '"log"',
    "loge": '"log"',
    "difference": '"diff"',
    "delta": '"diff"',
    "standardize": '"standardise"',
    "zscore": '"standardise"',
    "sqrt": "{ power = 0.5 }",
    "square": "{ power = 2 }",
    "inverse": "{ power = -1 }",
    "shift": "{ lag = 1 }",
    "moving_average": "{ rolling_mean = 4 }",
    "demean": "{ center = 10 }",
    "multiply": '{ times = "other column" }',
    "divide": '{ over = "other column" }',
    "add": '{ plus = "other column" }',
    "subtract": '{ minus = "other column" }',
}
"""What steps are called elsewhere (common practice), with how they are written here."""
INTERCEPT = "intercept"


class CsvOptions(Part):
    """How a csv file is written.

    Attributes
    ----------
    separator : str
        One character between cells.
    decimal : str
        "." or ",".
    missing : tuple of str
        Cells that mean “not observed”.
    """

    separator: str = ","
    decimal: Literal[".", ","] = "."
    missing: tuple[str, ...] = ("", "NA", "NaN", "nan")

    @field_validator("separator")
    @classmethod
    def _one_character(cls, value: str) -> str:
        if len(value) != 1 or value in '"\r\n':
            raise fault(f"found {show(value)}, expected one character.", mend='Such as "," ";" or "\\t".')
        return value

    @model_validator(mode="after")
    def _apart(self) -> Self:
        if self.separator == self.decimal:
            raise fault(f"separator and decimal are both {show(self.decimal)}.", mend="They must differ.")
        return self


class SharedTable(Part):
    """A further table by period alone: columns that all units share."""

    file: Text
    period: Text
    csv: CsvOptions | None = None
    """None: written like the main table."""
    sheet: Text | None = None


class DataSpec(Part):
    """Where the data are and how they are laid out.

    ``file`` may be absent when a table is given in Python. ``unit`` absent means wide layout.
    """

    file: Text | None = None
    period: Text
    unit: Text | None = None
    units: tuple[Name, ...] | None = None
    from_: PeriodValue | None = Field(default=None, alias="from")
    to: PeriodValue | None = None
    exclude: tuple[PeriodValue, ...] = ()
    csv: CsvOptions = CsvOptions()
    sheet: Text | None = None
    shared: tuple[SharedTable, ...] = ()

    @property
    def is_wide(self) -> bool:
        """Whether each row is a period, with one column per equation."""
        return self.unit is None

    @model_validator(mode="after")
    def _sensible(self) -> Self:
        if self.units is not None:
            if not self.units:
                raise fault("the list is empty.", mend="Name a unit, or leave it out.", path=("units",))
            check_distinct(self.units, "the unit", ("units",))
        if self.unit == self.period:
            raise fault(f"unit and period are the same column {show(self.unit)}.", path=("unit",))
        return self


class Step(Part):
    """One derivation step: ``"log"`` or ``{ lag = 1 }``."""

    name: str
    argument: Any = None

    @model_validator(mode="before")
    @classmethod
    def _parse(cls, value: Any) -> Any:
        if isinstance(value, Step):
            return {"name": value.name, "argument": value.argument}
        if isinstance(value, str):
            return _plain_step(value)
        if not isinstance(value, dict) or len(value) != 1:
            raise fault(
                f"found {show(value)}, expected a step.",
                mend='Write a name such as "log", or one key and its value such as { lag = 1 }.',
            )
        name, argument = next(iter(value.items()))
        return _step_with_argument(str(name), argument)


def _plain_step(name: str) -> dict[str, Any]:
    if name in PLAIN_STEPS:
        return {"name": name}
    if name in STEPS:
        example = '"other column"' if name in COLUMN_STEPS else "2"
        raise fault(f"the step “{name}” needs a value.", mend=f"Write {{ {name} = {example} }}.")
    raise _unknown_step(name)


def _unknown_step(name: str) -> Exception:
    """Return the fault for a step that is not there: what is meant where that can be told, else all there are."""
    spelt = name.lower().replace("-", "_")
    hint = f"Write {ALSO_CALLED[spelt]}." if spelt in ALSO_CALLED else nearest(name, STEPS)
    if hint.startswith("Known"):
        hint = f"The steps are {', '.join(STEPS)}."
    return fault(f"there is no step “{name}”.", mend=hint)


def _step_with_argument(name: str, argument: Any) -> dict[str, Any]:
    if name in PLAIN_STEPS:
        raise fault(f"the step “{name}” takes no value.", mend=f'Write "{name}".')
    if name not in STEPS:
        raise _unknown_step(name)
    if name in COLUMN_STEPS:
        if not isinstance(argument, str) or not argument.strip():
            raise fault(f"found {show(argument)}, expected the name of a column.", path=(name,))
        return {"name": name, "argument": argument}
    number = isinstance(argument, (int, float)) and not isinstance(argument, bool)
    if name in COUNT_STEPS:
        least = 1 if name == "lag" else 2
        if not number or not isinstance(argument, int) or argument < least:
            raise fault(
                f"found {show(argument)}, expected a whole number of periods, at least {least}.", path=(name,)
            )
        return {"name": name, "argument": argument}
    zero_allowed = name == "center"
    if not number or not math.isfinite(argument) or (argument == 0 and not zero_allowed):
        wanted = "a finite number" if zero_allowed else "a finite number other than 0"
        raise fault(f"found {show(argument)}, expected {wanted}.", path=(name,))
    return {"name": name, "argument": float(argument)}


class DeriveSpec(Part):
    """One new column: a source with steps, or a column of its own."""

    from_: Text | None = Field(default=None, alias="from")
    steps: tuple[Step, ...] = ()
    of_unit: Name | None = None
    trend: Flag | None = None
    season: Whole | None = None
    pulse: PeriodValue | None = None
    step_from: PeriodValue | None = None

    @model_validator(mode="after")
    def _one_form(self) -> Self:
        own = [k for k in ("trend", "season", "pulse", "step_from") if getattr(self, k) is not None]
        forms = own + (["from"] if self.from_ is not None else [])
        if len(forms) != 1:
            found = "nothing that says where the column comes from" if not forms else " and ".join(forms)
            raise fault(
                f"found {found}; expected exactly one of from, trend, season, pulse, step_from.",
                mend='Such as { from = "demand", steps = ["log"] }.',
            )
        if own and (self.steps or self.of_unit is not None):
            extra = "steps" if self.steps else "of_unit"
            raise fault(f"“{extra}” goes with “from”, not with “{own[0]}”.", path=(extra,))
        if self.from_ is not None and not self.steps and self.of_unit is None:
            raise fault("the list of steps is missing or empty.", mend='Such as steps = ["log"].')
        return self

    @field_validator("trend")
    @classmethod
    def _true(cls, value: bool | None) -> bool | None:
        if value is False:
            raise fault("found false, expected true.", mend="Leave the line out if you want no trend.")
        return value

    @field_validator("season")
    @classmethod
    def _several(cls, value: int | None) -> int | None:
        if value is not None and not 2 <= value <= 366:
            raise fault(f"found {value}, expected the number of seasons in a cycle, 2 to 366.")
        return value


class Regressor(Part):
    """A regressor: its name, and the column it comes from (the same unless said otherwise)."""

    name: Text
    column: Text

    @model_validator(mode="before")
    @classmethod
    def _parse(cls, value: Any) -> Any:
        if isinstance(value, str):
            # Checked here already, so that the message's path ends at the list's place, as the file has it.
            if not value.strip():
                raise fault("this text is empty.", mend="Write the name of a column.")
            check_regressor_name(value)
            return {"name": value, "column": value}
        if isinstance(value, dict) and "name" in value and "column" not in value:
            return {**value, "column": value["name"]}
        if not isinstance(value, (dict, Regressor)):
            raise fault(
                f"found {show(value)}, expected a column.",
                mend='Write "column", or { name = "heat", column = "{equation}_heat" }.',
            )
        return value

    @field_validator("name")
    @classmethod
    def _usable(cls, value: str) -> str:
        check_regressor_name(value)
        return value


def check_regressor_name(name: str) -> None:
    """Refuse a regressor's name that could not be told from a coefficient's or the constant term's."""
    if "." in name:
        raise fault(
            f"the regressor's name “{name}” has a dot; names such as “equation.regressor” need the dot.",
            mend=f'Name it, such as {{ name = "{name.replace(".", "_")}", column = "{name}" }}.',
        )
    if not name.isprintable():
        raise fault(
            f"the regressor's name {name!r} holds a line break, a tab or another sign that cannot be shown.",
            mend='Give it a name of its own, such as { name = "heat", column = "…" }.',
        )
    if name == INTERCEPT:
        raise fault(
            "the name “intercept” is reserved for the constant term.",
            mend="Choose another name; intercept = true adds the constant term.",
        )


def check_distinct(names: tuple[str, ...], what: str, path: tuple[str, ...] = ()) -> None:
    """Refuse a list that names something twice."""
    for i, name in enumerate(names):
        if name in names[:i]:
            raise fault(f"{what} “{name}” is listed twice.", mend="Take one out.", path=(*path, i))


class EquationSpec(Part):
    """What one equation says for itself; None where it keeps the defaults of every equation."""

    response: Text | None = None
    regressors: tuple[Regressor, ...] | None = None
    intercept: Flag | None = None

    @field_validator("regressors")
    @classmethod
    def _distinct(cls, value: tuple[Regressor, ...] | None) -> tuple[Regressor, ...] | None:
        if value is not None:
            check_distinct(tuple(r.name for r in value), "the regressor")
        return value

    @model_validator(mode="after")
    def _not_itself(self) -> Self:
        for i, r in enumerate(self.regressors or ()):
            if r.column == self.response:
                raise fault(
                    f"the response “{self.response}” stands among its own regressors.",
                    mend="Take it out, or use a lag of it made in [derive].",
                    path=("regressors", i),
                )
        return self


def has_placeholder(name: str | None) -> bool:
    """Whether a column name is written with ``{equation}``."""
    return name is not None and PLACEHOLDER in name
