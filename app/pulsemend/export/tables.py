"""The tables of a set: tabs between cells, LF after lines, "n/a" where there is nothing."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path

from pulsemend.export.contents import SetContents
from pulsemend.model.epochs import NOT_AVAILABLE
from pulsemend.units import s_to_ms, v_to_uv

_BREAKS = re.compile(r"[\x00-\x1f\x7f\x85\u2028\u2029]+")

Table = Mapping[str, tuple[str, ...]]


def cell(value: object) -> str:
    """Write a value as one cell: line breaks and tabs made blanks, numbers with every digit they need.

    Parameters
    ----------
    value : object
        Text, number, flag or None.
    """
    text = "" if value is None else _BREAKS.sub(" ", str(value)).strip()
    return NOT_AVAILABLE if text in ("", "nan") else text


def table_text(columns: Sequence[str], rows: Iterable[Sequence[object]]) -> str:
    """Write a table as text.

    Parameters
    ----------
    columns : sequence of str
        Their names.
    rows : iterable of sequence
        One value per column.
    """
    lines = [columns, *rows]
    return "".join("\t".join(cell(value) for value in line) + "\n" for line in lines)


def read_table(path: Path) -> Table:
    """Read the columns of a table by name.

    Parameters
    ----------
    path : Path
        The file.

    Raises
    ------
    OSError, ValueError
        The file is missing, or is no table.
    """
    lines = path.read_bytes().decode().split("\n")
    if lines.pop() or not lines:
        raise ValueError(f"{path.name} ends inside a line")
    rows = [line.split("\t") for line in lines]
    for number, row in enumerate(rows, start=1):
        if len(row) != len(rows[0]):
            raise ValueError(
                f"{path.name}, line {number}: {len(row)} cells, the first line has {len(rows[0])}"
            )
    if len(set(rows[0])) != len(rows[0]):
        raise ValueError(f"{path.name}: two columns have the same name")
    return {column: tuple(row[place] for row in rows[1:]) for place, column in enumerate(rows[0])}


def epochs_text(contents: SetContents) -> str:
    """`epochs.tsv`: one row per kept epoch, in the order of the containers."""
    more = contents.label_columns
    columns = ("index", "onset_s", "name", "trial", "piece", "anchor", "start_s", "shift_s")
    rows = [
        (
            index,
            epoch.onset_s,
            epoch.candidate.rule,
            epoch.candidate.trial,
            epoch.candidate.piece,
            epoch.candidate.anchor,
            epoch.start_s,
            epoch.shift_s,
            *(epoch.candidate.labels.get(column) for column in more),
            epoch.replaced_share,
            *((epoch.decay_share,) if contents.decay_fitted else ()),
            epoch.leak,
            *((_seconds(epoch.mirror_latencies_s),) if contents.mirror_gaps else ()),
        )
        for index, epoch in enumerate(contents.epochs)
    ]
    decay = ("decay_share",) if contents.decay_fitted else ()
    mirror = ("mirror_latency_s",) if contents.mirror_gaps else ()
    return table_text((*columns, *more, "replaced_share", *decay, "leak", *mirror), rows)


def _seconds(latencies_s: Sequence[float]) -> str:
    return ", ".join(f"{latency_s:.6f}" for latency_s in latencies_s)


def ledger_text(contents: SetContents) -> str:
    """`ledger.tsv`: one row per candidate with its fate."""
    more = contents.label_columns
    rows = [
        (
            row.rule,
            row.trial,
            row.piece,
            row.anchor,
            None if row.anchor_sample is None else row.anchor_sample / contents.recorded_rate_hz,
            row.start_s,
            row.fate,
            row.detail,
            *(row.labels.get(column) for column in more),
        )
        for row in contents.ledger
    ]
    return table_text(
        ("name", "trial", "piece", "anchor", "onset_s", "start_s", "fate", "detail", *more), rows
    )


def pulses_text(contents: SetContents) -> str:
    """`pulses.tsv`: one row per pulse; latency is onset minus marker."""
    rate_hz = contents.recorded_rate_hz
    rows = [
        (
            index,
            pulse.sample / rate_hz,
            pulse.sample,
            pulse.marked,
            None if pulse.marked is None else round(s_to_ms((pulse.sample - pulse.marked) / rate_hz), 6),
            pulse.state,
            pulse.kind,
            None if pulse.amplitude_v is None else round(v_to_uv(pulse.amplitude_v), 3),
            *(texts[index] for texts in contents.pulse_columns.values()),
        )
        for index, pulse in enumerate(contents.pulses)
    ]
    columns = ("index", "onset_s", "sample", "marker_sample", "latency_ms", "state", "kind", "amplitude_uv")
    return table_text((*columns, *contents.pulse_columns), rows)


def channels_text(contents: SetContents) -> str:
    """`channels.tsv`: name, type, units, status, position, and what the recorder did before us."""
    rows = [
        (
            channel.name,
            channel.type.value.upper(),
            "V",
            channel.status,
            channel.status_note,
            *(channel.position_m or (None, None, None)),
            channel.impedance_ohm,
            channel.hardware_highpass_hz,
            channel.hardware_lowpass_hz,
            channel.recorded_reference,
        )
        for channel in contents.channels
    ]
    columns = ("name", "type", "units", "status", "status_description", "x_m", "y_m", "z_m")
    recorder = ("impedance_ohm", "hardware_highpass_hz", "hardware_lowpass_hz", "recorded_reference")
    return table_text((*columns, *recorder), rows)
