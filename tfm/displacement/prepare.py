"""What must be right about two bead images before anything is matched: background, hot and saturated pixels, focus."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray
from scipy.ndimage import binary_dilation, gaussian_filter, maximum_filter

from tfm.displacement.grid import spline_matrix, to_pixels
from tfm.errors import InputError, MeasurementError

__all__ = ["PreparedFrame", "bead_width", "brightness_ratio", "prepare_frame", "sharpest_plane"]

_TILE = 48


@dataclass(frozen=True)
class PreparedFrame:
    """One bead image made ready.

    Attributes
    ----------
    image
        ``(ny, nx)`` float32, background removed, unusable pixels closed from their neighbours.
    background
        ``(ny, nx)`` float32, what was taken off (counts), smooth.
    usable
        ``(ny, nx)`` bool, False on hot, dead, not-finite and masked (constant) pixels.
    linear
        ``(ny, nx)`` bool, False on and around saturated pixels. Their flanks still tell where a bead is, so they are
        matched; but their noise is cut off, so they say nothing about the camera's noise or the brightness.
    saturated, hot
        Number of pixels at the top of the camera's range, and of single pixels that stand out.
    """

    image: NDArray[np.float32]
    background: NDArray[np.float32]
    usable: NDArray[np.bool_]
    linear: NDArray[np.bool_]
    saturated: int
    hot: int


def prepare_frame(image: NDArray[np.floating], *, saturation: float | None = None) -> PreparedFrame:
    """Remove the smooth background, find pixels that must not take part.

    The background is a low quantile (25 %) of tiles of 48 px, smoothed and spline-interpolated: beads cover less than
    a quarter of the ground in any usable image. Hot pixels stand out from their four neighbours by more than any bead
    can (a bead as narrow as half a pixel still puts a sixth of its peak into its brightest neighbour);
    saturated pixels are a plateau at the largest value. Hot pixels take no part; saturated ones are kept out of the
    noise and the brightness.

    Parameters
    ----------
    image
        ``(ny, nx)`` raw counts.
    saturation
        Top of the camera's range in counts. ``None``: recognised from a plateau at the largest value.

    Raises
    ------
    InputError
        When the image is not 2-D or smaller than 48 px.
    MeasurementError
        When it holds nothing but one value.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> image = rng.normal(100, 3, (96, 96)); image[20, 30] = 900
    >>> frame = prepare_frame(image)
    >>> frame.hot, bool(frame.usable[20, 30]), bool(abs(frame.image.mean()) < 5)
    (1, False, True)
    """
    if image.ndim != 2 or min(image.shape) < 48:
        raise InputError(
            f"a bead image of shape {image.shape} cannot be measured",
            code="image-too-small",
            remedy="give one 2-D image of at least 48 x 48 pixels",
        )
    raw = np.array(image, dtype=np.float32)
    finite = np.isfinite(raw)
    if not finite.any() or np.ptp(raw[finite]) == 0:
        raise MeasurementError(
            "a bead image is blank", code="blank-image", remedy="check channel, exposure and plane of the bead images"
        )
    raw[~finite] = np.median(raw[finite])
    flat_top = _saturated(raw, saturation)
    hot = _hot_pixels(raw) & ~binary_dilation(flat_top)
    blank = _blank_ground(raw)
    bad = ~finite | hot | blank
    if hot.any() or not finite.all():
        raw = _closed(raw, hot | ~finite)
    background = _smooth_background(raw)
    linear = ~binary_dilation(flat_top, iterations=3) if flat_top.any() else np.ones(raw.shape, dtype=bool)
    return PreparedFrame(raw - background, background, ~bad, linear, int(flat_top.sum()), int(hot.sum()))


def _saturated(raw: NDArray[np.float32], saturation: float | None) -> NDArray[np.bool_]:
    if saturation is not None:
        return raw >= saturation
    top = float(raw.max())
    bottom = float(np.quantile(raw[::4, ::4], 0.5))
    at_top = raw >= top
    count = int(at_top.sum())
    near = int((raw > top - 0.05 * (top - bottom)).sum()) - count
    # Without saturation the brightest value is a single pixel on a thinning tail; with it, the tail piles up.
    if count >= 6 and count > 1.5 * near:
        return at_top
    return np.zeros(raw.shape, dtype=bool)


def _blank_ground(raw: NDArray[np.float32]) -> NDArray[np.bool_]:
    """Ground that someone masked: 7 x 7 pixels of exactly one value, and a rim, for the mask's edge is no bead."""
    # Five pixels of a window decide for nearly every window; only where they agree are all of them looked at.
    middle = raw[3:-3, 3:-3]
    alike = (middle == raw[:-6, :-6]) & (middle == raw[6:, 6:]) & (middle == raw[:-6, 6:]) & (middle == raw[6:, :-6])
    flat = np.zeros(raw.shape, dtype=bool)
    rows, cols = np.nonzero(alike)
    if len(rows):
        windows = sliding_window_view(raw, (7, 7))
        for first in range(0, len(rows), 20_000):
            r, c = rows[first : first + 20_000], cols[first : first + 20_000]
            some = windows[r, c].reshape(len(r), -1)
            flat[r + 3, c + 3] = some.max(axis=1) == some.min(axis=1)
    return np.asarray(maximum_filter(flat, 2 * (3 + 4) + 1)) if flat.any() else flat


