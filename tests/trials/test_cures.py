"""Cures of trigger faults: by hand-made streams, then what must hold for any stream."""

from __future__ import annotations

from collections.abc import Sequence

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pulsemend.model.recording import Marker
from pulsemend.trials.cures import cured

RATE_HZ = 1000.0


def stream(*found: tuple[float, object]) -> tuple[Marker, ...]:
    return tuple(Marker(float(sample), str(code)) for sample, code in found)


def codes_at(markers: Sequence[Marker]) -> list[tuple[float, str]]:
    return [(marker.sample, marker.code) for marker in markers]


def test_a_held_level_is_one_event_at_its_first_sample() -> None:
    """Facts, T-6.1."""
    result = cured(stream((10, 5), (11, 5), (12, 5), (900, 7), (1500, 5)), RATE_HZ, ["held level"])
    assert codes_at(result.markers) == [(10, "5"), (900, "7"), (1500, "5")]
    assert result.counts == {"held level": 2}
    assert result.unknown == ()


def test_a_held_level_is_found_among_other_markers() -> None:
    markers = stream((10, 5), (11, "key"), (11, 5), (12, 5), (13, 5))
    result = cured(markers, RATE_HZ, ["held level"])
    assert codes_at(result.markers) == [(10, "5"), (11, "key")]


def test_two_markers_a_sample_apart_are_no_held_level() -> None:
    markers = stream((10, 5), (11, 5), (900, 5))
    result = cured(markers, RATE_HZ, ["held level"])
    assert result.markers == markers
    assert result.unknown == ("held level",)


def test_zero_codes_are_left_out() -> None:
    """Facts, T-6.2."""
    result = cured(
        stream((10, 5), (30, 0), (500, 7), (520, 0), (800, "S 0"), (900, "block 0")),
        RATE_HZ,
        ["zero codes", "zero codes of S"],
    )
    assert codes_at(result.markers) == [(10, "5"), (500, "7"), (900, "block 0")]
    assert result.counts == {"zero codes": 2, "zero codes of S": 1}


def test_the_high_byte_is_cut_off() -> None:
    """Facts, T-6.3: 65285 & 255 = 5."""
    markers = stream((10, 65285), (500, 65283), (900, 4))
    result = cured(markers, RATE_HZ, ["floating high byte"])
    assert codes_at(result.markers) == [(10, "5"), (500, "3"), (900, "4")]
    assert result.counts == {"floating high byte": 2}


def test_a_stuck_bit_is_cleared() -> None:
    """Facts, T-6.4: 129 becomes 1."""
    result = cured(stream((10, 129), (500, 130), (900, 136)), RATE_HZ, ["stuck bit 7"])
    assert codes_at(result.markers) == [(10, "1"), (500, "2"), (900, "8")]
    assert result.counts == {"stuck bit 7": 3}


def test_a_stuck_bit_is_cleared_in_codes_of_its_prefix_only() -> None:
    markers = stream((10, "S129"), (500, "S130"), (900, "S149"), (950, "R129"), (990, "129"))
    result = cured(markers, RATE_HZ, ["stuck bit 7 of S"])
    assert [marker.code for marker in result.markers] == ["S 1", "S 2", "S 21", "R129", "129"]


def test_a_bit_that_not_all_codes_hold_is_not_stuck() -> None:
    markers = stream((10, 129), (500, 130), (900, 136), (950, 3))
    result = cured(markers, RATE_HZ, ["stuck bit 7"])
    assert result.markers == markers
    assert result.unknown == ("stuck bit 7",)


def test_a_stuck_line_reads_at_rest_too() -> None:
    """With bit 7 stuck, a line that returns to zero reads 128 between codes."""
    markers = stream((10, 129), (20, 128), (500, 130), (510, 128), (900, 131), (910, 128))
    result = cured(markers, RATE_HZ, ["zero codes", "stuck bit 7"])
    assert codes_at(result.markers) == [(10, "1"), (500, "2"), (900, "3")]
    assert result.counts == {"stuck bit 7": 6, "zero codes": 3}


