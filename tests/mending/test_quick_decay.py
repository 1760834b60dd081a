"""Decays of a first picture: like those of the whole fit, from few pulses."""

from __future__ import annotations

import numpy as np
import pytest

from pulsemend.engine.decay import QUICK_PULSES, learn_decay
from pulsemend.engine.estimates import Estimates
from pulsemend.mending.learned import Learned, learn
from pulsemend.mending.pulse_view import Pick, PulseRequest, gather, ground_of, sketch
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.vocabulary import Decay, Fill
from pulsemend.progress import finish
from support.decay_cases import RATE_HZ, background, pulses, recording, with_decays
from support.engine_cases import UNTOUCHED, ArrayRecording, plan

ALONE = list(range(6000, 290_000, 7000))
SECOND_OF_PAIRS = [onset + 1500 for onset in ALONE[::4]]
ONSETS = sorted([*ALONE, *SECOND_OF_PAIRS])


class Counting(ArrayRecording):
    """Counts the samples that are read."""

    n_read = 0

    def read(self, start, stop, out, offset=None) -> None:  # type: ignore[no-untyped-def]  # noqa: ANN001
        self.n_read += stop - start
        super().read(start, stop, out, offset)


@pytest.fixture(scope="module")
def decaying() -> Counting:
    """Decays of 1 mV, one pulse in four with a second one 300 ms later."""
    stored = np.round(0.1 * background(3, 60 * RATE_HZ, seed=3))
    made = recording(with_decays(stored, ONSETS, Decay.EXPONENTIAL), ONSETS)
    return Counting(made.stored, RATE_HZ, made.facts.markers)


@pytest.fixture(scope="module")
def learned(decaying: Counting) -> Learned:
    the_plan = plan(pulses=pulses(Decay.EXPONENTIAL), filter=UNTOUCHED, reference="as recorded")
    return finish(learn(decaying, the_plan, NO_MARKS))


def _estimates(learned: Learned) -> Estimates:
    assert learned.estimates.decay is not None
    return learned.estimates


def test_shape_is_nearly_that_of_the_whole_fit(decaying: Counting, learned: Learned) -> None:
    onsets = learned.estimates.onsets
    assert len(onsets) > 1.5 * QUICK_PULSES
    decaying.n_read = 0
    found = finish(learn_decay(decaying, learned.setup, onsets, None, np.array([1])))
    # 80 ms after each of a few gaps, and levels a quarter of a second long: not the whole recording.
    assert decaying.n_read <= QUICK_PULSES * 0.4 * RATE_HZ
    assert found.columns.tolist() == [1]
    assert found.amplitudes.shape == (1, len(onsets))
    np.testing.assert_array_equal(found.amplitudes, 1.0)
    times_s = np.linspace(0.0, 0.08, 50)
    whole = _estimates(learned).decay
    assert whole is not None
    # Pulses differ in size by a tenth: the medians over 30 and over 51 of them differ by less.
    np.testing.assert_allclose(found.shape(0).at(times_s), whole.shape(1).at(times_s), atol=0.1 * 4.9e-4)


def test_another_fill_takes_the_decays_over(decaying: Counting, learned: Learned) -> None:
    line = plan(pulses=pulses(Decay.EXPONENTIAL, Fill.CUBIC), filter=UNTOUCHED, reference="as recorded")
    request = PulseRequest(Pick.ONE, "E2")
    ground = finish(sketch(decaying, line, NO_MARKS, ground_of(learned), request))
    assert ground.estimates.decay is learned.estimates.decay
    # Not so with another pulse, whose amplitude nobody knows.
    added = Marks(pulses_added=(ALONE[2] + 3500,))
    again = finish(sketch(decaying, line, added, ground_of(learned), request)).estimates
    assert again.decay is not None
    assert again.decay is not learned.estimates.decay
    assert again.decay.amplitudes.shape[1] == len(ONSETS) + 1


@pytest.mark.parametrize("pick", [Pick.ONE, Pick.ALL, Pick.WORST])
def test_the_very_first_picture_fits_few_pulses_too(decaying: Counting, pick: Pick) -> None:
    the_plan = plan(pulses=pulses(Decay.EXPONENTIAL), filter=UNTOUCHED, reference="as recorded")
    ground = finish(sketch(decaying, the_plan, NO_MARKS, None, PulseRequest(pick, "E2")))
    found = ground.estimates.decay
    assert ground.provisional
    assert found is not None
    assert 0 < found.n_pulses <= QUICK_PULSES
    assert np.isnan(found.share).all()
    assert "E2" in [ground.setup.channels[column].name for column in found.columns]


def test_a_first_worst_channel_is_none_whose_decay_was_not_looked_at() -> None:
    # More channels decay than a first picture fits: those left over must not pass for the worst.
    stored = np.round(0.1 * background(14, 30 * RATE_HZ, seed=8))
    onsets = ALONE[:18]
    for channel in range(14):
        size_uv = 2000.0 - 40.0 * channel
        one = slice(channel, channel + 1)
        stored = with_decays(stored, onsets, Decay.EXPONENTIAL, size_uv=size_uv, channels=one)
    the_plan = plan(pulses=pulses(Decay.EXPONENTIAL), filter=UNTOUCHED, reference="as recorded")
    made = recording(stored, onsets)
    ground = finish(sketch(made, the_plan, NO_MARKS, None, PulseRequest(Pick.WORST)))
    assert ground.estimates.decay is not None
    assert ground.estimates.decay.columns.size < 14
    view = finish(gather(made, ground, PulseRequest(Pick.WORST)))
    assert view is not None
    assert view.leftover_v is not None
    assert view.leftover_v < 20e-6
