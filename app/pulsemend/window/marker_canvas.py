"""A painted picture that is kept until something about it changes."""

from __future__ import annotations

from PySide6.QtCore import QEvent, QRectF, QSize, Qt
from PySide6.QtGui import QColor, QFocusEvent, QImage, QPainter, QPaintEvent, QPen, QResizeEvent
from PySide6.QtWidgets import QWidget

from pulsemend.window.theme import Theme


class KeptPicture(QWidget):
    """Subclasses paint in `paint_ground`.

    Parameters
    ----------
    name : str
        Accessible name.
    theme : Theme
        Colours.
    """

    def __init__(self, name: str, theme: Theme) -> None:
        super().__init__()
        self.theme = theme
        self._ground = QImage()
        self._stale = True
        self.setAccessibleName(name)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)

    def paint_ground(self, painter: QPainter) -> None:
        """Paint everything."""
        raise NotImplementedError

    def refresh(self) -> None:
        """Paint anew when it is seen next."""
        self._stale = True
        self.update()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self.theme = theme
        self.refresh()

    def sizeHint(self) -> QSize:
        """Room to see something."""
        return QSize(600, 180)

    def minimumSizeHint(self) -> QSize:
        """Room for a little."""
        return QSize(200, 80)

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Show what was painted."""
        ratio = self.devicePixelRatioF()
        if self._stale or self._ground.devicePixelRatio() != ratio:
            image = QImage(
                max(1, round(self.width() * ratio)),
                max(1, round(self.height() * ratio)),
                QImage.Format.Format_RGB32,
            )
            image.setDevicePixelRatio(ratio)
            image.fill(QColor(self.theme.panel))
            with QPainter(image) as painter:
                painter.setFont(self.font())
                self.paint_ground(painter)
            self._ground, self._stale = image, False
        with QPainter(self) as painter:
            painter.drawImage(0, 0, self._ground)
            if self.hasFocus():
                painter.setPen(QPen(QColor(self.theme.accent), 2.0))
                painter.drawRect(QRectF(self.rect()).adjusted(1, 1, -1, -1))

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Paint for another size."""
        super().resizeEvent(event)
        self.refresh()

    def changeEvent(self, event: QEvent) -> None:
        """Follow the size of the text."""
        super().changeEvent(event)
        if event.type() in (QEvent.Type.FontChange, QEvent.Type.StyleChange):
            self.refresh()

    def focusInEvent(self, event: QFocusEvent) -> None:
        """Show the focus."""
        super().focusInEvent(event)
        self.update()

    def focusOutEvent(self, event: QFocusEvent) -> None:
        """Stop showing the focus."""
        super().focusOutEvent(event)
        self.update()
