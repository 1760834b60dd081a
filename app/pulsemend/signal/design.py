"""Zero-phase FIR filters: their taps, and nothing else.

All filters here are symmetric, of odd length, and centred: tap ``half`` belongs to the present sample.
scipy.signal takes half a second to load; it is imported where it is used, so that a window opens without it.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

HAMMING_FACTOR = 3.3
"""Order = factor x rate / transition width, for a Hamming window (Widmann et al. 2015)."""

Taps = NDArray[np.float64]


def highpass_transition_hz(cutoff_hz: float) -> float:
    """Width of a high-pass's transition: its cutoff, within 0.2 to 2 Hz (plan contract)."""
    return float(min(max(cutoff_hz, 0.2), 2.0))


def lowpass_transition_hz(cutoff_hz: float) -> float:
    """Width of a low-pass's transition: a quarter of its cutoff, at least 2 Hz (plan contract)."""
    return float(max(0.25 * cutoff_hz, 2.0))


def hamming_length(rate_hz: float, transition_hz: float) -> int:
    """Give the number of taps, odd: the order rounded up to an even number, plus one.

    References
    ----------
    Widmann A, Schroeger E, Maess B (2015) Digital filter design for electrophysiological data.
    J Neurosci Methods 250:34-46. doi:10.1016/j.jneumeth.2014.08.002
    """
    order = int(np.ceil(HAMMING_FACTOR * rate_hz / transition_hz - 1e-9))
    return order + order % 2 + 1


def lowpass(rate_hz: float, cutoff_hz: float, transition_hz: float) -> Taps:
    """Hamming-windowed low-pass; gain 1 at 0 Hz and -6 dB at the cutoff."""
    import scipy.signal as ss

    return ss.firwin(hamming_length(rate_hz, transition_hz), cutoff_hz, window="hamming", fs=rate_hz)


def highpass(rate_hz: float, cutoff_hz: float, transition_hz: float) -> Taps:
    """Hamming-windowed high-pass, -6 dB at the cutoff; one minus a low-pass, so exactly 0 at 0 Hz."""
    taps = -lowpass(rate_hz, cutoff_hz, transition_hz)
    taps[taps.size // 2] += 1.0
    return taps


def notch(rate_hz: float, lines_hz: Sequence[float], *, half_width_hz: float = 1.0) -> Taps:
    """Band-stop around each line; -6 dB at line +- half width, transition one half width wide.

    Lines must lie at least two half widths apart, from 0 and from half the rate.
    """
    import scipy.signal as ss

    edges = [edge for line in sorted(lines_hz) for edge in (line - half_width_hz, line + half_width_hz)]
    return ss.firwin(
        hamming_length(rate_hz, half_width_hz), edges, window="hamming", pass_zero=True, fs=rate_hz
    )


def harmonics(line_hz: float, up_to_hz: float, rate_hz: float) -> list[float]:
    """List the line and its harmonics that a band-stop can and need reach."""
    if line_hz <= 0.0:
        return []
    top = min(up_to_hz, 0.5 * rate_hz - 2.0)
    return [line_hz * n for n in range(1, int(top / line_hz + 1e-9) + 1)]


def antialias(rate_hz: float, pass_hz: float, stop_hz: float, *, attenuation_db: float = 90.0) -> Taps:
    """Kaiser-windowed low-pass, flat up to `pass_hz` and `attenuation_db` down from `stop_hz` on.

    ``rate_hz`` is the rate the taps run at: recorded rate x the ratio's numerator.
    """
    import scipy.signal as ss

    length, beta = ss.kaiserord(attenuation_db, (stop_hz - pass_hz) / (0.5 * rate_hz))
    taps = ss.firwin(length | 1, 0.5 * (pass_hz + stop_hz), window=("kaiser", beta), fs=rate_hz)
    return np.asarray(taps / taps.sum())


def in_series(filters: Sequence[Taps]) -> Taps:
    """One filter that does what all do one after the other; a single 1 if there are none."""
    taps = np.ones(1)
    for one in filters:
        taps = np.convolve(taps, one)
    return taps


def fractional_delay(fraction: float, half: int = 32) -> Taps:
    """Taps that read a signal `fraction` of a sample after each sample.

    Kaiser-windowed sinc of 2 x `half` + 1 taps, gain 1 at 0 Hz: ``y[k] = sum_j taps[half + j] x[k + j]``
    is the signal at ``k + fraction``. For |fraction| <= 0.5 its error is below 1e-4 up to 0.42 of the rate.
    """
    at = np.arange(-half, half + 1) - fraction
    window = np.i0(9.0 * np.sqrt(np.maximum(0.0, 1.0 - (at / (half + 1)) ** 2)))
    taps = np.sinc(at) * window
    return np.asarray(taps / taps.sum())


def gain(taps: Taps, frequencies_hz: NDArray[np.float64], rate_hz: float) -> NDArray[np.float64]:
    """Real gain of centred symmetric taps at the given frequencies."""
    half = taps.size // 2
    phase = 2.0 * np.pi * np.outer(frequencies_hz / rate_hz, np.arange(1, half + 1))
    return np.asarray(taps[half] + 2.0 * np.cos(phase) @ taps[half + 1 :])
