"""The suggested gap of a simulated recording, and what the draft says of it."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from pulsemend.engine.fit import fit
from pulsemend.engine.setup import bind
from pulsemend.mending.draft import write_draft
from pulsemend.mending.gap_suggestion import (
    NO_SUGGESTION,
    GapSuggestion,
    RechargeOffer,
    suggested_gaps,
    with_recharge,
    with_suggestion,
)
from pulsemend.model.marks import NO_MARKS
from pulsemend.model.plan import OtherGap, Pulses
from pulsemend.model.plan_file import read_plan
from pulsemend.model.vocabulary import Fill
from pulsemend.progress import finish
from pulsemend.simulate.lantern import LanternSpec
from pulsemend.simulate.memory import MemoryForm, MemoryRecording, Rehearsal, rehearse
from support.engine_cases import plan
from support.lantern_log import made, write

CHANNELS = ("F3", "Fz", "C3", "Cz", "P3", "P1", "Pz", "PO3", "T7", "TP7", "F4", "C4", "P4", "O2", "F8", "AF4")


@pytest.fixture(scope="module")
def lantern() -> Rehearsal:
    return rehearse(LanternSpec(trials=6, channels=CHANNELS, rate_hz=2000.0, faults=(), loud=""))


@pytest.fixture(scope="module")
def suggestion(lantern: Rehearsal) -> GapSuggestion:
    the_plan = plan(pulses=Pulses(window_ms=None, fill=Fill.LINE))
    setup = bind(lantern.recording.facts, the_plan, NO_MARKS)
    return finish(suggested_gaps(lantern.recording, setup, finish(fit(lantern.recording, setup))))


def test_channels_near_the_coil_need_longer_gaps(lantern: Rehearsal, suggestion: GapSuggestion) -> None:
    """Coil over P3; muscle on the left side, with peaks at 5 and 8.5 ms, over at about 13 ms."""
    ends = {one.channel: one.end_ms for one in suggestion.ends}
    assert set(ends) == set(CHANNELS)
    assert suggestion.n_pulses == 12
    strongest = np.argsort(-np.abs(lantern.lantern.artifacts.decay_v))[:2]
    for place in strongest:
        end_ms = ends[CHANNELS[place]]
        assert end_ms is not None
        assert end_ms > 12.0
    assert ends["T7"] is not None
    assert 8.0 < ends["T7"] < 16.0
    far = [ends[name] for name in ("F4", "C4", "F8", "AF4", "O2")]
    assert sum(end is None for end in far) >= 4
    low, high = suggestion.window_ms
    assert low == -2.0
    covered = [end for end in ends.values() if (end or 3.0) <= high]
    assert len(covered) >= 0.8 * len(CHANNELS)
    assert all(own[1] > high + 0.5 for own in suggestion.exceptions.values())
    assert set(suggestion.exceptions) == {name for name, end in ends.items() if (end or 3.0) > high}


def test_the_recharge_is_offered_and_covers_itself(suggestion: GapSuggestion) -> None:
    """The simulated recharge comes after 250 ms and lasts 1.5 ms."""
    (offer,) = suggestion.recharges
    first_ms, last_ms = offer.window_ms
    assert 247.0 < first_ms < 250.0
    assert 252.0 < last_ms < 256.0
    assert "after 12 of 12 pulses" in offer.words


def test_no_artifact_no_longer_gap(lantern: Rehearsal) -> None:
    """Issue 5.3: without artifacts but with the simulated responses, nothing in 95 % of the channels."""
    facts = lantern.recording.facts
    form = MemoryForm(facts.rate_hz, CHANNELS, {}, 1.0, facts.markers)
    onsets = [round(one.time_s * facts.rate_hz) for one in lantern.lantern.schedule.pulses]
    clean = lantern.clean_v.copy()
    for onset in onsets:
        clean[onset : onset + 2] += np.array([2e-3, -1e-3])[:, None]
    recording = MemoryRecording(clean, form)
    setup = bind(recording.facts, plan(pulses=Pulses(window_ms=None, fill=Fill.LINE)), NO_MARKS)
    found = finish(suggested_gaps(recording, setup, finish(fit(recording, setup))))
    assert sum(one.end_ms is None for one in found.ends) >= 0.95 * len(CHANNELS)
    assert found.window_ms == (-2.0, 3.0)
    assert found.recharges == ()


def test_suggestions_are_taken_over(suggestion: GapSuggestion) -> None:
    before = plan(pulses=Pulses(channels={"Fz": (-1.0, 9.0)}))
    after = with_suggestion(before, suggestion, list(suggestion.exceptions))
    assert after.pulses.window_ms == suggestion.window_ms
    assert after.pulses.channels == {"Fz": (-1.0, 9.0), **suggestion.exceptions}
    assert with_suggestion(before, suggestion).pulses.channels == {"Fz": (-1.0, 9.0)}
    later = with_recharge(after, RechargeOffer((300.0, 310.0), ""))
    both = with_recharge(later, RechargeOffer((-90.0, -80.0), ""))
    assert both.pulses.also == (OtherGap((-90.0, -80.0)), OtherGap((300.0, 310.0)))


def test_too_few_pulses_suggest_nothing(lantern: Rehearsal) -> None:
    facts = lantern.recording.facts
    short = np.empty((40_000, len(CHANNELS)))
    lantern.recording.read(0, 40_000, short)
    markers = [one for one in facts.markers if one.sample < 40_000]
    form = MemoryForm(facts.rate_hz, CHANNELS, {}, facts.channels[0].scale_v, markers)
    recording = MemoryRecording(short, form)
    setup = bind(recording.facts, plan(pulses=Pulses(window_ms=None, fill=Fill.LINE)), NO_MARKS)
    assert finish(suggested_gaps(recording, setup, finish(fit(recording, setup)))) == NO_SUGGESTION


def test_the_draft_leaves_the_gap_to_a_person_with_the_evidence(tmp_path: Path) -> None:
    recording = write(tmp_path)
    out = finish(write_draft(recording, tmp_path / "plan.toml"))
    text = out.read_text(encoding="utf-8")
    plan_read = read_plan(out).plan
    assert plan_read.pulses.window_ms is None
    assert plan_read.pulses.also == ()
    n_pulses = sum(one.happened for one in made().lantern.schedule.pulses)
    assert f"# Seen at {n_pulses} pulses: [-2.0, " in text
    assert "muscle activity may last to 20 ms" in text
    assert "# decide: a recharge? A deflection of" in text
    assert "# [[pulses.also]]\n# window_ms = [24" in text
