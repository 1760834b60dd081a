"""Times as people type them: seconds, minutes and seconds, or hours, minutes and seconds. No Qt."""

from __future__ import annotations

import re

from pulsemend.errors import InputError

_SECONDS = re.compile(r"\d+(?:[.,]\d*)?|[.,]\d+")
_CLOCK = re.compile(r"(?:(\d+):)?(\d{1,2}):(\d{1,2}(?:[.,]\d*)?)")
_TODO = "Type seconds, m:ss or h:mm:ss"


def read_time(typed: str, duration_s: float) -> float:
    """Read a typed time.

    Parameters
    ----------
    typed : str
        Such as ``754.5``, ``12:34.5`` or ``1:02:03``; a comma is a decimal point.
    duration_s : float
        Length of the recording.

    Returns
    -------
    float
        Seconds from the first sample.

    Raises
    ------
    InputError
        It is no time, or none of this recording.
    """
    text = typed.strip().removesuffix("s").rstrip()
    if not text:
        raise InputError("no time was typed", todo=_TODO)
    if _SECONDS.fullmatch(text):
        time_s = _number(text)
    elif (clock := _CLOCK.fullmatch(text)) is not None:
        hours, minutes, seconds = int(clock[1] or 0), int(clock[2]), _number(clock[3])
        if seconds >= 60 or (clock[1] is not None and minutes >= 60):
            raise InputError(f"{text} has more than 59 minutes or seconds", todo=_TODO)
        time_s = 3600 * hours + 60 * minutes + seconds
    else:
        raise InputError(f"{text} is not a time", todo=_TODO)
    if time_s > duration_s:
        raise InputError(f"the recording ends at {clock_text(duration_s)}", todo="Type an earlier time")
    return time_s


def clock_text(time_s: float) -> str:
    """Write a time as h:mm:ss, or m:ss below an hour, with tenths where there are any.

    Parameters
    ----------
    time_s : float
        Seconds, not negative.
    """
    tenths = int(time_s * 10 + 1e-6)
    minutes, tenths = divmod(tenths, 600)
    hours, minutes = divmod(minutes, 60)
    seconds = f"{tenths // 10:02d}" + (f".{tenths % 10}" if tenths % 10 else "")
    return f"{hours}:{minutes:02d}:{seconds}" if hours else f"{minutes}:{seconds}"


def _number(text: str) -> float:
    return float(text.replace(",", "."))
