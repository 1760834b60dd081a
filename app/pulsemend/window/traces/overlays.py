"""What is painted behind and over the traces: bands, events with labels, times, the scale bar, a measure."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache
from itertools import groupby

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QLineF, QPointF, QRectF, Qt
from PySide6.QtGui import QBrush, QColor, QFontMetricsF, QImage, QPainter, QPen

from pulsemend.window.theme import Theme
from pulsemend.window.traces.clock import clock, duration, microvolts, nice, nice_s, number, ticks
from pulsemend.window.traces.geometry import AXIS, HEADER, Rows, TimeScale
from pulsemend.window.traces.labels import LEAST_ROOM, Placed, place
from pulsemend.window.traces.model import Bands, Events, Measure, Overlays
from pulsemend.window.traces.shapes import draw_roles
from pulsemend.window.traces.ticks import draw_ticks

LEAST_BAND = 3.0
"""Bands narrower than this are drawn as a marker of this width."""
_SHAPE = 11.0
_HALF_SHAPE = _SHAPE / 2 + 4
_CROWDED = 7.0
"""Pixels per event below which events are ticks instead of shapes with lines."""
_MARK_HEIGHT = 6.0
_SPARSE_SHARE = 0.2
"""Share of the width up to which markers of narrow gaps reach down over the traces."""


@dataclass(frozen=True)
class Canvas:
    """What every painting function needs.

    Parameters
    ----------
    painter : QPainter
    scale : TimeScale
    rows : Rows
    width : float
        Of the widget.
    theme : Theme
    """

    painter: QPainter
    scale: TimeScale
    rows: Rows
    width: float
    theme: Theme

    def band(self, start_s: float, stop_s: float) -> tuple[float, float]:
        """Left edge and width of a stretch of time, cut to just beyond the widget."""
        left = max(-LEAST_BAND, self.scale.x_of(start_s))
        right = min(self.width + LEAST_BAND, self.scale.x_of(stop_s))
        return left, right - left

    def metrics(self) -> QFontMetricsF:
        """Metrics of the painter's font."""
        return QFontMetricsF(self.painter.font())


def paint_behind(canvas: Canvas, overlays: Overlays, names: Sequence[str]) -> None:
    """Paint bad stretches, epochs and gaps, to scale.

    Parameters
    ----------
    canvas : Canvas
        Where.
    overlays : Overlays
        What.
    names : sequence of str
        Names of all rows, top to bottom.
    """
    area = QRectF(0, canvas.rows.top, canvas.width, canvas.rows.area)
    painter = canvas.painter
    for box in _boxes(canvas, overlays.epochs, area):
        painter.fillRect(box, QColor(canvas.theme.accent_soft))
    for box in _boxes(canvas, overlays.bad_stretches, area):
        painter.fillRect(box, QColor(canvas.theme.bad_stretch))
        # A hatch as well, so that the colour does not stand alone.
        box.setHeight(5)
        painter.fillRect(box, QBrush(QColor(canvas.theme.attention), Qt.BrushStyle.BDiagPattern))
    marked = False
    for bands, part in _gap_parts(canvas, overlays, names):
        # One row of marks is enough: all rows have gaps at the same pulses.
        is_crowded = _is_crowded(canvas, bands)
        for box in _boxes(canvas, bands, part, marks=not (is_crowded and marked)):
            painter.fillRect(box, QColor(canvas.theme.gap))
        marked = marked or is_crowded


def paint_band_labels(canvas: Canvas, overlays: Overlays) -> None:
    """Write what epochs and bad stretches are called over the traces."""
    _paint_band_labels(canvas, overlays.epochs, canvas.theme.accent)
    _paint_band_labels(canvas, overlays.bad_stretches, canvas.theme.text)


