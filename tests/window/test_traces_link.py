"""What the session puts over the traces: gaps as each channel has them."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from pulsemend.mending.learned import Learned, learn
from pulsemend.model.plan_file import parse_plan
from pulsemend.progress import finish
from pulsemend.readers.opening import open_recording
from pulsemend.session.session import Session
from pulsemend.window.traces.model import Bands, Overlays
from pulsemend.window.traces_link import overlays
from support.small_lantern import PLAN, changed, write_study

RATE_HZ = 5000.0


@pytest.fixture(scope="module")
def recording(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return write_study(tmp_path_factory.mktemp("link")).recording


def laid_over(path: Path, plan: str) -> tuple[Overlays, Learned]:
    session = Session()
    opened = open_recording(path)
    session.open_recording(path, opened.facts)
    session.open_plan(parse_plan(plan), None)
    assert session.plan is not None
    learned = finish(learn(opened, session.plan, session.marks))
    opened.close()
    return overlays(session, learned), learned


def spans(bands: Bands) -> list[tuple[int, int]]:
    """Bands in samples."""
    starts, stops = (np.rint(x * RATE_HZ).astype(int).tolist() for x in (bands.start_s, bands.stop_s))
    return list(zip(starts, stops, strict=True))


def by_hand(onsets: list[int], stop_ms: float) -> list[tuple[int, int]]:
    """Closed windows from 2 ms before each onset, and the recharge gap of all channels, at 5 samples a ms."""
    own = [(onset - 10, onset + round(5 * stop_ms) + 1) for onset in onsets]
    return sorted([*own, *((onset + 1240, onset + 1271) for onset in onsets)])


def test_an_exception_widens_the_gap_of_its_channel_alone(recording: Path) -> None:
    over, learned = laid_over(recording, PLAN)
    onsets = list(learned.estimates.onsets)
    assert len(onsets) > 1
    assert spans(over.gaps) == by_hand(onsets, 14.0)
    assert set(over.own_gaps) == {"P3"}
    assert spans(over.own_gaps["P3"]) == by_hand(onsets, 25.0)


def test_without_exceptions_all_rows_have_the_same_gaps(recording: Path) -> None:
    over, learned = laid_over(recording, changed(PLAN, ("P3 = [-2.0, 25.0]", "")))
    assert spans(over.gaps) == by_hand(list(learned.estimates.onsets), 14.0)
    assert not over.own_gaps
