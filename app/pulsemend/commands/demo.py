"""`pulsemend demo [DIR] [--no-window]`: the sample, mended and checked."""

from __future__ import annotations

import argparse
import subprocess
import sys
import textwrap
from pathlib import Path

from pulsemend.commands import output
from pulsemend.commands.open_window import display_exists


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


def run(args: argparse.Namespace) -> int:
    """Write the sample, mend it, check it, and say where everything is."""
    from pulsemend.commands.check import check_lines
    from pulsemend.mending.check import check_set
    from pulsemend.mending.mend import mend
    from pulsemend.mending.prepare import Request
    from pulsemend.notice import SAFETY_NOTICE
    from pulsemend.simulate.sample import write_sample

    sample = output.show(write_sample(args.folder))
    request = Request(sample.recordings[0], sample.plan)
    result = output.show(mend(request, args.folder / "sets", overwrite=True))
    checked = output.show(check_set(result.folder))
    prepared = result.prepared
    output.say(f"recording  {sample.recordings[0]}")
    output.say(f"plan       {sample.plan}")
    output.say(f"log        {sample.logs[0]}")
    output.say(f"truth      {sample.truths[0]}")
    output.say(f"epoch set  {result.folder}")
    output.say(f"           {len(prepared.kept)} epochs kept of {len(prepared.ledger)}")
    output.say()
    for line in check_lines(checked):
        output.say(line)
    output.say()
    for paragraph in SAFETY_NOTICE:
        output.say(textwrap.fill(paragraph, 100))
    if not args.no_window and display_exists():
        _open_window(sample.recordings[0], sample.plan)
    return 0


def _open_window(recording: Path, plan: Path) -> None:
    """Open the window as a process of its own: whatever becomes of it, the demo has done its work."""
    output.say()
    output.say("opening the window")
    words = [
        sys.executable,
        "-P",
        "-m",
        "pulsemend",
        str(recording.absolute()),
        "--plan",
        str(plan.absolute()),
    ]
    try:
        subprocess.Popen(words, stdin=subprocess.DEVNULL, start_new_session=True)
    except OSError as error:
        output.say(f"the window cannot be opened ({error.strerror})")
