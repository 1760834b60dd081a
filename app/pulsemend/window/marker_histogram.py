"""How long it is from one marker to another: a histogram with the plan's limits."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QPointF, QRectF, QSignalBlocker, Qt, Signal
from PySide6.QtGui import QBrush, QColor, QFontMetricsF, QMouseEvent, QPainter, QPen
from PySide6.QtWidgets import QComboBox, QLabel, QVBoxLayout, QWidget

from pulsemend.mending.marker_intervals import (
    NO_INTERVALS,
    Intervals,
    between_codes,
    limited_slots,
    since_reference,
)
from pulsemend.mending.marker_view import Survey
from pulsemend.window.flow import flow_row
from pulsemend.window.marker_canvas import KeptPicture
from pulsemend.window.parts import button
from pulsemend.window.pulse_picture import Elided
from pulsemend.window.theme import Theme
from pulsemend.window.traces.clock import nice, number

_MOST_BARS = 90
_PAD = 10
_CODES = "two codes"


class Histogram(KeptPicture):
    """Bars, and what the plan allows.

    Parameters
    ----------
    theme : Theme
        Colours.

    Attributes
    ----------
    bar_clicked : Signal(float, float)
        From this length to that.
    """

    bar_clicked = Signal(float, float)

    def __init__(self, theme: Theme) -> None:
        super().__init__("Histogram of the intervals", theme)
        self.setFocusPolicy(Qt.FocusPolicy.NoFocus)
        self._intervals = NO_INTERVALS
        self._edges = np.array([0.0, 1.0])
        self._counts = np.zeros(1)

    def show_intervals(self, intervals: Intervals, rate_hz: float) -> None:
        """Show others, of a recording with this rate."""
        self._intervals = intervals
        length_s = intervals.length_s
        if length_s.size:
            self._edges = _edges(length_s, rate_hz)
            self._counts = np.histogram(length_s, self._edges)[0].astype(np.float64)
        self.refresh()

    def x_of(self, length_s: float) -> float:
        """Where a length is."""
        first_s, last_s = self._range()
        return _PAD + (length_s - first_s) / (last_s - first_s) * (self.width() - 2 * _PAD)

    def _range(self) -> tuple[float, float]:
        """Give what the axis shows: the intervals, and the limits."""
        first_s, last_s = float(self._edges[0]), float(self._edges[-1])
        limits_s = self._intervals.limits_s
        if limits_s is not None:
            first_s, last_s = min(first_s, limits_s[0]), max(last_s, limits_s[1])
        room_s = 0.03 * (last_s - first_s)
        return first_s - room_s, last_s + room_s

    def _top(self) -> float:
        """Room for the names of the limits."""
        return QFontMetricsF(self.font()).height() + 3

    def paint_ground(self, painter: QPainter) -> None:
        """Paint bars, limits and axis."""
        if not self._intervals.length_s.size:
            return
        metrics = QFontMetricsF(painter.font())
        bottom = self.height() - metrics.height() - 8
        self._paint_outside(painter, bottom)
        most = float(self._counts.max())
        bars: list[QRectF] = []
        outside: list[QRectF] = []
        limits_s = self._intervals.limits_s
        for count, low, high in zip(self._counts, self._edges[:-1], self._edges[1:], strict=True):
            if not count:
                continue
            left, right = self.x_of(float(low)), self.x_of(float(high))
            high_px = max(2.0, float(count) / most * (bottom - self._top() - metrics.height()))
            box = QRectF(left + 0.5, bottom - high_px, max(1.0, right - left - 1.0), high_px)
            middle_s = (low + high) / 2
            within = limits_s is None or limits_s[0] <= middle_s <= limits_s[1]
            (bars if within else outside).append(box)
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(QColor(self.theme.accent))
        painter.drawRects(bars)
        # Outside, bars are hatched: known without their colour.
        attention = QColor(self.theme.attention)
        painter.setPen(QPen(attention, 1.0))
        painter.setBrush(QBrush(attention, Qt.BrushStyle.BDiagPattern))
        painter.drawRects(outside)
        self._paint_axis(painter, bottom, most)

    def _paint_outside(self, painter: QPainter, bottom: float) -> None:
        limits_s = self._intervals.limits_s
        if limits_s is None:
            return
        metrics = QFontMetricsF(painter.font())
        low, high = self.x_of(limits_s[0]), self.x_of(limits_s[1])
        soft = QColor(self.theme.attention_soft)
        painter.fillRect(QRectF(0, self._top(), low, bottom - self._top()), soft)
        painter.fillRect(QRectF(high, self._top(), self.width() - high, bottom - self._top()), soft)
        painter.setPen(QPen(QColor(self.theme.attention), 1.2, Qt.PenStyle.DashLine))
        for x in (low, high):
            painter.drawLine(QPointF(x, self._top()), QPointF(x, bottom))
        painter.setPen(QColor(self.theme.attention))
        texts = (f"at least {number(limits_s[0])} s", f"at most {number(limits_s[1])} s")
        wide = [metrics.horizontalAdvance(text) for text in texts]
        first = min(max(low - wide[0] / 2, 2.0), self.width() - wide[0] - wide[1] - 16)
        second = min(max(high - wide[1] / 2, first + wide[0] + 12), self.width() - wide[1] - 2)
        for x, text in zip((first, second), texts, strict=True):
            painter.drawText(QPointF(x, metrics.ascent() + 1), text)

    def _paint_axis(self, painter: QPainter, bottom: float, most: float) -> None:
        metrics = QFontMetricsF(painter.font())
        painter.setPen(QPen(QColor(self.theme.line), 1.0))
        painter.drawLine(QPointF(0, bottom), QPointF(self.width(), bottom))
        first_s, last_s = self._range()
        room = metrics.horizontalAdvance("00.00 s") + 20
        step_s = _at_least((last_s - first_s) / max(1.0, self.width() / room))
        painter.setPen(QColor(self.theme.quiet))
        for k in range(math.ceil(first_s / step_s), math.floor(last_s / step_s) + 1):
            x, text = self.x_of(k * step_s), f"{number(k * step_s)} s"
            wide = metrics.horizontalAdvance(text)
            painter.drawLine(QPointF(x, bottom), QPointF(x, bottom + 4))
            place = min(max(x - wide / 2, 2.0), self.width() - wide - 2)
            painter.drawText(QPointF(place, bottom + 4 + metrics.ascent()), text)
        if bottom - self._top() < 3 * metrics.height():
            return
        # One number is enough to read the others by.
        highest = int(self._counts.argmax())
        x = (self.x_of(float(self._edges[highest])) + self.x_of(float(self._edges[highest + 1]))) / 2
        text = f"{most:.0f}"
        painter.setPen(QColor(self.theme.text))
        top = self._top() + metrics.ascent()
        painter.drawText(QPointF(x - metrics.horizontalAdvance(text) / 2, top), text)

    def mouseReleaseEvent(self, event: QMouseEvent) -> None:
        """Tell which bar was clicked."""
        first_s, last_s = self._range()
        at_s = first_s + (event.position().x() - _PAD) / max(1, self.width() - 2 * _PAD) * (last_s - first_s)
        place = int(np.searchsorted(self._edges, at_s, side="right")) - 1
        if 0 <= place < self._counts.size and self._counts[place]:
            self.bar_clicked.emit(float(self._edges[place]), float(self._edges[place + 1]))


class IntervalsPicture(QWidget):
    """The histogram with its choosers.

    Parameters
    ----------
    theme : Theme
        Colours.

    Attributes
    ----------
    wanted : Signal(float, float)
        Bring this stretch into view.
    """

    wanted = Signal(float, float)

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self._survey: Survey | None = None
        self._intervals = NO_INTERVALS
        self._gone: tuple[float, float] | None = None
        self._is_chosen = False
        self.what = _combo("Interval of")
        self.first = _combo("From code")
        self.second = _combo("To the next")
        self._from, self._to = _name("from", self.first), _name("to the next", self.second)
        self.next_outside = button(
            "Next outside", self._go_outside, tooltip="Bring the next one outside the plan into view"
        )
        self.said = Elided()
        self.histogram = Histogram(theme)
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(4)
        column.addWidget(
            flow_row(
                _name("interval of", self.what),
                self.what,
                self._from,
                self.first,
                self._to,
                self.second,
                self.next_outside,
            )
        )
        column.addWidget(self.said)
        column.addWidget(self.histogram, 1)
        for combo in (self.what, self.first, self.second):
            combo.activated.connect(self._on_chosen)
        self.histogram.bar_clicked.connect(self._go_bar)

    def show_survey(self, survey: Survey | None) -> None:
        """Show the intervals of another survey; what is chosen stays chosen."""
        self._survey = survey
        slots = limited_slots(None if survey is None else survey.plan)
        _fill(self.what, [(f"{slot.slot} after {slot.after}", slot.slot) for slot in slots] + [(_CODES, "")])
        if not self._is_chosen:
            self.what.setCurrentIndex(0)
        codes = [] if survey is None else [one.code for one in survey.evidence]
        _fill(self.first, [(code, code) for code in codes])
        was_empty = self.second.count() == 0
        _fill(self.second, [(code, code) for code in codes])
        if was_empty and len(codes) > 1:
            self.second.setCurrentIndex(1)
        self._show()

    def choose_codes(self, first: str, second: str) -> None:
        """Show the intervals between two codes."""
        self._is_chosen = True
        self.what.setCurrentIndex(self.what.findData(""))
        self.first.setCurrentIndex(self.first.findData(first))
        self.second.setCurrentIndex(self.second.findData(second))
        self._show()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self.histogram.set_theme(theme)

    def _on_chosen(self) -> None:
        self._gone = None
        self._is_chosen = True
        self._show()

    def _show(self) -> None:
        slot = self.what.currentData() or ""
        for widget in (self._from, self.first, self._to, self.second):
            widget.setVisible(not slot)
        survey = self._survey
        if survey is None:
            self._intervals = NO_INTERVALS
        elif slot:
            self._intervals = since_reference(survey, slot)
        else:
            self._intervals = between_codes(
                survey, self.first.currentData() or "", self.second.currentData() or ""
            )
        self.histogram.show_intervals(self._intervals, 1.0 if survey is None else survey.rate_hz)
        self.histogram.setVisible(bool(self._intervals.length_s.size))
        outside = int((self._intervals.shorter | self._intervals.longer).sum())
        self.next_outside.setVisible(self._intervals.limits_s is not None)
        self.next_outside.setEnabled(outside > 0)
        text = _said(self._intervals)
        self.said.show_text(text)
        self.histogram.setAccessibleDescription(text)

    def _go_outside(self) -> None:
        self._go(self._intervals.shorter | self._intervals.longer)

    def _go_bar(self, low_s: float, high_s: float) -> None:
        length_s = self._intervals.length_s
        self._go((length_s >= low_s) & (length_s <= high_s))

    def _go(self, these: NDArray[np.bool_]) -> None:
        """Go to the first of some, or to the next one after the one gone to before."""
        starts, lengths = self._intervals.start_s[these], self._intervals.length_s[these]
        if not starts.size:
            return
        after = -math.inf if self._gone is None else self._gone[0]
        place = int(np.searchsorted(starts, after, side="right")) % starts.size
        self._gone = (float(starts[place]), float(starts[place] + lengths[place]))
        self.wanted.emit(*self._gone)


def _at_least(value: float) -> float:
    """Smallest of 1, 2 and 5 times a power of ten that is not below a value."""
    found = nice(value)
    return found if found >= value * (1 - 1e-9) else nice(2.5 * found)


def _edges(length_s: NDArray[np.float64], rate_hz: float) -> NDArray[np.float64]:
    """Edges of the bars, halfway between samples: each bar holds as many possible lengths as any other."""
    low, high = (float(edge) * rate_hz for edge in (length_s.min(), length_s.max()))
    n_bars = min(_MOST_BARS, max(8.0, 2 * math.sqrt(length_s.size)))
    width = max(1, math.ceil((high - low) / n_bars))
    n_bars = math.floor((high - low) / width + 0.5) + 1
    return (math.floor(low + 0.5) - 0.5 + width * np.arange(n_bars + 1, dtype=np.float64)) / rate_hz


def _said(intervals: Intervals) -> str:
    length_s = intervals.length_s
    if not intervals.words:
        return "There are no markers to measure between."
    if not length_s.size:
        return f"{intervals.words}: there is none."
    usual = f"median {np.median(length_s):.3f} s, {length_s.min():.3f} to {length_s.max():.3f} s"
    text = f"{intervals.words}: {length_s.size} intervals, {usual}"
    if intervals.limits_s is None:
        return f"{text}. The plan has no limits for it."
    least_s, most_s = intervals.limits_s
    shorter, longer = int(intervals.shorter.sum()), int(intervals.longer.sum())
    allowed = f"the plan allows {number(least_s)} to {number(most_s)} s"
    return f"{text}; {allowed}; outside: {shorter + longer} ({shorter} shorter, {longer} longer)."


def _combo(name: str) -> QComboBox:
    made = QComboBox()
    made.setAccessibleName(name)
    made.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
    made.setMinimumContentsLength(14)
    return made


def _name(text: str, field: QWidget) -> QLabel:
    label = QLabel(text)
    label.setBuddy(field)
    return label


def _fill(combo: QComboBox, items: list[tuple[str, str]]) -> None:
    """Offer other choices and keep the chosen one if it is still there."""
    if [(combo.itemText(i), combo.itemData(i)) for i in range(combo.count())] == items:
        return
    chosen = combo.currentData()
    with QSignalBlocker(combo):
        combo.clear()
        for text, data in items:
            combo.addItem(text, data)
            combo.setItemData(combo.count() - 1, text, Qt.ItemDataRole.ToolTipRole)
        combo.setCurrentIndex(0 if chosen is None else max(0, combo.findData(chosen)))
