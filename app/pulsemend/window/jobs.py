"""Two worker threads for fits, previews and the pyramid, each with its own open Recording.

A job is a generator of Progress; every `yield` is a point where it can be cancelled, and where an urgent job
(a preview the user waits for) goes first. Workers are plain threads that know nothing of the window: they
post letters, and one queued signal has these fetched in the window's thread.
"""

from __future__ import annotations

import itertools
import logging
import threading
import time
from collections import deque
from collections.abc import Callable
from pathlib import Path

from PySide6.QtCore import QObject, Qt, QTimer, Signal, Slot

from pulsemend.errors import Cancelled, PulsemendError
from pulsemend.model.recording import Recording
from pulsemend.progress import Progress, Work
from pulsemend.window.job import Failed, Job, Outcome, Returned, Stopped

WORKERS = 2
CLOSE_WAIT_S = 5.0

log = logging.getLogger(__name__)


class Shelf:
    """The recording that one worker has open; asked for again it is the same one.

    Parameters
    ----------
    open_recording : callable
        Opens a recording by its path.
    age : Age
        When it changes, recordings are opened anew.
    """

    def __init__(self, open_recording: Callable[[Path], Recording], age: Age) -> None:
        self._open_recording = open_recording
        self._age = age
        self._key: tuple[Path, int] | None = None
        self._recording: Recording | None = None

    def recording(self, path: Path) -> Recording:
        """Open a recording, unless it is open already.

        Parameters
        ----------
        path : Path
            Its file.

        Raises
        ------
        RecordingError
            It cannot be opened.
        """
        key = (path, self._age.number)
        if self._recording is None or self._key != key:
            self.clear()
            self._recording = self._open_recording(path)
            self._key = key
        return self._recording

    def clear(self) -> None:
        """Close what is open."""
        recording, self._recording = self._recording, None
        if recording is not None:
            recording.close()


class Age:
    """Counts how often recordings on the disk were said to have changed."""

    def __init__(self) -> None:
        self.number = 0


Start = Callable[[Shelf], Work[object]]


class _Task:
    """The part of a job that a worker knows; no Qt, so that any thread may be the last to let go of it."""

    def __init__(self, number: int, start: Start, *, urgent: bool) -> None:
        self.number = number
        self.start = start
        self.urgent = urgent
        self.stop = threading.Event()


class _Queue:
    """Tasks that wait for a worker: urgent ones first, otherwise in order."""

    def __init__(self) -> None:
        self._waiting: deque[_Task] = deque()
        self._change = threading.Condition()
        self._is_closed = False

    def put(self, task: _Task) -> None:
        with self._change:
            self._waiting.append(task)
            self._change.notify()

    def take(self) -> _Task | None:
        """Wait for a task; None when there will be no more."""
        with self._change:
            while not self._waiting and not self._is_closed:
                self._change.wait()
            return self._first_urgent() or (self._waiting.popleft() if self._waiting else None)

    def take_urgent(self) -> _Task | None:
        """Take an urgent task if there is one."""
        with self._change:
            return self._first_urgent()

    def withdraw(self, task: _Task) -> bool:
        """Take a task back; False if a worker has it."""
        with self._change:
            if task not in self._waiting:
                return False
            self._waiting.remove(task)
            return True

    def close(self) -> None:
        with self._change:
            self._is_closed = True
            self._change.notify_all()

    def _first_urgent(self) -> _Task | None:
        task = next((one for one in self._waiting if one.urgent), None)
        if task is not None:
            self._waiting.remove(task)
        return task


