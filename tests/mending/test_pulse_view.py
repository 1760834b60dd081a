"""All pulses at zero: against signals whose truth is known, and against the chain that writes."""

from __future__ import annotations

import itertools
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.engine.setup import Setup
from pulsemend.mending.learned import Learned, learn
from pulsemend.mending.pulse_view import (
    PROPOSED_MS,
    WIDEST_SPAN_MS,
    Ground,
    Pick,
    PulseRequest,
    PulseView,
    edge_ms,
    first_batch,
    gather,
    ground_of,
    on_sample_ms,
    sketch,
    step_left,
)
from pulsemend.model.marks import NO_MARKS, Marks, MovedPulse
from pulsemend.model.plan import (
    About,
    Channels,
    EpochRule,
    Epochs,
    Export,
    Filter,
    MarkerPlan,
    OtherGap,
    Plan,
    Pulses,
    Slot,
)
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fill, PulseState, Role, Side
from pulsemend.progress import finish
from pulsemend.signal.gaps import window_to_samples
from pulsemend.simulate.memory import MemoryForm, MemoryRecording
from pulsemend.units import ms_to_s

RATE_HZ = 1000.0
ONSETS = tuple(range(2000, 20_000, 2000))
LATE = 3
"""Samples by which every artifact is later than its marker."""
NAMES = ("Fz", "Cz", "Pz", "Oz")
NOISE_V = 1e-7

PLAN = Plan(
    about=About("steps"),
    markers=(MarkerPlan("tick", Role.PULSE),),
    trial=(Slot("pulse", Role.PULSE),),
    pulses=Pulses(window_ms=(-2.0, 14.0), fill=Fill.LINE),
    filter=Filter(0.0, 0.0, 0.0),
    channels=Channels(reference="as recorded"),
    epochs=Epochs(1.0, (EpochRule("before", "pulse", -1.5),)),
    export=Export(),
)


def steps_recording(boundaries: tuple[int, ...] = ()) -> MemoryRecording:
    """Pulse n is a spike of n + 1 mV at its onset; then channel c stands k x 10 uV higher for 50 ms.

    k is 1, 2, 4, 3 in the order of the channels, so Pz keeps the largest step.
    """
    rng = np.random.default_rng(7)
    volts = rng.normal(0.0, NOISE_V, (22_000, len(NAMES)))
    for number, onset in enumerate(ONSETS):
        volts[onset : onset + 2] += (number + 1) * 1e-3
        volts[onset : onset + 65] += np.array([1.0, 2.0, 4.0, 3.0]) * 1e-5
    markers = [Marker(onset - LATE, "tick") for onset in ONSETS]
    return MemoryRecording(volts, MemoryForm(RATE_HZ, NAMES, markers=markers, boundaries=boundaries))


def with_pulses(**changes: object) -> Plan:
    return replace(PLAN, pulses=replace(PLAN.pulses, **changes))  # type: ignore[arg-type]


def learned(plan: Plan = PLAN, marks: Marks = NO_MARKS, recording: MemoryRecording | None = None) -> Learned:
    return finish(learn(recording or steps_recording(), plan, marks))


def view_of(ground: Ground, request: PulseRequest, recording: MemoryRecording | None = None) -> PulseView:
    view = finish(gather(recording or steps_recording(), ground, request))
    assert view is not None
    return view


def at(view: PulseView, values: NDArray[np.float32], ms: float) -> float:
    return float(values[int(np.flatnonzero(np.isclose(view.times_s, ms / 1000.0))[0])])


def test_onsets_stand_at_zero_and_the_middle_half_is_that_of_the_pulses() -> None:
    view = view_of(ground_of(learned()), PulseRequest(Pick.ONE, "Fz"))
    assert view.n_shown == view.n_pulses == len(ONSETS) == 9
    assert view.times_s[0] == pytest.approx(-0.080)
    assert view.times_s[-1] == pytest.approx(0.120)
    # Spikes of 1 to 9 mV on a step of 10 uV.
    assert at(view, view.recorded.median_v, 0.0) == pytest.approx(5.01e-3, abs=2e-6)
    assert at(view, view.recorded.low_v, 0.0) == pytest.approx(3.01e-3, abs=2e-6)
    assert at(view, view.recorded.high_v, 0.0) == pytest.approx(7.01e-3, abs=2e-6)
    assert at(view, view.recorded.median_v, -1.0) == pytest.approx(0.0, abs=1e-6)


