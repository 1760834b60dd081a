"""`pulsemend facts RECORDING [--plan PLAN] [--events TABLE] [--json]`: what is in a recording."""

from __future__ import annotations

import argparse
from collections.abc import Sequence
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING

from pulsemend.commands import output
from pulsemend.errors import UsageError
from pulsemend.units import ohm_to_kohm

if TYPE_CHECKING:
    from pulsemend.mending.facts import RecordingSummary
    from pulsemend.model.epochs import Trial
    from pulsemend.model.plan import Plan

_MOST_LISTED = 20
_MOST_CODES = 60
"""Longer lists are cut for reading; ``--json`` has all."""


def add_arguments(parser: argparse.ArgumentParser) -> None:
    """Declare the command's arguments."""
    parser.add_argument("recording", type=Path, metavar="RECORDING", help="recording to look at")
    parser.add_argument(
        "--plan", type=Path, metavar="PLAN", help="judge markers and trials by this plan, too"
    )
    parser.add_argument(
        "--marks",
        type=Path,
        metavar="MARKS",
        help="marks of this recording (default: marks/STEM.marks.toml beside the plan, if there)",
    )
    parser.add_argument("--events", type=Path, metavar="TABLE", help="write all markers as a table (TSV)")
    parser.add_argument("--json", action="store_true", help="one JSON object on standard output")


def run(args: argparse.Namespace) -> int:
    """Print the facts, and write the table of events if one is wanted."""
    from pulsemend.mending.facts import summarise, write_events

    if args.marks is not None and args.plan is None:
        raise UsageError("--marks needs --plan", todo="Name the plan that these marks belong to")
    summary = output.show(summarise(args.recording, args.plan, args.marks), json_mode=args.json)
    if args.events is not None:
        write_events(summary, args.events)
    if args.json:
        output.say_json(_as_json(summary))
    else:
        for line in [*_lines(summary), *_fault_lines(summary), *_role_lines(summary), *_trial_lines(summary)]:
            output.say(line)
        if args.events is not None:
            output.say(f"\nwritten: {args.events}")
    return 0


def _lines(summary: RecordingSummary) -> list[str]:
    from pulsemend.mending.pulse_evidence import unmarked_events

    facts = summary.facts
    types = ", ".join(f"{count} {kind}" for kind, count in summary.channel_types.items())
    lines = [
        f"{facts.stem}: {facts.format}",
        f"  {facts.duration_s:.1f} s at {facts.rate_hz:g} Hz, {len(facts.channels)} channels ({types})",
        f"  files: {', '.join(part.name for part in facts.parts)}",
    ]
    if facts.boundaries:
        at = _listed([f"{sample / facts.rate_hz:.3f} s" for sample in facts.boundaries])
        lines.append(f"  breaks: {at}")
    lines.append(f"  pulse-like events in the signal: {len(summary.pulses_found) or 'none'}")
    if facts.markers:
        alone = unmarked_events(facts, summary.pulses_found)
        at = _listed([f"{sample / facts.rate_hz:.3f} s" for sample in alone])
        lines += [f"  {len(alone)} of them without a marker, at {at}"] if alone else []
    if facts.reference:
        lines.append(f"  reference: {facts.reference}")
    lines += _channel_lines(summary)
    lines += [f"  note: {note}" for note in (*facts.notes, *summary.notes)]
    if not summary.codes:
        return [*lines, "  no markers"]
    width = max(4, *(len(code.code) for code in summary.codes))
    lines += ["", f"  {'code':{width}}  count   first [s]    last [s]  usual interval [s]"]
    often = sorted(summary.codes, key=lambda code: -code.count)[:_MOST_CODES]
    for code in (code for code in summary.codes if code in often):
        interval = "-" if code.usual_interval_s is None else f"{code.usual_interval_s:.3f}"
        times = f"{code.first_s:10.3f}  {code.last_s:10.3f}  {interval:>18}"
        lines.append(f"  {code.code:{width}}  {code.count:5}  {times}")
    return [*lines, *_more(summary.codes, _MOST_CODES)]


def _listed(texts: Sequence[str]) -> str:
    """List in one line, cut."""
    more = len(texts) - _MOST_LISTED
    return ", ".join(texts) if more <= 0 else f"{', '.join(texts[:_MOST_LISTED])} and {more} more"


def _more(everything: Sequence[object], most: int = _MOST_LISTED) -> list[str]:
    """Say how much of a list of lines was cut."""
    more = len(everything) - most
    return [f"  - and {more} more; --json has all"] if more > 0 else []


def _channel_lines(summary: RecordingSummary) -> list[str]:
    """Say what is known of the channels' hardware, as ranges."""
    channels = summary.facts.channels
    lines = []
    known = [one.impedance_ohm for one in channels if one.impedance_ohm is not None]
    if known:
        kohms = [ohm_to_kohm(one) for one in known]
        lines.append(f"  impedance: {_range(kohms, 'kOhm')}, known of {len(known)} channels")
    for name, values in (
        ("hardware high-pass", [one.highpass_hz for one in channels if one.highpass_hz is not None]),
        ("hardware low-pass", [one.lowpass_hz for one in channels if one.lowpass_hz is not None]),
    ):
        if values:
            lines.append(f"  {name}: {_range(values, 'Hz')}")
    bad = [one.name for one in channels if one.status == "bad"]
    if bad:
        lines.append(f"  bad by the channel table: {_listed(bad)}")
    return lines


