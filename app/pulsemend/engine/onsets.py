"""When a stimulus really appeared: onsets measured in the channel of a photodiode or a microphone."""

from __future__ import annotations

import math
import statistics
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import InputError
from pulsemend.model.epochs import nearest_sample
from pulsemend.model.recording import Marker, Recording
from pulsemend.model.vocabulary import OnsetUse
from pulsemend.progress import Progress, Work
from pulsemend.signal.threshold import (
    DEFAULT_RULES,
    CrossingRules,
    Crossings,
    NotFound,
    Polarity,
    find_crossings,
)
from pulsemend.units import s_to_ms

LEAST_SHARE_FOUND = 0.5
"""A code of which fewer markers show an onset is left where it is: that many are not missing by accident."""

MOST_SPREAD_S = 0.010
MOST_SPREAD_SHARE = 0.2
"""A code whose onsets spread more is left where it is; the share is that of the search. A marker that ignores
a screen's refresh of 60 Hz spreads by 4.8 ms; onsets found by chance spread by 0.29 of the search."""


@dataclass(frozen=True)
class OnsetShift:
    """How much later than its markers the stimulus of one code appeared.

    Parameters
    ----------
    channel : str
        The channel that shows it.
    code : str
    n_markers, n_found : int
        Markers of the code, and those with an onset within the search.
    shift_s : float or None
        Median over the onsets found, onset minus marker; None if there is none.
    spread_s : float or None
        Standard deviation of what remains after the shift, n - 1; None with fewer than two onsets.
    least_s, most_s : float or None
        Smallest and largest shift.
    polarity : str
        Which way the channel changes (`Polarity`).
    shifts_s : tuple of float or None
        One per marker of the code, in the order given; None where no onset was found.
    is_used : bool
        Whether markers move by it: an onset at half of the markers at least, and a spread of at most
        `MOST_SPREAD_S` and `MOST_SPREAD_SHARE` of the search.
    notes : tuple of str
        What was found missing and what follows, one sentence each.
    """

    channel: str
    code: str
    n_markers: int
    n_found: int
    shift_s: float | None
    spread_s: float | None
    least_s: float | None
    most_s: float | None
    polarity: str
    shifts_s: tuple[float | None, ...]
    is_used: bool
    notes: tuple[str, ...] = ()


def measure_onsets(
    recording: Recording,
    channel: str,
    markers: Sequence[Marker],
    search_s: tuple[float, float],
    rules: CrossingRules = DEFAULT_RULES,
) -> Work[tuple[OnsetShift, ...]]:
    """Measure when the stimuli of some codes appeared.

    Every code is judged by itself, so that one may brighten the patch of the screen and another darken it.

    Parameters
    ----------
    recording : Recording
        Read in short stretches around the markers.
    channel : str
        The channel of the photodiode or microphone.
    markers : sequence of Marker
        All markers of the codes that are measured, and no others. Never pulses.
    search_s : tuple of 2 float
        Where an onset may be, onset minus marker.
    rules : CrossingRules
        How an onset is told from noise, flicker and drift.

    Yields
    ------
    Progress

    Returns
    -------
    tuple of OnsetShift
        One per code, in order of their first markers.

    Raises
    ------
    InputError
        The recording has no such channel.
    ValueError
        The search is empty.
    """
    if not search_s[0] < search_s[1]:
        raise ValueError(f"search from {search_s[0]} s to {search_s[1]} s")
    facts = recording.facts
    names = [known.name for known in facts.channels]
    if channel not in names:
        raise InputError(
            f'no channel "{channel}" to measure onsets in',
            where=facts.stem,
            todo=f"Name the photodiode's or microphone's channel; it has {', '.join(names)}",
        )
    by_code: dict[str, list[Marker]] = {}
    for marker in markers:
        by_code.setdefault(marker.code, []).append(marker)
    shifts = []
    done = 0
    for code, same in by_code.items():
        windows, searched, expected = [], [], []
        for marker in same:
            yield Progress("measuring onsets", done, len(markers))
            done += 1
            x, first = _window(recording, names.index(channel), marker, search_s, rules)
            at = marker.sample - first
            windows.append(x)
            # Both ends count, whatever the last digit of seconds times rate.
            first_at, last_at = (at + end_s * facts.rate_hz for end_s in search_s)
            searched.append((first_at - 1e-6, last_at + 1e-6))
            expected.append(at)
        crossings = find_crossings(windows, searched, facts.rate_hz, rules)
        shifts_s = (crossings.samples - np.array(expected)) / facts.rate_hz
        shift = _summary(channel, code, shifts_s, crossings)
        shifts.append(_judged(shift, crossings, search_s))
    return tuple(shifts)


