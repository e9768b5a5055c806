"""Every error a user can meet.

::

    BayesSysError              exit code 1
    ├── InputError             exit code 2: the input is wrong; says what, where and how to mend it
    │   ├── StudyError         the study file
    │   ├── TableError         the data
    │   ├── CardError          the prior card
    │   ├── DesignError        the system that study and data make together
    │   ├── NotBuiltError      a capability that is parsed but not built yet
    │   └── RunFolderError     the place where results go, or a run that cannot be opened
    └── SamplingError          the sampler could not do its work
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable


class BayesSysError(Exception):
    """Base class of everything this package raises on purpose."""

    exit_code = 1


class InputError(BayesSysError):
    """The input is wrong.

    Parameters
    ----------
    what : str
        What was found, and what was expected.
    where : str
        File, key, column or row; empty if the message stands alone.
    mend : str
        What to do about it.
    """

    exit_code = 2

    def __init__(self, what: str, *, where: str = "", mend: str = "") -> None:
        self.what, self.where, self.mend = what, where, mend
        super().__init__(" ".join(part for part in (f"{where}:" if where else "", what, mend) if part))


class StudyError(InputError):
    """The study file is wrong."""


class TableError(InputError):
    """The data are wrong: a file, a column, a row or a cell."""


class CardError(InputError):
    """The prior card is wrong."""


class DesignError(InputError):
    """Study and data are each in order, but the system they make is not."""


class NotBuiltError(InputError):
    """The study asks for a capability that is not built yet."""


class RunFolderError(InputError):
    """The place for the results cannot be used, or is not a run folder."""


class SamplingError(BayesSysError):
    """The sampler could not do its work."""


def nearest(name: str, known: Iterable[str]) -> str:
    """Return a hint that names the nearest known name, or lists a few; empty if nothing is known."""
    names = list(known)
    close = difflib.get_close_matches(name, names, n=1, cutoff=0.6)
    if close:
        return f"Did you mean “{close[0]}”?"
    if not names:
        return ""
    shown = ", ".join(f"“{n}”" for n in names[:12])
    return f"Known: {shown}{' …' if len(names) > 12 else ''}."
