"""What one pixel knows about the displacement: gradient, residual and noise, one strip of the image at a time."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy.ndimage import correlate1d, gaussian_filter, map_coordinates, spline_filter1d

__all__ = ["FramePair", "StripInformation", "strip_information"]

#: Derivative of band-limited images, error of sixth order (common practice: central differences of a 7-point stencil).
_STENCIL = np.array([-1, 9, -45, 0, 45, -9, 1], dtype=np.float32) / 60
_SECOND = np.array([2, -27, 270, -490, 270, -27, 2], dtype=np.float32) / 180
_SMOOTH = 0.8
#: Sum of squares of the weights of the 3-point difference of a Gaussian mean of 0.8 px.
_KERNEL_POWER = 0.0495
HALO = 6


@dataclass(frozen=True)
class FramePair:
    """Both frames and what is known of them, in counts of the relaxed frame.

    Attributes
    ----------
    relaxed
        ``(ny, nx)`` float32.
    stressed
        ``(ny, nx)`` float32: **spline coefficients** of the stressed frame.
    floor_relaxed, floor_stressed
        ``(ny, nx)`` float32, what was subtracted (it carries noise too).
    usable_relaxed, usable_stressed
        ``(ny, nx)`` bool.
    linear
        ``(ny, nx)`` bool, where the relaxed frame is not saturated.
    gain, offset
        ``(ny, nx)`` float32: stressed = gain * relaxed + offset.
    variance
        ``(c0, c1)``: variance = c0 + c1 * counts.
    least_variance
        counts^2, no pixel is believed to be quieter.
    bead_width
        px, standard deviation of a bead's image; 0 = unknown.
    order
        Of the interpolating spline.
    """

    relaxed: NDArray[np.float32]
    stressed: NDArray[np.float32]
    floor_relaxed: NDArray[np.float32]
    floor_stressed: NDArray[np.float32]
    usable_relaxed: NDArray[np.bool_]
    usable_stressed: NDArray[np.bool_]
    linear: NDArray[np.bool_]
    gain: NDArray[np.float32]
    offset: NDArray[np.float32]
    variance: tuple[float, float]
    least_variance: float
    bead_width: float = 0.0
    order: int = 3


@dataclass(frozen=True)
class StripInformation:
    """Information of a strip's pixels.

    Attributes
    ----------
    information, scatter
        ``(3, rows, columns)``: xx, xy, yy of M = sum g g^T / var and of the variance of the score (the latter, like
        ``squares``, only of a final sweep).
    pull
        ``(2, rows, columns)``: h = M u - score.
    squares
        ``(2, rows, columns)``: squared residual over variance, and the value to expect.
    residual, expected, level
        ``(rows, columns)`` counts: difference of the frames; noise variance per unit (see ``noise``); mean counts.
    used
        ``(rows, columns)`` bool.
    """

    information: NDArray[np.float32]
    scatter: NDArray[np.float32]
    pull: NDArray[np.float32]
    squares: NDArray[np.float32]
    relaxed: NDArray[np.float32]
    warped: NDArray[np.float32]
    residual: NDArray[np.float32]
    units: NDArray[np.float32]
    level: NDArray[np.float32]
    used: NDArray[np.bool_]
    lost: int


def strip_information(
    pair: FramePair, u: NDArray[np.float32], first: int, last: int, *, reject: float = np.inf, final: bool = False
) -> StripInformation:
    """Information of rows ``first`` to ``last`` about a correction of the displacement ``u``.

    With I_s(x + u) the stressed frame brought back and I_r the relaxed one, the residual is r = I_s(x + u) - I_r and,
    for noise variances v,

        M = g g^T / (v_r + v_s),   score = g r / (v_r + v_s),   h = M u - score,

    so that a model u' fits best where sum M u' = sum h (Gauss-Newton; Hild & Roux, Strain 42:69, 2006). The gradient g
    is that of the stressed frame at x + u, F^-T grad of the frame brought back with F = 1 + grad u, averaged over both
    frames.

    Noise is treated as it is. Gradients are noisy, so g g^T of one frame overstates M; a product of the gradients of
    *different* frames does not, and is symmetrised. The score uses gradients smoothed over 0.8 px (an instrument in the
    sense of estimating equations: it needs no unbiased gradient, only one that is independent of the residual), and its
    variance uses the variance of **raw** pixels: interpolation lowers the variance of a pixel and correlates it with
    its neighbours, and a sum against a smooth gradient sees neither. Noise in the gradient times noise in the residual
    adds ``k/4`` per pixel, k being the sum of squares of the derivative's weights.

    Parameters
    ----------
    pair
        The frames.
    u
        ``(2, rows + 2 halo, columns)`` px, present displacement of the strip's rows and a halo of :data:`HALO` rows
        (cut at the image's ends).
    final
        Whether ``u`` has settled, so that its strain can be trusted to correct the image of strained beads.
    reject
        Residuals above this many standard deviations, averaged over a bead, take no part: beads lost or added.
    """
    height, width = pair.relaxed.shape
    top, bottom = max(0, first - HALO), min(height, last + HALO)
    rows = np.arange(top, bottom, dtype=np.float32)[:, None]
    cols = np.arange(width, dtype=np.float32)[None, :]
    at_y, at_x = rows + u[1], cols + u[0]
    a = pair.relaxed[top:bottom]
    gain = pair.gain[top:bottom]
    b = map_coordinates(pair.stressed, [at_y, at_x], order=pair.order, prefilter=False, mode="mirror")
    b = (b - pair.offset[top:bottom]) / gain
    inside = (at_y >= 1) & (at_y <= height - 2) & (at_x >= 1) & (at_x <= width - 2)
    used = inside & pair.usable_relaxed[top:bottom]
    if not pair.usable_stressed.all():
        used &= _nearest(pair.usable_stressed, at_y, at_x)
    smooth_a, smooth_b = (gaussian_filter(part, _SMOOTH, truncate=3.5, mode="mirror") for part in (a, b))
    back = _Backwards(u)
    true_a, true_b = back(_stencil(a)), back(_stencil(b))
    soft_a, soft_b = back(_difference(smooth_a)), back(_difference(smooth_b))
    c0, c1 = pair.variance
    level_a = smooth_a + pair.floor_relaxed[top:bottom]
    level_b = smooth_b * gain + pair.offset[top:bottom] + pair.floor_stressed[top:bottom]
    floor = pair.least_variance
    var_a = np.maximum(c0 + c1 * level_a, floor)
    var_b = np.maximum(c0 + c1 * level_b, floor) / gain**2
    residual = b - a
    if pair.bead_width > 0 and final:
        residual += back.strained_spot(0.5 * (a + b), pair.bead_width)
    weight = used / (var_a + var_b)
    lost = 0
    if np.isfinite(reject):
        stray = _stray(residual, weight, used, np.maximum(smooth_a, smooth_b), reject)
        lost = int((stray & used)[first - top : last - top].sum())
        used = used & ~stray
        weight = weight * used
    shrink = _interpolated_variance(at_y, at_x, pair.order)
    keep = slice(first - top, last - top)

    def cut(image: NDArray[np.float32]) -> NDArray[np.float32]:
        return np.ascontiguousarray(image[keep], dtype=np.float32)

    # Across frames the product is free of noise, but where beads do not overlap yet it can be negative, and a step
    # goes the wrong way. Within a frame a step is always downhill, a little short: right on the way, wrong at the end.
    other_a, other_b = (true_b, true_a) if final else (true_a, true_b)
    m = [weight * 0.5 * (soft_a[p] * other_a[q] + soft_b[p] * other_b[q]) for p, q in ((0, 0), (0, 1), (1, 0), (1, 1))]
    info = [m[0], 0.5 * (m[1] + m[2]), m[3]]
    extra = 0.25 * _KERNEL_POWER * used
    scatter = (
        info
        if not final
        else [
            weight * soft_a[0] * soft_b[0] + extra,
            weight * 0.5 * (soft_a[0] * soft_b[1] + soft_b[0] * soft_a[1]),
            weight * soft_a[1] * soft_b[1] + extra,
        ]
    )
    score = [weight * 0.5 * (soft_a[p] + soft_b[p]) * residual for p in (0, 1)]
    pull = [info[0] * u[0] + info[1] * u[1] - score[0], info[1] * u[0] + info[2] * u[1] - score[1]]
    squares = [weight * residual**2, weight * (var_a + shrink * var_b)] if final else [weight, weight]
    return StripInformation(
        information=np.stack([cut(part) for part in info]),
        scatter=np.stack([cut(part) for part in scatter]),
        pull=np.stack([cut(part) for part in pull]),
        squares=np.stack([cut(part) for part in squares]),
        relaxed=cut(smooth_a),
        warped=cut(smooth_b),
        residual=cut(residual),
        units=cut(1 + shrink / gain**2),
        level=cut((level_a + shrink / gain**2 * level_b) / (1 + shrink / gain**2)),
        used=used[keep],
        lost=lost,
    )


class _Backwards:
    """Gradient of the stressed frame from the gradient of the frame brought back: F^-T, F = 1 + grad u."""

    def __init__(self, u: NDArray[np.float32]) -> None:
        self.xx, self.yy = 1 + np.gradient(u[0], axis=1), 1 + np.gradient(u[1], axis=0)
        self.xy, self.yx = np.gradient(u[0], axis=0), np.gradient(u[1], axis=1)
        # A fold (determinant near 0) is no displacement of a gel; the bound keeps the numbers finite until it is gone.
        self.det = np.maximum(self.xx * self.yy - self.xy * self.yx, 0.2)

    def __call__(self, gradient: tuple[NDArray[np.float32], NDArray[np.float32]]) -> list[NDArray[np.float32]]:
        gx, gy = gradient
        return [(self.yy * gx - self.yx * gy) / self.det, (self.xx * gy - self.xy * gx) / self.det]

    def strained_spot(self, mean: NDArray[np.float32], width: float) -> NDArray[np.float32]:
        """What bringing back does to the *image* of a bead, which, unlike the bead, was not strained.

        A round spot of variance s^2 comes back with s^2 (1 - 2 e), e the strain, and the light of one spot divided by
        det F. Seen from the mean of both frames the difference is, to third order in e,
        -(tr e) I - s^2 e_ij d_i d_j I. Left in, it is a noise of its own that photons do not explain.
        """
        xx = correlate1d(mean, _SECOND, axis=1, mode="mirror")
        yy = correlate1d(mean, _SECOND, axis=0, mode="mirror")
        xy = correlate1d(_stencil(mean)[0], _STENCIL, axis=0, mode="mirror")
        exx, eyy, twice = self.xx - 1, self.yy - 1, self.xy + self.yx
        return np.asarray((exx + eyy) * mean + width**2 * (exx * xx + twice * xy + eyy * yy), dtype=np.float32)


def _stencil(image: NDArray[np.float32]) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    return correlate1d(image, _STENCIL, axis=1, mode="mirror"), correlate1d(image, _STENCIL, axis=0, mode="mirror")


def _difference(image: NDArray[np.float32]) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    gx, gy = np.empty_like(image), np.empty_like(image)
    gx[:, 1:-1] = 0.5 * (image[:, 2:] - image[:, :-2])
    gy[1:-1] = 0.5 * (image[2:] - image[:-2])
    gx[:, 0], gx[:, -1], gy[0], gy[-1] = 0, 0, 0, 0
    return gx, gy


def _nearest(mask: NDArray[np.bool_], at_y: NDArray[np.float32], at_x: NDArray[np.float32]) -> NDArray[np.bool_]:
    """True where the four pixels around a place are all usable."""
    y0 = np.clip(np.floor(at_y).astype(np.intp), 0, mask.shape[0] - 2)
    x0 = np.clip(np.floor(at_x).astype(np.intp), 0, mask.shape[1] - 2)
    four = mask[:-1, :-1] & mask[1:, :-1] & mask[:-1, 1:] & mask[1:, 1:]
    return np.asarray(four[y0, x0])


def _stray(
    residual: NDArray[np.float32],
    weight: NDArray[np.float32],
    used: NDArray[np.bool_],
    brighter: NDArray[np.float32],
    reject: float,
) -> NDArray[np.bool_]:
    """Beads that one frame has and the other has not.

    The residual must stand out of the noise, and be half of what is there: a bead that is only half a pixel off leaves
    less than a fifth of itself, and must stay in, because it is the one that tells how to go on.
    """
    mean = gaussian_filter(np.where(used, residual, 0), _SMOOTH, truncate=3.5, mode="mirror")
    # The mean of a Gaussian of s px has 1 / (4 pi s^2) of the variance of white noise.
    noise = np.sqrt(gaussian_filter(used / np.maximum(weight, 1e-30), _SMOOTH, truncate=3.5, mode="mirror"))
    noise /= 2 * np.sqrt(np.pi) * _SMOOTH
    spots = (np.abs(mean) > reject * noise) & (np.abs(mean) > 0.5 * brighter)
    if not spots.any():
        return np.asarray(spots)
    return np.asarray(gaussian_filter(spots.astype(np.float32), 1.5, truncate=2) > 0.02)


def _interpolated_variance(at_y: NDArray[np.float32], at_x: NDArray[np.float32], order: int) -> NDArray[np.float32]:
    """Variance of an interpolated pixel over that of a raw one."""
    table = _variance_table(order)
    factor_y = table[(256 * (at_y - np.floor(at_y))).astype(np.intp)]
    factor_x = table[(256 * (at_x - np.floor(at_x))).astype(np.intp)]
    return np.asarray(factor_y * factor_x, dtype=np.float32)


@cache
def _variance_table(order: int) -> NDArray[np.float32]:
    """Sum of squares of the spline's weights against the fraction of a pixel, in 256 steps."""
    impulse = np.zeros(65)
    impulse[32] = 1
    coefficients = spline_filter1d(impulse, order)
    fractions = np.arange(257) / 256
    places = np.arange(4, 60)[None, :] + fractions[:, None]
    weights = map_coordinates(coefficients, [places], order=order, prefilter=False)
    return np.asarray((weights**2).sum(axis=1), dtype=np.float32)
