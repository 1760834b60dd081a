"""The pyramid against brute force: whatever the width, place, length and kind of numbers."""

from __future__ import annotations

import itertools
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from pulsemend.engine.columns import FIRST_BIN, Grid, extremes
from pulsemend.engine.pyramid import Pyramid, build, patch, pyramid
from pulsemend.engine.store import Store
from pulsemend.errors import UnusableSamples
from pulsemend.progress import finish
from support.array_recording import ArrayRecording

N_SAMPLES = 150_007
N_CHANNELS = 3


def noise(n_samples: int = N_SAMPLES, seed: int = 1) -> NDArray[np.int16]:
    steps = np.random.default_rng(seed).integers(-9, 10, (n_samples, N_CHANNELS))
    return np.cumsum(steps, axis=0).astype(np.int16)


def built(samples: NDArray[np.generic], folder: Path) -> Pyramid:
    path = folder / "pyramid"
    with path.open("wb") as file:
        finish(build(ArrayRecording(samples, folder / "samples"), file))
    return Pyramid(path)


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> tuple[NDArray[np.int16], Pyramid]:
    samples = noise()
    return samples, built(samples, tmp_path_factory.mktemp("pyramid"))


def brute_force(
    samples: NDArray[np.generic], edges: NDArray[np.int64]
) -> tuple[NDArray[np.generic], NDArray[np.generic]]:
    pieces = [samples[a:b] for a, b in itertools.pairwise(edges)]
    return (
        np.array([piece.min(axis=0) for piece in pieces]).T,
        np.array([piece.max(axis=0) for piece in pieces]).T,
    )


@settings(max_examples=150, deadline=None)
@given(
    start=st.floats(-0.2, 1.0),
    per_column=st.floats(FIRST_BIN, N_SAMPLES / 3),
    count=st.integers(1, 700),
)
def test_columns_equal_brute_force(
    whole: tuple[NDArray[np.int16], Pyramid], start: float, per_column: float, count: int
) -> None:
    samples, of = whole
    grid = Grid(int(start * N_SAMPLES / per_column), count, per_column)
    edges, lowest, highest = of.columns(grid)
    assert lowest.shape == highest.shape == (N_CHANNELS, max(0, edges.size - 1))
    if not edges.size:
        return
    low, high = brute_force(samples, edges)
    np.testing.assert_array_equal(lowest, low)
    np.testing.assert_array_equal(highest, high)


@settings(max_examples=150, deadline=None)
@given(first=st.integers(0, 100_000), per_column=st.floats(1.0, 5000.0), count=st.integers(1, 300))
def test_columns_lie_where_they_belong(first: int, per_column: float, count: int) -> None:
    grid = Grid(first, count, per_column)
    edges = grid.edges(10**10)
    wanted = (first + np.arange(count + 1)) * per_column
    assert edges.size == count + 1
    # A sample belongs to its column; from 16 samples per column on a bin, at most half a column off.
    bound = 1.0 if grid.level is None else 0.5 * per_column
    assert np.abs(edges - wanted).max() <= bound + 1e-6


@settings(max_examples=100, deadline=None)
@given(first=st.integers(0, 300), shift=st.integers(0, 200), per_column=st.floats(FIRST_BIN, 250.0))
def test_a_moved_view_shows_the_same_columns(
    whole: tuple[NDArray[np.int16], Pyramid], first: int, shift: int, per_column: float
) -> None:
    _, of = whole
    edges, lowest, _ = of.columns(Grid(first, 400, per_column))
    moved_edges, moved, _ = of.columns(Grid(first + shift, 400, per_column))
    same = np.intersect1d(edges[:-1], moved_edges[:-1])
    # Of two columns with the same first sample all but the recording's last are the same.
    same = same[same < min(edges[-2], moved_edges[-2])]
    n_columns = of.columns(Grid(0, 10_000, per_column))[0].size - 1
    assert same.size == max(0, min(first + 400, n_columns) - (first + shift) - 1)
    np.testing.assert_array_equal(
        lowest[:, np.searchsorted(edges, same)], moved[:, np.searchsorted(moved_edges, same)]
    )


@pytest.mark.parametrize("n_samples", [1, 15, 16, 17, 64, 1023, 1025, 16_384, 16_385, 70_000])
def test_every_length_is_covered_to_its_last_sample(n_samples: int, tmp_path: Path) -> None:
    samples = noise(n_samples)
    of = built(samples, tmp_path)
    assert (of.n_samples, of.n_channels, of.whole) == (n_samples, N_CHANNELS, True)
    for per_column in (16.0, 17.3, 100.0, max(16.0, float(n_samples))):
        edges, lowest, highest = of.columns(Grid(0, int(n_samples / per_column) + 2, per_column))
        low, high = brute_force(samples, edges)
        assert (edges[0], edges[-1]) == (0, n_samples)
        np.testing.assert_array_equal(lowest, low)
        np.testing.assert_array_equal(highest, high)


