"""Plans as texts: round trips that keep meaning and comments, and files that are no plans."""

from __future__ import annotations

import re
import sys
from dataclasses import replace
from pathlib import Path
from typing import Any

import pytest
from hypothesis import Phase, given, settings
from hypothesis import strategies as st

from pulsemend.errors import PlanError
from pulsemend.model.keys import key_defaults
from pulsemend.model.label_columns import slot_columns
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
from pulsemend.model.plan_file import (
    parse_plan,
    plan_text,
    plan_tree,
    read_plan,
    update_text,
    write_plan,
)
from pulsemend.model.plan_keys import PLAN_KEYS
from pulsemend.model.toml_edit import updated_text
from pulsemend.model.vocabulary import (
    Choose,
    Fill,
    Format,
    OnsetUse,
    Precision,
    PulseRule,
    PulseTimes,
    Role,
    Side,
    StandIn,
    Stimulation,
    TimeUnit,
)

TEXT = """\
# our study, first version
pulsemend = 1   # format

[about]
name = "Lantern"  # the scenario

# codes
[markers."arrow left"]            # the code
role = "cue"
labels = { item = "left" }        # what it points to
[markers.lamp]
role = "sample"
[markers."S 21"]
role = "pulse"                    # from the stimulator

[[trial]]                         # slots in order
slot = "sample"
role = "sample"
[[trial]]
slot = "cue1"
role = "cue"
after_s = [4.0, 6.5]              # jittered
[[trial]]
slot = "pulse1"
role = "pulse"
after_s = [1, 3]
optional = true                   # sham trials have none
[[trial]]
slot = "question"                 # once or twice
role = "cue"
after_s = [1.0, 5.0]
group = "questions"

[pulses]
window_ms = [-2, 14]              # seen in the pictures
[[pulses.also]]                   # recharge
window_ms = [248.0, 254.0]
[pulses.channels]                 # near the coil
C3 = [-2.0, 25.0]

[filter]
rate_hz = 1_000                   # one kHz

[epochs]
length_s = 1.0                    # one length
[[epochs.rule]]
name = "delay1"
anchor = "cue1"
start_s = 0.5                     # after the cue
labels = { cued = "cue1.item" }
[[epochs.rule]]
name = "baseline"                 # before all
anchor = "sample"
start_s = -1.0
# the end

[bits.match]                      # of the second byte
at = [8, 9]
names = { "1" = "match" }         # the rest are lures
[group.questions]
times = [1, 2]                    # the second only after a mistake
between_s = [1.0, 2.0]

[log]
file = "{stem}_log.tsv"           # from the task program
slots = ["cue1"]
time = "cue_s"

# what belongs together
[labels]
again = { compare = ["cue1.item", "question1.item"], same = "stay" }   # or switch
[labels.speed]                    # of the answer
bin = "log.rt_s"
edges = [0.5, 1]                  # s

[[onset]]
channel = "Photo"                 # on the lamp
codes = ["lamp"]

[stimulation]
target = "left"                   # P3
"""
PLAN = parse_plan(TEXT).plan


def same(first: Plan, second: Plan) -> bool:
    """Whether two plans mean the same; the order of codes, fields and labels is that of the text."""

    def unordered(plan: Plan) -> tuple[Plan, list[object]]:
        bare = replace(plan, markers=(), bits=(), labels=())
        parts: list[MarkerPlan | BitField | DerivedLabel] = [*plan.markers, *plan.bits, *plan.labels]
        return bare, sorted(parts, key=repr)

    return unordered(first) == unordered(second)


def comments(text: str) -> list[str]:
    return re.findall(r"#[^\n]*", text)


def test_unchanged_plan_leaves_the_text_as_it_is() -> None:
    assert update_text(TEXT, PLAN) == TEXT
    crlf = TEXT.replace("\n", "\r\n")
    assert update_text(crlf, PLAN) == crlf
    assert parse_plan(crlf).plan == PLAN


