"""When a light or sound sensor changes: a threshold with hysteresis, set by all events together."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from enum import StrEnum
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import maximum_filter1d, uniform_filter1d


class Polarity(StrEnum):
    """Which way a channel leaves its rest; either way: a sound, or a patch of the screen that toggles."""

    UP = "up"
    DOWN = "down"
    EITHER = "either way"
    NONE = "none"


class NotFound(StrEnum):
    """Why an event shows no onset; not recorded: no change in what there is of the search."""

    NO_CHANGE = "no change"
    ALREADY_ACTIVE = "already active"
    OUTSIDE_SEARCH = "changes only outside the search"
    NOT_RECORDED = "not recorded"


@dataclass(frozen=True)
class CrossingRules:
    """How onsets are told from noise, flicker and drift. Shares are of the swing, rest to active state.

    Parameters
    ----------
    smooth_s : float
        Level changes are looked for in means over so long, centred; the crossing itself is then placed in
        the samples as recorded. Shorter than the period of any flicker: a mean over a period blurs the edge.
    envelope_s : float
        A sound's envelope is the largest distance from rest within so long before: it rises at once. Half a
        period of the lowest tone.
    low, high : float
        Hysteresis: an onset begins below `low` and reaches `high`. The onset is at 0.5.
    most_rise_s : float
        From `low` to `high` at most: what is slower is drift, not a screen.
    least_ratio : float
        The swing must be so many times the range that the channel covers within `rest_s` at rest, so flicker
        may reach a third of the swing to either side.
    least_ratio_either : float
        The same where the change goes either way: the envelope that is judged there is steadier at rest.
    rest_s : float
        The range at rest is that of the quieter of two stretches of this length before the search; what the
        search sets out from, the median over half a stretch.
    after_s : float
        Wanted after the search, to tell a late onset from none.
    """

    smooth_s: float = 0.002
    envelope_s: float = 0.005
    low: float = 0.25
    high: float = 0.75
    most_rise_s: float = 0.02
    least_ratio: float = 1.5
    least_ratio_either: float = 3.0
    rest_s: float = 0.05
    after_s: float = 0.05

    @property
    def before_s(self) -> float:
        """Wanted before the search."""
        return 2.0 * self.rest_s


DEFAULT_RULES = CrossingRules()


@dataclass(frozen=True)
class Crossings:
    """What `find_crossings` found.

    Parameters
    ----------
    samples : array, shape (n_events,)
        First sample of each window that is half-way from rest to the active state; NaN without an onset.
    reasons : tuple of NotFound or None
        None for events found.
    polarity : Polarity
        None was found: `Polarity.NONE`.
    swing : float
        Distance of the active state from rest, in units of the windows; 0.0 where no change stands out.
    """

    samples: NDArray[np.float64]
    reasons: tuple[NotFound | None, ...]
    polarity: Polarity
    swing: float


def find_crossings(
    windows: Sequence[NDArray[Any]],
    searched: Sequence[tuple[float, float]],
    rate_hz: float,
    rules: CrossingRules = DEFAULT_RULES,
) -> Crossings:
    """Find the first sample at which each event's level is half-way from rest to its active state.

    Whole samples, as those of a marker, which is the first sample that shows its code: were the edge
    interpolated, every onset would be half a sample early by comparison.

    Direction and swing are those of all events together: medians over the events that show a change. Rest
    is each event's own, so that a baseline which drifts from event to event does no harm. A change that
    goes both ways (a tone; a patch that toggles from event to event) is judged by the envelope of the
    distance from rest. The first onset within the search counts.

    Parameters
    ----------
    windows : sequence of array, shape (n_samples,)
        One stretch of the channel per event, in any one unit, finite: the search, `CrossingRules.before_s`
        before and `CrossingRules.after_s` after it, or as much of it as there is.
    searched : sequence of 2 float
        First and last sample of each window at which its onset may be, both included.
    rate_hz : float
        Sampling rate.
    rules : CrossingRules
        How an onset is told from noise, flicker and drift.

    Returns
    -------
    Crossings

    Raises
    ------
    ValueError
        Windows and searches differ in number.
    """
    if len(windows) != len(searched):
        raise ValueError(f"{len(windows)} windows, but {len(searched)} searches")
    events = [_Event(np.asarray(x, np.float64), search) for x, search in zip(windows, searched, strict=True)]
    recorded = [event for event in events if event.is_recorded]
    polarity, swing = _direction(recorded, rate_hz, rules)
    samples = np.full(len(events), np.nan)
    reasons: list[NotFound | None] = []
    rests = np.full(len(events), np.nan)
    for i, event in enumerate(events):
        if not event.is_recorded:
            reasons.append(NotFound.NOT_RECORDED)
        elif polarity is Polarity.NONE:
            reasons.append(NotFound.NO_CHANGE)
        else:
            samples[i], rests[i], reason = _locate(event, polarity, swing, rate_hz, rules)
            reasons.append(reason)
    found = np.flatnonzero(np.isfinite(samples))
    if not found.size:
        return Crossings(samples, tuple(reasons), Polarity.NONE, swing)
    # A level that never changes is told from rest by that of the events around it, unless rest itself drifts
    # so much from event to event that they cannot tell.
    strayed = np.abs(np.diff(rests[found], 2)) / 2.0
    least = swing / 2.0 + (3.0 * float(np.median(strayed)) if strayed.size else 0.0)
    for i, reason in enumerate(reasons):
        if reason is NotFound.NO_CHANGE and rests[i] - np.interp(i, found, rests[found]) > least:
            reasons[i] = NotFound.ALREADY_ACTIVE
    return Crossings(samples, tuple(reasons), polarity, swing)


@dataclass(frozen=True)
class _Event:
    x: NDArray[np.float64]
    search: tuple[float, float]

    @property
    def first(self) -> int:
        """First sample searched."""
        return max(0, math.ceil(self.search[0]))

    @property
    def is_cut(self) -> bool:
        """Whether part of the search is not in the window."""
        return math.ceil(self.search[0]) < 0 or math.floor(self.search[1]) >= len(self.x)

    @property
    def is_recorded(self) -> bool:
        """Whether anything of the search is in the window."""
        return min(len(self.x) - 1, math.floor(self.search[1])) > self.first

    def rest(self, rate_hz: float, rules: CrossingRules) -> slice:
        """Choose the samples just before the search; at the recording's start the first one must do."""
        return slice(max(0, self.first - _count(rules.rest_s / 2.0, rate_hz)), max(1, self.first))


