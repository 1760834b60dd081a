"""Frozen output of a tiny fixed recording: whoever changes output samples must raise `DATA_VERSION`.

When a test here fails, output samples or the identity of a set are no longer what they were. If that was not
meant, it is a fault. If it was: raise `DATA_VERSION` in `pulsemend/__init__.py` by one, write the file again
with ``PYTHONPATH=tests python tests/mending/test_frozen.py`` (in the repository's folder and the environment
of the tests), put the hash it prints into `PASS_THROUGH` below, and say in the commit what changed and why.

Pass-through output is copied without any arithmetic but one product, so its content hash is the same on every
machine and is frozen as it is. Filtered and filled samples are not: matrix products and Fourier transforms
add in an order that depends on the processor, so a hash, even of rounded values, would fail elsewhere by
chance. They are kept as values and compared within 1e-3 uV, the engine's own bound for single precision.
"""

from __future__ import annotations

import tempfile
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend import DATA_VERSION
from support.small_lantern import SetOnDisk, changed, run_mend
from support.written_recordings import triplet_by_hand

FROZEN = Path(__file__).with_name("frozen.npz")
PASS_THROUGH = "b1d3696faa838092a2419820fb845544e752983c650327f00a4712ab1a0edc2e"
FILLS = ("line", "cubic", "monotone", "autoregressive", "covariance", "leave")
WITHIN_V = 1e-9
CUES, PULSES = (1251, 2501), (1401, 2651)
NAMES = ("E1", "E2", "E3", "E4")
"""No electrode's names: positions are computed, and are part of a set's identity."""

PLAN = """\
pulsemend = 1
[about]
line_hz = 50
[markers.cue]
role = "cue"
labels = { item = "left" }
[markers.pulse]
role = "pulse"
[[trial]]
slot = "cue"
role = "cue"
[[trial]]
slot = "pulse"
role = "pulse"
after_s = [0.1, 1.0]
[pulses]
window_ms = [-4.0, 14.0]
fill = "line"
[[pulses.also]]
window_ms = [100.0, 106.0]
[filter]
highpass_hz = 2.0
lowpass_hz = 40.0
rate_hz = 125.0
[epochs]
length_s = 0.64
[[epochs.rule]]
name = "whole"
anchor = "cue"
start_s = 0.0
pulse = "accept filled"
[export]
formats = ["hdf5"]
"""

UNTOUCHED = changed(
    PLAN,
    ("line_hz = 50", "line_hz = 0"),
    (
        'window_ms = [-4.0, 14.0]\nfill = "line"\n[[pulses.also]]\nwindow_ms = [100.0, 106.0]',
        'times = "none"',
    ),
    ("highpass_hz = 2.0\nlowpass_hz = 40.0\nrate_hz = 125.0", "highpass_hz = 0\nlowpass_hz = 0\nrate_hz = 0"),
    ("[epochs]", '[channels]\nreference = "as recorded"\nfind_bad = false\nrebuild_bad = false\n[epochs]'),
    ('formats = ["hdf5"]', 'formats = ["hdf5"]\nprecision = "double"'),
)


def stored() -> NDArray[np.int16]:
    """Four channels, 8 s at 500 Hz, from a formula of whole numbers, shape (4, 4000); pulses of 2 mV.

    A linear congruential generator (constants of ISO C's example) drives a walk that forgets: like an EEG,
    it is mostly slow. No library of random numbers is used, because their streams may change.
    """
    state, walks = 20, [0] * len(NAMES)
    rows: list[list[int]] = []
    for _ in range(4000):
        for channel in range(len(NAMES)):
            state = (1103515245 * state + 12345) % 2**31
            walks[channel] += (state >> 16) % 201 - 100 - walks[channel] // 50
        rows.append([walk + 3000 * (channel - 1) for channel, walk in enumerate(walks)])
    samples = np.array(rows).T
    for pulse in PULSES:
        for after, height in enumerate((12000, -20000, 9000, 4000, 1500)):
            samples[:, pulse + 2 + after] += height * np.array([1, -1, 1, -1]) // np.array([1, 2, 3, 4])
    return samples.astype(np.int16)


def write_recording(folder: Path) -> Path:
    events = [(cue, "Stimulus", "cue") for cue in CUES] + [(pulse, "Stimulus", "pulse") for pulse in PULSES]
    return triplet_by_hand(folder, stored(), "INT_16", names=NAMES, events=sorted(events))


@pytest.fixture(scope="module")
def recording(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_recording(tmp_path_factory.mktemp("frozen"))


def data_of(recording: Path, fill: str, folder: Path) -> NDArray[np.float32]:
    """Samples of the set, shape (2, 4, 80)."""
    result = run_mend(recording, changed(PLAN, ('fill = "line"', f'fill = "{fill}"')), folder)
    return SetOnDisk(result.folder).hdf5("data")


def pass_through_hash(recording: Path, folder: Path) -> str:
    return run_mend(recording, UNTOUCHED, folder).content_sha256


def test_recording_is_the_frozen_one() -> None:
    """That the formula still gives its numbers: sums that anybody can check."""
    samples = stored().astype(np.int64)
    assert (samples.sum(), np.abs(samples).max()) == (24588262, 23687)


def test_frozen_values_belong_to_this_data_version() -> None:
    with np.load(FROZEN) as frozen:
        assert int(frozen["data_version"]) == DATA_VERSION
        assert set(frozen.files) == {"data_version", *FILLS}


@pytest.mark.parametrize("fill", FILLS)
def test_output_samples_are_what_they_were(fill: str, recording: Path, tmp_path: Path) -> None:
    with np.load(FROZEN) as frozen:
        wanted = frozen[fill]
    found = data_of(recording, fill, tmp_path)
    assert found.shape == wanted.shape == (2, 4, 80)
    np.testing.assert_array_equal(np.isnan(found), np.isnan(wanted))
    np.testing.assert_allclose(found, wanted, rtol=0, atol=WITHIN_V, equal_nan=True)


def test_fills_can_be_told_apart() -> None:
    """Else the frozen values would not guard them: they differ by far more than the bound."""
    with np.load(FROZEN) as frozen:
        several = [np.nan_to_num(frozen[fill]) for fill in FILLS]
    for place, one in enumerate(several):
        for other in several[:place]:
            assert np.abs(one - other).max() > 100 * WITHIN_V


def test_identity_of_untouched_samples_is_what_it_was(recording: Path, tmp_path: Path) -> None:
    assert pass_through_hash(recording, tmp_path) == PASS_THROUGH


def freeze() -> str:
    """Write the values of today; return the hash of untouched samples."""
    with tempfile.TemporaryDirectory() as scratch:
        folder = Path(scratch)
        path = write_recording(folder)
        values = {fill: data_of(path, fill, folder / fill) for fill in FILLS}
        np.savez_compressed(FROZEN, data_version=np.array(DATA_VERSION), **values)  # type: ignore[arg-type]
        return pass_through_hash(path, folder / "untouched")


if __name__ == "__main__":
    print(freeze())
