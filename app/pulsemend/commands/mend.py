"""`pulsemend mend RECORDING --plan PLAN --out DIR`: a recording becomes an epoch set."""

from __future__ import annotations

import argparse
from collections import Counter
from pathlib import Path
from typing import TYPE_CHECKING

from pulsemend.commands import output

if TYPE_CHECKING:
    from pulsemend.mending.prepare import Prepared


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


def run(args: argparse.Namespace) -> int:
    """Write the set, or show what it would hold."""
    from pulsemend.commands.paper import (
        count_lines,
        difference_lines,
        paper_json,
        trial_lines,
    )
    from pulsemend.mending.mend import dry_run, mend
    from pulsemend.mending.prepare import Request

    request = Request(args.recording, args.plan, args.marks)
    if args.dry_run:
        prepared = output.show(dry_run(request), json_mode=args.json)
        if args.json:
            output.say_json({**_as_json(prepared), **paper_json(prepared)})
        else:
            for line in [
                *_lines(prepared),
                *trial_lines(prepared),
                *count_lines(prepared),
                *_ledger_lines(prepared),
                *difference_lines(prepared),
            ]:
                output.say(line)
        return 0
    result = output.show(mend(request, args.out, overwrite=args.overwrite), json_mode=args.json)
    if args.json:
        output.say_json(
            {
                **_as_json(result.prepared),
                "set": str(result.folder),
                "content_sha256": result.content_sha256,
                "rank": result.rank,
            }
        )
    else:
        for line in [*_lines(result.prepared), f"written: {result.folder}"]:
            output.say(line)
    return 0


def _lines(prepared: Prepared) -> list[str]:
    from pulsemend.mending.mend import kept_per_rule
    from pulsemend.mending.prepare import marked_only

    facts, estimates = prepared.setup.facts, prepared.estimates
    trials = prepared.trials.trials
    incomplete = sum(bool(trial.missing) for trial in trials)
    doubtful = sum(bool(trial.doubts) for trial in trials)
    lines = [
        f"{facts.stem}: {len(trials)} trials, {incomplete} incomplete, {doubtful} doubtful; "
        f"{len(estimates.pulses)} pulses, {marked_only(estimates)} of them marked, not in the signal"
    ]
    lines += [f"  {rule}: {count} kept" for rule, count in kept_per_rule(prepared).items()]
    fates = Counter(candidate.fate for candidate in prepared.ledger if not candidate.kept)
    lines += [f"  left out, {fate.value}: {count}" for fate, count in fates.items()]
    lines += [f"  note: {warning}" for warning in prepared.warnings]
    return lines


def _ledger_lines(prepared: Prepared) -> list[str]:
    from pulsemend.commands.paper import table_lines

    rate_hz = prepared.setup.facts.rate_hz
    rows = [("trial", "rule", "piece", "anchor [s]", "fate", "")]
    for candidate in prepared.ledger:
        at = "-" if candidate.anchor_sample is None else f"{candidate.anchor_sample / rate_hz:.3f}"
        rows.append(
            (
                str(candidate.trial),
                candidate.rule,
                str(candidate.piece),
                at,
                candidate.fate.value,
                candidate.detail,
            )
        )
    return ["", "candidate epochs", *table_lines(rows)]


def _as_json(prepared: Prepared) -> dict[str, object]:
    from pulsemend.mending.mend import kept_per_rule
    from pulsemend.mending.prepare import marked_only

    fates = Counter(candidate.fate.value for candidate in prepared.ledger)
    return {
        "recording": prepared.setup.facts.stem,
        "trials": len(prepared.trials.trials),
        "trials_incomplete": sum(bool(trial.missing) for trial in prepared.trials.trials),
        "trials_doubtful": sum(bool(trial.doubts) for trial in prepared.trials.trials),
        "trials_set_aside": sum(bool(trial.set_aside) for trial in prepared.trials.trials),
        "pulses": len(prepared.estimates.pulses),
        "pulses_marked_not_in_signal": marked_only(prepared.estimates),
        "candidates": len(prepared.ledger),
        "kept": len(prepared.kept),
        "kept_per_rule": kept_per_rule(prepared),
        "fates": dict(fates),
        "warnings": list(prepared.warnings),
    }