def test_two_bits_a_sample_apart_are_one_code() -> None:
    """Facts, T-6.5: 1 then 3 one sample later is a single 3, at the first sample."""
    result = cured(stream((100, 1), (101, 3), (900, 2)), RATE_HZ, ["two bits apart"])
    assert codes_at(result.markers) == [(100, "3"), (900, "2")]
    assert result.counts == {"two bits apart": 1}


@pytest.mark.parametrize(
    "markers",
    [
        stream((100, 1), (150, 3)),  # facts, T-6.5: 50 ms apart
        stream((100, 1), (102, 3)),
        stream((100, 1), (101, 2)),  # none holds all bits of the other
        stream((100, 3), (101, 1)),  # bits fall
        stream((100, 1), (101, "S 3")),  # another prefix
        stream((100, 1), (100, 3)),  # at once: from two sources
        stream((100, 0), (101, 3)),
        (Marker(100.0, "1", "a"), Marker(101.0, "3", "b")),  # another type
    ],
)
def test_other_neighbours_stay_two_events(markers: tuple[Marker, ...]) -> None:
    assert cured(markers, RATE_HZ, ["two bits apart"]).markers == markers


def test_two_bits_may_be_several_samples_apart_at_a_high_rate() -> None:
    """0.2 ms are five samples at 25 kHz."""
    markers = stream((100, 1), (105, 3), (1000, 1), (1006, 3))
    result = cured(markers, 25_000.0, ["two bits apart"])
    assert codes_at(result.markers) == [(100, "3"), (1000, "1"), (1006, "3")]


def test_three_bits_one_after_the_other_are_one_code() -> None:
    result = cured(stream((100, 1), (101, 3), (102, 7)), RATE_HZ, ["two bits apart"])
    assert codes_at(result.markers) == [(100, "7")]


def test_a_moved_marker_keeps_its_type() -> None:
    markers = (Marker(100.0, "S 1", "Stimulus"), Marker(101.0, "S 3", "Stimulus"))
    assert cured(markers, RATE_HZ, ["two bits apart"]).markers == (Marker(100.0, "S 3", "Stimulus"),)


def test_doubled_markers_leave_the_first() -> None:
    """Facts, T-6.6; the window is 20 ms."""
    markers = stream((100, "left"), (105, "left"), (112, "right"), (125, "left"), (500, "left"))
    result = cured(markers, RATE_HZ, ["doubled marker left"])
    assert codes_at(result.markers) == [(100, "left"), (112, "right"), (125, "left"), (500, "left")]
    assert result.counts == {"doubled marker left": 1}


def test_markers_every_20_ms_are_not_doubled() -> None:
    """A theta burst (50 Hz), its times rounded to whole samples of 1024 Hz."""
    markers = stream(*((round(index * 20.48), "pulse") for index in range(50)))
    assert cured(markers, 1024.0, ["doubled marker pulse"]).markers == markers


def test_doubled_pulses_have_a_narrower_window() -> None:
    markers = stream((1000, "T"), (1005, "T"), (5000, "T"), (5001, "T"))
    result = cured(markers, 5000.0, ["doubled marker within 0.5 ms T"])
    assert codes_at(result.markers) == [(1000, "T"), (1005, "T"), (5000, "T")]


def test_a_doubled_marker_is_known_by_the_code_as_recorded() -> None:
    """Its key stays the same when another cure changes the code."""
    markers = stream((10, 129), (15, 129), (500, 130), (900, 136))
    alone = cured(markers, RATE_HZ, ["doubled marker 129"])
    both = cured(markers, RATE_HZ, ["doubled marker 129", "stuck bit 7"])
    assert codes_at(alone.markers) == [(10, "129"), (500, "130"), (900, "136")]
    assert codes_at(both.markers) == [(10, "1"), (500, "2"), (900, "8")]
    assert both.counts == {"stuck bit 7": 4, "doubled marker 129": 1}