def test_new_text_means_the_same() -> None:
    assert parse_plan(plan_text(PLAN)).plan == PLAN


def test_one_change_touches_one_line() -> None:
    changed = update_text(TEXT, replace(PLAN, pulses=replace(PLAN.pulses, window_ms=(-1.5, 20.0))))
    different = [(a, b) for a, b in zip(TEXT.split("\n"), changed.split("\n"), strict=True) if a != b]
    assert different == [
        (
            "window_ms = [-2, 14]              # seen in the pictures",
            "window_ms = [-1.5, 20.0]              # seen in the pictures",
        )
    ]


def changed_plan() -> Plan:
    rules = PLAN.epochs.rule
    return replace(
        PLAN,
        about=replace(PLAN.about, line_hz=50.0),
        markers=(replace(PLAN.markers[0], labels={"item": "right", "side": "x"}), *PLAN.markers[1:]),
        trial=(PLAN.trial[0], replace(PLAN.trial[1], slot="cue"), *PLAN.trial[2:]),
        pulses=replace(PLAN.pulses, fill=Fill.LINE, channels={"C3": (-2.0, 25.0), "C4": (-2.0, 30.0)}),
        filter=replace(PLAN.filter, rate_hz=500.0, lowpass_hz=80.0),
        epochs=Epochs(
            2.0,
            (replace(rules[1], name="rest"), replace(rules[0], anchor="cue", labels={"cued": "cue.side"})),
        ),
        export=Export((Format.HDF5,), Precision.DOUBLE),
        bits=(replace(PLAN.bits[0], names={"1": "hit", "3": "miss"}, roles={"1": Role.PROBE}),),
        groups=(replace(PLAN.groups[0], times=(0, 3)),),
        blocks=Blocks(pause_s=20.0, practice_column="phase", practice_values=("training",)),
        log=replace(PLAN.log, slots=("cue",), unit=TimeUnit.MILLISECONDS),
        labels=(
            replace(PLAN.labels[0], compare=("cue.item", "question1.item"), different="switch"),
            replace(PLAN.labels[1], names=("fast", "usual", "slow")),
            DerivedLabel("renamed", map="cue.item", values={"left": "L", "right": "R"}),
        ),
        onset=(replace(PLAN.onset[0], use=OnsetUse.EACH), OnsetRule("Sound", ("other",))),
        balance=Balance(("cued",), Choose.DRAWN, 3),
        stimulation=replace(PLAN.stimulation, intensity=55.0, columns={"condition": "given"}),
    )


@pytest.mark.parametrize("end", ["\n", "\r\n"])
def test_many_changes_keep_every_comment(end: str) -> None:
    text = TEXT.replace("\n", end)
    changed = update_text(text, changed_plan())
    assert same(parse_plan(changed).plan, changed_plan())
    assert sorted(comments(changed.replace("\r\n", "\n"))) == sorted(comments(TEXT))
    assert ("\r" in changed) is (end == "\r\n")
    assert changed.count("\n") == changed.count(end)


def test_removed_tables_take_only_their_own_comments() -> None:
    less = replace(
        PLAN,
        markers=PLAN.markers[:3],
        trial=PLAN.trial[:2],
        bits=(),
        groups=(),
        log=Log(),
        labels=(),
        onset=(),
        stimulation=StimulationFacts(),
        pulses=replace(PLAN.pulses, also=(), channels={}),
        epochs=replace(PLAN.epochs, rule=PLAN.epochs.rule[:1]),
    )
    changed = update_text(TEXT, less)
    assert parse_plan(changed).plan == less
    gone = set(comments(TEXT)) - set(comments(changed))
    own = {
        "# once or twice",
        "# sham trials have none",
        "# recharge",
        "# before all",
        "# the end",
        "# near the coil",
    }
    assert gone <= own | set(comments(TEXT[TEXT.index("# the end") :]))