def paint_events(canvas: Canvas, events: Events, current: int | None) -> int:
    """Paint the shapes, lines and labels of all events in view.

    Parameters
    ----------
    canvas : Canvas
        Where.
    events : Events
        All of them.
    current : int or None
        Place of the event that is chosen.

    Returns
    -------
    int
        How many labels have no room.
    """
    margin_s = _SHAPE * canvas.scale.column_s * canvas.scale.ratio
    seen = events.within(canvas.scale.start_s - margin_s, canvas.scale.stop_s + margin_s)
    if len(seen) * _CROWDED > canvas.width:
        ticked = canvas.scale.xs_of(events.time_s[seen.start : seen.stop])
        draw_ticks(
            canvas.painter,
            events.roles[seen.start : seen.stop],
            ticked,
            (3, int(canvas.width), HEADER - 6),
            canvas.theme,
        )
        return sum(1 for label in events.labels[seen.start : seen.stop] if label)
    xs = canvas.scale.xs_of(events.time_s[seen.start : seen.stop]).tolist()
    roles = list(events.roles[seen.start : seen.stop])
    height = canvas.rows.area + 4
    for place_, role, x in zip(seen, roles, xs, strict=True):
        colour = canvas.theme.roles[role]
        at = QPointF(_snapped(x, canvas.scale.ratio) - 0.5, HEADER - 4)
        if place_ == current:
            canvas.painter.fillRect(QRectF(at.x() - 0.5, at.y(), 2, height), QColor(colour))
        else:
            canvas.painter.drawImage(at, _dashed(colour, height))
    draw_roles(canvas.painter, roles, (xs, HEADER / 2), _SHAPE, canvas.theme, canvas.scale.ratio)
    return _paint_labels(canvas, list(events.labels[seen.start : seen.stop]), xs)


def paint_times(canvas: Canvas) -> None:
    """Paint round times below the traces."""
    top = canvas.rows.top + canvas.rows.area
    canvas.painter.setPen(QPen(QColor(canvas.theme.line), 1.0))
    canvas.painter.drawLine(QLineF(0, top + 0.5, canvas.width, top + 0.5))
    metrics = canvas.metrics()
    least = metrics.horizontalAdvance("00:00:00.000") + 12
    times, decimals = ticks(canvas.scale.start_s, canvas.scale.stop_s, max(1, int(canvas.width / least)))
    for time_s in times:
        x = canvas.scale.x_of(time_s)
        canvas.painter.setPen(QColor(canvas.theme.line))
        canvas.painter.drawLine(QLineF(_snapped(x, 1), top, _snapped(x, 1), top + 4))
        text = clock(time_s, decimals)
        width = metrics.horizontalAdvance(text)
        left = min(max(2.0, x - width / 2), canvas.width - width - 2)
        canvas.painter.setPen(QColor(canvas.theme.quiet))
        canvas.painter.drawText(QPointF(left, top + AXIS - 5), text)


def paint_scale_bar(canvas: Canvas, row_uv: float) -> None:
    """Paint how much a height and a width in the lower right corner stand for."""
    uv_per_pixel = row_uv / canvas.rows.row_height
    bar_uv = nice(uv_per_pixel * min(60.0, 0.3 * canvas.rows.area))
    bar_s = nice_s(canvas.scale.column_s * canvas.scale.ratio * min(90.0, 0.2 * canvas.width))
    height = bar_uv / uv_per_pixel
    width = bar_s / (canvas.scale.column_s * canvas.scale.ratio)
    texts = (f"{number(bar_uv)} µV", duration(bar_s))
    metrics = canvas.metrics()
    text_width = max(metrics.horizontalAdvance(text) for text in texts)
    right = canvas.width - 10.0
    bottom = canvas.rows.top + canvas.rows.area - 8.0
    left = right - max(width, text_width + 6)
    box = QRectF(left - 8, bottom - max(height, 2 * metrics.height()) - 6, right - left + 14, 0)
    box.setBottom(bottom + 5)
    ground = QColor(canvas.theme.panel)
    ground.setAlpha(225)
    canvas.painter.fillRect(box, ground)
    canvas.painter.setPen(QPen(QColor(canvas.theme.text), 2.0))
    canvas.painter.drawLine(QLineF(left, bottom, left, bottom - height))
    canvas.painter.drawLine(QLineF(left, bottom, left + width, bottom))
    canvas.painter.drawText(QPointF(left + 5, bottom - metrics.height() - 2), texts[0])
    canvas.painter.drawText(QPointF(left + 5, bottom - 4), texts[1])


def paint_word(canvas: Canvas, word: str) -> None:
    """Paint in words what the traces show where that is not obvious."""
    metrics = canvas.metrics()
    box = QRectF(8, canvas.rows.top + 6, metrics.horizontalAdvance(word) + 12, metrics.height() + 4)
    canvas.painter.fillRect(box, QColor(canvas.theme.attention_soft))
    canvas.painter.setPen(QColor(canvas.theme.text))
    canvas.painter.drawText(box, Qt.AlignmentFlag.AlignCenter, word)


