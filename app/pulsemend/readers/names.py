"""Positions of electrodes by name: the extended 10-20 system on a sphere.

The 345 sites are constructed, not listed. The equator runs through Fpz, T7, Oz and T8, with a row of sites
starting every 9 degrees; the midline runs through Fpz, Cz and Oz, with a row every 11.25 degrees. Each row is
the circle through its two ends on the equator and its site on the midline, divided into eighths on either
side. Beyond the equator the rows go on straight down.

References
----------
Oostenveld R, Praamstra P (2001) The five percent electrode system for high-resolution EEG and ERP
measurements. Clin Neurophysiol 112:713-719. DOI 10.1016/S1388-2457(00)00527-7
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from functools import cache

import numpy as np
from numpy.typing import NDArray

HEAD_RADIUS_M = 0.095  # of the sphere; only directions matter to what is computed from positions

# From the front, with the name of their outer sites where that differs.
_ROWS = (
    "AFp", "AF", "AFF", "F", "FFC FFT", "FC FT", "FCC FTT", "C T", "CCP TTP", "CP TP", "CPP TPP", "P", "PPO",
    "PO", "POO",
)  # fmt: skip
_INNER = ("1h", "1", "3h", "3", "5h", "5")  # eighths from the midline on, left side
_OUTER = ("7h", "7")
_BELOW = {"9h": -11.25, "9": -22.5}  # elevation in degrees
_FRONT_AND_BACK = (
    {"Fp": (0.0, 0.0), "NFp": (0.0, -11.25), "N": (0.0, -22.5)},
    {
        "O": (180.0, 0.0),
        "OI": (180.0, -11.25),
        "I": (180.0, -22.5),
    },
)
_OLD_NAMES = {"t3": "t7", "t4": "t8", "t5": "p7", "t6": "p8"}

Position = tuple[float, float, float]


def standard_positions(names: Iterable[str]) -> dict[str, Position]:
    """Look up where electrodes sit by their names.

    Parameters
    ----------
    names : iterable of str
        Channel names in upper or lower case; T3, T4, T5 and T6 are understood as T7, T8, P7 and P8.

    Returns
    -------
    dict
        For every name that is a site of the system: metres right, front and up from the sphere's centre.
        Other names are left out.
    """
    sites = _sites()
    positions: dict[str, Position] = {}
    for name in names:
        key = name.strip().lower()
        position = sites.get(_OLD_NAMES.get(key, key))
        if position is not None:
            positions[name] = position
    return positions


@cache
def _sites() -> dict[str, Position]:
    """Construct all sites, by name in lower case."""
    sites: dict[str, Position] = {}
    for name, place in (*_row_sites(), *_end_sites()):
        x, y, z = (float(part) * HEAD_RADIUS_M for part in place)
        sites[name.lower()] = (x, y, z)
        if not name.endswith("z"):
            sites[_mirrored(name).lower()] = (-x, y, z)
    return sites


def _row_sites() -> Iterator[tuple[str, NDArray[np.float64]]]:
    """Sites of the rows from AFp to POO: midline and left side."""
    for number, row in enumerate(_ROWS, start=1):
        inner, outer = row.split()[0], row.split()[-1]
        azimuth = 18.0 + 9.0 * number
        middle, end = _at(0.0, 11.25 * number), _at(azimuth, 0.0)
        names = [inner + "z", *(inner + step for step in _INNER), *(outer + step for step in _OUTER)]
        yield from zip(names, _along_row(middle, end), strict=True)
        for step, elevation in _BELOW.items():
            yield outer + step, _at(azimuth, elevation)


def _end_sites() -> Iterator[tuple[str, NDArray[np.float64]]]:
    """Sites at forehead and nose, occiput and inion, which no row reaches: midline and left side."""
    for ends, to_left in zip(_FRONT_AND_BACK, (1.0, -1.0), strict=True):
        for name, (azimuth, elevation) in ends.items():
            for step, degrees in {"z": 0.0, "1h": 9.0, "1": 18.0}.items():
                yield name + step, _at(azimuth + to_left * degrees, elevation)


def _at(azimuth: float, elevation: float) -> NDArray[np.float64]:
    """Point on the unit sphere; azimuth in degrees from the front to the left, elevation from the equator."""
    turn, rise = math.radians(azimuth), math.radians(elevation)
    return np.array([-math.sin(turn) * math.cos(rise), math.cos(turn) * math.cos(rise), math.sin(rise)])


def _along_row(middle: NDArray[np.float64], end: NDArray[np.float64]) -> NDArray[np.float64]:
    """Nine points from the midline to the left end, on the circle that also holds the end's mirror image."""
    normal = np.cross(end - middle, end * (-1.0, 1.0, 1.0) - middle)
    normal /= np.linalg.norm(normal)
    centre = normal * (normal @ middle)
    ahead = middle - centre
    aside = np.cross(normal, ahead)
    whole = math.atan2((end - centre) @ aside, (end - centre) @ ahead)
    angles = np.linspace(0.0, whole, 9)[:, None]
    points: NDArray[np.float64] = centre + np.cos(angles) * ahead + np.sin(angles) * aside
    return points


def _mirrored(name: str) -> str:
    """Name of the site on the right that mirrors one on the left: the next even number."""
    stem = name.removesuffix("h")
    number = int(stem[-1])
    return f"{stem[:-1]}{number + 1}{name[len(stem) :]}"
