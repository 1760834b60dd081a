"""Marks: round trips, refusals with their line, and the fingerprint that ties them to a recording."""

from __future__ import annotations

import re
from dataclasses import replace
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pulsemend.errors import MarksError, PlanError
from pulsemend.model.keys import key_defaults
from pulsemend.model.marks import NO_MARKS, BadStretch, EpochKey, MarkerKey, Marks, MovedPulse
from pulsemend.model.marks_file import (
    check_files,
    check_fingerprint,
    check_samples,
    marks_text,
    marks_tree,
    parse_marks,
    read_marks,
    update_text,
    write_marks,
)
from pulsemend.model.marks_keys import LATER_MARKS_KEYS, MARKS_KEYS
from pulsemend.model.recording import FilePart, Fingerprint
from pulsemend.model.toml_edit import updated_text
from pulsemend.model.vocabulary import ChannelType

TEXT = f"""\
pulsemend_marks = 1
bad = ["C3", "P 7"]               # loose all session
trials_excluded = [3, 17]         # fell asleep
run = "2"                         # after the break

[[fingerprint]]
name = "lt01_eeg.vhdr"
size = 1200
sha256 = "{"a" * 64}"
[[fingerprint]]
name = "lt01_eeg.eeg"
size = 7_000_000
sha256 = "{"b" * 64}"

[types]
VEOG = "eog"                      # below the eye

[gaps_ms]
C4 = [-2, 30.5]                   # under the coil

[pulses]
added = [1000]
removed = [500, 600]
[[pulses.moved]]
sample = 2000
to = 2011                         # late trigger

[[bad_stretches]]
start = 0
stop = 5000
kind = "settling"
[[bad_stretches]]
start = 9000
stop = 9001

[[epochs_left_out]]
trial = 4
rule = "delay1"
[[epochs_left_out]]
trial = 4
rule = "baseline"
piece = 2                         # a blink

[[markers_ignored]]
sample = 700
code = "S 21"                     # a test pulse
[[markers_added]]
sample = 9100                     # the cable was loose
code = "arrow left"
[[markers_added]]
sample = 9100
code = "dot"

[cures]
accepted = ["stuck bit 7", "doubled marker S 21"]   # seen by eye, too
refused = ["zero codes"]

[log]
file = "lt01 second.tsv"          # the first one was lost
rows_excluded = [1, 30]
"""
MARKS = Marks(
    fingerprint=Fingerprint((("lt01_eeg.vhdr", 1200, "a" * 64), ("lt01_eeg.eeg", 7_000_000, "b" * 64))),
    bad=("C3", "P 7"),
    types={"VEOG": ChannelType.EOG},
    pulses_added=(1000,),
    pulses_removed=(500, 600),
    pulses_moved=(MovedPulse(2000, 2011),),
    gaps_ms={"C4": (-2.0, 30.5)},
    bad_stretches=(BadStretch(0, 5000, "settling"), BadStretch(9000, 9001)),
    trials_excluded=(3, 17),
    epochs_left_out=(EpochKey(4, "delay1"), EpochKey(4, "baseline", 2)),
    markers_ignored=(MarkerKey(700, "S 21"),),
    markers_added=(MarkerKey(9100, "arrow left"), MarkerKey(9100, "dot")),
    cures_accepted=("stuck bit 7", "doubled marker S 21"),
    cures_refused=("zero codes",),
    log_file="lt01 second.tsv",
    log_rows_excluded=(1, 30),
    run="2",
)


def refusal(text: str) -> MarksError:
    with pytest.raises(MarksError) as caught:
        parse_marks(text, "lt01.marks.toml")
    assert "\n" not in str(caught.value)
    assert caught.value.path == "lt01.marks.toml"
    return caught.value


def test_reading() -> None:
    file = parse_marks(TEXT)
    assert file.marks == MARKS
    assert file.warnings == ()


def test_shortest_marks() -> None:
    file = parse_marks("pulsemend_marks = 1\n")
    assert file.marks == NO_MARKS
    assert "no fingerprint" in file.warnings[0]
    assert marks_text(NO_MARKS) == "pulsemend_marks = 1\n"


