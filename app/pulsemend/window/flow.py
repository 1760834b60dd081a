"""A row of controls that goes on in the next line where there is no more room, as words do."""

from __future__ import annotations

from PySide6.QtCore import QPoint, QRect, QSize, Qt
from PySide6.QtWidgets import QLayout, QLayoutItem, QScrollArea, QSizePolicy, QWidget

from pulsemend.window.parts import Card, scrolling_column

GAP_PX = 6


class Flow(QLayout):
    """Layout of a row that breaks; keyboard order is that of adding."""

    def __init__(self) -> None:
        super().__init__()
        self._items: list[QLayoutItem] = []
        self.setContentsMargins(0, 0, 0, 0)

    def addItem(self, item: QLayoutItem) -> None:
        """Take an item, for the toolkit."""
        self._items.append(item)

    def count(self) -> int:
        """Count the items."""
        return len(self._items)

    # The toolkit's documented return is None beyond the end; its stubs do not say so.
    def itemAt(self, index: int) -> QLayoutItem:
        """Give an item; None beyond the end."""
        return self._items[index] if 0 <= index < len(self._items) else None  # type: ignore[return-value]

    def takeAt(self, index: int) -> QLayoutItem:
        """Give an item away; None beyond the end."""
        return self._items.pop(index) if 0 <= index < len(self._items) else None  # type: ignore[return-value]

    def expandingDirections(self) -> Qt.Orientation:
        """Ask for no more room than the items need."""
        return Qt.Orientation(0)

    def hasHeightForWidth(self) -> bool:
        """Say that fewer columns need more lines."""
        return True

    def heightForWidth(self, width: int) -> int:
        """Give the height at a width."""
        return self._arrange(QRect(0, 0, width, 0), move=False)

    def setGeometry(self, rect: QRect) -> None:
        """Place the items."""
        super().setGeometry(rect)
        self._arrange(rect, move=True)

    def sizeHint(self) -> QSize:
        """Give room for all items in one line."""
        shown = [item.sizeHint() for item in self._items if not item.isEmpty()]
        width = sum(one.width() for one in shown) + GAP_PX * max(0, len(shown) - 1)
        return QSize(width, max((one.height() for one in shown), default=0))

    def minimumSize(self) -> QSize:
        """Give room for the widest item alone."""
        shown = [item.minimumSize() for item in self._items if not item.isEmpty()]
        return QSize(
            max((one.width() for one in shown), default=0), max((one.height() for one in shown), default=0)
        )

    def _arrange(self, rect: QRect, *, move: bool) -> int:
        """Lay the items out line by line; gives the height."""
        top = rect.y()
        for number, line in enumerate(self._lines(rect.width())):
            height = max(item.sizeHint().height() for item in line)
            top += GAP_PX if number else 0
            x = rect.x()
            for item in line:
                size = item.sizeHint().boundedTo(QSize(rect.width(), height))
                if move:
                    item.setGeometry(QRect(QPoint(x, top + (height - size.height()) // 2), size))
                x += size.width() + GAP_PX
            top += height
        return top - rect.y()

    def _lines(self, width: int) -> list[list[QLayoutItem]]:
        """Break the items into lines."""
        lines: list[list[QLayoutItem]] = []
        used = 0
        for item in self._items:
            if item.isEmpty():
                continue
            needed = min(item.sizeHint().width(), width)
            if lines and used + GAP_PX + needed <= width:
                lines[-1].append(item)
                used += GAP_PX + needed
            else:
                lines.append([item])
                used = needed
        return lines


def flow_row(*widgets: QWidget) -> QWidget:
    """Put controls in a row that breaks.

    Parameters
    ----------
    *widgets : QWidget
        In order.
    """
    row = QWidget()
    layout = Flow()
    row.setLayout(layout)
    for one in widgets:
        layout.addWidget(one)
    policy = QSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Preferred)
    policy.setHeightForWidth(True)
    row.setSizePolicy(policy)
    return row


def column_of(*cards: Card, name: str) -> QScrollArea:
    """Stack cards that grow with the lines their texts and rows need.

    Parameters
    ----------
    *cards : Card
        From top to bottom.
    name : str
        Accessible name of the column.
    """
    for card in cards:
        # What breaks into lines is higher than its hint, which must not be the card's limit.
        card.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Minimum)
    return scrolling_column(*cards, name=name)
