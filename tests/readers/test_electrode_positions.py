"""Positions by name: facts T-4.12 (Oostenveld & Praamstra 2001), and a measured head as outside reference."""

from __future__ import annotations

import mne
import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.readers.names import HEAD_RADIUS_M, standard_positions


def at(name: str) -> NDArray[np.float64]:
    return np.array(standard_positions([name])[name])


def degrees_between(a: NDArray[np.float64], b: NDArray[np.float64]) -> float:
    cosine = a @ b / np.linalg.norm(a) / np.linalg.norm(b)
    return float(np.degrees(np.arccos(np.clip(cosine, -1, 1))))


@pytest.mark.parametrize(
    ("a", "b", "degrees"),
    [
        ("T7", "Cz", 90),
        ("T7", "C5", 22.5),
        ("C3", "Cz", 45),
        ("Fpz", "Cz", 90),
        ("Fpz", "Oz", 180),
        ("Fz", "Cz", 45),
    ],
)
def test_angles_of_the_ideal_sphere(a: str, b: str, degrees: float) -> None:
    """Facts T-4.12 and 4.3."""
    assert degrees_between(at(a), at(b)) == pytest.approx(degrees, abs=1e-6)


def test_axes_are_right_front_up() -> None:
    np.testing.assert_allclose(at("T8"), (HEAD_RADIUS_M, 0, 0), atol=1e-12)
    np.testing.assert_allclose(at("Fpz"), (0, HEAD_RADIUS_M, 0), atol=1e-12)
    np.testing.assert_allclose(at("Cz"), (0, 0, HEAD_RADIUS_M), atol=1e-12)


@pytest.mark.parametrize(
    ("old", "new"), [("T3", "T7"), ("T4", "T8"), ("T5", "P7"), ("T6", "P8"), ("fp1", "Fp1")]
)
def test_old_names_and_case(old: str, new: str) -> None:
    np.testing.assert_array_equal(at(old), at(new))


def test_unknown_names_are_left_out_and_names_stay_as_given() -> None:
    assert list(standard_positions(["VEOG", "FP2", "Status", " cz "])) == ["FP2", " cz "]


def test_left_and_right_mirror_each_other() -> None:
    for left, right in (("C3", "C4"), ("F9", "F10"), ("AFF5h", "AFF6h"), ("FTT7h", "FTT8h"), ("O1h", "O2h")):
        np.testing.assert_allclose(at(left) * (-1, 1, 1), at(right), atol=1e-12)


def test_every_site_of_the_reader_library_lies_near_it_on_a_measured_head() -> None:
    """Outside reference: mne's positions on one measured head, which is no sphere (hence 12 degrees)."""
    name = "colin27_1005" if "colin27_1005" in mne.channels.get_builtin_montages() else "standard_1005"
    measured = mne.channels.make_standard_montage(name).get_positions()["ch_pos"]
    ears = {"A1", "A2", "M1", "M2"}
    found = standard_positions(measured)
    assert set(measured) - set(found) == ears
    points = np.array([measured[site] for site in found])
    # Centre of the best sphere through all sites: |p|^2 = 2 p.c + const.
    centre = np.linalg.lstsq(np.c_[2 * points, np.ones(len(points))], (points**2).sum(axis=1), rcond=None)[0][
        :3
    ]
    off = [degrees_between(np.array(found[site]), measured[site] - centre) for site in found]
    assert np.median(off) < 6
    assert max(off) < 12
