"""A set appears whole or not at all: refusals, full disks, interruptions, and death between any two steps."""

from __future__ import annotations

import errno
import os
import shutil
import signal
import subprocess
import sys
import textwrap
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from pulsemend.errors import NoEpochs, OutOfSpace, PulsemendError, SetError
from pulsemend.export import folders
from pulsemend.export.contents import SetChannel
from pulsemend.export.read_set import check_set
from pulsemend.export.region import OpenRegion
from pulsemend.export.set_writer import SetWriter, check_place
from pulsemend.model.vocabulary import ChannelType, Fill, Format
from pulsemend.progress import finish
from support.written_sets import candidate, make_contents, make_data, plan_text, save_estimates, write_set

NAME = "sub-01_task-lantern_desc-mended"
FILES = {
    *("epochs.h5", "epo.fif", "epochs.tsv", "ledger.tsv", "pulses.tsv", "channels.tsv", "plan.toml"),
    *("marks.toml", "estimates.h5", "provenance.json", "checksums.sha256"),
}


def names_in(folder: Path) -> list[str]:
    return sorted(os.listdir(folder))


def content(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def test_the_folder_holds_exactly_the_files_of_the_contract(tmp_path: Path) -> None:
    folder = write_set(make_contents(), tmp_path / "new" / "parent")
    assert folder == tmp_path / "new" / "parent" / NAME
    assert set(names_in(folder)) == {f"{NAME}_{name}" for name in FILES}
    assert names_in(folder.parent) == [NAME]


def test_every_file_is_on_the_disk_before_the_set_appears(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    log: list[str] = []
    sync_file, sync_folder, rename = folders.sync_file, folders.sync_folder, os.rename
    monkeypatch.setattr("pulsemend.export.set_writer.sync_file", lambda path: log.append(path.name))
    monkeypatch.setattr("pulsemend.export.set_writer.sync_folder", lambda path: log.append("part"))
    monkeypatch.setattr(folders, "sync_folder", lambda path: log.append("parent"))

    def renamed(*paths: Path) -> None:
        log.append("rename")
        rename(*paths)

    monkeypatch.setattr(os, "rename", renamed)
    write_set(make_contents(), tmp_path)
    assert set(log[:-3]) == {f"{NAME}_{name}" for name in FILES}
    assert log[-3:] == ["part", "rename", "parent"]
    synced: list[int] = []
    monkeypatch.setattr(os, "fsync", synced.append)
    sync_file(tmp_path / NAME / f"{NAME}_plan.toml")
    sync_folder(tmp_path)
    assert len(synced) == 2


def test_a_set_that_exists_is_left_alone(tmp_path: Path) -> None:
    folder = write_set(make_contents(), tmp_path)
    before = content(folder)
    with pytest.raises(SetError, match="exists") as caught:
        SetWriter(make_contents(highpass_hz=0.5), tmp_path, overwrite=False)
    assert caught.value.exit_code == 3
    assert content(folder) == before
    assert names_in(tmp_path) == [NAME]


def test_the_place_can_be_checked_before_there_are_contents(tmp_path: Path) -> None:
    check_place(tmp_path / "new", "sub-01", overwrite=False)
    write_set(make_contents(), tmp_path)
    with pytest.raises(SetError, match="exists"):
        check_place(tmp_path, "sub-01_task-lantern", overwrite=False)
    check_place(tmp_path, "sub-01_task-lantern", overwrite=True)
    with pytest.raises(SetError, match="too long"):
        check_place(tmp_path, "x" * 300, overwrite=True)
    assert names_in(tmp_path) == [NAME]


def test_the_writer_tells_the_hash_that_stands_in_the_set(tmp_path: Path) -> None:
    contents = make_contents()
    data, replaced = make_data(contents)
    with SetWriter(contents, tmp_path, overwrite=False) as writer:
        for index in range(3):
            writer.write(index, data[index], replaced[index])
        folder = writer.finish(3, {}, save_estimates)
    with h5py.File(folder / f"{NAME}_epochs.h5") as file:
        assert file.attrs["content_sha256"] == writer.content_sha256
    # written again from double precision: the same set
    again = write_set(contents, tmp_path / "again")
    assert content(again).keys() == content(folder).keys()
    assert (again / f"{NAME}_epochs.h5").read_bytes() == (folder / f"{NAME}_epochs.h5").read_bytes()


def test_overwrite_replaces_it_whole(tmp_path: Path) -> None:
    first = content(write_set(make_contents(), tmp_path))
    folder = write_set(make_contents(formats=(Format.HDF5,)), tmp_path, overwrite=True)
    assert f"{NAME}_epo.fif" in first
    assert set(names_in(folder)) == {f"{NAME}_{name}" for name in FILES - {"epo.fif"}}
    assert names_in(tmp_path) == [NAME]


def test_overwrite_spares_what_is_no_set(tmp_path: Path) -> None:
    folder = tmp_path / NAME
    folder.mkdir()
    (folder / "thesis.docx").write_bytes(b"years of work")
    with pytest.raises(SetError, match=r"thesis\.docx"):
        SetWriter(make_contents(), tmp_path, overwrite=True)
    assert (folder / "thesis.docx").read_bytes() == b"years of work"
    shutil.rmtree(folder)
    folder.write_bytes(b"a file")
    with pytest.raises(SetError, match="no folder"):
        SetWriter(make_contents(), tmp_path, overwrite=True)
    assert folder.read_bytes() == b"a file"


@pytest.mark.parametrize(
    ("changes", "error", "words"),
    [
        ({"formats": ()}, SetError, "no format"),
        ({"formats": (Format.HDF5, Format.MAT)}, SetError, "not in this version"),
        ({"fill": Fill.LEAVE}, SetError, "leave"),
        ({"epochs": ()}, NoEpochs, "no epoch is kept"),
        ({"stem": "x" * 240}, SetError, "too long"),
        ({"stem": "\u03b1" * 120}, SetError, "too long"),
        ({"stem": ""}, SetError, "empty"),
        ({"channels": (SetChannel("a\x00", ChannelType.EEG),)}, SetError, "zero character"),
        ({"ledger": (candidate(1, labels={"trial": "x"}),)}, SetError, "fixed column"),
    ],
)
def test_refusals_come_before_anything_is_written(
    tmp_path: Path, changes: dict[str, Any], error: type[PulsemendError], words: str
) -> None:
    with pytest.raises(error, match=words) as caught:
        SetWriter(make_contents(**changes), tmp_path / "out", overwrite=False)
    assert caught.value.exit_code == 3
    assert names_in(tmp_path) == []


def test_a_fif_file_above_its_limit_is_refused_and_hdf5_named(tmp_path: Path) -> None:
    contents = make_contents()
    big = replace(contents, epochs=contents.epochs * (1_800_000_000 // (3 * 4 * 100 * 4)))
    with pytest.raises(OutOfSpace, match="hdf5") as caught:
        SetWriter(big, tmp_path, overwrite=False)
    assert caught.value.exit_code == 3
    assert names_in(tmp_path) == []


def test_disk_space_is_checked_before_anything_is_written(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(shutil, "disk_usage", lambda _: shutil._ntuple_diskusage(10**9, 10**9, 10_000_000))
    with pytest.raises(OutOfSpace, match=r"needs 0\.03 GB and 0\.01 GB are free"):
        SetWriter(make_contents(), tmp_path / "not" / "there", overwrite=False)
    assert names_in(tmp_path) == []


def test_a_parent_that_is_a_file_is_the_users_error(tmp_path: Path) -> None:
    (tmp_path / "file").write_bytes(b"")
    with pytest.raises(SetError, match="file"):
        write_set(make_contents(), tmp_path / "file")
    with pytest.raises(SetError, match="file"):
        write_set(make_contents(), tmp_path / "file" / "below")


def test_a_disk_that_fills_up_leaves_nothing(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    before = content(write_set(make_contents(), tmp_path))
    original = OpenRegion.write

    def full(self: OpenRegion, index: int, values: Any) -> None:
        if index == 2:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        original(self, index, values)

    monkeypatch.setattr(OpenRegion, "write", full)
    with pytest.raises(OutOfSpace, match="disk is full"):
        write_set(make_contents(), tmp_path, overwrite=True)
    assert names_in(tmp_path) == [NAME]
    assert content(tmp_path / NAME) == before


def test_estimates_that_find_the_disk_full_leave_nothing(tmp_path: Path) -> None:
    # The HDF5 library gives the reason in words, without a number.
    def full(path: Path) -> None:
        path.write_bytes(b"half")
        raise OSError(f"Can't write data (errno = 28, error message = '{os.strerror(errno.ENOSPC)}')")

    with pytest.raises(OutOfSpace):
        write_until_finish(tmp_path, full)
    assert names_in(tmp_path) == []


def write_until_finish(parent: Path, save: Callable[[Path], None]) -> None:
    contents = make_contents()
    data, replaced = make_data(contents)
    with SetWriter(contents, parent, overwrite=False) as writer:
        for index in range(3):
            writer.write(index, data[index].astype(np.float32), replaced[index])
        writer.finish(3, {}, save)


@pytest.mark.parametrize("error", [KeyboardInterrupt, ValueError, SystemExit])
def test_whatever_is_raised_while_writing_leaves_nothing(tmp_path: Path, error: type[BaseException]) -> None:
    contents = make_contents()
    data, replaced = make_data(contents)

    def work() -> None:
        with SetWriter(contents, tmp_path, overwrite=False) as writer:
            writer.write(0, data[0].astype(np.float32), replaced[0])
            assert names_in(tmp_path) == [f".{NAME}.part-{os.getpid()}"]
            raise error

    with pytest.raises(error):
        work()
    assert names_in(tmp_path) == []


def test_closing_the_generator_that_writes_leaves_nothing(tmp_path: Path) -> None:
    def work() -> Iterator[int]:
        with SetWriter(make_contents(), tmp_path, overwrite=False):
            yield 1

    running = work()
    next(running)
    assert len(names_in(tmp_path)) == 1
    running.close()  # type: ignore[attr-defined]
    assert names_in(tmp_path) == []


def test_leaving_without_finish_leaves_nothing(tmp_path: Path) -> None:
    with SetWriter(make_contents(), tmp_path, overwrite=False):
        pass
    assert names_in(tmp_path) == []


def test_epochs_come_in_order_and_all_of_them(tmp_path: Path) -> None:
    contents = make_contents()
    data, replaced = make_data(contents)
    with SetWriter(contents, tmp_path, overwrite=False) as writer:
        with pytest.raises(ValueError, match="epoch 0 of 3 is expected, received 1"):
            writer.write(1, data[1], replaced[1])
        with pytest.raises(ValueError, match="expected"):
            writer.write(0, data[0, :2], replaced[0, :2])
        writer.write(0, data[0], replaced[0])
        with pytest.raises(ValueError, match="1 of 3 epochs"):
            writer.finish(3, {}, save_estimates)
    assert names_in(tmp_path) == []


def test_samples_that_are_not_finite_never_become_a_set(tmp_path: Path) -> None:
    contents = make_contents()
    data, _ = make_data(contents)
    data[1, 2, 3] = np.nan
    with pytest.raises(PulsemendError, match="epoch 1, channel 2, sample 3"):
        write_set(contents, tmp_path, data)
    assert names_in(tmp_path) == []


def test_what_the_disk_changed_never_becomes_a_set(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    original = folders.sync_file

    def rot(path: Path) -> None:
        original(path)
        if path.name.endswith("epochs.h5"):
            data = bytearray(path.read_bytes())
            place = data.index(make_data(make_contents())[0][1].astype("<f4").tobytes()[:64])
            data[place] ^= 1
            path.write_bytes(data)

    monkeypatch.setattr("pulsemend.export.set_writer.sync_file", rot)
    with pytest.raises(PulsemendError, match="content hash") as caught:
        write_set(make_contents(formats=(Format.HDF5,)), tmp_path)
    assert caught.value.exit_code == 4
    assert names_in(tmp_path) == []


def test_two_writers_of_one_set_in_one_process(tmp_path: Path) -> None:
    with SetWriter(make_contents(), tmp_path, overwrite=False):
        with pytest.raises(SetError, match="being written already"):
            SetWriter(make_contents(), tmp_path, overwrite=False)
        # another recording is nobody's business
        write_set(make_contents(stem="sub-02"), tmp_path)
    assert names_in(tmp_path) == ["sub-02_desc-mended"]


def test_a_set_that_appeared_meanwhile_is_not_replaced(tmp_path: Path) -> None:
    contents = make_contents()
    data, replaced = make_data(contents)
    (tmp_path / NAME).mkdir()
    (tmp_path / NAME / f"{NAME}_epochs.tsv").write_bytes(b"")
    (tmp_path / NAME).rename(tmp_path / "later")
    with SetWriter(contents, tmp_path, overwrite=False) as writer:
        for index in range(3):
            writer.write(index, data[index], replaced[index])
        (tmp_path / "later").rename(tmp_path / NAME)
        with pytest.raises(SetError, match="exists"):
            writer.finish(3, {}, save_estimates)
    assert names_in(tmp_path) == [NAME]
    assert names_in(tmp_path / NAME) == [f"{NAME}_epochs.tsv"]


class Killed(BaseException):
    """Stands for the end of the process: nothing after it runs, cleaning up neither."""


STEPS = [
    (os, "rename"),
    (os, "fsync"),
    (os, "unlink"),
    (os, "rmdir"),
    (os, "mkdir"),
    (folders, "sync_file"),
    (folders, "sync_folder"),
    (Path, "write_bytes"),
    (OpenRegion, "__init__"),
    (OpenRegion, "write"),
]


def count_steps(monkeypatch: pytest.MonkeyPatch, fatal: int | None) -> list[str]:
    """Count the steps that touch the disk; the process dies before the fatal one."""
    taken: list[str] = []

    def wrap(owner: Any, name: str) -> None:
        original = getattr(owner, name)

        def step(*args: Any, **named: Any) -> Any:
            if fatal is not None and len(taken) >= fatal:
                raise Killed
            taken.append(name)
            return original(*args, **named)

        monkeypatch.setattr(owner, name, step)

    for owner, name in STEPS:
        wrap(owner, name)
    if fatal is not None:
        monkeypatch.setattr(SetWriter, "abort", SetWriter._close)
    return taken


def die_at(step: int, parent: Path, **changes: Any) -> bool:
    """Write a set until the step; whether the process died."""
    with pytest.MonkeyPatch.context() as patch:
        count_steps(patch, step)
        try:
            write_set(make_contents(**changes), parent, overwrite=True)
        except Killed:
            folders._writing.clear()
            return True
    return False


def test_death_before_any_step_leaves_the_old_set_or_the_new_one(tmp_path: Path) -> None:
    old, new = {"formats": (Format.HDF5,)}, {"formats": (Format.HDF5,), "marks_text": "pulsemend = 1 # new\n"}
    old_content = content(write_set(make_contents(**old), tmp_path / "old"))
    new_content = content(write_set(make_contents(**new), tmp_path / "new"))
    assert old_content != new_content
    died, seen = 0, set()
    while True:
        parent = tmp_path / str(died)
        shutil.copytree(tmp_path / "old", parent)
        if not die_at(died, parent, **new):
            break
        visible = [name for name in names_in(parent) if not name.startswith(".")]
        if visible:
            assert visible == [NAME]
            state = content(parent / NAME)
            assert state in (old_content, new_content), died
        else:
            state = {}
        seen.add("none" if not state else "old" if state == old_content else "new")
        # The next run puts everything in order before it looks at anything else.
        with pytest.raises(SetError, match="exists"):
            SetWriter(make_contents(**new), parent, overwrite=False)
        assert names_in(parent) == [NAME], died
        assert content(parent / NAME) in (old_content, new_content), died
        assert content(parent / NAME) == (state or old_content), died
        died += 1
    assert died > 30
    assert seen == {"none", "old", "new"}
    assert content(parent / NAME) == new_content


def test_death_before_any_step_of_a_first_set_leaves_none_or_all(tmp_path: Path) -> None:
    changes = {"formats": (Format.HDF5,)}
    whole = content(write_set(make_contents(**changes), tmp_path / "whole"))
    died = 0
    while True:
        parent = tmp_path / str(died)
        parent.mkdir()
        if not die_at(died, parent, **changes):
            break
        if (parent / NAME).exists():
            assert content(parent / NAME) == whole
        else:
            assert content(write_set(make_contents(**changes), parent)) == whole
        assert names_in(parent) in ([NAME], [NAME, f".{NAME}.part-{os.getpid()}"])
        died += 1
    assert died > 20


def test_death_while_putting_things_in_order_loses_nothing(tmp_path: Path) -> None:
    old = content(write_set(make_contents(formats=(Format.HDF5,)), tmp_path / "old"))
    dead = 2**22 + 1  # no Linux process has so large a number
    died = 0
    while True:
        parent = tmp_path / str(died)
        shutil.copytree(tmp_path / "old", parent)
        (parent / NAME).rename(parent / f".{NAME}.old-{dead}")
        (parent / f".{NAME}.part-{dead}").mkdir()
        (parent / f".{NAME}.part-{dead}" / "half").write_bytes(b"half")
        with pytest.MonkeyPatch.context() as patch:
            count_steps(patch, died)
            try:
                folders.recover(parent / NAME)
            except Killed:
                pass
            else:
                break
        folders.recover(parent / NAME)
        assert names_in(parent) == [NAME]
        assert content(parent / NAME) == old
        died += 1
    assert died >= 3


def test_folders_of_living_processes_and_of_other_sets_are_left_alone(tmp_path: Path) -> None:
    alive = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    try:
        kept = [f".{NAME}.part-{alive.pid}", f".sub-02_desc-mended.part-{2**22 + 1}", f".{NAME}.part-x"]
        for name in kept:
            (tmp_path / name).mkdir()
        folders.recover(tmp_path / NAME)
        assert names_in(tmp_path) == sorted(kept)
    finally:
        alive.communicate(b"\n")
    folders.recover(tmp_path / NAME)
    assert f".{NAME}.part-{alive.pid}" not in names_in(tmp_path)


@pytest.mark.skipif(os.name != "posix", reason="sends a signal that Windows does not have")
def test_a_killed_process_leaves_no_set_and_the_next_run_cleans_up(tmp_path: Path) -> None:
    code = """
        import os, pathlib, signal, sys
        sys.path.insert(0, sys.argv[1])
        from support.written_sets import make_contents, make_data
        from pulsemend.export.set_writer import SetWriter
        contents = make_contents()
        data, replaced = make_data(contents)
        writer = SetWriter(contents, pathlib.Path(sys.argv[2]), False).open()
        writer.write(0, data[0], replaced[0])
        os.kill(os.getpid(), signal.SIGKILL)
    """
    tests = str(Path(__file__).resolve().parents[1])
    run = subprocess.run([sys.executable, "-c", textwrap.dedent(code), tests, str(tmp_path)], check=False)
    assert run.returncode == -signal.SIGKILL
    (left,) = names_in(tmp_path)
    assert left.startswith(f".{NAME}.part-")
    write_set(make_contents(), tmp_path)
    assert names_in(tmp_path) == [NAME]


@pytest.mark.skipif(shutil.which("sha256sum") is None, reason="needs the program sha256sum")
@pytest.mark.parametrize(
    "stem", ["x", "-rf", "a b'c\"", "\u65e5\u672c\u8a9e_\u03b1", "new\nline\\back", "y" * 226, "%s{}"]
)
def test_odd_names(tmp_path: Path, stem: str) -> None:
    folder = write_set(make_contents(stem=stem), tmp_path)
    assert folder.name == f"{stem}_desc-mended"
    assert finish(check_set(folder)).ok
    (checksums,) = folder.glob("*_checksums.sha256")
    run = subprocess.run(
        ["sha256sum", "-c", "--strict", "--quiet", "--", f"./{checksums.name}"],
        cwd=folder,
        check=False,
        capture_output=True,
    )
    assert run.returncode == 0, run.stderr


def test_leave_keeps_missing_samples_in_hdf5_only(tmp_path: Path) -> None:
    text = plan_text("leave").replace('"hdf5", "fif"', '"hdf5"')
    contents = make_contents(fill=Fill.LEAVE, formats=(Format.HDF5,), plan_text=text)
    data, replaced = make_data(contents)
    data[replaced] = np.nan
    assert finish(check_set(write_set(contents, tmp_path, data, replaced))).ok
    data[0, 0, 0] = np.nan
    with pytest.raises(PulsemendError, match="epoch 0, channel 0, sample 0"):
        write_set(contents, tmp_path / "more", data, replaced)
