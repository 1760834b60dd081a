"""The whole window through keys, clicks, drags and drops, with real workers and real child processes."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from PySide6.QtCore import QMimeData, QPoint, QPointF, QSize, Qt, QUrl
from PySide6.QtGui import QDragEnterEvent, QDropEvent
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication, QDoubleSpinBox, QPushButton
from pytestqt.qtbot import QtBot

from pulsemend.model.plan_file import read_plan
from pulsemend.session.found import Stage
from pulsemend.session.messages import Level
from pulsemend.session.settings import load_settings
from pulsemend.session.view import Shown
from pulsemend.simulate.write_triplet import TripletFormat, TripletPaths, TripletWriter
from pulsemend.window.dialogs.notice import NoticeDialog
from pulsemend.window.main_window import MainWindow
from pulsemend.window.stages.epochs import EpochsStage
from pulsemend.window.stages.export import ExportStage
from pulsemend.window.stages.pulses import PulsesStage
from pulsemend.window.traces.names import RowNames
from support.hands import wheel
from support.whole_window import (
    Place,
    answering,
    census,
    click_stage,
    errors_logged,
    forget,
    n_callbacks,
    press,
)
from support.written_recordings import FORMATS


@pytest.fixture
def place(tmp_path: Path, qtbot: QtBot, qtlog: Any) -> Iterator[Place]:
    before = threading.active_count()
    with errors_logged() as errors:
        made = Place(tmp_path, qtbot)
        yield made
        made.close()
    assert not errors, errors
    assert threading.active_count() == before
    said = [one.message for one in qtlog.records if "propagateSizeHints" not in one.message]
    assert not said, "Qt says nothing; this line is the offscreen platform's own"


def words_of(window: MainWindow) -> str:
    return "\n".join(message.text for message in window.session.messages)


def toggle_bad_by_mouse(window: MainWindow, row: int) -> str:
    assert window.traces is not None
    names: RowNames = window.traces.names
    at = QPoint(8, round(window.traces.plot.rows.middle(row)))
    QTest.mouseClick(names, Qt.MouseButton.LeftButton, pos=at)
    return window.traces.plot.shown_names[row]


def bad_of(window: MainWindow) -> list[str]:
    return list(window.session.marks.bad)


def edit_of_plan(window: MainWindow, length_s: float = 0.8) -> None:
    """Type another length of the epochs in the Epochs stage."""
    press("stage_epochs", window)
    page = window.desk.pages[Stage.EPOCHS]
    assert isinstance(page, EpochsStage)
    type_number(page.length, f"{length_s:g}")


def type_number(field: QDoubleSpinBox, text: str) -> None:
    field.setFocus()
    field.selectAll()
    QTest.keyClicks(field, text)
    QTest.keyClick(field, Qt.Key.Key_Return)


# Coming up


def test_the_notice_comes_on_first_start_and_once(place: Place) -> None:
    window = place.show()
    window.show_first_notice()
    notice = window.findChild(NoticeDialog)
    assert notice is not None
    place.wait(notice.isVisible)
    QTest.keyClick(notice, Qt.Key.Key_Escape)
    window.show_first_notice()
    again = [d for d in window.findChildren(NoticeDialog) if d.isVisible()]
    assert len(again) == 1, "leaving it by Escape is not reading it"
    QTest.mouseClick(again[0].read, Qt.MouseButton.LeftButton)
    assert load_settings(place.folders.settings).settings.notice_shown
    window.show_first_notice()
    assert not [d for d in window.findChildren(NoticeDialog) if d.isVisible()]


def test_recording_and_plan_open_and_everything_is_learned(place: Place) -> None:
    window = place.show(place.recording, place.plan)
    place.wait_learned(window)
    learned = window.bench.learned
    assert learned is not None
    # The ready sample has two trials with two pulses each (simulate.ready).
    assert len(learned.estimates.pulses) == 4
    assert window.traces is not None
    assert len(window.traces.plot.shown_names) == 12
    assert place.recording.name in window.windowTitle()
    assert not words_of(window)


def test_all_stages_open_by_rail_and_by_keys(place: Place) -> None:
    window = place.learned()
    for stage in Stage:
        click_stage(window, stage)
        assert window.session.stage is stage
        assert window.desk.settings.currentWidget() is window.desk.pages[stage].settings
        assert window.desk.pictures.currentWidget() is window.desk.pages[stage].picture
    for stage in Stage:
        press(f"stage_{stage.name.lower()}", window)
        assert window.session.stage is stage
    place.wait_quiet(window)


# Edits


def test_a_bad_channel_is_saved_undone_and_done_again(place: Place) -> None:
    window = place.learned()
    name = toggle_bad_by_mouse(window, 2)
    assert bad_of(window) == [name]
    place.wait(place.marks.exists)
    assert f'bad = ["{name}"]' in place.marks.read_text("utf-8")
    press("undo", window)
    assert bad_of(window) == []
    place.wait(lambda: window.session.marks_are_saved)
    assert name not in place.marks.read_text("utf-8")
    press("redo", window)
    assert bad_of(window) == [name]
    place.wait(lambda: window.session.marks_are_saved)
    assert f'bad = ["{name}"]' in place.marks.read_text("utf-8")


def test_another_gap_is_provisional_and_then_learned(place: Place) -> None:
    window = place.learned()
    press("stage_pulses", window)
    page = window.desk.pages[Stage.PULSES]
    assert isinstance(page, PulsesStage)
    before = window.bench.learned
    plan = window.session.plan
    assert plan is not None
    assert plan.pulses.window_ms is not None
    type_number(page.gap_card.gap_fields.stop, "21")
    assert window.session.plan is not None
    assert window.session.plan.pulses.window_ms == (plan.pulses.window_ms[0], 21.0)
    assert window.bench.provisional
    place.wait_learned(window)
    assert window.bench.learned is not before
    gaps = window.bench.learned.decision.geometry.gaps  # type: ignore[union-attr]
    lengths = {gap.stop - gap.start for gap in gaps}
    # Samples of 0.2 ms, both ends replaced; the sample's plan gives P3 a gap to 25 ms.
    assert {round((stop_ms - plan.pulses.window_ms[0]) * 5) + 1 for stop_ms in (21.0, 25.0)} <= lengths
    press("undo", window)
    assert window.session.plan.pulses.window_ms == plan.pulses.window_ms


def test_the_repaired_view_shows_other_pixels_at_a_pulse(place: Place) -> None:
    window = place.learned()
    press("next_pulse", window)
    assert window.traces is not None
    place.wait_quiet(window)
    recorded = window.traces.grab().toImage()
    press("show_repaired", window)
    place.wait(lambda: window.session.view.shown is Shown.REPAIRED)
    place.wait_quiet(window)
    assert window.traces.grab().toImage() != recorded
    press("show_both", window)
    place.wait(lambda: window.session.view.shown is Shown.BOTH)
    place.wait_quiet(window)


def test_another_length_of_epochs_is_counted_anew_and_saved(place: Place) -> None:
    window = place.learned()
    edit_of_plan(window, 0.8)
    assert window.session.plan is not None
    assert window.session.plan.epochs.length_s == 0.8
    assert not window.session.plan_is_saved
    assert "unsaved" in window.windowTitle()
    place.wait_learned(window)
    assert window.bench.learned is not None
    assert window.bench.learned.plan.epochs.length_s == 0.8
    press("save_plan", window)
    assert window.session.plan_is_saved
    assert read_plan(place.plan).plan.epochs.length_s == 0.8
    # Saving keeps the comments of the file.
    assert "# The study is invented" in place.plan.read_text("utf-8")


@pytest.mark.parametrize(("answer", "kept_s"), [("write over", 0.8), ("take theirs", 0.9), ("stay", 0.9)])
def test_a_plan_changed_on_disk_is_asked_about(place: Place, answer: str, kept_s: float) -> None:
    window = place.learned()
    text = place.plan.read_text("utf-8")
    edit_of_plan(window, 0.8)
    assert "length_s = 1.0" in text
    place.plan.write_text(text.replace("length_s = 1.0", "length_s = 0.9"), "utf-8")
    with answering(answer) as asked:
        press("save_plan", window)
    assert asked == ["The file was changed by somebody else"]
    assert read_plan(place.plan).plan.epochs.length_s == kept_s
    assert window.session.plan is not None
    assert window.session.plan.epochs.length_s == (0.9 if answer == "take theirs" else 0.8)


# Sets

STEM_SET = "sub-lt01_task-lantern_desc-mended"


def written(place: Place, window: MainWindow) -> ExportStage:
    """Write the set through the stage Export."""
    press("stage_export", window)
    page = window.desk.pages[Stage.EXPORT]
    assert isinstance(page, ExportStage)
    place.wait(page.write_button.isEnabled)
    QTest.mouseClick(page.write_button, Qt.MouseButton.LeftButton)
    return page


def test_a_set_is_written_and_checked_item_by_item(place: Place) -> None:
    window = place.learned()
    page = written(place, window)
    place.wait(lambda: window.status.cancel.isVisible())
    place.wait(lambda: page.runner.checked is not None and page.runner.job is None, 60_000)
    folder = place.sets / STEM_SET
    assert (folder / f"{STEM_SET}_epochs.h5").is_file()
    assert page.runner.checked is not None
    assert page.runner.checked.folder == folder
    assert len(page.runner.checked.items) > 5
    assert window.session.found.written is not None
    assert window.session.found.written.folder == folder
    assert not any(m.level is Level.PROBLEM for m in window.session.messages)
    place.wait_quiet(window)
    assert not window.status.cancel.isVisible()


def test_a_cancelled_run_leaves_no_half_set(place: Place) -> None:
    window = place.learned()
    page = written(place, window)
    place.wait(lambda: bool(window.children_.under_way))
    # The child says its first progress once it can be stopped politely.
    with place.qtbot.waitSignal(page.runner.progressed, timeout=20_000):
        pass
    QTest.mouseClick(window.status.cancel, Qt.MouseButton.LeftButton)
    place.wait(lambda: page.runner.job is None)
    assert "stopped" in words_of(window)
    assert not place.sets.exists() or not list(place.sets.iterdir())


def test_closing_while_a_set_is_written_asks(place: Place) -> None:
    window = place.learned()
    written(place, window)
    place.wait(lambda: bool(window.children_.under_way))
    with answering("stay") as asked:
        window.close()
    assert asked == ["Stop what is running?"]
    assert window.isVisible()
    with answering("stop and close") as asked:
        window.close()
    assert asked == ["Stop what is running?"]
    assert not window.isVisible()
    assert not window.children_.under_way
    assert not place.sets.exists() or not [p for p in place.sets.iterdir() if not p.name.startswith(".")]


# Leaving and coming back


@pytest.mark.parametrize("answer", ["stay", "save", "give up"])
def test_closing_with_an_unsaved_plan_asks(place: Place, answer: str) -> None:
    window = place.learned()
    edit_of_plan(window, 0.8)
    with answering(answer) as asked:
        window.close()
    assert asked == ["Save the plan before the window closes?"]
    assert window.isVisible() is (answer == "stay")
    assert read_plan(place.plan).plan.epochs.length_s == (0.8 if answer == "save" else 1.0)


def test_opened_again_everything_is_there(place: Place) -> None:
    window = place.learned()
    name = toggle_bad_by_mouse(window, 0)
    edit_of_plan(window, 0.8)
    press("save_plan", window)
    window.close()
    assert name in place.marks.read_text("utf-8")
    again = place.show()
    recent = again.bench.settings.recent
    assert [(Path(one.recording), Path(one.plan)) for one in recent] == [(place.recording, place.plan)]
    buttons = [b for b in again.desk.findChildren(QPushButton) if place.recording.name in b.text()]
    assert buttons, "the start page lists the recent recording"
    QTest.mouseClick(buttons[0], Qt.MouseButton.LeftButton)
    place.wait_learned(again)
    assert again.session.marks.bad == (name,)
    assert again.session.plan is not None
    assert again.session.plan.epochs.length_s == 0.8
    assert again.session.next_undo == ""
    assert not again.session.recovery


def test_a_second_window_on_the_same_recording_is_warned(place: Place) -> None:
    place.learned()
    second = place.show(place.recording, place.plan)
    place.wait_learned(second)
    assert "open in another window" in words_of(second)


KILLED = """
import os, signal, sys
from dataclasses import replace
from pathlib import Path
from PySide6.QtCore import QTimer
from PySide6.QtWidgets import QApplication
from pulsemend.window.main_window import Folders
from pulsemend.window.program import open_window
folder = Path(sys.argv[1])
user = folder / "user"
app = QApplication([])
window = open_window(
    Folders(user / "data", user / "state", user / "cache", user / "settings.json"),
    folder / "sub-lt01_task-lantern_eeg.vhdr",
    folder / "lantern.toml",
)
window.show()
def edit():
    session = window.session
    if session.plan is None or session.recording is None:
        return
    shorter = replace(session.plan.epochs, length_s=0.8)
    session.edit_plan("Epochs 0.8 s long", replace(session.plan, epochs=shorter))
    os.kill(os.getpid(), signal.SIGKILL)
