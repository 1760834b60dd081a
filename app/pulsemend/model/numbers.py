"""Codes that are numbers, and fields of bits in them."""

from __future__ import annotations

import re

_NUMBER = re.compile(r"(.*?)\s*(\d{1,9})")


def number_of(code: str) -> tuple[str, int] | None:
    """Take a code apart into what stands before its number, and the number.

    Parameters
    ----------
    code : str
        E.g. "21", "S 21" or "S255".

    Returns
    -------
    (str, int) or None
        None where the code does not end in digits, or holds more of them elsewhere.
    """
    found = _NUMBER.fullmatch(code)
    if found is None or any(sign.isdigit() for sign in found[1]):
        return None
    return found[1], int(found[2])


def bit_field(number: int, low: int, high: int) -> int:
    """Value of some neighbouring bits of a number.

    Parameters
    ----------
    number : int
        Not negative.
    low, high : int
        Lowest and highest bit, from 0.
    """
    return (number >> low) & ((1 << (high - low + 1)) - 1)
