"""EDF(+) and BDF(+): strangers' files, files made by hand, annotations, pauses, rates, trigger channels."""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path

import mne
import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.errors import DamagedRecording, UnusableChannels
from pulsemend.model.recording import RecordingFacts
from pulsemend.readers.opening import open_recording
from pulsemend.readers.tal import parse_tals

# It has no wheels for Python 3.13 and later yet.
pyedflib = pytest.importorskip("pyedflib")
STRANGERS = sorted((Path(pyedflib.__file__).parent / "tests" / "data").glob("*.?df"))
"""Generated signals of known shape that come inside pyedflib; nobody here wrote them."""


@dataclass(frozen=True)
class Made:
    """One signal of a file made by hand; digital numbers, shape (n_records, samples per record), or texts."""

    label: str
    content: NDArray[np.int64] | Sequence[bytes]
    unit: str = "uV"
    physical: tuple[str, str] = ("-3276.8", "3276.7")
    digital: tuple[int, int] = (-32768, 32767)


def made_file(
    path: Path, signals: Sequence[Made], reserved: str = "", record_s: str = "1", n_records: int | None = None
) -> Path:
    """Write an EDF or BDF file byte by byte."""
    sample_bytes = 3 if path.suffix == ".bdf" else 2
    records = len(signals[0].content)
    blocks: list[list[bytes]] = []
    for signal in signals:
        if isinstance(signal.content, np.ndarray):
            wide = signal.content.astype("<i4")
            blocks.append([b"".join(n.tobytes()[:sample_bytes] for n in row) for row in wide])
        else:
            length = -(-max(map(len, signal.content)) // 6) * 6  # whole samples of 2 and of 3 bytes
            blocks.append([text.ljust(length, b"\0") for text in signal.content])
    first = b"\xffBIOSEMI" if sample_bytes == 3 else b"0       "
    head = [
        "X X X X".ljust(80), "Startdate 01-JAN-2026 X X X".ljust(80), "01.01.26", "10.00.00",
        str(256 * (len(signals) + 1)).ljust(8), reserved.ljust(44),
        str(records if n_records is None else n_records).ljust(8), record_s.ljust(8),
        str(len(signals)).ljust(4),
    ]  # fmt: skip
    columns = [
        [s.label.ljust(16) for s in signals],
        [" " * 80 for _ in signals],
        [s.unit.ljust(8) for s in signals],
        [s.physical[0].ljust(8) for s in signals],
        [s.physical[1].ljust(8) for s in signals],
        [str(s.digital[0]).ljust(8) for s in signals],
        [str(s.digital[1]).ljust(8) for s in signals],
        [" " * 80 for _ in signals],
        [str(len(block[0]) // sample_bytes).ljust(8) for block in blocks],
        [" " * 32 for _ in signals],
    ]
    text = "".join(head) + "".join("".join(column) for column in columns)
    data = b"".join(block[record] for record in range(records) for block in blocks)
    path.write_bytes(first + text.encode("latin-1") + data)
    return path


def ramp(records: int = 4, per_record: int = 10) -> NDArray[np.int64]:
    return np.arange(records * per_record, dtype=np.int64).reshape(records, per_record)


def times(*texts: str) -> list[bytes]:
    """Annotation signal: ``+0|`` is a time alone, ``+1|cue`` a text; several are separated by blanks."""
    stamped = [text.replace("||", "\x14\x14").replace("|", "\x14").split(" ") for text in texts]
    return [b"".join(entry.encode() + b"\x14\x00" for entry in record) for record in stamped]


def notes_signal(*texts: str) -> Made:
    return Made("EDF Annotations", times(*texts), unit="", physical=("-1", "1"))


def opened(path: Path) -> tuple[RecordingFacts, NDArray[np.float64]]:
    """Facts and volts, shape (n_channels, n_samples)."""
    with closing(open_recording(path)) as recording:
        facts = recording.facts
        out = np.empty((facts.n_samples, len(facts.channels)))
        recording.read(0, facts.n_samples, out)
    return facts, (out * [channel.scale_v for channel in facts.channels]).T


def test_strangers_files_are_there() -> None:
    assert {path.suffix for path in STRANGERS} == {".edf", ".bdf"}
    assert len(STRANGERS) >= 5


@pytest.mark.parametrize("path", STRANGERS, ids=lambda path: path.name)
def test_strangers_files_equal_the_reader_library(path: Path) -> None:
    """Outside reference: mne, given only the channels of the common rate."""
    facts, volts = opened(path)
    read = mne.io.read_raw_edf if path.suffix == ".edf" else mne.io.read_raw_bdf
    reference = read(path, include=[channel.name for channel in facts.channels], verbose="error")
    assert facts.rate_hz == reference.info["sfreq"]
    np.testing.assert_array_equal(volts, reference.get_data())
    theirs = [(a["onset"] * facts.rate_hz, a["description"]) for a in reference.annotations]
    inside = [(sample, text) for sample, text in theirs if sample < facts.n_samples]
    assert [marker.code for marker in facts.markers] == [text for _, text in inside]
    # They round onsets to microseconds.
    samples = [marker.sample for marker in facts.markers]
    np.testing.assert_allclose(samples, [sample for sample, _ in inside], atol=1e-6 * facts.rate_hz)


@pytest.mark.parametrize("path", STRANGERS, ids=lambda path: path.name)
def test_strangers_files_equal_another_readers_numbers(path: Path) -> None:
    """Outside reference: pyedflib."""
    facts, volts = opened(path)
    with pyedflib.EdfReader(str(path)) as reader:
        labels = reader.getSignalLabels()
        for channel, row in zip(facts.channels, volts, strict=True):
            index = labels.index(channel.name)
            assert reader.getSampleFrequency(index) == facts.rate_hz
            np.testing.assert_allclose(row, reader.readSignal(index) * 1e-6, rtol=0, atol=1e-13)


def test_text_outside_the_recorded_samples_is_told() -> None:
    """The generator writes "Recording ends" at the end of its last sample."""
    path = next(path for path in STRANGERS if path.name == "test_generator.edf")
    facts, _ = opened(path)
    assert [(marker.sample, marker.code) for marker in facts.markers] == [(0, "Recording starts")]
    assert any("Recording ends" in note for note in facts.notes)


def test_annotation_bytes_of_the_standard() -> None:
    """Facts T-4.6 and T-4.7, Kemp & Olivan 2003."""
    content = b"+180\x14Lights off\x14Close door\x14\x00"
    assert len(content) == 28
    assert [(a.onset_s, a.text) for a in parse_tals(content)] == [
        (180.0, "Lights off"),
        (180.0, "Close door"),
    ]
    apnea = parse_tals(b"+1800.2\x1525.5\x14Apnea\x14\x00\x00\x00")
    assert [(a.onset_s, a.duration_s, a.text) for a in apnea] == [(1800.2, 25.5, "Apnea")]


def test_time_keeping_entry_has_no_text() -> None:
    found = parse_tals(b"+567\x14\x14\x00-0.25\x14\xc3\xbcben\x14\x00")
    assert [(a.onset_s, a.text) for a in found] == [(567.0, ""), (-0.25, "\u00fcben")]
    assert parse_tals(bytes(20)) == []


@pytest.mark.parametrize(
    "content",
    [
        b"180\x14Lights off\x14\x00",  # facts T-4.10: onset without sign
        b"+18,5\x14Lights off\x14\x00",
        b"+\x14Lights off\x14\x00",
        b"+180\x15-2\x14Lights off\x14\x00",
        b"+180\x15\x14Lights off\x14\x00",
        b"+180\x14Lights off\x00",
        b"+180\x14Lights o",
        b"Lights off",
    ],
)
def test_annotations_against_the_standard_are_errors(content: bytes, tmp_path: Path) -> None:
    with pytest.raises(DamagedRecording, match="annotation"):
        parse_tals(content)
    path = made_file(tmp_path / "a.edf", [Made("Cz", ramp(1)), Made("EDF Annotations", [content])], "EDF+C")
    with pytest.raises(DamagedRecording) as caught:
        open_recording(path)
    assert caught.value.where == "a.edf"


def test_step_of_a_full_range_is_a_tenth_of_a_microvolt(tmp_path: Path) -> None:
    """Facts T-4.8."""
    digital = np.array([[-32768, -1, 0, 1, 32766, 32767]])
    facts, volts = opened(made_file(tmp_path / "a.edf", [Made("Cz", digital)]))
    np.testing.assert_allclose(volts[0], digital[0] * 1e-7, rtol=0, atol=1e-15)
    assert facts.channels[0].range_v == pytest.approx((-3276.8e-6, 3276.7e-6))
    np.testing.assert_allclose(volts[0, [0, -1]], [-3276.8e-6, 3276.7e-6], rtol=1e-12)


def test_numbers_of_24_bits(tmp_path: Path) -> None:
    """Facts T-4.11: FF FF 7F is the largest, 00 00 80 the smallest."""
    digital = np.array([[8388607, -8388608, -1, 0]])
    signal = Made("Cz", digital, physical=("-8388608", "8388607"), digital=(-8388608, 8388607))
    path = made_file(tmp_path / "a.bdf", [signal], "24BIT")
    assert path.read_bytes()[-12:] == bytes.fromhex("ffff7f 000080 ffffff 000000")
    facts, volts = opened(path)
    assert facts.format == "BDF"
    np.testing.assert_allclose(volts[0], digital[0] * 1e-6, rtol=1e-12)


def test_pauses_are_boundaries(tmp_path: Path) -> None:
    """Facts T-4.9: onsets of the records of EDF+D give the pauses."""
    texts = notes_signal(
        "+0.5||", "+1.5|| +1.8|cue", "+9.5|| +9.5|pulse +5|lost", "+10.5|| +11.4|probe +11.5|end"
    )
    facts, volts = opened(made_file(tmp_path / "a.edf", [Made("Cz", ramp()), texts], "EDF+D"))
    assert facts.boundaries == (20,)
    assert facts.segments == ((0, 20), (20, 40))
    np.testing.assert_allclose(volts[0], np.arange(40) * 1e-7, atol=1e-15)
    assert [(m.sample, m.code) for m in facts.markers] == [(13, "cue"), (20, "pulse"), (39, "probe")]
    assert any("Pauses in the recording: 1" in note for note in facts.notes)
    assert any("lost, end" in note for note in facts.notes)


def test_records_that_only_seem_to_drift_are_no_pause(tmp_path: Path) -> None:
    texts = notes_signal("+0||", "+1.01||", "+2.02||", "+3||")
    facts, _ = opened(made_file(tmp_path / "a.edf", [Made("Cz", ramp()), texts], "EDF+D"))
    assert facts.boundaries == ()


def test_onsets_of_a_continuous_file_are_not_asked(tmp_path: Path) -> None:
    texts = notes_signal("+0.5||", "+7||", "+9|| +2.5|cue", "+20||")
    facts, _ = opened(made_file(tmp_path / "a.edf", [Made("Cz", ramp()), texts], "EDF+C"))
    assert facts.boundaries == ()
    assert [(m.sample, m.code) for m in facts.markers] == [(20, "cue")]


@pytest.mark.parametrize(
    ("texts", "what"),
    [(("+0||", "+1||", "+0.5||", "+3||"), "order of time"), (("+0||", "+1|cue", "+2||", "+3||"), "record 2")],
)
def test_interrupted_files_whose_times_cannot_be_used(
    tmp_path: Path, texts: tuple[str, ...], what: str
) -> None:
    path = made_file(tmp_path / "a.edf", [Made("Cz", ramp()), notes_signal(*texts)], "EDF+D")
    with pytest.raises(DamagedRecording, match=what):
        open_recording(path)


def test_interrupted_file_without_annotations(tmp_path: Path) -> None:
    with pytest.raises(DamagedRecording, match="pauses, but not where"):
        open_recording(made_file(tmp_path / "a.edf", [Made("Cz", ramp())], "EDF+D"))


def test_several_annotation_signals_and_old_encodings(tmp_path: Path) -> None:
    more = Made("EDF Annotations", [b"+1\x14T\xfcr\x14\x00", b"", b"", b""], unit="", physical=("-1", "1"))
    first = notes_signal("+0||", "+1||", "+2|| +2|Stimulus/cue/left", "+3||")
    facts, _ = opened(made_file(tmp_path / "a.edf", [first, Made("Cz", ramp()), more], "EDF+C"))
    assert [channel.name for channel in facts.channels] == ["Cz"]
    assert [(m.sample, m.code, m.type) for m in facts.markers] == [
        (10, "T\u00fcr", ""),
        (20, "cue/left", "Stimulus"),
    ]


def test_channels_of_other_rates_are_left_out_and_told(tmp_path: Path) -> None:
    signals = [Made("Cz", ramp()), Made("Oz", ramp()), Made("Pulse", ramp(4, 2)), Made("Sound", ramp(4, 50))]
    facts, volts = opened(made_file(tmp_path / "a.edf", signals))
    assert facts.rate_hz == 10
    assert [channel.name for channel in facts.channels] == ["Cz", "Oz"]
    np.testing.assert_allclose(volts, np.tile(np.arange(40) * 1e-7, (2, 1)), atol=1e-15)
    assert any("Pulse (2 Hz), Sound (50 Hz)" in note for note in facts.notes)


def test_units_and_types(tmp_path: Path) -> None:
    signals = [
        Made("EEG Fp1", ramp(), unit="mV"),
        Made("EOG left", ramp(), unit="V"),
        Made("ECG", ramp(), unit="\u00b5V"),
        Made("EMG", ramp(), unit="nV"),
        Made("Temp", ramp(), unit="degC"),
    ]
    facts, volts = opened(made_file(tmp_path / "a.edf", signals))
    assert [(c.name, c.type.value) for c in facts.channels] == [
        ("Fp1", "eeg"),
        ("EOG left", "eog"),
        ("ECG", "ecg"),
        ("EMG", "emg"),
        ("Temp", "misc"),
    ]
    for row, unit in zip(volts, (1e-3, 1.0, 1e-6, 1e-9, 1.0), strict=True):
        np.testing.assert_allclose(row, np.arange(40) * 0.1 * unit, rtol=1e-12, atol=1e-12 * unit)
    assert any("Temp (degC)" in note for note in facts.notes)


def test_status_channel_gives_markers(tmp_path: Path) -> None:
    """The bits from 16 on report the state of the amplifier; they come and go without being events."""
    levels = np.zeros(40, np.int64)
    levels[5:9], levels[9:12], levels[20], levels[30:] = 5, 7, 65285, 300
    levels[3:25] += 1 << 20
    levels[25:] += 1 << 16
    full = {"physical": ("-8388608", "8388607"), "digital": (-8388608, 8388607)}
    status = Made("Status", levels.reshape(4, 10), unit="Boolean", **full)  # type: ignore[arg-type]
    facts, _ = opened(made_file(tmp_path / "a.bdf", [Made("Cz", ramp(), **full), status], "24BIT"))  # type: ignore[arg-type]
    assert [channel.type.value for channel in facts.channels] == ["eeg", "trigger"]
    assert [(m.sample, m.code, m.type) for m in facts.markers] == [
        (5, "5", "Status"),
        (9, "7", "Status"),
        (20, "65285", "Status"),
        (30, "300", "Status"),
    ]
    assert any("Markers from Status: 4; from annotations: 0" in note for note in facts.notes)


def test_annotations_and_trigger_channel_both_count(tmp_path: Path) -> None:
    levels = np.zeros((4, 10), np.int64)
    levels[1, 2:6] = 8
    trigger = Made("TRIG", levels, unit="", physical=("-32768", "32767"))
    texts = notes_signal("+0|| +0|begin", "+1|| +1.2|8", "+2||", "+3||")
    facts, _ = opened(made_file(tmp_path / "a.edf", [Made("Cz", ramp()), trigger, texts], "EDF+C"))
    assert [(m.sample, m.code) for m in facts.markers] == [(0, "begin"), (12, "8"), (12, "TRIG:8")]


def test_unfinished_recording_is_taken_as_far_as_it_goes(tmp_path: Path) -> None:
    facts, _ = opened(made_file(tmp_path / "a.edf", [Made("Cz", ramp())], n_records=-1))
    assert facts.n_samples == 40
    assert any("not ended properly" in note for note in facts.notes)


@pytest.mark.parametrize("announced", [3, 5])
def test_number_of_records_must_fit(tmp_path: Path, announced: int) -> None:
    with pytest.raises(DamagedRecording, match=f"announces {announced} records of 20 bytes, there are 4"):
        open_recording(made_file(tmp_path / "a.edf", [Made("Cz", ramp())], n_records=announced))


def test_records_of_odd_length(tmp_path: Path) -> None:
    facts, _ = opened(made_file(tmp_path / "a.edf", [Made("Cz", ramp(4, 7))], record_s="0.0035"))
    assert facts.rate_hz == 2000
    assert facts.n_samples == 28


@pytest.mark.parametrize(
    ("signals", "error"),
    [
        ([notes_signal("+0||")], UnusableChannels),
        ([Made("Cz", ramp(), physical=("5", "5"))], DamagedRecording),
        ([Made("Cz", ramp(), digital=(7, 7))], DamagedRecording),
        ([Made("Cz", ramp(), physical=("low", "5"))], DamagedRecording),
        ([Made("EEG Cz", ramp()), Made("Cz", ramp())], UnusableChannels),
    ],
)
def test_headers_that_make_no_sense(tmp_path: Path, signals: list[Made], error: type[Exception]) -> None:
    with pytest.raises(error) as caught:
        open_recording(made_file(tmp_path / "a.edf", signals))
    assert str(caught.value).startswith("a.edf: ")
