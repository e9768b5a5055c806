"""A prior written back as a card on the raw scale, so that a run can be repeated from its own folder."""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import tomli_w

from bayes_sys.prior.cards import PriorCard, build_card
from bayes_sys.prior.law import CoefficientLaw, Prior, ScaleLaw
from bayes_sys.system.system import System


def effective_card(prior: Prior, system: System, card: PriorCard) -> PriorCard:
    """Return the card with ``scaled = false`` that says what a prior says.

    Parameters
    ----------
    prior : Prior
        As `resolve` made it from ``card`` and ``system``.
    system : System
    card : PriorCard
        Gives the name, and the tables that have no scale.

    Returns
    -------
    PriorCard
        Resolved against the same system it gives the same prior, digit for digit.
    """
    tables: dict[str, Any] = {
        "name": card.name,
        "summary": f"What the card “{card.name}” says for the data of this run, on their own scale.",
        "scaled": False,
        "coefficients": {"of": _coefficient_lines(prior.coefficients, system)},
        "scales": _scale_table(prior.scales, system),
        "correlation": {"family": "lkj", "concentration": float(prior.correlation.concentration)},
    }
    for name in ("autocorrelation", "tails"):
        table = getattr(card, name)
        if table is not None:
            tables[name] = table.model_dump()
    return build_card(tables, where="effective prior card")


def card_text(card: PriorCard) -> str:
    """Return a card as TOML that reads back to the same card, every number to the last bit."""
    return tomli_w.dumps(_without_gaps(card.model_dump(by_alias=True)))


def _without_gaps(table: dict[str, Any]) -> dict[str, Any]:
    """Leave out what was not said; keys before tables, general lines before particular ones."""
    kept = {
        key: _without_gaps(value) if isinstance(value, dict) else value
        for key, value in table.items()
        if value is not None
    }
    return {key: value for key, value in kept.items() if value != {} or key not in ("of", "in")}


def _coefficient_lines(law: CoefficientLaw, system: System) -> dict[str, dict[str, Any]]:
    """Return one line per pooled name and one per coefficient."""
    lines: dict[str, dict[str, Any]] = {}
    for group in law.groups:
        lines[group.name] = {
            "family": "pooled",
            "mean": float(group.mean),
            "mean_scale": float(group.mean_scale),
            "spread_scale": float(group.spread_scale),
        }
    for i, equation in enumerate(system.equations):
        block = system.slice_of(i)
        for k in range(block.start, block.stop):
            label = system.coefficient_labels[k]
            if law.pooled[k]:
                lines[label] = {"family": "pooled", "unit": float(law.to_raw[k, k])}
            else:
                lines[label] = {
                    "family": "normal",
                    "mean": float(law.mean[k]),
                    "scale": float(law.scale[k]),
                }
        if equation.has_intercept:
            point = _point(law, block, equation.regressors)
            lines[system.coefficient_labels[block.start]] |= {"at": point} if point else {}
    return lines


def _point(law: CoefficientLaw, block: slice, regressors: Iterable[str]) -> dict[str, float]:
    """Return where an intercept is stated, read off the map from stated to raw coefficients."""
    rows = law.to_raw[block, block]
    names = list(regressors)
    points = {name: float(-rows[0, j] / rows[j, j]) for j, name in enumerate(names) if j > 0}
    return {name: value for name, value in points.items() if value != 0.0}


def _scale_table(law: ScaleLaw, system: System) -> dict[str, Any]:
    """Return the lines of the error scales; what all share stands on the general line."""
    size = {"half_normal": "scale", "half_student_t": "scale", "exponential": "mean", "lognormal": "median"}
    shape = {"half_student_t": "df", "lognormal": "spread"}
    lines: dict[str, dict[str, Any]] = {}
    for name, family, first, second in zip(system.names, law.family, law.size, law.shape, strict=True):
        line: dict[str, Any] = {"family": family, size[family]: float(first)}
        if family in shape:
            line[shape[family]] = float(second)
        lines[name] = line
    everyone = list(lines.values())
    shared = {k: v for k, v in everyone[0].items() if all(line.get(k) == v for line in everyone)}
    if "family" not in shared:
        return {"in": lines}
    own = {name: {k: v for k, v in line.items() if k not in shared} for name, line in lines.items()}
    return {**shared, "in": {name: line for name, line in own.items() if line}}
