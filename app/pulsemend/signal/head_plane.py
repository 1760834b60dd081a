"""Positions on the head laid flat, for pictures seen from above."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

_LEAST_FOR_A_SPHERE = 12
_RADIUS_M = (0.05, 0.15)
_FARTHEST_M = 0.08
"""A fitted centre further from the origin comes from positions that say nothing about it."""


def lay_flat(positions_m: NDArray[np.float64]) -> NDArray[np.float64]:
    """Lay positions into a plane so that distances from the crown keep their proportions [1]_.

    Parameters
    ----------
    positions_m : array, shape (n, 3)
        Metres right, front and up from any point inside the head.

    Returns
    -------
    array, shape (n, 2)
        Right and front. The crown is the origin, and the circle of radius 1 is as far down as the centre of
        the sphere that fits the positions; lower positions lie outside.

    References
    ----------
    .. [1] Snyder JP (1987) Map projections: a working manual. US Geol Surv Prof Paper 1395, azimuthal
       equidistant projection. doi:10.3133/pp1395
    """
    if not len(positions_m):
        return np.zeros((0, 2))
    x, y, z = (positions_m - sphere_centre(positions_m)).T
    aside = np.hypot(x, y)
    from_crown = np.arctan2(aside, z) / (np.pi / 2)
    stretch = np.divide(from_crown, aside, out=np.zeros_like(aside), where=aside > 0)
    return np.column_stack([x * stretch, y * stretch])


def sphere_centre(positions_m: NDArray[np.float64]) -> NDArray[np.float64]:
    """Centre of the sphere that fits positions best in the sense of least squares.

    Parameters
    ----------
    positions_m : array, shape (n, 3)
        From any origin.

    Returns
    -------
    array, shape (3,)
        The origin where too few positions, or positions unlike a head, do not determine it.
    """
    nowhere = np.zeros(3)
    if len(positions_m) < _LEAST_FOR_A_SPHERE:
        return nowhere
    # |p|^2 = 2 c.p + (r^2 - |c|^2) is linear in the centre c.
    known = np.column_stack([2.0 * positions_m, np.ones(len(positions_m))])
    solved, _, rank, _ = np.linalg.lstsq(known, np.sum(positions_m**2, axis=1), rcond=None)
    centre: NDArray[np.float64] = solved[:3]
    radius_m = np.sqrt(max(0.0, float(solved[3] + centre @ centre)))
    fits = rank == 4 and _RADIUS_M[0] <= radius_m <= _RADIUS_M[1]
    return centre if fits and np.linalg.norm(centre) <= _FARTHEST_M else nowhere
