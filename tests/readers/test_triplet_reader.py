"""Triplets: the header's dialect, names of parts, units, markers, and the reader library's volts."""

from __future__ import annotations

import os
import subprocess
import sys
from contextlib import closing
from pathlib import Path

import mne
import numpy as np
import pybv
import pytest
from numpy.typing import NDArray

from pulsemend.errors import DamagedRecording, MissingPart, UnknownFormat, UnusableChannels
from pulsemend.model.recording import RecordingFacts
from pulsemend.readers.opening import open_recording
from support.written_recordings import N_SAMPLES, NAMES, counts, triplet_by_hand, write_markers


@pytest.fixture
def header(tmp_path: Path) -> Path:
    return triplet_by_hand(tmp_path, counts(), "INT_16")


def edit(path: Path, old: str, new: str) -> None:
    text = path.read_text("utf-8")
    assert old in text
    path.write_text(text.replace(old, new), "utf-8")


def facts_of(path: Path) -> RecordingFacts:
    with closing(open_recording(path)) as recording:
        return recording.facts


def stored(path: Path) -> NDArray[np.float64]:
    with closing(open_recording(path)) as recording:
        out = np.empty((recording.facts.n_samples, len(recording.facts.channels)))
        recording.read(0, len(out), out)
    return out


@pytest.mark.filterwarnings("ignore:Encountered unsupported voltage units")
@pytest.mark.parametrize("fmt", ["binary_int16", "binary_float32"])
def test_volts_equal_the_reader_library_bit_for_bit(tmp_path: Path, fmt: str) -> None:
    """Outside reference: mne. Resolutions whose product with the unit is not what dividing would give."""
    resolutions = np.array([0.0488281, 0.1, 0.3, 1 / 3, 7.0e-3, 0.0762951, 1.0, 0.5])
    units = {"\u00b5V": 1e-6, "mV": 1e-3, "V": 1.0, "nV": 1e-9}
    written = [*units, *units]
    steps = resolutions * [units[unit] for unit in written]
    pybv.write_brainvision(
        data=np.random.default_rng(5).uniform(-32000, 32000, (8, 400)) * steps[:, None],
        sfreq=25000,
        ch_names=[f"E{i}" for i in range(8)],
        fname_base="odd",
        folder_out=tmp_path,
        resolution=resolutions,
        unit=written,
        fmt=fmt,
    )
    path = tmp_path / "odd.vhdr"
    reference = mne.io.read_raw_brainvision(path, verbose="error")
    scale_v = [channel.scale_v for channel in facts_of(path).channels]
    np.testing.assert_array_equal((stored(path) * scale_v).T, reference.get_data())
    assert facts_of(path).rate_hz == 25000


def test_units(header: Path) -> None:
    edit(header, "Ch1=Fz,,0.1,uV", "Ch1=Fz,,0.5,\u00b5V")
    edit(header, "Ch2=C3,,0.1,uV", "Ch2=C3,,,\u03bcV")
    edit(header, "Ch3=C4,,0.1,uV", "Ch3=C4,,0.5")
    edit(header, "Ch4=VEOG,,0.1,uV", "Ch4=VEOG,,2,")
    scales = [(channel.scale_v, channel.type.value) for channel in facts_of(header).channels]
    assert scales == [(0.5e-6, "eeg"), (1e-6, "eeg"), (0.5e-6, "eeg"), (2e-6, "eog")]


def test_larger_and_smaller_units(header: Path) -> None:
    for name, unit in (("Fz", "V"), ("C3", "mV"), ("C4", "nV")):
        edit(header, f"{name},,0.1,uV", f"{name},,0.3,{unit}")
    assert [c.scale_v for c in facts_of(header).channels] == [0.3, 0.3 * 1e-3, 0.3 * 1e-9, 0.1 * 1e-6]


def test_other_units_are_misc_with_numbers_as_written(header: Path) -> None:
    for name, unit in (("Fz", "C"), ("C3", "ARU"), ("C4", "\u00b5S")):
        edit(header, f"{name},,0.1,uV", f"{name},,0.25,{unit}")
    facts = facts_of(header)
    assert [(c.type.value, c.scale_v, c.unit) for c in facts.channels[:3]] == [
        ("misc", 0.25, "C"),
        ("misc", 0.25, "ARU"),
        ("misc", 0.25, "\u00b5S"),
    ]
    assert "Fz (C), C3 (ARU), C4 (\u00b5S)" in facts.notes[0]


