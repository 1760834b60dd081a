"""Card of the Markers stage: the behavioural log, how it was joined, and what was left alone."""

from __future__ import annotations

from pathlib import Path

from PySide6.QtWidgets import QFileDialog

from pulsemend.mending.marker_edits import with_log_file, with_rows_excluded, without_rows_excluded
from pulsemend.mending.marker_log import LogItem, LogView
from pulsemend.model.marks import Marks
from pulsemend.model.plan import Plan
from pulsemend.units import s_to_ms
from pulsemend.window.elided import ElidedLabel
from pulsemend.window.flow import flow_row
from pulsemend.window.marker_hands import Item, ItemLists, MarkerHands
from pulsemend.window.parts import Card, button
from pulsemend.window.traces.clock import MINUS

NO_LOG = (
    "The plan names no log. Under [log] its file says which one belongs to a recording, as in "
    'file = "{stem}_log.tsv"; which slots its rows tell of, slots = ["cue1"]; the column of their times, '
    'time = "arrow_s"; and their unit, unit = "s", "ms" or "clock". Then rows and trials are joined here.'
)
ROWS, TRIALS, DOUBTFUL, EXCLUDED = "rows", "trials", "doubtful", "excluded"


class LogCard(Card):
    """The log.

    Parameters
    ----------
    hands : MarkerHands
        Changes the marks and goes there.
    """

    def __init__(self, hands: MarkerHands) -> None:
        super().__init__("Log")
        self._hands = hands
        self.advice = self.add_note()
        self.file = ElidedLabel("", "value")
        self.add(self.file)
        self.other = button("Choose another file...", self._choose)
        self.as_planned = button("As in the plan", lambda: self._take(None))
        self._files = flow_row(self.other, self.as_planned)
        self.add(self._files)
        self.columns = self.add_note()
        self.problem = self.add_note()
        self.joined = self.add_line("rows joined")
        self.by = self.add_line("joined by")
        self.offset = self.add_line("clock offset")
        self.drift = self.add_line("drift")
        self.spread = self.add_line("residual spread")
        self.clock_note = self.add_note()
        self.lists = ItemLists("Rows and trials left alone", hands)
        self.add(self.lists)
        self.exclude = button("Exclude this row", self._exclude, tooltip="The selected rows are not joined")
        self.include = button("Join it again", self._include, tooltip="The selected rows")
        self._acts = flow_row(self.exclude, self.include)
        self.add(self._acts)
        self.lists.changed.connect(self._tell)
        self.show_log(LogView(), None, Marks())

    def show_log(self, view: LogView, plan: Plan | None, marks: Marks) -> None:
        """Show how a log lies against its recording.

        Parameters
        ----------
        view : LogView
            As a survey has it.
        plan : Plan or None
            Names the log.
        marks : Marks
            May name another.
        """
        has_log = plan is not None and bool(plan.log.file)
        self.advice.setText(NO_LOG if plan is not None else "Without a plan no log is joined.")
        self.advice.setVisible(not has_log)
        for widget in (self.file, self._files):
            widget.setVisible(has_log)
        self.file.show_text(view.name)
        self.as_planned.setVisible(bool(marks.log_file))
        self.columns.setText(f"{view.n_rows} rows; columns {', '.join(view.columns)}" if view.columns else "")
        self.columns.setVisible(bool(view.columns))
        self.problem.setText(view.problem)
        self.problem.setVisible(bool(view.problem))
        self._show_join(view)
        self._show_clock(view)
        self.lists.show_lists(
            [
                (ROWS, "rows without a trial", _items(view.rows_alone)),
                (TRIALS, "trials without a row", _items(view.trials_alone)),
                (DOUBTFUL, "doubtful, not joined", _items(view.doubtful)),
                (EXCLUDED, "rows excluded by hand", _items(view.excluded)),
            ]
        )

    def _show_join(self, view: LogView) -> None:
        is_joined = view.join is not None and bool(view.join.pairs)
        for line in (self.joined, self.by):
            line.setVisible(is_joined)
        if view.join is not None:
            self.joined.show_value(f"{len(view.join.pairs)} of {view.n_rows}")
            self.by.show_value(view.join.by)
            self.joined.setToolTip(view.join.words)

    def _show_clock(self, view: LogView) -> None:
        clock = view.clock
        for widget in (self.offset, self.drift, self.spread, self.clock_note):
            widget.setVisible(clock is not None)
        if clock is None:
            return
        offset_s = f"{clock.offset_s:+.4f}".replace("-", MINUS)
        self.offset.show_value(f"{offset_s} s \u00b1 {s_to_ms(clock.offset_se_s):.2g} ms")
        drift, drift_se = (s_to_ms(s_to_ms(value)) for value in (clock.drift, clock.drift_se))
        self.drift.show_value(f"{drift:+.2f} \u00b1 {drift_se:.2g} ppm".replace("-", MINUS))
        self.spread.show_value(f"{s_to_ms(clock.residual_sd_s):.3g} ms")
        self.clock_note.setText(
            f"Recording minus log at log time {clock.centre_s:.1f} s, from {clock.n} pairs; \u00b1 is one "
            "standard error."
        )

    def _tell(self) -> None:
        has_rows = any(isinstance(item.key, int) for item in self.lists.selected)
        self.exclude.setVisible(self.lists.shown in (ROWS, DOUBTFUL))
        self.include.setVisible(self.lists.shown == EXCLUDED)
        self.exclude.setEnabled(has_rows)
        self.include.setEnabled(has_rows)
        self._acts.setVisible(self.lists.shown in (ROWS, DOUBTFUL, EXCLUDED))

    def _choose(self) -> None:
        opened = self._hands.bench.session.recording
        if opened is None:
            return
        path, _ = QFileDialog.getOpenFileName(
            self.window(),
            "Which log belongs to this recording?",
            str(opened.path.parent),
            "Logs (*.tsv *.csv *.txt);;All files (*)",
        )
        if path:
            self._take(Path(path))

    def _take(self, path: Path | None) -> None:
        session = self._hands.bench.session
        if session.recording is not None:
            label = "Log as in the plan" if path is None else f"Log {path.name}"
            self._hands.change_marks(label, with_log_file(session.marks, path, session.recording.path))

    def _rows(self) -> list[int]:
        return [item.key for item in self.lists.selected if isinstance(item.key, int)]

    def _exclude(self) -> None:
        rows = self._rows()
        marks = with_rows_excluded(self._hands.bench.session.marks, rows)
        self._hands.change_marks(f"Exclude {_named(rows)} of the log", marks)

    def _include(self) -> None:
        rows = self._rows()
        marks = without_rows_excluded(self._hands.bench.session.marks, rows)
        self._hands.change_marks(f"Join {_named(rows)} of the log again", marks)


def _named(rows: list[int]) -> str:
    return f"row {rows[0]}" if len(rows) == 1 else f"{len(rows)} rows"


def _items(items: tuple[LogItem, ...]) -> list[Item]:
    return [Item(one.words, one.time_s, key=one.row) for one in items]
