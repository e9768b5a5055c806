"""The run folder: the only place where anything is written to disk.

Every file is written beside its final name, forced to the disk and then renamed, so that a file under its
final name is always whole. The manifest is written first with the status “incomplete” and last with the
final one: what says “complete” is complete.
"""

from __future__ import annotations

import hashlib
import json
import math
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from bayes_sys.disk import SCRATCH, check_writable, is_scratch, locked, naming, trouble, write_whole
from bayes_sys.errors import RunFolderError

if TYPE_CHECKING:
    import pandas as pd
    import xarray as xr

COMPLETE, GATE_FAILED, INCOMPLETE = "complete", "gate-failed", "incomplete"
STATUSES = (COMPLETE, GATE_FAILED, INCOMPLETE)

MANIFEST = "manifest.json"
STUDY, PRIOR, EXAMINATION = "study.toml", "prior.toml", "examination.json"
BENCHMARK, COEFFICIENTS, SCALES = "benchmark.csv", "coefficients.csv", "scales.csv"
CORRELATIONS, FITTED, EQUATIONS = "correlations.csv", "fitted.csv", "equations.csv"
CHECKS, POOLED = "checks.csv", "pooled.csv"
POSTERIOR, REPORT = "posterior.nc", "report.html"
NOT_TO_BE_USED = "NOT-TO-BE-USED.txt"

EXAMINATION_FILES = (EXAMINATION, BENCHMARK)
RESULT_FILES = (
    STUDY,
    PRIOR,
    EXAMINATION,
    BENCHMARK,
    COEFFICIENTS,
    SCALES,
    CORRELATIONS,
    FITTED,
    EQUATIONS,
    CHECKS,
    POOLED,
    POSTERIOR,
    REPORT,
    NOT_TO_BE_USED,
    "contrasts.csv",
)
RESULT_FOLDERS = ("forecast", "comparison")


@dataclass(frozen=True)
class RunFolder:
    """One run on disk.

    Parameters
    ----------
    path : Path
        The folder.
    """

    path: Path

    @property
    def files(self) -> list[str]:
        """Which files of a run stand in the folder, by name."""
        return sorted(name for name in RESULT_FILES if (self.path / name).is_file())

    def write_text(self, name: str, text: str) -> Path:
        """Write UTF-8 text exactly as given, line ends included."""
        return self.write_bytes(name, text.encode("utf-8"))

    def write_bytes(self, name: str, content: bytes) -> Path:
        """Write bytes."""

        def store(temporary: Path) -> None:
            temporary.write_bytes(content)

        return write_whole(self.path / name, store)

    def write_json(self, name: str, content: Any) -> Path:
        """Write JSON with sorted keys; NaN and infinities become ``null``."""
        text = json.dumps(plain(content), indent=2, sort_keys=True, ensure_ascii=False, allow_nan=False)
        return self.write_text(name, text + "\n")

    def write_table(self, name: str, table: pd.DataFrame) -> Path:
        """Write a table: UTF-8, comma, every digit of a double, empty where not available."""
        return self.write_text(name, table.to_csv(index=False, na_rep="", lineterminator="\n"))

    def write_posterior(self, posterior: xr.DataTree) -> Path:
        """Write the draws as netCDF-4."""
        # By way of memory: a full disk under an open HDF5 file ends in errors that nobody can catch cleanly.
        return self.write_bytes(POSTERIOR, bytes(posterior.to_netcdf(engine="h5netcdf")))

    def read_json(self, name: str) -> Any:
        """Read a JSON file of the run.

        Raises
        ------
        RunFolderError
            If the file is not there or is not JSON.
        """
        try:
            return json.loads((self.path / name).read_text(encoding="utf-8"))
        except OSError as error:
            raise trouble(self.path / name, error, "read") from error
        except ValueError as error:
            raise RunFolderError(
                f"this is not readable JSON ({error}).",
                where=str(self.path / name),
                mend="Run the study again into a fresh folder.",
            ) from error

    def manifest(self) -> dict[str, Any]:
        """Read the manifest.

        Raises
        ------
        RunFolderError
            If the manifest is missing, unreadable or not one of ours.
        """
        content = self.read_json(MANIFEST)
        if not _is_manifest(content):
            raise RunFolderError(
                "this manifest was not written by bayes-sys.",
                where=str(self.path / MANIFEST),
                mend="Name a folder that `bayes-sys run` has made.",
            )
        return dict(content)


def default_place(study: str | Path) -> Path:
    """Return where a run of this study goes unless told otherwise: ``runs/<name of the study file>``."""
    return Path("runs") / Path(study).stem


def open_run(folder: str | Path) -> RunFolder:
    """Open a run folder that exists.

    Parameters
    ----------
    folder : str or Path

    Returns
    -------
    RunFolder

    Raises
    ------
    RunFolderError
        If the folder does not exist, is a file, or was not made by a run.
    """
    path = Path(folder)
    if not path.exists():
        raise RunFolderError(
            "there is no such folder.", where=str(path), mend="Name a folder that `bayes-sys run` has made."
        )
    if not path.is_dir():
        raise RunFolderError(
            "this is a file, not a run folder.",
            where=str(path),
            mend="Name the folder that `bayes-sys run` has made, not a file inside it.",
        )
    if not (path / MANIFEST).is_file():
        raise RunFolderError(
            f"this is not a run folder: it has no {MANIFEST}.",
            where=str(path),
            mend="Name a folder that `bayes-sys run` has made.",
        )
    run = RunFolder(path)
    run.manifest()
    return run