def test_unknown_keys_are_named() -> None:
    markers = stream((10, 1), (500, 2))
    accepted = ["stuck bit 7", "burst", "doubled marker 9", "what"]
    result = cured(markers, RATE_HZ, accepted)
    assert result.markers == markers
    assert result.counts == {}
    assert result.unknown == ("burst", "doubled marker 9", "stuck bit 7", "what")


def test_nothing_is_cured_in_no_markers() -> None:
    assert cured((), RATE_HZ, ["held level"]).markers == ()


CODES = ["0", "1", "2", "3", "7", "128", "129", "131", "257", "65281", "S 1", "S129", "S131", "S135", "cue"]
KEYS = [
    "floating high byte",
    *(f"stuck bit {bit}{of}" for bit in (0, 1, 7, 8) for of in ("", " of S")),
    "zero codes",
    "zero codes of S",
    "held level",
    "two bits apart",
    *(f"doubled marker {code}" for code in CODES),
    *(f"doubled marker within 0.5 ms {code}" for code in CODES),
    "burst",
    "absent code 9",
]


@st.composite
def dense_streams(draw: st.DrawFn) -> tuple[Marker, ...]:
    """Streams so dense that every cure meets every other one."""
    steps = st.sampled_from([0.0, 0.5, 1.0, 1.0, 1.0, 2.0, 5.0, 19.0, 400.0])
    pairs = draw(
        st.lists(st.tuples(steps, st.sampled_from(CODES), st.sampled_from(["", "", "a"])), max_size=25)
    )
    markers, sample = [], 3.0
    for step, code, kind in pairs:
        sample += step
        markers.append(Marker(sample, code, kind))
    return tuple(markers)


@given(
    markers=dense_streams(),
    accepted=st.sets(st.sampled_from(KEYS)),
    rate_hz=st.sampled_from([1000.0, 5000.0]),
)
@settings(max_examples=400, deadline=None)
def test_cures_of_any_stream(markers: tuple[Marker, ...], accepted: set[str], rate_hz: float) -> None:
    result = cured(markers, rate_hz, accepted)
    samples = [marker.sample for marker in result.markers]
    assert samples == sorted(samples)
    left = [marker.sample for marker in markers]
    for sample in samples:
        left.remove(sample)  # fails where a sample is not one of the recording's, or used twice
    assert {marker.type for marker in result.markers} <= {marker.type for marker in markers}
    assert cured(result.markers, rate_hz, accepted).markers == result.markers
    assert set(result.counts) | set(result.unknown) <= accepted
    assert not set(result.counts) & set(result.unknown)
    assert all(count > 0 for count in result.counts.values())
    if not result.counts:
        assert result.markers == markers


@given(markers=dense_streams(), accepted=st.lists(st.sampled_from(KEYS), unique=True), data=st.data())
@settings(max_examples=200, deadline=None)
def test_the_order_of_acceptance_makes_no_difference(
    markers: tuple[Marker, ...], accepted: list[str], data: st.DataObject
) -> None:
    shuffled = data.draw(st.permutations(accepted))
    assert cured(markers, RATE_HZ, accepted) == cured(markers, RATE_HZ, shuffled)


@given(markers=dense_streams())
def test_nothing_accepted_changes_nothing(markers: tuple[Marker, ...]) -> None:
    result = cured(markers, RATE_HZ, ())
    assert (result.markers, result.counts, result.unknown) == (markers, {}, ())


@given(markers=dense_streams())
def test_a_cure_that_leaves_out_counts_what_is_gone(markers: tuple[Marker, ...]) -> None:
    result = cured(markers, RATE_HZ, ["zero codes", "held level", "two bits apart", "doubled marker 3"])
    assert len(markers) - len(result.markers) == sum(result.counts.values())