def test_writing(tmp_path: Path) -> None:
    assert parse_marks(marks_text(MARKS)).marks == MARKS
    path = tmp_path / "lt01.marks.toml"
    write_marks(path, MARKS)
    assert read_marks(path).marks == MARKS
    assert update_text(TEXT, MARKS) == TEXT


def test_changing_keeps_comments() -> None:
    changed = replace(
        MARKS,
        bad=("C3",),
        trials_excluded=(3, 17, 20),
        pulses_moved=(MovedPulse(1500, 1501), MovedPulse(2000, 2012)),
        epochs_left_out=MARKS.epochs_left_out[1:],
        types={"VEOG": ChannelType.MISC, "HEOG": ChannelType.EOG},
        markers_ignored=(MarkerKey(5, "a"), MarkerKey(700, "S 21")),
        markers_added=(MarkerKey(9101, "arrow left"), MarkerKey(9100, "dot")),
        cures_accepted=("stuck bit 7",),
        cures_refused=("doubled marker S 21", "zero codes"),
        log_file="",
        log_rows_excluded=(),
        run="3",
    )
    text = update_text(TEXT, changed)
    assert parse_marks(text).marks == changed
    assert sorted(re.findall("#.*", text)) == sorted(re.findall("#.*", TEXT))


def test_taking_everything_back() -> None:
    text = update_text(TEXT, NO_MARKS)
    assert parse_marks(text).marks == NO_MARKS


REFUSED = [
    ('bad = ["C3", "P 7"]', 'bad = ["C3", "C3"]', "bad", "names something twice"),
    ('bad = ["C3", "P 7"]', "bad = [3]", "bad[1]", "must be text"),
    ("trials_excluded = [3, 17]", "trials_excluded = [0]", "trials_excluded[1]", "is out of range"),
    ("trials_excluded = [3, 17]", "trials_excluded = [true]", "trials_excluded[1]", "must be a whole number"),
    ("size = 1200", "size = 1200.0", "fingerprint[1].size", "must be a whole number"),
    ("size = 1200", "", "fingerprint[1].size", "is missing"),
    ('name = "lt01_eeg.vhdr"', 'name = "lt01_eeg.eeg"', "fingerprint[2].name", "names a file twice"),
    ("b" * 64, "B" * 64, "fingerprint[2].sha256", "is no SHA-256"),
    ('VEOG = "eog"', 'VEOG = "eye"', "types.VEOG", "is none of the words"),
    ("C4 = [-2, 30.5]", "C4 = [30, -2]", "gaps_ms.C4", "second number above"),
    ("added = [1000]", "added = [1000.0]", "pulses.added[1]", "must be a whole number"),
    ("added = [1000]", "add = [1000]", "pulses.add", "did you mean pulses.added?"),
    ("sample = 2000", "sample = 600", "pulses.moved[1].sample", "is removed as well"),
    ("stop = 9001", "stop = 9000", "bad_stretches[2].stop", "must be above start"),
    ("piece = 2", "piece = 0", "epochs_left_out[2].piece", "is out of range"),
    ('trial = 4\nrule = "delay1"', "trial = 4", "epochs_left_out[1].rule", "is missing"),
    ("sample = 700", "sample = -1", "markers_ignored[1].sample", "is out of range"),
    ("sample = 700", "sample = 7.5", "markers_ignored[1].sample", "must be a whole number"),
    ('code = "dot"', 'code = ""', "markers_added[2].code", "must not be empty"),
    ('code = "dot"', "", "markers_added[2].code", "is missing"),
    ('code = "dot"', "to = 3", "markers_added[2].to", "is unknown"),
    ('refused = ["zero codes"]', "refused = [1]", "cures.refused[1]", "must be text"),
    (
        'refused = ["zero codes"]',
        'refused = ["zero codes", "stuck bit 7"]',
        "cures.refused[2]",
        "is accepted as well",
    ),
    ("accepted = [", 'accept = ["a"]\naccepted = [', "cures.accept", "did you mean cures.accepted?"),
    ("rows_excluded = [1, 30]", "rows_excluded = [0]", "log.rows_excluded[1]", "is out of range"),
    ("rows_excluded = [1, 30]", "rows_excluded = [1, 1]", "log.rows_excluded", "names something twice"),
    ('run = "2"', "run = 2", "run", "must be text"),
    ("pulsemend_marks = 1", "pulsemend_marks = 2", "pulsemend_marks", "is from a newer version"),
    ("pulsemend_marks = 1", "pulsemend = 1", "pulsemend", "is unknown"),
]


