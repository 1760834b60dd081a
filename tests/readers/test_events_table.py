"""The table of events beside a recording: codes, exact samples, duplicates of the file's markers."""

from __future__ import annotations

import contextlib
from collections.abc import Sequence
from contextlib import closing
from pathlib import Path

import numpy as np
import pytest

from pulsemend.errors import DamagedRecording, RecordingError
from pulsemend.model.recording import RecordingFacts
from pulsemend.progress import finish
from pulsemend.readers.fingerprint import fingerprint
from pulsemend.readers.opening import open_recording
from support.written_recordings import EVENTS, FORMATS, N_SAMPLES, RATE_HZ, counts, triplet_by_hand

MARKS = [(100 * n, "Stimulus", f"S {n % 3 + 1}") for n in range(1, 13)]


def recording(folder: Path, events: Sequence[tuple[int, str, str]] = ()) -> Path:
    return triplet_by_hand(folder, counts(), "INT_16", events=events)


def set_interval(path: Path, microseconds: str) -> None:
    text = path.read_text("utf-8").replace("SamplingInterval=2000", f"SamplingInterval={microseconds}")
    path.write_text(text, "utf-8")


def table(folder: Path, head: str, rows: Sequence[Sequence[object]]) -> Path:
    lines = [head.split(), *rows]
    text = "".join("\t".join(map(str, line)) + "\n" for line in lines)
    (folder / "lt01_events.tsv").write_text(text, encoding="utf-8")
    return folder / "lt01_events.tsv"


def facts_of(path: Path) -> RecordingFacts:
    with closing(open_recording(path)) as opened:
        return opened.facts


def markers(path: Path) -> list[tuple[float, str]]:
    return [(marker.sample, marker.code) for marker in facts_of(path).markers]


def note_with(facts: RecordingFacts, text: str) -> str:
    found = [note for note in facts.notes if text in note]
    assert len(found) == 1, facts.notes
    return found[0]


def test_onset_is_sample_over_rate(tmp_path: Path) -> None:
    """Facts T-4.2: sample 0 is 0.0 s; sample 1234 at 1000 Hz is 1.234 s."""
    path = recording(tmp_path)
    path.write_text(
        path.read_text("utf-8").replace("SamplingInterval=2000", "SamplingInterval=1000"), "utf-8"
    )
    table(tmp_path, "onset duration trial_type", [(0.0, 0, "start"), (1.234, 0, "pulse")])
    assert markers(path) == [(0, "start"), (1234, "pulse")]


def test_codes_by_trial_type_or_value(tmp_path: Path) -> None:
    path = recording(tmp_path)
    rows = [
        (0.2, 0, "cue", 11), (0.4, "n/a", "n/a", 12), (0.6, 0, "Stimulus/S  7", 13), (0.8, 0, "n/a", "n/a"),
        (-0.5, 0, "cue", 11), (3.0, 0, "cue", 11), (1.0, 0, "SyncStatus/Sync On", 1),
        (1.2, 0, "New Segment/", 1),
    ]  # fmt: skip
    table(tmp_path, "onset duration trial_type value", rows)
    facts = facts_of(path)
    assert [(m.sample, m.code, m.type) for m in facts.markers] == [
        (100, "cue", ""), (200, "12", ""), (300, "S 7", "Stimulus")
    ]  # fmt: skip
    assert facts.boundaries == (600,)
    note = note_with(facts, "Markers from lt01_events.tsv: 3, coded by trial_type")
    assert "clock (SyncStatus), left out: 1" in note
    assert "rows without a code, left out: 1" in note
    assert "outside the recorded samples, left out: 2" in note


def test_duplicates_of_the_files_markers_are_dropped_and_counted(tmp_path: Path) -> None:
    path = recording(tmp_path, [*MARKS, (1450, "Comment", "only in the file")])
    rows = [((sample + n % 3 - 1) / RATE_HZ, 0, f"cue {n}") for n, (sample, _, _) in enumerate(MARKS)]
    table(tmp_path, "onset duration trial_type", [*rows, (2.95, 0, "only in the table")])
    facts = facts_of(path)
    expected = [(sample, f"cue {n}") for n, (sample, _, _) in enumerate(MARKS)]
    assert [(m.sample, m.code) for m in facts.markers] == [
        *expected, (1450, "only in the file"), (1475, "only in the table")
    ]  # fmt: skip
    note = note_with(facts, "Markers from lt01_events.tsv: 13")
    assert "dropped as their duplicates: 12" in note
    assert "does not list, kept: 1" in note


@pytest.mark.parametrize(
    ("value", "code"), [("11", "11"), ("11.0", "11"), ("11.5", "11.5"), ("007", "007"), ("v1.0", "v1.0")]
)
def test_whole_values_are_whole(tmp_path: Path, value: str, code: str) -> None:
    path = recording(tmp_path)
    table(tmp_path, "onset duration value", [(0.2, 0, value), (0.4, 0, "n/a")])
    assert markers(path) == [(100, code)]


