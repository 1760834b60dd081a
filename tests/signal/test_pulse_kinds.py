"""What mark a pulse left: amplitude, clipping, holds."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.signal.find import usual_steps
from pulsemend.signal.pulse_kinds import (
    AFTER_S,
    BEFORE_S,
    Limits,
    PulseShape,
    clipped_samples,
    describe_pulse,
    held_before,
)
from support.pulse_streams import RAIL, PulseStream, pulse_stream

UNKNOWN = (np.full(31, -np.inf), np.full(31, np.inf))


def shapes(stream: PulseStream, *, with_range: bool = True) -> list[PulseShape]:
    """Describe every pulse of a stream, with the range of its numbers or without it."""
    x = stream.stored
    edges = (np.full(31, -RAIL - 1.0), np.full(31, float(RAIL))) if with_range else UNKNOWN
    limits = Limits(usual_steps([x[: round(stream.rate_hz)]]), *edges)
    before, after = (round(edge_s * stream.rate_hz) for edge_s in (BEFORE_S, AFTER_S))
    return [
        describe_pulse(x[at - before : at + after], before, stream.rate_hz, limits) for at in stream.onsets
    ]


@pytest.mark.parametrize("rate_hz", [1000.0, 5000.0, 25_000.0])
def test_kinds_are_told_apart(rate_hz: float) -> None:
    stream = pulse_stream(rate_hz, 12.0, 21)
    for kind, shape in zip(stream.kinds, shapes(stream), strict=True):
        assert (kind == "held") == (shape.held_s > 0.0)
        assert (kind in ("clipped", "slow")) == (shape.clipped_s > 0.0)
        assert (kind == "slow") == shape.is_slow
        if kind == "held":
            assert shape.held_s == pytest.approx(0.004, abs=2 / rate_hz)
        if kind == "slow":
            assert shape.clipped_s == pytest.approx(0.030, abs=2 / rate_hz)


def test_clipping_is_seen_without_a_known_range() -> None:
    stream = pulse_stream(5000.0, 12.0, 22)
    known = [shape.clipped_s > 0.0 for shape in shapes(stream)]
    assert [shape.clipped_s > 0.0 for shape in shapes(stream, with_range=False)] == known


def test_amplitude_is_the_median_deviation_over_the_channels() -> None:
    x = np.zeros((400, 3))
    x += [100.0, -50.0, 0.0]
    x[150:152] += [900.0, -300.0, 10.0]
    x[152:] += 4.0
    shape = describe_pulse(x, 150, 5000.0, Limits(np.ones(3), *(edge[:3] for edge in UNKNOWN)), 0.1)
    assert shape.amplitude == pytest.approx(30.0)


def test_runs_of_two_at_the_rail_are_clipped() -> None:
    """Facts T-1.8: runs of at least 2 samples at the range that the header gives."""
    x = np.zeros((40, 2))
    x[20:22, 0] = 100.0
    x[20, 1] = 100.0
    limits = Limits(np.ones(2), np.full(2, -100.0), np.full(2, 100.0))
    clipped = clipped_samples(x, 20, limits)
    assert np.argwhere(clipped).tolist() == [[0, 0], [1, 0]]


def test_a_smooth_top_is_not_clipped() -> None:
    t = np.arange(600) / 25_000.0
    x = np.round(2000.0 * np.exp(-0.5 * ((t - 0.012) / 0.003) ** 2))[:, None]
    top = x[:, 0] == x.max()
    assert top.sum() >= 3
    assert not clipped_samples(x, 100, Limits(np.ones(1), np.full(1, -np.inf), np.full(1, np.inf))).any()


def test_flat_by_coarse_resolution_is_not_held() -> None:
    rng = np.random.default_rng(1)
    walk = np.cumsum(rng.standard_normal((1000, 31)) * 0.25, axis=0)
    coarse: NDArray[Any] = np.round(walk[400:])
    assert held_before(coarse, 500, 5000.0) == 0
    coarse[480:500] = coarse[479]
    assert held_before(coarse, 500, 5000.0) == 21
    # The onset may be found up to two samples late.
    coarse[500:] += 500.0
    coarse[501] += 900.0
    assert held_before(coarse, 502, 5000.0) == 23
