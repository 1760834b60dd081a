"""Transplant test: against closed forms, direct computation, and artifacts and responses of known size."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.engine.fit import fit
from pulsemend.engine.planted import PlantedRecording, levels_of
from pulsemend.engine.setup import bind
from pulsemend.engine.transplant import RHYTHM_S, Bench, Errors, Method, Truth, own_method, prepare
from pulsemend.engine.transplants import LEAST_GAPS, TransplantConfig, draw_artifacts, lay_out
from pulsemend.errors import InputError
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import Filter, Plan, Pulses
from pulsemend.model.vocabulary import AcrossPulses, Decay, Fill, Precision, PulseTimes, Side
from pulsemend.progress import finish
from pulsemend.signal.repair_error import BANDS
from support.engine_cases import STEP_V, UNTOUCHED, ArrayRecording, make_chain, plan, with_pulses

RATE_HZ = 1000.0
GAP = (-2, 15)
"""Samples of the gap of -2 to 14 ms, half open."""

PLAIN = TransplantConfig(responses=False)
SHOWN = [5, 16, 30]
"""Samples after the onset: in the gap, at its end and behind it."""

FILTERED = Filter(highpass_hz=1.0, lowpass_hz=40.0, rate_hz=250.0)


@cache
def background(n_channels: int, n_samples: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Noise whose autocovariance is known to the last lag, tenths of uV; and that, in volts squared."""
    f = np.fft.rfftfreq(n_samples, 1.0 / RATE_HZ)
    power = 1.0 / (1.0 + (f / 3.0) ** 2) + 0.1 * np.exp(-0.5 * ((f - 10.0) / 1.0) ** 2)
    power[0] = 0.0
    autocovariance = np.fft.irfft(power)
    scale = 15.0**2 / autocovariance[0]
    rng = np.random.default_rng(3)
    shape = (n_channels, f.size)
    spectrum = rng.standard_normal(shape) + 1j * rng.standard_normal(shape)
    x = np.fft.irfft(spectrum * np.sqrt(power * scale * n_samples / 2.0), n_samples)
    return np.round(10.0 * x), autocovariance * scale * 1e-12


def recording(
    n_channels: int = 4, seconds: int = 60, onsets: tuple[int, ...] = (1500, 3000, 4500)
) -> ArrayRecording:
    return with_pulses(background(n_channels, seconds * 1000)[0], RATE_HZ, list(onsets))


def a_plan(fill: Fill = Fill.LINE, filters: Filter = UNTOUCHED, **pulses: object) -> Plan:
    made = replace(Pulses(window_ms=(-2.0, 14.0), fill=fill), **pulses)  # type: ignore[arg-type]
    return plan(pulses=made, filter=filters, precision=Precision.DOUBLE, reference="as recorded")


def bench(
    found: ArrayRecording, the_plan: Plan, config: TransplantConfig = PLAIN, *others: Method
) -> tuple[Bench, Method]:
    setup = bind(found.facts, the_plan, NO_MARKS)
    own = own_method(setup)
    return finish(prepare(found, setup, finish(fit(found, setup)), (own, *others), config)), own


def measured(found: ArrayRecording, the_plan: Plan, config: TransplantConfig = PLAIN) -> tuple[Truth, Errors]:
    made, own = bench(found, the_plan, config)
    truth, (errors,) = finish(made.measure([own]))
    return truth, errors


def in_gap(truth: Truth) -> NDArray[np.bool_]:
    numbers = np.rint(truth.latencies_s * RATE_HZ)
    return np.asarray((numbers >= GAP[0]) & (numbers < GAP[1]))


def kriging_variance(autocovariance: NDArray[np.float64], flank: int) -> NDArray[np.float64]:
    """Closed form: variance of the best linear unbiased estimate's error, for every sample of the gap."""
    size = GAP[1] - GAP[0]
    knots = np.concatenate([np.arange(-flank, 0), np.arange(size, size + flank)])
    n = knots.size
    system = np.ones((n + 1, n + 1))
    system[:n, :n] = autocovariance[np.abs(knots[:, None] - knots)]
    system[n, n] = 0.0
    towards = np.vstack([autocovariance[np.abs(knots[:, None] - np.arange(size))], np.ones(size)])
    solved = np.linalg.solve(system, towards)
    return np.asarray(autocovariance[0] - np.einsum("ij,ij->j", solved, towards))


