"""The actions of the window as Qt has them: one QAction per row of the table, with keys, state and icon."""

from __future__ import annotations

from collections.abc import Iterable
from functools import partial
from pathlib import Path

from PySide6.QtCore import QObject, Qt, QTimer, Signal
from PySide6.QtGui import QAction, QKeySequence
from PySide6.QtWidgets import QMenu, QMenuBar, QWidget

from pulsemend.session.action_table import ACTIONS
from pulsemend.session.actions import Action, Menu, Where, menus
from pulsemend.session.changed import Changed
from pulsemend.session.settings import Recent
from pulsemend.window.icons import icon
from pulsemend.window.theme import Theme
from pulsemend.window.workbench import Workbench

RECENT_MENU = "open_recent"
"""The one action that is a menu of its own: one entry per recent recording."""

_LOOKS_HANDLER = "set_theme"


def missing_handlers(handlers: object, table: Iterable[Action] = ACTIONS) -> tuple[str, ...]:
    """Name the functions that an object lacks for the actions of a table.

    Parameters
    ----------
    handlers : object
        The main window, or its class.
    table : iterable of Action
        The actions.
    """
    wanted = dict.fromkeys(action.does for action in table)
    return tuple(name for name in wanted if not callable(getattr(handlers, name, None)))


class ActionBar(QObject):
    """All actions of a window.

    Whatever the table says an action `does` is a function of `handlers`, called with the action's argument if
    it has one. `open_recent` is called with a `Recent`.

    Parameters
    ----------
    bench : Workbench
        Its session decides what can be done; its settings say which colours are chosen and what was open.
    window : QWidget
        Where keys count in general.
    handlers : object
        Does what is asked.

    Attributes
    ----------
    refreshed : Signal()
        The states of actions were brought up to date.
    """

    refreshed = Signal()

    def __init__(self, bench: Workbench, window: QWidget, handlers: object) -> None:
        super().__init__(window)
        missing = missing_handlers(handlers)
        if missing:
            raise AttributeError(f"no function for the actions {', '.join(missing)}")
        self._bench = bench
        self.theme = bench.theme
        self._window = window
        self._handlers = handlers
        self.recent_menu = QMenu("Recent recordings", window)
        self.recent_menu.setToolTipsVisible(True)
        self.recent_menu.aboutToShow.connect(self._fill_recent)
        self.actions: dict[str, QAction] = {action.id: self._make(action) for action in ACTIONS}
        self._soon = QTimer(self)
        self._soon.setSingleShot(True)
        self._soon.setInterval(0)
        self._soon.timeout.connect(self.refresh)
        ends = [bench.session.subscribe(kind, self._soon.start) for kind in Changed]
        self.destroyed.connect(lambda: [end() for end in ends])
        self.set_theme(bench.theme)
        self.refresh()

    def fill(self, bar: QMenuBar) -> None:
        """Build the menus.

        Parameters
        ----------
        bar : QMenuBar
            Empty.
        """
        taken: set[str] = set()
        for menu, sections in menus(ACTIONS):
            made = bar.addMenu(_with_letter(menu, taken))
            made.setToolTipsVisible(True)
            for number, section in enumerate(sections):
                if number:
                    made.addSeparator()
                for action in section:
                    if action.id == RECENT_MENU:
                        made.addMenu(self.recent_menu)
                    else:
                        made.addAction(self.actions[action.id])

    def serve_traces(self, widget: QWidget) -> None:
        """Let the keys of the traces count in a widget and all inside it.

        Parameters
        ----------
        widget : QWidget
            The traces, the ribbon.
        """
        for action in ACTIONS:
            if action.where is Where.TRACES:
                widget.addAction(self.actions[action.id])

    def set_theme(self, theme: Theme) -> None:
        """Draw the icons in the colours of a theme.

        Parameters
        ----------
        theme : Theme
            The window's.
        """
        self.theme = theme
        for action in ACTIONS:
            if action.icon:
                self.actions[action.id].setIcon(icon(action.icon, theme))

    def refresh(self) -> None:
        """Bring states, and the names of the next undo and redo, up to date."""
        session = self._bench.session
        for action in ACTIONS:
            made = self.actions[action.id]
            made.setEnabled(action.enabled(session))
            if action.checked is not None:
                made.setChecked(action.checked(session))
            elif action.does == _LOOKS_HANDLER:
                made.setChecked(action.argument == self._bench.settings.theme)
        self._name_step("undo", session.next_undo)
        self._name_step("redo", session.next_redo)
        self.recent_menu.setEnabled(bool(self._bench.settings.recent))
        self.actions[RECENT_MENU].setEnabled(bool(self._bench.settings.recent))
        self.refreshed.emit()

    def _make(self, action: Action) -> QAction:
        if action.id == RECENT_MENU:
            made = self.recent_menu.menuAction()
            made.setText(action.title)
        else:
            made = QAction(action.title, self._window)
        made.setObjectName(action.id)
        made.setToolTip(action.full_tooltip)
        made.setStatusTip(action.tooltip)
        made.setShortcuts([QKeySequence(key) for key in action.keys])
        made.setCheckable(action.checked is not None or action.does == _LOOKS_HANDLER)
        if action.where is Where.TRACES:
            made.setShortcutContext(Qt.ShortcutContext.WidgetWithChildrenShortcut)
        else:
            made.setShortcutContext(Qt.ShortcutContext.WindowShortcut)
            self._window.addAction(made)
        made.triggered.connect(partial(self._do, action))
        return made

    def _do(self, action: Action, _checked: bool = False) -> None:
        if action.id == RECENT_MENU:
            self.recent_menu.popup(self._window.mapToGlobal(self._window.rect().topLeft()))
            return
        handler = getattr(self._handlers, action.does)
        if action.argument:
            handler(action.argument)
        else:
            handler()
        # Qt has turned the check mark over by itself, whatever came of it.
        self._soon.start()

    def _name_step(self, name: str, label: str) -> None:
        action = next(one for one in ACTIONS if one.id == name)
        text = f"{action.title} {label[:1].lower()}{label[1:]}" if label else action.tooltip
        self.actions[name].setToolTip(f"{text} ({action.keys[0]})" if action.keys else text)

    def _fill_recent(self) -> None:
        self.recent_menu.clear()
        for recent in self._bench.settings.recent:
            entry = self.recent_menu.addAction(recent_title(recent).replace("&", "&&"))
            entry.setToolTip(recent.recording)
            entry.triggered.connect(partial(self._open_recent, recent))

    def _open_recent(self, recent: Recent, _checked: bool = False) -> None:
        getattr(self._handlers, RECENT_MENU)(recent)


def recent_title(recent: Recent) -> str:
    """Name of a recent recording with its plan's, without folders."""
    name = Path(recent.recording).name
    return f"{name} with {Path(recent.plan).name}" if recent.plan else name


def _with_letter(menu: Menu, taken: set[str]) -> str:
    """Underline the first letter of a menu's name that no other menu has, to be opened with Alt."""
    for place, letter in enumerate(menu.value):
        if letter.isalpha() and letter.lower() not in taken:
            taken.add(letter.lower())
            return f"{menu.value[:place]}&{menu.value[place:]}"
    return menu.value
