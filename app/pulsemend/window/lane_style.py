"""How the rules of epochs are told apart: a colour and a pattern each, in lanes and lists."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import lru_cache

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QBrush, QColor, QIcon, QImage, QPainter, QPen, QPixmap

from pulsemend.model.vocabulary import Role
from pulsemend.window.theme import ROLE_SHAPES, Theme
from pulsemend.window.traces.shapes import role_path

PATTERNS = ("plain", "rising", "level", "dots", "falling", "upright", "grid")
_HUES = (178, 262, 38, 322, 212, 96)
"""Degrees on the colour circle. With as many colours as patterns times that rules repeat after 42."""

_TILE = 8
_SIDE_PX = 14
_FINE = 4


@dataclass(frozen=True)
class RuleStyle:
    """Colour of the edge, and pattern inside."""

    edge: str
    inside: str
    pattern: str


def rule_style(place: int, theme: Theme) -> RuleStyle:
    """Give the look of a rule.

    Parameters
    ----------
    place : int
        Place of the rule in the plan, from 0.
    theme : Theme
        Light or dark.
    """
    return _style(place, is_light=QColor(theme.panel).lightness() > 127)


@lru_cache(maxsize=256)
def _style(place: int, *, is_light: bool) -> RuleStyle:
    hue = _HUES[place % len(_HUES)]
    edge = QColor.fromHsl(hue, 130 if is_light else 110, 80 if is_light else 165)
    inside = QColor.fromHsl(hue, 90 if is_light else 60, 222 if is_light else 62)
    return RuleStyle(edge.name(), inside.name(), PATTERNS[place % len(PATTERNS)])


@lru_cache(maxsize=256)
def rule_brush(style: RuleStyle, ratio: float) -> QBrush:
    """Fill of a kept epoch.

    Parameters
    ----------
    style : RuleStyle
        Look of its rule.
    ratio : float
        Pixels of the screen per pixel of the painter.
    """
    if style.pattern == "plain":
        return QBrush(QColor(style.inside))
    tile = QImage(round(_TILE * ratio), round(_TILE * ratio), QImage.Format.Format_RGB32)
    tile.fill(QColor(style.inside))
    lines = QColor(style.edge)
    lines.setAlpha(130)
    with QPainter(tile) as painter:
        painter.scale(ratio, ratio)
        painter.setPen(QPen(lines, 1.0))
        painter.setRenderHint(QPainter.RenderHint.Antialiasing, on=style.pattern in ("rising", "falling"))
        _draw(painter, style.pattern, lines)
    tile.setDevicePixelRatio(ratio)
    return QBrush(tile)


def _draw(painter: QPainter, pattern: str, colour: QColor) -> None:
    """Draw one tile; lines at an angle reach beyond it, so that tiles join."""
    for shift in (-_TILE, 0, _TILE):
        if pattern == "rising":
            painter.drawLine(shift, _TILE, shift + _TILE, 0)
        elif pattern == "falling":
            painter.drawLine(shift, 0, shift + _TILE, _TILE)
    if pattern in ("level", "grid"):
        painter.drawLine(0, 3, _TILE, 3)
    if pattern in ("upright", "grid"):
        painter.drawLine(3, 0, 3, _TILE)
    if pattern == "dots":
        for x, y in ((1, 1), (5, 5)):
            painter.fillRect(x, y, 2, 2, colour)


def rule_icon(place: int, theme: Theme) -> QIcon:
    """Small box with the look of a rule, for lists.

    Parameters
    ----------
    place : int
        Place of the rule in the plan, from 0.
    theme : Theme
        Light or dark.
    """
    style = rule_style(place, theme)
    pixels = QPixmap(_SIDE_PX * _FINE, _SIDE_PX * _FINE)
    pixels.setDevicePixelRatio(_FINE)
    pixels.fill(Qt.GlobalColor.transparent)
    with QPainter(pixels) as painter:
        box = QRectF(1, 2, _SIDE_PX - 2, _SIDE_PX - 4)
        painter.fillRect(box, rule_brush(style, float(_FINE)))
        painter.setPen(QPen(QColor(style.edge), 1.4))
        painter.drawRect(box)
    return QIcon(pixels)


def draw_role(
    painter: QPainter,
    role: Role,
    middles: Sequence[tuple[float, float]],
    size: float,
    theme: Theme,
    ratio: float,
) -> None:
    """Draw the shape of one role at many places: blitting a small picture takes a tenth of drawing its path.

    Parameters
    ----------
    painter : QPainter
        Where.
    role : Role
        Whose shape and colour.
    middles : sequence of (float, float)
        Places.
    size : float
        Height of a shape.
    theme : Theme
        Gives the colour.
    ratio : float
        Pixels of the screen per pixel of the painter.
    """
    stamp = _stamp(role, size, theme.roles[role], ratio)
    half = 0.5 * stamp.width() / ratio
    if ratio == 1.0:
        for x, y in middles:
            painter.drawImage(math.floor(x - half + 0.5), math.floor(y - half + 0.5), stamp)
        return
    for x, y in middles:
        # On whole pixels of the screen, or shapes would look different from each other.
        left, top = (math.floor((place - half) * ratio + 0.5) / ratio for place in (x, y))
        painter.drawImage(QPointF(left, top), stamp)


@lru_cache(maxsize=256)
def _stamp(role: Role, size: float, colour: str, ratio: float) -> QImage:
    n_pixels = math.ceil((size + 4) * ratio)
    image = QImage(n_pixels, n_pixels, QImage.Format.Format_ARGB32_Premultiplied)
    image.fill(Qt.GlobalColor.transparent)
    image.setDevicePixelRatio(ratio)
    with QPainter(image) as painter:
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        painter.translate(0.5 * n_pixels / ratio, 0.5 * n_pixels / ratio)
        if ROLE_SHAPES[role] == "ring":
            painter.setPen(QPen(QColor(colour), max(1.2, size * 0.16)))
        else:
            painter.setPen(Qt.PenStyle.NoPen)
            painter.setBrush(QColor(colour))
        painter.drawPath(role_path(role, size))
    return image
