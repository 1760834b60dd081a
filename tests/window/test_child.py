"""Commands as child processes: progress, result, exit codes in words, cancelling, and no process left."""

from __future__ import annotations

import os
import sys
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from pytestqt.qtbot import QtBot

from pulsemend.errors import PulsemendError
from pulsemend.progress import Progress
from pulsemend.window.child import ChildFailure, ChildJob, Children, MendOrder

SPEAKER = """
import json, sys
def say(stage, done, total, left):
    line = {"stage": stage, "done": done, "total": total, "seconds_left": left}
    print(json.dumps(line), file=sys.stderr, flush=True)
"""

WAITER = (
    SPEAKER
    + """
import os, signal, time
def stop(_number, _frame):
    signal.signal(signal.SIGTERM, signal.SIG_IGN)
    raise KeyboardInterrupt
signal.signal(signal.SIGTERM, stop)
open(sys.argv[1], "w").write(str(os.getpid()))
try:
    say("waiting", 0, 1, None)
    time.sleep(600)
except KeyboardInterrupt:
    os.remove(sys.argv[1])
    print(json.dumps({"error": {"kind": "Cancelled", "what": "cancelled"}, "exit_code": 130}))
    sys.exit(130)
"""
)

STUBBORN = (
    SPEAKER
    + """
import os, signal, time
signal.signal(signal.SIGTERM, signal.SIG_IGN)
say(str(os.getpid()), 0, 1, None)
time.sleep(600)
"""
)

SAMPLE = Path(__file__).resolve().parents[2] / "sample_data"


@pytest.fixture
def children(qtbot: QtBot) -> Iterator[Children]:
    children = Children()
    yield children
    children.close()
    assert children.under_way == ()


class Ears:
    """Writes down what a child says."""

    def __init__(self, job: ChildJob) -> None:
        self.progress: list[tuple[Progress, float | None]] = []
        self.ends: list[Any] = []
        job.progressed.connect(lambda progress, left: self.progress.append((progress, left)))
        job.returned.connect(self.ends.append)
        job.failed.connect(self.ends.append)
        job.cancelled.connect(lambda: self.ends.append("cancelled"))
        job.finished.connect(lambda: self.ends.append("finished"))


def run(qtbot: QtBot, children: Children, code: str, *arguments: str) -> Ears:
    job = children.start("mend", sys.executable, ["-c", code, *arguments])
    ears = Ears(job)
    with qtbot.waitSignal(job.finished, timeout=60_000):
        assert children.under_way == (job,)
    assert not job.is_running
    return ears


def failure(ears: Ears) -> ChildFailure:
    error, finished = ears.ends
    assert isinstance(error, ChildFailure)
    assert finished == "finished"
    return error


def is_alive(pid: int) -> bool:
    try:
        os.kill(pid, 0)
    except ProcessLookupError:
        return False
    return True


def test_progress_and_result(qtbot: QtBot, children: Children) -> None:
    code = (
        SPEAKER + 'say("fit", 1, 4, None); say("fit", 2, 4, 3.5)\nprint(json.dumps({"kept": 12, "set": "ü"}))'
    )
    ears = run(qtbot, children, code)
    assert ears.progress == [(Progress("fit", 1, 4), None), (Progress("fit", 2, 4), 3.5)]
    assert ears.ends == [{"kept": 12, "set": "ü"}, "finished"]


def test_lines_in_pieces_and_a_last_one_without_end(qtbot: QtBot, children: Children) -> None:
    code = """
import json, sys
line = json.dumps({"stage": "fit", "done": 1, "total": 2, "seconds_left": None}) + "\\n"
for piece in (line[:10], line[10:] + line[:30], line[30:-1]):
    sys.stderr.write(piece)
    sys.stderr.flush()
"""
    ears = run(qtbot, children, code)
    assert [progress for progress, _ in ears.progress] == [Progress("fit", 1, 2)] * 2
    assert failure(ears).what == "the command gave no result"


