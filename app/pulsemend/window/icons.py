"""Icons as Qt draws them, in the colours of a theme and sharp on every screen."""

from __future__ import annotations

from functools import lru_cache

from PySide6.QtCore import QByteArray, QRectF, Qt
from PySide6.QtGui import QIcon, QImage, QPainter, QPixmap
from PySide6.QtSvg import QSvgRenderer

from pulsemend.session.icon_text import PROGRAM, icon_text
from pulsemend.window.theme import Theme

SIZES_PX = (16, 20, 24, 32, 40, 48, 64, 96)
"""Sizes that are drawn each; a screen with more pixels per point takes a larger one."""


def icon(name: str, theme: Theme) -> QIcon:
    """Make an icon in the colours of a theme.

    Parameters
    ----------
    name : str
        One of the drawings, as in `session.icon_text`.
    theme : Theme
        Its text colour draws the icon; what cannot be pressed is quiet, what is chosen has the accent.
    """
    made = QIcon()
    for mode, state, colour in (
        (QIcon.Mode.Normal, QIcon.State.Off, theme.text),
        (QIcon.Mode.Normal, QIcon.State.On, theme.accent),
        (QIcon.Mode.Disabled, QIcon.State.Off, theme.line),
        (QIcon.Mode.Disabled, QIcon.State.On, theme.line),
    ):
        for size_px in SIZES_PX:
            made.addPixmap(QPixmap.fromImage(_image(icon_text(name, colour), size_px)), mode, state)
    return made


def program_icon() -> QIcon:
    """Make the program's own picture, for the window manager."""
    made = QIcon()
    for size_px in SIZES_PX:
        made.addPixmap(QPixmap.fromImage(_image(icon_text(PROGRAM, ""), size_px)))
    return made


def pixmap(name: str, colour: str, size_px: int, pixel_ratio: float = 1.0) -> QPixmap:
    """Draw an icon for a label.

    Parameters
    ----------
    name : str
        One of the drawings.
    colour : str
        As ``#rrggbb``.
    size_px : int
        Width and height in the units of the layout.
    pixel_ratio : float
        Screen pixels per unit.
    """
    drawn = QPixmap.fromImage(_image(icon_text(name, colour), round(size_px * pixel_ratio)))
    drawn.setDevicePixelRatio(pixel_ratio)
    return drawn


@lru_cache(maxsize=2048)
def _image(svg: str, size_px: int) -> QImage:
    """Draw a picture; images, unlike pixmaps, may outlive the application."""
    image = QImage(size_px, size_px, QImage.Format.Format_ARGB32_Premultiplied)
    image.fill(Qt.GlobalColor.transparent)
    painter = QPainter(image)
    QSvgRenderer(QByteArray(svg.encode())).render(painter, QRectF(0, 0, size_px, size_px))
    painter.end()
    return image
