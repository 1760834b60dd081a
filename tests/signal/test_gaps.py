"""Which samples are replaced and which flanks are good."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pulsemend.signal.gaps import Gap, lay_gaps, merge_spans, shortened, window_to_samples

WINDOW_S = (-0.002, 0.015)


@pytest.mark.parametrize(
    ("rate_hz", "first", "n_samples"),
    # facts T-1.1; at 4800 Hz the covering rule gives -10 to 72.
    [(1000.0, -2, 18), (5000.0, -10, 86), (4800.0, -10, 83)],
)
def test_closed_window_covers_its_samples(rate_hz: float, first: int, n_samples: int) -> None:
    start, stop = window_to_samples(700, WINDOW_S, rate_hz)
    assert (start - 700, stop - start) == (first, n_samples)


@settings(deadline=None)
@given(
    first=st.integers(-500, 500),
    length=st.integers(0, 500),
    rate_hz=st.sampled_from([250.0, 500.0, 1000.0, 2048.0, 4800.0, 5000.0, 19200.0, 25000.0]),
)
def test_window_on_whole_samples_is_exact(first: int, length: int, rate_hz: float) -> None:
    window_s = (first / rate_hz, (first + length) / rate_hz)
    assert window_to_samples(1000, window_s, rate_hz) == (1000 + first, 1000 + first + length + 1)


def test_window_that_ends_before_it_starts_is_refused() -> None:
    with pytest.raises(ValueError, match="window_s"):
        window_to_samples(0, (0.01, 0.0), 1000.0)


def test_overlapping_and_touching_spans_merge() -> None:
    assert merge_spans([(30, 40), (0, 5), (5, 8), (35, 50), (9, 9)]) == [(0, 8), (30, 50)]


def test_flanks_end_at_neighbours_and_at_the_segment() -> None:
    gaps = lay_gaps([(105, 110), (130, 140)], flank=25, lo=100, hi=150)
    assert gaps == [Gap(105, 110, left=5, right=20), Gap(130, 140, left=20, right=10)]
    assert all(shortened(gap, 25) for gap in gaps)
    assert not shortened(lay_gaps([(500, 510)], 25, 0, 1000)[0], 25)


def test_spans_are_clipped_to_the_segment() -> None:
    assert lay_gaps([(90, 110), (145, 170), (200, 210)], flank=5, lo=100, hi=150) == [
        Gap(100, 110, left=0, right=5),
        Gap(145, 150, left=5, right=0),
    ]


@pytest.mark.parametrize(
    ("barrier", "left", "right"),
    [
        ((470, 480), 20, 50),  # near: the flank ends there
        ((400, 440), 50, 50),  # beyond the flank
        ((480, 505), 0, 50),  # over the first edge
        ((490, 500), 0, 50),  # touches the first edge
        ((502, 506), 50, 50),  # inside the gap
        ((505, 530), 50, 0),  # over the last edge
        ((520, 530), 50, 10),
        ((490, 520), 0, 0),
    ],
)
def test_barriers_shorten_the_side_they_are_on(barrier: tuple[int, int], left: int, right: int) -> None:
    assert lay_gaps([(500, 510)], 50, 0, 1000, [barrier]) == [Gap(500, 510, left, right)]


SPANS = st.lists(
    st.tuples(st.integers(-20, 320), st.integers(0, 30)).map(lambda s: (s[0], s[0] + s[1])), max_size=6
)


@settings(deadline=None)
@given(spans=SPANS, barriers=SPANS, flank=st.integers(1, 80), lo=st.integers(0, 60), hi=st.integers(200, 300))
def test_flanks_hold_only_good_samples_and_all_of_them(
    spans: list[tuple[int, int]], barriers: list[tuple[int, int]], flank: int, lo: int, hi: int
) -> None:
    bad = np.ones(400, bool)
    bad[lo:hi] = False
    to_replace = np.zeros(400, bool)
    for start, stop in spans:
        to_replace[max(start, 0) : max(stop, 0)] = True
    to_replace[bad] = False
    for start, stop in barriers:
        bad[max(start, 0) : max(stop, 0)] = True
    bad |= to_replace

    gaps = lay_gaps(spans, flank, lo, hi, barriers)

    covered = np.zeros(400, bool)
    for gap in gaps:
        covered[gap.start : gap.stop] = True
        assert not bad[gap.start - gap.left : gap.start].any()
        assert not bad[gap.stop : gap.stop + gap.right].any()
        assert gap.left == flank or gap.start - gap.left == 0 or bad[gap.start - gap.left - 1]
        assert gap.right == flank or bad[gap.stop + gap.right]
    np.testing.assert_array_equal(covered, to_replace)
