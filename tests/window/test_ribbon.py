"""The session ribbon: what it shows, and the view moved by it."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from PySide6.QtCore import QPoint, Qt
from PySide6.QtGui import QColor, QImage
from PySide6.QtTest import QTest
from pytestqt.qtbot import QtBot

from pulsemend.model.vocabulary import Role
from pulsemend.session.view import View
from pulsemend.window import envelope
from pulsemend.window.ribbon import Ribbon
from pulsemend.window.theme import DARK, LIGHT
from pulsemend.window.traces.model import Events, Overlays
from pulsemend.window.traces.source import TraceSource
from support.array_recording import ArrayRecording
from support.hands import move, pixels, wheel
from support.trace_cases import DURATION_S, RATE_HZ, Model, names_of, overlays, pyramid_of, signal

Key, Mod, Button = Qt.Key, Qt.KeyboardModifier, Qt.MouseButton
WIDTH = 800


class Shown:
    """A ribbon on the screen; its signal is ten times as strong between 60 and 70 s."""

    def __init__(self, qtbot: QtBot, folder: Path) -> None:
        samples = signal(8)
        samples -= samples[:1]
        samples[60_000:70_000] *= 10
        self.recording = ArrayRecording(samples, folder / "samples", RATE_HZ)
        self.folder = folder
        self.source = TraceSource(self.recording)
        self.model = Model(View(40.0, 10.0, rows=names_of(self.recording)))
        self.ribbon = Ribbon(self.model, self.source, LIGHT)
        qtbot.addWidget(self.ribbon)
        self.ribbon.resize(WIDTH, self.ribbon.sizeHint().height())
        with qtbot.waitExposed(self.ribbon):
            self.ribbon.show()

    def image(self) -> QImage:
        return self.ribbon.grab().toImage()

    def envelope(self) -> NDArray[np.int_]:
        """Pixels of the envelope's colour in every column."""
        wanted = QColor(LIGHT.envelope).rgb() & 0xFFFFFF
        heights: NDArray[np.int_] = (pixels(self.image()) & 0xFFFFFF == wanted).sum(axis=0)
        return heights


@pytest.fixture
def shown(qtbot: QtBot, tmp_path: Path) -> Shown:
    return Shown(qtbot, tmp_path)


def x_of(time_s: float) -> int:
    return round(time_s / DURATION_S * WIDTH)


def test_the_envelope_is_coarse_at_once_and_exact_with_the_pyramid(shown: Shown, qtbot: QtBot) -> None:
    assert not shown.ribbon.exact
    qtbot.waitUntil(lambda: bool((shown.envelope()[x_of(61) : x_of(69)] > 20).all()), timeout=5000)
    pyramid = pyramid_of(shown.recording, shown.folder)
    shown.ribbon.set_pyramid(pyramid)
    assert shown.ribbon.exact
    heights = shown.envelope()
    loud, quiet = heights[x_of(60) + 1 : x_of(70) - 1], heights[: x_of(39)]
    # The loud tenth of the columns decides what fills the 26 pixels; they differ by less than 15 %.
    assert loud.min() >= 0.85 * 26
    assert 2 <= quiet.max() < 6


def test_the_envelope_passes_over_pulses(tmp_path: Path) -> None:
    samples = signal(6)
    samples -= samples[:1]
    with_pulses = samples.copy()
    with_pulses[::400] = 30_000
    ranges = [
        envelope.exact(
            pyramid_of(ArrayRecording(one, tmp_path / name, RATE_HZ), tmp_path),
            100,
            np.arange(6),
            np.full(6, 0.1),
        )
        for name, one in (("with", with_pulses), ("without", samples))
    ]
    # One piece of 64 samples in six holds a pulse.
    np.testing.assert_allclose(ranges[0], ranges[1], rtol=0.1)


def test_envelope_of_a_recording_shorter_than_the_ribbon_is_wide(tmp_path: Path) -> None:
    pyramid = pyramid_of(ArrayRecording(signal(3, 50), tmp_path / "short", RATE_HZ), tmp_path)
    ranges = envelope.exact(pyramid, 300, np.arange(3), np.full(3, 0.1))
    assert ranges.shape == (300,)
    assert np.isfinite(ranges).all()


def test_a_click_centres_the_view(shown: Shown) -> None:
    QTest.mouseClick(shown.ribbon, Button.LeftButton, Mod.NoModifier, QPoint(x_of(75), 30))
    assert shown.model.view.start_s == pytest.approx(70.0, abs=0.1)
    QTest.mouseClick(shown.ribbon, Button.LeftButton, Mod.NoModifier, QPoint(1, 30))
    assert shown.model.view.start_s == 0.0


