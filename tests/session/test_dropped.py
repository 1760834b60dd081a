"""What dropped paths are, judged by their names."""

from __future__ import annotations

from pathlib import Path

import pytest

from pulsemend.readers.opening import _BY_EXTENSION
from pulsemend.session.dropped import RECORDING_ENDINGS, Dropped, what_is


def made(folder: Path, *names: str) -> list[Path]:
    for name in names:
        (folder / name).touch()
    return [folder / name for name in names]


def test_endings_are_those_of_the_readers() -> None:
    assert set(RECORDING_ENDINGS) == set(_BY_EXTENSION)


@pytest.mark.parametrize("name", ["a.vhdr", "a.eeg", "a.vmrk", "A.EDF", "a.bdf", "a.fif", "a_raw.fif.gz"])
def test_file_of_a_recording(tmp_path: Path, name: str) -> None:
    (path,) = made(tmp_path, name)
    assert what_is([path]) == Dropped(recording=path)


def test_one_file_of_a_rarer_format_is_left_to_the_readers(tmp_path: Path) -> None:
    rare, other, table = made(tmp_path, "a.gdf", "b.gdf", "a_events.tsv")
    assert what_is([rare]) == Dropped(recording=rare)
    assert not what_is([rare, other]).is_something
    assert not what_is([table]).is_something


def test_triplet_counts_once_by_its_header(tmp_path: Path) -> None:
    data, header, markers = made(tmp_path, "a.eeg", "a.vhdr", "a.vmrk")
    assert what_is([data, header, markers]) == Dropped(recording=header)
    assert what_is([data, markers]) == Dropped(recording=data)


def test_recording_and_plan_together(tmp_path: Path) -> None:
    plan, recording = made(tmp_path, "lantern.toml", "a.edf")
    assert what_is([plan, recording]) == Dropped(recording=recording, plan=plan)


def test_plan_alone_but_no_marks(tmp_path: Path) -> None:
    plan, marks = made(tmp_path, "lantern.toml", "lt01.marks.toml")
    assert what_is([plan]) == Dropped(plan=plan)
    assert not what_is([marks]).is_something


def test_of_several_recordings_the_first_and_a_word(tmp_path: Path) -> None:
    first, second = made(tmp_path, "a.edf", "b.edf")
    found = what_is([first, second])
    assert found.recording == first
    assert "a.edf" in found.words


def test_folder_with_recording_and_plan(tmp_path: Path) -> None:
    _, header, _, plan, *_ = made(tmp_path, "a.eeg", "a.vhdr", "a.vmrk", "p.toml", "a_log.tsv", ".x.edf")
    assert what_is([tmp_path]) == Dropped(recording=header, plan=plan)


def test_folder_with_several_recordings_is_not_guessed_at(tmp_path: Path) -> None:
    made(tmp_path, "a.edf", "b.edf", "p.toml")
    found = what_is([tmp_path])
    assert not found.is_something
    assert "2 recordings" in found.words


def test_folder_with_several_plans_opens_the_recording_alone(tmp_path: Path) -> None:
    recording, *_ = made(tmp_path, "a.edf", "p.toml", "q.toml")
    found = what_is([tmp_path])
    assert found.recording == recording
    assert found.plan is None
    assert "2 plans" in found.words


def test_set_is_known_by_its_name(tmp_path: Path) -> None:
    folder = tmp_path / "lt01_desc-mended"
    folder.mkdir()
    assert what_is([folder]) == Dropped(epoch_set=folder)


def test_anything_else_is_refused_in_words(tmp_path: Path) -> None:
    (path,) = made(tmp_path, "notes.txt")
    found = what_is([path])
    assert not found.is_something
    assert "notes.txt is no recording" in found.words
    assert what_is([tmp_path]).words.endswith("holds no recording and no plan.")
    assert what_is([]).words


def test_folder_that_cannot_be_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(_self: Path) -> None:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(Path, "iterdir", refuse)
    assert "Permission denied" in what_is([tmp_path]).words
