"""One row of a table of keys: what may stand under a key of a TOML file, and the check of a value."""

from __future__ import annotations

import difflib
import math
import re
from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from enum import Enum
from typing import TypeVar

from pulsemend.model.toml_lines import quoted

T = TypeVar("T")


class Kind(Enum):
    """The shapes of values."""

    TEXT = "text"
    NAME = "a name of letters, digits, _ and -"
    WORD = "one of the words"
    WORD_OR_TEXTS = "one of the words, or a list of texts"
    FLAG = "true or false"
    NUMBER = "a number"
    WHOLE = "a whole number"
    PAIR = "two numbers"
    SPAN = "two numbers, the second not below the first"
    WINDOW = "two numbers, the second above the first"
    TEXTS = "a list of texts"
    WORDS = "a list of words"
    WHOLES = "a list of whole numbers"
    NUMBERS = "a list of numbers"


class _Required(Enum):
    REQUIRED = "required"


REQUIRED = _Required.REQUIRED


@dataclass(frozen=True)
class Key:
    """One row of a table of keys.

    Parameters
    ----------
    path : str
        E.g. ``pulses.window_ms``, ``epochs.rule[].start_s`` (``[]``: an array of tables) or
        ``markers.*.role`` (``*``: any name).
    kind : Kind
    meaning : str
        One line for people.
    default : object
        Value where the key is absent; `REQUIRED` if it must be there.
    unit : str
    low, high : float or None
        Allowed range, both included.
    zero : bool
        Whether 0 is allowed besides the range.
    words : sequence of str
        Allowed words; an enum class makes the value its member.
    never : tuple
        Words that make no sense under this key.
    now : tuple
        The only values this version has; empty: all allowed ones.
    filled : bool
        Whether an empty text is refused.
    """

    path: str
    kind: Kind
    meaning: str
    default: object = REQUIRED
    unit: str = ""
    low: float | None = None
    high: float | None = None
    zero: bool = False
    words: Iterable[str] = ()
    never: tuple[object, ...] = ()
    now: tuple[object, ...] = ()
    filled: bool = False

    @property
    def allowed(self) -> str:
        """What may stand under the key, in words."""
        if self.now:
            return " | ".join(show(value) for value in self.now)
        words = " | ".join(show(word) for word in self.words if word not in self.never)
        if self.kind is Kind.WORD:
            return words
        if self.kind is Kind.WORD_OR_TEXTS:
            return f"{words} | a list of texts"
        if self.kind is Kind.WORDS:
            return f"a list of {words}"
        text = "text, not empty" if self.filled and self.kind is Kind.TEXT else self.kind.value
        if self.low is not None and self.high is not None:
            each = " each" if self.kind in (Kind.PAIR, Kind.SPAN, Kind.WINDOW) else ""
            unit = f" {self.unit}" if self.unit else ""
            text += f"{each} from {self.low:.12g} to {self.high:.12g}{unit}" + (", or 0" if self.zero else "")
        return text


_NAME = re.compile(r"[\w-]+")
_MANY = 80


def show(value: object) -> str:
    """Write a value as TOML would, on one line and not too long.

    Parameters
    ----------
    value : object
        As the parser or the model has it.
    """
    if isinstance(value, bool):
        text = str(value).lower()
    elif isinstance(value, str):
        text = quoted(value)
    elif isinstance(value, dict):
        text = "a table"
    elif isinstance(value, (list, tuple)):
        text = "[" + ", ".join(show(inner) for inner in value[:_MANY]) + "]"
    elif isinstance(value, int) and abs(value) >= 10**_MANY:
        text = f"a whole number of more than {_MANY} digits"
    else:
        text = str(value)
    return text if len(text) <= _MANY else text[: _MANY - 3] + "..."


def near_names(name: str, names: Iterable[str], most: int = 6) -> str:
    """Write names that are like one that was not found, or the first ones where none is; few in any case.

    Parameters
    ----------
    name : str
        What was not found.
    names : iterable of str
        What there is.
    most : int
        How many are written at most; more are told by three points.
    """
    known = list(names)
    near = difflib.get_close_matches(name, known, n=most, cutoff=0.5) or known[:most]
    return " | ".join(near) + (" | ..." if len(near) < len(known) else "")


def key_defaults(keys: Iterable[Key]) -> dict[str, object]:
    """Defaults by path, ``[]`` left out; `REQUIRED` where there is none.

    Parameters
    ----------
    keys : iterable of Key
        A table of keys.
    """
    return {key.path.replace("[]", ""): key.default for key in keys}


class Refusal(Exception):
    """A value that a key does not take: what is wrong, and at which place of a list (from 1)."""

    def __init__(self, problem: str, value: object, place: int | None = None) -> None:
        self.problem = problem
        self.value = value
        self.place = place
        super().__init__(problem)


