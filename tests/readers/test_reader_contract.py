"""What every reader promises, for every format."""

from __future__ import annotations

import contextlib
import hashlib
import os
import pickle
import shutil
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import mne
import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.errors import (
    DamagedRecording,
    MissingPart,
    RecordingError,
    UnknownFormat,
    UnusableChannels,
    UnusableSamples,
)
from pulsemend.model.recording import Recording
from pulsemend.progress import finish
from pulsemend.readers.fingerprint import fingerprint
from pulsemend.readers.opening import open_recording
from support.written_recordings import (
    EVENTS,
    FORMATS,
    N_SAMPLES,
    NAMES,
    RATE_HZ,
    Written,
    fif_raw,
    triplet_by_hand,
)

FLOATS = ["triplet float32", "triplet float32 vectorized", "FIF"]


def whole(recording: Recording) -> NDArray[np.float64]:
    out = np.empty((recording.facts.n_samples, len(recording.facts.channels)))
    recording.read(0, recording.facts.n_samples, out)
    return out


def scales(recording: Recording) -> NDArray[np.float64]:
    return np.array([channel.scale_v for channel in recording.facts.channels])


def try_all(path: Path) -> None:
    """Open a recording and read all of it."""
    with closing(open_recording(path)) as recording:
        whole(recording)


def patch(path: Path, old: bytes, new: bytes) -> None:
    content = path.read_bytes()
    assert old in content
    path.write_bytes(content.replace(old, new, 1))


@pytest.fixture(params=FORMATS)
def kind(request: pytest.FixtureRequest) -> str:
    return str(request.param)


@pytest.fixture
def written(kind: str, tmp_path: Path) -> Written:
    return FORMATS[kind](tmp_path, EVENTS)


@pytest.fixture
def recording(written: Written) -> Iterator[Recording]:
    with closing(open_recording(written.path)) as opened:
        yield opened


def test_samples_are_those_written(written: Written, recording: Recording) -> None:
    volts = (whole(recording) * scales(recording)).T
    np.testing.assert_allclose(volts, written.volts, rtol=0, atol=written.within_v)


def test_facts_are_those_written(kind: str, recording: Recording) -> None:
    facts = recording.facts
    assert facts.stem == ("lt01_raw" if "FIF" in kind else "lt01")
    assert facts.rate_hz == RATE_HZ
    assert facts.n_samples == N_SAMPLES
    assert [channel.name for channel in facts.channels] == list(NAMES)
    assert [channel.type.value for channel in facts.channels] == ["eeg", "eeg", "eeg", "eog"]
    assert facts.boundaries == ()
    assert facts.segments == ((0, N_SAMPLES),)


def test_markers_are_those_written(recording: Recording) -> None:
    found = [(marker.sample, marker.code) for marker in recording.facts.markers]
    assert found == [(sample, text) for sample, _, text in EVENTS]


def test_no_markers(kind: str, tmp_path: Path) -> None:
    with closing(open_recording(FORMATS[kind](tmp_path, ()).path)) as recording:
        assert recording.facts.markers == ()
        assert whole(recording).shape == (N_SAMPLES, len(NAMES))


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_any_cut_reads_the_same(recording: Recording, dtype: type[np.float32] | type[np.float64]) -> None:
    all_at_once = whole(recording).astype(dtype)
    cuts = np.random.default_rng(1).integers(0, N_SAMPLES + 1, (25, 2))
    for start, stop in (*np.sort(cuts, axis=1), (0, 1), (N_SAMPLES - 1, N_SAMPLES), (149, 151)):
        if start < stop:
            out = np.full((stop - start, len(NAMES)), np.nan, dtype)
            recording.read(int(start), int(stop), out)
            np.testing.assert_array_equal(out, all_at_once[start:stop])


@pytest.mark.parametrize("shift", [0.0, 0.3], ids=["whole offsets", "broken offsets"])
def test_offset_is_subtracted_in_float64_before_float32(recording: Recording, shift: float) -> None:
    stored = whole(recording)
    offset = np.round(stored.mean(axis=0)) + shift + 1000.0 * (np.abs(stored).max() > 1)
    for dtype in (np.float32, np.float64):
        out = np.empty(stored.shape, dtype)
        recording.read(0, N_SAMPLES, out, offset)
        np.testing.assert_array_equal(out, (stored - offset).astype(dtype))


def test_it_pickles_by_path(recording: Recording) -> None:
    before = whole(recording)
    state = pickle.dumps(recording)
    assert len(state) < before.nbytes / 2
    with closing(pickle.loads(state)) as again:
        assert again.facts == recording.facts
        np.testing.assert_array_equal(whole(again), before)


def test_reading_after_closing_opens_it_again(recording: Recording) -> None:
    before = whole(recording)
    recording.close()
    recording.close()
    np.testing.assert_array_equal(whole(recording), before)


