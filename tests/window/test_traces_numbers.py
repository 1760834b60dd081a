"""Numbers, places, moves and texts of the traces: everything without a widget."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import replace
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from pulsemend.engine.columns import Grid
from pulsemend.engine.pyramid import patch
from pulsemend.progress import finish
from pulsemend.session.view import Shown, View
from pulsemend.window.traces.clock import clock, duration, microvolts, nice, number, ticks
from pulsemend.window.traces.geometry import AXIS, HEADER, LEAST_ROW, Rows, TimeScale
from pulsemend.window.traces.labels import LEAST_ROOM, place, thinned
from pulsemend.window.traces.model import Bands, Events
from pulsemend.window.traces.navigation import Extent, louder
from pulsemend.window.traces.source import Columns, Detail, RepairedStretch, TraceSource
from support.array_recording import ArrayRecording
from support.trace_cases import DURATION_S, N_SAMPLES, RATE_HZ, pyramid_of, recording, signal

ALL = np.arange(4)


@pytest.fixture
def of(tmp_path: Path) -> ArrayRecording:
    return recording(tmp_path, 4)


def inside(columns: Columns, grid: Grid, samples: NDArray[np.generic]) -> None:
    """Every column holds exactly its samples' extremes."""
    edges = grid.edges(len(samples))
    assert columns.lowest.shape == (samples.shape[1], edges.size - 1)
    for column, (a, b) in enumerate(pairwise(edges)):
        np.testing.assert_array_equal(columns.lowest[:, column], samples[a:b].min(axis=0))
        np.testing.assert_array_equal(columns.highest[:, column], samples[a:b].max(axis=0))


# Source


@pytest.mark.parametrize("per_column", [2.0, 3.7, 15.9, 16.0, 33.0, 300.0])
@pytest.mark.parametrize("first", [-5, 0, 77])
def test_columns_hold_their_samples(
    of: ArrayRecording, tmp_path: Path, per_column: float, first: int
) -> None:
    source = TraceSource(of)
    source.set_pyramid(pyramid_of(of, tmp_path))
    grid = Grid(first, 200, per_column)
    columns = source.columns(Shown.RECORDED, grid, ALL)
    assert columns.detail is Detail.EXACT
    assert columns.first == max(0, first)
    inside(columns, grid, of.samples)


@pytest.mark.parametrize("per_column", [0.05, 0.5, 1.0, 1.3, 1.99])
def test_lines_run_through_the_samples_without_a_break(of: ArrayRecording, per_column: float) -> None:
    grid = Grid(40, 100, per_column)
    columns = TraceSource(of).columns(Shown.RECORDED, grid, ALL)
    assert columns.lines
    for column in range(100):
        at = np.linspace((40 + column) * per_column, (41 + column) * per_column, 501)
        nodes = np.arange(np.ceil(at[0]), np.floor(at[-1]) + 1)
        at = np.sort(np.concatenate([at, nodes]))
        for channel in ALL:
            values = np.interp(at, np.arange(N_SAMPLES), of.samples[:, channel])
            assert columns.lowest[channel, column] == pytest.approx(values.min(), abs=0.05)
            assert columns.highest[channel, column] == pytest.approx(values.max(), abs=0.05)
    # They share the value at the edge, but for rounding.
    assert (columns.lowest[:, 1:] <= columns.highest[:, :-1] + 0.05).all()
    assert (columns.highest[:, 1:] >= columns.lowest[:, :-1] - 0.05).all()


def test_lines_end_at_the_last_sample(of: ArrayRecording) -> None:
    grid = Grid(int(N_SAMPLES / 0.5) - 20, 40, 0.5)
    columns = TraceSource(of).columns(Shown.RECORDED, grid, ALL)
    assert columns.first == grid.first
    assert columns.lowest.shape[1] == int((N_SAMPLES - 1) / 0.5) - grid.first


def test_rows_come_in_the_order_asked_for(of: ArrayRecording, tmp_path: Path) -> None:
    source = TraceSource(of)
    rows = np.array([2, 0])
    for pyramid in (None, pyramid_of(of, tmp_path)):
        if pyramid is not None:
            source.set_pyramid(pyramid)
        for per_column in (0.5, 5.0, 60.0):
            some = source.columns(Shown.RECORDED, Grid(3, 50, per_column), rows)
            every = source.columns(Shown.RECORDED, Grid(3, 50, per_column), ALL)
            np.testing.assert_array_equal(some.lowest, every.lowest[rows])