def test_the_covariance_fill_costs_what_the_closed_form_says() -> None:
    found = recording(16, 240)
    known = background(16, 240_000)[1]
    made, own = bench(found, a_plan(Fill.COVARIANCE))
    made.estimates = replace(made.estimates, autocovariance=np.tile(known[:200], (16, 1)))
    truth, (errors,) = finish(made.measure([own]))
    assert errors.error_v.shape[:2] == (made.n_gaps, 16)
    assert made.n_gaps > 150
    inside = in_gap(truth)
    found_v = np.sqrt(np.mean(errors.error_v[:, :, inside].astype(np.float64) ** 2))
    expected_v = np.sqrt(kriging_variance(known, own.flank).mean())
    assert found_v == pytest.approx(expected_v, rel=0.05)
    assert np.abs(errors.error_v[:, :, ~inside]).max() == 0.0
    # The learned autocovariance does hardly worse.
    _, learned = measured(found, a_plan(Fill.COVARIANCE))
    learned_v = np.sqrt(np.mean(learned.error_v[:, :, inside].astype(np.float64) ** 2))
    assert learned_v == pytest.approx(expected_v, rel=0.08)


def test_the_line_costs_what_a_line_drawn_by_hand_costs() -> None:
    found = recording()
    truth, errors = measured(found, a_plan())
    setup = bind(found.facts, a_plan(), NO_MARKS)
    layout = lay_out(setup, finish(fit(found, setup)), PLAIN)
    inside = in_gap(truth)
    for row, start in enumerate(layout.starts):
        onset = start + layout.before
        edges = [onset + GAP[0] - 1, onset + GAP[1]]
        times = np.arange(onset + GAP[0], onset + GAP[1])
        for channel, stored in enumerate(found.stored):
            by_hand = (np.interp(times, edges, stored[edges]) - stored[times]) * STEP_V
            np.testing.assert_allclose(errors.error_v[row, channel, inside], by_hand, rtol=1e-5, atol=1e-12)
    assert np.abs(errors.error_v[:, :, ~inside]).max() == 0.0


def test_of_one_side_only_that_side_is_used() -> None:
    found = recording()
    setup = bind(found.facts, a_plan(), NO_MARKS)
    one_sided = [Method(Fill.LINE, side, 1) for side in (Side.BEFORE, Side.AFTER)]
    made, own = bench(found, a_plan(), PLAIN, *one_sided)
    truth, (both, before, after) = finish(made.measure([own, *one_sided]))
    layout = lay_out(setup, finish(fit(found, setup)), PLAIN)
    onset, inside = layout.starts[0] + layout.before, in_gap(truth)
    stored = found.stored[0]
    true = stored[onset + GAP[0] : onset + GAP[1]]
    for errors, at in ((before, onset + GAP[0] - 1), (after, onset + GAP[1])):
        np.testing.assert_allclose(
            errors.error_v[0, 0, inside], (stored[at] - true) * STEP_V, rtol=1e-5, atol=1e-12
        )
    rms = [float(np.sqrt(np.mean(e.error_v[:, :, inside] ** 2))) for e in (both, before, after)]
    assert rms[0] < min(rms[1:])


def test_what_the_gap_spares_comes_back_whole_and_what_it_holds_does_not() -> None:
    # A gap that ends before the onset cannot harm what follows the onset.
    harmless = a_plan(window_ms=(-8.0, -2.0))
    truth, errors = measured(recording(seconds=120), harmless, TransplantConfig())
    assert truth.responses is not None
    assert (truth.response_v2 > 0.0).all()
    assert np.abs(errors.taken_v2).max() == 0.0
    # Through filters the fill's error meets the response by chance only.
    truth, errors = measured(recording(seconds=120), replace(harmless, filter=FILTERED), TransplantConfig())
    assert 1.0 + errors.taken_v2.sum() / truth.response_v2.sum() == pytest.approx(1.0, abs=0.02)
    # Here early responses lie in the gap, and late ones do not.
    truth, errors = measured(recording(seconds=120), a_plan(window_ms=(-2.0, 45.0)), TransplantConfig())
    assert truth.responses is not None
    early, late = truth.responses.latencies_s == 0.02, truth.responses.latencies_s == 0.2
    for rows, low, high in ((early, -0.4, 0.4), (late, 0.98, 1.02)):
        ratio = 1.0 + errors.taken_v2[rows].sum() / truth.response_v2[rows].sum()
        assert low < ratio < high


