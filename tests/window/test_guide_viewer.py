"""The guide in its window: every page, links, search; and that nothing in it leads nowhere."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from PySide6.QtCore import Qt, QUrl
from PySide6.QtTest import QTest
from pytestqt.qtbot import QtBot

from pulsemend.session.action_table import ACTIONS
from pulsemend.window.guide_viewer import PAGES, GuideViewer, guide_folder
from pulsemend.window.theme import DARK, LIGHT

LINK = re.compile(r"\]\(([^)]+)\)")


@pytest.fixture
def viewer(qtbot: QtBot) -> GuideViewer:
    viewer = GuideViewer(LIGHT)
    qtbot.addWidget(viewer)
    viewer.show()
    qtbot.waitExposed(viewer)
    return viewer


def test_every_page_of_the_folder_is_listed() -> None:
    assert {path.name for path in guide_folder().glob("*.md")} == set(PAGES)


@pytest.mark.parametrize("name", PAGES)
def test_links_lead_to_pages(name: str) -> None:
    text = (guide_folder() / name).read_text("utf-8")
    for target in LINK.findall(text):
        assert target.startswith("https://") or (guide_folder() / target).is_file(), target


def test_keys_named_in_the_guide_are_those_of_the_table() -> None:
    keys = {key for action in ACTIONS for key in action.keys}
    named = set(re.findall(r"Ctrl\+[A-Za-z0-9+]+", (guide_folder() / "start.md").read_text("utf-8")))
    assert len(named) >= 8
    assert named <= keys


def test_pages_are_shown(viewer: GuideViewer) -> None:
    texts = []
    for name in PAGES:
        viewer.open_page(name)
        texts.append(viewer.text.toPlainText())
    assert len(set(texts)) == len(PAGES)
    assert all(len(text) > 200 for text in texts)
    assert "keys: begin" not in "".join(texts)


def test_links_between_pages_move_the_list_along(viewer: GuideViewer) -> None:
    viewer.text.setSource(QUrl.fromLocalFile(str(guide_folder() / "sets.md")))
    assert viewer.pages.currentItem().text() == PAGES["sets.md"]


def test_pages_are_chosen_by_keyboard(viewer: GuideViewer) -> None:
    viewer.pages.setFocus()
    QTest.keyClick(viewer.pages, Qt.Key.Key_Down)
    assert viewer.text.source().fileName() == "plan.md"


def test_search_goes_on_and_begins_again(viewer: GuideViewer) -> None:
    viewer.open_page("methods.md")
    QTest.keyClicks(viewer.typed, "kriging")
    QTest.keyClick(viewer.typed, Qt.Key.Key_Return)
    assert viewer.text.textCursor().selectedText() == "kriging"
    place = viewer.text.textCursor().position()
    assert viewer.search()
    assert viewer.text.textCursor().position() == place
    assert "again" in viewer.found.text()
    assert viewer.search(back=True)
    viewer.typed.setText("no such words")
    QTest.mouseClick(viewer.next, Qt.MouseButton.LeftButton)
    assert viewer.found.text() == "not on this page"


def test_other_colours_keep_the_page(viewer: GuideViewer) -> None:
    viewer.open_page("marks.md")
    viewer.set_theme(DARK)
    assert viewer.text.source().fileName() == "marks.md"
    assert "fingerprint" in viewer.text.toPlainText()


def test_guide_lies_in_the_package(tmp_path: Path) -> None:
    import pulsemend

    assert guide_folder().parent == Path(pulsemend.__file__).resolve().parent
