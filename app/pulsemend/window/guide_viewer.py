"""The user's guide in a window of its own: pages on the left, text on the right, search within the page."""

from __future__ import annotations

from pathlib import Path

from PySide6.QtCore import Qt, QUrl
from PySide6.QtGui import QColor, QKeySequence, QPalette, QShortcut, QTextDocument
from PySide6.QtWidgets import (
    QDialog,
    QHBoxLayout,
    QLineEdit,
    QListWidget,
    QListWidgetItem,
    QSplitter,
    QTextBrowser,
    QVBoxLayout,
    QWidget,
)

import pulsemend
from pulsemend.window.parts import button, words
from pulsemend.window.theme import Theme

PAGES = {
    "start.md": "The job, once through",
    "plan.md": "The plan, key by key",
    "trials.md": "From markers to trials",
    "marks.md": "Marks",
    "sets.md": "What a set contains",
    "methods.md": "Methods",
    "accuracy.md": "How exact the repair is",
    "changes.md": "Changes",
}
"""Files of the pages with their names, in reading order."""


def guide_folder() -> Path:
    """Folder of the guide, within the package."""
    return Path(pulsemend.__file__).resolve().parent / "guide"


class GuideViewer(QDialog):
    """The guide.

    Parameters
    ----------
    theme : Theme
        The window's.
    folder : Path or None
        Where the pages are; None: the guide that comes with the program.
    """

    def __init__(self, theme: Theme, folder: Path | None = None, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._folder = folder or guide_folder()
        self.setWindowTitle("Guide")
        self.setAccessibleName("Guide")
        self.setAttribute(Qt.WidgetAttribute.WA_DeleteOnClose)
        self.resize(900, 680)
        self.pages = QListWidget()
        self.pages.setAccessibleName("Pages of the guide")
        for name, title in PAGES.items():
            item = QListWidgetItem(title)
            item.setData(Qt.ItemDataRole.UserRole, name)
            item.setToolTip(item.text())
            self.pages.addItem(item)
        self.text = QTextBrowser()
        self.text.setAccessibleName("Text of the guide")
        self.text.setOpenExternalLinks(True)
        self.typed = QLineEdit()
        self.typed.setAccessibleName("Search within this page")
        self.typed.setPlaceholderText("Search within this page  Ctrl+F")
        self.typed.setClearButtonEnabled(True)
        self.found = words("", "quiet")
        self.next = button("Next", lambda: self.search(), tooltip="Go to the next place (Return)")
        self.previous = button(
            "Previous", lambda: self.search(back=True), tooltip="Go to the place before (Shift+F3)"
        )
        for one in (self.next, self.previous):
            one.setAutoDefault(False)
        self._lay_out()
        self._connect()
        self.set_theme(theme)
        self.pages.setCurrentRow(0)

    def set_theme(self, theme: Theme) -> None:
        """Take other colours.

        Parameters
        ----------
        theme : Theme
            The window's.
        """
        palette = self.text.palette()
        for role, colour in (
            (QPalette.ColorRole.Link, theme.accent),
            (QPalette.ColorRole.LinkVisited, theme.accent),
            (QPalette.ColorRole.Text, theme.text),
        ):
            palette.setColor(role, QColor(colour))
        self.text.setPalette(palette)
        # Colours of links are read when the page is.
        self.text.reload()

    def open_page(self, name: str) -> None:
        """Show a page.

        Parameters
        ----------
        name : str
            One of `PAGES`.
        """
        self.pages.setCurrentRow(tuple(PAGES).index(name))

    def search(self, *, back: bool = False) -> bool:
        """Go to the next place of what is typed, and begin again after the last.

        Parameters
        ----------
        back : bool
            To the place before instead.

        Returns
        -------
        bool
            Whether there is any.
        """
        typed = self.typed.text()
        if not typed:
            self.found.setText("")
            return False
        flags = QTextDocument.FindFlag.FindBackward if back else QTextDocument.FindFlag(0)
        if self.text.find(typed, flags):
            self.found.setText("")
            return True
        before = self.text.textCursor()
        from_edge = self.text.textCursor()
        from_edge.movePosition(from_edge.MoveOperation.End if back else from_edge.MoveOperation.Start)
        self.text.setTextCursor(from_edge)
        is_found = self.text.find(typed, flags)
        if not is_found:
            self.text.setTextCursor(before)
        end = "end" if back else "beginning"
        self.found.setText(f"from the {end} again" if is_found else "not on this page")
        return is_found

    def _lay_out(self) -> None:
        search = QHBoxLayout()
        search.addWidget(self.typed, 1)
        search.addWidget(self.found)
        search.addWidget(self.previous)
        search.addWidget(self.next)
        right = QWidget()
        column = QVBoxLayout(right)
        column.setContentsMargins(0, 0, 0, 0)
        column.addLayout(search)
        column.addWidget(self.text, 1)
        split = QSplitter()
        split.addWidget(self.pages)
        split.addWidget(right)
        split.setStretchFactor(1, 1)
        split.setSizes([210, 690])
        around = QVBoxLayout(self)
        around.addWidget(split)

    def _connect(self) -> None:
        self.pages.currentItemChanged.connect(self._show_page)
        self.text.sourceChanged.connect(self._follow_link)
        self.typed.returnPressed.connect(self.search)
        for keys, does in (
            ("Ctrl+F", self._take_focus),
            ("F3", self.search),
            ("Shift+F3", lambda: self.search(back=True)),
            ("Alt+Left", self.text.backward),
        ):
            shortcut = QShortcut(QKeySequence(keys), self)
            shortcut.activated.connect(does)

    def _take_focus(self) -> None:
        self.typed.setFocus()
        self.typed.selectAll()

    def _show_page(self, item: QListWidgetItem | None, _before: QListWidgetItem | None) -> None:
        if item is not None:
            name = str(item.data(Qt.ItemDataRole.UserRole))
            if self.text.source().fileName() != name:
                self.text.setSource(QUrl.fromLocalFile(str(self._folder / name)))

    def _follow_link(self, source: QUrl) -> None:
        if source.fileName() in PAGES:
            self.open_page(source.fileName())
        self.found.setText("")
