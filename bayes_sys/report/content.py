"""What the page is made from: nothing but what stands in a run folder."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bayes_sys import runs
from bayes_sys.errors import RunFolderError

if TYPE_CHECKING:
    import pandas as pd

TABLES = {
    "coefficients": runs.COEFFICIENTS,
    "scales": runs.SCALES,
    "correlations": runs.CORRELATIONS,
    "fitted": runs.FITTED,
    "equations": runs.EQUATIONS,
    "benchmark": runs.BENCHMARK,
    "checks": runs.CHECKS,
    "pooled": runs.POOLED,
}
ALWAYS = (
    runs.STUDY,
    runs.PRIOR,
    runs.EXAMINATION,
    *(file for file in TABLES.values() if file != runs.POOLED),
)
"""What every finished run has written; without one of these the page would be silent where it should speak."""
NAMES = (
    "equation",
    "equation_a",
    "equation_b",
    "regressor",
    "period",
    "statistic",
    "quantity",
    "verdict",
    "sentence",
)
"""Columns that hold text, whatever it looks like: a unit may be called 007 or NA."""


@dataclass(frozen=True)
class RunContent:
    """One run, read.

    Parameters
    ----------
    manifest : mapping
        As in ``manifest.json``; any key may be missing.
    study : str
        The study file.
    card : str
        The effective prior card.
    examination : list of mappings
        As in ``examination.json``.
    tables : mapping of str to DataFrame
        "coefficients", "scales", "correlations", "fitted", "equations", "benchmark", "checks", "pooled"; any may be
        missing.
    prior_words : tuple of str
        The prior in plain sentences.
    """

    manifest: Mapping[str, Any] = field(default_factory=dict)
    study: str = ""
    card: str = ""
    examination: tuple[Mapping[str, Any], ...] = ()
    tables: Mapping[str, pd.DataFrame] = field(default_factory=dict)
    prior_words: tuple[str, ...] = ()


def load_content(folder: str | Path, *, manifest: Mapping[str, Any] | None = None) -> RunContent:
    """Read a run folder.

    Parameters
    ----------
    folder : str or Path
    manifest : mapping, optional
        To be used instead of ``manifest.json``, by a run that has not closed its manifest yet.

    Raises
    ------
    RunFolderError
        If the folder is not one of a run, or a file in it is missing or cannot be read.
    """
    run = runs.open_run(folder)
    content = dict(run.manifest() if manifest is None else manifest)
    check_whole(run.path, content)
    return RunContent(
        manifest=content,
        study=_text(run.path / runs.STUDY),
        card=_text(run.path / runs.PRIOR),
        examination=tuple(run.read_json(runs.EXAMINATION)),
        tables={
            name: read_table(run.path / file) for name, file in TABLES.items() if (run.path / file).is_file()
        },
        prior_words=tuple(content.get("prior_words") or ()),
    )


def check_whole(folder: Path, manifest: Mapping[str, Any]) -> None:
    """Refuse a run of which something is gone that the page is made from.

    Parameters
    ----------
    folder : Path
    manifest : mapping
        Its ``files`` name what this very run has written, beside what every run writes.

    Raises
    ------
    RunFolderError
        If a file is missing.
    """
    read = {*ALWAYS, *(manifest.get("files") or ())} & {*ALWAYS, *TABLES.values()}
    missing = sorted(name for name in read if not (folder / name).is_file())
    if missing:
        command = manifest.get("command") or "bayes-sys run STUDY"
        raise RunFolderError(
            f"the page cannot be made, because something is missing: {', '.join(missing)}.",
            where=str(folder),
            mend=f"Put it back, or run again with --overwrite: {command}",
        )


def read_table(path: Path) -> pd.DataFrame:
    """Read one table of a run; labels stay text, empty cells become NaN.

    Raises
    ------
    RunFolderError
        If the file cannot be read as a table.
    """
    import pandas as pd

    try:
        columns = pd.read_csv(path, nrows=0).columns
        labels = {name: str for name in NAMES if name in columns}
        empty = {name: [""] for name in columns if name not in labels}
        return pd.read_csv(path, dtype=labels, na_values=empty, keep_default_na=False)
    except (OSError, ValueError) as error:
        raise RunFolderError(
            f"this table cannot be read ({error}).", where=str(path), mend="Run the study again."
        ) from error


def _text(path: Path) -> str:
    try:
        return path.read_bytes().decode("utf-8", errors="replace") if path.is_file() else ""
    except OSError as error:
        raise RunFolderError(
            f"this file cannot be read ({error.strerror}).", where=str(path), mend="Run the study again."
        ) from error
