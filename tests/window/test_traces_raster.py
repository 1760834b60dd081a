"""The raster and the picture against brute force, pixel by pixel."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from pulsemend.engine.columns import Grid
from pulsemend.session.view import Shown, View
from pulsemend.window.theme import LIGHT
from pulsemend.window.traces.geometry import Rows, TimeScale
from pulsemend.window.traces.picture import Scene, TracePicture
from pulsemend.window.traces.raster import FULL, Raster, joined
from pulsemend.window.traces.source import TraceSource
from support.trace_cases import N_SAMPLES, RATE_HZ, UV_PER_UNIT, names_of, pyramid_of, recording

WIDTH, HEIGHT = 23, 41
Spans = NDArray[np.float32]


def coverage(top: Spans, bottom: Spans, line: float = 1.0) -> NDArray[np.float64]:
    """How much of every pixel the spans cover, in all: may be more than 1."""
    covered = np.zeros((HEIGHT, WIDTH))
    for trace in range(len(top)):
        for column in range(top.shape[1]):
            a, b = float(top[trace, column]), float(bottom[trace, column])
            widen = max(0.0, line - (b - a)) / 2
            a, b = max(a - widen, 0.0), min(b + widen, float(HEIGHT))
            for row in range(HEIGHT):
                covered[row, column] += max(0.0, min(row + 1.0, b) - max(float(row), a))
    return covered


def random_spans(seed: int, n_traces: int, *, whole: bool = False) -> tuple[Spans, Spans]:
    rng = np.random.default_rng(seed)
    ends = np.sort(rng.uniform(-15, HEIGHT + 15, (2, n_traces, WIDTH)), axis=0)
    if whole:
        ends = np.rint(ends)
    return ends[0].astype(np.float32), ends[1].astype(np.float32)


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 10**6), n_traces=st.integers(1, 6), line=st.sampled_from([1.0, 1.5, 2.0]))
def test_coverage_equals_brute_force(seed: int, n_traces: int, line: float) -> None:
    top, bottom = random_spans(seed, n_traces)
    raster = Raster(WIDTH, HEIGHT)
    raster.draw(top, bottom, 0, line=line)
    wanted = np.minimum(coverage(top, bottom, line) * (FULL + 1), FULL)
    # Each of a span's two ends is rounded down to a 64th of a pixel.
    assert np.abs(raster.pixels - wanted).max() <= 2 * n_traces


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10**6), n_traces=st.integers(1, 5))
def test_whole_pixels_are_exact(seed: int, n_traces: int) -> None:
    top, bottom = random_spans(seed, n_traces, whole=True)
    bottom = np.maximum(bottom, top + 1)
    raster = Raster(WIDTH, HEIGHT)
    raster.draw(top, bottom, 0)
    np.testing.assert_array_equal(raster.pixels, np.where(coverage(top, bottom) > 0, FULL, 0))


def test_a_raster_used_again_holds_nothing_of_before() -> None:
    used, fresh = Raster(WIDTH, HEIGHT), Raster(WIDTH, HEIGHT)
    for seed in range(5):
        used.draw(*random_spans(seed, 3), ink=seed % 4)
    used.clear()
    for raster in (used, fresh):
        raster.draw(*random_spans(9, 3), ink=1)
    np.testing.assert_array_equal(used.pixels, fresh.pixels)


def test_three_hundred_traces_over_each_other_do_not_overflow() -> None:
    top, bottom = np.full((300, WIDTH), 3, np.float32), np.full((300, WIDTH), 9, np.float32)
    raster = Raster(WIDTH, HEIGHT)
    raster.draw(top, bottom, 0)
    np.testing.assert_array_equal(raster.pixels[3:9], FULL)
    np.testing.assert_array_equal(np.delete(raster.pixels, range(3, 9), axis=0), 0)


@pytest.mark.parametrize("order", [(1, 3), (3, 1)])
def test_a_higher_ink_hides_a_lower_one(order: tuple[int, int]) -> None:
    raster = Raster(WIDTH, HEIGHT)
    spans = {1: (5.0, 25.0), 3: (20.0, 30.0)}
    for ink in order:
        top, bottom = (np.full((1, WIDTH), y, np.float32) for y in spans[ink])
        raster.draw(top, bottom, ink)
    inks = raster.pixels[:, 0] // (FULL + 1)
    assert set(inks[5:20]) == {1}
    assert set(inks[20:30]) == {3}
    assert set(raster.pixels[30:, 0] % (FULL + 1)) == {0}


def test_columns_can_start_further_right() -> None:
    raster = Raster(WIDTH, HEIGHT)
    raster.draw(np.full((1, 4), 3, np.float32), np.full((1, 4), 8, np.float32), 0, column=7)
    assert np.flatnonzero(raster.pixels[4]).tolist() == [7, 8, 9, 10]


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_joined_spans_meet_and_contain_their_own(seed: int) -> None:
    top, bottom = random_spans(seed, 4)
    joined_top, joined_bottom = joined(top, bottom)
    assert (joined_top <= top).all()
    assert (joined_bottom >= bottom).all()
    # Neighbours share at least a point.
    assert (joined_top[:, 1:] <= joined_bottom[:, :-1] + 1e-4).all()
    assert (joined_top[:, :-1] <= joined_bottom[:, 1:] + 1e-4).all()
    # Nothing grows beyond the half-way point to a neighbour, so never beyond both neighbours.
    lowest = np.minimum(np.roll(top, 1, 1), np.minimum(top, np.roll(top, -1, 1)))
    assert (joined_top[:, 1:-1] >= lowest[:, 1:-1] - 1e-4).all()


@pytest.mark.parametrize("per_column", [0.21, 0.9, 1.7, 2.3, 9.0, 16.0, 40.0, 130.0])
@pytest.mark.parametrize("ratio", [1.0, 1.5, 2.0])
def test_the_picture_shows_exactly_the_samples(per_column: float, ratio: float, tmp_path: Path) -> None:
    """Every column of the middle row begins and ends at its samples' extremes, to a pixel of the screen."""
    of = recording(tmp_path, 3)
    source = TraceSource(of)
    source.set_pyramid(pyramid_of(of, tmp_path))
    count, first = 300, 41
    rows = Rows(3, 344)
    scale = TimeScale(Grid(first, count, per_column), RATE_HZ, ratio)
    view = View(scale.start_s, count * scale.column_s, 90.0, Shown.RECORDED, names_of(of))
    picture = TracePicture(source)
    drawn = picture.draw(Scene(view, scale, rows, frozenset(), LIGHT))
    pixels = np.frombuffer(drawn.image.constBits(), np.uint32).reshape(drawn.image.height(), -1)
    height = rows.row_height * ratio
    middle = 1.5 * height
    # Rows are far apart, so that what lies within the row's own height is its own trace.
    band = pixels[int(height) : int(2 * height)] >> 24 > 127
    samples = of.samples[:, 1] * UV_PER_UNIT - picture.centre_uv("E2")
    spans = np.array([extremes_by_hand(samples, first + column, per_column) for column in range(count)])
    tops, bottoms = (middle - spans[:, ::-1].T * height / view.row_uv).tolist()
    for column in range(1, count - 1):
        found = np.flatnonzero(band[:, column]) + int(height)
        top, bottom = tops[column], bottoms[column]
        if per_column >= 2:
            # Neighbours that do not touch meet half way.
            for near in (column - 1, column + 1):
                top = min(top, (tops[column] + bottoms[near]) / 2)
                bottom = max(bottom, (bottoms[column] + tops[near]) / 2)
        widen = max(0.0, max(1.0, ratio) - (bottom - top)) / 2
        assert abs(found[0] - (top - widen)) <= 0.6
        assert abs(found[-1] + 1 - (bottom + widen)) <= 0.6
        assert found.size == found[-1] - found[0] + 1


