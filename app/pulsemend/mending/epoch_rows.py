"""Candidate epochs as rows of a table, and their counts: what a list of them shows, without a window."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

from pulsemend.mending.learned import Learned
from pulsemend.mending.prepare import Decision
from pulsemend.model.epochs import Candidate
from pulsemend.model.marks import EpochKey
from pulsemend.model.plan import EpochRule, Plan
from pulsemend.model.recording import RecordingFacts
from pulsemend.model.trial_kinds import expanded_slots
from pulsemend.model.vocabulary import Fate, PulseRule
from pulsemend.progress import Progress, Work
from pulsemend.trials.balance import balanced
from pulsemend.trials.candidates import candidates, set_order


@dataclass(frozen=True)
class EpochRow:
    """One candidate epoch.

    Parameters
    ----------
    trial, piece : int
        From 1.
    rule : str
    anchor_s : float or None
        Instant of the anchor, seconds from the recording's first sample; None if the slot is missing.
    near_s : float
        The anchor's instant, or where its trial begins: never missing, for sorting and for going there.
    span : tuple of (int, int) or None
        Recorded samples, half open; may reach beyond the recording. None without an anchor.
    fate : Fate
    detail : str
        What exactly; empty for kept epochs.
    """

    trial: int
    rule: str
    piece: int
    anchor_s: float | None
    near_s: float
    span: tuple[int, int] | None
    fate: Fate
    detail: str

    @property
    def key(self) -> EpochKey:
        """Name of the epoch in the marks."""
        return EpochKey(self.trial, self.rule, self.piece)


@dataclass(frozen=True)
class RuleCount:
    """How many epochs of a rule are kept, of how many."""

    rule: str
    kept: int
    total: int


def epoch_rows(decision: Decision, plan: Plan) -> tuple[EpochRow, ...]:
    """All candidates as rows, in order of time, then of rule.

    Parameters
    ----------
    decision : Decision
        Trials, geometry and ledger.
    plan : Plan
        The plan that was decided with.
    """
    rate_hz = decision.geometry.recorded_hz
    begins = {
        trial.number: min((marker.sample for marker in trial.markers.values()), default=0.0)
        for trial in decision.trials.trials
    }
    rows: list[tuple[float, int, int, EpochRow]] = []
    for one in decision.ledger:
        near = begins[one.trial] if one.anchor_sample is None else one.anchor_sample
        row = EpochRow(
            trial=one.trial,
            rule=one.rule,
            piece=one.piece,
            anchor_s=None if one.anchor_sample is None else one.anchor_sample / rate_hz,
            near_s=near / rate_hz,
            span=_span(one, decision, plan),
            fate=one.fate,
            detail=one.detail,
        )
        rows.append((row.near_s, one.rule_index, one.piece, row))
    return tuple(row for *_, row in sorted(rows, key=lambda item: item[:3]))


def kept_of_all(decision: Decision, plan: Plan) -> tuple[RuleCount, ...]:
    """Count kept epochs per rule, in the plan's order; rules without any included.

    Parameters
    ----------
    decision : Decision
        Trials, geometry and ledger.
    plan : Plan
        The plan that was decided with.
    """
    total = Counter(one.rule for one in decision.ledger)
    kept = Counter(one.rule for one in decision.kept)
    return tuple(RuleCount(rule.name, kept[rule.name], total[rule.name]) for rule in plan.epochs.rule)


def left_out_by_reason(ledger: Sequence[Candidate]) -> tuple[tuple[Fate, int], ...]:
    """Count what is left out, in the order of the fates; reasons without any are absent.

    Parameters
    ----------
    ledger : sequence of Candidate
        All candidates.
    """
    counts = Counter(one.fate for one in ledger)
    return tuple((fate, counts[fate]) for fate in Fate if fate is not Fate.KEPT and counts[fate])


def why_no_trial(plan: Plan, facts: RecordingFacts) -> str:
    """Say why no trial was found, and what can be done.

    Parameters
    ----------
    plan : Plan
        Codes, roles and slots.
    facts : RecordingFacts
        The recording's markers.
    """
    slots = expanded_slots(plan)
    if not slots:
        return "The plan has no slot: name the markers of one trial in order, each under a [[trial]]."
    found = Counter(marker.code for marker in facts.markers)
    if not found:
        return "The recording has no markers at all. Open a recording with its markers."
    present = {plan.role_of(code) for code in found}
    lacking = next((slot for slot in slots if slot.role not in present and not slot.optional), None)
    if lacking is None:
        return (
            "Codes of all roles are there, but they never follow each other as the slots of the plan allow: "
            "compare the times of the slots (after_s) with the intervals between the codes."
        )
    codes = [marker.code for marker in plan.markers if marker.role is lacking.role]
    codes += [f"by bits {bits.name}" for bits in plan.bits if lacking.role in bits.roles.values()]
    listed = ", ".join(f"{code} ({count})" for code, count in found.most_common(6))
    listed += ", ..." if len(found) > 6 else ""
    missing = f"the recording has none of its codes ({', '.join(codes)})" if codes else "no code has it"
    return (
        f"The slot {lacking.slot} takes a marker of role {lacking.role}, and {missing}. "
        f"The recording has {listed}: give the right one this role in the plan."
    )


def _span(one: Candidate, decision: Decision, plan: Plan) -> tuple[int, int] | None:
    if one.anchor_sample is None:
        return None
    geometry = decision.geometry
    first = round(geometry.first_sample(one.anchor_sample, one.start_s))
    return first, first + max(1, round(plan.epochs.length_s * geometry.recorded_hz))


def kept_under(learned: Learned, place: int) -> Work[Mapping[PulseRule, int]]:
    """Count what one rule would keep under each of its choices about pulses: evidence beside the choice.

    Parameters
    ----------
    learned : Learned
        What is known of the recording.
    place : int
        Place of the rule, from 0.

    Yields
    ------
    Progress

    Returns
    -------
    mapping of PulseRule to int
    """
    decision, plan = learned.decision, learned.plan
    kept: dict[PulseRule, int] = {}
    for choice in PulseRule:
        yield Progress("counting epochs", len(kept), len(PulseRule))
        rule = replace(plan.epochs.rule[place], pulse=choice)
        alone = replace(plan, epochs=replace(plan.epochs, rule=(rule,)))
        kept[choice] = sum(one.kept for one in candidates(decision.trials, alone, decision.geometry))
    return kept


def recounted(decision: Decision, before: Plan, plan: Plan) -> Work[Decision]:
    """Decide about every epoch anew under other rules or another balance, with the trials and gaps known.

    Quicker than deciding about everything, for counts that follow while a rule is dragged: rules that are
    what they were keep their candidates.

    Parameters
    ----------
    decision : Decision
        What was decided.
    before : Plan
        The plan it was decided with.
    plan : Plan
        The same but for rules, length and balance.

    Yields
    ------
    Progress

    Returns
    -------
    Decision
        With ledger and kept as deciding about everything gives them, and the old warnings.
    """
    yield Progress("counting epochs", 0, 2)
    places = _moved_rules(before, plan)
    if places is None:
        ledger: Sequence[Candidate] = candidates(decision.trials, plan, decision.geometry)
    else:
        ledger = _with_rules_anew(decision, plan, places)
    yield Progress("counting epochs", 1, 2)
    by = plan.balance
    matched = balanced(ledger, by.by, by.choose, by.seed).candidates
    return replace(decision, ledger=matched, kept=set_order(matched, decision.geometry))


def _moved_rules(before: Plan, plan: Plan) -> set[int] | None:
    """Places of rules whose epochs begin or are judged otherwise; None where more than that differs."""

    def but_for_times(rule: EpochRule, like: EpochRule) -> EpochRule:
        return replace(
            rule,
            start_s=like.start_s,
            pulse=like.pulse,
            clear_ms=like.clear_ms,
            stop_before=like.stop_before,
        )

    pairs = list(zip(before.epochs.rule, plan.epochs.rule, strict=False))
    same_rules = len(before.epochs.rule) == len(plan.epochs.rule) and all(
        but_for_times(old, new) == new for old, new in pairs
    )
    if not same_rules or before.epochs.length_s != plan.epochs.length_s:
        return None
    return {place for place, (old, new) in enumerate(pairs) if old != new}


def _with_rules_anew(decision: Decision, plan: Plan, places: set[int]) -> list[Candidate]:
    """Candidates before balance, those of some rules judged anew; their labels stay."""
    labels = {(one.trial, one.rule_index): one.labels for one in decision.ledger if one.rule_index in places}
    ledger = [
        replace(one, fate=Fate.KEPT, detail="") if one.fate is Fate.BALANCE else one
        for one in decision.ledger
        if one.rule_index not in places
    ]
    for place in places:
        alone = replace(
            plan, epochs=replace(plan.epochs, rule=(replace(plan.epochs.rule[place], labels={}),))
        )
        ledger += [
            replace(one, rule_index=place, labels=labels[one.trial, place])
            for one in candidates(decision.trials, alone, decision.geometry)
        ]
    return sorted(ledger, key=lambda one: (one.trial, one.rule_index, one.piece))
