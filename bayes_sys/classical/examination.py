"""The examination: what data and design say before anything is sampled."""

from __future__ import annotations

from bayes_sys.classical.bases import build_bases
from bayes_sys.classical.check import Check, examination_rows
from bayes_sys.classical.equation_checks import equation_checks
from bayes_sys.classical.estimate import Benchmark
from bayes_sys.classical.system_checks import system_checks
from bayes_sys.system.system import System

__all__ = ["Check", "examination_rows", "examine"]


def examine(
    system: System, benchmark: Benchmark, *, simulations: int = 2000, seed: int = 1
) -> tuple[Check, ...]:
    """Examine a system, the system as a whole first and then each equation.

    Parameters
    ----------
    system : System
    benchmark : Benchmark
        The classical estimates of the same system.
    simulations : int
        Simulated systems behind each Monte Carlo p-value; 0 leaves those out.
    seed : int
        The same seed gives the same p-values.

    Returns
    -------
    tuple of Check
    """
    bases = None if "ols" in benchmark.reasons else build_bases(system.factor)
    checks = list(system_checks(system, benchmark, bases, simulations=simulations, seed=seed))
    for index in range(system.n_equations):
        checks.extend(equation_checks(system, index))
    return tuple(checks)
