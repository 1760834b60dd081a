"""Annotations of EDF+ and BDF+ files, and the times of their records.

A record's annotation signal holds text: an onset with its sign, an optional duration and any number of texts
(a time-stamped annotation list, TAL). The first of each record tells only when that record starts.

References
----------
Kemp B, Olivan J (2003) European data format 'plus' (EDF+). Clin Neurophysiol 114:1755-1761.
DOI 10.1016/S1388-2457(03)00123-8
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pulsemend.errors import DamagedRecording
from pulsemend.readers.edf_header import EdfHeader

_TEXT_END, _DURATION, _LIST_END = b"\x14", b"\x15", b"\x00"
_ONSET = re.compile(rb"[+-]\d+(\.\d*)?")
_LENGTH = re.compile(rb"\d+(\.\d*)?")
_EXPORT_AGAIN = "Export the recording again"


@dataclass(frozen=True)
class Annotation:
    """One text at one time; ``text`` is empty for the entry that only tells when a record starts."""

    onset_s: float
    duration_s: float
    text: str


@dataclass(frozen=True)
class Timeline:
    """What the annotation signals of a file say.

    Parameters
    ----------
    annotations : tuple of Annotation
        Texts only, in file order; onsets in seconds since the time in the header.
    record_onsets_s : array, shape (n_records,)
        When each record starts, on the same clock.
    """

    annotations: tuple[Annotation, ...]
    record_onsets_s: NDArray[np.float64]


def parse_tals(content: bytes, where: str = "") -> list[Annotation]:
    """Read the annotation bytes of one record.

    Parameters
    ----------
    content : bytes
        The bytes of one annotation signal in one record, padding included.
    where : str
        The file's name, for errors.

    Returns
    -------
    list of Annotation
        One per text, in order; an entry without any text gives one with an empty text.

    Raises
    ------
    DamagedRecording
        An onset without sign, a number that is none, or a list without its end.
    """
    found: list[Annotation] = []
    body = content.rstrip(_LIST_END)
    if not body:
        return found
    if not body.endswith(_TEXT_END):
        raise _damaged(body, "is not finished inside its record", where)
    # Padding may stand between two lists as well as behind the last.
    for entry in filter(None, body.split(_LIST_END)):
        if not entry.endswith(_TEXT_END):
            raise _damaged(entry, "is not finished", where)
        stamp, *texts = entry[:-1].split(_TEXT_END)
        onset, has_duration, duration = stamp.partition(_DURATION)
        if not _ONSET.fullmatch(onset):
            raise _damaged(entry, "does not start with an onset and its sign", where)
        if has_duration and not _LENGTH.fullmatch(duration):
            raise _damaged(entry, "has a duration that is no plain number", where)
        length_s = float(duration) if has_duration else 0.0
        found += [Annotation(float(onset), length_s, _decoded(text)) for text in texts or [b""]]
    return found


def read_timeline(header: EdfHeader) -> Timeline:
    """Read all annotation signals of a file.

    Files without any have records that follow one another from the time in the header.

    Raises
    ------
    DamagedRecording
        A record of an interrupted file does not tell when it starts, or annotations cannot be read.
    """
    spans = _annotation_spans(header)
    where = header.path.name
    onsets_s = np.arange(header.n_records, dtype=np.float64) * header.record_s
    if not spans:
        if header.interrupted:
            raise DamagedRecording(
                "it says that it has pauses, but not where", where=where, todo=_EXPORT_AGAIN
            )
        return Timeline((), onsets_s)
    texts: list[Annotation] = []
    with header.path.open("rb") as file:
        for record in range(header.n_records):
            start = header.header_bytes + record * header.record_bytes
            lists = []
            for offset, length in spans:
                file.seek(start + offset)
                lists.append(parse_tals(file.read(length), where))
            # Only the very first entry of a record keeps time; elsewhere an empty text means nothing.
            keeper = lists[0][0] if lists[0] and not lists[0][0].text else None
            if keeper is not None and (header.interrupted or record == 0):
                onsets_s[record] = keeper.onset_s
            elif keeper is None and header.interrupted:
                raise DamagedRecording(
                    f"record {record + 1} does not tell when it starts", where=where, todo=_EXPORT_AGAIN
                )
            texts += [annotation for found in lists for annotation in found if annotation.text]
    if not header.interrupted:
        onsets_s[1:] += onsets_s[0]
    elif np.any(np.diff(onsets_s) <= 0):
        raise DamagedRecording("its records are not in order of time", where=where, todo=_EXPORT_AGAIN)
    return Timeline(tuple(texts), onsets_s)


def _annotation_spans(header: EdfHeader) -> list[tuple[int, int]]:
    """Byte offset inside a record and length of every annotation signal."""
    spans, at = [], 0
    for signal in header.signals:
        length = signal.per_record * header.sample_bytes
        if signal.holds_annotations:
            spans.append((at, length))
        at += length
    return spans


def _decoded(text: bytes) -> str:
    try:
        return text.decode("utf-8")
    except UnicodeDecodeError:
        return text.decode("latin-1")  # not allowed, yet written by older recorders


def _damaged(entry: bytes, what: str, where: str) -> DamagedRecording:
    shown = entry[:40].decode("latin-1")
    return DamagedRecording(f"annotation {shown!r} {what}", where=where, todo=_EXPORT_AGAIN)
