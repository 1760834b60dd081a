"""Writing and checking sets from the window: the commands themselves as child processes, one at a time."""

from __future__ import annotations

import sys
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from PySide6.QtCore import QObject, Signal

from pulsemend.errors import PulsemendError
from pulsemend.mending.check import CheckItem
from pulsemend.mending.verdict import problem_of
from pulsemend.progress import Progress
from pulsemend.session.found import WrittenSet
from pulsemend.session.messages import Level, Message
from pulsemend.session.session import Session
from pulsemend.window.child import ChildFailure, ChildJob, Children, MendOrder
from pulsemend.window.job import Job, Outcome, Returned

NOT_CHECKED = "The set was written, but not checked yet."
BROKEN_SET = 1
"""Exit code of `check` for a set whose integrity is broken: a result like others."""


@dataclass(frozen=True)
class Checked:
    """A set and what its check found, item by item."""

    folder: Path
    items: tuple[CheckItem, ...]

    @property
    def problems(self) -> tuple[str, ...]:
        """What does not hold, one sentence each."""
        return tuple(problem_of(item) for item in self.items if not item.passed)

    @property
    def summary(self) -> str:
        """Counts, in the words of the command."""
        broken = sum(item.kind == "integrity" and not item.passed for item in self.items)
        beyond = sum(item.kind == "readiness" and not item.passed for item in self.items)
        return f"{broken} integrity checks broken, {beyond} readiness items beyond their limit"


class CheckJob(ChildJob):
    """`check` as a child process.

    Parameters
    ----------
    folder : Path
        The set.
    parent : QObject or None
        Its owner.
    """

    def __init__(self, folder: Path, parent: QObject | None = None) -> None:
        arguments = ("-m", "pulsemend", "check", str(folder.absolute()), "--json")
        super().__init__("check", sys.executable, arguments, parent)

    def _outcome(self, code: int, output: dict[str, Any], *, crashed: bool) -> Outcome:
        if code == BROKEN_SET and not crashed and "items" in output:
            return Returned(output)
        return super()._outcome(code, output, crashed=crashed)


class SetRunner(QObject):
    """Runs `mend`, then `check` on what it wrote; or `check` alone.

    Parameters
    ----------
    session : Session
        Told what was written.
    children : Children or None
        The window's child processes; None: its own.
    parent : QObject or None
        Its owner.

    Attributes
    ----------
    changed : Signal()
        Something begins or ends, or `checked` or `words` is another one.
    progressed : Signal(object, object)
        A Progress, and the seconds left or None.
    """

    changed = Signal()
    progressed = Signal(object, object)

    def __init__(
        self, session: Session, children: Children | None = None, parent: QObject | None = None
    ) -> None:
        super().__init__(parent)
        self._session = session
        self._children = Children(self) if children is None else children
        self._order: MendOrder | None = None
        self._revision = 0
        self._written_by: tuple[Path, int] | None = None
        self.job: ChildJob | None = None
        """What runs now; None if nothing does."""
        self.checked: Checked | None = None
        """What the last check found; None while there is none."""
        self.words = ""
        """How the last one ended, one sentence."""

    def write(self, order: MendOrder) -> None:
        """Write a set and check it.

        Parameters
        ----------
        order : MendOrder
            What, and where to.
        """
        if self.job is not None:
            return
        self._order, self._revision = order, self._session.revision
        self._run(self._children.start_mend(order), self._take_written)

    def check(self, folder: Path) -> None:
        """Check a set that stands somewhere.

        Parameters
        ----------
        folder : Path
            The set.
        """
        if self.job is not None:
            return
        self._written_by = None
        self._check(folder)

    def stop(self) -> None:
        """Ask what runs to stop; it leaves nothing half behind."""
        if self.job is not None:
            self.job.cancel()

    def _run(self, job: ChildJob, take: Any) -> None:
        self.job, self.words = job, ""
        job.progressed.connect(self._tell_progress)
        job.returned.connect(take)
        job.failed.connect(self._fail)
        job.cancelled.connect(self._stopped)
        self.changed.emit()

    def _check(self, folder: Path) -> None:
        self.checked = None
        job = CheckJob(folder)
        self._children.add(job)
        self._run(job, lambda result: self._take_checked(folder, result))

    def _take_written(self, result: dict[str, Any]) -> None:
        order, folder = self._order, Path(result["set"])
        if order is None:
            return
        self._written_by = (order.recording, self._revision)
        self._set_written(folder, (NOT_CHECKED,))
        self._check(folder)

    def _take_checked(self, folder: Path, result: dict[str, Any]) -> None:
        items = tuple(CheckItem(**item) for item in result["items"])
        self.checked = Checked(folder, items)
        problems = self.checked.problems
        if self._written_by is not None:
            self._set_written(folder, problems)
        done = "was written and checked" if self._written_by else "was checked"
        level = Level.ATTENTION if problems else Level.NOTE
        self._end(f"{folder.name} {done}: {self.checked.summary}.", level, "\n".join(problems))

    def _set_written(self, folder: Path, problems: tuple[str, ...]) -> None:
        """Tell the session, unless it has gone on to another recording."""
        opened = self._session.recording
        if opened is None or self._written_by is None or opened.path != self._written_by[0]:
            return
        written = WrittenSet(folder, self._written_by[1], problems)
        self._session.set_found(replace(self._session.found, written=written))

    def _fail(self, error: BaseException) -> None:
        what = "The set could not be written" if self._is_writing else "The set could not be checked"
        details = "\n".join(error.notes) if isinstance(error, ChildFailure) else ""
        text = str(error) if isinstance(error, PulsemendError) else type(error).__name__
        self._end(f"{what}. {text}", Level.PROBLEM, details)

    def _stopped(self) -> None:
        writing = "Writing was stopped; nothing was left behind."
        self._end(writing if self._is_writing else "The check was stopped.", Level.NOTE)

    @property
    def _is_writing(self) -> bool:
        return not isinstance(self.job, CheckJob)

    def _end(self, words: str, level: Level, details: str = "") -> None:
        self.job, self.words = None, words
        self._session.say(Message(level, words, details))
        self.changed.emit()

    def _tell_progress(self, progress: Progress, seconds_left: float | None) -> None:
        self.progressed.emit(progress, seconds_left)


def run_words(job: Job, progress: Progress | None, seconds_left: float | None) -> str:
    """Say what runs, how far it is and how long it still takes.

    Parameters
    ----------
    job : Job
        What runs.
    progress : Progress or None
        How far it is; None at the beginning.
    seconds_left : float or None
        To the end of its stage.
    """
    if progress is None:
        return "starting to check" if job.kind == "check" else "starting"
    share = f" {min(progress.done / progress.total, 1.0):.0%}" if progress.total > 0 else ""
    if seconds_left is None or seconds_left < 1 or progress.done >= progress.total:
        return f"{progress.stage}{share}"
    minutes, seconds = divmod(round(seconds_left), 60)
    left = f"{minutes} min {seconds} s" if minutes else f"{seconds} s"
    return f"{progress.stage}{share}, about {left} left"
