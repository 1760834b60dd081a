"""Reading a TOML file against a table of keys: the same for plans and marks.

Every refusal is one line: full path of the key, what is wrong, what is allowed, what was received, the line.
"""

from __future__ import annotations

import ast
import difflib
import os
import re
import tomllib
from collections.abc import Collection, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from pulsemend.errors import SettingError
from pulsemend.model.keys import REQUIRED, Key, Refusal, convert, show
from pulsemend.model.toml_lines import KeyPath, key_lines, key_text, line_of

LARGEST_BYTES = 1_000_000
_TABLE_TWICE = re.compile(r"Cannot declare (\(.*\)) twice$")
_KEY_OF_LINE = re.compile(r"\s*\[*\s*([^\s=#\[\]](?:[^=#\]]*[^\s=#\]])?)\s*[=\]]")
_PARSER_PLACE = re.compile(r" \(at (?:line (\d+), column \d+|end of document)\)$")


@dataclass(frozen=True)
class Source:
    """A text that was read: what it holds, and where.

    Parameters
    ----------
    text : str
    name : str
        The file's name for messages; empty for a text that was never a file.
    tree : mapping
        The checked values, defaults filled in.
    lines : mapping of str to int
        Lines of the keys.
    error : type of SettingError
        What refusals of this kind of file are.
    """

    text: str
    name: str
    tree: Mapping[str, Any] = field(repr=False)
    lines: Mapping[str, int] = field(repr=False)
    error: type[SettingError]

    @contextmanager
    def located(self) -> Iterator[None]:
        """Give refusals of this kind of file raised inside, that have none yet, their line and file.

        Others pass through: a plan and marks can be checked together inside both their blocks.
        """
        with _located(self.lines, self.name, self.error):
            yield


def read_text(path: Path, error: type[SettingError]) -> str:
    """Text of a small UTF-8 file, line ends untouched, a byte order mark removed.

    Parameters
    ----------
    path : Path
        The file.
    error : type of SettingError
        What to raise.

    Raises
    ------
    SettingError
        It cannot be read, is too large for something a person wrote, or is not UTF-8.
    """
    name = str(path)
    try:
        with path.open("rb") as file:
            data = file.read(LARGEST_BYTES + 1)
    except FileNotFoundError as problem:
        raise error(
            "", "cannot be read: there is no such file; check its name and folder", path=name
        ) from problem
    except OSError as problem:
        if path.is_dir():
            reason = "cannot be read: it is a folder; name the file in it"
        else:
            reason = f"cannot be read ({problem.strerror or problem})"
        raise error("", reason, path=name) from problem
    if len(data) > LARGEST_BYTES:
        raise error("", f"is larger than {LARGEST_BYTES // 1000} kB: not the file that was meant", path=name)
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as problem:
        line = data.count(b"\n", 0, problem.start) + 1
        raise error("", "is not UTF-8 text; save it as UTF-8", line=line, path=name) from problem


def write_text(path: Path, text: str) -> None:
    """Replace a file whole: the old text or the new one is there, never a part.

    Parameters
    ----------
    path : Path
        The file.
    text : str
        All it will hold.
    """
    part = path.with_name(f".{path.name}.part-{os.getpid()}")
    try:
        with part.open("w", encoding="utf-8", newline="") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        part.replace(path)
    finally:
        part.unlink(missing_ok=True)


def parse(
    text: str, name: str, keys: Sequence[Key], later: Collection[str], error: type[SettingError]
) -> Source:
    """Parse a text and check it against a table of keys.

    Parameters
    ----------
    text : str
        TOML.
    name : str
        The file's name for messages.
    keys : sequence of Key
        All that may stand there; the first one is the version of the format.
    later : collection of str
        Key paths of later versions.
    error : type of SettingError
        What to raise.

    Raises
    ------
    SettingError
        Not TOML, or a key is unknown, missing, of a later version or has an impossible value.
    """
    text = text.removeprefix("\ufeff")
    try:
        raw = _toml(text, name, error)
        lines = key_lines(text)
        with _located(lines, name, error):
            _check_version(raw, keys[0], error)
            tree = _Checker(error, frozenset(later)).table(_schema(keys), raw, ())
    except RecursionError:
        raise error("", "is nested too deeply", path=name) from None
    return Source(text, name, tree, lines, error)


@contextmanager
def _located(lines: Mapping[str, int], name: str, error: type[SettingError]) -> Iterator[None]:
    try:
        yield
    except error as refusal:
        if refusal.line is not None or refusal.path:
            raise
        raise error(
            refusal.key,
            refusal.problem,
            allowed=refusal.allowed,
            received=refusal.received,
            line=line_of(lines, refusal.key),
            path=name,
        ) from None


