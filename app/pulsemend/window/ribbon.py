"""The session ribbon: the whole recording in one strip, with the part in view as a frame to drag."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QEvent, QPointF, QRectF, QSize, Qt, QTimer
from PySide6.QtGui import (
    QBrush,
    QColor,
    QFocusEvent,
    QFontMetricsF,
    QImage,
    QKeyEvent,
    QMouseEvent,
    QPainter,
    QPaintEvent,
    QPen,
    QResizeEvent,
    QWheelEvent,
)
from PySide6.QtWidgets import QSizePolicy, QWidget

from pulsemend.engine.columns import Grid
from pulsemend.engine.pyramid import Pyramid
from pulsemend.model.vocabulary import ChannelType
from pulsemend.window import envelope
from pulsemend.window.theme import Theme
from pulsemend.window.traces.clock import clock
from pulsemend.window.traces.geometry import TimeScale
from pulsemend.window.traces.keys import moved_by_key, wheel_move, wheel_zoom
from pulsemend.window.traces.model import Overlays, ViewModel
from pulsemend.window.traces.navigation import Extent
from pulsemend.window.traces.shapes import draw_roles
from pulsemend.window.traces.source import TraceSource
from pulsemend.window.traces.ticks import draw_ticks

_EVENTS = 16
"""Height of the strip of events, at the top."""
_ENVELOPE = 30
_TIMES = 16
_SHAPE = 8.0
_LEAST_FRAME = 7.0
"""Width that the frame is drawn with at least, so that it can be seen and taken hold of."""
_BUDGET_S = 0.005
_AGAIN_MS = 20
_WHEEL_STEP = 0.5
"""Widths of the view that a notch of the wheel moves here, where distances are long."""


class Ribbon(QWidget):
    """The whole recording: its strength, all events, bad stretches, and the part in view.

    A click centres the view, dragging moves it, the wheel moves and with Ctrl zooms it; the keys are those of
    the traces.

    Parameters
    ----------
    model : ViewModel
        Holds the view.
    source : TraceSource
        Gives the numbers.
    theme : Theme
        Colours.
    parent : QWidget or None
        As usual.
    """

    def __init__(
        self, model: ViewModel, source: TraceSource, theme: Theme, parent: QWidget | None = None
    ) -> None:
        super().__init__(parent)
        self._model = model
        self._source = source
        self._theme = theme
        facts = source.facts
        self._extent = Extent(facts.duration_s, 8 / facts.rate_hz)
        self._sampler = source.new_sampler()
        self._pyramid: Pyramid | None = source.pyramid
        self._overlays = Overlays()
        self._ranges_uv: NDArray[np.float64] | None = None
        self._ground = QImage()
        self._stale = True
        self._grip_s: float | None = None
        self._again = QTimer(self, singleShot=True, interval=_AGAIN_MS)
        self._again.timeout.connect(self._measure_again)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)
        self.setAccessibleName("Whole recording")
        self.setToolTip("Middle channel's range over the whole recording. Click or drag to move the view.")
        unsubscribe = model.subscribe(self._on_view)
        self.destroyed.connect(lambda: unsubscribe())
        self._on_view()

    @property
    def exact(self) -> bool:
        """Whether the envelope rests on all samples."""
        return self._pyramid is not None

    def sizeHint(self) -> QSize:
        """As high as events, envelope and times need."""
        return QSize(600, _EVENTS + _ENVELOPE + max(_TIMES, self.fontMetrics().height()))

    def minimumSizeHint(self) -> QSize:
        """Narrower, but not lower."""
        return QSize(200, self.sizeHint().height())

    def set_overlays(self, overlays: Overlays) -> None:
        """Show other events, bad stretches and bad channels."""
        if overlays.bad != self._overlays.bad:
            self._ranges_uv = None
        self._overlays = overlays
        self._refresh()

    def set_pyramid(self, pyramid: Pyramid) -> None:
        """Draw the envelope exactly from now on."""
        self._pyramid = pyramid
        self._measure_again()

    def set_theme(self, theme: Theme) -> None:
        """Change the colours."""
        self._theme = theme
        self._refresh()

    def frame(self) -> QRectF:
        """Where the frame of the part in view is drawn."""
        view = self._model.view
        scale = self._scale()
        left, right = scale.x_of(view.start_s), scale.x_of(view.start_s + view.width_s)
        if right - left < _LEAST_FRAME:
            middle = min(max(0.5 * (left + right), _LEAST_FRAME / 2), self.width() - _LEAST_FRAME / 2)
            left, right = middle - _LEAST_FRAME / 2, middle + _LEAST_FRAME / 2
        return QRectF(left, 1, right - left, _EVENTS + _ENVELOPE)

    # Painting

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Paint the recording, and the frame over it."""
        if self._stale or self._ground.devicePixelRatio() != self.devicePixelRatioF():
            self._ground = self._painted()
            self._stale = False
        frame = self.frame()
        soft = QColor(self._theme.accent)
        soft.setAlpha(45)
        with QPainter(self) as painter:
            painter.drawImage(0, 0, self._ground)
            painter.fillRect(frame, soft)
            painter.setPen(QPen(QColor(self._theme.accent), 2.0 if self.hasFocus() else 1.2))
            painter.drawRect(frame.adjusted(0.5, 0.5, -0.5, -0.5))
            if self.hasFocus():
                painter.setPen(QPen(QColor(self._theme.accent), 1.0))
                painter.drawRect(QRectF(self.rect()).adjusted(0.5, 0.5, -0.5, -0.5))

    def _painted(self) -> QImage:
        ratio = self.devicePixelRatioF()
        image = QImage(
            max(1, round(self.width() * ratio)),
            max(1, round(self.height() * ratio)),
            QImage.Format.Format_RGB32,
        )
        image.setDevicePixelRatio(ratio)
        image.fill(QColor(self._theme.panel))
        with QPainter(image) as painter:
            painter.setFont(self.font())
            self._paint_bad_stretches(painter)
            self._paint_envelope(painter)
            self._paint_events(painter, ratio)
            self._paint_times(painter)
        return image

    def _paint_envelope(self, painter: QPainter) -> None:
        if self._ranges_uv is None:
            self._measure()
        if self._ranges_uv is None or not self._ranges_uv.size:
            return
        half = _ENVELOPE / 2
        rows = np.abs(np.arange(_ENVELOPE) + 0.5 - half)[:, None]
        reach = np.maximum(envelope.heights(self._ranges_uv) * (half - 2), 1.0)
        pixels = np.ascontiguousarray(rows <= reach, dtype=np.uint8)
        height, width = pixels.shape
        image = QImage(pixels.data, width, height, width, QImage.Format.Format_Indexed8)
        image.setColorTable([0, QColor(self._theme.envelope).rgba()])
        image = image.convertToFormat(QImage.Format.Format_ARGB32_Premultiplied)
        painter.drawImage(QPointF(0, _EVENTS), image)

    def _paint_bad_stretches(self, painter: QPainter) -> None:
        stretches = self._overlays.bad_stretches
        scale = self._scale()
        for left, right in zip(
            scale.xs_of(stretches.start_s).tolist(), scale.xs_of(stretches.stop_s).tolist(), strict=True
        ):
            box = QRectF(left, _EVENTS, max(2.0, right - left), _ENVELOPE)
            painter.fillRect(box, QColor(self._theme.bad_stretch))
            box.setHeight(4)
            painter.fillRect(box, QBrush(QColor(self._theme.attention), Qt.BrushStyle.BDiagPattern))

    def _paint_events(self, painter: QPainter, ratio: float) -> None:
        events = self._overlays.events
        xs = self._scale().xs_of(events.time_s)
        if len(events.roles) * _SHAPE <= self.width():
            draw_roles(painter, list(events.roles), (xs.tolist(), _EVENTS / 2), _SHAPE, self._theme, ratio)
        else:
            draw_ticks(painter, events.roles, xs, (2, self.width(), _EVENTS - 4), self._theme)

    def _paint_times(self, painter: QPainter) -> None:
        metrics = QFontMetricsF(painter.font())
        y = _EVENTS + _ENVELOPE + metrics.ascent()
        end = clock(self._extent.duration_s)
        painter.setPen(QColor(self._theme.quiet))
        painter.drawText(QPointF(3, y), clock(0.0))
        painter.drawText(QPointF(self.width() - metrics.horizontalAdvance(end) - 3, y), end)
        if not self.exact:
            word = "coarse until the overview is ready"
            painter.drawText(QPointF((self.width() - metrics.horizontalAdvance(word)) / 2, y), word)

    # Numbers

    def _scale(self) -> TimeScale:
        """Lay the whole recording across the widget."""
        facts = self._source.facts
        count = max(1, self.width())
        return TimeScale(Grid(0, count, facts.n_samples / count), facts.rate_hz)

    def _channels(self) -> NDArray[np.intp]:
        """Channels that stand for all: good EEG channels if there are any."""
        facts = self._source.facts
        good = [
            place for place, channel in enumerate(facts.channels) if channel.name not in self._overlays.bad
        ]
        eeg = [place for place in good if facts.channels[place].type is ChannelType.EEG]
        return envelope.chosen(np.array(eeg or good or range(len(facts.channels)), dtype=np.intp))

    def _measure(self) -> None:
        uv_per_unit = self._source.uv_per_unit
        if self._pyramid is not None:
            self._ranges_uv = envelope.exact(self._pyramid, self.width(), self._channels(), uv_per_unit)
            return
        self._ranges_uv, complete = envelope.coarse(
            self._sampler, self._scale().grid, self._channels(), uv_per_unit, _BUDGET_S
        )
        if not complete:
            self._again.start()

    def _measure_again(self) -> None:
        self._ranges_uv = None
        self._refresh()

    def _refresh(self) -> None:
        self._stale = True
        self.update()

    def _on_view(self) -> None:
        view = self._model.view
        self.setAccessibleDescription(
            f"In view: {clock(view.start_s)} to {clock(view.start_s + view.width_s)} "
            f"of {clock(self._extent.duration_s)}"
        )
        self.update()

    # Hands

    def mousePressEvent(self, event: QMouseEvent) -> None:
        """Take hold of the frame, or centre the view first."""
        if event.button() is not Qt.MouseButton.LeftButton:
            super().mousePressEvent(event)
            return
        time_s = self._scale().time_at(event.position().x())
        if not self.frame().contains(event.position()):
            self._model.set_view(self._extent.centred(self._model.view, time_s))
        self._grip_s = time_s - self._model.view.start_s

    def mouseMoveEvent(self, event: QMouseEvent) -> None:
        """Drag the frame."""
        if self._grip_s is not None:
            start_s = self._scale().time_at(event.position().x()) - self._grip_s
            view = self._model.view
            self._model.set_view(self._extent.moved(view, start_s - view.start_s))

    def mouseReleaseEvent(self, event: QMouseEvent) -> None:
        """Let go of the frame."""
        if event.button() is Qt.MouseButton.LeftButton:
            self._grip_s = None

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Move the view, or zoom it about its middle."""
        view = self._model.view
        factor = wheel_zoom(event)
        if factor is not None:
            self._model.set_view(self._extent.zoomed(view, factor, view.start_s + 0.5 * view.width_s))
            return
        move = wheel_move(event, max(1, self.width()))
        widths = move.y() * _WHEEL_STEP + move.x() * self._extent.duration_s / view.width_s
        self._model.set_view(self._extent.stepped(view, widths))

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Move the view with the keys of the traces."""
        view = moved_by_key(event.key(), event.modifiers(), self._model.view, self._extent)
        if view is None:
            super().keyPressEvent(event)
        else:
            self._model.set_view(view)

    def focusInEvent(self, event: QFocusEvent) -> None:
        """Show the focus."""
        self.update()
        super().focusInEvent(event)

    def focusOutEvent(self, event: QFocusEvent) -> None:
        """Stop showing the focus."""
        self.update()
        super().focusOutEvent(event)

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Measure the envelope for another number of columns."""
        self._ranges_uv = None
        self._refresh()
        super().resizeEvent(event)

    def event(self, event: QEvent) -> bool:
        """Paint anew for another screen's pixels."""
        if event.type() is QEvent.Type.DevicePixelRatioChange:
            self._refresh()
        return super().event(event)
