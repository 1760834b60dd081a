"""How fast the traces are drawn: 64 channels at 5 kHz for one hour, at 1920x1080, against the plot library.

    python tests/benchmarks/drawing.py FOLDER [--skip-library] [--minutes 60]

Writes a recording of 2.3 GB into FOLDER unless it is there, and the overview's store beside it. Runs without
a screen; figures are milliseconds per frame from a changed view to painted pixels, p50 / p95, and the median
processor time of the window's thread, which says more where other programs are running. The plot
library is given every channel's whole signal as 64 curves, with its own downsampling to peaks and clipping to
the view.
"""

from __future__ import annotations

import argparse
import os
import shutil
import time
from collections.abc import Callable, Iterator
from dataclasses import replace
from pathlib import Path

os.environ.setdefault("QT_QPA_PLATFORM", "offscreen")

import numpy as np
from numpy.typing import NDArray
from PySide6.QtTest import QTest
from PySide6.QtWidgets import QApplication, QWidget

from pulsemend.engine.pyramid import pyramid
from pulsemend.engine.store import Store
from pulsemend.model.recording import Marker
from pulsemend.model.vocabulary import Role
from pulsemend.progress import finish
from pulsemend.readers.triplet import TripletRecording
from pulsemend.session.view import Shown, View
from pulsemend.simulate.write_triplet import TripletFormat, TripletPaths, TripletWriter
from pulsemend.window.theme import LIGHT
from pulsemend.window.traces.model import Bands, Events, Overlays
from pulsemend.window.traces.navigation import Extent
from pulsemend.window.traces.source import RepairedStretch, TraceSource
from pulsemend.window.traces.widget import TracesWidget

RATE_HZ = 5000.0
N_CHANNELS = 64
WIDTHS_S = (0.05, 1.0, 10.0, 60.0, 600.0, 3600.0)
FRAMES = 60
LIBRARY_FRAMES = 8
SIZE = (1920, 1080)


class Model:
    """The least that holds a view."""

    def __init__(self, view: View) -> None:
        self.view = view
        self._listeners: list[Callable[[], None]] = []

    def set_view(self, view: View) -> None:
        if view != self.view:
            self.view = view
            for listener in self._listeners:
                listener()

    def subscribe(self, listener: Callable[[], None]) -> Callable[[], None]:
        self._listeners.append(listener)
        return lambda *_: self._listeners.remove(listener)


def minute(seed: int = 1) -> NDArray[np.int16]:
    """One minute of coloured noise with alpha and a pulse every 4 s, 0.1 uV per unit."""
    rng = np.random.default_rng(seed)
    n_samples = int(60 * RATE_HZ)
    spectrum = np.fft.rfft(rng.standard_normal((n_samples, N_CHANNELS), dtype=np.float32), axis=0)
    frequency = np.fft.rfftfreq(n_samples, 1 / RATE_HZ)
    spectrum *= (np.maximum(frequency, 0.5) ** -0.7)[:, None]
    signal = np.fft.irfft(spectrum, n=n_samples, axis=0)
    signal *= 15 / signal.std(axis=0)
    alpha = np.sin(2 * np.pi * 10 * np.arange(n_samples) / RATE_HZ)
    signal += 8 * alpha[:, None] * rng.random(N_CHANNELS)
    for pulse in range(int(2 * RATE_HZ), n_samples, int(4 * RATE_HZ)):
        signal[pulse : pulse + 10] += 4000 * rng.standard_normal(N_CHANNELS)
    return np.clip(np.rint(signal * 10), -32_000, 32_000).astype(np.int16)


def recording_in(folder: Path, minutes: int) -> TripletRecording:
    """Open the benchmark's recording; write it first where it is not there."""
    header = folder / f"benchmark{minutes}.vhdr"
    if not header.exists():
        folder.mkdir(parents=True, exist_ok=True)
        names = tuple(f"E{number + 1}" for number in range(N_CHANNELS))
        codes = ("fixation", "cue", "pulse", "probe", "response")
        markers = tuple(
            Marker(float(round((0.4 + 0.8 * place) * RATE_HZ)), codes[place % 5], "Stimulus")
            for place in range(int(minutes * 60 / 0.8))
        )
        with TripletWriter(TripletPaths.beside(header), TripletFormat(names, RATE_HZ), markers) as writer:
            block = minute()
            for shift in range(minutes):
                writer.write(block + np.int16(3 * shift))
    return TripletRecording(header)


