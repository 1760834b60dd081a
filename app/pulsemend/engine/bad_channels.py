"""Bad channels: searched in pulse-free windows, left out of the reference, rebuilt from the good ones."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pulsemend.engine.setup import Setup
from pulsemend.signal.channels import (
    DEAD_SHARE,
    Criterion,
    Judgement,
    Label,
    WindowMeasures,
    WindowMeter,
    judge,
)
from pulsemend.signal.head_plane import sphere_centre
from pulsemend.signal.splines import LEAST_GOOD, sources_that_matter, spline_weights

Flags = NDArray[np.bool_]


class ChannelSearch:
    """Collects what pulse-free windows tell of the good EEG channels; eyes and muscles are not judged.

    Parameters
    ----------
    setup : Setup
        Channels called bad by hand are bad before anything is judged.
    """

    def __init__(self, setup: Setup) -> None:
        self._columns = np.flatnonzero(setup.eeg & ~setup.bad)
        self._n_used = setup.used.size
        self._places = places_of(setup)[self._columns]
        self._meter = WindowMeter(setup.facts.rate_hz, setup.line_hz)
        self._windows: list[WindowMeasures] = []

    def add(self, volts: NDArray[Any]) -> None:
        """Take in one window, shape (n_samples, n_used)."""
        if self._columns.size:
            measured = self._meter.measure(volts[:, self._columns])
            if measured is not None:
                self._windows.append(measured)

    def result(self) -> Judgement | None:
        """Judge; channels count as the used ones do. None where there is too little to tell."""
        known = np.isfinite(self._places).all(axis=1).sum() > 0.5 * self._columns.size
        found = judge(self._windows, self._places if known else None)
        return None if found is None else _spread_out(found, self._columns, self._n_used)


def _spread_out(found: Judgement, columns: NDArray[np.intp], n: int) -> Judgement:
    """Give a judgement of some channels places for all."""

    def spread(values: NDArray[Any], fill: float) -> NDArray[Any]:
        out = np.full(n, fill, dtype=values.dtype)
        out[columns] = values
        return out

    return Judgement(
        n_windows=found.n_windows,
        amplitude_v=spread(found.amplitude_v, np.nan),
        criteria=tuple(
            Criterion(
                one.label,
                spread(one.value, np.nan),
                spread(one.worst, np.nan),
                one.limit,
                spread(one.n_over, 0),
            )
            for one in found.criteria
        ),
        bridged=tuple((int(columns[a]), int(columns[b])) for a, b in found.bridged),
    )


def found_bad(setup: Setup, judgement: Judgement | None) -> Flags:
    """Tell which channels count as found bad, shape (n_used,): the marks may say that one is good."""
    if judgement is None:
        return np.zeros(setup.used.size, dtype=np.bool_)
    return np.asarray(judgement.bad & ~setup.good & ~setup.bad)


def reference_from(setup: Setup, found: Flags) -> Flags:
    """Tell whose mean is subtracted, shape (n_used + extra,): an average leaves out what was found bad."""
    chosen = setup.reference_from.copy()
    if setup.averages:
        chosen[: found.size] &= ~found
    return chosen


@dataclass(frozen=True)
class Rebuilding:
    """How bad channels are made from good ones.

    Parameters
    ----------
    rows : array of int
        The rebuilt ones among the used channels.
    weights : array, shape (n_rows, n_used)
        Zero for everything that is not a good EEG channel of known place.
    sources : bool array, shape (n_rows, n_used)
        On which channels each rests: those whose weight is at least a tenth of its largest.
    """

    rows: NDArray[np.intp]
    weights: NDArray[np.float64]
    sources: Flags


def rebuilding(setup: Setup, found: Flags) -> Rebuilding:
    """Lay out the rebuilding of every bad EEG channel whose place is known.

    Parameters
    ----------
    setup : Setup
        Says whether bad channels are rebuilt, and which are bad by hand.
    found : bool array, shape (n_used,)
        From `found_bad`.
    """
    n, bad = setup.used.size, setup.bad | found
    nothing = np.zeros((0, n))
    places = places_of(setup)
    placed = setup.eeg & np.isfinite(places).all(axis=1)
    rows, good = np.flatnonzero(placed & bad), np.flatnonzero(placed & ~bad)
    if not setup.rebuilds or not rows.size or good.size < LEAST_GOOD:
        return Rebuilding(rows[:0], nothing, nothing.astype(np.bool_))
    weights, sources = np.zeros((rows.size, n)), np.zeros((rows.size, n), dtype=np.bool_)
    weights[:, good] = spline_weights(places[good], places[rows])
    sources[:, good] = sources_that_matter(weights[:, good])
    return Rebuilding(rows, weights, sources)


def places_of(setup: Setup) -> NDArray[np.float64]:
    """Give the used channels' places from the centre of the head, shape (n_used, 3); NaN where unknown."""
    unknown = (np.nan, np.nan, np.nan)
    places = np.array([c.position_m or unknown for c in setup.channels], dtype=np.float64)
    known = setup.eeg & np.isfinite(places).all(axis=1)
    moved = places - sphere_centre(places[known])
    # A place at the centre itself has no direction.
    moved[~(np.linalg.norm(moved, axis=1) > 0.0)] = np.nan
    return np.asarray(moved)