def extremes_by_hand(samples: NDArray[np.float64], column: int, per_column: float) -> tuple[float, float]:
    """Extremes of the samples in a column, of the lines where a column holds fewer than two."""
    if per_column < 2:
        at = np.linspace(column * per_column, (column + 1) * per_column, 400)
        values = np.interp(at, np.arange(len(samples)), samples)
        return float(values.min()), float(values.max())
    edges = Grid(column, 1, per_column).edges(N_SAMPLES)
    inside = samples[edges[0] : edges[1]]
    return float(inside.min()), float(inside.max())


@pytest.mark.parametrize("per_column", [0.4, 1.7, 6.1, 16.0, 57.0])
@pytest.mark.parametrize("shown", [Shown.RECORDED, Shown.BOTH])
def test_a_picture_moved_along_equals_one_drawn_anew(per_column: float, shown: Shown, tmp_path: Path) -> None:
    of = recording(tmp_path, 4)
    source = TraceSource(of)
    source.set_pyramid(pyramid_of(of, tmp_path))
    rng = np.random.default_rng(5)
    moved, last = TracePicture(source), int(N_SAMPLES / per_column)
    first, count = 40, 211
    for step in range(40):
        first = int(np.clip(first + rng.integers(-130, 131), -5, last - count + 9)) if step else 40
        scale = TimeScale(Grid(first, count, per_column), RATE_HZ)
        view = View(scale.start_s, count * scale.column_s, 90.0, shown, names_of(of), frozenset({"E2"}))
        scene = Scene(view, scale, Rows(4, 164), frozenset({"E4"}), LIGHT)
        image = moved.draw(scene).image
        anew = TracePicture(source)
        anew._centres[:] = moved._centres
        pictures = [
            np.array(one.constBits(), np.uint8).reshape(120, count, 4).astype(int)
            for one in (image, anew.draw(scene).image)
        ]
        # Edges between samples are interpolated from other origins: a 64th of a pixel may be rounded away.
        bound = 5 if per_column < 2 else 0
        assert np.abs(pictures[0] - pictures[1]).max() <= bound, (step, first)


def test_pixels_are_used_again_only_for_moves(tmp_path: Path) -> None:
    of = recording(tmp_path, 4)
    source, scale = TraceSource(of), TimeScale(Grid(100, 200, 5.0), RATE_HZ)
    view = View(0.5, 1.0, 90.0, Shown.RECORDED, names_of(of))
    scene = Scene(view, scale, Rows(4, 164), frozenset(), LIGHT)
    picture = TracePicture(source)
    picture.draw(scene)

    def samples_read(changed: Scene) -> int:
        before = len(of.reads)
        picture.draw(changed)
        return sum(stop - start for start, stop in of.reads[before:])

    assert samples_read(replace(scene, scale=replace(scale, grid=Grid(110, 200, 5.0)))) == 12 * 5
    picture.draw(scene)
    near = replace(scene, scale=replace(scale, grid=Grid(101, 200, 5.0)))
    for other in (
        replace(scene, scale=replace(scale, grid=Grid(101, 200, 5.5))),
        replace(scene, scale=replace(scale, grid=Grid(101, 201, 5.0))),
        replace(scene, scale=replace(scale, grid=Grid(205, 200, 5.0))),
        replace(near, bad=frozenset({"E1"})),
        replace(near, rows=Rows(4, 168)),
        replace(near, view=replace(view, row_uv=91.0)),
        replace(near, view=replace(view, rows=("E1", "E3"))),
    ):
        assert samples_read(other) > 900
        picture.draw(scene)
    source.set_revision(1)
    assert samples_read(near) > 900
