"""A time series at a glance: traction in evenly spaced frames, all drawn to one colour scale and one axis scale."""

from __future__ import annotations

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray

from tfm.report import plots
from tfm.report.fielddata import FieldArrays, read_arrays
from tfm.report.figures import dipole_scale, rows_of_frame, tensor
from tfm.report.marks import UM
from tfm.report.panels import Limits
from tfm.report.results import FieldResult, number
from tfm.report.style import GROUND, INK, TRACTION_MAP, new_figure
from tfm.report.words import plain

__all__ = ["series_figure"]

_MOST, _ACROSS, _EDGE = 8, 4, 2.9
#: m of ground shown around the cells.
_MARGIN = 6e-6


def _around(frames: list[FieldArrays]) -> Limits | None:
    """The ground that the cells cover in any of the frames, with a margin."""
    covered: NDArray[np.bool_] | None = None
    for a in frames:
        if a.labels is not None:
            covered = a.labels > 0 if covered is None else covered | (a.labels > 0)
    first = frames[0]
    if covered is None or not covered.any() or first.xt is None or first.yt is None:
        return None
    rows, columns = np.nonzero(covered)
    x, y = first.xt[columns], first.yt[rows]
    return (
        (float(x.min()) - _MARGIN, float(x.max()) + _MARGIN),
        (float(y.min()) - _MARGIN, float(y.max()) + _MARGIN),
    )


def series_figure(field: FieldResult, a: FieldArrays) -> Figure | None:
    """Up to eight frames of a series, the first and the last among them; None for a single frame."""
    if a.frames < 2 or a.path is None:
        return None
    chosen = np.unique(np.linspace(0, a.frames - 1, min(_MOST, a.frames)).round().astype(int))
    read = [read_arrays(a.path, frame=int(i)) for i in chosen]
    frames = [b for b in read if b.traction is not None and b.xt is not None and b.yt is not None]
    limits = _around(frames) if frames else None
    if limits is None:
        return None
    (left, right), (top, bottom) = limits
    tall = _EDGE * float(np.clip((bottom - top) / (right - left), 0.4, 1.6))
    rows = -(-len(frames) // _ACROSS)
    across = min(len(frames), _ACROSS)
    step, high = tall + 0.32, rows * (tall + 0.32) + 0.1
    figure = new_figure(across * (_EDGE + 0.1), high)
    sizes = [np.hypot(*b.traction) for b in frames if b.traction is not None]
    peak = max((float(np.percentile(s[s > 0], 99.7)) for s in sizes if (s > 0).any()), default=1e3) / 1e3
    scale = dipole_scale(field.cells, right - left)
    for i, b in enumerate(frames):
        if b.traction is None or b.xt is None or b.yt is None:
            continue
        x0, y0 = (i % _ACROSS) / across, 1 - (i // _ACROSS + 1) * step / high
        ax = figure.add_axes((x0 + 0.01 / across, y0, 0.98 / across, tall / high))
        plots.frame_axes(ax, *limits)
        ax.set_facecolor(GROUND)
        size = np.hypot(*b.traction) / 1e3
        extent = plots.extent_of(b.xt, b.yt)
        ax.imshow(np.ma.masked_equal(size, 0), cmap=TRACTION_MAP, vmin=0, vmax=peak, extent=extent)
        if b.labels is not None:
            plots.draw_outlines(ax, b.xt, b.yt, b.labels, names=False)
        here = rows_of_frame(field.cells, b.frame)
        for row in here:
            found = tensor(row)
            if found is not None and scale > 0:
                plots.draw_dipole(ax, *found, scale=scale)
        total = sum(number(r, "contractile_moment_pNm") or 0.0 for r in here)
        time = next((number(r, "time_s") for r in here), None)
        when = f"frame {b.frame}" + (f", {plain(time)} s" if time is not None else "")
        ax.set_title(f"{when}: {plain(total)} pN m" if here else f"{when}: no number", pad=3, fontsize=9)
        if i == 0:
            plots.draw_scale_bar(ax, colour=INK)
            ax.text(left * UM + 1, top * UM + 1, f"yellow = {plain(peak, 2)} kPa", va="top", fontsize=8.5, color=INK)
    return figure
