"""The samples of a Lantern recording against what is said to be true about it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import signal

from pulsemend.simulate.artifact import DECAY_S, RECHARGE_DELAY_S
from pulsemend.simulate.background import EXPONENT, activity_filter
from pulsemend.simulate.evoked import LENGTH_S, PLACES, waveform
from pulsemend.simulate.lantern import RAIL, LanternSpec, blocks, make_lantern
from pulsemend.simulate.memory import Rehearsal, rehearse
from pulsemend.simulate.schedule import Fault, FaultKind

MONTAGE = ("F7", "F3", "Fz", "F4", "T7", "C3", "Cz", "C4", "TP8", "CP3", "P3", "Pz", "P4", "PO7", "O1", "O2")
SMALL = LanternSpec(trials=2, faults=(), channels=MONTAGE)


@pytest.fixture(scope="module")
def small() -> Rehearsal:
    return rehearse(SMALL)


def stored_of(rehearsal: Rehearsal) -> NDArray[np.float64]:
    facts = rehearsal.recording.facts
    out = np.empty((facts.n_samples, len(facts.channels)))
    rehearsal.recording.read(0, facts.n_samples, out)
    return out


def artifact_of(rehearsal: Rehearsal) -> NDArray[np.float64]:
    return stored_of(rehearsal) * rehearsal.lantern.scale_v - rehearsal.clean_v


def test_same_seed_same_samples_and_another_seed_others(small: Rehearsal) -> None:
    assert np.array_equal(stored_of(small), stored_of(rehearse(SMALL)))
    assert not np.array_equal(stored_of(small)[:1000], stored_of(rehearse(replace(SMALL, seed=2)))[:1000])
    other = rehearse(replace(SMALL, participant="lt02"))
    assert not np.array_equal(stored_of(small)[:1000], stored_of(other)[:1000])


@pytest.mark.parametrize("block_samples", [1, 997, 1250, 5000, 33333])
def test_samples_do_not_depend_on_blocks(block_samples: int) -> None:
    spec = LanternSpec(trials=1, faults=(), channels=("Cz", "P3"), rate_hz=1000.0)
    whole = rehearse(spec)
    pieces = list(blocks(whole.lantern, block_samples))
    assert [p.start for p in pieces] == list(range(0, whole.lantern.n_samples, block_samples))
    assert {len(p.stored) for p in pieces[:-1]} <= {block_samples}
    assert np.array_equal(np.concatenate([p.stored for p in pieces]), stored_of(whole))
    assert np.array_equal(np.concatenate([p.clean for p in pieces]), whole.clean_v)


def test_steepest_rise_stands_at_the_true_onset(small: Rehearsal) -> None:
    step = np.median(np.abs(np.diff(stored_of(small), axis=0)), axis=1)
    usual = np.median(step)
    for pulse in small.lantern.schedule.pulses:
        onset = pulse.time_s * SMALL.rate_hz
        first = int(onset) - 50
        near = step[first : first + 101]
        assert near.max() > 20 * usual
        aligned = first + 1 + int(np.argmax(near >= near.max() / 4))
        # The amplifier's low-pass lets it rise within two samples.
        assert 0 <= aligned - onset <= 2


def test_spikes_reach_the_rail_under_the_coil_and_nothing_else_does(small: Rehearsal) -> None:
    at_rail = np.abs(stored_of(small)) == RAIL
    pulses = [round(p.time_s * SMALL.rate_hz) for p in small.lantern.schedule.pulses]
    for onset in pulses:
        assert at_rail[onset : onset + 10, MONTAGE.index("P3")].any()
        # The spike is over within 2 ms.
        at_rail[onset : onset + 10] = False
    assert not at_rail.any()


def test_every_channel_has_a_spike_of_millivolts_or_close(small: Rehearsal) -> None:
    artifact = np.abs(artifact_of(small))
    for pulse in small.lantern.schedule.pulses:
        onset = round(pulse.time_s * SMALL.rate_hz)
        assert artifact[onset : onset + 10].max(axis=0).min() > 0.3e-3
        assert artifact[onset - 250 : onset - 1].max() < 1e-7


def test_decay_follows_its_power_law(small: Rehearsal) -> None:
    artifact, made = artifact_of(small), small.lantern.artifacts
    pulse = small.lantern.schedule.pulses[0]
    size = next(hit.size for hit in made.hits if hit.kind == "decay")
    n = np.arange(round(pulse.time_s * 5000) + 150, round(pulse.time_s * 5000) + 1200)
    # Delay at low frequencies of a Butterworth low-pass of order 4: 2.6131 / (2 pi f).
    t = n / 5000 - pulse.time_s - 2.6131 / (2 * np.pi * 1000.0)
    wanted = (1 + t[:, None] / made.decay_tau_s) ** -2.0 - (1 + DECAY_S / made.decay_tau_s) ** -2.0
    np.testing.assert_allclose(artifact[n], size * made.decay_v * wanted, atol=1.5e-7)


def test_decay_is_largest_near_the_coil(small: Rehearsal) -> None:
    height = np.abs(small.lantern.artifacts.decay_v)
    assert 0.3e-3 < height[MONTAGE.index("P3")] < 1.1e-3
    assert height[MONTAGE.index("F4")] < 0.05e-3


def test_recharge_comes_a_quarter_of_a_second_later(small: Rehearsal) -> None:
    spikes = np.abs(np.diff(artifact_of(small)[:, MONTAGE.index("P3")]))
    for pulse in small.lantern.schedule.pulses:
        later = round((pulse.time_s + RECHARGE_DELAY_S) * 5000)
        inside = spikes[later - 5 : later + 20].max()
        assert inside > 20 * spikes[later - 300 : later - 10].max()


def test_nothing_is_left_a_second_after_a_pulse(small: Rehearsal) -> None:
    artifact = artifact_of(small)
    for pulse in small.lantern.schedule.pulses:
        end = round((pulse.time_s + DECAY_S) * 5000) + 20
        # Half a step of the converter.
        assert np.abs(artifact[end : end + 2000]).max() <= 0.5001e-7


def test_no_artifacts_on_request() -> None:
    spec = replace(SMALL, trials=1, pulse_size=0.0)
    assert np.abs(artifact_of(rehearse(spec))).max() <= 0.5001e-7


def test_a_pulse_not_given_leaves_neither_artifact_nor_response(small: Rehearsal) -> None:
    unfired = rehearse(replace(SMALL, faults=(Fault(FaultKind.UNFIRED, 1, "pulse2"),)))
    lantern = small.lantern
    pulse = next(p for p in lantern.schedule.pulses if (p.trial, p.slot) == (1, "pulse2"))
    rows = [lantern.source_names.index(place) for place in PLACES]
    times_s = np.arange(lantern.n_samples) / SMALL.rate_hz - pulse.time_s
    inside = (times_s >= 0) & (times_s < LENGTH_S)
    responses = np.stack([np.where(inside, waveform("pulse", place, times_s), 0.0) for place in PLACES])
    difference = small.clean_v - unfired.clean_v
    np.testing.assert_allclose(difference, responses.T @ lantern.source_maps[rows], atol=1e-12)
    assert 2e-6 < np.abs(difference).max() < 20e-6
    onset = round(pulse.time_s * 5000)
    assert np.abs(artifact_of(unfired)[onset - 5 : onset + 1000]).max() < 1e-6


def test_an_unmarked_pulse_is_in_the_signal(small: Rehearsal) -> None:
    unmarked = rehearse(replace(SMALL, faults=(Fault(FaultKind.UNMARKED, 1, "pulse2"),)))
    assert np.array_equal(stored_of(unmarked), stored_of(small))
    assert len(unmarked.lantern.markers) == len(small.lantern.markers) - 1


def test_evoked_responses_come_back_as_the_average() -> None:
    spec = LanternSpec(
        trials=60, faults=(), channels=("Fz", "Cz", "CPz", "Pz"), rate_hz=500.0, pulse_size=0.0, loud=""
    )
    made = rehearse(spec)
    sections = signal.butter(2, 1.0, "high", fs=500.0, output="sos")
    volts = np.asarray(signal.sosfiltfilt(sections, made.clean_v - made.clean_v.mean(axis=0), axis=0))
    onsets = [round(p.time_s * 500) for p in made.lantern.schedule.pulses]
    pieces = np.stack([volts[n : n + 150] - volts[n - 25 : n].mean(axis=0) for n in onsets])
    error_v = pieces.std(axis=0, ddof=1) / np.sqrt(len(pieces))
    times_s = np.arange(150) / 500.0
    maps = made.lantern.source_maps[[made.lantern.source_names.index(place) for place in PLACES]]
    truth = np.stack([waveform("pulse", place, times_s) for place in PLACES]).T @ maps
    # In standard errors of the mean: the response sticks out, what is left over does not.
    assert np.abs(truth / error_v).max() > 5
    assert np.sqrt(np.mean(((pieces.mean(axis=0) - truth) / error_v) ** 2)) < 1.3


def test_activity_falls_as_stated_and_has_unit_variance() -> None:
    sections = activity_filter(5000.0)
    hz = np.geomspace(0.2, 200.0, 300)
    gain = np.abs(signal.freqz_sos(sections, hz, fs=5000.0)[1])
    slope = np.polyfit(np.log(hz), np.log(gain**2), 1)[0]
    assert slope == pytest.approx(-EXPONENT, abs=0.1)
    band = np.abs(signal.freqz_sos(sections, np.arange(1.0, 100.0, 0.01), fs=5000.0)[1])
    assert np.sum(band**2) * 0.01 * 2 / 5000.0 == pytest.approx(1.0, rel=0.01)


def test_spectrum_of_a_channel() -> None:
    spec = LanternSpec(trials=12, faults=(), channels=("Fz", "C4", "Pz", "O1", "TP8"), pulse_size=0.0)
    made = rehearse(replace(spec, rate_hz=1000.0))
    hz, density = signal.welch(made.clean_v, 1000.0, nperseg=4000, axis=0)

    def near(at: float) -> NDArray[np.float64]:
        return np.asarray(density[(hz > at - 0.6) & (hz < at + 0.6)].max(axis=0))

    away = (hz > 1.5) & (hz < 42) & ((hz < 7) | (hz > 14))
    slopes = [np.polyfit(np.log(hz[away]), np.log(density[away, i]), 1)[0] for i in range(3)]
    np.testing.assert_allclose(slopes, -EXPONENT, atol=0.25)
    alpha = near(10.0) / np.sqrt(near(6.0) * near(15.0))
    assert alpha[3] > 3 * alpha[0]
    # the line on all channels that are not the loud one
    assert (near(50.0) > 3 * near(45.0))[:4].sum() >= 3
    rms = made.clean_v.std(axis=0)
    assert rms[4] > 100e-6


def test_amplifier_takes_what_lies_above_its_corner(small: Rehearsal) -> None:
    quiet = [name != SMALL.loud for name in MONTAGE]
    hz, density = signal.welch(small.clean_v[:, quiet], 5000.0, nperseg=5000, axis=0)
    floor = density[(hz > 600) & (hz < 700)].mean()
    assert density[(hz > 2000) & (hz < 2300)].mean() < 0.02 * floor


def test_neighbours_are_alike_and_offsets_are_large(small: Rehearsal) -> None:
    sections = signal.butter(2, [2, 40], "band", fs=5000.0, output="sos")
    band = np.asarray(signal.sosfiltfilt(sections, small.clean_v, axis=0))
    band /= np.linalg.norm(band, axis=0)
    alike = band.T @ band
    o1, o2, f4 = (MONTAGE.index(name) for name in ("O1", "O2", "F4"))
    assert alike[o1, o2] > 0.5
    assert alike[o1, o2] > alike[o1, f4] + 0.3
    offsets = np.abs(small.lantern.offset_v)
    assert 0.2e-3 < offsets.max() <= 1.5e-3


def test_loud_channel_holds_nothing_of_the_brain() -> None:
    made = make_lantern(SMALL)
    assert not made.source_maps[:, MONTAGE.index("TP8")].any()
    assert make_lantern(replace(SMALL, loud="")).source_maps[:, MONTAGE.index("TP8")].any()
