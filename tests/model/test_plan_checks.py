"""What keys must be to each other, to a recording's rate and to its channels."""

from __future__ import annotations

from dataclasses import replace

import pytest

from pulsemend.errors import MarksError, PlanError
from pulsemend.model.label_columns import rule_columns, slot_columns
from pulsemend.model.marks import NO_MARKS, Marks
from pulsemend.model.marks_file import parse_marks
from pulsemend.model.plan import Plan
from pulsemend.model.plan_checks import (
    check_against_rate,
    check_channels,
    check_decided,
)
from pulsemend.model.plan_file import PlanFile, parse_plan
from pulsemend.model.vocabulary import ChannelType

TEXT = """\
pulsemend = 1
[markers.lamp]
role = "sample"
labels = { colour = "green" }
[markers.left]
role = "cue"
labels = { item = "left" }
[markers.right]
role = "cue"
labels = { side = "r", item = "right" }
[[trial]]
slot = "sample"
role = "sample"
[[trial]]
slot = "cue1"
role = "cue"
after_s = [1.0, 2.0]
[[trial]]
slot = "cue2"
role = "cue"
after_s = [1.0, 2.0]
[pulses]
times = "none"
[filter]
lowpass_hz = 0
rate_hz = 0
[epochs]
length_s = 1.0
[[epochs.rule]]
name = "b"
anchor = "sample"
start_s = 0.3
labels = { z = "cue1.item", a = "cue2.item" }
[[epochs.rule]]
name = "a"
anchor = "sample"
start_s = -0.3
labels = { a = "cue1.side" }
"""
FILE = parse_plan(TEXT)
PLAN = FILE.plan


def with_row(old: str, new: str) -> PlanFile:
    assert TEXT.count(old) == 1
    return parse_plan(TEXT.replace(old, new))


def refusal(plan: Plan, rate_hz: float) -> PlanError:
    with pytest.raises(PlanError) as caught:
        check_against_rate(plan, rate_hz)
    return caught.value


def seconds(allowed: str) -> list[float]:
    """Values of a refusal, each with its unit."""
    values = allowed.split(" | ")
    assert all(value.endswith(" s") for value in values)
    return [float(value.removesuffix(" s")) for value in values]


def test_label_columns() -> None:
    assert slot_columns(PLAN) == ("sample.colour", "cue1.item", "cue1.side", "cue2.item", "cue2.side")
    assert rule_columns(PLAN) == ("a", "z")


def test_order_of_codes_says_nothing() -> None:
    assert slot_columns(replace(PLAN, markers=PLAN.markers[::-1])) == slot_columns(PLAN)


def test_output_rate() -> None:
    assert check_against_rate(PLAN, 5000.0) == 5000.0
    assert check_against_rate(with_row("rate_hz = 0", "rate_hz = 500").plan, 5000.0) == 500.0
    assert check_against_rate(with_row("rate_hz = 0", "rate_hz = 500").plan, 500.0) == 500.0


def test_rate_above_the_recorded_one_is_refused() -> None:
    error = refusal(with_row("rate_hz = 0", "rate_hz = 1000").plan, 500.0)
    assert (error.key, error.received) == ("filter.rate_hz", "1000")
    assert "up to 500 Hz" in error.allowed


@pytest.mark.parametrize(("lowpass_hz", "recorded_hz"), [(200.1, 5000.0), (445.0, 500.0), (449.0, 500.0)])
def test_lowpass_that_does_not_fit_the_output_rate_is_refused(lowpass_hz: float, recorded_hz: float) -> None:
    # At a reduced rate 0.4 x rate_hz is the highest; as recorded the transition has to end at half the rate.
    plan = replace(PLAN, filter=replace(PLAN.filter, rate_hz=500.0, lowpass_hz=lowpass_hz))
    assert refusal(plan, recorded_hz).key == "filter.lowpass_hz"


@pytest.mark.parametrize(("lowpass_hz", "recorded_hz"), [(200.0, 5000.0), (222.0, 500.0), (0.0, 5000.0)])
def test_lowpass_that_fits(lowpass_hz: float, recorded_hz: float) -> None:
    plan = replace(PLAN, filter=replace(PLAN.filter, rate_hz=500.0, lowpass_hz=lowpass_hz))
    assert check_against_rate(plan, recorded_hz) == 500.0


