"""Trigger faults found: each by a stream that holds it, and none in healthy streams."""

from __future__ import annotations

import itertools
import random
from collections.abc import Callable, Sequence

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pulsemend.model.faults import FaultKind, MarkerFault
from pulsemend.model.plan import Plan
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.trials.cures import cured
from pulsemend.trials.faults import find_faults

RATE_HZ = 1000.0


def stream(*found: tuple[float, object]) -> tuple[Marker, ...]:
    return tuple(Marker(float(sample), str(code)) for sample, code in found)


def spaced(*codes: object, every: int = 700, times: int = 1) -> tuple[Marker, ...]:
    return stream(*((100 + every * index, code) for index, code in enumerate(codes * times)))


def merged(*streams: Sequence[Marker]) -> tuple[Marker, ...]:
    return tuple(sorted(itertools.chain(*streams), key=lambda marker: marker.sample))


def plan_of(roles: dict[str, str], slots: str = "") -> Plan:
    """Write a plan that names codes, with slots of its own or one for the first code."""
    markers = "".join(f'[markers."{code}"]\nrole = "{role}"\n' for code, role in roles.items())
    slots = slots or f'[[trial]]\nslot = "only"\nrole = "{next(iter(roles.values()))}"\n'
    return parse_plan(
        f"""pulsemend = 1
{markers}{slots}
[pulses]
times = "none"
[epochs]
length_s = 0.5
[[epochs.rule]]
name = "one"
anchor = "{slots.split(chr(34))[1]}"
start_s = 0.0
"""
    ).plan


def keys_of(faults: Sequence[MarkerFault]) -> list[str]:
    return [fault.key for fault in faults]


def only(faults: Sequence[MarkerFault]) -> MarkerFault:
    assert len(faults) == 1, keys_of(faults)
    return faults[0]


def test_a_held_level_is_found_once() -> None:
    """Facts, T-6.1: not as doubled markers and bursts, too."""
    held = [stream(*((at + step, 5 + at % 2) for step in range(12))) for at in range(100, 20_000, 667)]
    fault = only(find_faults(merged(*held), RATE_HZ))
    assert (fault.kind, fault.key) == (FaultKind.HELD_LEVEL, "held level")
    assert fault.count == 11 * len(held)
    assert fault.at == tuple(range(100, 20_000, 667))
    assert "330 markers too many at 30 places (5, 6), first at 0.100 s" in fault.words
    assert "330 markers" in fault.cure


def test_zero_codes_are_found() -> None:
    """Facts, T-6.2."""
    fault = only(find_faults(spaced(5, 0, 7, 0), RATE_HZ))
    assert (fault.kind, fault.key, fault.count) == (FaultKind.ZERO_CODES, "zero codes", 2)
    assert fault.at == (800, 2200)


def test_zero_after_a_word_is_no_level() -> None:
    assert find_faults(spaced("block 0", "block 1", times=3), RATE_HZ) == ()


@pytest.mark.parametrize(
    "codes",
    [
        (65285,),
        (65281, 65282, 65284),
        (65281, 65280, 65282, 65280),  # lines at rest
        (1, 2, 65281, 3),
        (257, 1282, 513, 2, 258, 1281, 514, 1),  # the state of the lines varies
        (257, 258, 259, 260),
    ],
)
def test_a_floating_high_byte_is_found(codes: tuple[int, ...]) -> None:
    """Facts, T-6.3."""
    fault = only(find_faults(spaced(*codes, times=5), RATE_HZ))
    assert (fault.kind, fault.key) == (FaultKind.FLOATING_HIGH_BYTE, "floating high byte")
    assert fault.count == 5 * sum(code > 255 for code in codes)
    first = next(code for code in codes if code > 255)
    assert f"{first} becomes {first & 255}" in fault.cure


