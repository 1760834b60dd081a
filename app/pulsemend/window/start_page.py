"""What the window shows while nothing is open: how to begin."""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING

from PySide6.QtCore import QStandardPaths, Qt, Signal
from PySide6.QtGui import QResizeEvent, QShowEvent
from PySide6.QtWidgets import (
    QFileDialog,
    QHBoxLayout,
    QLabel,
    QLineEdit,
    QProgressBar,
    QPushButton,
    QScrollArea,
    QSizePolicy,
    QVBoxLayout,
    QWidget,
)

from pulsemend.progress import Progress, Work
from pulsemend.session.settings import Recent
from pulsemend.window.action_bar import ActionBar, recent_title
from pulsemend.window.flow import flow_row
from pulsemend.window.icons import icon, pixmap
from pulsemend.window.job import Job
from pulsemend.window.parts import Card, button, set_kind, words
from pulsemend.window.theme import Theme
from pulsemend.window.workbench import Workbench

if TYPE_CHECKING:
    from pulsemend.simulate.sample import SampleResult

RECENT_SHOWN = 6
SAMPLE_FOLDER = "pulsemend-sample"
_MARK_PX = 64
_WIDTH_PX = 720
_BUTTON_EDGE_PX = 24


class StartPage(QScrollArea):
    """Drop, open, go on with a recent recording, or try a sample.

    Parameters
    ----------
    bench : Workbench
        Its settings hold the recent recordings; its workers write the sample.
    actions : ActionBar
        Opens what is chosen.

    Attributes
    ----------
    recent_chosen : Signal(object)
        A `Recent`.
    sample_written : Signal(object)
        The `SampleResult`.
    """

    recent_chosen = Signal(object)
    sample_written = Signal(object)

    def __init__(self, bench: Workbench, actions: ActionBar, parent: QWidget | None = None) -> None:
        super().__init__(parent)
        self._bench = bench
        self._actions = actions
        self._job: Job | None = None
        self.setAccessibleName("Start")
        self.setWidgetResizable(True)
        self.setFocusPolicy(Qt.FocusPolicy.NoFocus)
        self.mark = QLabel()
        self.mark.setAccessibleName("Mark of Pulsemend")
        self.openers = [
            self._opener("open_recording", "Open a recording...", main=True),
            self._opener("open_folder", "Open a folder..."),
            self._opener("open_plan", "Open a plan..."),
        ]
        self.recent: list[QPushButton] = []
        self.folder = QLineEdit(str(_sample_folder()))
        self.choose = button("Choose...", self._choose_folder, tooltip="Choose where the sample is written")
        self.write = button(
            "Write a sample",
            self.write_sample,
            tooltip="Write an invented recording with its plan, and open it",
        )
        self.stop = button("Stop", self._stop, tooltip="Stop writing the sample; nothing half written stays")
        self.progress = QProgressBar()
        self.progress.setAccessibleName("Progress of the sample")
        self.words = words("", "quiet")
        self.setWidget(self._inside())
        self._show_running()
        self.set_theme(bench.theme)

    def set_theme(self, theme: Theme) -> None:
        """Take other colours.

        Parameters
        ----------
        theme : Theme
            The window's.
        """
        self.mark.setPixmap(pixmap("mark", theme.accent, _MARK_PX, self.devicePixelRatioF()))
        self.write.setIcon(icon("lantern", theme))
        self._drop_sign.setPixmap(pixmap("drop", theme.quiet, 28, self.devicePixelRatioF()))

    def showEvent(self, event: QShowEvent) -> None:
        """Begin with the first way to begin."""
        super().showEvent(event)
        self.setFocus()

    def setFocus(self, reason: Qt.FocusReason = Qt.FocusReason.OtherFocusReason) -> None:
        """Give the focus to the first way to begin."""
        self.openers[0].setFocus(reason)

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Scroll where wrapped texts need more height than there is."""
        super().resizeEvent(event)
        around = self.widget()
        layout = None if around is None else around.layout()
        if around is not None and layout is not None:
            around.setMinimumHeight(layout.totalHeightForWidth(self.viewport().width()))

    def write_sample(self) -> None:
        """Let a worker write the sample into the folder that is named."""
        if self._job is not None:
            return
        folder = Path(self.folder.text().strip()).expanduser()
        if not self.folder.text().strip():
            self._say("Name a folder for the sample.", attention=True)
            return

        def work() -> Work[object]:
            # Simulation needs filters that take a while to load; only here, in the worker.
            from pulsemend.simulate.sample import write_sample

            return write_sample(folder)

        self._job = self._bench.jobs.submit("sample", lambda _shelf: work())
        self._job.progressed.connect(self._show_progress)
        self._job.returned.connect(self._take)
        self._job.failed.connect(self._fail)
        self._job.cancelled.connect(lambda: self._say("Stopped; nothing half written was left."))
        self._job.finished.connect(self._end)
        self._say("Writing...")
        self._show_running()

    # Build

    def _inside(self) -> QWidget:
        inside = QWidget()
        inside.setMaximumWidth(_WIDTH_PX)
        column = QVBoxLayout(inside)
        column.setSpacing(12)
        column.addStretch(1)
        column.addWidget(self.mark, 0, Qt.AlignmentFlag.AlignHCenter)
        cards = [self._drop_card(), self._sample_card()]
        if self._bench.settings.recent:
            cards.insert(1, self._recent_card())
        for card in cards:
            # As high as their wrapped texts, which a card of the settings' column is not.
            card.setSizePolicy(QSizePolicy.Policy.Preferred, QSizePolicy.Policy.Minimum)
            column.addWidget(card)
        column.addStretch(2)
        around = QWidget()
        row = QHBoxLayout(around)
        row.addStretch(1)
        row.addWidget(inside, 20)
        row.addStretch(1)
        return around

    def _drop_card(self) -> Card:
        card = Card("Begin")
        self._drop_sign = QLabel()
        self._drop_sign.setAccessibleName("Drop here")
        text = words("Drop a recording, a plan or a folder with both anywhere on this window, or")
        text.setWordWrap(True)
        line = QHBoxLayout()
        line.addWidget(self._drop_sign)
        line.addWidget(text, 1)
        card.body.addLayout(line)
        card.add(flow_row(*self.openers))
        return card

    def _recent_card(self) -> Card:
        card = Card("Go on with")
        for recent in self._bench.settings.recent[:RECENT_SHOWN]:
            made = _RecentButton(recent)
            made.clicked.connect(partial(self._choose_recent, recent))
            card.add(made)
            self.recent.append(made)
        return card

    def _sample_card(self) -> Card:
        card = Card("Try it on a sample", "an invented recording; nobody was recorded")
        label = QLabel("Folder")
        label.setBuddy(self.folder)
        self.folder.setAccessibleName("Folder of the sample")
        row = QHBoxLayout()
        row.addWidget(label)
        row.addWidget(self.folder, 1)
        card.body.addLayout(row)
        card.add(flow_row(self.choose, self.write, self.stop))
        card.add(self.progress)
        card.add(self.words)
        return card

    def _opener(self, name: str, text: str, *, main: bool = False) -> QPushButton:
        action = self._actions.actions[name]
        return button(text, action.trigger, main=main, tooltip=action.toolTip())

    # Act

    def _choose_recent(self, recent: Recent, _checked: bool = False) -> None:
        self.recent_chosen.emit(recent)

    def _choose_folder(self) -> None:
        dialog = QFileDialog(self, "Folder of the sample", str(Path(self.folder.text()).parent))
        dialog.setFileMode(QFileDialog.FileMode.Directory)
        dialog.setAttribute(Qt.WidgetAttribute.WA_DeleteOnClose)
        dialog.fileSelected.connect(lambda chosen: self.folder.setText(str(Path(chosen) / SAMPLE_FOLDER)))
        dialog.open()

    def _stop(self) -> None:
        if self._job is not None:
            self._job.cancel()

    def _show_progress(self, progress: Progress, _seconds_left: float | None) -> None:
        self.progress.setRange(0, 100)
        self.progress.setValue(round(100 * progress.done / progress.total) if progress.total else 0)

    def _take(self, result: SampleResult) -> None:
        self._say(f"Written to {result.folder}.")
        self.sample_written.emit(result)

    def _fail(self, error: BaseException) -> None:
        self._say(str(error), attention=True)

    def _end(self) -> None:
        self._job = None
        self._show_running()

    def _say(self, text: str, *, attention: bool = False) -> None:
        self.words.setText(text)
        set_kind(self.words, "attention" if attention else "quiet")

    def _show_running(self) -> None:
        is_running = self._job is not None
        self.progress.setRange(0, 0 if is_running else 100)
        self.progress.setVisible(is_running)
        self.stop.setVisible(is_running)
        for one in (self.folder, self.choose, self.write):
            one.setEnabled(not is_running)


class _RecentButton(QPushButton):
    """A recent recording; its folder stands in the tooltip and gives way where there is little room."""

    def __init__(self, recent: Recent) -> None:
        title = recent_title(recent)
        super().__init__(title.replace("&", "&&"))
        self._title = title
        self.setAccessibleName(f"Open {title}")
        self.setToolTip(recent.recording)
        self.setStyleSheet("text-align: left;")
        self.setSizePolicy(QSizePolicy.Policy.Ignored, QSizePolicy.Policy.Fixed)

    def resizeEvent(self, event: QResizeEvent) -> None:
        """Give way in the middle, where names differ least."""
        super().resizeEvent(event)
        room = self.width() - 2 * self.fontMetrics().averageCharWidth() - _BUTTON_EDGE_PX
        title = self.fontMetrics().elidedText(self._title, Qt.TextElideMode.ElideMiddle, room)
        self.setText(title.replace("&", "&&"))


def _sample_folder() -> Path:
    documents = QStandardPaths.writableLocation(QStandardPaths.StandardLocation.DocumentsLocation)
    return (Path(documents) if documents else Path.home()) / SAMPLE_FOLDER