def test_starts_and_lengths_are_whole_numbers_of_output_samples() -> None:
    # 0.3 s at 512 Hz are 153.6 samples.
    error = refusal(PLAN, 512.0)
    assert error.key == "epochs.rule[1].start_s"
    assert error.received == "0.3 s"
    low, high = seconds(error.allowed)
    assert (low, high) == (153 / 512, 154 / 512)
    for value in (low, high):
        rules = tuple(replace(rule, start_s=value) for rule in PLAN.epochs.rule)
        assert check_against_rate(replace(PLAN, epochs=replace(PLAN.epochs, rule=rules)), 512.0) == 512.0
    error = refusal(PLAN, 1000.4)
    assert error.key == "epochs.length_s"
    # 1000 / 1000.4 and 1001 / 1000.4, with digits enough to be accepted themselves.
    assert seconds(error.allowed) == pytest.approx([0.99960015993602559, 1.0005997600959616], abs=1e-13)
    assert refusal(replace(PLAN, epochs=replace(PLAN.epochs, length_s=0.004)), 100.0).allowed == "0.01 s"


def test_whole_within_a_millionth_of_a_sample() -> None:
    rules = tuple(replace(rule, start_s=0.1 + 0.2) for rule in PLAN.epochs.rule)
    assert check_against_rate(replace(PLAN, epochs=replace(PLAN.epochs, rule=rules)), 1000.0) == 1000.0
    rules = tuple(replace(rule, start_s=0.3 + 2e-9) for rule in PLAN.epochs.rule)
    assert refusal(replace(PLAN, epochs=replace(PLAN.epochs, rule=rules)), 1000.0).key.endswith("start_s")


def test_negative_start_names_values_on_both_sides() -> None:
    rules = (replace(PLAN.epochs.rule[0], start_s=-0.3),)
    error = refusal(replace(PLAN, epochs=replace(PLAN.epochs, rule=rules)), 512.0)
    low, high = seconds(error.allowed)
    assert low < -0.3 < high


def test_known_rate_is_checked_at_once() -> None:
    with pytest.raises(PlanError) as caught:
        with_row("rate_hz = 0", "rate_hz = 512")
    assert caught.value.line == TEXT[: TEXT.index("start_s = 0.3")].count("\n") + 1


def test_later_refusals_get_their_line_from_the_source() -> None:
    file = parse_plan(TEXT, "study.toml")
    with pytest.raises(PlanError) as caught, file.source.located():
        check_against_rate(file.plan, 512.0)
    assert caught.value.line == TEXT[: TEXT.index("start_s = 0.3")].count("\n") + 1
    assert caught.value.path == "study.toml"
    assert str(caught.value).startswith("study.toml, line ")


def test_undecided_codes() -> None:
    check_decided(PLAN)
    file = with_row(
        "[pulses]", '[markers."S 7"]\nrole = "undecided"\n[markers.x]\nrole = "undecided"\n[pulses]'
    )
    with pytest.raises(PlanError) as caught, file.source.located():
        check_decided(file.plan)
    error = caught.value
    assert error.problem == 'still undecided: "S 7", "x"'
    assert error.key == 'markers."S 7".role'
    assert '"undecided"' not in error.allowed
    assert file.text.split("\n")[(error.line or 0) - 1] == 'role = "undecided"'


# --- channels ---------------------------------------------------------------------------------------

NAMES = ("Fp1", "C3", "C4", "TP9", "TP10")


def with_channels(rows: str) -> Plan:
    return parse_plan(f"{TEXT}\n[channels]\n{rows}\n").plan


def test_channels_that_are_there() -> None:
    plan = with_channels('bad = ["C3"]\nreference = ["TP9", "TP10", "FCz"]\nrecorded_reference = "FCz"')
    marks = Marks(bad=("C4",), types={"Fp1": ChannelType.EOG}, gaps_ms={"C3": (-2.0, 20.0)})
    assert check_channels(plan, marks, NAMES) == ()


def test_bad_channels_that_are_not_there_are_warnings() -> None:
    warnings = check_channels(with_channels('bad = ["Cz"]'), Marks(bad=("Oz", "C3")), NAMES)
    assert warnings == (
        'plan: bad channel "Cz" is not in the recording',
        'marks: bad channel "Oz" is not in the recording',
    )


@pytest.mark.parametrize(
    ("rows", "key", "near"),
    [
        ('reference = ["TP9", "TP11"]', "channels.reference[2]", '"TP10"'),
        ('reference = ["tp9"]', "channels.reference[1]", '"TP9"'),
        ('recorded_reference = "C3"', "channels.recorded_reference", ""),
        ("[pulses.channels]\nC5 = [-2, 20]", "pulses.channels.C5", '"C3"'),
    ],
)
def test_channels_that_are_needed(rows: str, key: str, near: str) -> None:
    text = TEXT.replace("[pulses]\n", "") if rows.startswith("[pulses") else TEXT
    text = text.replace('times = "none"\n', "") if rows.startswith("[pulses") else text
    head = "" if rows.startswith("[pulses") else "[channels]\n"
    tail = '\n[pulses]\ntimes = "none"\n' if rows.startswith("[pulses") else "\n"
    plan = parse_plan(text + head + rows + tail).plan
    with pytest.raises(PlanError) as caught:
        check_channels(plan, NO_MARKS, NAMES)
    assert caught.value.key == key
    assert near in caught.value.allowed


