"""For all tests of the window: its objects die in the thread of the tests, never in a worker."""

from __future__ import annotations

import gc
from collections.abc import Iterator

import pytest


@pytest.fixture(autouse=True, scope="session")
def loaded_for_good() -> Iterator[None]:
    """Look no more at what is loaded: otherwise looking takes longer than most tests."""
    import scipy.signal  # noqa: F401

    import pulsemend.window.main_window  # noqa: F401

    gc.collect()
    gc.freeze()
    gc.disable()
    yield
    gc.enable()
    gc.unfreeze()


@pytest.fixture(autouse=True)
def garbage_is_collected_here() -> Iterator[None]:
    """As `pulsemend.window.garbage` does: no worker may destroy what an earlier test left."""
    gc.disable()  # a test may have turned it on
    yield
    # Never on its own, not even between two tests, where a worker may still be at it.
    gc.collect()
