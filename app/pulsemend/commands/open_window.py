"""`pulsemend [RECORDING] [--plan PLAN]`: the window."""

from __future__ import annotations

import argparse
from pathlib import Path

from pulsemend.errors import InputError, UsageError


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the recording to open and its plan."""
    parser.add_argument("recording", nargs="?", type=Path, metavar="RECORDING", help="recording to open")
    parser.add_argument("--plan", type=Path, metavar="PLAN", help="plan (TOML) to open with it")


def run(args: argparse.Namespace) -> int:
    """Say that there is no window yet.

    Raises
    ------
    UsageError
        The word is neither a command nor a file.
    InputError
        Always otherwise.
    """
    if args.recording is not None and not args.recording.exists():
        raise UsageError(
            "neither a command nor a file",
            where=str(args.recording),
            todo="`pulsemend --help` lists the commands",
        )
    raise InputError("the window is not in this version", todo="`pulsemend --help` lists the commands")
