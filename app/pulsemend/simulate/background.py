"""What no event causes in a Lantern recording: 1/f activity, alpha bursts, drift, line and sensor noise.

Whatever keeps one map on the head is a *source*: a row of activity times a row of the map matrix.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import signal

from pulsemend.simulate.artifact import amplifier
from pulsemend.simulate.head import dipole_map

N_PATCHES = 20  # independent sources of 1/f activity
EXPONENT = 1.2  # power falls as f to minus this
SLOWEST_HZ, FASTEST_HZ = 0.05, 1000.0  # where the fall begins and ends
ACTIVITY_V = 8e-6  # standard deviation, 1 to 100 Hz, root mean square over the cap, before referencing
WARM_UP_S = 20.0  # so that the slowest part is there from the first sample on

ALPHA_V = 22e-6
ALPHA_HZ = (9.0, 11.0)
ALPHA_LENGTH_S = (0.5, 2.0)
ALPHA_PAUSE_S = (0.3, 4.0)

N_DRIFTS = 6
DRIFT_V = 40e-6
DRIFT_PERIOD_S = (20.0, 300.0)
LINE_V = 3e-6
LINE_HARMONIC = 3  # a weaker part at this multiple
SENSOR_V = 1e-6
LOUD_V = 150e-6
OFFSET_V = 0.0006
OFFSET_MOST_V = 0.0015


@dataclass(frozen=True)
class Burst:
    """One alpha burst: its side (0 left, 1 right), start, length, frequency, phase and height."""

    side: int
    start_s: float
    length_s: float
    rate_hz: float
    phase: float
    height_v: float

    def wave(self, times_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Volts at the alpha map's peak; times since the first sample of the recording, shape (n_times,)."""
        t = times_s - self.start_s
        inside = (t >= 0.0) & (t <= self.length_s)
        rise = np.sin(np.pi * np.clip(t / self.length_s, 0.0, 1.0)) ** 2
        return np.where(inside, self.height_v * rise * np.sin(2 * np.pi * self.rate_hz * t + self.phase), 0.0)


def draw_bursts(rng: np.random.Generator, duration_s: float) -> tuple[Burst, ...]:
    """Alpha bursts of both sides, in order of start."""
    bursts: list[Burst] = []
    for side in (0, 1):
        at = rng.uniform(*ALPHA_PAUSE_S)
        while at < duration_s:
            length = rng.uniform(*ALPHA_LENGTH_S)
            height = ALPHA_V * rng.uniform(0.5, 1.3)
            bursts.append(Burst(side, at, length, rng.uniform(*ALPHA_HZ), rng.uniform(0, 2 * np.pi), height))
            at += length + rng.uniform(*ALPHA_PAUSE_S)
    return tuple(sorted(bursts, key=lambda burst: burst.start_s))


def patch_maps(rng: np.random.Generator, sites: NDArray[np.float64]) -> NDArray[np.float64]:
    """Draw the maps of the 1/f sources: dipoles anywhere in the upper head.

    Parameters
    ----------
    rng : numpy Generator
        Source of everything drawn here.
    sites : array, shape (n_sites, 3)
        Unit vectors.

    Returns
    -------
    array, shape (n_patches, n_sites)
        Scaled so that sources of unit variance give the cap the variance `ACTIVITY_V` squared on average.
    """
    places = rng.standard_normal((N_PATCHES, 3))
    places[:, 2] = np.abs(places[:, 2])
    places *= (rng.uniform(0.45, 0.75, N_PATCHES) / np.linalg.norm(places, axis=1))[:, None]
    moments = rng.standard_normal((N_PATCHES, 3))
    maps = np.stack([dipole_map(sites, place, moment) for place, moment in zip(places, moments, strict=True)])
    return np.asarray(maps * (ACTIVITY_V / np.sqrt((maps**2).sum(axis=0).mean())))


def alpha_maps(sites: NDArray[np.float64]) -> NDArray[np.float64]:
    """Make the maps of left and right occipital alpha, shape (2, n_sites)."""
    return np.stack(
        [
            dipole_map(sites, np.array([x, -0.5, 0.08]), np.array([0.4 * np.sign(x), -0.85, 0.15]))
            for x in (-0.25, 0.25)
        ]
    )


def activity_filter(rate_hz: float) -> NDArray[np.float64]:
    """Sections that turn white noise of unit variance into 1/f noise of unit variance between 1 and 100 Hz.

    Poles stand two octaves apart; a zero after each makes the average slope.

    Parameters
    ----------
    rate_hz : float
        Sampling rate of the recording.

    Returns
    -------
    array, shape (n_sections, 6)
    """
    poles_hz = SLOWEST_HZ * 4.0 ** np.arange(20)
    poles_hz = poles_hz[poles_hz < min(FASTEST_HZ, 0.2 * rate_hz)]
    zeros_hz = poles_hz * 4.0 ** (EXPONENT / 2)
    poles, zeros = (np.exp(-2 * np.pi * hz / rate_hz) for hz in (poles_hz, zeros_hz))
    sections = np.asarray(signal.zpk2sos(zeros, poles, 1.0))
    band_hz = np.linspace(1.0, 100.0, 4000)
    gain = np.abs(signal.freqz_sos(sections, band_hz, fs=rate_hz)[1])
    # White noise of unit variance has the one-sided density 2 / rate.
    variance = float(np.mean(gain**2)) * 99.0 * 2.0 / rate_hz
    sections[0, :3] /= np.sqrt(variance)
    return np.concatenate([sections, amplifier(rate_hz)])


class Noise:
    """White noise through a filter, drawn in order, the same in whatever pieces the filter is run.

    Parameters
    ----------
    rng : numpy Generator
        Source of everything drawn here.
    n : int
        Number of independent rows.
    sections : array, shape (n_sections, 6)
    """

    def __init__(self, rng: np.random.Generator, n: int, sections: NDArray[np.float64]) -> None:
        self._rng = rng
        self._sections = sections
        self._n = n
        self._state = np.zeros((len(sections), n, 2))

    def draw(self, n_samples: int) -> NDArray[np.float64]:
        """Return the next samples, shape (n, n_samples)."""
        white = self._rng.standard_normal((self._n, n_samples))
        passed, self._state = signal.sosfilt(self._sections, white, axis=1, zi=self._state)
        return np.asarray(passed)
