"""One lane per trial, painted: scrolled, zoomed, gone to, and rules dragged with all lanes following.

Keys: Up, Down, Page, Home and End choose a lane, Left and Right an epoch in it, Return goes there. With Alt,
Left and Right move the chosen rule by 10 ms, Up and Down make epochs longer and shorter by 10 ms; with Shift
besides by one sample of the output. With Ctrl, Page Up and Page Down change the height of lanes; with Shift
besides they zoom the time.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from PySide6.QtCore import QEvent, QPoint, QPointF, QRectF, QSize, Qt, QTimer, Signal
from PySide6.QtGui import (
    QColor,
    QFocusEvent,
    QHelpEvent,
    QKeyEvent,
    QMouseEvent,
    QPainter,
    QPaintEvent,
    QPen,
    QPixmap,
    QResizeEvent,
    QWheelEvent,
)
from PySide6.QtWidgets import QAbstractScrollArea, QApplication, QFrame, QToolTip, QWidget

from pulsemend.mending.epoch_lanes import FATES, Lane, Lanes, LanesShown, conflict_words, shown_lanes
from pulsemend.model.marks import EpochKey
from pulsemend.model.vocabulary import Fate
from pulsemend.units import ms_to_s
from pulsemend.window.lane_picture import LaneHand, LaneLayout, LaneLook, paint_lanes, spans_of
from pulsemend.window.lane_rows import LaneRows
from pulsemend.window.lane_words import Words
from pulsemend.window.theme import Theme
from pulsemend.window.traces.keys import plain, wheel_zoom

LANE_PX = (6, 22, 64)
"""Height of a lane: least, usual and most."""
STEP_MS = 10.0
_EDGE_PX = 5.0
_WORDS_BUDGET_S = 0.0015
"""Of one frame, for texts that were not in sight before; the rest of them comes with the next frames."""
_ROOM_S = 0.03
"""Room at both ends of the time axis, in parts of what it shows."""
_ZOOM = 1.25
_WORDS_PX = (150.0, 420.0)
_WORDS_SHARE = 0.28


@dataclass(frozen=True)
class Try:
    """Where a rule and the length of the set are dragged.

    Parameters
    ----------
    rule : int
        Place of the rule in the plan.
    start_s, length_s : float
        Whole samples of the output.
    """

    rule: int
    start_s: float
    length_s: float


@dataclass(frozen=True)
class _Grip:
    """What the mouse holds since it was pressed."""

    row: int
    box: int
    at: QPointF
    start_s: float
    length_s: float
    by_edge: bool
    span_s: tuple[float, float]
    """What the time axis shows; it must not change under a hand that drags."""


class LanesView(QAbstractScrollArea):
    """Lanes with hands.

    Parameters
    ----------
    theme : Theme
        Colours.
    parent : QWidget or None
        As usual.

    Attributes
    ----------
    wanted : Signal(int, object)
        Go to this trial, or to the EpochKey where one was meant.
    chosen : Signal(int)
        Another rule is chosen.
    current_changed : Signal(object)
        The EpochKey under the keyboard's cursor, or None.
    trying : Signal(object)
        A `Try`: the mouse drags.
    dropped : Signal(object, bool)
        A `Try` that shall hold, and whether it is one of a series by keys.
    given_up : Signal()
        Dragging was cancelled.
    stepped : Signal()
        A series of steps by keys is over.
    """

    wanted = Signal(int, object)
    chosen = Signal(int)
    current_changed = Signal(object)
    trying = Signal(object)
    dropped = Signal(object, bool)
    given_up = Signal()
    stepped = Signal()

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._theme = theme
        self._rows: LaneRows | None = None
        self._hand = LaneHand()
        self._lane_px = LANE_PX[1]
        self._zoom = 1.0
        self._filter: tuple[LanesShown, str, tuple[str, str] | None] = (LanesShown.ALL, "", None)
        self._starts_s: tuple[float, ...] = ()
        self._length_s = 0.0
        self._image = QPixmap()
        self._image_key: object = None
        self._image_scroll = 0
        self._words = Words()
        self._again = QTimer(self, singleShot=True, interval=0)
        self._again.timeout.connect(self.viewport().update)
        self._grip: _Grip | None = None
        self._try: Try | None = None
        self.setFrameShape(QFrame.Shape.NoFrame)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setAccessibleName("Trials, one lane each")
        self.viewport().setMouseTracking(True)
        # All of it is painted, so nothing has to be cleared before.
        self.viewport().setAttribute(Qt.WidgetAttribute.WA_OpaquePaintEvent)
        self.verticalScrollBar().setAccessibleName("Scroll lanes")
        self.horizontalScrollBar().setAccessibleName("Scroll time")
        self._tell()

    # What is shown

    @property
    def lanes(self) -> Lanes | None:
        """All lanes; None if there are none yet."""
        return None if self._rows is None else self._rows.lanes

    @property
    def n_shown(self) -> int:
        """How many lanes the filter lets through."""
        return 0 if self._rows is None else len(self._rows)

    @property
    def lane_px(self) -> int:
        """Height of a lane."""
        return self._lane_px

    @property
    def hand(self) -> LaneHand:
        """Cursor, mouse and chosen rule."""
        return self._hand

    @property
    def is_dragging(self) -> bool:
        """Whether the mouse drags a rule or the length."""
        return self._try is not None

    def sizeHint(self) -> QSize:
        """Room for a dozen lanes."""
        return QSize(640, 12 * LANE_PX[1])

    def minimumSizeHint(self) -> QSize:
        """Room for a few lanes."""
        return QSize(240, 4 * LANE_PX[1])

    def show_lanes(self, lanes: Lanes | None) -> None:
        """Show others; the cursor stays at its trial and epoch."""
        key, trial = self.current_key, self.current_trial
        self._rows = None if lanes is None else LaneRows(lanes, shown_lanes(lanes, *self._filter))
        row = -1 if trial is None or self._rows is None else self._rows.row_of_trial(trial)
        self._hand = replace(self._hand, row=row, box=-1, hover=-1)
        if key is not None:
            self._hand = replace(self._hand, box=self._box_of(key))
        self._follow_plan()
        self._fit()
        self._tell()

    def show_only(self, shown: LanesShown, kind: str = "", condition: tuple[str, str] | None = None) -> None:
        """Show some lanes; see `shown_lanes`."""
        self._filter = (shown, kind, condition)
        self.show_lanes(self.lanes)

    def show_rule(self, place: int) -> None:
        """Show which rule is chosen."""
        self._hand = replace(self._hand, rule=place)
        self._tell()

    def show_times(self, starts_s: tuple[float, ...], length_s: float) -> None:
        """Draw the epochs of the rules where a plan has them now; lanes may have been counted before."""
        self._starts_s, self._length_s = starts_s, length_s
        self._follow_plan()
        self.viewport().update()

    def show_key(self, key: EpochKey) -> None:
        """Put the cursor on an epoch and bring its lane into sight, without telling anybody."""
        if self._rows is None or key == self.current_key:
            return
        row = self._rows.row_of_trial(key.trial)
        if row >= 0:
            self._hand = replace(self._hand, row=row, box=self._box_of(key))
            self._see(row)
            self._tell()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self._theme = theme
        self.viewport().update()

    @property
    def current_trial(self) -> int | None:
        """Trial with the cursor."""
        if self._rows is None or not 0 <= self._hand.row < len(self._rows):
            return None
        lane: Lane = self._rows.lanes.lanes[self._rows.chosen[self._hand.row]]
        return lane.trial

    @property
    def current_key(self) -> EpochKey | None:
        """Epoch with the cursor."""
        return None if self._hand.box < 0 else self._key_of(self._hand.box)

    # Places

    def layout_now(self) -> LaneLayout:
        """Where everything is now."""
        metrics = self.fontMetrics()
        width, height = float(self.viewport().width()), float(self.viewport().height())
        left = float(metrics.horizontalAdvance("00000 !") + 16)
        words = min(max(width * _WORDS_SHARE, _WORDS_PX[0]), _WORDS_PX[1]) if width > 560 else 12.0
        right = max(left + 40.0, width - words)
        low_s, high_s = self._span_s()
        room_s = (high_s - low_s) * _ROOM_S
        px_per_s = (right - left) / (high_s - low_s + 2 * room_s) * self._zoom
        return LaneLayout(
            left=left,
            right=right,
            bottom=max(1.0, height - metrics.height() - 8),
            width=width,
            lane_px=self._lane_px,
            scroll_px=self.verticalScrollBar().value(),
            start_s=low_s - room_s + self.horizontalScrollBar().value() / px_per_s,
            px_per_s=px_per_s,
        )

    def _span_s(self) -> tuple[float, float]:
        if self._grip is not None:
            return self._grip.span_s
        return (0.0, 1.0) if self._rows is None else (self._rows.low_s, self._rows.high_s)

    def box_at(self, at: QPointF) -> int:
        """Box at a point, the chosen rule's first; -1 for none."""
        layout = self.layout_now()
        row = layout.row_at(at.y())
        if self._rows is None or not 0 <= row < len(self._rows) or at.y() >= layout.bottom:
            return -1
        boxes, _ = self._rows.boxes_of(row, row + 1)
        if not boxes.size or not layout.left <= at.x() <= layout.right:
            return -1
        starts_s, stops_s = spans_of(self._rows, boxes, self._hand)
        time_s, reach_s = layout.time_at(at.x()), _EDGE_PX / layout.px_per_s
        hit = np.flatnonzero((starts_s <= time_s) & (time_s <= stops_s + reach_s))
        if not hit.size:
            return -1
        # The chosen rule lies on top, then what is drawn later.
        is_chosen = self._rows.lanes.box_rule[boxes[hit]] == self._hand.rule
        return int(boxes[hit[np.flatnonzero(is_chosen)[-1] if is_chosen.any() else -1]])

    def rect_of(self, box: int) -> QRectF:
        """Where a box is drawn; empty if its lane is not shown."""
        if self._rows is None:
            return QRectF()
        row = self._rows.row_of_lane(int(self._rows.lanes.box_lane[box]))
        if row < 0:
            return QRectF()
        layout = self.layout_now()
        starts_s, stops_s = spans_of(self._rows, np.array([box], np.int32), self._hand)
        left, right = layout.x_of(float(starts_s[0])), layout.x_of(float(stops_s[0]))
        return QRectF(left, layout.top_of(row), right - left, layout.lane_px)

    def _is_edge(self, box: int, x: float) -> bool:
        return abs(x - self.rect_of(box).right()) <= _EDGE_PX

    def _box_of(self, key: EpochKey) -> int:
        lanes = self.lanes
        if lanes is None or key.rule not in lanes.rules:
            return -1
        rule = lanes.rules.index(key.rule)
        numbers = np.flatnonzero((lanes.box_rule == rule) & (lanes.box_piece == key.piece))
        for box in numbers.tolist():
            if lanes.lanes[lanes.box_lane[box]].trial == key.trial:
                return int(box)
        return -1

    def _key_of(self, box: int) -> EpochKey | None:
        lanes = self.lanes
        if lanes is None:
            return None
        trial = lanes.lanes[lanes.box_lane[box]].trial
        return EpochKey(trial, lanes.rules[lanes.box_rule[box]], int(lanes.box_piece[box]))

    def _follow_plan(self) -> None:
        """Move the boxes to where the plan, or the hand, has them."""
        lanes = self.lanes
        if lanes is None or len(self._starts_s) != len(lanes.rules):
            self._hand = replace(self._hand, shifts_s=(), longer_s=0.0)
            return
        starts_s, length_s = list(self._starts_s), self._length_s
        if self._try is not None and self._try.rule < len(starts_s):
            starts_s[self._try.rule], length_s = self._try.start_s, self._try.length_s
        shifts_s = tuple(now - then for now, then in zip(starts_s, lanes.starts_s, strict=True))
        self._hand = replace(self._hand, shifts_s=shifts_s, longer_s=length_s - lanes.length_s)

    def _fit(self) -> None:
        """Give the scroll bars their ranges."""
        layout = self.layout_now()
        page = int(layout.bottom)
        vertical, across = self.verticalScrollBar(), self.horizontalScrollBar()
        vertical.setRange(0, max(0, self.n_shown * self._lane_px - page))
        vertical.setPageStep(page)
        vertical.setSingleStep(self._lane_px)
        width = int(layout.right - layout.left)
        across.setRange(0, round(width * (self._zoom - 1.0)))
        across.setPageStep(width)
        across.setSingleStep(max(1, width // 20))
        self.viewport().update()

    def _see(self, row: int) -> None:
        """Scroll so far that a row is in sight."""
        layout = self.layout_now()
        top, bar = layout.top_of(row), self.verticalScrollBar()
        if top < 0:
            bar.setValue(bar.value() + top)
        elif top + self._lane_px > layout.bottom:
            bar.setValue(bar.value() + top + self._lane_px - int(layout.bottom))

    def set_lane_px(self, height: float, at_y: float | None = None) -> None:
        """Make lanes higher or lower; what is at a height stays there."""
        layout = self.layout_now()
        y = at_y if at_y is not None else layout.top_of(max(0, self._hand.row))
        y = min(max(y, 0.0), layout.bottom)
        place = (y + layout.scroll_px) / self._lane_px
        self._lane_px = min(max(round(height), LANE_PX[0]), LANE_PX[2])
        self._fit()
        self.verticalScrollBar().setValue(round(place * self._lane_px - y))

    def zoom_time(self, factor: float, at_x: float | None = None) -> None:
        """Show less (above 1) or more of the time; what is at a place stays there."""
        layout = self.layout_now()
        x = (layout.left + layout.right) / 2 if at_x is None else min(max(at_x, layout.left), layout.right)
        time_s = layout.time_at(x)
        self._zoom = min(max(self._zoom * factor, 1.0), 200.0)
        self._fit()
        moved = self.layout_now().x_of(time_s) - x
        self.horizontalScrollBar().setValue(self.horizontalScrollBar().value() + round(moved))

    # Painting

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Paint the lanes in sight."""
        with QPainter(self.viewport()) as painter:
            if self._rows is None:
                painter.fillRect(self.viewport().rect(), QColor(self._theme.panel))
            else:
                painter.drawPixmap(0, 0, self._ground(self._rows))
            if self.hasFocus():
                painter.setBrush(Qt.BrushStyle.NoBrush)
                painter.setPen(QPen(QColor(self._theme.accent), 2.0))
                painter.drawRect(self.viewport().rect().adjusted(1, 1, -1, -1))

    def _ground(self, rows: LaneRows) -> QPixmap:
        """Give the picture; where lanes are only scrolled, it moves and what comes into sight is painted."""
        ratio, layout = self.devicePixelRatioF(), self.layout_now()
        hand = replace(self._hand, focus=self.hasFocus())
        key = (id(rows), replace(layout, scroll_px=0), hand, self._theme.name, ratio, self.font().key())
        moved = self._image_scroll - layout.scroll_px
        is_same = key == self._image_key
        if is_same and not moved:
            return self._image
        can_move = is_same and abs(moved) < layout.bottom / 2 and (moved * ratio).is_integer()
        new = None
        if can_move:
            bottom = int(layout.bottom * ratio)
            self._image.scroll(0, round(moved * ratio), 0, 0, self._image.width(), bottom)
            # A lane at the edge was cut off, and so were its words.
            edge = abs(moved) + self._lane_px + self.fontMetrics().height()
            new = (0.0, edge) if moved > 0 else (layout.bottom - edge, layout.bottom)
        elif self._image.size() != self.viewport().size() * ratio:
            self._image = QPixmap(self.viewport().size() * ratio)
        self._image.setDevicePixelRatio(ratio)
        self._words.start(_WORDS_BUDGET_S)
        with QPainter(self._image) as painter:
            painter.setFont(self.font())
            paint_lanes(painter, rows, layout, hand, LaneLook(self._theme, ratio, self._words), new)
        self._image_key, self._image_scroll = key, layout.scroll_px
        if self._words.owed:
            self._image_key = None
            self._again.start()
        return self._image

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Keep the scroll bars right."""
        super().resizeEvent(event)
        self._fit()

    def scrollContentsBy(self, _dx: int, _dy: int) -> None:
        """Paint anew: numbers and axis do not move with the rest."""
        self.viewport().update()

    def changeEvent(self, event: QEvent) -> None:
        """Follow the size of the text."""
        super().changeEvent(event)
        if event.type() in (QEvent.Type.FontChange, QEvent.Type.StyleChange):
            self._fit()

    # Mouse

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """Take hold of an epoch, or of its right edge."""
        if event.button() is not Qt.MouseButton.LeftButton or self._rows is None:
            return
        layout = self.layout_now()
        row, box = layout.row_at(event.position().y()), self.box_at(event.position())
        if not 0 <= row < len(self._rows) or event.position().y() >= layout.bottom:
            return
        by_edge = box >= 0 and self._is_edge(box, event.position().x())
        self._put_cursor(row, box)
        start_s = self._start_of(int(self._rows.lanes.box_rule[box])) if box >= 0 else 0.0
        span_s = self._span_s()
        self._grip = _Grip(row, box, event.position(), start_s, self._length_s, by_edge, span_s)

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Drag, or show what can be taken hold of."""
        grip = self._grip
        if grip is None:
            self._hover(event.position())
            return
        moved = event.position() - grip.at
        is_far = self._try is not None or abs(moved.x()) >= QApplication.startDragDistance()
        if grip.box < 0 or not is_far or self.lanes is None or not self._starts_s:
            return
        moved_s = moved.x() / self.layout_now().px_per_s
        rule, piece = int(self.lanes.box_rule[grip.box]), int(self.lanes.box_piece[grip.box])
        if grip.by_edge:
            length_s = max(1 / self.lanes.output_hz, self._whole(grip.length_s + moved_s / piece))
            self._drag(Try(rule, grip.start_s, length_s))
        else:
            self._drag(Try(rule, self._whole(grip.start_s + moved_s), grip.length_s))

    def mouseReleaseEvent(self, event: QMouseEvent) -> None:
        """Let go: a drag holds, a click goes there."""
        if event.button() is not Qt.MouseButton.LeftButton or self._grip is None:
            return
        grip, tried = self._grip, self._try
        self._grip = self._try = None
        if tried is not None:
            self.dropped.emit(tried, False)
            self._follow_plan()
            self.viewport().update()
        elif self.layout_now().row_at(event.position().y()) == grip.row:
            self._go()

    def leaveEvent(self, event: QEvent) -> None:
        """Forget the lane under the mouse."""
        self._hand = replace(self._hand, hover=-1)
        self.viewport().update()
        super().leaveEvent(event)

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Scroll; with Ctrl make lanes higher, with Shift besides zoom the time."""
        factor = wheel_zoom(event)
        if factor is None:
            super().wheelEvent(event)
        elif event.modifiers() & Qt.KeyboardModifier.ShiftModifier:
            self.zoom_time(factor, event.position().x())
        else:
            grown = self._lane_px * factor
            # A small turn must not be lost in rounding.
            least = self._lane_px + (1 if factor > 1 else -1)
            self.set_lane_px(max(grown, least) if factor > 1 else min(grown, least), event.position().y())
        event.accept()

    def viewportEvent(self, event: QEvent) -> bool:
        """Say what is under the mouse."""
        if isinstance(event, QHelpEvent) and event.type() is QEvent.Type.ToolTip:
            QToolTip.showText(event.globalPos(), self.words_at(QPointF(event.pos())), self)
            return True
        return super().viewportEvent(event)

    def _hover(self, at: QPointF) -> None:
        layout = self.layout_now()
        row = layout.row_at(at.y())
        row = row if self._rows is not None and 0 <= row < len(self._rows) and at.y() < layout.bottom else -1
        if row != self._hand.hover:
            self._hand = replace(self._hand, hover=row)
            self.viewport().update()
        box = self.box_at(at)
        shape = Qt.CursorShape.ArrowCursor
        if box >= 0:
            at_edge = self._is_edge(box, at.x())
            shape = Qt.CursorShape.SizeHorCursor if at_edge else Qt.CursorShape.OpenHandCursor
        if self.viewport().cursor().shape() is not shape:
            self.viewport().setCursor(shape)

    def _drag(self, tried: Try) -> None:
        if tried == self._try:
            return
        self._try = tried
        self._follow_plan()
        self.viewport().update()
        self.trying.emit(tried)

    def _whole(self, time_s: float) -> float:
        rate_hz = 1.0 if self.lanes is None else self.lanes.output_hz
        return round(time_s * rate_hz) / rate_hz

    def _start_of(self, rule: int) -> float:
        return self._starts_s[rule] if rule < len(self._starts_s) else 0.0

    # Keys

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Move the cursor, the chosen rule or the view; see the module."""
        if event.key() == Qt.Key.Key_Escape and self._grip is not None:
            self._give_up()
            return
        if self._rows is None or not (self._by_key(event) or self._step_by_key(event)):
            super().keyPressEvent(event)

    def keyReleaseEvent(self, event: QKeyEvent) -> None:
        """End a series of steps when Alt is let go."""
        if event.key() == Qt.Key.Key_Alt:
            self.stepped.emit()
        super().keyReleaseEvent(event)

    def event(self, event: QEvent) -> bool:
        """Keep Escape to ourselves while something is dragged."""
        is_escape = isinstance(event, QKeyEvent) and event.key() == Qt.Key.Key_Escape
        if event.type() is QEvent.Type.ShortcutOverride and is_escape and self._grip is not None:
            event.accept()
            return True
        return super().event(event)

    def focusInEvent(self, event: QFocusEvent) -> None:
        """Show the focus, at the first lane if there was no cursor."""
        super().focusInEvent(event)
        if self._hand.row < 0 and self.n_shown and event.reason() is not Qt.FocusReason.MouseFocusReason:
            self._put_cursor(0, -1)
        self.viewport().update()

    def focusOutEvent(self, event: QFocusEvent) -> None:
        """Let go of everything."""
        self.stepped.emit()
        if self._grip is not None and event.reason() is not Qt.FocusReason.PopupFocusReason:
            self._give_up()
        self.viewport().update()
        super().focusOutEvent(event)

    def _by_key(self, event: QKeyEvent) -> bool:
        """Cursor and view."""
        layout = self.layout_now()
        page = max(1, int(layout.bottom) // self._lane_px - 1)
        row, last = self._hand.row, self.n_shown - 1
        keys, held = Qt.Key, plain(event.modifiers())
        rows = {
            keys.Key_Up: row - 1,
            keys.Key_Down: row + 1,
            keys.Key_PageUp: row - page,
            keys.Key_PageDown: row + page,
            keys.Key_Home: 0,
            keys.Key_End: last,
        }
        control, shift = Qt.KeyboardModifier.ControlModifier, Qt.KeyboardModifier.ShiftModifier
        key = Qt.Key(event.key())
        if held == Qt.KeyboardModifier.NoModifier:
            if key in rows:
                self._put_cursor(min(max(rows[key], 0), last), -1, keep_rule=True)
            elif key in (keys.Key_Left, keys.Key_Right):
                self._next_box(1 if key is keys.Key_Right else -1)
            elif key in (keys.Key_Return, keys.Key_Enter):
                self._go()
            else:
                return False
            return True
        grows = {keys.Key_PageUp: _ZOOM, keys.Key_PageDown: 1 / _ZOOM}
        if key in grows and held == control:
            self.set_lane_px(self._lane_px * grows[key])
            return True
        if key in grows and held == control | shift:
            self.zoom_time(grows[key])
            return True
        return False

    def _step_by_key(self, event: QKeyEvent) -> bool:
        """Chosen rule and length, with Alt."""
        keys, held = Qt.Key, plain(event.modifiers())
        alt, shift = Qt.KeyboardModifier.AltModifier, Qt.KeyboardModifier.ShiftModifier
        rule, lanes = self._hand.rule, self.lanes
        if held not in (alt, alt | shift) or lanes is None or not 0 <= rule < len(self._starts_s):
            return False
        sample_s = 1 / lanes.output_hz
        step_s = sample_s if held & shift else max(sample_s, self._whole(ms_to_s(STEP_MS)))
        start_s, length_s = self._start_of(rule), self._length_s
        moves = {
            keys.Key_Left: (start_s - step_s, length_s),
            keys.Key_Right: (start_s + step_s, length_s),
            keys.Key_Up: (start_s, length_s + step_s),
            keys.Key_Down: (start_s, max(sample_s, length_s - step_s)),
        }
        key = Qt.Key(event.key())
        if key not in moves:
            return False
        start_s, length_s = moves[key]
        self.dropped.emit(Try(rule, self._whole(start_s), self._whole(length_s)), True)
        return True

    def _next_box(self, step: int) -> None:
        rows, row = self._rows, max(0, self._hand.row)
        if rows is None or row >= len(rows):
            return
        boxes, _ = rows.boxes_of(row, row + 1)
        if not boxes.size:
            return
        starts_s, _ = spans_of(rows, boxes, self._hand)
        in_time = boxes[np.argsort(starts_s, kind="stable")].tolist()
        if self._hand.box in in_time:
            place = min(max(in_time.index(self._hand.box) + step, 0), len(in_time) - 1)
        else:
            place = 0 if step > 0 else len(in_time) - 1
        self._put_cursor(row, in_time[place])

    def _put_cursor(self, row: int, box: int, *, keep_rule: bool = False) -> None:
        """Move the cursor, tell what is chosen."""
        rows = self._rows
        if rows is None or not 0 <= row < len(rows):
            return
        if keep_rule and self._hand.box >= 0:
            # To the same rule's epoch of another lane.
            lanes, old = rows.lanes, self._hand.box
            boxes, _ = rows.boxes_of(row, row + 1)
            same = (lanes.box_rule[boxes] == lanes.box_rule[old]) & (
                lanes.box_piece[boxes] == lanes.box_piece[old]
            )
            box = int(boxes[same][0]) if same.any() else -1
        changed = (row, box) != (self._hand.row, self._hand.box)
        self._hand = replace(self._hand, row=row, box=box)
        self._see(row)
        if box >= 0 and int(rows.lanes.box_rule[box]) != self._hand.rule:
            self._hand = replace(self._hand, rule=int(rows.lanes.box_rule[box]))
            self.chosen.emit(self._hand.rule)
        self._tell()
        if changed:
            self.current_changed.emit(self.current_key)

    def _go(self) -> None:
        trial = self.current_trial
        if trial is not None:
            self.wanted.emit(trial, self.current_key)

    def _give_up(self) -> None:
        was_tried = self._try is not None
        self._grip = self._try = None
        self._follow_plan()
        self.viewport().update()
        if was_tried:
            self.given_up.emit()

    # Words

    def words_at(self, at: QPointF | QPoint) -> str:
        """Say what is at a point: an epoch and its fate, or a trial and what is wrong with it."""
        at = QPointF(at)
        layout = self.layout_now()
        row = layout.row_at(at.y())
        if self._rows is None or not 0 <= row < len(self._rows) or at.y() >= layout.bottom:
            return ""
        box = self.box_at(at)
        return self._box_words(box) if box >= 0 else self._lane_words(row)

    def _box_words(self, box: int) -> str:
        lanes, key = self.lanes, self._key_of(box)
        if lanes is None or key is None:
            return ""
        fate = FATES[lanes.box_fate[box]]
        piece = f" piece {key.piece}" if key.piece > 1 else ""
        start_s, stop_s = float(lanes.box_start_s[box]), float(lanes.box_stop_s[box])
        what = (
            f"{key.rule}{piece} kept"
            if fate is Fate.KEPT
            else conflict_words(f"{key.rule}{piece}", fate, lanes.box_detail[box])
        )
        return f"Trial {key.trial}, {what}. {start_s:.3f} to {stop_s:.3f} s of the recording."

    def _lane_words(self, row: int) -> str:
        rows = self._rows
        if rows is None:
            return ""
        number = int(rows.chosen[row])
        lane = rows.lanes.lanes[number]
        boxes, _ = rows.boxes_of(row, row + 1)
        n_kept = int(rows.box_kept[boxes].sum())
        kind = f" of kind {lane.kind}" if lane.kind else ""
        state = "complete" if not lane.words else lane.words
        placed = "" if rows.lanes.has_zero[number] else f" It has no {rows.lanes.zero} to be placed by."
        return f"Trial {lane.trial}{kind}, {n_kept} of {boxes.size} epochs kept: {state}.{placed}"

    def _tell(self) -> None:
        """Describe what the cursor is on, for screen readers, and paint."""
        self.viewport().update()
        if self._rows is None or not 0 <= self._hand.row < len(self._rows):
            self.setAccessibleDescription(f"{self.n_shown} trials")
            return
        words = self._lane_words(self._hand.row)
        if self._hand.box >= 0:
            words = f"{self._box_words(self._hand.box)} {words}"
        self.setAccessibleDescription(words)
