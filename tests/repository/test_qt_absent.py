"""Where Qt cannot load, everything else still runs and the window's tests say what to install."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

REPOSITORY = Path(__file__).resolve().parents[2]


def run_window_tests(tmp_path: Path, **more: str) -> subprocess.CompletedProcess[str]:
    """Run them in a process where importing Qt fails as it does without its system libraries."""
    broken = tmp_path / "PySide6"
    broken.mkdir()
    (broken / "__init__.py").touch()
    (broken / "QtWidgets.py").write_text("raise ImportError('libEGL.so.1: cannot open shared object file')\n")
    environment = os.environ | {"PYTHONPATH": str(tmp_path)} | more
    if not more:
        environment.pop("PULSEMEND_FORBID_QT_SKIP", None)
    return subprocess.run(
        [
            sys.executable,
            "-m",
            "pytest",
            "-p",
            "no:cacheprovider",
            "tests/window",
            "tests/repository/test_resources.py",
        ],
        cwd=REPOSITORY,
        env=environment,
        capture_output=True,
        text=True,
        check=False,
    )


def test_window_tests_are_skipped_with_what_to_install(tmp_path: Path) -> None:
    result = run_window_tests(tmp_path)
    assert result.returncode == 0, result.stdout + result.stderr
    assert "libEGL.so.1" in result.stdout
    assert "apt-get install libegl1" in result.stdout
    assert " passed" in result.stdout


def test_the_skip_can_be_forbidden(tmp_path: Path) -> None:
    result = run_window_tests(tmp_path, PULSEMEND_FORBID_QT_SKIP="1")
    assert result.returncode != 0
    assert "apt-get install libegl1" in result.stdout


def test_tests_have_a_home_of_their_own(strangers_home: Path) -> None:
    platformdirs = pytest.importorskip("platformdirs")
    for place in (
        platformdirs.user_state_path("x"),
        platformdirs.user_data_path("x"),
        platformdirs.user_config_path("x"),
        platformdirs.user_cache_path("x"),
        Path.home(),
    ):
        assert place.is_relative_to(strangers_home)
