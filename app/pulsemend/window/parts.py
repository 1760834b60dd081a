"""Small building blocks that all stages share: cards, lines of evidence, fields with units, empty states."""

from __future__ import annotations

from collections.abc import Callable, Sequence

from PySide6.QtCore import QEvent, QSignalBlocker, QSize, Qt, Signal
from PySide6.QtGui import QKeyEvent, QKeySequence, QWheelEvent
from PySide6.QtWidgets import (
    QButtonGroup,
    QDoubleSpinBox,
    QFrame,
    QHBoxLayout,
    QLabel,
    QPushButton,
    QRadioButton,
    QScrollArea,
    QSizePolicy,
    QVBoxLayout,
    QWidget,
)

GAP_PX = 8


def words(text: str, kind: str = "") -> QLabel:
    """Make a label; kinds are "", "title", "quiet", "value" and "attention" of the style sheet."""
    label = QLabel(text)
    label.setTextFormat(Qt.TextFormat.PlainText)
    label.setTextInteractionFlags(Qt.TextInteractionFlag.TextSelectableByMouse)
    if kind:
        label.setProperty("kind", kind)
    if kind == "quiet":
        label.setWordWrap(True)
    return label


def set_kind(label: QWidget, kind: str) -> None:
    """Give a label another kind and have the style sheet notice it."""
    if label.property("kind") != kind:
        label.setProperty("kind", kind)
        label.style().unpolish(label)
        label.style().polish(label)


class Card(QFrame):
    """A titled frame of a stage's settings.

    Parameters
    ----------
    title : str
        What it is about.
    note : str
        A quiet word beside the title; empty for none.
    """

    def __init__(self, title: str, note: str = "", parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setProperty("card", "true")
        self.setAccessibleName(title)
        self.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Minimum)
        self.body = QVBoxLayout(self)
        self.body.setContentsMargins(12, 8, 12, 10)
        self.body.setSpacing(6)
        head = QHBoxLayout()
        self.title = words(title, "title")
        self.note = words(note, "quiet")
        head.addWidget(self.title)
        head.addWidget(self.note, 1)
        self.body.addLayout(head)

    def add(self, widget: QWidget) -> QWidget:
        """Put a widget below what is there and return it."""
        self.body.addWidget(widget)
        return widget

    def add_line(self, name: str, value: str = "") -> ValueLine:
        """Put a line of name and value below what is there."""
        line = ValueLine(name, value)
        self.body.addWidget(line)
        return line

    def add_note(self, text: str = "") -> QLabel:
        """Put a quiet sentence below what is there."""
        label = words(text, "quiet")
        self.body.addWidget(label)
        return label

    def add_field(self, name: str, field: QWidget, after: str = "") -> QWidget:
        """Put a named field below what is there; the name is the field's buddy and accessible name."""
        row = QHBoxLayout()
        label = QLabel(name)
        label.setBuddy(field)
        if not field.accessibleName():
            field.setAccessibleName(f"{self.title.text()}: {name}")
        row.addWidget(label)
        row.addStretch(1)
        row.addWidget(field)
        if after:
            row.addWidget(words(after, "quiet"))
        self.body.addLayout(row)
        return field


class ValueLine(QWidget):
    """A name on the left and a value with its unit on the right."""

    def __init__(self, name: str, value: str = "", parent: QWidget | None = None) -> None:
        super().__init__(parent)
        row = QHBoxLayout(self)
        row.setContentsMargins(0, 0, 0, 0)
        self.name = words(name)
        self.name.setWordWrap(True)
        self.value = words(value, "value")
        self.value.setAlignment(Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter)
        row.addWidget(self.name, 1)
        row.addWidget(self.value)

    def show_value(self, value: str, *, attention: bool = False) -> None:
        """Show another value; attention says by weight and colour, and the text by itself, to look at it."""
        self.value.setText(value)
        set_kind(self.value, "attention" if attention else "value")


