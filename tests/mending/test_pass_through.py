"""Pass-through epochs equal the reader library's, through the whole of `mend` and back from both containers.

Nothing is done to the samples (filters, line, pulses, bad channels, limits off; rate and reference as
recorded), so the outside reference is `mne.Epochs` on the same file, its tmax one sample before the end:
"double" equal to the last bit, "single" as float32.
"""

from __future__ import annotations

import json
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import edfio
import mne
import numpy as np
import pybv
import pytest
import spharapy.datasets
from numpy.typing import NDArray

from pulsemend.readers.opening import open_recording
from support.small_lantern import SetOnDisk, run_mend
from support.written_recordings import FORMATS

# It has no wheels for Python 3.13 and later yet.
pyedflib = pytest.importorskip("pyedflib")
STRANGERS = sorted((Path(pyedflib.__file__).parent / "tests" / "data").glob("*.?df"))


@dataclass(frozen=True)
class Ask:
    """Which epochs: `pieces` of `n_times` samples each, from `first` samples after an anchor on."""

    rate_hz: float
    first: int
    n_times: int
    pieces: int = 1


def plan_text(ask: Ask, precision: str, codes: Sequence[str], role: str = "cue") -> str:
    """Make a plan that changes no sample."""
    named = "".join(f'[markers.{json.dumps(code)}]\nrole = "{role}"\n' for code in codes)
    return f"""\
pulsemend = 1
{named}
[[trial]]
slot = "event"
role = "{role}"
[pulses]
times = "none"
[filter]
highpass_hz = 0
lowpass_hz = 0
rate_hz = 0
[channels]
reference = "as recorded"
find_bad = false
rebuild_bad = false
[epochs]
length_s = {ask.n_times / ask.rate_hz!r}
[[epochs.rule]]
name = "piece"
anchor = "event"
start_s = {ask.first / ask.rate_hz!r}
count = {ask.pieces}
[export]
precision = "{precision}"
"""


def reference_epochs(raw: Any, samples: Sequence[int], ask: Ask) -> NDArray[np.float64]:
    """The reader library's epochs, in order of time, shape (n_epochs, n_channels, n_times)."""
    starts = sorted(sample + piece * ask.n_times for sample in samples for piece in range(ask.pieces))
    epochs = mne.Epochs(
        raw,
        np.array([[raw.first_samp + start, 0, 1] for start in starts]),
        tmin=ask.first / ask.rate_hz,
        tmax=(ask.first + ask.n_times - 1) / ask.rate_hz,
        baseline=None,
        proj=False,
        reject_by_annotation=False,
        preload=True,
        verbose="error",
    )
    return np.asarray(epochs.get_data(verbose="error"))


def assert_set_equals(folder: Path, reference: NDArray[np.float64], precision: str) -> None:
    """The set on disk holds the reference, in both containers."""
    written = SetOnDisk(folder)
    wanted: NDArray[Any] = reference if precision == "double" else reference.astype(np.float32)
    data = written.hdf5("data")
    assert data.dtype == wanted.dtype
    assert len(data) > 0
    np.testing.assert_array_equal(data, wanted)
    np.testing.assert_array_equal(written.fif().get_data(verbose="error"), wanted.astype(np.float64))


PRECISIONS = pytest.mark.parametrize("precision", ["double", "single"])


@PRECISIONS
@pytest.mark.parametrize("path", STRANGERS, ids=lambda path: path.name)
def test_strangers_files_equal_mne_epochs(path: Path, precision: str, tmp_path: Path) -> None:
    """Outside references: pyedflib's files, mne's epochs; of channels with several rates the fastest ones.

    Where a file has annotations, they are the plan's codes; where it has none, the marks add the instants.
    """
    recording = open_recording(path)
    recording.close()
    facts = recording.facts
    read = mne.io.read_raw_edf if path.suffix == ".edf" else mne.io.read_raw_bdf
    raw = read(path, include=[channel.name for channel in facts.channels], verbose="error")
    codes = sorted({marker.code for marker in facts.markers})
    ask = Ask(facts.rate_hz, 0, round(facts.rate_hz), pieces=3)
    if codes:
        # By pyedflib, because mne rounds to microseconds: 396.5000064 then is another sample. It reads none
        # in the legacy file.
        with pyedflib.EdfReader(str(path)) as reader:
            onsets_s = reader.readAnnotations()[0].tolist() or raw.annotations.onset.tolist()
        samples = [math.floor(onset_s * facts.rate_hz + 0.5) for onset_s in onsets_s]
        samples = [sample for sample in samples if sample < facts.n_samples]
        result = run_mend(path, plan_text(ask, precision, codes), tmp_path)
    else:
        samples = [0, 3301, 3 * 3301]
        marks = f"[pulses]\nadded = {samples}\n"
        result = run_mend(path, plan_text(ask, precision, ["coil"], "pulse"), tmp_path, marks)
    assert_set_equals(result.folder, reference_epochs(raw, samples, ask), precision)


SEP = Ask(2048.0, -64, 256)
SEP_ANCHORS = tuple(102 + 369 * k for k in range(5))
"""The stimulus stands 50 ms after the average's first sample."""
SEP_SAMPLES = 2048


