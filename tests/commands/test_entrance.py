"""The program's entrance: light start, exit codes, cancelling."""

from __future__ import annotations

import argparse
import json
import os
import signal
import subprocess
import sys
import types
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

from pulsemend import __version__
from pulsemend.__main__ import main
from pulsemend.commands import output, parser
from pulsemend.errors import Cancelled, InputError, UsageError
from pulsemend.logs import log_file
from pulsemend.progress import Progress, Work

PROGRAM = [sys.executable, "-m", "pulsemend"]


@pytest.fixture
def fake(monkeypatch: pytest.MonkeyPatch) -> Callable[[Callable[[], int]], None]:
    """Put a command called `fake` in place that does what it is told."""

    def install(does: Callable[[], int]) -> None:
        module = types.ModuleType("pulsemend.commands.fake")

        def add_arguments(parser: argparse.ArgumentParser) -> None:
            parser.add_argument("recording", nargs="?")
            parser.add_argument("--json", action="store_true")

        def run(_args: argparse.Namespace) -> int:
            return does()

        vars(module).update(add_arguments=add_arguments, run=run)
        monkeypatch.setitem(sys.modules, "pulsemend.commands.fake", module)
        monkeypatch.setitem(parser.COMMANDS, "fake", "a command for the tests")

    return install


def raising(error: BaseException) -> Callable[[], int]:
    def does() -> int:
        raise error

    return does


