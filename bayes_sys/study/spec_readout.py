"""The parts of a study file that speak about errors, prior, read-outs, forecasts and sampling."""

from __future__ import annotations

import copy
from typing import Annotated, Any, Literal, Self

from pydantic import Field, field_validator, model_validator

from bayes_sys.study.spec_base import Label, Name, Number, Part, Text, Whole, fault, show
from bayes_sys.study.spec_data import check_distinct

CARD_TABLES = ("coefficients", "scales", "correlation", "autocorrelation", "tails")


class ErrorsSpec(Part):
    """The law of the errors."""

    family: Literal["gaussian", "student_t"] = "gaussian"
    autocorrelation: Literal["none", "ar1"] = "none"


class PriorSpec(Part):
    """The prior card, and the tables of it that this study overrides (kept as written)."""

    card: Text = "weakly-informative"
    coefficients: dict[str, Any] | None = None
    scales: dict[str, Any] | None = None
    correlation: dict[str, Any] | None = None
    autocorrelation: dict[str, Any] | None = None
    tails: dict[str, Any] | None = None

    @property
    def overrides(self) -> dict[str, Any]:
        """A copy of the overriding tables, by name; only those that the study holds."""
        return {k: copy.deepcopy(getattr(self, k)) for k in CARD_TABLES if getattr(self, k) is not None}


class RestrictionSpec(Part):
    """A restriction on coefficients: equal, signed, or a weighted sum with a given value."""

    equal: tuple[Label, ...] | None = None
    sign: Literal["negative", "positive"] | None = None
    on: tuple[Label, ...] | None = None
    weights: dict[Label, Number] | None = None
    value: Number | None = None

    @model_validator(mode="after")
    def _one_form(self) -> Self:
        given = frozenset(
            k for k in ("equal", "sign", "on", "weights", "value") if getattr(self, k) is not None
        )
        if given not in ({"equal"}, {"sign", "on"}, {"weights", "value"}):
            found = ", ".join(sorted(given)) or "nothing"
            raise fault(
                f"found {found}; expected equal, or sign and on, or weights and value.",
                mend="Write one [[restriction]] for each restriction.",
            )
        if self.equal is not None:
            check_distinct(self.equal, "the coefficient", ("equal",))
            if len(self.equal) < 2 and not any(x.startswith("*.") for x in self.equal):
                raise fault("expected at least two coefficients.", path=("equal",))
        if self.on is not None and not self.on:
            raise fault("the list is empty.", mend="Name the coefficients.", path=("on",))
        if self.weights is not None:
            _check_weights(self.weights)
        return self


def _check_weights(weights: dict[str, float]) -> None:
    if not weights or not any(weights.values()):
        raise fault("expected at least one weight other than 0.", path=("weights",))


class ContrastSpec(Part):
    """A weighted sum of coefficients to be reported."""

    name: Text
    weights: dict[Label, Number]
    above: Number | None = None
    inside: tuple[Number, Number] | None = None

    @model_validator(mode="after")
    def _sensible(self) -> Self:
        _check_weights(self.weights)
        if self.inside is not None and self.inside[0] >= self.inside[1]:
            raise fault("expected the lower end first.", path=("inside",))
        return self


class ScenarioSpec(Part):
    """A future: a file of regressors, or the last values held."""

    file: Text | None = None
    hold: Literal["last"] | None = None
    periods: Annotated[Whole, Field(ge=1, le=10_000)] | None = None
    known: dict[str, Number] | Text | None = None

    @field_validator("known", mode="before")
    @classmethod
    def _known(cls, value: Any) -> Any:
        return _numbers_or(value, str, "a table of numbers by equation, or the name of a file")

    @model_validator(mode="after")
    def _one_form(self) -> Self:
        if (self.file is None) == (self.hold is None):
            raise fault('expected either file, or hold = "last" with periods.')
        if self.hold is not None and self.periods is None:
            raise fault("hold needs the number of periods.", mend="Such as periods = 4.")
        if self.file is not None and self.periods is not None:
            raise fault("periods goes with hold; a file says its own periods.", path=("periods",))
        return self


class WeightColumn(Part):
    """Weights of an aggregate that are read from a column, period by period."""

    column: Text


class AggregateSpec(Part):
    """A weighted sum over equations, period by period; ``weights`` are numbers, or a column."""

    weights: dict[str, Number] | WeightColumn
    transform: Literal["undo", "exp", "none"] = "none"

    @field_validator("weights", mode="before")
    @classmethod
    def _weights(cls, value: Any) -> Any:
        if isinstance(value, dict) and set(value) == {"column"} and isinstance(value["column"], str):
            return WeightColumn(column=value["column"])
        checked = _numbers_or(value, WeightColumn, 'numbers by equation, or { column = "exposure" }')
        if isinstance(checked, dict) and not any(checked.values()):
            raise fault("expected at least one weight other than 0.")
        return checked


def _numbers_or(value: Any, other: type, wanted: str) -> Any:
    """Return a table of numbers or a value of another type; checked here so that a fault has one path."""
    if value is None or isinstance(value, other):
        return value
    if not isinstance(value, dict):
        raise fault(f"found {show(value)}, expected {wanted}.")
    for key, number in value.items():
        if isinstance(number, bool) or not isinstance(number, (int, float)):
            raise fault(f"found {show(number)}, expected a number.", path=(str(key),))
    return value


class RiskSpec(Part):
    """Quantile and expected-shortfall levels, and which tail hurts."""

    levels: tuple[Annotated[Number, Field(gt=0, lt=1)], ...] = (0.95, 0.99)
    loss: Literal["high", "low"] = "high"

    @field_validator("levels")
    @classmethod
    def _some(cls, value: tuple[float, ...]) -> tuple[float, ...]:
        if not value:
            raise fault("the list is empty.", mend="Such as levels = [0.95, 0.99].")
        return value


class SamplingSpec(Part):
    """How much to sample; R-hat needs two chains or more."""

    chains: Annotated[Whole, Field(ge=2, le=64)] = 4
    warmup: Annotated[Whole, Field(ge=50, le=1_000_000)] = 1000
    draws: Annotated[Whole, Field(ge=10, le=10_000_000)] = 1000
    seed: Annotated[Whole, Field(ge=0, lt=2**32)] = 1


class GateSpec(Part):
    """What a posterior must meet before its numbers are shown as results."""

    rhat: Annotated[Number, Field(gt=1, le=2)] = 1.01
    ess: Annotated[Number, Field(ge=0)] = 1000
    divergences: Annotated[Whole, Field(ge=0)] = 0


class CompareSpec(Part):
    """The cards that ``compare`` lays side by side."""

    cards: tuple[Name, ...] = ()

    @field_validator("cards")
    @classmethod
    def _distinct(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        check_distinct(value, "the card")
        return value
