"""What every action of the table does: one method named like the action's handler."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

from PySide6.QtCore import QUrl
from PySide6.QtGui import QDesktopServices
from PySide6.QtWidgets import QApplication, QFileDialog, QInputDialog

from pulsemend.errors import ChangedOnDisk, PulsemendError
from pulsemend.mending.prepare import marks_path
from pulsemend.model.epochs import nearest_sample
from pulsemend.session.dropped import RECORDING_ENDINGS, Dropped, what_is
from pulsemend.session.event_choice import ALL_EVENTS, EventChoice
from pulsemend.session.found import NOTHING_SELECTED, Selected, Stage
from pulsemend.session.messages import Level, Message
from pulsemend.session.settings import Recent, ThemeChoice
from pulsemend.units import ms_to_s, s_to_ms
from pulsemend.window.asking import answer
from pulsemend.window.bad_stretches import KINDS
from pulsemend.window.dialogs.about import AboutDialog
from pulsemend.window.dialogs.details import copy_details
from pulsemend.window.dialogs.go_to_time import GoToTime
from pulsemend.window.dialogs.keys import KeysDialog
from pulsemend.window.dialogs.notice import NoticeDialog
from pulsemend.window.dialogs.pick_channels import PickChannels
from pulsemend.window.dialogs.questions import SAVE_AS, TAKE_THEIRS, WRITE_OVER, changed_question
from pulsemend.window.dialogs.which_events import WhichEvents
from pulsemend.window.traces_link import PULSE_KEYS_FROM
from pulsemend.window.view_acts import ViewActs

if TYPE_CHECKING:
    from pulsemend.window.main_window import MainWindow


class Handlers(ViewActs):
    """Handlers of all actions.

    Parameters
    ----------
    window : MainWindow
        Whose actions they are.
    """

    def __init__(self, window: MainWindow) -> None:
        super().__init__(window.session)
        self._window = window
        self._events: EventChoice = ALL_EVENTS

    # Opening and saving

    def open_recording(self) -> None:
        """Ask for a recording and open it."""
        endings = " ".join(f"*{ending}" for ending in RECORDING_ENDINGS)
        path, _ = QFileDialog.getOpenFileName(
            self._window, "Open a recording", self._folder(), f"Recordings ({endings});;All files (*)"
        )
        if path:
            self._window.opener.open(Path(path), None)

    def open_plan(self) -> None:
        """Ask for a plan and open it."""
        if not self._window.may_leave_plan():
            return
        path, _ = QFileDialog.getOpenFileName(
            self._window, "Open a plan", self._folder(), "Plans (*.toml);;All files (*)"
        )
        if path:
            self._window.opener.open(None, Path(path))

    def open_folder(self) -> None:
        """Ask for a folder and open the recording and plan in it."""
        path = QFileDialog.getExistingDirectory(self._window, "Open a folder", self._folder())
        if path:
            self.open_dropped(what_is([Path(path)]))

    def open_dropped(self, dropped: Dropped) -> None:
        """Open what was dropped: a recording, a plan, both, or a set to be checked."""
        if dropped.words:
            self._session.say(Message(Level.NOTE, dropped.words))
        if dropped.epoch_set is not None:
            self._check(dropped.epoch_set)
        elif dropped.is_something and (dropped.plan is None or self._window.may_leave_plan()):
            self._window.opener.open(dropped.recording, dropped.plan)

    def open_recent(self, recent: Recent) -> None:
        """Open a recording that was open before, with the plan that was open with it."""
        plan = Path(recent.plan) if recent.plan and Path(recent.plan).exists() else None
        if plan is not None and not self._window.may_leave_plan():
            return
        self._window.opener.open(Path(recent.recording), plan)

    def draft_plan(self) -> None:
        """Propose a plan from the open recording."""
        if self._window.may_leave_plan():
            self._window.opener.draft()

    def save_plan(self) -> bool:
        """Save the plan; False if it was not."""
        session = self._session
        if session.plan is None:
            return False
        if session.plan_path is None:
            return self.save_plan_as()
        try:
            session.save_plan()
        except ChangedOnDisk as error:
            return self._settle_plan(error)
        except OSError as error:
            self._window.bench.tell(error)
            return False
        return True

    def save_plan_as(self) -> bool:
        """Ask where to save the plan; False if it was not."""
        session = self._session
        path, _ = QFileDialog.getSaveFileName(
            self._window, "Save the plan as", self._folder("plan.toml"), "Plans (*.toml)"
        )
        if not path:
            return False
        target = Path(path) if path.endswith(".toml") else Path(f"{path}.toml")
        marks = None
        if session.recording is not None and session.marks_path is None:
            marks = marks_path(target, session.recording.facts.stem)
        try:
            session.save_plan_as(target, marks)
        except OSError as error:
            self._window.bench.tell(error)
            return False
        self._window.opener.save_marks()
        return True

    def _settle_plan(self, error: ChangedOnDisk) -> bool:
        choice = answer(changed_question(error, parent=self._window))
        if choice == WRITE_OVER:
            self._session.save_plan(overwrite=True)
            return True
        if choice == TAKE_THEIRS:
            try:
                self._session.take_plan_from_disk()
            except PulsemendError as problem:
                self._window.bench.tell(problem)
            return False
        return choice == SAVE_AS and self.save_plan_as()

    def close_window(self) -> None:
        """Close the window."""
        self._window.close()

    def quit(self) -> None:
        """Close all windows; the program ends with the last one."""
        QApplication.closeAllWindows()

    def undo(self) -> None:
        """Take the last change back."""
        self._session.undo()

    def redo(self) -> None:
        """Do it again."""
        self._session.redo()

    def find_action(self) -> None:
        """Open the action finder."""
        self._window.header.finder.open()

    # View

    def measure(self) -> None:
        """Turn measuring by dragging on or off."""
        self._window.turn_measuring()

    def pick_channels(self) -> None:
        """Ask which channels to pick."""
        PickChannels(self._session, self._window).open()

    def pick_none(self) -> None:
        """Let go of picked channels and of what is selected."""
        self._set(replace(self._session.view, picked=frozenset()))
        self._session.select(NOTHING_SELECTED)

    def channels_up(self) -> None:
        """Move one row up."""
        self._window.scroll_rows(-1)

    def channels_down(self) -> None:
        """Move one row down."""
        self._window.scroll_rows(1)

    def go_to_time(self) -> None:
        """Ask for a time and show it."""
        GoToTime(self._session, self._window).open()

    def next_pulse(self) -> None:
        """Bring the next pulse into view."""
        self._to_pulse(1)

    def previous_pulse(self) -> None:
        """Bring the pulse before into view."""
        self._to_pulse(-1)

    def choose_event_kind(self) -> None:
        """Ask which events the next two actions look for."""
        dialog = WhichEvents(self._session, self._events, self._window.bench.theme, self._window)
        dialog.chosen.connect(self._take_events)
        dialog.open()

    def _take_events(self, chosen: EventChoice) -> None:
        self._events = chosen

    def next_event(self) -> None:
        """Bring the next event into view."""
        self._to_event(1)

    def previous_event(self) -> None:
        """Bring the event before into view."""
        self._to_event(-1)

    def _middle_s(self) -> float:
        view = self._session.view
        return view.start_s + 0.5 * view.width_s

    def _to_pulse(self, step: int) -> None:
        events = self._window.link.overlays.events
        found = [
            (float(time_s), key)
            for time_s, key in zip(events.time_s, events.keys, strict=True)
            if key >= PULSE_KEYS_FROM
        ]
        selected = self._session.selected.pulse
        opened = self._session.recording
        at_s = self._middle_s()
        if selected is not None and opened is not None:
            at_s = selected / opened.facts.rate_hz
        chosen = _beside(found, at_s, step)
        if chosen is not None:
            self.centre(chosen[0])
            self._session.select(Selected(pulse=chosen[1] - PULSE_KEYS_FROM))

    def _to_event(self, step: int) -> None:
        opened = self._session.recording
        if opened is None:
            return
        rate_hz = opened.facts.rate_hz
        found = [
            (marker.sample / rate_hz, place)
            for place, marker in enumerate(opened.facts.markers)
            if self._events.takes(marker, self._session.plan)
        ]
        chosen = _beside(found, self._middle_s(), step)
        if chosen is not None:
            self.centre(chosen[0])

    # Marks

    def toggle_bad(self) -> None:
        """Mark the picked channels bad, or not."""
        self._window.mark_acts.toggle_bad()

    def mark_stretch(self) -> None:
        """Ask why, then leave the selected stretch out of everything."""
        dialog = QInputDialog(self._window)
        dialog.setWindowTitle("Selected stretch is bad")
        dialog.setLabelText("Why is it bad? Choose, or type words of your own.")
        dialog.setComboBoxItems(list(KINDS))
        dialog.setComboBoxEditable(True)
        dialog.textValueSelected.connect(self._window.mark_acts.mark_stretch)
        dialog.open()

    def add_pulse(self) -> None:
        """Add a pulse at the cursor, or in the middle of the view."""
        opened = self._session.recording
        if opened is not None:
            at_s = self._window.cursor_s
            sample = nearest_sample((self._middle_s() if at_s is None else at_s) * opened.facts.rate_hz)
            self._window.mark_acts.add_pulse(min(max(sample, 0), opened.facts.n_samples - 1))

    def move_pulse(self) -> None:
        """Ask how far to move the selected pulse."""
        opened, sample = self._session.recording, self._session.selected.pulse
        if opened is None or sample is None:
            return
        rate_hz = opened.facts.rate_hz
        dialog = QInputDialog(self._window)
        dialog.setWindowTitle("Move the pulse")
        dialog.setLabelText("Later by how many milliseconds? (less than 0: earlier)")
        dialog.setInputMode(QInputDialog.InputMode.DoubleInput)
        dialog.setDoubleDecimals(3)
        dialog.setDoubleRange(-1000.0, 1000.0)
        dialog.setDoubleStep(s_to_ms(1.0 / rate_hz))
        dialog.doubleValueSelected.connect(
            lambda by_ms: self._window.mark_acts.move_pulse(
                sample, sample + nearest_sample(ms_to_s(by_ms) * rate_hz)
            )
        )
        dialog.open()

    def remove_selected(self) -> None:
        """Remove the selected pulse or bad stretch."""
        self._window.mark_acts.remove_selected()

    # Sets

    def mend(self) -> None:
        """Open the stage that writes the set, and write it."""
        self._session.open_stage(Stage.EXPORT)
        self._window.export_stage().write()

    def stop_job(self) -> None:
        """Stop what runs."""
        self._window.stop_jobs()

    def check_set(self) -> None:
        """Ask for a set and check it."""
        path = QFileDialog.getExistingDirectory(self._window, "Check a set", self._folder())
        if path:
            self._check(Path(path))

    def _check(self, folder: Path) -> None:
        self._session.open_stage(Stage.EXPORT)
        self._window.export_stage().check_set(folder)

    def show_folder(self) -> None:
        """Show the folder of the set written last."""
        written = self._session.found.written
        if written is not None:
            QDesktopServices.openUrl(QUrl.fromLocalFile(str(written.folder)))

    def open_stage(self, stage: str) -> None:
        """Open a stage."""
        self._session.open_stage(Stage(stage))

    # Looks and help

    def set_theme(self, choice: str) -> None:
        """Choose colours."""
        self._window.change_settings(replace(self._window.bench.settings, theme=ThemeChoice(choice)))
        self._window.apply_looks()

    def set_text_size(self, size: str) -> None:
        """Make all text larger, smaller or as usual."""
        settings = self._window.bench.settings
        changed = (
            replace(settings, text_percent=100)
            if size == "usual"
            else settings.with_text_step(1 if size == "larger" else -1)
        )
        self._window.change_settings(changed)
        self._window.apply_looks()

    def help(self) -> None:
        """Show the guide."""
        self._window.show_guide()

    def keys_help(self) -> None:
        """Show all keys."""
        KeysDialog(self._window).open()

    def notice(self) -> None:
        """Show the safety notice."""
        NoticeDialog(parent=self._window).open()

    def about(self) -> None:
        """Show version, licences and the notice."""
        AboutDialog(self._window.bench.theme, self._window).open()

    def copy_details(self) -> None:
        """Copy versions and settings without names and paths."""
        copy_details(self._window.bench, self._window)

    def _folder(self, name: str = "") -> str:
        """Where a file dialog starts."""
        opened = self._session.recording
        at = self._session.plan_path or (None if opened is None else opened.path)
        folder = Path.home() if at is None else at.parent
        return str(folder / name) if name else str(folder)


def _beside(found: Sequence[tuple[float, int]], at_s: float, step: int) -> tuple[float, int] | None:
    """Find the next (1) or previous (-1) of times in order."""
    near_s = 1e-6
    if step > 0:
        return next((one for one in found if one[0] > at_s + near_s), None)
    return next((one for one in reversed(found) if one[0] < at_s - near_s), None)
