"""Trials to candidate epochs: one for each trial, rule and piece, always, each with its fate.

All instants are recorded samples, as decimals where a marker or an output sample lies between two of them.
"""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from pulsemend.model.epochs import Candidate, Trial, Trials, nearest_sample
from pulsemend.model.marks import BadStretch, EpochKey
from pulsemend.model.plan import EpochRule, Plan
from pulsemend.model.trial_kinds import expanded_slots, variants
from pulsemend.model.vocabulary import Fate, PulseRule, Role
from pulsemend.trials.labels import TrialLabels
from pulsemend.units import ms_to_s

# Sums of seconds times rates are whole only within rounding; a guard must then say "touches".
_ROUNDING = 1e-6


@dataclass(frozen=True, order=True)
class GapSpan:
    """What is replaced around one pulse in at least one used channel.

    Parameters
    ----------
    start, stop : int
        Recorded samples, half open. The engine's own window-to-sample rule decides them.
    pulse : int
        Onset of the pulse it belongs to.
    """

    start: int
    stop: int
    pulse: int


@dataclass(frozen=True)
class Geometry:
    """Where everything is that decides whether an epoch can be cut.

    Parameters
    ----------
    recorded_hz, output_hz : float
        Recorded and output sampling rate.
    segments : tuple of (int, int)
        Contiguous stretches of the recording, half open, in order; the first starts at 0, the last ends where
        the recording does.
    gaps : tuple of GapSpan
        All gaps of used channels (the further ones of `pulses.also` too), each with its own pulse, as before
        overlapping ones merge; any order. Empty where nothing is repaired.
    onsets : mapping of float to int
        Aligned onset of every pulse by its marker's sample (`Pulse.marked` to `Pulse.sample`): a pulse as
        anchor or stop means its onset. A pulse that is not in it stays at its marker.
    bad_stretches : tuple of BadStretch
    trials_excluded : tuple of int
        From 1, by hand.
    epochs_left_out : tuple of EpochKey
        By hand.
    """

    recorded_hz: float
    output_hz: float
    segments: tuple[tuple[int, int], ...]
    gaps: tuple[GapSpan, ...] = ()
    onsets: Mapping[float, int] = field(default_factory=dict)
    bad_stretches: tuple[BadStretch, ...] = ()
    trials_excluded: tuple[int, ...] = ()
    epochs_left_out: tuple[EpochKey, ...] = ()

    @property
    def step(self) -> float:
        """Recorded samples per output sample."""
        return self.recorded_hz / self.output_hz

    @property
    def is_reduced(self) -> bool:
        """Whether the output rate is below the recorded one."""
        return self.output_hz != self.recorded_hz

    def first_sample(self, anchor_sample: float, start_s: float) -> float:
        """Instant of an epoch's first output sample.

        At the recorded rate the anchor is the nearest recorded sample; at a reduced rate its true instant
        counts, and the engine shifts the epoch there.

        Parameters
        ----------
        anchor_sample : float
            Recorded sample of the anchor.
        start_s : float
            First sample minus anchor; a whole number of output samples.
        """
        anchor = anchor_sample if self.is_reduced else nearest_sample(anchor_sample)
        return anchor + round(start_s * self.output_hz) * self.step


def candidates(trials: Trials, plan: Plan, geometry: Geometry) -> tuple[Candidate, ...]:
    """All epochs that a plan asks for, kept or left out.

    Parameters
    ----------
    trials : Trials
        The recording's trials.
    plan : Plan
        Its rules; starts and length are whole numbers of output samples (`check_against_rate`).
    geometry : Geometry
        Gaps, breaks and decisions by hand.

    Returns
    -------
    tuple of Candidate
        One for each trial, rule and piece, in this order; none where the trial's kind has no such anchor.
        Where several reasons hold, the fate is the first of: trial excluded by hand, trial set aside, trial
        incomplete, trial doubtful, no anchor, outside the recording, across a break, not before its stop,
        touches a gap, touches a bad stretch, left out by hand.
    """
    cutter = _Cutter(plan, geometry, TrialLabels(plan, trials.trials, trials.run))
    return tuple(
        cutter.candidate(trial, index, piece)
        for trial in trials.trials
        for index, rule in enumerate(plan.epochs.rule)
        if cutter.has_slot(trial, rule.anchor)
        for piece in range(1, rule.count + 1)
    )


