"""A recording made of another's pulse-free stretches, with that recording's own artifacts planted in them.

Stretches follow one another without a step: each is raised or lowered to begin where the one before ends.
At the same latency in each lies a planted onset. Nothing is held but what is planted; the background is read
where it lies.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.setup import ExpectedPulse, Setup
from pulsemend.model.recording import FloatArray, Recording, RecordingFacts
from pulsemend.model.vocabulary import PulseState

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Layout:
    """Where the stretches come from.

    Parameters
    ----------
    starts : tuple of int
        First recorded sample of each stretch.
    before, size : int
        Samples of every stretch before its onset, and in all.
    jumps : tuple of int
        Samples of the background that are passed over at each onset: what follows is in another phase.
    """

    starts: tuple[int, ...]
    before: int
    size: int
    jumps: tuple[int, ...]

    @property
    def onsets(self) -> tuple[int, ...]:
        """Samples of the planted onsets."""
        return tuple(self.onset(place) for place in range(len(self.starts)))

    def onset(self, place: int) -> int:
        """Sample of one planted onset."""
        return place * self.size + self.before

    def pieces(self) -> list[tuple[int, int]]:
        """First recorded sample and first sample here of each piece that was recorded in one go."""
        found = []
        for place, (start, jump) in enumerate(zip(self.starts, self.jumps, strict=True)):
            here = place * self.size
            found.append((start, here))
            if jump:
                found.append((start + self.before + jump, here + self.before))
        return found


@dataclass(frozen=True, eq=False)
class Responses:
    """Test responses: bumps of known size, one for each stretch and channel.

    Parameters
    ----------
    latencies_s, widths_s : array, shape (n_stretches,)
        Of the peak, since the onset; standard deviation.
    sizes_v : array, shape (n_stretches, n_used)
    """

    latencies_s: Floats
    widths_s: Floats
    sizes_v: Floats

    def chosen(self, places: Sequence[int]) -> Responses:
        """Responses of some stretches, in their order."""
        rows = np.array(places, np.intp)
        return Responses(self.latencies_s[rows], self.widths_s[rows], self.sizes_v[rows])

    def span_s(self, place: int) -> tuple[float, float]:
        """Where one stretch's response is more than a thousandth of its peak."""
        reach_s = 4.0 * float(self.widths_s[place])
        return float(self.latencies_s[place]) - reach_s, float(self.latencies_s[place]) + reach_s

    def shape(self, place: int, since_s: Floats) -> Floats:
        """Course of one stretch's response, 1 at its peak."""
        return np.asarray(np.exp(-0.5 * ((since_s - self.latencies_s[place]) / self.widths_s[place]) ** 2))


@dataclass(frozen=True, eq=False)
class Artifact:
    """What is planted of pulses, in stored units of the used channels.

    Parameters
    ----------
    first : int
        First sample of any gap, from the onset.
    in_gap : bool array, shape (n_span, n_used)
        Which samples from `first` on lie in a channel's gaps.
    pulses : int array, shape (n_stretches,)
        Recorded onset of the pulse whose gap is planted.
    levels : array, shape (n_stretches, n_used)
        Level before that pulse.
    rest : array, shape (n_rest, n_used)
        What follows the gap of every pulse, from the onset on.
    decay : array, shape (n_decay, n_used)
        Decay of the median pulse, from the onset on.
    amplitudes : array, shape (n_stretches, n_used)
        Of the decay of that pulse.
    """

    first: int
    in_gap: NDArray[np.bool_]
    pulses: NDArray[np.int64]
    levels: Floats
    rest: Floats
    decay: Floats
    amplitudes: Floats


