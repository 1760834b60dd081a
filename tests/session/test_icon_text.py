"""Icons: one per name in use, all on one grid and in one colour, and no file too many."""

from __future__ import annotations

from xml.etree import ElementTree

import pytest

from pulsemend.errors import PulsemendError
from pulsemend.resources import icons_folder
from pulsemend.session.action_table import ACTIONS
from pulsemend.session.icon_text import LEVEL_ICONS, OTHER_ICONS, PROGRAM, STATE_ICONS, icon_text
from pulsemend.session.messages import Level
from pulsemend.session.stages import State

USED = {action.icon for action in ACTIONS if action.icon} | {
    *STATE_ICONS.values(),
    *LEVEL_ICONS.values(),
    *OTHER_ICONS,
}


def test_every_icon_in_use_is_drawn_and_every_drawing_is_in_use() -> None:
    assert {path.stem for path in icons_folder().glob("*")} == {*USED, PROGRAM}


def test_every_state_and_level_has_its_own_shape() -> None:
    assert set(STATE_ICONS) == set(State)
    assert set(LEVEL_ICONS) == set(Level)
    assert len(set(STATE_ICONS.values())) == len(State)
    assert len(set(LEVEL_ICONS.values())) == len(Level)


@pytest.mark.parametrize("name", sorted(USED))
def test_icon_is_drawn_on_the_common_grid_in_one_colour(name: str) -> None:
    text = icon_text(name, "#123456")
    picture = ElementTree.fromstring(text)
    assert picture.get("viewBox") == "0 0 24 24"
    assert picture.get("stroke-width") == "1.8"
    colours = {part.get(key) for part in picture.iter() for key in ("fill", "stroke")}
    assert colours == {None, "none", "#123456"} or colours == {"none", "#123456"}
    assert picture.findtext("{http://www.w3.org/2000/svg}title")


def test_no_two_icons_are_the_same_drawing() -> None:
    bodies = [icon_text(name, "#000000").split("</title>")[1] for name in USED]
    assert len(set(bodies)) == len(bodies)


def test_missing_icon_is_named() -> None:
    with pytest.raises(PulsemendError, match="no such"):
        icon_text("no such", "#000000")