def _hot_pixels(raw: NDArray[np.float32]) -> NDArray[np.bool_]:
    padded = np.pad(raw, 1, mode="reflect")
    up, down, left, right = padded[:-2, 1:-1], padded[2:, 1:-1], padded[1:-1, :-2], padded[1:-1, 2:]
    highest = np.maximum(np.maximum(up, down), np.maximum(left, right))
    lowest = np.minimum(np.minimum(up, down), np.minimum(left, right))
    level = float(np.median(raw[::2, ::2]))
    # Scatter of a pixel against its neighbours' mean, where nothing stands out: the noise of the dark ground.
    rough = raw - 0.25 * (up + down + left + right)
    noise = 1.4826 * float(np.median(np.abs(rough[::2, ::2]))) + 1e-6 * abs(level) + 1e-12
    above = (raw - level > 12 * noise) & (raw - level > 6 * np.maximum(highest - level, 2 * noise))
    below = (level - raw > 12 * noise) & (raw < lowest - 12 * noise)
    return np.asarray(above | below)


def _closed(raw: NDArray[np.float32], holes: NDArray[np.bool_]) -> NDArray[np.float32]:
    weight = gaussian_filter((~holes).astype(np.float32), 1.0)
    total = gaussian_filter(np.where(holes, 0, raw), 1.0)
    return np.where(holes & (weight > 1e-6), total / np.maximum(weight, 1e-6), raw).astype(np.float32)


def _smooth_background(raw: NDArray[np.float32]) -> NDArray[np.float32]:
    counts = [max(1, round(n / _TILE)) for n in raw.shape]
    edges = [np.linspace(0, n, c + 1).astype(int) for n, c in zip(raw.shape, counts, strict=True)]
    low = np.empty(counts)
    for i in range(counts[0]):
        for j in range(counts[1]):
            # Every second pixel is plenty for a quantile of a smooth quantity.
            low[i, j] = np.quantile(raw[edges[0][i] : edges[0][i + 1] : 2, edges[1][j] : edges[1][j + 1] : 2], 0.25)
    low = gaussian_filter(low, 1.0, mode="nearest")
    centres = [(e[:-1] + e[1:] - 1) / 2 for e in edges]
    return to_pixels(low, *(spline_matrix(c, np.arange(n)) for c, n in zip(centres, raw.shape, strict=True)))


def bead_width(image: NDArray[np.float32], usable: NDArray[np.bool_] | None = None) -> float:
    """Standard deviation (px) of a bead's image, from the frame's autocorrelation.

    A Gaussian bead of width s has an autocorrelation exp(-d^2 / (4 s^2)); the ratio of its values at 1 and 2 px gives
    s without the value at 0, into which all the pixel noise falls. NaN when the frame holds no beads.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> dots = (rng.random((256, 256)) < 0.02).astype(np.float32)
    >>> round(bead_width(gaussian_filter(dots, 1.5)), 1)
    1.5
    """
    a = image - float(np.mean(image))
    if usable is not None:
        a = np.where(usable, a, 0)
    lags = [0.5 * (float(np.mean(a[:, lag:] * a[:, :-lag])) + float(np.mean(a[lag:] * a[:-lag]))) for lag in (1, 2)]
    if lags[1] <= 0 or lags[0] <= lags[1]:
        return float("nan")
    return float(np.sqrt(0.75 / np.log(lags[0] / lags[1])))


def brightness_ratio(relaxed: PreparedFrame, stressed: PreparedFrame) -> np.float32:
    """Brightness of the stressed frame's beads over the relaxed one's, whatever their displacement; 1 when unknown.

    Root of the ratio of the autocovariances at 1 px, into which pixel noise does not fall.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> dots = 1000 * gaussian_filter((rng.random((96, 96)) < 0.02).astype(float), 1.5)
    >>> frames = [prepare_frame(factor * dots + rng.normal(100, 1, dots.shape)) for factor in (1.0, 0.5)]
    >>> round(float(brightness_ratio(*frames)), 1)
    0.5
    """
    power = []
    for frame in (relaxed, stressed):
        a = np.where(frame.usable, frame.image - np.median(frame.image), 0)
        power.append(0.5 * (float(np.mean(a[:, 1:] * a[:, :-1])) + float(np.mean(a[1:] * a[:-1]))))
    return np.float32(np.sqrt(power[1] / power[0]) if min(power) > 0 else 1.0)


def sharpest_plane(stack: NDArray[np.floating]) -> int:
    """Index of the plane with the most fine structure (mean squared gradient, Tenengrad; common practice).

    ``stack`` is ``(nz, ny, nx)``. Gradients are of the smoothed plane, so that noise does not win over beads.

    Raises
    ------
    InputError
        When the stack is not 3-D.

    Examples
    --------
    >>> rng = np.random.default_rng(0)
    >>> dots = (rng.random((64, 64)) < 0.02).astype(np.float32)
    >>> sharpest_plane(np.stack([gaussian_filter(dots, s) for s in (3.0, 1.2, 2.0)]))
    1
    """
    if stack.ndim != 3:
        raise InputError(f"a stack of shape {stack.shape} has no planes", code="bad-stack", remedy="give z, y, x")
    score = []
    for plane in stack:
        gy, gx = np.gradient(gaussian_filter(np.asarray(plane, dtype=np.float32), 1.0))
        score.append(float(np.mean(gx**2 + gy**2)))
    return int(np.argmax(score))
