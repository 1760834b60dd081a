"""The traces under the user's hands: panned, zoomed, measured, selected; events reached and dragged."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from enum import Enum

from PySide6.QtCore import QEvent, QLineF, QPointF, Qt, Signal
from PySide6.QtGui import (
    QColor,
    QFocusEvent,
    QKeyEvent,
    QMouseEvent,
    QNativeGestureEvent,
    QPen,
    QWheelEvent,
)
from PySide6.QtWidgets import QGestureEvent, QPinchGesture, QWidget

from pulsemend.model.vocabulary import Role
from pulsemend.session.view import Shown, View
from pulsemend.window.theme import Theme
from pulsemend.window.traces import overlays as paint
from pulsemend.window.traces.canvas import TraceView
from pulsemend.window.traces.clock import clock
from pulsemend.window.traces.geometry import HEADER
from pulsemend.window.traces.keys import moved_by_key, plain, wheel_move, wheel_zoom
from pulsemend.window.traces.model import Measure, Reading, ViewModel
from pulsemend.window.traces.navigation import SMALL_STEP, Extent
from pulsemend.window.traces.source import TraceSource

_STILL = 4
"""Pixels that the mouse may move within a click."""
_LEAST_SAMPLES = 8
_KEY_STEP = 0.02


class Hand(Enum):
    """What dragging does."""

    PAN = "pan"
    MEASURE = "measure"
    STRETCH = "select a stretch"


@dataclass
class _Drag:
    """A mouse button held down: where it began, and the view then."""

    hand: Hand
    start: QPointF
    view: View
    scroll: int
    at: QPointF
    event: int | None = None
    moved: bool = False


@dataclass
class _Stretch:
    """Two times chosen by keys."""

    anchor_s: float
    time_s: float


class TracePlot(TraceView):
    """Stacked traces that can be moved and measured.

    Dragging pans; with Shift it measures between two points, with Ctrl it selects a stretch of time;
    `set_hand` makes one of these what plain dragging does. A click on an event's shape, or Return on the one
    reached with Ctrl+Left and Ctrl+Right, chooses it. Shift+Left and Shift+Right choose a stretch by keys,
    Return takes it.

    Parameters
    ----------
    model : ViewModel
    source : TraceSource
    theme : Theme
    parent : QWidget or None
    """

    cursor_moved = Signal(object)
    measured = Signal(object)
    stretch_selected = Signal(float, float)
    event_clicked = Signal(int)
    pulse_dragged = Signal(int, float)
    pulse_added = Signal(float)

    def __init__(
        self, model: ViewModel, source: TraceSource, theme: Theme, parent: QWidget | None = None
    ) -> None:
        super().__init__(model, source, theme, parent)
        facts = source.facts
        self._extent = Extent(facts.duration_s, _LEAST_SAMPLES / facts.rate_hz)
        self._hand = Hand.PAN
        self._pulses_editable = False
        self._cursor: QPointF | None = None
        self._drag: _Drag | None = None
        self._stretch: _Stretch | None = None
        self._measure: tuple[Measure, tuple[float, float]] | None = None
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setMouseTracking(True)
        self.grabGesture(Qt.GestureType.PinchGesture)

    def set_hand(self, hand: Hand) -> None:
        """Choose what plain dragging does."""
        self._hand = hand

    def set_pulses_editable(self, *, editable: bool) -> None:
        """Let pulses be dragged, and added by a double click above the traces."""
        self._pulses_editable = editable

    def paint_moving(self, canvas: paint.Canvas) -> None:
        """Paint the cursor, a measure, a stretch being chosen, a pulse being dragged."""
        painter = canvas.painter
        drag = self._drag
        if self._stretch is not None:
            paint.paint_chosen_stretch(canvas, self._stretch.anchor_s, self._stretch.time_s)
        if drag is not None and drag.moved and drag.hand is Hand.STRETCH:
            paint.paint_chosen_stretch(canvas, *self._drag_times(drag))
        if self._measure is not None:
            paint.paint_measure(canvas, *self._measure)
        if drag is not None and drag.event is not None and drag.moved:
            painter.setPen(QPen(QColor(self._theme.roles[Role.PULSE]), 2.0))
            painter.drawLine(QLineF(drag.at.x(), HEADER / 2, drag.at.x(), self.rows.top + self.rows.area))
        elif self._cursor is not None and drag is None:
            painter.setPen(QPen(QColor(self._theme.line), 1.0))
            x = int(self._cursor.x()) + 0.5
            painter.drawLine(QLineF(x, self.rows.top, x, self.rows.top + self.rows.area))

    # Mouse

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """Begin a drag."""
        if event.button() is not Qt.MouseButton.LeftButton:
            super().mousePressEvent(event)
            return
        hand = self._hand
        if event.modifiers() & Qt.KeyboardModifier.ShiftModifier:
            hand = Hand.MEASURE
        elif event.modifiers() & Qt.KeyboardModifier.ControlModifier:
            hand = Hand.STRETCH
        at = event.position()
        place = None
        if at.y() < HEADER:
            place = paint.event_at(self.scale, self._overlays.events, at.x())
        self._drag = _Drag(hand, at, self._model.view, self._scroll, at, place)
        self._measure = None
        self._stretch = None
        self.update()

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Read the value under the cursor, or go on with a drag."""
        self._cursor = event.position()
        drag = self._drag
        if drag is None:
            self._read()
            self.update()
            return
        drag.at = event.position()
        offset = drag.at - drag.start
        drag.moved = drag.moved or max(abs(offset.x()), abs(offset.y())) > _STILL
        if not drag.moved:
            return
        if drag.event is not None and not self._movable(drag.event):
            drag.event = None
        if drag.event is None and drag.hand is Hand.PAN:
            self._pan(drag)
        elif drag.event is None and drag.hand is Hand.MEASURE:
            self._measure_drag(drag)
        self.update()

    def mouseReleaseEvent(self, event: QMouseEvent) -> None:
        """End a drag, or a click."""
        drag, self._drag = self._drag, None
        if drag is None or event.button() is not Qt.MouseButton.LeftButton:
            super().mouseReleaseEvent(event)
            return
        drag.at = event.position()
        events = self._overlays.events
        if drag.event is not None and drag.moved:
            self.pulse_dragged.emit(events.keys[drag.event], self._on_sample(drag.at.x()))
        elif drag.event is not None:
            self._current_event = drag.event
            self.event_clicked.emit(events.keys[drag.event])
            self.refresh()
        elif drag.moved and drag.hand is Hand.STRETCH:
            start_s, stop_s = sorted(self._drag_times(drag))
            if stop_s > start_s:
                self.stretch_selected.emit(start_s, stop_s)
        self.update()

    def mouseDoubleClickEvent(self, event: QMouseEvent) -> None:
        """Add a pulse where there is none, above the traces."""
        at = event.position()
        free = paint.event_at(self.scale, self._overlays.events, at.x()) is None
        if self._pulses_editable and at.y() < HEADER and free:
            self.pulse_added.emit(self._on_sample(at.x()))
        else:
            super().mouseDoubleClickEvent(event)

    def leaveEvent(self, event: QEvent) -> None:
        """Forget the cursor."""
        self._cursor = None
        self.cursor_moved.emit(None)
        self.update()
        super().leaveEvent(event)

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Zoom time with Ctrl; else scroll the rows if they do not fit, or time (always with Shift)."""
        factor = wheel_zoom(event)
        if factor is not None:
            self._zoom(factor, event.position().x())
            return
        move = wheel_move(event, max(1, self.width()))
        shift = bool(event.modifiers() & Qt.KeyboardModifier.ShiftModifier)
        if move.y() and self.rows.scroll_range and not shift:
            self.set_scroll(self._scroll + round(move.y() * 3 * max(self.rows.row_height, 10.0)))
        elif move.y() or move.x():
            widths = move.x() + move.y() * SMALL_STEP
            self._model.set_view(self._extent.stepped(self._model.view, widths))

    def event(self, event: QEvent) -> bool:
        """Zoom by pinching, on a touchpad or a touch screen."""
        if isinstance(event, QNativeGestureEvent):
            if event.gestureType() is Qt.NativeGestureType.ZoomNativeGesture:
                self._zoom(1.0 + event.value(), event.position().x())
                return True
        elif isinstance(event, QGestureEvent):
            pinch = event.gesture(Qt.GestureType.PinchGesture)
            if isinstance(pinch, QPinchGesture):
                self._zoom(pinch.scaleFactor(), self.mapFromGlobal(pinch.hotSpot()).x())
                return True
        return super().event(event)

    # Keys

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Move, zoom, go from event to event, choose a stretch."""
        act = self._act_of(event)
        if act is None:
            super().keyPressEvent(event)
        else:
            act()

    def _act_of(self, event: QKeyEvent) -> Callable[[], object] | None:
        key, modifiers = event.key(), plain(event.modifiers())
        direction = {Qt.Key.Key_Left: -1, Qt.Key.Key_Right: 1, Qt.Key.Key_Up: -1, Qt.Key.Key_Down: 1}
        step = direction.get(Qt.Key(key), 0) if key in direction else 0
        across = key in (Qt.Key.Key_Left, Qt.Key.Key_Right)
        moved = moved_by_key(key, modifiers, self._model.view, self._extent)
        if moved is not None:
            view = moved
            return lambda: self._model.set_view(view)
        if across and modifiers == Qt.KeyboardModifier.ControlModifier:
            return lambda: self._to_event(step)
        if across and modifiers == Qt.KeyboardModifier.ShiftModifier:
            return lambda: self._stretch_by(step)
        if step and not across and modifiers == Qt.KeyboardModifier.NoModifier:
            return lambda: self.set_scroll(self._scroll + round(step * max(self.rows.row_height, 10.0)))
        if key in (Qt.Key.Key_Return, Qt.Key.Key_Enter) and (
            self._stretch is not None or self._current_event is not None
        ):
            return self._take
        if key == Qt.Key.Key_Escape and (self._stretch or self._measure or self._drag):
            return self._give_up
        return None

    def focusInEvent(self, event: QFocusEvent) -> None:
        """Show the focus."""
        self.update()
        super().focusInEvent(event)

    def focusOutEvent(self, event: QFocusEvent) -> None:
        """Stop showing the focus."""
        self.update()
        super().focusOutEvent(event)

    # Acts

    def _zoom(self, factor: float, x: float) -> None:
        if factor > 0:
            self._model.set_view(self._extent.zoomed(self._model.view, factor, self.scale.time_at(x)))

    def _pan(self, drag: _Drag) -> None:
        """Move by whole pixels of the screen from where the drag began."""
        columns = round((drag.at.x() - drag.start.x()) * self.devicePixelRatioF())
        start_s = drag.view.start_s - columns * self.scale.column_s
        self.set_scroll(drag.scroll - round(drag.at.y() - drag.start.y()))
        self._model.set_view(self._extent.clamped(replace(self._model.view, start_s=start_s)))

    def _to_event(self, step: int) -> None:
        """Go to the next event before or after the current one, or the middle."""
        events = self._overlays.events
        if not events.keys:
            return
        if self._current_event is None:
            middle_s = 0.5 * (self.scale.start_s + self.scale.stop_s)
            place = len(events.within(-1.0, middle_s)) - (1 if step < 0 else 0)
        else:
            place = self._current_event + step
        self._current_event = min(max(place, 0), len(events.keys) - 1)
        time_s = float(events.time_s[self._current_event])
        self._model.set_view(self._extent.centred(self._model.view, time_s))
        self.setAccessibleDescription(
            f"{events.roles[self._current_event]} {events.labels[self._current_event]} at {clock(time_s, 3)}"
        )
        self.update()

    def _stretch_by(self, step: int) -> None:
        """Choose a stretch, or move its end."""
        scale = self.scale
        if self._stretch is None:
            start_s = self._on_sample(self._cursor.x() if self._cursor is not None else self.width() / 2)
            self._stretch = _Stretch(start_s, start_s)
        rate_hz = self._source.facts.rate_hz
        by_s = max(1.0 / rate_hz, round(_KEY_STEP * self._model.view.width_s * rate_hz) / rate_hz)
        last_s = (self._source.facts.n_samples - 1) / rate_hz
        self._stretch.time_s = min(max(self._stretch.time_s + step * by_s, 0.0), last_s)
        if not scale.start_s <= self._stretch.time_s <= scale.stop_s:
            self._model.set_view(self._extent.stepped(self._model.view, step * SMALL_STEP))
        names = self.shown_names
        row = next((row for row, name in enumerate(names) if name in self._model.view.picked), 0)
        if names:
            self.measured.emit(self._between(row, self._stretch.anchor_s, self._stretch.time_s))
        self.update()

    def _take(self) -> None:
        stretch, self._stretch = self._stretch, None
        if stretch is not None:
            start_s, stop_s = sorted((stretch.anchor_s, stretch.time_s))
            if stop_s > start_s:
                self.stretch_selected.emit(start_s, stop_s)
        elif self._current_event is not None:
            self.event_clicked.emit(self._overlays.events.keys[self._current_event])
        self.update()

    def _give_up(self) -> None:
        drag, self._drag = self._drag, None
        self._stretch = None
        self._measure = None
        if drag is not None and drag.hand is Hand.PAN and drag.event is None:
            self._model.set_view(drag.view)
        self.update()

    def _read(self) -> None:
        cursor = self._cursor
        row = None if cursor is None else self.rows.row_at(cursor.y())
        if cursor is None or row is None:
            self.cursor_moved.emit(None)
            return
        sample = self.scale.sample_at(cursor.x(), self._source.facts.n_samples)
        name = self.shown_names[row]
        self.cursor_moved.emit(
            Reading(sample / self._source.facts.rate_hz, name, self._value_uv(name, sample))
        )

    def _measure_drag(self, drag: _Drag) -> None:
        row = self.rows.nearest_row(drag.start.y())
        if row is None:
            return
        times_s = self._drag_times(drag)
        measure = self._between(row, *times_s)
        self._measure = (measure, (self._y_of(row, measure.start_uv), self._y_of(row, measure.stop_uv)))
        self.measured.emit(measure)

    def _between(self, row: int, start_s: float, stop_s: float) -> Measure:
        name = self.shown_names[row]
        rate_hz, last = self._source.facts.rate_hz, self._source.facts.n_samples - 1
        values = [
            self._value_uv(name, min(max(0, round(time_s * rate_hz)), last)) for time_s in (start_s, stop_s)
        ]
        return Measure(name, start_s, stop_s, *values)

    def _y_of(self, row: int, value_uv: float) -> float:
        """Vertical place of a value in a row, kept within the traces."""
        rows = self.rows
        off = (value_uv - self._picture.centre_uv(self.shown_names[row])) / self._model.view.row_uv
        y = rows.middle(row) - off * rows.row_height
        return min(max(y, float(rows.top)), float(rows.top + rows.area))

    def _value_uv(self, name: str, sample: int) -> float:
        shown = self._model.view.shown
        kind = Shown.RECORDED if shown is Shown.RECORDED else Shown.REPAIRED
        return float(self._source.values_uv(kind, sample)[self._names[name]])

    def _on_sample(self, x: float) -> float:
        facts = self._source.facts
        return self.scale.sample_at(x, facts.n_samples) / facts.rate_hz

    def _drag_times(self, drag: _Drag) -> tuple[float, float]:
        return self._on_sample(drag.start.x()), self._on_sample(drag.at.x())

    def _movable(self, place: int) -> bool:
        events = self._overlays.events
        return self._pulses_editable and events.roles[place] is Role.PULSE
