"""`pulsemend facts RECORDING [--json]`: what is in a recording."""

from __future__ import annotations

import argparse
from pathlib import Path


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument("recording", type=Path, metavar="RECORDING", help="recording to look at")
    parser.add_argument("--json", action="store_true", help="one JSON object on standard output")
