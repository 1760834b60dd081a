"""The line at the top: which recording, whether it is saved, what is shown, and the way to every action."""

from __future__ import annotations

from dataclasses import replace

from PySide6.QtCore import QSize, Qt
from PySide6.QtGui import QAction, QPixmap, QResizeEvent
from PySide6.QtWidgets import (
    QAbstractSpinBox,
    QFrame,
    QHBoxLayout,
    QLabel,
    QSizePolicy,
    QToolButton,
    QWidget,
)

from pulsemend.session.changed import Changed
from pulsemend.session.view import Shown
from pulsemend.window.action_bar import ActionBar
from pulsemend.window.finder import ActionFinder
from pulsemend.window.icons import pixmap
from pulsemend.window.parts import NumberField, set_kind, words
from pulsemend.window.theme import Theme
from pulsemend.window.traces.navigation import LEAST_WIDTH_S, Extent
from pulsemend.window.workbench import Workbench

MARK_PX = 26
LEAST_ROW_UV, MOST_ROW_UV = 0.1, 100_000.0
_MIDDLE = 0.5
_LEAST_ICON_PX = 18
_LEAST_WIDTH_PX = 640
_NAME_LETTERS = 8


class ActionButton(QToolButton):
    """A button of an action with a text of its own; state, tooltip and icon are the action's.

    Parameters
    ----------
    action : QAction
        Done when the button is pressed.
    text : str
        Shorter than the action's own; empty: the icon alone, with the action's name for screen readers.
    """

    def __init__(self, action: QAction, text: str = "", parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.action_ = action
        self.setAccessibleName(text or action.text())
        self.setText(text)
        self.setToolButtonStyle(
            Qt.ToolButtonStyle.ToolButtonTextOnly if text else Qt.ToolButtonStyle.ToolButtonIconOnly
        )
        self.setFocusPolicy(Qt.FocusPolicy.TabFocus)
        self.setSizePolicy(QSizePolicy.Policy.Minimum, QSizePolicy.Policy.Fixed)
        self.setCheckable(action.isCheckable())
        self.clicked.connect(self._press)
        action.changed.connect(self._follow)
        self._follow()

    def _press(self) -> None:
        self.action_.trigger()
        self._follow()

    def _follow(self) -> None:
        self.setEnabled(self.action_.isEnabled())
        self.setChecked(self.action_.isChecked())
        self.setToolTip(self.action_.toolTip())
        self.setAccessibleDescription(self.action_.toolTip())
        if not self.text():
            self.setIcon(self.action_.icon())


class ElidedName(QLabel):
    """A name that gives way when there is little room; the tooltip has all of it."""

    def __init__(self, accessible_name: str, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._name = ""
        self._accessible_name = accessible_name
        self.setTextFormat(Qt.TextFormat.PlainText)
        self.setProperty("kind", "title")
        self.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Fixed)

    def show_name(self, name: str, tooltip: str) -> None:
        """Show a name, with what stands behind it in the tooltip."""
        self._name = name
        self.setToolTip(tooltip)
        self.setAccessibleName(f"{self._accessible_name}: {name}")
        self._elide()
        self.updateGeometry()

    def minimumSizeHint(self) -> QSize:
        """Room for a few letters, or for a short name."""
        few = 10 * self.fontMetrics().averageCharWidth()
        return QSize(min(few, self.sizeHint().width()), super().minimumSizeHint().height())

    def sizeHint(self) -> QSize:
        """Room for the whole name, as long as it is no novel."""
        width = self.fontMetrics().horizontalAdvance(self._name) + 4
        return QSize(min(width, 40 * self.fontMetrics().averageCharWidth()), super().sizeHint().height())

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Give way."""
        super().resizeEvent(event)
        self._elide()

    def _elide(self) -> None:
        middle = Qt.TextElideMode.ElideMiddle
        self.setText(self.fontMetrics().elidedText(self._name, middle, max(self.width(), 1)))


class PlainNumberField(NumberField):
    """A number without zeros behind it, with steps that grow with it."""

    def __init__(self, name: str, unit: str, least: float, most: float) -> None:
        super().__init__(name, unit, least, most, 1.0, 3)
        self.setStepType(QAbstractSpinBox.StepType.AdaptiveDecimalStepType)
        self.setToolTip(f"{name}; type a number or press the arrows up and down")
        # Arrow keys and wheel do what the buttons would, and the line has little room. Buttons of no width
        # instead of none: without any, a style sheet leaves the number no room.
        self.setButtonSymbols(QAbstractSpinBox.ButtonSymbols.UpDownArrows)
        self.setStyleSheet(
            "QAbstractSpinBox::up-button, QAbstractSpinBox::down-button { width: 0; border: none; }"
        )

    def textFromValue(self, value: float) -> str:
        """Write at most three digits behind the point, and none that say nothing."""
        return self.locale().toString(round(value, 3), "g", 6)

    def sizeHint(self) -> QSize:
        """Room for a usual number; the range's ends are longer."""
        hint = super().sizeHint()
        text = f"0000.0{self.suffix()}"
        return QSize(self.fontMetrics().horizontalAdvance(text) + 20, hint.height())

    def minimumSizeHint(self) -> QSize:
        """Do not shrink: a number cut off is a wrong number."""
        return self.sizeHint()


class Header(QWidget):
    """The line at the top.

    Parameters
    ----------
    bench : Workbench
        Its session is shown.
    actions : ActionBar
        What its buttons do.
    """

    def __init__(self, bench: Workbench, actions: ActionBar, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._bench = bench
        self._session = bench.session
        self._theme = bench.theme
        self.setObjectName("header")
        self.setAttribute(Qt.WidgetAttribute.WA_StyledBackground)
        self.setAccessibleName("Header")
        self.mark = QLabel()
        self.mark.setAccessibleName("Pulsemend")
        self.name = ElidedName("Recording")
        self.saved = words("", "quiet")
        self.saved.setWordWrap(False)
        self.across = PlainNumberField("Seconds across", "s across", LEAST_WIDTH_S, 100_000.0)
        self.row_height = PlainNumberField("Microvolts a row", "\u00b5V a row", LEAST_ROW_UV, MOST_ROW_UV)
        self.finder = ActionFinder(actions)
        self.shown = {
            shown: ActionButton(actions.actions[f"show_{shown.name.lower()}"], shown.value) for shown in Shown
        }
        self.buttons = {name: ActionButton(actions.actions[name]) for name in ("undo", "redo", "help")}
        for button in self.buttons.values():
            button.setProperty("kind", "plain")
        self._lay_out()
        self.across.committed.connect(self._set_width)
        self.row_height.committed.connect(self._set_row)
        kinds = (Changed.RECORDING, Changed.PLAN, Changed.VIEW, Changed.HISTORY)
        ends = [self._session.subscribe(kind, self._follow) for kind in kinds]
        self.destroyed.connect(lambda: [end() for end in ends])
        self.set_theme(bench.theme)
        self._follow()

    def set_theme(self, theme: Theme) -> None:
        """Take other colours.

        Parameters
        ----------
        theme : Theme
            The window's.
        """
        self._theme = theme
        self.mark.setPixmap(self._mark())

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Shorten the units where there is little room; tooltips have them whole."""
        super().resizeEvent(event)
        size_px = max(self.fontMetrics().height(), _LEAST_ICON_PX)
        for button in self.buttons.values():
            button.setIconSize(QSize(size_px, size_px))
        self._write_units(short=False)
        least = super().minimumSizeHint().width()
        self._write_units(short=event.size().width() < least + _NAME_LETTERS * size_px)

    def _write_units(self, *, short: bool) -> None:
        self.across.setSuffix(" s" if short else " s across")
        self.row_height.setSuffix(" \u00b5V" if short else " \u00b5V a row")
        self.across.updateGeometry()
        self.row_height.updateGeometry()

    def minimumSizeHint(self) -> QSize:
        """Room for everything with short units."""
        return QSize(_LEAST_WIDTH_PX, super().minimumSizeHint().height())

    def _mark(self) -> QPixmap:
        return pixmap("mark", self._theme.accent, MARK_PX, self.devicePixelRatioF())

    def _lay_out(self) -> None:
        row = QHBoxLayout(self)
        row.setContentsMargins(12, 6, 12, 6)
        row.setSpacing(8)
        row.addWidget(self.mark)
        row.addWidget(self.name)
        row.addWidget(self.saved)
        row.addStretch(1)
        segments = QFrame()
        segments.setAccessibleName("What the traces show")
        inside = QHBoxLayout(segments)
        inside.setContentsMargins(0, 0, 0, 0)
        inside.setSpacing(2)
        for button in self.shown.values():
            inside.addWidget(button)
        row.addWidget(segments)
        row.addSpacing(6)
        row.addWidget(self.across)
        row.addWidget(self.row_height)
        row.addStretch(1)
        row.addWidget(self.finder)
        for button in self.buttons.values():
            row.addWidget(button)

    def _follow(self) -> None:
        session = self._session
        opened = session.recording
        if opened is None:
            self.name.show_name("Pulsemend", "No recording is open")
            self.saved.setText("")
        else:
            plan = f"\nPlan: {session.plan_path}" if session.plan_path else ""
            self.name.show_name(opened.path.name, f"{opened.path}{plan}")
            self._show_saved()
            self.across.setMaximum(max(opened.facts.duration_s, LEAST_WIDTH_S))
        for field, value in ((self.across, session.view.width_s), (self.row_height, session.view.row_uv)):
            field.setEnabled(opened is not None)
            field.show_value(value)

    def _show_saved(self) -> None:
        session = self._session
        unsaved = [
            name
            for name, is_saved in (("plan", session.plan_is_saved), ("marks", session.marks_are_saved))
            if not is_saved
        ]
        self.saved.setText("unsaved" if unsaved else "saved")
        set_kind(self.saved, "attention" if unsaved else "quiet")
        what = " and ".join(unsaved)
        self.saved.setToolTip(
            f"The {what} on the disk {'is' if unsaved == ['plan'] else 'are'} older than what is shown"
            if unsaved
            else "The files on the disk hold what is shown"
        )

    def _set_width(self, width_s: float) -> None:
        """Show more or less time around the middle of the view."""
        opened, view = self._session.recording, self._session.view
        if opened is None or not width_s:
            return
        middle_s = view.start_s + _MIDDLE * view.width_s
        extent = Extent(opened.facts.duration_s)
        self._session.set_view(extent.centred(replace(view, width_s=width_s), middle_s))

    def _set_row(self, row_uv: float) -> None:
        self._session.set_view(replace(self._session.view, row_uv=row_uv))