def check_place(path: str | Path, *, overwrite: bool = False) -> Path:
    """Check, touching nothing, that a run may be written to this place.

    Parameters
    ----------
    path : str or Path
        The folder; it need not exist.
    overwrite : bool
        Whether a finished run may be replaced.

    Returns
    -------
    Path

    Raises
    ------
    RunFolderError
        If a file is in the way, the place cannot be written to, a finished run is there and `overwrite` is
        False, or the folder holds something that is not a run.
    """
    place = Path(path)
    with naming(place, "use"):
        check_writable(place)
        # A name of ours that a crash left behind does not make a folder somebody's.
        others = [p for p in place.iterdir() if not is_scratch(p)] if place.exists() else []
    if not others:
        return place
    if not (place / MANIFEST).is_file():
        raise RunFolderError(
            f"this folder holds other things (“{min(p.name for p in others)}”) and is not a run folder.",
            where=str(place),
            mend="Name another place with --out; it may be a folder that does not exist yet.",
        )
    status = open_run(place).manifest()["status"]
    if status != INCOMPLETE and not overwrite:
        raise RunFolderError(
            f"a finished run (“{status}”) is already here, and nothing was touched.",
            where=str(place),
            mend="Say --overwrite to replace it, or name another place with --out.",
        )
    return place


@contextmanager
def begin_run(
    path: str | Path, *, manifest: Mapping[str, Any], overwrite: bool = False
) -> Iterator[RunFolder]:
    """Open a folder for a new run, marked as incomplete, with nothing of an earlier run left in it.

    Files in the folder that no run writes are left alone.

    Parameters
    ----------
    path : str or Path
    manifest : mapping
        What is known before sampling; ``status`` is set here.
    overwrite : bool
        Whether a finished run may be replaced.

    Yields
    ------
    RunFolder

    Raises
    ------
    RunFolderError
        As `check_place`, and if another process is writing to the folder.
    """
    place = check_place(path, overwrite=overwrite)
    is_new = not place.exists()
    with naming(place, "write"):
        place.mkdir(parents=True, exist_ok=True)
    try:
        with locked(place):
            # Once more under the lock: another process may have finished its run here in the meantime.
            check_place(place, overwrite=overwrite)
            run = RunFolder(place)
            # The mark first: a crash while clearing must not leave half a run that says “complete”.
            run.write_json(MANIFEST, {**manifest, "status": INCOMPLETE})
            _clear(place)
            yield run
    finally:
        if is_new:
            # Only succeeds where not even the manifest came to be written.
            with suppress(OSError):
                place.rmdir()


def save_examination(
    path: str | Path, *, checks: Any, benchmark: pd.DataFrame, overwrite: bool = False
) -> Path:
    """Write the examination and the benchmark alone into a folder of their own.

    Parameters
    ----------
    path : str or Path
    checks : list of mappings
    benchmark : DataFrame
    overwrite : bool
        Whether the two files may be replaced where they exist.

    Returns
    -------
    Path

    Raises
    ------
    RunFolderError
        As `check_examination_place`.
    """
    place = check_examination_place(path, overwrite=overwrite)
    with naming(place, "write"):
        place.mkdir(parents=True, exist_ok=True)
    folder = RunFolder(place)
    folder.write_json(EXAMINATION, checks)
    folder.write_table(BENCHMARK, benchmark)
    return place


def check_examination_place(path: str | Path, *, overwrite: bool = False) -> Path:
    """Check, touching nothing, that an examination may be written to this place.

    Raises
    ------
    RunFolderError
        If a file is in the way, the place cannot be written to, it is a run folder, or the files are there
        and `overwrite` is False.
    """
    place = Path(path)
    with naming(place, "use"):
        check_writable(place)
        is_run = (place / MANIFEST).exists()
        found = [name for name in EXAMINATION_FILES if (place / name).exists()]
    if is_run:
        raise RunFolderError(
            "this is the folder of a run, which holds its own examination; nothing was touched.",
            where=str(place),
            mend="Name another place with --out.",
        )
    if found and not overwrite:
        raise RunFolderError(
            f"{' and '.join(found)} exist here already; nothing was touched.",
            where=str(place),
            mend="Say --overwrite to replace them, or name another place with --out.",
        )
    return place


def sha256(content: bytes | Path) -> str:
    """Return the SHA-256 of some bytes or of a file, as 64 hexadecimal digits."""
    if isinstance(content, bytes):
        return hashlib.sha256(content).hexdigest()
    with content.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def plain(value: Any) -> Any:
    """Return a value as a JSON file of ours gives it back.

    Keys are sorted, numpy numbers and arrays unpacked; NaN and infinities become None.
    """
    if isinstance(value, Mapping):
        return {str(k): plain(v) for k, v in sorted(value.items())}
    if isinstance(value, list | tuple | set | frozenset):
        return [plain(v) for v in (sorted(value) if isinstance(value, set | frozenset) else value)]
    if hasattr(value, "tolist"):
        return plain(value.tolist())
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if value is None or isinstance(value, str | int):
        return value
    return str(value)


def _is_manifest(content: Any) -> bool:
    return (
        isinstance(content, dict)
        and content.get("status") in STATUSES
        and isinstance(content.get("versions"), dict)
        and "bayes_sys" in content["versions"]
    )


def _clear(place: Path) -> None:
    """Remove what an earlier run has written here, and scratch files; leave everything else alone."""
    with naming(place, "clear"):
        for name in RESULT_FILES:
            (place / name).unlink(missing_ok=True)
        for name in RESULT_FOLDERS:
            if (place / name).is_dir():
                shutil.rmtree(place / name)
        for path in place.glob(f"{SCRATCH}*"):
            path.unlink(missing_ok=True)
