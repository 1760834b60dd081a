"""Plans: every key of the table, every refusal with its line, and round trips."""

from __future__ import annotations

import json
import tomllib
from typing import Any

import pytest

from pulsemend.errors import PlanError
from pulsemend.model.keys import REQUIRED, Key, Kind
from pulsemend.model.plan import (
    About,
    Balance,
    BitField,
    Blocks,
    Channels,
    DerivedLabel,
    EpochRule,
    Epochs,
    Export,
    Filter,
    Group,
    Log,
    MarkerPlan,
    OnsetRule,
    OtherGap,
    Plan,
    Pulses,
    Slot,
    StimulationFacts,
)
from pulsemend.model.plan_file import parse_plan
from pulsemend.model.plan_keys import PLAN_KEYS
from pulsemend.model.toml_lines import key_text
from pulsemend.model.vocabulary import (
    Format,
    Precision,
    Role,
)

SHORTEST = """\
pulsemend = 1
[markers.lamp]
role = "sample"
[[trial]]
slot = "sample"
role = "sample"
[pulses]
window_ms = [-2, 14]
[epochs]
length_s = 1
[[epochs.rule]]
name = "baseline"
anchor = "sample"
start_s = -1
"""

# The example of the design, section 4.2, without what a later version brings, and with the slot cue2 that its
# label `second` speaks of.
DESIGN = """\
pulsemend = 1

[about]
name = "Lantern"
line_hz = 50                      # 0: no line removal

[markers."arrow left"]            # the code as `pulsemend facts` prints it
role = "cue"
labels = { item = "left" }
[markers.lamp]
role = "sample"
[markers."S 21"]
role = "pulse"

[[trial]]                         # slots in order
slot = "sample"
role = "sample"
[[trial]]
slot = "cue1"
role = "cue"
after_s = [4.0, 6.5]              # since `after`
[[trial]]
slot = "pulse1"
role = "pulse"
after_s = [1.0, 3.0]
optional = true
[[trial]]
slot = "cue2"
role = "cue"
after_s = [3.0, 9.0]

[pulses]
times = "markers"                 # "markers" | "none"
search_ms = [-10.0, 10.0]         # how far a marker may be from its artifact
window_ms = [-2.0, 14.0]          # no default
fill = "covariance"
side = "both"                     # which flanks a fill may use
# flank_ms = ...                  # default per fill
decay = "none"
[[pulses.also]]                   # e.g. the stimulator's recharge
window_ms = [248.0, 254.0]
[pulses.channels]                 # exceptions near the coil
C3 = [-2.0, 25.0]

[filter]                          # 0: off, or as recorded
highpass_hz = 1.0
lowpass_hz = 100.0
rate_hz = 1000.0
across_pulses = "filled"

[channels]
bad = []                          # bad in every recording
find_bad = true
rebuild_bad = true
recorded_reference = ""           # put back before averaging
reference = "average"
positions = "10-05"

[epochs]
length_s = 1.0                    # one length for the whole set
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.5
count = 1                         # consecutive pieces
pulse = "refuse"
clear_ms = [0.0, 0.0]             # kept free before and after every gap
# stop_before = "pulse1"
labels = { cued = "cue1.item" }   # one column for all rules
[[epochs.rule]]
name = "baseline"
anchor = "sample"
start_s = -1.0

[labels]                          # compared, copied, mapped from slots and log
second = { compare = ["cue1.item", "cue2.item"], same = "stay", different = "switch" }

[limits]                          # 0: off
peak_to_peak_uv = 0.0
least_range_uv = 0.0
largest_jump_uv = 0.0

[export]
formats = ["hdf5", "fif"]
precision = "single"
"""

# With every part that the example leaves out, so that every key of the table has a place.
FULL = (
    DESIGN
    + """
[bits.match]
at = [4, 4]
names = { "1" = "match", "0" = "none" }
roles = { "1" = "probe" }

[[trial]]
slot = "question"
role = "probe"
after_s = [0.5, 5.0]
group = "questions"
[group.questions]
times = [1, 3]
between_s = [0.5, 2.0]

[blocks]
codes = ["block"]

[log]
file = "{stem}_log.tsv"
slots = ["cue1"]

[labels.renamed]
map = "cue1.item"
values = { left = "L" }

[[onset]]
channel = "Photo"
codes = ["lamp"]

[balance]
by = ["cued"]

[stimulation]
target = "left"
columns = { intensity = "level" }
"""
)


