"""Libraries with versions and licences as their packages state them."""

from __future__ import annotations

import importlib.metadata
import importlib.util
import tomllib
from pathlib import Path

import pytest

from pulsemend.progress import finish
from pulsemend.session.libraries import Library, libraries, licence_text

PROJECT = tomllib.loads((Path(__file__).resolve().parents[2] / "pyproject.toml").read_text("utf-8"))[
    "project"
]


@pytest.fixture(scope="module")
def found() -> tuple[Library, ...]:
    return finish(libraries())


def test_every_dependency_is_there_and_none_of_the_tests(found: tuple[Library, ...]) -> None:
    names = {one.name.lower().replace("_", "-") for one in found}
    # Everything outside the window is tested once with Qt uninstalled; then it cannot be listed.
    with_qt = importlib.util.find_spec("PySide6") is not None
    needed = [need.split(">")[0].lower() for need in PROJECT["dependencies"]]
    for name in needed:
        assert name in names or (not with_qt and name in {"pyside6-essentials", "pyqtgraph"})
    assert names.isdisjoint({"pytest", "ruff", "mypy", "pulsemend"})
    assert "tornado" in names  # needed through another


def test_versions_and_licences_are_stated(found: tuple[Library, ...]) -> None:
    assert all(one.version == importlib.metadata.version(one.name) for one in found)
    assert all(0 < len(one.licence) <= 100 and "\n" not in one.licence for one in found)
    by_name = {one.name.lower(): one.licence for one in found}
    assert "BSD" in by_name["numpy"]
    assert by_name["tomlkit"] == "MIT"


def test_text_of_a_licence() -> None:
    assert "Redistribution" in licence_text("numpy")
    assert "not installed" in licence_text("no-such-library")
