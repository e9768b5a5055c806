"""What each command does, in order.

`examine` reads the study, aligns the system, computes the benchmark and checks data and design. `run` goes
on: it opens the run folder, samples, holds the posterior against the gate, writes the tables and the page.
`report` builds the page of a finished run anew. Whatever can be wrong with the input is found before the
folder is made.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pydantic import ValidationError

from bayes_sys import runs
from bayes_sys.classical.check import WARNING, addressed
from bayes_sys.classical.estimators import Benchmark, benchmark_table, classical_estimates
from bayes_sys.classical.examination import Check, examination_rows
from bayes_sys.classical.examination import examine as check_design
from bayes_sys.errors import RunFolderError
from bayes_sys.prior.cards import PriorCard, read_card, study_card
from bayes_sys.prior.effective import card_text, effective_card
from bayes_sys.prior.resolve import resolve
from bayes_sys.prior.words import describe
from bayes_sys.record import Clock, closing, not_to_be_used, opening
from bayes_sys.runs import RunFolder
from bayes_sys.sampling.progress import Progress, Watcher, unwatched
from bayes_sys.shipped import card_names, priors_folder
from bayes_sys.study.faults import study_error
from bayes_sys.study.read import read_study
from bayes_sys.study.spec import SamplingSpec, Study
from bayes_sys.system.align import build_system
from bayes_sys.system.system import System

if TYPE_CHECKING:
    import pandas as pd

    from bayes_sys.sampling.engine import EngineName
    from bayes_sys.sampling.gate import Limits, Outcome


@dataclass(frozen=True)
class Overrides:
    """What the command line says instead of the study's ``[sampling]``; None: as the study says."""

    chains: int | None = None
    warmup: int | None = None
    draws: int | None = None
    seed: int | None = None
    engine: EngineName = "auto"


@dataclass(frozen=True)
class Prepared:
    """Everything that needs no sampling."""

    study: Study
    system: System
    card: PriorCard
    prior_text: str
    prior_words: tuple[str, ...]
    benchmark: Benchmark
    checks: tuple[Check, ...]

    @property
    def warnings(self) -> tuple[str, ...]:
        """Sentences of the checks that a reader should not miss, each with the equations it speaks of."""
        return tuple(addressed(examination_rows(c for c in self.checks if c.verdict == WARNING)))

    @property
    def findings(self) -> dict[str, Any]:
        """What the manifest says of all this."""
        return {
            "card": {"name": self.card.name, "summary": self.card.summary},
            "prior_words": self.prior_words,
            "notes": self.system.notes,
            "reasons": self.benchmark.reasons,
            "messages": self.warnings,
        }


@dataclass(frozen=True)
class Examination:
    """What `examine` found.

    Parameters
    ----------
    prepared : Prepared
    rows : list of mappings
        As in ``examination.json``.
    benchmark : DataFrame
        As in ``benchmark.csv``.
    place : Path or None
        Where the two were written, None if nowhere.
    """

    prepared: Prepared
    rows: list[dict[str, Any]]
    benchmark: pd.DataFrame
    place: Path | None


@dataclass(frozen=True)
class Run:
    """What `run` made.

    Parameters
    ----------
    folder : RunFolder
    manifest : mapping
        As in ``manifest.json``.
    tables : mapping of str to DataFrame
        By the names of their files in the folder.
    prepared : Prepared
    """

    folder: RunFolder
    manifest: Mapping[str, Any]
    tables: Mapping[str, pd.DataFrame]
    prepared: Prepared

    @property
    def passed(self) -> bool:
        """Whether the posterior passed the gate."""
        return bool(self.manifest["status"] == runs.COMPLETE)


@dataclass(frozen=True)
class Page:
    """A page, and the manifest of the run it shows."""

    path: Path
    manifest: Mapping[str, Any]


