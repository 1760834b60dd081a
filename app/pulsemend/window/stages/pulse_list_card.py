"""Card of the Pulses stage that lists the pulses: where they are, and what a hand did to them."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

from PySide6.QtCore import QAbstractTableModel, QModelIndex, QPersistentModelIndex, Qt
from PySide6.QtGui import QKeyEvent
from PySide6.QtWidgets import QAbstractItemView, QHBoxLayout, QHeaderView, QTableView, QVBoxLayout, QWidget

from pulsemend.mending.pulse_findings import Drift, Trains, unusual_amplitudes
from pulsemend.mending.pulse_list import (
    PulseCounts,
    PulseRow,
    as_found,
    count_pulses,
    refusal_to_add,
    with_added,
    with_moved,
    with_removed,
)
from pulsemend.model.epochs import nearest_sample
from pulsemend.model.marks import Marks
from pulsemend.model.vocabulary import PulseState, PulseTimes
from pulsemend.session.found import NOTHING_SELECTED, Selected
from pulsemend.session.messages import Level, Message
from pulsemend.units import ms_to_s, s_to_ms, v_to_uv
from pulsemend.window.parts import Card, Choices, button, words
from pulsemend.window.stages.pulse_cards import Edits, MsField, SlimField, in_micro

Index = QModelIndex | QPersistentModelIndex
_ROOT = QModelIndex()
_COLUMNS = ("Time s", "Late ms", "Size \u00b5V", "State")
_TIMES = (
    (PulseTimes.MARKERS, "at their markers"),
    (PulseTimes.SIGNAL, "where the signal shows them"),
    (PulseTimes.BOTH, "both: either is enough"),
    (PulseTimes.NONE, "there are no pulses"),
)
_TOOLTIPS = {
    "Late ms": "How long after its marker the pulse is",
    "Size \u00b5V": "Largest deviation within 10 ms, median over the EEG channels; ! stands out",
}


_SHORT: dict[PulseState | None, str] = {
    PulseState.ALIGNED: "in signal",
    PulseState.MARKED_ONLY: "not seen",
    PulseState.FOUND: "no marker",
    PulseState.ADDED: "added",
    PulseState.MOVED: "moved",
}
"""States where there is little room; the tooltip has them whole."""


class PulseModel(QAbstractTableModel):
    """The list as Qt's views want it."""

    def __init__(self) -> None:
        super().__init__()
        self.rows: tuple[PulseRow, ...] = ()
        self.unusual: tuple[bool, ...] = ()
        self.rate_hz = 1.0

    def show_rows(self, rows: tuple[PulseRow, ...], rate_hz: float) -> None:
        """Show another list."""
        self.beginResetModel()
        self.rows, self.rate_hz = rows, rate_hz
        seen = (PulseState.MARKED_ONLY, None)
        self.unusual = unusual_amplitudes([None if r.state in seen else r.amplitude_v for r in rows])
        self.endResetModel()

    def rowCount(self, parent: Index = _ROOT) -> int:
        """Count the pulses."""
        return 0 if parent.isValid() else len(self.rows)

    def columnCount(self, parent: Index = _ROOT) -> int:
        """Count the columns."""
        return 0 if parent.isValid() else len(_COLUMNS)

    def headerData(
        self, section: int, orientation: Qt.Orientation, role: int = Qt.ItemDataRole.DisplayRole
    ) -> Any:
        """Name the columns."""
        if orientation is not Qt.Orientation.Horizontal:
            return None
        if role == Qt.ItemDataRole.ToolTipRole:
            return _TOOLTIPS.get(_COLUMNS[section])
        return _COLUMNS[section] if role == Qt.ItemDataRole.DisplayRole else None

    def data(self, index: Index, role: int = Qt.ItemDataRole.DisplayRole) -> Any:
        """Give the text of a cell; the tooltip is the whole line."""
        row, stands_out = self.rows[index.row()], self.unusual[index.row()]
        texts = self._texts(row)
        if role == Qt.ItemDataRole.DisplayRole:
            time, latency, size = (text.partition(" ")[0] for text in texts[:3])
            size = f"{size} !" if stands_out else size
            return (time, latency, size, _SHORT.get(row.state, row.words))[index.column()]
        if role in (Qt.ItemDataRole.ToolTipRole, Qt.ItemDataRole.AccessibleTextRole):
            kind = "" if row.kind is None else row.kind.value
            odd = "amplitude stands out" if stands_out else ""
            return ", ".join(text for text in (*texts, kind, odd) if text)
        return None

    def _texts(self, row: PulseRow) -> tuple[str, str, str, str]:
        latency_ms = row.latency_ms(self.rate_hz)
        latency = "" if latency_ms is None else f"{latency_ms:.2f} ms"
        size = "" if row.amplitude_v is None else f"{v_to_uv(row.amplitude_v):.0f} \u00b5V"
        return f"{row.onset / self.rate_hz:.4f} s", latency, size, row.words


