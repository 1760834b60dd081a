"""From columns of numbers to a picture of traces in their colours."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from PySide6.QtGui import QColor, QImage

from pulsemend.session.view import Shown, View
from pulsemend.window.theme import Theme
from pulsemend.window.traces.geometry import Rows, TimeScale
from pulsemend.window.traces.raster import FULL, INKS, Raster, Spans, joined
from pulsemend.window.traces.source import Columns, Detail, TraceSource

_BEHIND, _NORMAL, _PICKED, _BAD = range(INKS)
_MIDDLES = 64
"""Columns that a row's middle is judged by."""


@dataclass(frozen=True)
class Scene:
    """What is to be drawn.

    Parameters
    ----------
    view : View
    scale : TimeScale
    rows : Rows
    bad : frozenset of str
    theme : Theme
    """

    view: View
    scale: TimeScale
    rows: Rows
    bad: frozenset[str]
    theme: Theme


@dataclass(frozen=True)
class Drawn:
    """The traces, transparent where there are none, in pixels of the screen, and what they show."""

    image: QImage
    detail: Detail
    complete: bool


class TracePicture:
    """Draws the traces of one source, and remembers around which value each row is drawn.

    Parameters
    ----------
    source : TraceSource
    """

    def __init__(self, source: TraceSource) -> None:
        self._source = source
        self._raster = Raster(1, 1)
        self._places = {channel.name: place for place, channel in enumerate(source.facts.channels)}
        self._centres = np.full(len(self._places), np.nan)

    def centre_uv(self, name: str) -> float:
        """Microvolts in the middle of a channel's row."""
        place = self._places[name]
        return float(self._centres[place] * self._source.uv_per_unit[place])

    def draw(self, scene: Scene) -> Drawn:
        """Draw the traces in view."""
        height = max(1, round(scene.rows.area * scene.scale.ratio))
        if self._raster.pixels.shape != (height, scene.scale.grid.count):
            self._raster = Raster(scene.scale.grid.count, height)
        self._raster.clear()
        shown = [name for name in scene.view.rows if name in self._places]
        visible = [row for row in scene.rows.visible if row < len(shown)]
        places = np.array([self._places[shown[row]] for row in visible], dtype=np.intp)
        if not places.size:
            return Drawn(self._image(scene.theme), Detail.EXACT, complete=True)
        inks = np.array([_ink(shown[row], scene) for row in visible])
        both = scene.view.shown is Shown.BOTH
        kind = Shown.REPAIRED if both else scene.view.shown
        front = self._source.columns(kind, scene.scale.grid, places)
        self._centre(front, places, scene)
        if both:
            behind = self._source.columns(Shown.RECORDED, scene.scale.grid, places)
            self._ink(behind, places, visible, scene, np.full(len(visible), _BEHIND))
        self._ink(front, places, visible, scene, inks)
        return Drawn(self._image(scene.theme), front.detail, front.complete)

    def _centre(self, columns: Columns, places: NDArray[np.intp], scene: Scene) -> None:
        """Move rows whose trace has wandered off by more than half a row: small pans move none."""
        if not columns.lowest.shape[1]:
            return
        step = max(1, columns.lowest.shape[1] // _MIDDLES)
        middles = np.median(0.5 * (columns.lowest[:, ::step] + columns.highest[:, ::step]), axis=1)
        off = np.abs(middles - self._centres[places]) * self._source.uv_per_unit[places]
        wandered = ~(off <= 0.5 * scene.view.row_uv)
        self._centres[places[wandered]] = middles[wandered]

    def _ink(
        self,
        columns: Columns,
        places: NDArray[np.intp],
        visible: list[int],
        scene: Scene,
        inks: NDArray[np.int_],
    ) -> None:
        """Draw columns of channels in one pass per ink, the ones to be seen best last."""
        ratio = scene.scale.ratio
        per_unit = -self._source.uv_per_unit[places] / scene.view.row_uv * scene.rows.row_height * ratio
        middle = (np.array([scene.rows.middle(row) for row in visible]) - scene.rows.top) * ratio
        zero = (middle - self._centres[places] * per_unit).astype(np.float32)[:, None]
        factor = per_unit.astype(np.float32)[:, None]
        one_end, other_end = columns.lowest * factor + zero, columns.highest * factor + zero
        # A negative resolution turns a channel upside down.
        flipped = per_unit > 0
        top, bottom = other_end, one_end
        top[flipped], bottom[flipped] = one_end[flipped], other_end[flipped]
        if not columns.lines:
            top, bottom = joined(top, bottom)
        column = columns.first - scene.scale.grid.first
        for ink in np.unique(inks):
            of_ink = inks == ink
            ends: tuple[Spans, Spans] = (top, bottom) if of_ink.all() else (top[of_ink], bottom[of_ink])
            self._raster.draw(*ends, int(ink), column, line=max(1.0, ratio))

    def _image(self, theme: Theme) -> QImage:
        height, width = self._raster.pixels.shape
        image = QImage(self._raster.pixels.data, width, height, width, QImage.Format.Format_Indexed8)
        inks = (theme.trace_recorded, theme.trace, theme.trace_picked, theme.trace_bad)
        image.setColorTable(_palette(inks))
        # Painting eight-bit pictures directly takes several times as long.
        return image.convertToFormat(QImage.Format.Format_ARGB32_Premultiplied)


def _ink(name: str, scene: Scene) -> int:
    if name in scene.bad:
        return _BAD
    return _PICKED if name in scene.view.picked else _NORMAL


@lru_cache(maxsize=4)
def _palette(trace_colours: tuple[str, ...]) -> list[int]:
    """Colours of all pixel values: each ink at every coverage."""
    palette = []
    for name in trace_colours:
        colour = QColor(name)
        for coverage in range(FULL + 1):
            colour.setAlpha(round(255 * coverage / FULL))
            palette.append(colour.rgba())
    return palette