def test_responses_are_as_large_and_late_as_they_say() -> None:
    found = recording()
    setup = bind(found.facts, a_plan(), NO_MARKS)
    made, _ = bench(found, a_plan(), TransplantConfig())
    without, _ = bench(found, a_plan(), PLAIN)
    assert made.responses is not None
    layout = lay_out(setup, finish(fit(found, setup)), PLAIN)
    for place in range(3):
        start, stop = place * layout.size, (place + 1) * layout.size
        x, y = np.empty((2, layout.size, 4))
        made._truth._recording.read(start, stop, x)
        without._truth._recording.read(start, stop, y)
        response_v = (x - y) * STEP_V
        peak = np.argmax(np.abs(response_v), axis=0)
        assert (peak == layout.before + round(made.responses.latencies_s[place] * RATE_HZ)).all()
        sizes_v = response_v[peak, np.arange(4)]
        np.testing.assert_allclose(sizes_v, made.responses.sizes_v[place], rtol=1e-9)
        assert (np.abs(sizes_v) >= 3e-6).all()
        assert (np.abs(sizes_v) <= 9e-6).all()
    signs = np.sign(made.responses.sizes_v)
    assert abs(signs.mean()) < 0.3


def test_a_gap_holds_the_artifact_of_a_single_pulse_and_nothing_is_planted_elsewhere() -> None:
    found = recording()
    setup = bind(found.facts, a_plan(), NO_MARKS)
    estimates = finish(fit(found, setup))
    layout = lay_out(setup, estimates, PLAIN)
    artifact = finish(draw_artifacts(found, setup, estimates, layout, 7))
    levels = levels_of(found, layout)
    planted = PlantedRecording(found, setup, layout, levels, None, artifact)
    without = PlantedRecording(found, setup, layout, levels)
    x, y = np.empty((2, planted.facts.n_samples, 4))
    planted.read(0, len(x), x)
    without.read(0, len(y), y)
    place = 5
    onset, pulse = layout.onsets[place], int(artifact.pulses[place])
    assert pulse in estimates.onsets
    level = found.stored[:, pulse + GAP[0] - 20 : pulse + GAP[0]].mean(axis=1)
    expected = found.stored[:, pulse + GAP[0] : pulse + GAP[1]].T - level
    np.testing.assert_allclose((x - y)[onset + GAP[0] : onset + GAP[1]], expected, atol=1e-9)
    assert np.abs(expected).max() > 1e4
    assert len(set(artifact.pulses.tolist())) == 3
    for one in layout.onsets:
        x[one + GAP[0] : one + GAP[1]] = y[one + GAP[0] : one + GAP[1]]
    np.testing.assert_array_equal(x, y)
    # Read in parts it is the same.
    part = np.empty((700, 4))
    planted.read(onset - 300, onset + 400, part)
    again = np.empty_like(part)
    planted.read(onset - 300, onset + 1, again[:301])
    planted.read(onset + 1, onset + 400, again[301:])
    np.testing.assert_array_equal(part, again)