def paint_measure(canvas: Canvas, measure: Measure, y: tuple[float, float]) -> None:
    """Paint two points and what lies between them."""
    painter = canvas.painter
    start, stop = canvas.scale.x_of(measure.start_s), canvas.scale.x_of(measure.stop_s)
    painter.setPen(QPen(QColor(canvas.theme.accent), 1.5))
    painter.drawLine(QLineF(start, y[0], stop, y[0]))
    painter.drawLine(QLineF(stop, y[0], stop, y[1]))
    for x, at in ((start, y[0]), (stop, y[1])):
        painter.drawRect(QRectF(x - 2.5, at - 2.5, 5, 5))
    words = f"{duration(measure.duration_s)}, {microvolts(measure.difference_uv)} on {measure.channel}"
    metrics = canvas.metrics()
    width = metrics.horizontalAdvance(words) + 12
    left = min(max(2.0, stop + 8), canvas.width - width - 2)
    top = min(max(canvas.rows.top + 2.0, y[1] + 8), canvas.rows.top + canvas.rows.area - metrics.height() - 6)
    box = QRectF(left, top, width, metrics.height() + 4)
    painter.fillRect(box, QColor(canvas.theme.panel))
    painter.drawRect(box)
    painter.setPen(QColor(canvas.theme.text))
    painter.drawText(box, Qt.AlignmentFlag.AlignCenter, words)


def paint_chosen_stretch(canvas: Canvas, start_s: float, stop_s: float) -> None:
    """Paint the stretch of time that is being chosen, with its length."""
    left, width = canvas.band(min(start_s, stop_s), max(start_s, stop_s))
    colour = QColor(canvas.theme.accent)
    colour.setAlpha(40)
    box = QRectF(left, canvas.rows.top, width, canvas.rows.area)
    canvas.painter.fillRect(box, colour)
    canvas.painter.setPen(QPen(QColor(canvas.theme.accent), 1.5))
    canvas.painter.drawLine(box.topLeft(), box.bottomLeft())
    canvas.painter.drawLine(box.topRight(), box.bottomRight())
    text = duration(abs(stop_s - start_s))
    canvas.painter.drawText(QPointF(left + 6, box.bottom() - 8), text)


def event_at(canvas_scale: TimeScale, events: Events, x: float) -> int | None:
    """Place of the event whose shape lies under a point of the header strip."""
    reach_s = (_SHAPE / 2 + 2) * canvas_scale.column_s * canvas_scale.ratio
    time_s = canvas_scale.time_at(x)
    seen = events.within(time_s - reach_s, time_s + reach_s)
    return min(seen, key=lambda place_: abs(float(events.time_s[place_]) - time_s), default=None)


def _spans(canvas: Canvas, bands: Bands) -> tuple[NDArray[np.intp], NDArray[np.float64], NDArray[np.float64]]:
    """Places, left and right edges of the bands in view, cut to just beyond the widget."""
    seen = bands.within(canvas.scale.start_s, canvas.scale.stop_s)
    beyond = (-LEAST_BAND, canvas.width + LEAST_BAND)
    return (
        seen,
        np.clip(canvas.scale.xs_of(bands.start_s[seen]), *beyond),
        np.clip(canvas.scale.xs_of(bands.stop_s[seen]), *beyond),
    )


def _gap_parts(canvas: Canvas, overlays: Overlays, names: Sequence[str]) -> list[tuple[Bands, QRectF]]:
    """Gaps and the part of the widget they hold in: everything, or runs of rows with the same gaps."""
    rows, usual = canvas.rows, overlays.gaps
    bottom = float(rows.top + rows.area)
    of_rows = [overlays.own_gaps.get(names[row], usual) for row in rows.visible]
    if all(bands is usual for bands in of_rows):
        return [(usual, QRectF(0, rows.top, canvas.width, rows.area))]
    parts: list[tuple[Bands, QRectF]] = []
    row = rows.visible.start
    for _, run in groupby(of_rows, key=id):
        same = list(run)
        half = 0.5 * rows.row_height
        top = max(float(rows.top), rows.middle(row) - half)
        row += len(same)
        parts.append((same[0], QRectF(0, top, canvas.width, min(bottom, rows.middle(row - 1) + half) - top)))
    return parts