def test_version_loads_no_heavy_library() -> None:
    """Bound from the issue: neither Qt nor the reader library; arrays are not needed either."""
    code = (
        "import sys\nfrom pulsemend.__main__ import main\ncode = main(['--version'])\n"
        "heavy = {'PySide6', 'pyqtgraph', 'mne', 'numpy', 'scipy', 'h5py', 'tomlkit', 'distributed'}\n"
        "print(sorted(heavy & set(sys.modules)), code)"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert result.stdout == f"pulsemend {__version__}\n[] 0\n"


@pytest.mark.parametrize("name", sorted(parser.COMMANDS))
def test_every_command_has_help(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main([name, "--help"]) == 0
    assert f"usage: pulsemend {name}" in capsys.readouterr().out


def test_help_lists_the_commands(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["--help"]) == 0
    text = capsys.readouterr().out
    assert all(f"  {name} " in text for name in parser.COMMANDS)


@pytest.mark.parametrize(
    ("words", "options"),
    [
        (["demo"], {"folder": Path("pulsemend-demo"), "no_window": False}),
        (["demo", "d", "--no-window"], {"folder": Path("d"), "no_window": True}),
        (["sample", "d", "--recordings", "3"], {"folder": Path("d"), "recordings": 3}),
        (
            ["facts", "r.vhdr", "--json"],
            {"recording": Path("r.vhdr"), "json": True, "plan": None, "marks": None, "events": None},
        ),
        (
            ["facts", "r.vhdr", "--plan", "p.toml", "--marks", "m.toml", "--events", "e.tsv"],
            {
                "recording": Path("r.vhdr"),
                "json": False,
                "plan": Path("p.toml"),
                "marks": Path("m.toml"),
                "events": Path("e.tsv"),
            },
        ),
        (["draft", "r.vhdr", "--out", "p.toml"], {"recording": Path("r.vhdr"), "out": Path("p.toml")}),
        (
            [
                "mend",
                "r.vhdr",
                "--plan",
                "p.toml",
                "--out",
                "d",
                "--overwrite",
                "--dry-run",
                "--marks",
                "m.toml",
            ],
            {
                "recording": Path("r.vhdr"),
                "plan": Path("p.toml"),
                "out": Path("d"),
                "marks": Path("m.toml"),
                "overwrite": True,
                "dry_run": True,
                "json": False,
            },
        ),
        (["check", "s", "--strict"], {"set": Path("s"), "json": False, "strict": True}),
        (["r.vhdr", "--plan", "p.toml"], {"recording": Path("r.vhdr"), "plan": Path("p.toml")}),
        ([], {"recording": None, "plan": None}),
        (["--debug", "check", "s"], {"set": Path("s"), "json": False, "strict": False, "debug": True}),
    ],
)
def test_options_are_those_of_the_contract(words: list[str], options: dict[str, object]) -> None:
    """Design, section 4.1."""
    _, args = parser.parse(words)
    assert vars(args) == {"debug": False} | options


@pytest.mark.parametrize(
    "words",
    [
        ["mend", "r.vhdr"],
        ["mend", "r.vhdr", "--plan", "p", "--out", "d", "--over"],
        ["check"],
        ["sample", "d", "--recordings", "0"],
        ["--unknown"],
        ["mnd", "r.vhdr"],
        ["nonsense"],
    ],
)
def test_wrong_usage_is_2(words: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(words) == 2
    streams = capsys.readouterr()
    assert streams.out == ""
    assert streams.err


def test_a_later_command_is_3_in_one_line(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["roster", "r.toml", "--out", "d", "--workers", "2"]) == 3
    streams = capsys.readouterr()
    assert streams.out == ""
    assert "not in this version" in streams.err
    assert streams.err.count("\n") == 1


@pytest.mark.parametrize("words", [[], [__file__]])
def test_window_without_a_display_is_3_in_one_line(
    words: list[str], capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("QT_QPA_PLATFORM", "offscreen")
    assert main(words) == 3
    streams = capsys.readouterr()
    assert streams.out == ""
    assert "window" in streams.err
    assert streams.err.count("\n") == 1


@pytest.mark.parametrize("code", [0, 1])
def test_code_of_the_command_is_kept(code: int, fake: Callable[[Callable[[], int]], None]) -> None:
    fake(lambda: code)
    assert main(["fake"]) == code


@pytest.mark.parametrize(
    ("error", "code", "text"),
    [
        (UsageError("two plans"), 2, "two plans"),
        (InputError("not a recording", where="x.vhdr", todo="Choose another"), 3, "x.vhdr: not a recording"),
        (FileNotFoundError(2, "No such file or directory", "plan.toml"), 3, "plan.toml: No such file"),
        (ValueError("shapes differ"), 4, "a fault of ours, ValueError: shapes differ"),
        (OSError("no file involved"), 4, "a fault of ours"),
        (Cancelled(), 130, "cancelled"),
        (KeyboardInterrupt(), 130, "cancelled"),
    ],
)
def test_what_is_raised_becomes_a_line_and_a_code(
    error: BaseException,
    code: int,
    text: str,
    fake: Callable[[Callable[[], int]], None],
    capsys: pytest.CaptureFixture[str],
) -> None:
    fake(raising(error))
    assert main(["fake"]) == code
    streams = capsys.readouterr()
    assert streams.out == ""
    assert text in streams.err
    assert streams.err.count("\n") == 1


def test_a_fault_of_ours_names_the_log(
    fake: Callable[[Callable[[], int]], None], capsys: pytest.CaptureFixture[str]
) -> None:
    fake(raising(ZeroDivisionError("division by zero")))
    main(["fake"])
    assert str(log_file()) in capsys.readouterr().err


@pytest.mark.parametrize(
    "error",
    [
        InputError("not a recording", where="/data/lt01.vhdr"),
        FileNotFoundError(2, "No such file or directory", "/data/lt01.vhdr"),
        ValueError("lt01 has no markers"),
    ],
)
def test_log_of_a_run_names_no_file_and_no_participant(
    error: Exception, fake: Callable[[Callable[[], int]], None]
) -> None:
    log_file().unlink(missing_ok=True)
    fake(raising(error))
    main(["fake", "/data/lt01.vhdr"])
    text = log_file().read_text("utf-8")
    assert "fake ended with" in text
    assert "lt01" not in text
    assert "/" not in text


def test_debug_shows_the_traceback(
    fake: Callable[[Callable[[], int]], None], capsys: pytest.CaptureFixture[str]
) -> None:
    fake(raising(ZeroDivisionError("division by zero")))
    assert main(["fake", "--debug"]) == 4
    assert "Traceback (most recent call last)" in capsys.readouterr().err


def test_error_in_json_mode_keeps_both_streams_json(
    fake: Callable[[Callable[[], int]], None], capsys: pytest.CaptureFixture[str]
) -> None:
    fake(raising(InputError("not a recording")))
    assert main(["fake", "--json"]) == 3
    streams = capsys.readouterr()
    assert json.loads(streams.out)["exit_code"] == 3
    assert json.loads(streams.err) == {"error": "not a recording"}


@pytest.fixture
def deliverable() -> Iterator[None]:
    """A process started in the background may ignore signals by inheritance, and so would the command."""
    numbers = (signal.SIGINT, signal.SIGTERM, signal.SIGHUP)
    before = [signal.signal(number, signal.default_int_handler) for number in numbers]
    yield
    for number, handler in zip(numbers, before, strict=True):
        signal.signal(number, handler)


@pytest.mark.usefixtures("deliverable")
@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_signals_cancel_and_leave_nothing_behind(
    number: signal.Signals, tmp_path: Path, fake: Callable[[Callable[[], int]], None]
) -> None:
    part = tmp_path / "part"

    def work() -> Work[None]:
        part.mkdir()
        try:
            for _ in range(10):
                yield Progress("writing", 0, 0)
                os.kill(os.getpid(), number)
        finally:
            # Somebody impatient: this one must not keep the folder from being removed.
            os.kill(os.getpid(), number)
            part.rmdir()

    def does() -> int:
        output.show(work())
        return 0

    before = signal.getsignal(number)
    fake(does)
    assert main(["fake"]) == 130
    assert not part.exists()
    assert signal.getsignal(number) == before


@pytest.mark.usefixtures("deliverable")
def test_signals_ignored_from_outside_stay_ignored(fake: Callable[[Callable[[], int]], None]) -> None:
    """So a command under nohup survives the terminal's end."""
    signal.signal(signal.SIGHUP, signal.SIG_IGN)

    def does() -> int:
        os.kill(os.getpid(), signal.SIGHUP)
        return 0

    fake(does)
    assert main(["fake"]) == 0


def test_program_starts_as_a_module_and_prints_its_version() -> None:
    result = subprocess.run([*PROGRAM, "--version"], capture_output=True, text=True, check=False)
    assert (result.returncode, result.stdout, result.stderr) == (0, f"pulsemend {__version__}\n", "")


def test_exit_code_reaches_the_shell() -> None:
    environment = os.environ | {"QT_QPA_PLATFORM": "offscreen"}
    result = subprocess.run(PROGRAM, capture_output=True, text=True, check=False, env=environment)
    assert result.returncode == 3
