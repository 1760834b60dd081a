"""The channels on the head, seen from above; those without a position stand in a list beside it."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QEvent, QLineF, QPointF, QRectF, QSize, Qt, Signal
from PySide6.QtGui import (
    QAccessible,
    QAccessibleEvent,
    QColor,
    QFocusEvent,
    QFont,
    QFontMetricsF,
    QHelpEvent,
    QKeyEvent,
    QMouseEvent,
    QPainter,
    QPainterPath,
    QPaintEvent,
    QPen,
    QResizeEvent,
)
from PySide6.QtWidgets import QSizePolicy, QToolTip, QWidget

from pulsemend.window.theme import Theme

Boxes = NDArray[np.float64]

_MARGIN = 8.0
_LEAST_EXTENT = 1.16
"""Radii from the middle to the edge of the picture: room for nose and ears."""
_REACH = 14.0
"""Pixels within which a click or the pointer means a channel."""
_LARGEST_SHAPE, _SMALLEST_SHAPE = 11.0, 4.0
_SMALL = 0.82
_LIST_TITLE = "no position"
_STEPS = {
    Qt.Key.Key_Left: (-1.0, 0.0),
    Qt.Key.Key_Right: (1.0, 0.0),
    Qt.Key.Key_Up: (0.0, -1.0),
    Qt.Key.Key_Down: (0.0, 1.0),
}


@dataclass(frozen=True)
class MapChannel:
    """One channel of the map.

    Parameters
    ----------
    name : str
    place : (float, float) or None
        Right and front, as `signal.head_plane.lay_flat` gives it; None without a position.
    bad : bool
    words : str
        Name and state, for tooltips and screen readers.
    """

    name: str
    place: tuple[float, float] | None
    bad: bool
    words: str


@dataclass
class _Layout:
    """Where everything is, in pixels."""

    middle: QPointF = field(default_factory=QPointF)
    radius: float = 0.0
    spots: dict[str, QPointF] = field(default_factory=dict)
    listed: dict[str, QRectF] = field(default_factory=dict)
    title: QRectF | None = None
    more: tuple[QRectF, int] | None = None
    shape: float = _LARGEST_SHAPE


class HeadMap(QWidget):
    """The map. A click picks a channel, with Ctrl it adds or takes away one.

    By keyboard: arrows go from channel to channel, Return picks the current one, Space adds it or takes it
    away.

    Parameters
    ----------
    theme : Theme
        Colours.
    parent : QWidget or None
        As usual.

    Attributes
    ----------
    picked : Signal(object)
        Frozenset of the names picked.
    """

    picked = Signal(object)

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._theme = theme
        self._channels: dict[str, MapChannel] = {}
        self._picked: frozenset[str] = frozenset()
        self._hovered: str | None = None
        self._current: str | None = None
        self._layout = _Layout()
        self._boxes: dict[str, QRectF] | None = None
        self.setMouseTracking(True)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self.setAccessibleName("Channels on the head")
        self._describe()

    # What it shows

    def show_channels(self, channels: Sequence[MapChannel]) -> None:
        """Show other channels, or other states of them."""
        shown = {channel.name: channel for channel in channels}
        if shown == self._channels:
            return
        self._channels = shown
        self._hovered = self._hovered if self._hovered in shown else None
        self._current = self._current if self._current in shown else None
        self._lay_out()
        self._describe()
        self.update()

    def show_picked(self, picked: frozenset[str]) -> None:
        """Show which channels are picked."""
        if picked != self._picked:
            self._picked = picked
            self._boxes = None
            self._describe()
            self.update()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self._theme = theme
        self.update()

    def spot(self, name: str) -> QPointF | None:
        """Say where a channel is drawn; None if there is no room for it in the list."""
        if name in self._layout.spots:
            return self._layout.spots[name]
        box = self._layout.listed.get(name)
        return None if box is None else QPointF(box.left() + box.height() / 2, box.center().y())

    def named(self) -> frozenset[str]:
        """Names that stand beside their shapes now; the others appear under the pointer."""
        return frozenset(self._name_boxes()) | frozenset(self._layout.listed)

    # Events

    def sizeHint(self) -> QSize:
        """Room for a legible map."""
        return QSize(320, 260)

    def minimumSizeHint(self) -> QSize:
        """Room for a map without names."""
        return QSize(160, 130)

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Lay out anew."""
        super().resizeEvent(event)
        self._lay_out()

    def changeEvent(self, event: QEvent) -> None:
        """Lay out anew for another text size."""
        super().changeEvent(event)
        if event.type() in (QEvent.Type.FontChange, QEvent.Type.StyleChange):
            self._lay_out()
            self.update()

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """Pick what is under the pointer."""
        name = self._at(event.position())
        if event.button() == Qt.MouseButton.LeftButton and name is not None:
            self._go_to(name)
            self._pick(name, adding=bool(event.modifiers() & Qt.KeyboardModifier.ControlModifier))
        else:
            super().mousePressEvent(event)

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Name what is under the pointer."""
        self._hover(self._at(event.position()))

    def leaveEvent(self, event: QEvent) -> None:
        """Name nothing more."""
        super().leaveEvent(event)
        self._hover(None)

    def event(self, event: QEvent) -> bool:
        """Give tooltips to the channels of the list, whose names may be shortened."""
        if event.type() == QEvent.Type.ToolTip and isinstance(event, QHelpEvent):
            name = self._at(QPointF(event.pos()))
            if name is None or name not in self._layout.listed:
                QToolTip.hideText()
            else:
                QToolTip.showText(event.globalPos(), self._channels[name].words, self)
            return True
        return super().event(event)

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Go from channel to channel, and pick."""
        key = Qt.Key(event.key())
        reachable = self._reachable()
        if key in _STEPS and reachable:
            self._step(*_STEPS[key])
        elif key in (Qt.Key.Key_Return, Qt.Key.Key_Enter, Qt.Key.Key_Space) and self._current in reachable:
            self._pick(str(self._current), adding=key == Qt.Key.Key_Space)
        else:
            super().keyPressEvent(event)

    def focusInEvent(self, event: QFocusEvent) -> None:
        """Show where the keys are."""
        super().focusInEvent(event)
        if self._current is None:
            self._go_to(next(iter(self._reachable()), None))
        self.update()

    def focusOutEvent(self, event: QFocusEvent) -> None:
        """Show that the keys are elsewhere."""
        super().focusOutEvent(event)
        self.update()

    # Layout

    def _lay_out(self) -> None:
        placed = [channel for channel in self._channels.values() if channel.place is not None]
        rest = [channel for channel in self._channels.values() if channel.place is None]
        area = QRectF(self.rect()).adjusted(_MARGIN, _MARGIN, -_MARGIN, -_MARGIN)
        layout = self._layout = _Layout()
        self._boxes = None
        if rest:
            # Without any position the list has all the room.
            width = area.width() if not placed else min(self._list_width(rest), area.width() * 0.4)
            self._lay_list(QRectF(area.right() - width, area.top(), width, area.height()), rest)
            area.setRight(area.right() - width - (_MARGIN if placed else 0.0))
        if not placed:
            return
        reach = max(math.hypot(*channel.place) for channel in placed if channel.place is not None)
        extent = max(_LEAST_EXTENT, reach + 0.1)
        layout.radius = max(10.0, min(area.width(), area.height()) / 2 / extent)
        layout.middle = area.center()
        for channel in placed:
            if channel.place is not None:
                right, front = channel.place
                layout.spots[channel.name] = layout.middle + QPointF(right, -front) * layout.radius
        layout.shape = min(_LARGEST_SHAPE, max(_SMALLEST_SHAPE, 0.6 * _closest(list(layout.spots.values()))))

    def _list_width(self, rest: Sequence[MapChannel]) -> float:
        metrics = self.fontMetrics()
        widest = max(metrics.horizontalAdvance(channel.name) for channel in rest)
        title = metrics.horizontalAdvance(_LIST_TITLE)
        return max(title, widest + metrics.height() * 1.3) + _MARGIN

    def _lay_list(self, area: QRectF, rest: Sequence[MapChannel]) -> None:
        line = self.fontMetrics().height() * 1.25
        layout = self._layout
        layout.title = QRectF(area.left(), area.top(), area.width(), line)
        lines = max(1, int((area.height() - line) / line))
        widest = max(self.fontMetrics().horizontalAdvance(channel.name) for channel in rest) + line * 1.5
        columns = max(1, int(area.width() / min(widest, area.width())))
        room = lines * columns
        shown = rest if len(rest) <= room else rest[: room - 1]
        width = area.width() / columns

        def box(place: int) -> QRectF:
            column, row = divmod(place, lines)
            return QRectF(area.left() + column * width, area.top() + (row + 1) * line, width - 4, line)

        for place, channel in enumerate(shown):
            layout.listed[channel.name] = box(place)
        if len(shown) < len(rest):
            layout.more = (box(len(shown)), len(rest) - len(shown))

    # The hand

    def _at(self, point: QPointF) -> str | None:
        for name, box in self._layout.listed.items():
            if box.contains(point):
                return name
        near = [(_distance(point, spot), name) for name, spot in self._layout.spots.items()]
        distance, name = min(near, default=(math.inf, ""))
        return name if distance <= _REACH else None

    def _reachable(self) -> list[str]:
        return [*self._layout.spots, *self._layout.listed]

    def _hover(self, name: str | None) -> None:
        if name != self._hovered:
            self._hovered = name
            self.update()

    def _pick(self, name: str, *, adding: bool) -> None:
        if adding:
            picked = self._picked ^ {name}
        else:
            picked = frozenset() if self._picked == {name} else frozenset({name})
        self.show_picked(picked)
        self.picked.emit(picked)

    def _step(self, right: float, down: float) -> None:
        """Go to the nearest channel in a direction; sideways counts double."""
        reachable = self._reachable()
        here = self.spot(self._current) if self._current in reachable and self._current else None
        if here is None:
            self._go_to(reachable[0])
            return
        best: tuple[float, str] | None = None
        for name in reachable:
            there = self.spot(name)
            if there is None or name == self._current:
                continue
            x, y = there.x() - here.x(), there.y() - here.y()
            along, aside = x * right + y * down, abs(x * down) + abs(y * right)
            if along > 0.5 and (best is None or along + 2 * aside < best[0]):
                best = (along + 2 * aside, name)
        if best is not None:
            self._go_to(best[1])

    def _go_to(self, name: str | None) -> None:
        if name != self._current:
            self._current = name
            self._describe()
            self.update()

    def _describe(self) -> None:
        """Tell screen readers about the current channel."""
        if self._current is not None and self._current in self._channels:
            text = self._channels[self._current].words + (", picked" if self._current in self._picked else "")
        else:
            text = f"{len(self._channels)} channels, {len(self._picked)} picked"
        if text != self.accessibleDescription():
            self.setAccessibleDescription(text)
            QAccessible.updateAccessibility(QAccessibleEvent(self, QAccessible.Event.DescriptionChanged))

    # Painting

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Draw head, channels, names."""
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        if self._layout.spots:
            self._paint_head(painter)
        for name, spot in self._layout.spots.items():
            self._paint_shape(painter, self._channels[name], spot, self._layout.shape)
        self._paint_list(painter)
        painter.setFont(self._small_font())
        for name, box in self._name_boxes().items():
            painter.setPen(self._name_colour(name))
            painter.drawText(QPointF(box.left(), box.bottom() - 1), name)
        painter.setFont(self.font())
        if self._hovered in self._layout.spots:
            self._paint_hovered(painter, str(self._hovered), QFontMetricsF(self.font()))
        current = self.spot(self._current) if self.hasFocus() and self._current else None
        if current is not None:
            painter.setBrush(Qt.BrushStyle.NoBrush)
            painter.setPen(QPen(QColor(self._theme.accent), 1.5, Qt.PenStyle.DotLine))
            half = self._layout.shape / 2 + 5
            painter.drawRect(QRectF(current.x() - half, current.y() - half, 2 * half, 2 * half))

    def _paint_head(self, painter: QPainter) -> None:
        middle, radius = self._layout.middle, self._layout.radius
        painter.setBrush(QColor(self._theme.field))
        painter.setPen(QPen(QColor(self._theme.line), 1.5))
        painter.drawEllipse(middle, radius, radius)
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.setPen(QPen(QColor(self._theme.quiet), 2.0, c=Qt.PenCapStyle.RoundCap))
        # The nose is a low arch over the rim, the ears are two short arcs beside it.
        nose = QPainterPath(_on_circle(middle, radius, 97))
        nose.quadTo(_on_circle(middle, radius * 1.24, 90), _on_circle(middle, radius, 83))
        painter.drawPath(nose)
        outer = radius * 1.06
        box = QRectF(middle.x() - outer, middle.y() - outer, 2 * outer, 2 * outer)
        for side in (0, 180):
            painter.drawArc(box, (side - 12) * 16, 24 * 16)

    def _paint_shape(self, painter: QPainter, channel: MapChannel, spot: QPointF, size: float) -> None:
        """Draw a dot for a good channel, a crossed square for a bad one; a ring around it if picked."""
        theme, half = self._theme, size / 2
        if channel.bad:
            painter.setPen(QPen(QColor(theme.trace_bad), 1.4))
            painter.setBrush(QColor(theme.panel))
            box = QRectF(spot.x() - half, spot.y() - half, size, size)
            painter.drawRect(box)
            painter.drawLine(QLineF(box.topLeft(), box.bottomRight()))
            painter.drawLine(QLineF(box.topRight(), box.bottomLeft()))
        else:
            painter.setPen(Qt.PenStyle.NoPen)
            painter.setBrush(QColor(theme.accent if channel.name in self._picked else theme.quiet))
            painter.drawEllipse(spot, half * 0.7, half * 0.7)
        if channel.name in self._picked:
            painter.setPen(QPen(QColor(theme.accent), 2.0))
            painter.setBrush(Qt.BrushStyle.NoBrush)
            painter.drawEllipse(spot, half + 3, half + 3)

    def _paint_list(self, painter: QPainter) -> None:
        layout, metrics = self._layout, QFontMetricsF(self.font())
        left = Qt.AlignmentFlag.AlignLeft | Qt.AlignmentFlag.AlignVCenter
        painter.setPen(QColor(self._theme.quiet))
        if layout.title is not None:
            painter.drawText(layout.title, left, _LIST_TITLE)
        if layout.more is not None:
            painter.drawText(layout.more[0], left, f"and {layout.more[1]} more")
        for name, box in layout.listed.items():
            channel, side = self._channels[name], box.height()
            spot = QPointF(box.left() + side / 2, box.center().y())
            self._paint_shape(painter, channel, spot, min(_LARGEST_SHAPE, side * 0.5))
            painter.setPen(self._name_colour(name))
            text = metrics.elidedText(name, Qt.TextElideMode.ElideMiddle, box.width() - side)
            painter.drawText(box.adjusted(side, 0, 0, 0), left, text)

    def _paint_hovered(self, painter: QPainter, name: str, metrics: QFontMetricsF) -> None:
        spot, text = self._layout.spots[name], self._channels[name].words
        width = min(metrics.horizontalAdvance(text) + 12, self.width() - 4.0)
        x = min(max(2.0, spot.x() - width / 2), self.width() - width - 2)
        height = metrics.height() + 4
        below = spot.y() + self._layout.shape / 2 + 4
        y = below if below + height < self.height() else spot.y() - self._layout.shape / 2 - 4 - height
        box = QRectF(x, y, width, height)
        painter.setPen(QPen(QColor(self._theme.line), 1.0))
        painter.setBrush(QColor(self._theme.panel))
        painter.drawRoundedRect(box, 4, 4)
        painter.setPen(self._name_colour(name))
        elided = metrics.elidedText(text, Qt.TextElideMode.ElideMiddle, width - 8)
        painter.drawText(box, Qt.AlignmentFlag.AlignCenter, elided)

    def _name_colour(self, name: str) -> QColor:
        if self._channels[name].bad:
            return QColor(self._theme.attention)
        return QColor(self._theme.accent if name in self._picked else self._theme.quiet)

    def _small_font(self) -> QFont:
        font = QFont(self.font())
        font.setPointSizeF(max(6.0, font.pointSizeF() * _SMALL))
        return font

    def _name_boxes(self) -> dict[str, QRectF]:
        """Lay out all names if all have room below their shapes; otherwise the picked and bad ones."""
        if self._boxes is not None:
            return self._boxes
        metrics, half = QFontMetricsF(self._small_font()), self._layout.shape / 2
        height = metrics.capHeight() + 3
        spots = self._layout.spots
        shapes = [(spot.x() - half, spot.y() - half, 2 * half, 2 * half) for spot in spots.values()]
        sizes = {name: metrics.horizontalAdvance(name) for name in spots}
        below = [
            (spot.x() - sizes[name] / 2, spot.y() + half, sizes[name], height) for name, spot in spots.items()
        ]
        if not _any_touch(np.array([*below, *shapes]).reshape(-1, 4)):
            self._boxes = {name: QRectF(*box) for name, box in zip(spots, below, strict=True)}
            return self._boxes
        self._boxes = {}
        taken = np.array(shapes).reshape(-1, 4)
        for name in sorted(spots, key=lambda one: one not in self._picked):
            if name not in self._picked and not self._channels[name].bad:
                continue
            x, y, away = spots[name].x(), spots[name].y(), half + 5
            width = sizes[name]
            for left, top in (
                (x - width / 2, y + half),
                (x - width / 2, y - half - height),
                (x + away, y - height / 2),
                (x - away - width, y - height / 2),
            ):
                box = np.array([left, top, width, height])
                if not _touches(box, taken).any():
                    taken = np.vstack([taken, box])
                    self._boxes[name] = QRectF(left, top, width, height)
                    break
        return self._boxes


def _touches(box: Boxes, others: Boxes) -> NDArray[np.bool_]:
    """Which of other boxes (left, top, width, height) a box has more than an edge in common with."""
    (x, y, width, height), (lefts, tops, widths, heights) = box, others.T
    across = (lefts < x + width) & (x < lefts + widths)
    touched: NDArray[np.bool_] = across & (tops < y + height) & (y < tops + heights)
    return touched


def _any_touch(boxes: Boxes) -> bool:
    return any(_touches(box, boxes[place + 1 :]).any() for place, box in enumerate(boxes))


def _closest(spots: list[QPointF]) -> float:
    """Least distance of two spots, in pixels."""
    at = np.array([(spot.x(), spot.y()) for spot in spots])
    distances = np.hypot(*(at[:, None] - at[None]).transpose(2, 0, 1))
    np.fill_diagonal(distances, np.inf)
    return float(distances.min())


def _distance(a: QPointF, b: QPointF) -> float:
    return math.hypot(a.x() - b.x(), a.y() - b.y())


def _on_circle(middle: QPointF, radius: float, degrees: float) -> QPointF:
    turn = math.radians(degrees)
    return QPointF(middle.x() + radius * math.cos(turn), middle.y() - radius * math.sin(turn))
