"""One rule for marker codes, whatever the format."""

from __future__ import annotations

from collections.abc import Iterable

from pulsemend.model.recording import Marker


def coded(found: Iterable[tuple[float, str, str]]) -> tuple[Marker, ...]:
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


def split_at_slash(description: str) -> tuple[str, str]:
    """Split an annotation ``type/text`` at its first slash; one without a slash has no type."""
    kind, slash, text = description.partition("/")
    return (kind, text) if slash else ("", description)


def _tidy(text: str) -> str:
    return " ".join(text.split())
