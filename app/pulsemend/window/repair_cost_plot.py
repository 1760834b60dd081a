"""Painted picture of what the repair costs: size of the error against latency."""

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

from pulsemend.mending.repair_cost import RepairCost
from pulsemend.units import s_to_ms, v_to_uv
from pulsemend.window.pulse_curves import ticks
from pulsemend.window.theme import Theme

PAGE_STEPS = 10
_LINES = 9

Values = NDArray[np.float64]


class RepairCostPlot(QWidget):
    """Median of the error and what most errors stay below, with a reading at pointer or cursor.

    Parameters
    ----------
    theme : Theme
        Colours.
    """

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._theme = theme
        self._cost: RepairCost | None = None
        self._at: int | None = None
        self.setMouseTracking(True)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)
        self.setAccessibleName("Error of the repair by latency")

    def show_cost(self, cost: RepairCost) -> None:
        """Draw a result: the curves of the plan's own fill."""
        self._cost, self._at = cost, None
        self._describe()
        self.update()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self._theme = theme
        self.update()

    def reading(self) -> str:
        """Words on the latency at the cursor; empty without one."""
        cost = self._cost
        if cost is None or self._at is None:
            return ""
        own = cost.methods[0]
        ms = s_to_ms(float(cost.latencies_s[self._at]))
        median, most = (v_to_uv(float(v[self._at])) for v in (own.median_v, own.most_v))
        return f"{ms:.0f} ms: {median:.2f} \u00b5V in the middle, 95 % below {most:.2f} \u00b5V"

    def sizeHint(self) -> QSize:
        """Give room for legible curves."""
        return QSize(220, _LINES * self.fontMetrics().height())

    def minimumSizeHint(self) -> QSize:
        """Give room for axes and a curve."""
        return QSize(160, self.sizeHint().height())

    # Reading off

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Read off under the pointer."""
        cost = self._cost
        if cost is None or not self._area.contains(event.position()):
            self._read(None)
            return
        xs = self._x(cost.latencies_s)
        self._read(int(np.argmin(np.abs(xs - event.position().x()))))

    def leaveEvent(self, event: QEvent) -> None:
        """Read off nothing more."""
        super().leaveEvent(event)
        self._read(None)

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Move the cursor from latency to latency; it begins at the gap's end."""
        cost = self._cost
        if cost is None:
            super().keyPressEvent(event)
            return
        last = cost.latencies_s.size - 1
        start = int(np.argmin(np.abs(cost.latencies_s - cost.gap_s[1])))
        at = start if self._at is None else self._at
        step = 0 if self._at is None else 1
        places = {
            Qt.Key.Key_Left: at - step,
            Qt.Key.Key_Right: at + step,
            Qt.Key.Key_PageUp: at - PAGE_STEPS,
            Qt.Key.Key_PageDown: at + PAGE_STEPS,
            Qt.Key.Key_Home: 0,
            Qt.Key.Key_End: last,
        }
        key = Qt.Key(event.key())
        if key in places:
            self._read(min(max(places[key], 0), last))
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
        text = self.reading() or self._words
        if text != self.accessibleDescription():
            self.setAccessibleDescription(text)
            self.setToolTip(text)
            QAccessible.updateAccessibility(QAccessibleEvent(self, QAccessible.Event.DescriptionChanged))

    @property
    def _words(self) -> str:
        cost = self._cost
        if cost is None:
            return ""
        place = int(np.argmax(cost.methods[0].most_v))
        return (
            f"Largest at {s_to_ms(float(cost.latencies_s[place])):.0f} ms: "
            f"95 % of the errors below {v_to_uv(float(cost.methods[0].most_v[place])):.1f} \u00b5V"
        )

    # Painting

    @property
    def _area(self) -> QRectF:
        metrics = QFontMetricsF(self.font())
        left = metrics.horizontalAdvance("1000 \u00b5V") + 8
        return QRectF(self.rect()).adjusted(left, metrics.height() + 4, -6, -metrics.height() - 5)

    @property
    def _top_uv(self) -> float:
        cost = self._cost
        return 1.0 if cost is None else max(1e-3, 1.05 * v_to_uv(float(cost.methods[0].most_v.max())))

    def _x(self, since_s: Values | float) -> Values:
        cost, area = self._cost, self._area
        first, last = (0.0, 1.0) if cost is None else (cost.latencies_s[0], cost.latencies_s[-1])
        return np.asarray(area.left() + np.clip((since_s - first) / (last - first), 0.0, 1.0) * area.width())

    def _y(self, volts: Values | float) -> Values:
        area = self._area
        part = np.asarray(volts) / (self._top_uv / v_to_uv(1.0))
        return np.asarray(area.bottom() - np.clip(part, 0.0, 1.0) * area.height())

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Draw gap, axes, curves and the earliest trustworthy latency."""
        cost = self._cost
        if cost is None:
            return
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        self._paint_gap(painter, cost)
        self._paint_axes(painter, cost)
        self._paint_curves(painter, cost)
        self._paint_earliest(painter, cost)
        painter.setPen(QColor(self._theme.text))
        top = QRectF(0, 0, self.width() - 4, QFontMetricsF(self.font()).height() + 2)
        painter.drawText(top, Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter, self.reading())
        if self.hasFocus():
            painter.setBrush(Qt.BrushStyle.NoBrush)
            painter.setPen(QPen(QColor(self._theme.accent), 1.0, Qt.PenStyle.DotLine))
            painter.drawRect(QRectF(self.rect()).adjusted(1, 1, -1, -1))

    def _paint_gap(self, painter: QPainter, cost: RepairCost) -> None:
        """Shade the gap, and hatch it: known without its colour; at least three pixels wide."""
        left, right = (float(self._x(edge)) for edge in cost.gap_s)
        box = QRectF(left, self._area.top(), max(3.0, right - left), self._area.height())
        painter.fillRect(box, QColor(self._theme.gap))
        painter.fillRect(box, QBrush(QColor(self._theme.quiet), Qt.BrushStyle.BDiagPattern))

    def _paint_axes(self, painter: QPainter, cost: RepairCost) -> None:
        area, metrics = self._area, QFontMetricsF(self.font())
        thin = QPen(QColor(self._theme.line), 1.0)
        beside = Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter
        for uv in ticks(0.0, self._top_uv, 3):
            y = math.floor(float(self._y(uv / v_to_uv(1.0)))) + 0.5
            painter.setPen(thin)
            painter.drawLine(QPointF(area.left(), y), QPointF(area.right(), y))
            painter.setPen(QColor(self._theme.quiet))
            box = QRectF(0, y - metrics.height() / 2, area.left() - 5, metrics.height())
            painter.drawText(box, beside, f"{uv:g} \u00b5V")
        unit_left = area.right() - metrics.horizontalAdvance(" ms")
        first_ms, last_ms = (s_to_ms(float(cost.latencies_s[i])) for i in (0, -1))
        for ms in ticks(first_ms, last_ms, 5):
            x = math.floor(float(self._x(ms / s_to_ms(1.0)))) + 0.5
            half = metrics.horizontalAdvance(f"{ms:g}") / 2 + 2
            painter.setPen(thin)
            painter.drawLine(QPointF(x, area.bottom()), QPointF(x, area.bottom() + 3))
            if x + half < unit_left:
                painter.setPen(QColor(self._theme.quiet))
                box = QRectF(x - half, area.bottom() + 3, 2 * half, metrics.height())
                painter.drawText(box, Qt.AlignmentFlag.AlignCenter, f"{ms:g}")
        painter.setPen(QColor(self._theme.quiet))
        below = QRectF(unit_left, area.bottom() + 3, area.right() - unit_left + 4, metrics.height())
        painter.drawText(below, Qt.AlignmentFlag.AlignRight, "ms")

    def _paint_curves(self, painter: QPainter, cost: RepairCost) -> None:
        """Draw the median as a line and what most stay below as the edge of an area under it."""
        own = cost.methods[0]
        xs = self._x(cost.latencies_s).tolist()
        soft = QColor(self._theme.accent)
        soft.setAlpha(60)
        most = [QPointF(x, y) for x, y in zip(xs, self._y(own.most_v).tolist(), strict=True)]
        bottom = self._area.bottom()
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(soft)
        painter.drawPolygon(QPolygonF([QPointF(xs[0], bottom), *most, QPointF(xs[-1], bottom)]))
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.setPen(QPen(QColor(self._theme.accent), 1.0))
        painter.drawPolyline(QPolygonF(most))
        painter.setPen(QPen(QColor(self._theme.accent), 1.8))
        median = zip(xs, self._y(own.median_v).tolist(), strict=True)
        painter.drawPolyline(QPolygonF([QPointF(x, y) for x, y in median]))
        if self._at is not None:
            painter.setPen(QPen(QColor(self._theme.text), 1.0))
            x = xs[self._at]
            painter.drawLine(QPointF(x, self._area.top()), QPointF(x, bottom))

    def _paint_earliest(self, painter: QPainter, cost: RepairCost) -> None:
        """Draw a dashed line at the earliest trustworthy latency, with its name where there is room."""
        earliest_s = cost.methods[0].earliest_s
        if earliest_s is None:
            return
        area, metrics = self._area, QFontMetricsF(self.font())
        x = float(self._x(earliest_s))
        painter.setPen(QPen(QColor(self._theme.attention), 1.4, Qt.PenStyle.DashLine))
        painter.drawLine(QPointF(x, area.top()), QPointF(x, area.bottom()))
        text = f"trustworthy from {s_to_ms(earliest_s):.0f} ms"
        if x + metrics.horizontalAdvance(text) + 8 > area.right():
            text = f"{s_to_ms(earliest_s):.0f} ms"
        box = QRectF(x + 4, area.top(), metrics.horizontalAdvance(text) + 4, metrics.height())
        if box.right() > area.right():
            box.moveRight(x - 4)
        painter.setPen(QColor(self._theme.attention))
        painter.drawText(box, Qt.AlignmentFlag.AlignLeft | Qt.AlignmentFlag.AlignVCenter, text)