def refusal(text: str, name: str = "") -> PlanError:
    with pytest.raises(PlanError) as caught:
        parse_plan(text, name)
    assert "\n" not in str(caught.value)
    return caught.value


def line_with(text: str, part: str) -> int:
    """Line of the only place that holds a part, counted from 1."""
    assert text.count(part) == 1
    return text[: text.index(part)].count("\n") + 1


def test_shortest_plan_has_the_defaults() -> None:
    # Defaults: design section 4.2.
    assert parse_plan(SHORTEST).plan == Plan(
        about=About("", 0.0),
        markers=(MarkerPlan("lamp", Role.SAMPLE, {}),),
        trial=(Slot("sample", Role.SAMPLE),),
        pulses=Pulses(window_ms=(-2.0, 14.0)),
        filter=Filter(1.0, 100.0, 1000.0),
        channels=Channels((), True, True, "", "average", "10-05"),
        epochs=Epochs(1.0, (EpochRule("baseline", "sample", -1.0),)),
        export=Export((Format.HDF5, Format.FIF), Precision.SINGLE),
    )


def test_design_example() -> None:
    file = parse_plan(DESIGN)
    plan = file.plan
    assert file.warnings == ()
    assert plan.about == About("Lantern", 50.0)
    assert plan.trial[1] == Slot("cue1", Role.CUE, (4.0, 6.5))
    assert plan.trial[2] == Slot("pulse1", Role.PULSE, (1.0, 3.0), optional=True)
    assert plan.pulses.also == (OtherGap((248.0, 254.0)),)
    assert plan.pulses.channels == {"C3": (-2.0, 25.0)}
    assert plan.role_of("arrow left") is Role.CUE
    assert plan.labels_of("arrow left") == {"item": "left"}
    assert plan.epochs.rule[0].labels == {"cued": "cue1.item"}
    assert plan.labels == (
        DerivedLabel("second", compare=("cue1.item", "cue2.item"), same="stay", different="switch"),
    )


def test_all_parts_together() -> None:
    plan = parse_plan(FULL).plan
    assert plan.bits == (BitField("match", (4, 4), {"1": "match", "0": "none"}, {"1": Role.PROBE}),)
    assert all(type(bit) is int for bit in plan.bits[0].at)
    assert plan.trial[4] == Slot("question", Role.PROBE, (0.5, 5.0), group="questions")
    assert plan.groups == (Group("questions", (1, 3), (0.5, 2.0)),)
    assert plan.blocks == Blocks(codes=("block",))
    assert plan.log == Log("{stem}_log.tsv", ("cue1",))
    assert plan.labels[1] == DerivedLabel("renamed", map="cue1.item", values={"left": "L"})
    assert plan.onset == (OnsetRule("Photo", ("lamp",)),)
    assert plan.balance == Balance(("cued",))
    assert plan.stimulation == StimulationFacts(target="left", columns={"intensity": "level"})


def test_whole_numbers_become_decimals() -> None:
    plan = parse_plan(SHORTEST).plan
    assert isinstance(plan.epochs.length_s, float)
    assert plan.pulses.window_ms == (-2.0, 14.0)
    assert all(isinstance(edge, float) for edge in plan.pulses.window_ms or ())


# --- every key of the table -----------------------------------------------------------------------

