"""The stage Epochs: the rules, the counts they lead to, one lane per trial, every candidate with its fate."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace

from PySide6.QtWidgets import QStackedWidget, QVBoxLayout, QWidget

from pulsemend.errors import InputError, PlanError, SettingError
from pulsemend.mending.condition_view import ConditionView, condition_view, rule_differences
from pulsemend.mending.epoch_lanes import Lanes, epoch_lanes
from pulsemend.mending.epoch_rows import (
    EpochRow,
    epoch_rows,
    kept_of_all,
    kept_under,
    left_out_by_reason,
    why_no_trial,
)
from pulsemend.mending.learned import Learned
from pulsemend.mending.prepare import Decision
from pulsemend.mending.rule_edits import (
    check_epochs,
    with_balance,
    with_copy,
    with_length,
    with_moved_rule,
    with_new_rule,
    with_rule,
    without_rule,
)
from pulsemend.model.epochs import nearest_sample
from pulsemend.model.label_columns import LOG
from pulsemend.model.marks import EpochKey, Marks
from pulsemend.model.plan import Balance, EpochRule, Plan
from pulsemend.model.vocabulary import Fate, PulseRule
from pulsemend.progress import Work
from pulsemend.session.changed import Changed
from pulsemend.session.found import Selected, Stage
from pulsemend.trials.selection import SelectionDifference
from pulsemend.window.condition_cards import BalanceCard, ConditionsCard, SelectionCard
from pulsemend.window.epoch_lanes import Try
from pulsemend.window.fields import Field, PlainNumber, in_words
from pulsemend.window.flow import column_of
from pulsemend.window.lane_page import LanePage
from pulsemend.window.lane_preview import LanePreview, Preview, tried_plan
from pulsemend.window.parts import Card, EmptyState, ValueLine
from pulsemend.window.rule_editor import RuleEditor, RuleList
from pulsemend.window.stages.base import StagePage
from pulsemend.window.theme import Theme
from pulsemend.window.workbench import Workbench

ROOM_AROUND = 2.5
"""Part in view when an epoch is gone to, at least, in epochs."""


@dataclass(frozen=True)
class _Laid:
    """What a worker lays out of what is learned."""

    learned: Learned
    rows: tuple[EpochRow, ...]
    lanes: Lanes


def _lay_out(learned: Learned) -> Work[_Laid]:
    lanes = yield from epoch_lanes(learned.decision, learned.plan)
    return _Laid(learned, epoch_rows(learned.decision, learned.plan), lanes)


class EpochsStage(StagePage):
    """Rules, counts, lanes, candidates.

    Parameters
    ----------
    bench : Workbench
        Session and workers.
    """

    stage = Stage.EPOCHS

    def __init__(self, bench: Workbench) -> None:
        super().__init__(bench)
        self._place = 0
        self._laid: _Laid | None = None
        self._tried: Preview | None = None
        self._picked: tuple[str, ...] | None = None
        self._build()
        self.preview = LanePreview(bench, self._show_preview)
        session = bench.session
        self.follow(self._show_plan, Changed.PLAN, Changed.RECORDING)
        self.follow(lambda: self.table.show_marks(session.marks), Changed.MARKS)
        self.hear(bench.learned_changed, self._show_learned)
        self.hear(bench.learning_changed, self._show_learning)
        self._show_plan()
        self._show_learned()

    @property
    def is_counted(self) -> bool:
        """Whether lanes and table show what is learned."""
        return self._laid is not None and self._laid.learned is self.bench.learned

    def show_stage(self) -> None:
        """Count what only an open stage needs."""
        super().show_stage()
        self._lay_out_anew()
        self._count_choices()

    def set_theme(self, theme: Theme) -> None:
        """Draw lanes, looks of rules and shapes of fates in other colours."""
        self.lane_page.set_theme(theme)
        self.rules.model.set_theme(theme)

    # Put together

    def _build(self) -> None:
        self.set_card = Card("Epochs", "one length for the whole set")
        self.length = PlainNumber("Length of every epoch", "s", 0.001, 3600, 0.1)
        self.length_field = Field("length", self.length)
        self.set_card.add(self.length_field)
        self.samples = self.set_card.add_line("samples per epoch")
        self.trials = self.set_card.add_line("trials found")
        self.states = self.set_card.add_note()
        self.excluded = self.set_card.add_line("trials excluded by hand")
        self.kept = self.set_card.add_line("epochs kept")
        self.length.committed.connect(self._take_length)
        self.length.editingFinished.connect(self.bench.session.end_merge)
        self.rules = RuleList(self.bench.theme)
        self.editor = RuleEditor(self._edit_rule, self.bench.session.end_merge)
        self.reasons = Card("Left out, by reason")
        self._reason_lines: list[ValueLine] = []
        self.nothing_left_out = self.reasons.add_note("Nothing is left out.")
        self.conditions = ConditionsCard()
        self.balance = BalanceCard()
        self.selection = SelectionCard()
        self.notes = Card("Notes")
        self.notes_text = self.notes.add_note()
        self.no_plan = Card("Epochs")
        self.no_plan_words = self.no_plan.add_note()
        counts = (self.conditions, self.balance, self.reasons, self.selection)
        self._cards = (self.set_card, self.rules, self.editor, *counts)
        self.settings = column_of(self.no_plan, *self._cards, self.notes, name="Epochs, settings")
        self.lane_page = LanePage(self.bench.theme)
        self.lanes, self.table = self.lane_page.view, self.lane_page.table
        self.empty = EmptyState("")
        self.picture = QWidget()
        column = QVBoxLayout(self.picture)
        column.setContentsMargins(0, 0, 0, 0)
        self.pages = QStackedWidget()
        self.pages.addWidget(self.empty)
        self.pages.addWidget(self.lane_page)
        column.addWidget(self.pages)
        self.empty.text.setWordWrap(True)
        self._listen()

    def _listen(self) -> None:
        self.rules.chosen.connect(self._choose)
        self.rules.add_wanted.connect(self._add)
        self.rules.copy_wanted.connect(self._copy)
        self.rules.remove_wanted.connect(self._remove)
        self.rules.move_wanted.connect(self._move)
        self.table.wanted.connect(self.go_to)
        self.table.marks_wanted.connect(self._edit_marks)
        self.lanes.wanted.connect(self._go_lane)
        self.lanes.chosen.connect(self._choose_in_lanes)
        self.lanes.trying.connect(self._try)
        self.lanes.dropped.connect(self._drop)
        self.lanes.given_up.connect(self._give_up)
        self.lanes.stepped.connect(self.bench.session.end_merge)
        self.conditions.chosen.connect(self._pick_columns)
        self.balance.wanted.connect(self._edit_balance)

    # Edits

    def _edit(self, field: str, label: str, plan: Plan, merge_key: str | None = None) -> str:
        """Change the plan; gives the words of a refusal, empty if there is none."""
        session = self.bench.session
        try:
            if session.recording is not None:
                check_epochs(plan, session.recording.facts.rate_hz)
            session.edit_plan(label, plan, merge_key)
        except SettingError as error:
            return in_words(error, field)
        except InputError as error:
            return str(error)
        return ""

    def _take_length(self, length_s: float) -> None:
        plan = self.bench.session.plan
        if plan is None:
            return
        refusal = self._edit(
            "length_s", f"Epochs {length_s:g} s long", with_length(plan, length_s), "epochs.length_s"
        )
        if refusal:
            self.length.show_value(plan.epochs.length_s)
        self.length_field.refuse(refusal)

    def _edit_rule(self, field: str, label: str, rule: EpochRule, merge_key: str | None) -> str:
        plan = self.bench.session.plan
        if plan is None:
            return ""
        return self._edit(field, label, with_rule(plan, self._place, rule), merge_key)

    def _change_rules(self, label: str, change: Callable[[Plan], Plan], place: int) -> bool:
        """Add, copy, remove or move; the rule at `place` is chosen afterwards."""
        plan, before = self.bench.session.plan, self._place
        try:
            new = plan if plan is None else change(plan)
        except PlanError as error:
            self.rules.refuse(in_words(error))
            return False
        if new is None or new == plan:
            return False
        self._place = place
        refusal = self._edit("", label, new)
        if refusal:
            self._place = before
        self.rules.refuse(refusal)
        return not refusal

    def _add(self) -> None:
        place = self._place + 1  # the first one where the plan has no rule yet
        if self._change_rules("Add a rule", lambda plan: with_new_rule(plan, place), place):
            self.editor.name.setFocus()
            self.editor.name.selectAll()

    def _copy(self) -> None:
        place = self._place
        self._change_rules(f"Copy rule {self._name()}", lambda plan: with_copy(plan, place), place + 1)

    def _remove(self) -> None:
        place = self._place
        self._change_rules(
            f"Remove rule {self._name()}", lambda plan: without_rule(plan, place), max(0, place - 1)
        )

    def _move(self, step: int) -> None:
        place = self._place
        self._change_rules(
            f"Move rule {self._name()} {'down' if step > 0 else 'up'}",
            lambda plan: with_moved_rule(plan, place, place + step),
            place + step,
        )

    def _name(self) -> str:
        plan = self.bench.session.plan
        return "" if plan is None else plan.epochs.rule[self._place].name

    def _edit_marks(self, label: str, marks: Marks) -> None:
        try:
            self.bench.session.edit_marks(label, marks)
        except InputError as error:
            self.bench.tell(error)

    def _edit_balance(self, label: str, balance: Balance) -> None:
        plan = self.bench.session.plan
        if plan is None:
            return
        merge_key = "balance.seed" if balance.seed != plan.balance.seed else None
        refusal = self._edit("by", label, with_balance(plan, balance), merge_key)
        if refusal:
            self.balance.show_balance(plan.balance)
        self.balance.refuse(refusal)

    # Rules moved in the lanes

    def _try(self, tried: Try) -> None:
        """Let numbers follow the hand."""
        self.editor.start.show_value(tried.start_s)
        self.length.show_value(tried.length_s)
        self.preview.want(tried)

    def _drop(self, tried: Try, is_step: bool) -> None:
        """Change the plan to where the hand let go."""
        plan = self.bench.session.plan
        self.preview.stop()
        if plan is None or tried.rule >= len(plan.epochs.rule):
            return
        rule = plan.epochs.rule[tried.rule]
        if tried.length_s != plan.epochs.length_s:
            about = f"Epochs {tried.length_s:g} s long", "epochs.length_s"
        else:
            about = f"Rule {rule.name}: start {tried.start_s:g} s", f"epochs.rule {tried.rule} start_s"
        refusal = self._edit("start_s", about[0], tried_plan(plan, tried), about[1])
        if not is_step:
            self.bench.session.end_merge()
        if refusal or self.bench.session.plan == plan:
            self._give_up()
        self.rules.refuse(refusal)

    def _give_up(self) -> None:
        """Show everything as the plan has it."""
        self.preview.stop()
        self._tried = None
        if self._laid is not None:
            self.lane_page.show_lanes(self._laid.lanes)
        self._show_plan()
        self._show_lines()
        self._count_conditions()

    def _show_preview(self, preview: Preview) -> None:
        """Show lanes and counts as they would be."""
        if not self.lanes.is_dragging:
            return
        self._tried = preview
        self.lane_page.show_lanes(preview.lanes)
        plan = self.bench.session.plan
        if plan is not None:
            self._show_counts(plan)
        self._show_lines()
        self._count_conditions()

    @property
    def _decided(self) -> tuple[Decision, Plan] | None:
        """What is decided, or would be while something is dragged."""
        if self._tried is not None:
            return self._tried.decision, self._tried.plan
        learned = self.bench.learned
        return None if learned is None else (learned.decision, learned.plan)

    # What is shown

    def _go_lane(self, trial: int, key: EpochKey | None) -> None:
        """Bring a trial, or one of its epochs, into view."""
        laid = self._laid
        if laid is None:
            return
        row = next((one for one in laid.rows if one.trial == trial and one.key == key), None)
        if row is None:
            place = laid.learned.decision.trials.trials[trial - 1]
            begin_s = place.first_sample / laid.learned.decision.geometry.recorded_hz
            row = EpochRow(trial, "", 1, None, begin_s, None, Fate.KEPT, "")
        self.go_to(row)

    def _choose_in_lanes(self, place: int) -> None:
        plan = self.bench.session.plan
        if plan is not None and place < len(plan.epochs.rule):
            self.rules.choose(place)

    def go_to(self, row: EpochRow) -> None:
        """Bring an epoch into view and select its stretch; without an anchor, the beginning of its trial."""
        session = self.bench.session
        if session.recording is None or session.plan is None:
            return
        facts, view = session.recording.facts, session.view
        length_s = session.plan.epochs.length_s
        width_s = min(max(view.width_s, ROOM_AROUND * length_s), facts.duration_s)
        middle_s = row.near_s if row.span is None else sum(row.span) / 2 / facts.rate_hz
        start_s = min(max(middle_s - width_s / 2, 0.0), facts.duration_s - width_s)
        session.set_view(replace(view, start_s=start_s, width_s=width_s))
        if row.span is None:
            at = nearest_sample(row.near_s * facts.rate_hz)
            span = (at, at + 1)
        else:
            span = row.span
        start, stop = max(0, span[0]), min(facts.n_samples, span[1])
        session.select(Selected(stretch=(start, stop) if start < stop else None))

    def _choose(self, place: int) -> None:
        plan = self.bench.session.plan
        if plan is None:
            return
        self._place = place
        self.editor.show_rule(plan, place)
        self._show_in_lanes(plan)
        self.rules.refuse("")
        self._count_choices()

    def _show_plan(self) -> None:
        plan = self.bench.session.plan
        for card in self._cards:
            card.setVisible(plan is not None)
        self.no_plan.setVisible(plan is None)
        if plan is None:
            self.notes.hide()
            self._show_learned()
            return
        # A plan may have no rule yet: then none is chosen.
        self._place = min(max(self._place, 0), len(plan.epochs.rule) - 1)
        self.length.show_value(plan.epochs.length_s)
        self.length_field.refuse("")
        self.rules.refuse("")
        self.balance.show_balance(plan.balance)
        self.editor.setVisible(self._place >= 0)
        if self._place >= 0:
            self.editor.show_rule(plan, self._place)
        self._show_in_lanes(plan)
        self._show_counts(plan)

    def _show_in_lanes(self, plan: Plan) -> None:
        """Have the lanes follow the plan before anything is counted."""
        rules = plan.epochs.rule
        self.lanes.show_rule(self._place)
        self.lanes.show_times(tuple(rule.start_s for rule in rules), plan.epochs.length_s)
        self.lane_page.show_anchor(rules[self._place].anchor if 0 <= self._place < len(rules) else "")

    def _show_counts(self, plan: Plan) -> None:
        decided = self._decided
        counts = () if decided is None else kept_of_all(*decided)
        shown = self._tried.plan if self._tried is not None and self.lanes.is_dragging else plan
        self.rules.show_rules(shown.epochs.rule, counts, self._place)
        recording = self.bench.session.recording
        rate_hz = plan.filter.rate_hz or (recording.facts.rate_hz if recording else 0.0)
        self.samples.show_value(
            f"{round(plan.epochs.length_s * rate_hz)} at {rate_hz:g} Hz" if rate_hz else "as recorded"
        )

    def _show_learned(self) -> None:
        plan, learned = self.bench.session.plan, self.bench.learned
        if not self.lanes.is_dragging:
            self._tried = None
        if plan is not None:
            self._show_counts(plan)
        self._show_lines()
        if learned is None or not learned.decision.trials.trials:
            self._laid = None
            self.empty.text.setText(self._why_empty())
            self.no_plan_words.setText(self._why_empty())
            self.pages.setCurrentWidget(self.empty)
            self.conditions.show_columns((), ())
            self.conditions.show_counts(())
            self.selection.show_nothing("Not counted.")
            self.balance.show_left_out(None)
            self.balance.show_would((), None)
            self.editor.show_kept(None)
            return
        self.pages.setCurrentWidget(self.lane_page)
        self._lay_out_anew()

    def _lay_out_anew(self) -> None:
        """Let a worker lay out what is learned, unless it has; the same may be announced again."""
        learned = self.bench.learned
        if not self.shown or learned is None or not learned.decision.trials.trials:
            return
        if self.is_counted:
            return
        self.bench.start("epoch lanes", lambda _recording: _lay_out(learned), self._show_laid)

    def _show_laid(self, laid: _Laid) -> None:
        if laid.learned is not self.bench.learned:
            return
        self._laid = laid
        if not self.lanes.is_dragging:
            self.lane_page.show_lanes(laid.lanes)
        self.table.show_rows(laid.rows, self.bench.session.marks)
        columns = dict.fromkeys(column for one in laid.learned.decision.ledger[:1] for column in one.labels)
        self.editor.show_log_columns([column for column in columns if column.startswith(LOG)])
        self._count_choices()
        self._count_conditions()

    def _pick_columns(self) -> None:
        self._picked = self.conditions.picked
        self._count_conditions()

    def _count_conditions(self) -> None:
        """Let a worker count epochs per condition, and what a balance by them would leave out."""
        decided, plan = self._decided, self.bench.session.plan
        if not self.shown or decided is None or plan is None:
            return
        self.balance.show_would(self.conditions.picked, None)
        picked = self._picked
        self.bench.start(
            "epoch conditions", lambda _: condition_view(*decided, picked), self._show_conditions
        )

    def _show_conditions(self, view: ConditionView) -> None:
        self.conditions.show_columns(view.columns, view.picked)
        self.conditions.show_counts(view.counts)
        self.balance.show_left_out(view.left_out)
        self.balance.show_would(view.picked, view.would)

    def _why_empty(self) -> str:
        session = self.bench.session
        if session.recording is None:
            return "Open a recording and a plan: the epochs of all its trials will be listed here."
        if session.plan is None:
            return (
                "There is no plan yet. Open one, or draft one from this recording (menu File): "
                "its rules say which epochs are cut, and each will be listed here with its fate."
            )
        if self.bench.problem:
            return f"Epochs cannot be counted yet. {self.bench.problem}"
        learned = self.bench.learned
        if learned is None:
            return "The epochs are being counted."
        return f"No trial was found. {why_no_trial(learned.plan, session.recording.facts)}"

    def _show_lines(self) -> None:
        learned, decided = self.bench.learned, self._decided
        for line in self._reason_lines:
            line.hide()
            line.deleteLater()
        self._reason_lines = []
        self.notes.setVisible(bool(learned and learned.decision.warnings))
        if learned is None or decided is None:
            for line in (self.trials, self.excluded, self.kept):
                line.show_value("not counted")
            self.states.hide()
            self.nothing_left_out.setText("Not counted.")
            self.nothing_left_out.show()
            return
        trials, ledger = learned.decision.trials.trials, decided[0].ledger
        counts = (
            (sum(bool(trial.missing) for trial in trials), "incomplete"),
            (sum(bool(trial.doubts) for trial in trials), "doubtful"),
            (sum(bool(trial.set_aside) for trial in trials), "set aside"),
        )
        self.trials.show_value(str(len(trials)), attention=not trials)
        self.states.setText(", ".join(f"{count} {what}" for count, what in counts if count))
        self.states.setVisible(bool(self.states.text()))
        self.excluded.show_value(str(len(learned.marks.trials_excluded)))
        n_kept = len(decided[0].kept)
        self.kept.show_value(f"{n_kept} of {len(ledger)}", attention=not n_kept)
        for fate, count in left_out_by_reason(ledger):
            self._reason_lines.append(self._reason_line(fate, count))
        self.nothing_left_out.setText("Nothing is left out." if ledger else "There are no epochs.")
        self.nothing_left_out.setVisible(not self._reason_lines)
        self.notes_text.setText("\n".join(f"{note}." for note in learned.decision.warnings))

    def _reason_line(self, fate: Fate, count: int) -> ValueLine:
        return self.reasons.add_line(str(fate), str(count))

    def _show_learning(self, learning: bool) -> None:
        self.rules.note.setText("being counted" if learning else "")

    def _count_choices(self) -> None:
        """Let a worker count what the chosen rule would keep otherwise, and how its epochs differ."""
        learned, plan = self.bench.learned, self.bench.session.plan
        self.editor.show_kept(None)
        if not self.shown or learned is None or self._place < 0 or plan is None or self.bench.provisional:
            return
        place = self._place
        if place >= len(learned.plan.epochs.rule):
            return

        def take(kept: Mapping[PulseRule, int]) -> None:
            if place == self._place:
                self.editor.show_kept(kept)

        def take_differences(differences: tuple[SelectionDifference, ...]) -> None:
            if place == self._place:
                self.selection.show_differences(learned.plan.epochs.rule[place].name, differences)

        self.bench.start("epoch choices", lambda _recording: kept_under(learned, place), take)
        self.bench.start(
            "epoch differences",
            lambda _recording: rule_differences(learned.decision, learned.plan, place),
            take_differences,
        )
