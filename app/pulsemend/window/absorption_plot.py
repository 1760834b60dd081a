"""Painted picture of what a fitted decay takes with it: share of a response that comes back, by latency."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QEvent, QPointF, QRectF, QSize, Qt
from PySide6.QtGui import (
    QAccessible,
    QAccessibleEvent,
    QBrush,
    QColor,
    QFocusEvent,
    QFontMetricsF,
    QKeyEvent,
    QMouseEvent,
    QPainter,
    QPaintEvent,
    QPen,
    QPolygonF,
)
from PySide6.QtWidgets import QSizePolicy, QWidget

from pulsemend.mending.decay_evidence import AbsorptionView
from pulsemend.signal.absorption import LEAST_RECOVERED
from pulsemend.units import s_to_ms
from pulsemend.window.pulse_curves import ticks
from pulsemend.window.theme import Theme

LAST_MS = 220.0
"""Right edge; test responses end a little before."""

MOST_PERCENT = 130.0
_LEAST_PERCENT = -10.0
_LINES_PERCENT = (0.0, 50.0, 100.0)
_DOT_PX = 2.5
_TEXT_PX = 8

Values = NDArray[np.float64]


class AbsorptionPlot(QWidget):
    """The picture, with a reading under the pointer or, by Left and Right, under a cursor.

    Parameters
    ----------
    theme : Theme
        Colours.
    """

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._theme = theme
        self._shown: AbsorptionView | None = None
        self._message = ""
        self._at: int | None = None
        self.setMouseTracking(True)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)
        self.setAccessibleName("Share of a test response that comes back, by latency")

    @property
    def shown(self) -> AbsorptionView | None:
        """What is drawn."""
        return self._shown

    @property
    def message(self) -> str:
        """What stands there where nothing is drawn."""
        return self._message

    def show_view(self, view: AbsorptionView | None, message: str = "") -> None:
        """Draw something else, or say why there is nothing to draw."""
        self._shown, self._message = view, message
        if view is None or (self._at is not None and self._at >= view.latencies_s.size):
            self._at = None
        self.updateGeometry()
        self._describe()
        self.update()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self._theme = theme
        self.update()

    def reading(self) -> str:
        """Words on the latency at the cursor; empty without one."""
        shown = self._shown
        if self._at is None or shown is None:
            return ""
        low, share, high = (f"{100.0 * float(v[self._at]):.0f}" for v in (shown.low, shown.share, shown.high))
        return f"{s_to_ms(float(shown.latencies_s[self._at])):.0f} ms: {share} % ({low} to {high})"

    def sizeHint(self) -> QSize:
        """Give room for legible curves, or for the words instead of them."""
        line = self.fontMetrics().height()
        if self._shown is not None:
            return QSize(220, 9 * line)
        wrapped = self.fontMetrics().boundingRect(
            0, 0, max(self.width() - 2 * _TEXT_PX, 120), 10_000, int(Qt.TextFlag.TextWordWrap), self._message
        )
        return QSize(220, wrapped.height() + line)

    def minimumSizeHint(self) -> QSize:
        """Give room for axes and a curve."""
        return QSize(160, self.sizeHint().height())

    # Reading off

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Read off under the pointer."""
        shown = self._shown
        if shown is None or not shown.latencies_s.size or not self._area.contains(event.position()):
            self._read(None)
            return
        xs = self._x(s_to_ms(shown.latencies_s))
        self._read(int(np.argmin(np.abs(xs - event.position().x()))))

    def leaveEvent(self, event: QEvent) -> None:
        """Read off nothing more."""
        super().leaveEvent(event)
        self._read(None)

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Move the cursor from latency to latency."""
        size = 0 if self._shown is None else self._shown.latencies_s.size
        at = self._at
        places = {
            Qt.Key.Key_Left: max(0, at - 1) if at is not None else size - 1,
            Qt.Key.Key_Right: min(size - 1, at + 1) if at is not None else 0,
            Qt.Key.Key_Home: 0,
            Qt.Key.Key_End: size - 1,
        }
        key = Qt.Key(event.key())
        if key in places and size:
            self._read(places[key])
        else:
            super().keyPressEvent(event)

    def focusInEvent(self, event: QFocusEvent) -> None:
        """Show where the keys are."""
        super().focusInEvent(event)
        self.update()

    def focusOutEvent(self, event: QFocusEvent) -> None:
        """Show that the keys are elsewhere."""
        super().focusOutEvent(event)
        self._read(None)
        self.update()

    def _read(self, at: int | None) -> None:
        if at != self._at:
            self._at = at
            self._describe()
            self.update()

    def _describe(self) -> None:
        """Tell screen readers what is drawn or read off."""
        text = self.reading() or self._message or self._words
        if text != self.accessibleDescription():
            self.setAccessibleDescription(text)
            self.setToolTip(text)
            QAccessible.updateAccessibility(QAccessibleEvent(self, QAccessible.Event.DescriptionChanged))

    @property
    def _words(self) -> str:
        shown = self._shown
        if shown is None or not shown.latencies_s.size:
            return ""
        least = int(np.argmin(shown.share))
        return (
            f"Least at {s_to_ms(float(shown.latencies_s[least])):.0f} ms: "
            f"{100.0 * float(shown.share[least]):.0f} % of a response comes back"
        )

    # Painting

    @property
    def _area(self) -> QRectF:
        metrics = QFontMetricsF(self.font())
        left = metrics.horizontalAdvance("100 %") + 8
        return QRectF(self.rect()).adjusted(left, metrics.height() + 4, -6, -metrics.height() - 5)

    def _x(self, ms: Values | float) -> Values:
        area = self._area
        part = np.clip(np.asarray(ms) / LAST_MS, 0.0, 1.0)
        return np.asarray(area.left() + part * area.width())

    def _y(self, percent: Values | float) -> Values:
        area = self._area
        part = (np.clip(percent, _LEAST_PERCENT, MOST_PERCENT) - _LEAST_PERCENT) / (
            MOST_PERCENT - _LEAST_PERCENT
        )
        return np.asarray(area.bottom() - part * area.height())

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Draw axes, marked stretches, limit and curve, or the words instead of them."""
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        shown = self._shown
        if shown is None:
            painter.setPen(QColor(self._theme.quiet))
            box = QRectF(self.rect()).adjusted(_TEXT_PX, 4, -_TEXT_PX, -4)
            painter.drawText(box, int(Qt.AlignmentFlag.AlignCenter | Qt.TextFlag.TextWordWrap), self._message)
        else:
            self._paint_marked(painter, shown)
            self._paint_axes(painter)
            self._paint_curve(painter, shown)
            painter.setPen(QColor(self._theme.text))
            top = QRectF(0, 0, self.width() - 4, QFontMetricsF(self.font()).height() + 2)
            painter.drawText(top, Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter, self.reading())
        if self.hasFocus():
            painter.setBrush(Qt.BrushStyle.NoBrush)
            painter.setPen(QPen(QColor(self._theme.accent), 1.0, Qt.PenStyle.DotLine))
            painter.drawRect(QRectF(self.rect()).adjusted(1, 1, -1, -1))

    def _paint_marked(self, painter: QPainter, shown: AbsorptionView) -> None:
        """Hatch what is marked as decay-fitted: known without its colour."""
        area = self._area
        metrics = QFontMetricsF(self.font())
        for start_s, stop_s in shown.marked_s:
            left, right = (float(self._x(s_to_ms(edge))) for edge in (start_s, stop_s))
            if right - left < 0.5:
                continue
            box = QRectF(left, area.top(), right - left, area.height())
            painter.fillRect(box, QColor(self._theme.attention_soft))
            painter.fillRect(box, QBrush(QColor(self._theme.attention), Qt.BrushStyle.BDiagPattern))
            if metrics.horizontalAdvance("decay-fitted") + 8 < box.width():
                # On a ground of its own, or the hatching runs through the words.
                words = QRectF(left + 3, area.top() + 2, 0, metrics.height())
                words.setWidth(metrics.horizontalAdvance("decay-fitted") + 4)
                painter.fillRect(words, QColor(self._theme.attention_soft))
                painter.setPen(QColor(self._theme.text))
                painter.drawText(words, Qt.AlignmentFlag.AlignCenter, "decay-fitted")

    def _paint_axes(self, painter: QPainter) -> None:
        area, theme, metrics = self._area, self._theme, QFontMetricsF(self.font())
        thin = QPen(QColor(theme.line), 1.0)
        right_of = Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter
        limit = 100.0 * LEAST_RECOVERED
        for percent in (*_LINES_PERCENT, limit):
            y = math.floor(float(self._y(percent))) + 0.5
            is_limit = percent == limit
            pen = QPen(QColor(theme.attention), 1.2, Qt.PenStyle.DashLine) if is_limit else thin
            painter.setPen(pen)
            painter.drawLine(QPointF(area.left(), y), QPointF(area.right(), y))
            if not is_limit:
                painter.setPen(QColor(theme.quiet))
                box = QRectF(0, y - metrics.height() / 2, area.left() - 5, metrics.height())
                painter.drawText(box, right_of, f"{percent:.0f} %")
        self._paint_limit(painter, limit)
        unit_left = area.right() - metrics.horizontalAdvance(" ms")
        for ms in ticks(0.0, LAST_MS, 5):
            x = math.floor(float(self._x(ms))) + 0.5
            half = metrics.horizontalAdvance(f"{ms:g}") / 2 + 2
            painter.setPen(thin)
            painter.drawLine(QPointF(x, area.bottom()), QPointF(x, area.bottom() + 3))
            if x + half < unit_left:
                painter.setPen(QColor(theme.quiet))
                box = QRectF(x - half, area.bottom() + 3, 2 * half, metrics.height())
                painter.drawText(box, Qt.AlignmentFlag.AlignCenter, f"{ms:g}")
        painter.setPen(QColor(theme.quiet))
        below = QRectF(unit_left, area.bottom() + 3, area.right() - unit_left + 4, metrics.height())
        painter.drawText(below, Qt.AlignmentFlag.AlignRight, "ms")

    def _paint_limit(self, painter: QPainter, limit: float) -> None:
        """Name the limit below its line, at the right, where it is seldom crossed."""
        metrics = QFontMetricsF(self.font())
        text = f"{limit:.0f} %"
        box = QRectF(0, float(self._y(limit)) + 1, metrics.horizontalAdvance(text) + 4, metrics.height())
        box.moveRight(self._area.right())
        painter.setPen(QColor(self._theme.attention))
        painter.drawText(box, Qt.AlignmentFlag.AlignRight, text)

    def _paint_curve(self, painter: QPainter, shown: AbsorptionView) -> None:
        xs = self._x(s_to_ms(shown.latencies_s)).tolist()
        low, share, high = (self._y(100.0 * v).tolist() for v in (shown.low, shown.share, shown.high))
        soft = QColor(self._theme.accent)
        soft.setAlpha(60)
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(soft)
        edge = [*zip(xs, low, strict=True), *reversed([*zip(xs, high, strict=True)])]
        painter.drawPolygon(QPolygonF([QPointF(x, y) for x, y in edge]))
        painter.setPen(QPen(QColor(self._theme.accent), 1.8))
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.drawPolyline(QPolygonF([QPointF(x, y) for x, y in zip(xs, share, strict=True)]))
        painter.setBrush(QColor(self._theme.accent))
        for place, (x, y) in enumerate(zip(xs, share, strict=True)):
            size = 2 * _DOT_PX if place == self._at else _DOT_PX
            painter.drawEllipse(QPointF(x, y), size, size)
