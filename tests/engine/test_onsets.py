"""Onsets of stimuli in a recording: shifts per code, what is refused, and the markers that move."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.engine.onsets import OnsetShift, measure_onsets, shifted
from pulsemend.errors import InputError
from pulsemend.model.recording import Marker, RecordingFacts
from pulsemend.model.vocabulary import OnsetUse
from pulsemend.progress import Progress, finish
from support.array_recording import ArrayRecording

SEARCH_S = (-0.020, 0.100)

Floats = NDArray[np.float64]


class Marked(ArrayRecording):
    """An array recording with breaks."""

    def __init__(
        self,
        samples: NDArray[np.generic],
        folder: Path,
        rate_hz: float = 1000.0,
        breaks: tuple[int, ...] = (),
    ) -> None:
        names = ("C3", "Photo", "C4")
        super().__init__(samples, folder / "samples", rate_hz, names)
        self.breaks = breaks

    @property
    def facts(self) -> RecordingFacts:
        return replace(super().facts, boundaries=self.breaks)


def recorded(photo: Floats, folder: Path, rate_hz: float = 1000.0, breaks: tuple[int, ...] = ()) -> Marked:
    """Put a channel between two others, which hold something else, at every marker and earlier."""
    other = 5.0 * np.roll(photo, -round(0.010 * rate_hz))
    return Marked(np.column_stack([other, photo, -other]), folder, rate_hz, breaks)


def flashes(
    n_samples: int, onsets: Sequence[int], lit: int = 200, size: float = 1000.0, noise: float = 20.0
) -> Floats:
    photo = noise * np.random.default_rng(1).standard_normal(n_samples) + 300.0
    for onset in onsets:
        photo[onset : onset + lit] += size
    return photo


def measured(recording: Marked, markers: Sequence[Marker]) -> tuple[OnsetShift, ...]:
    return finish(measure_onsets(recording, "Photo", markers, SEARCH_S))


def test_shift_and_spread_of_four_flashes(tmp_path: Path) -> None:
    # facts T-6.7: later by 32, 33, 32, 31 ms: shift 32 ms, residual sd 0.816 ms (n - 1)
    markers = [Marker(1000.0 * i, "cue") for i in range(1, 5)]
    late = [32, 33, 32, 31]
    photo = flashes(6000, [int(m.sample) + ms for m, ms in zip(markers, late, strict=True)])
    (shift,) = measured(recorded(photo, tmp_path), markers)
    assert shift.shift_s == pytest.approx(0.032, abs=1e-9)
    assert shift.spread_s == pytest.approx(0.000816, abs=5e-7)
    assert shift.shifts_s == pytest.approx((0.032, 0.033, 0.032, 0.031), abs=1e-9)
    assert (shift.least_s, shift.most_s) == pytest.approx((0.031, 0.033), abs=1e-9)
    assert (shift.channel, shift.code, shift.n_markers, shift.n_found) == ("Photo", "cue", 4, 4)
    assert shift.polarity == "up"
    assert shift.is_used
    assert shift.notes == ()

    by_median = shifted(markers, [shift], OnsetUse.MEDIAN, 1000.0)
    assert [m.sample for m in by_median] == [1032, 2032, 3032, 4032]
    by_each = shifted(markers, [shift], OnsetUse.EACH, 1000.0)
    assert [m.sample for m in by_each] == [1032, 2033, 3032, 4031]


def test_every_code_has_its_own_direction_and_shift(tmp_path: Path) -> None:
    # The cue lights the patch, the probe darkens it 400 ms later.
    markers, photo = [], flashes(32_000, [])
    for i in range(20):
        start = 500 + 1500 * i
        markers += [Marker(float(start), "cue"), Marker(start + 400.0, "probe")]
        photo[start + 25 : start + 440] += 1000.0
    cue, probe = measured(recorded(photo, tmp_path), markers)
    assert (cue.code, cue.polarity, probe.code, probe.polarity) == ("cue", "up", "probe", "down")
    assert (cue.shift_s, probe.shift_s) == pytest.approx((0.025, 0.040), abs=1e-9)
    assert (cue.spread_s, probe.spread_s) == pytest.approx((0.0, 0.0), abs=1e-9)
    moved = shifted(markers, (cue, probe), OnsetUse.MEDIAN, 1000.0)
    assert [m.sample for m in moved[:2]] == pytest.approx([525, 940], abs=1e-6)


def test_a_missing_flash_takes_the_median(tmp_path: Path) -> None:
    markers = [Marker(1000.0 * i, "cue") for i in range(1, 11)]
    late = [30, 31, None, 33, 30, 31, 30, 34, 31, 31]
    onsets = [int(m.sample) + ms for m, ms in zip(markers, late, strict=True) if ms is not None]
    photo = flashes(12_000, onsets)
    (shift,) = measured(recorded(photo, tmp_path), markers)
    assert shift.shifts_s[2] is None
    assert (shift.n_markers, shift.n_found, shift.is_used) == (10, 9, True)
    assert shift.shift_s == pytest.approx(0.031, abs=1e-9)
    assert shift.notes == ('Photo shows an onset at 9 of the 10 markers "cue" (the others: no change at 1)',)
    each = shifted(markers, [shift], OnsetUse.EACH, 1000.0)
    assert [m.sample - 1000 * (i + 1) for i, m in enumerate(each)] == pytest.approx(
        [31 if ms is None else ms for ms in late], abs=1e-6
    )


def test_fewer_than_half_is_refused_half_is_not(tmp_path: Path) -> None:
    markers = [Marker(1000.0 * i, "cue") for i in range(1, 11)]
    for n_shown in (5, 4):
        photo = flashes(12_000, [int(m.sample) + 30 for m in markers[:n_shown]])
        (shift,) = measured(recorded(photo, tmp_path), markers)
        assert (shift.n_found, shift.is_used) == (n_shown, n_shown == 5)
        assert shift.shift_s == pytest.approx(0.030, abs=1e-9)
    assert "fewer than half" in shift.notes[-1]
    assert "stay where they are" in shift.notes[-1]
    assert shifted(markers, [shift], OnsetUse.MEDIAN, 1000.0) == tuple(markers)
    assert shifted(markers, [shift], OnsetUse.EACH, 1000.0) == tuple(markers)


def test_a_wide_spread_is_refused(tmp_path: Path) -> None:
    rng = np.random.default_rng(2)
    markers = [Marker(1000.0 * i, "cue") for i in range(1, 41)]
    for width, is_used in ((17, True), (60, False)):  # sd 4.8 ms, as without regard to 60 Hz, and 17 ms
        late = rng.integers(20, 20 + width, len(markers))
        photo = flashes(42_000, [int(m.sample + ms) for m, ms in zip(markers, late, strict=True)])
        (shift,) = measured(recorded(photo, tmp_path), markers)
        assert shift.n_found == 40
        assert shift.spread_s == pytest.approx(np.std(late, ddof=1) / 1000.0)
        assert shift.is_used is is_used
    assert f"spread by {np.std(late, ddof=1):.1f} ms, more than 10 ms" in shift.notes[-1]
    assert shifted(markers, [shift], OnsetUse.EACH, 1000.0) == tuple(markers)


def test_a_spread_that_fills_a_narrow_search_is_refused(tmp_path: Path) -> None:
    # Uniform over 30 ms: sd 8.7 ms, which 10 ms would let pass.
    markers = [Marker(1000.0 * i, "cue") for i in range(1, 31)]
    photo = flashes(32_000, [1000 * i + i for i in range(1, 31)])
    recording = recorded(photo, tmp_path)
    (shift,) = finish(measure_onsets(recording, "Photo", markers, (0.0, 0.030)))
    assert shift.n_found == 30
    assert not shift.is_used
    assert "spread by 8.8 ms, more than 6 ms" in shift.notes[-1]
    (shift,) = measured(recording, markers)
    assert shift.is_used


def flat(rng: np.random.Generator, n: int) -> Floats:
    return np.full(n, 17.0)


def noise(rng: np.random.Generator, n: int) -> Floats:
    return rng.standard_normal(n)


def last_digit(rng: np.random.Generator, n: int) -> Floats:
    """Rest between two steps of the converter."""
    return np.asarray(np.round(0.2 * rng.standard_normal(n)))


def wander(rng: np.random.Generator, n: int) -> Floats:
    return np.asarray(np.cumsum(rng.standard_normal(n)))


@pytest.mark.parametrize("course", [flat, noise, last_digit, wander])
def test_a_channel_that_shows_nothing_moves_nothing(
    course: Callable[[np.random.Generator, int], Floats], tmp_path: Path
) -> None:
    markers = [Marker(1000.0 * i, "cue") for i in range(1, 61)]
    photo = course(np.random.default_rng(3), 62_000)
    (shift,) = measured(recorded(photo, tmp_path), markers)
    assert not shift.is_used
    assert "these markers stay where they are" in shift.notes[-1]
    assert shifted(markers, [shift], OnsetUse.MEDIAN, 1000.0) == tuple(markers)
    if course in (flat, noise):
        assert (shift.n_found, shift.polarity) == (0, "none")
        assert shift.shift_s is shift.spread_s is shift.least_s is shift.most_s is None
        assert shift.shifts_s == (None,) * 60
        assert shift.notes == (
            'Photo shows no onset at any of the 60 markers "cue" (no change at 60): '
            "these markers stay where they are",
        )


@pytest.mark.parametrize("rate_hz", [500.0, 25_000.0])
def test_a_thousand_markers_are_read_in_short_stretches(rate_hz: float, tmp_path: Path) -> None:
    rng = np.random.default_rng(4)
    spacing = round(0.4 * rate_hz)
    markers = [Marker(float(spacing * (i + 1)), "cue") for i in range(1000)]
    late = np.round((0.040 + 0.002 * rng.standard_normal(1000)) * rate_hz).astype(int)
    onsets = [int(m.sample) + int(n) for m, n in zip(markers, late, strict=True)]
    photo = flashes(spacing * 1002, onsets, lit=round(0.1 * rate_hz))
    recording = recorded(photo, tmp_path, rate_hz)
    steps: list[Progress] = []
    (shift,) = finish(measure_onsets(recording, "Photo", markers, SEARCH_S), steps.append)
    assert shift.n_found == 1000
    np.testing.assert_allclose(np.array(shift.shifts_s, float) * rate_hz, late, atol=1e-6)
    assert len(recording.reads) == len(steps) == 1000
    assert [step.done for step in steps] == list(range(1000))
    for (start, stop), marker in zip(recording.reads, markers, strict=True):
        assert stop - start <= 0.28 * rate_hz
        assert start <= marker.sample <= stop


def test_the_recordings_ends_and_breaks(tmp_path: Path) -> None:
    samples = [5, 1000, 2040, 3000, 3960, 4999]
    markers = [Marker(float(n), "cue") for n in samples]
    photo = flashes(5000, [n + 30 for n in samples[:-1]], lit=100)
    # A break 10 ms before the flash that belongs to a marker ends what is known of it; so does the end.
    recording = recorded(photo, tmp_path, breaks=(2060, 3950))
    (shift,) = measured(recording, markers)
    found = [None if s is None else round(1000 * s) for s in shift.shifts_s]
    assert found == [30, 30, None, 30, 30, None]
    assert all(stop <= 2060 or start >= 2060 for start, stop in recording.reads)
    (shift,) = measured(recording, [*markers, Marker(9000.0, "cue"), Marker(-400.0, "cue")])
    assert shift.shifts_s[6:] == (None, None)
    assert "(the others: not recorded at 4)" in shift.notes[0]


def test_both_ends_of_the_search_count(tmp_path: Path) -> None:
    # Also where seconds times rate, in floating point, is a hair less than a whole sample.
    markers = [Marker(3000.0 * i, "cue") for i in range(1, 5)]
    recording = recorded(flashes(18_000, [3030, 6100, 9030, 12_101], lit=600), tmp_path, 3000.0)
    (shift,) = finish(measure_onsets(recording, "Photo", markers, (0.01, 0.1 / 3.0 - 1e-12)))
    assert [None if s is None else round(3000 * s) for s in shift.shifts_s] == [30, 100, 30, None]
    assert "changes only outside the search at 1" in shift.notes[0]


def test_markers_between_samples(tmp_path: Path) -> None:
    markers = [Marker(1000.0 * i + 0.4, "cue") for i in range(1, 6)]
    photo = flashes(7000, [1000 * i + 30 for i in range(1, 6)])
    (shift,) = measured(recorded(photo, tmp_path), markers)
    assert shift.shift_s == pytest.approx(0.0296, abs=1e-9)
    moved = shifted(markers, [shift], OnsetUse.EACH, 1000.0)
    assert [m.sample for m in moved] == pytest.approx([1030, 2030, 3030, 4030, 5030], abs=1e-6)


def test_only_measured_codes_move_and_order_is_that_of_time(tmp_path: Path) -> None:
    cues = [Marker(1000.0 * i, "cue", "Stimulus") for i in range(1, 5)]
    photo = flashes(6000, [int(m.sample) + 32 for m in cues])
    shifts = measured(recorded(photo, tmp_path), cues)
    pulses = [Marker(m.sample + 20.0, "pulse") for m in cues]
    markers = sorted([*cues, *pulses], key=lambda m: m.sample)
    moved = shifted(markers, shifts, OnsetUse.MEDIAN, 1000.0)
    assert [m.code for m in moved] == ["pulse", "cue"] * 4
    assert [m for m in moved if m.code == "pulse"] == pulses
    assert [m.type for m in moved if m.code == "cue"] == ["Stimulus"] * 4
    with pytest.raises(ValueError, match='3 markers "cue", but 4 were measured'):
        shifted(markers[1:], shifts, OnsetUse.EACH, 1000.0)


def test_a_tone_in_a_microphone(tmp_path: Path) -> None:
    rng = np.random.default_rng(5)
    rate_hz = 5000.0
    markers = [Marker(2000.0 * i, "go") for i in range(1, 31)]
    sound = 10.0 * rng.standard_normal(70_000)
    late = rng.integers(40, 60, 30)
    for marker, n in zip(markers, late, strict=True):
        at = int(marker.sample + n)
        sound[at : at + 300] += 800.0 * np.sin(
            2 * np.pi * 700.0 / rate_hz * np.arange(300) + rng.uniform(0, 6.3)
        )
    (shift,) = measured(recorded(sound, tmp_path, rate_hz), markers)
    assert (shift.polarity, shift.n_found, shift.is_used) == ("either way", 30, True)
    assert shift.notes == ('Photo changes either way at "go": a sound, or a patch that toggles',)
    # Within half a period of the tone.
    error_s = np.array(shift.shifts_s, float) - late / rate_hz
    assert np.abs(error_s).max() <= 0.5 / 700.0
    assert abs(np.median(error_s)) <= 1 / rate_hz


def test_an_unknown_channel_is_named(tmp_path: Path) -> None:
    recording = recorded(flashes(2000, []), tmp_path)
    with pytest.raises(InputError, match=r'no channel "Diode".*C3, Photo, C4'):
        finish(measure_onsets(recording, "Diode", [], SEARCH_S))
    with pytest.raises(ValueError, match="search"):
        finish(measure_onsets(recording, "Photo", [], (0.1, 0.1)))
    assert measured(recording, []) == ()
