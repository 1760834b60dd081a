"""About: version, licences of the program and of the libraries it stands on, and the safety notice."""

from __future__ import annotations

from pathlib import Path

from PySide6.QtCore import Qt
from PySide6.QtWidgets import (
    QButtonGroup,
    QHBoxLayout,
    QHeaderView,
    QLabel,
    QPlainTextEdit,
    QPushButton,
    QStackedWidget,
    QTreeWidget,
    QTreeWidgetItem,
    QVBoxLayout,
    QWidget,
)

import pulsemend
from pulsemend.notice import SAFETY_NOTICE
from pulsemend.session.libraries import Library, libraries, licence_text
from pulsemend.window.dialogs.details import plain_text
from pulsemend.window.dialogs.sheet import Sheet
from pulsemend.window.icons import pixmap
from pulsemend.window.parts import words
from pulsemend.window.stepper import step_through
from pulsemend.window.theme import Theme

_MARK_PX = 44
_WHAT = "Turns EEG recordings with magnetic pulses into checked, labelled epoch sets."


class AboutDialog(Sheet):
    """Who and what this is.

    Parameters
    ----------
    theme : Theme
        The window's.
    """

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__("About Pulsemend", parent)
        self.resize(680, 520)
        head = QHBoxLayout()
        mark = QLabel()
        mark.setPixmap(pixmap("mark", theme.accent, _MARK_PX, self.devicePixelRatioF()))
        mark.setAccessibleName("Mark of Pulsemend")
        head.addWidget(mark)
        beside = QVBoxLayout()
        beside.addWidget(words(f"Pulsemend {pulsemend.__version__}", "title"))
        beside.addWidget(words(_WHAT, "quiet"))
        head.addLayout(beside, 1)
        self.column.addLayout(head)
        self.libraries = _library_list()
        self.licence = plain_text("Choose a library to read its licence.", "Licence of the library")
        self.parts: dict[str, QPushButton] = {}
        self.pages = QStackedWidget()
        self._group = QButtonGroup(self)
        self._row = QHBoxLayout()
        for name, page in (
            ("Safety notice", _notice_page()),
            ("Licence", _own_licence()),
            ("Libraries", self._library_page()),
        ):
            self._add_part(name, page)
        self._row.addStretch(1)
        self.column.addLayout(self._row)
        self.column.addWidget(self.pages, 1)
        self.parts["Safety notice"].setChecked(True)
        close = self.add_button("Close", main=True)
        close.clicked.connect(self.accept)
        self.end_column()
        self.libraries.currentItemChanged.connect(self._show_licence)
        step_through(libraries(), self._take, self)

    def _add_part(self, name: str, page: QWidget) -> None:
        part = QPushButton(name)
        part.setCheckable(True)
        part.setAutoDefault(False)
        part.clicked.connect(lambda _=False: self.pages.setCurrentWidget(page))
        self.parts[name] = part
        self._group.addButton(part)
        self._row.addWidget(part)
        self.pages.addWidget(page)

    def _library_page(self) -> QWidget:
        page = QWidget()
        column = QVBoxLayout(page)
        column.addWidget(words("Versions and licences as the installed packages state them.", "quiet"))
        column.addWidget(self.libraries, 3)
        column.addWidget(self.licence, 2)
        return page

    def _take(self, found: tuple[Library, ...]) -> None:
        for one in found:
            item = QTreeWidgetItem([one.name, one.version, one.licence])
            item.setToolTip(2, one.licence)
            self.libraries.addTopLevelItem(item)

    def _show_licence(self, item: QTreeWidgetItem | None, _before: QTreeWidgetItem | None) -> None:
        if item is not None:
            self.licence.setPlainText(licence_text(item.text(0)))


def _library_list() -> QTreeWidget:
    listed = QTreeWidget()
    listed.setAccessibleName("Libraries")
    listed.setHeaderLabels(["library", "version", "licence"])
    listed.setRootIsDecorated(False)
    listed.setUniformRowHeights(True)
    listed.setTextElideMode(Qt.TextElideMode.ElideRight)
    listed.header().setSectionResizeMode(0, QHeaderView.ResizeMode.ResizeToContents)
    return listed


def _notice_page() -> QWidget:
    page = QWidget()
    column = QVBoxLayout(page)
    for paragraph in SAFETY_NOTICE:
        label = words(paragraph)
        label.setWordWrap(True)
        column.addWidget(label)
    column.addStretch(1)
    return page


def _own_licence() -> QPlainTextEdit:
    text = (Path(pulsemend.__file__).parent / "LICENSE").read_text("utf-8")
    return plain_text(text, "Licence of Pulsemend")