BY_PATH = {key.path: key for key in PLAN_KEYS}
WRONG_TYPES: dict[Kind, tuple[Any, ...]] = {
    Kind.TEXT: (3, True, ["a"], "a\tb"),
    Kind.NAME: (3, "", "two words", "a.b"),
    Kind.WORD: (3, False, "nonsense", ""),
    Kind.WORD_OR_TEXTS: (3, "nonsense", [], ["a", "a"], [1], [""]),
    Kind.FLAG: (0, 1, "true", 1.0),
    Kind.NUMBER: ("1", True, float("nan"), float("inf"), -float("inf"), [1.0]),
    Kind.WHOLE: (1.0, True, "1"),
    Kind.PAIR: (1.0, [1.0], [0.0, 1.0, 2.0], [True, 2.0], ["a", "b"], [0.0, float("inf")]),
    Kind.SPAN: ([2.0, 1.0], [1.0, True], 1.0),
    Kind.WINDOW: ([1.0, 1.0], [2.0, 1.0], [0.0], [False, True]),
    Kind.TEXTS: ("a", [1], ["a", "a"], [""]),
    Kind.WORDS: ("hdf5", [], ["nonsense"], ["hdf5", "hdf5"]),
    Kind.NUMBERS: (1.0, "1", ["1"], [True], [1.0, float("nan")], [2, 2.0]),
}
# What stands for any name in FULL.
NAME_OF = {
    "markers": "arrow left",
    "bits": "match",
    "group": "questions",
    "labels": "second",
    "markers.*.labels": "item",
    "bits.*.names": "1",
    "bits.*.roles": "1",
    "labels.*.values": "left",
    "pulses.channels": "C3",
    "epochs.rule[].labels": "cued",
    "stimulation.columns": "intensity",
}


def place(path: str) -> tuple[list[str | int], str]:
    """Where a key stands in the tree of FULL, and its path in messages."""
    steps: list[str | int] = []
    parts = path.split(".")
    for depth, part in enumerate(parts):
        name = part.removesuffix("[]")
        if name == "*":
            name = NAME_OF[".".join(parts[:depth])]
        if name == "second" and parts[2] in ("compare", "values"):
            name = "renamed"  # the other one
        steps.append(name)
        if part.endswith("[]"):
            steps.append(1 if name == "trial" else 0)  # the first slot has no limits
    return steps, key_text(tuple(step + 1 if isinstance(step, int) else step for step in steps))


def with_value(path: str, value: Any) -> tuple[str, str]:
    """FULL's tree with another value under one key (or without it), and the key's path in messages."""
    tree: Any = tomllib.loads(FULL)
    steps, shown = place(path)
    inner = tree
    for step in steps[:-1]:
        inner = inner[step]
    if value is REQUIRED:
        del inner[steps[-1]]
    else:
        inner[steps[-1]] = value
    return written(tree), shown


def written(tree: dict[str, Any], path: str = "") -> str:
    """Write a tree as TOML: the program's own writer would do, but slowly."""
    text, below = "", ""
    for name, value in tree.items():
        key = json.dumps(name)
        inner = f"{path}.{key}" if path else key
        if isinstance(value, dict):
            below += f"[{inner}]\n" + written(value, inner)
        elif isinstance(value, list) and value and isinstance(value[0], dict):
            below += "".join(f"[[{inner}]]\n" + written(one, inner) for one in value)
        else:
            # JSON writes values as TOML does, but for these two.
            shown = json.dumps(value).replace("Infinity", "inf").replace("NaN", "nan")
            text += f"{key} = {shown}\n"
    return text + below


def wrong_values() -> list[tuple[str, Any]]:
    return [
        (key.path, value)
        for key in PLAN_KEYS
        for value in WRONG_TYPES[key.kind]
        if not (value == "" and key.default == "" and key.kind is Kind.WORD)
    ]


@pytest.mark.parametrize(("path", "value"), wrong_values())
def test_wrong_type_is_refused_with_path_allowed_received_and_line(path: str, value: Any) -> None:
    text, shown = with_value(path, value)
    error = refusal(text, "study.toml")
    # An element of a list is named with its place.
    assert error.key == shown or error.key.startswith(f"{shown}[")
    assert error.received
    assert error.allowed == BY_PATH[path].allowed
    assert error.path == "study.toml"
    last = shown.split(".")[-1].strip('"')
    assert last in text.split("\n")[(error.line or 0) - 1]


@pytest.mark.parametrize("key", [key for key in PLAN_KEYS if key.low is not None], ids=lambda key: key.path)
def test_out_of_range_is_refused(key: Key) -> None:
    assert key.low is not None
    assert key.high is not None
    for beyond in (key.low - 1, key.high * 1.001 + 1):
        value: Any = int(beyond) if key.kind is Kind.WHOLE else beyond
        if key.kind in (Kind.PAIR, Kind.SPAN, Kind.WINDOW):
            value = sorted([beyond, (key.low + key.high) / 2])
        if key.zero and value == 0:
            value = key.low / 2
        error = refusal(with_value(key.path, value)[0])
        newer = key is PLAN_KEYS[0] and beyond > key.high
        assert ("is from a newer version of the program" if newer else "out of range") in error.problem
        assert f"{key.low:.12g} to {key.high:.12g}" in error.allowed or key.now


