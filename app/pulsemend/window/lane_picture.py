"""Painting of lanes: only those in sight, alike things at once."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QLineF, QPointF, QRectF, Qt
from PySide6.QtGui import QColor, QFontMetricsF, QPainter, QPen

from pulsemend.mending.epoch_lanes import LaneState
from pulsemend.window.lane_rows import LaneRows
from pulsemend.window.lane_style import draw_role, rule_brush, rule_style
from pulsemend.window.lane_words import Words
from pulsemend.window.theme import Theme

NARROWEST_GAP_PX = 3.0
LARGEST_SHAPE = 11
LEAST_ROOM_PX = 40
LOW_PX = 14
"""Lanes lower than this have no room around their boxes."""
_TICK_PX = 90
"""About how far apart the numbers of the axis are."""


@dataclass(frozen=True)
class LaneLayout:
    """Where everything is, in pixels of the widget.

    Parameters
    ----------
    left, right : float
        Of the stretch where times are drawn; numbers of trials stand left of it, words right of it.
    bottom : float
        Where lanes end and the axis begins.
    width : float
    lane_px : int
        Height of a lane.
    scroll_px : int
        How far the lanes are scrolled down.
    start_s, px_per_s : float
        Time at `left`, and scale.
    """

    left: float
    right: float
    bottom: float
    width: float
    lane_px: int
    scroll_px: int
    start_s: float
    px_per_s: float

    def x_of(self, time_s: float) -> float:
        """Place of a time since a lane's zero."""
        return self.left + (time_s - self.start_s) * self.px_per_s

    def xs_of(self, times_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Places of times since the zeros of their lanes."""
        return self.left + (times_s - self.start_s) * self.px_per_s

    def time_at(self, x: float) -> float:
        """Time since a lane's zero at a place."""
        return self.start_s + (x - self.left) / self.px_per_s

    def top_of(self, row: int) -> int:
        """Upper edge of a row."""
        return row * self.lane_px - self.scroll_px

    def row_at(self, y: float) -> int:
        """Row at a height; it need not exist."""
        return int((y + self.scroll_px) // self.lane_px)


@dataclass(frozen=True)
class LaneHand:
    """Where the hand is, and what it holds.

    Parameters
    ----------
    row : int
        With the keyboard's cursor; -1 for none.
    box : int
        Number of the box with the cursor; -1 for none.
    hover : int
        Row under the mouse; -1 for none.
    rule : int
        Chosen rule; -1 for none.
    shifts_s : tuple of float
        How far the boxes of every rule are moved from where they were counted.
    longer_s : float
        How much longer epochs are than when they were counted.
    focus : bool
        Whether keys go here.
    """

    row: int = -1
    box: int = -1
    hover: int = -1
    rule: int = -1
    shifts_s: tuple[float, ...] = ()
    longer_s: float = 0.0
    focus: bool = False


def spans_of(
    rows: LaneRows, boxes: NDArray[np.int32], hand: LaneHand
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Give starts and ends of boxes, moved as the hand moves them.

    Parameters
    ----------
    rows : LaneRows
        Where they belong to.
    boxes : array of int
        Which.
    hand : LaneHand
        How far their rules are moved.
    """
    lanes = rows.lanes
    starts_s, stops_s = rows.box_start_s[boxes], rows.box_stop_s[boxes]
    shifts_s = np.array(hand.shifts_s or (0.0,) * max(1, len(lanes.rules)))
    rule = lanes.box_rule[boxes]
    moved_s = shifts_s[rule] + (lanes.box_piece[boxes] - 1) * hand.longer_s
    return starts_s + moved_s, stops_s + moved_s + hand.longer_s


@dataclass(frozen=True)
class LaneLook:
    """Colours, pixels of the screen per pixel of the painter, and pictures of texts."""

    theme: Theme
    ratio: float
    words: Words


def paint_lanes(
    painter: QPainter,
    rows: LaneRows,
    layout: LaneLayout,
    hand: LaneHand,
    look: LaneLook,
    between: tuple[float, float] | None = None,
) -> None:
    """Paint what is in sight.

    Parameters
    ----------
    painter : QPainter
        Of the whole widget.
    rows : LaneRows
        What is shown.
    layout : LaneLayout
        Where.
    hand : LaneHand
        What is chosen.
    look : LaneLook
        Colours.
    between : (float, float) or None
        Heights between which it is to be painted; None: everywhere, the axis too.
    """
    metrics = QFontMetricsF(painter.font())
    top, bottom = (0.0, layout.bottom) if between is None else between
    # Words of low lanes reach into their neighbours.
    beyond = math.ceil(metrics.height() / layout.lane_px)
    sight = (
        max(0, layout.row_at(top) - beyond),
        min(len(rows), layout.row_at(bottom) + 1 + beyond),
    )
    painter.save()
    # Patterns move with the lanes, or those that were only scrolled would look different.
    painter.setBrushOrigin(0, -layout.scroll_px)
    painter.setClipRect(QRectF(0, top, layout.width, bottom - top))
    painter.fillRect(QRectF(0, top, layout.width, bottom - top), QColor(look.theme.panel))
    _paint_grounds(painter, sight, layout, hand, look.theme)
    _paint_zero(painter, layout, look.theme)
    if sight[0] < sight[1]:
        painter.setClipRect(QRectF(layout.left, top, layout.right - layout.left, bottom - top))
        _paint_gaps(painter, rows, sight, layout, look.theme)
        _paint_boxes(painter, rows, sight, layout, hand, look)
        _paint_markers(painter, rows, sight, layout, look)
        painter.setClipRect(QRectF(0, top, layout.width, bottom - top))
        _paint_words(painter, rows, sight, layout, hand, look)
    painter.restore()
    if between is None:
        _paint_axis(painter, layout, look, metrics)


def _paint_grounds(
    painter: QPainter, sight: tuple[int, int], layout: LaneLayout, hand: LaneHand, theme: Theme
) -> None:
    first, stop = sight
    for row, colour in ((hand.hover, theme.field), (hand.row, theme.accent_soft)):
        if first <= row < stop:
            painter.fillRect(QRectF(0, layout.top_of(row), layout.width, layout.lane_px), QColor(colour))
    painter.setPen(QPen(QColor(theme.line), 1.0))
    if layout.lane_px >= 8:
        below = [layout.top_of(row) + layout.lane_px - 0.5 for row in range(first, stop)]
        painter.drawLines([QLineF(layout.left, y, layout.right, y) for y in below])
    if hand.focus and first <= hand.row < stop:
        painter.setPen(QPen(QColor(theme.accent), 2.0))
        painter.drawRect(QRectF(1, layout.top_of(hand.row) + 1, layout.width - 2, layout.lane_px - 2))


def _paint_zero(painter: QPainter, layout: LaneLayout, theme: Theme) -> None:
    x = round(layout.x_of(0.0)) + 0.5
    painter.setPen(QPen(QColor(theme.line), 1.0))
    painter.drawLine(QPointF(x, 0), QPointF(x, layout.bottom))


def _paint_gaps(
    painter: QPainter, rows: LaneRows, sight: tuple[int, int], layout: LaneLayout, theme: Theme
) -> None:
    """Gaps to scale, but never narrower than can be seen."""
    starts_s, stops_s, of_rows = rows.gaps_of(*sight)
    lefts = layout.xs_of(starts_s)
    widths = np.maximum((stops_s - starts_s) * layout.px_per_s, NARROWEST_GAP_PX)
    tops = of_rows * layout.lane_px - layout.scroll_px + 1
    height = layout.lane_px - 2
    painter.setPen(Qt.PenStyle.NoPen)
    painter.setBrush(QColor(theme.gap))
    painter.drawRects(
        [
            QRectF(x, y, width, height)
            for x, y, width in zip(lefts.tolist(), tops.tolist(), widths.tolist(), strict=True)
        ]
    )


def _paint_boxes(
    painter: QPainter,
    rows: LaneRows,
    sight: tuple[int, int],
    layout: LaneLayout,
    hand: LaneHand,
    look: LaneLook,
) -> None:
    """Kept epochs are filled; left-out ones are hollow and crossed by a line."""
    theme = look.theme
    boxes, of_rows = rows.boxes_of(*sight)
    if not boxes.size:
        return
    starts_s, stops_s = spans_of(rows, boxes, hand)
    inset = 1 if layout.lane_px < LOW_PX else 3
    lefts = np.round(layout.xs_of(starts_s)) + 0.5
    widths = np.maximum(np.round((stops_s - starts_s) * layout.px_per_s), 2.0)
    tops = of_rows * layout.lane_px - layout.scroll_px + inset + 0.5
    height = max(2, layout.lane_px - 2 * inset - 1)
    # One number per look: alike boxes are drawn at once, those of the chosen rule last and on top.
    rule = rows.lanes.box_rule[boxes]
    looks = np.where(rule == hand.rule, 2 * len(rows.lanes.rules), 0) + 2 * rule + rows.box_kept[boxes]
    order = np.argsort(looks, kind="stable")
    firsts = np.flatnonzero(np.diff(looks[order], prepend=-1))
    lists = [one[order].tolist() for one in (lefts, tops, widths)]
    for first, stop in zip(firsts, [*firsts[1:], len(order)], strict=True):
        own = [part[first:stop] for part in lists]
        place = int(rule[order[first]])
        style = rule_style(place, theme)
        is_kept = bool(rows.box_kept[boxes[order[first]]])
        painter.setPen(QPen(QColor(style.edge), 1.0))
        painter.setBrush(rule_brush(style, look.ratio) if is_kept else Qt.BrushStyle.NoBrush)
        painter.drawRects([QRectF(x, y, width, height) for x, y, width in zip(*own, strict=True)])
        if place == hand.rule:
            # Twice a thin line: a thick one takes ten times as long.
            painter.setBrush(Qt.BrushStyle.NoBrush)
            inner = [
                QRectF(x + 1, y + 1, max(1.0, width - 2), max(1, height - 2))
                for x, y, width in zip(*own, strict=True)
            ]
            painter.drawRects(inner)
        if not is_kept:
            painter.setPen(QPen(QColor(theme.attention), 1.0))
            painter.drawLines([QLineF(x, y + height, x + width, y) for x, y, width in zip(*own, strict=True)])
    if hand.box >= 0:
        _paint_cursor(painter, rows, layout, hand, theme)


def _paint_cursor(
    painter: QPainter, rows: LaneRows, layout: LaneLayout, hand: LaneHand, theme: Theme
) -> None:
    """Frame of the one box that keys and Return are about."""
    box = np.array([hand.box], np.int32)
    row = rows.row_of_lane(int(rows.lanes.box_lane[hand.box]))
    if row < 0:
        return
    starts_s, stops_s = spans_of(rows, box, hand)
    left, right = layout.x_of(float(starts_s[0])), layout.x_of(float(stops_s[0]))
    painter.setPen(QPen(QColor(theme.text), 2.0))
    painter.setBrush(Qt.BrushStyle.NoBrush)
    painter.drawRect(QRectF(left, layout.top_of(row) + 1, max(2.0, right - left), layout.lane_px - 2))


def _paint_markers(
    painter: QPainter, rows: LaneRows, sight: tuple[int, int], layout: LaneLayout, look: LaneLook
) -> None:
    markers, of_rows = rows.markers_of(*sight)
    if not markers.size:
        return
    lanes = rows.lanes
    xs = layout.xs_of(rows.marker_s[markers])
    size = float(min(LARGEST_SHAPE, max(4, layout.lane_px - 6)))
    tops = of_rows * layout.lane_px - layout.scroll_px
    stands_in, slots = lanes.marker_stands_in[markers], lanes.marker_slot[markers]
    for slot, role in enumerate(lanes.roles):
        own = np.flatnonzero((slots == slot) & ~stands_in)
        if own.size:
            middles = (tops[own] + layout.lane_px / 2).tolist()
            places = list(zip(xs[own].tolist(), middles, strict=True))
            draw_role(painter, role, places, size, look.theme, look.ratio)
    painter.setPen(QPen(QColor(look.theme.quiet), 2.0, Qt.PenStyle.DotLine))
    # Anchors without a marker: a dotted line from edge to edge.
    painter.drawLines(
        [
            QLineF(xs[place], tops[place] + 2, xs[place], tops[place] + layout.lane_px - 2)
            for place in np.flatnonzero(stands_in).tolist()
        ]
    )


def _paint_words(
    painter: QPainter,
    rows: LaneRows,
    sight: tuple[int, int],
    layout: LaneLayout,
    hand: LaneHand,
    look: LaneLook,
) -> None:
    """Numbers of trials on the left, what there is to say on the right; low lanes take turns."""
    theme, height = look.theme, QFontMetricsF(painter.font()).height()
    step = max(1, math.ceil(height / layout.lane_px))
    room = layout.width - layout.right - 12
    current = [row for row in (hand.hover, hand.row) if sight[0] <= row < sight[1]]
    first = sight[0] + -sight[0] % step
    others = [row for row in range(first, sight[1], step) if all(abs(row - one) >= step for one in current)]
    for row in [*others, *dict.fromkeys(current)]:
        is_current = row in current
        lane = rows.lanes.lanes[rows.chosen[row]]
        top = layout.top_of(row) + (layout.lane_px - height) / 2
        if step > 1 and is_current:
            for left, width in ((0.0, layout.left - 4), (layout.right + 4, room + 8)):
                painter.fillRect(QRectF(left, top, width, height), QColor(theme.accent_soft))
        is_whole = lane.state is LaneState.COMPLETE
        name, colour = lane_name(lane.trial, is_whole=is_whole), theme.text if is_current else theme.quiet
        look.words.draw(painter, (8, top), name, colour, layout.left)
        if room > LEAST_ROOM_PX and lane.words:
            colour = theme.attention if not is_whole or is_current else theme.quiet
            look.words.draw(painter, (layout.right + 8, top), lane.words, colour, room)


def lane_name(trial: int, *, is_whole: bool) -> str:
    """Write the number of a trial, with a mark where something is wrong with it as a whole."""
    return f"{trial}" if is_whole else f"{trial} !"


def _paint_axis(painter: QPainter, layout: LaneLayout, look: LaneLook, metrics: QFontMetricsF) -> None:
    theme = look.theme
    painter.fillRect(QRectF(0, layout.bottom, layout.width, 100), QColor(theme.panel))
    painter.setPen(QPen(QColor(theme.line), 1.0))
    painter.drawLine(QPointF(layout.left, layout.bottom + 0.5), QPointF(layout.right, layout.bottom + 0.5))
    top = layout.bottom + 6
    look.words.draw(painter, (8, top), "trial", theme.quiet, layout.left)
    for time_s, text in ticks(layout):
        x = layout.x_of(time_s)
        painter.drawLine(QPointF(x, layout.bottom), QPointF(x, layout.bottom + 4))
        left = x - metrics.horizontalAdvance(text) / 2
        look.words.draw(painter, (left, top), text, theme.quiet, _TICK_PX)


def ticks(layout: LaneLayout) -> list[tuple[float, str]]:
    """Give round times for the axis, with their texts; the last one bears the unit.

    Parameters
    ----------
    layout : LaneLayout
        What is in sight.
    """
    least = _TICK_PX / layout.px_per_s
    power = 10.0 ** np.floor(np.log10(least))
    step = next(power * factor for factor in (1, 2, 5, 10) if power * factor >= least * 0.999)
    first = int(np.ceil(layout.start_s / step))
    last = int(np.floor(layout.time_at(layout.right) / step))
    digits = max(0, -int(np.floor(np.log10(step))))
    numbers = [
        (number * step, f"{number * step:.{digits}f}".replace("-", "\u2212"))
        for number in range(first, last + 1)
    ]
    return [
        (time_s, f"{text} s" if place == len(numbers) - 1 else text)
        for place, (time_s, text) in enumerate(numbers)
    ]
