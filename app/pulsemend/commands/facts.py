"""`pulsemend facts RECORDING [--json]`: what is in a recording."""

from __future__ import annotations

import argparse
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

from pulsemend.commands import output

if TYPE_CHECKING:
    from pulsemend.mending.facts import RecordingSummary


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument("recording", type=Path, metavar="RECORDING", help="recording to look at")
    parser.add_argument("--json", action="store_true", help="one JSON object on standard output")


def run(args: argparse.Namespace) -> int:
    """Print the facts."""
    from pulsemend.mending.facts import summarise

    summary = output.show(summarise(args.recording), json_mode=args.json)
    if args.json:
        output.say_json(_as_json(summary))
    else:
        for line in _lines(summary):
            output.say(line)
    return 0


def _lines(summary: RecordingSummary) -> list[str]:
    facts = summary.facts
    types = ", ".join(f"{count} {kind}" for kind, count in summary.channel_types.items())
    lines = [
        f"{facts.stem}: {facts.format}",
        f"  {facts.duration_s:.1f} s at {facts.rate_hz:g} Hz, {len(facts.channels)} channels ({types})",
        f"  files: {', '.join(part.name for part in facts.parts)}",
    ]
    if facts.boundaries:
        at = ", ".join(f"{sample / facts.rate_hz:.3f} s" for sample in facts.boundaries)
        lines.append(f"  breaks: {at}")
    found = len(summary.pulses_found)
    lines.append(f"  pulse-like events in the signal: {found or 'none'}")
    lines += [f"  note: {note}" for note in facts.notes]
    if not summary.codes:
        return [*lines, "  no markers"]
    width = max(4, *(len(code.code) for code in summary.codes))
    lines += ["", f"  {'code':{width}}  count   first [s]    last [s]  usual interval [s]"]
    for code in summary.codes:
        interval = "-" if code.usual_interval_s is None else f"{code.usual_interval_s:.3f}"
        times = f"{code.first_s:10.3f}  {code.last_s:10.3f}  {interval:>18}"
        lines.append(f"  {code.code:{width}}  {code.count:5}  {times}")
    return lines


def _as_json(summary: RecordingSummary) -> dict[str, object]:
    facts = summary.facts
    return {
        "recording": facts.stem,
        "format": facts.format,
        "rate_hz": facts.rate_hz,
        "samples": facts.n_samples,
        "duration_s": facts.duration_s,
        "files": {part.name: part.size for part in facts.parts},
        "channels": {channel.name: channel.type.value for channel in facts.channels},
        "segments": [list(segment) for segment in facts.segments],
        "codes": [asdict(code) for code in summary.codes],
        "markers": [{"sample": marker.sample, "code": marker.code} for marker in facts.markers],
        "pulse_like_samples": list(summary.pulses_found),
        "notes": list(facts.notes),
    }