def overlays(recording: TripletRecording) -> Overlays:
    """Every marker with its shape, a gap around every pulse."""
    facts = recording.facts
    times_s = np.array([marker.sample / facts.rate_hz for marker in facts.markers])
    roles = tuple(Role(marker.code) for marker in facts.markers)
    labels = tuple(marker.code for marker in facts.markers)
    pulses_s = np.arange(2.0, facts.duration_s, 4.0)
    return Overlays(
        Events(times_s, roles, labels, tuple(range(len(roles)))), Bands(pulses_s - 0.002, pulses_s + 0.014)
    )


def pans(view: View, extent: Extent, frames: int) -> Iterator[View]:
    """Views that move on by a hundredth of their width; where all is in view they grow taller and flatter."""
    view = extent.centred(view, 0.4 * extent.duration_s)
    for frame in range(frames):
        view = extent.stepped(view, 0.0101)
        if view.width_s >= extent.duration_s:
            view = replace(view, row_uv=60.0 + frame)
        yield view


def jumps(view: View, extent: Extent, frames: int) -> Iterator[View]:
    """Views all over the recording."""
    for at in np.random.default_rng(2).random(frames):
        yield replace(extent.centred(view, float(at) * extent.duration_s), row_uv=60.0 + float(at))


def zooms(view: View, extent: Extent, frames: int) -> Iterator[View]:
    """Views from 20 ms to everything and back."""
    for share in np.abs(np.linspace(-1, 1, frames)):
        width_s = 0.02 * (extent.duration_s / 0.02) ** float(share)
        yield extent.centred(replace(view, width_s=width_s), 0.37 * extent.duration_s)


def timed(widget: QWidget, show: Callable[[View], None], views: Iterator[View]) -> tuple[str, float]:
    """Percentiles of the time from a new view to painted pixels."""
    took, worked = [], []
    for view in views:
        begin, begin_work = time.perf_counter(), time.thread_time()
        show(view)
        widget.repaint()
        QApplication.processEvents()
        took.append((time.perf_counter() - begin) * 1e3)
        worked.append((time.thread_time() - begin_work) * 1e3)
    p50, p95 = np.percentile(took, [50, 95])
    return f"{p50:6.1f} / {p95:6.1f} ms (processor {np.median(worked):5.1f})", float(p50)


def shown(widget: QWidget) -> QWidget:
    """Show a widget."""
    widget.show()
    return widget


def resident_mb() -> float:
    """Resident memory of this process that is not pages of files."""
    for line in Path("/proc/self/status").read_text().splitlines():
        if line.startswith("RssAnon"):
            return int(line.split()[1]) / 1024
    return float("nan")


def measure_ours(recording: TripletRecording, store: Path) -> dict[float, float]:
    """Print the figures of our renderer; return p50 of panning at every width."""
    facts = recording.facts
    shutil.rmtree(store, ignore_errors=True)
    model = Model(View(width_s=10.0, rows=tuple(channel.name for channel in facts.channels)))
    asked: list[tuple[int, int]] = []
    source = TraceSource(recording, lambda start, stop: asked.append((start, stop)))
    widget = TracesWidget(model, source, LIGHT)
    widget.set_overlays(overlays(recording))
    widget.resize(*SIZE)
    QTest.qWaitForWindowExposed(shown(widget))
    extent = Extent(facts.duration_s)
    for width_s in (60.0, facts.duration_s):
        text, _ = timed(widget.plot, model.set_view, pans(replace(model.view, width_s=width_s), extent, 10))
        print(f"no overview yet, {width_s:6g} s: {text}")
    begin, cpu = time.perf_counter(), time.process_time()
    built = finish(pyramid(TripletRecording(Path(recording.fingerprint_paths()[0])), Store(store)))
    print(
        f"overview: {time.perf_counter() - begin:.2f} s, of that processor {time.process_time() - cpu:.2f} s"
    )
    widget.set_pyramid(built)
    before_mb = resident_mb()
    p50s = {}
    for width_s in WIDTHS_S:
        view = replace(model.view, width_s=min(width_s, facts.duration_s))
        timed(widget.plot, model.set_view, pans(view, extent, 5))
        pan, p50s[width_s] = timed(widget.plot, model.set_view, pans(view, extent, FRAMES))
        jump, _ = timed(widget.plot, model.set_view, jumps(view, extent, FRAMES))
        print(f"ours   {width_s:7g} s: pan {pan}, jump {jump}")
    text, _ = timed(widget.plot, model.set_view, zooms(model.view, extent, 2 * FRAMES))
    print(f"ours      zoom : {text}")
    measure_repaired(widget, model, Path(recording.fingerprint_paths()[0]), asked)
    print(f"memory after browsing: {resident_mb() - before_mb:+.0f} MB")
    widget.hide()
    return p50s


