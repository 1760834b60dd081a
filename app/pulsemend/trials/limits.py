"""What the time limits of slots say about every two of them, also where slots in between were not found."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import PlanError
from pulsemend.model.keys import show
from pulsemend.model.plan import Slot

Bounds = tuple[tuple[float, ...], ...]
_ROUNDING_S = 1e-9


def pair_bounds(slots: Sequence[Slot]) -> Bounds:
    """Largest time from every slot to every other, all limits taken together.

    Every limit is a difference constraint; their shortest paths are the tightest bounds they imply. Limits
    of a required slot hold also if its marker was lost; those of an optional slot only where it is present,
    so paths between two slots lead through required ones alone.

    Parameters
    ----------
    slots : sequence of Slot
        Of one variant, references named.

    Returns
    -------
    tuple of tuple of float
        ``bounds[p][q]``: time of q minus time of p is at most this, in seconds; the least time from p to q
        is ``-bounds[q][p]``.

    Raises
    ------
    PlanError
        No times can meet the limits of the required slots.

    References
    ----------
    Dechter R, Meiri I, Pearl J (1991) Temporal constraint networks. Artif Intell 49:61-95.
    DOI 10.1016/0004-3702(91)90006-6
    """
    direct = _direct(slots)
    if not _can_be_met(direct, range(len(slots))):
        _refuse_contradiction(direct, slots)
    required = [place for place, slot in enumerate(slots) if not slot.optional]
    return tuple(tuple(map(float, row)) for row in _tightened(direct, required))


def _refuse_contradiction(direct: NDArray[np.float64], slots: Sequence[Slot]) -> None:
    """Refuse slots that no trial can have; optional ones that merely cannot stand together are no fault."""
    required = [place for place, slot in enumerate(slots) if not slot.optional]
    for behind in (False, True):
        for place, slot in enumerate(slots):
            others = [other for other in required if behind or other < place]
            if not _can_be_met(direct, sorted(_needed([place, *others], slots))):
                raise PlanError(
                    "trial",
                    f"no times can meet the limits of slot {show(slot.slot)} and those of the slots "
                    f"{'around' if behind else 'before'} it together",
                    received=show(list(slot.after_s or ())),
                )


def _can_be_met(direct: NDArray[np.float64], present: Sequence[int]) -> bool:
    """Tell whether there are times for all these slots: no circle of limits is negative."""
    own = direct[np.ix_(present, present)]
    # Every limit is wider by a rounding error, so a true contradiction exceeds their sum.
    return bool(_tightened(own, range(len(present))).diagonal().min() >= -_ROUNDING_S)


def _tightened(direct: NDArray[np.float64], via: Sequence[int]) -> NDArray[np.float64]:
    """Shortest paths through some slots only (Floyd and Warshall)."""
    bounds = direct.copy()
    for place in via:
        np.minimum(bounds, bounds[:, [place]] + bounds[[place], :], out=bounds)
    return bounds


def _needed(places: Sequence[int], slots: Sequence[Slot]) -> set[int]:
    """Places of slots with all that they count from."""
    names = {slot.slot: place for place, slot in enumerate(slots)}
    found: set[int] = set()
    for place in places:
        at: int | None = place
        while at is not None and at not in found:
            found.add(at)
            at = names.get(slots[at].after)
    return found


def _direct(slots: Sequence[Slot]) -> NDArray[np.float64]:
    """Bounds that the plan gives directly: each slot to its reference, and all in their order."""
    direct = np.full((len(slots), len(slots)), np.inf)
    direct[np.tril_indices(len(slots))] = 0.0  # a later slot to an earlier one: not before it
    places = {slot.slot: place for place, slot in enumerate(slots)}
    for place, slot in enumerate(slots):
        if place and slot.after_s is not None:
            reference = places[slot.after]
            least_s, most_s = slot.after_s
            direct[reference, place] = most_s + _ROUNDING_S
            direct[place, reference] = min(0.0, -(least_s - _ROUNDING_S))
    return direct
