"""What the keys about trials, blocks, logs, onsets and labels must be to each other: every refusal."""

from __future__ import annotations

import pytest

from pulsemend.errors import PlanError
from pulsemend.model.keys import near_names
from pulsemend.model.plan_file import parse_plan

TEXT = """\
pulsemend = 1
[markers.dot]
role = "fixation"
[markers.left]
role = "cue"
labels = { item = "left" }
[markers.right]
role = "cue"
labels = { item = "right", side = "r" }
[markers.buzz]
role = "pulse"
labels = { coil = "small" }
[markers.ask]
role = "probe"
[markers.key]
role = "response"
[markers.start]
role = "other"

[bits.match]
at = [4, 5]
names = { "1" = "match", "0" = "none" }
roles = { "3" = "sample" }

[[trial]]
slot = "dot"
role = "fixation"
[[trial]]
slot = "lamp"
role = "sample"
after_s = [0.5, 1.5]
[[trial]]
slot = "cue1"
role = "cue"
after_s = [1.0, 2.0]
[[trial]]
slot = "pulse1"
role = "pulse"
after_s = [1.0, 3.0]
optional = true
stand_in = "fixed"
stand_in_s = 2.0
from_signal = true
[[trial]]
slot = "probe"
role = "probe"
after_s = [3.0, 5.0]
group = "question"
[[trial]]
slot = "answer"
role = "response"
after_s = [0.1, 2.0]
after = "probe"
optional = true
group = "question"
[[trial]]
slot = "cue2"
role = "cue"
after_s = [1.0, 9.0]
kinds = ["two cues"]
[[trial]]
slot = "done"
role = "response"
after_s = [1.0, 20.0]
after = "probe1"
kinds = ["one cue", "two cues"]

[group.question]
times = [1, 2]
between_s = [2.0, 4.0]

[blocks]
codes = ["start"]
practice_column = "phase"
practice_values = ["training"]
after_pause = 1

[log]
file = "{stem}_log.tsv"
slots = ["probe1"]
time = "probe_s"
trial = "number"
recorded_trial = "cue1.item"

[[onset]]
channel = "Photo"
codes = ["left", "right"]
[[onset]]
channel = "Sound"
codes = ["dot"]

[pulses]
window_ms = [-2.0, 14.0]

[epochs]
length_s = 1.0
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.5
labels = { cued = "cue1.item", uncued = "other(cue1.item)", order = "first" }

[labels]
compared = { compare = ["cue1.item", "cue2.item"], same = "stay" }
copied = { copy = "log.answer" }
mapped = { map = "cue1.item", values = { left = "L" }, otherwise = "R" }
binned = { bin = "log.rt_s", edges = [0.5, 1], names = ["fast", "usual", "slow"] }
placed = { position = "block" }
before = { previous = "copied" }

[balance]
by = ["cued", "kind", "log.answer", "before"]

[stimulation]
columns = { intensity = "level" }
"""


def test_the_whole_is_accepted() -> None:
    file = parse_plan(TEXT)
    assert file.warnings == ()
    assert len(file.plan.trial) == 8


def refusal(text: str) -> PlanError:
    with pytest.raises(PlanError) as caught:
        parse_plan(text, "study.toml")
    assert len(str(caught.value).splitlines()) == 1
    return caught.value