def convert(key: Key, value: object) -> object:
    """Check a value against its key and give it the type the model uses.

    Parameters
    ----------
    key : Key
        Its row.
    value : object
        As the TOML parser gives it.

    Returns
    -------
    object
        Texts, bools, floats, ints, enum members, or tuples of these.

    Raises
    ------
    Refusal
        The key does not take it.
    """
    found = _CONVERTERS[key.kind](key, value)
    if key.now:
        for place, part in enumerate(found if isinstance(found, tuple) else (found,), start=1):
            if part not in key.now:
                raise Refusal("not in this version", part, place if isinstance(found, tuple) else None)
    return found


def _text(key: Key, value: object) -> str:
    if not isinstance(value, str):
        raise Refusal("must be text", value)
    if any(ord(sign) < 32 or ord(sign) == 127 for sign in value):
        raise Refusal("must not hold control characters", value)
    if key.filled and not value.strip():
        raise Refusal("must not be empty", value)
    return value


def _name(key: Key, value: object) -> str:
    text = _text(key, value)
    if not _NAME.fullmatch(text):
        raise Refusal("is not usable as a name", value)
    return text


def _word(key: Key, value: object) -> str:
    if not isinstance(value, str):
        raise Refusal("must be a word", value)
    for word in key.words:
        if word == value and word not in key.never:
            return word
    raise Refusal("is none of the words", value)


def _flag(key: Key, value: object) -> bool:
    if not isinstance(value, bool):
        raise Refusal("must be true or false", value)
    return value


def _whole(key: Key, value: object) -> int:
    if isinstance(value, bool) or not isinstance(value, int):
        raise Refusal("must be a whole number", value)
    _range(key, value)
    return value


def _number(key: Key, value: object) -> float:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        raise Refusal("must be a number", value)
    if isinstance(value, float) and not math.isfinite(value):
        raise Refusal("must be finite", value)
    _range(key, value)
    # A negative zero would be written back as one.
    return float(value) + 0.0


def _range(key: Key, value: float) -> None:
    if key.zero and value == 0:
        return
    if (key.low is not None and value < key.low) or (key.high is not None and value > key.high):
        raise Refusal("is out of range", value)


def _pair(key: Key, value: object) -> tuple[float, float]:
    if not isinstance(value, list) or len(value) != 2:
        raise Refusal("must be two numbers", value)
    first, second = _each(key, value, _number)
    if key.kind is Kind.SPAN and second < first:
        raise Refusal("has its second number below its first", value)
    if key.kind is Kind.WINDOW and second <= first:
        raise Refusal("must have its second number above its first", value)
    return first, second


def _texts(key: Key, value: object) -> tuple[str, ...]:
    return _distinct(_each(replace(key, filled=True), value, _text), value)


def _words(key: Key, value: object) -> tuple[str, ...]:
    words = _distinct(_each(key, value, _word), value)
    if not words:
        raise Refusal("must not be empty", value)
    return words


def _wholes(key: Key, value: object) -> tuple[int, ...]:
    return _distinct(_each(key, value, _whole), value)


def _numbers(key: Key, value: object) -> tuple[float, ...]:
    return _distinct(_each(key, value, _number), value)


def _word_or_texts(key: Key, value: object) -> str | tuple[str, ...]:
    if not isinstance(value, list):
        return _word(key, value)
    texts = _texts(key, value)
    if not texts:
        raise Refusal("must not be empty", value)
    return texts


def _each(key: Key, values: object, one: Callable[[Key, object], T]) -> tuple[T, ...]:
    """Check every element; a refusal then says which."""
    if not isinstance(values, list):
        raise Refusal("must be a list", values)
    found: list[T] = []
    for place, value in enumerate(values, start=1):
        try:
            found.append(one(key, value))
        except Refusal as refusal:
            raise Refusal(refusal.problem, refusal.value, place) from None
    return tuple(found)


def _distinct(values: tuple[T, ...], received: object) -> tuple[T, ...]:
    if len(set(values)) < len(values):
        raise Refusal("names something twice", received)
    return values


_CONVERTERS: dict[Kind, Callable[[Key, object], object]] = {
    Kind.TEXT: _text,
    Kind.NAME: _name,
    Kind.WORD: _word,
    Kind.WORD_OR_TEXTS: _word_or_texts,
    Kind.FLAG: _flag,
    Kind.NUMBER: _number,
    Kind.WHOLE: _whole,
    Kind.PAIR: _pair,
    Kind.SPAN: _pair,
    Kind.WINDOW: _pair,
    Kind.TEXTS: _texts,
    Kind.WORDS: _words,
    Kind.WHOLES: _wholes,
    Kind.NUMBERS: _numbers,
}
