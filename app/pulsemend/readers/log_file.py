"""A behavioural log (CSV or TSV) becomes a table of texts."""

from __future__ import annotations

import codecs
import csv
import hashlib
import io
import re
from collections import Counter
from dataclasses import dataclass
from pathlib import Path

from pulsemend.errors import LogError
from pulsemend.model.log import LogTable
from pulsemend.trials.log_columns import has_decimal_comma, is_clock, is_number

_SEPARATORS = {"\t": "tab", ";": "semicolon", ",": "comma"}
_LARGEST_MIB = 100
_MIB = 1 << 20
_NO_TEXT = re.compile(r"[\x00-\x08\x0e-\x19\x1c-\x1f]")
_SAVE_AS_TEXT = "Save it as CSV or TSV, in UTF-8"


@dataclass(frozen=True)
class _Cut:
    """The text cut into cells, with the line on which each row begins."""

    rows: list[list[str]]
    lines: list[int]

    @property
    def even(self) -> bool:
        return len({len(row) for row in self.rows}) == 1


def read_log(path: Path) -> LogTable:
    """Read a log whose first line names its columns.

    Encoding: UTF-8 with or without byte order mark, UTF-16 with one, else Windows 1252, which a note says.
    Separator: the one of tab, semicolon and comma that makes rows of equal length. Cells may be quoted.
    Empty lines count for nothing. A decimal comma is recognised per column, in files not separated by commas.

    Parameters
    ----------
    path : Path
        The file, 100 MiB at most.

    Raises
    ------
    LogError
        The file cannot be opened, is too large, is no text, is empty, has no header, a column name twice
        or rows of different length.
    """
    content = _bytes_of(path)
    text, notes = _decoded(content, path.name)
    cut, separator = _cut(text, path.name)
    cut, trailing = _without_empty_end(cut)
    if trailing:
        notes.append("separators at the ends of lines are left out")
    names = _header(cut, path.name)
    _check_even(cut, path.name)
    rows = tuple(tuple(cell.strip() for cell in row) for row in cut.rows[1:])
    comma: list[str] = []
    if separator != ",":
        columns = zip(*rows, strict=True)
        comma = [name for name, values in zip(names, columns, strict=True) if has_decimal_comma(values)]
    if comma:
        notes.append(f"numbers have a decimal comma in: {', '.join(comma)}")
    if separator and not (separator == "\t" and path.suffix.lower() in (".tsv", ".tab")):
        notes.append(f"columns are separated by {_SEPARATORS[separator]}s")
    sha256 = hashlib.sha256(content).hexdigest()
    return LogTable(path.name, tuple(names), rows, tuple(cut.lines[1:]), sha256, tuple(comma), tuple(notes))


def _bytes_of(path: Path) -> bytes:
    try:
        if path.stat().st_size > _LARGEST_MIB * _MIB:
            raise LogError(
                f"it is larger than {_LARGEST_MIB} MiB, so it is no behavioural log",
                where=path.name,
                todo="Choose the log that the task program wrote",
            )
        return path.read_bytes()
    except OSError as error:
        reason = error.strerror or str(error)
        raise LogError(
            f"the log cannot be opened ({reason[:1].lower()}{reason[1:]})",
            where=path.name,
            todo="Check its name and place",
        ) from error


def _decoded(content: bytes, name: str) -> tuple[str, list[str]]:
    """Text with line feeds alone at the ends of lines, and what was taken for granted."""
    notes: list[str] = []
    if content.startswith(b"PK\x03\x04"):
        raise LogError("it is a spreadsheet or an archive, not text", where=name, todo=_SAVE_AS_TEXT)
    utf16 = content.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE))
    try:
        text = content.decode("utf-16" if utf16 else "utf-8-sig")
    except UnicodeDecodeError as error:
        western = None if utf16 else _decoded_western(content)
        if western is None:
            line = content.count(b"\n", 0, error.start) + 1
            raise LogError("it is not text", where=f"{name}, line {line}", todo=_SAVE_AS_TEXT) from error
        text = western
        notes.append("read as Windows 1252, for it is no UTF-8: look at letters beyond English")
    text = text.replace("\r\n", "\n").replace("\r", "\n")
    odd = _NO_TEXT.search(text)
    if odd:
        line = text.count("\n", 0, odd.start()) + 1
        raise LogError("it is not text", where=f"{name}, line {line}", todo=_SAVE_AS_TEXT)
    return text, notes


