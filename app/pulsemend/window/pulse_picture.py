"""The picture of the Pulses stage: all pulses at time zero, as recorded and repaired, and the gap's edges."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QPointF, QRectF, QSignalBlocker, QSize, Qt, Signal
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
    QPolygonF,
    QResizeEvent,
    QWheelEvent,
)
from PySide6.QtWidgets import QComboBox, QHBoxLayout, QLabel, QSizePolicy, QToolButton, QVBoxLayout, QWidget

from pulsemend.mending.pulse_view import USUAL_SPAN_MS, WIDEST_SPAN_MS, Pick, PulseView, Spread, edge_ms
from pulsemend.model.plan import Window
from pulsemend.units import ms_to_s, s_to_ms, v_to_uv
from pulsemend.window.parts import words
from pulsemend.window.theme import Theme

ZOOM = 1.4
LEAST_SPAN_MS = 4.0
LEAST_HALF_UV = 5.0
MOST_HALF_UV = 2e5
LONGEST_MS = (-1000.0, 5000.0)
"""Where a gap's edges may be; the plan's own limits."""

_FAR_PX = 20_000.0
_GRIP = QSize(14, 28)
_OVERLAP_PX = 2

Values = NDArray[np.float64]


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

    def x_of(self, ms: float) -> float:
        """Place of an instant."""
        start, stop = self.span_ms
        area = self.area
        return area.left() + (ms - start) / (stop - start) * area.width()

    def ms_at(self, x: float) -> float:
        """Find the instant at a place."""
        start, stop = self.span_ms
        area = self.area
        return start + (x - area.left()) / area.width() * (stop - start)

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
            self._paint_curves(painter, area, self.view)
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
            before, after = (s_to_ms(n * _step_s(view)) for n in view.flanks)
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
        low, high = self.range_uv
        for uv in _ticks(low, high, max(2, int(area.height() / (metrics.height() * 2.2)))):
            y = self._y_of(uv, area)
            painter.setPen(thin)
            painter.drawLine(QPointF(area.left(), y), QPointF(area.right(), y))
            painter.setPen(quiet)
            text = f"{uv:g} \u00b5V"
            right = area.left() - 6 - metrics.horizontalAdvance(text)
            at = min(max(y + metrics.ascent() / 2.5, metrics.ascent()), area.bottom())
            painter.drawText(QPointF(right, at), text)
        start, stop = self.span_ms
        wide = metrics.horizontalAdvance("-000.0 ms") * 1.6
        for ms in _ticks(start, stop, max(2, int(area.width() / wide))):
            x = self.x_of(ms)
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

    def _paint_curves(self, painter: QPainter, area: QRectF, view: PulseView) -> None:
        theme = self.theme
        recorded = QPen(QColor(theme.trace_recorded if view.repaired else theme.trace), 1.2)
        self._curve(painter, area, view, view.recorded.median_v, recorded)
        if view.repaired is None:
            self._half(painter, area, view, view.recorded, QColor(theme.trace_recorded))
            return
        # Earlier settings: pale, and a word says so.
        painter.setOpacity(0.45 if self.shown is not None and self.shown.waiting else 1.0)
        self._half(painter, area, view, view.repaired, QColor(theme.accent))
        self._curve(painter, area, view, view.repaired.median_v, QPen(QColor(theme.accent), 2.2))
        painter.setOpacity(1.0)

    def _half(self, painter: QPainter, area: QRectF, view: PulseView, of: Spread, color: QColor) -> None:
        color.setAlpha(70)
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(color)
        for run in _runs(self._visible(view), of.low_v):
            x = self._xs(view, run)
            low = self._points(x, of.low_v[run], area, keep="low")
            high = self._points(x, of.high_v[run], area, keep="high")
            painter.drawPolygon(QPolygonF([*high, *reversed(low)]))

    def _curve(
        self, painter: QPainter, area: QRectF, view: PulseView, values_v: NDArray[np.float32], pen: QPen
    ) -> None:
        painter.setPen(pen)
        painter.setBrush(Qt.BrushStyle.NoBrush)
        for run in _runs(self._visible(view), values_v):
            points = self._points(self._xs(view, run), values_v[run], area)
            painter.drawPolyline(QPolygonF(points))

    def _visible(self, view: PulseView) -> slice:
        start, stop = (ms_to_s(edge) for edge in self.span_ms)
        first, last = np.searchsorted(view.times_s, [start, stop])
        return slice(max(0, int(first) - 1), min(len(view.times_s), int(last) + 2))

    def _xs(self, view: PulseView, run: slice) -> Values:
        start, stop = self.span_ms
        area = self.area
        return np.asarray(area.left() + (s_to_ms(view.times_s[run]) - start) / (stop - start) * area.width())

    def _points(
        self,
        x: Values,
        values_v: NDArray[np.float32],
        area: QRectF,
        keep: str = "both",
    ) -> list[QPointF]:
        """Points of a curve; of more than two samples per pixel only the extremes are kept."""
        low, high = self.range_uv
        uv = v_to_uv(values_v.astype(np.float64))
        y = area.bottom() - (uv - low) / (high - low) * area.height()
        np.clip(y, -_FAR_PX, _FAR_PX, out=y)
        if len(x) > 2.0 * area.width():
            starts = np.unique(np.searchsorted(x, np.arange(x[0], x[-1], 1.0)))
            at = x[starts]
            lowest, highest = np.minimum.reduceat(y, starts), np.maximum.reduceat(y, starts)
            if keep == "both":
                x, y = np.repeat(at, 2), np.column_stack([lowest, highest]).ravel()
            else:
                # On the screen y grows downwards.
                x, y = at, highest if keep == "low" else lowest
        return [QPointF(a, b) for a, b in zip(x.tolist(), y.tolist(), strict=True)]

    def _y_of(self, uv: float, area: QRectF) -> float:
        low, high = self.range_uv
        return area.bottom() - (uv - low) / (high - low) * area.height()

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
            left = self.x_of(first - s_to_ms(self.view.flanks[0] * _step_s(self.view)))
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
        self.chooser.setToolTip(WORST_MEANS)
        self.chooser.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.chooser.setMinimumContentsLength(18)
        self.message = words("", "quiet")
        self.message.setAlignment(Qt.AlignmentFlag.AlignCenter)
        head = QHBoxLayout()
        head.addWidget(words("All pulses at zero", "title"))
        head.addStretch(1)
        label = words("Channel")
        label.setBuddy(self.chooser)
        head.addWidget(label)
        head.addWidget(self.chooser)
        canvas = self.canvas
        head.addWidget(words("Time"))
        head.addWidget(_zoom_button("\u2212", "Show more time", lambda: canvas.zoom_time(1.0 / ZOOM)))
        head.addWidget(_zoom_button("+", "Show less time", lambda: canvas.zoom_time(ZOOM)))
        head.addWidget(words("Voltage"))
        head.addWidget(_zoom_button("\u2212", "Show more voltage", lambda: canvas.zoom_volts(1.0 / ZOOM)))
        head.addWidget(_zoom_button("+", "Show less voltage", lambda: canvas.zoom_volts(ZOOM)))
        head.addWidget(_zoom_button("Whole", "Show the usual span and voltage again", canvas.show_whole))
        column = QVBoxLayout(self)
        column.setContentsMargins(12, 6, 12, 6)
        column.setSpacing(2)
        column.addLayout(head)
        column.addWidget(self.info)
        column.addWidget(self.canvas, 1)
        column.addWidget(self.message, 1)
        self.message.hide()
        self.chooser.currentIndexChanged.connect(lambda _index: self.wanted.emit())
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
        return (
            (Pick.ALL, Pick.WORST)[self.chooser.currentIndex()]
            if self.chooser.currentIndex() < 2
            else Pick.ONE
        )

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
        entries = [_ALL, _WORST, *names]
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

    def _on_span(self) -> None:
        view = self.canvas.view
        if view is None:
            return
        start, stop = self.canvas.span_ms
        half = s_to_ms(_step_s(view))
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


def _ticks(low: float, high: float, most: int) -> list[float]:
    """Round numbers within a range, at most so many and one more."""
    if not high > low:
        return []
    step = 10.0 ** math.floor(math.log10((high - low) / most))
    step = next(s for s in (step, 2.0 * step, 5.0 * step, 10.0 * step) if (high - low) / s <= most)
    first = math.ceil(low / step - 1e-9)
    return [round(k * step, 9) for k in range(first, math.floor(high / step + 1e-9) + 1)]


def _runs(visible: slice, values: NDArray[np.float32]) -> Iterator[slice]:
    """Stretches without holes."""
    finite = np.isfinite(values[visible])
    edges = np.flatnonzero(np.diff(np.concatenate([[False], finite, [False]]).astype(np.int8)))
    for first, last in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
        if last - first > 1:
            yield slice(visible.start + first, visible.start + last)


def _zoom_button(text: str, name: str, does: Callable[[], None]) -> QToolButton:
    made = QToolButton()
    made.setText(text)
    made.setAccessibleName(name)
    made.setToolTip(name)
    made.setAutoRepeat(text != "Whole")
    made.clicked.connect(lambda _=False: does())
    return made
