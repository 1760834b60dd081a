"""The only place where volts meet microvolts, seconds milliseconds and ohms kiloohms."""

from __future__ import annotations

from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

Number = TypeVar("Number", float, NDArray[np.float32], NDArray[np.float64])

UV_PER_V = 1e6
MS_PER_S = 1e3
_US_PER_S = 1e6
_OHM_PER_KOHM = 1e3


def v_to_uv(volts: Number) -> Number:
    """Volts to microvolts."""
    return volts * UV_PER_V


def uv_to_v(microvolts: Number) -> Number:
    """Microvolts to volts."""
    return microvolts / UV_PER_V


def s_to_ms(seconds: Number) -> Number:
    """Seconds to milliseconds."""
    return seconds * MS_PER_S


def ms_to_s(milliseconds: Number) -> Number:
    """Milliseconds to seconds."""
    return milliseconds / MS_PER_S


def s_to_us(seconds: Number) -> Number:
    """Seconds to microseconds; of a ratio of times, parts per million."""
    return seconds * _US_PER_S


def ohm_to_kohm(ohms: Number) -> Number:
    """Ohms to kiloohms."""
    return ohms / _OHM_PER_KOHM
