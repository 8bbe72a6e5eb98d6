"""A row of equal maps: where they lie, their titles, and one strip below them for all colour bars.

Positions are laid out by hand, which is several times faster than an automatic layout and the same on every machine.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator

from tfm.report.fielddata import FieldArrays
from tfm.report.marks import draw_axes_sign, draw_scale_bar, frame_axes
from tfm.report.style import QUIET, new_figure

__all__ = ["Limits", "Panels", "map_limits"]

#: ((left, right), (top, bottom)) in m.
Limits = tuple[tuple[float, float], tuple[float, float]]

_WIDTH = 3.9
_GRADIENT = np.linspace(0.0, 1.0, 128)[None, :]


def map_limits(a: FieldArrays) -> Limits | None:
    """What every map of the field shows: the whole image, else the ground of the lattice or of the vectors."""
    for x, y in ((a.xi, a.yi), (a.xt, a.yt), (a.x, a.y)):
        if x is not None and y is not None:
            hx, hy = 0.5 * float(x[1] - x[0]), 0.5 * float(y[1] - y[0])
            return (float(x[0]) - hx, float(x[-1]) + hx), (float(y[0]) - hy, float(y[-1]) + hy)
    return None


@dataclass(frozen=True)
class Panels:
    """A figure with its maps from left to right, and the strip for colour bars."""

    figure: Figure
    axes: list[Axes]
    strip: Axes | None

    @classmethod
    def row(cls, limits: Sequence[Limits], titles: Sequence[str], *, bars: bool = True) -> Panels:
        """One map for each of ``limits``; the row is as high as the first map needs."""
        count = len(limits)
        (left, right), (top, bottom) = limits[0]
        tall = float(np.clip((bottom - top) / (right - left), 0.35, 2.0)) * 0.95 * _WIDTH
        below, above = (0.62 if bars else 0.1), 0.3
        high = tall + below + above
        figure = new_figure(_WIDTH * count, high)
        axes = [figure.add_axes(((i + 0.025) / count, below / high, 0.95 / count, tall / high)) for i in range(count)]
        for ax, limit, title in zip(axes, limits, titles, strict=True):
            frame_axes(ax, *limit)
            ax.set_title(title, pad=4)
        strip = None
        if bars:
            strip = figure.add_axes((0.0, 0.0, 1.0, below / high))
            strip.set_axis_off()
            strip.set_xlim(0.0, float(count))
            strip.set_ylim(0.0, below)
        return cls(figure, axes, strip)

    def bar(self, place: int, shown: ScalarMappable, label: str) -> None:
        """The colour scale of one map, with round ticks and its unit."""
        strip = self.strip
        if strip is None:
            return
        low, high = shown.get_clim()
        if low is None or high is None or not high > low:
            return
        left, right = place + 0.15, place + 0.85
        # The norm is linear on either side of zero and symmetric, so equal steps of colour are equal steps of value.
        strip.imshow(_GRADIENT, cmap=shown.get_cmap(), extent=(left, right, 0.44, 0.53), aspect="auto", zorder=2)
        strip.set_xlim(0.0, float(len(self.axes)))
        strip.set_ylim(0.0, 0.62)
        for tick in MaxNLocator(6).tick_values(low, high):
            if low - 1e-9 * (high - low) <= tick <= high + 1e-9 * (high - low):
                x = left + (right - left) * (tick - low) / (high - low)
                strip.plot([x, x], [0.41, 0.44], color=QUIET, lw=0.7)
                strip.text(x, 0.39, f"{tick:.4g}".replace("-", "−"), ha="center", va="top", fontsize=8, color=QUIET)
        strip.text(0.5 * (left + right), 0.09, label, ha="center", va="bottom", fontsize=9)

    def finish(self, colours: Sequence[str]) -> Figure:
        """Scale bar and the frame's sign on every map, in the colour that reads on it."""
        for ax, colour in zip(self.axes, colours, strict=True):
            draw_scale_bar(ax, colour=colour)
            draw_axes_sign(ax, colour=colour)
        return self.figure
