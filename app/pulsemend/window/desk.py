"""The middle of the window: ribbon and traces, which never go away; beside and below them the open stage."""

from __future__ import annotations

from collections.abc import Callable

from PySide6.QtCore import QSize, Qt
from PySide6.QtWidgets import QFrame, QSizePolicy, QSplitter, QStackedWidget, QVBoxLayout, QWidget

from pulsemend.session.found import Stage
from pulsemend.window.parts import GAP_PX
from pulsemend.window.stages.base import StagePage
from pulsemend.window.theme import Theme

SETTINGS_PX = 318
MOST_NEEDED_PX = 560
"""A picture that asks for more width than this is cut off where text is very large; nothing else is."""

Factory = Callable[[], StagePage]


class Desk(QWidget):
    """Ribbon, traces, settings and picture.

    Parameters
    ----------
    factories : mapping of Stage to callable
        Make each stage's page when it is opened first.
    """

    def __init__(self, factories: dict[Stage, Factory], parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self.setObjectName("desk")
        self.setAttribute(Qt.WidgetAttribute.WA_StyledBackground)
        self._factories = factories
        self._theme: Theme | None = None
        self.pages: dict[Stage, StagePage] = {}
        self._open: StagePage | None = None
        self.ribbon_place = _frame("Whole recording")
        self.ribbon_place.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Fixed)
        self.traces_place = _frame("Traces")
        self.settings = Pages()
        self.pictures = Pages(MOST_NEEDED_PX)
        self.picture_place = _frame("Picture of the stage")
        self._fill(self.picture_place, self.pictures)
        self.below = QSplitter(Qt.Orientation.Vertical)
        self.below.addWidget(self.traces_place)
        self.below.addWidget(self.picture_place)
        self.below.setChildrenCollapsible(False)
        self.below.setHandleWidth(GAP_PX)
        self.below.setStretchFactor(0, 3)
        self.below.setStretchFactor(1, 2)
        self.below.setSizes([440, 300])
        middle = QWidget()
        column = QVBoxLayout(middle)
        column.setContentsMargins(0, 0, 0, 0)
        column.setSpacing(GAP_PX)
        column.addWidget(self.ribbon_place)
        column.addWidget(self.below, 1)
        self.beside = QSplitter(Qt.Orientation.Horizontal)
        self.beside.addWidget(middle)
        self.beside.addWidget(self.settings)
        self.beside.setChildrenCollapsible(False)
        self.beside.setHandleWidth(GAP_PX)
        self.beside.setStretchFactor(0, 1)
        self.beside.setSizes([900, SETTINGS_PX])
        whole = QVBoxLayout(self)
        whole.setContentsMargins(GAP_PX, GAP_PX, GAP_PX, GAP_PX)
        whole.addWidget(self.beside)

    def put(self, place: QFrame, widget: QWidget) -> None:
        """Put a widget into a frame in place of what was there."""
        layout = place.layout()
        while layout is not None and layout.count():
            item = layout.takeAt(0)
            old = None if item is None else item.widget()
            if old is not None:
                old.hide()
                old.deleteLater()
        self._fill(place, widget)

    def open_stage(self, stage: Stage) -> StagePage:
        """Show a stage; its page is made the first time."""
        if stage not in self.pages:
            page = self._factories[stage]()
            self.pages[stage] = page
            self.settings.addWidget(page.settings)
            self.pictures.addWidget(page.picture)
            if self._theme is not None:
                page.set_theme(self._theme)
        page = self.pages[stage]
        if self._open is not page:
            if self._open is not None:
                self._open.hide_stage()
            self._open = page
            self.settings.setCurrentWidget(page.settings)
            self.pictures.setCurrentWidget(page.picture)
            page.show_stage()
        return page

    def set_theme(self, theme: Theme) -> None:
        """Change the colours of every page there is."""
        self._theme = theme
        for page in self.pages.values():
            page.set_theme(theme)

    def fit_text(self, percent: int) -> None:
        """Give the settings the width that text of a size needs, and the middle the rest."""
        settings = SETTINGS_PX * percent // 100
        self.beside.setSizes([max(1, self.beside.width() - settings), settings])

    def close_pages(self) -> None:
        """Let no page listen to anybody any more."""
        for page in self.pages.values():
            page.close()

    @staticmethod
    def _fill(place: QFrame, widget: QWidget) -> None:
        layout = place.layout()
        if layout is None:
            layout = QVBoxLayout(place)
            layout.setContentsMargins(1, 1, 1, 1)
        layout.addWidget(widget)
        widget.show()


class Pages(QStackedWidget):
    """Pages of which only the open one needs room.

    Parameters
    ----------
    most_px : int
        Least width that is granted to a page at most.
    """

    def __init__(self, most_px: int = 10_000) -> None:
        super().__init__()
        self._most_px = most_px
        self.currentChanged.connect(self.updateGeometry)

    def sizeHint(self) -> QSize:
        """Room for the open page."""
        page = self.currentWidget()
        return super().sizeHint() if page is None else page.sizeHint()

    def minimumSizeHint(self) -> QSize:
        """Least room for the open page."""
        page = self.currentWidget()
        least = super().minimumSizeHint() if page is None else page.minimumSizeHint()
        return least.boundedTo(QSize(self._most_px, least.height()))


def _frame(name: str) -> QFrame:
    frame = QFrame()
    frame.setProperty("card", "true")
    frame.setAccessibleName(name)
    return frame
