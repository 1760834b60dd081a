"""What the signal shows at the markers of every code: where pulses are."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from statistics import median

from pulsemend.engine.fit import fit
from pulsemend.engine.setup import bind
from pulsemend.mending.gap_suggestion import NO_SUGGESTION, GapSuggestion, suggested_gaps
from pulsemend.model.marks import Marks
from pulsemend.model.plan import About, Channels, Epochs, Export, Filter, Plan, Pulses
from pulsemend.model.recording import Marker, Recording, RecordingFacts
from pulsemend.model.vocabulary import Fill
from pulsemend.progress import Work
from pulsemend.units import ms_to_s, s_to_ms

_ALWAYS = 0.8


@dataclass(frozen=True)
class CodeEvidence:
    """What the signal shows at the markers of one code.

    Parameters
    ----------
    code : str
    n_markers : int
    n_in_signal : int
        Markers with a pulse-like event near them.
    latency_ms : float
        Median of event minus marker.
    least_ms, most_ms : float
        Its range.
    """

    code: str
    n_markers: int
    n_in_signal: int
    latency_ms: float
    least_ms: float
    most_ms: float


@dataclass(frozen=True)
class PulseEvidence:
    """Pulse-like events in the signal, by the codes they belong to; `unmarked` belong to none.

    `gaps` is what the signal around them suggests, where somebody has looked.
    """

    codes: tuple[CodeEvidence, ...] = ()
    n_events: int = 0
    unmarked: int = 0
    gaps: GapSuggestion = NO_SUGGESTION

    @property
    def pulse_codes(self) -> tuple[str, ...]:
        """Codes at whose markers there nearly always is a pulse."""
        return tuple(one.code for one in self.codes if one.n_in_signal >= _ALWAYS * one.n_markers)


NO_EVIDENCE = PulseEvidence()


def pulse_evidence(facts: RecordingFacts, pulses_found: Sequence[int]) -> PulseEvidence:
    """Assign pulse-like events to the nearest marker within the usual search range.

    Parameters
    ----------
    facts : RecordingFacts
        Markers and rate.
    pulses_found : sequence of int
        Recorded samples of pulse-like events.
    """
    seen: dict[str, list[float]] = {}
    unmarked = 0
    for event in pulses_found:
        near = _markers_near(facts, event)
        if near:
            marker = min(near, key=lambda one: abs(event - one.sample))
            seen.setdefault(marker.code, []).append(s_to_ms((event - marker.sample) / facts.rate_hz))
        else:
            unmarked += 1
    counts = Counter(marker.code for marker in facts.markers)
    codes = tuple(
        CodeEvidence(code, counts[code], len(ms), median(ms), min(ms), max(ms)) for code, ms in seen.items()
    )
    return PulseEvidence(codes, len(pulses_found), unmarked)


def unmarked_events(facts: RecordingFacts, pulses_found: Sequence[int]) -> tuple[int, ...]:
    """Give the samples of pulse-like events that no marker is near."""
    return tuple(event for event in pulses_found if not _markers_near(facts, event))


def _markers_near(facts: RecordingFacts, event: int) -> list[Marker]:
    """Markers within the usual search range of an event."""
    low, high = (ms_to_s(edge) * facts.rate_hz for edge in Pulses().search_ms)
    return [marker for marker in facts.markers if low <= event - marker.sample <= high]


def gaps_around(recording: Recording, pulses_found: Sequence[int]) -> Work[GapSuggestion]:
    """Look around pulse-like events for what a gap would have to cover, before there is any plan.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    pulses_found : sequence of int
        Recorded samples of pulse-like events.

    Yields
    ------
    Progress

    Returns
    -------
    GapSuggestion

    Raises
    ------
    UnusableChannels
        No channel of a usable type.
    """
    bare = Plan(
        about=About(),
        markers=(),
        trial=(),
        pulses=Pulses(fill=Fill.LINE),
        filter=Filter(0.0, 0.0, 0.0),
        channels=Channels(reference="as recorded"),
        epochs=Epochs(1.0, ()),
        export=Export(),
    )
    setup = bind(recording.facts, bare, Marks(pulses_added=tuple(pulses_found)))
    estimates = yield from fit(recording, setup)
    return (yield from suggested_gaps(recording, setup, estimates))
