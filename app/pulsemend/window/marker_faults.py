"""Card of the Markers stage: what is wrong with the markers, in words, and whether its cure is wanted."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import QItemSelectionModel, Qt
from PySide6.QtWidgets import QLabel

from pulsemend.mending.marker_edits import Verdict, verdict_on, with_verdict
from pulsemend.model.faults import MarkerFault
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.window.flow import flow_row
from pulsemend.window.marker_hands import MarkerHands, ShortTable
from pulsemend.window.parts import Card, button, words
from pulsemend.window.tables import RowsModel

NO_CURE = "no cure"
_MOST_ROWS = 6


class FaultModel(RowsModel):
    """Faults, and what was decided about each."""

    def __init__(self) -> None:
        super().__init__(("cure", "fault"))
        self.faults: tuple[MarkerFault, ...] = ()
        self.marks: Marks = NO_MARKS

    def show_faults(self, faults: Sequence[MarkerFault], marks: Marks) -> None:
        """Show others; where the faults are the same, nothing is selected anew."""
        if [one.key for one in faults] == [one.key for one in self.faults]:
            self.faults, self.marks = tuple(faults), marks
            if faults:
                self.dataChanged.emit(self.index(0, 0), self.index(len(faults) - 1, 1))
            return
        self.beginResetModel()
        self.faults, self.marks = tuple(faults), marks
        self.endResetModel()

    def n_rows(self) -> int:
        """Count the faults."""
        return len(self.faults)

    def text(self, row: int, column: int) -> str:
        """Give a cell's text."""
        fault = self.faults[row]
        if column:
            return fault.key
        return verdict_on(self.marks, fault.key).value if fault.cure else NO_CURE


class FaultsCard(Card):
    """The faults, their cures, and where they are.

    Parameters
    ----------
    hands : MarkerHands
        Changes the marks and goes there.
    """

    def __init__(self, hands: MarkerHands) -> None:
        super().__init__("Faults")
        self._hands = hands
        self._rate_hz = 1.0
        self._place = 0
        self._key = ""
        self.none = self.add_note("No fault was found.")
        self.model = FaultModel()
        self.table = ShortTable("Faults of the markers", self.model, ("accepted", ""), _MOST_ROWS)
        self.add(self.table)
        self.what = words("", "")
        self.cure = words("", "quiet")
        self.place = words("", "quiet")
        self.what.setWordWrap(True)
        self.add(self.what)
        self.add(self.cure)
        self.accept = button("Accept the cure", lambda: self._decide(Verdict.ACCEPTED))
        self.refuse = button("Refuse it", lambda: self._decide(Verdict.REFUSED))
        self.back = button("Take back", lambda: self._decide(Verdict.OPEN))
        self.previous = button("Previous place", lambda: self._step(-1))
        self.following = button("Next place", lambda: self._step(1))
        self._acts = flow_row(self.accept, self.refuse, self.back)
        self._places = flow_row(self.previous, self.following)
        for one in (self._acts, self._places, self.place):
            self.add(one)
        self.notes: QLabel = self.add_note()
        self.table.clicked.connect(lambda _index: self._go_first())
        self.table.opened.connect(lambda _row: self._go_first())
        self.table.selectionModel().currentRowChanged.connect(self._on_current)
        self.show_faults((), NO_MARKS, 1.0, ())

    @property
    def current(self) -> MarkerFault | None:
        """The fault that is chosen."""
        return next((fault for fault in self.model.faults if fault.key == self._key), None)

    def show_faults(
        self, faults: Sequence[MarkerFault], marks: Marks, rate_hz: float, notes: Sequence[str]
    ) -> None:
        """Show the faults of a recording; the chosen one stays chosen.

        Parameters
        ----------
        faults : sequence of MarkerFault
            As found.
        marks : Marks
            Say which cures are accepted.
        rate_hz : float
            Recorded rate.
        notes : sequence of str
            What was done to the markers.
        """
        key = self._key
        self._rate_hz = rate_hz
        self.model.show_faults(faults, marks)
        row = next((row for row, fault in enumerate(faults) if fault.key == key), None)
        self._key = "" if row is None else key
        if row is not None and self.table.currentIndex().row() != row:
            flags = QItemSelectionModel.SelectionFlag
            self.table.selectionModel().setCurrentIndex(
                self.model.index(row, 0), flags.ClearAndSelect | flags.Rows
            )
        is_open = sum(bool(one.cure) and verdict_on(marks, one.key) is Verdict.OPEN for one in faults)
        self.note.setText(f"{is_open} open" if is_open else "")
        self.none.setVisible(not faults)
        self.table.setVisible(bool(faults))
        self.table.fit_rows()
        self.notes.setText("\n".join(f"{note[0].upper()}{note[1:]}." for note in notes))
        self.notes.setVisible(bool(notes))
        self._show_current()

    def _on_current(self) -> None:
        row = self.table.currentIndex().row()
        self._key = self.model.faults[row].key if row >= 0 else ""
        self._place = 0
        self._show_current()
        if self.table.hasFocus():
            self._go()

    def _show_current(self) -> None:
        fault = self.current
        for widget in (self.what, self._places, self.place):
            widget.setVisible(fault is not None)
        self.cure.setVisible(fault is not None)
        self._acts.setVisible(fault is not None and bool(fault.cure))
        if fault is None:
            return
        verdict = verdict_on(self.model.marks, fault.key)
        self.what.setText(fault.words)
        self.cure.setText(f"Cure: {fault.cure}" if fault.cure else "There is no cure for it here.")
        self.accept.setEnabled(verdict is not Verdict.ACCEPTED)
        self.refuse.setEnabled(verdict is not Verdict.REFUSED)
        self.back.setEnabled(verdict is not Verdict.OPEN)
        self._show_place()

    def _show_place(self) -> None:
        fault = self.current
        n_places = 0 if fault is None else len(fault.at)
        self.previous.setEnabled(self._place > 0)
        self.following.setEnabled(self._place + 1 < n_places)
        self._places.setVisible(n_places > 1)
        self.place.setVisible(n_places > 0)
        if fault is not None and n_places:
            at_s = fault.at[self._place] / self._rate_hz
            self.place.setText(f"Place {self._place + 1} of {n_places}: {at_s:.3f} s")

    def _go_first(self) -> None:
        self._place = 0
        self._show_place()
        self._go()

    def _step(self, by: int) -> None:
        self._place += by
        self._show_place()
        self._go()

    def _go(self) -> None:
        fault = self.current
        if fault is not None and fault.at:
            self._hands.go_to(fault.at[self._place] / self._rate_hz)

    def _decide(self, verdict: Verdict) -> None:
        fault = self.current
        if fault is None:
            return
        verb = {Verdict.ACCEPTED: "Accept", Verdict.REFUSED: "Refuse", Verdict.OPEN: "Decide anew about"}
        marks = self._hands.bench.session.marks
        self._hands.change_marks(
            f"{verb[verdict]} the cure of {fault.key}", with_verdict(marks, fault.key, verdict)
        )
        # The button just pressed is off now; left alone, the focus would go to the opposite decision.
        self.table.setFocus(Qt.FocusReason.OtherFocusReason)