def examine(
    study_path: str | Path,
    *,
    out: str | Path | None = None,
    overwrite: bool = False,
    progress: Watcher = unwatched,
) -> Examination:
    """Check data and design and compute the classical benchmark; no sampling.

    Parameters
    ----------
    study_path : str or Path
    out : str or Path, optional
        Folder for ``examination.json`` and ``benchmark.csv``; by default nothing is written.
    overwrite : bool
        Whether the two files may be replaced where they exist.
    progress : callable
        Receives a `Progress` at each stage.

    Returns
    -------
    Examination

    Raises
    ------
    InputError
        If study, data, card, design or the place are wrong.
    """
    if out is not None:
        runs.check_examination_place(out, overwrite=overwrite)
    prepared = prepare(study_path, Clock(), progress)
    rows = examination_rows(prepared.checks)
    benchmark = benchmark_table(prepared.benchmark, prepared.system)
    place = None
    if out is not None:
        place = runs.save_examination(out, checks=rows, benchmark=benchmark, overwrite=overwrite)
    return Examination(prepared, rows, benchmark, place)


def run(
    study_path: str | Path,
    *,
    out: str | Path | None = None,
    overwrite: bool = False,
    overrides: Overrides = Overrides(),
    command: str = "",
    progress: Watcher = unwatched,
) -> Run:
    """Do the whole job: examine, sample, hold against the gate, write tables and page.

    Parameters
    ----------
    study_path : str or Path
    out : str or Path, optional
        The run folder, by default ``runs/<name of the study file>``.
    overwrite : bool
        Whether a finished run may be replaced.
    overrides : Overrides
    command : str
        How a reader repeats this run; kept in the manifest.
    progress : callable
        Receives a `Progress` at each stage, while sampling from another thread.

    Returns
    -------
    Run
        Whether or not the gate was passed: everything is written, and marked.

    Raises
    ------
    InputError
        If study, data, card, design or the place are wrong; nothing is written then.
    SamplingError
        If the sampler could not do its work; the folder stays marked as incomplete.
    """
    clock = Clock()
    place = runs.check_place(runs.default_place(study_path) if out is None else out, overwrite=overwrite)
    prepared = prepare(study_path, clock, progress, overrides)
    manifest = {**opening(prepared.study, engine=overrides.engine, command=command), **prepared.findings}
    with runs.begin_run(place, manifest=manifest, overwrite=overwrite) as folder:
        write_inputs(folder, prepared)
        limits = gate_limits(prepared.study)
        outcome = sample(prepared, limits, overrides.engine, progress)
        manifest |= closing(outcome, limits)
        clock.lap("sample")
        progress(Progress("tables"))
        tables = write_results(folder, prepared, outcome)
        manifest["files"] = folder.files
        clock.lap("tables")
        progress(Progress("page"))
        write_page(folder, {**manifest, "timings": clock.timings})
        clock.lap("page")
        manifest["timings"] = clock.timings
        folder.write_json(runs.MANIFEST, manifest)
    return Run(folder, manifest, tables, prepared)


def report(run_folder: str | Path, *, progress: Watcher = unwatched) -> Page:
    """Build the page of a finished run anew from what stands in its folder.

    Parameters
    ----------
    run_folder : str or Path
    progress : callable

    Returns
    -------
    Page

    Raises
    ------
    RunFolderError
        If the folder is not one of a finished run.
    """
    folder = runs.open_run(run_folder)
    manifest = folder.manifest()
    if manifest["status"] == runs.INCOMPLETE:
        raise RunFolderError(
            "this run was not finished, so there is nothing to make a page of.",
            where=str(folder.path),
            mend=f"Run it again: {manifest.get('command') or 'bayes-sys run STUDY'}",
        )
    progress(Progress("page"))
    return Page(write_page(folder, manifest), manifest)


def cards() -> list[dict[str, str]]:
    """Return name and summary of every prior card that comes with the package."""
    return [{"name": name, "summary": read_card(name).summary} for name in card_names()]


def explain_card(name: str) -> dict[str, Any]:
    """Return a card, by name or path, in words and as its file says it.

    Raises
    ------
    CardError
        If there is no such card, or it is not valid.
    """
    card = read_card(name)
    path = priors_folder() / f"{name}.toml" if name in card_names() else Path(name)
    return {
        "name": card.name,
        "summary": card.summary,
        "words": describe(card),
        "text": path.read_text(encoding="utf-8"),
    }