@pytest.mark.parametrize(("old", "new", "key", "problem"), REFUSED)
def test_refusals(old: str, new: str, key: str, problem: str) -> None:
    assert TEXT.count(old) == 1
    text = TEXT.replace(old, new)
    error = refusal(text)
    assert error.key == key
    assert problem in error.problem
    row = text.split("\n")[(error.line or 0) - 1]
    last = re.sub(r"\[\d+\]", "", key).split(".")[-1]
    assert last in row or row.startswith("[[")


@pytest.mark.parametrize("key", sorted(LATER_MARKS_KEYS))
def test_later_features(key: str) -> None:
    error = refusal(f"{key} = [1]\n" + TEXT)
    assert (error.key, error.problem, error.line) == (key, "not in this version", 1)


def test_a_plan_is_no_marks_file_and_the_other_way_round() -> None:
    from pulsemend.model.plan_file import parse_plan

    with pytest.raises(PlanError):
        parse_plan(TEXT)
    assert refusal("pulsemend = 1\n[about]\nname = 'a'\n").key == "pulsemend"


# --- the recording they belong to -------------------------------------------------------------------

PRINT = MARKS.fingerprint or Fingerprint(())


def changed_part(place: int, **values: str | int) -> Fingerprint:
    name, size, sha256 = PRINT.parts[place]
    part = (str(values.get("name", name)), int(values.get("size", size)), str(values.get("sha256", sha256)))
    return Fingerprint((*PRINT.parts[:place], part, *PRINT.parts[place + 1 :]))


def test_own_recording_is_accepted() -> None:
    check_fingerprint(MARKS, PRINT)
    check_fingerprint(MARKS, Fingerprint(PRINT.parts[::-1]))
    check_fingerprint(NO_MARKS, PRINT)
    check_files(NO_MARKS, (FilePart("a", 1),))


@pytest.mark.parametrize(
    ("other", "key", "file"),
    [
        (changed_part(1, sha256="c" * 64), "fingerprint[2].sha256", "lt01_eeg.eeg"),
        (changed_part(0, size=1201), "fingerprint[1].size", "lt01_eeg.vhdr"),
        (changed_part(1, name="lt02_eeg.eeg"), "fingerprint[2].name", "lt01_eeg.eeg"),
        (Fingerprint((*PRINT.parts, ("lt01_eeg.vmrk", 5, "d" * 64))), "fingerprint", "lt01_eeg.vmrk"),
        (Fingerprint(PRINT.parts[:1]), "fingerprint[2].name", "lt01_eeg.eeg"),
    ],
)
def test_another_recording_is_refused_and_the_file_named(other: Fingerprint, key: str, file: str) -> None:
    with pytest.raises(MarksError) as caught:
        check_fingerprint(MARKS, other)
    assert caught.value.key == key
    assert file in caught.value.problem
    assert caught.value.exit_code == 3


def test_sizes_are_enough_to_refuse_before_hashing() -> None:
    parts = [FilePart("lt01_eeg.vhdr", 1200), FilePart("lt01_eeg.eeg", 7_000_000)]
    check_files(MARKS, parts)
    with pytest.raises(MarksError, match="another size"):
        check_files(MARKS, [parts[0], FilePart("lt01_eeg.eeg", 7_000_001)])


