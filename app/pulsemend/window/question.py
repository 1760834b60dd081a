"""A question asked where its cause is, without a window in front of everything."""

from __future__ import annotations

from collections.abc import Callable

from PySide6.QtCore import Qt
from PySide6.QtGui import QKeyEvent
from PySide6.QtWidgets import QVBoxLayout, QWidget

from pulsemend.window.flow import flow_row
from pulsemend.window.parts import button, words


class Question(QWidget):
    """A sentence and two buttons; the one that changes nothing has the focus, and Escape means it."""

    def __init__(self, name: str) -> None:
        super().__init__()
        self.setAccessibleName(name)
        self._does: Callable[[], object] | None = None
        self.text = words("", "attention")
        self.text.setWordWrap(True)
        self.yes = button("", self._go)
        self.no = button("", self.drop)
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.addWidget(self.text)
        column.addWidget(flow_row(self.yes, self.no))
        self.hide()

    def ask(self, text: str, yes: str, no: str, does: Callable[[], object]) -> None:
        """Ask.

        Parameters
        ----------
        text : str
            The question.
        yes, no : str
            What the buttons do, in words.
        does : callable
            Called for yes; no does nothing.
        """
        self._does = does
        self.text.setText(text)
        self.yes.setText(yes)
        self.no.setText(no)
        for one in (self.yes, self.no):
            one.setAccessibleDescription(text)
        self.show()
        self.no.setFocus()

    def drop(self) -> None:
        """Take the question back."""
        self._does = None
        self.hide()

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Escape changes nothing; Return presses the button that has the focus."""
        if event.key() == Qt.Key.Key_Escape:
            self.drop()
        elif event.key() in (Qt.Key.Key_Return, Qt.Key.Key_Enter):
            (self.yes if self.yes.hasFocus() else self.no).click()
        else:
            super().keyPressEvent(event)

    def _go(self) -> None:
        does = self._does
        self.drop()
        if does is not None:
            does()
