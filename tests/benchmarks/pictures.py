"""Pictures of the real window: every stage in both themes and two sizes, and the states that are easily ugly.

    python tests/benchmarks/pictures.py FOLDER [--guide]

Writes PNG files into FOLDER; runs without a screen. With --guide also the picture that the README shows.
Look at all of them before a release: nothing may be cut off, overlap, or be unreadable in light or dark.
"""

from __future__ import annotations

import argparse
import os
import shutil
import tempfile
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")

import numpy as np
from PySide6.QtCore import QEventLoop, Qt, QTimer
from PySide6.QtGui import QImage
from PySide6.QtWidgets import QApplication

import pulsemend
from pulsemend.progress import finish
from pulsemend.session.found import Stage
from pulsemend.session.settings import ThemeChoice
from pulsemend.session.view import Shown
from pulsemend.simulate.lantern import LanternSpec
from pulsemend.simulate.sample import write_sample
from pulsemend.simulate.write_triplet import TripletFormat, TripletPaths, TripletWriter
from pulsemend.window.main_window import Folders, MainWindow
from pulsemend.window.program import open_window
from pulsemend.window.stages.export import ExportStage

SIZES = ((1280, 800), (1920, 1080))
THEMES = (ThemeChoice.LIGHT, ThemeChoice.DARK)
QUIET_MS = 250
"""Longer than edits and views settle before they are worked on."""
WAIT_MS = 60_000


class Studio:
    """Opens windows and takes their pictures.

    Parameters
    ----------
    into : Path
        Gets the pictures.
    scratch : Path
        Gets recordings and the user's folders.
    """

    def __init__(self, into: Path, scratch: Path) -> None:
        self._into = into
        self._scratch = scratch
        self._windows = 0
        into.mkdir(parents=True, exist_ok=True)

    def open(self, recording: Path | None, plan: Path | None) -> MainWindow:
        """Open a window and wait until everything is known and drawn."""
        self._windows += 1
        user = self._scratch / f"user{self._windows}"
        folders = Folders(user / "data", user / "state", user / "cache", user / "settings.json")
        window = open_window(folders, recording, plan)
        window.resize(*SIZES[0])
        window.show()
        wait_quiet(window)
        return window

    def take(self, window: MainWindow, name: str, *, sizes: tuple[tuple[int, int], ...] = SIZES) -> None:
        """Take pictures in both themes and all sizes."""
        for theme in THEMES:
            window.handlers.set_theme(theme.value)
            for width, height in sizes:
                window.resize(width, height)
                wait_quiet(window)
                window.grab().save(str(self._into / f"{name}-{theme.value}-{width}x{height}.png"))


def wait_until(condition: Callable[[], bool], most_ms: int = WAIT_MS) -> None:
    """Let the window live until something holds."""
    loop = QEventLoop()
    looking = QTimer()

    def look() -> None:
        if condition():
            loop.quit()

    looking.timeout.connect(look)
    looking.start(20)
    late = QTimer()
    late.setSingleShot(True)
    late.timeout.connect(loop.quit)
    late.start(most_ms)
    loop.exec()
    if not condition():
        raise TimeoutError("the window did not come to rest")


def wait_quiet(window: MainWindow) -> None:
    """Wait until no worker and no child has had work for a while."""
    loop = QEventLoop()
    rest = QTimer()
    rest.setSingleShot(True)
    rest.setInterval(QUIET_MS)

    def again() -> None:
        if window.bench.jobs.under_way or window.children_.under_way:
            rest.stop()
        else:
            rest.start()

    rest.timeout.connect(loop.quit)
    window.bench.jobs.changed.connect(again)
    again()
    loop.exec()
    window.bench.jobs.changed.disconnect(again)


def close(window: MainWindow) -> None:
    """Close a window with nothing unsaved."""
    window.close()
    window.deleteLater()


def stages(studio: Studio, recording: Path, plan: Path) -> None:
    """Every stage with the sample; a picked channel, a bad one, the repaired signal at a pulse."""
    window = studio.open(recording, plan)
    session = window.session
    session.edit_marks("C3 bad", replace(session.marks, bad=("C3",)))
    session.set_view(replace(session.view, width_s=4.0, shown=Shown.BOTH))
    window.handlers.next_pulse()
    wait_quiet(window)
    for stage in Stage:
        session.open_stage(stage)
        studio.take(window, f"stage-{stage.name.lower()}")
    close(window)


def one_for_the_guide(studio: Studio, recording: Path, plan: Path) -> None:
    """The picture in the README: the stage Pulses, recorded and repaired, in light colours."""
    window = studio.open(recording, plan)
    session = window.session
    session.set_view(replace(session.view, width_s=1.2, shown=Shown.BOTH, row_uv=100.0))
    window.handlers.next_pulse()
    session.open_stage(Stage.PULSES)
    window.handlers.set_theme(ThemeChoice.LIGHT.value)
    wait_quiet(window)
    picture = few_colours(window.grab().toImage())
    picture.save(str(Path(pulsemend.__file__).parent / "guide" / "window.png"))
    close(window)


