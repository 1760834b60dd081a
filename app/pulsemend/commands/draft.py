"""`pulsemend draft RECORDING --out PLAN`: a commented first plan."""

from __future__ import annotations

import argparse
from pathlib import Path

from pulsemend.commands import output


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument("recording", type=Path, metavar="RECORDING", help="recording to start from")
    parser.add_argument(
        "--out", type=Path, required=True, metavar="PLAN", help="plan (TOML) to write; must not exist yet"
    )


def run(args: argparse.Namespace) -> int:
    """Write the draft; an existing file is never replaced."""
    from pulsemend.mending.draft import write_draft

    path = output.show(write_draft(args.recording, args.out))
    output.say(f"{path}: lines marked `# decide:` need a person")
    return 0
