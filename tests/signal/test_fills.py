"""What every fill does with known signals, with missing flanks and with the samples it must not read."""

from __future__ import annotations

from typing import Any

import mne
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy import signal as ss

from pulsemend.signal import fills
from pulsemend.signal.fills import (
    FILL_KINDS,
    SIDES,
    FillConfig,
    Filler,
    default_flank_s,
    flank_samples,
    lags_needed,
)
from pulsemend.signal.gaps import Gap, lay_gaps, window_to_samples

FloatArray = NDArray[np.float64]
Samples = NDArray[Any]

N_CHANNELS = 3
RATE_HZ = 1000.0
GAP = window_to_samples(500, (-0.002, 0.015), RATE_HZ)
# A smooth process with a rhythm, different in each channel.
AUTOCOVARIANCE = np.array(
    [np.exp(-np.arange(150) / tau) * (1 + 0.3 * np.cos(np.arange(150) / 16)) for tau in (30.0, 50.0, 90.0)]
)

kinds = pytest.mark.parametrize("kind", FILL_KINDS)
sides = pytest.mark.parametrize("side", SIDES)


def config(kind: str, side: str = "both", flank: int | None = None) -> FillConfig:
    n_flank = flank or flank_samples(default_flank_s(kind), RATE_HZ)
    return FillConfig(kind, side, n_flank, RATE_HZ, AUTOCOVARIANCE if kind == "covariance" else None)


def filled(x: FloatArray, kind: str, flank: int | None = None) -> FloatArray:
    """One channel with its gap repaired; the samples that were there are hidden from the fill."""
    y = np.repeat(x[:, None], N_CHANNELS, axis=1)
    y[slice(*GAP)] = np.nan
    settings_of_fill = config(kind, flank=flank)
    gap = Gap(*GAP, settings_of_fill.flank, settings_of_fill.flank)
    Filler(settings_of_fill, N_CHANNELS, np.float64).fill(y, 0, gap)
    return y[:, 0]


def noise(seed: int, n_samples: int = 1000, dtype: type = np.float64) -> Samples:
    rng = np.random.default_rng(seed)
    steps = rng.standard_normal((n_samples, N_CHANNELS))
    return np.asarray(ss.lfilter([1.0], [1.0, -0.97], steps, axis=0)).astype(dtype)


def test_line_is_reproduced_by_line() -> None:
    # facts T-1.2
    line = 3.0 + 0.25 * np.arange(1000.0)
    np.testing.assert_allclose(filled(line, "line"), line, rtol=1e-9)
    np.testing.assert_allclose(filled(line, "line", flank=10), line, rtol=1e-9)


def test_cubic_is_reproduced_by_cubic() -> None:
    # facts T-1.2
    t = np.arange(1000) / RATE_HZ
    cubic = 5.0 + 2.0 * t - 30.0 * t**2 + 18.0 * t**3
    np.testing.assert_allclose(filled(cubic, "cubic"), cubic, rtol=0, atol=1e-9 * np.abs(cubic).max())


@kinds
@sides
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@given(
    value=st.floats(-1.0, 1.0, width=32),
    left=st.integers(0, 60),
    right=st.integers(0, 60),
    size=st.integers(1, 40),
)
@settings(max_examples=20, deadline=None)
def test_constants_come_back_exactly(
    kind: str, side: str, dtype: type, value: float, left: int, right: int, size: int
) -> None:
    # facts T-1.2
    x: Samples = np.full((left + size + right, N_CHANNELS), value, dtype)
    x[left : left + size] = np.nan
    Filler(config(kind, side), N_CHANNELS, dtype).fill(
        x, 100, Gap(100 + left, 100 + left + size, left, right)
    )
    good = (left and side != "after") or (right and side != "before")
    np.testing.assert_array_equal(x[left : left + size], dtype(value) if good else dtype(0))


