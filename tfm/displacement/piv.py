"""The OpenPIV adapter: a robust start at any displacement, by window deformation from coarse to fine.

OpenPIV correlates the windows and finds the sub-pixel peaks (``openpiv.pyprocess``). The passes around it are ours:
windows go through in chunks, nothing is printed, no warning filter is touched, no vector is replaced by a plausible
one and called valid, and plotting is never imported.
"""

from __future__ import annotations

import contextlib
import io
import warnings
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from importlib.metadata import version
from typing import Any

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray
from scipy.ndimage import gaussian_filter, map_coordinates, spline_filter

from tfm.displacement.grid import fill_smoothly, spline_matrix, to_pixels
from tfm.errors import MeasurementError

__all__ = ["PivField", "local_median_outliers", "piv_start"]

_WINDOW = 32
_CHUNK = 1000
#: px; neighbours 16 px apart on a gel agree to a pixel or two at any strain, windows that match by chance to ten.
_MOST_DISORDER = 4.0


@dataclass(frozen=True)
class PivField:
    """Displacement of window centres, in pixels.

    Attributes
    ----------
    x, y
        ``(nx,)``, ``(ny,)`` px, window centres **in the relaxed frame**.
    u
        ``(2, ny, nx)`` px, drift included: a bead at ``x`` (relaxed) sits at ``x + u`` (stressed). NaN where not valid.
    valid
        ``(ny, nx)`` bool.
    correlation
        ``(ny, nx)`` height of the normalised correlation peak, 0..1.
    settings
        Windows, passes, backend and version.
    """

    x: NDArray[np.float64]
    y: NDArray[np.float64]
    u: NDArray[np.float64]
    valid: NDArray[np.bool_]
    correlation: NDArray[np.float64]
    settings: Mapping[str, Any]


