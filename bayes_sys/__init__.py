"""bayes-sys: joint Bayesian regressions for several units with short series and shared shocks.

The public names are imported when first used, so that ``import bayes_sys`` costs next to nothing.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from bayes_sys.classical.check import examination_rows
    from bayes_sys.classical.estimators import benchmark_table, classical_estimates
    from bayes_sys.classical.examination import examine
    from bayes_sys.errors import (
        BayesSysError,
        CardError,
        DesignError,
        InputError,
        NotBuiltError,
        RunFolderError,
        SamplingError,
        StudyError,
        TableError,
    )
    from bayes_sys.model.factory import build_model
    from bayes_sys.posterior.checks import predictive_checks
    from bayes_sys.posterior.tables import (
        coefficient_table,
        correlation_table,
        equation_table,
        fitted_table,
        scale_table,
    )
    from bayes_sys.prior.cards import PriorCard, read_card, study_card
    from bayes_sys.prior.effective import card_text, effective_card
    from bayes_sys.prior.resolve import resolve
    from bayes_sys.prior.words import describe
    from bayes_sys.runs import open_run
    from bayes_sys.sampling.engine import sample
    from bayes_sys.sampling.gate import Limits, Verdict, hold, sample_until_passed
    from bayes_sys.sampling.graph import complete
    from bayes_sys.sampling.progress import Progress
    from bayes_sys.shipped import card_names, case_study
    from bayes_sys.study.read import make_study, read_study
    from bayes_sys.study.spec import Study
    from bayes_sys.system.align import build_system
    from bayes_sys.system.system import System

_HOMES = {
    "bayes_sys.classical.check": ("examination_rows",),
    "bayes_sys.classical.estimators": ("benchmark_table", "classical_estimates"),
    "bayes_sys.classical.examination": ("examine",),
    "bayes_sys.errors": (
        "BayesSysError",
        "CardError",
        "DesignError",
        "InputError",
        "NotBuiltError",
        "RunFolderError",
        "SamplingError",
        "StudyError",
        "TableError",
    ),
    "bayes_sys.model.factory": ("build_model",),
    "bayes_sys.posterior.checks": ("predictive_checks",),
    "bayes_sys.posterior.tables": (
        "coefficient_table",
        "correlation_table",
        "equation_table",
        "fitted_table",
        "scale_table",
    ),
    "bayes_sys.prior.cards": ("PriorCard", "read_card", "study_card"),
    "bayes_sys.prior.effective": ("card_text", "effective_card"),
    "bayes_sys.prior.resolve": ("resolve",),
    "bayes_sys.prior.words": ("describe",),
    "bayes_sys.runs": ("open_run",),
    "bayes_sys.sampling.engine": ("sample",),
    "bayes_sys.sampling.gate": ("Limits", "Verdict", "hold", "sample_until_passed"),
    "bayes_sys.sampling.graph": ("complete",),
    "bayes_sys.sampling.progress": ("Progress",),
    "bayes_sys.shipped": ("card_names", "case_study"),
    "bayes_sys.study.read": ("make_study", "read_study"),
    "bayes_sys.study.spec": ("Study",),
    "bayes_sys.system.align": ("build_system",),
    "bayes_sys.system.system": ("System",),
}
_HOME_OF = {name: home for home, names in _HOMES.items() for name in names}

__all__ = [
    "BayesSysError",
    "CardError",
    "DesignError",
    "InputError",
    "Limits",
    "NotBuiltError",
    "PriorCard",
    "Progress",
    "RunFolderError",
    "SamplingError",
    "Study",
    "StudyError",
    "System",
    "TableError",
    "Verdict",
    "benchmark_table",
    "build_model",
    "build_system",
    "card_names",
    "card_text",
    "case_study",
    "classical_estimates",
    "coefficient_table",
    "complete",
    "correlation_table",
    "describe",
    "effective_card",
    "equation_table",
    "examination_rows",
    "examine",
    "fitted_table",
    "hold",
    "make_study",
    "open_run",
    "predictive_checks",
    "read_card",
    "read_study",
    "resolve",
    "sample",
    "sample_until_passed",
    "scale_table",
    "study_card",
]


def __getattr__(name: str) -> Any:
    """Import a public name when it is first used."""
    if name == "__version__":
        from importlib.metadata import version

        return version("bayes-sys")
    if name not in _HOME_OF:
        raise AttributeError(f"module “bayes_sys” has no name “{name}”")
    value = getattr(importlib.import_module(_HOME_OF[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names."""
    return [*__all__, "__version__"]