def test_pauses_are_told(tmp_path: Path) -> None:
    path = recording(tmp_path, [(700, "New Segment", "")])
    table(tmp_path, "onset duration value", [(2.0, 0, 1)])
    facts = facts_of(path)
    assert facts.boundaries == (700,)
    assert [marker.sample for marker in facts.markers] == [1000]
    note_with(facts, "count recorded time only")


def test_two_markers_side_by_side_are_two(tmp_path: Path) -> None:
    path = recording(tmp_path, [(100, "Stimulus", "1"), (101, "Stimulus", "3")])
    table(tmp_path, "onset duration value", [(0.2, 0, 1), (0.202, 0, 3)])
    assert markers(path) == [(100, "1"), (101, "3")]
    table(tmp_path, "onset duration value", [(0.202, 0, "three")])
    assert markers(path) == [(100, "1"), (101, "three")]


def test_a_table_that_disagrees_with_the_file_doubles_nothing(tmp_path: Path) -> None:
    path = recording(tmp_path, MARKS)
    table(tmp_path, "onset duration trial_type", [((s + 7) / RATE_HZ, 0, "cue") for s, _, _ in MARKS])
    facts = facts_of(path)
    assert [(m.sample, m.code) for m in facts.markers] == [(s, c) for s, _, c in MARKS]
    assert "only 0 of its 12 rows" in note_with(facts, "lt01_events.tsv is not used")
    assert [part.name for part in facts.parts] == ["lt01.vhdr", "lt01.eeg", "lt01.vmrk"]


@pytest.mark.parametrize("first", [0, 1])
def test_samples_count_from_0_or_1(tmp_path: Path, first: int) -> None:
    """Onsets with three decimals at 512.0122 Hz: the column of samples is exact, the onsets are not."""
    path = recording(tmp_path)
    interval = "1953.0784"
    set_interval(path, interval)
    rate_hz = 1e6 / float(interval)
    samples = [7 + 37 * n for n in range(40)]
    rows = [(f"{sample / rate_hz:.3f}", 0, "cue", sample + first) for sample in samples]
    table(tmp_path, "onset duration trial_type sample", rows)
    facts = facts_of(path)
    assert [marker.sample for marker in facts.markers] == samples
    note_with(facts, f"The column sample of lt01_events.tsv counts from {first}")


@pytest.mark.parametrize("first", [0, 1])
def test_coarse_onsets_still_tell_where_samples_start(tmp_path: Path, first: int) -> None:
    """At 25 kHz a millisecond is 25 samples: no row can tell, the mean of 2000 can, of 20 cannot."""
    path = recording(tmp_path)
    set_interval(path, "40")
    many = [n * 7919 % 1_499 for n in range(1, 15_000)]
    for samples, told in ((many, True), (many[:20], False)):
        rows = [(f"{sample / 25_000:.3f}", 0, "cue", sample + first) for sample in samples]
        table(tmp_path, "onset duration trial_type sample", rows)
        facts = facts_of(path)
        if told:
            note_with(facts, f"counts from {first}")
            assert [marker.sample for marker in facts.markers] == sorted(samples)
        else:
            note_with(facts, "is not used")


def test_onset_wins_where_a_sample_contradicts_it(tmp_path: Path) -> None:
    path = recording(tmp_path)
    rows = [(sample / RATE_HZ, 0, "cue", sample + 1) for sample, _, _ in MARKS]
    rows[4] = (rows[4][0], 0, "cue", 900)
    table(tmp_path, "onset duration trial_type sample", rows)
    facts = facts_of(path)
    assert [marker.sample for marker in facts.markers] == [sample for sample, _, _ in MARKS]
    assert note_with(facts, "contradicts the onset").endswith("line 6.")


def test_samples_on_another_clock_are_not_used(tmp_path: Path) -> None:
    path = recording(tmp_path)
    table(tmp_path, "onset duration value sample", [(s / RATE_HZ, 0, 1, 2 * s) for s, _, _ in MARKS])
    facts = facts_of(path)
    assert [marker.sample for marker in facts.markers] == [sample for sample, _, _ in MARKS]
    note_with(facts, "is not used: it counts neither from 0 nor from 1")


def test_times_between_samples_stay_there(tmp_path: Path) -> None:
    path = recording(tmp_path)
    table(tmp_path, "onset duration value", [(0.2005, 0, "a"), (0.2, 0, "b")])
    assert markers(path) == [(100, "b"), (100.25, "a")]


@pytest.mark.parametrize("kind", ["EDF+", "BDF+", "FIF", "triplet float32"])
def test_every_format_takes_the_table(tmp_path: Path, kind: str) -> None:
    written = FORMATS[kind](tmp_path, EVENTS)
    stem = "lt01_raw" if kind == "FIF" else "lt01"
    rows = [(sample / RATE_HZ, 0, f"t {n}") for n, (sample, _, _) in enumerate(EVENTS)]
    table(tmp_path, "onset duration trial_type", rows).rename(tmp_path / f"{stem}_events.tsv")
    with closing(open_recording(written.path)) as opened:
        assert [(m.sample, m.code) for m in opened.facts.markers] == [
            (sample, f"t {n}") for n, (sample, _, _) in enumerate(EVENTS)
        ]
        assert opened.facts.parts[-1].name == f"{stem}_events.tsv"
        assert finish(fingerprint(opened)).parts[-1][0] == f"{stem}_events.tsv"


