"""All markers of a recording as one table: what they are, which trial they belong to, and their labels."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from pulsemend.export.tables import table_text
from pulsemend.model.epochs import Trials
from pulsemend.model.plan import Plan
from pulsemend.model.recording import Marker

COLUMNS = ("onset", "duration", "sample", "code", "type")
_OF_PLAN = ("role", "trial", "slot", "kind", "block", "state")


@dataclass(frozen=True)
class PlannedEvents:
    """What a plan makes of the markers.

    Parameters
    ----------
    plan : Plan
    trials : Trials
    markers : tuple of Marker
        Those that count, moved to measured onsets.
    notes : tuple of str
        What was taken into account besides markers, one sentence each: log, onsets.
    """

    plan: Plan
    trials: Trials
    markers: tuple[Marker, ...] = ()
    notes: tuple[str, ...] = ()


def event_table(markers: Sequence[Marker], rate_hz: float, planned: PlannedEvents | None = None) -> str:
    """Write markers as a table: tabs, LF, ``n/a`` where there is nothing, in order of time.

    Parameters
    ----------
    markers : sequence of Marker
        In order of time.
    rate_hz : float
        Recorded rate: onset is sample over rate, from 0, and the duration of a marker is 0.
    planned : PlannedEvents or None
        Adds role, trial, slot, kind, block, the trial's state and the labels of every code.
    """
    if planned is None:
        rows = [(m.sample / rate_hz, 0, _sample(m.sample), m.code, m.type) for m in markers]
        return table_text(COLUMNS, rows)
    plan = planned.plan
    place = {
        (marker.sample, marker.code): (trial, slot)
        for trial in planned.trials.trials
        for slot, marker in trial.markers.items()
    }
    known = {(marker.sample, marker.code) for marker in markers}
    # Pulses without a marker fill slots, too.
    further = [
        marker
        for trial in planned.trials.trials
        for marker in trial.markers.values()
        if (marker.sample, marker.code) not in known
    ]
    everything = sorted([*markers, *further], key=lambda marker: marker.sample)
    labels = [plan.labels_of(marker.code) for marker in everything]
    names = tuple(dict.fromkeys(name for one in labels for name in sorted(one)))
    lines = []
    for marker, own in zip(everything, labels, strict=True):
        trial, slot = place.get((marker.sample, marker.code), (None, None))
        state = "in no trial" if trial is None else _state(trial.missing, trial.doubts, trial.set_aside)
        lines.append(
            (
                marker.sample / rate_hz,
                0,
                _sample(marker.sample),
                marker.code,
                marker.type,
                plan.role_of(marker.code),
                None if trial is None else trial.number,
                slot,
                None if trial is None else trial.kind,
                None if trial is None or not trial.block else trial.block,
                state,
                *(own.get(name) for name in names),
            )
        )
    return table_text((*COLUMNS, *_OF_PLAN, *(f"label.{name}" for name in names)), lines)


def _state(missing: Sequence[str], doubts: Sequence[str], set_aside: str) -> str:
    if set_aside:
        return f"set aside: {set_aside}"
    if missing:
        return f"incomplete: no {', '.join(missing)}"
    return "doubtful" if doubts else "complete"


def _sample(sample: float) -> int | float:
    return int(sample) if float(sample).is_integer() else sample