def test_line_fill_joins_the_levels_on_either_side() -> None:
    view = view_of(ground_of(learned()), PulseRequest(Pick.ONE, "Pz"))
    assert view.repaired is not None
    # From 0 uV at -3 ms to 40 uV at 15 ms, so 20 uV in the middle.
    assert at(view, view.repaired.median_v, 6.0) == pytest.approx(20e-6, abs=0.5e-6)
    outside = (view.times_s < -0.0025) | (view.times_s > 0.0145)
    assert np.array_equal(view.repaired.median_v[outside], view.recorded.median_v[outside])


def test_worst_channel_keeps_the_largest_step() -> None:
    view = view_of(ground_of(learned()), PulseRequest(Pick.WORST))
    assert view.channel == "Pz"
    assert view.leftover_v == pytest.approx(40e-6, abs=0.5e-6)


def test_step_left_is_that_of_the_worst_channel() -> None:
    left = finish(step_left(steps_recording(), ground_of(learned())))
    assert left is not None
    assert left.channel == "Pz"
    assert left.step_v == pytest.approx(40e-6, abs=0.5e-6)
    # The steps last 65 ms; a gap that outlasts them leaves nothing.
    longer = ground_of(learned(with_pulses(window_ms=(-2.0, 70.0))))
    nothing = finish(step_left(steps_recording(), longer))
    assert nothing is not None
    assert nothing.step_v < 2e-6


def test_bad_channel_is_never_the_worst_nor_part_of_all() -> None:
    ground = ground_of(learned(marks=Marks(bad=("Pz",))))
    assert view_of(ground, PulseRequest(Pick.WORST)).channel == "Oz"
    everyone = view_of(ground, PulseRequest(Pick.ALL))
    # Of steps of 10, 20 and 30 uV.
    assert at(everyone, everyone.recorded.median_v, 30.0) == pytest.approx(20e-6, abs=0.5e-6)
    # Chosen by name it is shown.
    assert view_of(ground, PulseRequest(Pick.ONE, "Pz")).channel == "Pz"


def test_all_channels_are_their_median() -> None:
    view = view_of(ground_of(learned()), PulseRequest(Pick.ALL))
    assert view.channel == ""
    assert view.leftover_v is None
    # Of 10, 20, 30 and 40 uV.
    assert at(view, view.recorded.median_v, 30.0) == pytest.approx(25e-6, abs=0.5e-6)


@pytest.mark.parametrize("fill", [fill for fill in Fill if fill is not Fill.LEAVE])
def test_repaired_is_what_the_chain_writes(fill: Fill) -> None:
    recording = steps_recording()
    found = learned(with_pulses(fill=fill), recording=recording)
    chain = found.chain(recording)
    expected = []
    for onset in found.estimates.onsets:
        x = chain.repaired(onset - 80, onset + 121)[:, 2] * found.setup.scale_v[2]
        expected.append(x - x[:78].mean())
    view = view_of(ground_of(found), PulseRequest(Pick.ONE, "Pz"), recording)
    assert view.repaired is not None
    assert np.allclose(view.repaired.median_v, np.median(expected, axis=0), rtol=0, atol=1e-9)


@pytest.mark.parametrize("fill", list(Fill))
@pytest.mark.parametrize("pick", list(Pick))
def test_provisional_picture_of_unchanged_settings_is_the_final_one(fill: Fill, pick: Pick) -> None:
    plan = with_pulses(fill=fill, side=Side.BEFORE)
    if fill is Fill.LEAVE:
        plan = replace(plan, export=replace(plan.export, formats=()))
    ground = ground_of(learned(plan))
    request = PulseRequest(pick, "Cz")
    again = finish(sketch(steps_recording(), plan, NO_MARKS, ground, request))
    assert again.provisional
    first, last = view_of(again, request), view_of(ground, request)
    assert first.provisional
    assert not last.provisional
    assert first.repaired is not None
    assert last.repaired is not None
    assert np.array_equal(first.repaired.median_v, last.repaired.median_v, equal_nan=True)
    assert np.array_equal(first.recorded.high_v, last.recorded.high_v)


