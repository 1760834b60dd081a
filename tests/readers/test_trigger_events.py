"""Events in trigger channels: facts T-6.1 and T-6.2, and the same events however the channel is cut."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pulsemend.readers.triggers import trigger_events


def events(*blocks: list[int]) -> list[tuple[int, int]]:
    return list(trigger_events(np.array(block, dtype=np.int64) for block in blocks))


@pytest.mark.parametrize(
    ("levels", "expected"),
    [
        ([0, 5, 5, 5, 0], [(1, 5)]),  # T-6.1
        ([0, 0, 0], []),  # T-6.2
        ([5, 5, 5], [(0, 5)]),
        ([0, 5, 7, 7, 0, 7], [(1, 5), (2, 7), (5, 7)]),
        ([3, 0, 3], [(0, 3), (2, 3)]),
        ([], []),
    ],
)
def test_known_levels(levels: list[int], expected: list[tuple[int, int]]) -> None:
    assert events(levels) == expected


@given(st.lists(st.integers(0, 3), max_size=40), st.lists(st.integers(0, 40), max_size=6))
def test_cuts_make_no_difference(levels: list[int], cuts: list[int]) -> None:
    edges = [0, *sorted(min(cut, len(levels)) for cut in cuts), len(levels)]
    pieces = [levels[a:b] for a, b in itertools.pairwise(edges)]
    assert events(*pieces) == events(levels)
