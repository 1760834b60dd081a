"""Positions laid flat, against the geometry of a sphere."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.readers.names import standard_positions
from pulsemend.signal.head_plane import lay_flat, sphere_centre


def scattered(seed: int, n: int = 40) -> NDArray[np.float64]:
    """Unit vectors on the upper part of a sphere."""
    rng = np.random.default_rng(seed)
    p = rng.standard_normal((n, 3))
    p[:, 2] = np.abs(p[:, 2]) - 0.2
    unit: NDArray[np.float64] = p / np.linalg.norm(p, axis=1, keepdims=True)
    return unit


def test_known_sites_lie_where_their_angles_say() -> None:
    """Oostenveld and Praamstra 2001: Cz at the crown, Fpz, T7, Oz and T8 a quarter down, Fz half of it."""
    known = standard_positions(["Cz", "Fpz", "Oz", "T7", "T8", "Fz", "Iz"])
    flat = dict(zip(known, lay_flat(np.array(list(known.values()))), strict=True))
    expected = {
        **{"Cz": (0, 0), "Fz": (0, 0.5), "Fpz": (0, 1), "Oz": (0, -1), "Iz": (0, -1.25)},
        **{"T7": (-1, 0), "T8": (1, 0)},
    }
    for name, place in expected.items():
        np.testing.assert_allclose(flat[name], place, atol=1e-9)


def test_the_centre_need_not_be_the_origin() -> None:
    directions = scattered(1)
    at = 0.09 * directions + (0.002, -0.004, 0.04)
    np.testing.assert_allclose(sphere_centre(at), (0.002, -0.004, 0.04), atol=1e-12)
    np.testing.assert_allclose(lay_flat(at), lay_flat(0.09 * directions), atol=1e-9)


@pytest.mark.parametrize(
    "positions",
    [
        0.09 * scattered(2, 11),
        5.0 * scattered(3) + 1.0,
        np.column_stack([scattered(4)[:, :2], np.full(40, 0.05)]),
    ],
    ids=["few", "no head's size", "in a plane"],
)
def test_without_a_sphere_the_origin_is_the_centre(positions: NDArray[np.float64]) -> None:
    np.testing.assert_array_equal(sphere_centre(positions), 0.0)


def test_nothing_gives_nothing() -> None:
    assert lay_flat(np.zeros((0, 3))).shape == (0, 2)
