"""Checks of the system as a whole before anything is sampled."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np
import scipy.special
from numpy.typing import NDArray

from bayes_sys.classical import simulated
from bayes_sys.classical.bases import Bases, solve_upper
from bayes_sys.classical.check import CROWDED, FINE, NOTE, SIMULATED, WARNING, Check, counted, number, p_value
from bayes_sys.classical.estimate import Benchmark, Estimate
from bayes_sys.classical.estimators import joint_rank
from bayes_sys.classical.generalised import is_regular
from bayes_sys.system.system import System

Array = NDArray[np.float64]

LEVEL = 0.05

SAME_SPACE = 1e-10
"""A regressor is contained in another equation's if they leave less than this share of it."""


def system_checks(
    system: System, benchmark: Benchmark, bases: Bases | None, *, simulations: int, seed: int
) -> Iterator[Check]:
    """Yield the checks of the system.

    Parameters
    ----------
    system : System
    benchmark : Benchmark
    bases : Bases or None
        None where an equation has no more periods than coefficients.
    simulations : int
        For the Monte Carlo p-values; 0 for none.
    seed : int
    """
    yield _likelihood_maximum(system, benchmark)
    if system.n_equations == 1:
        return
    yield _equations_and_periods(system, bases)
    yield from _nesting(system, bases)
    if bases is None or not is_regular(bases):
        yield _no_shared_shocks(benchmark)
        return
    yield from _multiplier_test(bases, system.factor.n_distinct, simulations, seed)
    yield from _ratio_test(bases, benchmark, system.factor.n_distinct, simulations, seed)
    if benchmark.fgls is not None:
        yield from _gain(system, benchmark.fgls, bases)


def _likelihood_maximum(system: System, benchmark: Benchmark) -> Check:
    rank = joint_rank(system)
    figure, threshold = float(system.n_equations + rank), float(system.n_periods)
    exists = (
        "The posterior exists all the same, because the prior is proper: that is what this tool is "
        "for. Where the data are silent, the prior speaks."
    )
    if benchmark.iterated is not None:
        verdict = FINE
        sentence = (
            f"{counted(system.n_equations, 'equation')} and {counted(rank, 'distinct regressor')} "
            f"against {counted(system.n_periods, 'period')}: a maximum-likelihood estimate exists."
        )
    else:
        verdict = NOTE
        sentence = f"{benchmark.reasons['iterated']} {exists}"
    return Check("likelihood_maximum", "", figure, threshold, verdict, sentence)


def common_dimension(bases: Bases) -> int:
    """Return how many dimensions all equations' regressors share (the intercept, at least, as a rule)."""
    mean_projection = bases.rows @ bases.rows.T / bases.n_equations
    return int(np.sum(np.linalg.eigvalsh(mean_projection) > 1.0 - SAME_SPACE))


def _equations_and_periods(system: System, bases: Bases | None) -> Check:
    n = float(system.n_equations)
    if bases is None:
        fewest = system.n_periods - max(len(e.regressors) for e in system.equations)
        sentence = (
            "At least one equation leaves no periods over, so there is no residual covariance between "
            "the equations; what the posterior says about it comes from the prior and the other "
            "equations."
        )
        return Check("equations_and_periods", "", n, float(fewest), WARNING, sentence)
    free = system.n_periods - max(len(e.regressors) for e in system.equations)
    bound = system.n_periods - common_dimension(bases)
    if not is_regular(bases):
        verdict = WARNING
        sentence = (
            "The residual covariance between the equations is singular: some combination of them "
            "seems to have no error at all. Joint classical estimates do not exist; the prior on "
            "the correlations matters."
        )
    elif n * CROWDED > free:
        verdict = NOTE
        sentence = (
            f"{counted(system.n_equations, 'equation')} with {counted(free, 'free period')} each: "
            "the correlations between their errors are poorly determined, and joint classical "
            "standard errors come out too small."
        )
    else:
        verdict = FINE
        sentence = "There are enough periods to estimate how the errors move together."
    return Check("equations_and_periods", "", n, float(bound), verdict, sentence)


def keeps_least_squares(bases: Bases) -> list[int]:
    """Return the equations whose joint estimate equals least squares whatever the error covariance.

    Those whose regressors every other equation has among its own, or can make from its own (Zellner 1962 for
    identical regressors; Revankar 1974, Journal of the American Statistical Association 69, 187-190, for a
    subset).
    """
    out = []
    for i, own in enumerate(bases.slices):
        others = (bases.gram[s, own] for j, s in enumerate(bases.slices) if j != i)
        lengths = [np.sum(block**2, axis=0) for block in others]
        if all(np.all(length > 1.0 - SAME_SPACE) for length in lengths):
            out.append(i)
    return out


def _nesting(system: System, bases: Bases | None) -> Iterator[Check]:
    kept = [] if bases is None else keeps_least_squares(bases)
    figure, n = float(len(kept)), system.n_equations
    prior = "The posterior can still differ from it, because the prior ties the equations together."
    if len(kept) == n:
        verdict = NOTE
        sentence = (
            "All equations have the same regressors: the joint classical estimate equals least "
            f"squares, equation by equation, to the last digit. {prior}"
        )
    elif kept:
        named = ", ".join(f"“{system.names[i]}”" for i in kept)
        verdict = NOTE
        sentence = (
            f"Every other equation contains the regressors of {named}: there the joint classical "
            f"estimate equals least squares. {prior}"
        )
    else:
        verdict = FINE
        sentence = (
            "The equations have different regressors, so estimating them jointly can sharpen every one."
        )
    yield Check("identical_regressors", "", figure, float(n), verdict, sentence)