def test_edit_shows_with_the_estimates_of_before() -> None:
    before = ground_of(learned())
    plan = with_pulses(window_ms=(-4.0, 70.0))
    recording = steps_recording()
    ground = finish(sketch(recording, plan, NO_MARKS, before, PulseRequest(Pick.ONE, "Pz")))
    quick = view_of(ground, PulseRequest(Pick.ONE, "Pz"))
    final = view_of(ground_of(learned(plan)), PulseRequest(Pick.ONE, "Pz"))
    assert quick.windows_s == final.windows_s == ((-0.004, 0.070),)
    assert quick.repaired is not None
    assert final.repaired is not None
    assert np.allclose(quick.repaired.median_v, final.repaired.median_v, atol=1e-9, rtol=0)


def test_covariance_can_be_shown_where_none_was_learned() -> None:
    before = ground_of(learned())
    assert before.estimates.autocovariance is None
    plan = with_pulses(fill=Fill.COVARIANCE)
    for pick in Pick:
        request = PulseRequest(pick, "Cz")
        ground = finish(sketch(steps_recording(), plan, NO_MARKS, before, request))
        assert ground.estimates.autocovariance is not None
        view = view_of(ground, request)
        assert view.repaired is not None
        # Noise without memory tells nothing of a gap: the mean is the best guess, not the spike of 5 mV.
        assert np.abs(view.repaired.median_v).max() < 60e-6


def test_without_earlier_estimates_the_recording_is_learned_from() -> None:
    ground = finish(sketch(steps_recording(), PLAN, NO_MARKS, None, PulseRequest()))
    assert ground.estimates.onsets == ONSETS


def test_undecided_gap_shows_the_pulses_as_recorded_at_their_onsets() -> None:
    plan = with_pulses(window_ms=None)
    ground = finish(sketch(steps_recording(), plan, NO_MARKS, None, PulseRequest()))
    assert ground.estimates.onsets == ONSETS
    view = view_of(ground, PulseRequest(Pick.ONE, "Fz"))
    assert not view.decided
    assert view.repaired is None
    assert view.windows_s == (tuple(ms_to_s(edge) for edge in PROPOSED_MS),)
    assert at(view, view.recorded.median_v, 0.0) == pytest.approx(5.01e-3, abs=2e-6)


def test_open_ends_of_the_plan_do_not_keep_pulses_from_being_seen() -> None:
    plan = replace(PLAN, filter=Filter(1.0, 400.0, 700.0), channels=Channels(reference=("nowhere",)))
    ground = finish(sketch(steps_recording(), plan, NO_MARKS, None, PulseRequest()))
    assert view_of(ground, PulseRequest()).n_shown == 9


def test_marks_move_add_and_remove_pulses_at_once() -> None:
    marks = Marks(
        pulses_added=(15_000,),
        pulses_moved=(MovedPulse(ONSETS[1] - LATE, ONSETS[1] + 7),),
        pulses_removed=(ONSETS[0] - LATE,),
    )
    ground = finish(sketch(steps_recording(), PLAN, marks, ground_of(learned()), PulseRequest()))
    moved = ONSETS[1] + 7
    assert ground.estimates.onsets == tuple(sorted((moved, *ONSETS[2:], 15_000)))
    states = {pulse.sample: pulse.state for pulse in ground.estimates.pulses}
    assert states[moved] is PulseState.MOVED
    assert states[15_000] is PulseState.ADDED
    assert states[ONSETS[2]] is PulseState.ALIGNED
    back = finish(sketch(steps_recording(), PLAN, NO_MARKS, ground, PulseRequest()))
    # Where it was before somebody moved it is not known any more: its marker stands in until it is learned.
    assert ONSETS[1] - LATE in back.estimates.onsets
    assert 15_000 not in back.estimates.onsets


def test_gaps_left_empty_are_holes() -> None:
    plan = with_pulses(fill=Fill.LEAVE, also=(OtherGap((40.0, 45.0)),))
    plan = replace(plan, export=replace(plan.export, formats=()))
    view = view_of(ground_of(learned(plan)), PulseRequest(Pick.ONE, "Fz"))
    assert view.repaired is not None
    holes = view.times_s[np.isnan(view.repaired.median_v)]
    expected = [*range(-2, 15), *range(40, 46)]
    assert np.allclose(holes, np.array(expected) / 1000.0)
    assert np.isfinite(view.recorded.median_v).all()
    assert view.flanks == (0, 0)