def _is_crowded(canvas: Canvas, bands: Bands) -> bool:
    """Whether narrow bands are so many that they are marks along the upper edge."""
    _, left, right = _spans(canvas, bands)
    return int((right - left < LEAST_BAND).sum()) * LEAST_BAND > _SPARSE_SHARE * canvas.width


def _boxes(canvas: Canvas, bands: Bands, area: QRectF, *, marks: bool = True) -> list[QRectF]:
    """Boxes of the bands in view, to scale; narrow ones are markers of one width, merged where they touch."""
    _, left, right = _spans(canvas, bands)
    narrow = right - left < LEAST_BAND
    boxes = [
        QRectF(a, area.top(), b - a, area.height())
        for a, b in zip(left[~narrow], right[~narrow], strict=True)
    ]
    if not marks:
        return boxes
    middle = 0.5 * (left[narrow] + right[narrow])
    # So many that they would hide the rest stay a row of marks along the upper edge.
    reach_down = not _is_crowded(canvas, bands)
    height = area.height() if reach_down else min(_MARK_HEIGHT, area.height())
    starts = middle - LEAST_BAND / 2
    firsts = np.flatnonzero(np.diff(starts, prepend=-np.inf) > LEAST_BAND)
    lasts = np.append(firsts[1:], starts.size)[: firsts.size] - 1
    boxes += [
        QRectF(starts[a], area.top(), starts[b] - starts[a] + LEAST_BAND, height)
        for a, b in zip(firsts, lasts, strict=True)
    ]
    return boxes


def _paint_band_labels(canvas: Canvas, bands: Bands, ink: str) -> None:
    """Write the labels of bands along the lower edge, each within its own band."""
    metrics = canvas.metrics()
    bottom = canvas.rows.top + canvas.rows.area - 3.0
    free_from = 0.0
    ground = QColor(canvas.theme.panel)
    ground.setAlpha(225)
    if not bands.labels:
        return
    for place_, left, right in zip(*_spans(canvas, bands), strict=True):
        label = bands.labels[place_]
        start = max(left + 6, 6.0, free_from)
        room = min(right, canvas.width) - start - 6
        if label and room > LEAST_ROOM:
            text = metrics.elidedText(label, Qt.TextElideMode.ElideRight, room)
            box = QRectF(start - 3, 0, metrics.horizontalAdvance(text) + 6, metrics.height())
            box.moveBottom(bottom)
            canvas.painter.fillRect(box, ground)
            canvas.painter.setPen(QColor(ink))
            canvas.painter.drawText(box, Qt.AlignmentFlag.AlignCenter, text)
            free_from = box.right() + 6


def _paint_labels(canvas: Canvas, labels: list[str], xs: list[float]) -> int:
    metrics = canvas.metrics()
    placed = place(xs, [metrics.horizontalAdvance(label) for label in labels], _HALF_SHAPE, canvas.width - 4)
    canvas.painter.setPen(QColor(canvas.theme.quiet))
    for one in placed:
        canvas.painter.drawText(_label_at(one, metrics), _label_text(one, labels[one.index], metrics))
    return sum(1 for label in labels if label) - len(placed)


def _label_at(one: Placed, metrics: QFontMetricsF) -> QPointF:
    return QPointF(one.x, (HEADER + metrics.ascent() - metrics.descent()) / 2)


def _label_text(one: Placed, label: str, metrics: QFontMetricsF) -> str:
    return metrics.elidedText(label, Qt.TextElideMode.ElideRight, one.width + 0.01)


@lru_cache(maxsize=64)
def _dashed(colour: str, height: int) -> QImage:
    """Make a picture of a dashed vertical line: a dashed pen takes many times as long."""
    line = QImage(1, height, QImage.Format.Format_ARGB32_Premultiplied)
    line.fill(Qt.GlobalColor.transparent)
    for y in range(height):
        if y % 6 < 4:
            line.setPixelColor(0, y, QColor(colour))
    return line


def _snapped(x: float, ratio: float) -> float:
    """Middle of the pixel of the screen that a place lies in."""
    return (int(x * ratio) + 0.5) / ratio
