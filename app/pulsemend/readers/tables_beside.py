"""Tables beside a recording: which there are, and their rows, read whole or refused with file and line.

The names and columns follow the standard for folders of recordings.

References
----------
Pernet CR et al. (2019) EEG-BIDS, an extension to the brain imaging data structure for electroencephalography.
Sci Data 6:103. DOI 10.1038/s41597-019-0104-8
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path

from pulsemend.errors import DamagedRecording
from pulsemend.readers.common import missing, stem_of

NOTHING = ("", "n/a")
_CORRECT = "Correct the table, or put it somewhere else"


@dataclass(frozen=True)
class TablesBeside:
    """Paths of the tables that belong to a recording; None where there is none.

    Parameters
    ----------
    events, channels, electrodes, coordinates : Path or None
    notes : tuple of str
        Why a table was not taken.
    """

    events: Path | None = None
    channels: Path | None = None
    electrodes: Path | None = None
    coordinates: Path | None = None
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class Row:
    """One row of a table, with its place for errors.

    Parameters
    ----------
    table : str
        The file's name.
    line : int
        From 1, the line of column names.
    cells : mapping of str to str
        By column, in lower case.
    """

    table: str
    line: int
    cells: Mapping[str, str]

    def text(self, column: str) -> str:
        """Text of a cell; empty where there is no such column or nothing in it."""
        text = self.cells.get(column, "")
        return "" if text.lower() in NOTHING else text

    def number(self, column: str) -> float | None:
        """Read the number in a cell; None where there is nothing.

        Raises
        ------
        DamagedRecording
            It is none, or not finite.
        """
        text = self.text(column)
        if not text:
            return None
        try:
            value = float(text)
        except ValueError:
            raise self.refused(f"{column} is not a number: {text}") from None
        if not math.isfinite(value):
            raise self.refused(f"{column} is {text}")
        return value

    def refused(self, what: str) -> DamagedRecording:
        """Refuse the table because of this row."""
        return DamagedRecording(what, where=f"{self.table}, line {self.line}", todo=_CORRECT)


def tables_beside(path: Path) -> TablesBeside:
    """Find the tables of a recording.

    Events and channels bear the recording's own name. Electrodes may leave out parts of it that do not name
    the person (task, run), or add in which space they are.

    Parameters
    ----------
    path : Path
        The recording.
    """
    stem = stem_of(path)
    events, channels = (path.with_name(f"{stem}_{kind}.tsv") for kind in ("events", "channels"))
    electrodes, notes = _electrodes(path.parent, stem)
    return TablesBeside(
        events=events if events.is_file() else None,
        channels=channels if channels.is_file() else None,
        electrodes=electrodes,
        coordinates=_coordinates(electrodes) if electrodes else None,
        notes=tuple(notes),
    )


def _electrodes(folder: Path, stem: str) -> tuple[Path | None, list[str]]:
    whole = stem.split("_")
    fitting: dict[Path, int] = {}
    for file, parts in _named(folder, "_electrodes.tsv"):
        own = [part for part in parts if not part.startswith("space-")]
        if own[:1] == whole[:1] and set(own) <= set(whole):
            fitting[file] = len(own)
    best = [file for file, count in fitting.items() if count == max(fitting.values())]
    if len(best) < 2:
        return (best[0] if best else None), []
    names = ", ".join(file.name for file in best)
    return None, [f"None of these tables of electrodes is taken, because they fit equally well: {names}."]


def _coordinates(electrodes: Path) -> Path | None:
    own = set(electrodes.name.removesuffix("_electrodes.tsv").split("_"))
    fitting = [
        (len(parts), file)
        for file, parts in _named(electrodes.parent, "_coordsystem.json")
        if set(parts) <= own and parts[0] in own
    ]
    return max(fitting)[1] if fitting else None


def _named(folder: Path, ending: str) -> Iterator[tuple[Path, list[str]]]:
    """Files whose names end so, each with the parts of the rest of its name."""
    for file in sorted(folder.glob(f"*{ending}")):
        yield file, file.name.removesuffix(ending).split("_")


def read_rows(path: Path, required: Iterable[str]) -> list[Row]:
    """Read a table with tabs between cells.

    Parameters
    ----------
    path : Path
        The file.
    required : iterable of str
        Columns that must be there.

    Raises
    ------
    MissingPart, DamagedRecording
        Not to be opened; a column is missing or there twice, a row has more or fewer cells.
    """
    try:
        lines = decoded(path.read_bytes()).split("\n")
    except OSError as error:
        raise missing(path, error) from error
    table = [[cell.strip() for cell in line.rstrip("\r").split("\t")] for line in lines]
    while table and table[-1] == [""]:
        table.pop()
    head = Row(path.name, 1, {})
    columns = [name.lower() for name in table[0]] if table else []
    lost = [name for name in required if name not in columns]
    if lost:
        raise head.refused(f"it has no column {lost[0]}")
    if len(set(columns)) < len(columns):
        raise head.refused("two columns have the same name")
    rows = []
    for line, cells in enumerate(table[1:], start=2):
        if len(cells) != len(columns):
            raise Row(path.name, line, {}).refused(
                f"it has {len(cells)} cells, but there are {len(columns)} columns"
            )
        rows.append(Row(path.name, line, dict(zip(columns, cells, strict=True))))
    return rows


def decoded(content: bytes) -> str:
    """Text of a file that should be UTF-8; every byte is a letter in Latin-1."""
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError:
        return content.decode("latin-1")
