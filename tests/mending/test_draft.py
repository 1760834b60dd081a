"""Drafts: proposed roles and slots from sessions whose structure is known, and what is left to a person."""

from __future__ import annotations

import re
import tomllib
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pulsemend.errors import PlanError, UsageError
from pulsemend.mending.draft import draft_plan, write_draft
from pulsemend.mending.pulse_evidence import NO_EVIDENCE, pulse_evidence
from pulsemend.model.plan import Plan
from pulsemend.model.plan_checks import check_against_rate, check_decided
from pulsemend.model.plan_file import parse_plan, update_text
from pulsemend.model.recording import Channel, Marker, RecordingFacts
from pulsemend.model.vocabulary import ChannelType, Fate, PulseTimes, Role
from pulsemend.progress import finish
from pulsemend.trials.candidates import Geometry, candidates
from pulsemend.trials.matching import match_trials

Names = dict[str, str | tuple[str, str]]

NAMED: Names = {
    "fix": "fixation",
    "sample": "sample array",
    "cue": ("cue left", "cue right"),
    "pulse": "pulse",
    "probe": "probe",
    "response": "response",
}
NUMBERED: Names = {
    "fix": "S  1",
    "sample": "S 10",
    "cue": ("S 21", "S 22"),
    "pulse": "S 99",
    "probe": "S 30",
    "response": "S 40",
}


def session(
    names: Names = NAMED,
    *,
    n_trials: int = 60,
    rate_hz: float = 1000.0,
    sham: float = 0.0,
    pulses: bool = True,
    seed: int = 3,
) -> RecordingFacts:
    """A session of two cues, pulses and probes per trial, timed as in facts section 6."""
    rng = np.random.default_rng(seed)
    at_s = 5.0
    events: list[tuple[float, str]] = []

    def add(name: str) -> None:
        code = names[name]
        events.append((at_s, code if isinstance(code, str) else code[int(rng.integers(2))]))

    for _ in range(n_trials):
        is_sham = rng.random() < sham
        add("fix")
        at_s += 1.5
        add("sample")
        at_s += rng.uniform(1.5, 2.5)
        for _ in range(2):
            add("cue")
            cue_s = at_s
            at_s = cue_s + rng.uniform(1.2, 2.0)
            if pulses and not is_sham:
                add("pulse")
            at_s = cue_s + 3.5
            add("probe")
            at_s += rng.gamma(9.0, 0.08)
            add("response")
            at_s += 1.0
        at_s += rng.uniform(2.0, 3.0)
    markers = tuple(Marker(round(at * rate_hz), code) for at, code in events)
    return RecordingFacts(
        stem="sub-x_task-delay",
        format="made up",
        rate_hz=rate_hz,
        n_samples=round((at_s + 5.0) * rate_hz),
        channels=(Channel("Cz", ChannelType.EEG),),
        markers=markers,
    )


def with_roles(text: str) -> Plan:
    """Decide every role, so that only the gap stays open."""
    return parse_plan(text.replace('role = "undecided"', 'role = "other"')).plan


def decided(text: str) -> Plan:
    """The draft with the gap written as its example says."""
    assert text.count("# window_ms") == 1
    return parse_plan(text.replace("# window_ms", "window_ms")).plan


def roles(text: str) -> dict[str, str]:
    markers: dict[str, dict[str, str]] = tomllib.loads(text).get("markers", {})
    return {code: marker["role"] for code, marker in markers.items()}


def test_roles_from_names() -> None:
    assert roles(draft_plan(session())) == {
        "fixation": "fixation",
        "sample array": "sample",
        "cue left": "cue",
        "cue right": "cue",
        "pulse": "pulse",
        "probe": "probe",
        "response": "response",
    }


@pytest.mark.parametrize(
    ("code", "role"),
    [
        ("TMS on", "pulse"),
        ("stim 1", "pulse"),
        ("stimulus 1", "undecided"),
        ("retro-cue", "cue"),
        ("Button press", "response"),
        ("cue probe", "undecided"),
        ("S 21", "undecided"),
        ("rescued", "undecided"),
        ("", "undecided"),
    ],
)
def test_words_of_a_name(code: str, role: str) -> None:
    facts = session({**NAMED, "fix": code}, n_trials=12)
    assert roles(draft_plan(facts))[code] == role


