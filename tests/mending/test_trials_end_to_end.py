"""Markers become trials through the whole of `mend`: recordings, plans, marks on disk; simulated truth."""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import pytest

from pulsemend.errors import InputError, LogError, NoEpochs
from pulsemend.mending.facts import summarise
from pulsemend.mending.learned import learn
from pulsemend.mending.prepare import Prepared
from pulsemend.model.marks_file import parse_marks
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Fate
from pulsemend.progress import finish
from pulsemend.readers.opening import open_recording
from pulsemend.simulate.schedule import Fault, FaultKind
from support.lantern_log import (
    N_TRIALS,
    ONSET,
    PLAN,
    RATE_HZ,
    SIGNAL_FILLS,
    UNMARKED,
    adds_up,
    dry,
    facts_of,
    markers_of,
    moment,
    photodiode,
    recoded,
    sample_of,
    without,
    write,
)
from support.small_lantern import SetOnDisk, changed, make_request, run_mend

NUMBERS = {"lanterns up": 1, "arrow left": 2, "arrow right": 6, "pulse": 8}
IN_NUMBERS = changed(
    PLAN,
    ('[markers."lanterns up"]', '[markers."1"]'),
    ('[markers."arrow left"]', '[markers."2"]'),
    ('[markers."arrow right"]', '[markers."6"]'),
    ("[markers.pulse]", '[markers."8"]'),
)


