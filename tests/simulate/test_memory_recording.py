"""A recording that holds its samples in an array."""

from __future__ import annotations

import pickle

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.errors import UnusableSamples
from pulsemend.model.recording import Marker, Recording
from pulsemend.model.vocabulary import ChannelType
from pulsemend.simulate.memory import MemoryForm, MemoryRecording

STORED: NDArray[np.int16] = np.arange(20, dtype=np.int16).reshape(10, 2)
FORM = MemoryForm(
    rate_hz=500.0,
    names=("Cz", "VEOG"),
    types={"VEOG": ChannelType.EOG},
    scale_v=1e-7,
    markers=(Marker(3, "dot"),),
    boundaries=(4,),
)


def test_facts() -> None:
    recording: Recording = MemoryRecording(STORED, FORM)
    facts = recording.facts
    assert [(c.name, c.type, c.scale_v) for c in facts.channels] == [
        ("Cz", ChannelType.EEG, 1e-7),
        ("VEOG", ChannelType.EOG, 1e-7),
    ]
    assert (facts.n_samples, facts.rate_hz, facts.segments) == (10, 500.0, ((0, 4), (4, 10)))
    assert facts.markers == (Marker(3, "dot"),)
    assert recording.fingerprint_paths() == ()
    assert MemoryRecording(STORED).facts.channels[1].name == "E2"


@pytest.mark.parametrize("dtype", [np.float32, np.float64])
def test_read(dtype: type[np.float32] | type[np.float64]) -> None:
    recording = pickle.loads(pickle.dumps(MemoryRecording(STORED, FORM)))
    out = np.empty((3, 2), dtype)
    recording.read(2, 5, out)
    np.testing.assert_array_equal(out, STORED[2:5])
    recording.read(2, 5, out, np.array([1.0, 0.5]))
    np.testing.assert_array_equal(out, STORED[2:5] - np.array([1.0, 0.5]))
    recording.close()


def test_offset_is_subtracted_before_float32() -> None:
    out = np.empty((1, 1), np.float32)
    MemoryRecording(np.array([[16777217.25]])).read(0, 1, out, np.array([16777217.0]))
    assert out[0, 0] == 0.25


def test_samples_that_are_not_finite_are_named() -> None:
    data = np.zeros((10, 2))
    data[7, 1] = np.nan
    with pytest.raises(UnusableSamples, match="VEOG is not finite at sample 7"):
        MemoryRecording(data, FORM).read(5, 10, np.empty((5, 2)))


@pytest.mark.parametrize(("start", "stop"), [(-1, 2), (3, 3), (8, 11)])
def test_wrong_requests_are_refused(start: int, stop: int) -> None:
    with pytest.raises(ValueError, match="samples"):
        MemoryRecording(STORED).read(start, stop, np.empty((max(stop - start, 0), 2)))


def test_names_must_be_as_many_as_channels() -> None:
    with pytest.raises(ValueError):
        MemoryRecording(STORED, MemoryForm(names=("Cz",)))
