"""What the user is told: the newest message, its level as word and shape; older ones, details on demand."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial

from PySide6.QtCore import Qt
from PySide6.QtGui import QAccessible, QAccessibleEvent, QResizeEvent
from PySide6.QtWidgets import QFrame, QHBoxLayout, QLabel, QScrollArea, QToolButton, QVBoxLayout, QWidget

from pulsemend.session.changed import Changed
from pulsemend.session.icon_text import LEVEL_ICONS
from pulsemend.session.messages import Level, Message
from pulsemend.window.dialogs.details import DetailsDialog
from pulsemend.window.icons import icon, pixmap
from pulsemend.window.parts import words
from pulsemend.window.theme import Theme
from pulsemend.window.workbench import Workbench

MOST_HEIGHT_PX = 220
_ICON_PX = 18


class Banner(QFrame):
    """Messages of the session, newest first; hidden while there are none.

    Parameters
    ----------
    bench : Workbench
        Its session says them.
    """

    def __init__(self, bench: Workbench, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._session = bench.session
        self._theme = bench.theme
        self._shown: tuple[Message, ...] = ()
        self._all = False
        self.setObjectName("banner")
        self.setProperty("card", "true")
        self.setAccessibleName("Messages")
        self.rows: list[MessageRow] = []
        self.older = _small_button("")
        self.older.clicked.connect(self._turn)
        self.put_all_away = _small_button("Put all away")
        self.put_all_away.setToolTip("Forget all these messages")
        self.put_all_away.clicked.connect(self._forget_all)
        self._build()
        end = self._session.subscribe(Changed.MESSAGE, self._follow)
        self.destroyed.connect(lambda: end())
        self._follow()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours.

        Parameters
        ----------
        theme : Theme
            The window's.
        """
        self._theme = theme
        self._show_rows()

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Wrap anew."""
        super().resizeEvent(event)
        self._fit()

    def _build(self) -> None:
        inside = QWidget()
        self._column = QVBoxLayout(inside)
        self._column.setContentsMargins(0, 0, 0, 0)
        self._column.setSpacing(4)
        self._area = QScrollArea()
        self._area.setObjectName("messages")
        self._area.setAccessibleName("List of messages")
        self._area.setFocusPolicy(Qt.FocusPolicy.NoFocus)
        self._area.setWidgetResizable(True)
        self._area.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        self._area.setWidget(inside)
        below = QHBoxLayout()
        below.addStretch(1)
        below.addWidget(self.older)
        below.addWidget(self.put_all_away)
        column = QVBoxLayout(self)
        column.setContentsMargins(10, 6, 8, 6)
        column.setSpacing(4)
        column.addWidget(self._area)
        column.addLayout(below)

    def _follow(self) -> None:
        before, self._shown = self._shown, self._session.messages
        if len(self._shown) < 2:
            self._all = False
        self._show_rows()
        if self._shown and (not before or self._shown[-1] is not before[-1]):
            QAccessible.updateAccessibility(QAccessibleEvent(self, QAccessible.Event.Alert))

    def _show_rows(self) -> None:
        for row in self.rows:
            self._column.removeWidget(row)
            row.hide()
            row.deleteLater()
        newest_first = self._shown[::-1]
        listed = newest_first if self._all else newest_first[:1]
        self.rows = [MessageRow(message, self._theme, self._session.put_away) for message in listed]
        for row in self.rows:
            self._column.addWidget(row)
            row.show()
        n_older = len(self._shown) - 1
        self.older.setText("Show the newest only" if self._all else f"Show {max(n_older, 0)} older")
        self.older.setVisible(n_older > 0)
        self.put_all_away.setVisible(n_older > 0)
        self.setAccessibleDescription(self.rows[0].accessibleName() if self.rows else "")
        self.setVisible(bool(self._shown))
        self._fit()

    def _fit(self) -> None:
        width = self._area.viewport().width()
        height = sum(row.height_for(width) + self._column.spacing() for row in self.rows)
        self._area.setFixedHeight(min(max(height, 1), MOST_HEIGHT_PX))

    def _turn(self) -> None:
        self._all = not self._all
        self._show_rows()

    def _forget_all(self) -> None:
        for message in self._shown:
            self._session.put_away(message)


class MessageRow(QWidget):
    """One message: shape and word of its level, its text, details, and a way to put it away.

    Parameters
    ----------
    message : Message
        What is said.
    theme : Theme
        The window's.
    put_away : callable
        Given the message when the user has seen it.
    """

    def __init__(self, message: Message, theme: Theme, put_away: Callable[[Message], None]) -> None:
        super().__init__()
        self.message = message
        self.setAccessibleName(f"{message.level}: {message.text}")
        is_quiet = message.level is Level.NOTE
        sign = QLabel()
        sign.setPixmap(
            pixmap(
                LEVEL_ICONS[message.level],
                theme.accent if is_quiet else theme.attention,
                _ICON_PX,
                self.devicePixelRatioF(),
            )
        )
        sign.setAccessibleName(str(message.level))
        level = words(message.level.value.capitalize(), "title" if is_quiet else "attention")
        self.text = words(message.text)
        self.text.setWordWrap(True)
        self.text.setAlignment(Qt.AlignmentFlag.AlignTop)
        self.text.setToolTip(message.text)
        row = self._row = QHBoxLayout(self)
        row.setContentsMargins(0, 0, 0, 0)
        row.addWidget(sign, 0, Qt.AlignmentFlag.AlignTop)
        row.addWidget(level, 0, Qt.AlignmentFlag.AlignTop)
        row.addWidget(self.text, 1)
        self.details: QToolButton | None = None
        if message.details:
            self.details = _small_button("Details")
            self.details.setToolTip("See everything that is known about it")
            self.details.setAccessibleName(f"Details of: {message.text}")
            self.details.clicked.connect(self._show_details)
            row.addWidget(self.details, 0, Qt.AlignmentFlag.AlignTop)
        self.away = _small_button("")
        self.away.setIcon(icon("put_away", theme))
        self.away.setToolTip("Put this message away")
        self.away.setAccessibleName(f"Put away: {message.text}")
        self.away.clicked.connect(partial(_call, put_away, message))
        row.addWidget(self.away, 0, Qt.AlignmentFlag.AlignTop)

    def height_for(self, width: int) -> int:
        """Height of the message, wrapped into a width."""
        self.ensurePolished()
        wrapped = self._row.heightForWidth(width)
        return max(wrapped, self._row.minimumSize().height()) if wrapped > 0 else self.sizeHint().height()

    def _show_details(self) -> None:
        DetailsDialog(self.message, self.window()).open()


def _call(put_away: Callable[[Message], None], message: Message, _checked: bool = False) -> None:
    put_away(message)


def _small_button(text: str) -> QToolButton:
    made = QToolButton()
    made.setText(text)
    made.setProperty("kind", "plain")
    made.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
    return made