class NumberField(QDoubleSpinBox):
    """A number with a unit. Typing commits on Return or when the field is left; steps commit at once.

    Parameters
    ----------
    name : str
        Accessible name.
    unit : str
        Shown behind the number, e.g. "ms".
    least, most, step : float
        Range and step.
    decimals : int
        Digits behind the point.

    Attributes
    ----------
    committed : Signal(float)
        The user chose another value.
    """

    committed = Signal(float)

    def __init__(
        self, name: str, unit: str, least: float, most: float, step: float, decimals: int = 1
    ) -> None:
        super().__init__()
        self.setAccessibleName(name)
        self.setSuffix(f" {unit}" if unit else "")
        self.setDecimals(decimals)
        self.setRange(least, most)
        self.setSingleStep(step)
        self.setKeyboardTracking(False)
        self.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.valueChanged.connect(self.committed)
        self.editingFinished.connect(self._end_typing)

    def show_value(self, value: float) -> None:
        """Show a value without committing it."""
        with QSignalBlocker(self):
            self.setValue(value)

    def wheelEvent(self, event: QWheelEvent) -> None:
        """Leave the wheel to what scrolls, unless the field was chosen before: nothing changes in passing."""
        if self.hasFocus():
            super().wheelEvent(event)
        else:
            event.ignore()

    def event(self, event: QEvent) -> bool:
        """Leave the keys of undo and redo to the window, unless something is typed and not committed yet."""
        if isinstance(event, QKeyEvent) and event.type() == QEvent.Type.ShortcutOverride:
            steps = (QKeySequence.StandardKey.Undo, QKeySequence.StandardKey.Redo)
            if any(event.matches(key) for key in steps) and not self.lineEdit().isModified():
                event.ignore()
                return False
        return super().event(event)

    def _end_typing(self) -> None:
        self.lineEdit().setModified(False)


class Choices(QWidget):
    """One of several, each with room for evidence on its right.

    Attributes
    ----------
    chosen : Signal(str)
        The user chose this key.
    """

    chosen = Signal(str)

    def __init__(self, name: str, options: Sequence[tuple[str, str]], parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setAccessibleName(name)
        self._group = QButtonGroup(self)
        self._buttons: dict[str, QRadioButton] = {}
        self._evidence: dict[str, QLabel] = {}
        column = QVBoxLayout(self)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(4)
        for key, text in options:
            row = QHBoxLayout()
            button = QRadioButton(text)
            button.setAccessibleName(f"{name}: {text}")
            button.clicked.connect(lambda _=False, key=key: self.chosen.emit(key))
            self._group.addButton(button)
            self._buttons[key] = button
            self._evidence[key] = words("", "quiet")
            self._evidence[key].setWordWrap(False)
            row.addWidget(button)
            row.addStretch(1)
            row.addWidget(self._evidence[key])
            column.addLayout(row)

    def show_choice(self, key: str) -> None:
        """Show which is chosen, without telling anybody."""
        if key in self._buttons:
            self._buttons[key].setChecked(True)

    def show_evidence(self, key: str, text: str) -> None:
        """Show a few words beside an option."""
        self._evidence[key].setText(text)


def button(text: str, does: Callable[[], object], *, main: bool = False, tooltip: str = "") -> QPushButton:
    """Make a button that does something when pressed."""
    made = QPushButton(text)
    if main:
        made.setProperty("kind", "main")
    if tooltip:
        made.setToolTip(tooltip)
    made.clicked.connect(lambda _=False: does())
    return made


class EmptyState(QWidget):
    """What to do next, where there is nothing to show yet."""

    def __init__(self, text: str, *buttons: QPushButton, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        column = QVBoxLayout(self)
        column.addStretch(1)
        self.text = words(text, "quiet")
        self.text.setAlignment(Qt.AlignmentFlag.AlignCenter)
        column.addWidget(self.text)
        row = QHBoxLayout()
        row.addStretch(1)
        for one in buttons:
            row.addWidget(one)
        row.addStretch(1)
        column.addLayout(row)
        column.addStretch(1)


class _Column(QScrollArea):
    """Scrolls up and down, and is never narrower than what is inside."""

    def minimumSizeHint(self) -> QSize:
        """As wide as the widest card, and the scroll bar."""
        hint = super().minimumSizeHint()
        inside = self.widget()
        width = 0 if inside is None else inside.minimumSizeHint().width()
        return QSize(max(hint.width(), width + self.verticalScrollBar().sizeHint().width()), hint.height())


def scrolling_column(*cards: QWidget, name: str) -> QScrollArea:
    """Stack cards in a column that scrolls when the window is low."""
    inside = QWidget()
    column = QVBoxLayout(inside)
    column.setContentsMargins(0, 0, 4, 0)
    column.setSpacing(GAP_PX)
    for card in cards:
        column.addWidget(card)
    column.addStretch(1)
    area = _Column()
    area.setAccessibleName(name)
    area.setWidgetResizable(True)
    area.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
    area.setWidget(inside)
    return area
