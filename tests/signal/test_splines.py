"""Spherical splines: published values, what they must reproduce, and the reader library's own matrix."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from pulsemend.signal.splines import (
    REGULARISATION,
    WEIGHT_THAT_MATTERS,
    sources_that_matter,
    spline_kernel,
    spline_weights,
)
from pulsemend.simulate.head import CAP, directions

OCTAHEDRON = np.array([[1, 0, 0], [-1, 0, 0], [0, 1, 0], [0, -1, 0], [0, 0, 1], [0, 0, -1]], dtype=float)
MIDDLE = np.full((1, 3), 1 / np.sqrt(3))
AT = np.array([1.0, 0.5, 0.0, -0.5, -1.0])
# Facts T-2.11; Perrin et al. 1989, series summed independently.
SEVEN_TERMS = [0.0152606620490, 0.0074091964088, -0.0001519312308, -0.0074883222647, -0.0146370209680]
CONVERGED = [0.0152607616986, 0.0074091856386, -0.0001519196990, -0.0074883218481, -0.0146369861542]
ORDER_THREE = [0.0321583549237, 0.0145316694811, -0.0008910623588, -0.0150357244925, -0.0282552491923]


@pytest.mark.parametrize(
    ("order", "terms", "wanted"), [(4, 7, SEVEN_TERMS), (4, 50, CONVERGED), (3, 400, ORDER_THREE)]
)
def test_kernel_is_the_published_one(order: int, terms: int, wanted: list[float]) -> None:
    np.testing.assert_allclose(spline_kernel(AT, order, terms), wanted, rtol=0, atol=1e-10)


@pytest.mark.parametrize(("terms", "of_x"), [(7, 0.575570297426), (50, 0.575568817533)])
def test_octahedron(terms: int, of_x: float) -> None:
    """Facts T-2.12, Perrin et al. 1989."""
    weights = spline_weights(OCTAHEDRON, MIDDLE, regularisation=0.0, terms=terms)
    x = OCTAHEDRON[:, 0]
    found = (weights @ np.column_stack([np.full(6, 5.0), x, x**2]))[0]
    np.testing.assert_allclose(found, [5.0, of_x, 1 / 3], rtol=0, atol=1e-9)


def test_at_an_electrode_its_own_value() -> None:
    """Facts T-2.13."""
    sites = directions(CAP)
    values = np.random.default_rng(1).standard_normal(len(CAP))
    again = spline_weights(sites, sites, regularisation=0.0) @ values
    np.testing.assert_allclose(again, values, rtol=0, atol=1e-9)


@pytest.mark.parametrize("regularisation", [0.0, REGULARISATION])
def test_what_all_share_is_passed_on(regularisation: float) -> None:
    """Facts T-2.13."""
    sites = directions(CAP)
    weights = spline_weights(sites[:50], sites[50:], regularisation=regularisation)
    np.testing.assert_allclose(weights.sum(axis=1), 1.0, rtol=0, atol=1e-9)


def test_only_directions_count() -> None:
    """Facts T-2.13."""
    sites = directions(CAP)
    weights = spline_weights(sites[:50], sites[50:])
    stretched = spline_weights(95.0 * sites[:50], 0.095 * sites[50:])
    np.testing.assert_allclose(stretched, weights, rtol=0, atol=1e-9)


def _library_weights(names: list[str], wanted: list[str]) -> NDArray[np.float64]:
    """Run the reader library's interpolation on unit vectors: row i is what channel i contributes."""
    import mne

    order = [*names, *wanted]
    info = mne.create_info(order, 1000.0, "eeg")
    places = {name: 0.095 * site for name, site in zip(order, directions(tuple(order)), strict=True)}
    data = np.concatenate([np.eye(len(names)), np.zeros((len(wanted), len(names)))])
    raw = mne.io.RawArray(data, info, verbose="error")
    raw.set_montage(mne.channels.make_dig_montage(places, coord_frame="head"))
    raw.info["bads"] = wanted
    raw.interpolate_bads(origin=(0.0, 0.0, 0.0), method={"eeg": "spline"}, verbose="error")
    return np.asarray(raw.get_data()[len(names) :])


def test_weights_are_those_of_the_reader_library() -> None:
    """Outside reference: mne's spline interpolation, the same order, terms and regularisation.

    The library drops small eigenvalues when it inverts, so that last digits differ.
    """
    wanted = ["C3", "Fp1", "Pz", "TP10"]
    names = [name for name in CAP if name not in wanted]
    ours = spline_weights(directions(tuple(names)), directions(tuple(wanted)))
    np.testing.assert_allclose(ours, _library_weights(names, wanted), rtol=0, atol=1e-6)


def test_a_rebuilt_channel_rests_on_its_neighbours() -> None:
    others = tuple(name for name in CAP if name != "C3")
    weights = spline_weights(directions(others), directions(("C3",)))
    rests_on = sources_that_matter(weights)
    named = {name for name, matters in zip(others, rests_on[0], strict=True) if matters}
    assert {"C1", "C5", "FC3", "CP3"} <= named
    assert "Oz" not in named
    assert not rests_on[np.abs(weights) < WEIGHT_THAT_MATTERS * np.abs(weights).max()].any()


@pytest.mark.parametrize("good", [OCTAHEDRON[:3], np.concatenate([OCTAHEDRON[:5], np.zeros((1, 3))])])
def test_places_that_make_no_surface_are_refused(good: NDArray[np.float64]) -> None:
    with pytest.raises(ValueError, match="electrode"):
        spline_weights(good, MIDDLE)
