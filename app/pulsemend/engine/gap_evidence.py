"""What the signal around all pulses says about where their gap should begin and end."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.pulses import limits_of
from pulsemend.engine.reading import read_stored
from pulsemend.engine.setup import Setup
from pulsemend.model.recording import Recording
from pulsemend.progress import Progress, Work
from pulsemend.signal.find import usual_steps
from pulsemend.signal.gap_end import AFTER_S, BEFORE_S, GapEnd, Ringing, gap_ends, ringing_before
from pulsemend.signal.pulse_kinds import clipped_samples

MOST_PULSES = 80
MOST_VALUES = 24_000_000
"""Pulses looked at together: enough for medians, in at most 100 MB."""

LEAST_PULSES = 5


@dataclass(frozen=True)
class GapEvidence:
    """Evidence for a gap.

    Parameters
    ----------
    columns : array of int
        The used channels that were looked at.
    ends : tuple of GapEnd
        One per channel looked at.
    ringing : Ringing or None
        What lies before the onset; sizes in volts.
    n_pulses : int
        Pulses looked at.
    """

    columns: NDArray[np.intp]
    ends: tuple[GapEnd, ...]
    ringing: Ringing | None
    n_pulses: int


def gap_evidence(recording: Recording, setup: Setup, onsets: Sequence[int]) -> Work[GapEvidence | None]:
    """Look at the good EEG channels around the pulses as they were recorded.

    Parameters
    ----------
    recording : Recording
        Read around up to 80 pulses.
    setup : Setup
        Channels and segments; no gap has to be decided.
    onsets : sequence of int
        Recorded samples of pulses that the signal shows.

    Yields
    ------
    Progress

    Returns
    -------
    GapEvidence or None
        None with fewer than five pulses that stand far enough from the recording's ends and one another.
    """
    good = setup.eeg & ~setup.bad
    columns = np.flatnonzero(good if good.any() else ~setup.bad)
    rate_hz = setup.facts.rate_hz
    before, after = (math.ceil(edge_s * rate_hz) + 2 for edge_s in (BEFORE_S[0], AFTER_S))
    alone = _alone(setup, onsets, before, after)
    most = min(MOST_PULSES, MOST_VALUES // max(1, (before + after) * columns.size))
    if len(alone) < LEAST_PULSES or columns.size == 0 or most < LEAST_PULSES:
        return None
    places = np.unique(np.linspace(0, len(alone) - 1, min(len(alone), most)).round().astype(int))
    x = np.empty((len(places), before + after, columns.size), np.float32)
    for row, place in enumerate(places.tolist()):
        yield Progress("looking where the pulses end", row, len(places))
        at = alone[place]
        # As stored: clipped samples are equal to the last digit.
        x[row] = read_stored(recording, setup, at - before, at + after, None, np.float32)[:, columns]
    quiet = before - round(BEFORE_S[1] * rate_hz)
    steps_v = usual_steps([one[:quiet] for one in x]) * np.abs(setup.scale_v[columns])
    limits = limits_of(setup, steps_v, columns)
    until_s = np.zeros((len(places), columns.size))
    for row, one in enumerate(x):
        clipped = clipped_samples(one, before, limits)
        last = len(clipped) - np.argmax(clipped[::-1], axis=0)
        until_s[row] = np.where(clipped.any(axis=0), last / rate_hz, 0.0)
    x *= setup.scale_v[columns].astype(np.float32)
    yield Progress("looking where the pulses end", len(places), len(places))
    return GapEvidence(
        columns=columns,
        ends=gap_ends(x, before, rate_hz, until_s),
        ringing=ringing_before(x, before, rate_hz),
        n_pulses=len(places),
    )


def _alone(setup: Setup, onsets: Sequence[int], before: int, after: int) -> list[int]:
    """Pulses whose surroundings hold no other pulse and no end of a segment."""
    ordered = sorted(onsets)
    return [
        onset
        for place, onset in enumerate(ordered)
        if (place == 0 or onset - ordered[place - 1] >= before + after)
        and (place + 1 == len(ordered) or ordered[place + 1] - onset >= after)
        and any(lo <= onset - before and onset + after <= hi for lo, hi in setup.facts.segments)
    ]
