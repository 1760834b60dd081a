"""Curves and bands of the pulse picture: from seconds and volts to lines on the screen."""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QLineF, QRectF, Qt
from PySide6.QtGui import QColor, QPainter, QPen

from pulsemend.model.plan import Window
from pulsemend.units import ms_to_s, s_to_ms, v_to_uv

Values = NDArray[np.float64]

_FAR_PX = 20_000.0


@dataclass(frozen=True)
class Frame:
    """Where times and voltages are on the screen.

    Parameters
    ----------
    area : QRectF
        The part with the curves.
    span_ms, range_uv : tuple of 2 float
        What its edges stand for.
    """

    area: QRectF
    span_ms: Window
    range_uv: tuple[float, float]

    def x_of(self, ms: float) -> float:
        """Place of an instant."""
        start, stop = self.span_ms
        return self.area.left() + (ms - start) / (stop - start) * self.area.width()

    def ms_at(self, x: float) -> float:
        """Find the instant at a place."""
        start, stop = self.span_ms
        return start + (x - self.area.left()) / self.area.width() * (stop - start)

    def y_of(self, uv: float) -> float:
        """Place of a voltage."""
        low, high = self.range_uv
        return self.area.bottom() - (uv - low) / (high - low) * self.area.height()

    def xs(self, times_s: Values) -> Values:
        """Places of instants."""
        start, stop = self.span_ms
        return np.asarray(self.area.left() + (s_to_ms(times_s) - start) / (stop - start) * self.area.width())

    def ys(self, values_v: NDArray[np.float32]) -> Values:
        """Places of voltages; those far outside stay within what a painter takes."""
        low, high = self.range_uv
        uv = v_to_uv(values_v.astype(np.float64))
        y = self.area.bottom() - (uv - low) / (high - low) * self.area.height()
        return np.clip(y, -_FAR_PX, _FAR_PX)


def draw_curve(
    painter: QPainter, frame: Frame, times_s: Values, values_v: NDArray[np.float32], pen: QPen
) -> None:
    """Draw a curve; of more than two samples per pixel only the extremes.

    Single lines, because a painter takes thirty times as long for one thick line with joints.

    Parameters
    ----------
    painter : QPainter
        Clipped to the frame's area.
    frame : Frame
        Where things are.
    times_s, values_v : arrays, shape (n_times,)
        Seconds and volts; nothing is drawn where there is NaN.
    pen : QPen
        How.
    """
    painter.setPen(pen)
    for run in _runs(_visible(frame, times_s), values_v):
        x, y = frame.xs(times_s[run]), frame.ys(values_v[run])
        if len(x) > 2.0 * frame.area.width():
            starts = _columns(x)
            lowest, highest = np.minimum.reduceat(y, starts), np.maximum.reduceat(y, starts)
            # Neighbouring columns meet, as the curve itself does.
            lowest[1:], highest[1:] = (
                np.minimum(lowest[1:], highest[:-1]),
                np.maximum(highest[1:], lowest[:-1]),
            )
            # A level curve is as thick as its pen.
            highest = np.maximum(highest, lowest + pen.widthF())
            _draw_columns(painter, pen, np.floor(x[starts]), lowest, highest)
            continue
        points = list(zip(x.tolist(), y.tolist(), strict=True))
        painter.drawLines([QLineF(*a, *b) for a, b in itertools.pairwise(points)])


def draw_band(
    painter: QPainter,
    frame: Frame,
    times_s: Values,
    edges_v: tuple[NDArray[np.float32], NDArray[np.float32]],
    color: QColor,
) -> None:
    """Fill what lies between two curves, one column of pixels beside the other.

    Parameters
    ----------
    painter : QPainter
        Clipped to the frame's area.
    frame : Frame
        Where things are.
    times_s : array, shape (n_times,)
        Seconds.
    edges_v : tuple of 2 arrays, shape (n_times,)
        Lower and upper edge, volts; nothing is drawn where there is NaN.
    color : QColor
        May be translucent: no pixel is painted twice.
    """
    lower_v, upper_v = edges_v
    for run in _runs(_visible(frame, times_s), lower_v):
        x, low, high = frame.xs(times_s[run]), frame.ys(lower_v[run]), frame.ys(upper_v[run])
        if len(x) > 2.0 * frame.area.width():
            starts = _columns(x)
            low, high = np.maximum.reduceat(low, starts), np.minimum.reduceat(high, starts)
            x = x[starts]
        at = np.arange(math.ceil(x[0]), math.floor(x[-1]) + 1, dtype=np.float64)
        _draw_columns(painter, QPen(color, 1.0), at, np.interp(at, x, high), np.interp(at, x, low))


def _draw_columns(painter: QPainter, pen: QPen, x: Values, tops: Values, bottoms: Values) -> None:
    """Draw one upright line per column of pixels; flat ends keep translucent neighbours apart."""
    painter.save()
    painter.setRenderHint(QPainter.RenderHint.Antialiasing, on=False)
    pen = QPen(pen)
    pen.setCapStyle(Qt.PenCapStyle.FlatCap)
    painter.setPen(pen)
    columns = zip(x.tolist(), tops.tolist(), bottoms.tolist(), strict=True)
    painter.drawLines([QLineF(at, top, at, bottom) for at, top, bottom in columns])
    painter.restore()


def ticks(low: float, high: float, most: int) -> list[float]:
    """Round numbers within a range.

    Parameters
    ----------
    low, high : float
        The range.
    most : int
        At most so many, and one more.
    """
    if not high > low:
        return []
    step = 10.0 ** math.floor(math.log10((high - low) / most))
    step = next(s for s in (step, 2.0 * step, 5.0 * step, 10.0 * step) if (high - low) / s <= most)
    first = math.ceil(low / step - 1e-9)
    return [round(k * step, 9) for k in range(first, math.floor(high / step + 1e-9) + 1)]


def _columns(x: Values) -> NDArray[np.intp]:
    """First samples of the pixel columns."""
    return np.unique(np.searchsorted(x, np.arange(x[0], x[-1], 1.0)))


def _visible(frame: Frame, times_s: Values) -> slice:
    start, stop = (ms_to_s(edge) for edge in frame.span_ms)
    first, last = np.searchsorted(times_s, [start, stop])
    return slice(max(0, int(first) - 1), min(len(times_s), int(last) + 2))


def _runs(visible: slice, values: NDArray[np.float32]) -> Iterator[slice]:
    """Stretches without holes."""
    finite = np.isfinite(values[visible])
    edges = np.flatnonzero(np.diff(np.concatenate([[False], finite, [False]]).astype(np.int8)))
    for first, last in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
        if last - first > 1:
            yield slice(visible.start + first, visible.start + last)
