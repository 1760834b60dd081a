"""Folders that appear whole or not at all.

A set is written to ``DIR/.STEM_desc-mended.part-<pid>`` and renamed to ``DIR/STEM_desc-mended``. A set that
is replaced is first renamed to ``DIR/.STEM_desc-mended.old-<pid>``. A process may end between any two steps:
whatever stands in a ``.part`` folder of a dead process is garbage; an ``.old`` folder of a dead process is
the set itself if no other stands in its place, else garbage too.
"""

from __future__ import annotations

import errno
import os
import re
import shutil
import sys
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from pulsemend.errors import OutOfSpace, SetError
from pulsemend.export.contents import CHECKSUMS, SUFFIX

_LONGEST_NAME = 255

_writing: set[Path] = set()
"""`.part` folders that this process is writing now."""


def set_folder(parent: Path, stem: str) -> Path:
    """Say where the set of a recording stands.

    Parameters
    ----------
    parent : Path
        Folder of sets.
    stem : str
        The recording's name.
    """
    return parent / f"{stem}{SUFFIX}"


def file_in(folder: Path, prefix: str, name: str) -> Path:
    """Path of one of the set's files: every name starts with the set's own.

    Parameters
    ----------
    folder : Path
        Where it lies.
    prefix : str
        ``STEM_desc-mended``.
    name : str
        What follows the prefix.
    """
    return folder / f"{prefix}_{name}"


def check_name(stem: str) -> None:
    """Refuse a recording's name that cannot be a folder's.

    Parameters
    ----------
    stem : str
        The recording's name.

    Raises
    ------
    SetError
        The name is empty, holds a separator, or is too long.
    """
    if (
        not stem
        or re.search(r"[/\x00]", stem)
        or len(os.fsencode(f"{stem}{SUFFIX}_{CHECKSUMS}")) > _LONGEST_NAME
    ):
        raise SetError(
            "the recording's name is empty or too long to name the files of a set",
            where=stem[:60],
            todo="Give the recording a shorter name",
        )


def recover(folder: Path) -> None:
    """Clean up after processes that died while they wrote this set.

    Parameters
    ----------
    folder : Path
        Where the set stands or will stand.

    Raises
    ------
    SetError
        A set that was aside cannot be put back, or this process is writing the same set.
    """
    if _aside(folder, "part") in _writing:
        raise SetError("the set is being written already", where=str(folder))
    with user_errors(folder):
        for old in _leftovers(folder, "old"):
            if os.path.lexists(folder):
                _discard(old, folder)
            else:
                os.rename(old, folder)
                sync_folder(folder.parent)
        for part in _leftovers(folder, "part"):
            shutil.rmtree(part)


def make_part(folder: Path) -> Path:
    """Make the folder that a set is written to.

    Parameters
    ----------
    folder : Path
        Where the set will stand.

    Raises
    ------
    SetError
        It cannot be made.
    """
    part = _aside(folder, "part")
    with user_errors(folder):
        folder.parent.mkdir(parents=True, exist_ok=True)
        if os.path.lexists(part):
            shutil.rmtree(part)
        part.mkdir()
    _writing.add(part)
    return part


def drop_part(part: Path) -> None:
    """Remove the folder that a set was written to; what cannot be removed is left for the next run.

    Parameters
    ----------
    part : Path
        As `make_part` returned it.
    """
    shutil.rmtree(part, ignore_errors=True)
    _writing.discard(part)


def publish(part: Path, folder: Path, *, overwrite: bool) -> None:
    """Put a finished set in its place.

    Parameters
    ----------
    part : Path
        The finished set.
    folder : Path
        Its place.
    overwrite : bool
        Whether a set that stands there is replaced.

    Raises
    ------
    SetError
        Something stands there that must not be replaced, or the disk refuses.
    """
    old = _aside(folder, "old")
    with user_errors(folder):
        try:
            if os.path.lexists(folder):
                if not overwrite:
                    raise SetError("the set exists", where=str(folder), todo="Use --overwrite to replace it")
                check_replaceable(folder)
                os.rename(folder, old)
            os.rename(part, folder)
        except BaseException:
            if os.path.lexists(old) and not os.path.lexists(folder):
                os.rename(old, folder)
            raise
        _writing.discard(part)
        sync_folder(folder.parent)
    # The new set stands. What cannot be removed now, the next run removes.
    with suppress(OSError):
        if os.path.lexists(old):
            _discard(old, folder)


