"""The action finder: type a few letters, choose with the arrows, press Return. It shows the keys as well."""

from __future__ import annotations

from PySide6.QtCore import QEvent, QPoint, QSize, Qt
from PySide6.QtGui import QColor, QKeyEvent
from PySide6.QtWidgets import (
    QApplication,
    QFrame,
    QHeaderView,
    QLineEdit,
    QSizePolicy,
    QTreeWidget,
    QTreeWidgetItem,
    QVBoxLayout,
    QWidget,
)

from pulsemend.session.action_table import ACTIONS
from pulsemend.session.actions import find_actions
from pulsemend.window.action_bar import ActionBar
from pulsemend.window.parts import words

ROWS_SHOWN = 9
WIDTH_PX = 460
_HINT = "Return does it, arrows choose, Esc leaves"
_NOTHING = "No action has these letters"
_FINDER = "find_action"


class ActionFinder(QLineEdit):
    """A field that finds actions; what it finds drops down below it.

    Parameters
    ----------
    actions : ActionBar
        What can be done.
    """

    def __init__(self, actions: ActionBar, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._actions = actions
        self._before: QWidget | None = None
        self.setObjectName("finder")
        self.setPlaceholderText("Find an action  Ctrl+K")
        self.setAccessibleName("Find an action")
        self.setToolTip("Type a few letters of what you want to do (Ctrl+K)")
        self.setMinimumWidth(90)
        self.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Fixed)
        self.popup = _Popup(self)
        self.popup.found.itemClicked.connect(lambda _item, _column: self._run())
        self.textEdited.connect(lambda _text: self._show_found())

    def sizeHint(self) -> QSize:
        """Room for the hint."""
        hint = super().sizeHint()
        return QSize(self.fontMetrics().horizontalAdvance(self.placeholderText()) + 32, hint.height())

    def open(self) -> None:
        """Take the focus and show everything that can be done."""
        if not self.hasFocus():
            self._before = QApplication.focusWidget()
        self.setFocus(Qt.FocusReason.ShortcutFocusReason)
        self.selectAll()
        self._show_found()

    def leave(self) -> None:
        """Forget what was typed and give the focus back."""
        self.clear()
        self.popup.hide()
        before, self._before = self._before, None
        if self.hasFocus() and before is not None and before.isVisible():
            before.setFocus(Qt.FocusReason.OtherFocusReason)

    def keyPressEvent(self, event: QKeyEvent) -> None:
        """Arrows choose, Return does, Esc leaves; everything else is typed."""
        key = event.key()
        if key in (Qt.Key.Key_Down, Qt.Key.Key_Up, Qt.Key.Key_PageDown, Qt.Key.Key_PageUp):
            if self.popup.isHidden():
                self._show_found()
            else:
                self.popup.move_by(
                    {"Down": 1, "Up": -1, "PageDown": ROWS_SHOWN, "PageUp": -ROWS_SHOWN}[
                        Qt.Key(key).name.removeprefix("Key_")
                    ]
                )
        elif key in (Qt.Key.Key_Return, Qt.Key.Key_Enter):
            self._run()
        elif key == Qt.Key.Key_Escape:
            self.leave()
        else:
            super().keyPressEvent(event)

    def event(self, event: QEvent) -> bool:
        """Keep keys of the field from actions that have the same keys."""
        if isinstance(event, QKeyEvent) and event.type() == QEvent.Type.ShortcutOverride:
            plain = event.modifiers() in (Qt.KeyboardModifier.NoModifier, Qt.KeyboardModifier.KeypadModifier)
            if plain and event.key() in (Qt.Key.Key_Escape, Qt.Key.Key_Return, Qt.Key.Key_Enter):
                event.accept()
                return True
        if event.type() == QEvent.Type.FocusOut and not self.popup.isHidden():
            self.popup.hide()
        return super().event(event)

    def _show_found(self) -> None:
        top = self.window()
        if self.popup.parentWidget() is not top:
            self.popup.setParent(top)
        self.popup.show_actions(self._actions, self.text())
        width = min(WIDTH_PX, top.width() - 16)
        corner = self.mapTo(top, QPoint(0, self.height() + 4))
        x = max(8, min(corner.x(), top.width() - width - 8))
        height = min(self.popup.sizeHint().height(), top.height() - corner.y() - 8)
        self.popup.setGeometry(x, corner.y(), width, height)
        self.popup.show()
        self.popup.raise_()

    def _run(self) -> None:
        chosen = self.popup.chosen
        if chosen is None:
            return
        action = self._actions.actions[chosen]
        if not action.isEnabled():
            return
        self.leave()
        action.trigger()