def few_colours(image: QImage) -> QImage:
    """Keep the 256 most frequent colours, and for others the nearest: half the bytes."""
    plain = image.convertToFormat(QImage.Format.Format_RGB32)
    values = np.array(plain.constBits(), np.uint8).view(np.uint32)
    colours, counts = np.unique(values, return_counts=True)
    frequent = colours[np.argsort(counts)[::-1][:256]]
    flat = Qt.ImageConversionFlag.ThresholdDither | Qt.ImageConversionFlag.AvoidDither
    return plain.convertToFormat(QImage.Format.Format_Indexed8, [int(one) for one in frequent], flat)


def nothing_open(studio: Studio) -> None:
    """The start page, and each stage without a recording."""
    window = studio.open(None, None)
    for stage in Stage:
        window.session.open_stage(stage)
        studio.take(window, f"nothing-{stage.name.lower()}", sizes=SIZES[:1])
    close(window)


def no_events(studio: Studio, recording: Path, plan: Path) -> None:
    """A recording without any marker."""
    markers = recording.with_suffix(".vmrk")
    lines = markers.read_text("utf-8").splitlines()
    markers.write_text("\n".join(line for line in lines if not line.startswith("Mk")) + "\n", "utf-8")
    window = studio.open(recording, plan)
    for stage in Stage:
        window.session.open_stage(stage)
        studio.take(window, f"no-events-{stage.name.lower()}", sizes=SIZES[:1])
    close(window)


def many_channels(studio: Studio, folder: Path, plan: Path) -> None:
    """256 channels with names of 60 letters."""
    names = tuple(f"{n:03d}-an-electrode-with-an-extraordinarily-long-name-at-the-le" for n in range(256))
    header = folder / "sub-lt09_task-lantern_eeg.vhdr"
    values = np.random.default_rng(1).normal(0, 200, (20_000, 256)).astype(np.int16)
    with TripletWriter(TripletPaths.beside(header), TripletFormat(names, 2000.0, 0.1), ()) as writer:
        writer.write(values)
    window = studio.open(header, plan)
    for stage in (Stage.RECORDING, Stage.PULSES, Stage.EXPORT):
        window.session.open_stage(stage)
        studio.take(window, f"many-{stage.name.lower()}", sizes=SIZES[:1])
    close(window)


def broken_file(studio: Studio, recording: Path, plan: Path) -> None:
    """A recording whose header says nothing."""
    broken = recording.with_name("sub-lt07_task-lantern_eeg.vhdr")
    broken.write_text("nothing of use\n", "utf-8")
    window = studio.open(broken, plan)
    studio.take(window, "broken-alone", sizes=SIZES[:1])
    window.opener.open(recording, None)
    wait_until(lambda: window.session.recording is not None)
    window.opener.open(broken, None)
    wait_quiet(window)
    studio.take(window, "broken-beside-a-good-one", sizes=SIZES[:1])
    close(window)


def cancelled_job(studio: Studio, recording: Path, plan: Path) -> None:
    """Writing a set: while it runs, and after it was stopped."""
    window = studio.open(recording, plan)
    window.session.open_stage(Stage.EXPORT)
    wait_quiet(window)
    page = window.desk.pages[Stage.EXPORT]
    if not isinstance(page, ExportStage):
        raise TypeError("the stage Export has another page")
    page.write()
    wait_until(lambda: page.runner.job is not None and page.bar.maximum() > 0)
    window.grab().save(str(studio._into / "running.png"))
    window.stop_jobs()
    wait_until(lambda: page.runner.job is None)
    studio.take(window, "cancelled", sizes=SIZES[:1])
    page.write()
    wait_until(lambda: page.runner.checked is not None and page.runner.job is None)
    studio.take(window, "written")
    close(window)


def large_text(studio: Studio, recording: Path, plan: Path) -> None:
    """Text twice as large, and a small window."""
    window = studio.open(recording, plan)
    window.change_settings(replace(window.bench.settings, text_percent=200))
    for stage in Stage:
        window.session.open_stage(stage)
        studio.take(window, f"text-200-{stage.name.lower()}", sizes=SIZES[:1])
    window.change_settings(replace(window.bench.settings, text_percent=100))
    window.session.open_stage(Stage.PULSES)
    studio.take(window, "small", sizes=((900, 600),))
    close(window)


def main() -> None:
    """Take all pictures."""
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("folder", type=Path)
    parser.add_argument("--guide", action="store_true", help="also write the README's picture")
    options = parser.parse_args()
    application = QApplication([])
    with tempfile.TemporaryDirectory() as scratch:
        place = Path(scratch)
        sample = finish(write_sample(place / "sample", spec=LanternSpec(trials=8)))
        recording, plan = sample.recordings[0], sample.plan
        studio = Studio(options.folder, place)
        if options.guide:
            one_for_the_guide(studio, recording, plan)
        stages(studio, recording, plan)
        nothing_open(studio)
        large_text(studio, recording, plan)
        cancelled_job(studio, recording, plan)
        many_channels(studio, place / "sample", plan)
        broken_file(studio, recording, plan)
        bare = place / "bare"
        shutil.copytree(place / "sample", bare, ignore=shutil.ignore_patterns("marks", "sets"))
        no_events(studio, bare / recording.name, bare / plan.name)
    del application


if __name__ == "__main__":
    main()
