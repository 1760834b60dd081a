"""`pulsemend demo [DIR] [--no-window]`: the sample, mended and checked."""

from __future__ import annotations

import argparse
from pathlib import Path


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument(
        "folder",
        nargs="?",
        type=Path,
        default=Path("pulsemend-demo"),
        metavar="DIR",
        help="where to write (default: %(default)s)",
    )
    parser.add_argument("--no-window", action="store_true", help="do not open the window afterwards")