class _Mail:
    """Letters from the workers: of each job the newest progress, and how it ended."""

    def __init__(self, wake: Callable[[], None]) -> None:
        self._lock = threading.Lock()
        self._wake: Callable[[], None] | None = wake
        self._progress: dict[int, Progress] = {}
        self._ends: list[tuple[int, Outcome]] = []
        self._has_rung = False

    def post_progress(self, number: int, progress: Progress) -> None:
        with self._lock:
            self._progress[number] = progress
            self._ring()

    def post_end(self, number: int, outcome: Outcome) -> None:
        with self._lock:
            self._ends.append((number, outcome))
            self._ring()

    def fetch(self) -> tuple[dict[int, Progress], list[tuple[int, Outcome]]]:
        with self._lock:
            letters = self._progress, self._ends
            self._progress, self._ends, self._has_rung = {}, [], False
            return letters

    def close(self) -> None:
        """Wake nobody any more: the window's object may be gone from here on."""
        with self._lock:
            self._wake = None

    def _ring(self) -> None:
        # Once per batch, or a busy worker would flood the window's event loop.
        if self._wake is not None and not self._has_rung:
            self._has_rung = True
            self._wake()


class _WorkerJob(Job):
    """A job of the workers."""

    def __init__(
        self, kind: str, task: _Task, revision: int | None, withdraw: Callable[[_Task], None]
    ) -> None:
        super().__init__(kind)
        self.task = task
        self.revision = revision
        self._withdraw = withdraw

    def cancel(self) -> None:
        """Stop it at its next yield, or before it starts."""
        self._withdraw(self.task)


class Jobs(QObject):
    """The workers of one window.

    Parameters
    ----------
    open_recording : callable
        Opens a recording by its path, once per worker.
    current_revision : callable
        Revision of the session now; results of jobs begun at another one are thrown away.
    parent : QObject or None
        The window.
    """

    changed = Signal()
    """A job was begun or ended."""
    _woken = Signal()

    def __init__(
        self,
        open_recording: Callable[[Path], Recording],
        current_revision: Callable[[], int],
        parent: QObject | None = None,
    ) -> None:
        super().__init__(parent)
        self._current_revision = current_revision
        self._jobs: dict[int, _WorkerJob] = {}
        self._numbers = itertools.count(1)
        self._age = Age()
        self._queue = _Queue()
        self._mail = _Mail(self._woken.emit)
        self._woken.connect(self._deliver, Qt.ConnectionType.QueuedConnection)
        self._is_closed = False
        # Daemons: a thread that does not come to its next yield must not keep the program from ending.
        self._threads = [
            threading.Thread(
                target=_serve,
                args=(self._queue, self._mail, Shelf(open_recording, self._age)),
                name=f"pulsemend-worker-{number}",
                daemon=True,
            )
            for number in range(1, WORKERS + 1)
        ]
        for thread in self._threads:
            thread.start()

    @property
    def under_way(self) -> tuple[Job, ...]:
        """Jobs that wait or run, oldest first."""
        return tuple(self._jobs.values())

    def submit(self, kind: str, start: Start, *, revision: int | None = None, urgent: bool = False) -> Job:
        """Begin a job; older ones of its kind are cancelled.

        Connect to its signals before control returns to the event loop, and none is missed.

        Parameters
        ----------
        kind : str
            What it is.
        start : callable
            Called in the worker with its shelf; returns the generator.
        revision : int or None
            Revision of the session it rests on; None: its result is never stale.
        urgent : bool
            Whether it goes before others, also before the next step of those that run.

        Raises
        ------
        RuntimeError
            The workers are closed.
        """
        if self._is_closed:
            raise RuntimeError("the workers are closed")
        for job in self.under_way:
            if job.kind == kind:
                job.cancel()
        task = _Task(next(self._numbers), start, urgent=urgent)
        new = _WorkerJob(kind, task, revision, self._withdraw)
        self._jobs[task.number] = new
        self._queue.put(task)
        self.changed.emit()
        return new

    def forget_recordings(self) -> None:
        """Let every worker open its recording anew before its next job, because the file changed."""
        self._age.number += 1

    def close(self, wait_s: float = CLOSE_WAIT_S) -> bool:
        """Cancel everything and end the threads; every job gets its end before this returns.

        Parameters
        ----------
        wait_s : float
            How long to wait for them in all.

        Returns
        -------
        bool
            Whether all threads ended in time.
        """
        self._is_closed = True
        for job in self.under_way:
            job.cancel()
        self._queue.close()
        until_s = time.monotonic() + wait_s
        for thread in self._threads:
            thread.join(max(until_s - time.monotonic(), 0.0))
        self._mail.close()
        self._deliver()
        for number in list(self._jobs):
            self._end(number, Stopped())
        return not any(thread.is_alive() for thread in self._threads)

    def _withdraw(self, task: _Task) -> None:
        task.stop.set()
        if self._queue.withdraw(task):
            self._mail.post_end(task.number, Stopped())

    @Slot()
    def _deliver(self) -> None:
        progress, ends = self._mail.fetch()
        for number, newest in progress.items():
            if number in self._jobs:
                self._jobs[number].tell_progress(newest)
        for number, outcome in ends:
            self._end(number, outcome)

    def _end(self, number: int, outcome: Outcome) -> None:
        job = self._jobs.pop(number, None)
        if job is None:
            return
        unwanted = job.task.stop.is_set() or job.revision not in (None, self._current_revision())
        is_fault = isinstance(outcome, Failed) and not isinstance(outcome.error, PulsemendError)
        if unwanted and not is_fault:
            outcome = Stopped()
        job.end(outcome)
        self.changed.emit()


