"""The state of one open window: everything that is shown, edited, undone and saved, without Qt.

The session is the only thing that can be observed; what it holds are frozen values.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

from pulsemend.errors import ChangedOnDisk, InputError
from pulsemend.model import marks_file, plan_file
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.marks_file import MarksFile
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import PlanFile
from pulsemend.model.recording import Fingerprint, RecordingFacts
from pulsemend.model.toml_tables import write_text
from pulsemend.model.vocabulary import ChannelType
from pulsemend.session.changed import Changed
from pulsemend.session.compact import checked_marks, checked_plan, compact_marks, compact_plan
from pulsemend.session.found import NOTHING_FOUND, NOTHING_SELECTED, OpenRecording
from pulsemend.session.history import LONGEST, Entry, History, What
from pulsemend.session.journal import Journal, Values, digest, journal_key, with_digest, with_value
from pulsemend.session.keeper import Keeper
from pulsemend.session.messages import Level, Message
from pulsemend.session.recovery import Recovery
from pulsemend.session.surroundings import Surroundings
from pulsemend.session.view import View


class Session(Surroundings):
    """One open window.

    Parameters
    ----------
    journals : Path or None
        Folder of the journals in the user's data folder; None keeps none.
    longest : int
        Entries of the history.
    """

    def __init__(self, journals: Path | None = None, *, longest: int = LONGEST) -> None:
        super().__init__()
        self._keeper = Keeper(journals, self._say_unsafe)
        self._history = History(longest)
        self._recording: OpenRecording | None = None
        self._values = Values()
        self._saved = Values()
        self._plan_path: Path | None = None
        self._marks_path: Path | None = None
        self._fingerprint: Fingerprint | None = None
        self._revision = 0

    # What it holds

    @property
    def recording(self) -> OpenRecording | None:
        """The open recording."""
        return self._recording

    @property
    def plan(self) -> Plan | None:
        """The plan as edited."""
        return self._values.plan

    @property
    def plan_path(self) -> Path | None:
        """The plan's file; None for a plan that was never saved."""
        return self._plan_path

    @property
    def marks(self) -> Marks:
        """The recording's marks as edited."""
        return self._values.marks

    @property
    def marks_path(self) -> Path | None:
        """The marks' file, which need not exist yet."""
        return self._marks_path

    @property
    def revision(self) -> int:
        """Rises with each change of recording, plan or marks; results of another revision are stale."""
        return self._revision

    @property
    def next_undo(self) -> str:
        """What undo would take back; empty if there is nothing."""
        return self._history.next_undo

    @property
    def next_redo(self) -> str:
        """What redo would do again; empty if there is nothing."""
        return self._history.next_redo

    @property
    def plan_is_saved(self) -> bool:
        """Whether the plan's file holds this plan."""
        return self._values.plan == self._saved.plan

    @property
    def marks_are_saved(self) -> bool:
        """Whether the marks' file holds these marks."""
        return self._values.marks == self._saved.marks

    @property
    def is_saved(self) -> bool:
        """Whether both files hold what the window shows."""
        return self.plan_is_saved and self.marks_are_saved

    @property
    def plan_text(self) -> str:
        """The plan as its file would be written now, comments kept; empty without a plan."""
        plan, base = self._values.plan, self._values.plan_base
        if plan is None:
            return ""
        return plan_file.update_text(base, plan) if base else plan_file.plan_text(plan)

    @property
    def marks_text(self) -> str:
        """The marks as their file would be written now, with the fingerprint as soon as it is known."""
        marks, base = self._values.marks, self._values.marks_base
        if marks.fingerprint is None:
            marks = replace(marks, fingerprint=self._fingerprint)
        return marks_file.update_text(base, marks) if base else marks_file.marks_text(marks)

    # Opening

    def open_recording(
        self,
        path: Path,
        facts: RecordingFacts,
        marks: MarksFile | None = None,
        marks_path: Path | None = None,
    ) -> Recovery | None:
        """Show another recording; marks of the one before are saved, and its entries leave the history.

        Parameters
        ----------
        path : Path
            Its file.
        facts : RecordingFacts
            From its reader.
        marks : MarksFile or None
            Its marks; None if it has no file of them.
        marks_path : Path or None
            Where they are saved, there already or not.

        Returns
        -------
        Recovery or None
            Work that a crash left behind: `recover` or `drop_recovery` before the next edit.

        Raises
        ------
        ChangedOnDisk, OSError
            The marks before could not be saved; then nothing changes.
        """
        self._refuse_while_recovering()
        if not self.marks_are_saved and self._marks_path is not None:
            self.save_marks()
        self._recording = OpenRecording(path, facts)
        self._fingerprint = None
        self._marks_path = marks_path
        read, text = (marks.marks, marks.text) if marks else (NO_MARKS, "")
        self._values = replace(
            self._values, marks=read, marks_base=text, marks_digest=digest(text) if marks else ""
        )
        self._saved = replace(self._saved, marks=read)
        self._history.forget(What.MARKS)
        self._view = replace(
            View(row_uv=self._view.row_uv, shown=self._view.shown),
            width_s=min(self._view.width_s, facts.duration_s) or self._view.width_s,
            rows=usual_rows(facts),
        )
        self._selected = NOTHING_SELECTED
        self._estimates_revision = None
        self._found = NOTHING_FOUND
        self._revision += 1
        recovery = self._move_journal()
        kinds = (Changed.RECORDING, Changed.MARKS, Changed.VIEW, Changed.ESTIMATES, Changed.STAGE)
        self._observers.tell(*kinds, Changed.HISTORY)
        return recovery

    def set_fingerprint(self, fingerprint: Fingerprint) -> None:
        """Take over the recording's fingerprint, which takes long to find out.

        Parameters
        ----------
        fingerprint : Fingerprint
            From now on saved with the marks.

        Raises
        ------
        MarksError
            The marks belong to another recording.
        """
        marks_file.check_fingerprint(self._values.marks, fingerprint)
        self._fingerprint = fingerprint

    def open_plan(self, plan: PlanFile, path: Path | None) -> Recovery | None:
        """Work with another plan; entries about the one before leave the history.

        Parameters
        ----------
        plan : PlanFile
            As read, or drafted.
        path : Path or None
            Its file; None for a draft, which is unsaved from the start.

        Returns
        -------
        Recovery or None
            Work that a crash left behind: `recover` or `drop_recovery` before the next edit.
        """
        self._refuse_while_recovering()
        self._plan_path = path
        self._values = replace(
            self._values,
            plan=plan.plan,
            plan_base=plan.text,
            plan_digest="" if path is None else digest(plan.text),
        )
        self._saved = replace(self._saved, plan=None if path is None else plan.plan)
        self._history.forget(What.PLAN)
        self._revision += 1
        recovery = self._move_journal()
        self._observers.tell(Changed.PLAN, Changed.HISTORY)
        return recovery

    def close(self) -> None:
        """End it cleanly: marks are saved, nothing is left to be recovered.

        Unsaved changes of the plan are given up; the window asks before.

        Raises
        ------
        ChangedOnDisk, OSError
            The marks could not be saved; the session stays open.
        """
        if not self.marks_are_saved and self._marks_path is not None:
            self.save_marks()
        self._keeper.close()

    # Editing

    def edit_plan(self, label: str, plan: Plan, merge_key: str | None = None) -> bool:
        """Change the plan.

        Parameters
        ----------
        label : str
            What is done, for the menu.
        plan : Plan
            The whole new plan.
        merge_key : str or None
            Edits of one drag share a key and become one entry, until `end_merge` or another edit.

        Returns
        -------
        bool
            False if that is the plan already.

        Raises
        ------
        PlanError
            The plan is impossible; then nothing changes.
        InputError
            There is no plan to change.
        """
        self._refuse_while_recovering()
        if self._values.plan is None:
            raise InputError("there is no plan to change", todo="Open one or draft one from the recording")
        checked = checked_plan(compact_plan(plan))
        return self._edit(Entry(label, What.PLAN, self._values.plan, checked, merge_key))

    def edit_marks(self, label: str, marks: Marks, merge_key: str | None = None) -> bool:
        """Change the marks.

        Parameters
        ----------
        label : str
            What is done, for the menu.
        marks : Marks
            The whole new marks.
        merge_key : str or None
            Edits of one drag share a key and become one entry, until `end_merge` or another edit.

        Returns
        -------
        bool
            False if those are the marks already.

        Raises
        ------
        MarksError
            The marks are impossible; then nothing changes.
        """
        self._refuse_while_recovering()
        checked = checked_marks(compact_marks(marks))
        return self._edit(Entry(label, What.MARKS, self._values.marks, checked, merge_key))

    def end_merge(self) -> None:
        """End a drag: the next edit is an entry of its own."""
        if self._history.is_merging:
            self._history.end_merge()
            self._note(Journal.sync)

    def undo(self) -> str:
        """Take the last entry back and return its label; empty if there was none."""
        self._refuse_while_recovering()
        return self._go(self._history.undo(), Journal.undo, back=True)

    def redo(self) -> str:
        """Do the last undone entry again and return its label; empty if there was none."""
        self._refuse_while_recovering()
        return self._go(self._history.redo(), Journal.redo, back=False)

    # Saving

    def save_marks(self, *, overwrite: bool = False) -> None:
        """Write the marks' file, whole or not at all.

        Parameters
        ----------
        overwrite : bool
            Even if it changed on the disk meanwhile.

        Raises
        ------
        ChangedOnDisk
            It did, and holds something else than what is to be written.
        InputError
            The marks have no file.
        OSError
            It cannot be written.
        """
        if self._marks_path is None:
            raise InputError("the marks have no file", todo="Open a recording")
        text = self.marks_text
        if not overwrite:
            _refuse_if_changed(self._marks_path, self._values.marks_digest, text)
        self._marks_path.parent.mkdir(parents=True, exist_ok=True)
        write_text(self._marks_path, text)
        self._now_saved(What.MARKS, text)

    def save_plan(self, *, overwrite: bool = False) -> None:
        """Write the plan's file, whole or not at all.

        Parameters
        ----------
        overwrite : bool
            Even if it changed on the disk meanwhile.

        Raises
        ------
        ChangedOnDisk
            It did, and holds something else than what is to be written.
        InputError
            There is no plan, or it has no file yet.
        OSError
            It cannot be written.
        """
        if self._values.plan is None or self._plan_path is None:
            raise InputError("the plan has no file yet", todo="Choose where to save it")
        text = self.plan_text
        if not overwrite:
            _refuse_if_changed(self._plan_path, self._values.plan_digest, text)
        write_text(self._plan_path, text)
        self._now_saved(What.PLAN, text)

    def save_plan_as(self, path: Path, marks_path: Path | None = None) -> None:
        """Write the plan to another file and go on with that one; the window asks before it replaces one.

        Parameters
        ----------
        path : Path
            The new file.
        marks_path : Path or None
            Where marks belong beside it; None leaves them where they are.

        Raises
        ------
        InputError
            There is no plan.
        OSError
            It cannot be written; then the plan keeps its file.
        """
        if self._values.plan is None:
            raise InputError("there is no plan to save", todo="Open one or draft one from the recording")
        text = self.plan_text
        write_text(path, text)
        self._plan_path = path
        if marks_path is not None and marks_path != self._marks_path:
            self._marks_path = marks_path
            self._values = with_digest(self._values, What.MARKS, "")
            self._saved = replace(self._saved, marks=NO_MARKS)
        self._values = with_digest(self._values, What.PLAN, digest(text))
        self._saved = replace(self._saved, plan=self._values.plan)
        self._move_journal(look=False)
        self._observers.tell(Changed.PLAN, Changed.HISTORY)

    def take_plan_from_disk(self) -> bool:
        """Go on with the plan as somebody else saved it; that is an edit like others and can be undone.

        Returns
        -------
        bool
            False if it is the same plan.

        Raises
        ------
        PlanError
            The file is no valid plan; then nothing changes.
        InputError
            The plan has no file.
        """
        self._refuse_while_recovering()
        ours = self._values.plan
        if self._plan_path is None or ours is None:
            raise InputError("the plan has no file yet", todo="Choose where to save it")
        theirs = plan_file.read_plan(self._plan_path)
        self._values = replace(self._values, plan_base=theirs.text, plan_digest=digest(theirs.text))
        self._saved = replace(self._saved, plan=theirs.plan)
        # The base of the comments changed, which is not a step: the journal starts over.
        changed = self._edit(Entry("Plan as changed on the disk", What.PLAN, ours, theirs.plan))
        self._keeper.restart(self._values, self._history)
        self._observers.tell(Changed.HISTORY)
        return changed

    # After a crash

    @property
    def recovery(self) -> Recovery | None:
        """Work left behind that nobody has decided about yet."""
        left = self._keeper.left
        if left is None:
            return None
        values = self._values
        return Recovery.of(
            left,
            plan_changed=left.values.plan_digest != values.plan_digest,
            marks_changed=left.values.marks_digest != values.marks_digest or not self.marks_are_saved,
        )

    def recover(self) -> None:
        """Bring back what a crash left behind, with its history; a message says so."""
        left, offer = self._keeper.left, self.recovery
        if left is None or offer is None:
            return
        self._values, self._history = left.values, left.history
        self._revision += 1
        self._keeper.settle(self._values, self._history)
        words = f"{offer.words} It was brought back; undo takes it back step by step."
        self.say(Message(Level.ATTENTION if offer.needs_a_look else Level.NOTE, words))
        self._observers.tell(Changed.PLAN, Changed.MARKS, Changed.HISTORY)

    def drop_recovery(self) -> None:
        """Throw away what a crash left behind."""
        self._keeper.settle(self._values, self._history)

    # Inside

    def _edit(self, entry: Entry) -> bool:
        if entry.old == entry.new:
            return False
        into_last = self._history.would_merge(entry)
        self._values = with_value(self._values, entry.new)
        self._history.push(entry)
        self._revision += 1
        self._note(lambda journal: journal.edit(entry, into_last=into_last))
        self._observers.tell(_kind(entry.what), Changed.HISTORY)
        return True

    def _go(self, entry: Entry | None, write: Callable[[Journal], None], *, back: bool) -> str:
        if entry is None:
            return ""
        self._values = with_value(self._values, entry.old if back else entry.new)
        self._revision += 1
        self._note(write)
        self._observers.tell(_kind(entry.what), Changed.HISTORY)
        return entry.label

    def _now_saved(self, what: What, text: str) -> None:
        self._values = with_digest(self._values, what, digest(text))
        if what is What.PLAN:
            self._saved = replace(self._saved, plan=self._values.plan)
        else:
            self._saved = replace(self._saved, marks=self._values.marks)
        self._note(lambda journal: journal.saved(what, text))
        self._observers.tell(Changed.HISTORY)

    def _refuse_while_recovering(self) -> None:
        if self._keeper.left is not None:
            raise RuntimeError("decide about the recovery first")

    def _note(self, write: Callable[[Journal], None]) -> None:
        self._keeper.note(write, self._values, self._history)

    def _move_journal(self, *, look: bool = True) -> Recovery | None:
        key = journal_key(self._recording.path if self._recording else None, self._plan_path)
        self._keeper.move(key, self._values, self._history, look=look)
        return self.recovery

    def _say_unsafe(self, error: OSError) -> None:
        text = "Changes can no longer be kept safe from a crash: save the plan soon"
        self.say(Message(Level.PROBLEM, text, error.strerror or str(error)))


def usual_rows(facts: RecordingFacts) -> tuple[str, ...]:
    """Channels that are shown unless somebody hides them: all but the triggers.

    Parameters
    ----------
    facts : RecordingFacts
        Of the recording.
    """
    return tuple(one.name for one in facts.channels if one.type is not ChannelType.TRIGGER)


def _kind(what: What) -> Changed:
    return Changed.PLAN if what is What.PLAN else Changed.MARKS


def _refuse_if_changed(path: Path, known: str, ours: str) -> None:
    """Refuse to write over what somebody else wrote; a file that is gone was not changed by anybody."""
    try:
        theirs = path.read_bytes().decode("utf-8-sig", errors="replace")
    except FileNotFoundError:
        return
    if digest(theirs) != known and theirs != ours:
        raise ChangedOnDisk(str(path), ours=ours, theirs=theirs)