def test_without_a_pyramid_a_long_view_is_coarse_at_once_and_says_so(tmp_path: Path) -> None:
    long = ArrayRecording(np.repeat(signal(8), 8, axis=0), tmp_path / "long", RATE_HZ)
    source = TraceSource(long)
    grid = Grid(0, 500, 8 * N_SAMPLES / 500)
    columns = source.columns(Shown.RECORDED, grid, np.arange(8))
    assert columns.detail is Detail.COARSE
    assert sum(b - a for a, b in long.reads) < 0.03 * len(long.samples)
    for _ in range(100):
        if columns.complete:
            break
        columns = source.columns(Shown.RECORDED, grid, np.arange(8))
    assert columns.complete
    assert columns.lowest.shape == (8, 500)
    # What is shown was recorded near by: within the extremes of its neighbourhood.
    for column in range(5, 495, 35):
        a, b = int((column - 5) * grid.per_column), int((column + 6) * grid.per_column)
        assert (columns.lowest[:, column] >= long.samples[a:b].min(axis=0)).all()
        assert (columns.highest[:, column] <= long.samples[a:b].max(axis=0)).all()
    n_reads = len(long.reads)
    source.columns(Shown.RECORDED, grid, np.arange(8))
    assert len(long.reads) == n_reads


def test_the_repaired_signal_is_asked_for_and_shown_when_it_comes(of: ArrayRecording) -> None:
    asked: list[tuple[int, int]] = []
    source = TraceSource(of, lambda start, stop: asked.append((start, stop)))
    grid = Grid(1000, 200, 4.0)
    columns = source.columns(Shown.REPAIRED, grid, ALL)
    assert columns.detail is Detail.NOT_REPAIRED
    inside(columns, grid, of.samples)
    assert asked == [(3200, 5600)]
    source.columns(Shown.REPAIRED, replace(grid, first=1010), ALL)
    assert len(asked) == 1, "what is on its way is not asked for again"
    used = np.array([0, 2])
    repaired = of.samples[3200:5600, used].astype(np.float32) + 5000
    assert source.set_repaired(RepairedStretch(3200, repaired, used, 0))
    columns = source.columns(Shown.REPAIRED, grid, ALL)
    assert columns.detail is Detail.EXACT
    inside(columns, grid, of.samples + np.array([5000, 0, 5000, 0]))
    assert source.values_uv(Shown.REPAIRED, 4321)[2] == pytest.approx((of.samples[4321, 2] + 5000) * 0.1)
    assert source.values_uv(Shown.RECORDED, 4321)[2] == pytest.approx(of.samples[4321, 2] * 0.1)
    source.columns(Shown.REPAIRED, replace(grid, first=4000), ALL)
    assert len(asked) == 2


def test_a_repair_nobody_could_make_yet_is_asked_for_again(of: ArrayRecording) -> None:
    asked: list[tuple[int, int]] = []
    source = TraceSource(of, lambda start, stop: asked.append((start, stop)))
    for _ in range(2):
        source.columns(Shown.REPAIRED, Grid(1000, 200, 4.0), ALL)
    source.set_revision(0)
    source.columns(Shown.REPAIRED, Grid(1000, 200, 4.0), ALL)
    assert asked == [(3200, 5600)] * 2


def test_stale_repairs_are_thrown_away_and_old_ones_marked(of: ArrayRecording) -> None:
    asked: list[tuple[int, int]] = []
    source = TraceSource(of, lambda start, stop: asked.append((start, stop)))
    grid = Grid(1000, 200, 4.0)
    samples = of.samples[3200:5600].astype(np.float32)
    assert source.set_repaired(RepairedStretch(3200, samples, ALL, 0))
    source.set_revision(1)
    assert source.columns(Shown.REPAIRED, grid, ALL).detail is Detail.OLD_REPAIR
    assert len(asked) == 1
    assert not source.set_repaired(RepairedStretch(3200, samples, ALL, 0))
    assert source.set_repaired(RepairedStretch(3200, samples, ALL, 1))
    assert source.columns(Shown.REPAIRED, grid, ALL).detail is Detail.EXACT


def test_wide_views_of_the_repaired_signal_come_from_the_patched_pyramid(
    of: ArrayRecording, tmp_path: Path
) -> None:
    source = TraceSource(of, lambda start, stop: None)
    pyramid = pyramid_of(of, tmp_path)
    source.set_pyramid(pyramid)
    grid = Grid(0, 400, 100.0)
    assert source.columns(Shown.REPAIRED, grid, ALL).detail is Detail.NOT_REPAIRED
    changed = of.samples.astype(np.float32)
    changed[5000:5020] = 9999
    part = finish(patch(pyramid, [(5000, 5020)], lambda a, b: changed[a:b]))
    assert source.set_repaired_overview(part, 0)
    columns = source.columns(Shown.REPAIRED, grid, ALL)
    assert columns.detail is Detail.EXACT
    inside(columns, grid, changed)
    inside(source.columns(Shown.RECORDED, grid, ALL), grid, of.samples)
    source.set_revision(1)
    assert source.columns(Shown.REPAIRED, grid, ALL).detail is Detail.OLD_REPAIR
    assert not source.set_repaired_overview(part, 0)


