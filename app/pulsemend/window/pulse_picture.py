"""The picture of the Pulses stage: all pulses at time zero, as recorded and repaired, and the gap's edges."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

from PySide6.QtCore import QSignalBlocker, Qt, Signal
from PySide6.QtGui import QResizeEvent
from PySide6.QtWidgets import QComboBox, QHBoxLayout, QLabel, QSizePolicy, QToolButton, QVBoxLayout, QWidget

from pulsemend.mending.pulse_view import Pick, PulseView, edge_ms
from pulsemend.units import ms_to_s, s_to_ms, v_to_uv
from pulsemend.window.parts import words
from pulsemend.window.pulse_canvas import ZOOM, PulseCanvas, Shown, step_s
from pulsemend.window.theme import Theme

LONGEST_MS = (-1000.0, 5000.0)
"""Where a gap's edges may be; the plan's own limits."""


class Elided(QLabel):
    """One line of quiet text that is cut where there is no room; the whole text is its tooltip."""

    def __init__(self) -> None:
        super().__init__()
        self.setProperty("kind", "quiet")
        self.setTextFormat(Qt.TextFormat.PlainText)
        self.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
        self._whole = ""

    def show_text(self, text: str) -> None:
        """Show another text."""
        self._whole = text
        self.setToolTip(text)
        self.setAccessibleName(text)
        self._cut()

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Cut anew."""
        super().resizeEvent(event)
        self._cut()

    def _cut(self) -> None:
        self.setText(self.fontMetrics().elidedText(self._whole, Qt.TextElideMode.ElideRight, self.width()))


_ALL = "all channels (median)"
_WORST = "the worst channel"
WORST_MEANS = (
    "The worst channel is the one with the largest step left at the gap's edges: its level in the 2 ms after "
    "the gap minus that in the 2 ms before, median over the pulses."
)


