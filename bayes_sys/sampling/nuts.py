"""The No-U-Turn sampler of nutpie, run on compiled callbacks.

Handing nutpie a C callback goes through its private module (tested with the pinned version range). Should that
door close, the public one is used: the same density called through Python, slower and equal.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from bayes_sys.errors import SamplingError
from bayes_sys.model.compiled import EntryPoints, value_and_gradient
from bayes_sys.sampling.progress import Progress, Watcher
from bayes_sys.sampling.settings import Settings

Array = NDArray[np.float64]

POINT = "point"
POLL_SECONDS, WATCH_MILLISECONDS = 0.1, 100
STATISTICS = {
    "diverging": "diverging",
    "energy": "energy",
    "n_steps": "n_steps",
    "step_size": "step_size_bar",
    "tree_depth": "depth",
    "acceptance_rate": "mean_tree_accept",
    "lp": "logp",
}


@dataclass(frozen=True)
class Chains:
    """Draws after warmup, and the sampler's statistics.

    Parameters
    ----------
    values : dict of arrays of float, each of shape (n_chains, n_draws, size)
        Every variable the model expands to, flattened row by row; ``point`` for a callback.
    statistics : dict of arrays, each of shape (n_chains, n_draws)
    """

    values: dict[str, Array]
    statistics: dict[str, NDArray[Any]]


def sample_callback(
    callbacks: EntryPoints,
    data: Array,
    n_dim: int,
    initial_point: Callable[[int], Array],
    settings: Settings,
    watch: Watcher,
) -> Chains:
    """Sample a density given as compiled callbacks.

    Parameters
    ----------
    callbacks : EntryPoints
    data : array of float
        What the callbacks read; kept alive by the sampler.
    n_dim : int
    initial_point : callable
        From a chain's seed to its starting point, shape (n_dim,).
    """
    try:
        return run(_Callback(callbacks, data, n_dim, initial_point), settings, watch)
    except PrivateDoorClosed:
        return run(_through_python(data, n_dim, initial_point), settings, watch)


class PrivateDoorClosed(Exception):
    """nutpie's private module is not as it was when this was written."""


def run(compiled: Any, settings: Settings, watch: Watcher) -> Chains:
    """Run nutpie on anything it can sample, watched, and stopped at once by an interrupt."""
    import nutpie

    def tell(chains: list[Any]) -> None:
        done = sum(chain.finished_draws for chain in chains)
        tuning = any(chain.tuning for chain in chains)
        total = settings.chains * (settings.warmup + settings.draws)
        divergences = sum(sum(draw >= settings.warmup for draw in chain.divergent_draws) for chain in chains)
        watch(Progress("warmup" if tuning else "sampling", done, total, divergences))

    try:
        sampler = nutpie.sample(
            compiled,
            draws=settings.draws,
            tune=settings.warmup,
            chains=settings.chains,
            cores=settings.n_cores,
            seed=settings.seed,
            target_accept=settings.target_accept,
            save_warmup=False,
            progress_bar=False,
            progress_callback=tell,
            progress_rate=WATCH_MILLISECONDS,
            return_raw_trace=True,
            blocking=False,
        )
        batches, statistics = _wait(sampler).get_arrow_trace()
    except RuntimeError as fault:
        raise SamplingError(
            "The sampler could not start or go on: the log density was not finite at any starting point "
            f"({str(fault).splitlines()[0][:200]})."
        ) from fault
    return _collect(batches, statistics, settings)


def _wait(sampler: Any) -> Any:
    """Wait in short turns, so that an interrupt is heard; stop the chains whatever ends the wait."""
    try:
        while True:
            try:
                return sampler.wait(timeout=POLL_SECONDS)
            except TimeoutError:
                continue
    except BaseException:
        sampler.cancel()
        raise


def _collect(batches: list[Any], statistics: list[Any], settings: Settings) -> Chains:
    import pyarrow as pa

    values: dict[str, list[Any]] = {}
    columns: dict[str, list[Any]] = {name: [] for name in STATISTICS}
    for batch, stats in zip(map(pa.record_batch, batches), map(pa.record_batch, statistics), strict=True):
        keep = ~stats["tuning"].to_numpy(zero_copy_only=False)
        if keep.sum() != settings.draws:
            raise SamplingError("The sampler stopped before all draws were made.")
        for name in batch.schema.names:
            flat = _numbers(batch[name])
            values.setdefault(name, []).append(flat.reshape(len(keep), -1)[keep])
        for name, source in STATISTICS.items():
            columns[name].append(stats[source].to_numpy(zero_copy_only=False)[keep])
    return Chains(
        {name: np.stack(chains) for name, chains in values.items()},
        {name: np.stack(chains) for name, chains in columns.items()},
    )


def _numbers(column: Any) -> Array:
    """Return the numbers of an Arrow column, whether it holds scalars or lists."""
    import pyarrow as pa

    array = pa.array(column)
    while hasattr(array, "flatten") and not pa.types.is_primitive(array.type):
        array = array.flatten()
    return np.asarray(array.to_numpy(zero_copy_only=False), dtype=float)


class _Callback:
    """What nutpie asks of a compiled model, around two addresses."""

    coords: dict[str, Any] = {}  # noqa: RUF012  (nutpie reads these as plain attributes)
    dims: dict[str, Any] = {}  # noqa: RUF012
    reparameterized_names: list[str] = []  # noqa: RUF012

    def __init__(
        self, callbacks: EntryPoints, data: Array, n_dim: int, initial_point: Callable[[int], Array]
    ) -> None:
        self.callbacks, self.data = callbacks, data
        self.n_dim, self.initial_point = n_dim, initial_point

    def _make_sampler(
        self, settings: Any, init_mean: Any, cores: int, progress: Any, callback: Any, rate: int, store: Any
    ) -> Any:
        try:
            return self._sampler(settings, cores, progress, callback, rate, store)
        except (ImportError, AttributeError, TypeError) as change:
            raise PrivateDoorClosed(str(change)) from change

    def _sampler(self, settings: Any, cores: int, progress: Any, callback: Any, rate: int, store: Any) -> Any:
        from nutpie import _lib

        address = self.data.ctypes.data
        expand = _lib.ExpandFunc(self.n_dim, self.n_dim, self.callbacks.expand, address, self)
        density = _lib.LogpFunc(self.callbacks.density, address, self)
        sizes: dict[str, int] = {}
        variables = _lib.PyVariable.new_variables([POINT], ["float64"], [(self.n_dim,)], sizes, {})
        model = _lib.PyMcModel(density, expand, variables, self.n_dim, sizes, {}, self.initial_point, None)
        return _lib.PySampler.from_pymc(settings, cores, model, progress, callback, rate, store)


def _through_python(data: Array, n_dim: int, initial_point: Callable[[int], Array]) -> Any:
    """Return the same model through nutpie's public door."""
    from nutpie.compiled_pyfunc import from_pyfunc

    def make_density() -> Callable[[Array], tuple[float, Array]]:
        return lambda point: value_and_gradient(point, data)

    def make_expand(seed1: int, seed2: int, chain: int) -> Callable[[Array], dict[str, Array]]:
        return lambda point: {POINT: np.array(point)}

    return from_pyfunc(
        n_dim,
        make_density,
        make_expand,
        [np.dtype(np.float64)],
        [(n_dim,)],
        [POINT],
        make_initial_point_fn=initial_point,
    )