@pytest.mark.parametrize(
    "codes",
    [
        (256, 512, 1024, 1, 2, 4),  # a line each
        (1001, 1002, 1003, 2001, 2002),
        (301, 302, 303, 304),
        (500, 1000, 2000, 4000, 8000),
        tuple(range(1, 700)),  # a count of trials
    ],
)
def test_large_numbers_are_no_floating_byte(codes: tuple[int, ...]) -> None:
    assert find_faults(spaced(*codes, times=3), RATE_HZ) == ()


def test_a_plan_tells_a_floating_high_byte() -> None:
    markers = spaced(769, 778, 780, times=4)
    assert only(find_faults(spaced(769, 778, 780), RATE_HZ)).key == "floating high byte"
    markers = spaced(778, 780, times=4)
    assert find_faults(markers, RATE_HZ) == ()
    fault, *absent = find_faults(markers, RATE_HZ, plan_of({"10": "cue", "12": "probe"}))
    assert fault.key == "floating high byte"
    assert keys_of(absent) == ["absent code 10", "absent code 12"]
    assert absent[0].words.endswith("it would with the cure of floating high byte.")


def test_a_code_beyond_8_bits_is_told_by_the_plan() -> None:
    """Facts, T-6.3: 300 sent on 8 bits reads 44."""
    plan = plan_of({"300": "cue", "12": "probe"})
    fault = only(find_faults(spaced(44, 12, times=3), RATE_HZ, plan))
    assert (fault.kind, fault.key) == (FaultKind.BEYOND_8_BITS, "beyond 8 bits 300")
    assert (fault.cure, fault.count, fault.at) == ("", 3, (100, 1500, 2900))
    assert "300 reads 44" in fault.words


@pytest.mark.parametrize("codes", [(300, 12), (44, 300), (400, 44, 12), (12,)])
def test_a_code_is_not_beyond_8_bits(codes: tuple[int, ...]) -> None:
    """Where it occurs, where more bits were recorded, or where its low bits do not occur."""
    faults = find_faults(spaced(*codes, times=3), RATE_HZ, plan_of({"300": "cue", "12": "probe"}))
    assert FaultKind.BEYOND_8_BITS not in {fault.kind for fault in faults}


@pytest.mark.parametrize(
    "codes", [(129, 130, 131), (129, 131, 133), (150, 160, 170), (129, 130, 131, 200, 210)]
)
def test_a_stuck_highest_bit_is_found(codes: tuple[int, ...]) -> None:
    """Facts, T-6.4."""
    fault = only(find_faults(spaced(*codes, times=2), RATE_HZ))
    assert (fault.kind, fault.key, fault.count) == (FaultKind.STUCK_BIT, "stuck bit 7", 2 * len(codes))
    assert f"{codes[0]} becomes {codes[0] - 128}" in fault.cure


def test_a_stuck_bit_is_found_per_prefix() -> None:
    fault = only(find_faults(spaced("S129", "R 1", "S130", "R 2", "S149"), RATE_HZ))
    assert fault.key == "stuck bit 7 of S"
    assert "S129 becomes S 1" in fault.cure


@pytest.mark.parametrize(
    "codes",
    [
        (4, 5, 6, 7),
        (129, 130),
        (1, 129, 130, 131),
        (5, 7, 13, 15),
        (33, 34, 35, 36),
        (101, 102, 103, 104),
        (201, 202, 203, 204),
        (255, 254, 253, 252),
    ],
)
def test_codes_that_happen_to_share_bits_are_not_stuck(codes: tuple[int, ...]) -> None:
    assert find_faults(spaced(*codes, times=3), RATE_HZ) == ()


def test_a_plan_tells_any_stuck_bit() -> None:
    """Bit 5 at 1, 2, 3: absent codes say which cure would bring them."""
    markers = spaced(33, 34, 35, times=2)
    plan = plan_of({"1": "cue", "2": "cue", "3": "probe"})
    faults = find_faults(markers, RATE_HZ, plan)
    assert keys_of(faults) == ["stuck bit 5", "absent code 1", "absent code 2", "absent code 3"]
    assert faults[1].words.endswith("it would with the cure of stuck bit 5.")
    assert keys_of(find_faults(markers, RATE_HZ, plan, ["stuck bit 5"])) == ["stuck bit 5"]


