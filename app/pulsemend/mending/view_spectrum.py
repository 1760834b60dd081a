"""The spectrum of the stretch in view, of the signal as recorded or repaired."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from pulsemend.mending.learned import Learned, repaired_stored
from pulsemend.model.recording import Recording, RecordingFacts
from pulsemend.progress import Progress, Work
from pulsemend.signal.spectrum import WelchSum, choose_size, segment_starts

HIGHEST_HZ = 120.0
MOST_S = 60.0
"""Seconds of signal that are read at most, spread evenly over the stretch."""
SEGMENTS_S = (2.0, 1.0, 0.5, 0.25)
"""Lengths of segments to choose from."""

Span = tuple[int, int]


@dataclass(frozen=True)
class SpectrumRequest:
    """What a spectrum is wanted of.

    Parameters
    ----------
    start, stop : int
        Recorded samples, half open.
    left_out : tuple of (int, int)
        Spans that nothing is computed from: gaps and bad stretches.
    repaired : Learned or None
        Whose repair; None for the signal as recorded.
    """

    start: int
    stop: int
    left_out: tuple[Span, ...] = ()
    repaired: Learned | None = None


@dataclass(frozen=True)
class ViewSpectrum:
    """Power spectral density per channel.

    Parameters
    ----------
    names : tuple of str
    frequency_hz : array, shape (n_frequencies,)
        Without zero, up to `HIGHEST_HZ` or half the recorded rate.
    density : array, shape (n_channels, n_frequencies)
        V^2/Hz.
    segment_s : float
        Length of the segments; its inverse is the distance of two frequencies.
    n_segments : int
        How many were averaged.
    used_s : float
        Seconds of signal they cover.
    thinned : bool
        Whether more signal was there than was read.
    """

    names: tuple[str, ...]
    frequency_hz: NDArray[np.float64] = field(repr=False)
    density: NDArray[np.float64] = field(repr=False)
    segment_s: float
    n_segments: int
    used_s: float
    thinned: bool


def view_spectrum(recording: Recording, request: SpectrumRequest) -> Work[ViewSpectrum | None]:
    """Compute the spectrum of a stretch.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    request : SpectrumRequest
        Of what.

    Yields
    ------
    Progress

    Returns
    -------
    ViewSpectrum or None
        None if nothing of the stretch is long enough.
    """
    facts = recording.facts
    pieces = open_pieces(facts, request)
    sizes = [max(2, round(length_s * facts.rate_hz)) for length_s in SEGMENTS_S]
    size = choose_size([stop - start for start, stop in pieces], sizes)
    if size is None:
        return None
    starts, thinned = _spread(pieces, size, round(MOST_S * facts.rate_hz))
    names, read = _reader(recording, request)
    total = WelchSum(size, facts.rate_hz, HIGHEST_HZ)
    for done, start in enumerate(starts):
        yield Progress("spectrum of the part in view", done, len(starts))
        total.add(read(start, start + size))
    return ViewSpectrum(
        names=names,
        frequency_hz=total.frequency_hz[1:],
        density=total.density()[:, 1:],
        segment_s=size / facts.rate_hz,
        n_segments=total.n_segments,
        used_s=_covered(starts, size) / facts.rate_hz,
        thinned=thinned,
    )


def open_pieces(facts: RecordingFacts, request: SpectrumRequest) -> list[Span]:
    """List what remains of a stretch between breaks, gaps and bad stretches, in order."""
    pieces = []
    closed = sorted(request.left_out)
    for lo, hi in facts.segments:
        at, stop = max(lo, request.start), min(hi, request.stop)
        for closed_from, closed_to in closed:
            if closed_to <= at or closed_from >= stop:
                continue
            if closed_from > at:
                pieces.append((at, closed_from))
            at = closed_to
        if at < stop:
            pieces.append((at, stop))
    return pieces


def _reader(
    recording: Recording, request: SpectrumRequest
) -> tuple[tuple[str, ...], Callable[[int, int], NDArray[np.float64]]]:
    """Name the channels, and make what reads volts of a stretch, shape (n_samples, n_channels)."""
    learned = request.repaired
    if learned is None:
        channels = recording.facts.channels

        def stored(start: int, stop: int) -> NDArray[np.floating]:
            out = np.empty((stop - start, len(channels)))
            recording.read(start, stop, out)
            return out

    else:
        channels, chain, estimates = learned.setup.channels, learned.chain(recording), learned.estimates

        def stored(start: int, stop: int) -> NDArray[np.floating]:
            repaired: NDArray[np.floating] = repaired_stored(chain, estimates, start, stop)
            return repaired

    scale_v = np.array([channel.scale_v for channel in channels])
    return tuple(channel.name for channel in channels), lambda start, stop: stored(start, stop) * scale_v


def _spread(pieces: Iterable[Span], size: int, most: int) -> tuple[Sequence[int], bool]:
    """Choose segments: all that overlap by half, or if that is too much signal some, spread evenly."""
    starts = [start for piece in pieces for start in segment_starts(*piece, size)]
    if _covered(starts, size) <= most:
        return starts, False
    chosen = np.linspace(0, len(starts) - 1, max(1, most // size)).round().astype(int)
    return [starts[place] for place in chosen], True


def _covered(starts: Sequence[int], size: int) -> int:
    """Count the samples that segments cover; starts rise."""
    covered, reached = 0, -1
    for start in starts:
        covered += start + size - max(start, reached)
        reached = start + size
    return covered
