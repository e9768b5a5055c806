"""The gate: the conditions a posterior must meet before its numbers are shown as results.

Rank-normalised R-hat and bulk and tail effective sample size (Vehtari, Gelman, Simpson, Carpenter & Bürkner 2021,
Bayesian Analysis 16, 667-718), no divergent transitions, and the energy diagnostic (Betancourt 2016,
arXiv:1604.00695: a fraction below 0.3 says that the chains move too slowly between energy levels).
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.posterior.summary import convergence, draws_of
from bayes_sys.prior.cards import PriorCard
from bayes_sys.sampling.engine import EngineName, sample
from bayes_sys.sampling.progress import Progress, Watcher
from bayes_sys.system.system import System

if TYPE_CHECKING:
    import xarray as xr

Array = NDArray[np.float64]
Finding = tuple[str, str]  # what failed, what to do about it

LEAST_BFMI = 0.3
REPORTED = ("coefficients", "scales", "correlations", "pooled_mean", "pooled_spread")
LONGER = "Let the chains run longer: more --draws, and more --warmup where R-hat is the trouble."
SECOND_WARMUP, SECOND_DRAWS, SECOND_TARGET = 2, 2, 0.99


@dataclass(frozen=True)
class Limits:
    """What is demanded: highest R-hat, least effective sample size, most divergent transitions."""

    rhat: float = 1.01
    ess: float = 1000
    divergences: int = 0


@dataclass(frozen=True)
class Figures:
    """What the gate looks at, and which quantity stands worst."""

    rhat_max: float
    rhat_worst: str
    ess_bulk_min: float
    ess_bulk_worst: str
    ess_tail_min: float
    ess_tail_worst: str
    divergences: int
    bfmi_min: float


@dataclass(frozen=True)
class Verdict:
    """The gate's answer: passed or not, the figures, and failures and advice in plain words (empty when passed)."""

    passed: bool
    figures: Figures
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
    findings = (
        *_mixing(figures, limits),
        *_effective_draws("bulk", figures.ess_bulk_min, figures.ess_bulk_worst, limits),
        *_effective_draws("tail", figures.ess_tail_min, figures.ess_tail_worst, limits),
        *_divergences(figures, limits),
        *_energy(figures),
    )
    failures = tuple(failure for failure, _ in findings)
    return Verdict(not findings, figures, failures, tuple(dict.fromkeys(advice for _, advice in findings)))


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


def _mixing(figures: Figures, limits: Limits) -> Iterator[Finding]:
    if not figures.rhat_max <= limits.rhat:  # a nan is no pass
        yield (
            f"The chains have not mixed: R-hat is {figures.rhat_max:.3f} for {figures.rhat_worst}, "
            f"at most {limits.rhat:g} is allowed.",
            LONGER,
        )


def _effective_draws(part: str, least: float, worst: str, limits: Limits) -> Iterator[Finding]:
    if not least >= limits.ess:
        yield (
            f"Too few effective draws: {least:,.0f} ({part}) for {worst}, at least {limits.ess:,.0f} are wanted.",
            LONGER,
        )


def _divergences(figures: Figures, limits: Limits) -> Iterator[Finding]:
    if figures.divergences > limits.divergences:
        yield (
            f"{figures.divergences} divergent transitions after warmup, at most {limits.divergences} allowed: "
            "part of the posterior may not have been reached.",
            "The prior leaves room for values that are hard to reach: tighten the prior of the error scales or "
            "of the coefficients to what is plausible, or raise the correlation's concentration.",
        )


def _energy(figures: Figures) -> Iterator[Finding]:
    if not figures.bfmi_min >= LEAST_BFMI:
        yield (
            f"The energy diagnostic is {figures.bfmi_min:.2f}, at least {LEAST_BFMI} is wanted: heavy tails "
            "are explored slowly.",
            "Use a prior with lighter tails: half-normal error scales rather than half-Student-t.",
        )


def _figures(posterior: xr.DataTree) -> Figures:
    draws, labels = _reported(posterior)
    rhat, bulk, tail = convergence(draws)
    worst_rhat, worst_bulk, worst_tail = (
        int(np.nanargmax(rhat)),
        int(np.nanargmin(bulk)),
        int(np.nanargmin(tail)),
    )
    return Figures(
        rhat_max=float(rhat[worst_rhat]),
        rhat_worst=labels[worst_rhat],
        ess_bulk_min=float(bulk[worst_bulk]),
        ess_bulk_worst=labels[worst_bulk],
        ess_tail_min=float(tail[worst_tail]),
        ess_tail_worst=labels[worst_tail],
        divergences=int(draws_of(posterior, "diverging", "sample_stats").sum()),
        bfmi_min=float(_bfmi(draws_of(posterior, "energy", "sample_stats")).min()),
    )


def _reported(posterior: xr.DataTree) -> tuple[Array, list[str]]:
    """Draws of every reported quantity, shape (n_chains, n_draws, n_quantities), and what each is called."""
    group = posterior["posterior"].to_dataset()
    columns: list[Array] = []
    labels: list[str] = []
    for name in REPORTED:
        if name in group:
            columns.append(draws_of(posterior, name))
            labels.extend(f"{name}[{label}]" for label in group[name][group[name].dims[-1]].values)
    return np.concatenate(columns, axis=2), labels


def _bfmi(energy: Array) -> Array:
    """Return the estimated Bayesian fraction of missing information of each chain (Betancourt 2016, eq. 8)."""
    jumps = np.square(np.diff(energy, axis=1)).sum(axis=1)
    return np.asarray(jumps / np.square(energy - energy.mean(axis=1, keepdims=True)).sum(axis=1))
