"""Writing nested values as TOML: a new text, or an old one changed in place with its comments kept."""

from __future__ import annotations

import re
from collections.abc import Collection, Iterable, Mapping, MutableMapping, Sequence
from dataclasses import dataclass
from enum import Enum
from typing import Any

import tomlkit
from tomlkit.container import Container
from tomlkit.items import AoT, Comment, InlineTable, Item, Key, Table

Tree = Mapping[str, Any]
_INLINE = (".labels", "labels.*", ".names", ".roles", ".values", ".columns")
"""Ends of the paths of tables that are short enough to stand in one line."""


def new_text(tree: Tree, defaults: Mapping[str, object], named_by: Mapping[str, str]) -> str:
    """Write values as a new text.

    Parameters
    ----------
    tree : mapping
        Nested tables, arrays of tables and values; None where there is none.
    defaults : mapping of str to object
        Values that need not be written, by path (names joined by points, any name as ``*``).
    named_by : mapping of str to str
        For every array of tables the key by which its tables are told apart; empty: all of them.
    """
    document = tomlkit.document()
    _update(document, tree, "", _Rules(defaults, named_by))
    return tomlkit.dumps(document)


def updated_text(text: str, tree: Tree, defaults: Mapping[str, object], named_by: Mapping[str, str]) -> str:
    """Change a text until it holds the given values; what is equal already is not touched.

    Parameters
    ----------
    text : str
        Valid TOML.
    tree : mapping
        Nested tables, arrays of tables and values; None where there is none.
    defaults : mapping of str to object
        Values that need not be written, by path (names joined by points, any name as ``*``).
    named_by : mapping of str to str
        For every array of tables the key by which its tables are told apart; empty: all of them.
    """
    crlf = "\r\n" in text
    document = tomlkit.parse(text.replace("\r\n", "\n"))
    _update(document, tree, "", _Rules(defaults, named_by))
    changed = tomlkit.dumps(document)
    return changed.replace("\n", "\r\n") if crlf else changed


@dataclass(frozen=True)
class _Rules:
    defaults: Mapping[str, object]
    named_by: Mapping[str, str]

    def below(self, path: str, name: str) -> str:
        """Path of a key in the table of keys: its own name, or ``*`` where any name may stand."""
        own, any_name = (f"{path}.{part}" if path else part for part in (name, "*"))
        return any_name if self.takes_any_name(path) else own

    def takes_any_name(self, path: str) -> bool:
        start = f"{path}.*" if path else "*"
        return any(known == start or known.startswith(f"{start}.") for known in self.defaults)

    def is_default(self, path: str, value: object) -> bool:
        return value is None or (path in self.defaults and self.defaults[path] == value)


def _update(table: MutableMapping[str, Any], tree: Tree, path: str, rules: _Rules) -> None:
    """Make a table of a document hold the values of a tree."""
    earlier: list[str] = []
    for name, value in tree.items():
        below = rules.below(path, name)
        if isinstance(value, Mapping):
            if name in table:
                _update(table[name], value, below, rules)
            elif new := _new_table(value, below, rules):
                # A code without labels and with no role cannot be, so an empty table says nothing.
                _add(table, name, new, earlier)
        elif below in rules.named_by:
            _update_array(table, name, value, below, rules)
        elif name in table:
            if value is None:
                del table[name]
            elif _plain(table[name]) != _plain(value):
                table[name] = _plain(value)
        elif not rules.is_default(below, value):
            _add(table, name, _plain(value), earlier)
        earlier.append(name)
    if rules.takes_any_name(path):
        for name in [name for name in table if name not in tree]:
            del table[name]


def _add(table: MutableMapping[str, Any], name: str, value: object, earlier: Collection[str]) -> None:
    """Add a key or a table within a table's own part.

    The library itself adds at the end, where the comments of the next table stand already.
    """
    container = table.value if isinstance(table, Table) else table
    if isinstance(container, Container):
        is_table = isinstance(value, (Table, AoT))
        place = _table_place(container.body) if is_table else _key_place(container.body, name, earlier)
        # Tables of the document itself can only stand at its end.
        if place is not None and place < len(container.body) and not (is_table and container is table):
            if isinstance(value, (Table, AoT)):
                (value[0] if isinstance(value, AoT) else value).trivia.indent = "\n"
            # The library's own way to put a key behind another; it has no public name.
            container._insert_at(place, name, value)
            return
    table[name] = value