@pytest.mark.parametrize(
    "key",
    [key for key in PLAN_KEYS if key.default is REQUIRED and not key.path.endswith("*")],
    ids=lambda k: k.path,
)
def test_missing_key_is_refused_and_its_table_located(key: Key) -> None:
    text, shown = with_value(key.path, REQUIRED)
    error = refusal(text)
    assert (error.key, error.problem) == (shown, "is missing")
    assert error.line is not None or shown == "pulsemend"


@pytest.mark.parametrize(
    "key",
    [key for key in PLAN_KEYS if key.default is not REQUIRED and key.default is not None],
    ids=lambda k: k.path,
)
def test_stating_a_default_changes_nothing(key: Key) -> None:
    stated: Any = [*key.default] if isinstance(key.default, tuple) else key.default
    with_default = outcome(with_value(key.path, stated)[0])
    steps, _ = place(key.path)
    tree: Any = tomllib.loads(FULL)
    inner = tree
    for step in steps[:-1]:
        inner = inner[step]
    inner.pop(steps[-1], None)
    without = written(tree)
    assert with_default == outcome(without)


def outcome(text: str) -> object:
    """The plan; or the refusal, where other keys need one that is at its default."""
    try:
        return parse_plan(text).plan
    except PlanError as error:
        return error.key, error.problem


UNKNOWN = [
    ("", "pulse = 1", "pulse", "pulses"),
    ("[about]", "lines_hz = 50", "about.lines_hz", "about.line_hz"),
    ("[pulses]", "windows_ms = [0, 1]", "pulses.windows_ms", "pulses.window_ms"),
    ("[filter]", "low_pass = 1", "filter.low_pass", "filter.lowpass_hz"),
    ("[channels]", "zzzz = 1", "channels.zzzz", None),
    ("[export]", "format = ['hdf5']", "export.format", "export.formats"),
    ("[limits]", "largest_uv = 0", "limits.largest_uv", "limits.largest_jump_uv"),
    ("[fourier]", "taper = 1", "fourier", None),
    ('[markers."arrow left"]', "roles = 1", 'markers."arrow left".roles', 'markers."arrow left".role'),
]


@pytest.mark.parametrize(("header", "row", "key", "suggestion"), UNKNOWN)
def test_unknown_key(header: str, row: str, key: str, suggestion: str | None) -> None:
    if header and header in DESIGN:
        at = DESIGN.index("\n", DESIGN.index(header)) + 1
        text = DESIGN[:at] + row + "\n" + DESIGN[at:]
    elif header:
        text = DESIGN + header + "\n" + row + "\n"
    else:
        text = row + "\n" + DESIGN
    error = refusal(text)
    assert error.key == key
    assert error.problem.startswith("is unknown")
    assert error.line == line_with(text, header if header == "[fourier]" else row)
    assert (f"did you mean {suggestion}?" in error.problem) == (suggestion is not None)


def test_unknown_key_in_arrays_of_tables() -> None:
    text = DESIGN.replace("optional = true", "option = true")
    error = refusal(text)
    assert error.key == "trial[3].option"
    assert "did you mean trial[3].optional?" in error.problem
    assert error.line == line_with(text, "option = true")


def later_values() -> list[tuple[str, Any]]:
    """A value, or every word, that a key has in a later version only."""
    found: list[tuple[str, Any]] = []
    for key in PLAN_KEYS:
        if not key.now:
            continue
        later: list[Any] = [str(word) for word in key.words if word not in (*key.now, *key.never)]
        if key.kind is Kind.WORDS:
            later = [[*map(str, key.now), word] for word in later]
        elif key.kind is not Kind.WORD:
            later = [{Kind.FLAG: not key.now[0], Kind.NUMBER: key.high, Kind.TEXT: "else.tsv"}[key.kind]]
        assert later
        found += [(key.path, value) for value in later]
    return found


@pytest.mark.parametrize(("path", "value"), later_values())
def test_later_features_are_refused_as_such(path: str, value: Any) -> None:
    text, shown = with_value(path, value)
    error = refusal(text)
    assert error.problem == "not in this version"
    assert error.key == (f"{shown}[{len(value)}]" if isinstance(value, list) else shown)
    assert error.line is not None
    assert error.received


