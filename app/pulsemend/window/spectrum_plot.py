"""A painted spectrum: frequency and amplitude density, both logarithmic, with curves told apart by dashes."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QEvent, QPointF, QRectF, QSize, Qt
from PySide6.QtGui import (
    QAccessible,
    QAccessibleEvent,
    QColor,
    QFocusEvent,
    QFontMetricsF,
    QKeyEvent,
    QMouseEvent,
    QPainter,
    QPainterPath,
    QPaintEvent,
    QPen,
    QPolygonF,
)
from PySide6.QtWidgets import QSizePolicy, QWidget

from pulsemend.model.vocabulary import Role
from pulsemend.window.theme import Theme
from pulsemend.window.traces.clock import number

UNIT = "µV/√Hz"
MOST_CURVES = 6
"""Curves that can be told apart."""
_MOST_DECADES = 5
_DASHES: tuple[list[float], ...] = ([], [6, 3], [2, 2], [8, 3, 2, 3], [1, 3], [12, 4])
_COLOURS = (None, Role.CUE, Role.SAMPLE, Role.PROBE, Role.UNDECIDED, Role.FIXATION)
_SAMPLE_PX = 30.0
_LEGEND_BESIDE_FROM_PX = 420
"""Width from which the names have room beside the curves; below they lie over them."""

Values = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Curve:
    """One curve: its name and uV/sqrt(Hz) per frequency."""

    name: str
    values: Values
    bad: bool = False


@dataclass(frozen=True, eq=False)
class Spread:
    """Median over channels with the middle half and the whole range; uV/sqrt(Hz) per frequency."""

    lowest: Values
    low: Values
    median: Values
    high: Values
    highest: Values


@dataclass(frozen=True, eq=False)
class SpectrumPicture:
    """What is drawn.

    Parameters
    ----------
    frequency_hz : array, shape (n,)
        Rising, above zero.
    spread : Spread or None
    curves : tuple of Curve
        At most `MOST_CURVES`.
    line_hz : float
        Line frequency to mark, with its multiples; 0 for none.
    message : str
        Shown instead where there is nothing to draw.
    """

    frequency_hz: Values = field(default_factory=lambda: np.empty(0))
    spread: Spread | None = None
    curves: tuple[Curve, ...] = ()
    line_hz: float = 0.0
    message: str = ""

    @property
    def is_empty(self) -> bool:
        """Whether there is nothing to draw."""
        return self.frequency_hz.size < 2 or (self.spread is None and not self.curves)


@dataclass(frozen=True)
class Axes:
    """Logarithmic axes in a rectangle.

    Parameters
    ----------
    area : QRectF
        Pixels.
    low_hz, high_hz : float
        Left and right edge.
    low, high : float
        Lower and upper edge, uV/sqrt(Hz).
    """

    area: QRectF
    low_hz: float
    high_hz: float
    low: float
    high: float

    def x(self, hz: Values | float) -> Values:
        """Pixels from the left of the widget."""
        part = np.log(np.asarray(hz) / self.low_hz) / math.log(self.high_hz / self.low_hz)
        return np.asarray(self.area.left() + part * self.area.width())

    def y(self, value: Values | float) -> Values:
        """Pixels from the top of the widget."""
        part = np.log(np.maximum(value, self.low * 0.1) / self.low) / math.log(self.high / self.low)
        return np.asarray(self.area.bottom() - part * self.area.height())

    def hz(self, x: float) -> float:
        """Frequency at a pixel."""
        return float(
            self.low_hz * (self.high_hz / self.low_hz) ** ((x - self.area.left()) / self.area.width())
        )


class SpectrumPlot(QWidget):
    """The picture, with a reading under the pointer or, by Left and Right, under a cursor.

    Parameters
    ----------
    theme : Theme
        Colours.
    parent : QWidget or None
        As usual.
    """

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._theme = theme
        self._shown = SpectrumPicture()
        self._at: int | None = None
        self.setMouseTracking(True)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self.setAccessibleName("Spectrum of the part in view")

    @property
    def shown(self) -> SpectrumPicture:
        """What is drawn."""
        return self._shown

    def show_picture(self, picture: SpectrumPicture) -> None:
        """Draw something else."""
        self._shown = picture
        if self._at is not None and self._at >= picture.frequency_hz.size:
            self._at = None
        self._describe()
        self.update()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self._theme = theme
        self.update()

    def reading(self) -> list[str]:
        """Words on what stands at the cursor: the frequency, then name and value of each curve."""
        if self._at is None or self._shown.is_empty:
            return []
        at = self._at
        return [
            f"{self._shown.frequency_hz[at]:.1f} Hz",
            *(f"{name}: {number(float(values[at]))} {UNIT}" for name, values in self._lines()),
        ]

    def sizeHint(self) -> QSize:
        """Room for a legible curve."""
        return QSize(480, 260)

    def minimumSizeHint(self) -> QSize:
        """Room for axes and a curve."""
        return QSize(220, 130)

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Read off under the pointer."""
        axes = self.axes()
        if axes is None or not axes.area.contains(event.position()):
            self._read(None)
            return
        hz = axes.hz(event.position().x())
        self._read(int(np.argmin(np.abs(np.log(self._shown.frequency_hz / hz)))))

    def leaveEvent(self, event: QEvent) -> None:
        """Read off nothing more."""
        super().leaveEvent(event)
        self._read(None)

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Move the cursor from frequency to frequency."""
        last = self._shown.frequency_hz.size - 1
        at = self._at
        places = {
            Qt.Key.Key_Left: max(0, at - 1) if at is not None else last,
            Qt.Key.Key_Right: min(last, at + 1) if at is not None else 0,
            Qt.Key.Key_Home: 0,
            Qt.Key.Key_End: last,
        }
        key = Qt.Key(event.key())
        if key in places and not self._shown.is_empty:
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

    def axes(self) -> Axes | None:
        """Lay the axes for what is drawn; None if there is nothing."""
        shown = self._shown
        if shown.is_empty:
            return None
        metrics = QFontMetricsF(self.font())
        left = max(metrics.horizontalAdvance("0.001"), metrics.horizontalAdvance("100")) + 10
        right = self._legend_width() + 10
        area = QRectF(self.rect()).adjusted(left, metrics.height() + 9, -right, -metrics.height() - 6)
        low, high = self._range()
        return Axes(area, float(shown.frequency_hz[0]), float(shown.frequency_hz[-1]), low, high)

    def _range(self) -> tuple[float, float]:
        """Round lower and upper edge around everything drawn."""
        spread = self._shown.spread
        every = [curve.values for curve in self._shown.curves]
        every += [spread.lowest, spread.highest] if spread is not None else []
        highest = max(float(np.max(values)) for values in every)
        if highest <= 0:
            return 0.1, 1.0
        positive = [float(np.min(values[values > 0])) for values in every if np.any(values > 0)]
        top = _round_up(highest)
        low = max(1 / _round_up(1 / min(positive)), top / 10**_MOST_DECADES)
        return min(low, 0.1 * top), top

    def _lines(self) -> Iterator[tuple[str, Values]]:
        if self._shown.spread is not None:
            yield "median", self._shown.spread.median
        for curve in self._shown.curves:
            yield curve.name, curve.values

    def _read(self, at: int | None) -> None:
        if at != self._at:
            self._at = at
            self._describe()
            self.update()

    def _describe(self) -> None:
        """Tell screen readers what is drawn or read off."""
        names = ", ".join(name for name, _ in self._lines())
        text = "; ".join(self.reading()) or self._shown.message or names
        if text != self.accessibleDescription():
            self.setAccessibleDescription(text)
            QAccessible.updateAccessibility(QAccessibleEvent(self, QAccessible.Event.DescriptionChanged))

    # Painting

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Draw axes, spread, curves, names and reading."""
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        axes = self.axes()
        if axes is None:
            painter.setPen(QColor(self._theme.quiet))
            wrap = Qt.AlignmentFlag.AlignCenter | Qt.TextFlag.TextWordWrap
            painter.drawText(QRectF(self.rect()).adjusted(12, 8, -12, -8), int(wrap), self._shown.message)
        else:
            self._paint_axes(painter, axes)
            painter.save()
            painter.setClipRect(axes.area)
            self._paint_spread(painter, axes)
            for place, curve in enumerate(self._shown.curves):
                painter.setPen(self._pen(place))
                painter.drawPath(_path(axes, self._shown.frequency_hz, curve.values))
            self._paint_cursor(painter, axes)
            painter.restore()
            self._paint_legend(painter, axes)
        if self.hasFocus():
            painter.setBrush(Qt.BrushStyle.NoBrush)
            painter.setPen(QPen(QColor(self._theme.accent), 1.0, Qt.PenStyle.DotLine))
            painter.drawRect(QRectF(self.rect()).adjusted(1, 1, -1, -1))

    def _paint_axes(self, painter: QPainter, axes: Axes) -> None:
        theme, metrics, area = self._theme, QFontMetricsF(self.font()), axes.area
        thin = QPen(QColor(theme.line), 1.0)
        x_free, y_free = -math.inf, math.inf
        for value in _round_numbers(axes.low, axes.high):
            y = _crisp(float(axes.y(value)))
            painter.setPen(thin)
            painter.drawLine(QPointF(area.left(), y), QPointF(area.right(), y))
            if y + metrics.height() <= y_free:
                painter.setPen(QColor(theme.quiet))
                box = QRectF(0, y - metrics.height() / 2, area.left() - 6, metrics.height())
                painter.drawText(
                    box, Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter, number(value)
                )
                y_free = y
        unit_left = area.right() - metrics.horizontalAdvance(" Hz")
        for hz in _round_numbers(axes.low_hz, axes.high_hz):
            x = _crisp(float(axes.x(hz)))
            painter.setPen(thin)
            painter.drawLine(QPointF(x, area.top()), QPointF(x, area.bottom()))
            half = metrics.horizontalAdvance(number(hz)) / 2
            if x - half > x_free and x + half < unit_left:
                painter.setPen(QColor(theme.quiet))
                # The first one keeps clear of the lowest value beside the axis.
                left = max(x - half - 2, area.left() - 2)
                box = QRectF(left, area.bottom() + 3, 2 * half + 4, metrics.height())
                painter.drawText(box, Qt.AlignmentFlag.AlignCenter, number(hz))
                x_free = x + half + 6
        painter.setPen(QColor(theme.quiet))
        below = QRectF(unit_left, area.bottom() + 3, area.right() - unit_left + 4, metrics.height())
        painter.drawText(below, Qt.AlignmentFlag.AlignRight, "Hz")
        painter.drawText(QPointF(4, metrics.ascent() + 1), UNIT)
        self._paint_line_frequency(painter, axes, metrics)

    def _paint_line_frequency(self, painter: QPainter, axes: Axes, metrics: QFontMetricsF) -> None:
        line_hz, area = self._shown.line_hz, axes.area
        if line_hz <= 0:
            return
        painter.setPen(QPen(QColor(self._theme.attention), 1.0, Qt.PenStyle.DashLine))
        for multiple in range(1, int(axes.high_hz / line_hz) + 1):
            x = _crisp(float(axes.x(multiple * line_hz)))
            painter.drawLine(QPointF(x, area.top()), QPointF(x, area.bottom()))
        if axes.low_hz <= line_hz <= axes.high_hz:
            text = f"line {line_hz:g} Hz"
            x = float(axes.x(line_hz)) - metrics.horizontalAdvance(text) / 2
            x = min(x, area.right() - metrics.horizontalAdvance(text))
            painter.setPen(QColor(self._theme.attention))
            painter.drawText(QPointF(x, metrics.ascent() + 1), text)

    def _paint_spread(self, painter: QPainter, axes: Axes) -> None:
        spread, hz = self._shown.spread, self._shown.frequency_hz
        if spread is None:
            return
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(QColor(self._theme.accent_soft))
        painter.drawPolygon(_between(axes, hz, spread.low, spread.high))
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.setPen(self._edge_pen())
        for values in (spread.lowest, spread.highest):
            painter.drawPath(_path(axes, hz, values))
        painter.setPen(self._median_pen())
        painter.drawPath(_path(axes, hz, spread.median))

    def _paint_cursor(self, painter: QPainter, axes: Axes) -> None:
        if self._at is None:
            return
        x = _crisp(float(axes.x(float(self._shown.frequency_hz[self._at]))))
        painter.setPen(QPen(QColor(self._theme.text), 1.0))
        painter.drawLine(QPointF(x, axes.area.top()), QPointF(x, axes.area.bottom()))
        painter.setBrush(QColor(self._theme.text))
        for _, values in self._lines():
            painter.drawEllipse(QPointF(x, float(axes.y(float(values[self._at])))), 2.0, 2.0)

    def _paint_legend(self, painter: QPainter, axes: Axes) -> None:
        """Name the curves, with their values while reading."""
        metrics = QFontMetricsF(self.font())
        beside = self._legend_width()
        width = beside or min(self._legend_needs(), 0.6 * axes.area.width())
        left = axes.area.right() + 8 if beside else axes.area.right() - width - 4
        entries = self._entries()
        if not beside:
            ground = QColor(self._theme.panel)
            ground.setAlpha(225)
            height = (len(entries) + 1) * metrics.height()
            painter.fillRect(QRectF(left, axes.area.top() + 2, width, height), ground)
        right_of = Qt.AlignmentFlag.AlignLeft | Qt.AlignmentFlag.AlignVCenter
        y = axes.area.top() + 2
        for text, pen in entries:
            middle = y + metrics.height() / 2
            if isinstance(pen, QColor):
                painter.fillRect(QRectF(left + 2, middle - 4, _SAMPLE_PX - 8, 8), pen)
            elif pen is not None:
                painter.setPen(pen)
                painter.drawLine(QPointF(left + 2, middle), QPointF(left + _SAMPLE_PX - 6, middle))
            painter.setPen(QColor(self._theme.text))
            room = width - _SAMPLE_PX
            elided = metrics.elidedText(text, Qt.TextElideMode.ElideMiddle, room)
            painter.drawText(QRectF(left + _SAMPLE_PX, y, room, metrics.height()), right_of, elided)
            y += metrics.height()

    def _entries(self) -> list[tuple[str, QPen | QColor | None]]:
        """Lines of the legend with what is drawn before them; the first one is the frequency read off."""
        at, spread = self._at, self._shown.spread

        def value(values: Values) -> str:
            return "" if at is None else f"  {number(float(values[at]))}"

        entries: list[tuple[str, QPen | QColor | None]] = []
        entries.append(("" if at is None else f"{self._shown.frequency_hz[at]:.1f} Hz", None))
        if spread is not None:
            entries.append((f"median{value(spread.median)}", self._median_pen()))
            entries.append(("middle half", QColor(self._theme.accent_soft)))
            entries.append(("least and most", self._edge_pen()))
        for place, curve in enumerate(self._shown.curves):
            bad = " (bad)" if curve.bad else ""
            entries.append((f"{curve.name}{bad}{value(curve.values)}", self._pen(place)))
        return entries

    def _legend_needs(self) -> float:
        metrics = QFontMetricsF(self.font())
        names = [f"{curve.name} (bad)" for curve in self._shown.curves]
        return max(metrics.horizontalAdvance(f"{name}  0.000") for name in ("median", *names)) + _SAMPLE_PX

    def _legend_width(self) -> float:
        """Width of the names beside the curves; 0 where they lie over them."""
        if self.width() < _LEGEND_BESIDE_FROM_PX:
            return 0.0
        return min(max(self._legend_needs(), 130.0), 0.33 * self.width())

    def _edge_pen(self) -> QPen:
        return QPen(QColor(self._theme.trace_recorded), 1.0, Qt.PenStyle.DotLine)

    def _median_pen(self) -> QPen:
        return QPen(QColor(self._theme.trace), 1.6)

    def _pen(self, place: int) -> QPen:
        role = _COLOURS[place % len(_COLOURS)]
        pen = QPen(QColor(self._theme.accent if role is None else self._theme.roles[role]), 1.8)
        if _DASHES[place % len(_DASHES)]:
            pen.setDashPattern(_DASHES[place % len(_DASHES)])
        return pen


