"""Which line of a TOML text a key stands in.

Neither the standard parser nor the comment-keeping one tells; error messages need it. The scanner reads
text that a parser has accepted already and does not check it again.
"""

from __future__ import annotations

import re
from collections.abc import Mapping

KeyPath = tuple[str | int, ...]

_BARE = re.compile(r"[A-Za-z0-9_-]+")
_SCALAR = re.compile(r"[^,\]}#\n]+")
_QUOTES = ('"""', "'''", '"', "'")
_ESCAPES = {"b": "\b", "t": "\t", "n": "\n", "f": "\f", "r": "\r", '"': '"', "\\": "\\"}
_ESCAPE = re.compile(r"\\(?:u([0-9a-fA-F]{4})|U([0-9a-fA-F]{8})|(.))")


def key_text(path: KeyPath) -> str:
    """Write a key path as people read it: ``epochs.rule[2].start_s``, ``markers."arrow left".role``.

    Places in an array count from 1.
    """
    text = ""
    for part in path:
        if isinstance(part, int):
            text += f"[{part}]"
            continue
        name = part if _BARE.fullmatch(part) else quoted(part)
        text += f".{name}" if text else name
    return text


def quoted(text: str) -> str:
    """Write a text as a TOML string on one line, everything that would not show escaped.

    Parameters
    ----------
    text : str
        Any text.
    """
    signs = []
    for sign in text:
        code = ord(sign)
        if sign in '"\\':
            signs.append("\\" + sign)
        elif sign.isprintable():
            signs.append(sign)
        else:
            signs.append(f"\\u{code:04X}" if code < 0x10000 else f"\\U{code:08X}")
    return '"' + "".join(signs) + '"'


def key_lines(text: str) -> dict[str, int]:
    """Line of every key, table and array element of a valid TOML text.

    Parameters
    ----------
    text : str
        Text that a parser has accepted.

    Returns
    -------
    dict of str to int
        Key paths as `key_text` writes them, to lines from 1.
    """
    scanner = _Scanner(text)
    scanner.document()
    return {key_text(path): line for path, line in scanner.lines.items()}


def line_of(lines: Mapping[str, int], key: str) -> int | None:
    """Line of a key, else of the nearest table around it that the text holds.

    Parameters
    ----------
    lines : mapping of str to int
        From `key_lines`.
    key : str
        As `key_text` writes it.
    """
    around = [known for known in lines if key == known or key.startswith((f"{known}.", f"{known}["))]
    return lines[max(around, key=len)] if around else None


class _Scanner:
    """Walks through the text once and notes where keys begin."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.lines: dict[KeyPath, int] = {}
        self.counts: dict[KeyPath, int] = {}  # arrays of tables: how many so far
        self._line = 1
        self._counted_to = 0

    def line(self) -> int:
        self._line += self.text.count("\n", self._counted_to, self.at)
        self._counted_to = self.at
        return self._line

    def note(self, path: KeyPath, line: int) -> None:
        """Note a key and the tables around it that no header has named."""
        for depth in range(1, len(path) + 1):
            self.lines.setdefault(path[:depth], line)

    def blank(self) -> None:
        """Pass over blanks, line ends and comments."""
        while self.at < len(self.text):
            if self.text[self.at] == "#":
                end = self.text.find("\n", self.at)
                self.at = len(self.text) if end < 0 else end
            elif self.text[self.at] in " \t\r\n":
                self.at += 1
            else:
                return

    def document(self) -> None:
        base: KeyPath = ()
        self.blank()
        while self.at < len(self.text):
            if self.text[self.at] == "[":
                base = self.header()
            else:
                self.pair(base)
            self.blank()

    def header(self) -> KeyPath:
        """``[a.b]`` or ``[[a.b]]``: the path that the keys below belong to."""
        line = self.line()
        array = self.text.startswith("[[", self.at)
        self.at += 2 if array else 1
        path: KeyPath = ()
        names = self.names()
        for place, name in enumerate(names):
            path = (*path, name)
            if array and place == len(names) - 1:
                self.lines.setdefault(path, line)
                self.counts[path] = self.counts.get(path, 0) + 1
            if path in self.counts:
                path = (*path, self.counts[path])
        self.note(path, line)
        self.lines[path] = line  # a table named only by its parts so far now has its own line
        self.at += 2 if array else 1
        return path

    def pair(self, base: KeyPath) -> None:
        """``key = value``."""
        line = self.line()
        path = (*base, *self.names())
        self.note(path, line)
        self.at += 1  # the equals sign
        self.blank()
        self.value(path)

    def names(self) -> list[str]:
        """Read the parts of a dotted key; stops before the sign that ends it."""
        found: list[str] = []
        while True:
            self.blank()
            bare = _BARE.match(self.text, self.at)
            if bare:
                found.append(bare.group())
                self.at = bare.end()
            else:
                found.append(self.string())
            self.blank()
            if self.at >= len(self.text) or self.text[self.at] != ".":
                return found
            self.at += 1

    def string(self) -> str:
        """Read a quoted string of any kind and resolve its escapes."""
        quote = next(quote for quote in _QUOTES if self.text.startswith(quote, self.at))
        start = self.at = self.at + len(quote)
        while not self.text.startswith(quote, self.at):
            self.at += 2 if self.text[self.at] == "\\" and quote[0] == '"' else 1
        if len(quote) == 3:
            # Up to two more quotes belong to the string itself.
            while self.text.startswith(quote, self.at + 1):
                self.at += 1
        inner = self.text[start : self.at]
        self.at += len(quote)
        return _ESCAPE.sub(_unescape, inner) if quote[0] == '"' else inner

    def value(self, path: KeyPath) -> None:
        first = self.text[self.at]
        if first in "\"'":
            self.string()
        elif first == "[":
            self.array(path)
        elif first == "{":
            self.inline_table(path)
        else:
            scalar = _SCALAR.match(self.text, self.at)
            self.at = scalar.end() if scalar else self.at + 1

    def array(self, path: KeyPath) -> None:
        self.at += 1
        place = 1
        self.blank()
        while self.text[self.at] != "]":
            if self.text[self.at] == ",":
                self.at += 1
            else:
                self.note((*path, place), self.line())
                self.value((*path, place))
                place += 1
            self.blank()
        self.at += 1

    def inline_table(self, path: KeyPath) -> None:
        self.at += 1
        self.blank()
        while self.text[self.at] != "}":
            if self.text[self.at] == ",":
                self.at += 1
            else:
                self.pair(path)
            self.blank()
        self.at += 1


def _unescape(found: re.Match[str]) -> str:
    code = found[1] or found[2]
    return chr(int(code, 16)) if code else _ESCAPES.get(found[3], found[3])
