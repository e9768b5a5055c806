"""Posterior predictive checks: whether the model, at its own posterior, produces data that look like these.

Figures that depend on the parameters are compared draw by draw with their value in errors replicated at the
same draw (Gelman, Meng & Stern 1996, Statistica Sinica 6, 733-807). Only what one equation shows by itself is
checked here, so the replicated errors need its own scale and not the correlations.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.posterior.match import check_match
from bayes_sys.posterior.predictive import predictive_band
from bayes_sys.posterior.summary import QUANTILES, flat_draws, thinned

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

    from bayes_sys.system.system import System

Array = NDArray[np.float64]

MAX_CELLS = 5_000_000
"""Periods times draws that the checks of one equation may cost; beyond it draws are thinned evenly."""
MAX_DRAWS, MIN_DRAWS = 2000, 100
CHUNK_CELLS = 2_000_000
SURPRISE = 0.025
"""A tail probability below this, or above one minus this, is called surprising."""
COLUMNS = ["equation", "statistic", "observed", "q5", "q50", "q95", "tail_probability", "verdict", "sentence"]


@dataclass(frozen=True)
class Sample:
    """What one equation contributes, periods without an outcome left out.

    Parameters
    ----------
    responses : array of float, shape (n_periods,)
    design : array of float, shape (n_periods, p_i)
    low, high : arrays of float, shape (n_periods,)
        Bounds of the 90% predictive band.
    coefficients : array of float, shape (n_draws, p_i)
    scales : array of float, shape (n_draws,)
    pairs : array of float, shape (n_periods - 1,)
        1 where the next outcome belongs to the very next period, 0 where a gap lies between.
    """

    responses: Array
    design: Array
    low: Array
    high: Array
    coefficients: Array
    scales: Array
    pairs: Array


@dataclass(frozen=True)
class Statistic:
    """One figure of standardised errors, and what it means when the data's own is surprising.

    Parameters
    ----------
    name : str
    measure : callable
        From standardised errors and the bounds of the band, each of shape (n_draws, n_periods), and the pairs
        of neighbouring periods, to one figure a draw.
    small, large : str
        What a surprisingly small or large figure means; empty: nothing to worry about.
    """

    name: str
    measure: Callable[[Array, tuple[Array, Array], Array], Array]
    small: str
    large: str


def autocorrelation(errors: Array, bounds: tuple[Array, Array], pairs: Array) -> Array:
    """Return the correlation of each error with the next one about nought; NaN below three pairs."""
    if pairs.sum() < 3:
        return np.full(len(errors), np.nan)
    now, following = errors[:, :-1], errors[:, 1:]
    size = np.einsum("ij,ij,j->i", now, now, pairs) * np.einsum("ij,ij,j->i", following, following, pairs)
    found: Array = np.einsum("ij,ij,j->i", now, following, pairs) / np.sqrt(size)
    return found


def largest(errors: Array, bounds: tuple[Array, Array], pairs: Array) -> Array:
    """Return the largest absolute standardised error."""
    found: Array = np.abs(errors).max(axis=1)
    return found


def spread(errors: Array, bounds: tuple[Array, Array], pairs: Array) -> Array:
    """Return the root mean square of the standardised errors."""
    found: Array = np.sqrt(np.einsum("ij,ij->i", errors, errors) / errors.shape[1])
    return found


def coverage(errors: Array, bounds: tuple[Array, Array], pairs: Array) -> Array:
    """Return the share of outcomes inside the predictive band."""
    found: Array = ((errors >= bounds[0]) & (errors <= bounds[1])).mean(axis=1)
    return found


STATISTICS = (
    Statistic(
        "residual autocorrelation",
        autocorrelation,
        "neighbouring periods swing against each other more than independent shocks would",
        "shocks carry over from one period to the next, which this model does not know: "
        "the intervals are likely too narrow",
    ),
    Statistic(
        "largest residual",
        largest,
        "",
        "the most extreme period lies further out than normal errors explain: "
        "look at it before trusting the fit",
    ),
    Statistic(
        "residual spread",
        spread,
        "the points lie closer to the fit than the error scale says: the prior may hold the scale up",
        "the points lie further from the fit than the error scale says: the prior may hold the scale down "
        "or the coefficients back",
    ),
    Statistic(
        "share inside the 90% band",
        coverage,
        "fewer points lie inside the band than it promises",
        "more points lie inside the band than it promises: it is wider than these data need",
    ),
)


def predictive_checks(
    posterior: xr.DataTree, system: System, seed: int, *, band: tuple[Array, Array] | None = None
) -> pd.DataFrame:
    """Hold each equation's residuals against what the model itself would produce.

    Up to ``MAX_DRAWS`` evenly spaced draws are used, fewer in very long series.

    Parameters
    ----------
    posterior : DataTree
        Draws of ``coefficients`` and ``scales``.
    system : System
    seed : int
        Of the replicated errors; each equation has its own stream.
    band : tuple of two arrays of float, each of shape (n_periods, n_equations), optional
        5% and 95% predictive quantiles, if they are at hand; computed otherwise.

    Returns
    -------
    DataFrame
        ``equation, statistic, observed, q5, q50, q95, tail_probability, verdict, sentence``. ``observed`` is
        the figure in the data (its posterior mean where it depends on the parameters), the quantiles are
        those of replicated data, ``tail_probability`` is the share of draws in which the replicated figure is
        at least as large as the data's, ties counting half. NaN where a series is too short for the figure.

    Raises
    ------
    InputError
        If posterior and system do not belong together.
    """
    import pandas as pd

    check_match(posterior, system)

    low, high = band if band is not None else predictive_band(posterior, system)[1:]
    streams = np.random.SeedSequence(seed).spawn(system.n_equations)
    coefficients, scales = flat_draws(posterior, "coefficients"), flat_draws(posterior, "scales")
    rows = []
    for i, equation in enumerate(system.equations):
        seen = np.isfinite(system.responses[:, i])
        budget = MAX_CELLS // max(1, int(seen.sum()))
        keep = thinned(len(scales), min(MAX_DRAWS, max(MIN_DRAWS, budget)))
        sample = Sample(
            responses=system.responses[seen, i],
            design=equation.design[seen],
            low=low[seen, i],
            high=high[seen, i],
            coefficients=coefficients[keep, system.slice_of(i)],
            scales=scales[keep, i],
            pairs=neighbours(system.periods.ordinals[seen]),
        )
        ours, theirs = compare(sample, np.random.default_rng(streams[i]))
        rows += [_row(equation.name, s, ours[k], theirs[k]) for k, s in enumerate(STATISTICS)]
    return pd.DataFrame(rows, columns=COLUMNS)


def neighbours(ordinals: NDArray[np.int64]) -> Array:
    """Return 1 where the next one is the very next period, 0 where a gap breaks the pair."""
    joined: Array = (np.diff(ordinals) == 1).astype(np.float64)
    return joined


def compare(sample: Sample, rng: np.random.Generator) -> tuple[Array, Array]:
    """Return every statistic in the data and in replicated data, draw by draw.

    Returns
    -------
    tuple of two arrays of float, each of shape (n_statistics, n_draws)
    """
    n_draws, n_periods = len(sample.scales), len(sample.responses)
    ours, theirs = (np.full((len(STATISTICS), n_draws), np.nan) for _ in range(2))
    step = max(1, CHUNK_CELLS // max(1, n_periods))
    for start in range(0, n_draws if n_periods else 0, step):
        some = slice(start, start + step)
        fit, scale = sample.coefficients[some] @ sample.design.T, sample.scales[some, None]
        bounds = ((sample.low - fit) / scale, (sample.high - fit) / scale)
        errors, replicated = (sample.responses - fit) / scale, rng.normal(size=fit.shape)
        for k, statistic in enumerate(STATISTICS):
            ours[k, some] = statistic.measure(errors, bounds, sample.pairs)
            theirs[k, some] = statistic.measure(replicated, bounds, sample.pairs)
    return ours, theirs


def _row(equation: str, statistic: Statistic, ours: Array, theirs: Array) -> tuple[object, ...]:
    """Lay one comparison out as a row of the table."""
    if not np.isfinite(ours).all():
        empty = (np.nan,) * 5
        return (
            equation,
            statistic.name,
            *empty,
            "not available",
            "The series is too short, or too broken by gaps, for this figure.",
        )
    low, middle, high = np.quantile(theirs, QUANTILES)
    tail = float((theirs > ours).mean() + 0.5 * (theirs == ours).mean())
    verdict, meaning = judge(statistic, tail)
    sentence = (
        f"The {statistic.name} is {ours.mean():.2f}; data made by the model itself give {low:.2f} to "
        f"{high:.2f} nine times in ten. {meaning[0].upper()}{meaning[1:]}."
    )
    return (equation, statistic.name, float(ours.mean()), low, middle, high, tail, verdict, sentence)


def judge(statistic: Statistic, tail: float) -> tuple[str, str]:
    """Return the verdict ("in line" or "surprising") on a tail probability, and what it means."""
    if tail > 1 - SURPRISE and statistic.small:
        return "surprising", statistic.small
    if tail < SURPRISE and statistic.large:
        return "surprising", statistic.large
    return "in line", "the data look like what the model expects"