def test_what_cannot_be_told_is_undecided_and_stops_mend() -> None:
    text = draft_plan(session(NUMBERED))
    assert set(roles(text).values()) == {"undecided"}
    assert text.count('role = "undecided"   # decide:') == 7
    # It can be read and shown, but roles, trial, rules and gap are still open.
    with pytest.raises(PlanError, match="still undecided"):
        check_decided(parse_plan(text).plan)
    with pytest.raises(PlanError, match="trial: has no slot"):
        check_decided(with_roles(text))
    trial = '[[trial]]\nslot = "a"\nrole = "sample"\n'
    rule = '[[epochs.rule]]\nname = "a"\nanchor = "a"\nstart_s = 0\n'
    whole = text.replace('role = "undecided"', 'role = "sample"', 1).replace("# window_ms", "window_ms")
    plan = parse_plan(whole.replace("[export]", f"{rule}\n{trial}\n[export]")).plan
    with pytest.raises(PlanError, match="still undecided"):
        check_decided(plan)


def test_pulses_are_told_by_the_signal() -> None:
    facts = session(NUMBERED)
    pulses = [int(marker.sample) + 3 for marker in facts.markers if marker.code == "S 99"]
    evidence = pulse_evidence(facts, [*pulses[5:], facts.n_samples - 10])
    assert evidence.unmarked == 1
    (code,) = evidence.codes
    assert (code.code, code.n_in_signal, code.n_markers) == ("S 99", 115, 120)
    assert (code.latency_ms, code.least_ms, code.most_ms) == pytest.approx((3.0, 3.0, 3.0))
    text = draft_plan(facts, evidence)
    assert roles(text)["S 99"] == "pulse"
    assert '"S 99": 115 of 120 markers have one, 3.0 ms after the marker' in text
    assert "# 116 pulse-like events in the signal." in text
    assert "decide: 1 of them has no marker; if it is a pulse, add it" in text


def test_event_belongs_to_the_nearest_marker_only() -> None:
    facts = session(n_trials=4)
    near = RecordingFacts(**{**vars(facts), "markers": (Marker(1000, "cue"), Marker(1006, "pulse"))})
    (code,) = pulse_evidence(near, [1007]).codes
    assert code.code == "pulse"
    assert code.latency_ms == pytest.approx(1.0)


def test_rare_coincidence_with_pulses_makes_no_pulse_code() -> None:
    facts = session(NUMBERED)
    cues = [int(marker.sample) for marker in facts.markers if marker.code == "S 21"][:3]
    assert roles(draft_plan(facts, pulse_evidence(facts, cues)))["S 21"] == "undecided"


def test_response_is_told_by_its_varying_times() -> None:
    names: Names = {**NUMBERED, "probe": "probe"}
    facts = session(names)
    assert roles(draft_plan(facts))["S 40"] == "response"
    # A marker that a machine sends at a fixed time after the probe is none.
    fixed = tuple(
        Marker(before.sample + 700, after.code) if after.code == "S 40" else after
        for before, after in zip(facts.markers, facts.markers[1:], strict=False)
    )
    facts = RecordingFacts(**{**vars(facts), "markers": (facts.markers[0], *fixed)})
    assert roles(draft_plan(facts))["S 40"] == "undecided"


def test_slots_of_a_trial_and_their_limits() -> None:
    facts = session()
    plan = decided(draft_plan(facts))
    assert [slot.slot for slot in plan.trial] == [
        "fixation",
        "sample",
        *(f"{role}{number}" for number in (1, 2) for role in ("cue", "pulse", "probe", "response")),
    ]
    assert plan.trial[0].after_s is None
    # The cue comes 1.5 to 2.5 s after the sample, the pulse 1.2 to 2.0 s after its cue.
    for place, least_s, most_s in ((2, 1.5, 2.5), (3, 1.2, 2.0)):
        low, high = plan.trial[place].after_s or (0.0, 0.0)
        assert least_s - 0.35 < low <= least_s
        assert most_s <= high < most_s + 0.35
    # A missing answer does not spoil a trial.
    assert [slot.slot for slot in plan.trial if slot.optional] == ["response1", "response2"]
    found = match_trials(facts.markers, plan, facts.rate_hz)
    assert len(found.trials) == 60
    assert all(not trial.missing for trial in found.trials)
    # Answers slower than nearly all lie beyond the limits.
    assert len(found.extra) <= 3
    assert {marker.code for marker in found.extra} <= {"response"}


