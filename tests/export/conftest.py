"""For the tests of this room."""

from __future__ import annotations

import os

import pytest


@pytest.fixture(autouse=True)
def no_waiting_for_the_disk(monkeypatch: pytest.MonkeyPatch) -> None:
    """Keep tests from waiting: nothing here depends on what a disk keeps after the power is cut."""
    monkeypatch.setattr(os, "fsync", lambda handle: None)