SLOTS = [
    ('slot = "cue2"', 'slot = "cue1"', "trial[7].slot", "names an earlier slot", "", '"cue1"'),
    ('slot = "cue2"', 'slot = "log"', "trial[7].slot", "kept for other columns", "", '"log"'),
    ('slot = "cue2"', 'slot = "stimulation"', "trial[7].slot", "kept for other columns", "", '"stimulation"'),
    (
        'slot = "dot"\nrole = "fixation"',
        'slot = "dot"\nrole = "fixation"\nafter_s = [0, 1]',
        "trial[1].after_s",
        "nothing comes before it",
        "no after_s",
        "[0.0, 1.0]",
    ),
    (
        'slot = "dot"\nrole = "fixation"',
        'slot = "dot"\nrole = "fixation"\nafter = "cue1"',
        "trial[1].after",
        "nothing comes before it",
        "no after",
        '"cue1"',
    ),
    (
        'slot = "dot"\nrole = "fixation"',
        'slot = "dot"\nrole = "fixation"\noptional = true',
        "trial[1].optional",
        "cannot be optional",
        "false",
        "true",
    ),
    ('after = "probe"\n', 'after = "cue2"\n', "trial[6].after", "earlier slot", '"probe"', '"cue2"'),
    # Slots of a group have the number of their repeat for all slots but their own group's.
    (
        'after = "probe1"',
        'after = "probe"',
        "trial[8].after",
        "earlier slot",
        '"probe1" | "probe2"',
        '"probe"',
    ),
    ('after = "probe1"', 'after = "probe3"', "trial[8].after", "earlier slot", '"probe2"', '"probe3"'),
    ('after = "probe1"', 'after = "done"', "trial[8].after", "earlier slot", '"cue2"', '"done"'),
    (
        'role = "sample"\nafter_s = [0.5, 1.5]',
        'role = "sample"\nafter_s = [0.5, 1.5]\nafter = "probe1"',
        "trial[2].after",
        "earlier slot",
        '"dot"',
        '"probe1"',
    ),
    # Not there with every number of repeats, or in every kind.
    (
        'after = "probe1"',
        'after = "probe2"',
        "trial[8].after",
        "every number of repeats",
        '"dot" | "lamp" | "cue1" | "pulse1" | "probe1" | "answer1"',
        '"probe2"',
    ),
    ('after = "probe1"', 'after = "cue2"', "trial[8].after", "in every kind", '"probe1"', '"cue2"'),
    ('roles = { "3" = "sample" }', "", "trial[2].role", "no code under [markers]", '"cue"', '"sample"'),
    ("stand_in_s = 2.0\n", "", "trial[4].stand_in_s", "a fixed stand-in needs its time", "a time in s", ""),
    (
        'stand_in = "fixed"',
        'stand_in = "drawn"',
        "trial[4].stand_in_s",
        "says nothing unless stand_in is fixed",
        'stand_in = "fixed"',
        '"drawn"',
    ),
    (
        'optional = true\nstand_in = "fixed"',
        'stand_in = "fixed"',
        "trial[4].stand_in",
        "only an optional slot",
        "optional = true",
        '"fixed"',
    ),
    (
        'kinds = ["two cues"]',
        'kinds = ["two cues"]\nfrom_signal = true',
        "trial[7].from_signal",
        "only a pulse can be found in the signal",
        'role = "pulse"',
        '"cue"',
    ),
    (
        'coil = "small"',
        'source = "x"',
        "markers.buzz.labels.source",
        'kept for what filled slot "pulse1"',
        "another name",
        '"x"',
    ),
    ("[bits.match]", "[bits.source]", "bits.source.at", 'filled slot "pulse1"', "another name", '"source"'),
    (
        'coil = "small"',
        '" " = "x"',
        'markers.buzz.labels." "',
        "no name that can be read",
        "another name",
        '"x"',
    ),
    (
        "[bits.match]",
        '[bits."a\\tb"]',
        'bits."a\\u0009b".at',
        "no name that can be read",
        "another name",
        "a",
    ),
    ('"0" = "none"', '"4" = "none"', "bits.match.names.4", "no value of this field", "0 to 3", '"4"'),
    ('"0" = "none"', '"00" = "none"', "bits.match.names.00", "no value of this field", "0 to 3", '"00"'),
    ('"0" = "none"', 'x = "none"', "bits.match.names.x", "no value of this field", "0 to 3", '"x"'),
    ('"3" = "sample"', '"-1" = "sample"', "bits.match.roles.-1", "no value of this field", "0 to 3", '"-1"'),
    ("at = [4, 5]", "at = [4, 5.5]", "bits.match.at", "two whole numbers", "[least, most]", "[4.0, 5.5]"),
]

