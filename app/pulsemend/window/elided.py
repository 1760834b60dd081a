"""A label for names that may be long: shortened in the middle, whole in its tooltip."""

from __future__ import annotations

from PySide6.QtCore import QSize, Qt
from PySide6.QtGui import QPainter, QPaintEvent
from PySide6.QtWidgets import QLabel, QSizePolicy, QStyle, QStyleOption, QWidget

_LEAST_LETTERS = 6


class ElidedLabel(QLabel):
    """One line of plain text that takes no more room than there is.

    Parameters
    ----------
    text : str
        What it says.
    kind : str
        As for `parts.words`.
    parent : QWidget or None
        As usual.
    """

    def __init__(self, text: str = "", kind: str = "", parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setTextFormat(Qt.TextFormat.PlainText)
        self.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Fixed)
        if kind:
            self.setProperty("kind", kind)
        self.show_text(text)

    def show_text(self, text: str) -> None:
        """Say something else."""
        self.setText(text)
        self.setToolTip(text)
        self.setAccessibleName(text)

    def minimumSizeHint(self) -> QSize:
        """Room for a few letters."""
        return QSize(
            self.fontMetrics().averageCharWidth() * _LEAST_LETTERS, super().minimumSizeHint().height()
        )

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Draw as much of the text as there is room for."""
        painter = QPainter(self)
        option = QStyleOption()
        option.initFrom(self)
        self.style().drawPrimitive(QStyle.PrimitiveElement.PE_Widget, option, painter, self)
        text = self.fontMetrics().elidedText(self.text(), Qt.TextElideMode.ElideMiddle, self.width())
        painter.setPen(self.palette().color(self.foregroundRole()))
        painter.drawText(self.rect(), int(self.alignment() | Qt.AlignmentFlag.AlignVCenter), text)
