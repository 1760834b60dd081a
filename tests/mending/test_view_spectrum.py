"""Spectrum of a stretch: what is left out, what is read, and agreement with scipy over the same samples."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import scipy.signal

from pulsemend.mending import view_spectrum as module
from pulsemend.mending.learned import learn
from pulsemend.mending.view_spectrum import SpectrumRequest, open_pieces, view_spectrum
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.vocabulary import ChannelType
from pulsemend.progress import finish
from pulsemend.simulate.lantern import LanternSpec
from pulsemend.simulate.memory import MemoryForm, MemoryRecording, rehearse
from support.array_recording import ArrayRecording
from support.small_lantern import PLAN

RATE_HZ = 500.0


def noise(seconds: float, n_channels: int = 3, boundaries: tuple[int, ...] = ()) -> MemoryRecording:
    x = np.random.default_rng(7).standard_normal((round(seconds * RATE_HZ), n_channels))
    form = MemoryForm(rate_hz=RATE_HZ, scale_v=1e-6, boundaries=boundaries)
    return MemoryRecording(x, form)


def test_a_stretch_agrees_with_scipy_in_volts() -> None:
    recording = noise(20)
    found = finish(view_spectrum(recording, SpectrumRequest(1000, 7000)))
    assert found is not None
    x = np.empty((6000, 3))
    recording.read(1000, 7000, x)
    frequency_hz, theirs = scipy.signal.welch(x * 1e-6, RATE_HZ, nperseg=1000, noverlap=500, axis=0)
    kept = (frequency_hz > 0) & (frequency_hz <= 120)
    np.testing.assert_allclose(found.frequency_hz, frequency_hz[kept])
    np.testing.assert_allclose(found.density, theirs[kept].T, rtol=1e-9)
    assert (found.names, found.n_segments, found.used_s, found.segment_s) == (
        ("E1", "E2", "E3"),
        11,
        12.0,
        2.0,
    )
    assert not found.thinned


def test_a_pulse_that_is_left_out_changes_nothing() -> None:
    clean = noise(30)
    x = np.empty((15_000, 3))
    clean.read(0, 15_000, x)
    request = SpectrumRequest(0, 15_000, ((4990, 5010), (5005, 5020), (12_000, 12_500)))
    expected = finish(view_spectrum(clean, request))
    x[4990:5020] += 1e6
    x[12_000:12_500] -= 1e5
    found = finish(view_spectrum(MemoryRecording(x, MemoryForm(rate_hz=RATE_HZ, scale_v=1e-6)), request))
    assert expected is not None
    assert found is not None
    np.testing.assert_array_equal(found.density, expected.density)
    whole = finish(view_spectrum(clean, SpectrumRequest(0, 15_000)))
    assert whole is not None
    assert whole.density[0, 0] != found.density[0, 0]


def test_pieces_keep_clear_of_breaks_and_of_what_is_left_out() -> None:
    facts = noise(10, boundaries=(2000,)).facts
    request = SpectrumRequest(100, 4000, ((3000, 3100), (0, 150), (3050, 3200), (1990, 2010), (3990, 5000)))
    assert open_pieces(facts, request) == [(150, 1990), (2010, 3000), (3200, 3990)]


def test_too_little_signal_gives_nothing() -> None:
    recording = noise(10)
    assert finish(view_spectrum(recording, SpectrumRequest(100, 200))) is None
    assert finish(view_spectrum(recording, SpectrumRequest(0, 5000, ((0, 5000),)))) is None


def test_of_long_stretches_a_minute_is_read_spread_evenly(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    x = np.random.default_rng(1).standard_normal((100_000, 2)).astype(np.float32)
    recording = ArrayRecording(x, tmp_path / "long", rate_hz=100.0)
    found = finish(view_spectrum(recording, SpectrumRequest(0, 100_000)))
    assert found is not None
    assert found.thinned
    assert found.used_s == 60.0
    assert sum(stop - start for start, stop in recording.reads) == 6000
    assert recording.reads[0][0] == 0
    assert recording.reads[-1][1] == 100_000
    monkeypatch.setattr(module, "MOST_S", 1000.0)
    whole = finish(view_spectrum(recording, SpectrumRequest(0, 100_000)))
    assert whole is not None
    assert not whole.thinned
    assert whole.used_s == 1000.0


def test_repaired_and_recorded_agree_outside_gaps() -> None:
    """Gaps are left out, and a repair changes nothing else; single precision is worth 1e-6."""
    spec = LanternSpec(trials=2, channels=("C3", "Cz", "P3", "O1"), faults=())
    recording = rehearse(spec).recording
    plan = parse_plan(PLAN).plan
    learned = finish(learn(recording, plan, NO_MARKS))
    assert learned.estimates.onsets
    gaps = tuple((gap.start, gap.stop) for gap in learned.decision.geometry.gaps)
    n = recording.facts.n_samples
    recorded = finish(view_spectrum(recording, SpectrumRequest(0, n, gaps)))
    repaired = finish(view_spectrum(recording, SpectrumRequest(0, n, gaps, learned)))
    assert recorded is not None
    assert repaired is not None
    assert repaired.names == ("C3", "Cz", "P3", "O1")
    np.testing.assert_allclose(repaired.density, recorded.density, rtol=1e-5)
    assert all(channel.type is ChannelType.EEG for channel in learned.setup.channels)
