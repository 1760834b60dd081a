"""Bad channels: known faults get their labels, clean simulated recordings get none."""

from __future__ import annotations

import numpy as np
import pytest

from pulsemend.signal.channels import (
    LEAST_CHANNELS,
    LEAST_WINDOWS,
    Judgement,
    Label,
    WindowMeter,
    judge,
)
from pulsemend.simulate.head import CAP
from support.faulty_channels import (
    BROKEN,
    CAP_32,
    RATE_HZ,
    WINDOW,
    bridged_with_c3,
    broken,
    clean,
    columns_of,
    judged,
    labels,
)


def known(found: Judgement | None) -> Judgement:
    assert found is not None
    return found


def named(found: Judgement, names: tuple[str, ...]) -> dict[str, set[Label]]:
    return {names[place]: given for place, given in labels(found).items()}


@pytest.mark.parametrize("seed", [1, 2])
def test_every_fault_gets_its_label(seed: int) -> None:
    found = known(judged(broken(clean(seed), CAP, seed), CAP))
    assert named(found, CAP) == BROKEN


def test_a_smaller_cap_is_judged_by_predictions() -> None:
    volts = clean(1)[:, columns_of(CAP_32)]
    found = known(judged(broken(volts, CAP_32, 1), CAP_32))
    by_prediction = {name: given - {Label.UNLIKE} for name, given in BROKEN.items()}
    assert {name: given - {Label.UNLIKE} for name, given in named(found, CAP_32).items()} == by_prediction


@pytest.mark.parametrize("names", [CAP, CAP_32])
def test_bridged_electrodes_are_a_pair_and_not_bad(names: tuple[str, ...]) -> None:
    volts = clean(1)[:, columns_of(names)]
    found = known(judged(broken(volts, names, 1), names))
    assert [(names[a], names[b]) for a, b in found.bridged] in (
        [("C3", bridged_with_c3(names))],
        [(bridged_with_c3(names), "C3")],
    )
    assert not {"C3", bridged_with_c3(names)} & set(named(found, names))
    assert not known(judged(volts, names)).bridged


@pytest.mark.parametrize("names", [CAP, CAP_32])
def test_clean_recordings_have_none(names: tuple[str, ...]) -> None:
    for seed in (1, 2):
        assert not named(known(judged(clean(seed)[:, columns_of(names)], names)), names)


@pytest.mark.slow
@pytest.mark.parametrize("first", range(100, 200, 10))
def test_nothing_is_found_in_a_hundred_clean_recordings(first: int) -> None:
    """The issue asks for 95 of 100; none of these has a finding, on either cap."""
    for seed in range(first, first + 10):
        volts = clean(seed)
        for names in (CAP, CAP_32):
            assert not named(known(judged(volts[:, columns_of(names)], names)), names), (seed, len(names))


def test_without_positions_loud_dead_and_noisy_channels_are_found() -> None:
    found = known(judged(broken(clean(1), CAP, 1), None))
    expected = {name: given & {Label.LOUD_OR_DEAD, Label.FAST_NOISE} for name, given in BROKEN.items()}
    assert named(found, CAP) == {name: given for name, given in expected.items() if given}
    assert Label.UNPREDICTED not in {one.label for one in found.criteria}


def test_a_stretch_is_told_and_does_not_make_a_channel_bad() -> None:
    volts = clean(1)
    place = CAP.index("P3")
    volts[: 10 * WINDOW, place] *= 12.0
    found = known(judged(volts, CAP))
    assert found.n_windows == 30
    assert not found.bad.any()
    loud = found.criteria[0]
    assert loud.label is Label.LOUD_OR_DEAD
    assert loud.n_over[place] == 10
    assert np.delete(loud.n_over, place).max() == 0
    assert loud.worst[place] > loud.limit > loud.value[place]


def test_a_flat_channel_is_dead() -> None:
    volts = clean(1)
    volts[:, 10] = 0.0
    assert labels(known(judged(volts, CAP))) == {10: {Label.LOUD_OR_DEAD}}


def test_an_inverted_channel_is_unlike_its_neighbours() -> None:
    volts = clean(1)
    volts[:, CAP.index("CP2")] *= -1.0
    found = named(known(judged(volts, CAP)), CAP)
    assert set(found) == {"CP2"}
    assert Label.UNLIKE in found["CP2"]


def test_line_noise_in_one_channel_is_no_fast_noise_where_the_line_is_taken_out() -> None:
    volts = clean(1)
    volts[:, 20] += 60e-6 * np.sin(2 * np.pi * 50.0 * np.arange(len(volts)) / RATE_HZ)
    assert not known(judged(volts, CAP)).bad.any()
    untouched = WindowMeter(RATE_HZ, 0.0)
    windows = [untouched.measure(volts[at : at + WINDOW]) for at in range(0, 10 * WINDOW, WINDOW)]
    assert known(judge([window for window in windows if window], None)).bad[20]


def test_where_no_channel_is_like_another_none_is_found() -> None:
    """Else recordings of something unlike an EEG would lose every channel."""
    volts = 1e-5 * np.random.default_rng(1).standard_normal((20_000, len(CAP)))
    assert not known(judged(volts, CAP)).bad.any()
    assert not known(judged(volts, None)).bad.any()


def test_the_result_does_not_depend_on_units_or_chance() -> None:
    volts = broken(clean(2), CAP, 2)[: 8 * WINDOW]
    once, again, louder = (known(judged(x, CAP)) for x in (volts, volts.copy(), 4.0 * volts))
    for one, other, scaled in zip(once.criteria, again.criteria, louder.criteria, strict=True):
        np.testing.assert_array_equal(one.value, other.value)
        np.testing.assert_array_equal(one.n_over, scaled.n_over)


def test_slow_recordings_have_no_fast_noise_to_judge() -> None:
    found = known(judged(clean(2)[::8], CAP, RATE_HZ / 8))
    assert Label.FAST_NOISE not in {one.label for one in found.criteria}
    assert not found.bad.any()


def test_too_few_windows_or_channels_are_not_judged() -> None:
    volts = clean(2)
    assert judged(volts[: (LEAST_WINDOWS - 1) * WINDOW], CAP) is None
    assert judged(volts[:, : LEAST_CHANNELS - 1], CAP[: LEAST_CHANNELS - 1]) is None
    assert WindowMeter(RATE_HZ, 50.0).measure(volts[:400]) is None
