"""Opening recordings, plans and folders: files are read in a worker, the session is changed in the window."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

from PySide6.QtCore import QObject, QTimer, Signal

from pulsemend.errors import ChangedOnDisk, PulsemendError
from pulsemend.mending.draft import draft_plan
from pulsemend.mending.draft_log import logs_beside
from pulsemend.mending.facts import summarise
from pulsemend.mending.prepare import marks_path
from pulsemend.mending.pulse_evidence import pulse_evidence
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.marks_file import MarksFile, check_files, check_samples, read_marks
from pulsemend.model.plan_file import PlanFile, parse_plan, read_plan
from pulsemend.model.recording import Fingerprint, Recording
from pulsemend.progress import Progress, Work
from pulsemend.readers.fingerprint import fingerprint
from pulsemend.readers.opening import open_recording
from pulsemend.session.changed import Changed
from pulsemend.session.lock import RecordingLock, lock_recording
from pulsemend.session.messages import Level, Message
from pulsemend.session.recovery import Recovery
from pulsemend.window.jobs import Shelf
from pulsemend.window.workbench import Workbench

SAVE_MARKS_MS = 800


@dataclass(frozen=True)
class Opened:
    """What a worker read; `source` is the recording itself, opened for the window."""

    recording: Path | None
    source: Recording | None
    plan: Path | None
    plan_file: PlanFile | None
    marks: MarksFile | None
    marks_path: Path | None


class Opener(QObject):
    """Opens and saves what the session holds.

    Parameters
    ----------
    bench : Workbench
        Session and workers.
    state_folder : Path
        The user's state folder, for locks.

    Attributes
    ----------
    opened : Signal(object)
        Another recording is open: its path.
    recovery_found : Signal(object)
        A Recovery the user must decide about.
    marks_changed_on_disk : Signal(object)
        A ChangedOnDisk the user must decide about.
    """

    opened = Signal(object)
    recovery_found = Signal(object)
    marks_changed_on_disk = Signal(object)

    def __init__(self, bench: Workbench, state_folder: Path, parent: QObject | None = None) -> None:
        super().__init__(parent)
        self._bench = bench
        self._locks = state_folder / "locks"
        self._lock: RecordingLock | None = None
        self._source: Recording | None = None
        self._identified: tuple[Path, Fingerprint] | None = None
        self._save = QTimer(self)
        self._save.setSingleShot(True)
        self._save.setInterval(SAVE_MARKS_MS)
        self._save.timeout.connect(self.save_marks)
        self._unsubscribe = bench.session.subscribe(Changed.MARKS, self._save.start)

    def open(self, recording: Path | None, plan: Path | None) -> None:
        """Open a recording, a plan, or both; what is not given stays."""
        session = self._bench.session
        # The worker reads the marks' file; it must hold what the window shows.
        self.save_marks()
        known = session.recording
        path = recording if recording is not None else None if known is None else known.path
        plan_path = plan if plan is not None else session.plan_path
        job = self._bench.jobs.submit("open", lambda _shelf: _read(path, plan, plan_path))
        job.returned.connect(self._take)
        job.failed.connect(self._bench.tell)

    def take_source(self) -> Recording | None:
        """Hand over the recording that a worker opened for the traces; whoever takes it closes it."""
        source, self._source = self._source, None
        return source

    def draft(self) -> None:
        """Propose a plan from the open recording, as an unsaved plan."""
        opened = self._bench.session.recording
        if opened is None:
            return
        path = opened.path

        def work(_shelf: Shelf) -> Work[object]:
            summary = yield from summarise(path)
            evidence = pulse_evidence(summary.facts, summary.pulses_found)
            logs = logs_beside(path.parent, summary.facts.stem)
            return draft_plan(summary.facts, evidence, logs, summary.notes)

        job = self._bench.jobs.submit("draft", work)
        job.returned.connect(lambda text: self._take_draft(path, text))
        job.failed.connect(self._bench.tell)

    def save_marks(self) -> None:
        """Save the marks, which save themselves; a file changed by somebody else is asked about."""
        session = self._bench.session
        self._save.stop()
        if session.marks_are_saved or session.marks_path is None:
            return
        try:
            session.save_marks()
        except ChangedOnDisk as error:
            self.marks_changed_on_disk.emit(error)
        except OSError as error:
            text = f"The marks cannot be saved ({error.strerror or error}); they are kept in the journal"
            session.say(Message(Level.PROBLEM, text, session.marks_path.name))

    def close(self) -> None:
        """Let go of the recording."""
        self._unsubscribe()
        self._save.stop()
        if self._lock is not None:
            self._lock.release()

    def _take(self, read: Opened) -> None:
        session = self._bench.session
        same = session.recording is not None and read.recording == session.recording.path
        if same and session.marks_path is not None and not session.marks_are_saved:
            # Edited while the worker read the file.
            _close(read.source)
            self.open(read.recording, read.plan)
            return
        self.save_marks()
        recoveries: list[Recovery | None] = []
        unplaced = session.marks if session.marks_path is None else NO_MARKS
        view = session.view if same else None
        try:
            if read.plan_file is not None:
                recoveries.append(session.open_plan(read.plan_file, read.plan))
                self._offer(recoveries[-1])
            if read.recording is not None and read.source is not None:
                self._source = read.source
                facts = read.source.facts
                recoveries.append(session.open_recording(read.recording, facts, read.marks, read.marks_path))
                self._offer(recoveries[-1])
        except (PulsemendError, OSError) as error:
            self._bench.tell(error)
            return
        finally:
            # Where the session refused it, nobody took it.
            _close(self.take_source())
        if view is not None:
            session.set_view(view)
        if same and unplaced != NO_MARKS and read.marks is None:
            session.edit_marks("Marks made before the plan was opened", unplaced)
        if read.recording is not None:
            if not same:
                self._lock_it(read.recording)
            self._identify(read.recording)
        for warning in () if read.plan_file is None else read.plan_file.warnings:
            session.say(Message(Level.NOTE, warning))
        if read.recording is not None:
            self.opened.emit(read.recording)

    def _offer(self, recovery: Recovery | None) -> None:
        """Have the user decide about work that a crash left behind, before anything else is done."""
        if recovery is None:
            return
        if recovery.needs_a_look:
            self.recovery_found.emit(recovery)
        else:
            self._bench.session.recover()

    def _take_draft(self, recording: Path, text: str) -> None:
        session = self._bench.session
        if session.recording is None or session.recording.path != recording:
            return
        try:
            session.open_plan(parse_plan(text), None)
        except PulsemendError as error:
            self._bench.tell(error)
            return
        words = "A plan was drafted. Lines marked `# decide:` need a person; nothing is saved yet"
        session.say(Message(Level.ATTENTION, words))

    def _lock_it(self, recording: Path) -> None:
        if self._lock is not None:
            self._lock.release()
        self._lock = lock_recording(self._locks, recording)
        if self._lock.other is not None:
            self._bench.session.say(Message(Level.ATTENTION, self._lock.other.words))

    def _identify(self, recording: Path) -> None:
        """Find the fingerprint out, after everything that is waited for; edits meanwhile do not matter."""

        def take(found: Fingerprint) -> None:
            self._identified = (recording, found)
            session = self._bench.session
            if session.recording is None or session.recording.path != recording:
                return
            try:
                session.set_fingerprint(found)
            except PulsemendError as error:
                self._bench.tell(error)

        if self._identified is not None and self._identified[0] == recording:
            take(self._identified[1])
            return
        job = self._bench.jobs.submit("fingerprint", lambda shelf: fingerprint(shelf.recording(recording)))
        job.returned.connect(take)
        job.failed.connect(self._bench.tell)


def _close(source: Recording | None) -> None:
    if source is not None:
        source.close()


def _read(recording: Path | None, plan: Path | None, plan_path: Path | None) -> Work[object]:
    """Read what is to be opened; runs in a worker."""
    yield Progress("opening", 0, 1)
    plan_file = None if plan is None else read_plan(plan)
    if recording is None:
        return Opened(None, None, plan, plan_file, None, None)
    source = open_recording(recording)
    facts = source.facts
    try:
        at = None if plan_path is None else marks_path(plan_path, facts.stem)
        marks = read_marks(at) if at is not None and at.exists() else None
        if marks is not None:
            with marks.source.located():
                check_files(marks.marks, facts.parts)
                check_samples(marks.marks, facts.n_samples)
    except BaseException:
        source.close()
        raise
    return Opened(recording, source, plan, plan_file, marks, at)