timer = QTimer()
timer.timeout.connect(edit)
timer.start(10)
app.exec()
"""


def test_work_of_a_killed_window_comes_back(place: Place) -> None:
    killed = subprocess.run([sys.executable, "-c", KILLED, str(place.folder)], check=False, timeout=60)
    assert killed.returncode == -signal.SIGKILL
    window = place.show()
    with answering("bring back"):
        window.opener.open(place.recording, place.plan)
        place.wait_learned(window)
    assert window.session.plan is not None
    assert window.session.plan.epochs.length_s == 0.8
    assert not window.session.plan_is_saved
    assert words_of(window), "a word about it"
    press("undo", window)
    assert window.session.plan.epochs.length_s == 1.0


# What is opened


def dropped_on(window: MainWindow, *paths: Path) -> None:
    data = QMimeData()
    data.setUrls([QUrl.fromLocalFile(str(path)) for path in paths])
    how = (Qt.DropAction.CopyAction, data, Qt.MouseButton.LeftButton, Qt.KeyboardModifier.NoModifier)
    entering = QDragEnterEvent(QPoint(600, 300), *how)
    QApplication.sendEvent(window, entering)
    assert entering.isAccepted()
    QApplication.sendEvent(window, QDropEvent(QPointF(600, 300), *how))


@pytest.mark.parametrize("what", ["both", "folder", "one after the other"])
def test_files_are_dropped(place: Place, what: str) -> None:
    window = place.show()
    if what == "both":
        dropped_on(window, place.recording, place.plan)
    elif what == "folder":
        dropped_on(window, place.folder)
    else:
        dropped_on(window, place.recording)
        place.wait(lambda: window.session.recording is not None)
        dropped_on(window, place.plan)
    place.wait_learned(window)
    assert window.session.plan_path == place.plan


def test_a_broken_file_is_told_in_words_and_the_window_goes_on(place: Place) -> None:
    window = place.learned()
    broken = place.another_recording()
    broken.write_text("nothing of use\n", "utf-8")
    dropped_on(window, broken)
    place.wait(lambda: bool(window.session.messages))
    message = window.session.messages[-1]
    assert message.level is Level.PROBLEM
    assert broken.name in message.text
    assert "Traceback" not in message.text
    assert window.banner.isVisible()
    assert window.session.recording is not None
    assert window.session.recording.path == place.recording
    toggle_bad_by_mouse(window, 1)
    assert window.session.marks.bad


def test_a_recording_without_markers(place: Place) -> None:
    markers = place.recording.with_suffix(".vmrk")
    lines = markers.read_text("utf-8").splitlines()
    kept = [line for line in lines if not line.startswith("Mk") or line.startswith("Mk1=New Segment")]
    markers.write_text("\n".join(kept) + "\n", "utf-8")
    window = place.show(place.recording, place.plan)
    place.wait(lambda: window.bench.problem != "" or window.bench.learned is not None)
    for stage in Stage:
        click_stage(window, stage)
    place.wait_quiet(window)
    assert window.session.recording is not None
    assert not window.session.recording.facts.markers


def test_a_recording_read_through_the_reader_library(place: Place, tmp_path: Path) -> None:
    at = tmp_path / "edf"
    at.mkdir()
    edf = FORMATS["EDF+"](at, [(249, "Stimulus", "pulse")])
    window = place.show(edf.path)
    place.wait(lambda: window.session.recording is not None)
    assert window.traces is not None
    assert window.traces.plot.shown_names == ["Fz", "C3", "C4", "VEOG"]
    for stage in Stage:
        click_stage(window, stage)
    press("draft_plan", window)
    # One code of one pulse shows no trial; whether a plan comes of it or words, the window goes on.
    place.wait(lambda: window.session.plan is not None or bool(words_of(window)))
    place.wait_quiet(window)


@pytest.mark.slow
def test_another_recording_replaces_the_first_cleanly(place: Place) -> None:
    window = place.learned()
    for stage in Stage:
        click_stage(window, stage)
    place.wait_quiet(window)
    before = census(window)
    second = place.another_recording()
    name = toggle_bad_by_mouse(window, 3)
    old_traces = window.traces
    for path in (second, place.recording, second):
        dropped_on(window, path)
        place.wait(lambda path=path: window.session.recording.path == path)  # type: ignore[misc, union-attr]
        place.wait_learned(window)
        place.wait_quiet(window)
    assert name in place.marks.read_text("utf-8")
    assert window.session.marks.bad == ()
    assert window.session.next_undo == ""
    assert window.traces is not old_traces
    after = census(window)
    assert after["subscriptions"] == before["subscriptions"]
    assert after["threads"] == before["threads"]
    assert after["timers"] <= before["timers"]
    assert after["windows"] == before["windows"]


# Looks


def test_256_channels_with_long_names_at_any_size(place: Place) -> None:
    names = [
        f"{number:03d}-an-electrode-with-an-extraordinarily-long-name-at-the-le" for number in range(256)
    ]
    assert len(names[0]) == 60
    header = many_channels(place, names)
    window = place.show(header, place.plan)
    place.wait(lambda: window.session.recording is not None)
    window.resize(900, 600)
    for stage in Stage:
        click_stage(window, stage)
        assert window.width() == 900, f"{stage} widens the window to {window.width()}"
    assert window.traces is not None
    wheel(window.traces.plot, QPoint(200, 100), QPoint(0, -120))
    place.wait_quiet(window)


def many_channels(place: Place, names: list[str]) -> Path:
    """Write two seconds of many channels as a triplet."""
    header = place.folder / "sub-lt09_task-lantern_eeg.vhdr"
    paths = TripletPaths.beside(header)
    values = np.random.default_rng(1).normal(0, 200, (10_000, len(names))).astype(np.int16)
    with TripletWriter(paths, TripletFormat(tuple(names), 5000.0, 0.1, "FCz"), ()) as writer:
        writer.write(values)
    return header


def cut_off(window: MainWindow) -> list[str]:
    return [
        f"{type(one).__name__} {one.text()!r}"
        for one in window.findChildren(QPushButton)
        if one.isVisible() and one.width() < one.minimumSizeHint().width()
    ]


@pytest.mark.parametrize(("percent", "width", "height"), [(100, 900, 600), (200, 1280, 800)])
def test_small_windows_and_large_text_cut_nothing_off(
    place: Place, percent: int, width: int, height: int
) -> None:
    window = place.learned()
    window.change_settings(replace(window.bench.settings, text_percent=percent))
    window.apply_looks()
    window.resize(width, height)
    for stage in Stage:
        click_stage(window, stage)
        place.wait_quiet(window)
        # A name that a worker finds out widens its button at the next layout, not at once.
        place.qtbot.waitUntil(lambda: not cut_off(window))
        assert window.size() == QSize(width, height)
        assert window.rail.width() >= window.rail.sizeHint().width()


# Closing


def test_closing_leaves_nothing(place: Place) -> None:
    # Windows of other tests may still wait for the collector of cycles.
    earlier = len(main_windows())
    window = place.learned()
    for stage in Stage:
        click_stage(window, stage)
    place.wait_quiet(window)
    gone: list[str] = []
    window.destroyed.connect(lambda: gone.append("window"))
    session, threads = window.session, threading.active_count()
    place.windows.remove(window)
    window.close()
    forget(window)
    assert gone == ["window"]
    assert n_callbacks(session) == 0
    assert threading.active_count() == threads - 2
    assert len(main_windows()) <= earlier
    # Nothing is left to be recovered, and nothing locked.
    assert not [p for p in place.folders.data.rglob("*") if p.is_file()]
    assert not [p for p in place.folders.state.rglob("*") if p.is_file()]


def main_windows() -> list[MainWindow]:
    return [widget for widget in QApplication.topLevelWidgets() if isinstance(widget, MainWindow)]


PROGRAM = """
import sys
from pathlib import Path
from PySide6.QtCore import QTimer
from pulsemend.session.found import Stage
from pulsemend.window import program
real = program.open_window
def opened(*arguments):
    window = real(*arguments)
    def close():
        if window.bench.learned is not None:
            for stage in Stage:
                window.session.open_stage(stage)
            window.close()
    window.closer = QTimer(window)
    window.closer.timeout.connect(close)
    window.closer.start(20)
    return window
