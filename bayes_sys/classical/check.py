"""What one check before sampling says."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

FINE, NOTE, WARNING = "fine", "note", "warning"


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