def test_faults_do_not_change_the_proposal() -> None:
    facts = session()
    kept = [marker for place, marker in enumerate(facts.markers) if place % 71 != 11]
    kept.insert(0, Marker(10, "probe"))
    kept.insert(200, Marker(kept[199].sample + 20, kept[199].code))
    faulty = RecordingFacts(**{**vars(facts), "markers": tuple(kept)})
    assert decided(draft_plan(faulty)).trial[0] == decided(draft_plan(facts)).trial[0]
    assert [one.slot for one in decided(draft_plan(faulty)).trial] == [
        one.slot for one in decided(draft_plan(facts)).trial
    ]


def test_pulses_that_sham_trials_lack_are_optional() -> None:
    facts = session(sham=0.4)
    plan = decided(draft_plan(facts))
    assert [slot.slot for slot in plan.trial if slot.optional and slot.role is Role.PULSE] == [
        "pulse1",
        "pulse2",
    ]
    found = match_trials(facts.markers, plan, facts.rate_hz)
    assert all(not trial.missing for trial in found.trials)


def test_without_pulses_the_draft_is_a_whole_plan() -> None:
    facts = session(pulses=False)
    text = draft_plan(facts)
    plan = parse_plan(text).plan
    assert plan.pulses.times is PulseTimes.NONE
    check_decided(plan)
    rate_hz = check_against_rate(plan, facts.rate_hz)
    geometry = Geometry(facts.rate_hz, rate_hz, facts.segments)
    ledger = candidates(match_trials(facts.markers, plan, facts.rate_hz), plan, geometry)
    assert {one.fate for one in ledger} == {Fate.KEPT}
    assert len(ledger) == 60 * 3


def test_pulses_in_the_signal_without_a_code_keep_the_decision_open() -> None:
    facts = session(pulses=False)
    text = draft_plan(facts, pulse_evidence(facts, [100, 2000]))
    assert tomllib.loads(text)["pulses"]["times"] == "markers"
    with pytest.raises(PlanError, match="window_ms"):
        check_decided(with_roles(text))


def test_gap_is_left_to_a_person() -> None:
    text = draft_plan(session())
    read = parse_plan(text, "draft.toml")
    with pytest.raises(PlanError) as caught, read.source.located():
        check_decided(read.plan)
    error = caught.value
    assert error.key == "pulses.window_ms"
    assert "must be decided" in error.problem
    assert text.split("\n")[(error.line or 0) - 1] == "[pulses]"
    assert re.search(r"^# decide: the gap", text, re.MULTILINE)


@pytest.mark.parametrize("rate_hz", [100.0, 250.0, 512.0, 1000.0, 1024.0, 5000.0, 25000.0])
def test_drafts_fit_any_rate(rate_hz: float) -> None:
    facts = session(rate_hz=rate_hz)
    plan = decided(draft_plan(facts))
    assert check_against_rate(plan, rate_hz) == min(rate_hz, 1000.0)
    rules = {rule.name: rule for rule in plan.epochs.rule}
    assert set(rules) == {"baseline", "delay1", "delay2"}
    assert 1.1 <= plan.epochs.length_s <= 1.3


def test_recording_without_markers() -> None:
    facts = RecordingFacts(**{**vars(session(n_trials=1)), "markers": ()})
    text = draft_plan(facts, NO_EVIDENCE)
    assert "no markers" in text
    plan = parse_plan(text).plan
    assert plan.trial == ()
    assert plan.epochs.rule == ()
    with pytest.raises(PlanError, match=r"trial: has no slot; at least one \[\[trial\]\] is needed"):
        check_decided(plan)


