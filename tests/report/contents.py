"""Whole runs for the tests of the page, made without a sampler."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from helpers import make_system
from trees import make_tree

from bayes_sys.classical.estimators import benchmark_table, classical_estimates
from bayes_sys.posterior import checks, tables
from bayes_sys.report.content import RunContent

STUDY = """title = "Five made-up units"
[every_equation]
response = "log_output"
"""


def make_content(
    names=("north", "south", "east"),
    *,
    n_periods=24,
    regressors=("intercept", "price", "heat"),
    n_draws=50,
    prior_sd=10.0,
    periods=None,
    seed=3,
    manifest=None,
):
    """Make a run: responses from drawn regressors, shared shocks, tables by the package's own functions."""
    rng = np.random.default_rng(seed)
    n = len(names)
    designs = [
        np.column_stack([np.ones(n_periods), rng.normal(size=(n_periods, len(regressors) - 1))])
        for _ in names
    ]
    common = rng.normal(size=(n_periods, 1))
    errors = 0.7 * common + 0.7 * rng.normal(size=(n_periods, n))
    truth = np.array([3.0, *(-0.5 + 0.4 * np.arange(len(regressors) - 1))])
    responses = np.column_stack([d @ truth for d in designs]) + 0.3 * errors
    system = make_system(designs, responses, names, [regressors] * n, periods=periods)
    correlation = np.full((n, n), 0.5) + 0.5 * np.eye(n)
    tree = make_tree(
        system, scales=np.full(n, 0.3), correlation=correlation, n_draws=n_draws, prior_sd=prior_sd
    )
    return content_of(system, tree, manifest=manifest)


def content_of(system, tree, *, manifest=None):
    benchmark = classical_estimates(system)
    return RunContent(
        manifest={**MANIFEST, **(manifest or {}), "reasons": dict(benchmark.reasons)},
        study=STUDY,
        card='name = "weakly-informative"\n',
        examination=EXAMINATION,
        tables={
            "coefficients": tables.coefficient_table(tree, system, benchmark=benchmark),
            "scales": tables.scale_table(tree, system, benchmark=benchmark),
            "correlations": tables.correlation_table(tree, system, benchmark=benchmark),
            "fitted": tables.fitted_table(tree, system),
            "equations": tables.equation_table(tree, system),
            "benchmark": benchmark_table(benchmark, system),
            "checks": checks.predictive_checks(tree, system, 1),
        },
        prior_words=("Before the data are seen, every slope lies within ±3.9.",),
    )


def failed(content):
    """Return the same run with a gate that it did not pass."""
    gate = {
        **MANIFEST["gate"],
        "passed": False,
        "rhat_max": 1.31,
        "failures": ["The chains have not mixed: R-hat is 1.310."],
        "advice": ["Let the chains run longer."],
    }
    return replace(content, manifest={**content.manifest, "status": "gate-failed", "gate": gate})


EXAMINATION = (
    {
        "name": "periods",
        "equation": "",
        "figure": 24,
        "threshold": 5,
        "verdict": "fine",
        "sentence": "Enough.",
    },
    {
        "name": "collinear",
        "equation": "north",
        "figure": 41.0,
        "verdict": "note",
        "sentence": "Move together.",
    },
    {
        "name": "collinear",
        "equation": "south",
        "figure": 43.0,
        "verdict": "note",
        "sentence": "Move together.",
    },
    {"name": "late", "equation": "", "figure": None, "verdict": "warning", "sentence": "Something is amiss."},
)

MANIFEST = {
    "status": "complete",
    "title": "Five made-up units",
    "created": "2026-12-01T10:00:00+00:00",
    "seed": 1,
    "chains": 4,
    "warmup": 1000,
    "draws": 1000,
    "engine": "direct",
    "versions": {"bayes_sys": "0.1.0", "numpy": "2.5.0"},
    "timings": {"sample": 1.5},
    "study_sha256": "a" * 64,
    "data_sha256": {"data.csv": "b" * 64},
    "command": "bayes-sys run study.toml",
    "card": {"name": "weakly-informative", "summary": "The usual start."},
    "attempts": 1,
    "gate": {
        "passed": True,
        "rhat_max": 1.003,
        "ess_bulk_min": 2100.0,
        "ess_tail_min": 1900.0,
        "divergences": 0,
        "bfmi_min": 0.95,
        "limits": {"rhat": 1.01, "ess": 1000, "divergences": 0},
        "failures": [],
        "advice": [],
    },
    "notes": ["Period 7 was left out."],
    "prior_words": [],
}
