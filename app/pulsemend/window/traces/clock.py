"""Times, durations and round numbers as text. No Qt."""

from __future__ import annotations

import math

from pulsemend.units import s_to_ms

MINUS = "\N{MINUS SIGN}"
_STEPS_S = (1, 2, 5, 10, 15, 30, 60, 120, 300, 600, 900, 1800, 3600, 7200, 14400, 28800, 86400)


def clock(time_s: float, decimals: int = 0) -> str:
    """Time since the start as ``m:ss`` or ``h:mm:ss``, with decimals of a second if wanted."""
    unit = 10**decimals
    whole, part = divmod(round(abs(time_s) * unit), unit)
    minutes, seconds = divmod(whole, 60)
    hours, minutes = divmod(minutes, 60)
    text = f"{hours}:{minutes:02d}:{seconds:02d}" if hours else f"{minutes}:{seconds:02d}"
    sign = MINUS if time_s < 0 and (whole or part) else ""
    return f"{sign}{text}.{part:0{decimals}d}" if decimals else f"{sign}{text}"


def duration(seconds: float) -> str:
    """Length of time in the unit that suits it."""
    size = abs(seconds)
    if size < 1:
        return f"{number(s_to_ms(seconds))} ms"
    return f"{number(seconds)} s" if size < 120 else clock(seconds)


def microvolts(value: float) -> str:
    """Microvolts, with a decimal where it says something."""
    text = f"{value:.1f}" if abs(value) < 1000 else f"{value:.0f}"
    return f"{text} µV".replace("-", MINUS)


def number(value: float) -> str:
    """Three digits at most before trailing zeros, never with an exponent."""
    digits = 0 if value == 0 else max(0, 2 - math.floor(math.log10(abs(value))))
    text = f"{value:.{digits}f}"
    if "." in text:
        text = text.rstrip("0").rstrip(".")
    return text.replace("-", MINUS)


def nice(value: float) -> float:
    """Largest of 1, 2 and 5 times a power of ten that is not above a value."""
    power = 10.0 ** math.floor(math.log10(value) + 1e-12)
    return next(factor * power for factor in (5.0, 2.0, 1.0) if factor * power <= value * (1 + 1e-9))


def nice_s(value: float) -> float:
    """Largest round length of time that is not above a value."""
    if value < 1:
        return nice(value)
    return float(max(step for step in _STEPS_S if step <= value))


def ticks(start_s: float, stop_s: float, most: int) -> tuple[list[float], int]:
    """Round times between two times.

    Parameters
    ----------
    start_s, stop_s : float
        Ends, included.
    most : int
        How many at most.

    Returns
    -------
    times_s : list of float
    decimals : int
        Decimals of a second that tell them apart.
    """
    width = (stop_s - start_s) / max(1, most)
    if width >= 1:
        step = float(next((step for step in _STEPS_S if step >= width), _STEPS_S[-1]))
    else:
        step = nice(width)
        step = step if step >= width * (1 - 1e-9) else nice(step * 2.5)
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    first, last = math.ceil(start_s / step - 1e-9), math.floor(stop_s / step + 1e-9)
    return [k * step for k in range(first, last + 1)], decimals
