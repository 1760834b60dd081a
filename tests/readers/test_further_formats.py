"""Formats that only the reader library knows: files written here byte by byte."""

from __future__ import annotations

import contextlib
import pickle
import struct
import sys
from collections.abc import Callable
from contextlib import closing
from pathlib import Path
from typing import Any

import mne
import numpy as np
import pytest
import scipy.io
from mne.io import _read_raw as library_table
from numpy.typing import NDArray

from pulsemend.errors import MissingPart, RecordingError, UnknownFormat
from pulsemend.model.recording import Recording
from pulsemend.progress import finish
from pulsemend.readers.fingerprint import fingerprint
from pulsemend.readers.opening import open_recording
from support.written_recordings import N_SAMPLES, NAMES, RATE_HZ, counts, fif_raw


def volts(recording: Recording) -> NDArray[np.float64]:
    out = np.empty((recording.facts.n_samples, len(recording.facts.channels)))
    recording.read(0, len(out), out)
    return (out * [channel.scale_v for channel in recording.facts.channels]).T


def multiplexed_without_header(folder: Path) -> Path:
    """64 channels of 16 bits and nothing else: three triggers, one eye channel, 60 EEG channels."""
    stored = np.random.default_rng(4).integers(-2000, 2000, (N_SAMPLES, 64), dtype="<i2")
    stored[:, :3] = 0
    stored[100:140, 0] = stored[900:905, 2] = 3277  # 5.0005 after scaling
    (folder / "lt01.nxe").write_bytes(stored.tobytes())
    return folder / "lt01.nxe"


def header_and_data(folder: Path) -> Path:
    """A text header with comments, and multiplexed 16-bit numbers in a second file."""
    (folder / "lt01.dat").write_bytes(np.ascontiguousarray(counts().T.astype("<i2")).tobytes())
    (folder / "lt01.lay").write_text(
        "[FileInfo]\nFile=lt01.dat\nFileType=Interleaved\nSamplingRate=500\nHeaderLength=0\n"
        "Calibration=0.1\nWaveformCount=4\nDataType=0\n"
        "[Patient]\nFirst=\nBirthDate=01-02-80\nTestDate=2026.01.02\nTestTime=10:00:00\nSex=\nHand=\n"
        "[ChannelMap]\nFz-Ref=1\nC3-Ref=2\nC4-Ref=3\nVEOG-Ref=4\n"
        "[Comments]\n0.498,0.0,0,100,pulse\n1.0,0.0,0,100,arrow left\n",
        encoding="ascii",
    )
    return folder / "lt01.lay"


def states_and_samples(folder: Path) -> Path:
    """Samples and a state vector in turn; the extension is shared by two readers, the second takes it."""
    codes = np.zeros((N_SAMPLES, 1), np.uint8)
    codes[200:260] = 7
    frames = np.concatenate([np.ascontiguousarray(counts().T.astype("<i2")).view(np.uint8), codes], axis=1)
    head = (
        "HeaderLen= {:5d} SourceCh= 4 StatevectorLen= 1 DataFormat= int16\r\n"
        "[ State Vector Definition ]\r\nStimulusCode 8 0 0 0\r\n"
        "[ Parameter Definition ]\r\nStorage int SamplingRate= 500 500 1 4000\r\n\r\n"
    )
    head = head.format(len(head.format(0)))
    (folder / "lt01.dat").write_bytes(head.encode("ascii") + frames.tobytes())
    return folder / "lt01.dat"


