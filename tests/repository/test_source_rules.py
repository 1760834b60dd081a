"""The rules of the source that no linter knows, read off the syntax tree of every module.

Imports count wherever they stand: at the top, in a function, for typing only.
"""

from __future__ import annotations

import ast
import tomllib
from collections.abc import Iterator
from pathlib import Path

import pytest

REPOSITORY = Path(__file__).resolve().parents[2]
PACKAGE = REPOSITORY / "app" / "pulsemend"

LAYERS = [
    ["__main__"],
    ["commands"],
    ["window"],
    ["session"],
    ["roster"],
    ["mending"],
    ["report"],
    ["export", "readers"],
    ["simulate"],
    ["engine"],
    ["trials"],
    ["signal", "model"],
    ["progress"],
    ["resources", "units", "logs", "notice"],
    ["errors"],
]
"""From the top down (design, section 3; `logs` and `notice` are ours)."""

DEPTH = {room: depth for depth, rooms in enumerate(LAYERS) for room in rooms}
QT = {"PySide6", "shiboken6", "pyqtgraph"}
READER_LIBRARY = {"mne", "mne_bids"}
UNIT_FACTORS = {
    *("1e6", "1e3", "1e-6", "1e-3", "0.001", "0.000001"),
    *("1000", "1_000", "1000.0", "1_000.0", "1000000", "1_000_000", "1000000.0", "1_000_000.0"),
}
"""By spelling: a width of 0.0010 s is a number of its own."""


def breaches(source: str, module: str) -> list[str]:
    """Every breach of the rules in one module, as text with its line.

    Parameters
    ----------
    source : str
        The module's text.
    module : str
        Its dotted name below the package, e.g. ``signal.fills``.
    """
    tree = ast.parse(source)
    room = module.partition(".")[0]
    found: list[str] = []
    for node in ast.walk(tree):
        line = getattr(node, "lineno", 0)
        for target in imported(node):
            found += [f"{line}: {text}" for text in import_breaches(target, room)]
        found += [f"{line}: {text}" for text in code_breaches(node, source, room)]
    return found


def imported(node: ast.AST) -> Iterator[str]:
    """Names of the modules a node imports; a relative import starts with a dot."""
    if isinstance(node, ast.Import):
        yield from (alias.name for alias in node.names)
    elif isinstance(node, ast.ImportFrom):
        if node.level:
            yield "."
        elif node.module == "pulsemend":
            yield from (f"pulsemend.{alias.name}" for alias in node.names)
        elif node.module:
            yield node.module
    elif isinstance(node, ast.Call) and called(node) in {"import_module", "__import__"}:
        first = node.args[0] if node.args else None
        if isinstance(first, ast.Constant):
            yield str(first.value)
        elif isinstance(first, ast.JoinedStr) and isinstance(first.values[0], ast.Constant):
            yield str(first.values[0].value)


def import_breaches(target: str, room: str) -> Iterator[str]:
    """What is wrong with importing a module from a room."""
    top, _, below = target.partition(".")
    other = below.partition(".")[0]
    if target.startswith("."):
        yield "relative import"
    if top in QT and room != "window":
        yield f"{top} outside window"
    if top in READER_LIBRARY and room not in {"readers", "export", "simulate"}:
        yield f"{top} outside readers, export and simulate"
    if top == "pulsemend" and other in DEPTH and other != room and DEPTH[other] <= DEPTH[room]:
        yield f"{room} imports {other}, which is not below it"


def code_breaches(node: ast.AST, source: str, room: str) -> Iterator[str]:
    """What is wrong with a node that is no import."""
    if isinstance(node, ast.Assert):
        yield "assert in the program"
    if isinstance(node, (ast.Attribute, ast.Name)) and name_of(node) == "processEvents":
        yield "processEvents"
    if room == "units":
        return
    if isinstance(node, ast.Constant) and isinstance(node.value, float):
        spelled = ast.get_source_segment(source, node) or ""
        if spelled.lower() in {"1e6", "1e3", "1.0e6", "1.0e3"}:
            yield f"{spelled} outside units.py"
    sides: tuple[ast.AST, ...] = ()
    if isinstance(node, ast.BinOp) and isinstance(node.op, (ast.Mult, ast.Div)):
        sides = (node.left, node.right)
    elif isinstance(node, ast.AugAssign) and isinstance(node.op, (ast.Mult, ast.Div)):
        sides = (node.value,)
    for side in sides:
        if isinstance(side, ast.Constant) and ast.get_source_segment(source, side) in UNIT_FACTORS:
            yield f"unit factor {side.value!r} outside units.py"


