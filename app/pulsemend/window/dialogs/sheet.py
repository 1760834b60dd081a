"""What all dialogs share: a title, a column, a row of buttons, and the same behaviour of Return and Esc."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import Qt, Signal
from PySide6.QtWidgets import QDialog, QHBoxLayout, QLabel, QPushButton, QVBoxLayout, QWidget

from pulsemend.window.parts import words


class Sheet(QDialog):
    """A dialog with a column above a row of buttons.

    Parameters
    ----------
    title : str
        Of the window, and its first line.
    parent : QWidget or None
        The window it belongs to.
    """

    def __init__(self, title: str, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setWindowTitle(title)
        self.setAccessibleName(title)
        self.setAttribute(Qt.WidgetAttribute.WA_DeleteOnClose)
        self.column = QVBoxLayout(self)
        self.column.setContentsMargins(18, 16, 18, 14)
        self.column.setSpacing(10)
        self.buttons = QHBoxLayout()
        self.buttons.addStretch(1)

    def add_text(self, text: str, kind: str = "") -> QLabel:
        """Put a paragraph below what is there."""
        label = words(text, kind)
        label.setWordWrap(True)
        self.column.addWidget(label)
        return label

    def add_button(self, text: str, *, main: bool = False, tooltip: str = "") -> QPushButton:
        """Put a button to the right of what is there; Return presses the main one."""
        button = QPushButton(text)
        button.setAutoDefault(main)
        button.setDefault(main)
        button.setToolTip(tooltip)
        if main:
            button.setProperty("kind", "main")
        self.buttons.addWidget(button)
        return button

    def end_column(self) -> None:
        """Put the buttons at the bottom; call it when the column is complete."""
        self.column.addLayout(self.buttons)


class Question(Sheet):
    """A question with a few answers.

    Parameters
    ----------
    title, text : str
        The question, and what stands behind it.
    answers : sequence of (str, str, str)
        Key, text and tooltip of each, from left to right; the last one is the main one.
    leaving : str
        Key that counts when the dialog is left by Esc.
    evidence : QWidget or None
        Shown below the text.

    Attributes
    ----------
    answered : Signal(str)
        The key, exactly once.
    """

    answered = Signal(str)

    def __init__(
        self,
        title: str,
        text: str,
        answers: Sequence[tuple[str, str, str]],
        leaving: str,
        evidence: QWidget | None = None,
        parent: QWidget | None = None,
    ) -> None:
        super().__init__(title, parent)
        self._answer = leaving
        self.setMinimumWidth(460)
        self.add_text(title, "title")
        self.add_text(text)
        if evidence is not None:
            self.column.addWidget(evidence, 1)
        self.answers: dict[str, QPushButton] = {}
        for place, (key, label, tooltip) in enumerate(answers, start=1):
            button = self.add_button(label, main=place == len(answers), tooltip=tooltip)
            button.clicked.connect(lambda _=False, key=key: self._take(key))
            self.answers[key] = button
        self.end_column()
        self.answers[answers[-1][0]].setFocus()
        self.finished.connect(lambda _: self.answered.emit(self._answer))

    def _take(self, key: str) -> None:
        self._answer = key
        self.accept()