def _crisp(pixel: float) -> float:
    """Middle of a pixel, where a line of one pixel is not smeared over two."""
    return math.floor(pixel) + 0.5


def _path(axes: Axes, hz: Values, values: Values) -> QPainterPath:
    path = QPainterPath()
    path.addPolygon(QPolygonF(_points(axes, hz, values)))
    return path


def _between(axes: Axes, hz: Values, low: Values, high: Values) -> QPolygonF:
    return QPolygonF([*_points(axes, hz, low), *reversed(_points(axes, hz, high))])


def _points(axes: Axes, hz: Values, values: Values) -> list[QPointF]:
    return [QPointF(x, y) for x, y in zip(axes.x(hz).tolist(), axes.y(values).tolist(), strict=True)]


def _round_up(value: float) -> float:
    """Least of 1, 2 and 5 times a power of ten that is not below a value."""
    power = 10.0 ** math.floor(math.log10(value))
    return next(factor * power for factor in (1.0, 2.0, 5.0, 10.0) if factor * power >= value * (1 - 1e-9))


def _round_numbers(low: float, high: float) -> Iterator[float]:
    """1, 2 and 5 times powers of ten within [low, high]."""
    for exponent in range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1):
        for factor in (1.0, 2.0, 5.0):
            value = factor * 10.0**exponent
            if low * (1 - 1e-9) <= value <= high * (1 + 1e-9):
                yield value
