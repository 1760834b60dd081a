"""Names, traces and the scroll bar of the rows, as one widget."""

from __future__ import annotations

from dataclasses import replace

from PySide6.QtCore import QSignalBlocker, Qt, Signal
from PySide6.QtWidgets import QHBoxLayout, QScrollBar, QWidget

from pulsemend.engine.pyramid import Patch, Pyramid
from pulsemend.window.theme import Theme
from pulsemend.window.traces.model import Overlays, ViewModel
from pulsemend.window.traces.names import RowNames
from pulsemend.window.traces.plot import Hand, TracePlot
from pulsemend.window.traces.source import RepairedStretch, TraceSource


class TracesWidget(QWidget):
    """The stacked traces of a recording.

    Parameters
    ----------
    model : ViewModel
        Holds the view; changed through `set_view` alone.
    source : TraceSource
        Gives the numbers.
    theme : Theme
        Colours.
    parent : QWidget or None
        As usual.

    Attributes
    ----------
    bad_toggled : Signal(str, bool)
        A channel is to be bad, or good again.
    picked : Signal(object)
        Frozenset of the names picked; the view has them already.
    stretch_selected : Signal(float, float)
        Seconds.
    event_clicked : Signal(int)
        Key of the event.
    pulse_dragged : Signal(int, float)
        Key of the event and its new time in seconds.
    pulse_added : Signal(float)
        Seconds.
    cursor_moved : Signal(object)
        A Reading, or None where there is nothing to read.
    measured : Signal(object)
        A Measure.
    """

    bad_toggled = Signal(str, bool)
    picked = Signal(object)
    stretch_selected = Signal(float, float)
    event_clicked = Signal(int)
    pulse_dragged = Signal(int, float)
    pulse_added = Signal(float)
    cursor_moved = Signal(object)
    measured = Signal(object)

    def __init__(
        self, model: ViewModel, source: TraceSource, theme: Theme, parent: QWidget | None = None
    ) -> None:
        super().__init__(parent)
        self._model = model
        self._source = source
        self._overlays = Overlays()
        self.names = RowNames(theme, self)
        self.plot = TracePlot(model, source, theme, self)
        self._bar = QScrollBar(Qt.Orientation.Vertical, self)
        self._bar.setAccessibleName("Scroll the channels")
        self._bar.setFocusPolicy(Qt.FocusPolicy.NoFocus)
        layout = QHBoxLayout(self)
        layout.setContentsMargins(0, 0, 0, 0)
        layout.setSpacing(0)
        layout.addWidget(self.names)
        layout.addWidget(self.plot, 1)
        layout.addWidget(self._bar)
        self.setTabOrder(self.names, self.plot)
        self._connect()
        unsubscribe = model.subscribe(self._on_view)
        self.destroyed.connect(lambda: unsubscribe())
        self._lay_out()

    def setFocus(self, reason: Qt.FocusReason = Qt.FocusReason.OtherFocusReason) -> None:
        """Give the focus to the traces; as a focus proxy they would keep Tab from the channels' names."""
        self.plot.setFocus(reason)

    def set_overlays(self, overlays: Overlays) -> None:
        """Show other events, bands and bad channels."""
        self._overlays = overlays
        self.plot.set_overlays(overlays)
        self._lay_out()

    def set_theme(self, theme: Theme) -> None:
        """Change the colours."""
        self.names.set_theme(theme)
        self.plot.set_theme(theme)

    def set_hand(self, hand: Hand) -> None:
        """Choose what plain dragging does."""
        self.plot.set_hand(hand)

    def set_pulses_editable(self, *, editable: bool) -> None:
        """Let pulses be dragged, and added by a double click above the traces."""
        self.plot.set_pulses_editable(editable=editable)

    def set_pyramid(self, pyramid: Pyramid) -> None:
        """Draw wide views exactly from now on."""
        self._source.set_pyramid(pyramid)
        self.plot.refresh()

    def set_revision(self, revision: int) -> None:
        """Take note that plan or marks changed: the repaired signal is asked for anew."""
        self._source.set_revision(revision)
        self.plot.refresh()

    def set_repaired(self, stretch: RepairedStretch) -> None:
        """Show a stretch a worker repaired, unless it is stale."""
        if self._source.set_repaired(stretch):
            self.plot.refresh()

    def set_repaired_overview(self, patch: Patch, revision: int) -> None:
        """Show what repair changes in wide views, unless it is stale."""
        if self._source.set_repaired_overview(patch, revision):
            self.plot.refresh()

    def _connect(self) -> None:
        self.plot.laid_out.connect(self._lay_out)
        self._bar.valueChanged.connect(self.plot.set_scroll)
        self.names.row_reached.connect(self._show_row)
        self.names.bad_toggled.connect(self.bad_toggled)
        self.names.picked.connect(self._on_picked)
        for name in (
            "stretch_selected",
            "event_clicked",
            "pulse_dragged",
            "pulse_added",
            "cursor_moved",
            "measured",
        ):
            getattr(self.plot, name).connect(getattr(self, name))

    def _on_view(self) -> None:
        self.plot.show_view()

    def _on_picked(self, names: frozenset[str]) -> None:
        self._model.set_view(replace(self._model.view, picked=names))
        self.picked.emit(names)

    def _show_row(self, row: int) -> None:
        self.plot.set_scroll(self.plot.rows.scrolled_to(row))

    def _lay_out(self) -> None:
        rows = self.plot.rows
        self.names.show_rows(self.plot.shown_names, self._overlays.bad, self._model.view.picked, rows)
        with QSignalBlocker(self._bar):
            self._bar.setRange(0, rows.scroll_range)
            self._bar.setPageStep(rows.area)
            self._bar.setSingleStep(max(1, round(rows.row_height)))
            self._bar.setValue(rows.scroll)
        self._bar.setVisible(rows.scroll_range > 0)
