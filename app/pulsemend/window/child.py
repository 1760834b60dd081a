"""A command of the program as a child process, seen as a job: `mend` from the window is the same as by hand.

Progress comes as JSON lines on its standard error, the result as one JSON object on its standard output. It
is cancelled by a signal, as from a terminal, and cleans up after itself.
"""

from __future__ import annotations

import json
import sys
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from PySide6.QtCore import QByteArray, QObject, QProcess, QTimer, Signal, Slot

from pulsemend.errors import PulsemendError
from pulsemend.progress import Progress
from pulsemend.window.job import Failed, Job, Outcome, Returned, Stopped

KILL_AFTER_MS = 15_000
"""How long a cancelled child may take to clean up."""
NOTES_KEPT = 50
CANCELLED = 130

_WORDS = {
    1: "the check failed",
    2: "the command was used wrongly; this is a fault of ours",
    3: "something cannot be used as it is",
    4: "a fault of ours ended the command",
}


class ChildFailure(PulsemendError):
    """A command that ended without a result.

    Parameters
    ----------
    what : str
        What is wrong.
    where, todo : str
        As the command said it.
    exit_code : int
        Its exit code; negative: the signal that ended it.
    kind : str
        Class of its error, if it said one.
    notes : tuple of str
        Other lines on its standard error, the last ones.
    """

    def __init__(
        self,
        what: str,
        *,
        where: str = "",
        todo: str = "",
        exit_code: int = 4,
        kind: str = "",
        notes: tuple[str, ...] = (),
    ) -> None:
        self.exit_code = exit_code
        self.kind = kind
        self.notes = notes
        super().__init__(what, where=where, todo=todo)


@dataclass(frozen=True)
class MendOrder:
    """What to mend, and where to."""

    recording: Path
    plan: Path
    out: Path
    marks: Path | None = None
    overwrite: bool = False
    dry_run: bool = False

    @property
    def arguments(self) -> tuple[str, ...]:
        """Arguments for the Python that runs the window."""
        # -P: files of the user's folder must not be taken for modules.
        words = ["-P", "-m", "pulsemend", "mend", str(self.recording.absolute())]
        words += ["--plan", str(self.plan.absolute()), "--out", str(self.out.absolute())]
        if self.marks is not None:
            words += ["--marks", str(self.marks.absolute())]
        words += ["--overwrite"] * self.overwrite + ["--dry-run"] * self.dry_run
        return (*words, "--json")


