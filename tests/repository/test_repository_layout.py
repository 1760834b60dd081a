"""What lies in the repository, and what must not stand in any of its texts."""

from __future__ import annotations

import re
import shutil
import subprocess
import tomllib
from pathlib import Path
from xml.etree import ElementTree

import pytest

import pulsemend

REPOSITORY = Path(__file__).resolve().parents[2]
TEXT = {".py", ".md", ".toml", ".svg", ".tsv", ".csv", ".json", ".vhdr", ".vmrk", ""}

# In pieces, so that this file does not find itself.
MACHINE_PATHS = re.compile(r"(?<![\w.<>])/(?:" + "|".join(["work", "root", "home", "tmp"]) + r")\b")
REGISTRY_HOSTS = re.compile(
    "|".join(["py" + r"pi\.", "python" + "hosted", "npm" + "js", "deb" + r"\.debian", "conda" + "-forge"])
)


def tracked_files() -> list[Path]:
    """Files under version control; without git (an unpacked sdist) there is nothing to say about it."""
    if shutil.which("git") is None or not (REPOSITORY / ".git").exists():
        pytest.skip("not a checkout: git or its folder is missing")
    listing = subprocess.run(
        ["git", "-C", str(REPOSITORY), "ls-files", "-z"], capture_output=True, text=True, check=True
    )
    return [
        REPOSITORY / name for name in listing.stdout.split("\0") if name and (REPOSITORY / name).is_file()
    ]


def texts() -> list[tuple[Path, str]]:
    """Every text file under version control with its text."""
    return [
        (path, path.read_text("utf-8"))
        for path in tracked_files()
        if path.suffix in TEXT and path.name != "LICENSE"
    ]


def test_top_level_is_exactly_what_the_design_says() -> None:
    top = {path.relative_to(REPOSITORY).parts[0] for path in tracked_files()}
    assert {name for name in top if not name.startswith(".")} == {
        "README.md",
        "DEVELOPERS.md",
        "pyproject.toml",
        "app",
        "tests",
        "sample_data",
        "icons",
    }


@pytest.mark.parametrize(
    ("pattern", "name"),
    [(MACHINE_PATHS, "path of one machine"), (REGISTRY_HOSTS, "host of a package registry")],
)
def test_no_text_names_a_place_of_one_machine(pattern: re.Pattern[str], name: str) -> None:
    found = [
        f"{path.relative_to(REPOSITORY)}: {match.group()}"
        for path, text in texts()
        for match in pattern.finditer(text)
    ]
    assert found == [], name


@pytest.mark.parametrize(
    "text",
    ["see /" + "work/main", "'/" + "tmp/x'", "https://py" + "pi.org/simple", "files.python" + "hosted.org"],
)
def test_such_a_place_would_be_found(text: str) -> None:
    assert MACHINE_PATHS.search(text) or REGISTRY_HOSTS.search(text)


def test_files_stay_small() -> None:
    large = [path for path in tracked_files() if path.stat().st_size > 4_000_000]
    assert large == []


def test_names_of_test_files_are_unique() -> None:
    names = [path.name for path in (REPOSITORY / "tests").rglob("test_*.py")]
    assert sorted(set(names)) == sorted(names)


def test_licence_lies_in_the_package_and_is_declared() -> None:
    text = (Path(pulsemend.__file__).parent / "LICENSE").read_text("utf-8")
    for phrase in (
        "Redistributions of source code must retain",
        "Redistributions in binary form must reproduce",
        "Neither the name of the copyright holder",
        'THIS SOFTWARE IS PROVIDED BY THE COPYRIGHT HOLDERS AND CONTRIBUTORS "AS IS"',
    ):
        assert phrase in " ".join(text.split())
    project = tomllib.loads((REPOSITORY / "pyproject.toml").read_text("utf-8"))["project"]
    assert project["license"] == "BSD-3-Clause"
    assert project["license-files"] == ["app/pulsemend/LICENSE"]


def test_the_binding_that_loses_references_is_excluded() -> None:
    project = tomllib.loads((REPOSITORY / "pyproject.toml").read_text("utf-8"))["project"]
    assert "PySide6-Essentials>=6.8,<6.12" in project["dependencies"]


def test_no_settings_of_the_qt_plugin_in_the_project_file() -> None:
    """They would be unknown keys, and so an error, wherever Qt cannot load."""
    options = tomllib.loads((REPOSITORY / "pyproject.toml").read_text("utf-8"))["tool"]["pytest"][
        "ini_options"
    ]
    assert [key for key in options if key.startswith("qt_")] == []


def test_icons_are_readable_pictures() -> None:
    icons = sorted((REPOSITORY / "icons").glob("*.svg"))
    assert "pulsemend.svg" in [path.name for path in icons]
    for path in icons:
        picture = ElementTree.parse(path).getroot()
        assert picture.tag == "{http://www.w3.org/2000/svg}svg"
        assert picture.get("viewBox")
