"""For all tests: Qt where it can be loaded, and nobody's real folders."""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator
from pathlib import Path

import pytest

try:
    # ImportError also where a system library, like libEGL, is missing.
    from PySide6 import QtWidgets  # noqa: F401
except ImportError as error:
    QT_PROBLEM = (
        f"Qt cannot be loaded ({error}); install: apt-get install libegl1 libgl1 libxkbcommon0 "
        "libxkbcommon-x11-0 libdbus-1-3 libxcb-cursor0 libxcb-icccm4 libxcb-keysyms1 libxcb-shape0 "
        "libfontconfig1 fonts-dejavu-core"
    )
else:
    QT_PROBLEM = ""
    # Its own entry point is switched off in pyproject.toml, because it breaks every run without Qt.
    pytest_plugins = ["pytestqt.plugin"]
    os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")


WINDOW_TESTS = Path(__file__).parent / "window"


class _NoQt(pytest.Module):
    """A file of window tests where Qt cannot be loaded: skipped, or failed where skipping is forbidden."""

    def collect(self) -> Iterator[pytest.Item | pytest.Collector]:
        if os.environ.get("PULSEMEND_FORBID_QT_SKIP"):
            pytest.fail(QT_PROBLEM, pytrace=False)
        pytest.skip(QT_PROBLEM, allow_module_level=True)


def pytest_pycollect_makemodule(module_path: Path, parent: pytest.Collector) -> pytest.Module | None:
    """Keep the window's tests, which import Qt, from being imported without it.

    Fixtures with Qt belong into those files or a module they import: a conftest.py is imported always.
    """
    if QT_PROBLEM and module_path.is_relative_to(WINDOW_TESTS):
        return _NoQt.from_parent(parent, path=module_path)
    return None


@pytest.fixture(scope="session")
def slow_count() -> Callable[[int], int]:
    """For slow tests: how many of so many draws to make.

    All by default; ``PULSEMEND_SLOW_SHARE=0.1`` makes a tenth (at least one), as continuous integration does.
    """
    part = float(os.environ.get("PULSEMEND_SLOW_SHARE", "1"))
    return lambda count: max(1, round(count * part))


@pytest.fixture(autouse=True, scope="session")
def strangers_home(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Path]:
    """A home of the tests' own, for this process and those it starts."""
    home = tmp_path_factory.mktemp("home")
    with pytest.MonkeyPatch.context() as patch:
        for name, folder in {
            "HOME": "",
            "XDG_CACHE_HOME": "cache",
            "XDG_CONFIG_HOME": "config",
            "XDG_DATA_HOME": "data",
            "XDG_STATE_HOME": "state",
        }.items():
            patch.setenv(name, str(home / folder))
        yield home
