"""The program's entrance: choose a command, run it, turn what happened into an exit code.

0 done; 1 a check failed or some recordings failed; 2 wrong usage; 3 unusable input; 4 a fault of ours;
130 cancelled.
"""

from __future__ import annotations

import argparse
import contextlib
import logging
import signal
import sys
import threading
import time
import traceback
from collections.abc import Iterator, Sequence
from types import FrameType

from pulsemend import __version__
from pulsemend.commands import output
from pulsemend.commands.parser import Command, parse
from pulsemend.errors import Cancelled, InputError, PulsemendError

log = logging.getLogger("pulsemend")


def main(words: Sequence[str] | None = None) -> int:
    """Run one command line and return its exit code.

    Parameters
    ----------
    words : sequence of str or None
        The command line without the program's name; None takes the process's own.
    """
    words = sys.argv[1:] if words is None else words
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="backslashreplace")
    try:
        command, args = parse(words)
    except SystemExit as stop:
        output.finish_output()
        return int(stop.code or 0)
    except PulsemendError as error:
        output.complain(error, json_mode="--json" in words)
        return error.exit_code
    # Help, version and wrong usage need neither a log nor what it imports.
    from pulsemend.logs import logging_to_file

    with logging_to_file(debug=args.debug):
        code = _run(command, args)
    output.finish_output()
    return code


def _run(command: Command, args: argparse.Namespace) -> int:
    """Run the command and answer for whatever it raises."""
    name = command.__name__.rpartition(".")[2]
    began_s = time.monotonic()
    log.info("%s, version %s, Python %s on %s", name, __version__, sys.version.split()[0], sys.platform)
    try:
        with _signals_cancel():
            code = command.run(args)
    except (KeyboardInterrupt, Exception) as raised:
        error = _for_user(raised)
        if error.exit_code == PulsemendError.exit_code:
            log.exception("a fault of ours")
        else:
            # Its text names files and channels, so at INFO only its kind is kept.
            log.info("ended by %s", type(error).__name__)
            log.debug("%s", error, exc_info=True)
        if args.debug:
            traceback.print_exc()
        output.complain(error, json_mode=getattr(args, "json", False))
        code = error.exit_code
    log.info("%s ended with %d after %.1f s", name, code, time.monotonic() - began_s)
    return code


def _for_user(raised: BaseException) -> PulsemendError:
    """Whatever was raised, as an error with a line for the user and an exit code."""
    if isinstance(raised, PulsemendError):
        return raised
    if isinstance(raised, KeyboardInterrupt):
        return Cancelled()
    if isinstance(raised, OSError) and raised.filename is not None:
        # A file or folder of the user's that no room had a better word for.
        return InputError(raised.strerror or "cannot be used", where=str(raised.filename))
    from pulsemend.logs import log_file

    return PulsemendError(
        f"a fault of ours, {type(raised).__name__}: {raised}",
        todo=f"The log is {log_file()}; --debug shows the traceback",
    )


@contextlib.contextmanager
def _signals_cancel() -> Iterator[None]:
    """Let every signal that asks to stop raise KeyboardInterrupt, once.

    Later ones are ignored, so that what is half written can still be removed.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return
    numbers = [getattr(signal, name) for name in ("SIGINT", "SIGTERM", "SIGHUP") if hasattr(signal, name)]

    def stop(_number: int, _frame: FrameType | None) -> None:
        for number in numbers:
            signal.signal(number, signal.SIG_IGN)
        raise KeyboardInterrupt

    before = {number: signal.getsignal(number) for number in numbers}
    # Who ignores a signal from outside (nohup) keeps doing so.
    for number in [number for number in numbers if before[number] is not signal.SIG_IGN]:
        signal.signal(number, stop)
    try:
        yield
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)


if __name__ == "__main__":
    sys.exit(main())
