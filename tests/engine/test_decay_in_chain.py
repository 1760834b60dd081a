"""Decays fitted and subtracted by the engine, on recordings whose decay is known."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.engine.chain import Chain
from pulsemend.engine.decay import DecayEstimates
from pulsemend.engine.decay_spans import decay_spans
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import basis_of, fit, quiet_windows
from pulsemend.engine.setup import bind
from pulsemend.engine.steps import steps
from pulsemend.model.marks import NO_MARKS, BadStretch
from pulsemend.model.plan import Filter, OtherGap, Plan
from pulsemend.model.vocabulary import Decay, Fill, Precision
from pulsemend.progress import Progress, finish
from pulsemend.signal.absorption import LATENCIES_S
from support.decay_cases import (
    GAP,
    RATE_HZ,
    add_evoked,
    background,
    decay_uv,
    pulses,
    recording,
    with_decays,
)
from support.engine_cases import UNTOUCHED, ArrayRecording, make_chain, plan, read_epoch

N = 50 * RATE_HZ
ONSETS = list(range(5000, N - 10_000, 6500))
BOTH_FLANKS = [Fill.LINE, Fill.CUBIC, Fill.MONOTONE, Fill.AUTOREGRESSIVE, Fill.COVARIANCE]


@pytest.fixture(scope="module")
def truth() -> NDArray[np.float64]:
    return add_evoked(background(4, N, seed=3), ONSETS)


@pytest.fixture(scope="module", params=[Decay.POWER, Decay.EXPONENTIAL], ids=str)
def decaying(request: pytest.FixtureRequest, truth: NDArray[np.float64]) -> tuple[Decay, ArrayRecording]:
    return request.param, recording(with_decays(truth, ONSETS, request.param), ONSETS)


def a_plan(
    decay: Decay, fill: Fill = Fill.LINE, precision: Precision = Precision.DOUBLE, **more: Any
) -> Plan:
    return plan(
        pulses=pulses(decay, fill, **more), precision=precision, filter=UNTOUCHED, reference="as recorded"
    )


def decay_of(chain: Chain) -> DecayEstimates:
    found = chain.estimates.decay
    assert found is not None
    return found


def errors(
    chain: Chain, truth: NDArray[np.float64], onsets: list[int] = ONSETS
) -> tuple[float, float, float]:
    """RMS error in the gap, RMS step at its end, RMS error over the 40 ms behind it: microvolts."""
    offset = chain.estimates.offset if chain.setup.removes_offset else 0.0
    gap, step, after = [], [], []
    for onset in onsets:
        lo = onset - 50
        repaired = (chain.repaired(lo, lo + 400) + offset) / 10.0
        right = truth[:, lo : lo + 400].T / 10.0
        a, b = GAP[0] + 50, GAP[1] + 50
        gap.append(repaired[a:b] - right[a:b])
        step.append(repaired[b] - repaired[b - 1])
        after.append(repaired[b : b + 200] - right[b : b + 200])
    return tuple(float(np.sqrt(np.mean(np.square(part)))) for part in (gap, step, after))  # type: ignore[return-value]


@pytest.mark.parametrize("fill", BOTH_FLANKS)
def test_the_gap_is_filled_as_well_as_without_a_decay(
    fill: Fill, truth: NDArray[np.float64], decaying: tuple[Decay, ArrayRecording]
) -> None:
    """Issue 5.4: with 1 mV decay the error in the gap at most 1.3, the step at most 2 times as large."""
    kind, with_decay = decaying
    clean = errors(make_chain(recording(truth, ONSETS), a_plan(Decay.NONE, fill)), truth)
    repaired = errors(make_chain(with_decay, a_plan(kind, fill)), truth)
    assert repaired[0] < 1.3 * clean[0]
    assert repaired[1] < 2.0 * clean[1]
    # Fitted nowhere, the decay is what fill and step consist of.
    left = errors(make_chain(with_decay, a_plan(Decay.NONE, fill)), truth)
    assert left[0] > 3.0 * clean[0]
    assert left[2] > 5.0 * repaired[2]


@pytest.mark.parametrize("precision", list(Precision))
def test_any_cut_gives_the_same_bits(precision: Precision, decaying: tuple[Decay, ArrayRecording]) -> None:
    """Preview equals export: whole, pieces in any order, cuts within decays and gaps."""
    kind, rec = decaying
    the_plan = plan(pulses=pulses(kind, Fill.COVARIANCE), precision=precision)
    first = make_chain(rec, the_plan)
    n = N // 5
    whole = first.stretch(0, 0, n)
    rng = np.random.default_rng(3)
    near = [onset // 5 + shift for onset in ONSETS[:6] for shift in (-3, 0, 2, 3, 11, 90, 400)]
    edges = sorted({0, n, *near, *rng.integers(0, n, 20).tolist()})
    chain = Chain(rec, first.setup, first.estimates)
    order = rng.permutation(len(edges) - 1)
    pieces = {int(i): chain.stretch(0, edges[i], edges[i + 1]) for i in order}
    np.testing.assert_array_equal(np.concatenate([pieces[i] for i in range(len(edges) - 1)], axis=1), whole)
    repaired = chain.repaired(4000, 9000)
    np.testing.assert_array_equal(
        np.concatenate([chain.repaired(a, a + 250) for a in range(4000, 9000, 250)]), repaired
    )


def test_both_precisions_agree(decaying: tuple[Decay, ArrayRecording]) -> None:
    kind, rec = decaying
    single = make_chain(rec, a_plan(kind, Fill.CUBIC, Precision.SINGLE))
    double = make_chain(rec, a_plan(kind, Fill.CUBIC, Precision.DOUBLE))
    assert single.setup.work == np.float32
    difference = single.repaired(4000, 30_000) + single.estimates.offset - double.repaired(4000, 30_000)
    assert np.abs(difference).max() / 10.0 < 1e-3


@pytest.mark.parametrize("kind", [Decay.POWER, Decay.EXPONENTIAL, Decay.TWO_EXPONENTIALS])
def test_without_decay_nothing_is_fitted(kind: Decay) -> None:
    """Issue 5.4 and 5.12: none in 95 % of channels; the evoked response of 9 uV changes by less than 1 %."""
    stored = add_evoked(background(40, 40 * RATE_HZ, seed=8), list(range(5000, 190_000, 6500)))
    onsets = list(range(5000, 190_000, 6500))
    rec = recording(stored, onsets)
    chain = make_chain(rec, a_plan(kind))
    assert decay_of(chain).columns.size <= 2
    assert all(decay_of(chain).reasons[i] for i in range(40) if i not in decay_of(chain).columns)
    plain = make_chain(rec, a_plan(Decay.NONE))
    average, unfitted = (
        np.mean([c.repaired(onset, onset + 1000) for onset in onsets], axis=0) for c in (chain, plain)
    )
    changed = np.ptp(average - unfitted, axis=0) / np.ptp(unfitted, axis=0)
    assert np.mean(changed < 0.01) >= 0.95


def test_only_channels_with_a_decay_above_the_bound_are_touched(truth: NDArray[np.float64]) -> None:
    stored = with_decays(truth, ONSETS, Decay.EXPONENTIAL, channels=slice(0, 2))
    rec = recording(stored, ONSETS)
    chain = make_chain(rec, a_plan(Decay.EXPONENTIAL))
    assert decay_of(chain).columns.tolist() == [0, 1]
    assert [bool(reason) for reason in decay_of(chain).reasons] == [False, False, True, True]
    plain = make_chain(rec, a_plan(Decay.NONE))
    np.testing.assert_array_equal(chain.repaired(4000, 9000)[:, 2:], plain.repaired(4000, 9000)[:, 2:])
    # 500 uV are left of it at the gap's end.
    high = make_chain(rec, a_plan(Decay.EXPONENTIAL, decay_least_uv=800.0))
    assert decay_of(high).columns.size == 0
    np.testing.assert_array_equal(high.repaired(4000, 9000), plain.repaired(4000, 9000))


def test_shape_and_amplitudes_are_the_simulated_ones() -> None:
    """Quiet background, so that every number is known: tau within 1 %, amplitudes within 0.01."""
    stored = np.round(background(3, N, seed=5) * 0.02)
    sizes = 1.0 + 0.2 * np.random.default_rng(2).standard_normal(len(ONSETS))
    # A misfire and a pulse of twice the size.
    sizes[4], sizes[9] = 0.0, 2.0
    for onset, size in zip(ONSETS, sizes, strict=True):
        stored[:, onset : onset + 2 * RATE_HZ] += 10.0 * size * decay_uv(Decay.EXPONENTIAL)
    found = decay_of(make_chain(recording(stored, ONSETS), a_plan(Decay.EXPONENTIAL)))
    middle = np.median(sizes)
    for row in range(3):
        a, tau = found.shape(row).values
        assert tau == pytest.approx(0.020, rel=0.01)
        assert a * 1e6 == pytest.approx(1000.0 * middle * np.exp(-GAP[1] / RATE_HZ / 0.020), rel=0.01)
        np.testing.assert_allclose(found.amplitudes[row], sizes / middle, atol=0.01)


def test_a_step_at_the_pulse_stays_and_spoils_nothing(truth: NDArray[np.float64]) -> None:
    """Facts T-1.7: each side keeps its own level; no curve is laid across the pulse."""
    flat = np.round(0.02 * truth)
    stepped = with_decays(flat, ONSETS, Decay.EXPONENTIAL, spread=0.0)
    for onset in ONSETS:
        stepped[:, onset:] += 500.0
    plain = with_decays(flat, ONSETS, Decay.EXPONENTIAL, spread=0.0)
    found, without = (
        decay_of(make_chain(recording(x, ONSETS), a_plan(Decay.EXPONENTIAL))) for x in (stepped, plain)
    )
    np.testing.assert_allclose(found.values[:, :2], without.values[:, :2], rtol=2e-3)
    np.testing.assert_allclose(found.amplitudes, without.amplitudes, atol=2e-3)


def test_channels_with_other_gap_ends(truth: NDArray[np.float64]) -> None:
    rec = recording(with_decays(truth, ONSETS, Decay.EXPONENTIAL, spread=0.0), ONSETS)
    the_plan = a_plan(Decay.EXPONENTIAL, channels={"E2": (-2.0, 25.0)})
    chain = make_chain(rec, the_plan)
    found = decay_of(chain)
    assert found.columns.tolist() == [0, 1, 2, 3]
    at_end_uv = [float(found.shape(row).at(np.zeros(1))[0]) * 1e6 for row in range(4)]
    assert at_end_uv[0] == pytest.approx(1000.0 * np.exp(-0.0142 / 0.020), rel=0.03)
    assert at_end_uv[1] == pytest.approx(1000.0 * np.exp(-0.0252 / 0.020), rel=0.05)
    after = np.mean(
        [chain.repaired(o + 126, o + 400) / 10.0 - truth[:, o + 126 : o + 400].T / 10.0 for o in ONSETS],
        axis=0,
    )
    assert np.abs(after).max() < 12.0


def test_pairs_of_50_ms() -> None:
    """The first pulse's decay ends where the second's gap begins; the second carries on for both."""
    first = list(range(5000, N - 10_000, 8000))
    onsets = sorted([*first, *(onset + 250 for onset in first)])
    quiet = np.round(background(2, N, seed=6) * 0.05)
    rec = recording(with_decays(quiet, onsets, Decay.EXPONENTIAL, spread=0.0), onsets)
    chain = make_chain(rec, a_plan(Decay.EXPONENTIAL))
    found = decay_of(chain)
    # The sum of two exponentials of one time constant is one: 1 and 1 + e^(-50 / 20) times the decay.
    ratio = found.amplitudes[:, 1::2] / found.amplitudes[:, 0::2]
    np.testing.assert_allclose(ratio, 1.0 + np.exp(-2.5), atol=0.05)
    for onset in first:
        left = (
            chain.repaired(onset + GAP[1], onset + 250 + GAP[0])
            - quiet[:, onset + GAP[1] : onset + 250 + GAP[0]].T
        )
        assert np.abs(left).max() / 10.0 < 15.0
        left = (
            chain.repaired(onset + 250 + GAP[1], onset + 2000)
            - quiet[:, onset + 250 + GAP[1] : onset + 2000].T
        )
        assert np.abs(left).max() / 10.0 < 15.0


def test_spans_end_at_the_next_pulse_the_segment_and_not_at_other_gaps() -> None:
    rec = ArrayRecording(np.zeros((1, 40_000)), float(RATE_HZ), boundaries=(20_000,))
    setup = bind(
        rec.facts,
        a_plan(Decay.POWER, also=(OtherGap((248.0, 254.0)),)),
        replace(NO_MARKS, bad_stretches=(BadStretch(9000, 9500, "movement"),)),
    )
    onsets = [3000, 3040, 6000, 8990, 19_980, 21_000]
    (group,) = setup.groups
    spans = [decay_spans(setup, group, onsets, segment) for segment in setup.facts.segments]
    rows = [[(s.pulse, s.origin, s.start, s.stop, s.clean_stop) for s in of] for of in spans]
    # The first of two joined gaps has none; the next gap of any kind ends what is clean; a bad stretch, too.
    # Nor has a pulse whose gap the segment's end cuts: what follows is another piece of signal.
    assert rows[0] == [
        (1, 3111, 3111, 5990, 4240),
        (2, 6071, 6071, 8980, 7240),
        (3, 9061, 9061, 19_970, 9061),
    ]
    assert rows[1] == [(5, 21_071, 21_071, 40_000, 21_220)]


def test_end_of_segment_and_bad_stretches() -> None:
    """Nothing crosses a boundary; bad stretches are not learned from, pulses in them are as usual."""
    stored = np.round(background(2, N, seed=9) * 0.05)
    with_decay = with_decays(stored, ONSETS, Decay.EXPONENTIAL, spread=0.0)
    cut = ONSETS[10] + 200
    # What is behind the boundary is another recording: no decay goes on there.
    with_decay[:, cut : ONSETS[11]] = stored[:, cut : ONSETS[11]]
    spoiled = slice(ONSETS[5] + 100, ONSETS[5] + 3000)
    with_decay[:, spoiled] += 1e5 * np.sin(np.arange(2900) / 30.0)
    rec = recording(with_decay, ONSETS, (cut,))
    marks = replace(NO_MARKS, bad_stretches=(BadStretch(spoiled.start, spoiled.stop, "movement"),))
    chain = make_chain(rec, a_plan(Decay.EXPONENTIAL), marks)
    np.testing.assert_array_equal(chain.repaired(cut, cut + 500), rec.stored[:, cut : cut + 500].T)
    left = chain.repaired(ONSETS[10] + GAP[1], cut) - stored[:, ONSETS[10] + GAP[1] : cut].T
    assert np.abs(left).max() / 10.0 < 20.0
    found = decay_of(chain)
    np.testing.assert_allclose(found.amplitudes, 1.0, atol=0.05)
    np.testing.assert_allclose(found.amplitudes[:, 5], np.median(found.amplitudes, axis=1), atol=1e-3)


def test_estimates_come_back_from_their_file(decaying: tuple[Decay, ArrayRecording], tmp_path: Path) -> None:
    kind, rec = decaying
    chain = make_chain(rec, a_plan(kind))
    chain.estimates.save(tmp_path / "estimates.h5")
    again = Estimates.load(tmp_path / "estimates.h5")
    assert again.decay is not None
    for name in ("columns", "values", "amplitudes", "spread", "share", "share_low", "share_high"):
        np.testing.assert_array_equal(getattr(again.decay, name), getattr(decay_of(chain), name))
    assert (again.decay.kind, again.decay.reasons, again.decay.n_pulses) == (
        kind,
        decay_of(chain).reasons,
        len(ONSETS),
    )
    other = Chain(rec, chain.setup, again)
    np.testing.assert_array_equal(other.repaired(4000, 9000), chain.repaired(4000, 9000))


def test_estimates_rest_on_the_decays_settings(decaying: tuple[Decay, ArrayRecording]) -> None:
    _, rec = decaying

    def rests(decay: Decay, **more: Any) -> dict[str, str]:
        return basis_of(bind(rec.facts, a_plan(decay, **more), NO_MARKS))

    power = rests(Decay.POWER)
    assert power == rests(Decay.POWER)
    for other in (
        rests(Decay.NONE),
        rests(Decay.EXPONENTIAL),
        rests(Decay.POWER, decay_ms=60.0),
        rests(Decay.POWER, decay_least_uv=10.0),
    ):
        assert other["decay"] != power["decay"]
    assert rests(Decay.NONE, decay_ms=60.0) == rests(Decay.NONE)


def test_nothing_is_learned_while_a_decay_lasts(decaying: tuple[Decay, ArrayRecording]) -> None:
    """Autocovariance windows begin when the decay is over: at least its length after the gap."""
    _, rec = decaying
    for decay_ms in (80.0, 300.0):
        setup = bind(rec.facts, a_plan(Decay.EXPONENTIAL, decay_ms=decay_ms), NO_MARKS)
        clear = round(max(0.1, decay_ms / 1e3) * RATE_HZ)
        for start, stop in quiet_windows(setup):
            assert not any(start < onset + GAP[1] + clear and onset + GAP[0] < stop for onset in ONSETS)
        assert quiet_windows(setup)


def test_marks_where_the_fit_alters_a_response(truth: NDArray[np.float64]) -> None:
    """Design 4.4's rule: any recorded sample within half an output period, by the channel's median share."""
    rec = recording(with_decays(truth, ONSETS, Decay.EXPONENTIAL, channels=slice(0, 2)), ONSETS)
    the_plan = plan(
        pulses=pulses(Decay.EXPONENTIAL), filter=Filter(0.0, 0.0, 1000.0), reference="as recorded"
    )
    chain = make_chain(rec, the_plan)
    found = decay_of(chain)
    onset = ONSETS[3]
    for anchor in (float(onset), onset - 2.0, onset + 1.0):
        cut = chain.cut(anchor, -0.1, 500)
        marked = chain.decay_fitted(cut)
        assert marked is not None
        recorded = np.zeros((4, N), dtype=bool)
        for row in range(2):
            times = np.arange(5000)
            share = np.interp((times + GAP[1]) / RATE_HZ, LATENCIES_S, found.share[row])
            lasting = np.abs(found.shape(row).at(times / RATE_HZ)) >= 1e-7
            recorded[row, onset + GAP[1] : onset + GAP[1] + 5000] = (np.abs(1 - share) > 0.2) & lasting
        centres = anchor - 500 + 5 * np.arange(500)
        expected = np.stack([recorded[:, int(c) - 2 : int(c) + 3].any(axis=1) for c in centres], axis=1)
        np.testing.assert_array_equal(marked, expected)
        assert 0.0 < chain.decay_share(cut) == marked.mean()
        assert not marked[2:].any()
    none = make_chain(rec, plan(pulses=pulses(Decay.NONE)))
    assert none.decay_fitted(none.cut(float(onset), 0.0, 100)) is None
    assert none.decay_share(none.cut(float(onset), 0.0, 100)) == 0.0


def test_the_share_recovered_is_what_the_whole_fit_recovers(truth: NDArray[np.float64]) -> None:
    """Against the real thing: a 9 uV response added to the recording itself, everything fitted again."""
    rec = recording(with_decays(truth, ONSETS, Decay.EXPONENTIAL), ONSETS)
    found = decay_of(make_chain(rec, a_plan(Decay.EXPONENTIAL)))
    without = make_chain(rec, a_plan(Decay.EXPONENTIAL))
    t = np.arange(2000) / RATE_HZ
    for place in (1, 3, 6, 8):
        latency = LATENCIES_S[place]
        response = 90.0 * np.exp(-0.5 * ((t - latency) / (0.22 * latency)) ** 2)
        stored = rec.stored.copy()
        for onset in ONSETS:
            stored[:, onset : onset + 2000] += response
        chain = make_chain(ArrayRecording(stored, RATE_HZ, rec.facts.markers), a_plan(Decay.EXPONENTIAL))
        seen = slice(GAP[1], 2000)
        left = np.mean(
            [chain.repaired(o + GAP[1], o + 2000) - without.repaired(o + GAP[1], o + 2000) for o in ONSETS],
            axis=0,
        ).T
        share = left @ response[seen] / (response[seen] @ response[seen])
        assert (share > found.share_low[:, place] - 0.1).all()
        assert (share < found.share_high[:, place] + 0.1).all()


def test_closing_the_fit_half_way_leaves_no_trace(decaying: tuple[Decay, ArrayRecording]) -> None:
    _, rec = decaying
    work = fit(rec, bind(rec.facts, a_plan(Decay.POWER), NO_MARKS))
    stages = {next(work).stage for _ in range(100)}
    work.close()
    assert stages
    told: list[Progress] = []
    finish(fit(rec, bind(rec.facts, a_plan(Decay.POWER), NO_MARKS)), told.append)
    assert {"reading the decay", "fitting the decay"} <= {one.stage for one in told}


def test_steps_name_what_was_fitted_and_what_was_not(truth: NDArray[np.float64]) -> None:
    rec = recording(with_decays(truth, ONSETS, Decay.EXPONENTIAL, channels=slice(0, 1)), ONSETS)
    chain = make_chain(rec, a_plan(Decay.EXPONENTIAL))
    taken = steps(chain.setup, chain.estimates)
    names = [step.name for step in taken]
    assert names.index("decay") < names.index("fill")
    parameters = next(step.parameters for step in taken if step.name == "decay")
    assert [one["channel"] for one in parameters["fitted"]] == ["E1"]
    assert sorted(parameters["not_fitted"]) == ["E2", "E3", "E4"]
    assert parameters["fitted"][0]["at_the_gaps_end_uv"] == pytest.approx(491.6, rel=0.05)
    plain = make_chain(rec, a_plan(Decay.NONE))
    assert "decay" not in [step.name for step in steps(plain.setup, plain.estimates)]


def test_more_pulses_than_the_median_needs(
    monkeypatch: pytest.MonkeyPatch, truth: NDArray[np.float64]
) -> None:
    from pulsemend.engine import decay

    rec = recording(with_decays(truth, ONSETS, Decay.EXPONENTIAL), ONSETS)
    monkeypatch.setattr(decay, "MOST_PULSES", 12)
    found = decay_of(make_chain(rec, a_plan(Decay.EXPONENTIAL)))
    assert found.n_pulses == 12
    assert found.amplitudes.shape == (4, len(ONSETS))
    assert np.abs(found.amplitudes - 1.0).min(axis=0).max() > 0.0


def test_leave_subtracts_and_leaves_the_gap_empty(truth: NDArray[np.float64]) -> None:
    rec = recording(with_decays(truth, ONSETS, Decay.EXPONENTIAL), ONSETS)
    chain = make_chain(rec, a_plan(Decay.EXPONENTIAL, Fill.LEAVE))
    onset = ONSETS[2]
    data = read_epoch(chain, float(onset), -0.1, 1500).data
    assert np.isnan(data[:, 500 + GAP[0] : 500 + GAP[1]]).all()
    after = data[:, 500 + GAP[1] : 1500] - truth[:, onset + GAP[1] : onset + 1000] * 1e-7
    assert np.sqrt(np.mean(after**2)) < 15e-6


def test_one_pulse_is_enough_for_a_large_decay() -> None:
    for onsets in ([10_000], [10_000, 30_000]):
        quiet = np.round(background(1, 10 * RATE_HZ, seed=4) * 0.05)
        rec = recording(with_decays(quiet, onsets, Decay.EXPONENTIAL, spread=0.0), onsets)
        chain = make_chain(rec, a_plan(Decay.EXPONENTIAL))
        assert decay_of(chain).columns.tolist() == [0]
        left = chain.repaired(10_000 + GAP[1], 12_000) - quiet[:, 10_000 + GAP[1] : 12_000].T
        assert np.abs(left).max() / 10.0 < 10.0
