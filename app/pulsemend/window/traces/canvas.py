"""What the traces' widget shows: view, numbers and overlays, painted on demand."""

from __future__ import annotations

from PySide6.QtCore import QEvent, QPointF, Qt, QTimer, Signal
from PySide6.QtGui import QColor, QPainter, QPaintEvent, QPen, QResizeEvent
from PySide6.QtWidgets import QSizePolicy, QWidget

from pulsemend.window.theme import Theme
from pulsemend.window.traces import overlays as paint
from pulsemend.window.traces.clock import clock, duration, number
from pulsemend.window.traces.geometry import Rows, TimeScale
from pulsemend.window.traces.model import Overlays, ViewModel
from pulsemend.window.traces.picture import Drawn, Scene, TracePicture
from pulsemend.window.traces.source import Detail, TraceSource

_AGAIN_MS = 15


class TraceView(QWidget):
    """Stacked traces with everything that lies over them, not yet moved by hand.

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

    laid_out = Signal()

    def __init__(
        self, model: ViewModel, source: TraceSource, theme: Theme, parent: QWidget | None = None
    ) -> None:
        super().__init__(parent)
        self._model = model
        self._source = source
        self._theme = theme
        self._picture = TracePicture(source)
        self._overlays = Overlays()
        self._names = {channel.name: place for place, channel in enumerate(source.facts.channels)}
        self._scroll = 0
        self._drawn: Drawn | None = None
        self._hidden_labels = 0
        self._current_event: int | None = None
        self._again = QTimer(self, singleShot=True, interval=_AGAIN_MS)
        self._again.timeout.connect(self.refresh)
        self.setAttribute(Qt.WidgetAttribute.WA_OpaquePaintEvent)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Expanding)
        self.setMinimumSize(200, 80)
        self.setAccessibleName("Traces")
        self.show_view()

    @property
    def rows(self) -> Rows:
        """Where the rows lie."""
        return Rows(len(self.shown_names), self.height(), self._scroll)

    @property
    def scale(self) -> TimeScale:
        """Where times lie."""
        return TimeScale.of(
            self._model.view, self.width(), self._source.facts.rate_hz, self.devicePixelRatioF()
        )

    @property
    def shown_names(self) -> list[str]:
        """Names of the rows, top to bottom."""
        return [name for name in self._model.view.rows if name in self._names]

    @property
    def detail(self) -> Detail:
        """What the traces painted last are."""
        return Detail.EXACT if self._drawn is None else self._drawn.detail

    @property
    def hidden_labels(self) -> int:
        """How many labels of events in view had no room."""
        return self._hidden_labels

    def show_view(self) -> None:
        """Take over a changed view."""
        view = self._model.view
        self._scroll = min(self._scroll, self.rows.scroll_range)
        self.setAccessibleDescription(
            f"{view.shown}, {duration(view.width_s)} from {clock(view.start_s)}, "
            f"{number(view.row_uv)} µV a row"
        )
        self.laid_out.emit()
        self.refresh()

    def refresh(self) -> None:
        """Draw the traces again, because view, numbers or overlays changed."""
        self._drawn = None
        self.update()

    def set_overlays(self, overlays: Overlays) -> None:
        """Show other events, bands and bad channels."""
        self._overlays = overlays
        self._current_event = None
        self.refresh()

    def set_theme(self, theme: Theme) -> None:
        """Change the colours."""
        self._theme = theme
        self.refresh()

    def set_scroll(self, scroll: int) -> None:
        """Scroll the rows."""
        scroll = min(max(0, scroll), self.rows.scroll_range)
        if scroll != self._scroll:
            self._scroll = scroll
            self.laid_out.emit()
            self.refresh()

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Paint the traces, drawn anew if they changed, and all that lies over them."""
        scene = Scene(self._model.view, self.scale, self.rows, self._overlays.bad, self._theme)
        if self._drawn is None or self._drawn.image.devicePixelRatio() != scene.scale.ratio:
            self._drawn = self._picture.draw(scene)
            self._drawn.image.setDevicePixelRatio(scene.scale.ratio)
            if not self._drawn.complete:
                self._again.start()
        # The context ends the painter whatever is raised: one left active takes the process down.
        with QPainter(self) as painter:
            canvas = paint.Canvas(painter, scene.scale, scene.rows, float(self.width()), self._theme)
            self._paint(canvas, self._drawn)
            self.paint_moving(canvas)
            if self.hasFocus():
                painter.setPen(QPen(QColor(self._theme.accent), 1.5))
                painter.setBrush(Qt.BrushStyle.NoBrush)
                painter.drawRect(self.rect().adjusted(1, 1, -2, -2))

    def paint_moving(self, canvas: paint.Canvas) -> None:
        """Paint what moves with the hand; nothing here."""

    def _paint(self, canvas: paint.Canvas, drawn: Drawn) -> None:
        canvas.painter.fillRect(self.rect(), QColor(self._theme.panel))
        paint.paint_behind(canvas, self._overlays, self.shown_names)
        canvas.painter.drawImage(QPointF(0, canvas.rows.top), drawn.image)
        paint.paint_band_labels(canvas, self._overlays)
        self._hidden_labels = paint.paint_events(canvas, self._overlays.events, self._current_event)
        paint.paint_times(canvas)
        paint.paint_scale_bar(canvas, self._model.view.row_uv)
        if not canvas.rows.n_rows:
            paint.paint_word(canvas, "every channel is hidden")
        elif drawn.detail is not Detail.EXACT:
            paint.paint_word(canvas, drawn.detail.value)

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Lay the rows out anew."""
        self._scroll = min(self._scroll, self.rows.scroll_range)
        self.laid_out.emit()
        self.refresh()
        super().resizeEvent(event)

    def event(self, event: QEvent) -> bool:
        """Draw anew for another screen's pixels."""
        if event.type() is QEvent.Type.DevicePixelRatioChange:
            self.refresh()
        return super().event(event)
