"""The window: header, rail, desk and status line, put together and kept in step with the session."""

from __future__ import annotations

import contextlib
import logging
from dataclasses import dataclass, replace
from pathlib import Path

from PySide6.QtCore import QByteArray, Qt
from PySide6.QtGui import QCloseEvent, QGuiApplication
from PySide6.QtWidgets import QApplication, QHBoxLayout, QMainWindow, QVBoxLayout, QWidget

from pulsemend.engine.pyramid import Pyramid
from pulsemend.errors import ChangedOnDisk, PulsemendError
from pulsemend.model.epochs import nearest_sample
from pulsemend.model.recording import Recording
from pulsemend.progress import Progress
from pulsemend.session.changed import Changed
from pulsemend.session.found import Selected, Stage
from pulsemend.session.messages import Level, Message
from pulsemend.session.recovery import Recovery
from pulsemend.session.session import Session
from pulsemend.session.settings import Settings, ThemeChoice, save_settings
from pulsemend.window.action_bar import ActionBar
from pulsemend.window.asking import answer
from pulsemend.window.banner import Banner
from pulsemend.window.child import Children
from pulsemend.window.desk import Desk, Factory
from pulsemend.window.dialogs.notice import first_start_notice
from pulsemend.window.dialogs.questions import (
    BRING_BACK,
    GIVE_UP,
    SAVE,
    STOP_AND_CLOSE,
    WRITE_OVER,
    changed_question,
    recovery_question,
    running_question,
    unsaved_question,
)
from pulsemend.window.drops import Drops
from pulsemend.window.handlers import Handlers
from pulsemend.window.header import Header
from pulsemend.window.mark_acts import MarkActs
from pulsemend.window.marker_watch import MarkerWatch
from pulsemend.window.opening import Opener
from pulsemend.window.rail import Rail
from pulsemend.window.ribbon import Ribbon
from pulsemend.window.stages.epochs import EpochsStage
from pulsemend.window.stages.export import ExportStage
from pulsemend.window.stages.later import LaterStage
from pulsemend.window.stages.markers import MarkersStage
from pulsemend.window.stages.pulses import PulsesStage
from pulsemend.window.stages.recording import RecordingStage
from pulsemend.window.start_page import StartPage
from pulsemend.window.status_line import StatusLine
from pulsemend.window.style import style_sheet
from pulsemend.window.theme import DARK, LIGHT, Theme
from pulsemend.window.traces.model import Reading
from pulsemend.window.traces.plot import Hand
from pulsemend.window.traces.source import TraceSource
from pulsemend.window.traces.widget import TracesWidget
from pulsemend.window.traces_link import PULSE_KEYS_FROM, SessionView, TracesLink
from pulsemend.window.workbench import Workbench

log = logging.getLogger(__name__)

FRAME_PX = 16


@dataclass(frozen=True)
class Folders:
    """The user's folders and files, passed in so that tests never touch the real ones."""

    data: Path
    state: Path
    cache: Path
    settings: Path