@pytest.mark.parametrize(
    ("kind", "flank", "error"),
    # facts T-1.3; the monotone figure is that of single samples as knots, so of flanks of two.
    [
        ("line", 1, 0.12596),
        ("cubic", 5, 0.00795),
        ("cubic", 10, 0.01737),
        ("cubic", 20, 0.05732),
        ("cubic", 50, 0.4519),
        ("monotone", 2, 0.03043),
    ],
)
def test_sine_of_10_hz(kind: str, flank: int, error: float) -> None:
    sine = np.sin(2 * np.pi * 10 * (np.arange(1000) - 500) / RATE_HZ + 0.4)
    assert np.abs(filled(sine, kind, flank) - sine).max() == pytest.approx(error, rel=0.02)


def test_long_flanks_make_a_cubic_worse_than_a_line() -> None:
    # facts T-1.3, its lesson
    sine = np.sin(2 * np.pi * 10 * (np.arange(1000) - 500) / RATE_HZ + 0.4)
    errors = [np.abs(filled(sine, kind, flank) - sine).max() for kind, flank in (("cubic", 50), ("line", 1))]
    assert errors[0] > errors[1]


def test_autoregressive_continues_a_rhythm() -> None:
    sine = np.sin(2 * np.pi * 10 * np.arange(1000) / RATE_HZ + 0.4)
    np.testing.assert_allclose(filled(sine, "autoregressive"), sine, rtol=0, atol=1e-3)


def test_line_equals_the_reader_librarys_own() -> None:
    # outside reference: mne.preprocessing.fix_stim_artifact, which keeps the first sample of its window
    x = noise(3, 4000)
    rate_hz, onsets = 5000.0, (1000, 2500)
    raw = mne.io.RawArray(x.T.copy(), mne.create_info(N_CHANNELS, rate_hz, "eeg"), verbose="error")
    events = np.array([[onset, 0, 1] for onset in onsets])
    mne.preprocessing.fix_stim_artifact(raw, events, 1, tmin=-0.0022, tmax=0.0152, mode="linear", picks="eeg")
    spans = [window_to_samples(onset, (-0.002, 0.015), rate_hz) for onset in onsets]
    mended = x.copy()
    filler = Filler(FillConfig("line", "both", 1, rate_hz), N_CHANNELS, np.float64)
    for gap in lay_gaps(spans, 1, 0, len(x)):
        filler.fill(mended, 0, gap)
    assert np.count_nonzero((mended != x).any(axis=1)) == 2 * 86
    np.testing.assert_allclose(mended, raw.get_data().T, rtol=0, atol=1e-12)


def test_repair_before_the_filter_leaves_nothing() -> None:
    # facts T-1.5
    x = np.zeros(10_000)
    x[5000] = 1e-3
    band = ss.butter(4, [1.0, 80.0], "band", fs=RATE_HZ, output="sos")
    ms = np.arange(10_000) - 5000
    smeared = np.abs(ss.sosfiltfilt(band, x))
    assert smeared[(ms < -2) | (ms > 15)].max() == pytest.approx(98.5e-6, abs=0.1e-6)
    assert ms[smeared > 1e-6].max() == 284
    mended = x[:, None].copy()
    gap = Gap(*window_to_samples(5000, (-0.002, 0.015), RATE_HZ), 1, 1)
    Filler(FillConfig("line", "both", 1, RATE_HZ), 1, np.float64).fill(mended, 0, gap)
    assert np.abs(ss.sosfiltfilt(band, mended[:, 0])).max() < 1e-9 * 1e-3


spans_of_samples = st.lists(
    st.tuples(st.integers(0, 390), st.integers(1, 30)).map(lambda span: (span[0], span[0] + span[1])),
    min_size=1,
    max_size=5,
)


@kinds
@sides
@given(spans=spans_of_samples, barriers=spans_of_samples, seed=st.integers(0, 99))
@settings(max_examples=15, deadline=None)
def test_no_replaced_or_bad_sample_is_read_and_no_other_is_touched(
    kind: str, side: str, spans: list[tuple[int, int]], barriers: list[tuple[int, int]], seed: int
) -> None:
    lo, hi = 10, 390
    x = noise(seed, 400)
    x[:lo] = x[hi:] = np.nan
    for start, stop in [*barriers, *spans]:
        x[start:stop] = np.nan
    before = x.copy()
    use = config(kind, side)
    gaps = lay_gaps(spans, use.flank, lo, hi, barriers)
    filler = Filler(use, N_CHANNELS, np.float64)
    untouched = np.ones(400, bool)
    # Backwards and each from the signal as it was: what an earlier repair wrote is not read either.
    for gap in gaps[::-1]:
        piece = before.copy()
        filler.fill(piece, 0, gap)
        assert np.isfinite(piece[gap.start : gap.stop]).all()
        x[gap.start : gap.stop] = piece[gap.start : gap.stop]
        untouched[gap.start : gap.stop] = False
        again = x.copy()
        filler.fill(again, 0, gap)
        np.testing.assert_array_equal(again[gap.start : gap.stop], piece[gap.start : gap.stop])
    np.testing.assert_array_equal(x[untouched], before[untouched])