def test_a_large_result_comes_whole(qtbot: QtBot, children: Children) -> None:
    ears = run(qtbot, children, 'import json; print(json.dumps({"many": list(range(200_000))}))')
    assert ears.ends == [{"many": list(range(200_000))}, "finished"]


def test_an_error_is_told_as_the_command_said_it(qtbot: QtBot, children: Children) -> None:
    code = """
import json, sys
print("a library warns", file=sys.stderr)
print(json.dumps({"error": "x: is broken"}), file=sys.stderr)
error = {"kind": "PlanError", "what": "is broken", "where": "x", "todo": "Mend it"}
print(json.dumps({"error": error, "exit_code": 3}))
sys.exit(3)
"""
    error = failure(run(qtbot, children, code))
    assert isinstance(error, PulsemendError)
    assert (str(error), error.exit_code, error.kind) == ("x: is broken. Mend it", 3, "PlanError")
    assert error.notes == ("a library warns",)


@pytest.mark.parametrize(
    ("code", "words"),
    [
        (1, "the check failed"),
        (2, "used wrongly"),
        (3, "cannot be used"),
        (4, "a fault of ours"),
        (77, "ended with 77"),
        (0, "no result"),
    ],
)
def test_exit_codes_become_words(qtbot: QtBot, children: Children, code: int, words: str) -> None:
    ears = run(qtbot, children, f"import sys; print('[1]'); sys.exit({code})")
    assert words in str(failure(ears))
    assert failure(ears).exit_code == code


def test_a_traceback_is_kept_for_the_details(qtbot: QtBot, children: Children) -> None:
    error = failure(run(qtbot, children, "1 / 0"))
    assert error.notes[-1].startswith("ZeroDivisionError")


def test_a_command_that_was_killed_by_others_failed(qtbot: QtBot, children: Children) -> None:
    error = failure(run(qtbot, children, "import os; os.kill(os.getpid(), 9)"))
    assert str(error) == "the command was ended by signal 9"
    assert error.exit_code == -9


def test_a_command_that_is_not_there_failed(qtbot: QtBot, children: Children, tmp_path: Path) -> None:
    job = children.start("mend", str(tmp_path / "nowhere"), [])
    ears = Ears(job)
    with qtbot.waitSignal(job.finished, timeout=60_000):
        pass
    assert "cannot be started" in str(failure(ears))


def test_a_cancelled_child_cleans_up(qtbot: QtBot, children: Children, tmp_path: Path) -> None:
    part = tmp_path / "part"
    job = children.start("mend", sys.executable, ["-c", WAITER, str(part)])
    ears = Ears(job)
    with qtbot.waitSignal(job.progressed, timeout=60_000):
        pass
    pid = int(part.read_text())
    with qtbot.waitSignal(job.finished, timeout=60_000):
        job.cancel()
        job.cancel()
    assert ears.ends == ["cancelled", "finished"]
    assert not part.exists()
    assert not is_alive(pid)


def test_a_child_cancelled_before_it_started_never_does(
    qtbot: QtBot, children: Children, tmp_path: Path
) -> None:
    job = children.start("mend", sys.executable, ["-c", WAITER, str(tmp_path / "part")])
    ears = Ears(job)
    job.cancel()
    with qtbot.waitSignal(job.finished, timeout=60_000):
        pass
    assert ears.ends == ["cancelled", "finished"]
    assert list(tmp_path.iterdir()) == []


def test_closing_waits_for_the_cleaning(qtbot: QtBot, children: Children, tmp_path: Path) -> None:
    parts = [tmp_path / "one", tmp_path / "two"]
    jobs = [children.start("mend", sys.executable, ["-c", WAITER, str(part)]) for part in parts]
    ears = [Ears(job) for job in jobs]
    with qtbot.waitSignals([job.progressed for job in jobs], timeout=60_000):
        pass
    children.close(60_000)
    assert [one.ends for one in ears] == [["cancelled", "finished"]] * 2
    assert list(tmp_path.iterdir()) == []


