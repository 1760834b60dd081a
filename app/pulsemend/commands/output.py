"""What a command shows: progress on standard error, results on standard output.

On a terminal progress is a bar; elsewhere it is a plain line now and then. With ``--json`` standard error
holds one object per line (stage, done, total, seconds_left) and standard output one object at the end.
"""

from __future__ import annotations

import json
import math
import os
import shutil
import sys
import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from numbers import Integral, Real
from pathlib import Path
from typing import Protocol, TextIO, TypeVar

from pulsemend.errors import InputError, PulsemendError
from pulsemend.progress import Progress, Work

T = TypeVar("T")

_BAR_EVERY_S = 0.1
_JSON_EVERY_S = 0.25
_LINE_EVERY_S = 10.0


class View(Protocol):
    """Shows progress somehow."""

    def update(self, progress: Progress, seconds_left: float | None) -> None:
        """Show how far it is."""

    def close(self) -> None:
        """Leave the stream ready for other lines."""


def show(work: Work[T], *, json_mode: bool = False) -> T:
    """Run a piece of work, show its progress and return its result.

    However this ends, the work is closed before it returns, so that it can clean up after itself.

    Parameters
    ----------
    work : generator of Progress
        The work to run; its return value is the result.
    json_mode : bool
        Progress as JSON lines.
    """
    pace = _Pace()
    view = _view(sys.stderr, json_mode=json_mode)
    try:
        while True:
            try:
                progress = next(work)
            except StopIteration as stop:
                result: T = stop.value
                return result
            view.update(progress, pace.seconds_left(progress))
    finally:
        work.close()
        view.close()


def say(text: str = "") -> None:
    """Print a line of the result to standard output.

    A reader that stopped reading (``| head``) is no fault: the rest is thrown away.

    Raises
    ------
    InputError
        The output cannot be written, for example because a disk is full.
    """
    try:
        print(text, flush=True)
    except BrokenPipeError:
        _silence(sys.stdout)
    except OSError as error:
        _silence(sys.stdout)
        raise InputError(
            f"the output cannot be written ({error.strerror})",
            where="standard output",
            todo="Free some space",
        ) from error


def say_json(result: Mapping[str, object]) -> None:
    """Print the one JSON object of a command; numbers that are not finite become null."""
    say(json.dumps(_plain(result), allow_nan=False))


def complain(error: PulsemendError, *, json_mode: bool = False) -> None:
    """Print an error meant for the user: one line, in JSON mode one object on either stream."""
    if not json_mode:
        _to_stderr(f"pulsemend: {_one_line(str(error))}")
        return
    _to_stderr(json.dumps({"error": str(error)}))
    data = {"kind": type(error).__name__, "what": error.what, "where": error.where, "todo": error.todo}
    say_json({"error": data | {"message": str(error)}, "exit_code": error.exit_code})


def finish_output() -> None:
    """Flush both streams, so that a reader that is gone causes no complaint when the process ends."""
    for stream in (sys.stdout, sys.stderr):
        try:
            stream.flush()
        except (OSError, ValueError):
            _silence(stream)


@dataclass
class _Pace:
    """How long a stage still takes, from the time its part so far took."""

    clock: Callable[[], float] = time.monotonic
    stage: str | None = None
    began_s: float = 0.0
    began_at: float = 0.0

    def seconds_left(self, progress: Progress) -> float | None:
        """Seconds to the end of the stage; None while that cannot be known."""
        now = self.clock()
        if progress.stage != self.stage:
            self.stage, self.began_s, self.began_at = progress.stage, now, progress.done
        done = progress.done - self.began_at
        if done <= 0 or progress.total <= 0:
            return None
        return max(progress.total - progress.done, 0.0) * (now - self.began_s) / done


@dataclass
class _Throttle:
    """Lets through each stage's first and last progress, and others at most every so many seconds."""

    every_s: float
    clock: Callable[[], float] = time.monotonic
    stage: str | None = None
    shown_s: float = 0.0
    ended: bool = False

    def lets(self, progress: Progress) -> bool:
        """Whether to show it."""
        now = self.clock()
        new = progress.stage != self.stage
        ends = progress.total > 0 and progress.done >= progress.total
        if not (new or (ends and not self.ended) or now - self.shown_s >= self.every_s):
            return False
        self.stage, self.shown_s, self.ended = progress.stage, now, ends
        return True