class _PulseTable(QTableView):
    """The list; Delete removes, Return jumps there."""

    def __init__(self, remove: Callable[[], None], jump: Callable[[], None]) -> None:
        super().__init__()
        self._remove, self._jump = remove, jump

    def keyPressEvent(self, event: QKeyEvent) -> None:
        if event.key() == Qt.Key.Key_Delete:
            self._remove()
        elif event.key() in (Qt.Key.Key_Return, Qt.Key.Key_Enter):
            self._jump()
        else:
            super().keyPressEvent(event)


class PulseListCard(Card):
    """Counts, the list, and what can be done to it.

    Parameters
    ----------
    edits : Edits
        Changes plan and marks.
    """

    def __init__(self, edits: Edits) -> None:
        super().__init__("Where the pulses are")
        self._edits = edits
        self._n_samples = 0
        self._unmarked: tuple[int, ...] = ()
        self.times = Choices("Where the pulses are", [(one.value, text) for one, text in _TIMES])
        self.add(self.times)
        self.known = self.add_line("Known")
        self.aligned = self.add_line("marked and in the signal")
        self.marked_only = self.add_line("marked, not in the signal")
        self.found_only = self.add_line("in the signal, no marker")
        self.by_hand = self.add_line("by hand")
        self.lead = self.add_note()
        self.drift = self.add_note()
        self.told = words("", "attention")
        self.told.setWordWrap(True)
        self.told.hide()
        self.add(self.told)
        self.unmarked = self.add_note()
        self.add_all = button("Add them as pulses", self._add_unmarked)
        self.add(self.add_all)
        self.model = PulseModel()
        self.chosen = _Chosen(self._edits)
        self.table = _PulseTable(self.chosen.remove_pulse, self._jump)
        self._set_up_table()
        self.add(self.table)
        self.add(self.chosen)
        self.new_s = SlimField("Onset of a new pulse", "s", 0.0, 9_999_999.0, 0.001, decimals=4)
        self.add_field("A new pulse at", self.new_s)
        self.add_button = button(
            "Add this pulse",
            self._add,
            tooltip="The time follows the selected stretch, or the middle of the view",
        )
        self.add(self.add_button)
        self.times.chosen.connect(self._choose_times)

    @property
    def current(self) -> PulseRow | None:
        """The pulse that is chosen in the list."""
        index = self.table.currentIndex()
        return self.model.rows[index.row()] if index.isValid() else None

    def show_values(
        self, rows: tuple[PulseRow, ...], rate_hz: float, n_samples: int, times: PulseTimes
    ) -> None:
        """Show what holds now; the chosen pulse stays chosen, also when it moved."""
        self.times.show_choice(times.value)
        self._n_samples = n_samples
        self.new_s.setMaximum(max(0.0, (n_samples - 1) / rate_hz))
        self.new_s.setSingleStep(1.0 / rate_hz)
        before = self.current
        if rows != self.model.rows or rate_hz != self.model.rate_hz:
            self.model.show_rows(rows, rate_hz)
            if before is not None:
                self._choose(_same(rows, before))
        self._fit_columns()
        self._show_counts(count_pulses(rows, rate_hz))
        exist = times is not PulseTimes.NONE
        for widget in (self.known, self.aligned, self.table, self.chosen, self.new_s, self.add_button):
            widget.setEnabled(exist)
        self.chosen.show_row(self.current, rate_hz, n_samples)

    def show_unmarked(self, samples: tuple[int, ...]) -> None:
        """Offer pulse-like events that no marker announces."""
        self._unmarked = samples
        self.unmarked.setText(
            f"{len(samples)} pulse-like events are in the signal, and no pulse is known." if samples else ""
        )
        self.unmarked.setVisible(bool(samples))
        self.add_all.setVisible(bool(samples))

    def show_findings(self, drift: Drift | None, grouped: Trains | None, told: Sequence[str]) -> None:
        """Say how the latency drifts, which pulses follow each other closely, and what is worth a look."""
        lines = []
        if drift is not None:
            slope = f"{drift.slope_ppm:+.1f} \u00b1 {drift.error_ppm:.1f} \u00b5s per second"
            lines.append(f"Drift of the latency: {slope}.")
        if grouped is not None and grouped.words:
            lines.append(f"{grouped.words[0].upper()}{grouped.words[1:]}.")
        self.drift.setText(" ".join(lines))
        self.drift.setVisible(bool(lines))
        self.told.setText("\n".join(f"{line[0].upper()}{in_micro(line)[1:]}." for line in told))
        self.told.setVisible(bool(told))

    def show_selected(self, selected: Selected, middle_s: float) -> None:
        """Follow the selection of the window."""
        rate_hz = self.model.rate_hz
        if not self.new_s.hasFocus():
            at_s = middle_s if selected.stretch is None else selected.stretch[0] / rate_hz
            self.new_s.show_value(at_s)
        current = self.current
        if selected.pulse is not None and (current is None or current.onset != selected.pulse):
            self._choose(next((i for i, r in enumerate(self.model.rows) if r.onset == selected.pulse), None))
            self.chosen.show_row(self.current, rate_hz, self._n_samples)

    def _set_up_table(self) -> None:
        table = self.table
        table.setModel(self.model)
        table.setAccessibleName("List of the pulses")
        table.setSelectionBehavior(QAbstractItemView.SelectionBehavior.SelectRows)
        table.setSelectionMode(QAbstractItemView.SelectionMode.SingleSelection)
        table.setEditTriggers(QAbstractItemView.EditTrigger.NoEditTriggers)
        table.setTabKeyNavigation(False)
        table.setWordWrap(False)
        table.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        table.setToolTip("Click a pulse, or press Return on it, to bring it into view; Delete removes it")
        table.verticalHeader().hide()
        table.verticalHeader().setSectionResizeMode(QHeaderView.ResizeMode.Fixed)
        table.horizontalHeader().setStretchLastSection(True)
        table.horizontalHeader().setDefaultAlignment(
            Qt.AlignmentFlag.AlignLeft | Qt.AlignmentFlag.AlignVCenter
        )
        table.clicked.connect(lambda _index: self._jump())
        table.selectionModel().currentRowChanged.connect(
            lambda _new, _old: self.chosen.show_row(self.current, self.model.rate_hz, self._n_samples)
        )

    def _fit_columns(self) -> None:
        """Fit to the text of now, whatever size it has; without asking every row."""
        metrics = self.table.fontMetrics()
        for column, widest in enumerate(("0000.0000", "Late ms", "Size \u00b5V")):
            self.table.setColumnWidth(column, metrics.horizontalAdvance(widest) + 12)
        height = metrics.height() + 8
        self.table.verticalHeader().setDefaultSectionSize(height)
        self.table.setFixedHeight(7 * height + 4)

    def _show_counts(self, counts: PulseCounts) -> None:
        self.known.show_value(str(counts.known), attention=counts.known == 0)
        self.aligned.show_value(str(counts.aligned))
        self.marked_only.show_value(str(counts.marked_only), attention=counts.marked_only > 0)
        self.marked_only.setVisible(counts.marked_only > 0)
        self.found_only.show_value(str(counts.found_only))
        self.found_only.setVisible(counts.found_only > 0)
        by_hand = {"added": counts.added, "moved": counts.moved, "removed": counts.removed}
        said = ", ".join(f"{count} {name}" for name, count in by_hand.items() if count)
        self.by_hand.show_value(said)
        self.by_hand.setVisible(bool(said))
        if counts.lead_ms is None:
            self.lead.setText("No artifact was found near a marker yet.")
        else:
            verb = "leads" if counts.lead_ms >= 0 else "lags"
            self.lead.setText(
                f"Marker {verb} artifact by {abs(counts.lead_ms):.2f} ms (median), spread "
                f"{counts.spread_ms:.2f} ms (middle half)."
            )

    def _choose(self, row: int | None) -> None:
        if row is not None:
            index = self.model.index(row, 0)
            self.table.setCurrentIndex(index)
            self.table.scrollTo(index)

    def _jump(self) -> None:
        row = self.current
        if row is None:
            return
        session = self._edits.bench.session
        view = session.view
        at_s = row.onset / self.model.rate_hz
        longest_s = self._n_samples / self.model.rate_hz
        start_s = min(max(0.0, at_s - view.width_s / 2.0), max(0.0, longest_s - view.width_s))
        session.set_view(replace(view, start_s=start_s))
        session.select(Selected(pulse=row.onset))

    def _add(self) -> None:
        sample = nearest_sample(self.new_s.value() * self.model.rate_hz)
        session = self._edits.bench.session
        refusal = refusal_to_add(sample, self.model.rows, self.model.rate_hz)
        if refusal:
            session.say(Message(Level.ATTENTION, refusal))
            return
        self._edits.marks("Pulse added", with_added(session.marks, sample))
        session.select(Selected(pulse=sample))

    def _add_unmarked(self) -> None:
        marks = self._edits.bench.session.marks
        self._edits.marks(f"{len(self._unmarked)} pulses added", with_added(marks, *self._unmarked))

    def _choose_times(self, key: str) -> None:
        plan = self._edits.bench.session.plan
        if plan is not None:
            self._edits.pulses("Pulses", replace(plan.pulses, times=PulseTimes(key)))


