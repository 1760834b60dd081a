"""The column of channel names beside the traces: picking, and a small toggle per row for bad."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import QEvent, QLineF, QPointF, QRectF, QSize, Qt, Signal
from PySide6.QtGui import (
    QAccessible,
    QAccessibleEvent,
    QColor,
    QFocusEvent,
    QFontMetricsF,
    QHelpEvent,
    QKeyEvent,
    QMouseEvent,
    QPainter,
    QPaintEvent,
    QPen,
)
from PySide6.QtWidgets import QSizePolicy, QToolTip, QWidget

from pulsemend.window.theme import Theme
from pulsemend.window.traces.geometry import Rows
from pulsemend.window.traces.keys import plain
from pulsemend.window.traces.labels import thinned

_TOGGLE = 18
"""Width of the strip with the toggles."""
_WIDEST = 130
_MARK = 3


class RowNames(QWidget):
    """Names of the rows.

    A click on a name picks that channel alone, or none if it was; with Ctrl it is added or taken away, with
    Shift the rows between are picked. The toggle, or Space on the current row, marks a channel bad or good
    again. Up and Down move the current row, Return picks it.

    Parameters
    ----------
    theme : Theme
    parent : QWidget or None
    """

    bad_toggled = Signal(str, bool)
    picked = Signal(object)
    row_reached = Signal(int)

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._theme = theme
        self._names: tuple[str, ...] = ()
        self._bad: frozenset[str] = frozenset()
        self._picked: frozenset[str] = frozenset()
        self._rows = Rows(0, 0)
        self._current = 0
        self._hovered: int | None = None
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setMouseTracking(True)
        self.setSizePolicy(QSizePolicy.Policy.Fixed, QSizePolicy.Policy.Expanding)
        self.setAccessibleName("Channels")

    def sizeHint(self) -> QSize:
        """As wide as the longest name, within reason."""
        metrics = QFontMetricsF(self.font())
        widest = max((metrics.horizontalAdvance(name) for name in self._names), default=30.0)
        return QSize(int(min(widest, _WIDEST)) + _TOGGLE + 10, 100)

    def show_rows(
        self, names: Sequence[str], bad: frozenset[str], picked: frozenset[str], rows: Rows
    ) -> None:
        """Show these names at these places."""
        before = (self._names, self._bad, self._picked, self._rows)
        self._names, self._bad, self._picked, self._rows = tuple(names), bad, picked, rows
        if (self._names, bad, picked, rows) == before:
            return
        self._current = min(self._current, max(0, len(self._names) - 1))
        if self._names != before[0]:
            self.updateGeometry()
        self._describe()
        self.update()

    def set_theme(self, theme: Theme) -> None:
        """Change the colours."""
        self._theme = theme
        self.update()

    @property
    def current(self) -> int:
        """The row that keys act on."""
        return self._current

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Paint the names that have room, and those of the current row and the one under the cursor."""
        with QPainter(self) as painter:
            self._paint(painter)

    def _paint(self, painter: QPainter) -> None:
        painter.fillRect(self.rect(), QColor(self._theme.panel))
        painter.setClipRect(QRectF(0, self._rows.top, self.width(), self._rows.area))
        metrics = QFontMetricsF(self.font())
        step = thinned(len(self._names), self._rows.row_height, 0.92 * metrics.height())
        for row in self._labelled(step):
            self._paint_row(painter, row, metrics)
        for special in {self._hovered, self._current if self.hasFocus() else None}:
            if special is not None and special < len(self._names):
                row = special
                box = self._box(row, metrics)
                painter.fillRect(box, QColor(self._theme.field))
                self._paint_row(painter, row, metrics)
        if self.hasFocus() and self._names:
            painter.setPen(QPen(QColor(self._theme.accent), 1.5))
            painter.drawRect(self._box(self._current, metrics).adjusted(1, 0.5, -1, -0.5))

    def _labelled(self, step: int) -> list[int]:
        """Rows whose names are painted where not all have room: bad and picked ones first."""
        visible = [row for row in self._rows.visible if row < len(self._names)]
        if step == 1:
            return visible
        marked = self._bad | self._picked
        chosen: set[int] = set()
        for row in sorted(visible, key=lambda row: (self._names[row] not in marked, row)):
            regular = row % step == 0 or self._names[row] in marked
            if regular and chosen.isdisjoint(range(row - step + 1, row + step)):
                chosen.add(row)
        return sorted(chosen)

    def _middle(self, row: int, metrics: QFontMetricsF) -> float:
        """Middle of a row's name: moved a little where an end of the rows would cut it."""
        middle, half = self._rows.middle(row), metrics.height() / 2
        within = min(max(middle, self._rows.top + half), self._rows.top + self._rows.area - half)
        return within if abs(within - middle) < 0.4 * metrics.height() else middle

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """Pick, or toggle bad."""
        row = self._rows.row_at(event.position().y())
        if event.button() is not Qt.MouseButton.LeftButton or row is None:
            super().mousePressEvent(event)
            return
        modifiers = event.modifiers()
        if event.position().x() < _TOGGLE:
            self._current = row
            self._toggle_bad(row)
        else:
            self._pick(row, modifiers)
        self._describe()
        self.update()

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Show the row under the cursor even where names are thinned out."""
        self._hover(self._rows.row_at(event.position().y()))

    def leaveEvent(self, event: QEvent) -> None:
        """Forget the row under the cursor."""
        self._hover(None)
        super().leaveEvent(event)

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Move the current row, pick it, mark it bad."""
        key = event.key()
        steps = {Qt.Key.Key_Up: -1, Qt.Key.Key_Down: 1, Qt.Key.Key_Home: -len(self._names)}
        steps[Qt.Key.Key_End] = len(self._names)
        if not self._names:
            super().keyPressEvent(event)
        elif key in steps and plain(event.modifiers()) == Qt.KeyboardModifier.NoModifier:
            self._current = min(max(0, self._current + steps[Qt.Key(key)]), len(self._names) - 1)
            self.row_reached.emit(self._current)
            self._describe()
            self.update()
        elif key == Qt.Key.Key_Space:
            self._toggle_bad(self._current)
        elif key in (Qt.Key.Key_Return, Qt.Key.Key_Enter):
            self._pick(self._current, event.modifiers())
        else:
            super().keyPressEvent(event)

    def focusInEvent(self, event: QFocusEvent) -> None:
        """Show the focus."""
        self.update()
        super().focusInEvent(event)

    def focusOutEvent(self, event: QFocusEvent) -> None:
        """Stop showing the focus."""
        self.update()
        super().focusOutEvent(event)

    def event(self, event: QEvent) -> bool:
        """Tell the full name, state and what a click does in a tooltip."""
        if isinstance(event, QHelpEvent) and event.type() is QEvent.Type.ToolTip:
            row = self._rows.row_at(event.pos().y())
            if row is None:
                QToolTip.hideText()
            elif event.pos().x() < _TOGGLE:
                verb = "Mark as good again" if self._names[row] in self._bad else "Mark as bad"
                QToolTip.showText(event.globalPos(), f"{self._names[row]}: {verb}", self)
            else:
                QToolTip.showText(event.globalPos(), self._words(row), self)
            return True
        return super().event(event)

    def _toggle_bad(self, row: int) -> None:
        name = self._names[row]
        self.bad_toggled.emit(name, name not in self._bad)

    def _pick(self, row: int, modifiers: Qt.KeyboardModifier) -> None:
        name = self._names[row]
        if modifiers & Qt.KeyboardModifier.ShiftModifier:
            low, high = sorted((self._current, row))
            picked = frozenset(self._names[low : high + 1])
        elif modifiers & Qt.KeyboardModifier.ControlModifier:
            picked = self._picked ^ {name}
        else:
            picked = frozenset() if self._picked == {name} else frozenset({name})
        if not modifiers & Qt.KeyboardModifier.ShiftModifier:
            self._current = row
        self.picked.emit(picked)

    def _hover(self, row: int | None) -> None:
        if row != self._hovered:
            self._hovered = row
            self.update()

    def _box(self, row: int, metrics: QFontMetricsF) -> QRectF:
        height = max(self._rows.row_height, metrics.height())
        return QRectF(0, self._middle(row, metrics) - height / 2, self.width(), height)

    def _paint_row(self, painter: QPainter, row: int, metrics: QFontMetricsF) -> None:
        name = self._names[row]
        bad, picked = name in self._bad, name in self._picked
        middle = self._middle(row, metrics)
        colour = self._theme.trace_bad if bad else self._theme.trace_picked if picked else self._theme.quiet
        if picked:
            painter.fillRect(QRectF(0, middle - 6, _MARK, 12), QColor(self._theme.trace_picked))
        self._paint_toggle(painter, middle, bad=bad)
        font = self.font()
        font.setBold(picked)
        font.setStrikeOut(bad)
        painter.setFont(font)
        painter.setPen(QColor(colour))
        room = self.width() - _TOGGLE - 6
        text = QFontMetricsF(font).elidedText(name, Qt.TextElideMode.ElideMiddle, room)
        painter.drawText(QPointF(_TOGGLE, middle + (metrics.ascent() - metrics.descent()) / 2), text)

    def _paint_toggle(self, painter: QPainter, middle: float, *, bad: bool) -> None:
        size = 8.0
        box = QRectF(_MARK + 3.5, round(middle - size / 2) + 0.5, size, size)
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.setPen(QPen(QColor(self._theme.trace_bad if bad else self._theme.line), 1.2))
        painter.drawRect(box)
        if bad:
            painter.drawLine(QLineF(box.topLeft(), box.bottomRight()))
            painter.drawLine(QLineF(box.topRight(), box.bottomLeft()))

    def _words(self, row: int) -> str:
        name = self._names[row]
        states = [word for word, on in (("bad", name in self._bad), ("picked", name in self._picked)) if on]
        return ", ".join([name, *states])

    def _describe(self) -> None:
        """Tell screen readers about the current row."""
        if self._names:
            words = f"{self._words(self._current)}; row {self._current + 1} of {len(self._names)}"
        else:
            words = "none shown"
        if words != self.accessibleDescription():
            self.setAccessibleDescription(words)
            QAccessible.updateAccessibility(QAccessibleEvent(self, QAccessible.Event.DescriptionChanged))
