"""`pulsemend [RECORDING] [--plan PLAN]`: the window."""

from __future__ import annotations

import argparse
import os
import sys
from pathlib import Path

from pulsemend.errors import InputError, UsageError

QT_PACKAGES = (
    "libegl1 libgl1 libxkbcommon0 libxkbcommon-x11-0 libdbus-1-3 libxcb-cursor0 libxcb-icccm4 "
    "libxcb-keysyms1 libxcb-shape0 libfontconfig1 fonts-dejavu-core"
)
"""Debian packages that the window needs and a bare system lacks."""

_WITHOUT_SCREEN = ("offscreen", "minimal")


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the recording to open and its plan."""
    parser.add_argument(
        "recording",
        nargs="?",
        type=Path,
        metavar="RECORDING",
        help="recording, plan, or folder with both, to open",
    )
    parser.add_argument("--plan", type=Path, metavar="PLAN", help="plan (TOML) to open with it")


def run(args: argparse.Namespace) -> int:
    """Show the window until it is closed.

    Raises
    ------
    UsageError
        The word is neither a command nor a file.
    InputError
        There is no display, or Qt cannot be loaded.
    """
    if args.recording is not None and not args.recording.exists():
        raise UsageError(
            "neither a command nor a file",
            where=str(args.recording),
            todo="`pulsemend --help` lists the commands",
        )
    # Asked before Qt is touched: without a display it ends the whole process.
    if not display_exists():
        raise InputError(
            "the window needs a display, and there is none",
            todo="`pulsemend --help` lists the commands that need none",
        )
    try:
        from pulsemend.window.program import run as run_window
    except ImportError as error:
        raise InputError(
            f"the window's libraries cannot be loaded ({error})",
            todo=f"On Debian: apt-get install {QT_PACKAGES}",
        ) from error
    recording, plan = args.recording, args.plan
    if recording is not None and (recording.is_dir() or recording.suffix.lower() == ".toml"):
        from pulsemend.session.dropped import what_is

        found = what_is([recording])
        if found.recording is None and found.plan is None:
            raise InputError(found.words.rstrip("."), where=str(recording), todo="Name a recording or a plan")
        recording, plan = found.recording, plan or found.plan
    return run_window(recording, plan)


def display_exists() -> bool:
    """Whether a window could be seen."""
    platform = os.environ.get("QT_QPA_PLATFORM", "").split(":")[0]
    if platform in _WITHOUT_SCREEN:
        return False
    if not sys.platform.startswith("linux"):
        return True
    return bool(os.environ.get("DISPLAY") or os.environ.get("WAYLAND_DISPLAY"))
