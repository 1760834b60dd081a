"""The table of actions, and menus, keys and finder built from it."""

from __future__ import annotations

import re
from dataclasses import replace

import pytest

from pulsemend.model.marks import Marks
from pulsemend.model.plan_file import read_plan
from pulsemend.session.action_table import ACTIONS
from pulsemend.session.actions import (
    MOUSE_HELP,
    Action,
    DuplicateAction,
    Menu,
    Where,
    check_actions,
    find_actions,
    key_help,
    key_help_text,
    menus,
    plain_key,
    toolbar,
)
from pulsemend.session.found import Found, Selected, Stage, WrittenSet
from pulsemend.session.session import Session
from pulsemend.session.view import Shown
from support.session_desk import FACTS, Desk

BY_ID = {action.id: action for action in ACTIONS}


def action(name: str, *keys: str, title: str = "Do it") -> Action:
    return Action(name, title, "Do it now", Menu.FILE, keys=keys)


def test_no_two_actions_share_an_id_or_a_key() -> None:
    check_actions(ACTIONS)
    assert len(BY_ID) == len(ACTIONS)


@pytest.mark.parametrize(
    ("first", "second", "words"),
    [
        (
            action("one", title="First"),
            action("one", title="Second"),
            "'First' and 'Second' share the id one",
        ),
        (action("one", "Ctrl+Z"), action("two", "Ctrl+Y", "Ctrl+Z"), "one and two share the key Ctrl+Z"),
        (action("one", "Ctrl+Shift+Z"), action("two", "shift+ctrl+z"), "one and two share the key shift"),
        (action("one", "Delete"), action("two", "Del"), "one and two share the key Del"),
    ],
)
def test_a_duplicate_is_an_error_naming_both(first: Action, second: Action, words: str) -> None:
    with pytest.raises(DuplicateAction, match=re.escape(words)):
        check_actions([first, action("other", "F5"), second])


def test_keys_are_those_of_the_platform() -> None:
    """Design, section 2, and common practice."""
    expected = {
        "earlier": "Left",
        "later": "Right",
        "channels_up": "Up",
        "channels_down": "Down",
        "page_earlier": "PgUp",
        "page_later": "PgDown",
        "to_start": "Home",
        "to_end": "End",
        "open_recording": "Ctrl+O",
        "save_plan": "Ctrl+S",
        "undo": "Ctrl+Z",
        "find_action": "Ctrl+K",
        "help": "F1",
    }
    assert {name: BY_ID[name].keys[0] for name in expected} == expected
    assert BY_ID["redo"].keys == ("Ctrl+Shift+Z", "Ctrl+Y")
    assert ("Ctrl+Wheel", "Wider or narrower around the pointer") in MOUSE_HELP


def test_no_key_is_a_single_sign_and_none_is_plus_or_minus() -> None:
    keys = [key for one in ACTIONS for key in one.keys]
    assert [key for key in keys if len(key) == 1] == []
    assert [
        key for key in keys if re.search(r"\+\+|[-=]|Plus|Minus|Shift\+.$", key) and "Ctrl" not in key
    ] == []
    assert [key for key in keys if key.endswith(("++", "-", "="))] == []


def test_keys_that_lists_and_texts_need_count_in_the_traces_only() -> None:
    needed = {"left", "right", "up", "down", "pgup", "pgdown", "home", "end", "del", "esc", "ctrl+a"}
    needed |= {"ctrl+left", "ctrl+right"}
    wide = [
        one.id
        for one in ACTIONS
        for key in one.keys
        if plain_key(key) in needed and one.where is Where.WINDOW
    ]
    assert wide == []


def test_every_action_stands_in_one_menu_with_words() -> None:
    listed = [one for _, sections in menus(ACTIONS) for section in sections for one in section]
    assert sorted(one.id for one in listed) == sorted(BY_ID)
    for one in ACTIONS:
        assert re.fullmatch(r"[a-z][a-z_]*", one.id)
        assert one.title[0].isupper()
        assert not one.title.endswith(".") or one.title.endswith("...")
        assert one.tooltip[0].isupper()
        assert not one.tooltip.endswith(".")
    assert [menu for menu, _ in menus(ACTIONS)] == list(Menu)


def test_menus_keep_order_and_part_sections() -> None:
    table = [action("a"), replace(action("b"), section=2), action("c"), replace(action("d"), menu=Menu.EDIT)]
    built = [(menu, [[one.id for one in part] for part in parts]) for menu, parts in menus(table)]
    assert built == [(Menu.FILE, [["a", "c"], ["b"]]), (Menu.EDIT, [["d"]])]