GROUPS = [
    (
        'after_s = [3.0, 5.0]\ngroup = "question"',
        'after_s = [3.0, 5.0]\ngroup = "questions"',
        "trial[5].group",
        "is no group of this plan",
        '"question"',
        '"questions"',
    ),
    (
        'kinds = ["two cues"]',
        'kinds = ["two cues"]\n[[trial]]\nslot = "more"\nrole = "probe"\nafter_s = [1, 2]\n'
        'group = "question"',
        "trial[5].group",
        "must stand together",
        "next to each other",
        '"question"',
    ),
    (
        "[blocks]",
        "[group.unused]\ntimes = [1, 1]\n[blocks]",
        "group.unused.times",
        "no slot belongs to this group",
        'group = "unused"',
        "[1, 1]",
    ),
    ("times = [1, 2]", "times = [0, 0]", "group.question.times", "never be there", "1 or more", "[0, 0]"),
    (
        "times = [1, 2]",
        "times = [1.5, 2]",
        "group.question.times",
        "two whole numbers",
        "[least",
        "[1.5, 2.0]",
    ),
    ("between_s = [2.0, 4.0]\n", "", "group.question.between_s", "is missing", "[least, most] in s", ""),
    (
        'after_s = [3.0, 5.0]\ngroup = "question"',
        'after_s = [3.0, 5.0]\ngroup = "question"\noptional = true',
        "trial[5].optional",
        'first slot of group "question"',
        "false",
        "true",
    ),
    # In kind "two cues" the group begins with the optional answer.
    (
        'after_s = [3.0, 5.0]\ngroup = "question"',
        'after_s = [3.0, 5.0]\ngroup = "question"\nkinds = ["one cue"]',
        "trial[6].optional",
        'first slot of group "question" in kind "two cues"',
        "false",
        "true",
    ),
    ("times = [1, 2]", "times = [0, 2]", "trial[8].after", "every number of repeats", '"cue1"', '"probe1"'),
    ("times = [1, 2]", "times = [1, 30]", None, "", "", ""),
    (
        "times = [1, 2]",
        "times = [0, 30]",
        "trial",
        "too many combinations",
        "up to 60",
        "62",
    ),
    (
        'slot = "cue2"',
        'slot = "probe2"',
        "trial[7].slot",
        "a repeated slot gets the name of another one",
        "another name",
        '"probe2"',
    ),
    # Of the second repeat as of the first.
    (
        'after_s = [0.1, 2.0]\nafter = "probe"\n',
        "",
        "trial[6].after_s",
        "needs its time limits",
        "[least, most] in s",
        "",
    ),
    (
        'role = "cue"\nafter_s = [1.0, 9.0]',
        'role = "cue"',
        "trial[7].after_s",
        "needs its time limits",
        "[least, most] in s",
        "",
    ),
]

BLOCKS_AND_LOG = [
    ('practice_column = "phase"\n', "", "blocks.practice_column", "is missing", "text, not empty", ""),
    ('practice_values = ["training"]\n', "", "blocks.practice_values", "is missing", "a list of texts", ""),
    ('codes = ["start"]\n', "", "blocks.after_pause", "nothing begins one", "pause_s", "1"),
    ('["start"]', '["start", "ask"]', "blocks.codes[2]", "can be no marker of a trial", '"other"', '"ask"'),
    (
        'codes = ["start"]',
        'practice_codes = ["buzz"]',
        "blocks.practice_codes[1]",
        "can be no marker of a trial",
        '"other"',
        '"pulse"',
    ),
    # Codes that no table names, but a field of bits does: 48 has the value 3 in bits 4 and 5.
    ('["start"]', '["S 48"]', "blocks.codes[1]", "can be no marker of a trial", '"other"', '"sample"'),
    (
        'file = "{stem}_log.tsv"\nslots = ["probe1"]\ntime = "probe_s"\ntrial = "number"\n'
        'recorded_trial = "cue1.item"\n',
        "",
        "blocks.practice_column",
        "needs a log",
        "a log.file",
        '"phase"',
    ),
    ('slots = ["probe1"]', 'slots = ["probe"]', "log.slots[1]", "must name a slot", '"probe1"', '"probe"'),
    ('slots = ["probe1"]\n', "", "log.slots", "is missing", '"probe2"', ""),
    (
        'recorded_trial = "cue1.item"',
        'recorded_trial = "cue1.number"',
        "log.recorded_trial",
        "must name a label of a slot's codes",
        "cue1.item",
        '"cue1.number"',
    ),
    ('trial = "number"\n', "", "log.trial", "is missing", "a column of the log", ""),
    ('codes = ["dot"]', "codes = []", "onset[2].codes", "is empty", "codes of what is seen", "[]"),
    ('codes = ["dot"]', 'codes = ["buzz"]', "onset[2].codes[1]", "is a pulse", "seen or heard", '"buzz"'),
    (
        'codes = ["dot"]',
        'codes = ["dot", "left"]',
        "onset[2].codes[2]",
        "by an earlier rule",
        "once",
        '"left"',
    ),
]