def test_a_plan_that_names_the_codes_adds_no_stuck_bit() -> None:
    plan = plan_of({str(code): "cue" for code in (33, 34, 35)})
    assert find_faults(spaced(33, 34, 35), RATE_HZ, plan) == ()


def test_zero_codes_behind_a_stuck_bit_show_when_it_is_cured() -> None:
    markers = spaced(129, 128, 130, 128, 131, 128)
    alone = only(find_faults(markers, RATE_HZ))
    assert (alone.key, "listed as zero codes" in alone.cure) == ("stuck bit 7", True)
    faults = find_faults(markers, RATE_HZ, accepted=["stuck bit 7"])
    assert keys_of(faults) == ["stuck bit 7", "zero codes"]
    both = find_faults(markers, RATE_HZ, accepted=["zero codes", "stuck bit 7"])
    assert keys_of(both) == ["stuck bit 7", "zero codes"]


def test_two_bits_apart_are_found() -> None:
    """Facts, T-6.5: at one sample, not at 50 ms."""
    markers = stream((100, 1), (101, 3), (500, 1), (550, 3), (900, 2), (901, 6))
    fault = only(find_faults(markers, RATE_HZ))
    assert (fault.key, fault.count, fault.at) == ("two bits apart", 2, (100, 900))
    assert "2 times, first at 0.100 s (1, then 3)" in fault.words


def test_doubled_markers_are_found_per_code() -> None:
    """Facts, T-6.6."""
    markers = stream((100, "left"), (108, "left"), (700, "right"), (1500, "right"), (1500, "right"))
    left, right = find_faults(markers, RATE_HZ)
    assert (left.key, left.count, left.at) == ("doubled marker left", 1, (100,))
    assert (right.key, right.count, right.at) == ("doubled marker right", 1, (1500,))
    assert "less than 20 ms" in left.words


PAIRS = merged(
    spaced("cue", "probe", times=20),
    *(stream((400 + 1400 * index, "T"), (410 + 1400 * index, "T")) for index in range(20)),
)


def test_pairs_of_pulses_are_not_doubled() -> None:
    assert find_faults(PAIRS, RATE_HZ) == ()
    assert find_faults(PAIRS, RATE_HZ, plan_of({"cue": "cue", "probe": "probe", "T": "pulse"})) == ()
    unknown = plan_of({"cue": "cue", "probe": "probe", "T": "undecided"})
    assert find_faults(PAIRS, RATE_HZ, unknown) == ()


def test_pairs_of_anything_else_are_doubled() -> None:
    plan = plan_of({"cue": "cue", "probe": "probe", "T": "response"})
    fault = only(find_faults(PAIRS, RATE_HZ, plan))
    assert (fault.key, fault.count) == ("doubled marker T", 20)
    assert "pairs of pulses" not in fault.words
    few = only(find_faults(PAIRS[:7], RATE_HZ))
    assert (few.key, "if these are pairs of pulses" in few.words) == ("doubled marker T", True)


def test_an_accepted_cure_stays_listed_when_a_code_becomes_a_pulse() -> None:
    """So that it can be taken back."""
    plan = plan_of({"cue": "cue", "probe": "probe", "T": "pulse"})
    assert keys_of(find_faults(PAIRS, RATE_HZ, plan, ["doubled marker T"])) == ["doubled marker T"]


def test_pulses_closer_than_pairs_can_be_are_doubled() -> None:
    plan = plan_of({"T": "pulse", "cue": "cue"})
    markers = merged(spaced("cue", times=5), stream((300, "T"), (300, "T"), (1000, "T"), (1010, "T")))
    fault = only(find_faults(markers, RATE_HZ, plan))
    assert (fault.key, fault.count) == ("doubled marker within 0.5 ms T", 1)


