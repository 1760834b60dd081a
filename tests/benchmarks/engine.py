"""Processor time and memory of `mend`, against the best plain script with the reader library.

    python tests/benchmarks/engine.py FOLDER [--pairs 5] [--minutes 20]

writes a simulated recording into FOLDER once (62 channels, 5 kHz, 75 trials with 150 pulses: 744 MB for 20
minutes) and runs, interleaved, each in a process of its own:

  mend             recording to set: hash, fit, repair, filter, cut, HDF5 and FIF, read-back, fsync
  signal, line     fit, repair, decimate, filter, reference and cut 450 epochs; fill "line"; nothing written
  script           read, straight line over each pulse, polyphase resampling, 1-100 Hz, epochs, average
                   reference, saved as FIF: the order that costs least (decimation before filtering)

Processor time counts after imports, user and system, all threads; peak memory counts with imports. The
parent imports nothing large, because a child's peak starts from its parent's.
"""

from __future__ import annotations

import argparse
import json
import statistics
import subprocess
import sys
from pathlib import Path
from typing import Any

PLAN = """
pulsemend = 1
[about]
name = "Lantern, for measuring"
[markers."lanterns up"]
role = "sample"
[markers."arrow left"]
role = "cue"
[markers."arrow right"]
role = "cue"
[markers."pulse"]
role = "pulse"
[[trial]]
slot = "sample"
role = "sample"
[[trial]]
slot = "cue1"
role = "cue"
after_s = [0.2, 20.0]
[[trial]]
slot = "cue2"
role = "cue"
after_s = [0.2, 20.0]
[pulses]
window_ms = [-2.0, 14.0]
fill = "{fill}"
[channels]
recorded_reference = ""
find_bad = false
rebuild_bad = false
[epochs]
length_s = 1.0
"""
RULE = """
[[epochs.rule]]
name = "{name}"
anchor = "{anchor}"
start_s = -0.5
count = 2
pulse = "accept filled"
"""

PREPARE = """
import sys
from pathlib import Path
from pulsemend.progress import finish
from pulsemend.simulate.lantern import LanternSpec
from pulsemend.simulate.sample import write_sample
minutes = float(sys.argv[2])
spec = LanternSpec(trials=round(3.75 * minutes), duration_s=60.0 * minutes, faults=())
finish(write_sample(Path(sys.argv[1]), 1, spec))
"""

MEND = """
import json, resource, shutil, sys, time
from pathlib import Path
import h5py, mne, numpy, scipy.fft, scipy.signal, scipy.linalg
import mne._fiff.write, mne._fiff.meas_info
from pulsemend.engine import chain, fit
from pulsemend.export import set_writer
from pulsemend.mending import mend, prepare
from pulsemend.progress import finish

shares = {}
def timed(holder, name, label):
    inner = getattr(holder, name)
    def outer(*args, **keywords):
        before = time.process_time()
        try:
            return inner(*args, **keywords)
        finally:
            shares[label] = shares.get(label, 0.0) + time.process_time() - before
    setattr(holder, name, outer)
def timed_work(holder, name, label):
    inner = getattr(holder, name)
    def outer(*args, **keywords):
        before = time.process_time()
        result = yield from inner(*args, **keywords)
        shares[label] = shares.get(label, 0.0) + time.process_time() - before
        return result
    setattr(holder, name, outer)

folder, plan, write = Path(sys.argv[1]), Path(sys.argv[2]), sys.argv[3] == "write"
timed_work(prepare, "fingerprint", "hash")
timed_work(prepare, "fit", "fit")
timed(chain.Chain, "repaired", "read and fill")
timed(chain.Chain, "samples", "samples")
timed(chain.BandedFilter, "run", "banded products (anti-alias, sub-sample shift)")
timed(chain.FftFilter, "run", "band filter")
timed(set_writer.SetWriter, "write", "write epochs")
timed(set_writer.SetWriter, "finish", "read back, tables, fsync")
recording = next(folder.glob("*.vhdr"))
request = prepare.Request(recording, plan)
before = time.process_time()
if write:
    out = folder / "sets"
    shutil.rmtree(out, ignore_errors=True)
    result = finish(mend.mend(request, out))
    n = len(result.prepared.kept)
else:
    prepared = finish(prepare.prepare(request))
    shares.pop("hash")
    before = time.process_time() - shares["fit"]
    cuts = mend.cut_all(prepared)
    for cut in cuts:
        prepared.chain.samples(cut)
    n = len(cuts)
seconds = time.process_time() - before
shares["reference, cut, rest of samples"] = shares.pop("samples") - sum(
    shares.get(k, 0.0)
    for k in ("read and fill", "banded products (anti-alias, sub-sample shift)", "band filter")
)
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
print(json.dumps({"seconds": seconds, "peak_mib": peak, "epochs": n, "shares": shares}))
"""

