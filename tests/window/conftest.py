"""For all tests of the window: its objects die in the thread of the tests, never in a worker."""

from __future__ import annotations

import gc
from collections.abc import Iterator

import pytest


@pytest.fixture(autouse=True)
def garbage_is_collected_here() -> Iterator[None]:
    """As `pulsemend.window.garbage` does: no worker may destroy what an earlier test left."""
    gc.disable()
    yield
    gc.collect()
    gc.enable()