def test_refusals_of_marks_are_located_in_the_marks() -> None:
    plan_file = parse_plan(TEXT, "study.toml")
    marks_file = parse_marks("pulsemend_marks = 1\n\n[types]\nfp1 = 'eog'\n", "lt01.marks.toml")
    with pytest.raises(MarksError) as caught, plan_file.source.located(), marks_file.source.located():
        check_channels(plan_file.plan, marks_file.marks, NAMES)
    assert (caught.value.path, caught.value.line) == ("lt01.marks.toml", 4)
    with pytest.raises(MarksError) as caught, plan_file.source.located():
        check_channels(plan_file.plan, marks_file.marks, NAMES)
    assert (caught.value.path, caught.value.line) == ("", None)


@pytest.mark.parametrize(
    ("marks", "key"),
    [
        (Marks(types={"fp1": ChannelType.EOG}), "types.fp1"),
        (Marks(gaps_ms={"C 3": (-2.0, 20.0)}), 'gaps_ms."C 3"'),
    ],
)
def test_channels_that_marks_need(marks: Marks, key: str) -> None:
    with pytest.raises(MarksError) as caught:
        check_channels(PLAN, marks, NAMES)
    assert caught.value.key == key
    assert '"Fp1"' in caught.value.allowed or '"C3"' in caught.value.allowed


def test_bad_reference_is_refused() -> None:
    plan = with_channels('reference = ["TP9", "TP10"]')
    with pytest.raises(PlanError, match="bad in this recording's marks"):
        check_channels(plan, Marks(bad=("TP10",)), NAMES)
    with pytest.raises(PlanError, match="bad in every recording"):
        with_channels('reference = ["TP9"]\nbad = ["TP9"]')


# --- warnings ---------------------------------------------------------------------------------------


def test_warnings() -> None:
    assert FILE.warnings == ()
    pulses = with_row('times = "none"', "window_ms = [5, 20]").warnings
    assert len(pulses) == 2
    assert "does not contain the onset" in pulses[0]
    assert 'no code has role "pulse"' in pulses[1]
    seconds = with_row('times = "none"', "window_ms = [-0.002, 0.014]").warnings
    assert "given in milliseconds" in seconds[0]
    optional = with_row(
        "[pulses]", '[[trial]]\nslot="p"\nrole="probe"\nafter_s=[1,2]\noptional=true\n[pulses]'
    )
    assert optional.warnings == ('slot "p" is optional and no code has its role "probe"',)
    wide = parse_plan(TEXT.replace("lowpass_hz = 0\nrate_hz = 0", "lowpass_hz = 420\nrate_hz = 1000"))
    assert "above 0.4 x rate_hz" in wide.warnings[0]


def test_a_plan_without_a_gap_can_be_read_but_not_carried_out() -> None:
    """The gap has no default; until a person decides it, the plan can be shown and edited."""
    read = with_row('times = "none"', 'times = "markers"')
    assert read.plan.pulses.window_ms is None
    with pytest.raises(PlanError, match="must be decided") as caught, read.source.located():
        check_decided(read.plan)
    assert caught.value.key == "pulses.window_ms"
    assert caught.value.line is not None


def test_a_plan_without_slots_or_rules_can_be_read_but_not_carried_out() -> None:
    """A recording whose trials nobody has described yet can be looked at with its plan."""
    bare = parse_plan('pulsemend = 1\n[pulses]\ntimes = "none"\n[epochs]\nlength_s = 1.0\n')
    assert bare.plan.trial == ()
    assert bare.plan.epochs.rule == ()
    assert bare.warnings == ()
    assert slot_columns(bare.plan) == rule_columns(bare.plan) == ()
    with pytest.raises(PlanError, match=r"has no slot; at least one \[\[trial\]\] is needed") as caught:
        check_decided(bare.plan)
    assert caught.value.key == "trial"
    ruleless = replace(PLAN, epochs=replace(PLAN.epochs, rule=()))
    with pytest.raises(PlanError, match=r"has no rule; at least one \[\[epochs.rule\]\] is needed") as caught:
        check_decided(ruleless)
    assert caught.value.key == "epochs.rule"


def test_a_rule_needs_a_slot_to_start_at() -> None:
    with pytest.raises(PlanError, match="must name a slot of the trial"):
        parse_plan(
            "pulsemend = 1\n[epochs]\nlength_s = 1.0\n[[epochs.rule]]\n"
            'name = "a"\nanchor = "cue"\nstart_s = 0.0\n'
        )
