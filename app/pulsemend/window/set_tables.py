"""Below the stage Export: the files that would be written, and what a check found, item by item."""

from __future__ import annotations

from collections.abc import Sequence

from PySide6.QtCore import QItemSelectionModel, Qt
from PySide6.QtWidgets import (
    QButtonGroup,
    QHBoxLayout,
    QPushButton,
    QSizePolicy,
    QStackedWidget,
    QVBoxLayout,
    QWidget,
)

from pulsemend.mending.check import CheckItem
from pulsemend.mending.outlook import Outlook
from pulsemend.mending.verdict import BROKEN, HOLDS, LOOK_AT, verdict
from pulsemend.window.parts import EmptyState, words
from pulsemend.window.set_runner import Checked
from pulsemend.window.sign_icons import verdict_icon
from pulsemend.window.tables import RowsModel, RowsTable
from pulsemend.window.theme import Theme

_UNITS = ((10**9, "GB"), (10**6, "MB"), (10**3, "kB"))


def size_words(n_bytes: int) -> str:
    """Write a size in a unit that suits it.

    Parameters
    ----------
    n_bytes : int
        Bytes.
    """
    for unit, name in _UNITS:
        if n_bytes >= unit:
            return f"{n_bytes / unit:.3g} {name}" if n_bytes < 999 * unit else f"{n_bytes / unit:.0f} {name}"
    return f"{n_bytes} bytes"


class FilesModel(RowsModel):
    """Files of a set before it is written."""

    def __init__(self) -> None:
        super().__init__(("file", "size at most"))
        self._files: tuple[tuple[str, int | None], ...] = ()

    def show_files(self, files: Sequence[tuple[str, int | None]]) -> None:
        """Show other files."""
        self.beginResetModel()
        self._files = tuple(files)
        self.endResetModel()

    def n_rows(self) -> int:
        """Count the files."""
        return len(self._files)

    def text(self, row: int, column: int) -> str:
        """Give what stands in a cell."""
        name, size = self._files[row]
        if column == 0:
            return name
        return "small" if size is None else size_words(size)


class CheckModel(RowsModel):
    """Items of a check.

    Parameters
    ----------
    theme : Theme
        Colours of the shapes.
    """

    TITLES = ("verdict", "kind", "what is checked", "found", "asked for")

    def __init__(self, theme: Theme) -> None:
        super().__init__(self.TITLES)
        self._items: tuple[CheckItem, ...] = ()
        self.set_theme(theme)

    @property
    def items(self) -> tuple[CheckItem, ...]:
        """Items as the table has them: integrity first."""
        return self._items

    def show_items(self, items: Sequence[CheckItem]) -> None:
        """Show other items."""
        self.beginResetModel()
        self._items = tuple(sorted(items, key=lambda item: item.kind != "integrity"))
        self.endResetModel()

    def set_theme(self, theme: Theme) -> None:
        """Draw the shapes in other colours."""
        self._icons = {word: verdict_icon(word, theme) for word in (HOLDS, LOOK_AT, BROKEN)}

    def n_rows(self) -> int:
        """Count the items."""
        return len(self._items)

    def text(self, row: int, column: int) -> str:
        """Give what stands in a cell."""
        item = self._items[row]
        return (verdict(item), item.kind, item.title, item.value, item.limit)[column]

    def more(self, row: int, column: int, role: int) -> object:
        """Give the shape of a verdict."""
        if column == 0 and role == Qt.ItemDataRole.DecorationRole:
            return self._icons[verdict(self._items[row])]
        return None


