"""Choose which events "next event" and "previous event" look for."""

from __future__ import annotations

from PySide6.QtCore import Qt, Signal
from PySide6.QtGui import QIcon, QPainter, QPixmap
from PySide6.QtWidgets import QListWidget, QListWidgetItem, QWidget

from pulsemend.model.vocabulary import Role
from pulsemend.session.event_choice import EventChoice, event_choices
from pulsemend.session.session import Session
from pulsemend.window.dialogs.sheet import Sheet
from pulsemend.window.theme import Theme
from pulsemend.window.traces.shapes import draw_roles

_ICON_PX = 16
_SHAPE_PX = 11.0


class WhichEvents(Sheet):
    """A list of roles and codes with their numbers.

    Parameters
    ----------
    session : Session
        With an open recording.
    now : EventChoice
        What is looked for now.
    theme : Theme
        Colours of the roles.

    Attributes
    ----------
    chosen : Signal(object)
        An `EventChoice`.
    """

    chosen = Signal(object)

    def __init__(
        self, session: Session, now: EventChoice, theme: Theme, parent: QWidget | None = None
    ) -> None:
        super().__init__("Which events", parent)
        self.resize(380, 460)
        self.add_text("Next event and Previous event go to:", "")
        self.list = QListWidget()
        self.list.setAccessibleName("Events to look for")
        markers = session.recording.facts.markers if session.recording else ()
        self._choices = [choice for choice, _ in event_choices(markers, session.plan)]
        for choice, count in event_choices(markers, session.plan):
            item = QListWidgetItem(f"{choice.words}  ({count})")
            if choice.role is not None:
                item.setIcon(_role_icon(choice.role, theme, self.devicePixelRatioF()))
            self.list.addItem(item)
        self.list.setCurrentRow(self._choices.index(now) if now in self._choices else 0)
        self.list.itemActivated.connect(lambda _: self._choose())
        self.column.addWidget(self.list, 1)
        leave = self.add_button("Leave as it was")
        leave.clicked.connect(self.reject)
        self.choose = self.add_button("Choose", main=True)
        self.choose.clicked.connect(self._choose)
        self.end_column()
        self.list.setFocus()

    def _choose(self) -> None:
        if self.result():
            return
        self.chosen.emit(self._choices[max(self.list.currentRow(), 0)])
        self.accept()


def _role_icon(role: Role, theme: Theme, pixel_ratio: float) -> QIcon:
    drawn = QPixmap(round(_ICON_PX * pixel_ratio), round(_ICON_PX * pixel_ratio))
    drawn.setDevicePixelRatio(pixel_ratio)
    drawn.fill(Qt.GlobalColor.transparent)
    painter = QPainter(drawn)
    painter.setRenderHint(QPainter.RenderHint.Antialiasing)
    draw_roles(painter, [role], ([_ICON_PX / 2], _ICON_PX / 2), _SHAPE_PX, theme, pixel_ratio)
    painter.end()
    return QIcon(drawn)
