"""Icons as drawn: there is something to see at 16 pixels, in both themes and all states."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from PySide6.QtCore import QSize
from PySide6.QtGui import QColor, QIcon, QImage, QPixmap
from pytestqt.qtbot import QtBot

from pulsemend.session.action_table import ACTIONS
from pulsemend.session.icon_text import LEVEL_ICONS, OTHER_ICONS, STATE_ICONS
from pulsemend.window.icons import icon, pixmap, program_icon
from pulsemend.window.theme import DARK, LIGHT, Theme

NAMES = sorted(
    {action.icon for action in ACTIONS if action.icon}
    | {*STATE_ICONS.values(), *LEVEL_ICONS.values(), *OTHER_ICONS}
)


def pixels(picture: QPixmap) -> NDArray[np.uint8]:
    """Red, green, blue and opacity, shape (height, width, 4)."""
    image = picture.toImage().convertToFormat(QImage.Format.Format_RGBA8888)
    flat = np.frombuffer(bytes(image.constBits()), np.uint8)
    return flat.reshape(image.height(), image.bytesPerLine() // 4, 4)[:, : image.width()]


@pytest.mark.parametrize("theme", [LIGHT, DARK], ids=["light", "dark"])
@pytest.mark.parametrize("name", NAMES)
def test_icon_shows_at_16_pixels(qtbot: QtBot, name: str, theme: Theme) -> None:
    drawn = pixels(icon(name, theme).pixmap(QSize(16, 16), 1.0))
    assert drawn.shape == (16, 16, 4)
    opaque = drawn[..., 3] > 128
    assert 15 <= opaque.sum() <= 200
    darkest = drawn[opaque][np.argmax(drawn[opaque][:, 3])]
    # Colours of half-covered pixels come back rounded.
    wanted = QColor(theme.text)
    assert np.abs(darkest[:3].astype(int) - [wanted.red(), wanted.green(), wanted.blue()]).max() <= 2


@pytest.mark.parametrize("ratio", [1.0, 1.5, 2.0])
def test_icon_is_sharp_on_dense_screens(qtbot: QtBot, ratio: float) -> None:
    drawn = pixmap("mark", LIGHT.accent, 16, ratio)
    assert drawn.width() == round(16 * ratio)
    assert drawn.deviceIndependentSize().width() == 16
    assert icon("undo", LIGHT).pixmap(QSize(16, 16), ratio).width() == round(16 * ratio)


def test_states_of_an_icon_differ(qtbot: QtBot) -> None:
    made = icon("undo", LIGHT)
    looks = [
        pixels(made.pixmap(QSize(24, 24), 1.0, mode, state)).tobytes()
        for mode, state in (
            (QIcon.Mode.Normal, QIcon.State.Off),
            (QIcon.Mode.Normal, QIcon.State.On),
            (QIcon.Mode.Disabled, QIcon.State.Off),
        )
    ]
    assert len(set(looks)) == 3


def test_program_has_a_picture(qtbot: QtBot) -> None:
    assert (pixels(program_icon().pixmap(QSize(64, 64), 1.0))[..., 3] > 128).mean() > 0.8