def test_doubled_pulses_two_samples_apart_at_5_khz_are_told() -> None:
    plan = plan_of({"T": "pulse", "cue": "cue"})
    pulses = [Marker(float(start + step), "T") for start in range(5000, 50000, 5000) for step in (0, 2)]
    cues = [Marker(float(start - 2500), "cue") for start in range(5000, 50000, 5000)]
    markers = sorted([*cues, *pulses], key=lambda marker: marker.sample)
    fault = only(find_faults(markers, 5000.0, plan))
    assert (fault.key, fault.count) == ("doubled marker within 0.5 ms T", 9)


def test_doubled_pulses_cannot_be_told_from_pairs_at_a_low_rate() -> None:
    """At 250 Hz two pulses 2.5 ms apart may have the same sample."""
    plan = plan_of({"T": "pulse"})
    markers = stream((300, "T"), (300, "T"), (1000, "T"))
    assert find_faults(markers, 250.0, plan) == ()
    assert len(find_faults(markers, 1000.0, plan)) == 1


def test_a_recording_doubled_throughout_has_no_pairs() -> None:
    once = spaced("cue", "T", "probe", times=20)
    again = [Marker(marker.sample + 4, marker.code) for marker in once]
    faults = find_faults(merged(once, again), RATE_HZ)
    assert keys_of(faults) == ["doubled marker cue", "doubled marker T", "doubled marker probe"]
    assert [fault.count for fault in faults] == [20, 20, 20]
    plan = plan_of({"cue": "cue", "probe": "probe", "T": "pulse"})
    assert keys_of(find_faults(merged(once, again), RATE_HZ, plan)) == keys_of(faults)


def test_some_doubled_cues_make_no_doubled_pulses() -> None:
    again = [Marker(marker.sample + 4, "cue") for marker in PAIRS[:30] if marker.code == "cue"]
    for roles in ({"cue": "cue", "probe": "probe", "T": "pulse"}, {"cue": "cue"}):
        fault = only(find_faults(merged(PAIRS, again), RATE_HZ, plan_of(roles)))
        assert (fault.key, fault.count) == ("doubled marker cue", len(again))


def test_ignored_codes_may_be_doubled() -> None:
    plan = plan_of({"cue": "cue", "sync": "ignore"})
    assert find_faults(stream((100, "cue"), (200, "sync"), (205, "sync")), RATE_HZ, plan) == ()


def test_a_doubled_marker_keeps_its_key_when_a_bit_is_cured() -> None:
    markers = merged(spaced(129, 130, 131), stream((105, 129)))
    assert keys_of(find_faults(markers, RATE_HZ)) == ["stuck bit 7", "doubled marker 129"]
    faults = find_faults(markers, RATE_HZ, accepted=["stuck bit 7"])
    assert keys_of(faults) == ["stuck bit 7", "doubled marker 129"]
    assert faults[1].words.startswith("Code 1 (recorded as 129) ")


def test_bursts_are_found() -> None:
    burst = stream(*((5200 + 9 * step, step % 5 + 1) for step in range(10)))
    fault = only(find_faults(merged(spaced(1, 2, times=20), burst), RATE_HZ))
    assert (fault.kind, fault.key, fault.cure) == (FaultKind.BURST, "burst", "")
    assert (fault.at, fault.count) == ((5200,), 1)
    assert "first at 5.200 s" in fault.words


def test_absent_codes_are_found() -> None:
    plan = plan_of({"1": "cue", "2": "probe", "3": "response", "4": "ignore"})
    faults = find_faults(spaced(1, 2, times=3), RATE_HZ, plan)
    fault = only(faults)
    assert (fault.kind, fault.key) == (FaultKind.ABSENT_CODE, "absent code 3")
    assert (fault.at, fault.count, fault.cure) == ((), 0, "")


TWICE = """
[[trial]]
slot = "cue1"
role = "cue"
[[trial]]
slot = "probe1"
role = "probe"
after_s = [2.0, 3.0]
[[trial]]
slot = "cue2"
role = "cue"
after_s = [{low}, {high}]
[[trial]]
slot = "probe2"
role = "probe"
after_s = [2.0, 3.0]
"""


