"""What is painted behind and over the traces: bands, events with labels, times, the scale bar, a measure."""

from __future__ import annotations

from dataclasses import dataclass

from PySide6.QtCore import QLineF, QPointF, QRectF, Qt
from PySide6.QtGui import QBrush, QColor, QFontMetricsF, QPainter, QPen

from pulsemend.model.vocabulary import Role
from pulsemend.window.theme import Theme
from pulsemend.window.traces.clock import clock, duration, microvolts, nice, nice_s, number, ticks
from pulsemend.window.traces.geometry import AXIS, HEADER, Rows, TimeScale
from pulsemend.window.traces.labels import LEAST_ROOM, Placed, place
from pulsemend.window.traces.model import Bands, Events, Measure, Overlays
from pulsemend.window.traces.shapes import draw_role

LEAST_BAND = 3.0
"""Bands narrower than this are drawn as a marker of this width."""
_SHAPE = 11.0
_HALF_SHAPE = _SHAPE / 2 + 4
_CROWDED = 7.0
"""Pixels per event below which events are ticks instead of shapes with lines."""
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


def paint_behind(canvas: Canvas, overlays: Overlays) -> None:
    """Paint bad stretches, epochs and gaps, to scale."""
    area = QRectF(0, canvas.rows.top, canvas.width, canvas.rows.area)
    for left, width, _ in _laid(canvas, overlays.epochs):
        box = QRectF(left, area.top(), max(width, LEAST_BAND), area.height())
        canvas.painter.fillRect(box, QColor(canvas.theme.accent_soft))
    for left, width, _ in _laid(canvas, overlays.bad_stretches):
        box = QRectF(left, area.top(), max(width, LEAST_BAND), area.height())
        canvas.painter.fillRect(box, QColor(canvas.theme.bad_stretch))
        # A hatch as well, so that the colour does not stand alone.
        canvas.painter.fillRect(
            QRectF(left, area.top(), max(width, LEAST_BAND), 5),
            QBrush(QColor(canvas.theme.attention), Qt.BrushStyle.BDiagPattern),
        )
    _paint_gaps(canvas, overlays.gaps, area)


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
        _paint_ticks(canvas, events, seen)
        return sum(1 for place_ in seen if events.labels[place_])
    xs = [canvas.scale.x_of(float(events.time_s[place_])) for place_ in seen]
    bottom = canvas.rows.top + canvas.rows.area
    for place_, x in zip(seen, xs, strict=True):
        colour = QColor(canvas.theme.roles[events.roles[place_]])
        colour.setAlpha(255 if place_ == current else 170)
        pen = QPen(colour, 1.0, Qt.PenStyle.CustomDashLine)
        pen.setDashPattern([3, 3])
        if place_ == current:
            pen = QPen(colour, 2.0)
        canvas.painter.setPen(pen)
        snapped = _snapped(x, canvas.scale.ratio)
        canvas.painter.drawLine(QLineF(snapped, HEADER - 4, snapped, bottom))
    canvas.painter.setRenderHint(QPainter.RenderHint.Antialiasing, on=True)
    for place_, x in zip(seen, xs, strict=True):
        draw_role(canvas.painter, events.roles[place_], x, HEADER / 2, _SHAPE, canvas.theme)
    canvas.painter.setRenderHint(QPainter.RenderHint.Antialiasing, on=False)
    return _paint_labels(canvas, [events.labels[place_] for place_ in seen], xs)


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


def _laid(canvas: Canvas, bands: Bands) -> list[tuple[float, float, str]]:
    """Left edge, width and label of the bands in view."""
    return [
        (*canvas.band(start_s, stop_s), label)
        for start_s, stop_s, label in bands.within(canvas.scale.start_s, canvas.scale.stop_s)
    ]


def _paint_band_labels(canvas: Canvas, bands: Bands, ink: str) -> None:
    """Write the labels of bands along the lower edge, each within its own band."""
    metrics = canvas.metrics()
    bottom = canvas.rows.top + canvas.rows.area - 3.0
    free_from = 0.0
    ground = QColor(canvas.theme.panel)
    ground.setAlpha(225)
    for left, width, label in _laid(canvas, bands):
        start = max(left + 6, 6.0, free_from)
        room = min(left + width, canvas.width) - start - 6
        if label and room > LEAST_ROOM:
            text = metrics.elidedText(label, Qt.TextElideMode.ElideRight, room)
            box = QRectF(start - 3, 0, metrics.horizontalAdvance(text) + 6, metrics.height())
            box.moveBottom(bottom)
            canvas.painter.fillRect(box, ground)
            canvas.painter.setPen(QColor(ink))
            canvas.painter.drawText(box, Qt.AlignmentFlag.AlignCenter, text)
            free_from = box.right() + 6


def _paint_gaps(canvas: Canvas, gaps: Bands, area: QRectF) -> None:
    laid = _laid(canvas, gaps)
    narrow = sum(1 for _, width, _ in laid if width < LEAST_BAND)
    reach_down = narrow * LEAST_BAND <= _SPARSE_SHARE * canvas.width
    colour = QColor(canvas.theme.gap)
    for left, width, _ in laid:
        if width >= LEAST_BAND:
            canvas.painter.fillRect(QRectF(left, area.top(), width, area.height()), colour)
            continue
        middle = left + width / 2
        # So many that they would hide the rest stay a row of marks along the upper edge.
        height = area.height() if reach_down else 6.0
        canvas.painter.fillRect(QRectF(middle - LEAST_BAND / 2, area.top(), LEAST_BAND, height), colour)


def _paint_ticks(canvas: Canvas, events: Events, seen: range) -> None:
    """Paint events that are too many for shapes: a tick per pixel, in a lane of its own for each role."""
    roles = sorted({events.roles[place_] for place_ in seen}, key=list(Role).index)
    height = (HEADER - 6) / len(roles)
    drawn = {(int(canvas.scale.x_of(float(events.time_s[place_]))), events.roles[place_]) for place_ in seen}
    for lane, role in enumerate(roles):
        top = 3 + lane * height
        canvas.painter.setPen(QPen(QColor(canvas.theme.roles[role]), 1.0))
        lines = [QLineF(x + 0.5, top, x + 0.5, top + height - 1) for x, of in drawn if of is role]
        canvas.painter.drawLines(lines)


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


def _snapped(x: float, ratio: float) -> float:
    """Middle of the pixel of the screen that a place lies in."""
    return (int(x * ratio) + 0.5) / ratio
