"""Filter taps: published figures, the points the plan promises, and what the anti-alias filter lets pass."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest
from scipy import signal as ss

from pulsemend.signal import design
from pulsemend.signal.apply_fir import FftFilter, banded, rate_ratio


def decibels(x: float | np.floating) -> float:
    return float(20.0 * np.log10(x))


def test_hamming_figures() -> None:
    """Facts T-2.18; Widmann, Schroeger, Maess (2015), doi:10.1016/j.jneumeth.2014.08.002."""
    taps = design.lowpass(500.0, 40.0, 2.0)
    assert taps.size == 827
    assert design.gain(taps, np.array([40.0]), 500.0)[0] == pytest.approx(0.5, abs=0.001)
    stop = np.abs(design.gain(taps, np.linspace(41.0, 250.0, 4000), 500.0)).max()
    assert decibels(stop) == pytest.approx(-53.0, abs=1.0)
    ripple = np.abs(design.gain(taps, np.linspace(0.0, 39.0, 2000), 500.0) - 1.0).max()
    assert ripple == pytest.approx(0.0022, abs=0.0003)


@pytest.mark.parametrize("cutoff_hz", [0.1, 0.5, 1.0, 3.0])
def test_highpass_promises(cutoff_hz: float) -> None:
    """Design 4.2: -6 dB at the cutoff, transition as wide as the cutoff (0.2 to 2 Hz); nothing at 0 Hz."""
    width = design.highpass_transition_hz(cutoff_hz)
    assert width == min(max(cutoff_hz, 0.2), 2.0)
    taps = design.highpass(1000.0, cutoff_hz, width)
    at = np.array([0.0, cutoff_hz, cutoff_hz + 0.5 * width])
    gain = design.gain(taps, at, 1000.0)
    assert abs(gain[0]) < 1e-12
    assert gain[1] == pytest.approx(0.5, abs=0.005)
    assert gain[2] == pytest.approx(1.0, abs=0.004)


@pytest.mark.parametrize("cutoff_hz", [4.0, 40.0, 100.0, 400.0])
def test_lowpass_promises(cutoff_hz: float) -> None:
    """Design 4.2: -6 dB at the cutoff, transition a quarter of it, at least 2 Hz."""
    width = design.lowpass_transition_hz(cutoff_hz)
    assert width == max(cutoff_hz / 4, 2.0)
    taps = design.lowpass(1000.0, cutoff_hz, width)
    gain = design.gain(taps, np.array([0.0, cutoff_hz - width / 2, cutoff_hz, cutoff_hz + width / 2]), 1000.0)
    assert gain[0] == pytest.approx(1.0, abs=1e-12)
    assert gain[1] == pytest.approx(1.0, abs=0.004)
    assert gain[2] == pytest.approx(0.5, abs=0.005)
    assert abs(gain[3]) < 0.004


def test_butterworth_both_ways_is_why_windows_are_used() -> None:
    """Facts T-2.19: -6.0206 dB at the design cutoff when run both ways; ours states -6 dB."""
    sos = ss.butter(4, 40.0, fs=500.0, output="sos")
    _, h = ss.sosfreqz(sos, worN=[40.0], fs=500.0)
    assert decibels(np.abs(h[0]) ** 2) == pytest.approx(-6.0206, abs=0.001)
    ours = design.gain(design.lowpass(500.0, 40.0, 2.0), np.array([40.0]), 500.0)[0]
    assert decibels(ours) == pytest.approx(-6.0206, abs=0.02)


def test_zero_phase_keeps_the_peak() -> None:
    """Facts T-2.20: a symmetric pulse keeps its peak sample."""
    x = np.zeros((1, 20_000), np.float64)
    x[0] = np.exp(-0.5 * ((np.arange(20_000) - 9000) / 12.0) ** 2)
    bank = design.in_series([design.highpass(1000.0, 1.0, 1.0), design.lowpass(1000.0, 100.0, 25.0)])
    run = FftFilter(bank, np.float64)
    y = run.run(np.pad(x, ((0, 0), (run.margin, run.block)))[:, : run.block + 2 * run.margin])
    assert int(np.argmax(y[0])) == 9000
    np.testing.assert_allclose(y[0, 8900:9000], y[0, 9100:9000:-1], atol=1e-12)


@pytest.mark.parametrize(
    ("recorded_hz", "rate_hz", "lowpass_hz"),
    [
        (5000.0, 1000.0, 100.0),
        (5000.0, 1000.0, 400.0),
        (4800.0, 1000.0, 100.0),
        (25_000.0, 1000.0, 250.0),
        (2048.0, 512.0, 40.0),
    ],
)
def test_what_folds_is_eighty_decibels_down(recorded_hz: float, rate_hz: float, lowpass_hz: float) -> None:
    """Own bound: whatever folds into 0 to the low-pass at least 80 dB down, ripple there below 0.1 dB.

    Facts T-2.21 (a tone at 0.9 of the old half rate down more than 40 dB) follows.
    """
    ratio = rate_ratio(recorded_hz, rate_hz)
    assert ratio is not None
    top = lowpass_hz + design.lowpass_transition_hz(lowpass_hz) / 2
    taps = design.antialias(recorded_hz * ratio.numerator, top, rate_hz - top)
    step = banded(taps, ratio, np.float64)
    # Gains of every phase, from the rows of the matrix itself.
    at = np.arange(step.matrix.shape[1]) - step.margin
    for row in range(step.block):
        f_in = np.linspace(0.0, lowpass_hz, 200)
        centre = row * float(1 / ratio)
        passed = np.exp(-2j * np.pi * np.outer(f_in / recorded_hz, at - centre)) @ step.matrix[row]
        assert np.abs(20 * np.log10(np.abs(passed))).max() < 0.1
        assert np.abs(np.angle(passed)).max() < 1e-4
        worst = 0.0
        for k in range(1, int(recorded_hz / 2 / rate_hz) + 2):
            for folded in (k * rate_hz - f_in, k * rate_hz + f_in):
                inside = folded[folded <= recorded_hz / 2]
                if inside.size:
                    h = np.exp(-2j * np.pi * np.outer(inside / recorded_hz, at - centre)) @ step.matrix[row]
                    worst = max(worst, float(np.abs(h).max()))
        assert worst == 0.0 or decibels(worst) < -80.0


def test_notch_removes_the_line_and_keeps_the_rest() -> None:
    lines = design.harmonics(50.0, 112.5, 1000.0)
    assert lines == [50.0, 100.0]
    assert design.harmonics(50.0, 500.0, 1000.0)[-1] == 450.0
    assert design.harmonics(0.0, 100.0, 1000.0) == []
    taps = design.notch(1000.0, lines)
    gain = design.gain(taps, np.array([0.0, 10.0, 48.0, 49.0, 50.0, 51.0, 52.0, 75.0, 100.0]), 1000.0)
    np.testing.assert_allclose(gain[[0, 1, 2, 6, 7]], 1.0, atol=0.005)
    np.testing.assert_allclose(gain[[3, 5]], 0.5, atol=0.01)
    np.testing.assert_allclose(gain[[4, 8]], 0.0, atol=0.005)


@pytest.mark.parametrize("part", [-0.5, -0.2, 0.1, 0.4, 0.5])
def test_fractional_delay_reads_between_samples(part: float) -> None:
    """A delay of part of a sample, against the exact one: error below 1e-4 up to 0.42 of the rate."""
    taps = design.fractional_delay(part)
    f = np.linspace(0.0, 0.42, 500)
    h = np.exp(2j * np.pi * np.outer(f, np.arange(-32, 33))) @ taps
    assert np.abs(h - np.exp(2j * np.pi * f * part)).max() < 1e-4


def test_rate_ratio_is_exact_or_none() -> None:
    assert rate_ratio(5000.0, 1000.0) == Fraction(1, 5)
    assert rate_ratio(4800.0, 1000.0) == Fraction(5, 24)
    assert rate_ratio(2048.0, 1000.0) == Fraction(125, 256)
    assert rate_ratio(1000.0, 1000.0) == 1
    assert rate_ratio(5000.0, np.pi * 300) is None


@pytest.mark.parametrize("ratio", [Fraction(1, 5), Fraction(5, 24), Fraction(125, 256)])
def test_banded_product_equals_polyphase(ratio: Fraction) -> None:
    """Against scipy.signal.resample_poly with the same taps."""
    rng = np.random.default_rng(1)
    x = rng.standard_normal((4096, 3))
    recorded = 1000.0 / float(ratio)
    taps = design.antialias(recorded * ratio.numerator, 112.5, 887.5)
    step = banded(taps, ratio, np.float64)
    expected = ss.resample_poly(x, ratio.numerator, ratio.denominator, axis=0, window=taps)  # type: ignore[call-overload]
    blocks = 3
    lo, hi = step.span(1, blocks)
    assert lo >= 0
    y = step.run(np.ascontiguousarray(x[lo:hi]), blocks)
    np.testing.assert_allclose(y, expected[step.block : step.block * (1 + blocks)], atol=2e-4)