def test_write_and_read(tmp_path: Path) -> None:
    path = tmp_path / "study plan.toml"
    write_plan(path, PLAN)
    assert read_plan(path).plan == PLAN
    path.write_text(TEXT, encoding="utf-8")
    file = read_plan(path)
    assert file.text == TEXT
    written = write_plan(path, changed_plan(), file.text)
    assert path.read_bytes() == written.encode()
    assert same(read_plan(path).plan, changed_plan())
    assert [one.name for one in tmp_path.iterdir()] == [path.name]


def test_other_ways_to_write_the_same_toml_are_updated_too() -> None:
    text = """\
pulsemend = 1
markers = { lamp = { role = "sample" }, "arrow left" = { role = "cue", labels.item = "left" } }
trial = [ { slot = "sample", role = "sample" } ]  # one
pulses.window_ms = [
    -2,  # before
    14,
]
filter = { highpass_hz = 2 }
epochs.length_s = 1
epochs.rule = [ { name = "baseline", anchor = "sample", start_s = -1 } ]
"""
    plan = parse_plan(text).plan
    assert plan.labels_of("arrow left") == {"item": "left"}
    assert update_text(text, plan) == text
    changed = replace(
        plan,
        trial=(*plan.trial, Slot("cue1", Role.CUE, (1.0, 2.0))),
        filter=Filter(0.0, 40.0),
        pulses=replace(plan.pulses, window_ms=(-3.0, 14.0), also=(OtherGap((100.0, 110.0)),)),
        epochs=replace(plan.epochs, length_s=2.0),
    )
    assert parse_plan(update_text(text, changed)).plan == changed


CODES = ["a\nb", "\0", "\x7f", "\u2028", "a\tb", "\U000e0001", "'" * 3, '"' * 3, "*", "a.b", ""]


@pytest.mark.parametrize("code", CODES, ids=ascii)
def test_any_code_is_kept_and_named_on_one_line(code: str) -> None:
    plan = replace(PLAN, markers=(*PLAN.markers, MarkerPlan(code, Role.OTHER)))
    text = plan_text(plan)
    assert same(parse_plan(text).plan, plan)
    updated = update_text(TEXT, plan)
    assert same(parse_plan(updated).plan, plan)
    assert comments(updated) == comments(TEXT)
    with pytest.raises(PlanError) as caught:
        parse_plan(text.replace('role = "other"', 'role = "no"'))
    assert len(str(caught.value).splitlines()) == 1
    assert caught.value.line == text[: text.index('role = "other"')].count("\n") + 1


# --- any plan ---------------------------------------------------------------------------------------

words = st.text("abcXY_-1", min_size=1, max_size=5)
texts = st.text(st.characters(codec="utf-8", exclude_categories=("Cs", "Cc")), max_size=8)
filled = texts.filter(lambda text: bool(text.strip()))
milliseconds = st.integers(-9000, 9000).map(lambda value: value / 10)


REFERENCES: list[str | tuple[str, ...]] = ["average", "as recorded", ("R1", "R2")]


def windows(low: float, high: float) -> st.SearchStrategy[tuple[float, float]]:
    first = st.integers(round(low * 10), round(high * 10) - 1)
    length = st.integers(1, round((high - low) * 10))
    return st.tuples(first, length).map(
        lambda pair: (pair[0] / 10, min(pair[0] + pair[1], round(high * 10)) / 10)
    )