@pytest.fixture(scope="module")
def recording(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write(tmp_path_factory.mktemp("recorded"))


def is_whole(prepared: Prepared) -> None:
    """Every trial is found, complete, and has the markers and labels that were simulated."""
    trials = prepared.trials.trials
    assert len(trials) == N_TRIALS
    for trial in trials:
        assert (trial.missing, trial.doubts) == ((), ())
        for slot in ("sample", "cue1", "pulse1", "cue2", "pulse2"):
            assert trial.markers[slot].sample == sample_of(trial.number, slot)
    for one in prepared.kept:
        cue = moment(one.trial, one.anchor)
        assert one.labels["cued"] == cue.code.removeprefix("arrow ")
    assert len(prepared.kept) == 2 * N_TRIALS


def test_the_recording_itself_is_whole(recording: Path, tmp_path: Path) -> None:
    is_whole(dry(recording, PLAN, tmp_path))


# Cures


def doubled(markers: Sequence[Marker], code: str, by: int = 10) -> list[Marker]:
    return [*markers, *(replace(one, sample=one.sample + by) for one in markers if one.code == code)]


FAULTS = {
    "stuck bit 5": [replace(one, code=str(int(one.code) | 32)) for one in recoded(markers_of(), NUMBERS)],
    "doubled marker 2": doubled(recoded(markers_of(), NUMBERS), "2"),
    "floating high byte": [
        replace(one, code=str(int(one.code) + (65280 if place % 3 else 0)))
        for place, one in enumerate(recoded(markers_of(), NUMBERS))
    ],
}


@pytest.mark.parametrize("key", FAULTS)
def test_an_accepted_cure_makes_trials_whole_and_a_refused_one_changes_nothing(
    key: str, tmp_path: Path
) -> None:
    recording = write(tmp_path / "in", FAULTS[key])
    keys = [fault.key for fault in facts_of(recording, IN_NUMBERS, tmp_path / "facts").faults if fault.cure]
    assert keys == [key]
    accepted = f'[cures]\naccepted = ["{key}"]\n'
    prepared = dry(recording, IN_NUMBERS, tmp_path / "study", accepted)
    is_whole(prepared)
    assert any(f"cure of {key} was applied to" in one for one in prepared.warnings)
    # With and without a decision against it, the markers are as recorded.
    for marks in (None, f'[cures]\nrefused = ["{key}"]\n'):
        request = make_request(recording, IN_NUMBERS, tmp_path / "study", marks)
        summary = finish(summarise(recording, request.plan, request.marks))
        assert summary.facts.markers == tuple(
            sorted(
                (Marker(one.sample, one.code, one.type) for one in FAULTS[key]), key=lambda one: one.sample
            )
        )


def test_without_its_cure_a_stuck_bit_leaves_nothing(tmp_path: Path) -> None:
    """The plan's codes do not occur at all, and pulses have no marker: that is said, not guessed."""
    recording = write(tmp_path / "in", FAULTS["stuck bit 5"])
    with pytest.raises(InputError, match="no pulse is known, but 24 pulse-like events"):
        dry(recording, IN_NUMBERS, tmp_path / "study")
    facts = facts_of(recording, IN_NUMBERS, tmp_path / "study")
    assert facts.planned is not None
    assert facts.planned.trials.trials == ()


def test_a_cure_that_fits_nothing_is_a_warning(recording: Path, tmp_path: Path) -> None:
    prepared = dry(recording, PLAN, tmp_path, '[cures]\naccepted = ["stuck bit 5"]\n')
    assert "marks: the cure of stuck bit 5 is accepted, but there is no such fault" in prepared.warnings
    is_whole(prepared)


def test_cures_are_in_the_provenance(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", FAULTS["doubled marker 2"])
    marks = '[cures]\naccepted = ["doubled marker 2"]\n'
    written = SetOnDisk(run_mend(recording, IN_NUMBERS, tmp_path / "study", marks).folder)
    provenance = json.loads(written.path("provenance.json").read_text(encoding="utf-8"))
    assert provenance["cures"] == ["doubled marker 2"]
    assert len(written.hdf5("data")) == 2 * N_TRIALS
    assert 'accepted = ["doubled marker 2"]' in written.path("marks.toml").read_text(encoding="utf-8")


# Single markers decided by hand


def test_markers_added_and_ignored_by_hand(tmp_path: Path) -> None:
    lost, stray = sample_of(3, "cue2"), sample_of(6, "sample") + 500
    markers = [*without(markers_of(), lost), Marker(stray, "arrow left", "Screen")]
    recording = write(tmp_path / "in", markers)
    code = moment(3, "cue2").code
    open_ = dry(recording, PLAN, tmp_path / "study")
    assert [trial.number for trial in open_.trials.trials if trial.missing] == [3]
    assert [one.sample for one in open_.trials.extra] == [stray]
    assert f"one marker belongs to no trial: arrow left at {stray / RATE_HZ:.3f} s" in open_.warnings
    marks = (
        f'[[markers_added]]\nsample = {lost}\ncode = "{code}"\n'
        f'[[markers_ignored]]\nsample = {stray}\ncode = "arrow left"\n'
        '[[markers_ignored]]\nsample = 7\ncode = "arrow left"\n'
    )
    prepared = dry(recording, PLAN, tmp_path / "study", marks)
    is_whole(prepared)
    assert prepared.trials.extra == ()
    for words in (
        "markers ignored by hand: 1",
        "markers added by hand: 1",
        "the marker arrow left at sample 7 is ignored, but there is none",
    ):
        assert sum(words in one for one in prepared.warnings) == 1


def test_a_doubtful_trial_is_left_out_until_one_marker_is_ignored(tmp_path: Path) -> None:
    """Two arrows 40 ms apart fit the plan's limits equally well: both are named, none is taken."""
    own, other = sample_of(4, "cue1"), sample_of(4, "cue1") + 80
    code = {"arrow left": "arrow right", "arrow right": "arrow left"}[moment(4, "cue1").code]
    recording = write(tmp_path / "in", [*markers_of(), Marker(other, code, "Screen")])
    wide = changed(PLAN, ("after_s = [5.1, 5.3]", "after_s = [5.0, 5.4]"))
    prepared = dry(recording, wide, tmp_path / "study")
    adds_up(prepared)
    (trial,) = (one for one in prepared.trials.trials if one.doubts)
    assert trial.number == 4
    (words,) = trial.doubts
    assert words.startswith("cue1 at ")
    assert f"{own / RATE_HZ:.3f} s" in words
    assert f"{other / RATE_HZ:.3f} s" in words
    fates = {(one.fate, one.detail) for one in prepared.ledger if one.trial == 4}
    assert fates == {(Fate.TRIAL_DOUBTFUL, words)}
    assert len(prepared.kept) == 2 * (N_TRIALS - 1)
    marks = f'[[markers_ignored]]\nsample = {other}\ncode = "{code}"\n'
    is_whole(dry(recording, wide, tmp_path / "study", marks))


def test_a_lost_marker_costs_its_own_trial_alone(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", without(markers_of(), sample_of(5, "cue1"), sample_of(9, "sample")))
    prepared = dry(recording, PLAN, tmp_path / "study")
    adds_up(prepared)
    assert {trial.number: trial.missing for trial in prepared.trials.trials if trial.missing} == {
        5: ("cue1",),
        9: ("sample",),
    }
    assert {one.trial for one in prepared.kept} == set(range(1, N_TRIALS + 1)) - {5, 9}
    assert {one.detail for one in prepared.ledger if one.trial == 5} == {"no cue1"}


# Blocks, balance, facts


def test_blocks_set_trials_aside_and_the_ledger_adds_up(tmp_path: Path) -> None:
    """A practice block of two trials, then two blocks whose first trial is set aside."""
    starts = {1: "try out", 3: "block", 8: "block"}
    markers = [*markers_of()]
    markers += [Marker(sample_of(trial, "sample") - 1000, code, "Task") for trial, code in starts.items()]
    blocks = (
        '[blocks]\ncodes = ["block"]\npractice_codes = ["try out"]\nafter_pause = 1\n'
        '[labels]\nplace = { position = "block" }'
    )
    plan = changed(PLAN, ("[labels]", blocks))
    prepared = dry(write(tmp_path / "in", markers), plan, tmp_path / "study")
    adds_up(prepared)
    assert [trial.block for trial in prepared.trials.trials] == [1] * 2 + [2] * 5 + [3] * 5
    aside = {trial.number: trial.set_aside for trial in prepared.trials.trials if trial.set_aside}
    assert set(aside) == {1, 2, 3, 8}
    assert "practice" in aside[1]
    assert aside[3] == "first in its block"
    assert {one.trial for one in prepared.ledger if one.fate is Fate.SET_ASIDE} == set(aside)
    assert all(one.detail == aside[one.trial] for one in prepared.ledger if one.trial in aside)
    assert len(prepared.ledger) == 2 * N_TRIALS
    assert len(prepared.kept) == 2 * (N_TRIALS - 4)
    assert [one.labels["place"] for one in prepared.kept if one.trial == 10] == ["3", "3"]
    assert [one.labels["block"] for one in prepared.kept if one.trial == 10] == ["3", "3"]
    (unnamed,) = (one for one in prepared.warnings if "does not name" in one)
    assert "block" not in unnamed
    assert "try out" not in unnamed


def test_a_code_of_blocks_that_never_occurs_is_said(recording: Path, tmp_path: Path) -> None:
    plan = changed(PLAN, ("[labels]", '[blocks]\ncodes = ["rest"]\n[labels]'))
    warnings = dry(recording, plan, tmp_path).warnings
    assert "codes that the plan names but the recording lacks: rest" in warnings


@pytest.mark.parametrize("choose", ["spread", "drawn"])
def test_balance_keeps_equally_many_and_names_the_rest(choose: str, recording: Path, tmp_path: Path) -> None:
    plan = changed(
        PLAN, ("[epochs]\n", f'[balance]\nby = ["second", "correct"]\nchoose = "{choose}"\n[epochs]\n')
    )
    written = SetOnDisk(run_mend(recording, plan, tmp_path).folder)
    epochs, ledger = written.table("epochs.tsv"), written.table("ledger.tsv")
    columns = ("name", "second", "correct")
    kept = Counter(zip(*(epochs[one] for one in columns), strict=True))
    assert kept
    for rule in ("delay1", "delay2"):
        assert len({count for (name, *_), count in kept.items() if name == rule}) == 1
    fates = Counter(ledger["fate"])
    assert set(fates) == {"kept", "left out for balance"}
    assert fates["kept"] == len(epochs["name"])
    assert sum(fates.values()) == 2 * N_TRIALS
    provenance = json.loads(written.path("provenance.json").read_text(encoding="utf-8"))
    assert provenance["balance"] == {"by": ["second", "correct"], "choose": choose, "seed": 1}
    assert provenance["kept_per_rule"] == dict(Counter(epochs["name"]))


def test_stimulation_facts_are_labels_and_provenance(recording: Path, tmp_path: Path) -> None:
    facts = (
        '[stimulation]\nintensity = 57.5\nunit = "% of output"\ntarget = "left parietal, after P3"\n'
        'condition = "active"\ncolumns = { notes = "cue1.reaction_s" }\n[epochs]\n'
    )
    plan = changed(PLAN, ("[epochs]\n", facts))
    written = SetOnDisk(run_mend(recording, plan, tmp_path).folder)
    epochs = written.table("epochs.tsv")
    assert set(epochs["stimulation.intensity"]) == {"57.5"}
    assert set(epochs["stimulation.unit"]) == {"% of output"}
    assert set(epochs["stimulation.target"]) == {"left parietal, after P3"}
    assert set(epochs["stimulation.condition"]) == {"active"}
    assert epochs["stimulation.notes"] == epochs["log.cue1.reaction_s"]
    assert len(set(epochs["stimulation.notes"])) > N_TRIALS / 2
    # Where a trial has several rows, the plan has to say which.
    with pytest.raises(LogError, match=r"several rows. Say which row it is, for example cue1.reaction_s"):
        dry(recording, changed(plan, ('"cue1.reaction_s"', '"reaction_s"')), tmp_path / "open")
    told = json.loads(written.path("provenance.json").read_text(encoding="utf-8"))["stimulation"]
    assert told == {
        "intensity": 57.5, "unit": "% of output", "target": "left parietal, after P3", "condition": "active",
        "columns": {"notes": "cue1.reaction_s"},
    }  # fmt: skip


# Kinds of trial, groups, bit fields

KINDS = (
    PLAN[: PLAN.index("[[trial]]")]
    + """\
[markers.dot]
role = "fixation"

[[trial]]
slot = "dot"
role = "fixation"
kinds = ["with dot"]
[[trial]]
slot = "sample"
role = "sample"
kinds = ["with dot", "plain"]
after_s = [1.0, 2.0]
[[trial]]
slot = "cue"
role = "cue"
group = "question"
after_s = [1.0, 2.0]
[[trial]]
slot = "pulse"
role = "pulse"
group = "question"
after_s = [1.5, 2.6]
optional = true

[group.question]
times = [1, 2]
between_s = [5.1, 5.3]

[pulses]
window_ms = [-2.0, 14.0]
fill = "line"

[filter]
rate_hz = 250.0

[epochs]
length_s = 1.0
[[epochs.rule]]
name = "before"
anchor = "dot"
start_s = 0.0
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.4
labels = { cued = "cue1.item" }
[[epochs.rule]]
name = "delay2"
anchor = "cue2"
start_s = 0.4
labels = { cued = "cue2.item" }
"""
)


def test_kinds_of_trial_and_repeated_groups_in_one_recording(tmp_path: Path) -> None:
    """Every third trial has no dot, every fourth asks one question only."""
    plain = {trial for trial in range(1, N_TRIALS + 1) if trial % 3 == 0}
    single = {trial for trial in range(1, N_TRIALS + 1) if trial % 4 == 0}
    gone = [sample_of(trial, "dot") for trial in plain]
    gone += [sample_of(trial, slot) for trial in single for slot in ("cue2", "pulse2")]
    faults = tuple(Fault(FaultKind.UNFIRED, trial, "pulse2") for trial in sorted(single))
    recording = write(tmp_path / "in", without(markers_of(), *gone), faults=faults)
    prepared = dry(recording, KINDS, tmp_path / "study")
    adds_up(prepared)
    assert len(prepared.trials.trials) == N_TRIALS
    for trial in prepared.trials.trials:
        assert (trial.missing, trial.doubts) == ((), ())
        assert trial.kind == ("plain" if trial.number in plain else "with dot")
        assert ("cue2" in trial.markers) == (trial.number not in single)
        assert ("dot" in trial.markers) == (trial.number not in plain)
    kept = Counter(one.rule for one in prepared.kept)
    assert kept == {
        "before": N_TRIALS - len(plain), "delay1": N_TRIALS, "delay2": N_TRIALS - len(single)
    }  # fmt: skip
    # A trial of a kind without the slot asks for no epoch; a repeat that did not come is no anchor.
    assert {one.trial for one in prepared.ledger if one.rule == "before"} & plain == set()
    without_second = {one.trial for one in prepared.ledger if one.fate is Fate.NO_ANCHOR}
    assert without_second == single
    assert {one.labels["kind"] for one in prepared.kept} == {"plain", "with dot"}
    for one in prepared.kept:
        if one.rule == "delay2":
            assert one.labels["cued"] == moment(one.trial, "cue2").code.removeprefix("arrow ")


BITS = changed(
    IN_NUMBERS,
    ('[markers."2"]\nrole = "cue"\nlabels = { item = "left" }\n', ""),
    (
        '[markers."6"]\nrole = "cue"\nlabels = { item = "right" }\n',
        '[bits.event]\nat = [0, 1]\nroles = { "2" = "cue" }\n'
        '[bits.item]\nat = [2, 2]\nnames = { "0" = "left", "1" = "right" }\n',
    ),
)
"""2 and 6 are cues because of their lowest two bits; the third tells left from right."""


def test_bit_fields_give_roles_and_labels(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", recoded(markers_of(), NUMBERS))
    prepared = dry(recording, BITS, tmp_path / "study")
    is_whole(prepared)
    assert {one.labels["cue1.event"] for one in prepared.kept} == {"2"}
    assert not any("does not name" in one for one in prepared.warnings)
    lettered = [replace(one, code=f"S{one.code:>3}") for one in recoded(markers_of(), NUMBERS)]
    plan = changed(BITS, ('[markers."1"]', '[markers."S 1"]'), ('[markers."8"]', '[markers."S 8"]'))
    is_whole(dry(write(tmp_path / "lettered", lettered), plan, tmp_path / "study"))


# The same decision everywhere


@pytest.mark.parametrize("case", ["plain", "from signal", "photodiode", "balance", "marks"])
def test_window_and_command_line_decide_alike(case: str, tmp_path: Path) -> None:
    plan, marks = PLAN, ""
    faults: tuple[Fault, ...] = ()
    extra = None
    if case == "from signal":
        plan, faults = changed(PLAN, ('slot = "pulse2"\nrole = "pulse"', SIGNAL_FILLS)), (UNMARKED,)
    if case == "photodiode":
        plan, extra = changed(PLAN, ("[pulses]", ONSET)), photodiode()
    if case == "balance":
        plan = changed(PLAN, ("[epochs]\n", '[balance]\nby = ["second"]\nchoose = "drawn"\n[epochs]\n'))
    if case == "marks":
        marks = 'trials_excluded = [3]\nrun = "2"\n[log]\nrows_excluded = [5]\n'
    recording = write(tmp_path / "in", faults=faults, extra=extra)
    prepared = dry(recording, plan, tmp_path / "study", marks)
    opened = open_recording(recording)
    with_marks = parse_marks(f"pulsemend_marks = 1\n{marks}").marks
    known = finish(learn(opened, parse_plan(plan).plan, with_marks))
    again = finish(learn(opened, parse_plan(plan).plan, with_marks, known))
    opened.close()
    for learned in (known, again):
        assert learned.decision.ledger == prepared.ledger
        assert learned.decision.kept == prepared.kept
        assert learned.decision.trials == prepared.trials
        assert learned.decision.warnings == prepared.decision.warnings
    # And the facts, which touch no epoch, tell the same trials.
    planned = facts_of(recording, plan, tmp_path / "study", marks).planned
    assert planned is not None
    assert planned.trials == prepared.trials


def test_facts_with_a_plan_that_is_not_finished(recording: Path, tmp_path: Path) -> None:
    plan = changed(PLAN, ("window_ms = [-2.0, 14.0]\n", ""))
    summary = facts_of(recording, plan, tmp_path)
    assert summary.planned is not None
    assert len(summary.planned.trials.trials) == N_TRIALS
    (note,) = (one for one in summary.notes if "by markers alone" in one)
    assert "pulses.window_ms" in note


def test_a_recording_without_any_trial_says_so(tmp_path: Path) -> None:
    recording = write(tmp_path / "in", [one for one in markers_of() if one.code == "pulse"])
    plan = changed(
        PLAN,
        (', correct = "log.cue1.correct"', ""),
        (', correct = "log.cue2.correct"', ""),
    )
    with pytest.raises(NoEpochs, match="no trial was found"):
        run_mend(recording, plan, tmp_path / "study")
    assert not (tmp_path / "study" / "sets").exists()
