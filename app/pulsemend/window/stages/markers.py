"""The stage Markers: codes with roles and labels, faults, trials, and the log."""

from __future__ import annotations

from collections.abc import Callable

from PySide6.QtCore import Qt
from PySide6.QtWidgets import QButtonGroup, QPushButton, QToolButton, QVBoxLayout, QWidget

from pulsemend.mending.marker_log import NO_LOG_VIEW
from pulsemend.mending.marker_view import TrialState, code_rows, trial_spans, trial_state
from pulsemend.model.vocabulary import Role
from pulsemend.session.changed import Changed
from pulsemend.session.found import Stage
from pulsemend.window.desk import Pages
from pulsemend.window.flow import column_of, flow_row
from pulsemend.window.marker_codes import WIDTHS, CodesCard
from pulsemend.window.marker_faults import FaultsCard
from pulsemend.window.marker_hands import MarkerHands
from pulsemend.window.marker_histogram import IntervalsPicture
from pulsemend.window.marker_lanes import StateLegend
from pulsemend.window.marker_log_card import NO_LOG, LogCard
from pulsemend.window.marker_log_picture import LogPicture
from pulsemend.window.marker_timeline import Timeline
from pulsemend.window.marker_trials import TrialsCard
from pulsemend.window.marker_watch import MarkerWatch
from pulsemend.window.parts import EmptyState
from pulsemend.window.stages.base import StagePage
from pulsemend.window.tables import RowsTable
from pulsemend.window.theme import Theme
from pulsemend.window.workbench import Workbench

_NO_RECORDING = "Open a recording: all its marker codes will be listed here, on one timeline."
_NO_PLAN = (
    "There is no plan yet. Open one, or draft one from this recording (menu File): then codes can be given "
    "roles and labels."
)
_NO_MARKERS = (
    "This recording has no markers. If a table of events belongs to it, it has to stand beside it under the "
    "recording's own name; then open the recording again."
)
_ZOOM = 2.0