class PlantedRecording:
    """Fulfils the protocol of a recording.

    Parameters
    ----------
    source : Recording
        Read from by this one alone, or by turns.
    setup : Setup
        Bound to the source.
    layout : Layout
    levels : array, shape (n_pieces, n_channels), or None
        Added to each piece, from `levels_of`; None leaves the background out.
    responses : Responses or None
    artifact : Artifact or None
    """

    def __init__(
        self,
        source: Recording,
        setup: Setup,
        layout: Layout,
        levels: Floats | None,
        responses: Responses | None = None,
        artifact: Artifact | None = None,
    ) -> None:
        self._source, self._setup, self._layout = source, setup, layout
        self._levels, self._responses, self._artifact = levels, responses, artifact
        self._pieces = layout.pieces()
        n_samples = len(layout.starts) * layout.size
        self._facts = replace(setup.facts, n_samples=n_samples, boundaries=(), markers=())
        everything = setup.used.size == len(setup.facts.channels)
        self._columns: slice | NDArray[np.intp] = slice(None) if everything else setup.used

    @property
    def facts(self) -> RecordingFacts:
        """Facts of the source, for these stretches."""
        return self._facts

    def read(self, start: int, stop: int, out: FloatArray, offset: Floats | None = None) -> None:
        """Fill ``out`` with background, responses and artifacts; see `Recording.read`."""
        if self._levels is None:
            out[...] = 0.0
        else:
            self._read_background(start, stop, out, offset)
        for place in self._near(start, stop):
            if self._responses is not None:
                self._add_response(self._responses, place, start, out)
            if self._artifact is not None:
                self._add_artifact(self._artifact, place, start, out)

    def fingerprint_paths(self) -> tuple[str, ...]:
        """There is no file."""
        return ()

    def close(self) -> None:
        """Do nothing: whoever opened the source closes it."""

    def _read_background(self, start: int, stop: int, out: FloatArray, offset: Floats | None) -> None:
        if self._levels is None:
            return
        for place, (source, here) in enumerate(self._pieces):
            following = self._pieces[place + 1][1] if place + 1 < len(self._pieces) else self._facts.n_samples
            a, b = max(start, here), min(stop, following)
            if a < b:
                level = -self._levels[place] if offset is None else offset - self._levels[place]
                self._source.read(source + a - here, source + b - here, out[a - start : b - start], level)

    def _near(self, start: int, stop: int) -> Iterator[int]:
        """Places of stretches of which something is planted in [start, stop); it may outlast its own."""
        first = max(0, start // self._layout.size - 1)
        last = min(len(self._layout.starts), -(-stop // self._layout.size) + 1)
        yield from range(first, last)

    def _add_response(self, responses: Responses, place: int, start: int, out: FloatArray) -> None:
        """Add what lies after the onset, within the stretch."""
        onset = self._layout.onset(place)
        first, last = (round(edge_s * self._setup.facts.rate_hz) for edge_s in responses.span_s(place))
        # Nothing precedes the onset or reaches into the next stretch.
        a = max(start, onset + max(0, first))
        b = min(start + len(out), onset + last, (place + 1) * self._layout.size)
        if a < b:
            shape = responses.shape(place, (np.arange(a, b) - onset) / self._setup.facts.rate_hz)
            sizes = responses.sizes_v[place] / self._setup.scale_v
            out[a - start : b - start, self._columns] += np.outer(shape, sizes).astype(out.dtype, copy=False)

    def _add_artifact(self, artifact: Artifact, place: int, start: int, out: FloatArray) -> None:
        onset = self._layout.onset(place)
        stop = start + len(out)
        for added, amplitudes in ((artifact.rest, None), (artifact.decay, artifact.amplitudes[place])):
            a, b = max(start, onset), min(stop, onset + len(added))
            if a < b:
                part = added[a - onset : b - onset]
                out[a - start : b - start, self._columns] += part if amplitudes is None else part * amplitudes
        first = onset + artifact.first
        a, b = max(start, first), min(stop, first + len(artifact.in_gap))
        if a < b:
            pulse = int(artifact.pulses[place]) - onset
            x = np.empty((b - a, out.shape[1]))
            self._source.read(pulse + a, pulse + b, x)
            alone = (x[:, self._columns] - artifact.levels[place]) * artifact.in_gap[a - first : b - first]
            out[a - start : b - start, self._columns] += alone


def levels_of(source: Recording, layout: Layout) -> Floats:
    """Find what has to be added to each piece so that it follows the one before without a step.

    Parameters
    ----------
    source : Recording
        Read at the edges of the pieces.
    layout : Layout
        Where they are.

    Returns
    -------
    array, shape (n_pieces, n_channels)
        Stored units.
    """
    pieces = layout.pieces()
    n_samples = len(layout.starts) * layout.size
    levels = np.zeros((len(pieces), len(source.facts.channels)))
    edge = np.empty((1, levels.shape[1]))
    last = np.zeros(levels.shape[1])
    for place, (start, here) in enumerate(pieces):
        # A jump has the step that led to where it lands; what lies before a stretch may be a break.
        beside = start - 1 if here % layout.size else start
        source.read(beside, beside + 1, edge)
        if place:
            levels[place] = last - edge[0]
        following = pieces[place + 1][1] if place + 1 < len(pieces) else n_samples
        end = start + following - here
        source.read(end - 1, end, edge)
        last = edge[0] + levels[place]
    return levels


def planted_setup(setup: Setup, facts: RecordingFacts, onsets: tuple[int, ...]) -> Setup:
    """Bind the same plan to a planted recording: its pulses are known, nothing else is marked in it."""
    return replace(
        setup,
        facts=facts,
        pulses=tuple(ExpectedPulse(float(onset), None, PulseState.ADDED) for onset in onsets),
        barriers=(),
        onset_rules=(),
        seeks_pulses=False,
        to_match=(),
        no_pulses=(),
    )
