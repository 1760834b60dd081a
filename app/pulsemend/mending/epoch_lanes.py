"""One lane per trial: its markers, gaps and candidate epochs as arrays, ready to be drawn, without a window.

All times are seconds of the recording; a lane's own zero is taken off where it is drawn, so that another
zero costs nothing.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from pulsemend.mending.prepare import Decision
from pulsemend.model.epochs import NOT_AVAILABLE, Candidate, Trial
from pulsemend.model.plan import Plan
from pulsemend.model.trial_kinds import expanded_slots, kinds
from pulsemend.model.vocabulary import Fate, Role
from pulsemend.progress import Progress, Work
from pulsemend.trials.balance import value_order
from pulsemend.trials.selection import MOST_VALUES

FATES = tuple(Fate)
"""What the numbers in `Lanes.box_fate` stand for."""

CONFLICTS = frozenset(
    (Fate.OUTSIDE, Fate.ACROSS_BREAK, Fate.BAD_STRETCH, Fate.TOUCHES_GAP, Fate.NOT_BEFORE_STOP)
)
"""Fates of an epoch that is in the way of something else."""

OF_TRIALS = frozenset((Fate.TRIAL_EXCLUDED, Fate.SET_ASIDE, Fate.TRIAL_INCOMPLETE, Fate.TRIAL_DOUBTFUL))
"""Fates that all epochs of a trial share, and that the trial's own state tells."""

_EVERY = 200
"""Trials between two points where the work may be stopped."""


class LaneState(StrEnum):
    """What a trial is, in the order in which it counts."""

    EXCLUDED = "excluded by hand"
    SET_ASIDE = "set aside"
    INCOMPLETE = "incomplete"
    DOUBTFUL = "doubtful"
    COMPLETE = "complete"


class LanesShown(StrEnum):
    """Which lanes are shown."""

    ALL = "all"
    CONFLICTS = "with conflicts"
    LEFT_OUT = "with something left out"


@dataclass(frozen=True)
class Lane:
    """One trial in words.

    Parameters
    ----------
    trial : int
        From 1.
    kind : str
        Empty where the plan has one kind.
    state : LaneState
    why : str
        What exactly, e.g. "no cue2"; empty for complete trials.
    conflicts : tuple of str
        Of every left-out epoch of its own: "delay1 touches gap of pulse1 at 12.304 s".
    """

    trial: int
    kind: str
    state: LaneState
    why: str
    conflicts: tuple[str, ...]

    @property
    def words(self) -> str:
        """What there is to say of it; empty where nothing is wrong."""
        if self.state is LaneState.COMPLETE:
            return "; ".join(self.conflicts)
        return f"{self.state}: {self.why}" if self.why else str(self.state)


