"""Where the prior cards and the case studies are, however the package was installed."""

from __future__ import annotations

from pathlib import Path

from bayes_sys.errors import BayesSysError, InputError, nearest

_PACKAGE = Path(__file__).resolve().parent


def _folder(name: str) -> Path:
    """Return a folder that travels with the package.

    In a wheel it lies in ``shipped_data`` inside the package; in a checkout or an editable install it is the
    repository's own, told by the project file beside it (site-packages could hold anybody's ``priors``).
    """
    inside, beside = _PACKAGE / "shipped_data" / name, _PACKAGE.parent / name
    if inside.is_dir():
        return inside
    if beside.is_dir() and (_PACKAGE.parent / "pyproject.toml").is_file():
        return beside
    raise BayesSysError(
        f"The folder “{name}” that comes with bayes-sys is missing: looked for {inside} and {beside}. The "
        "installation is incomplete; install the package again."
    )


def priors_folder() -> Path:
    """Return the folder of the prior cards.

    Raises
    ------
    BayesSysError
        The installation lacks it.
    """
    return _folder("priors")


def card_names() -> tuple[str, ...]:
    """Return the names of the cards that come with the package, in alphabetical order."""
    return tuple(sorted(path.stem for path in priors_folder().glob("*.toml")))


def case_study(name: str) -> Path:
    """Return the folder of a case study that comes with the package.

    Raises
    ------
    InputError
        There is no case study of this name.
    BayesSysError
        The installation lacks the case studies.
    """
    folder = _folder("case_studies")
    known = sorted(path.name for path in folder.iterdir() if path.is_dir())
    if name not in known:
        raise InputError(f"There is no case study “{name}”.", mend=nearest(name, known))
    return folder / name
