"""Sessions on invented files, all of them ended after a test."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path

import pytest

from pulsemend.session.session import Session
from support.session_desk import PLAN, Desk


@pytest.fixture
def desk(tmp_path: Path) -> Iterator[Desk]:
    desk = Desk(tmp_path)
    desk.plan_path.write_text(PLAN)
    yield desk
    desk.clear()


@pytest.fixture
def session(desk: Desk) -> Session:
    return desk.new_session()
