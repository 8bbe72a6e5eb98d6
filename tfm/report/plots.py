"""Pictures of one field for reports and notebooks: each function draws on an ``ax`` and returns what it drew.

All lengths go in as metres and appear as um; the frame is the image's: x to the right, y **down**, angles from +x
towards +y. A notebook needs no more than

>>> import numpy as np
>>> from matplotlib.figure import Figure
>>> from tfm.report.plots import draw_dipole, frame_axes
>>> ax = Figure().add_subplot()
>>> frame_axes(ax, (0.0, 60e-6), (0.0, 60e-6))
>>> drawn = draw_dipole(ax, [30e-6, 30e-6], [-1.2e-12, 0.0, -0.3e-12], scale=10e-6 / 1e-12)
>>> len(drawn) > 0
True
"""

from __future__ import annotations

from functools import cache

import numpy as np
from matplotlib import colormaps
from matplotlib.axes import Axes
from matplotlib.colors import Colormap, ListedColormap, TwoSlopeNorm
from matplotlib.image import AxesImage
from matplotlib.quiver import Quiver
from numpy.typing import ArrayLike, NDArray

from tfm.report.glyphs import draw_dipole
from tfm.report.marks import (
    UM,
    draw_axes_sign,
    draw_key_bar,
    draw_outlines,
    draw_scale_bar,
    extent_of,
    frame_axes,
    halo,
    round_length,
)
from tfm.report.style import INK, SIGN_MAP, SIZE_MAP, TRACTION_MAP

__all__ = [
    "draw_axes_sign",
    "draw_beads",
    "draw_contraction",
    "draw_dipole",
    "draw_displacement",
    "draw_key_bar",
    "draw_outlines",
    "draw_overlay",
    "draw_scale_bar",
    "draw_traction",
    "extent_of",
    "frame_axes",
    "halo",
    "round_length",
]

Array = NDArray[np.float64]


def draw_beads(
    ax: Axes, x: ArrayLike, y: ArrayLike, image: ArrayLike, *, levels: int = 24, gain: float = 0.5
) -> AxesImage:
    """Beads in dim grey as a background, stretched between the 2nd and 99.7th percentile.

    ``levels`` grey values are enough under arrows and keep the vector file small; ``gain`` < 1 leaves room for arrows.
    """
    grey = np.asarray(image, dtype=float)
    low, high = np.percentile(grey[::4, ::4], (2, 99.7))
    shade = np.clip((grey - low) / max(high - low, 1e-12), 0, 1)
    shade = np.round(shade * (levels - 1)) / (levels - 1) * gain
    extent = extent_of(np.asarray(x, float), np.asarray(y, float))
    return ax.imshow(shade, cmap="gray", vmin=0, vmax=1, extent=extent, zorder=0)


def draw_overlay(ax: Axes, x: ArrayLike, y: ArrayLike, relaxed: ArrayLike, stressed: ArrayLike) -> AxesImage:
    """Relaxed beads in orange, stressed in blue: where both agree the sum is white.

    ``x`` ``(nx,)`` and ``y`` ``(ny,)`` m are the centres of the pixels of both ``(ny, nx)`` images.
    """
    sums = np.zeros((*np.shape(relaxed), 3))
    for image, colour in ((relaxed, (1.0, 0.58, 0.08)), (stressed, (0.0, 0.42, 0.92))):
        grey = np.asarray(image, dtype=float)
        low, high = np.percentile(grey, (5, 99.6))
        sums += np.clip((grey - low) / max(high - low, 1e-12), 0, 1)[..., None] * np.array(colour)
    extent = extent_of(np.asarray(x, float), np.asarray(y, float))
    return ax.imshow(np.round(sums.clip(0, 1) * 15) / 15, extent=extent)


def _arrow_scale(x: Array, size: Array, *, across: int) -> tuple[int, float]:
    """Every how many-th vector to draw, and the m of drawing per unit: the largest spans three and a half gaps."""
    step = max(int(np.ceil(len(x) / across)), 1)
    gap = step * float(x[1] - x[0])
    finite = size[np.isfinite(size)]
    peak = float(np.percentile(finite, 99.8)) if finite.size else 0.0
    return step, (3.5 * gap / peak if peak > 0 else 1.0)


@cache
def _on_black() -> Colormap:
    """The upper part of the map of sizes: its dark end would vanish on dark ground."""
    return ListedColormap(colormaps[SIZE_MAP](np.linspace(0.3, 1.0, 256)), name="size on black")


