"""The log against the recording: how far every joined pair lies from the fitted clock."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QEvent, QPointF, QRectF, Qt, Signal
from PySide6.QtGui import QColor, QFontMetricsF, QHelpEvent, QMouseEvent, QPainter, QPen, QPolygonF
from PySide6.QtWidgets import QStackedWidget, QToolTip, QVBoxLayout, QWidget

from pulsemend.mending.marker_log import NO_LOG_VIEW, LogItem, LogView
from pulsemend.units import ms_to_s, s_to_ms
from pulsemend.window.marker_canvas import KeptPicture
from pulsemend.window.parts import EmptyState
from pulsemend.window.pulse_picture import Elided
from pulsemend.window.theme import Theme
from pulsemend.window.traces.clock import clock, nice, number, ticks

_TOP, _RIGHT = 20.0, 8.0
_NEAR = 8.0
_DOT = 3.0
_LEAST_MS = 0.5
_STRIP = 14.0
"""Height of the strips above and below the points, for what has no pair."""


class Residuals(KeptPicture):
    """Points of the pairs, the band of their spread, and marks for what was left alone.

    Parameters
    ----------
    theme : Theme
        Colours.

    Attributes
    ----------
    wanted : Signal(float)
        Bring this time into view.
    """

    wanted = Signal(float)

    def __init__(self, theme: Theme) -> None:
        super().__init__("Log against recording", theme)
        self.setFocusPolicy(Qt.FocusPolicy.NoFocus)
        self._view = NO_LOG_VIEW
        self._duration_s = 1.0

    def show_log(self, view: LogView, duration_s: float) -> None:
        """Show another log."""
        self._view, self._duration_s = view, duration_s
        self.refresh()

    @property
    def most_ms(self) -> float:
        """Largest residual that the axis shows, to either side."""
        view = self._view
        spread_s = 0.0 if view.clock is None else view.clock.residual_sd_s
        largest_s = float(np.abs(view.residual_s).max()) if view.residual_s.size else 0.0
        return max(_LEAST_MS, 1.1 * s_to_ms(max(largest_s, 1.5 * spread_s)))

    def place_of(self, time_s: float, residual_s: float) -> QPointF:
        """Where a pair is drawn."""
        left, top, right, bottom = self._box()
        share = s_to_ms(residual_s) / self.most_ms
        return QPointF(
            left + time_s / self._duration_s * (right - left), (top + bottom) / 2 - share * (bottom - top) / 2
        )

    def _places(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Where all pairs are drawn."""
        left, top, right, bottom = self._box()
        x = left + self._view.time_s / self._duration_s * (right - left)
        share = s_to_ms(self._view.residual_s) / self.most_ms
        return x, (top + bottom) / 2 - share * (bottom - top) / 2

    def _box(self) -> tuple[float, float, float, float]:
        """Left, top, right and bottom of the points."""
        metrics = QFontMetricsF(self.font())
        left = metrics.horizontalAdvance("\u2212000.0 ms") + 8
        bottom = self.height() - metrics.height() - 8 - _STRIP
        return left, _TOP, max(left + 1.0, self.width() - _RIGHT), max(_TOP + 1.0, bottom)

    def paint_ground(self, painter: QPainter) -> None:
        """Paint band, points, marks and axes."""
        view = self._view
        left, top, right, bottom = self._box()
        if view.clock is not None:
            spread_s = view.clock.residual_sd_s
            upper, lower = self.place_of(0, spread_s).y(), self.place_of(0, -spread_s).y()
            painter.fillRect(QRectF(left, upper, right - left, lower - upper), QColor(self.theme.flank))
        self._paint_axes(painter)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        xs, ys = self._places()
        # Pairs that rest on their place between neighbours alone are empty: their time says nothing.
        for hollow in (False, True):
            these = np.flatnonzero(view.by_order == hollow)
            points = [QPointF(x, y) for x, y in zip(xs[these].tolist(), ys[these].tolist(), strict=True)]
            colour = QColor(self.theme.accent)
            if hollow:
                painter.setPen(QPen(colour, 1.2))
                painter.setBrush(Qt.BrushStyle.NoBrush)
                for point in points:
                    painter.drawEllipse(point, _DOT, _DOT)
            else:
                painter.setPen(QPen(colour, 2 * _DOT - 1, Qt.PenStyle.SolidLine, Qt.PenCapStyle.RoundCap))
                painter.drawPoints(QPolygonF(points))
        self._paint_alone(painter, view.rows_alone, top - 6, points_down=True)
        self._paint_alone(painter, view.trials_alone, bottom + _STRIP - 5, points_down=False)

    def _paint_alone(
        self, painter: QPainter, items: tuple[LogItem, ...], y: float, *, points_down: bool
    ) -> None:
        """Mark rows above and trials below that have no pair: triangles that point at the axis."""
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(QColor(self.theme.attention))
        by = 4.0 if points_down else -4.0
        for item in items:
            if item.time_s is not None and 0 <= item.time_s <= self._duration_s:
                x = self.place_of(item.time_s, 0.0).x()
                corners = [QPointF(x - 4, y - by), QPointF(x + 4, y - by), QPointF(x, y + by)]
                painter.drawPolygon(QPolygonF(corners))

    def _paint_axes(self, painter: QPainter) -> None:
        metrics = QFontMetricsF(painter.font())
        left, top, right, bottom = self._box()
        # As many lines as there is room for their numbers.
        n_lines = max(1.0, (bottom - top) / (1.2 * metrics.height()))
        step = next(
            s
            for s in (k * nice(2 * self.most_ms / n_lines) for k in (1, 2, 2.5, 5))
            if s * n_lines >= 2 * self.most_ms * 0.999
        )
        for k in range(-math.floor(self.most_ms / step), math.floor(self.most_ms / step) + 1):
            y = self.place_of(0.0, ms_to_s(k * step)).y()
            painter.setPen(QPen(QColor(self.theme.quiet if k == 0 else self.theme.line), 1.0))
            painter.drawLine(QPointF(left, y), QPointF(right, y))
            text = f"{number(k * step)} ms"
            painter.setPen(QColor(self.theme.quiet))
            painter.drawText(
                QPointF(left - 6 - metrics.horizontalAdvance(text), y + metrics.ascent() / 2 - 1), text
            )
        line = bottom + _STRIP
        painter.setPen(QPen(QColor(self.theme.line), 1.0))
        painter.drawLine(QPointF(left, top), QPointF(left, line))
        painter.drawLine(QPointF(left, line), QPointF(right, line))
        room = metrics.horizontalAdvance("0:00:00") + 30
        times_s, decimals = ticks(0.0, self._duration_s, max(1, int((right - left) // room)))
        painter.setPen(QColor(self.theme.quiet))
        for time_s in times_s:
            text = clock(time_s, decimals)
            wide = metrics.horizontalAdvance(text)
            x = self.place_of(time_s, 0.0).x()
            painter.drawLine(QPointF(x, line), QPointF(x, line + 4))
            place = min(max(x - wide / 2, left), right - wide)
            painter.drawText(QPointF(place, line + 5 + metrics.ascent()), text)

    # Hands

    def thing_at(self, at: QPointF) -> tuple[float, str] | None:
        """Time and words of what is at a place: a pair, a row alone, a trial alone."""
        view = self._view
        _, top, _, bottom = self._box()
        if top - 2 <= at.y() <= bottom + 2:
            if not view.time_s.size:
                return None
            xs, ys = self._places()
            apart = np.hypot(xs - at.x(), ys - at.y())
            place = int(np.argmin(apart))
            if apart[place] > _NEAR:
                return None
            time_s, late_ms = float(view.time_s[place]), s_to_ms(float(view.residual_s[place]))
            return (
                time_s,
                f"row {view.rows[place]} at {clock(time_s, 3)}: {number(late_ms)} ms from the clock",
            )
        alone = view.rows_alone if at.y() < top else view.trials_alone
        near = [
            (abs(self.place_of(item.time_s, 0.0).x() - at.x()), item)
            for item in alone
            if item.time_s is not None
        ]
        best = min(near, key=lambda one: one[0], default=None)
        if best is None or best[0] > _NEAR or best[1].time_s is None:
            return None
        what = "without a trial" if at.y() < top else "without a row"
        return best[1].time_s, f"{best[1].words}, {what}, at {clock(best[1].time_s, 3)}"

    def mouseReleaseEvent(self, event: QMouseEvent) -> None:
        """Go to what was clicked, or to the time."""
        found = self.thing_at(event.position())
        left, _, right, _ = self._box()
        share = (event.position().x() - left) / (right - left)
        if found is not None:
            self.wanted.emit(found[0])
        elif 0 <= share <= 1:
            self.wanted.emit(share * self._duration_s)

    def event(self, event: QEvent) -> bool:
        """Say what is under the mouse."""
        if event.type() is QEvent.Type.ToolTip and isinstance(event, QHelpEvent):
            found = self.thing_at(QPointF(event.pos()))
            QToolTip.showText(event.globalPos(), found[1] if found else "", self)
            return True
        return super().event(event)


class LogPicture(QWidget):
    """Residuals with their words, or what to do to have some.

    Parameters
    ----------
    theme : Theme
        Colours.
    """

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self.residuals = Residuals(theme)
        self.said = Elided()
        self.empty = EmptyState("")
        self.empty.text.setWordWrap(True)
        whole = QWidget()
        column = QVBoxLayout(whole)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(4)
        column.addWidget(self.said)
        column.addWidget(self.residuals, 1)
        self.pages = QStackedWidget()
        self.pages.addWidget(self.empty)
        self.pages.addWidget(whole)
        outer = QVBoxLayout(self)
        outer.setContentsMargins(0, 0, 0, 0)
        outer.addWidget(self.pages)

    def show_log(self, view: LogView, duration_s: float, why_empty: str) -> None:
        """Show a log; where there are no residuals, say why.

        Parameters
        ----------
        view : LogView
            As a survey has it.
        duration_s : float
            Length of the recording.
        why_empty : str
            What to do to have a log joined.
        """
        has_clock = view.clock is not None and view.residual_s.size > 0
        self.pages.setCurrentIndex(1 if has_clock else 0)
        if has_clock and view.join is not None:
            self.said.show_text(
                f"How much later than the fitted clock says, {view.time_s.size} pairs; band: one standard "
                f"deviation; \u25bc {len(view.rows_alone)} without a trial, \u25b2 {len(view.trials_alone)} "
                "without a row"
            )
            self.residuals.setAccessibleDescription(view.join.words)
            self.residuals.show_log(view, duration_s)
        elif view.join is not None and view.join.pairs:
            self.empty.text.setText(
                f"{view.join.words}\nThere is no clock to show: rows were joined without times."
            )
        else:
            self.empty.text.setText(view.problem or why_empty)

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self.residuals.set_theme(theme)
