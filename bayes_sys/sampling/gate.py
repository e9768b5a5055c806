"""The gate: the conditions a posterior must meet before its numbers are shown as results.

Rank-normalised R-hat and bulk and tail effective sample size (Vehtari, Gelman, Simpson, Carpenter & Bürkner 2021,
Bayesian Analysis 16, 667-718), no divergent transitions, and the energy diagnostic (Betancourt 2016,
arXiv:1604.00695: a fraction below 0.3 says that the chains move too slowly between energy levels).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.posterior.summary import convergence
from bayes_sys.prior.cards import PriorCard
from bayes_sys.sampling.engine import EngineName, sample
from bayes_sys.sampling.progress import Progress, Watcher
from bayes_sys.system.system import System

if TYPE_CHECKING:
    import xarray as xr

Array = NDArray[np.float64]

LEAST_BFMI = 0.3
REPORTED = ("coefficients", "scales", "correlations", "pooled_mean", "pooled_spread")
SECOND_WARMUP, SECOND_DRAWS, SECOND_TARGET = 2, 2, 0.99


@dataclass(frozen=True)
class Limits:
    """What is demanded: highest R-hat, least effective sample size, most divergent transitions."""

    rhat: float = 1.01
    ess: float = 1000
    divergences: int = 0


@dataclass(frozen=True)
class Verdict:
    """The gate's answer.

    Parameters
    ----------
    passed : bool
    figures : dict
        ``rhat_max``, ``ess_bulk_min``, ``ess_tail_min`` (NaN if nothing moves), ``divergences``, ``bfmi_min``,
        and the names of the quantities that stand worst.
    failures, advice : tuple of str
        In plain words; empty when passed.
    """

    passed: bool
    figures: dict[str, float | int | str]
    failures: tuple[str, ...]
    advice: tuple[str, ...]


@dataclass(frozen=True)
class Outcome:
    """A posterior and what the gate says of it, after as many attempts as were made."""

    posterior: xr.DataTree
    verdict: Verdict
    attempts: int


def hold(posterior: xr.DataTree, limits: Limits) -> Verdict:
    """Hold a posterior against the gate: everything that is reported and every free hyperparameter."""
    figures = _figures(posterior)
    failures, advice = [], []
    if not figures["rhat_max"] <= limits.rhat:
        failures.append(
            f"The chains have not mixed: R-hat is {figures['rhat_max']:.3f} for {figures['rhat_worst']}, "
            f"at most {limits.rhat:g} is allowed."
        )
        advice.append("Let the chains run longer (--warmup, --draws).")
    for part in ("bulk", "tail"):
        least = figures[f"ess_{part}_min"]
        if not least >= limits.ess:
            failures.append(
                f"Too few effective draws: {least:.0f} ({part}) for {figures[f'ess_{part}_worst']}, at least "
                f"{limits.ess:g} are wanted."
            )
            advice.append("Take more draws (--draws).")
    if figures["divergences"] > limits.divergences:
        failures.append(
            f"{figures['divergences']} divergent transitions after warmup, at most {limits.divergences} allowed: "
            "part of the posterior may not have been reached."
        )
        advice.append(
            "The prior leaves room for values that are hard to reach: tighten the prior of the error scales or "
            "of the coefficients to what is plausible, or raise the correlation's concentration."
        )
    if figures["bfmi_min"] < LEAST_BFMI:
        failures.append(
            f"The energy diagnostic is {figures['bfmi_min']:.2f}, at least {LEAST_BFMI} is wanted: heavy tails "
            "are explored slowly."
        )
        advice.append("Use a prior with lighter tails, or let the chains run longer (--warmup, --draws).")
    return Verdict(not failures, figures, tuple(failures), tuple(dict.fromkeys(advice)))


def sample_until_passed(
    system: System,
    card: PriorCard,
    limits: Limits,
    *,
    chains: int = 4,
    warmup: int = 1000,
    draws: int = 1000,
    seed: int = 1,
    engine: EngineName = "auto",
    progress: Watcher | None = None,
) -> Outcome:
    """Sample, hold against the gate, and if it fails try once more: longer, and with smaller steps."""
    posterior = sample(
        system, card, chains=chains, warmup=warmup, draws=draws, seed=seed, engine=engine, progress=progress
    )
    verdict = hold(posterior, limits)
    if verdict.passed:
        return Outcome(posterior, verdict, 1)
    posterior = sample(
        system,
        card,
        chains=chains,
        warmup=SECOND_WARMUP * warmup,
        draws=SECOND_DRAWS * draws,
        seed=seed,
        target_accept=SECOND_TARGET,
        engine=engine,
        progress=_second(progress) if progress else None,
    )
    return Outcome(posterior, hold(posterior, limits), 2)


def _second(progress: Watcher) -> Callable[[Progress], None]:
    def watch(moment: Progress) -> None:
        progress(Progress(moment.stage, moment.done, moment.total, moment.divergences, attempt=2))

    return watch


def _figures(posterior: xr.DataTree) -> dict[str, float | int | str]:
    draws, labels = _reported(posterior)
    rhat, bulk, tail = convergence(draws)
    figures: dict[str, float | int | str] = {}
    for name, values, worst in (
        ("rhat_max", rhat, np.nanargmax),
        ("ess_bulk_min", bulk, np.nanargmin),
        ("ess_tail_min", tail, np.nanargmin),
    ):
        place = int(worst(values))
        figures[name] = float(values[place])
        figures[name[: name.rindex("_")] + "_worst"] = labels[place]
    statistics = posterior["sample_stats"]
    figures["divergences"] = int(statistics["diverging"].sum())
    figures["bfmi_min"] = float(_bfmi(statistics["energy"].values).min())
    return figures


def _reported(posterior: xr.DataTree) -> tuple[Array, list[str]]:
    """Draws of every reported quantity, shape (n_chains, n_draws, n_quantities), and what each is called."""
    columns, labels = [], []
    for name in REPORTED:
        if name in posterior["posterior"]:
            values = posterior["posterior"][name]
            columns.append(values.values)
            labels.extend(f"{name}[{label}]" for label in values[values.dims[-1]].values)
    return np.concatenate(columns, axis=2), labels


def _bfmi(energy: Array) -> Array:
    """Return the estimated Bayesian fraction of missing information of each chain (Betancourt 2016, eq. 8)."""
    jumps = np.square(np.diff(energy, axis=1)).sum(axis=1)
    return np.asarray(jumps / np.square(energy - energy.mean(axis=1, keepdims=True)).sum(axis=1))