def shifted(
    markers: Sequence[Marker],
    shifts: Sequence[OnsetShift],
    use: OnsetUse,
    rate_hz: float,
) -> tuple[Marker, ...]:
    """Move the markers of measured codes to their onsets.

    Parameters
    ----------
    markers : sequence of Marker
        Those measured, in the same order, and any others: these stay.
    shifts : sequence of OnsetShift
        Codes that are not used stay, too.
    use : OnsetUse
        All markers of a code by their median, or each to its own onset, by the median where it has none.
    rate_hz : float
        Recorded sampling rate.

    Returns
    -------
    tuple of Marker
        In order of time; between samples where a median or a marker is.

    Raises
    ------
    ValueError
        A used code has other markers than were measured.
    """
    counts = Counter(marker.code for marker in markers)
    own: dict[str, list[float]] = {}
    for shift in shifts:
        if not shift.is_used or shift.shift_s is None:
            continue
        if counts[shift.code] != shift.n_markers:
            message = f'{counts[shift.code]} markers "{shift.code}", but {shift.n_markers} were measured'
            raise ValueError(message)
        each = shift.shifts_s if use is OnsetUse.EACH else [None] * shift.n_markers
        own[shift.code] = [shift.shift_s if one is None else one for one in each]
    met: Counter[str] = Counter()
    moved = []
    for marker in markers:
        if marker.code in own:
            by_s = own[marker.code][met[marker.code]]
            met[marker.code] += 1
            # To a millionth of a sample: seconds times rate would leave whole samples almost whole.
            moved.append(replace(marker, sample=round(marker.sample + by_s * rate_hz, 6)))
        else:
            moved.append(marker)
    return tuple(sorted(moved, key=lambda marker: marker.sample))


def _window(
    recording: Recording, column: int, marker: Marker, search_s: tuple[float, float], rules: CrossingRules
) -> tuple[NDArray[np.float64], int]:
    """Read one channel around a marker, up to breaks; in stored units, with the stretch's first sample."""
    facts = recording.facts
    near = nearest_sample(marker.sample)
    lo, hi = next((s for s in facts.segments if s[0] <= near < s[1]), (0, facts.n_samples))
    start = max(lo, near + math.floor((search_s[0] - rules.before_s) * facts.rate_hz))
    stop = min(hi, near + math.ceil((search_s[1] + rules.after_s) * facts.rate_hz) + 1)
    if stop <= start:
        return np.empty(0), start
    x = np.empty((stop - start, len(facts.channels)))
    recording.read(start, stop, x)
    # A copy: the other channels must not stay in memory with it.
    return x[:, column].copy(), start


def _summary(channel: str, code: str, shifts_s: NDArray[np.float64], crossings: Crossings) -> OnsetShift:
    is_found = np.isfinite(shifts_s)
    found_s: list[float] = shifts_s[is_found].tolist()
    n_found, n_markers = len(found_s), len(shifts_s)
    shift_s = statistics.median(found_s) if found_s else None
    spread_s = statistics.stdev(found_s) if n_found > 1 else None
    return OnsetShift(
        channel=channel,
        code=code,
        n_markers=n_markers,
        n_found=n_found,
        shift_s=shift_s,
        spread_s=spread_s,
        least_s=min(found_s, default=None),
        most_s=max(found_s, default=None),
        polarity=crossings.polarity.value,
        shifts_s=tuple(
            one if found else None for one, found in zip(shifts_s.tolist(), is_found.tolist(), strict=True)
        ),
        is_used=False,
    )


def _judged(shift: OnsetShift, crossings: Crossings, search_s: tuple[float, float]) -> OnsetShift:
    """Say in words what is missing, and decide whether the code's markers move."""
    missing = Counter(reason for reason in crossings.reasons if reason is not None)
    whose = f'the {shift.n_markers} markers "{shift.code}"'
    stays = "these markers stay where they are"
    if not shift.n_found:
        note = f"{shift.channel} shows no onset at any of {whose} ({_listed(missing)}): {stays}"
        return replace(shift, notes=(note,))
    notes: list[str] = []
    if missing:
        notes.append(
            f"{shift.channel} shows an onset at {shift.n_found} of {whose} (the others: {_listed(missing)})"
        )
    if shift.n_found < LEAST_SHARE_FOUND * shift.n_markers:
        note = f'onsets were found at fewer than half of the markers "{shift.code}": {stays}'
        return replace(shift, notes=(*notes, note))
    most_s = min(MOST_SPREAD_S, MOST_SPREAD_SHARE * (search_s[1] - search_s[0]))
    if shift.spread_s is not None and shift.spread_s > most_s:
        note = (
            f'the onsets of "{shift.code}" spread by {s_to_ms(shift.spread_s):.1f} ms, '
            f"more than {s_to_ms(most_s):g} ms: {stays}"
        )
        return replace(shift, notes=(*notes, note))
    if crossings.polarity is Polarity.EITHER:
        notes.append(
            f'{shift.channel} changes either way at "{shift.code}": a sound, or a patch that toggles'
        )
    return replace(shift, is_used=True, notes=tuple(notes))


def _listed(missing: Counter[NotFound]) -> str:
    return ", ".join(f"{reason.value} at {count}" for reason, count in missing.most_common())
