"""`pulsemend check SET [--json] [--strict]`: read an epoch set back."""

from __future__ import annotations

import argparse
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

from pulsemend.commands import output

if TYPE_CHECKING:
    from pulsemend.mending.check import CheckResult


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument("set", type=Path, metavar="SET", help="folder of the epoch set")
    parser.add_argument("--json", action="store_true", help="progress and result as JSON")
    parser.add_argument(
        "--strict", action="store_true", help="exit 1 for readiness items beyond their limit, too"
    )


def run(args: argparse.Namespace) -> int:
    """Print every check with its evidence; exit 1 if the set's integrity is broken."""
    from pulsemend.mending.check import check_set

    result = output.show(check_set(args.set), json_mode=args.json)
    failed = not result.ok or (args.strict and not all(item.passed for item in result.items))
    if args.json:
        items = [asdict(item) for item in result.items]
        output.say_json({"set": result.folder.name, "integrity": result.ok, "items": items})
    else:
        for line in check_lines(result):
            output.say(line)
    return 1 if failed else 0


def check_lines(result: CheckResult) -> list[str]:
    """Put the checks of a set into lines, integrity first."""
    lines = [f"{result.folder.name}"]
    width = max(len(item.title) for item in result.items)
    for kind in ("integrity", "readiness"):
        lines.append(f"  {kind}")
        for item in result.items:
            if item.kind != kind:
                continue
            sign = "holds  " if item.passed else "LOOK AT" if kind == "readiness" else "BROKEN "
            lines.append(f"    {sign}  {item.title:{width}}  {item.value}  (limit: {item.limit})")
            if not item.passed and item.detail:
                lines.append(f"             {item.detail}")
    broken = sum(item.kind == "integrity" and not item.passed for item in result.items)
    beyond = sum(item.kind == "readiness" and not item.passed for item in result.items)
    lines.append(f"  {broken} integrity checks broken, {beyond} readiness items beyond their limit")
    return lines