WAYS = "one of compare | copy | map | bin | position | previous"
LABELS = [
    ("placed =", "block =", "labels.block", "the name of another column", "another name", '"block"'),
    ("placed =", "kind =", "labels.kind", "the name of another column", "another name", '"kind"'),
    ("placed =", "run =", "labels.run", "the name of another column", "another name", '"run"'),
    ("placed =", "onset_s =", "labels.onset_s", "the name of another column", "another name", '"onset_s"'),
    ("placed =", '"a.b" =', 'labels."a.b"', "holds a point", "another name", '"a.b"'),
    ("placed =", '"" =', 'labels.""', "is empty", "another name", '""'),
    ("placed =", '"a\\tb" =', 'labels."a\\u0009b"', "control character", "another name", "a"),
    ('copied = { copy = "log.answer" }', "copied = {}", "labels.copied", "is made in one way", WAYS, "none"),
    (
        'copied = { copy = "log.answer" }',
        'copied = { copy = "log.answer", previous = "cue1.item" }',
        "labels.copied.previous",
        "is made in one way",
        WAYS,
        "copy | previous",
    ),
    (
        'compare = ["cue1.item", "cue2.item"]',
        'compare = ["cue1.item"]',
        "labels.compared.compare",
        "needs two columns",
        "two columns or more",
        '["cue1.item"]',
    ),
    ('"block" }', '"day" }', "labels.placed.position", "none of the words", '"block" | "recording"', '"day"'),
    ('values = { left = "L" }, ', "", "labels.mapped.values", "is missing", '"new name"', ""),
    ("edges = [0.5, 1]", "edges = []", "labels.binned.edges", "one number or more", "rising", "[]"),
    (
        "edges = [0.5, 1]",
        "edges = [1, 0.5]",
        "labels.binned.edges",
        "above the one before",
        "rising",
        "[1.0, 0.5]",
    ),
    (
        'names = ["fast", "usual", "slow"]',
        'names = ["fast", "slow"]',
        "labels.binned.names",
        "one more than edges",
        "3",
        "2",
    ),
    (
        'copy = "log.answer"',
        'copy = "log.answer", values = { a = "b" }',
        "labels.copied.values",
        "says nothing about copy",
        "values with map",
        "a table",
    ),
    (
        'copy = "log.answer"',
        'copy = "log.answer", same = "stay"',
        "labels.copied.same",
        "says nothing about copy",
        "same with compare",
        '"stay"',
    ),
    (
        'map = "cue1.item"',
        'map = "cue1.item", edges = [1.0]',
        "labels.mapped.edges",
        "says nothing about map",
        "edges with bin",
        "[1.0]",
    ),
    (
        '"cue2.item"], same',
        '"cue2.side.x"], same',
        "labels.compared.compare",
        "must name a label of a slot's codes",
        "cue2.side | ",
        '"cue2.side.x"',
    ),
    ('map = "cue1.item"', 'map = "item"', "labels.mapped.map", "must name a label", "cue1.item", '"item"'),
    # Slots of groups have columns with the number of their repeat.
    (
        'map = "cue1.item"',
        'map = "probe.match"',
        "labels.mapped.map",
        "must name",
        "probe2.match",
        '"probe.match"',
    ),
    (
        'previous = "copied"',
        'previous = "before"',
        "labels.before.previous",
        "in a circle",
        "columns that are not made from it",
        '"before" from "before"',
    ),
    (
        'copied = { copy = "log.answer" }',
        'copied = { copy = "before" }',
        "labels.copied.copy",
        "in a circle",
        "columns that are not made from it",
        '"copied" from "before" from "copied"',
    ),
    (
        'cued = "cue1.item", uncued',
        'cued = "cue3.item", uncued',
        "epochs.rule[1].labels.cued",
        "holds a point, so it must name a label",
        "cue1.item",
        '"cue3.item"',
    ),
    (
        'order = "first"',
        'copied = "first"',
        "epochs.rule[1].labels.copied",
        "another column",
        "another",
        "copied",
    ),
    ('order = "first"', 'kind = "first"', "epochs.rule[1].labels.kind", "another column", "another", "kind"),
    (
        'order = "first"',
        'piece = "first"',
        "epochs.rule[1].labels.piece",
        "another column",
        "another",
        "piece",
    ),
    (
        "other(cue1.item)",
        "other(cue1.side)",
        "epochs.rule[1].labels.uncued",
        "there must be two values",
        "two values, or a column of the log",
        '"cue1.side": "r"',
    ),
    (
        "other(cue1.item)",
        "other(placed)",
        "epochs.rule[1].labels.uncued",
        "there must be two values",
        "two values",
        '"placed": values that the plan cannot tell',
    ),
    (
        "other(cue1.item)",
        "other(item)",
        "epochs.rule[1].labels.uncued",
        "must name a label of a slot's codes",
        "cue1.item",
        '"item"',
    ),
    ('"before"]', '"after"]', "balance.by[4]", "must name a label column", " | ...", '"after"'),
    (
        "columns = { intensity",
        "columns = { strength",
        "stimulation.columns.strength",
        "is no fact of stimulation",
        "intensity | ",
        '"strength"',
    ),
]


