"""The chain against an independent one, and against itself cut in every way."""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pytest

from pulsemend.engine import chain as chain_module
from pulsemend.engine.fit import fit
from pulsemend.engine.setup import bind
from pulsemend.model.marks import BadStretch, Marks, MovedPulse
from pulsemend.model.plan import Filter, OtherGap, Pulses
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fill, Precision, PulseState
from pulsemend.progress import finish
from pulsemend.signal.gaps import window_to_samples
from pulsemend.units import v_to_uv
from support.engine_cases import (
    NO_PULSES,
    STEP_V,
    UNTOUCHED,
    ArrayRecording,
    coloured,
    make_chain,
    plan,
    read_epoch,
    with_pulses,
)
from support.whole_array import chain as whole_array_chain

RATE_HZ = 5000
N_SAMPLES = 60_000
ONSETS = [7003, 15_001, 20_480, 31_999, 32_105, 44_444, 52_001]
SPANS = [window_to_samples(onset, (-0.002, 0.014), RATE_HZ) for onset in ONSETS]
FILLS = [Fill.LINE, Fill.CUBIC, Fill.MONOTONE, Fill.AUTOREGRESSIVE, Fill.COVARIANCE]


@pytest.fixture(scope="module")
def recording() -> ArrayRecording:
    return with_pulses(coloured(6, N_SAMPLES, RATE_HZ, seed=11), RATE_HZ, ONSETS)


@pytest.mark.parametrize("line_hz", [0.0, 50.0])
@pytest.mark.parametrize("precision", list(Precision))
def test_equals_whole_array_reference(
    recording: ArrayRecording, precision: Precision, line_hz: float
) -> None:
    """Own bound of the design: single precision within 1e-3 uV of a float64 reference."""
    chain = make_chain(recording, plan(precision=precision, line_hz=line_hz))
    setup = chain.setup
    for anchor in (5000, 25_001, 32_102, 40_003, 33_334):
        reference = whole_array_chain(
            recording.stored * STEP_V, SPANS, setup.antialias, setup.band, 5, phase=anchor
        )
        epoch = read_epoch(chain, anchor, -0.3, 1000)
        first = anchor // 5 - 300
        error_uv = v_to_uv(np.abs(epoch.data - reference[:, first : first + 1000]).max())
        # On the grid, double precision is exact; between two output samples the delay filter's error remains.
        bound_uv = 1e-3 if precision is Precision.SINGLE or anchor % 5 else 1e-9
        assert error_uv < bound_uv, (anchor, error_uv)
        assert v_to_uv(reference[:, first : first + 1000].std()) > 1.0


