"""A real average, laid into a background and struck by pulses, comes back from the mended epochs.

Outside data: the 256-channel average after stimulation of a nerve (2048 Hz, 50 ms before to 130 ms after
the stimulus) that comes inside spharapy, its data alone; peaks near 30 and 65 ms. Five times as large as
recorded, its peaks have the size of the responses to a magnetic pulse (7 to 9 uV).

The second half of each recording has the first half's background upside down, so the background cancels in
the average as it would over very many trials, and what remains is what the repair itself does.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
import spharapy.datasets
from numpy.typing import NDArray
from scipy.fft import next_fast_len
from scipy.ndimage import convolve1d

from pulsemend.model.plan import Filter, Pulses
from pulsemend.model.vocabulary import Decay, Fill, Precision
from support import engine_cases
from support.decay_cases import background
from support.engine_cases import NO_PULSES, make_chain, read_epoch, with_pulses

RATE_HZ = 2048
BEFORE_S, BEFORE, N_TIMES = 0.05, 102, 369
WINDOW_MS = (-2.0, 10.0)
FROM_S, TO_S = -0.04, 0.10
"""Where around the stimuli the pulses lie that do not keep time with them."""

AT_MS = (np.arange(N_TIMES) - BEFORE) / RATE_HZ * 1e3
PEAKS_MS = ((20.0, 40.0), (50.0, 80.0))
N_HALF = 40
N_BEST = 8
"""Per peak the channels in which it is largest."""

FILLS = [fill for fill in Fill if fill is not Fill.LEAVE]
Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Scene:
    """Responses at known samples of a recording without pulses, tenths of microvolts, and the truth in uV."""

    stored: Floats
    stimuli: NDArray[np.intp]
    truth: Floats


def make_scene(every: int, n_half: int) -> Scene:
    """Lay the average of every so-many-th channel into twice so many places."""
    study = spharapy.datasets.load_eeg_256_channel_study()
    real = 5.0 * np.asarray(study["eegdata"], dtype=np.float64)[::every]
    real -= real[:, :BEFORE].mean(axis=1, keepdims=True)
    ends = np.ones(N_TIMES)
    ends[:20] = 0.5 - 0.5 * np.cos(np.pi * np.arange(20) / 20)
    ends[-20:] = ends[19::-1]
    rng = np.random.default_rng(5)
    spacing = rng.integers(round(0.55 * RATE_HZ), round(0.75 * RATE_HZ), n_half)
    stimuli = RATE_HZ + np.cumsum(spacing)
    n_samples = next_fast_len(int(stimuli[-1]) + 2 * RATE_HZ, real=True)
    half = background(len(real), n_samples, 1, rate_hz=RATE_HZ)
    half -= np.round(half.mean(axis=1, keepdims=True))
    stored = np.concatenate([half, -half], axis=1)
    stimuli = np.concatenate([stimuli, stimuli + n_samples])
    for at in stimuli.tolist():
        stored[:, at - BEFORE : at - BEFORE + N_TIMES] += np.round(10.0 * real * ends)
    return Scene(stored, stimuli, real)


@pytest.fixture(scope="module")
def scene() -> Scene:
    """Every eighth channel."""
    return make_scene(8, N_HALF)


@pytest.fixture(scope="module")
def whole_scene() -> Scene:
    """All channels."""
    return make_scene(1, N_HALF)


def jittered(of: Scene) -> NDArray[np.intp]:
    """Pulses at latencies spread evenly, in an order that was drawn; the same in both halves."""
    n_half = of.stimuli.size // 2
    latencies = np.linspace(FROM_S * RATE_HZ, TO_S * RATE_HZ, n_half).round().astype(int)
    return np.asarray(of.stimuli + np.tile(np.random.default_rng(6).permutation(latencies), 2))


def averaged(of: Scene, onsets: NDArray[np.intp], pulses: Pulses) -> Floats:
    """Add pulses of some millivolts, mend, cut at the stimuli and average: uV."""
    plan = engine_cases.plan(
        pulses=pulses,
        filter=Filter(highpass_hz=0.5, lowpass_hz=300.0, rate_hz=0.0),
        reference="as recorded",
        precision=Precision.DOUBLE,
    )
    chain = make_chain(with_pulses(of.stored, RATE_HZ, onsets.tolist()), plan)
    if onsets.size:
        assert np.abs(np.array(chain.estimates.onsets) - onsets).max() <= 1
    total = sum(read_epoch(chain, float(at), -BEFORE_S, N_TIMES).data for at in of.stimuli.tolist())
    mean = 1e6 * np.asarray(total) / of.stimuli.size
    return np.asarray(mean - mean[:, :BEFORE].mean(axis=1, keepdims=True))


def smooth(x: Floats) -> Floats:
    """Take off ripple near the low-pass, in truth and result alike: weights over 5 ms."""
    weights = np.hanning(11)
    return np.asarray(convolve1d(x, weights / weights.sum(), axis=1))


def between(first_ms: float, last_ms: float) -> NDArray[np.bool_]:
    """Tell which samples of the average lie there."""
    return np.asarray((first_ms <= AT_MS) & (last_ms >= AT_MS))


def peaks(x: Floats, window_ms: tuple[float, float], channels: NDArray[np.intp], signs: Floats) -> Floats:
    """Amplitude and latency (ms, between samples by a parabola) in each channel, shape (2, n_channels)."""
    inside = np.flatnonzero(between(*window_ms))
    upright = x[channels] * signs[:, None]
    found = []
    for row in upright:
        place = int(inside[row[inside].argmax()])
        a, b, c = row[place - 1 : place + 2]
        found.append((b, AT_MS[place] + 0.5 * (a - c) / (a - 2.0 * b + c) * 1e3 / RATE_HZ))
    return np.array(found).T


@dataclass(frozen=True)
class ComesBack:
    """What an average may differ from the truth."""

    least: float
    most: float
    late_ms: float
    left: float
    """RMS of the difference, over all channels from 15 ms on, against that of the truth."""


def check(of: Scene, mean: Floats, bound: ComesBack) -> None:
    truth, result = smooth(of.truth), smooth(mean)
    after = between(15.0, 115.0)
    left = np.sqrt(((result - truth)[:, after] ** 2).mean() / (truth[:, after] ** 2).mean())
    seen = [f"left {left:.3f}"]
    for window_ms in PEAKS_MS:
        inside = truth[:, between(*window_ms)]
        best = np.argsort(-np.abs(inside).max(axis=1))[:N_BEST]
        signs = np.sign(inside[best, np.abs(inside[best]).argmax(axis=1)])
        true, back = (peaks(x, window_ms, best, signs) for x in (truth, result))
        assert true[0].min() > 3.0
        ratio, late = back[0] / true[0], np.abs(back[1] - true[1]).max()
        seen.append(f"{window_ms}: {ratio.min():.3f} to {ratio.max():.3f}, {late:.2f} ms")
        assert ratio.min() > bound.least, seen
        assert ratio.max() < bound.most, seen
        assert late < bound.late_ms, seen
    assert left < bound.left, seen


LATE_MS = 0.5
"""One sample."""

KEPT = ComesBack(0.98, 1.02, LATE_MS, 0.03)
"""Gaps end before the response begins: two per cent for the filters (0.5 and 300 Hz) and for
what they carry into it from the gap."""

SHARE = (WINDOW_MS[1] - WINDOW_MS[0]) / (1e3 * (TO_S - FROM_S))
STRUCK = ComesBack(1.0 - SHARE - 0.02, 1.02, LATE_MS, SHARE)
"""At each latency this share of epochs (8.6 %) is filled: at worst all of the response is lost there."""


def test_without_pulses_it_comes_back(scene: Scene) -> None:
    check(scene, averaged(scene, np.zeros(0, np.intp), NO_PULSES), KEPT)


@pytest.mark.parametrize("fill", FILLS)
def test_it_comes_back_after_pulses_at_the_stimulus(scene: Scene, fill: Fill) -> None:
    check(scene, averaged(scene, scene.stimuli, Pulses(window_ms=WINDOW_MS, fill=fill)), KEPT)


@pytest.mark.parametrize("fill", FILLS)
def test_it_comes_back_from_under_pulses_at_any_latency(scene: Scene, fill: Fill) -> None:
    check(scene, averaged(scene, jittered(scene), Pulses(window_ms=WINDOW_MS, fill=fill)), STRUCK)


def test_pulses_that_are_not_mended_spoil_it(scene: Scene) -> None:
    """The proof that the bounds above can fail."""
    mean = averaged(scene, jittered(scene), Pulses(window_ms=(-2.0, -1.5), fill=Fill.LINE))
    with pytest.raises(AssertionError, match="left"):
        check(scene, mean, STRUCK)


@pytest.mark.slow
@pytest.mark.parametrize("fill", FILLS)
@pytest.mark.parametrize("where", ["stimulus", "any latency", "any latency, decays looked for"])
def test_all_channels_come_back(whole_scene: Scene, fill: Fill, where: str) -> None:
    """Looking for decays where there are none changes nothing: the response is too small to be one."""
    onsets = whole_scene.stimuli if where == "stimulus" else jittered(whole_scene)
    decay = Decay.EXPONENTIAL if "decays" in where else Decay.NONE
    mean = averaged(whole_scene, onsets, Pulses(window_ms=WINDOW_MS, fill=fill, decay=decay))
    check(whole_scene, mean, KEPT if where == "stimulus" else STRUCK)