def _range(values: Sequence[float], unit: str) -> str:
    low, high = min(values), max(values)
    return f"{low:g} {unit}" if low == high else f"{low:g} to {high:g} {unit}"


def _fault_lines(summary: RecordingSummary) -> list[str]:
    if not summary.faults:
        return ["", "  no faults were found in the markers"] if summary.codes else []
    lines = ["", "  faults of markers:"]
    for fault in summary.faults[:_MOST_LISTED]:
        lines.append(f"  - {fault.key}: {fault.words}")
        decided = summary.cures.get(fault.key, "")
        if fault.cure:
            lines.append(f"    cure{f' ({decided})' if decided else ''}: {fault.cure}")
    lines += _more(summary.faults)
    if any(fault.cure and fault.key not in summary.cures for fault in summary.faults):
        lines.append("  a cure is applied only where the marks name its fault under [cures] accepted = [...]")
    return lines


def _role_lines(summary: RecordingSummary) -> list[str]:
    """Proposed roles; with a plan its own roles stand instead."""
    codes = summary.proposal.codes
    if not codes:
        return []
    width = max(4, *(len(one.code) for one in codes))
    if summary.planned is not None:
        plan = summary.planned.plan
        named = [
            (one.code, str(plan.role_of(one.code)), _place_in_plan(one.code, plan))
            for one in sorted(codes, key=lambda one: _place_in_plan(one.code, plan) == "not in the plan")
        ]
        title = "roles by the plan:"
    else:
        named = [(one.code, str(one.role), one.reason) for one in codes]
        title = "proposed roles:"
    shown = [f"  {code:{width}}  {role:10}  {why}".rstrip() for code, role, why in named[:_MOST_CODES]]
    return ["", f"  {title}", *shown, *_more(named, _MOST_CODES)]


def _place_in_plan(code: str, plan: Plan) -> str:
    if code in (*plan.blocks.codes, *plan.blocks.practice_codes):
        return "begins a block"
    return "" if plan.names(code) else "not in the plan"


def _trial_lines(summary: RecordingSummary) -> list[str]:
    if summary.planned is None:
        slots = ", ".join(
            one.slot.slot + (" (optional)" if one.slot.optional else "") for one in summary.proposal.slots
        )
        return ["", f"  proposed trial, seen {summary.proposal.n_trials} times: {slots}"] if slots else []
    trials = summary.planned.trials
    found = trials.trials
    rate_hz = summary.facts.rate_hz
    incomplete = sum(bool(one.missing) for one in found)
    doubtful = sum(bool(one.doubts) for one in found)
    aside = sum(bool(one.set_aside) for one in found)
    lines = [
        "",
        f"  trials: {len(found)}, {incomplete} incomplete, {doubtful} doubtful, {aside} set aside; "
        f"markers in no trial: {len(trials.extra)}",
    ]
    troubled = [one for one in found if _troubles(one)]
    lines += [
        f"  - trial {one.number} at {one.first_sample / rate_hz:.3f} s: {_troubles(one)}"
        for one in troubled[:_MOST_LISTED]
    ]
    lines += _more(troubled)
    lines += [
        f"  - in no trial: {one.code} at {one.sample / rate_hz:.3f} s" for one in trials.extra[:_MOST_LISTED]
    ]
    return [*lines, *_more(trials.extra)]


def _troubles(trial: Trial) -> str:
    parts = [trial.set_aside] if trial.set_aside else []
    if trial.missing:
        parts.append(f"no {', '.join(trial.missing)}")
    if trial.doubts:
        parts.append(f"doubtful ({'; '.join(trial.doubts)})")
    return ", ".join(parts)


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
        "channel_facts": {
            channel.name: {
                "impedance_ohm": channel.impedance_ohm,
                "highpass_hz": channel.highpass_hz,
                "lowpass_hz": channel.lowpass_hz,
                "reference": channel.reference or None,
                "status": channel.status or None,
            }
            for channel in facts.channels
        },
        "segments": [list(segment) for segment in facts.segments],
        "codes": [asdict(code) for code in summary.codes],
        "markers": [{"sample": marker.sample, "code": marker.code} for marker in facts.markers],
        "pulse_like_samples": list(summary.pulses_found),
        "faults": [
            {
                "key": fault.key,
                "kind": fault.kind,
                "words": fault.words,
                "cure": fault.cure or None,
                "decided": summary.cures.get(fault.key),
                "count": fault.count,
                "samples": list(fault.at),
            }
            for fault in summary.faults
        ],
        "proposed_roles": {one.code: one.role for one in summary.proposal.codes},
        "trials": None
        if summary.planned is None
        else [
            {
                "trial": one.number,
                "kind": one.kind or None,
                "block": one.block or None,
                "markers": {slot: marker.sample for slot, marker in one.markers.items()},
                "missing": list(one.missing),
                "doubts": list(one.doubts),
                "set_aside": one.set_aside or None,
            }
            for one in summary.planned.trials.trials
        ],
        "markers_in_no_trial": None
        if summary.planned is None
        else [{"sample": one.sample, "code": one.code} for one in summary.planned.trials.extra],
        "notes": [*facts.notes, *summary.notes],
    }
