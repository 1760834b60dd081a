"""`pulsemend check SET [--json] [--strict]`: read an epoch set back."""

from __future__ import annotations

import argparse
from pathlib import Path


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument("set", type=Path, metavar="SET", help="folder of the epoch set")
    parser.add_argument("--json", action="store_true", help="progress and result as JSON")
    parser.add_argument(
        "--strict", action="store_true", help="exit 1 for readiness items beyond their limit, too"
    )
