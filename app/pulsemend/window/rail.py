"""The rail: all stages, each with its state, open to be chosen at any time."""

from __future__ import annotations

from PySide6.QtCore import QPointF, QRectF, QSize, Qt, Signal
from PySide6.QtGui import QColor, QFont, QPainter, QPaintEvent, QPen, QPolygonF
from PySide6.QtWidgets import QAbstractButton, QButtonGroup, QSizePolicy, QVBoxLayout, QWidget

from pulsemend.session.changed import Changed
from pulsemend.session.found import Stage
from pulsemend.session.session import Session
from pulsemend.session.stages import StageState, State, stage_states
from pulsemend.window.theme import LIGHT, Theme

RING_PX = 22


class StageButton(QAbstractButton):
    """One stage: a ring that holds nothing, a number or a tick, and the stage's name below.

    Parameters
    ----------
    stage : Stage
        Which.
    """

    def __init__(self, stage: Stage, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.stage = stage
        self._theme = LIGHT
        self._state = StageState(stage, State.UNTOUCHED, "")
        self.setCheckable(True)
        self.setText(stage.value)
        self.setObjectName(f"rail_{stage.name.lower()}")
        self.setFocusPolicy(Qt.FocusPolicy.TabFocus)
        self.setSizePolicy(QSizePolicy.Policy.Expanding, QSizePolicy.Policy.Fixed)

    def show_state(self, state: StageState) -> None:
        """Show another state, for the eye and for screen readers."""
        self._state = state
        self.setAccessibleName(f"{self.stage.value}, {state.label}")
        self.setAccessibleDescription(state.words)
        self.setToolTip(f"{self.stage.value}: {state.label}\n{state.words}")
        self.update()

    def set_theme(self, theme: Theme) -> None:
        """Change the colours."""
        self._theme = theme
        self.update()

    def sizeHint(self) -> QSize:
        """Room for ring and name."""
        metrics = self.fontMetrics()
        width = max(64, metrics.horizontalAdvance(self.text()) + 20)
        return QSize(width, RING_PX + metrics.height() + 22)

    def minimumSizeHint(self) -> QSize:
        """Never narrower than its name."""
        return self.sizeHint()

    def paintEvent(self, _event: QPaintEvent) -> None:
        """Draw ring, sign and name."""
        theme, state = self._theme, self._state.state
        painter = QPainter(self)
        painter.setRenderHint(QPainter.RenderHint.Antialiasing)
        frame = QRectF(self.rect()).adjusted(3.5, 2.5, -3.5, -2.5)
        if self.isChecked() or self.underMouse() or self.hasFocus():
            edge = theme.accent if self.isChecked() or self.hasFocus() else theme.line
            painter.setPen(QPen(QColor(edge), 2.0 if self.hasFocus() else 1.0))
            painter.setBrush(QColor(theme.accent_soft if self.isChecked() else theme.panel))
            painter.drawRoundedRect(frame, 6, 6)
        attention = state is State.ATTENTION
        ink = QColor(theme.attention if attention else theme.accent if self.isChecked() else theme.quiet)
        ring = QRectF(self.width() / 2 - RING_PX / 2, 9, RING_PX, RING_PX)
        painter.setBrush(Qt.BrushStyle.NoBrush)
        painter.setPen(QPen(ink, 1.6))
        painter.drawEllipse(ring)
        if state is State.DONE:
            points = [(0.27, 0.52), (0.44, 0.68), (0.74, 0.34)]
            tick = QPolygonF([QPointF(ring.x() + x * RING_PX, ring.y() + y * RING_PX) for x, y in points])
            painter.drawPolyline(tick)
        elif attention:
            font = QFont(self.font())
            font.setBold(True)
            painter.setFont(font)
            painter.drawText(ring, Qt.AlignmentFlag.AlignCenter, str(self._state.count))
        painter.setFont(self.font())
        painter.setPen(QColor(theme.accent if self.isChecked() else theme.text))
        name = QRectF(0, ring.bottom() + 5, self.width(), self.fontMetrics().height())
        painter.drawText(name, Qt.AlignmentFlag.AlignHCenter, self.text())


class Rail(QWidget):
    """All stages from top to bottom.

    Attributes
    ----------
    chosen : Signal(object)
        A Stage the user wants to open.
    """

    chosen = Signal(object)

    def __init__(self, session: Session, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setObjectName("rail")
        self.setAttribute(Qt.WidgetAttribute.WA_StyledBackground)
        self.setAccessibleName("Stages")
        self.setSizePolicy(QSizePolicy.Policy.Fixed, QSizePolicy.Policy.Expanding)
        self._session = session
        self._group = QButtonGroup(self)
        self.buttons: dict[Stage, StageButton] = {}
        column = QVBoxLayout(self)
        column.setContentsMargins(4, 8, 4, 8)
        column.setSpacing(6)
        for stage in Stage:
            made = StageButton(stage, self)
            made.clicked.connect(self._on_clicked)
            self._group.addButton(made)
            self.buttons[stage] = made
            column.addWidget(made)
        column.addStretch(1)
        ends = [
            session.subscribe(kind, self.refresh)
            for kind in (Changed.RECORDING, Changed.PLAN, Changed.MARKS, Changed.STAGE, Changed.ESTIMATES)
        ]
        self.destroyed.connect(lambda: [end() for end in ends])
        self.refresh()

    def refresh(self) -> None:
        """Show the states of now."""
        for state in stage_states(self._session):
            self.buttons[state.stage].show_state(state)
        self.buttons[self._session.stage].setChecked(True)

    def set_theme(self, theme: Theme) -> None:
        """Change the colours."""
        for made in self.buttons.values():
            made.set_theme(theme)

    def _on_clicked(self) -> None:
        sender = self._group.checkedButton()
        if isinstance(sender, StageButton):
            self.chosen.emit(sender.stage)
