"""The behavioural log of a task program: its table, its times, and how it was joined with a recording."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

Seconds = TypeVar("Seconds", float, NDArray[np.float64])


@dataclass(frozen=True)
class LogTable:
    """A log as text, exactly as its file has it.

    Parameters
    ----------
    name : str
        The file's name without its folder.
    columns : tuple of str
        Column names, none twice, none empty.
    rows : tuple of tuple of str
        Cells, ends trimmed; every row as long as `columns`.
    lines : tuple of int
        Line of the file, from 1, on which each row begins.
    sha256 : str
        Of the file's bytes.
    decimal_comma : tuple of str
        Columns whose numbers have a decimal comma.
    notes : tuple of str
        What was taken for granted on reading, one sentence each without a final stop.
    """

    name: str
    columns: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    lines: tuple[int, ...]
    sha256: str
    decimal_comma: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class LogTimes:
    """What of a log is joined with a recording: one entry per row, places count from 0.

    Parameters
    ----------
    name : str
        What messages call the log.
    times_s : tuple of float or None
        Time of each row on the log's own clock.
    numbers : tuple of int or None
        Trial number of each row; empty if the log has none.
    rows : tuple of int
        What each row is called, from 1; empty where all rows of the file are there.
    """

    name: str
    times_s: tuple[float | None, ...]
    numbers: tuple[int | None, ...] = ()
    rows: tuple[int, ...] = ()

    def row_name(self, row: int) -> str:
        """Name a row by its number below the header, as a spreadsheet without it does."""
        return f"row {self.row_number(row)}"

    def row_number(self, row: int) -> int:
        """Give the number of a row below the header, from 1."""
        return self.rows[row] if self.rows else row + 1

    def number(self, row: int) -> int | None:
        """Trial number of a row."""
        return self.numbers[row] if self.numbers else None


@dataclass(frozen=True)
class TrialTime:
    """What a log row can belong to: a trial of the recording, or one of its slots.

    Parameters
    ----------
    name : str
        What messages call it, e.g. "trial 3" or "trial 3 cue1".
    time_s : float or None
        Its instant in the recording; None if its slot is missing.
    number : int or None
        Trial number that the recording itself carries, if it does.
    """

    name: str
    time_s: float | None
    number: int | None = None


@dataclass(frozen=True)
class ClockFit:
    """A straight line from the log's clock to the recording's.

    ``recorded = log + offset_s + drift * (log - centre_s)``. The centre is the mean log time of the pairs
    fitted: there the errors of offset and drift are independent of each other.

    Parameters
    ----------
    centre_s : float
        Log time at which the offset holds.
    offset_s, offset_se_s : float
        Recording minus log there, and its standard error.
    drift, drift_se : float
        Length of a log second in seconds of the recording, minus 1, and its standard error.
    residual_sd_s : float
        Spread of the pairs about the line, n - 2 degrees of freedom.
    n : int
        Pairs fitted.
    """

    centre_s: float
    offset_s: float
    drift: float
    offset_se_s: float
    drift_se: float
    residual_sd_s: float
    n: int

    def recorded_s(self, log_s: Seconds) -> Seconds:
        """Convert times of the log to times of the recording."""
        return log_s + self.offset_s + self.drift * (log_s - self.centre_s)


@dataclass(frozen=True)
class Doubt:
    """Rows and trials that were not joined because more than one way of joining them is possible.

    Parameters
    ----------
    rows, trials : tuple of int
        Their places, from 0.
    why : str
        One sentence without a final stop.
    """

    rows: tuple[int, ...]
    trials: tuple[int, ...]
    why: str


@dataclass(frozen=True)
class LogJoin:
    """How a log was joined with the trials of a recording. Every row and every trial is in exactly one list.

    Parameters
    ----------
    pairs : tuple of (int, int)
        Place of the row and of the trial it belongs to, in order of rows. Empty: nothing was joined.
    rows_alone, trials_alone : tuple of int
        Rows without a trial and trials without a row.
    doubtful : tuple of Doubt
        What might belong together.
    clock : ClockFit or None
        The fitted clock, where times were joined.
    by : str
        "time", "number", "number and time", "order", or "" where nothing was joined.
    by_order : tuple of (int, int)
        Those of `pairs` that rest on their place between two neighbours alone, for want of a time.
    words : str
        All of this for a person to read; where nothing was joined, one sentence that says why.
    """

    pairs: tuple[tuple[int, int], ...]
    rows_alone: tuple[int, ...]
    trials_alone: tuple[int, ...]
    doubtful: tuple[Doubt, ...]
    clock: ClockFit | None
    by: str
    by_order: tuple[tuple[int, int], ...]
    words: str
