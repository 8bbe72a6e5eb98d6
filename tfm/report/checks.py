"""Figures that let a reader distrust a field: beads on top of each other, and what the traction does not explain."""

from __future__ import annotations

import numpy as np
from matplotlib.figure import Figure
from numpy.typing import NDArray
from scipy.interpolate import RegularGridInterpolator
from scipy.ndimage import distance_transform_edt, map_coordinates

from tfm.report import plots
from tfm.report.fielddata import FieldArrays
from tfm.report.figures import noise_of, rows_of_frame
from tfm.report.panels import Limits, Panels, map_limits
from tfm.report.results import FieldResult, number
from tfm.report.style import INK, SIGN_MAP

__all__ = ["beads_figure", "residual_figure", "unexplained_ground"]

Array = NDArray[np.float64]
#: Half the width, in pixels of the picture, of the ground shown enlarged.
_HALF = 44
#: m: ground so near to an outline is not judged.
_MARGIN = 4e-6


def _window(axis: Array, centre: float, half: int) -> slice:
    """``2 half`` pixels that lie inside the picture, as near to ``centre`` (m) as the border allows."""
    middle = int(np.argmin(np.abs(axis - centre)))
    start = int(np.clip(middle - half, 0, max(len(axis) - 2 * half, 0)))
    return slice(start, min(start + 2 * half, len(axis)))


