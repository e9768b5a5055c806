"""The tables a reader gets: coefficients, error scales, correlations, fit and explained variation."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from bayes_sys.posterior.match import check_match
from bayes_sys.posterior.predictive import predictive_band
from bayes_sys.posterior.summary import TAIL, Summary, draws_of, flat_draws, summarise

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

    from bayes_sys.classical.estimators import Benchmark, Estimate
    from bayes_sys.system.system import Equation, System

Array = NDArray[np.float64]


def coefficient_table(
    posterior: xr.DataTree, system: System, *, benchmark: Benchmark | None = None
) -> pd.DataFrame:
    """Tabulate the coefficients beside their prior and the classical estimates.

    Parameters
    ----------
    posterior : DataTree
        As made by ``sample``: draws of ``coefficients``, and for ``shrinkage`` the group ``conditional``.
    system : System
    benchmark : Benchmark, optional
        The classical estimates, if they are at hand; computed otherwise.

    Returns
    -------
    DataFrame
        ``equation, regressor, n, mean, sd, q5, q50, q95, prob_positive, prior_mean, prior_sd, ols, fgls,
        fgls_se, shrinkage, moved_se, rhat, ess_bulk, ess_tail``, one row a coefficient, in the units of the
        data. ``n`` counts the periods in which the response was observed. NaN where a figure does not exist:
        the classical estimates when the data cannot give them, the convergence figures of a coefficient that
        a restriction fixes.

    Raises
    ------
    InputError
        If posterior and system do not belong together.
    """
    import pandas as pd

    check_match(posterior, system)
    ours = summarise(draws_of(posterior, "coefficients"))
    classical = benchmark if benchmark is not None else _benchmark(system)
    fgls, fgls_se = _estimate(classical.fgls, system)
    with np.errstate(invalid="ignore", divide="ignore"):
        moved = np.where(fgls_se > 0, (ours.mean - fgls) / fgls_se, np.nan)
    return pd.DataFrame(
        {
            "equation": [e for e, _ in system.coefficients],
            "regressor": [r for _, r in system.coefficients],
            "n": _n_observed(system)[system.coefficient_equation],
            **_moments(ours),
            "prob_positive": ours.prob_positive,
            "prior_mean": _constant(posterior, "prior_mean", system),
            "prior_sd": _constant(posterior, "prior_sd", system),
            "ols": _estimate(classical.ols, system)[0],
            "fgls": fgls,
            "fgls_se": fgls_se,
            "shrinkage": shrinkage(posterior),
            "moved_se": moved,
            **_convergence(ours),
        }
    )


def shrinkage(posterior: xr.DataTree) -> Array:
    """Return how far the prior, not the data, decides each coefficient.

    The mean over the draws of the ratio of the coefficient's variance given the error covariance and the
    prior's scales to its prior variance given those scales: 0 where the data decide, 1 where the prior does.
    For a pooled coefficient both are taken given the shared mean, so that 1 means: the shared mean decides.

    Parameters
    ----------
    posterior : DataTree
        Variable ``shrinkage`` of the group ``conditional``.

    Returns
    -------
    array of float, shape (n_coefficients,)
        NaN where the group is absent.
    """
    if "conditional" not in posterior.children:
        return np.full(posterior["posterior"].sizes["coefficient"], np.nan)
    ratio: Array = flat_draws(posterior, "shrinkage", "conditional").mean(axis=0)
    return ratio


def scale_table(
    posterior: xr.DataTree, system: System, *, benchmark: Benchmark | None = None
) -> pd.DataFrame:
    """Tabulate the standard deviations of the errors.

    Parameters
    ----------
    posterior : DataTree
    system : System
    benchmark : Benchmark, optional

    Returns
    -------
    DataFrame
        ``equation, mean, sd, q5, q50, q95, fgls, rhat, ess_bulk, ess_tail``, in the units of the response.
        ``fgls`` is the square root of the classical error variance with divisor T.

    Raises
    ------
    InputError
        If posterior and system do not belong together.
    """
    import pandas as pd

    check_match(posterior, system)
    ours = summarise(draws_of(posterior, "scales"))
    covariance = _error_covariance(benchmark if benchmark is not None else _benchmark(system), system)
    return pd.DataFrame(
        {
            "equation": list(system.names),
            **_moments(ours),
            "fgls": np.sqrt(np.diag(covariance)),
            **_convergence(ours),
        }
    )


def correlation_table(
    posterior: xr.DataTree, system: System, *, benchmark: Benchmark | None = None
) -> pd.DataFrame:
    """Tabulate the correlations of the errors, each pair of equations once, the later one second.

    Parameters
    ----------
    posterior : DataTree
    system : System
    benchmark : Benchmark, optional

    Returns
    -------
    DataFrame
        ``equation_a, equation_b, mean, sd, q5, q50, q95, prob_positive, fgls, rhat, ess_bulk, ess_tail``;
        without rows when there is one equation.

    Raises
    ------
    InputError
        If posterior and system do not belong together.
    """
    import pandas as pd

    check_match(posterior, system)
    classical = benchmark if benchmark is not None else _benchmark(system)
    covariance = _error_covariance(classical, system)
    sizes = np.sqrt(np.diag(covariance))
    first = np.array([a for a, _ in system.pairs], dtype=int)
    second = np.array([b for _, b in system.pairs], dtype=int)
    n_pairs = len(first)
    ours = summarise(draws_of(posterior, "correlations")) if n_pairs else _empty_summary()
    with np.errstate(invalid="ignore", divide="ignore"):
        fgls = covariance[first, second] / (sizes[first] * sizes[second])
    return pd.DataFrame(
        {
            "equation_a": [system.names[a] for a in first],
            "equation_b": [system.names[b] for b in second],
            **_moments(ours),
            "prob_positive": ours.prob_positive,
            "fgls": fgls,
            **_convergence(ours),
        }
    )


def pooled_table(posterior: xr.DataTree) -> pd.DataFrame:
    """Tabulate what pooled coefficients share: their mean, and the spread around it.

    Parameters
    ----------
    posterior : DataTree

    Returns
    -------
    DataFrame
        ``regressor, quantity, mean, sd, q5, q50, q95, prob_positive, rhat, ess_bulk, ess_tail``, two rows a
        regressor, ``quantity`` "shared mean" or "spread", in the unit in which the card states each member;
        without rows when nothing is pooled.
    """
    import pandas as pd

    group = posterior["posterior"].to_dataset()
    parts = []
    for quantity, name in (("shared mean", "pooled_mean"), ("spread", "pooled_spread")):
        found = name in group
        ours = summarise(draws_of(posterior, name)) if found else _empty_summary()
        regressors = [str(label) for label in group["pooled"].values] if found else []
        parts.append(
            pd.DataFrame(
                {
                    "regressor": regressors,
                    "quantity": [quantity] * len(regressors),
                    **_moments(ours),
                    "prob_positive": ours.prob_positive,
                    **_convergence(ours),
                }
            )
        )
    return pd.concat(parts).sort_index(kind="stable").reset_index(drop=True)


def fitted_table(
    posterior: xr.DataTree, system: System, *, band: tuple[Array, Array, Array] | None = None
) -> pd.DataFrame:
    """Tabulate each outcome beside its fit.

    ``mean`` is the posterior mean of the regression ``X beta``. ``q5`` and ``q95`` bound the 90% predictive
    band of an outcome with the same regressors: they hold the error as well as what is not known about the
    coefficients and the error scale, so about nine in ten observed points should lie inside. ``residual`` is
    ``observed - mean``. In very large systems the band is that of a normal with the
    same mean and variance (`bayes_sys.posterior.predictive.predictive_band` says when, and how far off).

    Parameters
    ----------
    posterior : DataTree
    system : System
    band : tuple of three arrays of float, each of shape (n_periods, n_equations), optional
        What `predictive_band` returns, if it is at hand.

    Returns
    -------
    DataFrame
        ``period, equation, observed, mean, q5, q95, residual``, equation by equation, on the scale
        of the response.

    Raises
    ------
    InputError
        If posterior and system do not belong together.
    """
    import pandas as pd

    check_match(posterior, system)
    mean, low, high = band if band is not None else predictive_band(posterior, system)
    n_periods, n_equations = system.responses.shape
    return pd.DataFrame(
        {
            "period": list(system.periods.labels) * n_equations,
            "equation": np.repeat(np.array(system.names, dtype=object), n_periods),
            "observed": system.responses.T.ravel(),
            "mean": mean.T.ravel(),
            "q5": low.T.ravel(),
            "q95": high.T.ravel(),
            "residual": (system.responses - mean).T.ravel(),
        }
    )


def equation_table(posterior: xr.DataTree, system: System) -> pd.DataFrame:
    """Tabulate how much of each response's variation the regressors explain.

    Bayesian R2 (Gelman, Goodrich, Gabry & Vehtari 2019, The American Statistician 73, 307-309, section 2):
    at each draw the variance of the fitted values over itself plus the error variance.

    Parameters
    ----------
    posterior : DataTree
    system : System

    Returns
    -------
    DataFrame
        ``equation, n, r2_mean, r2_q5, r2_q95``; NaN with fewer than two periods.

    Raises
    ------
    InputError
        If posterior and system do not belong together.
    """
    import pandas as pd

    check_match(posterior, system)
    coefficients, scales = flat_draws(posterior, "coefficients"), flat_draws(posterior, "scales")
    rows = []
    for i, equation in enumerate(system.equations):
        observed = np.isfinite(system.responses[:, i])
        r2 = explained_share(equation, coefficients[:, system.slice_of(i)], scales[:, i], observed)
        low, high = np.quantile(r2, (TAIL, 1 - TAIL))
        rows.append((equation.name, int(observed.sum()), r2.mean(), low, high))
    return pd.DataFrame(rows, columns=["equation", "n", "r2_mean", "r2_q5", "r2_q95"])


def explained_share(
    equation: Equation, coefficients: Array, scales: Array, observed: NDArray[np.bool_]
) -> Array:
    """Return the explained share of variance at each draw, shape (n_draws,), NaN with fewer than two periods.

    The variance of ``X beta`` over the periods is ``beta' C beta`` with ``C`` the covariance of the
    regressors, so its cost does not grow with periods times draws.

    Parameters
    ----------
    equation : Equation
    coefficients : array of float, shape (n_draws, p_i)
    scales : array of float, shape (n_draws,)
    observed : array of bool, shape (n_periods,)
        The periods that count.
    """
    design = equation.design[observed]
    if len(design) < 2:
        return np.full(len(coefficients), np.nan)
    triangle = np.linalg.qr(design - design.mean(axis=0), mode="r") / np.sqrt(len(design) - 1)
    fitted = ((coefficients @ triangle.T) ** 2).sum(axis=1)
    share: Array = fitted / (fitted + scales**2)
    return share


def _benchmark(system: System) -> Benchmark:
    from bayes_sys.classical.estimators import classical_estimates

    return classical_estimates(system)


def _moments(summary: Summary) -> dict[str, Array]:
    return {name: getattr(summary, name) for name in ("mean", "sd", "q5", "q50", "q95")}


def _convergence(summary: Summary) -> dict[str, Array]:
    return {name: getattr(summary, name) for name in ("rhat", "ess_bulk", "ess_tail")}


def _empty_summary() -> Summary:
    return Summary(*(np.empty(0) for _ in range(9)))


def _n_observed(system: System) -> NDArray[np.int64]:
    counts: NDArray[np.int64] = np.isfinite(system.responses).sum(axis=0).astype(np.int64)
    return counts


def _constant(posterior: xr.DataTree, name: str, system: System) -> Array:
    if "constant_data" in posterior.children and name in posterior["constant_data"]:
        return np.asarray(posterior[f"constant_data/{name}"].values, dtype=float)
    return np.full(system.n_coefficients, np.nan)


def _estimate(estimate: Estimate | None, system: System) -> tuple[Array, Array]:
    """Return coefficients and standard errors, NaN where the estimate does not exist."""
    if estimate is None:
        return np.full(system.n_coefficients, np.nan), np.full(system.n_coefficients, np.nan)
    return estimate.coefficients, estimate.standard_errors


def _error_covariance(benchmark: Benchmark, system: System) -> Array:
    if benchmark.fgls is None:
        return np.full((system.n_equations, system.n_equations), np.nan)
    return benchmark.fgls.error_covariance
