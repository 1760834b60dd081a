"""Which events the next and previous one are."""

from __future__ import annotations

from pathlib import Path

import pytest

from pulsemend.model.plan_file import read_plan
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Role
from pulsemend.session.event_choice import ALL_EVENTS, EventChoice, event_choices, neighbour
from support.session_desk import FACTS, PLAN


@pytest.fixture
def plan_path(tmp_path: Path) -> Path:
    path = tmp_path / "lantern.toml"
    path.write_text(PLAN)
    return path


def test_choices_are_listed_with_their_numbers(plan_path: Path) -> None:
    plan = read_plan(plan_path).plan
    assert event_choices(FACTS.markers, plan) == (
        (ALL_EVENTS, 3),
        (EventChoice(role=Role.SAMPLE), 2),
        (EventChoice(role=Role.PULSE), 1),
        (EventChoice(code="lamp"), 2),
        (EventChoice(code="tick"), 1),
    )
    assert (EventChoice(role=Role.UNDECIDED), 3) in event_choices(FACTS.markers, None)


def test_neighbours(plan_path: Path) -> None:
    plan = read_plan(plan_path).plan
    first, tick, last = FACTS.markers
    lamps = EventChoice(role=Role.SAMPLE)

    def go(choice: EventChoice, sample: float, *, later: bool) -> Marker | None:
        return neighbour(FACTS.markers, plan, choice, sample, later=later)

    assert go(ALL_EVENTS, 0, later=True) == first
    assert go(ALL_EVENTS, first.sample, later=True) == tick
    assert go(lamps, first.sample, later=True) == last
    assert go(lamps, last.sample, later=True) is None
    assert go(lamps, last.sample, later=False) == first
    assert go(EventChoice(code="tick"), tick.sample, later=False) is None


def test_words() -> None:
    assert ALL_EVENTS.words == "all events"
    assert EventChoice(role=Role.CUE).words == "role cue"
    assert EventChoice(code="lamp").words == "code lamp"