@dataclass(frozen=True, eq=False)
class Lanes:
    """All trials of a recording with everything that is drawn of them.

    Parameters
    ----------
    lanes : tuple of Lane, length n_lanes
    rules : tuple of str
        Names of the plan's rules.
    starts_s : tuple of float
        Of the rules.
    length_s : float
    output_hz : float
        Starts and length are whole samples of this rate.
    slots : tuple of str
        All slots of the plan.
    roles : tuple of Role
        Of the slots.
    zero : str
        Slot at each lane's zero.
    zero_s : array, shape (n_lanes,)
    has_zero : array of bool, shape (n_lanes,)
        False where the slot was not found, and the lane is placed by another slot's usual distance.
    marker_lane, marker_slot : array of int, shape (n_markers,)
        In order of the lanes.
    marker_s : array, shape (n_markers,)
        A pulse's aligned onset.
    marker_stands_in : array of bool, shape (n_markers,)
        Whether there is no marker, only the anchor that stands in for it.
    box_lane, box_rule, box_piece, box_fate : array of int, shape (n_boxes,)
        Candidates that have an anchor, in order of the lanes.
    box_start_s, box_stop_s : array, shape (n_boxes,)
    box_detail : tuple of str, length n_boxes
    gap_start_s, gap_stop_s : array, shape (n_gaps,)
        In order of time, overlapping ones merged.
    gap_first, gap_stop : array of int, shape (n_lanes,)
        Which gaps lie within the lane's own time.
    left_out : array of bool, shape (n_lanes,)
        Whether any candidate of the lane is left out.
    conflicting : array of bool, shape (n_lanes,)
        Whether any is left out for a conflict, or the trial is doubtful.
    conditions : mapping of (str, str) to array of int
        Lanes by label column and value.
    """

    lanes: tuple[Lane, ...]
    rules: tuple[str, ...]
    starts_s: tuple[float, ...]
    length_s: float
    output_hz: float
    slots: tuple[str, ...]
    roles: tuple[Role, ...]
    zero: str
    zero_s: NDArray[np.float64]
    has_zero: NDArray[np.bool_]
    marker_lane: NDArray[np.int32]
    marker_slot: NDArray[np.int32]
    marker_s: NDArray[np.float64]
    marker_stands_in: NDArray[np.bool_]
    box_lane: NDArray[np.int32]
    box_rule: NDArray[np.int32]
    box_piece: NDArray[np.int32]
    box_fate: NDArray[np.int32]
    box_start_s: NDArray[np.float64]
    box_stop_s: NDArray[np.float64]
    box_detail: tuple[str, ...]
    gap_start_s: NDArray[np.float64]
    gap_stop_s: NDArray[np.float64]
    gap_first: NDArray[np.int32]
    gap_stop: NDArray[np.int32]
    left_out: NDArray[np.bool_]
    conflicting: NDArray[np.bool_]
    conditions: Mapping[tuple[str, str], NDArray[np.int32]] = field(default_factory=dict)

    @property
    def span_s(self) -> tuple[float, float]:
        """First and last time of any lane, since its zero; nothing lies beyond."""
        own = [
            times - self.zero_s[lanes]
            for times, lanes in (
                (self.marker_s, self.marker_lane),
                (self.box_start_s, self.box_lane),
                (self.box_stop_s, self.box_lane),
            )
            if times.size
        ]
        if not own:
            return 0.0, 1.0
        low, high = min(float(one.min()) for one in own), max(float(one.max()) for one in own)
        return low, max(high, low + 1e-3)

    @property
    def kinds(self) -> tuple[str, ...]:
        """Kinds of trial in order of first appearance; none where there is one kind only."""
        return tuple(dict.fromkeys(lane.kind for lane in self.lanes if lane.kind))

    def kept(self, box: int) -> bool:
        """Whether a box is an epoch of the set."""
        return FATES[self.box_fate[box]] is Fate.KEPT


def conflict_words(rule: str, fate: Fate, detail: str) -> str:
    """Name a rule's left-out epoch and the reason in one phrase.

    Parameters
    ----------
    rule : str
        Name of the rule.
    fate : Fate
        Why it is left out.
    detail : str
        As the ledger has it.
    """
    if fate is Fate.TOUCHES_GAP and detail:
        return f"{rule} touches gap of {detail}"
    if fate is Fate.NO_ANCHOR and detail:
        return f"{rule}: {detail}"
    return f"{rule} {fate}" + (f": {detail}" if detail else "")


def epoch_lanes(decision: Decision, plan: Plan, zero: str = "") -> Work[Lanes]:
    """Lay out all trials.

    Parameters
    ----------
    decision : Decision
        Trials and candidates.
    plan : Plan
        The plan that was decided with.
    zero : str
        Slot at each lane's zero; empty: the first one.

    Yields
    ------
    Progress

    Returns
    -------
    Lanes
    """
    slots = expanded_slots(plan)
    trials = decision.trials.trials
    by_trial: defaultdict[int, list[Candidate]] = defaultdict(list)
    for one in decision.ledger:
        by_trial[one.trial].append(one)
    excluded = set(decision.geometry.trials_excluded)
    found = []
    for place, trial in enumerate(trials):
        if place % _EVERY == 0:
            yield Progress("laying out trials", place, len(trials))
        found.append(_lane(trial, by_trial[trial.number], excluded, several=len(kinds(plan)) > 1))
    numbers = {trial.number: place for place, trial in enumerate(trials)}
    markers = _markers(trials, [slot.slot for slot in slots], [slot.role for slot in slots], decision)
    boxes = [one for one in decision.ledger if one.anchor_sample is not None]
    box_lane = np.array([numbers[one.trial] for one in boxes], np.int32)
    starts_s, stops_s = _spans_s(boxes, decision, plan)
    yield Progress("laying out trials", len(trials), len(trials))
    gap_start_s, gap_stop_s = _merged_gaps_s(decision)
    low, high = _extents(len(trials), ((markers[0], markers[2]), (box_lane, starts_s), (box_lane, stops_s)))
    out = np.zeros(len(trials), np.bool_)
    conflicting = np.zeros(len(trials), np.bool_)
    for one in decision.ledger:
        if not one.kept:
            out[numbers[one.trial]] = True
            conflicting[numbers[one.trial]] |= one.fate in CONFLICTS
    conflicting |= np.array([lane.state is LaneState.DOUBTFUL for lane in found], np.bool_)
    lanes = Lanes(
        lanes=tuple(found),
        rules=tuple(rule.name for rule in plan.epochs.rule),
        starts_s=tuple(rule.start_s for rule in plan.epochs.rule),
        length_s=plan.epochs.length_s,
        output_hz=decision.geometry.output_hz,
        slots=tuple(slot.slot for slot in slots),
        roles=tuple(slot.role for slot in slots),
        zero="",
        zero_s=np.zeros(len(trials)),
        has_zero=np.zeros(len(trials), np.bool_),
        marker_lane=markers[0],
        marker_slot=markers[1],
        marker_s=markers[2],
        marker_stands_in=markers[3],
        box_lane=box_lane,
        box_rule=np.array([one.rule_index for one in boxes], np.int32),
        box_piece=np.array([one.piece for one in boxes], np.int32),
        box_fate=np.array([_FATE_NUMBER[one.fate] for one in boxes], np.int32),
        box_start_s=starts_s,
        box_stop_s=stops_s,
        box_detail=tuple(one.detail for one in boxes),
        gap_start_s=gap_start_s,
        gap_stop_s=gap_stop_s,
        gap_first=np.searchsorted(gap_stop_s, low, "right").astype(np.int32),
        gap_stop=np.searchsorted(gap_start_s, high, "left").astype(np.int32),
        left_out=out,
        conflicting=conflicting,
        conditions=_conditions(decision.ledger, numbers),
    )
    fallback = np.where(np.isfinite(low), low, 0.0)
    return with_zero(replace(lanes, zero_s=fallback), zero)


