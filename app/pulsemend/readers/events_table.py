"""The table of events beside a recording: its rows are markers, told apart from those of the file itself."""

from __future__ import annotations

import math
import re
from bisect import bisect_left
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from statistics import fmean

from pulsemend.model.recording import Marker
from pulsemend.readers.codes import Found, coded, set_aside, split_at_slash, whole_if_close
from pulsemend.readers.tables_beside import Row, read_rows

_WHOLE = re.compile(r"^(\d+)\.0*$")  # programs write 11 as 11.0 where another row of the column has no value
_SAME_WITHIN = 1.0 + 1e-6  # samples between a marker of the file and its row
_EXACT_WITHIN = 1e-6
_TIGHT = 0.02  # samples; what an exact onset may miss
_ENOUGH = 5  # markers on either side; with fewer, a few comments in the file would outvote a whole table


@dataclass(frozen=True)
class MergedMarkers:
    """Markers of file and table together.

    Parameters
    ----------
    markers : tuple of Marker
        In order of time.
    joints : tuple of int
        First samples of further contiguous segments.
    notes : tuple of str
    used : bool
        Whether the table gave anything.
    """

    markers: tuple[Marker, ...]
    joints: tuple[int, ...]
    notes: tuple[str, ...]
    used: bool


def merge_events(path: Path, of_file: tuple[Marker, ...], rate_hz: float, n_samples: int) -> MergedMarkers:
    """Put the rows of a table of events in place of the file's markers at the same samples.

    A row's code is its `trial_type`, or its `value` where it has none. Markers of the file that no row names
    stay. A row that stands for a marker of the file keeps the marker's own sample. Where most rows disagree
    with the file, all markers would stand there twice, so the table is not used.

    Parameters
    ----------
    path : Path
        The table.
    of_file : tuple of Marker
        Markers of the file itself, in order of time.
    rate_hz : float
        Of the recording.
    n_samples : int
        Of the recording.

    Raises
    ------
    MissingPart, DamagedRecording
        The table cannot be read whole.
    """
    rows = read_rows(path, ["onset"])
    if rows and not {"trial_type", "value"} & set(rows[0].cells):
        note = f"{path.name} has neither trial_type nor value, so no marker is taken from it."
        return MergedMarkers(of_file, (), (note,), used=False)
    samples, notes = _samples(path.name, rows, rate_hz)
    found: list[Found] = []
    nameless = outside = 0
    for row, sample in zip(rows, samples, strict=True):
        text = row.text("trial_type") or _WHOLE.sub(r"\1", row.text("value"))
        if not 0 <= sample <= n_samples - 1:
            outside += 1
        elif not text:
            nameless += 1
        else:
            found.append((sample, *split_at_slash(text)))
    kept, joints, n_sync = set_aside(found)
    of_table = coded(kept)
    replaced = _pairs(of_table, of_file)
    smaller = min(len(of_table), len(of_file))
    if smaller >= _ENOUGH and 2 * len(replaced) < smaller:
        note = (
            f"{path.name} is not used, because it does not agree with the file's own markers: only "
            f"{len(replaced)} of its {len(of_table)} rows lie at the sample of one of {len(of_file)} markers."
        )
        return MergedMarkers(of_file, (), (note,), used=False)
    stay = [marker for place, marker in enumerate(of_file) if place not in replaced.values()]
    placed = [
        Marker(of_file[replaced[i]].sample, marker.code, marker.type) if i in replaced else marker
        for i, marker in enumerate(of_table)
    ]
    counts = [
        f"Markers from {path.name}: {len(of_table)}, coded by trial_type, or value where that is n/a",
        f"markers of the file at the same sample, dropped as their duplicates: {len(replaced)}",
        f"markers of the file that it does not list, kept: {len(stay)}" if stay else "",
        f"rows of the amplifier's clock (SyncStatus), left out: {n_sync}" if n_sync else "",
        f"rows without a code, left out: {nameless}" if nameless else "",
        f"rows outside the recorded samples, left out: {outside}" if outside else "",
    ]
    return MergedMarkers(
        markers=tuple(sorted([*stay, *placed], key=lambda marker: marker.sample)),
        joints=tuple(sorted(joint for joint in joints if 0 < joint < n_samples)),
        notes=("; ".join(filter(None, counts)) + ".", *notes),
        used=True,
    )


