"""The canvas of the pulse picture: bands, curves and axes, and the gap's edges as handles."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from PySide6.QtCore import QPointF, QRectF, QSize, Qt, Signal
from PySide6.QtGui import (
    QBrush,
    QColor,
    QFocusEvent,
    QFontMetrics,
    QKeyEvent,
    QMouseEvent,
    QPainter,
    QPaintEvent,
    QPen,
    QResizeEvent,
    QWheelEvent,
)
from PySide6.QtWidgets import QSizePolicy, QWidget

from pulsemend.mending.pulse_view import USUAL_SPAN_MS, WIDEST_SPAN_MS, PulseView
from pulsemend.model.plan import Window
from pulsemend.units import ms_to_s, s_to_ms, v_to_uv
from pulsemend.window.pulse_curves import Frame, draw_band, draw_curve, ticks
from pulsemend.window.theme import Theme

ZOOM = 1.4
LEAST_SPAN_MS = 4.0
LEAST_HALF_UV = 5.0
MOST_HALF_UV = 2e5
_GRIP = QSize(14, 28)
_OVERLAP_PX = 2


class EdgeHandle(QWidget):
    """One edge of the gap, to be dragged, or moved by the arrow keys.

    Parameters
    ----------
    name : str
        "Start of the gap" or "End of the gap".
    canvas : PulseCanvas
        Tells where times are.

    Attributes
    ----------
    moved : Signal(float)
        Where it is dragged to, ms; not yet on a sample.
    stepped : Signal(int, bool)
        So many samples, or milliseconds if true, later.
    released : Signal()
        The drag, or the row of steps, is over.
    """

    moved = Signal(float)
    stepped = Signal(int, bool)
    released = Signal()

    def __init__(self, name: str, canvas: PulseCanvas, *, is_start: bool) -> None:
        super().__init__(canvas)
        self.setAccessibleName(name)
        self.setToolTip(f"{name}: drag, or press the arrow keys (one sample; with Shift one millisecond)")
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setCursor(Qt.CursorShape.SizeHorCursor)
        self._canvas = canvas
        self._is_start = is_start
        self._grab_px: float | None = None
        self._is_stepping = False

    @property
    def is_dragged(self) -> bool:
        """Whether a hand or the keys are moving it."""
        return self._grab_px is not None or self._is_stepping

    def place(self, x: float, top: int, height: int) -> None:
        """Stand beside an edge, on the outer side, so that the handles of a narrow gap can be told apart."""
        left = round(x) - _GRIP.width() + _OVERLAP_PX if self._is_start else round(x) - _OVERLAP_PX
        self.setGeometry(left, top, _GRIP.width(), height)

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Draw the edge and its grip; the focus is a ring around the grip, not only a colour."""
        theme = self._canvas.theme
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        line = self.width() - _OVERLAP_PX if self._is_start else _OVERLAP_PX
        painter.setPen(QPen(QColor(theme.attention), 2.0, self._canvas.edge_style))
        painter.drawLine(QPointF(line, 0), QPointF(line, self.height()))
        width = _GRIP.width() - 4.0
        grip = QRectF(1.0 if self._is_start else self.width() - 1.0 - width, 22.0, width, _GRIP.height())
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(QColor(theme.attention))
        painter.drawRoundedRect(grip, 3.0, 3.0)
        if self.hasFocus():
            painter.setBrush(Qt.BrushStyle.NoBrush)
            painter.setPen(QPen(QColor(theme.text), 2.0))
            painter.drawRoundedRect(grip.adjusted(0.0, -3.0, 0.0, 3.0), 4.0, 4.0)

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """Take hold of it where it was touched."""
        if event.button() == Qt.MouseButton.LeftButton:
            self._grab_px = self._x_of(event) - self._canvas.x_of(self._canvas.edge(is_start=self._is_start))

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Tell where it is dragged to."""
        if self._grab_px is not None:
            self.moved.emit(self._canvas.ms_at(self._x_of(event) - self._grab_px))

    def mouseReleaseEvent(self, event: QMouseEvent) -> None:
        """End the drag."""
        if event.button() == Qt.MouseButton.LeftButton and self._grab_px is not None:
            self._grab_px = None
            self.released.emit()

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Move by a sample, or with Shift by a millisecond."""
        steps = {Qt.Key.Key_Left: -1, Qt.Key.Key_Right: 1}.get(Qt.Key(event.key()))
        plain = event.modifiers() & ~(Qt.KeyboardModifier.ShiftModifier | Qt.KeyboardModifier.KeypadModifier)
        if steps is None or plain != Qt.KeyboardModifier.NoModifier:
            super().keyPressEvent(event)
            return
        self._is_stepping = True
        self.stepped.emit(steps, bool(event.modifiers() & Qt.KeyboardModifier.ShiftModifier))

    def keyReleaseEvent(self, event: QKeyEvent) -> None:
        """End a row of steps when the key is let go."""
        if event.key() in (Qt.Key.Key_Left, Qt.Key.Key_Right) and not event.isAutoRepeat():
            self._end_steps()
        else:
            super().keyReleaseEvent(event)

    def focusInEvent(self, event: QFocusEvent) -> None:
        """Show the focus."""
        super().focusInEvent(event)
        self.update()

    def focusOutEvent(self, event: QFocusEvent) -> None:
        """End a row of steps whose key is let go elsewhere."""
        super().focusOutEvent(event)
        self._end_steps()
        self.update()

    def _end_steps(self) -> None:
        if self._is_stepping:
            self._is_stepping = False
            self.released.emit()

    def _x_of(self, event: QMouseEvent) -> float:
        return self.mapToParent(event.position()).x()


