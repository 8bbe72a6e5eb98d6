"""The figures of one field: what moved, what pulled, whether the beads were explained, and the numbers behind them.

Each function returns a figure or None where the folder holds nothing to draw. Positions are laid out by hand: it is
several times faster than an automatic layout and the same on every machine.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.figure import Figure
from numpy.typing import NDArray
from scipy.ndimage import shift as shift_image

from tfm.report import plots
from tfm.report.fielddata import FieldArrays
from tfm.report.results import FieldResult, Row, number
from tfm.report.style import INK, PAPER, SIGN_MAP, new_figure

__all__ = ["beads_figure", "dipole_scale", "maps_figure", "residual_figure"]

Array = NDArray[np.float64]
PN_M = 1e-12


def rows_of_frame(rows: Sequence[Row], frame: int) -> list[Row]:
    """The rows of one frame; rows without a frame count as frame 0."""
    return [r for r in rows if int(number(r, "frame") or 0) == frame and r.get("status") != "failed"]


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
    """m of half axis per N m such that the largest principal value spans a sixth of ``width`` (m), rounded."""
    largest = max((abs(number(r, "major_pNm") or 0.0) for r in rows), default=0.0)
    if largest == 0.0:
        return 0.0
    return plots.round_length(width * 1e6 / 6 / largest) * 1e-6 / PN_M


def _limits(a: FieldArrays) -> tuple[tuple[float, float], tuple[float, float]] | None:
    """What every map of the field shows: the whole image, else the ground of the lattice or of the vectors."""
    if a.relaxed is not None and a.pixel:
        ny, nx = a.relaxed.shape
        return (-0.5 * a.pixel, (nx - 0.5) * a.pixel), (-0.5 * a.pixel, (ny - 0.5) * a.pixel)
    for x, y in ((a.xt, a.yt), (a.x, a.y)):
        if x is not None and y is not None and len(x) > 1 and len(y) > 1:
            h = 0.5 * float(x[1] - x[0])
            return (float(x[0]) - h, float(x[-1]) + h), (float(y[0]) - h, float(y[-1]) + h)
    return None


def _panels(
    limits: tuple[tuple[float, float], tuple[float, float]], count: int, *, bars: bool
) -> tuple[Figure, list[Axes]]:
    """A row of equal maps with room for a title above and a colour bar below each."""
    width = 3.9
    aspect = (limits[1][1] - limits[1][0]) / (limits[0][1] - limits[0][0])
    tall = float(np.clip(aspect, 0.35, 2.0)) * (width - 0.2)
    below, above = (0.62 if bars else 0.12), 0.3
    high = tall + below + above
    figure = new_figure(width * count, high)
    axes = [figure.add_axes(((i + 0.02) / count, below / high, 0.96 / count, tall / high)) for i in range(count)]
    for ax in axes:
        plots.frame_axes(ax, *limits)
        ax.set_anchor("C")
    return figure, axes


def _bar(figure: Figure, ax: Axes, shown: ScalarMappable, label: str) -> None:
    box = ax.get_position()
    high = figure.get_size_inches()[1]
    place = figure.add_axes((box.x0 + 0.12 * box.width, 0.42 / high, 0.76 * box.width, 0.1 / high))
    bar = figure.colorbar(shown, cax=place, orientation="horizontal")
    bar.outline.set_linewidth(0.5)
    bar.set_label(label, labelpad=1.5)
    place.tick_params(length=2.5, pad=1.5)


def draw_axes_of_cells(ax: Axes, rows: Sequence[Row], scale: float) -> None:
    """Principal axes of the frame's cells, and the scale they are drawn to."""
    for row in rows:
        found = tensor(row)
        if found is not None and scale > 0:
            plots.draw_dipole(ax, found[0], found[1], found[2], scale=scale)


