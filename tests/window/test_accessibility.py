"""One audit of all windows and dialogs: names, keys, tab order, visible focus, contrast."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from pathlib import Path

import pytest
from PySide6.QtGui import QColor
from PySide6.QtWidgets import QCheckBox, QMainWindow, QPushButton, QVBoxLayout, QWidget
from pytestqt.qtbot import QtBot

from pulsemend.errors import ChangedOnDisk
from pulsemend.progress import Progress
from pulsemend.session.event_choice import ALL_EVENTS
from pulsemend.session.found import Stage
from pulsemend.session.lock import Holder
from pulsemend.session.messages import Level, Message
from pulsemend.session.recovery import Recovery
from pulsemend.session.session import Session
from pulsemend.window.action_bar import missing_handlers
from pulsemend.window.dialogs import questions
from pulsemend.window.dialogs.about import AboutDialog
from pulsemend.window.dialogs.details import DetailsDialog
from pulsemend.window.dialogs.go_to_time import GoToTime
from pulsemend.window.dialogs.keys import KeysDialog
from pulsemend.window.dialogs.notice import NoticeDialog
from pulsemend.window.dialogs.pick_channels import PickChannels
from pulsemend.window.dialogs.which_events import WhichEvents
from pulsemend.window.guide_viewer import GuideViewer
from pulsemend.window.handlers import Handlers
from pulsemend.window.main_window import Folders, MainWindow
from pulsemend.window.program import open_window
from pulsemend.window.status_line import StatusLine
from pulsemend.window.style import style_sheet
from pulsemend.window.theme import DARK, LIGHT, Theme
from pulsemend.window.workbench import Workbench
from support import audit
from support.window_bench import end_bench, new_bench, sample_copy

THEMES = pytest.mark.parametrize("theme", [LIGHT, DARK], ids=["light", "dark"])

CHANGED = ChangedOnDisk("lantern.toml", ours="a = 1\n", theirs="a = 2\n")
DIALOGS: dict[str, Callable[[Workbench], QWidget]] = {
    "notice": lambda _: NoticeDialog(first=True),
    "about": lambda _: AboutDialog(LIGHT),
    "keys": lambda _: KeysDialog(),
    "details": lambda _: DetailsDialog(Message(Level.PROBLEM, "It went wrong.", "Everything about it")),
    "go to": lambda bench: GoToTime(bench.session),
    "pick": lambda bench: PickChannels(bench.session),
    "which": lambda bench: WhichEvents(bench.session, ALL_EVENTS, LIGHT),
    "unsaved": lambda bench: questions.unsaved_question(bench.session),
    "running": lambda _: questions.running_question("writing the set"),
    "changed": lambda _: questions.changed_question(CHANGED),
    "recovery": lambda _: questions.recovery_question(Recovery(3, "Gap", 1.7e9)),
    "second": lambda _: questions.second_window_question(Holder(1, "lab")),
    "guide": lambda _: GuideViewer(LIGHT),
}


@pytest.fixture
def bench(qtbot: QtBot, tmp_path: Path) -> Iterator[Workbench]:
    bench = new_bench(tmp_path)
    yield bench
    end_bench(bench)


def shown(qtbot: QtBot, widget: QWidget) -> QWidget:
    widget.setStyleSheet(style_sheet(LIGHT, 10.0))
    qtbot.addWidget(widget)
    widget.show()
    qtbot.waitExposed(widget)
    widget.activateWindow()
    qtbot.waitUntil(widget.isActiveWindow)
    return widget


def main_window(qtbot: QtBot, folder: Path, recording: Path | None) -> MainWindow:
    """Open the real window and wait until it has nothing more to do."""
    user = folder / "user"
    folders = Folders(user / "data", user / "state", user / "cache", user / "settings.json")
    window = open_window(folders, recording, recording and folder / "lantern.toml")
    window.resize(1280, 800)
    window.show()
    qtbot.waitExposed(window)
    window.activateWindow()
    qtbot.waitUntil(window.isActiveWindow)
    if recording is not None:
        qtbot.waitUntil(lambda: window.bench.learned is not None, timeout=20_000)
    qtbot.waitUntil(lambda: not window.bench.jobs.under_way, timeout=20_000)
    return window


# Contrast


def test_contrast_of_known_colours() -> None:
    """Value of the definition's authors for black on white; #767676 is their example of just enough."""
    assert audit.contrast("#000000", "#FFFFFF") == pytest.approx(21.0)
    assert 4.5 <= audit.contrast("#767676", "#FFFFFF") < 4.6


@THEMES
@pytest.mark.parametrize("text", ["text", "quiet", "accent", "attention"])
def test_text_stands_out(theme: Theme, text: str) -> None:
    """Web Content Accessibility Guidelines 2.1, 1.4.3: at least 4.5 to 1."""
    for behind in ("window", "panel", "field", "accent_soft"):
        assert audit.contrast(getattr(theme, text), getattr(theme, behind)) >= 4.5, behind