@pytest.mark.parametrize("resets", [False, True])
def test_stretches_follow_one_another_without_a_step(resets: bool) -> None:
    found = recording()
    setup = bind(found.facts, a_plan(), NO_MARKS)
    config = replace(PLAIN, resets=resets)
    layout = lay_out(setup, finish(fit(found, setup)), config)
    assert any(layout.jumps) is resets
    joined = PlantedRecording(found, setup, layout, levels_of(found, layout))
    x = np.empty((joined.facts.n_samples, 4))
    joined.read(0, len(x), x)
    steps = np.diff(x, axis=0)
    for place, (start, jump) in enumerate(zip(layout.starts, layout.jumps, strict=True)):
        own = np.diff(found.stored[:, start : start + layout.size + jump], axis=1).T
        here = steps[place * layout.size : (place + 1) * layout.size - 1]
        np.testing.assert_allclose(here[: layout.before - 1], own[: layout.before - 1], atol=1e-9)
        np.testing.assert_allclose(here[layout.before :], own[layout.before + jump :], atol=1e-9)
        if place:
            assert not steps[place * layout.size - 1].any()
        if jump:
            assert 30 <= jump <= 250
            np.testing.assert_array_equal(here[layout.before - 1], own[layout.before + jump - 1])


def test_stretches_keep_away_from_pulses_and_bad_stretches() -> None:
    found = recording(onsets=(1500, 20_000, 40_000))
    setup = replace(bind(found.facts, a_plan(), NO_MARKS), barriers=((30_000, 33_000),))
    layout = lay_out(setup, finish(fit(found, setup)), PLAIN)
    for start in layout.starts:
        stop = start + layout.size
        assert stop <= 30_000 or start >= 33_000
        assert all(stop <= onset - 2 or start >= onset + 500 for onset in (1500, 20_000, 40_000))


def test_a_reset_adds_to_the_cost_of_filling_from_both_sides() -> None:
    # Of narrow alpha alone a fill from both sides knows almost everything, unless its phase is reset.
    n_samples = 60_000
    f = np.fft.rfftfreq(n_samples, 1.0 / RATE_HZ)
    rng = np.random.default_rng(4)
    spectrum = np.exp(1j * rng.uniform(0.0, 2 * np.pi, (4, f.size))) * np.exp(-0.5 * ((f - 10.0) / 0.5) ** 2)
    stored = np.fft.irfft(spectrum, n_samples)
    found = with_pulses(np.round(150.0 * stored / stored.std()), RATE_HZ, [1500, 3000, 4500])
    rms = []
    for resets in (False, True):
        truth, errors = measured(found, a_plan(Fill.COVARIANCE), replace(PLAIN, resets=resets))
        rms.append(np.sqrt(np.mean(errors.error_v[:, :, in_gap(truth)] ** 2)))
    assert rms[1] > 3.0 * rms[0]


@pytest.mark.parametrize("filters", [UNTOUCHED, replace(FILTERED, across_pulses=AcrossPulses.SPLIT)])
def test_neither_order_nor_company_changes_a_gap(filters: Filter) -> None:
    made, own = bench(recording(), a_plan(Fill.COVARIANCE, filters), TransplantConfig())
    cubic = Method(Fill.CUBIC, Side.BOTH, 10)
    truth, (errors, _) = finish(made.measure([own, cubic]))
    places = [made.n_gaps - 1, 3, 12]
    some_truth, (some,) = finish(made.measure([own], places))
    np.testing.assert_array_equal(some.error_v, errors.error_v[places])
    np.testing.assert_array_equal(some.rhythms, errors.rhythms[places])
    np.testing.assert_array_equal(some.taken_v2, errors.taken_v2[places])
    np.testing.assert_array_equal(some_truth.variance_v2, truth.variance_v2[places])
    # Made again from nothing it is the same, with another seed it is not.
    again, _ = bench(recording(), a_plan(Fill.COVARIANCE, filters), TransplantConfig())
    _, (repeated,) = finish(again.measure([own], places))
    np.testing.assert_array_equal(repeated.taken_v2, some.taken_v2)
    other, _ = bench(recording(), a_plan(Fill.COVARIANCE, filters), TransplantConfig(seed=8))
    _, (different,) = finish(other.measure([own], places))
    assert (different.taken_v2 != some.taken_v2).any()