def maps_figure(field: FieldResult, a: FieldArrays) -> Figure | None:
    """What moved (displacement over the beads), what pulled (traction, outlines, axes) and where the moment is made."""
    limits = _limits(a)
    if limits is None or (a.u is None and a.traction is None):
        return None
    figure, axes = _panels(limits, 3, bars=True)
    word = "Change of " if field.change_only else ""
    for ax, title in zip(
        axes,
        (
            f"{word}displacement of the gel",
            f"{word}traction of the cell on the gel",
            "Where the contractile moment is made",
        ),
        strict=True,
    ):
        ax.set_title(title[0].upper() + title[1:], pad=4)
        ax.set_facecolor("#000000" if ax is axes[0] else "#eeece4")
    if a.relaxed is not None and a.pixel:
        plots.draw_beads(axes[0], a.relaxed, pixel=a.pixel)
    if a.u is not None and a.x is not None and a.y is not None:
        noise = number(field.frames[0], "displacement_noise_um") if field.frames else None
        shown = plots.draw_displacement(axes[0], a.x, a.y, a.u, noise=None if noise is None else noise * 1e-6)
        _bar(figure, axes[0], shown, "displacement, µm")
    if a.traction is not None and a.xt is not None and a.yt is not None:
        rows = rows_of_frame(field.cells, a.frame)
        scale = dipole_scale(rows, limits[0][1] - limits[0][0])
        _bar(figure, axes[1], plots.draw_traction(axes[1], a.xt, a.yt, a.traction, a.labels), "traction, kPa")
        if a.labels is not None and (a.labels > 0).any():
            _bar(
                figure,
                axes[2],
                plots.draw_contraction(axes[2], a.xt, a.yt, a.traction, a.labels),
                "pull towards the centroid, nN/µm (negative: push)",
            )
            plots.draw_outlines(axes[0], a.xt, a.yt, a.labels, names=False)
        draw_axes_of_cells(axes[2], rows, scale)
        if scale > 0:
            _scale_note(axes[2], rows, scale)
    for ax in axes:
        colour = "#ffffff" if ax is axes[0] else INK
        plots.draw_scale_bar(ax, colour=colour)
        plots.draw_axes_sign(ax, colour=colour)
    return figure


def _scale_note(ax: Axes, rows: Sequence[Row], scale: float) -> None:
    """The half axis of a round principal value, as a bar in the lower left corner."""
    largest = max(abs(number(r, "major_pNm") or 0.0) for r in rows)
    value = plots.round_length(0.8 * largest)
    bar = plots.AnchoredSizeBar(
        ax.transData,
        value * PN_M * scale * 1e6,
        f"half axis {value:g} pN m",
        "lower left",
        pad=0.35,
        borderpad=0.4,
        sep=3,
        color=INK,
        frameon=True,
        label_top=True,
        size_vertical=abs(float(np.subtract(*ax.get_xlim()))) / 150,
    )
    bar.patch.set(facecolor=PAPER, alpha=0.85, edgecolor="none")
    ax.add_artist(bar)


def _window(image: Array, centre: tuple[int, int], half: int) -> tuple[slice, slice]:
    """A square of ``2 half`` pixels that lies inside the image, as near to ``centre`` as the border allows."""
    parts = []
    for middle, size in zip(centre, image.shape, strict=True):
        start = int(np.clip(middle - half, 0, max(size - 2 * half, 0)))
        parts.append(slice(start, min(start + 2 * half, size)))
    return parts[0], parts[1]


