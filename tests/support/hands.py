"""Mouse moves and wheels that Qt's own test functions cannot send, and pictures as numbers."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from PySide6.QtCore import QEvent, QPoint, QPointF, Qt
from PySide6.QtGui import QImage, QMouseEvent, QWheelEvent
from PySide6.QtWidgets import QApplication, QWidget

_NOWHERE = QPoint(0, 0)
_NO_KEYS = Qt.KeyboardModifier.NoModifier
_NO_BUTTON = Qt.MouseButton.NoButton


def move(widget: QWidget, at: QPoint, buttons: Qt.MouseButton = _NO_BUTTON) -> None:
    """Move the mouse, with buttons held."""
    event = QMouseEvent(
        QEvent.Type.MouseMove,
        QPointF(at),
        widget.mapToGlobal(QPointF(at)),
        _NO_BUTTON,
        buttons,
        _NO_KEYS,
    )
    QApplication.sendEvent(widget, event)


def wheel(
    widget: QWidget,
    at: QPoint,
    angle: QPoint = _NOWHERE,
    pixels: QPoint = _NOWHERE,
    modifiers: Qt.KeyboardModifier = _NO_KEYS,
) -> None:
    """Turn the wheel (angle), or scroll on a touchpad (pixels)."""
    event = QWheelEvent(
        QPointF(at),
        widget.mapToGlobal(QPointF(at)),
        pixels,
        angle,
        _NO_BUTTON,
        modifiers,
        Qt.ScrollPhase.NoScrollPhase,
        False,
    )
    QApplication.sendEvent(widget, event)


def pixels(image: QImage) -> NDArray[np.uint32]:
    """Colours of a picture, 0xAARRGGBB, shape (height, width)."""
    image = image.convertToFormat(QImage.Format.Format_RGB32)
    return np.array(image.constBits(), np.uint8).view(np.uint32).reshape(image.height(), -1).copy()