class PulsePicture(QWidget):
    """The picture with its chooser and its buttons.

    Parameters
    ----------
    theme : Theme
        Colours.

    Attributes
    ----------
    gap_moved : Signal(float, float)
        Both edges as they are dragged, ms, on samples.
    gap_released : Signal()
        The drag is over.
    wanted : Signal()
        Other curves are wanted: see `pick`, `channel` and `canvas.span_ms`.
    """

    gap_moved = Signal(float, float)
    gap_released = Signal()
    wanted = Signal()

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.rate_hz = 1000.0
        self.canvas = PulseCanvas(theme)
        self.info = Elided()
        self.chooser = QComboBox()
        self.chooser.setAccessibleName("Channel of the picture")
        self.chooser.view().setAccessibleName("Channels to choose from")
        self.chooser.setToolTip(WORST_MEANS)
        self.chooser.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.chooser.setMinimumContentsLength(8)
        self.chooser.setMaximumWidth(320)
        self.chooser.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)
        self.message = words("", "quiet")
        self.message.setAlignment(Qt.AlignmentFlag.AlignCenter)
        label = words("Channel")
        label.setBuddy(self.chooser)
        head = QHBoxLayout()
        head.addWidget(words("All pulses at zero", "title"))
        head.addStretch(1)
        head.addWidget(label)
        head.addWidget(self.chooser, 2)
        canvas = self.canvas
        below = QHBoxLayout()
        below.addWidget(self.info, 1)
        for text, name, does in (
            ("ms \u2212", "Show less time", lambda: canvas.zoom_time(ZOOM)),
            ("ms +", "Show more time", lambda: canvas.zoom_time(1.0 / ZOOM)),
            ("\u00b5V \u2212", "Show less voltage", lambda: canvas.zoom_volts(ZOOM)),
            ("\u00b5V +", "Show more voltage", lambda: canvas.zoom_volts(1.0 / ZOOM)),
            ("Whole", "Show the usual span and voltage again", canvas.show_whole),
        ):
            below.addWidget(_zoom_button(text, name, does))
        column = QVBoxLayout(self)
        column.setContentsMargins(12, 6, 12, 6)
        column.setSpacing(2)
        column.addLayout(head)
        column.addLayout(below)
        column.addWidget(self.canvas, 1)
        column.addWidget(self.message, 1)
        self.message.hide()
        self.chooser.currentIndexChanged.connect(lambda _index: self._on_chosen())
        canvas.span_changed.connect(self._on_span)
        for handle, is_start in ((canvas.start, True), (canvas.stop, False)):
            handle.moved.connect(lambda ms, is_start=is_start: self._move_to(ms, is_start=is_start))
            handle.stepped.connect(
                lambda n, ms, is_start=is_start: self._step(n, in_ms=ms, is_start=is_start)
            )
            handle.released.connect(self.gap_released)

    @property
    def pick(self) -> Pick:
        """Which channels are chosen."""
        index = self.chooser.currentIndex()
        return Pick.ONE if index > 1 else Pick.ALL if index == 1 else Pick.WORST

    @property
    def channel(self) -> str:
        """The channel chosen; empty for all and the worst."""
        return self.chooser.currentText() if self.pick is Pick.ONE else ""

    @property
    def is_dragged(self) -> bool:
        """Whether an edge is being moved."""
        return self.canvas.start.is_dragged or self.canvas.stop.is_dragged

    def show_channels(self, names: Sequence[str]) -> None:
        """Offer other channels; the one chosen stays if it is among them."""
        entries = [_WORST, _ALL, *names]
        if entries == [self.chooser.itemText(i) for i in range(self.chooser.count())]:
            return
        chosen = self.chooser.currentText()
        with QSignalBlocker(self.chooser):
            self.chooser.clear()
            self.chooser.addItems(entries)
            for index, entry in enumerate(entries):
                self.chooser.setItemData(index, entry, Qt.ItemDataRole.ToolTipRole)
            self.chooser.setCurrentIndex(max(0, self.chooser.findText(chosen)))

    def choose(self, channel: str) -> None:
        """Show a channel."""
        index = self.chooser.findText(channel)
        if index >= 0:
            self.chooser.setCurrentIndex(index)

    def show_view(self, view: PulseView) -> None:
        """Show other curves."""
        self.show_message("")
        self.canvas.show_view(view)
        self.info.show_text(_info(view))

    def show_over(self, shown: Shown | None) -> None:
        """Show another gap."""
        self.canvas.show_over(shown)

    def show_message(self, text: str) -> None:
        """Say in place of the picture what to do next; an empty text brings the picture back."""
        self.message.setText(text)
        self.message.setVisible(bool(text))
        self.canvas.setVisible(not text)
        if text:
            self.canvas.show_view(None)
            self.info.show_text("")

    def set_theme(self, theme: Theme) -> None:
        """Change the colours."""
        self.canvas.theme = theme
        self.canvas.update()

    def _on_chosen(self) -> None:
        self.chooser.setToolTip(f"{self.chooser.currentText()}\n{WORST_MEANS}")
        self.wanted.emit()

    def _on_span(self) -> None:
        view = self.canvas.view
        if view is None:
            return
        start, stop = self.canvas.span_ms
        half = s_to_ms(step_s(view))
        if start < s_to_ms(float(view.times_s[0])) - half or stop > s_to_ms(float(view.times_s[-1])) + half:
            self.wanted.emit()

    def _move_to(self, ms: float, *, is_start: bool) -> None:
        self._set_edge(_nearest(ms, self.rate_hz), is_start=is_start)

    def _step(self, steps: int, *, in_ms: bool, is_start: bool) -> None:
        at = self.canvas.edge(is_start=is_start)
        to = _nearest(at + steps, self.rate_hz) if in_ms else _nearest(at, self.rate_hz) + steps
        self._set_edge(to, is_start=is_start)

    def _set_edge(self, sample: int, *, is_start: bool) -> None:
        shown = self.canvas.shown
        if shown is None:
            return
        first, last = shown.window_ms
        ms = min(max(edge_ms(sample, self.rate_hz), LONGEST_MS[0]), LONGEST_MS[1])
        least = edge_ms(1, self.rate_hz)
        new = (min(ms, last - least), last) if is_start else (first, max(ms, first + least))
        if new != shown.window_ms:
            self.gap_moved.emit(*new)


def _nearest(ms: float, rate_hz: float) -> int:
    return math.floor(ms_to_s(ms) * rate_hz + 0.5)


def _step_s(view: PulseView) -> float:
    return float(view.times_s[1] - view.times_s[0])


def _info(view: PulseView) -> str:
    n_of = (
        f"{view.n_shown} pulses"
        if view.n_shown == view.n_pulses
        else f"{view.n_shown} of {view.n_pulses} pulses"
    )
    parts = [n_of, view.channel or "median over the good EEG channels"]
    if view.request.pick is Pick.WORST and view.leftover_v is not None:
        parts.append(f"worst: {v_to_uv(view.leftover_v):.1f} \u00b5V step left at the gap")
    if view.repaired is None:
        parts.append("as recorded, median and middle half")
    else:
        parts.append("thin: as recorded; thick: repaired, median and middle half")
    parts.append("each pulse minus its mean before the gap")
    return " \u00b7 ".join(parts)


def _zoom_button(text: str, name: str, does: Callable[[], None]) -> QToolButton:
    made = QToolButton()
    made.setText(text)
    made.setAccessibleName(name)
    made.setToolTip(name)
    made.setAutoRepeat(text != "Whole")
    made.clicked.connect(lambda _=False: does())
    return made