def matlab_struct(folder: Path, *, apart: bool = True) -> Path:
    """A struct of facts and events, its samples in a second file or inside."""
    samples = (counts() / 10).astype("<f4")
    if apart:
        (folder / "lt01.fdt").write_bytes(samples.T.tobytes())
    places = [{"labels": name, "X": [], "Y": [], "Z": []} for name in NAMES]
    events = [("S  1", 250.0), ("boundary", 500.5), ("S  2", 751.0)]
    scipy.io.savemat(
        folder / "lt01.set",
        {
            "EEG": {
                "setname": "lt01", "filename": "lt01.set", "nbchan": 4.0, "trials": 1.0, "srate": RATE_HZ,
                "pnts": float(N_SAMPLES), "xmin": 0.0, "xmax": (N_SAMPLES - 1) / RATE_HZ,
                "data": "lt01.fdt" if apart else samples,
                "chanlocs": np.array([tuple(place.values()) for place in places],
                                     [(key, object) for key in places[0]]),
                "event": np.array([(kind, at, 0.0) for kind, at in events],
                                  [("type", object), ("latency", object), ("duration", object)]),
            }
        },
        appendmat=False,
    )  # fmt: skip
    return folder / "lt01.set"


def binary_header_and_events(folder: Path) -> Path:
    """A binary header, records of one second and a table of events behind them, counted from 1."""
    n = len(NAMES)
    fixed = struct.pack(
        "<8s80s80s16sq24s20sqIII",
        b"GDF 1.25", b"lt01 X", b"", b"2026010210000000", 256 * (n + 1), b"", b"", 3, 1, 1, n,
    )  # fmt: skip
    per_channel = [
        b"".join(name.encode().ljust(16) for name in NAMES), bytes(80 * n), b"uV      " * n,
        struct.pack(f"<{n}d{n}d", *[-3276.8] * n, *[3276.7] * n),
        struct.pack(f"<{n}q{n}q", *[-32768] * n, *[32767] * n),
        b" " * 80 * n, struct.pack(f"<{n}i{n}i", *[500] * n, *[3] * n), bytes(32 * n),
    ]  # fmt: skip
    records = counts().astype("<i2").reshape(n, 3, 500).transpose(1, 0, 2)
    events = struct.pack("<B3BI2I2H", 1, 500 % 256, 500 // 256, 0, 2, 250, 1001, 769, 770)
    (folder / "lt01.gdf").write_bytes(fixed + b"".join(per_channel) + records.tobytes() + events)
    return folder / "lt01.gdf"


WRITERS: dict[str, Callable[[Path], Path]] = {
    ".nxe": multiplexed_without_header,
    ".lay": header_and_data,
    ".dat": states_and_samples,
    ".set": matlab_struct,
    ".gdf": binary_header_and_events,
}


@pytest.fixture(params=WRITERS)
def path(request: pytest.FixtureRequest, tmp_path: Path) -> Path:
    return WRITERS[str(request.param)](tmp_path)


def test_volts_equal_the_reader_library(path: Path) -> None:
    """Outside reference: mne."""
    with closing(open_recording(path)) as recording:
        assert recording.facts.n_samples == N_SAMPLES
        assert recording.facts.stem == "lt01"
        reference = mne.io.read_raw(path, preload=True, verbose="error") if path.suffix != ".dat" else None
        found = volts(recording)
    if reference is None:
        np.testing.assert_array_equal(found[:4], counts())
    else:
        # Its numbers of .nxe are microvolts: 0.0763 a step, 2.5 mV full scale.
        scale = np.where(np.arange(len(found)) < 3, 1.0, 1e-6)[:, None] if path.suffix == ".nxe" else 1.0
        np.testing.assert_array_equal(found, reference.get_data() * scale)


def test_it_pickles_by_path_and_opens_again(path: Path) -> None:
    with closing(open_recording(path)) as recording:
        before = volts(recording)
        recording.close()
        np.testing.assert_array_equal(volts(recording), before)
        state = pickle.dumps(recording)
        assert len(state) < 20_000
        with closing(pickle.loads(state)) as again:
            assert again.facts == recording.facts
            np.testing.assert_array_equal(volts(again), before)


def test_blocks_are_cut_anywhere(path: Path) -> None:
    with closing(open_recording(path)) as recording:
        whole = np.empty((N_SAMPLES, len(recording.facts.channels)))
        recording.read(0, N_SAMPLES, whole)
        for start, stop in ((0, 1), (37, 738), (N_SAMPLES - 1, N_SAMPLES)):
            part = np.empty((stop - start, whole.shape[1]), np.float32)
            recording.read(start, stop, part)
            np.testing.assert_array_equal(part, whole[start:stop].astype(np.float32))


def test_trigger_channels_and_types(tmp_path: Path) -> None:
    with closing(open_recording(multiplexed_without_header(tmp_path))) as recording:
        facts = recording.facts
    assert [(m.sample, m.code, m.type) for m in facts.markers] == [
        (100, "GateIn:5", "GateIn"),
        (900, "Trig2:5", "Trig2"),
    ]
    types = [channel.type.value for channel in facts.channels]
    assert types == ["trigger"] * 3 + ["eog"] + ["eeg"] * 60
    assert facts.rate_hz == 1450.0
    assert facts.format == ".nxe file"


def test_comments_become_markers_and_both_files_are_identified(tmp_path: Path) -> None:
    path = header_and_data(tmp_path)
    (tmp_path / "lt01.txt").write_text("not part of it")
    with closing(open_recording(path)) as recording:
        facts = recording.facts
        parts = finish(fingerprint(recording)).parts
    assert [(m.sample, m.code) for m in facts.markers] == [(249, "pulse"), (500, "arrow left")]
    assert [part[0] for part in parts] == ["lt01.lay", "lt01.dat"]
    assert [(part.name, part.size) for part in facts.parts] == [part[:2] for part in parts]


def test_state_vector_gives_markers(tmp_path: Path) -> None:
    with closing(open_recording(states_and_samples(tmp_path))) as recording:
        assert [(m.sample, m.code) for m in recording.facts.markers] == [(200, "7")]
        assert recording.facts.rate_hz == RATE_HZ
        assert any("perhaps the file's unit is not V" in note for note in recording.facts.notes)


@pytest.mark.parametrize(
    "writer", [multiplexed_without_header, header_and_data, matlab_struct, binary_header_and_events]
)
def test_plausible_volts_are_not_doubted(writer: Callable[[Path], Path], tmp_path: Path) -> None:
    with closing(open_recording(writer(tmp_path))) as recording:
        assert not any("unit is not V" in note for note in recording.facts.notes)


@pytest.mark.parametrize("apart", [True, False])
def test_struct_with_samples_inside_or_beside(tmp_path: Path, apart: bool) -> None:
    with closing(open_recording(matlab_struct(tmp_path, apart=apart))) as recording:
        facts = recording.facts
        np.testing.assert_allclose(volts(recording), counts() * 1e-7, rtol=1e-6)
    assert [part.name for part in facts.parts] == ["lt01.set", "lt01.fdt"][: 1 + apart]
    assert [(m.sample, m.code) for m in facts.markers] == [(249, "S 1"), (750, "S 2")]
    assert facts.boundaries == (500,)
    assert [channel.name for channel in facts.channels] == list(NAMES)
    assert [channel.type.value for channel in facts.channels] == ["eeg", "eeg", "eeg", "eog"]


def test_a_table_of_events_behind_the_samples(tmp_path: Path) -> None:
    with closing(open_recording(binary_header_and_events(tmp_path))) as recording:
        facts = recording.facts
        np.testing.assert_allclose(volts(recording), counts() * 1e-7, rtol=0, atol=1e-15)
    assert [(m.sample, m.code) for m in facts.markers] == [(249, "769"), (1000, "770")]
    assert [channel.type.value for channel in facts.channels] == ["eeg", "eeg", "eeg", "eog"]


def test_missing_second_file(tmp_path: Path) -> None:
    path = header_and_data(tmp_path)
    (tmp_path / "lt01.dat").unlink()
    with pytest.raises(MissingPart) as caught:
        open_recording(path)
    assert caught.value.where == "lt01.lay"
    assert "does not exist" in caught.value.what


def test_what_the_library_warns_about_becomes_a_note(tmp_path: Path) -> None:
    path = multiplexed_without_header(tmp_path)
    path.write_bytes(path.read_bytes()[:-5])
    with closing(open_recording(path)) as recording:
        assert any("truncated" in note for note in recording.facts.notes)
        assert recording.facts.n_samples == N_SAMPLES - 1


@pytest.mark.parametrize(("name", "package"), [("a.mff", "mffpy"), ("a.nedf", "defusedxml")])
def test_formats_that_need_another_package(
    name: str, package: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setitem(sys.modules, package, None)
    if name.endswith(".mff"):
        (tmp_path / name).mkdir()
        (tmp_path / name / "signal1.bin").write_bytes(bytes(10))
    else:
        (tmp_path / name).write_bytes(b"MATLAB 5.0 MAT-file" + bytes(2000))
    with pytest.raises(UnknownFormat, match=f"needs the package {package}") as caught:
        open_recording(tmp_path / name)
    assert caught.value.where == name
    assert "\n" not in str(caught.value)
    assert f"Install {package}" in caught.value.todo


@pytest.mark.parametrize(
    "extension", sorted(set(library_table._get_readers()) - {".fif.gz", ".cdt.dpa", ".nxe"})
)
def test_every_extension_of_the_library_is_refused_in_one_line(extension: str, tmp_path: Path) -> None:
    for content in (b"no recording at all\n" * 40, bytes(5000)):
        path = tmp_path / f"a{extension}"
        path.write_bytes(content)
        with pytest.raises(RecordingError) as caught:
            open_recording(path)
        text = str(caught.value)
        assert "\n" not in text
        assert len(text) < 420
        assert caught.value.where == path.name
        assert caught.value.todo


def test_a_folder_that_is_a_recording(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The library's folder formats need packages or hundreds of files: one is put into its table."""
    folder = tmp_path / "lt01.mff"
    (folder / "inner").mkdir(parents=True)
    (folder / "info.xml").write_text("<x/>")
    (folder / "inner" / "signal.bin").write_bytes(bytes(10))

    def read(fname: Path, preload: bool = False, verbose: Any = None) -> mne.io.BaseRaw:
        assert fname == folder
        return fif_raw()

    monkeypatch.setattr(library_table, "_get_readers", lambda: {".mff": {"some": read}})
    with closing(open_recording(folder)) as recording:
        facts = recording.facts
        np.testing.assert_array_equal(volts(recording), fif_raw().get_data())
        parts = finish(fingerprint(recording)).parts
    assert facts.stem == "lt01"
    assert facts.format == ".mff folder"
    assert [(name, size) for name, size, _ in parts] == [("info.xml", 4), ("inner/signal.bin", 10)]
    assert [(part.name, part.size) for part in facts.parts] == [("info.xml", 4), ("inner/signal.bin", 10)]


def test_a_joint_between_two_samples_starts_the_later_one(tmp_path: Path) -> None:
    raw = fif_raw(())
    raw.set_annotations(mne.Annotations([499.5 / RATE_HZ, 2.0], [0.0, 0.0], ["boundary", "BAD boundary"]))
    raw.save(tmp_path / "lt01_raw.fif", verbose="error")
    with closing(open_recording(tmp_path / "lt01_raw.fif")) as recording:
        assert recording.facts.boundaries == (500, 1000)
        assert recording.facts.markers == ()


def test_broken_bytes_never_raise_anything_else(path: Path) -> None:
    """Spoilt files are refused or read, never a traceback."""
    rng = np.random.default_rng(9)
    for spoilt in sorted(path.parent.iterdir()):
        content = spoilt.read_bytes()
        for _ in range(25):
            broken = bytearray(
                content[: len(content) if rng.random() < 0.5 else int(rng.integers(1, len(content)))]
            )
            for at in rng.integers(0, min(len(broken), 3000), 6):
                broken[at] = rng.integers(0, 256)
            spoilt.write_bytes(broken)
            with contextlib.suppress(RecordingError), closing(open_recording(path)) as recording:
                volts(recording)
        spoilt.write_bytes(content)
