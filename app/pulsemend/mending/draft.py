"""A first plan for a recording: everything that can be told, and every decision left open marked as such.

A draft of a recording with pulses is no finished plan on purpose: it can be opened and edited, but `mend`
refuses it until a person has decided the gap and the roles of the codes that the markers do not explain.
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

from pulsemend.errors import UsageError
from pulsemend.mending.draft_log import log_lines, logs_beside
from pulsemend.mending.facts import RecordingSummary, summarise
from pulsemend.mending.gap_suggestion import GapSuggestion
from pulsemend.mending.prepare import marks_path
from pulsemend.mending.pulse_evidence import NO_EVIDENCE, PulseEvidence, gaps_around, pulse_evidence
from pulsemend.model.keys import Key, show
from pulsemend.model.log import LogTable
from pulsemend.model.plan_checks import LARGEST_BAND
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.plan_keys import PLAN_KEYS, SCHEMA
from pulsemend.model.recording import RecordingFacts
from pulsemend.model.toml_lines import key_text
from pulsemend.model.toml_tables import write_text
from pulsemend.model.vocabulary import Role
from pulsemend.progress import Work
from pulsemend.readers.common import stem_of
from pulsemend.readers.opening import open_recording
from pulsemend.trials.faults import find_faults
from pulsemend.trials.proposal import CodeGuess, Guess, SlotGuess, guess

_ALWAYS = 0.8
_LONGEST_EPOCH_S, _SHORTEST_EPOCH_S = 2.0, 0.2


def write_draft(recording: Path, out: Path) -> Work[Path]:
    """Write a first plan for a recording.

    Parameters
    ----------
    recording : Path
        The recording to start from.
    out : Path
        The plan to write; it must not exist.

    Yields
    ------
    Progress

    Returns
    -------
    Path
        The plan.

    Raises
    ------
    UsageError
        There is such a file already, or no folder for it.
    RecordingError
        The recording cannot be used.
    """
    _check_free(out)
    stem = stem_of(recording)
    # Decisions about this recording that stand beside the plan count here as everywhere.
    marks = marks_path(out, stem)
    summary = yield from summarise(recording, marks_path=marks if marks.exists() else None)
    evidence = yield from _evidence(recording, summary)
    logs = logs_beside(recording.parent, summary.facts.stem)
    text = draft_plan(summary.facts, evidence, logs, summary.notes)
    _check_free(out)
    write_text(out, text)
    return out


def _evidence(path: Path, summary: RecordingSummary) -> Work[PulseEvidence]:
    """Assign the pulses found to markers, and look around them for where they end."""
    evidence = pulse_evidence(summary.facts, summary.pulses_found)
    if not summary.pulses_found:
        return evidence
    recording = open_recording(path)
    try:
        gaps = yield from gaps_around(recording, summary.pulses_found)
    finally:
        recording.close()
    return replace(evidence, gaps=gaps)


def _check_free(out: Path) -> None:
    if os.path.lexists(out):
        raise UsageError("exists already", where=str(out), todo="Choose another name; plans are not replaced")
    if not out.parent.is_dir():
        raise UsageError("is no folder", where=str(out.parent), todo="Make it first")


def draft_plan(
    facts: RecordingFacts,
    evidence: PulseEvidence = NO_EVIDENCE,
    logs: Sequence[LogTable] = (),
    notes: Sequence[str] = (),
) -> str:
    """Write the text of a first plan.

    Parameters
    ----------
    facts : RecordingFacts
        The recording to start from.
    evidence : PulseEvidence
        What the signal shows; without it only names and intervals speak.
    logs : sequence of LogTable
        Tables beside the recording that may be its log.
    notes : sequence of str
        What the recording's marks have changed about its markers.

    Returns
    -------
    str
        TOML with comments; lines marked ``# decide:`` need a person.
    """
    found = guess(facts.markers, facts.rate_hz, evidence.pulse_codes)
    rate_hz = _output_rate_hz(facts.rate_hz)
    before = [_head(facts), _faults(facts, notes), _markers(found), _trial(found)]
    after = [
        _pulses(found, evidence),
        _filter(facts.rate_hz, rate_hz),
        _section("channels"),
        _epochs(found, rate_hz or facts.rate_hz),
        _section("export"),
    ]
    log = log_lines(logs, facts, parse_plan(_joined([*before, *after])).plan) if logs else []
    return _joined([*before, log, *after])


def _joined(parts: Sequence[Sequence[str]]) -> str:
    return "\n\n".join("\n".join(lines) for lines in parts if lines) + "\n"


def _faults(facts: RecordingFacts, notes: Sequence[str]) -> list[str]:
    """Name the faults of the markers; those with a cure, with what accepts it."""
    lines = [f"# By this recording's marks: {_one_line(note)}." for note in notes]
    faults = find_faults(facts.markers, facts.rate_hz)
    if faults:
        lines.append("# Faults found in the markers:")
    for fault in faults:
        lines.append(f"# - {_one_line(fault.words)}")
        if fault.cure:
            lines.append(f"#   cure: {_one_line(fault.cure)}")
    keys = [fault.key for fault in faults if fault.cure]
    if keys:
        lines += [
            "# decide: which cures are right. The marks of each recording accept them, in the window or by",
            f"# hand in marks/{_one_line(facts.stem)}.marks.toml beside this plan; a draft made after that",
            "# shows the codes as cured. Add to those that stand there already:",
            "# [cures]",
            "# accepted = [",
            *(f"#   {show(key)}," for key in keys),
            "# ]",
        ]
    return lines


def _one_line(text: str) -> str:
    """Make a text fit a comment, which ends with its line and holds no signs of control."""
    return "".join(sign if sign.isprintable() else "?" for sign in " ".join(text.split()))


def _head(facts: RecordingFacts) -> list[str]:
    return [
        f"# First plan, drafted from {show(facts.stem)}.",
        "# `pulsemend mend` refuses this plan while a role is undecided, or a trial, an epoch rule or the",
        "# gap around the pulses is missing. All other lines marked `decide:` are proposals: check them.",
        f"pulsemend = {SCHEMA}",
        "",
        "[about]",
        'name = ""   # decide: name of the study',
        "line_hz = 0   # decide: mains frequency to remove, 50 or 60; 0: no line removal",
    ]


def _markers(found: Guess) -> list[str]:
    lines = ["# Every code of the recording, what it stands for, and the labels it gives to its trial."]
    if not found.codes:
        return [*lines, "# decide: this recording has no markers; without any there are no trials."]
    lines.append('# Labels are written as: labels = { item = "left" }')
    for one in found.codes:
        lines += ["", f"# {_neighbourhood(one, found)}", f"[{key_text(('markers', one.code))}]"]
        if one.role is Role.UNDECIDED:
            roles = ", ".join(role.value for role in Role if role is not Role.UNDECIDED)
            lines.append(f'role = "undecided"   # decide: {roles}')
        else:
            lines.append(f'role = "{one.role}"   # decide: right? {one.reason}')
    return lines


def _neighbourhood(one: CodeGuess, found: Guess) -> str:
    text = f"{one.count} times" if one.count > 1 else "once"
    if found.slots and one.role is Role.UNDECIDED:
        text += f", {one.count / found.n_trials:.2f} for each {show(found.slots[0].slot.slot)}"
    if one.before:
        text += f"; usually {one.before[1]:.3f} s after {show(one.before[0])}"
    if one.after:
        text += f"{' and' if one.before else '; usually'} {one.after[1]:.3f} s before {show(one.after[0])}"
    return text


def _trial(found: Guess) -> list[str]:
    if not found.slots:
        return [
            "# decide: no trial could be made out; name the markers of one trial in order, for example:",
            "# [[trial]]",
            '# slot = "sample"',
            '# role = "sample"',
            "# [[trial]]",
            '# slot = "cue1"',
            '# role = "cue"',
            "# after_s = [1.0, 2.0]",
        ]
    lines = [
        "# One trial: its markers in order, "
        + (f"as in most of {found.n_trials} trials." if found.n_trials > 1 else "as in the only trial.")
        + " decide: right?",
        "# after_s counts from the nearest earlier slot that is not optional.",
        *_kinds(found),
    ]
    for one in found.slots:
        lines += ["", "[[trial]]", f"slot = {show(one.slot.slot)}", f'role = "{one.slot.role}"']
        lines += _slot_limits(one)
        if one.slot.optional:
            lines.append(
                "optional = true   # decide: is a trial complete without it?"
                f" It was found in {one.found} of {_counted(found.n_trials, 'trial')}"
            )
    return lines


def _kinds(found: Guess) -> list[str]:
    """Say where trials differ by more than answers."""
    if len(found.ways) < 2:
        return []
    return [
        "# decide: trials do not all run alike. Are they kinds of their own? Then slots that only some have",
        '# get kinds = ["..."], with the names of these kinds; else a slot that may be missing is optional.',
        *(f"# {count} trials: {', '.join(role.value for role in roles)}" for roles, count in found.ways),
    ]


def _slot_limits(one: SlotGuess) -> list[str]:
    if one.slot.after_s is None or one.seen_s is None:
        return []
    low, high = one.slot.after_s
    return [
        f"after_s = [{low}, {high}]   # seen: {one.seen_s[0]:.3f} to {one.seen_s[1]:.3f} s in 98 % of them"
    ]


def _pulses(found: Guess, evidence: PulseEvidence) -> list[str]:
    lines = (
        [f"# {_counted(evidence.n_events, 'pulse-like event')} in the signal."] if evidence.n_events else []
    )
    lines += [
        f"# {show(one.code)}: {one.n_in_signal} of {_counted(one.n_markers, 'marker')}"
        f" {'has' if one.n_in_signal == 1 else 'have'} one,"
        f" {one.latency_ms:.1f} ms after the marker ({one.least_ms:.1f} to {one.most_ms:.1f})."
        for one in evidence.codes
    ]
    if evidence.unmarked:
        lines.append(
            "# decide: 1 of them has no marker; if it is a pulse, add it in the recording's marks, or say"
            ' times = "both".'
            if evidence.unmarked == 1
            else f"# decide: {evidence.unmarked} of them have no marker; add those that are pulses in the"
            ' recording\'s marks, or say times = "both".'
        )
    roles = {one.role for one in found.codes}
    if Role.PULSE not in roles and Role.UNDECIDED not in roles and found.codes and not evidence.n_events:
        lines.append("# decide: no code is a pulse, so nothing is repaired; right?")
        return [*lines, *_section("pulses", times='"none"')]
    gap = [
        "# decide: the gap around every pulse, from before its onset until the spike and the muscle response",
        "# are over in the channels near the coil. Look at the pulses, then write for example:",
        "# window_ms = [-2.0, 14.0]   # replaced, in ms since the onset",
        *_gap_evidence(evidence.gaps),
    ]
    return [*lines, *_section("pulses", window_ms=gap), *_further_gaps(evidence.gaps)]


def _gap_evidence(gaps: GapSuggestion) -> list[str]:
    """Say what the signal shows; the window stays to be decided."""
    if not gaps.n_pulses:
        return []
    low, high = gaps.window_ms
    short = len(gaps.ends) - len(gaps.exceptions)
    lines = [
        f"# Seen at {_counted(gaps.n_pulses, 'pulse')}: [{low}, {high}] would cover the artifact in "
        f"{short} of {_counted(len(gaps.ends), 'channel')}",
        f"# ({gaps.words}); muscle activity may last to 20 ms.",
    ]
    going_on = [end.channel for end in gaps.ends if end.goes_on]
    if going_on:
        lines.append(f"# Not over after 60 ms, a matter of the decay: {', '.join(going_on)}.")
    return [*lines, f"# {gaps.ringing[0].upper()}{gaps.ringing[1:]}."] if gaps.ringing else lines


def _further_gaps(gaps: GapSuggestion) -> list[str]:
    lines = []
    for offer in gaps.recharges:
        lines += [
            f"# decide: a recharge? {offer.words[0].upper()}{offer.words[1:]}; to replace it, too:",
            "# [[pulses.also]]",
            f"# window_ms = [{offer.window_ms[0]}, {offer.window_ms[1]}]",
        ]
    if gaps.exceptions:
        signs = {end.channel: end.sign for end in gaps.ends}
        lines += ["# decide: longer gaps for single channels?", "# [pulses.channels]"]
        lines += [
            f"# {key_text((name,))} = [{low}, {high}]   # {signs[name]}"
            for name, (low, high) in gaps.exceptions.items()
        ]
    return lines


def _filter(recorded_hz: float, rate_hz: float) -> list[str]:
    highest_hz = LARGEST_BAND * (rate_hz or recorded_hz)
    lowpass = {} if highest_hz >= 100.0 else {"lowpass_hz": "0.0"}
    rate = {} if rate_hz else {"rate_hz": "0.0"}
    return [f"# Recorded at {recorded_hz:.12g} Hz.", *_section("filter", **lowpass, **rate)]


def _output_rate_hz(recorded_hz: float) -> float:
    """Output rate of the draft: the default, or 0 where the recording is not faster."""
    default = next(key.default for key in PLAN_KEYS if key.path == "filter.rate_hz")
    return float(str(default)) if recorded_hz > float(str(default)) else 0.0


def _epochs(found: Guess, rate_hz: float) -> list[str]:
    lines = ["# One length for the whole set, and one rule for each kind of epoch."]
    cues = [place for place, one in enumerate(found.slots) if one.slot.role is Role.CUE]
    if not found.slots:
        return [
            *lines,
            "# decide: rules need the slots of a trial.",
            "[epochs]",
            "length_s = 1.0   # decide: how long every epoch is, in s",
            "# [[epochs.rule]]",
            '# name = "delay1"',
            '# anchor = "cue1"',
            "# start_s = 0.0",
        ]
    length_s = _length_s(found.slots, cues, rate_hz)
    lines += [
        "[epochs]",
        f"length_s = {length_s:.15g}   # decide: the longest that fits between a cue and what follows",
    ]
    first = found.slots[0].slot.slot
    lines += _rule("baseline", first, -length_s, f"before {show(first)}")
    for number, place in enumerate(cues, start=1):
        cue = found.slots[place].slot.slot
        following = found.slots[place + 1].slot.slot if place + 1 < len(found.slots) else ""
        lines += _rule(f"delay{number}", cue, 0.0, f"from {show(cue)} on", following)
    return lines


def _length_s(slots: Sequence[SlotGuess], cues: Sequence[int], rate_hz: float) -> float:
    """Longest epoch, in whole output samples and mostly in tenths of a second, that fits after every cue."""
    after = [slots[place + 1].seen_s for place in cues if place + 1 < len(slots)]
    room_s = min((seen[0] for seen in after if seen is not None), default=1.0)
    length_s = min(max(int(room_s * 10 + 1e-6) / 10, _SHORTEST_EPOCH_S), _LONGEST_EPOCH_S)
    return max(1, round(length_s * rate_hz)) / rate_hz


def _rule(name: str, anchor: str, start_s: float, what: str, stop_before: str = "") -> list[str]:
    lines = [
        "",
        f"[[epochs.rule]]   # decide: right? {what}",
        f'name = "{name}"',
        f"anchor = {show(anchor)}",
        f"start_s = {start_s:.15g}",
    ]
    return [*lines, f"stop_before = {show(stop_before)}"] if stop_before else lines


def _section(name: str, **settled: str | list[str]) -> list[str]:
    """All single keys of a section with their defaults and meanings, from the table of keys."""
    lines = [f"[{name}]"]
    for key in PLAN_KEYS:
        section, _, own = key.path.partition(".")
        if section != name or "." in own or "*" in own:
            continue
        value = settled.get(own, show(key.default))
        if isinstance(value, list):
            lines += value
        elif key.default is None:
            lines.append(f"# {own} = ...   # {_meaning(key)}")
        else:
            lines.append(f"{own} = {value}   # {_meaning(key)}")
    return lines


def _counted(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


def _meaning(key: Key) -> str:
    return f"{key.meaning}: {key.allowed}" if key.words else key.meaning
