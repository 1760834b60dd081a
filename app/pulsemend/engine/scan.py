"""Looking through a whole recording for pulses."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.recording import Recording
from pulsemend.progress import Progress, Work
from pulsemend.signal.find import (
    PULSE_LIKE_FACTOR,
    common_to_many,
    companions,
    events_of,
    local_steps,
    steep_samples,
    usual_steps,
)

LEAST_SPACING_S = 0.05
"""Pulse-like steps closer together are one event, unless the plan says otherwise."""

SAMPLED_S = 0.25
MOST_SAMPLED = 40
"""What steps are usual is the median over so many windows of this length; pulses in some do not move it."""

CELL_S = 0.05
AROUND_S = 0.1
AFTERWARDS_S = 0.02
"""Steps common to fewer than half of the channels are compared with `AROUND_S` of the signal before their
cell and after it, but for what directly follows a pulse. Cells are counted from the start of a segment, so
that the result does not depend on how blocks are cut."""

BLOCK_VALUES = 2_000_000


@dataclass(frozen=True)
class FindRules:
    """What counts as a pulse.

    Parameters
    ----------
    factor : float
        How many times steeper than usual.
    spacing_s : float
        Steps closer together are one pulse.
    """

    factor: float = PULSE_LIKE_FACTOR
    spacing_s: float = LEAST_SPACING_S


DEFAULT_RULES = FindRules()


@dataclass(frozen=True)
class PulseScan:
    """What a recording holds.

    Parameters
    ----------
    pulses : tuple of int
        Recorded samples, in order: the first large step of each.
    companions : tuple of int
        Weaker events at a fixed latency from pulses, such as the stimulator's recharge.
    """

    pulses: tuple[int, ...] = ()
    companions: tuple[int, ...] = ()


def find_pulse_like(
    recording: Recording, channels: NDArray[np.intp], rules: FindRules = DEFAULT_RULES
) -> Work[tuple[int, ...]]:
    """Find the pulses of `scan` alone.

    Parameters
    ----------
    recording, channels, rules
        As for `scan`.

    Yields
    ------
    Progress

    Returns
    -------
    tuple of int
        Recorded samples, in order.
    """
    found = yield from scan(recording, channels, rules)
    return found.pulses


def scan(
    recording: Recording, channels: NDArray[np.intp], rules: FindRules = DEFAULT_RULES
) -> Work[PulseScan]:
    """Find steps that are as steep, and common to as many channels, as only a pulse makes them.

    A step counts where it is ``rules.factor`` times the usual of its channel in at least three channels, and
    either in half of them or also far above the signal just before and after. Blinks and alpha are too slow
    for that, muscle activity lasts longer, and the pop of an electrode is its alone.

    Parameters
    ----------
    recording : Recording
        Read whole, in blocks.
    channels : array of int
        Good EEG channels of the file.
    rules : FindRules
        What counts as a pulse.

    Yields
    ------
    Progress

    Returns
    -------
    PulseScan
    """
    facts = recording.facts
    length = max(2, round(SAMPLED_S * facts.rate_hz))
    starts = np.linspace(0, max(0, facts.n_samples - length), MOST_SAMPLED).astype(int)
    reader = _Reader(recording, channels)
    windows = [reader.volts(start, min(start + length, facts.n_samples)) for start in np.unique(starts)]
    if not any(len(window) > 1 for window in windows):
        return PulseScan()
    least_step = rules.factor * usual_steps(windows)
    cell = max(2, round(CELL_S * facts.rate_hz))
    # Whole cells, so that each is judged once.
    block = cell * max(1, BLOCK_VALUES // len(facts.channels) // cell)
    samples: list[NDArray[np.intp]] = []
    strengths: list[NDArray[np.float64]] = []
    for lo, hi in facts.segments:
        for start in range(lo, hi, block):
            yield Progress("looking for pulses", start, facts.n_samples)
            first = max(lo, start - 1)
            at, counts, strength = steep_samples(reader.volts(first, min(hi, start + block)), least_step)
            at += first
            keep = common_to_many(counts, channels.size)
            cells = (at - lo) // cell
            for unsure in np.setdiff1d(cells, cells[keep]).tolist():
                start_of = lo + unsure * cell
                span = (start_of, min(hi, start_of + cell))
                keep |= np.isin(at, _standing_out(reader, span, (lo, hi), least_step))
            samples.append(at[keep])
            strengths.append(strength[keep])
    spacing = max(1, round(rules.spacing_s * facts.rate_hz))
    events, strong = events_of(
        np.concatenate([np.zeros(0, np.intp), *samples]), np.concatenate([np.zeros(0), *strengths]), spacing
    )
    follows = companions(events, strong, facts.rate_hz)
    return PulseScan(tuple(events[~follows].tolist()), tuple(events[follows].tolist()))


class _Reader:
    """Some channels of a recording in volts; float32 is enough for steps."""

    def __init__(self, recording: Recording, channels: NDArray[np.intp]) -> None:
        facts = recording.facts
        self.rate_hz = facts.rate_hz
        self._recording = recording
        self._channels = channels
        self._all = channels.size == len(facts.channels)
        self._scale_v = np.array([channel.scale_v for channel in facts.channels])[channels].astype(np.float32)
        self._n_channels = len(facts.channels)
        # Counted from a sample of its own, a large offset costs no precision.
        origin = np.zeros((1, self._n_channels))
        if facts.n_samples:
            recording.read(0, 1, origin)
        self._origin = origin[0]

    def volts(self, start: int, stop: int) -> NDArray[np.float32]:
        x = np.empty((stop - start, self._n_channels), np.float32)
        self._recording.read(start, stop, x, self._origin)
        picked = x if self._all else x[:, self._channels]
        picked *= self._scale_v
        return picked


def _standing_out(
    reader: _Reader, cell: tuple[int, int], segment: tuple[int, int], least_step: NDArray[np.float64]
) -> NDArray[np.intp]:
    """Find the steep samples of a cell that stand out from the signal before and after it."""
    start, stop = cell
    around, skipped = (round(length_s * reader.rate_hz) for length_s in (AROUND_S, AFTERWARDS_S))
    first, last = max(segment[0], start - around), min(segment[1], stop + skipped + around)
    x = reader.volts(first, last)
    least = least_step
    for beside in (x[: start - first], x[stop + skipped - first :]):
        if len(beside) > 1:
            least = np.maximum(least, local_steps(beside))
    a = max(0, start - first - 1)
    at, _, _ = steep_samples(x[a : stop - first], least)
    return at + first + a
