"""The pulses of a recording as a list that can be edited: markers of pulses, and what was added by hand."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from statistics import median, quantiles

from pulsemend.model.epochs import Pulse, nearest_sample
from pulsemend.model.marks import Marks, MovedPulse
from pulsemend.model.plan import Plan
from pulsemend.model.recording import RecordingFacts
from pulsemend.model.vocabulary import PulseKind, PulseState, PulseTimes, Role
from pulsemend.units import ms_to_s, s_to_ms

REMOVED = "removed by hand"
NOT_YET = "not looked for yet"
GHOST = "marked, not in the signal: not repaired"

LEAST_APART_MS = 2.0
"""A pulse is not added nearer than this to another one; common practice: none known. The gap around either
covers the other."""


@dataclass(frozen=True)
class PulseRow:
    """One pulse of the list.

    Parameters
    ----------
    onset : int
        Recorded sample of its onset; of its marker where the onset is not known.
    marked : float or None
        Recorded sample of its marker; None if it was added by hand.
    state : PulseState or None
        None: removed, or not looked for yet.
    words : str
        The state in words.
    kind : PulseKind or None
        What mark it left in the signal, as far as that is known.
    amplitude_v : float or None
    """

    onset: int
    marked: float | None
    state: PulseState | None
    words: str
    kind: PulseKind | None = None
    amplitude_v: float | None = None

    @property
    def is_removed(self) -> bool:
        """Whether somebody said that the marker is no pulse."""
        return self.words == REMOVED

    @property
    def marker(self) -> int | None:
        """Recorded sample that marks know the marker by."""
        return None if self.marked is None else nearest_sample(self.marked)

    def latency_ms(self, rate_hz: float) -> float | None:
        """Onset minus marker; None without a marker or without an onset of its own."""
        if self.marked is None or self.state not in (PulseState.ALIGNED, PulseState.MOVED):
            return None
        return s_to_ms((self.onset - self.marked) / rate_hz)


def pulse_rows(
    facts: RecordingFacts, plan: Plan, marks: Marks, known: Sequence[Pulse] = ()
) -> tuple[PulseRow, ...]:
    """List the pulses in order of time, those removed by hand among them.

    Parameters
    ----------
    facts : RecordingFacts
        Markers.
    plan, marks : Plan, Marks
        As they are edited.
    known : sequence of Pulse
        What a fit found, perhaps with earlier settings: pulses near a marker are known by it.
    """
    if plan.pulses.times is PulseTimes.NONE:
        return ()
    found = {pulse.marked: pulse for pulse in known if pulse.marked is not None and not _by_hand(pulse)}
    moved = {pulse.sample: pulse.to for pulse in marks.pulses_moved}
    at_hand = {pulse.sample: pulse for pulse in known if _by_hand(pulse)}
    rows = [_row(at_hand.get(sample, Pulse(sample, None, PulseState.ADDED))) for sample in marks.pulses_added]
    if plan.seeks_pulses:
        rows += [_row(pulse) for pulse in known if _is_stray(pulse, marks)]
        at_markers = {
            nearest_sample(one.sample) for one in facts.markers if plan.role_of(one.code) is Role.PULSE
        }
        denied = set(marks.pulses_removed) - at_markers
        rows += [PulseRow(sample, None, None, REMOVED) for sample in denied]
    only_signal = plan.pulses.times is PulseTimes.SIGNAL
    for marker in facts.markers:
        if plan.role_of(marker.code) is not Role.PULSE:
            continue
        near = nearest_sample(marker.sample)
        if near in marks.pulses_removed:
            rows.append(PulseRow(near, marker.sample, None, REMOVED))
        elif near in moved:
            shape = at_hand.get(moved[near], Pulse(moved[near], marker.sample, PulseState.MOVED))
            rows.append(_row(replace(shape, marked=marker.sample, state=PulseState.MOVED)))
        elif marker.sample in found and not (only_signal and _is_unseen(found[marker.sample])):
            rows.append(_row(found[marker.sample]))
        elif only_signal and known:
            rows.append(PulseRow(near, marker.sample, PulseState.MARKED_ONLY, GHOST))
        else:
            rows.append(PulseRow(near, marker.sample, None, NOT_YET))
    return tuple(sorted(rows, key=lambda row: row.onset))


def _row(pulse: Pulse) -> PulseRow:
    return PulseRow(pulse.sample, pulse.marked, pulse.state, pulse.state.value, pulse.kind, pulse.amplitude_v)


def _by_hand(pulse: Pulse) -> bool:
    return pulse.state in (PulseState.ADDED, PulseState.MOVED)


def _is_unseen(pulse: Pulse) -> bool:
    return pulse.state is PulseState.MARKED_ONLY


def _is_stray(pulse: Pulse, marks: Marks) -> bool:
    """Whether a pulse was found without a marker, and nobody has said since that it is none."""
    by_hand = {*marks.pulses_removed, *marks.pulses_added}
    return pulse.state is PulseState.FOUND and pulse.sample not in by_hand


@dataclass(frozen=True)
class PulseCounts:
    """The list in numbers.

    Parameters
    ----------
    known : int
        Pulses that are repaired.
    aligned, marked_only, found_only, added, moved, removed : int
    lead_ms : float or None
        How long markers come before their artifact, median; None where no artifact was found.
    spread_ms : float
        Width of the middle half of these.
    """

    known: int
    aligned: int
    marked_only: int
    found_only: int
    added: int
    moved: int
    removed: int
    lead_ms: float | None
    spread_ms: float


def count_pulses(rows: Sequence[PulseRow], rate_hz: float) -> PulseCounts:
    """Count what is in the list.

    Parameters
    ----------
    rows : sequence of PulseRow
        From `pulse_rows`.
    rate_hz : float
        Recorded rate.
    """
    states = [row.state for row in rows]
    leads = [row.latency_ms(rate_hz) for row in rows if row.state is PulseState.ALIGNED]
    known = [lead for lead in leads if lead is not None]
    spread = 0.0
    if len(known) > 1:
        first, _, third = quantiles(known, n=4, method="inclusive")
        spread = third - first
    return PulseCounts(
        known=sum(row.words not in (REMOVED, GHOST) for row in rows),
        aligned=states.count(PulseState.ALIGNED),
        marked_only=states.count(PulseState.MARKED_ONLY),
        found_only=states.count(PulseState.FOUND),
        added=states.count(PulseState.ADDED),
        moved=states.count(PulseState.MOVED),
        removed=sum(row.is_removed for row in rows),
        lead_ms=median(known) if known else None,
        spread_ms=spread,
    )


def with_added(marks: Marks, *samples: int) -> Marks:
    """Add pulses at onsets (recorded samples)."""
    return replace(marks, pulses_added=tuple(sorted({*marks.pulses_added, *samples})))


def refusal_to_add(sample: int, rows: Sequence[PulseRow], rate_hz: float) -> str:
    """Say why no pulse can be added at an onset: another one is there, or hardly beside it.

    Parameters
    ----------
    sample : int
        Recorded sample of the onset.
    rows : sequence of PulseRow
        From `pulse_rows`; those removed by hand are in nobody's way.
    rate_hz : float
        Recorded rate.

    Returns
    -------
    str
        A sentence; empty where the pulse can be added.
    """
    onsets = [row.onset for row in rows if not row.is_removed]
    nearest = min(onsets, key=lambda onset: abs(onset - sample), default=None)
    if nearest is None or abs(nearest - sample) >= ms_to_s(LEAST_APART_MS) * rate_hz:
        return ""
    return (
        f"No pulse was added at {sample / rate_hz:.4f} s: there is one at {nearest / rate_hz:.4f} s already. "
        f"Two pulses are at least {LEAST_APART_MS:g} ms apart; the one there can be moved or removed."
    )


def with_moved(marks: Marks, row: PulseRow, to: int) -> Marks:
    """Give a pulse another onset (recorded sample); a marker that was removed counts as a pulse again."""
    if row.marker is None:
        others = {sample for sample in marks.pulses_added if sample != row.onset}
        moved_away = with_removed(marks, row) if row.state is PulseState.FOUND else marks
        return replace(moved_away, pulses_added=tuple(sorted({*others, to})))
    free = as_found(marks, row)
    moved = (*free.pulses_moved, MovedPulse(row.marker, to))
    return replace(free, pulses_moved=tuple(sorted(moved, key=lambda pulse: pulse.sample)))


def with_removed(marks: Marks, row: PulseRow) -> Marks:
    """Say that a marker, or what was found, is no pulse; take back a pulse that was added."""
    if row.state is PulseState.FOUND:
        return replace(marks, pulses_removed=tuple(sorted({*marks.pulses_removed, row.onset})))
    if row.marker is None:
        return replace(marks, pulses_added=tuple(s for s in marks.pulses_added if s != row.onset))
    free = as_found(marks, row)
    return replace(free, pulses_removed=tuple(sorted({*free.pulses_removed, row.marker})))


def as_found(marks: Marks, row: PulseRow) -> Marks:
    """Forget what was said about a pulse by hand: it is where the signal shows it."""
    at = row.onset if row.marker is None else row.marker
    return replace(
        marks,
        pulses_moved=tuple(pulse for pulse in marks.pulses_moved if pulse.sample != row.marker),
        pulses_removed=tuple(sample for sample in marks.pulses_removed if sample != at),
    )
