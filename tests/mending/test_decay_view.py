"""The picture of all pulses shows decays subtracted, as the chain that writes does."""

from __future__ import annotations

import re
from dataclasses import replace

import numpy as np
import pytest

from pulsemend.mending.decay_words import decay_words
from pulsemend.mending.learned import Learned, learn
from pulsemend.mending.pulse_view import Pick, PulseRequest, first_batch, gather, ground_of, sketch, step_left
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.vocabulary import Decay, Fill
from pulsemend.progress import finish
from support.decay_cases import RATE_HZ, background, pulses, recording, with_decays
from support.engine_cases import UNTOUCHED, ArrayRecording, plan

ONSETS = list(range(5000, 190_000, 6500))


@pytest.fixture(scope="module")
def decaying() -> ArrayRecording:
    stored = np.round(0.1 * background(5, 40 * RATE_HZ, seed=3))
    stored = with_decays(stored, ONSETS, Decay.EXPONENTIAL, channels=slice(0, 2))
    return recording(
        with_decays(stored, ONSETS, Decay.EXPONENTIAL, size_uv=2000.0, channels=slice(3, 4)), ONSETS
    )


def _learned(rec: ArrayRecording, decay: Decay, fill: Fill = Fill.COVARIANCE) -> Learned:
    the_plan = plan(pulses=pulses(decay, fill), filter=UNTOUCHED, reference="as recorded")
    return finish(learn(rec, the_plan, NO_MARKS))


def _left_uv(view: object) -> float:
    repaired = view.repaired  # type: ignore[attr-defined]
    behind = (view.times_s > 0.0145) & (view.times_s < 0.1)  # type: ignore[attr-defined]
    return float(np.abs(repaired.median_v[behind]).max()) * 1e6


def test_picture_and_step_are_those_of_the_chain(decaying: ArrayRecording) -> None:
    with_fit, without = _learned(decaying, Decay.EXPONENTIAL), _learned(decaying, Decay.NONE)
    request = PulseRequest(Pick.ONE, "E4")
    view, plain = (finish(gather(decaying, ground_of(one), request)) for one in (with_fit, without))
    assert view is not None
    assert plain is not None
    assert _left_uv(plain) > 300.0
    assert _left_uv(view) < 15.0
    chain = with_fit.chain(decaying)
    first, stop = round(view.times_s[0] * RATE_HZ), round(view.times_s[-1] * RATE_HZ) + 1
    rows = np.array([chain.repaired(o + first, o + stop)[:, 3] * 1e-7 for o in ONSETS])
    before = rows[:, : round(-view.times_s[0] * RATE_HZ) - 10]
    rows -= before.mean(axis=1, keepdims=True)
    assert view.repaired is not None
    np.testing.assert_allclose(view.repaired.median_v, np.median(rows, axis=0), atol=2e-8)
    left, left_plain = (finish(step_left(decaying, ground_of(one))) for one in (with_fit, without))
    assert left is not None
    assert left_plain is not None
    assert left_plain.channel == "E4"
    assert left_plain.step_v > 5e-4
    assert left.step_v < 1e-5


@pytest.mark.parametrize("request_", [PulseRequest(Pick.ONE, "E1"), PulseRequest(Pick.WORST), PulseRequest()])
@pytest.mark.parametrize("fill", [Fill.LINE, Fill.COVARIANCE])
def test_a_first_picture_shows_the_decay_subtracted(
    decaying: ArrayRecording, request_: PulseRequest, fill: Fill
) -> None:
    earlier = ground_of(_learned(decaying, Decay.NONE))
    the_plan = plan(pulses=pulses(Decay.EXPONENTIAL, fill), filter=UNTOUCHED, reference="as recorded")
    request = first_batch(request_)
    ground = finish(sketch(decaying, the_plan, NO_MARKS, earlier, request))
    assert ground.provisional
    view = finish(gather(decaying, ground, request))
    assert view is not None
    assert view.provisional
    assert _left_uv(view) < 60.0
    # And with another kind, gap or none at all, it is learned anew, not taken over.
    none = replace(the_plan, pulses=replace(the_plan.pulses, decay=Decay.NONE))
    assert finish(sketch(decaying, none, NO_MARKS, ground, request)).estimates.decay is None


def test_words_tell_what_was_fitted_and_what_it_costs(decaying: ArrayRecording) -> None:
    learned = _learned(decaying, Decay.EXPONENTIAL)
    decay = learned.estimates.decay
    assert decay is not None
    (words,) = decay_words(learned.setup, learned.estimates)
    found = re.fullmatch(
        r"decay: fitted in 3 of 5 channels; until (\d+) ms after a pulse \((E\d)\) .*", words
    )
    assert found
    # The marks themselves: the last recorded sample that the chain flags in any channel.
    chain = learned.chain(decaying)
    cut = chain.cut(float(ONSETS[4]), 0.0, RATE_HZ)
    marked = chain.decay_fitted(cut)
    assert marked is not None
    last = int(np.flatnonzero(marked.any(axis=0))[-1])
    assert float(found[1]) == pytest.approx(1000.0 * (last + 1) / RATE_HZ, abs=0.51)
    assert marked[int(found[2][1]) - 1, last]
    assert words in learned.warnings
    plain = _learned(decaying, Decay.NONE)
    assert decay_words(plain.setup, plain.estimates) == ()


def test_words_where_nothing_was_fitted() -> None:
    quiet = recording(background(3, 40 * RATE_HZ, seed=2), ONSETS)
    learned = _learned(quiet, Decay.POWER)
    (words,) = decay_words(learned.setup, learned.estimates)
    assert words.startswith("decay: fitted in none of 3 channels; in ")
