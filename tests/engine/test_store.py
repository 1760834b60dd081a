"""The store: whole entries or none, bound to the state of their files, the least used gone first."""

from __future__ import annotations

import errno
import os
import time
from pathlib import Path

import pytest

from pulsemend.engine.store import Store, quick_stamp
from pulsemend.errors import InputError, MissingPart, OutOfSpace


@pytest.fixture
def source(tmp_path: Path) -> Path:
    path = tmp_path / "recording.eeg"
    path.write_bytes(bytes(range(256)) * 20_000)
    return path


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    return tmp_path / "cache"


def put(store: Store, source: Path, kind: str = "pyramid", content: bytes = b"abc") -> Path:
    stamp = quick_stamp([str(source)])
    with store.writing(stamp, kind, 1) as file:
        file.write(content)
    path = store.find(stamp, kind, 1)
    assert path is not None
    return path


def age(path: Path, seconds: float) -> None:
    then = time.time() - seconds
    os.utime(path, (then, then))


def test_an_entry_is_found_again_by_another_store(folder: Path, source: Path) -> None:
    put(Store(folder), source)
    path = Store(folder).find(quick_stamp([str(source)]), "pyramid", 1)
    assert path is not None
    assert path.read_bytes() == b"abc"


@pytest.mark.parametrize(("kind", "version"), [("spectrum", 1), ("pyramid", 2)])
def test_another_kind_or_version_is_another_entry(
    folder: Path, source: Path, kind: str, version: int
) -> None:
    store = Store(folder)
    put(store, source)
    assert store.find(quick_stamp([str(source)]), kind, version) is None


@pytest.mark.parametrize("position", [0, 1 << 19, -1])
def test_a_change_at_either_end_makes_another_stamp(source: Path, position: int) -> None:
    facts = source.stat()
    before = quick_stamp([str(source)])
    content = bytearray(source.read_bytes())
    content[position] ^= 1
    source.write_bytes(content)
    os.utime(source, ns=(facts.st_atime_ns, facts.st_mtime_ns))
    after = quick_stamp([str(source)])
    assert after.state != before.state
    assert after.source == before.source


def test_a_change_of_time_alone_makes_another_stamp(source: Path) -> None:
    before = quick_stamp([str(source)])
    age(source, 100)
    assert quick_stamp([str(source)]).state != before.state


def test_a_copy_elsewhere_is_another_source(source: Path, tmp_path: Path) -> None:
    copy = tmp_path / "copy.eeg"
    copy.write_bytes(source.read_bytes())
    assert quick_stamp([str(copy)]).source != quick_stamp([str(source)]).source


def test_entries_of_an_earlier_state_go_and_those_of_others_stay(
    folder: Path, source: Path, tmp_path: Path
) -> None:
    store = Store(folder)
    other = tmp_path / "other.eeg"
    other.write_bytes(b"other")
    kept = put(store, other)
    old, also_old = put(store, source), put(store, source, kind="spectrum")
    source.write_bytes(b"changed")
    new = put(store, source)
    assert sorted(folder.iterdir()) == sorted([kept, new])
    assert old not in folder.iterdir()
    assert also_old not in folder.iterdir()


def test_a_missing_file_is_said_in_words(tmp_path: Path) -> None:
    with pytest.raises(MissingPart, match="gone"):
        quick_stamp([str(tmp_path / "gone.eeg")])


def test_a_failed_or_abandoned_write_leaves_nothing(folder: Path, source: Path) -> None:
    store = Store(folder)
    stamp = quick_stamp([str(source)])

    def broken() -> None:
        with store.writing(stamp, "pyramid", 1) as file:
            file.write(b"half")
            raise KeyError

    with pytest.raises(KeyError):
        broken()
    assert store.find(stamp, "pyramid", 1) is None
    assert list(folder.iterdir()) == []


def test_a_failed_write_keeps_the_entry_that_was_there(folder: Path, source: Path) -> None:
    store = Store(folder)
    path = put(store, source)

    def broken() -> None:
        with store.writing(quick_stamp([str(source)]), "pyramid", 1) as file:
            file.write(b"half")
            raise KeyError

    with pytest.raises(KeyError):
        broken()
    assert path.read_bytes() == b"abc"


def test_a_full_disk_is_said_in_words(folder: Path, source: Path) -> None:
    store = Store(folder)

    def full() -> None:
        with store.writing(quick_stamp([str(source)]), "pyramid", 1):
            raise OSError(errno.ENOSPC, "No space left on device")

    with pytest.raises(OutOfSpace, match="disk is full"):
        full()
    assert list(folder.iterdir()) == []


def test_a_folder_that_cannot_be_made_is_said_in_words(tmp_path: Path, source: Path) -> None:
    (tmp_path / "file").write_bytes(b"")
    with pytest.raises(InputError, match="cache cannot be written"):
        put(Store(tmp_path / "file" / "cache"), source)


def test_the_least_recently_used_go_first_and_use_counts(folder: Path, tmp_path: Path) -> None:
    store = Store(folder, limit_bytes=250)
    sources = []
    for number in range(4):
        sources.append(tmp_path / f"{number}.eeg")
        sources[-1].write_bytes(bytes([number]))
    first, second = (put(store, source, content=b"x" * 100) for source in sources[:2])
    age(first, 500)
    age(second, 400)
    assert store.find(quick_stamp([str(sources[0])]), "pyramid", 1) == first
    third = put(store, sources[2], content=b"x" * 100)
    assert sorted(folder.iterdir()) == sorted([first, third])
    large = put(store, sources[3], content=b"x" * 300)
    assert list(folder.iterdir()) == [large]


def test_only_files_named_like_entries_are_removed(folder: Path, source: Path, tmp_path: Path) -> None:
    store = Store(folder, limit_bytes=0)
    path = put(store, source)
    (folder / "notes.txt").write_text("mine")
    (folder / "subfolder").mkdir()
    valuable = tmp_path / "valuable"
    valuable.write_text("mine")
    link = folder / path.name.replace("pyramid-1", "pyramid-7")
    link.symlink_to(valuable)
    other = tmp_path / "other.eeg"
    other.write_bytes(b"other")
    put(store, other)
    names = {entry.name for entry in folder.iterdir()}
    assert {"notes.txt", "subfolder", link.name} < names
    assert path.name not in names
    assert valuable.read_text() == "mine"


def test_parts_of_dead_writers_go_after_a_day(folder: Path, source: Path) -> None:
    store = Store(folder)
    path = put(store, source)
    old = folder / f"{path.name}.part-{'0' * 32}"
    young = folder / f"{path.name}.part-{'1' * 32}"
    old.write_bytes(b"")
    young.write_bytes(b"")
    age(old, 2 * 86_400)
    put(store, source)
    assert not old.exists()
    assert young.exists()


def test_discard_touches_entries_only(folder: Path, source: Path) -> None:
    store = Store(folder)
    path = put(store, source)
    store.discard(source)
    assert source.exists()
    store.discard(path)
    assert not path.exists()