def test_equals_reference_at_both_ends(recording: ArrayRecording) -> None:
    chain = make_chain(recording, plan(precision=Precision.DOUBLE))
    setup = chain.setup
    reference = whole_array_chain(recording.stored * STEP_V, SPANS, setup.antialias, setup.band, 5, phase=0)
    whole = chain.stretch(0, 0, N_SAMPLES // 5)
    assert whole.shape == reference.shape
    assert v_to_uv(np.abs(whole - reference).max()) < 1e-9


@pytest.mark.parametrize("fill", FILLS)
def test_any_cut_gives_the_same_bits(recording: ArrayRecording, fill: Fill) -> None:
    """Whole, single samples, primes, random cuts and a cut on a pulse: equal to the last bit."""
    the_plan = plan(pulses=Pulses(window_ms=(-2.0, 14.0), fill=fill))
    whole = make_chain(recording, the_plan).stretch(0, 0, N_SAMPLES // 5)
    rng = np.random.default_rng(3)
    cuts = [*range(3990, 4010), 4096 + 1, 6401, 6421, *rng.integers(0, N_SAMPLES // 5, 20).tolist()]
    edges = sorted({0, N_SAMPLES // 5, *cuts, *range(0, N_SAMPLES // 5, 1999)})
    chain = make_chain(recording, the_plan)
    order = rng.permutation(len(edges) - 1)
    pieces = {int(i): chain.stretch(0, edges[i], edges[i + 1]) for i in order}
    joined = np.concatenate([pieces[i] for i in range(len(edges) - 1)], axis=1)
    np.testing.assert_array_equal(joined, whole)


@pytest.mark.parametrize("block", [64, 997 * 5, 1_000_000])
def test_block_size_changes_rounding_only(
    recording: ArrayRecording, monkeypatch: pytest.MonkeyPatch, block: int
) -> None:
    """The stated tolerance for other block sizes: 1e-9 uV in double precision."""
    the_plan = plan(precision=Precision.DOUBLE, pulses=Pulses(window_ms=(-2.0, 14.0), fill=Fill.CUBIC))
    usual = make_chain(recording, the_plan).stretch(0, 0, N_SAMPLES // 5)
    monkeypatch.setattr(chain_module, "BLOCK_SAMPLES", block)
    other = make_chain(recording, the_plan).stretch(0, 0, N_SAMPLES // 5)
    assert v_to_uv(np.abs(other - usual).max()) < 1e-9


def test_preview_equals_export(recording: ArrayRecording) -> None:
    """Random stretches, also within a filter length of gaps and ends, out of order."""
    the_plan = plan(pulses=Pulses(window_ms=(-2.0, 14.0), fill=Fill.COVARIANCE))
    export, preview = make_chain(recording, the_plan), make_chain(recording, the_plan)
    rng = np.random.default_rng(5)
    anchors = [0, 5, 6999 // 5 * 5, 15_000, 32_100, N_SAMPLES - 500, *(5 * rng.integers(0, 11_900, 30))]
    for anchor in sorted(anchors):
        written = read_epoch(export, float(anchor), 0.0, 100).data
        first = int(anchor) // 5
        lo = max(0, first - int(rng.integers(0, 700)))
        shown = preview.stretch(0, lo, min(N_SAMPLES // 5, first + 300))
        np.testing.assert_array_equal(shown[:, first - lo : first - lo + 100], written)


@pytest.mark.parametrize("rate_hz", [5000, 4800, 2048])
def test_anchor_is_time_zero_to_ten_microseconds(rate_hz: int) -> None:
    """A tone's phase at time zero equals that at its anchor, for anchors between two output samples.

    Design 3: within 2 pi f x 10 microseconds from 1 Hz to 0.4 of the output rate.
    """
    n = 12 * rate_hz
    out_hz = {5000: 1000.0, 4800: 1000.0, 2048: 512.0}[rate_hz]
    tones_hz = np.array([1.0, 37.0, 0.1 * out_hz, 0.25 * out_hz, 0.4 * out_hz])
    t = np.arange(n) / rate_hz
    stored = np.round(1e6 * np.cos(2 * np.pi * tones_hz[:, None] * t))
    recording = ArrayRecording(stored, rate_hz)
    the_plan = plan(pulses=NO_PULSES, filter=Filter(0.0, 0.0, out_hz), reference="as recorded")
    chain = make_chain(recording, the_plan)
    assert chain.setup.work == np.float32
    for anchor in (
        4 * rate_hz + 1,
        4 * rate_hz + 777,
        5 * rate_hz + 3333,
        5 * rate_hz + 2,
        4.5 * rate_hz + 0.37,
    ):
        n_times = round(out_hz)
        data = read_epoch(chain, float(anchor), 0.0, n_times).data.astype(np.float64)
        time_s = np.arange(n_times) / out_hz
        wanted = 2 * np.pi * tones_hz * anchor / rate_hz
        measured = np.angle(np.sum(data * np.exp(-2j * np.pi * tones_hz[:, None] * time_s), axis=1))
        error = np.angle(np.exp(1j * (measured - wanted)))
        assert np.all(np.abs(error) < 2 * np.pi * tones_hz * 10e-6), (anchor, error)


def test_segments_never_see_each_other() -> None:
    stored = coloured(3, 40_000, RATE_HZ, seed=2)
    joined = ArrayRecording(stored, RATE_HZ, boundaries=(15_000,))
    changed = stored.copy()
    changed[:, 15_000:] += 30_000.0
    other = ArrayRecording(changed, RATE_HZ, boundaries=(15_000,))
    the_plan = plan(pulses=NO_PULSES, precision=Precision.DOUBLE)
    first = make_chain(joined, the_plan).stretch(0, 0, 3000)
    np.testing.assert_array_equal(make_chain(other, the_plan).stretch(0, 0, 3000), first)
    assert make_chain(joined, the_plan).output_span(1) == (3000, 8000)
    alone = make_chain(ArrayRecording(stored[:, :15_000], RATE_HZ), the_plan).stretch(0, 0, 3000)
    assert v_to_uv(np.abs(alone - first).max()) < 1e-9


def test_recording_shorter_than_the_filter() -> None:
    stored = coloured(3, 1500, RATE_HZ, seed=4)
    chain = make_chain(ArrayRecording(stored, RATE_HZ), plan(pulses=NO_PULSES, precision=Precision.DOUBLE))
    reference = whole_array_chain(stored * STEP_V, [], chain.setup.antialias, chain.setup.band, 5, phase=0)
    assert v_to_uv(np.abs(chain.stretch(0, 0, 300) - reference).max()) < 1e-6


@pytest.mark.parametrize("precision", list(Precision))
def test_nothing_to_do_returns_the_recording(precision: Precision) -> None:
    stored = coloured(4, 9000, RATE_HZ, seed=6)
    chain = make_chain(
        ArrayRecording(stored, RATE_HZ),
        plan(pulses=NO_PULSES, filter=UNTOUCHED, reference="as recorded", precision=precision),
    )
    volts = stored * STEP_V
    epoch = read_epoch(chain, 3000.4, -0.1, 5000)
    expected = volts[:, 2500:7500]
    np.testing.assert_array_equal(
        epoch.data, expected if precision is Precision.DOUBLE else expected.astype("f4")
    )
    assert epoch.shift_s == 0.0
    assert epoch.remainder_s == pytest.approx(0.4 / RATE_HZ)
    assert not epoch.replaced.any()


def test_offset_comes_back_without_a_highpass(recording: ArrayRecording) -> None:
    chain = make_chain(recording, plan(filter=Filter(0.0, 100.0, 1000.0), reference="as recorded"))
    data = read_epoch(chain, 25_000, 0.0, 1000).data
    means_uv = v_to_uv(data.astype(np.float64).mean(axis=1))
    expected_uv = v_to_uv(recording.stored[:, 25_000:30_000].mean(axis=1) * STEP_V)
    np.testing.assert_allclose(means_uv, expected_uv, atol=1.0)
    assert np.ptp(expected_uv) > 1000.0


def test_replaced_follows_the_gap_of_each_channel(recording: ArrayRecording) -> None:
    """Design 4.4: marked if any recorded sample within half an output period was replaced."""
    pulses = Pulses(
        window_ms=(-2.0, 14.0),
        fill=Fill.LINE,
        also=(OtherGap((248.0, 254.0)),),
        channels={"E2": (-2.0, 25.0)},
    )
    chain = make_chain(recording, plan(pulses=pulses))
    onset = 15_001
    for anchor in (float(onset), onset - 2.0, onset + 1.0):
        epoch = read_epoch(chain, anchor, -0.1, 500)
        recorded = np.zeros((6, N_SAMPLES), dtype=bool)
        for channel in range(6):
            for window in ((-0.002, 0.025 if channel == 1 else 0.014), (0.248, 0.254)):
                for at in ONSETS:
                    a, b = window_to_samples(at, window, RATE_HZ)
                    recorded[channel, a:b] = True
        centres = anchor - 500 + 5 * np.arange(500)
        expected = np.stack([recorded[:, int(c) - 2 : int(c) + 3].any(axis=1) for c in centres], axis=1)
        np.testing.assert_array_equal(epoch.replaced, expected)
        assert 0.02 < epoch.replaced.mean() < 0.3


def test_leave_is_nan_where_replaced_and_only_there(recording: ArrayRecording) -> None:
    chain = make_chain(recording, plan(pulses=Pulses(window_ms=(-2.0, 14.0), fill=Fill.LEAVE)))
    epoch = read_epoch(chain, 15_001, -0.1, 500)
    np.testing.assert_array_equal(np.isnan(epoch.data), epoch.replaced)
    assert epoch.replaced.any()


def test_marks_move_add_and_remove_pulses(recording: ArrayRecording) -> None:
    marks = Marks(
        pulses_added=(40_000,),
        pulses_removed=(ONSETS[0] - 3,),
        pulses_moved=(MovedPulse(ONSETS[1] - 3, 15_050),),
        gaps_ms={"E3": (-1.0, 30.0)},
    )
    setup = bind(recording.facts, plan(), marks)
    estimates = finish(fit(recording, setup))
    assert estimates.onsets == (15_050, 20_480, 31_999, 32_105, 40_000, 44_444, 52_001)
    states = [pulse.state for pulse in estimates.pulses]
    assert states.count(PulseState.ALIGNED) == 5
    assert {PulseState.ADDED, PulseState.MOVED} <= set(states)
    assert [group.windows_s for group in setup.groups] == [((-0.002, 0.014),), ((-0.001, 0.03),)]


def test_a_marker_without_a_pulse_stays(recording: ArrayRecording) -> None:
    markers = (*recording.facts.markers, Marker(25_000.0, "pulse"))
    quiet = ArrayRecording(recording.stored, RATE_HZ, markers)
    estimates = finish(fit(quiet, bind(quiet.facts, plan(), Marks())))
    only = [pulse for pulse in estimates.pulses if pulse.state is PulseState.MARKED_ONLY]
    assert [(pulse.sample, pulse.marked) for pulse in only] == [(25_000, 25_000.0)]


def test_pulses_nobody_marked_are_noticed(recording: ArrayRecording) -> None:
    bare = ArrayRecording(recording.stored, RATE_HZ)
    found = finish(fit(bare, bind(bare.facts, plan(), Marks()))).unmarked
    # 31 999 and 32 105 are 21 ms apart: one event.
    assert [round(n, -1) for n in found] == [round(n, -1) for n in ONSETS if n != 32_105]
    told = finish(fit(bare, bind(bare.facts, plan(pulses=NO_PULSES), Marks()))).unmarked
    assert told == ()


def test_bad_stretch_shortens_flanks(recording: ArrayRecording) -> None:
    """What lies in a bad stretch must not reach a fill."""
    wild = recording.stored.copy()
    wild[:, ONSETS[1] - 60 : ONSETS[1] - 12] = 1e5
    marks = Marks(bad_stretches=(BadStretch(ONSETS[1] - 60, ONSETS[1] - 12, "pop"),))
    spoiled = ArrayRecording(wild, RATE_HZ, recording.facts.markers)
    the_plan = plan(pulses=Pulses(window_ms=(-2.0, 14.0), fill=Fill.CUBIC), precision=Precision.DOUBLE)
    gap = slice(ONSETS[1] - 10, ONSETS[1] + 71)
    with_marks = make_chain(spoiled, the_plan, marks).repaired(gap.start, gap.stop)
    clean = make_chain(recording, the_plan).repaired(gap.start, gap.stop)
    assert np.abs(with_marks - clean).max() < 500.0
    assert np.abs(make_chain(spoiled, the_plan).repaired(gap.start, gap.stop) - clean).max() > 5000.0


def test_reference_with_the_recorded_one_put_back() -> None:
    """Facts T-2.14: [1, 2, 3, 6] with the recorded reference restored -> mean 12/5."""
    stored = np.repeat(np.array([[1.0], [2.0], [3.0], [6.0]]), 400, axis=1) * 10.0
    recording = ArrayRecording(stored, 1000.0)
    untouched = plan(pulses=NO_PULSES, filter=UNTOUCHED, precision=Precision.DOUBLE)
    plain = make_chain(recording, untouched)
    assert np.round(v_to_uv(read_epoch(plain, 100, 0.0, 1).data[:, 0]), 9).tolist() == [-2.0, -1.0, 0.0, 3.0]
    channels = replace(untouched.channels, recorded_reference="Cz")
    restored = make_chain(recording, replace(untouched, channels=channels))
    assert restored.setup.names[-1] == "Cz"
    data = v_to_uv(read_epoch(restored, 100, 0.0, 1).data[:, 0])
    np.testing.assert_allclose(data, [-1.4, -0.4, 0.6, 3.6, -2.4], atol=1e-9)
    bad = make_chain(recording, replace(untouched, channels=replace(untouched.channels, bad=("E4",))))
    np.testing.assert_allclose(
        v_to_uv(read_epoch(bad, 100, 0.0, 1).data[:, 0]), [-1.0, 0.0, 1.0, 4.0], atol=1e-9
    )


_HASH = """
import hashlib, sys
sys.path.insert(0, {tests!r})
from support.engine_cases import *
from pulsemend.model.plan import Pulses
from pulsemend.model.vocabulary import Fill
recording = with_pulses(coloured(6, 30_000, 5000, seed=11), 5000, [7003, 15_001, 20_480])
chain = make_chain(recording, plan(pulses=Pulses(window_ms=(-2.0, 14.0), fill=Fill.COVARIANCE)))
print(hashlib.sha256(chain.stretch(0, 0, 6000).tobytes()).hexdigest())
"""


def test_threads_and_workers_change_nothing(recording: ArrayRecording) -> None:
    """One or two BLAS threads, or two workers with half of the epochs each: the same bits."""
    hashes = set()
    for threads in ("1", "2"):
        environment = {**os.environ, "OPENBLAS_NUM_THREADS": threads, "OMP_NUM_THREADS": threads}
        code = _HASH.format(tests=os.path.dirname(os.path.dirname(os.path.abspath(__file__))))
        run = subprocess.run(
            [sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=True
        )
        hashes.add(run.stdout.strip())
    assert len(hashes) == 1
    the_plan = plan(pulses=Pulses(window_ms=(-2.0, 14.0), fill=Fill.AUTOREGRESSIVE))
    anchors = [6000, 15_002, 20_001, 33_333, 44_000]

    def epochs(which: list[int]) -> list[str]:
        chain = make_chain(recording, the_plan)
        return [hashlib.sha256(read_epoch(chain, a, 0.0, 1000).data.tobytes()).hexdigest() for a in which]

    assert epochs(anchors) == epochs(anchors[:2]) + epochs(anchors[2:])


def test_share_replaced_is_that_of_the_marks(recording: ArrayRecording) -> None:
    pulses = Pulses(
        window_ms=(-2.0, 14.0),
        fill=Fill.LINE,
        also=(OtherGap((14.1, 15.0)), OtherGap((248.0, 254.0))),
        channels={"E2": (-2.0, 25.0)},
    )
    chain = make_chain(recording, plan(pulses=pulses))
    for anchor in (15_001.0, 15_000.0, 20_444.0, 31_500.0):
        cut = chain.cut(anchor, -0.1, 500)
        assert chain.replaced_share(cut) == chain.replaced(cut).mean() > 0.0
