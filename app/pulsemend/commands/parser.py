"""From the words of a command line to one command's module and its arguments.

Only the module of the command that was called is imported, so that help and version stay light.
"""

from __future__ import annotations

import argparse
from collections.abc import Sequence
from importlib import import_module
from typing import Protocol, cast

from pulsemend import __version__
from pulsemend.errors import InputError

COMMANDS = {
    "demo": "write the sample, mend it, check it, print where everything is",
    "sample": "write sample recordings, a plan, logs and the truth behind them",
    "facts": "show what is in a recording: channels, markers, faults, pulses",
    "draft": "write a commented first plan for a recording",
    "mend": "turn a recording into an epoch set",
    "check": "read an epoch set back: integrity and readiness",
}
"""Name of each command, which is also its module here, and what it does."""

_LATER = {"roster": "run `pulsemend mend` once for each recording"}
"""Commands that later versions have, and what to do until then."""


class Command(Protocol):
    """What the module of a command offers."""

    __name__: str

    def add_arguments(self, parser: argparse.ArgumentParser) -> None:
        """Declare the command's own arguments."""

    def run(self, args: argparse.Namespace) -> int:
        """Do it and return the exit code."""


def parse(words: Sequence[str]) -> tuple[Command, argparse.Namespace]:
    """Choose the command and parse its arguments.

    The first word is the command; anything else there belongs to the window, which opens a recording.

    Parameters
    ----------
    words : sequence of str
        The command line without the program's name.

    Returns
    -------
    command : Command
    args : argparse.Namespace
        Has ``debug`` besides the command's own arguments.

    Raises
    ------
    InputError
        The command is not in this version.
    SystemExit
        Help or version was printed (0), or the words are wrong (2).
    """
    rest = list(words)
    if rest[1:] and rest[0] == "--debug":
        rest = [*rest[1:], "--debug"]
    first = rest[0] if rest else ""
    if first in _LATER:
        raise InputError(f"the command {first} is not in this version", todo=f"Until then {_LATER[first]}")
    if first in COMMANDS:
        parser = _parser(f"pulsemend {first}", COMMANDS[first], "")
        command = cast("Command", import_module(f"pulsemend.commands.{first}"))
        rest = rest[1:]
    else:
        parser = _parser("pulsemend", "open a recording in the window", _command_list())
        parser.add_argument("--version", action="version", version=f"pulsemend {__version__}")
        command = cast("Command", import_module("pulsemend.commands.open_window"))
    command.add_arguments(parser)
    return command, parser.parse_args(rest)


def _parser(name: str, summary: str, after: str) -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog=name,
        description=summary[0].upper() + summary[1:] + ".",
        epilog=after,
        allow_abbrev=False,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument(
        "--debug", action="store_true", help="show tracebacks and log everything, names included"
    )
    return parser


def _command_list() -> str:
    width = max(map(len, COMMANDS))
    lines = [f"  {name:{width}}  {summary}" for name, summary in COMMANDS.items()]
    return "\n".join(["commands (`pulsemend COMMAND --help` shows more):", *lines])
