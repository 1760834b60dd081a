"""Writing nested values as TOML: a new text, or an old one changed in place with its comments kept."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, MutableMapping, Sequence
from dataclasses import dataclass
from enum import Enum
from typing import Any

import tomlkit
from tomlkit.items import AoT, InlineTable, Item, Table

Tree = Mapping[str, Any]


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
    for name, value in tree.items():
        below = rules.below(path, name)
        if isinstance(value, Mapping):
            _update_table(table, name, value, below, rules)
        elif below in rules.named_by:
            _update_array(table, name, value, below, rules)
        elif name in table:
            if value is None:
                del table[name]
            elif _plain(table[name]) != _plain(value):
                table[name] = _plain(value)
        elif not rules.is_default(below, value):
            table[name] = _plain(value)
    if rules.takes_any_name(path):
        for name in [name for name in table if name not in tree]:
            del table[name]


def _update_table(table: MutableMapping[str, Any], name: str, tree: Tree, path: str, rules: _Rules) -> None:
    if name in table:
        _update(table[name], tree, path, rules)
        return
    new = _new_table(tree, path, rules)
    # A code without labels and with no role cannot be, so an empty table says nothing.
    if new:
        table[name] = new


def _new_table(tree: Tree, path: str, rules: _Rules) -> Table | InlineTable:
    new = tomlkit.inline_table() if path.endswith(".labels") else tomlkit.table()
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
            table[name] = _tables(_new_table(tree, path, rules) for tree in wanted)
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
