"""The window's workbench: the session, the workers, and what they learned of the open recording.

Edits come from the stages into the session; the workbench notices, lets a worker learn anew, and tells
everybody. Workers never touch the session and each reads through a Recording of its own.
"""

from __future__ import annotations

import threading
from collections.abc import Callable
from pathlib import Path
from typing import TypeVar

from PySide6.QtCore import QObject, QTimer, Signal

from pulsemend.errors import PulsemendError
from pulsemend.mending.learned import Learned, learn
from pulsemend.model.recording import Recording
from pulsemend.progress import Work
from pulsemend.readers.opening import open_recording
from pulsemend.session.changed import Changed
from pulsemend.session.found import Found
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings
from pulsemend.window.jobs import Jobs
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
        The user's.

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
        self.jobs = Jobs(self)
        self.learned: Learned | None = None
        self.problem = ""
        self._own = threading.local()
        self._settle = QTimer(self)
        self._settle.setSingleShot(True)
        self._settle.setInterval(SETTLE_MS)
        self._settle.timeout.connect(self._learn)
        self._ended = [session.subscribe(kind, self._settle.start) for kind in (Changed.PLAN, Changed.MARKS)]
        self._ended.append(session.subscribe(Changed.RECORDING, self._forget))

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
    ) -> None:
        """Let a worker do something with a recording of its own.

        Parameters
        ----------
        kind : str
            The newest request of a kind replaces one that still waits; results of another revision than the
            present one are thrown away.
        work : callable
            Given the worker's recording, gives the work.
        returned : callable
            Called in the window's thread with the result.
        failed : callable or None
            Called in the window's thread with the error; None tells the user.
        """
        opened = self.session.recording
        if opened is None:
            return
        path, revision = opened.path, self.session.revision

        def begin() -> Work[T]:
            return work(self._recording_of_thread(path))

        def take(result: T) -> None:
            if self.session.revision == revision:
                returned(result)

        def complain(error: BaseException) -> None:
            if self.session.revision == revision:
                (failed or self.tell)(error)

        self.jobs.start(kind, begin, take, complain)

    def tell(self, error: BaseException) -> None:
        """Put an error before the user, in words, with details on demand."""
        self.session.say(self.jobs.message_of(error))

    def close(self) -> None:
        """Stop the workers and let go of everything."""
        for end in self._ended:
            end()
        self._settle.stop()
        self.jobs.close()

    def _recording_of_thread(self, path: Path) -> Recording:
        """Open the recording once for each worker thread."""
        held: tuple[Path, Recording] | None = getattr(self._own, "held", None)
        if held is None or held[0] != path:
            if held is not None:
                held[1].close()
            held = (path, open_recording(path))
            self._own.held = held
        return held[1]

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
            return
        self.learning_changed.emit(True)
        self.start("learn", lambda recording: learn(recording, plan, marks, earlier), self._take, self._fail)

    def _take(self, learned: Learned) -> None:
        self.learned, self.problem = learned, ""
        counts = {rule.name: 0 for rule in learned.plan.epochs.rule}
        for candidate in learned.decision.kept:
            counts[candidate.rule] += 1
        found = self.session.found
        self.session.set_found(Found((), tuple(counts.items()), len(learned.estimates.pulses), found.written))
        self.session.set_estimates_revision(self.session.revision)
        self.learning_changed.emit(False)
        self.learned_changed.emit()

    def _fail(self, error: BaseException) -> None:
        self.learning_changed.emit(False)
        if not isinstance(error, PulsemendError):
            self.tell(error)
            return
        self.learned, self.problem = None, str(error)
        self.session.set_found(Found((str(error),), None, None, self.session.found.written))
        self.session.set_estimates_revision(None)
        self.learned_changed.emit()
