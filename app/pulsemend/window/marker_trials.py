"""Card of the Markers stage: the trials found, what is wrong with some, and markers that belong to none."""

from __future__ import annotations

from collections import Counter

from PySide6.QtCore import Qt

from pulsemend.mending.marker_edits import with_ignored, without_ignored
from pulsemend.mending.marker_view import Survey, TrialState, raw_key, trial_state
from pulsemend.model.epochs import Trial
from pulsemend.model.marks import MarkerKey
from pulsemend.model.recording import Marker
from pulsemend.window.flow import flow_row
from pulsemend.window.marker_hands import Item, ItemLists, MarkerHands
from pulsemend.window.parts import Card, button

EXTRA, IGNORED = "extra", "ignored"


class TrialsCard(Card):
    """Counts, and lists of what to look at.

    Parameters
    ----------
    hands : MarkerHands
        Changes the marks and goes there.
    """

    def __init__(self, hands: MarkerHands) -> None:
        super().__init__("Trials")
        self._hands = hands
        self._survey: Survey | None = None
        self.problem = self.add_note()
        self.found = self.add_line("found")
        self.lines = {state: self.add_line(state.value) for state in TrialState}
        self.kinds = self.add_note()
        self.blocks = self.add_line("blocks")
        self.extra = self.add_line("markers of no trial")
        self.lists = ItemLists("Trials and markers to look at", hands)
        self.add(self.lists)
        self.ignore = button(
            "Ignore this marker", self._ignore, tooltip="The selected markers count for nothing any more"
        )
        self.count_again = button("Count it again", self._count_again, tooltip="The selected markers")
        self._acts = flow_row(self.ignore, self.count_again)
        self.add(self._acts)
        self.lists.changed.connect(self._tell)
        self.show_survey(None, "")

    def show_survey(self, survey: Survey | None, waiting: str) -> None:
        """Show trials; while there are none, say why."""
        self._survey = survey
        trials = () if survey is None else survey.trials.trials
        usable = survey is not None and survey.plan is not None and not survey.problem
        self.problem.setText(waiting or ("" if survey is None else survey.problem))
        self.problem.setVisible(bool(self.problem.text()))
        for line in (self.found, self.blocks, self.extra, *self.lines.values()):
            line.setVisible(usable)
        self.kinds.hide()
        if survey is None or not usable:
            self.lists.show_lists(())
            return
        counts = Counter(trial_state(trial) for trial in trials)
        self.found.show_value(str(len(trials)), attention=not trials)
        for state, line in self.lines.items():
            line.show_value(str(counts[state]), attention=state is TrialState.DOUBTFUL and counts[state] > 0)
        kinds = Counter(trial.kind for trial in trials)
        if any(kinds):
            self.kinds.setText("Kinds: " + ", ".join(f"{kind} {count}" for kind, count in kinds.items()))
            self.kinds.show()
        blocks = len({trial.block for trial in trials if trial.block})
        self.blocks.show_value(str(blocks) if blocks else "none in the plan")
        self.extra.show_value(str(len(survey.trials.extra)))
        self._show_lists(survey)

    def _show_lists(self, survey: Survey) -> None:
        trials, rate_hz = survey.trials.trials, survey.rate_hz
        of_state = {
            state: [
                _trial_item(trial, rate_hz, _why(trial, state))
                for trial in trials
                if trial_state(trial) is state
            ]
            for state in (TrialState.DOUBTFUL, TrialState.INCOMPLETE, TrialState.SET_ASIDE)
        }
        extra = [Item(marker.code, marker.sample / rate_hz, key=marker) for marker in survey.trials.extra]
        ignored = [Item(key.code, key.sample / rate_hz, key=key) for key in survey.marks.markers_ignored]
        self.lists.show_lists(
            [
                *((state.value, f"{state.value} trials", items) for state, items in of_state.items()),
                (EXTRA, "markers of no trial", extra),
                (IGNORED, "markers ignored by hand", ignored),
            ]
        )

    def _tell(self) -> None:
        self.ignore.setVisible(self.lists.shown == EXTRA)
        self.count_again.setVisible(self.lists.shown == IGNORED)
        self.ignore.setEnabled(bool(self.lists.selected))
        self.count_again.setEnabled(bool(self.lists.selected))
        self._acts.setVisible(self.lists.shown in (EXTRA, IGNORED))

    def _ignore(self) -> None:
        survey = self._survey
        if survey is None:
            return
        extra = [item.key for item in self.lists.selected if isinstance(item.key, Marker)]
        keys = [key for marker in extra if (key := raw_key(marker, survey.raw, survey.rate_hz)) is not None]
        marks = self._hands.bench.session.marks
        self._hands.change_marks(f"Ignore {_markers(keys)}", with_ignored(marks, keys))
        self._keep_focus()

    def _count_again(self) -> None:
        keys = [item.key for item in self.lists.selected if isinstance(item.key, MarkerKey)]
        marks = self._hands.bench.session.marks
        self._hands.change_marks(f"Count {_markers(keys)} again", without_ignored(marks, keys))
        self._keep_focus()

    def _keep_focus(self) -> None:
        """Stay at the list: its button may be gone now, and the focus would go to another card."""
        self.lists.table.setFocus(Qt.FocusReason.OtherFocusReason)


def _markers(keys: list[MarkerKey]) -> str:
    return f"marker {keys[0].code}" if len(keys) == 1 else f"{len(keys)} markers"


def _why(trial: Trial, state: TrialState) -> str:
    if state is TrialState.DOUBTFUL:
        return "; ".join(trial.doubts)
    return f"no {', '.join(trial.missing)}" if state is TrialState.INCOMPLETE else trial.set_aside


def _trial_item(trial: Trial, rate_hz: float, why: str) -> Item:
    samples = [marker.sample for marker in trial.markers.values()] or [0.0]
    return Item(f"trial {trial.number}: {why}", min(samples) / rate_hz, max(samples) / rate_hz, trial.number)
