"""The truth behind a Lantern recording, and the log of its task program, as files."""

from __future__ import annotations

import dataclasses
import io
import json
from typing import Any

import numpy as np

from pulsemend.simulate.evoked import LENGTH_S, PEAKS, PLACES, waveform
from pulsemend.simulate.lantern import Lantern, LanternSpec
from pulsemend.simulate.schedule import Question

LOG_ZERO_S = 4711.2503  # the log's clock when the recording begins
LOG_DRIFT = 50e-6  # how much faster it runs
LOG_COLUMNS = (
    "trial",
    "question",
    "asked",
    "probe",
    "answer",
    "correct",
    "reaction_s",
    "arrow_s",
    "probe_s",
    "answer_s",
)


def log_text(questions: tuple[Question, ...]) -> str:
    """Make the behavioural log: tab-separated, one row per question, times on the log's own clock."""
    rows = ["\t".join(LOG_COLUMNS)]
    for q in questions:
        arrow, probe, answer = (log_clock(t) for t in (q.arrow_s, q.probe_s, q.answer_s))
        correct = "yes" if q.answer == q.probe else "no"
        texts = [str(q.trial), str(q.number), q.asked, q.probe, q.answer, correct]
        rows.append("\t".join([*texts, *(f"{t:.4f}" for t in (answer - probe, arrow, probe, answer))]))
    return "\n".join(rows) + "\n"


def log_clock(time_s: float) -> float:
    """Convert a time of the recording to the log's clock."""
    return LOG_ZERO_S + (1.0 + LOG_DRIFT) * time_s


def truth_json(lantern: Lantern) -> str:
    """Make the readable part of the truth: settings, events, pulses, faults."""
    spec = lantern.spec
    events = [
        {
            "trial": m.trial,
            "slot": m.slot,
            "code": m.code,
            "time_s": round(m.time_s, 9),
            "sample": round(m.time_s * spec.rate_hz, 3),
            "marked_sample": m.marked,
            "happened": m.happened,
        }
        for m in lantern.schedule.moments
    ]
    content: dict[str, Any] = {
        "what": "truth behind a simulated recording; samples count from 0",
        "settings": _settings(spec),
        "n_samples": lantern.n_samples,
        "scale_v": lantern.scale_v,
        "log_clock": {"zero_s": LOG_ZERO_S, "drift": LOG_DRIFT},
        "faults": [dataclasses.asdict(fault) for fault in spec.faults],
        "bad_channels": [spec.loud] if spec.loud in spec.channels else [],
        "decay": {
            name: {"height_v": float(f"{height:.9g}"), "tau_s": float(f"{tau:.9g}"), "power": 2}
            for name, height, tau in zip(
                spec.channels, lantern.artifacts.decay_v, lantern.artifacts.decay_tau_s, strict=True
            )
        },
        "events": events,
    }
    return json.dumps(content, indent=1) + "\n"


def _settings(spec: LanternSpec) -> dict[str, Any]:
    settings = dataclasses.asdict(spec)
    del settings["faults"]
    return settings


def truth_arrays(lantern: Lantern) -> bytes:
    """Make the truth's arrays, as an uncompressed .npz file.

    ``channels``, ``source_names``, ``source_maps`` (source, channel; against FCz), ``offset_v``, ``sensor_v``
    (channel), ``times_s`` and for every kind of event ``evoked_<kind>`` (place, time): the volts that the
    maps of the sources named in ``places`` are multiplied with.
    """
    rate_hz = lantern.spec.rate_hz
    times_s = np.arange(round(LENGTH_S * rate_hz)) / rate_hz
    evoked = {
        f"evoked_{kind}": np.stack([waveform(kind, place, times_s) for place in PLACES]).astype(np.float32)
        for kind in PEAKS
    }
    file = io.BytesIO()
    np.savez(
        file,
        allow_pickle=False,
        channels=np.array(lantern.spec.channels),
        source_names=np.array(lantern.source_names),
        source_maps=lantern.source_maps,
        offset_v=lantern.offset_v,
        sensor_v=lantern.sensor_v,
        places=np.array(list(PLACES)),
        times_s=times_s,
        **evoked,
    )
    return file.getvalue()
