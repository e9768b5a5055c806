"""The prior card: one TOML file that says what is thought before the data are seen.

::

    name, summary, scaled
    [coefficients]                          all of them
    [coefficients.of.REGRESSOR]             like-named regressors in all equations (also of."*.REGRESSOR")
    [coefficients.in.EQUATION]              all of one equation
    [coefficients.of."EQUATION.REGRESSOR"]  one coefficient
    [scales], [scales.in.EQUATION]          error standard deviations
    [correlation]                           cross-equation correlation
    [autocorrelation], [tails]              used only where the study asks for them

Lines win in the order they stand in above, the later over the earlier, key by key: where ``of.REGRESSOR``
and ``in.EQUATION`` both speak of a coefficient, ``in.EQUATION`` wins. ``family`` is a key like any other; a
line that changes the family drops the inherited keys that the new family does not know. A line that names no
family may only carry keys of the family it inherits.

Keys of the families (a number in brackets is what a key is worth when no line gives it):

======================  ==================================================================================
coefficients            ``normal``: mean (0), scale; ``student_t``: df, mean (0), scale; ``pooled``: see below
scales                  ``half_normal``: scale; ``half_student_t``: df, scale; ``exponential``: mean;
                        ``lognormal``: median, spread (standard deviation of the logarithm)
correlation             ``lkj``: concentration
autocorrelation         ``normal``: mean (0), scale (0.5), limit (0.95): each coefficient stays in
                        (−limit, limit)
tails                   ``gamma``: shape (2), rate (0.1): law of the degrees of freedom, cut off below 2
======================  ==================================================================================

``pooled``: coefficients of one name share a mean and a spread. ``mean`` (0) and ``mean_scale``: the shared
mean is normal with this mean and standard deviation. ``spread_scale``: the spread of the members around the
shared mean is half-normal with this scale. ``unit`` (1): a member is stated in multiples of this. All members
of one name must agree in mean, mean_scale and spread_scale. ``pooled`` on ``[coefficients]`` or on an
``in.EQUATION`` line speaks of slopes only; an intercept is pooled only where ``[coefficients.of.intercept]``
or ``[coefficients.of."EQUATION.intercept"]`` says so itself (it then takes up what the wider lines say).

``at``, on an intercept's line of a card with ``scaled = false``: a table from regressor to value, the point
where the intercept's prior is stated; a regressor that is left out stands at 0. It is one key: a more
particular line replaces it as a whole.
"""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, Self

from pydantic import BaseModel, ConfigDict, Field, PrivateAttr, ValidationError, model_validator

from bayes_sys.errors import CardError, nearest
from bayes_sys.prior.complaints import Complaint, card_error, heading_of, written_in
from bayes_sys.prior.families import FAMILIES_OF_TABLE
from bayes_sys.shipped import card_names, priors_folder

if TYPE_CHECKING:
    from bayes_sys.study.spec import Study

INTERCEPT = "intercept"

Number = Annotated[float, Field(allow_inf_nan=False)]
Positive = Annotated[float, Field(gt=0, allow_inf_nan=False)]
Inside = Annotated[float, Field(gt=0, le=1, allow_inf_nan=False)]