def _toml(text: str, name: str, error: type[SettingError]) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except ValueError as problem:  # TOMLDecodeError, and numbers of thousands of digits
        message = str(problem)
        place = _PARSER_PLACE.search(message)
        line = None
        if place:
            line = int(place[1]) if place[1] else text.rstrip("\r\n").count("\n") + 1
            message = message[: place.start()]
        message = _in_words(message.split("; use sys.", maxsplit=1)[0], text, line)
        raise error("", f"not valid TOML: {message}", line=line, path=name) from None


def _in_words(message: str, text: str, line: int | None) -> str:
    """Say in the user's words what the parser says of a key or a table that stands twice."""
    table = _TABLE_TWICE.match(message)
    if table:
        names = tuple(str(name) for name in ast.literal_eval(table[1]))
        return f"the table [{key_text(names)}] stands twice"
    if message != "Cannot overwrite a value" or line is None:
        return message
    key = _KEY_OF_LINE.match(text.split("\n")[line - 1])
    return f"the key {key[1]} stands twice" if key else "a key stands twice"


def _check_version(raw: Mapping[str, Any], key: Key, error: type[SettingError]) -> None:
    """Refuse a file of a later version as such, before its keys are refused one by one."""
    value = raw.get(key.path)
    if isinstance(value, int) and not isinstance(value, bool) and key.high is not None and value > key.high:
        raise error(
            key.path,
            "is from a newer version of the program",
            allowed=key.allowed,
            received=show(value),
        )


@dataclass
class _Node:
    """A table of the schema: keys and tables by name, or one pattern for any name."""

    keys: dict[str, Key] = field(default_factory=dict)
    tables: dict[str, _Node] = field(default_factory=dict)
    is_array: bool = False


def _schema(keys: Sequence[Key]) -> _Node:
    root = _Node()
    for key in keys:
        *parents, last = key.path.split(".")
        node = root
        for parent in parents:
            node = node.tables.setdefault(parent.removesuffix("[]"), _Node(is_array=parent.endswith("[]")))
        node.keys[last] = key
    return root


@dataclass(frozen=True)
class _Checker:
    """Walks a parsed tree along the schema."""

    error: type[SettingError]
    later: frozenset[str]

    def table(self, node: _Node, values: object, path: KeyPath) -> dict[str, Any]:
        """Check one table and fill in the defaults below it."""
        if not isinstance(values, dict):
            raise self.refuse(path, "must be a table", values)
        for name in values:
            if name not in node.keys and name not in node.tables and not self.has_pattern(node):
                self.refuse_name(node, name, values[name], path)
        found: dict[str, Any] = {}
        for name, key in node.keys.items():
            if name == "*":
                found.update({own: self.value(key, value, (*path, own)) for own, value in values.items()})
            elif name in values:
                found[name] = self.value(key, values[name], (*path, name))
            elif key.default is REQUIRED:
                raise self.error(key_text((*path, name)), "is missing", allowed=key.allowed)
            else:
                found[name] = key.default
        for name, inner in node.tables.items():
            if name == "*":
                found.update({own: self.table(inner, value, (*path, own)) for own, value in values.items()})
            elif inner.is_array:
                found[name] = self.array(inner, values.get(name, []), (*path, name))
            else:
                found[name] = self.table(inner, values.get(name, {}), (*path, name))
        return found

    def array(self, node: _Node, values: object, path: KeyPath) -> list[dict[str, Any]]:
        if not isinstance(values, list):
            raise self.refuse(path, f"must be an array of tables: [[{_pattern(path)}]]", values)
        return [self.table(node, value, (*path, place)) for place, value in enumerate(values, start=1)]

    def value(self, key: Key, value: object, path: KeyPath) -> object:
        try:
            return convert(key, value)
        except Refusal as refusal:
            if refusal.place is not None:
                path = (*path, refusal.place)
            raise self.error(
                key_text(path), refusal.problem, allowed=key.allowed, received=show(refusal.value)
            ) from None

    def refuse(self, path: KeyPath, problem: str, value: object) -> SettingError:
        return self.error(key_text(path), problem, received=show(value))

    def refuse_name(self, node: _Node, name: str, value: object, path: KeyPath) -> None:
        key = key_text((*path, name))
        if _pattern((*path, name)) in self.later:
            raise self.error(key, "not in this version", received=show(value))
        known = [*node.keys, *node.tables]
        near = difflib.get_close_matches(name, known, n=1)
        problem = f"is unknown; did you mean {key_text((*path, near[0]))}?" if near else "is unknown"
        raise self.error(key, problem, allowed=" | ".join(sorted(known)), received=show(value))

    @staticmethod
    def has_pattern(node: _Node) -> bool:
        return "*" in node.keys or "*" in node.tables


def _pattern(path: KeyPath) -> str:
    """Path of the table of keys: places in arrays left out, a joining point between names."""
    return ".".join(part for part in path if isinstance(part, str))
