"""Settings: kept, migrated, and never lost silently."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest

from pulsemend.session.settings import (
    RECENT_KEPT,
    Recent,
    Settings,
    ThemeChoice,
    load_settings,
    save_settings,
)

SOME = Settings(
    theme=ThemeChoice.DARK,
    text_percent=150,
    recent=(Recent("lt01.vhdr", "lantern.toml"), Recent("lt02.vhdr")),
    geometry="AdnQ",
    notice_shown=True,
    export_folder="sets",
)


def test_settings_come_back_as_they_were(tmp_path: Path) -> None:
    path = tmp_path / "config" / "settings.json"
    assert load_settings(path).settings == Settings()
    save_settings(path, SOME)
    loaded = load_settings(path)
    assert (loaded.settings, loaded.words) == (SOME, "")
    assert [one.name for one in path.parent.iterdir()] == ["settings.json"]


@pytest.mark.parametrize(
    "damage",
    [
        b"",
        b"{",
        b"[]",
        b"null",
        b"\xff\xfe",
        b"{}",
        b'{"schema": "1"}',
        b'{"schema": 0}',
        b"[" * 100_000,
        *(
            json.dumps({"schema": 1, **change}).encode()
            for change in (
                {"theme": "purple"},
                {"text_percent": 999},
                {"text_percent": "100"},
                {"recent": "lt01"},
                {"recent": [{"recording": 5, "plan": ""}]},
                {"notice_shown": 1},
                {"geometry": None},
            )
        ),
    ],
)
def test_a_broken_file_is_kept_and_told(tmp_path: Path, damage: bytes) -> None:
    path = tmp_path / "settings.json"
    if damage.startswith(b'{"schema": 1, '):
        save_settings(path, SOME)
        damage = json.dumps(json.loads(path.read_text()) | json.loads(damage)).encode()
    path.write_bytes(damage)
    loaded = load_settings(path)
    assert loaded.settings == Settings()
    assert "the usual ones are used. The old file is kept as settings.json.kept-1." in loaded.words
    assert not path.exists()
    assert path.with_name("settings.json.kept-1").read_bytes() == damage
    path.write_bytes(damage)
    assert "settings.json.kept-2" in load_settings(path).words


def test_a_later_version_is_kept_and_told(tmp_path: Path) -> None:
    path = tmp_path / "settings.json"
    path.write_text('{"schema": 2}')
    assert "were written by a later version" in load_settings(path).words


def test_unknown_keys_are_passed_over(tmp_path: Path) -> None:
    path = tmp_path / "settings.json"
    save_settings(path, SOME)
    path.write_text(json.dumps(json.loads(path.read_text()) | {"zoom": 3}))
    assert load_settings(path).settings == SOME


def test_older_schemas_are_brought_up_step_by_step(tmp_path: Path) -> None:
    path = tmp_path / "settings.json"
    save_settings(path, SOME)
    tree = json.loads(path.read_text())
    tree["colours"] = tree.pop("theme")
    path.write_text(json.dumps(tree))

    def first(old: dict[str, Any]) -> dict[str, Any]:
        return {**old, "theme_name": old["colours"]}

    def second(old: dict[str, Any]) -> dict[str, Any]:
        return {**old, "theme": old["theme_name"]}

    assert load_settings(path, {1: first, 2: second}, schema=3).settings == SOME


def test_a_failed_write_leaves_the_old_settings(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "settings.json"
    save_settings(path, SOME)

    def full(_number: int) -> None:
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("pulsemend.model.toml_tables.os.fsync", full)
    with pytest.raises(OSError, match="No space"):
        save_settings(path, replace(SOME, theme=ThemeChoice.LIGHT))
    assert load_settings(path).settings == SOME


def test_recent_recordings_are_newest_first_once_each(tmp_path: Path) -> None:
    settings = Settings()
    for number in range(RECENT_KEPT + 3):
        settings = settings.with_recent(tmp_path / f"lt{number}.vhdr")
    assert len(settings.recent) == RECENT_KEPT
    settings = settings.with_recent(tmp_path / "lt9.vhdr", tmp_path / "lantern.toml")
    assert settings.recent[0] == Recent(str(tmp_path / "lt9.vhdr"), str(tmp_path / "lantern.toml"))
    assert len({one.recording for one in settings.recent}) == RECENT_KEPT


def test_text_grows_and_shrinks_within_its_sizes() -> None:
    sizes = [Settings(text_percent=150).with_text_step(step).text_percent for step in (-9, -1, 0, 1, 9)]
    assert sizes == [100, 125, 150, 175, 200]