def with_zero(lanes: Lanes, slot: str) -> Lanes:
    """Put another slot at the zero of every lane.

    A lane that lacks the slot is placed by the first slot it has, as far from it as is usual (the median of
    the other lanes); so nothing jumps about because one marker is missing.

    Parameters
    ----------
    lanes : Lanes
        With any zero.
    slot : str
        Empty, or one the plan has no more: the first slot.
    """
    if not lanes.slots:
        return lanes
    place = lanes.slots.index(slot) if slot in lanes.slots else 0
    instants = np.full((len(lanes.lanes), len(lanes.slots)), np.nan)
    instants[lanes.marker_lane, lanes.marker_slot] = lanes.marker_s
    zero_s = instants[:, place].copy()
    has_zero = np.isfinite(zero_s)
    for other in range(len(lanes.slots)):
        lacking = ~np.isfinite(zero_s) & np.isfinite(instants[:, other])
        if lacking.any():
            distances = (instants[:, place] - instants[:, other])[has_zero]
            known = distances[np.isfinite(distances)]
            zero_s[lacking] = instants[lacking, other] + (float(np.median(known)) if known.size else 0.0)
    zero_s = np.where(np.isfinite(zero_s), zero_s, lanes.zero_s)
    return replace(lanes, zero=lanes.slots[place], zero_s=zero_s, has_zero=has_zero)


def shown_lanes(
    lanes: Lanes, shown: LanesShown, kind: str = "", condition: tuple[str, str] | None = None
) -> NDArray[np.int32]:
    """Choose lanes.

    Parameters
    ----------
    lanes : Lanes
        All of them.
    shown : LanesShown
        All, with conflicts, or with something left out.
    kind : str
        A kind of trial; empty: every one.
    condition : (str, str) or None
        Label column and value; None: every one.

    Returns
    -------
    array of int, in order
    """
    chosen = np.ones(len(lanes.lanes), np.bool_)
    if shown is LanesShown.CONFLICTS:
        chosen &= lanes.conflicting
    elif shown is LanesShown.LEFT_OUT:
        chosen &= lanes.left_out
    if kind:
        chosen &= np.array([lane.kind == kind for lane in lanes.lanes], np.bool_)
    if condition is not None:
        has = np.zeros_like(chosen)
        has[lanes.conditions.get(condition, np.zeros(0, np.int32))] = True
        chosen &= has
    return np.flatnonzero(chosen).astype(np.int32)


_FATE_NUMBER = {fate: place for place, fate in enumerate(FATES)}