@pytest.mark.parametrize(
    ("text", "place", "what"),
    [
        ("time\tduration\tvalue\n1\t0\t1\n", "line 1", "no column onset"),
        ("onset\tduration\tvalue\n1\t0\t1\n2\t0\n", "line 3", "2 cells, but there are 3 columns"),
        ("onset\tduration\tvalue\n1\t0\t1\n\n2\t0\t1\n", "line 3", "1 cells"),
        ("onset\tduration\tvalue\nn/a\t0\t1\n", "line 2", "no onset"),
        ("onset\tduration\tvalue\nsoon\t0\t1\n", "line 2", "onset is not a number: soon"),
        ("onset\tduration\tvalue\nnan\t0\t1\n", "line 2", "onset is nan"),
        ("onset\tonset\tvalue\n1\t0\t1\n", "line 1", "same name"),
        ("onset\tduration\tvalue\tsample\n1\t0\t1\tx\n", "line 2", "sample is not a number"),
        ("", "line 1", "no column onset"),
    ],
)
def test_bad_tables_are_refused_with_file_and_line(tmp_path: Path, text: str, place: str, what: str) -> None:
    path = recording(tmp_path)
    (tmp_path / "lt01_events.tsv").write_text(text, "utf-8")
    with pytest.raises(DamagedRecording, match=what) as caught:
        open_recording(path)
    assert caught.value.where == f"lt01_events.tsv, {place}"
    assert caught.value.todo


def test_a_table_without_codes_gives_a_note(tmp_path: Path) -> None:
    path = recording(tmp_path, MARKS)
    table(tmp_path, "onset duration", [(1.0, 0)])
    facts = facts_of(path)
    assert len(facts.markers) == len(MARKS)
    note_with(facts, "neither trial_type nor value")


def test_line_ends_byte_order_mark_and_alphabet(tmp_path: Path) -> None:
    path = recording(tmp_path)
    text = "\ufeffonset\tduration\ttrial_type\r\n0.2\t0\t\u0441\u0442\u0440\r\n"
    (tmp_path / "lt01_events.tsv").write_bytes(text.encode())
    assert markers(path) == [(100, "\u0441\u0442\u0440")]
    (tmp_path / "lt01_events.tsv").write_bytes("onset\tduration\tvalue\n0.2\t0\tgrün\n".encode("latin-1"))
    assert markers(path) == [(100, "grün")]


def test_a_table_without_rows_is_a_table(tmp_path: Path) -> None:
    path = recording(tmp_path, MARKS)
    table(tmp_path, "onset duration trial_type", [])
    assert len(markers(path)) == len(MARKS)


def test_only_the_recordings_own_table_is_taken(tmp_path: Path) -> None:
    path = recording(tmp_path)
    table(tmp_path, "onset duration value", [(0.2, 0, 1)]).rename(tmp_path / "lt02_events.tsv")
    assert markers(path) == []
    assert facts_of(path).n_samples == N_SAMPLES


def test_broken_tables_are_refused_or_read(tmp_path: Path) -> None:
    path = recording(tmp_path, MARKS)
    texts = {
        "lt01_events.tsv": "onset\tduration\ttrial_type\tsample\n0.2\t0\tcue\t100\n0.4\t0\tcue\t200\n",
        "lt01_channels.tsv": "name\ttype\tlow_cutoff\nFz\tEEG\t0.1\nC3\tEEG\t0\nC4\tEEG\t1\nVEOG\tEOG\t1\n",
        "lt01_electrodes.tsv": "name\tx\ty\tz\nFz\t0\t60\t70\nC3\t-60\t0\t70\nC4\t60\t0\t70\n",
        "lt01_coordsystem.json": '{"EEGCoordinateUnits": "mm"}',
    }
    for name, text in texts.items():
        (tmp_path / name).write_text(text, "utf-8")
    assert facts_of(path).channels[1].position_m == (-0.06, 0.0, 0.07)
    rng = np.random.default_rng(5)
    for name, text in texts.items():
        for _ in range(100):
            broken = bytearray(
                text.encode()[: len(text) if rng.random() < 0.5 else int(rng.integers(len(text)))]
            )
            for at in rng.integers(0, max(len(broken), 1), 2):
                broken[at : at + 1] = bytes([rng.choice([9, 10, 0, 34, 48, 101, 45, 200])])
            (tmp_path / name).write_bytes(broken)
            with contextlib.suppress(RecordingError):
                facts_of(path)
        (tmp_path / name).write_text(text, "utf-8")
