"""Make the invented data of this case: ``losses.csv``, ``economy.csv`` and ``truth.json``.

Run ``python case_studies/credit_segments/make_data.py [FOLDER]``; without a folder the files go beside this
script. The same files come out byte for byte each time: the economy is rounded as it is written before
the losses are computed from it, so the truth holds exactly for the figures in the tables.
"""

from __future__ import annotations

import csv
import io
import json
import sys
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

SEED = 20_250_411
QUARTERS = [f"{year}-Q{quarter}" for year in range(2014, 2024) for quarter in range(1, 5)]
# The economy is known one quarter longer, so that the first change of unemployment is known too.
ECONOMY_QUARTERS = ["2013-Q4", *QUARTERS]

SEGMENTS = ("cards", "motor", "homes", "shops", "workshops", "farms")
REGRESSORS = ("intercept", "unemployment_change", "rate_spread")

# One row per segment, one column per regressor: log of the loss rate in percent, on percentage points.
COEFFICIENTS = np.array(
    [
        [0.98, 0.28, 0.11],
        [0.05, 0.22, 0.09],
        [-1.42, 0.34, 0.15],
        [0.31, 0.25, 0.13],
        [0.12, 0.18, 0.16],
        [-0.66, 0.07, 0.08],
    ]
)
# Standard deviations of the shocks to the log loss rate: 0.12 is about twelve per cent.
SCALES = np.array([0.09, 0.12, 0.17, 0.13, 0.15, 0.21])
# Every shock is loading * (one factor that all share) + the segment's own part, in units of its scale.
LOADINGS = np.array([0.80, 0.75, 0.55, 0.85, 0.70, 0.15])

Array = NDArray[np.float64]


def correlation() -> Array:
    """Return the correlation of the shocks that the loadings imply."""
    out = np.outer(LOADINGS, LOADINGS)
    np.fill_diagonal(out, 1.0)
    return out


def make_unemployment(rng: np.random.Generator) -> Array:
    """Unemployment in percent: it drifts back to its level, with one recession in the seventh year."""
    start = ECONOMY_QUARTERS.index("2020-Q2")
    level, change, path = 6.2, 0.0, []
    for t in range(len(ECONOMY_QUARTERS)):
        push = {0: 1.3, 1: 0.9, 2: 0.3}.get(t - start, 0.0)
        change = 0.4 * change + 0.06 * (5.4 - level) + push + rng.normal(0.0, 0.14)
        level += change
        path.append(level)
    return np.round(np.array(path), 1)


def make_spread(rng: np.random.Generator) -> Array:
    """Lending rate less policy rate, percentage points: slow, never below 0.6."""
    start = ECONOMY_QUARTERS.index("2020-Q1")
    gap, path = 0.0, []
    for t in range(len(ECONOMY_QUARTERS)):
        gap = 0.75 * gap + rng.normal(0.0, 0.22) + {0: 0.7, 1: 0.5}.get(t - start, 0.0)
        path.append(max(0.6, 2.1 + gap))
    return np.round(np.array(path), 2)


def make_losses(rng: np.random.Generator, unemployment: Array, spread: Array) -> Array:
    """Annualised loss rates in percent, from the truth and shocks with a common factor."""
    change = np.diff(unemployment)
    factor = rng.standard_normal(len(QUARTERS))
    own = rng.standard_normal((len(QUARTERS), len(SEGMENTS)))
    shocks = SCALES * (factor[:, None] * LOADINGS + own * np.sqrt(1.0 - LOADINGS**2))
    intercept, on_change, on_spread = COEFFICIENTS.T
    return np.exp(intercept + np.outer(change, on_change) + np.outer(spread[1:], on_spread) + shocks)


def table_text(header: list[str], quarters: list[str], columns: list[list[str]]) -> str:
    """Return a table as CSV, one row per quarter."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(header)
    writer.writerows(zip(quarters, *columns, strict=True))
    return out.getvalue()


def truth_text() -> str:
    """Return what the data were made from, as JSON."""
    truth = {
        "what": "Invented: the numbers losses.csv was made from.",
        "seed": SEED,
        "equations": SEGMENTS,
        "coefficients": {
            f"{segment}.{regressor}": COEFFICIENTS[i, k]
            for i, segment in enumerate(SEGMENTS)
            for k, regressor in enumerate(REGRESSORS)
        },
        "scales": dict(zip(SEGMENTS, SCALES, strict=True)),
        "correlation": np.round(correlation(), 12).tolist(),
    }
    return json.dumps(truth, indent=2) + "\n"


def main(folder: Path) -> None:
    """Write the three files into a folder."""
    rng = np.random.default_rng(SEED)
    unemployment, spread = make_unemployment(rng), make_spread(rng)
    losses = make_losses(rng, unemployment, spread)
    loss_columns = [[f"{v:.3f}" for v in column] for column in losses.T]
    economy = [[f"{v:.1f}" for v in unemployment], [f"{v:.2f}" for v in spread]]
    texts = {
        "losses.csv": table_text(["quarter", *(f"{s}_loss" for s in SEGMENTS)], QUARTERS, loss_columns),
        "economy.csv": table_text(["quarter", "unemployment", "rate_spread"], ECONOMY_QUARTERS, economy),
        "truth.json": truth_text(),
    }
    for name, text in texts.items():
        (folder / name).write_text(text, encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
