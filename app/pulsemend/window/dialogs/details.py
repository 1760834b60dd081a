"""Everything that is known about a message, and the details that go with a fault report."""

from __future__ import annotations

from PySide6.QtGui import QFontDatabase, QGuiApplication
from PySide6.QtWidgets import QPlainTextEdit, QWidget

from pulsemend.session.details import fault_details
from pulsemend.session.libraries import Library, libraries
from pulsemend.session.messages import Level, Message
from pulsemend.window.dialogs.sheet import Sheet
from pulsemend.window.stepper import step_through
from pulsemend.window.workbench import Workbench


class DetailsDialog(Sheet):
    """A message with its details, which can be copied.

    Parameters
    ----------
    message : Message
        What was said.
    """

    def __init__(self, message: Message, parent: QWidget | None = None) -> None:
        super().__init__(message.level.value.capitalize(), parent)
        self.resize(620, 380)
        self.add_text(message.text, "title")
        if message.level is not Level.NOTE:
            self.add_text(
                "The details below may hold names of files; look through them before you pass them on.",
                "quiet",
            )
        self.text = plain_text(message.details or "Nothing more is known.", "Details")
        self.column.addWidget(self.text, 1)
        self.copy_button = self.add_button("Copy", tooltip="Copy message and details")
        self.copy_button.clicked.connect(lambda: copy_text(f"{message.text}\n\n{message.details}"))
        self.close_button = self.add_button("Close", main=True)
        self.close_button.clicked.connect(self.accept)
        self.end_column()


def plain_text(text: str, accessible_name: str) -> QPlainTextEdit:
    """Make a field of text in letters of one width, to be read and copied."""
    field = QPlainTextEdit(text)
    field.setReadOnly(True)
    field.setTabChangesFocus(True)
    field.setFont(QFontDatabase.systemFont(QFontDatabase.SystemFont.FixedFont))
    field.setAccessibleName(accessible_name)
    return field


def copy_text(text: str) -> None:
    """Put a text on the clipboard."""
    QGuiApplication.clipboard().setText(text)


def copy_details(bench: Workbench, window: QWidget) -> None:
    """Put the details for a fault report on the clipboard and say so, a moment later.

    Parameters
    ----------
    bench : Workbench
        Session and settings.
    window : QWidget
        The main window.
    """

    def take(found: tuple[Library, ...]) -> None:
        copy_text(fault_details(bench.session, bench.settings, found, screen_words(window)))
        bench.session.say(
            Message(
                Level.NOTE,
                "Details for a fault report are on the clipboard; they hold neither names nor paths.",
                QGuiApplication.clipboard().text(),
            )
        )

    step_through(libraries(), take, window)


def screen_words(window: QWidget) -> str:
    """Say how large window and screen are and how dense its pixels."""
    size = window.screen().size()
    return (
        f"{size.width()}x{size.height()} at {window.devicePixelRatioF():g}, "
        f"window {window.width()}x{window.height()}, {QGuiApplication.platformName()}"
    )
