"""The map of channels: picked by click and by keys, states told by shape, names where there is room."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from PySide6.QtCore import QPoint, Qt
from PySide6.QtGui import QImage
from PySide6.QtTest import QTest
from pytestqt.qtbot import QtBot

from pulsemend.readers.names import standard_positions
from pulsemend.signal.head_plane import lay_flat
from pulsemend.simulate.head import CAP
from pulsemend.window.head_map import HeadMap, MapChannel
from pulsemend.window.theme import DARK, LIGHT

FEW = ("Fz", "C3", "Cz", "C4", "Pz")


def channels(names: tuple[str, ...], bad: tuple[str, ...] = ()) -> list[MapChannel]:
    known = standard_positions(names)
    flat = lay_flat(np.array(list(known.values())).reshape(-1, 3))
    places = {name: (float(x), float(y)) for name, (x, y) in zip(known, flat, strict=True)}
    return [
        MapChannel(name, places.get(name), name in bad, f"{name}, EEG, {'bad' if name in bad else 'good'}")
        for name in names
    ]


def make(qtbot: QtBot, shown: list[MapChannel], size: tuple[int, int] = (320, 260)) -> HeadMap:
    head = HeadMap(LIGHT)
    qtbot.addWidget(head)
    head.resize(*size)
    head.show_channels(shown)
    head.show()
    qtbot.waitExposed(head)
    return head


def place(head: HeadMap, name: str) -> QPoint:
    spot = head.spot(name)
    assert spot is not None, name
    return spot.toPoint()


def click(head: HeadMap, name: str, modifier: Qt.KeyboardModifier = Qt.KeyboardModifier.NoModifier) -> None:
    QTest.mouseClick(head, Qt.MouseButton.LeftButton, modifier, place(head, name))


def focus(qtbot: QtBot, head: HeadMap) -> None:
    head.activateWindow()
    head.setFocus()
    qtbot.waitUntil(head.hasFocus)


def patch(head: HeadMap, name: str) -> NDArray[np.uint8]:
    """Grey values around a channel, without colour."""
    image = head.grab().toImage().convertToFormat(QImage.Format.Format_Grayscale8)
    grey = np.frombuffer(image.constBits(), np.uint8).reshape(image.height(), image.bytesPerLine())
    at = place(head, name)
    ratio = image.height() / head.height()
    x, y, half = round(at.x() * ratio), round(at.y() * ratio), round(10 * ratio)
    return grey[y - half : y + half, x - half : x + half].copy()


def test_the_front_is_up_and_the_right_is_right(qtbot: QtBot) -> None:
    head = make(qtbot, channels(FEW))
    assert place(head, "Fz").y() < place(head, "Cz").y() < place(head, "Pz").y()
    assert place(head, "C3").x() < place(head, "Cz").x() < place(head, "C4").x()
    assert place(head, "Cz").x() == pytest.approx(place(head, "Fz").x(), abs=1)


def test_a_click_picks_and_with_ctrl_adds_or_takes_away(qtbot: QtBot) -> None:
    head = make(qtbot, channels(FEW))
    told: list[frozenset[str]] = []
    head.picked.connect(told.append)
    click(head, "C3")
    click(head, "Cz", Qt.KeyboardModifier.ControlModifier)
    click(head, "C3", Qt.KeyboardModifier.ControlModifier)
    click(head, "Pz")
    click(head, "Pz")
    assert [sorted(one) for one in told] == [["C3"], ["C3", "Cz"], ["Cz"], ["Pz"], []]


def test_a_click_beside_every_channel_picks_nothing(qtbot: QtBot) -> None:
    head = make(qtbot, channels(FEW))
    with qtbot.assertNotEmitted(head.picked):
        QTest.mouseClick(head, Qt.MouseButton.LeftButton, pos=QPoint(3, 3))


def test_keys_go_from_channel_to_channel_and_pick(qtbot: QtBot) -> None:
    head = make(qtbot, channels(FEW, bad=("Pz",)))
    told: list[frozenset[str]] = []
    head.picked.connect(told.append)
    focus(qtbot, head)
    QTest.keyClick(head, Qt.Key.Key_Down)
    QTest.keyClick(head, Qt.Key.Key_Return)
    QTest.keyClick(head, Qt.Key.Key_Right)
    QTest.keyClick(head, Qt.Key.Key_Space)
    assert head.accessibleDescription() == "C4, EEG, good, picked"
    QTest.keyClick(head, Qt.Key.Key_Left)
    QTest.keyClick(head, Qt.Key.Key_Down)
    assert head.accessibleDescription() == "Pz, EEG, bad"
    QTest.keyClick(head, Qt.Key.Key_Down)
    assert head.accessibleDescription() == "Pz, EEG, bad"
    assert [sorted(one) for one in told] == [["Cz"], ["C4", "Cz"]]


def test_every_channel_of_a_cap_can_be_reached_by_arrows(qtbot: QtBot) -> None:
    """Arrows lead from any channel to any other, or some would be out of reach of the keyboard."""
    head = make(qtbot, [*channels(CAP), MapChannel("EMG left", None, False, "EMG left")])
    keys = (Qt.Key.Key_Left, Qt.Key.Key_Right, Qt.Key.Key_Up, Qt.Key.Key_Down)
    focus(qtbot, head)
    reached, waiting = {head._current}, [head._current]
    while waiting:
        here = waiting.pop()
        for key in keys:
            head._current = here
            QTest.keyClick(head, key)
            if head._current not in reached:
                reached.add(head._current)
                waiting.append(head._current)
    assert reached == {*CAP, "EMG left"}


def test_states_differ_without_colour(qtbot: QtBot) -> None:
    head = make(qtbot, channels(("C3", "C4")))
    good = patch(head, "C3")
    head.show_picked(frozenset({"C3"}))
    picked = patch(head, "C3")
    head.show_channels(channels(("C3", "C4"), bad=("C3",)))
    both = patch(head, "C3")
    head.show_picked(frozenset())
    bad = patch(head, "C3")
    shots = [good, picked, both, bad]
    for k, one in enumerate(shots):
        for other in shots[k + 1 :]:
            assert np.count_nonzero(np.abs(one.astype(int) - other) > 60) > 12


def test_names_stand_there_when_there_is_room(qtbot: QtBot) -> None:
    head = make(qtbot, channels(CAP, bad=("O1",)), (900, 900))
    assert head.named() == frozenset(CAP)
    head.resize(260, 220)
    qtbot.waitUntil(lambda: head.named() != frozenset(CAP))
    assert head.named() == {"O1"}
    head.show_picked(frozenset({"Cz"}))
    assert head.named() == {"O1", "Cz"}


def test_the_pointer_names_a_channel(qtbot: QtBot) -> None:
    head = make(qtbot, channels(CAP), (260, 220))
    before = head.grab().toImage()
    QTest.mouseMove(head, place(head, "Cz"))
    qtbot.waitUntil(lambda: head._hovered == "Cz")
    assert head.grab().toImage() != before
    QTest.mouseMove(head, QPoint(1, 1))
    qtbot.waitUntil(lambda: head._hovered is None)


def test_channels_without_a_position_are_listed_and_picked_there(qtbot: QtBot) -> None:
    loose = [MapChannel(f"electrode {k}", None, k == 2, f"electrode {k}") for k in range(3)]
    head = make(qtbot, [*channels(FEW), *loose])
    middle = place(head, "Cz").x()
    assert all(place(head, channel.name).x() > place(head, "C4").x() > middle for channel in loose)
    with qtbot.waitSignal(head.picked) as told:
        click(head, "electrode 1")
    assert told.args == [frozenset({"electrode 1"})]


def test_a_list_without_room_counts_the_rest(qtbot: QtBot) -> None:
    loose = [MapChannel(f"a long name of a channel {k}", None, False, str(k)) for k in range(256)]
    head = make(qtbot, loose)
    shown = [channel.name for channel in loose if head.spot(channel.name) is not None]
    more = head._layout.more
    assert more is not None
    assert 0 < len(shown) < 256
    assert len(shown) + more[1] == 256
    assert all(head.rect().contains(place(head, name)) for name in shown)


def test_everything_stays_inside_at_any_size(qtbot: QtBot) -> None:
    """Also sites below the equator, which lie outside the circle."""
    names = (*CAP, "Nz", "F9", "F10", "P9", "P10")
    head = make(qtbot, channels(names))
    for size in ((160, 130), (1200, 200), (200, 900), (1600, 1000)):
        head.resize(*size)
        assert all(head.rect().contains(place(head, name)) for name in names)


def test_no_channels_and_another_theme(qtbot: QtBot) -> None:
    head = make(qtbot, [])
    QTest.keyClick(head, Qt.Key.Key_Right)
    QTest.keyClick(head, Qt.Key.Key_Space)
    assert head.accessibleDescription() == "0 channels, 0 picked"
    head.show_channels(channels(FEW))
    before = head.grab().toImage()
    head.set_theme(DARK)
    assert head.grab().toImage() != before
