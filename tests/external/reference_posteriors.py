"""Small systems whose posterior is known, computed by algorithms that share no code with this package.

Three-dimensional quadrature with the coefficients integrated out (two equations), adaptive importance sampling
with up to a million draws otherwise; each confirmed by a separately written PyMC model of 4 x 10,000 draws.
"""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
from helpers import make_system

from bayes_sys.prior.cards import PriorCard, build_card
from bayes_sys.system.system import System

FOLDER = Path(__file__).parent / "posteriors"


def load(name: str) -> dict[str, Any]:
    return json.loads((FOLDER / f"{name}.json").read_text())


def reference_system(case: dict[str, Any]) -> System:
    names = [f"eq{i + 1}" for i in range(len(case["data"]["X"]))]
    designs = [np.array(x) for x in case["data"]["X"]]
    return make_system(designs, np.array(case["data"]["y"], dtype=float).T, names=names)


def reference_card(case: dict[str, Any], system: System) -> PriorCard:
    """The case's prior as a card of plain numbers on the raw scale."""
    lines = {}
    for i, equation in enumerate(system.equations):
        for k, regressor in enumerate(equation.regressors):
            mean, scale = case["prior"]["beta_mean"][i][k], case["prior"]["beta_sd"][i][k]
            lines[f"{equation.name}.{regressor}"] = {"mean": float(mean), "scale": float(scale)}
    scales = {
        name: {"scale": float(s)} for name, s in zip(system.names, case["prior"]["sd_scale"], strict=True)
    }
    return build_card(
        {
            "name": case["case"],
            "summary": "A reference prior.",
            "scaled": False,
            "coefficients": {"family": "normal", "mean": 0.0, "scale": 1.0, "of": lines},
            "scales": {"family": "half_normal", "scale": 1.0, "in": scales},
            "correlation": {"family": "lkj", "concentration": float(case["prior"]["eta"])},
        }
    )


def named_draws(posterior: Any, system: System) -> dict[str, np.ndarray]:
    """Draws by the reference's names, each of shape (n_chains, n_draws)."""
    group = posterior["posterior"]
    out, position = {}, 0
    for i, equation in enumerate(system.equations):
        out[f"sd[{i + 1}]"] = group["scales"].values[..., i]
        for k in range(len(equation.regressors)):
            out[f"beta[{i + 1}][{k + 1}]"] = group["coefficients"].values[..., position]
            position += 1
    for place, (a, b) in enumerate(system.pairs):
        out[f"corr[{a + 1},{b + 1}]"] = group["correlations"].values[..., place]
    return out