def test_the_frame_is_dragged_from_where_it_was_taken(shown: Shown) -> None:
    QTest.mousePress(shown.ribbon, Button.LeftButton, Mod.NoModifier, QPoint(x_of(42), 30))
    assert shown.model.view.start_s == 40.0
    move(shown.ribbon, QPoint(x_of(62), 30), Button.LeftButton)
    assert shown.model.view.start_s == pytest.approx(60.0, abs=0.01)
    move(shown.ribbon, QPoint(5000, 30), Button.LeftButton)
    assert shown.model.view.start_s == DURATION_S - 10.0
    QTest.mouseRelease(shown.ribbon, Button.LeftButton, Mod.NoModifier, QPoint(5000, 30))
    move(shown.ribbon, QPoint(x_of(20), 30))
    assert shown.model.view.start_s == DURATION_S - 10.0


def test_the_wheel_moves_and_zooms(shown: Shown) -> None:
    wheel(shown.ribbon, QPoint(300, 30), angle=QPoint(0, -120))
    assert shown.model.view.start_s == pytest.approx(45.0)
    wheel(shown.ribbon, QPoint(300, 30), angle=QPoint(0, 120), modifiers=Mod.ControlModifier)
    assert (shown.model.view.start_s, shown.model.view.width_s) == pytest.approx((46.0, 8.0))


@pytest.mark.parametrize(
    ("key", "start_s"),
    [
        (Key.Key_Right, 41.0), (Key.Key_Left, 39.0), (Key.Key_PageDown, 50.0), (Key.Key_PageUp, 30.0),
        (Key.Key_Home, 0.0), (Key.Key_End, 90.0),
    ],
)  # fmt: skip
def test_keys_move_the_view(shown: Shown, key: Qt.Key, start_s: float) -> None:
    QTest.keyClick(shown.ribbon, key)
    assert shown.model.view.start_s == pytest.approx(start_s)


def test_a_narrow_view_keeps_a_frame_that_can_be_taken(shown: Shown) -> None:
    for start_s in (0.0, 50.0, DURATION_S - 0.02):
        shown.model.set_view(replace(shown.model.view, start_s=start_s, width_s=0.02))
        frame = shown.ribbon.frame()
        assert frame.width() >= 6
        assert frame.left() >= 0
        assert frame.right() <= WIDTH
        assert frame.left() - 1 <= x_of(start_s) <= frame.right() + 1


def test_the_frame_follows_the_view(shown: Shown) -> None:
    shown.model.set_view(replace(shown.model.view, start_s=20.0, width_s=30.0))
    frame = shown.ribbon.frame()
    assert (frame.left(), frame.right()) == pytest.approx((x_of(20), x_of(50)), abs=1)
    assert shown.ribbon.accessibleDescription() == "In view: 0:20 to 0:50 of 1:40"


def test_events_and_bad_stretches_are_shown(shown: Shown) -> None:
    shown.ribbon.set_overlays(overlays())
    colours = pixels(shown.image()) & 0xFFFFFF
    pulse = QColor(LIGHT.roles[Role.PULSE]).rgb() & 0xFFFFFF
    at = np.flatnonzero((colours[:16] == pulse).any(axis=0))
    for time_s in (5.0, 95.0):
        assert np.abs(at - x_of(time_s)).min() <= 1
    bad = QColor(LIGHT.bad_stretch).rgb() & 0xFFFFFF
    where = np.flatnonzero((colours[16:46] == bad).any(axis=0))
    assert where.min() == pytest.approx(x_of(12.0), abs=1)
    assert where.max() == pytest.approx(x_of(13.0), abs=1)


def test_thousands_of_events_get_a_lane_per_role(shown: Shown) -> None:
    times_s = np.sort(np.random.default_rng(1).uniform(0, DURATION_S, 6000))
    roles = tuple(Role.CUE if number % 3 else Role.PULSE for number in range(6000))
    shown.ribbon.set_overlays(Overlays(Events(times_s, roles, ("",) * 6000, tuple(range(6000)))))
    strip = (pixels(shown.image()) & 0xFFFFFF)[1:16]
    rows = {
        role: np.flatnonzero((strip == (QColor(LIGHT.roles[role]).rgb() & 0xFFFFFF)).any(axis=1))
        for role in (Role.CUE, Role.PULSE)
    }
    assert rows[Role.CUE].max() < rows[Role.PULSE].min()


def test_themes_focus_and_names(shown: Shown) -> None:
    light = shown.image()
    shown.ribbon.set_theme(DARK)
    dark = shown.image()
    assert light.pixelColor(150, 55).lightness() > 200 > dark.pixelColor(150, 55).lightness()
    shown.ribbon.clearFocus()
    without = pixels(shown.image())
    shown.ribbon.setFocus()
    assert (pixels(shown.image()) != without).any()
    assert shown.ribbon.accessibleName() == "Whole recording"


def test_the_ribbon_leaves_its_model_alone_when_it_is_gone(shown: Shown, qtbot: QtBot) -> None:
    other = Ribbon(shown.model, shown.source, LIGHT)
    assert len(shown.model.listeners) == 2
    other.deleteLater()
    qtbot.waitUntil(lambda: len(shown.model.listeners) == 1)
