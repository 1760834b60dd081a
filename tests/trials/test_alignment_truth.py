"""Trials found again in recordings with known faults.

"The fault list leaves one explanation" of a true trial where every explanation of least cost has it, and "can
be recovered" is what that holds for. Both are decided by listing (`support.brute_alignment`), not by `align`.
"""

from __future__ import annotations

import itertools
import random
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

import pytest

from pulsemend.model.plan import Plan
from pulsemend.model.trial_kinds import variants
from pulsemend.trials.alignment import Event, align
from pulsemend.trials.matching import match_trials
from support.brute_alignment import Run, certain_runs, cost_of
from support.marker_streams import LANTERN, RATE_HZ, Stream, draw_mix, draw_plan, draw_stream

RECALL = 0.98


@dataclass
class Tally:
    """Sums over recordings, of trials."""

    true: int = 0
    complete: int = 0
    recoverable: int = 0
    recovered: int = 0
    doubtful: int = 0
    wrong: int = 0  # reported complete and without doubt, although it was not so

    @property
    def recall(self) -> float:
        return self.recovered / self.recoverable

    def report(self, record: Callable[[str, object], None]) -> None:
        record("trials", self.true)
        record("complete", self.complete)
        record("recoverable", self.recoverable)
        record("recall", self.recall)
        record("share doubtful", self.doubtful / self.true)
        record("complete, not doubtful, other than the truth (which another explanation beats)", self.wrong)


def stretches(n_events: int, *explanations: Sequence[Run]) -> Iterator[range]:
    """Cut the events where no run of any of the explanations goes on."""
    inside = {place for one in explanations for run in one for place in range(run.first + 1, run.last + 1)}
    cuts = [place for place in range(n_events + 1) if place not in inside]
    yield from (range(first, end) for first, end in itertools.pairwise(cuts))


def cost_within(events: Sequence[Event], explanation: Sequence[Run], stretch: range) -> int:
    inside = [run for run in explanation if run.first in stretch]
    moved = [
        Run(run.kind, tuple((name, place - stretch.start) for name, place in run.places), run.missing)
        for run in inside
    ]
    return cost_of(events[stretch.start : stretch.stop], moved)


def check_stream(stream: Stream, tally: Tally) -> None:
    events, ways = stream.events(), variants(stream.plan)
    placed = align(events, ways)
    own = [Run(one.kind, tuple(one.places.items()), one.missing) for one in placed]
    sure = {run for run, one in zip(own, placed, strict=True) if not one.is_doubtful}
    true = stream.true_runs()

    # Sure is what every best explanation has, and nothing else; so what can be recovered is.
    least, certain = certain_runs(events, ways)
    assert cost_of(events, own) == least
    assert sure == certain
    recoverable = certain & set(true)
    tally.true += len(stream.trials)
    tally.complete += sum(not run.missing for run in true)
    tally.recoverable += len(recoverable)
    tally.recovered += len(recoverable & sure)
    tally.doubtful += sum(one.is_doubtful for one in placed)

    # Complete and not doubtful is wrong only where the truth costs more than what was found.
    for stretch in stretches(len(events), own, true):
        wrong = {run for run in sure - set(true) if run.first in stretch and not run.missing}
        tally.wrong += len(wrong)
        true_cost, own_cost = cost_within(events, true, stretch), cost_within(events, own, stretch)
        assert own_cost <= true_cost
        assert not wrong or own_cost < true_cost

    # The trials of the recording are these.
    found = match_trials(stream.markers, stream.plan, RATE_HZ)
    places = {marker.sample: place for place, marker in enumerate(stream.markers)}
    complete = {
        Run(one.kind, tuple((name, places[m.sample]) for name, m in one.markers.items()), ())
        for one in found.trials
        if not one.missing and not one.doubts
    }
    assert complete == {run for run in sure if not run.missing}


def check_one(rng: random.Random, plan: Plan | None, tally: Tally, seed: int) -> None:
    while True:
        drawn = plan or draw_plan(rng)
        stream = draw_stream(rng, drawn, rng.randint(3, 6) if plan else rng.randint(4, 10), draw_mix(rng))
        try:
            check_stream(stream, tally)
        except OverflowError:
            continue  # wide limits explain so much that listing has no end: another recording instead
        except AssertionError as error:
            message = f"seed {seed}: {variants(drawn)}\n{stream.events()}\n{stream.faults}"
            raise AssertionError(message) from error
        return


def check_many(seeds: range, plan: Plan | None) -> Tally:
    tally = Tally()
    for seed in seeds:
        check_one(random.Random(seed), plan, tally, seed)
    assert tally.recall >= RECALL
    # The task is neither empty nor without difficulty; a single recording may be either.
    if len(seeds) > 4:
        assert tally.recoverable > 0.25 * tally.true
        assert tally.recoverable < tally.true
    return tally


def test_lantern_trials(record_property: Callable[[str, object], None]) -> None:
    check_many(range(5), LANTERN).report(record_property)


def test_trials_of_random_plans(record_property: Callable[[str, object], None]) -> None:
    check_many(range(1000, 1016), None).report(record_property)


# With the two tests above, more than 500 recordings.
@pytest.mark.slow
@pytest.mark.parametrize("first", range(2000, 2150, 50))
def test_lantern_trials_of_many_recordings(
    first: int, slow_count: Callable[[int], int], record_property: Callable[[str, object], None]
) -> None:
    check_many(range(first, first + slow_count(50)), LANTERN).report(record_property)


@pytest.mark.slow
@pytest.mark.parametrize("first", range(3000, 3350, 50))
def test_trials_of_many_random_plans(
    first: int, slow_count: Callable[[int], int], record_property: Callable[[str, object], None]
) -> None:
    check_many(range(first, first + slow_count(50)), None).report(record_property)


def test_without_faults_all_trials_are_found_without_doubt() -> None:
    rng = random.Random(5)
    stream = draw_stream(rng, LANTERN, 100, draw_mix(rng, 0.0))
    assert stream.faults == ()
    found = match_trials(stream.markers, LANTERN, RATE_HZ)
    assert [one.markers for one in found.trials] == [one.markers for one in stream.trials]
    assert not any(one.missing or one.doubts for one in found.trials)
    assert found.extra == ()
