"""What the repair costs, in numbers and words: against errors of known size."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pulsemend.engine.transplants import TransplantConfig
from pulsemend.errors import InputError
from pulsemend.mending.learned import Learned, learn
from pulsemend.mending.repair_cost import BEST_CASE, MOST, SHARE, RepairCost, repair_cost
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import Filter, Plan, Pulses
from pulsemend.model.vocabulary import Fill, Side
from pulsemend.progress import finish
from support.engine_cases import STEP_V, UNTOUCHED, ArrayRecording, coloured, plan, with_pulses

RATE_HZ = 1000.0
PLAIN = TransplantConfig(responses=False)


def recording(seconds: int = 90, n_channels: int = 3, sd_uv: float = 15.0) -> ArrayRecording:
    stored = coloured(n_channels, seconds * 1000, RATE_HZ, 2, sd_uv)
    return with_pulses(stored, RATE_HZ, [2000 + 1500 * k for k in range(12)])


def a_plan(filters: Filter = UNTOUCHED, **pulses: object) -> Plan:
    made = replace(Pulses(window_ms=(-2.0, 14.0), fill=Fill.LINE), **pulses)  # type: ignore[arg-type]
    return plan(pulses=made, filter=filters, reference="as recorded")


def learned_of(found: ArrayRecording, the_plan: Plan) -> Learned:
    return finish(learn(found, the_plan, NO_MARKS))


def cost_of(
    found: ArrayRecording, the_plan: Plan, *, compare: bool = False, config: TransplantConfig | None = None
) -> RepairCost:
    return finish(repair_cost(found, learned_of(found, the_plan), compare=compare, config=config))


def test_without_filters_the_first_sample_after_the_gap_is_trustworthy() -> None:
    cost = cost_of(recording(), a_plan(), config=PLAIN)
    own = cost.methods[0]
    assert cost.gap_s == (-0.002, 0.014)
    assert own.earliest_s == pytest.approx(0.015)
    assert own.channel_earliest_s == pytest.approx([0.015] * 3)
    assert any("Earliest trustworthy latency: 15 ms" in words for words in cost.words)
    outside = (cost.latencies_s < -0.0025) | (cost.latencies_s > 0.0145)
    assert own.most_v[outside].max() == 0.0
    assert (own.median_v[~outside] > 0.0).all()
    assert (own.most_v >= own.median_v).all()


def test_filters_carry_the_error_beyond_the_gap_and_the_latency_follows() -> None:
    filters = Filter(highpass_hz=1.0, lowpass_hz=40.0, rate_hz=0.0)
    cost = cost_of(recording(), a_plan(filters), config=PLAIN)
    own = cost.methods[0]
    assert own.earliest_s is not None
    assert own.earliest_s > 0.016
    # By its definition: from there on below, and one step earlier not.
    at = int(np.argmin(np.abs(cost.latencies_s - own.earliest_s)))
    assert (own.most_share[at:] < SHARE).all()
    assert own.most_share[at - 1] >= SHARE
    largest = max(e for e in own.channel_earliest_s if e is not None)
    assert min(e for e in own.channel_earliest_s if e is not None) <= own.earliest_s <= largest + 1e-9


def test_where_errors_never_get_small_no_latency_is_trustworthy() -> None:
    # 10 mV that take 400 ms to fall, in a plan without a decay.
    found = recording()
    stored = found.stored.copy()
    decay = 1e5 * np.exp(-np.arange(1400) / 400.0)
    for k in range(12):
        onset = 2000 + 1500 * k
        stored[:, onset : onset + 1400] += decay
    left = ArrayRecording(stored, RATE_HZ, found.facts.markers)
    cost = cost_of(left, a_plan(), config=PLAIN)
    assert cost.methods[0].earliest_s is None
    assert any(words.startswith("No latency that was looked at is trustworthy") for words in cost.words)


def test_exceptions_have_latencies_of_their_own() -> None:
    the_plan = a_plan(channels={"E2": (-2.0, 25.0)})
    own = cost_of(recording(), the_plan, config=PLAIN).methods[0]
    assert own.channel_earliest_s == pytest.approx([0.015, 0.026, 0.015])
    assert own.earliest_s == pytest.approx(0.026)


def test_bad_channels_count_in_no_sum() -> None:
    found = recording()
    stored = found.stored.copy()
    stored[1] *= 30.0
    loud = ArrayRecording(stored, RATE_HZ, found.facts.markers)
    the_plan = replace(a_plan(), channels=replace(a_plan().channels, bad=("E2",)))
    cost, usual = cost_of(loud, the_plan, config=PLAIN), cost_of(found, the_plan, config=PLAIN)
    assert cost.methods[0].in_gap == usual.methods[0].in_gap
    assert cost.spread_v[1] > 20.0 * cost.spread_v[0]
    assert cost.methods[0].channel_most_v[1].max() > 5.0 * cost.methods[0].channel_most_v[0].max()


def test_errors_in_the_gap_are_those_of_lines_drawn_by_hand() -> None:
    # In white noise a line between two samples errs by the noise and what the two samples bring.
    rng = np.random.default_rng(6)
    white = np.round(10.0 * 15.0 * rng.standard_normal((3, 120_000)))
    found = with_pulses(white, RATE_HZ, [2000, 4000, 6000])
    cost = cost_of(found, a_plan(), config=PLAIN)
    share = np.arange(1, 18) / 18.0
    expected_v = 150.0 * STEP_V * np.sqrt(1.0 + np.mean(share**2 + (1.0 - share) ** 2))
    gap = cost.methods[0].in_gap
    assert gap.value == pytest.approx(expected_v, rel=0.03)
    assert gap.low < expected_v < gap.high
    assert f"In the gap the error is {1e6 * gap.value:.1f} \u00b5V" in cost.words[2]
    assert cost.spread_v == pytest.approx([150.0 * STEP_V] * 3, rel=0.03)
    inside = (cost.latencies_s > -0.0025) & (cost.latencies_s < 0.0145)
    # Of a normal distribution: half below 0.674 and most below 1.96 standard deviations.
    of_each = 150.0 * STEP_V * np.sqrt(1.0 + share**2 + (1.0 - share) ** 2)
    np.testing.assert_allclose(cost.methods[0].median_v[inside] / of_each, 0.674, rtol=0.25)
    np.testing.assert_allclose(cost.methods[0].most_v[inside] / of_each, 1.96, rtol=0.2)
    assert MOST == 0.95


def test_rhythms_suffer_at_the_pulse_and_not_long_after_it() -> None:
    cost = cost_of(recording(), a_plan(), config=PLAIN)
    rhythms = {(one.band.name, one.latency_s): one for one in cost.methods[0].rhythms}
    assert len(rhythms) == 16
    for band in ("theta", "alpha", "beta", "gamma"):
        at, after = rhythms[band, 0.0], rhythms[band, 0.2]
        assert at.amplitude.low <= at.amplitude.value <= at.amplitude.high
        assert at.amplitude_most.value > at.amplitude.value
        assert at.phase_most.value > at.phase.value
        assert 0.0 <= at.phase_most.value <= np.pi
        assert after.amplitude.value < 0.2 * at.amplitude.value
        assert after.phase.value < 0.2 * at.phase.value
    at = rhythms["alpha", 0.0]
    assert any(
        f"alpha {100 * at.amplitude.value:.0f} % and {np.degrees(at.phase.value):.0f}\u00b0, up to "
        f"{100 * at.amplitude_most.value:.0f} % and {np.degrees(at.phase_most.value):.0f}\u00b0" in words
        for words in cost.words
    )
    # The gap of 17 ms is a larger part of a faster rhythm's period.
    assert rhythms["gamma", 0.0].phase.value > rhythms["theta", 0.0].phase.value


def test_rhythms_that_the_filters_take_are_not_told() -> None:
    cost = cost_of(recording(), a_plan(Filter(highpass_hz=1.0, lowpass_hz=15.0, rate_hz=0.0)), config=PLAIN)
    assert {one.band.name for one in cost.methods[0].rhythms} == {"theta", "alpha"}


def test_responses_far_from_the_gap_come_back_whole() -> None:
    cost = cost_of(recording(), a_plan(window_ms=(-8.0, -2.0)))
    assert [one.latency_s for one in cost.methods[0].responses][:2] == [0.02, 0.03]
    for one in cost.methods[0].responses:
        assert one.ratio.value == pytest.approx(1.0, abs=1e-6)
        assert one.ratio.high - one.ratio.low < 1e-6
    assert any("with test responses of 3 to 9" in words for words in cost.words)
    assert any(words.endswith("ms: 100 % (100 to 100).") for words in cost.words)


def test_methods_whose_intervals_overlap_are_called_equal() -> None:
    cost = cost_of(recording(seconds=60), a_plan(), compare=True, config=PLAIN)
    assert cost.methods[0].method.fill is Fill.LINE
    assert {one.method.fill for one in cost.methods} == set(Fill) - {Fill.LEAVE}
    best = min(cost.methods, key=lambda one: one.in_gap.value)
    equal = [one for one in cost.methods if one is not best and one.in_gap.overlaps(best.in_gap)]
    words = next(words for words in cost.words if words.startswith(("Equal in the gap", "Smallest error")))
    assert words.startswith("Equal") is bool(equal)
    for one in (best, *equal):
        assert one.method.fill.value in words
    larger = [one for one in cost.methods if one is not best and one not in equal]
    told = next((words for words in cost.words if words.startswith("Larger")), "")
    assert all(one.method.fill.value in told for one in larger)
    # In white noise all knots are as good, and with one method there is nothing to compare.
    alone = cost_of(recording(seconds=60), a_plan(), config=PLAIN)
    assert not any("in the gap" in words for words in alone.words if words.startswith(("Equal", "Smallest")))


@pytest.mark.parametrize("side", list(Side))
def test_words_say_best_case_and_which_samples_shaped_the_fill(side: Side) -> None:
    cost = cost_of(recording(), a_plan(side=side), config=replace(PLAIN, most_gaps=25))
    assert cost.n_gaps == 25
    assert cost.words[0] == BEST_CASE
    after = [words for words in cost.words if "amples after the pulse shaped the fill" in words]
    assert len(after) == (side is not Side.BEFORE)


def test_the_same_is_found_every_time_and_whatever_is_compared() -> None:
    found = recording(seconds=60)
    alone, again = (cost_of(found, a_plan(), config=TransplantConfig(most_gaps=20)) for _ in range(2))
    among = cost_of(found, a_plan(), compare=True, config=TransplantConfig(most_gaps=20))
    for other in (again, among):
        assert other.methods[0].in_gap == alone.methods[0].in_gap
        assert other.methods[0].rhythms == alone.methods[0].rhythms
        assert other.methods[0].responses == alone.methods[0].responses
        np.testing.assert_array_equal(other.methods[0].most_v, alone.methods[0].most_v)


def test_it_can_be_cancelled_and_tells_how_far_it_is() -> None:
    found = recording(seconds=60)
    learned = learned_of(found, a_plan())
    work = repair_cost(found, learned)
    seen = [next(work) for _ in range(30)]
    work.close()
    assert all(step.stage for step in seen)
    steps = list(repair_cost(found, learned))
    assert all(0.0 <= step.done <= max(step.total, step.done * (step.total == 0)) for step in steps)


def test_too_few_stretches_are_one_clear_sentence() -> None:
    found = recording(seconds=25)
    with pytest.raises(InputError, match=r"only 6 stretches of 1\.00 s are free of pulses") as caught:
        cost_of(found, a_plan())
    assert str(caught.value).count(".") == 1  # within the number
    assert "\n" not in str(caught.value)
