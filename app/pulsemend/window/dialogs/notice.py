"""The safety notice: shown once at the first start, and whenever somebody asks for it."""

from __future__ import annotations

from PySide6.QtWidgets import QWidget

from pulsemend.notice import SAFETY_NOTICE
from pulsemend.session.settings import Settings
from pulsemend.window.dialogs.sheet import Sheet


class NoticeDialog(Sheet):
    """What the program is and is not for.

    `accepted` says that it was read; leaving it by Esc shows it again next time.

    Parameters
    ----------
    first : bool
        Whether this is the first start.
    """

    def __init__(self, *, first: bool = False, parent: QWidget | None = None) -> None:
        super().__init__("Safety notice", parent)
        self.setMinimumWidth(520)
        self.add_text("Before you begin" if first else "What Pulsemend is and is not for", "title")
        for paragraph in SAFETY_NOTICE:
            self.add_text(paragraph)
        if first:
            self.add_text("You find this again under Help, in every provenance file, and in About.", "quiet")
        self.read = self.add_button("I have read this" if first else "Close", main=True)
        self.read.clicked.connect(self.accept)
        self.end_column()


def first_start_notice(settings: Settings, parent: QWidget | None = None) -> NoticeDialog | None:
    """Make the notice of the first start; None if it was read before.

    Parameters
    ----------
    settings : Settings
        When it is accepted, the window keeps ``notice_shown``.
    parent : QWidget or None
        The window.
    """
    return None if settings.notice_shown else NoticeDialog(first=True, parent=parent)