@st.composite
def plans(draw: st.DrawFn) -> Plan:
    codes = draw(st.lists(texts, min_size=1, max_size=4, unique=True))
    markers = [
        MarkerPlan(code, draw(st.sampled_from(Role)), draw(st.dictionaries(words, filled, max_size=2)))
        for code in codes
    ]
    usable = [role for role in Role if role not in (Role.IGNORE, Role.UNDECIDED)]
    roles = sorted({marker.role for marker in markers} & set(usable))
    if not roles:
        markers[0] = replace(markers[0], role=Role.SAMPLE)
        roles = [Role.SAMPLE]
    names = draw(st.lists(words, min_size=1, max_size=3, unique=True))
    slots = [
        Slot(
            name,
            draw(st.sampled_from(roles)),
            None if place == 0 else draw(windows(0, 60)),
            draw(st.sampled_from(["", *names[:place]])) if place else "",
            bool(place) and draw(st.booleans()),
        )
        for place, name in enumerate(names)
    ]
    sources = [
        f"{slot.slot}.{label}" for slot in slots for m in markers if m.role is slot.role for label in m.labels
    ]
    columns = st.text("qrs", min_size=1, max_size=3)
    rules = tuple(
        EpochRule(
            name,
            draw(st.sampled_from(names)),
            draw(st.integers(-300, 300)) / 100,
            draw(st.integers(1, 4)),
            draw(st.sampled_from(PulseRule)),
            draw(st.tuples(st.integers(0, 50), st.integers(0, 50)).map(lambda p: (float(p[0]), float(p[1])))),
            draw(st.sampled_from(["", *names])),
            draw(st.dictionaries(columns, st.sampled_from(sources), max_size=2)) if sources else {},
            draw(st.booleans()),
        )
        for name in draw(st.lists(words, min_size=1, max_size=3, unique=True))
    )
    plan = Plan(
        About(draw(texts), draw(st.sampled_from([0.0, 50.0, 60.0]))),
        tuple(markers),
        tuple(slots),
        Pulses(
            times=draw(st.sampled_from(PulseTimes)),
            search_ms=draw(windows(-20, 20)),
            window_ms=draw(windows(-20, 20)),
            fill=draw(st.sampled_from([fill for fill in Fill if fill is not Fill.LEAVE])),
            side=draw(st.sampled_from(Side)),
            flank_ms=draw(st.none() | st.just(12.5)),
            also=tuple(OtherGap(gap) for gap in draw(st.lists(windows(50, 500), max_size=2))),
            channels=draw(st.dictionaries(texts, windows(-20, 50), max_size=2)),
        ),
        Filter(draw(st.sampled_from([0.0, 0.5, 1.0])), draw(st.sampled_from([0.0, 40.0])), 1000.0),
        Channels(
            tuple(draw(st.lists(words, max_size=2, unique=True))),
            recorded_reference=draw(texts),
            reference=draw(st.sampled_from(REFERENCES)),
        ),
        Epochs(draw(st.sampled_from([0.5, 1.0])), rules),
        Export(
            draw(st.sampled_from([(Format.HDF5,), (Format.FIF,), (Format.FIF, Format.HDF5)])),
            draw(st.sampled_from(Precision)),
        ),
    )
    return with_trials(draw, plan, roles)