def test_channel_with_a_gap_of_its_own_shows_that_one() -> None:
    plan = with_pulses(channels={"Pz": (-2.0, 70.0)})
    ground = ground_of(learned(plan, Marks(gaps_ms={"Oz": (-5.0, 10.0)})))
    assert view_of(ground, PulseRequest(Pick.ONE, "Pz")).windows_s == ((-0.002, 0.070),)
    assert view_of(ground, PulseRequest(Pick.ONE, "Oz")).windows_s == ((-0.005, 0.010),)
    assert view_of(ground, PulseRequest(Pick.ALL)).windows_s == ((-0.002, 0.014),)
    # Nothing is left after the longer gap of Pz, so another channel is the worst.
    assert view_of(ground, PulseRequest(Pick.WORST)).channel == "Oz"


@pytest.mark.parametrize(
    ("side", "flanks"), [(Side.BOTH, (5, 5)), (Side.BEFORE, (5, 0)), (Side.AFTER, (0, 5))]
)
def test_flanks_are_those_the_fill_may_use(side: Side, flanks: tuple[int, int]) -> None:
    ground = ground_of(learned(with_pulses(side=side, flank_ms=5.0)))
    assert view_of(ground, PulseRequest()).flanks == flanks


def test_pulses_at_an_end_or_a_break_are_not_shown() -> None:
    recording = steps_recording(boundaries=(ONSETS[3] + 100,))
    marks = Marks(pulses_added=(30, 21_900))
    view = view_of(ground_of(learned(marks=marks, recording=recording)), PulseRequest(), recording)
    assert (view.n_shown, view.n_pulses) == (8, 11)


def test_no_picture_without_pulses_far_enough_from_the_ends() -> None:
    removed = tuple(onset - LATE for onset in ONSETS)
    for marks in (Marks(pulses_removed=removed), Marks(pulses_removed=removed, pulses_added=(30,))):
        ground = ground_of(learned(marks=marks))
        for pick in Pick:
            assert finish(gather(steps_recording(), ground, PulseRequest(pick))) is None


def test_wider_span_is_read_up_to_a_limit_and_a_narrow_one_keeps_the_usual() -> None:
    ground = ground_of(learned())
    wide = view_of(ground, PulseRequest(span_ms=(-9999.0, 300.0)))
    assert wide.times_s[0] * 1000.0 == pytest.approx(WIDEST_SPAN_MS[0])
    assert wide.times_s[-1] * 1000.0 == pytest.approx(300.0)
    narrow = view_of(ground, PulseRequest(span_ms=(-1.0, 1.0)))
    assert narrow.times_s[0] * 1000.0 == pytest.approx(-80.0)


def test_first_batch_is_spread_over_the_recording() -> None:
    ground = ground_of(learned())
    assert first_batch(PulseRequest(Pick.ONE, "Fz")).most == 40
    view = view_of(ground, PulseRequest(Pick.ONE, "Fz", most=3))
    assert (view.n_shown, view.n_pulses) == (3, 9)
    # The first, middle and last spike: 1, 5 and 9 mV.
    assert at(view, view.recorded.low_v, 0.0) == pytest.approx(3.01e-3, abs=2e-6)
    assert at(view, view.recorded.median_v, 0.0) == pytest.approx(5.01e-3, abs=2e-6)


def test_channels_used_now_decide_whether_earlier_estimates_serve() -> None:
    before = ground_of(learned())
    less: Setup = replace(before.setup, used=before.setup.used[:2])
    ground = finish(sketch(steps_recording(), PLAN, NO_MARKS, replace(before, setup=less), PulseRequest()))
    assert ground.estimates.offset.shape == (4,)


@pytest.mark.parametrize("rate_hz", [250.0, 1000.0, 1024.0, 2048.0, 4882.8125, 5000.0, 9600.0, 25_000.0])
def test_edges_on_samples_replace_exactly_these(rate_hz: float) -> None:
    for first, last in itertools.product(range(-60, 3, 7), range(5, 400, 37)):
        window_s = ms_to_s(edge_ms(first, rate_hz)), ms_to_s(edge_ms(last, rate_hz))
        assert window_to_samples(0, window_s, rate_hz) == (first, last + 1)
        # A field shows three digits of it, and gives it back.
        assert on_sample_ms(round(edge_ms(last, rate_hz), 3), rate_hz) == edge_ms(last, rate_hz)


def test_times_between_samples_stay_as_typed() -> None:
    assert on_sample_ms(-2.25, 1000.0) == -2.25
    assert on_sample_ms(14.0, 2048.0) == 14.0
