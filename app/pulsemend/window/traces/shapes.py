"""The shapes of the roles, drawn from one table for traces, ribbon and legends."""

from __future__ import annotations

import math
from functools import lru_cache

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QColor, QImage, QPainter, QPainterPath, QPen, QPolygonF

from pulsemend.model.vocabulary import Role
from pulsemend.window.theme import ROLE_SHAPES, Theme


def draw_roles(
    painter: QPainter,
    roles: list[Role],
    at: tuple[list[float], float],
    size: float,
    theme: Theme,
    ratio: float,
) -> None:
    """Draw the shapes of roles around points on one line.

    Parameters
    ----------
    painter : QPainter
        Where.
    roles : list of Role
        Whose shapes and colours.
    at : (list of float, float)
        Middles of the shapes, and the height all lie at.
    size : float
        Height of a shape.
    theme : Theme
        Gives the colours.
    ratio : float
        Pixels of the screen per pixel of the painter.
    """
    xs, y = at
    for role, x in zip(roles, xs, strict=True):
        stamp = _stamp(role, size, theme.roles[role], ratio)
        half = 0.5 * stamp.width() / ratio
        # On whole pixels of the screen, or shapes would look different from each other.
        painter.drawImage(QPointF(round((x - half) * ratio) / ratio, y - half), stamp)


@lru_cache(maxsize=256)
def _stamp(role: Role, size: float, colour: str, ratio: float) -> QImage:
    """Make a small picture of a shape: blitting it takes a tenth of drawing its path."""
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


def role_path(role: Role, size: float) -> QPainterPath:
    """Outline of a role's shape around the origin, ``size`` high."""
    half = 0.5 * size
    path = QPainterPath()
    shape = ROLE_SHAPES[role]
    if shape == "square":
        path.addRect(QRectF(-0.84 * half, -0.84 * half, 1.68 * half, 1.68 * half))
    elif shape == "triangle":
        path.addPolygon(_closed((0, -half), (half, 0.84 * half), (-half, 0.84 * half)))
    elif shape == "diamond":
        path.addPolygon(_closed((0, -half), (half, 0), (0, half), (-half, 0)))
    elif shape == "star":
        points = [
            (radius * math.sin(k * math.pi / 4), -radius * math.cos(k * math.pi / 4))
            for k, radius in enumerate([1.15 * half, 0.42 * half] * 4)
        ]
        path.addPolygon(_closed(*points))
    elif shape == "plus":
        arm = 0.3 * half
        path.addRect(QRectF(-half, -arm, size, 2 * arm))
        path.addRect(QRectF(-arm, -half, 2 * arm, size))
        path.setFillRule(Qt.FillRule.WindingFill)
    elif shape == "bar":
        path.addRect(QRectF(-0.28 * half, -half, 0.56 * half, size))
    elif shape == "dot":
        path.addEllipse(QPointF(0, 0), 0.45 * half, 0.45 * half)
    elif shape == "ring":
        path.addEllipse(QPointF(0, 0), 0.75 * half, 0.75 * half)
    else:
        path.addEllipse(QPointF(0, 0), 0.9 * half, 0.9 * half)
    return path


def _closed(*points: tuple[float, float]) -> QPolygonF:
    return QPolygonF([QPointF(x, y) for x, y in (*points, points[0])])