def test_toolbar_is_short() -> None:
    assert 5 <= len(toolbar(ACTIONS)) <= 12
    assert all(one.icon for one in toolbar(ACTIONS))


def test_handlers_get_arguments_they_know() -> None:
    assert [one.argument for one in ACTIONS if one.does == "open_stage"] == [stage.value for stage in Stage]
    assert [one.argument for one in ACTIONS if one.does == "show"] == [shown.value for shown in Shown]
    assert BY_ID["undo"].does == "undo"


def test_tooltips_name_their_key() -> None:
    assert BY_ID["save_plan"].full_tooltip == (
        "Write the plan to its file; marks are saved by themselves (Ctrl+S)"
    )
    assert BY_ID["about"].full_tooltip == BY_ID["about"].tooltip


def test_the_list_of_keys_holds_every_key() -> None:
    shown = [keys for _, rows in key_help(ACTIONS) for keys, _ in rows]
    assert [
        " or ".join(one.keys) for menu in Menu for one in ACTIONS if one.menu is menu and one.keys
    ] == shown[: -len(MOUSE_HELP)]
    text = key_help_text(ACTIONS)
    assert re.search(r"^Edit\n  Ctrl\+Z +Undo\n  Ctrl\+Shift\+Z or Ctrl\+Y +Redo$", text, re.MULTILINE)
    assert re.search(r"^  Ctrl\+O +Open a recording$", text, re.MULTILINE)


@pytest.mark.parametrize(
    ("typed", "first"),
    [
        ("undo", "undo"),
        ("open rec", "open_recording"),
        ("rec open", "open_recording"),
        ("pulse next", "next_pulse"),
        ("SAVE AS", "save_plan_as"),
        ("ctrl+k", "find_action"),
        ("dark", "theme_dark"),
        ("clipboard", "copy_details"),
        ("mtwp", "measure"),
    ],
)
def test_the_finder_finds(typed: str, first: str) -> None:
    assert find_actions(ACTIONS, typed)[0].id == first


def test_the_finder_finds_everything_or_nothing() -> None:
    assert find_actions(ACTIONS, "  ") == ACTIONS
    assert find_actions(ACTIONS, "undo zebra") == ()


def enabled(session: Session) -> set[str]:
    return {one.id for one in ACTIONS if one.enabled(session)}


def test_what_can_be_done_follows_the_session(desk: Desk) -> None:
    session = Session()
    nothing_open = enabled(session)
    assert {"open_recording", "open_plan", "check_set", "help", "quit", "stop_job"} <= nothing_open
    assert not {"undo", "save_plan", "mend", "later", "hide_picked", "show_repaired"} & nothing_open

    session.open_recording(desk.folder / "lt01.vhdr", FACTS)
    assert enabled(session) - nothing_open >= {"later", "show_recorded", "draft_plan", "next_event"}
    assert not {"mend", "show_repaired", "add_pulse", "next_pulse", "show_all_channels"} & enabled(session)

    session.open_plan(read_plan(desk.plan_path), desk.plan_path)
    before = enabled(session)
    assert {"mend", "show_both", "add_pulse", "save_plan_as"} <= before
    steps = {
        "next_pulse": lambda: session.set_found(Found(n_pulses=3)),
        "toggle_bad": lambda: session.set_view(replace(session.view, picked=frozenset({"C3"}))),
        "show_all_channels": lambda: session.set_view(replace(session.view, rows=("Cz", "C4"))),
        "remove_selected": lambda: session.select(Selected(pulse=3000)),
        "mark_stretch": lambda: session.select(Selected(stretch=(1, 2))),
        "show_folder": lambda: session.set_found(Found(written=WrittenSet(desk.folder, session.revision))),
        "undo": lambda: session.edit_marks("C3 bad", Marks(bad=("C3",))),
        "redo": session.undo,
    }
    for name, step in steps.items():
        assert not BY_ID[name].enabled(session), name
        step()
        assert BY_ID[name].enabled(session), name
    assert not BY_ID["undo"].enabled(session)
    assert not BY_ID["save_plan"].enabled(session)
    plan = session.plan
    assert plan is not None
    session.edit_plan("no bad search", replace(plan, pulses=replace(plan.pulses, window_ms=(-2, 20))))
    assert BY_ID["save_plan"].enabled(session)


def test_choices_show_what_is_in_force() -> None:
    session = Session()
    session.open_stage(Stage.PULSES)
    session.set_view(replace(session.view, shown=Shown.BOTH))
    checked = [one.id for one in ACTIONS if one.checked is not None and one.checked(session)]
    assert checked == ["show_both", "stage_pulses"]