def twice(trials: int, seed: int = 3) -> tuple[Marker, ...]:
    """Trials of cue, probe 2.5 s later, cue 1.0 s later, probe 2.5 s later; all a little jittered."""
    random_state = random.Random(seed)
    found: list[tuple[float, str]] = []
    for trial in range(trials):
        start = 100 + 12_000 * trial
        for after, code in ((0, "C"), (2500, "P"), (3500, "C"), (6000, "P")):
            found.append((start + after + random_state.randint(0, 40), code))
    return stream(*found)


def test_intervals_inside_the_plan_are_no_fault() -> None:
    plan = plan_of({"C": "cue", "P": "probe"}, TWICE.format(low=0.5, high=1.5))
    assert find_faults(twice(20), RATE_HZ, plan) == ()


def test_intervals_outside_the_plan_are_found() -> None:
    plan = plan_of({"C": "cue", "P": "probe"}, TWICE.format(low=0.2, high=0.6))
    fault = only(find_faults(twice(20), RATE_HZ, plan))
    assert (fault.kind, fault.key) == (
        FaultKind.INTERVAL_OUTSIDE,
        "interval outside the plan probe1 to cue2",
    )
    assert (fault.count, fault.cure) == (20, "")
    assert "allows 0.2 to 0.6 s, but 20 of 20 intervals lie outside: usually 0.99" in fault.words or (
        "allows 0.2 to 0.6 s, but 20 of 20 intervals lie outside: usually 1.0" in fault.words
    )
    assert fault.at == tuple(
        int(a.sample)
        for a, b in itertools.pairwise(twice(20))
        if (a.code, b.code) == ("P", "C") and b.sample - a.sample < 2000
    )


def test_a_few_intervals_outside_the_plan_are_no_fault() -> None:
    """Trials are judged one by one elsewhere; a fault is what is usual."""
    plan = plan_of({"C": "cue", "P": "probe"}, TWICE.format(low=0.5, high=1.5))
    markers = [
        Marker(marker.sample + 900, marker.code) if index % 4 == 2 and index < 36 else marker
        for index, marker in enumerate(twice(20))
    ]
    assert find_faults(markers, RATE_HZ, plan) == ()


def test_no_markers_have_no_faults() -> None:
    assert find_faults((), RATE_HZ) == ()
    assert keys_of(find_faults((), RATE_HZ, plan_of({"1": "cue"}))) == ["absent code 1"]


def test_faults_come_in_the_order_of_their_cures_with_keys_of_their_own() -> None:
    markers = merged(
        spaced(65281, 65282, 65284, times=5),
        stream((301, 65281), (302, 65281), (303, 65281), (400, 65280), (450, 65281), (451, 65283)),
        stream((1200, "x"), (1205, "x")),
    )
    accepted = ["floating high byte"]
    faults = find_faults(markers, RATE_HZ, plan_of({"1": "cue", "9": "probe"}), accepted)
    kinds = [fault.kind for fault in faults]
    assert kinds == [
        FaultKind.FLOATING_HIGH_BYTE,
        FaultKind.ZERO_CODES,
        FaultKind.HELD_LEVEL,
        FaultKind.TWO_BITS_APART,
        FaultKind.DOUBLED_MARKER,
        FaultKind.ABSENT_CODE,
    ]
    assert len(set(keys_of(faults))) == len(faults)


