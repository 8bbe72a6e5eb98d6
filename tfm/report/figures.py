"""The first figure of a field: what moved, what pulled, and where the contractile moment is made."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from numpy.typing import NDArray

from tfm.report import plots
from tfm.report.fielddata import FieldArrays
from tfm.report.panels import Panels, map_limits
from tfm.report.results import FieldResult, Row, number
from tfm.report.style import GROUND, INK

__all__ = ["dipole_scale", "maps_figure", "noise_of", "rows_of_frame", "tensor"]

Array = NDArray[np.float64]
PN_M = 1e-12


def rows_of_frame(rows: Sequence[Row], frame: int) -> list[Row]:
    """The rows of one frame that hold numbers; rows without a frame count as frame 0."""
    return [r for r in rows if int(number(r, "frame") or 0) == frame and r.get("status") != "failed"]


def noise_of(field: FieldResult, frame: int) -> float | None:
    """Displacement noise of a frame in m."""
    value = number(next(iter(rows_of_frame(field.frames, frame)), None), "displacement_noise_um")
    return value * 1e-6 if value else None


def tensor(row: Row) -> tuple[Array, Array, Array | None] | None:
    """Centroid (m), dipole (N m) and covariance ((N m)^2) of a row of cells.csv."""
    keys = [f"dipole_{k}_pNm" for k in ("xx", "xy", "yy")]
    values, place = [number(row, k) for k in keys], [number(row, k) for k in ("x_um", "y_um")]
    if None in values or None in place:
        return None
    sd = [number(row, k.replace("_pNm", "_sd_pNm")) for k in keys]
    mixed = [number(row, f"cov_{k}_pNm2") for k in ("xx_xy", "xx_yy", "xy_yy")]
    covariance = None
    if None not in sd and None not in mixed:
        covariance = np.diag(np.square(np.array(sd, float)))
        for (i, j), value in zip(((0, 1), (0, 2), (1, 2)), mixed, strict=True):
            covariance[i, j] = covariance[j, i] = value
        covariance = covariance * PN_M**2
    return np.array(place, float) * 1e-6, np.array(values, float) * PN_M, covariance


def dipole_scale(rows: Sequence[Row], width: float) -> float:
    """m of half axis per N m such that the largest principal value spans at most a fifth of ``width`` (m)."""
    largest = max((abs(number(r, "major_pNm") or 0.0) for r in rows), default=0.0)
    if largest == 0.0:
        return 0.0
    return plots.round_length(width * 1e6 / 5 / largest) * 1e-6 / PN_M


def _draw_cells(ax: Axes, rows: Sequence[Row], width: float) -> None:
    """Principal axes of the frame's cells, and the bar that states their scale."""
    scale = dipole_scale(rows, width)
    if scale == 0.0:
        return
    for row in rows:
        found = tensor(row)
        if found is not None:
            plots.draw_dipole(ax, found[0], found[1], found[2], scale=scale)
    value = plots.round_length(0.8 * max(abs(number(r, "major_pNm") or 0.0) for r in rows))
    plots.draw_key_bar(ax, value * PN_M, scale, f"half axis {value:g} pN m", INK)


def _draw_moved(panels: Panels, field: FieldResult, a: FieldArrays) -> None:
    ax = panels.axes[0]
    ax.set_facecolor("#000000")
    if a.relaxed is not None and a.xi is not None and a.yi is not None:
        plots.draw_beads(ax, a.xi, a.yi, a.relaxed)
    if a.u is not None and a.x is not None and a.y is not None:
        shown = plots.draw_displacement(ax, a.x, a.y, a.u, noise=noise_of(field, a.frame))
        panels.bar(0, shown, "displacement, µm")
    if a.labels is not None and a.xt is not None and a.yt is not None:
        plots.draw_outlines(ax, a.xt, a.yt, a.labels, names=False)


def maps_figure(field: FieldResult, a: FieldArrays) -> Figure | None:
    """Displacement over the beads; traction with outlines; where the moment is made, with the principal axes."""
    limits = map_limits(a)
    if limits is None or (a.u is None and a.traction is None):
        return None
    change = "Change of the " if field.change_only else ""
    titles = [f"{change}displacement of the gel", f"{change}traction of the cell on the gel"]
    titles = [t[0].upper() + t[1:] for t in titles] + ["Where the contractile moment is made"]
    panels = Panels.row([limits] * 3, titles)
    _draw_moved(panels, field, a)
    for ax in panels.axes[1:]:
        ax.set_facecolor(GROUND)
    if a.traction is not None and a.xt is not None and a.yt is not None:
        shown = plots.draw_traction(panels.axes[1], a.xt, a.yt, a.traction, a.labels)
        panels.bar(1, shown, "traction, kPa")
        if a.labels is not None and (a.labels > 0).any():
            made = plots.draw_contraction(panels.axes[2], a.xt, a.yt, a.traction, a.labels)
            panels.bar(2, made, "nN/µm, positive towards the centroid")
    _draw_cells(panels.axes[2], rows_of_frame(field.cells, a.frame), limits[0][1] - limits[0][0])
    return panels.finish(["#ffffff", INK, INK])
