"""What a window owes to people who use it by keyboard, by ear or with little sight, as plain functions."""

from __future__ import annotations

from PySide6.QtCore import Qt
from PySide6.QtGui import QAccessible, QAction, QImage
from PySide6.QtTest import QTest
from PySide6.QtWidgets import (
    QAbstractButton,
    QAbstractItemView,
    QAbstractSlider,
    QAbstractSpinBox,
    QApplication,
    QComboBox,
    QHeaderView,
    QLabel,
    QLineEdit,
    QMenu,
    QMenuBar,
    QPlainTextEdit,
    QProgressBar,
    QRadioButton,
    QScrollBar,
    QSplitterHandle,
    QTextEdit,
    QWidget,
)

CONTROLS = (
    QAbstractButton,
    QAbstractItemView,
    QAbstractSlider,
    QAbstractSpinBox,
    QComboBox,
    QLineEdit,
    QPlainTextEdit,
    QProgressBar,
    QTextEdit,
)
MOST_TABS = 400
MOST_STAYS = 30


def luminance(colour: str) -> float:
    """Relative luminance of ``#rrggbb`` (Web Content Accessibility Guidelines 2.1, definition)."""
    parts = [int(colour[i : i + 2], 16) / 255 for i in (1, 3, 5)]
    linear = [part / 12.92 if part <= 0.03928 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one: str, other: str) -> float:
    """Contrast ratio of two colours, from 1 to 21 (Web Content Accessibility Guidelines 2.1, definition)."""
    dark, light = sorted((luminance(one), luminance(other)))
    return (light + 0.05) / (dark + 0.05)


def spoken_name(widget: QWidget) -> str:
    """What a screen reader calls a widget: its text, its accessible name or its label."""
    interface = QAccessible.queryAccessibleInterface(widget)
    if interface is None:
        return widget.accessibleName()
    return interface.text(QAccessible.Text.Name).strip()


def is_part(widget: QWidget) -> bool:
    """Whether a widget is an inner part of another control, which speaks for it."""
    parent = widget.parentWidget()
    grandparent = None if parent is None else parent.parentWidget()
    inside = isinstance(parent, QAbstractSpinBox | QComboBox | QLineEdit | QHeaderView)
    # The list that drops down from a choice stands in a frame of its own.
    inside = inside or isinstance(grandparent, QComboBox)
    return (
        inside
        or isinstance(widget, QScrollBar | QSplitterHandle | QHeaderView)
        or widget.objectName().startswith("qt_")
        or (isinstance(parent, QAbstractItemView) and isinstance(widget, QAbstractButton))
        or isinstance(widget, QMenu | QMenuBar)
    )


def is_control(widget: QWidget) -> bool:
    """Whether a person can do something with a widget, or reads a value from it."""
    if is_part(widget):
        return False
    return isinstance(widget, CONTROLS) or takes_tab(widget)


def takes_tab(widget: QWidget) -> bool:
    """Whether the Tab key stops at a widget."""
    return bool(widget.focusPolicy() & Qt.FocusPolicy.TabFocus) and not is_part(widget)


def nameless(window: QWidget) -> list[str]:
    """Controls without any name, and pictures without words."""
    found = [
        described(one)
        for one in window.findChildren(QWidget)
        if is_control(one) and not spoken_name(one) and not is_blank(one, window)
    ]
    pictures = [one for one in window.findChildren(QLabel) if not one.pixmap().isNull()]
    return found + [described(one) for one in pictures if not one.accessibleName()]


def is_blank(widget: QWidget, window: QWidget) -> bool:
    """Whether a button is hidden and gets its text when it is shown."""
    return (
        isinstance(widget, QAbstractButton)
        and widget.icon().isNull()
        and not widget.text()
        and not widget.isVisibleTo(window)
    )


def unreachable_actions(window: QWidget) -> list[str]:
    """Actions with neither a key nor a place in a menu."""
    found = []
    for action in window.findChildren(QAction):
        is_inner = action.objectName().startswith("_q_") or isinstance(action.parent(), QLineEdit | QTextEdit)
        if is_inner or action.isSeparator() or isinstance(action.parent(), QMenu):
            continue
        in_menu = any(isinstance(place, QMenu) for place in action.associatedObjects())
        if not action.shortcuts() and not in_menu:
            found.append(action.objectName() or action.text())
    return found


def tab_stops(window: QWidget) -> list[QWidget]:
    """Widgets that Tab should reach now."""
    return [
        one
        for one in window.findChildren(QWidget)
        if takes_tab(one) and one.isVisibleTo(window) and one.isEnabled() and one.window() is window
    ]


def tabbed(window: QWidget) -> list[QWidget]:
    """Widgets that Tab reaches, pressed as often as it takes to come round."""
    seen: list[QWidget] = []
    for _ in range(MOST_TABS):
        focused = window.focusWidget() or window
        QTest.keyClick(focused, Qt.Key.Key_Tab)
        now = window.focusWidget()
        # A text with links takes Tab once for each of them.
        is_round = bool(seen) and now is seen[0] and now is not seen[-1]
        if now is None or is_round or seen.count(now) > MOST_STAYS:
            break
        seen.append(now)
    return seen


def missed_by_tab(window: QWidget) -> list[str]:
    """Controls that Tab never reaches; of radio buttons of a group one is enough, arrows reach the others."""
    reached = tabbed(window)
    stops = tab_stops(window)
    groups = {one.parentWidget() for one in reached if isinstance(one, QRadioButton)}
    return [
        described(one)
        for one in stops
        if one not in reached
        and one.focusProxy() not in reached
        and not (isinstance(one, QAbstractButton) and in_reached_group(one, reached))
        and not (isinstance(one, QRadioButton) and one.parentWidget() in groups)
    ]


def in_reached_group(button: QAbstractButton, reached: list[QWidget]) -> bool:
    """Whether another button of an exclusive group was reached."""
    group = button.group()
    return group is not None and group.exclusive() and any(one in reached for one in group.buttons())


def without_visible_focus(window: QWidget) -> list[str]:
    """Controls that look the same with and without the focus."""
    found = []
    elsewhere = QWidget(window)
    elsewhere.setFocusPolicy(Qt.FocusPolicy.StrongFocus)
    elsewhere.show()
    for one in tab_stops(window):
        if one is elsewhere or one.focusProxy() is not None or one.size().isEmpty():
            continue
        elsewhere.setFocus()
        before = picture(one)
        one.setFocus(Qt.FocusReason.TabFocusReason)
        QApplication.sendPostedEvents()
        if picture(one) == before:
            found.append(described(one))
    elsewhere.setParent(None)
    elsewhere.deleteLater()
    return found


def numbers_cut_off(window: QWidget) -> list[str]:
    """Fields of numbers that are shown without room for what is in them."""
    found = []
    for field in window.findChildren(QAbstractSpinBox):
        inner = field.findChild(QLineEdit)
        if inner is None or not field.isVisibleTo(window):
            continue
        if inner.width() < inner.fontMetrics().horizontalAdvance(field.text()):
            found.append(described(field))
    return found


def picture(widget: QWidget) -> QImage:
    """What a widget looks like now."""
    return widget.grab().toImage()


def described(widget: QWidget) -> str:
    """Where a widget is: its class, name and ancestors."""
    chain: list[str] = []
    one: QWidget | None = widget
    while one is not None and len(chain) < 5:
        name = one.objectName() or one.accessibleName() or getattr(one, "text", lambda: "")()
        chain.append(f"{type(one).__name__}({name})")
        one = one.parentWidget()
    return " in ".join(chain)
