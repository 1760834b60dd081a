"""The table of electrodes beside a recording: positions and impedances."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import replace
from pathlib import Path

import numpy as np

from pulsemend.errors import DamagedRecording
from pulsemend.model.recording import Channel
from pulsemend.readers.channels_table import Described
from pulsemend.readers.common import missing, power_of_ten
from pulsemend.readers.names import Position, standard_positions
from pulsemend.readers.tables_beside import decoded, read_rows

_METRES = {"m": 0, "cm": -2, "mm": -3}
_UNITS_KEY = "EEGCoordinateUnits"
_FURTHEST_M = 0.5  # from the origin, wherever in a head that lies


def place_electrodes(path: Path, coordinates: Path | None, channels: tuple[Channel, ...]) -> Described:
    """Give channels the position and impedance that a table of electrodes has for them.

    Parameters
    ----------
    path : Path
        The table.
    coordinates : Path or None
        The description of its axes and units; without it, positions have no meaning and are not taken.
    channels : tuple of Channel
        Of the recording.

    Raises
    ------
    MissingPart, DamagedRecording
        Table or description cannot be read whole.
    """
    rows = read_rows(path, ["name", "x", "y", "z"])
    written: dict[str, Position] = {}
    impedances: dict[str, float] = {}
    for row in rows:
        name = row.text("name")
        if not name or name in written:
            raise row.refused(f"electrode {name} stands there twice" if name else "it names no electrode")
        x, y, z = (row.number(axis) for axis in "xyz")
        if x is not None and y is not None and z is not None:
            written[name] = (x, y, z)
        if (kiloohm := row.number("impedance")) is not None:
            impedances[name] = kiloohm / power_of_ten(-3)
    if coordinates is None:
        why = "there is no description of its axes and units (_coordsystem.json)"
        return _without_positions(path, channels, why)
    unit = _unit(coordinates)
    if unit not in _METRES:
        why = f"{coordinates.name} gives {_UNITS_KEY} as {unit or 'nothing'}"
        return _without_positions(path, channels, why)
    factor = power_of_ten(_METRES[unit])
    metres = {name: (x * factor, y * factor, z * factor) for name, (x, y, z) in written.items()}
    far = [name for name, place in metres.items() if max(map(abs, place)) > _FURTHEST_M]
    if far:
        why = f"{far[0]} would lie more than half a metre away (is {unit} right?)"
        return _without_positions(path, channels, why)
    places, turns = _as_named(metres)
    found = [channel.name for channel in channels if channel.name in places]
    notes = [f"Positions from {path.name}: {len(found)} channels."]
    if turns:
        notes.append(
            f"The axes of {path.name} were turned by {90 * turns} degrees around the vertical, "
            "so that electrodes lie where their names say."
        )
    placed = tuple(
        replace(
            channel,
            position_m=places.get(channel.name, channel.position_m),
            impedance_ohm=impedances.get(channel.name, channel.impedance_ohm),
        )
        for channel in channels
    )
    return Described(placed, tuple(notes), used=True)


def _without_positions(path: Path, channels: tuple[Channel, ...], why: str) -> Described:
    note = f"{path.name} is not used, because {why}; positions then go by file and names."
    return Described(channels, (note,), used=False)


def _unit(coordinates: Path) -> str:
    try:
        tree = json.loads(decoded(coordinates.read_bytes()))
    except OSError as error:
        raise missing(coordinates, error) from error
    except (ValueError, RecursionError) as error:
        told = " ".join(str(error).split())
        raise DamagedRecording(
            f"it is not JSON ({told})", where=coordinates.name, todo="Correct the file, or remove it"
        ) from error
    unit = tree.get(_UNITS_KEY) if isinstance(tree, dict) else None
    return unit.strip() if isinstance(unit, str) else ""


def _as_named(places: Mapping[str, Position]) -> tuple[Mapping[str, Position], int]:
    """Turn positions so that the first axis goes right and the second to the front.

    Some systems count front and left instead. Their names are many, the electrodes' own names are few: those
    of the extended 10-20 system show by which quarter turn the axes must be turned.
    """
    sites = standard_positions(places)
    if len(sites) < 3:
        return places, 0
    ideal = np.array([complex(*sites[name][:2]) for name in sites])
    given = np.array([complex(*places[name][:2]) for name in sites])
    turns = int(np.argmax([np.real(np.sum(given * 1j**turn * ideal.conj())) for turn in range(4)]))
    if not turns:
        return places, 0
    return {name: _turned(place, turns) for name, place in places.items()}, turns


def _turned(place: Position, turns: int) -> Position:
    x, y, z = place
    for _ in range(turns):
        x, y = -y, x
    return x, y, z
