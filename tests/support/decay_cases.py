"""Recordings with decays of known size after every pulse, for the tests of engine and set."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.model.plan import Pulses
from pulsemend.model.vocabulary import Decay, Fill
from support.engine_cases import ArrayRecording, with_pulses

RATE_HZ = 5000
GAP = (-10, 71)
"""Samples replaced by a window of -2 to 14 ms: first, and first after it."""


def background(
    n_channels: int, n_samples: int, seed: int, alpha: bool = True, rate_hz: float = RATE_HZ
) -> NDArray[np.float64]:
    """Pink background of 12 uV with, if wanted, 8 uV of alpha, and offsets: tenths of microvolts."""
    rng = np.random.default_rng(seed)
    f = np.fft.rfftfreq(n_samples, 1.0 / rate_hz)
    f[0] = f[1]
    shape = (n_channels, f.size)

    def spectrum() -> NDArray[np.complex128]:
        return rng.standard_normal(shape) + 1j * rng.standard_normal(shape)

    x = np.fft.irfft(spectrum() * np.minimum(f, 0.5) / 0.5 / np.sqrt(f), n_samples)
    x *= 12.0 / x.std()
    if alpha:
        tone = np.fft.irfft(spectrum() * np.exp(-0.5 * ((f - 10.0) / 1.0) ** 2), n_samples)
        x += tone * 8.0 / tone.std()
    return np.round(10.0 * (x + 300.0 * np.arange(n_channels)[:, None]))


def evoked() -> NDArray[np.float64]:
    """Evoked response of 9 uV at most, half a second from the pulse, in tenths of microvolts."""
    t = np.arange(RATE_HZ // 2) / RATE_HZ
    wave = np.sin(2 * np.pi * t / 0.12) * np.exp(-(((t - 0.09) / 0.06) ** 2))
    return np.asarray(np.round(90.0 * wave / np.abs(wave).max()))


def add_evoked(stored: NDArray[np.float64], onsets: list[int]) -> NDArray[np.float64]:
    """Add the evoked response after every onset."""
    stored = stored.copy()
    for onset in onsets:
        room = stored.shape[1] - onset
        stored[:, onset : onset + RATE_HZ // 2] += evoked()[:room]
    return stored


def decay_uv(kind: Decay, size_uv: float = 1000.0) -> NDArray[np.float64]:
    """Decay over two seconds from the pulse on: a power law of 10 ms, or an exponential of 20 ms."""
    t = np.arange(2 * RATE_HZ) / RATE_HZ
    if kind is Decay.POWER:
        return np.asarray(size_uv * (1.0 + t / 0.010) ** -2)
    if kind is Decay.TWO_EXPONENTIALS:
        return np.asarray(size_uv * (0.7 * np.exp(-t / 0.008) + 0.3 * np.exp(-t / 0.040)))
    return np.asarray(size_uv * np.exp(-t / 0.020))


def with_decays(
    stored: NDArray[np.float64],
    onsets: list[int],
    kind: Decay,
    spread: float = 0.1,
    size_uv: float = 1000.0,
    channels: slice = slice(None),
) -> NDArray[np.float64]:
    """Add a decay after every onset, as large as is drawn for each pulse and channel."""
    stored = stored.copy()
    rng = np.random.default_rng(1)
    shape = 10.0 * decay_uv(kind, size_uv)
    for onset in onsets:
        size = 1.0 + spread * rng.standard_normal((len(stored), 1))
        room = stored.shape[1] - onset
        stored[channels, onset : onset + shape.size] += np.round(size * shape[:room])[channels]
    return stored


def recording(
    stored: NDArray[np.float64], onsets: list[int], boundaries: tuple[int, ...] = ()
) -> ArrayRecording:
    """Put the pulses themselves in, with markers at their onsets' places."""
    spiked = with_pulses(stored, RATE_HZ, onsets)
    return ArrayRecording(spiked.stored, RATE_HZ, spiked.facts.markers, boundaries)


def pulses(decay: Decay, fill: Fill = Fill.LINE, **more: Any) -> Pulses:
    """Gap of 16 ms, a fill and a kind of decay."""
    return Pulses(window_ms=(-2.0, 14.0), fill=fill, decay=decay, **more)