def test_commas_in_names_and_markers(header: Path) -> None:
    edit(header, "Ch1=Fz", "Ch1=Fz\\1left")
    write_markers(header.with_suffix(".vmrk"), [("Stimulus", "arrow\\1 left", 5)])
    facts = facts_of(header)
    assert facts.channels[0].name == "Fz,left"
    assert [(m.sample, m.code) for m in facts.markers] == [(4, "arrow, left")]


@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "latin-1"])
def test_code_pages(header: Path, encoding: str) -> None:
    edit(header, "Ch1=Fz,,0.1,uV", "Ch1=Fz,,0.1,\u00b5V")
    write_markers(header.with_suffix(".vmrk"), [("Stimulus", "T\u00fcr", 5)])
    for path in (header, header.with_suffix(".vmrk")):
        path.write_bytes(path.read_text("utf-8").replace("UTF-8", "ANSI").encode(encoding))
    facts = facts_of(header)
    assert facts.channels[0].scale_v == 0.1 * 1e-6
    assert facts.markers[0].code == "T\u00fcr"


def test_keys_in_any_case_blanks_and_remarks(header: Path) -> None:
    edit(header, "NumberOfChannels=4", "; a remark\n\n  numberofchannels =  4 ")
    edit(header, "[Channel Infos]", "[channel infos]")
    header.write_text(header.read_text("utf-8") + "\n[Comment]\nCh1=rubbish\n[no section\nCh9=x", "utf-8")
    assert [channel.name for channel in facts_of(header).channels] == list(NAMES)


def test_placeholder_for_the_headers_name(header: Path) -> None:
    edit(header, "DataFile=lt01.eeg", "DataFile=$b.eeg")
    edit(header, "MarkerFile=lt01.vmrk", "MarkerFile=$b.vmrk")
    assert facts_of(header).notes == ()


def test_folders_in_names_of_parts_are_ignored(header: Path) -> None:
    edit(header, "DataFile=lt01.eeg", "DataFile=D:\\recordings\\lt01.eeg")
    assert facts_of(header).notes == ()


def test_renamed_parts_are_found_and_told(header: Path, tmp_path: Path) -> None:
    for part in sorted(tmp_path.iterdir()):
        part.rename(part.with_stem("sub-01_task-lantern_eeg"))
    facts = facts_of(tmp_path / "sub-01_task-lantern_eeg.vhdr")
    assert facts.stem == "sub-01_task-lantern"
    assert len(facts.markers) == 4
    assert facts.notes == (
        "The header names lt01.eeg, which is not there; sub-01_task-lantern_eeg.eeg was taken instead.",
        "The header names lt01.vmrk, which is not there; sub-01_task-lantern_eeg.vmrk was taken instead.",
    )


def test_missing_parts_are_named_once(header: Path) -> None:
    for part in (".eeg", ".vmrk"):
        header.with_suffix(part).rename(header.with_name(f"away{part}"))
        with pytest.raises(MissingPart) as caught:
            open_recording(header)
        assert caught.value.what == f"the file lt01{part}, named in the header, is not there"
        header.with_name(f"away{part}").rename(header.with_suffix(part))
    edit(header, "DataFile=lt01.eeg", "DataFile=other.eeg")
    header.with_suffix(".eeg").unlink()
    with pytest.raises(MissingPart, match=r"file other\.eeg, .* is not there, nor is lt01\.eeg"):
        open_recording(header)


def test_no_marker_file_named(header: Path) -> None:
    edit(header, "MarkerFile=lt01.vmrk\n", "")
    facts = facts_of(header)
    assert facts.markers == ()
    assert [part.name for part in facts.parts] == ["lt01.vhdr", "lt01.eeg"]
    assert "no marker file" in facts.notes[0]


@pytest.mark.parametrize("suffix", [".eeg", ".vmrk"])
def test_any_part_opens_the_recording(header: Path, suffix: str) -> None:
    assert facts_of(header.with_suffix(suffix)) == facts_of(header)


@pytest.mark.parametrize("suffix", [".eeg", ".vmrk"])
def test_part_without_its_header(header: Path, suffix: str) -> None:
    header.unlink()
    with pytest.raises(MissingPart, match=r"lt01\.vhdr"):
        open_recording(header.with_suffix(suffix))