def with_trials(draw: st.DrawFn, plan: Plan, roles: list[Role]) -> Plan:
    """The plan with kinds, groups, blocks, log, labels, onsets, balance and facts."""
    names = [slot.slot for slot in plan.trial]
    slots = list(plan.trial)
    groups: tuple[Group, ...] = ()
    if draw(st.booleans()):
        least = draw(st.integers(0, 1))
        groups = (Group("of questions", (least, draw(st.integers(1, 3))), draw(windows(0, 60))),)
        slots += [
            Slot("g", draw(st.sampled_from(roles)), draw(windows(0, 60)), group=groups[0].name),
            Slot(
                "h",
                draw(st.sampled_from(roles)),
                draw(windows(0, 60)),
                draw(st.sampled_from(["", "g", names[0]])),
                draw(st.booleans()),
                group=groups[0].name,
            ),
        ]
    if draw(st.booleans()):
        role = draw(st.sampled_from(roles))
        stand_in = draw(st.sampled_from(StandIn))
        slots.append(
            Slot(
                "k",
                role,
                draw(windows(0, 60)),
                optional=True,
                kinds=draw(st.sampled_from([(), ("one", "two"), ("one cue",)])),
                stand_in=stand_in,
                stand_in_s=2.5 if stand_in is StandIn.FIXED else None,
                stand_in_seed=draw(st.integers(0, 9)),
                from_signal=role is Role.PULSE and draw(st.booleans()),
            )
        )
    plan = replace(plan, trial=tuple(slots), groups=groups, bits=draw(fields(roles)))
    starts = [m.code for m in plan.markers if m.code.strip() and m.role in (Role.OTHER, Role.IGNORE)]
    seen = [m.code for m in plan.markers if m.code.strip() and plan.role_of(m.code) is not Role.PULSE]
    log = draw(st.sampled_from([Log(), logs(draw, names)]))
    blocks = Blocks(
        codes=tuple(starts) if draw(st.booleans()) else (),
        pause_s=draw(st.sampled_from([20.0, 1.5])),
        practice_first=draw(st.integers(0, 3)),
        practice_column=draw(filled) if log.file else "",
        practice_values=("x", draw(st.sampled_from(["y", "1"]))) if log.file else (),
        after_pause=draw(st.integers(0, 2)),
    )
    columns = ["run", *slot_columns(plan), *(f"log.{slot}.x y" for slot in log.slots if len(log.slots) > 1)]
    columns += ["log.x"] if len(log.slots) == 1 else []
    facts = StimulationFacts(
        intensity=draw(st.none() | milliseconds.filter(lambda value: value >= 0)),
        target=draw(texts),
        condition=draw(st.sampled_from(["", *Stimulation])),
        columns=draw(st.sampled_from([{}, {"coil": "a b", "notes": "c"}])) if log.file else {},
    )
    channel = st.builds(OnsetRule, filled, st.just(()), windows(-20, 90), st.sampled_from(OnsetUse))
    return replace(
        plan,
        blocks=blocks,
        log=log,
        labels=tuple(
            draw(labels(name, columns))
            for name in draw(st.lists(st.sampled_from(["u", "v w", "x"]), unique=True))
        ),
        onset=tuple(replace(draw(channel), codes=(code,)) for code in seen),
        balance=Balance(
            tuple(draw(st.lists(st.sampled_from(columns), max_size=2, unique=True))),
            draw(st.sampled_from(Choose)),
            draw(st.integers(0, 9)),
        ),
        stimulation=facts,
    )


def logs(draw: st.DrawFn, names: list[str]) -> Log:
    slots = draw(st.lists(st.sampled_from(names), min_size=1, max_size=2, unique=True))
    columns = draw(st.lists(filled, max_size=2, unique=True))
    unit = draw(st.sampled_from(TimeUnit))
    return Log("{stem} log.csv", tuple(slots), draw(texts), unit, draw(texts), "", tuple(columns))


@st.composite
def fields(draw: st.DrawFn, roles: list[Role]) -> tuple[BitField, ...]:
    found = []
    for name in draw(st.lists(words, max_size=2, unique=True)):
        low, width = draw(st.integers(0, 28)), draw(st.integers(1, 3))
        values = st.integers(0, 2**width - 1).map(str)
        named = draw(st.dictionaries(values, filled, max_size=2))
        with_role = draw(st.dictionaries(values, st.sampled_from(roles), max_size=2))
        found.append(BitField(name, (low, low + width - 1), named, with_role))
    return tuple(found)


@st.composite
def labels(draw: st.DrawFn, name: str, columns: list[str]) -> DerivedLabel:
    column = draw(st.sampled_from(columns))
    edges = tuple(sorted(draw(st.lists(milliseconds, min_size=1, max_size=3, unique=True))))
    ways: list[dict[str, Any]] = [
        {"copy": column},
        {"previous": column},
        {"position": draw(st.sampled_from(["block", "recording"]))},
        {"bin": column, "edges": edges},
        {"bin": column, "edges": edges, "names": tuple("abcd"[: len(edges) + 1])},
        {
            "map": column,
            "values": draw(st.dictionaries(texts, filled, min_size=1, max_size=2)),
            "otherwise": draw(texts),
        },
    ]
    if len(columns) > 1:
        ways.append({"compare": tuple(columns[-2:]), "same": draw(filled), "different": draw(filled)})
    return DerivedLabel(name, **draw(st.sampled_from(ways)))