def set_order(found: Sequence[Candidate], geometry: Geometry) -> tuple[Candidate, ...]:
    """Kept candidates in the order of the set: of first sample, then of rule.

    Parameters
    ----------
    found : sequence of Candidate
        Kept and left out.
    geometry : Geometry
        The same that decided their fates.
    """

    def place(candidate: Candidate) -> tuple[float, int, int, int]:
        first = geometry.first_sample(candidate.anchor_sample or 0.0, candidate.start_s)
        # Equal instants reached on different ways differ in their last digits.
        return round(first, 6), candidate.rule_index, candidate.trial, candidate.piece

    return tuple(sorted((one for one in found if one.kept), key=place))


def stale_decisions(trials: Trials, plan: Plan, geometry: Geometry) -> tuple[str, ...]:
    """Decisions by hand that name no trial or epoch: the plan or the markers have changed since.

    What does not exist is left out anyway, so these are warnings.

    Parameters
    ----------
    trials : Trials
        The recording's trials.
    plan : Plan
        Its rules.
    geometry : Geometry
        Holds the decisions.
    """
    counts = {rule.name: rule.count for rule in plan.epochs.rule}
    n_trials = len(trials.trials)
    warnings = [
        f"marks: trial {number} is excluded, but there are {n_trials} trials"
        for number in geometry.trials_excluded
        if not 1 <= number <= n_trials
    ]
    warnings += [
        f"marks: piece {key.piece} of {key.rule} in trial {key.trial} is left out, but there is none"
        for key in geometry.epochs_left_out
        if not (1 <= key.trial <= n_trials and 1 <= key.piece <= counts.get(key.rule, 0))
    ]
    return tuple(warnings)


@dataclass(frozen=True)
class _Span:
    """What one epoch covers: its first and last output sample and half an output period beyond both.

    The reach is that of the set's `replaced` array, so that a gap that does not touch marks no sample.
    """

    first: float
    last: float
    reach: float

    @property
    def low(self) -> float:
        return self.first - self.reach - _ROUNDING

    @property
    def high(self) -> float:
        return self.last + self.reach + _ROUNDING


