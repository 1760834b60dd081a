"""The line at the bottom: what is under the cursor, the recording, the notice in short, running work."""

from __future__ import annotations

from PySide6.QtCore import Qt, Signal
from PySide6.QtWidgets import QHBoxLayout, QProgressBar, QSizePolicy, QWidget

from pulsemend.progress import Progress
from pulsemend.session.changed import Changed
from pulsemend.session.session import Session
from pulsemend.units import s_to_ms
from pulsemend.window.elided import ElidedLabel
from pulsemend.window.parts import button, words
from pulsemend.window.traces.model import Measure, Reading

ONE_LINE_NOTICE = "For recordings already made. Stimulation follows your local protocol."


class StatusLine(QWidget):
    """Cursor, facts, notice, progress.

    Attributes
    ----------
    cancel_wanted : Signal()
        The user wants the shown job to stop.
    """

    cancel_wanted = Signal()

    def __init__(self, session: Session, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setObjectName("statusLine")
        self.setAttribute(Qt.WidgetAttribute.WA_StyledBackground)
        self._session = session
        row = QHBoxLayout(self)
        row.setContentsMargins(12, 2, 12, 2)
        row.setSpacing(18)
        self.cursor_words = words("")
        self.cursor_words.setAccessibleName("Under the cursor")
        self.cursor_words.setMinimumWidth(210)
        self.facts = words("", "quiet")
        self.facts.setWordWrap(False)
        # The notice gives way first where there is little room; its dialog holds the whole.
        self.notice = ElidedLabel(ONE_LINE_NOTICE, "quiet")
        self.notice.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
        self.work = words("", "quiet")
        self.work.setWordWrap(False)
        self.bar = QProgressBar()
        self.bar.setAccessibleName("Progress")
        self.bar.setTextVisible(False)
        self.bar.setFixedWidth(110)
        self.cancel = button("Cancel", self.cancel_wanted.emit, tooltip="Stop what is running")
        # The tallest part keeps its room: the line must not grow, and move everything, whenever work starts.
        kept = self.cancel.sizePolicy()
        kept.setRetainSizeWhenHidden(True)
        self.cancel.setSizePolicy(kept)
        row.addWidget(self.cursor_words)
        row.addWidget(self.facts)
        row.addWidget(self.notice, 1)
        row.addWidget(self.work)
        row.addWidget(self.bar)
        row.addWidget(self.cancel)
        self.end_work()
        end = session.subscribe(Changed.RECORDING, self._show_facts)
        self.destroyed.connect(lambda: end())
        self._show_facts()

    def show_reading(self, reading: Reading | None) -> None:
        """Show what is under the cursor."""
        if reading is None:
            self.cursor_words.setText("")
            return
        channel = reading.channel if len(reading.channel) <= 16 else reading.channel[:15] + "\u2026"
        at = clock(reading.time_s)
        self.cursor_words.setText(f"{at}   {channel}   {_signed(reading.value_uv)} \u00b5V")

    def show_measure(self, measure: Measure) -> None:
        """Show what lies between two points."""
        apart = f"{s_to_ms(measure.duration_s):.1f} ms, {_signed(measure.difference_uv)} \u00b5V"
        self.cursor_words.setText(f"{measure.channel}: {apart}")

    def show_work(self, progress: Progress, seconds_left: float | None) -> None:
        """Show how far the work that runs is."""
        left = "" if seconds_left is None or seconds_left < 1 else f", about {round(seconds_left)} s left"
        share = f" {min(progress.done / progress.total, 1.0):.0%}" if progress.total > 0 else ""
        self.work.setText(f"{progress.stage}{share}{left}")
        self.bar.setRange(0, 500 if progress.total > 0 else 0)
        if progress.total > 0:
            self.bar.setValue(round(500 * min(progress.done / progress.total, 1.0)))
        for widget in (self.work, self.bar, self.cancel):
            widget.setVisible(True)

    def end_work(self) -> None:
        """Show that nothing is running."""
        for widget in (self.work, self.bar, self.cancel):
            widget.setVisible(False)

    def _show_facts(self) -> None:
        opened = self._session.recording
        if opened is None:
            self.facts.setText("")
            return
        facts = opened.facts
        self.facts.setText(
            f"{len(facts.channels)} channels \u00b7 {facts.rate_hz:g} Hz \u00b7 {clock(facts.duration_s, 0)}"
        )


def clock(seconds: float, decimals: int = 3) -> str:
    """Write an instant as h:mm:ss or m:ss with decimals."""
    sign, seconds = ("\u2212", -seconds) if seconds < 0 else ("", seconds)
    whole = round(seconds, decimals)
    minutes, rest = divmod(whole, 60)
    hours, minutes = divmod(int(minutes), 60)
    width = 3 + decimals if decimals else 2
    tail = f"{rest:0{width}.{decimals}f}"
    return f"{sign}{hours}:{minutes:02d}:{tail}" if hours else f"{sign}{minutes}:{tail}"


def _signed(value: float) -> str:
    return f"{value:+.1f}".replace("-", "\u2212")
