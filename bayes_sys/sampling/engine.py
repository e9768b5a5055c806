"""Sampling, one face over several engines."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING, Literal

import numpy as np

from bayes_sys.errors import InputError, SamplingError, nearest
from bayes_sys.prior.cards import PriorCard
from bayes_sys.prior.law import Prior
from bayes_sys.prior.resolve import resolve
from bayes_sys.sampling.draws import Draws
from bayes_sys.sampling.progress import Watcher, unwatched
from bayes_sys.sampling.settings import ALONE, CAREFUL, POOLED, Settings
from bayes_sys.system.system import System

if TYPE_CHECKING:
    import xarray as xr

EngineName = Literal["auto", "direct", "pymc"]
ENGINES = ("auto", "direct", "pymc")

Engine = Callable[[System, Prior, Settings, Watcher], Draws]


def sample(
    system: System,
    card: PriorCard,
    *,
    chains: int = 4,
    warmup: int = 1000,
    draws: int = 1000,
    seed: int = 1,
    target_accept: float | None = None,
    cores: int | None = None,
    engine: EngineName = "auto",
    log_likelihood: bool | None = None,
    progress: Watcher | None = None,
) -> xr.DataTree:
    """Sample the posterior of a system under a prior card, by NUTS on the CPU.

    Parameters
    ----------
    system : System
    card : PriorCard
    chains, warmup, draws : int
        Chains, and iterations per chain before and after adaptation.
    seed : int
        The same seed gives the same draws on one machine, whatever the number of cores.
    target_accept : float, optional
        Aim of the step-size adaptation; chosen by the prior if left out.
    cores : int, optional
        Chains run at once; as many as there are cores if left out.
    engine : {"auto", "direct", "pymc"}
        "direct": the compiled density with the coefficients integrated out; "pymc": the PyMC model as it
        stands; "auto": direct wherever it covers the model.
    log_likelihood : bool, optional
        Whether to keep the pointwise log likelihood; kept up to 10^7 cells if left out.
    progress : callable, optional
        Called with a ``Progress`` now and then, from another thread.

    Returns
    -------
    DataTree
        See ``tree.posterior_tree`` for its groups. The root's attributes name engine, seed and settings.

    Raises
    ------
    InputError
        If the card does not fit the system, or a setting cannot be.
    SamplingError
        If the sampler could not do its work.
    """
    from bayes_sys.sampling.tree import posterior_tree

    if not isinstance(system, System) or not isinstance(card, PriorCard):
        raise InputError(
            f"expected a System and a PriorCard, got {type(system).__name__} and {type(card).__name__}.",
            mend="Call sample(build_system(study), study_card(study)).",
        )
    prior = resolve(card, system)
    settings = Settings(chains, warmup, draws, seed, target_accept, cores)
    if settings.target_accept is None:
        settings = replace(settings, target_accept=_target(system, prior))
    name = choose_engine(engine)
    try:
        result = _engine(name)(system, prior, settings, progress or unwatched)
    except np.linalg.LinAlgError as fault:
        raise SamplingError(
            "The error covariance became singular in floating point: the data and the prior leave some weighted "
            "sum of the responses without error. Use a card that keeps the error scales from zero or the "
            "correlations from one (a higher concentration), or look for a response that others determine."
        ) from fault
    attributes = {
        "engine": name,
        "seed": seed,
        "chains": chains,
        "warmup": warmup,
        "draws": draws,
        "target_accept": settings.target_accept,
    }
    return posterior_tree(system, prior, result, attributes, log_likelihood=log_likelihood)


def _target(system: System, prior: Prior) -> float:
    if system.n_equations == 1:
        return ALONE
    return POOLED if prior.coefficients.groups else CAREFUL


def choose_engine(engine: str) -> str:
    """Return the engine to run: every model that can be built today is covered by the direct one."""
    if engine not in ENGINES:
        raise InputError(
            f"engine is “{engine}”, expected one of {', '.join(ENGINES)}.", mend=nearest(engine, ENGINES)
        )
    return "direct" if engine == "auto" else engine


def _engine(name: str) -> Engine:
    if name == "direct":
        from bayes_sys.sampling.direct import sample_direct

        return sample_direct
    from bayes_sys.sampling.graph import sample_graph

    return sample_graph
