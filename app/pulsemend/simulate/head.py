"""Directions of electrode sites on a sphere, by their extended 10-20 names.

The equator runs through Fpz, T7, Oz and T8, Cz is the pole, and every row of sites divides the arcs from its
midline site to its two sites on the equator evenly.

References
----------
Oostenveld R, Praamstra P (2001) Clin Neurophysiol 112:713-719. https://doi.org/10.1016/S1388-2457(00)00527-7
"""

from __future__ import annotations

import re

import numpy as np
from numpy.typing import NDArray

REFERENCE = "FCz"
_CAP = """
    Fp1 Fpz Fp2 AF7 AF3 AF4 AF8 F7 F5 F3 F1 Fz F2 F4 F6 F8 FT7 FC5 FC3 FC1 FC2 FC4 FC6 FT8
    T7 C5 C3 C1 Cz C2 C4 C6 T8 TP9 TP7 CP5 CP3 CP1 CPz CP2 CP4 CP6 TP8 TP10
    P7 P5 P3 P1 Pz P2 P4 P6 P8 PO7 PO3 POz PO4 PO8 O1 Oz O2 Iz
"""
CAP: tuple[str, ...] = tuple(_CAP.split())
"""The 62 recorded channels of the Lantern cap; its reference electrode is FCz."""

# Angle of each row's midline site from Cz towards the front, and of its sites on the equator from the front.
_ROWS = {
    "Fp": (90.0, 18.0),
    "AF": (67.5, 36.0),
    "F": (45.0, 54.0),
    "FC": (22.5, 72.0),
    "C": (0.0, 90.0),
    "CP": (-22.5, 108.0),
    "P": (-45.0, 126.0),
    "PO": (-67.5, 144.0),
    "O": (-90.0, 162.0),
    "I": (-112.5, 180.0),
}
_ROW_OF = {"FT": "FC", "T": "C", "TP": "CP"}


def direction(name: str) -> NDArray[np.float64]:
    """Find the unit vector to a site: x to the right, y to the front, z up.

    Parameters
    ----------
    name : str
        Extended 10-20 name, e.g. ``FC5``.

    Returns
    -------
    array, shape (3,)

    Raises
    ------
    ValueError
        No site of that name.
    """
    match = re.fullmatch(r"([A-Z][A-Zp]?)(z|\d{1,2})", name)
    row = _ROW_OF.get(match[1], match[1]) if match else ""
    if match is None or row not in _ROWS:
        message = f"no electrode site of the name {name!r}"
        raise ValueError(message)
    front, azimuth = np.deg2rad(_ROWS[row])
    middle = np.array([0.0, np.sin(front), np.cos(front)])
    if match[2] == "z":
        return middle
    number = int(match[2])
    edge = np.array([-np.sin(azimuth), np.cos(azimuth), 0.0])
    # Fp1 and O1 lie on the equator themselves; elsewhere 7 does, in steps of a quarter (9 is one step below).
    share = (number + 1) // 2 / (1.0 if row in ("Fp", "O") else 4.0)
    arc = np.arccos(np.clip(middle @ edge, -1.0, 1.0))
    site = (np.sin((1.0 - share) * arc) * middle + np.sin(share * arc) * edge) / np.sin(arc)
    if number % 2 == 0:
        site[0] = -site[0]
    return np.asarray(site)


def directions(names: tuple[str, ...]) -> NDArray[np.float64]:
    """Find the unit vectors to several sites, shape (n_sites, 3)."""
    return np.stack([direction(name) for name in names])


def angles_from(site: str, names: tuple[str, ...]) -> NDArray[np.float64]:
    """Measure the angles in radians between one site and several, shape (n_sites,)."""
    return np.arccos(np.clip(directions(names) @ direction(site), -1.0, 1.0))


def dipole_map(
    sites: NDArray[np.float64], position: NDArray[np.float64], moment: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Compute the potential of a current dipole at sites on the unit sphere, its largest value made 1.

    The conductor is unbounded and homogeneous: enough for a smooth map of a plausible width, no head model.

    Parameters
    ----------
    sites : array, shape (n_sites, 3)
        Unit vectors.
    position, moment : array, shape (3,)
        The position lies inside the sphere; only the moment's direction counts.

    Returns
    -------
    array, shape (n_sites,)
    """
    away = sites - position
    potential = (away * moment).sum(axis=1) / (away * away).sum(axis=1) ** 1.5
    return np.asarray(potential / np.abs(potential).max())
