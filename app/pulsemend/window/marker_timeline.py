"""The timeline of all codes: a row per code, the trials above them, and the part that the traces show."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QEvent, QLineF, QPointF, QRectF, QSize, Qt, Signal
from PySide6.QtGui import (
    QColor,
    QFocusEvent,
    QFont,
    QFontMetricsF,
    QHelpEvent,
    QImage,
    QKeyEvent,
    QMouseEvent,
    QPainter,
    QPaintEvent,
    QPen,
    QResizeEvent,
    QWheelEvent,
)
from PySide6.QtWidgets import QAbstractScrollArea, QToolTip

from pulsemend.mending.marker_view import CodeEvidence, CodeRow, Spans, TrialState
from pulsemend.window.marker_lanes import draw_pixels, draw_shades, marker_row, state_colour, trial_row
from pulsemend.window.theme import Theme
from pulsemend.window.traces.clock import clock, ticks
from pulsemend.window.traces.keys import plain, wheel_move, wheel_zoom

_SHAPE = 9
_SIDE = 8
_NEAR = 6.0
"""How near to a marker a click has to be, in pixels."""
_LEAST_S = 0.02
_DRAG = 4.0
_MOST_SHADED = 150
_NAMES = 0.24
"""Most of the width that the names take."""
_ZOOM = 2.0


@dataclass(frozen=True)
class _Lane:
    """A row of the timeline: the trials of a kind, or a code."""

    name: str
    code: CodeRow | None
    times_s: NDArray[np.float64]
    kind: str = ""


class Timeline(QAbstractScrollArea):
    """Codes along the recording.

    A click goes there, dragging moves and Ctrl with the wheel stretches the timeline. Left and Right go from
    marker to marker of the chosen codes, Home and End to their first and last.

    Parameters
    ----------
    theme : Theme
        Colours.

    Attributes
    ----------
    wanted : Signal(float)
        Bring this time into view.
    code_wanted : Signal(str)
        A marker of this code, or its name, was clicked.
    """

    wanted = Signal(float)
    code_wanted = Signal(str)

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self._theme = theme
        self._lanes: tuple[_Lane, ...] = ()
        self._spans: Spans | None = None
        self._why: tuple[str, ...] = ()
        self._chosen: frozenset[str] = frozenset()
        self._duration_s = 1.0
        self._start_s, self._width_s = 0.0, 1.0
        self._view_s = (0.0, 0.0)
        self._longest = 0.0
        self._at_s: float | None = None
        self._ground = QImage()
        self._names: QImage | None = None
        self._stale = True
        self._press: tuple[QPointF, float] | None = None
        self._dragged = False
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self.setAccessibleName("Timeline of all codes")
        self.viewport().setMouseTracking(True)
        self.verticalScrollBar().valueChanged.connect(self._refresh)

    # What is shown

    def show_codes(
        self, evidence: Sequence[CodeEvidence], rows: Sequence[CodeRow], duration_s: float
    ) -> None:
        """Show the codes of a recording, in the order of its rows."""
        times = {one.code: one.times_s for one in evidence}
        lanes = [_Lane(row.code, row, times.get(row.code, np.zeros(0))) for row in rows]
        self._lanes = (*(lane for lane in self._lanes if lane.code is None), *lanes)
        if duration_s != self._duration_s:
            self._duration_s = duration_s
            self.show_whole()
        self._measure_names()

    def show_trials(self, spans: Spans | None, why: Sequence[str]) -> None:
        """Show trials; `why` says of each what is wrong with it."""
        self._spans, self._why = spans, tuple(why)
        kinds = () if spans is None else dict.fromkeys(spans.kinds)
        trials = [_Lane(f"trials: {kind}" if kind else "trials", None, np.zeros(0), kind) for kind in kinds]
        self._lanes = (*trials, *(lane for lane in self._lanes if lane.code is not None))
        self._measure_names()

    def show_chosen(self, codes: Sequence[str]) -> None:
        """Make the rows of the chosen codes stand out."""
        if frozenset(codes) != self._chosen:
            self._chosen = frozenset(codes)
            self._refresh()

    def show_view(self, start_s: float, stop_s: float) -> None:
        """Frame the part that the traces show, and bring it into view."""
        self._view_s = (start_s, stop_s)
        if self._at_s is not None and not start_s <= self._at_s <= stop_s:
            self._at_s = None
        self.setAccessibleDescription(f"The traces show {clock(start_s, 1)} to {clock(stop_s, 1)}")
        if stop_s < self._start_s or start_s > self._start_s + self._width_s:
            self._look_at((start_s + stop_s - self._width_s) / 2, self._width_s)
        self.viewport().update()

    def show_whole(self) -> None:
        """Show the whole recording."""
        self._look_at(0.0, self._duration_s)

    def show_as_traces(self) -> None:
        """Show what the traces show."""
        start_s, stop_s = self._view_s
        if stop_s > start_s:
            self._look_at(start_s, stop_s - start_s)

    def zoom(self, factor: float, about_s: float | None = None) -> None:
        """Show a factor more (below 1) or less time about an instant; None: what the traces show."""
        if about_s is None:
            about_s = min(
                max(sum(self._view_s) / 2, self._start_s), self._start_s + self._width_s
            )  # the middle of the frame, if it is there
        width_s = min(max(self._width_s / factor, _LEAST_S), self._duration_s)
        share = (about_s - self._start_s) / self._width_s
        self._look_at(about_s - share * width_s, width_s)

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self._theme = theme
        self._refresh()

    @property
    def span_s(self) -> tuple[float, float]:
        """What it shows, in seconds."""
        return self._start_s, self._start_s + self._width_s

    def sizeHint(self) -> QSize:
        """Room for a few rows."""
        return QSize(600, 200)

    def minimumSizeHint(self) -> QSize:
        """Room for one row."""
        return QSize(240, round(self._row_height() + self._axis_height()))

    # Places

    def x_of(self, time_s: float) -> float:
        """Where a time is, in pixels of the viewport."""
        left = self._names_width()
        return left + (time_s - self._start_s) / self._width_s * max(1.0, self.viewport().width() - left)

    def time_at(self, x: float) -> float:
        """Time at a place."""
        left = self._names_width()
        return self._start_s + (x - left) / max(1.0, self.viewport().width() - left) * self._width_s

    def row_middle(self, name: str) -> float:
        """Height of the middle of a row."""
        row = next(row for row, lane in enumerate(self._lanes) if lane.name == name)
        return (row + 0.5) * self._row_height() - self.verticalScrollBar().value()

    def _names_width(self) -> float:
        return float(round(min(self._longest + 2 * _SIDE, _NAMES * self.viewport().width())))

    def _measure_names(self) -> None:
        """Measure once what every place depends on."""
        metrics = QFontMetricsF(self.font())
        self._longest = max((metrics.horizontalAdvance(lane.name) for lane in self._lanes), default=0.0)
        self._fit_bar()
        self._refresh()

    def _row_height(self) -> float:
        return float(max(_SHAPE + 6, round(QFontMetricsF(self.font()).height() + 4)))

    def _axis_height(self) -> float:
        return QFontMetricsF(self.font()).height() + 6

    def _lane_at(self, y: float) -> _Lane | None:
        if y >= self.viewport().height() - self._axis_height():
            return None
        row = int((y + self.verticalScrollBar().value()) // self._row_height())
        return self._lanes[row] if 0 <= row < len(self._lanes) else None

    def _nearest(self, lane: _Lane, time_s: float) -> float | None:
        """Nearest marker of a lane, if it is near enough."""
        if not lane.times_s.size:
            return None
        place = int(np.searchsorted(lane.times_s, time_s))
        near = lane.times_s[max(0, place - 1) : place + 1]
        found = float(near[np.argmin(np.abs(near - time_s))])
        return found if abs(self.x_of(found) - self.x_of(time_s)) <= _NEAR else None

    def _look_at(self, start_s: float, width_s: float) -> None:
        self._width_s = min(max(width_s, _LEAST_S), self._duration_s)
        self._start_s = min(max(start_s, 0.0), self._duration_s - self._width_s)
        self._move()

    def _refresh(self) -> None:
        self._names = None
        self._move()

    def _move(self) -> None:
        """Paint anew what moves with the time."""
        self._stale = True
        self.viewport().update()

    def _fit_bar(self) -> None:
        room = self.viewport().height() - self._axis_height()
        bar = self.verticalScrollBar()
        bar.setRange(0, max(0, round(len(self._lanes) * self._row_height() - room)))
        bar.setPageStep(max(1, round(room)))
        bar.setSingleStep(round(self._row_height()))

    # Painting

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Paint the codes from what was painted before, and the frame over them."""
        if self._ground.devicePixelRatio() != self.devicePixelRatioF():
            self._names, self._stale = None, True
        if self._stale:
            self._ground = self._painted()
            self._stale = False
        left = self._names_width()
        rows = QRectF(left, 0, self.viewport().width() - left, self.viewport().height() - self._axis_height())
        start, stop = self.x_of(self._view_s[0]), self.x_of(self._view_s[1])
        frame = QRectF(start, 1, max(3.0, stop - start), rows.height() - 2)
        accent = QColor(self._theme.accent)
        soft = QColor(accent)
        soft.setAlpha(30)
        with QPainter(self.viewport()) as painter:
            painter.drawImage(0, 0, self._ground)
            painter.setClipRect(rows)
            painter.fillRect(frame, soft)
            painter.setPen(QPen(accent, 1.2))
            painter.drawRect(frame)
            painter.setClipping(False)
            if self.hasFocus():
                painter.setPen(QPen(accent, 2.0))
                painter.drawRect(QRectF(self.viewport().rect()).adjusted(1, 1, -1, -1))

    def _blank(self, width: float, height: float) -> QImage:
        ratio = self.devicePixelRatioF()
        image = QImage(
            max(1, round(width * ratio)), max(1, round(height * ratio)), QImage.Format.Format_RGB32
        )
        image.setDevicePixelRatio(ratio)
        image.fill(QColor(self._theme.panel))
        return image

    def _painted(self) -> QImage:
        size = self.viewport().size()
        bottom = size.height() - self._axis_height()
        if self._names is None:
            self._names = self._painted_names()
        image = self._blank(size.width(), size.height())
        with QPainter(image) as painter:
            painter.setFont(self.font())
            painter.setClipRect(QRectF(0, 0, size.width(), bottom))
            self._paint_rows(painter, bottom)
            painter.drawImage(0, 0, self._names)
            painter.setClipping(False)
            self._paint_axis(painter, bottom)
        return image

    def _shown_lanes(self, bottom: float) -> list[tuple[float, _Lane]]:
        """Give the rows in view with their tops."""
        height, scroll = self._row_height(), self.verticalScrollBar().value()
        first = int(scroll // height)
        last = min(len(self._lanes), int((scroll + bottom) // height) + 1)
        return [(row * height - scroll, self._lanes[row]) for row in range(first, last)]

    def _paint_rows(self, painter: QPainter, bottom: float) -> None:
        height, width, left = self._row_height(), self.viewport().width(), self._names_width()
        shown = self._shown_lanes(bottom)
        for top, lane in shown:
            if self._is_chosen(lane):
                painter.fillRect(QRectF(left, top, width - left, height), QColor(self._theme.accent_soft))
        self._paint_shades(painter, bottom)
        painter.setPen(QPen(QColor(self._theme.line), 1.0))
        painter.drawLines([QLineF(left, top + height, width, top + height) for top, _ in shown])
        for top, lane in shown:
            if lane.code is None:
                self._paint_trials(painter, lane, top)
            else:
                self._paint_markers(painter, lane, top)

    def _painted_names(self) -> QImage:
        """Paint the names, which stay while the timeline moves."""
        bottom, height = self.viewport().height() - self._axis_height(), self._row_height()
        left = self._names_width()
        image = self._blank(left, bottom)
        with QPainter(image) as painter:
            for top, lane in self._shown_lanes(bottom):
                if self._is_chosen(lane):
                    painter.fillRect(QRectF(0, top, left, height), QColor(self._theme.accent_soft))
                painter.setPen(QPen(QColor(self._theme.line), 1.0))
                painter.drawLine(QPointF(0, top + height), QPointF(left, top + height))
                self._paint_name(painter, lane, top)
        return image

    def _is_chosen(self, lane: _Lane) -> bool:
        return lane.code is not None and lane.code.code in self._chosen

    def _paint_name(self, painter: QPainter, lane: _Lane, top: float) -> None:
        metrics, left = QFontMetricsF(self.font()), self._names_width()
        text = metrics.elidedText(lane.name, Qt.TextElideMode.ElideMiddle, left - 1.5 * _SIDE)
        font = QFont(self.font())
        font.setUnderline(self._is_chosen(lane))
        painter.setFont(font)
        quiet = lane.code is None or not lane.times_s.size
        painter.setPen(QColor(self._theme.quiet if quiet else self._theme.text))
        middle = top + (self._row_height() + metrics.ascent() - metrics.descent()) / 2
        painter.drawText(QPointF(_SIDE, middle), text)

    def _columns(self, times_s: NDArray[np.float64], ratio: float) -> NDArray[np.intp]:
        """Pixels of the screen, from the right edge of the names."""
        width = (self.viewport().width() - self._names_width()) * ratio
        return np.floor((times_s - self._start_s) * (width / self._width_s)).astype(np.intp)

    def _paint_markers(self, painter: QPainter, lane: _Lane, top: float) -> None:
        if lane.code is None:
            return
        ratio, left, height = self.devicePixelRatioF(), self._names_width(), self._row_height()
        width = max(1, round((self.viewport().width() - left) * ratio))
        beyond_s = (_SHAPE + 4) * ratio / width * self._width_s
        low, high = np.searchsorted(
            lane.times_s, (self._start_s - beyond_s, self._start_s + self._width_s + beyond_s)
        )
        if low == high:
            return
        columns = self._columns(lane.times_s[low:high], ratio)
        pixels = marker_row(columns, width, round(height * ratio), lane.code.role, round(_SHAPE * ratio))
        draw_pixels(painter, pixels, (left, top), self._theme.roles[lane.code.role], ratio)

    def _visible_trials(self) -> tuple[int, int]:
        if self._spans is None:
            return 0, 0
        low = int(np.searchsorted(self._spans.stop_s, self._start_s))
        high = int(np.searchsorted(self._spans.start_s, self._start_s + self._width_s, side="right"))
        return low, max(low, high)

    def _paint_shades(self, painter: QPainter, bottom: float) -> None:
        """Shade trials behind the rows, while there are few enough to tell apart."""
        low, high = self._visible_trials()
        spans = self._spans
        if spans is None or not 0 < high - low <= _MOST_SHADED:
            return
        ratio, left = self.devicePixelRatioF(), self._names_width()
        width = max(1, round((self.viewport().width() - left) * ratio))
        shades = np.zeros(width, dtype=np.uint8)
        starts = np.clip(self._columns(spans.start_s[low:high], ratio), 0, width - 1)
        stops = np.clip(self._columns(spans.stop_s[low:high], ratio), 0, width - 1)
        for start, stop, state in zip(starts.tolist(), stops.tolist(), spans.states[low:high], strict=True):
            shades[start : stop + 1] = 2 if state in (TrialState.INCOMPLETE, TrialState.DOUBTFUL) else 1
        box = QRectF(left, 0, width / ratio, bottom)
        draw_shades(painter, shades, box, (self._theme.field, self._theme.attention_soft))

    def _paint_trials(self, painter: QPainter, lane: _Lane, top: float) -> None:
        low, high = self._visible_trials()
        spans = self._spans
        if spans is None or low == high:
            return
        ratio, left, height = self.devicePixelRatioF(), self._names_width(), self._row_height()
        width = max(1, round((self.viewport().width() - left) * ratio))
        starts = self._columns(spans.start_s[low:high], ratio)
        stops = np.maximum(self._columns(spans.stop_s[low:high], ratio), starts)
        own = np.array([kind == lane.kind for kind in spans.kinds[low:high]])
        for state in TrialState:
            these = own & np.array([one is state for one in spans.states[low:high]])
            if not these.any():
                continue
            pixels = trial_row(starts[these], stops[these], width, round((height - 6) * ratio), state)
            draw_pixels(painter, pixels, (left, top + 3), state_colour(state, self._theme), ratio)
        self._paint_numbers(painter, top, low, high, own)

    def _paint_numbers(
        self, painter: QPainter, top: float, low: int, high: int, own: NDArray[np.bool_]
    ) -> None:
        spans, metrics = self._spans, QFontMetricsF(painter.font())
        least = metrics.horizontalAdvance("8888") + 6
        if spans is None or (high - low) * least > self.viewport().width():
            return
        left = self._names_width()
        painter.setPen(QColor(self._theme.text))
        for place in (low + np.flatnonzero(own)).tolist():
            start = max(left, self.x_of(float(spans.start_s[place])))
            stop = min(float(self.viewport().width()), self.x_of(float(spans.stop_s[place])))
            if stop - start < least:
                continue
            text = str(spans.numbers[place])
            wide = metrics.horizontalAdvance(text) + 6
            box = QRectF((start + stop - wide) / 2, top + 4, wide, self._row_height() - 8)
            painter.fillRect(box, QColor(self._theme.panel))
            painter.drawText(box, Qt.AlignmentFlag.AlignCenter, text)

    def _paint_axis(self, painter: QPainter, bottom: float) -> None:
        metrics, left = QFontMetricsF(painter.font()), self._names_width()
        painter.setPen(QPen(QColor(self._theme.line), 1.0))
        painter.drawLine(QPointF(left, 0), QPointF(left, bottom))
        painter.drawLine(QPointF(0, bottom), QPointF(self.viewport().width(), bottom))
        room = metrics.horizontalAdvance("0:00:00.000") + 24
        most = max(1, int((self.viewport().width() - left) // room))
        times_s, decimals = ticks(self._start_s, self._start_s + self._width_s, most)
        for time_s in times_s:
            x = self.x_of(time_s)
            painter.setPen(QPen(QColor(self._theme.line), 1.0))
            painter.drawLine(QPointF(x, bottom), QPointF(x, bottom + 4))
            text = clock(time_s, decimals)
            wide = metrics.horizontalAdvance(text)
            place = min(max(x - wide / 2, left), self.viewport().width() - wide - 2)
            painter.setPen(QColor(self._theme.quiet))
            painter.drawText(QPointF(place, bottom + 4 + metrics.ascent()), text)

    # Hands

    def viewportEvent(self, event: QEvent) -> bool:
        """Say what is under the mouse."""
        if event.type() is QEvent.Type.ToolTip and isinstance(event, QHelpEvent):
            QToolTip.showText(event.globalPos(), self.words_at(QPointF(event.pos())), self.viewport())
            return True
        return super().viewportEvent(event)

    def words_at(self, at: QPointF) -> str:
        """Say what is at a place: a code, a marker or a trial."""
        lane = self._lane_at(at.y())
        if lane is None:
            return ""
        time_s = self.time_at(at.x())
        if lane.code is not None:
            name = f"{lane.name} ({lane.code.role.value})"
            found = None if at.x() < self._names_width() else self._nearest(lane, time_s)
            return name if found is None else f"{name} at {clock(found, 3)}"
        spans = self._spans
        if spans is None or at.x() < self._names_width():
            return lane.name
        place = int(np.searchsorted(spans.start_s, time_s, side="right")) - 1
        if place < 0 or time_s > spans.stop_s[place] or spans.kinds[place] != lane.kind:
            return lane.name
        why = f": {self._why[place]}" if self._why[place] else ""
        return f"trial {spans.numbers[place]}, {spans.states[place]}{why}"

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """Begin a click or a drag."""
        if event.button() is Qt.MouseButton.LeftButton:
            self._press = (event.position(), self._start_s)
            self._dragged = False

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Drag the timeline."""
        if self._press is None:
            return
        by = event.position().x() - self._press[0].x()
        self._dragged = self._dragged or abs(by) > _DRAG
        if self._dragged:
            width = max(1.0, self.viewport().width() - self._names_width())
            self._look_at(self._press[1] - by / width * self._width_s, self._width_s)

    def mouseReleaseEvent(self, event: QMouseEvent) -> None:
        """Go to what was clicked."""
        if self._press is None or event.button() is not Qt.MouseButton.LeftButton:
            return
        at, self._press = event.position(), None
        if self._dragged:
            return
        lane = self._lane_at(at.y())
        if at.x() < self._names_width():
            if lane is not None and lane.code is not None:
                self.code_wanted.emit(lane.code.code)
            return
        time_s = self.time_at(at.x())
        if lane is not None and lane.code is not None:
            found = self._nearest(lane, time_s)
            if found is not None:
                self.code_wanted.emit(lane.code.code)
                time_s = found
        self._go(time_s)

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Scroll the rows, move sideways, or stretch with Ctrl."""
        factor = wheel_zoom(event)
        if factor is not None:
            self.zoom(factor, self.time_at(max(event.position().x(), self._names_width())))
            return
        move = wheel_move(event, max(1, self.viewport().width()))
        bar = self.verticalScrollBar()
        if move.x():
            self._look_at(self._start_s + move.x() * self._width_s, self._width_s)
        if move.y() and bar.maximum():
            bar.setValue(bar.value() + round(move.y() * self._row_height()))
        elif move.y():
            self._look_at(self._start_s + move.y() * 0.1 * self._width_s, self._width_s)

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Go from marker to marker, scroll rows, or stretch with Ctrl and Up or Down."""
        key, control = event.key(), plain(event.modifiers()) == Qt.KeyboardModifier.ControlModifier
        times_s = self._walked()
        at_s = sum(self._view_s) / 2 if self._at_s is None else self._at_s
        if control and key in (Qt.Key.Key_Up, Qt.Key.Key_Down):
            self.zoom(_ZOOM if key == Qt.Key.Key_Up else 1 / _ZOOM)
        elif key in (Qt.Key.Key_PageUp, Qt.Key.Key_PageDown):
            by = -1 if key == Qt.Key.Key_PageUp else 1
            self._look_at(self._start_s + 0.9 * by * self._width_s, self._width_s)
        elif key in (Qt.Key.Key_Up, Qt.Key.Key_Down):
            bar = self.verticalScrollBar()
            bar.setValue(bar.value() + (bar.singleStep() if key == Qt.Key.Key_Down else -bar.singleStep()))
        elif times_s.size and key in (Qt.Key.Key_Home, Qt.Key.Key_End):
            self._go(float(times_s[0 if key == Qt.Key.Key_Home else -1]))
        elif times_s.size and key == Qt.Key.Key_Right:
            place = int(np.searchsorted(times_s, at_s, side="right"))
            self._go(float(times_s[min(place, times_s.size - 1)]))
        elif times_s.size and key == Qt.Key.Key_Left:
            self._go(float(times_s[max(0, int(np.searchsorted(times_s, at_s)) - 1)]))
        else:
            super().keyPressEvent(event)

    def _walked(self) -> NDArray[np.float64]:
        """Give times of the chosen codes' markers; of all where none is chosen."""
        codes = [lane for lane in self._lanes if lane.code is not None]
        chosen = [lane.times_s for lane in codes if lane.name in self._chosen]
        every = chosen or [lane.times_s for lane in codes]
        return np.unique(np.concatenate(every)) if every else np.zeros(0)

    def _go(self, time_s: float) -> None:
        time_s = min(max(time_s, 0.0), self._duration_s)
        self.wanted.emit(time_s)
        self._at_s = time_s

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Fit the rows."""
        super().resizeEvent(event)
        self._fit_bar()
        self._refresh()

    def changeEvent(self, event: QEvent) -> None:
        """Follow the size of the text."""
        super().changeEvent(event)
        if event.type() in (QEvent.Type.FontChange, QEvent.Type.StyleChange):
            self._measure_names()

    def focusInEvent(self, event: QFocusEvent) -> None:
        """Show the focus."""
        super().focusInEvent(event)
        self.viewport().update()

    def focusOutEvent(self, event: QFocusEvent) -> None:
        """Stop showing the focus."""
        super().focusOutEvent(event)
        self.viewport().update()