def _decoded_western(content: bytes) -> str | None:
    try:
        return content.decode("cp1252")
    except UnicodeDecodeError:
        return None


def _cut(text: str, name: str) -> tuple[_Cut, str]:
    """Cut the text at the separator that fits, "" if there is a single column."""
    if not text.strip():
        raise LogError("it is empty", where=name, todo="Choose the log that the task program wrote")
    cuts: dict[str, _Cut] = {}
    problem: LogError | None = None
    for separator in _SEPARATORS:
        try:
            cuts[separator] = _cut_at(text, separator, name)
        except LogError as error:
            problem = problem or error
    if not cuts and problem is not None:
        raise problem
    able = {separator: cut for separator, cut in cuts.items() if len(cut.rows[0]) > 1}
    if not able:
        if problem is not None:
            raise problem
        return cuts["\t"], ""
    best = max(
        able, key=lambda separator: (_without_empty_end(able[separator])[0].even, _share(able[separator]))
    )
    return able[best], best


def _share(cut: _Cut) -> float:
    """Share of rows as long as the header."""
    return sum(len(row) == len(cut.rows[0]) for row in cut.rows) / len(cut.rows)


def _cut_at(text: str, separator: str, name: str) -> _Cut:
    reader = csv.reader(io.StringIO(text), delimiter=separator, strict=True)
    rows: list[list[str]] = []
    lines: list[int] = []
    before = 0
    try:
        for row in reader:
            if any(cell.strip() for cell in row):
                rows.append(row)
                lines.append(before + 1)
            before = reader.line_num
    except csv.Error as error:
        raise LogError(
            "a quotation mark is not closed, or stands within a cell",
            where=f"{name}, line {before + 1}",
            todo="Close it, or double it within a quoted cell",
        ) from error
    return _Cut(rows, lines)


def _without_empty_end(cut: _Cut) -> tuple[_Cut, bool]:
    """Leave out cells beyond the last column that has a name, where all of them are empty."""
    header = cut.rows[0]
    width = max((place + 1 for place, cell in enumerate(header) if cell.strip()), default=len(header))
    beyond = [cell for row in cut.rows for cell in row[width:]]
    if not beyond or any(cell.strip() for cell in beyond):
        return cut, False
    return _Cut([row[:width] for row in cut.rows], cut.lines), True


def _header(cut: _Cut, name: str) -> list[str]:
    where = f"{name}, line {cut.lines[0]}"
    header = [cell.strip() for cell in cut.rows[0]]
    numbers = [cell for cell in header if is_number(cell.replace(",", ".")) or is_clock(cell)]
    if numbers:
        raise LogError(
            f'it has no header: "{numbers[0]}" is no name of a column',
            where=where,
            todo="Write the names of the columns into the first line",
        )
    # The first column of a table written with its row numbers often has no name.
    header = [cell or f"column {place}" for place, cell in enumerate(header, start=1)]
    twice = [cell for cell, count in Counter(header).items() if count > 1]
    if twice:
        raise LogError(
            f"columns have the same name: {', '.join(twice)}",
            where=where,
            todo="Give every column its own name",
        )
    if len(cut.rows) == 1:
        raise LogError(
            "it has a header and no rows", where=name, todo="Choose the log that the task program wrote"
        )
    return header


def _check_even(cut: _Cut, name: str) -> None:
    width = len(cut.rows[0])
    for row, line in zip(cut.rows, cut.lines, strict=True):
        if len(row) != width:
            raise LogError(
                f"this row has {len(row)} cells, the header has {width}",
                where=f"{name}, line {line}",
                todo="Every row needs as many cells as the first line, which names the columns",
            )
