"""What the manifest says of a run: enough to judge it, and to repeat it."""

from __future__ import annotations

import platform
import time
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from datetime import UTC, datetime
from importlib import metadata
from typing import TYPE_CHECKING, Any

from bayes_sys import runs

if TYPE_CHECKING:
    from bayes_sys.sampling.gate import Limits, Outcome, Verdict
    from bayes_sys.study.spec import Study

LIBRARIES = ("numpy", "scipy", "pandas", "xarray", "arviz", "pymc", "pytensor", "nutpie", "numba", "h5netcdf")
"""Their versions are kept: other versions may draw other numbers from the same seed."""

SETTINGS = ("engine", "seed", "chains", "warmup", "draws", "target_accept")


@dataclass
class Clock:
    """Seconds of each part of the work."""

    started: float = field(default_factory=time.perf_counter)
    laps: dict[str, float] = field(default_factory=dict)

    def lap(self, name: str) -> None:
        """Give the seconds since the last lap to this part."""
        self.laps[name] = time.perf_counter() - self.started - sum(self.laps.values())

    @property
    def timings(self) -> dict[str, float]:
        """Seconds of each part so far and of the whole, to the millisecond."""
        total = time.perf_counter() - self.started
        return {name: round(seconds, 3) for name, seconds in {**self.laps, "total": total}.items()}


def opening(study: Study, *, engine: str, command: str) -> dict[str, Any]:
    """Return what is known of a run before anything is computed.

    Parameters
    ----------
    study : Study
        With the settings that this run uses.
    engine : str
        As asked for.
    command : str
        How a reader repeats this run.
    """
    sampling = study.sampling
    return {
        "status": runs.INCOMPLETE,
        "title": study.title,
        "created": datetime.now(UTC).isoformat(timespec="seconds"),
        "command": command,
        "seed": sampling.seed,
        "chains": sampling.chains,
        "warmup": sampling.warmup,
        "draws": sampling.draws,
        "engine": engine,
        "versions": versions(),
        "study_sha256": runs.sha256(study.text.encode("utf-8")),
        "data_sha256": data_hashes(study),
        "messages": [],
    }


def closing(outcome: Outcome, limits: Limits) -> dict[str, Any]:
    """Return what sampling adds to the manifest, the final status among it.

    Parameters
    ----------
    outcome : Outcome
    limits : Limits
        What the gate asked for.
    """
    verdict = outcome.verdict
    gate = {
        **asdict(verdict.figures),
        "passed": verdict.passed,
        "limits": asdict(limits),
        "failures": verdict.failures,
        "advice": verdict.advice,
    }
    return {
        # Of the attempt that counts: a second one runs longer than was asked for.
        **{name: outcome.posterior.attrs[name] for name in SETTINGS},
        "status": runs.COMPLETE if verdict.passed else runs.GATE_FAILED,
        "attempts": outcome.attempts,
        "gate": gate,
    }


def not_to_be_used(verdict: Verdict) -> str:
    """Return the text of the file that marks the tables of a posterior which did not pass the gate.

    The tables themselves have fixed columns and could not say it.
    """
    lines = [
        "The tables and draws in this folder are NOT TO BE USED as results.",
        "",
        "The posterior did not pass the gate, the conditions that draws must meet before their numbers are shown:",
        *(f"- {failure}" for failure in verdict.failures),
        "",
        "What helps:",
        *(f"- {advice}" for advice in verdict.advice),
        "",
        f"Everything was written so that the cause can be found; {runs.REPORT} shows it. This file goes away when "
        "the run is redone.",
    ]
    return "\n".join(lines) + "\n"


def versions() -> Mapping[str, str]:
    """Return the versions of Python, of this package and of the libraries that the numbers depend on."""
    found = {"python": platform.python_version(), "bayes_sys": _version("bayes-sys")}
    return found | {name: _version(name) for name in LIBRARIES}


def data_hashes(study: Study) -> dict[str, str]:
    """Return the SHA-256 of every data file, by its name in the study."""
    files = [study.data.file, *(table.file for table in study.data.shared)]
    return {name: runs.sha256(study.folder / name) for name in files if name is not None}


def _version(distribution: str) -> str:
    try:
        return metadata.version(distribution)
    except metadata.PackageNotFoundError:
        return "not installed"
