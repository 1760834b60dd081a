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

_FATE_SHAPES = {
    Fate.BY_HAND: "square",
    Fate.TRIAL_EXCLUDED: "square",
    Fate.SET_ASIDE: "bar",
    Fate.BALANCE: "bar",
    Fate.TRIAL_DOUBTFUL: "triangle",
}
_ON_PURPOSE = ("square", "bar")
"""Shapes of what somebody wanted, so that nothing has to be looked at."""


def fate_icon(fate: Fate, theme: Theme) -> QIcon:
    """Shape of a fate.

    A disc for kept, an empty square for what was decided by hand, a bar for what the plan sets aside or
    leaves out for balance, a triangle for doubt, else a cross.

    Parameters
    ----------
    fate : Fate
        What became of an epoch.
    theme : Theme
        Gives the colour.
    """
    if fate is Fate.KEPT:
        return _icon("disc", theme.accent)
    shape = _FATE_SHAPES.get(fate, "cross")
    return _icon(shape, theme.quiet if shape in _ON_PURPOSE else theme.attention)


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
    elif shape == "bar":
        painter.fillRect(QRectF(middle - reach, middle - 1.2, 2 * reach, 2.4), QColor(colour))
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
