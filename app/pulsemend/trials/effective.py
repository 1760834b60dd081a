"""The markers that count: the recording's, with accepted cures and what was decided by hand."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from pulsemend.model.epochs import nearest_sample
from pulsemend.model.marks import MarkerKey, Marks
from pulsemend.model.recording import Marker
from pulsemend.trials.cures import cured


@dataclass(frozen=True)
class Effective:
    """Markers that count, and what was done to the recording's.

    Parameters
    ----------
    markers : tuple of Marker
        In order of time.
    notes : tuple of str
        One sentence each: cures applied, markers ignored and added, decisions that fit nothing any more.
    """

    markers: tuple[Marker, ...]
    notes: tuple[str, ...] = ()


def effective_markers(markers: Sequence[Marker], marks: Marks, rate_hz: float) -> Effective:
    """Apply accepted cures, then what was decided about single markers.

    Parameters
    ----------
    markers : sequence of Marker
        As the recording has them, in order of time.
    marks : Marks
        Cures accepted; markers ignored (named as the recording has them) and added.
    rate_hz : float
        Recorded rate.
    """
    ignored = set(marks.markers_ignored)
    kept = [one for one in markers if MarkerKey(nearest_sample(one.sample), one.code) not in ignored]
    present = {MarkerKey(nearest_sample(one.sample), one.code) for one in markers}
    result = cured(kept, rate_hz, marks.cures_accepted)
    added = [Marker(float(key.sample), key.code) for key in marks.markers_added]
    notes = [
        f"cure of {key} was applied to {count} {'marker' if count == 1 else 'markers'}"
        for key, count in result.counts.items()
    ]
    notes += [f"marks: the cure of {key} is accepted, but there is no such fault" for key in result.unknown]
    if ignored & present:
        notes.append(f"markers ignored by hand: {len(ignored & present)}")
    if added:
        notes.append(f"markers added by hand: {len(added)}")
    notes += [
        f"marks: the marker {key.code} at sample {key.sample} is ignored, but there is none"
        for key in marks.markers_ignored
        if key not in present
    ]
    return Effective(tuple(sorted([*result.markers, *added], key=lambda one: one.sample)), tuple(notes))
