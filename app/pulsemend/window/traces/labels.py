"""Labels that never collide: with each other or with the shapes they stand beside. No Qt."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

LEAST_ROOM = 22.0
"""A label with less room than this is left out instead of abbreviated."""


@dataclass(frozen=True)
class Placed:
    """A label that has a place.

    Parameters
    ----------
    index : int
        Which one.
    x : float
        Its left edge.
    width : float
        Room it has; less than its own width where it must be abbreviated.
    """

    index: int
    x: float
    width: float


def place(xs: Sequence[float], widths: Sequence[float], half_shape: float, right: float) -> list[Placed]:
    """Place labels to the right of shapes on one line.

    Parameters
    ----------
    xs : sequence of float
        Middles of the shapes, rising.
    widths : sequence of float
        Widths of the labels; 0 for a shape without one.
    half_shape : float
        Half a shape's width, with the margin a label keeps from it.
    right : float
        Right edge of the line.

    Returns
    -------
    list of Placed
        In order; labels without room are absent.
    """
    placed = []
    for index, (x, width) in enumerate(zip(xs, widths, strict=True)):
        left = x + half_shape
        end = min(right, xs[index + 1] - half_shape) if index + 1 < len(xs) else right
        room = end - left
        if width > 0 and left >= 0 and (room >= width or room >= LEAST_ROOM):
            placed.append(Placed(index, left, min(width, room)))
    return placed


def thinned(n_rows: int, row_height: float, text_height: float) -> int:
    """Every how manieth row can carry its name so that names do not touch."""
    step = 1
    while step * row_height < text_height and step < max(1, n_rows):
        step += 1
    return step
