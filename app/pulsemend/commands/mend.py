"""`pulsemend mend RECORDING --plan PLAN --out DIR`: a recording becomes an epoch set."""

from __future__ import annotations

import argparse
from pathlib import Path


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument("recording", type=Path, metavar="RECORDING", help="recording to mend")
    parser.add_argument("--plan", type=Path, required=True, metavar="PLAN", help="plan (TOML) of the study")
    parser.add_argument("--out", type=Path, required=True, metavar="DIR", help="folder that gets the set")
    parser.add_argument(
        "--marks",
        type=Path,
        metavar="MARKS",
        help="marks (TOML) of this recording (default: marks/STEM.marks.toml beside the plan, if there)",
    )
    parser.add_argument("--overwrite", action="store_true", help="replace the set if it exists")
    parser.add_argument("--dry-run", action="store_true", help="show what would be kept; write nothing")
    parser.add_argument("--json", action="store_true", help="progress and result as JSON")