def test_closing_kills_what_does_not_stop(qtbot: QtBot, children: Children) -> None:
    job = children.start("mend", sys.executable, ["-c", STUBBORN])
    ears = Ears(job)
    with qtbot.waitSignal(job.progressed, timeout=60_000):
        pass
    pid = int(ears.progress[0][0].stage)
    assert is_alive(pid)
    children.close(10)
    assert ears.ends == ["cancelled", "finished"]
    assert not is_alive(pid)


def test_a_cancelled_child_that_does_not_stop_is_killed(
    qtbot: QtBot, children: Children, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("pulsemend.window.child.KILL_AFTER_MS", 10)
    job = children.start("mend", sys.executable, ["-c", STUBBORN])
    ears = Ears(job)
    with qtbot.waitSignal(job.progressed, timeout=60_000):
        pass
    with qtbot.waitSignal(job.finished, timeout=60_000):
        job.cancel()
    assert ears.ends == ["cancelled", "finished"]


def test_a_result_that_came_before_the_cancel_counts(qtbot: QtBot, children: Children) -> None:
    """The set is there: saying "cancelled" would be wrong."""
    code = SPEAKER + 'import signal\nsignal.signal(signal.SIGTERM, signal.SIG_IGN)\nsay("a", 0, 1, None)\n'
    code += 'sys.stdin.read(); print(json.dumps({"set": "x"}))'
    job = children.start("mend", sys.executable, ["-c", code])
    ears = Ears(job)
    with qtbot.waitSignal(job.progressed, timeout=60_000):
        pass
    with qtbot.waitSignal(job.finished, timeout=60_000):
        job.cancel()
    assert ears.ends == [{"set": "x"}, "finished"]


def test_the_order_is_the_command_of_the_readme(qtbot: QtBot, children: Children, tmp_path: Path) -> None:
    order = MendOrder(tmp_path / "lt01.vhdr", tmp_path / "p.toml", tmp_path / "sets", overwrite=True)
    paths = [str(tmp_path / name) for name in ("lt01.vhdr", "p.toml", "sets")]
    assert order.arguments == (
        *("-P", "-m", "pulsemend", "mend", paths[0], "--plan", paths[1], "--out", paths[2]),
        *("--overwrite", "--json"),
    )
    full = MendOrder(order.recording, order.plan, order.out, tmp_path / "m.toml", dry_run=True)
    assert full.arguments[-4:] == ("--marks", str(tmp_path / "m.toml"), "--dry-run", "--json")


def test_the_real_command_says_what_is_missing(qtbot: QtBot, children: Children, tmp_path: Path) -> None:
    job = children.start_mend(MendOrder(tmp_path / "lt01.vhdr", tmp_path / "p.toml", tmp_path / "sets"))
    ears = Ears(job)
    with qtbot.waitSignal(job.finished, timeout=60_000):
        pass
    error = failure(ears)
    assert error.exit_code == 3
    assert "lt01.vhdr" in str(error)
    assert error.kind
    assert not (tmp_path / "sets").exists()


def sample_order(out: Path) -> MendOrder:
    return MendOrder(SAMPLE / "sub-lt01_task-lantern_eeg.vhdr", SAMPLE / "lantern.toml", out)


@pytest.mark.slow
def test_the_real_command_mends_the_sample(qtbot: QtBot, children: Children, tmp_path: Path) -> None:
    job = children.start_mend(sample_order(tmp_path))
    ears = Ears(job)
    with qtbot.waitSignal(job.finished, timeout=120_000):
        pass
    result, finished = ears.ends
    assert finished == "finished"
    assert result["kept"] > 0
    assert Path(result["set"]).parent == tmp_path
    assert ears.progress
    assert ears.progress[-1][0].done == ears.progress[-1][0].total


@pytest.mark.slow
def test_the_real_command_cancelled_leaves_nothing(qtbot: QtBot, children: Children, tmp_path: Path) -> None:
    job = children.start_mend(sample_order(tmp_path))
    ears = Ears(job)
    with qtbot.waitSignal(job.progressed, timeout=60_000):
        pass
    with qtbot.waitSignal(job.finished, timeout=60_000):
        job.cancel()
    assert ears.ends == ["cancelled", "finished"]
    assert list(tmp_path.iterdir()) == []
