"""Signal with pulses of every kind at known samples, among blinks, muscle bursts, pops and clipping."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import signal as ss

N_CHANNELS = 31
STEP_UV = 0.1
RAIL = 32767
KINDS = ("spike", "clipped", "slow", "held")


@dataclass(frozen=True)
class PulseStream:
    """What was made.

    Parameters
    ----------
    stored : array, shape (n_samples, n_channels)
        Whole numbers, `STEP_UV` each.
    rate_hz : float
    onsets : tuple of int
        First samples that a pulse changed; of a held one the sample after the hold.
    kinds : tuple of str
        One of `KINDS` per pulse.
    """

    stored: NDArray[np.float64]
    rate_hz: float
    onsets: tuple[int, ...]
    kinds: tuple[str, ...]


def wild_background(rate_hz: float, seconds: float, seed: int) -> NDArray[np.float64]:
    """1/f noise, alpha, amplifier noise, blinks, muscle bursts, pops and a clipped electrode; uV."""
    rng = np.random.default_rng(seed)
    n = int(seconds * rate_hz)
    f = np.fft.rfftfreq(n, 1 / rate_hz)
    amplitude = np.where(f > 0, 1 / np.maximum(f, 0.5), 0)[:, None]
    noise = rng.standard_normal((f.size, N_CHANNELS)) + 1j * rng.standard_normal((f.size, N_CHANNELS))
    x = np.fft.irfft(amplitude * noise, n, axis=0)
    x *= 10.0 / x.std()
    t = np.arange(n) / rate_hz
    x += np.sin(2 * np.pi * 10 * t)[:, None] * rng.uniform(2, 10, N_CHANNELS)
    x += 0.3 * rng.standard_normal(x.shape)
    x[:, 5] += 30.0 * rng.standard_normal(n)  # a loud electrode
    band = ss.butter(3, [20.0, min(300.0, 0.4 * rate_hz)], "band", fs=rate_hz, output="sos")
    muscle = np.asarray(ss.sosfilt(band, rng.standard_normal(x.shape), axis=0))
    muscle /= muscle.std(axis=0)
    temples = np.where(np.arange(N_CHANNELS) % 4 == 0, 60.0, 6.0)
    for at in rng.uniform(1.0, seconds - 2.0, int(seconds / 6)):
        rise = np.minimum((t - at) / 0.005, (at + rng.uniform(0.1, 1.0) - t) / 0.005)
        x += muscle * np.clip(rise, 0.0, 1.0)[:, None] * temples
    for at in rng.uniform(1.0, seconds - 1.0, int(seconds / 4)):
        blink = np.where((t > at) & (t < at + 0.25), np.sin(np.pi * (t - at) / 0.25) ** 2, 0.0)
        x += blink[:, None] * np.linspace(200.0, 20.0, N_CHANNELS)
    for at in rng.uniform(1.0, seconds - 1.0, int(seconds / 4)):
        column = rng.integers(N_CHANNELS)
        later = t >= at
        x[later, column] += rng.choice([-1, 1]) * 3000.0 * np.exp(-(t[later] - at) / 0.3)
    x[(t > 0.4 * seconds) & (t < 0.4 * seconds + 0.5), 11] = 1e5
    return x


def pulse_stream(rate_hz: float, seconds: float, seed: int, *, times_peak: float = 5.0) -> PulseStream:
    """Put a pulse of every kind in turn every two seconds or so into the wild background.

    Under the coil a spike is `times_peak` times the background's peak in the median channel, far from it a
    tenth of that.
    """
    rng = np.random.default_rng(seed + 1000)
    x = wild_background(rate_hz, seconds, seed)
    peak_uv = float(np.median(np.abs(x).max(axis=0)))
    weights = 0.1 + 0.9 * np.exp(-(np.linspace(0.0, 3.0, N_CHANNELS) ** 2))
    weights = rng.permutation(weights) * rng.choice([-1, 1], N_CHANNELS)
    onsets: list[int] = []
    kinds: list[str] = []
    at = 1.5
    while at < seconds - 1.0:
        kind = KINDS[len(kinds) % len(KINDS)]
        onset = int(at * rate_hz)
        size = times_peak * peak_uv * rng.uniform(1.0, 1.2)
        _add(x, onset, kind, size, weights, rate_hz)
        onsets.append(onset)
        kinds.append(kind)
        at += rng.uniform(1.2, 2.4)
    stored = np.clip(np.round(x / STEP_UV), -RAIL - 1, RAIL)
    return PulseStream(stored, rate_hz, tuple(onsets), tuple(kinds))


def _add(
    x: NDArray[np.float64],
    onset: int,
    kind: str,
    size_uv: float,
    weights: NDArray[np.float64],
    rate_hz: float,
) -> None:
    t = np.arange(len(x) - onset) / rate_hz
    spike = np.where(t < 0.0005, 1.0, np.where(t < 0.001, -0.8, 0.0))
    decay = 0.05 * np.exp(-t / 0.010)
    y = x[onset:]
    if kind == "held":
        held = max(3, round(0.004 * rate_hz))
        x[onset - held : onset] = x[onset - held]
        # What the hold kept away has become a decay when it ends.
        y += size_uv * weights * np.exp(-t / 0.015)[:, None]
        return
    y += size_uv * weights * (spike + decay)[:, None]
    near = np.abs(weights) > 0.5
    rail_uv = RAIL * STEP_UV
    if kind == "clipped":
        short = t < max(0.001, 3 / rate_hz)
        y[np.ix_(short, near)] = np.sign(weights[near]) * 2 * rail_uv
    elif kind == "slow":
        y[np.ix_(t < 0.030, near)] = np.sign(weights[near]) * 2 * rail_uv
        recovery = np.where(t >= 0.030, np.exp(-(t - 0.030) / 0.050), 0.0)
        y[:, near] += recovery[:, None] * np.sign(weights[near]) * 0.8 * rail_uv
