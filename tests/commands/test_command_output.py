"""What commands show: bars, plain lines and JSON."""

from __future__ import annotations

import io
import json
import os
import subprocess
import sys
from collections.abc import Iterator

import numpy as np
import pytest

from pulsemend.commands import output
from pulsemend.errors import InputError, PlanError
from pulsemend.progress import Progress, Work


class Terminal(io.StringIO):
    """A standard error that claims to be a terminal."""

    def isatty(self) -> bool:
        return True


def counting(steps: int, stage: str = "mending") -> Work[str]:
    for step in range(steps + 1):
        yield Progress(stage, step, steps)
    return "the set"


def test_result_is_returned() -> None:
    assert output.show(counting(3)) == "the set"


def test_json_progress_is_one_object_a_line(capsys: pytest.CaptureFixture[str]) -> None:
    output.show(counting(1000), json_mode=True)
    streams = capsys.readouterr()
    assert streams.out == ""
    lines = [json.loads(line) for line in streams.err.splitlines()]
    assert all(set(line) == {"stage", "done", "total", "seconds_left"} for line in lines)
    assert lines[0] == {"stage": "mending", "done": 0, "total": 1000, "seconds_left": None}
    assert lines[-1] == {"stage": "mending", "done": 1000, "total": 1000, "seconds_left": 0.0}


def test_progress_is_throttled(capsys: pytest.CaptureFixture[str]) -> None:
    output.show(counting(20_000), json_mode=True)
    assert len(capsys.readouterr().err.splitlines()) < 2_000


def test_plain_lines_where_there_is_no_terminal(capsys: pytest.CaptureFixture[str]) -> None:
    output.show(counting(3))
    text = capsys.readouterr().err
    assert "\r" not in text
    assert text.splitlines() == ["mending: 0%", "mending: 100%"]


def test_bar_on_a_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    stream = Terminal()
    monkeypatch.setattr(sys, "stderr", stream)
    monkeypatch.setenv("COLUMNS", "60")

    def two_stages() -> Work[None]:
        yield from counting(2, "reading")
        yield from counting(2, "writing")

    output.show(two_stages())
    first, second = stream.getvalue().rstrip("\n").split("\n")
    assert first.split("\r")[-1].startswith("[####")
    assert "reading: 100%" in first
    assert "writing: 100%" in second
    assert all(len(shown) < 60 for line in (first, second) for shown in line.split("\r"))
    assert stream.getvalue().endswith("\n")


def test_work_without_a_known_total_shows_its_stage(capsys: pytest.CaptureFixture[str]) -> None:
    def unknown() -> Work[None]:
        yield Progress("looking", 5, 0)

    output.show(unknown())
    assert capsys.readouterr().err == "looking\n"


def test_time_left_follows_from_the_stage_so_far() -> None:
    times: Iterator[float] = iter([0.0, 10.0, 10.0, 15.0])
    pace = output._Pace(clock=lambda: next(times))
    assert pace.seconds_left(Progress("reading", 0, 100)) is None
    assert pace.seconds_left(Progress("reading", 20, 100)) == pytest.approx(40.0)
    assert pace.seconds_left(Progress("writing", 50, 100)) is None
    assert pace.seconds_left(Progress("writing", 75, 100)) == pytest.approx(5.0)


@pytest.mark.parametrize(
    ("seconds", "words"), [(0.4, "1 s"), (59.0, "59 s"), (61.0, "1 min 1 s"), (3_700.0, "1 h 1 min")]
)
def test_durations_in_words(seconds: float, words: str) -> None:
    assert output._duration(seconds) == words


def test_work_is_closed_when_showing_is_interrupted(monkeypatch: pytest.MonkeyPatch) -> None:
    """Ctrl+C may arrive while a line is printed, outside the work: it must clean up all the same."""
    cleaned: list[str] = []

    def work() -> Work[None]:
        try:
            while True:
                yield Progress("writing", 0, 0)
        finally:
            cleaned.append("part folder removed")

    def interrupted(*_args: object, **_more: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr(output, "_to_stderr", interrupted)
    with pytest.raises(KeyboardInterrupt):
        output.show(work(), json_mode=True)
    assert cleaned == ["part folder removed"]


def test_json_result_holds_only_what_json_knows(capsys: pytest.CaptureFixture[str]) -> None:
    output.say_json(
        {
            "epochs": np.int64(450),
            "share": np.float32(0.5),
            "leak": float("nan"),
            "ok": True,
            "rates": (1000.0, 5000.0),
            "name": "Lärm \udc80",
        }
    )
    text = capsys.readouterr().out
    assert text.count("\n") == 1
    assert json.loads(text) == {
        "epochs": 450,
        "share": 0.5,
        "leak": None,
        "ok": True,
        "rates": [1000.0, 5000.0],
        "name": "Lärm \udc80",
    }


def test_error_is_one_line(capsys: pytest.CaptureFixture[str]) -> None:
    error = PlanError(
        "epochs.length_s", "unusable\nlength", allowed="above 0", received="-1", line=7, path="plan.toml"
    )
    output.complain(error)
    streams = capsys.readouterr()
    assert streams.out == ""
    assert streams.err == (
        "pulsemend: plan.toml, line 7: epochs.length_s: unusable length; allowed: above 0; received: -1\n"
    )


def test_error_in_json_mode_is_an_object_on_either_stream(capsys: pytest.CaptureFixture[str]) -> None:
    output.complain(InputError("not a set", where="x", todo="Choose another"), json_mode=True)
    streams = capsys.readouterr()
    assert json.loads(streams.err) == {"error": "x: not a set. Choose another"}
    result = json.loads(streams.out)
    assert result["exit_code"] == 3
    assert result["error"]["what"] == "not a set"


def script(body: str) -> list[str]:
    return [sys.executable, "-c", "from pulsemend.commands import output\n" + body]


def test_reader_that_stops_reading_is_no_fault() -> None:
    body = "for n in range(100_000): output.say('x' * 100)\noutput.finish_output()"
    process = subprocess.Popen(script(body), stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    if process.stdout is None or process.stderr is None:
        pytest.fail("no pipes")
    with process.stdout, process.stderr:
        process.stdout.readline()
        process.stdout.close()
        assert process.stderr.read() == ""
    assert process.wait() == 0


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="needs the device that is always full")
def test_full_disk_is_said() -> None:
    body = (
        "import sys\n"
        "from pulsemend.errors import InputError\n"
        "try: output.say('x')\n"
        "except InputError as error: output.complain(error); output.finish_output(); sys.exit(3)"
    )
    with open("/dev/full", "w") as full:
        result = subprocess.run(script(body), stdout=full, stderr=subprocess.PIPE, text=True, check=False)
    assert result.returncode == 3
    assert "cannot be written" in result.stderr
