"""The log of the program: a rotating file in the user's state folder, and hooks for what nobody caught.

At INFO, the usual level, the file holds no participant's name, no file name and no absolute path: messages
about files are logged at DEBUG, arguments that are paths and texts that look like one are masked, and of an
unexpected exception only its class and its places in the code are kept. ``--debug`` writes everything.
"""

from __future__ import annotations

import logging
import logging.handlers
import os
import re
import sys
import threading
import traceback
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType

import platformdirs

LOG_NAME = "pulsemend.log"
_LARGEST_FILE = 512 * 1024
_OLD_FILES = 3
_LONGEST_TRACE = 200
_MASK = "<path>"
# An absolute path: a slash, a drive or a home at the start of a word, to the next blank or quote.
_PATH = re.compile(r"""(?<![\w.<])(?:[A-Za-z]:[\\/]|\\\\|~?/)[^\s'"]+""")

log = logging.getLogger(__name__)


def log_file() -> Path:
    """Where the log is written."""
    return platformdirs.user_state_path("pulsemend", appauthor=False) / LOG_NAME


@contextmanager
def logging_to_file(*, debug: bool = False) -> Iterator[None]:
    """Log the package to its file and catch what nobody caught, for the length of a ``with``.

    Parameters
    ----------
    debug : bool
        Log everything, with names, paths and messages of exceptions.
    """
    package = logging.getLogger("pulsemend")
    handler = _handler(debug=debug)
    level_before = package.level
    package.addHandler(handler)
    package.setLevel(logging.DEBUG if debug else logging.INFO)
    hooks_before = (sys.excepthook, threading.excepthook, sys.unraisablehook)
    _set_hooks()
    try:
        yield
    finally:
        sys.excepthook, threading.excepthook, sys.unraisablehook = hooks_before
        package.setLevel(level_before)
        package.removeHandler(handler)
        handler.close()


def _handler(*, debug: bool) -> logging.Handler:
    """Open the rotating file; without a writable state folder the program works unlogged."""
    path = log_file()
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handler = _QuietFile(
            path, maxBytes=_LARGEST_FILE, backupCount=_OLD_FILES, encoding="utf-8", errors="backslashreplace"
        )
    except OSError:
        return logging.NullHandler()
    handler.setFormatter(_formatter(debug=debug))
    return handler


def _formatter(*, debug: bool) -> logging.Formatter:
    kind = logging.Formatter if debug else PrivateFormatter
    return kind("%(asctime)s %(levelname)s %(process)d %(name)s: %(message)s")


class _QuietFile(logging.handlers.RotatingFileHandler):
    """A full disk must not fill standard error, which scripts read."""

    def handleError(self, record: logging.LogRecord) -> None:
        """Lose the record."""


class PrivateFormatter(logging.Formatter):
    """Masks paths in messages and keeps of an exception its class and its places in the code."""

    def format(self, record: logging.LogRecord) -> str:
        """Format one record, masked."""
        # A copy: handlers of others (a test's, say) share the record.
        private = logging.makeLogRecord(record.__dict__)
        private.exc_text = None
        if isinstance(record.args, tuple):
            private.args = tuple(_MASK if isinstance(arg, os.PathLike) else arg for arg in record.args)
        private.msg = _PATH.sub(_MASK, private.getMessage())
        private.args = ()
        return super().format(private)

    def formatException(
        self,
        ei: tuple[type[BaseException], BaseException, TracebackType | None] | tuple[None, None, None],
    ) -> str:
        """Name the exception's class, its causes and where it came through; no message, no path."""
        lines: list[str] = []
        error: BaseException | None = ei[1]
        while error is not None and len(lines) < _LONGEST_TRACE:
            lines.append(f"{type(error).__module__}.{type(error).__qualname__}")
            frames = traceback.walk_tb(error.__traceback__)
            lines += [
                f"  {frame.f_globals.get('__name__', '?')}:{line} in {frame.f_code.co_name}"
                for frame, line in frames
            ]
            error = error.__cause__ or (None if error.__suppress_context__ else error.__context__)
        return "\n".join(lines)


def _set_hooks() -> None:
    """Log exceptions that end the program, a thread or a destructor, then do what was done before."""
    main_before, thread_before, unraisable_before = sys.excepthook, threading.excepthook, sys.unraisablehook

    def on_main(kind: type[BaseException], error: BaseException, trace: TracebackType | None) -> None:
        if not issubclass(kind, KeyboardInterrupt):
            log.critical("exception that nobody caught", exc_info=(kind, error, trace))
        main_before(kind, error, trace)

    def on_thread(args: threading.ExceptHookArgs) -> None:
        if args.exc_value is not None:
            log.critical(
                "exception that ended a thread", exc_info=(args.exc_type, args.exc_value, args.exc_traceback)
            )
        thread_before(args)

    def on_unraisable(args: sys.UnraisableHookArgs) -> None:
        if args.exc_value is not None:
            log.error(
                "exception that could not be raised",
                exc_info=(args.exc_type, args.exc_value, args.exc_traceback),
            )
        unraisable_before(args)

    sys.excepthook, threading.excepthook, sys.unraisablehook = on_main, on_thread, on_unraisable