@kinds
@pytest.mark.parametrize("dtype", [np.float32, np.float64])
@given(cut=st.tuples(st.integers(0, 250), st.integers(0, 250)), extra=st.integers(0, 5))
@settings(max_examples=10, deadline=None)
def test_result_does_not_depend_on_how_the_stream_is_cut(
    kind: str, dtype: type, cut: tuple[int, int], extra: int
) -> None:
    whole = noise(7, 1000, dtype)
    use = config(kind)
    gap = Gap(480, 497, use.flank, use.flank)
    mended = whole.copy()
    Filler(use, N_CHANNELS, dtype).fill(mended, 0, gap)
    first, last = max(0, gap.start - use.flank - cut[0]), min(1000, gap.stop + use.flank + cut[1])
    piece = whole[first:last].copy()
    busy = Filler(use, N_CHANNELS, dtype)
    for before in range(extra):  # a filler that has seen other gaps
        busy.fill(piece.copy(), first, Gap(gap.start, gap.stop - 1 - before, use.flank, use.flank))
    busy.fill(piece, first, gap)
    np.testing.assert_array_equal(piece, mended[first:last])


@kinds
def test_some_columns_are_filled_as_if_they_were_alone(kind: str) -> None:
    x = noise(4)
    use = config(kind)
    gap = Gap(*GAP, use.flank, use.flank)
    alone = x.copy()
    Filler(use, N_CHANNELS, np.float64).fill(alone, 0, gap)
    columns = np.array([2, 0])
    rows = AUTOCOVARIANCE[columns] if kind == "covariance" else None
    some = x.copy()
    of_some = FillConfig(kind, "both", use.flank, RATE_HZ, rows)
    Filler(of_some, N_CHANNELS, np.float64, columns).fill(some, 0, gap)
    np.testing.assert_array_equal(some[:, 1], x[:, 1])
    np.testing.assert_allclose(some[:, columns], alone[:, columns], rtol=0, atol=1e-12)


@kinds
def test_single_precision_stays_near_double(kind: str) -> None:
    # 30 uV of signal on an offset of 1 mV: 1e-3 uV apart at most, besides the rounding of the input itself.
    x = (noise(8) * 10e-6 + 1e-3).astype(np.float32)
    use = config(kind)
    gap = Gap(*GAP, use.flank, use.flank)
    single, double = x.copy(), x.astype(np.float64)
    Filler(use, N_CHANNELS, np.float32).fill(single, 0, gap)
    Filler(use, N_CHANNELS, np.float64).fill(double, 0, gap)
    np.testing.assert_allclose(single, double, rtol=0, atol=1e-9)


@pytest.mark.parametrize(("side", "sample"), [("before", GAP[0] - 1), ("after", GAP[1])])
@pytest.mark.parametrize("kind", ["cubic", "monotone"])
def test_one_sided_polynomials_hold_the_nearest_sample(kind: str, side: str, sample: int) -> None:
    x = noise(5)
    mended = x.copy()
    use = config(kind, side)
    Filler(use, N_CHANNELS, np.float64).fill(mended, 0, Gap(*GAP, use.flank, use.flank))
    np.testing.assert_array_equal(mended[slice(*GAP)], np.broadcast_to(x[sample], (18, N_CHANNELS)))


@pytest.mark.parametrize(("side", "flank"), [("before", slice(488, 498)), ("after", slice(516, 526))])
def test_one_sided_line_is_the_mean_of_its_flank(side: str, flank: slice) -> None:
    x = noise(6)
    mended = x.copy()
    Filler(config("line", side, flank=10), N_CHANNELS, np.float64).fill(mended, 0, Gap(*GAP, 10, 10))
    np.testing.assert_allclose(mended[500], x[flank].mean(axis=0), rtol=0, atol=1e-12)


