"""What a file says of itself, and how it becomes a recording's facts together with the tables beside it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace
from pathlib import Path

from pulsemend.model.recording import Channel, RecordingFacts
from pulsemend.model.vocabulary import ChannelType
from pulsemend.readers.channels_table import describe_channels
from pulsemend.readers.codes import Found, coded
from pulsemend.readers.common import file_part, stem_of
from pulsemend.readers.electrodes_table import place_electrodes
from pulsemend.readers.events_table import merge_events
from pulsemend.readers.tables_beside import tables_beside


@dataclass(frozen=True)
class Source:
    """What a file says of itself, still without the events of its trigger channels.

    Parameters
    ----------
    format : str
        The kind of file, in words.
    rate_hz : float
    n_samples : int
    channels : tuple of Channel
    found : tuple of (sample, type, text)
        Marks that lie inside the recording.
    boundaries : tuple of int
    paths : tuple of Path
        Every file of the recording.
    notes : tuple of str
    left_out : tuple of str
        Names of signals that are not read.
    reference : str
        That of the whole recording, if its header names one.
    events_table : Path or None
        The table of events beside it, not yet read.
    """

    format: str
    rate_hz: float
    n_samples: int
    channels: tuple[Channel, ...]
    found: tuple[Found, ...]
    boundaries: tuple[int, ...]
    paths: tuple[Path, ...]
    notes: tuple[str, ...]
    left_out: tuple[str, ...] = ()
    reference: str = ""
    events_table: Path | None = None


def with_tables(path: Path, source: Source) -> Source:
    """Describe the channels by the tables of channels and electrodes beside a recording, and find its events.

    Parameters
    ----------
    path : Path
        The file or folder that was named.
    source : Source
        What it says of itself.

    Raises
    ------
    MissingPart, DamagedRecording
        A table cannot be read whole.
    """
    tables = tables_beside(path)
    channels, paths, notes = source.channels, list(source.paths), [*source.notes, *tables.notes]
    if tables.channels is not None:
        described = describe_channels(tables.channels, channels, source.left_out)
        channels, notes = described.channels, [*notes, *described.notes]
        paths += [tables.channels] if described.used else []
    if tables.electrodes is not None:
        placed = place_electrodes(tables.electrodes, tables.coordinates, channels)
        channels, notes = placed.channels, [*notes, *placed.notes]
        used = (tables.electrodes, tables.coordinates) if placed.used else ()
        paths += [table for table in used if table is not None]
    return replace(
        source, channels=channels, paths=tuple(paths), notes=tuple(notes), events_table=tables.events
    )


def facts_of(
    path: Path, source: Source, events: Iterable[Found] = ()
) -> tuple[RecordingFacts, tuple[Path, ...]]:
    """Give all markers their codes, merge the table of events, and put the facts together.

    Parameters
    ----------
    path : Path
        The file or folder that was named.
    source : Source
        Channels described.
    events : iterable of (sample, type, text)
        Of its trigger channels.

    Returns
    -------
    facts : RecordingFacts
    paths : tuple of Path
        Of the parts, in the same order.

    Raises
    ------
    MissingPart, DamagedRecording
        A file is gone, or the table cannot be read whole.
    """
    markers = coded([*source.found, *events])
    boundaries, notes, paths = set(source.boundaries), source.notes, source.paths
    if source.events_table is not None:
        merged = merge_events(source.events_table, markers, source.rate_hz, source.n_samples)
        markers, notes = merged.markers, (*notes, *merged.notes)
        if merged.used and source.boundaries:
            notes = (
                *notes,
                f"Onsets in {source.events_table.name} count recorded time only, without its pauses.",
            )
        boundaries |= set(merged.joints)
        paths = (*paths, source.events_table) if merged.used else paths
    facts = RecordingFacts(
        stem=stem_of(path),
        format=source.format,
        rate_hz=source.rate_hz,
        n_samples=source.n_samples,
        channels=source.channels,
        markers=markers,
        boundaries=tuple(sorted(boundaries)),
        parts=tuple(file_part(part, path if path in part.parents else None) for part in paths),
        notes=notes,
        reference=source.reference or _shared_reference(source.channels),
    )
    return facts, paths


def _shared_reference(channels: Iterable[Channel]) -> str:
    """Name the reference that all EEG channels share."""
    named = {channel.reference for channel in channels if channel.type is ChannelType.EEG}
    return named.pop() if len(named) == 1 else ""