class ChildJob(Job):
    """A child process that runs; a result is the JSON object as a dict.

    Parameters
    ----------
    kind : str
        What it is.
    program : str
        What to run.
    arguments : sequence of str
        Its arguments.
    parent : QObject or None
        The window.
    """

    def __init__(
        self, kind: str, program: str, arguments: Sequence[str], parent: QObject | None = None
    ) -> None:
        super().__init__(kind, parent)
        self._is_cancelled = False
        self._line = b""
        self._notes: list[str] = []
        self._seconds_left: float | None = None
        self._kill_timer = QTimer(self)
        self._kill_timer.setSingleShot(True)
        self._kill_timer.setInterval(KILL_AFTER_MS)
        self._process = QProcess(self)
        self._kill_timer.timeout.connect(self._process.kill)
        self._process.readyReadStandardError.connect(self._read)
        self._process.errorOccurred.connect(self._on_error)
        self._process.finished.connect(self._on_finished)
        self._process.setProgram(program)
        self._process.setArguments(list(arguments))
        # Started from the event loop, so that whoever made it can connect first.
        QTimer.singleShot(0, self, self._start)

    @property
    def is_running(self) -> bool:
        """Whether the process lives."""
        return self._process.state() is not QProcess.ProcessState.NotRunning

    def cancel(self) -> None:
        """Ask it to stop by a signal; it cleans up, and is killed if that takes too long."""
        if self.outcome is not None or self._is_cancelled:
            return
        self._is_cancelled = True
        self._process.terminate()
        self._kill_timer.start()

    def close(self, wait_ms: int = 5000) -> None:
        """End it and wait, at first politely; afterwards it has its outcome and no process is left.

        Parameters
        ----------
        wait_ms : int
            How long it may take to clean up before it is killed.
        """
        self.cancel()
        if self.is_running and not self._process.waitForFinished(wait_ms):
            self._process.kill()
            self._process.waitForFinished()
        self._kill_timer.stop()
        self.end(Stopped())

    @Slot()
    def _start(self) -> None:
        if self._is_cancelled:
            self._finish(Stopped())
        else:
            self._process.start()
            self._process.closeWriteChannel()

    @Slot()
    def _read(self) -> None:
        *lines, self._line = (self._line + _bytes(self._process.readAllStandardError())).split(b"\n")
        for line in lines:
            self._read_line(line.decode(errors="replace").strip())

    def _read_line(self, line: str) -> None:
        data = _json(line)
        try:
            progress = Progress(str(data["stage"]), float(data["done"]), float(data["total"]))
            left = data["seconds_left"]
            self._seconds_left = None if left is None else float(left)
        except (KeyError, TypeError, ValueError):
            # Errors come once more with the result; what is left are warnings of libraries.
            if line and "error" not in data:
                self._notes = [*self._notes, line][-NOTES_KEPT:]
            return
        self.tell_progress(progress)

    def seconds_left(self, _progress: Progress) -> float | None:
        """Seconds left as the command says it."""
        return self._seconds_left

    @Slot(QProcess.ProcessError)
    def _on_error(self, error: QProcess.ProcessError) -> None:
        # All other errors are followed by `finished`.
        if error is QProcess.ProcessError.FailedToStart:
            where = self._process.program()
            self._finish(Failed(ChildFailure("the command cannot be started", where=where)))

    @Slot(int, QProcess.ExitStatus)
    def _on_finished(self, code: int, status: QProcess.ExitStatus) -> None:
        self._read()
        self._read_line(self._line.decode(errors="replace").strip())
        output = _json(_bytes(self._process.readAllStandardOutput()).decode(errors="replace"))
        self._finish(self._outcome(code, output, crashed=status is QProcess.ExitStatus.CrashExit))

    def _outcome(self, code: int, output: dict[str, Any], *, crashed: bool) -> Outcome:
        if crashed:
            if self._is_cancelled:
                return Stopped()
            return Failed(
                ChildFailure(
                    f"the command was ended by signal {code}", exit_code=-code, notes=tuple(self._notes)
                )
            )
        if code == CANCELLED:
            return Stopped()
        if code == 0 and output:
            return Returned(output)
        return Failed(self._failure(code, output))

    def _failure(self, code: int, output: dict[str, Any]) -> ChildFailure:
        said = output.get("error")
        if not isinstance(said, dict):
            said = {}
        what = (
            "the command gave no result" if code == 0 else _WORDS.get(code, f"the command ended with {code}")
        )
        return ChildFailure(
            str(said.get("what") or what),
            where=str(said.get("where", "")),
            todo=str(said.get("todo", "")),
            exit_code=code,
            kind=str(said.get("kind", "")),
            notes=tuple(self._notes),
        )

    def _finish(self, outcome: Outcome) -> None:
        self._kill_timer.stop()
        self.end(outcome)


class Children(QObject):
    """The child processes of one window.

    Attributes
    ----------
    changed : Signal()
        One was begun.
    """

    changed = Signal()

    def __init__(self, parent: QObject | None = None) -> None:
        super().__init__(parent)
        # Kept to the end of the window: one that went within its own signal would take Qt with it.
        self._jobs: list[ChildJob] = []

    @property
    def under_way(self) -> tuple[Job, ...]:
        """Those that run, oldest first."""
        return tuple(job for job in self._jobs if job.outcome is None)

    def start_mend(self, order: MendOrder) -> ChildJob:
        """Start to mend.

        Parameters
        ----------
        order : MendOrder
            What, and where to.
        """
        return self.start("mend", sys.executable, order.arguments)

    def start(self, kind: str, program: str, arguments: Sequence[str]) -> ChildJob:
        """Start a command that speaks JSON.

        Parameters
        ----------
        kind : str
            What it is.
        program : str
            What to run.
        arguments : sequence of str
            Its arguments.
        """
        job = ChildJob(kind, program, arguments, self)
        self.add(job)
        return job

    def add(self, job: ChildJob) -> None:
        """Take over a job that was just made: it counts as under way, and is ended with the window.

        Parameters
        ----------
        job : ChildJob
            The job.
        """
        job.setParent(self)
        self._jobs.append(job)
        self.changed.emit()

    def close(self, wait_ms: int = 5000) -> None:
        """End all and wait; afterwards each has its outcome.

        Parameters
        ----------
        wait_ms : int
            How long each may take to clean up before it is killed.
        """
        for job in self._jobs:
            job.cancel()
        for job in self._jobs:
            job.close(wait_ms)


def _json(text: str) -> dict[str, Any]:
    """Read an object from a text; empty if it is none."""
    try:
        data = json.loads(text)
    except ValueError:
        return {}
    return data if isinstance(data, dict) else {}


def _bytes(array: QByteArray) -> bytes:
    return bytes(array.data())