def test_one_marker_and_odd_codes() -> None:
    for code in ('quote " and \\', "[[x]]", "a = 1 # b", "ü \u2028 \x01", "type:text"):
        facts = RecordingFacts(**{**vars(session(n_trials=1)), "markers": (Marker(1.5, code),)})
        assert roles(draft_plan(facts)) == {code: "undecided"}


def test_every_key_of_the_simple_sections_is_shown() -> None:
    text = draft_plan(session())
    for key in ("search_ms", "fill", "side", "flank_ms", "highpass_hz", "rate_hz", "reference", "precision"):
        assert len(re.findall(rf"^(?:# )?{key} = ", text, re.MULTILINE)) == 1
    assert decided(text).role_of("pulse") is Role.PULSE


def test_draft_of_the_sample_recording(tmp_path: Path) -> None:
    recording = Path(__file__).parents[2] / "sample_data" / "sub-lt01_task-lantern_eeg.vhdr"
    out = finish(write_draft(recording, tmp_path / "draft.toml"))
    text = out.read_text(encoding="utf-8")
    assert roles(text) == {
        "dot": "undecided",
        "lanterns up": "undecided",
        "arrow left": "cue",
        "arrow right": "cue",
        "pulse": "pulse",
        "probe same": "probe",
        "probe other": "probe",
        "answer same": "response",
        "answer other": "response",
    }
    with pytest.raises(PlanError, match=r"pulses\.window_ms"):
        check_decided(with_roles(text))
    with pytest.raises(PlanError, match='still undecided: "dot", "lanterns up"'):
        check_decided(decided(text))


def test_plans_are_never_replaced(tmp_path: Path) -> None:
    out = tmp_path / "plan.toml"
    out.write_text("mine", encoding="utf-8")
    with pytest.raises(UsageError, match="exists already"):
        finish(write_draft(tmp_path / "none.vhdr", out))
    assert out.read_text(encoding="utf-8") == "mine"
    with pytest.raises(UsageError, match="is no folder"):
        finish(write_draft(tmp_path / "none.vhdr", tmp_path / "missing" / "plan.toml"))


def test_deciding_the_gap_keeps_every_comment_of_a_draft() -> None:
    text = draft_plan(session())
    plan = parse_plan(text).plan
    gap = replace(plan, pulses=replace(plan.pulses, window_ms=(-1.5, 20.0), flank_ms=40.0))
    lines = update_text(text, gap).split("\n")
    before = text.split("\n")
    new = ["window_ms = [-1.5, 20.0]", "flank_ms = 40.0"]
    assert [line for line in lines if line not in new] == before
    for line in new:
        place = lines.index(line)
        # Right below the line that named the key before it was decided.
        assert lines[place - 1].startswith(f"# {line.split(' ')[0]} = ")
        assert lines.index("[pulses]") < place < lines.index("# Recorded at 1000 Hz.")
    check_decided(parse_plan("\n".join(lines)).plan)


def test_comments_of_a_draft_are_sentences_for_one_and_many() -> None:
    facts = session(NAMED)
    pulses = [int(marker.sample) + 3 for marker in facts.markers if marker.code == "pulse"]
    text = draft_plan(facts, pulse_evidence(facts, [pulses[0]]))
    assert "# 1 pulse-like event in the signal." in text
    assert '"pulse": 1 of 120 markers has one, 3.0 ms after the marker' in text
    text = draft_plan(facts, pulse_evidence(facts, [pulses[0], 100, 200, facts.n_samples - 10]))
    assert "# 4 pulse-like events in the signal." in text
    assert "decide: 3 of them have no marker; add those that are pulses" in text
    assert (
        "optional = true   # decide: is a trial complete without it? It was found in 60 of 60 trials" in text
    )
    # Every decision says what has to be decided.
    for draft in (text, draft_plan(session(NUMBERED)), draft_plan(replace(facts, markers=()))):
        assert not re.search(r"decide:?\s*$", draft, re.MULTILINE)
        head = draft.split("\n")[1:3]
        assert "refuses this plan while a role is undecided, or a trial, an epoch rule or the" in head[0]
        assert "gap around the pulses is missing" in head[1]
        assert "proposals" in head[1]
