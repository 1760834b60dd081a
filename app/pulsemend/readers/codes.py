"""One rule for marker codes, whatever the format."""

from __future__ import annotations

import math
from collections.abc import Iterable

from pulsemend.model.recording import Marker

Found = tuple[float, str, str]
"""Sample, type, text."""

_SEGMENT, _SYNC, _SYNC_TEXT = "new segment", "syncstatus", "sync on"


def coded(found: Iterable[Found]) -> tuple[Marker, ...]:
    """Give every marker of one recording its code and put them in order of time.

    The code is the text alone, runs of blanks made one and ends trimmed; the type where there is no text.
    Where two types of this recording share a text, both become ``type:text``.

    Parameters
    ----------
    found : iterable of (sample, type, text)
        Everything the file holds; the rule needs all markers of the recording at once.

    Returns
    -------
    tuple of Marker
        Markers with neither text nor type are left out: nothing could refer to them.
    """
    tidy = [(sample, _tidy(kind), _tidy(text) or _tidy(kind)) for sample, kind, text in found]
    types_of: dict[str, set[str]] = {}
    for _, kind, text in tidy:
        types_of.setdefault(text, set()).add(kind)
    markers = [
        Marker(sample, f"{kind}:{text}" if kind and len(types_of[text]) > 1 else text, kind)
        for sample, kind, text in tidy
        if text
    ]
    return tuple(sorted(markers, key=lambda marker: marker.sample))


def set_aside(found: Iterable[Found]) -> tuple[list[Found], set[int], int]:
    """Part the markers from what only the recorder wrote for itself.

    Returns
    -------
    rest : list of (sample, type, text)
        The markers.
    joints : set of int
        Samples at which recording was started again.
    n_sync : int
        How many marks of the amplifier's clock there were.
    """
    rest: list[Found] = []
    joints: set[int] = set()
    n_sync = 0
    for sample, kind, text in found:
        words = _tidy(kind).lower(), _tidy(text).lower()
        if (words[0] or words[1]) == _SEGMENT:
            joints.add(math.ceil(sample))
        elif words[0] == _SYNC or (not words[0] and words[1] in (_SYNC, _SYNC_TEXT)):
            n_sync += 1
        else:
            rest.append((sample, kind, text))
    return rest, joints, n_sync


def sync_notes(n_sync: int) -> list[str]:
    """One note on the marks of the amplifier's clock, or none."""
    return [f"Markers of the amplifier's clock (SyncStatus), left out: {n_sync}."] if n_sync else []


def whole_if_close(sample: float, within: float) -> float:
    """Take a sample that misses a whole number by no more than its rounding as that number."""
    whole = math.floor(sample + 0.5)
    return float(whole) if abs(sample - whole) <= within else sample


def split_at_slash(description: str) -> tuple[str, str]:
    """Split an annotation ``type/text`` at its first slash; one without a slash has no type."""
    kind, slash, text = description.partition("/")
    return (kind, text) if slash else ("", description)


def _tidy(text: str) -> str:
    return " ".join(text.split())