def _view(stream: TextIO, *, json_mode: bool) -> View:
    if json_mode:
        return _JsonLines()
    return _Bar(stream) if stream.isatty() else _PlainLines()


@dataclass
class _JsonLines:
    throttle: _Throttle = field(default_factory=lambda: _Throttle(_JSON_EVERY_S))

    def update(self, progress: Progress, seconds_left: float | None) -> None:
        if self.throttle.lets(progress):
            _to_stderr(
                json.dumps(
                    {
                        "stage": progress.stage,
                        "done": _plain(progress.done),
                        "total": _plain(progress.total),
                        "seconds_left": None if seconds_left is None else round(seconds_left, 1),
                    }
                )
            )

    def close(self) -> None:
        """Nothing is open."""


@dataclass
class _PlainLines:
    throttle: _Throttle = field(default_factory=lambda: _Throttle(_LINE_EVERY_S))

    def update(self, progress: Progress, seconds_left: float | None) -> None:
        if self.throttle.lets(progress):
            _to_stderr(_words(progress, seconds_left))

    def close(self) -> None:
        """Nothing is open."""


@dataclass
class _Bar:
    stream: TextIO
    throttle: _Throttle = field(default_factory=lambda: _Throttle(_BAR_EVERY_S))
    stage: str | None = None

    def update(self, progress: Progress, seconds_left: float | None) -> None:
        if not self.throttle.lets(progress):
            return
        start = "\r" if self.stage in (None, progress.stage) else "\n"
        self.stage = progress.stage
        width = shutil.get_terminal_size().columns - 1
        line = _words(progress, seconds_left)
        room = min(30, width - len(line) - 3)
        if progress.total > 0 and room >= 5:
            full = round(room * min(progress.done / progress.total, 1.0))
            line = f"[{'#' * full}{'.' * (room - full)}] {line}"
        _to_stderr(start + line[:width].ljust(width), end="")

    def close(self) -> None:
        if self.stage is not None:
            _to_stderr("")


def _words(progress: Progress, seconds_left: float | None) -> str:
    if progress.total <= 0:
        return progress.stage
    text = f"{progress.stage}: {min(progress.done / progress.total, 1.0):.0%}"
    if seconds_left is not None and seconds_left >= 1 and progress.done < progress.total:
        text += f", about {_duration(seconds_left)} left"
    return text


def _duration(seconds: float) -> str:
    if seconds < 60:
        return f"{math.ceil(seconds)} s"
    minutes, rest = divmod(math.ceil(seconds), 60)
    return f"{minutes} min {rest} s" if minutes < 60 else f"{minutes // 60} h {minutes % 60} min"


def _to_stderr(text: str, end: str = "\n") -> None:
    """Write to standard error; nobody listening there must not end the work."""
    try:
        print(text, end=end, file=sys.stderr, flush=True)
    except OSError:
        _silence(sys.stderr)


def _silence(stream: TextIO) -> None:
    """Send the rest of a stream to nowhere, what is still in its buffer included."""
    try:
        number = stream.fileno()
    except (OSError, ValueError):
        return
    nowhere = os.open(os.devnull, os.O_WRONLY)
    os.dup2(nowhere, number)
    os.close(nowhere)


def _one_line(text: str) -> str:
    return " ".join(text.split())


def _plain(value: object) -> object:
    """Turn a value into what JSON knows."""
    if isinstance(value, Mapping):
        return {str(key): _plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(item) for item in value]
    if isinstance(value, Path):
        return str(value)
    if hasattr(value, "item"):  # a number of the array library
        value = value.item()
    if isinstance(value, bool):
        return value
    if isinstance(value, Integral):
        return int(value)
    if isinstance(value, Real):
        return float(value) if math.isfinite(value) else None
    return value