class _Table(BaseModel):
    """Whatever stands between two headings of a card; nothing unknown, nothing changed afterwards."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, populate_by_name=True)

    family: str | None = None

    @property
    def given(self) -> dict[str, float]:
        """The numbers that stand on this line itself."""
        names = type(self).model_fields
        values = {name: getattr(self, name) for name in names}
        return {name: value for name, value in values.items() if isinstance(value, float)}

    def _check_family(self, table: str) -> None:
        families = FAMILIES_OF_TABLE[table]
        if self.family is None:
            return
        if self.family not in families:
            raise Complaint(
                f"“{self.family}” is not a family of [{table}].", nearest(self.family, families), key="family"
            )
        known = families[self.family].keys
        for key in self.given:
            if key not in known:
                raise Complaint(
                    f"“{key}” is not a key of the family “{self.family}”.", nearest(key, known), key=key
                )


class CoefficientLine(_Table):
    """What one line of ``[coefficients]`` says; None where it says nothing."""

    mean: Number | None = None
    scale: Positive | None = None
    df: Positive | None = None
    mean_scale: Positive | None = None
    spread_scale: Positive | None = None
    unit: Positive | None = None
    at: dict[str, Number] | None = None

    @model_validator(mode="after")
    def _known_family(self) -> Self:
        self._check_family("coefficients")
        return self


class CoefficientTable(CoefficientLine):
    """``[coefficients]`` with its more particular lines.

    ``of`` holds both kinds of line: a name without a dot is a regressor, one with a dot a coefficient (a
    regressor's name has no dot, an equation's may).
    """

    of: dict[str, CoefficientLine] = Field(default_factory=dict)
    in_equation: dict[str, CoefficientLine] = Field(default_factory=dict, alias="in")

    @model_validator(mode="before")
    @classmethod
    def _plain_names(cls, data: Any) -> Any:
        if not isinstance(data, Mapping) or not isinstance(data.get("of"), Mapping):
            return data
        for label, line in data["of"].items():
            _check_quoted(label, line)
            if label.startswith("*.") and label[2:] in data["of"]:
                raise Complaint(
                    f"of.{label[2:]} and of.“{label}” are the same line, written twice.", "Keep one of them."
                )
        return {**data, "of": _without_stars(data["of"])}

    @model_validator(mode="after")
    def _at_only_on_intercepts(self) -> Self:
        lines: dict[str, CoefficientLine] = {"": self}
        lines |= {f"in.{name}": line for name, line in self.in_equation.items()}
        slopes = {name: line for name, line in self.of.items() if name.rpartition(".")[2] != INTERCEPT}
        lines |= {f"of.{name}": line for name, line in slopes.items()}
        for where, line in lines.items():
            if line.at is not None:
                raise Complaint(
                    f"“at” stands on the line “{where or 'coefficients'}”, but only an intercept's prior is "
                    "stated at a point.",
                    "Move it to [coefficients.of.intercept] or to the line of one equation's intercept.",
                    key="at",
                )
        return self


class ScaleLine(_Table):
    """What one line of ``[scales]`` says; None where it says nothing."""

    scale: Positive | None = None
    df: Positive | None = None
    mean: Positive | None = None
    median: Positive | None = None
    spread: Positive | None = None

    @model_validator(mode="after")
    def _known_family(self) -> Self:
        self._check_family("scales")
        return self


class ScaleTable(ScaleLine):
    """``[scales]`` with the lines of single equations."""

    in_equation: dict[str, ScaleLine] = Field(default_factory=dict, alias="in")


class CorrelationTable(_Table):
    """``[correlation]``."""

    family: str = "lkj"
    concentration: Positive

    @model_validator(mode="after")
    def _known_family(self) -> Self:
        self._check_family("correlation")
        return self


class AutocorrelationTable(_Table):
    """``[autocorrelation]``: normal, cut off outside (−limit, limit)."""

    family: str = "normal"
    mean: Number = 0.0
    scale: Positive = 0.5
    limit: Inside = 0.95

    @model_validator(mode="after")
    def _known_family(self) -> Self:
        self._check_family("autocorrelation")
        return self


class TailsTable(_Table):
    """``[tails]``: the errors' degrees of freedom, cut off below 2 (gamma(2, 0.1): Juarez & Steel 2010)."""

    family: str = "gamma"
    shape: Positive = 2.0
    rate: Positive = 0.1

    @model_validator(mode="after")
    def _known_family(self) -> Self:
        self._check_family("tails")
        return self


