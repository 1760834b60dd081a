"""Keys and wheel turned into moves of the view, the same in traces and ribbon."""

from __future__ import annotations

from collections.abc import Callable

from PySide6.QtCore import QPointF, Qt
from PySide6.QtGui import QWheelEvent

from pulsemend.session.view import View
from pulsemend.window.traces.navigation import FACTOR, NOTCH, SMALL_STEP, Extent, louder

_NOTCH_ANGLE = 120.0
_ZOOM_PIXELS = 60.0
"""Pixels of a touchpad's scrolling that zoom as much as one notch of a wheel."""


def plain(modifiers: Qt.KeyboardModifier) -> Qt.KeyboardModifier:
    """Leave out the modifier that tells the keypad."""
    return modifiers & ~Qt.KeyboardModifier.KeypadModifier


def moved_by_key(key: int, modifiers: Qt.KeyboardModifier, view: View, extent: Extent) -> View | None:
    """View after a key, or None if the key does not move it.

    Arrows move by a tenth, Page Up and Page Down by the width, Home and End to the recording's ends. With
    Ctrl, Up and Down zoom about the middle; with Shift besides they change the height of the traces. The
    table of actions has the same keys, and in the window its actions come first.
    """
    middle_s = view.start_s + 0.5 * view.width_s
    none, control = Qt.KeyboardModifier.NoModifier, Qt.KeyboardModifier.ControlModifier
    both = control | Qt.KeyboardModifier.ShiftModifier
    moves: dict[tuple[Qt.KeyboardModifier, Qt.Key], Callable[[], View]] = {
        (none, Qt.Key.Key_Left): lambda: extent.stepped(view, -SMALL_STEP),
        (none, Qt.Key.Key_Right): lambda: extent.stepped(view, SMALL_STEP),
        (none, Qt.Key.Key_PageUp): lambda: extent.stepped(view, -1.0),
        (none, Qt.Key.Key_PageDown): lambda: extent.stepped(view, 1.0),
        (none, Qt.Key.Key_Home): lambda: extent.at_start(view),
        (none, Qt.Key.Key_End): lambda: extent.at_end(view),
        (control, Qt.Key.Key_Up): lambda: extent.zoomed(view, FACTOR, middle_s),
        (control, Qt.Key.Key_Down): lambda: extent.zoomed(view, 1 / FACTOR, middle_s),
        (both, Qt.Key.Key_Up): lambda: louder(view, 1),
        (both, Qt.Key.Key_Down): lambda: louder(view, -1),
    }
    for (wanted, code), move in moves.items():
        if plain(modifiers) == wanted and key == code.value:
            return move()
    return None


def wheel_zoom(event: QWheelEvent) -> float | None:
    """Factor of a wheel event that zooms (with Ctrl), or None."""
    if not event.modifiers() & Qt.KeyboardModifier.ControlModifier:
        return None
    if event.pixelDelta().y():
        return float(NOTCH ** (event.pixelDelta().y() / _ZOOM_PIXELS))
    return float(NOTCH ** (event.angleDelta().y() / _NOTCH_ANGLE))


def wheel_move(event: QWheelEvent, width: float) -> QPointF:
    """How far a wheel event moves: x in widths of the view, y in notches, to the right and down above 0."""
    pixels, angle = event.pixelDelta(), event.angleDelta()
    if not pixels.isNull():
        return QPointF(-pixels.x() / width, -pixels.y() / _ZOOM_PIXELS)
    return QPointF(-angle.x() / _NOTCH_ANGLE * SMALL_STEP, -angle.y() / _NOTCH_ANGLE)
