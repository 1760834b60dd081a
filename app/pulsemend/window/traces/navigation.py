"""Moves of the view: pure functions shared by traces and ribbon. No Qt."""

from __future__ import annotations

from dataclasses import dataclass, replace

from pulsemend.session.view import View
from pulsemend.window.traces.clock import nice

SMALL_STEP = 0.1
"""Share of the width that an arrow key or a notch of the wheel moves."""
NOTCH = 1.25
"""Factor of one notch of zooming."""
FACTOR = 2.0
"""How much wider or narrower a key or a menu makes the view."""
LEAST_WIDTH_S = 0.02
_ROW_UV = (0.1, 100_000.0)


@dataclass(frozen=True)
class Extent:
    """What a view must stay within.

    Parameters
    ----------
    duration_s : float
        Length of the recording.
    least_s : float
        Smallest width.
    """

    duration_s: float
    least_s: float = LEAST_WIDTH_S

    def clamped(self, view: View) -> View:
        """Make a view lie within the recording, as wide as it is if possible."""
        width_s = min(max(view.width_s, min(self.least_s, self.duration_s)), self.duration_s)
        start_s = min(max(view.start_s, 0.0), self.duration_s - width_s)
        return replace(view, start_s=start_s, width_s=width_s)

    def moved(self, view: View, by_s: float) -> View:
        """Move in time."""
        return self.clamped(replace(view, start_s=view.start_s + by_s))

    def stepped(self, view: View, widths: float) -> View:
        """Move by a share of the width."""
        return self.moved(view, widths * view.width_s)

    def centred(self, view: View, time_s: float) -> View:
        """Move a time into the middle."""
        return self.clamped(replace(view, start_s=time_s - 0.5 * view.width_s))

    def at_start(self, view: View) -> View:
        """Move to the beginning of the recording."""
        return self.clamped(replace(view, start_s=0.0))

    def at_end(self, view: View) -> View:
        """Move to the end of the recording."""
        return self.clamped(replace(view, start_s=self.duration_s))

    def zoomed(self, view: View, factor: float, at_s: float) -> View:
        """Show ``factor`` times less, with one time staying where it is."""
        width_s = self.clamped(replace(view, width_s=view.width_s / factor)).width_s
        share = (at_s - view.start_s) / view.width_s
        return self.clamped(replace(view, width_s=width_s, start_s=at_s - share * width_s))

    def shown(self, view: View, start_s: float, stop_s: float) -> View:
        """Show a stretch of time, no wider than it is."""
        return self.clamped(replace(view, start_s=start_s, width_s=stop_s - start_s))


def louder(view: View, steps: int) -> View:
    """Make traces taller (steps above 0) or flatter: microvolts per row in steps of 1, 2, 5."""
    row_uv = view.row_uv
    for _ in range(abs(steps)):
        row_uv = nice(row_uv * 0.999) if steps > 0 else _next_above(row_uv)
    return replace(view, row_uv=min(max(row_uv, _ROW_UV[0]), _ROW_UV[1]))


def _next_above(value: float) -> float:
    for factor in (2.0, 2.5):
        above = nice(nice(value * 1.001) * factor * 1.001)
        if above > value * 1.001:
            return above
    return value * 2.0
