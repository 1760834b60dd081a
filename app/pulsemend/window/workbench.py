"""The window's workbench: the session, the workers, and what they learned of the open recording.

Edits come from the stages into the session; the workbench notices, lets a worker learn anew, and tells
everybody. Workers never touch the session and each reads through a Recording of its own.
"""

from __future__ import annotations

import traceback
from collections.abc import Callable
from dataclasses import replace
from typing import TypeVar

from PySide6.QtCore import QObject, QTimer, Signal

from pulsemend.errors import PulsemendError
from pulsemend.mending.learned import Learned, learn
from pulsemend.mending.prepare import marked_only
from pulsemend.model.recording import Recording
from pulsemend.progress import Work
from pulsemend.readers.opening import open_recording
from pulsemend.session.changed import Changed
from pulsemend.session.found import Found
from pulsemend.session.messages import Level, Message
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.window.job import Job
from pulsemend.window.jobs import Jobs, Shelf
from pulsemend.window.theme import LIGHT, Theme

T = TypeVar("T")

SETTLE_MS = 120
"""Edits within this time of each other are learned from together."""


class Workbench(QObject):
    """Session, workers and what is learned.

    Parameters
    ----------
    session : Session
        The window's state.
    settings : Settings
        The user's; replaced by whoever changes them.

    Attributes
    ----------
    learned_changed : Signal()
        `learned` or `problem` is another one.
    learning_changed : Signal(bool)
        Whether a worker is learning.
    """

    learned_changed = Signal()
    learning_changed = Signal(bool)

    def __init__(self, session: Session, settings: Settings, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self.session = session
        self.settings = settings
        self.theme: Theme = LIGHT
        self.jobs = Jobs(open_recording, lambda: self.session.revision, self)
        self.learned: Learned | None = None
        self.problem = ""
        self._settle = QTimer(self)
        self._settle.setSingleShot(True)
        self._settle.setInterval(SETTLE_MS)
        self._settle.timeout.connect(self._learn)
        self._unsubscribe = [
            session.subscribe(Changed.RECORDING, self._forget),
            session.subscribe(Changed.PLAN, self._settle.start),
            session.subscribe(Changed.MARKS, self._settle.start),
        ]

    @property
    def provisional(self) -> bool:
        """Whether what is learned belongs to other settings than those shown."""
        return self.learned is None or self.session.estimates_revision != self.session.revision

    def start(
        self,
        kind: str,
        work: Callable[[Recording], Work[T]],
        returned: Callable[[T], None],
        failed: Callable[[BaseException], None] | None = None,
        *,
        urgent: bool = False,
    ) -> Job | None:
        """Let a worker do something with a recording of its own.

        Parameters
        ----------
        kind : str
            The newest request of a kind replaces older ones.
        work : callable
            Given the worker's recording, gives the work.
        returned : callable
            Called in the window's thread with the result, unless plan or marks have changed meanwhile.
        failed : callable or None
            Called in the window's thread with the error; None tells the user.
        urgent : bool
            Whether it goes before others: a preview the user waits for.

        Returns
        -------
        Job or None
            None without an open recording.
        """
        opened = self.session.recording
        if opened is None:
            return None
        path, revision = opened.path, self.session.revision

        def begin(shelf: Shelf) -> Work[object]:
            return (yield from work(shelf.recording(path)))

        job = self.jobs.submit(kind, begin, revision=revision, urgent=urgent)
        job.returned.connect(returned)
        job.failed.connect(failed or self.tell)
        return job

    def tell(self, error: BaseException) -> None:
        """Put an error before the user, in words, with details on demand."""
        if isinstance(error, PulsemendError):
            self.session.say(Message(Level.PROBLEM, str(error)))
            return
        details = "".join(traceback.format_exception(error))
        text = "A fault of ours stopped this; what you were doing is not lost"
        self.session.say(Message(Level.PROBLEM, text, details))

    def close(self) -> None:
        """Stop the workers and let go of everything."""
        for end in self._unsubscribe:
            end()
        self._settle.stop()
        self.jobs.close()

    def _forget(self) -> None:
        self.learned, self.problem = None, ""
        self.learned_changed.emit()
        self._settle.start()

    def _learn(self) -> None:
        session = self.session
        plan, marks, earlier = session.plan, session.marks, self.learned
        if session.recording is None or plan is None:
            return
        if earlier is not None and earlier.plan == plan and earlier.marks == marks:
            session.set_estimates_revision(session.revision)
            self.learned_changed.emit()
            return
        job = self.start(
            "learn",
            lambda recording: learn(recording, plan, marks, earlier),
            self._take,
            self._fail,
            urgent=True,
        )
        if job is not None:
            self.learning_changed.emit(True)
            job.finished.connect(self._learning_ended)

    def _learning_ended(self) -> None:
        self.learning_changed.emit(False)

    def _take(self, learned: Learned) -> None:
        self.learned, self.problem = learned, ""
        counts = {rule.name: 0 for rule in learned.plan.epochs.rule}
        for candidate in learned.decision.kept:
            counts[candidate.rule] += 1
        self.session.set_found(
            replace(
                self.session.found,
                problems=(),
                kept=tuple(counts.items()),
                n_pulses=len(learned.estimates.pulses),
                n_not_in_signal=marked_only(learned.estimates),
            )
        )
        self.session.set_estimates_revision(self.session.revision)
        self.learned_changed.emit()

    def _fail(self, error: BaseException) -> None:
        if not isinstance(error, PulsemendError):
            self.tell(error)
            return
        self.learned, self.problem = None, str(error)
        self.session.set_found(Found(problems=(str(error),), written=self.session.found.written))
        self.session.set_estimates_revision(None)
        self.learned_changed.emit()