# Labels


@settings(max_examples=300, deadline=None)
@given(
    xs=st.lists(st.floats(-50, 900), max_size=40).map(sorted),
    widths=st.lists(st.floats(0, 200), min_size=40, max_size=40),
    half_shape=st.floats(1, 12),
)
def test_labels_never_collide(xs: list[float], widths: list[float], half_shape: float) -> None:
    right = 800.0
    widths = widths[: len(xs)]
    placed = place(xs, widths, half_shape, right)
    boxes = [(one.x, one.x + one.width) for one in placed]
    assert all(a[1] <= b[0] + 1e-6 for a, b in pairwise(boxes))
    for one, (left, end) in zip(placed, boxes, strict=True):
        assert left >= 0
        assert end <= right + 1e-6
        assert one.width <= widths[one.index] + 1e-9
        assert one.width >= min(LEAST_ROOM, widths[one.index]) - 1e-6
        for x in xs:
            assert end <= x - half_shape + 1e-6 or left >= x + half_shape - 1e-6


def test_a_label_with_room_is_written_in_full_and_one_without_left_out() -> None:
    placed = place([10.0, 60.0, 65.0, 200.0], [30.0, 30.0, 300.0, 0.0], 5.0, 400.0)
    assert [(one.index, one.width) for one in placed] == [(0, 30.0), (2, 125.0)]


@given(n_rows=st.integers(1, 300), row_height=st.floats(1, 40), text=st.floats(8, 20))
def test_thinned_names_do_not_touch(n_rows: int, row_height: float, text: float) -> None:
    step = thinned(n_rows, row_height, text)
    assert step * row_height >= text or step == n_rows
    assert step == 1 or (step - 1) * row_height < text


# Places


@given(
    start_s=st.floats(0, 90), width_s=st.floats(0.02, 10), width=st.integers(50, 3000),
    ratio=st.sampled_from([1.0, 1.5, 2.0]), x=st.floats(0, 50),
)  # fmt: skip
def test_time_and_place_are_each_others_inverse(
    start_s: float, width_s: float, width: int, ratio: float, x: float
) -> None:
    scale = TimeScale.of(View(start_s, width_s), width, RATE_HZ, ratio)
    assert scale.x_of(scale.time_at(x)) == pytest.approx(x, abs=1e-6 * width)
    assert scale.start_s == pytest.approx(start_s, abs=0.51 * scale.column_s)
    assert scale.stop_s - scale.start_s == pytest.approx(width_s)


@given(shift=st.integers(-400, 400), start=st.floats(0, 50))
def test_panning_by_pixels_keeps_the_columns(shift: int, start: float) -> None:
    scale = TimeScale.of(View(start, 10.0), 777, RATE_HZ, 1.5)
    moved = TimeScale.of(View(start + shift * scale.column_s, 10.0), 777, RATE_HZ, 1.5)
    assert moved.grid.per_column == scale.grid.per_column
    assert abs(moved.grid.first - scale.grid.first - shift) <= 1


@given(n_rows=st.integers(0, 300), height=st.integers(60, 1200), share=st.floats(0, 1))
def test_rows_fill_the_area_or_scroll(n_rows: int, height: int, share: float) -> None:
    rows = Rows(n_rows, height)
    assert rows.row_height >= LEAST_ROW
    scrolled = Rows(n_rows, height, int(share * rows.scroll_range))
    if not rows.scroll_range:
        assert n_rows * rows.row_height <= rows.area + 1 or n_rows == 0
    for row in scrolled.visible:
        middle = scrolled.middle(row)
        assert HEADER - rows.row_height <= middle <= height - AXIS + rows.row_height
        if HEADER <= middle < height - AXIS:
            assert scrolled.row_at(middle) == row
    if n_rows:
        last = replace(scrolled, scroll=scrolled.scrolled_to(n_rows - 1))
        assert last.middle(n_rows - 1) <= height - AXIS
        assert last.scroll <= last.scroll_range


# Moves

EXTENT = Extent(DURATION_S)
VIEW = View(40.0, 10.0)


@settings(max_examples=200)
@given(
    start=st.floats(-50, 200), width=st.floats(1e-6, 500), by=st.floats(-300, 300),
    factor=st.floats(0.01, 100), at=st.floats(0, 100),
)  # fmt: skip
def test_every_move_stays_within_the_recording(
    start: float, width: float, by: float, factor: float, at: float
) -> None:
    view = EXTENT.clamped(View(start, width))
    for moved in (
        view, EXTENT.moved(view, by), EXTENT.zoomed(view, factor, at), EXTENT.centred(view, at),
        EXTENT.at_start(view), EXTENT.at_end(view),
    ):  # fmt: skip
        assert moved.start_s >= 0
        assert moved.start_s + moved.width_s <= DURATION_S * (1 + 1e-12)
        assert moved.width_s >= 0.02
    assert EXTENT.at_end(view).start_s == pytest.approx(DURATION_S - view.width_s)


