"""Fields of a form that may be refused: numbers and choices that the wheel does not change by accident."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import QSignalBlocker, Qt, Signal
from PySide6.QtGui import QWheelEvent
from PySide6.QtWidgets import QComboBox, QHBoxLayout, QLabel, QVBoxLayout, QWidget

from pulsemend.errors import SettingError
from pulsemend.window.parts import NumberField, words

NARROWEST_PX = 80
"""How far a field gives way to its name where text is large."""


class PlainNumber(NumberField):
    """A number without needless zeros, so that it may have many decimals.

    Parameters are those of `NumberField`.
    """

    def __init__(
        self, name: str, unit: str, least: float, most: float, step: float, decimals: int = 6
    ) -> None:
        super().__init__(name, unit, least, most, step, decimals)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setMinimumWidth(NARROWEST_PX)

    def textFromValue(self, value: float) -> str:
        """Write a value in the user's own numerals."""
        text = self.locale().toString(value, "f", self.decimals())
        point = self.locale().decimalPoint()
        return text.rstrip(self.locale().zeroDigit()).removesuffix(point) if point in text else text

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Leave the wheel to the column around it unless the field has the focus."""
        if self.hasFocus():
            super().wheelEvent(event)
        else:
            event.ignore()


class Chooser(QComboBox):
    """One of a few words.

    Attributes
    ----------
    chosen : Signal(str)
        The user chose the one with this key.
    """

    chosen = Signal(str)

    def __init__(self, name: str) -> None:
        super().__init__()
        self.setAccessibleName(name)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.setSizeAdjustPolicy(QComboBox.SizeAdjustPolicy.AdjustToMinimumContentsLengthWithIcon)
        self.setMinimumContentsLength(12)
        self.setMinimumWidth(NARROWEST_PX)
        self.activated.connect(lambda _: self.chosen.emit(self.currentData()))

    def show_choice(self, options: Sequence[tuple[str, str]], key: str) -> None:
        """Offer keys with their texts, and show which is chosen, without telling anybody."""
        with QSignalBlocker(self):
            now = [(self.itemData(i), self.itemText(i)) for i in range(self.count())]
            if now != list(options):
                self.clear()
                for one, text in options:
                    self.addItem(text, one)
                    self.setItemData(self.count() - 1, text, Qt.ItemDataRole.ToolTipRole)
            self.setCurrentIndex(self.findData(key))

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Leave the wheel to the column around it unless the field has the focus."""
        if self.hasFocus():
            super().wheelEvent(event)
        else:
            event.ignore()


class Field(QWidget):
    """A named field with room for the words of a refusal below it.

    Parameters
    ----------
    name : str
        Its label, whose buddy the first input is.
    *inputs : QWidget
        What is typed into.
    """

    def __init__(self, name: str, *inputs: QWidget) -> None:
        super().__init__()
        self.inputs = inputs
        self.label = QLabel(name)
        self.label.setBuddy(inputs[0])
        row = QHBoxLayout()
        self.label.setWordWrap(True)
        row.addWidget(self.label, 1)
        for one in inputs:
            row.addWidget(one)
        self.refusal = words("", "attention")
        self.refusal.setWordWrap(True)
        self.refusal.hide()
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(2)
        column.addLayout(row)
        column.addWidget(self.refusal)

    def refuse(self, text: str) -> None:
        """Say why the last edit was not taken over; empty takes that back."""
        self.refusal.setText(text)
        self.refusal.setVisible(bool(text))
        for one in self.inputs:
            one.setAccessibleDescription(text)


def in_words(error: SettingError, field: str = "") -> str:
    """Say beside a field why it was refused.

    Parameters
    ----------
    error : SettingError
        Its file plays no part: the edit never reached it.
    field : str
        Last part of the key that belongs to the field; other keys are named.
    """
    about = "" if field and f".{error.key}".endswith(f".{field}") else f"{error.key} "
    parts = [f"Not taken over: {about}{error.problem}"]
    parts += [f"allowed: {error.allowed}"] if error.allowed else []
    parts += [f"received: {error.received}"] if error.received else []
    return "; ".join(parts)