@given(
    steps=st.lists(
        st.tuples(
            st.sampled_from([0.0, 1.0, 1.0, 1.0, 7.0, 400.0]),
            st.sampled_from(["0", "1", "3", "7", "129", "131", "65281", "S129", "S131", "S135", "cue"]),
        ),
        max_size=30,
    ),
    data=st.data(),
)
@settings(max_examples=200, deadline=None)
def test_every_fault_with_a_cure_can_be_accepted_and_taken_back(
    steps: list[tuple[float, str]], data: st.DataObject
) -> None:
    sample = 0.0
    markers = []
    for step, code in steps:
        sample += step
        markers.append(Marker(sample, code))
    faults = find_faults(markers, RATE_HZ)
    assert len(set(keys_of(faults))) == len(faults)
    curable = [fault for fault in faults if fault.cure]
    for fault in curable:
        result = cured(markers, RATE_HZ, [fault.key])
        assert fault.words.endswith(".")
        if fault.kind in (FaultKind.FLOATING_HIGH_BYTE, FaultKind.STUCK_BIT, FaultKind.ZERO_CODES):
            assert result.counts == {fault.key: fault.count}
    accepted = data.draw(st.sets(st.sampled_from(keys_of(curable))) if curable else st.just(set[str]()))
    shown = keys_of(find_faults(markers, RATE_HZ, accepted=accepted))
    assert set(cured(markers, RATE_HZ, accepted).counts) <= set(shown)


# Faults put into a healthy stream, and cured again

Injection = Callable[[list[Marker], random.Random], list[Marker]]


def held(markers: list[Marker], random_state: random.Random) -> list[Marker]:
    """Read every sample of levels that last 3 to 12 samples."""
    return [
        Marker(marker.sample + step, marker.code)
        for marker in markers
        for step in range(random_state.randint(3, 12))
    ]


def returning_to_zero(markers: list[Marker], random_state: random.Random) -> list[Marker]:
    """Add a zero some samples after each."""
    zeros = [Marker(marker.sample + random_state.randint(3, 20), "0") for marker in markers]
    return list(merged(markers, zeros))


def stuck_line(markers: list[Marker], random_state: random.Random) -> list[Marker]:
    """Set bit 7."""
    return [Marker(marker.sample, str(int(marker.code) | 128)) for marker in markers]


def floating_lines(markers: list[Marker], random_state: random.Random) -> list[Marker]:
    """Put any high byte before each code."""
    return [
        Marker(marker.sample, str(int(marker.code) | random_state.randint(0, 255) << 8)) for marker in markers
    ]


def late_bits(markers: list[Marker], random_state: random.Random) -> list[Marker]:
    """Let the lowest bit arrive a sample before the others, in half of the codes that have more."""
    found = []
    for marker in markers:
        lowest = int(marker.code) & -int(marker.code)
        found.append(marker)
        if lowest != int(marker.code) and random_state.random() < 0.5:
            found[-1:] = [Marker(marker.sample, str(lowest)), Marker(marker.sample + 1, marker.code)]
    return found


def sent_twice(markers: list[Marker], random_state: random.Random) -> list[Marker]:
    """Send a tenth of the markers twice."""
    again = [
        Marker(marker.sample + random_state.randint(2, 18), marker.code)
        for marker in markers
        if random_state.random() < 0.1
    ]
    return list(merged(markers, again))


# In the order in which they arise: the task sends, the port adds.
INJECTIONS: tuple[tuple[FaultKind, Injection], ...] = (
    (FaultKind.DOUBLED_MARKER, sent_twice),
    (FaultKind.TWO_BITS_APART, late_bits),
    (FaultKind.HELD_LEVEL, held),
    (FaultKind.ZERO_CODES, returning_to_zero),
    (FaultKind.STUCK_BIT, stuck_line),
    (FaultKind.FLOATING_HIGH_BYTE, floating_lines),
)


@pytest.mark.parametrize("seed", range(40))
def test_faults_put_in_are_found_and_cured(seed: int) -> None:
    """One kind alone, then some at once: accepting cures from the top gives the healthy stream back."""
    random_state = random.Random(seed)
    codes = range(1, random_state.randint(4, 60))
    healthy_ones, sample = [], 100
    for _ in range(300):
        healthy_ones.append(Marker(float(sample), str(random_state.choice(codes))))
        sample += random_state.randint(60, 1500)
    alone = INJECTIONS[seed % len(INJECTIONS)]
    # A floating byte or a late bit during a held level are other faults than these.
    others = [one for one in INJECTIONS if one[0] is not FaultKind.HELD_LEVEL]
    drawn = [one for one in others if random_state.random() < 0.5]
    for chosen in ([alone], drawn):
        markers = healthy_ones
        for _, put_in in chosen:
            markers = put_in(markers, random_state)
        accepted: set[str] = set()
        while True:
            faults = find_faults(markers, RATE_HZ, accepted=accepted)
            offered = [fault for fault in faults if fault.cure and fault.key not in accepted]
            if not offered:
                break
            accepted.update(fault.key for fault in offered if fault.kind is offered[0].kind)
        assert {fault.kind for fault in faults} == {kind for kind, _ in chosen}
        result = cured(markers, RATE_HZ, accepted)
        assert result.markers == tuple(healthy_ones)
        assert result.unknown == ()