def _samples(name: str, rows: Sequence[Row], rate_hz: float) -> tuple[list[float], list[str]]:
    """Sample of every row, by its onset; a column of samples that agrees with the onsets is exact."""
    onsets = [_onset(row) * rate_hz for row in rows]
    step = 10.0 ** -max((_decimals(row.text("onset")) for row in rows), default=0)
    rounding = step * rate_hz / 2
    by_onset = [whole_if_close(at, min(max(rounding, _EXACT_WITHIN), 0.5)) for at in onsets]
    written = [row.number("sample") for row in rows]
    differences = [w - at for w, at in zip(written, onsets, strict=True) if w is not None]
    if not differences:
        coarse = (
            [f"Onsets in {name} may be rounded, by up to {rounding:.1f} samples."] if rounding > 0.5 else []
        )
        return by_onset, coarse if rows else []
    if _majority(differences, _TIGHT) is not None:
        rounding = 0.0  # "0.2" is as exact as "0.2000" where the samples say so
    first = _first_number(differences, rounding)
    if first is None:
        return by_onset, [
            f"The column sample of {name} is not used: it counts neither from 0 nor from 1 as its onsets do."
        ]
    samples, against = [], []
    for row, at, near, number in zip(rows, onsets, by_onset, written, strict=True):
        agrees = number is not None and abs(number - first - at) <= rounding + 0.5 + _EXACT_WITHIN
        samples.append(number - first if number is not None and agrees else near)
        if number is not None and not agrees:
            against.append(row.line)
    notes = [f"The column sample of {name} counts from {first}, as its onsets show."]
    if against:
        lines = ", ".join(map(str, against[:5])) + (", ..." if len(against) > 5 else "")
        notes.append(
            f"In {len(against)} rows of {name} the column sample contradicts the onset, which counts: "
            f"line {lines}."
        )
    return samples, notes


def _first_number(differences: Sequence[float], rounding: float) -> int | None:
    """Tell whether samples count from 0 or 1 by their distances from the onsets; None if neither."""
    if rounding <= 0.5:
        return _majority(differences, 0.5)
    # Onsets rounded to more than a sample: no row can tell, but the mean of many can.
    mean = fmean(differences)
    unsure = 3 * rounding / math.sqrt(3 * len(differences))
    return next((first for first in (0, 1) if abs(mean - first) + unsure < 0.5), None)


def _majority(differences: Sequence[float], within: float) -> int | None:
    """Tell whether most distances are 0 or 1, give or take."""
    for first in (0, 1):
        if 2 * sum(abs(one - first) <= within for one in differences) > len(differences):
            return first
    return None


def _pairs(of_table: Sequence[Marker], of_file: Sequence[Marker]) -> dict[int, int]:
    """Pair rows with markers of the file, one to one, nearest first, the same code before another."""
    times = [marker.sample for marker in of_file]
    near = []
    for i, row in enumerate(of_table):
        j = bisect_left(times, row.sample - _SAME_WITHIN)
        while j < len(times) and times[j] <= row.sample + _SAME_WITHIN:
            near.append((abs(times[j] - row.sample), of_file[j].code != row.code, i, j))
            j += 1
    pairs: dict[int, int] = {}
    taken: set[int] = set()
    for _, _, i, j in sorted(near):
        if i not in pairs and j not in taken:
            pairs[i] = j
            taken.add(j)
    return pairs


def _onset(row: Row) -> float:
    onset_s = row.number("onset")
    if onset_s is None:
        raise row.refused("it has no onset")
    return onset_s


def _decimals(text: str) -> int:
    """Digits behind the point; many for a number with an exponent."""
    return 9 if "e" in text.lower() else len(text.partition(".")[2])