class _Chosen(QWidget):
    """What can be done to the pulse that is chosen."""

    def __init__(self, edits: Edits) -> None:
        super().__init__()
        self._edits = edits
        self._row: PulseRow | None = None
        self._rate_hz = 1.0
        self.after_marker = MsField("Onset of the chosen pulse after its marker", -100_000.0, 100_000.0)
        self.after_marker.setToolTip("Another onset, counted from the marker")
        self.sample = SlimField("Onset of the chosen pulse as a recorded sample", "", 0, 9e12, 1, decimals=0)
        self.sample.setToolTip("Another onset, as a recorded sample from 0")
        self.remove = button("Remove", self.remove_pulse, tooltip="Say that this is no pulse (Delete)")
        self.back = button("As found", self._back, tooltip="Take back what was done to this pulse by hand")
        self.name = words("")
        fields, buttons = QHBoxLayout(), QHBoxLayout()
        fields.addWidget(self.name)
        fields.addWidget(self.after_marker, 1)
        fields.addWidget(self.sample, 1)
        buttons.addWidget(self.remove)
        buttons.addWidget(self.back)
        buttons.addStretch(1)
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.addLayout(fields)
        column.addLayout(buttons)
        self.after_marker.committed.connect(self._move_after_marker)
        self.sample.committed.connect(lambda sample: self._move(int(sample)))
        for field in (self.after_marker, self.sample):
            field.editingFinished.connect(edits.end)
        self.hide()

    def show_row(self, row: PulseRow | None, rate_hz: float, n_samples: int) -> None:
        """Show another pulse."""
        self._row, self._rate_hz = row, rate_hz
        self.setVisible(row is not None)
        if row is None:
            return
        self.after_marker.setVisible(row.marked is not None)
        self.name.setText("Onset: sample" if row.marked is None else "Onset after marker")
        self.name.setBuddy(self.sample if row.marked is None else self.after_marker)
        self.after_marker.setSingleStep(s_to_ms(1.0 / rate_hz))
        if row.marked is not None:
            self.after_marker.show_value(s_to_ms((row.onset - row.marked) / rate_hz))
        self.sample.setVisible(row.marked is None)
        self.sample.setMaximum(max(0, n_samples - 1))
        self.sample.show_value(row.onset)
        by_hand = row.is_removed or row.state is PulseState.MOVED
        self.remove.setVisible(not row.is_removed)
        self.back.setVisible(by_hand)

    def _move_after_marker(self, value_ms: float) -> None:
        row = self._row
        if row is not None and row.marked is not None:
            self._move(nearest_sample(row.marked + ms_to_s(value_ms) * self._rate_hz))

    def _move(self, to: int) -> None:
        row = self._row
        if row is None or to == row.onset:
            return
        session = self._edits.bench.session
        self._edit("Pulse moved", with_moved(session.marks, row, to), f"move pulse {row.marked}")
        session.select(Selected(pulse=to))

    def remove_pulse(self) -> None:
        """Say that the chosen pulse is none, unless that was said before."""
        if self._row is not None and not self._row.is_removed:
            self._edit("Pulse removed", with_removed(self._edits.bench.session.marks, self._row))
            self._edits.bench.session.select(NOTHING_SELECTED)

    def _back(self) -> None:
        if self._row is not None:
            self._edit("Pulse as found", as_found(self._edits.bench.session.marks, self._row))

    def _edit(self, label: str, marks: Marks, merge_key: str | None = None) -> None:
        self._edits.marks(label, marks, merge_key)


def _same(rows: Sequence[PulseRow], before: PulseRow) -> int | None:
    """Find a pulse again: by its marker, or the nearest one added by hand."""
    if before.marked is not None:
        return next((i for i, row in enumerate(rows) if row.marked == before.marked), None)
    added = [i for i, row in enumerate(rows) if row.marked is None]
    return min(added, key=lambda i: abs(rows[i].onset - before.onset), default=None)