# Healthy streams

Naming = Callable[[int], str]

NAMINGS: tuple[Naming, ...] = (
    str,
    lambda number: " ".join(f"S{number:3d}".split()),
    lambda number: f"cue {number}",
    lambda number: f"T{number}",
    lambda number: f"{number:03d}",
)


def code_sets(random_state: random.Random) -> list[int]:
    """Draw codes as laboratories choose them: counted, by tens or hundreds, one line each, or any."""
    n = random_state.randint(3, 9)
    match random_state.randrange(6):
        case 0:
            return list(range(1, n + 1))
        case 1:
            ten = 10 * random_state.randint(1, 9)
            return [ten + step for step in range(1, n + 1)]
        case 2:
            hundred = random_state.choice([100, 200, 300, 1000, 2000])
            return [hundred + step for step in range(1, n + 1)]
        case 3:
            return [1 << bit for bit in range(random_state.randint(3, 8))]
        case 4:
            return [10 * (1 + step // 3) + step % 3 + 1 for step in range(n)]
        case _:
            return [random_state.randint(1, 127), *random_state.sample(range(1, 256), n)]


def healthy(random_state: random.Random) -> tuple[list[Marker], float, str]:
    """Draw a task of one to two hundred trials with jittered events, single or paired pulses or trains."""
    rate_hz = random_state.choice([250.0, 500.0, 512.0, 1000.0, 2048.0, 5000.0, 25_000.0])
    naming = random_state.choice(NAMINGS)
    codes = [naming(number) for number in dict.fromkeys(code_sets(random_state))]
    pulse = random_state.choice(["TMS", "R 8", "pulse"])
    offsets_s = random_state.choice(
        [(0.0,), (0.0, 0.001), (0.0, 0.0025), (0.0, 0.01), (0.0, 0.015), (0.0, 0.1), (0.0, 0.02, 0.04), ()]
    )
    is_whole = random_state.random() < 0.7
    markers = []
    time_s = random_state.uniform(1, 10)
    per_trial = random_state.randint(2, 5)
    for trial in range(random_state.randint(60, 200)):
        for event in range(per_trial):
            code = codes[(trial * per_trial + event) % len(codes)]
            markers.append(Marker(time_s * rate_hz, code))
            time_s += random_state.uniform(0.3, 2.5)
            if event == 0:
                markers += [Marker((time_s + offset) * rate_hz, pulse) for offset in offsets_s]
                time_s += random_state.uniform(0.3, 2.5)
    if is_whole:
        markers = [Marker(float(int(marker.sample)), marker.code) for marker in markers]
    return markers, rate_hz, pulse


@pytest.mark.parametrize("part", range(5))
def test_healthy_streams_have_no_fault(part: int) -> None:
    """500 in all, each without a plan and with one that names all codes."""
    for seed in range(100 * part, 100 * part + 100):
        markers, rate_hz, pulse = healthy(random.Random(seed))
        found = find_faults(markers, rate_hz)
        assert found == (), (seed, [fault.words for fault in found])
        roles = {marker.code: "pulse" if marker.code == pulse else "other" for marker in markers}
        named = find_faults(markers, rate_hz, plan_of(roles, '[[trial]]\nslot = "a"\nrole = "other"\n'))
        assert named == (), (seed, [fault.words for fault in named])