def check_replaceable(folder: Path) -> None:
    """Refuse to replace anything but a set.

    Parameters
    ----------
    folder : Path
        Where the set will stand.

    Raises
    ------
    SetError
        It is no folder, or holds files that are not the set's own.
    """
    if not folder.is_dir() or folder.is_symlink():
        raise SetError("is in the way and is no folder", where=str(folder), todo="Move it elsewhere")
    with os.scandir(folder) as entries:
        foreign = sorted(
            entry.name
            for entry in entries
            if not entry.name.startswith(f"{folder.name}_") or entry.is_dir(follow_symlinks=False)
        )
    if foreign:
        raise SetError(
            f"holds files that are not the set's own: {', '.join(foreign[:3])}",
            where=str(folder),
            todo="Move them elsewhere; a replaced set is removed with all that is in it",
        )


def check_space(parent: Path, needed: int) -> None:
    """Refuse to start what the disk cannot hold.

    Parameters
    ----------
    parent : Path
        Need not exist yet.
    needed : int
        Bytes.

    Raises
    ------
    OutOfSpace
        With the bytes needed and free.
    """
    place = parent.absolute()
    while not place.exists():
        place = place.parent
    free = shutil.disk_usage(place).free
    if needed > free:
        raise OutOfSpace(
            f"the set needs {needed / 1e9:.2f} GB and {free / 1e9:.2f} GB are free",
            where=str(parent),
            todo="Free space, or choose another folder or fewer formats",
        )


def sync_file(path: Path) -> None:
    """Have the disk hold a file before anything is built on it.

    Parameters
    ----------
    path : Path
        The file.
    """
    with path.open("r+b") as file:
        os.fsync(file.fileno())


def sync_folder(folder: Path) -> None:
    """Have the disk hold a folder's names; where folders cannot be opened there is nothing to do.

    Parameters
    ----------
    folder : Path
        The folder.
    """
    if os.name != "posix":
        return
    handle = os.open(folder, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


@contextmanager
def user_errors(folder: Path) -> Iterator[None]:
    """Turn what the disk refuses into an error for the user.

    Parameters
    ----------
    folder : Path
        The set's, for messages.

    Raises
    ------
    OutOfSpace
        The disk is full.
    SetError
        Anything else.
    """
    try:
        yield
    except OSError as error:
        # The HDF5 library gives the reason in words only.
        if error.errno in (errno.ENOSPC, errno.EDQUOT) or os.strerror(errno.ENOSPC) in str(error):
            raise OutOfSpace(
                "the disk is full", where=str(folder), todo="Free space; nothing was left behind"
            ) from error
        if error.errno in (errno.EACCES, errno.EPERM, errno.EROFS, errno.ENOTDIR):
            raise SetError(
                f"the set cannot be written here ({error.strerror})",
                where=str(folder.parent),
                todo="Choose another folder, or change who may write to it",
            ) from error
        raise SetError(error.strerror or str(error), where=str(error.filename or folder)) from error


def _aside(folder: Path, kind: str) -> Path:
    return folder.parent / f".{folder.name}.{kind}-{os.getpid()}"


def _leftovers(folder: Path, kind: str) -> list[Path]:
    """Folders of that kind beside the set whose process is dead, or was an earlier one with our number."""
    pattern = re.compile(re.escape(f".{folder.name}.{kind}-") + r"(\d+)")
    found = []
    if not folder.parent.is_dir():
        return []
    for name in sorted(os.listdir(folder.parent)):
        match = pattern.fullmatch(name)
        path = folder.parent / name
        if match and path not in _writing and not _alive(int(match[1])):
            found.append(path)
    return found


def _alive(pid: int) -> bool:
    """Whether another process of that number runs."""
    if pid == os.getpid():
        return False
    if sys.platform == "win32":
        import ctypes

        handle = ctypes.windll.kernel32.OpenProcess(0x1000, False, pid)
        if handle:
            ctypes.windll.kernel32.CloseHandle(handle)
        return bool(handle)
    try:
        os.kill(pid, 0)
    except (ProcessLookupError, OverflowError):
        return False
    except PermissionError:
        return True
    return True


def _discard(old: Path, folder: Path) -> None:
    """Remove a replaced set. Renamed first: half of it must never be taken for the set again."""
    garbage = _aside(folder, "part")
    if os.path.lexists(garbage):
        shutil.rmtree(garbage)
    os.rename(old, garbage)
    shutil.rmtree(garbage)