# --- keys among each other ------------------------------------------------------------------------

CROSS = [
    ('slot = "cue1"', 'slot = "sample"', "trial[2].slot", "names an earlier slot too"),
    ('slot = "cue1"', 'slot = "log"', "trial[2].slot", "is kept for other columns of labels"),
    ("after_s = [1.0, 3.0]\n", "", "trial[3].after_s", "is missing; every slot but the first"),
    ("optional = true", 'after = "later"', "trial[3].after", "must name an earlier slot"),
    ("optional = true", 'after = "pulse1"', "trial[3].after", "must name an earlier slot"),
    (
        'role = "sample"\n[[trial]]',
        'role = "sample"\nafter_s = [0, 1]\n[[trial]]',
        "trial[1].after_s",
        "first slot",
    ),
    (
        'role = "sample"\n[[trial]]',
        'role = "sample"\nafter = "cue1"\n[[trial]]',
        "trial[1].after",
        "first slot",
    ),
    (
        'role = "sample"\n[[trial]]',
        'role = "sample"\noptional = true\n[[trial]]',
        "trial[1].optional",
        "first slot",
    ),
    ('role = "pulse"\nafter_s', 'role = "ignore"\nafter_s', "trial[3].role", "is none of the words"),
    ("optional = true", "", "trial[3]", None),
    ('role = "pulse"\n\n', 'role = "other"\n\n', "trial[3].role", None),
    ('role = "cue"\nlabels', 'role = "probe"\nlabels', "trial[2].role", "no code under [markers]"),
    ('fill = "covariance"', 'fill = "leave"', "pulses.fill", "FIF cannot hold"),
    ("lowpass_hz = 100.0", "lowpass_hz = 1.0", "filter.lowpass_hz", "is out of range"),
    ("highpass_hz = 1.0", "highpass_hz = 100.0", "filter.lowpass_hz", "must be above highpass_hz"),
    ("highpass_hz = 1.0", "highpass_hz = 0.05", "filter.highpass_hz", "is out of range"),
    ('name = "baseline"', 'name = "delay1"', "epochs.rule[2].name", "names an earlier rule too"),
    ('name = "baseline"', 'name = "base line"', "epochs.rule[2].name", "is not usable as a name"),
    ('anchor = "sample"', 'anchor = "cue3"', "epochs.rule[2].anchor", "must name a slot"),
    ('# stop_before = "pulse1"', 'stop_before = "pulse2"', "epochs.rule[1].stop_before", "must name a slot"),
    ('cued = "cue1.item"', 'cued = "cue1.side"', "epochs.rule[1].labels.cued", "must name a label of a slot"),
    (
        'cued = "cue1.item"',
        'cued = "sample.item"',
        "epochs.rule[1].labels.cued",
        "must name a label of a slot",
    ),
    ('cued = "cue1.item"', 'cued = "log.item"', "epochs.rule[1].labels.cued", "the plan has none"),
    ('cued = "cue1.item"', 'trial = "cue1.item"', "epochs.rule[1].labels.trial", "name of another"),
    ('cued = "cue1.item"', '"a.b" = "cue1.item"', 'epochs.rule[1].labels."a.b"', "holds a point"),
    ("start_s = 0.5", "start_s = 0.5003", "epochs.rule[1].start_s", "is no whole number of output samples"),
    ("length_s = 1.0", "length_s = 0.9996", "epochs.length_s", "is no whole number of output samples"),
    ('reference = "average"', 'reference = ["average"]\n', "channels", None),
]


@pytest.mark.parametrize(("old", "new", "key", "problem"), CROSS)
def test_keys_that_contradict(old: str, new: str, key: str, problem: str | None) -> None:
    assert DESIGN.count(old) == 1
    text = DESIGN.replace(old, new)
    if problem is None:
        parse_plan(text)
        return
    error = refusal(text)
    assert error.key == key
    assert problem in error.problem
    row = text.split("\n")[(error.line or 0) - 1]
    last = key.split(".")[-1].strip('"')
    # A key that is not there is located at its table.
    assert last in row or row.startswith(("[[trial]]", "[pulses]"))