SCRIPT = """
import json, resource, sys, time
from pathlib import Path
import mne, numpy as np
import mne.io.brainvision, mne.preprocessing, scipy.signal, scipy.fft
folder = Path(sys.argv[1])
write = sys.argv[3] == "write"
before = time.process_time()
raw = mne.io.read_raw_brainvision(next(folder.glob("*.vhdr")), preload=True, verbose="error")
events, ids = mne.events_from_annotations(raw, verbose="error")
code = {name.split("/")[-1]: number for name, number in ids.items()}
raw = mne.preprocessing.fix_stim_artifact(
    raw, events, code["pulse"], tmin=-0.002, tmax=0.0142, mode="linear", picks="eeg")
raw, events = raw.resample(1000.0, method="polyphase", events=events, verbose="error")
raw.filter(1.0, 100.0, verbose="error")
cut = []
for anchor in ("lanterns up", "arrow left", "arrow right"):
    chosen = events[events[:, 2] == code[anchor]]
    cut += [chosen - [500, 0, 0], chosen + [500, 0, 0]]
cut = np.concatenate(cut)
cut = cut[np.argsort(cut[:, 0], kind="stable")]
cut[:, 2] = 1
epochs = mne.Epochs(
    raw, cut, tmin=0.0, tmax=0.999, baseline=None, preload=True, event_repeated="drop", verbose="error")
epochs.set_eeg_reference("average", verbose="error")
if write:
    epochs.save(folder / "script-epo.fif", overwrite=True, verbose="error")
else:
    epochs.get_data(copy=False)
seconds = time.process_time() - before
peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
print(json.dumps({"seconds": seconds, "peak_mib": peak, "epochs": len(epochs), "shares": {}}))
"""


def run(code: str, *words: str) -> dict[str, Any]:
    """Run one measured process and return what it printed."""
    done = subprocess.run([sys.executable, "-c", code, *words], capture_output=True, text=True, check=False)
    if done.returncode:
        sys.exit(done.stderr)
    found: dict[str, Any] = json.loads(done.stdout.splitlines()[-1]) if done.stdout else {}
    return found


def main() -> None:
    """Measure and print medians, ratios of pairs and shares."""
    parser = argparse.ArgumentParser()
    parser.add_argument("folder", type=Path)
    parser.add_argument("--pairs", type=int, default=5)
    parser.add_argument("--minutes", type=float, default=20.0)
    words = parser.parse_args()
    folder = words.folder / f"{words.minutes:g}min"
    if not list(folder.glob("*.vhdr")):
        run(PREPARE, str(folder), str(words.minutes))
    rules = "".join(RULE.format(name=n, anchor=a) for n, a in (("a", "sample"), ("b", "cue1"), ("c", "cue2")))
    plans = {}
    for fill in ("line", "covariance"):
        plans[fill] = folder / f"measure-{fill}.toml"
        plans[fill].write_text(PLAN.format(fill=fill) + rules)
    kinds = {
        "mend, covariance": (MEND, "covariance", "write"),
        "mend, line": (MEND, "line", "write"),
        "script": (SCRIPT, "line", "write"),
        "signal, line": (MEND, "line", "signal"),
        "signal, covariance": (MEND, "covariance", "signal"),
        "script's signal": (SCRIPT, "line", "signal"),
    }
    found: dict[str, list[dict[str, Any]]] = {kind: [] for kind in kinds}
    for _ in range(words.pairs):
        for kind, (code, fill, how) in kinds.items():
            found[kind].append(run(code, str(folder), str(plans[fill]), how))
    for kind, runs in found.items():
        seconds = [one["seconds"] for one in runs]
        print(
            f"{kind:20} {statistics.median(seconds):6.2f} s ({min(seconds):.2f} to {max(seconds):.2f}), "
            f"peak {max(one['peak_mib'] for one in runs):.0f} MiB, {runs[0]['epochs']} epochs"
        )
        middle = sorted(runs, key=lambda one: one["seconds"])[len(runs) // 2]
        for label, share in sorted(middle["shares"].items(), key=lambda item: -item[1]):
            print(f"    {label:50} {share:6.2f} s  {share / middle['seconds']:.0%}")
    for ours, theirs in (
        ("mend, covariance", "script"),
        ("mend, line", "script"),
        ("signal, line", "script's signal"),
        ("signal, covariance", "script's signal"),
    ):
        ratios = [b["seconds"] / a["seconds"] for a, b in zip(found[ours], found[theirs], strict=True)]
        spread = f"({min(ratios):.2f} to {max(ratios):.2f})"
        print(f"{theirs} / {ours}: median {statistics.median(ratios):.2f} {spread}")


if __name__ == "__main__":
    main()
