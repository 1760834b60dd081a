"""Small shapes beside the words for fates and verdicts: word and shape carry the meaning, not the colour."""

from __future__ import annotations

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QColor, QIcon, QPainter, QPen, QPixmap, QPolygonF

from pulsemend.mending.verdict import BROKEN, HOLDS, LOOK_AT
from pulsemend.model.vocabulary import Fate
from pulsemend.window.theme import Theme

SIDE_PX = 14
_FINE = 4
"""Screen pixels per unit that the shapes are drawn with: enough for every screen."""


def fate_icon(fate: Fate, theme: Theme) -> QIcon:
    """Shape of a fate: a disc for kept, an empty square for what was decided by hand, else a cross.

    Parameters
    ----------
    fate : Fate
        What became of an epoch.
    theme : Theme
        Gives the colour.
    """
    if fate is Fate.KEPT:
        return _icon("disc", theme.accent)
    by_hand = fate in (Fate.BY_HAND, Fate.TRIAL_EXCLUDED)
    return _icon("square" if by_hand else "cross", theme.quiet if by_hand else theme.attention)


def verdict_icon(word: str, theme: Theme) -> QIcon:
    """Shape of a verdict: a disc for what holds, a triangle for what to look at, a cross for what is broken.

    Parameters
    ----------
    word : str
        As `mending.verdict.verdict` gives it.
    theme : Theme
        Gives the colour.
    """
    shape, colour = {
        HOLDS: ("disc", theme.accent),
        LOOK_AT: ("triangle", theme.attention),
        BROKEN: ("cross", theme.attention),
    }[word]
    return _icon(shape, colour)


def _icon(shape: str, colour: str) -> QIcon:
    pixels = QPixmap(SIDE_PX * _FINE, SIDE_PX * _FINE)
    pixels.setDevicePixelRatio(_FINE)
    pixels.fill(Qt.GlobalColor.transparent)
    painter = QPainter(pixels)
    painter.setRenderHint(QPainter.RenderHint.Antialiasing)
    painter.setPen(QPen(QColor(colour), 1.8))
    middle, reach = SIDE_PX / 2, SIDE_PX * 0.3
    if shape == "disc":
        painter.setBrush(QColor(colour))
        painter.drawEllipse(QPointF(middle, middle), reach, reach)
    elif shape == "square":
        painter.drawRect(QRectF(middle - reach, middle - reach, 2 * reach, 2 * reach))
    elif shape == "triangle":
        corners = [
            (middle, middle - reach),
            (middle + reach, middle + reach),
            (middle - reach, middle + reach),
        ]
        painter.drawPolygon(QPolygonF([QPointF(x, y) for x, y in corners]))
    else:
        painter.drawLine(QPointF(middle - reach, middle - reach), QPointF(middle + reach, middle + reach))
        painter.drawLine(QPointF(middle - reach, middle + reach), QPointF(middle + reach, middle - reach))
    painter.end()
    return QIcon(pixels)
