"""One piece of long work as the window sees it, in a worker thread or in a child process."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass

from PySide6.QtCore import QObject, Signal

from pulsemend.progress import Progress


@dataclass(frozen=True)
class Returned:
    """The work came to its end with a result."""

    result: object


@dataclass(frozen=True)
class Failed:
    """The work raised; the error keeps its traceback."""

    error: BaseException


@dataclass(frozen=True)
class Stopped:
    """The work was cancelled, or nobody wants its result any more."""


Outcome = Returned | Failed | Stopped


class Job(QObject):
    """A running or waiting piece of work.

    Signals come in the thread of the window: any number of `progressed`, then exactly one of `returned`,
    `failed` and `cancelled`, then `finished`.

    Parameters
    ----------
    kind : str
        What it is, e.g. "fit"; the newest of a kind replaces older ones.
    parent : QObject or None
        Its owner.
    """

    progressed = Signal(object, object)
    """A Progress, and the seconds left or None."""
    returned = Signal(object)
    failed = Signal(object)
    cancelled = Signal()
    finished = Signal()

    def __init__(self, kind: str, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self.kind = kind
        self.outcome: Outcome | None = None
        """How it ended; None while it has not."""
        self._pace = Pace()

    def cancel(self) -> None:
        """Ask it to stop; `cancelled` follows unless it ends otherwise first."""
        raise NotImplementedError

    def tell_progress(self, progress: Progress) -> None:
        """Tell how far it is.

        Parameters
        ----------
        progress : Progress
            How far.
        """
        if self.outcome is None:
            self.progressed.emit(progress, self.seconds_left(progress))

    def seconds_left(self, progress: Progress) -> float | None:
        """Seconds to the end of the stage; None while that cannot be known.

        Parameters
        ----------
        progress : Progress
            How far it is.
        """
        return self._pace.seconds_left(progress)

    def end(self, outcome: Outcome) -> None:
        """Tell how it ended; only the first time counts.

        Parameters
        ----------
        outcome : Returned, Failed or Stopped
            How.
        """
        if self.outcome is not None:
            return
        self.outcome = outcome
        if isinstance(outcome, Returned):
            self.returned.emit(outcome.result)
        elif isinstance(outcome, Failed):
            self.failed.emit(outcome.error)
        else:
            self.cancelled.emit()
        self.finished.emit()


class Pace:
    """How long a stage of work still takes, from the time its part so far took.

    Parameters
    ----------
    clock : callable
        Seconds that only rise.
    """

    def __init__(self, clock: Callable[[], float] = time.monotonic) -> None:
        self._clock = clock
        self._stage: str | None = None
        self._began_s = 0.0
        self._began_at = 0.0

    def seconds_left(self, progress: Progress) -> float | None:
        """Seconds to the end of the stage; None while that cannot be known.

        Parameters
        ----------
        progress : Progress
            How far the work is.
        """
        now_s = self._clock()
        if progress.stage != self._stage:
            self._stage, self._began_s, self._began_at = progress.stage, now_s, progress.done
        done = progress.done - self._began_at
        if done <= 0 or progress.total <= 0:
            return None
        return max(progress.total - progress.done, 0.0) * (now_s - self._began_s) / done