@pytest.mark.parametrize(
    "change",
    [{"at": 0, "value": 0.5}, {"at": N_SAMPLES - 1, "value": 0.5}, {"at": 99_000, "value": 40_000.0}],
)
def test_numbers_that_do_not_fit_are_kept_as_they_are(change: dict[str, float], tmp_path: Path) -> None:
    samples = noise().astype(np.float32)
    # So high that the fraction is an extreme of its bin wherever it stands.
    samples[int(change["at"]), 1] = np.float32(20_000) + np.float32(change["value"])
    of = built(samples, tmp_path)
    assert not of.whole
    edges, lowest, highest = of.columns(Grid(0, 500, 300.0))
    low, high = brute_force(samples, edges)
    np.testing.assert_array_equal(lowest, low)
    np.testing.assert_array_equal(highest, high)


def test_building_reads_every_sample_once(tmp_path: Path) -> None:
    recording = ArrayRecording(noise(), tmp_path / "samples")
    finish(pyramid(recording, Store(tmp_path / "cache")))
    assert recording.reads[0][0] == 0
    assert recording.reads[-1][1] == N_SAMPLES
    assert all(a[1] == b[0] for a, b in itertools.pairwise(recording.reads))


def test_it_is_built_once_and_again_when_the_file_changed(tmp_path: Path) -> None:
    store = Store(tmp_path / "cache")
    recording = ArrayRecording(noise(), tmp_path / "samples")
    finish(pyramid(recording, store))
    n_reads = len(recording.reads)
    again = finish(pyramid(recording, store))
    assert len(recording.reads) == n_reads
    changed = ArrayRecording(-noise(), tmp_path / "samples")
    of = finish(pyramid(changed, store))
    assert changed.reads
    np.testing.assert_array_equal(
        of.bins(0, 0, 10)[:, 0], -again.bins(0, 0, 10)[:, 1], err_msg="extremes of the negated signal"
    )
    assert len(list((tmp_path / "cache").iterdir())) == 1


def test_a_damaged_entry_is_built_again(tmp_path: Path) -> None:
    store = Store(tmp_path / "cache")
    recording = ArrayRecording(noise(), tmp_path / "samples")
    finish(pyramid(recording, store)).close()
    (entry,) = (tmp_path / "cache").iterdir()
    entry.write_bytes(entry.read_bytes()[:-1])
    of = finish(pyramid(recording, store))
    np.testing.assert_array_equal(of.bins(of.n_levels - 1, 0, 1)[0, 0], noise()[: 16 * 4**4].min(axis=0))


@pytest.mark.parametrize("after", [1, 3])
def test_a_cancelled_build_leaves_nothing(tmp_path: Path, after: int) -> None:
    work = pyramid(ArrayRecording(noise(), tmp_path / "samples"), Store(tmp_path / "cache"))
    done = [next(work).done for _ in range(after)]
    assert done == sorted(done)
    work.close()
    assert list((tmp_path / "cache").iterdir()) == []


def test_an_error_of_the_recording_comes_through_and_leaves_nothing(tmp_path: Path) -> None:
    class Broken(ArrayRecording):
        def read(self, start: int, *arguments: object) -> None:
            if start:
                raise UnusableSamples("channel E1 holds nan")
            super().read(start, *arguments)  # type: ignore[arg-type]

    with pytest.raises(UnusableSamples):
        finish(pyramid(Broken(noise(), tmp_path / "samples"), Store(tmp_path / "cache")))
    assert list((tmp_path / "cache").iterdir()) == []


@settings(max_examples=40, deadline=None)
@given(
    starts=st.lists(st.integers(0, N_SAMPLES - 1), min_size=0, max_size=12),
    length=st.integers(1, 400),
    per_column=st.floats(FIRST_BIN, 5000.0),
)
def test_a_patched_pyramid_is_the_changed_signals(
    whole: tuple[NDArray[np.int16], Pyramid], starts: list[int], length: int, per_column: float
) -> None:
    samples, of = whole
    changed = samples.astype(np.float32)
    spans = [(start, min(start + length, N_SAMPLES)) for start in sorted(starts)]
    for start, stop in spans:
        changed[start:stop] = np.linspace(-3e4, 3e4, stop - start)[:, None] + 0.25
    read = finish(patch(of, spans, lambda a, b: changed[a:b]))
    edges, lowest, highest = of.columns(Grid(0, int(N_SAMPLES / per_column) + 1, per_column), read)
    low, high = brute_force(changed, edges)
    np.testing.assert_array_equal(lowest, low)
    np.testing.assert_array_equal(highest, high)


def test_threads_may_share_a_pyramid(whole: tuple[NDArray[np.int16], Pyramid]) -> None:
    samples, of = whole
    wanted = {start: samples[16 * start : 16 * start + 160].min(axis=0) for start in range(0, 9000, 7)}

    def wrong(offset: int) -> int:
        starts = list(wanted)[offset::3] * 3
        return sum(bool((of.bins(0, s, s + 10)[:, 0].min(axis=0) != wanted[s]).any()) for s in starts)

    with ThreadPoolExecutor(3) as pool:
        assert list(pool.map(wrong, range(3))) == [0, 0, 0]


def test_extremes_of_samples_between_edges() -> None:
    samples = noise(1000)
    edges = np.array([100, 101, 105, 300, 301])
    lowest, highest = extremes(samples[100:301], samples[100:301], edges)
    low, high = brute_force(samples, edges)
    np.testing.assert_array_equal(lowest.T, low)
    np.testing.assert_array_equal(highest.T, high)