def test_zooming_keeps_the_time_under_the_cursor() -> None:
    zoomed = EXTENT.zoomed(VIEW, 2.0, 43.0)
    assert zoomed.width_s == 5.0
    assert (43.0 - zoomed.start_s) / zoomed.width_s == pytest.approx((43.0 - 40.0) / 10.0)


def test_traces_grow_in_round_steps_and_back() -> None:
    taller = [louder(VIEW, steps).row_uv for steps in range(4)]
    assert taller == [60.0, 50.0, 20.0, 10.0]
    assert [louder(View(row_uv=10.0), -steps).row_uv for steps in range(5)] == [
        10.0,
        20.0,
        50.0,
        100.0,
        200.0,
    ]
    assert louder(View(row_uv=60.0), -1).row_uv == 100.0
    assert louder(VIEW, 60).row_uv == pytest.approx(0.1)
    assert louder(VIEW, -60).row_uv == pytest.approx(100_000)


# Texts


@pytest.mark.parametrize(
    ("time_s", "decimals", "text"),
    [
        (0.0, 0, "0:00"), (59.96, 0, "1:00"), (761.302, 3, "12:41.302"), (3599.9996, 3, "1:00:00.000"),
        (7384.5, 1, "2:03:04.5"), (-0.01, 1, "0:00.0"), (-61.0, 0, "\N{MINUS SIGN}1:01"),
    ],
)  # fmt: skip
def test_times_as_text(time_s: float, decimals: int, text: str) -> None:
    assert clock(time_s, decimals) == text


def test_lengths_and_values_as_text() -> None:
    assert [duration(x) for x in (0.014, 0.5, 2.0, 33.64, 200.0)] == [
        "14 ms",
        "500 ms",
        "2 s",
        "33.6 s",
        "3:20",
    ]
    assert microvolts(-14.24) == "\N{MINUS SIGN}14.2 µV"
    assert [number(x) for x in (0.0, 0.25, 1234.5, 20.0)] == ["0", "0.25", "1234", "20"]
    assert [nice(x) for x in (0.09, 1.0, 4.9, 5.0, 99.0)] == pytest.approx([0.05, 1.0, 2.0, 5.0, 50.0])


@settings(max_examples=200)
@given(start=st.floats(0, 7200), width=st.floats(0.01, 7200), most=st.integers(1, 20))
def test_ticks_are_round_few_and_told_apart(start: float, width: float, most: int) -> None:
    times, decimals = ticks(start, start + width, most)
    assert len(times) <= most + 1
    assert all(start - 1e-6 <= time_s <= start + width + 1e-6 for time_s in times)
    texts = [clock(time_s, decimals) for time_s in times]
    assert len(set(texts)) == len(texts)
    assert all(abs(float(f"{time_s:.{decimals}f}") - time_s) < 1e-6 for time_s in times)


# Values


def test_events_and_bands_in_view() -> None:
    events = Events(np.array([1.0, 2.0, 2.0, 5.0]), ("cue",) * 4, ("",) * 4, (1, 2, 3, 4))  # type: ignore[arg-type]
    assert list(events.within(2.0, 5.0)) == [1, 2, 3]
    assert list(events.within(2.1, 4.9)) == []
    bands = Bands(np.array([0.0, 1.0, 6.0]), np.array([9.0, 2.0, 7.0]))
    assert bands.within(3.0, 5.0).tolist() == [0]
    assert bands.within(1.5, 6.5).tolist() == [0, 1, 2]


def test_events_and_bands_out_of_order_are_refused() -> None:
    with pytest.raises(ValueError, match="order of time"):
        Events(np.array([2.0, 1.0]), ("cue",) * 2, ("",) * 2, (1, 2))  # type: ignore[arg-type]
    with pytest.raises(ValueError, match="label"):
        Events(np.array([1.0]), (), (), ())
    with pytest.raises(ValueError, match="order of their starts"):
        Bands(np.array([2.0, 1.0]), np.array([3.0, 2.0]))


def test_nothing_slow_is_imported_before_the_first_frame() -> None:
    script = (
        "import sys, pulsemend.window.traces.widget, pulsemend.window.ribbon\n"
        "print([name for name in ('scipy.signal', 'mne', 'pyqtgraph') if name in sys.modules])"
    )
    shown = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert shown.stdout.strip() == "[]"
