"""Make the invented data of this case: ``demand.csv`` and ``truth.json``.

Run ``python case_studies/district_water/make_data.py [FOLDER]``; without a folder the files go beside this
script. The same files come out byte for byte each time: regressors are rounded as they are written
before the demand is computed from them, so the truth holds exactly for the figures in the table.
"""

from __future__ import annotations

import csv
import io
import json
import sys
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

SEED = 20_250_318
YEARS = range(2004, 2022)

DISTRICTS = ("ottermill", "saltlow", "brackhythe", "tarnfold", "quillmere")
REGRESSORS = ("intercept", "log_tariff", "heat", "log_connections")

# One row per district, one column per regressor. Elasticities of the tariff scatter a little around -0.3.
COEFFICIENTS = np.array(
    [
        [-0.62, -0.33, 0.017, 0.94],
        [-0.38, -0.27, 0.021, 0.88],
        [-0.71, -0.30, 0.024, 0.91],
        [-0.15, -0.37, 0.014, 0.86],
        [-0.52, -0.24, 0.019, 0.92],
    ]
)
# Standard deviations of the shocks to log demand: 0.03 is about three per cent.
SCALES = np.array([0.024, 0.031, 0.027, 0.038, 0.033])
# The first three districts lie on one catchment, the last two elsewhere.
CORRELATION = np.array(
    [
        [1.00, 0.70, 0.70, 0.05, 0.20],
        [0.70, 1.00, 0.70, 0.00, 0.10],
        [0.70, 0.70, 1.00, 0.10, -0.15],
        [0.05, 0.00, 0.10, 1.00, 0.40],
        [0.20, 0.10, -0.15, 0.40, 1.00],
    ]
)
FIRST_CONNECTIONS = (62.0, 34.0, 88.0, 21.0, 47.0)  # thousands
YEARLY_GROWTH = (0.012, 0.008, 0.018, 0.004, 0.014)
FIRST_TARIFF = (1.62, 1.48, 1.85, 1.36, 1.71)  # per cubic metre, in the money of 2021
LOCAL_SUMMER = (24.1, 22.8, 25.0, 21.6, 23.7)  # mean daily maximum, June to August, degrees Celsius

Array = NDArray[np.float64]


def make_tariffs(rng: np.random.Generator) -> Array:
    """Tariffs by year and district: left alone for some years, when inflation eats them, then raised."""
    table = np.empty((len(YEARS), len(DISTRICTS)))
    for i, first in enumerate(FIRST_TARIFF):
        level = first
        for t in range(len(YEARS)):
            revised = rng.random() < 0.38
            level *= np.exp(rng.uniform(0.04, 0.16) if revised else -rng.uniform(0.015, 0.035))
            table[t, i] = level
    return np.round(table, 2)


def make_heat(rng: np.random.Generator) -> Array:
    """Summer temperatures: one weather for all districts, and a little of their own."""
    common = 0.04 * np.arange(len(YEARS)) + rng.normal(0.0, 1.1, len(YEARS))
    own = rng.normal(0.0, 0.5, (len(YEARS), len(DISTRICTS)))
    return np.round(np.array(LOCAL_SUMMER) + common[:, None] + own, 1)


def make_connections(rng: np.random.Generator) -> Array:
    """Connections in thousands: growth that comes in building years and pauses."""
    growth = np.array(YEARLY_GROWTH) * rng.gamma(1.0, 1.0, (len(YEARS), len(DISTRICTS)))
    return np.round(np.array(FIRST_CONNECTIONS) * np.exp(np.cumsum(growth, axis=0)), 1)


def make_demand(rng: np.random.Generator, tariff: Array, heat: Array, connections: Array) -> Array:
    """Demand in megalitres a day, from the truth and correlated shocks."""
    root = np.linalg.cholesky(CORRELATION)
    shocks = rng.standard_normal((len(YEARS), len(DISTRICTS))) @ root.T * SCALES
    intercept, on_tariff, on_heat, on_connections = COEFFICIENTS.T
    log_demand = (
        intercept
        + on_tariff * np.log(tariff)
        + on_heat * heat
        + on_connections * np.log(connections)
        + shocks
    )
    return np.exp(log_demand)


def table_text(tariff: Array, heat: Array, connections: Array, demand: Array) -> str:
    """Return the table as CSV, long layout: one row per district and year."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(["district", "year", "demand", "tariff", "heat", "connections"])
    for i, district in enumerate(DISTRICTS):
        for t, year in enumerate(YEARS):
            figures = [f"{demand[t, i]:.3f}", f"{tariff[t, i]:.2f}", f"{heat[t, i]:.1f}"]
            writer.writerow([district, year, *figures, f"{connections[t, i]:.1f}"])
    return out.getvalue()


def truth_text() -> str:
    """Return what the data were made from, as JSON."""
    truth = {
        "what": "Invented: the numbers demand.csv was made from.",
        "seed": SEED,
        "equations": DISTRICTS,
        "coefficients": {
            f"{district}.{regressor}": COEFFICIENTS[i, k]
            for i, district in enumerate(DISTRICTS)
            for k, regressor in enumerate(REGRESSORS)
        },
        "scales": dict(zip(DISTRICTS, SCALES, strict=True)),
        "correlation": CORRELATION.tolist(),
    }
    return json.dumps(truth, indent=2) + "\n"


def main(folder: Path) -> None:
    """Write both files into a folder."""
    rng = np.random.default_rng(SEED)
    tariff, heat, connections = make_tariffs(rng), make_heat(rng), make_connections(rng)
    demand = make_demand(rng, tariff, heat, connections)
    table = table_text(tariff, heat, connections, demand)
    (folder / "demand.csv").write_text(table, encoding="utf-8", newline="\n")
    (folder / "truth.json").write_text(truth_text(), encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
