"""Long work is a generator: it yields `Progress`, may be closed at every yield, and returns its result."""

from __future__ import annotations

from collections.abc import Callable, Generator
from dataclasses import dataclass
from typing import TypeVar

T = TypeVar("T")


@dataclass(frozen=True)
class Progress:
    """How far a piece of work has come.

    Parameters
    ----------
    stage : str
        What is being done, in words for the user.
    done, total : float
        Amount done and in all, in any one unit; ``total`` 0 means unknown.
    """

    stage: str
    done: float
    total: float


Work = Generator[Progress, None, T]


def finish(work: Work[T], on_progress: Callable[[Progress], None] | None = None) -> T:
    """Run a piece of work to its end and return its result.

    Parameters
    ----------
    work : generator of Progress
        The work to run; its return value is the result.
    on_progress : callable or None
        Called with each Progress.
    """
    while True:
        try:
            progress = next(work)
        except StopIteration as stop:
            result: T = stop.value
            return result
        if on_progress is not None:
            on_progress(progress)
