"""What one check before sampling says."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

FINE, NOTE, WARNING = "fine", "note", "warning"

CROWDED = 3.0
"""Common practice: fewer free periods per equation than this leave a poorly determined error covariance."""

SIMULATED = "_simulated"
"""Ends the name of a check that asks what the one without it asks, by simulation."""

LABELS = {
    "periods": "periods per coefficient",
    "condition_number": "condition number",
    "variance_inflation": "variance inflation, largest",
    "exact_fit": "share of spread left to errors",
    "durbin_watson": "Durbin-Watson",
    "breusch_godfrey": "Breusch-Godfrey (p-value)",
    "heteroskedasticity": "heteroskedasticity (p-value)",
    "leverage": "leverage, largest",
    "cooks_distance": "Cook's distance, largest",
    "outlying_period": "studentised residual, largest",
}
"""What the figure of each check of one equation is, for a table of figures."""


@dataclass(frozen=True)
class Check:
    """One check of the data or the design that needs no sampling.

    Parameters
    ----------
    name : str
    equation : str
        The equation looked at; empty for the system as a whole.
    figure : float or None
        What was found; None where it could not be computed, which the sentence explains.
    threshold : float or None
        What the figure is held against; None where it is only information.
    verdict : {"fine", "note", "warning"}
        Nothing to do; to be known when reading the results; may mislead if not mended.
    sentence : str
        The finding and its consequence in plain words.
    """

    name: str
    equation: str
    figure: float | None
    threshold: float | None
    verdict: str
    sentence: str


def examination_rows(checks: Iterable[Check]) -> list[dict[str, Any]]:
    """Lay checks out for JSON: one mapping a check, None for a figure that is not finite."""
    return [
        {
            "name": c.name,
            "equation": c.equation,
            "figure": _finite(c.figure),
            "threshold": _finite(c.threshold),
            "verdict": c.verdict,
            "sentence": c.sentence,
        }
        for c in checks
    ]


def addressed(rows: Iterable[Mapping[str, Any]]) -> list[str]:
    """Return the sentences of checks, the equations they speak of in front, each said once.

    Parameters
    ----------
    rows : iterable of mappings
        As `examination_rows` lays them out.
    """
    said: dict[str, list[str]] = {}
    for row in rows:
        names = said.setdefault(row["sentence"], [])
        names += [row["equation"]] if row["equation"] else []
    return [f"{', '.join(names)}: {sentence}" if names else sentence for sentence, names in said.items()]


def for_people(rows: Iterable[Mapping[str, Any]]) -> list[Mapping[str, Any]]:
    """Leave out what another check says as well, so that a reader meets each finding once.

    A simulated test that has a figure names the p-value of its approximation too, and is the better of the two.

    Parameters
    ----------
    rows : iterable of mappings
        As `examination_rows` lays them out.
    """
    listed = list(rows)
    simulated = {(r.get("name"), r.get("equation")) for r in listed if r.get("figure") is not None}
    return [r for r in listed if (f"{r.get('name')}{SIMULATED}", r.get("equation")) not in simulated]


def number(value: float) -> str:
    """Write a number for a sentence: three figures that count."""
    if value == 0.0 or 1e-3 <= abs(value) < 1e5:
        return f"{value:.3g}" if abs(value) < 1000 else f"{value:.0f}"
    return f"{value:.1e}"


def p_value(value: float) -> str:
    """Write a p-value for a sentence."""
    return "p < 0.001" if value < 0.001 else f"p = {value:.3f}"


def counted(count: int, noun: str) -> str:
    """Write a count with its noun: 1 period, 2 periods."""
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


def _finite(value: float | None) -> float | None:
    return float(value) if value is not None and math.isfinite(value) else None
