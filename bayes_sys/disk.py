"""Writing so that nothing is ever half written, one writer at a time, and every failure in plain words."""

from __future__ import annotations

import errno
import json
import os
import socket
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from bayes_sys.errors import RunFolderError

LOCK, SCRATCH = "run.lock", ".writing-"


def is_scratch(path: Path) -> bool:
    """Return whether a file is a lock or an unfinished write, which no user has put there."""
    return path.name == LOCK or path.name.startswith(SCRATCH)


def check_writable(place: Path) -> None:
    """Raise the error that writing there would meet, as far as it can be seen without writing."""
    if place.exists() and not place.is_dir():
        raise FileExistsError(errno.EEXIST, os.strerror(errno.EEXIST), str(place))
    standing = next(p for p in (place.absolute(), *place.absolute().parents) if p.exists())
    if not standing.is_dir():
        raise NotADirectoryError(errno.ENOTDIR, os.strerror(errno.ENOTDIR), str(standing))
    if not os.access(standing, os.W_OK | os.X_OK, effective_ids=os.access in os.supports_effective_ids):
        raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), str(standing))


def write_whole(target: Path, store: Callable[[Path], None]) -> Path:
    """Let `store` write a temporary file beside the target, force it to disk, rename it."""
    with naming(target, "write"):
        target.parent.mkdir(parents=True, exist_ok=True)
        temporary = target.with_name(f"{SCRATCH}{os.getpid()}-{target.name}")
        try:
            store(temporary)
            with temporary.open("rb+") as file:
                os.fsync(file.fileno())
            temporary.replace(target)
        finally:
            with suppress(OSError):
                temporary.unlink(missing_ok=True)
    return target


@contextmanager
def naming(path: Path, verb: str) -> Iterator[None]:
    """Turn the operating system's errors into ours."""
    try:
        yield
    except OSError as error:
        raise trouble(path, error, verb) from error


def trouble(path: Path, error: OSError, verb: str) -> RunFolderError:
    """Return an operating system's error in plain words."""
    code = error.errno
    if code in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG):
        what, mend = "the disk or the quota is full.", "Free some space, or name another place with --out."
    elif code in (errno.EACCES, errno.EPERM, errno.EROFS):
        what, mend = f"there is no permission to {verb} this.", "Name a place of your own with --out."
    elif code in (errno.ENOTDIR, errno.EEXIST, errno.EISDIR):
        name = error.filename or str(path)
        what = f"a file stands where a folder is needed (“{name}”)."
        mend = "Move the file, or name another place with --out."
    elif code == errno.ENOENT and verb == "read":
        what, mend = "there is no such file.", "Run the study again."
    elif code == errno.ENOENT:
        what, mend = "nothing can be made here.", "Name another place with --out."
    else:
        what, mend = f"this cannot be used ({error}).", "Name another place with --out."
    return RunFolderError(what, where=str(path), mend=mend)


@contextmanager
def locked(place: Path) -> Iterator[None]:
    """Hold the folder against a second run at the same time."""
    lock = place / LOCK
    _take_lock(lock)
    try:
        yield
    finally:
        with suppress(OSError):
            lock.unlink(missing_ok=True)


def _take_lock(lock: Path) -> None:
    """Create the lock file, replacing one whose process is gone.

    Raises
    ------
    RunFolderError
        If another process holds the lock, or the folder cannot be written to.
    """
    owner = json.dumps({"pid": os.getpid(), "host": socket.gethostname()})
    for _ in range(2):
        try:
            with naming(lock, "write"), lock.open("x", encoding="utf-8") as file:
                file.write(owner)
            return
        except RunFolderError as error:
            if not isinstance(error.__cause__, FileExistsError):
                raise
        if _is_alive(lock):
            break
        lock.unlink(missing_ok=True)
    raise RunFolderError(
        "another run is writing here.",
        where=str(lock.parent),
        mend=f"Wait for it or name another place with --out. If none is running, delete {lock.name} in it.",
    )


def _is_alive(lock: Path) -> bool:
    """Return whether the process that wrote the lock file may still be running."""
    try:
        owner = json.loads(lock.read_text(encoding="utf-8"))
        pid, host = int(owner["pid"]), owner["host"]
    except (OSError, ValueError, KeyError, TypeError):
        # Just being written, or written by nobody who could finish: only a person can tell.
        return True
    if host != socket.gethostname() or os.name == "nt":
        return True
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True