@pytest.mark.parametrize(
    ("old", "new", "key", "problem", "allowed", "received"), [*SLOTS, *GROUPS, *BLOCKS_AND_LOG, *LABELS]
)
def test_refusals(old: str, new: str, key: str | None, problem: str, allowed: str, received: str) -> None:
    assert TEXT.count(old) == 1
    text = TEXT.replace(old, new)
    if key is None:
        parse_plan(text)
        return
    check(refusal(text), text, (key, problem, allowed, received))


def check(error: PlanError, text: str, wanted: tuple[str, str, str, str]) -> None:
    key, problem, allowed, received = wanted
    assert error.key == key
    assert problem in error.problem
    assert allowed in error.allowed
    assert error.allowed
    assert received in error.received
    assert bool(received) is bool(error.received)
    assert error.path == "study.toml"
    # A key that is not there is located at its table.
    name = key.split(".")[-1 if received else -2].split("[")[0].strip('"').replace("\\u0009", "\\t")
    assert name in text.split("\n")[(error.line or 0) - 1]


# In labels of rules, derived labels and balance alike.
OF_SLOTS = [
    ('order = "first"', 'order = "log.rt"', "epochs.rule[1].labels.order", '"log.rt"'),
    ('order = "first"', 'order = "other(log.rt)"', "epochs.rule[1].labels.order", '"log.rt"'),
    ("log.cue1.rt_s", "log.rt_s", "labels.binned.bin", '"log.rt_s"'),
    ('"log.cue1.answer", "before"', '"log.cue3.answer", "before"', "balance.by[3]", '"log.cue3.answer"'),
]


@pytest.mark.parametrize(("old", "new", "key", "received"), OF_SLOTS)
def test_slot_stands_before_columns_of_a_log_whose_rows_belong_to_slots(
    old: str, new: str, key: str, received: str
) -> None:
    text = TEXT.replace('slots = ["probe1"]', 'slots = ["cue1", "cue2"]')
    text = text.replace('"log.', '"log.cue1.')
    parse_plan(text)
    assert text.count(old) == 1
    text = text.replace(old, new)
    wanted = (key, "so the slot stands before the column", "log.cue1.COLUMN | log.cue2.COLUMN", received)
    check(refusal(text), text, wanted)


