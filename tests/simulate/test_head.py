"""Electrode sites and dipole maps."""

from __future__ import annotations

import numpy as np
import pytest

from pulsemend.simulate.head import CAP, REFERENCE, angles_from, dipole_map, direction, directions


def test_angles_between_sites() -> None:
    # facts T-4.12, after Oostenveld and Praamstra 2001
    angle = dict(zip(("T7", "C3"), np.rad2deg(angles_from("Cz", ("T7", "C3"))), strict=True))
    assert angle["T7"] == pytest.approx(90.0, abs=1e-4)
    assert angle["C3"] == pytest.approx(45.0, abs=1e-4)
    assert np.rad2deg(angles_from("T7", ("C5",)))[0] == pytest.approx(22.5, abs=1e-4)
    np.testing.assert_allclose(direction("C3") * [-1, 1, 1], direction("C4"), atol=1e-12)


def test_cap_has_62_channels_and_not_its_reference() -> None:
    assert len(CAP) == len(set(CAP)) == 62
    assert REFERENCE not in CAP


def test_sites_are_distinct_unit_vectors() -> None:
    sites = directions((*CAP, REFERENCE))
    np.testing.assert_allclose(np.linalg.norm(sites, axis=1), 1.0)
    apart = np.arccos(np.clip(sites @ sites.T, -1, 1)) + 10 * np.eye(len(sites))
    assert np.rad2deg(apart.min()) > 8.0


def test_odd_sites_lie_left_and_front_rows_in_front() -> None:
    for name in CAP:
        x, y, _ = direction(name)
        digits = name.lstrip("AFCPTOIpz")
        if digits:
            assert (x < 0) == (int(digits) % 2 == 1), name
        else:
            assert x == pytest.approx(0.0)
        if name.startswith(("Fp", "AF")):
            assert y > 0.5
        if name.startswith(("PO", "O", "I")):
            assert y < -0.5


@pytest.mark.parametrize("name", ["X3", "c3", "C", "Cz1", ""])
def test_unknown_site_is_refused(name: str) -> None:
    with pytest.raises(ValueError, match="no electrode site"):
        direction(name)


def test_dipole_map_peaks_above_a_radial_dipole() -> None:
    sites = directions(CAP)
    site = direction("P3")
    assert CAP[int(np.argmax(dipole_map(sites, 0.7 * site, site)))] == "P3"