class MarkersStage(StagePage):
    """Codes, faults, trials and log; below, timeline, table of codes, intervals, and log against recording.

    Parameters
    ----------
    bench : Workbench
        Session and workers.
    watch : MarkerWatch
        Looks through the markers.
    """

    stage = Stage.MARKERS

    def __init__(self, bench: Workbench, watch: MarkerWatch) -> None:
        super().__init__(bench)
        self._watch = watch
        self.hands = MarkerHands(bench)
        self._build()
        self.follow(self._show_plan, Changed.PLAN, Changed.RECORDING)
        self.follow(self._show_marks, Changed.MARKS)
        self.follow(self._show_view, Changed.VIEW)
        self.hear(watch.changed, self._show_survey)
        self._show_plan()
        self._show_survey()

    def show_stage(self) -> None:
        """Catch up with what changed meanwhile."""
        super().show_stage()
        self._show_plan()
        self._show_survey()
        self._show_view()

    def set_theme(self, theme: Theme) -> None:
        """Paint in other colours."""
        for one in (self.codes, self.timeline, self.legend, self.intervals, self.log_picture):
            one.set_theme(theme)

    # Put together

    def _build(self) -> None:
        theme = self.bench.theme
        self.codes = CodesCard(self.hands, theme)
        self.faults = FaultsCard(self.hands)
        self.trials = TrialsCard(self.hands)
        self.log = LogCard(self.hands)
        self.settings = column_of(self.codes, self.faults, self.trials, self.log, name="Markers, settings")
        self.timeline = Timeline(theme)
        self.legend = StateLegend(theme)
        self.table = RowsTable("All codes", self.codes.model, WIDTHS)
        self.table.setTextElideMode(Qt.TextElideMode.ElideMiddle)
        self.table.setSelectionModel(self.codes.table.selectionModel())
        self.intervals = IntervalsPicture(theme)
        self.log_picture = LogPicture(theme)
        self.empty = EmptyState("")
        self.empty.text.setWordWrap(True)
        self.picture = QWidget()
        column = QVBoxLayout(self.picture)
        column.setContentsMargins(10, 6, 10, 6)
        column.setSpacing(4)
        column.addWidget(self._head())
        column.addWidget(self.pages, 1)
        self.codes.table.selectionModel().selectionChanged.connect(self._on_chosen)
        self.timeline.wanted.connect(self.hands.go_to)
        self.timeline.code_wanted.connect(lambda code: self.codes.choose([code]))
        self.intervals.wanted.connect(self.hands.go_to)
        self.log_picture.residuals.wanted.connect(self.hands.go_to)

    def _head(self) -> QWidget:
        """Make the switch of the pictures with the timeline's own buttons, and the pictures themselves."""
        self.pages = Pages()
        self.switch = QButtonGroup(self.picture)
        timeline = self.timeline
        self._tools = (
            _tool("s \u2212", "Show less time", lambda: timeline.zoom(_ZOOM)),
            _tool("s +", "Show more time", lambda: timeline.zoom(1 / _ZOOM)),
            _tool("As traces", "Show what the traces show", timeline.show_as_traces),
            _tool("Whole", "Show the whole recording", timeline.show_whole),
        )
        buttons = []
        pictures: tuple[tuple[str, QWidget], ...] = (
            ("Timeline", self.timeline),
            ("Codes", self.table),
            ("Intervals", self.intervals),
            ("Log", self.log_picture),
        )
        for place, (name, page) in enumerate(pictures):
            self.pages.addWidget(page)
            made = QPushButton(name)
            made.setCheckable(True)
            made.setAccessibleName(f"Picture: {name}")
            self.switch.addButton(made, place)
            buttons.append(made)
        self.pages.addWidget(self.empty)
        self.switch.button(0).setChecked(True)
        self.switch.idToggled.connect(self._on_switched)
        return flow_row(*buttons, *self._tools, self.legend)

    # What is shown

    @property
    def shown_picture(self) -> str:
        """Name of the picture that is chosen."""
        chosen = self.switch.checkedButton()
        return "" if chosen is None else chosen.text()

    def show_picture(self, name: str) -> None:
        """Choose a picture by its name."""
        for one in self.switch.buttons():
            if one.text() == name:
                one.setChecked(True)

    def _on_switched(self, _place: int, checked: bool) -> None:
        if checked:
            self._show_page()

    def _show_page(self) -> None:
        session, survey = self.bench.session, self._watch.survey
        text = ""
        if session.recording is None:
            text = _NO_RECORDING
        elif not session.recording.facts.markers and self.switch.checkedId() < 3:
            text = _NO_MARKERS
        elif survey is None:
            text = "The markers are being looked through."
        self.empty.text.setText(text)
        for one in self._tools:
            one.setVisible(not text and self.switch.checkedId() == 0)
        self.legend.setVisible(not text and self.switch.checkedId() == 0)
        if text:
            self.pages.setCurrentWidget(self.empty)
        else:
            self.pages.setCurrentIndex(self.switch.checkedId())

    def _show_plan(self) -> None:
        """Show the roles of the plan at once; what rests on more follows."""
        if not self.shown:
            return
        session, survey = self.bench.session, self._watch.survey
        plan, evidence = session.plan, () if survey is None else survey.evidence
        rows = code_rows(evidence, plan) if survey is not None else ()
        self.codes.show_codes(rows, plan, self._advice())
        duration_s = 1.0 if survey is None else survey.duration_s
        self.timeline.show_codes(evidence, rows, duration_s)
        if survey is not None and not self._watch.is_current:
            self.trials.note.setText("being looked for")
        self._show_page()

    def _show_marks(self) -> None:
        survey = self._watch.survey
        if self.shown and survey is not None:
            self.faults.show_faults(survey.faults, self.bench.session.marks, survey.rate_hz, survey.notes)
            if not self._watch.is_current:
                self.trials.note.setText("being looked for")

    def _show_survey(self) -> None:
        if not self.shown:
            return
        session, survey = self.bench.session, self._watch.survey
        self._show_plan()
        self.trials.note.setText("")
        for card in (self.faults, self.trials, self.log):
            card.setVisible(session.recording is not None)
        waiting = "" if session.plan is not None else "The plan\u2019s slots will say what a trial is."
        self.trials.show_survey(survey, waiting)
        log = NO_LOG_VIEW if survey is None else survey.log
        plan = session.plan if survey is None else survey.plan
        self.log.show_log(log, plan, session.marks)
        self.intervals.show_survey(survey)
        if survey is None:
            self.faults.show_faults((), session.marks, 1.0, ())
            self.timeline.show_trials(None, ())
            self.legend.show_states(())
            return
        self.faults.show_faults(survey.faults, session.marks, survey.rate_hz, survey.notes)
        trials = [trial for trial in survey.trials.trials if trial.markers]
        spans = trial_spans(trials, survey.rate_hz)
        why = [
            trial.set_aside
            or "; ".join(trial.doubts)
            or (f"no {', '.join(trial.missing)}" if trial.missing else "")
            for trial in trials
        ]
        self.timeline.show_trials(spans if trials else None, why)
        states = {trial_state(trial) for trial in trials}
        self.legend.show_states(tuple(state for state in TrialState if state in states))
        self._show_page()
        self.log_picture.show_log(log, survey.duration_s, NO_LOG if survey.plan is not None else _NO_PLAN)

    def _show_view(self) -> None:
        if self.shown:
            view = self.bench.session.view
            self.timeline.show_view(view.start_s, view.start_s + view.width_s)

    def _advice(self) -> str:
        session = self.bench.session
        if session.recording is None:
            return _NO_RECORDING
        if session.plan is None:
            return _NO_PLAN
        if not session.recording.facts.markers:
            return _NO_MARKERS
        if any(marker.role is Role.UNDECIDED for marker in session.plan.markers):
            return "Undecided codes stand on top. Give each a role; \u201cignore\u201d is one, too."
        return ""

    def _on_chosen(self) -> None:
        self.timeline.show_chosen(self.codes.chosen)


def _tool(text: str, name: str, does: Callable[[], None]) -> QToolButton:
    made = QToolButton()
    made.setText(text)
    made.setAccessibleName(name)
    made.setToolTip(name)
    made.clicked.connect(lambda _=False: does())
    return made