def _serve(queue: _Queue, mail: _Mail, shelf: Shelf) -> None:
    """Work until there is nothing more; runs in a worker."""
    while True:
        task = queue.take()
        if task is None:
            break
        _do(task, queue, mail, shelf)
        # The result may be large, and the next task may be long in coming.
        del task
    shelf.clear()


def _do(task: _Task, queue: _Queue, mail: _Mail, shelf: Shelf) -> None:
    def between(progress: Progress) -> None:
        mail.post_progress(task.number, progress)
        while not task.urgent and (first := queue.take_urgent()) is not None:
            _do(first, queue, mail, shelf)

    mail.post_end(task.number, _outcome(task, shelf, between))


def _outcome(task: _Task, shelf: Shelf, between: Callable[[Progress], None]) -> Outcome:
    """Run a task to its end, whatever that is."""
    try:
        if task.stop.is_set():
            return Stopped()
        work = task.start(shelf)
        try:
            while not task.stop.is_set():
                try:
                    progress = next(work)
                except StopIteration as end:
                    return Returned(end.value)
                between(progress)
        finally:
            work.close()
    except Cancelled:
        return Stopped()
    except PulsemendError as error:
        return Failed(error)
    except BaseException as error:
        # Not even SystemExit may end a worker: the window would wait for ever.
        log.exception("a job failed")
        return Failed(error)
    return Stopped()


class Debounce(QObject):
    """Calls once, some time after the last of many requests.

    Parameters
    ----------
    delay_ms : int
        How long no further request may come.
    callback : callable
        What to call.
    parent : QObject or None
        Its owner.
    """

    def __init__(self, delay_ms: int, callback: Callable[[], None], parent: QObject | None = None) -> None:
        super().__init__(parent)
        self._callback = callback
        self._timer = QTimer(self)
        self._timer.setSingleShot(True)
        self._timer.setInterval(delay_ms)
        self._timer.timeout.connect(self._call)

    @property
    def is_waiting(self) -> bool:
        """Whether a call is due."""
        return self._timer.isActive()

    def request(self) -> None:
        """Ask for a call; the time starts anew."""
        self._timer.start()

    def flush(self) -> None:
        """Call now if a call is due."""
        if self.is_waiting:
            self._timer.stop()
            self._call()

    def drop(self) -> None:
        """Forget the call that is due."""
        self._timer.stop()

    @Slot()
    def _call(self) -> None:
        self._callback()
