"""`pulsemend sample DIR [--recordings N]`: invented recordings and the truth behind them."""

from __future__ import annotations

import argparse
from pathlib import Path


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument("folder", type=Path, metavar="DIR", help="folder to write to")
    parser.add_argument(
        "--recordings",
        type=_count,
        default=1,
        metavar="N",
        help="how many recordings to write (default: %(default)s)",
    )


def run(args: argparse.Namespace) -> int:
    """Write the sample and list what was written."""
    from pulsemend.commands.output import say, show
    from pulsemend.simulate.sample import write_sample

    result = show(write_sample(args.folder, args.recordings))
    say(f"plan       {result.plan}")
    for recording, log, truth in zip(result.recordings, result.logs, result.truths, strict=True):
        say(f"recording  {recording}")
        say(f"log        {log}")
        say(f"truth      {truth}")
    return 0


def _count(text: str) -> int:
    """Read a number of recordings, 1 or more."""
    if not (text.isdecimal() and int(text) >= 1):
        raise argparse.ArgumentTypeError(f"{text!r} is not a whole number from 1 on")
    return int(text)