def test_second_segment_marker_is_a_boundary(header: Path) -> None:
    write_markers(
        header.with_suffix(".vmrk"),
        [
            ("New Segment", "", 1),
            ("Stimulus", "cue", 700),
            ("New Segment", "", 751),
            ("SyncStatus", "Sync On", 760),
            ("SyncStatus", "Sync On", 800),
            ("Stimulus", "cue", 801),
        ],
    )
    facts = facts_of(header)
    assert facts.boundaries == (750,)
    assert facts.segments == ((0, 750), (750, N_SAMPLES))
    assert [(m.sample, m.code, m.type) for m in facts.markers] == [
        (699, "cue", "Stimulus"),
        (800, "cue", "Stimulus"),
    ]
    assert any("amplifier's clock (SyncStatus), left out: 2" in note for note in facts.notes)
    assert any("Pauses in the recording: 1" in note for note in facts.notes)


def test_codes_of_markers(header: Path) -> None:
    write_markers(
        header.with_suffix(".vmrk"),
        [("Stimulus", "S  1", 9), ("Response", "R  1", 5), ("Optic", "", 20), ("Comment", " a  b ", 30)],
    )
    assert [(m.sample, m.code) for m in facts_of(header).markers] == [
        (4, "R 1"),
        (8, "S 1"),
        (19, "Optic"),
        (29, "a b"),
    ]


def test_marker_before_the_first_sample(header: Path) -> None:
    write_markers(header.with_suffix(".vmrk"), [("Stimulus", "cue", 0)])
    facts = facts_of(header)
    assert facts.markers[0].sample == 0
    assert any("before the first sample, moved onto it: 1" in note for note in facts.notes)


def test_marker_behind_the_last_sample_means_that_samples_are_missing(header: Path) -> None:
    write_markers(header.with_suffix(".vmrk"), [("Stimulus", "cue", 1500), ("Stimulus", "cue", 1501)])
    with pytest.raises(DamagedRecording, match=r"1 of 2 markers .* 1500, the first at 1501"):
        open_recording(header)


def test_samples_cut_at_a_whole_frame_are_seen_by_the_markers(header: Path) -> None:
    data = header.with_suffix(".eeg")
    data.write_bytes(data.read_bytes()[: 1000 * 8])
    with pytest.raises(DamagedRecording, match="behind the last sample, 1000"):
        open_recording(header)


def test_broken_frame_names_the_sizes(header: Path) -> None:
    data = header.with_suffix(".eeg")
    data.write_bytes(data.read_bytes() + b"abc")
    with pytest.raises(DamagedRecording, match="12003 bytes are 1500 samples of 8 bytes and 3 bytes"):
        open_recording(header)


@pytest.mark.parametrize(
    ("orientation", "points", "fits"),
    [
        ("MULTIPLEXED", 1500, True),
        ("MULTIPLEXED", 1400, True),
        ("MULTIPLEXED", 1600, False),
        ("VECTORIZED", 1500, True),
        ("VECTORIZED", 1400, False),
    ],
)
def test_number_of_samples_in_the_header(tmp_path: Path, orientation: str, points: int, fits: bool) -> None:
    header = triplet_by_hand(tmp_path, counts(), "INT_16", orientation=orientation)
    edit(header, "SamplingInterval", f"DataPoints={points}\nSamplingInterval")
    if fits:
        assert facts_of(header).n_samples == N_SAMPLES
    else:
        with pytest.raises(DamagedRecording, match=f"1500 samples, the header says {points}"):
            open_recording(header)


def test_big_endian_samples(header: Path) -> None:
    plain = stored(header)
    data = header.with_suffix(".eeg")
    data.write_bytes(np.frombuffer(data.read_bytes(), "<i2").astype(">i2").tobytes())
    edit(header, "[Binary Infos]", "[Binary Infos]\nUseBigEndianOrder=YES")
    np.testing.assert_array_equal(stored(header), plain)