@pytest.mark.parametrize("key", ["slots", "time", "trial", "recorded_trial", "columns"])
def test_log_keys_without_a_log(key: str) -> None:
    value = '["cue"]' if key in ("slots", "columns") else '"cue"'
    text = f"{SHORT}[log]\n{key} = {value}\n"
    check(refusal(text), text, (f"log.{key}", "says nothing without a log", "a log.file", value))


NO_LOG = [
    ('[labels]\na = { copy = "log.b" }\n', "labels.a.copy", "the plan has none", '"log.b"'),
    ('[balance]\nby = ["log.b"]\n', "balance.by[1]", "the plan has none", '"log.b"'),
    ("[stimulation.columns]\ncoil = 'b'\n", "stimulation.columns.coil", "needs a log", '"b"'),
    (
        "[blocks]\npractice_values=['a']\npractice_column='b'\n",
        "blocks.practice_column",
        "needs a log",
        '"b"',
    ),
]


@pytest.mark.parametrize(("more", "key", "problem", "received"), NO_LOG)
def test_columns_of_a_log_that_is_not_there(more: str, key: str, problem: str, received: str) -> None:
    text = SHORT + more
    check(refusal(text), text, (key, problem, "a log.file", received))


def test_a_group_that_starts_the_trial_cannot_be_absent() -> None:
    text = SHORT.replace('role = "cue"\n[p', 'role = "cue"\ngroup = "all"\n[group.all]\ntimes = [0, 1]\n[p')
    wanted = ("group.all.times", "starts the trial and cannot be absent", "a least of 1 or more", "[0, 1]")
    check(refusal(text), text, wanted)
    parse_plan(text.replace("[0, 1]", "[1, 1]"))
    # The same for one kind of trial only.
    text = SHORT.replace("[pulses]", '[[trial]]\nslot = "end"\nrole = "cue"\nafter_s = [1, 2]\n[pulses]')
    text = text.replace('slot = "cue"\nrole = "cue"\n', 'slot = "cue"\nrole = "cue"\nkinds = ["a"]\n')
    part = '[[trial]]\nslot = "end"'
    text = text.replace(
        part, f'[[trial]]\nslot = "q"\nrole = "cue"\nafter_s = [1, 2]\ngroup = "g"\n{part}'
    ).replace("[pulses]", "[group.g]\ntimes = [0, 1]\n[pulses]")
    parse_plan(text)
    text = text.replace('group = "g"\n', 'group = "g"\nkinds = ["b"]\n')
    wanted = ("group.g.times", 'starts the trial in kind "b" and cannot be absent', "a least of 1", "[0, 1]")
    check(refusal(text), text, wanted)


def test_the_first_slot_of_every_kind_starts_its_trials() -> None:
    more = '[[trial]]\nslot = "probe"\nrole = "cue"\nafter_s = [1, 2]\noptional = true\nkinds = ["a", "b"]\n'
    text = SHORT.replace("[pulses]", f"{more}[pulses]").replace(
        'slot = "cue"\n', 'slot = "cue"\nkinds = ["a"]\n'
    )
    wanted = ("trial[2].optional", 'the first slot of kind "b" starts its trials', "false", "true")
    check(refusal(text), text, wanted)


SHORT = """\
pulsemend = 1
[markers.left]
role = "cue"
[[trial]]
slot = "cue"
role = "cue"
[pulses]
times = "none"
[epochs]
length_s = 1.0
"""


@pytest.mark.parametrize(
    ("name", "names", "shown"),
    [
        ("cue1.itm", ["dot.match", "cue1.item", "cue2.item"], "cue1.item | cue2.item | ..."),
        ("zzz", ["a", "b"], "a | b"),
        ("zzz", list("abcdefgh"), "a | b | c | d | e | f | ..."),
        ("zzz", [], ""),
    ],
)
def test_few_names_are_shown_of_many(name: str, names: list[str], shown: str) -> None:
    assert near_names(name, names) == shown