program.open_window = opened
sys.exit(program.run(Path(sys.argv[1]), Path(sys.argv[2])))
"""


@pytest.mark.slow
def test_the_program_ends_without_a_word(place: Place) -> None:
    ended = subprocess.run(
        [sys.executable, "-X", "dev", "-c", PROGRAM, str(place.recording), str(place.plan)],
        capture_output=True,
        text=True,
        timeout=100,
        check=False,
        env=os.environ | {"QT_QPA_PLATFORM": "offscreen"},
    )
    said = [line for line in ended.stderr.splitlines() if "propagateSizeHints" not in line]
    assert (ended.returncode, said) == (0, [])


FIRST_FRAME = """
import sys
from pathlib import Path
from pulsemend.window import program
from pulsemend.window.traces.canvas import TraceView
real = TraceView.paintEvent
def paint(self, event):
    real(self, event)
    print([name for name in ("mne", "scipy.signal") if name in sys.modules], flush=True)
    sys.stdout.flush()
    import os
    os._exit(0)
TraceView.paintEvent = paint
program.run(Path(sys.argv[1]), Path(sys.argv[2]))
"""


def test_the_first_frame_waits_for_no_large_library(place: Place) -> None:
    ended = subprocess.run(
        [sys.executable, "-c", FIRST_FRAME, str(place.recording), str(place.plan)],
        capture_output=True,
        text=True,
        timeout=100,
        check=False,
        env=os.environ | {"QT_QPA_PLATFORM": "offscreen"},
    )
    assert ended.stdout == "[]\n", ended.stderr
