"""Decays for a first picture: of the channels shown only, and from a part of the pulses."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.decay import DecayEstimates, learn_decay
from pulsemend.engine.setup import Setup
from pulsemend.model.recording import Recording
from pulsemend.progress import Work

MOST_PULSES = 24
"""The median over so many pulses shows the shape; reading more would not be done within a blink."""

ALONE_S = 1.0
"""Pulses count whose next one is no nearer than this and the stretch fitted: then none that is left out lies
in what is read of another."""


def quick_decay(
    recording: Recording, setup: Setup, onsets: Sequence[int], columns: NDArray[np.intp]
) -> Work[DecayEstimates]:
    """Fit the decays of some channels; every pulse counts as large as the median pulse.

    Parameters
    ----------
    recording : Recording
        Read by the caller alone.
    setup : Setup
        Plan and marks, bound to it.
    onsets : sequence of int
        Of all pulses, in order of time.
    columns : array of int
        Among the used channels.

    Yields
    ------
    Progress

    Returns
    -------
    DecayEstimates
        Without absorption.
    """
    found = yield from learn_decay(recording, setup, _some(setup, onsets), None, columns)
    return replace(found, amplitudes=np.ones((found.columns.size, len(onsets))))


def _some(setup: Setup, onsets: Sequence[int]) -> Sequence[int]:
    """Choose pulses that stand alone, spread over the recording; all where that would leave too few."""
    if len(onsets) <= MOST_PULSES:
        return onsets
    least = (ALONE_S + setup.decay_s) * setup.facts.rate_hz
    following = [*onsets[1:], setup.facts.n_samples]
    alone = [a for a, b in zip(onsets, following, strict=True) if b - a >= least]
    if len(alone) < MOST_PULSES:
        return onsets
    return [alone[place] for place in np.linspace(0, len(alone) - 1, MOST_PULSES).round().astype(int)]
