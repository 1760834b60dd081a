"""All keys at a glance, from the table of actions."""

from __future__ import annotations

from PySide6.QtCore import Qt
from PySide6.QtWidgets import QHeaderView, QLineEdit, QTreeWidget, QTreeWidgetItem, QWidget

from pulsemend.session.action_table import ACTIONS
from pulsemend.session.actions import key_help, key_help_text
from pulsemend.window.dialogs.details import copy_text
from pulsemend.window.dialogs.sheet import Sheet


class KeysDialog(Sheet):
    """The list of keys; it can be narrowed by typing and copied."""

    def __init__(self, parent: QWidget | None = None) -> None:
        super().__init__("Keys", parent)
        self.resize(520, 600)
        self.filter = QLineEdit()
        self.filter.setPlaceholderText("Key or action")
        self.filter.setAccessibleName("Show only keys with")
        self.filter.setClearButtonEnabled(True)
        self.filter.textChanged.connect(self._narrow)
        self.column.addWidget(self.filter)
        self.list = QTreeWidget()
        self.list.setAccessibleName("Keys")
        self.list.setHeaderLabels(["what it does", "keys"])
        self.list.header().setStretchLastSection(False)
        self.list.header().setSectionResizeMode(0, QHeaderView.ResizeMode.Stretch)
        self.list.header().setSectionResizeMode(1, QHeaderView.ResizeMode.ResizeToContents)
        for name, rows in key_help(ACTIONS):
            group = QTreeWidgetItem([name])
            group.addChildren([QTreeWidgetItem([what, keys]) for keys, what in rows])
            self.list.addTopLevelItem(group)
        self.list.expandAll()
        self.column.addWidget(self.list, 1)
        copy = self.add_button("Copy", tooltip="Copy the whole list as text")
        copy.clicked.connect(lambda: copy_text(key_help_text(ACTIONS)))
        close = self.add_button("Close", main=True)
        close.clicked.connect(self.accept)
        self.end_column()
        self.list.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
        self.filter.setFocus()

    def _narrow(self, typed: str) -> None:
        wanted = typed.casefold().strip()
        for place in range(self.list.topLevelItemCount()):
            group = self.list.topLevelItem(place)
            if group is None:
                continue
            shown = 0
            for row in filter(None, (group.child(number) for number in range(group.childCount()))):
                fits = wanted in f"{row.text(0)} {row.text(1)}".casefold()
                row.setHidden(not fits)
                shown += fits
            group.setHidden(not shown)