_Body = Sequence[tuple[Key | None, Item]]


def _own_keys(body: _Body) -> int:
    """Place behind the last key of a table itself, tables below it not counted."""
    end = next((i for i, (_, item) in enumerate(body) if isinstance(item, (Table, AoT))), len(body))
    return max((i + 1 for i in range(end) if body[i][0] is not None), default=0)


def _own_end(body: _Body) -> int:
    """Place behind a table's own keys and the comments that follow them without an empty line."""
    place = _own_keys(body)
    while place < len(body) and isinstance(body[place][1], Comment):
        place += 1
    return place


def _table_place(body: _Body) -> int | None:
    """Where a table below another belongs; None if that has no keys of its own, or dotted ones."""
    # Behind the header of a table, dotted keys would belong to it.
    if any(key is not None and key.is_dotted() for key, _ in body):
        return None
    return _own_end(body) if _own_keys(body) else None


def _key_place(body: _Body, name: str, earlier: Collection[str]) -> int:
    """Below the key's own commented-out line, else behind the last key that comes before it."""
    place = 0
    for i, (key, item) in enumerate(body[: _own_end(body)]):
        if isinstance(item, Comment) and re.match(rf"#\s*{re.escape(name)}\s*=", item.trivia.comment):
            return i + 1
        if key is not None and key.key in earlier:
            place = i + 1
    return place


def _new_table(tree: Tree, path: str, rules: _Rules) -> Table | InlineTable:
    new = tomlkit.inline_table() if path.endswith(_INLINE) else tomlkit.table()
    _update(new, tree, path, rules)
    return new


def _update_array(
    table: MutableMapping[str, Any], name: str, wanted: Sequence[Tree], path: str, rules: _Rules
) -> None:
    """Arrays of tables: each wanted table is matched to the one of its name, else to a left-over one."""
    old = table.get(name, [])
    if not wanted:
        if name in table:
            del table[name]
        return
    if not isinstance(old, AoT):
        new = [_plain(_new_table(tree, path, rules)) for tree in wanted]
        if name not in table:
            _add(table, name, _tables(_new_table(tree, path, rules) for tree in wanted), ())
        elif _plain(old) != new:
            table[name] = new
        return
    matched = _match([_id(item, path, rules) for item in old], [_id(tree, path, rules) for tree in wanted])
    items = list(old)
    tables = [
        _new_table(tree, path, rules) if place is None else items[place]
        for tree, place in zip(wanted, matched, strict=True)
    ]
    for item, tree in zip(tables, wanted, strict=True):
        _update(item, tree, path, rules)
    if matched != list(range(len(items))):
        table[name] = _tables(tables)


def _tables(tables: Iterable[Any]) -> AoT:
    array = tomlkit.aot()
    for item in tables:
        array.append(item)
    return array


def _id(values: Mapping[str, Any], path: str, rules: _Rules) -> object:
    key = rules.named_by[path]
    if key:
        return _plain(values.get(key))
    said = ((name, _plain(value)) for name, value in values.items())
    return {name: value for name, value in said if not rules.is_default(f"{path}.{name}", value)}


def _match(old: Sequence[object], wanted: Sequence[object]) -> list[int | None]:
    """For every wanted table the place of the old one it continues, or None."""
    free = list(range(len(old)))
    matched: list[int | None] = []
    for name in wanted:
        place = next((place for place in free if old[place] == name), None)
        matched.append(place)
        if place is not None:
            free.remove(place)
    # A table whose name changed keeps its comments if its place among the left-over ones tells.
    for index, place in enumerate(matched):
        if place is None and free:
            matched[index] = free.pop(0)
    return matched


def _plain(value: object) -> Any:
    """Reduce a value to what TOML holds: no enums, no tuples, no items of the editing library."""
    if isinstance(value, Item):
        value = value.unwrap()
    if isinstance(value, Mapping):
        return {str(name): _plain(inner) for name, inner in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(inner) for inner in value]
    if isinstance(value, Enum):
        return str(value.value)
    return value