# Shrinking such plans takes minutes and helps little.
@settings(deadline=None, max_examples=15, phases=[Phase.explicit, Phase.generate])
@given(plans(), plans())
def test_any_plan_survives_writing_and_any_text_can_become_any_plan(first: Plan, second: Plan) -> None:
    text = plan_text(first)
    assert parse_plan(text).plan == first
    assert update_text(text, first) == text
    named = {"trial": "slot", "epochs.rule": "name", "pulses.also": "", "onset": ""}
    for start in (text, TEXT):
        # The editing itself has to be right, without the fall-back to a text without comments.
        edited = updated_text(start, plan_tree(second), key_defaults(PLAN_KEYS), named)
        assert same(parse_plan(edited).plan, second)


# --- new keys and the comments around them ----------------------------------------------------------

SECTIONS = """\
pulsemend = 1
[pulses]
times = "markers"
search_ms = [-10.0, 10.0]   # wide
# decide: the gap, for example:
# window_ms = [-2.0, 14.0]   # replaced
fill = "line"
# of the fill
decay = "none"
# the last word on pulses

# Recorded at 5000 Hz.
[filter]
rate_hz = 0
# what comes out
[epochs]
length_s = 1.0
"""


def edited(text: str, pulses: dict[str, Any]) -> list[str]:
    plan = parse_plan(text).plan
    new = replace(plan, pulses=replace(plan.pulses, **pulses))
    changed = update_text(text, new)
    assert same(parse_plan(changed).plan, new)
    assert comments(changed) == comments(text)
    return changed.split("\n")


def test_new_key_stands_below_its_commented_example() -> None:
    lines = edited(SECTIONS, {"window_ms": (-1.0, 9.0)})
    place = lines.index("window_ms = [-1.0, 9.0]")
    assert lines[place - 1] == "# window_ms = [-2.0, 14.0]   # replaced"
    assert [*lines[:place], *lines[place + 1 :]] == SECTIONS.split("\n")


def test_new_key_stands_behind_the_one_before_it_in_the_table_of_keys() -> None:
    lines = edited(SECTIONS, {"side": Side.BEFORE})
    assert lines[lines.index('side = "before"') - 1] == 'fill = "line"'
    lines = edited(SECTIONS.replace('decay = "none"\n', ""), {"flank_ms": 20.0})
    assert lines[lines.index("flank_ms = 20.0") - 1] == 'fill = "line"'
    lines = edited(SECTIONS.replace('times = "markers"\n', ""), {"times": PulseTimes.NONE})
    assert lines[lines.index('times = "none"') - 1] == "[pulses]"


def test_new_table_stands_before_the_comment_of_the_next_one() -> None:
    more = {"also": (OtherGap((20.0, 30.0)),), "channels": {"C3": (-2.0, 25.0)}}
    lines = edited(SECTIONS, more)
    for header in ("[[pulses.also]]", "[pulses.channels]"):
        assert lines.index("# the last word on pulses") < lines.index(header)
        assert lines.index(header) < lines.index("# Recorded at 5000 Hz.")
    assert lines[lines.index("[filter]") - 1] == "# Recorded at 5000 Hz."
    # Dotted keys behind the new header would belong to it.
    edited(SECTIONS.replace("# of the fill", "channels.C4 = [-2.0, 9.0]"), {"also": more["also"]})


