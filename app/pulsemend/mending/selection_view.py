"""What kept and left-out epochs are compared by: evidence that a guard does not choose its trials."""

from __future__ import annotations

from collections.abc import Mapping

from pulsemend.mending.prepare import Decision
from pulsemend.model.plan import Plan
from pulsemend.model.trial_kinds import variants
from pulsemend.model.vocabulary import Role
from pulsemend.trials.selection import SelectionDifference, selection_differences

Values = Mapping[int, float | str | None]


def selection_variables(decision: Decision, plan: Plan) -> dict[str, Values]:
    """Values of every trial, by its number: latencies of pulses since their reference, columns of the log.

    Parameters
    ----------
    decision : Decision
        Trials with their rows of the log.
    plan : Plan
        Its slots.
    """
    rate_hz, onsets = decision.geometry.recorded_hz, decision.geometry.onsets
    references = {
        (way.kind, slot.slot): slot.after
        for way in variants(plan)
        for slot in way.slots
        if slot.role is Role.PULSE
    }
    found: dict[str, dict[int, float | str | None]] = {}
    for trial in decision.trials.trials:
        for (kind, name), reference in references.items():
            pulse, since = trial.markers.get(name), trial.markers.get(reference)
            if kind != trial.kind or pulse is None or since is None:
                continue
            onset = onsets.get(pulse.sample, pulse.sample)
            column = f"{name} latency since {reference} [s]"
            found.setdefault(column, {})[trial.number] = (onset - since.sample) / rate_hz
        for name, text in trial.log.items():
            found.setdefault(f"log.{name}", {})[trial.number] = _number_or_text(text)
    return dict(found)


def decision_differences(decision: Decision, plan: Plan) -> tuple[SelectionDifference, ...]:
    """Compare kept and left-out candidates of every rule; see `selection_differences`.

    Parameters
    ----------
    decision : Decision
        Candidates and trials.
    plan : Plan
        Its slots.
    """
    return selection_differences(
        decision.ledger, selection_variables(decision, plan), decision.geometry.recorded_hz
    )


def _number_or_text(text: str) -> float | str:
    try:
        return float(text)
    except ValueError:
        return text
