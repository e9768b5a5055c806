"""The study: what the user wrote, as typed objects. It computes nothing."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from pydantic import Field, field_validator

from bayes_sys.study.spec_base import Name, Number, Part, Text, fault
from bayes_sys.study.spec_data import (
    CsvOptions,
    DataSpec,
    DeriveSpec,
    EquationSpec,
    Regressor,
    SharedTable,
    Step,
)
from bayes_sys.study.spec_readout import (
    AggregateSpec,
    CompareSpec,
    ContrastSpec,
    ErrorsSpec,
    GateSpec,
    PriorSpec,
    RestrictionSpec,
    RiskSpec,
    SamplingSpec,
    ScenarioSpec,
    WeightColumn,
)

__all__ = [
    "AggregateSpec",
    "CompareSpec",
    "ContrastSpec",
    "CsvOptions",
    "DataSpec",
    "DeriveSpec",
    "EquationSpec",
    "ErrorsSpec",
    "GateSpec",
    "PriorSpec",
    "Regressor",
    "RestrictionSpec",
    "RiskSpec",
    "SamplingSpec",
    "ScenarioSpec",
    "SharedTable",
    "Step",
    "Study",
    "StudyFile",
    "WeightColumn",
]


class StudyFile(Part):
    """The whole study file."""

    title: str = ""
    data: DataSpec
    derive: dict[Name, DeriveSpec] = Field(default_factory=dict)
    every_equation: EquationSpec = EquationSpec()
    equation: dict[Name, EquationSpec] = Field(default_factory=dict)
    errors: ErrorsSpec = ErrorsSpec()
    prior: PriorSpec = PriorSpec()
    restriction: tuple[RestrictionSpec, ...] = ()
    contrast: tuple[ContrastSpec, ...] = ()
    scenario: dict[Name, ScenarioSpec] = Field(default_factory=dict)
    aggregate: dict[Name, AggregateSpec] = Field(default_factory=dict)
    risk: RiskSpec | None = None
    threshold: dict[Text, Number] = Field(default_factory=dict)
    sampling: SamplingSpec = SamplingSpec()
    gate: GateSpec = GateSpec()
    compare: CompareSpec = CompareSpec()

    @field_validator("contrast")
    @classmethod
    def _names_differ(cls, value: tuple[ContrastSpec, ...]) -> tuple[ContrastSpec, ...]:
        names = [c.name for c in value]
        for i, name in enumerate(names):
            if name in names[:i]:
                raise fault(f"two contrasts are called “{name}”.", mend="Rename one.", path=(i, "name"))
        return value


class Study(StudyFile):
    """A study, and where it came from.

    Attributes
    ----------
    source : Path or None
        The study file; None for a study made in Python.
    folder : Path
        Paths in the study are relative to this folder.
    text : str
        The exact content of the file; encoded as UTF-8 it gives the bytes back. "" from Python.
    content : dict
        The plain values the study was made from.
    """

    source: Path | None = None
    folder: Path = Path()
    text: str = ""
    content: dict[str, Any] = Field(default_factory=dict, repr=False)

    @property
    def label(self) -> str:
        """How messages call this study."""
        return self.source.name if self.source is not None else "study given in Python"

    def at(self, key: str) -> str:
        """Return the place of a key, for messages."""
        return f"{self.label}, {key}"