@pytest.mark.parametrize(
    ("n_samples", "key"),
    [
        (9101, None),
        (9100, "markers_added[1].sample"),
        (9000, "bad_stretches[2].stop"),
        (2012, "bad_stretches[1].stop"),
        (2011, "pulses.moved[1].to"),
        (1000, "pulses.added[1]"),
        (600, "pulses.added[1]"),
    ],
)
def test_samples_beyond_the_end(n_samples: int, key: str | None) -> None:
    if key is None:
        check_samples(MARKS, n_samples)
        return
    with pytest.raises(MarksError) as caught:
        check_samples(MARKS, n_samples)
    assert caught.value.key == key


def test_markers_beyond_the_end() -> None:
    marks = Marks(markers_ignored=(MarkerKey(699, "a"), MarkerKey(700, "a")))
    check_samples(marks, 701)
    with pytest.raises(MarksError, match="beyond the recording's end") as caught:
        check_samples(marks, 700)
    assert (caught.value.key, caught.value.allowed) == ("markers_ignored[2].sample", "up to 699")


# --- any marks --------------------------------------------------------------------------------------

names = st.text(st.characters(codec="utf-8", exclude_categories=("Cs", "Cc")), min_size=1, max_size=6).filter(
    lambda text: bool(text.strip())
)
samples = st.integers(0, 10**7)
hashes = st.text("0123456789abcdef", min_size=64, max_size=64)


@st.composite
def any_marks(draw: st.DrawFn) -> Marks:
    files = draw(st.lists(names, max_size=3, unique=True))
    moved = draw(st.lists(samples, max_size=3, unique=True))
    return Marks(
        fingerprint=Fingerprint(tuple((name, draw(samples), draw(hashes)) for name in files))
        if files
        else None,
        bad=tuple(draw(st.lists(names, max_size=2, unique=True))),
        types=draw(st.dictionaries(names, st.sampled_from(ChannelType), max_size=2)),
        pulses_added=tuple(draw(st.lists(samples, max_size=3, unique=True))),
        pulses_removed=tuple(at + 10**7 + 1 for at in draw(st.lists(samples, max_size=3, unique=True))),
        pulses_moved=tuple(MovedPulse(at, draw(samples)) for at in moved),
        gaps_ms=draw(st.dictionaries(names, st.just((-2.0, 30.0)), max_size=2)),
        bad_stretches=tuple(
            BadStretch(at, at + draw(st.integers(1, 100)), draw(st.sampled_from(["", "moved"])))
            for at in draw(st.lists(samples, max_size=3))
        ),
        trials_excluded=tuple(draw(st.lists(st.integers(1, 99), max_size=3, unique=True))),
        epochs_left_out=tuple(
            EpochKey(draw(st.integers(1, 99)), draw(st.sampled_from(["a", "b-1"])), draw(st.integers(1, 3)))
            for _ in range(draw(st.integers(0, 3)))
        ),
        markers_ignored=tuple(MarkerKey(draw(samples), draw(names)) for _ in range(draw(st.integers(0, 2)))),
        markers_added=tuple(MarkerKey(draw(samples), draw(names)) for _ in range(draw(st.integers(0, 2)))),
        cures_accepted=tuple(draw(st.lists(names.map("a{}".format), max_size=2, unique=True))),
        cures_refused=tuple(draw(st.lists(names.map("r{}".format), max_size=2, unique=True))),
        log_file=draw(st.just("") | names),
        log_rows_excluded=tuple(draw(st.lists(st.integers(1, 99), max_size=3, unique=True))),
        run=draw(st.just("") | names),
    )


@settings(deadline=None, max_examples=20)
@given(any_marks(), any_marks())
def test_any_marks_survive_writing_and_any_text_can_become_any_marks(first: Marks, second: Marks) -> None:
    text = marks_text(first)
    assert parse_marks(text).marks == first
    named = {"fingerprint": "name", "pulses.moved": "sample"}
    named |= dict.fromkeys(("bad_stretches", "epochs_left_out", "markers_ignored", "markers_added"), "")
    for start in (text, TEXT):
        edited = updated_text(start, marks_tree(second), key_defaults(MARKS_KEYS), named)
        assert parse_marks(edited).marks == second
