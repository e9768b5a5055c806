"""Read a study: from a file, or from Python objects, with the same validation."""

from __future__ import annotations

import datetime as dt
import math
import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from bayes_sys.errors import NotBuiltError, StudyError, nearest
from bayes_sys.shipped import card_names
from bayes_sys.study.faults import UNBUILT, key_path, study_error
from bayes_sys.study.spec import Study, StudyFile

LARGEST_STUDY = 5_000_000


def read_study(path: str | Path) -> Study:
    """Read and validate a study file.

    Parameters
    ----------
    path : str or Path
        A TOML file, UTF-8.

    Returns
    -------
    Study

    Raises
    ------
    StudyError
        If the file cannot be read, is not TOML, or says something a study cannot say.
    """
    path = Path(path)
    raw = _read_bytes(path)
    text = _decode(raw, path)
    try:
        content = tomllib.loads(text.removeprefix("\ufeff"))
    except tomllib.TOMLDecodeError as error:
        raise _syntax_error(error, text, path) from None
    except RecursionError:
        raise StudyError(
            "tables and lists are nested too deeply.", where=path.name, mend="A study needs no such depth."
        ) from None
    return _build(content, source=path, folder=path.parent, text=text)


def make_study(content: Mapping[str, Any], *, folder: str | Path = ".") -> Study:
    """Make a study from Python objects, with the validation a file gets.

    Parameters
    ----------
    content : mapping
        What the study file would hold, as nested mappings, lists and values.
    folder : str or Path
        Paths in the study are relative to this folder.

    Raises
    ------
    StudyError
        If the content says something a study cannot say.
    """
    if not isinstance(content, Mapping):
        raise StudyError(
            f"found {type(content).__name__}, expected a mapping.",
            where="study given in Python",
            mend='Such as {"data": {"period": "year"}, …}.',
        )
    return _build(_plain(content), source=None, folder=Path(folder), text="")


def refuse_unbuilt(study: Study) -> None:
    """Refuse a study that asks for what is parsed but not built yet.

    Raises
    ------
    NotBuiltError
        One error that names every such section.
    """
    # By presence and not by content: an empty table is a wish as well.
    written = [name for name in UNBUILT if name in study.content or getattr(study, name)]
    shown = [heading for name in written for heading in _headings(study, name)]
    shown += ['errors.family = "student_t"'] if study.errors.family == "student_t" else []
    shown += ['errors.autocorrelation = "ar1"'] if study.errors.autocorrelation == "ar1" else []
    if shown:
        raise NotBuiltError(
            f"the study asks for {', '.join(shown)}, which this version cannot do yet.",
            where=study.label,
            mend="Take these out; everything else in the study can be run.",
        )


def _headings(study: Study, name: str) -> list[str]:
    """Return the headings under which a section stands in a study."""
    if name in ("restriction", "contrast"):
        return [f"[[{name}]]"]
    inside = getattr(study, name) if name in ("scenario", "aggregate") else ()
    return [f"[{name}.{key_path((n,))}]" for n in inside] or [f"[{name}]"]


def _check_cards(study: Study) -> None:
    """Refuse a card of [compare] that is neither shipped nor a file."""
    for i, card in enumerate(study.compare.cards):
        if card not in card_names() and not (study.folder / Path(card).expanduser()).is_file():
            raise StudyError(
                f"there is no prior card “{card}”: neither one that comes with the package, nor a file.",
                where=study.at(f"compare.cards[{i}]"),
                mend=f"{nearest(card, card_names())} A path is relative to the study file.",
            )


def _build(content: dict[str, Any], *, source: Path | None, folder: Path, text: str) -> Study:
    label = source.name if source is not None else "study given in Python"
    _check_finite(content, (), label)
    try:
        parts = StudyFile.model_validate(content)
    except ValidationError as error:
        raise study_error(error, StudyFile, label) from None
    values = {name: getattr(parts, name) for name in StudyFile.model_fields}
    values["title"] = parts.title.strip() or (source.stem if source is not None else "Untitled study")
    study = Study(**values, source=source, folder=folder, text=text, content=content)
    _check_cards(study)
    return study


def _read_bytes(path: Path) -> bytes:
    try:
        _check_path(path)
        raw = path.read_bytes()
    except OSError as error:
        reason = error.strerror or "unknown reason"
        raise StudyError(f"the file cannot be read ({reason}).", where=str(path)[:200]) from None
    if not raw.strip():
        raise StudyError("the file is empty.", where=str(path), mend="A study needs at least a [data] table.")
    return raw


def _check_path(path: Path) -> None:
    if not path.exists():
        raise StudyError("there is no such file.", where=str(path), mend=_similar(path))
    if path.is_dir():
        inside = sorted(p.name for p in path.glob("*.toml"))
        mend = f"It holds {', '.join(inside[:5])}: name one." if inside else "Name the study file."
        raise StudyError("this is a folder, not a study file.", where=str(path), mend=mend)
    if path.stat().st_size > LARGEST_STUDY:
        raise StudyError(
            f"the file has {path.stat().st_size:,} bytes; a study file has at most {LARGEST_STUDY:,}.",
            where=str(path),
            mend="Is this the data file? The study is the TOML file that names it.",
        )


def _similar(path: Path) -> str:
    if not path.parent.is_dir():
        return f"There is no folder {path.parent} either: check the path."
    known = sorted(p.name for p in path.parent.glob("*.toml"))
    return f"The folder holds {', '.join(known[:5])}." if known else "Check the name and the folder."


def _decode(raw: bytes, path: Path) -> str:
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise StudyError(
            "the file is not UTF-8 text.", where=f"{path.name}, line {line}", mend="Save it as UTF-8."
        ) from None


def _syntax_error(error: tomllib.TOMLDecodeError, text: str, path: Path) -> StudyError:
    message = str(error)
    what, _, place = message.rpartition(" (at ")
    what, place = (what, place.rstrip(")")) if what else (message, "")
    where = f"{path.name}, {place}" if place else path.name
    first = text.lstrip("\ufeff").split("\n", 1)[0]
    plain = not any(sign in first for sign in "=[#") and any(sign in first for sign in ",;\t")
    looks_like_data = plain or path.suffix.lower() in (".csv", ".parquet", ".xlsx")
    mend = (
        "This looks like a data file: name the study file instead."
        if looks_like_data
        else 'Check the TOML: text in quotes, lists as [ … ], one "key = value" a line.'
    )
    return StudyError(f"this is not valid TOML: {what}.", where=where, mend=mend)


def _plain(value: Any) -> Any:
    """Return Python objects as TOML would have given them."""
    if isinstance(value, Mapping):
        return {str(k): _plain(v) for k, v in value.items() if v is not None}
    if isinstance(value, (list, tuple)):
        return [_plain(v) for v in value]
    if isinstance(value, Path):
        return str(value)
    if hasattr(value, "to_pydatetime"):
        return value.to_pydatetime()
    if (
        hasattr(value, "item")
        and not isinstance(value, (str, bytes, dt.date))
        and getattr(value, "ndim", 1) == 0
    ):
        return value.item()
    if hasattr(value, "tolist"):
        return _plain(value.tolist())
    return value


def _check_finite(value: Any, parts: tuple[str | int, ...], label: str) -> None:
    if isinstance(value, float) and not math.isfinite(value):
        raise StudyError(f"found {value}, expected a finite number.", where=f"{label}, {key_path(parts)}")
    if isinstance(value, Mapping):
        for key, inner in value.items():
            _check_finite(inner, (*parts, str(key)), label)
    elif isinstance(value, list):
        for i, inner in enumerate(value):
            _check_finite(inner, (*parts, i), label)