def test_new_keys_in_a_text_with_carriage_returns() -> None:
    plan = parse_plan(SECTIONS).plan
    new = replace(plan, pulses=replace(plan.pulses, window_ms=(-1.0, 9.0)))
    changed = update_text(SECTIONS.replace("\n", "\r\n"), new)
    assert changed.replace("\r\n", "\n") == update_text(SECTIONS, new)
    assert "\n" not in changed.replace("\r\n", "")


# --- files that are no plans ------------------------------------------------------------------------

NO_PLANS: list[tuple[str, bytes, str, int | None]] = [
    ("empty", b"", "pulsemend: is missing", None),
    ("no toml", b"pulsemend = 1\nhello\n", "not valid TOML", 2),
    (
        "duplicate key",
        b"pulsemend = 1\n[about]\nname = 'a'\nname = 'b'\n",
        "TOML: the key name stands twice",
        4,
    ),
    ("key and table", b"pulsemend = 1\nabout = 1\n[about]\n", "TOML: the key about stands twice", 3),
    ("dotted twice", b"about.name = 'a'\nabout . name = '='\n", "TOML: the key about . name stands twice", 2),
    ("key of lines", b"a = 1\na = [\n1\n]\n", "TOML: a key stands twice", 4),
    (
        "duplicate table",
        b"pulsemend = 1\n[about]\nname = 'a'\n[about]\nline_hz = 50\n",
        "TOML: the table [about] stands twice",
        4,
    ),
    (
        "duplicate code",
        b"[markers.'S 1']\nrole = 'cue'\n[markers.'S 1']\n",
        'TOML: the table [markers."S 1"] stands twice',
        3,
    ),
    ("open string", b'pulsemend = 1\n[about]\nname = "a\n', "not valid TOML", 3),
    ("ends early", b"pulsemend = 1\n[pulses]\nwindow_ms = [1,\n\n", "not valid TOML", None),
    ("latin", "pulsemend = 1\n# für\n".encode("latin-1"), "is not UTF-8", 2),
    ("utf-16", "pulsemend = 1\n".encode("utf-16"), "is not UTF-8", 1),
    ("binary", bytes(range(256)) * 4, "is not UTF-8", 2),
    ("nul", b"pulsemend = 1\n\0\n", "not valid TOML", 2),
    ("old mac", b"pulsemend = 1\r[about]\r", "not valid TOML", 1),
    ("deep array", b"pulsemend = " + b"[" * 100_000, "nested too deeply", None),
    ("deep but closed", b"pulsemend = " + b"[" * 5000 + b"]" * 5000, "nested too deeply", None),
    ("deep table", b"a = " + b"{a = " * 5000 + b"1" + b"}" * 5000, "nested too deeply", None),
    ("huge", b"# " + b"x" * 1_100_000, "is larger than 1000 kB", None),
    ("huge number", b"pulsemend = " + b"9" * 6000, "not valid TOML", None),
    ("big number", b"pulsemend = " + b"9" * 400, "pulsemend: is from a newer version", 1),
    ("format 0", b"pulsemend = 0\n", "pulsemend: is out of range", 1),
    ("later format", b"pulsemend = 2\n", "pulsemend: is from a newer version of the program", 1),
    ("later format and keys", b"pulsemend = 2\n[new]\na = 1\n", "is from a newer version", 1),
    ("format as text", b"pulsemend = '2'\n", "pulsemend: must be a whole number", 1),
    ("date", b"pulsemend = 1\n[about]\nname = 1979-05-27\n", "about.name: must be text", 3),
    ("section as value", b"pulsemend = 1\nabout = 3\n", "about: must be a table", 2),
    (
        "table as array",
        b"pulsemend = 1\n[trial]\nslot = 'a'\n",
        "trial: must be an array of tables: [[trial]]",
        2,
    ),
    ("array of numbers", b"pulsemend = 1\ntrial = [1, 2]\n", "trial[1]: must be a table", 2),
    ("section as array", b"pulsemend = 1\n[[filter]]\nrate_hz = 1\n", "filter: must be a table", 2),
]


