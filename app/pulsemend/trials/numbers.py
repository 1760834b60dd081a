"""Codes that are numbers: taken apart, and written again with another number."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass

from pulsemend.model.numbers import bit_field, number_of

__all__ = ["Writing", "bit_field", "is_lone_letter", "number_of", "with_number", "writing_of"]

_DIGITS = re.compile(r"(\s*)(\d+)$")
_LONE_LETTER = re.compile(r"(?:.*[\W_])?[^\W\d_]")
_PADDED = 3  # digits that a number takes where it is padded with blanks: "S  1", "S 21", "S129"


@dataclass(frozen=True)
class Writing:
    """How the codes of one prefix are written.

    Parameters
    ----------
    prefix : str
        What stands before the number.
    gap : str
        What stands between prefix and number: nothing or one blank.
    zeros : int
        Digits that the number is filled to with zeros; 0: none.
    padded : bool
        Whether the number was padded to three digits with blanks, so that shorter ones have a gap.
    """

    prefix: str
    gap: str = ""
    zeros: int = 0
    padded: bool = False

    def __call__(self, number: int) -> str:
        """Write the code with this number."""
        text = str(number).zfill(self.zeros)
        gap = " " if self.padded and len(text) < _PADDED else self.gap
        return f"{self.prefix}{gap}{text}"


def is_lone_letter(prefix: str) -> bool:
    """Whether a prefix is a single letter, as before the levels of a port ("S 21"), or ends in one."""
    return _LONE_LETTER.fullmatch(prefix) is not None


def writing_of(prefix: str, codes: Iterable[str]) -> Writing:
    """Tell from the codes of one prefix how they are written.

    Runs of blanks are one in a code, so "S  1" and "S 21" have the same gap as "item 21". After a single
    letter a number without a gap is taken for padded if no shorter one shows otherwise: "S129" belongs to
    "S 1".

    Parameters
    ----------
    prefix : str
        What stands before the number.
    codes : iterable of str
        Codes of this prefix; others are passed over.
    """
    shapes = set()
    zeros = 0
    for code in codes:
        found = number_of(code)
        ending = _DIGITS.search(code)
        if found is None or ending is None or found[0] != prefix:
            continue
        gap, digits = ending.groups()
        shapes.add((bool(gap), len(digits) >= _PADDED))
        if digits.startswith("0") and len(digits) > 1:
            zeros = max(zeros, len(digits))
    if not prefix:
        return Writing("", zeros=zeros)
    if (False, False) in shapes:
        return Writing(prefix, zeros=zeros)
    is_padded = (True, False) in shapes and (False, True) in shapes
    if zeros == 0 and (True, True) not in shapes and (is_padded or is_lone_letter(prefix)):
        return Writing(prefix, padded=True)
    return Writing(prefix, gap=" " if any(gap for gap, _ in shapes) else "", zeros=zeros)


def with_number(code: str, number: int, others: Iterable[str] = ()) -> str:
    """Write a code with another number, as the recording's other codes of its prefix are written.

    Parameters
    ----------
    code : str
        A code with a number, e.g. "S129".
    number : int
        Not negative.
    others : iterable of str
        The recording's codes; those of other prefixes are passed over.

    Returns
    -------
    str
        E.g. "S 1".

    Raises
    ------
    ValueError
        The code holds no number.
    """
    found = number_of(code)
    if found is None:
        raise ValueError(f"no number in {code!r}")
    return writing_of(found[0], (code, *others))(number)