def _count(length_s: float, rate_hz: float) -> int:
    return max(1, round(length_s * rate_hz))


def _smooth_reach(rate_hz: float, rules: CrossingRules) -> int:
    """Count the samples to either side that a mean takes in."""
    return int(rules.smooth_s * rate_hz / 2.0)


def _shown(event: _Event, polarity: Polarity, rate_hz: float, rules: CrossingRules) -> NDArray[np.float64]:
    """Course of an event in which every onset is a rise."""
    if polarity is Polarity.EITHER:
        distance = np.abs(event.x - np.median(event.x[event.rest(rate_hz, rules)]))
        length = _count(rules.envelope_s, rate_hz)
        return np.asarray(maximum_filter1d(distance, length, mode="nearest", origin=(length - 1) // 2))
    size = 2 * _smooth_reach(rate_hz, rules) + 1
    smooth = np.asarray(uniform_filter1d(event.x, size, mode="nearest"))
    return smooth if polarity is Polarity.UP else -smooth


def _direction(events: list[_Event], rate_hz: float, rules: CrossingRules) -> tuple[Polarity, float]:
    """Find the way in which the channel leaves its rest, and how far it goes."""
    if not events:
        return Polarity.NONE, 0.0
    up = _swing(events, Polarity.UP, rate_hz, rules)
    down = _swing(events, Polarity.DOWN, rate_hz, rules)
    if max(up, down) > 2.0 * min(up, down):
        return (Polarity.UP, up) if up > down else (Polarity.DOWN, down)
    either = _swing(events, Polarity.EITHER, rate_hz, rules)
    return (Polarity.EITHER, either) if either > 0.0 else (Polarity.NONE, 0.0)


def _swing(events: list[_Event], polarity: Polarity, rate_hz: float, rules: CrossingRules) -> float:
    """Distance of the active state from rest; 0.0 where rest by itself covers nearly as much."""
    farthest, usual_range = np.empty(len(events)), np.empty(len(events))
    for i, event in enumerate(events):
        y = _shown(event, polarity, rate_hz, rules)
        # The quieter of two stretches: the end of something earlier must not count as noise.
        length = min(_count(rules.rest_s, rate_hz), max(1, event.first))
        stretches = y[max(0, event.first - 2 * length) : max(1, event.first)]
        later, earlier = stretches[-length:], stretches[:-length]
        usual_range[i] = min(np.ptp(part) for part in (later, earlier) if 2 * len(part) > length)
        farthest[i] = (y[event.first :] - np.median(y[event.rest(rate_hz, rules)])).max()
    # Up to three quarters of the events may lack the change; single artifacts do not count.
    half = float(np.quantile(farthest, 0.75)) / 2.0
    if half <= 0.0:
        return 0.0
    active = []
    for event, far in zip(events, farthest, strict=True):
        if far > half:
            y = _shown(event, polarity, rate_hz, rules)
            above = y[event.first :] - np.median(y[event.rest(rate_hz, rules)])
            active.append(np.median(above[above > half]))
    swing = float(np.median(active))
    ratio = rules.least_ratio_either if polarity is Polarity.EITHER else rules.least_ratio
    return swing if swing > ratio * float(np.quantile(usual_range, 0.75)) else 0.0


def _locate(
    event: _Event, polarity: Polarity, swing: float, rate_hz: float, rules: CrossingRules
) -> tuple[float, float, NotFound | None]:
    """Find one event's onset: its sample or NaN, the level of its rest, and why there is none."""
    y = _shown(event, polarity, rate_hz, rules)
    rest = _own_rest(y[: math.floor(event.search[1]) + 1], swing)
    level = rest + swing / 2.0
    reach = 0 if polarity is Polarity.EITHER else _smooth_reach(rate_hz, rules)
    course = {Polarity.UP: event.x, Polarity.DOWN: -event.x}.get(polarity, y)
    is_outside = False
    for below, above in _rises(y, rest + rules.low * swing, rest + rules.high * swing):
        if above - below > max(1.0, rules.most_rise_s * rate_hz):
            continue
        # A mean may pass a threshold before the edge by as much as it takes in, if flicker helps.
        first = max(0, below - reach)
        at = first + _crossed(course[first : above + reach + 1], level)
        if event.search[0] <= at <= event.search[1]:
            return at, rest, None
        is_outside = True
    if is_outside:
        return math.nan, rest, NotFound.OUTSIDE_SEARCH
    if y[event.first] > level:
        return math.nan, rest, NotFound.ALREADY_ACTIVE
    return math.nan, rest, NotFound.NOT_RECORDED if event.is_cut else NotFound.NO_CHANGE


def _own_rest(y: NDArray[np.float64], swing: float) -> float:
    """Level of rest in a course that may hold both states: the median of what is near its lowest."""
    rest = float(y.min())
    # The lowest is that of noise or flicker; the second turn takes in all of it.
    for _ in range(2):
        rest = float(np.median(y[y <= rest + swing / 2.0]))
    return rest


def _rises(y: NDArray[np.float64], low: float, high: float) -> list[tuple[int, int]]:
    """Each rise through both thresholds: last sample at or below `low`, first at or above `high`."""
    side = np.where(y <= low, -1, np.where(y >= high, 1, 0))
    decided = np.flatnonzero(side)
    rise = np.flatnonzero(np.diff(side[decided]) > 0)
    return list(zip(decided[rise].tolist(), decided[rise + 1].tolist(), strict=True))


def _crossed(x: NDArray[np.float64], level: float) -> int:
    """First sample of a rise at or above a level.

    Where noise crosses more than once, the split that leaves most below the level before it and most
    above it after: the likeliest place of a step in white noise, and no single sample decides.
    """
    return int(np.argmin(np.concatenate([[0.0], np.cumsum(x - level)])))