@THEMES
def test_text_on_filled_controls_stands_out(theme: Theme) -> None:
    assert audit.contrast(theme.panel, theme.accent) >= 4.5
    assert audit.contrast(theme.attention, theme.attention_soft) >= 4.5
    assert audit.contrast(theme.text, theme.attention_soft) >= 4.5


@THEMES
def test_focus_frame_stands_out(theme: Theme) -> None:
    """Web Content Accessibility Guidelines 2.1, 1.4.11: at least 3 to 1 for what is not text."""
    for behind in ("window", "panel", "field"):
        assert audit.contrast(theme.accent, getattr(theme, behind)) >= 3.0


# Dialogs


@pytest.mark.parametrize("name", DIALOGS)
def test_dialog_by_ear_and_keyboard(qtbot: QtBot, bench: Workbench, name: str) -> None:
    dialog = shown(qtbot, DIALOGS[name](bench))
    assert dialog.windowTitle()
    assert audit.nameless(dialog) == []
    assert audit.unreachable_actions(dialog) == []
    assert audit.missed_by_tab(dialog) == []
    assert audit.without_visible_focus(dialog) == []


# The window


def test_every_action_has_its_function() -> None:
    assert missing_handlers(Handlers) == ()


def test_window_without_a_recording(qtbot: QtBot, tmp_path: Path) -> None:
    window = main_window(qtbot, tmp_path, None)
    window.session.say(Message(Level.NOTE, "One."))
    window.session.say(Message(Level.PROBLEM, "Two.", "with details"))
    check(window)
    window.close()


@pytest.mark.parametrize("stage", Stage)
def test_window_with_a_stage(qtbot: QtBot, tmp_path: Path, stage: Stage) -> None:
    window = main_window(qtbot, tmp_path, sample_copy(tmp_path))
    window.session.open_stage(stage)
    qtbot.waitUntil(lambda: not window.bench.jobs.under_way, timeout=20_000)
    check(window)
    window.close()


def check(window: MainWindow) -> None:
    """Audit the window; all findings at once, because each run takes a while."""
    findings = {
        "without a name": audit.nameless(window),
        "actions without key and menu": audit.unreachable_actions(window),
        "missed by Tab": audit.missed_by_tab(window),
        "without visible focus": audit.without_visible_focus(window),
        "number cut off": audit.numbers_cut_off(window),
    }
    assert [f"{kind}: {one}" for kind, found in findings.items() for one in found] == []


# The audit itself


@THEMES
def test_a_checked_box_has_another_shape(qtbot: QtBot, theme: Theme) -> None:
    """An outline, a ring of the ground, a box inside; a free box has no box inside."""
    rows = []
    for checked in (False, True):
        box = QCheckBox("as it is")
        qtbot.addWidget(box)
        box.setStyleSheet(style_sheet(theme, 10.0))
        box.setChecked(checked)
        box.resize(box.sizeHint())
        image = box.grab().toImage()
        y = image.height() // 2
        rows.append([image.pixelColor(x, y).name() for x in range(14)])
    free, checked_ = rows
    accent = QColor(theme.accent).name()
    assert accent not in free
    assert len({*free[2:12]}) == 1, "free boxes are empty"
    changes = [a for a, b in zip(checked_, ["", *checked_], strict=False) if (a == accent) != (b == accent)]
    # Accent, ground, accent, ground, accent from left to right.
    assert [one == accent for one in changes] == [True, False, True, False, True]


def test_the_status_line_keeps_its_height_when_work_starts(qtbot: QtBot) -> None:
    line = StatusLine(Session())
    shown(qtbot, line)
    for text_pt in (10.0, 18.0):
        line.setStyleSheet(style_sheet(LIGHT, text_pt))
        line.end_work()
        idle = line.sizeHint().height()
        line.show_work(Progress("aligning pulses at zero", 3, 7), 12.0)
        assert line.cancel.isVisible()
        assert line.sizeHint().height() == idle
        line.end_work()
        assert line.sizeHint().height() == idle


def test_audit_finds_what_is_missing(qtbot: QtBot) -> None:
    window = QMainWindow()
    central = QWidget()
    column = QVBoxLayout(central)
    named, bare, hidden_focus = QPushButton("named"), QPushButton(), QPushButton("plain")
    blank = QPushButton(central)
    blank.hide()
    hidden_focus.setStyleSheet("QPushButton, QPushButton:focus { border: none; outline: none; color: red; }")
    for one in (named, bare, hidden_focus):
        column.addWidget(one)
    window.setCentralWidget(central)
    central.addAction("lonely")
    shown(qtbot, window)
    assert [text.split("(")[0] for text in audit.nameless(window)] == ["QPushButton"]
    assert audit.unreachable_actions(window) == ["lonely"]
    assert audit.missed_by_tab(window) == []
    assert [text.split(" ")[0] for text in audit.without_visible_focus(window)] == ["QPushButton(plain)"]
