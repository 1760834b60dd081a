"""Texts beside lanes as small pictures, because shaping a text takes ten times as long as copying it."""

from __future__ import annotations

import math
import time

from PySide6.QtCore import QPointF, Qt
from PySide6.QtGui import QColor, QFont, QFontMetricsF, QImage, QPainter

MOST = 600
"""Pictures kept; lanes in sight need about two each."""


class Words:
    """Pictures of texts in one font.

    Attributes
    ----------
    owed : bool
        Whether texts were left out since `start`, because making their pictures took too long for one frame.
    """

    def __init__(self) -> None:
        self.owed = False
        self._made = False
        self._until_s = 0.0
        self._key: tuple[str, float] = ("", 0.0)
        self._pictures: dict[tuple[str, str, int], QImage] = {}

    def start(self, budget_s: float) -> None:
        """Begin a frame.

        Parameters
        ----------
        budget_s : float
            Time that may be spent on new pictures; one is made in any case.
        """
        self._until_s = time.perf_counter() + budget_s
        self.owed = self._made = False

    def draw(self, painter: QPainter, at: tuple[float, float], text: str, colour: str, room: float) -> None:
        """Draw a text, shortened to the room there is.

        Parameters
        ----------
        painter : QPainter
            Where; its font counts.
        at : (float, float)
            Left upper corner.
        text : str
            What.
        colour : str
            As ``#rrggbb``.
        room : float
            Width there is.
        """
        ratio = painter.device().devicePixelRatio()
        key = (painter.font().key(), ratio)
        if key != self._key or len(self._pictures) > MOST:
            self._key, self._pictures = key, {}
        which = (text, colour, int(room))
        if which not in self._pictures:
            if self._made and time.perf_counter() > self._until_s:
                self.owed = True
                return
            self._made = True
            self._pictures[which] = _picture(painter.font(), which, ratio)
        # On whole pixels of the screen, so that letters stay sharp.
        x, y = (math.floor(place * ratio + 0.5) / ratio for place in at)
        painter.drawImage(QPointF(x, y), self._pictures[which])


def _picture(font: QFont, which: tuple[str, str, int], ratio: float) -> QImage:
    text, colour, room = which
    metrics = QFontMetricsF(font)
    # What cannot fit is cut off first: shortening a long text takes long.
    most = int(2 * room / max(1.0, metrics.averageCharWidth()))
    text = metrics.elidedText(text[:most], Qt.TextElideMode.ElideRight, room)
    width = max(1, math.ceil(metrics.horizontalAdvance(text) * ratio) + 2)
    image = QImage(width, math.ceil(metrics.height() * ratio), QImage.Format.Format_ARGB32_Premultiplied)
    image.setDevicePixelRatio(ratio)
    image.fill(Qt.GlobalColor.transparent)
    with QPainter(image) as painter:
        painter.setFont(font)
        painter.setPen(QColor(colour))
        painter.drawText(QPointF(0, metrics.ascent()), text)
    return image
