"""The program as its users run it: a process of its own."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any


@dataclass(frozen=True)
class Ended:
    """How a command ended."""

    code: int
    out: str
    err: str

    @property
    def result(self) -> dict[str, Any]:
        """The one JSON object on standard output."""
        (line,) = self.out.splitlines()
        found = json.loads(line)
        assert isinstance(found, dict)
        return found

    @property
    def progress(self) -> list[dict[str, Any]]:
        """The JSON objects on standard error, one in each line."""
        return [json.loads(line) for line in self.err.splitlines()]


SMALL_SAMPLE = """\
import sys
from pulsemend.__main__ import main
from pulsemend.simulate import ready, sample
sample.LanternSpec = lambda: ready.READY
sys.exit(main())
"""
"""The command line, whose sample is as small as the one that comes with the program."""


def pulsemend(
    *words: str | Path,
    cwd: Path | None = None,
    env: Mapping[str, str] | None = None,
    script: str = "",
) -> Ended:
    """Run a command line, or a script around it; whatever it is, it shows no traceback."""
    start = ["-c", script] if script else ["-m", "pulsemend"]
    process = subprocess.run(
        [sys.executable, *start, *map(str, words)],
        capture_output=True,
        encoding="utf-8",
        cwd=cwd,
        env={**os.environ, "PYTHONIOENCODING": "utf-8"} if env is None else dict(env),
        timeout=240,
        check=False,
    )
    assert "Traceback" not in process.stdout + process.stderr
    return Ended(process.returncode, process.stdout, process.stderr)
