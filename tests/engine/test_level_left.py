"""What is left at the gap's end is measured against truth, and nothing is seen where nothing was put."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pulsemend.engine.chain import Chain
from pulsemend.engine.estimates import Estimates
from pulsemend.engine.fit import basis_of, fit
from pulsemend.engine.setup import bind
from pulsemend.mending.gap_findings import gap_warnings
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import Filter, Pulses
from pulsemend.model.vocabulary import Decay, Fill, Side
from pulsemend.progress import finish
from support import engine_cases
from support.decay_cases import GAP, RATE_HZ, add_evoked, background, decay_uv, with_decays
from support.engine_cases import ArrayRecording, make_chain, with_pulses

N_CHANNELS = 6
N_SAMPLES = 40 * RATE_HZ
PULSES = Pulses(window_ms=(-2.0, 14.0), fill=Fill.LINE)
ALONE = [RATE_HZ + 4000 * place for place in range(45)]


def recording(size_uv: float = 0.0, onsets: list[int] | None = None, seed: int = 3) -> ArrayRecording:
    """Background and evoked responses of 9 uV, with decays in the first two channels."""
    onsets = onsets or ALONE
    stored = add_evoked(background(N_CHANNELS, N_SAMPLES, seed), onsets)
    if size_uv:
        stored = with_decays(stored, onsets, Decay.EXPONENTIAL, size_uv=size_uv, channels=slice(0, 2))
    return with_pulses(stored, RATE_HZ, onsets)


def learned(source: ArrayRecording, pulses: Pulses = PULSES) -> tuple[Chain, Estimates]:
    chain = make_chain(source, engine_cases.plan(pulses=pulses))
    return chain, chain.estimates


@pytest.mark.parametrize("size_uv", [100.0, -300.0, 1000.0])
def test_a_decay_is_told_with_its_size_and_channels(size_uv: float) -> None:
    chain, estimates = learned(recording(size_uv))
    left_uv = estimates.level_left_v
    assert left_uv is not None
    true_uv = decay_uv(Decay.EXPONENTIAL, size_uv)[GAP[1] : GAP[1] + 5].mean()
    # Four standard errors of a median over 40 pulses, of the background and of the decay's own spread.
    error_uv = 4.0 * 1.2533 * np.hypot(15.0, 0.1 * true_uv) / np.sqrt(40)
    assert 1e6 * left_uv[:2] == pytest.approx(true_uv, abs=error_uv)
    (words,) = gap_warnings(chain.setup, estimates)
    assert "2 of 6 EEG channels are still 20 uV or more" in words
    assert f"{1e6 * left_uv[0]:+.0f} uV" in words
    assert "E1" in words
    assert "E3" not in words


def test_nothing_is_told_where_no_decay_was_put() -> None:
    """The limit alone, at four standard errors, would be crossed once in 16 000 channels."""
    for seed in range(3):
        chain, estimates = learned(recording(seed=seed))
        assert estimates.level_left_v is not None
        assert gap_warnings(chain.setup, estimates) == []


def test_pulses_close_behind_another_and_fewer_than_five_tell_nothing() -> None:
    """The second of a pair starts within the decay of the first: it has no level before to compare with."""
    pairs = sorted([*ALONE, *(at + 400 for at in ALONE)])
    _, estimates = learned(recording(1000.0, pairs))
    _, alone = learned(recording(1000.0))
    assert estimates.level_left_v is not None
    assert alone.level_left_v is not None
    assert estimates.level_left_v[:2] == pytest.approx(alone.level_left_v[:2], rel=0.15)
    _, few = learned(recording(1000.0, ALONE[:4]))
    assert few.level_left_v is not None
    assert np.isnan(few.level_left_v).all()


def test_each_group_of_channels_has_its_own_gap_end_and_a_bad_channel_is_not_named() -> None:
    pulses = replace(PULSES, channels={"E2": (-2.0, 60.0)})
    source = recording(200.0)
    chain, estimates = learned(source, pulses)
    left_v = estimates.level_left_v
    assert left_v is not None
    at_60_uv = decay_uv(Decay.EXPONENTIAL, 200.0)[301:306].mean()
    assert abs(1e6 * left_v[1]) < 20.0 + at_60_uv  # told or not, it is small by then
    assert "1 of 6" in gap_warnings(chain.setup, estimates)[0]
    bad = replace(chain.setup, bad=np.arange(N_CHANNELS) == 0)
    assert gap_warnings(bad, estimates) == []


def test_it_is_not_measured_where_decays_are_subtracted_and_is_kept_in_the_file(tmp_path: Path) -> None:
    source = recording(200.0)
    plan = engine_cases.plan(pulses=PULSES)
    setup = bind(source.facts, plan, NO_MARKS)
    estimates = finish(fit(source, setup))
    estimates.save(tmp_path / "estimates.h5")
    again = Estimates.load(tmp_path / "estimates.h5")
    np.testing.assert_array_equal(again.level_left_v, estimates.level_left_v)
    assert again.rests_on["level_left_v"] == basis_of(setup)["level_left_v"]
    subtracted = bind(
        source.facts, engine_cases.plan(pulses=replace(PULSES, decay=Decay.EXPONENTIAL)), NO_MARKS
    )
    assert finish(fit(source, subtracted)).level_left_v is None
    longer = bind(source.facts, engine_cases.plan(pulses=replace(PULSES, window_ms=(-2.0, 20.0))), NO_MARKS)
    assert basis_of(longer)["level_left_v"] != basis_of(setup)["level_left_v"]


@pytest.mark.parametrize(
    ("fill", "flank_ms", "lowpass_hz", "side", "told"),
    [
        (Fill.CUBIC, 10.0, 100.0, Side.BOTH, True),
        (Fill.CUBIC, 2.4, 100.0, Side.BOTH, False),
        (Fill.CUBIC, 2.8, 100.0, Side.BOTH, True),
        (Fill.CUBIC, 10.0, 24.0, Side.BOTH, False),
        (Fill.CUBIC, 10.0, 100.0, Side.BEFORE, False),
        (Fill.LINE, 10.0, 100.0, Side.BOTH, False),
    ],
)
def test_flanks_longer_than_a_quarter_of_the_fastest_period_are_told_for_cubic(
    fill: Fill, flank_ms: float, lowpass_hz: float, side: Side, told: bool
) -> None:
    """A quarter of the period at 100 Hz is 2.5 ms, at 24 Hz 10.4 ms."""
    pulses = replace(PULSES, fill=fill, flank_ms=flank_ms, side=side)
    chain = make_chain(
        recording(), engine_cases.plan(pulses=pulses, filter=Filter(lowpass_hz=lowpass_hz, rate_hz=1000.0))
    )
    lines = gap_warnings(chain.setup, chain.estimates)
    assert len(lines) == told
    if told:
        assert "longer than a quarter of the period at the low-pass (2.5 ms at 100 Hz)" in lines[0]