def evidence(judgement: Judgement | None, place: int) -> list[str]:
    """Say what speaks against one channel: value, limit and in how many windows; the reasons first.

    Parameters
    ----------
    judgement : Judgement or None
        From the estimates.
    place : int
        Of the channel among the used ones.
    """
    if judgement is None:
        return []
    lines: list[tuple[bool, str]] = []
    for one in judgement.criteria:
        if not one.n_over[place]:
            continue
        flagged = bool(judgement.flagged(one)[place])
        value = one.value[place] if flagged else one.worst[place]
        lines.append(
            (not flagged, f"{one.label.value}: {_measured(one, value)} {_windows(one, judgement, place)}")
        )
    return [line for _, line in sorted(lines, key=lambda one: one[0])]


def _measured(one: Criterion, value: float) -> str:
    if one.label in (Label.UNLIKE, Label.UNPREDICTED):
        return f"correlation {value:.2f}, limit {one.limit:.2f}"
    if one.label is Label.LOUD_OR_DEAD and value <= -one.limit:
        return f"below {DEAD_SHARE:.0%} of the usual amplitude"
    return f"{value:.1f} robust deviations above the median channel, limit {one.limit:.0f}"


def _windows(one: Criterion, judgement: Judgement, place: int) -> str:
    return f"(in {one.n_over[place]} of {judgement.n_windows} windows)"


def reasons(judgement: Judgement | None, place: int) -> list[str]:
    """Name the labels for which a channel is found bad."""
    if judgement is None:
        return []
    return [one.label.value for one in judgement.criteria if judgement.flagged(one)[place]]


def channel_notes(setup: Setup, judgement: Judgement | None) -> list[str]:
    """Say what was found: bad channels with their reasons, those that cannot be rebuilt, bridged pairs.

    Parameters
    ----------
    setup : Setup
        Names the channels.
    judgement : Judgement or None
        From the estimates.
    """
    found = found_bad(setup, judgement)
    names = [channel.name for channel in setup.channels]
    notes = [
        f"{names[i]} was found bad: {'; '.join(evidence(judgement, i))}"
        for i in np.flatnonzero(found).tolist()
    ]
    if setup.rebuilds:
        left = (setup.bad | found) & setup.eeg
        left[rebuilding(setup, found).rows] = False
        notes += [
            f"{names[i]} is bad and not rebuilt: its place is unknown, or too few are good"
            for i in np.flatnonzero(left).tolist()
        ]
    if not setup.averages:
        notes += [
            f"{names[i]} was found bad and is part of the reference that the plan names"
            for i in np.flatnonzero(setup.reference_from[: found.size] & found).tolist()
        ]
    pairs = () if judgement is None else judgement.bridged
    notes += [f"{names[a]} and {names[b]} record the same: their electrodes may be bridged" for a, b in pairs]
    return notes


def save_judgement(judgement: Judgement, group: Any) -> None:
    """Write a judgement into a group of an HDF5 file."""
    group.attrs["n_windows"] = judgement.n_windows
    group["amplitude_v"] = judgement.amplitude_v
    group["bridged"] = np.array(judgement.bridged, dtype=np.int64).reshape(-1, 2)
    for one in judgement.criteria:
        own = group.create_group(one.label.value)
        own.attrs["limit"] = one.limit
        own["value"], own["worst"], own["n_over"] = one.value, one.worst, one.n_over


def load_judgement(group: Any) -> Judgement:
    """Read what `save_judgement` wrote."""
    return Judgement(
        n_windows=int(group.attrs["n_windows"]),
        amplitude_v=group["amplitude_v"][()],
        criteria=tuple(
            Criterion(
                label,
                group[label.value]["value"][()],
                group[label.value]["worst"][()],
                float(group[label.value].attrs["limit"]),
                group[label.value]["n_over"][()],
            )
            for label in Label
            if label.value in group
        ),
        bridged=tuple((int(a), int(b)) for a, b in group["bridged"][()]),
    )