@pytest.mark.parametrize(
    ("data", "problem", "line"), [row[1:] for row in NO_PLANS], ids=[row[0] for row in NO_PLANS]
)
def test_files_that_are_no_plans_get_one_clear_line(
    data: bytes, problem: str, line: int | None, tmp_path: Path
) -> None:
    path = tmp_path / "study.toml"
    path.write_bytes(data)
    with pytest.raises(PlanError) as caught:
        read_plan(path)
    message = str(caught.value)
    assert problem in message
    assert str(path) in message
    assert "\n" not in message
    assert "\r" not in message
    assert len(message) - len(str(path)) < 500
    if line is not None:
        assert caught.value.line == line
        assert f", line {line}" in message


def test_nesting_at_every_depth_is_read_or_refused() -> None:
    limit = sys.getrecursionlimit()
    for depth in range(1, limit, 101):
        for text in ("x = " + "[" * depth + "]" * depth, "x = " + "{a=" * depth + "1" + "}" * depth):
            with pytest.raises(PlanError):
                parse_plan(text)


def test_byte_order_mark_is_passed_over(tmp_path: Path) -> None:
    path = tmp_path / "study.toml"
    path.write_bytes(b"\xef\xbb\xbf" + TEXT.encode())
    assert read_plan(path).plan == PLAN
    assert parse_plan("\ufeff" + TEXT).plan == PLAN


def test_file_that_cannot_be_opened(tmp_path: Path) -> None:
    with pytest.raises(PlanError, match="cannot be read: there is no such file; check its name and folder"):
        read_plan(tmp_path / "none.toml")
    with pytest.raises(PlanError, match="cannot be read: it is a folder; name the file in it"):
        read_plan(tmp_path)
    # What a missing file would have been plays no part.
    with pytest.raises(PlanError, match="there is no such file"):
        read_plan(tmp_path / "none.vhdr")


def test_recording_given_as_plan(tmp_path: Path) -> None:
    header = b"Some Words, Header File Version 1.0\n; made by hand\n[Common Infos]\nCodepage=UTF-8\n"
    for name, data in (
        ("a.vhdr", b"[Common Infos]\nCodepage=UTF-8\n"),
        ("renamed.txt", header),
        ("a.EEG", bytes(range(256)) * 8),
        ("a.fif.gz", b"\x1f\x8b" + b"0" * 1_100_000),
    ):
        path = tmp_path / name
        path.write_bytes(data)
        with pytest.raises(PlanError, match="is a recording, not a plan; name the plan's file") as caught:
            read_plan(path)
        assert str(caught.value).startswith(str(path))
    # Any other text that is no plan keeps its own reason, and a plan under any name is read.
    (tmp_path / "notes.txt").write_text("the header of a file\n")
    with pytest.raises(PlanError, match="not valid TOML"):
        read_plan(tmp_path / "notes.txt")
    (tmp_path / "plan.eeg").write_text(TEXT, encoding="utf-8")
    assert read_plan(tmp_path / "plan.eeg").plan == PLAN


def refusal_of(text: str) -> PlanError | None:
    try:
        parse_plan(text)
    except PlanError as error:
        return error
    return None


@settings(deadline=None, max_examples=200)
@given(st.text(max_size=60) | st.lists(st.sampled_from(TEXT.split("\n")), max_size=12).map("\n".join))
def test_any_text_is_a_plan_or_refused_in_one_line(text: str) -> None:
    assert "\n" not in str(refusal_of(text))


@settings(deadline=None, max_examples=100)
@given(st.integers(0, len(TEXT) - 1), st.integers(1, 30), texts)
def test_any_damage_is_read_or_refused_with_a_line_of_the_text(at: int, length: int, new: str) -> None:
    text = TEXT[:at] + new + TEXT[at + length :]
    error = refusal_of(text)
    assert error is None or error.line is None or 1 <= error.line <= text.count("\n") + 1
