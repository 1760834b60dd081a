"""One small recording for all commands."""

from __future__ import annotations

import pytest

from support.small_lantern import Study, write_study


@pytest.fixture(scope="session")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    """The small recording with its plan; tests write elsewhere."""
    return write_study(tmp_path_factory.mktemp("lantern"))
