"""Bounds between every two slots against a linear program, and limits that contradict each other."""

from __future__ import annotations

import itertools
import random
from collections.abc import Callable, Collection, Sequence

import numpy as np
import pytest
from scipy.optimize import linprog

from pulsemend.errors import PlanError
from pulsemend.model.plan import Slot
from pulsemend.model.vocabulary import Role
from pulsemend.trials.limits import pair_bounds


def slot(name: str, after_s: tuple[float, float] | None, after: str, optional: bool = False) -> Slot:
    return Slot(name, Role.CUE, after_s, after, optional)


def largest_s(slots: Sequence[Slot], present: Collection[int], start: int, end: int) -> float | None:
    """Most time from one slot to another by linear programming; None where no times can meet the limits."""
    places = {one.slot: place for place, one in enumerate(slots)}
    rows, most = [], []

    def limit(later: int, earlier: int, most_s: float) -> None:
        row = np.zeros(len(slots))
        row[later] += 1
        row[earlier] -= 1
        rows.append(row)
        most.append(most_s)

    for earlier, later in itertools.pairwise(sorted(present)):
        limit(earlier, later, 0.0)
    for place in present:
        after_s = slots[place].after_s
        if after_s is not None and places[slots[place].after] in present:
            limit(place, places[slots[place].after], after_s[1])
            limit(places[slots[place].after], place, -after_s[0])
    goal = np.zeros(len(slots))
    goal[end] -= 1
    goal[start] += 1
    found = linprog(goal, np.array(rows or [np.zeros(len(slots))]), most or [0.0], bounds=(-1000, 1000))
    assert found.status in (0, 2)
    return -float(goal @ np.asarray(found.x)) if found.status == 0 else None


def draw_slots(rng: random.Random) -> list[Slot]:
    slots = [slot("0", None, "")]
    for place in range(1, rng.randint(2, 6)):
        least = rng.choice([0.0, 0.5, 1.0, 2.0])
        after = str(rng.randrange(place))
        slots.append(
            slot(str(place), (least, least + rng.choice([0.0, 0.5, 3.0])), after, rng.random() < 0.4)
        )
    return slots


def needed(slots: Sequence[Slot], place: int) -> set[int]:
    """Required slots, one more, and all that they count from."""
    found = {number for number, one in enumerate(slots) if not one.optional} | {place}
    while True:
        more = found | {int(slots[number].after) for number in found if slots[number].after}
        if more == found:
            return found
        found = more


def check_bounds(seed: int, n_cases: int) -> None:
    rng = random.Random(seed)
    compared = refused = 0
    for _ in range(n_cases):
        slots = draw_slots(rng)
        possible = all(
            largest_s(slots, needed(slots, place), 0, 0) is not None for place in range(len(slots))
        )
        try:
            bounds = pair_bounds(slots)
        except PlanError:
            assert not possible
            refused += 1
            continue
        assert possible
        required = {place for place, one in enumerate(slots) if not one.optional}
        for start, end in itertools.permutations(range(len(slots)), 2):
            most_s = largest_s(slots, required | {start, end}, start, end)
            if most_s is not None and most_s < 900:
                assert bounds[start][end] == pytest.approx(most_s, abs=1e-6)
                compared += 1
    assert compared > 2 * n_cases
    assert 0 < refused < 0.9 * n_cases


def test_bounds_are_the_tightest() -> None:
    check_bounds(1, 14)


@pytest.mark.slow
def test_bounds_are_the_tightest_for_many(slow_count: Callable[[int], int]) -> None:
    check_bounds(2, max(20, slow_count(400)))


def test_a_slot_left_out_is_bounded_by_its_neighbours() -> None:
    slots = [slot("a", None, ""), slot("b", (1.0, 2.0), "a"), slot("c", (0.5, 1.5), "b")]
    bounds = pair_bounds(slots)
    assert bounds[0][2] == pytest.approx(3.5, abs=1e-8)
    assert -bounds[2][0] == pytest.approx(1.5, abs=1e-8)


def test_an_optional_slot_bounds_only_where_it_is() -> None:
    slots = [slot("a", None, ""), slot("b", (1.0, 2.0), "a", True), slot("c", (0.5, 1.5), "b")]
    bounds = pair_bounds(slots)
    assert bounds[0][2] == np.inf
    assert bounds[1][2] == pytest.approx(1.5, abs=1e-8)


CONTRADICTIONS = {
    "required": [slot("a", None, ""), slot("b", (3.0, 4.0), "a"), slot("c", (1.0, 2.0), "a")],
    "optional": [slot("a", None, ""), slot("b", (3.0, 4.0), "a", True), slot("c", (1.0, 2.0), "a")],
    "counted from an optional one": [
        slot("a", None, ""),
        slot("b", (1.0, 1.5), "a", True),
        slot("c", (1.0, 1.5), "b", True),
        slot("d", (1.0, 1.9), "a"),
    ],
}


@pytest.mark.parametrize("slots", CONTRADICTIONS.values(), ids=CONTRADICTIONS)
def test_limits_that_no_times_can_meet_are_refused_in_one_line(slots: list[Slot]) -> None:
    with pytest.raises(PlanError, match="no times can meet the limits of slot") as caught:
        pair_bounds(slots)
    assert "\n" not in str(caught.value)
    assert str(caught.value).startswith("trial: ")


def test_limits_that_just_can_be_met_are_not() -> None:
    slots = [slot("a", None, ""), slot("b", (0.3, 0.3), "a"), slot("c", (0.1, 0.1), "a")]
    with pytest.raises(PlanError):
        pair_bounds(slots)
    slots = [
        slot("a", None, ""),
        slot("b", (0.1, 0.1), "a"),
        slot("c", (0.2, 0.2), "b"),
        slot("d", (0.3, 0.3), "a"),
    ]
    pair_bounds(slots)