def measure_repaired(widget: TracesWidget, model: Model, path: Path, asked: list[tuple[int, int]]) -> None:
    """Print the figures of both signals over each other, once the stretch is computed."""
    extent = Extent(TripletRecording(path).facts.duration_s)
    for width_s in (0.05, 1.0, 4.0):
        view = replace(model.view, width_s=width_s, shown=Shown.BOTH)
        view = extent.centred(view, 0.4 * extent.duration_s)
        model.set_view(view)
        QApplication.processEvents()
        start, stop = asked[-1]
        samples = np.empty((stop - start, N_CHANNELS), dtype=np.float32)
        TripletRecording(path).read(start, stop, samples)
        widget.set_repaired(RepairedStretch(start, samples, np.arange(N_CHANNELS), 0))
        text, _ = timed(widget.plot, model.set_view, pans(view, extent, 40))
        print(f"both   {width_s:7g} s: {text}")


def measure_library(recording: TripletRecording) -> dict[float, float]:
    """Print the figures of the plot library given the whole signal; return p50 at every width."""
    import pyqtgraph

    facts = recording.facts
    samples = np.memmap(recording.fingerprint_paths()[1], dtype="<i2", mode="r").reshape(-1, N_CHANNELS)
    plot = pyqtgraph.PlotWidget()
    item = plot.getPlotItem()
    item.disableAutoRange()
    times_s = np.arange(facts.n_samples) / facts.rate_hz
    for place in range(N_CHANNELS):
        curve = pyqtgraph.PlotDataItem(
            times_s,
            samples[:, place] * np.float32(0.1) - np.float32(60.0 * place),
            pen="k",
            skipFiniteCheck=True,
        )
        item.addItem(curve, ignoreBounds=True)
        # Set before the curve has a view, they raise an error inside the library.
        curve.setDownsampling(auto=True, method="peak")
        curve.setClipToView(True)
    item.setYRange(-60.0 * N_CHANNELS, 60.0, padding=0)
    plot.resize(*SIZE)
    QTest.qWaitForWindowExposed(shown(plot))

    def show(view: View) -> None:
        item.setXRange(view.start_s, view.start_s + view.width_s, padding=0)

    p50s = {}
    extent = Extent(facts.duration_s)
    for width_s in WIDTHS_S:
        view = View(width_s=min(width_s, facts.duration_s))
        timed(plot.viewport(), show, pans(view, extent, 2))
        text, p50s[width_s] = timed(plot.viewport(), show, pans(view, extent, LIBRARY_FRAMES))
        print(f"library{width_s:7g} s: pan {text}")
    plot.hide()
    return p50s


def main() -> None:
    """Measure, and print how many times faster ours is."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("folder", type=Path, help="where the recording is written")
    parser.add_argument("--minutes", type=int, default=60, help="length of the recording")
    parser.add_argument("--skip-library", action="store_true", help="measure our renderer alone")
    arguments = parser.parse_args()
    app = QApplication([])
    recording = recording_in(arguments.folder, arguments.minutes)
    ours = measure_ours(recording, arguments.folder / "store")
    if not arguments.skip_library:
        library = measure_library(recording)
        for width_s, p50 in ours.items():
            print(f"{width_s:7g} s: {library[width_s] / p50:.1f} times faster than the plot library")
    app.quit()


if __name__ == "__main__":
    main()