def _lane(trial: Trial, own: Sequence[Candidate], excluded: set[int], *, several: bool) -> Lane:
    state, why = LaneState.COMPLETE, ""
    if trial.number in excluded:
        state = LaneState.EXCLUDED
    elif trial.set_aside:
        state, why = LaneState.SET_ASIDE, trial.set_aside
    elif trial.missing:
        state, why = LaneState.INCOMPLETE, "no " + ", ".join(trial.missing)
    elif trial.doubts:
        state, why = LaneState.DOUBTFUL, "; ".join(trial.doubts)
    in_pieces = {one.rule for one in own if one.piece > 1}
    conflicts = tuple(
        conflict_words(
            f"{one.rule} piece {one.piece}" if one.rule in in_pieces else one.rule, one.fate, one.detail
        )
        for one in own
        if not one.kept and one.fate not in OF_TRIALS
    )
    return Lane(trial.number, trial.kind if several else "", state, why, conflicts)


def _markers(
    trials: Sequence[Trial], slots: Sequence[str], roles: Sequence[Role], decision: Decision
) -> tuple[NDArray[np.int32], NDArray[np.int32], NDArray[np.float64], NDArray[np.bool_]]:
    """Lane, slot and instant of every marker and stand-in."""
    rows = list(_instants(trials, slots, roles, decision.geometry.onsets))
    rate_hz = decision.geometry.recorded_hz
    return (
        np.array([row[0] for row in rows], np.int32),
        np.array([row[1] for row in rows], np.int32),
        np.array([row[2] for row in rows], np.float64) / rate_hz,
        np.array([row[3] for row in rows], np.bool_),
    )


def _instants(
    trials: Sequence[Trial], slots: Sequence[str], roles: Sequence[Role], onsets: Mapping[float, int]
) -> Iterator[tuple[int, int, float, bool]]:
    places = {name: place for place, name in enumerate(slots)}
    for lane, trial in enumerate(trials):
        for name, marker in trial.markers.items():
            place = places.get(name)
            if place is not None:
                is_pulse = roles[place] is Role.PULSE
                yield (
                    lane,
                    place,
                    onsets.get(marker.sample, marker.sample) if is_pulse else marker.sample,
                    False,
                )
        for name, sample in trial.stand_ins.items():
            if name in places and name not in trial.markers:
                yield lane, places[name], sample, True


def _spans_s(
    boxes: Sequence[Candidate], decision: Decision, plan: Plan
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """First instant of every candidate and the end of its last sample; `Geometry.first_sample` at once."""
    geometry = decision.geometry
    anchors = np.array([one.anchor_sample for one in boxes], np.float64)
    if not geometry.is_reduced:
        anchors = np.floor(anchors + 0.5)
    starts = np.array([one.start_s for one in boxes], np.float64)
    first = anchors + np.round(starts * geometry.output_hz) * geometry.step
    length = round(plan.epochs.length_s * geometry.output_hz) * geometry.step
    return first / geometry.recorded_hz, (first + length) / geometry.recorded_hz


def _merged_gaps_s(decision: Decision) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Gaps in order of time, those that overlap as one."""
    gaps = np.array(sorted((gap.start, gap.stop) for gap in decision.geometry.gaps), np.float64).reshape(
        -1, 2
    )
    if not len(gaps):
        return np.zeros(0), np.zeros(0)
    reach = np.maximum.accumulate(gaps[:, 1])
    begins = np.concatenate([[True], gaps[1:, 0] > reach[:-1]])
    ends = np.concatenate([begins[1:], [True]])
    rate_hz = decision.geometry.recorded_hz
    return gaps[begins, 0] / rate_hz, reach[ends] / rate_hz


def _extents(
    count: int, of: Sequence[tuple[NDArray[np.int32], NDArray[np.float64]]]
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """First and last instant of every lane; infinite the wrong way round where a lane is empty."""
    low, high = np.full(count, np.inf), np.full(count, -np.inf)
    for lane, times in of:
        np.minimum.at(low, lane, times)
        np.maximum.at(high, lane, times)
    return low, high


def _conditions(
    ledger: Sequence[Candidate], numbers: Mapping[int, int]
) -> dict[tuple[str, str], NDArray[np.int32]]:
    """Lanes by label and value; columns of free text are no conditions."""
    found: defaultdict[str, defaultdict[str, set[int]]] = defaultdict(lambda: defaultdict(set))
    too_many: set[str] = set()
    for one in ledger:
        lane = numbers[one.trial]
        for column, value in one.labels.items():
            if value == NOT_AVAILABLE or column in too_many:
                continue
            values = found[column]
            values[value].add(lane)
            if len(values) > MOST_VALUES:
                too_many.add(column)
    return {
        (column, value): np.array(sorted(found[column][value]), np.int32)
        for column in found
        if column not in too_many and len(found[column]) > 1
        for value in sorted(found[column], key=value_order)
    }
