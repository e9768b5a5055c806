"""How long, how carefully and with which seed to sample."""

from __future__ import annotations

import os
from dataclasses import dataclass

from bayes_sys.errors import InputError

CAREFUL, POOLED, ALONE = 0.97, 0.95, 0.8


@dataclass(frozen=True)
class Settings:
    """Settings of one sampling run.

    Parameters
    ----------
    chains, warmup, draws : int
        Number of chains, and iterations per chain before and after adaptation.
    seed : int
    target_accept : float or None
        Aim of the step-size adaptation; None: 0.97 where no spread is learned, 0.95 where one is. Measured: on five
        equations with ten periods and six shared regressors, 80,000 draws each, two divergences at 0.9 and at
        0.95, none at 0.97, which takes a tenth more steps than 0.95; on nine pooled systems of five equations
        and 10 to 18 periods no divergences, and fewest effective draws 970 at 0.9 and 1642 at 0.95. One equation
        alone leaves one number to explore: 0.8, with half again as many effective draws as 0.97.
    cores : int or None
        Chains run at once; None: as many as there are cores.
    """

    chains: int = 4
    warmup: int = 1000
    draws: int = 1000
    seed: int = 1
    target_accept: float | None = None
    cores: int | None = None

    def __post_init__(self) -> None:
        """Refuse what no sampler can do."""
        for name, least in (("chains", 1), ("warmup", 50), ("draws", 4)):
            value = getattr(self, name)
            if value < least:
                raise InputError(
                    f"{name} is {value}, expected at least {least}.", mend=f"Give {name} = {least} or more."
                )
        if not 0 <= self.seed < 2**63:
            raise InputError(
                f"seed is {self.seed}, expected a whole number from 0 to 2^63 - 1.",
                mend="Choose another seed.",
            )
        if self.target_accept is not None and not 0.5 <= self.target_accept < 1:
            raise InputError(
                f"target_accept is {self.target_accept}, expected a number from 0.5 to below 1.",
                mend="Leave it out to have it chosen.",
            )

    @property
    def n_cores(self) -> int:
        """Chains run at once."""
        return min(self.chains, self.cores or _available())


def _available() -> int:
    """Cores this process may use (``os.process_cpu_count`` came with Python 3.13)."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1
