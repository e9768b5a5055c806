"""What a sampler tells whoever watches it."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass


@dataclass(frozen=True)
class Progress:
    """A moment of a sampling run.

    Parameters
    ----------
    stage : str
        "preparing", "compiling", "warmup", "sampling" or "drawing".
    done, total : int
        Iterations over all chains, warmup included; 0 where the stage has no length.
    divergences : int
        Divergent transitions so far, after warmup.
    attempt : int
        1, or 2 when a failed gate made a second attempt necessary.
    """

    stage: str
    done: int = 0
    total: int = 0
    divergences: int = 0
    attempt: int = 1


Watcher = Callable[[Progress], None]


def unwatched(progress: Progress) -> None:
    """Ignore progress."""
