"""Time zero is the anchor's own instant, read back from the set: phases of tones against the exact marker."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pybv
import pytest

from support.small_lantern import SetOnDisk, run_mend

RECORDED_HZ = 5000.0
TONES_HZ = (37.0, 3.0, 90.0)
CUES = tuple(sample for sample in range(6001, 66_000, 3001) if sample % 5)
PLAN = """\
pulsemend = 1
[markers.cue]
role = "cue"
[[trial]]
slot = "cue"
role = "cue"
[pulses]
times = "none"
[filter]
rate_hz = {rate}
lowpass_hz = {lowpass}
[channels]
reference = "as recorded"
[epochs]
length_s = 1.0
[[epochs.rule]]
name = "tone"
anchor = "cue"
start_s = {start}
[export]
precision = "{precision}"
"""


@pytest.fixture(scope="module")
def tones(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Sines of 50 uV that begin with the recording, in float32, and markers that are no multiples of 5."""
    assert {cue % 5 for cue in CUES} == {1, 2, 3, 4}
    folder = tmp_path_factory.mktemp("tones")
    t = np.arange(75_000) / RECORDED_HZ
    pybv.write_brainvision(
        data=np.stack([50e-6 * np.sin(2 * np.pi * hz * t) for hz in TONES_HZ]),
        sfreq=RECORDED_HZ,
        ch_names=["Cz", "Fz", "Pz"],
        fname_base="tones",
        folder_out=folder,
        events=[{"onset": cue, "type": "Comment", "description": "cue"} for cue in CUES],
        resolution=0.1,
        unit="µV",
        fmt="binary_float32",
    )
    return folder / "tones.vhdr"


@pytest.mark.parametrize(
    ("rate", "lowpass", "start", "precision"),
    [
        (1000, 100.0, -0.5, "single"),
        (1000, 100.0, -0.5, "double"),
        (1000, 0.0, 0.25, "single"),
        (512, 100.0, 0.0, "single"),
        (2500, 100.0, 0.1, "single"),
        (0, 100.0, -0.5, "single"),
    ],
)
def test_phase_at_time_zero_is_right_within_10_microseconds(
    rate: int, lowpass: float, start: float, precision: str, tones: Path, tmp_path: Path
) -> None:
    """Bound from the issue, for 37 Hz; and for tones at either end of what the plan passes."""
    plan = PLAN.format(rate=rate, lowpass=lowpass, start=start, precision=precision)
    written = SetOnDisk(run_mend(tones, plan, tmp_path).folder)
    onsets_s = written.hdf5("labels/onset_s")
    np.testing.assert_allclose(onsets_s * RECORDED_HZ, CUES)
    assert written.attributes("times")["zero"] == "anchor"
    data, times_s = written.hdf5("data").astype(np.float64), written.hdf5("times")
    for channel, hz in enumerate(TONES_HZ):
        waves = np.stack([np.sin(2 * np.pi * hz * times_s), np.cos(2 * np.pi * hz * times_s)], axis=1)
        sine, cosine = np.linalg.lstsq(waves, data[:, channel].T, rcond=None)[0]
        off = np.angle((sine + 1j * cosine) * np.exp(-2j * np.pi * hz * onsets_s))
        assert np.hypot(sine, cosine).min() > 30e-6
        assert np.abs(off).max() / (2 * np.pi * hz) < 10e-6, f"{hz} Hz"
