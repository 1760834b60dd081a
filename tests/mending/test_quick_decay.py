"""Decays of a first picture: like those of the whole fit, from few pulses that stand alone."""

from __future__ import annotations

import numpy as np
import pytest

from pulsemend.engine.estimates import Estimates
from pulsemend.mending.learned import Learned, learn
from pulsemend.mending.pulse_view import Pick, PulseRequest, ground_of, sketch
from pulsemend.mending.quick_decay import MOST_PULSES, quick_decay
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
    assert len(onsets) > 2 * MOST_PULSES
    decaying.n_read = 0
    found = finish(quick_decay(decaying, learned.setup, onsets, np.array([1])))
    # 80 ms after each of a few gaps, and levels a quarter of a second long: not the whole recording.
    assert decaying.n_read <= MOST_PULSES * 0.4 * RATE_HZ
    assert found.columns.tolist() == [1]
    assert found.amplitudes.shape == (1, len(onsets))
    np.testing.assert_array_equal(found.amplitudes, 1.0)
    times_s = np.linspace(0.0, 0.08, 50)
    whole = _estimates(learned).decay
    assert whole is not None
    # Pulses differ in size by a tenth: the medians over 24 and over 51 of them differ by less.
    np.testing.assert_allclose(found.shape(0).at(times_s), whole.shape(1).at(times_s), atol=0.1 * 4.9e-4)


def test_where_few_stand_alone_all_are_taken(decaying: Counting, learned: Learned) -> None:
    few = [onset for onset in learned.estimates.onsets if onset < 100_000]
    near = sorted([*few, *(onset + 900 for onset in few)])
    assert len(near) > MOST_PULSES
    found = finish(quick_decay(decaying, learned.setup, near, np.array([0])))
    assert found.amplitudes.shape[1] == len(near)
    assert found.n_pulses > MOST_PULSES


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
    assert found.n_pulses == MOST_PULSES
    assert np.isnan(found.share).all()
    assert "E2" in [ground.setup.channels[column].name for column in found.columns]