class PriorCard(BaseModel):
    """A prior card, read and validated."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True)

    name: str
    summary: str = ""
    scaled: bool = False
    coefficients: CoefficientTable
    scales: ScaleTable
    correlation: CorrelationTable
    autocorrelation: AutocorrelationTable | None = None
    tails: TailsTable | None = None
    _laid_over: Mapping[str, Any] = PrivateAttr(default_factory=dict)
    _study: str = PrivateAttr(default="")

    def place(self, path: tuple[str, ...], key: str = "") -> str:
        """Return where a line (and a key of it) stands, for messages: in the card, or the study laid over it."""
        if self._study and written_in(self._laid_over, (*path, key) if key else path):
            return f"{self._study}, {heading_of(('prior', *path))}"
        return f"prior card “{self.name}”, {heading_of(path)}"

    @model_validator(mode="after")
    def _no_point_in_a_scaled_card(self) -> Self:
        if self.scaled and any(line.at is not None for line in self.coefficients.of.values()):
            raise Complaint(
                "The card has scaled = true and an “at”; a scaled card states every intercept where the "
                "regressors stand at their means.",
                "Take the “at” out, or write the whole card on the raw scale with scaled = false.",
            )
        return self


def _without_stars(lines: Mapping[str, Any]) -> dict[str, Any]:
    """Call ``*.heat`` what it stands for, ``heat``; leave it where both are there, for the check to find."""
    return {
        label.removeprefix("*.") if label.removeprefix("*.") not in lines else label: line
        for label, line in lines.items()
    }


def _check_quoted(label: str, line: Any) -> None:
    """Catch ``[coefficients.of.alder.x]``, which TOML reads as a table inside a table."""
    if not isinstance(line, Mapping):
        return
    inner = [key for key, value in line.items() if isinstance(value, Mapping) and key != "at"]
    if inner:
        raise Complaint(
            f"[coefficients.of.{label}.{inner[0]}] is a table inside a table.",
            f'Put the coefficient in quotes: [coefficients.of."{label}.{inner[0]}"].',
        )


def build_card(data: Mapping[str, Any], *, where: str = "prior card") -> PriorCard:
    """Validate a card that is given as nested mappings.

    Parameters
    ----------
    data : mapping
        The card's tables, as ``tomllib`` gives them.
    where : str
        Where the card comes from, for messages.

    Returns
    -------
    PriorCard

    Raises
    ------
    CardError
        An unknown key or family, a key of another family, a missing table, a number out of range.
    """
    try:
        return PriorCard.model_validate(dict(data))
    except ValidationError as problem:
        raise card_error(problem, data, where) from None


def read_card(name_or_path: str | Path, *, folder: Path | None = None) -> PriorCard:
    """Read a prior card.

    Parameters
    ----------
    name_or_path : str or Path
        The name of a card that comes with the package, else a path.
    folder : Path, optional
        What a relative path is relative to; the working directory by default.

    Returns
    -------
    PriorCard

    Raises
    ------
    CardError
        No such card, a file that is not TOML, or a card that does not validate.
    """
    path = _find(name_or_path, folder)
    return build_card(_load(path), where=path.name)


def study_card(study: Study) -> PriorCard:
    """Read the card a study names, with the study's own overrides laid over it.

    Parameters
    ----------
    study : Study
        ``study.prior.card`` is a name or a path relative to ``study.folder``; ``study.prior.overrides`` holds
        tables of the card, which win key by key.

    Returns
    -------
    PriorCard

    Raises
    ------
    CardError
        As in `read_card`; the message says whether the study or the card is at fault.
    """
    path = _find(study.prior.card, study.folder, where=study.at("prior.card"))
    data = _load(path)
    overrides = dict(study.prior.overrides)
    if not overrides:
        return build_card(data, where=path.name)
    merged = _lay_over(data, overrides, ())
    try:
        card = PriorCard.model_validate(merged)
    except ValidationError as problem:
        raise card_error(problem, merged, path.name, overrides=overrides, study=study.label) from None
    card._laid_over, card._study = overrides, study.label
    return card


def _lay_over(base: Mapping[str, Any], top: Mapping[str, Any], path: tuple[str, ...]) -> dict[str, Any]:
    """Lay one nest of tables over another, key by key; a new family drops the keys it does not know."""
    if path == ("coefficients", "of"):
        base, top = _without_stars(base), _without_stars(top)
    merged = dict(base)
    families = FAMILIES_OF_TABLE.get(path[0], {}) if path else {}
    family = families.get(top.get("family", ""))
    if family is not None and top["family"] != base.get("family", top["family"]):
        merged = {k: v for k, v in base.items() if isinstance(v, Mapping) or k in family.keys}
    for key, value in top.items():
        below = base.get(key)
        if isinstance(value, Mapping) and isinstance(below, Mapping):
            value = _lay_over(below, value, (*path, key))
        merged[key] = value
    return merged


def _find(name_or_path: str | Path, folder: Path | None, where: str = "") -> Path:
    """Return the file behind a card's name or path."""
    text = str(name_or_path)
    if text in card_names():
        return priors_folder() / f"{text}.toml"
    path = (folder or Path()) / Path(text).expanduser()
    if path.is_file():
        return path
    raise CardError(
        f"There is no prior card “{text}”: neither one that comes with the package, nor a file {path}.",
        where=where,
        mend=nearest(text, card_names()) + " A path is relative to the file that names it.",
    )


def _load(path: Path) -> dict[str, Any]:
    """Parse a card's TOML; a card without a name is called after its file."""
    try:
        data = tomllib.loads(path.read_text(encoding="utf-8-sig"))
    except UnicodeDecodeError as problem:
        raise CardError(
            f"The file is not UTF-8 text (byte {problem.start}).",
            where=path.name,
            mend="Save it as UTF-8.",
        ) from None
    except tomllib.TOMLDecodeError as problem:
        raise CardError(
            f"The file is not valid TOML: {problem}.", where=path.name, mend="Mend the line it names."
        ) from None
    except OSError as problem:
        raise CardError(
            f"The file cannot be read: {problem.strerror}.", where=path.name, mend="Check its permissions."
        ) from None
    return {"name": path.stem, **data}
