"""Pulses found in a whole recording, among what looks like them."""

from __future__ import annotations

import numpy as np
import pytest

import pulsemend.engine.scan
from pulsemend.engine.scan import FindRules, find_pulse_like, scan
from pulsemend.progress import finish
from pulsemend.simulate.memory import MemoryForm, MemoryRecording
from support.pulse_streams import N_CHANNELS, PulseStream, pulse_stream

ALL = np.arange(N_CHANNELS)


def recording_of(stream: PulseStream, **form: object) -> MemoryRecording:
    return MemoryRecording(stream.stored, MemoryForm(rate_hz=stream.rate_hz, scale_v=1e-7, **form))  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("rate_hz", "seconds", "seed"),
    [(1000.0, 60.0, 1), (1000.0, 60.0, 2), (5000.0, 30.0, 3), (25_000.0, 8.0, 5)],
)
def test_every_pulse_and_nothing_else_is_found(rate_hz: float, seconds: float, seed: int) -> None:
    """Issue 5.1: precision and recall 1 for pulses of 5 times the background's peak, of every kind."""
    stream = pulse_stream(rate_hz, seconds, seed)
    found = np.array(finish(find_pulse_like(recording_of(stream), ALL)))
    assert found.shape == (len(stream.onsets),)
    assert np.abs(found - np.array(stream.onsets)).max() <= 2


def test_blocks_and_breaks_do_not_change_what_is_found(monkeypatch: pytest.MonkeyPatch) -> None:
    stream = pulse_stream(1000.0, 40.0, 6)
    whole = finish(scan(recording_of(stream), ALL))
    for values in (1, 31 * 777, 31 * 5000):
        monkeypatch.setattr(pulsemend.engine.scan, "BLOCK_VALUES", values)
        assert finish(scan(recording_of(stream), ALL)) == whole
    half = recording_of(stream, boundaries=(20_011,))
    assert finish(scan(half, ALL)) == whole


def test_spacing_joins_pairs_or_tells_them_apart() -> None:
    stream = pulse_stream(5000.0, 20.0, 7)
    stored = stream.stored.copy()
    spikes = [at for at, kind in zip(stream.onsets, stream.kinds, strict=True) if kind == "spike"]
    for at in spikes:
        stored[at + 100 : at + 105] = np.clip(3.0 * stored[at : at + 5], -32768, 32767)
    pairs = recording_of(PulseStream(stored, 5000.0, stream.onsets, stream.kinds))
    apart = finish(find_pulse_like(pairs, ALL, FindRules(spacing_s=0.010)))
    joined = finish(find_pulse_like(pairs, ALL))
    assert len(joined) == len(stream.onsets)
    assert [at for at in spikes if any(abs(one - at - 100) <= 2 for one in apart)] == spikes


def test_a_higher_factor_finds_less() -> None:
    stream = pulse_stream(5000.0, 20.0, 8)
    few = finish(find_pulse_like(recording_of(stream), ALL, FindRules(factor=5000.0)))
    assert len(few) < len(stream.onsets)


def test_a_recording_of_one_sample_holds_nothing() -> None:
    stream = pulse_stream(1000.0, 3.0, 9)
    assert finish(scan(MemoryRecording(stream.stored[:1], MemoryForm(rate_hz=1000.0)), ALL)).pulses == ()