@pytest.mark.parametrize("kind", ["autoregressive", "covariance"])
def test_one_sided_predictions_do_not_look_across(kind: str) -> None:
    x = noise(9)
    other = x.copy()
    other[GAP[1] :] += 50.0
    use = config(kind, "before")
    for y in (x, other):
        Filler(use, N_CHANNELS, np.float64).fill(y, 0, Gap(*GAP, use.flank, use.flank))
    np.testing.assert_array_equal(x[slice(*GAP)], other[slice(*GAP)])


def test_no_flank_at_all_gives_zeros() -> None:
    for kind in FILL_KINDS:
        x = noise(1)
        Filler(config(kind), N_CHANNELS, np.float64).fill(x, 0, Gap(400, 420, 0, 0))
        assert not x[400:420].any()
        assert x[399].all()


@kinds
def test_flanks_beyond_the_array_are_refused(kind: str) -> None:
    with pytest.raises(ValueError, match="not within"):
        Filler(config(kind), N_CHANNELS, np.float64).fill(noise(1, 100), 1000, Gap(1000, 1010, 1, 5))
    with pytest.raises(ValueError, match="not within"):
        Filler(config(kind), N_CHANNELS, np.float64).fill(noise(1, 100), 1000, Gap(1090, 1100, 5, 1))


def test_impossible_settings_are_refused() -> None:
    with pytest.raises(ValueError, match="kind"):
        FillConfig("spline", "both", 1, RATE_HZ)
    with pytest.raises(ValueError, match="side"):
        FillConfig("line", "left", 1, RATE_HZ)
    with pytest.raises(ValueError, match="flank"):
        FillConfig("line", "both", 0, RATE_HZ)
    with pytest.raises(ValueError, match="autocovariance"):
        FillConfig("covariance", "both", 50, RATE_HZ)
    with pytest.raises(ValueError, match="rows"):
        Filler(config("covariance"), N_CHANNELS + 1, np.float64)


def test_gap_longer_than_the_known_lags_becomes_a_line() -> None:
    x = noise(2)
    mended = x.copy()
    Filler(config("covariance"), N_CHANNELS, np.float64).fill(mended, 0, Gap(400, 600, 50, 50))
    line = x[399] + (x[600] - x[399]) * (np.arange(1, 201) / 201.0)[:, None]
    np.testing.assert_allclose(mended[400:600], line, rtol=0, atol=1e-12)


def test_weights_held_stay_within_their_limit(monkeypatch: pytest.MonkeyPatch) -> None:
    limit = 200_000
    monkeypatch.setattr(fills, "WEIGHT_BYTES", limit)
    n_channels = 40
    rows = np.repeat(AUTOCOVARIANCE[:1], n_channels, axis=0)
    filler = Filler(FillConfig("covariance", "both", 50, RATE_HZ, rows), n_channels, np.float32)
    x = np.repeat(noise(3)[:, :1], n_channels, axis=1).astype(np.float32)
    first = x.copy()
    filler.fill(first, 0, Gap(500, 517, 50, 50))
    assert 0 < filler.held_bytes <= limit
    # One gap alone would need 40 x 17 x 100 x 4 bytes: its knots were thinned.
    assert limit < 40 * 17 * 100 * 4
    for left in range(1, 12):
        filler.fill(x.copy(), 0, Gap(500, 505, left, left))
        assert filler.held_bytes <= limit
    again = x.copy()
    filler.fill(again, 0, Gap(500, 517, 50, 50))
    np.testing.assert_array_equal(again, first)


def test_default_flanks() -> None:
    # design 4.2
    at_5_khz = {kind: flank_samples(default_flank_s(kind), 5000.0) for kind in FILL_KINDS}
    assert at_5_khz == {"line": 1, "cubic": 50, "monotone": 25, "autoregressive": 1000, "covariance": 250}
    with pytest.raises(ValueError, match="kind"):
        default_flank_s("leave")
    assert lags_needed(18, 50) == 118
