"""Gaps filled where no pulse was: against samples filled by hand, and seen by nobody else."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.engine.chain import Chain
from pulsemend.model.plan import Filter, OtherGap, Plan, Pulses
from pulsemend.model.vocabulary import AcrossPulses, Fill, Precision
from pulsemend.signal.fills import FillConfig, Filler
from pulsemend.signal.gaps import Gap
from support.engine_cases import ArrayRecording, coloured, make_chain, plan, with_pulses

RATE_HZ = 5000
ONSETS = [7003, 21_001, 52_001]
MIRROR, EPOCH = 36_123, 35_000
"""Onset of the mirror gap, and anchor of the epoch of 0.5 s that holds it."""

WINDOWS = ((-10, 71), (1240, 1271))
"""Samples that the plan's windows cover from an onset."""


@pytest.fixture(scope="module")
def recording() -> ArrayRecording:
    return with_pulses(coloured(4, 70_000, RATE_HZ, 5), RATE_HZ, ONSETS)


def gap_plan(fill: Fill, across: AcrossPulses = AcrossPulses.FILLED) -> Plan:
    pulses = Pulses(window_ms=(-2.0, 14.0), fill=fill, also=(OtherGap((248.0, 254.0)),))
    return plan(pulses=pulses, filter=replace(Filter(), across_pulses=across), precision=Precision.DOUBLE)


def filled_by_hand(chain: Chain, recording: ArrayRecording, onset: int) -> NDArray[np.float64]:
    """Stored numbers in which the mirror gaps are filled with the plan's fill and nothing else is changed."""
    setup, known = chain.setup, chain.estimates.autocovariance
    filler = Filler(FillConfig(setup.fill, setup.side, setup.flank, RATE_HZ, known), 4, np.float64)
    x = recording.stored.T.copy()
    for start, stop in WINDOWS:
        filler.fill(x, 0, Gap(onset + start, onset + stop, setup.flank, setup.flank))
    return x.T


@pytest.mark.parametrize("fill", [Fill.LINE, Fill.CUBIC, Fill.COVARIANCE])
@pytest.mark.parametrize("across", AcrossPulses)
@pytest.mark.parametrize(("onset", "anchor"), [(MIRROR, EPOCH), (400, 100), (68_000, 67_400)])
def test_a_mirrored_epoch_is_the_same_signal_filled_by_hand(
    fill: Fill, across: AcrossPulses, onset: int, anchor: int, recording: ArrayRecording
) -> None:
    """In the middle of the recording and at both ends, where filters see it mirrored oddly."""
    chain = make_chain(recording, gap_plan(fill, across))
    by_hand = ArrayRecording(filled_by_hand(chain, recording, onset), RATE_HZ, recording.facts.markers)
    truth = Chain(by_hand, chain.setup, chain.estimates)
    cut = chain.cut(float(anchor), 0.0, 500)
    mirrored = chain.with_gaps_at([onset]).samples(cut)
    np.testing.assert_allclose(mirrored, truth.samples(cut), rtol=0, atol=1e-12)
    assert np.abs(mirrored - chain.samples(cut)).max() > 1e-7  # else nothing was compared


def test_the_common_chain_and_other_mirrored_epochs_see_nothing_of_it(recording: ArrayRecording) -> None:
    """Overlapping epochs are read in between, from the same recording, to the last bit."""
    the_plan = gap_plan(Fill.LINE)
    fresh = make_chain(recording, the_plan)
    cuts = [fresh.cut(float(EPOCH + by), 0.0, 500) for by in (0, 700, 1400)]
    mirrors = [[MIRROR], [MIRROR + 50], [MIRROR + 900]]
    plain = [make_chain(recording, the_plan).samples(cut) for cut in cuts]
    alone = [
        make_chain(recording, the_plan).with_gaps_at(onsets).samples(cut)
        for cut, onsets in zip(cuts, mirrors, strict=True)
    ]
    for cut, onsets, without, with_own in zip(cuts, mirrors, plain, alone, strict=True):
        np.testing.assert_array_equal(fresh.samples(cut), without)
        np.testing.assert_array_equal(fresh.with_gaps_at(onsets).samples(cut), with_own)
        np.testing.assert_array_equal(fresh.samples(cut), without)
        assert not fresh.replaced(cut).any()


def test_marks_are_those_of_an_epoch_with_a_pulse_at_the_same_latency() -> None:
    recording = with_pulses(coloured(3, 70_000, RATE_HZ, 6), RATE_HZ, ONSETS)
    pulses = Pulses(
        window_ms=(-2.0, 14.0),
        fill=Fill.LINE,
        also=(OtherGap((248.0, 254.0)),),
        channels={"E2": (-2.0, 25.0)},
    )
    chain = make_chain(recording, plan(pulses=pulses))
    (first, *_) = [onset for onset in chain.estimates.onsets if onset > 20_000]
    pulsed = chain.cut(float(first - 800), 0.0, 500)
    mirrored = chain.with_gaps_at([EPOCH + 800])
    cut = chain.cut(float(EPOCH), 0.0, 500)
    # Both anchors at the same place between output samples, so that the marks are the same samples.
    moved = chain.cut(float(EPOCH + (first - 800 - EPOCH) % 5), 0.0, 500)
    marks = chain.with_gaps_at([EPOCH + (first - 800 - EPOCH) % 5 + 800]).replaced(moved)
    np.testing.assert_array_equal(marks, chain.replaced(pulsed))
    assert mirrored.replaced_share(cut) == mirrored.replaced(cut).mean() > 0.0
    assert mirrored.replaced(cut)[1].sum() > mirrored.replaced(cut)[0].sum()


def test_gaps_left_open_are_missing_there_and_nowhere_else(recording: ArrayRecording) -> None:
    chain = make_chain(recording, gap_plan(Fill.LEAVE))
    cut = chain.cut(float(EPOCH), 0.0, 500)
    mirrored = chain.with_gaps_at([MIRROR])
    np.testing.assert_array_equal(np.isnan(mirrored.samples(cut)), mirrored.replaced(cut))
    assert np.isfinite(chain.samples(cut)).all()
