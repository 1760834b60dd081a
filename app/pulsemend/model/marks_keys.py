"""The one table of the keys of marks, as `plan_keys` is of a plan's."""

from __future__ import annotations

from pulsemend.model.keys import Key, Kind
from pulsemend.model.vocabulary import ChannelType

SCHEMA = 1
_LAST_SAMPLE = 2.0**53
"""Beyond it decimals no longer hold every whole number."""

MARKS_KEYS: tuple[Key, ...] = (
    Key("pulsemend_marks", Kind.WHOLE, "version of the format of marks", low=1, high=SCHEMA),
    Key("bad", Kind.TEXTS, "channels bad in this recording", default=()),
    Key("good", Kind.TEXTS, "channels good in this recording, over the plan and the search", default=()),
    Key("trials_excluded", Kind.WHOLES, "trials left out whole, from 1", default=(), low=1, high=1_000_000.0),
    Key("fingerprint[].name", Kind.TEXT, "a file of the recording, without its folder", filled=True),
    Key("fingerprint[].size", Kind.WHOLE, "its size", unit="bytes", low=0, high=_LAST_SAMPLE),
    Key("fingerprint[].sha256", Kind.TEXT, "its SHA-256", filled=True),
    Key("types.*", Kind.WORD, "type of a channel, over the file's", words=ChannelType),
    Key("gaps_ms.*", Kind.WINDOW, "gap of one channel, over the plan's", unit="ms", low=-1000.0, high=5000.0),
    Key(
        "pulses.added",
        Kind.WHOLES,
        "onsets of pulses without a marker, recorded samples from 0",
        default=(),
        low=0,
        high=_LAST_SAMPLE,
    ),
    Key(
        "pulses.removed",
        Kind.WHOLES,
        "recorded samples of pulse markers without a pulse",
        default=(),
        low=0,
        high=_LAST_SAMPLE,
    ),
    Key("pulses.moved[].sample", Kind.WHOLE, "recorded sample of the marker", low=0, high=_LAST_SAMPLE),
    Key("pulses.moved[].to", Kind.WHOLE, "recorded sample of the onset", low=0, high=_LAST_SAMPLE),
    Key("bad_stretches[].start", Kind.WHOLE, "first bad recorded sample", low=0, high=_LAST_SAMPLE),
    Key("bad_stretches[].stop", Kind.WHOLE, "the sample after the last bad one", low=1, high=_LAST_SAMPLE),
    Key("bad_stretches[].kind", Kind.TEXT, "why, in your own words", default=""),
    Key("epochs_left_out[].trial", Kind.WHOLE, "trial of an epoch left out, from 1", low=1, high=1_000_000.0),
    Key("epochs_left_out[].rule", Kind.NAME, "name of its rule"),
    Key("epochs_left_out[].piece", Kind.WHOLE, "its piece, from 1", default=1, low=1, high=10000),
    Key("run", Kind.TEXT, "label of this run, over the one in the file's name", default=""),
    Key(
        "markers_ignored[].sample",
        Kind.WHOLE,
        "recorded sample of a marker that counts for nothing",
        low=0,
        high=_LAST_SAMPLE,
    ),
    Key("markers_ignored[].code", Kind.TEXT, "its code, as the file has it", filled=True),
    Key(
        "markers_added[].sample",
        Kind.WHOLE,
        "recorded sample of a marker the recording lacks",
        low=0,
        high=_LAST_SAMPLE,
    ),
    Key("markers_added[].code", Kind.TEXT, "its code", filled=True),
    Key(
        "cures.accepted",
        Kind.TEXTS,
        "faults of markers whose cure is applied, as `pulsemend facts` names them",
        default=(),
    ),
    Key("cures.refused", Kind.TEXTS, "faults whose cure is not wanted", default=()),
    Key("log.file", Kind.TEXT, "behavioural log of this recording, over the plan's", default=""),
    Key(
        "log.rows_excluded",
        Kind.WHOLES,
        "rows of the log, from 1, that are not joined",
        default=(),
        low=1,
        high=1_000_000.0,
    ),
)

LATER_MARKS_KEYS = frozenset({"positions", "epochs_kept"})
"""Keys that a later version has: refused as "not in this version" instead of as unknown."""