class MainWindow(QMainWindow):
    """One window on one recording.

    Parameters
    ----------
    session : Session
        Its state.
    settings : Settings
        The user's.
    folders : Folders
        The user's folders.
    """

    def __init__(self, session: Session, settings: Settings, folders: Folders) -> None:
        super().__init__()
        self.session = session
        self.folders = folders
        self.bench = Workbench(session, settings, self)
        self.children_ = Children(self)
        self.mark_acts = MarkActs(self.bench)
        self.marker_watch = MarkerWatch(self.bench, self)
        self.opener = Opener(self.bench, folders.state, self)
        self.link = TracesLink(self.bench, folders.cache, self)
        self.traces: TracesWidget | None = None
        self.ribbon: Ribbon | None = None
        self._start: StartPage | None = None
        self._source: Recording | None = None
        self.cursor_s: float | None = None
        self._measuring = False
        self._text_percent = 100
        self._guide: QWidget | None = None
        self.setMinimumSize(900, 600)
        room = self.screen().availableGeometry()
        # The window manager's frame needs room, too.
        self.resize(min(1440, room.width() - FRAME_PX), min(900, room.height() - 2 * FRAME_PX))
        self.restoreGeometry(QByteArray.fromBase64(settings.geometry.encode()))
        self._build()
        self._listen()
        self.apply_looks()
        self._show_recording()

    # Put together

    def _build(self) -> None:
        self.handlers = Handlers(self)
        self.actions_ = ActionBar(self.bench, self, self.handlers)
        self.actions_.fill(self.menuBar())
        self.header = Header(self.bench, self.actions_)
        self.banner = Banner(self.bench)
        self.rail = Rail(self.session)
        self.desk = Desk(self._factories())
        self.status = StatusLine(self.session)
        body = QWidget()
        row = QHBoxLayout(body)
        row.setContentsMargins(0, 0, 0, 0)
        row.setSpacing(0)
        row.addWidget(self.rail)
        row.addWidget(self.desk, 1)
        central = QWidget()
        column = QVBoxLayout(central)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(0)
        column.addWidget(self.header)
        column.addWidget(self.banner)
        column.addWidget(body, 1)
        column.addWidget(self.status)
        self.setCentralWidget(central)

    def _factories(self) -> dict[Stage, Factory]:
        return {
            Stage.RECORDING: lambda: RecordingStage(self.bench),
            Stage.MARKERS: lambda: MarkersStage(self.bench, self.marker_watch),
            Stage.PULSES: lambda: PulsesStage(self.bench),
            Stage.EPOCHS: lambda: EpochsStage(self.bench),
            Stage.REVIEW: lambda: LaterStage(self.bench, Stage.REVIEW),
            Stage.EXPORT: lambda: ExportStage(self.bench, self.children_),
            Stage.ROSTER: lambda: LaterStage(self.bench, Stage.ROSTER),
        }

    def _listen(self) -> None:
        session = self.session
        self._unsubscribe = [
            session.subscribe(Changed.RECORDING, self._show_recording),
            session.subscribe(Changed.PLAN, self._show_marks_and_plan),
            session.subscribe(Changed.MARKS, self._show_marks_and_plan),
            session.subscribe(Changed.STAGE, self._show_stage),
            session.subscribe(Changed.HISTORY, self._show_title),
            self.marker_watch.close,
        ]
        self.rail.chosen.connect(session.open_stage)
        self.bench.learned_changed.connect(self.link.show_learned)
        self.bench.learned_changed.connect(self._show_ribbon_events)
        self.bench.jobs.changed.connect(self._watch_jobs)
        self.children_.changed.connect(self._watch_jobs)
        self.link.pyramid_ready.connect(self._give_ribbon_pyramid)
        self.opener.opened.connect(self._remember)
        self.opener.recovery_found.connect(self._on_recovery)
        self.opener.marks_changed_on_disk.connect(self._on_marks_changed)
        self.status.cancel_wanted.connect(self.stop_jobs)
        QGuiApplication.styleHints().colorSchemeChanged.connect(self.apply_looks)
        self._drops = Drops(self)
        self._drops.dropped.connect(self.handlers.open_dropped)

    # What is shown

    def _show_recording(self) -> None:
        """Build ribbon and traces anew for another recording."""
        self._drop_traces()
        self._source = self.opener.take_source()
        if self._source is None:
            self._show_start()
            return
        view = SessionView(self.session)
        source = TraceSource(self._source, self.link.request_repaired)
        self.traces = TracesWidget(view, source, self.bench.theme)
        self.traces.bad_toggled.connect(self._on_bad_toggled)
        self.traces.stretch_selected.connect(self._on_stretch)
        self.traces.event_clicked.connect(self._on_event)
        self.traces.pulse_dragged.connect(self._on_pulse_dragged)
        self.traces.pulse_added.connect(self._on_pulse_added)
        self.traces.cursor_moved.connect(self._on_cursor)
        self.traces.measured.connect(self.status.show_measure)
        self.traces.set_pulses_editable(editable=self.session.plan is not None)
        self.ribbon = Ribbon(view, source, self.bench.theme)
        for widget in (self.traces, self.ribbon):
            self.actions_.serve_traces(widget)
        self.desk.put(self.desk.traces_place, self.traces)
        self.desk.put(self.desk.ribbon_place, self.ribbon)
        self.desk.ribbon_place.show()
        self.link.attach(self.traces)
        self._show_marks_and_plan()
        self._show_stage()
        self._show_title()
        self.traces.setFocus()

    def _show_start(self) -> None:
        start = self._start = StartPage(self.bench, self.actions_)
        start.recent_chosen.connect(self.handlers.open_recent)
        start.sample_written.connect(lambda result: self.opener.open(result.recordings[0], result.plan))
        self.desk.put(self.desk.traces_place, start)
        self.desk.ribbon_place.hide()
        self._show_stage()
        self._show_title()

    def _drop_traces(self) -> None:
        self.link.attach(None)
        self._start = None
        self.traces = None
        self.ribbon = None
        if self._source is not None:
            self._source.close()
            self._source = None

    def _show_marks_and_plan(self) -> None:
        if self.traces is not None:
            self.traces.set_pulses_editable(editable=self.session.plan is not None)
            self.link.show_learned()
        self._show_ribbon_events()

    def _show_ribbon_events(self) -> None:
        if self.ribbon is not None:
            self.ribbon.set_overlays(self.link.overlays)

    def _give_ribbon_pyramid(self, ready: Pyramid) -> None:
        if self.ribbon is not None:
            self.ribbon.set_pyramid(ready)

    def _show_stage(self) -> None:
        self.desk.open_stage(self.session.stage)

    def _show_title(self) -> None:
        opened = self.session.recording
        name = "Pulsemend" if opened is None else f"{opened.path.name} \u2013 Pulsemend"
        self.setWindowTitle(name if self.session.is_saved else f"{name} (unsaved)")

    # What the hand does in the traces

    def _on_cursor(self, reading: Reading | None) -> None:
        self.cursor_s = None if reading is None else reading.time_s
        self.status.show_reading(reading)

    def turn_measuring(self) -> None:
        """Let plain dragging measure, or move the traces again."""
        self._measuring = not self._measuring
        if self.traces is not None:
            self.traces.set_hand(Hand.MEASURE if self._measuring else Hand.PAN)
            words = "Drag in the traces to measure" if self._measuring else "Dragging moves the traces again"
            self.session.say(Message(Level.NOTE, words))

    def scroll_rows(self, rows: int) -> None:
        """Show rows further up (-1) or down (1)."""
        if self.traces is not None:
            laid = self.traces.plot.rows
            self.traces.plot.set_scroll(laid.scroll + round(rows * laid.row_height))

    def export_stage(self) -> ExportStage:
        """Open the page that writes and checks sets."""
        page = self.desk.open_stage(Stage.EXPORT)
        if not isinstance(page, ExportStage):
            raise TypeError("the stage Export has another page")
        return page

    def _rate_hz(self) -> float:
        opened = self.session.recording
        return 1.0 if opened is None else opened.facts.rate_hz

    def _on_bad_toggled(self, name: str, bad: bool) -> None:
        self.mark_acts.set_bad(frozenset([name]), bad=bad)

    def _on_stretch(self, start_s: float, stop_s: float) -> None:
        rate_hz = self._rate_hz()
        stretch = (nearest_sample(start_s * rate_hz), nearest_sample(stop_s * rate_hz))
        self.session.select(Selected(stretch=stretch) if stretch[1] > stretch[0] else Selected())

    def _on_event(self, key: int) -> None:
        if key >= PULSE_KEYS_FROM:
            self.session.select(Selected(pulse=key - PULSE_KEYS_FROM))

    def _on_pulse_dragged(self, key: int, time_s: float) -> None:
        if key >= PULSE_KEYS_FROM:
            self.mark_acts.move_pulse(key - PULSE_KEYS_FROM, nearest_sample(time_s * self._rate_hz()))

    def _on_pulse_added(self, time_s: float) -> None:
        self.mark_acts.add_pulse(nearest_sample(time_s * self._rate_hz()))

    # Jobs

    def _watch_jobs(self) -> None:
        """Show the oldest running piece of work, or that there is none."""
        running = (*self.children_.under_way, *self.bench.jobs.under_way)
        for job in running:
            if not job.property("watched"):
                job.setProperty("watched", True)
                job.progressed.connect(self._on_progress)
                job.finished.connect(self._watch_jobs)
        if not running:
            self.status.end_work()

    def _on_progress(self, progress: Progress, seconds_left: float | None) -> None:
        running = (*self.children_.under_way, *self.bench.jobs.under_way)
        if running and self.sender() is running[0]:
            self.status.show_work(progress, seconds_left)

    def stop_jobs(self) -> None:
        """Ask everything that runs to stop."""
        for job in (*self.children_.under_way, *self.bench.jobs.under_way):
            job.cancel()

    # Looks and settings

    def apply_looks(self) -> None:
        """Take theme and text size from the settings."""
        settings = self.bench.settings
        self.bench.theme = theme_for(settings.theme)
        points = self._system_points() * settings.text_percent / 100
        self.setStyleSheet(style_sheet(self.bench.theme, points))
        if settings.text_percent != self._text_percent:
            self._text_percent = settings.text_percent
            self.desk.fit_text(settings.text_percent)
        for part in (self.actions_, self.header, self.banner, self.rail):
            part.set_theme(self.bench.theme)
        self.desk.set_theme(self.bench.theme)
        for shown in (self.traces, self.ribbon, self._start):
            if shown is not None:
                shown.set_theme(self.bench.theme)

    def change_settings(self, settings: Settings) -> None:
        """Take over and keep other settings."""
        self.bench.settings = settings
        save_settings(self.folders.settings, settings)

    @staticmethod
    def _system_points() -> float:
        points = QApplication.font().pointSizeF()
        return points if points > 0 else 10.0

    def _remember(self, recording: Path) -> None:
        self.change_settings(self.bench.settings.with_recent(recording, self.session.plan_path))

    def show_first_notice(self) -> None:
        """Show the safety notice, unless it was read before."""
        notice = first_start_notice(self.bench.settings, self)
        if notice is not None:
            notice.accepted.connect(self._keep_notice_shown)
            notice.open()

    def _keep_notice_shown(self) -> None:
        self.change_settings(replace(self.bench.settings, notice_shown=True))

    def show_guide(self) -> None:
        """Show the guide, in a window of its own that stays while this one does."""
        from pulsemend.window.guide_viewer import GuideViewer

        if self._guide is None:
            self._guide = GuideViewer(self.bench.theme, parent=self)
            self._guide.destroyed.connect(self._forget_guide)
        self._guide.show()
        self._guide.raise_()

    def _forget_guide(self) -> None:
        self._guide = None

    # Coming and going

    def may_leave_plan(self, *, closes: bool = False) -> bool:
        """Whether the plan may be left: unsaved changes are asked about."""
        if self.session.plan is None or self.session.plan_is_saved:
            return True
        choice = answer(unsaved_question(self.session, self, closes=closes))
        return choice == GIVE_UP or (choice == SAVE and self.handlers.save_plan())

    def _on_recovery(self, recovery: Recovery) -> None:
        if answer(recovery_question(recovery, self)) == BRING_BACK:
            self.session.recover()
        else:
            self.session.drop_recovery()

    def _on_marks_changed(self, error: ChangedOnDisk) -> None:
        if answer(changed_question(error, is_plan=False, parent=self)) == WRITE_OVER:
            self.session.save_marks(overwrite=True)

    def closeEvent(self, event: QCloseEvent) -> None:
        """Ask about running work and unsaved changes, then let go of everything."""
        running = self.children_.under_way
        if running and answer(running_question(running[0].kind, self)) != STOP_AND_CLOSE:
            event.ignore()
            return
        if not self.may_leave_plan(closes=True):
            event.ignore()
            return
        self.opener.save_marks()
        try:
            self.session.close()
        except (PulsemendError, OSError) as error:
            # Nothing is lost: the journal keeps the marks, and the next start brings them back.
            log.warning("closed with unsaved marks: %s", type(error).__name__)
        self._let_go()
        event.accept()

    def _let_go(self) -> None:
        geometry = bytes(self.saveGeometry().toBase64().data()).decode()
        with contextlib.suppress(OSError):
            self.change_settings(replace(self.bench.settings, geometry=geometry))
        for end in self._unsubscribe:
            end()
        self.children_.close()
        self.desk.close_pages()
        self._drop_traces()
        self.opener.close()
        self.bench.close()


def theme_for(choice: ThemeChoice) -> Theme:
    """Light or dark, as chosen or as the system has it."""
    if choice is ThemeChoice.SYSTEM:
        scheme = QGuiApplication.styleHints().colorScheme()
        return DARK if scheme is Qt.ColorScheme.Dark else LIGHT
    return DARK if choice is ThemeChoice.DARK else LIGHT