def test_without_positional_reading_the_same(header: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """As on systems whose Python has no os.preadv."""
    plain = stored(header)
    monkeypatch.delattr(os, "preadv")
    np.testing.assert_array_equal(stored(header), plain)


def test_positions(header: Path) -> None:
    """Value from memory: inclination from the vertex, positive to the right; azimuth from the right ear."""
    text = header.read_text("utf-8")
    header.write_text(text + "[Coordinates]\nCh1=1,0,0\nCh2=1,-90,0\nCh3=100,90,90\nCh4=0,0,0\n", "utf-8")
    positions = [channel.position_m for channel in facts_of(header).channels]
    for found, expected in zip(positions, [(0, 0, 0.095), (-0.095, 0, 0), (0, 0.1, 0)], strict=False):
        np.testing.assert_allclose(np.array(found), expected, atol=1e-12)
    assert positions[3] is None


@pytest.mark.parametrize(
    ("old", "new", "error", "what"),
    [
        ("DataFormat=BINARY", "DataFormat=ASCII", UnknownFormat, "as text"),
        ("INT_16", "UINT_16", UnknownFormat, "UINT_16"),
        ("MULTIPLEXED", "DIAGONAL", UnknownFormat, "DIAGONAL"),
        ("DataFormat=BINARY", "DataFormat=BINARY\nDataType=FREQUENCYDOMAIN", UnknownFormat, "over time"),
        ("SamplingInterval=2000", "SamplingInterval=0", DamagedRecording, "SamplingInterval"),
        ("SamplingInterval=2000", "SamplingInterval=often", DamagedRecording, "often"),
        ("SamplingInterval=2000\n", "", DamagedRecording, "SamplingInterval"),
        ("NumberOfChannels=4", "NumberOfChannels=5", DamagedRecording, "Ch5"),
        ("NumberOfChannels=4", "NumberOfChannels=3", DamagedRecording, "more channels"),
        ("NumberOfChannels=4", "NumberOfChannels=0", UnusableChannels, "no channel"),
        ("C3,,0.1,", "C3,,fine,", DamagedRecording, "resolution of channel C3"),
        ("C3,,0.1,", "C3,,0,", DamagedRecording, "resolution of channel C3"),
        ("C3,,0.1,uV", "C3", DamagedRecording, "channel 2"),
        ("Ch2=C3", "Ch2=", DamagedRecording, "channel 2 has no name"),
        ("DataFile=lt01.eeg\n", "", DamagedRecording, "DataFile"),
    ],
)
def test_headers_that_cannot_be_used(
    header: Path, old: str, new: str, error: type[Exception], what: str
) -> None:
    edit(header, old, new)
    with pytest.raises(error, match=what) as caught:
        open_recording(header)
    assert str(caught.value).startswith("lt01.vhdr: ")


def test_marker_without_position(header: Path) -> None:
    path = header.with_suffix(".vmrk")
    path.write_text(path.read_text("utf-8") + "Mk9=Stimulus,cue,soon,1,0\n", "utf-8")
    with pytest.raises(DamagedRecording, match="Mk9 has no position"):
        open_recording(header)


@pytest.mark.parametrize("lost", range(1, 10))
def test_marker_file_that_ends_inside_an_entry(header: Path, lost: int) -> None:
    """Its last line is ``Mk5=,end,1500,1,0``: no digit may be lost unseen."""
    path = header.with_suffix(".vmrk")
    content = path.read_bytes().rstrip()
    path.write_bytes(content[: -(lost + 1)])
    with pytest.raises(DamagedRecording):
        open_recording(header)
    path.write_bytes(content)
    assert len(facts_of(header).markers) == 4


@pytest.mark.parametrize("tables", [False, True])
def test_plain_triplets_do_without_the_reader_library(header: Path, tables: bool) -> None:
    """The window shows their first traces before that library is loaded (design, section 5)."""
    if tables:
        header.with_name("lt01_events.tsv").write_text("onset\tduration\tvalue\n0.1\t0\t1\n")
        header.with_name("lt01_electrodes.tsv").write_text("name\tx\ty\tz\nFz\t0\t0\t1\n")
        rows = "".join(f"{name}\tEEG\n" for name in NAMES)
        header.with_name("lt01_channels.tsv").write_text(f"name\ttype\n{rows}")
    lines = (
        "import sys",
        "from pathlib import Path",
        "from pulsemend.readers.opening import open_recording",
        f"open_recording(Path({str(header)!r})).close()",
        "sys.exit('mne' in sys.modules)",
    )
    subprocess.run([sys.executable, "-c", "\n".join(lines)], check=True)


def test_a_triplet_under_its_other_names(header: Path) -> None:
    text = header.read_text("utf-8").replace("lt01.vmrk", "lt01.amrk")
    anonymised = header.with_suffix(".ahdr")
    anonymised.write_text(text.replace("Data Exchange Header", "Data Header"), "utf-8")
    header.with_suffix(".vmrk").rename(header.with_suffix(".amrk"))
    before = stored(anonymised)
    header.unlink()
    for suffix in (".ahdr", ".amrk", ".eeg"):
        np.testing.assert_array_equal(stored(header.with_suffix(suffix)), before)
    assert [part.name for part in facts_of(anonymised).parts] == ["lt01.ahdr", "lt01.eeg", "lt01.amrk"]