@pytest.mark.skipif(not Path("/proc/self/fd").exists(), reason="counts open files by /proc")
def test_closing_leaves_no_file_open(written: Written) -> None:
    before = len(os.listdir("/proc/self/fd"))
    try_all(written.path)
    assert len(os.listdir("/proc/self/fd")) == before


@pytest.mark.parametrize(("start", "stop"), [(-1, 5), (5, 5), (0, N_SAMPLES + 1)])
def test_requests_outside_are_a_fault_of_the_caller(recording: Recording, start: int, stop: int) -> None:
    with pytest.raises(ValueError, match="samples"):
        recording.read(start, stop, np.empty((max(stop - start, 0), len(NAMES))))
    with pytest.raises(ValueError, match="shape"):
        recording.read(0, 5, np.empty((5, len(NAMES) + 1)))


def test_nothing_is_printed(written: Written, capfd: pytest.CaptureFixture[str]) -> None:
    """Standard output belongs to results."""
    try_all(written.path)
    assert capfd.readouterr() == ("", "")


def test_fingerprint_covers_every_part(written: Written, recording: Recording) -> None:
    parts = finish(fingerprint(recording)).parts
    files = sorted(written.path.parent.iterdir())
    assert sorted(parts) == [
        (file.name, file.stat().st_size, hashlib.sha256(file.read_bytes()).hexdigest()) for file in files
    ]
    assert [(part.name, part.size) for part in recording.facts.parts] == [part[:2] for part in parts]
    assert [Path(path).name for path in recording.fingerprint_paths()] == [part[0] for part in parts]


@pytest.mark.parametrize("lost", [1, 7, 4000])
def test_truncated_samples(written: Written, lost: int) -> None:
    content = written.data.read_bytes()
    written.data.write_bytes(content[:-lost])
    with pytest.raises(DamagedRecording) as caught:
        try_all(written.path)
    assert caught.value.where in {part.name for part in written.path.parent.iterdir()}
    assert caught.value.todo