@dataclass(frozen=True)
class Shown:
    """What lies over the curves.

    Parameters
    ----------
    window_ms : tuple of 2 float
        The gap, decided or proposed.
    others_ms : tuple of (float, float)
        The other gaps.
    decided : bool
        Whether the gap is.
    waiting : bool
        Whether the curves belong to earlier settings.
    """

    window_ms: Window = (0.0, 0.0)
    others_ms: tuple[Window, ...] = ()
    decided: bool = True
    waiting: bool = False


class PulseCanvas(QWidget):
    """The curves with their axes. Wheel with Ctrl zooms the time, with Ctrl and Shift the voltage.

    Parameters
    ----------
    theme : Theme
        Colours.

    Attributes
    ----------
    span_changed : Signal()
        Another part of time is in view.
    """

    span_changed = Signal()

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.theme = theme
        self.setAccessibleName("All pulses at zero")
        self.setAccessibleDescription(
            "Left and right move through time, up and down zoom the voltage, Page keys zoom the time"
        )
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setMinimumHeight(110)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self.span_ms: Window = USUAL_SPAN_MS
        self.view: PulseView | None = None
        self.shown: Shown | None = None
        self._range_uv: tuple[float, float] | None = None
        self.start = EdgeHandle("Start of the gap", self, is_start=True)
        self.stop = EdgeHandle("End of the gap", self, is_start=False)
        self._lay_out()

    # What it shows

    def show_view(self, view: PulseView | None) -> None:
        """Show other curves."""
        self.view = view
        self.update()

    def show_over(self, shown: Shown | None) -> None:
        """Show another gap; None hides the handles."""
        self.shown = shown
        self._lay_out()
        self.update()

    def edge(self, *, is_start: bool) -> float:
        """Time of an edge of the gap, ms."""
        window_ms = (0.0, 0.0) if self.shown is None else self.shown.window_ms
        return window_ms[0 if is_start else 1]

    @property
    def edge_style(self) -> Qt.PenStyle:
        """Solid for a gap that is decided, dashed for one that is proposed."""
        decided = self.shown is None or self.shown.decided
        return Qt.PenStyle.SolidLine if decided else Qt.PenStyle.DashLine

    @property
    def range_uv(self) -> tuple[float, float]:
        """Lowest and highest voltage in view."""
        return self._range_uv or self._fitting_range()

    # Zoom

    def zoom_time(self, factor: float, about_ms: float | None = None) -> None:
        """Show less time, or more with a factor below 1, around an instant; the onset if it is in view."""
        start, stop = self.span_ms
        if about_ms is None:
            about_ms = 0.0 if start < 0.0 < stop else (start + stop) / 2.0
        self._set_span(about_ms - (about_ms - start) / factor, about_ms + (stop - about_ms) / factor)

    def pan(self, part: float) -> None:
        """Move by a part of the width."""
        start, stop = self.span_ms
        by = part * (stop - start)
        by = min(max(by, WIDEST_SPAN_MS[0] - start), WIDEST_SPAN_MS[1] - stop)
        self._set_span(start + by, stop + by)

    def zoom_volts(self, factor: float) -> None:
        """Show less voltage, or more with a factor below 1."""
        low, high = self.range_uv
        middle, half = (low + high) / 2.0, (high - low) / 2.0 / factor
        half = min(max(half, 0.5), MOST_HALF_UV)
        self._range_uv = (middle - half, middle + half)
        self.update()

    def show_whole(self) -> None:
        """Go back to the usual span, and the voltage of the repaired signal."""
        self._range_uv = None
        self._set_span(*USUAL_SPAN_MS)
        self.update()

    def _set_span(self, start: float, stop: float) -> None:
        start, stop = max(start, WIDEST_SPAN_MS[0]), min(stop, WIDEST_SPAN_MS[1])
        if stop - start < LEAST_SPAN_MS:
            middle = (start + stop) / 2.0
            start, stop = middle - LEAST_SPAN_MS / 2.0, middle + LEAST_SPAN_MS / 2.0
        if (start, stop) != self.span_ms:
            self.span_ms = (start, stop)
            self._lay_out()
            self.update()
            self.span_changed.emit()

    # Where things are

    @property
    def area(self) -> QRectF:
        """The part with the curves."""
        metrics = self.fontMetrics()
        left = metrics.horizontalAdvance("-0000 \u00b5V") + 10
        bottom = metrics.height() + 8
        return QRectF(left, 4, max(20, self.width() - left - 12), max(20, self.height() - bottom - 4))

    @property
    def frame(self) -> Frame:
        """Where times and voltages are now."""
        return Frame(self.area, self.span_ms, self.range_uv)

    def x_of(self, ms: float) -> float:
        """Place of an instant."""
        return Frame(self.area, self.span_ms, (0.0, 1.0)).x_of(ms)

    def ms_at(self, x: float) -> float:
        """Find the instant at a place."""
        return Frame(self.area, self.span_ms, (0.0, 1.0)).ms_at(x)

    def _lay_out(self) -> None:
        area = self.area
        for handle, is_start in ((self.start, True), (self.stop, False)):
            at = self.edge(is_start=is_start)
            in_view = self.shown is not None and self.span_ms[0] <= at <= self.span_ms[1]
            handle.setVisible(in_view)
            handle.place(self.x_of(at), int(area.top()), int(area.height()))
            handle.setAccessibleDescription(f"{at:.3f} ms")

    def _fitting_range(self) -> tuple[float, float]:
        """Find the voltage of what the repair leaves; of an undecided gap, of what lies outside."""
        view = self.view
        if view is None:
            return -20.0, 20.0
        of = view.repaired or view.recorded
        start, stop = (ms_to_s(edge) for edge in self.span_ms)
        inside = (view.times_s >= start) & (view.times_s <= stop)
        if view.repaired is None:
            for first, last in view.windows_s:
                inside &= (view.times_s < first) | (view.times_s > last)
        values = np.concatenate([of.low_v[inside], of.high_v[inside]])
        values = values[np.isfinite(values)]
        if not values.size:
            return -20.0, 20.0
        low, high = float(v_to_uv(float(values.min()))), float(v_to_uv(float(values.max())))
        half = max((high - low) / 2.0 * 1.25, LEAST_HALF_UV)
        middle = (low + high) / 2.0
        return middle - half, middle + half

    # Events

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Keep the handles at their edges."""
        super().resizeEvent(event)
        self._lay_out()

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Zoom with Ctrl; without it the wheel belongs to whoever is around."""
        held = event.modifiers()
        turned = event.angleDelta().y() or event.angleDelta().x()
        if not held & Qt.KeyboardModifier.ControlModifier or not turned:
            event.ignore()
            return
        factor = ZOOM ** (turned / 120.0)
        if held & Qt.KeyboardModifier.ShiftModifier:
            self.zoom_volts(factor)
        else:
            self.zoom_time(factor, self.ms_at(event.position().x()))
        event.accept()

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Move and zoom by keys with the meaning they have in the traces."""
        acts = {
            Qt.Key.Key_Left: lambda: self.pan(-0.1),
            Qt.Key.Key_Right: lambda: self.pan(0.1),
            Qt.Key.Key_Up: lambda: self.zoom_volts(ZOOM),
            Qt.Key.Key_Down: lambda: self.zoom_volts(1.0 / ZOOM),
            Qt.Key.Key_PageUp: lambda: self.zoom_time(ZOOM),
            Qt.Key.Key_PageDown: lambda: self.zoom_time(1.0 / ZOOM),
            Qt.Key.Key_Home: self.show_whole,
        }
        act = acts.get(Qt.Key(event.key()))
        if act is None or event.modifiers() & ~Qt.KeyboardModifier.KeypadModifier:
            super().keyPressEvent(event)
        else:
            act()

    # Painting

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Draw bands, axes, curves and words."""
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        area = self.area
        painter.save()
        painter.setClipRect(area)
        self._paint_bands(painter, area)
        painter.restore()
        self._paint_axes(painter, area)
        painter.save()
        painter.setClipRect(area)
        if self.view is not None:
            self._paint_curves(painter, self.view)
        painter.restore()
        if self.shown is not None:
            self._paint_words(painter, area, self.shown)
        if self.hasFocus():
            painter.setBrush(Qt.BrushStyle.NoBrush)
            painter.setPen(QPen(QColor(self.theme.accent), 2.0))
            painter.drawRect(area)

    def _paint_bands(self, painter: QPainter, area: QRectF) -> None:
        shown, view, theme = self.shown, self.view, self.theme
        if shown is None:
            return
        first, last = shown.window_ms
        if view is not None and view.decided:
            before, after = (s_to_ms(n * step_s(view)) for n in view.flanks)
            for start, stop in ((first - before, first), (last, last + after)):
                self._band(painter, area, (start, stop), theme.flank)
        for window in shown.others_ms:
            self._band(painter, area, window, theme.gap)
        self._band(painter, area, shown.window_ms, theme.gap, dashed=not shown.decided)

    def _band(
        self, painter: QPainter, area: QRectF, window_ms: Window, color: str, *, dashed: bool = False
    ) -> None:
        left, right = self.x_of(window_ms[0]), self.x_of(window_ms[1])
        if right <= left:
            return
        rect = QRectF(left, area.top(), max(right - left, 1.0), area.height())
        style = Qt.BrushStyle.BDiagPattern if dashed else Qt.BrushStyle.SolidPattern
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(QBrush(QColor(color), style))
        painter.drawRect(rect)

    def _paint_axes(self, painter: QPainter, area: QRectF) -> None:
        theme, metrics = self.theme, QFontMetrics(self.font())
        quiet = QPen(QColor(theme.quiet), 1.0)
        thin = QPen(QColor(theme.line), 1.0)
        frame = self.frame
        low, high = frame.range_uv
        for uv in ticks(low, high, max(2, int(area.height() / (metrics.height() * 2.2)))):
            y = frame.y_of(uv)
            painter.setPen(thin)
            painter.drawLine(QPointF(area.left(), y), QPointF(area.right(), y))
            painter.setPen(quiet)
            text = f"{uv:g} \u00b5V"
            right = area.left() - 6 - metrics.horizontalAdvance(text)
            at = min(max(y + metrics.ascent() / 2.5, metrics.ascent()), area.bottom())
            painter.drawText(QPointF(right, at), text)
        start, stop = self.span_ms
        wide = metrics.horizontalAdvance("-000.0 ms") * 1.6
        for ms in ticks(start, stop, max(2, int(area.width() / wide))):
            x = frame.x_of(ms)
            painter.setPen(thin)
            painter.drawLine(QPointF(x, area.bottom()), QPointF(x, area.bottom() + 4))
            painter.setPen(quiet)
            text = f"{ms:g} ms"
            width = metrics.horizontalAdvance(text)
            at = min(max(x - width / 2, 0), self.width() - width)
            painter.drawText(QPointF(at, area.bottom() + 4 + metrics.ascent()), text)
        if start < 0.0 < stop:
            painter.setPen(QPen(QColor(theme.quiet), 1.0, Qt.PenStyle.DotLine))
            painter.drawLine(QPointF(self.x_of(0.0), area.top()), QPointF(self.x_of(0.0), area.bottom()))

    def _paint_curves(self, painter: QPainter, view: PulseView) -> None:
        theme, frame, times_s = self.theme, self.frame, view.times_s
        shown = view.repaired or view.recorded
        color = QColor(theme.accent if view.repaired else theme.trace_recorded)
        recorded = QPen(QColor(theme.trace_recorded if view.repaired else theme.trace), 1.0)
        draw_curve(painter, frame, times_s, view.recorded.median_v, recorded)
        # Of earlier settings: pale, and a word says so.
        painter.setOpacity(0.45 if self.shown is not None and self.shown.waiting else 1.0)
        band = QColor(color)
        band.setAlpha(70)
        draw_band(painter, frame, times_s, (shown.low_v, shown.high_v), band)
        if view.repaired is not None:
            draw_curve(painter, frame, times_s, view.repaired.median_v, QPen(color, 2.0))
        painter.setOpacity(1.0)

    def _paint_words(self, painter: QPainter, area: QRectF, shown: Shown) -> None:
        """Write the times of the edges, the flank, and how far the picture can be trusted."""
        theme, metrics = self.theme, self.fontMetrics()
        baseline = area.top() + metrics.ascent() + 3
        painter.setPen(QColor(theme.attention))
        first, last = shown.window_ms
        text = f"{first:.4g} ms"
        if self.start.isVisible():
            painter.drawText(
                QPointF(self.x_of(first) - _GRIP.width() - metrics.horizontalAdvance(text), baseline), text
            )
        text = f"{last:.4g} ms"
        if self.stop.isVisible():
            painter.drawText(QPointF(self.x_of(last) + _GRIP.width(), baseline), text)
        state = self.state_words
        if state:
            painter.setPen(QColor(theme.attention))
            at = area.right() - metrics.horizontalAdvance(state) - 6
            painter.drawText(QPointF(at, area.bottom() - metrics.descent() - 4), state)
        if self.view is not None and self.view.decided and self.view.flanks[0] > 1:
            painter.setPen(QColor(theme.quiet))
            left = self.x_of(first - s_to_ms(self.view.flanks[0] * step_s(self.view)))
            at = max(left, area.left()) + 6
            if at + metrics.horizontalAdvance("flank") < self.x_of(first):
                painter.drawText(QPointF(at, area.bottom() - metrics.descent() - 4), "flank")

    @property
    def state_words(self) -> str:
        """How far the picture can be trusted; empty if it shows what will be written."""
        if self.shown is None:
            return ""
        if not self.shown.decided:
            return "gap proposed, not decided yet"
        if self.shown.waiting:
            return "earlier settings, being computed"
        if self.view is not None and self.view.provisional:
            return "provisional"
        return ""


def step_s(view: PulseView) -> float:
    """Give the sampling interval of a picture."""
    return float(view.times_s[1] - view.times_s[0])
