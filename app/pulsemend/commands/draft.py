"""`pulsemend draft RECORDING --out PLAN`: a commented first plan."""

from __future__ import annotations

import argparse
from pathlib import Path


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument("recording", type=Path, metavar="RECORDING", help="recording to start from")
    parser.add_argument(
        "--out", type=Path, required=True, metavar="PLAN", help="plan (TOML) to write; must not exist yet"
    )