def _quiet_and_busy(a: FieldArrays) -> tuple[tuple[int, int], tuple[int, int]]:
    """Pixels [row, column] where the gel moved least and most."""
    if a.relaxed is None or a.u is None or a.x is None or a.y is None or a.pixel is None:
        return (0, 0), (0, 0)
    size = np.hypot(*a.u)
    filled = np.where(np.isfinite(size), size, np.nanmedian(size))
    edge = max(min(filled.shape) // 8, 1)
    inner = filled[edge:-edge, edge:-edge]
    quiet, busy = (np.unravel_index(i, inner.shape) for i in (np.argmin(inner), np.argmax(inner)))
    pixel = a.pixel
    place = [
        (round(float(a.y[int(r) + edge]) / pixel), round(float(a.x[int(c) + edge]) / pixel)) for r, c in (quiet, busy)
    ]
    return place[0], place[1]


def beads_figure(field: FieldResult, a: FieldArrays) -> Figure | None:
    """Relaxed over stressed beads: quiet ground before and after the drift is taken out, and the ground that moved most."""
    if a.relaxed is None or a.stressed is None or a.pixel is None or a.relaxed.shape != a.stressed.shape:
        return None
    row = rows_of_frame(field.frames, a.frame)
    drift = [number(row[0], k) if row else None for k in ("drift_y_px", "drift_x_px")]
    quiet, busy = _quiet_and_busy(a)
    half = min(48, *(s // 2 for s in a.relaxed.shape))
    moved = [0.0 if d is None else d for d in drift]
    settled = shift_image(a.stressed, [-d for d in moved], order=1, mode="nearest")
    stated = "drift not measured" if None in drift else f"drift ({moved[1]:+.2f}, {moved[0]:+.2f}) px"
    views = (
        (a.stressed, quiet, f"Quiet ground, as recorded: {stated}"),
        (settled, quiet, "Quiet ground, drift taken out"),
        (settled, busy, "Where the gel moved most"),
    )
    figure, axes = _panels(((0.0, 1.0), (0.0, 1.0)), 3, bars=False)
    for ax, (image, centre, title) in zip(axes, views, strict=True):
        part = _window(a.relaxed, centre, half)
        x, y = part[1].start * a.pixel, part[0].start * a.pixel
        plots.draw_overlay(ax, a.relaxed[part], image[part], x=x, y=y, pixel=a.pixel)
        h = 0.5 * a.pixel
        plots.frame_axes(ax, (x - h, x + 2 * half * a.pixel - h), (y - h, y + 2 * half * a.pixel - h))
        ax.set_title(title, pad=4)
        plots.draw_scale_bar(ax)
        plots.draw_axes_sign(ax)
    key = [("relaxed", "#ff9414"), ("stressed", "#3d8bff"), ("both agree", "#ffffff")]
    for i, (word, colour) in enumerate(key):
        axes[0].text(
            0.03,
            0.16 - 0.06 * i,
            f"● {word}",
            color=colour,
            transform=axes[0].transAxes,
            fontsize=8.5,
            zorder=9,
            path_effects=plots.halo(),
        )
    return figure


def _predicted_on(a: FieldArrays) -> Array | None:
    """Predicted displacement at the positions of the measured vectors, by linear interpolation."""
    from scipy.interpolate import RegularGridInterpolator

    if a.predicted is None or a.xt is None or a.yt is None or a.x is None or a.y is None:
        return None
    gy, gx = np.meshgrid(a.y, a.x, indexing="ij")
    parts = [RegularGridInterpolator((a.yt, a.xt), p, bounds_error=False)((gy, gx)) for p in a.predicted]
    return np.stack(parts)


def residual_figure(field: FieldResult, a: FieldArrays) -> Figure | None:
    """Observed minus predicted displacement, x and y, in units of its own error; and what is left of the images."""
    limits, predicted = _limits(a), _predicted_on(a)
    left = None if predicted is None or a.u is None else a.u - predicted
    if limits is None or (left is None and a.residual is None):
        return None
    noise = number(field.frames[0], "displacement_noise_um") if field.frames else None
    sd = noise * 1e-6 if noise else None
    figure, axes = _panels(
        limits, 3 if a.residual is not None and left is not None else (2 if left is not None else 1), bars=True
    )
    free = list(axes)
    if left is not None and a.x is not None and a.y is not None:
        left = left - np.nanmedian(left, axis=(1, 2), keepdims=True)  # a uniform offset is estimated and is no misfit
        for name, part in zip("xy", left, strict=True):
            ax = free.pop(0)
            values = part / sd if sd else part * 1e6
            top = 4.0 if sd else max(float(np.nanpercentile(np.abs(values), 99)), 1e-6)
            shown = ax.imshow(
                np.ma.masked_invalid(values), cmap=SIGN_MAP, vmin=-top, vmax=top, extent=plots.extent_of(a.x, a.y)
            )
            ax.set_title(f"Observed − predicted, {name} component", pad=4)
            _bar(figure, ax, shown, "in standard deviations of one vector" if sd else "µm")
    if a.residual is not None and free and a.pixel:
        top = max(float(np.percentile(np.abs(a.residual), 99.5)), 1e-9)
        ny, nx = a.residual.shape
        shown = free[0].imshow(
            np.round(a.residual / top * 15) / 15 * top,
            cmap=SIGN_MAP,
            vmin=-top,
            vmax=top,
            extent=plots.extent_of(np.arange(nx) * a.pixel, np.arange(ny) * a.pixel),
        )
        free[0].set_title("Stressed − predicted image", pad=4)
        _bar(figure, free[0], shown, "grey values")
    for ax in axes:
        ax.set_facecolor("#dddddd")
        if a.labels is not None and a.xt is not None and a.yt is not None:
            plots.draw_outlines(ax, a.xt, a.yt, a.labels, names=False)
        plots.draw_scale_bar(ax, colour=INK)
        plots.draw_axes_sign(ax, colour=INK)
    return figure
