"""Thousands of events on one strip: a tick per pixel, in a lane of its own for each role."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QPointF
from PySide6.QtGui import QColor, QImage, QPainter

from pulsemend.model.vocabulary import Role
from pulsemend.window.theme import Theme

_ORDER = list(Role)


def draw_ticks(
    painter: QPainter, roles: Sequence[Role], xs: NDArray[np.float64], box: tuple[int, int, int], theme: Theme
) -> None:
    """Draw ticks of events that are too many for shapes.

    Parameters
    ----------
    painter : QPainter
        Where.
    roles : sequence of Role, length n
        Of the events.
    xs : array, shape (n,)
        Their places.
    box : (int, int, int)
        Top, width and height of the strip; roles present share it in the order of the vocabulary, so that a
        role is known by its lane as well as by its colour.
    theme : Theme
        Gives the colours.
    """
    top, width, height = box
    codes = np.array([_ORDER.index(role) for role in roles], dtype=np.intp)
    present = np.unique(codes)
    if not present.size:
        return
    pixels = np.zeros((height, width), dtype=np.uint8)
    lanes = np.linspace(0, height, present.size + 1).round().astype(int)
    columns = np.clip(xs.astype(np.intp), 0, width - 1)
    for lane, code in enumerate(present):
        last = max(lanes[lane] + 1, lanes[lane + 1] - 1)
        pixels[lanes[lane] : last, columns[codes == code]] = lane + 1
    image = QImage(pixels.data, width, height, width, QImage.Format.Format_Indexed8)
    colours = [QColor(theme.roles[_ORDER[code]]).rgba() for code in present]
    image.setColorTable([0, *colours])
    painter.drawImage(QPointF(0, top), image.convertToFormat(QImage.Format.Format_ARGB32_Premultiplied))