def _no_shared_shocks(benchmark: Benchmark) -> Check:
    sentence = "Whether the equations share shocks cannot be tested here. " + benchmark.reasons.get(
        "fgls", "The residual covariance is singular."
    )
    return Check("shared_shocks_lm", "", None, LEVEL, NOTE, sentence)


def _multiplier_test(bases: Bases, n_rows: int, simulations: int, seed: int) -> Iterator[Check]:
    """Breusch and Pagan's test, by chi-square and by simulation."""
    statistic = simulated.lagrange_multiplier(bases.residuals, bases.n_periods)
    p = _chi_square_tail(statistic, bases.n_equations)
    yield _shared("shared_shocks_lm", p, _by_chi_square("Breusch-Pagan", statistic, p))
    if simulations:
        drawn = simulated.simulate_multiplier(bases, n_rows, simulations, seed)
        larger = int(np.sum(drawn >= statistic * (1.0 - 1e-12)))
        exact = simulated.monte_carlo_p_value(larger, simulations)
        how = _by_simulation("Breusch-Pagan", simulations, exact, p)
        yield _shared(f"shared_shocks_lm{SIMULATED}", exact, how)


def _ratio_test(
    bases: Bases, benchmark: Benchmark, n_rows: int, simulations: int, seed: int
) -> Iterator[Check]:
    """Likelihood-ratio test against the iterated estimate, by chi-square and by simulation."""
    best = None if benchmark.iterated is None else benchmark.iterated.log_likelihood
    alone = benchmark.ols.log_likelihood
    if best is None or alone is None:
        sentence = (
            f"There is no likelihood-ratio test of shared shocks. {benchmark.reasons.get('iterated', '')}"
        )
        yield Check("shared_shocks_lr", "", None, LEVEL, NOTE, sentence.strip())
        return
    statistic = 2.0 * (best - alone)
    p = _chi_square_tail(statistic, bases.n_equations)
    yield _shared("shared_shocks_lr", p, _by_chi_square("likelihood-ratio", statistic, p))
    possible = simulated.affordable_simulations(bases, simulations)
    if possible:
        observed = statistic - 2.0 * simulated.RISE_TOLERANCE
        larger = simulated.count_larger_ratios(bases, n_rows, observed, possible, seed)
        exact = simulated.monte_carlo_p_value(larger, possible)
        how = _by_simulation("likelihood-ratio", possible, exact, p)
        yield _shared(f"shared_shocks_lr{SIMULATED}", exact, how)
    elif simulations:
        sentence = (
            f"With {len(bases.equation)} coefficients the likelihood-ratio test would take too long to "
            "simulate; the simulated Breusch-Pagan test asks the same."
        )
        yield Check(f"shared_shocks_lr{SIMULATED}", "", None, LEVEL, FINE, sentence)


def _chi_square_tail(statistic: float, n_equations: int) -> float:
    return float(scipy.special.chdtrc(n_equations * (n_equations - 1) // 2, max(statistic, 0.0)))


def _by_chi_square(test: str, statistic: float, p: float) -> str:
    return (
        f"By the {test} test ({number(statistic)}, {p_value(p)} from the chi-square distribution, which "
        "is rough in short series)"
    )


def _by_simulation(test: str, simulations: int, p: float, approximate: float) -> str:
    return (
        f"By the {test} test ({p_value(p)} from {simulations} simulated systems of this very design with "
        f"Gaussian errors; {p_value(approximate)} from the chi-square distribution, which is rough in short "
        "series)"
    )


def _shared(name: str, p: float, how: str) -> Check:
    if p < LEVEL:
        verdict = FINE
        then = "the equations share shocks, so estimating them together has something to gain."
    else:
        verdict = NOTE
        then = (
            "there is no clear sign that the equations share shocks: estimating them together "
            "gains little, and estimated correlations are largely noise."
        )
    return Check(name, "", p, LEVEL, verdict, f"{how}, {then}")


def _gain(system: System, fgls: Estimate, bases: Bases) -> Iterator[Check]:
    """Compare standard errors with those of least squares at the same error covariance."""
    sigma = fgls.error_covariance
    reduction = 1.0 - fgls.standard_errors / least_squares_errors(bases, np.diag(sigma))
    best = int(np.argmax(reduction))
    median = float(np.median(reduction))
    yield Check(
        "joint_gain",
        "",
        median,
        None,
        FINE,
        "At the estimated error covariance the joint estimate shortens standard errors by "
        f"{_percent(median)} for the typical coefficient and {_percent(float(reduction[best]))} at most "
        f"({system.coefficient_labels[best]}). In short series these gains look larger than they are, "
        "because the covariance is itself estimated (Freedman and Peters 1984).",
    )
    bound = 1.0 - np.sqrt(1.0 / (np.diag(sigma) * np.diag(np.linalg.inv(sigma))))
    most = int(np.argmax(bound))
    yield Check(
        "joint_gain_bound",
        "",
        float(bound[most]),
        None,
        FINE,
        "With errors correlated as estimated, no regressors could gain more than "
        f"{_percent(float(bound[most]))} of a standard error in any equation (“{system.names[most]}”): the "
        "other equations explain no more of its errors than that.",
    )


def least_squares_errors(bases: Bases, variances: Array) -> Array:
    """Return least-squares standard errors at given error variances, shape (K,)."""
    parts = []
    for i, triangle in enumerate(bases.triangles):
        inverse = solve_upper(triangle, np.eye(triangle.shape[0]))
        parts.append(np.sqrt(variances[i] * np.sum(inverse**2, axis=1)))
    return np.concatenate(parts)


def _percent(share: float) -> str:
    return f"{100.0 * max(share, 0.0):.0f}%"
