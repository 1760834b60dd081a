"""Hundreds of random keys, clicks, drags and edits: nothing fails, grows, gets lost or takes long."""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from pulsemend.resources import sample_folder

TESTS = Path(__file__).parents[1]
ONCE_MADE = 120
"""Objects that Qt makes the first time something is shown: documents of labels, messages, tooltips."""


def use_it(folder: Path, steps: int, seed: int) -> None:
    for path in sample_folder().iterdir():
        if path.is_file():
            shutil.copy(path, folder)
    ended = subprocess.run(
        [sys.executable, "-m", "support.random_hands", str(folder), str(steps), str(seed)],
        cwd=TESTS,
        env=os.environ | {"QT_QPA_PLATFORM": "offscreen"},
        capture_output=True,
        text=True,
        check=False,
        timeout=240 if steps < 1000 else 1200,
    )
    assert ended.returncode == 0, ended.stderr[-4000:]
    came = json.loads(ended.stdout)
    told = json.dumps({key: came[key] for key in ("at", "raised", "errors", "grew")}, indent=1)
    assert not came["raised"], told
    assert not came["errors"], told
    assert not came["lost"], came["lost"]
    assert came["found_again"]
    assert came["edits"] > steps / 5, "a run that edits nothing shows nothing"
    before, after = came["before"], came["after"]
    for kind in ("timers", "windows", "threads", "subscriptions"):
        assert after[kind] == before[kind], (kind, told)
    assert after["objects"] <= before["objects"] + ONCE_MADE, told
    # Processor time of the window's thread: wall time on a shared machine measures the others.
    assert not came["too_long"], told
    assert "Traceback" not in ended.stderr


def test_60_random_steps(tmp_path: Path) -> None:
    use_it(tmp_path, 60, seed=1)


@pytest.mark.slow
@pytest.mark.timeout(1300)
def test_2000_random_steps(tmp_path: Path, slow_count: Callable[[int], int]) -> None:
    use_it(tmp_path, slow_count(2000), seed=2)
