"""The painted spectrum: axes, reading by pointer and keys, and what it says where there is nothing."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from PySide6.QtCore import QPoint, Qt
from PySide6.QtTest import QTest
from pytestqt.qtbot import QtBot

from pulsemend.window.spectrum_plot import Curve, SpectrumPicture, SpectrumPlot, Spread
from pulsemend.window.theme import DARK, LIGHT

Values = NDArray[np.float64]
HZ: Values = np.arange(1, 241, dtype=np.float64) * 0.5
ONE_OVER_F: Values = 10.0 / HZ


def times(factor: float) -> Values:
    scaled: Values = ONE_OVER_F * factor
    return scaled


def picture(*names: str, line_hz: float = 50.0) -> SpectrumPicture:
    spread = Spread(*(times(factor) for factor in (0.5, 0.8, 1.0, 1.3, 2.0)))
    curves = tuple(Curve(name, times(k + 2), bad=k == 1) for k, name in enumerate(names))
    return SpectrumPicture(HZ, spread, curves, line_hz)


def make(qtbot: QtBot, shown: SpectrumPicture, size: tuple[int, int] = (600, 260)) -> SpectrumPlot:
    plot = SpectrumPlot(LIGHT)
    qtbot.addWidget(plot)
    plot.resize(*size)
    plot.show_picture(shown)
    plot.show()
    qtbot.waitExposed(plot)
    return plot


def test_axes_are_logarithmic_and_hold_everything(qtbot: QtBot) -> None:
    axes = make(qtbot, picture("C3")).axes()
    assert axes is not None
    assert (axes.low_hz, axes.high_hz) == (0.5, 120.0)
    # 1-2-5 edges around 0.5 x 10/120 and 2 x 10/0.5.
    assert (axes.low, axes.high) == pytest.approx((0.02, 50.0))
    octaves = np.diff(axes.x(np.array([1.0, 2.0, 4.0, 8.0])))
    np.testing.assert_allclose(octaves, octaves[0])
    decades = np.diff(axes.y(np.array([0.1, 1.0, 10.0])))
    np.testing.assert_allclose(decades, decades[0])
    assert decades[0] < 0
    assert axes.hz(float(axes.x(10.0))) == pytest.approx(10.0)


def test_the_pointer_reads_off_every_curve(qtbot: QtBot) -> None:
    plot = make(qtbot, picture("C3", "C4"))
    axes = plot.axes()
    assert axes is not None
    QTest.mouseMove(plot, QPoint(round(float(axes.x(10.0))), round(axes.area.center().y())))
    qtbot.waitUntil(lambda: bool(plot.reading()))
    assert plot.reading() == ["10.0 Hz", "median: 1 µV/√Hz", "C3: 2 µV/√Hz", "C4: 3 µV/√Hz"]
    assert plot.accessibleDescription() == "; ".join(plot.reading())
    QTest.mouseMove(plot, QPoint(1, 1))
    qtbot.waitUntil(lambda: not plot.reading())


def test_keys_read_off_too(qtbot: QtBot) -> None:
    plot = make(qtbot, picture())
    plot.setFocus()
    for key, expected in (
        (Qt.Key.Key_Right, "0.5 Hz"),
        (Qt.Key.Key_Right, "1.0 Hz"),
        (Qt.Key.Key_End, "120.0 Hz"),
        (Qt.Key.Key_Right, "120.0 Hz"),
        (Qt.Key.Key_Left, "119.5 Hz"),
        (Qt.Key.Key_Home, "0.5 Hz"),
        (Qt.Key.Key_Left, "0.5 Hz"),
    ):
        QTest.keyClick(plot, key)
        assert plot.reading()[0] == expected


def test_a_reading_does_not_outlive_its_frequencies(qtbot: QtBot) -> None:
    plot = make(qtbot, picture())
    QTest.keyClick(plot, Qt.Key.Key_End)
    plot.show_picture(SpectrumPicture(HZ[:100], None, (Curve("C3", ONE_OVER_F[:100]),)))
    assert plot.reading() == []


def test_a_dead_channel_and_a_loud_one_do_not_break_the_axes(qtbot: QtBot) -> None:
    dead, loud = Curve("dead", np.zeros(HZ.size)), Curve("loud", np.full(HZ.size, 1e7))
    axes = make(qtbot, SpectrumPicture(HZ, None, (dead, loud))).axes()
    assert axes is not None
    assert 0 < axes.low < axes.high
    assert np.isfinite(axes.y(dead.values)).all()
    only = make(qtbot, SpectrumPicture(HZ, None, (dead,)))
    assert np.isfinite(only.axes().y(dead.values)).all()  # type: ignore[union-attr]
    only.grab()


def test_the_line_frequency_is_marked_only_where_there_is_one(qtbot: QtBot) -> None:
    marked, unmarked = make(qtbot, picture()), make(qtbot, picture(line_hz=0.0))
    axes = marked.axes()
    assert axes is not None
    colour = LIGHT.attention.lower()

    def columns(plot: SpectrumPlot, hz: float) -> set[str]:
        image, x = plot.grab().toImage(), round(float(axes.x(hz)))
        rows = range(round(axes.area.top()), round(axes.area.bottom()))
        return {image.pixelColor(x + off, y).name() for off in (-1, 0, 1) for y in rows}

    assert colour in columns(marked, 50.0)
    assert colour in columns(marked, 100.0)
    assert colour not in columns(marked, 75.0)
    assert colour not in columns(unmarked, 50.0)


@pytest.mark.parametrize("size", [(220, 130), (420, 200), (1600, 400)])
def test_it_paints_at_any_size_and_in_any_theme(qtbot: QtBot, size: tuple[int, int]) -> None:
    names = ("a name of sixty characters, as some amplifiers write them, 60", *"ABCDE")
    plot = make(qtbot, picture(*names), size)
    QTest.keyClick(plot, Qt.Key.Key_Right)
    light = plot.grab().toImage()
    plot.set_theme(DARK)
    assert plot.grab().toImage() != light
    axes = plot.axes()
    assert axes is not None
    assert axes.area.width() > 100
    assert axes.area.height() > 60


def test_a_message_stands_where_there_is_nothing(qtbot: QtBot) -> None:
    plot = make(qtbot, SpectrumPicture(message="Show more time."))
    assert plot.axes() is None
    assert plot.accessibleDescription() == "Show more time."
    QTest.keyClick(plot, Qt.Key.Key_Right)
    assert plot.reading() == []
