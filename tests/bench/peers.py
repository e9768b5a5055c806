"""One run of one peer in this process; prints one line of JSON. Called by race.py."""

from __future__ import annotations

import argparse
import json
import os
import resource
import sys
import time
from pathlib import Path
from typing import Any

STARTED = float(os.environ.get("RACE_STARTED", time.time()))
sys.path[:0] = [str(Path(__file__).parents[1])]

import numpy as np  # noqa: E402


def data(n: int, periods: int, p: int) -> tuple[list[np.ndarray], np.ndarray]:
    """Invented: an intercept and p - 1 regressors in each equation, shocks with a common part."""
    rng = np.random.default_rng(12)
    designs = [np.column_stack([np.ones(periods), rng.normal(size=(periods, p - 1))]) for _ in range(n)]
    shocks = 0.7 * rng.normal(size=(periods, 1)) + 0.7 * rng.normal(size=(periods, n))
    return designs, np.column_stack([x @ np.linspace(1, -0.5, p) for x in designs]) + shocks


def ours(engine: str, designs: list[np.ndarray], responses: np.ndarray) -> dict[str, Any]:
    from helpers import make_system

    from bayes_sys.prior.cards import build_card
    from bayes_sys.sampling.engine import sample

    card = build_card(
        {
            "name": "race",
            "summary": "The prior of the race.",
            "scaled": False,
            "coefficients": {"family": "normal", "mean": 0.0, "scale": 2.0},
            "scales": {"family": "half_normal", "scale": 2.0},
            "correlation": {"family": "lkj", "concentration": 2.0},
        }
    )
    begun = time.perf_counter()
    tree = sample(make_system(designs, responses), card, engine=engine, seed=5)
    group = tree["posterior"]
    values = [group[name].values for name in ("coefficients", "scales", "correlations")]
    return {"values": values, "diverging": tree["sample_stats"]["diverging"].values, "begun": begun}


def by_hand(designs: list[np.ndarray], responses: np.ndarray) -> dict[str, Any]:
    import pymc as pm
    import pytensor.tensor as pt

    n, p = responses.shape[1], designs[0].shape[1]
    stacked = np.stack(designs)  # equation, period, regressor
    with pm.Model():
        coefficients = pm.Normal("coefficients", 0, 2, shape=(n, p))
        scales = pm.HalfNormal("scales", 2, shape=n)
        factor = pm.LKJCorr("factor", n=n, eta=2)
        mean = (stacked * coefficients[:, None, :]).sum(axis=2).T
        pm.MvNormal("y", mean, chol=scales[:, None] * factor, observed=responses)
        pm.Deterministic("correlation", pt.dot(factor, factor.T))
        begun = time.perf_counter()
        tree = pm.sample(random_seed=5, progressbar=False)
    group = tree["posterior"]
    low = np.tril_indices(n, -1)
    shape = group["coefficients"].shape[:2]
    values = [
        group["coefficients"].values.reshape(*shape, -1),
        group["scales"].values,
        group["correlation"].values[:, :, low[0], low[1]],
    ]
    return {"values": values, "diverging": tree["sample_stats"]["diverging"].values, "begun": begun}


def main() -> None:
    parser = argparse.ArgumentParser()
    parser.add_argument("peer", choices=("direct", "model", "by hand"))
    parser.add_argument("design", type=int, nargs=3, metavar=("EQUATIONS", "PERIODS", "REGRESSORS"))
    given = parser.parse_args()
    designs, responses = data(*given.design)
    if given.peer == "by hand":
        found = by_hand(designs, responses)
    else:
        found = ours({"direct": "direct", "model": "pymc"}[given.peer], designs, responses)
    total, sampling = time.time() - STARTED, time.perf_counter() - found["begun"]

    from bayes_sys.posterior.summary import convergence

    _, bulk, _ = convergence(np.concatenate(found["values"], axis=2))
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(
        json.dumps(
            {
                "total s": total,
                "compile and sample s": sampling,
                "fewest effective draws": float(np.nanmin(bulk)),
                "divergences": int(found["diverging"].sum()),
                "peak MB": memory,
            }
        )
    )


if __name__ == "__main__":
    main()
