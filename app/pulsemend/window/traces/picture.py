"""From columns of numbers to a picture of traces in their colours."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from PySide6.QtGui import QColor, QImage

from pulsemend.engine.columns import Grid
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


@dataclass(frozen=True)
class _Rows:
    """The rows of a scene in view, and what must stay the same for pixels to be used again."""

    visible: tuple[int, ...]
    places: tuple[int, ...]
    inks: tuple[int, ...]
    scene: Scene
    version: int

    def fits(self, other: _Rows) -> bool:
        """Whether the other's pixels are these, but for a move in time."""
        mine, theirs = self.scene, other.scene
        return (
            (self.places, self.inks, self.version) == (other.places, other.inks, other.version)
            and mine.rows == theirs.rows
            and replace(mine.scale, grid=theirs.scale.grid) == theirs.scale
            and replace(mine.scale.grid, first=theirs.scale.grid.first) == theirs.scale.grid
            and (mine.view.row_uv, mine.view.shown) == (theirs.view.row_uv, theirs.view.shown)
        )


class TracePicture:
    """Draws the traces of one source, and remembers around which value each row is drawn.

    A picture is a function of its columns alone, counted from the recording's start: when the view has moved
    by less than half its width, what was drawn is moved along and only the new columns are drawn.

    Parameters
    ----------
    source : TraceSource
    """

    def __init__(self, source: TraceSource) -> None:
        self._source = source
        self._raster = Raster(1, 1)
        self._last: _Rows | None = None
        self._middles = np.empty((0, 0), dtype=np.float32)
        self._places = {channel.name: place for place, channel in enumerate(source.facts.channels)}
        self._centres = np.full(len(self._places), np.nan)

    def centre_uv(self, name: str) -> float:
        """Microvolts in the middle of a channel's row."""
        place = self._places[name]
        return float(self._centres[place] * self._source.uv_per_unit[place])

    def draw(self, scene: Scene) -> Drawn:
        """Draw the traces in view."""
        grid = scene.scale.grid
        rows = self._rows(scene)
        last, self._last = self._last, None
        if last is not None and rows.fits(last):
            moved = grid.first - last.scene.scale.grid.first
            if 0 < abs(moved) < grid.count // 2 and self._move_on(rows, moved):
                self._last = rows
                return Drawn(self._image(scene.theme), Detail.EXACT, complete=True)
        height = max(1, round(scene.rows.area * scene.scale.ratio))
        if self._raster.pixels.shape != (height, grid.count):
            self._raster = Raster(grid.count, height)
        self._raster.clear()
        if not rows.places:
            return Drawn(self._image(scene.theme), Detail.EXACT, complete=True)
        passes = self._columns(rows, grid)
        front = passes[-1]
        self._middles = _middles(front, grid)
        centres = self._new_centres(self._middles, rows)
        wandered = ~np.isnan(centres)
        self._centres[np.array(rows.places)[wandered]] = centres[wandered]
        self._draw_passes(self._raster, passes, rows, grid)
        # Seen again after a move, what is not final would stay beside what is.
        if front.detail is Detail.EXACT and front.complete:
            self._last = rows
        return Drawn(self._image(scene.theme), front.detail, front.complete)

    def _rows(self, scene: Scene) -> _Rows:
        shown = [name for name in scene.view.rows if name in self._places]
        visible = tuple(row for row in scene.rows.visible if row < len(shown))
        names = [shown[row] for row in visible]
        return _Rows(
            visible,
            tuple(self._places[name] for name in names),
            tuple(_ink(name, scene) for name in names),
            scene,
            self._source.version,
        )

    def _columns(self, rows: _Rows, grid: Grid) -> list[Columns]:
        """Columns of a grid and one more on either side, to join with; the signal behind first."""
        wider = Grid(grid.first - 1, grid.count + 2, grid.per_column)
        places = np.array(rows.places, dtype=np.intp)
        shown = rows.scene.view.shown
        kinds = (Shown.RECORDED, Shown.REPAIRED) if shown is Shown.BOTH else (shown,)
        return [self._source.columns(kind, wider, places) for kind in kinds]

    def _move_on(self, rows: _Rows, moved: int) -> bool:
        """Move the pixels and draw the new columns; False if those are not final or leave their rows."""
        grid = rows.scene.scale.grid
        first = grid.first + grid.count - moved if moved > 0 else grid.first
        strip = Grid(first, abs(moved), grid.per_column)
        passes = self._columns(rows, strip)
        if any(columns.detail is not Detail.EXACT for columns in passes):
            return False
        fresh, kept = _middles(passes[-1], strip), self._middles
        middles = np.hstack([kept[:, moved:], fresh] if moved > 0 else [fresh, kept[:, :moved]])
        if not np.isnan(self._new_centres(middles, rows)).all():
            return False
        self._middles = middles
        raster = Raster(abs(moved), len(self._raster.pixels))
        self._draw_passes(raster, passes, rows, strip)
        pixels = self._raster.pixels
        if moved > 0:
            pixels[:, :-moved] = pixels[:, moved:]
            pixels[:, -moved:] = raster.pixels
        else:
            pixels[:, -moved:] = pixels[:, :moved]
            pixels[:, :-moved] = raster.pixels
        return True

    def _new_centres(self, middles: NDArray[np.float32], rows: _Rows) -> NDArray[np.float32]:
        """Values that rows which have wandered off are to be drawn around; NaN for all others.

        Parameters
        ----------
        middles : array, shape (n_rows, n_columns)
            Of the columns in view; NaN outside the recording.
        rows : _Rows
            The rows.
        """
        seen = middles[:, ~np.isnan(middles[0])]
        places = np.array(rows.places, dtype=np.intp)
        if not seen.shape[1]:
            return np.full(places.size, np.nan, dtype=np.float32)
        medians = np.median(seen[:, :: max(1, seen.shape[1] // _MIDDLES)], axis=1)
        off = np.abs((medians - self._centres[places]) * self._source.uv_per_unit[places])
        # Written so that a row without a middle yet counts as well.
        return np.where(off <= 0.5 * rows.scene.view.row_uv, np.nan, medians)

    def _draw_passes(self, raster: Raster, passes: list[Columns], rows: _Rows, grid: Grid) -> None:
        for columns in passes[:-1]:
            self._ink(raster, columns, rows, grid, np.full(len(rows.inks), _BEHIND))
        self._ink(raster, passes[-1], rows, grid, np.array(rows.inks))

    def _ink(self, raster: Raster, columns: Columns, rows: _Rows, grid: Grid, inks: NDArray[np.int_]) -> None:
        """Draw columns of channels in one pass per ink, the ones to be seen best last."""
        scene, places = rows.scene, np.array(rows.places, dtype=np.intp)
        ratio = scene.scale.ratio
        per_unit = -self._source.uv_per_unit[places] / scene.view.row_uv * scene.rows.row_height * ratio
        middle = (np.array([scene.rows.middle(row) for row in rows.visible]) - scene.rows.top) * ratio
        zero = (middle - self._centres[places] * per_unit).astype(np.float32)[:, None]
        factor = per_unit.astype(np.float32)[:, None]
        bottom, top = columns.lowest * factor + zero, columns.highest * factor + zero
        # A negative resolution turns a channel upside down.
        flipped = per_unit > 0
        if flipped.any():
            top[flipped], bottom[flipped] = bottom[flipped], top[flipped]
        if not columns.lines:
            top, bottom = joined(top, bottom)
        first = max(columns.first, grid.first)
        wanted = slice(first - columns.first, grid.first + grid.count - columns.first)
        top, bottom = top[:, wanted], bottom[:, wanted]
        for ink in np.unique(inks):
            of_ink = inks == ink
            ends: tuple[Spans, Spans] = (top, bottom) if of_ink.all() else (top[of_ink], bottom[of_ink])
            raster.draw(*ends, int(ink), first - grid.first, line=max(1.0, ratio))

    def _image(self, theme: Theme) -> QImage:
        height, width = self._raster.pixels.shape
        image = QImage(self._raster.pixels.data, width, height, width, QImage.Format.Format_Indexed8)
        inks = (theme.trace_recorded, theme.trace, theme.trace_picked, theme.trace_bad)
        image.setColorTable(_palette(inks))
        # Painting eight-bit pictures directly takes several times as long.
        return image.convertToFormat(QImage.Format.Format_ARGB32_Premultiplied)


def _middles(columns: Columns, grid: Grid) -> NDArray[np.float32]:
    """Middles of the spans in the columns of a grid, shape (n_rows, n_columns); NaN outside the recording."""
    middles = np.full((columns.lowest.shape[0], grid.count), np.nan, dtype=np.float32)
    first = max(columns.first, grid.first)
    last = min(columns.first + columns.lowest.shape[1], grid.first + grid.count)
    if last > first:
        there = slice(first - columns.first, last - columns.first)
        both = columns.lowest[:, there] + columns.highest[:, there]
        middles[:, first - grid.first : last - grid.first] = both * np.float32(0.5)
    return middles


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
