"""Go to a time: typed as seconds or on a clock, refused in words."""

from __future__ import annotations

from PySide6.QtWidgets import QHBoxLayout, QLabel, QLineEdit, QWidget

from pulsemend.errors import InputError
from pulsemend.session.session import Session
from pulsemend.session.typed_time import clock_text, read_time
from pulsemend.window.dialogs.sheet import Sheet
from pulsemend.window.parts import words
from pulsemend.window.traces.navigation import Extent


class GoToTime(Sheet):
    """Asks for a time and brings it into the middle of the view.

    Parameters
    ----------
    session : Session
        With an open recording.
    """

    def __init__(self, session: Session, parent: QWidget | None = None) -> None:
        super().__init__("Go to a time", parent)
        self._session = session
        self._duration_s = session.recording.facts.duration_s if session.recording else 0.0
        self.setMinimumWidth(380)
        self.field = QLineEdit()
        self.field.setAccessibleName("Time")
        self.field.setPlaceholderText("seconds, m:ss or h:mm:ss")
        label = QLabel("&Time")
        label.setBuddy(self.field)
        row = QHBoxLayout()
        row.addWidget(label)
        row.addWidget(self.field, 1)
        self.column.addLayout(row)
        self.hint = words(f"From 0 to {clock_text(self._duration_s)} ({self._duration_s:g} s)", "quiet")
        self.column.addWidget(self.hint)
        self.refusal = words("", "attention")
        self.refusal.setWordWrap(True)
        self.refusal.hide()
        self.column.addWidget(self.refusal)
        leave = self.add_button("Stay here")
        leave.clicked.connect(self.reject)
        self.go = self.add_button("Go", main=True)
        self.go.clicked.connect(self._go)
        self.end_column()
        self.field.textEdited.connect(lambda _: self.refusal.hide())
        self.field.setFocus()

    def _go(self) -> None:
        try:
            time_s = read_time(self.field.text(), self._duration_s)
        except InputError as error:
            text = str(error)
            self.refusal.setText(f"{text[:1].upper()}{text[1:]}.")
            self.refusal.setAccessibleName(self.refusal.text())
            self.refusal.show()
            self.field.setFocus()
            self.field.selectAll()
            return
        self._session.set_view(Extent(self._duration_s).centred(self._session.view, time_s))
        self.accept()