def called(node: ast.Call) -> str:
    return name_of(node.func)


def name_of(node: ast.AST) -> str:
    if isinstance(node, ast.Attribute):
        return node.attr
    return node.id if isinstance(node, ast.Name) else ""


def modules() -> list[Path]:
    return sorted(PACKAGE.rglob("*.py"))


def dotted(path: Path) -> str:
    parts = path.relative_to(PACKAGE).with_suffix("").parts
    return ".".join(part for part in parts if part != "__init__")


@pytest.mark.parametrize("path", modules(), ids=dotted)
def test_module_keeps_the_rules(path: Path) -> None:
    module = dotted(path)
    # The package's own __init__ is imported by everything and imports nothing.
    assert breaches(path.read_text("utf-8"), module or "errors") == []


@pytest.mark.parametrize(
    ("module", "source", "expected"),
    [
        ("signal.fills", "import pulsemend.engine.chain", "not below"),
        ("signal.fills", "from pulsemend.model.plan import Plan", "not below"),
        ("readers.edf", "from pulsemend import export", "not below"),
        ("errors", "from pulsemend.units import v_to_uv", "not below"),
        ("model.plan", "def f():\n    from pulsemend.engine import chain", "not below"),
        ("model.plan", "if TYPE_CHECKING:\n    from pulsemend.mending.mend import X", "not below"),
        ("model.plan", "import importlib\nimportlib.import_module('pulsemend.window')", "not below"),
        (
            "model.plan",
            "from importlib import import_module\nimport_module(f'pulsemend.window.{x}')",
            "not below",
        ),
        ("engine.fit", "from .chain import Chain", "relative"),
        ("session.history", "from PySide6.QtCore import QObject", "outside window"),
        ("commands.mend", "def f():\n    import pyqtgraph as pg", "outside window"),
        ("mending.mend", "import mne.io", "outside readers"),
        ("engine.fit", "def f():\n    from mne.filter import resample", "outside readers"),
        ("trials.match", "assert slots", "assert"),
        ("window.main", "QApplication.processEvents()", "processEvents"),
        ("export.tsv", "peak_uv = peak * 1e6", "1e6"),
        ("export.tsv", "peak = peak_uv / 1_000_000", "unit factor"),
        ("engine.fit", "start_s = start_ms / 1000", "unit factor"),
        ("engine.fit", "start_s = start_ms * 0.001", "unit factor"),
        ("engine.fit", "start_ms *= 1000.0", "unit factor"),
        ("simulate.sample", "UV = 1E6", "outside units"),
    ],
)
def test_a_breach_is_found(module: str, source: str, expected: str) -> None:
    found = breaches(source, module)
    assert any(expected in text for text in found), found


@pytest.mark.parametrize(
    ("module", "source"),
    [
        ("engine.chain", "from pulsemend.signal.fills import line"),
        ("export.fif", "import mne"),
        ("window.main", "from PySide6.QtWidgets import QMainWindow"),
        ("mending.mend", "from pulsemend import __version__, DATA_VERSION"),
        ("units", "UV_PER_V = 1e6"),
        ("model.plan", "rate_hz = 1000.0\nnearly = abs(x - round(x)) < 1e-6"),
        ("simulate.artifact", "peak = exp(-((t_s - 0.0050) / 0.0010) ** 2)"),
    ],
)
def test_good_source_is_let_through(module: str, source: str) -> None:
    assert breaches(source, module) == []


def test_every_room_has_a_layer() -> None:
    rooms = {dotted(path).partition(".")[0] for path in modules()} - {""}
    assert rooms == set(DEPTH)


def test_import_contract_has_the_same_layers() -> None:
    settings = tomllib.loads((REPOSITORY / "pyproject.toml").read_text("utf-8"))["tool"]["importlinter"]
    contract = next(one for one in settings["contracts"] if one["type"] == "layers")
    assert contract["exhaustive"] is True
    assert [set(layer.split(" | ")) for layer in contract["layers"]] == [set(layer) for layer in LAYERS]


@pytest.mark.parametrize(
    ("forbidden", "allowed"), [("PySide6", {"window"}), ("mne", {"readers", "export", "simulate"})]
)
def test_import_contract_forbids_a_library_everywhere_else(forbidden: str, allowed: set[str]) -> None:
    settings = tomllib.loads((REPOSITORY / "pyproject.toml").read_text("utf-8"))["tool"]["importlinter"]
    contract = next(one for one in settings["contracts"] if forbidden in one.get("forbidden_modules", []))
    assert {name.removeprefix("pulsemend.") for name in contract["source_modules"]} == set(DEPTH) - allowed
