"""Rows of markers and trials as pixels: the cost hardly depends on how many there are."""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QPointF, QRectF, QSize, Qt
from PySide6.QtGui import QColor, QFontMetricsF, QImage, QPainter, QPaintEvent, QPen
from PySide6.QtWidgets import QSizePolicy, QWidget

from pulsemend.mending.marker_view import TrialState
from pulsemend.model.vocabulary import Role
from pulsemend.window.theme import ROLE_SHAPES, Theme
from pulsemend.window.traces.shapes import role_path

Pixels = NDArray[np.uint8]
Columns = NDArray[np.intp]

_EDGED = 5
"""Trials at least so many pixels wide have edges."""

_CLOSE = 0.6
"""Shapes whose neighbours are nearer than this share of their width, in the middle, become ticks."""


def marker_row(columns: Columns, width: int, height: int, role: Role, size: int) -> Pixels:
    """Draw the markers of one code.

    Parameters
    ----------
    columns : int array, shape (n,)
        Their places, in order, in pixels of the screen.
    width, height : int
        Of the row, in pixels of the screen.
    role : Role
        Gives the shape.
    size : int
        Of a shape, in pixels of the screen.

    Returns
    -------
    uint8 array, shape (height, width)
        How much of each pixel is covered, 255 for all.
    """
    pixels = np.zeros((height, width), dtype=np.uint8)
    if not columns.size:
        return pixels
    gaps = np.diff(columns)
    if gaps.size and np.median(gaps) < _CLOSE * size:
        inside = columns[(columns >= 0) & (columns < width)]
        pixels[(height - size) // 2 : (height + size) // 2, inside] = 255
        return pixels
    stamp = _stamp(role, size)
    side = stamp.shape[0]
    seen = columns[(columns > -side) & (columns < width + side)] + (side - side // 2)
    # On its side, with room at the edges: a shape's columns are then whole pieces of memory.
    lane = np.zeros((width + 3 * side, side), dtype=np.uint8)
    for at in range(side):
        place = seen + at
        lane[place] = np.maximum(lane[place], stamp[:, at])
    top = (height - side) // 2
    pixels[max(0, top) : top + side] = lane[side : side + width].T[max(0, -top) :][:height]
    return pixels


def trial_row(starts: Columns, stops: Columns, width: int, height: int, state: TrialState) -> Pixels:
    """Draw the trials of one state; each state has a pattern of its own.

    Parameters
    ----------
    starts, stops : int array, shape (n,)
        First and last pixel of each.
    width, height : int
        Of the row, in pixels of the screen.
    state : TrialState
        Gives the pattern.

    Returns
    -------
    uint8 array, shape (height, width)
        How much of each pixel is covered, 255 for all.
    """
    depth = np.zeros(width + 1, dtype=np.int32)
    edges = np.zeros(width, dtype=np.bool_)
    here = (stops >= 0) & (starts < width)
    first, last = np.clip(starts[here], 0, width - 1), np.clip(stops[here], 0, width - 1)
    np.add.at(depth, first, 1)
    np.add.at(depth, last + 1, -1)
    # Of narrow ones the pattern alone says more than their edges.
    wide = last - first >= _EDGED
    edges[first[wide]], edges[last[wide]] = True, True
    covered = np.cumsum(depth[:-1]) > 0
    pattern = _pattern(state, width, height)
    pixels = np.where(covered[None, :], pattern, 0).astype(np.uint8)
    pixels[:, edges] = 255
    if state is TrialState.SET_ASIDE:
        pixels[0, covered], pixels[-1, covered] = 255, 255
    else:
        pixels[[0, -1]] = np.maximum(pixels[[0, -1]], np.where(covered, 160, 0).astype(np.uint8))
    return pixels


def draw_shades(painter: QPainter, shades: Pixels, box: QRectF, colours: tuple[str, str]) -> None:
    """Shade the whole height of a box in places.

    Parameters
    ----------
    painter : QPainter
        Where.
    shades : uint8 array, shape (width,)
        0 for none, 1 and 2 for the first and the second colour.
    box : QRectF
        As wide as all shades together.
    colours : (str, str)
        As ``#rrggbb``.
    """
    padded = np.zeros(-(-shades.size // 4) * 4, dtype=np.uint8)
    padded[: shades.size] = shades
    image = QImage(padded.data, shades.size, 1, padded.size, QImage.Format.Format_Indexed8)
    image.setColorTable([0, *(QColor(colour).rgba() for colour in colours)])
    painter.drawImage(box, image.convertToFormat(QImage.Format.Format_ARGB32_Premultiplied))


def draw_pixels(
    painter: QPainter, pixels: Pixels, at: tuple[float, float], colour: str, ratio: float
) -> None:
    """Draw coverage in a colour.

    Parameters
    ----------
    painter : QPainter
        Where.
    pixels : uint8 array, shape (height, width)
        As the functions above give it.
    at : (float, float)
        Left and top in units of the layout.
    colour : str
        As ``#rrggbb``.
    ratio : float
        Pixels of the screen per unit.
    """
    height, width = pixels.shape
    # Rows of an image begin at whole words.
    padded = np.zeros((height, -(-width // 4) * 4), dtype=np.uint8)
    padded[:, :width] = pixels
    image = QImage(padded.data, width, height, padded.shape[1], QImage.Format.Format_Indexed8)
    image.setColorTable(_colours(colour))
    image = image.convertToFormat(QImage.Format.Format_ARGB32_Premultiplied)
    image.setDevicePixelRatio(ratio)
    painter.drawImage(QPointF(*at), image)


@lru_cache(maxsize=64)
def _colours(colour: str) -> list[int]:
    made = QColor(colour)
    red, green, blue = made.red(), made.green(), made.blue()
    return [(alpha << 24) | (red << 16) | (green << 8) | blue for alpha in range(256)]


@lru_cache(maxsize=64)
def _stamp(role: Role, size: int) -> Pixels:
    """Draw a shape as coverage."""
    side = size + 4
    image = QImage(side, side, QImage.Format.Format_ARGB32_Premultiplied)
    image.fill(Qt.GlobalColor.transparent)
    with QPainter(image) as painter:
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        painter.translate(side // 2 + 0.5, side // 2 + 0.5)
        if ROLE_SHAPES[role] == "ring":
            painter.setPen(QPen(Qt.GlobalColor.black, max(1.2, size * 0.16)))
        else:
            painter.setPen(Qt.PenStyle.NoPen)
            painter.setBrush(Qt.GlobalColor.black)
        painter.drawPath(role_path(role, size))
    return np.array(image.constBits(), np.uint8).reshape(side, side, 4)[:, :, 3].copy()


def _pattern(state: TrialState, width: int, height: int) -> Pixels:
    """Fill, hatching, dots, or nothing: known without any colour."""
    y, x = np.ogrid[:height, :width]
    if state is TrialState.COMPLETE:
        return np.full((height, width), 90, dtype=np.uint8)
    if state is TrialState.INCOMPLETE:
        return np.where((x + y) % 6 < 2, 255, 0).astype(np.uint8)
    if state is TrialState.DOUBTFUL:
        return np.where((x % 4 < 2) ^ (y % 4 < 2), 255, 0).astype(np.uint8)
    return np.zeros((height, width), dtype=np.uint8)


def state_colour(state: TrialState, theme: Theme) -> str:
    """Colour of a state, besides its pattern."""
    if state is TrialState.COMPLETE:
        return theme.accent
    return theme.quiet if state is TrialState.SET_ASIDE else theme.attention


class StateLegend(QWidget):
    """Patterns of the states with their names.

    Parameters
    ----------
    theme : Theme
        Colours.
    """

    def __init__(self, theme: Theme) -> None:
        super().__init__()
        self._theme = theme
        self._states: tuple[TrialState, ...] = ()
        self.setSizePolicy(QSizePolicy.Policy.Fixed, QSizePolicy.Policy.Fixed)
        self.show_states(())

    def show_states(self, states: tuple[TrialState, ...]) -> None:
        """Name these."""
        self._states = states
        self.setAccessibleName("Trials: " + ", ".join(states) if states else "No trials")
        self.updateGeometry()
        self.update()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self._theme = theme
        self.update()

    def sizeHint(self) -> QSize:
        """Room for all names."""
        metrics = QFontMetricsF(self.font())
        width = sum(24 + metrics.horizontalAdvance(state) + 12 for state in self._states)
        return QSize(math.ceil(width), math.ceil(metrics.height()) + 4)

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Draw swatches and names."""
        ratio = self.devicePixelRatioF()
        metrics = QFontMetricsF(self.font())
        wide, high = round(18 * ratio), round(10 * ratio)
        with QPainter(self) as painter:
            painter.setFont(self.font())
            painter.setPen(QColor(self._theme.quiet))
            x = 0.0
            for state in self._states:
                swatch = trial_row(np.array([0]), np.array([wide - 1]), wide, high, state)
                colour = state_colour(state, self._theme)
                draw_pixels(painter, swatch, (x, (self.height() - 10) / 2), colour, ratio)
                painter.drawText(QPointF(x + 23, (self.height() + metrics.ascent() - 2) / 2), state)
                x += 24 + metrics.horizontalAdvance(state) + 12