def test_rhythms_of_the_truth_are_those_of_the_signal() -> None:
    # A tone of 10 Hz and 20 uV in all channels: its amplitude, and its phase at each stretch's latencies.
    t = np.arange(60_000) / RATE_HZ
    stored = np.tile(np.round(200.0 * np.cos(2 * np.pi * 10.0 * t + 0.4)), (2, 1))
    found = with_pulses(stored.astype(np.float64), RATE_HZ, [1500, 3000, 4500])
    setup = bind(found.facts, a_plan(), NO_MARKS)
    layout = lay_out(setup, finish(fit(found, setup)), PLAIN)
    truth, errors = measured(found, a_plan())
    alpha = [band.name for band in BANDS].index("alpha")
    for row, start in enumerate(layout.starts):
        at_s = (start + layout.before) / RATE_HZ + np.array(RHYTHM_S)
        expected = 20e-6 * np.exp(1j * (2 * np.pi * 10.0 * at_s + 0.4))
        np.testing.assert_allclose(truth.rhythms[row, 0, alpha], expected, atol=0.6e-6)
    # The gap of 17 ms lies under the first latency's window and hardly under the last one's.
    size = np.abs(errors.rhythms - truth.rhythms)[:, :, alpha].mean(axis=(0, 1))
    assert size[0] > 10 * size[-1]


def decayed(onsets: tuple[int, ...]) -> ArrayRecording:
    """Decays of 1 mV and 20 ms after every pulse, a tenth more or less."""
    stored = background(12, 120_000)[0].copy()
    rng = np.random.default_rng(5)
    curve = 1e4 * np.exp(-np.arange(1000) / 20.0)
    for onset in onsets:
        stored[:, onset : onset + 1000] += np.round(curve * (1.0 + 0.1 * rng.standard_normal((12, 1))))
    return with_pulses(stored, RATE_HZ, list(onsets))


def told_and_paid(decay: Decay) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Errors that the test tells, and those really made at the pulses, each of shape (n, 12 channels, 3)."""
    onsets = tuple(range(2000, 70_000, 1500))
    found, the_plan = decayed(onsets), a_plan(decay=decay)
    true = background(12, 120_000)[0]
    chain = make_chain(found, the_plan)
    pieces = [chain.repaired(onset, onset + 40).T - true[:, onset : onset + 40] for onset in onsets]
    truth, errors = measured(found, the_plan)
    numbers = np.rint(truth.latencies_s * RATE_HZ)
    shown = [int(np.flatnonzero(numbers == at)[0]) for at in SHOWN]
    return errors.error_v[:, :, shown].astype(np.float64), np.array(pieces)[:, :, SHOWN] * STEP_V


def test_the_cost_that_is_told_of_a_fitted_decay_is_the_one_that_was_paid() -> None:
    told_v, paid_v = told_and_paid(Decay.EXPONENTIAL)
    rms_v = [np.sqrt((error_v**2).mean(axis=(0, 1))) for error_v in (told_v, paid_v)]
    # Of 552 values each, the ratio of two root mean squares has a standard error of 4.3 %.
    np.testing.assert_allclose(rms_v[0], rms_v[1], rtol=0.1)


def test_of_a_decay_that_the_plan_leaves_is_told_what_no_response_can_be() -> None:
    told_v, paid_v = told_and_paid(Decay.NONE)
    told_v, paid_v = (np.median(error_v, axis=(0, 1)) for error_v in (told_v, paid_v))
    # All but 20 uV and three standard errors of a median of 46 pulses that vary by a tenth.
    size_v = 1e-3 * np.exp(-np.array(SHOWN[1:]) / 20.0)
    left_out_v = 20e-6 + 3.0 * 1.2533 * 0.1 * size_v / np.sqrt(46)
    np.testing.assert_allclose(told_v[1:], paid_v[1:] - left_out_v, atol=12e-6)


def test_what_cannot_be_measured_is_said_in_one_sentence() -> None:
    with pytest.raises(InputError, match=rf"only \d+ stretches of .* free of pulses.*{LEAST_GAPS}") as caught:
        bench(recording(seconds=15), a_plan())
    assert "\n" not in str(caught.value)
    with pytest.raises(InputError, match="gaps are left open"):
        bench(recording(), a_plan(Fill.LEAVE))
    none = replace(a_plan(), pulses=Pulses(times=PulseTimes.NONE))
    with pytest.raises(InputError, match="no pulse is repaired"):
        bench(recording(), none)
