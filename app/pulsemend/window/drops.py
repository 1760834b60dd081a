"""Recordings, plans and folders dropped on the window."""

from __future__ import annotations

from pathlib import Path

from PySide6.QtCore import QEvent, QMimeData, QObject, Signal
from PySide6.QtGui import QDragEnterEvent, QDropEvent
from PySide6.QtWidgets import QWidget

from pulsemend.session.dropped import what_is


class Drops(QObject):
    """Takes what is dropped on a widget.

    Parameters
    ----------
    widget : QWidget
        The main window.

    Attributes
    ----------
    dropped : Signal(object)
        A `Dropped`, which may be nothing but words.
    """

    dropped = Signal(object)

    def __init__(self, widget: QWidget) -> None:
        super().__init__(widget)
        widget.setAcceptDrops(True)
        widget.installEventFilter(self)

    def eventFilter(self, watched: QObject, event: QEvent) -> bool:
        """Take drags with files, and leave all else alone."""
        if isinstance(event, QDragEnterEvent) and event.type() == QEvent.Type.DragEnter:
            if local_paths(event.mimeData()):
                event.acceptProposedAction()
            return True
        if isinstance(event, QDropEvent) and event.type() == QEvent.Type.Drop:
            event.acceptProposedAction()
            self.dropped.emit(what_is(local_paths(event.mimeData())))
            return True
        return super().eventFilter(watched, event)


def local_paths(data: QMimeData) -> list[Path]:
    """Files of this computer in what is dragged."""
    return [Path(url.toLocalFile()) for url in data.urls() if url.isLocalFile()]