def somatosensory() -> tuple[list[str], NDArray[np.float64]]:
    """A real average (256 channels, 369 samples at 2048 Hz, in microvolts), again and again for 1 s."""
    study = spharapy.datasets.load_eeg_256_channel_study()
    volts = np.asarray(study["eegdata"]) * 1e-6
    return [str(name) for name in study["labellist"]], np.tile(volts, 6)[:, :SEP_SAMPLES]


def _pybv(folder: Path, fmt: str, resolution: float) -> Path:
    names, volts = somatosensory()
    pybv.write_brainvision(
        data=volts,
        sfreq=SEP.rate_hz,
        ch_names=names,
        fname_base="sep",
        folder_out=folder,
        events=[{"onset": at, "type": "Comment", "description": "shock"} for at in SEP_ANCHORS],
        resolution=resolution,
        unit="µV",
        fmt=fmt,
    )
    return folder / "sep.vhdr"


def _edfio(folder: Path, suffix: str) -> Path:
    names, volts = somatosensory()
    kind: Any = edfio.EdfSignal if suffix == ".edf" else edfio.BdfSignal
    whole: Any = edfio.Edf if suffix == ".edf" else edfio.Bdf
    signals = [
        kind(row * 1e6, SEP.rate_hz, label=name, physical_dimension="uV", physical_range=(-8.0, 8.0))
        for name, row in zip(names, volts, strict=True)
    ]
    shocks = [edfio.EdfAnnotation(at / SEP.rate_hz, None, "shock") for at in SEP_ANCHORS]
    whole(signals, annotations=shocks, data_record_duration=0.25).write(folder / f"sep{suffix}")
    return folder / f"sep{suffix}"


def _mne_raw() -> mne.io.RawArray:
    names, volts = somatosensory()
    raw = mne.io.RawArray(volts, mne.create_info(names, SEP.rate_hz, "eeg"), verbose="error")
    onsets = np.array(SEP_ANCHORS) / SEP.rate_hz
    return raw.set_annotations(mne.Annotations(onsets, np.zeros(5), ["shock"] * 5))


def _mne_fif(folder: Path, name: str, fmt: str) -> Path:
    _mne_raw().save(folder / name, fmt=fmt, verbose="error")
    return folder / name


AS_WRITTEN: dict[str, tuple[Callable[[Path], Path], Callable[..., Any]]] = {
    "triplet int16": (lambda folder: _pybv(folder, "binary_int16", 0.0005), mne.io.read_raw_brainvision),
    "triplet float32": (lambda folder: _pybv(folder, "binary_float32", 0.1), mne.io.read_raw_brainvision),
    "EDF+": (lambda folder: _edfio(folder, ".edf"), mne.io.read_raw_edf),
    "BDF+": (lambda folder: _edfio(folder, ".bdf"), mne.io.read_raw_bdf),
    "FIF single": (lambda folder: _mne_fif(folder, "sep_raw.fif", "single"), mne.io.read_raw_fif),
    "FIF double": (lambda folder: _mne_fif(folder, "sep_raw.fif", "double"), mne.io.read_raw_fif),
    "FIF packed": (lambda folder: _mne_fif(folder, "sep_raw.fif.gz", "single"), mne.io.read_raw_fif),
}
"""The real average as a recording: (written by pybv, edfio or mne, read by mne)."""


@PRECISIONS
@pytest.mark.parametrize("name", AS_WRITTEN)
def test_real_average_equals_mne_epochs_in_every_format(name: str, precision: str, tmp_path: Path) -> None:
    """Outside references: spharapy's measured data, the public writers, mne's epochs."""
    write, read = AS_WRITTEN[name]
    path = write(tmp_path)
    result = run_mend(path, plan_text(SEP, precision, ["shock"]), tmp_path)
    reference = reference_epochs(read(path, verbose="error"), SEP_ANCHORS, SEP)
    assert reference.shape == (5, 256, 256)
    # That the writers wrote what they were given: their own rounding, below 0.6 nV in 16 bits.
    truth = np.stack([somatosensory()[1][:, at - 64 : at + 192] for at in SEP_ANCHORS])
    np.testing.assert_allclose(reference, truth, rtol=0, atol=6e-10)
    assert_set_equals(result.folder, reference, precision)


READ_BY_MNE = {
    ".vhdr": mne.io.read_raw_brainvision,
    ".edf": mne.io.read_raw_edf,
    ".bdf": mne.io.read_raw_bdf,
    ".fif": mne.io.read_raw_fif,
    ".gz": mne.io.read_raw_fif,
}


@PRECISIONS
@pytest.mark.parametrize("name", FORMATS)
def test_nearly_all_of_16_bits_equals_mne_epochs(name: str, precision: str, tmp_path: Path) -> None:
    """Numbers of our own over the whole range, in every layout, those the public writers lack by hand.

    Outside reference: mne's epochs.
    """
    events = ((100, "Stimulus", "arrow left"), (731, "Stimulus", "arrow left"), (1399, "Stimulus", "late"))
    written = FORMATS[name](tmp_path, events)
    ask = Ask(500.0, -50, 150)
    result = run_mend(written.path, plan_text(ask, precision, ["arrow left", "late"]), tmp_path)
    raw = READ_BY_MNE[written.path.suffix](written.path, verbose="error")
    reference = reference_epochs(raw, [sample for sample, _, _ in events], ask)
    assert_set_equals(result.folder, reference, precision)