def _quiet_and_busy(a: FieldArrays) -> list[tuple[float, float]]:
    """Positions (x, y) in m where the gel moved least and most, off the border; the middle if nothing is known."""
    if a.u is None or a.x is None or a.y is None or a.xi is None or a.yi is None:
        xs, ys = (a.xi, a.yi) if a.xi is not None and a.yi is not None else (np.zeros(1), np.zeros(1))
        return [(float(xs.mean()), float(ys.mean()))] * 2
    size = np.hypot(*a.u)
    filled = np.where(np.isfinite(size), size, np.nanmedian(size))
    edge = min(max(min(filled.shape) // 8, 1), (min(filled.shape) - 1) // 2)
    inner = filled[edge : filled.shape[0] - edge, edge : filled.shape[1] - edge]
    places = [np.unravel_index(i, inner.shape) for i in (np.argmin(inner), np.argmax(inner))]
    return [(float(a.x[int(c) + edge]), float(a.y[int(r) + edge])) for r, c in places]


def beads_figure(field: FieldResult, a: FieldArrays) -> Figure | None:
    """Relaxed over stressed beads: quiet ground before and after drift, and the ground that moved most."""
    if a.relaxed is None or a.stressed is None or a.xi is None or a.yi is None or a.relaxed.shape != a.stressed.shape:
        return None
    row = next(iter(rows_of_frame(field.frames, a.frame)), None)
    drift = [number(row, k) for k in ("drift_y_px", "drift_x_px")]
    step, camera = float(a.xi[1] - a.xi[0]), a.camera_pixel or float(a.xi[1] - a.xi[0])
    moved = [(d or 0.0) * camera / step for d in drift]
    stated = "unknown" if drift[0] is None or drift[1] is None else f"{drift[1]:+.2f}, {drift[0]:+.2f} px"
    quiet, busy = _quiet_and_busy(a)
    views = (
        (False, quiet, f"Quiet ground as recorded (drift {stated})"),
        (True, quiet, "Quiet ground, drift taken out"),
        (True, busy, "Where the gel moved most"),
    )
    half = min(_HALF, *(s // 2 for s in a.relaxed.shape))
    parts = [(_window(a.yi, y, half), _window(a.xi, x, half)) for _, (x, y), _ in views]
    h = 0.5 * step
    limits: list[Limits] = [
        ((float(a.xi[c][0]) - h, float(a.xi[c][-1]) + h), (float(a.yi[r][0]) - h, float(a.yi[r][-1]) + h))
        for r, c in parts
    ]
    panels = Panels.row(limits, [title for _, _, title in views], bars=False)
    for ax, (r, c), (settled, _, _) in zip(panels.axes, parts, views, strict=True):
        # Beads of the stressed frame have drifted by ``moved``: read it there, and only where it is shown.
        at = [np.arange(s.start, s.stop) + (d if settled else 0.0) for s, d in zip((r, c), moved, strict=True)]
        image = map_coordinates(a.stressed, np.meshgrid(*at, indexing="ij"), order=1, mode="nearest")
        plots.draw_overlay(ax, a.xi[c], a.yi[r], a.relaxed[r, c], image)
    words = (("● relaxed", "#ff9c2b"), ("● stressed", "#6aa8ff"), ("● both agree", "#ffffff"))
    for i, (word, colour) in enumerate(words):
        panels.axes[0].text(
            0.03, 0.16 - 0.06 * i, word, color=colour, transform=panels.axes[0].transAxes, fontsize=9, zorder=9,
            bbox={"facecolor": "#000000", "alpha": 0.7, "edgecolor": "none", "pad": 1.2},
        )  # fmt: skip
    return panels.finish(["#ffffff"] * 3)


def _predicted_on_vectors(a: FieldArrays) -> Array | None:
    """Predicted displacement where the vectors were measured, by linear interpolation on the lattice."""
    if a.predicted is None or a.xt is None or a.yt is None or a.x is None or a.y is None:
        return None
    gy, gx = np.meshgrid(a.y, a.x, indexing="ij")
    lattice = (a.yt, a.xt)
    return np.stack([RegularGridInterpolator(lattice, p, bounds_error=False)((gy, gx)) for p in a.predicted])


def _unexplained(a: FieldArrays) -> Array | None:
    """Measured minus predicted displacement without its median: a uniform offset is estimated and is no misfit."""
    predicted = _predicted_on_vectors(a)
    if predicted is None or a.u is None or not np.isfinite(a.u - predicted).any():
        return None
    left = a.u - predicted
    return np.asarray(left - np.nanmedian(left, axis=(1, 2), keepdims=True))


def unexplained_ground(field: FieldResult, a: FieldArrays) -> float | None:
    """Percentage of vectors off the outlines that miss the prediction by more than four standard deviations.

    Of pure noise 0.03 % do so. Vectors within 4 um of an outline are left out: windows blur the steep gradient there. A
    high value means that something pulls outside the outlines, or that the gel is not the one that was entered.
    """
    left, sd = _unexplained(a), noise_of(field, a.frame)
    if left is None or sd is None or a.labels is None or a.xt is None or a.yt is None or a.x is None or a.y is None:
        return None
    step = float(a.xt[1] - a.xt[0])
    away = np.pad(distance_transform_edt(np.pad(a.labels, 1) == 0), 1, constant_values=np.inf) * step
    rows = np.clip(np.rint((a.y - a.yt[0]) / step), -2, len(a.yt) + 1).astype(int) + 2
    columns = np.clip(np.rint((a.x - a.xt[0]) / step), -2, len(a.xt) + 1).astype(int) + 2
    size = np.hypot(*left)
    judged = (away[np.ix_(rows, columns)] > _MARGIN) & np.isfinite(size)
    return 100 * float(np.mean(size[judged] > 4 * sd)) if judged.sum() >= 100 else None


def _coarse(x: Array, y: Array, image: Array, *, largest: int = 256) -> tuple[Array, Array, Array]:
    """The picture as means over blocks, at most ``largest`` pixels wide: structure shows better than single pixels."""
    n = max(-(-max(image.shape) // largest), 1)
    ny, nx = image.shape[0] // n, image.shape[1] // n
    small = image[: ny * n, : nx * n].reshape(ny, n, nx, n).mean(axis=(1, 3))
    return x[: nx * n].reshape(nx, n).mean(axis=1), y[: ny * n].reshape(ny, n).mean(axis=1), small


def residual_figure(field: FieldResult, a: FieldArrays) -> Figure | None:
    """Observed minus predicted displacement in units of its own error, and what is left of the images."""
    limits, left, sd = map_limits(a), _unexplained(a), noise_of(field, a.frame)
    maps: list[tuple[str, Array, Array, Array, float, str]] = []
    if left is not None and a.x is not None and a.y is not None:
        unit = "standard deviations of one vector" if sd else "µm"
        for name, part in zip("xy", left, strict=True):
            values = part / sd if sd else part * 1e6
            top = 4.0 if sd else max(float(np.nanpercentile(np.abs(values), 99)), 1e-6)
            maps.append((f"Displacement: observed − predicted, {name}", a.x, a.y, values, top, unit))
    if a.residual is not None and a.xi is not None and a.yi is not None:
        x, y, values = _coarse(a.xi, a.yi, a.residual)
        top = max(float(np.percentile(np.abs(values), 99.5)), 1e-9)
        values = np.round(values / top * 12) / 12 * top
        words = "standard deviations of the relaxed image"
        maps.append(("Images: stressed, moved back − relaxed", x, y, values, top, words))
    if limits is None or not maps:
        return None
    panels = Panels.row([limits] * len(maps), [m[0] for m in maps])
    for i, (ax, (_, x, y, values, top, unit)) in enumerate(zip(panels.axes, maps, strict=True)):
        ax.set_facecolor("#cccccc")
        hidden = np.ma.masked_invalid(values)
        shown = ax.imshow(hidden, cmap=SIGN_MAP, vmin=-top, vmax=top, extent=plots.extent_of(x, y))
        panels.bar(i, shown, unit)
        if a.labels is not None and a.xt is not None and a.yt is not None:
            plots.draw_outlines(ax, a.xt, a.yt, a.labels, names=False)
    return panels.finish([INK] * len(maps))