def draw_displacement(
    ax: Axes,
    x: ArrayLike,
    y: ArrayLike,
    u: ArrayLike,
    *,
    arrows: int = 24,
    noise: float | None = None,
    key: bool = True,
) -> Quiver:
    """Displacement as arrows coloured by their length; the arrow key states the scale.

    Parameters
    ----------
    ax
        Axes that :func:`frame_axes` has set up (or any with y down).
    x, y, u
        ``(nx,)`` m, ``(ny,)`` m and ``(2, ny, nx)`` m; NaN vectors are left out.
    arrows
        At most so many arrows across: every n-th measured vector is drawn, none is averaged.
    noise
        m; vectors below twice this are drawn as dots, because their direction is noise.
    key
        Draw the arrow key.

    Returns
    -------
    Quiver
        For a colour bar (in um).
    """
    xs, ys, field = np.asarray(x, float), np.asarray(y, float), np.asarray(u, float)
    size = np.hypot(*field)
    step, scale = _arrow_scale(xs, size, across=arrows)
    part = (slice(step // 2, None, step), slice(step // 2, None, step))
    gx, gy = np.meshgrid(xs[part[1]], ys[part[0]])
    kept = np.isfinite(size[part])
    still = kept & (size[part] < (0.0 if noise is None else 2 * noise))
    if still.any():
        ax.plot(gx[still] * UM, gy[still] * UM, ls="", marker=".", ms=1.6, color="#9fb0c4", zorder=2.5)
    kept &= ~still
    vmax = float(np.nanpercentile(size, 99.8)) * UM if np.isfinite(size).any() else 1.0
    drawn = ax.quiver(
        gx[kept] * UM,
        gy[kept] * UM,
        field[0][part][kept] * scale * UM,
        field[1][part][kept] * scale * UM,
        size[part][kept] * UM,
        angles="xy",
        scale_units="xy",
        scale=1.0,
        cmap=_on_black(),
        width=0.0055,
        headwidth=3.6,
        headlength=3.8,
        headaxislength=3.4,
        minlength=0.6,
        zorder=3,
    )
    drawn.set_clim(0, max(vmax, 1e-6))
    if key and vmax > 0:
        value = round_length(vmax / UM * 0.6 * UM) / UM
        draw_key_bar(ax, value, scale, f"{value * UM:g} µm shift", "#ffffff")
    return drawn


def draw_traction(
    ax: Axes,
    x: ArrayLike,
    y: ArrayLike,
    traction: ArrayLike,
    labels: ArrayLike | None = None,
    *,
    arrows: int = 22,
    key: bool = True,
) -> AxesImage:
    """Size of the traction as colour, its direction as arrows, outlines on top; ground without traction stays blank.

    ``x`` ``(nx,)`` m, ``y`` ``(ny,)`` m, ``traction`` ``(2, ny, nx)`` Pa, the force per area of the cell on the gel.
    Returns the image for a colour bar in kPa.
    """
    xs, ys, field = np.asarray(x, float), np.asarray(y, float), np.asarray(traction, float)
    size = np.hypot(*field)
    blank = ~np.isfinite(size) | (size == 0)
    top = float(np.percentile(size[~blank], 99.7)) / 1e3 if (~blank).any() else 1.0
    shown = ax.imshow(
        np.ma.masked_array(size / 1e3, blank), cmap=TRACTION_MAP, vmin=0, vmax=top, extent=extent_of(xs, ys), zorder=1
    )
    inside = ~blank & (size > 0.15 * top * 1e3)
    if inside.any():
        rows, columns = np.nonzero(~blank)
        span = max(np.ptp(rows), np.ptp(columns)) + 1
        step = max(int(np.ceil(span / arrows)), 1)
        chosen = inside & (np.arange(len(ys))[:, None] % step == 0) & (np.arange(len(xs)) % step == 0)
        rows, columns = np.nonzero(chosen)
        scale = 3.2 * step * float(xs[1] - xs[0]) / (top * 1e3)
        ax.quiver(
            xs[columns] * UM,
            ys[rows] * UM,
            field[0][chosen] * scale * UM,
            field[1][chosen] * scale * UM,
            angles="xy",
            scale_units="xy",
            scale=1.0,
            color="#ffffff",
            edgecolor="#000000",
            linewidth=0.35,
            width=0.0042,
            headwidth=4,
            headlength=4,
            headaxislength=3.6,
            minlength=0.5,
            zorder=3,
        )
        if key:
            value = round_length(0.7 * top) * 1e3
            draw_key_bar(ax, value, scale, f"{value / 1e3:g} kPa", INK)
    if labels is not None:
        draw_outlines(ax, xs, ys, labels)
    return shown


def draw_contraction(ax: Axes, x: ArrayLike, y: ArrayLike, traction: ArrayLike, labels: ArrayLike) -> AxesImage:
    """Where the contractile moment is made: -(x - c) . T in nN/um, whose integral over a cell is its moment.

    Positive (purple) pulls towards the cell's centroid c, negative (orange) pushes away; zero lies in the middle of
    the map, and ground that pushes is ringed by a dotted line. (For a cell in balance the integral does not depend on
    c; the map does.)
    """
    xs, ys, field, number = np.asarray(x, float), np.asarray(y, float), np.asarray(traction, float), np.asarray(labels)
    density = np.full(number.shape, np.nan)
    gx, gy = np.meshgrid(xs, ys)
    for cell in np.unique(number[number > 0]):
        here = number == cell
        dx, dy = gx[here] - gx[here].mean(), gy[here] - gy[here].mean()
        density[here] = -(dx * field[0][here] + dy * field[1][here]) * 1e3  # Pa m = N/m; 1 N/m = 1000 nN/um
    top = max(float(np.nanpercentile(np.abs(density), 99.7)), 1e-9) if np.isfinite(density).any() else 1.0
    shown = ax.imshow(
        np.ma.masked_invalid(density),
        cmap=SIGN_MAP,
        norm=TwoSlopeNorm(0.0, -top, top),
        extent=extent_of(xs, ys),
        zorder=1,
    )
    # In grey both ends of the map are dark: what pushes is ringed, so that the sign does not hang on the hue.
    pushes = np.nan_to_num(density)
    if (pushes < -0.12 * top).any():
        gx, gy = np.meshgrid(xs * UM, ys * UM)
        ax.contour(gx, gy, pushes, levels=[-0.12 * top], colors=[INK], linestyles="dotted", linewidths=0.9, zorder=3)
    draw_outlines(ax, xs, ys, number)
    return shown
