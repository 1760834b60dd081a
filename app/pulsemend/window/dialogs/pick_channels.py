"""Pick channels by name, type or group."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

from PySide6.QtCore import QSignalBlocker, Qt
from PySide6.QtWidgets import QComboBox, QHBoxLayout, QLineEdit, QListWidget, QListWidgetItem, QWidget

from pulsemend.session.channel_groups import Group, fits, in_group
from pulsemend.session.session import Session
from pulsemend.window.dialogs.sheet import Sheet
from pulsemend.window.parts import button, words

_ALL_TYPES = "all types"


class PickChannels(Sheet):
    """A list of all channels with a check each; what is checked is picked.

    Parameters
    ----------
    session : Session
        With an open recording.
    """

    def __init__(self, session: Session, parent: QWidget | None = None) -> None:
        super().__init__("Pick channels", parent)
        self._session = session
        self._channels = session.recording.facts.channels if session.recording else ()
        self._bad = {*session.marks.bad, *(session.plan.channels.bad if session.plan else ())}
        self.resize(420, 560)
        self.typed = QLineEdit()
        self.typed.setAccessibleName("Names with")
        self.typed.setPlaceholderText("Parts of names, e.g. C3 Fp")
        self.typed.setClearButtonEnabled(True)
        self.type = QComboBox()
        self.type.setAccessibleName("Type")
        self.type.addItems([_ALL_TYPES, *sorted({str(self._type(one.name)) for one in self._channels})])
        self.group = QComboBox()
        self.group.setAccessibleName("Group")
        self.group.addItems([str(group) for group in Group])
        row = QHBoxLayout()
        row.addWidget(self.typed, 1)
        row.addWidget(self.type)
        row.addWidget(self.group)
        self.column.addLayout(row)
        self.list = self._fill(QListWidget())
        self.column.addWidget(self.list, 1)
        self.count = words("", "quiet")
        self.pick_shown = button(
            "Check all listed", lambda: self._check(True), tooltip="Check what is listed"
        )
        self.pick_none = button("Check none", lambda: self._check(False), tooltip="Uncheck what is listed")
        for one in (self.pick_shown, self.pick_none):
            one.setAutoDefault(False)
        below = QHBoxLayout()
        below.addWidget(self.count, 1)
        below.addWidget(self.pick_shown)
        below.addWidget(self.pick_none)
        self.column.addLayout(below)
        leave = self.add_button("Leave as it was")
        leave.clicked.connect(self.reject)
        self.pick = self.add_button("Pick", main=True, tooltip="Pick the channels that are checked")
        self.pick.clicked.connect(self._pick)
        self.end_column()
        self.typed.textChanged.connect(lambda _: self._narrow())
        self.type.currentTextChanged.connect(lambda _: self._narrow())
        self.group.currentTextChanged.connect(lambda _: self._narrow())
        self.list.itemChanged.connect(lambda _: self._count())
        self._narrow()
        self.typed.setFocus()

    @property
    def listed(self) -> tuple[str, ...]:
        """Names that are listed now."""
        return tuple(item.text() for item in self._items() if not item.isHidden())

    @property
    def checked(self) -> frozenset[str]:
        """Names that are checked, listed or not."""
        return frozenset(item.text() for item in self._items() if item.checkState() == Qt.CheckState.Checked)

    def _type(self, name: str) -> str:
        own = next(str(one.type) for one in self._channels if one.name == name)
        return str(self._session.marks.types.get(name, own))

    def _fill(self, listed: QListWidget) -> QListWidget:
        listed.setAccessibleName("Channels")
        listed.setUniformItemSizes(True)
        for channel in self._channels:
            item = QListWidgetItem(channel.name)
            item.setFlags(item.flags() | Qt.ItemFlag.ItemIsUserCheckable)
            is_picked = channel.name in self._session.view.picked
            item.setCheckState(Qt.CheckState.Checked if is_picked else Qt.CheckState.Unchecked)
            bad = ", marked bad" if channel.name in self._bad else ""
            item.setToolTip(f"{channel.name}: {self._type(channel.name)}{bad}")
            listed.addItem(item)
        return listed

    def _items(self) -> Iterable[QListWidgetItem]:
        return (self.list.item(row) for row in range(self.list.count()))

    def _narrow(self) -> None:
        group, kind, typed = Group(self.group.currentText()), self.type.currentText(), self.typed.text()
        for channel, item in zip(self._channels, self._items(), strict=True):
            shown = (
                kind in (_ALL_TYPES, self._type(channel.name))
                and in_group(channel, group, self._bad, self._session.view.picked)
                and fits(channel, typed)
            )
            item.setHidden(not shown)
        self._count()

    def _check(self, checked: bool) -> None:
        with QSignalBlocker(self.list):
            for item in self._items():
                if not item.isHidden():
                    item.setCheckState(Qt.CheckState.Checked if checked else Qt.CheckState.Unchecked)
        self._count()

    def _count(self) -> None:
        self.count.setText(f"{len(self.checked)} of {len(self._channels)} checked, {len(self.listed)} listed")

    def _pick(self) -> None:
        self._session.set_view(replace(self._session.view, picked=self.checked))
        self.accept()
