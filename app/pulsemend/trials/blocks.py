"""Blocks of trials, and trials that are none of the experiment's: practice, and the first after a pause."""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Sequence
from dataclasses import replace

from pulsemend.model.epochs import Trial
from pulsemend.model.plan import Plan
from pulsemend.model.recording import Marker

PRACTICE = "practice"


def with_blocks(
    trials: Sequence[Trial], markers: Sequence[Marker], plan: Plan, rate_hz: float
) -> tuple[Trial, ...]:
    """Give trials their block, and set some aside.

    A block begins at the first trial, at every marker of a code that begins one, and after a pause: a time
    from one trial's last marker to the next one's first that is longer than ``pause_s``.

    Parameters
    ----------
    trials : sequence of Trial
        In order of time, with their rows of the log.
    markers : sequence of Marker
        All of the recording.
    plan : Plan
        Its ``[blocks]``.
    rate_hz : float
        Recorded rate.

    Returns
    -------
    tuple of Trial
        The same with block, place in block and why they are set aside; the first reason of: practice by the
        log, practice by its block, first trials of the recording, first trials of a block.
    """
    blocks = plan.blocks
    starts = sorted((m.sample, m.code) for m in markers if m.code in (*blocks.codes, *blocks.practice_codes))
    at = [sample for sample, _ in starts]
    has_blocks = bool(at) or bool(blocks.codes or blocks.practice_codes or blocks.pause_s)
    found: list[Trial] = []
    number = inside = begun = 0
    last_sample: float | None = None
    for place, trial in enumerate(trials, start=1):
        samples = [marker.sample for marker in trial.markers.values()]
        first, last = min(samples, default=0.0), max(samples, default=0.0)
        before = bisect_right(at, first)
        paused = (
            blocks.pause_s > 0.0
            and last_sample is not None
            and (first - last_sample) / rate_hz > blocks.pause_s
        )
        if number == 0 or before > begun or paused:
            number, inside = number + 1, 0
        inside, begun, last_sample = inside + 1, before, last
        code = starts[before - 1][1] if before else ""
        found.append(
            replace(
                trial,
                block=number if has_blocks else 0,
                place_in_block=inside,
                place=place,
                set_aside=_set_aside(trial, plan, code, place, inside if has_blocks else 0),
            )
        )
    return tuple(found)


def _set_aside(trial: Trial, plan: Plan, code: str, place: int, inside: int) -> str:
    blocks = plan.blocks
    if blocks.practice_column:
        values = [
            value
            for column, value in trial.log.items()
            if column == blocks.practice_column or column.endswith(f".{blocks.practice_column}")
        ]
        if any(value in blocks.practice_values for value in values):
            return f"{PRACTICE}, by the log"
    if code in blocks.practice_codes:
        return f"{PRACTICE}, in a block begun by {code}"
    if place <= blocks.practice_first:
        return f"{PRACTICE}, one of the first {blocks.practice_first}"
    if 0 < inside <= blocks.after_pause:
        return (
            "first in its block"
            if blocks.after_pause == 1
            else f"one of the first {blocks.after_pause} in its block"
        )
    return ""