class SetTables(QWidget):
    """Files or check, whichever is asked for.

    Parameters
    ----------
    theme : Theme
        Colours of the shapes.
    """

    def __init__(self, theme: Theme, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.files = FilesModel()
        self.checks = CheckModel(theme)
        self.files_table = RowsTable(
            "Files that will be written",
            self.files,
            ("sub-001_ses-01_task-lantern_desc-mended_provenance.json",),
        )
        self.check_table = RowsTable(
            "What the check found",
            self.checks,
            (
                "  LOOK AT",
                "readiness",
                "labels and epochs table agree",
                "baseline 48, delay 48",
                "fewest half",
            ),
        )
        self.no_files = EmptyState("")
        self.no_files.text.setWordWrap(True)
        self.no_check = EmptyState(
            'Nothing was checked yet. "Write the set" checks what it wrote; "Check a set..." reads '
            "another one back."
        )
        self.no_check.text.setWordWrap(True)
        self.item_words = words("", "quiet")
        self.item_words.setAccessibleName("The chosen item, whole")
        self.to_files = self._switch("What will be written")
        self.to_check = self._switch("Check")
        self.about = words("", "quiet")
        self.about.setWordWrap(False)
        # A long name must not make the window wide.
        self.about.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Preferred)
        self._lay_out()
        self.check_table.selectionModel().currentRowChanged.connect(self._show_item)

    def show_files(self, outlook: Outlook | None, why_not: str) -> None:
        """Show what would be written, or why nothing is known of it."""
        self.files.show_files(() if outlook is None else outlook.files)
        self.no_files.text.setText(why_not)
        self._files_page.setCurrentIndex(0 if outlook is None else 1)

    def show_checked(self, checked: Checked | None) -> None:
        """Show what a check found, or that there is none."""
        self.checks.show_items(() if checked is None else checked.items)
        self._check_page.setCurrentIndex(0 if checked is None else 1)
        self.item_words.setText("")
        self.about.setText("" if checked is None else f"{checked.folder.name}: {checked.summary}")
        self.about.setToolTip("" if checked is None else str(checked.folder))
        if checked is None:
            return
        # The first thing to look at is chosen, so that its words stand below at once.
        first = next((row for row, item in enumerate(self.checks.items) if not item.passed), 0)
        flags = QItemSelectionModel.SelectionFlag
        self.check_table.selectionModel().setCurrentIndex(
            self.checks.index(first, 0), flags.ClearAndSelect | flags.Rows
        )

    def open_files(self) -> None:
        """Show the files."""
        self.to_files.setChecked(True)
        self._pages.setCurrentIndex(0)

    def open_check(self) -> None:
        """Show the check."""
        self.to_check.setChecked(True)
        self._pages.setCurrentIndex(1)

    def set_theme(self, theme: Theme) -> None:
        """Take other colours."""
        self.checks.set_theme(theme)
        self.check_table.viewport().update()

    def _switch(self, text: str) -> QPushButton:
        made = QPushButton(text)
        made.setCheckable(True)
        return made

    def _lay_out(self) -> None:
        group = QButtonGroup(self)
        above = QHBoxLayout()
        for one in (self.to_files, self.to_check):
            group.addButton(one)
            above.addWidget(one)
        above.addWidget(self.about, 1)
        self.to_files.setChecked(True)
        self.to_files.clicked.connect(self.open_files)
        self.to_check.clicked.connect(self.open_check)
        self._files_page = _either(self.no_files, self.files_table)
        below = QWidget()
        column = QVBoxLayout(below)
        column.setContentsMargins(0, 0, 0, 0)
        column.addWidget(self.check_table, 1)
        column.addWidget(self.item_words)
        self._check_page = _either(self.no_check, below)
        self._pages = QStackedWidget()
        self._pages.addWidget(self._files_page)
        self._pages.addWidget(self._check_page)
        whole = QVBoxLayout(self)
        whole.setContentsMargins(8, 6, 8, 6)
        whole.addLayout(above)
        whole.addWidget(self._pages, 1)

    def _show_item(self) -> None:
        row = self.check_table.currentIndex().row()
        if row < 0:
            return
        item = self.checks.items[row]
        where = f"\n{item.detail}" if item.detail else ""
        self.item_words.setText(f"{verdict(item)}  {item.title}: {item.value}  (limit: {item.limit}){where}")


def _either(empty: QWidget, full: QWidget) -> QStackedWidget:
    pages = QStackedWidget()
    pages.addWidget(empty)
    pages.addWidget(full)
    return pages
