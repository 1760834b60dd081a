"""Curves and bands of the pulse picture, pixel by pixel."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from PySide6.QtCore import QRectF, Qt
from PySide6.QtGui import QColor, QImage, QPainter, QPen
from pytestqt.qtbot import QtBot

from pulsemend.window.pulse_curves import Frame, draw_band, draw_curve, ticks

WIDTH, HEIGHT = 200, 100
FRAME = Frame(QRectF(0, 0, WIDTH, HEIGHT), (0.0, 200.0), (-50.0, 50.0))
"""One pixel for each millisecond and each microvolt; 0 uV in the middle."""

Alpha = NDArray[np.uint8]


def painted(draw: object, qtbot: QtBot) -> Alpha:
    """Opacity of every pixel, shape (HEIGHT, WIDTH)."""
    image = QImage(WIDTH, HEIGHT, QImage.Format.Format_ARGB32_Premultiplied)
    image.fill(Qt.GlobalColor.transparent)
    painter = QPainter(image)
    painter.setClipRect(FRAME.area)
    draw(painter)  # type: ignore[operator]
    painter.end()
    return np.array(
        [[image.pixelColor(x, y).alpha() for x in range(WIDTH)] for y in range(HEIGHT)], dtype=np.uint8
    )


def volts(uv: object) -> NDArray[np.float32]:
    return (np.asarray(uv, dtype=np.float64) * 1e-6).astype(np.float32)


@pytest.mark.parametrize("n_times", [201, 2001], ids=["lines", "columns"])
def test_ramp_goes_from_corner_to_corner(qtbot: QtBot, n_times: int) -> None:
    times_s = np.linspace(0.0, 0.2, n_times)
    values_v = volts(np.linspace(-50.0, 50.0, n_times))
    alpha = painted(lambda p: draw_curve(p, FRAME, times_s, values_v, QPen(QColor("red"), 1.0)), qtbot)
    for x in range(4, WIDTH - 4, 7):
        rows = np.flatnonzero(alpha[:, x])
        assert abs(rows.mean() - (HEIGHT - x / 2.0)) < 1.5
        assert rows.size <= 3


def test_spike_between_pixels_is_not_lost(qtbot: QtBot) -> None:
    times_s = np.linspace(0.0, 0.2, 5001)
    values = np.zeros(5001)
    values[2503] = 40.0
    alpha = painted(lambda p: draw_curve(p, FRAME, times_s, volts(values), QPen(QColor("red"), 1.0)), qtbot)
    assert alpha[15:45, 98:103].any(axis=1).all()
    assert not alpha[:45, :97].any()


@pytest.mark.parametrize("n_times", [201, 2001])
def test_band_is_filled_once_and_evenly(qtbot: QtBot, n_times: int) -> None:
    times_s = np.linspace(0.0, 0.2, n_times)
    edges_v = volts(np.full(n_times, -10.0)), volts(np.full(n_times, 20.0))
    color = QColor(255, 0, 0, 80)
    alpha = painted(lambda p: draw_band(p, FRAME, times_s, edges_v, color), qtbot)
    assert set(np.unique(alpha[32:58, 2:-2]).tolist()) == {80}
    assert not alpha[:28].any()
    assert not alpha[62:].any()


def test_nothing_is_drawn_where_nothing_is_known(qtbot: QtBot) -> None:
    times_s = np.linspace(0.0, 0.2, 201)
    values = np.zeros(201)
    values[80:121] = np.nan
    curve = painted(lambda p: draw_curve(p, FRAME, times_s, volts(values), QPen(QColor("red"), 2.0)), qtbot)
    band = painted(
        lambda p: draw_band(p, FRAME, times_s, (volts(values), volts(values + 10.0)), QColor("red")), qtbot
    )
    for alpha in (curve, band):
        assert not alpha[:, 82:118].any()
        assert alpha[:, 5:75].any(axis=0).all()
        assert alpha[:, 125:195].any(axis=0).all()


def test_artifact_far_outside_is_painted_only_as_far_as_the_frame(qtbot: QtBot) -> None:
    times_s = np.linspace(0.0, 0.2, 201)
    values = np.zeros(201)
    values[100] = 1e7
    alpha = painted(lambda p: draw_curve(p, FRAME, times_s, volts(values), QPen(QColor("red"), 1.0)), qtbot)
    assert alpha[:50, 99:102].any(axis=1).all()
    assert not alpha[:48, :97].any()


def test_places_and_values_are_each_others_inverse() -> None:
    frame = Frame(QRectF(60, 4, 700, 200), (-80.0, 120.0), (-20.0, 30.0))
    assert frame.x_of(-80.0) == 60.0
    assert frame.x_of(120.0) == 760.0
    assert frame.ms_at(frame.x_of(13.2)) == pytest.approx(13.2)
    assert frame.y_of(-20.0) == 204.0
    assert frame.y_of(30.0) == 4.0


@pytest.mark.parametrize(
    ("low", "high", "most", "expected"),
    [
        (-80.0, 120.0, 4, [-50.0, 0.0, 50.0, 100.0]),
        (-12.0, 12.0, 3, [-10.0, 0.0, 10.0]),
        (0.0, 1.0, 5, [0.0, 0.2, 0.4, 0.6, 0.8, 1.0]),
        (3.0, 3.0, 5, []),
    ],
)
def test_ticks_are_round(low: float, high: float, most: int, expected: list[float]) -> None:
    assert ticks(low, high, most) == expected
