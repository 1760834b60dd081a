"""The stage Export: where to, in which formats, what it will be; writing, and the check of the result."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

from PySide6.QtCore import QSignalBlocker, QUrl
from PySide6.QtGui import QDesktopServices
from PySide6.QtWidgets import QCheckBox, QFileDialog, QHBoxLayout, QLabel, QLineEdit, QProgressBar

from pulsemend.errors import InputError, SettingError
from pulsemend.mending.learned import Learned
from pulsemend.mending.outlook import FORMATS, Outlook, looking_ahead
from pulsemend.mending.prepare import marks_path
from pulsemend.model.vocabulary import Format, Precision
from pulsemend.progress import Progress
from pulsemend.session.changed import Changed
from pulsemend.session.found import Stage
from pulsemend.session.messages import Level, Message
from pulsemend.window.child import Children, MendOrder
from pulsemend.window.fields import in_words
from pulsemend.window.flow import column_of, flow_row
from pulsemend.window.parts import Card, Choices, button, words
from pulsemend.window.question import Question
from pulsemend.window.set_runner import SetRunner, run_words
from pulsemend.window.set_tables import SetTables, size_words
from pulsemend.window.stages.base import StagePage
from pulsemend.window.theme import Theme
from pulsemend.window.workbench import Workbench

_FORMAT_NAMES = {Format.HDF5: "HDF5 (epochs.h5)", Format.FIF: "FIF (epo.fif)"}
_SETS = "sets"


class ExportStage(StagePage):
    """Writing a set, and checking sets.

    Parameters
    ----------
    bench : Workbench
        Session and workers.
    children : Children or None
        The window's child processes; None: the stage's own.
    """

    stage = Stage.EXPORT

    def __init__(self, bench: Workbench, children: Children | None = None) -> None:
        super().__init__(bench)
        self._outlook: Outlook | None = None
        self._looked: tuple[Learned, Path] | None = None
        self._chosen_folder: Path | None = None
        self._progress: tuple[Progress, float | None] | None = None
        self._build(children)
        self.follow(self._show_plan, Changed.PLAN)
        self.follow(self._show_recording, Changed.RECORDING)
        self.follow(self._show_written, Changed.STAGE)
        self.follow(self._show_problems, Changed.HISTORY)
        self.hear(bench.learned_changed, self._show_learned)
        self._show_recording()

    def show_stage(self) -> None:
        """Look at the disk again: much may have changed there."""
        super().show_stage()
        self._looked = None
        self._look()

    def set_theme(self, theme: Theme) -> None:
        """Draw the shapes of verdicts in other colours."""
        self.tables.set_theme(theme)

    # Put together

    def _build(self, children: Children | None) -> None:
        self.where = Card("Where to")
        self.folder = QLineEdit()
        self.folder.setAccessibleName("Folder that gets the set")
        self.folder.editingFinished.connect(self._take_folder)
        self.choose = button("Choose...", self._choose_folder, tooltip="Choose the folder that gets the set")
        self.where.add(self.folder)
        self.where.add(flow_row(self.choose))
        self.set_name = self.where.add_note()
        self._build_formats()
        self.will = Card("What it will be")
        self.shape = self.will.add_line("epochs \u00d7 channels \u00d7 samples")
        self.rate = self.will.add_line("rate")
        self.size = self.will.add_line("room kept for it, at most")
        self.left = self.will.add_line("free on the disk")
        self._build_writing()
        self.settings = column_of(
            self.where, self.formats, self.will, self.writing, self.written, name="Export, settings"
        )
        self.picture = self.tables = SetTables(self.bench.theme)
        self.runner = SetRunner(self.bench.session, children, self.picture)
        self.runner.changed.connect(self._show_run)
        self.runner.progressed.connect(self._take_progress)

    def _build_formats(self) -> None:
        self.formats = Card("Formats")
        self.boxes: dict[Format, QCheckBox] = {}
        self._evidence: dict[Format, QLabel] = {}
        for kind in FORMATS:
            box = QCheckBox(_FORMAT_NAMES[kind])
            box.clicked.connect(self._take_formats)
            evidence = words("", "quiet")
            evidence.setWordWrap(False)
            row = QHBoxLayout()
            row.addWidget(box)
            row.addStretch(1)
            row.addWidget(evidence)
            self.formats.body.addLayout(row)
            self.boxes[kind], self._evidence[kind] = box, evidence
        self.precision = Choices(
            "Precision", ((Precision.SINGLE.value, "single"), (Precision.DOUBLE.value, "double"))
        )
        self.precision.show_evidence(Precision.SINGLE.value, "4 bytes a sample, 7 digits")
        self.precision.show_evidence(Precision.DOUBLE.value, "8 bytes a sample, 16 digits")
        self.precision.chosen.connect(self._take_precision)
        self.formats.add(QLabel("precision"))
        self.formats.add(self.precision)
        self.refusal = words("", "attention")
        self.refusal.setWordWrap(True)
        self.formats.add(self.refusal)
        self.refusal.hide()

    def _build_writing(self) -> None:
        self.writing = Card("Write")
        self.problems = words("", "attention")
        self.problems.setWordWrap(True)
        self.writing.add(self.problems)
        self.save = button("Save the plan", self._save_plan, tooltip="Write the plan to its file")
        self.write_button = button("Write the set", self.write, main=True)
        self.cancel = button("Cancel", lambda: self.runner.stop(), tooltip="Stop; no half file stays")
        self.writing.add(flow_row(self.write_button, self.save, self.cancel))
        self.question = Question("Before the set is written")
        self.writing.add(self.question)
        self.bar = QProgressBar()
        self.bar.setAccessibleName("Progress of writing")
        self.bar.setTextVisible(False)
        self.writing.add(self.bar)
        self.run_words = self.writing.add_note()
        self.written = Card("Sets")
        self.last = self.written.add_note()
        self.show_button = button(
            "Show the folder", self.show_folder, tooltip="Show the folder of the set written last"
        )
        self.check_button = button(
            "Check a set...", self.check_set, tooltip="Read any epoch set back and show each check"
        )
        self.written.add(flow_row(self.show_button, self.check_button))

    # What can be done

    def write(self) -> None:
        """Write the set of what the window shows, after what has to be asked."""
        self._write(replace_it=False)

    def check_set(self, folder: Path | None = None) -> None:
        """Check a set.

        Parameters
        ----------
        folder : Path or None
            The set; None asks.
        """
        if folder is None:
            start = str(self._out() or Path.home())
            chosen = QFileDialog.getExistingDirectory(self.settings.window(), "Check which set?", start)
            folder = Path(chosen) if chosen else None
        if folder is not None:
            self.runner.check(folder)

    def show_folder(self) -> None:
        """Show the folder of the set written last, in the system's own way."""
        written = self.bench.session.found.written
        if written is None:
            return
        if not QDesktopServices.openUrl(QUrl.fromLocalFile(str(written.folder))):
            text = f"The system shows no folders. The set is {written.folder}"
            self.bench.session.say(Message(Level.NOTE, text))

    def _write(self, *, replace_it: bool) -> None:
        session, out = self.bench.session, self._out()
        if self._why_not() or self.runner.job is not None or session.recording is None or out is None:
            return
        if not session.plan_is_saved or session.plan_path is None:
            self.question.ask(
                "The set is made from the plan's file, which does not have your changes yet.",
                "Save the plan and write",
                "Not now",
                lambda: self._save_and_write(replace_it=replace_it),
            )
            return
        if self._outlook is not None and self._outlook.exists and not replace_it:
            self.question.ask(
                f"{self._outlook.folder.name} stands there already. Replace it? "
                "The old set is removed as soon as the new one is whole.",
                "Replace it",
                "Keep it",
                lambda: self._write(replace_it=True),
            )
            return
        if self._save_marks():
            self._remember(out)
            marks = session.marks_path
            marks = marks if marks is not None and marks.exists() else None
            self.tables.open_files()
            self.runner.write(MendOrder(session.recording.path, session.plan_path, out, marks, replace_it))

    def _save_and_write(self, *, replace_it: bool) -> None:
        if self._save_plan():
            self._write(replace_it=replace_it)

    def _save_plan(self) -> bool:
        """Save the plan; asks for a place if it has none. Gives whether it is saved."""
        session = self.bench.session
        try:
            if session.plan_path is not None:
                session.save_plan()
            else:
                path = self._ask_plan_path()
                if path is None:
                    return False
                opened = session.recording
                session.save_plan_as(path, None if opened is None else marks_path(path, opened.facts.stem))
        except (InputError, OSError) as error:
            self._complain(error, "The plan cannot be saved")
            return False
        return True

    def _ask_plan_path(self) -> Path | None:
        opened = self.bench.session.recording
        start = Path.home() if opened is None else opened.path.parent
        chosen, _ = QFileDialog.getSaveFileName(
            self.settings.window(), "Save the plan as", str(start / "plan.toml"), "Plans (*.toml)"
        )
        return Path(chosen) if chosen else None

    def _save_marks(self) -> bool:
        session = self.bench.session
        if session.marks_are_saved or session.marks_path is None:
            return True
        try:
            session.save_marks()
        except (InputError, OSError) as error:
            self._complain(error, "The marks cannot be saved")
            return False
        return True

    def _complain(self, error: InputError | OSError, what: str) -> None:
        reason = str(error) if isinstance(error, InputError) else error.strerror or str(error)
        self.bench.session.say(Message(Level.PROBLEM, f"{what}. {reason}"))
        self.run_words.setText(f"{what}. {reason}")

    def _remember(self, out: Path) -> None:
        self.bench.settings = replace(self.bench.settings, export_folder=str(out))

    # Where to

    def _out(self) -> Path | None:
        """Folder that gets the set: as chosen, as last time, or beside the plan or the recording."""
        if self._chosen_folder is not None:
            return self._chosen_folder
        if self.bench.settings.export_folder:
            return Path(self.bench.settings.export_folder)
        session = self.bench.session
        beside = session.plan_path or (session.recording.path if session.recording else None)
        return None if beside is None else beside.absolute().parent / _SETS

    def _take_folder(self) -> None:
        text = self.folder.text().strip()
        if text == str(self._out() or ""):
            return
        self._chosen_folder = Path(text).expanduser() if text else None
        self._show_folder()
        self._look()

    def _choose_folder(self) -> None:
        chosen = QFileDialog.getExistingDirectory(
            self.settings.window(), "Which folder gets the set?", str(self._out() or Path.home())
        )
        if chosen:
            self.folder.setText(chosen)
            self._take_folder()

    # Formats

    def _take_formats(self) -> None:
        plan = self.bench.session.plan
        if plan is None:
            return
        formats = tuple(kind for kind in FORMATS if self.boxes[kind].isChecked())
        if not formats:
            self._refuse("Not taken over: a set needs one format at least.")
        else:
            names = ", ".join(kind.value for kind in formats)
            self._edit(f"Formats: {names}", lambda: replace(plan.export, formats=formats))

    def _take_precision(self, word: str) -> None:
        plan = self.bench.session.plan
        if plan is not None:
            self._edit(f"Precision: {word}", lambda: replace(plan.export, precision=Precision(word)))

    def _edit(self, label: str, new: Callable[[], object]) -> None:
        plan = self.bench.session.plan
        if plan is None:
            return
        try:
            self.bench.session.edit_plan(label, replace(plan, export=new()))  # type: ignore[arg-type]
        except SettingError as error:
            self._refuse(in_words(error))
        except InputError as error:
            self._refuse(str(error))

    def _refuse(self, text: str) -> None:
        self._show_plan()
        self.refusal.setText(text)
        self.refusal.show()

    # What is shown

    def _show_recording(self) -> None:
        self.question.drop()
        self._show_plan()
        self._show_learned()
        self._show_written()
        self._show_run()

    def _show_plan(self) -> None:
        plan = self.bench.session.plan
        self.refusal.hide()
        self.formats.setEnabled(plan is not None)
        self._show_folder()
        if plan is not None:
            for kind, box in self.boxes.items():
                with QSignalBlocker(box):
                    box.setChecked(kind in plan.export.formats)
            self.precision.show_choice(plan.export.precision.value)
        self._show_problems()

    def _show_folder(self) -> None:
        out = str(self._out() or "")
        self.folder.setToolTip(out)
        if self.folder.text() != out:
            self.folder.setText(out)

    def _show_learned(self) -> None:
        if self.bench.learned is None:
            self._outlook, self._looked = None, None
        self._show_outlook()
        self._look()

    def _look(self) -> None:
        """Let a worker look ahead, unless that is known already."""
        learned, out = self.bench.learned, self._out()
        if learned is None or out is None or self.bench.provisional or self._looked == (learned, out):
            return
        self._looked = (learned, out)

        def take(outlook: Outlook) -> None:
            self._outlook = outlook
            self._show_outlook()

        self.bench.start("outlook", lambda _recording: looking_ahead(learned, out), take)

    def _show_outlook(self) -> None:
        outlook = self._outlook
        self.tables.show_files(outlook, self._why_not())
        for line in (self.shape, self.rate, self.size, self.left):
            line.show_value("not known yet")
        self.set_name.setText("")
        for label in self._evidence.values():
            label.setText("")
        if outlook is not None:
            n_epochs, n_channels, n_times = outlook.shape
            self.shape.show_value(f"{n_epochs} \u00d7 {n_channels} \u00d7 {n_times}", attention=not n_epochs)
            self.rate.show_value(f"{outlook.rate_hz:g} Hz")
            short = outlook.needed_bytes > outlook.free_bytes
            self.size.show_value(size_words(outlook.needed_bytes), attention=short)
            self.left.show_value(size_words(outlook.free_bytes), attention=short)
            there = "It stands there already." if outlook.exists else ""
            self.set_name.setText(f"The set becomes the folder {outlook.folder.name}. {there}".strip())
            for one in outlook.formats:
                size = "cannot hold it" if one.refusal else f"at most {size_words(one.size_bytes)}"
                self._evidence[one.format].setText(size)
                self._evidence[one.format].setToolTip(one.refusal)
        self._show_problems()

    def _why_not(self) -> str:
        """Say why nothing can be written now; empty if it can."""
        session = self.bench.session
        if session.recording is None:
            return "Open a recording and a plan first: what would be written is listed here."
        if session.plan is None:
            return "There is no plan yet. Open one, or draft one from this recording (menu File)."
        if self.bench.problem:
            return self.bench.problem
        if self._outlook is None:
            return "What will be written is being worked out."
        return "\n".join(self._outlook.refusals)

    def _show_problems(self) -> None:
        session = self.bench.session
        why_not = self._why_not()
        unsaved = session.plan is not None and (session.plan_path is None or not session.plan_is_saved)
        lines = [why_not] if why_not else []
        if unsaved and session.recording is not None:
            lines.append(
                "The plan has changes that its file does not have; it is saved before the set is made."
            )
        self.problems.setText("\n".join(lines))
        self.problems.setVisible(bool(lines))
        self.save.setVisible(unsaved)
        if not unsaved or why_not:
            self.question.drop()
        self.write_button.setEnabled(not why_not and self.runner.job is None)

    def _show_written(self) -> None:
        written = self.bench.session.found.written
        self.show_button.setEnabled(written is not None)
        if written is None:
            self.last.setText("No set was written from this window yet.")
            return
        stale = written.revision != self.bench.session.revision
        changed = " Plan or marks have changed since." if stale else ""
        self.last.setText(f"Written last: {written.folder.name}.{changed}")
        self.last.setToolTip(str(written.folder))

    def _take_progress(self, progress: Progress, seconds_left: float | None) -> None:
        self._progress = (progress, seconds_left)
        job = self.runner.job
        if job is None:
            return
        self.run_words.setText(run_words(job, progress, seconds_left))
        self.bar.setRange(0, 500 if progress.total > 0 else 0)
        if progress.total > 0:
            self.bar.setValue(round(500 * min(progress.done / progress.total, 1.0)))

    def _show_run(self) -> None:
        job = self.runner.job
        if job is not None and (self.write_button.hasFocus() or self.check_button.hasFocus()):
            self.cancel.show()
            self.cancel.setFocus()
        had_focus = self.cancel.hasFocus()
        self.check_button.setEnabled(job is None)
        self._show_problems()
        if job is None and had_focus:
            self.write_button.setFocus()
        for one in (self.bar, self.cancel):
            one.setVisible(job is not None)
        if job is not None:
            self.bar.setRange(0, 0)
            self.run_words.setText(run_words(job, None, None))
            return
        self.run_words.setText(self.runner.words)
        self.tables.show_checked(self.runner.checked)
        if self.runner.checked is not None:
            self.tables.open_check()
        # The disk holds something else now.
        self._looked = None
        self._look()
