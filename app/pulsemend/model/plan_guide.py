"""The tables of keys in the user's guide, printed from the one table that the readers use.

``python -m pulsemend.model.plan_guide`` writes them into the guide again.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from pathlib import Path

from pulsemend.model.keys import REQUIRED, Key, show
from pulsemend.model.marks_keys import MARKS_KEYS
from pulsemend.model.plan_keys import PLAN_KEYS

GUIDE = Path(__file__).resolve().parent.parent / "guide"
PAGES: dict[str, tuple[Key, ...]] = {"plan.md": PLAN_KEYS, "marks.md": MARKS_KEYS}
_BEGIN, _END = "<!-- keys: begin -->", "<!-- keys: end -->"
_PLACE = re.compile(f"{_BEGIN}.*{_END}", re.DOTALL)
_ANY_NAME = {
    "markers": "CODE",
    "bits": "FIELD",
    "names": "VALUE",
    "roles": "VALUE",
    "values": "VALUE",
    "columns": "FACT",
    "channels": "CHANNEL",
    "types": "CHANNEL",
    "gaps_ms": "CHANNEL",
}
"""Words that stand for any name, by the table it stands in; everywhere else NAME."""
_PLAIN = re.compile(r"([|*_<>\\])")


def with_tables(text: str, keys: Sequence[Key]) -> str:
    """Put the tables of keys in their place in a page.

    Parameters
    ----------
    text : str
        The page, with the two marks between which the tables stand.
    keys : sequence of Key
        What to print.

    Raises
    ------
    ValueError
        The marks are missing.
    """
    if not _PLACE.search(text):
        raise ValueError(f"the page lacks {_BEGIN} and {_END}")
    return _PLACE.sub(lambda _: f"{_BEGIN}\n\n{key_tables(keys)}\n{_END}", text)


def key_tables(keys: Iterable[Key]) -> str:
    """Print keys as Markdown tables, one per table of the TOML file.

    Parameters
    ----------
    keys : iterable of Key
        In the order of the file.
    """
    sections: dict[str, list[Key]] = {}
    for key in keys:
        sections.setdefault(_section(key.path), []).append(key)
    return "\n".join(_table(heading, rows) for heading, rows in sections.items())


def _section(path: str) -> str:
    """Heading of the TOML table that a key stands in."""
    table = path.rpartition(".")[0]
    if path.endswith(".*"):
        # Labels, names and the like of one thing stand in its own table, as `labels.NAME`.
        above = table.rpartition(".")[0]
        table = above if above.endswith(("*", "[]")) else table
    if not table:
        return "At the top"
    name = _named(table).replace("[]", "")
    return f"[[{name}]]" if table.endswith("[]") else f"[{name}]"


def _named(path: str) -> str:
    """Write a path with a word that says what any name of it is."""
    parts = path.split(".")
    return ".".join(_any_name(parts[:depth]) if part == "*" else part for depth, part in enumerate(parts))


def _any_name(above: Sequence[str]) -> str:
    """Word for any name that may stand in a table."""
    return _ANY_NAME.get(".".join(above)) or _ANY_NAME.get(above[-1], "NAME")


def _table(heading: str, keys: Sequence[Key]) -> str:
    lines = [f"### {heading}", "", "| key | meaning | default | allowed |", "|---|---|---|---|"]
    lines += [
        f"| `{_name(key)}` | {_cell(key.meaning)} | {_cell(_default(key))} | {_cell(_allowed(key))} |"
        for key in keys
    ]
    return "\n".join(lines) + "\n"


def _name(key: Key) -> str:
    """Name of a key within its section."""
    parts = key.path.split(".")
    start = len(parts) - 1
    if parts[-1] == "*" and len(parts) > 2 and parts[-3].endswith(("*", "[]")):
        start -= 1
    return _named(key.path).split(".", start)[-1] if start else key.path


def _default(key: Key) -> str:
    if key.default is REQUIRED:
        return "must be given" if not key.path.endswith("*") else "none"
    if key.default is None:
        return "none"
    value = show(key.default)
    return "empty" if value in ('""', "[]") else value


def _allowed(key: Key) -> str:
    text = key.allowed.replace(" | ", ", ").replace("first each from", "first, each from")
    # Beyond every recording: nobody needs to know where it ends.
    text = re.sub(r" to \d\.?\d*e\+15", " on", text)
    return f"{text} (more in a later version)" if key.now else text


def _cell(text: str) -> str:
    return _PLAIN.sub(r"\\\1", text)


def main() -> None:
    """Write the tables into the guide."""
    for name, keys in PAGES.items():
        page = GUIDE / name
        page.write_text(with_tables(page.read_text("utf-8"), keys), "utf-8")


if __name__ == "__main__":
    main()
