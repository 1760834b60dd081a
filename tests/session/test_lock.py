"""The lock of a recording: a second window is warned, a dead one never is in the way."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from pathlib import Path

from pulsemend.session.lock import lock_recording


def test_a_second_window_is_told_who_has_the_recording(tmp_path: Path) -> None:
    recording = tmp_path / "lt01.vhdr"
    first = lock_recording(tmp_path / "locks", recording)
    second = lock_recording(tmp_path / "locks", recording)
    other = lock_recording(tmp_path / "locks", tmp_path / "lt02.vhdr")
    assert first.is_held
    assert first.other is None
    assert other.is_held
    assert not second.is_held
    assert second.other is not None
    assert second.other.pid == os.getpid()
    assert f"open in another window (process {os.getpid()} on " in second.other.words
    second.release()
    assert not lock_recording(tmp_path / "locks", recording).is_held
    first.release()
    first.release()
    third = lock_recording(tmp_path / "locks", recording)
    assert third.is_held
    third.release()
    other.release()
    assert list((tmp_path / "locks").iterdir()) == []


def test_the_lock_of_a_killed_process_is_taken_over(tmp_path: Path) -> None:
    code = (
        "import sys, time; from pathlib import Path; from pulsemend.session.lock import lock_recording\n"
        "lock = lock_recording(Path(sys.argv[1]), Path(sys.argv[2])); print(lock.is_held, flush=True)\n"
        "time.sleep(600)"
    )
    command = [sys.executable, "-c", code, str(tmp_path), str(tmp_path / "lt01.vhdr")]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as window:
        assert window.stdout is not None
        assert window.stdout.readline() == "True\n"
        lock = lock_recording(tmp_path, tmp_path / "lt01.vhdr")
        assert lock.other is not None
        assert lock.other.pid == window.pid
        window.send_signal(signal.SIGKILL)
    lock = lock_recording(tmp_path, tmp_path / "lt01.vhdr")
    assert lock.is_held
    lock.release()


def test_a_file_of_nonsense_is_taken_over(tmp_path: Path) -> None:
    lock = lock_recording(tmp_path, tmp_path / "lt01.vhdr")
    (path,) = tmp_path.iterdir()
    path.write_text("nonsense")
    second = lock_recording(tmp_path, tmp_path / "lt01.vhdr")
    assert second.other is not None
    assert second.other.pid == 0
    assert "process" not in second.other.words
    lock.release()
    path.write_text("nonsense")
    third = lock_recording(tmp_path, tmp_path / "lt01.vhdr")
    assert third.is_held
    fourth = lock_recording(tmp_path, tmp_path / "lt01.vhdr")
    assert fourth.other is not None
    assert fourth.other.pid == os.getpid()
    third.release()


def test_without_a_folder_nobody_is_warned(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    lock = lock_recording(tmp_path / "file" / "locks", tmp_path / "lt01.vhdr")
    assert not lock.is_held
    assert lock.other is None
    lock.release()