def prepare(
    study_path: str | Path,
    clock: Clock,
    progress: Watcher,
    overrides: Overrides = Overrides(),
) -> Prepared:
    """Read, align, compute the benchmark, check; everything that can be wrong with the input is met here."""
    progress(Progress("reading"))
    if overrides.engine != "auto":
        from bayes_sys.sampling.engine import choose_engine

        choose_engine(overrides.engine)
    study = overridden(read_study(study_path), overrides)
    system = build_system(study)
    card = study_card(study)
    prior = resolve(card, system)
    prior_text = card_text(effective_card(prior, system, card))
    words = describe(card, system)
    clock.lap("read")
    progress(Progress("examining"))
    benchmark = classical_estimates(system)
    checks = check_design(system, benchmark, seed=study.sampling.seed)
    clock.lap("examine")
    return Prepared(study, system, card, prior_text, words, benchmark, checks)


def overridden(study: Study, overrides: Overrides) -> Study:
    """Return the study with the command line's settings, checked as if the file had said them."""
    given = {name: getattr(overrides, name) for name in ("chains", "warmup", "draws", "seed")}
    given = {name: value for name, value in given.items() if value is not None}
    if not given:
        return study
    try:
        sampling = SamplingSpec.model_validate({**study.sampling.model_dump(), **given})
    except ValidationError as error:
        raise study_error(error, SamplingSpec, "command line") from None
    return study.model_copy(update={"sampling": sampling})


def gate_limits(study: Study) -> Limits:
    """Return what the posterior of this study must meet."""
    from bayes_sys.sampling.gate import Limits

    return Limits(rhat=study.gate.rhat, ess=study.gate.ess, divergences=study.gate.divergences)


def sample(prepared: Prepared, limits: Limits, engine: EngineName, progress: Watcher) -> Outcome:
    """Sample until the gate is passed or given up on."""
    # Imported here: the sampler's libraries take seconds, which a wrong study should not cost.
    from bayes_sys.sampling.gate import sample_until_passed

    sampling = prepared.study.sampling
    return sample_until_passed(
        prepared.system,
        prepared.card,
        limits,
        chains=sampling.chains,
        warmup=sampling.warmup,
        draws=sampling.draws,
        seed=sampling.seed,
        engine=engine,
        progress=progress,
    )


def write_inputs(folder: RunFolder, prepared: Prepared) -> None:
    """Write what is known before sampling."""
    folder.write_text(runs.STUDY, prepared.study.text)
    folder.write_text(runs.PRIOR, prepared.prior_text)
    folder.write_json(runs.EXAMINATION, examination_rows(prepared.checks))
    folder.write_table(runs.BENCHMARK, benchmark_table(prepared.benchmark, prepared.system))


def write_results(folder: RunFolder, prepared: Prepared, outcome: Outcome) -> dict[str, pd.DataFrame]:
    """Write the draws and every table; return the tables by the names of their files."""
    from bayes_sys.posterior import checks, tables
    from bayes_sys.posterior.predictive import predictive_band

    posterior, system = outcome.posterior, prepared.system
    if not outcome.verdict.passed:
        # The mark before the tables: whoever finds those finds it too.
        folder.write_text(runs.NOT_TO_BE_USED, not_to_be_used(outcome.verdict))
    folder.write_posterior(posterior)
    benchmark, band = prepared.benchmark, predictive_band(posterior, system)
    written = {
        runs.COEFFICIENTS: tables.coefficient_table(posterior, system, benchmark=benchmark),
        runs.SCALES: tables.scale_table(posterior, system, benchmark=benchmark),
        runs.CORRELATIONS: tables.correlation_table(posterior, system, benchmark=benchmark),
        runs.FITTED: tables.fitted_table(posterior, system, band=band),
        runs.EQUATIONS: tables.equation_table(posterior, system),
        runs.CHECKS: checks.predictive_checks(posterior, system, prepared.study.sampling.seed, band=band[1:]),
    }
    pooled = tables.pooled_table(posterior)
    if len(pooled):
        written[runs.POOLED] = pooled
    for name, table in written.items():
        folder.write_table(name, table)
    return written


def write_page(folder: RunFolder, manifest: Mapping[str, Any]) -> Path:
    """Build the page from what stands in the folder and write it."""
    from bayes_sys.report.content import load_content
    from bayes_sys.report.page import page

    # What making the page takes cannot stand on it; without it the page is the same each time it is made.
    timings = {k: v for k, v in manifest["timings"].items() if k not in ("page", "total")}
    content = load_content(folder.path, manifest=runs.plain({**manifest, "timings": timings}))
    return folder.write_text(runs.REPORT, page(content))
