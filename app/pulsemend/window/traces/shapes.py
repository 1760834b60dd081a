"""The shapes of the roles, drawn from one table for traces, ribbon and legends."""

from __future__ import annotations

import math

from PySide6.QtCore import QPointF, QRectF, Qt
from PySide6.QtGui import QColor, QPainter, QPainterPath, QPen, QPolygonF

from pulsemend.model.vocabulary import Role
from pulsemend.window.theme import ROLE_SHAPES, Theme


def draw_role(painter: QPainter, role: Role, x: float, y: float, size: float, theme: Theme) -> None:
    """Draw the shape of a role around a point.

    Parameters
    ----------
    painter : QPainter
        Its pen and brush are changed.
    role : Role
        Whose shape and colour.
    x, y : float
        Middle of the shape.
    size : float
        Its height.
    theme : Theme
        Gives the colour.
    """
    colour = QColor(theme.roles[role])
    path = role_path(role, size).translated(x, y)
    if ROLE_SHAPES[role] == "ring":
        painter.setPen(QPen(colour, max(1.2, size * 0.16)))
        painter.setBrush(Qt.BrushStyle.NoBrush)
    else:
        painter.setPen(Qt.PenStyle.NoPen)
        painter.setBrush(colour)
    painter.drawPath(path)


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