class _Popup(QFrame):
    """The list below the field."""

    def __init__(self, parent: QWidget) -> None:
        super().__init__(parent)
        self.hide()
        self.setProperty("card", "true")
        self.setAccessibleName("Actions found")
        self.found = QTreeWidget()
        self.found.setAccessibleName("Actions found")
        self.found.setColumnCount(2)
        self.found.setHeaderHidden(True)
        self.found.setRootIsDecorated(False)
        self.found.setUniformRowHeights(True)
        self.found.setFocusPolicy(Qt.FocusPolicy.NoFocus)
        self.found.setHorizontalScrollBarPolicy(Qt.ScrollBarPolicy.ScrollBarAlwaysOff)
        header = self.found.header()
        header.setStretchLastSection(False)
        header.setSectionResizeMode(0, QHeaderView.ResizeMode.Stretch)
        header.setSectionResizeMode(1, QHeaderView.ResizeMode.ResizeToContents)
        self.hint = words(_HINT, "quiet")
        column = QVBoxLayout(self)
        column.setContentsMargins(6, 6, 6, 6)
        column.addWidget(self.found)
        column.addWidget(self.hint)

    @property
    def chosen(self) -> str | None:
        """Id of the action that Return would do."""
        item = self.found.currentItem()
        return None if item is None else str(item.data(0, Qt.ItemDataRole.UserRole))

    def show_actions(self, actions: ActionBar, typed: str) -> None:
        """List what fits, those that can be done now first."""
        found = [action for action in find_actions(ACTIONS, typed) if action.id != _FINDER]
        found.sort(key=lambda action: not actions.actions[action.id].isEnabled())
        self.found.clear()
        for action in found:
            can_be_done = actions.actions[action.id].isEnabled()
            title = action.title if can_be_done else f"{action.title} (not now)"
            item = QTreeWidgetItem([title, action.keys[0] if action.keys else str(action.menu)])
            item.setData(0, Qt.ItemDataRole.UserRole, action.id)
            item.setIcon(0, actions.actions[action.id].icon())
            item.setToolTip(0, action.tooltip)
            if not can_be_done:
                for part in (0, 1):
                    item.setForeground(part, QColor(actions.theme.quiet))
            item.setTextAlignment(1, Qt.AlignmentFlag.AlignRight | Qt.AlignmentFlag.AlignVCenter)
            self.found.addTopLevelItem(item)
        self._choose_row(0)
        self.hint.setText(_HINT if found else _NOTHING)

    def move_by(self, rows: int) -> None:
        """Choose another action, further down or up."""
        count = self.found.topLevelItemCount()
        if count:
            self._choose_row(min(max(self.found.currentIndex().row() + rows, 0), count - 1))

    def _choose_row(self, row: int) -> None:
        item = self.found.topLevelItem(row)
        if item is not None:
            self.found.setCurrentItem(item)

    def sizeHint(self) -> QSize:
        """Room for some rows."""
        rows = max(1, min(ROWS_SHOWN, self.found.topLevelItemCount()))
        row_px = max(self.found.sizeHintForRow(0), self.fontMetrics().height() + 6)
        return QSize(WIDTH_PX, rows * row_px + self.hint.sizeHint().height() + 30)