class _Cutter:
    def __init__(self, plan: Plan, geometry: Geometry, labels: TrialLabels) -> None:
        self.plan = plan
        self.geometry = geometry
        self.labels = labels
        self.length = round(plan.epochs.length_s * geometry.output_hz)
        self.gaps = sorted(geometry.gaps)
        self.gap_starts = [gap.start for gap in self.gaps]
        self.gap_of: dict[float, int] = {}  # first replaced sample by onset
        for gap in self.gaps:
            self.gap_of.setdefault(gap.pulse, gap.start)
        self.longest_gap = max((gap.stop - gap.start for gap in self.gaps), default=0)
        self.pulse_slots = [slot.slot for slot in expanded_slots(plan) if slot.role is Role.PULSE]
        self.slots_of: dict[str, set[str]] = {}  # by kind, of all numbers of repeats
        for way in variants(plan):
            self.slots_of.setdefault(way.kind, set()).update(slot.slot for slot in way.slots)
        self.excluded = set(geometry.trials_excluded)
        self.left_out = set(geometry.epochs_left_out)

    def has_slot(self, trial: Trial, slot: str) -> bool:
        return slot in self.slots_of.get(trial.kind, ())

    def candidate(self, trial: Trial, index: int, piece: int) -> Candidate:
        rule = self.plan.epochs.rule[index]
        output_hz = self.geometry.output_hz
        start_s = (round(rule.start_s * output_hz) + (piece - 1) * self.length) / output_hz
        anchor = self.instant(trial, rule.anchor)
        fate, detail = self.fate(trial, rule, piece, anchor, start_s)
        return Candidate(
            rule=rule.name,
            rule_index=index,
            trial=trial.number,
            piece=piece,
            anchor=rule.anchor,
            anchor_sample=anchor,
            start_s=start_s,
            fate=fate,
            detail=detail,
            labels=self.labels.of(trial, rule),
        )

    def instant(self, trial: Trial, slot: str) -> float | None:
        """Give the recorded sample of a slot: its marker, the aligned onset of a pulse, or its stand-in."""
        marker = trial.markers.get(slot)
        if marker is None:
            return trial.stand_ins.get(slot)
        if slot in self.pulse_slots:
            return float(self.geometry.onsets.get(marker.sample, marker.sample))
        return marker.sample

    def fate(
        self, trial: Trial, rule: EpochRule, piece: int, anchor: float | None, start_s: float
    ) -> tuple[Fate, str]:
        if trial.number in self.excluded:
            return Fate.TRIAL_EXCLUDED, ""
        if trial.set_aside:
            return Fate.SET_ASIDE, trial.set_aside
        if trial.missing:
            return Fate.TRIAL_INCOMPLETE, "no " + ", ".join(trial.missing)
        if trial.doubts:
            return Fate.TRIAL_DOUBTFUL, "; ".join(trial.doubts)
        if anchor is None:
            return Fate.NO_ANCHOR, f"no {rule.anchor} in this trial"
        first = self.geometry.first_sample(anchor, start_s)
        step = self.geometry.step
        span = _Span(first, first + (self.length - 1) * step, step / 2)
        found = self.outside(span) or self.not_before_stop(trial, rule, span)
        if found is None and rule.pulse is PulseRule.REFUSE:
            found = self.touches_gap(trial, rule, span)
        found = found or self.bad_stretch(span)
        if found is None and EpochKey(trial.number, rule.name, piece) in self.left_out:
            found = Fate.BY_HAND, ""
        return found or (Fate.KEPT, "")

    def outside(self, span: _Span) -> tuple[Fate, str] | None:
        """Whether the epoch leaves the recording or crosses a break in it."""
        segments = self.geometry.segments
        begin, end = segments[0][0], segments[-1][1] - 1
        if span.first < begin - _ROUNDING:
            return Fate.OUTSIDE, f"starts {self.seconds(begin - span.first)} before the recording"
        if span.last > end + _ROUNDING:
            return Fate.OUTSIDE, f"ends {self.seconds(span.last - end)} after the recording"
        for start, stop in segments:
            if start - _ROUNDING <= span.first and span.last <= stop - 1 + _ROUNDING:
                return None
        edge = next(start for start, _ in segments if start > span.first + _ROUNDING)
        return Fate.ACROSS_BREAK, f"break at {self.seconds(edge)}"

    def not_before_stop(self, trial: Trial, rule: EpochRule, span: _Span) -> tuple[Fate, str] | None:
        """Whether the epoch reaches its stop; a trial without that slot has nothing to stop before."""
        instant = self.instant(trial, rule.stop_before) if rule.stop_before else None
        if instant is None:
            return None
        has_gap = rule.stop_before in self.pulse_slots and instant in self.gap_of
        edge = self.gap_of[instant] if has_gap else instant
        if span.high < edge - self.samples(rule.clear_ms[0]):
            return None
        what = "gap of " if has_gap else ""
        return Fate.NOT_BEFORE_STOP, f"{what}{rule.stop_before} at {self.seconds(instant)}"

    def touches_gap(self, trial: Trial, rule: EpochRule, span: _Span) -> tuple[Fate, str] | None:
        """Whether a gap of any used channel, widened by `clear_ms`, touches the epoch."""
        before, after = (self.samples(clear_ms) for clear_ms in rule.clear_ms)
        low = bisect_left(self.gap_starts, span.low - after - self.longest_gap)
        high = bisect_right(self.gap_starts, span.high + before)
        for gap in self.gaps[low:high]:
            if gap.stop - 1 + after >= span.low and gap.start - before <= span.high:
                return Fate.TOUCHES_GAP, f"{self.pulse_name(trial, gap)} at {self.seconds(gap.pulse)}"
        return None

    def pulse_name(self, trial: Trial, gap: GapSpan) -> str:
        return next((slot for slot in self.pulse_slots if self.instant(trial, slot) == gap.pulse), "pulse")

    def bad_stretch(self, span: _Span) -> tuple[Fate, str] | None:
        for stretch in self.geometry.bad_stretches:
            if stretch.start < stretch.stop and stretch.stop - 1 >= span.low and stretch.start <= span.high:
                kind = f"{stretch.kind}, " if stretch.kind else ""
                return (
                    Fate.BAD_STRETCH,
                    f"{kind}{self.seconds(stretch.start)} to {self.seconds(stretch.stop)}",
                )
        return None

    def samples(self, milliseconds: float) -> float:
        return ms_to_s(milliseconds) * self.geometry.recorded_hz

    def seconds(self, sample: float) -> str:
        return f"{sample / self.geometry.recorded_hz:.3f} s"
