"""Evidence beside the choice of a decay: against decays of known size and the marks that the chain writes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pulsemend.engine.decay import DecayEstimates
from pulsemend.mending.decay_evidence import absorption_view, decay_summary, why_not
from pulsemend.mending.learned import Learned, learn
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.vocabulary import Decay
from pulsemend.progress import finish
from support.decay_cases import GAP, RATE_HZ, background, decay_uv, pulses, recording, with_decays
from support.engine_cases import UNTOUCHED, ArrayRecording, plan

ONSETS = list(range(5000, 190_000, 6500))


@pytest.fixture(scope="module")
def decaying() -> ArrayRecording:
    """Decays of 1 mV in E1 and E2, of 2 mV in E4, none in E3 and E5."""
    stored = np.round(0.1 * background(5, 40 * RATE_HZ, seed=3))
    stored = with_decays(stored, ONSETS, Decay.EXPONENTIAL, channels=slice(0, 2))
    stored = with_decays(stored, ONSETS, Decay.EXPONENTIAL, size_uv=2000.0, channels=slice(3, 4))
    return recording(stored, ONSETS)


@pytest.fixture(scope="module")
def learned(decaying: ArrayRecording) -> Learned:
    the_plan = plan(pulses=pulses(Decay.EXPONENTIAL), filter=UNTOUCHED, reference="as recorded")
    return finish(learn(decaying, the_plan, NO_MARKS))


def _decay(learned: Learned) -> DecayEstimates:
    assert learned.estimates.decay is not None
    return learned.estimates.decay


def test_summary_counts_and_finds_the_largest(learned: Learned) -> None:
    found = decay_summary(learned.setup, _decay(learned))
    assert (found.n_fitted, found.n_channels) == (3, 5)
    assert [one.channels for one in found.left_alone] == [("E3", "E5")]
    assert found.left_alone[0].reason
    assert found.largest == "E4"
    left_uv = float(decay_uv(Decay.EXPONENTIAL)[GAP[1]])
    assert found.largest_v == pytest.approx(2e-6 * left_uv, rel=0.05)
    assert found.median_v == pytest.approx(1e-6 * left_uv, rel=0.05)
    assert found.n_pulses == _decay(learned).n_pulses


def test_a_channel_without_a_fit_says_why(learned: Learned) -> None:
    decay = _decay(learned)
    assert why_not(learned.setup, decay, "E3") == decay.reasons[2]
    assert why_not(learned.setup, decay, "E1") == ""
    assert why_not(learned.setup, decay, "nowhere") == ""
    assert absorption_view(learned.setup, decay, "E3") is None


@pytest.mark.parametrize(("channel", "column"), [("E1", 0), ("E4", 3)])
def test_marked_stretches_are_those_that_the_chain_writes(
    decaying: ArrayRecording, learned: Learned, channel: str, column: int
) -> None:
    view = absorption_view(learned.setup, _decay(learned), channel)
    assert view is not None
    chain = learned.chain(decaying)
    written = chain.decay_fitted(chain.cut(float(learned.estimates.onsets[4]), 0.0, RATE_HZ))
    assert written is not None
    assert written[column].any()
    times_s = np.arange(RATE_HZ) / RATE_HZ
    shown = np.zeros(RATE_HZ, dtype=np.bool_)
    for start_s, stop_s in view.marked_s:
        shown |= (times_s >= start_s) & (times_s < stop_s)
    # They are told to a millisecond, which is five samples, at either end.
    edges = np.flatnonzero(np.diff(written[column].astype(np.int8)))
    far = np.abs(np.arange(RATE_HZ)[:, None] - edges).min(axis=1) > 6
    np.testing.assert_array_equal(shown[far], written[column, far])


def test_median_over_channels_has_most_of_them_in_its_band(learned: Learned) -> None:
    decay = _decay(learned)
    view = absorption_view(learned.setup, decay)
    assert view is not None
    assert view.n_channels == 3
    np.testing.assert_allclose(view.share, np.median(decay.share, axis=0))
    assert np.all(view.low <= view.share)
    assert np.all(view.share <= view.high)
    one = absorption_view(learned.setup, decay, "E4")
    assert one is not None
    np.testing.assert_array_equal(one.share, decay.share[2])


def test_latencies_within_the_gap_are_left_out(decaying: ArrayRecording) -> None:
    longer = replace(pulses(Decay.EXPONENTIAL), window_ms=(-2.0, 35.0))
    the_plan = plan(pulses=longer, filter=UNTOUCHED, reference="as recorded")
    found = finish(learn(decaying, the_plan, NO_MARKS))
    for channel in ("", "E4"):
        view = absorption_view(found.setup, _decay(found), channel)
        assert view is not None
        assert view.latencies_s[0] == pytest.approx(0.040)
        assert np.all(np.isfinite(view.share))
        assert min(start_s for start_s, _ in view.marked_s) >= 0.035


def test_without_a_fit_there_is_nothing_to_show() -> None:
    quiet = recording(background(2, 40 * RATE_HZ, seed=2), ONSETS)
    the_plan = plan(pulses=pulses(Decay.POWER), filter=UNTOUCHED, reference="as recorded")
    found = finish(learn(quiet, the_plan, NO_MARKS))
    summary = decay_summary(found.setup, _decay(found))
    assert (summary.n_fitted, summary.largest, summary.largest_v) == (0, "", 0.0)
    assert sum(len(one.channels) for one in summary.left_alone) == 2
    assert absorption_view(found.setup, _decay(found)) is None