def piv_start(
    relaxed: NDArray[np.float32],
    stressed: NDArray[np.float32],
    *,
    shift: tuple[float, float] = (0.0, 0.0),
    spacing_px: int = 16,
    usable: NDArray[np.bool_] | None = None,
    least_correlation: float = 0.25,
) -> PivField:
    """Window-deformation PIV from 128 px down to 32 px windows, every pass on the field of the one before.

    Only the stressed frame is deformed, ``I_s(x + u(x))``, so windows and vectors stay in the relaxed frame at any
    displacement; a correction ``d`` found at ``x`` is composed as ``u(x + d) + d``. Coarse passes run on frames reduced
    4 and 2 times, which keeps the correlation peak of a strongly strained window sharp relative to the bead
    (Scarano, Meas. Sci. Technol. 13:R1, 2002, for iterative deformation and its limits).

    Parameters
    ----------
    relaxed, stressed
        ``(ny, nx)`` frames, prepared (background removed).
    shift
        First guess of the displacement x, y in px (the drift).
    spacing_px
        Step of the last pass.
    usable
        ``(ny, nx)`` bool, pixels to use; windows that hold less than half are not correlated at all.
    least_correlation
        Windows with a lower peak are not valid.

    Raises
    ------
    MeasurementError
        When no window correlates.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> image = gaussian_filter(rng.random((96, 128)), 1.5).astype(np.float32)
    >>> field = piv_start(image[:, 4:], image[:, :-4], spacing_px=16)  # everything moves 4 px to the right
    >>> bool(np.abs(np.nanmedian(field.u[0]) - 4.0) < 0.05), field.u.shape
    (True, (2, 5, 6))
    """
    keep = np.ones(relaxed.shape, dtype=bool) if usable is None else usable
    mean_a, mean_b = float(relaxed[keep].mean()) if keep.any() else 0.0, float(stressed.mean())
    a = np.where(keep, relaxed - mean_a, 0).astype(np.float32)
    b = (stressed - mean_b).astype(np.float32)
    factors = [d for d in (4, 2, 1) if min(a.shape) // d >= _WINDOW + _WINDOW // 2] or [1]
    plan = [(d, _WINDOW // 2 * d) for d in factors if d > 1] + [(1, spacing_px)]
    field: PivField | None = None
    passes: list[dict[str, float]] = []
    for factor, step in plan:
        for repeat in range(3):
            before = field
            field = _one_pass(a, b, keep, factor, step, field, shift, least_correlation)
            moved = _rms_change(before, field)
            passes.append({"window_px": _WINDOW * factor, "step_px": step, "change_px": moved})
            # A second go at the same size only where the first one still moved windows by more than a fraction of a
            # (reduced) pixel: large or steep displacement gets the passes that it needs, small displacement is quick.
            if repeat >= 1 and moved < 0.25 * factor:
                break
            if repeat == 0 and before is not None and moved < 0.1 * factor:
                break
    if field is None or not field.valid.any() or _disorder(field) > _MOST_DISORDER:
        raise MeasurementError(
            "no part of the two bead images matches",
            code="no-match",
            remedy="check that both images show the same beads, in the same channel and focus",
        )
    settings = {
        "start": "openpiv.pyprocess, window deformation of the stressed frame",
        "openpiv": version("OpenPIV"),
        "backend": "scipy.fft float32",
        "passes": passes,
        "least_correlation": least_correlation,
    }
    return PivField(field.x, field.y, field.u, field.valid, field.correlation, settings)


def _one_pass(
    a: NDArray[np.float32],
    b: NDArray[np.float32],
    keep: NDArray[np.bool_],
    factor: int,
    step: int,
    before: PivField | None,
    shift: tuple[float, float],
    least_correlation: float,
) -> PivField:
    small_a, small_b = _reduce(a, factor), _reduce(b, factor)
    share = _reduce(keep.astype(np.float32), factor)
    stride = step // factor
    starts_y, starts_x = _starts(small_a.shape[0], stride), _starts(small_a.shape[1], stride)
    middle = (_WINDOW - 1) / 2
    y = np.asarray((starts_y + middle) * factor + (factor - 1) / 2, dtype=np.float64)
    x = np.asarray((starts_x + middle) * factor + (factor - 1) / 2, dtype=np.float64)
    predict = _predictor(before, shift)
    pixel_y = np.arange(small_a.shape[0], dtype=np.float64) * factor + (factor - 1) / 2
    pixel_x = np.arange(small_a.shape[1], dtype=np.float64) * factor + (factor - 1) / 2
    dense = predict(pixel_y, pixel_x)
    to_y = (dense[1] + pixel_y[:, None].astype(np.float32) - (factor - 1) / 2) / factor
    to_x = (dense[0] + pixel_x[None, :].astype(np.float32) - (factor - 1) / 2) / factor
    seen = (to_y > -0.5) & (to_y < small_b.shape[0] - 0.5) & (to_x > -0.5) & (to_x < small_b.shape[1] - 0.5)
    share = share * seen
    warped = map_coordinates(spline_filter(small_b, 3, output=np.float32), [to_y, to_x], order=3, prefilter=False,
                             mode="nearest")  # fmt: skip
    used_a, used_b = np.where(seen, small_a, 0), np.where(share > 0.5, warped, 0)
    d, peak = _correlate(used_a, used_b, share, starts_y, starts_x)
    grid_y, grid_x = np.meshgrid(y, x, indexing="ij")
    found = np.isfinite(d).all(axis=0) & (peak > least_correlation)
    d = np.where(found, d * factor, 0.0)
    base = _at_points(before, shift, grid_y + d[1], grid_x + d[0])
    u = base + d
    found &= ~local_median_outliers(u, found, floor=0.1 * factor)
    return PivField(x, y, np.where(found, u, np.nan), found, peak, {})


def _reduce(image: NDArray[np.float32], factor: int) -> NDArray[np.float32]:
    if factor == 1:
        return image
    rows, cols = (n // factor * factor for n in image.shape)
    blocks = image[:rows, :cols].reshape(rows // factor, factor, cols // factor, factor)
    out: NDArray[np.float32] = blocks.mean(axis=(1, 3))
    return out


def _starts(length: int, stride: int) -> NDArray[np.int_]:
    count = max(1, (length - _WINDOW) // stride + 1)
    return np.arange(count) * stride + (length - _WINDOW - (count - 1) * stride) // 2


def _predictor(
    before: PivField | None, shift: tuple[float, float]
) -> Callable[[NDArray[np.float64], NDArray[np.float64]], NDArray[np.float32]]:
    def constant(rows: NDArray[np.float64], cols: NDArray[np.float64]) -> NDArray[np.float32]:
        return np.broadcast_to(np.array(shift, dtype=np.float32)[:, None, None], (2, len(rows), len(cols)))

    if before is None or not before.valid.any():
        return constant
    smooth = _smoothed(before)

    def spline(rows: NDArray[np.float64], cols: NDArray[np.float64]) -> NDArray[np.float32]:
        # Beyond the outermost windows the field is held, not extended: a wrong slope there would throw beads away.
        rows, cols = np.clip(rows, before.y[0], before.y[-1]), np.clip(cols, before.x[0], before.x[-1])
        return to_pixels(smooth, spline_matrix(before.y, rows), spline_matrix(before.x, cols))

    return spline


def _smoothed(field: PivField) -> NDArray[np.float64]:
    filled = fill_smoothly(field.u, field.valid)
    # Light smoothing keeps the iteration stable where the window's own response is negative (Scarano 2002).
    return np.stack([gaussian_filter(part, 0.5, mode="nearest") for part in filled])


def _at_points(
    before: PivField | None, shift: tuple[float, float], rows: NDArray[np.float64], cols: NDArray[np.float64]
) -> NDArray[np.float64]:
    if before is None or not before.valid.any():
        return np.broadcast_to(np.array(shift)[:, None, None], (2, *rows.shape)).copy()
    smooth = _smoothed(before)
    step_y = before.y[1] - before.y[0] if len(before.y) > 1 else 1.0
    step_x = before.x[1] - before.x[0] if len(before.x) > 1 else 1.0
    at = [(rows - before.y[0]) / step_y, (cols - before.x[0]) / step_x]
    return np.stack([map_coordinates(part, at, order=3, mode="nearest") for part in smooth])


def _correlate(
    a: NDArray[np.float32],
    b: NDArray[np.float32],
    share: NDArray[np.float32],
    starts_y: NDArray[np.int_],
    starts_x: NDArray[np.int_],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Displacement ``(2, ny, nx)`` and peak height of every window; NaN for windows without enough usable ground."""
    view_a, view_b = (sliding_window_view(image, (_WINDOW, _WINDOW)) for image in (a, b))
    total = np.pad(share.astype(np.float64).cumsum(0).cumsum(1), ((1, 0), (1, 0)))
    y0, x0 = starts_y[:, None], starts_x[None, :]
    y1, x1 = y0 + _WINDOW, x0 + _WINDOW
    filled = total[y1, x1] - total[y0, x1] - total[y1, x0] + total[y0, x0]
    rows, cols = np.nonzero(filled > _WINDOW**2 / 2)
    d = np.full((2, len(starts_y), len(starts_x)), np.nan)
    peak = np.zeros(d.shape[1:])
    for first in range(0, len(rows), _CHUNK):
        r, c = rows[first : first + _CHUNK], cols[first : first + _CHUNK]
        window_a = _normalised(view_a[starts_y[r], starts_x[c]])
        window_b = _normalised(view_b[starts_y[r], starts_x[c]])
        d[0, r, c], d[1, r, c], peak[r, c] = _openpiv_peaks(window_a, window_b)
    return d, peak


def _normalised(windows: NDArray[np.float32]) -> NDArray[np.float32]:
    windows = windows - windows.mean(axis=(1, 2), keepdims=True)
    size = np.sqrt((windows**2).sum(axis=(1, 2), keepdims=True))
    out: NDArray[np.float32] = np.divide(windows, size, out=np.zeros_like(windows), where=size > 0)
    return out


def _openpiv_peaks(
    window_a: NDArray[np.float32], window_b: NDArray[np.float32]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
    from openpiv.pyprocess import fft_correlate_images, vectorized_correlation_to_displacements

    with warnings.catch_warnings(), np.errstate(all="ignore"), contextlib.redirect_stdout(io.StringIO()):
        # Logarithms of negative correlation values: OpenPIV falls back to a parabola there, the warning says no more.
        warnings.simplefilter("ignore", RuntimeWarning)
        corr = fft_correlate_images(window_a, window_b, correlation_method="circular", normalized_correlation=False)
        found = vectorized_correlation_to_displacements(corr, subpixel_method="gaussian")
    height = corr.max(axis=(1, 2)).astype(np.float64)
    if isinstance(found, np.ndarray):  # every peak on the rim of its map: OpenPIV answers with one array of NaN
        return found[:, 0], found[:, 1], height
    return np.asarray(found[0], float), np.asarray(found[1], float), height


def _disorder(field: PivField) -> float:
    """Median distance (px) of a vector from the median of its neighbours; 0 when none has neighbours."""
    distance = np.sqrt(((field.u - _neighbours(field.u, field.valid)[0]) ** 2).sum(axis=0))
    known = distance[np.isfinite(distance)]
    return float(np.median(known)) if known.size else 0.0


def _neighbours(
    u: NDArray[np.float64], valid: NDArray[np.bool_]
) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.int_]]:
    """Median of the up to eight valid neighbours, their median deviation from it, and how many there are."""
    masked = np.where(valid, u, np.nan)
    padded = np.pad(masked, ((0, 0), (1, 1), (1, 1)), constant_values=np.nan)
    around = np.delete(sliding_window_view(padded, (3, 3), axis=(1, 2)).reshape(*u.shape, 9), 4, axis=-1)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", RuntimeWarning)  # all-NaN neighbourhoods answer NaN, which is what is wanted
        middle = np.nanmedian(around, axis=-1)
        scatter = np.nanmedian(np.abs(around - middle[..., None]), axis=-1)
    return middle, scatter, np.isfinite(around[0]).sum(axis=-1)


def local_median_outliers(
    u: NDArray[np.float64], valid: NDArray[np.bool_], *, threshold: float = 3.0, floor: float = 0.1
) -> NDArray[np.bool_]:
    """Vectors that differ from their eight neighbours by more than ``threshold`` times the neighbours' own scatter.

    Normalised median test (Westerweel & Scarano, Exp. Fluids 39:1096, 2005, eq. 2) on the vector's length; ``floor`` in
    the unit of ``u`` stands for the scatter that is always there. Vectors with fewer than 3 valid neighbours are kept.

    Examples
    --------
    >>> u = np.zeros((2, 5, 5)); u[0, 2, 2] = 4.0
    >>> np.argwhere(local_median_outliers(u, np.ones((5, 5), bool))).tolist()
    [[2, 2]]
    """
    middle, scatter, count = _neighbours(u, valid)
    ratio = np.sqrt((((np.where(valid, u, np.nan) - middle) / (scatter + floor)) ** 2).sum(axis=0))
    return np.asarray(valid & (count >= 3) & (ratio > threshold))


def _rms_change(before: PivField | None, now: PivField) -> float:
    if before is None or not before.valid.any() or not now.valid.any():
        return float("inf")
    rows, cols = np.meshgrid(now.y, now.x, indexing="ij")
    old = _at_points(before, (0.0, 0.0), rows, cols)
    change = np.sqrt(((now.u - old) ** 2).sum(axis=0))[now.valid]
    # The ninth decile: what happens under a cell must not drown in the quiet ground around it.
    return float(np.quantile(change, 0.9))
