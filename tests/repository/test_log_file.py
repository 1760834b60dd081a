"""The log: in the user's state folder, without names, file names or absolute paths at INFO."""

from __future__ import annotations

import gc
import logging
import sys
import threading
from pathlib import Path

import pytest

from pulsemend.logs import log_file, logging_to_file


@pytest.fixture(autouse=True)
def fresh_log() -> None:
    log_file().unlink(missing_ok=True)


def written() -> str:
    return log_file().read_text("utf-8")


def failing(path: str) -> None:
    try:
        raise FileNotFoundError(2, "No such file", path)
    except FileNotFoundError as error:
        raise ValueError(f"cannot use {path}") from error


def test_log_lies_in_the_state_folder(strangers_home: Path) -> None:
    assert log_file().is_relative_to(strangers_home)
    with logging_to_file():
        logging.getLogger("pulsemend.engine.fit").info("%d channels", 62)
    assert "pulsemend.engine.fit: 62 channels" in written()


def test_paths_in_messages_are_masked() -> None:
    log = logging.getLogger("pulsemend.readers")
    with logging_to_file():
        log.info("reading %s", Path("raw/lt01.vhdr"))
        log.warning("cannot write '/data/lt01/x.h5' now")
        log.info(r"reading C:\data\lt01.vhdr and ~/lt01.vhdr")
        log.info("1/f slope and 0.5/s stay")
    text = written()
    assert "lt01" not in text
    assert "reading <path>" in text
    assert "1/f slope and 0.5/s stay" in text


def test_exceptions_keep_their_class_and_place_only() -> None:
    with logging_to_file():
        try:
            failing("/data/lt01.vhdr")
        except ValueError:
            logging.getLogger("pulsemend").exception("a fault of ours")
    text = written()
    assert "builtins.ValueError" in text
    assert "builtins.FileNotFoundError" in text
    assert "in failing" in text
    assert "lt01" not in text
    assert "/" not in text


def test_debug_writes_everything() -> None:
    with logging_to_file(debug=True):
        logging.getLogger("pulsemend").debug("reading %s", Path("raw/lt01.vhdr"))
        try:
            failing("/data/lt01.vhdr")
        except ValueError:
            logging.getLogger("pulsemend").exception("a fault of ours")
    assert "reading raw/lt01.vhdr" in written()
    assert "cannot use /data/lt01.vhdr" in written()


def test_debug_messages_are_not_in_the_usual_log() -> None:
    with logging_to_file():
        logging.getLogger("pulsemend").debug("participant lt01")
        logging.getLogger("pulsemend").info("began")
    assert "lt01" not in written()
    assert "began" in written()


def test_other_libraries_do_not_write_into_it() -> None:
    """They log file names at INFO."""
    with logging_to_file():
        logging.getLogger("mne").warning("opening lt01.vhdr")
        logging.getLogger("pulsemend").info("began")
    assert "lt01" not in written()


def test_log_rotates_and_stays_small() -> None:
    log = logging.getLogger("pulsemend")
    with logging_to_file():
        for _ in range(3_000):
            log.info("x" * 1_000)
    logs = list(log_file().parent.glob("pulsemend.log*"))
    assert 2 <= len(logs) <= 4
    assert all(path.stat().st_size <= 512 * 1024 for path in logs)


def test_hooks_log_what_nobody_caught_and_are_put_back(monkeypatch: pytest.MonkeyPatch) -> None:
    passed_on: list[str] = []
    monkeypatch.setattr(sys, "excepthook", lambda *_args: passed_on.append("main"))
    monkeypatch.setattr(threading, "excepthook", lambda _args: passed_on.append("thread"))
    monkeypatch.setattr(sys, "unraisablehook", lambda _args: passed_on.append("destructor"))
    before = (sys.excepthook, threading.excepthook, sys.unraisablehook)

    class Failing:
        def __del__(self) -> None:
            raise LookupError("in a destructor")

    def ends() -> None:
        raise ArithmeticError("in a thread")

    with logging_to_file():
        sys.excepthook(BufferError, BufferError("in main"), None)
        thread = threading.Thread(target=ends)
        thread.start()
        thread.join()
        Failing()
        gc.collect()
    assert passed_on == ["main", "thread", "destructor"]
    assert all(name in written() for name in ("BufferError", "ArithmeticError", "LookupError"))
    assert (sys.excepthook, threading.excepthook, sys.unraisablehook) == before


def test_without_a_writable_state_folder_it_works_unlogged(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    blocked = tmp_path / "a file"
    blocked.touch()
    monkeypatch.setenv("XDG_STATE_HOME", str(blocked))
    with logging_to_file():
        logging.getLogger("pulsemend").info("began")
    assert blocked.read_bytes() == b""


def test_nothing_is_left_behind_on_the_logger() -> None:
    package = logging.getLogger("pulsemend")
    before = list(package.handlers), package.level
    with logging_to_file():
        assert package.handlers != before[0]
    assert (package.handlers, package.level) == before