def test_half_a_file(written: Written) -> None:
    content = written.data.read_bytes()
    written.data.write_bytes(content[: len(content) // 2])
    with pytest.raises(DamagedRecording):
        try_all(written.path)


def test_file_cut_after_opening(kind: str, written: Written) -> None:
    with closing(open_recording(written.path)) as recording:
        recording.close()
        content = written.data.read_bytes()
        written.data.write_bytes(content[: len(content) // 2])
        with pytest.raises(DamagedRecording) as caught:
            whole(recording)
    assert caught.value.where == written.data.name


def test_file_gone_after_opening(written: Written) -> None:
    with closing(open_recording(written.path)) as recording:
        recording.close()
        written.data.unlink()
        with pytest.raises(MissingPart) as caught:
            whole(recording)
        with pytest.raises(MissingPart):
            finish(fingerprint(recording))
    assert caught.value.where == written.data.name


@pytest.mark.parametrize("size", [0, 1, 40, 255, 256, 400])
def test_header_that_ends_early(written: Written, size: int) -> None:
    content = written.path.read_bytes()
    end = content.find(b"Ch4=")
    written.path.write_bytes(content[: min(size, end + 11) if end >= 0 else size])
    with pytest.raises(RecordingError) as caught:
        try_all(written.path)
    assert caught.value.where == written.path.name
    assert caught.value.todo


def test_broken_bytes_never_raise_anything_else(written: Written) -> None:
    """Spoilt headers are refused or read, never a traceback."""
    content = written.path.read_bytes()
    rng = np.random.default_rng(3)
    header_bytes = min(len(content), 2000)
    for _ in range(30):
        spoilt = bytearray(content)
        for at in rng.integers(0, header_bytes, 4):
            spoilt[at] = rng.integers(0, 256)
        written.path.write_bytes(spoilt)
        with contextlib.suppress(RecordingError):
            try_all(written.path)


def test_missing_file(written: Written) -> None:
    written.path.unlink()
    with pytest.raises(MissingPart) as caught:
        open_recording(written.path)
    assert caught.value.where == written.path.name


@pytest.mark.parametrize("suffix", [".eeg", ".vmrk"])
def test_missing_part_of_a_triplet(tmp_path: Path, suffix: str) -> None:
    written = FORMATS["triplet int16"](tmp_path, EVENTS)
    written.path.with_suffix(suffix).unlink()
    with pytest.raises(MissingPart, match=f"lt01{suffix}"):
        open_recording(written.path)


def test_missing_continuation_of_a_fif_file(tmp_path: Path) -> None:
    raw = mne.concatenate_raws([fif_raw() for _ in range(90)], verbose="error")
    raw.save(tmp_path / "lt02_raw.fif", split_size="2MB", verbose="error")
    parts = sorted(tmp_path.iterdir())
    with closing(open_recording(tmp_path / "lt02_raw.fif")) as recording:
        assert recording.facts.n_samples == 90 * N_SAMPLES
        assert sorted(recording.fingerprint_paths()) == [str(part) for part in parts]
        assert len(parts) > 1
        try_all(tmp_path / "lt02_raw.fif")
    (tmp_path / "lt02_raw-1.fif").unlink()
    with pytest.raises(MissingPart):
        open_recording(tmp_path / "lt02_raw.fif")


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
@pytest.mark.parametrize("kind", FLOATS)
def test_samples_that_are_not_finite(kind: str, tmp_path: Path, bad: float) -> None:
    if kind == "FIF":
        raw = fif_raw()
        volts = raw.get_data()
        volts[2, 700] = volts[1, 900] = bad
        path = tmp_path / "lt01_raw.fif"
        mne.io.RawArray(volts, raw.info, verbose="error").save(path, verbose="error")
    else:
        orientation = "VECTORIZED" if "vectorized" in kind else "MULTIPLEXED"
        stored = np.zeros((len(NAMES), N_SAMPLES), np.float32)
        stored[2, 700] = stored[1, 900] = bad
        path = triplet_by_hand(tmp_path, stored, "IEEE_FLOAT_32", orientation=orientation)
    with closing(open_recording(path)) as recording:
        out = np.empty((700, len(NAMES)), np.float32)
        recording.read(0, 700, out)
        assert np.isfinite(out).all()
        with pytest.raises(UnusableSamples, match=rf"channel C4 holds {bad} at sample 700\b") as caught:
            recording.read(650, 850, np.empty((200, len(NAMES))))
    assert caught.value.where == ("lt01_raw.fif" if kind == "FIF" else "lt01.eeg")


@pytest.mark.parametrize("kind", [kind for kind in FORMATS if kind != "FIF packed"])
def test_channel_names_that_occur_twice(kind: str, written: Written) -> None:
    old, new = {
        "t": (b"C4,", b"C3,"),
        "E": (b"C4  ", b"C3  "),
        "B": (b"C4  ", b"C3  "),
        "F": (b"C4\0", b"C3\0"),
    }[kind[0]]
    patch(written.path, old, new)
    with pytest.raises(UnusableChannels, match="C3") as caught:
        open_recording(written.path)
    assert caught.value.where == written.path.name


LIES = [
    (kind, extension)
    for kind, own in [("triplet int16", ".vhdr"), ("EDF+", ".edf"), ("BDF+", ".bdf"), ("FIF", ".fif")]
    for extension in (".vhdr", ".edf", ".bdf", ".fif", ".fif.gz", ".eeg", ".vmrk", ".dat", "")
    if extension != own and (kind, extension) != ("FIF", ".fif.gz")
]


@pytest.mark.parametrize(("kind", "extension"), LIES)
def test_extension_that_lies(kind: str, tmp_path: Path, extension: str) -> None:
    written = FORMATS[kind](tmp_path, EVENTS)
    (tmp_path / "elsewhere").mkdir()
    lying = tmp_path / "elsewhere" / f"other{extension}"
    shutil.copy(written.path, lying)
    with pytest.raises(UnknownFormat) as caught:
        open_recording(lying)
    assert caught.value.where == lying.name
    seems = "the header of a triplet" if "triplet" in kind else kind[:3]
    assert f"it seems to be {seems}" in caught.value.what
    assert written.path.suffixes[0] in caught.value.todo


@pytest.mark.parametrize(
    ("name", "content", "what"),
    [
        ("a.edf", b"\x89HDF\r\n\x1a\n" + bytes(300), "HDF5"),
        ("a.mat", b"MATLAB 5.0 MAT-file", "told more than the file holds"),
        ("a.xyz", b"MATLAB 5.0 MAT-file", "seems to be MAT"),
        ("a.gdf", b"GDF 2.10" + bytes(20), "no reader knows its contents"),
        ("a.vhdr", b"[Common Infos]\n", "not the header of a triplet"),
        ("a.txt", b"onset\tduration\n", "no reader knows"),
        ("a.fif", bytes(300), "not FIF"),
    ],
)
def test_files_that_are_no_recordings(tmp_path: Path, name: str, content: bytes, what: str) -> None:
    (tmp_path / name).write_bytes(content)
    with pytest.raises(UnknownFormat, match=what) as caught:
        open_recording(tmp_path / name)
    assert ".vhdr" in caught.value.todo


def test_a_folder_is_no_recording(tmp_path: Path) -> None:
    with pytest.raises(UnknownFormat, match="folder"):
        open_recording(tmp_path)


def test_packed_file_that_cannot_be_unpacked(tmp_path: Path) -> None:
    path = tmp_path / "a_raw.fif.gz"
    path.write_bytes(b"\x1f\x8b" + bytes(range(100)))
    with pytest.raises(DamagedRecording, match="unpacked"):
        open_recording(path)
