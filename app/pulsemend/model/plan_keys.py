"""The one table of the keys of a plan: type, unit, default, range, meaning, and what a later version brings.

The reader (`plan_file`) is driven by it; the draft and the guide print from it.
"""

from __future__ import annotations

from pulsemend.model.keys import Key, Kind
from pulsemend.model.vocabulary import (
    AcrossPulses,
    Decay,
    Fill,
    Format,
    Precision,
    PulseRule,
    PulseTimes,
    Role,
    Side,
)

SCHEMA = 1

PLAN_KEYS: tuple[Key, ...] = (
    Key("pulsemend", Kind.WHOLE, "version of the plan's format", low=1, high=SCHEMA),
    Key("about.name", Kind.TEXT, "name of the study", default=""),
    Key(
        "about.line_hz",
        Kind.NUMBER,
        "mains frequency to remove; 0: no line removal",
        default=0.0,
        unit="Hz",
        low=10.0,
        high=400.0,
        zero=True,
    ),
    Key("markers.*.role", Kind.WORD, "what the code stands for", words=Role),
    Key("markers.*.labels.*", Kind.TEXT, "a label that the code carries", filled=True),
    Key("trial[].slot", Kind.NAME, "name of one expected marker of a trial"),
    Key(
        "trial[].role",
        Kind.WORD,
        "role of the marker that fills the slot",
        words=Role,
        never=(Role.IGNORE, Role.UNDECIDED),
    ),
    Key(
        "trial[].after_s",
        Kind.SPAN,
        "allowed time since the slot `after`; for every slot but the first",
        default=None,
        unit="s",
        low=0.0,
        high=3600.0,
    ),
    Key(
        "trial[].after",
        Kind.TEXT,
        "slot that after_s counts from; default: the nearest earlier slot that is not optional",
        default="",
    ),
    Key("trial[].optional", Kind.FLAG, "whether a trial is complete without it", default=False),
    Key(
        "pulses.times",
        Kind.WORD,
        "where the times of the pulses come from",
        default=PulseTimes.MARKERS,
        words=PulseTimes,
        now=(PulseTimes.MARKERS, PulseTimes.NONE),
    ),
    Key(
        "pulses.search_ms",
        Kind.WINDOW,
        "how far a marker may be from its artifact (artifact minus marker)",
        default=(-10.0, 10.0),
        unit="ms",
        low=-1000.0,
        high=1000.0,
    ),
    Key(
        "pulses.window_ms",
        Kind.WINDOW,
        "the gap: what is replaced around every pulse; no default, needed unless there are no pulses",
        default=None,
        unit="ms",
        low=-1000.0,
        high=5000.0,
    ),
    Key("pulses.fill", Kind.WORD, "how a gap is replaced", default=Fill.COVARIANCE, words=Fill),
    Key("pulses.side", Kind.WORD, "which flanks a fill may use", default=Side.BOTH, words=Side),
    Key(
        "pulses.flank_ms",
        Kind.NUMBER,
        "flank that a fill learns from; default per fill: line one sample, cubic 10, monotone 5, "
        "autoregressive 200, covariance 50",
        default=None,
        unit="ms",
        low=0.01,
        high=10000.0,
    ),
    Key(
        "pulses.decay",
        Kind.WORD,
        "shape of what a pulse leaves behind after its gap",
        default=Decay.NONE,
        words=Decay,
        now=(Decay.NONE,),
    ),
    Key(
        "pulses.also[].window_ms",
        Kind.WINDOW,
        "a further gap at a fixed latency from every pulse, e.g. the stimulator's recharge",
        unit="ms",
        low=-5000.0,
        high=20000.0,
    ),
    Key(
        "pulses.channels.*",
        Kind.WINDOW,
        "gap of one channel, e.g. near the coil",
        unit="ms",
        low=-1000.0,
        high=5000.0,
    ),
    Key(
        "filter.highpass_hz",
        Kind.NUMBER,
        "high-pass, -6 dB point; 0: off",
        default=1.0,
        unit="Hz",
        # The transition is at least 0.2 Hz wide: below 0.1 Hz it would reach past zero.
        low=0.1,
        high=1000.0,
        zero=True,
    ),
    Key(
        "filter.lowpass_hz",
        Kind.NUMBER,
        "low-pass, -6 dB point; 0: off, or 0.4 x rate_hz at a reduced rate",
        default=100.0,
        unit="Hz",
        low=2.0,
        high=50000.0,
        zero=True,
    ),
    Key(
        "filter.rate_hz",
        Kind.NUMBER,
        "output sampling rate; 0: as recorded",
        default=1000.0,
        unit="Hz",
        low=10.0,
        high=100000.0,
        zero=True,
    ),
    Key(
        "filter.across_pulses",
        Kind.WORD,
        "what a filter sees at a gap",
        default=AcrossPulses.FILLED,
        words=AcrossPulses,
        now=(AcrossPulses.FILLED,),
    ),
    Key("channels.bad", Kind.TEXTS, "channels bad in every recording", default=()),
    # The design's default of the next two is true; it comes with the search itself.
    Key("channels.find_bad", Kind.FLAG, "search for bad channels", default=False, now=(False,)),
    Key("channels.rebuild_bad", Kind.FLAG, "rebuild bad channels", default=False, now=(False,)),
    Key(
        "channels.recorded_reference",
        Kind.TEXT,
        'reference of the recording, put back before averaging, e.g. "FCz"; empty: none',
        default="",
    ),
    Key(
        "channels.reference",
        Kind.WORD_OR_TEXTS,
        "new reference; a list of channels: their mean",
        default="average",
        words=("average", "as recorded"),
    ),
    Key("channels.positions", Kind.TEXT, "positions on the head", default="10-05", now=("10-05",)),
    Key(
        "epochs.length_s",
        Kind.NUMBER,
        "length of every epoch of the set",
        unit="s",
        low=0.001,
        high=3600.0,
    ),
    Key("epochs.rule[].name", Kind.NAME, "name of one kind of epoch"),
    Key("epochs.rule[].anchor", Kind.TEXT, "slot that is time zero"),
    Key(
        "epochs.rule[].start_s",
        Kind.NUMBER,
        "start of the first piece, since the anchor",
        unit="s",
        low=-3600.0,
        high=3600.0,
    ),
    Key("epochs.rule[].count", Kind.WHOLE, "consecutive pieces", default=1, low=1, high=10000),
    Key(
        "epochs.rule[].pulse",
        Kind.WORD,
        "whether a gap of a used channel may touch the epoch",
        default=PulseRule.REFUSE,
        words=PulseRule,
    ),
    Key(
        "epochs.rule[].clear_ms",
        Kind.PAIR,
        "kept free before and after every gap",
        default=(0.0, 0.0),
        unit="ms",
        low=0.0,
        high=60000.0,
    ),
    Key(
        "epochs.rule[].stop_before",
        Kind.TEXT,
        "left out unless it ends before this slot's gap, or its instant if it has none",
        default="",
    ),
    Key(
        "epochs.rule[].labels.*", Kind.TEXT, "label column, from a slot's label, e.g. cue1.item", filled=True
    ),
    *(
        Key(
            f"limits.{name}",
            Kind.NUMBER,
            meaning,
            default=0.0,
            unit="uV",
            low=0.0,
            high=1_000_000.0,
            now=(0.0,),
        )
        for name, meaning in (
            ("peak_to_peak_uv", "largest range within an epoch; 0: off"),
            ("least_range_uv", "smallest range within an epoch; 0: off"),
            ("largest_jump_uv", "largest step between two samples; 0: off"),
        )
    ),
    Key(
        "export.formats",
        Kind.WORDS,
        "containers of the set",
        default=(Format.HDF5, Format.FIF),
        words=Format,
        now=(Format.HDF5, Format.FIF),
    ),
    Key(
        "export.precision",
        Kind.WORD,
        "floating-point width of the samples",
        default=Precision.SINGLE,
        words=Precision,
    ),
)

LATER_PLAN_KEYS = frozenset({"labels", "pulses.decay_ms", "pulses.decay_least_uv"})
"""Keys that a later version has: refused as "not in this version" instead of as unknown."""
